"""Sphinx configuration: ``python -m sphinx -W docs OUT`` with the extra ``docs`` installed."""

from importlib.metadata import version

project = "spinfit"
author = "The spinfit developers"
copyright = "2026, The spinfit developers"
release = version("spinfit")

extensions = ["myst_parser"]
source_suffix = {".md": "markdown"}
exclude_patterns = ["_build"]
# Headings can be linked to, down to the third level.
myst_heading_anchors = 3
html_theme = "alabaster"
