"""One level difference over the points of a mesh: what the sums over it need, and where.

A resonance passes through a few nodes at each direction, and through a part of the sphere at each node.
Only these parts of the mesh are looked at; and the finest mesh is made from every second of its points,
between which a polynomial is exact enough, for continuing from the knots is what costs most.  Along one
meridian it costs little, and the mesh is continued as a whole.

What is done at every point exists twice: here in numpy, and compiled in `spinfit.loop_kernels`.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from spinfit import kernels, loop_kernels
from spinfit.branches import FWHM_PER_SIGMA
from spinfit.orientations import Mesh
from spinfit.sheets import differences

Array = NDArray[np.float64]
Index = NDArray[np.intp]

TAPS = 5
"""Nodes by which strengths are interpolated along the field."""
MIDDLE = np.array([3.0, -25.0, 150.0, 150.0, -25.0, 3.0]) / 256
"""Shares of six equidistant values in the polynomial through them, at their middle."""


@dataclass(frozen=True, eq=False)
class Landscape:
    """One level difference over the points of a mesh.

    Attributes
    ----------
    fields : ndarray, shape (k,)
        Nodes, mT.
    leaves : ndarray of int, shape (l, 3)
    gap, slope, strength : ndarray, shape (k, points)
        As in `KnotData`.
    bend : ndarray, shape (k, points)
        Change of the slope along the field, MHz/mT^2; continuous, unlike that of the quintics.
    along, around : ndarray, shape (k, points)
        Differences of the gap between neighbours along theta and phi, MHz.
    own : ndarray, shape (k, points), or (0, points) where all widths are alike
        Variance of the resonance's own Gaussian in frequency, MHz^2.
    weights : ndarray, shape (points,)
        Shares of the solid angle.
    rows : ndarray of int, shape (l, 2)
        Rows of the mesh in which each leaf is looked at: the first, and that after the last.
    azimuths : int
        Points of a row.
    """

    fields: Array
    leaves: Index
    gap: Array
    slope: Array
    strength: Array
    bend: Array
    along: Array
    around: Array
    own: Array
    weights: Array
    rows: Index
    azimuths: int

    @property
    def points(self) -> Index:
        """Points in which each leaf is looked at, shape (l, 2)."""
        return self.rows * self.azimuths

    @property
    def broad(self) -> bool:
        """Whether resonances have widths of their own."""
        return len(self.own) > 0

    @classmethod
    def of(
        cls,
        fields: Array,
        leaves: Index,
        values: Array,
        mesh: Mesh,
        view: View | None = None,
        scratch: Scratch | None = None,
        some: slice = slice(None),
    ) -> Landscape:
        """Build from gap, slope, strength and squared FWHM, if any, on rows of a mesh: (3 or 4, k, rows, azimuths).

        Outside a view, and with a scratch to write to, arrays hold anything.
        """
        k, azimuths = len(fields), values.shape[3]
        gap, slope = values[:2]
        if view is None:
            rows = np.tile(np.array([0, values.shape[2]]), (len(leaves), 1))
            steps, bend = differences(gap, mesh), np.gradient(slope, fields, axis=0)
        else:
            rows = view.leaves
            *steps, bend = surroundings(fields, gap, slope, mesh, view.nodes, scratch)
        own = np.maximum(values[3:], 0.0) / FWHM_PER_SIGMA**2
        flat = (v.reshape(k, -1) for v in (gap, slope, values[2], bend, *steps))
        own = own.reshape(-1, values.shape[2] * azimuths)
        return cls(fields, leaves, *flat, own, mesh.weights()[some].ravel(), rows, azimuths)


class Scratch:
    """Memory that one mesh after another is written to: touching new memory costs more than what is written."""

    def __init__(self) -> None:
        self._held: dict[str, Array] = {}

    def take(self, name: str, shape: tuple[int, ...]) -> Array:
        """Return an array with whatever the last one of this name left in it."""
        size = math.prod(shape)
        if len(self._held.get(name, ())) < size:
            self._held[name] = np.zeros(size)
        return self._held[name][:size].reshape(shape)


class View(NamedTuple):
    """The rows of a mesh in which a pair of levels can be resonant: (first, after the last) of each.

    Attributes
    ----------
    leaves : ndarray of int, shape (l, 2)
    nodes : ndarray of int, shape (k, 2)
        With what is needed about them, to interpolate and to take differences.
    """

    leaves: Index
    nodes: Index

    @classmethod
    def of(cls, reach: Array, leaves: Index, nodes: int, thetas: int, stride: int = 1) -> View:
        """Build from the share of the meridian that each leaf reaches over, first and last, shape (l, 2).

        `stride` is how many intervals of the mesh's rows are left out at the most in a coarser one; ends of
        rows are its multiples.
        """
        some = reach[:, 1] >= reach[:, 0]
        ends = reach * (thetas / stride)
        rows = stride * np.stack([np.floor(ends[:, 0]), np.ceil(ends[:, 1])], axis=1).astype(np.intp)
        around = 2 * stride  # what differences and midpoints need
        wide = np.tile(np.array([thetas + 1, 0]), (nodes, 1))
        for (first, middle, last), (low, high) in zip(leaves[some], rows[some], strict=True):
            start = min(max(middle - TAPS // 2, 0), max(0, nodes - TAPS))
            part = slice(max(0, min(first, start) - 1), max(last + 1, min(nodes, start + TAPS)) + 1)
            wide[part, 0] = np.minimum(wide[part, 0], max(0, low - around))
            wide[part, 1] = np.maximum(wide[part, 1], min(thetas, high + around) + 1)
        wide[wide[:, 1] <= wide[:, 0]] = 0
        rows[:, 1] += 1
        rows[~some] = 0
        return cls(rows, wide)

    def bands(self, rows: int, height: int) -> Iterator[tuple[View, slice]]:
        """Yield views of a few rows at a time, counted from the first of the rows that these need, and those rows.

        Parameters
        ----------
        rows : int
            Of the mesh.
        height : int
            Rows of a band.
        """
        low, high = self.leaves.min(initial=rows, where=self._some(self.leaves)), self.leaves.max(initial=0)
        for first in range(int(low), int(high), height):
            last = min(first + height, int(high))
            needed = slice(max(0, first - 1), min(rows, last + 1))
            parts = (np.clip(self.leaves, first, last), np.clip(self.nodes, needed.start, needed.stop))
            yield View(*((one - needed.start) * self._some(one) for one in parts)), needed

    @staticmethod
    def _some(rows: Index) -> NDArray[np.bool_]:
        return rows[:, 1:] > rows[:, :1]

    def every(self, stride: int) -> View:
        """Return the same for the mesh of every `stride`-th row."""
        return View(*((one + np.array([0, stride - 1])) // stride for one in self))


def surroundings(
    fields: Array, gap: Array, slope: Array, mesh: Mesh, rows: Index, scratch: Scratch | None = None
) -> tuple[Array, Array, Array]:
    """Return differences of the gap along theta and phi and the bend of a `Landscape`, each shape (k, rows, azimuths).

    Parameters
    ----------
    gap, slope : ndarray, shape (k, thetas + 1, azimuths)
    rows : ndarray of int, shape (k, 2)
        Of each node, the first and that after the last; elsewhere there are zeros.
    scratch : Scratch, optional
        To write to; elsewhere there is anything then.
    """
    if kernels.COMPILED:
        out = (Scratch() if scratch is None else scratch).take("surroundings", (3, *gap.shape))
        loop_kernels.surroundings(_gradients(fields), gap, slope, rows, mesh.kind == "octant", out)
        return out[0], out[1], out[2]
    return surroundings_numpy(fields, gap, slope, mesh, rows)


def surroundings_numpy(fields: Array, gap: Array, slope: Array, mesh: Mesh, rows: Index) -> tuple[Array, Array, Array]:
    """Do the same in numpy."""
    along, around, bend = (np.zeros(gap.shape) for _ in range(3))
    shares = _gradients(fields)
    for node, some in enumerate(slice(*of) for of in rows):
        if some.start < some.stop:
            along[node, some], around[node, some] = differences(gap[node, some], mesh)
            for place, share in zip((node - 1, node, node + 1), shares[node], strict=True):
                if share:
                    bend[node, some] += share * slope[place, some]
    return along, around, bend


def _gradients(fields: Array) -> Array:
    """Return the shares of the nodes before, at and after each node in the gradient there, as `numpy.gradient`."""
    out = np.zeros((len(fields), 3))
    if len(fields) > 1:
        h = np.diff(fields)
        before, after = h[:-1], h[1:]
        out[1:-1] = np.stack(
            [-after / (before * (before + after)), 1 / before - 1 / after, before / (after * (before + after))], axis=1
        )
        out[0, 1:] = -1 / h[0], 1 / h[0]
        out[-1, :2] = -1 / h[-1], 1 / h[-1]
    return out


def doubled(
    values: Array, mesh: Mesh, rows: Index, scratch: Scratch | None = None, some: slice | None = None
) -> Array:
    """Return values on a mesh, or some of its rows, from those at every second of its points.

    Parameters
    ----------
    values : ndarray, shape (columns, k, thetas / 2 + 1, azimuths of half as many intervals)
    mesh : Mesh
        The finer one.
    rows : ndarray of int, shape (k, 2)
        Of each node, the first that is wanted, counted from the first of `some`, and that after the last;
        elsewhere there are zeros.
    scratch : Scratch, optional
        To write to; elsewhere there is anything then.

    Returns
    -------
    ndarray, shape (columns, k, rows, azimuths)
    """
    some = slice(0, mesh.thetas + 1) if some is None else some
    if not kernels.COMPILED:
        return doubled_numpy(values, mesh, rows, some)
    scratch = Scratch() if scratch is None else scratch
    out = scratch.take("doubled", (*values.shape[:2], some.stop - some.start, len(mesh.phi())))
    opposite = len(mesh.phi()) // 2 if mesh.kind == "half" else 0
    loop_kernels.doubled(values, rows, some.start, mesh.kind == "octant", opposite, MIDDLE, out)
    return out


def doubled_numpy(values: Array, mesh: Mesh, rows: Index, some: slice) -> Array:
    """Do the same in numpy."""
    if mesh.kind != "axial":
        ends = {"mode": "reflect"} if mesh.kind == "octant" else {"mode": "wrap"}
        values = _between(values, 3, np.pad(values, [(0, 0)] * 3 + [(2, 3)], **ends))
        values = values[..., : len(mesh.phi())]
    padded = np.pad(values, [(0, 0), (0, 0), (2, 3), (0, 0)], mode="reflect")
    if mesh.kind == "half":  # beyond a pole or the equator, the direction opposite, or its inverse, is another azimuth
        turned = np.roll(padded, values.shape[3] // 2, axis=3)
        padded[:, :, :2], padded[:, :, -3:] = turned[:, :, :2], turned[:, :, -3:]
    out = _between(values, 2, padded)[:, :, some]
    for node, (first, last) in enumerate(rows):
        out[:, node, :first] = out[:, node, last:] = 0.0
    return out


def _between(values: Array, axis: int, padded: Array) -> Array:
    """Return values and, after each, that in the middle of it and the next; padded by 2 before and 3 after."""
    count = values.shape[axis]
    middle = sum(share * np.take(padded, range(i, i + count), axis) for i, share in enumerate(MIDDLE))
    both = np.stack([values, middle], axis=axis + 1)
    return both.reshape(*values.shape[:axis], 2 * count, *values.shape[axis + 1 :])
