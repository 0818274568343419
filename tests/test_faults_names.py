"""Names of files and folders with blanks, quotes, line ends, other alphabets, or bytes that are no UTF-8."""

from __future__ import annotations

import json
import os
import sys
from pathlib import Path

import batch_jobs
import numpy as np
import pytest

from spinfit.cli import main
from spinfit.files.curves import write_spectrum
from spinfit.files.reading import read
from spinfit.files.toml_writing import toml_text
from spinfit.report.archive_reading import read_archive

NAMES = [
    "with blanks ", "it's \"quoted\" #1", "line\nend\ttab", "Ürün–試料 μ", "$(x);&|`x`", "\x1b[2J\x1b[31mred", "-o"
]  # fmt: skip
pytestmark = pytest.mark.skipif(os.name != "posix", reason="other systems forbid such names")


def place(folder: Path, name: str) -> Path:
    """Return a folder of that name, or skip where the file system has no such names."""
    try:
        (folder / name).mkdir()
    except (OSError, UnicodeError):
        pytest.skip("the file system has no such names")
    return folder / name


def write_job(folder: Path, name: str) -> str:
    """Write a job and its trace, both called so; return the job's name."""
    batch_jobs.write_trace(folder / f"{name}.csv", 3)
    before, _, after = batch_jobs.TEMPLATE.partition("[[trace]]\n")
    entry = toml_text({"trace": [{"file": f"./{name}.csv", "frequency": "9.4321 GHz"}]})
    (folder / f"{name}.toml").write_text(before + entry + after, encoding="utf-8")
    return f"./{name}.toml"


@pytest.mark.parametrize("name", NAMES)
def test_a_fit_and_its_archive(tmp_path, monkeypatch, capsys, name):
    folder = place(tmp_path, name)
    monkeypatch.chdir(folder)
    job = write_job(folder, name)
    assert main(["fit", job, "--out", f"./{name}"]) == 0
    out, err = capsys.readouterr()
    assert err == ""
    assert out.replace("\n", "").isprintable()
    assert len(list((folder / name).iterdir())) == 6
    record = json.loads((folder / name / "outcome.json").read_text(encoding="utf-8"))
    assert record["parameters"]["r.g"]["value"] == pytest.approx(batch_jobs.g_of(3), abs=1e-4)
    archive = read_archive(folder / name / "outcome.h5")
    assert archive.files[f"./{name}.csv"] == (folder / f"{name}.csv").read_bytes()
    assert main(["rerun", f"./{name}/outcome.h5"]) == 0
    assert "bit for bit" in capsys.readouterr().out


def test_a_batch(tmp_path, monkeypatch, capsys):
    folder = place(tmp_path, "Ort 'ä'\n")
    monkeypatch.chdir(folder)
    (folder / "tile.toml").write_text(batch_jobs.TEMPLATE, encoding="utf-8")
    traces = [str(batch_jobs.write_trace(folder / f"{name}.csv", n)) for n, name in enumerate(NAMES)]
    assert main(["batch", "--template", "tile.toml", *traces, "--out", "o\n'ut'", "--no-pictures"]) == 0
    assert capsys.readouterr().out.replace("\n", "").isprintable()
    rows = batch_jobs.rows_of(folder / "o\n'ut'")
    assert [row["status"] for row in rows] == ["good"] * len(NAMES)
    for n, row in enumerate(rows):
        assert float(row["r.g"]) == pytest.approx(batch_jobs.g_of(n), abs=1e-4)
    assert main(["fit", f"o\n'ut'/{rows[2]['trace']}/job.toml"]) == 0  # the copy of the job finds its file


@pytest.mark.parametrize("name", NAMES)
@pytest.mark.parametrize("suffix", [".csv", ".jdx", ".h5"])
def test_a_spectrum(tmp_path, name, suffix):
    path = place(tmp_path, name) / f"{name}{suffix}"
    field = np.linspace(300, 340, 5)
    write_spectrum(path, field, np.sin(field), header={"title": name})
    found = read(path)
    np.testing.assert_array_equal(found.columns, np.transpose([field, np.sin(field)]))
    assert found.header.get("title", "").isprintable()


@pytest.mark.skipif(sys.platform != "linux", reason="other systems have no names that are not UTF-8")
def test_names_that_are_not_utf8(tmp_path, monkeypatch, capsys):
    """Files and folders may be called so, but for those that a job would have to name: TOML is UTF-8."""
    odd = os.fsdecode(b"tile-\xff")
    folder = place(tmp_path, odd)
    monkeypatch.chdir(folder)
    os.rename(write_job(folder, "job"), f"{odd}.toml")
    assert main(["fit", f"{odd}.toml", "--out", f"{odd}.out"]) == 0
    assert "tile-\ufffd: " in capsys.readouterr().out
    assert len(list((folder / f"{odd}.out").iterdir())) == 6
    assert main(["rerun", f"{odd}.out/outcome.h5"]) == 0
    assert main(["inspect", f"{odd}.out/outcome.h5"]) == 0
    (folder / f"{odd}.model.toml").write_text(
        '[sweep]\nfrequency = "9.5 GHz"\nfield = "300, 380 mT"\npoints = 5\n[[species]]\nS = "1/2"\ng = 2.0\n'
        '[species.width]\ngaussian = "1 mT"\n'
    )
    for suffix in (".csv", ".jdx", ".h5"):
        assert main(["simulate", f"{odd}.model.toml", "-o", f"{odd}{suffix}", "--plot", f"{odd}.png"]) == 0
        assert len(read(f"{odd}{suffix}").columns) == 5
    os.rename("job.csv", f"{odd}.csv")
    (folder / "tile.toml").write_text(batch_jobs.TEMPLATE, encoding="utf-8")
    traces = [str(batch_jobs.write_trace(folder / "good.csv", 1)), f"{odd}.csv"]
    assert main(["batch", "--template", "tile.toml", *traces, "--out", f"{odd}.b"]) == 1
    assert [row["status"] for row in batch_jobs.rows_of(folder / f"{odd}.b")] == ["good", "failed"]
    assert "names a file whose name is not UTF-8; rename the file" in capsys.readouterr().err
    assert "tile-\ufffd.b" in (folder / f"{odd}.b" / "report.html").read_text(encoding="utf-8")


def test_a_zero_character_is_refused(tmp_path, capsys):
    job = tmp_path / "job.toml"
    job.write_text(batch_jobs.TEMPLATE.replace("[[trace]]", '[[trace]]\nfile = "a\\u0000.csv"'))
    assert main(["fit", str(job)]) == 2
    assert "trace.1.file: has a zero character" in capsys.readouterr().err
