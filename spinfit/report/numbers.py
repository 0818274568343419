"""Numbers for people: values with their uncertainty in parentheses, "2.0061(2)".

The parenthesis holds one standard uncertainty in units of the last digits shown.  An uncertainty
whose leading digit is 1 keeps two digits, any other keeps one: rounding then changes it by at most a
fifth or so, and never hides a digit of the value that is known.
"""

from __future__ import annotations

import math
from decimal import ROUND_HALF_EVEN, Decimal


def _digits_kept(uncertainty: Decimal) -> Decimal:
    """Return the place (a power of ten) of the last digit that an uncertainty keeps.

    0.0196 would round to 0.020 and is shown with one digit, 0.02; 0.0096 becomes 0.010 and shows both.
    """
    place = Decimal(1).scaleb(uncertainty.adjusted())
    if uncertainty.as_tuple().digits[0] != 1:
        return place
    finer = place.scaleb(-1)
    return finer if uncertainty.quantize(finer, ROUND_HALF_EVEN) < 2 * place else place


def _plain(value: Decimal) -> str:
    """Write a decimal without an exponent and without a minus before zero."""
    text = f"{value:f}"
    return text[1:] if value == 0 and text.startswith("-") else text


def short(value: float | None, digits: int = 7) -> str:
    """Write a number without an uncertainty: at most `digits` digits, "-" for what is missing."""
    if value is None or not math.isfinite(value):
        return "-"
    text = f"{value:.{digits}g}"
    if "e+" in text and abs(value) < 1e7:
        text = f"{float(text):.0f}"
    return "0" if float(text) == 0 else text


def small(value: float | None) -> str:
    """Write an uncertainty or another small number with two digits, "-" for what is missing."""
    if value is None or not math.isfinite(value):
        return "-"
    if value == 0:
        return "0"
    text = f"{value:.1e}"
    exponent = int(text[text.index("e") + 1 :])
    if -6 < exponent < 0:
        return f"{value:.{1 - exponent}f}"
    return f"{float(text):.0f}" if 1 <= exponent < 6 else f"{float(text):.1f}" if exponent == 0 else text


def with_uncertainty(value: float | None, uncertainty: float | None = None) -> str:
    """Write a value with its standard uncertainty in parentheses.

    Parameters
    ----------
    value : float or None
    uncertainty : float or None
        Standard uncertainty in the unit of the value.  None, zero and what is not finite leave the
        value alone.

    Returns
    -------
    str
        ``"2.0061(2)"``, ``"12.3(1.2)"`` (a decimal point in the parenthesis where the uncertainty
        passes it), ``"1235000(2000)"``, ``"5.12(3)e-07"``; ``"-"`` for a value that is missing.
    """
    if value is None or not math.isfinite(value):
        return "-"
    if uncertainty is None or not math.isfinite(uncertainty) or uncertainty <= 1e-15 * abs(value):
        return short(value)  # below a double's own rounding there is nothing to show
    amount, sigma = Decimal(repr(float(value))), Decimal(repr(float(uncertainty)))
    place = _digits_kept(sigma)
    size = max(amount.copy_abs(), sigma)
    exponent = size.adjusted()
    if exponent < -4 or exponent > 6:
        scale = Decimal(1).scaleb(exponent)
        return f"{_parenthesised(amount / scale, sigma / scale, place / scale)}e{exponent:+03d}"
    return _parenthesised(amount, sigma, place)


def _parenthesised(value: Decimal, sigma: Decimal, place: Decimal) -> str:
    """Write value(sigma), both rounded to `place`."""
    value, sigma = _rounded(value, place), _rounded(sigma, place)
    if place.adjusted() >= 0 or sigma >= 1:
        return f"{_plain(value)}({_plain(sigma)})"
    return f"{_plain(value)}({sigma.scaleb(-place.adjusted()).to_integral_value()})"


def _rounded(value: Decimal, place: Decimal) -> Decimal:
    """Round to a power of ten; places left of the point give whole numbers."""
    exact = Decimal(1).scaleb(place.adjusted())
    rounded = value.quantize(exact, ROUND_HALF_EVEN)
    return rounded.quantize(Decimal(1)) if place.adjusted() > 0 else rounded
