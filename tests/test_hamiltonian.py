"""The Hamiltonian against closed forms, symmetries and products written out in full."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from reference import (
    eigenfields,
    frequency_broadened,
    levels,
    matrix,
    plain_powder,
    plain_resonances,
    plain_weights,
    sphere,
)
from scipy import constants
from scipy.integrate import trapezoid
from scipy.spatial.transform import Rotation

from spinfit.errors import InputError
from spinfit.hamiltonian import (
    System,
    derivative_matrices,
    exchange_matrix,
    rotation,
    systems,
)
from spinfit.isotopes import isotope, natural
from spinfit.nuclei import kinds, settled
from spinfit.operators import spin_matrices, stevens
from spinfit.species import Exchange, Nucleus, Species, Spin, tensor_matrix

MU_B = constants.physical_constants["Bohr magneton in Hz/T"][0] * 1e-9
MU_N = constants.physical_constants["nuclear magneton in MHz/T"][0] * 1e-3
X, Y, Z = np.eye(3)


def one(*spins: Spin, **others: object) -> System:
    """Return the single system of a species."""
    (system,) = systems(Species(spins=spins or (Spin(),), **others))
    return system


# --- electron part -----------------------------------------------------------------------------


def test_effective_g_of_a_tilted_tensor() -> None:
    """One spin 1/2: h nu = g(n) mu_B B with g(n)^2 = n.g.g^T.n (closed form)."""
    tilt = (0.4, 1.1, -0.7)
    system = one(Spin(g=(2.0, 2.1, 2.4), g_tilt=tilt))
    axes = Rotation.from_euler("ZYZ", tilt).as_matrix()
    g = axes @ np.diag([2.0, 2.1, 2.4]) @ axes.T
    for direction in np.random.default_rng(0).normal(size=(5, 3)):
        n = direction / np.linalg.norm(direction)
        low, high = levels(system, n, 330.0)
        assert high - low == pytest.approx(MU_B * 330 * np.linalg.norm(g.T @ n), rel=1e-13)
    # Along a tensor axis in molecular components, a column of the tilt matrix, g is that principal value.
    low, high = levels(system, axes[:, 2], 330.0)
    assert high - low == pytest.approx(MU_B * 330 * 2.4, rel=1e-13)


def test_axial_tensors_are_perpendicular_and_parallel() -> None:
    system = one(Spin(g=(2.04, 2.26)))
    for direction, g in ((X, 2.04), (Y, 2.04), (Z, 2.26)):
        assert np.ptp(levels(system, direction, 100.0)) == pytest.approx(MU_B * 100 * g, rel=1e-13)


def test_zero_field_levels_of_a_triplet() -> None:
    """S = 1: -2D/3 and D/3 +- E; turning D's frame leaves the levels alone."""
    expected = sorted([-2 * 3000 / 3, 3000 / 3 + 400, 3000 / 3 - 400])
    for tilt in ((0, 0, 0), (0.3, 0.8, 1.9)):
        system = one(Spin(S=1, D=3000, E=-400, D_tilt=tilt))
        np.testing.assert_allclose(levels(system, X, 0.0), expected, rtol=1e-12)


def test_the_d_tensor_has_its_own_axes() -> None:
    """S = 1: H = S.D.S has the state |D axis> of eigenvalue -D_aa, where (n.S)|n> = 0."""
    tilt = (0.3, 0.8, 1.9)
    system = one(Spin(S=1, D=3000, E=-400, D_tilt=tilt))
    axes = Rotation.from_euler("ZYZ", tilt).as_matrix()
    for axis, value in zip(axes.T, (-1000 - 400, -1000 + 400, 2000), strict=True):
        _, vectors = np.linalg.eigh(np.tensordot(axis, spin_matrices(1.0), 1))
        state = vectors[:, 1]
        np.testing.assert_allclose(system.h0 @ state, -value * state, atol=1e-9)


def test_zero_field_levels_of_spin_three_halves() -> None:
    """S = 3/2: +- sqrt(D^2 + 3E^2), each twice (closed form)."""
    split = math.sqrt(5000**2 + 3 * 900**2)
    np.testing.assert_allclose(
        levels(one(Spin(S=1.5, D=5000, E=900)), Z, 0.0), [-split, -split, split, split], rtol=1e-12
    )


def test_rhombicity_is_e_over_d() -> None:
    np.testing.assert_array_equal(one(Spin(S=2, D=900, rhombicity=0.1)).h0, one(Spin(S=2, D=900, E=90)).h0)


@pytest.mark.parametrize("spin", [1.0, 1.5, 2.5, 3.5])
def test_second_rank_stevens_terms_are_the_d_tensor(spin: float) -> None:
    """D = 3 B2_0, E = B2_2."""
    by_tensor = one(Spin(S=spin, D=600, E=50))
    by_stevens = one(Spin(S=spin, stevens=(((2, 0), 200.0), ((2, 2), 50.0))))
    np.testing.assert_allclose(by_tensor.h0, by_stevens.h0, atol=1e-10)


def test_stevens_terms_of_both_signs_add_up() -> None:
    terms = (((4, -3), 7.0), ((4, 3), -2.0), ((6, 5), 0.5), ((2, -1), 11.0))
    expected = sum(value * stevens(3.0, k, q) for (k, q), value in terms)
    np.testing.assert_allclose(one(Spin(S=3, stevens=terms)).h0, expected, atol=1e-12)


def test_cubic_splitting_of_spin_five_halves() -> None:
    """B4_0 = a/120, B4_4 = 5 B4_0: a quartet at a and a doublet at -2a (A. Abragam, B. Bleaney, 1970)."""
    a = 610.0
    system = one(Spin(S=2.5, stevens=(((4, 0), a / 120), ((4, 4), a / 24))))
    np.testing.assert_allclose(levels(system, Z, 0.0), [-2 * a] * 2 + [a] * 4, rtol=1e-12)


@pytest.mark.parametrize(
    ("spin", "doublets"), [(2.5, [5 / 3]), (3.5, [7 / 3, 3.0]), (7.5, [5.0, 17 / 3])], ids=["5/2", "7/2", "15/2"]
)
def test_cubic_doublets(spin: float, doublets: list[float]) -> None:
    """Doublets of a J multiplet in a cubic field, g in units of g_J.

    K. R. Lea, M. J. M. Leask, W. P. Wolf, J. Phys. Chem. Solids 23, 1381 (1962): J = 5/2 G7 5/3;
    7/2 G6 7/3, G7 3; 15/2 G6 5, G7 17/3.
    """
    terms = [((4, 0), 1.0), ((4, 4), 5.0)] + ([((6, 0), 0.03), ((6, 4), -0.63)] if spin >= 3 else [])
    system = one(Spin(S=spin, g=(1.0,), stevens=tuple(terms)))
    energies, vectors = np.linalg.eigh(system.h0)
    gaps = np.flatnonzero(np.diff(energies) > 1e-6 * np.ptp(energies)) + 1
    groups = np.split(np.arange(len(energies)), gaps)
    found = []
    for group in groups:
        if len(group) == 2:
            part = vectors[:, group]
            for direction in (Z, np.array([1, 2, 3]) / math.sqrt(14)):
                moments = np.linalg.eigvalsh(part.conj().T @ np.tensordot(direction, system.zeeman, 1) @ part)
                found.append(np.ptp(moments) / MU_B)
    np.testing.assert_allclose(sorted(found), np.repeat(doublets, 2), rtol=1e-10)


@pytest.mark.parametrize(
    ("spin", "pair", "effective"),
    [
        (1.5, 0, (4, 4, 2)),
        (2.5, 0, (6, 6, 2)),
        (3.5, 0, (8, 8, 2)),
    ],
)
def test_axial_kramers_doublets(spin: float, pair: int, effective: tuple[float, ...]) -> None:
    """g' of the +-1/2 doublet for h nu << D, g = 2: (2S+1, 2S+1, 1) g (closed form)."""
    system = one(Spin(S=spin, g=(2.0,), D=1e7))
    for direction, expected in zip((X, Y, Z), effective, strict=True):
        energies = levels(system, direction, 10.0)
        # The gap is a difference of energies near D: rounding is 1e-16 D against 300 MHz.
        assert (energies[2 * pair + 1] - energies[2 * pair]) / (MU_B * 10) == pytest.approx(expected, rel=1e-6)


def test_rhombic_middle_doublet() -> None:
    """S = 5/2, E/D = 1/3: the middle doublet is isotropic, g' = 30/7 (T. Castner et al., J. Chem. Phys. 32, 668)."""
    system = one(Spin(S=2.5, g=(2.0,), D=1e7, rhombicity=1 / 3))
    for direction in (X, Y, Z):
        energies = levels(system, direction, 10.0)
        assert (energies[3] - energies[2]) / (MU_B * 10) == pytest.approx(30 / 7, rel=1e-4)


# --- coupled spins -----------------------------------------------------------------------------


def test_singlet_and_triplet() -> None:
    """J S1.S2: the triplet lies J above the singlet for two spins 1/2; J > 0 is antiferromagnetic."""
    system = one(Spin(), Spin(), exchange=(Exchange(J=1200.0),))
    np.testing.assert_allclose(levels(system, Z, 0.0), [-900, 300, 300, 300], rtol=1e-13)


def test_pair_levels_follow_the_interval_rule() -> None:
    """J S1.S2: E(S) = J/2 [S(S+1) - S1(S1+1) - S2(S2+1)] (A. Lande's interval rule)."""
    system = one(Spin(S=2.5), Spin(S=2), exchange=(Exchange(J=-100.0),))
    expected = [-50 * (s * (s + 1) - 2.5 * 3.5 - 2 * 3) for s in np.arange(0.5, 5) for _ in range(round(2 * s + 1))]
    np.testing.assert_allclose(levels(system, Z, 0.0), np.sort(expected), atol=1e-9)


def test_dipolar_coupling_splits_the_triplet() -> None:
    """S1.T.S2 = S.(T/2).S within S = 1 (and nothing within S = 0): levels -T_aa/2."""
    for tilt in ((0, 0, 0), (0.5, 0.2, 2.0)):
        system = one(Spin(), Spin(), exchange=(Exchange(J=1e6, dipolar=(500, 1300, -1800), tilt=tilt),))
        triplet = levels(system, Z, 0.0)[1:] - 250_000
        np.testing.assert_allclose(triplet, [-650, -250, 900], atol=1e-6)


def test_antisymmetric_coupling() -> None:
    """J S1.S2 + d.(S1 x S2): -J/4 +- sqrt(J^2 + d^2)/2 and twice J/4 for two spins 1/2 (closed form)."""
    j, d = 300.0, (100.0, -50.0, 70.0)
    split = math.sqrt(j**2 + np.dot(d, d)) / 2
    system = one(Spin(), Spin(), exchange=(Exchange(J=j, antisymmetric=d),))
    np.testing.assert_allclose(levels(system, Z, 0.0), np.sort([-j / 4 - split, j / 4, j / 4, -j / 4 + split]))


def test_the_order_of_a_pair_decides_the_sign_of_d() -> None:
    """d.(S1 x S2) written out, and d.(S2 x S1) = -d.(S1 x S2)."""
    d = (3.0, -5.0, 7.0)
    pair = Spin(S=1), Spin(S=0.5)
    first = np.array([np.kron(s, np.eye(2)) for s in spin_matrices(1.0)])
    second = np.array([np.kron(np.eye(3), s) for s in spin_matrices(0.5)])
    cross = [first[1] @ second[2] - first[2] @ second[1], first[2] @ second[0] - first[0] @ second[2]]
    cross.append(first[0] @ second[1] - first[1] @ second[0])
    expected = np.tensordot(d, cross, 1)
    np.testing.assert_allclose(one(*pair, exchange=(Exchange(antisymmetric=d),)).h0, expected, atol=1e-12)
    turned = one(*pair, exchange=(Exchange(between=(2, 1), antisymmetric=d),))
    np.testing.assert_allclose(turned.h0, -expected, atol=1e-12)


def test_the_tilt_of_an_exchange_turns_the_dipolar_part_only() -> None:
    exchange = Exchange(J=60.0, dipolar=(10, 20, -30), tilt=(0.1, 0.9, 0.4), antisymmetric=(1, 2, 3))
    full = exchange_matrix(exchange)
    d = (full - full.T) / 2
    np.testing.assert_allclose([d[1, 2], d[2, 0], d[0, 1]], [1, 2, 3], rtol=1e-13)
    np.testing.assert_allclose((full + full.T) / 2, 60 * np.eye(3) + tensor_matrix((10, 20, -30), (0.1, 0.9, 0.4)))


def test_every_spin_keeps_its_own_terms() -> None:
    """Uncoupled spins: the levels are all sums of the single spins' levels."""
    spins = Spin(S=1, g=(2.1, 2.3), D=2000, D_tilt=(0, 0.6, 0)), Spin(S=0.5, g=(1.9, 2.0, 2.2), g_tilt=(0.2, 0.4, 0.1))
    direction = (0.3, -0.5, 0.8)
    parts = [levels(one(spin), direction, 300.0) for spin in spins]
    np.testing.assert_allclose(levels(one(*spins), direction, 300.0), np.sort(np.add.outer(*parts), axis=None))


# --- nuclei ------------------------------------------------------------------------------------


def breit_rabi(a: float, g_e: float, g_n: float, spin: float, field: float) -> np.ndarray:
    """Return the levels of S = 1/2 with an isotropic A (G. Breit, I. I. Rabi, Phys. Rev. 38, 2082 (1931)).

    H = mu_B g B S_z - g_n mu_N B I_z + A S.I conserves m = m_S + m_I, so each m with two states is a
    2 x 2 block with E = -A/4 - g_n mu_N B m +- sqrt(A^2 (I+1/2)^2 + 2 A m b + b^2) / 2, b = (g mu_B + g_n mu_N) B.
    """
    b = (g_e * MU_B + g_n * MU_N) * field
    found = []
    for m in np.arange(-spin - 0.5, spin + 1):
        middle = -a / 4 - g_n * MU_N * field * m
        if abs(m) > spin:
            found.append(a * spin / 2 + math.copysign(g_e * MU_B / 2 - g_n * MU_N * spin, m) * field)
        else:
            root = math.sqrt((a * (spin + 0.5)) ** 2 + 2 * a * m * b + b**2) / 2
            found += [middle - root, middle + root]
    return np.sort(found)


@pytest.mark.parametrize(
    ("name", "a"), [("1H", 1420.405751768), ("63Cu", -500.0), ("14N", 45.0), ("55Mn", -250.0), ("29Si", -80.0)]
)
def test_breit_rabi(name: str, a: float) -> None:
    """Levels with the signed nuclear Zeeman term; hydrogen's A = 1420.405751768 MHz (from memory)."""
    nucleus = isotope(name)
    system = one(Spin(g=(2.0023,)), nuclei=(Nucleus(isotope=name, A=(a,)),))
    for field in (0.0, 5.0, 340.0):
        for direction in (Z, (1, 2, -2)):
            expected = breit_rabi(a, 2.0023, nucleus.g_n, nucleus.spin, field)
            np.testing.assert_allclose(levels(system, direction, field), expected, rtol=1e-12, atol=1e-9)


def test_hyperfine_and_quadrupole_written_out() -> None:
    """S.A.I, I.P.I and the nuclear Zeeman term with tilted tensors, sum by sum."""
    a_tilt, p_tilt = (0.3, 0.5, -0.2), (1.1, 0.7, 0.4)
    system = one(
        Spin(S=1),
        nuclei=(Nucleus(isotope="63Cu", A=(-35, -60, -540), A_tilt=a_tilt, P=(-6, -4, 10), P_tilt=p_tilt),),
    )
    a, p = tensor_matrix((-35, -60, -540), a_tilt), tensor_matrix((-6, -4, 10), p_tilt)
    s = [np.kron(m, np.eye(4)) for m in spin_matrices(1.0)]
    i = [np.kron(np.eye(3), m) for m in spin_matrices(1.5)]
    expected = sum(a[r, c] * s[r] @ i[c] + p[r, c] * i[r] @ i[c] for r in range(3) for c in range(3))
    np.testing.assert_allclose(system.h0, expected, atol=1e-10)
    for axis in range(3):
        zeeman = MU_B * 2.0023 * s[axis] - isotope("63Cu").g_n * MU_N * i[axis]
        np.testing.assert_allclose(system.zeeman[axis], zeeman, atol=1e-13)


def test_a_nucleus_couples_to_the_spin_that_is_named() -> None:
    first, second = (
        one(Spin(S=1), Spin(S=0.5), nuclei=(Nucleus(isotope="14N", A=(20.0,), couples_to=k),)) for k in (1, 2)
    )
    i = spin_matrices(1.0)
    on_first = sum(20 * np.kron(np.kron(s, np.eye(2)), m) for s, m in zip(spin_matrices(1.0), i, strict=True))
    on_second = sum(20 * np.kron(np.kron(np.eye(3), s), m) for s, m in zip(spin_matrices(0.5), i, strict=True))
    np.testing.assert_allclose(first.h0, on_first, atol=1e-12)
    np.testing.assert_allclose(second.h0, on_second, atol=1e-12)
    assert (first.spins, first.electrons) == ((1.0, 0.5, 1.0), 2)


def with_multiplicity(parts: tuple[System, ...], states: int, direction: object, field: float) -> np.ndarray:
    """Return all levels of a species, each system's as often as its weight says."""
    found = []
    for part in parts:
        times = part.weight * states / len(part.h0)
        assert times == pytest.approx(round(times), abs=1e-9)
        found += [levels(part, direction, field)] * round(times)
    return np.sort(np.concatenate(found))


@pytest.mark.parametrize(("name", "count"), [("1H", 4), ("2H", 3), ("63Cu", 2)])
def test_equivalent_nuclei_by_total_spin_equal_the_product(name: str, count: int) -> None:
    """`count` nuclei coupled to total spins F against the same nuclei one by one, anisotropic and tilted."""
    spin = Spin(S=1, g=(2.0, 2.05, 2.2), D=500)
    nucleus = Nucleus(isotope=name, A=(30, 50, 90), A_tilt=(0.2, 0.6, 0.1))
    together = systems(
        Species(spins=(spin,), nuclei=(Nucleus(isotope=name, A=nucleus.A, A_tilt=nucleus.A_tilt, count=count),))
    )
    apart = one(spin, nuclei=(nucleus,) * count)
    assert len(together) > 1
    assert sum(part.weight for part in together) == pytest.approx(1, abs=1e-12)
    for direction in (Z, (0.3, -0.4, 0.7)):
        expected = levels(apart, direction, 320.0)
        np.testing.assert_allclose(with_multiplicity(together, len(apart.h0), direction, 320.0), expected, atol=1e-8)


def test_equivalent_protons_give_binomial_lines() -> None:
    """n equivalent spins 1/2, isotropic A: n + 1 lines of binomial intensity (first order; common textbook rule).

    Weights of transitions with equal field are summed over the systems; A is so small that the
    second-order splitting inside a line (A^2/nu) stays below 0.001 mT.
    """
    found: dict[int, float] = {}
    for part in systems(Species(spins=(Spin(g=(2.0,)),), nuclei=(Nucleus(isotope="1H", A=(6.0,), count=4),))):
        lines = plain_resonances(part, Z, 9500.0, (320, 360), 200)
        for line, weight in zip(lines, plain_weights(part, Z, lines), strict=True):
            place = (line.field - 9500 / (2 * MU_B)) * 2 * MU_B / 6
            if weight > 1e-5:
                assert place == pytest.approx(round(place), abs=0.02)
                found[round(place)] = found.get(round(place), 0.0) + part.weight * weight
    total = sum(found.values())
    for place, share in zip(range(-2, 3), (1, 4, 6, 4, 1), strict=True):
        assert found[place] / total == pytest.approx(share / 16, rel=1e-3)


def test_equivalent_nuclei_with_quadrupole_stay_apart() -> None:
    (system,) = systems(Species(nuclei=(Nucleus(isotope="14N", A=(40.0,), P=(-1, -1, 2), count=2),)))
    apart = one(nuclei=(Nucleus(isotope="14N", A=(40.0,), P=(-1, -1, 2)),) * 2)
    assert system.spins == (0.5, 1.0, 1.0)
    np.testing.assert_array_equal(system.h0, apart.h0)


def test_natural_copper() -> None:
    """A scales with the signed g_n, P with Q/[I(2I-1)], the weights are the abundances."""
    nucleus = Nucleus(element="Cu", A=(-35, -60, -540), P=(-6, -4, 10))
    found = systems(Species(nuclei=(nucleus,)))
    assert [part.label for part in found] == ["63Cu", "65Cu"]
    assert [part.weight for part in found] == pytest.approx([k.abundance for k in natural("Cu")])
    light, heavy = kinds(nucleus)
    ratio = isotope("65Cu").g_n / isotope("63Cu").g_n
    np.testing.assert_allclose(light.hyperfine, np.diag([-35, -60, -540]))
    np.testing.assert_allclose(heavy.hyperfine, ratio * light.hyperfine)
    np.testing.assert_allclose(heavy.quadrupole, np.diag([-6, -4, 10]) * 0.204 / 0.220, rtol=1e-6)
    for part, name in zip(found, ("63Cu", "65Cu"), strict=True):
        kind = {"63Cu": light, "65Cu": heavy}[name]
        alone = one(
            nuclei=(Nucleus(isotope=name, A=tuple(np.diag(kind.hyperfine)), P=tuple(np.diag(kind.quadrupole))),)
        )
        np.testing.assert_allclose(part.h0, alone.h0, atol=1e-10)


def test_a_and_p_refer_to_different_isotopes_where_they_must() -> None:
    """Xe: A is that of 129Xe (I = 1/2, 26 %), P that of 131Xe; the signs of g_n differ."""
    first, second, spinless = kinds(Nucleus(element="Xe", A=(100.0,), P=(-1, -1, 2)))
    assert (first.name, second.name, spinless.spin) == ("129Xe", "131Xe", 0.0)
    np.testing.assert_allclose(first.hyperfine, 100 * np.eye(3))
    assert not first.quadrupole.any()
    assert second.hyperfine[0, 0] == pytest.approx(100 * 0.4612 / -1.556, rel=1e-3)  # g_n from memory
    np.testing.assert_allclose(second.quadrupole, np.diag([-1, -1, 2]))
    assert spinless.share == pytest.approx(1 - 0.264 - 0.212, abs=2e-3)


def test_the_most_abundant_isotope_counts_not_the_lightest() -> None:
    """B: A and P are those of 11B (80 %); g_n 0.600 and 1.792, Q 0.0846 (I = 3) and 0.0406 b (I = 3/2), from memory."""
    heavy, light = kinds(Nucleus(element="B", A=(30.0,), P=(-1, -1, 2)))
    assert (heavy.name, light.name) == ("11B", "10B")
    np.testing.assert_allclose(heavy.hyperfine, 30 * np.eye(3))
    np.testing.assert_allclose(heavy.quadrupole, np.diag([-1, -1, 2]))
    assert light.hyperfine[0, 0] == pytest.approx(30 * 0.600 / 1.792, rel=2e-3)
    assert light.quadrupole[2, 2] == pytest.approx(2 * (0.0846 / 15) / (0.0406 / 3), rel=2e-3)


def test_spin_scales_the_quadrupole_tensor() -> None:
    """Sb: 121Sb has I = 5/2, 123Sb I = 7/2; P ~ Q/[I(2I-1)] with Q = -0.543 and -0.692 b (from memory)."""
    light, heavy = kinds(Nucleus(element="Sb", A=(100.0,), P=(-10, -10, 20)))
    assert heavy.quadrupole[2, 2] == pytest.approx(20 * (0.692 / 21) / (0.543 / 10), rel=1e-3)
    assert (light.name, heavy.name) == ("121Sb", "123Sb")


def test_spinless_isotopes_count_without_nucleus() -> None:
    """Natural Si: 4.7 % 29Si, the rest is one system of the bare electron."""
    found = {part.label: part for part in systems(Species(nuclei=(Nucleus(element="Si", A=(50.0,)),)))}
    assert set(found) == {"29Si", ""}
    assert found[""].weight == pytest.approx(1 - natural("Si")[1].abundance)
    assert found[""].spins == (0.5,)
    np.testing.assert_array_equal(found[""].h0, np.zeros((2, 2)))
    np.testing.assert_allclose(np.diag(found["29Si"].h0).real, [12.5, -12.5, -12.5, 12.5])


def test_two_silicons_by_the_binomial_law() -> None:
    p = natural("Si")[1].abundance
    found = systems(Species(nuclei=(Nucleus(element="Si", A=(50.0,), count=2),)), negligible=0.0)
    weights = {part.label: part.weight for part in found}
    # Two 29Si couple to F = 1 (three states of four) and F = 0, which is one with the bare electron.
    assert weights == pytest.approx(
        {"29Si F=1": 0.75 * p**2, "29Si F=1/2": 2 * p * (1 - p), "": (1 - p) ** 2 + p**2 / 4}
    )


def test_negligible_isotopologues_are_left_out() -> None:
    species = Species(nuclei=(Nucleus(element="N", A=(40.0,), count=4), Nucleus(element="C", A=(20.0,), count=6)))
    every, most = systems(species, negligible=0.0), systems(species)
    assert sum(part.weight for part in most) == pytest.approx(1, abs=1e-12)
    assert len(most) < len(every)
    kept = {part.label: part.weight for part in most}
    assert len({part.label for part in every}) == len(every)
    for part in every:
        # What is left out is rare; what stays is scaled by less than 1e-4.
        assert kept.get(part.label, 0.0) == pytest.approx(part.weight, abs=1e-4)


# --- what cannot be ----------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("nucleus", "message"),
    [
        (
            Nucleus(isotope="64Cu", A=(1.0,)),
            'nucleus.1.isotope: "64Cu" is not a known isotope; known of Cu: 63Cu, 65Cu',
        ),
        (Nucleus(element="cu", A=(1.0,)), 'nucleus.1.element: "cu" is not a known element; did you mean "Cu"?'),
        (Nucleus(isotope="12C", A=(1.0,)), "nucleus.1.isotope: 12C has no nuclear spin; leave the nucleus out"),
        (
            Nucleus(element="Ce", A=(1.0,)),
            "nucleus.1.element: no natural isotope of Ce has a nuclear spin; leave the nucleus out",
        ),
        (
            Nucleus(isotope="1H", P=(-1, -1, 2)),
            "nucleus.1.P: 1H has I = 1/2 and no quadrupole interaction; leave P out",
        ),
        (
            Nucleus(element="Fe", P=(-1, -1, 2)),
            "nucleus.1.P: Fe has I = 1/2 and no quadrupole interaction; leave P out",
        ),
        (Nucleus(isotope="1H", count=10**11), "nucleus.1.count: count = 100000000000; write at most 200"),
    ],
)
def test_impossible_nuclei(nucleus: Nucleus, message: str) -> None:
    with pytest.raises(InputError) as caught:
        systems(Species(nuclei=(nucleus,)))
    assert str(caught.value) == message


def test_a_matrix_beyond_the_machine_is_refused_with_its_size() -> None:
    """2 x 6^8 = 3359232 states: 180 TB a matrix; the weakest coupled nucleus is named."""
    nuclei = tuple(Nucleus(isotope="55Mn", A=(100.0 - k,)) for k in range(8))
    with pytest.raises(
        InputError, match=r"nucleus: the spins make a matrix of 3359232 states.*nucleus 8, 55Mn"
    ) as caught:
        systems(Species(nuclei=nuclei))
    assert 'treat = "second order"' in str(caught.value)
    with pytest.raises(InputError, match=r"10\^60 states"):
        systems(Species(nuclei=(Nucleus(isotope="55Mn", A=(9.0,), P=(-1, -1, 2), count=77),)))
    with pytest.raises(InputError, match="spin: the spins make a matrix of 2000001 states.*use fewer or smaller spins"):
        systems(Species(spins=(Spin(S=1e6),)))
    with pytest.raises(InputError, match="isotopologues"):
        systems(Species(nuclei=(Nucleus(element="Sn", A=(9.0,), count=60), Nucleus(element="Xe", A=(8.0,), count=60))))


# --- weakly coupled nuclei ---------------------------------------------------------------------


COMPLEX = Species(
    spins=(Spin(g=(2.04, 2.26)),),
    nuclei=(
        Nucleus(isotope="63Cu", A=(-60, -540)),
        Nucleus(element="N", A=(30, 45), A_tilt=(0, 0.3, 0), count=4),
        Nucleus(isotope="1H", A=(60.0,), treat="first order"),
        Nucleus(isotope="1H", A=(6.0,), treat="exact"),
    ),
)


def test_weak_nuclei_are_left_out_on_request_only() -> None:
    (system,) = systems(COMPLEX, perturb=True)
    assert system.spins == (0.5, 1.5, 0.5)
    assert [(w.name, w.count, w.order, w.electron) for w in system.weak] == [("N", 4, 2, 0), ("1H", 1, 1, 0)]
    nitrogen = system.weak[0].kinds
    assert [k.name for k in nitrogen] == ["14N", "15N"]
    assert sum(k.share for k in nitrogen) == pytest.approx(1)
    np.testing.assert_allclose(nitrogen[0].hyperfine, tensor_matrix((30, 45), (0, 0.3, 0)))
    everything = systems(COMPLEX)
    assert all(not part.weak for part in everything)
    assert max(len(part.spins) for part in everything) > 4


def test_settling_decides_for_good() -> None:
    treats = [nucleus.treat for nucleus in settled(COMPLEX).nuclei]
    assert treats == ["exact", "second order", "first order", "exact"]
    assert settled(settled(COMPLEX)) == settled(COMPLEX)


# --- derivatives -------------------------------------------------------------------------------


def test_derivatives_of_linear_parameters_are_exact() -> None:
    def build(a: float) -> Species:
        return Species(spins=(Spin(g=(2.0, a)),), nuclei=(Nucleus(element="Cu", A=(-60, -540)),))

    for slope in derivative_matrices(build, 2.26):
        n = len(slope.h0)
        expected = MU_B * np.kron(spin_matrices(0.5)[2], np.eye(n // 2))
        np.testing.assert_allclose(slope.zeeman, [0 * expected, 0 * expected, expected], atol=1e-10)
        np.testing.assert_allclose(slope.h0, 0, atol=1e-12)


def test_derivatives_of_a_tilt() -> None:
    """Turning about z by alpha: d(R T R^T)/d alpha = [L_z, T] with the generator L_z of rotations."""
    generator = np.array([[0, -1, 0], [1, 0, 0], [0, 0, 0]])
    tensor = tensor_matrix((30, 50, 90), (0.4, 0.7, 0.2))
    expected = generator @ tensor - tensor @ generator

    def build(alpha: float) -> Species:
        nucleus = Nucleus(isotope="1H", A=(30, 50, 90), A_tilt=(alpha, 0.7, 0.2), treat="second order")
        return Species(nuclei=(nucleus,))

    s = spin_matrices(0.5)
    (slope,) = derivative_matrices(build, 0.4)
    np.testing.assert_allclose(slope.h0, np.einsum("ab,aij,bkl->ikjl", expected, s, s).reshape(4, 4), atol=1e-6)
    (slope,) = derivative_matrices(build, 0.4, perturb=True)
    ((hyperfine, quadrupole),) = slope.weak[0]
    np.testing.assert_allclose(hyperfine, expected, atol=1e-6)
    np.testing.assert_array_equal(quadrupole, np.zeros((3, 3)))


def test_a_quadrupole_tensor_that_starts_at_zero_is_said() -> None:
    def build(p: float) -> Species:
        return Species(nuclei=(Nucleus(isotope="14N", A=(40.0,), P=(-p, -p, 2 * p), count=2),))

    with pytest.raises(InputError, match="start it from another value"):
        derivative_matrices(build, 0.0)
    assert derivative_matrices(build, 1.0)[0].h0.shape == (18, 18)


# --- symmetries, for random species ------------------------------------------------------------

ANGLES = st.tuples(*[st.floats(-3, 3)] * 3)


def tensors(size: float) -> st.SearchStrategy:
    return st.tuples(*[st.floats(-size, size)] * 3)


@st.composite
def species(draw: st.DrawFn) -> Species:
    """Draw one or two spins with everything tilted, and up to two nuclei."""
    spins = tuple(
        Spin(
            S=draw(st.sampled_from([0.5, 1.0, 1.5, 2.5])),
            g=draw(st.tuples(*[st.floats(1.5, 3)] * 3)),
            D=draw(st.floats(-1e4, 1e4)),
            E=draw(st.floats(-3e3, 3e3)),
            g_tilt=draw(ANGLES),
            D_tilt=draw(ANGLES),
        )
        for _ in range(draw(st.integers(1, 2)))
    )
    exchange = ()
    if len(spins) == 2:
        a, b, _ = draw(tensors(800))
        between = draw(st.sampled_from([(1, 2), (2, 1)]))
        exchange = (Exchange(between, draw(st.floats(-5e3, 5e3)), (a, b, -a - b), draw(ANGLES), draw(tensors(300))),)
    nuclei = []
    for _ in range(draw(st.integers(0, 2))):
        name = draw(st.sampled_from(["1H", "14N", "29Si"]))
        a, b, _ = draw(tensors(10))
        p = (a, b, -a - b) if name == "14N" else (0.0, 0.0, 0.0)
        couples = draw(st.integers(1, len(spins)))
        nuclei.append(Nucleus(name, None, None, draw(tensors(300)), p, draw(ANGLES), draw(ANGLES), 1, couples))
    return Species(spins=spins, exchange=exchange, nuclei=tuple(nuclei))


@settings(derandomize=True, max_examples=60, deadline=None)
@given(species(), st.tuples(*[st.floats(-1, 1)] * 3).filter(lambda v: math.hypot(*v) > 0.1))
def test_hermitian_traceless_and_even_in_the_field(drawn: Species, direction: tuple) -> None:
    """Every term is Hermitian and traceless; time reversal makes the levels even in B."""
    (system,) = systems(drawn)
    scale = max(np.abs(system.h0).max(), 1.0)
    np.testing.assert_allclose(system.h0, system.h0.conj().T, atol=1e-12 * scale)
    np.testing.assert_allclose(system.zeeman, system.zeeman.conj().swapaxes(1, 2), atol=1e-14)
    assert abs(np.trace(system.h0)) < 1e-11 * scale * len(system.h0)
    np.testing.assert_allclose(np.einsum("aii->a", system.zeeman), 0, atol=1e-12)
    forth, back = levels(system, direction, 200.0), levels(system, direction, -200.0)
    np.testing.assert_allclose(forth, back, atol=1e-10 * scale)
    if sum(2 * spin for spin in system.spins) % 2:
        zero = levels(system, direction, 0.0)
        np.testing.assert_allclose(zero[::2], zero[1::2], atol=1e-10 * scale)  # Kramers' theorem


def turn(drawn: Species, rotation_: Rotation) -> Species:
    """Return the species with all its tensors turned together."""

    def tilt(angles: tuple) -> tuple:
        return tuple((rotation_ * Rotation.from_euler("ZYZ", angles)).as_euler("ZYZ"))

    def with_tilts(part: object, *names: str, **others: object) -> object:
        values = {name: getattr(part, name) for name in part.__dataclass_fields__}
        return type(part)(**(values | {name: tilt(values[name]) for name in names} | others))

    return Species(
        spins=tuple(with_tilts(spin, "g_tilt", "D_tilt") for spin in drawn.spins),
        exchange=tuple(
            with_tilts(e, "tilt", antisymmetric=tuple(rotation_.apply(e.antisymmetric))) for e in drawn.exchange
        ),
        nuclei=tuple(with_tilts(nucleus, "A_tilt", "P_tilt") for nucleus in drawn.nuclei),
    )


@settings(derandomize=True, max_examples=40, deadline=None)
@given(species(), st.tuples(*[st.floats(-1, 1)] * 3).filter(lambda v: math.hypot(*v) > 0.1))
@pytest.mark.filterwarnings("ignore:Gimbal lock")
def test_turning_everything_changes_nothing(drawn: Species, vector: tuple) -> None:
    """All tensors and the field turned together: U H U^+ is the turned species' H, and the levels agree."""
    rotation_ = Rotation.from_rotvec(np.array(vector) * 3)
    (system,), (turned,) = systems(drawn), systems(turn(drawn, rotation_))
    scale = max(np.abs(system.h0).max(), 1.0)
    direction = np.array([0.3, -0.5, 0.8])
    expected = levels(system, direction, 250.0)
    np.testing.assert_allclose(levels(turned, rotation_.apply(direction), 250.0), expected, atol=1e-9 * scale)
    unitary = rotation(system, vector, float(np.linalg.norm(vector) * 3))
    np.testing.assert_allclose(unitary @ system.h0 @ unitary.conj().T, turned.h0, atol=1e-9 * scale)


def test_frames_hold_the_symmetry_axes() -> None:
    tilt = (0.3, 0.8, 0.0)
    drawn = Species(
        spins=(Spin(S=1.5, g=(2.0, 2.1), g_tilt=tilt, D=3000, D_tilt=tilt),),
        nuclei=(Nucleus(isotope="14N", A=(30.0,), A_tilt=(1, 1, 1), P=(-1, -1, 2), P_tilt=(0.1, 0.2, 0.3)),),
    )
    (system,) = systems(drawn)
    expected = [np.eye(3), *(Rotation.from_euler("ZYZ", t).as_matrix() for t in (tilt, (0.1, 0.2, 0.3)))]
    assert len(system.frames) == 3  # an isotropic A has no axes
    for frame, matrix_ in zip(system.frames, expected, strict=True):
        np.testing.assert_allclose(frame, matrix_, atol=1e-15)
    # Without the nucleus the tilted axis is one of full rotation symmetry, and z of the molecule is not.
    bare = one(*drawn.spins)
    for axis, kept in ((bare.frames[1][:, 2], True), (Z, False)):
        unitary = rotation(bare, axis, 0.7)
        assert np.allclose(unitary @ bare.h0 @ unitary.conj().T, bare.h0, atol=1e-8) == kept
    coupled = one(Spin(), Spin(), exchange=(Exchange(antisymmetric=(1, 2, 2)),))
    frame = coupled.frames[1]
    np.testing.assert_allclose(frame[:, 2], np.array([1, 2, 2]) / 3, atol=1e-15)
    np.testing.assert_allclose(frame.T @ frame, np.eye(3), atol=1e-15)
    assert np.linalg.det(frame) == pytest.approx(1)


# --- the references themselves -----------------------------------------------------------------


@settings(derandomize=True, max_examples=25, deadline=None)
@given(species().filter(lambda drawn: len(systems(drawn)[0].h0) <= 8), st.integers(0, 10**6))
def test_eigenfields_and_plain_roots_agree(drawn: Species, seed: int) -> None:
    """Two independent ways to the resonance fields; nearly coalesced pairs by number and mean."""
    (system,) = systems(drawn)
    direction = np.random.default_rng(seed).normal(size=3)
    plain = np.array([line.field for line in plain_resonances(system, direction, 9500.0, (5, 600))])
    exact = eigenfields(system, direction, 9500.0, (5, 600))
    assert len(plain) == len(exact)
    lone = np.ones(len(plain), dtype=bool)
    close = np.flatnonzero(np.diff(plain) < 0.05)
    lone[close] = lone[close + 1] = False
    np.testing.assert_allclose(plain[lone], exact[lone], atol=1e-5)
    np.testing.assert_allclose(plain[~lone].sum(), exact[~lone].sum(), atol=1e-3 * max(1, (~lone).sum()))


@pytest.mark.parametrize(("d", "apart"), [(5200, 125), (5460, 2.2), (5480, None)])
def test_a_loop_has_two_roots_of_one_pair(d: float, apart: float | None) -> None:
    """S = 3/2, D near h nu / 2: two roots of levels 0 and 2 until they meet, also within one cell of the grid.

    The eigenfield equation gives the same fields.
    """
    system = one(Spin(S=1.5, g=(2.0,), D=d, E=300))
    direction = (0.5, 0.2, 0.84)
    fine = plain_resonances(system, direction, 9500.0, (1, 800), 2000)
    coarse = plain_resonances(system, direction, 9500.0, (1, 800), 60)
    loop = [line.field for line in fine if line[1:] == (0, 2)]
    if apart is None:
        assert not loop
    else:
        assert loop[1] - loop[0] == pytest.approx(apart, rel=0.02)
    assert [line[1:] for line in coarse] == [line[1:] for line in fine]
    np.testing.assert_allclose([line.field for line in coarse], [line.field for line in fine], atol=1e-8)
    exact = eigenfields(system, direction, 9500.0, (1, 800))
    np.testing.assert_allclose([line.field for line in fine], exact, atol=1e-6)


def test_plain_weights_of_one_spin() -> None:
    """S = 1/2, isotropic: |M|^2 = (g mu_B)^2/4 normal to the field, 0 along it; slope g mu_B, difference 1/2."""
    system = one(Spin(g=(2.1,)))
    direction = (0.2, 0.5, -0.3)
    lines = plain_resonances(system, direction, 9500.0, (200, 500), 50)
    assert plain_weights(system, direction, lines) == pytest.approx([2.1 * MU_B / 8], rel=1e-12)
    assert plain_weights(system, direction, lines, mode="parallel") == pytest.approx([0], abs=1e-12)
    across = np.cross(direction, (1, 1, 1))
    assert plain_weights(system, direction, lines, axis=across) == pytest.approx([2.1 * MU_B / 8], rel=1e-12)
    hot = plain_weights(system, direction, lines, temperature=4.0)
    x = constants.h * 9.5e9 / (2 * constants.k * 4.0)
    assert hot == pytest.approx([2.1 * MU_B / 4 * math.tanh(x)], rel=1e-9)


def test_plain_weights_do_not_depend_on_the_basis_of_degenerate_levels() -> None:
    """An uncoupled second spin without moment doubles every level: the sum of weights stays."""
    bare = one(Spin(g=(2.0, 2.05, 2.25)))
    doubled = System(
        np.kron(bare.h0, np.eye(2)), np.array([np.kron(z, np.eye(2)) for z in bare.zeeman]), (0.5, 0.5), 2, bare.frames
    )
    direction = (0.4, 0.1, 0.9)
    lines = plain_resonances(bare, direction, 9500.0, (200, 500), 50)
    expected = plain_weights(bare, direction, lines).sum()
    field = lines[0].field
    every = [type(lines[0])(field, i, j) for i, j in itertools.product((0, 1), (2, 3))]
    assert plain_weights(doubled, direction, every).sum() == pytest.approx(expected, rel=1e-10)


def test_plain_powder_integrates_to_the_closed_form() -> None:
    """Rhombic S = 1/2: the area is the average over the sphere of the known weight.

    W = (mu_B / 16) (Tr G - n.G^2.n/n.G.n) / g, G = g g^T (half the transition moment over two normal
    directions, slope g mu_B, population difference 1/2; F. K. Kneubuehl's powder, J. Chem. Phys.
    33, 1074 (1960), with the transition weight).
    """
    g = np.diag([2.0, 2.05, 2.25])
    system = one(Spin(g=(2.0, 2.05, 2.25)))
    directions, shares = sphere(60, 60)
    squares = g @ g.T
    nn = np.einsum("ki,ij,kj->k", directions, squares, directions)
    weight = np.trace(squares) - np.einsum("ki,ij,kj->k", directions, squares @ squares, directions) / nn
    expected = np.sum(shares * weight / np.sqrt(nn)) * MU_B / 16
    fields = np.linspace(280, 360, 801)
    absorption = plain_powder(system, 9500.0, fields, 1.0, 60, 60, order=0, points=20)
    assert trapezoid(absorption, fields) == pytest.approx(expected, rel=1e-9)
    derivative = plain_powder(system, 9500.0, fields, 1.0, 60, 60, order=1, points=20)
    assert trapezoid(trapezoid_cumulative(derivative, fields), fields) == pytest.approx(expected, rel=1e-4)


def trapezoid_cumulative(values: np.ndarray, at: np.ndarray) -> np.ndarray:
    steps = np.diff(at) * (values[1:] + values[:-1]) / 2
    return np.concatenate([[0.0], np.cumsum(steps)])


def test_two_ways_to_a_powder_spectrum_agree() -> None:
    """Sum over exact roots against the sum broadened in frequency, extrapolated to no broadening."""
    system = one(Spin(S=1, g=(2.0,), D=900, E=-100))
    fields = np.linspace(290, 390, 101)
    exact = plain_powder(system, 9500.0, fields, 6.0, 40, 40, octant=True, temperature=10.0)
    wide, narrow = (
        frequency_broadened(system, 9500.0, fields, 6.0, 40, 40, w, octant=True, temperature=10.0) for w in (40.0, 20.0)
    )
    assert np.abs(wide - exact).max() < 0.15 * np.abs(exact).max()
    assert np.abs((4 * narrow - wide) / 3 - exact).max() < 0.01 * np.abs(exact).max()


def test_matrix_along_a_direction() -> None:
    system = one(Spin(S=1, g=(2.0, 2.1, 2.2), D=700))
    expected = system.h0 + 100 * (0.6 * system.zeeman[0] + 0.8 * system.zeeman[2])
    np.testing.assert_allclose(matrix(system, (3, 0, 4), 100.0), expected)
