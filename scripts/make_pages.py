"""Write the pages of the documentation that follow from the code: ``python scripts/make_pages.py``."""

from __future__ import annotations

import contextlib
import io
import os
from pathlib import Path

from spinfit.cli import main
from spinfit.commands import TABLE

PAGE = Path(__file__).resolve().parents[1] / "docs" / "commands.md"
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


if __name__ == "__main__":
    PAGE.write_text(commands_page(), encoding="utf-8")
