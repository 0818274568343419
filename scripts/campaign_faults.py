"""Batches under fire: killed again and again at random moments, they end with the table of a calm run.

Run as ``scripts/campaign faults`` or ``python scripts/campaign_faults.py [--jobs N] [--kills N] [--seed N]``.
A batch of small fits, some of them of broken traces, runs once undisturbed.  Then the same batch is started
again and again; each time, at a random moment, its parent is killed with SIGKILL, and now and then one of its workers
before.  The last start is left alone.  Its table must be the calm one's row for row but for the times, every file of
every fit the same bytes, and no fit that the journal had finished may have been done twice.
"""

from __future__ import annotations

import argparse
import os
import signal
import sys
import tempfile
import time
from collections import Counter
from pathlib import Path

import numpy as np

ROOT = Path(__file__).resolve().parent.parent
sys.path[:0] = [str(ROOT), str(ROOT / "tests")]

import batch_jobs  # noqa: E402

BROKEN = {3: "field/mT,signal\n330,1\n331,x\n", 11: "", 17: "\x89HDF\r\n\x1a\nno more than that"}


def workers_of(pid: int) -> list[int]:
    """Return the processes that a process has started."""
    found: list[int] = []
    for task in Path(f"/proc/{pid}/task").glob("*/children"):
        try:
            found += [int(word) for word in task.read_text(encoding="ascii").split()]
        except OSError:
            continue
    return found


def disturbed(command: list[str], out: Path, rng: np.random.Generator, goal: int) -> str:
    """Start the batch, kill it some time after the journal has `goal` lines; say what was done."""
    process = batch_jobs.spinfit(*command)
    done = []
    until = time.monotonic() + 300
    while process.poll() is None and len(batch_jobs.finished(out)) < goal and time.monotonic() < until:
        time.sleep(0.005)
    if rng.random() < 0.5 and process.poll() is None:
        workers = workers_of(process.pid)
        if workers:
            os.kill(int(rng.choice(workers)), signal.SIGKILL)
            done.append("a worker")
    time.sleep(float(rng.uniform(0, 0.4)))
    if process.poll() is None:
        process.kill()
        done.append("the parent")
    process.communicate(timeout=60)
    return " and ".join(done) or "nothing: it had ended"


def complaints(calm: Path, rough: Path) -> list[str]:
    """Compare two batches' folders."""
    found = []
    ours, theirs = batch_jobs.timeless(rough), batch_jobs.timeless(calm)
    found += [f"row {b['trace']} differs" for a, b in zip(ours, theirs, strict=False) if a != b]
    if len(ours) != len(theirs):
        found.append(f"{len(ours)} rows, not {len(theirs)}")
    names = {path.relative_to(calm).as_posix() for path in calm.glob("*/*")}
    others = {path.relative_to(rough).as_posix() for path in rough.glob("*/*")}
    found += [f"{name} is there once only" for name in sorted(names ^ others)]
    found += [f"{n} differs" for n in sorted(names & others) if (calm / n).read_bytes() != (rough / n).read_bytes()]
    good = Counter(line["trace"] for line in batch_jobs.journal_of(rough) if line["status"] == "good")
    found += [f"{name} was fitted {count} times" for name, count in good.items() if count > 1]
    return found


def main() -> int:
    """Run the campaign; return 1 when anything differs."""
    parser = argparse.ArgumentParser(prog="scripts/campaign faults", description=__doc__.splitlines()[0])
    parser.add_argument("--jobs", type=int, default=40, help="fits in the batch (40)")
    parser.add_argument("--kills", type=int, default=10, help="times that it is killed (10)")
    parser.add_argument("--seed", type=int, default=1, help="of the moments (1)")
    given = parser.parse_args()
    rng = np.random.default_rng(given.seed)
    with tempfile.TemporaryDirectory() as scratch:
        folder = Path(scratch)
        os.chdir(folder)
        traces = batch_jobs.write_batch(folder, given.jobs)
        for number, content in BROKEN.items():
            if number < given.jobs:
                Path(traces[number]).write_text(content, encoding="latin-1")
        command = ["batch", "--template", "tile.toml", *traces, "--no-pictures", "--quiet", "--out"]
        calm, rough = folder / "calm", folder / "rough"
        code = batch_jobs.spinfit(*command, "calm").wait(1200)
        moments = np.sort(rng.integers(0, given.jobs - 1, given.kills))
        for number, moment in enumerate(moments, 1):
            killed = disturbed([*command, "rough"], rough, rng, int(moment))
            lines = len(batch_jobs.finished(rough))
            print(f"{number}: killed {killed}; {lines} of {given.jobs} finished", flush=True)
        last = batch_jobs.spinfit(*command, "rough").wait(1200)
        found = complaints(calm, rough)
        if last != code:
            found.append(f"exit code {last}, not {code}")
    for line in found:
        print(line)
    print(f"{given.jobs} fits, {given.kills} kills: {'NOT THE SAME' if found else 'the same table, file for file'}")
    return 1 if found else 0


if __name__ == "__main__":
    sys.exit(main())
