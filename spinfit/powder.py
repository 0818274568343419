"""The powder average: from knots on the sphere to histograms of resonance fields.

Knots are refined until continuing from every second ring already predicts the rest to the promised
tolerance.  Pairs of levels with one resonance in every direction are continued as fields and
weights (as B^-2 and W B^-3, which are exact for a pure Zeeman doublet); pairs whose resonances
appear, vanish or loop are continued as level differences and solved on the mesh.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from spinfit import kernels
from spinfit.branches import Branches, KnotData, Request
from spinfit.exact import Lines, deposit
from spinfit.hamiltonian import System
from spinfit.knots import Knots, settle
from spinfit.lineshape import FieldGrid, Shape
from spinfit.loops import Summed, add_pairs
from spinfit.orientations import Mesh, Rings
from spinfit.resonance import ZERO_FIELD, find
from spinfit.sheets import SMEAR_MOST, SMEAR_REACH, Histograms, continued, restored
from spinfit.symmetry import Symmetry, symmetry_of

Array = NDArray[np.float64]

SPARED = 4.0, 1.5
"""How many times more points than smeared ones and than close ones need a meridian gets, where they cost little.

What is aliased counts beside the top of the derivative, and a broad hump has much less of that than of absorption.
"""
ALIKE = 0.3
"""Relative difference of the widths of neighbours, where widths differ, at the default tolerance."""
STEEPNESS = 0.1
"""Relative change of a field's steepness within one step where it is smeared, at the most."""
FLATNESS = 0.19
"""Root of the curvature of a field over one step of the mesh, in line widths, at the default tolerance."""


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
    compiled: bool = kernels.COMPILED
    notes: list[str] = field(default_factory=list)


@dataclass(frozen=True, eq=False)
class Average:
    """A powder average as it was done, for whoever wants to know how it changes.

    Attributes
    ----------
    symmetry : Symmetry
    request : Request
        With the weight of an aligned sample, where there is one.
    knots : Knots or Lines
        Lines where one direction stands for all.
    meshes : list of (int, int)
        Of each branch.
    loops : list of Summed
        How pairs of levels without a branch were summed.
    histograms : Histograms
    """

    symmetry: Symmetry
    request: Request
    knots: Knots | Lines
    meshes: list[tuple[int, int]]
    loops: list[Summed]
    histograms: Histograms


def powder(
    system: System,
    request: Request,
    grid: FieldGrid,
    weigh: Callable[[Array, Symmetry], Array] | None = None,
    keep: list[Average] | None = None,
) -> tuple[Histograms, Report]:
    """Return the histograms of resonance fields averaged over all directions.

    Parameters
    ----------
    system : System
    request : Request
    grid : FieldGrid
        Where resonances are deposited.
    weigh : callable, optional
        From directions, shape (m, 3), and the symmetry over whose images it averages, to the
        share of each direction in an aligned sample, mean 1.
    keep : list, optional
        Gets the average itself appended.

    Returns
    -------
    histograms : Histograms
    report : Report
    """
    symmetry = symmetry_of(system)
    if request.broadening is not None:
        symmetry = request.broadening.lowered(symmetry, system)
    if weigh is not None:
        request = replace(request, weigh=lambda directions: weigh(directions, symmetry))
    report = Report(symmetry.kind)
    if symmetry.kind == "point":
        histograms, report, lines = _one_direction(system, request, grid, report)
        if keep is not None:
            keep.append(Average(symmetry, request, lines, [], [], histograms))
        return histograms, report

    def compare(rings: Rings, branches: Branches, local: bool, predict: Callable[[Array], Array]) -> float:
        return _changed(rings, branches, local, predict, request, grid)

    asked = request
    for last in (False, True):
        knots = settle(system, symmetry, asked, compare)
        histograms, meshes, loops, points, error, by_half = _summed(knots, request, grid)
        report.mesh_points = points
        # the spectrum itself knows better where knots are too few than shifts of its resonances do
        by_knots = by_half * knots.error / max(knots.half_error, 1e-300)
        if last or by_knots <= 2 * request.tolerance:
            break
        asked = replace(request, tolerance=request.tolerance * max(0.1, 0.6 * request.tolerance / by_knots))
    error += max(by_knots, knots.error)
    report.rings, report.estimated_error = knots.rings.rings, error
    report.directions, report.diagonalisations = knots.directions, knots.diagonalisations
    report.pairs, report.looping = len(knots.branches.pair), int(knots.other.sum())
    if _meets_zero_field(knots.data, request):
        report.estimated_error = max(error, min(ROUGHEST, ROUGH * request.tolerance))
        report.notes.append("levels are h nu apart at zero field, where a powder spectrum diverges: it is rough there")
    if keep is not None:
        keep.append(Average(symmetry, request, knots, meshes, loops, histograms))
    return histograms, report


def _summed(
    knots: Knots, request: Request, grid: FieldGrid
) -> tuple[Histograms, list[tuple[int, int]], list[Summed], int, float, float]:
    """Return histograms, meshes of branches, how other pairs were summed, points, and errors as in `add_pairs`."""
    histograms = Histograms(grid, request.scale)
    meshes, loops, points, error, by_half = [], [], 0, 0.0, 0.0
    if len(knots.branches.pair):
        meshes = _sum_branches(knots.rings, knots.branches, knots.local, request, histograms)
        points = sum(Mesh(knots.rings.kind, *size).weights().size for size in meshes)
    if knots.other.any():
        rows = np.flatnonzero(knots.other)
        found = add_pairs(histograms, knots.rings, knots.data, rows, request, loops, knots.crossings)
        points, error, by_half = points + found[0], found[1], found[2]
    return histograms, meshes, loops, points, error, by_half


def _meets_zero_field(data: KnotData, request: Request) -> bool:
    """Whether a pair of levels that matters is resonant at zero field within a few line widths.

    There the field of resonance goes as distance over the slope along the field, which has no lower
    bound over the sphere: the intensity diverges with the logarithm of the distance.
    """
    if request.low > ZERO_FIELD or not len(data.fields):
        return False
    near = np.abs(data.gap[:, 0]).max(axis=1) < NEAR_ZERO * request.scale
    strength = np.abs(data.strength[:, 0]).max(axis=1)
    return bool((near & (strength > 0.01 * np.abs(data.strength).max(initial=0.0))).any())


ROUGH, ROUGHEST = 40.0, 0.3
"""What spectra that meet zero field were found to err by: in tolerances, and at the most."""
NEAR_ZERO = 30.0
"""MHz/mT: two line widths of a free spin's pair, times their distance that matters."""


def _one_direction(
    system: System, request: Request, grid: FieldGrid, report: Report
) -> tuple[Histograms, Report, Lines]:
    direction = np.array([[0.0, 0.0, 1.0]])
    got = find(
        system,
        direction,
        request.frequency,
        (request.low, request.high),
        microwave=request.microwave,
        temperature=request.temperature,
        populations=request.populations,
    )
    report.directions, report.diagonalisations, report.pairs = 1, 1, len(got.field)
    histograms = Histograms(grid, request.scale)
    deposit(histograms, system, request, got, direction, got.weight)
    return histograms, report, Lines(request, got, direction, direction, np.ones(1), np.zeros(1, dtype=np.intp))


def _ladder_size(wanted: float) -> int:
    """Round a mesh size up to a short list of sizes, so that matrices and weights are shared."""
    wanted = max(8.0, wanted)
    return 2 * math.ceil(0.5 * 2 ** (math.ceil(4 * math.log2(wanted)) / 4))


def _mesh_for(rings: Rings, branches: Branches, request: Request) -> list[tuple[int, int]]:
    """Return for each branch the mesh that its own spread over the sphere asks for.

    Neighbours lie within what the largest smear hides, and near turning points, where the line
    itself must hide the grain, the field curves by little more than the line within one step.
    """
    # fine enough to see how steep a field of few harmonics gets between the knots
    few = max(1, round(24 / _least_thetas(rings)))
    probe = Mesh(rings.kind, few * _least_thetas(rings), 1 if rings.kind == "axial" else few * _least_azimuths(rings))
    x, _, inverse = continued(branches.field, branches.weight)
    values = rings.to_mesh(x, probe)
    values, _ = restored(values, values, inverse[:, :, None])
    if branches.variance is not None:
        # where a line is broader, its neighbours may lie farther apart
        own = np.maximum(rings.to_mesh(branches.variance, probe), 0.0)
        wider = np.sqrt(1 + own / request.scale**2)
        thetas = _widened_size(values, wider, 1, probe.thetas, request, even=True)
        thetas = np.maximum(thetas, _least_thetas(rings))
        if rings.kind == "axial":
            return [(_ladder_size(t), 1) for t in thetas]
        phis = _widened_size(values, wider, 2, probe.phis, request, even=rings.kind == "octant")
        phis = np.maximum(phis, _least_azimuths(rings))
        return [(_ladder_size(t), _ladder_size(p)) for t, p in zip(thetas, phis, strict=True)]
    thetas = _sizes(values, 1, probe.thetas, request, even=True)
    thetas = np.maximum(thetas, _least_thetas(rings))
    if rings.kind == "axial":
        return [(_ladder_size(min(SPARED[1] * plain, SPARED[0] * smeared)), 1) for plain, smeared in thetas.T]
    phis = _sizes(values, 2, probe.phis, request, even=rings.kind == "octant")
    phis = np.maximum(phis, _least_azimuths(rings))
    # smearing costs about twice as much a point
    choice = np.where(np.prod([thetas[0], phis[0]], axis=0) <= 2 * thetas[1] * phis[1], 0, 1)
    row = np.arange(len(values))
    return [(_ladder_size(t), _ladder_size(p)) for t, p in zip(thetas[choice, row], phis[choice, row], strict=True)]


def _widened_size(values: Array, wider: Array, axis: int, intervals: int, request: Request, even: bool) -> Array:
    """Return the intervals at which neighbours lie within the local line and are about as wide, shape (branches,)."""
    if not even:
        values, wider = (np.concatenate([v, np.take(v, [0], axis)], axis) for v in (values, wider))
    ahead = np.take(wider, range(1, wider.shape[axis]), axis)
    local = np.minimum(ahead, np.take(wider, range(wider.shape[axis] - 1), axis))
    close = np.abs(np.diff(values, axis=axis)) / local / request.grain.close
    alike = np.abs(np.diff(np.log(wider), axis=axis)) / (ALIKE * (request.tolerance / 1e-3) ** 0.17)
    return np.maximum(close, alike).max(axis=(1, 2)) * intervals


def _sizes(values: Array, axis: int, intervals: int, request: Request, even: bool) -> Array:
    """Return the intervals along one angle for close neighbours and for smeared ones, shape (2, branches).

    Where a field turns, it may curve by little more than the line within one step; where it is
    steep and smeared, the smear must stay short of the distance over which the steepness changes.
    Fields well beyond the window do not count.
    """
    # even about both ends, or periodic: one more point on either side
    count = values.shape[axis]
    around = [1, *range(count), count - 2] if even else [count - 1, *range(count), 0]
    padded = np.take(values, around, axis)
    margin = 0.6 * SMEAR_REACH * SMEAR_MOST * request.scale  # most of what lies past the window for the smears' sake
    low = request.low + margin if request.low > ZERO_FIELD else 0.0
    inside = (values >= low) & (values <= request.high - margin)
    first = np.diff(padded, axis=axis)
    before, after = (np.take(first, range(k, count + k), axis) for k in (0, 1))
    slope = np.where(inside, np.maximum(np.abs(before), np.abs(after)), 0.0) * intervals
    bend = np.where(inside, np.abs(after - before), 0.0) * intervals**2
    mean = np.maximum(0.5 * np.abs(before + after) * intervals, 1e-9)
    flatness = FLATNESS * (request.tolerance / 1e-3) ** 0.17
    turning = np.minimum(np.sqrt(bend / request.scale) / flatness, bend / (STEEPNESS * mean))
    smeared = np.maximum(slope.max(axis=(1, 2)) / (0.8 * request.grain.far), turning.max(axis=(1, 2)))
    plain = slope.max(axis=(1, 2)) / request.grain.close
    return np.stack([plain, np.minimum(plain, smeared)])


def _least_thetas(rings: Rings) -> int:
    return max(8, 2 * rings.rings)


def _least_azimuths(rings: Rings) -> int:
    return {"axial": 1, "octant": 2, "quarter": 4, "half": 8}[rings.kind] * min(max(4, rings.harmonics), 24)


def _changed(
    rings: Rings,
    branches: Branches,
    local: bool,
    predict: Callable[[Array], Array],
    request: Request,
    grid: FieldGrid,
) -> float:
    """Return by how much a prediction of continued values changes the spectrum, relative to its top."""
    x, y, inverse = continued(branches.field, branches.weight)
    own = () if branches.variance is None else (branches.variance,)
    x, y, *own = predict(np.concatenate([x, y, *own])).reshape(-1, *x.shape)
    field, weight = restored(x, y, inverse)
    changed = replace(branches, field=field, weight=weight, variance=own[0] if own else None)
    here, there = Histograms(grid, request.scale), Histograms(grid, request.scale)
    sizes = _sum_branches(rings, branches, local, request, here)
    _sum_branches(rings, changed, local, request, there, sizes)
    shape, before = Shape(request.scale, 0.0), here.transform()
    fields = grid.start + grid.step * np.arange(grid.count)
    margin = SMEAR_REACH * SMEAR_MOST * request.scale  # past the window, where sums are cut off
    inside = (fields >= (request.low + margin if request.low > ZERO_FIELD else 0.0)) & (fields <= request.high - margin)
    top, change = (
        np.abs(grid.render(one, shape)[inside]).max(initial=0.0) for one in (before, there.transform() - before)
    )
    return float(change / top) if top else 0.0


def _sum_branches(
    rings: Rings,
    branches: Branches,
    local: bool,
    request: Request,
    histograms: Histograms,
    sizes: list[tuple[int, int]] | None = None,
) -> list[tuple[int, int]]:
    """Add every branch, continued to a mesh fine enough for it; return the meshes."""
    to_mesh = rings.to_mesh_locally if local else rings.to_mesh
    x, y, inverse = continued(branches.field, branches.weight)
    sizes = _mesh_for(rings, branches, request) if sizes is None else sizes
    for size in sorted(set(sizes)):
        rows = [i for i, s in enumerate(sizes) if s == size]
        mesh = Mesh(rings.kind, *size)
        step = max(1, 2_000_000 // mesh.weights().size)
        for start in range(0, len(rows), step):
            part = rows[start : start + step]
            both = to_mesh(np.concatenate([x[part], y[part]]), mesh)
            here, there = both[: len(part)], both[len(part) :]
            if branches.variance is None:
                histograms.sheets(here, there, inverse[part, 0], mesh, request.grain)
                continue
            fields, weights = restored(here, there, inverse[part][:, :, None])
            own = np.maximum(to_mesh(branches.variance[part], mesh), 0.0)
            histograms.broadened(fields.ravel(), (weights * mesh.weights()).ravel(), own.ravel())
    return sizes
