"""Columns under headings and wrapped sentences, as plain text; light, so that quick commands stay quick."""

from __future__ import annotations

import re
import textwrap
from collections.abc import Sequence


def table(headings: Sequence[str], rows: Sequence[Sequence[str]], *, left: Sequence[int] = (0,)) -> str:
    """Lay out rows under headings.

    Parameters
    ----------
    headings : sequence of str
    rows : sequence of sequences of str
        As many cells as headings.
    left : sequence of int
        Columns aligned to the left; the others to the right.
    """
    cells = [list(headings), *[[str(cell) for cell in row] for row in rows]]
    widths = [max(len(row[k]) for row in cells) for k in range(len(headings))]
    rule = ["-" * width for width in widths]

    def line(row: Sequence[str]) -> str:
        aligned = [c.ljust(w) if k in left else c.rjust(w) for k, (c, w) in enumerate(zip(row, widths, strict=True))]
        return "  ".join(aligned).rstrip()

    return "\n".join(line(row) for row in (cells[0], rule, *cells[1:]))


def aligned(numbers: Sequence[str]) -> list[str]:
    """Pad numbers on the right so that their decimal points stand below each other."""
    tails = [len(number) - (re.search(r"[.(e]|$", number).start()) for number in numbers]
    return [number + " " * (max(tails, default=0) - tail) for number, tail in zip(numbers, tails, strict=True)]


def wrapped(text: str, *, width: int = 100, indent: str = "  ") -> str:
    """Wrap a sentence, later lines indented."""
    lines = textwrap.wrap(" ".join(text.split()), width, subsequent_indent=indent, break_long_words=False)
    return "\n".join(lines)
