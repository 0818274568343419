"""What archives and the guarded reading of HDF5 cost."""

from __future__ import annotations

import io
import tempfile
from collections.abc import Iterator
from pathlib import Path

import h5py
import numpy as np

from benchmarks.measure import Row, timed
from spinfit.files import guard
from spinfit.files.curves import write_nxdata
from spinfit.files.hdf5 import read_hdf5
from spinfit.files.hdf5_child import answer_to
from spinfit.fitting.data import Job, Trace
from spinfit.fitting.outcome import Curves, Outcome, Quality, Value
from spinfit.report.archive import archive_bytes
from spinfit.report.archive_reading import read_archive
from spinfit.species import Species, Spin
from spinfit.sweep import Sample

POINTS = 2048


def _file(points: int) -> bytes:
    buffer = io.BytesIO()
    with h5py.File(buffer, "w") as root:
        write_nxdata(root.create_group("a"), np.linspace(300.0, 350.0, points), {"signal": np.ones(points)})
    return buffer.getvalue()


def _outcome() -> tuple[Outcome, Job]:
    field = np.linspace(300.0, 350.0, POINTS)
    noise = np.random.default_rng(0).normal(size=(5, POINTS))
    curves = Curves("t", 9400.0, field, *noise[:4], noise[4] > -9, {"r": noise[0]}, noise=1.0, scale=1.0)
    values = {f"r.p{n}": Value(1.0, 0.1, 0.1, 0.0, varied=True) for n in range(8)}
    quality = Quality(True, True, 1.0, 1.0, POINTS, 10, 1.0, 1.0)
    names = tuple(values)
    found = Outcome("t", values, quality, names, np.eye(8), (), (curves,), provenance={"job": "x" * 1000})
    text = "\n".join(f"{a:.4f},{b:.6g}" for a, b in zip(field, noise[0], strict=True)).encode()
    trace = Trace("t", field, noise[0], noise[4] > -9, 9400.0)
    return found, Job((Species("r", (Spin(),)),), Sample(), (trace,), (), files={"t.csv": text})


def rows() -> Iterator[Row]:
    """Reading a trace with and without the guard, its first file, and one archive written and read."""
    question = {"what": "trace", "file": "f", "path": "", "under": []}
    for points in (POINTS, 1_000_000):
        content = _file(points)
        yield Row(f"HDF5 trace of {points} points, in this process", timed(lambda c=content: answer_to(question, c)))
        yield Row(f"HDF5 trace of {points} points, guarded", timed(lambda c=content: read_hdf5(c, "f")))

    def first() -> None:
        guard._child.stop()
        read_hdf5(_file(16), "f")

    yield Row("first HDF5 file of a process: the child is started", timed(first, repeats=3))
    outcome, job = _outcome()
    content = archive_bytes(outcome, job)
    yield Row("archive written", timed(lambda: archive_bytes(outcome, job)), note=f"{len(content)} bytes")
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "outcome.h5"
        path.write_bytes(content)
        yield Row("archive read and checked", timed(lambda: read_archive(path)))
