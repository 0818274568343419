"""The shell examples: bash reads them all, and those that need no cluster do what they say."""

from __future__ import annotations

import os
import shutil
import subprocess
import sys
from pathlib import Path

import batch_jobs
import pytest

EXAMPLES = batch_jobs.ROOT / "scripts" / "examples"

pytestmark = pytest.mark.skipif(shutil.which("bash") is None, reason="bash is not here")


@pytest.fixture
def here(tmp_path, monkeypatch):
    """A folder with a command ``spinfit`` that is this one."""
    monkeypatch.chdir(tmp_path)
    command = tmp_path / "spinfit"
    command.write_text(f'#!/bin/sh\nexec "{sys.executable}" -m spinfit.cli "$@"\n')
    command.chmod(0o755)
    monkeypatch.setenv("SPINFIT", str(command))
    monkeypatch.setenv("PYTHONPATH", str(batch_jobs.ROOT))
    return tmp_path


def run(name: str, *arguments: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(["bash", str(EXAMPLES / name), *arguments], capture_output=True, text=True, timeout=200)


@pytest.mark.parametrize("path", sorted(EXAMPLES.glob("*.sh")), ids=lambda path: path.stem)
def test_bash_reads_it_and_it_can_be_run(path: Path) -> None:
    done = subprocess.run(["bash", "-n", str(path)], capture_output=True, text=True)
    assert (done.returncode, done.stderr) == (0, "")
    assert os.access(path, os.X_OK)


def test_a_temperature_series(here: Path) -> None:
    batch_jobs.write_batch(here, 3)
    Path("traces/tile-01.csv").write_text("nothing\n")
    rows = "".join(f"traces/tile-{n:02d}.csv,{40 - n}\n" for n in range(3))
    Path("series.csv").write_text(f"file,temperature_K\n{rows}")
    done = run("temperature_series.sh", "tile.toml", "series.csv", "r.g", "out")
    assert done.returncode == 1, done.stderr
    lines = done.stdout.splitlines()
    table = [line.split() for line in lines if line.startswith("tile_")]
    assert [(words[0], words[1]) for words in table] == [("tile_02", "38"), ("tile_00", "40"), ("tile_01", "failed")]
    assert "not good:" in lines
    assert (here / "out/r.g.png").stat().st_size > 1000


def test_a_watched_folder(here: Path) -> None:
    batch_jobs.write_batch(here, 1)
    done = run("watch_folder.sh", "tile.toml", "traces", "out", "0", "2")
    assert (done.returncode, done.stdout, done.stderr) == (0, "", "")
    assert [line["status"] for line in batch_jobs.journal_of(here / "out")] == ["good"]
    Path("tile.toml").write_text("[[trace")
    assert run("watch_folder.sh", "tile.toml", "traces", "out", "0", "2").returncode == 2
