"""What a batch is to fit: job files as they are, or a template whose one trace is each file in turn.

A `Task` is a name and where it comes from; `Plan.order` turns it into everything that a worker needs, and into the
hash by which a later run knows that nothing has changed.
"""

from __future__ import annotations

import hashlib
import json
import os
import re
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from spinfit import __version__
from spinfit.batch.template import Template, relative
from spinfit.batch.values import Values
from spinfit.errors import InputError
from spinfit.files.toml_table import load_toml, parse_toml
from spinfit.files.toml_trace import name_from
from spinfit.files.toml_writing import toml_text

RESERVED = ("summary.csv", "summary.parquet", "units.json", "journal.jsonl", "batch.h5", "report.html")
"""Names in the batch's folder that no trace can have for its own folder."""
_PIECE = 1 << 20


@dataclass(frozen=True, slots=True)
class Task:
    """One fit of the batch.

    Attributes
    ----------
    name : str
        Of the row and of the folder.
    file : str
        Job file, or with a template the data file, as the user wrote it.
    keys : mapping
        What the table of values says for ``[[trace]]``.
    free : mapping of heading -> cell
        Columns that are carried along.
    """

    name: str
    file: str
    keys: Mapping[str, Any] = field(default_factory=dict)
    free: Mapping[str, str] = field(default_factory=dict)


@dataclass(frozen=True)
class Order:
    """All that a worker needs for one fit, as plain data.

    Attributes
    ----------
    name, free
        As in `Task`.
    out : str
        Folder of the batch, absolute.
    text : str
        The job, TOML.
    path : str
        How the job file is called in errors.
    base : str
        Folder from which the job's file names count, absolute.
    shown : mapping of file name in the job -> str
        How data files are called in errors.
    copy : str
        The job once more, with file names that count from the fit's own folder.
    hash : str
        Of everything that decides the outcome.
    pictures : bool
    time_limit : float or None
        Seconds.
    version : str
        Of spinfit, which the worker has to have too.
    force : bool
        Whether the worker waits until its files are on the disk; without it whoever takes the record in does.
    """

    name: str
    free: Mapping[str, str]
    out: str
    text: str
    path: str
    base: str
    shown: Mapping[str, str]
    copy: str
    hash: str
    pictures: bool = True
    time_limit: float | None = None
    version: str = __version__
    force: bool = True


class Plan:
    """The tasks of a batch, checked against each other.

    Parameters
    ----------
    tasks : sequence of Task
    template : Template, optional
        Without one the tasks' files are jobs.
    columns : sequence of str
        Headings of the columns that are carried along.

    Raises
    ------
    InputError
        For names that are used twice (on a file system that takes a and A for the same, too) or cannot be a
        folder's.
    """

    def __init__(self, tasks: Sequence[Task], template: Template | None = None, columns: Sequence[str] = ()) -> None:
        self.tasks = tuple(tasks)
        self.template = template
        self.columns = tuple(columns)
        self._places: dict[str, int] = {}
        for n, task in enumerate(self.tasks):
            self._check(task, n)

    def __iter__(self) -> Iterator[Task]:
        return iter(self.tasks)

    def __len__(self) -> int:
        return len(self.tasks)

    def get(self, name: str) -> Task | None:
        """Return the task of this name, None when there is none."""
        place = self._places.get(name.casefold())
        return None if place is None or self.tasks[place].name != name else self.tasks[place]

    def _check(self, task: Task, place: int) -> None:
        folded = task.name.casefold()
        if folded in RESERVED or task.name.startswith(".") or not task.name.isprintable():
            found = f'"{task.name}" cannot be the name of a folder here'
            raise InputError(found, "give the file another name", place="batch", file=task.file)
        if folded in self._places:
            other = self.tasks[self._places[folded]]
            what = "jobs" if self.template is None else "traces"
            called = f'are called "{task.name}"' if other.name == task.name else "have names that differ in case alone"
            right = "rename one" if self.template is None else 'rename one, or add a column "name" to --values'
            raise InputError(f"two {what} {called}: {other.file} and {task.file}", right, place="batch")
        self._places[folded] = place

    def order(self, task: Task, out: Path, *, pictures: bool = True, time_limit: float | None = None) -> Order:
        """Make everything that a worker needs for a task.

        Raises
        ------
        InputError
            When a job file cannot be read; what is wrong inside is left to the worker.
        """
        out = Path(os.path.realpath(out))
        if self.template is None:
            tables, text = load_toml(task.file)
            base, path = os.path.realpath(Path(task.file).parent), task.file
            names = named_files(tables)
            shown = {name: os.path.normpath(os.path.join(os.path.dirname(task.file), name)) for name in names}
            copy = _moved(tables, text, base, out / task.name)
        else:
            text, shown = self.template.filled(task.name, task.file, task.keys, out / task.name)
            base, path, copy = str(out / task.name), self.template.path, text
            names = tuple(shown)
        places = {name: os.path.normpath(os.path.join(base, name)) for name in names}
        return Order(
            name=task.name,
            free=dict(task.free),
            out=str(out),
            text=text,
            path=path,
            base=base,
            shown=shown,
            copy=copy,
            hash=_hash(text, places, pictures),
            pictures=pictures,
            time_limit=time_limit,
        )


def named_files(tables: Mapping[str, Any]) -> tuple[str, ...]:
    """Return the names of all data files in a job, whatever else is wrong with it."""
    found = []
    for kind in ("trace", "lines"):
        entries = tables.get(kind)
        for entry in entries if isinstance(entries, list) else ():
            if isinstance(entry, dict):
                found += [entry[key] for key in ("file", "background") if isinstance(entry.get(key), str)]
    return tuple(dict.fromkeys(found))


def _moved(tables: Mapping[str, Any], text: str, base: str, folder: Path) -> str:
    """Return a job's text with its file names counted from another folder, its comments kept where that works."""
    new = {name: relative(os.path.join(base, name), folder) for name in named_files(tables)}
    moved = {key: _renamed(value, new) if key in ("trace", "lines") else value for key, value in tables.items()}
    edited = re.sub(
        r'(?m)^(\s*(?:file|background)\s*=\s*)"([^"\\\n]*)"',
        lambda found: f"{found[1]}{json.dumps(new.get(found[2], found[2]), ensure_ascii=False)}",
        text.replace("\r\n", "\n"),
    )
    try:
        if parse_toml(edited) == moved:
            return edited
    except InputError:
        pass
    return toml_text(moved)


def _renamed(entries: Any, new: Mapping[str, str]) -> Any:
    if not isinstance(entries, list):
        return entries
    return [
        {k: new.get(v, v) if k in ("file", "background") and isinstance(v, str) else v for k, v in entry.items()}
        if isinstance(entry, dict)
        else entry
        for entry in entries
    ]


def file_hash(path: str) -> str:
    """Return the SHA-256 of a file's content, or what hinders."""
    digest = hashlib.sha256()
    try:
        if not os.path.isfile(path):  # a pipe would be waited for, and emptied
            return "not a file"
        with open(path, "rb") as stream:
            while piece := stream.read(_PIECE):
                digest.update(piece)
    except (OSError, ValueError) as error:
        return f"unreadable: {type(error).__name__}"
    return digest.hexdigest()


def _hash(text: str, places: Mapping[str, str], pictures: bool) -> str:
    """Return the hash of what decides an outcome and its files: job, content of data files, version."""
    content = [__version__, text, [[name, file_hash(path)] for name, path in places.items()], pictures]
    return hashlib.sha256(json.dumps(content, ensure_ascii=False).encode("utf-8", "surrogatepass")).hexdigest()


def jobs_plan(paths: Sequence[str]) -> Plan:
    """Return the plan of a batch of job files, each a fit of its own."""
    return Plan([Task(Path(path).stem, path) for path in paths])


def template_plan(template: Template, traces: Sequence[str], values: Values | None = None) -> Plan:
    """Return the plan of a template and its traces; without traces those of the table of values.

    Raises
    ------
    InputError
        For a trace without a row, and for names that clash.
    """
    if not traces and values is not None:
        traces = [os.path.relpath(values.place(row)) for row in values.rows]
    tasks = []
    for trace in traces:
        row = None if values is None else values.of(trace)
        keys = {} if row is None else dict(row.keys)
        name = keys.pop("name", None) or name_from(trace)
        if row is not None and not re.fullmatch(r"[A-Za-z0-9_]+", name, re.ASCII):
            found = f'"{name}" cannot be a name'
            right = "use letters, digits and _ only"
            raise InputError(found, right, place=f"line {row.line}.name", file=values.path if values else None)
        tasks.append(Task(name, trace, keys, {} if row is None else row.free))
    return Plan(tasks, template, () if values is None else values.free)
