"""`summary.csv`: one row a trace, made from the journal; whole or not at all."""

from __future__ import annotations

import csv
import json
import math
from array import array
from collections.abc import Iterator
from pathlib import Path
from typing import Any

from spinfit.batch.journal import Journal, Record
from spinfit.batch.outliers import outlying, robust_z
from spinfit.batch.records import FAILED, GOOD, WAITING
from spinfit.batch.tasks import Plan
from spinfit.files.atomic import whole_file, write_text
from spinfit.units import from_unit, kind_of, to_unit

SUMMARY = "summary.csv"
UNITS = "units.json"
"""The unit of each column that has one: a row of units would keep others from reading the table."""
FIRST = ("trace", "status", "outlier")
CONDITION_UNITS = {"frequency": "GHz", "temperature": "K", "angle": "deg"}
CONDITIONS = tuple(CONDITION_UNITS)
QUALITY = ("chi2_reduced", "converged", "noise", "points", "free_parameters")
LAST = (*QUALITY, "warnings", "seconds", "hash", "reason")
FIXED = (*FIRST, *CONDITIONS, *LAST)
TEXTS = ("trace", "status", "outlier", "warnings", "hash", "reason")
"""Columns that hold texts, even where every cell is empty."""
UNCERTAINTY = "_uncertainty"


class _Columns:
    """What the rows have between them: own columns, conditions, parameters with the unit each is given in."""

    def __init__(self, free: tuple[str, ...]) -> None:
        self.free = dict.fromkeys(free)
        self.conditions: set[str] = set()
        self.units: dict[str, str] = {}
        self.values: dict[str, array[float]] = {}
        self.uncertainties: dict[str, array[float]] = {}
        self.good: list[bool] = []

    def see(self, record: Record) -> None:
        """Take a row's columns, and the numbers that outliers are found from."""
        self.free |= dict.fromkeys(record.get("free", {}))
        self.conditions |= set(record.get("conditions", {}))
        row = len(self.good)
        self.good.append(record["status"] == GOOD)
        for name, (value, uncertainty, unit) in record.get("parameters", {}).items():
            if name not in self.units or (unit and not self.units[name]):
                self.units[name] = unit
            if name not in self.values:
                self.values[name], self.uncertainties[name] = array("d"), array("d")
            for column, number in ((self.values[name], value), (self.uncertainties[name], uncertainty)):
                column.extend([math.nan] * (row - len(column)))
                column.append(math.nan if number is None else converted(number, unit, self.units[name]))

    def outliers(self) -> dict[str, Any]:
        """Return, of each parameter that has any, which rows are outliers."""
        found = {}
        for name, values in self.values.items():
            missing = [math.nan] * (len(self.good) - len(values))
            z = robust_z([*values, *missing], [*self.uncertainties[name], *missing], self.good)
            which = outlying(z)
            if which.any():
                found[name] = which
        return found

    def headings(self) -> list[str]:
        """Return the table's headings, the user's own columns between what the traces are and what was found."""
        conditions = [name for name in CONDITIONS if name in self.conditions]
        return [*FIRST, *self.own().values(), *conditions, *self._parameters(), *LAST]

    def _parameters(self) -> list[str]:
        return [heading for name in self.units for heading in (name, name + UNCERTAINTY)]

    def own(self) -> dict[str, str]:
        """Return the heading of each of the user's columns: another one where a result is called the same."""
        taken = {*FIXED, *self._parameters()}
        return {name: f"{name}_given" if name in taken else name for name in self.free}


def converted(value: float, unit: str, wanted: str) -> float:
    """Return a value in another unit of the same kind; where jobs differ, the first one's unit is the column's."""
    if unit == wanted or not unit or not wanted:
        return value
    kind = kind_of(unit)
    return to_unit(from_unit(value, unit, kind), wanted, kind)


def _cell(value: Any) -> str:
    if value is None or (isinstance(value, float) and not math.isfinite(value)):
        return ""
    if isinstance(value, float):
        return repr(value)
    return " ".join(str(value).split())


def _row(record: Record, columns: _Columns, outliers: list[str]) -> dict[str, str]:
    own, units = columns.own(), columns.units
    quality = record.get("quality", {})
    cells: dict[str, Any] = {
        "trace": record["trace"],
        "status": record["status"],
        "outlier": " ".join(outliers),
        **{own[name]: cell for name, cell in record.get("free", {}).items()},
        **record.get("conditions", {}),
        **{key: quality.get(key) for key in QUALITY},
        "warnings": " ".join(record.get("warnings", ())),
        "seconds": record.get("seconds"),
        "hash": record.get("hash", ""),
        "reason": record.get("reason", ""),
    }
    for name, (value, uncertainty, unit) in record.get("parameters", {}).items():
        cells[name] = None if value is None else converted(value, unit, units[name])
        cells[name + UNCERTAINTY] = None if uncertainty is None else converted(uncertainty, unit, units[name])
    return {key: _cell(value) for key, value in cells.items()}


def _names(folder: Path, journal: Journal, plan: Plan) -> Iterator[str]:
    """Names of all rows: those of earlier batches in this folder that are still there, then the plan's."""
    for name in sorted(journal):
        if plan.get(name) is None and (folder / name).is_dir():
            yield name
    for task in plan:
        yield task.name


def _records(folder: Path, journal: Journal, plan: Plan) -> Iterator[Record]:
    for name in _names(folder, journal, plan):
        found = next(journal.records([name]), None)
        if found is None:
            task = plan.get(name)
            found = {"trace": name, "status": WAITING, "free": {} if task is None else dict(task.free)}
        yield found


def write_summary(folder: Path, journal: Journal, plan: Plan) -> tuple[dict[str, int], Path]:
    """Write the table of a batch's folder.

    One pass over the journal finds the columns and the outliers, a second one writes the rows: no more than the
    numbers of the parameters are in memory at a time.

    Returns
    -------
    counts : dict of status -> number of rows
    path : Path

    Raises
    ------
    InputError
        When it cannot be written.
    """
    columns = _Columns(plan.columns)
    counts: dict[str, int] = {}
    for record in _records(folder, journal, plan):
        columns.see(record)
        counts[record["status"]] = counts.get(record["status"], 0) + 1
    headings, outliers = columns.headings(), columns.outliers()
    path = folder / SUMMARY
    with whole_file(path) as beside, open(beside, "w", encoding="utf-8", newline="") as stream:
        writer = csv.DictWriter(stream, headings, restval="", lineterminator="\n")
        writer.writeheader()
        for number, record in enumerate(_records(folder, journal, plan)):
            named = [name for name, which in outliers.items() if which[number] and record["status"] != FAILED]
            writer.writerow(_row(record, columns, named))
    known = (
        {name: unit for name, unit in CONDITION_UNITS.items() if name in columns.conditions}
        | {"seconds": "s"}
        | columns.units
    )
    write_text(folder / UNITS, json.dumps(known, indent=1, ensure_ascii=False) + "\n")
    return counts, path
