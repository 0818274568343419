"""The wheel: it holds the package with all its data, and nothing else."""

from __future__ import annotations

import email
import re
import shutil
import subprocess
import sys
import zipfile
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[1]
# What pip says where it cannot have the build backend: no network, or an index without it.
UNREACHABLE = re.compile(r"No matching distribution found for setuptools|Could not find a version.* setuptools")


@pytest.fixture(scope="module")
def source(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A copy of the project, in which no earlier build has left anything and nobody is at work."""
    source = tmp_path_factory.mktemp("source")
    shutil.copytree(ROOT / "spinfit", source / "spinfit")  # caches and all: they must not get in
    shutil.copytree(ROOT / "tests", source / "tests", ignore=shutil.ignore_patterns("__pycache__", ".hypothesis"))
    for name in ("pyproject.toml", "README.md", "LICENSE", "MANIFEST.in"):
        shutil.copy(ROOT / name, source)
    return source


@pytest.fixture(scope="module")
def wheel(source: Path, tmp_path_factory: pytest.TempPathFactory) -> zipfile.ZipFile:
    """What pip builds of it."""
    work = tmp_path_factory.mktemp("wheel")
    options = ["--no-deps", "--quiet", "--disable-pip-version-check", "--no-input", "--retries", "1"]
    command = [sys.executable, "-m", "pip", "wheel", *options, "--wheel-dir", str(work), str(source)]
    done = subprocess.run(command, capture_output=True, text=True, timeout=300)
    said = done.stdout + done.stderr
    if UNREACHABLE.search(said) or "No module named pip" in said:
        pytest.skip("pip cannot get the build backend here")
    assert done.returncode == 0, said
    (built,) = work.glob("*.whl")
    return zipfile.ZipFile(built)


def test_it_holds_every_file_of_the_package(wheel: zipfile.ZipFile, source: Path) -> None:
    packed = {name for name in wheel.namelist() if name.startswith("spinfit/")}
    files = {
        path.relative_to(source).as_posix()
        for path in (source / "spinfit").rglob("*")
        if path.is_file() and "__pycache__" not in path.parts
    }
    assert packed == files
    for name in packed:
        assert wheel.read(name) == (source / name).read_bytes()


def test_it_holds_nothing_else(wheel: zipfile.ZipFile) -> None:
    """Beside the package there is what the wheel says of itself, and that names the command and the licence."""
    others = {name for name in wheel.namelist() if not name.startswith("spinfit/")}
    (about,) = {name.partition("/")[0] for name in others}
    assert re.fullmatch(r"spinfit-[\d.]+\.dist-info", about)
    assert wheel.read(f"{about}/licenses/LICENSE") == (ROOT / "LICENSE").read_bytes()
    assert "spinfit = spinfit.cli:main" in wheel.read(f"{about}/entry_points.txt").decode()
    told = email.message_from_bytes(wheel.read(f"{about}/METADATA"))
    assert told["License-Expression"] == "BSD-3-Clause"
    needed = {re.match(r"[a-z0-9]+", line)[0] for line in told.get_all("Requires-Dist") if "extra ==" not in line}
    assert needed == {"numpy", "scipy", "lmfit", "matplotlib", "h5py", "rich", "tomlkit"}
