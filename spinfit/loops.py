"""Pairs of levels whose resonances come and go over the sphere: looping transitions, swept edges.

Between one pair of levels there may be none to several resonances, and their number changes with
direction.  At such a fold the weight diverges as 1/sqrt(distance), so sums over directions and
matching of roots both fail.  The level difference itself is smooth there.  It is continued from the
knots to a mesh at shared fields; away from folds its roots form sheets (`spinfit.sheets`), and
triangles at whose corners the number of roots differs are projected, field by field, onto the
frequency axis.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from spinfit import hermite
from spinfit.branches import KnotData, Request, parabola, stencil
from spinfit.orientations import Mesh, Rings
from spinfit.resonance import can_reach
from spinfit.sheets import (
    RICHARDSON,
    Histograms,
    add_points,
    add_spread,
    cells,
    differences,
    fold_density,
    point_share,
)

Array = NDArray[np.float64]
Index = NDArray[np.intp]


SLICES = 12
"""Fields at which a folded simplex is projected, at the least."""
FOLDING = 1.5
"""Ratio of slopes along the field between the corners of a simplex above which it counts as folded."""


@dataclass(frozen=True, eq=False)
class _Landscape:
    """One level difference over mesh points, as quintics along the field; arrays (nodes, points)."""

    fields: Array
    leaves: Index
    gap: Array
    slope: Array
    strength: Array
    steps: Array  # (2, nodes, points): differences of the gap to the neighbours along theta and phi

    def quintic(self, leaf: Index, point: Index) -> tuple[Array, Array]:
        """Return coefficients (6, n) and half lengths (n,) on the given leaf of each point."""
        nodes = self.leaves[leaf].T
        half = 0.5 * (self.fields[nodes[2]] - self.fields[nodes[0]])
        return hermite.quintic(self.gap[nodes, point], self.slope[nodes, point] * half), half

    def along(self, leaf: Index, point: Index, t: Array) -> tuple[Array, Array]:
        """Return strength and step of the gap between neighbouring points, at t of each leaf."""
        nodes = self.leaves[leaf].T
        steps = self.steps[:, nodes, point]
        apart = np.hypot(parabola(steps[0], t), parabola(steps[1], t))
        half = 0.5 * (self.fields[nodes[2]] - self.fields[nodes[0]])
        indices, basis = stencil(self.fields, nodes[1], self.fields[nodes[1]] + half * t)
        strength = (basis * self.strength[indices, point]).sum(axis=0)
        return strength, apart


@dataclass(frozen=True, eq=False)
class _Roots:
    """Roots on the mesh by rank: arrays (ranks, points), zero where absent.

    `extent` is how far in field the sheet can run within one step of the mesh, mT.
    """

    count: Index
    rising: NDArray[np.bool_]
    field: Array
    weight: Array
    share: Array
    apart: Array
    extent: Array
    steep: Array


def add_looping(histograms: Histograms, rings: Rings, mesh: Mesh, data: KnotData, row: int, request: Request) -> int:
    """Add one pair of levels, row `row` of `data`; return the number of roots used."""
    k = len(data.fields)
    values = rings.to_mesh_locally(np.concatenate([data.gap[row], data.slope[row], data.strength[row]]), mesh)
    gap, slope, strength = values.reshape(3, k, *values.shape[1:])
    steps = differences(gap, mesh).reshape(2, k, -1)
    land = _Landscape(
        data.fields, data.leaves, gap.reshape(k, -1), slope.reshape(k, -1), strength.reshape(k, -1), steps
    )
    roots = _solve(land, request)
    present = np.arange(len(roots.field))[:, None] < roots.count
    for rank in range(len(roots.field)):
        columns = (roots.field[rank], roots.weight[rank], roots.apart[rank], roots.share[rank])
        add_points(histograms, mesh, *columns, request.grain)
    spread = np.where(present, roots.weight * (1 - roots.share), 0.0)
    for stride, factor in RICHARDSON:
        corners, part = cells(mesh, stride)
        count = roots.count[corners]
        same = (count == count[0]).all(axis=0) & (roots.rising[corners] == roots.rising[corners[0]]).all(axis=0)
        for rank in range(len(roots.field)):  # next to a fold the weight is far from linear
            steep = roots.steep[rank][corners]
            same &= (count[0] <= rank) | (steep.max(axis=0) <= FOLDING * steep.min(axis=0))
        for rank in range(len(roots.field)):
            whole = same & (count[0] > rank)
            add_spread(histograms, roots.field[rank], spread[rank], corners[:, whole], part[whole], factor)
        folded = np.flatnonzero(~same)
        if len(folded):
            _add_folded(histograms, land, roots, corners[:, folded], factor * part[folded], request)
    return int(roots.count.sum())


def _solve(land: _Landscape, request: Request) -> _Roots:
    points = land.gap.shape[1]
    found = []
    for number, leaf in enumerate(land.leaves):
        half = 0.5 * (land.fields[leaf[2]] - land.fields[leaf[0]])
        f, g = land.gap[leaf], land.slope[leaf] * half
        near = can_reach(f[0], f[1], g[0], g[1]) | can_reach(f[1], f[2], g[1], g[2])
        at = np.flatnonzero(near)
        if not len(at):
            continue
        c = hermite.quintic(f[:, at], g[:, at])
        q, low, high = hermite.brackets(c, f[:, at])
        t = hermite.refine(c[:, q], low, high)
        found.append((at[q], np.full(len(q), number), t))
    if not found:
        empty = np.zeros((0, points))
        return _Roots(np.zeros(points, dtype=np.intp), np.zeros(points, dtype=bool), *([empty] * 6))
    point, leaf, t = (np.concatenate(c) for c in zip(*found, strict=True))
    c, half = land.quintic(leaf, point)
    slope = hermite.slope(c, t) / half
    strength, apart = land.along(leaf, point, t)
    field = land.fields[land.leaves[leaf, 1]] + half * t
    steep = np.maximum(np.abs(slope), 1e-9)
    distance = apart / steep
    share = point_share(distance, request.grain.far)
    # at a fold the slope vanishes and the curvature bounds how far the sheet runs
    bend = np.abs(hermite.curvature(c, t)) / half**2
    extent = 2 * np.minimum(distance, np.sqrt(2 * apart / np.maximum(bend, 1e-12)))
    order = np.lexsort((field, point))
    columns = (point, field, strength / steep, share, distance, extent, steep, slope)
    point, field, weight, share, distance, extent, steep, slope = (v[order] for v in columns)
    count = np.bincount(point, minlength=points)
    first = np.cumsum(count) - count
    rank = np.arange(len(point)) - first[point]
    shape = (int(count.max(initial=0)), points)
    out = [np.zeros(shape) for _ in range(6)]
    for into, values in zip(out, (field, weight, share, distance, extent, steep), strict=True):
        into[rank, point] = values
    rising = np.zeros(points, dtype=bool)
    rising[point[rank == 0]] = slope[rank == 0] > 0
    return _Roots(count, rising, *out)


def _add_folded(
    histograms: Histograms, land: _Landscape, roots: _Roots, corners: Index, part: Array, request: Request
) -> None:
    """Project simplices at whose corners the number of roots differs, field by field."""
    present = np.arange(len(roots.field))[:, None, None] < roots.count[corners]
    at_corners = roots.field[:, corners]
    low = np.where(present, at_corners, np.inf).min(axis=(0, 1))
    high = np.where(present, at_corners, -np.inf).max(axis=(0, 1))
    reach = np.where(present, roots.extent[:, corners], 0.0).max(axis=(0, 1)) + 0.1 * (high - low)
    low, high = np.maximum(low - reach, request.low), np.minimum(high + reach, request.high)
    # enough fields for every simplex on its own: its neighbours may be summed in another way
    number = np.maximum(np.ceil((high - low) / (request.grain.close / 3)), SLICES).astype(np.intp)
    step = (high - low) / number
    which = np.repeat(np.arange(len(number)), number)
    offset = np.arange(len(which)) - np.repeat(np.cumsum(number) - number, number)
    fields = low[which] + (offset + 0.5) * step[which]
    starts = land.fields[land.leaves[:, 0]]
    leaf = np.clip(np.searchsorted(starts, fields, side="right") - 1, 0, len(starts) - 1)
    inside = fields <= land.fields[land.leaves[leaf, 2]]
    which, fields, leaf = which[inside], fields[inside], leaf[inside]
    part = part[which] * step[which]
    for start in range(0, len(which), 200_000):
        block = slice(start, start + 200_000)
        _project(histograms, land, corners[:, which[block]], part[block], fields[block], leaf[block], request)


def _project(
    histograms: Histograms,
    land: _Landscape,
    corners: Index,
    part: Array,
    fields: Array,
    leaf: Index,
    request: Request,
) -> None:
    many = np.broadcast_to(leaf, corners.shape).ravel()
    flat = corners.ravel()
    c, half = land.quintic(many, flat)
    t = (np.broadcast_to(fields, corners.shape).ravel() - land.fields[land.leaves[many, 1]]) / half
    gap = hermite.value(c, t)
    steep = np.maximum(np.abs(hermite.slope(c, t)) / half, 1e-9)
    strength, apart = land.along(many, flat, t)
    spread = strength * (1 - point_share(apart / steep, request.grain.far))
    density = fold_density(gap.reshape(corners.shape), spread.reshape(corners.shape), part)
    hit = density != 0
    histograms.points(fields[hit], density[hit])
