"""Widths that differ from resonance to resonance: spreads of g, D, E, A and orientation, hidden hyperfine.

A Gaussian distribution of a parameter p with width w shifts a transition's frequency by
(d nu/dp) w to first order, so it broadens it to that width; independent parameters add in
quadrature, correlated ones with their covariance.  The frequency width becomes a field width by
the slope of the transition.  Everything here is FWHM.

d nu/dp = <j|dH/dp|j> - <i|dH/dp|i> (Hellmann-Feynman), with the same eigenvectors as the energies.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import block_diag

from spinfit.hamiltonian import System, systems
from spinfit.species import Species, principal, tilt_matrix
from spinfit.symmetry import Symmetry, symmetry_of

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Broadening:
    """What broadens the transitions of one system.

    Attributes
    ----------
    h0 : ndarray, shape (k, n, n), complex
        Change of the zero-field Hamiltonian for a FWHM of each spread parameter, MHz.
    zeeman : ndarray, shape (k, 3, n, n), complex
        The same for dH/dB, MHz/mT.
    covariance : ndarray, shape (k, k)
        Correlation of the parameters, ones on the diagonal.
    hidden : ndarray, shape (3,)
        Hidden hyperfine along the g axes, MHz.
    g : ndarray, shape (3,)
    axes : ndarray, shape (3, 3)
        g axes as columns, molecular components.
    spread : tuple of str
        What each parameter is in which the Hamiltonian is linear, such as "g_z"; turns of a crystal come after them.
    """

    h0: NDArray[np.complex128]
    zeeman: NDArray[np.complex128]
    covariance: Array
    hidden: Array
    g: Array
    axes: Array
    spread: tuple[str, ...] = ()

    def variance(self, shifts: Array, directions: Array) -> Array:
        """Return the squared frequency width of transitions, MHz^2, shape (m, p).

        Parameters
        ----------
        shifts : ndarray, shape (m, k, p)
            Change of each transition's frequency for a FWHM of each parameter, MHz.
        directions : ndarray, shape (m, 3)
            Field directions, molecular axes.
        """
        total = np.einsum("mkp,kl,mlp->mp", shifts, self.covariance, shifts)
        return total + self.hidden_variance(directions)[:, None]

    def hidden_variance(self, directions: Array) -> Array:
        """Return sum_i (l_i Gamma_i)^2 with l_i = g_i n_i/g, shape (m,), MHz^2."""
        along = (directions @ self.axes) * self.g
        share = along**2 / (along**2).sum(axis=1, keepdims=True)
        return share @ self.hidden**2

    def lowered(self, symmetry: Symmetry, system: System) -> Symmetry:
        """Return the symmetry of system and widths together.

        Parameters spread along the axes of tensors keep the symmetry that the tensors have in
        common, as long as a spread does not single out an axis that a tensor does not.
        """
        moved = [
            replace(system, h0=system.h0 + h0, zeeman=system.zeeman + z)
            for h0, z in zip(self.h0, self.zeeman, strict=True)
        ]
        if np.ptp(self.hidden) > 0:
            # along the g axes: as a g-tensor with these squares would be
            axes = (self.axes * (1 + self.hidden**2 / max(self.hidden.max() ** 2, 1e-300))) @ self.axes.T
            extra = np.tensordot(axes, system.zeeman, 1)
            moved.append(replace(system, zeeman=system.zeeman + 0.1 * extra, frames=(*system.frames, self.axes)))
        return symmetry_of(system, *moved) if moved else symmetry


def broadening(species: Species) -> tuple[Broadening, ...] | None:
    """Return the broadening of each system of a species, None where every resonance is alike."""
    hidden = principal(species.width.hidden_hyperfine)
    changes, covariance, names = _changes(species)
    tilt = species.spread.tilt
    if not changes and not hidden.any() and not tilt:
        return None
    base = systems(species, perturb=True)
    if tilt:
        covariance = block_diag(covariance, np.eye(3))
    moved = [systems(change, perturb=True) for change in changes]
    spin = species.spins[0]
    out = []
    for number, system in enumerate(base):
        n = len(system.h0)
        h0 = np.array([other[number].h0 - system.h0 for other in moved]).reshape(len(moved), n, n)
        zeeman = np.array([other[number].zeeman - system.zeeman for other in moved]).reshape(len(moved), 3, n, n)
        if tilt:
            h0 = np.concatenate((h0, np.zeros((3, n, n))))
            zeeman = np.concatenate((zeeman, tilt * turned(system.zeeman)))
        axes = tilt_matrix(spin.g_tilt)
        out.append(Broadening(h0, zeeman, covariance, hidden, principal(spin.g), axes, names))
    return tuple(out)


def turned(zeeman: NDArray[np.complex128]) -> NDArray[np.complex128]:
    """Change of dH/dB when the sample is turned about x, y or z, for an angle of 1 rad, shape (3, 3, n, n).

    Only how the field stands to the sample counts, and n + phi a x n in place of n is linear in n.
    """
    turns = np.array([np.cross(axis, np.eye(3)) for axis in np.eye(3)])
    return np.einsum("aji,ikl->ajkl", turns, zeeman)


def _changes(species: Species) -> tuple[list[Species], Array, tuple[str, ...]]:
    """Return the species moved by each spread's FWHM in turn, the correlation of the spreads, and their names.

    The Hamiltonian is linear in all of them, so that the difference is the derivative times the
    width.  D is spread at constant E, whichever way E was given.
    """
    spread = species.spread
    changes: list[Species] = []
    labels: list[tuple[str, int]] = []

    def add(label: tuple[str, int], width: float, change: Callable[[float], Species]) -> None:
        if width > 0:
            labels.append(label)
            changes.append(change(width))

    first = species.spins[0]
    for number, members in _components(spread.g, first.g):
        add(("g", number), spread.g[number], lambda w, m=members: _with_spin(species, g=_moved(first.g, m, w)))
    fixed = replace(first, E=first.zfs_E, rhombicity=None)
    add(("D", 0), spread.D, lambda w: _with_spin(species, E=fixed.E, rhombicity=None, D=fixed.D + w))
    add(("E", 0), spread.E, lambda w: _with_spin(species, E=fixed.E + w, rhombicity=None))
    if species.nuclei and max(spread.A) > 0:
        strongest = max(range(len(species.nuclei)), key=lambda k: max(abs(a) for a in species.nuclei[k].A))
        nucleus = species.nuclei[strongest]
        for number, members in _components(spread.A, nucleus.A):
            add(
                ("A", number),
                spread.A[number],
                lambda w, m=members: _with_nucleus(species, strongest, _moved(nucleus.A, m, w)),
            )
    covariance = np.eye(len(labels))
    for i, (kind, number) in enumerate(labels):
        for j, (other, same) in enumerate(labels):
            pair = {kind, other}
            if pair == {"g", "A"} and number == same and len(spread.g) == len(spread.A):
                covariance[i, j] = spread.correlation_g_A
            elif pair == {"D", "E"}:
                covariance[i, j] = spread.correlation_D_E
    suffixes = {1: ("",), 2: ("_perp", "_par"), 3: ("_x", "_y", "_z")}
    sizes = {"g": len(spread.g), "A": len(spread.A)}
    return changes, covariance, tuple(kind + suffixes[sizes.get(kind, 1)][number] for kind, number in labels)


def _components(widths: tuple[float, ...], values: tuple[float, ...]) -> list[tuple[int, tuple[int, ...]]]:
    """Return for each width which of x, y, z move with it; two-number spreads move x and y together."""
    if len(widths) == 1:
        return [(0, (0, 1, 2))]
    if len(widths) == 2:
        return [(0, (0, 1)), (1, (2,))]
    return [(k, (k,)) for k in range(3)]


def _moved(values: tuple[float, ...], members: tuple[int, ...], width: float) -> tuple[float, ...]:
    full = principal(values).copy()
    full[list(members)] += width
    return tuple(float(v) for v in full)


def _with_spin(species: Species, **values: object) -> Species:
    return replace(species, spins=(replace(species.spins[0], **values), *species.spins[1:]))


def _with_nucleus(species: Species, number: int, a: tuple[float, ...]) -> Species:
    nuclei = list(species.nuclei)
    nuclei[number] = replace(nuclei[number], A=a)
    return replace(species, nuclei=tuple(nuclei))
