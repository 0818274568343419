"""How many knots, and where: refinement until the sphere is known well enough.

Every second ring of a set of knots is a set of its own.  What it predicts at the knots it does not
hold, against what was computed there, is its error; from two such errors the error of the full set
is extrapolated.  Where many levels cross, field by field these errors are far larger than what is left of
them in the spectrum, which does not ask which of two close resonances is which: there the spectra
themselves are compared (`Compare`).  When the error sits near the equator or the pole, as with a hyperfine tensor much
larger along z, the rings are drawn together there.
"""

from __future__ import annotations

import copy
import math
from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from spinfit.branches import Branches, KnotData, Request, count_roots, in_sight, touches, trace_branches
from spinfit.crossings import Crossings, concentration, misses
from spinfit.doublets import doublet
from spinfit.hamiltonian import System
from spinfit.meridian import along_meridian
from spinfit.nodes import FieldNodes, node_accuracy
from spinfit.orientations import Rings
from spinfit.sheets import continued, restored
from spinfit.symmetry import Symmetry

Array = NDArray[np.float64]

SIZES = (8, 12, 16, 20, 24, 32, 40, 48, 64, 80, 96)
"""Numbers of rings that are tried in turn."""
MOST_KNOTS = 5_000
"""Directions at which refinement gives up and says so."""
HIGHEST = 1.5
"""Factor on what the highest quarter of a series holds, as a bound of what the series misses."""
STRETCHED, STRETCHED_AXIAL = 20, 32
"""Rings to begin with where they are drawn together: what sharp features need at the default tolerance."""
POOR = 0.1
"""Error of the coarse half of the first set above which drawing the rings together is tried."""
LEAST_MISS = 0.05
"""Line widths times tolerance by which continued levels may miss before near crossings are looked for."""
MOST_LOOPING_KNOTS = 1200
"""The same where looping pairs matter: their kinks on symmetry axes never quite vanish from the estimate."""
CROSSING_STATES = 12
"""Levels from which on so many of them may cross that errors are measured on spectra."""
STEEPEST_SEEN = 3.0
"""Power of the step with which errors measured on spectra are trusted to fall: near crossings leave kinks."""
UNEVEN = 1.15
"""Ratio of the density of errors on one ring to that on its neighbour from which drawing rings together is tried."""
CHEAP_STATES = 16
"""Levels up to which a few more knots of an axial system cost less than what looks after them."""
MISTRUST = 2.0
"""Factor on the extrapolated error, unless it falls so fast that a power law is itself pessimistic."""
LOOPING_MISTRUST = 1.5
"""The same where looping pairs matter."""
LOOPS_ASIDE = 0.05
"""Error of looping pairs, by every second ring, in tolerances, up to which single branches alone are asked."""
FEW_RINGS = 20
"""Rings below which the error of looping pairs does not fall as that of splines yet."""
SPLINE_POWER = 5.0
"""Power of the step with which the error of splines falls at least, where levels have no kinks."""
AXIAL_POWER = 1.5
"""The same along one meridian, where rings cost little."""
HELPFUL = 3.0
"""Power of the number of rings with which the error of single branches falls where finer rings are worth it."""
KINKED = 0.3
"""Part of a single branch's error to which continuing its levels must bring it to be worth its greater cost."""

Compare = Callable[[Rings, Branches, bool, Callable[[Array], Array]], float]
"""From rings, branches on them, whether splines continue them, and a prediction of what is continued, shape
(q, n) to (q, n), to the largest change of the branches' spectrum, relative to its top."""


@dataclass(frozen=True, eq=False)
class Knots:
    """The knots that were settled on, with everything computed there.

    Attributes
    ----------
    rings : Rings
    data : KnotData
    branches : Branches
        Pairs with exactly one resonance at every knot.
    other : ndarray of bool, shape (pairs,)
        Pairs with resonances at some knots, or more than one.
    error : float
        Estimated error of the spectrum relative to its top.
    directions, diagonalisations : int
    local : bool
        Whether branches are better continued by splines than by series.
    half_error : float
        The error that every second ring alone would make.
    crossings : Crossings or None
        How pairs without single branches are continued where levels nearly cross.
    """

    rings: Rings
    data: KnotData
    branches: Branches
    other: NDArray[np.bool_]
    error: float
    directions: int
    diagonalisations: int
    local: bool
    half_error: float
    crossings: Crossings | None


def settle(system: System, symmetry: Symmetry, request: Request, compare: Compare | None = None) -> Knots:
    """Refine knots for a system until the tolerance is met or `MOST_KNOTS` is reached.

    `compare` is used where many levels may cross.  Weak nuclei, whose patterns cost more than levels do,
    are split off until the levels alone are known well enough.
    """
    if len(system.h0) == 2:
        found = doublet(system, symmetry, request)
        if found is not None:
            rings, data, branches, spent = found
            number = data.gap.shape[2]
            return Knots(rings, data, branches, np.zeros(1, dtype=bool), 0.0, number, spent, False, 1.0, None)
        trial = _Trial(system, symmetry, request, Rings(symmetry.kind, 4, 4))  # few harmonics even so
        if trial.half_error() <= request.tolerance:
            return trial.knots(trial.half_error(), trial.count)
    several = sum(spin > 0 for spin in system.spins[system.electrons :]) > 1
    kept = compare
    few = len(system.h0) < CROSSING_STATES and not several and not system.weak
    if few or (system.weak and symmetry.kind != "axial"):
        compare = None  # sums over two angles cost more than they save, until patterns are in
    trial = _Trial(system, symmetry, request, _rings(symmetry.kind, SIZES[0]), compare=compare, split=False)
    spent = trial.count
    harmonics = None
    if trial.half_error() > request.tolerance:
        # patterns have a say in how many azimuths there are, where that can be told
        plain = trial.split or symmetry.kind == "axial" or trial.other.any()
        harmonics = (trial if plain else trial.whole(None)).harmonics_needed()
    if trial.half_error() > max(POOR, request.tolerance) and not trial.looping:
        trial, extra = _drawn_together(trial, system, symmetry, request, harmonics)
        spent += extra
    history = trial.history()
    levels_known = False
    for size in [s for s in SIZES if s > trial.rings.rings]:
        error = min(_expected(history, trial))
        if error <= request.tolerance and not trial.split:
            trial, levels_known = trial.whole(None), True
            history[-1] = (trial.rings.rings // 2, trial.half_error())
            error = min(_expected(history, trial))
            if error > request.tolerance:
                trial = trial.whole(kept)
                history[-1] = (trial.rings.rings // 2, trial.half_error())
                error = min(_expected(history, trial))
        if error <= request.tolerance:
            break
        # splines converge as they promise: go there at once
        splines = error * min(1.0, trial.rings.rings / FEW_RINGS) ** 2 * (trial.rings.rings / size) ** SPLINE_POWER
        hoped = splines if trial.looping else _hoped(history[-1], size)
        if size < min(SIZES[-1], 3 * trial.rings.rings) and hoped > request.tolerance:
            continue
        if symmetry.kind == "axial" and len(system.h0) <= CHEAP_STATES and size < 2 * trial.rings.rings:
            continue  # knots cost less than another round, and twice the rings hold all that is known
        finer = _rings(symmetry.kind, size, trial.rings.stretch, harmonics)
        if len(finer.angles()[0]) > (MOST_LOOPING_KNOTS if trial.looping else MOST_KNOTS):
            break
        trial = _Trial(system, symmetry, request, finer, trial, split=levels_known)
        spent += trial.count
        history.append((size // 2, trial.half_error()))
    if not trial.split:
        trial = trial.whole(kept)
        history[-1] = (trial.rings.rings // 2, trial.half_error())
    as_they_are, by_series = _expected(history, trial)
    return trial.knots(min(as_they_are, by_series), spent, by_series < as_they_are)


def _rings(kind: str, size: int, stretch: float = 1.0, harmonics: int | None = None) -> Rings:
    extra = 2 * max(1, size // 8)
    most = size + extra
    return Rings(kind, size, most if harmonics is None else min(most, harmonics), extra, stretch)


def _hoped(last: tuple[int, float], size: int) -> float:
    """Return the error to hope for at a size, between geometric and algebraic convergence."""
    rings, error = last
    geometric = 10 * (min(error, 5.0) / 10) ** (size / rings)
    return math.sqrt(geometric * error) * (rings / size) ** 2


def _expected(history: list[tuple[int, float]], trial: _Trial) -> tuple[float, float]:
    """Return the error expected from errors at fewer rings if branches are continued as they were, and by series.

    The power law through the last two; a first measurement alone is trusted to gain little.  Level
    differences are continued by splines, whose error falls quickly unless there are kinks left.
    """
    rings = trial.rings.rings
    size, error = history[-1]
    if trial.looping:
        power = AXIAL_POWER if trial.rings.kind == "axial" else SPLINE_POWER
        known = [one for one in history if FEW_RINGS // 3 <= one[0] <= size / 1.3 and one[1] > 0]
        if known and error > 0:
            before, worse = known[-1]
            power = min(power, max(1.0, math.log(max(worse, error) / error) / math.log(size / before)))
        return LOOPING_MISTRUST * max(1.0, (FEW_RINGS / rings) ** 5) * error * (size / rings) ** power, math.inf
    power = 2.0
    if len(history) > 1:
        before, worse = history[-2]
        if error <= 0:
            return 0.0, math.inf
        steepest = 8.0 if trial.compare is None else STEEPEST_SEEN
        power = min(steepest, max(0.5, math.log(max(worse, error) / error) / math.log(size / before)))
    law = (1.0 if power > 4.5 else MISTRUST) * error * (size / rings) ** power
    series = trial.series_error()
    if series == math.inf:
        return law, series
    # less is known of how errors fall where both were measured on this one set
    within = len(history) == 2 and history[0][0] * 4 == history[1][0] * 2 == rings
    least = (0.3 if within or trial.local else 0.15) * series
    if not trial.local:
        return math.inf, min(max(law, least), series)
    # kinks keep splines from converging as they promise; and series fell behind them, if not by much
    slow = MISTRUST * error * (size / rings) ** min(power, 4.0)
    return slow, min(max(1.5 * law, least), series)


def _drawn_together(
    trial: _Trial, system: System, symmetry: Symmetry, request: Request, harmonics: int | None
) -> tuple[_Trial, int]:
    """Draw the rings to where the error sits, if that helps; return the trial and what it cost."""
    theta, _ = trial.rings.angles()
    ring = np.rint(theta * (2 * SIZES[0] / np.pi)).astype(int)
    solid = np.bincount(ring, trial.rings.knot_weights())
    # rings of even number are the coarse half's own and carry no error
    density = (np.bincount(ring, trial.error_by_knot()) / solid)[1::2]
    if density[-1] > UNEVEN * density[-2]:
        stretches = (1.0, 0.25, 0.08)
    elif density[0] > UNEVEN * density[1]:
        stretches = (1.0, 4.0, 12.0)
    else:
        return trial, 0
    if trial.data.order is not None:  # where the rings lie far apart, levels may nearly cross
        stretches = stretches[:2]
    rows = np.flatnonzero(trial.single)
    along, count = along_meridian(trial.nodes, trial.data, rows, symmetry.axes, stretches)
    stretch = stretches[int(np.argmin(along))]
    if stretch == 1.0:
        return trial, count
    size = STRETCHED_AXIAL if symmetry.kind == "axial" else STRETCHED
    better = _Trial(system, symmetry, request, _rings(symmetry.kind, size, stretch, harmonics), trial, split=False)
    return better, count + better.count


class _Trial:
    """One set of knots with its numbers and the error of its coarser half."""

    def __init__(
        self,
        system: System,
        symmetry: Symmetry,
        request: Request,
        rings: Rings,
        before: _Trial | None = None,
        compare: Compare | None = None,
        split: bool = True,
    ) -> None:
        self.rings, self.request = rings, request
        self.compare = compare if before is None else before.compare
        self.split = split or not system.weak
        directions = rings.directions(symmetry.axes)
        if before is None:
            self.nodes = FieldNodes(system, request, directions, rings.rings)
            self.nodes.choose(node_accuracy(request))
            self.count = self.nodes.count
        else:
            self.nodes = before.nodes.moved(directions, before.rings.within(rings))
            self.count = self.nodes.count - before.nodes.count
        self.before = None if before is None else (before.rings.rings, before.single_miss)
        self._look()

    def whole(self, compare: Compare | None) -> _Trial:
        """Return the same knots with weak nuclei, judged by spectra."""
        other = copy.copy(self)
        other.compare = compare
        vars(other).pop("_half_error", None)
        if not self.split:
            for name in ("branches", "crossings"):
                vars(other).pop(name, None)
            other.split = True
            other._look()
        return other

    def _look(self) -> None:
        """Take the numbers of the nodes."""
        self.single_miss = 0.0
        self._series_error: float | None = None
        self.data = self.nodes.data(split=self.split)
        counts = count_roots(self.data)
        self.single = (counts == 1).all(axis=1) if counts.size else np.zeros(len(counts), dtype=bool)
        self.other = ~self.single & (counts.any(axis=1) | touches(self.data))
        self.other[self.other] = in_sight(self.data, np.flatnonzero(self.other), self.request)
        self._by_knot: Array | None = None
        self._loop_error = 0.0
        self.local = False

    def error_by_knot(self) -> Array:
        """Return each knot's share of the error that the coarser half makes, shape (n,)."""
        if self._by_knot is None:
            self._by_knot = self._compare()
        return self._by_knot

    def half_error(self) -> float:
        """Return the spectrum's relative error as the coarser half would make it."""
        return self._half_error

    @cached_property
    def _half_error(self) -> float:
        error = float(self.error_by_knot().sum())
        others = self._loop_error
        if self.compare is None or error <= self.request.tolerance or error - others < 0.5 * error:
            return error
        coarse, kept = self.rings.halved(), self.rings.halved_knots()
        to_finer = coarse.to_finer_locally if self.local else coarse.to_finer
        seen = self._compared(lambda values: to_finer(values[:, kept], self.rings))
        return seen + others

    def _compared(self, predict: Callable[[Array], Array]) -> float:
        """Return the error of the spectrum when continued values of single branches are replaced."""
        return self.compare(self.rings, self.branches, self.local, predict)

    def harmonics_needed(self) -> int | None:
        """Return how many azimuth intervals a right angle are enough, None where these are too few.

        Twice as many as the harmonics that matter, so that the coarser half still holds them all.
        """
        if self.rings.kind == "axial" or self.other.any() or not self.single.any():
            return None
        for kept in (1, 2, 3, 4):
            miss = self._miss(lambda values, k=kept: self.rings.without_harmonics(values, k))
            enough = 0.2 * self.request.tolerance
            if miss.sum() <= enough:
                return 2 * kept
            if self.compare is None:
                continue
            if self._compared(lambda values, k=kept: self.rings.without_harmonics(values, k)) <= enough:
                return 2 * kept
        return None

    def _miss(self, predict: Callable[[Array], Array]) -> Array:
        """Return the relative error, by branch and knot, of single branches when continued values are replaced."""
        branches = self.branches
        x, y, inverse = continued(branches.field, branches.weight)
        own = () if branches.variance is None else (branches.variance,)
        x, y, *widths = predict(np.concatenate([x, y, *own])).reshape(-1, *x.shape)
        field, weight = restored(x, y, inverse)
        size = self._sizes()
        shift = np.abs(field - branches.field) / self.request.scale
        for variance, width in zip(own, widths, strict=True):  # by how much the line's own height changes
            shift = shift + 0.5 * np.abs(width - variance) / (variance + self.request.scale**2)
        shift = np.minimum(shift, 1.0)
        change = np.abs(weight - branches.weight) * self.rings.knot_weights() * (size > 0)
        return (size * shift + change) / max(size.sum(), 1e-300)

    def _sizes(self) -> Array:
        """Return the intensity of single branches inside the range, by branch and knot."""
        field = self.branches.field
        inside = (field >= self.request.low) & (field <= self.request.high)
        return np.abs(self.branches.weight) * inside * self.rings.knot_weights()

    def _release(self, miss: Array) -> Array:
        """Take pairs whose one resonance bends too sharply out of the single branches; return what of `miss` stays.

        Where levels nearly cross, a pair is better continued as a level difference, if finer rings
        do not help soon.
        """
        by_branch = miss.sum(axis=1)
        self.single_miss = float(by_branch.sum())
        if self.before is None or self.before[1] <= 0:
            return miss
        rings, worse = self.before
        if worse / self.single_miss > (self.rings.rings / rings) ** HELPFUL:
            return miss
        rows = np.flatnonzero(by_branch > 0.3 * self.request.tolerance)
        if not len(rows) or self.crossings.ladder is None:
            return miss
        pairs, whole = self.branches.pair[rows], self._sizes().sum()
        found = misses(self.crossings, pairs, self._from_half, self.request.scale)
        inside = (found.field >= self.request.low) & (found.field <= self.request.high)
        again = np.bincount(
            found.row[inside], (found.miss * self.rings.knot_weights()[found.knot])[inside], minlength=len(rows)
        )
        kinked = again < KINKED * by_branch[rows] * whole
        if not kinked.any():
            return miss
        self.single[pairs[kinked]], self.other[pairs[kinked]] = False, True
        del self.branches
        return np.delete(miss, rows[kinked], axis=0) * (whole / max(self._sizes().sum(), 1e-300))

    def _compare(self) -> Array:
        solid = self.rings.knot_weights()
        coarse, kept = self.rings.halved(), self.rings.halved_knots()
        error = np.zeros(len(solid))
        whole = total = 0.0
        if self.single.any():
            miss = self._miss(lambda values: coarse.to_finer(values[:, kept], self.rings))
            self._half = self._half_by_series = float(miss.sum())
            if self._half > self.request.tolerance:
                # where sorted levels nearly cross, branches have kinks, and splines may do better
                local = self._miss(lambda values: coarse.to_finer_locally(values[:, kept], self.rings))
                self.local = bool(local.sum() < miss.sum())
                miss = local if self.local else miss
                self._half = float(miss.sum())
                miss = self._release(miss)
            whole = total = float(self._sizes().sum())
            error += whole * miss.sum(axis=0) * concentration(self.branches.field, self._sizes(), miss, self.request)
        if self.other.any():
            amount, miss = self._compare_gaps(np.flatnonzero(self.other), solid)
            error += miss
            self._loop_error = float(miss.sum())
            total += amount
        self._loop_error /= total or 1.0
        return error / total if total else error

    @property
    def _loops_matter(self) -> bool:
        """Whether pairs without single branches have a say in how many knots are needed."""
        return bool(self.other.any()) and self._loop_error > LOOPS_ASIDE * self.request.tolerance

    @property
    def looping(self) -> bool:
        """Whether pairs without single branches carry a notable share of the error."""
        return self._loop_error > 0.3 * self.half_error()

    def history(self) -> list[tuple[int, float]]:
        """Return (rings, error) of sets that this one holds: every fourth ring, where that tells, and every second."""
        found = [(self.rings.rings // 2, self.half_error())]
        if self.rings.rings % 4 or self._loops_matter or not self.half_error():
            return found
        quarter = self.rings.halved().halved()
        kept = quarter.within(self.rings)
        if kept.min() < 0:
            return found
        to_finer = quarter.to_finer_locally if self.local else quarter.to_finer

        def predict(values: Array) -> Array:
            return to_finer(values[:, kept], self.rings)

        if self.compare is None:
            fourth = float(self._miss(predict).sum()) * self.half_error() / self._half
        else:
            fourth = self._compared(predict)
        return [(quarter.rings, min(1.0, fourth)), *found]

    def series_error(self) -> float:
        """Return the spectrum's relative error by what the series of single branches hold in their highest quarter.

        That is what a set with a quarter of its rings less would miss, so more than the set itself does.
        Infinite where it says nothing: pairs without single branches, levels that cross.
        """
        if self.compare is not None or self._loops_matter or not self.single.any():
            return math.inf
        if self._series_error is None:
            half = self._half_by_series
            # errors count as they do in the comparison with every second ring
            counted = max(1.0, self.half_error() / half) if half > 0 else 1.0
            self._series_error = HIGHEST * counted * float(self._miss(self.rings.without_highest).sum())
            self._series_error += self._loop_error
        return self._series_error

    @cached_property
    def branches(self) -> Branches:
        """The pairs with exactly one resonance everywhere, solved at every knot."""
        return trace_branches(self.data, np.flatnonzero(self.single))

    @cached_property
    def crossings(self) -> Crossings:
        """How pairs are continued where levels nearly cross."""
        least = LEAST_MISS * 28.0 * self.request.scale * self.request.tolerance
        return Crossings(self.data, self._from_half, self.rings.knot_weights(), least)

    def _from_half(self, values: Array) -> Array:
        """Return what every second ring predicts at all knots, by splines; shapes (q, n)."""
        return self.rings.halved().to_finer_locally(values[:, self.rings.halved_knots()], self.rings)

    def _compare_gaps(self, rows: NDArray[np.intp], solid: Array) -> tuple[float, Array]:
        """Return the intensity of pairs without single branches, and by knot how much of it is in error."""
        found = misses(self.crossings, rows, self._from_half, self.request.scale)
        inside = (found.field >= self.request.low) & (found.field <= self.request.high)
        amount, miss = (np.where(inside, v, 0.0) * solid[found.knot] for v in (found.amount, found.miss))
        by_knot = np.bincount(found.knot, weights=miss, minlength=len(solid))
        return float(amount.sum()), by_knot * concentration(found.field, amount, miss, self.request)

    def knots(self, error: float, spent: int, by_series: bool = False) -> Knots:
        """Return the settled result, its branches continued by series where that was found to be better."""
        directions, half = len(self.nodes.directions), self.half_error()
        crossings = self.crossings if self.other.any() else None
        if self.local and by_series:
            self.local, half = False, max(half, self.series_error())
        return Knots(
            self.rings, self.data, self.branches, self.other, error, directions, spent, self.local, half, crossings
        )
