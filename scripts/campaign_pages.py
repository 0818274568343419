"""The pages in a browser: real fits and batches, wide and narrow, light and dark, with hostile names, on paper.

Run as ``scripts/campaign pages`` or ``python scripts/campaign_pages.py [--out DIR]``; it needs Chromium.
Each page is opened under its own policy and may neither complain on the console nor be wider than the
window; pictures of it and a PDF are left in the folder for a person to look at.  The short form is in the
tests of the pages.
"""

from __future__ import annotations

import argparse
import shutil
import subprocess
import sys
import tempfile
from collections.abc import Iterator
from pathlib import Path

import numpy as np

ROOT = Path(__file__).resolve().parent.parent
sys.path[:0] = [str(ROOT), str(ROOT / "tests")]

from pages import BROWSER, FLAGS, Page, browse  # noqa: E402
from test_batch_html import folder_of, rows  # noqa: E402
from test_report_html import EVIL, everything  # noqa: E402

from spinfit.cli import main  # noqa: E402
from spinfit.report.batch_html import write_batch_report  # noqa: E402
from spinfit.species import Species, Spin, Width  # noqa: E402
from spinfit.spectrum import simulate  # noqa: E402
from spinfit.sweep import Sweep  # noqa: E402

WIDTHS = (1400, 768, 380)
DARK = "--blink-settings=preferredColorScheme=0"
JOB = """
[[species]]
name = "r"
S = "1/2"
g = [2.007, 2.005, 2.002]
[species.width]
gaussian = "0.5 mT"
[[trace]]
file = "kiln_000.csv"
frequency = "9.4321 GHz"
field_unit = "mT"
field_uncertainty = "0.02 mT"
[fit]
vary = ["r.g", "r.width.gaussian"]
"""


def fits(out: Path) -> Iterator[Path]:
    """Fit the demonstration traces, one of them with all that can be tried beyond a fit."""
    for job in ("bottle_chromium", "honey_glass_iron", "pigment_triplet", "varnish_radical"):
        more = ["--profile", "varnish.g", "--bootstrap", "40"] if job == "varnish_radical" else []
        folder = out / job
        if main(["fit", str(ROOT / "demo_spectra" / f"{job}.toml"), "--out", str(folder), *more]) != 0:
            raise SystemExit(f"{job} did not converge")
        yield folder / "report.html"


def batches(out: Path) -> Iterator[Path]:
    """Fit a series in temperature with a wrong file in it, and make up a table of ten thousand rows."""
    work = out / "series"
    work.mkdir()
    rng = np.random.default_rng(5)
    table = ["file,temperature_K,dose"]
    for k in range(24):
        T = 10 + 12 * k
        g = (2.0080 - 1e-6 * T, 2.0050, 2.0022)
        spectrum = simulate(
            Species("r", (Spin(0.5, g),), width=Width(gaussian=0.4)), Sweep(9432.1, (332.0, 341.0), 512)
        )
        signal = spectrum.signal / np.abs(spectrum.signal).max() + rng.normal(0, 0.02, 512)
        place = work / f"kiln_{k:03d}.csv"
        np.savetxt(place, np.column_stack([spectrum.fields, signal]), delimiter=",", fmt="%.5f")
        if k == 20:
            place.write_text("no numbers\n", encoding="utf-8")
        table.append(f"{place.name},{T},{rng.uniform(0, 5):.3f}")
    (work / "values.csv").write_text("\n".join(table) + "\n", encoding="utf-8")
    (work / "job.toml").write_text(JOB, encoding="utf-8")
    argv = ["batch", "--template", str(work / "job.toml"), "--values", str(work / "values.csv")]
    main([*argv, "--out", str(out / "batch"), "--quiet"])
    yield out / "batch" / "report.html"
    yield write_batch_report(folder_of(out / "long", rows(10_000), drawn=60))


def made_up(out: Path) -> Iterator[Path]:
    """Everything a page can hold, under a hostile name."""
    page = out / "hostile.html"
    page.write_text(everything(name=EVIL), encoding="utf-8")
    yield page


def looked_at(page: Path, out: Path) -> None:
    """Open a page in every way; raise where it complains or does not fit."""
    Page(page.read_text(encoding="utf-8")).check()
    stem = f"{page.parent.name}-{page.stem}"
    for width in WIDTHS:
        browse(page, width=width, act=" ")
        browse(page, width=width, height=2400, picture=out / f"{stem}-{width}.png")
    browse(page, picture=out / f"{stem}-dark.png", more=(DARK,))
    with tempfile.TemporaryDirectory(prefix="browser-") as profile:
        command = [str(BROWSER), *FLAGS, f"--user-data-dir={profile}", f"--print-to-pdf={out / stem}.pdf"]
        subprocess.run([*command, page.resolve().as_uri()], check=True, capture_output=True, timeout=300)


def run() -> int:
    parser = argparse.ArgumentParser(description=__doc__.partition("\n")[0])
    parser.add_argument("--out", type=Path, default=Path("pages_out"), help="a new folder for pages and their pictures")
    args = parser.parse_args()
    if BROWSER is None:
        print("Chromium is not installed", file=sys.stderr)
        return 2
    if args.out.exists():
        print(f"{args.out} is there already: name a new folder", file=sys.stderr)
        return 2
    args.out.mkdir(parents=True)
    wrong = 0
    for source in (made_up, fits, batches):
        for page in source(args.out.resolve()):
            try:
                looked_at(page, args.out.resolve())
                said = "fine"
            except (AssertionError, subprocess.SubprocessError) as error:
                wrong, said = wrong + 1, f"WRONG: {error}"
            print(f"{page.parent.name}/{page.name}: {page.stat().st_size / 1e3:.0f} kB, {said}", flush=True)
    shutil.rmtree(args.out / "series", ignore_errors=True)
    return 1 if wrong else 0


if __name__ == "__main__":
    sys.exit(run())
