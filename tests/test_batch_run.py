"""A batch in this process: what is kept, what is redone, what one bad trace costs, what a full disk leaves."""

from __future__ import annotations

import errno
import json
import os
import shutil
import sys
from concurrent.futures import ThreadPoolExecutor
from concurrent.futures.process import BrokenProcessPool
from pathlib import Path

import batch_jobs
import pandas as pd
import pytest
from batch_jobs import Serial, journal_of, rows_of, timeless, write_batch, write_trace

from spinfit.batch import records, work
from spinfit.batch.run import run_batch
from spinfit.batch.tasks import jobs_plan, template_plan
from spinfit.batch.template import Template
from spinfit.batch.workers import Overrun, WorkerDied
from spinfit.cli import main
from spinfit.errors import InputError
from spinfit.files import folders

FILES = {"outcome.json", "curves.csv", "outcome.h5", "job.toml"}


@pytest.fixture
def here(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    return tmp_path


def plan(count: int):
    traces = write_batch(Path.cwd(), count)
    return template_plan(Template("tile.toml"), traces)


def run(a_plan, out="out", executor=None, **more):
    more.setdefault("pictures", False)
    return run_batch(a_plan, out, executor=executor or Serial(), **more)


def test_a_row_and_a_folder_for_each_trace(here):
    report = run(plan(3))
    assert report.good
    assert (report.counts, report.fitted, report.kept) == ({"good": 3}, 3, 0)
    table = pd.read_csv("out/summary.csv")
    assert list(table["trace"]) == ["tile_00", "tile_01", "tile_02"]
    assert set(table["status"]) == {"good"}
    assert table["converged"].dtype == bool
    for n, row in table.iterrows():
        # The stated uncertainty of the axis does not move this exact axis: the noise's part has to hold the truth.
        outcome = json.loads((here / "out" / row["trace"] / "outcome.json").read_text(encoding="utf-8"))
        found = outcome["parameters"]["r.g"]
        assert row["r.g"] == found["value"]
        assert row["r.g_uncertainty"] == found["uncertainty"]
        assert abs(row["r.g"] - batch_jobs.g_of(n)) < 4 * found["uncertainty_noise"]
        assert row["frequency"] == 9.4321
        assert {path.name for path in (here / "out" / row["trace"]).iterdir()} == FILES
    assert json.loads((here / "out/units.json").read_text())["r.width.gaussian"] == "mT"


def test_the_folders_job_gives_the_same_outcome(here):
    run(plan(1))
    assert main(["fit", "out/tile_00/job.toml", "--out", "again"]) == 0
    ours, again = here / "out/tile_00", here / "again"
    assert (ours / "outcome.json").read_bytes().replace(b'"name": "job"', b"") != b""
    one, two = (json.loads((folder / "outcome.json").read_text()) for folder in (ours, again))
    assert one["parameters"] == two["parameters"]
    assert one["provenance"]["input"] == two["provenance"]["input"]
    assert one["provenance"]["job"] == (ours / "job.toml").read_text()
    assert "# rough" in one["provenance"]["job"]


def test_only_what_changed_is_done_again(here):
    first = plan(3)
    run(first)
    before = timeless(here / "out")
    again = Serial()
    report = run(first, executor=again)
    assert (again.calls, report.kept, report.fitted) == (0, 3, 0)
    assert timeless(here / "out") == before
    write_trace(here / "traces/tile-01.csv", 8)
    report = run(first)
    assert (report.kept, report.fitted) == (2, 1)
    after = timeless(here / "out")
    assert [old == new for old, new in zip(before, after, strict=True)] == [True, False, True]
    assert [line["trace"] for line in journal_of(here / "out")][3:] == ["tile_01"]
    shutil.rmtree(here / "out/tile_02")
    assert run(first).fitted == 1
    text = (here / "tile.toml").read_text().replace("1.0 mT", "1.1 mT")
    (here / "tile.toml").write_text(text)
    assert run(template_plan(Template("tile.toml"), [task.file for task in first])).fitted == 3


def test_another_version_does_everything_again(here, monkeypatch):
    run(plan(1))
    monkeypatch.setattr("spinfit.batch.tasks.__version__", "0.0.0")
    assert run(plan(1)).fitted == 1


def test_one_broken_trace_costs_itself(here):
    first = plan(3)
    (here / "traces/tile-01.csv").write_text("field/mT,signal\n330,1\n331,x\n")
    report = run(first)
    assert not report.good
    assert report.counts == {"good": 2, "failed": 1}
    row = rows_of(here / "out")[1]
    assert row["status"] == "failed"
    assert row["reason"].startswith("traces/tile-01.csv: ") or row["reason"].startswith(
        str(here / "traces/tile-01.csv")
    )
    assert not (here / "out/tile_01").exists()
    again = Serial()
    run(first, executor=again)
    assert again.calls == 0  # the same file would fail again
    run(first, executor=again, retry=True)
    assert again.calls == 1
    write_trace(here / "traces/tile-01.csv", 1)
    assert run(first).good


def test_a_failure_takes_away_what_it_makes_untrue(here):
    first = plan(1)
    run(first)
    (here / "out/tile_00/notes.txt").write_text("mine")
    write_trace(here / "traces/tile-00.csv", 0).write_text("nothing\n")
    run(first)
    assert [path.name for path in (here / "out/tile_00").iterdir()] == ["notes.txt"]


def test_jobs_as_they_are(here):
    for n in range(2):
        write_trace(here / f"t{n}.csv", n)
        job = batch_jobs.TEMPLATE.replace("[[trace]]", f'[[trace]]\nfile = "t{n}.csv"  # mine')
        (here / f"job {n}.toml").write_text(job)
    report = run(jobs_plan(["job 0.toml", "job 1.toml"]))
    assert report.good
    assert [row["trace"] for row in rows_of(here / "out")] == ["job 0", "job 1"]
    # What a single fit writes, byte for byte.
    assert main(["fit", "job 0.toml", "--out", "single"]) == 0
    for name in ("outcome.json", "curves.csv"):
        assert (here / "single" / name).read_bytes() == (here / "out/job 0" / name).read_bytes()
    moved = (here / "out/job 0/job.toml").read_text()
    assert 'file = "../../t0.csv"  # mine' in moved
    (here / "job 1.toml").write_text("[[trace")
    assert run(jobs_plan(["job 0.toml", "job 1.toml"])).counts == {"good": 1, "failed": 1}
    assert "job 1.toml: line 1: is not TOML" in rows_of(here / "out")[1]["reason"]


def test_a_batch_adds_to_what_is_there(here):
    traces = write_batch(here, 4)
    template = Template("tile.toml")
    run(template_plan(template, traces[2:]))
    run(template_plan(template, traces[:2]))
    assert [row["trace"] for row in rows_of(here / "out")] == ["tile_02", "tile_03", "tile_00", "tile_01"]
    shutil.rmtree(here / "out/tile_03")
    run(template_plan(template, traces[:2]))
    assert [row["trace"] for row in rows_of(here / "out")] == ["tile_02", "tile_00", "tile_01"]


def test_threads_give_the_same_table(here):
    first = plan(4)
    run(first, "serial")
    with ThreadPoolExecutor(3) as pool:
        run(first, "threads", pool)
    assert timeless(here / "serial") == timeless(here / "threads")


class Fake:
    """Stands for the work of a fit, so that what goes wrong around it can be told apart."""

    def __init__(self, monkeypatch):
        self.done = []
        self.trouble = {}
        monkeypatch.setattr(records, "call", self)
        monkeypatch.setattr("spinfit.batch.run.call", self)

    def __call__(self, order):
        self.done.append(order.name)
        trouble = self.trouble.get(order.name, [])
        if trouble:
            raise trouble.pop(0)
        folders.write_folder(Path(order.out) / order.name, {"outcome.json": b"{}\n"})
        return {"trace": order.name, "hash": order.hash, "status": "good", "free": dict(order.free),
                "parameters": {"r.g": [2.0, 0.001, ""]}, "seconds": 0.1}  # fmt: skip


def test_a_process_that_dies_is_given_another_try(here, monkeypatch):
    fake = Fake(monkeypatch)
    fake.trouble = {"tile_01": [WorkerDied("signal 11")], "tile_02": [WorkerDied("signal 11")] * 9}
    report = run(plan(4))
    assert report.counts == {"good": 3, "failed": 1}
    assert fake.done.count("tile_01") == 2
    assert fake.done.count("tile_02") == 3
    assert rows_of(here / "out")[2]["reason"] == "the process that worked on it ended 3 times (signal 11)"
    # A death may have had another cause: the next run tries again.
    fake.trouble = {}
    assert run(plan(4)).good


def test_a_pool_that_breaks_whole_blames_nobody_unproved(here, monkeypatch):
    fake = Fake(monkeypatch)

    class Pool(Serial):
        """Like a pool of the standard library: one death breaks every call that is under way."""

        def submit(self, function, /, order):
            guilty = order.name == "tile_02"
            if not hasattr(self, "broken"):
                self.broken = len(made) == 1  # the first pool breaks with all that it is at
            future = super().submit(function, order)
            if guilty or self.broken:
                future = batch_jobs.Future()
                future.set_exception(BrokenProcessPool("a process died"))
            return future

    made = []

    def make():
        made.append(Pool())
        return made[-1]

    report = run(plan(4), executor=make, in_flight=4)
    assert report.counts == {"good": 3, "failed": 1}
    assert rows_of(here / "out")[2]["status"] == "failed"
    assert len(made) >= 3
    assert set(fake.done) == {f"tile_{n:02d}" for n in range(4)}


def test_a_given_pool_that_breaks_ends_the_batch(here, monkeypatch):
    fake = Fake(monkeypatch)
    fake.trouble = {"tile_01": [BrokenProcessPool("a process died")]}
    report = run(plan(3))
    assert report.stopped == "the executor broke"
    assert [row["status"] for row in rows_of(here / "out")].count("good") >= 1
    assert run(plan(3)).good


def test_what_overran_is_told_from_what_could_not_be_read(here, monkeypatch):
    fake = Fake(monkeypatch)
    fake.trouble = {"tile_00": [Overrun(records.READING)], "tile_01": [Overrun(records.grace(60.0), {"r.g": 2.5})]}
    report = run(plan(3), time_limit=60.0)
    assert report.counts == {"failed": 1, "time limit": 1, "good": 1}
    rows = rows_of(here / "out")
    assert rows[0]["reason"] == "its files could not be read in 120 s"
    assert rows[1]["reason"] == "did not stop at 60 s and was ended"
    assert (rows[1]["r.g"], rows[1]["r.g_uncertainty"]) == ("2.5", "")
    fake.done.clear()
    run(plan(3), time_limit=60.0)
    assert fake.done == []
    run(plan(3), time_limit=90.0)
    assert fake.done == ["tile_01"]


def test_ctrl_c_keeps_the_rows(here, monkeypatch):
    Fake(monkeypatch)
    seen = []

    def listener(progress, record):
        seen.append(record)
        if len([one for one in seen if one]) == 2:
            raise KeyboardInterrupt

    report = run(plan(5), listener=listener, in_flight=4)
    assert report.stopped
    assert not report.good
    assert report.counts["not run"] <= 3
    assert report.counts["good"] >= 2
    assert len(rows_of(here / "out")) == 5
    assert run(plan(5)).good


def test_a_line_cut_short_is_cut_off(here, monkeypatch):
    fake = Fake(monkeypatch)
    run(plan(3))
    journal = here / "out/journal.jsonl"
    content = journal.read_bytes()
    journal.write_bytes(content[:-20])
    fake.done.clear()
    assert run(plan(3)).good
    assert fake.done == ["tile_02"]
    assert [line["trace"] for line in journal_of(here / "out")] == ["tile_00", "tile_01", "tile_02"]


def test_a_line_destroyed_in_the_middle_costs_its_own_trace(here, monkeypatch):
    fake = Fake(monkeypatch)
    run(plan(3))
    journal = here / "out/journal.jsonl"
    lines = journal.read_bytes().splitlines(keepends=True)
    journal.write_bytes(lines[0] + b"\0" * 30 + b"\n" + lines[2])
    fake.done.clear()
    assert run(plan(3)).good
    assert fake.done == ["tile_01"]


def full(*wanted: str):
    """Return an os.fsync that finds the disk full for certain files."""
    real = os.fsync

    def fsync(number):
        if any(word in os.readlink(f"/proc/self/fd/{number}") for word in wanted):
            raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))
        real(number)

    return fsync


@pytest.mark.skipif(not Path("/proc/self/fd").is_dir(), reason="finds a file's name by /proc")
@pytest.mark.parametrize("where", ["journal.jsonl", "curves.csv"])
def test_a_full_disk_ends_the_batch_and_leaves_nothing_half_written(here, monkeypatch, where):
    a_plan = plan(4)
    run(template_plan(Template("tile.toml"), [task.file for task in a_plan][:2]))
    before = {path: path.read_bytes() for path in (here / "out").rglob("*") if path.is_file()}
    with monkeypatch.context() as patch:
        patch.setattr(os, "fsync", full(where))
        report = run(a_plan)
    assert "No space left on device" in report.stopped
    assert not report.good
    lines = (here / "out/journal.jsonl").read_bytes()
    assert lines == before[here / "out/journal.jsonl"]
    assert not [path for path in (here / "out").iterdir() if path.name.startswith(".spinfit")]
    for folder in (path for path in (here / "out").iterdir() if path.is_dir()):
        assert {path.name for path in folder.iterdir()} == FILES
    assert run(a_plan).good
    assert run(a_plan).kept == 4


def test_what_a_killed_run_left_is_cleared_away(here, monkeypatch):
    Fake(monkeypatch)
    (here / "out/.spinfit-x1y2").mkdir(parents=True)
    (here / "out/.spinfit-x1y2/curves.csv").write_text("half")
    run(plan(1))
    assert not (here / "out/.spinfit-x1y2").exists()


def test_the_time_limit_keeps_the_best_values_so_far(here, monkeypatch):
    """Where no signal can stop it (a thread of a cluster's worker), the fit stops at its next evaluation."""
    clock = iter([0.0] + [100.0] * 10_000)
    monkeypatch.setattr(work.time, "monotonic", lambda: next(clock))
    order = plan(1).order(next(iter(plan(1))), here, pictures=False, time_limit=5.0)
    monkeypatch.setattr(work, "stop_after", lambda limit: work.suppress())
    record = work.do(order)
    assert record["status"] == "time limit"
    assert record["reason"] == "stopped after 5 s"
    assert batch_jobs.values_of(record)["r.g"] == pytest.approx(2.005, abs=0.01)
    assert record["parameters"]["r.g"][1] is None
    outcome = json.loads((here / "tile_00/outcome.json").read_text())
    assert outcome["quality"]["finished"] is False


def test_nothing_of_a_version_that_differs(here):
    order = plan(1).order(next(iter(plan(1))), here)
    object.__setattr__(order, "version", "9.9")
    record = work.do(order)
    assert record["status"] == "failed"
    assert "not 9.9" in record["reason"]


@pytest.mark.skipif(sys.platform != "linux", reason="names that are not UTF-8")
def test_a_name_that_is_not_utf8_costs_itself(here):
    traces = write_batch(here, 2)
    odd = os.fsdecode(b"traces/tile-\xff.csv")
    os.rename(traces[1], odd)
    report = run(template_plan(Template("tile.toml"), [traces[0], odd]))
    assert report.counts["good"] >= 1
    assert [row["trace"] for row in rows_of(here / "out")] == ["tile_00", "tile__"]
    with pytest.raises(InputError, match="cannot be the name of a folder"):
        jobs_plan([os.fsdecode(b"tile-\xff.toml")])


def test_a_file_in_the_folders_place(here):
    (here / "out").write_text("")
    with pytest.raises(InputError, match="is a file"):
        run(plan(1))


def test_a_folder_in_the_journals_place(here):
    (here / "out/journal.jsonl").mkdir(parents=True)
    with pytest.raises(InputError, match="cannot be written"):
        run(plan(1))
