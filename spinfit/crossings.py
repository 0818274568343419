"""Levels continued over the sphere through the places where two of them nearly cross.

Sorted by energy, two levels that nearly cross have a kink there, which neither splines nor series
follow: where the distance of two levels is d and their mean m, they are m - d/2 and m + d/2.  But m
and d^2 are smooth however small d becomes, for they are symmetric in the two levels; so are their
slopes, and, of the strengths s1 and s2 of the transitions from a third level to either,
s1 + s2 and (s1 - s2) d.  These are continued, and levels, slopes and strengths made of them.
A level that nearly crosses one neighbour here and the other there is taken from the closer one.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from spinfit.branches import KnotData, Ladder, Request
from spinfit.resonance import can_reach

Array = NDArray[np.float64]
Index = NDArray[np.intp]
Continue = Callable[[Array], Array]
"""From values at the knots, shape (q, n), to values elsewhere, shape (q, ...)."""

GAIN = 0.7
"""Ratio of the errors of both ways of continuing below which the symmetric one is used."""
NEAR = 500.0
"""MHz from resonance within which a pair's errors count most."""
BLEND = 4
"""Power of the distance by which the closer of two near crossings prevails."""


@dataclass(frozen=True, eq=False)
class _Near:
    """Two neighbouring levels, continued: arrays of shape (nodes, ...).

    `half` is half their distance, `mean` their mean, `turn` half the difference of their slopes;
    `at` has the position of each of the nodes asked about, -1 for none.
    """

    at: Index
    half: Array
    mean: Array
    slope: Array
    turn: Array

    @property
    def arrays(self) -> tuple[Array, Array, Array, Array]:
        """All but the positions."""
        return self.half, self.mean, self.slope, self.turn


class Crossings:
    """How pairs of levels are continued where either nearly crosses a neighbour.

    Attributes
    ----------
    data : KnotData
    ladder : Ladder or None
        None where pairs are continued as they stand.
    """

    def __init__(
        self, data: KnotData, to_finer: Continue | None = None, solid: Array | None = None, least: float = 0.0
    ) -> None:
        """Build for data.

        Parameters
        ----------
        data : KnotData
        to_finer : callable, optional
            From values at the knots to what every second ring of them predicts at all knots; without
            it pairs are continued as they stand.
        solid : ndarray, shape (n,)
            Solid angle of each knot.
        least : float
            MHz; smaller mean errors of a level do not matter.
        """
        self.data, self._to_finer, self._solid, self._least = data, to_finer, solid, least
        known = to_finer is not None and data.ladder is not None and len(data.fields) > 0
        self.ladder: Ladder | None = data.ladder() if known else None
        self._uses: dict[int, NDArray[np.bool_]] = {}
        self._bent: dict[int, NDArray[np.bool_]] = {}
        if self.ladder is not None:
            self._miss = self._compare()

    def like(self, data: KnotData) -> Crossings:
        """Return the same ways of continuing for other numbers at the same nodes."""
        other = Crossings(data)
        if self.ladder is not None and data.ladder is not None:
            rows = range(len(data.gap))
            other.ladder = data.ladder()
            other._uses = {row: self.uses(row) for row in rows}
            other._bent = {row: self._strength_bends(row) for row in rows if row in self._bent}
        return other

    def _compare(self) -> Array:
        """Return what four ways of continuing levels miss, shape (4, nodes, levels, n).

        Alone, with the level below, with the one above, with the closer of both.
        """
        energy = self.ladder.energy
        k, levels, n = energy.shape
        distance, mean = np.diff(energy, axis=1), 0.5 * (energy[:, 1:] + energy[:, :-1])
        guess = self._to_finer(np.concatenate([energy, mean, distance**2], axis=1).reshape(-1, n)).reshape(k, -1, n)
        half = 0.5 * np.sqrt(np.maximum(guess[:, 2 * levels - 1 :], 0.0))
        weight = np.zeros((2, *energy.shape))
        weight[0, :, 1:] = weight[1, :, :-1] = (half + 1e-6) ** -BLEND
        value = np.zeros_like(weight)
        value[0, :, 1:] = guess[:, levels : 2 * levels - 1] + half
        value[1, :, :-1] = guess[:, levels : 2 * levels - 1] - half
        blend = (weight * value).sum(axis=0) / weight.sum(axis=0)
        miss = np.abs(np.stack([guess[:, :levels], *value, blend]) - energy)
        miss[1, :, 0] = miss[2, :, -1] = miss[3, :, 0] = miss[3, :, -1] = np.inf
        return miss

    def _closeness(self, row: int) -> Array:
        """Return the share of each knot in what a pair's errors count at each node, shape (nodes, n)."""
        gap = self.data.gap[row] / NEAR
        share = self._solid / (1 + gap * gap)
        return share / share.sum(axis=1, keepdims=True)

    def uses(self, row: int) -> NDArray[np.bool_]:
        """Whether a pair's levels are continued together with the one below (0) or above (1).

        Returns
        -------
        ndarray of bool, shape (2, nodes, 2)
            Of the lower and the upper level.
        """
        if row not in self._uses:
            pair = [self.data.pairs[0][row], self.data.pairs[1][row]]
            miss = np.einsum("wkln,kn->wkl", self._miss[:, :, pair], self._closeness(row))
            best = np.where((miss[0] > self._least) & (miss.min(axis=0) < GAIN * miss[0]), miss.argmin(axis=0), 0)
            self._uses[row] = np.stack([(best == 1) | (best == 3), (best == 2) | (best == 3)])
        return self._uses[row]

    def continued(self, row: int, part: slice, to: Continue) -> Array:
        """Return gap, slope, strength and variance, if any, of one pair, continued, shape (3 or 4, nodes, ...).

        Parameters
        ----------
        row : int
            Of the data.
        part : slice
            Of the nodes.
        to : callable
            From values at the knots to values elsewhere.
        """
        data = self.data
        columns = (data.gap, data.slope, data.strength, *(() if data.variance is None else (data.variance,)))
        own = np.stack([one[row, part] for one in columns])
        out = to(own.reshape(-1, own.shape[2]))
        out = out.reshape(len(own), -1, *out.shape[1:])
        if self.ladder is None:
            return out
        pair = [data.pairs[0][row], data.pairs[1][row]]
        where = np.arange(len(data.fields))[part]
        where = where[self.uses(row)[:, where].any(axis=(0, 2))]
        if not len(where):
            return out
        energy = self.ladder.energy[where[0]]
        frequency = energy[pair[1], 0] - energy[pair[0], 0] - data.gap[row, where[0], 0]
        # nodes that are alike together: whole arrays in place of many picked from them
        kind = (self.uses(row)[:, where].transpose(1, 0, 2).reshape(-1, 4) << np.arange(4)).sum(axis=1)
        kind = kind + 16 * self._strength_bends(row)[where]
        for one in np.unique(kind):
            alike = where[kind == one]
            nodes = alike - (part.start or 0)
            near = self._beside(row, alike, to)
            low, high = (self._level(row, number, alike, near, to) for number in (0, 1))
            out[0, nodes] = high[0] - low[0] - frequency
            out[1, nodes] = high[1] - low[1]
            if one >= 16:
                out[2, nodes] = self._strength(row, alike, near, to, out[2, nodes])
        return out

    def _beside(self, row: int, where: Index, to: Continue) -> dict[int, _Near]:
        """Continue the two levels of each near crossing of a pair's, by the lower of the two."""
        near: dict[int, _Near] = {}
        pair, uses = [self.data.pairs[0][row], self.data.pairs[1][row]], self.uses(row)[:, where]
        for lower in sorted({level - side for level in pair for side in (1, 0)}):
            some = np.zeros(len(where), dtype=bool)
            for number, level in enumerate(pair):
                if level - lower in (0, 1):
                    some |= uses[1 - (level - lower), :, number]
            if some.any():
                near[lower] = self._near(lower, where, some, to)
        return near

    def _strength_bends(self, row: int) -> NDArray[np.bool_]:
        """Whether the strength of a pair, too, is better made of both, at each node."""
        if row not in self._bent:
            where = np.flatnonzero(self.uses(row).any(axis=(0, 2)))
            own, share, to_finer = self.data.strength[row, where], self._closeness(row)[where], self._to_finer
            plain = to_finer(own)
            made = self._strength(row, where, self._beside(row, where, to_finer), to_finer, plain)
            better = (np.abs(made - own) * share).sum(axis=1) < GAIN * (np.abs(plain - own) * share).sum(axis=1)
            self._bent[row] = np.zeros(len(self.data.fields), dtype=bool)
            self._bent[row][where[better]] = True
        return self._bent[row]

    def _near(self, lower: int, where: Index, some: NDArray[np.bool_], to: Continue) -> _Near:
        """Continue levels `lower` and `lower` + 1 at some of the nodes `where`."""
        energy, slope = self.ladder.energy[where[some]], self.ladder.slope[where[some]]
        half, turn = (0.5 * (v[:, lower + 1] - v[:, lower]) for v in (energy, slope))
        mean, along = (0.5 * (v[:, lower + 1] + v[:, lower]) for v in (energy, slope))
        got = to(np.concatenate([mean, half**2, along, half * turn]))
        mean, square, along, product = got.reshape(4, len(half), *got.shape[1:])
        most = np.abs(turn).max(axis=1).reshape(-1, *[1] * (mean.ndim - 1))
        half = np.sqrt(np.maximum(square, 0.0))
        at = np.where(some, np.cumsum(some) - 1, -1)
        return _Near(at, half, mean, along, np.clip(product / np.maximum(half, 1e-9), -most, most))

    def _level(
        self, row: int, number: int, where: Index, near: dict[int, _Near], to: Continue
    ) -> tuple[Array, Array]:
        """Return energy and slope of a pair's lower (0) or upper (1) level at the nodes `where`."""
        level, uses = self.data.pairs[number][row], self.uses(row)[:, where, number]
        alone = ~uses.any(axis=0)
        energy = slope = None
        if alone.any():
            got = to(np.concatenate([self.ladder.energy[where[alone], level], self.ladder.slope[where[alone], level]]))
            got = got.reshape(2, -1, *got.shape[1:])
            if alone.all():
                return got[0], got[1]
            energy, slope = (np.empty((len(where), *got.shape[2:])) for _ in range(2))
            energy[alone], slope[alone] = got
        for chosen in ((True, False), (False, True), (True, True)):
            some = (uses == np.array(chosen)[:, None]).all(axis=0)
            if not some.any():
                continue
            sides = []
            for side, sign in ((0, 1), (1, -1)):
                if chosen[side]:
                    one = near[level - 1 + side]
                    half, mean, along, turn = (_picked(v, one.at[some]) for v in one.arrays)
                    sides.append((half, mean + sign * half, along + sign * turn))
            if len(sides) == 2:
                share = _share(sides[0][0], sides[1][0])
                values = [share * a + (1 - share) * b for a, b in zip(sides[0][1:], sides[1][1:], strict=True)]
            else:
                values = sides[0][1:]
            if some.all():
                return values[0], values[1]
            if energy is None:
                energy, slope = (np.empty((len(where), *values[0].shape[1:])) for _ in range(2))
            energy[some], slope[some] = values
        return energy, slope

    def _strength(self, row: int, where: Index, near: dict[int, _Near], to: Continue, plain: Array) -> Array:
        """Return the strength of a pair at the nodes `where`."""
        lower, upper = self.data.pairs[0][row], self.data.pairs[1][row]
        total, out, uses = np.zeros_like(plain), np.zeros_like(plain), self.uses(row)[:, where]
        for number, (level, side) in enumerate(((lower, 0), (lower, 1), (upper, 0), (upper, 1))):
            a = level - 1 + side
            some = uses[side, :, number // 2]
            if not some.any() or (a == lower and upper == lower + 1):  # the pair's own two levels
                continue
            nodes, half = where[some], _picked(near[a].half, near[a].at[some])
            mine, other = self.data.strength[row, nodes], self.ladder.partner(row, number, nodes)
            apart = 0.5 * (self.ladder.energy[nodes, a + 1] - self.ladder.energy[nodes, a])
            got = to(np.concatenate([0.5 * (mine + other), 0.5 * (mine - other) * apart]))
            mean, product = got.reshape(2, len(nodes), *got.shape[1:])
            most = 0.5 * np.abs(mine - other).max(axis=1).reshape(-1, *[1] * (mean.ndim - 1))
            weight = (half + 1e-6) ** -BLEND
            total[some] += weight
            out[some] += weight * (mean + np.clip(product / np.maximum(half, 1e-9), -most, most))
        return np.where(total > 0, out / np.where(total > 0, total, 1.0), plain)


def _picked(values: Array, at: Index) -> Array:
    """Return values[at], without a copy where that is all of them."""
    return values if len(at) == len(values) and np.array_equal(at, np.arange(len(at))) else values[at]


def _share(near: Array, far: Array) -> Array:
    """Return the share of the first of two near crossings, from half the distance at either."""
    ratio = ((near + 1e-6) / (far + 1e-6)) ** 2
    return 1 / (1 + ratio * ratio)


FOLD_SLOPE = 14.0
"""MHz/mT, half a free spin's: a level difference flatter than that moves intensity rather in direction."""


@dataclass(frozen=True, eq=False)
class Misses:
    """What a way of continuing gets wrong, for pairs at nodes and knots next to resonance; shapes (q,).

    Attributes
    ----------
    row : ndarray of int
        Of the rows asked about.
    knot : ndarray of int
    field : ndarray
        Of the resonance, roughly, mT.
    amount, miss : ndarray
        Weight, and weight in error, of one direction: a miss of the level difference is a shift of
        field by its slope, counted in line widths.
    """

    row: Index
    knot: Index
    field: Array
    amount: Array
    miss: Array


def misses(crossings: Crossings, rows: Index, to_finer: Continue, scale: float) -> Misses:
    """Compare pairs, continued from every second ring, with what was computed.

    Nodes farther from resonance than a leaf's reach do not count.

    Parameters
    ----------
    rows : ndarray of int
        Of the data.
    to_finer : callable
        From values at the knots to what every second ring predicts at all of them.
    scale : float
        Line width, mT.
    """
    data = crossings.data
    gap, slope, strength = data.gap[rows], data.slope[rows], data.strength[rows]
    near = np.zeros(gap.shape, dtype=bool)
    reach = np.zeros(gap.shape[1])
    for leaf in data.leaves:
        for a, b in ((leaf[0], leaf[1]), (leaf[1], leaf[2])):
            h = data.fields[b] - data.fields[a]
            close = can_reach(gap[:, a], gap[:, b], slope[:, a] * h, slope[:, b] * h)
            near[:, a] |= close
            near[:, b] |= close
            reach[[a, b]] = np.maximum(reach[[a, b]], h)
    guess = np.empty((2, *gap.shape))
    for number, row in enumerate(rows):
        nodes = np.flatnonzero(near[number].any(axis=1))
        if len(nodes):
            part = slice(int(nodes[0]), int(nodes[-1]) + 1)
            guess[:, number, part] = crossings.continued(row, part, to_finer)[[0, 2]]
    row, node, knot = np.nonzero(near)
    at = row, node, knot
    steep = np.maximum(np.abs(slope[at]), FOLD_SLOPE)
    share = 1.0 / np.maximum(near.sum(axis=1), 1)[row, knot]
    weight = share * np.abs(strength[at]) / steep
    shift = np.abs(guess[0][at] - gap[at]) / steep / scale
    change = share * np.abs(guess[1][at] - strength[at]) / steep
    away = np.clip(-gap[at] / np.where(slope[at] < 0, -steep, steep), -reach[node], reach[node])
    return Misses(row, knot, data.fields[node] + away, weight, weight * np.minimum(shift, 1.0) + change)


CLUSTER = 6.0
"""Line widths over which errors of looping pairs count together: the promise is about the worst place."""


def concentration(field: Array, amount: Array, miss: Array, request: Request) -> float:
    """Return how many times larger the share in error is at its worst place in the range than on the whole."""
    some = miss > 0
    if not some.any():
        return 1.0

    def by_place(values: Array, some: NDArray[np.bool_]) -> Array:
        place = (field[some] - request.low) / (CLUSTER * request.scale)
        return np.bincount(place.astype(np.intp), values[some])

    worst = by_place(miss, some).max() / by_place(amount, amount > 0).max()
    return max(1.0, worst * amount.sum() / miss.sum())
