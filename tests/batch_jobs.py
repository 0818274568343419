"""Small batches for the tests: traces of one radical in closed form, a template, and ways to run them.

A trace is the derivative of one Gaussian line at h nu / (g muB), 120 points; its fit takes some tens of ms.
"""

from __future__ import annotations

import csv
import json
import os
import signal
import subprocess
import sys
import time
from collections.abc import Mapping, Sequence
from concurrent.futures import Executor, Future
from pathlib import Path
from typing import Any

import numpy as np
from scipy import constants

from spinfit.batch.child import allow, note, stop_after

ROOT = Path(__file__).resolve().parents[1]
MUB = constants.physical_constants["Bohr magneton"][0]
WIDTH = 0.8
TEMPLATE = """# A radical in a tile.
[[species]]
name = "r"
S = "1/2"
g = 2.005   # rough
[species.width]
gaussian = "1.0 mT"

[accuracy]
tolerance = 1e-2

[[trace]]
field_uncertainty = "0.02 mT"

[fit]
vary = ["r.g", "r.width.gaussian"]  # all there is
"""


def g_of(number: int) -> float:
    """Return the true g of a trace."""
    return 2.0060 + 1e-5 * (number * 7 % 10)


def write_trace(path: Path, number: int, *, g: float | None = None, frequency: float = 9432.1) -> Path:
    """Write one trace, with its frequency in the header."""
    centre = constants.h * frequency * 1e6 / ((g or g_of(number)) * MUB) * 1e3
    field = np.linspace(centre - 6, centre + 6, 120)
    x = (field - centre) / (WIDTH / 2)
    signal = -2000 * x * np.exp(-0.5 * x**2) + 100 + np.random.default_rng(number).normal(0, 20, field.size)
    rows = "".join(f"{a:.5f},{b:.4f}\n" for a, b in zip(field, signal, strict=True))
    path.write_text(f"# frequency {frequency / 1e3} GHz\nfield/mT,signal\n{rows}", encoding="utf-8")
    return path


def write_batch(folder: Path, count: int) -> list[str]:
    """Write a template and traces; return the traces' paths."""
    (folder / "tile.toml").write_text(TEMPLATE, encoding="utf-8")
    (folder / "traces").mkdir(exist_ok=True)
    return [str(write_trace(folder / "traces" / f"tile-{n:02d}.csv", n)) for n in range(count)]


def rows_of(folder: Path) -> list[dict[str, str]]:
    """Return the rows of a batch's table."""
    with open(folder / "summary.csv", encoding="utf-8", newline="") as stream:
        return list(csv.DictReader(stream))


def timeless(folder: Path) -> list[dict[str, str]]:
    """Return the rows of a batch's table without the times, which differ from run to run."""
    return [{key: cell for key, cell in row.items() if key != "seconds"} for row in rows_of(folder)]


def journal_of(folder: Path) -> list[dict[str, Any]]:
    """Return every line of a batch's journal."""
    text = (folder / "journal.jsonl").read_text(encoding="utf-8")
    return [json.loads(line) for line in text.splitlines()]


def spinfit(*arguments: str, **more: Any) -> subprocess.Popen[str]:
    """Start the command line as a user does, in a process of its own."""
    command = [sys.executable, "-m", "spinfit.cli", *arguments]
    environment = os.environ | {"PYTHONPATH": str(ROOT)}
    streams = {"stdout": subprocess.PIPE, "stderr": subprocess.PIPE}
    # a shell's background jobs ignore Ctrl-C, and so would what they start
    before = signal.signal(signal.SIGINT, signal.default_int_handler)
    try:
        return subprocess.Popen(command, text=True, env=environment, **(streams | more))
    finally:
        signal.signal(signal.SIGINT, before)


def killed_and_resumed(command: Sequence[str], out: Path, moments: Sequence[int], total: int) -> list[int]:
    """Run a batch, kill it with SIGKILL at each moment, at last let it end.

    Parameters
    ----------
    command : sequence of str
        Arguments of ``spinfit``.
    moments : sequence of int
        How many lines the journal then has.
    total : int
        Fits in all.

    Returns
    -------
    list of int
        Lines of the journal after each run.
    """
    lines = []
    for moment in [*moments, None]:
        process = spinfit(*command)
        if moment is None:
            assert process.wait(120) == 0, process.stderr.read()
        else:
            kill_at(process, out, moment)
        lines.append(len(finished(out)))
        for stream in (process.stdout, process.stderr):
            stream.close()
    assert lines[-1] == total, lines
    return lines


def finished(out: Path) -> list[dict[str, Any]]:
    """Return the whole lines of a journal that is being written."""
    try:
        lines = (out / "journal.jsonl").read_bytes().split(b"\n")[:-1]
    except FileNotFoundError:
        return []
    return [json.loads(line) for line in lines]


def kill_at(process: subprocess.Popen[str], out: Path, moment: int) -> None:
    """Kill a process with SIGKILL once the journal has so many lines."""
    until = time.monotonic() + 120
    while process.poll() is None and len(finished(out)) < moment:
        assert time.monotonic() < until
        time.sleep(0.005)
    assert process.poll() is None, process.stderr.read()
    process.send_signal(signal.SIGKILL)
    process.wait(30)


class Serial(Executor):
    """Runs each call at once in this process."""

    def __init__(self) -> None:
        self.calls = 0

    def submit(self, function: Any, /, *args: Any, **kwargs: Any) -> Future[Any]:
        self.calls += 1
        future: Future[Any] = Future()
        try:
            future.set_result(function(*args, **kwargs))
        except Exception as error:
            future.set_exception(error)
        return future


# Functions for worker processes, which import this module by its name ----------------------------------


def square(x: int) -> int:
    return x * x


def fails(text: str) -> None:
    raise ValueError(text)


def environment(name: str) -> str | None:
    return os.environ.get(name)


def own_pid() -> int:
    return os.getpid()


def dies() -> None:
    os.kill(os.getpid(), signal.SIGKILL)


def sleeps(seconds: float) -> str:
    time.sleep(seconds)
    return "slept"


def hangs_after(allowed: float) -> None:
    """Hang where no Python signal is heard: all signals blocked, as in a C library that never returns."""
    note("so far")
    allow(allowed)
    signal.pthread_sigmask(signal.SIG_BLOCK, {signal.SIGINT, signal.SIGTERM})
    time.sleep(600)


def counts_until(seconds: float) -> str:
    """Work until interrupted, and still hand something in."""
    try:
        with stop_after(seconds):
            while True:
                sum(range(1000))
    except KeyboardInterrupt:
        return "best so far"


def dies_once(mark: str) -> str:
    """Die at the first call, which leaves a mark."""
    if not os.path.exists(mark):
        Path(mark).touch()
        dies()
    return "alive"


def values_of(record: Mapping[str, Any]) -> dict[str, float]:
    """Return the values of a record's parameters."""
    return {name: entry[0] for name, entry in record["parameters"].items()}
