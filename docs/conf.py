"""Sphinx configuration: ``python -m sphinx -W docs OUT`` with the extra ``docs`` installed."""

from importlib import metadata

project = "spinfit"
author = "The spinfit developers"
copyright = "2026, The spinfit developers"
release = metadata.version("spinfit")

extensions = ["myst_parser"]
source_suffix = {".md": "markdown"}
exclude_patterns = ["_build"]
# Headings can be linked to, down to the third level.
myst_heading_anchors = 3
html_theme = "alabaster"
