"""Print the oldest versions that pyproject.toml allows, as constraints for pip.

Run as ``python scripts/oldest_versions.py [FILE]``; nothing but the standard library is needed.  An environment with
all lower bounds at once, on the oldest Python that is allowed, is made by

    python3.11 -m venv oldest
    python3 scripts/oldest_versions.py oldest/constraints.txt
    oldest/bin/python -m pip install --constraint oldest/constraints.txt --editable '.[test,fast]'
    oldest/bin/python -m pytest
"""

from __future__ import annotations

import re
import sys
import tomllib
from pathlib import Path
from typing import Any

PROJECT = Path(__file__).resolve().parents[1] / "pyproject.toml"
OF_THEIR_TIME = {"pyparsing": "<3.3"}
"""Bounds on what comes along unasked: a release newer than the oldest ones deprecates what they use of it."""

_REQUIREMENT = re.compile(r"([A-Za-z0-9._-]+)(?:\[[^\]]*\])?\s*(?:>=\s*([0-9][0-9.]*))?\s*(?:,.*)?")


def bounds(project: dict[str, Any]) -> dict[str, str | None]:
    """Return the lower bound of every requirement, extras included; None for one without.

    Raises
    ------
    ValueError
        For a requirement that is written in another way, or is bounded differently in two places.
    """
    own = project["name"]
    lists = [project.get("dependencies", []), *project.get("optional-dependencies", {}).values()]
    found: dict[str, str | None] = {}
    for requirement in (one for group in lists for one in group):
        match = _REQUIREMENT.fullmatch(requirement.strip())
        if match is None:
            raise ValueError(f'"{requirement}" is not written as name>=version')
        name = re.sub(r"[-_.]+", "-", match[1]).lower()
        if name == own:
            continue
        if found.setdefault(name, match[2]) != match[2]:
            raise ValueError(f"{name} is bounded by {found[name]} and by {match[2]}")
    return found


def constraints(project: dict[str, Any]) -> str:
    """Return the constraints, a line each."""
    pins = {name: f"=={bound}" for name, bound in bounds(project).items() if bound is not None}
    return "".join(f"{name}{pin}\n" for name, pin in sorted({**OF_THEIR_TIME, **pins}.items()))


def main(arguments: list[str]) -> None:
    """Write the constraints to a file, or print them."""
    text = constraints(tomllib.loads(PROJECT.read_text(encoding="utf-8"))["project"])
    if arguments:
        Path(arguments[0]).write_text(text, encoding="utf-8")
    else:
        sys.stdout.write(text)


if __name__ == "__main__":
    main(sys.argv[1:])
