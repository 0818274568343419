"""``[[trace]]`` and ``[[lines]]`` tables: the data files of a job with their conditions.

What the job says wins over a file's header, with a note where the two differ; what neither says is
asked for by name.
"""

from __future__ import annotations

import math
import re
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spinfit.errors import InputError, on_one_line
from spinfit.files.keys import CALIBRATION, COLUMNS, DIRECTIONS, FIELD_UNITS, LINES, SMOOTH, TRACE
from spinfit.files.raw import RawTrace
from spinfit.files.reading import Assembled, assemble, read_content
from spinfit.files.store import Store
from spinfit.files.toml_sample import conditions, parallel, plane
from spinfit.files.toml_table import Given, Table, describe
from spinfit.fitting.baseline import shortest_smoothness
from spinfit.fitting.data import Lines, Trace
from spinfit.sweep import Sample
from spinfit.units import UNITS, from_unit, to_unit

HIGHEST_ORDER = 20
_ASYMMETRY = 0.05

_SHOWN = {"frequency": "GHz", "temperature": "K", "modulation": "mT", "angle": "deg"}
_KIND = {"frequency": "frequency", "temperature": "temperature", "modulation": "field", "angle": "angle"}


def name_from(file: str) -> str:
    """Return what a trace is called after its file: the stem with other characters turned to ``_``."""
    return re.sub(r"[^A-Za-z0-9_]", "_", Path(file).stem, flags=re.ASCII) or "trace"


def _said(key: str, value: Any) -> str:
    """Write a condition for people."""
    if key not in _SHOWN:
        return f'"{value}"'
    return f"{to_unit(value, _SHOWN[key], _KIND[key]):.9g} {_SHOWN[key]}"


def _same(first: Any, second: Any) -> bool:
    if isinstance(first, float) and isinstance(second, (int, float)):
        return math.isclose(first, second, rel_tol=1e-9, abs_tol=1e-12)
    return bool(first == second)


def _read(store: Store, written: str) -> RawTrace:
    content, sha256, shown = store.load(written)
    return read_content(content, shown, sha256)


class _Source:
    """A data file's table in the job, its header, and the notes about both."""

    def __init__(self, table: Table, store: Store) -> None:
        self.table = table
        table.require("file", '"..." (relative to this file)')
        self.written = table.file_name("file") or ""
        self.raw = _read(store, self.written)
        self.name = table.name("name") or name_from(self.written)
        self.notes: list[tuple[str, str]] = list(self.raw.notes)

    def merged(self, key: str, own: Any) -> Any:
        """Return a condition: the job's, else the header's, else None."""
        header = self.raw.header.get(key)
        if own is None or header is None:
            return header if own is None else own
        if not _same(own, header):
            file = on_one_line(self.written)
            text = f"{self.name}: {key} is {_said(key, own)} in the job and {_said(key, header)} in {file}"
            self.notes.append(("header_differs", f"{text}; the job's is used"))
        return own

    def frequency(self) -> float:
        """Return the frequency in MHz, which a fit cannot do without."""
        value = self.merged("frequency", self.table.positive("frequency", "frequency"))
        if value is None:
            found = f"is missing, here and in the header of {on_one_line(self.written)}"
            raise self.table.error("frequency", found, 'write frequency = "9.4321 GHz"')
        return float(value)

    def angle_uncertainty(self, sample: Sample) -> float | None:
        """Return the uncertainty of an angle, rad, where there is an angle."""
        given = self.table.positive("angle_uncertainty", "angle", zero=True)
        if given is not None and sample.form not in ("crystal", "aligned"):
            right = 'it needs [sample] form = "crystal" or "aligned": take angle_uncertainty out'
            raise self.table.error("angle_uncertainty", f"means nothing for a {sample.form}", right)
        return given

    def shared(self, sample: Sample) -> dict[str, Any]:
        """Return what traces and tables of lines have in common; None for what is missing."""
        table = self.table
        if sample.form != "crystal":
            for key in ("axis", "from"):
                if key in table:
                    right = f'it needs [sample] form = "crystal": take {key} out'
                    raise table.error(key, f"means nothing for a {sample.form}", right)
        turning = plane(table)
        if parallel(turning["axis"] or sample.axis, turning["start"] or sample.start):
            key = "axis" if "axis" in table else "from"
            raise table.error(key, "axis and from are parallel", "write both here: from is the field at angle 0")
        scale = table.number("field_scale")
        if scale is not None and scale <= 0:
            raise table.error("field_scale", f"{scale:g}", "a scale is positive, near 1")
        return {
            **turning,
            "group": table.names("group"),
            "field_offset": table.quantity("field_offset", "field"),
            "field_scale": scale,
            "field_uncertainty": table.positive("field_uncertainty", "field", zero=True),
            "frequency_uncertainty": table.positive("frequency_uncertainty", "frequency", zero=True),
            "angle_uncertainty": self.angle_uncertainty(sample),
        }


def _without_none(values: dict[str, Any]) -> dict[str, Any]:
    return {key: value for key, value in values.items() if value is not None}


def read_trace(place: str, data: object, index: int, *, store: Store, sample: Sample, given: Given) -> Trace:
    """Read one ``[[trace]]`` and its data file.

    Parameters
    ----------
    place : str
        ``"trace.1"``.
    index : int
        Position among the traces, from 0.
    store : Store
        Where the data files come from.

    Raises
    ------
    InputError
        For wrong keys, and for whatever is wrong with the data files.
    """
    table = Table(data, place, TRACE, path=("traces", index), given=given)
    reading = _reading(table)
    own = conditions(table)
    angle = table.quantity("angle", "angle")
    if angle is not None and sample.form not in ("crystal", "aligned"):
        right = 'it needs [sample] form = "crystal" or "aligned": take angle out'
        raise table.error("angle", f"means nothing for a {sample.form}", right)
    phase = table.quantity("phase", "angle")
    under_it = _baseline(table)
    source = _Source(table, store)
    found = {key: source.merged(key, value) for key, value in own.items()}
    found["angle"] = _angle(source, sample, angle)
    found |= {"frequency": source.frequency(), "phase": phase, **source.shared(sample)}
    swept = _assemble(table, source.raw, **reading)
    background = table.file_name("background")
    under = None
    if background is not None:
        columns = {key: reading[key] for key in ("columns", "field_unit", "field_calibration")}
        empty = _assemble(table, _read(store, background), **columns)
        under = _on_fields(table, empty, swept)
    return Trace(
        name=source.name,
        field=swept.field,
        signal=swept.signal,
        used=swept.used,
        background=under,
        **_baseline_on(table, under_it, swept, found["detect"] or "derivative"),
        file=source.written,
        sha256=source.raw.sha256,
        notes=tuple(dict.fromkeys((*source.notes, *swept.notes))),
        **_without_none(found),
    )


def _assemble(table: Table, raw: RawTrace, **reading: Any) -> Assembled:
    """Make one ordered sweep; what a key of the job can put right is said at that key."""
    try:
        return assemble(raw, **reading)
    except InputError as error:
        if error.place is not None and error.place.partition(".")[0] in TRACE:
            raise InputError(error.found, error.right, place=table.at(error.place)) from None
        raise


def _on_fields(table: Table, empty: Assembled, swept: Assembled) -> NDArray[np.float64]:
    """Return the background at the trace's fields; it must reach over all that are used."""
    used = swept.field[swept.used]
    step = float(np.max(np.diff(empty.field)))
    if used[0] < empty.field[0] - step or used[-1] > empty.field[-1] + step:
        reach = f"covers {empty.field[0]:g} to {empty.field[-1]:g} mT, and {used[0]:g} to {used[-1]:g} mT are fitted"
        raise table.error("background", reach, "measure it over the same range, or set fit_range")
    return np.interp(swept.field, empty.field[~empty.glitch], empty.signal[~empty.glitch])


def _reading(table: Table) -> dict[str, Any]:
    """Return how the columns of a file become field and signal."""
    columns, values = table.table("columns"), {}
    if columns is not None:
        inner = Table(columns, table.at("columns"), COLUMNS)
        found = {key: inner.integer(key, 1, 10_000) for key in COLUMNS}
        values = _without_none(found)
        if len(values) == 2 and values["field"] == values["signal"]:
            raise inner.error("signal", f"{values['signal']} is the field's column", "name another one")
    calibration = table.table("field_calibration")
    slope = zero = None
    if calibration is not None:
        inner = Table(calibration, table.at("field_calibration"), CALIBRATION)
        inner.require("slope", '"216 mT/V"')
        slope = inner.quantity("slope", "field per voltage")
        zero = inner.quantity("zero", "field") or 0.0
        if slope == 0:
            raise inner.error("slope", "is 0", 'write the field per volt, e.g. "216 mT/V"')
    return {
        "columns": values or None,
        "field_calibration": None if slope is None else (slope, zero),
        "field_unit": table.choice("field_unit", FIELD_UNITS),
        "direction": table.choice("direction", DIRECTIONS) or "both",
        "fit_range": table.interval("fit_range"),
        "exclude": table.intervals("exclude"),
    }


def _baseline(table: Table) -> int | str | None:
    """Return the order of the baseline's polynomial, "smooth" or "asymmetric"; None for no baseline."""
    value = table.data.get("baseline", 1)
    for key, kinds in (("smoothness", SMOOTH), ("asymmetry", SMOOTH[1:])):
        if key in table and value not in kinds:
            raise table.error(key, f"means nothing without a {kinds[-1]} baseline", f'write baseline = "{kinds[0]}"')
    if value == "none":
        return None
    if value in SMOOTH:
        return str(value)
    if isinstance(value, str):
        right = 'write the order of a polynomial, such as 1, or "none", "smooth", "asymmetric"'
        raise table.error("baseline", describe(value), right)
    return table.integer("baseline", 0, HIGHEST_ORDER) if "baseline" in table else 1


def _baseline_on(table: Table, kind: int | str | None, swept: Assembled, detect: str) -> dict[str, Any]:
    """Return what a `Trace` holds of its baseline; a smooth one is looked at where the sweep is."""
    if kind not in SMOOTH:
        return {"baseline": kind}
    used = swept.field[swept.used]
    length = float(used[-1] - used[0])
    smoothness = table.positive("smoothness", "field") or length
    if kind == "asymmetric" and detect != "absorption":
        found = f"a {detect} has lines on both sides of its baseline"
        raise table.error("baseline", found, 'write baseline = "smooth"; asymmetric is for detect = "absorption"')
    least = shortest_smoothness(length, used.size)
    if smoothness < least:
        found = f"{smoothness:g} mT is too short for {used.size} points over {length:g} mT"
        raise table.error("smoothness", found, f"write {least:.2g} mT or more, and more than the lines are wide")
    asymmetry = table.number("asymmetry")
    if asymmetry is not None and not 0.001 <= asymmetry <= 0.5:
        raise table.error("asymmetry", f"{asymmetry:g}", "write 0.001 to 0.5, the weight of points above the baseline")
    weight = (asymmetry or _ASYMMETRY) if kind == "asymmetric" else None
    return {"baseline": None, "smoothness": smoothness, "asymmetry": weight}


def _angle(source: _Source, sample: Sample, own: float | None) -> float | None:
    if sample.form not in ("crystal", "aligned"):
        return None
    value = source.merged("angle", own)
    if value is None and sample.form == "crystal":
        found = f"is missing, here and in the header of {on_one_line(source.written)}"
        raise source.table.error("angle", found, 'write angle = "140 deg"')
    return sample.angle if value is None else float(value)


# Tables of line positions ---------------------------------------------------------------------------


def read_lines(place: str, data: object, index: int, *, store: Store, sample: Sample, given: Given) -> Lines:
    """Read one ``[[lines]]`` and its table of resonance fields.

    The columns go by their headings: ``angle_deg`` (or ``theta_deg, phi_deg``), ``field_mT``, and
    if there, ``uncertainty_mT``, ``lower``, ``upper``.

    Raises
    ------
    InputError
        For wrong keys, a sample that is no crystal, and columns that are missing or out of range.
    """
    table = Table(data, place, LINES, path=("traces", index), given=given)
    if sample.form != "crystal":
        found = f"line positions need a crystal and the sample is a {sample.form}"
        raise InputError(found, 'write [sample] form = "crystal"', place=place)
    own = {key: value for key, value in conditions(table).items() if key in ("temperature", "microwave")}
    source = _Source(table, store)
    found_values = {key: source.merged(key, value) for key, value in own.items()}
    found_values |= {"frequency": source.frequency(), **source.shared(sample)}
    columns = _columns(source.raw)
    return Lines(
        name=source.name,
        file=source.written,
        sha256=source.raw.sha256,
        notes=tuple(source.notes),
        **_without_none(columns),
        **_without_none(found_values),
    )


def _columns(raw: RawTrace) -> dict[str, Any]:
    """Return the columns of a table of lines by what they mean, in internal units."""
    kinds = {"angle": "angle", "theta": "angle", "phi": "angle", "field": "field", "uncertainty": "field"}
    wanted = "head the columns angle_deg (or theta_deg, phi_deg), field_mT and, if there, uncertainty_mT, lower, upper"
    found: dict[str, NDArray[np.float64]] = {}
    for name, unit, values in zip(raw.names, raw.units, raw.columns.T, strict=True):
        if name not in (*kinds, "lower", "upper"):
            raise InputError(f'column "{name}"', wanted, file=raw.file)
        if name in found:
            raise InputError(f'two columns "{name}"', wanted, file=raw.file)
        if name in kinds and unit not in UNITS[kinds[name]]:
            raise InputError(f'column "{name}" has no unit of {kinds[name]}', wanted, file=raw.file)
        factor = from_unit(1.0, unit, kinds[name]) if name in kinds else 1.0
        found[name] = np.ascontiguousarray(values) * factor
    if "field" not in found or ("angle" in found) == ("theta" in found) or ("theta" in found) != ("phi" in found):
        raise InputError("columns are missing", wanted, file=raw.file)
    if "uncertainty" in found and not (found["uncertainty"] > 0).all():
        raise InputError("an uncertainty is not positive", "write standard uncertainties", file=raw.file)
    levels = None
    if "lower" in found or "upper" in found:
        if not ("lower" in found and "upper" in found):
            raise InputError("columns lower and upper go together", wanted, file=raw.file)
        levels = np.stack([found["lower"], found["upper"]], axis=1)
        if not (levels == np.round(levels)).all() or levels.min() < 0 or levels.max() > 1e6:
            raise InputError("a level is not a whole number", "count levels from 1, or write 0", file=raw.file)
        levels = levels.astype(np.int64)
    directions = np.stack([found["theta"], found["phi"]], axis=1) if "theta" in found else None
    return {
        "field": found["field"],
        "angle": found.get("angle"),
        "direction": directions,
        "uncertainty": found.get("uncertainty"),
        "levels": levels,
    }
