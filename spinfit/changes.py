"""First-order changes of a powder average when its Hamiltonian changes a little.

Knots, nodes, meshes and smears stay those of the average itself, so that a change is smooth in the
parameter.  A few further diagonalisations at the nodes that resonances touch give the change of
every level difference, slope and strength there, without sums over states, so that degenerate levels
need no care.  At a resonance the level difference stays h nu, hence

    dB = -d(gap)/(d gap/dB),     W = strength/|d gap/dB| taken at the moved resonance.

B^-2 and W B^-3 are continued over the sphere like the average's own; their changes are linear in
them.  What a parameter does that breaks the symmetry of the average cancels between the images of
each direction; it is taken out of the matrices beforehand.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace
from functools import lru_cache
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from spinfit import hermite, kernels
from spinfit.branches import FWHM_PER_SIGMA, Request, stencil
from spinfit.exact import Lines
from spinfit.hamiltonian import System, rotation
from spinfit.knots import continued, restored
from spinfit.levels import Levels, occupation, solve, zero_field_state
from spinfit.lineshape import FieldGrid
from spinfit.orientations import Mesh
from spinfit.powder import Average
from spinfit.sheets import SMEAR_RATIO, Histograms, spacing
from spinfit.symmetry import KINDS, Symmetry

Array = NDArray[np.float64]

TURNS = 7
"""Turns about an axis that average out every harmonic that operators of sixth rank hold."""
LARGEST = 2_000_000
"""Numbers held for a block of branches."""


class Move(NamedTuple):
    """A small change of what is averaged.

    Attributes
    ----------
    system : System
    request : Request
        With the broadening that goes with the system.
    field, wave : ndarray, shape (d, 3), or None
        Of a crystal: the moved directions of both fields in molecular axes.
    """

    system: System
    request: Request
    field: Array | None = None
    wave: Array | None = None


class Moved(NamedTuple):
    """Changes of branches at the knots, each of shape (changes, branches, knots); variance may be None."""

    field: Array
    weight: Array
    variance: Array | None


@lru_cache(maxsize=32)
def _group(kind: str) -> tuple[tuple[tuple[float, float, float], float], ...]:
    """Return turns (axis in the domain's frame, angle) over whose images an average of this kind is even."""
    z = (0.0, 0.0, 1.0)
    if kind == "half":
        return ((z, 0.0),)
    if kind == "quarter":
        return ((z, 0.0), (z, math.pi))
    if kind == "octant":
        return ((z, 0.0), (z, math.pi), ((1.0, 0.0, 0.0), math.pi), ((0.0, 1.0, 0.0), math.pi))
    if kind == "axial":
        return tuple((z, 2 * math.pi * k / TURNS) for k in range(TURNS))
    vectors = Rotation.create_group("I").as_rotvec()
    angles = np.linalg.norm(vectors, axis=1)
    axes = np.where(angles[:, None] > 1e-9, vectors / np.maximum(angles, 1e-9)[:, None], z)
    return tuple((tuple(map(float, axis)), float(angle)) for axis, angle in zip(axes, angles, strict=True))


def symmetrised(base: System, moved: System, symmetry: Symmetry) -> System:
    """Return a moved system without what of the move the images of each direction cancel.

    Parameters
    ----------
    base : System
        Which has the symmetry.
    moved : System
        A little different.

    Returns
    -------
    System
        `base` plus the mean of the difference over the turns of the symmetry.
    """
    turns = _group(symmetry.kind)
    if len(turns) == 1:
        return moved
    n = len(base.h0)
    h0, zeeman = moved.h0 - base.h0, moved.zeeman - base.zeeman
    mean_h0, mean_zeeman = np.zeros_like(h0), np.zeros_like(zeeman)
    for axis, angle in turns:
        along = symmetry.axes @ np.array(axis)
        u = rotation(base, tuple(along), angle)
        matrix = Rotation.from_rotvec(angle * along).as_matrix()
        mean_h0 += u @ h0 @ u.conj().T
        mean_zeeman += u @ np.dot(matrix, zeeman.reshape(3, -1)).reshape(3, n, n) @ u.conj().T
    return replace(moved, h0=base.h0 + mean_h0 / len(turns), zeeman=base.zeeman + mean_zeeman / len(turns))


class _Places:
    """Where the resonances of an average lie among its nodes, and the (node, knot) points they touch."""

    def __init__(self, average: Average) -> None:
        knots = average.knots
        data, branches = knots.data, knots.branches
        self.average, self.shape = average, branches.field.shape
        self.field, self.slope = branches.field.ravel(), branches.slope.ravel()
        n = self.shape[1]
        self.row, self.knot = np.repeat(branches.pair, n), np.tile(np.arange(n), len(branches.pair))
        self.lower, self.upper = data.pairs[0][self.row], data.pairs[1][self.row]
        first = data.fields[data.leaves[:, 0]]
        leaf = data.leaves[np.clip(np.searchsorted(first, self.field, side="right") - 1, 0, len(first) - 1)].T
        self.half = 0.5 * (data.fields[leaf[2]] - data.fields[leaf[0]])
        self.t = (self.field - data.fields[leaf[1]]) / self.half
        self.leaf, self.middle = leaf, data.fields[leaf[1]]
        self.nodes, _ = stencil(data.fields, leaf[1], self.field)
        touched = np.zeros((len(data.fields), n), dtype=bool)
        touched[leaf, self.knot] = True
        touched[self.nodes, self.knot] = True
        self.node, self.direction = np.nonzero(touched)
        self.position = np.cumsum(touched.ravel()).reshape(touched.shape) - 1
        self.directions = knots.rings.directions(average.symmetry.axes)

    def changes(self, base: System, moved: Sequence[Move]) -> Moved:
        """Return the first-order changes of every branch at every knot.

        By the levels at the resonances themselves, or at the nodes about them, whichever are fewer.
        """
        at_resonances = self.field.size <= self.node.size
        look = self._at_resonances if at_resonances else self._at_nodes
        here = look(base, self.average.request)
        of_field, of_weight, of_variance = [], [], []
        by_field = self._along_field() if at_resonances else (0.0, 0.0)
        for one in moved:
            there = look(one.system, one.request)
            shift = there[0] - here[0]
            of_field.append(shift)
            of_weight.append(there[1] - here[1] + by_field[0] * shift)
            if here[2] is not None:
                of_variance.append(there[2] - here[2] + by_field[1] * shift)
        shape = (len(moved), *self.shape)
        variance = np.reshape(of_variance, shape) if of_variance else None
        return Moved(np.reshape(of_field, shape), np.reshape(of_weight, shape), variance)

    def _at_resonances(self, system: System, request: Request) -> tuple[Array, Array, Array | None]:
        """Return the resonance field, and weight and variance at the known field, each of shape (q,)."""
        row = np.arange(len(self.field))
        got = self._solved(system, request, self.directions[self.knot], self.field)
        gap = got.energy[row, self.upper] - got.energy[row, self.lower] - request.frequency
        steep = got.slope[row, self.upper] - got.slope[row, self.lower]
        weight, own = self._strength(got, row, request)
        variance = None if own is None else own / (np.abs(steep) * FWHM_PER_SIGMA) ** 2
        return self.field - gap / self.slope, weight / np.abs(steep), variance

    def _at_nodes(self, system: System, request: Request) -> tuple[Array, Array, Array | None]:
        """Return field, weight and variance of every resonance, each of shape (q,)."""
        fields = self.average.knots.data.fields
        got = self._solved(system, request, self.directions[self.direction], fields[self.node])
        at = self.position[self.leaf, self.knot]
        gap = got.energy[at, self.upper] - got.energy[at, self.lower] - request.frequency
        c = hermite.quintic(gap, (got.slope[at, self.upper] - got.slope[at, self.lower]) * self.half)
        # one Newton step from the known resonance: the move is small
        t = self.t - hermite.value(c, self.t) / (self.slope * self.half)
        field = self.middle + self.half * t
        steep = np.maximum(np.abs(hermite.slope(c, t) / self.half), 1e-300)
        nodes, basis = stencil(fields, self.leaf[1], field)
        strength, own = self._strength(got, self.position[nodes, self.knot], request)
        variance = None if own is None else (basis * own).sum(axis=0) / (steep * FWHM_PER_SIGMA) ** 2
        return field, (basis * strength).sum(axis=0) / steep, variance

    def _along_field(self) -> tuple[Array, Array]:
        """Return how weight and variance of every resonance change along the field, each of shape (q,), 1/mT."""
        data = self.average.knots.data
        gap, slope = data.gap[self.row, self.leaf, self.knot], data.slope[self.row, self.leaf, self.knot]
        c = hermite.quintic(gap, slope * self.half)
        step = 1e-3 * self.half
        sides = []
        for sign in (1, -1):
            t = self.t + sign * step / self.half
            steep = np.maximum(np.abs(hermite.slope(c, t) / self.half), 1e-300)
            nodes, basis = stencil(data.fields, self.leaf[1], self.field + sign * step)
            weight = (basis * data.strength[self.row, nodes, self.knot]).sum(axis=0) / steep
            variance = 0.0
            if data.variance is not None:
                variance = (basis * data.variance[self.row, nodes, self.knot]).sum(axis=0)
                variance = variance / (steep * FWHM_PER_SIGMA) ** 2
            sides.append((weight, variance))
        return tuple((above - below) / (2 * step) for above, below in zip(*sides, strict=True))

    def _solved(self, system: System, request: Request, unit: Array, fields: Array) -> Levels:
        broadening = request.broadening
        return solve(
            system,
            unit,
            fields,
            microwave=request.microwave,
            operators=None if broadening is None else (broadening.h0, broadening.zeeman),
            state=None if request.populations is None else zero_field_state(system, request.populations),
        )

    def _strength(self, got: Levels, at: NDArray[np.intp], request: Request) -> tuple[Array, Array | None]:
        """Return strength, and squared width in frequency, of the resonances at points of a batch, shape of `at`."""
        strength = got.intensity[at, self.lower, self.upper]
        p = occupation(got, request.temperature)
        if p is None:
            strength = strength / got.energy.shape[1]
        else:
            strength = strength * (p[at, self.lower] - p[at, self.upper])
        if request.weigh is not None:
            strength = strength * request.weigh(self.directions)[self.knot]
        broadening = request.broadening
        if broadening is None:
            return strength, None
        shift = got.shift[at, :, self.upper] - got.shift[at, :, self.lower]
        own = np.einsum("...k,kl,...l->...", shift, broadening.covariance, shift)
        return strength, own + broadening.hidden_variance(self.directions)[self.knot]


def average_changes(average: Average, base: System, moved: Sequence[Move]) -> list[NDArray[np.complex128]] | None:
    """Return how the transform of a powder average changes, to first order, for each of several small moves.

    Parameters
    ----------
    average : Average
        Of `base`.
    moved : sequence of Move
        In all that the matrices and the broadening hold.

    Returns
    -------
    list of ndarray, complex, shape of `FieldGrid.wavenumbers`
        The differences, linearised; None where the average has pairs of levels whose changes are
        not known in this way: resonances that come and go, or are split by weak nuclei.
    """
    knots = average.knots
    if isinstance(knots, Lines):
        moves = [
            Move(symmetrised(base, one.system, average.symmetry), one.request, knots.field, knots.wave) for one in moved
        ]
        got = line_changes(knots, base, moves, average.histograms.grid, 1)
        return None if got is None else [one[0] for one in got]
    if base.weak or knots.other.any():
        return None
    if any(_singles_out(one, base, average) for one in moved):
        return None
    even = [one._replace(system=symmetrised(base, one.system, average.symmetry)) for one in moved]
    return _transforms(average, _Places(average).changes(base, even))


def _singles_out(move: Move, base: System, average: Average) -> bool:
    """Whether the moved widths have less symmetry than the average."""
    own = move.request.broadening
    if own is None:
        return False
    lowered = own.lowered(average.symmetry, base)
    return KINDS.index(lowered.kind) > KINDS.index(average.symmetry.kind)


def line_changes(
    lines: Lines, base: System, moved: Sequence[Move], grid: FieldGrid, angles: int
) -> list[list[NDArray[np.complex128]]] | None:
    """Return how the transforms of a crystal's resonances change, to first order.

    Parameters
    ----------
    lines : Lines
        Of `base`.
    moved : sequence of Move
        With directions.
    grid : FieldGrid
    angles : int
        How many there are.

    Returns
    -------
    list of list of ndarray
        For each move and each angle; None where weak nuclei split the lines.
    """
    if base.weak:
        return None
    here = _line(lines, Move(base, lines.request, lines.field, lines.wave))
    there = [_line(lines, one) for one in moved]
    changes = [np.array([new[k] - here[k] for new in there]) if here[k] is not None else None for k in range(3)]
    share = lines.share[lines.found.direction]
    angle = lines.angle[lines.found.direction]
    like = Histograms(grid, lines.request.scale)
    if here[2] is not None:
        like.reach_variance(float(here[2].max(initial=0.0)))
    out = []
    for number in range(angles):
        own = angle == number
        into = _Deposit(like, len(moved))
        sheet = lines.found.field[own], here[1][own], share[own]
        of_sheet = tuple(None if one is None else np.ascontiguousarray(one[:, own]) for one in changes)
        if here[2] is None:
            into.sheet(*sheet, np.empty(0), of_sheet[:2], False)
        else:
            into.broadened(*sheet, here[2][own], of_sheet, False)
        out.append(into.transforms())
    return [list(one) for one in zip(*out, strict=True)]


def _line(lines: Lines, move: Move) -> tuple[Array, Array, Array | None]:
    """Return field, weight and variance of each line of a crystal a little different, each of shape (r,)."""
    found, request = lines.found, move.request
    row = np.arange(len(found.field))
    unit = move.field[found.direction]
    along = "parallel" if request.microwave == "parallel" else request.microwave
    if lines.members and along != "parallel":
        along = move.wave[found.direction]
    before = solve(move.system, unit, found.field, intensities=False)
    gap = before.energy[row, found.upper] - before.energy[row, found.lower] - request.frequency
    field = found.field - gap / np.where(found.slope != 0, found.slope, np.inf)
    broadening = request.broadening
    got = solve(
        move.system,
        unit,
        field,
        microwave=along,
        operators=None if broadening is None else (broadening.h0, broadening.zeeman),
        state=None if request.populations is None else zero_field_state(move.system, request.populations),
    )
    steep = np.maximum(np.abs(got.slope[row, found.upper] - got.slope[row, found.lower]), 1e-300)
    p = occupation(got, request.temperature)
    share = 1.0 / got.energy.shape[1] if p is None else p[row, found.lower] - p[row, found.upper]
    weight = got.intensity[row, found.lower, found.upper] * share / steep
    if broadening is None:
        return field, weight, None
    shift = got.shift[row, :, found.upper] - got.shift[row, :, found.lower]
    variance = broadening.variance(shift[:, :, None], unit)[:, 0] / (np.maximum(steep, 1e-9) * FWHM_PER_SIGMA) ** 2
    return field, weight, variance


def _transforms(average: Average, moved: Moved) -> list[NDArray[np.complex128]]:
    """Carry changes at the knots to the mesh and to transforms of histograms."""
    knots, request = average.knots, average.request
    rings, branches = knots.rings, knots.branches
    to_mesh = rings.to_mesh_locally if knots.local else rings.to_mesh
    x, y, inverse = continued(branches.field, branches.weight)
    by_field = np.where(inverse, x / branches.field, 1.0)
    change_x = moved.field * np.where(inverse, -2 * by_field, 1.0)
    change_y = np.where(inverse, moved.weight * by_field - 3 * moved.field * y / branches.field, moved.weight)
    count = len(moved.field)
    into = _Deposit(average.histograms, count)
    for size in sorted(set(average.meshes)):
        rows = [i for i, s in enumerate(average.meshes) if s == size]
        mesh = Mesh(rings.kind, *size)
        weights = mesh.weights()
        step = max(1, LARGEST // (weights.size * (1 + count)))
        for start in range(0, len(rows), step):
            part = rows[start : start + step]
            stack = [x[part], y[part], *change_x[:, part], *change_y[:, part]]
            if branches.variance is not None:
                stack += [branches.variance[part], *moved.variance[:, part]]
            on_mesh = to_mesh(np.concatenate(stack), mesh).reshape(-1, len(part), *weights.shape)
            field, weight = restored(on_mesh[0], on_mesh[1], inverse[part][:, :, None])
            changes = on_mesh[2 : 2 + count], on_mesh[2 + count : 2 + 2 * count]
            smear = None
            if branches.variance is None:
                apart = spacing(field, mesh)
                if apart.max() > 1.05 * request.grain.close:
                    smear = request.grain.smear_for(apart)
            for k, row in enumerate(part):
                sheet = field[k].ravel(), weight[k].ravel(), weights.ravel()
                of_sheet = tuple(one[:, k].reshape(count, -1) for one in changes)
                if branches.variance is None:
                    into.sheet(
                        *sheet, np.empty(0) if smear is None else smear[k].ravel(), of_sheet, bool(inverse[row, 0])
                    )
                else:
                    own = np.maximum(on_mesh[2 + 2 * count, k], 0.0).ravel()
                    widths = on_mesh[3 + 2 * count :, k].reshape(count, -1)
                    into.broadened(*sheet, own, (*of_sheet, widths), bool(inverse[row, 0]))
    return into.transforms()


class _Deposit:
    """Histograms of several changes at once, class by class as in the average's own `Histograms`."""

    def __init__(self, like: Histograms, count: int) -> None:
        self.grid, self.scale, self.sizes, self.variances = like.grid, like.scale, like.sizes, like.variances
        self.near = np.zeros((count, *like.plain.shape))
        self.wide = np.zeros((count, *like.widened.shape))

    def _add(self, into: Array, rows: NDArray[np.intp] | np.intp, field: Array, moves: Array, weights: Array) -> None:
        for sign in (1, -1) if self.grid.start < 0 else (1,):  # the spectrum is even in B
            x = (sign * field - self.grid.start) / self.grid.step
            kernels.deposit_changes(into, rows, x, weights, moves * (sign / self.grid.step))

    def sheet(
        self, field: Array, weight: Array, share: Array, smear: Array, changes: tuple[Array, Array], inverse: bool
    ) -> None:
        """Add a branch over a mesh, smeared where its points lie apart; see `kernels.deposit_sheet_changes`."""
        for sign in (1, -1) if self.grid.start < 0 else (1,):  # the spectrum is even in B
            place = (sign / self.grid.step, -self.grid.start / self.grid.step)
            of = (field, weight, share, smear)
            kernels.deposit_sheet_changes(self.near, place, of, changes, inverse, float(self.sizes[0]), SMEAR_RATIO)

    def broadened(
        self, field: Array, weight: Array, share: Array, variance: Array, changes: tuple[Array, ...], inverse: bool
    ) -> None:
        """Add points with their own variances; `changes` are those of field, weight and variance, (changes, n)."""
        change_b, change_w, change_v = changes
        if inverse:
            cube = field * field * field
            change_b = -0.5 * cube * change_b
            change_w = cube * change_w + (3 * weight / field) * change_b
        moves, weights, widths = change_b * (weight * share), change_w * share, change_v * (weight * share)
        ladder = self.variances
        variance = np.clip(variance, 0.0, ladder[-1])
        first = np.clip(np.searchsorted(ladder, variance, side="right") - 2, 0, len(ladder) - 4)
        nodes = ladder[first + np.arange(4)[:, None]]
        for i in range(4):
            others = [j for j in range(4) if j != i]
            factors = [(variance - nodes[j]) / (nodes[i] - nodes[j]) for j in others]
            part = factors[0] * factors[1] * factors[2]
            slope = sum(factors[(k + 1) % 3] * factors[(k + 2) % 3] / (nodes[i] - nodes[others[k]]) for k in range(3))
            self._add(self.wide, first + i, field, moves * part, weights * part + widths * slope)

    def transforms(self) -> list[NDArray[np.complex128]]:
        """Return the transform of each change."""
        out = []
        for near, wide in zip(self.near, self.wide, strict=True):
            one = Histograms(self.grid, self.scale)
            one.plain, one.widened, one.variances = near, wide, self.variances
            out.append(one.transform())
        return out
