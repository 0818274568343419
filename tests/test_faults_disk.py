"""Disks that are full and folders that cannot be written to: one line, exit code 2, and nothing lost or half-written.

The room is bounded by the largest size that the system lets a file have (RLIMIT_FSIZE): it refuses the write as a
full disk does, at any byte that one likes.  Real full disks are on Linux in the last test.
"""

from __future__ import annotations

import json
import os
import shutil
import subprocess
import sys
from contextlib import contextmanager
from pathlib import Path

import batch_jobs
import numpy as np
import pytest

from spinfit.cli import main
from spinfit.errors import InputError
from spinfit.files.curves import write_spectrum
from spinfit.files.hdf5_writing import whole_hdf5
from spinfit.files.reading import read

resource = pytest.importorskip("resource", reason="the room is bounded by POSIX limits")

ROOT = Path(__file__).resolve().parents[1]
FIELD = np.linspace(300.0, 360.0, 1500)


@contextmanager
def room(size: int):
    """Let no file of this process grow beyond a size."""
    soft, hard = resource.getrlimit(resource.RLIMIT_FSIZE)
    resource.setrlimit(resource.RLIMIT_FSIZE, (size, hard))
    try:
        yield
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, (soft, hard))


def job_in(folder: Path) -> Path:
    """Write one trace with its job."""
    batch_jobs.write_batch(folder, 1)
    text = batch_jobs.TEMPLATE.replace("[[trace]]", '[[trace]]\nfile = "traces/tile-00.csv"')
    (folder / "job.toml").write_text(text, encoding="utf-8")
    return folder / "job.toml"


@pytest.mark.parametrize("suffix", [".csv", ".jdx", ".h5"])
def test_a_spectrum_that_finds_no_room_leaves_the_old_one(tmp_path, suffix):
    path = tmp_path / f"a{suffix}"
    write_spectrum(path, FIELD, np.cos(FIELD))
    old = path.read_bytes()
    for size in (0, len(old) // 3, len(old) - 1):
        with room(size), pytest.raises(InputError, match="cannot be written"):
            write_spectrum(path, FIELD, np.cos(FIELD))
        assert path.read_bytes() == old
        assert list(tmp_path.iterdir()) == [path]


def test_hdf5_at_every_size_that_the_disk_may_have(tmp_path):
    """The library itself ends a process with a segmentation fault when it cannot write; so this one is another."""
    code = (
        "import resource, sys\nimport numpy as np\n"
        "from spinfit.errors import InputError\nfrom spinfit.files.curves import write_spectrum\n"
        "x, bounded, size = np.linspace(300, 360, 400), 0, 0\n"
        "write_spectrum(sys.argv[1], x, x)\nwhole = len(open(sys.argv[1], 'rb').read())\n"
        "for size in range(0, whole, 97):\n"
        "    resource.setrlimit(resource.RLIMIT_FSIZE, (size, resource.RLIM_INFINITY))\n"
        "    try:\n        write_spectrum(sys.argv[1], x, 2 * x)\n"
        "    except InputError:\n        bounded += 1\n"
        "print(bounded == len(range(0, whole, 97)))\n"
    )
    done = subprocess.run(
        [sys.executable, "-c", code, str(tmp_path / "a.h5")],
        env=os.environ | {"PYTHONPATH": str(ROOT)}, capture_output=True, text=True, timeout=120,
    )  # fmt: skip
    assert (done.returncode, done.stdout.strip(), done.stderr) == (0, "True", "")
    np.testing.assert_array_equal(read(tmp_path / "a.h5").columns[:, 1], np.linspace(300, 360, 400))


def test_hdf5_reads_back_what_it_could_not_write(tmp_path):
    """Otherwise the library would take its own file for a damaged one, and say that in place of the full disk."""
    values = np.random.default_rng(1).normal(size=(20, 4000))

    def fill() -> None:
        with whole_hdf5(tmp_path / "a.h5") as (root, check):
            for n, row in enumerate(values):
                root[f"row{n}"] = row
            root.flush()
            for n, row in enumerate(values):
                np.testing.assert_array_equal(root[f"row{n}"][:], row)
            with pytest.raises(OSError, match="File too large"):
                check()

    with room(100_000), pytest.raises(InputError, match="cannot be written"):
        fill()
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("as_json", [False, True])
def test_a_fit_that_cannot_be_written_is_shown(tmp_path, monkeypatch, capsys, as_json):
    monkeypatch.chdir(tmp_path)
    job_in(tmp_path)
    with room(6000):
        assert main(["fit", "job.toml", "--out", "out", *(["--json"] if as_json else [])]) == 2
    out, err = capsys.readouterr()
    assert err.count("\n") == 1
    assert "cannot be written (File too large)" in err
    if as_json:
        assert json.loads(out)["parameters"]["r.g"]["value"] == pytest.approx(batch_jobs.g_of(0), abs=1e-3)
    else:
        assert "r.g " in out
        assert "nothing could be written" in out
    assert not (tmp_path / "out").exists()


def test_what_an_earlier_fit_left_stays(tmp_path, monkeypatch, capsys):
    monkeypatch.chdir(tmp_path)
    job_in(tmp_path)
    assert main(["fit", "job.toml", "--out", "out"]) == 0
    before = {path.name: path.read_bytes() for path in (tmp_path / "out").iterdir()}
    with room(max(map(len, before.values())) - 1):  # the last of them finds no room
        assert main(["fit", "job.toml", "--out", "out"]) == 2
        assert main(["rerun", "out/outcome.h5", "--out", "out"]) == 2
        shutil.copy("job.toml", "other.toml")
        assert main(["fit", "job.toml", "other.toml", "--compare", "--out", "both"]) == 2
    assert {path.name: path.read_bytes() for path in (tmp_path / "out").iterdir()} == before
    assert not (tmp_path / "both").exists()
    assert "cannot be told apart" in capsys.readouterr().out


def test_the_archive_of_a_batch_that_finds_no_room(tmp_path, monkeypatch, capsys):
    """The table and every fit are there; the archive can be made by the same command later."""
    monkeypatch.chdir(tmp_path)
    traces = batch_jobs.write_batch(tmp_path, 2)
    batch = ["batch", "--template", "tile.toml", *traces, "--out", "out", "--no-pictures"]
    assert main(batch) == 0
    whole = (tmp_path / "out/batch.h5").stat().st_size
    (tmp_path / "out/batch.h5").unlink()
    with room(whole - 1):
        main(batch)
    assert "batch.h5 was not written" in capsys.readouterr().err
    assert not (tmp_path / "out/batch.h5").exists()
    assert len(batch_jobs.rows_of(tmp_path / "out")) == 2
    assert main(batch) == 0
    assert (tmp_path / "out/batch.h5").stat().st_size == whole


def owner_only() -> None:
    """Give up the right of root to write where permissions forbid it (capabilities 1 and 2, by prctl(2))."""
    import ctypes

    for capability in (1, 2):
        ctypes.CDLL(None).prctl(24, capability, 0, 0, 0)


@pytest.mark.skipif(sys.platform != "linux", reason="gives up capabilities of Linux")
@pytest.mark.parametrize(
    "words",
    ["fit job.toml --out shut", "fit job.toml --out shut/new", "simulate m.toml -o shut/a.h5",
     "simulate m.toml -o shut/a.csv", "batch --template tile.toml traces/tile-00.csv --out shut",
     "batch --template tile.toml traces/tile-00.csv --out shut/new"],
)  # fmt: skip
def test_a_folder_that_is_read_only_is_told_before_anything_is_computed(tmp_path, words):
    job_in(tmp_path)
    (tmp_path / "m.toml").write_text(
        '[sweep]\nfrequency = "9.5 GHz"\nfield = "300, 380 mT"\npoints = 50\n'
        '[[species]]\nS = "1/2"\ng = 2.0\n[species.width]\ngaussian = "1 mT"\n'
    )
    (tmp_path / "shut").mkdir()
    (tmp_path / "shut").chmod(0o555)
    process = batch_jobs.spinfit(*words.split(), cwd=tmp_path, preexec_fn=owner_only)
    out, err = process.communicate(timeout=120)
    assert process.returncode == 2
    assert "Permission denied" in err
    assert err.count("\n") == 1
    assert "converged" not in out
    assert list((tmp_path / "shut").iterdir()) == []


def mounted(folder: Path, size: str) -> bool:
    """Put a small file system of its own into a folder, where that is allowed."""
    command = ["mount", "-t", "tmpfs", "-o", f"size={size}", "tmpfs", str(folder)]
    return shutil.which("mount") is not None and subprocess.run(command, capture_output=True).returncode == 0


@pytest.mark.skipif(sys.platform != "linux", reason="mounts a tmpfs")
def test_a_disk_that_is_really_full(tmp_path):
    """A batch goes on from there once there is room, and nothing of it is fitted twice."""
    traces = batch_jobs.write_batch(tmp_path, 3)
    disk = tmp_path / "disk"
    disk.mkdir()
    if not mounted(disk, "192k"):
        pytest.skip("only root may mount")
    try:
        filler = disk / "filler"
        batch = ["batch", "--template", "tile.toml", *traces, "--no-pictures", "--workers", "1", "--out", "disk/out"]
        with open(filler, "wb", buffering=0) as stream:
            stream.write(bytes(70_000))
        first = batch_jobs.spinfit(*batch, cwd=tmp_path)
        out, err = first.communicate(timeout=120)
        assert first.returncode == 1, err
        assert "No space left on device" in err
        done = [line["trace"] for line in batch_jobs.journal_of(disk / "out") if line["status"] == "good"]
        assert 0 < len(done) < 3
        filler.unlink()
        subprocess.run(["mount", "-o", "remount,size=2m", str(disk)], check=True)
        again = batch_jobs.spinfit(*batch, cwd=tmp_path)
        out, err = again.communicate(timeout=120)
        assert again.returncode == 0, err
        good = [line["trace"] for line in batch_jobs.journal_of(disk / "out") if line["status"] == "good"]
        assert sorted(good) == ["tile_00", "tile_01", "tile_02"]
        assert good[: len(done)] == done
    finally:
        subprocess.run(["umount", str(disk)], check=True)
