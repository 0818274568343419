"""Variable projection against explicit linear parameters and scipy's own optimisers."""

import math
from dataclasses import replace

import fit_jobs as jobs
import numpy as np
import pytest
from scipy.optimize import curve_fit, minimize
from scipy.special import wofz
from stub_engine import line, simulate

from spinfit.errors import InputError
from spinfit.fitting.residuals import Problem, broadened_view, full_view
from spinfit.fitting.signals import Signals, Stage, narrowest_width
from spinfit.fitting.solve import Goal, bounded_step, descend
from spinfit.units import MU_B_OVER_H


def ready(job):
    problem = Problem(job, simulate)
    return problem, full_view(job.traces, problem.noises, 1e-4)


def explicit(x, g1, g2, g3, width, scale, a, b):
    total = sum(line(x, jobs.FREQUENCY / (g * MU_B_OVER_H), width, 0.0, "derivative") for g in (g1, g2, g3))
    return scale * total + a + b * (x - 335)


@pytest.fixture(scope="module")
def curve_fitted():
    """scipy.optimize.curve_fit with scale and baseline as explicit parameters."""
    signal, _ = jobs.noisy(11)
    start = (*jobs.TRUE_G, jobs.TRUE_WIDTH, 3.0, 0.3, 0.02)
    return signal, *curve_fit(explicit, jobs.FIELDS, signal, p0=start, xtol=1e-14, ftol=1e-14)


def test_projection_equals_explicit_linear_parameters(curve_fitted):
    signal, values, covariance = curve_fitted
    problem, view = ready(jobs.job(jobs.trace(signal)))
    found = descend(problem, view, problem.start, goal=Goal(gain=1e-9))
    sigma = np.sqrt(np.diag(covariance))
    assert found.converged
    assert np.all(np.abs(found.point.free - values[:4]) < 0.02 * sigma[:4])
    assert found.point.scales[0] == pytest.approx(values[4], rel=1e-3)


def test_projected_jacobian_gives_the_covariance_of_the_whole_fit(curve_fitted):
    signal, values, covariance = curve_fitted
    problem, view = ready(jobs.job(jobs.trace(signal)))
    point = problem.evaluate(values[:4], view)
    jacobian = problem.jacobian(point, view, central=True)
    variance = point.chi2 / (view.points - 7)
    sigma = np.sqrt(np.diag(covariance)[:4])
    ours = variance * np.linalg.inv(jacobian.T @ jacobian) / np.outer(sigma, sigma)
    assert ours == pytest.approx(covariance[:4, :4] / np.outer(sigma, sigma), abs=0.005)


def test_gradient_is_that_of_chi_squared():
    """Kaufman's Jacobian has the exact gradient 2 J'r; against finite differences of chi-squared."""
    signal, _ = jobs.noisy(12)
    problem, view = ready(jobs.job(jobs.trace(signal)))
    free = np.array([2.0005, 2.021, 2.0595, 0.85])
    point = problem.evaluate(free, view)
    gradient = 2 * problem.jacobian(point, view, central=True).T @ point.residual
    for k, step in enumerate((1e-6, 1e-6, 1e-6, 1e-4)):
        up, down = free.copy(), free.copy()
        up[k] += step
        down[k] -= step
        slope = (problem.evaluate(up, view).chi2 - problem.evaluate(down, view).chi2) / (2 * step)
        assert gradient[k] == pytest.approx(slope, rel=5e-3)


@pytest.mark.parametrize(
    ("name", "step"), [("t.field_offset", 1e-4), ("t.field_scale", 1e-7), ("t.phase", 1e-5), ("b.amount", 1e-5)]
)
def test_columns_of_corrections(name, step):
    """Shift and phase columns come from the same spectrum; against plain differences of the residual."""
    two = (jobs.species(), jobs.species(g=(2.01,), name="b", amount=0.4))
    signal = jobs.clean_signal(*two, phase=0.2)
    problem, view = ready(jobs.job(jobs.trace(signal, phase=0.2), model=two, vary=[name]))
    point = problem.evaluate(problem.start, view)
    before = problem.signals.simulations
    column = problem.jacobian(point, view)[:, 0]
    assert problem.signals.simulations - before <= (0 if name == "b.amount" else 2)
    up = problem.evaluate(problem.start + step, view).residual
    down = problem.evaluate(problem.start - step, view).residual
    assert column == pytest.approx((up - down) / (2 * step), abs=0.01 * np.abs(column).max())


def test_unchanged_species_are_not_simulated_again():
    two = (jobs.species(), jobs.species(g=(2.01,), name="b"))
    problem, view = ready(jobs.job(jobs.trace(jobs.clean_signal(*two)), model=two, vary=["b.width.gaussian"]))
    point = problem.evaluate(problem.start, view)
    assert problem.signals.simulations == 2
    problem.evaluate(problem.start * 1.01, view)
    assert problem.signals.simulations == 3
    problem.evaluate(point.free, view)
    assert problem.signals.simulations == 3


def test_background_and_baseline_are_solved():
    background = np.exp(-(((jobs.FIELDS - 330) / 8) ** 2))
    signal = jobs.clean_signal(jobs.species()) + 5 * background + 1e-3 * (jobs.FIELDS - 335) ** 2
    job = jobs.job(jobs.trace(signal, background=background, baseline=2))
    problem, view = ready(job)
    assert view.linear == 1 + 1 + 3
    assert problem.evaluate(problem.start, view).chi2 / view.points < 1e-6 * (np.ptp(signal) / problem.noises[0]) ** 2


def test_bounded_equals_unbounded_when_limits_are_inactive():
    signal, _ = jobs.noisy(13)
    limits = {"r.g_x": (1.9, 2.1), "r.g_y": (1.95, 2.2), "r.g_z": (2.0, 2.3), "r.width.gaussian": (0.1, 3.0)}
    model = (jobs.species(g=(2.001, 2.021, 2.059), width=0.7),)
    ends = []
    for more in ({}, {"limits": limits}):
        problem, view = ready(jobs.job(jobs.trace(signal), model=model, **more))
        ends.append(descend(problem, view, problem.start, goal=Goal(gain=1e-9)).point.free)
    jacobian = problem.jacobian(problem.evaluate(ends[0], view), view, central=True)
    sigma = np.sqrt(np.diag(np.linalg.inv(jacobian.T @ jacobian)))
    assert np.all(np.abs(ends[0] - ends[1]) < 0.02 * sigma)


def test_active_limit_is_reached_exactly():
    signal, _ = jobs.noisy(14)
    job = jobs.job(jobs.trace(signal), limits={"r.width.gaussian": (0.5, 0.75)}, model=(jobs.species(width=0.7),))
    problem, view = ready(job)
    found = descend(problem, view, problem.start)
    assert found.converged
    assert found.point.free[3] == 0.75


def test_bounded_step_against_a_general_minimiser():
    """scipy's L-BFGS-B on the same quadratic, with columns that are nearly alike."""
    rng = np.random.default_rng(15)
    jacobian, residual = rng.normal(size=(40, 4)), rng.normal(size=40)
    jacobian[:, 1] = jacobian[:, 0] + 0.05 * jacobian[:, 1]
    low, high = np.full(4, -0.05), np.full(4, 0.07)
    step, gain = bounded_step(residual, jacobian, low, high)
    exact = minimize(
        lambda x: float(np.sum((residual + jacobian @ x) ** 2)), np.zeros(4), bounds=list(zip(low, high, strict=True))
    )
    assert np.all((step >= low) & (step <= high))
    assert gain == pytest.approx(residual @ residual - exact.fun, rel=1e-5)
    free, _ = bounded_step(residual, jacobian, np.full(4, -math.inf), np.full(4, math.inf))
    assert free == pytest.approx(np.linalg.lstsq(jacobian, -residual, rcond=None)[0])
    held, _ = bounded_step(residual, jacobian, np.array([0.0, -9, -9, -9]), np.array([0.0, 9, 9, 9]))
    assert held[0] == pytest.approx(0, abs=1e-9)


def test_broadened_trace_is_the_broadened_model():
    """A Gaussian convolved with a Gaussian is one of the summed variances."""
    signal = jobs.clean_signal(jobs.species())
    problem = Problem(jobs.job(jobs.trace(signal)), simulate)
    view = broadened_view(problem.job.traces, problem.noises, 1.5, 1e-2)
    wide = jobs.clean_signal(jobs.species(width=math.hypot(0.8, 1.5)), fields=view.seen[0].field)
    assert view.seen[0].signal * view.seen[0].noise == pytest.approx(wide, abs=2e-3 * np.ptp(wide))
    assert view.points < 200
    point = problem.evaluate(problem.start, view)
    assert point.chi2 < 1e-5 * sum(seen.rest @ seen.rest for seen in view.seen)


def test_traces_weighted_by_their_noise_share_one_model():
    signal, _ = jobs.noisy(16, snr=200)
    other, _ = jobs.noisy(17, snr=20, frequency=9500.0)
    traces = (jobs.trace(signal), jobs.trace(10 * other, name="u", frequency=9500.0))
    problem, view = ready(jobs.job(*traces))
    assert problem.noises[1] / problem.noises[0] == pytest.approx(100, rel=0.1)
    found = descend(problem, view, problem.start)
    assert found.point.scales[1] == pytest.approx(10 * found.point.scales[0], rel=0.05)
    assert found.point.chi2 / view.points == pytest.approx(1, abs=0.15)


def test_limits_that_exclude_the_start_or_are_swapped():
    trace = jobs.trace(jobs.clean_signal(jobs.species()))
    with pytest.raises(InputError, match=r"fit.limits.r.g_x: r.g_x starts at 2, outside its limits 2.1 to 2.2"):
        Problem(jobs.job(trace, limits={"r.g_x": (2.1, 2.2)}), simulate)
    with pytest.raises(InputError, match="not below"):
        Problem(jobs.job(trace, limits={"r.g_x": (2.1, 1.9)}), simulate)


def test_narrowest_width_of_a_voigt_line():
    """Peak to peak of the Voigt derivative, from scipy.special.wofz on a fine axis, within 2 %."""
    gaussian, lorentzian = 0.5, 0.3
    sigma, gamma = gaussian / 2, lorentzian * math.sqrt(3) / 2
    x = np.linspace(-2, 2, 40001)
    derivative = np.gradient(wofz((x + 1j * gamma) / (sigma * math.sqrt(2))).real, x)
    exact = abs(x[derivative.argmax()] - x[derivative.argmin()])
    one = jobs.species()
    one = replace(one, width=replace(one.width, gaussian=gaussian, lorentzian=lorentzian))
    assert narrowest_width((one,)) == pytest.approx(exact, rel=0.02)


def test_memory_keeps_stages_apart():
    signals = Signals(simulate)
    trace, one, sample = jobs.trace(jobs.FIELDS), jobs.species(), jobs.job().sample
    sharp = signals.part(one, trace, sample, jobs.FIELDS, Stage(0.0, 1e-4))
    wide = signals.part(one, trace, sample, jobs.FIELDS, Stage(2.0, 1e-4))
    assert signals.simulations == 2
    assert np.ptp(wide) < 0.5 * np.ptp(sharp)
