"""From columns as read to a field axis in mT and a signal on it, ready to fit."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from spinfit import units
from spinfit.errors import InputError, nearest
from spinfit.files.conditions import is_field
from spinfit.files.raw import Note, RawTrace, quote
from spinfit.files.sweeps import Bools, Floats, Run, find_foreign, find_runs, find_spikes, find_unrepeated, lag

DIRECTIONS = ("both", "up", "down")
_SIGNAL_NAMES = ("signal", "measured", "intensity", "y", "derivative", "absorption", "amplitude")


@dataclass(frozen=True, eq=False)
class Assembled:
    """One sweep, in order.

    Attributes
    ----------
    field : ndarray, shape (n,)
        mT, strictly increasing.
    signal : ndarray, shape (n,)
    used : ndarray of bool, shape (n,)
        Inside `fit_range`, outside `exclude`, and not a glitch.
    glitch : ndarray of bool, shape (n,)
    notes : tuple of (code, text)
        The reader's and those of assembling.
    """

    field: Floats
    signal: Floats
    used: Bools
    glitch: Bools
    notes: tuple[Note, ...]


def _choose_columns(raw: RawTrace, columns: Mapping[str, int] | None, notes: list[Note]) -> tuple[int, int]:
    """Return the indices of field and signal column."""
    m = raw.columns.shape[1]
    chosen = dict(columns or {})
    for key, value in chosen.items():
        if key not in ("field", "signal"):
            raise InputError(f'"{key}" is not known', nearest(key, ("field", "signal")), place="columns", file=raw.file)
        if isinstance(value, bool) or not isinstance(value, int) or not 1 <= value <= m:
            right = f"columns are counted from 1 to {m}"
            raise InputError(f"there is no column {quote(value)}", right, place=f"columns.{key}", file=raw.file)
    if m < 2:
        raise InputError("has one column", "give a field and a signal column", file=raw.file)
    named = [i for i, name in enumerate(raw.names) if is_field(name)]
    if "field" in chosen:
        field = chosen["field"] - 1
    elif named:
        field = named[0]
    elif m == 2:
        field = 2 - chosen["signal"] if "signal" in chosen else 0
    else:
        found = f"has {m} columns and none is called field"
        raise InputError(found, "write columns = {field = 1, signal = 2}", place="columns", file=raw.file)
    if "signal" in chosen:
        signal = chosen["signal"] - 1
    else:
        others = [i for i in range(m) if i != field]
        known = [i for name in _SIGNAL_NAMES for i in others if raw.names[i].lower() == name]
        signal = (known or others)[0]
        if not known and len(others) > 1:
            called = f"({quote(raw.names[signal])}) " if raw.names[signal] else ""
            notes.append(
                ("columns", f"column {signal + 1} {called}is taken as the signal of {len(others)} that could be")
            )
    if field == signal:
        found = f"column {field + 1} is both field and signal"
        raise InputError(found, "name two different columns", place="columns", file=raw.file)
    return field, signal


def _field_axis(
    raw: RawTrace,
    index: int,
    field_unit: str | None,
    calibration: tuple[float, float] | None,
    notes: list[Note],
) -> Floats:
    """Return the field in mT, by calibration or by unit."""
    column, given = raw.columns[:, index], raw.units[index]
    kind = next((k for k in ("field", "voltage") if given in units.UNITS[k]), None)
    if field_unit is not None and (calibration is None or field_unit not in units.UNITS["voltage"]):
        if calibration is not None:
            raise InputError("stands beside field_calibration", "write one of them", place="field_unit", file=raw.file)
        field = units.parse(f"1 {field_unit}", "field", "field_unit")[0][0]
        if kind == "field" and units.UNITS["field"][given] != field:
            notes.append(("field_unit", f"the file says {given}, the job {field_unit}: the job's is used"))
        return units.from_unit(column, field_unit, "field")
    if calibration is not None:
        slope, zero = calibration
        if not (math.isfinite(slope) and math.isfinite(zero) and slope != 0):
            right = "write a slope that is not 0 and a finite zero"
            raise InputError(f"slope {slope:g}, zero {zero:g}", right, place="field_calibration", file=raw.file)
        if kind == "field":
            notes.append(("field_calibration", f"the file says {given}, the job calibrates the column as volts"))
        volts = units.from_unit(column, field_unit or (given if kind == "voltage" else "V"), "voltage")
        return slope * volts + zero
    if kind == "field":
        return units.from_unit(column, given, "field")
    if kind == "voltage":
        right = 'write field_calibration = {slope = "216 mT/V", zero = "0 mT"}'
        raise InputError(f"the field column is in {given}", right, place="field_calibration", file=raw.file)
    found = f"the field column's unit {quote(given)} is no field" if given else "the file gives no unit for its field"
    raise InputError(found, 'write field_unit = "mT" (or "T", "G")', place="field_unit", file=raw.file)


def _glitches(field: Floats, signal: Floats, runs: list[Run], notes: list[Note]) -> Bools:
    """Flag glitches in every run, by its own neighbours and against the run that overlaps it most."""
    bad = np.zeros(len(field), dtype=bool)
    sorted_runs = []
    for run in runs:
        bad[run.part] = find_spikes(signal[run.part])
        keep = np.arange(run.start, run.stop)[~bad[run.part]]
        order = keep[np.argsort(field[keep], kind="stable")]
        sorted_runs.append(order)
    foreign = find_foreign([(field[order], signal[order]) for order in sorted_runs])
    for i in foreign:
        run, order = runs[i], sorted_runs[i]
        text = f"points {run.start + 1} to {run.stop} ({field[order[0]]:.4g} to {field[order[-1]]:.4g} mT) contradict"
        notes.append(("foreign_sweep", f"{text} the other sweeps of the file and are left out"))
    sorted_runs = [order for i, order in enumerate(sorted_runs) if i not in foreign]
    alone = np.zeros_like(bad)
    for i, order in enumerate(sorted_runs):
        best, most = None, 0.0
        for j, other in enumerate(sorted_runs):
            if i != j and len(order) and len(other):
                shared = min(field[order[-1]], field[other[-1]]) - max(field[order[0]], field[other[0]])
                best, most = (other, shared) if shared > most else (best, most)
        if best is not None:
            found = find_unrepeated((field[order], signal[order]), (field[best], signal[best]))
            alone[order[found]] = True
    bad |= alone
    if bad.any():
        where = ", ".join(f"{b:.2f}" for b in _places(np.sort(field[bad])))
        by = f", {alone.sum()} of them because the other sweep does not show them" if alone.any() else ""
        notes.append(("glitches", f"{bad.sum()} points look like glitches and are left out{by}: near {where} mT"))
    for i in foreign:
        bad[runs[i].part] = True
    return bad


def _places(fields: Floats, most: int = 8) -> list[float]:
    """Return a few fields that stand for many: one a cluster, at most `most`."""
    span = max(float(np.ptp(fields)), 1e-12)
    starts = [0, *(np.flatnonzero(np.diff(fields) > 0.01 * span) + 1).tolist()]
    return [float(fields[i]) for i in starts[:most]]


def _select(runs: list[Run], direction: str, n: int, raw: RawTrace) -> Bools:
    """Return the points of the runs that go the wanted way."""
    if direction not in DIRECTIONS:
        raise InputError(
            f'"{direction}" is not known', nearest(direction, DIRECTIONS), place="direction", file=raw.file
        )
    if direction == "both":
        return np.ones(n, dtype=bool)
    chosen = np.zeros(n, dtype=bool)
    for run in runs:
        if run.direction == direction:
            chosen[run.part] = True
    if not chosen.any():
        has = "stands in no order" if not runs else f"only goes {runs[0].direction}"
        raise InputError(f"the field {has}", 'write direction = "both"', place="direction", file=raw.file)
    return chosen


def _ordered(field: Floats, signal: Floats, bad: Bools) -> tuple[Floats, Floats, Bools, int]:
    """Sort by field and average repeated fields, over points that are no glitches where there are any."""
    x, inverse, counts = np.unique(field, return_inverse=True, return_counts=True)
    good = ~bad
    n_good = np.bincount(inverse, weights=good, minlength=len(x))
    sum_good = np.bincount(inverse, weights=np.where(good, signal, 0.0), minlength=len(x))
    sum_all = np.bincount(inverse, weights=signal, minlength=len(x))
    y = np.where(n_good > 0, sum_good / np.maximum(n_good, 1), sum_all / counts)
    return x, y, n_good == 0, int(len(field) - len(x))


def _check_window(window: Sequence[float], place: str, file: str) -> tuple[float, float]:
    """Return a window that is finite and the right way round."""
    low, high = (float(v) for v in window)
    if not (math.isfinite(low) and math.isfinite(high) and low < high):
        raise InputError(f"{low:g} to {high:g} mT", "write the smaller field first", place=place, file=file)
    return low, high


def _windows(field: Floats, fit_range: Sequence[float] | None, exclude: Sequence[Sequence[float]], file: str) -> Bools:
    """Return which points are inside `fit_range` and outside every window of `exclude`."""
    used = np.ones(len(field), dtype=bool)
    if fit_range is not None:
        low, high = _check_window(fit_range, "fit_range", file)
        used &= (field >= low) & (field <= high)
        if not used.any():
            found = f"no point lies in {low:g} to {high:g} mT"
            raise InputError(found, f"the trace covers {field[0]:g} to {field[-1]:g} mT", place="fit_range", file=file)
    for window in exclude:
        low, high = _check_window(window, "exclude", file)
        used &= (field < low) | (field > high)
    if not used.any():
        raise InputError("no point is left to use", "exclude less", place="exclude", file=file)
    return used


def _describe(field: Floats, signal: Floats, runs: list[Run], stray: Bools, direction: str, notes: list[Note]) -> None:
    """Say what the field axis looked like."""
    if stray.any():
        notes.append(("stray_fields", f"{stray.sum()} field readings jump out and back and are left out"))
    if not runs:
        notes.append(("unsorted", "the points stand in no order of field; they are sorted"))
    if len(runs) > 1:
        ups = sum(run.direction == "up" for run in runs)
        text = f"the field goes up {ups} and down {len(runs) - ups} times; direction {direction} is used"
        notes.append(("sweeps", text))
    up = max((r for r in runs if r.direction == "up"), key=lambda r: r.stop - r.start, default=None)
    down = max((r for r in runs if r.direction == "down"), key=lambda r: r.stop - r.start, default=None)
    if up is not None and down is not None:
        pair = []
        for run in (up, down):
            order = run.start + np.argsort(field[run.part], kind="stable")
            pair.append((field[order], signal[order]))
        shift = lag(pair[1], pair[0])
        step = float(np.ptp(field)) / len(field)
        if shift is not None and abs(shift) > step:
            text = f"lines stand {shift:.3g} mT higher in the upward than in the downward sweep"
            notes.append(("sweep_lag", f"{text}: the mean of both is closer to the truth than either"))


def assemble(
    raw: RawTrace,
    *,
    columns: Mapping[str, int] | None = None,
    field_unit: str | None = None,
    field_calibration: tuple[float, float] | None = None,
    direction: str = "both",
    fit_range: Sequence[float] | None = None,
    exclude: Sequence[Sequence[float]] = (),
    mask_glitches: bool = True,
) -> Assembled:
    """Make one ordered sweep of what was read.

    Parameters
    ----------
    columns : mapping, optional
        ``{"field": 2, "signal": 1}``, counted from 1; by default the column named as a field, or the first of two.
    field_unit : str, optional
        T, mT or G; wins over what the file says, with a note.  Beside a calibration V or mV.
    field_calibration : (slope, zero), optional
        mT/V and mT: field = slope * column in V + zero.
    direction : str
        "up", "down" or "both": which parts of a sweep that goes up and down.
    fit_range, exclude : (low, high) and a sequence of such, mT
    mask_glitches : bool
        Whether glitches are looked for.

    Raises
    ------
    InputError
        When something is missing (a unit, a column), or nothing is left.
    """
    notes: list[Note] = list(raw.notes)
    i, j = _choose_columns(raw, columns, notes)
    field = _field_axis(raw, i, field_unit, field_calibration, notes)
    signal = raw.columns[:, j]
    if not np.isfinite(field).all():
        raise InputError("the field is not finite everywhere", "check unit and calibration", file=raw.file)
    runs, stray = find_runs(field)
    chosen = _select(runs, direction, len(field), raw) & ~stray
    _describe(field, signal, runs, stray, direction, notes)
    bad = np.zeros(len(field), dtype=bool)
    if mask_glitches and runs:
        bad = _glitches(field, signal, runs, notes)
    x, y, glitch, merged = _ordered(field[chosen], signal[chosen], bad[chosen])
    if len(x) < 2:
        raise InputError(f"has {len(x)} field value(s)", "a sweep has at least two", file=raw.file)
    if merged:
        notes.append(("repeated_fields", f"{merged} points repeat a field and are averaged into it"))
    if mask_glitches and not runs:
        glitch = find_spikes(y)
        if glitch.any():
            where = ", ".join(f"{b:.2f}" for b in _places(x[glitch]))
            notes.append(("glitches", f"{glitch.sum()} points look like glitches and are left out: near {where} mT"))
    used = _windows(x, fit_range, exclude, raw.file) & ~glitch
    return Assembled(x, y, used, glitch, tuple(notes))
