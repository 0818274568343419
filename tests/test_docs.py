"""README and docs say what is so: their jobs run, their commands and links exist."""

from __future__ import annotations

import dataclasses
import importlib.util
import inspect
import json
import re
import subprocess
import sys
import tomllib
from pathlib import Path

import numpy as np
import pytest

import spinfit
from spinfit.cli import main
from spinfit.commands import TABLE
from spinfit.fitting import outcome
from spinfit.species import Species, Spin, Width
from spinfit.spectrum import simulate
from spinfit.sweep import Sweep

ROOT = Path(__file__).resolve().parents[1]
PAGES = [ROOT / "README.md", ROOT / "DEVELOPERS.md", ROOT / "CHANGELOG.md", ROOT / "demo_spectra" / "README.md"]
PAGES += sorted(path for path in (ROOT / "docs").rglob("*.md") if "_build" not in path.parts)


def blocks(page: Path, language: str) -> list[str]:
    """Return the code blocks of a page that name this language, their indentation removed."""
    text = page.read_text(encoding="utf-8")
    found = re.findall(rf"^( *)```{language}\n(.*?)^ *```", text, flags=re.DOTALL | re.MULTILINE)
    return [re.sub(rf"^{indent}", "", body, flags=re.MULTILINE) for indent, body in found]


def test_readme_job_fits_a_trace_of_bare_numbers(tmp_path: Path) -> None:
    """The README's job, word for word, on a csv without any header."""
    (job,) = blocks(ROOT / "README.md", "toml")
    truth = (2.0061, 2.0043, 2.0021)
    sweep = Sweep(frequency=9432.1, field=(332.0, 341.0), points=1024)
    spectrum = simulate(Species(spins=(Spin(g=truth),), width=Width(gaussian=0.35)), sweep)
    noise = np.random.default_rng(7).normal(0, 0.01, sweep.points)
    signal = spectrum.signal / np.abs(spectrum.signal).max() + noise
    np.savetxt(tmp_path / "kiln-07.csv", np.column_stack([spectrum.fields, signal]), delimiter=",", fmt="%.5f")
    (tmp_path / "kiln-07.toml").write_text(job, encoding="utf-8")
    assert main(["fit", str(tmp_path / "kiln-07.toml"), "--out", str(tmp_path / "kiln-07")]) == 0
    values = json.loads((tmp_path / "kiln-07" / "outcome.json").read_text(encoding="utf-8"))["parameters"]
    for axis, true in zip("xyz", truth, strict=True):
        found = values[f"r.g_{axis}"]
        # The axis here is exact: the noise part alone has to hold the truth.
        assert abs(found["value"] - true) < 3 * found["uncertainty_noise"]


def test_first_fit_shows_the_demonstration_job() -> None:
    (shown,) = blocks(ROOT / "docs" / "first_fit.md", "toml")
    stored = (ROOT / "demo_spectra" / "varnish_radical.toml").read_text(encoding="utf-8")
    assert tomllib.loads(shown) == tomllib.loads(stored)


def test_every_worked_example_is_listed() -> None:
    pages = {f"jobs/{path.name}" for path in (ROOT / "docs" / "jobs").glob("*.md")}
    assert len(pages) >= 10
    listed = re.findall(r"\]\((jobs/\w+\.md)\)", (ROOT / "docs" / "jobs.md").read_text(encoding="utf-8"))
    assert set(listed) == pages
    contents = (ROOT / "docs" / "index.md").read_text(encoding="utf-8")
    every = {path.relative_to(ROOT / "docs").with_suffix("").as_posix() for path in PAGES if "docs" in path.parts}
    assert set(re.findall(r"^[\w/]+$", contents, flags=re.MULTILINE)) == every - {"index"}


@pytest.mark.parametrize("heading", ["The job", "How to read it", "What goes wrong"])
def test_worked_examples_have_the_same_parts(heading: str) -> None:
    for path in (ROOT / "docs" / "jobs").glob("*.md"):
        assert f"\n## {heading}\n" in path.read_text(encoding="utf-8"), path.name


def test_the_version_to_cite_is_this_one() -> None:
    for page in ("CITATION.cff", "docs/citing.md"):
        text = (ROOT / page).read_text(encoding="utf-8")
        found = re.findall(r"version(?:: | = \{| |\*\*)(\d+\.\d+\.\d+)", text.replace("cff-version: 1.2.0\n", ""))
        assert found, page
        assert set(found) == {spinfit.__version__}, page


@pytest.mark.parametrize("name", [*spinfit.__all__, "Value", "Quality", "Note", "Curves", "Axis", "PositionTable"])
def test_docstrings_describe_every_attribute(name: str) -> None:
    found = getattr(spinfit, name, None) or getattr(outcome, name)
    described = inspect.getdoc(found) or ""
    if dataclasses.is_dataclass(found):
        names = [one.name for one in dataclasses.fields(found)]
    else:
        names = [*inspect.signature(found).parameters]
    hidden = {"kept"} if name == "Spectrum" else set()  # what derivatives need
    assert [one for one in names if one not in hidden and not re.search(rf"\b{one}\b", described)] == []


def test_readme_lists_the_commands_that_exist() -> None:
    table = (ROOT / "README.md").read_text(encoding="utf-8").split("## Commands")[1].split("\n## ")[0]
    assert set(re.findall(r"^\| `spinfit (\w+)", table, flags=re.MULTILINE)) == set(TABLE)


@pytest.mark.parametrize("page", PAGES, ids=lambda page: page.relative_to(ROOT).as_posix())
def test_links_and_named_files_exist(page: Path) -> None:
    text = page.read_text(encoding="utf-8")
    targets = [t.split("#")[0] for t in re.findall(r"\]\(([^)]+)\)", text) if "://" not in t]
    named = re.findall(r"`((?:scripts|tests|docs|demo_spectra|benchmarks|spinfit)/[\w./-]+)`", text)
    missing = [t for t in targets if not (page.parent / t).exists()] + [n for n in named if not (ROOT / n).exists()]
    assert missing == []


def test_every_option_in_the_pages_exists(capsys: pytest.CaptureFixture[str]) -> None:
    """Each ``spinfit COMMAND ... --option`` in a page is one that the command's own help names."""
    missing = []
    for page in PAGES:
        for line in re.findall(r"spinfit (\w+ [^\n`]*--[^\n`]*)", page.read_text(encoding="utf-8")):
            command = line.split()[0]
            if command not in TABLE:
                continue
            main([command, "--help"])
            shown = set(re.findall(r"--[a-z][\w-]*", capsys.readouterr().out))
            missing += [f"{page.name}: {command} {o}" for o in re.findall(r"--[a-z][\w-]*", line) if o not in shown]
    assert missing == []


@pytest.mark.skipif(sys.version_info[:2] not in ((3, 11), (3, 12)), reason="later versions lay out help differently")
def test_the_page_of_commands_is_their_own_help() -> None:
    specification = importlib.util.spec_from_file_location("make_pages", ROOT / "scripts" / "make_pages.py")
    pages = importlib.util.module_from_spec(specification)
    specification.loader.exec_module(pages)
    assert pages.PAGE.read_text(encoding="utf-8") == pages.commands_page(), "run scripts/make_pages.py"


def test_the_pages_build_without_a_warning(tmp_path: Path) -> None:
    pytest.importorskip("sphinx")
    pytest.importorskip("myst_parser")
    command = [sys.executable, "-m", "sphinx", "-W", "-q", str(ROOT / "docs"), str(tmp_path)]
    done = subprocess.run(command, capture_output=True, text=True, timeout=120)
    assert done.returncode == 0, done.stderr
    assert (tmp_path / "first_fit.html").is_file()
    reference = (tmp_path / "reference.html").read_text(encoding="utf-8")
    assert [name for name in spinfit.__all__ if f'id="spinfit.{name}"' not in reference] == []
