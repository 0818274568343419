"""How large a load may be: seconds and largest memory of each, measured on the command itself.

``traces``  one batch of many small traces (10 000 unless told otherwise), and the same command once more, which finds
            all of them done; ``job`` one job with many traces (500); ``points`` one trace with many points (2 million),
            looked into and fitted; ``dimension`` a species of many levels (2^10: an electron and nine protons, all
            exact), one crystal direction and a powder.  Each must finish, or be refused in one line.
"""

from __future__ import annotations

import argparse
import os
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np

from spinfit.species import Species, Spin, Width
from spinfit.spectrum import simulate
from spinfit.sweep import Sweep

RADICAL = """[[species]]
name = "r"
S = "1/2"
g = [2.011, 2.005, 2.002]
[species.width]
gaussian = "1.0 mT"
[accuracy]
tolerance = 1e-2
"""
FIT = '\n[fit]\nvary = ["r.g", "r.width.gaussian"]\n'
# The high-water mark of the process's own memory, which the rest of a machine has no part in.
RUN = """
import sys
from spinfit.cli import main
try:
    code = main(sys.argv[1:])
except SystemExit as end:
    code = end.code
print(next(int(line.split()[1]) for line in open("/proc/self/status") if line.startswith("VmHWM")), file=sys.stderr)
sys.exit(code)
"""


def run(what: str, *words: str, folder: Path, limit: float) -> bool:
    """Run one command; say how it ended. True for the exit codes 0 to 2."""
    begun = time.perf_counter(), os.times()
    try:
        done = subprocess.run(
            [sys.executable, "-c", RUN, *words], cwd=folder, capture_output=True, text=True, timeout=limit, check=False
        )
    except subprocess.TimeoutExpired:
        print(f"{what:42s} not done after {limit:.0f} s", flush=True)
        return False
    seconds, now = time.perf_counter() - begun[0], os.times()
    busy = now.children_user + now.children_system - begun[1].children_user - begun[1].children_system
    *said, memory = done.stderr.strip().splitlines() or ["0"]
    shown = f"{seconds:.1f} s, {busy:.1f} s of the processor's, {int(memory) / 1024:.0f} MB"
    last = f"  {said[-1]}" if done.returncode and said else ""
    print(f"{what:42s} exit {done.returncode}: {shown}{last}", flush=True)
    return done.returncode in (0, 1, 2) and "Traceback" not in done.stderr


def write_trace(path: Path, frequency: float, points: int, seed: int) -> None:
    """Write one trace of a radical with noise."""
    species = Species("r", (Spin(g=(2.01, 2.006, 2.003)),), width=Width(gaussian=0.8))
    sweep = Sweep(frequency, (325.0, 345.0), points)
    signal = simulate(species, sweep).signal
    noisy = signal / np.abs(signal).max() + np.random.default_rng(seed).normal(0, 0.02, points)
    header = f"# frequency {frequency / 1e3:.6f} GHz\nfield/mT,signal"
    np.savetxt(path, np.column_stack([sweep.fields, noisy]), delimiter=",", fmt="%.6f", header=header, comments="")


def traces(folder: Path, count: int, limit: float) -> bool:
    """Try one batch of many traces."""
    (folder / "t.toml").write_text(RADICAL + "[[trace]]\n" + FIT, encoding="utf-8")
    for number in range(count):
        write_trace(folder / f"t{number:05d}.csv", 9400 + 1e-2 * number, 200, number)
    names = [f"t{number:05d}.csv" for number in range(count)]
    command = ["batch", "--template", "t.toml", *names, "--out", "out", "--no-pictures", "--quiet"]
    good = run(f"batch of {count} traces", *command, folder=folder, limit=limit)
    good &= run("the same once more", *command, folder=folder, limit=limit)
    for name in ("batch.h5", "report.html"):
        (folder / "out" / name).unlink(missing_ok=True)
    good &= run("its archive and its page made again", *command, folder=folder, limit=limit)
    good &= run("one of its fits repeated", "rerun", "out/batch.h5", "--trace", "t00000", folder=folder, limit=limit)
    return good and run("a question to its table", "summary", "out", "--where", "r.g_x > 3", folder=folder, limit=limit)


def job(folder: Path, count: int, limit: float) -> bool:
    """Try one job with many traces."""
    text = RADICAL
    for number in range(count):
        write_trace(folder / f"s{number:04d}.csv", 9400 + 0.1 * number, 400, number)
        text += f'[[trace]]\nfile = "s{number:04d}.csv"\n'
    (folder / "many.toml").write_text(text + FIT, encoding="utf-8")
    good = run(f"job of {count} traces", "fit", "many.toml", "--out", "out", folder=folder, limit=limit)
    print(f"{'its files':42s} " + ", ".join(f"{p.name} {p.stat().st_size / 1e6:.1f} MB" for p in folder.glob("out/*")))
    return good


def points(folder: Path, count: int, limit: float) -> bool:
    """Try one trace of many points."""
    write_trace(folder / "long.csv", 9432.1, count, 0)
    (folder / "long.toml").write_text(RADICAL + '[[trace]]\nfile = "long.csv"\n' + FIT, encoding="utf-8")
    good = run(f"a trace of {count} points, inspect", "inspect", "long.csv", folder=folder, limit=limit)
    good &= run("the same, fit", "fit", "long.toml", "--out", "out", folder=folder, limit=limit)
    print(f"{'its files':42s} " + ", ".join(f"{p.name} {p.stat().st_size / 1e6:.1f} MB" for p in folder.glob("out/*")))
    return good


def dimension(folder: Path, count: int, limit: float) -> bool:
    """Try an electron with protons that are all exact, 2^(n + 1) levels."""
    protons = "".join(
        f'[[species.nucleus]]\nisotope = "1H"\nname = "h{n}"\nA = "{8 + 3 * n}, {9 + 3 * n}, {14 + 4 * n} MHz"\n'
        'treat = "exact"\n'
        for n in range(count)
    )
    sweep = '[sweep]\nfrequency = "9.5 GHz"\nfield = "325, 345 mT"\npoints = 1024\n'
    good = True
    for form in ("crystal", "powder"):
        text = f'{sweep}[sample]\nform = "{form}"\n{RADICAL}{protons}'
        (folder / f"{form}.toml").write_text(text.replace("[accuracy]\ntolerance = 1e-2\n", ""), encoding="utf-8")
        what = f"{2 ** (count + 1)} levels, {form}"
        good &= run(what, "simulate", f"{form}.toml", "-o", f"{form}.csv", folder=folder, limit=limit)
    return good


LOADS = {"traces": (traces, 10_000), "job": (job, 500), "points": (points, 2_000_000), "dimension": (dimension, 9)}


def main(arguments: list[str]) -> int:
    parser = argparse.ArgumentParser(prog="scripts/campaign load", description=__doc__)
    parser.add_argument("name", nargs="*", help=f"only these of {', '.join(LOADS)}")
    parser.add_argument("--count", type=int, help="another number of traces, points or nuclei")
    parser.add_argument("--seconds", type=float, default=3600.0, help="that each command may take")
    options = parser.parse_args(arguments)
    unknown = set(options.name) - set(LOADS)
    if unknown:
        parser.error(f"there is no {', '.join(sorted(unknown))}; the loads are {', '.join(LOADS)}")
    good = True
    for name in options.name or LOADS:
        attempt, count = LOADS[name]
        with tempfile.TemporaryDirectory() as scratch:
            good &= attempt(Path(scratch), options.count or count, options.seconds)
    print("as promised" if good else "NOT as promised")
    return 0 if good else 1


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
