"""Errors that carry their place and their exit code.

The library raises; only the command line prints and exits.  An :class:`InputError` is the user's
mistake and reads as one line: where (file, then key or line), what was found, what would be right.
"""

from __future__ import annotations

import difflib
from collections.abc import Iterable
from pathlib import Path


class SpinfitError(Exception):
    """Base of every error that spinfit raises on purpose."""

    exit_code = 3


class InputError(SpinfitError):
    """Something the user gave cannot be used.

    Parameters
    ----------
    found : str
        What was found, as a clause: ``"S = 0.3 is not a multiple of 1/2"``.
    right : str
        What would be right: ``'write S = "1/2", "1", "3/2", ...'``.
    place : str, optional
        Key or line inside the file: ``"species.1.g"``, ``"line 12"``.
    file : str or Path, optional
        File in which it was found.
    """

    exit_code = 2

    def __init__(
        self, found: str, right: str = "", *, place: str | None = None, file: str | Path | None = None
    ) -> None:
        super().__init__(found)
        self.found = found
        self.right = right
        self.place = place
        self.file = None if file is None else str(file)

    def at(self, *, place: str | None = None, file: str | Path | None = None) -> InputError:
        """Return the same error with its place filled in where it was not yet known.

        A `place` already known is kept as the inner part of a longer one: an error at ``"g"`` seen
        from ``"species.1"`` is at ``"species.1.g"``.
        """
        if place is not None and self.place is not None and not self.place.startswith(place):
            place = f"{place}.{self.place}"
        return InputError(
            self.found,
            self.right,
            place=self.place if place is None else place,
            file=file if self.file is None else self.file,
        )

    def __str__(self) -> str:
        place, found = _cut(self.place or "", LONGEST_PLACE), _cut(self.found, LONGEST_FOUND)
        text = ": ".join(part for part in (self.file, place, found) if part)
        text = f"{text}; {self.right}" if self.right else text
        return on_one_line(text)


MOST_LISTED = 60
"""Words that are listed in an error at most."""
LONGEST_PLACE, LONGEST_FOUND = 200, 1000
"""Characters of what an error quotes from a file, whose keys and texts may be of any length."""


def _cut(text: str, longest: int) -> str:
    return text if len(text) <= longest else text[: longest - 3] + "..."


def on_one_line(text: str) -> str:
    """Return a text on one line without what a terminal would take for a command: it may quote a file."""
    return printable(" ".join(text.split()))


def printable(text: str) -> str:
    """Return a text with a mark in place of what a terminal would take for a command, and of what is no character."""
    return text if text.isprintable() else "".join(c if c.isprintable() else "\ufffd" for c in text)


def nearest(word: str, known: Iterable[str]) -> str:
    """Return ``'; did you mean "x"?'``-style help for an unknown word, or the list of known ones.

    Parameters
    ----------
    word : str
        What the user wrote.
    known : iterable of str
        The words that would be understood.
    """
    known = sorted(set(known))
    close = difflib.get_close_matches(word, known, n=1, cutoff=0.5)
    if close:
        return f'did you mean "{close[0]}"?'
    more = ", ..." if len(known) > MOST_LISTED else ""
    return "known: " + ", ".join(known[:MOST_LISTED]) + more
