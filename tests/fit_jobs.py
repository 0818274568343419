"""Jobs for the tests of the fit, with traces from the stand-in engine."""

from __future__ import annotations

import numpy as np
from stub_engine import simulate

from spinfit.fitting.data import Job, Trace
from spinfit.species import Species, Spin, Width
from spinfit.sweep import Sample, Sweep

FREQUENCY = 9400.0
FIELDS = np.linspace(320.0, 350.0, 600)
TRUE_G = (2.00, 2.02, 2.06)
TRUE_WIDTH = 0.8
SCALE = 3.0


def species(g=TRUE_G, width=TRUE_WIDTH, name="r", amount=1.0, **spin) -> Species:
    return Species(name=name, spins=(Spin(g=g, **spin),), width=Width(gaussian=width), amount=amount)


def clean_signal(*model: Species, fields=FIELDS, frequency=FREQUENCY, **conditions) -> np.ndarray:
    """Scaled signal with a sloping baseline."""
    sweep = Sweep(frequency, (float(fields[0]), float(fields[-1])), **conditions)
    return SCALE * simulate(model, sweep, fields=fields).signal + 0.3 + 0.02 * (fields - 335)


def level(signal: np.ndarray, snr: float) -> float:
    """Noise for a signal-to-noise ratio, peak to peak of the line without the baseline."""
    return float(np.ptp(signal - 0.3 - 0.02 * (FIELDS - 335))) / snr


def trace(signal: np.ndarray, fields=FIELDS, name="t", **more) -> Trace:
    more.setdefault("frequency", FREQUENCY)
    return Trace(name, fields, signal, np.ones(fields.size, dtype=bool), **more)


MODEL = (species(),)


def job(*traces: Trace, model=MODEL, vary=("r.g", "r.width.gaussian"), **more) -> Job:
    return Job(tuple(model), Sample(), traces, tuple(vary), **more)


def noisy(seed: int, snr: float = 60.0, **conditions) -> tuple[np.ndarray, float]:
    signal = clean_signal(species(), **conditions)
    noise = level(signal, snr)
    return signal + noise * np.random.default_rng(seed).normal(size=signal.size), noise
