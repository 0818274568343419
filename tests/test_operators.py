"""Spin matrices, Stevens operators and products against the algebra that defines them."""

from __future__ import annotations

import math

import numpy as np
import pytest
import sympy
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.linalg import expm
from scipy.spatial.transform import Rotation

from spinfit.operators import (
    add_bilinear,
    add_block,
    coupled_spins,
    dimension,
    ladder,
    rotation_matrix,
    spin_matrices,
    stevens,
)

SPINS = [0.5, 1.0, 1.5, 2.0, 2.5, 3.0, 3.5, 6.0, 7.5]
RANKS = [(k, q) for k in (2, 4, 6) for q in range(-k, k + 1)]


@pytest.mark.parametrize("spin", SPINS)
def test_the_algebra_of_one_spin(spin: float) -> None:
    """[S_x, S_y] = i S_z and cyclic; S^2 = S(S+1); S_z diagonal and falling; S_+ = S_x + i S_y."""
    x, y, z = spin_matrices(spin)
    for a, b, c in ((x, y, z), (y, z, x), (z, x, y)):
        np.testing.assert_allclose(a @ b - b @ a, 1j * c, atol=1e-13)
        np.testing.assert_array_equal(c, c.conj().T)
    np.testing.assert_allclose(x @ x + y @ y + z @ z, spin * (spin + 1) * np.eye(len(z)), atol=1e-12)
    np.testing.assert_array_equal(np.diag(z), np.arange(spin, -spin - 1, -1))
    np.testing.assert_allclose(ladder(spin), x + 1j * y, atol=1e-15)


def test_pauli_matrices() -> None:
    x, y, z = 2 * spin_matrices(0.5)
    np.testing.assert_array_equal(x, [[0, 1], [1, 0]])
    np.testing.assert_array_equal(y, [[0, -1j], [1j, 0]])
    np.testing.assert_array_equal(z, [[1, 0], [0, -1]])


def test_cached_tables_cannot_be_written() -> None:
    for table in (spin_matrices(1.0), ladder(1.0), stevens(1.0, 2, 1)):
        with pytest.raises(ValueError, match="read-only"):
            table[0] = 1


def test_stevens_operators_of_second_rank_in_cartesian_form() -> None:
    """A. Abragam, B. Bleaney, Electron Paramagnetic Resonance of Transition Ions (1970), table 16."""
    for spin in SPINS:
        x, y, z = spin_matrices(spin)
        one = np.eye(len(z))
        for q, expected in {
            0: 3 * z @ z - spin * (spin + 1) * one,
            1: (z @ x + x @ z) / 2,
            -1: (z @ y + y @ z) / 2,
            2: x @ x - y @ y,
            -2: x @ y + y @ x,
        }.items():
            np.testing.assert_allclose(stevens(spin, 2, q), expected, atol=1e-12)


def test_stevens_operators_of_fourth_and_sixth_rank_in_tables() -> None:
    """Diagonals and elements tabulated for J = 5/2 and 7/2 (M. T. Hutchings, Solid State Phys. 16, 227 (1964))."""
    np.testing.assert_allclose(np.diag(stevens(2.5, 4, 0)), 60 * np.array([1, -3, 2, 2, -3, 1]), atol=1e-10)
    np.testing.assert_allclose(np.diag(stevens(3.5, 6, 0)), 1260 * np.array([1, -5, 9, -5, -5, 9, -5, 1]), atol=1e-9)
    # <5/2| (S_+^4 + S_-^4)/2 |-3/2> = sqrt(5 x 8 x 9 x 8) / 2
    np.testing.assert_allclose(stevens(2.5, 4, 4)[0, 4], 12 * math.sqrt(5), rtol=1e-14)
    x, y, z = spin_matrices(3.5)
    up, down = x + 1j * y, x - 1j * y
    fourth = np.linalg.matrix_power(up, 4), np.linalg.matrix_power(down, 4)
    np.testing.assert_allclose(stevens(3.5, 4, 4), (fourth[0] + fourth[1]) / 2, atol=1e-10)
    np.testing.assert_allclose(stevens(3.5, 4, -4), (fourth[0] - fourth[1]) / 2j, atol=1e-10)


def irreducible(k: int) -> dict[int, int]:
    """Return, for q = k ... 0, the factor between the k - q fold commutator of S_- with S_+^k and O_k^q.

    Classically the commutator with S_- is the derivation S_+ -> -2 S_z, S_z -> S_-, S_- -> 0.  On
    the sphere S_- S_+ = r^2 - z^2, so what stands beside S_+^q is a polynomial in z and r^2; the
    Stevens operator is the multiple whose coefficients are whole numbers without common factor,
    the one of the highest power of z positive (that is how the classical tables are written).
    """
    p, z, m, r2 = sympy.symbols("p z m r2")
    function, factors = p**k, {}
    for q in range(k, -1, -1):
        beside = sympy.Poly(sympy.expand(sympy.expand(function / p**q).subs(m, (r2 - z**2) / p)), z, r2)
        content = abs(sympy.gcd(list(beside.coeffs())))
        leading = beside.as_expr().subs(r2, 0).as_poly(z).LC()
        factors[q] = int(content * sympy.sign(leading))
        function = sympy.expand(-2 * z * sympy.diff(function, p) + m * sympy.diff(function, z))
    return factors


@pytest.mark.parametrize("k", [2, 4, 6])
def test_stevens_operators_are_irreducible_tensors(k: int) -> None:
    """All q of both signs from S_+^k by commutators with S_-, independent of any table."""
    for spin in (1.0, 2.5, 3.5, 6.0):
        tensor = np.linalg.matrix_power(ladder(spin), k)
        for q, factor in irreducible(k).items():
            scaled = tensor / factor
            scale = max(np.abs(scaled).max(), 1.0)
            np.testing.assert_allclose(stevens(spin, k, q), (scaled + scaled.conj().T) / 2, atol=1e-11 * scale)
            if q:
                np.testing.assert_allclose(stevens(spin, k, -q), (scaled - scaled.conj().T) / 2j, atol=1e-11 * scale)
            tensor = ladder(spin).T @ tensor - tensor @ ladder(spin).T


def test_stevens_operators_are_orthogonal_hermitian_and_traceless() -> None:
    operators = np.array([stevens(6.0, k, q) for k, q in RANKS])
    np.testing.assert_allclose(operators, operators.conj().swapaxes(1, 2), atol=1e-9)
    overlaps = np.einsum("aij,bji->ab", operators, operators).real
    sizes = np.sqrt(np.diag(overlaps))
    np.testing.assert_allclose(overlaps / np.outer(sizes, sizes), np.eye(len(RANKS)), atol=1e-12)
    np.testing.assert_allclose(np.einsum("aii->a", operators) / sizes, 0, atol=1e-12)


@pytest.mark.parametrize(("k", "q"), RANKS)
def test_stevens_operators_vanish_where_the_rank_is_too_high(k: int, q: int) -> None:
    """A spin s carries tensors up to rank 2s only."""
    assert np.abs(stevens((k - 1) / 2, k, q)).max() < 1e-9
    assert np.abs(stevens(k / 2, k, q)).max() > 0.1


@pytest.mark.parametrize(("k", "q"), [(3, 0), (2, 3), (8, 0), (0, 0)])
def test_unknown_stevens_operators_are_refused(k: int, q: int) -> None:
    with pytest.raises(KeyError):
        stevens(7.5, k, q)


def kron(*parts: np.ndarray) -> np.ndarray:
    total = np.ones((1, 1))
    for part in parts:
        total = np.kron(total, part)
    return total


def test_products_of_spaces_are_kronecker_products() -> None:
    spins = (0.5, 1.0, 1.5, 0.5)
    ones = [np.eye(round(2 * s + 1)) for s in spins]
    rng = np.random.default_rng(1)
    n = dimension(spins)
    assert n == 48
    for position, before in enumerate((1, 2, 6, 24)):
        total = np.zeros((3, n, n), dtype=complex)
        add_block(total, spin_matrices(spins[position]), before)
        for a in range(3):
            expected = kron(*ones[:position], spin_matrices(spins[position])[a], *ones[position + 1 :])
            np.testing.assert_array_equal(total[a], expected)
    for first, second in ((0, 1), (0, 3), (1, 2), (2, 1), (3, 0)):
        coefficients = rng.normal(size=(3, 3))
        total = np.ones((n, n), dtype=complex)
        add_bilinear(total, coefficients, spins, first, second)
        expected = np.ones((n, n), dtype=complex)
        for a in range(3):
            for b in range(3):
                parts = list(ones)
                parts[first], parts[second] = spin_matrices(spins[first])[a], spin_matrices(spins[second])[b]
                expected += coefficients[a, b] * kron(*parts)
        np.testing.assert_allclose(total, expected, atol=1e-14)


@settings(derandomize=True, max_examples=30, deadline=None)
@given(
    st.lists(st.sampled_from([0.5, 1.0, 1.5, 2.5]), min_size=1, max_size=3),
    st.tuples(*[st.floats(-1, 1)] * 3).filter(lambda v: math.hypot(*v) > 0.1),
    st.floats(-7, 7),
)
def test_rotations_turn_spins_like_vectors(spins: list[float], axis: tuple, angle: float) -> None:
    """U (v.s) U^+ = (R v).s with R of scipy, and U = exp(-i angle n.F) with the total spin F."""
    unitary = rotation_matrix(spins, axis, angle)
    n = dimension(spins)
    total = np.zeros((3, n, n), dtype=complex)
    for position, spin in enumerate(spins):
        add_block(total, spin_matrices(spin), dimension(spins[:position]))
    unit = np.array(axis) / np.linalg.norm(axis)
    np.testing.assert_allclose(unitary, expm(-1j * angle * np.tensordot(unit, total, 1)), atol=1e-11)
    turned = unitary @ total @ unitary.conj().T
    rotation = Rotation.from_rotvec(angle * unit).as_matrix()
    np.testing.assert_allclose(turned, np.einsum("ba,bij->aij", rotation, total), atol=1e-11)


@pytest.mark.parametrize(("spin", "count"), [(0.5, 1), (0.5, 5), (1.0, 4), (1.5, 3), (2.5, 2)])
def test_total_spins_of_equal_spins(spin: float, count: int) -> None:
    """Against the eigenvalues F(F+1) of (sum I_k)^2 in the whole product space."""
    n = dimension([spin] * count)
    total = np.zeros((3, n, n), dtype=complex)
    for position in range(count):
        add_block(total, spin_matrices(spin), dimension([spin] * position))
    squares = np.linalg.eigvalsh(np.einsum("aij,ajk->ik", total, total))
    expected = np.concatenate([[f * (f + 1)] * round(times * (2 * f + 1)) for f, times in coupled_spins(spin, count)])
    np.testing.assert_allclose(squares, np.sort(expected), atol=1e-10)


def test_total_spins_of_many_halves() -> None:
    """n spins 1/2 couple to F in C(n, n/2 - F) - C(n, n/2 - F - 1) ways, exact whole numbers for any n."""
    for f, times in coupled_spins(0.5, 60):
        k = round(30 - f)
        assert times == math.comb(60, k) - (math.comb(60, k - 1) if k else 0)
