"""`report.html` of a batch: what failed, the trends, a choice of the fits, and the whole table on one page.

It is made from the files that a batch leaves (`summary.csv`, `units.json`, `<trace>/curves.csv`), so that it can
be made again at any time.  Thousands of traces stay readable: the fits shown are a choice, and the page says which.
"""

from __future__ import annotations

import csv
import json
import math
from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from html import escape
from pathlib import Path
from urllib.parse import quote

import numpy as np
from numpy.typing import NDArray

from spinfit.errors import InputError, on_one_line
from spinfit.files.atomic import write_text
from spinfit.report.numbers import short, with_uncertainty
from spinfit.report.page import Raw, document, listed, paragraph, section, table
from spinfit.report.svg import Panel, drawing, span, text
from spinfit.report.svg_figures import legend, swatch

Array = NDArray[np.float64]

GOOD = "good"
UNCERTAINTY = "_uncertainty"
MOST_ROWS = 20_000
"""Rows of the table in the page; a browser is slow with more."""
MOST_TRENDS = 24
MOST_FITS = 48
MOST_REASONS = 200
# Of the fits shown: how many at most are shown for being bad, outlying, or the worst of the good ones.
_BAD, _OUTLYING, _WORST = 12, 12, 6
# Columns that are no results and are of no use on a page.
_LEFT_OUT = ("hash", "converged", "free_parameters")
# Numbers of which nobody needs more than four digits.
_ROUGH = ("chi2_reduced", "noise", "seconds")
# What a row is called by, and words rather than numbers.
_WORDS = ("trace", "status", "outlier", "warnings", "reason")
_LOOKS = {"good": "measured", "outlier": "fitted", "bad": "unused"}
_DEFAULT_AGAINST = ("temperature", "temperature_K")


@dataclass(frozen=True)
class Summary:
    """A batch's table.

    Attributes
    ----------
    rows : list of mapping of column -> text
    columns : tuple of str
    numbers : mapping of column -> ndarray
        The columns that hold numbers only; NaN for what is missing.
    parameters : tuple of str
        Columns that have an uncertainty beside them.
    units : mapping of column -> unit
    """

    rows: list[dict[str, str]]
    columns: tuple[str, ...]
    numbers: Mapping[str, Array]
    parameters: tuple[str, ...]
    units: Mapping[str, str]

    def title(self, column: str) -> str:
        """Return a column's name with its unit."""
        unit = self.units.get(column, "")
        return f"{column} / {unit}" if unit else column

    def bad(self, n: int) -> bool:
        """Say whether a row is anything but good."""
        return self.rows[n].get("status", GOOD) != GOOD

    def outlying(self, n: int) -> list[str]:
        """Return the parameters whose values stand out in a row."""
        return self.rows[n].get("outlier", "").split()


def read_summary(folder: Path) -> Summary:
    """Read the table of a batch's folder.

    Raises
    ------
    InputError
        When it is missing or no table.
    """
    path = folder / "summary.csv"
    try:
        with open(path, encoding="utf-8", newline="") as stream:
            reader = csv.DictReader(stream)
            columns = tuple(reader.fieldnames or ())
            rows = [{key: value or "" for key, value in row.items() if key is not None} for row in reader]
    except (OSError, UnicodeDecodeError, csv.Error) as error:
        raise InputError(f"cannot be read ({error})", "give the folder of a batch", file=path) from error
    if "trace" not in columns:
        raise InputError('has no column "trace"', "give the folder of a batch", file=path)
    numbers = {name: found for name in columns if (found := _numbers(rows, name)) is not None}
    parameters = tuple(name for name in columns if name + UNCERTAINTY in columns and name in numbers)
    return Summary(rows, columns, numbers, parameters, _units(folder))


def _numbers(rows: Sequence[Mapping[str, str]], name: str) -> Array | None:
    """Return a column of numbers, or None where it holds anything else, or nothing."""
    if name in _WORDS:
        return None
    try:
        values = np.array([float(row[name]) if row[name] else math.nan for row in rows], dtype=float)
    except (ValueError, KeyError):
        return None
    return values if np.isfinite(values).any() else None


def _units(folder: Path) -> dict[str, str]:
    try:
        found = json.loads((folder / "units.json").read_text(encoding="utf-8"))
    except (OSError, ValueError, RecursionError):
        return {}
    return {str(key): str(unit) for key, unit in found.items()} if isinstance(found, dict) else {}


# ---------------------------------------------------------------- the table


def _place(folder: Path, name: str) -> Path | None:
    """Return a trace's folder; None for a name that does not lead into the batch's."""
    place = folder / name
    return place if name and Path(name).name == name and name not in (".", "..") and place.is_dir() else None


def _name_cell(folder: Path, name: str) -> str:
    place = _place(folder, name)
    if place is not None and (place / "report.html").is_file():
        return f'<td><a href="{escape(quote(name))}/report.html">{escape(name)}</a></td>'
    return f"<td>{escape(name)}</td>"


def _shown_columns(summary: Summary) -> list[str]:
    """Return the table's columns: uncertainties stand in their values' cells."""
    beside = {name + UNCERTAINTY for name in summary.parameters}
    return ["trace", *(c for c in summary.columns if c not in beside and c not in _LEFT_OUT and c != "trace")]


def _cell(summary: Summary, n: int, column: str) -> str:
    row = summary.rows[n]
    if column not in summary.numbers:
        kind = ' class="l long"' if column in ("warnings", "reason") else ' class="l"'
        return f"<td{kind}>{escape(row.get(column, ''))}</td>"
    value = float(summary.numbers[column][n])
    if not math.isfinite(value):
        return '<td data-v=""></td>'
    if column not in summary.parameters:
        return f'<td data-v="{value!r}">{escape(short(value, 4 if column in _ROUGH else 7))}</td>'
    sigma = _sigma(summary, n, column)
    more = f' data-u="{sigma!r}"' if math.isfinite(sigma) else ""
    more += ' class="out"' if column in summary.outlying(n) else ""
    return f'<td data-v="{value!r}"{more}>{escape(with_uncertainty(value, sigma))}</td>'


def _sigma(summary: Summary, n: int, column: str) -> float:
    beside = summary.numbers.get(column + UNCERTAINTY)
    return math.nan if beside is None else float(beside[n])


def _rows(summary: Summary, folder: Path) -> str:
    columns = _shown_columns(summary)
    heads = []
    for column in columns:
        kind = ' data-kind="number"' if column in summary.numbers else ' class="l"'
        title = escape(summary.title(column))
        heads.append(f'<th{kind} data-title="{title}">{title}</th>')
    lines = []
    for n in range(min(len(summary.rows), MOST_ROWS)):
        kind = "bad" if summary.bad(n) else "outlier" if summary.outlying(n) else "good"
        cells = _name_cell(folder, summary.rows[n]["trace"])
        cells += "".join(_cell(summary, n, column) for column in columns[1:])
        lines.append(f'<tr data-kind="{kind}">{cells}</tr>')
    more = len(summary.rows) - MOST_ROWS
    said = paragraph(f"{more} more rows are in summary.csv.", "quiet") if more > 0 else ""
    return (
        '<p class="tools"></p><div class="wide"><table class="rows"><thead><tr>'
        + "".join(heads)
        + "</tr></thead>\n<tbody>"
        + "\n".join(lines)
        + f"</tbody></table></div>{said}"
    )


# ---------------------------------------------------------------- trends


def _against(summary: Summary) -> str:
    """Return the column that trends are drawn against at first: a temperature, else one of the user's own; else ""."""
    for name in _DEFAULT_AGAINST:
        if name in summary.numbers:
            return name
    results = {"frequency", "angle", "chi2_reduced", "noise", "points", "seconds", *_LEFT_OUT, *summary.parameters}
    results |= {name + UNCERTAINTY for name in summary.parameters}
    own = [name for name in summary.columns if name in summary.numbers and name not in results]
    varying = [name for name in (*own, "angle", "frequency") if name in summary.numbers]
    return next((name for name in varying if np.nanmax(summary.numbers[name]) > np.nanmin(summary.numbers[name])), "")


def _certain(sigma: Array) -> NDArray[np.bool_]:
    """Say which values are about as well known as the others: a few uncertain ones would stretch an axis."""
    known = sigma[np.isfinite(sigma)]
    return ~(sigma > 4 * np.median(known)) if known.size else np.ones(len(sigma), dtype=bool)


def _range(values: Array, sigma: Array, calm: NDArray[np.bool_]) -> tuple[float, float]:
    """Return the ends of a trend's axis: calm values with their bars, and others unless they would flatten these."""
    known = np.isfinite(values)
    base = known & calm if (known & calm).any() else known
    bar = np.nan_to_num(sigma[base])
    ends = np.concatenate([values[base] - bar, values[base] + bar])
    low, high = float(ends.min()), float(ends.max())
    reach = 1.5 * (high - low)
    near = values[known & (values >= low - reach) & (values <= high + reach)]
    return span(near, ends, room=0.05)


def _trend(summary: Summary, column: str, against: str, number: int) -> str:
    """Return one parameter against the column; points beyond the axis stand at its edge."""
    y = summary.numbers[column]
    x = summary.numbers[against] if against else np.arange(1.0, len(y) + 1)
    rows = range(len(y))
    bad = np.array([summary.bad(n) for n in rows])
    out = np.array([column in summary.outlying(n) for n in rows]) & ~bad
    kinds = {"bad": bad, "outlier": out, "good": ~bad & ~out}
    sigma = summary.numbers.get(column + UNCERTAINTY, np.full(len(y), math.nan))
    low, high = _range(y, sigma, kinds["good"] & _certain(sigma))
    panel = Panel(96, 8, 272, 150, span(x, room=0.04), (low, high))
    inside = np.clip(y, low, high)
    known = np.isfinite(x)
    for kind, which in kinds.items():
        here = which & known
        ends = [np.clip(y[here] + sign * sigma[here], low, high) for sign in (-1, 1)]
        panel.bars(x[here], *ends, f"{_LOOKS[kind]} thin", curve=f"{kind} bars", always=True)
        panel.dots(x[here], inside[here], f"{_LOOKS[kind]} small", curve=kind, always=True)
    panel.y_axis(summary.title(column), most=4)
    panel.x_axis("", most=4)
    title = summary.title(against) if against else "row of the table"
    more = f'data-column="{number}"'
    panel.frame.append(text(96 + 136, 8 + 150 + 36, title, "title below", anchor="middle"))
    return f"<figure>{drawing(380, 204, [panel], f'{column} against {title}', more)}</figure>"


def _trends(summary: Summary) -> str:
    if not summary.parameters or len(summary.rows) < 2:
        return ""
    columns, against = _shown_columns(summary), _against(summary)
    moving = [name for name in summary.parameters if np.isfinite(summary.numbers[name]).sum() > 1]
    shown = moving[:MOST_TRENDS]
    number = columns.index(against) if against else -1
    keys = [swatch(f"dots {_LOOKS[kind]}", name) for kind, name in (("good", "good"), ("outlier", "outlier"))]
    keys.append(swatch(f"dots {_LOOKS['bad']}", "not good"))
    parts = [f'<p class="against" data-column="{number}"></p>', legend(keys)]
    parts.append('<div class="several">')
    parts += [_trend(summary, name, against, columns.index(name)) for name in shown]
    parts.append("</div>")
    said = (
        "Bars are one standard uncertainty, with that of a field axis or frequency that may have moved all traces "
        "alike; points at an upper or lower edge lie beyond it."
    )
    if len(moving) > len(shown):
        said += f" The first {len(shown)} of {len(moving)} parameters are drawn."
    return "".join(parts) + paragraph(said, "quiet")


# ---------------------------------------------------------------- the fits


def _chosen(summary: Summary, candidates: Sequence[int]) -> list[tuple[int, str]]:
    """Return (row, why) of the fits to show: bad, outlying, worst, then evenly from the others."""
    if len(candidates) <= MOST_FITS:
        return [(n, _why(summary, n)) for n in candidates]
    bad = [n for n in candidates if summary.bad(n)]
    out = [n for n in candidates if not summary.bad(n) and summary.outlying(n)]
    rest = [n for n in candidates if not summary.bad(n) and not summary.outlying(n)]
    chi2 = summary.numbers.get("chi2_reduced")
    worst = sorted(rest, key=lambda n: -np.nan_to_num(chi2[n], nan=-1.0))[:_WORST] if chi2 is not None else []
    taken = [*bad[:_BAD], *out[:_OUTLYING], *worst]
    left = [n for n in rest if n not in set(worst)]
    wanted = min(MOST_FITS - len(taken), len(left))
    even = [left[k] for k in np.linspace(0, len(left) - 1, wanted).astype(int)] if wanted > 0 else []
    return [(n, "largest chi-square" if n in worst else _why(summary, n)) for n in dict.fromkeys([*taken, *even])]


def _why(summary: Summary, n: int) -> str:
    if summary.bad(n):
        return summary.rows[n].get("status", "")
    out = summary.outlying(n)
    return "outlier: " + " ".join(out[:3]) + (" ..." if len(out) > 3 else "") if out else ""


def read_curves(path: Path) -> tuple[Array, Array, Array] | None:
    """Return field, measured and fitted of a `curves.csv`'s first trace; None where there are none."""
    try:
        with open(path, encoding="utf-8", newline="") as stream:
            reader = csv.reader(stream)
            head = next(reader, [])
            places = [head.index(name) for name in ("field_mT", "measured", "fitted")]
            which = head.index("trace") if "trace" in head else None
            cells: list[list[float]] = []
            first = None
            for row in reader:
                if which is not None:
                    first = row[which] if first is None else first
                    if row[which] != first:
                        break
                cells.append([float(row[k]) if row[k] else math.nan for k in places])
    except (OSError, ValueError, IndexError, csv.Error):
        return None
    data = np.array(cells, dtype=float).reshape(-1, 3)
    known = np.isfinite(data[:, 0]) & np.isfinite(data[:, 1])
    return (data[known, 0], data[known, 1], data[known, 2]) if known.sum() > 1 else None


def _fit(folder: Path, summary: Summary, n: int, why: str) -> str:
    """Return a small picture of one fit; empty where its curves are not there."""
    name = summary.rows[n]["trace"]
    found = read_curves(folder / name / "curves.csv")
    if found is None:
        return ""
    field, measured, fitted = found
    panel = Panel(2, 2, 236, 118, (float(field[0]), float(field[-1])), span(measured, fitted, room=0.04))
    panel.line(field, measured, "measured thin", columns=180)
    panel.line(field, fitted, "fitted thin", columns=180)
    panel.x_axis("", most=3)
    chi2 = summary.rows[n].get("chi2_reduced", "")
    said = [f"reduced chi-square {short(float(chi2), 3)}"] if _is_number(chi2) else []
    said += [why] if why else []
    head = f"<figcaption><b>{escape(name)}</b><br>{escape('; '.join(said))}</figcaption>"
    return f"<figure>{head}{drawing(246, 142, [panel], f'{name}: measured and fitted')}</figure>"


def _is_number(cell: str) -> bool:
    try:
        return math.isfinite(float(cell))
    except ValueError:
        return False


def _fits(folder: Path, summary: Summary) -> str:
    with_curves = [n for n, row in enumerate(summary.rows) if row.get("status") not in ("failed", "not run")]
    with_curves = [n for n in with_curves if _place(folder, summary.rows[n]["trace"]) is not None]
    chosen = _chosen(summary, with_curves)
    drawn = [picture for n, why in chosen if (picture := _fit(folder, summary, n, why))]
    if not drawn:
        return ""
    said = f"{len(drawn)} of {len(with_curves)} fits; the abscissa is the magnetic field / mT."
    if len(with_curves) > len(chosen):
        said += " Shown are those that went wrong, outliers, the largest chi-squares, and others evenly from the table."
    keys = legend([swatch("measured", "measured"), swatch("fitted", "fitted")])
    return keys + f'<div class="fits">{"".join(drawn)}</div>' + paragraph(said, "quiet")


# ---------------------------------------------------------------- what went wrong, and the whole


def _wrong(summary: Summary) -> str:
    """Return what went wrong, each row with its reason."""
    bad = [n for n in range(len(summary.rows)) if summary.bad(n)]
    rows = []
    for n in bad[:MOST_REASONS]:
        row = summary.rows[n]
        reason = row.get("reason", "") or row.get("warnings", "")
        rows.append([row["trace"], row.get("status", ""), Raw(f'<span class="reason">{escape(reason)}</span>')])
    if not rows:
        return ""
    more = len(bad) - len(rows)
    said = paragraph(f"{more} more are in the table.", "quiet") if more > 0 else ""
    return table(["trace", "status", "reason"], rows, left=(0, 1, 2)) + said


def _counts(summary: Summary) -> list[str]:
    found = Counter(row.get("status", "") or "unknown" for row in summary.rows)
    words = [f"{count} {status}" for status, count in found.most_common()]
    out = sum(bool(summary.outlying(n)) for n in range(len(summary.rows)))
    said = [f"{len(summary.rows)} traces: {', '.join(words)}."]
    if out:
        said.append(f"{out} hold a value that stands far from the others: marked as outliers, not left out or changed.")
    warned = Counter(code for row in summary.rows for code in row.get("warnings", "").split())
    if warned:
        listing = ", ".join(f"{code} ({count})" for code, count in warned.most_common(12))
        said.append(f"Warnings, with the number of traces: {listing}.")
    return said


def batch_report_text(folder: Path) -> str:
    """Return the page of a batch's folder (see `write_batch_report`)."""
    summary = read_summary(folder)
    name = on_one_line(folder.resolve().name) or "batch"
    body = [
        f"<h1>{escape(name)}</h1>",
        listed(_counts(summary)),
        section("What went wrong", _wrong(summary)),
        section("Trends", _trends(summary)),
        section("Fits", _fits(folder, summary)),
        section("All traces", _rows(summary, folder)),
    ]
    return document(f"{name}: batch", body, scripts=("drawing.js", "batch.js"), broad=True)


def write_batch_report(folder: Path) -> Path:
    """Write `report.html` into a batch's folder, from the files that are there, and return its path.

    Parameters
    ----------
    folder : Path
        With `summary.csv`; `units.json` and a folder for each trace where there are any.

    Raises
    ------
    InputError
        When there is no table, or the page cannot be written.
    """
    path = folder / "report.html"
    write_text(path, batch_report_text(folder))
    return path
