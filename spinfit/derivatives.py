"""How a spectrum changes, to first order, when its species or sample change a little.

A fit asks for the derivative of a spectrum with respect to each of its parameters.  Whatever a
parameter is, its small change moves the matrices of the systems, the broadening, the line shape or a
crystal's directions; each of these is followed exactly to first order through the average that
`simulate(..., keep=True)` has already done.  Nothing is searched for or refined again, and the choices
of the average (knots, meshes, classes of smears) are those of the spectrum itself.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from spinfit.branches import Request
from spinfit.broadening import Broadening, broadening
from spinfit.changes import average_changes, line_changes
from spinfit.crystal import moved_directions
from spinfit.distribution import axes, expanded
from spinfit.errors import InputError
from spinfit.exact import Lines
from spinfit.hamiltonian import System, systems
from spinfit.lineshape import Shape
from spinfit.moves import Move
from spinfit.species import Species
from spinfit.spectrum import Kept
from spinfit.sweep import Sample

Array = NDArray[np.float64]
Transforms = list[NDArray[np.complex128]]

# Spectra that are drawn together.
_DRAWN_AT_ONCE = 32


def signal_changes(kept: Kept, moved: Sequence[tuple[Species, Sample]]) -> list[Array | None]:
    """Return the linearised change of one species' spectrum for each of several small moves.

    Parameters
    ----------
    kept : Kept
        From `spinfit.spectrum.simulate` with ``keep=True``.
    moved : sequence of (Species, Sample)
        Species and sample, each a little different from those of the spectrum: in parameters, not in
        structure.  The smaller the move, the less its second order matters; moves of a part in 10^4 of
        a typical change leave ten digits of the levels for the difference.

    Returns
    -------
    list of ndarray, shape (angles, n), or None
        For an amount of 1; None where only a difference of two simulations can tell: resonances that
        come and go with direction, weak nuclei, solutions, and the order of aligned samples.
    """
    out: list[Array | None] = [None] * len(moved)
    if len(kept.averages) != len(kept.systems):
        return out
    transforms: dict[int, NDArray[np.complex128]] = {}
    plain = kept.shape.transform(kept.grid.wavenumbers())
    totals = np.array(kept.totals)
    followed: list[tuple[int, tuple[System, ...], tuple[Broadening | None, ...], Sample]] = []
    for number, (species, sample) in enumerate(moved):
        species = _treated(species, kept.species)
        if not _alike(sample, kept.sample):
            continue
        try:
            own = systems(species, perturb=True)
        except InputError:
            continue
        widths = broadening(species) or (None,) * len(own)
        if kept.mixture:
            if widths[0] is None or axes(widths[0]).shape[1] != len(next(iter(kept.mixture)).at):
                continue
            own, widths = expanded(own, widths, kept.mixture)
        if [s.spins for s in own] != [s.spins for s in kept.systems]:
            continue
        if any((a is None) != (b is None) for a, b in zip(widths, _broadenings(kept), strict=True)):
            continue
        shape = replace(
            Shape.from_widths(species.width.gaussian, species.width.lorentzian),
            detect=kept.shape.detect,
            modulation=kept.shape.modulation,
            phase=kept.shape.phase,
        )
        reshaped = 0.0 if shape == kept.shape else shape.transform(kept.grid.wavenumbers()) - plain
        transforms[number] = totals * reshaped
        if sample != kept.sample or _differs(kept, own, widths):
            followed.append((number, own, widths, sample))
    changes = _followed(kept, followed) if followed else []
    for (number, *_), change in zip(followed, changes, strict=True):
        if change is None:
            del transforms[number]
        else:
            transforms[number] = transforms[number] + plain * np.array(change)
    for numbers in _batched(list(transforms), len(totals)):
        drawn = kept.grid.sample(kept.grid.spline(np.array([transforms[n] for n in numbers])), kept.fields)
        for number, one in zip(numbers, drawn, strict=True):
            out[number] = one
    return out


def _batched(numbers: list[int], rows: int) -> list[list[int]]:
    """Cut a list into pieces of at most `_DRAWN_AT_ONCE` rows, each number having as many."""
    size = max(_DRAWN_AT_ONCE // max(rows, 1), 1)
    return [numbers[k : k + size] for k in range(0, len(numbers), size)]


def field_slope(kept: Kept) -> Array:
    """Return the derivative of one species' spectrum with respect to the field, shape (angles, n), 1/mT."""
    k = kept.grid.wavenumbers()
    return np.array([_drawn(kept, 1j * k * total, kept.shape) for total in kept.totals])


def phase_slope(kept: Kept) -> Array:
    """Return the derivative with respect to the microwave phase, shape (angles, n), 1/rad.

    cos(phase) chi'' + sin(phase) chi': a quarter turn on is the derivative, exactly.
    """
    turned = replace(kept.shape, phase=kept.shape.phase + 0.5 * math.pi)
    return np.array([_drawn(kept, total, turned) for total in kept.totals])


def _drawn(kept: Kept, transform: NDArray[np.complex128], shape: Shape) -> Array:
    return kept.grid.sample(kept.grid.render(transform, shape), kept.fields)


def _treated(species: Species, like: Species) -> Species:
    """Return a species with every nucleus treated as in another one."""
    nuclei = tuple(replace(one, treat=other.treat) for one, other in zip(species.nuclei, like.nuclei, strict=True))
    return replace(species, nuclei=nuclei)


def _alike(sample: Sample, like: Sample) -> bool:
    """Whether two samples differ in nothing but a crystal's orientation."""
    return sample == like or (
        sample.form == like.form == "crystal" and replace(sample, tilt=like.tilt, angle_zero=like.angle_zero) == like
    )


def _requests(kept: Kept) -> list[Request]:
    return [one.request for one in kept.averages]


def _broadenings(kept: Kept) -> list[Broadening | None]:
    return [one.broadening for one in _requests(kept)]


def _differs(kept: Kept, own: Sequence[System], widths: Sequence[Broadening | None]) -> bool:
    """Whether matrices or broadening of any system differ from those of the spectrum."""
    pairs = zip(own, kept.systems, widths, _broadenings(kept), strict=True)
    return any(
        not np.array_equal(a.h0, b.h0)
        or not np.array_equal(a.zeeman, b.zeeman)
        or not np.array_equal(_tensors(a), _tensors(b))
        or _wider(x, y)
        for a, b, x, y in pairs
    )


def _tensors(system: System) -> Array:
    """Return the tensors of the weak nuclei, one after the other."""
    several = [t for one in system.weak for kind in one.kinds for t in (kind.hyperfine, kind.quadrupole)]
    return np.reshape(several, (-1, 3, 3))


def _wider(one: Broadening | None, other: Broadening | None) -> bool:
    if one is None or other is None:
        return one is not other
    return any(not np.array_equal(a, b) for a, b in zip(vars(one).values(), vars(other).values(), strict=True))


def _followed(
    kept: Kept, moved: Sequence[tuple[int, tuple[System, ...], tuple[Broadening | None, ...], Sample]]
) -> list[Transforms | None]:
    """Return the change of the transforms, one for each angle, of each move; None where it is not known."""
    totals: list[Transforms | None] = [[0.0] * len(kept.totals) for _ in moved]
    for number, (base, average) in enumerate(zip(kept.systems, kept.averages, strict=True)):
        moves = []
        for _, own, widths, sample in moved:
            request = replace(average.request, broadening=widths[number])
            if isinstance(average, Lines):
                moves.append(Move(own[number], request, *moved_directions(average, sample, kept.angles)))
            else:
                moves.append(Move(own[number], request))
        if isinstance(average, Lines):
            got = line_changes(average, base, moves, kept.grid, len(kept.totals))
        else:
            found = average_changes(average, base, moves)
            got = None if found is None else [[one] for one in found]
        if got is None:
            return [None] * len(moved)
        for total, change in zip(totals, got, strict=True):
            for k, one in enumerate(change):
                total[k] = total[k] + base.weight * one
    return totals
