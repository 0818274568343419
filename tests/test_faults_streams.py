"""Standard streams that are full, closed or no terminal: one line, the right exit code, files written all the same."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import pytest

from spinfit.files.reading import read

pytestmark = pytest.mark.skipif(os.name != "posix", reason="streams are closed by a POSIX shell")

MODEL = """[sweep]
frequency = "9.5 GHz"
field = "300, 380 mT"
points = 50
[[species]]
S = "1/2"
g = 2.0
[species.width]
gaussian = "1 mT"
"""


def shell(words: str, folder: Path, redirections: str = "") -> subprocess.CompletedProcess[str]:
    """Run a command line with redirections of the shell; what is not redirected is kept."""
    root = str(Path(__file__).resolve().parents[1])
    environment = {key: value for key, value in os.environ.items() if key != "PYTHONUNBUFFERED"}
    return subprocess.run(
        ["sh", "-c", f'exec "$0" -m spinfit.cli {words} {redirections}', sys.executable],
        cwd=folder, env=environment | {"PYTHONPATH": root}, capture_output=True, text=True, timeout=120,
    )  # fmt: skip


@pytest.fixture
def folder(tmp_path):
    (tmp_path / "m.toml").write_text(MODEL)
    return tmp_path


@pytest.mark.parametrize("words", ["ion Er3+", "fit --help", "--help", "--version", "completion bash"])
def test_a_full_disk_behind_standard_output_is_said(words, folder):
    if not os.path.exists("/dev/full"):
        pytest.skip("no /dev/full here")
    done = shell(words, folder, ">/dev/full")
    assert done.returncode == 2
    assert done.stderr.count("\n") == 1
    assert "No space left" in done.stderr


def test_a_full_disk_behind_both_streams_keeps_the_exit_code(folder):
    if not os.path.exists("/dev/full"):
        pytest.skip("no /dev/full here")
    assert shell("ion Er3+", folder, ">/dev/full 2>/dev/full").returncode == 2
    assert shell("simulate none.toml", folder, "2>/dev/full").returncode == 2


@pytest.mark.parametrize("closed", [">&-", "2>&-", "<&- >&- 2>&-"])
def test_closed_streams_cost_nothing_but_what_would_have_gone_there(closed, folder):
    """Files opened in place of a closed stream would take its number, and what libraries say into them."""
    done = shell("simulate m.toml -o out.h5", folder, closed)
    assert done.returncode == 0
    assert done.stderr == ""
    assert len(read(folder / "out.h5").columns) == 50
    assert shell("simulate none.toml", folder, closed).returncode == 2


def test_no_terminal_at_all(folder):
    """In a session of its own, no process of it has a controlling terminal."""
    done = subprocess.run(
        [sys.executable, "-m", "spinfit.cli", "simulate", "m.toml", "--json"],
        cwd=folder, env={"PYTHONPATH": str(Path(__file__).resolve().parents[1])}, start_new_session=True,
        stdin=subprocess.DEVNULL, capture_output=True, text=True, timeout=120,
    )  # fmt: skip
    assert done.returncode == 0
    assert done.stderr == ""
    assert done.stdout.startswith("{\n")
