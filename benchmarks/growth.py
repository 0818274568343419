"""How the cost of a powder spectrum grows: with the width, the points, the dimension, the tolerance."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace

from benchmarks.measure import Row, timed
from spinfit.hamiltonian import systems
from spinfit.species import Nucleus, Species, Spin, Width
from spinfit.spectrum import simulate
from spinfit.sweep import Sweep

RHOMBIC = Species("s", (Spin(g=(2.0, 2.05, 2.25)),), width=Width(gaussian=0.5))
RHOMBIC_SWEEP = Sweep(9500.0, (295.0, 345.0), 2048)
TRIPLET = Species("s", (Spin(S=1, g=(2.0,), D=3000.0, E=-400.0),), width=Width(gaussian=1.0))
TRIPLET_SWEEP = Sweep(9500.0, (120.0, 460.0), 2048)
COPPER = Nucleus(isotope="63Cu", A=(-30.0, -60.0, -550.0))
NITROGEN = Nucleus(isotope="14N", A=(30.0, 35.0, 45.0))
COPPER_SWEEP = Sweep(9500.0, (250.0, 345.0), 2048)


def _row(name: str, species: Species, sweep: Sweep, tolerance: float = 1e-3, longest: float = 6.0) -> Row:
    spectrum = simulate(species, sweep, tolerance=tolerance)
    used = spectrum.report[species.name]["systems"]
    timing = timed(lambda: simulate(species, sweep, tolerance=tolerance), repeats=3, longest=longest)
    return Row(
        name,
        timing,
        diagonalisations=sum(one["diagonalisations"] for one in used),
        dimension=len(systems(species)[0].h0),
    )


def rows() -> Iterator[Row]:
    """Measure one quantity after the other, the rest as in the systems of `benchmarks.engine`."""
    for width in (1.0, 0.5, 0.2, 0.1, 0.05):
        yield _row(f"S=1/2 rhombic, width {width:g} mT", replace(RHOMBIC, width=Width(gaussian=width)), RHOMBIC_SWEEP)
    for points in (500, 2000, 5000, 20_000):
        yield _row(f"S=1/2 rhombic, {points} points", RHOMBIC, replace(RHOMBIC_SWEEP, points=points))
    for tolerance in (1e-1, 1e-2, 1e-3, 1e-4):
        yield _row(f"S=1, D 3 GHz, tolerance {tolerance:g}", TRIPLET, TRIPLET_SWEEP, tolerance)
    wide = replace(RHOMBIC, spins=(Spin(g=(2.03, 2.06, 2.25)),), width=Width(gaussian=0.8))
    for nuclei in ((), (COPPER,), (COPPER, NITROGEN), (COPPER, NITROGEN, NITROGEN)):
        species = replace(wide, nuclei=nuclei)
        size = len(systems(species)[0].h0)
        yield _row(f"S=1/2, {len(nuclei)} nuclei, {size} levels", species, COPPER_SWEEP)
