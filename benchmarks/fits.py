"""Derivatives and whole fits, as multiples of one simulation of the same system at the same tolerance.

"derivatives" is a spectrum with its whole Jacobian; "fit" begins at a wide start and ends with
uncertainties; "by differences" is the same fit with an engine that knows no derivatives.
"""

from __future__ import annotations

import statistics
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from functools import partial

import numpy as np

from benchmarks.engine import CASES, WAVENUMBER
from benchmarks.measure import Row, Timing, timed, unit
from spinfit.derivatives import signal_changes
from spinfit.fitting.data import Job, Trace
from spinfit.fitting.driver import engine_tolerance, fit
from spinfit.fitting.parameters import Binding
from spinfit.fitting.residuals import Problem
from spinfit.species import Nucleus, Species, Spin, Width
from spinfit.spectrum import Spectrum, simulate
from spinfit.sweep import Sample, Sweep

DIFFERENTIATED = {
    "A": ("g_x", "g_y", "g_z", "width.gaussian"),
    "C": ("g_x", "g_y", "g_z", "D", "E", "width.gaussian"),
    "F": ("g_x", "g_y", "g_z", "D", "E", "width.gaussian"),
    "G": ("g_perp", "g_par", "D", "width.gaussian"),
    "E": ("g_perp", "g_par", "D", "55Mn.A_perp", "55Mn.A_par", "width.gaussian"),
}
"""Parameters of the systems of the engine's benchmark; their tensors are given as many numbers as here."""
REPEATS = 5


@dataclass(frozen=True)
class Fit:
    """A fit: the truth, how it was measured, and a wide start."""

    name: str
    truth: Species
    sweep: Sweep
    start: Species
    vary: tuple[str, ...]
    signal_to_noise: float
    goal: float


def _one(name: str, spin: Spin, width: float, *nuclei: Nucleus) -> Species:
    return Species(name=name, spins=(spin,), nuclei=nuclei, width=Width(gaussian=width))


def _iron(d: float, e: float, g: tuple[float, ...], width: float) -> Species:
    return _one("s", Spin(S=2.5, g=g, D=d * WAVENUMBER, E=e * WAVENUMBER), width)


def _copper(g: tuple[float, ...], a: tuple[float, ...], width: float, lorentzian: float) -> Species:
    one = _one("s", Spin(g=g), width, Nucleus(element="Cu", A=a))
    return replace(one, width=Width(gaussian=width, lorentzian=lorentzian))


FITS = (
    Fit(
        "S=1/2, rhombic, 6 parameters",
        replace(_one("s", Spin(g=(2.00, 2.03, 2.09)), 1.0), width=Width(gaussian=1.0, lorentzian=0.4)),
        Sweep(9500.0, (305.0, 350.0), 1201),
        replace(_one("s", Spin(g=(1.98, 2.05, 2.12)), 2.0), width=Width(gaussian=2.0, lorentzian=0.8)),
        ("s.g", "s.width.gaussian", "s.width.lorentzian", "t.phase"),
        60.0,
        30,
    ),
    Fit(
        "Cu with natural isotopes, 9 parameters, 1601 points",
        _copper((2.045, 2.065, 2.31), (-40.0, -60.0, -480.0), 1.2, 0.3),
        Sweep(9500.0, (255.0, 345.0), 1601),
        _copper((2.035, 2.08, 2.33), (-60.0, -60.0, -430.0), 2.0, 0.5),
        ("s.g", "s.Cu.A", "s.width.gaussian", "s.width.lorentzian", "t.phase"),
        60.0,
        60,
    ),
    Fit(
        "S=5/2, 6 parameters",
        _iron(0.03, 0.006, (2.00, 2.00, 2.01), 2.5),
        Sweep(9500.0, (50.0, 600.0), 1201),
        _iron(0.036, 0.005, (1.99, 2.01, 2.01), 4.0),
        ("s.g", "s.D", "s.E", "s.width.gaussian"),
        60.0,
        50,
    ),
)


def _differentiated(name: str) -> tuple[Species, Sweep]:
    case = next(c for c in CASES if c.name.startswith(f"{name}:"))
    spin = case.species.spins[0]
    parts = sum(one.startswith("g_") for one in DIFFERENTIATED[name])
    g = spin.g if len(spin.g) == parts else spin.g * parts
    nuclei = tuple(replace(n, A=n.A * 2 if len(n.A) == 1 else n.A) for n in case.species.nuclei)
    return replace(case.species, spins=(replace(spin, g=g),), nuclei=nuclei), case.sweep


def _derivatives(name: str) -> Row:
    species, sweep = _differentiated(name)
    binding = Binding((species,), Sample())
    parameters = [binding.parameters[f"s.{one}"] for one in DIFFERENTIATED[name]]
    moved = [binding.apply({p.name: p.value + 1e-4 * p.scale})[:2] for p in parameters]
    moved = [(one[0], sample) for one, sample in moved]

    def whole() -> None:
        signal_changes(simulate(species, sweep, keep=True).kept[0], moved)

    ratio = _ratio(whole, lambda: simulate(species, sweep))
    allowed = 1 + 0.35 * len(parameters)
    note = f"{ratio:.2f} simulations for {len(parameters)} parameters (goal {allowed:.2f})"
    return Row(f"derivatives of {name}", timed(whole, repeats=3), note=note)


def _ratio(one: Callable[[], object], other: Callable[[], object]) -> float:
    """Return how many times longer one call takes than another, by turns."""
    one(), other()
    return statistics.median(_seconds(one) / _seconds(other) for _ in range(REPEATS))


def _seconds(function: Callable[[], object]) -> float:
    begun = time.perf_counter()
    function()
    return time.perf_counter() - begun


def _plain_engine(species, sweep, sample=None, *, tolerance=1e-3, fields=None, angle=None) -> Spectrum:
    """The engine without derivatives."""
    return simulate(species, sweep, sample, tolerance=tolerance, fields=fields, angle=angle)


def _job(case: Fit) -> Job:
    fields = case.sweep.fields
    signal = simulate(case.truth, case.sweep, tolerance=1e-4).signal
    noise = np.random.default_rng(11).normal(size=fields.size) * np.ptp(signal) / case.signal_to_noise
    trace = Trace("t", fields, signal + noise, np.ones(fields.size, dtype=bool), frequency=case.sweep.frequency)
    return Job((case.start,), Sample(), (trace,), case.vary)


def _fit(case: Fit) -> Iterator[Row]:
    job = _job(case)
    tolerance = engine_tolerance(Problem(job, simulate))
    once = partial(simulate, case.truth, case.sweep, tolerance=tolerance)
    found = {}

    def run(engine: Callable[..., Spectrum]) -> None:
        found[engine] = fit(job, simulate=engine)

    once()
    short = statistics.median(_seconds(once) for _ in range(REPEATS))
    long = statistics.median(_seconds(lambda: run(simulate)) for _ in range(3))
    short = 0.5 * (short + statistics.median(_seconds(once) for _ in range(REPEATS)))
    ratio, slower = long / short, _seconds(lambda: run(_plain_engine)) / long
    quality = [found[engine].quality.chi2_reduced for engine in (simulate, _plain_engine)]
    note = f"{ratio:.0f} simulations (goal {case.goal:g}); by differences {slower:.1f} times as long"
    note += f"; reduced chi-square {quality[0]:.4f}, by differences {quality[1]:.4f}"
    one = unit()
    yield Row(f"fit of {case.name}", Timing(long, long / one, one, 3), note=note)


def rows() -> Iterator[Row]:
    """Yield the rows of the table."""
    for name in DIFFERENTIATED:
        yield _derivatives(name)
    for case in FITS:
        yield from _fit(case)
