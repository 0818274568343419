"""What a batch costs beyond its fits: throughput of two workers over one, overhead of a fit, memory of the parent.

Traces are made anew in a scratch folder; pictures are left out, which take about as long as a short fit.
"""

from __future__ import annotations

import os
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import replace
from pathlib import Path
from unittest import mock

import numpy as np

from benchmarks.measure import Row, Timing, unit
from benchmarks.timed_work import TIMES
from spinfit.batch import work
from spinfit.batch.child import settle
from spinfit.batch.run import run_batch
from spinfit.batch.tasks import Plan, template_plan
from spinfit.batch.template import Template
from spinfit.batch.workers import Workers
from spinfit.fitting.data import Job
from spinfit.fitting.driver import fit
from spinfit.fitting.outcome import Outcome
from spinfit.species import Species, Spin, Width
from spinfit.spectrum import simulate
from spinfit.sweep import Sweep

WORK = "spinfit.batch.work"
TRACES = 200
MANY = 2000
# An ordinary fit: a triplet, five numbers varied at the default tolerance, which takes a second or so.
ORDINARY = """[[species]]
name = "t"
S = "1"
g = 2.003
D = "2250 MHz"
E = "-300 MHz"
[species.width]
gaussian = "1.5 mT"

[[trace]]
field_uncertainty = "0.02 mT"

[fit]
vary = ["t.g", "t.D", "t.E", "t.width"]
"""
SMALL = """[[species]]
name = "r"
S = "1/2"
g = 2.005
[species.width]
gaussian = "1.0 mT"

[accuracy]
tolerance = 1e-2

[[trace]]

[fit]
vary = ["r.g", "r.width.gaussian"]
"""


def _write(folder: Path, template: str, count: int, *, small: bool) -> list[str]:
    """Write a template and traces of its model, each with noise of its own; return the traces' paths."""
    (folder / "t.toml").write_text(template, encoding="utf-8")
    if small:
        species, sweep = (
            Species("r", (Spin(g=(2.006,)),), width=Width(gaussian=0.8)),
            Sweep(9432.1, (330.0, 342.0), 200),
        )
    else:
        spin = Spin(S=1.0, g=(2.0026,), D=2227.0, E=-314.0)
        species, sweep = Species("t", (spin,), width=Width(gaussian=1.3)), Sweep(9432.1, (240.0, 430.0), 900)
    signal = simulate(species, sweep).signal
    signal = signal / np.abs(signal).max()
    paths = []
    for number in range(count):
        noisy = signal + np.random.default_rng(number).normal(0, 0.01, sweep.points)
        paths.append(str(folder / f"t{number:04d}.csv"))
        table = np.column_stack([sweep.fields, noisy])
        header = "# frequency 9.4321 GHz\nfield/mT,signal"
        np.savetxt(paths[-1], table, delimiter=",", fmt="%.6f", header=header, comments="")
    return paths


@contextmanager
def _batch(template: str, count: int, *, small: bool) -> Iterator[tuple[Path, Plan]]:
    with tempfile.TemporaryDirectory() as scratch:
        folder = Path(scratch)
        traces = _write(folder, template, count, small=small)
        yield folder, template_plan(Template(folder / "t.toml"), traces)


def _seconds(plan: Plan, out: Path, workers: int) -> float:
    """Return the seconds of a batch on warm workers: their start is no matter of throughput."""
    pool = Workers(workers, preload=(WORK,))
    list(pool.map(time.sleep, [1.0] * workers))
    begun = time.perf_counter()
    report = run_batch(plan, out, executor=pool, pictures=False)
    seconds = time.perf_counter() - begun
    pool.shutdown()
    if not report.good:
        raise RuntimeError(f"the batch came out as {report.counts}")
    return seconds


def _timing(seconds: float) -> Timing:
    one = unit()
    return Timing(seconds, seconds / one, one, 1)


def throughput(count: int = TRACES) -> Iterator[Row]:
    """Two workers over one; wanted is a factor of at least 1.8 where two cores are free."""
    with _batch(SMALL, count, small=True) as (folder, plan):
        one, two = (_seconds(plan, folder / f"w{workers}", workers) for workers in (1, 2))
    cores = len(os.sched_getaffinity(0))
    yield Row(f"{count} small traces, 1 worker", _timing(one), note=f"{1e3 * one / count:.0f} ms a trace")
    note = f"{one / two:.2f} times as fast (goal 1.8; {cores} cores, load {os.getloadavg()[0]:.1f})"
    yield Row(f"{count} small traces, 2 workers", _timing(two), note=note)


def overhead(count: int = 8) -> Iterator[Row]:
    """What a worker does beyond the fit itself (reading, writing); wanted is at most 5 %.

    Both times are of the same calls, so that whatever else the machine does slows both.  Waiting for the disk is left
    to the parent of a batch: see `whole_batch`.
    """
    bare: list[tuple[float, float]] = []

    def timed_fit(job: Job, **more: object) -> Outcome:
        begun = time.perf_counter(), time.process_time()
        outcome = fit(job, **more)
        bare.append((time.perf_counter() - begun[0], time.process_time() - begun[1]))
        return outcome

    with _batch(ORDINARY, count + 1, small=False) as (folder, plan), mock.patch.object(work, "fit", timed_fit):
        orders = [replace(plan.order(task, folder / "out", pictures=False), force=False) for task in plan]
        (folder / "out").mkdir()
        work.do(orders.pop())
        bare.clear()
        settle()  # as every worker does after its first fit
        begun = time.perf_counter(), time.process_time()
        records = [work.do(order) for order in orders]
        whole, busy = time.perf_counter() - begun[0], time.process_time() - begun[1]
    if any(record["status"] != "good" for record in records):
        raise RuntimeError("a fit is not good")
    fits, computing = (sum(column) for column in zip(*bare, strict=True))
    note = f"{fits / count:.2f} s a fit, {computing / count:.2f} s of the processor's"
    yield Row(f"{count} ordinary fits, the fits alone", _timing(fits), note=note)
    note = (
        f"{100 * (whole / fits - 1):.1f} % beyond the fits, {1e3 * (whole - fits) / count:.0f} ms each (goal 5 %); "
        f"of the processor's time {100 * (busy / computing - 1):.1f} %, {1e3 * (busy - computing) / count:.1f} ms each"
    )
    yield Row(f"{count} ordinary fits, with all that a worker does", _timing(whole), note=note)


def whole_batch(count: int = 40, workers: int = 1) -> Iterator[Row]:
    """A batch from its first order to its journal, forced to the disk, against the fits in it; wanted is at most 5 %.

    The parent works beside the worker, so that a free core takes what it does.
    """
    with _batch(ORDINARY, count, small=False) as (folder, plan):
        times = folder / "times"
        with mock.patch.dict(os.environ, {TIMES: str(times)}):
            pool = Workers(workers, preload=(WORK, "benchmarks.timed_work"))
            list(pool.map(time.sleep, [1.0] * workers))
            run_batch(template_plan(Template(folder / "t.toml"), [plan.tasks[0].file]), folder / "first", executor=pool)
            times.unlink()
            begun = time.perf_counter(), time.process_time()
            report = run_batch(plan, folder / "out", executor=pool, pictures=False)
            whole, parent = time.perf_counter() - begun[0], time.process_time() - begun[1]
            pool.shutdown()
        lines = [[float(word) for word in line.split()] for line in times.read_text().splitlines()]
    if not report.good:
        raise RuntimeError(f"the batch came out as {report.counts}")
    fits = sum(line[0] for line in lines) / workers
    note = (
        f"{100 * (whole / fits - 1):.1f} % beyond the fits, {1e3 * workers * (whole - fits) / count:.0f} ms each "
        f"(goal 5 %); the parent beside them {1e3 * parent / count:.1f} ms of the processor's each"
    )
    yield Row(f"batch of {count} ordinary fits, {workers} worker", _timing(whole), note=note)


# The high-water mark of its own memory: the one of getrusage begins with that of the process which started it.
_PARENT = """
import sys
from pathlib import Path
from spinfit.batch.run import run_batch
from spinfit.batch.tasks import template_plan
from spinfit.batch.template import Template

def most():
    return next(int(line.split()[1]) for line in open("/proc/self/status") if line.startswith("VmHWM"))

folder = Path(sys.argv[1])
plan = template_plan(Template(folder / "t.toml"), [str(path) for path in sorted(folder.glob("t*.csv"))])
before = most()
run_batch(plan, folder / "out", pictures=False)
print(before, most())
"""


def memory(counts: tuple[int, ...] = (TRACES, MANY)) -> Iterator[Row]:
    """Largest memory of the parent for few and for many traces."""
    for count in counts:
        with _batch(SMALL, count, small=True) as (folder, _):
            begun = time.perf_counter()
            command = [sys.executable, "-c", _PARENT, str(folder)]
            done = subprocess.run(command, capture_output=True, text=True, check=True)
            seconds = time.perf_counter() - begun
        planned, most = (int(word) / 1024 for word in done.stdout.split())
        note = f"parent {most:.1f} MB at most, {most - planned:.1f} MB more than when it had planned"
        yield Row(f"{count} small traces, memory", _timing(seconds), note=note)


def rows() -> Iterator[Row]:
    """Measure throughput, overhead, whole batches and memory; the many traces only where BATCH_MANY is set."""
    yield from throughput()
    yield from overhead()
    yield from whole_batch()
    yield from memory((TRACES, MANY) if "BATCH_MANY" in os.environ else (TRACES,))
