"""Quantities: conversions against scipy.constants, round trips, and what is refused and how."""

from __future__ import annotations

import math

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import constants

from spinfit import units
from spinfit.errors import InputError

PAIRS = [(kind, unit) for kind, table in units.UNITS.items() for unit in table]


@pytest.mark.parametrize(
    ("text", "kind", "expected"),
    [
        ("9.5 GHz", "frequency", (9500.0,)),
        ("1 cm^-1", "energy", (29979.2458,)),  # the metre's definition: c = 299 792 458 m/s
        ("1 K", "energy", (constants.k / constants.h / 1e6,)),
        ("1 meV", "energy", (1e-3 * constants.e / constants.h / 1e6,)),
        ("2 eV", "energy", (2 * constants.e / constants.h / 1e6,)),
        ("1 K", "temperature", (1.0,)),
        ("3400 G", "field", (340.0,)),
        ("0.34 T", "field", (340.0,)),
        ("180 deg", "angle", (math.pi,)),
        ("216 mT/V", "field per voltage", (216.0,)),
        ("1500 G/V", "field per voltage", (150.0,)),
        ("2 ms", "time", (2e-3,)),
        ("5 mV", "voltage", (5e-3,)),
        ("1e3kHz", "frequency", (1.0,)),
        ("5eV", "energy", (5 * constants.e / constants.h / 1e6,)),
        ("−35 MHz", "energy", (-35.0,)),
    ],
)
def test_known_conversions(text, kind, expected):
    values, _ = units.parse(text, kind, "key")
    assert values == pytest.approx(expected, rel=1e-12)


def test_energy_units_agree_with_the_codata_conversion_table():
    # scipy.constants carries CODATA's energy equivalents as numbers of their own.
    for unit, name in (("cm^-1", "inverse meter-hertz relationship"), ("K", "kelvin-hertz relationship")):
        scale = 100 if unit == "cm^-1" else 1
        assert units.from_unit(1.0, unit, "energy") == pytest.approx(constants.value(name) * scale * 1e-6, rel=1e-9)
    assert units.from_unit(1.0, "eV", "energy") == pytest.approx(
        constants.value("electron volt-hertz relationship") * 1e-6, rel=1e-9
    )


def test_several_numbers_and_one_unit():
    assert units.parse("-35, -60, -540 MHz", "energy", "A", count=(1, 2, 3)) == ((-35.0, -60.0, -540.0), "MHz")
    assert units.parse("260,360 mT", "field", "field", count=2) == ((260.0, 360.0), "mT")
    assert units.parse("1, 2, 3, 4, 5 mT", "field", "field", count=None)[0] == (1.0, 2.0, 3.0, 4.0, 5.0)


def test_unit_is_given_back_as_written_and_understood_again():
    for text in ("0.3 cm^-1", "0.3 cm-1", "0.3 1/cm", "0.3 cm⁻¹"):
        (value,), unit = units.parse(text, "energy", "D")
        assert text.endswith(unit)
        assert units.to_unit(value, unit, "energy") == pytest.approx(0.3, rel=1e-14)


@settings(derandomize=True, deadline=None)
@given(st.sampled_from(PAIRS), st.floats(-1e12, 1e12, allow_subnormal=False))
def test_round_trip_through_text(pair, value):
    kind, unit = pair
    (internal,), written = units.parse(f"{value!r} {unit}", kind, "key")
    assert written == unit
    assert internal == units.from_unit(value, unit, kind)
    assert units.to_unit(internal, unit, kind) == pytest.approx(value, rel=1e-12, abs=1e-300)


@pytest.mark.parametrize(
    ("text", "kind", "count", "says"),
    [
        (9.5, "frequency", 1, '9.5 has no unit; write a text with a unit, such as "9.5 GHz"'),
        (340, "field", 1, '340 has no unit; write a text with a unit, such as "340 mT"'),
        ("9.5", "frequency", 1, '"9.5" has no unit; write a text with a unit, such as "9.5 GHz"'),
        ("260, 360", "field", 2, '"260, 360" has no unit; write a text with a unit, such as "260, 360 mT"'),
        ("9.5 ghz", "frequency", 1, 'did you mean "GHz"?'),
        ("9.5 cm^-1", "frequency", 1, "is a unit of energy, wanted is a frequency; write one of Hz, kHz, MHz, GHz"),
        ("5 furlong", "field", 1, '"furlong" is not a unit of field; write one of mT, T, G'),
        ("nan mT", "field", 1, "not finite"),
        ("-Infinity mT", "field", 1, "not finite"),
        ("1e999 mT", "field", 1, "not finite"),
        ("1e308 T", "field", 1, "not finite"),
        (float("nan"), "field", 1, "has no unit"),
        ("1, 2 mT", "field", 3, "has 2 numbers, wanted 3 numbers"),
        ("1, 2, 3, 4 MHz", "energy", (1, 2, 3), "has 4 numbers, wanted 1, 2 or 3 numbers"),
        ("9,5 GHz", "frequency", 1, "decimal comma"),
        ("1 2 mT", "field", 2, "separate numbers by commas"),
        ("1 mT, 2 mT", "field", 2, "the unit once, at the end"),
        ("1.2.3 mT", "field", 1, "decimal point"),
        ("mT", "field", 1, "is not a number with a unit"),
        ("", "field", 1, "is not a number with a unit"),
        (None, "field", 1, "is not a text with a unit"),
        (True, "field", 1, "is not a text with a unit"),
        ([1, 2], "field", 2, "is not a text with a unit"),
    ],
)
def test_refused_in_one_line_that_says_what_is_right(text, kind, count, says):
    with pytest.raises(InputError) as caught:
        units.parse(text, kind, "sweep.key", count=count)
    message = str(caught.value)
    assert says in message
    assert message.startswith("sweep.key: ")
    assert "\n" not in message


@settings(derandomize=True, deadline=None)
@given(st.one_of(st.text(), st.integers(), st.floats(), st.none(), st.binary()), st.sampled_from(sorted(units.UNITS)))
def test_any_text_is_read_or_refused(text, kind):
    try:
        values, unit = units.parse(text, kind, "key", count=None)
    except InputError as caught:
        message = str(caught)
    else:
        message = ""
        assert all(math.isfinite(value) for value in values)
        assert units.from_unit(1.0, unit, kind) > 0
    assert len(message.splitlines()) <= 1


def test_kinds():
    assert units.kind_of("G") == "field"
    assert units.kind_of("MHz") == "energy"
    assert units.kind_of("mT/V") == "field per voltage"
    with pytest.raises(InputError, match="not a unit"):
        units.kind_of("parsec")
    with pytest.raises(InputError, match="unit of field"):
        units.from_unit(1.0, "mT", "energy")


def test_resonance_condition_of_the_free_electron():
    # h nu = g muB B with muB and h as SI values, at 9.5 GHz.
    expected = constants.h * 9.5e9 / (units.G_ELECTRON * constants.value("Bohr magneton")) * 1e3
    assert units.field_of(units.G_ELECTRON, 9500.0) == pytest.approx(expected, rel=1e-9)
    assert pytest.approx(2.00231930436, abs=1e-10) == units.G_ELECTRON  # CODATA, from memory
    assert pytest.approx(13.99624, abs=1e-5) == units.MU_B_OVER_H  # MHz/mT, CODATA, from memory
    assert pytest.approx(7.6225932e-3, rel=1e-7) == units.MU_N_OVER_H  # MHz/mT, CODATA, from memory
    assert units.g_of(expected, 9500.0) == pytest.approx(units.G_ELECTRON, rel=1e-9)
    assert units.frequency_of(units.G_ELECTRON, expected) == pytest.approx(9500.0, rel=1e-9)
