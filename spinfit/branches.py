"""Resonances over the whole sphere from few diagonalisations.

Levels, slopes and intensities are computed on knots (a few directions) times nodes (a few fields
shared by all directions).  Along the field every level difference is a chain of quintics; over the
sphere everything is continued from the knots.  `KnotData` holds the numbers (`spinfit.nodes` makes
them), `trace_branches` follows the pairs that have exactly one resonance everywhere.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from spinfit import hermite
from spinfit.broadening import Broadening
from spinfit.resonance import ZERO_FIELD, can_reach
from spinfit.sheets import SMEAR_MOST, SMEAR_REACH, Grain

Array = NDArray[np.float64]
Pairs = tuple[NDArray[np.intp], NDArray[np.intp]]

UNSEEN = 0.02
"""Share of their spread over the knots by which level differences may always go farther between them."""


@dataclass(frozen=True, eq=False)
class Request:
    """What is asked of a powder average.

    Attributes
    ----------
    frequency : float
        MHz.
    low, high : float
        Fields between which every resonance counts, mT.
    grain : Grain
        How far apart in field neighbouring directions of the final sum may lie.
    scale : float
        Length over which the line is smooth, mT.
    tolerance : float
        Of the spectrum, relative to its largest value.
    microwave : str
        "perpendicular" or "parallel".
    temperature : float or None
        K.
    populations : tuple of float or None
        Of the zero-field sublevels, in place of a temperature: strengths may then have either sign.
    broadening : Broadening or None
        What makes the widths of resonances differ.
    weigh : callable or None
        From directions, shape (m, 3), to the share of each in an aligned sample, mean 1.
    """

    frequency: float
    low: float
    high: float
    grain: Grain
    scale: float
    tolerance: float
    microwave: str = "perpendicular"
    temperature: float | None = None
    broadening: Broadening | None = None
    weigh: Callable[[Array], Array] | None = None
    populations: tuple[float, ...] | None = None


@dataclass(frozen=True, eq=False)
class Ladder:
    """All levels on nodes x knots, and the strengths of what stands beside the pairs that matter.

    Attributes
    ----------
    energy, slope : ndarray, shape (k, levels, n)
        MHz; MHz/mT.
    partner : callable
        From a row of the data, a number and nodes, shape (q,), to strengths, shape (q, n): of the pair
        whose lower level is one less (0) or more (1), or whose upper level is one less (2) or more (3).
    """

    energy: Array
    slope: Array
    partner: Callable[[int, int, NDArray[np.intp]], Array]

    def only(self, kept: NDArray[np.intp]) -> Ladder:
        """Return the same at some of the knots."""
        return Ladder(self.energy[:, :, kept], self.slope[:, :, kept], lambda *where: self.partner(*where)[:, kept])


@dataclass(frozen=True, eq=False)
class KnotData:
    """Numbers on nodes x knots.

    Attributes
    ----------
    fields : ndarray, shape (k,)
        Nodes, increasing, mT.
    leaves : ndarray of int, shape (l, 3)
        Node indices of first, middle and last node of each leaf.
    pairs : (lower, upper), each shape (p,)
        Pairs of levels that matter.
    gap, slope : ndarray, shape (p, k, n)
        E_upper - E_lower - h nu, MHz; its slope, MHz/mT.
    strength : ndarray, shape (p, k, n)
        Intensity times population difference.
    variance : ndarray, shape (p, k, n), or None
        Squared FWHM in frequency of each transition's own broadening, MHz^2.
    parents : (lower, upper), or None
        The pairs before weak nuclei split them into the rows that stand here.
    ladder : callable or None
        Makes the levels behind the differences, where rows are pairs of levels.
    order : ndarray of int, shape (k, n, levels), or None
        The place by energy of each level, where levels are ordered by character.
    """

    fields: Array
    leaves: NDArray[np.intp]
    pairs: Pairs
    gap: Array
    slope: Array
    strength: Array
    variance: Array | None = None
    parents: Pairs | None = None
    ladder: Callable[[], Ladder] | None = None
    order: NDArray[np.intp] | None = None


def stencil(nodes: Array, middle: NDArray[np.intp], fields: Array, most: int = 5) -> tuple[NDArray[np.intp], Array]:
    """Return up to `most` nodes about one node for each field, and their Lagrange polynomials there.

    Strengths have no slopes to go by, and a parabola through a leaf's own three nodes is what
    would limit the accuracy.

    Parameters
    ----------
    nodes : ndarray, shape (k,)
    middle : ndarray of int, shape (q,)
        Node about which to interpolate.
    fields : ndarray, shape (q,)

    Returns
    -------
    indices : ndarray of int, shape (s, q)
    basis : ndarray, shape (s, q)
    """
    size = min(most, len(nodes))
    first = np.clip(middle - most // 2, 0, len(nodes) - size)
    indices = first + np.arange(size)[:, None]
    x = nodes[indices]
    away = fields - x
    basis = np.ones(x.shape)
    for i in range(size):
        for j in range(size):
            if i != j:
                basis[i] *= away[j] / (x[i] - x[j])
    return indices, basis


@dataclass(frozen=True, eq=False)
class Branches:
    """Pairs with exactly one resonance at every knot; arrays of shape (p, n).

    `variance` is that of each resonance's own Gaussian broadening, mT^2, or None.
    """

    pair: NDArray[np.intp]
    field: Array
    weight: Array
    slope: Array
    variance: Array | None = None


def between_knots(gap: Array) -> NDArray[np.bool_]:
    """Mark the knots next to a resonance that only directions between the knots have.

    A pair beyond resonance at one knot and short of it at another is resonant on the way from one
    to the other.

    Parameters
    ----------
    gap : ndarray, shape (nodes, ..., n, p)

    Returns
    -------
    ndarray of bool, shape (..., n, p)
        The knot closest to resonance on either side, for pairs that change sign over the sphere.
    """
    low, high = gap.min(axis=0), gap.max(axis=0)
    above, below = np.where(low > 0, low, np.inf), np.where(high < 0, -high, np.inf)
    nearest = above.min(axis=-2, keepdims=True), below.min(axis=-2, keepdims=True)
    both = np.isfinite(nearest[0]) & np.isfinite(nearest[1])
    if not both.any():
        return np.zeros(low.shape, dtype=bool)
    row = np.arange(low.shape[-2])[:, None]
    first = above.argmin(axis=-2, keepdims=True), below.argmin(axis=-2, keepdims=True)
    return both & ((row == first[0]) | (row == first[1]))


FWHM_PER_SIGMA = 2 * math.sqrt(2 * math.log(2))


def count_roots(data: KnotData) -> NDArray[np.intp]:
    """Return the number of sign changes of the gap along the nodes, shape (p, n).

    Leaves that do not touch (nothing can be resonant between them) are separate chains.
    """
    positive = data.gap >= 0
    first, middle, last = (positive[:, nodes] for nodes in data.leaves.T)
    return (first != middle).sum(axis=1) + (middle != last).sum(axis=1)


def touches(data: KnotData) -> NDArray[np.bool_]:
    """Which pairs could be resonant between nodes though they change sign at none."""
    first, middle, last = (data.fields[nodes] for nodes in data.leaves.T)
    gap, slope = ([v[:, nodes] for nodes in data.leaves.T] for v in (data.gap, data.slope))
    out = np.zeros(len(data.gap), dtype=bool)
    for (a, b), h in (((0, 1), middle - first), ((1, 2), last - middle)):
        h = h[:, None]
        out |= can_reach(gap[a], gap[b], slope[a] * h, slope[b] * h).any(axis=(1, 2))
    return out


def in_sight(data: KnotData, rows: NDArray[np.intp], request: Request) -> NDArray[np.bool_]:
    """Which of the given rows can be resonant where it is seen, shape (rows,).

    Resonances are followed farther out than a line reaches, so that smears near the edges of the range
    find both sides; a pair that is resonant in no direction but out there adds nothing.
    """
    if request.broadening is not None or not len(rows):
        return np.ones(len(rows), dtype=bool)
    margin = SMEAR_REACH * SMEAR_MOST * request.scale
    low = request.low + margin if request.low > ZERO_FIELD else 0.0
    high = request.high - margin
    nodes = data.fields[data.leaves]
    half = 0.5 * (nodes[:, 2] - nodes[:, 0])[:, None]
    gap, slope = (np.moveaxis(v[rows][:, data.leaves], 2, 0) for v in (data.gap, data.slope))
    c = hermite.quintic(gap, slope * half)
    t = hermite.SAMPLES
    values = np.sort([hermite.value(c, one) for one in t], axis=-1)
    # between the knots they go little farther than at them: by no more than to the third of the outermost
    third = min(2, values.shape[-1] - 1)
    spread = UNSEEN * (values[..., -1] - values[..., 0])
    least = values[..., 0] - np.maximum(values[..., third] - values[..., 0], spread)
    most = values[..., -1] + np.maximum(values[..., -1] - values[..., -1 - third], spread)
    possible = (np.minimum(least[1:], least[:-1]) <= 0) & (np.maximum(most[1:], most[:-1]) >= 0)
    ends = nodes[:, 1] + t[:, None] * half[:, 0]
    seen = (ends[1:] >= low) & (ends[:-1] <= high)
    return (possible & seen[:, None]).any(axis=(0, 2))


def trace_branches(data: KnotData, chosen: NDArray[np.intp]) -> Branches:
    """Solve the one root of each chosen pair at each knot.

    Parameters
    ----------
    chosen : ndarray of int, shape (q,)
        Rows of `data` with exactly one sign change at every knot.
    """
    n = data.gap.shape[2]
    shape = (len(chosen), n)
    if not len(chosen):
        empty = np.empty(shape)
        return Branches(chosen, empty, empty, empty, None if data.variance is None else empty)
    positive = data.gap[chosen] >= 0
    first, middle, last = data.leaves.T
    early = positive[:, first] != positive[:, middle]
    number = np.argmax(early | (positive[:, middle] != positive[:, last]), axis=1).ravel()
    row, knot = np.repeat(chosen, n), np.tile(np.arange(n), len(chosen))
    left = np.take_along_axis(early, number.reshape(len(chosen), 1, n), axis=1).ravel()
    leaf = data.leaves[number].T
    half = 0.5 * (data.fields[leaf[2]] - data.fields[leaf[0]])
    c = hermite.quintic(data.gap[row, leaf, knot], data.slope[row, leaf, knot] * half)
    t = hermite.refine(c, np.where(left, -1.0, 0.0), np.where(left, 0.0, 1.0), 4)
    field = data.fields[leaf[1]] + half * t
    slope = hermite.slope(c, t) / half
    steep = np.maximum(np.abs(slope), 1e-300)
    nodes, basis = stencil(data.fields, leaf[1], field)
    weight = (basis * data.strength[row, nodes, knot]).sum(axis=0) / steep
    variance = None
    if data.variance is not None:
        variance = (basis * data.variance[row, nodes, knot]).sum(axis=0) / (steep * FWHM_PER_SIGMA) ** 2
        variance = variance.reshape(shape)
    return Branches(chosen, field.reshape(shape), weight.reshape(shape), slope.reshape(shape), variance)


def parabola(s: Array, t: Array) -> Array:
    """Return the parabola through values s, shape (3, ...), at t = -1, 0, 1, evaluated at t."""
    return s[1] + t * (0.5 * (s[2] - s[0]) + t * (0.5 * (s[2] + s[0]) - s[1]))


FLAT = 8.0
"""MHz/mT, about a quarter of a free spin's slope."""


def steepness(data: KnotData) -> float:
    """Return how steeply strong level differences rise at the least, MHz/mT; folds count as `FLAT`."""
    if not data.slope.size:
        return FLAT
    strong = np.abs(data.strength) > 0.05 * np.abs(data.strength).max()
    return max(FLAT, float(np.quantile(np.abs(data.slope[strong]), 0.05)))
