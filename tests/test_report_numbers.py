"""Numbers for people: rounding of values with uncertainties.

The rule (two digits of the uncertainty when its leading digit is 1, else one; the value rounded to the
same place) is common practice, in the spirit of the rounding rule that the Review of Particle Physics
prints in its introduction and of JCGM 100 (GUM), 7.2.6: at most two significant digits.
"""

from __future__ import annotations

import re

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from spinfit.report.numbers import short, small, with_uncertainty


@pytest.mark.parametrize(
    ("value", "uncertainty", "text"),
    [
        (2.00612, 0.0002, "2.0061(2)"),
        (2.00612, 0.00012, "2.00612(12)"),
        (2.00612, 0.000194, "2.00612(19)"),
        (2.00612, 0.000196, "2.0061(2)"),  # would be (20): one digit says the same
        (2.00612, 0.00096, "2.0061(10)"),  # rounds up to 0.0010, whose leading digit is 1
        (12.34, 1.23, "12.3(1.2)"),
        (12.34, 2.3, "12(2)"),
        (0.95, 0.95, "1.0(1.0)"),
        (1234567.0, 2345.0, "1235000(2000)"),
        (9012.3, 12.0, "9012(12)"),
        (123456789.0, 1234.0, "1.234568(12)e+08"),
        (5.123e-7, 3e-9, "5.12(3)e-07"),
        (0.0, 0.002, "0.000(2)"),
        (-1e-7, 0.002, "0.000(2)"),  # no "-0.000"
        (3.0, 20.0, "0(20)"),
        (-540.3, 1.0, "-540.3(1.0)"),
        (-540.3, 0.1, "-540.30(10)"),
        (2.00612, None, "2.00612"),
        (2.00612, 0.0, "2.00612"),
        (2.00612, float("nan"), "2.00612"),
        (2.00612, float("inf"), "2.00612"),
        (float("nan"), 0.1, "-"),
        (None, None, "-"),
        (2.0, 1e-40, "2"),
    ],
)
def test_known_roundings(value, uncertainty, text):
    assert with_uncertainty(value, uncertainty) == text


@settings(derandomize=True, deadline=None)
@given(st.floats(-1e9, 1e9), st.floats(-12, 9))
def test_what_is_shown_means_what_was_given(value, power):
    uncertainty = 10.0**power
    text = with_uncertainty(value, uncertainty)
    if "(" not in text:
        assert uncertainty <= 1e-15 * abs(value)
        return
    shown, inside, exponent = re.fullmatch(r"([-\d.]+)\(([\d.]+)\)(e[+-]\d+)?", text).groups()
    factor = float("1" + (exponent or "e0"))
    decimals = len(shown.partition(".")[2])
    sigma = float(inside) * factor * (1 if "." in inside else 10.0**-decimals)
    if decimals and "." not in inside:
        assert sigma < 1 * max(factor, 1e-300)  # at 1 and above the decimal point is written
    # One digit from 2 up is at most a quarter off, two digits from 1.0 up a twentieth.
    assert sigma == pytest.approx(uncertainty, rel=0.26)
    assert abs(float(shown) * factor - value) <= 0.51 * sigma + 1e-9 * abs(value)


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (0.00012345, "0.00012"),
        (0.5, "0.50"),
        (1.23, "1.2"),
        (9.96, "10"),
        (12.5, "12"),
        (1e-9, "1.0e-09"),
        (0.0, "0"),
        (None, "-"),
        (float("nan"), "-"),
    ],
)
def test_small_numbers(value, text):
    assert small(value) == text


def test_short_has_no_negative_zero_and_no_nan():
    assert [short(v) for v in (-0.0, float("nan"), float("-inf"), None, 9.4321, 1e-300)] == [
        "0",
        "-",
        "-",
        "-",
        "9.4321",
        "1e-300",
    ]
