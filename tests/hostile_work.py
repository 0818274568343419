"""Imported by worker processes of one test: makes the work of some traces hang, crash or never end."""

from __future__ import annotations

import os
import signal
import time
from typing import Any

from spinfit.batch import child, work

read = work.read_job
fit = work.fit
work.READING = 5.0


def hostile_read(path: Any, **more: Any) -> Any:
    """Read as a library does that was not made for hostile files."""
    text = more["text"]
    if '"hangs"' in text:
        signal.pthread_sigmask(signal.SIG_BLOCK, {signal.SIGINT, signal.SIGTERM})
        time.sleep(600)
    if '"crashes"' in text:
        os.kill(os.getpid(), signal.SIGSEGV)
    if '"gobbles"' in text:
        raise MemoryError
    if '"fails"' in text:
        raise ZeroDivisionError("a fault")
    return read(path, **more)


def hostile_fit(job: Any, *, progress: Any) -> Any:
    """Fit, but for one trace that goes on for ever."""
    if job.traces[0].name == "endless":
        progress(1, 9.0, {"r.g": 2.5, "r.width.gaussian": 0.7})
        child._call_off()  # as when the time is up; the fit goes on until it hears of it
        while True:
            time.sleep(0.01)
    return fit(job, progress=progress)


work.read_job = hostile_read
work.fit = hostile_fit
