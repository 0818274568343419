"""Processes that are forked, spawned or served by a fork server: the same numbers from each, HDF5 included."""

from __future__ import annotations

import json
import multiprocessing
from concurrent.futures import ProcessPoolExecutor
from pathlib import Path

import batch_jobs
import numpy as np
import pytest

from spinfit.batch.run import run_batch
from spinfit.batch.tasks import template_plan
from spinfit.batch.template import Template
from spinfit.cli import main
from spinfit.files.curves import write_spectrum
from spinfit.files.reading import assemble, read

METHODS = multiprocessing.get_all_start_methods()
pytestmark = pytest.mark.filterwarnings("ignore:.*fork.*:DeprecationWarning")  # of libraries' threads, from 3.12 on


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Traces as HDF5, which a process beside ours reads, and a template; the fits of one of them in this process."""
    folder = tmp_path_factory.mktemp("start")
    (folder / "tile.toml").write_text(batch_jobs.TEMPLATE, encoding="utf-8")
    for n in range(2):
        found = assemble(read(batch_jobs.write_trace(folder / "t.csv", n)))
        header = {"frequency": 9432.1}
        write_spectrum(folder / f"t{n}.h5", found.field, found.signal, header=header)
    job = batch_jobs.TEMPLATE.replace("[[trace]]", '[[trace]]\nfile = "t0.h5"')
    (folder / "job.toml").write_text(job, encoding="utf-8")
    assert main(["fit", str(folder / "job.toml"), "--out", str(folder / "here")]) == 0
    return folder


@pytest.mark.parametrize("method", METHODS)
def test_a_fit_and_a_batch(folder, method, monkeypatch):
    monkeypatch.chdir(folder)
    with ProcessPoolExecutor(1, mp_context=multiprocessing.get_context(method)) as pool:
        raw = pool.submit(read, "t0.h5").result(120)
        np.testing.assert_array_equal(raw.columns, read("t0.h5").columns)
        assert pool.submit(main, ["fit", "job.toml", "--out", method]).result(120) == 0
        plan = template_plan(Template("tile.toml"), ["t0.h5", "t1.h5"])
        assert run_batch(plan, f"batch-{method}", executor=pool, pictures=False).good
    ours = json.loads((folder / "here/outcome.json").read_bytes())["parameters"]
    for place in (folder / method, folder / f"batch-{method}" / "t0"):
        theirs = json.loads((place / "outcome.json").read_bytes())["parameters"]
        assert theirs["r.g"] == ours["r.g"]
