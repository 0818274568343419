"""The pages: the code of the documentation, slow parts too, and reports in a browser.

Run as ``scripts/campaign pages [docs] [reports] [--page NAME] [--write] [--out DIR]``.

``docs`` runs every block of README and docs, those marked as slow too, and compares what is shown.  With ``--write``
the pictures in ``docs/pictures`` are made anew, and outputs that hold nothing but ``...`` are filled in.

``reports`` opens real fits and batches in Chromium: wide and narrow, light and dark, with hostile names, on paper.
Each page is opened under its own policy and may neither complain on the console nor be wider than the
window; pictures of it and a PDF are left in the folder for a person to look at.  The short forms are in the
tests of the pages.
"""

from __future__ import annotations

import argparse
import shutil
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator
from pathlib import Path

import numpy as np
from PIL import Image

ROOT = Path(__file__).resolve().parent.parent
sys.path[:0] = [str(ROOT), str(ROOT / "tests")]

from page_code import Block, Runner, run_page  # noqa: E402
from pages import BROWSER, FLAGS, Page, browse  # noqa: E402
from test_batch_html import folder_of, rows  # noqa: E402
from test_page_code import PAGES  # noqa: E402
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


def small(drawn: Path, place: Path) -> None:
    """Store a picture as a page shows it: 800 points wide at most, 64 colours."""
    with Image.open(drawn) as picture:
        flat = picture.convert("RGB")
        flat.thumbnail((800, 1600))
        flat.quantize(64).save(place, optimize=True)


def documentation(only: str | None, write: bool) -> int:
    """Run the code of the pages; return how many are wrong."""
    wrong = 0
    for page in PAGES:
        name = page.relative_to(ROOT).as_posix()
        if only and only not in name:
            continue
        fresh: list[tuple[Block, str]] = []

        def seen(block: Block, runner: Runner, page: Path = page, fresh: list[tuple[Block, str]] = fresh) -> None:
            if not write:
                return
            if block.fate == "output" and block.text.strip() == "...":
                fresh.append((block, runner.printed or ""))
            elif block.fate == "picture":
                (page.parent / block.text).parent.mkdir(exist_ok=True)
                small(runner.folder / block.marks["picture"], page.parent / block.text)

        began = time.monotonic()
        with tempfile.TemporaryDirectory(prefix="page-") as folder:
            try:
                said = f"{run_page(page, Path(folder), slow=True, seen=seen)} blocks of code run"
            except Exception as error:  # a page must not keep the others from being looked at
                wrong, said = wrong + 1, f"WRONG: {error or type(error).__name__}"
        print(f"{name}: {said}, {time.monotonic() - began:.0f} s", flush=True)
        lines = page.read_text(encoding="utf-8").splitlines()
        for block, printed in reversed(fresh):
            lines[block.line : block.line + 1] = printed.rstrip().splitlines()
        if fresh:
            page.write_text("\n".join(lines) + "\n", encoding="utf-8")
    return wrong


def run() -> int:
    parser = argparse.ArgumentParser(description=__doc__.partition("\n")[0])
    parser.add_argument("parts", nargs="*", metavar="PART", help="docs, reports, or both (the default)")
    parser.add_argument("--page", metavar="NAME", help="docs: only pages whose name holds this")
    parser.add_argument("--write", action="store_true", help="docs: draw the pictures anew, fill in empty outputs")
    parser.add_argument("--out", type=Path, default=Path("pages_out"), help="a new folder for pages and their pictures")
    args = parser.parse_args()
    parts = args.parts or ["docs", "reports"]
    if unknown := set(parts) - {"docs", "reports"}:
        parser.error(f"there is no part {unknown.pop()}: docs or reports")
    wrong = documentation(args.page, args.write) if "docs" in parts else 0
    if "reports" in parts:
        wrong += reports(args.out)
    return min(wrong, 1)


def reports(out: Path) -> int:
    """Open the reports; return how many are wrong."""
    if BROWSER is None:
        print("Chromium is not installed", file=sys.stderr)
        return 1
    if out.exists():
        print(f"{out} is there already: name a new folder", file=sys.stderr)
        return 1
    out.mkdir(parents=True)
    wrong = 0
    for source in (made_up, fits, batches):
        for page in source(out.resolve()):
            try:
                looked_at(page, out.resolve())
                said = "fine"
            except (AssertionError, subprocess.SubprocessError) as error:
                wrong, said = wrong + 1, f"WRONG: {error}"
            print(f"{page.parent.name}/{page.name}: {page.stat().st_size / 1e3:.0f} kB, {said}", flush=True)
    shutil.rmtree(out / "series", ignore_errors=True)
    return wrong


if __name__ == "__main__":
    sys.exit(run())
