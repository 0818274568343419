"""Slater determinants of l^n and the sparse operators on them.

A determinant is a bit pattern: bit p is set when spin-orbital p is filled.  Spin-orbitals are ordered
spin first (up, then down), then m = l ... -l, like `numpy.kron` of spin and orbital matrices.
One-electron operators come from a table of single excitations a+_p a_q, two-electron ones from products
of one-electron ones.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache
from itertools import combinations
from typing import Any, TypeAlias

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from spinfit.ion.orbitals import tensor
from spinfit.operators import spin_matrices

Sparse: TypeAlias = sparse.csr_array


@dataclass(frozen=True, eq=False)
class Excitations:
    """Every non-zero matrix element of a+_p a_q: <row| a+_p a_q |column> = sign.

    Attributes
    ----------
    dimension : int
        Number of determinants.
    row, column, p, q, sign : ndarray
        One entry an element.
    """

    dimension: int
    row: NDArray[np.int64]
    column: NDArray[np.int64]
    p: NDArray[np.int64]
    q: NDArray[np.int64]
    sign: NDArray[np.float64]


@lru_cache(maxsize=32)
def determinants(l: int, count: int) -> NDArray[np.int64]:  # noqa: E741
    """Return the bit patterns of l^count in rising order, shape (binomial(4l+2, count),)."""
    patterns = [sum(1 << p for p in filled) for filled in combinations(range(4 * l + 2), count)]
    return np.array(sorted(patterns), dtype=np.int64)


def _parity(bits: NDArray[np.int64]) -> NDArray[np.float64]:
    """Return +1 where an even number of bits is set, -1 where an odd one."""
    return 1.0 - 2.0 * (np.bitwise_count(bits) & 1)


@lru_cache(maxsize=32)
def excitations(l: int, count: int) -> Excitations:  # noqa: E741
    """Return the table of single excitations of l^count."""
    states = determinants(l, count)
    orbitals = 4 * l + 2
    parts: list[tuple] = []
    for q in range(orbitals):
        filled = np.flatnonzero(states >> q & 1)
        without = states[filled] ^ (1 << q)
        for p in range(orbitals):
            free = np.flatnonzero(~(without >> p) & 1)
            low, high = min(p, q), max(p, q)
            between = ((1 << high) - 1) & ~((1 << (low + 1)) - 1)
            new = without[free] | (1 << p)
            size = len(free)
            parts.append(
                (
                    np.searchsorted(states, new),
                    filled[free],
                    np.full(size, p),
                    np.full(size, q),
                    _parity(without[free] & between),
                )
            )
    row, column, p_all, q_all, sign = (np.concatenate(columns) for columns in zip(*parts, strict=True))
    return Excitations(len(states), row, column, p_all, q_all, sign)


def one_electron(l: int, count: int, matrix: NDArray[Any]) -> Sparse:  # noqa: E741
    """Return sum_pq h_pq a+_p a_q on the determinants of l^count.

    Parameters
    ----------
    matrix : ndarray, shape (2(2l+1), 2(2l+1))
        h over spin-orbitals; of shape (2l+1, 2l+1) it acts on the orbital only.
    """
    if matrix.shape[0] == 2 * l + 1:
        matrix = np.kron(np.eye(2), matrix)
    table = excitations(l, count)
    values = matrix[table.p, table.q] * table.sign
    kept = np.flatnonzero(values)
    shape = (table.dimension, table.dimension)
    return sparse.coo_array((values[kept], (table.row[kept], table.column[kept])), shape=shape).tocsr()


@lru_cache(maxsize=32)
def angular_momenta(l: int, count: int) -> tuple[tuple[Sparse, ...], tuple[Sparse, ...]]:  # noqa: E741
    """Return ((L_x, L_y, L_z), (S_x, S_y, S_z)) in units of hbar."""
    orbital = tuple(one_electron(l, count, m) for m in spin_matrices(l))
    spin = tuple(one_electron(l, count, np.kron(m, np.eye(2 * l + 1))) for m in spin_matrices(0.5))
    return orbital, spin


@lru_cache(maxsize=32)
def spin_orbit_operator(l: int, count: int) -> Sparse:  # noqa: E741
    """Return sum_i l_i.s_i (real in this basis)."""
    coupled = sum(np.kron(s, o) for s, o in zip(spin_matrices(0.5), spin_matrices(l), strict=True))
    return one_electron(l, count, coupled.real)


@lru_cache(maxsize=64)
def repulsion_operator(l: int, count: int, k: int) -> Sparse:  # noqa: E741
    """Return what the Slater parameter F^k multiplies: sum_(i<j) C^k(i).C^k(j) (real).

    With T_q = sum_i C^k_q(i), sum_(i<j) C(i).C(j) = 1/2 [sum_q T_q^+ T_q - sum_i C(i).C(i)].
    """
    total = None
    own = np.zeros((2 * l + 1, 2 * l + 1))
    for q in range(-k, k + 1):
        component = tensor(l, k, q).real
        own = own + component.T @ component
        operator = one_electron(l, count, component)
        product = operator.T @ operator
        total = product if total is None else total + product
    return ((total - one_electron(l, count, own)) / 2).tocsr()


def term_states(l: int, count: int) -> tuple[Sparse, float, int]:  # noqa: E741
    """Return the states of Hund's ground term on the determinants.

    The state of largest M_S and M_L is one determinant; the others follow by lowering.

    Returns
    -------
    states : sparse, shape (determinants, (2S+1)(2L+1))
        Ordered like `numpy.kron` of spin (M_S falling) and orbital (M_L falling) states, with the phases
        of Condon and Shortley, so that L and S have their usual matrices.
    S, L : float, int
    """
    orbitals = 2 * l + 1
    up = min(count, orbitals)
    down = count - up
    S, L = (up - down) / 2, sum(range(l, l - up, -1)) + sum(range(l, l - down, -1))
    highest = ((1 << up) - 1) | ((1 << down) - 1) << orbitals
    patterns = determinants(l, count)
    first = np.zeros(len(patterns))
    first[np.searchsorted(patterns, highest)] = 1.0
    (l_x, l_y, _), (s_x, s_y, _) = angular_momenta(l, count)
    lower_l, lower_s = (l_x - 1j * l_y).real.tocsr(), (s_x - 1j * s_y).real.tocsr()
    columns = []
    spin_state = first
    for i in range(round(2 * S) + 1):
        m_s = S - i
        state = spin_state
        for j in range(2 * L + 1):
            m_l = L - j
            columns.append(state)
            if m_l > -L:
                state = lower_l @ state / math.sqrt(L * (L + 1) - m_l * (m_l - 1))
        if m_s > -S:
            spin_state = lower_s @ spin_state / math.sqrt(S * (S + 1) - m_s * (m_s - 1))
    return sparse.csr_array(np.array(columns).T), S, L


def level_states(S: float, L: int, J: float) -> NDArray[np.float64]:
    """Return the states |J M>, M falling, on the product basis |S M_S> x |L M_L>.

    Shape ((2S+1)(2L+1), 2J+1): real, found as the state with J_+ = 0 at M = J and lowered from there, its
    largest component made positive.
    """
    size_s, size_l = round(2 * S) + 1, 2 * L + 1
    spin, orbital = spin_matrices(S), spin_matrices(L)
    j = [np.kron(s, np.eye(size_l)) + np.kron(np.eye(size_s), o) for s, o in zip(spin, orbital, strict=True)]
    raising = (j[0] + 1j * j[1]).real
    at_top = np.flatnonzero(np.abs(np.diag(j[2]).real - J) < 1e-9)
    _, _, rows = np.linalg.svd(raising[:, at_top])
    state = np.zeros(size_s * size_l)
    state[at_top] = rows[-1]
    state *= np.sign(state[np.argmax(np.abs(state))])
    columns = []
    for i in range(round(2 * J) + 1):
        m = J - i
        columns.append(state)
        if m > -J:
            state = raising.T @ state / math.sqrt(J * (J + 1) - m * (m - 1))
    return np.array(columns).T
