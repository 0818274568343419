"""Weakly coupled nuclei: error against exact diagonalisation on shared directions, wall time, size.

The reference sums exact resonances of the full product of spins over a few directions, and the
engine's way of splitting is summed over the same directions: what is left is the error of the
perturbation treatment, free of any error over the sphere.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np

from benchmarks.measure import Row, timed
from benchmarks.plain import directions
from spinfit.branches import Request
from spinfit.exact import deposit
from spinfit.hamiltonian import systems
from spinfit.lineshape import FieldGrid, Shape
from spinfit.resonance import find
from spinfit.sheets import Grain, Histograms
from spinfit.species import Nucleus, Species, Spin, Width
from spinfit.spectrum import simulate
from spinfit.sweep import Sweep

Array = np.ndarray
COPPER = Nucleus(isotope="63Cu", A=(-30.0, -60.0, -550.0), treat="exact")
NITROGEN = Nucleus(isotope="14N", A=(40.0,))
PROTON = Nucleus(isotope="1H", A=(10.0, 15.0, 30.0))
COPPER_SPIN = Spin(g=(2.03, 2.06, 2.25))
X_BAND = Sweep(9500.0, (250.0, 345.0), 2048)
TOLERANCE = 1e-4


@dataclass(frozen=True)
class Case:
    """One system; without `mesh` the exact matrices are too large for a reference."""

    name: str
    spin: Spin
    nuclei: tuple[Nucleus, ...]
    sweep: Sweep = X_BAND
    mesh: tuple[int, int] | None = (16, 8)
    dimension: int = 2
    goal: float | None = None


CASES = (
    Case("S=1/2, 14N 40 MHz with P", COPPER_SPIN, (replace(NITROGEN, P=(-1.0, -1.0, 2.0)),)),
    Case("S=1/2, 1H 10 15 30 MHz, near cancellation", COPPER_SPIN, (PROTON,)),
    Case("B2 and 14N 20 MHz", COPPER_SPIN, (COPPER, replace(NITROGEN, A=(20.0,))), mesh=(8, 4), dimension=8),
    Case("B2 and 14N 40 MHz", COPPER_SPIN, (COPPER, NITROGEN), mesh=(8, 4), dimension=8),
    Case(
        "B2 and two 14N 40 MHz",
        COPPER_SPIN,
        (COPPER, replace(NITROGEN, count=2)),
        mesh=None,
        dimension=8,
        goal=15000,
    ),
    Case(
        "B2, four 14N 32 34 44 MHz with P, nine 1H 6 8 14 MHz",
        COPPER_SPIN,
        (
            COPPER,
            replace(NITROGEN, A=(32.0, 34.0, 44.0), P=(-1.0, -1.0, 2.0), count=4),
            replace(PROTON, A=(6.0, 8.0, 14.0), count=9),
        ),
        mesh=None,
        dimension=8,
    ),
    Case(
        "S=5/2, D 300 MHz, 1H 10 15 30 MHz",
        Spin(S=2.5, g=(2.0,), D=300.0),
        (PROTON,),
        replace(X_BAND, field=(240.0, 430.0)),
        dimension=6,
    ),
)


def species(case: Case, treat: str) -> Species:
    """Return the case's species with every nucleus but the copper treated in one way."""
    nuclei = tuple(one if one.treat == "exact" else replace(one, treat=treat) for one in case.nuclei)
    return Species(name="s", spins=(case.spin,), nuclei=nuclei, width=Width(gaussian=0.8))


def summed(one: Species, sweep: Sweep, unit: Array, share: Array, perturb: bool) -> Array:
    """Return the spectrum of exactly solved resonances, split by weak nuclei, over given directions."""
    shape = Shape.from_widths(one.width.gaussian, one.width.lorentzian)
    beyond = 15.0
    grid = FieldGrid.covering(*sweep.field, shape.scale, shape.reach(TOLERANCE), TOLERANCE, beyond)
    low, high = max(sweep.field[0] - beyond, 1e-3), sweep.field[1] + beyond
    request = Request(sweep.frequency, low, high, Grain.of(shape, TOLERANCE), shape.scale, TOLERANCE)
    total = 0.0
    for system in systems(one, perturb=perturb):
        histograms = Histograms(grid, shape.scale)
        got = find(system, unit, sweep.frequency, (low, high))
        deposit(histograms, system, request, got, unit, got.weight * share[got.direction])
        total = total + system.weight * histograms.transform()
    return grid.sample(grid.render(total, shape), sweep.fields)


def _row(case: Case) -> Row:
    weak = species(case, "second order")
    error, note = None, ""
    if case.mesh is not None:
        whole = species(case, "exact")
        unit, share = directions(systems(whole)[0], case.mesh)
        truth = summed(whole, case.sweep, unit, share, False)
        first = summed(species(case, "first order"), case.sweep, unit, share, True)
        second = summed(weak, case.sweep, unit, share, True)
        error, to_first = (float(np.abs(s - truth).max() / np.abs(truth).max()) for s in (second, first))
        note = f"first order errs by {to_first:.1e}"
    (used,) = simulate(weak, case.sweep).report["s"]["systems"]
    return Row(
        case.name,
        timed(lambda: simulate(weak, case.sweep), repeats=3),
        error=error,
        diagonalisations=used["diagonalisations"],
        dimension=case.dimension,
        goal=case.goal,
        note=note,
    )


def rows() -> Iterator[Row]:
    """Yield one row a case."""
    for case in CASES:
        yield _row(case)
