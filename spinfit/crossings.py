"""Levels continued over the sphere through the places where two of them nearly cross.

Sorted by energy, two levels that nearly cross have a kink there, which neither splines nor series
follow: where the distance of two levels is d and their mean m, they are m - d/2 and m + d/2.  But m
and d^2 are smooth however small d becomes, for they are symmetric in the two levels; so are their
slopes, and, of the strengths s1 and s2 of the transitions from a third level to either,
s1 + s2 and (s1 - s2) d.  These are continued, and levels, slopes and strengths made of them.
A level that nearly crosses one neighbour here and the other there is taken from the closer one.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from functools import partial

import numpy as np
from numpy.typing import NDArray

from spinfit.branches import KnotData, Ladder, Request
from spinfit.resonance import can_reach

Array = NDArray[np.float64]
Index = NDArray[np.intp]
Continue = Callable[..., Array]
"""From values at the knots, shape (q, n), to values elsewhere, shape (q, ...)."""

GAIN = 0.7
"""Ratio of the errors of both ways of continuing below which the symmetric one is used."""
NEAR = 500.0
"""MHz from resonance within which a pair's errors count most."""
BLEND = 4
"""Power of the distance by which the closer of two near crossings prevails."""
WASTE = 1.25
"""How many rows of a mesh, for each that is needed, nodes that are continued together may take."""


@dataclass(frozen=True, eq=False)
class Window:
    """The part of a mesh that each node needs.

    Attributes
    ----------
    shape : (int, int)
        Of the mesh: rows, azimuths.
    rows : ndarray of int, shape (nodes, 2)
        First row, and that after the last.
    """

    shape: tuple[int, int]
    rows: Index


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

    def continued(self, row: int, part: slice, to: Continue, window: Window | None = None) -> Array:
        """Return gap, slope, strength and variance, if any, of one pair, continued, shape (3 or 4, nodes, ...).

        Parameters
        ----------
        row : int
            Of the data.
        part : slice
            Of the nodes.
        to : callable
            From values at the knots to values elsewhere, and with a window's rows to these rows alone.
        window : Window, optional
            Outside it there are zeros.
        """
        where = np.arange(len(self.data.fields))[part]
        columns = 3 if self.data.variance is None else 4
        out = None if window is None else np.zeros((columns, len(where), *window.shape))
        for nodes, kind in self._alike(row, where, window):
            if window is None:
                here, at = to, slice(None)
            else:
                at = slice(int(window.rows[nodes, 0].min()), int(window.rows[nodes, 1].max()))
                here = partial(to, rows=at)
            got = self._group(row, where[nodes], kind, here)
            if out is None:
                out = np.zeros((columns, len(where), *got[0].shape[1:]))
            for column, values in zip(out, got, strict=True):
                column[nodes, at] = values
        return out

    def _alike(self, row: int, where: Index, window: Window | None) -> Iterator[tuple[Index, int]]:
        """Yield positions in `where` of nodes that are continued in one way, and that way; in a window, of like rows.

        The way is the bits of `uses`, and 16 where strengths are made of both, too.
        """
        kind = np.zeros(len(where), dtype=np.intp)
        if self.ladder is not None:
            kind = (self.uses(row)[:, where].transpose(1, 0, 2).reshape(-1, 4) << np.arange(4)).sum(axis=1)
            if kind.any():
                kind = kind + 16 * self._strength_bends(row)[where]
        for one in np.unique(kind):
            alike = np.flatnonzero(kind == one)
            if window is not None:
                rows = window.rows[alike]
                alike, rows = alike[rows[:, 1] > rows[:, 0]], rows[rows[:, 1] > rows[:, 0]]
            first = 0
            for last in range(1, len(alike) + 1):
                if last < len(alike) and (window is None or _share_rows(rows[first : last + 1])):
                    continue
                yield alike[first:last], int(one)
                first = last

    def _group(self, row: int, nodes: Index, kind: int, to: Continue) -> list[Array]:
        """Return gap, slope, strength and variance, if any, at nodes that are all continued in one way."""
        data = self.data
        spread = [] if data.variance is None else [data.variance[row, nodes]]
        if not kind & 15:
            return to_each(to, [data.gap[row, nodes], data.slope[row, nodes], data.strength[row, nodes], *spread])
        pair = [data.pairs[0][row], data.pairs[1][row]]
        used = np.array([[kind >> (2 * side + number) & 1 for number in (0, 1)] for side in (0, 1)], dtype=bool)
        lowers = sorted({pair[number] - 1 + side for side, number in zip(*np.nonzero(used), strict=True)})
        alone = [number for number in (0, 1) if not used[:, number].any()]
        mixed = []
        if kind & 16:
            sides = ((number, number // 2, number % 2) for number in range(4))
            # not the pair's own two levels
            mixed = [
                (number, pair[which] - 1 + side)
                for number, which, side in sides
                if used[side, which] and not (pair[which] - 1 + side == pair[0] and pair[1] == pair[0] + 1)
            ]
        columns, energy, slope = [*spread], self.ladder.energy[nodes], self.ladder.slope[nodes]
        if not mixed:
            columns.append(data.strength[row, nodes])
        most = {}
        for lower in lowers:
            half, turn = (0.5 * (v[:, lower + 1] - v[:, lower]) for v in (energy, slope))
            mean, along = (0.5 * (v[:, lower + 1] + v[:, lower]) for v in (energy, slope))
            columns += [mean, half**2, along, half * turn]
            most[lower] = np.abs(turn).max(axis=1)
        for number in alone:
            columns += [energy[:, pair[number]], slope[:, pair[number]]]
        bounds = []
        for number, lower in mixed:
            mine, other = data.strength[row, nodes], self.ladder.partner(row, number, nodes)
            apart = 0.5 * (energy[:, lower + 1] - energy[:, lower])
            columns += [0.5 * (mine + other), 0.5 * (mine - other) * apart]
            bounds.append(0.5 * np.abs(mine - other).max(axis=1))
        got = iter(to_each(to, columns))
        variance = [next(got) for _ in spread]
        strength = None if mixed else next(got)
        near = {}
        for lower in lowers:
            mean, square, along, product = (next(got) for _ in range(4))
            half = np.sqrt(np.maximum(square, 0.0))
            near[lower] = half, mean, along, _bounded(product, half, most[lower])
        level = [(next(got), next(got)) if number in alone else None for number in (0, 1)]
        for number in (0, 1):
            if level[number] is None:
                one = pair[number]
                sides = [_of_both(near[one - 1 + side], 1 - 2 * side) for side in (0, 1) if used[side, number]]
                level[number] = sides[0][1:] if len(sides) == 1 else _blended(*sides)
        if strength is None:
            total = strength = 0.0
            for (_, lower), bound in zip(mixed, bounds, strict=True):
                mean, product = next(got), next(got)
                half = near[lower][0]
                value = mean + _bounded(product, half, bound)
                if len(mixed) == 1:
                    total, strength = 1.0, value
                else:
                    weight = (half + 1e-6) ** -BLEND
                    total, strength = total + weight, strength + weight * value
            strength = strength / total
        frequency = energy[0, pair[1], 0] - energy[0, pair[0], 0] - data.gap[row, nodes[0], 0]
        return [level[1][0] - level[0][0] - frequency, level[1][1] - level[0][1], strength, *variance]

    def _strength_bends(self, row: int) -> NDArray[np.bool_]:
        """Whether the strength of a pair, too, is better made of both, at each node."""
        if row not in self._bent:
            self._bent[row] = bent = np.zeros(len(self.data.fields), dtype=bool)
            kinds = (self.uses(row).transpose(1, 0, 2).reshape(-1, 4) << np.arange(4)).sum(axis=1)
            for kind in np.unique(kinds[kinds > 0]):
                where = np.flatnonzero(kinds == kind)
                own, share = self.data.strength[row, where], self._closeness(row)[where]
                plain, made = self._to_finer(own), self._group(row, where, int(kind) + 16, self._to_finer)[2]
                missed = [(np.abs(one - own) * share).sum(axis=1) for one in (plain, made)]
                bent[where] = missed[1] < GAIN * missed[0]
        return self._bent[row]


def to_each(to: Continue, columns: list[Array]) -> list[Array]:
    """Continue several arrays of one shape (q, n) at once."""
    got = to(np.concatenate(columns))
    return list(got.reshape(len(columns), -1, *got.shape[1:]))


def _bounded(product: Array, half: Array, most: Array) -> Array:
    """Return a product over half a distance, no larger in size than `most` of each node."""
    most = most.reshape(-1, *[1] * (half.ndim - 1))
    return np.clip(product / np.maximum(half, 1e-9), -most, most)


def _of_both(near: tuple[Array, ...], sign: int) -> tuple[Array, Array, Array]:
    """Return half the distance, energy and slope of the upper (1) or the lower (-1) of two levels."""
    half, mean, along, turn = near
    return (half, mean + half, along + turn) if sign > 0 else (half, mean - half, along - turn)


def _blended(one: tuple[Array, ...], other: tuple[Array, ...]) -> list[Array]:
    """Return energy and slope of a level that nearly crosses two, each with half the distance to it first."""
    share = _share(one[0], other[0])
    return [share * a + (1 - share) * b for a, b in zip(one[1:], other[1:], strict=True)]


def _share_rows(rows: Index) -> bool:
    """Whether nodes want so much the same rows of a mesh, each shape (2,), that they are continued together."""
    return len(rows) * int(rows[:, 1].max() - rows[:, 0].min()) <= WASTE * int((rows[:, 1] - rows[:, 0]).sum())


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
