"""A table of values for many traces: csv, a row a trace, its file in the first column.

A column headed by a key of ``[[trace]]`` gives that key's value, written as in a job ("120 K"), or as a bare
number under a heading that ends in the unit (``temperature_K``).  Any other column is carried into the table of
results as it is.  An empty cell leaves the template's value.
"""

from __future__ import annotations

import csv
import difflib
import io
import os
import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from spinfit.errors import InputError
from spinfit.files.keys import TRACE
from spinfit.units import UNITS, parse

QUANTITIES = {
    "frequency": "frequency",
    "temperature": "temperature",
    "modulation": "field",
    "angle": "angle",
    "phase": "angle",
    "field_offset": "field",
    "field_uncertainty": "field",
    "frequency_uncertainty": "frequency",
    "field_calibration.slope": "field per voltage",
    "field_calibration.zero": "field",
}
"""Keys whose value is one number with a unit, and of which kind."""
WORDS = ("name", "microwave", "detect", "direction", "field_unit", "group", "background")
WHOLE = ("columns.field", "columns.signal")
OTHERS = ("field_scale", "baseline", "fit_range", "exclude", "axis", "from")
KEYS = (*QUANTITIES, *WORDS, *WHOLE, *OTHERS)
# A heading this much like a key is a slip of the pen rather than a column of the user's own.
_ALIKE = 0.8
MAX_BYTES = 50_000_000
_SURROUNDED = re.compile(r"\s*[_/\[(]?\s*(.+?)\s*[\])]?\s*")


@dataclass(frozen=True, slots=True)
class Row:
    """One trace's row: line in the file, what stood in the first column, keys of ``[[trace]]``, own columns."""

    line: int
    file: str
    keys: Mapping[str, Any]
    free: Mapping[str, str]


class Values:
    """A table of values.

    Attributes
    ----------
    path : Path
    free : tuple of str
        Headings of the columns that are carried along.
    rows : tuple of Row
    """

    def __init__(self, path: Path, free: tuple[str, ...], rows: tuple[Row, ...]) -> None:
        self.path, self.free, self.rows = path, free, rows
        self._by_path: dict[str, Row] = {}
        self._by_name: dict[str, Row | None] = {}
        for row in rows:
            place = self.place(row)
            if place in self._by_path:
                found = f'"{row.file}" stands in line {self._by_path[place].line} already'
                raise InputError(found, "write one row a trace", place=f"line {row.line}", file=path)
            self._by_path[place] = row
            name = os.path.basename(row.file)
            self._by_name[name] = None if name in self._by_name else row

    def place(self, row: Row) -> str:
        """Return the path of a row's file, which is relative to the table's folder."""
        return os.path.realpath(self.path.parent / row.file)

    def of(self, file: str) -> Row:
        """Return the row of a trace: the one that means the same file, else the only one of the same name.

        Raises
        ------
        InputError
            When there is none.
        """
        row = self._by_path.get(os.path.realpath(file)) or self._by_name.get(os.path.basename(file))
        if row is None:
            found = f'no row for "{file}"'
            raise InputError(found, "add one; the first column holds the file's name", place="--values", file=self.path)
        return row


def read_values(path: str | Path) -> Values:
    """Read a table of values.

    Raises
    ------
    InputError
        With the line and the column.
    """
    text = _content(Path(path))
    try:
        lines = [(n, row) for n, row in _rows(text) if any(cell.strip() for cell in row)]
    except csv.Error as error:
        raise InputError(f"is no table ({error})", "write comma-separated values", file=path) from None
    if len(lines) < 2:
        raise InputError("holds no rows", "write a line of headings, then one a trace", file=path)
    try:
        return _table(Path(path), lines)
    except InputError as error:
        raise error.at(file=path) from None


def _content(path: Path) -> str:
    try:
        with open(path, "rb") as stream:
            content = stream.read(MAX_BYTES + 1)
    except OSError as error:
        reason = (error.strerror or str(error)).lower()
        raise InputError(f"cannot be read ({reason})", "check the name", place="--values", file=path) from None
    if len(content) > MAX_BYTES:
        raise InputError("is larger than 50 MB", "split the batch", place="--values", file=path)
    try:
        return content.decode("utf-8-sig")
    except UnicodeDecodeError:
        raise InputError("is not UTF-8 text", "save it as UTF-8", place="--values", file=path) from None


def _rows(text: str) -> list[tuple[int, list[str]]]:
    """Return the rows that are no comments, each with its line; the heading tells what separates."""
    heading = next((line for line in text.splitlines() if line.strip() and not line.startswith("#")), "")
    separator = max(";\t,", key=heading.count)
    reader = csv.reader(io.StringIO(text), delimiter=separator, strict=True)
    return [(reader.line_num, row) for row in reader if not (row and row[0].startswith("#"))]


def _table(path: Path, lines: list[tuple[int, list[str]]]) -> Values:
    (at, headings), *rest = lines
    headings = [heading.strip() for heading in headings]
    readers: dict[int, tuple[str, Callable[[str, str], Any]]] = {}
    free: dict[int, str] = {}
    for n, heading in enumerate(headings[1:], 1):
        if not heading or heading in headings[:n]:
            found = f'two columns are headed "{heading}"' if heading else f"column {n + 1} has no heading"
            raise InputError(found, "give each column a heading of its own", place=f"line {at}")
        key, reader = _reader(heading, f"line {at}")
        if reader is None:
            free[n] = heading
        elif key in (known for known, _ in readers.values()):
            raise InputError(f'"{heading}" gives {key} a second time', "take one column out", place=f"line {at}")
        else:
            readers[n] = (key, reader)
    rows = []
    for line, cells in rest:
        if len(cells) > len(headings) and any(cell.strip() for cell in cells[len(headings) :]):
            found = f"{len(cells)} cells under {len(headings)} headings"
            raise InputError(found, "quote cells that hold the separator", place=f"line {line}")
        cells = [cell.strip() for cell in cells] + [""] * (len(headings) - len(cells))
        if not cells[0]:
            raise InputError("the first column is empty", "write the trace's file there", place=f"line {line}")
        keys: dict[str, Any] = {}
        for n, (key, reader) in readers.items():
            if cells[n]:
                _put(keys, key, reader(cells[n], f"line {line}.{headings[n]}"))
        if "background" in keys:
            keys["background"] = os.path.abspath(path.parent / keys["background"])
        rows.append(Row(line, cells[0], keys, {name: cells[n] for n, name in free.items()}))
    return Values(path, tuple(free.values()), tuple(rows))


def _put(keys: dict[str, Any], key: str, value: Any) -> None:
    outer, _, inner = key.partition(".")
    if inner:
        keys.setdefault(outer, {})[inner] = value
    else:
        keys[key] = value


def _reader(heading: str, place: str) -> tuple[str, Callable[[str, str], Any] | None]:
    """Return which key a column gives and how its cells are read; None for a column of the user's own."""
    if heading in KEYS:
        return heading, lambda cell, at: _cell(heading, cell, at)
    for key, kind in QUANTITIES.items():
        if heading.startswith(key):
            unit = _SURROUNDED.fullmatch(heading[len(key) :])
            if unit is not None and unit[1] in UNITS[kind]:
                return key, lambda cell, at, key=key, unit=unit[1]: _cell(key, _with_unit(cell, unit), at)
    close = difflib.get_close_matches(heading, [key for key in (*KEYS, *TRACE) if key != "file"], 1, _ALIKE)
    if close:
        units = f", or {close[0]}_UNIT over bare numbers" if close[0] in QUANTITIES else ""
        found = f'a column "{heading}", which is nearly "{close[0]}"'
        raise InputError(found, f"write {close[0]}{units}, or another heading for a column of your own", place=place)
    return heading, None


def _with_unit(cell: str, unit: str) -> str:
    """Return a cell of a column whose heading holds the unit; a decimal comma is understood."""
    return f"{cell.replace(',', '.')} {unit}" if re.fullmatch(r"[-+]?\d+,\d+", cell) else f"{cell} {unit}"


def _cell(key: str, cell: str, place: str) -> Any:
    """Return a cell as a job would write it, checked as far as one cell can be."""
    if key in QUANTITIES:
        parse(cell, QUANTITIES[key], place)
        return cell
    if key == "fit_range":
        parse(cell, "field", place, count=2)
        return cell
    if key == "exclude":
        ranges = [part.strip() for part in cell.split(";") if part.strip()]
        for part in ranges:
            parse(part, "field", place, count=2)
        return ranges
    if key in ("axis", "from"):
        return [_number(part, place, float) for part in re.split(r"[\s,;]+", cell.strip("[] "))]
    if key == "baseline":
        return cell if cell == "none" else _number(cell, place, int)
    if key in WHOLE:
        return _number(cell, place, int)
    return _number(cell, place, float) if key == "field_scale" else cell


def _number(cell: str, place: str, kind: type) -> Any:
    try:
        return kind(cell)
    except ValueError:
        wanted = "a whole number" if kind is int else "a number"
        raise InputError(f'"{cell}" is not {wanted}', f"write {wanted}", place=place) from None
