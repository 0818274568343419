"""Make the virtual environment and install the project into it; nothing but the standard library.

Run by the shell scripts as ``python _environment.py ROOT ENVIRONMENT``.  Does nothing when the
environment already holds what ``pyproject.toml`` asks for.
"""

from __future__ import annotations

import hashlib
import os
import subprocess
import sys
from pathlib import Path

EXTRAS = ("test,docs,fast", "test,docs")
"""What is installed beside the project; the second where the first is not to be had (no compiled kernels)."""


def fingerprint(root: Path, environment: Path) -> str:
    """Return what the installation depends on: the project's file, its place, the environment's place."""
    project = (root / "pyproject.toml").read_bytes()
    return hashlib.sha256(b"\0".join([project, os.fsencode(root), os.fsencode(environment)])).hexdigest()


def run(*command: str | Path) -> bool:
    """Run a command with its output going to standard error; return whether it succeeded."""
    return subprocess.run([str(part) for part in command], stdin=subprocess.DEVNULL, stdout=sys.stderr).returncode == 0


def works(python: Path) -> bool:
    """Say whether an environment's Python starts and is recent enough."""
    check = "import sys; sys.exit(sys.version_info < (3, 11))"
    try:
        return subprocess.run([python, "-c", check], stdin=subprocess.DEVNULL, capture_output=True).returncode == 0
    except OSError:
        return False


def has_pip(python: Path) -> bool:
    """Say whether an environment's Python has pip."""
    return subprocess.run([python, "-m", "pip", "--version"], capture_output=True).returncode == 0


def create(environment: Path, python: Path) -> None:
    """Make the virtual environment; leave with a message when that cannot be done."""
    if environment.exists() and any(environment.iterdir()) and not (environment / "pyvenv.cfg").is_file():
        sys.exit(f"{environment} holds something else than a virtual environment: name another folder in SPINFIT_ENV")
    print(f"making a virtual environment in {environment}", file=sys.stderr, flush=True)
    if run(sys.executable, "-m", "venv", "--clear", environment) and works(python):
        return
    # Some distributions split off what venv needs to bring pip along; the system's own pip does as well.
    if has_pip(Path(sys.executable)) and run(sys.executable, "-m", "venv", "--clear", "--without-pip", environment):
        return
    sys.exit(
        f"{sys.executable} cannot make a virtual environment: install its venv module "
        "(on Debian and Ubuntu the package python3-venv) or name another Python in PYTHON"
    )


def install(root: Path, python: Path) -> None:
    """Install the project, as it stands in its folder, with what its tests need."""
    print("installing spinfit and what it needs", file=sys.stderr, flush=True)
    pip = [python, "-m", "pip"] if has_pip(python) else [sys.executable, "-m", "pip", "--python", python]
    options = ["--quiet", "--disable-pip-version-check", "--no-input"]
    if not any(run(*pip, "install", *options, "--editable", f"{root}[{extras}]") for extras in EXTRAS):
        sys.exit("pip could not install the project: its message stands above; is the package index reachable?")


def main() -> None:
    """Bring the environment up to date."""
    root, environment = Path(sys.argv[1]), Path(sys.argv[2])
    stamp = environment / ".spinfit-installed"
    python = environment / "bin" / "python"
    wanted = fingerprint(root, environment)
    if works(python) and stamp.is_file() and stamp.read_text(encoding="utf-8") == wanted:
        return
    if not works(python):
        create(environment, python)
    install(root, python)
    stamp.write_text(wanted, encoding="utf-8")


if __name__ == "__main__":
    main()
