"""Loaded into the processes of a batch by `benchmarks.batch`: every bare fit leaves a line with its seconds."""

from __future__ import annotations

import os
import time

from spinfit.batch import work
from spinfit.fitting.data import Job
from spinfit.fitting.driver import fit
from spinfit.fitting.outcome import Outcome

TIMES = "SPINFIT_BENCHMARK_TIMES"
"""Environment variable: a file for lines of wall seconds and processor seconds of a fit, and of the process so far."""


def timed(job: Job, **more: object) -> Outcome:
    """Fit, and put down what it took."""
    begun = time.perf_counter(), time.process_time()
    outcome = fit(job, **more)  # type: ignore[arg-type]
    wall, busy = time.perf_counter() - begun[0], time.process_time() - begun[1]
    with open(os.environ[TIMES], "a", encoding="utf-8") as stream:
        stream.write(f"{wall!r} {busy!r} {time.process_time()!r}\n")
    return outcome


if TIMES in os.environ:
    work.fit = timed
