"""Run the benchmarks and print one table a module: ``python -m benchmarks [NAME...] [--json FILE]``.

A module ``benchmarks/NAME.py`` takes part by having ``rows()``, which returns or yields
`benchmarks.measure.Row`.  Without names every such module runs.
"""

from __future__ import annotations

import argparse
import dataclasses
import importlib
import json
import platform
import sys
from collections.abc import Iterable
from pathlib import Path

import numpy as np
import scipy
from rich.console import Console
from rich.table import Table

from benchmarks.measure import Row, unit

OWN = {"__init__", "__main__", "measure"}


def available() -> list[str]:
    """Names of the modules that can be run."""
    return sorted(path.stem for path in Path(__file__).parent.glob("*.py") if path.stem not in OWN)


def seconds(value: float | None) -> str:
    """Write a time in the unit in which it is easiest to read."""
    if value is None:
        return "-"
    for factor, name in ((1.0, "s"), (1e3, "ms"), (1e6, "us")):
        if value * factor >= 1:
            return f"{value * factor:.3g} {name}"
    return f"{value * 1e9:.3g} ns"


def plain_number(value: float | None, form: str = ".0f") -> str:
    """Write a number, or a dash where there is none."""
    return "-" if value is None else format(value, form)


def cells(row: Row) -> list[str]:
    """Return the cells of one row, in the order of `HEADER`."""
    goals = [f"{row.goal:.0f}"] if row.goal is not None else []
    goals += [f"{row.goal_floor:g} x floor"] if row.goal_floor is not None else []
    verdict = {None: "", True: " met", False: " MISSED"}[row.met]
    return [
        row.system,
        plain_number(row.error, ".1e"),
        seconds(row.timing.wall),
        plain_number(row.diagonalisations),
        seconds(row.floor),
        plain_number(row.over_floor, ".2g"),
        plain_number(row.timing.units),
        (", ".join(goals) or "-") + verdict,
        seconds(row.plain),
        row.note,
    ]


HEADER = ("system", "error", "wall", "diag.", "floor", "wall/floor", "wall/unit", "goal", "plain way", "note")


def show(name: str, rows: list[Row], console: Console) -> None:
    """Print the table of one module."""
    table = Table(title=name, title_justify="left")
    for column in HEADER:
        table.add_column(column, justify="left" if column in ("system", "goal", "note") else "right")
    for row in rows:
        table.add_row(*cells(row))
    console.print(table)


def record(name: str, row: Row) -> dict[str, object]:
    """Return one row as plain data for a JSON file."""
    own = dataclasses.asdict(row)
    return {"module": name, **own, "floor": row.floor, "over_floor": row.over_floor, "met": row.met}


def collect(module_rows: Iterable[Row]) -> list[Row]:
    """Gather rows as they come, saying on standard error which one is done."""
    rows = []
    for row in module_rows:
        print(f"  {row.system}: {seconds(row.timing.wall)}", file=sys.stderr, flush=True)
        rows.append(row)
    return rows


def main(arguments: list[str] | None = None) -> int:
    """Run the named modules (all without names); return the exit code: 1 when a goal is missed."""
    parser = argparse.ArgumentParser(prog="python -m benchmarks", description=__doc__.splitlines()[0])
    parser.add_argument("names", nargs="*", help=f"modules to run, of: {', '.join(available()) or 'none yet'}")
    parser.add_argument("--json", type=Path, metavar="FILE", help="write the figures there too")
    given = parser.parse_args(arguments)
    unknown = sorted(set(given.names) - set(available()))
    if unknown:
        parser.error(f"there is no benchmark {', '.join(unknown)}; known: {', '.join(available())}")

    # Not narrower than the table, so that a log file holds whole rows.
    console = Console(width=max(Console().width, 170))
    versions = f"Python {platform.python_version()}, numpy {np.__version__}, scipy {scipy.__version__}"
    console.print(f"{versions}; one thread; unit: one 6x6 complex Hermitian eigh of a batch, now {seconds(unit())}")
    records: list[dict[str, object]] = []
    for name in given.names or available():
        rows = collect(importlib.import_module(f"benchmarks.{name}").rows())
        show(name, rows, console)
        records += [record(name, row) for row in rows]
    if given.json is not None:
        given.json.write_text(json.dumps(records, indent=1) + "\n", encoding="utf-8")
    return 1 if any(entry["met"] is False for entry in records) else 0


if __name__ == "__main__":
    sys.exit(main())
