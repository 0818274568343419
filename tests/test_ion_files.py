"""Crystal-field files: every form, and every mistake in one line."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from spinfit.errors import InputError
from spinfit.files.keys import BOND, FIELD
from spinfit.files.toml_crystal_field import model_from_table, parse_xyz, read_crystal_fields
from spinfit.ion.model import solve
from spinfit.ion.tensors import doublet_g
from spinfit.units import MHZ_PER_WAVENUMBER as CM

COPPER = """
[[ion]]
name = "Cu(II)"
source = "band maxima"
covalency = 0.8
measured = "2.05, 2.33(1)"
[ion.orbitals]
"x2-y2" = "15000 cm^-1"
z2 = "7000 cm^-1"
xy = "0 cm^-1"
xz = "-0.06 eV"
yz = "-500 cm^-1"
"""


def write(tmp_path, text):
    path = tmp_path / "field.toml"
    path.write_text(text, encoding="utf-8")
    return path


def test_orbitals(tmp_path):
    given = read_crystal_fields(write(tmp_path, COPPER))["Cu2+"]
    assert given.model.crystal.remark == "band maxima"
    assert given.model.zeta == pytest.approx(0.8 * 829 * CM)
    assert given.model.reduction == pytest.approx(0.8)
    assert given.model.crystal.value("x2-y2") == pytest.approx(15000 * CM)
    # 1 eV is 8065.54 cm^-1 (CODATA)
    assert given.model.crystal.value("xz") / CM == pytest.approx(-0.06 * 8065.544, rel=1e-6)
    assert given.measured.count == 2
    assert doublet_g(solve(given.model)).principal[2] > 2.2


def test_all_forms_of_an_octahedron_agree(tmp_path):
    """10Dq = 3 e_sigma - 4 e_pi; B^4_0 = 21/10 x 10Dq, B^4_4 = sqrt(5/14) B^4_0."""
    head = '[[ion]]\nname = "Ni2+"\nracah = {B = "900 cm^-1", C = "3800 cm^-1"}\n'
    ligands = (
        "".join(
            f'[[ion.ligand]]\nposition = {p}\ne_sigma = "4000 cm^-1"\ne_pi = "750 cm^-1"\n'
            for p in ([2, 0, 0], [-2, 0, 0], [0, 2, 0], [0, -2, 0], [0, 0, 2])
        )
        + '[[ion.ligand]]\nangles = "180, 0 deg"\ne_sigma = "4000 cm^-1"\ne_pi = "750 cm^-1"\n'
    )
    xyz = "\n".join(["Ni 1 1 1", "O 3 1 1", "O -1 1 1", "O 1 3 1", "O 1 -1 1", "O 1 1 3", "O 1 1 -1"])
    geometry = (
        f'[ion.geometry]\nxyz = """\n{xyz}\n"""\n[ion.geometry.bonds.O]\ne_sigma = "4000 cm^-1"\ne_pi = "750 cm^-1"\n'
    )
    wybourne = f'[ion.wybourne]\nB4_0 = "18900 cm^-1"\nB4_4 = "{18900 * math.sqrt(5 / 14):.9f} cm^-1"\n'
    found = []
    for body in ('[ion.octahedral]\nten_Dq = "9000 cm^-1"\n', ligands, geometry, wybourne):
        model = read_crystal_fields(write(tmp_path, head + body))["Ni2+"].model
        found.append(solve(model).excitation / CM)
    for energies in found[1:]:
        np.testing.assert_allclose(energies, found[0], atol=1e-4)


def test_stevens_of_erbium_in_a_species_table():
    model = model_from_table(
        {"space": "level", "stevens": {"B4_0": "300 MHz", "B4_4": "1500 MHz"}}, "Er3+", place="species.1.crystal_field"
    )
    # With the fourth order alone (x = 1) a gamma 6 or 7 doublet has 6.0 or 6.8 (K. R. Lea et al. (1962))
    levels = solve(model)
    values = {round(doublet_g(levels, which=i).principal[0], 2) for i, n in enumerate(levels.degeneracies()) if n == 2}
    assert values == {6.0, 6.8}


@pytest.mark.parametrize(
    ("change", "place", "found", "right"),
    [
        (('"15000 cm^-1"', "15000"), "ion.1.orbitals.x2-y2", "has no unit", "cm^-1"),
        (('"15000 cm^-1"', '"15000 mT"'), "ion.1.orbitals.x2-y2", "unit of field", "cm^-1"),
        (('z2 = "7000 cm^-1"\n', ""), "ion.1.orbitals", "z2 is missing", "all 5 d orbitals"),
        (("z2 =", "z3 ="), "ion.1.orbitals", 'unknown key "z3"', 'did you mean "z2"'),
        (("covalency", "covalence"), "ion.1", 'unknown key "covalence"', 'did you mean "covalency"'),
        (("0.8", "-1"), "ion.1.covalency", "-1", "above 0"),
        (("Cu(II)", "Cu(X)"), "ion.1.name", "charge", "III"),
        (("Cu(II)", "Zn2+"), "ion.1.name", "only closed shells", "open"),
        (("Cu(II)", "Ni2+"), "ion.1", "needs its electron repulsion", "racah"),
        (("Cu(II)", "Y2+"), "ion.1.zeta", "no spin-orbit constant", "zeta"),
        (("2.33(1)", "2.33(a)"), "ion.1.measured", "not a g value", "2.05"),
        (
            ("[ion.orbitals]", '[ion.octahedral]\nten_Dq = "1 cm^-1"\n[ion.orbitals]'),
            "ion.1",
            "stands beside",
            "one form",
        ),
        (("[[ion]]", "[ion]"), "ion", "single brackets", "[[ion]]"),
        (("[ion.orbitals]", "space = 'confguration'\n[ion.orbitals]"), "ion.1.space", "not known", "configuration"),
    ],
)
def test_mistakes_are_one_line(tmp_path, change, place, found, right):
    path = write(tmp_path, COPPER.replace(*change))
    with pytest.raises(InputError) as error:
        read_crystal_fields(path)
    text = str(error.value)
    assert text.startswith(f"{path}: {place}")
    assert found in text
    assert right in text
    assert "\n" not in text


@pytest.mark.parametrize(
    ("body", "found"),
    [
        ("", "has no crystal field"),
        ('[[ion.ligand]]\nposition = [0, 0, 0]\ne_sigma = "1 cm^-1"', "metal's own place"),
        ('[[ion.ligand]]\nposition = [0, 0, 1]\nangles = "0, 0 deg"\ne_sigma = "1 cm^-1"', "exactly one of"),
        ("[[ion.ligand]]\nposition = [0, 0, 1]", "e_sigma: is missing"),
        ('[ion.geometry]\nxyz = "Cu 0 0 0\\nO 0 0"', '"O 0 0" is not an atom'),
        ('[ion.geometry]\nxyz = "Cu 0 0 0\\nO 0 0 2"', "bonds: is missing"),
        ('[ion.geometry]\nxyz = "Cu 0 0 0\\nO 0 0 2"\n[ion.geometry.bonds.N]\ne_sigma="1 cm^-1"', 'no atom "N"'),
        ('[ion.geometry]\nxyz = "Cu 0 0 0\\nO 0 0 0"\n[ion.geometry.bonds.O]\ne_sigma="1 cm^-1"', "metal's own place"),
        ("[ion.wybourne]", "is empty"),
        ('[ion.wybourne]\nB6_0 = "1 cm^-1"', 'unknown key "B6_0"'),
        ('[ion.octahedral]\nDs = "1 cm^-1"', "ten_Dq: is missing"),
    ],
)
def test_more_mistakes(tmp_path, body, found):
    path = write(tmp_path, f'[[ion]]\nname = "Cu2+"\n{body}\n')
    with pytest.raises(InputError) as error:
        read_crystal_fields(path)
    assert found in str(error.value)
    assert str(error.value).startswith(f"{path}: ion.1")


def test_no_ion_and_twice_the_same(tmp_path):
    with pytest.raises(InputError, match="is empty|no ion"):
        read_crystal_fields(write(tmp_path, "# nothing\n"))
    with pytest.raises(InputError, match="twice"):
        read_crystal_fields(write(tmp_path, COPPER + COPPER))
    with pytest.raises(InputError, match="no such file"):
        read_crystal_fields(tmp_path / "none.toml")


def test_xyz_with_a_count():
    assert parse_xyz("2\ncomment\nCu 0 0 0\nO1 0 0 1.9")[1] == ("O1", (0.0, 0.0, 1.9))


WRITTEN = ["900 cm^-1", "-3 eV", "0 MHz", "1 mT", "", "term", "configuration", True, 0, 1.5, math.nan, [0, 0, 1]]
VALUES = st.one_of(st.sampled_from(WRITTEN), st.integers(-(10**30), 10**30), st.text(max_size=6))
INNER = ["ten_Dq", "Ds", "B", "C", "F2", "F4", "F6", "B4_0", "B2_m1", "xyz", "bonds", "z2", "O"]
KEYS = st.sampled_from([*FIELD, *BOND, *INNER])
TABLES = st.dictionaries(KEYS, VALUES)


@given(
    table=st.dictionaries(KEYS, st.one_of(VALUES, TABLES, st.lists(TABLES))),
    ion=st.sampled_from(["Cu2+", "Ni2+", "Er3+", "N", "Zn2+"]),
)
@settings(max_examples=150, derandomize=True, deadline=None)
def test_any_table_is_read_or_refused(table, ion):
    try:
        model = model_from_table(table, ion)
    except InputError:
        return
    assert np.all(np.isfinite(model.crystal.matrix()))


@given(st.text(alphabet="CuO 0.1-\n2#e", max_size=40))
@settings(max_examples=150, derandomize=True)
def test_any_atom_list_is_read_or_refused(text):
    try:
        atoms = parse_xyz(text)
    except InputError:
        return
    assert len(atoms) > 1
    assert all(math.isfinite(v) for _, at in atoms for v in at)
