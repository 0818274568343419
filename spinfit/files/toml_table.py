"""TOML text to tables, and one place for every check of a key: type, unit, range, spelling.

A `Table` knows where it stands (``species.1.width``), so that each error names file and key.  It
notes the unit of every quantity it reads under the path at which the value stands in the model.
"""

from __future__ import annotations

import math
import re
import tomllib
from collections.abc import Collection, Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any

from spinfit.errors import InputError, nearest
from spinfit.units import parse

MAX_BYTES = 20_000_000
"""A job with a thousand traces has about 200 kB."""

LARGEST = {
    "energy": 1e10,
    "frequency": 1e9,
    "field": 1e6,
    "angle": 1e3,
    "temperature": 1e5,
    "field per voltage": 1e9,
    "voltage": 1e6,
    "power": 1e9,
}
"""Sizes in internal units beyond which a quantity is a slip of the pen (40 eV, 1 PHz, 1 kT, ...)."""
LARGEST_NUMBER = 1e9

# The parser's time grows with the square of a dotted key's parts.
_DEEP_KEY = re.compile(r"(?<![\w-])(?:[\w-]++[ \t]*+\.[ \t]*+){60}", re.ASCII)

Given = dict[tuple[str | int, ...], str]


def load_toml(path: str | Path) -> tuple[dict[str, Any], str]:
    """Read a TOML file.

    Returns
    -------
    tables : dict
    text : str
        As it stands in the file.

    Raises
    ------
    InputError
        For a file that is not there, cannot be read, is not UTF-8 or not TOML; the line is named.
    """
    try:
        with open(path, "rb") as stream:
            content = stream.read(MAX_BYTES + 1)
    except FileNotFoundError:
        raise InputError("there is no such file", "check the name and the folder", file=path) from None
    except IsADirectoryError:
        raise InputError("is a folder", "name a TOML file in it", file=path) from None
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or error
        raise InputError(f"cannot be read ({reason})", "check the name and the permissions", file=path) from None
    if len(content) > MAX_BYTES:
        raise InputError("is larger than 20 MB", "give a TOML file with a model or a job", file=path)
    try:
        text = content.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = content[: error.start].count(b"\n") + 1
        raise InputError("is not UTF-8 text", "save it as UTF-8", place=f"line {line}", file=path) from None
    try:
        return parse_toml(text), text
    except InputError as error:
        raise error.at(file=path) from None


def parse_toml(text: str) -> dict[str, Any]:
    """Parse TOML text; the error names the line."""
    if not text.strip():
        raise InputError("is empty", "write a model or a job in TOML")
    if _DEEP_KEY.search(text):
        raise InputError("has a key of more than 60 parts", "write a model or a job in TOML")
    try:
        return tomllib.loads(text.replace("\r\n", "\n"))
    except RecursionError:
        raise InputError("is nested too deeply", "write a model or a job in TOML") from None
    except ValueError as error:  # TOMLDecodeError, and numbers or dates that Python does not make
        message = str(error)
        where = re.search(r"\s*\(at (?:line (\d+), column \d+|end of document)\)", message)
        place = None
        if where is not None:
            place = f"line {where[1] or text.count(chr(10)) + 1}"
            message = message[: where.start()]
        raise InputError(
            f"is not TOML: {message[:1].lower()}{message[1:]}", 'write key = "value"', place=place
        ) from None


def describe(value: object) -> str:
    """Say what a TOML value is, on one short line."""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        line = " ".join(value.split())
        return f'"{line}"' if len(line) <= 40 else f'"{line[:37]}..."'
    if isinstance(value, dict):
        return "a table"
    if isinstance(value, list):
        return f"a list of {len(value)}"
    if isinstance(value, int) and abs(value) >= 10**15:
        return "an enormous number"  # Python refuses to write out the longest ones
    return f"{value:g}" if isinstance(value, float) else f"{value!s:.40}"


def is_number(value: object) -> bool:
    """Whether a TOML value is a number (true and false are not)."""
    return isinstance(value, (int, float)) and not isinstance(value, bool)


def is_finite(value: object) -> bool:
    """Whether a TOML value is a number of ordinary size; an integer may be too long for a float to hold."""
    return is_number(value) and -1e300 < value < 1e300  # type: ignore[operator]


def _finite(value: Any, place: str) -> float:
    if isinstance(value, float) and not math.isfinite(value):
        raise InputError(f"{value} is not finite", "write a finite number", place=place)
    if abs(value) > LARGEST_NUMBER:
        raise InputError(f"{describe(value)} is too large", f"write at most {LARGEST_NUMBER:g}", place=place)
    return float(value)


def quantity_of(
    value: object, kind: str, place: str, count: int | tuple[int, ...] | None
) -> tuple[tuple[float, ...], str]:
    """Read a TOML value that should be numbers with a unit; return them in internal units, and the unit.

    Raises
    ------
    InputError
        For anything else, and for sizes beyond all reason.
    """
    if isinstance(value, str) or is_finite(value):
        values, unit = parse(value, kind, place, count=count)
        check_size(values, kind, place)
        return values, unit
    try:
        parse(None, kind, place, count=count)
    except InputError as error:
        raise InputError(f"{describe(value)} is not a text with a unit", error.right, place=place) from None
    raise AssertionError("a missing value was read as a quantity")


def check_size(values: Iterable[float], kind: str, place: str) -> None:
    """Refuse quantities beyond all reason, which would only overflow later."""
    limit = LARGEST[kind]
    internal = {"energy": "MHz", "frequency": "MHz", "field": "mT", "angle": "rad", "temperature": "K", "power": "mW"}
    for value in values:
        if abs(value) > limit:
            unit = internal.get(kind, "")
            raise InputError(f"{value:g} {unit} is beyond reason", f"up to {limit:g} {unit} is taken", place=place)


class Table:
    """One TOML table under checks.

    Parameters
    ----------
    data : object
        What stood in the file.
    place : str
        Where: ``"species.1"``; "" for the whole file.
    keys : collection of str
        Every key that may stand here.
    elsewhere : mapping of key -> str, optional
        Keys that are understood but not here, with what to do about them.
    path : tuple
        Where the values stand in the model.
    given : dict, optional
        Receives the unit of each quantity, by path.

    Raises
    ------
    InputError
        When it is no table, or has a key that is not known.
    """

    def __init__(
        self,
        data: object,
        place: str,
        keys: Collection[str],
        *,
        elsewhere: Mapping[str, str] | None = None,
        path: tuple[str | int, ...] = (),
        given: Given | None = None,
    ) -> None:
        if not isinstance(data, dict):
            name = place.rstrip("0123456789.")
            form = f"[[{name}]]" if place != name else f"[{name}]"
            raise InputError(f"{describe(data)} is not a table", f"write it under {form}", place=place)
        self.data: dict[str, Any] = data
        self.place = place
        self.path = path
        self.given: Given = {} if given is None else given
        for key in data:
            if key in (elsewhere or {}):
                raise InputError(f'"{key}" does not belong here', (elsewhere or {})[key], place=place or None)
            if key not in keys:
                raise InputError(f'unknown key "{key:.60}"', nearest(key, keys), place=place or None)

    def at(self, key: str) -> str:
        """Return the full name of a key."""
        return f"{self.place}.{key}" if self.place else key

    def __contains__(self, key: str) -> bool:
        return key in self.data

    def require(self, key: str, example: str) -> None:
        """Refuse the table when the key is missing."""
        if key not in self.data:
            raise InputError("is missing", f"write {key} = {example}", place=self.at(key))

    def error(self, key: str, found: str, right: str) -> InputError:
        """Return an error at a key."""
        return InputError(found, right, place=self.at(key))

    def note(self, attribute: str | int, unit: str) -> None:
        """Note that the file gave the value at an attribute, and in which unit."""
        self.given[(*self.path, attribute)] = unit

    # Quantities with units ---------------------------------------------------------------------

    def quantities(
        self, key: str, kind: str, count: int | tuple[int, ...] | None, *, attribute: str | int | None = None
    ) -> tuple[float, ...] | None:
        """Return a quantity's numbers in internal units, or None when the key is missing."""
        if key not in self.data:
            return None
        values, unit = quantity_of(self.data[key], kind, self.at(key), count)
        self.note(attribute or key, unit)
        return values

    def quantity(self, key: str, kind: str, *, attribute: str | int | None = None) -> float | None:
        """Return one quantity in internal units, or None when the key is missing."""
        values = self.quantities(key, kind, 1, attribute=attribute)
        return None if values is None else values[0]

    def positive(self, key: str, kind: str, *, zero: bool = False) -> float | None:
        """Return one quantity that is positive (or 0 as well, with `zero`)."""
        value = self.quantity(key, kind)
        if value is not None and (value < 0 or (value == 0 and not zero)):
            wanted = "not be negative" if zero else "be positive"
            raise self.error(key, f"{describe(self.data[key])}", f"it must {wanted}")
        return value

    def interval(self, key: str) -> tuple[float, float] | None:
        """Return a field range, first below last, mT."""
        values = self.quantities(key, "field", 2)
        return None if values is None else self._rising(key, values, self.data[key])

    def intervals(self, key: str) -> tuple[tuple[float, float], ...]:
        """Return a list of field ranges, mT."""
        entries = self.data.get(key, [])
        if not isinstance(entries, list):
            raise self.error(key, f"{describe(entries)} is not a list", f'write {key} = ["325, 330 mT"]')
        found = []
        for n, entry in enumerate(entries):
            values, _ = quantity_of(entry, "field", f"{self.at(key)}.{n + 1}", 2)
            found.append(self._rising(f"{key}.{n + 1}", values, entry))
        return tuple(found)

    def _rising(self, key: str, values: tuple[float, ...], written: object) -> tuple[float, float]:
        if not values[0] < values[1]:
            how = "is a range of no length" if values[0] == values[1] else "runs backwards"
            raise self.error(key, f"{describe(written)} {how}", "write the smaller field first")
        return values[0], values[1]

    # Plain numbers -----------------------------------------------------------------------------

    def number(self, key: str, *, attribute: str | int | None = None) -> float | None:
        """Return a plain number, or None when the key is missing."""
        if key not in self.data:
            return None
        value = self.data[key]
        if not is_number(value):
            raise self.error(key, f"{describe(value)} is not a number", f"write a plain number, e.g. {key} = 1.0")
        self.note(attribute or key, "")
        return _finite(value, self.at(key))

    def numbers(self, key: str, counts: tuple[int, ...], example: str) -> tuple[float, ...] | None:
        """Return plain numbers, one or a list, or None when the key is missing."""
        if key not in self.data:
            return None
        value = self.data[key]
        entries = value if isinstance(value, list) else [value]
        if not all(is_number(entry) for entry in entries):
            wrong = next(entry for entry in entries if not is_number(entry))
            raise self.error(key, f"{describe(wrong)} is not a number", f"write plain numbers, e.g. {example}")
        if len(entries) not in counts:
            wanted = " or ".join(str(count) for count in counts)
            many = f"{len(entries)} number{'' if len(entries) == 1 else 's'}"
            raise self.error(key, f"{many}, wanted {wanted}", f"write e.g. {example}")
        self.note(key, "")
        return tuple(_finite(entry, self.at(key)) for entry in entries)

    def vector(self, key: str) -> tuple[float, float, float] | None:
        """Return three numbers that are not all 0, or None when the key is missing."""
        values = self.numbers(key, (3,), f"{key} = [0, 0, 1]")
        if values is None:
            return None
        if not any(values):
            raise self.error(key, "[0, 0, 0] has no direction", f"write e.g. {key} = [0, 0, 1]")
        return values[0], values[1], values[2]

    def integer(self, key: str, low: int, high: int) -> int | None:
        """Return a whole number from `low` to `high`, or None when the key is missing."""
        if key not in self.data:
            return None
        value = self.data[key]
        if not is_finite(value) or value != int(value):
            raise self.error(key, f"{describe(value)} is not a whole number", f"write one from {low} to {high}")
        if not low <= value <= high:
            raise self.error(key, describe(value), f"write a whole number from {low} to {high}")
        return int(value)

    # Words, lists and tables -------------------------------------------------------------------

    def text(self, key: str) -> str | None:
        """Return a text that is not empty, or None when the key is missing."""
        if key not in self.data:
            return None
        value = self.data[key]
        if not isinstance(value, str) or not value.strip():
            found = "is empty" if isinstance(value, str) else f"{describe(value)} is not a text"
            raise self.error(key, found, f'write {key} = "..."')
        if not value.isprintable():
            raise self.error(key, "has unprintable characters", f'write {key} = "..."')
        return value

    def file_name(self, key: str) -> str | None:
        """Return the name of a file, with whatever a file system lets stand in it, or None when the key is missing."""
        value = self.data.get(key)
        if not isinstance(value, str) or not value.strip():
            return self.text(key)
        if "\0" in value:
            raise self.error(key, "has a zero character", "write the name as the system shows it")
        if any("\ud800" <= character <= "\udfff" for character in value):  # how Python reads what is not UTF-8
            raise self.error(key, "names a file whose name is not UTF-8", "rename the file")
        return value

    def name(self, key: str) -> str | None:
        """Return a text fit for parameter names, or None when the key is missing."""
        value = self.text(key)
        if value is not None and not re.fullmatch(r"[A-Za-z0-9_]+", value, re.ASCII):
            raise self.error(key, f"{describe(value)} cannot be a name", "use letters, digits and _ only")
        return value

    def names(self, key: str) -> str | tuple[str, ...] | None:
        """Return one text fit for parameter names or, of a list, several; None when the key is missing."""
        value = self.data.get(key)
        if not isinstance(value, list):
            return self.name(key)
        for entry in value:
            if not isinstance(entry, str) or not re.fullmatch(r"[A-Za-z0-9_]+", entry, re.ASCII):
                raise self.error(key, f"{describe(entry)} cannot be a name", "use letters, digits and _ only")
        if not value or len(set(value)) < len(value):
            found = "is an empty list" if not value else "names one thing twice"
            raise self.error(key, found, 'write names such as ["day_2", "down"]')
        return tuple(value)

    def choice(self, key: str, known: Sequence[str]) -> str | None:
        """Return one of the known words, or None when the key is missing."""
        value = self.text(key)
        if value is not None and value not in known:
            right = nearest(value, known)
            if right.startswith("known"):
                right = "write " + ", ".join(f'"{word}"' for word in known)
            raise self.error(key, f"{describe(value)} is not known", right)
        return value

    def table(self, key: str) -> dict[str, Any] | None:
        """Return an inner table, or None when the key is missing."""
        if key not in self.data:
            return None
        value = self.data[key]
        if isinstance(value, list):
            raise self.error(key, "stands in double brackets", f"write [{self.at(key)}] in single ones, once")
        if not isinstance(value, dict):
            raise self.error(key, f"{describe(value)} is not a table", f"write [{self.at(key)}]")
        return value

    def tables(self, key: str) -> list[tuple[str, Any]]:
        """Return the tables of a list of them, each with its place, counted from 1."""
        value = self.data.get(key, [])
        heading = re.sub(r"\.\d+", "", self.at(key))
        if isinstance(value, dict):
            raise self.error(key, "stands in single brackets", f"write [[{heading}]], in double ones")
        if not isinstance(value, list):
            raise self.error(key, f"{describe(value)} is not a list of tables", f"write [[{heading}]]")
        return [(f"{self.at(key)}.{n + 1}", entry) for n, entry in enumerate(value)]


def flatten(table: Mapping[str, Any], place: str) -> dict[str, Any]:
    """Join the keys of nested tables by dots: names of parameters stand with or without quotes.

    ``"cu.g_z" = 1`` and ``cu.g_z = 1`` mean the same.

    Raises
    ------
    InputError
        When a name stands there twice.
    """
    # Quoted keys can nest deeper than a parameter's name is long.
    found: dict[str, Any] = {}
    waiting = [(key, value) for key, value in reversed(list(table.items()))]
    while waiting:
        name, value = waiting.pop()
        if isinstance(value, dict) and name.count(".") < 20:
            waiting.extend((f"{name}.{key}", inner) for key, inner in reversed(value.items()))
        elif name in found:
            raise InputError("stands there twice", "take one of the two out", place=f"{place}.{name}")
        else:
            found[name] = value
    return found
