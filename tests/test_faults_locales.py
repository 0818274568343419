"""Decimal commas, and terminals and systems that are not UTF-8: files and JSON are the same to the byte."""

from __future__ import annotations

import os
import shutil
import subprocess
import sys
from pathlib import Path

import batch_jobs
import pytest

ROOT = Path(__file__).resolve().parents[1]
# The locale is set as a program around this library would set it; a command of its own never sets one.
CODE = """
import locale, sys
sys.stdout.reconfigure(newline="")
if sys.argv[1] != "as it is":
    locale.setlocale(locale.LC_NUMERIC, sys.argv[1])
    assert locale.localeconv()["decimal_point"] == ",", sys.argv[1]
from spinfit.cli import main
for suffix in (".csv", ".jdx", ".h5"):
    assert main(["simulate", "m.toml", "-o", "m" + suffix]) == 0
assert main(["fit", "job.toml", "--out", "out"]) == 0
assert main(["inspect", "m.csv", "--frequency", "9.5 GHz", "--json"]) == 0
"""
COMMA = """LC_NUMERIC
decimal_point "<U002C>"
thousands_sep "<U002E>"
grouping 3;3
END LC_NUMERIC
"""


def run(folder: Path, locale: str, **environment: str) -> dict[str, bytes]:
    """Run the commands in a folder of their own; return every file, and what was printed but for times."""
    folder.mkdir()
    batch_jobs.write_trace(folder / "t.csv", 1)
    job = batch_jobs.TEMPLATE.replace("[[trace]]", '[[trace]]\nname = "tile"\nfile = "t.csv"')
    (folder / "job.toml").write_text(job, encoding="utf-8")
    (folder / "m.toml").write_text(
        '[sweep]\nfrequency = "9.5 GHz"\nfield = "300, 380 mT"\npoints = 500\n[[species]]\nname = "r"\nS = "1/2"\n'
        'g = [2.0, 2.1, 2.3]\n[species.width]\ngaussian = "1 mT"\n'
    )
    clean = {key: value for key, value in os.environ.items() if not key.startswith(("LC_", "LANG", "PYTHON"))}
    done = subprocess.run(
        [sys.executable, "-c", CODE, locale], cwd=folder, capture_output=True, timeout=180,
        env=clean | {"PYTHONPATH": str(ROOT), "MPLBACKEND": "Agg"} | environment,
    )  # fmt: skip
    assert (done.returncode, done.stderr) == (0, b"")
    found = {p.relative_to(folder).as_posix(): p.read_bytes() for p in folder.rglob("*") if p.is_file()}
    printed = b"\n".join(line for line in done.stdout.splitlines() if b" s; written to" not in line)
    return found | {"printed": printed}


@pytest.fixture(scope="module")
def plain(tmp_path_factory):
    return run(tmp_path_factory.mktemp("plain") / "f", "as it is", LC_ALL="C.UTF-8")


def test_a_decimal_comma(tmp_path, plain):
    """A locale is made by the system's own tool, since few machines have one; C's printf and strtod obey it too."""
    if shutil.which("localedef") is None:
        pytest.skip("no localedef here to make a locale with")
    (tmp_path / "comma.src").write_text(COMMA)
    made = tmp_path / "locales" / "comma"
    made.parent.mkdir()
    subprocess.run(["localedef", "-c", "-i", tmp_path / "comma.src", made], capture_output=True, timeout=60)
    if not (made / "LC_NUMERIC").exists():
        pytest.skip("localedef has no tables of characters here")
    assert run(tmp_path / "f", "comma", LOCPATH=str(made.parent)) == plain


@pytest.mark.parametrize(
    "environment",
    [{"LC_ALL": "C", "PYTHONUTF8": "0", "PYTHONCOERCECLOCALE": "0"}, {"PYTHONIOENCODING": "cp1252", "LANG": "xx_YY"}],
    ids=["ASCII", "Windows-1252"],
)
def test_systems_and_terminals_that_are_not_utf8(tmp_path, plain, environment):
    found = run(tmp_path / "f", "as it is", **environment)
    assert found.pop("printed").isascii()
    assert found == {key: content for key, content in plain.items() if key != "printed"}
