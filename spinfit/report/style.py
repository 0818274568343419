"""One style for every picture: sizes of a journal column, colours told apart by everybody.

The colours are chosen so that they differ in lightness as well as in hue: they stay apart for red-,
green- and blue-blind readers and, nearly, on a grey printer.  Curves differ in their dashes too.
"""

from __future__ import annotations

from contextlib import AbstractContextManager
from typing import Any

from matplotlib import rc_context

MEASURED = "#30343b"
FITTED = "#e4572e"
UNUSED = "#b9bec7"
GUIDE = "#8a909b"
PARTS = ("#23149a", "#1fc7ae", "#dc8a22", "#7b0a5a", "#8d86f5", "#7a673f")
DASHES = ((None, None), (5, 1.5), (2, 1.2), (6, 1.5, 1.5, 1.5), (1, 1), (8, 2))

ON_DARK = {"paper": "#15181d", "ink": "#e3e6eb", "measured": "#d4d9e2", "fitted": "#ff7f50", "unused": "#646b78"}
"""Colours of pages on a dark screen."""
PARTS_ON_DARK = ("#8ca0ea", "#2cffe6", "#ab6900", "#e8156e", "#a042ff", "#f3ed6a")

COLUMN_WIDTH = 86 / 25.4
"""Width of one journal column, inches (86 mm)."""
PAGE_WIDTH = 178 / 25.4
DOTS_PER_INCH = 300

SETTINGS = {
    "font.family": "sans-serif",
    "font.sans-serif": ["DejaVu Sans"],  # comes with matplotlib: the same picture everywhere
    "font.size": 7.0,
    "axes.labelsize": 7.0,
    "axes.titlesize": 7.0,
    "axes.linewidth": 0.6,
    "axes.edgecolor": "#444a54",
    "axes.labelcolor": "#20242b",
    "xtick.labelsize": 6.5,
    "ytick.labelsize": 6.5,
    "xtick.direction": "in",
    "ytick.direction": "in",
    "xtick.major.width": 0.6,
    "ytick.major.width": 0.6,
    "xtick.minor.visible": True,
    "xtick.minor.width": 0.4,
    "legend.fontsize": 6.5,
    "legend.frameon": False,
    "legend.handlelength": 2.0,
    "lines.linewidth": 0.9,
    "lines.solid_joinstyle": "round",
    "savefig.dpi": DOTS_PER_INCH,
    "svg.hashsalt": "spinfit",  # the same ids in every run
}


def styled() -> AbstractContextManager[None]:
    """Return a context in which figures are built and saved in the project's style."""
    return rc_context(SETTINGS)


def part_colour(index: int) -> tuple[str, tuple[Any, ...]]:
    """Return colour and dashes of the `index`-th species."""
    return PARTS[index % len(PARTS)], DASHES[index % len(DASHES)]
