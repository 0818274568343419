"""Other signs and axes than a search from nowhere has come to."""

from __future__ import annotations

import numpy as np
import pytest

from spinfit.fitting.data import Job, Trace
from spinfit.fitting.driver import fit
from spinfit.fitting.other_signs import others
from spinfit.fitting.residuals import Problem
from spinfit.species import Nucleus, Species, Spin, Width
from spinfit.spectrum import simulate
from spinfit.sweep import Sample, Sweep


def _job(model: Species, truth: Species, sweep: Sweep, vary: tuple[str, ...], noise: float, **how: object) -> Job:
    signal = simulate(truth, sweep, tolerance=1e-4).signal
    signal = signal + noise * np.abs(signal).max() * np.random.default_rng(5).normal(size=sweep.points)
    used = np.ones(sweep.points, dtype=bool)
    trace = Trace("trace", sweep.fields, signal, used, sweep.frequency, temperature=sweep.temperature)
    return Job((model,), Sample(), (trace,), vary, **how)


def _copper(A: tuple[float, ...]) -> Species:
    nucleus = Nucleus(isotope="63Cu", A=A)
    return Species("cu", (Spin(g=(2.04, 2.09, 2.28)),), (nucleus,), width=Width(gaussian=1.0))


SWEEP = Sweep(9500.0, (270.0, 345.0), points=700)


def test_signs_one_by_one_and_together_and_every_order_of_axes() -> None:
    model = _copper((-30.0, 80.0, 500.0))
    problem = Problem(_job(model, model, SWEEP, ("cu.g", "cu.63Cu.A"), 0.01), simulate)
    A = [k for k, name in enumerate(problem.names) if ".A_" in name]
    found = {tuple(free[A]) for free in others(problem, problem.start)}
    signs = {(30, 80, 500), (-30, -80, 500), (-30, 80, -500), (30, -80, -500)}
    orders = {(-30, 500, 80), (80, -30, 500), (80, 500, -30), (500, -30, 80), (500, 80, -30)}
    assert found == signs | orders


def test_D_and_E_change_together_and_limits_hold() -> None:
    model = Species("t", (Spin(S=1.0, g=(2.0,), D=900.0, E=100.0),), width=Width(gaussian=2.0))
    sweep = Sweep(9500.0, (250.0, 430.0), points=300)
    problem = Problem(_job(model, model, sweep, ("t.g", "t.D", "t.E"), 0.01), simulate)
    assert {tuple(free[1:]) for free in others(problem, problem.start)} == {(-900, 100), (900, -100), (-900, -100)}
    limited = _job(model, model, sweep, ("t.g", "t.D", "t.E"), 0.01, limits={"t.D": (0.0, 3000.0)})
    problem = Problem(limited, simulate)
    assert {tuple(free[1:]) for free in others(problem, problem.start)} == {(900, -100)}


def test_an_automatic_start_finds_axes_and_signs_of_a_hyperfine_tensor() -> None:
    start, truth = _copper((90.0, 30.0, 500.0)), _copper((30.0, 90.0, 500.0))
    outcome = fit(_job(start, truth, SWEEP, ("cu.g", "cu.63Cu.A", "cu.width.gaussian"), 0.003, start="auto"))
    assert outcome.quality.chi2_reduced == pytest.approx(1, abs=0.2)
    found = outcome.parameters
    # Only relative signs show in a powder; x and y, of g and A alike, may have traded names.
    order = "xyz" if found["cu.g_x"].value < found["cu.g_y"].value else "yxz"
    sign = np.sign(found["cu.63Cu.A_z"].value)
    for axis, g, a in zip(order, (2.04, 2.09, 2.28), (30.0, 90.0, 500.0), strict=True):
        assert abs(found[f"cu.g_{axis}"].value - g) < 4 * found[f"cu.g_{axis}"].uncertainty
        assert abs(sign * found[f"cu.63Cu.A_{axis}"].value - a) < 4 * found[f"cu.63Cu.A_{axis}"].uncertainty


def test_an_automatic_start_finds_the_sign_of_D_where_temperature_tells() -> None:
    def model(D: float) -> Species:
        return Species("t", (Spin(S=1.0, g=(2.0,), D=D, E=D / 10),), width=Width(gaussian=2.0))

    # Levels 28 GHz, 1.3 K, apart at 4 K: their populations differ by tens of per cent.
    sweep = Sweep(9500.0, (250.0, 430.0), points=400, temperature=4.0)
    vary = ("t.g", "t.D", "t.E", "t.width.gaussian")
    outcome = fit(_job(model(900.0), model(-1000.0), sweep, vary, 0.01, start="auto"))
    assert outcome.quality.chi2_reduced == pytest.approx(1, abs=0.2)
    assert outcome.parameters["t.D"].value == pytest.approx(-1000.0, abs=3)
