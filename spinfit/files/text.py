"""Delimited text in the forms that instruments, scripts and spreadsheets write it.

Commas, semicolons, tabs or blanks between numbers, decimal points or commas, comments anywhere, headings with or
without units.  A fast path hands a clean block of numbers to numpy; whatever it cannot take goes line by line, which
is also where every error finds its line number.  Both give the same numbers.
"""

from __future__ import annotations

import io
import math
import re
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spinfit.errors import InputError
from spinfit.files.conditions import column_name, is_field, understand
from spinfit.files.raw import MAX_POINTS, Note, RawTrace, decode, quote

_COMMENT = ("#", ";", "%")
# Possessive: a long row of digits before something else would be split in every way.
_NUMBER = re.compile(r"[+-]?(?:\d++(?:\.\d*+)?|\.\d++)(?:[eEdD][+-]?\d++)?", re.ASCII)
# A line of nothing but such numbers and what may stand between them, as most lines are.
_ROW = re.compile(rf"{_NUMBER.pattern}(?:[;,\t ]++{_NUMBER.pattern})*+", re.ASCII)
_NOT_FINITE = re.compile(r"[+-]?(?:nan|inf|infinity)", re.IGNORECASE)
_UNCLEAN = re.compile(r"[^0-9eE+\-.,; \t\n]")
_MINUS = str.maketrans({"\u2212": "-", "\u00a0": " "})
_SAMPLE = 400


# Of which all but the last end alike, before that says anything.
_ENOUGH_LINES = 12


@dataclass(frozen=True)
class Dialect:
    """How a file writes its numbers: `separator` "" stands for blanks and tabs."""

    separator: str
    decimal: str

    def split(self, line: str) -> list[str]:
        """Split a data line into its fields; an empty last one (trailing separator) is dropped."""
        fields = line.split(self.separator) if self.separator else line.split()
        fields = [field.strip().strip("\"'").strip() for field in fields]
        while len(fields) > 1 and not fields[-1]:
            fields.pop()
        return fields

    def number(self, field: str) -> float | None:
        """Return the number a field holds, which may be NaN or infinite; None when it is none."""
        text = field.replace(",", ".") if self.decimal == "," else field
        if _NUMBER.fullmatch(text):
            return float(text.replace("D", "E").replace("d", "e"))
        return float(text) if _NOT_FINITE.fullmatch(text) else None


def _without_comment(line: str) -> str:
    """Return what stands before a comment; a semicolon only begins one at the start of the line."""
    line = line.strip(" \n\r")
    if _ROW.fullmatch(line):
        return line
    if line.lstrip().startswith(_COMMENT):
        return ""
    return re.split(r"[#%]", line, maxsplit=1)[0].rstrip(" ")


def _looks_numeric(line: str) -> bool:
    """Whether a line is made of numbers in some dialect."""
    if _ROW.fullmatch(line):
        return True
    tokens = [token.strip("\"'") for token in re.split(r"[;\t ]+", line.strip())]
    tokens = [part for token in tokens for part in token.split(",") if part]
    return bool(tokens) and all(_NUMBER.fullmatch(t) or _NOT_FINITE.fullmatch(t) for t in tokens)


def _dialect(sample: list[str]) -> Dialect:
    """Find out separator and decimal mark from data lines.

    A comma is a decimal mark when semicolons, tabs or blanks separate the numbers and no number has a point.
    """
    text = "\n".join(line.strip() for line in sample)
    if ";" in text:
        return Dialect(";", "," if "," in text else ".")
    if "," not in text:
        return Dialect("", ".")
    if "." in text or re.search(r",\s|\s,", text):
        return Dialect(",", ".")
    spaced = all(re.search(r"[^,\s]\s+[^,\s]", line) for line in text.split("\n"))
    return Dialect("", ",") if spaced else Dialect(",", ".")


@dataclass
class _Preamble:
    """What stands before the data: where they start and what the lines above say."""

    start: int
    dialect: Dialect
    width: int
    names: tuple[str, ...]
    units: tuple[str, ...]


def _headings(candidates: list[tuple[str, bool]], dialect: Dialect, width: int) -> list[str] | None:
    """Return the column headings among the lines before the data, nearest to the data first.

    A plain line must have as many fields as the data; a comment must besides name a field or carry a unit, for
    otherwise "# two words" would head every two columns.
    """
    for line, is_comment in reversed(candidates):
        for split in (dialect, Dialect("\t", "."), Dialect(";", "."), Dialect(",", "."), Dialect("", ".")):
            fields = split.split(line)
            if len(fields) != width or any(dialect.number(field) is not None for field in fields):
                continue
            if is_comment and not any(is_field(column_name(f)[0]) or column_name(f)[1] for f in fields):
                continue
            return fields
    return None


def _preamble(lines: list[str], header: dict[str, Any], notes: list[Note], file: str) -> _Preamble:
    """Read everything above the first data line."""
    start = next((i for i, line in enumerate(lines) if _looks_numeric(_without_comment(line))), None)
    if start is None:
        shown = next((line for line in lines if line.strip()), "")
        raise InputError(f"holds no line of numbers (it begins {quote(shown)})", "give columns of numbers", file=file)
    sample = [text for line in lines[start : start + _SAMPLE] if _looks_numeric(text := _without_comment(line))]
    dialect = _dialect(sample)
    width = len(dialect.split(sample[0]))
    candidates: list[tuple[str, bool]] = []
    for number, line in enumerate(lines[:start], 1):
        text = line.strip()
        is_comment = text.startswith(_COMMENT)
        text = text.lstrip("".join(_COMMENT)).strip() if is_comment else text
        fields = dialect.split(text)
        if not is_comment and len(fields) == width > 1 and dialect.number(fields[0]) is not None:
            bad = next((field for field in fields if dialect.number(field) is None), text)
            raise InputError(f"{quote(bad)} is not a number", "write numbers only", place=f"line {number}", file=file)
        if not understand(text, header, notes) and text:
            candidates.append((text, is_comment))
    fields = _headings(candidates, dialect, width) or [""] * width
    if width == 1:
        raise InputError(
            f"has one column ({quote(sample[0])})",
            "give at least a field and a signal column, separated by comma, semicolon, tab or blanks",
            place=f"line {start + 1}",
            file=file,
        )
    pairs = [column_name(field) for field in fields]
    return _Preamble(start, dialect, width, tuple(p[0] for p in pairs), tuple(p[1] for p in pairs))


def _fast(body: str, dialect: Dialect, width: int) -> NDArray[np.float64] | None:
    """Read a clean block of numbers; None when it is not clean, so that the slow path finds out why."""
    if _UNCLEAN.search(body):
        return None
    if dialect.decimal == ",":
        body = body.replace(",", ".")
    if dialect.separator:
        body = re.sub(rf"[{dialect.separator}\s]+$", "", body, flags=re.MULTILINE)
    try:
        data = np.loadtxt(io.StringIO(body), delimiter=dialect.separator or None, comments=None, ndmin=2)
    except ValueError:
        return None
    return data if data.shape[1] == width and np.isfinite(data).all() else None


def _slow(lines: list[str], pre: _Preamble, header: dict[str, Any], notes: list[Note], file: str) -> NDArray[Any]:
    """Read line by line, so that a wrong one is found by its number."""
    rows: list[list[float]] = []
    for number, line in enumerate(lines[pre.start :], pre.start + 1):
        text = _without_comment(line)
        if not text.strip():
            if line.strip():
                understand(line.strip().lstrip("".join(_COMMENT)), header, notes)
            continue
        fields = pre.dialect.split(text)
        place = f"line {number}"
        if len(fields) != pre.width:
            found = f"{quote(text)} has {len(fields)} column{'s' * (len(fields) != 1)}"
            raise InputError(found, f"the lines above have {pre.width}", place=place, file=file)
        row = [pre.dialect.number(field) for field in fields]
        for field, value in zip(fields, row, strict=True):
            if value is None:
                found = f"{quote(field)} is not a number" if field else "an empty field"
                raise InputError(found, "write a number", place=place, file=file)
            if not math.isfinite(value):
                right = "write a finite number, or leave the line out"
                raise InputError(f"{quote(field)} is not finite", right, place=place, file=file)
        rows.append(row)
    return np.array(rows, dtype=np.float64)


def _check_ambiguity(pre: _Preamble, lines: list[str], file: str) -> None:
    """Refuse commas that both separate and mark decimals: "340,5,12,3" under two headings."""
    if pre.dialect.separator != "," or pre.width % 2 or any(pre.names) or pre.start == 0:
        return
    above = [line.strip().lstrip("".join(_COMMENT)) for line in lines[max(0, pre.start - 3) : pre.start]]
    for line in above:
        fields = Dialect(",", ".").split(line)
        if 2 * len(fields) == pre.width and any(is_field(column_name(f)[0]) for f in fields):
            raise InputError(
                f"{pre.width} numbers under {len(fields)} headings",
                "commas cannot be decimal marks and separators at once: separate by semicolons",
                place=f"line {pre.start + 1}",
                file=file,
            )


def _check_end(lines: list[str], pre: _Preamble, file: str) -> None:
    """Refuse a last number that was cut off, as in a file that is still being written.

    It is known by this: no line end follows it, and it is the beginning of what every other line ends in.

    Raises
    ------
    InputError
    """
    if len(lines) - pre.start < _ENOUGH_LINES or pre.dialect.number(_last(lines[-1], pre.dialect)) is None:
        return  # too little to tell, or a line end or a comment at the end
    last, *others = (_tail(line, pre.dialect) for line in reversed(lines[pre.start :]))
    if len(set(others)) == 1 and others[0] != last and others[0].startswith(last):
        number = quote(_last(lines[-1], pre.dialect))
        found = f"{number} is cut off: it has fewer digits than the last number of every line above"
        right = "wait until the measurement has ended, or take the line out"
        raise InputError(found, right, place=f"line {len(lines)}", file=file)


def _last(line: str, dialect: Dialect) -> str:
    return (dialect.split(line) or [""])[-1]


def _tail(line: str, dialect: Dialect) -> str:
    """Return the decimals and the exponent of a line's last number, each digit as 0, each sign of an exponent as +."""
    _, point, decimals = _last(line, dialect).partition(dialect.decimal)
    return re.sub(r"\d", "0", point + decimals).replace("-", "+")


def read_text(content: bytes, file: str, sha256: str = "") -> RawTrace:
    """Read delimited text.

    Parameters
    ----------
    content : bytes
        The whole file.
    file : str
        What to call it in errors.

    Raises
    ------
    InputError
        With the line and what stood there.
    """
    lines = decode(content, file).translate(_MINUS).split("\n")
    header: dict[str, Any] = {}
    notes: list[Note] = []
    pre = _preamble(lines, header, notes, file)
    _check_ambiguity(pre, lines, file)
    if (len(lines) - pre.start) * pre.width > MAX_POINTS:
        found = f"has about {(len(lines) - pre.start) * pre.width:.3g} numbers"
        raise InputError(found, f"at most {MAX_POINTS:.3g} are read", file=file)
    data = _fast("\n".join(lines[pre.start :]), pre.dialect, pre.width)
    if data is None:
        data = _slow(lines, pre, header, notes, file)
    _check_end(lines, pre, file)
    return RawTrace(data, pre.names, pre.units, header, sha256, file, tuple(notes), "text")
