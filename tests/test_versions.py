"""What pyproject.toml says of versions: every bound is stated, and what is claimed agrees wherever it stands."""

from __future__ import annotations

import re
import runpy
import tomllib
from importlib import metadata
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[1]
WHOLE = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))
PROJECT = WHOLE["project"]
OLDEST = runpy.run_path(str(ROOT / "scripts" / "oldest_versions.py"))


def pythons() -> list[tuple[int, int]]:
    """Return the versions of Python that the classifiers claim."""
    found = [re.fullmatch(r"Programming Language :: Python :: 3\.(\d+)", line) for line in PROJECT["classifiers"]]
    return [(3, int(one[1])) for one in found if one]


def test_every_requirement_has_a_lower_bound_and_no_upper_one():
    """Without a lower bound nobody knows what was tried; an upper one shuts users out of what has not failed yet."""
    bounds = OLDEST["bounds"](PROJECT)
    assert None not in bounds.values(), bounds
    every = [*PROJECT["dependencies"], *(one for group in PROJECT["optional-dependencies"].values() for one in group)]
    assert not [one for one in every if "<" in one or "==" in one or "~" in one]


def test_what_is_installed_is_not_older():
    for name, bound in OLDEST["bounds"](PROJECT).items():
        try:
            installed = metadata.version(name)
        except metadata.PackageNotFoundError:
            continue  # of an extra that is not installed
        assert numbers(installed) >= numbers(bound), f"{name} {installed}"


def numbers(version: str) -> list[int]:
    """Return the release of a version as numbers."""
    return [int(part) for part in re.match(r"[\d.]*\d", version)[0].split(".")]


def test_classifiers_say_which_pythons():
    claimed = pythons()
    lowest = numbers(PROJECT["requires-python"].removeprefix(">="))
    assert claimed == [(3, minor) for minor in range(lowest[1], claimed[-1][1] + 1)]
    assert WHOLE["tool"]["ruff"]["target-version"] == f"py3{lowest[1]}"


def test_the_scripts_look_for_the_same_pythons():
    text = (ROOT / "scripts" / "_environment.sh").read_text(encoding="utf-8")
    tried = re.search(r"for candidate in (.*); do", text)[1].split()
    assert {f"python3.{minor}" for _, minor in pythons()} <= set(tried)
    assert f"(3, {pythons()[0][1]})" in text


def test_constraints_pin_each_bound():
    project = {
        "name": "it",
        "dependencies": ["numpy>=2.0", "Rich_Text[all]>=13.7,!=13.8"],
        "optional-dependencies": {"test": ["it[more]", "numpy>=2.0"], "more": ["pytest>=8"]},
    }
    assert OLDEST["constraints"](project) == "numpy==2.0\npyparsing<3.3\npytest==8\nrich-text==13.7\n"
    with pytest.raises(ValueError, match="is bounded by 2.0 and by 2.1"):
        OLDEST["bounds"]({"name": "it", "dependencies": ["numpy>=2.0", "numpy>=2.1"]})
    with pytest.raises(ValueError, match="not written as name>=version"):
        OLDEST["bounds"]({"name": "it", "dependencies": ["numpy~=2.0"]})
