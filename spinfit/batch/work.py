"""One fit of a batch, from its order to its folder and its record, in whatever process or thread it runs."""

from __future__ import annotations

import hashlib
import math
import os
import threading
import time
import warnings
from collections.abc import Mapping
from contextlib import suppress
from pathlib import Path
from typing import Any

from spinfit import __version__
from spinfit.batch.child import allow, note, stop_after
from spinfit.batch.records import GOOD, LATE, NO_ROOM, POOR, READING, NoRoom, failed, grace, late, said, unwritten
from spinfit.batch.tasks import Order
from spinfit.errors import InputError
from spinfit.files.folders import remove_files, write_folder
from spinfit.files.job import read_job
from spinfit.files.store import Folder
from spinfit.files.toml_table import parse_toml
from spinfit.fitting.data import Job
from spinfit.fitting.driver import fit
from spinfit.fitting.outcome import Outcome
from spinfit.report.outcome_files import ARCHIVE, DRAWN, NUMBERS, outcome_files
from spinfit.report.outcome_json import clean

NOTE_EVERY = 1.0
"""Seconds between notes of the best values so far."""
JOB = "job.toml"
OWN = (*NUMBERS, *DRAWN, JOB)
"""Every file that a fit may leave in its folder."""

# matplotlib and h5py are not made for several threads at once; fits on a cluster may share a process.
_drawing = threading.Lock()


class _Shown(Folder):
    """Data files by the names that the job writes, called in errors as the user called them."""

    def __init__(self, base: str, shown: Mapping[str, str]) -> None:
        super().__init__(base)
        self.shown = shown

    def load(self, written: str) -> tuple[bytes, str, str]:
        """See `spinfit.files.store.Store.load`."""
        shown = self.shown.get(written, written)
        # The folder of a fit need not be there yet, so that the system cannot go up from it.
        place = os.path.normpath(os.path.join(self.folder, written))
        try:
            content, sha256, _ = super().load(place)
        except InputError as error:
            raise InputError(error.found, error.right, place=error.place, file=shown) from None
        self.taken[written] = self.taken.pop(place)
        return content, sha256, shown


class _Best:
    """The best values so far, and the end of the time where nothing else can end it."""

    def __init__(self, limit: float | None) -> None:
        self.limit = limit
        self.end = math.inf if limit is None else time.monotonic() + limit
        self.next = 0.0
        self.values: dict[str, float] = {}

    def __call__(self, number: int, chi2: float, values: Mapping[str, float]) -> None:
        self.values = dict(values)
        now = time.monotonic()
        if self.limit is not None and now >= self.next:  # for when the process has to be killed
            self.next = now + NOTE_EVERY
            note({name: float(value) for name, value in values.items()})
        if now > self.end:
            raise KeyboardInterrupt


def do(order: Order) -> dict[str, Any]:
    """Fit and write; whatever is wrong with this one is said in its record.

    Returns
    -------
    dict
        The record, as it goes into the journal.

    Raises
    ------
    NoRoom
        When nothing can be written.
    """
    begun = time.perf_counter()
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        record = _done(order)
    return clean(record | {"seconds": round(time.perf_counter() - begun, 4)})


def _done(order: Order) -> dict[str, Any]:
    def lost(kind: str, reason: str) -> dict[str, Any]:
        with suppress(OSError):  # what an earlier run left is no longer so
            remove_files(Path(order.out) / order.name, OWN)
        return failed(order.name, order.free, order.hash, kind, reason)

    if order.version != __version__:
        return lost("version", f"the worker has spinfit {__version__}, not {order.version}; install the same there")
    best = _Best(None)
    try:
        allow(READING)
        job = _read(order)
        allow(None if order.time_limit is None else grace(order.time_limit))
        best = _Best(order.time_limit)
        with stop_after(order.time_limit):
            outcome = fit(job, progress=best)
        allow(None)
    except InputError as error:
        places = [os.path.normpath(os.path.join(order.base, name)) for name in order.shown]
        return lost("input" if all(os.access(place, os.R_OK) for place in places) else "files", str(error))
    except MemoryError:
        return lost("memory", "not enough memory")
    except KeyboardInterrupt:
        limit = order.time_limit or 0.0
        return lost("time", f"stopped after {limit:g} s") | late(limit, best.values)
    except Exception as error:
        return lost("fault", f"a fault of spinfit: {type(error).__name__}: {error}")
    try:
        with _drawing:
            contents = outcome_files(outcome, job=job, pictures=order.pictures)
    except Exception as error:
        return lost("fault", f"a fault of spinfit: {type(error).__name__}: {error}")
    try:
        folder = Path(order.out) / order.name
        write_folder(folder, contents | {JOB: order.copy.encode("utf-8")}, stale=OWN, force=order.force)
    except OSError as error:
        if error.errno in NO_ROOM:
            raise NoRoom(said(error)) from None
        return unwritten(order.name, order.free, order.hash, error)
    return _record(order, job, outcome) | {"archive": hashlib.sha256(contents[ARCHIVE]).hexdigest()}


def _read(order: Order) -> Job:
    try:
        tables = parse_toml(order.text)
    except InputError as error:
        raise error.at(file=order.path) from None
    return read_job(order.path, tables=tables, text=order.text, store=_Shown(order.base, order.shown))


def _record(order: Order, job: Job, outcome: Outcome) -> dict[str, Any]:
    """Return what goes into the table of a fit that has an outcome."""
    quality = outcome.quality
    status = GOOD if quality.converged else POOR
    values = {name: v for name, v in outcome.parameters.items() if v.varied or v.derived}
    if len(outcome.fractions) > 1:
        values |= {f"{name}.fraction": value for name, value in outcome.fractions.items()}
    record: dict[str, Any] = {"trace": order.name, "hash": order.hash, "status": status}
    if not quality.finished:
        record |= {"status": LATE, "limit": order.time_limit, "reason": f"stopped after {order.time_limit:g} s"}
    elif not quality.converged:
        record |= {"reason": outcome.message}
    return record | {
        "free": dict(order.free),
        "conditions": _conditions(job),
        "parameters": {name: [value.value, value.uncertainty, value.unit] for name, value in values.items()},
        "quality": {
            "chi2_reduced": quality.chi2_reduced,
            "converged": quality.converged,
            "noise": quality.noise,
            "points": quality.points,
            "free_parameters": quality.free_parameters,
        },
        "warnings": list(dict.fromkeys(note.code for note in outcome.warnings)),
    }


def _conditions(job: Job) -> dict[str, float]:
    """Return frequency (GHz), temperature (K) and angle (deg) of the first trace, as far as it has them."""
    first: Any = (*job.traces, *job.lines)[0]
    found = {"frequency": round(first.frequency * 1e-3, 9)}
    if first.temperature is not None:
        found["temperature"] = first.temperature
    angle = getattr(first, "angle", None)
    if angle is not None and isinstance(angle, float):
        found["angle"] = round(math.degrees(angle), 9)
    return found
