"""Free, quenched and measured g side by side; back to the crystal field; which ion it is."""

import json
import math
from dataclasses import replace

import numpy as np
import pytest

from spinfit.errors import InputError
from spinfit.ion import lande_g, lookup
from spinfit.ion.assignment import candidates
from spinfit.ion.crystal_field import from_octahedral, from_orbitals
from spinfit.ion.defaults import default_model, ions_with_default, open_shell
from spinfit.ion.families import cobalt_curve, cubic_doublets, t2g_hole_g
from spinfit.ion.first_order import first_order
from spinfit.ion.free_levels import free_levels, free_terms
from spinfit.ion.inverse import needed_reduction, needed_splitting, principal_g
from spinfit.ion.kramers import doublet_energies, doublet_matches, doublet_table, thermal_share
from spinfit.ion.magnetism import MOLAR_FROM_RECIPROCAL_MHZ, independent_part, susceptibility
from spinfit.ion.model import IonModel, hamiltonian, racah_to_slater, solve
from spinfit.ion.names import Shell
from spinfit.ion.quench import free_ratio, measured_from_parameters, parse_measured, quench_row, surviving_fraction
from spinfit.ion.terms import ls_terms
from spinfit.ion.weak_field import parting_field, term_in_field
from spinfit.units import G_ELECTRON, K_B_OVER_H, MU_B_OVER_H
from spinfit.units import MHZ_PER_WAVENUMBER as CM

# ---------------------------------------------------------------- free ion beyond Landé


def test_terms_of_d3_carry_their_labels():
    """Energies: E. U. Condon, G. H. Shortley (1935); 2H and 2P coincide and must both be named."""
    B, C = 700.0, 3000.0
    terms = free_terms(IonModel(Shell(3, 2, 3), 0.0, racah_to_slater(B, C)))
    found = {}
    for term in terms:
        found.setdefault(term.term, []).append(term.energy)
    assert found["4F"] == [pytest.approx(0)]
    assert found["4P"] == [pytest.approx(15 * B)]
    assert found["2H"] == [pytest.approx(9 * B + 3 * C)]
    assert found["2P"] == [pytest.approx(9 * B + 3 * C)]
    assert len(found["2D"]) == 2
    counted = ls_terms((Shell(3, 2, 3),))
    assert len(terms) == sum(counted.values())


def test_levels_of_erbium():
    """Er3+ in LaF3: 4I13/2, 4I11/2 near 6500 and 10 100 cm^-1 (W. T. Carnall et al., J. Chem. Phys. 90, 3443 (1989),
    from memory); g of 4I15/2 1.1955 to 1.197 in intermediate coupling (A. Abragam, B. Bleaney (1970))."""
    slater = {2: 97483 * CM, 4: 67904 * CM, 6: 54010 * CM}
    levels = free_levels(IonModel(Shell(4, 3, 11), 2376 * CM, slater), lowest=3)
    assert [level.label for level in levels] == ["4I15/2", "4I13/2", "4I11/2"]
    assert levels[1].energy / CM == pytest.approx(6500, rel=0.02)
    assert levels[2].energy / CM == pytest.approx(10100, rel=0.02)
    assert levels[0].g == pytest.approx(1.196, abs=1.5e-3)
    assert len(free_levels(IonModel(Shell(4, 3, 11), 2376 * CM, slater))) == 41  # levels of f3 (B. G. Wybourne)


@pytest.mark.parametrize("count", [2, 6])
def test_levels_with_whole_j(count):
    model = IonModel(Shell(3, 2, count), 0.01 * CM, racah_to_slater(700 * CM, 3000 * CM))
    levels = free_levels(model, lowest=3)
    expected = lookup(f"3d{count}")
    ground = sorted(levels, key=lambda level: level.energy)[0]
    assert ground.label == expected.term
    assert ground.g == pytest.approx(expected.g_J, abs=1e-5)


def test_weak_field_of_hydrogen_like_doublet_is_closed():
    """2P in a field: the quadratic formula of each M block (A. Sommerfeld; the Breit-Rabi form with l = 1)."""
    lam, B = 100.0, np.array([0.0, 1.0, 5.0, 50.0])
    levels = term_in_field(0.5, 1, lam, B)
    for M in (-0.5, 0.5):
        b = MU_B_OVER_H * B
        # basis |M_S=1/2, M_L=M-1/2>, |-1/2, M+1/2>
        h11 = lam / 2 * (M - 0.5) + b * ((M - 0.5) + G_ELECTRON / 2)
        h22 = -lam / 2 * (M + 0.5) + b * ((M + 0.5) - G_ELECTRON / 2)
        off = lam / 2 * math.sqrt(2 - (M - 0.5) * (M + 0.5))
        middle, half = (h11 + h22) / 2, np.sqrt(((h11 - h22) / 2) ** 2 + off**2)
        own = levels.exact[:, np.abs(levels.M - M) < 0.1]
        np.testing.assert_allclose(np.sort(own, axis=1), np.stack([middle - half, middle + half], 1), atol=1e-9)
    np.testing.assert_allclose(levels.exact[0], levels.first_order[0], atol=1e-9)


@pytest.mark.parametrize(("S", "L"), [(0.5, 2), (1.5, 3), (2, 2), (2.5, 5), (1, 1)])
@pytest.mark.parametrize("lam", [-100.0, 250.0])
def test_low_field_slopes_are_lande(S, L, lam):
    """Slope of the exact levels of lambda L.S + muB B (L_z + g_S S_z) at small field, every level of the term."""
    b = 1e-5
    levels = term_in_field(S, L, lam, np.array([0.0, b]))
    slopes = (levels.exact[1] - levels.exact[0]) / (b * MU_B_OVER_H)
    expected = [(lande_g(S, L, J) or 0.0) * M for J, M in zip(levels.J, levels.M, strict=True)]
    np.testing.assert_allclose(slopes, expected, atol=1e-5)


def test_parting_field_is_where_lines_part_by_one_percent():
    B = parting_field(1.5, 3, 4.5, -177 * CM)
    levels = term_in_field(1.5, 3, -177 * CM, np.array([B]))
    own = np.abs(levels.J - 4.5) < 0.1
    largest = np.abs(levels.exact - levels.first_order)[0, own].max()
    # the first-order shift of M = J with Landé's 1.33411
    assert largest == pytest.approx(0.01 * lookup("Co2+").g_J * 4.5 * MU_B_OVER_H * B, rel=1e-6)
    assert parting_field(3, 3, 0, 223 * CM) is None
    assert parting_field(2.5, 0, 2.5, 1.0) is None
    with pytest.raises(InputError, match="lambda"):
        term_in_field(0.5, 1, 0.0, np.array([1.0]))


# ---------------------------------------------------------------- first order


def test_table_of_n():
    """n = 8, 2 (d9, x2-y2), 0, 6 (d9, z2), 8, 2 (d1, xy), 8 (d3, d8 octahedral): A. Abragam, B. Bleaney (1970)."""
    base = {"z2": 6000.0, "x2-y2": 7000.0, "xy": 0.0, "xz": -900.0, "yz": -900.0}
    for count, orbital, energy, expected in [
        (9, "x2-y2", 15000.0, {"x": 2, "y": 2, "z": 8}),
        (9, "z2", 15000.0, {"x": 6, "y": 6}),
        (1, "xy", -15000.0, {"x": 2, "y": 2, "z": 8}),
    ]:
        field = from_orbitals(2, base | {orbital: energy}).scaled(CM)
        result = first_order(IonModel(Shell(3, 2, count), 500 * CM, crystal_field=field))
        assert {m.axis: round(m.n, 9) for m in result.terms} == expected
        assert result.lam == pytest.approx((1 if count == 1 else -1) * 500 * CM)
    for count, lam in ((3, 1 / 3), (8, -1 / 2)):
        slater = racah_to_slater(700 * CM, 3000 * CM)
        result = first_order(IonModel(Shell(3, 2, count), 300 * CM, slater, from_octahedral(12000 * CM)))
        assert {m.axis: round(m.n, 6) for m in result.terms} == {"x": 8, "y": 8, "z": 8}
        assert all(m.delta == pytest.approx(12000 * CM) for m in result.terms)
        assert result.lam == pytest.approx(lam * 300 * CM)
        np.testing.assert_allclose(result.g, (G_ELECTRON - 8 * lam * 300 / 12000) * np.eye(3), atol=1e-9)


def test_first_order_is_the_tangent_of_the_exact_model():
    """Also where several levels mix and repulsion mixes terms: (g - first order)/zeta vanishes with zeta."""
    field = from_octahedral(16000 * CM, 900 * CM, 400 * CM)
    for count in (2, 3, 4, 8):
        errors = []
        for zeta in (2.0, 0.2):
            model = IonModel(Shell(3, 2, count), zeta * CM, racah_to_slater(700 * CM, 3000 * CM), field)
            errors.append(np.abs(principal_g(model) - np.diag(first_order(model).g)).max() / zeta)
        assert errors[1] < max(errors[0] / 5, 1e-8)


def test_first_order_of_low_spin_ions():
    """Low-spin d7, the electron in z2: n = 0 and 6 as for a hole there (A. Abragam, B. Bleaney (1970))."""
    energies = {"z2": 24000.0, "x2-y2": 30000.0, "xy": 0.0, "xz": 500.0, "yz": 500.0}
    field, slater = from_orbitals(2, energies).scaled(CM), racah_to_slater(1.0 * CM, 4.5 * CM)
    result = first_order(IonModel(Shell(3, 2, 7), 1.0 * CM, slater, field))
    assert result.S == 0.5
    n = {axis: sum(m.n for m in result.terms if m.axis == axis) for axis in "xyz"}
    assert n["z"] == pytest.approx(0, abs=1e-6)
    assert n["x"] == pytest.approx(6, rel=1e-2)
    errors = []
    for zeta in (1.0, 0.1):
        model = IonModel(Shell(3, 2, 7), zeta * CM, slater, field)
        errors.append(np.abs(principal_g(model) - np.diag(first_order(model).g)).max() / zeta)
    assert errors[1] < errors[0] / 5


# ---------------------------------------------------------------- moments


def test_susceptibility_of_a_free_multiplet_is_curie_with_lande():
    levels = solve(IonModel(Shell(4, 3, 11), 2376 * CM, space="level"))
    result = susceptibility(levels, [2.0, 300.0])
    np.testing.assert_allclose(result.moment, lookup("Er3+").moment, rtol=1e-10)
    # Curie constant of spin-only S = 1/2, g = 2: 0.375 cm^3 K/mol (textbook value, 3 digits)
    assert MOLAR_FROM_RECIPROCAL_MHZ / K_B_OVER_H * 2.0**2 * 0.75 / 3 == pytest.approx(0.375, abs=5e-4)


def van_vleck(S, L, lam, T):
    """Effective moment of a multiplet (J. H. van Vleck (1932), chapter IX): g^2 J(J+1)/3kT + 2 alpha by level,

    alpha = [F(J+1)/(E(J+1) - E(J)) - F(J)/(E(J) - E(J-1))] (g_S - g_L)^2 / 6(2J+1),
    F(J) = [(S+L+1)^2 - J^2][J^2 - (S-L)^2]/J.
    """

    def F(J):
        return ((S + L + 1) ** 2 - J**2) * (J**2 - (S - L) ** 2) / J if J else 0.0

    total = partition = 0.0
    kT = K_B_OVER_H * T
    for J in np.arange(abs(L - S), L + S + 1):
        energy = lam / 2 * J * (J + 1)
        up = F(J + 1) / (lam * (J + 1))
        down = F(J) / (lam * J) if J else 0.0
        alpha = (up - down) * (G_ELECTRON - 1) ** 2 / (6 * (2 * J + 1))
        g = lande_g(S, L, J) or 0.0
        weight = (2 * J + 1) * math.exp(-energy / kT)
        total += weight * (g**2 * J * (J + 1) / (3 * kT) + alpha)
        partition += weight
    return math.sqrt(3 * kT * total / partition)


def test_europium_and_samarium_moments_by_van_vleck():
    """Eu3+ and Sm3+, whose moments come from the higher levels: the classical closed form at 300 K."""
    for count, S, L, lam in ((6, 3, 3, 250.0), (5, 2.5, 5, 240.0)):
        levels = solve(IonModel(Shell(4, 3, count), 2 * S * lam * CM, space="term"))
        found = susceptibility(levels, [80.0, 300.0]).moment
        np.testing.assert_allclose(found, [van_vleck(S, L, lam * CM, T) for T in (80.0, 300.0)], rtol=1e-9)
    # Eu3+ at 300 K: p measured 3.4 (C. Kittel, same table), 0 by Hund's level alone
    assert van_vleck(3, 3, 300 * CM, 300.0) == pytest.approx(3.4, abs=0.15)
    # T -> 0: 2 |<1|L + g S|0>|^2/lambda with |<1|S_z|0>|^2 = 4
    levels = solve(IonModel(Shell(4, 3, 6), 6 * 250.0 * CM, space="term"))
    expected = 2 * 4 * (G_ELECTRON - 1) ** 2 / (250.0 * CM) * MOLAR_FROM_RECIPROCAL_MHZ
    np.testing.assert_allclose(np.diag(independent_part(levels, manifold=1)), expected, rtol=1e-9)


def test_susceptibility_is_the_slope_of_the_magnetisation():
    """chi from a small finite field on all levels, the definition itself."""

    model = IonModel(
        Shell(3, 2, 2), 150 * CM, racah_to_slater(650 * CM, 2600 * CM), from_octahedral(17000 * CM, 400 * CM)
    )
    levels = solve(model)
    chi = susceptibility(levels, [50.0]).chi[0] / MOLAR_FROM_RECIPROCAL_MHZ
    orbital, spin = levels.operators()
    kT = K_B_OVER_H * 50.0
    for axis in range(3):
        moment = orbital[axis] + G_ELECTRON * spin[axis]

        def free_energy(b, moment=moment):
            e = np.linalg.eigvalsh((hamiltonian(model) + b * moment).toarray()) - levels.energies[0]
            return -kT * np.log(np.exp(-e / kT).sum())

        b = 3e3
        slope = -(free_energy(b) - 2 * free_energy(0.0) + free_energy(-b)) / b**2
        assert chi[axis, axis] == pytest.approx(slope, rel=2e-3)


def test_temperature_must_be_positive():
    with pytest.raises(InputError, match="temperature"):
        susceptibility(solve(IonModel(Shell(3, 2, 1), 1.0)), [0.0])


# ---------------------------------------------------------------- the comparison


@pytest.mark.parametrize(
    ("ion", "g", "r", "fraction"),
    # Surviving orbital moment: (g - g_e)/r with r = <L>/<S> of the free level (reference collection).
    [("Cu2+", 2.262, 4.0, 0.065), ("Ni2+", 2.2145, 3.0, 0.0707), ("Cr3+", 1.98, -8 / 3, 0.0084)],
)
def test_surviving_orbital_moment(ion, g, r, fraction):
    level = lookup(ion)
    assert free_ratio(level) == pytest.approx(r)
    values, uncertainty = surviving_fraction((g, g, g), level, (0.001, 0.001, 0.001))
    assert values[0] == pytest.approx(fraction, abs=5e-4)
    assert uncertainty[0] == pytest.approx(0.001 / abs(r))


def test_ratio_of_j_zero_levels():
    """J = 0: L and S are equal and opposite, r = -1 (Mn3+ 5D0, Eu3+ 7F0)."""
    assert free_ratio(lookup("Mn3+")) == -1
    assert free_ratio(lookup("Eu3+")) == -1
    assert free_ratio(lookup("Gd3+")) is None


def test_row_of_copper():
    row = quench_row("Cu2+", measured=parse_measured("2.05, 2.06, 2.262(3)"))
    record = row.as_record()
    assert json.loads(json.dumps(record, allow_nan=False)) == record
    assert row.kind == "spin Hamiltonian"
    assert "from memory" in row.crystal_field  # a typical field is never silent
    assert record["orbital_fraction_measured"][2] == pytest.approx(0.0649, abs=1e-4)
    assert record["orbital_fraction_uncertainty"][2] == pytest.approx(0.003 / 4)
    exact, simple = np.array(row.g_crystal), np.array(row.g_first_order)
    assert np.all(np.abs(exact - simple) < 0.1 * (simple - G_ELECTRON) + 0.005)
    assert record["moment"] == pytest.approx(3.55, abs=0.01)  # Kittel
    assert record["moment_crystal_field_300K"] == pytest.approx(1.9, abs=0.1)  # Kittel, measured


@pytest.mark.parametrize(
    ("ion", "p"),
    # Measured moments of the iron group: C. Kittel, table of effective magneton numbers.
    [
        ("Cr3+", 3.8),
        ("Mn2+", 5.9),
        ("Fe3+", 5.9),
        ("Fe2+", 5.4),
        ("Co2+", 4.8),
        ("Ni2+", 3.2),
        ("Cu2+", 1.9),
        ("V3+", 2.8),
    ],
)
def test_moments_in_typical_fields_are_near_the_measured_ones(ion, p):
    assert quench_row(ion).moment_300K == pytest.approx(p, abs=0.45)


@pytest.mark.parametrize(
    ("ion", "p"),
    # Measured moments of trivalent lanthanides near room temperature: C. Kittel, table of effective magneton numbers.
    # Sm3+ and Eu3+ are the cases where Hund's level alone (0.84 and 0) fails.  Yb3+ is left out: its typical field,
    # that of a fluorite, splits the level by 600 cm^-1, so that p at 300 K lies well below that of the salts.
    [("Ce3+", 2.4), ("Pr3+", 3.5), ("Nd3+", 3.5), ("Sm3+", 1.5), ("Eu3+", 3.4), ("Gd3+", 8.0), ("Tb3+", 9.5)]
    + [("Dy3+", 10.6), ("Ho3+", 10.4), ("Er3+", 9.5), ("Tm3+", 7.3)],
)
def test_moments_of_lanthanides_in_typical_fields(ion, p):
    assert quench_row(ion).moment_300K == pytest.approx(p, abs=0.25)


def test_every_typical_field_solves_and_says_what_it_is():
    for ion in ions_with_default():
        model = default_model(ion)
        assert model.crystal.remark
        assert len(solve(model).energies) >= 10


def test_neodymium_in_lanthanum_chloride():
    """Crystal-field parameters from memory give the measured g of Nd3+ in LaCl3, 3.996 and 1.763 (C. A. Hutchison,
    E. Wong, J. Chem. Phys. 29, 754 (1958), from memory), within 5 %."""
    g = quench_row("Nd3+").g_crystal
    np.testing.assert_allclose(g, [1.763, 1.763, 3.996], rtol=0.05)


def test_f_ions_keep_their_orbital_moment():
    """Locked to the spin by coupling: <L>/<S> is that of the free level in a pure level, 1 in these units."""
    pure = quench_row("Yb3+", model=replace(default_model("Yb3+"), space="level"))
    assert pure.kind == "doublet"
    np.testing.assert_allclose(pure.fraction, 1.0, rtol=1e-9)
    # Mixing with 2F5/2 takes a part of it: <S> is a seventh of J, so that little changes it much.
    assert 0.7 < quench_row("Yb3+").fraction[0] < 1
    assert quench_row("Yb3+", measured=parse_measured("3.43")).fraction_measured is None


def test_rows_without_a_doublet_say_why():
    vanadium = quench_row("V3+")
    assert vanadium.effective_spin == 1
    assert vanadium.D > 0
    zinc = quench_row("Zn2+")
    assert zinc.g_crystal is None
    assert any("closed shells" in note for note in zinc.notes)
    assert any("no typical crystal field" in note for note in quench_row("Fe+").notes)


def test_effective_g_of_a_high_spin_is_recognised():
    """g' = 4.29 of Fe3+ is the middle doublet at E/D = 1/3 (T. Castner et al. (1960)), not a g of S = 5/2."""
    row = quench_row("Fe3+", measured=parse_measured("4.29"))
    assert any("doublet 2 at E/D = 0.33" in note for note in row.notes)
    assert row.fraction_measured is None
    chromium = quench_row("Cr3+", measured=parse_measured("4.0, 2.0"))
    assert any("doublet 1 at E/D = 0.0" in note for note in chromium.notes)
    assert chromium.fraction_measured is None


def test_singly_charged_ions_put_all_electrons_into_d():
    assert str(open_shell("Fe+")) == "3d7"
    assert str(open_shell("Ni+")) == "3d9"
    field = from_octahedral(9000 * CM, 300 * CM)
    model = IonModel(Shell(3, 2, 7), 350 * CM, racah_to_slater(600 * CM, 3000 * CM), field, name="Fe+")
    row = quench_row("Fe+", model=model)
    assert row.level.term == "6D9/2"
    assert any("3d7, free level 4F9/2" in note for note in row.notes)
    with pytest.raises(InputError, match="4f7 and 5d1"):
        open_shell("Gd")
    with pytest.raises(InputError, match="without a configuration"):
        open_shell("4F9/2")


@pytest.mark.parametrize(
    ("text", "values", "sigma", "count"),
    [
        ("2.0061(2)", (2.0061,) * 3, (2e-4,) * 3, 1),
        ("2.05, 2.33", (2.05, 2.05, 2.33), (0, 0, 0), 2),
        ("2.05 2.06(1) 2.3(10)", (2.05, 2.06, 2.3), (0, 0.01, 1.0), 3),
    ],
)
def test_measured_text(text, values, sigma, count):
    measured = parse_measured(text)
    np.testing.assert_allclose(measured.values, values)
    np.testing.assert_allclose(measured.uncertainties, sigma)
    assert measured.count == count


@pytest.mark.parametrize("text", ["", "abc", "1,2,3,4", "2.0e3", "nan", "1000", "2.0(x)"])
def test_measured_text_is_refused(text):
    with pytest.raises(InputError, match="g value|holds|beyond"):
        parse_measured(text)


def test_measured_from_an_outcome():
    parameters = {
        "cu.g_perp": {"value": 2.05, "uncertainty": 0.001},
        "cu.g_par": {"value": 2.26, "uncertainty": None},
        "rad.g": {"value": 2.003, "uncertainty": 1e-4},
        "cu.width.gaussian": {"value": 1.0, "uncertainty": 0.1},
    }
    measured = measured_from_parameters(parameters, "cu")
    assert measured.values == (2.05, 2.05, 2.26)
    assert measured.uncertainties == (0.001, 0.001, 0.0)
    assert measured.count == 2
    with pytest.raises(InputError, match="cu, rad"):
        measured_from_parameters(parameters)
    with pytest.raises(InputError, match="no g"):
        measured_from_parameters({})


# ---------------------------------------------------------------- the inverse


def test_needed_splitting_and_reduction_bring_the_model_to_the_measurement():
    field = from_orbitals(2, {"x2-y2": 15000.0, "z2": 7000.0, "xy": 0.0, "xz": -500.0, "yz": -1500.0}).scaled(CM)
    model = IonModel(Shell(3, 2, 9), 829 * CM, crystal_field=field)
    # A measurement made by the model itself, at k = 0.8, must give k = 0.8 back.
    g = principal_g(model.with_covalency(0.8))
    measured = parse_measured(", ".join(f"{x:.9f}(1000)" for x in g))
    for row in needed_reduction(model, measured):
        assert row.value == pytest.approx(0.8, abs=1e-6)
        assert row.uncertainty > 0
    # and one made with the whole field 1.25 times as strong gives Delta 1.25 times the model's.
    g = principal_g(IonModel(model.shell, model.zeta, crystal_field=field.scaled(1.25)))
    for row in needed_splitting(model, parse_measured(", ".join(f"{x:.9f}" for x in g))):
        assert row.value == pytest.approx(1.25 * row.given, rel=1e-6)
        assert row.uncertainty is None


def test_uncertainty_of_the_needed_splitting():
    """First order: Delta = n lambda/(g_e - g), so sigma(Delta)/Delta = sigma(g)/|g - g_e| for small zeta."""
    field = from_orbitals(2, {"x2-y2": 15000.0, "z2": 7000.0, "xy": 0.0, "xz": 0.0, "yz": 0.0}).scaled(CM)
    model = IonModel(Shell(3, 2, 9), 20 * CM, crystal_field=field)
    row = needed_splitting(model, parse_measured("2.0050(1), 2.0050(1), 2.0130(1)"))[2]
    assert row.uncertainty / row.value == pytest.approx(1e-4 / (2.0130 - G_ELECTRON), rel=0.01)


def test_one_measured_number_counts_once():
    measured = parse_measured("2.2145(5)")
    rows = needed_reduction(default_model("Ni2+"), measured)
    assert rows[3].uncertainty == pytest.approx(rows[0].uncertainty, rel=1e-6)


def test_unreachable_g_is_said():
    rows = needed_splitting(default_model("Cu2+"), parse_measured("1.9, 1.9, 1.9"))
    assert all(row.value is None for row in rows)
    assert "gives g = 1.9" in rows[0].reason
    with pytest.raises(InputError, match="orbitally degenerate"):
        needed_splitting(default_model("Co2+"), parse_measured("4.3"))


# ---------------------------------------------------------------- Kramers doublets


def test_doublets_of_high_spins():
    """T. Castner et al., J. Chem. Phys. 32, 668 (1960); R. Aasa, J. Chem. Phys. 52, 3919 (1970); g = 2."""
    for S, perpendicular in ((1.5, 4), (2.5, 6), (3.5, 8)):
        table = doublet_table(S, [0.0, 1 / 3], g=2)
        assert table.shape == (2, S + 0.5, 3)
        np.testing.assert_allclose(table[0, 0], [perpendicular, perpendicular, 2], atol=1e-9)
        np.testing.assert_allclose(table[0, 1], [0, 0, 6], atol=1e-9)
    for doublet in (0, 1):
        np.testing.assert_allclose(np.sort(doublet_table(1.5, 1 / 3, g=2)[0, doublet]), [1.464, 2, 5.464], atol=1e-3)
    five = np.sort(doublet_table(2.5, 1 / 3, g=2)[0], axis=1)
    np.testing.assert_allclose(five[1], 30 / 7, atol=1e-9)
    for outer in (0, 2):
        np.testing.assert_allclose(five[outer], [0.607, 0.857, 9.678], atol=1e-3)
    np.testing.assert_allclose(np.sort(doublet_table(3.5, 1 / 3, g=2)[0, 1]), [2.791, 3.746, 8.393], atol=1e-3)


def test_doublets_of_spin_three_halves_are_closed():
    """S = 3/2 at any E/D, from its 2 x 2 blocks (J. R. Pilbrow, J. Magn. Reson. 31, 479 (1978)).

    With r = sqrt(1 + 3 x^2), x = E/D: upper signs for one doublet, lower for the other,
    g'_z = |1 -+ 2/r| g, g'_x = |1 +- (1 - 3x)/r| g, g'_y = |1 +- (1 + 3x)/r| g.
    """
    for x in (0.05, 0.2, 0.31):
        r = math.sqrt(1 + 3 * x * x)
        low, high = doublet_table(1.5, [x], g=2)[0]
        np.testing.assert_allclose(np.sort(low[:2]), np.sort(2 * np.abs([1 + (1 - 3 * x) / r, 1 + (1 + 3 * x) / r])))
        np.testing.assert_allclose(low[2], 2 * abs(1 - 2 / r))
        np.testing.assert_allclose(np.sort(high[:2]), np.sort(2 * np.abs([1 - (1 - 3 * x) / r, 1 - (1 + 3 * x) / r])))
        np.testing.assert_allclose(high[2], 2 * abs(1 + 2 / r))


@pytest.mark.parametrize(
    ("S", "doublet", "rhombicity"), [(1.5, 0, 0.12), (2.5, 1, 0.28), (2.5, 0, 0.03), (3.5, 1, 0.2)]
)
def test_inverse_of_the_doublets(S, doublet, rhombicity):
    g = doublet_table(S, [rhombicity], g=2.0)[0, doublet]
    best = doublet_matches(g, g=2.0, uncertainty=[0.01] * 3)[0]
    assert (best.S, best.doublet) == (S, doublet + 1)
    assert best.rhombicity == pytest.approx(rhombicity, abs=1e-4)
    assert 0 < best.uncertainty < 0.02


def test_doublet_energies_and_shares():
    np.testing.assert_allclose(doublet_energies(2.5, 0), [0.25 - 35 / 12, 2.25 - 35 / 12, 6.25 - 35 / 12], atol=1e-12)
    assert thermal_share(2.5, 0.0, 10.0, 0.1)[0] == pytest.approx(1)
    assert thermal_share(2.5, 0.0, -10.0, 0.1)[2] == pytest.approx(1)


def test_bad_doublets():
    with pytest.raises(InputError, match="no Kramers doublets"):
        doublet_table(2.0, [0.1])
    with pytest.raises(InputError, match="1 or 3"):
        doublet_matches([2.0, 3.0])


# ---------------------------------------------------------------- which ion


def test_families_against_closed_forms():
    # K. R. Lea, M. J. M. Leask, W. P. Wolf (1962)
    np.testing.assert_allclose(cubic_doublets(2.5), [5 / 3], atol=1e-8)
    np.testing.assert_allclose(cubic_doublets(3.5), [7 / 3, 3], atol=1e-8)
    np.testing.assert_allclose(cubic_doublets(7.5), [5, 17 / 3], atol=1e-8)
    # One hole in undistorted t2g: |g| = (g_e + 4k)/3, 2 for k = 1 and g_e = 2 (J. S. Griffith (1956))
    np.testing.assert_allclose(t2g_hole_g(np.array([0.0]), np.array([0.0])), (G_ELECTRON + 4) / 3, rtol=1e-9)
    # Far from degeneracy the spin alone is left
    np.testing.assert_allclose(t2g_hole_g(np.array([-4000.0]), np.array([0.0])), G_ELECTRON, atol=2e-3)
    # Undistorted 4T1: g = 5 g_e/3 + 2 alpha k/3 (A. Abragam, M. H. L. Pryce (1951)), 10/3 + 1 for alpha = 3/2
    delta, g = cobalt_curve(1.5, 1.0)
    np.testing.assert_allclose(g[list(delta).index(0.0)], 5 * G_ELECTRON / 3 + 2 * 1.5 / 3, atol=1e-9)


def test_low_spin_d5_against_the_whole_configuration():
    """The t2g formula against 252 determinants with a huge 10Dq, which leaves one hole in t2g."""
    zeta, delta, v = 400.0, 1200.0, 700.0
    energies = {"x2-y2": 9e5, "z2": 9e5, "xy": 0.0, "yz": delta + v / 2, "xz": delta - v / 2}
    field = from_orbitals(2, energies)
    model = IonModel(Shell(3, 2, 5), zeta, racah_to_slater(10.0, 40.0), field)
    exact = principal_g(model)
    formula = t2g_hole_g(np.array([delta / zeta]), np.array([v / zeta]))[0]
    np.testing.assert_allclose(exact, formula, atol=5e-3)


@pytest.mark.parametrize(
    ("measured", "known"),
    # Handbook cases, from memory: A. Abragam, B. Bleaney (1970) and the papers it names; cytochrome c and haem:
    # W. E. Blumberg, J. Peisach (1971); glass Fe3+: T. Castner et al. (1960); DPPH and nitroxide: common practice.
    [
        ("2.09, 2.40", "Cu2+, hole in x2-y2"),
        ("1.98, 1.935", "VO2+"),
        ("1.9800(6)", "Cr3+"),
        ("2.0014", "Mn2+"),
        ("2.2145", "Ni2+"),
        ("4.29", "high spin S = 5/2, doublet 2"),
        ("6.0, 2.0", "high spin S = 5/2, doublet 1"),
        ("3.06, 2.25, 1.25", "low-spin d5"),
        ("6.78", "Er3+, cubic"),
        ("3.43", "Yb3+, cubic"),
        ("2.0036", "organic radical"),
        ("2.0090, 2.0060, 2.0022", "organic radical, oxygen or nitrogen"),
        ("4.278", "Co2+, high spin, octahedral"),
        ("2.25, 2.02", "Co2+, low spin"),
    ],
)
def test_known_assignments_are_among_the_first_three(measured, known):
    found = candidates(parse_measured(measured))
    assert any(c.name.startswith(known) for c in found[:3]), [c.name for c in found[:3]]
    for c in found:
        assert c.decide
        assert c.known
        json.dumps(c.as_record(), allow_nan=False)


def test_candidates_say_what_they_need():
    best = {c.name: c for c in candidates(parse_measured("2.05, 2.06, 2.33"))}
    copper = best["Cu2+, hole in x2-y2 (elongated octahedron, square)"]
    parallel = next(value for name, value, _ in copper.needs if "par" in name)
    # n lambda/(g - g_e) with n = 8, lambda = -829 cm^-1
    assert parallel == pytest.approx(8 * 829 / (2.33 - G_ELECTRON))
    assert copper.in_range
    with pytest.raises(InputError, match="positive"):
        candidates(parse_measured("0"))
