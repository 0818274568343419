"""Measuring conditions as people write them in headers: ``# frequency 9.40005 GHz``, ``Temp. [K] = 77``."""

from __future__ import annotations

import math
import re
from typing import Any

from spinfit import units
from spinfit.files.raw import Note

# Regular expressions of what a condition may be called, after lower case and with _ and - as blanks.
_NAMES = {
    "frequency": r"freq(?:uency|\.)?|mwfreq",
    "temperature": r"temp(?:erature|\.)?",
    "modulation": r"mod(?:ulation|\.)?(?:\s*(?:amplitude|amp\.?|width|depth))?",
    "angle": r"angle",
}
# The word before a name that still leaves it the same quantity; any other makes it something else or prose.
_BEFORE = {
    "frequency": {"microwave", "mw", "spectrometer", "bridge", "klystron", "source", "cavity", "resonance"},
    "temperature": {"sample", "measuring"},
    "modulation": {"field"},
    "angle": {"sample", "crystal", "magnet", "rotation", "goniometer"},
}
_KINDS = {"frequency": "frequency", "temperature": "temperature", "modulation": "field", "angle": "angle"}
_NUMBER = r"[+-]?(?:\d+(?:[.,]\d*)?|[.,]\d+)(?:[eE][+-]?\d+)?"
_UNIT = r"[A-Za-z°\u2103][A-Za-z]*"
_BRACKET = rf"(?:[\[(/]\s*(?P<before>{_UNIT})\s*[\])]?)?"
# One of the names, at most a unit and a few filling words, then a number and perhaps a unit.
_VALUE = {
    key: re.compile(
        rf"(?<![A-Za-z0-9.])(?P<prefix>[A-Za-z]+\s+)?(?:{name})\s*{_BRACKET}\s*"
        rf"[:=,]?\s*(?:is\s+)?"
        rf"(?P<number>{_NUMBER})(?![\d.])\s*(?:\(\d+\)\s*)?(?P<after>{_UNIT})?",
        re.IGNORECASE,
    )
    for key, name in _NAMES.items()
}
_MODE = re.compile(r"microwave(?:\s+(?:field|mode|direction))?\s*[:=]?\s*(perpendicular|parallel)", re.IGNORECASE)
_DETECT = re.compile(
    r"detect(?:ion|ed|or)?(?:\s+(?:mode|of))?\s*[:=]?\s*(second derivative|first derivative|derivative|absorption)",
    re.IGNORECASE,
)
_SPELLED = {
    "millitesla": "mT", "mtesla": "mT", "tesla": "T", "gauss": "G", "gs": "G", "kelvin": "K", "degree": "deg",
    "degrees": "deg", "°": "deg", "volt": "V", "volts": "V", "second": "s", "seconds": "s", "sec": "s",
    "hertz": "Hz", "megahertz": "MHz", "gigahertz": "GHz", "radian": "rad", "radians": "rad", "millivolt": "mV",
}  # fmt: skip
_PLAUSIBLE = {"frequency": (1.0, 1e7), "temperature": (1e-4, 5e3), "modulation": (0.0, 1e3), "angle": (-1e3, 1e3)}


def tidy_unit(text: str) -> str:
    """Return a unit as `spinfit.units` spells it when it is clear which one is meant, otherwise as written.

    Only spellings that differ in capitals are forgiven where the capitals cannot matter: "gauss", "mt", "ghz".
    """
    text = text.strip()
    known = {unit for table in units.UNITS.values() for unit in table}
    if text in known:
        return text
    lower = text.lower()
    if lower in _SPELLED:
        return _SPELLED[lower]
    same = [unit for unit in known if unit.lower() == lower]
    return same[0] if len(same) == 1 else text


def _unitless(key: str, value: float) -> tuple[float, str] | None:
    """Guess what a bare number means where its size leaves no doubt; the note says what was taken."""
    if key == "temperature":
        return value, "K"
    if key == "frequency":
        for low, high, unit in ((0.5, 1e3, "GHz"), (1e3, 1e6, "MHz"), (1e8, 1e13, "Hz")):
            if low <= value < high:
                return units.from_unit(value, unit, "frequency"), unit
    return None


def put(header: dict[str, Any], notes: list[Note], key: str, number: str, unit: str | None) -> None:
    """Enter one condition into `header` in internal units; say in `notes` what was guessed or left out.

    Parameters
    ----------
    key : str
        "frequency", "temperature", "modulation" or "angle".
    number : str
        With a decimal point or comma.
    unit : str or None
        As written.
    """
    value = float(number.replace(",", "."))
    written = f"{number} {unit or ''}".strip()
    tidy = tidy_unit(unit) if unit else ""
    if tidy in units.UNITS[_KINDS[key]]:
        value = units.from_unit(value, tidy, _KINDS[key])
    elif key == "temperature" and tidy in ("C", "degC", "°C", "\u2103"):
        value += 273.15
    else:
        guess = _unitless(key, value)
        if guess is None:
            notes.append(("header_unit", f"{key} {written} in the header has no known unit and is not used"))
            return
        value, taken = guess
        notes.append(("header_unit", f"{key} {written} in the header has no known unit; taken as {taken}"))
    low, high = _PLAUSIBLE[key]
    if not (math.isfinite(value) and low <= value <= high):
        notes.append(("header_value", f"{key} {written} in the header is not plausible and is not used"))
    elif key not in header:
        header[key] = value
    elif not math.isclose(header[key], value, rel_tol=1e-9):
        notes.append(("header_repeated", f"{key} stands twice in the header; the first is used, not {written}"))


def understand(line: str, header: dict[str, Any], notes: list[Note]) -> bool:
    """Take every condition that a header line tells into `header`; return whether there was one.

    A modulation frequency is not the microwave frequency, and a word before the name that is not known to belong to
    it ("helium temperature") makes the line prose, which is left alone.
    """
    # One blank where there were many: the patterns allow blanks in several places, and would try every split of a run.
    line = " ".join(re.sub(r"[_\-](?=[A-Za-z])", " ", line[:2000]).split())
    line = re.sub(r"[\[(]?\b(?:p\s?p|peak\s+to\s+peak)\b[\])]?", " ", line, flags=re.IGNORECASE)
    found = False
    for key, pattern in _VALUE.items():
        for match in pattern.finditer(line):
            if (match["prefix"] or "").strip().lower() not in _BEFORE[key] | {"", "the", "at"}:
                continue
            put(header, notes, key, match["number"], match["before"] or match["after"])
            found = True
    for key, pattern in (("microwave", _MODE), ("detect", _DETECT)):
        match = pattern.search(line)
        if match:
            header.setdefault(key, match[1].lower().removeprefix("first "))
            found = True
    return found


_FIELD_NAME = re.compile(r"(?:b|b0|b_0|h|field|magnetic field|magnetfeld|b field|field axis)", re.IGNORECASE)
_LONGEST_HEADING = 200
_COLUMN = re.compile(
    r"(?P<name>.*?)\s*(?:/\s*(?P<slash>\S+)|\[(?P<square>[^\]]*)\]|\((?P<round>[^)]*)\)|[_ ](?P<tail>[^\s_]+))\s*"
)


def column_name(text: str) -> tuple[str, str]:
    """Split a column's heading into its name and unit: "field/mT", "field (G)", "Field [T]", "field_mT", "B in mT"."""
    text = text[:_LONGEST_HEADING].strip().strip("\"'").strip()
    match = _COLUMN.fullmatch(text)
    if match is None:
        return text, ""
    unit = tidy_unit(match["slash"] or match["square"] or match["round"] or match["tail"] or "")
    known = any(unit in table for table in units.UNITS.values())
    if match["tail"] and not known:  # "lower level" has no unit; "field_mT" has
        return text, ""
    return re.sub(r"\s+in$", "", match["name"].strip(" ,_")), unit


def is_field(name: str) -> bool:
    """Whether a column of this name holds the magnetic field."""
    return _FIELD_NAME.fullmatch(name.replace("_", " ").strip()) is not None
