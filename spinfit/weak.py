"""Weakly coupled nuclei: how they split the transitions of the exactly treated spins.

With the electron (and strongly coupled nuclear) spins in level i, of energy E_i, a weak nucleus feels

    h_i = (A^T <i|S|i> - g_n mu_N/h B) . I  +  I.P.I
          + sum over k != i of (I.A^T <i|S|k>) (<k|S|i>.A I) / (E_i - E_k),

the last line in second order only (C. P. Slichter, Principles of Magnetic Resonance, chapter on
perturbation; the operator keeps its order, so that its antisymmetric part is linear in I).  A
transition i -> j then becomes lines n -> n' that are shifted by the difference of the eigenvalues of
h_j and h_i and have the share |<n|n'>|^2 / (2I+1) of its intensity (J. R. Rowan, E. L. Hahn,
W. B. Mims, Phys. Rev. 137, A61 (1965)): where the nuclear Zeeman term turns the axis of
quantisation, nuclear spins flip along and satellites appear.

Equivalent nuclei without P enter by their total spin F, which holds their second-order cross terms;
those between different nuclei, and those of equivalent nuclei with P, are left out.

Energies are E/h in MHz, fields in mT.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from functools import lru_cache
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from spinfit.hamiltonian import System
from spinfit.isotopes import mixtures
from spinfit.nuclei import Kind, Weak
from spinfit.operators import add_block, coupled_spins, dimension, multiplicity, spin_matrices

Array = NDArray[np.float64]
Index = NDArray[np.intp]

MOST_COUPLED = 12
"""Largest 2F for which equivalent nuclei are coupled to total spins; larger sets are multiplied out."""
OFF_AXIS = 0.02
"""Second-order operator, relative to the linear term, above which its part off the axis counts."""


class Felt(NamedTuple):
    """What weak nuclei feel of one electron spin in every level, for m points.

    Attributes
    ----------
    mean : ndarray, shape (m, n, 3)
        <i|S|i>.
    square : ndarray, shape (m, n, 3, 3)
        Real, symmetric part of sum_k <i|S_a|k><k|S_b|i>/(E_i - E_k), 1/MHz.
    axial : ndarray, shape (m, n, 3)
        Its imaginary, antisymmetric part as a vector, e_abc Im(..)_bc / 2.
    """

    mean: Array
    square: Array
    axial: Array


class Part(NamedTuple):
    """A nuclear spin, or total spin, with its share of the states of the set it belongs to."""

    share: float
    spin: float
    kind: Kind


class Terms(NamedTuple):
    """Eigenvalues (m, n, d) of one part in every level, with axes (m, n, 3) or eigenvectors (m, n, d, d)."""

    energy: Array
    axis: Array | None
    vectors: NDArray[np.complex128] | None


def electron_matrices(system: System, electron: int) -> NDArray[np.complex128]:
    """Return the spin matrices of one electron spin in a system's product space, shape (3, n, n)."""
    n = len(system.h0)
    out = np.zeros((3, n, n), dtype=complex)
    add_block(out, spin_matrices(system.spins[electron]), dimension(system.spins[:electron]))
    return out


def felt(system: System, energy: Array, vectors: NDArray[np.complex128]) -> dict[int, Felt]:
    """Return, for each electron spin that has weak nuclei, what they feel.

    Denominators are kept from vanishing: 1/x becomes x/(x^2 + 4 |a S|^2) with the largest coupling
    a of a weak nucleus, which bounds a shift by a quarter of the coupling itself.

    Parameters
    ----------
    energy : ndarray, shape (m, n)
    vectors : ndarray, shape (m, n, n)
        Eigenvectors as columns.
    """
    n = energy.shape[1]
    out = {}
    for electron in sorted({one.electron for one in system.weak}):
        spins = electron_matrices(system, electron)
        side_by_side = np.ascontiguousarray(spins.transpose(1, 0, 2)).reshape(n, 3 * n)
        s = vectors.conj().transpose(0, 2, 1) @ side_by_side
        s = (s.reshape(-1, 3 * n, n) @ vectors).reshape(-1, n, 3, n).transpose(0, 1, 3, 2)
        mean = np.einsum("miia->mia", s).real.copy()
        if all(one.order == 1 for one in system.weak):
            out[electron] = Felt(mean, np.zeros((*mean.shape, 3)), np.zeros_like(mean))
            continue
        strongest = max(_size(one) for one in system.weak)
        gap = energy[:, :, None] - energy[:, None, :]
        size = (s.real**2 + s.imag**2).sum(axis=-1)
        inverse = gap / np.maximum(gap**2 + (2 * strongest) ** 2 * size, 1e-30)
        # rows: (n, k) (k, 3): real and imaginary parts apart are smaller and faster than complex ones
        re, im = s.real * inverse[..., None], s.imag * inverse[..., None]
        square = re.swapaxes(-1, -2) @ s.real + im.swapaxes(-1, -2) @ s.imag
        turn = im.swapaxes(-1, -2) @ s.real - re.swapaxes(-1, -2) @ s.imag
        axial = np.stack([turn[..., 1, 2], turn[..., 2, 0], turn[..., 0, 1]], axis=-1)
        out[electron] = Felt(mean, square, axial)
    return out


def _size(one: Weak) -> float:
    return max(float(np.linalg.norm(kind.hyperfine, 2)) * max(kind.spin, 0.5) for kind in one.kinds)


def extent(system: System, field: float) -> float:
    """Return how far, MHz, weak nuclei shift transitions: at most, or 4.5 standard deviations if less."""
    most = square = 0.0
    for one in system.weak:
        spin = system.spins[one.electron]
        reach = 0.0
        for kind in one.kinds:
            a, p = np.linalg.norm(kind.hyperfine, 2), np.linalg.norm(kind.quadrupole, 2)
            # transitions change <S> by about one; satellites by nuclear flips besides
            linear = a * max(1.0, 0.5 * spin) + 2 * abs(kind.zeeman) * field * (a > 0)
            reach = max(reach, kind.spin * linear + kind.spin**2 * 2 * p)
        most += one.count * reach
        square += one.count * reach**2
    return min(most, 4.5 * math.sqrt(square))


@lru_cache(maxsize=256)
def _fillings(shares: tuple[float, ...], count: int) -> tuple[tuple[float, tuple[int, ...]], ...]:
    ways = sorted(mixtures(shares, count), key=lambda way: -way[0])
    total, kept = 0.0, []
    for share, filling in ways:
        kept.append((share, filling))
        total += share
        if total > 1 - 1e-4:
            break
    return tuple((share / total, filling) for share, filling in kept)


def sets(one: Weak) -> Iterator[tuple[float, list[tuple[int, list[Part]]]]]:
    """Yield the ways to fill equivalent places with isotopes.

    Each is (share, sets): a set is a list of parts, of which the spin is one or the other by their
    shares, and how often the set occurs; different sets are independent.
    """
    if one.count == 1:
        yield 1.0, [(1, [Part(kind.share, kind.spin, kind) for kind in one.kinds])]
        return
    for share, filling in _fillings(tuple(kind.share for kind in one.kinds), one.count):
        found: list[tuple[int, list[Part]]] = []
        for kind, count in zip(one.kinds, filling, strict=True):
            if not count or not kind.spin:
                continue
            if count == 1 or np.any(kind.quadrupole) or 2 * count * kind.spin > MOST_COUPLED:
                found.append((count, [Part(1.0, kind.spin, kind)]))
                continue
            states = multiplicity(kind.spin) ** count
            coupled = coupled_spins(kind.spin, count)
            found.append((1, [Part(often * multiplicity(f) / states, f, kind) for f, often in coupled]))
        yield share, found


def terms(part: Part, order: int, seen: Felt, along: Array) -> Terms:
    """Solve the effective Hamiltonian of one part; `along` is the field as a vector, shape (m, 3), mT."""
    kind, spin = part.kind, part.spin
    linear = seen.mean @ kind.hyperfine + kind.zeeman * along[:, None, :]
    square = None
    if order == 2 and kind.hyperfine.any():
        linear = linear - seen.axial @ _cofactors(kind.hyperfine)
        square = kind.hyperfine.T @ seen.square @ kind.hyperfine
    if kind.quadrupole.any() or _off_axis(linear, square, spin):
        i = spin_matrices(spin)
        tensor = kind.quadrupole if square is None else kind.quadrupole + square
        pairs = np.einsum("aij,bjk->abik", i, i).reshape(9, -1)
        flat = np.broadcast_to(tensor, (*linear.shape[:2], 3, 3)).reshape(*linear.shape[:2], 9)
        d = multiplicity(spin)
        h = (linear @ i.reshape(3, -1) + flat @ pairs).reshape(*linear.shape[:2], d, d)
        energy, vectors = np.linalg.eigh(h)
        return Terms(energy, None, vectors)
    length = np.linalg.norm(linear, axis=-1)
    axis = linear / np.maximum(length, 1e-12)[..., None]
    m = spin - np.arange(multiplicity(spin))
    energy = length[..., None] * m
    if square is not None:
        own = np.einsum("mia,miab,mib->mi", axis, square, axis)[..., None]
        across = np.trace(square, axis1=-2, axis2=-1)[..., None] - own
        energy = energy + 0.5 * (spin * (spin + 1) - m**2) * across + m**2 * own
    return Terms(energy, axis, None)


def _off_axis(linear: Array, square: Array | None, spin: float) -> bool:
    """Whether the second-order operator turns states, as where hyperfine and Zeeman field cancel."""
    if square is None or spin < 1:
        return False
    return bool(np.any(spin * np.linalg.norm(square, axis=(-2, -1)) > OFF_AXIS * np.linalg.norm(linear, axis=-1)))


def _cofactors(a: Array) -> Array:
    """Return the matrix of cofactors, with (A x) x (A y) = cof(A) (x x y)."""
    return np.array([np.cross(a[1], a[2]), np.cross(a[2], a[0]), np.cross(a[0], a[1])])


@lru_cache(maxsize=64)
def _turning(spin: float) -> Array:
    """Return coefficients in powers of cos(beta) of |<m| exp(-i beta I_y) |m'>|^2, shape (2I+1, d^2), d = 2I+1."""
    d = multiplicity(spin)
    if d == 1:
        return np.ones((1, 1))
    values, vectors = np.linalg.eigh(spin_matrices(spin)[1])
    x = np.cos((np.arange(d) + 0.5) * np.pi / d)
    turned = np.einsum("ik,bk,jk->bij", vectors, np.exp(-1j * np.arccos(x)[:, None] * values), vectors.conj())
    return np.linalg.solve(np.vander(x, d, increasing=True), (np.abs(turned) ** 2).reshape(d, d * d))


def split_by(solved: Terms, lower: Index, upper: Index) -> tuple[Array, Array]:
    """Return offsets and intensities of the lines of each pair of levels, shape (m, p, d*d)."""
    low, high = solved.energy[:, lower], solved.energy[:, upper]
    d = low.shape[-1]
    offset = high[..., None, :] - low[..., :, None]
    if solved.axis is None:
        overlap = solved.vectors[:, lower].conj().swapaxes(-1, -2) @ solved.vectors[:, upper]
        intensity = (overlap.real**2 + overlap.imag**2) / d
    else:
        cos = np.einsum("mpa,mpa->mp", solved.axis[:, lower], solved.axis[:, upper])
        powers = np.clip(cos, -1, 1)[..., None] ** np.arange(d)
        intensity = (powers @ _turning((d - 1) / 2)) / d
    shape = (*low.shape[:2], d * d)
    return offset.reshape(shape), intensity.reshape(shape)
