"""Files that change, grow or go away while they are read, and clocks that go backwards."""

from __future__ import annotations

import ast
import builtins
import os
import threading
import time
from pathlib import Path

import batch_jobs
import pytest

from spinfit.batch.run import run_batch
from spinfit.batch.tasks import template_plan
from spinfit.batch.template import Template
from spinfit.cli import main
from spinfit.errors import InputError
from spinfit.files import raw
from spinfit.files.reading import read_content

PACKAGE = Path(raw.__file__).resolve().parents[1]


class Meddling:
    """A file in whose first read somebody else does something."""

    def __init__(self, stream, action):
        self.stream, self.action = stream, action

    def __enter__(self):
        return self

    def __exit__(self, *reason):
        self.stream.close()

    def fileno(self):
        return self.stream.fileno()

    def read(self, size):
        half = self.stream.read(size // 2)
        self.action()
        return half + self.stream.read(size - len(half))


def while_read(monkeypatch, path: Path, action) -> None:
    """Have `action` done when half of the file is read."""
    real = builtins.open

    def opened(name, *args, **kwargs):
        stream = real(name, *args, **kwargs)
        return Meddling(stream, action) if Path(name) == path else stream

    monkeypatch.setattr(raw, "open", opened, raising=False)


def grow(path: Path) -> None:
    with open(path, "a") as stream:
        stream.write("350.0,1.0\n")


def change(path: Path) -> None:
    content = path.read_bytes()
    path.write_bytes(content.replace(b"3", b"4"))
    os.utime(path, ns=(1, 1))


@pytest.mark.parametrize("action", [grow, change, lambda path: os.truncate(path, 30)])
def test_a_file_that_is_written_to_while_it_is_read(tmp_path, monkeypatch, action):
    path = batch_jobs.write_trace(tmp_path / "a.csv", 1)
    while_read(monkeypatch, path, lambda: action(path))
    with pytest.raises(InputError, match="was changed while it was read; wait until the measurement has ended"):
        raw.load(path)


@pytest.mark.skipif(os.name != "posix", reason="other systems keep files that are open")
def test_a_file_that_is_removed_or_replaced_while_it_is_read(tmp_path, monkeypatch):
    """What was opened is read to its end: the old content, whole."""
    path = batch_jobs.write_trace(tmp_path / "a.csv", 1)
    content = path.read_bytes()

    def replace() -> None:
        (tmp_path / "b").write_text("other")
        os.replace(tmp_path / "b", path)

    while_read(monkeypatch, path, replace)
    assert raw.load(path)[0] == content
    assert raw.load(path)[0] == b"other"
    while_read(monkeypatch, path, path.unlink)
    assert raw.load(path)[0] == b"other"
    with pytest.raises(InputError, match="there is no such file"):
        raw.load(path)


def test_a_file_that_goes_away_between_a_look_and_its_opening(tmp_path, monkeypatch):
    path = batch_jobs.write_trace(tmp_path / "a.csv", 1)
    real = Path.is_file
    monkeypatch.setattr(Path, "is_file", lambda self: (real(self), self.unlink())[0] if self == path else real(self))
    with pytest.raises(InputError, match="there is no such file"):
        raw.load(path)


def test_a_trace_that_somebody_goes_on_writing(tmp_path):
    """Each try gives a whole number of the lines that were written, or says that somebody writes."""
    path, done = tmp_path / "a.csv", threading.Event()
    path.write_text("field/mT,signal\n")

    def write() -> None:
        for n in range(400):
            with open(path, "a") as stream:
                stream.write(f"{300 + 0.1 * n:.1f},{n}\n")
        done.set()

    writer = threading.Thread(target=write)
    writer.start()
    read, refused = [], set()
    while not done.is_set():
        try:
            read.append(raw.load(path)[0])
        except InputError as error:
            refused.add(error.found)
    writer.join()
    assert refused <= {"was changed while it was read"}
    read.append(raw.load(path)[0])
    assert all(content.endswith(b"\n") and read[-1].startswith(content) for content in read)


def test_a_trace_that_changed_during_a_batch_is_fitted_again(tmp_path, monkeypatch):
    """What the journal calls done is the file as it was handed out."""
    monkeypatch.chdir(tmp_path)
    traces = batch_jobs.write_batch(tmp_path, 2)
    plan = template_plan(Template("tile.toml"), traces)
    real = raw.load
    monkeypatch.setattr("spinfit.files.store.load", lambda path: (grow(Path(path)), real(path))[1])
    assert run_batch(plan, "out", executor=batch_jobs.Serial(), pictures=False).fitted == 2
    monkeypatch.setattr("spinfit.files.store.load", real)
    assert run_batch(plan, "out", executor=batch_jobs.Serial(), pictures=False).fitted == 2
    assert run_batch(plan, "out", executor=batch_jobs.Serial(), pictures=False).kept == 2


# Clocks ---------------------------------------------------------------------------------------------


CLOCKS = ("monotonic", "perf_counter", "process_time", "sleep")


def test_nothing_looks_at_the_time_of_day():
    """Durations are read off clocks that the system never turns back; no result depends on a date."""
    for path in PACKAGE.rglob("*.py"):
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
            if isinstance(node, ast.Attribute) and isinstance(node.value, ast.Name) and node.value.id == "time":
                assert node.attr in CLOCKS, f"{path}:{node.lineno}: time.{node.attr}"
            if isinstance(node, (ast.Import, ast.ImportFrom)):
                names = [alias.name for alias in node.names]
                from_time = isinstance(node, ast.ImportFrom) and node.module == "time"
                assert "datetime" not in (*names, getattr(node, "module", None)), f"{path}:{node.lineno}"
                assert not from_time, f"{path}:{node.lineno}: write time.monotonic, so that this test sees it"


def test_a_clock_that_goes_backwards_changes_nothing(tmp_path, monkeypatch):
    """Neither a fit, nor what a batch finds done: files from the future are as good as others."""
    monkeypatch.chdir(tmp_path)
    traces = batch_jobs.write_batch(tmp_path, 2)
    batch = ["batch", "--template", "tile.toml", *traces, "--no-pictures", "--workers", "1"]
    assert main([*batch, "--out", "calm"]) == 0
    moments = iter(range(2_000_000_000, 0, -3600))
    monkeypatch.setattr(time, "time", lambda: float(next(moments)))
    assert main([*batch, "--out", "out"]) == 0
    for path in sorted((tmp_path / "out").rglob("*")):
        os.utime(path, (3e9, 3e9))
    for trace in traces:
        os.utime(trace, (3.1e9, 3.1e9))
    before = (tmp_path / "out/journal.jsonl").read_bytes()
    assert main([*batch, "--out", "out"]) == 0
    assert (tmp_path / "out/journal.jsonl").read_bytes() == before
    assert batch_jobs.timeless(tmp_path / "out") == batch_jobs.timeless(tmp_path / "calm")
    for name in ("tile_00/outcome.json", "tile_01/outcome.h5", "batch.h5"):
        assert (tmp_path / "out" / name).read_bytes() == (tmp_path / "calm" / name).read_bytes()


# A trace that grows --------------------------------------------------------------------------------


def rows(count: int, form: str) -> str:
    return "".join(form.format(300 + 0.1 * n, 12.3456 * (n - 20)) for n in range(count))


@pytest.mark.parametrize(
    ("separator", "form"), [(",", "{:.3f},{:.5f}\n"), ("\t", "{:.3f}\t{:.4e}\n"), (" ", "{:.3f} {:.2f}\n")]
)
def test_a_last_line_that_was_cut_off_is_refused_wherever_it_was_cut(separator, form):
    """Half a number reads as another one; only where the line's end alone is missing nothing is wrong."""
    whole = f"field/mT{separator}signal\n" + rows(40, form)
    last = len(form.format(303.9, 12.3456 * 19))
    size = len(read_content(whole.encode(), "a.csv").columns)
    for cut in range(1, last):
        content = whole[:-cut].encode()
        if cut == 1:  # the line's end alone is missing
            assert len(read_content(content, "a.csv").columns) == size
        else:
            with pytest.raises(InputError, match="line 41: .*(is cut off|column|is not a number)"):
                read_content(content, "a.csv")


def test_numbers_of_various_lengths_are_not_taken_for_cut_off():
    """Where trailing zeros are left out, a last number with fewer digits is a number like others."""
    for text in (rows(40, "{:.2f},{:.3g}\n"), rows(40, "{:.2f},{:.0f}\n"), rows(5, "{:.2f},{:.2f}\n")[:-2]):
        assert len(read_content(text.rstrip("\n").encode(), "a.csv").columns) in (40, 5)
