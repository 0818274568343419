"""What a command says and where: text for people, or JSON alone, on standard output."""

from __future__ import annotations

import json
import shutil
import sys
from collections.abc import Mapping, Sequence
from typing import Any, TextIO

from spinfit.errors import InputError, printable


class Screen:
    """Standard output and standard error of one run.

    Parameters
    ----------
    as_json : bool
        Standard output then holds one JSON document and nothing else.
    """

    def __init__(self, *, as_json: bool = False, out: TextIO | None = None, err: TextIO | None = None) -> None:
        self.as_json = as_json
        self.out = sys.stdout if out is None else out
        self.err = sys.stderr if err is None else err

    def say(self, text: str = "") -> None:
        """Write a line for people; nothing with --json."""
        if not self.as_json:
            if not text.replace("\n", "").isprintable():  # a name or a title may hold what a terminal obeys
                text = "\n".join(map(printable, text.split("\n")))
            if self.out.isatty():  # elsewhere lines stay as they are, for those who search them
                from spinfit.report.layout import narrowed

                text = narrowed(text, shutil.get_terminal_size().columns)
            print(text, file=self.out)

    def emit(self, content: Mapping[str, Any] | Sequence[Any]) -> None:
        """Write the JSON document; nothing without --json."""
        if self.as_json:
            from spinfit.report.outcome_json import clean

            print(json.dumps(clean(content), indent=2, ensure_ascii=False, allow_nan=False), file=self.out)

    def raw(self, text: str) -> None:
        """Write data, such as csv, as it is."""
        self.out.write(text)

    def aside(self, text: str) -> None:
        """Write a line on standard error, for what must not mix with data."""
        print(f"spinfit: {' '.join(text.split())}", file=self.err)

    @property
    def is_terminal(self) -> bool:
        """Whether somebody watches standard error."""
        return self.err.isatty()


def quantity(text: str | None, kind: str, option: str, *, default: float | None = None) -> float | None:
    """Read an option's value with its unit; `default` when the option was not given.

    Raises
    ------
    InputError
        Naming the option.
    """
    from spinfit.units import parse

    if text is None:
        return default
    return parse(text, kind, option)[0][0]


def number(text: str | None, option: str, *, positive: bool = False) -> float | None:
    """Read an option's plain number, finite, and larger than 0 where that is wanted."""
    if text is None:
        return None
    right = "write a positive number" if positive else "write a number"
    try:
        value = float(text)
    except ValueError as error:
        raise InputError(f'"{text}" is not a number', right, place=option) from error
    if value != value or value in (float("inf"), float("-inf")) or (positive and value <= 0):
        raise InputError(f"{text}", right, place=option)
    return value
