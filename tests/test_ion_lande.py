"""Free ions: names, Hund's ground levels, Landé's g and moments."""

import json
import math
import subprocess
import sys
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from sympy import Rational, S
from sympy.physics.quantum.cg import CG

import spinfit
from spinfit.errors import InputError
from spinfit.ion import lande_g, lookup, ls_terms, parse_name
from spinfit.ion.names import Shell
from spinfit.ion.terms import lande_intervals, level_js
from spinfit.units import G_ELECTRON

# C. Kittel, Introduction to Solid State Physics, effective magneton numbers of trivalent lanthanides;
# A. Abragam, B. Bleaney (1970).  g_J with g_S = 2; the printed moments miss the formula by up to 0.02.
LANTHANIDES = [
    ("Ce3+", "2F5/2", "6/7", 2.54),
    ("Pr3+", "3H4", "4/5", 3.58),
    ("Nd3+", "4I9/2", "8/11", 3.62),
    ("Pm3+", "5I4", "3/5", 2.68),
    ("Sm3+", "6H5/2", "2/7", 0.84),
    ("Gd3+", "8S7/2", "2", 7.94),
    ("Tb3+", "7F6", "3/2", 9.72),
    ("Dy3+", "6H15/2", "4/3", 10.63),
    ("Ho3+", "5I8", "5/4", 10.60),
    ("Er3+", "4I15/2", "6/5", 9.59),
    ("Tm3+", "3H6", "7/6", 7.57),
    ("Yb3+", "2F7/2", "8/7", 4.54),
]
# Kittel, the same for the iron group: p from J, p from the spin alone.
IRON_GROUP = [
    ("Ti3+", "2D3/2", 1.55, 1.73),
    ("V4+", "2D3/2", 1.55, 1.73),
    ("V3+", "3F2", 1.63, 2.83),
    ("Cr3+", "4F3/2", 0.77, 3.87),
    ("V2+", "4F3/2", 0.77, 3.87),
    ("Mn3+", "5D0", 0.0, 4.90),
    ("Cr2+", "5D0", 0.0, 4.90),
    ("Fe3+", "6S5/2", 5.92, 5.92),
    ("Mn2+", "6S5/2", 5.92, 5.92),
    ("Fe2+", "5D4", 6.70, 4.90),
    ("Co2+", "4F9/2", 6.63, 3.87),
    ("Ni2+", "3F4", 5.59, 2.83),
    ("Cu2+", "2D5/2", 3.55, 1.73),
]


@pytest.mark.parametrize(("ion", "term", "g", "p"), LANTHANIDES)
def test_lanthanide_table(ion, term, g, p):
    level = lookup(ion, g_spin=2)
    assert level.term == term
    assert level.g_J == pytest.approx(float(Rational(g)), rel=1e-14)
    assert level.moment == pytest.approx(p, abs=0.021)


@pytest.mark.parametrize(("ion", "term", "p", "spin_only"), IRON_GROUP)
def test_iron_group_table(ion, term, p, spin_only):
    level = lookup(ion, g_spin=2)
    assert level.term == term
    assert level.moment == pytest.approx(p, abs=0.01)
    assert level.spin_only_moment == pytest.approx(spin_only, abs=0.01)


@pytest.mark.parametrize(
    ("atom", "term"),
    # Ground levels of neutral atoms and single ions: C. E. Moore, Atomic Energy Levels (NBS Circular 467).
    [
        ("H", "2S1/2"),
        ("C", "3P0"),
        ("N", "4S3/2"),
        ("O", "3P2"),
        ("F", "2P3/2"),
        ("Cr", "7S3"),
        ("Fe", "5D4"),
        ("Ni", "3F4"),
        ("Nb", "6D1/2"),
        ("Ru", "5F5"),
        ("Pt", "3D3"),
        ("Gd", "9D2"),
        ("U", "5L6"),
        ("Tl", "2P1/2"),
        ("Ni+", "2D5/2"),
        ("Ce", "1G4"),
        ("Fe+", "6D9/2"),
    ],
)
def test_free_atoms(atom, term):
    assert lookup(atom).term == term


@pytest.mark.parametrize("name", ["Er3+", "Er(III)", "Er+3", "Er^3+", "Er³⁺", "er3+", "Er+++", "Er (3+)"])
def test_spellings_of_an_ion(name):
    record = lookup(name).as_record()
    assert record["ion"] == "Er3+"
    assert list(record) == ["ion", "configuration", "term", "S", "L", "J", "g_J", "moment"]
    assert json.loads(json.dumps(record)) == record
    assert (record["configuration"], record["S"], record["L"], record["J"]) == ("4f11", "3/2", "6", "15/2")
    # g_J(Er3+) with CODATA's g_S is 1.20046 (closed form)
    assert record["g_J"] == pytest.approx(1 + (G_ELECTRON - 1) / 5, rel=1e-14)


def test_every_element_in_every_charge():
    """Each of 118 elements, each charge down to one electron: as many electrons as there should be."""
    with open(Path(spinfit.__file__).parent / "data" / "elements.csv", encoding="utf-8") as stream:
        rows = [line.split(",") for line in stream if not line.startswith("#")][1:]
    neutral = {row[1]: int(row[0]) for row in rows if row[2] == "0"}
    assert sorted(neutral.values()) == list(range(1, 119))
    assert len(neutral) == 118
    for symbol, z in neutral.items():
        for charge in range(min(z, 8)):
            named = parse_name(f"{symbol}{charge or ''}{'+' if charge else ''}")
            assert named.charge == charge
            assert all(0 < shell.count <= shell.capacity for shell in named.shells)
            lookup(named.name)


def test_configurations_and_terms_alone():
    assert lookup("3d7").term == lookup("4F9/2").term == "4F9/2"
    assert lookup("4F9/2").configuration is None
    assert lookup("2p3 3s1").term == "5S2"
    assert lookup("[Ar] 3d6 4s2").configuration == "3d6 4s2"


def test_j_zero_says_why_nothing_is_lost():
    level = lookup("Eu3+")
    assert level.g_J is None
    assert level.moment == 0
    assert "no first-order shift" in level.note
    assert "second order" in level.note
    assert json.dumps(level.as_record())


@given(
    two_s=st.integers(0, 7),
    L=st.integers(0, 8),
    which=st.integers(0, 14),
    g_l=st.sampled_from([1.0, 0.0, -0.3]),
    g_s=st.sampled_from([2.0, None, 5.5857]),
)
@settings(max_examples=25, derandomize=True, deadline=None)
def test_lande_against_clebsch_gordan_sums(two_s, L, which, g_l, g_s):
    """g_J M = sum over M_L, M_S of <L M_L S M_S|J M>^2 (g_L M_L + g_S M_S), at M = J (sympy)."""
    s = S(two_s) / 2
    js = level_js(two_s / 2, L)
    J = Rational(int(2 * js[which % len(js)]), 2)
    value = lande_g(two_s / 2, L, float(J), g_spin=g_s, g_orbital=g_l)
    if J == 0:
        assert value is None
        return
    gs = G_ELECTRON if g_s is None else g_s
    total = 0.0
    for k in range(two_s + 1):
        ms = s - k
        weight = CG(L, J - ms, s, ms, J, J).doit() ** 2 if abs(J - ms) <= L else 0
        total += float(weight) * (g_l * float(J - ms) + gs * float(ms))
    assert value == pytest.approx(total / float(J), abs=1e-12)


def test_intervals_follow_the_interval_rule():
    energies = lande_intervals(1.5, 3, -177.0)  # Co2+ 4F
    for J in (2.5, 3.5, 4.5):
        assert energies[J] - energies[J - 1] == pytest.approx(-177.0 * J)
    assert sum((2 * J + 1) * e for J, e in energies.items()) == pytest.approx(0, abs=1e-9)


@pytest.mark.parametrize(
    ("shell", "number"),
    # Numbers of terms: E. U. Condon, G. H. Shortley, The Theory of Atomic Spectra (1935), table 1 of chapter VII
    # (d shells); B. G. Wybourne, Spectroscopic Properties of Rare Earths (1965) (f shells).
    [("3d2", 5), ("3d3", 8), ("3d4", 16), ("3d5", 16), ("4f2", 7), ("4f3", 17), ("4f4", 47), ("4f7", 119)],
)
def test_numbers_of_terms(shell, number):
    terms = ls_terms(parse_name(shell).shells)
    assert sum(terms.values()) == number


@given(orbital=st.integers(0, 3), count=st.integers(0, 14), l2=st.integers(0, 2), count2=st.integers(0, 10))
@settings(max_examples=30, derandomize=True, deadline=None)
def test_terms_hold_every_state(orbital, count, l2, count2):
    shells = (Shell(4, orbital, min(count, 4 * orbital + 2)), Shell(5, l2, min(count2, 4 * l2 + 2)))
    states = sum(n * (2 * S_ + 1) * (2 * L + 1) for (S_, L), n in ls_terms(shells).items())
    assert states == math.prod(math.comb(s.capacity, s.count) for s in shells)


@pytest.mark.parametrize(
    ("name", "found", "right"),
    [
        ("Xx3+", 'no element "Xx"', 'did you mean "Xe"'),
        ("Fe27+", "more charge than electrons", "below 26"),
        ("F3-", "does not hold 3 more electrons", "configuration"),
        ("3d11", "11 electrons", "a d shell holds 0 to 10"),
        ("2d3", "no 2d shell", "n = 3"),
        ("4F4", "J = 4 does not occur in 4F", "3/2, 5/2, 7/2, 9/2"),
        ("4F", "no J", "9/2"),
        ("3d7 3d2", "twice", "once"),
        ("", "is not the name of an ion", '"Er3+"'),
        ("Er(abc)", "charge", "Er(III)"),
    ],
)
def test_bad_names_are_refused_in_one_line(name, found, right):
    with pytest.raises(InputError) as error:
        lookup(name)
    text = str(error.value)
    assert found in text
    assert right in text
    assert "\n" not in text


@given(st.text(max_size=12))
@settings(max_examples=200, derandomize=True)
def test_any_text_is_read_or_refused(text):
    try:
        level = lookup(text)
    except InputError:
        return
    json.dumps(level.as_record(), allow_nan=False)


def test_g_must_be_finite():
    with pytest.raises(InputError, match="g_spin"):
        lookup("Er3+", g_spin=math.nan)


def test_a_look_up_stays_light():
    """`spinfit ion` has to answer at once: no optimiser, no sparse matrices, no pictures come with the look-up."""
    code = "import sys; from spinfit.ion import lookup; lookup('Er3+'); print(*sys.modules)"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    loaded = set(done.stdout.split())
    heavy = {"scipy.optimize", "scipy.sparse", "scipy.spatial", "scipy.linalg", "pandas", "matplotlib", "lmfit"}
    assert not heavy & loaded
