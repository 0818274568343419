"""Quantities in and out of text, and the physical constants everything else uses.

Internal units: E/h in MHz, fields in mT, angles in rad, temperatures in K, times in s, voltages in V, powers in mW,
slopes of a field calibration in mT/V.  All constants are CODATA's as `scipy.constants` has them.
"""

from __future__ import annotations

import math
import re

from scipy import constants

from spinfit.errors import InputError, nearest

MU_B_OVER_H: float = constants.value("Bohr magneton in Hz/T") * 1e-9
"""Bohr magneton over Planck's constant, MHz/mT."""
MU_N_OVER_H: float = constants.value("nuclear magneton in MHz/T") * 1e-3
"""Nuclear magneton over Planck's constant, MHz/mT."""
K_B_OVER_H: float = constants.k / constants.h * 1e-6
"""Boltzmann's constant over Planck's constant, MHz/K."""
MHZ_PER_WAVENUMBER: float = constants.c * 1e-4
"""Speed of light as MHz per cm^-1."""
MHZ_PER_MEV: float = constants.e / constants.h * 1e-9
"""MHz per meV."""
G_ELECTRON: float = -constants.value("electron g factor")
"""g of the free electron, positive: 2.00232."""

_FREQUENCY = {"Hz": 1e-6, "kHz": 1e-3, "MHz": 1.0, "GHz": 1e3}

UNITS: dict[str, dict[str, float]] = {
    "field": {"mT": 1.0, "T": 1e3, "G": 0.1},
    "energy": _FREQUENCY | {"cm^-1": MHZ_PER_WAVENUMBER, "K": K_B_OVER_H, "meV": MHZ_PER_MEV, "eV": MHZ_PER_MEV * 1e3},
    "frequency": dict(_FREQUENCY),
    "angle": {"deg": math.pi / 180, "rad": 1.0},
    "temperature": {"K": 1.0},
    "time": {"s": 1.0, "ms": 1e-3},
    "voltage": {"V": 1.0, "mV": 1e-3},
    "power": {"W": 1e3, "mW": 1.0, "uW": 1e-3},
    "field per voltage": {"mT/V": 1.0, "T/V": 1e3, "G/V": 0.1, "mT/mV": 1e3, "T/mV": 1e6, "G/mV": 100.0},
}
"""Units of each kind, with the factor that carries a value into internal units."""

# Spellings that can mean nothing else.  They are kept as the user wrote them.
_SPELLINGS = {"cm-1": "cm^-1", "1/cm": "cm^-1", "cm⁻¹": "cm^-1", "cm^−1": "cm^-1", "°": "deg"}

_EXAMPLES = {
    "field": "340.5 mT",
    "energy": "0.30 cm^-1",
    "frequency": "9.4321 GHz",
    "angle": "30 deg",
    "temperature": "77 K",
    "time": "0.5 s",
    "voltage": "1.2 V",
    "power": "2 mW",
    "field per voltage": "216 mT/V",
}

_MINUS = str.maketrans({"\u2212": "-", "\u2013": "-"})
_NUMBER = r"[+-]?(?:(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?|(?i:nan|inf(?:inity)?)\b)"
_QUANTITY = re.compile(rf"({_NUMBER}(?:\s*,\s*{_NUMBER})*)\s*(.*)", re.ASCII | re.DOTALL)


def _factor(unit: str, kind: str, key: str | None) -> float:
    """Return the factor of a unit, or say which units the kind has."""
    table = UNITS[kind]
    canonical = _SPELLINGS.get(unit, unit)
    if canonical in table:
        return table[canonical]
    accepted = "write one of " + ", ".join(table)
    other = next((k for k, units in UNITS.items() if canonical in units), None)
    if other is not None:
        raise InputError(f'"{unit}" is a unit of {other}, wanted is a {kind}', accepted, place=key)
    by_case = [known for known in table if known.lower() == canonical.lower()]
    hint = f'did you mean "{by_case[0]}"?' if by_case else nearest(unit, table)
    # `nearest` lists every unit when none is close; then the list need not stand twice.
    right = f"{hint} ({accepted})" if hint.startswith("did") else accepted
    raise InputError(f'"{_short(unit)}" is not a unit of {kind}', right, place=key)


def _short(text: object, limit: int = 40) -> str:
    """Quote what a user wrote without filling the screen."""
    line = " ".join(str(text).split())
    return line if len(line) <= limit else line[: limit - 3] + "..."


def _times(value: float, factor: float) -> float:
    """Multiply; a factor such as 0.1 divides by 10 instead, so that 3400 G is 340 mT to the last digit."""
    inverse = 1.0 / factor
    return value / inverse if inverse.is_integer() else value * factor


def from_unit(value: float, unit: str, kind: str) -> float:
    """Carry a value (or an array) in `unit` into the internal unit of `kind`.

    Raises
    ------
    InputError
        When the unit is not one of the kind.
    """
    return _times(value, _factor(unit, kind, None))


def to_unit(value: float, unit: str, kind: str) -> float:
    """Carry a value (or an array) in the internal unit of `kind` into `unit`.

    Raises
    ------
    InputError
        When the unit is not one of the kind.
    """
    factor = _factor(unit, kind, None)
    inverse = 1.0 / factor
    return value * inverse if inverse.is_integer() else value / factor


def kind_of(unit: str) -> str:
    """Return the kind of a unit; frequencies and K, which have two, are of kind "energy".

    Raises
    ------
    InputError
        When the unit is not known at all.
    """
    canonical = _SPELLINGS.get(unit, unit)
    for kind, table in UNITS.items():
        if canonical in table:
            return kind
    known = {unit for table in UNITS.values() for unit in table}
    raise InputError(f'"{_short(unit)}" is not a unit', nearest(unit, known))


def _counts(count: int | tuple[int, ...]) -> str:
    """Say how many numbers are wanted: "1 number", "1, 2 or 3 numbers"."""
    wanted = (count,) if isinstance(count, int) else count
    words = [str(n) for n in wanted]
    text = words[0] if len(words) == 1 else ", ".join(words[:-1]) + " or " + words[-1]
    return text + (" number" if wanted == (1,) else " numbers")


def _example(kind: str, count: int | tuple[int, ...] | None, numbers: str | None = None) -> str:
    """Show what to write, with the user's own numbers when there are some."""
    value, unit = _EXAMPLES[kind].split(" ")
    if numbers is None:
        n = 1 if count is None else count if isinstance(count, int) else count[0]
        numbers = ", ".join([value] * n)
    return f'write a text with a unit, such as "{numbers} {unit}"'


def parse(
    text: object, kind: str, key: str, *, count: int | tuple[int, ...] | None = 1
) -> tuple[tuple[float, ...], str]:
    """Read a quantity: one or several numbers, separated by commas, and one unit.

    Parameters
    ----------
    text : object
        What stood in the file: ``"9.5 GHz"``, ``"-35, -60, -540 MHz"``.
    kind : str
        A key of `UNITS`.
    key : str
        What to call the place in an error.
    count : int, tuple of int, or None
        How many numbers are right; None for any.

    Returns
    -------
    values : tuple of float
        In the internal unit of the kind.
    unit : str
        As written.

    Raises
    ------
    InputError
        For anything else, saying what to write.
    """
    if isinstance(text, bool) or not isinstance(text, str):
        is_number = isinstance(text, (int, float)) and not isinstance(text, bool)
        found = f"{_short(text)} has no unit" if is_number else f"{_short(text)} is not a text with a unit"
        own = _short(text) if is_number and math.isfinite(text) and count in (1, None) else None
        raise InputError(found, _example(kind, count, own), place=key)
    match = _QUANTITY.fullmatch(text.translate(_MINUS).strip())
    if match is None:
        raise InputError(f'"{_short(text)}" is not a number with a unit', _example(kind, count), place=key)
    written, unit = match[1], match[2].strip()
    if not unit:
        raise InputError(f'"{_short(text)}" has no unit', _example(kind, count, written), place=key)
    if unit not in _SPELLINGS and (re.match(r"[\d.,;+-]", unit) or re.search(r",\s*[\d.+-]", unit)):
        raise InputError(
            f'"{_short(text)}" is not understood',
            "separate numbers by commas, use a decimal point, and write the unit once, at the end",
            place=key,
        )
    factor = _factor(unit, kind, key)
    values = tuple(_times(float(word), factor) for word in written.split(","))
    if not all(math.isfinite(value) for value in values):
        raise InputError(f'"{_short(text)}" is not finite', "write finite numbers", place=key)
    if count is not None and len(values) not in ((count,) if isinstance(count, int) else count):
        comma = " (a decimal comma? write a point)" if count == 1 and len(values) == 2 else ""
        found = f'"{_short(text)}" has {_counts(len(values))}, wanted {_counts(count)}'
        raise InputError(found, f"{_example(kind, count)}{comma}", place=key)
    return values, unit


def frequency_of(g: float, field: float) -> float:
    """Return the frequency in MHz at which g is in resonance at a field in mT: nu = g muB B / h."""
    return g * MU_B_OVER_H * field


def field_of(g: float, frequency: float) -> float:
    """Return the field in mT at which g is in resonance at a frequency in MHz."""
    return frequency / (g * MU_B_OVER_H)


def g_of(field: float, frequency: float) -> float:
    """Return the g value that is in resonance at a field in mT and a frequency in MHz."""
    return frequency / (MU_B_OVER_H * field)
