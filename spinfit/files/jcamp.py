"""JCAMP-DX, the open exchange format: one block of XYDATA, XYPOINTS or a peak table.

Written here rather than left to the general-purpose `jcamp` package, which prints to the screen, takes the
exponent of a number for a squeezed digit in some files, knows no missing ordinates and gives no line numbers; the
tests read the same files with both.

Sources: R. S. McDonald, P. A. Wilks, Appl. Spectrosc. 42, 151 (1988), JCAMP-DX 4.24 (labels, AFFN, and the compressed
forms PAC, SQZ, DIF and DUP); P. Lampen et al., Appl. Spectrosc. 53, 1093 (1999), JCAMP-DX 5.01; the EMR extension
(R. Cammack et al., Pure Appl. Chem. 78, 613 (2006)) for ``.MICROWAVE FREQUENCY``.
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spinfit.errors import InputError
from spinfit.files.conditions import put, tidy_unit, understand
from spinfit.files.raw import MAX_POINTS, Note, RawTrace, decode, quote

_SQZ = {c: str(i) for i, c in enumerate("@ABCDEFGHI")} | {c: f"-{i}" for i, c in enumerate("abcdefghi", 1)}
_DIF = {c: str(i) for i, c in enumerate("%JKLMNOPQR")} | {c: f"-{i}" for i, c in enumerate("jklmnopqr", 1)}
_DUP = {c: str(i) for i, c in enumerate("STUVWXYZs", 1)}
# "1204E5" is 1204 and the squeezed 55: an exponent has a sign, or its mantissa a point.
_AFFN = r"[+-]?(?:(?:\d+\.\d*|\.\d+)(?:[eE][+-]?\d{1,3}(?!\d))?|\d+(?:[eE][+-]\d{1,3}(?!\d))?)"
_AFFN_LINE = re.compile(rf"\s*{_AFFN}(?:(?:\s+|\s*[,;]\s*|(?=[+-])){_AFFN})*[\s,;]*")
_FIRST = re.compile(r"\s*([+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]\d{1,3}(?!\d))?)")
_TOKEN = re.compile(r"\s*(?:([@A-Ia-i])|([%J-Rj-r])|([S-Zs])|([+-])|(?=[\d.])|(\?))((?:\d*\.)?\d*)")
_TABLES = ("XYDATA", "XYPOINTS", "PEAKTABLE")


@dataclass
class _Block:
    """One block: its labels, its table and where the table's lines stand."""

    labels: dict[str, tuple[str, int]] = field(default_factory=dict)
    comments: list[str] = field(default_factory=list)
    table: str = ""
    form: str = ""
    lines: list[tuple[int, str]] = field(default_factory=list)
    ended: bool = False


def _label(text: str) -> str:
    """Return a label as the standard compares them: capitals, without blanks, dashes, slashes and underlines."""
    return re.sub(r"[\s\-/_]", "", text).upper()


def _blocks(text: str) -> list[_Block]:
    """Split a file into blocks, a compound (LINK) file into its inner ones with the outer one first."""
    stack, blocks = [_Block()], []
    current: str | None = None
    for number, line in enumerate(text.split("\n"), 1):
        line, _, comment = line.partition("$$")
        block = stack[-1]
        if comment.strip():
            block.comments.append(comment.strip())
        match = re.match(r"\s*##([^=]*)=(.*)", line)
        if match is None:
            if current in _TABLES and block.table == current:
                block.lines.append((number, line))
            elif current in block.labels and line.strip():
                block.labels[current] = (f"{block.labels[current][0]}\n{line.strip()}", block.labels[current][1])
            continue
        current, value = _label(match[1]), match[2].strip()
        if current == "TITLE" and block.labels and not block.ended:
            stack.append(_Block())
            stack[-1].labels["TITLE"] = (value, number)
        elif current == "END":
            block.ended = True
            blocks.append(stack.pop() if len(stack) > 1 else block)
        elif current in _TABLES and not block.table:
            block.table, block.form = current, re.sub(r"\s", "", value).upper()
            block.labels[current] = (value, number)
        elif current:
            block.labels.setdefault(current, (value, number))
    blocks.extend(block for block in reversed(stack) if not any(block is known for known in blocks))
    return blocks


def _number(block: _Block, label: str, file: str) -> float | None:
    """Return the number a label gives, or None when the label is missing or empty."""
    if label not in block.labels or not block.labels[label][0]:
        return None
    text, line = block.labels[label]
    match = re.match(r"[+-]?(?:\d+(?:[.,]\d*)?|[.,]\d+)(?:[eE][+-]?\d+)?", text)
    value = float(match[0].replace(",", ".")) if match else math.nan
    if not math.isfinite(value):
        raise InputError(f"{label} = {quote(text)}", "write a finite number", place=f"line {line}", file=file)
    return value


def _last_digit(text: str) -> float:
    """Return one unit of the last digit in which a label's number is written: 0.0001 for 0.0183."""
    match = re.match(r"[+-]?\d*[.,]?(\d*)(?:[eE]([+-]?\d{1,3}))?", text)
    return 10.0 ** (int(match[2] or 0) - len(match[1]))


def _affn(line: str) -> list[float] | None:
    """Return the numbers of a line in free form, signs serving as separators (PAC); None when it is another form."""
    if _AFFN_LINE.fullmatch(line) is None:
        return None
    return [float(number) for number in re.findall(_AFFN, line)]


# A repeat count of six digits would make a megabyte of a line.  Real tables hold few points a character, but a sweep
# over nothing at all may be one ordinate, repeated.
_FREE_POINTS = 200_000
_POINTS_PER_CHARACTER = 100


def _squeezed(line: str, place: str, file: str, room: int = MAX_POINTS) -> tuple[float, list[float], bool]:
    """Decode one line of compressed ordinates, at most `room` of them.

    Returns
    -------
    x : float
        The abscissa that begins the line, not scaled.
    ordinates : list of float
        Not scaled; NaN for a missing one ("?").
    difference : bool
        Whether the last ordinate is a difference, so that the next line repeats it as a check.
    """
    match = _FIRST.match(line)
    if match is None:
        raise InputError(f"{quote(line)} begins with no number", "begin with the abscissa", place=place, file=file)
    x, position, line = float(match[1]), match.end(), line.rstrip()
    values: list[float] = []
    step: float | None = None
    while position < len(line):
        token = _TOKEN.match(line, position)
        sqz, dif, dup, sign, missing, digits = token.groups() if token else (None,) * 6
        text = (_SQZ.get(sqz, "") if sqz else _DIF[dif] if dif else _DUP[dup] if dup else sign or "") + (digits or "")
        if token is None or token.end() == position or (not missing and not text.strip("+-.")):
            found = quote(line[position : position + 20])
            raise InputError(f"{found} is no ordinate", "give AFFN, PAC, SQZ, DIF or DUP", place=place, file=file)
        position = token.end()
        if dup:
            count = float(text)
            if not values or count != int(count) or count < 1 or count > MAX_POINTS:
                raise InputError(f"{quote(token[0])} repeats nothing", "repeat an ordinate", place=place, file=file)
            if len(values) + count > room:
                right = "a table this short holds fewer points"
                raise InputError(f"{quote(token[0])} repeats an ordinate too often", right, place=place, file=file)
            for _ in range(int(count) - 1):
                values.append(values[-1] + step if step is not None else values[-1])
        elif dif:
            if not values:
                raise InputError("begins with a difference", "begin with an ordinate", place=place, file=file)
            step = float(text)
            values.append(values[-1] + step)
        else:
            step = None
            values.append(math.nan if missing else float(text))
    return x, values, step is not None


@dataclass
class _Ordinates:
    """The ordinates of an (X++(Y..Y)) table, with each line's abscissa and the index of its first ordinate."""

    values: NDArray[np.float64]
    abscissas: list[float]
    starts: list[int]
    numbers: list[int]


def _ordinates(block: _Block, notes: list[Note], file: str) -> _Ordinates:
    """Read the lines of an (X++(Y..Y)) table."""
    out = _Ordinates(np.empty(0), [], [], [])
    values: list[float] = []
    lines = [(number, line) for number, line in block.lines if line.strip()]
    plain = all(_AFFN_LINE.fullmatch(line) for _, line in lines)
    check, failed = False, 0
    most = min(MAX_POINTS, max(_FREE_POINTS, _POINTS_PER_CHARACTER * sum(len(line) for _, line in lines)))
    for number, line in lines:
        row = _affn(line) if plain else None
        x, new, difference = (
            (row[0], row[1:], False) if row else _squeezed(line, f"line {number}", file, most - len(values))
        )
        if check and new:
            failed += new[0] != values[-1]
            values.pop()  # the check is an ordinate of its own and stands for the one computed
        out.abscissas.append(x)
        out.starts.append(len(values))
        out.numbers.append(number)
        values.extend(new)
        check = difference
        if len(values) > most:
            raise InputError("has too many points", f"at most {most:.3g} are read", file=file)
    if failed:
        notes.append(("jcamp_check", f"{failed} of the ordinate checks of the compressed table fail"))
    out.values = np.array(values)
    return out


def _abscissas(block: _Block, table: _Ordinates, notes: list[Note], file: str) -> NDArray[np.float64]:
    """Return every point's abscissa: from FIRSTX, LASTX and NPOINTS; the lines' own, which are rounded, only check."""
    first, last = _number(block, "FIRSTX", file), _number(block, "LASTX", file)
    delta, points = _number(block, "DELTAX", file), _number(block, "NPOINTS", file)
    factor = _number(block, "XFACTOR", file) or 1.0
    n = len(table.values)
    stated = np.array(table.abscissas) * factor
    if points is not None and points != n:
        notes.append(("jcamp_points", f"NPOINTS is {points:g}, the table holds {n} points"))
    if first is None:
        first = stated[0] if len(stated) else 0.0
    if last is not None and points is not None and points > 1:
        step = (last - first) / (points - 1)
        rounding = _last_digit(block.labels["DELTAX"][0]) if delta is not None else 0.0
        if delta is not None and (abs(delta - step) - rounding) * (points - 1) > abs(step) * 0.5:
            notes.append(
                ("jcamp_step", f"DELTAX is {delta:g}, FIRSTX, LASTX and NPOINTS give {step:g}; these are used")
            )
    elif delta is not None:
        step = delta
    elif last is not None and n > 1:
        step = (last - first) / (n - 1)
    elif len(stated) > 1 and table.starts[-1] > table.starts[0]:
        step = (stated[-1] - stated[0]) / (table.starts[-1] - table.starts[0])
        notes.append(("jcamp_step", "LASTX and DELTAX are missing; the spacing is taken from the table's lines"))
    else:
        raise InputError("LASTX is missing", "give FIRSTX, LASTX and NPOINTS", file=file)
    if not step and n > 1:
        raise InputError("FIRSTX and LASTX are equal", "give the first and the last abscissa", file=file)
    x = np.linspace(first, last, n) if points == n > 1 and last is not None else first + step * np.arange(n)
    # A compressed table's line may begin at its check ordinate or after it: one step of doubt is allowed.
    off = np.abs(stated - (first + step * np.array(table.starts, dtype=float))) > 1.5 * abs(step) + 1e-6 * abs(first)
    if off.any():
        where = table.numbers[int(np.argmax(off))]
        notes.append(("jcamp_abscissa", f"the abscissa on line {where} does not agree with FIRSTX, LASTX and NPOINTS"))
    return x


def _pairs(block: _Block, file: str) -> NDArray[np.float64]:
    """Read the lines of an (XY..XY) table, shape (n, 2), not scaled."""
    values: list[float] = []
    for number, line in block.lines:
        if not line.strip():
            continue
        row = _affn(line)
        if row is None or len(row) % 2:
            right = "write pairs x, y separated by blanks or semicolons"
            raise InputError(f"{quote(line)} is not made of pairs", right, place=f"line {number}", file=file)
        values.extend(row)
    return np.array(values).reshape(-1, 2)


def _conditions(block: _Block, notes: list[Note]) -> dict[str, Any]:
    """Take the measuring conditions from labels and comments."""
    header: dict[str, Any] = {}
    for label, (text, _) in block.labels.items():
        bare = label.lstrip(".$")
        number = re.match(r"([+-]?(?:\d+(?:[.,]\d*)?|[.,]\d+)(?:[eE][+-]?\d+)?)\s*([A-Za-z]+)?", text)
        key = {
            "MICROWAVEFREQUENCY": "frequency",
            "FREQUENCY": "frequency",
            "TEMPERATURE": "temperature",
            "MODULATIONAMPLITUDE": "modulation",
            "MODULATION": "modulation",
            "ANGLE": "angle",
        }.get(bare)
        if key and number:
            unit = number[2]
            if bare == "MICROWAVEFREQUENCY" and unit is None and float(number[1].replace(",", ".")) < 1e3:
                unit = "GHz"  # the label has no place for a unit, and a number below 1000 can be nothing else
            put(header, notes, key, number[1], unit)
        elif bare in ("DETECT", "MICROWAVE"):
            understand(f"{bare.lower()} {text.lower()}", header, notes)
    for line in [*block.comments, *block.labels.get("COMMENTS", ("", 0))[0].split("\n")]:
        extra: dict[str, Any] = {}
        understand(line, extra, [])
        for key, value in extra.items():  # labels win over comments
            header.setdefault(key, value)
    if block.labels.get("TITLE", ("", 0))[0]:
        header["title"] = block.labels["TITLE"][0].split("\n")[0]
    return header


def _choose(blocks: list[_Block], notes: list[Note], file: str) -> _Block:
    """Return the first block with a table."""
    tables = [block for block in blocks if block.table]
    if not tables:
        other = next(
            (k for b in blocks for k in ("NTUPLES", "DATATABLE", "XYPOINTS", "PEAKASSIGNMENTS") if k in b.labels), ""
        )
        found = f"holds {other}, which is not read" if other else "holds no table of data"
        raise InputError(found, "give a block with XYDATA, XYPOINTS or PEAK TABLE", file=file)
    if len(tables) > 1:
        title = tables[0].labels.get("TITLE", ("", 0))[0]
        notes.append(("jcamp_blocks", f"the file holds {len(tables)} data blocks; the first, {quote(title)}, is read"))
    if not tables[0].ended:
        notes.append(("jcamp_end", "##END= is missing: the file may have been cut short"))
    return tables[0]


def read_jcamp(content: bytes, file: str, sha256: str = "") -> RawTrace:
    """Read the first data block of a JCAMP-DX file.

    Raises
    ------
    InputError
        With the line and what stood there.
    """
    notes: list[Note] = []
    block = _choose(_blocks(decode(content, file)), notes, file)
    if re.search(r"\d,\d", block.labels.get("FIRSTX", ("", 0))[0]):  # written with decimal commas
        block.lines = [(number, line.replace(",", ".")) for number, line in block.lines]
    yfactor = _number(block, "YFACTOR", file) or 1.0
    if block.form.startswith("(X++(Y..Y))"):
        table = _ordinates(block, notes, file)
        data = np.column_stack([_abscissas(block, table, notes, file), table.values * yfactor])
    elif block.form.startswith(("(XY..XY)", "(XYW..XYW)")) and "W" not in block.form:
        data = _pairs(block, file) * np.array([_number(block, "XFACTOR", file) or 1.0, yfactor])
        points = _number(block, "NPOINTS", file)
        if points is not None and points != len(data):
            notes.append(("jcamp_points", f"NPOINTS is {points:g}, the table holds {len(data)} points"))
    else:
        found, line = f"{block.table} = {quote(block.form)} is not read", block.labels[block.table][1]
        raise InputError(found, "give (X++(Y..Y)) or (XY..XY)", place=f"line {line}", file=file)
    if len(data) == 0:
        line = block.labels[block.table][1]
        raise InputError(f"{block.table} is empty", "give at least two points", place=f"line {line}", file=file)
    missing = np.isnan(data[:, 1])
    if missing.any():
        notes.append(("jcamp_missing", f"{missing.sum()} points have no ordinate and are left out"))
        data = data[~missing]
    if len(data) == 0 or not np.isfinite(data).all():
        raise InputError("the table holds no finite points", "write finite numbers", file=file)
    units = tuple(tidy_unit(block.labels.get(label, ("", 0))[0].split("\n")[0]) for label in ("XUNITS", "YUNITS"))
    x_name = "field" if units[0] in ("T", "mT", "G") else "x"
    return RawTrace(data, (x_name, "signal"), units, _conditions(block, notes), sha256, file, tuple(notes), "JCAMP-DX")
