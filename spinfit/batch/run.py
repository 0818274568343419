"""A batch: what is already there stays, the rest is handed to an executor, and every end of a fit is put down.

The order of things on the disk: first the folder of a fit, then its line in the journal, at last the table.  Whatever
ends the batch, and whenever, what the journal says is there, and what it does not say is done again.
"""

from __future__ import annotations

import os
import time
from collections.abc import Callable, Iterator, Mapping
from concurrent.futures import FIRST_COMPLETED, BrokenExecutor, CancelledError, Executor, Future, wait
from contextlib import suppress
from dataclasses import dataclass, field, replace
from functools import partial
from pathlib import Path
from typing import Any

from spinfit.batch.journal import Journal, Record
from spinfit.batch.lock import locked
from spinfit.batch.records import (
    FAILED,
    GOOD,
    LATE,
    NO_ROOM,
    POOR,
    WORK,
    NoRoom,
    call,
    failed,
    grace,
    late,
    said,
    unwritten,
)
from spinfit.batch.table import SUMMARY, write_summary
from spinfit.batch.tasks import RESERVED, Order, Plan, Task, file_hash
from spinfit.batch.workers import NoWorkers, Overrun, WorkerDied, Workers, process_pool
from spinfit.errors import InputError
from spinfit.files.folders import clear_unfinished, disk_waiters, force_folders, sync_folder

MOST_DEATHS = 3
"""Processes that may die at one fit before it counts as failed."""
# Seconds between looks at the clock while nothing ends.
_PULSE = 0.25

Listener = Callable[["Progress", Record | None], None]


@dataclass
class Progress:
    """How far a batch has come.

    Attributes
    ----------
    total : int
        Fits in all.
    kept : int
        Of them found finished by an earlier run.
    counts : dict of status -> int
        Of those that ended in this run.
    running : int
        Handed out and not yet back.
    began : float
        `time.monotonic` when the first was handed out.
    """

    total: int
    kept: int = 0
    counts: dict[str, int] = field(default_factory=dict)
    running: int = 0
    began: float = field(default_factory=time.monotonic)

    @property
    def ended(self) -> int:
        """Fits that ended in this run."""
        return sum(self.counts.values())

    @property
    def left(self) -> float | None:
        """Seconds that are left by the mean of the fits so far; None before the first one."""
        if not self.ended:
            return None
        return (self.total - self.kept - self.ended) * (time.monotonic() - self.began) / self.ended


@dataclass(frozen=True)
class Report:
    """What came of a batch.

    Attributes
    ----------
    summary : Path
        The table.
    counts : mapping of status -> int
        Of all its rows, earlier runs' included; "not run" for those that were not reached.
    fitted, kept : int
        Fits that ended in this run, and that were finished before it.
    stopped : str
        Why the batch ended before its end; empty when it did not.
    seconds : float
    changed : bool
        Whether anything in the folder is other than before.
    """

    summary: Path
    counts: Mapping[str, int]
    fitted: int
    kept: int
    stopped: str
    seconds: float
    changed: bool = True

    @property
    def good(self) -> bool:
        """Whether every row is good."""
        return not self.stopped and set(self.counts) <= {GOOD}


def run_batch(
    plan: Plan,
    folder: str | Path,
    *,
    executor: Executor | Callable[[], Executor] | None = None,
    in_flight: int | None = None,
    time_limit: float | None = None,
    pictures: bool = True,
    retry: bool = False,
    listener: Listener | None = None,
) -> Report:
    """Fit all that is not yet there and write the table.

    Parameters
    ----------
    plan : Plan
    folder : str or Path
        Made if need be.
    executor : Executor, or function that returns one, optional
        Where the fits run; one process a core by default.  An executor that is given is not shut down.  A function
        is called again when its executor breaks; a given executor that breaks ends the batch.
    in_flight : int, optional
        Fits handed out at a time; four times the executor's workers by default, so that these are busy while the disk
        is waited for.
    time_limit : float, optional
        Seconds for each fit, which then keeps its best values so far.
    pictures : bool
        Whether fit.png and report.html are among the files of each fit.
    retry : bool
        Also repeat what came out failed, not converged or stopped, though nothing has changed.
    listener : callable, optional
        Called with the progress and the record of each fit that ends, and now and then with None.

    Returns
    -------
    Report
        After Ctrl-C too; ``stopped`` then says so.

    Raises
    ------
    InputError
        When the folder cannot be written to, or another batch is at work there.
    """
    begun = time.monotonic()
    folder = Path(folder)
    _make(folder)
    with locked(folder):
        clear_unfinished(folder, RESERVED)
        with Journal(folder) as journal:
            batch = _Batch(plan, folder, journal, time_limit, pictures, retry, listener)
            with suppress(_Stop):
                batch.run(_Supply(executor), in_flight)
            before = file_hash(str(folder / SUMMARY))
            counts, summary = _table(batch)
    progress = batch.progress
    changed = progress.ended > 0 or file_hash(str(summary)) != before
    return Report(summary, counts, progress.ended, progress.kept, batch.stopped, time.monotonic() - begun, changed)


def _make(folder: Path) -> None:
    if folder.exists() and not folder.is_dir():
        raise InputError("is a file", "name a folder for the results", place="--out", file=folder)
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        found = f"cannot be made ({error.strerror})"
        raise InputError(found, "name a folder that can be written to", place="--out", file=folder) from error


def _table(batch: _Batch) -> tuple[Mapping[str, int], Path]:
    """Write the table; where there is no room for it, the journal still has everything."""
    batch.journal.catch_up()
    try:
        return write_summary(batch.folder, batch.journal, batch.plan)
    except InputError as error:
        batch.stopped = batch.stopped or str(error)
        return {}, batch.folder / SUMMARY


class _Stop(Exception):
    """Leaves the batch early; why stands in `_Batch.stopped`."""


class _Supply:
    """The executor, and a new one when it breaks."""

    def __init__(self, given: Executor | Callable[[], Executor] | None) -> None:
        self.given = given
        self.current: Executor | None = given if isinstance(given, Executor) else None

    @property
    def is_own(self) -> bool:
        return not isinstance(self.given, Executor)

    def get(self) -> Executor:
        if self.current is None:
            cores = len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1
            make = self.given or (lambda: process_pool(cores, preload=(WORK,)))
            self.current = make()  # type: ignore[operator]
        return self.current

    def size(self) -> int:
        return int(getattr(self.get(), "_max_workers", None) or os.cpu_count() or 1)

    def broken(self) -> bool:
        """Drop an executor that takes no more work; say whether there can be another."""
        if self.is_own and self.current is not None:
            self.current.shutdown(wait=False, cancel_futures=True)
            self.current = None
        return self.is_own

    def end(self, *, now: bool) -> None:
        if self.current is None or not self.is_own:
            return
        if now and isinstance(self.current, Workers):
            self.current.kill()
        else:
            self.current.shutdown(wait=not now, cancel_futures=now)


class _Batch:
    def __init__(
        self,
        plan: Plan,
        folder: Path,
        journal: Journal,
        time_limit: float | None,
        pictures: bool,
        retry: bool,
        listener: Listener | None,
    ) -> None:
        self.plan, self.folder, self.journal = plan, folder, journal
        self.time_limit, self.pictures, self.retry = time_limit, pictures, retry
        self.listener = listener or (lambda progress, record: None)
        self.progress = Progress(len(plan))
        self.pending: dict[Future[Any], Order] = {}
        self.deaths: dict[str, int] = {}
        self.again: list[Order] = []
        self.alone: list[Order] = []
        self.tried_alone: set[str] = set()
        self.stopped = ""
        self.waiters = disk_waiters()

    def run(self, supply: _Supply, in_flight: int | None) -> None:
        """Hand out, take in, until there is nothing left."""
        try:
            self._work(self._orders(), supply, in_flight)
            supply.end(now=False)
        except BaseException as error:
            for future in self.pending:
                future.cancel()
            supply.end(now=True)
            self._take_in([future for future in self.pending if _has_result(future)])
            if not isinstance(error, KeyboardInterrupt):
                raise
            self.stopped = "stopped before its end"
        finally:
            self.waiters.shutdown(wait=False)

    def _work(self, orders: Iterator[Order], supply: _Supply, in_flight: int | None) -> None:
        while True:
            while not self.pending or len(self.pending) < (in_flight or 4 * supply.size()):
                order = self.again.pop() if self.again else next(orders, None)
                if order is None:
                    break
                self._hand_out(order, supply)
            if not self.pending:
                if not self.alone:
                    return
                suspect = self.alone.pop()
                self.tried_alone.add(suspect.name)
                self._hand_out(suspect, supply)
                continue
            done, _ = wait(self.pending, timeout=_PULSE, return_when=FIRST_COMPLETED)
            if self._take_in(done) and not supply.broken():
                raise self._stop("the executor broke")
            if not done:
                self.listener(self.progress, None)

    def _stop(self, why: str) -> _Stop:
        self.stopped = why
        return _Stop()

    def _hand_out(self, order: Order, supply: _Supply) -> None:
        try:
            executor = supply.get()
            if getattr(executor, "is_local", False):  # then its files can be forced to the disk from here
                order = replace(order, force=False)
            future = executor.submit(call, order)
        except (BrokenExecutor, RuntimeError) as error:  # broken, or shut down by someone else
            self.again.append(order)
            if not isinstance(error, BrokenExecutor) or not supply.broken():
                raise self._stop(f"the executor takes no more work ({error})") from None
            return
        self.pending[future] = order
        self.progress.running = len(self.pending)

    def _orders(self) -> Iterator[Order]:
        """Yield an order for each task that is not done; put down those that cannot even be made."""
        for task in self.plan:
            try:
                order = self.plan.order(task, self.folder, pictures=self.pictures, time_limit=self.time_limit)
            except InputError as error:
                self._put_down([failed(task.name, task.free, "", "files", str(error)) | {"seconds": 0.0}])
                continue
            if self._is_done(task, order):
                self.progress.kept += 1
                self.listener(self.progress, None)
            else:
                yield order

    def _is_done(self, task: Task, order: Order) -> bool:
        if task.name not in self.journal:
            return False
        record = self.journal.last(task.name)
        status = record["status"]
        if record["hash"] != order.hash:
            return False
        if status == FAILED and (self.retry or record.get("kind") != "input"):
            return False
        if status in (POOR, LATE) and self.retry:
            return False
        if status == LATE and record.get("limit") != self.time_limit:
            return False
        if status in (GOOD, POOR) and not (self.folder / task.name / "outcome.json").is_file():
            return False
        if record.get("free", {}) != dict(task.free):
            self._write([record | {"free": dict(task.free)}])
        return True

    def _take_in(self, futures: Any) -> bool:
        """Put down what came back; return whether the executor broke."""
        records: list[Record] = []
        loose: list[Path] = []
        broken = False
        no_room = ""
        taken = [one for one in self.pending if one in futures]  # in the order of handing out
        for future in taken:
            order = self.pending[future]
            try:
                records.append(future.result())
                loose += [] if order.force else [self.folder / order.name]
            except NoRoom as error:
                no_room = str(error)
            except Overrun as error:
                records.append(self._overrun(order, *error.args))
            except CancelledError:
                raise self._stop("the executor dropped its work") from None
            except NoWorkers as error:
                raise self._stop(str(error)) from None
            except BrokenExecutor as error:
                broken = broken or not isinstance(error, WorkerDied)
                records += self._died(order, error)
            except Exception as error:  # what an executor makes of a process that died at a call, among others
                reason = f"the executor gave it up: {type(error).__name__}: {error}"
                records.append(failed(order.name, order.free, order.hash, "death", reason) | {"seconds": 0.0})
        self.progress.running = len(self.pending) - len(taken)
        wrong = {path.name: error for path, error in force_folders(loose, self.waiters).items()}
        no_room = next((said(error) for error in wrong.values() if error.errno in NO_ROOM), no_room)
        self._put_down([one for one in map(partial(_on_disk, wrong), records) if one is not None])
        for future in taken:  # not before: what Ctrl-C interrupts here is taken in once more
            del self.pending[future]
        if no_room:
            raise self._stop(f"{self.folder} cannot be written to ({no_room})")
        return broken

    def _overrun(self, order: Order, seconds: float, best: Mapping[str, float] | None = None) -> Record:
        """Return the record of a fit whose process had to be killed."""
        limit = order.time_limit
        if limit is not None and seconds == grace(limit):
            record = failed(order.name, order.free, order.hash, "time", f"did not stop at {limit:g} s and was ended")
            return record | late(limit, best or {}) | {"seconds": seconds}
        reason = f"its files could not be read in {seconds:g} s"
        return failed(order.name, order.free, order.hash, "input", reason) | {"seconds": seconds}

    def _died(self, order: Order, error: BrokenExecutor) -> list[Record]:
        """Try again what a process died at; when too many did, it is the fit's fault.

        A pool that breaks as a whole does not say at which fit: all that it was at are tried again one by one.
        """
        if not isinstance(error, WorkerDied) and order.name not in self.tried_alone:
            self.alone.append(order)
            return []
        self.deaths[order.name] = self.deaths.get(order.name, 0) + 1
        if self.deaths[order.name] < MOST_DEATHS:
            (self.alone if order.name in self.tried_alone else self.again).append(order)
            return []
        reason = f"the process that worked on it ended {MOST_DEATHS} times ({error})"
        return [failed(order.name, order.free, order.hash, "death", reason) | {"seconds": 0.0}]

    def _put_down(self, records: list[Record]) -> None:
        self._write(records)
        for record in records:
            self.progress.counts[record["status"]] = self.progress.counts.get(record["status"], 0) + 1
            self.listener(self.progress, record)

    def _write(self, records: list[Record]) -> None:
        if not records:
            return
        sync_folder(self.folder)  # the folders have their names before the journal speaks of them
        try:
            self.journal.append(records)
        except OSError as error:
            raise self._stop(f"{self.journal.path} cannot be written to ({said(error)})") from None


def _on_disk(wrong: Mapping[str, OSError], record: Record) -> Record | None:
    """Return the record of a fit whose files were to be forced to the disk; None when there was no room for them."""
    error = wrong.get(record["trace"])
    if error is None:
        return record
    if error.errno in NO_ROOM:
        return None
    return unwritten(record["trace"], record["free"], record["hash"], error) | {"seconds": record["seconds"]}


def _has_result(future: Future[Any]) -> bool:
    return future.done() and not future.cancelled() and future.exception() is None
