"""A job whose one ``[[trace]]`` (or ``[[lines]]``) stands for any number of files."""

from __future__ import annotations

import os
import re
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np

from spinfit.errors import InputError
from spinfit.files.keys import JOB, LINES, TRACE
from spinfit.files.toml_fit import read_fit, start_of
from spinfit.files.toml_sample import read_sample, read_tolerance
from spinfit.files.toml_species import read_species
from spinfit.files.toml_table import Given, Table, load_toml, parse_toml
from spinfit.files.toml_writing import toml_text
from spinfit.fitting.data import Lines, Trace
from spinfit.fitting.parameters import Binding

_HEADING = re.compile(r"^[ \t]*\[\[?[ \t]*([A-Za-z0-9_-]+)[^\n]*$", re.MULTILINE)


class Template:
    """A template, checked as far as it can be without a trace.

    Parameters
    ----------
    path : str or Path

    Raises
    ------
    InputError
        For a file that is no job, or has not exactly one trace.
    """

    def __init__(self, path: str | Path) -> None:
        self.path = str(path)
        self.folder = os.path.realpath(Path(path).parent)
        self.tables, text = load_toml(path)
        try:
            Table(self.tables, "", JOB)
            self.kind = self._only()
            self._check()
        except InputError as error:
            raise error.at(file=path) from None
        self.entry: Mapping[str, Any] = self.tables[self.kind][0]
        rest = {key: value for key, value in self.tables.items() if key != self.kind}
        self._before, self._after = _around(text.replace("\r\n", "\n"), self.kind, rest)

    def _only(self) -> str:
        """Return which of the two kinds of tables stands for the files."""
        kinds = [kind for kind in ("trace", "lines") if kind in self.tables]
        counts = [len(self.tables[k]) if isinstance(self.tables[k], list) else 1 for k in kinds]
        if sum(counts) != 1 or not isinstance(self.tables[kinds[0]], list):
            found = f"{sum(counts)} traces" if kinds and sum(counts) != 1 else "no trace"
            right = "a template has one [[trace]], in double brackets, which stands for each file in turn"
            raise InputError(found, right, place="trace")
        return kinds[0]

    def _check(self) -> None:
        """Read all but the data: what is wrong here would be wrong for every trace."""
        root = Table(self.tables, "", JOB)
        keys = TRACE if self.kind == "trace" else LINES
        entry = Table(self.tables[self.kind][0], f"{self.kind}.1", keys)
        given: Given = {}
        start = start_of(root.data.get("fit"))
        sample = read_sample(root.data.get("sample"), given, job=True)
        species = read_species(root.tables("species"), given, form=sample.form, auto=start == "auto")
        read_tolerance(root.data.get("accuracy"), given)
        nothing = np.zeros(2)
        conditions: dict[str, Any] = {"frequency": 1.0, "group": entry.name("group")}
        name = entry.name("name") or "trace"
        one = (
            Trace(name=name, field=nothing, signal=nothing, used=nothing == 0, **conditions)
            if self.kind == "trace"
            else Lines(name=name, field=nothing, **conditions)
        )
        units = Binding(species, sample, (one,)).named(given)
        parameters = Binding(species, sample, (one,), units=units).parameters
        # Whether starts lie inside limits may depend on the values that go with each trace.
        read_fit({**root.data["fit"], "start": "auto"}, parameters)

    def filled(self, name: str, file: str, keys: Mapping[str, Any], folder: Path) -> tuple[str, dict[str, str]]:
        """Put a file in the place of the trace.

        Parameters
        ----------
        name : str
            Of the trace, unless the template names it.
        file : str
            As the user wrote it.
        keys : mapping
            More keys of the trace, which win over the template's.
        folder : Path
            From which file names in the job are to count, absolute.

        Returns
        -------
        text : str
            The job, TOML.
        shown : mapping of file name in the job -> str
            How the user would write it.
        """
        entry = {"name": name, **self.entry, **keys, "file": relative(file, folder)}
        shown = {entry["file"]: file}
        background = entry.get("background")
        if isinstance(background, str):
            whole = os.path.join(self.folder, background)  # the table's are absolute already
            entry["background"] = relative(whole, folder)
            shown[entry["background"]] = background
        if self._before is None:
            return toml_text({**self.tables, self.kind: [entry]}), shown
        return self._before + toml_text({self.kind: [entry]}) + self._after, shown


def relative(path: str, folder: Path) -> str:
    """Return a path as it is written in a file of a folder; links on the way to the file's folder are followed."""
    whole = os.path.join(os.path.realpath(os.path.dirname(path) or "."), os.path.basename(path))
    try:
        return Path(os.path.relpath(whole, folder)).as_posix()
    except ValueError:  # another drive
        return whole


def _around(text: str, kind: str, rest: Mapping[str, Any]) -> tuple[str | None, str]:
    """Cut the tables of one kind out of the text, so that comments and order of the rest stay.

    Returns
    -------
    before, after : str
        `before` is None where the text is written in a way that cannot be cut (inline tables, say).
    """
    marks = [*_HEADING.finditer(text)]
    ends = [mark.start() for mark in marks[1:]] + [len(text)]
    own = [(mark.start(), end) for mark, end in zip(marks, ends, strict=True) if mark[1] == kind]
    if not own:
        return None, ""
    before = text[: own[0][0]]
    starts = [start for start, _ in own[1:]] + [len(text)]
    after = "".join(text[end:start] for (_, end), start in zip(own, starts, strict=True))
    try:
        kept = parse_toml(before + "\n" + after) == rest
    except InputError:
        kept = False
    return (before, "\n" + after if after else "") if kept else (None, "")
