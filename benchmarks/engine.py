"""Powder spectra: error against a dense reference, wall time, diagonalisations, the plain way."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from scipy import constants

from benchmarks.measure import Row, timed
from benchmarks.plain import plain_way, reference
from spinfit.species import Nucleus, Species, Spin, Width
from spinfit.spectrum import simulate
from spinfit.sweep import Sweep

WAVENUMBER = constants.c * 1e-4
"""MHz per cm^-1."""
LONGEST_PLAIN = 20.0
"""Seconds that one mesh of the plain way may take."""


@dataclass(frozen=True)
class Case:
    """One system: what is simulated, to which tolerance, and the mesh of its reference.

    Sums of roots do not converge for looping systems; they have no mesh, and no error here:
    `scripts/campaign engine` holds them to a sum without roots.
    """

    name: str
    species: Species
    sweep: Sweep
    mesh: tuple[int, int] | None
    tolerance: float = 1e-3
    goal: float | None = None
    goal_floor: float | None = None
    plain: bool = True


def _one(spin: Spin, width: float, *nuclei: Nucleus) -> Species:
    return Species(name="s", spins=(spin,), nuclei=nuclei, width=Width(gaussian=width))


def _copper(**tilt: tuple[float, float, float]) -> Nucleus:
    return Nucleus(isotope="63Cu", A=(-30.0, -60.0, -550.0), **tilt)


CASES = (
    Case(
        "A: S=1/2, g 2.00 2.05 2.25, 0.5 mT",
        _one(Spin(g=(2.0, 2.05, 2.25)), 0.5),
        Sweep(9500.0, (295.0, 345.0), 2048),
        (400, 200),
        goal=600,
    ),
    Case(
        "A at 0.05 mT",
        _one(Spin(g=(2.0, 2.05, 2.25)), 0.05),
        Sweep(9500.0, (295.0, 345.0), 4096),
        (2400, 900),
        plain=False,
    ),
    Case(
        "B: S=1/2, 63Cu -30 -30 -550 MHz, 0.8 mT",
        _one(Spin(g=(2.05, 2.05, 2.25)), 0.8, Nucleus(isotope="63Cu", A=(-30.0, -30.0, -550.0))),
        Sweep(9500.0, (250.0, 345.0), 2048),
        (3000, 1),
        goal=700,
        goal_floor=3,
    ),
    Case(
        "B2: S=1/2, 63Cu -30 -60 -550 MHz, 0.8 mT",
        _one(Spin(g=(2.03, 2.06, 2.25)), 0.8, _copper()),
        Sweep(9500.0, (250.0, 345.0), 2048),
        (300, 90),
        goal=3000,
        goal_floor=3,
        plain=False,
    ),
    Case(
        "B2 with A_tilt 30, 20, 10 deg",
        _one(Spin(g=(2.03, 2.06, 2.25)), 0.8, _copper(A_tilt=tuple(np.radians((30.0, 20.0, 10.0))))),
        Sweep(9500.0, (250.0, 345.0), 2048),
        (300, 200),
        goal=12000,
        goal_floor=4,
        plain=False,
    ),
    Case(
        "C: S=1, D 3 GHz, E -0.4 GHz, 1 mT",
        _one(Spin(S=1, g=(2.0,), D=3000.0, E=-400.0), 1.0),
        Sweep(9500.0, (120.0, 460.0), 2048),
        (600, 300),
        goal=2500,
        goal_floor=3.5,
    ),
    Case(
        "D: S=5/2, D 0.3 cm^-1, E/D 0.1, 10 K, 2 mT, at 1e-2",
        _one(Spin(S=2.5, g=(2.0,), D=0.3 * WAVENUMBER, E=0.03 * WAVENUMBER), 2.0),
        Sweep(9500.0, (0.0, 800.0), 2048, temperature=10.0),
        None,
        tolerance=1e-2,
        goal=100_000,
        goal_floor=5,
        plain=False,
    ),
    Case(
        "E: S=5/2, I=5/2, D 300 MHz, A -250 MHz, 0.3 mT",
        _one(Spin(S=2.5, g=(2.0,), D=300.0), 0.3, Nucleus(isotope="55Mn", A=(-250.0,))),
        Sweep(9500.0, (240.0, 430.0), 2048),
        (1500, 1),
        goal=16000,
        goal_floor=3,
        plain=False,
    ),
    Case(
        "F: S=3/2, D 5 cm^-1, E/D 0.2, 2 mT",
        _one(Spin(S=1.5, g=(2.0,), D=5 * WAVENUMBER, E=WAVENUMBER), 2.0),
        Sweep(9500.0, (50.0, 450.0), 2048),
        (3000, 1200),
        goal=4000,
        goal_floor=6,
    ),
    Case(
        "G: S=7/2, D 1.5 GHz, 34 GHz, 2 mT",
        _one(Spin(S=3.5, g=(2.0,), D=1500.0), 2.0),
        Sweep(34000.0, (850.0, 1600.0), 2048),
        (3000, 1),
        goal=1500,
        goal_floor=6,
    ),
)


def _row(case: Case) -> Row:
    spectrum = simulate(case.species, case.sweep, tolerance=case.tolerance)
    error = None
    if case.mesh is not None:
        truth = reference(case.species, case.sweep, case.mesh)
        error = float(np.abs(spectrum.signal - truth).max() / np.abs(truth).max())
    (used,) = spectrum.report[case.species.name]["systems"]
    timing = timed(lambda: simulate(case.species, case.sweep, tolerance=case.tolerance))
    seconds, note = None, ""
    if case.plain:
        seconds, reached = plain_way(case.species, case.sweep, truth, max(error, 1e-4), LONGEST_PLAIN)
        if reached > 1.5 * max(error, 1e-4):
            note = f"plain way stopped at an error of {reached:.1e}"
    dimension = 1
    for spin in case.species.spins:
        dimension *= round(2 * spin.S) + 1
    for nucleus in case.species.nuclei:
        dimension *= 4 if nucleus.isotope == "63Cu" else 6
    return Row(
        case.name,
        timing,
        error=error,
        diagonalisations=used["diagonalisations"],
        dimension=dimension,
        goal=case.goal,
        goal_floor=case.goal_floor,
        plain=seconds,
        note=note,
    )


def rows() -> Iterator[Row]:
    """Measure every system of `CASES`."""
    for case in CASES:
        yield _row(case)
