"""Rough starts: integrated traces, draws in pairs, and a few fits of the long campaign."""

from __future__ import annotations

import importlib.util
import sys
from dataclasses import replace
from pathlib import Path
from types import ModuleType

import numpy as np
import pytest
import scipy.integrate
from fit_jobs import FIELDS, TRUE_G, clean_signal, job, noisy, species, trace
from stub_engine import simulate as stub

from spinfit.fitting.data import Job, Trace
from spinfit.fitting.driver import fit
from spinfit.fitting.residuals import Problem
from spinfit.fitting.search import _stretch
from spinfit.fitting.wide import Wide, integrated
from spinfit.species import Species, Spin, Width
from spinfit.spectrum import simulate as engine
from spinfit.sweep import Sample, Sweep

CAMPAIGN = Path(__file__).resolve().parents[1] / "scripts" / "campaign_starts.py"


@pytest.fixture(scope="module")
def campaign() -> ModuleType:
    spec = importlib.util.spec_from_file_location("campaign_starts", CAMPAIGN)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    sys.modules["campaign_starts"] = module
    spec.loader.exec_module(module)
    return module


def test_integrated_trace_is_the_absorption() -> None:
    one = replace(trace(clean_signal(species())), baseline=1)
    summed = integrated(one)
    assert (summed.detect, summed.baseline) == ("absorption", 2)
    assert summed.signal == pytest.approx(scipy.integrate.cumulative_trapezoid(one.signal, FIELDS, initial=0), rel=1e-9)
    # Less the baseline, which is the integral of a straight line, it is the stand-in's absorption.
    x = FIELDS - 335
    parabola = 0.3 * x + 0.01 * x**2
    absorption = clean_signal(species(), detect="absorption") - 0.3 - 0.02 * x
    assert np.ptp(summed.signal - parabola - absorption) < 1e-2 * np.ptp(absorption)


def test_integrated_trace_bridges_points_that_are_not_used() -> None:
    one = trace(clean_signal(species()))
    used = np.ones(FIELDS.size, dtype=bool)
    used[300:303] = False
    bad = one.signal.copy()
    bad[300:303] += 1e3
    a, b = (integrated(replace(one, signal=s, used=used)).signal for s in (one.signal, bad))
    assert a == pytest.approx(b)


def test_absorptions_are_left_alone() -> None:
    one = trace(clean_signal(species(), detect="absorption"), detect="absorption", baseline=None)
    assert integrated(one).baseline is None
    assert np.array_equal(integrated(one).signal, one.signal)


def test_draws_in_pairs_leave_the_rest_alone() -> None:
    signal, _ = noisy(1)
    problem = Problem(job(trace(signal)), stub)
    wide = Wide(problem, problem.start)
    found = wide.around(problem.start)
    assert found
    for free in found:
        assert 1 <= np.count_nonzero(free != problem.start) <= 2
        assert free[-1] == problem.start[-1]  # the width moves no line


def test_a_stretch_of_larger_residuals_stands_out() -> None:
    rng = np.random.default_rng(4)
    noise = rng.normal(size=1000)
    assert _stretch(noise, 10.0) < 5
    noise[400:520] *= 1.8
    assert _stretch(noise, 10.0) > 5


def test_far_start_of_three_lines() -> None:
    """Each g off by up to 0.04, several times the lines' distances from where they are."""
    signal, _ = noisy(1)
    outcome = fit(job(trace(signal), model=(species(g=(1.97, 2.05, 2.03), width=1.1),)), simulate=stub)
    found = np.sort([outcome.parameters[f"r.g_{axis}"].value for axis in "xyz"])
    assert found == pytest.approx(np.sort(TRUE_G), abs=1e-4)


@pytest.mark.parametrize(("name", "number"), [("rhombic", 3), ("quartet", 0), ("copper", 2), ("two", 1)])
def test_wide_starts_reach_the_minimum_of_the_truth(campaign: ModuleType, name: str, number: int) -> None:
    """g off by up to 0.15, D and A by up to a factor of 2 (see the campaign), signal to noise 30."""
    assert campaign.tried(name, "given", number).ratio < 1 + campaign.SAME


@pytest.mark.parametrize("seed", [0, 1, 2])
def test_axes_keep_the_names_of_the_start_under_a_misfit(seed: int) -> None:
    # A Gaussian fitted to what is half a Lorentzian never reaches the noise; g with its axes renamed fits as well.
    truth = Species("r", (Spin(g=(2.0065, 2.0042, 2.0022)),), width=Width(gaussian=0.3, lorentzian=0.1))
    sweep = Sweep(9500.0, (330.0, 345.0), 512)
    signal = engine(truth, sweep).signal
    noise = np.random.default_rng(seed).normal(size=sweep.points) * np.abs(signal).max() / 100
    trace = Trace("t", sweep.fields, signal + noise, np.ones(sweep.points, dtype=bool), frequency=9500.0)
    start = Species("r", (Spin(g=(2.0075, 2.004, 2.002)),), width=Width(gaussian=0.4))
    outcome = fit(Job((start,), Sample(), (trace,), ("r.g", "r.width.gaussian")))
    assert outcome.quality.chi2_reduced > 1.2
    g = [outcome.parameters[f"r.g_{axis}"].value for axis in "xyz"]
    assert g == sorted(g, reverse=True)


@pytest.mark.parametrize(("gaussian", "seed"), [(0.325, 2), (0.3138, 3)])
def test_axes_keep_the_names_of_the_start_in_a_plain_fit(gaussian: float, seed: int) -> None:
    # A step across g_x = g_y costs nothing in a powder; the names went with it.
    truth = Species("r", (Spin(g=(2.0061, 2.0043, 2.0021)),), width=Width(gaussian=gaussian))
    sweep = Sweep(9432.1, (332.0, 341.0), 600)
    signal = engine(truth, sweep).signal
    signal = signal / np.abs(signal).max() + np.random.default_rng(seed).normal(0, 0.02, sweep.points)
    trace = Trace("t", sweep.fields, signal, np.ones(sweep.points, dtype=bool), frequency=9432.1)
    start = Species("r", (Spin(g=(2.007, 2.004, 2.002)),), width=Width(gaussian=0.5))
    found = fit(Job((start,), Sample(), (trace,), ("r.g", "r.width.gaussian"))).parameters
    for axis, true in zip("xyz", truth.spins[0].g, strict=True):
        # Nothing is uncertain here but the noise.
        assert abs(found[f"r.g_{axis}"].value - true) < 4 * found[f"r.g_{axis}"].uncertainty
    # A tie knows one of them by its name: nothing is renamed.
    tied = Job((start,), Sample(), (trace,), ("r.g_x", "r.g_y", "r.width.gaussian"), ties={"r.g_z": "4.01 - r.g_x"})
    assert fit(tied).parameters["r.g_z"].tied
