"""The powder average: from knots on the sphere to histograms of resonance fields.

Knots are refined until continuing from every second ring already predicts the rest to the promised
tolerance.  Pairs of levels with one resonance in every direction are continued as fields and
weights (as B^-2 and W B^-3, which are exact for a pure Zeeman doublet); pairs whose resonances
appear, vanish or loop are continued as level differences and solved on the mesh.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from spinfit.branches import Branches, KnotData, Request, trace_branches
from spinfit.hamiltonian import System
from spinfit.knots import continued, restored, settle
from spinfit.lineshape import FieldGrid
from spinfit.loops import add_looping
from spinfit.orientations import Mesh, Rings, symmetry_of
from spinfit.resonance import find
from spinfit.sheets import RICHARDSON, Histograms, add_points, add_spread, cells, point_share, spacing

Array = NDArray[np.float64]

FLATNESS = 0.25
"""Root of the curvature of a field over one step of the mesh, in line widths, at the default tolerance."""
LARGEST_LINE = 200_000
"""Points of a one-dimensional mesh."""


@dataclass
class Report:
    """What the powder average used."""

    symmetry: str
    rings: int = 0
    directions: int = 0
    diagonalisations: int = 0
    pairs: int = 0
    looping: int = 0
    mesh_points: int = 0
    estimated_error: float = 0.0
    notes: list[str] = field(default_factory=list)


def powder(system: System, request: Request, grid: FieldGrid) -> tuple[dict[int, Array], Report]:
    """Return histograms of resonance fields averaged over all directions.

    Parameters
    ----------
    system : System
    request : Request
    grid : FieldGrid
        Where resonances are deposited.

    Returns
    -------
    histograms : dict of int -> ndarray, shape (grid.count,)
        See `FieldGrid.coefficients`.
    report : Report
    """
    symmetry = symmetry_of(system)
    report = Report(symmetry.kind)
    if symmetry.kind == "point":
        return _one_direction(system, request, grid, report)
    knots = settle(system, symmetry, request)
    histograms = Histograms(grid)
    if knots.single.any():
        branches = trace_branches(knots.data, np.flatnonzero(knots.single))
        _sum_branches(knots.rings, branches, request, histograms, report)
    if knots.other.any():
        _sum_loops(knots.rings, knots.data, np.flatnonzero(knots.other), request, histograms, report)
    report.rings, report.estimated_error = knots.rings.rings, knots.error
    report.directions, report.diagonalisations = knots.directions, knots.diagonalisations
    report.pairs, report.looping = int(knots.single.sum()), int(knots.other.sum())
    return histograms.orders, report


def _one_direction(
    system: System, request: Request, grid: FieldGrid, report: Report
) -> tuple[dict[int, Array], Report]:
    got = find(
        system,
        np.array([[0.0, 0.0, 1.0]]),
        request.frequency,
        (request.low, request.high),
        microwave=request.microwave,
        temperature=request.temperature,
    )
    report.directions, report.diagonalisations, report.pairs = 1, 1, len(got.field)
    histograms = Histograms(grid)
    histograms.points(got.field, got.weight)
    return histograms.orders, report


def _ladder_size(wanted: float) -> int:
    """Round a mesh size up to a short list of sizes, so that matrices and weights are shared."""
    wanted = max(8.0, wanted)
    return 2 * math.ceil(0.5 * 2 ** (math.ceil(4 * math.log2(wanted)) / 4))


def _mesh_for(rings: Rings, fields: Array, request: Request) -> list[tuple[int, int]]:
    """Return for each branch the mesh that its own spread over the sphere asks for.

    Either neighbours lie within the request's spacing everywhere, so that the plain sum is
    enough, or, where that takes many more points, simplices must be flat: the field may curve by
    `FLATNESS` of the line within one step.
    """
    probe = Mesh(rings.kind, 2 * rings.rings, _probe_azimuths(rings))
    values = rings.to_mesh(fields, probe)
    thetas = _sizes(values, 1, probe.thetas, request, even=True)
    thetas = np.maximum(thetas, 2 * rings.rings)
    if rings.kind == "axial":
        return [(min(_ladder_size(t), LARGEST_LINE), 1) for t in thetas[0]]
    phis = _sizes(values, 2, probe.phis, request, even=rings.kind == "octant")
    phis = np.maximum(phis, _probe_azimuths(rings))
    plain, flat = thetas[0] * phis[0], thetas[1] * phis[1]
    choice = np.where(plain <= 2.5 * flat, 0, 1)
    row = np.arange(len(fields))
    return [(_ladder_size(t), _ladder_size(p)) for t, p in zip(thetas[choice, row], phis[choice, row], strict=True)]


def _sizes(values: Array, axis: int, intervals: int, request: Request, even: bool) -> Array:
    """Return the intervals for close neighbours and for flat simplices, shape (2, branches)."""
    if not even:
        values = np.concatenate([values, np.take(values, [0, 1], axis)], axis)
    first = np.diff(values, axis=axis)
    second = np.diff(first, axis=axis)
    slope = np.abs(first).max(axis=(1, 2)) * intervals
    # even at the ends: there the second difference is twice the first
    ends = np.maximum(
        np.abs(first[:, :1] if axis == 1 else first[:, :, :1]).max(axis=(1, 2)),
        np.abs(first[:, -1:] if axis == 1 else first[:, :, -1:]).max(axis=(1, 2)),
    )
    bend = np.maximum(np.abs(second).max(axis=(1, 2)), 2 * ends) * intervals**2
    flatness = FLATNESS * (request.tolerance / 1e-3) ** 0.25
    return np.stack([slope / request.spacing, np.sqrt(bend / request.scale) / flatness])


def _probe_azimuths(rings: Rings) -> int:
    return {"axial": 1, "octant": 2, "quarter": 4, "half": 8}[rings.kind] * min(rings.harmonics, 24)


def _sum_branches(rings: Rings, branches: Branches, request: Request, histograms: Histograms, report: Report) -> None:
    """Add every branch, continued to a mesh fine enough for it."""
    x, y, inverse = continued(branches.field, branches.weight)
    sizes = _mesh_for(rings, branches.field, request)
    for size in sorted(set(sizes)):
        rows = [i for i, s in enumerate(sizes) if s == size]
        mesh = Mesh(rings.kind, *size)
        step = max(1, 2_000_000 // mesh.weights().size)
        for start in range(0, len(rows), step):
            part = rows[start : start + step]
            both = rings.to_mesh(np.concatenate([x[part], y[part]]), mesh)
            fields, weights = restored(both[: len(part)], both[len(part) :], inverse[part][:, :, None])
            report.mesh_points += fields.size
            apart = spacing(fields, mesh)
            if apart.max() <= 1.05 * request.spacing:
                histograms.points(fields, weights * mesh.weights())
                continue
            share = point_share(apart, request.spacing)
            for one in range(len(part)):
                b, w, u = fields[one].ravel(), weights[one].ravel(), share[one].ravel()
                add_points(histograms, mesh, b, w, u)
                for stride, factor in RICHARDSON:
                    add_spread(histograms, b, w * (1 - u), *cells(mesh, stride), factor)


def _sum_loops(
    rings: Rings, data: KnotData, rows: NDArray[np.intp], request: Request, histograms: Histograms, report: Report
) -> None:
    """Add pairs whose resonances come and go."""
    size = _ladder_size(max(2 * rings.rings, 4.0 * request.tolerance**-0.5))
    mesh = Mesh(rings.kind, 20 * size if rings.kind == "axial" else size, size)
    for row in rows:
        report.mesh_points += add_looping(histograms, rings, mesh, data, row, request)
