"""A batch on a real Dask scheduler with worker processes of its own: the same table as without."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import batch_jobs
import pytest

from spinfit.cli import main

distributed = pytest.importorskip("distributed")

COUNT = 6
SILENT = {"stdin": subprocess.DEVNULL, "stdout": subprocess.DEVNULL, "stderr": subprocess.DEVNULL}


def start(module: str, *arguments: str) -> subprocess.Popen[bytes]:
    environment = os.environ | {"PYTHONPATH": str(batch_jobs.ROOT), "OMP_NUM_THREADS": "1"}
    return subprocess.Popen([sys.executable, "-m", module, *arguments], env=environment, **SILENT)


@pytest.fixture(scope="module")
def address(tmp_path_factory):
    """A scheduler and two workers, each a process; its address."""
    folder = tmp_path_factory.mktemp("cluster")
    file = folder / "scheduler.json"
    quiet = ("--no-dashboard", "--local-directory", str(folder))
    processes = [start("distributed.cli.dask_scheduler", "--host", "127.0.0.1", "--port", "0", "--no-dashboard",
                       "--scheduler-file", str(file))]  # fmt: skip
    try:
        until = time.monotonic() + 60
        while not file.exists() or not file.read_text():
            assert processes[0].poll() is None
            assert time.monotonic() < until
            time.sleep(0.05)
        processes += [
            start("distributed.cli.dask_worker", "--scheduler-file", str(file), "--nthreads", "1", "--no-nanny", *quiet)
            for _ in range(2)
        ]
        with distributed.Client(scheduler_file=str(file), set_as_default=False, timeout=60) as client:
            client.wait_for_workers(2, timeout=60)
            yield client.scheduler.address
    finally:
        for process in reversed(processes):
            process.send_signal(signal.SIGTERM)
        for process in processes:
            try:
                process.wait(20)
            except subprocess.TimeoutExpired:
                process.kill()
                process.wait()


@pytest.fixture
def here(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    return tmp_path


def test_the_same_table_as_without_a_cluster(here, address, capsys):
    traces = batch_jobs.write_batch(here, COUNT)
    Path(traces[2]).write_text("nothing\n")
    batch = ["batch", "--template", "tile.toml", *traces, "--no-pictures"]
    assert main([*batch, "--out", "cluster", "--cluster", address]) == 1
    assert main([*batch, "--out", "own", "--workers", "1"]) == 1
    assert batch_jobs.timeless(here / "cluster") == batch_jobs.timeless(here / "own")
    assert [row["status"] for row in batch_jobs.rows_of(here / "cluster")].count("good") == COUNT - 1
    # The next run has nothing to do, wherever it runs.
    before = (here / "cluster/journal.jsonl").read_bytes()
    assert main([*batch, "--out", "cluster", "--cluster", address]) == 1
    assert (here / "cluster/journal.jsonl").read_bytes() == before


def test_a_scheduler_that_does_not_answer(here, capsys, monkeypatch):
    monkeypatch.setattr("spinfit.commands.cluster.PATIENCE", 0.5)
    traces = batch_jobs.write_batch(here, 1)
    code = main(["batch", "--template", "tile.toml", *traces, "--out", "o", "--cluster", "tcp://127.0.0.1:9"])
    error = capsys.readouterr().err
    assert code == 2
    assert '--cluster: "tcp://127.0.0.1:9" does not answer' in error
    assert error.count("\n") == 1
    assert not (here / "o").exists()


@pytest.mark.parametrize("address", ["nonsense", "tcp://", "", "tcp://node", "node: 8786"])
def test_an_address_that_is_none(here, capsys, address):
    traces = batch_jobs.write_batch(here, 1)
    code = main(["batch", "--template", "tile.toml", *traces, "--out", "o", "--cluster", address])
    assert code == 2
    error = capsys.readouterr().err
    assert error.startswith(f'spinfit: --cluster: "{address}" is no address; give a running')
    assert error.count("\n") == 1
