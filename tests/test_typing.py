"""Types: a strict checker accepts the public surface, and a user's program sees it."""

from __future__ import annotations

import subprocess
import sys
import tomllib
from pathlib import Path

import pytest

import spinfit

ROOT = Path(__file__).resolve().parents[1]
PROGRAM = ROOT / "tests" / "typed_program.py"


def checked(tmp_path: Path, *arguments: str) -> subprocess.CompletedProcess[str]:
    pytest.importorskip("mypy")
    command = [sys.executable, "-m", "mypy", "--cache-dir", str(tmp_path), *arguments]
    return subprocess.run(command, capture_output=True, text=True, timeout=500, cwd=ROOT)


def test_every_public_name_is_in_a_module_that_is_checked() -> None:
    told = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["tool"]["mypy"]
    assert told["strict"]
    assert {f"spinfit/{home.replace('.', '/')}.py" for home in spinfit._HOMES.values()} <= set(told["files"])


def test_the_public_surface_and_a_program_on_it_have_no_mistake(tmp_path: Path) -> None:
    done = checked(tmp_path)
    assert done.returncode == 0, done.stdout + done.stderr
    done = checked(tmp_path, str(PROGRAM))
    assert done.returncode == 0, done.stdout + done.stderr
    # What the checker would tell is told.
    wrong = tmp_path / "wrong.py"
    program = PROGRAM.read_text(encoding="utf-8")
    wrong.write_text(program + "spinfit.Width(gauss=1.0)\nspinfit.fit(model)\nspinfit.smulate\n", encoding="utf-8")
    done = checked(tmp_path, str(wrong))
    assert done.stdout.count(" error: ") == 3, done.stdout
    for word in ("gauss", '"Model"', "smulate"):
        assert word in done.stdout

