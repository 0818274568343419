"""Ions in a crystal field, as multiples of one complex diagonalisation of the same size."""

from __future__ import annotations

import resource
import subprocess
import sys
import time
from collections.abc import Iterator

import numpy as np

from benchmarks.measure import Row, timed
from spinfit.ion.crystal_field import from_octahedral, from_wybourne
from spinfit.ion.determinants import angular_momenta, excitations, repulsion_operator, spin_orbit_operator
from spinfit.ion.model import IonModel, hamiltonian, racah_to_slater, solve, space_operators
from spinfit.ion.names import Shell
from spinfit.ion.tensors import doublet_g, spin_hamiltonian
from spinfit.units import MHZ_PER_WAVENUMBER as CM


def iron() -> IonModel:
    """Fe3+, 252 states, low symmetry: a complex matrix."""
    octahedron = 13700 * 21 / 10
    coefficients = {(4, 0): octahedron, (4, 4): octahedron * (5 / 14) ** 0.5, (2, 0): 900, (2, 1): 400, (2, -2): 300}
    field = from_wybourne(2, {k: v * CM for k, v in coefficients.items()})
    return IonModel(Shell(3, 2, 5), 400 * CM, racah_to_slater(750 * CM, 3100 * CM), field)


def gadolinium() -> IonModel:
    """Gd3+, 3432 states, low symmetry."""
    coefficients = {(2, 0): 500, (2, 1): 100, (4, 0): -1500, (4, 4): 700, (6, 0): 700, (6, -4): 300}
    field = from_wybourne(3, {k: v * CM for k, v in coefficients.items()})
    return IonModel(Shell(4, 3, 7), 1508 * CM, {2: 85669 * CM, 4: 60825 * CM, 6: 44776 * CM}, field)


def _cold(model: IonModel) -> object:
    """Build every operator anew and find the levels: what a first call costs."""
    for cached in (angular_momenta, excitations, repulsion_operator, spin_orbit_operator, space_operators):
        cached.cache_clear()
    return solve(model)


def _residual(model: IonModel) -> float:
    """Largest |H v - E v| over |E|, of the lowest states."""
    levels = solve(model, lowest=8)
    rest = hamiltonian(model) @ levels.states - levels.states * levels.energies
    return float(np.linalg.norm(rest, axis=0).max() / np.abs(levels.energies).max())


def _start(arguments: list[str], *, runs: int = 7) -> float:
    """Shortest wall time of several runs of this Python, s."""

    def once() -> float:
        begun = time.perf_counter()
        subprocess.run([sys.executable, *arguments], check=True, stdout=subprocess.DEVNULL)
        return time.perf_counter() - begun

    return min(once() for _ in range(runs))


def rows() -> Iterator[Row]:
    """Yield the figures."""
    fe, gd = iron(), gadolinium()
    one = {"diagonalisations": 1, "dimension": 252}
    yield Row(
        "d5 (252 states): g of the ground doublet",
        timed(lambda: doublet_g(solve(fe))),
        goal_floor=20,
        note="wall/floor is in diagonalisations of 252 x 252",
        **one,
    )
    yield Row("d5: g, D, E of S = 5/2 by projection", timed(lambda: spin_hamiltonian(fe)), goal_floor=20, **one)
    yield Row("d5: first call, operators built", timed(lambda: _cold(fe), repeats=3), **one)
    octahedral = IonModel(fe.shell, fe.zeta, fe.slater, from_octahedral(13700 * CM, 100 * CM))
    yield Row("d5: axial field, a real matrix", timed(lambda: doublet_g(solve(octahedral))), goal_floor=20, **one)
    timing = timed(lambda: solve(gd, lowest=8), repeats=3)
    memory = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e3
    yield Row(
        "f7 (3432 states): 8 lowest, sparse",
        timing,
        error=_residual(gd),
        note=f"peak memory of this process {memory:.0f} MB of 4000",
    )
    yield Row("f7: g, D, E of S = 7/2", timed(lambda: spin_hamiltonian(gd), repeats=3))
    numpy_alone = _start(["-c", "import numpy"])
    command = _start(["-m", "spinfit.cli", "ion", "Er3+"])
    yield Row(
        "spinfit ion Er3+, start to end",
        timed(lambda: _start(["-m", "spinfit.cli", "ion", "Er3+"], runs=1), repeats=3),
        note=f"{command / numpy_alone:.2f} x python -c 'import numpy' ({numpy_alone * 1e3:.0f} ms), goal 3",
    )
