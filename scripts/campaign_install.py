"""The project as a user gets it: an sdist, a wheel of it, a fresh environment, and the demonstration from there.

Run as ``scripts/campaign install`` or ``python scripts/campaign_install.py [--all] [--tests]``; it needs git and a
package index.  With ``--tests`` the tests of the sdist run against the installed wheel, its own modules hidden.
The short form, the content of a wheel, is in the tests.
"""

from __future__ import annotations

import argparse
import os
import shutil
import subprocess
import sys
import tarfile
import tempfile
import venv
from pathlib import Path

ROOT = Path(__file__).resolve().parent.parent
# Tracked, but of use in a clone only.
NOT_PACKED = (".gitignore", ".ci/")
QUICK = ("pigment_triplet", "varnish_radical")
MADE_BY_BUILD = ("PKG-INFO", "setup.cfg", "spinfit.egg-info/")


def run(*command: str | Path, **more: object) -> str:
    """Run a command and return what it printed; leave with that when it fails."""
    done = subprocess.run([str(part) for part in command], capture_output=True, text=True, timeout=7200, **more)
    if done.returncode != 0:
        sys.exit(f"{' '.join(map(str, command))}: exit code {done.returncode}\n{done.stdout}{done.stderr}")
    return done.stdout


def environment(place: Path, *wanted: str | Path) -> Path:
    """Make a virtual environment with some packages and return its folder of programs."""
    venv.create(place, with_pip=True)
    programs = place / "bin"
    run(programs / "python", "-m", "pip", "install", "--quiet", "--disable-pip-version-check", *wanted)
    return programs


def build(work: Path) -> Path:
    """Build from the tracked files alone, compare the sdist with them, and return the wheel."""
    tracked = run("git", "-C", ROOT, "ls-files", "-z").rstrip("\0").split("\0")
    source = work / "source"
    for name in filter(lambda name: (ROOT / name).is_file(), tracked):
        (source / name).parent.mkdir(parents=True, exist_ok=True)
        shutil.copy(ROOT / name, source / name)
    programs = environment(work / "builder", "build")
    run(programs / "python", "-m", "build", "--outdir", work, source)  # the wheel is built of the sdist
    (sdist,), (wheel,) = work.glob("*.tar.gz"), work.glob("*.whl")
    with tarfile.open(sdist) as archive:
        archive.extractall(work / "sdist", filter="data")
        packed = {name.partition("/")[2] for name in archive.getnames() if archive.getmember(name).isfile()}
    expected = {name for name in tracked if not name.startswith(NOT_PACKED) and (source / name).is_file()}
    missing = sorted(expected - packed)
    more = sorted(name for name in packed - expected if not name.startswith(MADE_BY_BUILD))
    print(f"{sdist.name}: {sdist.stat().st_size / 1e3:.0f} kB, {len(packed)} files; missing {missing}, more {more}")
    print(f"{wheel.name}: {wheel.stat().st_size / 1e3:.0f} kB", flush=True)
    if missing or more:
        sys.exit(1)
    return wheel


def use(wheel: Path, work: Path, every: bool) -> None:
    """Install the wheel and fit demonstration jobs with it, far from the project's folder."""
    programs = environment(work / "user", wheel)
    rack = work / "rack"
    shutil.copytree(ROOT / "demo_spectra", rack)
    apart = {key: value for key, value in os.environ.items() if not key.startswith("PYTHON")}
    print(run(programs / "spinfit", "--version", cwd=rack, env=apart).strip())
    where = run(programs / "python", "-c", "import spinfit; print(spinfit.__file__)", cwd=rack, env=apart).strip()
    if not where.startswith(str(work)):
        sys.exit(f"spinfit was imported from {where}")
    for job in sorted(path.stem for path in rack.glob("*.toml")) if every else QUICK:
        run(programs / "spinfit", "fit", f"{job}.toml", "--out", f"out/{job}", cwd=rack, env=apart)
        made = sorted(path.name for path in (rack / "out" / job).iterdir())
        print(f"{job}: {', '.join(made)}", flush=True)


def test(wheel: Path, work: Path) -> None:
    """Run the sdist's tests with the wheel; what only reads the sources finds them where the sdist has them."""
    (project,) = (work / "sdist").iterdir()
    programs = environment(work / "tester", f"{wheel}[test,docs,fast]")
    apart = {key: value for key, value in os.environ.items() if not key.startswith("PYTHON")}
    # pytest as a program, and from elsewhere: `python -m` and the project's folder would put its modules first.
    command = [programs / "pytest", "-p", "no:cacheprovider", "-p", "where", "-c", project / "pyproject.toml"]
    where = "import spinfit, sys\n\n\ndef pytest_report_header(config):\n    return f'spinfit is {spinfit.__file__}'\n"
    (work / "where.py").write_text(where, encoding="utf-8")
    said = run(*command, project / "tests", cwd=work, env={**apart, "PYTHONPATH": str(work)})
    if f"spinfit is {work / 'tester'}" not in said:
        sys.exit(f"the tests did not run with the wheel:\n{said}")
    print("the sdist's tests with the wheel:", said.strip().splitlines()[-1], flush=True)


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__.partition("\n")[0])
    parser.add_argument(
        "--all", action="store_true", help="fit every job, which takes minutes without compiled kernels"
    )
    parser.add_argument("--tests", action="store_true", help="run the sdist's tests with the installed wheel: minutes")
    args = parser.parse_args()
    with tempfile.TemporaryDirectory(prefix="spinfit-install-") as folder:
        work = Path(folder).resolve()
        wheel = build(work)
        use(wheel, work, args.all)
        if args.tests:
            test(wheel, work)
    return 0


if __name__ == "__main__":
    sys.exit(main())
