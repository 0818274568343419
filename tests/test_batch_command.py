"""``spinfit batch`` as it is typed: what it says, writes, refuses and returns; traces that hang, crash and gobble."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from argparse import Namespace
from io import StringIO
from pathlib import Path

import batch_jobs
import numpy as np
import pandas as pd
import pytest
from batch_jobs import rows_of

from spinfit.batch.outliers import outlying, robust_z
from spinfit.batch.records import WORK
from spinfit.batch.run import Progress, run_batch
from spinfit.batch.tasks import template_plan
from spinfit.batch.template import Template
from spinfit.batch.workers import Workers
from spinfit.cli import main
from spinfit.commands.batch_screen import progress_line, shown
from spinfit.commands.screen import Screen


@pytest.fixture
def here(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    return tmp_path


@pytest.fixture
def in_process(monkeypatch):
    """Fit in this process: what the command says and writes is the same, and no process has to start."""
    monkeypatch.setattr("spinfit.batch.workers.process_pool", lambda count, preload: batch_jobs.Serial())


def series(folder: Path, count: int) -> None:
    """Write traces and their table of values."""
    batch_jobs.write_batch(folder, count)
    rows = "".join(f"traces/tile-{n:02d}.csv,{10 + n},piece {n % 2}\n" for n in range(count))
    (folder / "series.csv").write_text(f"file,temperature_K,sample\n{rows}")


def test_a_series_with_a_table_of_values(here, capsys, in_process):
    series(here, 3)
    Path("traces/tile-01.csv").write_text("nothing\n")
    batch = ["batch", "--template", "tile.toml", "--values", "series.csv", "--out", "out", "--workers", "1"]
    assert main([*batch, "--no-pictures", "--verbose"]) == 1
    out, err = capsys.readouterr()
    assert out.splitlines()[0].startswith("2 good, 1 failed (3 fitted now, 0 before)") or "1 failed, 2 good" in out
    assert "tile_00: good, r.g 2.00" in err
    assert "tile_01: failed; " in err
    table = pd.read_csv("out/summary.csv")
    assert list(table["temperature"].dropna()) == [10, 12]
    assert list(table["sample"]) == ["piece 0", "piece 1", "piece 0"]
    assert main([*batch, "--no-pictures", "--json"]) == 1
    document = json.loads(capsys.readouterr().out)
    assert document["counts"] == {"good": 2, "failed": 1}
    assert (document["fitted"], document["kept"], document["stopped"]) == (0, 3, None)
    assert [row["trace"] for row in document["failed"]] == ["tile_01"]
    # Its own columns may change without a fit.
    text = (here / "series.csv").read_text().replace("piece 0", "piece 9")
    (here / "series.csv").write_text(text)
    batch_jobs.write_trace(here / "traces/tile-01.csv", 1)
    assert main([*batch, "--no-pictures", "--quiet"]) == 0
    assert capsys.readouterr() == ("", "")
    assert list(pd.read_csv("out/summary.csv")["sample"]) == ["piece 9", "piece 1", "piece 9"]


def test_pictures_unless_they_are_left_out(here, capsys, in_process):
    batch_jobs.write_batch(here, 1)
    batch = ["batch", "--template", "tile.toml", "traces/tile-00.csv", "--out", "out", "--workers", "1"]
    assert main(batch) == 0
    assert {"fit.png", "report.html"} <= {path.name for path in (here / "out/tile_00").iterdir()}
    assert main([*batch, "--no-pictures"]) == 0
    assert not {"fit.png", "report.html"} & {path.name for path in (here / "out/tile_00").iterdir()}


@pytest.mark.skipif(os.name != "posix", reason="the own executor")
def test_one_trace_that_hangs_crashes_or_never_ends_costs_itself(here):
    names = ["fine", "hangs", "crashes", "gobbles", "fails", "endless", "good"]
    batch_jobs.write_batch(here, 0)
    traces = [str(batch_jobs.write_trace(here / "traces" / f"{name}.csv", n)) for n, name in enumerate(names)]
    plan = template_plan(Template("tile.toml"), traces)
    pool = Workers(2, preload=(WORK, "hostile_work"))
    report = run_batch(plan, "out", executor=pool, pictures=False, time_limit=90.0)
    pool.shutdown()
    assert report.counts == {"good": 2, "failed": 4, "time limit": 1}
    rows = {row["trace"]: row for row in rows_of(here / "out")}
    assert rows["fine"]["status"] == rows["good"]["status"] == "good"
    assert rows["hangs"]["reason"] == "its files could not be read in 5 s"
    assert rows["crashes"]["reason"] == "the process that worked on it ended 3 times (signal 11)"
    assert rows["gobbles"]["reason"] == "not enough memory"
    assert rows["fails"]["reason"] == "a fault of spinfit: ZeroDivisionError: a fault"
    assert rows["endless"]["status"] == "time limit"
    assert rows["endless"]["reason"] == "stopped after 90 s"
    assert (rows["endless"]["r.g"], rows["endless"]["r.g_uncertainty"]) == ("2.5", "")


@pytest.mark.parametrize(
    ("options", "said"),
    [
        (["t.csv", "--out", "o"], "t.csv: batch: is not a job file; give job files, or add --template"),
        (["--out", "o"], "batch: no job files"),
        (["--template", "tile.toml", "--out", "o"], "batch: no traces"),
        (["a.toml", "--values", "v.csv", "--out", "o"], "--values: goes with --template only"),
        (["a.toml", "--out", "o", "--workers", "0"], '--workers: "0"; write a whole number from 1'),
        (["a.toml", "--out", "o", "--workers", "2", "--cluster", "tcp://x:1"], "--workers: does not go with --cluster"),
        (["a.toml", "--out", "o", "--quiet", "--verbose"], "--quiet: does not go with --verbose"),
        (["a.toml", "--out", "o", "--time-limit", "60"], '--time-limit: "60" has no unit'),
        (["a.toml", "--out", "o", "--time-limit", "-1 s"], '--time-limit: "-1 s"; write a time'),
        (["a.toml", "b/a.toml", "--out", "o"], 'batch: two jobs are called "a": a.toml and b/a.toml'),
        (["a.toml"], "required: --out"),
        (["--template", "nix.toml", "t.csv", "--out", "o"], "nix.toml: there is no such file"),
        (["a.toml", "--out", "a.toml/o"], "a.toml/o: --out: cannot be made"),
    ],
)
def test_refused_in_one_line_and_nothing_written(here, capsys, options, said):
    batch_jobs.write_batch(here, 1)
    (here / "a.toml").write_text(batch_jobs.TEMPLATE)
    before = sorted(here.rglob("*"))
    assert main(["batch", *options]) == 2
    error = capsys.readouterr().err
    assert said in error
    assert error.count("\n") == 1
    assert sorted(here.rglob("*")) == before


class Terminal(StringIO):
    def isatty(self):
        return True


def test_a_bar_on_a_terminal_and_plain_lines_elsewhere(monkeypatch):
    progress = Progress(10, kept=2, counts={"good": 2, "failed": 1, "not converged": 1}, began=0.0)
    monkeypatch.setattr("spinfit.batch.run.time.monotonic", lambda: 8.0)
    assert progress_line(progress) == "6 of 10 done, 1 failed, 1 not good, 30.0 a minute, 8 s left"
    failed = {"trace": "t[1]", "status": "failed", "reason": "no [red]line[/red]"}
    for stream, both in ((Terminal(), True), (StringIO(), False)):
        screen = Screen(out=StringIO(), err=stream)
        with shown(screen, Namespace(quiet=False, verbose=False)) as listener:
            listener(progress, None)
            listener(progress, failed)
        assert "t[1]: failed; no [red]line[/red]" in stream.getvalue()
        assert ("of 10 done" in stream.getvalue()) == both


def test_robust_z_against_its_definition():
    """By hand: median 3, deviations 2 1 0 1 97, so MAD 1 and scale 1.4826; with u = 20 the last is no outlier."""
    values = [1.0, 2.0, 3.0, 4.0, 100.0, np.nan]
    plain = robust_z(values, [np.nan] * 6, [True] * 6)
    np.testing.assert_allclose(plain[:5], np.array([-2, -1, 0, 1, 97]) / 1.4826, rtol=1e-12)
    assert outlying(plain).tolist() == [False] * 4 + [True, False]
    wide = robust_z(values, [0, 0, 0, 0, 30.0, 0], [True] * 6)
    assert wide[4] == pytest.approx(97 / np.hypot(1.4826, 30.0))
    assert not outlying(wide).any()
    assert np.isnan(robust_z(values[:4], [0.0] * 4, [True] * 4)).all()
    # What is not good is judged by the good ones.
    assert outlying(robust_z([1, 1.1, 0.9, 1, 1.05, 7], [0.0] * 6, [True] * 5 + [False]))[5]
    # Equal values: a difference of the last digits is none, any other is.
    equal = robust_z([2.0] * 5 + [2.0 + 1e-12, 2.1], [0.0] * 7, [True] * 7)
    assert outlying(equal).tolist() == [False] * 6 + [True]


def test_the_odd_one_out_is_named(here):
    traces = batch_jobs.write_batch(here, 6)
    batch_jobs.write_trace(here / "traces/tile-03.csv", 3, g=2.02)
    report = run_batch(
        template_plan(Template("tile.toml"), traces), "out", executor=batch_jobs.Serial(), pictures=False
    )
    assert report.good
    assert [row["outlier"] for row in rows_of(here / "out")] == ["", "", "", "r.g", "", ""]


def test_units_of_jobs_that_differ_are_brought_together(here, in_process):
    for n, unit in enumerate(("1.0 mT", "10 G", "0.001 T")):
        batch_jobs.write_trace(here / f"t{n}.csv", n)
        job = batch_jobs.TEMPLATE.replace("[[trace]]", f'[[trace]]\nfile = "t{n}.csv"').replace("1.0 mT", unit)
        (here / f"j{n}.toml").write_text(job)
    assert main(["batch", "j0.toml", "j1.toml", "j2.toml", "--out", "out", "--no-pictures", "--workers", "1"]) == 0
    table = pd.read_csv("out/summary.csv")
    assert table["r.width.gaussian"].between(0.75, 0.85).all()
    assert table["r.width.gaussian_uncertainty"].between(1e-3, 2e-2).all()
    own = json.loads((here / "out/j1/outcome.json").read_text())["parameters"]["r.width.gaussian"]
    assert own["unit"] == "G"
    assert table["r.width.gaussian"][1] == pytest.approx(own["value"] / 10, rel=1e-12)


def test_parquet_where_pyarrow_is(here, capsys, in_process):
    batch_jobs.write_batch(here, 1)
    batch = ["batch", "--template", "tile.toml", "traces/tile-00.csv", "--out", "out", "--no-pictures", "--parquet"]
    try:
        import pyarrow.parquet  # noqa: F401
    except ImportError:
        assert main(batch) == 2
        assert "--parquet: pyarrow is not installed" in capsys.readouterr().err
        assert not (here / "out").exists()
    else:
        assert main(batch) == 0
        ours, text = pd.read_parquet("out/summary.parquet"), pd.read_csv("out/summary.csv")
        words = ["trace", "status", "outlier", "warnings", "hash", "reason"]
        pd.testing.assert_frame_equal(ours.drop(columns=words), text.drop(columns=words))
        texts = pd.read_csv("out/summary.csv", usecols=words, dtype=str, keep_default_na=False)
        for name in words:
            assert list(ours[name]) == list(texts[name])


def test_the_parent_loads_nothing_that_fits_or_draws():
    """It lives as long as its batch: what it does not hold is free for the workers, and it starts at once."""
    code = "import sys, spinfit.batch.run; print({'lmfit', 'matplotlib', 'h5py', 'pandas'} & set(sys.modules))"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True, timeout=120)
    assert done.stdout.strip() == "set()"


def test_archive_and_report_are_made_when_something_changed(here, capsys, in_process):
    traces = batch_jobs.write_batch(here, 1)
    batch = ["batch", "--template", "tile.toml", *traces, "--out", "out", "--no-pictures"]
    assert main(batch) == 0
    made = {name: (here / "out" / name).stat().st_mtime_ns for name in ("batch.h5", "report.html")}
    assert "batch.h5" in capsys.readouterr().out
    assert main(batch) == 0
    assert {name: (here / "out" / name).stat().st_mtime_ns for name in made} == made
    assert "batch.h5" not in capsys.readouterr().out
    (here / "out/report.html").unlink()
    assert main(batch) == 0
    assert (here / "out/report.html").exists()
    batch_jobs.write_trace(here / "traces/tile-00.csv", 5)
    assert main([*batch, "--no-archive"]) == 0
    assert not (here / "out/batch.h5").exists()
