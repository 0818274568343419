"""A table as HTML, for results that show themselves in a notebook; light, and it knows nothing of what it shows."""

from __future__ import annotations

from collections.abc import Sequence
from html import escape


def html_table(headings: Sequence[str], rows: Sequence[Sequence[object]], *, caption: str = "") -> str:
    """Return a table; every text is escaped.

    Parameters
    ----------
    headings : sequence of str
    rows : sequence of sequences
        As many cells as headings; what is not a string is written by `str`, None as nothing.
    caption : str
        Stands above it.
    """
    head = "".join(f"<th>{escape(heading)}</th>" for heading in headings)
    body = "".join(
        "<tr>" + "".join(f"<td>{escape('' if cell is None else str(cell))}</td>" for cell in row) + "</tr>"
        for row in rows
    )
    said = f"<caption>{escape(caption)}</caption>" if caption else ""
    return f"<table>{said}<thead><tr>{head}</tr></thead><tbody>{body}</tbody></table>"
