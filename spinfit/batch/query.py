"""Questions to a table: which rows, in which order.  Conditions are parsed here and never run as code.

    status = good and cu.g_z > 2.3
    not (outlier ~ cu.g_z) and (temperature <= 77 or sample = "tile 3")

``~`` asks whether a cell holds a text.  A name that is a column means its cell; on the right any other word is a
text.  A cell that is empty fulfils no comparison but ``= ""``.
"""

from __future__ import annotations

import csv
import math
import re
from collections.abc import Callable, Iterator, Mapping, Sequence
from pathlib import Path
from typing import Any

from spinfit.errors import InputError, nearest

Row = Mapping[str, str]
Condition = Callable[[Row], bool]

_TOKEN = re.compile(
    r"\s*(?:(?P<text>\"[^\"]*\"|'[^']*')|(?P<mark><=|>=|==|!=|[<>=~()])"
    r"|(?P<number>[-+]?(?:\d+\.?\d*|\.\d+)(?:[eE][-+]?\d+)?(?![\w.]))|(?P<word>[^\s<>=!~()\"']+))"
)
_ORDER: dict[str, Callable[[float, float], bool]] = {
    "<": lambda a, b: a < b,
    "<=": lambda a, b: a <= b,
    ">": lambda a, b: a > b,
    ">=": lambda a, b: a >= b,
}
_MARKS = (*_ORDER, "=", "==", "!=", "~")
_DEEPEST = 50
_EXAMPLE = 'write conditions such as "cu.g_z > 2.3 and status = good"'


def number_of(cell: str) -> float | None:
    """Return a cell's number; None for a cell that holds none."""
    try:
        value = float(cell)
    except ValueError:
        return None
    return value if math.isfinite(value) else None


def _same(one: str, other: str) -> bool:
    a, b = number_of(one), number_of(other)
    return a == b if a is not None and b is not None else one.casefold() == other.casefold()


def _compare(mark: str, one: str, other: str) -> bool:
    if mark in _ORDER:
        a, b = number_of(one), number_of(other)
        return a is not None and b is not None and _ORDER[mark](a, b)
    if mark == "~":
        return bool(other) and other.casefold() in one.casefold()
    if not one and other:
        return False
    return _same(one, other) != (mark == "!=")


class _Parser:
    """Recursive descent over the tokens of one condition."""

    def __init__(self, text: str, columns: Sequence[str], place: str) -> None:
        self.columns, self.place = columns, place
        self.tokens = self._cut(text)
        self.at = 0

    def _cut(self, text: str) -> list[tuple[str, str]]:
        tokens, end = [], 0
        while text[end:].strip():
            found = _TOKEN.match(text, end)
            if found is None:
                raise self.error(f'"{text[end:].strip()[:20]}" cannot be read')
            tokens.append((str(found.lastgroup), found[str(found.lastgroup)]))
            end = found.end()
        return tokens

    def error(self, found: str, right: str = _EXAMPLE) -> InputError:
        return InputError(found, right, place=self.place)

    def next(self) -> tuple[str, str]:
        if self.at >= len(self.tokens):
            raise self.error("the condition ends too early")
        self.at += 1
        return self.tokens[self.at - 1]

    def is_word(self, *words: str) -> bool:
        """Whether the next token is one of these, which is then passed."""
        here = self.tokens[self.at] if self.at < len(self.tokens) else ("", "")
        if here[0] in ("word", "mark") and here[1].lower() in words:
            self.at += 1
            return True
        return False

    def whole(self) -> Condition:
        condition = self.either(0)
        if self.at < len(self.tokens):
            raise self.error(f'"{self.tokens[self.at][1]}" was not expected')
        return condition

    def either(self, depth: int) -> Condition:
        parts = [self.both(depth)]
        while self.is_word("or"):
            parts.append(self.both(depth))
        return parts[0] if len(parts) == 1 else lambda row: any(part(row) for part in parts)

    def both(self, depth: int) -> Condition:
        parts = [self.single(depth)]
        while self.is_word("and"):
            parts.append(self.single(depth))
        return parts[0] if len(parts) == 1 else lambda row: all(part(row) for part in parts)

    def single(self, depth: int) -> Condition:
        if depth > _DEEPEST:
            raise self.error(f"is nested more than {_DEEPEST} deep")
        if self.is_word("not"):
            inner = self.single(depth + 1)
            return lambda row: not inner(row)
        if self.is_word("("):
            inner = self.either(depth + 1)
            if not self.is_word(")"):
                raise self.error('a ")" is missing')
            return inner
        return self.comparison()

    def comparison(self) -> Condition:
        left = self.operand(is_left=True)
        kind, mark = self.next()
        if kind != "mark" or mark not in _MARKS:
            raise self.error(f'"{mark}" is no comparison', "write one of " + ", ".join(_MARKS))
        right = self.operand(is_left=False)
        return lambda row: _compare(mark, left(row), right(row))

    def operand(self, *, is_left: bool) -> Callable[[Row], str]:
        kind, text = self.next()
        if kind == "mark":
            raise self.error(f'"{text}" was not expected')
        if kind == "text":
            return lambda row: text[1:-1]
        if kind == "number" or (text not in self.columns and not is_left):
            return lambda row: text
        if text not in self.columns:
            raise self.error(f'there is no column "{text}"', nearest(text, self.columns))
        return lambda row: row[text]


def condition(text: str, columns: Sequence[str], place: str = "--where") -> Condition:
    """Return the condition that a text states.

    Parameters
    ----------
    text : str
        See the module's description.
    columns : sequence of str
        That the table has.
    place : str
        How the text is called in errors.

    Raises
    ------
    InputError
        For what cannot be read, and for columns that are not there.
    """
    if not text.strip():
        raise InputError("is empty", _EXAMPLE, place=place)
    return _Parser(text, columns, place).whole()


def sort_key(column: str) -> Callable[[Row], tuple[int, float, str]]:
    """Return a key for sorting rows by a column: numbers by size, then words."""

    def key(row: Row) -> tuple[int, float, str]:
        value = number_of(row[column])
        return (1, 0.0, row[column].casefold()) if value is None else (0, value, "")

    return key


def sorted_rows(
    rows: Sequence[Row], text: str, columns: Sequence[str], *, reverse: bool = False, place: str = "--sort"
) -> list[Row]:
    """Return rows by one or more columns, ``a,b``; empty cells come last either way.

    Raises
    ------
    InputError
        For columns that are not there.
    """
    ordered = list(rows)
    for column in reversed([name.strip() for name in text.split(",")]):
        if column not in columns:
            raise InputError(f'there is no column "{column}"', nearest(column, columns), place=place)
        filled = [row for row in ordered if row[column]]
        empty = [row for row in ordered if not row[column]]
        ordered = sorted(filled, key=sort_key(column), reverse=reverse) + empty
    return ordered


def typed(cell: str) -> Any:
    """Return a cell as JSON has it: a number, true, false, null for an empty one, else the text."""
    if not cell:
        return None
    if cell in ("True", "False"):
        return cell == "True"
    value = number_of(cell)
    if value is None:
        return cell
    return int(cell) if re.fullmatch(r"-?\d{1,15}", cell) else value


class Table:
    """A batch's table on the disk, read row by row.

    Attributes
    ----------
    path : Path
    columns : list of str

    Raises
    ------
    InputError
        When it cannot be read or is no such table.
    """

    def __init__(self, path: Path) -> None:
        self.path = path
        self.columns = next(self._lines(), [])
        if "trace" not in self.columns or "status" not in self.columns:
            found = "is not the table of a batch (no columns trace and status)"
            raise InputError(found, "name a batch's folder", file=path)

    def _lines(self) -> Iterator[list[str]]:
        try:
            with open(self.path, encoding="utf-8", newline="") as stream:
                yield from csv.reader(stream)
        except (OSError, UnicodeDecodeError, csv.Error) as error:
            reason = getattr(error, "strerror", None) or str(error)
            right = "name the folder of a batch"
            raise InputError(f"cannot be read ({reason.lower()})", right, file=self.path) from None

    def __iter__(self) -> Iterator[Row]:
        lines = self._lines()
        next(lines, None)
        for cells in lines:
            if len(cells) != len(self.columns):
                found = f"a row of {len(cells)} cells under {len(self.columns)} headings"
                raise InputError(found, "run the batch again", file=self.path)
            yield dict(zip(self.columns, cells, strict=True))
