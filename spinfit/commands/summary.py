"""``spinfit summary``: the table of a batch, sorted, filtered, drawn."""

from __future__ import annotations

import argparse
import json
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from spinfit.commands.screen import Screen
from spinfit.errors import InputError, nearest

NAME = "summary"
SUMMARY = "the table of a batch: sorted, filtered, drawn"
EXAMPLES = (
    "spinfit summary results",
    'spinfit summary results --where "cu.g_z > 2.3 and status = good" --sort cu.g_z --reverse',
    "spinfit summary results --columns temperature,cu.g_z,cu.fraction",
    "spinfit summary results --plot g.png --x temperature --y cu.g_z",
)
UNCERTAINTY = "_uncertainty"
# Columns that only matter once something is wrong are left to --columns.
_QUIET = ("frequency", "converged", "noise", "points", "free_parameters", "hash")


def options(parser: argparse.ArgumentParser) -> None:
    """Add the command's arguments."""
    parser.add_argument("folder", metavar="DIR", help="folder of a batch")
    parser.add_argument("--where", metavar="CONDITION", help='only rows such as "cu.g_z > 2.3 and not outlier ~ cu"')
    parser.add_argument("--sort", metavar="COLUMN", help="by one or more columns, a,b")
    parser.add_argument("--reverse", action="store_true", help="the largest first")
    parser.add_argument("--columns", metavar="NAMES", help="which columns, separated by commas; all lists every one")
    parser.add_argument("--plot", metavar="FILE", help="draw one column against another (.png, .svg or .pdf)")
    parser.add_argument("--x", metavar="COLUMN", help="across; the row's number without it")
    parser.add_argument("--y", metavar="COLUMN", help="up, with its uncertainty as bars")


def run(args: argparse.Namespace, screen: Screen) -> int:
    """Read, choose, show."""
    from spinfit.batch.query import Table, condition, sorted_rows, typed

    path = Path(args.folder)
    table = Table(path / "summary.csv" if path.is_dir() or not path.suffix else path)
    kept = None if args.where is None else condition(args.where, table.columns)
    if args.reverse and args.sort is None:
        raise InputError("says how to sort", "add --sort COLUMN", place="--reverse")
    columns = _columns(args.columns, table.columns)
    _check_plot(args, table.columns)
    rows: Sequence[Mapping[str, str]] = [row for row in table if kept is None or kept(row)]
    if args.sort is not None:
        rows = sorted_rows(rows, args.sort, table.columns, reverse=args.reverse)
    units = _units(table.path.parent)
    if args.plot is not None:
        _draw(args, rows, units)
    if screen.as_json:
        wanted = table.columns if args.columns is None else _with_uncertainties(columns, table.columns)
        screen.emit([{name: typed(row[name]) for name in wanted} for row in rows])
    else:
        _print(screen, rows, columns, units)
    return 0


def _columns(text: str | None, known: Sequence[str]) -> list[str]:
    """Return the columns to show; uncertainties stand beside their values."""
    values = [name for name in known if not _is_uncertainty(name, known)]
    if text is None:
        return [name for name in values if name not in _QUIET]
    if text == "all":
        return values
    wanted = [name.strip() for name in text.split(",") if name.strip()]
    for name in wanted:
        _known(name, known, "--columns")
    return list(dict.fromkeys(["trace", *wanted]))


def _is_uncertainty(name: str, known: Sequence[str]) -> bool:
    return name.endswith(UNCERTAINTY) and name.removesuffix(UNCERTAINTY) in known


def _with_uncertainties(columns: Sequence[str], known: Sequence[str]) -> list[str]:
    both = [each for name in columns for each in (name, name + UNCERTAINTY) if each in known]
    return list(dict.fromkeys(both))


def _known(name: str, known: Sequence[str], option: str) -> None:
    if name not in known:
        raise InputError(f'there is no column "{name}"', nearest(name, known), place=option)


def _check_plot(args: argparse.Namespace, known: Sequence[str]) -> None:
    """Refuse a picture that cannot be drawn."""
    if args.plot is None:
        for option, given in (("--x", args.x), ("--y", args.y)):
            if given is not None:
                raise InputError("says what to draw", "add --plot FILE.png", place=option)
        return
    from spinfit.commands.drawing import picture_kind

    picture_kind(args.plot)
    if args.y is None:
        raise InputError("is missing", "name the column to draw, such as --y cu.g_z", place="--y")
    for option, name in (("--x", args.x), ("--y", args.y)):
        if name is not None:
            _known(name, known, option)


def _units(folder: Path) -> dict[str, str]:
    """Return the unit of each column; none where the file that says so is not there."""
    try:
        units = json.loads((folder / "units.json").read_text(encoding="utf-8"))
    except (OSError, ValueError):
        return {}
    return {str(key): str(unit) for key, unit in units.items()} if isinstance(units, dict) else {}


def _print(screen: Screen, rows: Sequence[Mapping[str, str]], columns: Sequence[str], units: Mapping[str, str]) -> None:
    from spinfit.report.layout import aligned, table

    filled = [name for name in columns if name == "trace" or any(row[name] for row in rows)]
    left, texts = [], []
    for place, name in enumerate(filled):
        cells = [_cell(row, name) for row in rows]
        if any(row[name] and not _is_number(row[name]) for row in rows):
            left.append(place)
        else:
            cells = aligned(cells)
        texts.append(cells)
    headings = [f"{name} / {units[name]}" if units.get(name) else name for name in filled]
    screen.say(table(headings, list(zip(*texts, strict=True)), left=tuple(left)))
    counts: dict[str, int] = {}
    for row in rows:
        counts[row["status"]] = counts.get(row["status"], 0) + 1
    screen.say()
    screen.say(", ".join(f"{number} {status}" for status, number in counts.items()) or "no row")


def _is_number(cell: str) -> bool:
    from spinfit.batch.query import number_of

    return number_of(cell) is not None


def _cell(row: Mapping[str, str], name: str) -> str:
    """Return a cell for people: a value with its uncertainty in parentheses, seconds and chi-squared short."""
    from spinfit.batch.query import number_of
    from spinfit.report.numbers import short, with_uncertainty

    value = number_of(row[name])
    if value is None or name == "hash":
        return row[name]
    if name in ("seconds", "chi2_reduced", "noise"):
        return short(value, 3)
    return with_uncertainty(value, number_of(row.get(name + UNCERTAINTY, "")))


def _draw(args: argparse.Namespace, rows: Sequence[Mapping[str, str]], units: Mapping[str, str]) -> None:
    import numpy as np

    from spinfit.batch.query import number_of
    from spinfit.commands.drawing import save_picture
    from spinfit.report.column_plot import column_figure

    def numbers(name: str) -> Any:
        found = [number_of(row.get(name, "")) for row in rows]
        return np.array([np.nan if value is None else value for value in found], dtype=float)

    x = np.arange(1.0, len(rows) + 1) if args.x is None else numbers(args.x)
    y = numbers(args.y)
    drawn = np.isfinite(x) & np.isfinite(y)
    if not drawn.any():
        raise InputError("no row has numbers in both columns", "name columns of numbers", place="--plot")
    labels = tuple(f"{n} / {units[n]}" if units.get(n) else n for n in (args.x or "row", args.y))
    bars = [None if n is None else numbers(n + UNCERTAINTY) for n in (args.x, args.y)]
    out = np.array([args.y in row.get("outlier", "").split() or args.x in row["outlier"].split() for row in rows])
    figure = column_figure(
        x[drawn],
        y[drawn],
        labels=(labels[0], labels[1]),
        x_uncertainty=None if bars[0] is None else bars[0][drawn],
        y_uncertainty=None if bars[1] is None else bars[1][drawn],
        marked=out[drawn],
    )
    save_picture(args.plot, figure)
