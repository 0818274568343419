"""Spin matrices, Stevens operators and products of spin spaces.

Basis of one spin s: |s, m> with m = s, s-1, ..., -s, so S_z is diagonal and falling, and
S_+ has real positive elements on the first superdiagonal.  A product space is ordered like
`numpy.kron`: the first spin varies slowest.  Cached tables depend on spin quantum numbers only,
never on a parameter, and are read-only.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

Matrix = NDArray[np.complex128]


def multiplicity(spin: float) -> int:
    """Return the number of states 2s + 1 of one spin."""
    return round(2 * spin) + 1


def dimension(spins: Sequence[float]) -> int:
    """Return the number of states of several spins together, prod(2s + 1)."""
    return math.prod(multiplicity(spin) for spin in spins)


@lru_cache(maxsize=256)
def ladder(spin: float) -> Matrix:
    """Return the raising operator S_+ of one spin, shape (2s+1, 2s+1), units of hbar.

    <m+1| S_+ |m> = sqrt(s(s+1) - m(m+1)).
    """
    m = spin - np.arange(1, multiplicity(spin))
    raising = np.diag(np.sqrt(spin * (spin + 1) - m * (m + 1)), 1).astype(complex)
    raising.flags.writeable = False
    return raising


@lru_cache(maxsize=256)
def spin_matrices(spin: float) -> Matrix:
    """Return (S_x, S_y, S_z) of one spin, shape (3, 2s+1, 2s+1), units of hbar."""
    raising = ladder(spin)
    lowering = raising.conj().T
    z = np.diag(spin - np.arange(multiplicity(spin)))
    matrices = np.array([(raising + lowering) / 2, (raising - lowering) / 2j, z])
    matrices.flags.writeable = False
    return matrices


# The factors f_kq(S_z) of the Stevens operators O_k^q = 1/4 {f_kq, S_+^q + S_-^q} (O_k^0 = f_k0):
# (k, |q|) -> coefficients of S_z^0, S_z^1, ... as functions of s = S(S+1).
# A. Abragam, B. Bleaney, Electron Paramagnetic Resonance of Transition Ions (1970), table 16;
# with the odd q as in C. Rudowicz, J. Phys. C 18, 1415 (1985).
_FACTORS = {
    (2, 0): lambda s: (-s, 0, 3),
    (2, 1): lambda s: (0, 1),
    (2, 2): lambda s: (1,),
    (4, 0): lambda s: (3 * s**2 - 6 * s, 0, 25 - 30 * s, 0, 35),
    (4, 1): lambda s: (0, -(3 * s + 1), 0, 7),
    (4, 2): lambda s: (-(s + 5), 0, 7),
    (4, 3): lambda s: (0, 1),
    (4, 4): lambda s: (1,),
    (6, 0): lambda s: (-5 * s**3 + 40 * s**2 - 60 * s, 0, 105 * s**2 - 525 * s + 294, 0, 735 - 315 * s, 0, 231),
    (6, 1): lambda s: (0, 5 * s**2 - 10 * s + 12, 0, 15 - 30 * s, 0, 33),
    (6, 2): lambda s: (s**2 + 10 * s + 102, 0, -(18 * s + 123), 0, 33),
    (6, 3): lambda s: (0, -(3 * s + 59), 0, 11),
    (6, 4): lambda s: (-(s + 38), 0, 11),
    (6, 5): lambda s: (0, 1),
    (6, 6): lambda s: (1,),
}


@lru_cache(maxsize=1024)
def stevens(spin: float, k: int, q: int) -> Matrix:
    """Return the Stevens operator O_k^q of one spin, shape (2s+1, 2s+1).

    For q > 0, O_k^q = {f_kq(S_z), S_+^q + S_-^q} / 4 and O_k^-q = {f_kq(S_z), S_+^q - S_-^q} / 4i,
    where {a, b} = ab + ba; so O_4^4 = (S_+^4 + S_-^4)/2 and O_2^2 = S_x^2 - S_y^2.

    Parameters
    ----------
    spin : float
        Spin quantum number; for k > 2s the operator is zero.
    k : int
        2, 4 or 6.
    q : int
        -k to k.

    Raises
    ------
    KeyError
        There is no such operator.
    """
    z = spin - np.arange(multiplicity(spin))
    factor = np.polynomial.polynomial.polyval(z, _FACTORS[k, abs(q)](spin * (spin + 1)))
    if q == 0:
        operator = np.diag(factor).astype(complex)
    else:
        up = np.linalg.matrix_power(ladder(spin), abs(q))
        pair = up + up.conj().T if q > 0 else (up - up.conj().T) / 1j
        operator = (factor[:, None] + factor) * pair / 4
    operator.flags.writeable = False
    return operator


def add_block(total: Matrix, operator: Matrix, before: int = 1) -> None:
    """Add an operator of a part of the product space, 1 x operator x 1, to a matrix in place.

    Parameters
    ----------
    total : ndarray, shape (..., n, n)
        Matrix, or stack of matrices, that is added to; C-contiguous.
    operator : ndarray, shape (..., d, d)
        Acts on neighbouring spins with d states together; leading axes as those of `total`.
    before : int
        Number of states of the spins before them; n / (d before) is that of the spins after.
    """
    *lead, n, _ = total.shape
    d = operator.shape[-1]
    after = n // (d * before)
    view = total.reshape(*lead, before, d, after, before, d, after)
    # The repeated letters pick the identity's diagonal as a writeable view: no Kronecker product is stored.
    np.einsum("...aibajb->...ijab", view)[...] += operator[..., None, None]


def add_bilinear(
    total: Matrix, coefficients: NDArray[np.float64], spins: Sequence[float], first: int, second: int
) -> None:
    """Add sum_ab K_ab s_a^first s_b^second to a matrix of the product space, in place.

    Parameters
    ----------
    total : ndarray, shape (n, n)
        C-contiguous.
    coefficients : ndarray, shape (3, 3)
        K, rows belong to `first`.
    spins : sequence of float
        All spins of the product space.
    first, second : int
        Two different positions, counted from 0, in any order.
    """
    if first > second:
        first, second, coefficients = second, first, coefficients.T
    right = np.tensordot(coefficients, spin_matrices(spins[second]), 1)
    product = np.einsum("aik,ajl->ijkl", spin_matrices(spins[first]), right)
    before, between, after = spins[:first], spins[first + 1 : second], spins[second + 1 :]
    shape = (
        dimension(before),
        multiplicity(spins[first]),
        dimension(between),
        multiplicity(spins[second]),
        dimension(after),
    )
    np.einsum("aibjcakblc->abcijkl", total.reshape(*shape, *shape))[...] += product


@lru_cache(maxsize=256)
def coupled_spins(spin: float, count: int) -> tuple[tuple[float, int], ...]:
    """Couple `count` equal spins: return the total spins F, falling, each with how often it occurs.

    sum over F of times x (2F + 1) = (2 spin + 1)^count.
    """
    times = {0: 1}
    for _ in range(count):
        sums: dict[int, int] = {}
        for twice, often in times.items():
            for total in range(abs(twice - round(2 * spin)), twice + round(2 * spin) + 1, 2):
                sums[total] = sums.get(total, 0) + often
        times = sums
    return tuple((twice / 2, times[twice]) for twice in sorted(times, reverse=True))


def rotation_matrix(spins: Sequence[float], axis: Sequence[float], angle: float) -> Matrix:
    """Return the unitary that turns all spins, the product of exp(-i angle n.s_k), shape (n, n).

    Parameters
    ----------
    spins : sequence of float
        The spins of the product space.
    axis : sequence of 3 floats
        Any length but 0; n is its direction.
    angle : float
        rad, right-handed about `axis`: U (v.s) U^+ = (R v).s for the matrix R of the same turn.
    """
    unit = np.asarray(axis, dtype=float) / np.linalg.norm(axis)
    return _rotation_matrix(tuple(float(s) for s in spins), tuple(unit.tolist()), float(angle))


@lru_cache(maxsize=256)
def _rotation_matrix(spins: tuple[float, ...], unit: tuple[float, ...], angle: float) -> Matrix:
    total = np.ones((1, 1), dtype=complex)
    for spin in spins:
        values, vectors = np.linalg.eigh(np.tensordot(unit, spin_matrices(spin), 1))
        total = np.kron(total, (vectors * np.exp(-1j * angle * values)) @ vectors.conj().T)
    total.flags.writeable = False
    return total
