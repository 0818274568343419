"""Write the pages of the documentation that follow from the code: ``python scripts/make_pages.py``."""

from __future__ import annotations

import contextlib
import io
import os
from pathlib import Path

from spinfit.cli import main
from spinfit.commands import TABLE
from spinfit.files import keys
from spinfit.files.keys import Key, Keys
from spinfit.units import UNITS

DOCS = Path(__file__).resolve().parents[1] / "docs"
PAGE = DOCS / "commands.md"
KEYS_PAGE = DOCS / "keys.md"
WIDTH = 100
"""Columns of a help text."""


def help_of(command: str) -> str:
    """Return what ``spinfit COMMAND --help`` prints on a terminal of `WIDTH` columns."""
    before = os.environ.get("COLUMNS")
    os.environ["COLUMNS"] = str(WIDTH)
    shown = io.StringIO()
    try:
        with contextlib.redirect_stdout(shown):
            main([command, "--help"])
    finally:
        os.environ.pop("COLUMNS") if before is None else os.environ.update(COLUMNS=before)
    return shown.getvalue().rstrip()


def commands_page() -> str:
    """Return the page of all commands, each with its own help."""
    parts = ["# Commands\n\nWhat each command says of itself with `--help`."]
    parts += [f"## spinfit {command}\n\n```text\n{help_of(command)}\n```" for command in TABLE]
    return "\n\n".join(parts) + "\n"


SECTIONS: tuple[tuple[str, str, Keys], ...] = (
    ("A model file", "What `spinfit simulate`, `diagram` and `lines` read.", keys.MODEL),
    ("A job file", "What `spinfit fit` and `batch` read.", keys.JOB),
    ("`[sweep]`", "In models only.", keys.SWEEP),
    ("`[sample]`", "", keys.SAMPLE),
    ("`[accuracy]`", "", keys.ACCURACY),
    ("`[[species]]`", "Spin keys stand here or, with several spins, in `[[species.spin]]`.", keys.SPECIES),
    ("`[[species.spin]]`", "Two or more.", keys.SPIN),
    ("`[species.stevens]`", "B_k^q by name, m for a negative q; k up to 2S.", keys.STEVENS),
    ("`[[species.nucleus]]`", "", keys.NUCLEUS),
    ("`[[species.exchange]]`", "", keys.EXCHANGE),
    ("`[species.width]`", "One width at least is positive.", keys.WIDTH),
    ("`[species.spread]`", "", keys.SPREAD),
    ("`[species.spread.correlation]`", "", keys.CORRELATION),
    ("`[[trace]]`", "In jobs only.", keys.TRACE),
    ("`[trace.columns]`", "", keys.COLUMNS),
    ("`[trace.field_calibration]`", "", keys.CALIBRATION),
    (
        "`[[lines]]`",
        "In jobs of crystals only. The file has columns headed `angle_deg` (or `theta_deg`, `phi_deg`), `field_mT` and,"
        " if known, `uncertainty_mT`, `lower`, `upper`.",
        keys.LINES,
    ),
    ("`[fit]`", "", keys.FIT),
    ("`[species.crystal_field]`", "One form of the field, and what else the ion needs.", keys.FIELD),
    ("`[[ion]]`", "In files for `spinfit quench --field`: the keys above, and", keys.ION_OWN),
    (
        "`orbitals`",
        "Inside a crystal field, as are all that follow. All orbitals of the shell; names with brackets need quotes.",
        keys.ANY_ORBITAL,
    ),
    ("`octahedral`", "", keys.OCTAHEDRAL),
    ("`ligand`", "", keys.LIGAND),
    ("`geometry`", "", keys.GEOMETRY),
    ("`geometry.bonds`, for each symbol", "", keys.BOND),
    ("`wybourne`, `stevens`", "k up to 2 for p shells, 4 for d shells, 6 for f shells.", keys.ANY_COEFFICIENT),
    ("`racah`", "", keys.RACAH),
    ("`slater`", "F2 for p shells; F2 and F4 for d shells; F2, F4 and F6 for f shells.", keys.ANY_SLATER),
)


def _row(names: list[str], key: Key) -> str:
    """Return the row of one key, or of several that differ in nothing but their names."""
    default = ", else ".join(part for part in (key.without, f"`{key.default}`" if key.default else "") if part)
    meaning = key.meaning + (f" ({', '.join(key.forms)})" if key.forms else "")
    example = f"`{names[0]} = {key.example}`" if key.example else ""
    cells = (", ".join(f"`{name}`" for name in names), key.value, default or "**needed**", meaning, example)
    return f"| {' | '.join(cells)} |"


def _rows(table: Keys) -> list[str]:
    """Return the rows of a table; keys that go by number share one."""
    alike: dict[tuple[str, ...], list[str]] = {}
    for name, key in table.items():
        numbered = key.series or name
        alike.setdefault((numbered, key.value, key.default), []).append(name)
    return [_row(names, table[names[0]]) for names in alike.values()]


def keys_page() -> str:
    """Return the page of all keys of files."""
    parts = [
        "# Keys of files\n\nEvery key that a model, a job or a crystal-field file may hold. An unknown key is an"
        " error. What the quantities mean stands in [conventions](conventions.md); whole models in"
        " [one job, one model](jobs.md).",
        "A quantity is a text of one or several numbers and a unit. A tensor of one number is isotropic, of two"
        " [perpendicular, parallel], of three [x, y, z].",
        "| quantity | units |\n|---|---|\n"
        + "\n".join(
            f"| {kind} | {', '.join(UNITS[kind])} |"
            for kind in ("field", "energy", "frequency", "angle", "temperature", "field per voltage")
        ),
    ]
    for heading, intro, table in SECTIONS:
        head = "| key | value | default | meaning | example |\n|---|---|---|---|---|"
        rows = "\n".join([head, *_rows(table)])
        parts.append("\n\n".join(part for part in (f"## {heading}", intro, rows) if part))
    return "\n\n".join(parts) + "\n"


if __name__ == "__main__":
    KEYS_PAGE.write_text(keys_page(), encoding="utf-8")
    PAGE.write_text(commands_page(), encoding="utf-8")
