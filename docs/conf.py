"""Sphinx configuration: ``python -m sphinx -W docs OUT`` with the extra ``docs`` installed."""

import re
from importlib import metadata
from typing import Any

project = "spinfit"
author = "The spinfit developers"
copyright = "2026, The spinfit developers"
release = metadata.version("spinfit")

# autodoc and napoleon are part of Sphinx: they read the reference off the docstrings.
extensions = ["myst_parser", "sphinx.ext.autodoc", "sphinx.ext.napoleon"]
source_suffix = {".md": "markdown"}
exclude_patterns = ["_build"]
# Headings can be linked to, down to the third level.
myst_heading_anchors = 3
html_theme = "alabaster"
html_theme_options = {"description": "From a measured trace to a g-tensor that stands up", "page_width": "1100px"}

# Single backquotes in docstrings are names and code.
default_role = "literal"
napoleon_google_docstring = False
# Attributes stand in one list under the class, as docstrings have them.
napoleon_use_ivar = True
autodoc_member_order = "bysource"
autodoc_typehints = "description"
autodoc_typehints_description_target = "documented"
autodoc_preserve_defaults = True


def _one_name_each(app: object, what: str, name: str, found: object, options: object, lines: list[str]) -> None:
    """Split entries that numpydoc lets share a description ("D, E : float"), which napoleon takes for one name."""
    split: list[str] = []
    at = 0
    while at < len(lines):
        joint = re.match(r"(\w+(?:, \w+)+)( : .*)?$", lines[at])
        end = at + 1
        while joint and end < len(lines) and lines[end].startswith("    "):
            end += 1
        if joint and end > at + 1:
            for one in joint[1].split(", "):
                split += [one + (joint[2] or ""), *lines[at + 1 : end]]
        else:
            split += lines[at:end]
        at = end
    lines[:] = split


def setup(app: Any) -> None:
    # Before napoleon, whose own place is 500.
    app.connect("autodoc-process-docstring", _one_name_each, priority=400)
