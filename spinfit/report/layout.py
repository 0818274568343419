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


_RULE = re.compile(r"-+(?:  -+)*")


def narrowed(text: str, width: int) -> str:
    """Return a text of tables and sentences for a terminal on which it would break in the middle of words.

    A table that is too wide (`table`) is set one value a line, row by row; longer lines are wrapped at blanks.

    Parameters
    ----------
    width : int
        Columns of the terminal.
    """
    lines = text.split("\n")
    if max(map(len, lines)) <= width:
        return text
    found: list[str] = []
    at = 0
    while at < len(lines):
        end = at + 1
        if end < len(lines) and _RULE.fullmatch(lines[end]):
            end = next((n for n in range(at, len(lines)) if not lines[n]), len(lines))
        block = lines[at:end]
        if len(block) > 1 and max(map(len, block)) > width:
            block = _stacked(block)
        found += [piece for line in block for piece in _pieces(line, width)]
        at = end
    return "\n".join(found)


def _stacked(block: Sequence[str]) -> list[str]:
    """Set a table of headings, rule and rows as the first cell of each row with the others below it."""
    spans = [match.span() for match in re.finditer("-+", block[1])]
    headings = [block[0][a:b].strip() for a, b in spans]
    found = []
    for row in block[2:]:
        first, *others = (row[a:b].strip() for a, b in spans)
        if first:  # an empty one goes on with what the row above it began
            found.append(f"{headings[0]}: {first}" if headings[0] else first)
        named = zip(headings[1:], others, strict=True)
        found += [f"  {heading}: {cell}" if heading else f"  {cell}" for heading, cell in named if cell]
    return found


def _pieces(line: str, width: int) -> list[str]:
    if len(line) <= width:
        return [line]
    indent = " " * (len(line) - len(line.lstrip()) + 2)
    return textwrap.wrap(line, width, subsequent_indent=indent, break_long_words=False, break_on_hyphens=False)
