"""The full configuration in its crystal field, against closed forms and handbook values."""

import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from sympy import Rational
from sympy.physics.wigner import gaunt, wigner_3j

from spinfit.errors import InputError
from spinfit.ion import lande_g
from spinfit.ion.crystal_field import (
    Ligand,
    from_octahedral,
    from_orbitals,
    from_overlap,
    from_stevens,
    from_wybourne,
    stevens_factor,
)
from spinfit.ion.determinants import determinants, level_states, one_electron, repulsion_operator, term_states
from spinfit.ion.model import IonModel, hamiltonian, racah_to_slater, solve
from spinfit.ion.names import Shell
from spinfit.ion.orbitals import STEVENS_OVER_WYBOURNE, tensor, tesseral
from spinfit.ion.tensors import doublet_g, spin_hamiltonian
from spinfit.ion.terms import hund
from spinfit.operators import spin_matrices, stevens
from spinfit.units import G_ELECTRON, MU_B_OVER_H
from spinfit.units import MHZ_PER_WAVENUMBER as CM

OCTAHEDRON = [(1, 0, 0), (-1, 0, 0), (0, 1, 0), (0, -1, 0), (0, 0, 1), (0, 0, -1)]
SLATER_ER = {2: 97483 * CM, 4: 67904 * CM, 6: 54010 * CM}


def levels_of(matrix):
    return np.linalg.eigvalsh(matrix.toarray() if hasattr(matrix, "toarray") else matrix)


# ---------------------------------------------------------------- one electron


@pytest.mark.parametrize("shell_l", [1, 2, 3])
def test_spherical_tensors_are_gaunt_integrals(shell_l):
    """<l m|C^k_q|l m'> = (-1)^m sqrt(4 pi/(2k+1)) int Y_l-m Y_kq Y_lm' (sympy)."""
    for k in range(0, 2 * shell_l + 1, 2):
        for q in range(-k, k + 1):
            matrix = tensor(shell_l, k, q)
            for m in range(-shell_l, shell_l + 1):
                m2 = m - q
                if abs(m2) <= shell_l:
                    exact = (
                        (-1) ** m * math.sqrt(4 * math.pi / (2 * k + 1)) * float(gaunt(shell_l, k, shell_l, -m, q, m2))
                    )
                    assert matrix[shell_l - m, shell_l - m2] == pytest.approx(exact, abs=1e-13)


@pytest.mark.parametrize("shell_l", [2, 3])
def test_stevens_and_wybourne_forms_agree(shell_l):
    """Within one shell_l, B^k_q (tesseral C) = lambda_kq B^k_q x theta_k O_k^q: one factor theta_k for all q."""
    for (k, q), factor in STEVENS_OVER_WYBOURNE.items():
        if k > 2 * shell_l:
            continue
        theta = (
            np.vdot(stevens(shell_l, k, 0), tensor(shell_l, k, 0)).real
            / np.linalg.norm(stevens(shell_l, k, 0)) ** 2
            / (STEVENS_OVER_WYBOURNE[k, 0])
        )
        for sign in (1, -1):
            np.testing.assert_allclose(
                tesseral(shell_l, k, sign * q), factor * theta * stevens(shell_l, k, sign * q), atol=1e-12
            )


@pytest.mark.parametrize(
    ("count", "expected"),
    # Operator equivalents of the ground levels: R. J. Elliott, K. W. H. Stevens, Proc. R. Soc. A 218, 553 (1953);
    # A. Abragam, B. Bleaney (1970), table 20.
    [
        (1, ("-2/35", "2/315", "0")),
        (3, ("-7/1089", "-136/467181", "-1615/42513471")),
        (9, ("-2/315", "-8/135135", "4/3864861")),
        (11, ("4/1575", "2/45045", "8/3864861")),
        (13, ("2/63", "-2/1155", "4/27027")),
    ],
)
def test_operator_equivalents_of_lanthanides(count, expected):
    for k, text in zip((2, 4, 6), expected, strict=True):
        assert stevens_factor(3, count, k) == pytest.approx(float(Rational(text)), rel=1e-12, abs=1e-15)


def test_stevens_field_is_its_operators_within_the_level():
    shell = Shell(4, 3, 11)
    given_field = {(2, 1): 3.0, (4, -3): 0.2, (6, 5): 0.01, (6, -6): 0.02, (2, 0): -5.0}
    field = from_stevens(shell, given_field)
    exact = sum(v * stevens(7.5, k, q) for (k, q), v in given_field.items())
    model = IonModel(shell, 0.0, crystal_field=field, space="level")
    np.testing.assert_allclose(levels_of(hamiltonian(model)), np.linalg.eigvalsh(exact), atol=1e-9)


def test_octahedron_and_tetrahedron_of_the_overlap_model():
    """10Dq = 3 e_sigma - 4 e_pi (octahedron) and 4/9 of it, inverted (tetrahedron): C. E. Schäffer (1968)."""
    six = [Ligand(p, e_sigma=7000, e_pi_x=900, e_pi_y=900) for p in OCTAHEDRON]
    np.testing.assert_allclose(from_overlap(2, six).orbital_energies(), [3600] * 3 + [21000] * 2, atol=1e-8)
    four = [Ligand(p, e_sigma=7000, e_pi_x=900, e_pi_y=900) for p in [(1, 1, 1), (-1, -1, 1), (1, -1, -1), (-1, 1, -1)]]
    energies = from_overlap(2, four).orbital_energies()
    assert energies[2] - energies[0] == pytest.approx(4 / 9 * 17400)
    assert energies[2] == pytest.approx(energies[4])


def test_overlap_of_f_electrons_in_an_octahedron():
    """One sigma ligand along z reaches z3 only; six put 2 e_sigma on t1u, nothing on t2u and a2u (C. K. Jørgensen)."""
    energies = from_overlap(3, [Ligand(p, e_sigma=1.0) for p in OCTAHEDRON]).orbital_energies()
    np.testing.assert_allclose(energies, [0, 0, 0, 0, 2, 2, 2], atol=1e-12)


def test_pi_bonds_turn_with_their_angle():
    ligand = Ligand((0, 0, 1), e_pi_x=100.0, e_pi_y=0.0)
    straight = from_overlap(2, [ligand]).matrix()
    turned = from_overlap(2, [replace(ligand, turn=math.pi / 2)]).matrix()
    xz = np.array(from_orbitals(2, {"xz": 1, "yz": 0, "xy": 0, "z2": 0, "x2-y2": 0}).matrix())
    yz = np.array(from_orbitals(2, {"xz": 0, "yz": 1, "xy": 0, "z2": 0, "x2-y2": 0}).matrix())
    np.testing.assert_allclose(straight, 100 * xz, atol=1e-12)
    np.testing.assert_allclose(turned, 100 * yz, atol=1e-12)


def test_octahedral_form_equals_wybourne_form():
    """10Dq = 10/21 B^4_0 with B^4_4 = sqrt(5/14) B^4_0 (C. J. Ballhausen; standard)."""
    b = 21000.0
    wybourne = from_wybourne(2, {(4, 0): b, (4, 4): math.sqrt(5 / 14) * b})
    np.testing.assert_allclose(wybourne.matrix(), from_octahedral(b * 10 / 21).matrix(), atol=1e-8)


# ---------------------------------------------------------------- free ion


def test_determinants_and_exchange_signs():
    assert len(determinants(2, 5)) == 252
    assert len(determinants(3, 7)) == 3432
    rng = np.random.default_rng(5)
    h = rng.normal(size=(10, 10)) + 1j * rng.normal(size=(10, 10))
    h += h.conj().T
    many = levels_of(one_electron(2, 3, h))
    single = np.linalg.eigvalsh(h)
    sums = sorted(single[i] + single[j] + single[k] for i in range(10) for j in range(i) for k in range(j))
    np.testing.assert_allclose(many, sums, atol=1e-10)


def test_repulsion_of_two_electrons_is_the_slater_integral():
    """<2 2 up, 1 1 up| C^k.C^k |same> by 3j symbols: direct minus exchange (sympy)."""
    patterns = determinants(2, 2)
    i = int(np.searchsorted(patterns, 0b11))  # both up, m = 2 and 1

    def c(k, m, m2):
        return float((-1) ** m * 5 * wigner_3j(2, k, 2, 0, 0, 0) * wigner_3j(2, k, 2, -m, m - m2, m2))

    for k in (2, 4):
        direct = c(k, 2, 2) * c(k, 1, 1)
        exchange = c(k, 2, 1) ** 2
        assert repulsion_operator(2, 2, k)[i, i] == pytest.approx(direct - exchange, abs=1e-13)


@pytest.mark.parametrize(("B", "C"), [(1.0, 4.5), (0.8, 2.9)])
def test_racah_energies_of_d2_and_d3(B, C):
    """E. U. Condon, G. H. Shortley (1935); J. S. Griffith (1961); A = 0 means F^0 = 7C/5."""
    slater = racah_to_slater(B, C)
    root = math.sqrt(193 * B**2 + 8 * B * C + 4 * C**2)
    d2 = {"3F": (-8 * B, 21), "3P": (7 * B, 9), "1G": (4 * B + 2 * C, 9), "1D": (-3 * B + 2 * C, 5)}
    d2["1S"] = (14 * B + 7 * C, 1)
    d3 = {"4F": (-15 * B, 28), "4P": (0.0, 12), "2H": (-6 * B + 3 * C, 22), "2P": (-6 * B + 3 * C, 6)}
    d3 |= {"2G": (-11 * B + 3 * C, 18), "2F": (9 * B + 3 * C, 14)}
    d3 |= {"2D+": (5 * B + 5 * C + root, 10), "2D-": (5 * B + 5 * C - root, 10)}
    for count, terms in ((2, d2), (3, d3)):
        energies = levels_of(hamiltonian(IonModel(Shell(3, 2, count), 0.0, slater)))
        energies += 1.4 * C * count * (count - 1) / 2
        expected = np.sort(np.concatenate([[e] * n for e, n in terms.values()]))
        np.testing.assert_allclose(energies, expected, atol=1e-9)


@pytest.mark.parametrize(("shell_l", "count"), [(2, 2), (2, 4), (2, 7), (3, 3), (3, 11), (3, 8)])
def test_term_and_level_states_are_what_they_say(shell_l, count):
    states, S, L = term_states(shell_l, count)
    assert (S, L) == hund((Shell(4, shell_l, count),))[:2]
    identity = (states.T @ states).toarray()
    np.testing.assert_allclose(identity, np.eye(len(identity)), atol=1e-12)
    J = hund((Shell(4, shell_l, count),))[2]
    model = IonModel(Shell(4, shell_l, count), 1.0, space="level")
    levels = solve(model)
    assert levels.states.shape == (round(2 * J) + 1,) * 2
    # H = zeta sum shell_l.s is lambda L.S with lambda = +-zeta/2S: E = lambda/2 [J(J+1) - L(L+1) - S(S+1)]
    lam = (1 if count < 2 * shell_l + 1 else -1) / (2 * S)
    expected = lam / 2 * (J * (J + 1) - L * (L + 1) - S * (S + 1))
    np.testing.assert_allclose(levels.energies, expected, atol=1e-11)
    if J:
        moments = levels.moments(slice(None))[2]
        g = lande_g(S, L, J)
        np.testing.assert_allclose(np.linalg.eigvalsh(moments), g * np.arange(-J, J + 1), atol=1e-11)
    assert level_states(S, L, J).shape[1] == round(2 * J) + 1


@pytest.mark.parametrize("count", [1, 2, 3, 5, 6, 7, 8, 9])
def test_zeeman_slopes_tend_to_lande(count):
    """Without a crystal field the 2J+1 ground states of the whole d^n split with Landé's g as zeta/B -> 0."""
    S, L, J = hund((Shell(3, 2, count),))
    errors = []
    for ratio in (0.1, 0.01):
        levels = solve(IonModel(Shell(3, 2, count), ratio * CM, racah_to_slater(1.0 * CM, 4.5 * CM)))
        size = levels.degeneracies()[0]
        assert size == 2 * J + 1
        slopes = np.linalg.eigvalsh(levels.moments(slice(0, size))[2])
        errors.append(np.abs(slopes - lande_g(S, L, J) * np.arange(-J, J + 1)).max())
    assert errors[1] < 2e-5
    assert errors[1] < errors[0] / 50 + 1e-12  # second order in zeta/B


@pytest.mark.parametrize("count", range(1, 14))
def test_ground_terms_of_f_shells_have_exactly_lande_slopes(count):
    S, L, J = hund((Shell(4, 3, count),))
    levels = solve(IonModel(Shell(4, 3, count), 1000 * CM, space="term"))
    if S and L:
        assert levels.degeneracies()[0] == 2 * J + 1
    slopes = np.linalg.eigvalsh(levels.moments(slice(0, round(2 * J) + 1))[2])
    np.testing.assert_allclose(slopes, (lande_g(S, L, J) or 0.0) * np.arange(-J, J + 1), atol=1e-10)


def test_intermediate_coupling_of_d7():
    """d7 at zeta = 533 cm^-1 has 1.33285 against 4/3, with g_S = 2 (reference-value collection, computed)."""
    model = IonModel(Shell(3, 2, 7), 533 * CM, racah_to_slater(971 * CM, 4497 * CM), g_spin=2.0)
    levels = solve(model)
    slopes = np.linalg.eigvalsh(levels.moments(slice(0, 10))[2])
    assert slopes[-1] / 4.5 == pytest.approx(1.33285, abs=2e-4)


# ---------------------------------------------------------------- the crystal field


def ground_spin(count, dq, ratio, zeta=0.0):
    model = IonModel(Shell(3, 2, count), zeta, racah_to_slater(1.0, ratio), from_octahedral(10 * dq))
    levels = solve(model)
    _, spins = levels.matrices(slice(0, levels.degeneracies()[0]))
    square = np.einsum("iab,iba->", spins, spins).real / levels.degeneracies()[0]
    return round(math.sqrt(0.25 + square) - 0.5, 6)


@pytest.mark.parametrize(
    ("count", "ratio", "crossing", "high", "low"),
    # Octahedral spin crossings at Dq/B, computed outside the project; they depend strongly on C/B.
    [
        (4, 4.61, 2.734, 2, 1),
        (5, 4.477, 2.829, 2.5, 0.5),
        (6, 4.8, 2.002, 2, 0),
        (7, 4.633, 2.169, 1.5, 0.5),
        (4, 4.5, 2.680, 2, 1),
        (5, 4.5, 2.841, 2.5, 0.5),
        (6, 4.5, 1.890, 2, 0),
        (7, 4.5, 2.121, 1.5, 0.5),
    ],
)
def test_spin_crossings(count, ratio, crossing, high, low):
    assert ground_spin(count, crossing * 0.995, ratio) == high
    assert ground_spin(count, crossing * 1.005, ratio) == low


@given(count=st.integers(1, 9), seed=st.integers(0, 100))
@settings(max_examples=12, derandomize=True, deadline=None)
def test_particles_and_holes(count, seed):
    """d^n and d^(10-n) have the same spectrum when zeta and the crystal field change sign; odd n is twofold."""
    rng = np.random.default_rng(seed)
    keys = [(k, q) for k in (2, 4) for q in range(-k, k + 1)]
    field = from_wybourne(2, dict(zip(keys, rng.normal(size=len(keys)) * 5, strict=True)))
    slater = racah_to_slater(1.0, 4.5)
    one = solve(IonModel(Shell(3, 2, count), 0.7, slater, field))
    other = solve(IonModel(Shell(3, 2, 10 - count), -0.7, slater, field.scaled(-1)))
    np.testing.assert_allclose(one.excitation, other.excitation, atol=1e-9)
    if count % 2:
        np.testing.assert_allclose(one.energies[::2], one.energies[1::2], atol=1e-9)
        assert np.diff(one.energies)[1::2].max() > 1e-3


def copper(zeta, hole="x2-y2"):
    energies = {"z2": 7000.0, "x2-y2": 7000.0, "xy": 0.0, "xz": -2000.0, "yz": -2000.0}
    energies[hole] = 15000.0
    return IonModel(Shell(3, 2, 9), zeta * CM, crystal_field=from_orbitals(2, energies).scaled(CM))


def test_copper_tends_to_first_order():
    """d9, x2-y2 hole: g_par = g_e + 8 zeta/Delta(xy), g_perp = g_e + 2 zeta/Delta(xz, yz); error of second order."""
    errors = []
    for zeta in (8.0, 0.8):
        g = doublet_g(solve(copper(zeta))).principal
        expected = G_ELECTRON + np.array([2 / 17000, 2 / 17000, 8 / 15000]) * zeta
        errors.append(np.abs(g - expected).max() / zeta)
    assert errors[1] < 1e-5 * 8
    assert errors[1] == pytest.approx(errors[0] / 10, rel=0.05)
    g = doublet_g(solve(copper(0.8, "z2"))).principal
    np.testing.assert_allclose(g, G_ELECTRON + np.array([6 / 17000, 6 / 17000, 0]) * 0.8, atol=1e-7)
    g = doublet_g(solve(copper(0.0))).principal
    np.testing.assert_allclose(g, G_ELECTRON, rtol=1e-12)


@pytest.mark.parametrize(("count", "sign"), [(3, 1), (8, -1)])
def test_octahedral_d3_and_d8_tend_to_first_order(count, sign):
    """g = g_e - 8 lambda/10Dq with lambda = +-zeta/2S (A. Abragam, B. Bleaney (1970))."""
    zeta, ten_dq = 2.0 * CM, 12000 * CM
    model = IonModel(Shell(3, 2, count), zeta, racah_to_slater(800 * CM, 3500 * CM), from_octahedral(ten_dq))
    result = spin_hamiltonian(model)
    lam = sign * zeta / (2 * result.S)
    np.testing.assert_allclose(result.g_principal - G_ELECTRON, -8 * lam / ten_dq, rtol=2e-3)
    assert abs(result.D) < 1e-6 * zeta
    assert result.purity > 0.999999


def test_vanishing_spin_orbit_coupling_leaves_the_free_spin():
    field = from_octahedral(17000 * CM, 300 * CM, 100 * CM)
    result = spin_hamiltonian(IonModel(Shell(3, 2, 3), 0.0, racah_to_slater(700 * CM, 3000 * CM), field))
    np.testing.assert_allclose(result.g, G_ELECTRON * np.eye(3), atol=1e-10)
    assert abs(result.D) < 1e-3  # MHz, of energies of 1e9 MHz


def test_zero_field_splitting_of_d8_second_order():
    """D = lambda^2 (1/Delta_perp - 1/Delta_par) x 4 for d8 (second order; A. Abragam, B. Bleaney (1970)).

    Only triplets and z2, x2-y2 degenerate: the repulsion is made huge so that spin flips do not enter.
    """
    zeta = 5.0
    energies = {"z2": 10000.0, "x2-y2": 10000.0, "xy": 0.0, "xz": 1000.0, "yz": 1000.0}
    # With B = 0 the triplets of d8 are not mixed by repulsion; C only lifts the singlets.
    model = IonModel(Shell(3, 2, 8), zeta, racah_to_slater(0.0, 1e7), from_orbitals(2, energies))
    result = spin_hamiltonian(model)
    lam = zeta / 2
    expected = 4 * lam**2 * (1 / 9000 - 1 / 10000)
    assert result.D == pytest.approx(expected, rel=2e-2)


def cubic(shell, b4, b6):
    return from_stevens(
        shell, {(4, 0): b4, (4, 4): 5 * b4, (6, 0): b6, (6, 4): -21 * b6} if b6 else {(4, 0): b4, (4, 4): 5 * b4}
    )


@pytest.mark.parametrize(
    ("count", "values"),
    # K. R. Lea, M. J. M. Leask, W. P. Wolf, J. Phys. Chem. Solids 23, 1381 (1962), with g_S = 2:
    # Ce3+ 10/7; Dy3+ 20/3, 68/9; Er3+ 6, 6.8; Yb3+ 8/3, 24/7.
    [(1, (10 / 7,)), (9, (20 / 3, 68 / 9)), (11, (6.0, 6.8)), (13, (8 / 3, 24 / 7))],
)
def test_cubic_doublets_of_lanthanides(count, values):
    shell = Shell(4, 3, count)
    model = IonModel(
        shell, 1e9, crystal_field=cubic(shell, 3.0, 0.0 if count == 1 else 0.01), g_spin=2.0, space="level"
    )
    levels = solve(model)
    found = []
    for which, size in enumerate(levels.degeneracies()):
        if size == 2:
            g = doublet_g(levels, which=which).principal
            np.testing.assert_allclose(g, g[0], rtol=1e-9)
            found.append(g[0])
    np.testing.assert_allclose(sorted(found), values, rtol=1e-9)


def test_spaces_of_erbium_agree_when_nothing_mixes():
    shell = Shell(4, 3, 11)
    found = {}
    for space in ("level", "term", "configuration"):
        model = IonModel(shell, 2376 * CM, SLATER_ER, cubic(shell, 1e-4 * CM, 1e-7 * CM), space=space, g_spin=2.0)
        levels = solve(model)
        which = levels.degeneracies().index(2)
        found[space] = doublet_g(levels, which=which).principal[0]
    assert found["level"] == pytest.approx(6.8)
    assert found["term"] == pytest.approx(6.8, abs=1e-3)
    # Intermediate coupling takes 0.4 % (mostly 2K): g_J of Er3+ 1.1955 to 1.197, A. Abragam, B. Bleaney (1970)
    assert found["configuration"] / 6.8 == pytest.approx(0.9965, abs=1e-3)


@given(seed=st.integers(0, 1000), count=st.sampled_from([1, 3, 5, 7, 9]))
@settings(max_examples=10, derandomize=True, deadline=None)
def test_g_tensor_is_the_splitting_in_a_small_field(seed, count):
    """h nu / muB B between the two lowest levels of H0 + muB B.(L + g_S S), for random fields and directions."""
    rng = np.random.default_rng(seed)
    keys = [(k, q) for k in (2, 4) for q in range(-k, k + 1)]
    field = from_wybourne(2, dict(zip(keys, rng.normal(size=len(keys)) * 5e4, strict=True)))
    model = IonModel(Shell(3, 2, count), 500.0, racah_to_slater(900.0, 4000.0), field)
    levels = solve(model)
    if levels.degeneracies()[0] != 2:
        return
    g = doublet_g(levels)
    direction = rng.normal(size=3)
    direction /= np.linalg.norm(direction)
    orbital, spin = levels.operators()
    small = 1e-5
    zeeman = sum(n * (o + G_ELECTRON * s) for n, o, s in zip(direction, orbital, spin, strict=True))
    split = levels_of(hamiltonian(model) + small * zeeman)
    expected = math.sqrt(direction @ g.G @ direction)
    assert (split[1] - split[0]) / small == pytest.approx(expected, abs=2e-3)
    np.testing.assert_allclose(g.matrix @ g.matrix, g.G, atol=1e-10)
    np.testing.assert_allclose(g.orbital + g.spin, g.principal, atol=1e-10)
    assert np.linalg.det(g.axes) == pytest.approx(1)


def test_spin_hamiltonian_reproduces_the_exact_levels_in_a_field():
    field = from_wybourne(2, {(4, 0): 34000.0, (4, 4): 20500.0, (2, 0): 900.0, (2, 1): 500.0, (2, -2): -400.0}).scaled(
        CM
    )
    model = IonModel(Shell(3, 2, 3), 250 * CM, racah_to_slater(700 * CM, 3000 * CM), field)
    result = spin_hamiltonian(model)
    assert 0 <= result.E / result.D <= 1 / 3
    s = spin_matrices(1.5)
    B = 300.0 * np.array([0.6, 0.0, 0.8])
    orbital, spin = solve(model).operators()
    exact = hamiltonian(model).toarray() + MU_B_OVER_H * sum(
        b * (o + G_ELECTRON * t).toarray() for b, o, t in zip(B, orbital, spin, strict=True)
    )
    exact = np.linalg.eigvalsh(exact)[:4]
    effective = np.einsum("i,ij,jab->ab", MU_B_OVER_H * B, result.g, s)
    effective = effective + np.einsum("ij,iab,jbc->ac", result.D_tensor, s, s)
    effective = np.linalg.eigvalsh(effective)
    np.testing.assert_allclose(np.diff(exact), np.diff(effective), atol=2.0)  # MHz, of 8400
    rebuilt = (
        result.D_axes
        @ np.diag([-result.D / 3 + result.E, -result.D / 3 - result.E, 2 * result.D / 3])
        @ result.D_axes.T
    )
    np.testing.assert_allclose(rebuilt, result.D_tensor, atol=1e-6 * abs(result.D))


def test_half_filled_f_shell_by_sparse_methods():
    field = from_wybourne(3, {(2, 0): 500.0, (4, 0): -1500.0, (6, -4): 300.0}).scaled(CM)
    slater = {2: 85669 * CM, 4: 60825 * CM, 6: 44776 * CM}
    model = IonModel(Shell(4, 3, 7), 1508 * CM, slater, field)
    levels = solve(model, lowest=8)
    matrix = hamiltonian(model)
    rest = matrix @ levels.states - levels.states * levels.energies
    assert np.linalg.norm(rest, axis=0).max() < 1e-9 * abs(levels.energies[0])
    result = spin_hamiltonian(model, levels=levels)
    assert result.S == 3.5
    # 8S7/2 of Gd3+ is 97 % pure with <L> nearly nothing: g = 1.99 to 1.994 (A. Abragam, B. Bleaney (1970))
    np.testing.assert_allclose(result.g_principal, 1.993, atol=2e-3)


@pytest.mark.parametrize(("count", "zeta", "states"), [(5, 0.0, 66), (6, 1338.0, 10), (7, 0.0, 9)])
def test_sparse_methods_find_every_state_of_a_degenerate_level(count, zeta, states):
    """Free ions: 6H has 66 states at one energy, 7F0 1, 7F1 3, 7F2 5; 8S 8 states and then 6P."""
    slater = {2: 83000 * CM, 4: 59000 * CM, 6: 42500 * CM}
    levels = solve(IonModel(Shell(4, 3, count), zeta * CM, slater), lowest=states)
    expected = {5: (66,), 6: (1, 3, 5, 1), 7: (8, 1)}[count]
    assert levels.degeneracies() == expected
    identity = levels.states.conj().T @ levels.states
    np.testing.assert_allclose(identity, np.eye(states), atol=1e-9)


def test_signs_of_determinants():
    """Free 2P1/2: g = +2/3 (Landé); one hole in t2g without distortion: g = -2 (J. S. Griffith (1956))."""
    p_one = IonModel(Shell(2, 1, 1), 100.0, g_spin=2.0)
    doublet = doublet_g(solve(p_one))
    np.testing.assert_allclose(doublet.principal, 2 / 3, rtol=1e-9)
    assert doublet.determinant_sign == 1
    t2g = IonModel(Shell(4, 2, 5), 1.0, racah_to_slater(1.0, 4.0), from_octahedral(1e5), g_spin=2.0)
    doublet = doublet_g(solve(t2g))
    np.testing.assert_allclose(doublet.principal, 2, atol=1e-3)
    assert doublet.determinant_sign == -1


# ---------------------------------------------------------------- bad input


def test_what_has_no_meaning_is_refused():
    octahedron = from_octahedral(9000 * CM)
    nickel = IonModel(Shell(3, 2, 8), 648 * CM, racah_to_slater(900 * CM, 3600 * CM), octahedron, name="Ni2+")
    with pytest.raises(InputError, match=r"Ni2\+ has an even number of electrons.*D, E and g"):
        doublet_g(solve(nickel))
    cobalt = IonModel(Shell(3, 2, 7), 531 * CM, racah_to_slater(900 * CM, 3600 * CM), octahedron)
    with pytest.raises(InputError, match="orbitally degenerate"):
        spin_hamiltonian(cobalt)
    chromium = IonModel(Shell(3, 2, 3), 0.0, racah_to_slater(900 * CM, 3600 * CM), octahedron)
    cobalt_three = IonModel(Shell(3, 2, 6), 0.0, racah_to_slater(600 * CM, 3000 * CM), from_octahedral(23000 * CM))
    with pytest.raises(InputError, match="no spin"):
        spin_hamiltonian(cobalt_three)
    with pytest.raises(InputError, match="4-fold, not a doublet"):
        doublet_g(solve(chromium))
    with pytest.raises(InputError, match="metal's own place"):
        from_overlap(2, [Ligand((0, 0, 0), e_sigma=1.0)])
    with pytest.raises(InputError, match="no d|not a d orbital"):
        from_orbitals(2, {"x2y2": 1.0})
    with pytest.raises(InputError, match="missing"):
        from_orbitals(2, {"xy": 1.0})
    with pytest.raises(InputError, match="no such term"):
        from_wybourne(2, {(6, 0): 1.0})
    with pytest.raises(InputError, match="no multipole"):
        from_stevens(Shell(4, 3, 7), {(4, 0): 1.0})
    with pytest.raises(InputError, match="no open shell"):
        IonModel(Shell(3, 2, 10), 1.0)
    with pytest.raises(InputError, match='did you mean "ten_Dq"'):
        nickel.with_parameters({"tenDq": 1.0})
    with pytest.raises(InputError, match='"configuration"'):
        replace(nickel, space="config")
