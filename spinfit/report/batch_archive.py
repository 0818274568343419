"""`batch.h5`: every fit of a batch in one file, made from the folders of the single fits and their table.

Each fit is an NXentry under the name of its folder, laid out as its `outcome.h5` is, with the digest of that;
`spinfit.summary` is an NXentry with the table, and opens on its first fitted g against the row.  One fit is in memory
at a time, and the file can be made again at any time.
"""

from __future__ import annotations

import csv
import hashlib
import json
import math
import re
from collections.abc import Iterator, Mapping
from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from spinfit.errors import InputError
from spinfit.files.hdf5_writing import whole_hdf5
from spinfit.files.raw import quote
from spinfit.files.tree import Attribute, Data, Group, copy_tree, is_intact, sealed, write_tree
from spinfit.report.archive import BATCH_FORMAT_VERSION, FORMAT, KIND, as_entry, collection, make_entry, nxdata
from spinfit.report.archive_reading import archive_from, kind_of_archive, read_group

ARCHIVE = "batch.h5"
SUMMARY = "summary.csv"
UNITS = "units.json"
SINGLE = "outcome.h5"
SUMMARY_GROUP = "spinfit.summary"

# Of the run itself: they would change the file from one run to the next.
_NOT_KEPT = ("seconds",)
_TEXTS = ("trace", "status", "outlier", "warnings", "hash", "reason")
_NUMBER = re.compile(r"[+-]?(0|[1-9][0-9]*)(\.[0-9]*)?(?:[eE][+-]?[0-9]+)?")
_LONGEST_CELL = 2**16
_LONGEST_UNITS = 2**24
_MOST_ROWS = 1_000_000


@dataclass(frozen=True)
class BatchSummary:
    """What a batch's archive says of itself.

    Attributes
    ----------
    fits : tuple of str
        Names of the fits that are in it.
    skipped : mapping of name -> reason
        Fits of the table whose single archive could not be read.
    table : mapping of column -> list
        `summary.csv`: numbers (NaN for an empty cell) or texts.
    """

    fits: tuple[str, ...]
    skipped: Mapping[str, str]
    table: Mapping[str, list[Any]]


def _rows(folder: Path) -> list[dict[str, str]] | None:
    """Read summary.csv; None when there is none.

    Raises
    ------
    InputError
    """
    path = folder / SUMMARY
    try:
        with open(path, encoding="utf-8", newline="") as stream:
            reader = csv.DictReader(stream)
            rows = []
            for row in reader:
                if None in row or None in row.values():
                    found = f"has {len(reader.fieldnames or ())} columns above and another number here"
                    raise InputError(found, "run the batch again", place=f"line {reader.line_num}", file=path)
                rows.append(row)
                if len(rows) > _MOST_ROWS:
                    raise InputError(f"has more than {_MOST_ROWS} rows", "split the batch", file=path)
    except FileNotFoundError:
        return None
    except (OSError, UnicodeDecodeError, csv.Error) as error:
        reason = getattr(error, "strerror", None) or error
        raise InputError(f"cannot be read ({reason})", "run the batch again", file=path) from error
    if rows and "trace" not in rows[0]:
        raise InputError("has no column trace", "run the batch again", file=path)
    return rows


def _number(cell: str) -> float | None:
    """Return what a cell says as a number; None where a number would not keep it ("007", a long whole number)."""
    if not cell:
        return math.nan
    digits = _NUMBER.fullmatch(cell)
    if digits is None or (len(digits[1]) > 15 and not digits[2]):
        return None
    value = float(cell)
    return value if math.isfinite(value) else None


def _units(folder: Path) -> dict[str, str]:
    """Return the units of the table's columns; none where they are not stated."""
    try:
        found = json.loads((folder / UNITS).read_bytes()[:_LONGEST_UNITS])
    except (OSError, ValueError, RecursionError):  # the table is complete without them
        return {}
    return {k: v for k, v in found.items() if isinstance(v, str)} if isinstance(found, dict) else {}


def _columns(rows: list[dict[str, str]]) -> dict[str, list[Any]]:
    """Return the table by columns: numbers where every cell is one or empty."""
    found: dict[str, list[Any]] = {}
    for name in rows[0] if rows else ():
        if name in _NOT_KEPT:
            continue
        cells = [row[name] for row in rows]
        numbers = [None] if name in _TEXTS else [_number(cell) for cell in cells]
        whole = None not in numbers and any(cells)
        found[name] = numbers if whole else [cell.replace("\x00", " ")[:_LONGEST_CELL] for cell in cells]
    return found


def _overview(table: Mapping[str, list[Any]], units: Mapping[str, str]) -> Group | None:
    """Return what a viewer of the batch opens on: the first g (else the first value) that has an uncertainty."""
    fitted = [
        name
        for name, column in table.items()
        if f"{name}_uncertainty" in table
        and all(isinstance(cell, float) for key in (name, f"{name}_uncertainty") for cell in table[key])
        and not all(math.isnan(cell) for cell in column)
    ]
    if not fitted:
        return None
    name = next((one for one in fitted if one.rpartition(".")[2].startswith("g")), fitted[0])
    drawn = nxdata(
        "row",
        np.arange(1, len(table[name]) + 1),
        {"value": table[name], "value_errors": table[f"{name}_uncertainty"]},
        unit="",
        signal_unit=units.get(name, ""),
        title=f"{name} of every trace, in the order of the table",
    )
    attrs = {key: value for key, value in drawn.attrs.items() if key != "auxiliary_signals"}
    return Group({**drawn.members, "name": Data(name)}, attrs)


def _summary_tree(
    table: Mapping[str, list[Any]], units: Mapping[str, str], fits: list[str], skipped: Mapping[str, str]
) -> Group:
    """Return the entry with the table."""
    columns: dict[str, Group | Data] = {}
    for number, (name, cells) in enumerate(table.items(), 1):
        numeric = all(isinstance(cell, float) for cell in cells)
        values = np.array(cells, dtype=float) if numeric else list(cells)
        # A heading is data: a name of the user's own column may hold anything.
        attrs: dict[str, Attribute] = {"units": units[name]} if units.get(name) else {}
        columns[f"column_{number}"] = collection({"name": Data(name), "values": Data(values, attrs)})
    members: dict[str, Group | Data] = {
        "title": Data("all fits of a batch"),
        "table": collection(columns),
        "fits": Data(fits),
        "skipped": collection({"name": Data(list(skipped)), "reason": Data(list(skipped.values()))}),
    }
    overview = _overview(table, units)
    if overview is None:
        return sealed(collection(members, "NXentry"))
    return sealed(collection({**members, "overview": overview}, "NXentry", default="overview"))


def _names(folder: Path, rows: list[dict[str, str]] | None) -> Iterator[tuple[str, str]]:
    """Yield the names of fits and what the table says became of each; without a table all folders are taken."""
    if rows is not None:
        yield from ((row["trace"], row.get("status", "")) for row in rows)
        return
    with suppress(OSError):
        for path in sorted(folder.iterdir()):
            if (path / SINGLE).is_file():
                yield path.name, ""


def _is_plain(name: str) -> bool:
    """Whether a name can stand for one folder in the batch's, and for one group in a file."""
    return (
        0 < len(name) <= 200
        and name.isprintable()
        and not set(name) & set('/\\:*?"<>|')
        and not name.startswith((".", "spinfit."))
    )


def _single(path: Path) -> Group:
    """Read one fit's archive and see that it holds together.

    Raises
    ------
    InputError
    """
    if kind_of_archive(path) != "fit":
        raise InputError("is no archive of a fit", "run the batch again", file=path)
    tree = read_group(path)
    archive_from(tree, str(path))
    return tree


def _is_known(single: Path, sha256: str | None) -> bytes | None:
    """Return the bytes of a fit's archive when they are those that were written; None when they may be others."""
    try:
        content = single.read_bytes() if sha256 is not None else b""
    except OSError:
        return None
    return content if sha256 is not None and hashlib.sha256(content).hexdigest() == sha256 else None


def build_batch_archive(folder: Path, known: Mapping[str, str] | None = None) -> tuple[Path, dict[str, str]]:
    """Write `batch.h5` into the folder of a batch.

    Parameters
    ----------
    folder : Path
    known : mapping of name -> SHA-256, optional
        Of the single archives as the batch wrote them.  One that still is so is copied as it stands; any other is a
        file like those of strangers, and is read and checked as such, which takes ten times as long.

    Returns
    -------
    path : Path
    skipped : dict of name -> reason
        Single archives that are damaged, missing, or cannot be named in it; the rest is kept.

    Raises
    ------
    InputError
        When there is nothing to keep, or the place cannot be written to.
    """
    folder = Path(folder)
    rows = _rows(folder)
    path = folder / ARCHIVE
    fits: dict[str, None] = {}
    skipped: dict[str, str] = {}
    with whole_hdf5(path) as (root, check):
        for name, status in _names(folder, rows):
            single = folder / name / SINGLE
            if not _is_plain(name) or name in fits:
                reason = "is there twice" if name in fits else "cannot be the name of a folder"
                skipped[quote(name, 80)] = reason
                continue
            if status and not single.is_file():
                if status in ("good", "not converged"):
                    skipped[name] = "there is no outcome.h5"
                continue
            content = _is_known(single, (known or {}).get(name))
            try:
                if content is not None:
                    make_entry(copy_tree(root, name, content))
                else:
                    tree = as_entry(_single(single))
                    write_tree(root.create_group(name), tree)
            except InputError as error:
                skipped[name] = " ".join(part for part in (error.place, error.found) if part)
                continue
            check()
            fits[name] = None
        if not fits:
            raise InputError("holds no fit that could be kept", "run spinfit batch --out here first", file=folder)
        summary = _summary_tree(_columns(rows or []), _units(folder), list(fits), skipped)
        write_tree(root.create_group(SUMMARY_GROUP), summary)
        first = SUMMARY_GROUP if "default" in summary.attrs else next(iter(fits))
        for key, value in (("NX_class", "NXroot"), ("default", first), (FORMAT, BATCH_FORMAT_VERSION), (KIND, "batch")):
            root.attrs[key] = value
    return path, skipped


def write_batch_archive(folder: Path, known: Mapping[str, str] | None = None) -> Path:
    """Write `batch.h5` into the folder of a batch and return its path (see `build_batch_archive`).

    Raises
    ------
    InputError
    """
    return build_batch_archive(folder, known)[0]


def read_batch_summary(path: str | Path) -> BatchSummary:
    """Return a batch archive's table and the names of its fits; `read_archive` with a name reads one of these.

    Raises
    ------
    InputError
    """
    tree = read_group(path, (SUMMARY_GROUP,))
    if not is_intact(tree):
        found = "its table does not hold what was written: the digest is another"
        raise InputError(f"is damaged or was changed ({found})", "make it again from the folders", file=path)

    def texts(*names: str) -> list[str]:
        node: Any = tree
        for name in names:
            node = node.members.get(name) if isinstance(node, Group) else None
        values = node.values if isinstance(node, Data) else None
        if isinstance(values, np.ndarray) and values.size == 0:
            return []
        if not isinstance(values, list):
            raise InputError("is missing", "make it again from the folders", place="/".join(names), file=path)
        return values

    table: dict[str, list[Any]] = {}
    columns = tree.members.get("table")
    for column in columns.members.values() if isinstance(columns, Group) else ():
        name, values = (column.members.get(key) for key in ("name", "values")) if isinstance(column, Group) else (0, 0)
        if isinstance(name, Data) and isinstance(name.values, str) and isinstance(values, Data):
            cells = values.values
            table[name.values] = cells.tolist() if isinstance(cells, np.ndarray) else list(cells)
    skipped = dict(zip(texts("skipped", "name"), texts("skipped", "reason"), strict=False))
    return BatchSummary(tuple(texts("fits")), skipped, table)
