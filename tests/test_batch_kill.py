"""A batch that is killed with SIGKILL, resumed, and killed again ends with the table of one that was left alone."""

from __future__ import annotations

import os
import signal
import time
from pathlib import Path

import batch_jobs
import numpy as np
import pytest

from spinfit.batch.journal import Journal
from spinfit.cli import main

pytestmark = pytest.mark.skipif(os.name != "posix", reason="kills processes by signals")

COUNT = 8


def folders(out: Path) -> set[str]:
    return {path.name for path in out.iterdir() if path.is_dir()}


@pytest.fixture
def batch(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    traces = batch_jobs.write_batch(tmp_path, COUNT)
    return ["batch", "--template", "tile.toml", *traces, "--no-pictures", "--workers", "2"]


def test_killed_at_random_moments_and_resumed(batch, tmp_path, capsys):
    assert main([*batch, "--out", "calm"]) == 0
    moments = np.sort(np.random.default_rng(1).choice(np.arange(1, COUNT - 1), 2, replace=False))
    lines = batch_jobs.killed_and_resumed([*batch, "--out", "rough"], tmp_path / "rough", list(moments), COUNT)
    assert lines[0] >= moments[0]
    assert batch_jobs.timeless(tmp_path / "rough") == batch_jobs.timeless(tmp_path / "calm")
    # Each was fitted to its end once: a line in the journal, and none that was there came again.
    assert sorted(line["trace"] for line in batch_jobs.journal_of(tmp_path / "rough")) == [
        f"tile_{n:02d}" for n in range(COUNT)
    ]
    assert folders(tmp_path / "rough") == folders(tmp_path / "calm")
    for name in folders(tmp_path / "calm"):
        ours, theirs = tmp_path / "rough" / name, tmp_path / "calm" / name
        assert {p.name for p in ours.iterdir()} == {p.name for p in theirs.iterdir()}
        for path in theirs.iterdir():
            assert (ours / path.name).read_bytes() == path.read_bytes(), path


def test_ctrl_c_keeps_what_is_finished(batch, tmp_path):
    process = batch_jobs.spinfit(*batch, "--out", "out")
    until = time.monotonic() + 60
    while not batch_jobs.finished(tmp_path / "out"):
        assert time.monotonic() < until
        assert process.poll() is None
        time.sleep(0.005)
    process.send_signal(signal.SIGINT)
    out, err = process.communicate(timeout=60)
    assert process.returncode == 1, err
    assert "what is finished is kept" in err
    assert "Traceback" not in err
    rows = batch_jobs.rows_of(tmp_path / "out")
    assert len(rows) == COUNT
    done = [row["trace"] for row in rows if row["status"] == "good"]
    assert 1 <= len(done) < COUNT
    assert {row["status"] for row in rows} == {"good", "not run"}
    before = len(batch_jobs.journal_of(tmp_path / "out"))
    assert main([*batch, "--out", "out"]) == 0
    assert len(batch_jobs.journal_of(tmp_path / "out")) == COUNT
    assert before >= len(done)


def test_ctrl_c_between_writing_and_noting_writes_nothing_twice(tmp_path, monkeypatch):
    """What is interrupted while the disk is waited for is handed in again at the end."""
    records = [{"trace": f"t{n}", "status": "good", "seconds": 0.1 * n} for n in range(3)]

    def interrupted(number):
        raise KeyboardInterrupt

    with Journal(tmp_path) as journal:
        journal.append(records[:1])
        with monkeypatch.context() as patch:
            patch.setattr(os, "fsync", interrupted)
            with pytest.raises(KeyboardInterrupt):
                journal.append(records[1:2])
        journal.append(records[1:])
        journal.append(records[:1])  # the same once more, on purpose, is written
        assert journal.last("t1") == records[1]
    assert batch_jobs.journal_of(tmp_path) == [*records, records[0]]


def test_a_second_batch_is_refused_and_the_lock_dies_with_the_first(batch, tmp_path, capsys):
    process = batch_jobs.spinfit(*batch, "--out", "out")
    until = time.monotonic() + 60
    while not (tmp_path / "out" / "journal.jsonl").exists():
        assert time.monotonic() < until
        time.sleep(0.005)
    assert main([*batch, "--out", "out"]) == 2
    error = capsys.readouterr().err
    assert f"is being written to by another batch (process {process.pid})" in error
    assert error.count("\n") == 1
    process.kill()
    process.communicate(timeout=30)
    assert main([*batch, "--out", "out"]) == 0
