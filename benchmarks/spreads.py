"""Spreads of D and E: error against a plain sum over the distribution, and cost beside one spectrum's.

Each system stands twice: with the widths of first order alone, and as the tolerance asks for.  The
reference is a trapezoid over the distribution, of spectra without a spread.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from functools import partial

import numpy as np

from benchmarks.measure import Row, timed
from spinfit.lineshape import GAUSSIAN_FWHM
from spinfit.species import Species, Spin, Spread, Width
from spinfit.spectrum import Spectrum, simulate
from spinfit.sweep import Sample, Sweep

# FWHM of a Gaussian over its standard deviation: a peak-to-peak width is two of these.
FWHM_PER_SIGMA = 2 * GAUSSIAN_FWHM
TRIPLET = Species("s", (Spin(S=1, g=(2.0,), D=1500.0, E=-200.0),), width=Width(gaussian=1.0))
QUARTET = Species("s", (Spin(S=1.5, g=(2.0,), D=6000.0, E=600.0),), width=Width(gaussian=4.0))
SEXTET = Species("s", (Spin(S=2.5, g=(2.0,), D=9000.0, E=900.0),), width=Width(gaussian=8.0))
X_BAND = Sweep(9500.0, (230.0, 440.0), 1024)
WIDE = Sweep(9500.0, (50.0, 550.0), 1024)
LOW = Sweep(9500.0, (60.0, 300.0), 1024)
CRYSTAL = Sample(form="crystal", start=(0.3, 0.2, 1.0), axis=(0.2, -0.3, 0.0))


@dataclass(frozen=True)
class Case:
    """One system and its spread; D and E move together in the reference."""

    name: str
    species: Species
    spread: Spread
    sweep: Sweep
    sample: Sample = Sample()
    points: int = 61


CASES = (
    Case("S=1, D 1500 MHz, spread 150 MHz", TRIPLET, Spread(D=150.0), X_BAND),
    Case(
        "S=1, D and E spread together",
        TRIPLET,
        Spread(D=300.0, E=80.0, correlation_D_E=1.0),
        X_BAND,
        points=121,
    ),
    Case("S=3/2, D 6000 MHz, spread 120 MHz", QUARTET, Spread(D=120.0), WIDE, points=27),
    Case("S=3/2, the same, a crystal", QUARTET, Spread(D=120.0), WIDE, CRYSTAL, 121),
    Case("S=5/2, D 0.3 cm^-1, spread a fifth, a crystal", SEXTET, Spread(D=1800.0), LOW, CRYSTAL, 361),
)


def summed(case: Case) -> np.ndarray:
    """Return the plain sum over the distribution."""
    spin = case.species.spins[0]
    x = np.linspace(-4.5, 4.5, case.points)
    total = np.zeros(case.sweep.points)
    for t in x:
        shift = t / FWHM_PER_SIGMA
        there = replace(spin, D=spin.D + shift * case.spread.D, E=spin.E + shift * case.spread.E)
        total += np.exp(-0.5 * t * t) * simulate(replace(case.species, spins=(there,)), case.sweep, case.sample).signal
    return total / np.exp(-0.5 * x * x).sum()


def rows() -> Iterator[Row]:
    """Yield two rows a system."""
    for case in CASES:
        species = replace(case.species, spread=case.spread)
        expected = summed(case)

        def run(first_order: bool, species: Species = species, case: Case = case) -> Spectrum:
            return simulate(species, case.sweep, case.sample, spread_tolerance=np.inf if first_order else None)

        for first in (True, False):
            spectrum, timing = run(first), timed(partial(run, first))
            nodes = spectrum.report["s"]["spreads"].get("nodes", 1)
            error = float(np.abs(spectrum.signal - expected).max() / np.abs(expected).max())
            how = "first order" if first else f"{nodes} nodes"
            yield Row(f"{case.name}: {how}", timing, error=error)
