"""From a species to matrices: H(B) = h0 + sum_a B_a zeeman[a].

    H/h = sum_i [ (mu_B/h) B.g_i.S_i + S_i.D_i.S_i + sum_kq B_k^q O_k^q(S_i) ]
        + sum_ij [ J S_i.S_j + S_i.T_ij.S_j + d_ij.(S_i x S_j) ]

Energies are E/h in MHz, fields in mT along the molecular axes.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import constants

from spinfit.operators import Matrix, add_bilinear, add_single, dimension, rotation_matrix, spin_matrices, stevens
from spinfit.species import NO_TILT, Angles, Exchange, Species, Spin, principal, tilt_matrix

MU_B = constants.value("Bohr magneton in Hz/T") * 1e-9
"""mu_B/h, MHz/mT."""

_LEVI_CIVITA = np.zeros((3, 3, 3))
_LEVI_CIVITA[[0, 1, 2], [1, 2, 0], [2, 0, 1]] = 1
_LEVI_CIVITA[[0, 1, 2], [2, 0, 1], [1, 2, 0]] = -1


@dataclass(frozen=True, eq=False)
class System:
    """One isotopologue of one species as matrices.

    Attributes
    ----------
    h0 : ndarray, shape (n, n), complex
        Hamiltonian without field, MHz.
    zeeman : ndarray, shape (3, n, n), complex
        dH/dB along the molecular axes, MHz/mT.
    spins : tuple of float
        Electron spins first, then the nuclei treated exactly; n = prod(2s + 1).
    electrons : int
        How many of `spins` are electrons.
    frames : tuple of ndarray, shape (3, 3)
        Molecular frame and the principal frames of all anisotropic tensors, axes as columns:
        the candidates for symmetry axes.
    weight : float
        Share of this isotopologue among all systems of the species; shares sum to 1.
    label : str
        Which isotopologue.
    weak : tuple
        Nuclei left out of the matrices, to be treated by perturbation.
    """

    h0: Matrix
    zeeman: Matrix
    spins: tuple[float, ...]
    electrons: int
    frames: tuple[NDArray[np.float64], ...]
    weight: float = 1.0
    label: str = ""
    weak: tuple = ()


def _turned(values: NDArray[np.float64], tilt: Angles) -> NDArray[np.float64]:
    """Return the matrix in molecular axes of a tensor with these principal values, shape (3, 3)."""
    if tilt == NO_TILT:
        return np.diag(values)
    axes = tilt_matrix(tilt)
    return (axes * values) @ axes.T


def _add_spin(h0: Matrix, zeeman: Matrix, spin: Spin, spins: tuple[float, ...], position: int) -> None:
    s = spin_matrices(spin.S)
    g = _turned(principal(spin.g), spin.g_tilt)
    add_single(zeeman, MU_B * np.tensordot(g, s, 1), spins, position)
    own = np.zeros_like(s[0])
    if spin.D or spin.zfs_E:
        values = spin.D * np.array([-1, -1, 2]) / 3 + spin.zfs_E * np.array([1, -1, 0])
        own += np.einsum("ab,aij,bjk->ik", _turned(values, spin.D_tilt), s, s)
    for (k, q), value in spin.stevens:
        own += value * stevens(spin.S, k, q)
    add_single(h0, own, spins, position)


def _exchange_matrix(exchange: Exchange) -> NDArray[np.float64]:
    """Return K with S_i.K.S_j = J S_i.S_j + S_i.T.S_j + d.(S_i x S_j), shape (3, 3), MHz."""
    dipolar = _turned(principal(exchange.dipolar), exchange.tilt)
    return exchange.J * np.eye(3) + dipolar + np.tensordot(exchange.antisymmetric, _LEVI_CIVITA, 1)


def _frames(species: Species) -> tuple[NDArray[np.float64], ...]:
    """Return the molecular frame and the frames of all tilted tensors, without repeats."""
    tilts = {NO_TILT: None}
    for spin in species.spins:
        tilts |= {spin.g_tilt: None, spin.D_tilt: None}
    tilts |= {exchange.tilt: None for exchange in species.exchange}
    return tuple(tilt_matrix(tilt) for tilt in tilts)


def systems(species: Species) -> tuple[System, ...]:
    """Return the species' isotopologues as matrices, weights summing to 1."""
    spins = tuple(float(spin.S) for spin in species.spins)
    n = dimension(spins)
    h0 = np.zeros((n, n), dtype=complex)
    zeeman = np.zeros((3, n, n), dtype=complex)
    for position, spin in enumerate(species.spins):
        _add_spin(h0, zeeman, spin, spins, position)
    for exchange in species.exchange:
        first, second = exchange.between
        add_bilinear(h0, _exchange_matrix(exchange), spins, first - 1, second - 1)
    return (System(h0, zeeman, spins, len(spins), _frames(species)),)


def rotation(system: System, axis: tuple[float, float, float], angle: float) -> Matrix:
    """Return the unitary turning all spins of a system about `axis` by `angle` (rad), shape (n, n)."""
    return rotation_matrix(system.spins, axis, angle)
