"""From exact levels to what a resonance measures: g of a Kramers doublet; g, D and E of a spin manifold."""

from __future__ import annotations

from dataclasses import dataclass, replace
from itertools import permutations
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spinfit.errors import InputError
from spinfit.ion.model import DENSE, IonModel, Levels, solve
from spinfit.ion.names import half
from spinfit.ion.terms import hund
from spinfit.operators import spin_matrices, stevens
from spinfit.units import MHZ_PER_WAVENUMBER

PURE = 0.85
"""Smallest overlap with pure spin states at which levels are still called those of a spin."""


@dataclass(frozen=True, eq=False)
class DoubletG:
    """Effective g-tensor of a Kramers doublet, effective spin 1/2.

    Attributes
    ----------
    principal : ndarray, shape (3,)
        Moduli of the principal values, in the order of `axes`.
    axes : ndarray, shape (3, 3)
        Principal axes in molecular components, as columns, right-handed.  Ordered so that each column lies
        as near as possible to x, y, z.
    G : ndarray, shape (3, 3)
        G = g g^T: g along n is sqrt(n G n).
    determinant_sign : int
        Sign of det g, +1 or -1, which circular polarisation measures; 0 where a principal value vanishes.
    orbital, spin : ndarray, shape (3,)
        Part of each principal value from k L and from g_S S; they add up to `principal`.
    energy : float
        Above the lowest level, MHz.
    """

    principal: NDArray[np.float64]
    axes: NDArray[np.float64]
    G: NDArray[np.float64]
    determinant_sign: int
    orbital: NDArray[np.float64]
    spin: NDArray[np.float64]
    energy: float

    @property
    def matrix(self) -> NDArray[np.float64]:
        """The symmetric positive g-tensor, sqrt(G), shape (3, 3), molecular axes."""
        return (self.axes * self.principal) @ self.axes.T

    def as_record(self) -> dict[str, object]:
        """Return the machine-readable form; the axes are lists of x, y, z components."""
        return {
            "g": self.principal.tolist(),
            "axes": self.axes.T.tolist(),
            "determinant_sign": self.determinant_sign,
            "from_orbital": self.orbital.tolist(),
            "from_spin": self.spin.tolist(),
            "energy_cm1": self.energy / MHZ_PER_WAVENUMBER,
        }


def doublet_g(levels: Levels, *, which: int = 0) -> DoubletG:
    """Return the effective g of a Kramers doublet.

    The moment k L + g_S S within the doublet is 1/2 sum_j g_ij sigma_j, so that G_ij = (g g^T)_ij =
    2 Tr(M_i M_j) and det g = 4 Im Tr(M_x M_y M_z), whatever the choice of the two states
    (A. Abragam, B. Bleaney, Electron Paramagnetic Resonance of Transition Ions (1970), section 15.8).

    Parameters
    ----------
    which : int
        Which doublet, counted from 0 by energy.

    Raises
    ------
    InputError
        For an even number of electrons (no Kramers doublets) and for a level that is not twofold.
    """
    model = levels.model
    if not model.kramers:
        raise InputError(
            f"{model.name or model.shell} has an even number of electrons: its levels are no Kramers doublets",
            "ask for D, E and g of its spin manifold instead",
        )
    degeneracies = levels.degeneracies()
    if not 0 <= which < len(degeneracies):
        raise InputError(f"there is no level {which + 1}", f"{len(degeneracies)} levels were computed")
    first = sum(degeneracies[:which])
    if degeneracies[which] != 2:
        place = "the ground level" if which == 0 else f"level {which + 1}"
        raise InputError(
            f"{place} of {model.name or model.shell} is {degeneracies[which]}-fold, not a doublet",
            "lower the symmetry of the crystal field or ask for another level",
        )
    columns = slice(first, first + 2)
    orbital, spin = levels.matrices(columns)
    orbital, spin = model.reduction * orbital, model.g_spin * spin
    return _from_moments(orbital, spin, float(levels.excitation[first]))


def _from_moments(orbital: NDArray[Any], spin: NDArray[Any], energy: float) -> DoubletG:
    """Build the tensor from the moment's 2x2 matrices, each of shape (3, 2, 2)."""
    total = orbital + spin
    G = 2 * np.einsum("iab,jba->ij", total, total).real
    G = (G + G.T) / 2
    squares, axes = principal_axes(G)
    principal = np.sqrt(np.clip(squares, 0, None))
    determinant = 4 * np.einsum("ab,bc,ca->", *total).imag
    scale = max(principal.max(), 1e-300) ** 3
    sign = 0 if abs(determinant) < 1e-9 * scale else int(np.sign(determinant))
    # g_i is the length of row i of g in these axes; its L and S parts are projections on the same row.
    along = [np.einsum("ji,jab->iab", axes, m) for m in (total, orbital)]
    rows = 2 * np.einsum("iab,iba->i", along[0], along[1]).real
    safe = np.where(principal > 1e-9, principal, 1.0)
    orbital_part = np.where(principal > 1e-9, rows / safe, 0.0)
    return DoubletG(principal, axes, G, sign, orbital_part, principal - orbital_part, energy)


def principal_axes(tensor: NDArray[Any]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return principal values and axes of a symmetric tensor, ordered to lie as near as possible to x, y, z.

    The axes are columns, right-handed, with a positive diagonal where possible.  Where values coincide (to
    1e-7), their axes are free and are taken as near to x, y, z as they can be.
    """
    values, vectors = np.linalg.eigh(tensor)
    edges = np.flatnonzero(np.diff(values) > 1e-7 * max(np.abs(values).max(), 1e-300)) + 1
    for group in np.split(np.arange(3), edges):
        if len(group) > 1:
            vectors[:, group] = _straightened(vectors[:, group])
    overlap = np.abs(vectors)
    best, order = -1.0, np.arange(3)
    for trial in permutations(range(3)):
        value = sum(overlap[i, trial[i]] for i in range(3))
        if value > best + 1e-9:
            best, order = value, np.array(trial)
    axes = vectors[:, order] * np.where(np.diag(vectors[:, order]) < 0, -1.0, 1.0)
    if np.linalg.det(axes) < 0:
        axes[:, np.argmin(np.abs(np.diag(axes)))] *= -1
    return values[order], axes + 0.0  # no minus before zero


def _straightened(vectors: NDArray[Any]) -> NDArray[np.float64]:
    """Return another orthonormal basis of the same space, near the Cartesian axes that lie closest to it."""
    projector = vectors @ vectors.T
    nearest = np.sort(np.argsort(-np.diag(projector), kind="stable")[: vectors.shape[1]])
    u, _, vt = np.linalg.svd(projector[:, nearest], full_matrices=False)
    return u @ vt


@dataclass(frozen=True, eq=False)
class SpinHamiltonian:
    """The lowest 2S+1 levels written as muB B.g.S + S.D.S.

    Attributes
    ----------
    S : float
        Effective spin.
    g : ndarray, shape (3, 3)
        Symmetric, molecular axes.
    D_tensor : ndarray, shape (3, 3)
        Symmetric and traceless, MHz, molecular axes.
    D, E : float
        MHz, in the axes of `D_axes`: D = 3/2 D_zz, E = (D_xx - D_yy)/2, 0 <= E/D <= 1/3.
    D_axes : ndarray, shape (3, 3)
        x, y, z of the D-tensor in molecular components, as columns.
    g_principal, g_axes : ndarray, shapes (3,), (3, 3)
        As for `DoubletG`.
    zfs_error : float
        What S.D.S leaves of the zero-field energies, root mean square, MHz (terms of fourth order).
    g_error : float
        What B.g.S leaves of the moments, root mean square of its matrix elements relative to those of g.
    purity : float
        Smallest singular value of the overlap with the pure spin states, 0 to 1: how far the levels are
        those of a spin at all.
    """

    S: float
    g: NDArray[np.float64]
    D_tensor: NDArray[np.float64]
    D: float
    E: float
    D_axes: NDArray[np.float64]
    g_principal: NDArray[np.float64]
    g_axes: NDArray[np.float64]
    zfs_error: float
    g_error: float
    purity: float


def spin_hamiltonian(model: IonModel, *, levels: Levels | None = None, spin: float | None = None) -> SpinHamiltonian:
    """Project the ground manifold onto a spin Hamiltonian.

    The lowest 2S+1 exact states are brought as near as possible to the pure spin states |S M> that the model
    has without spin-orbit coupling (their symmetric orthonormalisation, J. des Cloizeaux, Nucl. Phys. 20, 321
    (1960)); energies and moments in that basis are resolved into spin operators.

    Parameters
    ----------
    levels : Levels, optional
        Of the same model, where they were computed already.
    spin : float, optional
        S of the ground manifold, refused when the model says otherwise.

    Raises
    ------
    InputError
        When the ground state without spin-orbit coupling is orbitally degenerate: then no spin Hamiltonian
        describes it (ask for the g of a doublet).
    """
    levels = solve(model) if levels is None else levels
    if model.space == "level":
        raise InputError("the ground level alone has no spin manifold", 'use the space "configuration" or "term"')
    # The spin of the ground manifold is not known yet; Hund's is the largest it can be.
    few = None if len(levels.states) <= DENSE else min(24, 3 * (round(2 * hund((model.shell,))[0]) + 1))
    reference, S = spin_states(model, solve(replace(model, zeta=0.0), lowest=few))
    if spin is not None and spin != S:
        raise InputError(f"the ground state has S = {half(S)}, not {half(spin)}", "change the crystal field or S")
    if S == 0:
        raise InputError(
            f"the ground state of {model.name or model.shell} has no spin (S = 0)", "there is nothing to resonate"
        )
    size = round(2 * S) + 1
    if len(levels.energies) < size:
        raise InputError(f"{len(levels.energies)} levels", f"compute at least {size}", place="lowest")
    overlap = reference.conj().T @ levels.states[:, :size]
    left, singular, right = np.linalg.svd(overlap)
    turn = left @ right
    purity = float(singular[-1])
    if purity < PURE:
        raise InputError(
            f"the lowest {size} levels of {model.name or model.shell} are not those of a spin S = {half(S)}",
            "spin-orbit coupling mixes them too strongly: ask for the g of a doublet",
        )
    effective = (turn * levels.excitation[:size]) @ turn.conj().T
    moments = turn @ levels.moments(slice(0, size)) @ turn.conj().T
    return _resolve(S, effective, moments, purity)


def spin_states(model: IonModel, without: Levels) -> tuple[NDArray[Any], float]:
    """Return the pure states |S M>, M falling, of the ground manifold and its S.

    Parameters
    ----------
    without : Levels
        Of the same model without spin-orbit coupling.

    Raises
    ------
    InputError
        When that ground state is orbitally degenerate.
    """
    size = without.degeneracies()[0]
    _, spins = without.matrices(slice(0, size))
    square = np.einsum("iab,ibc->ac", spins, spins)
    total = float(np.trace(square).real) / size
    S = round(2 * (np.sqrt(0.25 + total) - 0.5)) / 2
    pure = np.allclose(square, S * (S + 1) * np.eye(size), atol=1e-6 * size)
    if size != round(2 * S) + 1 or not pure:
        raise InputError(
            f"the ground state of {model.name or model.shell} without spin-orbit coupling is orbitally degenerate "
            f"({size}-fold)",
            "lower the symmetry of the crystal field, or ask for the g of a doublet",
        )
    _, vectors = np.linalg.eigh(spins[2])
    states = without.states[:, :size] @ vectors[:, ::-1]
    raising = spins[0] + 1j * spins[1]
    raising = vectors[:, ::-1].conj().T @ raising @ vectors[:, ::-1]
    phase = 1.0 + 0j
    states = states.astype(complex)
    for m in range(1, size):
        # <m-1|S_+|m> must be positive; each state takes the phase that makes it so.
        element = np.conj(phase) * raising[m - 1, m]
        phase = np.conj(element) / abs(element)
        states[:, m] *= phase
    return states, S


def _resolve(S: float, effective: NDArray[Any], moments: NDArray[Any], purity: float) -> SpinHamiltonian:
    """Resolve energies and moments over |S M> into g and D."""
    spins = spin_matrices(S)
    norm = S * (S + 1) * (2 * S + 1) / 3
    raw_g = np.einsum("iab,jba->ij", moments, spins).real / norm
    fitted = np.einsum("ij,jab->iab", raw_g, spins)
    g_error = float(np.linalg.norm(moments - fitted) / max(np.linalg.norm(fitted), 1e-300))
    D_tensor, zfs_error = _zero_field(S, effective)
    # The axes of the effective spin are ours to choose: those in which g is symmetric.
    u, s, vt = np.linalg.svd(raw_g)
    g = (u * s) @ u.T
    turn = u @ vt
    D_tensor = turn @ D_tensor @ turn.T
    values, g_axes = principal_axes(g)
    D, E, D_axes = d_and_e(D_tensor)
    return SpinHamiltonian(S, g, D_tensor, D, E, D_axes, values, g_axes, zfs_error, g_error, purity)


def _zero_field(S: float, effective: NDArray[Any]) -> tuple[NDArray[Any], float]:
    """Return the D-tensor and what it leaves, rms in MHz."""
    size = round(2 * S) + 1
    centred = effective - np.trace(effective) / size * np.eye(size)
    tensor = np.zeros((3, 3))
    rest = centred
    if S >= 1:
        parts = {
            0: np.diag([-1.0, -1.0, 2.0]),
            2: np.diag([1.0, -1.0, 0.0]),
            -2: np.array([[0, 1.0, 0], [1.0, 0, 0], [0, 0, 0]]),
            1: np.array([[0, 0, 0.5], [0, 0, 0], [0.5, 0, 0]]),
            -1: np.array([[0, 0, 0], [0, 0, 0.5], [0, 0.5, 0]]),
        }
        for q, part in parts.items():
            operator = stevens(S, 2, q)
            amount = float((np.vdot(operator, centred) / np.vdot(operator, operator)).real)
            tensor += amount * part
            rest = rest - amount * operator
    return tensor, float(np.linalg.norm(rest) / np.sqrt(size))


def d_and_e(tensor: NDArray[Any]) -> tuple[float, float, NDArray[np.float64]]:
    """Return D, E (0 <= E/D <= 1/3) and the axes x, y, z, as columns, of a traceless symmetric tensor."""
    values, vectors = np.linalg.eigh(tensor)
    values = values - values.mean()
    z = int(np.argmax(np.abs(values)))
    x, y = (i for i in range(3) if i != z)
    if (values[x] - values[y]) * values[z] < 0:
        x, y = y, x
    axes = vectors[:, [x, y, z]]
    if np.linalg.det(axes) < 0:
        axes[:, 1] *= -1
    return float(1.5 * values[z]), float((values[x] - values[y]) / 2), axes
