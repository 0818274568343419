"""Second derivatives of chi-squared at its minimum, where features stand little above the noise."""

import fit_jobs as jobs
import numpy as np
import pytest
from stub_engine import simulate

from spinfit.fitting import uncertainty
from spinfit.fitting.bending import bendings, stiffened
from spinfit.fitting.driver import fit
from spinfit.fitting.residuals import Problem, full_view
from spinfit.fitting.solve import Goal, descend

ONE_LINE = (jobs.species(g=(2.02,)),)


def at_minimum(seed, snr, vary=("r.g",)):
    """Problem, view, and the minimum of chi-squared for a line with noise, with the Jacobian there."""
    clean = jobs.clean_signal(*ONE_LINE)
    noise = jobs.level(clean, snr)
    signal = clean + noise * np.random.default_rng(seed).normal(size=clean.size)
    job = jobs.job(jobs.trace(signal), model=ONE_LINE, vary=vary)
    problem = Problem(job, simulate)
    view = full_view(job.traces, (noise,), 1e-4)
    point = descend(problem, view, problem.start, goal=Goal(gain=1e-8)).point
    return problem, view, point, problem.jacobian(point, view, central=True)


def test_against_second_differences_of_chi_squared():
    """Of one parameter: half the second difference over J'J, within what the fourth derivative makes of the step."""
    seen = []
    for seed in range(6):
        problem, view, point, jacobian = at_minimum(seed, 1.5)
        inverse = np.linalg.inv(jacobian.T @ jacobian)
        u = np.sqrt(np.diag(inverse))
        found = bendings(problem, view, point, jacobian, inverse, u)
        sides = [problem.evaluate(point.free + way * u, view).chi2 for way in (1, -1)]
        ratio = sum(sides) / 2 - point.chi2
        seen.append(found[0])
        assert found[0] == pytest.approx(min(ratio, np.sqrt(ratio)), abs=0.1)
    assert np.ptp(seen) > 0.2


def test_strong_lines_have_the_curvature_that_the_jacobian_says():
    problem, view, point, jacobian = at_minimum(7, 60.0, vary=("r.g", "r.width.gaussian"))
    inverse = np.linalg.inv(jacobian.T @ jacobian)
    found = bendings(problem, view, point, jacobian, inverse, np.sqrt(np.diag(inverse)))
    assert np.array_equal(found, np.ones(2))


def test_a_flattened_minimum_widens_the_uncertainty(monkeypatch):
    """Against fits that take J'J as it is: of one parameter exactly by the ratio; the value itself stays."""
    factors = []

    def recorded(*arguments):
        factors.append(bendings(*arguments))
        return factors[-1]

    clean = jobs.clean_signal(*ONE_LINE)
    for seed in range(4):
        signal = clean + jobs.level(clean, 1.5) * np.random.default_rng(seed).normal(size=clean.size)
        job = jobs.job(jobs.trace(signal), model=ONE_LINE, vary=("r.g",), start="near")
        found = []
        for of in (recorded, lambda problem, *rest: np.ones(1)):
            monkeypatch.setattr(uncertainty, "bendings", of)
            found.append(fit(job, simulate=simulate).parameters["r.g"])
        bent, plain = found
        assert bent.value == plain.value
        assert bent.uncertainty_noise == pytest.approx(plain.uncertainty_noise / factors[-1][0], rel=1e-9)
    assert min(factors) < 0.9


def test_the_response_is_that_of_the_stiffer_normal_matrix():
    """(J'J + S)^-1 J' with S such that each parameter by itself is as stiff as asked, whatever the others do."""
    jacobian = np.random.default_rng(3).normal(size=(40, 3)) @ np.array([[1, 0.6, 0], [0, 1, 0.3], [0, 0, 2.0]])
    response = np.linalg.pinv(jacobian)
    stiffness = np.array([0.5, 1.0, 1.4])
    extra = np.diag((stiffness - 1) / np.diag(np.linalg.inv(jacobian.T @ jacobian)))
    expected = np.linalg.solve(jacobian.T @ jacobian + extra, jacobian.T)
    assert stiffened(response, stiffness) == pytest.approx(expected, rel=1e-9, abs=1e-12)
    alone = stiffened(response, np.array([0.5, 1.0, 1.0]))
    assert alone[0] @ alone[0] == pytest.approx(4 * (response[0] @ response[0]), rel=0.1)


def test_parameters_that_hang_together_stay_at_a_minimum():
    """Two almost equal columns, both flattened: the normal matrix stays positive, so that no variance is negative."""
    rng = np.random.default_rng(4)
    common = rng.normal(size=50)
    jacobian = np.column_stack((common, common + 0.05 * rng.normal(size=50)))
    response = np.linalg.pinv(jacobian)
    found = stiffened(response, np.array([0.2, 0.2]))
    normal = np.linalg.inv(found @ jacobian) @ np.linalg.inv(response @ response.T)
    assert np.linalg.eigvalsh((normal + normal.T) / 2).min() >= 0
    assert np.all(np.sum(found**2, axis=1) >= 0.99 * np.sum(response**2, axis=1))
