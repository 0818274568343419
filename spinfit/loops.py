"""Pairs of levels whose resonances come and go over the sphere: looping transitions, swept edges.

Between one pair of levels there may be none to several resonances, and their number changes with
direction.  At such a fold the weight diverges as 1/sqrt(distance), so sums over roots and matching
of roots both fail.  The spectrum is the integral over the sphere of strength x delta(gap), and a
smoothed delta function has no singularity: at a fixed field the sum over a mesh of
strength x K(gap / h) / h converges quickly once the kernel's width h is about the difference of the
gap between neighbouring directions.  Where resonances are steep along the field, h is narrow in
field, and there it is cheaper to solve for the field and smear that.  A smooth share divides every
(direction, field) between the two sums; both smear by the same kernel of sixth order, and both
leave turning points, where neighbours agree, sharp.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from spinfit import hermite
from spinfit.branches import KnotData, Request, stencil
from spinfit.crossings import Crossings
from spinfit.lineshape import Shape
from spinfit.orientations import Mesh, Rings
from spinfit.resonance import ZERO_FIELD, can_reach
from spinfit.sheets import SMEAR_MOST, SMEAR_REACH, Histograms, differences, point_share

Array = NDArray[np.float64]
Index = NDArray[np.intp]

STEP = 1.0
"""Distance of the fields at which the sum in frequency is taken, in line widths, at the default tolerance.

That sum is smooth over several line widths: everything sharper is in the other one.
"""
KERNEL_REACH = 5.0
"""Where the kernel is cut, in units of its width."""
FOLD = 30.0
"""How many times farther than its smear from a fold a resonance lies before it is solved for."""
FLAT = 0.5
"""Root of the curvature of a resonance field over one step of the first mesh, in line widths."""
FOLD_SLOPE = 8.0
"""MHz/mT below which a level difference counts as folding, about a quarter of a free spin's slope."""
AXIAL = 512
"""Intervals of a meridian with which an axial system begins."""
LARGEST = 40_000_000
"""Numbers (nodes x points x 3) of one pair's mesh at which refinement gives up."""
MOST_ROUNDS = 5
POWER = 2.3
"""Power of the step with which a mesh's error falls at least, once it falls."""
LEAST_GAIN = 1 / 16
"""Ratio of a mesh's error to that of its every second point below which it is not trusted to lie."""
SHARE = 0.8
"""Part of the tolerance that the meshes of looping pairs may use up."""
FIELDS, BLOCK = 20, 6000
"""Numbers of fields and of points handled at a time, so that they stay in the processor's cache."""


def kernel(u: Array) -> Array:
    """Return the kernel of unit area whose second and fourth moments vanish, see `lineshape.smear_kernel`."""
    square = u * u
    return np.exp(-0.5 * square) * (1.875 - square * (1.25 - 0.125 * square)) * (1 / math.sqrt(2 * math.pi))


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
    weights : ndarray, shape (points,)
        Shares of the solid angle.
    """

    fields: Array
    leaves: Index
    gap: Array
    slope: Array
    strength: Array
    bend: Array
    along: Array
    around: Array
    weights: Array

    @classmethod
    def of(cls, fields: Array, leaves: Index, values: Array, mesh: Mesh) -> Landscape:
        """Build from gap, slope and strength on a mesh, shape (3, k, thetas + 1, azimuths)."""
        k = len(fields)
        steps = differences(values[0], mesh).reshape(2, k, -1)
        gap, slope, strength = values.reshape(3, k, -1)
        bend = np.gradient(slope, fields, axis=0)
        return cls(fields, leaves, gap, slope, strength, bend, *steps, mesh.weights().ravel())


class _Pair:
    """One pair of levels on a growing mesh.

    Attributes
    ----------
    size : (int, int)
        Intervals of the mesh.
    plain : ndarray
        Its histograms, as `Histograms.plain`.
    error : float
        Estimated, relative to the top of the whole spectrum's derivative.
    """

    def __init__(self, rings: Rings, crossings: Crossings, row: int, leaves: Index, request: Request) -> None:
        self.rings, self.request = rings, request
        self.crossings, self.row = crossings, row
        self.part, self.fields, self.leaves = nodes_of(crossings.data, leaves)
        self.size = _first_size(self, request)

    def sum(self, look: _Look) -> int:
        """Sum over the present mesh and over its every second point; return the number of points used."""
        mesh = Mesh(self.rings.kind, *self.size)
        self.values = self.on(mesh)
        histograms = look.empty()
        used = add_looping(histograms, Landscape.of(self.fields, self.leaves, self.values, mesh), self.request)
        self.plain, self.transform = histograms.plain, histograms.transform()
        self.difference = self.coarser(look, 2, 2)
        self.missed = look.height(self.difference)
        before = look.height(self.coarser(look, 4, 4))
        self.gained = min(1.0, max(LEAST_GAIN, self.missed / before)) if before else 1.0
        return used

    def on(self, mesh: Mesh) -> Array:
        """Return gap, slope and strength on a mesh, shape (3, k, thetas + 1, azimuths)."""
        return self.crossings.continued(self.row, self.part, lambda v: self.rings.to_mesh_locally(v, mesh))

    def coarser(self, look: _Look, along: int, around: int) -> NDArray[np.complex128]:
        """Return how the transform changes when only every second point, along theta or phi, is used."""
        around = 1 if self.rings.kind == "axial" else around
        mesh = Mesh(self.rings.kind, self.size[0] // along, self.size[1] // around)
        values = np.ascontiguousarray(self.values[:, :, ::along, ::around])
        histograms = look.empty()
        add_looping(histograms, Landscape.of(self.fields, self.leaves, values, mesh), self.request)
        return histograms.transform() - self.transform

    @property
    def error(self) -> float:
        """The present mesh's own error, in the units of `_Look.height`: it gains once more what it gained last."""
        return self.missed * self.gained

    def refine(self, look: _Look, allowed: float) -> bool:
        """Choose a finer mesh that should err by no more than `allowed`; return whether there is one."""
        missed = [self.missed]
        if self.rings.kind != "axial":
            missed = [look.height(self.coarser(look, *strides)) for strides in ((2, 1), (1, 2))]
        power = max(POWER, -math.log2(self.gained))
        factors = [max(1.0, min(3.0, (m * self.gained / (0.6 * allowed)) ** (1 / power))) for m in missed]
        widest = int(np.argmax(factors))
        factors[widest] = max(factors[widest], 1.4)
        size = tuple(ladder_size(f * n) if f > 1.1 else n for f, n in zip([*factors, 1.0], self.size, strict=False))
        if 3 * len(self.fields) * math.prod(size) > LARGEST:
            return False
        self.size = size
        return True


class _Look:
    """How large a change of the histograms is in the spectrum."""

    def __init__(self, histograms: Histograms, request: Request) -> None:
        self.grid, self.scale = histograms.grid, request.scale
        self.others = histograms.transform()
        self.shape = Shape(request.scale, 0.0)
        fields = self.grid.start + self.grid.step * np.arange(self.grid.count)
        margin = SMEAR_REACH * SMEAR_MOST * request.scale  # past the window, where sums are cut off
        low = request.low + margin if request.low > ZERO_FIELD else 0.0
        self.window = (fields >= low) & (fields <= request.high - margin)

    def empty(self) -> Histograms:
        """Return histograms for one pair of levels."""
        return Histograms(self.grid, self.scale)

    def height(self, transform: NDArray[np.complex128]) -> float:
        """Return the largest value in the window of the derivative of a histograms' transform."""
        return float(np.abs(self.grid.render(transform, self.shape)[self.window]).max(initial=0.0))


def ladder_size(wanted: float) -> int:
    """Round a mesh size up to a short list of sizes divisible by 4, so that matrices and weights are shared."""
    wanted = max(8.0, wanted)
    return 4 * math.ceil(0.25 * 2 ** (math.ceil(4 * math.log2(wanted) - 1e-9) / 4))


def nodes_of(data: KnotData, leaves: Index) -> tuple[slice, Array, Index]:
    """Return the nodes that some leaves span, their fields, and the leaves counted from the first of them."""
    first, last = int(data.leaves[leaves].min()), int(data.leaves[leaves].max()) + 1
    return slice(first, last), data.fields[first:last], data.leaves[leaves] - first


def _first_size(pair: _Pair, request: Request) -> tuple[int, int]:
    """Return the mesh to begin with, from how the resonance field bends over the sphere.

    The curvature of the level difference at fixed field, over its slope along the field, is that
    of the resonance field; at a fold, where the slope vanishes, what counts is the frequency.
    """
    rings = pair.rings
    azimuths = {"axial": 1, "octant": 2, "quarter": 4, "half": 8}[rings.kind] * min(rings.harmonics, 24)
    gap, slope, _ = pair.on(Mesh(rings.kind, 2 * rings.rings, azimuths))
    if rings.kind == "axial":  # costs nothing, and spares every doubt
        return AXIAL, 1
    near = np.abs(gap) <= 1.5 * np.abs(slope) * np.gradient(pair.fields)[:, None, None] + request.scale * FOLD_SLOPE
    bend = np.where(near, 1.0 / np.maximum(np.abs(slope), FOLD_SLOPE), 0.0)
    flat = FLAT * (request.tolerance / 1e-3) ** 0.17
    sizes = []
    for axis, even in ((1, True), (2, rings.kind == "octant")):
        if axis == 2 and rings.kind == "axial":
            sizes.append(1)
            continue
        mode = {"mode": "reflect"} if even else {"mode": "wrap"}
        padded = np.pad(gap, [(1, 1) if a == axis else (0, 0) for a in range(3)], **mode)
        second = np.abs(np.diff(padded, 2, axis=axis)) * bend
        # the few sharpest spots, where levels cross on an axis, would size the mesh for everything
        sharp = np.quantile(second[second > 0], 0.98) if (second > 0).any() else 0.0
        least = (rings.rings, azimuths / 2)[axis - 1]
        sizes.append(ladder_size(max(least, math.sqrt(sharp / request.scale) * (gap.shape[axis] - even) / flat)))
    return sizes[0], sizes[1]


class Summed(NamedTuple):
    """How one pair of levels was summed.

    Attributes
    ----------
    row : int
        Of the data.
    leaves : ndarray of int
        Those in which it can be resonant.
    size : (int, int)
        Intervals of its mesh.
    """

    row: int
    leaves: Index
    size: tuple[int, int]


def add_pairs(
    histograms: Histograms,
    rings: Rings,
    data: KnotData,
    rows: Index,
    request: Request,
    keep: list[Summed] | None = None,
    crossings: Crossings | None = None,
) -> tuple[int, float]:
    """Add pairs of levels whose resonances come and go, each on a mesh as fine as it needs.

    A mesh is accepted when the spectrum of its every second point differs little enough from its
    own, and that of its every fourth point more so: the mesh's own error is smaller in the same ratio.

    Parameters
    ----------
    histograms : Histograms
        Those of all other resonances, to which these are added.
    rows : ndarray of int
        Rows of `data`.
    keep : list, optional
        Gets it appended how each pair was summed.
    crossings : Crossings, optional
        Where levels of `data` nearly cross; without it pairs are continued as they stand.

    Returns
    -------
    used : int
        Points summed.
    error : float
        Estimated error from the meshes, relative to the top of the spectrum's derivative.
    """
    chosen = [(row, leaves) for row in rows if len(leaves := reachable(data, row))]
    crossings = Crossings(data) if crossings is None else crossings
    pairs = [_Pair(rings, crossings, row, leaves, request) for row, leaves in chosen]
    if not pairs:
        return 0, 0.0
    look = _Look(histograms, request)
    used = 0
    pending = pairs
    for _ in range(MOST_ROUNDS):
        used += sum(pair.sum(look) for pair in pending)
        top = look.height(look.others + sum(pair.transform for pair in pairs)) or 1.0
        together = look.height(sum(pair.difference for pair in pairs))
        largest = max(pair.missed for pair in pairs)
        # errors of different pairs mostly lie at different fields
        allowed = SHARE * request.tolerance * top * max(len(pairs) ** -0.5, min(1.0, largest / (together or 1.0)))
        pending = [pair for pair in pending if pair.error > allowed and pair.refine(look, allowed)]
        if not pending:
            break
    for pair in pairs:
        histograms.plain += pair.plain
    if keep is not None:
        keep += [Summed(row, leaves, pair.size) for (row, leaves), pair in zip(chosen, pairs, strict=True)]
    return used, math.hypot(*(pair.error for pair in pairs)) / top


def reachable(data: KnotData, row: int) -> Index:
    """Return the leaves in which one pair of levels can be resonant somewhere between the knots."""
    kept = []
    for number, leaf in enumerate(data.leaves):
        f = data.gap[row, leaf]
        g = data.slope[row, leaf] * (0.5 * (data.fields[leaf[2]] - data.fields[leaf[0]]))
        hull = np.concatenate([f, f[:2] + g[:2] / 3, f[1:] - g[1:] / 3])
        low, high = hull.min(), hull.max()
        margin = 0.15 * (high - low)
        if low - margin <= 0 <= high + margin:
            kept.append(number)
    return np.array(kept, dtype=np.intp)


def add_looping(histograms: Histograms, land: Landscape, request: Request, step: float | None = None) -> int:
    """Add one pair of levels; return the number of points used.

    `step` is the distance of the fields of the sum in frequency, mT, by default what the pair asks for
    (`field_step`).
    """
    step = field_step(land, request) if step is None else step
    fields, density, used = _in_frequency(land, request, step)
    some = density != 0
    # hides the grain of the fields themselves
    smear = np.full(int(some.sum()), request.grain.smear * step)
    histograms.smeared(fields[some], density[some], smear)
    return used + _in_field(histograms, land, request, step)


def _in_frequency(land: Landscape, request: Request, step: float) -> tuple[Array, Array, int]:
    """Return fields, the flat resonances' share of the intensity at each, and the points summed."""
    first = 0.0 if request.low <= ZERO_FIELD else request.low  # the spectrum is even in B: half a step off zero
    fields = first + step * (0.5 + np.arange(max(1, math.ceil((request.high - first) / step))))
    density = np.zeros(len(fields))
    used = 0
    for leaf in land.leaves:
        ends = land.fields[leaf]
        here = slice(*np.searchsorted(fields, [ends[0], ends[2]]))
        if here.start == here.stop:
            continue
        half = 0.5 * (ends[2] - ends[0])
        f, g = land.gap[leaf], land.slope[leaf] * half
        apart = _apart(land.along[leaf], land.around[leaf], np.abs(land.bend[leaf]), request, step)
        steep = np.minimum(np.abs(land.slope[leaf]), np.abs(g + g[[1, 2, 0]]) / (2 * half))
        flat = _nearness(apart.max(axis=0), steep.min(axis=0), np.abs(land.bend[leaf]).max(axis=0), request) > 0.25
        hull = np.stack([*f, f[0] + g[0] / 3, f[1] - g[1] / 3, f[1] + g[1] / 3, f[2] - g[2] / 3])
        low, high = hull.min(axis=0), hull.max(axis=0)
        widest = 1.2 * KERNEL_REACH * request.grain.smear * apart.max(axis=0)
        margin = widest + 0.25 * (high - low)
        at = np.flatnonzero((low <= margin) & (high >= -margin) & flat)
        c, widest = hermite.quintic(f[:, at], g[:, at]), widest[at]
        # a few fields at a time: few of the points are near resonance at all of them
        for start in range(here.start, here.stop, FIELDS):
            some = slice(start, min(start + FIELDS, here.stop))
            t = (fields[some] - ends[1]) / half
            gap = (t[:, None] ** np.arange(6)) @ c
            near = np.flatnonzero((np.abs(gap) < widest).any(axis=0))
            used += len(near)
            for first in range(0, len(near), BLOCK):
                part = near[first : first + BLOCK]
                slope = np.abs((t[:, None] ** np.arange(5) * (np.arange(1, 6) / half)) @ c[1:, part])
                density[some] += step * _density(
                    land, leaf[1], fields[some], at[part], gap[:, part], slope, request, step
                )
    return fields, density, used


def _density(
    land: Landscape, middle: int, fields: Array, at: Index, gap: Array, slope: Array, request: Request, step: float
) -> Array:
    """Return the sum over points `at` of strength x kernel at each field, from gap and slope there."""
    indices, basis = stencil(land.fields, np.full(len(fields), middle), fields)
    nodes = indices[:, :1], at
    strength, bend, *steps = (basis.T @ v[nodes] for v in (land.strength, land.bend, land.along, land.around))
    bend = np.abs(bend)
    apart = _apart(*steps, bend, request, step)
    width = request.grain.smear * apart
    u = gap / width
    some = np.flatnonzero(np.abs(u) < KERNEL_REACH)
    apart, slope, bend, u, width, strength = (v.ravel()[some] for v in (apart, slope, bend, u, width, strength))
    rest = 1 - _share(apart, slope, bend, request)
    part = strength * rest * kernel(u) / width * land.weights[at][some % len(at)]
    return np.bincount(some // len(at), weights=part, minlength=len(fields))


def field_step(land: Landscape, request: Request) -> float:
    """Return the distance of the fields at which the sum in frequency is taken, mT.

    Short beside the line, and so short that at most folds a natural smear is as long.
    """
    longest = STEP * request.scale * min(2.0, max(1.0, (request.tolerance / 1e-3) ** 0.3))
    some = slice(None, None, 1 + land.gap.shape[1] // 2000)
    gap, slope, bend = (np.abs(v[:, some]) for v in (land.gap, land.slope, land.bend))
    width = request.grain.smear * np.hypot(land.along[:, some], land.around[:, some])
    near = gap <= 4 * width + 0.5 * slope * np.gradient(land.fields)[:, None]
    if not near.any():
        return longest
    typical = np.quantile(width[near] / np.maximum(bend[near], 1e-12), 0.1)
    return max(0.02 * request.scale, min(longest, math.sqrt(typical / FOLD) / 0.9))


def _apart(along: Array, around: Array, bend: Array, request: Request, step: float) -> Array:
    """Return how far apart neighbours are in frequency, MHz, and no less than a step of the fields resolves.

    A share near a fold ends where the smear is 1/FOLD of the distance; it must be as long as a step there.
    """
    least = bend * (FOLD * (0.9 * step) ** 2 / request.grain.smear)
    return np.sqrt(along * along + around * around + least * least) + 1e-9


def _share(apart: Array, slope: Array, bend: Array, request: Request) -> Array:
    """Return the share that is solved for: 1 where steep, 0 where flat or near a fold along the field.

    A fold lies about slope/bend away, and a smear must be short beside that.
    """
    return point_share(_nearness(apart, slope, bend, request), 1.0)


def _nearness(apart: Array, slope: Array, bend: Array, request: Request) -> Array:
    grain = request.grain
    return np.sqrt((apart / grain.far) ** 2 + FOLD * grain.smear * apart * bend) / np.maximum(slope, 1e-9)


def _in_field(histograms: Histograms, land: Landscape, request: Request, step: float) -> int:
    """Add the steep resonances' share; return their number."""
    used = 0
    grain = request.grain
    for leaf in land.leaves:
        ends = land.fields[leaf]
        half = 0.5 * (ends[2] - ends[0])
        f, g = land.gap[leaf], land.slope[leaf] * half
        near = can_reach(f[0], f[1], g[0], g[1]) | can_reach(f[1], f[2], g[1], g[2])
        steep = np.maximum(np.abs(g).max(axis=0), np.abs(np.diff(f, axis=0)).max(axis=0)) / half
        apart = np.hypot(land.along[leaf], land.around[leaf]).min(axis=0)
        at = np.flatnonzero(near & (apart < 1.5 * grain.far * steep))
        if not len(at):
            continue
        c = hermite.quintic(f[:, at], g[:, at])
        q, low, high = hermite.brackets(c, f[:, at])
        c, point = c[:, q], at[q]
        t = hermite.refine(c, low, high)
        slope = np.maximum(np.abs(hermite.slope(c, t)) / half, 1e-9)
        field = ends[1] + half * t
        indices, basis = stencil(land.fields, np.full(len(field), leaf[1]), field)
        nodes = indices, point
        columns = (land.strength, land.bend, land.along, land.around)
        strength, bend, *steps = ((basis * v[nodes]).sum(axis=0) for v in columns)
        bend = np.abs(bend)
        apart = _apart(*steps, bend, request, step)
        share = _share(apart, slope, bend, request)
        some = np.flatnonzero(share > 0)
        weight = (strength / slope * share * land.weights[point])[some]
        histograms.smeared(field[some], weight, grain.smear_for((apart / slope)[some]))
        used += len(some)
    return used
