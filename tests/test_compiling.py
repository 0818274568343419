"""Compiled code that cannot be kept or read back costs time and nothing else."""

from __future__ import annotations

import errno
import os
import subprocess
import sys
from pathlib import Path

import pytest

from spinfit.compiling import kept_compiled

numba = pytest.importorskip("numba")

# A module of its own: numba keeps what it finds in files, beside them or under NUMBA_CACHE_DIR.
CODE = """
from numba import njit
from spinfit.compiling import kept_compiled
def twice(x):
    return 2 * x
kept = kept_compiled(njit, twice)
print(kept(21), "found" if kept.stats.cache_hits else "compiled")
"""


def run(folder: Path) -> str:
    """Run the module in a process of its own; return the result, and whether it was there already."""
    environment = os.environ | {"PYTHONPATH": str(Path(__file__).resolve().parents[1]), "NUMBA_CACHE_DIR": str(folder)}
    command = [sys.executable, folder / "module.py"]
    done = subprocess.run(command, env=environment, capture_output=True, text=True, timeout=120)
    assert (done.returncode, done.stderr) == (0, "")
    return done.stdout.strip()


@pytest.mark.parametrize("pattern", ["*.nbi", "*.nbc"])
def test_files_that_were_cut_off_are_made_anew(tmp_path, pattern):
    (tmp_path / "module.py").write_text(CODE)
    assert run(tmp_path) == "42 compiled"
    assert run(tmp_path) == "42 found"
    (path,) = tmp_path.rglob(pattern)
    os.truncate(path, 40)
    assert run(tmp_path) == "42 compiled"
    assert run(tmp_path) == "42 found"


def test_a_full_disk_keeps_nothing(monkeypatch):
    def triple(x):
        return 3 * x

    made = kept_compiled(numba.njit, triple)
    kept = made._cache._kept

    def full(*what):
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    monkeypatch.setattr(kept, "save_overload", full)
    monkeypatch.setattr(kept, "load_overload", full)
    assert made(14) == 42


def test_nowhere_to_keep_it():
    def half(x):
        return x / 2

    def njit(**options):
        if "cache" in options:
            raise RuntimeError("cannot cache function: no locator available")
        return numba.njit(**options)

    assert kept_compiled(njit, half)(84) == 42
