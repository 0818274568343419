"""Levels on a few fields shared by all directions, and on a growing set of directions.

`FieldNodes` halves the range of fields until the quintics between its nodes follow every pair of
levels that can be resonant, and goes over to finer sets of directions with the same nodes.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from spinfit.branches import KnotData, Ladder, Pairs, Request, between_knots, steepness
from spinfit.characters import Characters
from spinfit.hamiltonian import System
from spinfit.levels import KELVIN_PER_MHZ, levels, population_difference, solve, zero_field_state
from spinfit.patterns import node_slopes, pattern
from spinfit.resonance import ZERO_FIELD, can_reach, level_pairs, midpoint_error
from spinfit.weak import Felt, extent

Array = NDArray[np.float64]

BETWEEN = 2.0
"""Part of a level difference's range over the sphere, times the rings squared, that may hide between knots."""
SHALLOW = 2
"""How often a narrow range is halved where levels are ordered by character: what is left is a name that changes."""
FAINT = 0.003
"""Strength beside the largest below which a miss counts less; a faint pair may be the sharpest line of all."""
BENT = 0.3
"""Part of the tolerance that strengths may miss between nodes: five of them miss about their bend to the power 5/2."""
KEPT_PAIRS = 120
"""Pairs of levels up to which their differences at every node are kept."""
AT_ONCE = 200_000
"""Numbers of level differences that are looked at together."""
BEYOND = 2.5
"""How many times the last field, and what part of the first, is searched for resonances that leave the range."""


class FieldNodes:
    """Solutions at shared fields for a growing set of directions."""

    def __init__(self, system: System, request: Request, directions: Array, rings: int = 0) -> None:
        self.system, self.request, self.directions = system, request, directions
        self.between = BETWEEN / rings**2 if rings else 0.0
        self.lower, self.upper = level_pairs(len(system.h0))
        self.solved: dict[float, tuple[Array, ...]] = {}
        self.leaves: list[tuple[float, float, float]] = []
        self.count = 0
        self._kept: dict[float, tuple[Array, Array, Array]] = {}
        self.judged: tuple[float, int] | None = None
        self.weights = None if request.weigh is None else request.weigh(directions)
        self.extent = extent(system, request.high)
        self.state = None if request.populations is None else zero_field_state(system, request.populations)
        self.characters = Characters.of(system, request.frequency, blur(request))
        self.middle: NDArray[np.intp] | None = None

    def _solve(
        self, directions: Array, fields: list[float], order: NDArray[np.intp] | None = None
    ) -> list[tuple[Array, ...]]:
        n = len(directions)
        broadening = self.request.broadening
        near = None
        if self.characters is not None and order is None:
            near = self._near(directions)
        got = solve(
            self.system,
            np.tile(directions, (len(fields), 1)),
            np.repeat(fields, n),
            microwave=self.request.microwave,
            operators=None if broadening is None else (broadening.h0, broadening.zeeman),
            weak=bool(self.system.weak),
            state=self.state,
            characters=self.characters,
            order=None if order is None else order.reshape(len(fields) * n, -1),
            near=None if near is None else np.tile(near, (len(fields), 1)),
        )
        strength = got.intensity
        if got.population is not None:
            strength = strength * (got.population[:, :, None] - got.population[:, None, :])
        self.count += n * len(fields)
        shape = (len(fields), n)
        order = np.empty((len(strength), 0), dtype=np.intp) if got.order is None else got.order
        return list(
            zip(
                got.energy.reshape(*shape, -1),
                got.slope.reshape(*shape, -1),
                strength.reshape(*shape, *strength.shape[1:]),
                got.shift.reshape(*shape, *got.shift.shape[1:]),
                order.reshape(*shape, -1),
                *(a.reshape(*shape, *a.shape[1:]) for seen in got.felt.values() for a in seen),
                strict=True,
            )
        )

    def _near(self, directions: Array) -> NDArray[np.intp] | None:
        """Return the order of levels in the middle of the range, shape (n, levels), where it is kept to.

        Sublevels of nuclei hardly move along the field, so that one order suits a narrow range; levels
        of larger spins cross there.
        """
        if self.system.electrons > 1 or self.system.spins[0] > 0.5:
            return None
        if directions is self.directions and self.middle is not None:
            return self.middle
        fields = np.full(len(directions), 0.5 * (self.request.low + self.request.high))
        order = solve(self.system, directions, fields, intensities=False, characters=self.characters).order
        self.count += len(directions)
        if directions is self.directions:
            self.middle = order
        return order

    def energies(self, directions: Array, field: float) -> Array:
        """Return the levels at one field, shape (m, levels), MHz, for other directions, shape (m, 3)."""
        fields = np.full(len(directions), field)
        if self.characters is None:
            return levels(self.system, directions, fields)
        near = self._near(directions)
        return solve(self.system, directions, fields, intensities=False, characters=self.characters, near=near).energy

    def _ensure(self, fields: list[float]) -> None:
        missing = [b for b in dict.fromkeys(fields) if b not in self.solved]
        if missing:
            self.solved.update(zip(missing, self._solve(self.directions, missing), strict=True))

    def _differences(self, field: float, pairs: Pairs) -> tuple[Array, Array, Array]:
        """Return gap, slope and strength at one node, each of shape (n, p)."""
        return self._between(*self.solved[field][:3], pairs)

    def _between(self, energy: Array, slope: Array, strength: Array, pairs: Pairs) -> tuple[Array, Array, Array]:
        """Return gap, slope and strength, each of shape (..., n, p), from what `_solve` returns."""
        lower, upper = pairs
        gap = energy[..., upper] - energy[..., lower] - self.request.frequency
        strength = strength[..., lower, upper]
        if self.state is None:
            strength = strength * population_difference(energy, lower, upper, self.request.temperature)
        if self.request.weigh is not None:
            strength = strength * self.weights[:, None]
        return gap, slope[..., upper] - slope[..., lower], strength

    def _keep(self, fields: list[float]) -> None:
        """Find `_differences` of all pairs at several nodes at once, where they are kept."""
        missing = [x for x in dict.fromkeys(fields) if x not in self._kept]
        if missing and len(self.lower) <= KEPT_PAIRS:
            stacked = (np.stack([self.solved[x][i] for x in missing]) for i in range(3))
            found = self._between(*stacked, (self.lower, self.upper))
            self._kept.update(zip(missing, zip(*found, strict=True), strict=True))

    def _every(self, field: float) -> tuple[Array, Array, Array]:
        """Return `_differences` of all pairs; small systems keep them, since nodes are shared by segments."""
        if field in self._kept:
            return self._kept[field]
        found = self._differences(field, (self.lower, self.upper))
        if len(self.lower) <= KEPT_PAIRS:
            self._kept[field] = found
        return found

    def _variance(self, field: float, pairs: Pairs) -> Array:
        """Return the squared frequency width at one node, shape (n, p), MHz^2."""
        shift = self.solved[field][3]
        lower, upper = pairs
        return self.request.broadening.variance(shift[:, :, upper] - shift[:, :, lower], self.directions)

    def choose(self, accuracy: float, deepest: int = 9) -> None:
        """Halve the field range until quintics follow every pair that can be resonant.

        Parameters
        ----------
        accuracy : float
            MHz by which a cubic may miss the midpoint of its segment.
        deepest : int
            On symmetry axes levels truly cross: there halving ends at this depth.
        """
        self.judged = accuracy, deepest
        low, high = self.request.low, self.request.high
        # levels of one electron spin 1/2 hardly bend over a narrow range
        narrow = high - low < 0.5 * high and self.system.electrons == 1 and self.system.spins[0] == 0.5
        if narrow and self.characters is not None:
            deepest = min(deepest, SHALLOW)
        edges = [float(e) for e in np.linspace(low, high, 2 if narrow else 3)]
        every = np.ones(len(self.lower), dtype=bool)
        self._halve(edges, accuracy, deepest, every)
        self._follow_out(low, high, accuracy, deepest)
        self.leaves.sort()
        self._fill(accuracy, deepest)

    def _halve(self, edges: list[float], accuracy: float, deepest: int, only: NDArray[np.bool_]) -> None:
        pending = list(zip(edges[:-1], edges[1:], strict=True))
        for depth in range(deepest + 1):
            middles = [0.5 * (a + b) for a, b in pending]
            self._ensure(edges + middles if depth == 0 else middles)
            pending = self._judge(pending, accuracy, depth == deepest, depth >= 3, only)
            if not pending:
                break

    def _follow_out(self, low: float, high: float, accuracy: float, deepest: int) -> None:
        """Follow pairs whose one resonance leaves the range with direction, if that makes them whole.

        A pair with one resonance everywhere is continued as such, which takes far fewer directions
        and points than one whose resonances come and go.
        """
        counts = self._counts()
        partly = (counts >= 1).any(axis=0) & ~(counts == 1).all(axis=0)
        strong = np.max([found[2][:, self.lower, self.upper].max(axis=0) for found in self.solved.values()], axis=0)
        leaving = partly & (counts <= 1).all(axis=0) & (strong > FAINT * strong.max())
        if 2 * leaving.sum() < max(1, partly.sum()):
            return
        inside = list(self.leaves)
        if low > ZERO_FIELD:
            self._halve([max(ZERO_FIELD, low / BEYOND), low], accuracy, deepest, leaving)
        self._halve([high, BEYOND * high], accuracy, deepest, leaving)
        whole = (self._counts() == 1).all(axis=0) & leaving
        if 2 * whole.sum() < partly.sum():  # too few to make up for the further nodes
            self.leaves = inside

    def settle_on(self, fields: Array, leaves: NDArray[np.intp], order: NDArray[np.intp] | None = None) -> None:
        """Take nodes, and the order of levels, that were chosen for another system, as in `KnotData`."""
        self.leaves = [tuple(float(fields[i]) for i in leaf) for leaf in leaves]
        at = [float(x) for x in fields]
        self.solved.update(zip(at, self._solve(self.directions, at, order), strict=True))

    def _counts(self) -> NDArray[np.intp]:
        """Return how often the gap of every pair changes sign along the nodes, shape (n, p)."""
        total = np.zeros((len(self.directions), len(self.lower)), dtype=np.intp)
        positive: dict[float, NDArray[np.bool_]] = {}
        for x in {x for leaf in self.leaves for x in leaf}:
            energy = self.solved[x][0]
            positive[x] = energy[:, self.upper] - energy[:, self.lower] >= self.request.frequency
        for first, middle, last in self.leaves:
            total += positive[first] != positive[middle]
            total += positive[middle] != positive[last]
        return total

    def _judge(
        self,
        pending: list[tuple[float, float]],
        accuracy: float,
        last: bool,
        lenient: bool,
        only: NDArray[np.bool_],
        forced: NDArray[np.bool_] | None = None,
    ) -> list[tuple[float, float]]:
        """Accept, drop or halve each pending segment; return the halves. `forced` pairs count in any case."""
        self._keep([x for a, b in pending for x in (a, 0.5 * (a + b), b)])
        step = max(1, AT_ONCE // max(1, len(self.directions) * len(self.lower)))
        halves = []
        for first in range(0, len(pending), step):
            some = pending[first : first + step]
            reachable, good = self._judged(some, accuracy, lenient, only, forced)
            for (a, b), reach, fine in zip(some, reachable, good, strict=True):
                m = 0.5 * (a + b)
                if reach and (last or fine):
                    self.leaves.append((a, m, b))
                elif reach:
                    halves += [(a, m), (m, b)]
        return halves

    def _judged(
        self,
        segments: list[tuple[float, float]],
        accuracy: float,
        lenient: bool,
        only: NDArray[np.bool_],
        forced: NDArray[np.bool_] | None,
    ) -> tuple[NDArray[np.bool_], NDArray[np.bool_]]:
        """Return which segments can hold a resonance, and which of these are followed well enough, each (segments,)."""
        columns = [[self._every(x) for x in (a, 0.5 * (a + b), b)] for a, b in segments]
        f, g, s = (np.array([[node[i] for node in nodes] for nodes in columns]).swapaxes(0, 1) for i in range(3))
        h = np.array([b - a for a, b in segments])[:, None, None]
        g = g * h
        size = np.abs(s).max(axis=0)
        # directions between the knots reach a little farther than any knot does
        beyond = self.extent + self.between * np.ptp(f[1], axis=1, keepdims=True)
        reach = can_reach(f[0], f[2], g[0], g[2], beyond) | ((f[1] >= 0) != (f[0] >= 0))
        reach |= between_knots(f)
        if forced is not None:
            reach |= forced
        # a pair that is forbidden at one knot may not be so next to it; on axes that it is, levels truly cross
        least = 1e-3 * self.request.tolerance * size.max(axis=(1, 2), keepdims=True)
        kept = reach & only & (size.max(axis=1, keepdims=True) > least)
        reach = kept & (size > least) if lenient else kept
        error = np.where(reach, midpoint_error(*f, *g), 0.0)
        # a flat difference turns a miss of frequency into a larger one of field
        steep = np.abs(g).min(axis=0) / h
        error = (error * np.clip(STEEP / np.maximum(steep, 1e-9), 1.0, FLATTEST)).max(axis=2)
        # strengths have no slopes to follow them by: their bend, squared, is what a polynomial may miss
        bend = np.where(reach, np.abs(s[1] - 0.5 * (s[0] + s[2])), 0.0)
        top = size.max(axis=(1, 2), keepdims=True, initial=0.0, where=reach)
        missed = bend * bend / np.maximum(size * np.maximum(size, FAINT * top), 1e-300)
        bad = (error > accuracy).mean(axis=1)
        bent = missed.max(axis=2).mean(axis=1) > (BENT * self.request.tolerance) ** 0.8
        # deep down only knots on symmetry axes are left, where a true crossing has no width
        return kept.any(axis=(1, 2)), ~bent & (bad < (0.02 if lenient else 1e-12))

    def moved(self, directions: Array, known: NDArray[np.intp]) -> FieldNodes:
        """Return the same nodes, and more where they need them, for another set of directions, reusing what is known.

        Parameters
        ----------
        directions : ndarray, shape (n', 3)
        known : ndarray of int, shape (n,)
            Position of each present direction in the new set, -1 for none.
        """
        other = FieldNodes(self.system, self.request, directions)
        other.leaves, other.count = self.leaves, self.count
        fields = sorted({x for leaf in self.leaves for x in leaf})
        kept = known >= 0
        new = np.ones(len(directions), dtype=bool)
        new[known[kept]] = False
        if not fields:
            return other
        columns = []
        for number, added in enumerate(zip(*other._solve(directions[new], fields), strict=True)):
            array = np.empty((len(fields), len(directions), *added[0].shape[1:]), dtype=added[0].dtype)
            array[:, new] = added
            array[:, known[kept]] = np.stack([self.solved[x][number] for x in fields])[:, kept]
            columns.append(array)
        other.solved = dict(zip(fields, zip(*columns, strict=True), strict=True))
        if self.judged is not None and self.characters is None:
            other._judge_again(*self.judged)
        return other

    def _judge_again(self, accuracy: float, deepest: int) -> None:
        """Halve leaves that the present directions find too long.

        What is sharp along the field may be so in few directions only, which a first set of them misses.
        """
        self.judged = accuracy, deepest
        low, high = self.request.low, self.request.high
        every = np.ones(len(self.lower), dtype=bool)
        old, self.leaves = self.leaves, []
        by_depth: dict[int, list[tuple[float, float]]] = {}
        for a, m, b in old:
            if a < low or b > high:
                self.leaves.append((a, m, b))
                continue
            depth = round(math.log2(max(1.0, 0.5 * (high - low) / (b - a))))
            by_depth.setdefault(depth, []).append((a, b))
        while by_depth:
            depth = min(by_depth)
            halves = self._judge(by_depth.pop(depth), accuracy, depth >= deepest, depth >= 3, every)
            self._ensure([0.5 * (x + y) for x, y in halves])
            if halves:
                by_depth.setdefault(depth + 1, []).extend(halves)
        self.leaves.sort()
        self._fill(accuracy, deepest)

    def _fill(self, accuracy: float, deepest: int) -> None:
        """Add what is missing between leaves on both sides of which one pair can be resonant.

        Resonance fields are continuous over the sphere: directions between the knots cross the hole.
        """
        for one, other in list(zip(self.leaves[:-1], self.leaves[1:], strict=True)):
            a, b = one[2], other[0]
            if a >= b or a < self.request.low or b > self.request.high:
                continue
            forced = self._reachable(one) & self._reachable(other)
            pending, depth = [(a, b)] * bool(forced.any()), 0
            while pending:
                self._ensure([0.5 * (x + y) for x, y in pending])
                pending = self._judge(pending, accuracy, depth >= deepest, depth >= 3, forced, forced)
                depth += 1
        self.leaves.sort()

    def _reachable(self, leaf: tuple[float, float, float]) -> NDArray[np.bool_]:
        """Return which pairs can be resonant in a leaf at some knot."""
        (f_a, g_a, _), _, (f_b, g_b, _) = (self._every(x) for x in leaf)
        return can_reach(f_a, f_b, g_a * (leaf[2] - leaf[0]), g_b * (leaf[2] - leaf[0])).any(axis=0)

    def data(self, pairs: Pairs | None = None, *, split: bool = True) -> KnotData:
        """Return gap, slope and strength of every pair that can be resonant and is strong enough.

        Parameters
        ----------
        pairs : (lower, upper), optional
            Take these pairs in place of finding them.
        split : bool
            Whether weak nuclei split them.
        """
        fields = sorted({x for leaf in self.leaves for x in leaf})
        index = {x: i for i, x in enumerate(fields)}
        leaves = np.array([[index[x] for x in leaf] for leaf in self.leaves], dtype=np.intp).reshape(-1, 3)
        pairs = self._relevant(fields) if pairs is None else pairs
        every = len(pairs[0]) == len(self.lower)
        self._keep(fields)
        columns = [self._every(x) if every else self._differences(x, pairs) for x in fields]
        if not columns:
            empty = np.empty((0, 0, len(self.directions)))
            return KnotData(np.empty(0), leaves, pairs, empty, empty, empty)
        stacked = [np.stack(c).transpose(2, 0, 1) for c in zip(*columns, strict=True)]
        gap, slope, strength = (np.ascontiguousarray(c) for c in stacked)
        variance = None
        if self.request.broadening is not None:
            variance = np.ascontiguousarray(np.stack([self._variance(x, pairs) for x in fields]).transpose(2, 0, 1))
        order = None if self.characters is None else np.stack([self.solved[x][4] for x in fields])
        plain = KnotData(np.array(fields), leaves, pairs, gap, slope, strength, variance, pairs, order=order)
        if self.system.weak and split:
            return self._split(plain)
        if order is not None:  # neighbours by name are none by energy
            return plain

        def ladder() -> Ladder:
            return self._ladder(fields, pairs)

        return KnotData(np.array(fields), leaves, pairs, gap, slope, strength, variance, pairs, ladder)

    def _ladder(self, fields: list[float], pairs: Pairs) -> Ladder:
        """Return all levels at the given nodes."""
        energy, slope = (np.stack([self.solved[x][i].T for x in fields]) for i in (0, 1))

        def partner(row: int, number: int, nodes: NDArray[np.intp]) -> Array:
            both = [pairs[0][row], pairs[1][row]]
            both[number // 2] += 2 * (number % 2) - 1
            if len(self.lower) <= KEPT_PAIRS:
                (place,) = np.flatnonzero((self.lower == min(both)) & (self.upper == max(both)))
                return np.stack([self._every(fields[k])[2][:, place] for k in nodes])
            one = (np.array([min(both)]), np.array([max(both)]))
            return np.stack([self._differences(fields[k], one)[2][:, 0] for k in nodes])

        return Ladder(energy, slope, partner)

    def _split(self, data: KnotData) -> KnotData:
        """Return a row for each line into which weak nuclei split a pair."""
        k, n = data.gap.shape[1:]
        electrons = sorted({one.electron for one in self.system.weak})
        arrays = [np.concatenate(c) for c in zip(*(self.solved[x][5:] for x in data.fields), strict=True)]
        seen = {one: Felt(*arrays[3 * i : 3 * i + 3]) for i, one in enumerate(electrons)}
        along = (data.fields[:, None, None] * self.directions).reshape(-1, 3)
        top = np.abs(data.strength).max(axis=(1, 2))
        found = pattern(
            self.system,
            seen,
            along,
            data.pairs,
            scale=self.request.scale * steepness(data),
            tolerance=self.request.tolerance,
            strength=top / max(top.max(initial=0.0), 1e-300),
        )
        row = found.pair
        offset, share = found.offset.reshape(-1, k, n), found.share.reshape(-1, k, n)
        slope = data.slope[row]
        if not found.gridded:
            slope = slope + node_slopes(data.fields, offset)
        pairs = (data.pairs[0][row], data.pairs[1][row])
        if self.request.temperature is not None:
            # populations are those of the whole energy difference, nuclear part and all
            whole = np.maximum(data.gap[row] + self.request.frequency, 1.0)
            beta = KELVIN_PER_MHZ / self.request.temperature
            share = share * np.expm1(-beta * (whole + offset)) / np.expm1(-beta * whole)
        variance = None if data.variance is None else data.variance[row]
        return KnotData(
            data.fields,
            data.leaves,
            pairs,
            data.gap[row] + offset,
            slope,
            data.strength[row] * share,
            variance,
            data.pairs,
            order=data.order,
        )

    def _relevant(self, fields: list[float]) -> Pairs:
        self._keep(fields)
        low = high = top = None
        for x in fields:
            gap, slope, strength = self._every(x)
            size = np.abs(strength).max(axis=0)
            lo, hi = gap.min(axis=0), gap.max(axis=0)
            low = lo if low is None else np.minimum(low, lo)
            high = hi if high is None else np.maximum(high, hi)
            top = size if top is None else np.maximum(top, size)
        if low is None:
            return self.lower[:0], self.upper[:0]
        margin = 0.05 * (high - low) + self.extent
        keep = (low - margin <= 0) & (high + margin >= 0)
        if keep.any():
            keep &= top > 1e-3 * self.request.tolerance * top[keep].max()
        return self.lower[keep], self.upper[keep]


STEEP = 28.0
"""MHz/mT, the slope of a free spin's level difference."""
FLATTEST = 5.0
"""How much more closely level differences are followed along the field where they are flat, at the most."""


def blur(request: Request) -> float:
    """Return by how much levels may be moved in narrow anticrossings, MHz: few directions have any."""
    return BLUR * STEEP * request.scale * math.sqrt(request.tolerance / 1e-3)


BLUR = 0.1
"""Distance of levels, in line widths, that is not seen at the default tolerance."""


def node_accuracy(request: Request) -> float:
    """Return the MHz by which a cubic may miss; the quintic that is used errs some hundred times less."""
    return min(28.0 * request.scale * request.tolerance * 70, 2e-3 * request.frequency)
