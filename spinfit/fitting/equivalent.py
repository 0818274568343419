"""Other sets of values that describe the same trace, and D and E in the conventional setting.

The names x, y, z of a zero-field tensor's axes are a choice: six permutations of them, with the
components of g and A permuted along, are the same physics with other D and E.  Convention takes the
one with 0 <= E/D <= 1/3 (common practice), which every D tensor has.  Other signs of D and A may
leave the trace unchanged as well; whether they do is for chi-squared to say.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from spinfit.fitting.residuals import Point, Problem, View
from spinfit.species import NO_TILT, Nucleus, Species, Spin, principal

Array = NDArray[np.float64]

AXES = "xyz"


def conventional(D: float, E: float) -> tuple[float, float, tuple[int, int, int]]:
    """Return D and E with 0 <= E/D <= 1/3, and which old axis each new one (x, y, z) is.

    The new z is the axis of the largest principal value by size, and of the other two the new y has
    the one of opposite sign, or the larger, so that E has the sign of D.

    Parameters
    ----------
    D, E : float
        Any unit; the tensor is diag(-D/3 + E, -D/3 - E, 2D/3).
    """
    values = np.array([-D / 3 + E, -D / 3 - E, 2 * D / 3])
    z = int(np.argmax(np.abs(values) + 1e-12 * np.abs(values).max() * np.array([0, 0, 1])))
    others = [k for k in range(3) if k != z]
    new_D = 1.5 * float(values[z])
    x, y = others
    if (values[x] - values[y]) / 2 * new_D < 0:
        x, y = y, x
    return new_D, float(values[x] - values[y]) / 2, (x, y, z)


def permuted(species: Species, axes: tuple[int, int, int]) -> Species | None:
    """Return the species with its axes renamed: the new x is the old `axes[0]`, and so on.

    None where that cannot be written down component by component: tilts, Stevens operators,
    several spins.
    """
    if len(species.spins) != 1:
        return None
    spin = species.spins[0]
    tilts = (spin.g_tilt, spin.D_tilt, *(t for n in species.nuclei for t in (n.A_tilt, n.P_tilt)))
    if spin.stevens or any(tilt != NO_TILT for tilt in tilts):
        return None
    zfs = np.array([-spin.D / 3 + spin.zfs_E, -spin.D / 3 - spin.zfs_E, 2 * spin.D / 3])[list(axes)]
    D, E = 1.5 * float(zfs[2]), float(zfs[0] - zfs[1]) / 2
    rhombicity = None if spin.rhombicity is None or D == 0 else E / D
    new = replace(spin, g=_reordered(spin.g, axes), D=D, E=E, rhombicity=rhombicity)
    nuclei = tuple(_nucleus(nucleus, axes) for nucleus in species.nuclei)
    width = replace(species.width, hidden_hyperfine=_reordered(species.width.hidden_hyperfine, axes))
    spread = replace(species.spread, g=_reordered(species.spread.g, axes), A=_reordered(species.spread.A, axes))
    return replace(species, spins=(new,), nuclei=nuclei, width=width, spread=spread)


def _nucleus(nucleus: Nucleus, axes: tuple[int, int, int]) -> Nucleus:
    return replace(nucleus, A=_reordered(nucleus.A, axes), P=_reordered(nucleus.P, axes))


def _reordered(tensor: tuple[float, ...], axes: tuple[int, int, int]) -> tuple[float, ...]:
    """Permute principal values; one number stays one."""
    if len(tensor) == 1:
        return tensor
    return tuple(float(v) for v in principal(tensor)[list(axes)])


@dataclass(frozen=True)
class Equivalent:
    """A changed species and what it does to the fit.

    Attributes
    ----------
    change : str
        In words: "axes x, y, z become z, x, y", "the other sign of D and E".
    species : Species
        With the changed values.
    chi2_rise : float
        Chi-squared with scale and baseline refitted, less that of the fit, in units of chi-squared
        per point: 0 for a true equivalent, and above 4 what 2 standard deviations exclude.
    """

    change: str
    species: Species
    chi2_rise: float


def equivalents(problem: Problem, view: View, point: Point) -> tuple[Equivalent, ...]:
    """Every renaming of axes and change of sign of every species, with its chi-squared.

    One simulation each.  Most renamings are equivalent by construction; that they come out so is a
    check of the engine as well.
    """
    per_point = max(point.chi2 / max(view.points - view.linear - point.free.size, 1), 1e-12)
    out = []
    for index, one in enumerate(point.species):
        for change, other in _changes(one):
            chi2 = _chi2_with(problem, view, point, index, other)
            out.append(Equivalent(f"{one.name}: {change}", other, (chi2 - point.chi2) / per_point))
    return tuple(out)


def _changes(one: Species) -> Iterator[tuple[str, Species]]:
    rhombic = any(spin.D != 0 for spin in one.spins)
    several = any(len(t) > 1 for t in (one.spins[0].g, *(n.A for n in one.nuclei)))
    if rhombic or several:
        for axes in itertools.permutations(range(3)):
            other = permuted(one, axes) if axes != (0, 1, 2) else None
            if other is not None and other != one:
                yield f"axes x, y, z become {', '.join(AXES[k] for k in axes)}", other
    if rhombic:
        yield "the other sign of D and E", _mirrored(one)
    if any(max(abs(a) for a in nucleus.A) > 0 for nucleus in one.nuclei):
        nuclei = tuple(replace(nucleus, A=tuple(-a for a in nucleus.A)) for nucleus in one.nuclei)
        yield "the other sign of A", replace(one, nuclei=nuclei)


def _mirrored(one: Species) -> Species:
    def turned(spin: Spin) -> Spin:
        return replace(spin, D=-spin.D, E=-spin.E, stevens=tuple((kq, -b) for kq, b in spin.stevens))

    return replace(one, spins=tuple(turned(spin) for spin in one.spins))


def _chi2_with(problem: Problem, view: View, point: Point, index: int, other: Species) -> float:
    species = (*point.species[:index], other, *point.species[index + 1 :])
    total = 0.0
    for seen, trace in zip(view.seen, point.traces, strict=True):
        column = problem.signals.total(species, trace, point.sample, seen.field, view.stage) / seen.noise
        shape = column - seen.basis @ (seen.basis.T @ column)
        size = float(shape @ shape)
        left = seen.rest - shape * (float(shape @ seen.rest) / size) if size > 0 else seen.rest
        total += float(left @ left)
    return total
