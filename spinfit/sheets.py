"""Summing resonances over a mesh of directions without its grain showing.

A sheet is one resonance field as a function on the mesh.  Where neighbouring directions lie closer
in field than the line is wide, the plain weighted sum converges exponentially and is used; where
the field changes faster, each triangle of the mesh (each interval, in one dimension) is spread over
the fields between its corners, as if the field were linear in it.  A smooth share u divides every
point between the two, so that neither sees an edge.  Where sheets end (the fold of a looping
transition) neither works, because the weight diverges; `add_folded` there projects the triangle at
each field onto the frequency axis, which has no singularity.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from spinfit.lineshape import FieldGrid
from spinfit.orientations import Mesh

Array = NDArray[np.float64]
Cells = tuple[NDArray[np.intp], Array]


class Histograms:
    """Deposits by order (see `FieldGrid.coefficients`) on one grid, mirrored where it spans zero field."""

    def __init__(self, grid: FieldGrid) -> None:
        self.grid = grid
        self.orders: dict[int, Array] = {0: np.zeros(grid.count)}

    def _add(self, order: int, fields: Array, weights: Array) -> None:
        into = self.orders.setdefault(order, np.zeros(self.grid.count))
        into += self.grid.deposit(fields, weights)

    def points(self, fields: Array, weights: Array) -> None:
        """Add resonances at `fields` with `weights`, both of one shape."""
        self._add(0, fields, weights)
        if self.grid.start < 0:
            self._add(0, -fields, weights)

    def simplices(self, corners: Array, mass: Array) -> None:
        """Spread each mass over the fields between its corners.

        The density of a linear function over a simplex is the divided difference of a power of
        the ramp (H. B. Curry, I. J. Schoenberg, J. Anal. Math. 17, 71 (1966)): a box for an
        interval, a tent for a triangle.  Its first (second) derivative is a sum of delta
        functions at the corners, which is what is deposited.

        Parameters
        ----------
        corners : ndarray, shape (2, n) or (3, n)
            mT.
        mass : ndarray, shape (n,)
        """
        self._spread(corners, mass)
        if self.grid.start < 0:
            self._spread(-corners, mass)

    def _spread(self, corners: Array, mass: Array) -> None:
        grid = self.grid
        edge = 3 * grid.step
        b = np.sort(np.clip(corners, grid.start + edge, grid.start + (grid.count - 4) * grid.step), axis=0)
        least = 1e-3 * grid.step  # corners that coincide are held apart: their deltas would be infinite
        b[1] = np.maximum(b[1], b[0] + least)
        if len(b) == 2:
            height = mass / (b[1] - b[0])
            self._add(1, b.ravel(), np.concatenate([height, -height]))
            return
        b[2] = np.maximum(b[2], b[1] + least)
        d01, d12, d02 = b[1] - b[0], b[2] - b[1], b[2] - b[0]
        first = 2 * mass / (d01 * d02)
        last = 2 * mass / (d12 * d02)
        self._add(2, b.ravel(), np.concatenate([first, -first - last, last]))


RICHARDSON = ((1, 4 / 3), (2, -1 / 3))
"""Strides and factors: linear simplices err as the square of the step, which two meshes cancel."""


@lru_cache(maxsize=64)
def cells(mesh: Mesh, stride: int = 1) -> Cells:
    """Return the simplices of a mesh, or of its every second point in both directions.

    Returns
    -------
    corners : ndarray of int, shape (3, n) or (2, n)
        Flat indices of the points.
    share : ndarray, shape (n,)
        Share of the solid angle; sums to 1.
    """
    theta = np.linspace(0, 0.5 * np.pi, mesh.thetas // stride + 1)
    cos, sin, h = np.cos(theta), np.sin(theta), theta[1]
    row = np.arange(0, mesh.thetas, stride)
    if mesh.kind == "axial":
        return np.stack([row, row + stride]), cos[:-1] - cos[1:]
    columns = len(mesh.phi())
    last = columns - 1 if mesh.kind == "octant" else columns
    i, j = np.meshgrid(row, np.arange(0, last, stride), indexing="ij")
    count = last // stride
    below, k = i + stride, (j + stride) % columns
    a, b, c, d = i * columns + j, i * columns + k, below * columns + j, below * columns + k
    whole = cos[:-1] - cos[1:]
    # in (theta, phi) the lower triangle has weight int (theta - theta_i)/h sin(theta) dtheta
    lower = -cos[1:] + (sin[1:] - sin[:-1]) / h
    share = np.repeat(np.stack([lower, whole - lower]), count, axis=1) / count
    corners = np.stack([np.stack([a, c, d]), np.stack([a, d, b])], axis=1)
    return corners.reshape(3, -1), share.ravel()


def spacing(values: Array, mesh: Mesh) -> Array:
    """Return how far apart neighbouring points of a mesh lie in value, same shape (..., T+1, F)."""
    along = np.abs(_central(values, -2, False))
    if mesh.kind == "axial":
        return along
    around = np.abs(_central(values, -1, mesh.kind != "octant"))
    return np.hypot(along, around)


def differences(values: Array, mesh: Mesh) -> Array:
    """Return the signed central differences along theta and phi, shape (2, ..., T+1, F)."""
    along = _central(values, -2, False)
    if mesh.kind == "axial":
        return np.stack([along, np.zeros_like(along)])
    return np.stack([along, _central(values, -1, mesh.kind != "octant")])


def _central(values: Array, axis: int, periodic: bool) -> Array:
    if periodic:
        return 0.5 * (np.roll(values, -1, axis) - np.roll(values, 1, axis))
    v = np.moveaxis(values, axis, 0)
    out = np.empty_like(v)
    out[1:-1] = 0.5 * (v[2:] - v[:-2])
    # even about both ends: the difference there is a curvature, half a step away
    out[0], out[-1] = 0.5 * (v[1] - v[0]), 0.5 * (v[-1] - v[-2])
    return np.moveaxis(out, 0, axis)


def point_share(apart: Array, allowed: float) -> Array:
    """Return u, the share of a point that the plain sum takes: 1 for close neighbours, 0 for far ones.

    Parameters
    ----------
    apart : ndarray
        Distance in field to the neighbours, mT.
    allowed : float
        Distance up to which the plain sum is accurate, mT.
    """
    x = np.clip((apart / allowed - 0.25) / 0.75, 0.0, 1.0)
    return 1.0 - x * x * x * (10 + x * (6 * x - 15))


def add_points(histograms: Histograms, mesh: Mesh, fields: Array, weights: Array, share: Array) -> None:
    """Add the plain sum's share of one sheet; all arrays of shape (points,)."""
    direct = share > 0
    histograms.points(fields[direct], (weights * share * mesh.weights().ravel())[direct])


def add_spread(
    histograms: Histograms, fields: Array, spread: Array, corners: NDArray[np.intp], part: Array, factor: float
) -> None:
    """Add the simplices' share of one sheet.

    Parameters
    ----------
    fields, spread : ndarray, shape (points,)
        Resonance field and weight x (1 - u).
    corners, part : ndarrays
        Simplices over which the sheet is whole, as from `cells`.
    factor : float
        Of this mesh, see `RICHARDSON`.
    """
    keep = (spread[corners] != 0).any(axis=0)
    if keep.any():
        corners = corners[:, keep]
        histograms.simplices(fields[corners], factor * spread[corners].mean(axis=0) * part[keep])


def fold_density(gap: Array, strength: Array, share: Array) -> Array:
    """Return the integral of strength x delta(gap) over each simplex with linear gap and strength.

    Parameters
    ----------
    gap, strength : ndarray, shape (2, n) or (3, n)
        At the corners.
    share : ndarray, shape (n,)
        The simplex's share of the solid angle.

    Returns
    -------
    ndarray, shape (n,)
        Zero where the gap does not change sign.
    """
    order = np.argsort(gap, axis=0)
    v = np.take_along_axis(gap, order, axis=0)
    s = np.take_along_axis(strength, order, axis=0)
    tiny = 1e-300
    if len(gap) == 2:
        crossed = (v[0] < 0) & (v[1] >= 0)
        x = -v[0] / np.maximum(v[1] - v[0], tiny)
        return np.where(crossed, share * (s[0] + (s[1] - s[0]) * x) / np.maximum(v[1] - v[0], tiny), 0.0)
    early = (v[0] < 0) & (v[1] >= 0)
    late = (v[1] < 0) & (v[2] >= 0)
    tip = np.where(early, v[0], v[2])
    tip_s = np.where(early, s[0], s[2])
    other = np.where(early, v[2], v[0])
    other_s = np.where(early, s[2], s[0])
    to_middle = np.where(v[1] != tip, v[1] - tip, tiny)
    to_other = np.where(other != tip, other - tip, tiny)
    x, y = -tip / to_middle, -tip / to_other
    mean = tip_s + 0.5 * ((s[1] - tip_s) * x + (other_s - tip_s) * y)
    return np.where(early | late, 2 * share * np.abs(tip) / np.abs(to_middle * to_other) * mean, 0.0)
