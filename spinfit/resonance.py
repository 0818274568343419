"""Every resonance field at a fixed microwave frequency, for a list of field directions.

The search halves the field range, all directions at once.  A segment is kept only while the cubic
through its ends (values and Hellmann-Feynman slopes) can reach h nu for some pair of levels; it is
accepted once the newly diagonalised midpoint agrees.  Roots of the quintic through the three
points are then polished by exact diagonalisation at the root.  Level pairs are sorted by energy,
so anticrossings, crossings and looping transitions (several roots of one pair) need no tracking.
"""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np
from numpy.typing import NDArray

from spinfit import hermite
from spinfit.hamiltonian import System
from spinfit.levels import Levels, occupation, solve, zero_field_state

Array = NDArray[np.float64]

ZERO_FIELD = 1e-3
"""mT: where a search from zero field starts; at zero itself Kramers pairs have no definite slopes."""

DEEPEST = 16
"""How often a range may be halved: on symmetry axes levels truly cross and the kink never smooths."""

SAFETY = 0.25
"""Share of its own height by which the reach of a cubic is widened before it is believed."""


@dataclass(frozen=True, eq=False)
class Resonances:
    """A flat list of resonances; every array has shape (r,), sorted by direction, then field.

    Attributes
    ----------
    direction : ndarray of int
        Index into the directions asked for.
    field : ndarray
        mT.
    lower, upper : ndarray of int
        Levels counted from 0 by energy.
    slope : ndarray
        d(E_upper - E_lower)/dB, MHz/mT.
    intensity : ndarray
        |M|^2, (MHz/mT)^2.
    weight : ndarray
        Intensity x population difference / |slope|.
    """

    direction: NDArray[np.intp]
    field: Array
    lower: NDArray[np.intp]
    upper: NDArray[np.intp]
    slope: Array
    intensity: Array
    weight: Array

    def only(self, kept: NDArray[np.bool_]) -> Resonances:
        """Return those that are marked, shape (r,)."""
        return Resonances(**{f.name: getattr(self, f.name)[kept] for f in fields(self)})


def level_pairs(n: int) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
    """Return (lower, upper), each of shape (n(n-1)/2,), of all pairs of n sorted levels."""
    return np.triu_indices(n, 1)


def can_reach(f_a: Array, f_b: Array, d_a: Array, d_b: Array, beyond: float = 0.0) -> NDArray[np.bool_]:
    """Whether the cubic with end values f and end slopes d (per segment length) can come within `beyond` of zero.

    By the convex hull of its Bernstein coefficients and of the point where the tangents at the ends
    meet, which is the tip where levels nearly cross, widened by `SAFETY`.
    """
    inner_a = f_a + d_a / 3
    inner_b = f_b - d_b / 3
    bend = d_a - d_b
    meet = (f_b - d_b - f_a) / np.where(bend != 0, bend, np.inf)
    tip = np.where((meet > 0) & (meet < 1), f_a + d_a * meet, f_a)
    low = np.minimum(np.minimum(np.minimum(f_a, f_b), np.minimum(inner_a, inner_b)), tip)
    high = np.maximum(np.maximum(np.maximum(f_a, f_b), np.maximum(inner_a, inner_b)), tip)
    margin = SAFETY * (high - low) + beyond
    return (low - margin <= 0) & (high + margin >= 0)


def midpoint_error(f_a: Array, f_m: Array, f_b: Array, d_a: Array, d_m: Array, d_b: Array) -> Array:
    """Return how far the cubic through the ends misses the midpoint, in value and in slope.

    Slopes are per segment length.  The slope's miss is turned into a value by the length it acts
    over, a quarter of the segment.
    """
    miss = np.abs(0.5 * (f_a + f_b) + 0.125 * (d_a - d_b) - f_m)
    slope_miss = np.abs(1.5 * (f_b - f_a) - 0.25 * (d_a + d_b) - d_m)
    return np.maximum(miss, 0.25 * slope_miss)


def find(
    system: System,
    directions: Array,
    frequency: float,
    field_range: tuple[float, float],
    *,
    microwave: str | Array = "perpendicular",
    temperature: float | None = None,
    populations: tuple[float, ...] | None = None,
    accuracy: float = 0.5,
) -> Resonances:
    """Find every field in the range at which some pair of levels is h nu apart.

    Parameters
    ----------
    directions : ndarray, shape (d, 3)
        Unit vectors of the static field, molecular axes.
    frequency : float
        MHz.
    field_range : (float, float)
        mT, not negative.
    microwave : str or ndarray, shape (d, 3)
        See `spinfit.levels.solve`.
    temperature : float or None
        K.
    populations : tuple of float, optional
        Of the zero-field sublevels, in place of a temperature (`spinfit.levels.zero_field_state`);
        weights are negative where the upper level holds more.
    accuracy : float
        MHz by which a cubic may miss its midpoint before the segment is halved; the quintic that
        is then used is some hundred times better, and roots are polished besides.

    Returns
    -------
    Resonances
    """
    directions = np.atleast_2d(np.asarray(directions, dtype=float))
    search = _Search(system, directions, frequency, accuracy)
    leaf, pair, t = search.run(max(field_range[0], ZERO_FIELD), field_range[1])
    which = search.leaf_direction[leaf]
    start, length = search.leaf_start[leaf], search.leaf_length[leaf]
    state = None if populations is None else zero_field_state(system, populations)
    asked = (microwave, temperature, state)
    return _polish(system, directions, frequency, field_range, asked, which, pair, start, length, t)


class _Search:
    """The halving search: grows lists of nodes and of accepted leaves."""

    def __init__(self, system: System, directions: Array, frequency: float, accuracy: float) -> None:
        self.system, self.directions = system, directions
        self.frequency, self.accuracy = frequency, accuracy
        self.lower, self.upper = level_pairs(system.h0.shape[0])
        self.leaf_direction = np.empty(0, dtype=np.intp)
        self.leaf_start = self.leaf_length = np.empty(0)
        self.found: list[tuple[NDArray, NDArray, Array]] = []

    def _nodes(self, which: NDArray, fields: Array) -> tuple[Array, Array]:
        got: Levels = solve(self.system, self.directions[which], fields, intensities=False)
        gap = got.energy[:, self.upper] - got.energy[:, self.lower] - self.frequency
        return gap, got.slope[:, self.upper] - got.slope[:, self.lower]

    def run(self, low: float, high: float) -> tuple[NDArray, NDArray, Array]:
        """Return (leaf, pair, t) of every root."""
        d = len(self.directions)
        every = np.arange(d)
        pieces = 2 if len(self.lower) > 1 else 1
        edges = np.linspace(low, high, pieces + 1)
        values = [self._nodes(every, np.full(d, edge)) for edge in edges]
        for k in range(pieces):
            start = np.full(d, edges[k])
            length = np.full(d, edges[k + 1] - edges[k])
            self._halve(every, start, length, values[k], values[k + 1], 0)
        if not self.found:
            return np.empty(0, dtype=np.intp), np.empty(0, dtype=np.intp), np.empty(0)
        leaf, pair, t = (np.concatenate(column) for column in zip(*self.found, strict=True))
        return leaf, pair, t

    def _halve(self, which: NDArray, start: Array, length: Array, a: tuple, b: tuple, depth: int) -> None:
        (f_a, g_a), (f_b, g_b) = a, b
        h = length[:, None]
        reach = can_reach(f_a, f_b, g_a * h, g_b * h)
        keep = reach.any(axis=1)
        if not keep.any():
            return
        which, start, length, reach = which[keep], start[keep], length[keep], reach[keep]
        f_a, g_a, f_b, g_b, h = f_a[keep], g_a[keep], f_b[keep], g_b[keep], h[keep]
        f_m, g_m = self._nodes(which, start + 0.5 * length)
        error = np.where(reach, midpoint_error(f_a, f_m, f_b, g_a * h, g_m * h, g_b * h), 0.0).max(axis=1)
        done = (error <= self.accuracy) | (depth >= DEEPEST)
        if done.any():
            self._accept(
                which[done],
                start[done],
                length[done],
                reach[done],
                np.stack([f_a[done], f_m[done], f_b[done]]),
                np.stack([g_a[done], g_m[done], g_b[done]]),
            )
        more = ~done
        if more.any():
            half = 0.5 * length[more]
            middle = (f_m[more], g_m[more])
            self._halve(which[more], start[more], half, (f_a[more], g_a[more]), middle, depth + 1)
            self._halve(which[more], start[more] + half, half, middle, (f_b[more], g_b[more]), depth + 1)

    def _accept(self, which: NDArray, start: Array, length: Array, reach: NDArray, f: Array, g: Array) -> None:
        first = len(self.leaf_direction)
        self.leaf_direction = np.concatenate([self.leaf_direction, which])
        self.leaf_start = np.concatenate([self.leaf_start, start])
        self.leaf_length = np.concatenate([self.leaf_length, length])
        row, pair = np.nonzero(reach)
        values = f[:, row, pair]
        c = hermite.quintic(values, g[:, row, pair] * (0.5 * length[row]))
        q, low, high = hermite.brackets(c, values)
        self.found.append((first + row[q], pair[q], hermite.refine(c[:, q], low, high)))


def _polish(
    system: System,
    directions: Array,
    frequency: float,
    field_range: tuple[float, float],
    asked: tuple[str | Array, float | None, NDArray | None],
    which: NDArray,
    pair: NDArray,
    start: Array,
    length: Array,
    t: Array,
) -> Resonances:
    """Exact Newton steps at the roots, then slopes and weights there."""
    microwave, temperature, state = asked
    lower, upper = (side[pair] for side in level_pairs(system.h0.shape[0]))
    field = start + 0.5 * length * (t + 1)
    row = np.arange(len(field))
    along = microwave if isinstance(microwave, str) else np.asarray(microwave)[which]
    # a fold has no slope to step along: there the quintic's root stands
    reach = np.minimum(0.02 * length, 0.05)
    for last in (False, True):
        got = solve(system, directions[which], field, microwave=along, intensities=last, state=state if last else None)
        slope = got.slope[row, upper] - got.slope[row, lower]
        step = (frequency - got.energy[row, upper] + got.energy[row, lower]) / np.where(slope != 0, slope, np.inf)
        field = np.where(np.abs(step) <= reach, field + step, field)
    intensity = got.intensity[row, lower, upper]
    p = occupation(got, temperature)
    difference = 1.0 / got.energy.shape[1] if p is None else p[row, lower] - p[row, upper]
    weight = intensity * difference / np.maximum(np.abs(slope), 1e-300)
    inside = (field >= field_range[0]) & (field <= field_range[1])
    order = np.lexsort((upper, lower, field, which))
    order = order[inside[order]]
    return Resonances(*(v[order] for v in (which, field, lower, upper, slope, intensity, weight)))
