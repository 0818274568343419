"""A crash at every single step that touches the disk: what is there is whole, and a second run completes it.

The steps are the system calls that make, move, force to disk or remove something.  At the n-th of them the process
"dies": that call and every later one raises, so that no tidying up happens either, as after a power cut.  Files that
nobody had forced to the disk by then have lost what was in them.
"""

from __future__ import annotations

import os
import shutil
import tempfile
from pathlib import Path

import batch_jobs
import pytest
from batch_jobs import Serial, journal_of, rows_of

from spinfit.batch.run import run_batch
from spinfit.batch.tasks import template_plan
from spinfit.batch.template import Template
from spinfit.files.folders import write_folder

STEPS = [(os, "fsync"), (os, "rename"), (os, "replace"), (os, "chmod"),
         (Path, "unlink"), (Path, "rmdir"), (tempfile, "mkdtemp"), (tempfile, "mkstemp"),
         (shutil, "rmtree")]  # fmt: skip
FSYNC = os.fsync
CONTENT = {"outcome.json": b"{}\n", "curves.csv": b"1,2\n", "job.toml": b"# job\n"}


class Crash(BaseException):
    """The end of the process."""


class Steps:
    """Counts the steps; lets the process die at the n-th."""

    def __init__(self, patch: pytest.MonkeyPatch, last: int | None) -> None:
        self.taken, self.last = 0, last
        self.forced: set[int] = set()
        for owner, name in STEPS:
            patch.setattr(owner, name, self.counted(getattr(owner, name)))

    def counted(self, real):
        def step(*args, **kwargs):
            self.taken += 1
            if self.last is not None and self.taken >= self.last:
                raise Crash
            done = real(*args, **kwargs)
            if real is FSYNC:
                self.forced.add(os.fstat(args[0]).st_ino)
            return done

        return step

    def lose(self, out: Path) -> None:
        """Empty every file of a fit that was not forced to the disk."""
        for path in out.glob("*/*"):
            if path.stat().st_ino not in self.forced:
                path.write_bytes(b"")


def fitted(order):
    """Stand for a fit: write its folder and give its record."""
    write_folder(Path(order.out) / order.name, CONTENT, stale=[*CONTENT, "fit.png"], force=order.force)
    return {"trace": order.name, "hash": order.hash, "status": "good", "free": {}, "seconds": 0.1,
            "parameters": {"r.g": [float(order.name[-1]), 0.5, ""]}}  # fmt: skip


class Local(Serial):
    """Leaves it to the batch to force files to the disk."""

    is_local = True


@pytest.fixture(params=[Serial, Local])
def executor(request):
    return request.param()


@pytest.fixture
def plan(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    monkeypatch.setattr("spinfit.batch.run.call", fitted)
    traces = batch_jobs.write_batch(tmp_path, 2)
    return template_plan(Template("tile.toml"), traces)


def steps_of(monkeypatch, plan, executor, out: Path, last: int | None, *, lossy: bool = False) -> int:
    """Run until the crash, which may lose what was not yet on the disk; return how many steps were taken."""
    with monkeypatch.context() as patch:
        steps = Steps(patch, last)
        try:
            run_batch(plan, out, executor=executor, in_flight=1)
        except Crash:
            pass
    if lossy:
        steps.lose(out)
    return steps.taken


def check_whole(out: Path, *, lossy: bool = False) -> None:
    """The journal speaks only of what is there and whole; so is everything, where nothing can have been lost."""
    if not out.exists():
        return
    folders = [path for path in out.iterdir() if path.is_dir() and not path.name.startswith(".spinfit-")]
    said = {line["trace"] for line in journal_of(out)} if (out / "journal.jsonl").exists() else set()
    assert said <= {folder.name for folder in folders}
    for folder in folders:
        if folder.name in said or not lossy:
            assert {path.name: path.read_bytes() for path in folder.iterdir()} == CONTENT


@pytest.mark.parametrize("lossy", [False, True])
def test_every_step_of_a_first_run(tmp_path, monkeypatch, plan, executor, lossy):
    total = steps_of(monkeypatch, plan, executor, tmp_path / "calm", None)
    calm = rows_of(tmp_path / "calm")
    assert [row["r.g"] for row in calm] == ["0.0", "1.0"]
    assert total > 15
    for last in range(1, total + 1):
        out = tmp_path / f"out{last}"
        assert steps_of(monkeypatch, plan, executor, out, last, lossy=lossy) >= last
        check_whole(out, lossy=lossy)
        kept = len(journal_of(out)) if (out / "journal.jsonl").exists() else 0
        report = run_batch(plan, out, executor=executor)
        assert report.good
        assert report.kept == kept
        assert rows_of(out) == calm
        check_whole(out)
        assert {path.name for path in out.glob(".*")} == {".batch.lock"}


def test_every_step_of_a_run_over_an_older_one(tmp_path, monkeypatch, plan, executor):
    """Folders that are there already get their new files one by one: each is the old one or the new one."""
    old = {"outcome.json": b"old\n", "curves.csv": b"old\n", "fit.png": b"old\n"}

    def prepared(name: str) -> Path:
        out = tmp_path / name
        out.mkdir()
        for task in plan:
            write_folder(out / task.name, old)
        return out

    prepared("calm")
    total = steps_of(monkeypatch, plan, executor, tmp_path / "calm", None)
    calm = rows_of(tmp_path / "calm")
    for last in range(1, total + 1):
        out = prepared(f"out{last}")
        steps_of(monkeypatch, plan, executor, out, last)
        finished = {line["trace"] for line in journal_of(out)} if (out / "journal.jsonl").exists() else set()
        for task in plan:
            for path in (out / task.name).iterdir():
                assert path.read_bytes() in (old.get(path.name), CONTENT.get(path.name))
            if task.name in finished:
                assert {path.name: path.read_bytes() for path in (out / task.name).iterdir()} == CONTENT
        assert run_batch(plan, out, executor=executor).good
        assert rows_of(out) == calm
        for task in plan:
            assert {path.name: path.read_bytes() for path in (out / task.name).iterdir()} == CONTENT
