"""A made-up outcome with everything in it, for the tests of what is reported."""

from __future__ import annotations

import numpy as np

from spinfit.fitting.outcome import Curves, Note, Outcome, Quality, Value


def derivative(field, centre, sigma):
    x = (field - centre) / sigma
    return -x * np.exp(0.5 - 0.5 * x**2)


def curves(trace="kiln_07", *, species=2, points=801, seed=0):
    field = np.linspace(260.0, 360.0, points)
    parts = {"cu": 8000 * derivative(field, 330, 3) + 2000 * derivative(field, 290, 4)}
    if species > 1:
        parts["radical"] = 3000 * derivative(field, 335, 0.5)
    baseline = 300 + 2 * (field - 300)
    fitted = sum(parts.values()) + baseline
    measured = fitted + np.random.default_rng(seed).normal(0, 80, points)
    used = (field < 340) | (field > 345)
    return Curves(
        trace, 9432.1, field, measured, fitted, measured - fitted, baseline, used, parts, noise=80.0, scale=1.5
    )


def outcome(*traces, **changes):
    values = {
        "cu.g_perp": Value(2.04123, 0.00032, 0.0001, 0.0003, varied=True, start=2.05),
        "cu.g_par": Value(2.262, 0.0015, 0.0014, 0.0004, varied=True, start=2.25),
        "cu.63Cu.A_perp": Value(-35.2, 1.2, 1.2, 0.0, unit="MHz", varied=True, start=-30.0),
        "cu.63Cu.A_par": Value(-540.3, 2.3, 2.3, 0.1, unit="MHz", varied=True, start=-500.0),
        "cu.width.gaussian": Value(0.8, None, unit="mT", varied=True, at_limit=True, start=1.0),
        "cu.width.lorentzian": Value(0.8, 0.01, 0.01, 0.0, unit="mT", tied=True, start=1.0),
        "cu.amount": Value(1.0),
        "radical.g": Value(2.0036),
        "radical.amount": Value(0.1, 0.01, 0.01, 0.0, varied=True, start=0.2),
        "kiln_07.field_offset": Value(0.0, unit="mT"),
    }
    settings = {
        "name": "kiln-07",
        "parameters": values,
        "quality": Quality(True, True, 1.02, 80.0, 760, 11, 123.4, 150.0),
        "correlation_names": ("cu.g_perp", "cu.63Cu.A_par"),
        "correlation_matrix": np.array([[1.0, -0.95], [-0.95, 1.0]]),
        "warnings": (Note("at_limit", "cu.width.gaussian ends at its lower limit of 0.8 mT."),),
        "curves": traces or (curves(),),
        "fractions": {"cu": Value(0.909, 0.01), "radical": Value(0.091, 0.01)},
        "provenance": {"input": {"kiln_07": {"sha256": "ab" * 32}}, "job": '[[trace]]\nfile = "kiln-07.csv"\n'},
        "engine": {"tolerance": 1e-4},
        "message": "nothing left to gain",
        "seconds": 1.25,
    }
    return Outcome(**(settings | changes))
