"""Pairs of levels whose resonances come and go over the sphere: looping transitions, swept edges.

Between one pair of levels there may be none to several resonances, and their number changes with
direction.  At such a fold the weight diverges as 1/sqrt(distance), so sums over roots and matching
of roots both fail.  The sums of `spinfit.loop_sums` have no singularity; here each pair of levels gets
a mesh as fine as it needs.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Iterator
from functools import partial
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from spinfit import kernels
from spinfit.branches import KnotData, Request
from spinfit.crossings import Crossings, Window
from spinfit.landscape import Landscape, Scratch, View, doubled
from spinfit.lineshape import Shape
from spinfit.loop_sums import add_looping, field_step, reach
from spinfit.orientations import Mesh, Rings
from spinfit.resonance import ZERO_FIELD
from spinfit.sheets import SMEAR_MOST, SMEAR_REACH, Histograms

Array = NDArray[np.float64]
Index = NDArray[np.intp]

FLAT = 0.4
"""Root of the curvature of a resonance field over one step of the first mesh, in line widths."""
FOLD_SLOPE = 8.0
"""MHz/mT below which a level difference counts as folding, about a quarter of a free spin's slope."""
AXIAL = 2048
"""Intervals of a meridian with which an axial system begins, at the default tolerance."""
BAND = 100_000
"""Nodes x points of a band of rows: what a pair needs of six arrays of these is about two megabytes."""
LEAST = 8
"""Intervals of the mesh of the first look."""
LARGEST = 40_000_000
"""Numbers (nodes x points x 3) of one pair's mesh at which refinement gives up."""
MOST_ROUNDS = 5
POWER = 2.3
"""Power of the step with which a mesh's error falls at least, once it falls."""
LEAST_GAIN = 1 / 16
"""Ratio of a mesh's error to that of its every second point below which it is not trusted to lie."""
SHARE = 0.5
"""Part of the tolerance that the meshes of looping pairs may use up by what two coarser meshes say."""
MISTRUST = 2.0
"""Factor by which meshes were found to err more than that."""


class _Pair:
    """One pair of levels on a growing mesh.

    Attributes
    ----------
    size : (int, int)
        Intervals of the mesh.
    reach : ndarray, shape (l, 2)
        Shares of the meridian, first and last, in which each leaf can be resonant.
    view : View
        The same in rows of the mesh.
    half : ndarray, shape (3 or 4, k, thetas / 2 + 1, azimuths)
        Gap, slope, strength and variance, if any, at every second point.
    histograms : Histograms
        Its own.
    error : float
        Estimated, relative to the top of the whole spectrum's derivative.
    """

    def __init__(self, rings: Rings, crossings: Crossings, row: int, leaves: Index, request: Request) -> None:
        self.rings, self.request = rings, request
        self.crossings, self.row = crossings, row
        self.part, self.fields, self.leaves = nodes_of(crossings.data, leaves)
        self.size, self.reach = _first_size(self, request)

    def sum(self, look: _Look) -> int:
        """Sum over the present mesh and over its every second point; return the number of points used."""
        mesh = Mesh(self.rings.kind, *self.size)
        self.view = View.of(self.reach, self.leaves, len(self.fields), mesh.thetas, 4)
        self.half = self._on(self._mesh(2), self.rings.to_mesh_locally, self.view.every(2))
        self.fourth_land = self._coarse(self.half[:, :, ::2, :: 1 if mesh.phis == 1 else 2], 4)
        self.histograms, used = self._add(look, self._parts(look), (4.0, 4.0))
        self.transform = self.histograms.transform()
        self.difference = self._changed(look, self._coarse(self.half, 2), (2.0, 2.0))
        self.missed = look.height(self.difference)
        self.fourth = self._changed(look, self.fourth_land, (1.0, 1.0))
        before = look.height(self.fourth)
        self.gained = min(1.0, max(LEAST_GAIN, self.missed / before)) if before else 1.0
        return used

    def _mesh(self, stride: int) -> Mesh:
        return Mesh(self.rings.kind, self.size[0] // stride, max(1, self.size[1] // stride))

    def _coarse(self, values: Array, stride: int) -> Landscape:
        """Return every so many points of the present mesh."""
        values = np.ascontiguousarray(values)
        return Landscape.of(self.fields, self.leaves, values, self._mesh(stride), self.view.every(stride))

    def _add(self, look: _Look, lands: Iterable[Landscape], finer: tuple[float, float]) -> tuple[Histograms, int]:
        """Sum over parts of a mesh, so much finer than every fourth point; return histograms and points used."""
        histograms = look.empty()
        if self.rings.kind == "axial":  # whose mesh is one part
            lands = list(lands)
            step = field_step(lands[0], self.request)
        else:
            step = field_step(self.fourth_land, self.request, finer)
        return histograms, add_looping(histograms, lands, self.request, step)

    def _parts(self, look: _Look) -> Iterator[Landscape]:
        """Yield the present mesh; where it is large, a few rows at a time, so that these stay in the cache."""
        mesh = self._mesh(1)
        if self.rings.kind == "axial":
            # continued at every point: it costs little, and no polynomial is exact at a kink
            values = self._on(mesh, self.rings.to_mesh_locally, self.view)
            yield Landscape.of(self.fields, self.leaves, values, mesh, self.view)
            return
        height = max(8, BAND // (len(self.fields) * len(mesh.phi()))) if kernels.COMPILED else mesh.thetas + 1
        for view, some in self.view.bands(mesh.thetas + 1, height):
            values = doubled(self.half, mesh, view.nodes, look.scratch, some)
            yield Landscape.of(self.fields, self.leaves, values, mesh, view, look.scratch, some)

    def _on(self, mesh: Mesh, to_mesh: Callable[..., Array], view: View | None = None) -> Array:
        """Return gap, slope, strength and variance, if any, on a mesh, shape (3 or 4, k, thetas + 1, azimuths)."""
        window = None
        if view is not None:
            window = Window((mesh.thetas + 1, len(mesh.phi())), view.nodes)
        return self.crossings.continued(self.row, self.part, partial(to_mesh, mesh=mesh), window)

    def _changed(self, look: _Look, land: Landscape, finer: tuple[float, float]) -> NDArray[np.complex128]:
        """Return how the transform changes when it is summed over another mesh."""
        histograms, _ = self._add(look, [land], finer)
        return histograms.transform() - self.transform

    def coarser(self, look: _Look, along: int, around: int) -> NDArray[np.complex128]:
        """Return how the transform changes when only every so many points, along theta or phi, are used."""
        whole = doubled(self.half, self._mesh(1), self.view.nodes, look.scratch)
        values = np.ascontiguousarray(whole[:, :, ::along, ::around])
        mesh = Mesh(self.rings.kind, self.size[0] // along, self.size[1] // around)
        land = Landscape.of(self.fields, self.leaves, values, mesh, self.view.every(along))
        return self._changed(look, land, (4 / along, 4 / around))

    @property
    def error(self) -> float:
        """The present mesh's own error, in the units of `_Look.height`: it gains once more what it gained last."""
        return self.missed * self.gained

    def by_half(self, look: _Look) -> NDArray[np.complex128]:
        """Return how the transform on fewer points changes when every second ring of knots is left out."""
        stride, before = (2, self.difference) if self.rings.kind == "axial" else (4, self.fourth)
        half, kept = self.rings.halved(), self.rings.halved_knots()
        view = self.view.every(stride)
        values = self._on(self._mesh(stride), lambda v, **of: half.to_mesh_locally(v[:, kept], **of), view)
        return self._changed(look, self._coarse(values, stride), (4 / stride, 4 / stride)) - before

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
        self.shape, self.scratch = Shape(request.scale, 0.0), Scratch()
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


def _first_size(pair: _Pair, request: Request) -> tuple[tuple[int, int], Array]:
    """Return the mesh to begin with, from how the resonance field bends over the sphere, and what each leaf reaches.

    The curvature of the level difference at fixed field, over its slope along the field, is that
    of the resonance field; at a fold, where the slope vanishes, what counts is the frequency.
    """
    rings = pair.rings
    azimuths = {"axial": 1, "octant": 1, "quarter": 2, "half": 4}[rings.kind] * min(rings.harmonics, 24)
    mesh = Mesh(rings.kind, max(LEAST, rings.rings), 1 if rings.kind == "axial" else max(LEAST, azimuths))
    values = pair._on(mesh, rings.to_mesh_locally)
    land = Landscape.of(pair.fields, pair.leaves, values, mesh)
    if rings.kind == "axial":  # costs nothing, and spares every doubt
        size = ladder_size(AXIAL * (1e-3 / request.tolerance) ** 0.3), 1
    else:
        size = _size_by_bend(values, rings, pair.fields, request)
    finer = size[0] / (4 * mesh.thetas), size[1] / (4 * mesh.phis)
    return size, reach(land, mesh.thetas, finer, request)


def _size_by_bend(values: Array, rings: Rings, fields: Array, request: Request) -> tuple[int, int]:
    gap, slope, strength = values[:3]
    strong = np.abs(strength)
    near = np.abs(gap) <= 1.5 * np.abs(slope) * np.gradient(fields)[:, None, None] + request.scale * FOLD_SLOPE
    bend = np.where(near, 1.0 / np.maximum(np.abs(slope), FOLD_SLOPE), 0.0)
    flat = FLAT * (request.tolerance / 1e-3) ** 0.17
    sizes = []
    for axis, even in ((1, True), (2, rings.kind == "octant")):
        mode = {"mode": "reflect"} if even else {"mode": "wrap"}
        padded = np.pad(gap, [(1, 1) if a == axis else (0, 0) for a in range(3)], **mode)
        second = np.abs(np.diff(padded, 2, axis=axis)) * bend
        # the few sharpest spots, where levels cross on an axis, would size the mesh for everything
        sharp = _quantile(second[some], strong[some], 0.98) if (some := second > 0).any() else 0.0
        least = (rings.rings, strong.shape[2])[axis - 1]
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


def _quantile(values: Array, weights: Array, share: float) -> float:
    """Return the value below which a share of the weight lies."""
    order = np.argsort(values)
    running = np.cumsum(weights[order])
    return float(values[order[min(len(order) - 1, np.searchsorted(running, share * running[-1]))]])


def add_pairs(
    histograms: Histograms,
    rings: Rings,
    data: KnotData,
    rows: Index,
    request: Request,
    keep: list[Summed] | None = None,
    crossings: Crossings | None = None,
) -> tuple[int, float, float]:
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
    by_half : float
        The change of the spectrum, likewise, when every second ring of knots is left out.
    """
    chosen = [(row, leaves) for row in rows if len(leaves := reachable(data, row))]
    crossings = Crossings(data) if crossings is None else crossings
    pairs = [_Pair(rings, crossings, row, leaves, request) for row, leaves in chosen]
    if not pairs:
        return 0, 0.0, 0.0
    look = _Look(histograms, request)
    used = 0
    pending = pairs
    for _ in range(MOST_ROUNDS):
        used += sum(pair.sum(look) for pair in pending)
        if pending is pairs:
            by_half = look.height(sum(pair.by_half(look) for pair in pairs))
        top = look.height(look.others + sum(pair.transform for pair in pairs)) or 1.0
        error = look.height(sum(pair.difference * pair.gained for pair in pairs)) / top
        if error <= SHARE * request.tolerance:
            break
        together = look.height(sum(pair.difference for pair in pairs))
        largest = max(pair.missed for pair in pairs)
        # errors of different pairs mostly lie at different fields
        allowed = SHARE * request.tolerance * top * max(len(pairs) ** -0.5, min(1.0, largest / (together or 1.0)))
        pending = [pair for pair in pending if pair.error > allowed and pair.refine(look, allowed)]
        if not pending:
            break
    for pair in pairs:
        histograms.join(pair.histograms)
    if keep is not None:
        keep += [Summed(row, leaves, pair.size) for (row, leaves), pair in zip(chosen, pairs, strict=True)]
    return used, MISTRUST * error, by_half / top


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
