"""Stated uncertainties against what repeated measurements scatter by."""

import fit_jobs as jobs
import numpy as np
import pytest
from scipy.signal import lfilter
from stub_engine import simulate as closed_form

from spinfit.fitting.data import Job, Trace
from spinfit.fitting.driver import fit
from spinfit.species import Species, Spin, Width
from spinfit.spectrum import simulate
from spinfit.sweep import Sample, Sweep

TRUE = (2.0021, 2.0058, 2.0091)


def test_true_g_inside_one_standard_uncertainty_in_two_thirds_of_100_traces():
    """Binomial with p = 0.683: 55 to 81 of 100 holds in 99.6 % of campaigns for each component."""
    model = Species(name="r", spins=(Spin(g=TRUE),), width=Width(gaussian=0.3))
    sweep = Sweep(34000.0, (1203.0, 1220.0), points=500)
    clean = simulate((model,), sweep, tolerance=1e-4).signal
    start = Species(name="r", spins=(Spin(g=(2.00215, 2.00570, 2.0090)),), width=Width(gaussian=0.33))
    rng = np.random.default_rng(2024)
    inside = np.zeros(3, dtype=int)
    for _ in range(100):
        signal = clean + float(np.ptp(clean)) / 50 * rng.normal(size=clean.size)
        trace = Trace("t", sweep.fields, signal, np.ones(signal.size, dtype=bool), sweep.frequency)
        outcome = fit(Job((start,), Sample(), (trace,), ("r.g", "r.width.gaussian")))
        assert outcome.quality.converged
        found = [outcome.parameters[f"r.g_{c}"] for c in "xyz"]
        inside += [abs(v.value - true) <= v.uncertainty for v, true in zip(found, TRUE, strict=True)]
    assert np.all((inside >= 55) & (inside <= 81)), inside


@pytest.mark.parametrize(("phi", "count"), [(0.0, 200), (0.6, 200)])
def test_coverage_for_white_and_correlated_noise(phi, count):
    """Pooled over four parameters the share inside one standard uncertainty is 0.683.

    The parameters of one trace are nearly uncorrelated here: standard error 0.0165 for 800 values.
    """
    clean = jobs.clean_signal(jobs.species())
    noise = jobs.level(clean, 60)
    rng = np.random.default_rng(7)
    true = (*jobs.TRUE_G, jobs.TRUE_WIDTH)
    inside, deviations = [], []
    for _ in range(count):
        process = lfilter([np.sqrt(1 - phi**2)], [1, -phi], rng.normal(size=clean.size + 100))[100:]
        outcome = fit(jobs.job(jobs.trace(clean + noise * process)), simulate=closed_form)
        found = [outcome.parameters[n] for n in ("r.g_x", "r.g_y", "r.g_z", "r.width.gaussian")]
        deviation = [(v.value - t) / v.uncertainty for v, t in zip(found, true, strict=True)]
        deviations.append(deviation)
        inside.append([abs(d) <= 1 for d in deviation])
    assert np.mean(inside) == pytest.approx(0.683, abs=0.05)
    assert np.mean(deviations, axis=0) == pytest.approx(0, abs=4 / np.sqrt(count))


def test_axis_shift_is_covered():
    """The field axis is off by a draw from its stated uncertainty, much more than the noise."""
    clean_fields = jobs.FIELDS
    rng = np.random.default_rng(8)
    inside = []
    for _ in range(200):
        shift = 0.02 * rng.normal()
        clean = jobs.clean_signal(jobs.species(), fields=clean_fields + shift)
        signal = clean + jobs.level(clean, 200) * rng.normal(size=clean.size)
        trace = jobs.trace(signal, field_uncertainty=0.02)
        outcome = fit(jobs.job(trace), simulate=closed_form)
        found = outcome.parameters["r.g_z"]
        inside.append(abs(found.value - jobs.TRUE_G[2]) <= found.uncertainty)
    # Standard error of a share of 0.683 in 200 draws is 0.033.
    assert np.mean(inside) == pytest.approx(0.683, abs=0.1)
