"""First-order changes of the average over directions when its Hamiltonian changes a little.

Knots, nodes, meshes and smears stay those of the average itself, so that a change is smooth in the
parameter.  B^-2 and W B^-3 are continued over the sphere like the average's own; their changes are
linear in them, and smooth enough for every second ring of knots.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from spinfit import kernels
from spinfit.branches import FLAT, FWHM_PER_SIGMA, KnotData
from spinfit.crossings import Crossings
from spinfit.exact import Lines
from spinfit.hamiltonian import System
from spinfit.landscape import Landscape
from spinfit.levels import occupation, solve, zero_field_state
from spinfit.lineshape import FieldGrid
from spinfit.loop_sums import add_looping, field_step
from spinfit.loops import Summed, nodes_of
from spinfit.moves import Move, Moved, Places, symmetrised
from spinfit.orientations import Mesh, Rings
from spinfit.powder import Average
from spinfit.sheets import HIDDEN, SMEAR_RATIO, Histograms, continued, restored, spacing, widest
from spinfit.symmetry import KINDS

Array = NDArray[np.float64]

GOOD_HALF = 5e-4
"""Error by every second ring up to which changes are taken from these; changes err up to ten times as much."""
GOOD_HALF_LOOPING = 2.5e-4
"""The same where there are pairs of levels without a branch."""
LOOP_SHIFT = 0.3
"""Line widths by which flat pairs of levels without a branch are moved either way for a difference."""
LARGEST = 2_000_000
"""Numbers held for a block of branches."""


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
    if any(_singles_out(one, base, average) for one in moved):
        return None
    even = [one._replace(system=symmetrised(base, one.system, average.symmetry)) for one in moved]
    coarse = knots.half_error <= (GOOD_HALF_LOOPING if average.loops else GOOD_HALF)
    rings = knots.rings.halved() if coarse else knots.rings
    places = Places(average, rings.within(knots.rings))
    if places.few and not base.weak:
        return _transforms(average, rings, places.by_resonances(base, even))
    before, after = places.before(), [places.after(one) for one in even]
    if any(one.gap.shape != before.gap.shape for one in after):
        return None
    totals = [np.zeros(len(average.histograms.grid.wavenumbers()), dtype=complex) for _ in moved]
    if len(knots.branches.pair):
        here, there = places.by_nodes(before), [places.by_nodes(one) for one in after]
        shape = (len(moved), *places.shape)
        found = Moved(*(h if h is None else np.reshape([t[k] - h for t in there], shape) for k, h in enumerate(here)))
        totals = _transforms(average, rings, found)
    for one in average.loops:
        changes = _loop_changes(average, rings, one, before, after)
        totals = [a + b for a, b in zip(totals, changes, strict=True)]
    return totals


def _loop_changes(
    average: Average, rings: Rings, summed: Summed, before: KnotData, after: Sequence[KnotData]
) -> list[NDArray[np.complex128]]:
    """Return how the transform of a pair of levels without a branch changes, to first order.

    Its sums are smooth in the level difference, so that the difference of two of them on one mesh is a
    derivative.  The mesh is every second point of the spectrum's own.  What is left of its grain moves
    with the parameter, too, and much faster than the lines: the two are therefore as far apart as the
    width of the lines allows.

    Parameters
    ----------
    rings : Rings
        Of the knots in `before` and `after`.
    """
    request, row, crossings = average.request, summed.row, average.knots.crossings
    part, fields, leaves = nodes_of(average.knots.data, summed.leaves)
    mesh = Mesh(rings.kind, summed.size[0] // 2, max(1, summed.size[1] // 2))

    def on_mesh(of: Crossings, rings: Rings) -> Array:
        return of.continued(row, part, lambda values: rings.to_mesh_locally(values, mesh))

    values = on_mesh(crossings, average.knots.rings)
    land = Landscape.of(fields, leaves, values, mesh)
    step = field_step(land, request)

    def transform(land: Landscape) -> NDArray[np.complex128]:
        histograms = Histograms(average.histograms.grid, request.scale)
        add_looping(histograms, [land], request, step)
        return histograms.transform()

    start = on_mesh(crossings.like(before), rings)
    out = []
    for one in after:
        change = on_mesh(crossings.like(one), rings) - start
        largest = np.abs(change[0]).max()
        factor = LOOP_SHIFT * FLAT * request.scale / largest if largest > 0 else 1.0
        sides = [transform(Landscape.of(fields, leaves, values + s * factor * change, mesh)) for s in (1, -1)]
        out.append((sides[0] - sides[1]) / (2 * factor))
    return out


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


def _transforms(average: Average, coarse: Rings, moved: Moved) -> list[NDArray[np.complex128]]:
    """Carry changes at the knots of `coarse` to the mesh and to transforms of histograms."""
    knots, request = average.knots, average.request
    branches = knots.branches
    to_mesh, changes_to_mesh = (one.to_mesh_locally if knots.local else one.to_mesh for one in (knots.rings, coarse))
    x, y, inverse = continued(branches.field, branches.weight)
    kept = coarse.within(knots.rings)
    by_field = np.where(inverse, (x / branches.field)[:, kept], 1.0)
    change_x = moved.field * np.where(inverse, -2 * by_field, 1.0)
    change_y = moved.weight
    if inverse.any():
        bend = 3 * moved.field * (y / branches.field)[:, kept]
        change_y = np.where(inverse, moved.weight * by_field - bend, moved.weight)
    count = len(moved.field)
    into = _Deposit(average.histograms, count)
    for size in sorted(set(average.meshes)):
        rows = [i for i, s in enumerate(average.meshes) if s == size]
        mesh = Mesh(knots.rings.kind, *size)
        weights = mesh.weights()
        step = max(1, LARGEST // (weights.size * (1 + count)))
        for start in range(0, len(rows), step):
            part = rows[start : start + step]
            stack = [x[part], y[part]]
            stack += [branches.variance[part]] if branches.variance is not None else []
            on_mesh = to_mesh(np.concatenate(stack), mesh).reshape(-1, len(part), *weights.shape)
            stack = [change_x[:, part], change_y[:, part]]
            stack += [moved.variance[:, part]] if branches.variance is not None else []
            changes = changes_to_mesh(np.concatenate(stack).reshape(-1, len(kept)), mesh)
            changes = changes.reshape(-1, count, len(part), *weights.shape)
            field, weight = restored(on_mesh[0], on_mesh[1], inverse[part][:, :, None])
            apart = spacing(field, mesh) if branches.variance is None else None
            for k, row in enumerate(part):
                sheet = field[k].ravel(), weight[k].ravel(), weights.ravel()
                of_sheet = tuple(one[:, k].reshape(count, -1) for one in changes)
                if branches.variance is None:
                    smear = np.empty(0)
                    if widest(field[k], mesh) > HIDDEN * request.grain.close:
                        smear = request.grain.smear_for(apart[k]).ravel()
                    into.sheet(*sheet, smear, of_sheet, bool(inverse[row, 0]))
                else:
                    into.broadened(*sheet, np.maximum(on_mesh[2, k], 0.0).ravel(), of_sheet, bool(inverse[row, 0]))
    return into.transforms()


class _Deposit:
    """Histograms of several changes at once, class by class as in the average's own `Histograms`."""

    def __init__(self, like: Histograms, count: int) -> None:
        self.grid, self.scale, self.sizes, self.variances = like.grid, like.scale, like.sizes, like.variances
        self.near = np.zeros((count, *like.plain.shape))
        self.wide = np.zeros((count, *like.widened.shape))
        self.wider = np.zeros((count, *like.widened.shape))

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
            part = np.ones_like(variance)
            for j in range(4):
                if i != j:
                    part *= (variance - nodes[j]) / (nodes[i] - nodes[j])
            self._add(self.wide, first + i, field, moves * part, weights * part)
            self._add(self.wider, first + i, field, np.zeros_like(widths), widths * part)

    def transforms(self) -> list[NDArray[np.complex128]]:
        """Return the transform of each change."""
        out = []
        nothing = np.zeros_like(self.near[0])
        for near, wide, wider in zip(self.near, self.wide, self.wider, strict=True):
            total = self._transform(near, wide)
            if wider.any():  # the derivative of exp(-v k^2/2) by v
                total = total - 0.5 * self.grid.wavenumbers() ** 2 * self._transform(nothing, wider)
            out.append(total)
        return out

    def _transform(self, near: Array, wide: Array) -> NDArray[np.complex128]:
        one = Histograms(self.grid, self.scale)
        one.plain, one.widened, one.variances = near, wide, self.variances
        return one.transform()
