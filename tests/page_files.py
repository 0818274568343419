"""The files that a reader of the pages has: invented traces and jobs under the names that the pages use."""

from __future__ import annotations

from collections.abc import Callable
from functools import cache
from pathlib import Path

import numpy as np

from spinfit.cli import main
from spinfit.species import Species, Spin, Width
from spinfit.spectrum import simulate
from spinfit.sweep import Sweep

COPPER = """\
[[species]]
name = "cu"
ion = "Cu2+"
S = "1/2"
g = [2.05, 2.07, 2.33]
[species.width]
gaussian = "2.5 mT"

[[trace]]
{file}field_unit = "mT"
frequency = "9.4321 GHz"
field_uncertainty = "0.02 mT"

[fit]
vary = ["cu.g", "cu.width.gaussian"]
"""
KILN = """\
[[species]]
name = "r"
S = "1/2"
g = [2.007, 2.004, 2.002]
[species.width]
gaussian = "0.5 mT"

[[trace]]
file = "kiln-07.csv"
frequency = "9.4321 GHz"
field_unit = "mT"
field_uncertainty = "0.02 mT"

[fit]
vary = ["r.g", "r.width.gaussian"]
"""


@cache
def signal_of(g: tuple[float, ...], width: float, low: float, high: float, points: int) -> np.ndarray:
    """Return fields and a signal of largest value 1, in two columns."""
    spectrum = simulate(Species("t", (Spin(0.5, g),), width=Width(gaussian=width)), Sweep(9432.1, (low, high), points))
    return np.column_stack([spectrum.fields, spectrum.signal / np.abs(spectrum.signal).max()])


def write_trace(path: Path, columns: np.ndarray, seed: int, *, noise: float = 0.01, header: str = "") -> None:
    """Write a trace with noise of its own."""
    path.parent.mkdir(parents=True, exist_ok=True)
    noisy = columns + np.array([0, noise]) * np.random.default_rng(seed).normal(size=(len(columns), 1))
    np.savetxt(path, noisy, delimiter=",", fmt="%.5f", header=header, comments="# " if header else "")


def radical(folder: Path) -> None:
    """A trace of bare numbers, and its job."""
    write_trace(folder / "kiln-07.csv", signal_of((2.0061, 2.0043, 2.0021), 0.35, 332, 341, 700), 7)
    (folder / "kiln-07.toml").write_text(KILN, encoding="utf-8")


def copper_job(folder: Path) -> None:
    """A job for one copper trace."""
    write_trace(folder / "glaze.csv", signal_of((2.052, 2.068, 2.327), 2.4, 270, 360, 500), 3)
    for name in ("kiln-07", "robust", "smooth"):
        (folder / f"{name}.toml").write_text(COPPER.format(file='file = "glaze.csv"\n'), encoding="utf-8")


def series(folder: Path) -> None:
    """A template, its traces, and whole jobs."""
    (folder / "kiln.toml").write_text(COPPER.format(file=""), encoding="utf-8")
    for n in (7, 8):
        write_trace(
            folder / f"traces/kiln-0{n}.csv", signal_of((2.052, 2.068, 2.32 + 0.002 * n), 2.4, 270, 360, 400), n
        )
    (folder / "jobs").mkdir()
    job = COPPER.format(file='file = "../traces/kiln-08.csv"\n')
    (folder / "jobs/kiln-08.toml").write_text(job, encoding="utf-8")


def two_areas(folder: Path) -> None:
    """A trace and a reference, with a frequency in their headers."""
    for name, g, width, window, seed in (
        ("glaze", (2.05, 2.26), 2.0, (250, 420), 1),
        ("standard", (2.0036,), 1.0, (326, 346), 2),
    ):
        header = "frequency 9.4321 GHz\nfield_mT,signal"
        write_trace(folder / f"{name}.csv", signal_of(g, width, *window, 1000), seed, noise=0.002, header=header)


def archive(folder: Path) -> None:
    """A fitted folder."""
    radical(folder)
    main(["fit", str(folder / "kiln-07.toml"), "--out", str(folder / "kiln-07")])


FILES: dict[str, Callable[[Path], None]] = {
    "README.md": radical,
    "docs/archive.md": archive,
    "docs/batch.md": series,
    "docs/fit_options.md": copper_job,
    "docs/quantify.md": two_areas,
}
"""What a page speaks of and does not make itself."""
