"""How things are measured, so that figures taken on different machines can be compared.

Seconds depend on the machine and, on a shared one, wander by a factor of two within a minute.  Every
wall time is therefore taken next to the same yardstick, one 6x6 complex Hermitian diagonalisation out
of a batch (`unit`), and quoted as a multiple of it.
"""

from __future__ import annotations

import statistics
import time
from collections.abc import Callable
from dataclasses import dataclass
from functools import cache

import numpy as np

# Large enough that the call's own overhead (some 10 us) is below 1 % of the whole.
BATCH = 1000
DIMENSION_OF_UNIT = 6


@dataclass(frozen=True)
class Timing:
    """Wall time of one call beside the yardstick.

    Attributes
    ----------
    wall : float
        Seconds, median over the repeats.
    units : float
        The same as a multiple of `unit`: median of the ratios of each repeat to the yardstick
        measured around it, which wanders less than the ratio of the two medians.
    unit : float
        Seconds for one 6x6 diagonalisation, median.
    repeats : int
    """

    wall: float
    units: float
    unit: float
    repeats: int


@dataclass(frozen=True)
class Row:
    """One line of the table.

    Attributes
    ----------
    system : str
        What was computed: "A: S=1/2, g 2.00 2.05 2.25, 0.5 mT".
    timing : Timing
    error : float or None
        Largest deviation from a dense reference relative to the reference's largest value.
    diagonalisations : int or None
        How many matrices were diagonalised.
    dimension : int or None
        Their size; with `diagonalisations` it gives the floor, what LAPACK alone needs for them.
    goal : float or None
        What the wall should stay below, in units.
    goal_floor : float or None
        What wall/floor should stay below.
    plain : float or None
        Seconds of the plain way at the same error: diagonalise on a grid of fields at each
        orientation, sum over orientations until converged.
    note : str
        Anything the reader must know: "plain way stopped at 2 % after 60 s".
    """

    system: str
    timing: Timing
    error: float | None = None
    diagonalisations: int | None = None
    dimension: int | None = None
    goal: float | None = None
    goal_floor: float | None = None
    plain: float | None = None
    note: str = ""

    @property
    def floor(self) -> float | None:
        """Seconds that LAPACK needs for the same number of matrices of the same size, at that time's speed."""
        if self.diagonalisations is None or self.dimension is None:
            return None
        return self.diagonalisations * diagonalisation(self.dimension) * self.timing.unit

    @property
    def over_floor(self) -> float | None:
        """Wall divided by floor."""
        return None if not self.floor else self.timing.wall / self.floor

    @property
    def met(self) -> bool | None:
        """Whether every goal that was set is met; None when there is none."""
        pairs = ((self.timing.units, self.goal), (self.over_floor, self.goal_floor))
        kept = [value <= goal for value, goal in pairs if goal is not None and value is not None]
        return all(kept) if kept else None


def _seconds(function: Callable[[], object]) -> float:
    start = time.perf_counter()
    function()
    return time.perf_counter() - start


@cache
def _matrices(dimension: int, count: int) -> np.ndarray:
    """Random complex Hermitian matrices, shape (count, dimension, dimension)."""
    rng = np.random.default_rng(dimension)
    raw = rng.normal(size=(count, dimension, dimension)) + 1j * rng.normal(size=(count, dimension, dimension))
    return raw + raw.conj().swapaxes(-1, -2)


def unit(repeats: int = 5) -> float:
    """Seconds for one 6x6 complex Hermitian `numpy.linalg.eigh` out of a batch; median of several."""
    matrices = _matrices(DIMENSION_OF_UNIT, BATCH)
    return statistics.median(_seconds(lambda: np.linalg.eigh(matrices)) for _ in range(repeats)) / BATCH


@cache
def diagonalisation(dimension: int, repeats: int = 5) -> float:
    """Cost of one complex Hermitian `eigh` of this size out of a batch, as a multiple of `unit`."""
    # The same number of bytes for every size, so that each batch stays in the cache alike.
    count = max(4, BATCH * DIMENSION_OF_UNIT**2 // dimension**2)
    matrices = _matrices(dimension, count)
    ratios = [_seconds(lambda: np.linalg.eigh(matrices)) / count / unit(3) for _ in range(repeats)]
    return statistics.median(ratios)


def timed(function: Callable[[], object], *, repeats: int = 7, longest: float = 20.0) -> Timing:
    """Time a call, after one call that warms caches, next to the yardstick.

    Parameters
    ----------
    function : callable without arguments
    repeats : int
        How often it is called; fewer when they take longer than `longest` seconds together.
    longest : float
        Seconds after which no further repeat is started.
    """
    first = _seconds(function)
    walls, units = [], []
    begun = time.perf_counter()
    while len(walls) < repeats and (not walls or time.perf_counter() - begun < longest):
        before = unit(3)
        # Calls of less than a few ms are repeated inside, so that the clock's jitter averages out.
        inner = max(1, min(200, int(0.003 / max(first, 1e-7))))
        walls.append(_seconds(lambda count=inner: [function() for _ in range(count)]) / inner)
        units.append(0.5 * (before + unit(3)))
    ratios = [wall / one for wall, one in zip(walls, units, strict=True)]
    return Timing(statistics.median(walls), statistics.median(ratios), statistics.median(units), len(walls))
