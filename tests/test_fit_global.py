"""Several traces in one job: what they share, what each has of its own, and what each is worth.

The engine is the stand-in with a closed form (`stub_engine`).
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from fit_jobs import FIELDS, TRUE_G, clean_signal, job, species, trace
from stub_engine import simulate

from spinfit.fitting.driver import fit
from spinfit.units import MU_B_OVER_H

NOISES = {"x_band": 0.002, "warm": 0.006, "q_band": 0.004}
Q = 34_000.0
Q_FIELDS = np.linspace(Q / (2.08 * MU_B_OVER_H), Q / (1.98 * MU_B_OVER_H), 900)


def three(seed=4, offset=0.0, only=None):
    """Two frequencies, and one of them at two temperatures; each scaled, sloped and as noisy as it likes."""
    rng = np.random.default_rng(seed)
    made = {
        "x_band": (FIELDS, clean_signal(species(), temperature=10.0), {"temperature": 10.0}),
        "warm": (FIELDS, 0.2 * clean_signal(species(), temperature=290.0), {"temperature": 290.0}),
        "q_band": (Q_FIELDS, clean_signal(species(), fields=Q_FIELDS, frequency=Q), {"frequency": Q}),
    }
    traces = []
    for name, (fields, signal, more) in made.items():
        noisy = signal + NOISES[name] * rng.normal(size=signal.size)
        shift = offset if name == "q_band" else 0.0
        if only is None or name == only:
            traces.append(trace(noisy, fields=fields - shift, name=name, **more))
    return traces


VARY = ("r.g", "r.width.gaussian")


def test_shared_values_are_the_weighted_means_of_separate_fits():
    """Independent measurements: weights add up, 1/u^2 = sum 1/u_i^2, and the mean is the weighted one.

    g and width are nearly uncorrelated here, so that the scalar form holds to a few per cent.
    """
    together = fit(job(*three(), model=(species(width=0.9),), vary=VARY), simulate=simulate)
    assert together.quality.converged
    alone = [fit(job(*three(only=name), model=(species(width=0.9),), vary=VARY), simulate=simulate) for name in NOISES]
    for name in ("r.g_x", "r.g_y", "r.g_z", "r.width.gaussian"):
        weights = np.array([one.parameters[name].uncertainty_noise ** -2 for one in alone])
        values = np.array([one.parameters[name].value for one in alone])
        expected = weights.sum() ** -0.5
        assert together.parameters[name].uncertainty_noise == pytest.approx(expected, rel=0.1)
        assert abs(together.parameters[name].value - weights @ values / weights.sum()) < 0.3 * expected
    for name, g in zip("xyz", TRUE_G, strict=True):
        value = together.parameters[f"r.g_{name}"]
        assert abs(value.value - g) < 3.5 * value.uncertainty
    scales = {curve.trace: curve.scale for curve in together.curves}
    assert scales["warm"] / scales["x_band"] == pytest.approx(0.2, rel=0.05)
    noises = {curve.trace: curve.noise for curve in together.curves}
    assert noises == pytest.approx(NOISES, rel=0.15)


def test_one_trace_may_have_an_axis_of_its_own():
    traces = three(offset=0.25)
    vary = (*VARY, "q_band.field_offset")
    outcome = fit(job(*traces, model=(species(width=0.9),), vary=vary), simulate=simulate)
    offset = outcome.parameters["q_band.field_offset"]
    assert abs(offset.value - 0.25) < 3.5 * offset.uncertainty
    assert offset.uncertainty < 0.01
    for name, g in zip("xyz", TRUE_G, strict=True):
        value = outcome.parameters[f"r.g_{name}"]
        assert abs(value.value - g) < 3.5 * value.uncertainty
    # Held at nothing, the same traces do not fit.
    held = fit(job(*traces, model=(species(width=0.9),), vary=VARY, start="near"), simulate=simulate)
    assert held.quality.chi2_reduced > 3 * outcome.quality.chi2_reduced


def test_a_trace_in_two_groups_has_the_corrections_of_both():
    """Days of 0.3 and -0.2 mT, and 0.1 mT more on the way down: four traces, three free corrections."""
    rng = np.random.default_rng(8)
    traces = []
    for day, zero in (("monday", 0.3), ("tuesday", -0.2)):
        for way, more in (("up", 0.0), ("down", 0.1)):
            signal = clean_signal(species()) + 0.002 * rng.normal(size=FIELDS.size)
            traces.append(trace(signal, fields=FIELDS - zero - more, name=f"{day}_{way}", group=(day, way)))
    vary = ("r.width.gaussian", "monday.field_offset", "tuesday.field_offset", "down.field_offset")
    outcome = fit(job(*traces, vary=vary), simulate=simulate)
    for name, true in (("monday", 0.3), ("tuesday", -0.2), ("down", 0.1)):
        value = outcome.parameters[f"{name}.field_offset"]
        assert abs(value.value - true) < 3.5 * value.uncertainty
        assert value.uncertainty < 0.01


def test_traces_of_one_frequency_share_its_uncertainty_whatever_their_group():
    """g = h nu / (muB B): du/u of g is that of nu, and does not shrink with the number of field axes."""
    traces = [
        trace(clean_signal(species()) + 1e-4 * np.random.default_rng(n).normal(size=FIELDS.size), name=f"t{n}")
        for n in range(4)
    ]
    traces = [replace(one, group=f"day_{n}", frequency_uncertainty=0.5) for n, one in enumerate(traces)]
    outcome = fit(job(*traces, start="near"), simulate=simulate)
    for name in "xyz":
        value = outcome.parameters[f"r.g_{name}"]
        assert value.uncertainty_field == pytest.approx(value.value * 0.5 / traces[0].frequency, rel=0.02)
    # At four frequencies the four days are four readings.
    apart = [replace(one, frequency=one.frequency + n * 1e-3) for n, one in enumerate(traces)]
    separate = fit(job(*apart, start="near"), simulate=simulate)
    ratio = separate.parameters["r.g_x"].uncertainty_field / outcome.parameters["r.g_x"].uncertainty_field
    assert ratio == pytest.approx(0.5, rel=0.02)
