"""Profiles, bootstraps and equivalent solutions."""

from dataclasses import replace

import fit_jobs as jobs
import numpy as np
import pytest
from stub_engine import simulate

from spinfit.errors import InputError
from spinfit.fitting.driver import fit
from spinfit.fitting.equivalent import conventional, equivalents, permuted
from spinfit.fitting.resample import bootstrap, profile
from spinfit.fitting.residuals import Problem, full_view
from spinfit.species import Nucleus, Species, Spin, Width
from spinfit.spectrum import simulate as engine
from spinfit.sweep import Sweep


@pytest.fixture(scope="module")
def finished():
    signal, _ = jobs.noisy(51, snr=40)
    job = jobs.job(jobs.trace(signal))
    return job, fit(job, simulate=simulate)


def test_profile_of_a_nearly_linear_parameter_is_the_parabola(finished):
    """Where the model is linear the profile is ((v - best)/u)^2 and its ends are best +- u, +- 2u."""
    job, outcome = finished
    (found,) = profile(job, outcome, ["r.g_x"], simulate=simulate)
    value = outcome.parameters["r.g_x"]
    assert found.rise == pytest.approx(((found.values - value.value) / value.uncertainty_noise) ** 2, abs=0.25)
    for k, (low, high) in enumerate(found.intervals, start=1):
        assert low == pytest.approx(value.value - k * value.uncertainty_noise, abs=0.08 * value.uncertainty_noise)
        assert high == pytest.approx(value.value + k * value.uncertainty_noise, abs=0.08 * value.uncertainty_noise)


def test_profile_takes_groups_and_refuses_what_was_not_varied(finished):
    job, outcome = finished
    assert [p.name for p in profile(job, outcome, ["r.g"], points=3, simulate=simulate)] == ["r.g_x", "r.g_y", "r.g_z"]
    with pytest.raises(InputError, match='"r.amount" was not varied'):
        profile(job, outcome, ["r.amount"], simulate=simulate)


def test_bootstrap_agrees_with_the_covariance(finished):
    """The standard deviation of 200 resamples is known to 5 %; four parameters within 3 of those."""
    job, outcome = finished
    found = bootstrap(job, outcome, 200, simulate=simulate)
    stated = np.array([outcome.parameters[name].uncertainty_noise for name in found.names])
    assert found.failed == 0
    assert found.uncertainty == pytest.approx(stated, rel=0.16)
    again = bootstrap(job, outcome, 5, simulate=simulate)
    assert np.array_equal(again.values, found.values[:5])
    low, high = found.interval().T
    assert np.all(low < high)


@pytest.mark.parametrize(
    ("D", "E"), [(1.0, 0.1), (1.0, 0.5), (-2.0, 0.3), (1.0, -0.9), (0.0, 1.0), (3.0, 1.0), (-1.0, -0.2), (2.0, 5.0)]
)
def test_conventional_setting_is_the_same_tensor(D, E):
    new_D, new_E, axes = conventional(D, E)
    assert 0 <= new_E / new_D <= 1 / 3 + 1e-12
    old = np.array([-D / 3 + E, -D / 3 - E, 2 * D / 3])
    new = np.array([-new_D / 3 + new_E, -new_D / 3 - new_E, 2 * new_D / 3])
    assert new == pytest.approx(old[list(axes)])


def test_renamed_axes_leave_the_spectrum_alone():
    """A rotation by 90 or 120 degrees of a powder is no change: the real engine, every renaming."""
    spin = Spin(S=1.0, g=(2.0, 2.01, 2.03), D=900.0, E=150.0)
    one = Species(name="t", spins=(spin,), width=Width(gaussian=2.0))
    sweep = Sweep(9500.0, (280.0, 400.0), points=300)
    first = engine((one,), sweep, tolerance=1e-3).signal
    for axes in [(1, 0, 2), (2, 0, 1), (2, 1, 0)]:
        other = permuted(one, axes)
        assert engine((other,), sweep, tolerance=1e-3).signal == pytest.approx(first, abs=3e-3 * np.abs(first).max())
    assert permuted(replace(one, spins=(replace(spin, D_tilt=(0.0, 0.1, 0.0)),)), (1, 0, 2)) is None


def test_equivalents_and_their_chi_squared():
    nuclei = (Nucleus(isotope="1H", A=(80.0,)),)
    model = (replace(jobs.species(g=(2.0, 2.02, 2.04)), nuclei=nuclei),)
    signal = jobs.clean_signal(*model)
    signal = signal + jobs.level(signal, 50) * np.random.default_rng(52).normal(size=signal.size)
    job = jobs.job(jobs.trace(signal), model=model, vary=("r.g",))
    problem = Problem(job, simulate)
    view = full_view(job.traces, problem.noises, 1e-3)
    found = equivalents(problem, view, problem.evaluate(problem.start, view))
    assert len(found) == 6
    assert {e.change for e in found} >= {"r: the other sign of A", "r: axes x, y, z become z, y, x"}
    # The closed form sums over the three components, whatever they are called.
    assert [e.chi2_rise for e in found] == pytest.approx([0.0] * 6, abs=1e-6)
