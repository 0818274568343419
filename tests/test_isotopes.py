"""Nuclear data against CODATA, another library, published values and the rules of nuclei."""

from __future__ import annotations

import importlib.util
import math
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import constants

from spinfit.errors import InputError
from spinfit.isotopes import isotope, mixtures, natural, table

ROOT = Path(__file__).resolve().parents[1]
ELEMENTS = sorted({one.element for one in table().values() if one.abundance})


@pytest.mark.parametrize(
    ("name", "key"), [("1H", "proton g factor"), ("2H", "deuteron g factor"), ("3H", "triton g factor")]
)
def test_g_factors_of_hydrogen_agree_with_codata(name: str, key: str) -> None:
    assert isotope(name).g_n == pytest.approx(constants.value(key), rel=2e-6)


# Spin, g_n and Q (barn) from memory (R. K. Harris et al., Pure Appl. Chem. 73, 1795 (2001); P. Pyykko, Mol. Phys.
# 116, 1328 (2018)).  Moments of atoms and of bare nuclei differ by shielding, up to 0.5 %; Q by up to 5 %.
PUBLISHED = {
    "1H": (0.5, 5.5857, 0),
    "2H": (1, 0.8574, 0.00286),
    "7Li": (1.5, 2.1710, -0.0401),
    "13C": (0.5, 1.4048, 0),
    "14N": (1, 0.40376, 0.02044),
    "15N": (0.5, -0.56638, 0),
    "17O": (2.5, -0.75752, -0.02558),
    "19F": (0.5, 5.2577, 0),
    "27Al": (2.5, 1.4566, 0.1466),
    "29Si": (0.5, -1.1106, 0),
    "31P": (0.5, 2.2632, 0),
    "33S": (1.5, 0.4291, -0.0694),
    "39K": (1.5, 0.26098, 0.0603),
    "51V": (3.5, 1.4711, -0.052),
    "53Cr": (1.5, -0.3164, -0.15),
    "55Mn": (2.5, 1.3813, 0.330),
    "57Fe": (0.5, 0.1812, 0),
    "59Co": (3.5, 1.322, 0.42),
    "61Ni": (1.5, -0.5000, 0.162),
    "63Cu": (1.5, 1.4824, -0.220),
    "65Cu": (1.5, 1.5878, -0.204),
    "67Zn": (2.5, 0.3502, 0.122),
    "95Mo": (2.5, -0.3657, -0.022),
    "107Ag": (0.5, -0.2274, 0),
    "109Ag": (0.5, -0.2614, 0),
    "127I": (2.5, 1.1253, -0.688),
    "167Er": (3.5, -0.1611, 3.57),
    "173Yb": (2.5, -0.2719, 2.80),
    "183W": (0.5, 0.2356, 0),
    "195Pt": (0.5, 1.219, 0),
}


@pytest.mark.parametrize("name", PUBLISHED)
def test_published_values(name: str) -> None:
    spin, g_n, quadrupole = PUBLISHED[name]
    one = isotope(name)
    assert one.spin == spin
    assert one.g_n == pytest.approx(g_n, rel=5e-3)
    assert one.quadrupole == pytest.approx(quadrupole, rel=5e-2, abs=1e-12)


def test_abundances_agree_with_another_library() -> None:
    """`periodictable` carries an independent compilation; nature itself varies by some 0.1 %."""
    other = pytest.importorskip("periodictable")
    for one in table().values():
        theirs = getattr(other, one.element)[int(one.name.removesuffix(one.element))].abundance
        if theirs:
            assert 100 * one.abundance == pytest.approx(theirs, abs=0.35), one.name
        elif one.abundance:
            assert one.element == "U"


def test_the_copper_isotopes() -> None:
    """63Cu 69.15(15) %, the IUPAC representative composition (from memory)."""
    found = natural("Cu")
    assert [one.name for one in found] == ["63Cu", "65Cu"]
    assert found[0].abundance == pytest.approx(0.6915, abs=0.0015)


@pytest.mark.parametrize("element", ELEMENTS)
def test_an_element_is_complete(element: str) -> None:
    """The stated abundances sum to 1 (180m-Ta is left out), the returned ones exactly."""
    assert sum(one.abundance for one in table().values() if one.element == element) == pytest.approx(1, abs=1.5e-3)
    assert sum(one.abundance for one in natural(element)) == pytest.approx(1, abs=1e-12)


def test_nuclei_obey_the_rules() -> None:
    """Even-even nuclei have I = 0; I is whole for even A, half for odd A; moments only where I allows.

    A magnetic moment needs I >= 1/2, a quadrupole moment I >= 1.  |moment| stays below 7 nuclear
    magnetons and |Q| below 7 barn for every nucleus listed.
    """
    other = pytest.importorskip("periodictable")
    for one in table().values():
        mass, charge = int(one.name.removesuffix(one.element)), getattr(other, one.element).number
        assert (2 * one.spin) % 2 == mass % 2, one.name
        if mass % 2 == 0 and charge % 2 == 0:
            assert one.spin == 0, one.name
        assert (one.g_n != 0) == (one.spin > 0), one.name
        assert (one.quadrupole != 0) == (one.spin >= 1), one.name
        assert abs(one.g_n * one.spin) < 7, one.name
        assert abs(one.quadrupole) < 7, one.name


def test_isotopes_of_one_spin_have_like_quadrupole_moments() -> None:
    """Isotopes of one element and spin differ in Q by less than a factor 3, a lost decimal place does not.

    The exceptions are known: 95Mo and 99Ru next to 97Mo and 101Ru, Eu across its change of shape,
    and 147Sm and 149Sm (Pyykko's table, from memory).
    """
    found = set()
    for one in table().values():
        for other in natural(one.element) if one.abundance else ():
            if one.spin == other.spin >= 1 and abs(one.quadrupole) > 3 * abs(other.quadrupole):
                found.add(one.element)
    assert found <= {"Mo", "Ru", "Sm"}


def test_the_table_is_what_the_script_makes() -> None:
    """With the version of the source that the table names; other versions may hold other values."""
    source = pytest.importorskip("mendeleev")
    stated = (ROOT / "spinfit" / "data" / "isotopes.csv").read_text(encoding="utf-8")
    if f"Source: mendeleev {source.__version__}," not in stated:
        pytest.skip("another version of the source than the table was made from")
    spec = importlib.util.spec_from_file_location("make_isotopes", ROOT / "scripts" / "make_isotopes.py")
    script = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(script)
    made = {row["isotope"]: row for row in script.rows()}
    assert list(made) == list(table())
    for name, row in made.items():
        one = isotope(name)
        stated = tuple(float(row[key]) for key in ("spin", "abundance", "g_n", "quadrupole"))
        assert stated == (one.spin, one.abundance, one.g_n, one.quadrupole)


@pytest.mark.parametrize(
    ("name", "right"),
    [
        ("Cu63", 'did you mean "63Cu"?'),
        ("cu-63", 'did you mean "63Cu"?'),
        ("63CU", 'did you mean "63Cu"?'),
        ("64Cu", "known of Cu: 63Cu, 65Cu"),
        ("Cu", "known of Cu: 63Cu, 65Cu"),
        ("63Cuu", 'did you mean "63Cu"?'),
        ("copper", "write mass number and symbol"),
        ("", "write mass number and symbol"),
    ],
)
def test_unknown_isotopes(name: str, right: str) -> None:
    with pytest.raises(InputError) as caught:
        isotope(name)
    assert f'"{name}" is not a known isotope; {right}' in str(caught.value)


@pytest.mark.parametrize(
    ("name", "message"),
    [
        ("cu", '"cu" is not a known element; did you mean "Cu"?'),
        ("Qq", '"Qq" is not a known element; write a symbol such as "Cu"'),
        ("Tc", "Tc has no natural isotopes; name an isotope instead of an element: 99Tc"),
    ],
)
def test_unknown_elements(name: str, message: str) -> None:
    with pytest.raises(InputError) as caught:
        natural(name)
    assert str(caught.value) == message


@settings(derandomize=True, max_examples=30, deadline=None)
@given(st.lists(st.floats(0.01, 1), min_size=1, max_size=4), st.integers(1, 9))
def test_mixtures_are_multinomial(raw: list[float], count: int) -> None:
    shares = [value / sum(raw) for value in raw]
    ways = mixtures(shares, count)
    assert len(ways) == math.comb(count + len(shares) - 1, count) == len({numbers for _, numbers in ways})
    assert sum(probability for probability, _ in ways) == pytest.approx(1, abs=1e-12)
    for probability, numbers in ways:
        assert sum(numbers) == count
        arrangements = math.factorial(count) / math.prod(math.factorial(k) for k in numbers)
        expected = arrangements * math.prod(share**k for share, k in zip(shares, numbers, strict=True))
        assert probability == pytest.approx(expected, rel=1e-12)
