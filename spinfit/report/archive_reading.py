"""Read an archive back into plain objects, of this layout and of every older one.

An archive is input like any other file: it is opened by the guarded child process, its digest is checked, and
whatever does not hold together is one line.
"""

from __future__ import annotations

import hashlib
import json
import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from spinfit.errors import InputError, nearest
from spinfit.files.guard import SIGNATURE, ask
from spinfit.files.tree import DIGEST, Data, Group, is_intact, tree_from
from spinfit.fitting.outcome import Curves, Note, Outcome, PositionTable, Quality, Value
from spinfit.report.archive import (
    BATCH_FORMAT_VERSION,
    FLAGS,
    FORMAT,
    FORMAT_VERSION,
    KIND,
    NUMBERS,
    OUTCOME_GROUP,
    as_root,
)
from spinfit.report.outcome_json import QUALITY_KEYS, clean

LARGEST = 2**40
"""Bytes of a file that is looked into."""

_DAMAGED = "take an undamaged copy"


@dataclass(frozen=True, eq=False)
class Archive:
    """One fit as an archive keeps it.

    Attributes
    ----------
    format : int
        Version of the layout; 1 kept neither input files nor a digest.
    outcome : Outcome
        Its `seconds` are not kept; `engine` and `provenance` are as outcome.json has them.
    record : dict
        outcome.json, which holds profiles and bootstrap too.
    job : str
        Text of the job.
    files : mapping of name -> bytes
        Input files by the names that the job writes.
    """

    format: int
    outcome: Outcome
    record: Mapping[str, Any]
    job: str
    files: Mapping[str, bytes] = field(default_factory=dict)


class _Reader:
    """A group whose members must be of the kind that is asked for."""

    def __init__(self, group: Group, place: str, file: str) -> None:
        self.group, self.place, self.file = group, place, file

    def wrong(self, found: str, name: str) -> InputError:
        return InputError(found, _DAMAGED, place=f"{self.place}/{name}", file=self.file)

    def into(self, *names: str) -> _Reader:
        here = self.group
        for name in names:
            inner = here.members.get(name)
            if not isinstance(inner, Group):
                raise self.wrong("is missing", "/".join(names))
            here = inner
        return _Reader(here, "/".join((self.place, *names)), self.file)

    def _values(self, name: str) -> NDArray[Any] | str | list[str]:
        data = self.group.members.get(name)
        if not isinstance(data, Data):
            raise self.wrong("is missing", name)
        return data.values

    def text(self, name: str) -> str:
        values = self._values(name)
        if not isinstance(values, str):
            raise self.wrong("is no text", name)
        return values

    def texts(self, name: str) -> list[str]:
        values = self._values(name)
        if isinstance(values, np.ndarray) and values.size == 0:  # an empty list may have lost its kind
            return []
        if not isinstance(values, list):
            raise self.wrong("is no list of texts", name)
        return values

    def array(self, name: str, kinds: str = "f", shape: tuple[int | None, ...] = (None,)) -> NDArray[Any]:
        values = self._values(name)
        if not isinstance(values, np.ndarray) or values.dtype.kind not in kinds:
            raise self.wrong("holds no numbers of the right kind", name)
        fits = len(values.shape) == len(shape) and all(w in (None, n) for n, w in zip(values.shape, shape, strict=True))
        if not fits:
            raise self.wrong(f"has shape {values.shape}", name)
        return values

    def number(self, name: str) -> float:
        return float(self.array(name, "iuf", ()))

    def of_length(self, length: int, names: Sequence[str], kinds: str = "f") -> dict[str, NDArray[Any]]:
        return {name: self.array(name, kinds, (length,)) for name in names}


def _values(reader: _Reader) -> dict[str, Value]:
    """Read parameters from their columns."""
    names, units = reader.texts("name"), reader.texts("unit")
    if len(set(names)) != len(names) or len(units) != len(names):
        raise reader.wrong(f"{len(names)} names, not all different, and {len(units)} units", "name")
    numbers = reader.of_length(len(names), NUMBERS)
    flags = reader.of_length(len(names), FLAGS, "b")
    found = {}
    for n, name in enumerate(names):
        own = {key: float(column[n]) for key, column in numbers.items()}
        missing = {key: None if math.isnan(value) and key != "value" else value for key, value in own.items()}
        marks = {key: bool(column[n]) for key, column in flags.items()}
        found[name] = Value(unit=units[n], **missing, **marks)  # type: ignore[arg-type]
    return found


def _signals(reader: _Reader, names: Sequence[str], length: int | None = None) -> list[NDArray[Any]]:
    return [reader.array(name, "f", (length,)) for name in names]


def _curves(entry: _Reader, name: str) -> Curves:
    fit = entry.into("fit")
    (axis,) = _signals(fit, ("field",))
    n = len(axis)
    measured, fitted = _signals(fit, ("measured", "fitted"), n)
    (residual,) = _signals(entry.into("residual"), ("residual",), n)
    inner = entry.into("parts")
    order = inner.group.attrs.get("auxiliary_signals", [])
    order = order if isinstance(order, list) else [order]
    names = [str(key) for key in order if str(key).startswith("species_")]
    parts = dict(zip([key.removeprefix("species_") for key in names], _signals(inner, names, n), strict=True))
    weight = {"weight": entry.array("weight", "f", (n,))} if "weight" in entry.group.members else {}
    return Curves(
        trace=name,
        frequency=entry.number("frequency"),
        field=axis,
        measured=measured,
        fitted=fitted,
        residual=residual,
        baseline=inner.array("baseline", "f", (n,)),
        used=entry.array("used", "b", (n,)),
        parts=parts,
        noise=entry.number("noise"),
        scale=entry.number("scale"),
        detect=entry.text("detect"),
        **weight,
    )


def _table(entry: _Reader, name: str, version: int) -> PositionTable:
    if version == 1:
        fit = entry
        keys = ("angle",) if "angle" in entry.group.members else ("theta", "phi")
        setting = np.deg2rad(np.stack(_signals(entry, keys), axis=1))
        drawn = np.zeros((0, 3))
    else:
        fit = entry.into("fit")
        setting, drawn = entry.array("setting", "f", (None, None)), entry.array("drawn", "f", (None, 3))
    n = len(setting)
    if setting.shape[1] not in (1, 2):
        raise entry.wrong(f"has shape {setting.shape}", "setting")
    measured, fitted = _signals(fit, ("measured", "fitted"), n)
    return PositionTable(
        name=name,
        frequency=entry.number("frequency"),
        setting=setting,
        measured=measured,
        fitted=fitted,
        drawn=drawn,
        **entry.of_length(n, ("residual", "uncertainty")),
        **entry.of_length(n, ("lower", "upper"), "i"),
        **entry.of_length(n, ("used",), "b"),
    )


# outcome.json ---------------------------------------------------------------------------------------


def _record(text: str, reader: _Reader) -> dict[str, Any]:
    """Parse outcome.json and see that it has the shape that the rest relies on."""
    try:
        record = json.loads(text)
    except (ValueError, RecursionError) as error:
        raise reader.wrong("is no JSON", "outcome_json") from error
    kinds: dict[str, type] = {
        "parameters": dict, "quality": dict, "warnings": list, "provenance": dict, "budget": dict,
    }  # fmt: skip
    if not isinstance(record, dict):
        raise reader.wrong("is no JSON object", "outcome_json")
    for key, kind in kinds.items():
        if not isinstance(record.setdefault(key, kind()), kind):
            raise reader.wrong(f"{key} is no {kind.__name__}", "outcome_json")
    return record


def _quality(record: Mapping[str, Any], reader: _Reader) -> Quality:
    found = {key: record["quality"].get(key) for key in QUALITY_KEYS}
    for key, value in found.items():
        if value is None:
            found[key] = math.nan
        elif not isinstance(value, (bool, int, float)):
            raise reader.wrong(f"quality.{key} is no number", "outcome_json")
    return Quality(**found)


def _notes(record: Mapping[str, Any], reader: _Reader) -> tuple[Note, ...]:
    notes = []
    for entry in record["warnings"]:
        code, text = (entry.get(k) for k in ("code", "text")) if isinstance(entry, dict) else (None, None)
        if not isinstance(code, str) or not isinstance(text, str):
            raise reader.wrong("a warning is no code and text", "outcome_json")
        notes.append(Note(code, text))
    return tuple(notes)


def _budget(record: Mapping[str, Any], reader: _Reader) -> dict[str, dict[str, float]]:
    for name, parts in record["budget"].items():
        if not isinstance(parts, dict) or not all(
            isinstance(v, (int, float)) and not isinstance(v, bool) or v is None for v in parts.values()
        ):
            raise reader.wrong(f"the budget of {name:.40} is no table of numbers", "outcome_json")
    return {
        name: {source: math.nan if part is None else float(part) for source, part in parts.items()}
        for name, parts in record["budget"].items()
    }


def _check_agreement(record: Mapping[str, Any], parameters: Mapping[str, Value], reader: _Reader) -> None:
    """The parameters stand there twice, in columns and in outcome.json."""
    stated = record["parameters"]
    for name, value in parameters.items():
        one = stated.get(name)
        same = isinstance(one, dict) and all(
            one.get(key) == clean(getattr(value, key)) for key in ("value", "uncertainty", "unit")
        )
        if not same:
            raise reader.wrong(f"contradicts the columns on {name:.60}", "outcome_json")
    if len(stated) != len(parameters):
        raise reader.wrong(f"has {len(stated)} parameters, the columns have {len(parameters)}", "outcome_json")


# The whole ------------------------------------------------------------------------------------------


def _files(inputs: _Reader) -> dict[str, bytes]:
    found: dict[str, bytes] = {}
    for number in range(1, len(inputs.group.members) + 1):
        one = inputs.into(f"file_{number}")
        content = one.array("data", "u").astype(np.uint8, copy=False).tobytes()
        name = one.text("file_name")
        if hashlib.sha256(content).hexdigest() != one.text("sha256"):
            raise one.wrong(f"is not the {name:.60} whose SHA-256 is stated", "data")
        found[name] = content
    return found


def version_of(attrs: Mapping[str, Any], file: str, *, kind: str = "fit") -> int:
    """Return the layout's version.

    Raises
    ------
    InputError
        For a file that is no archive, one of another kind, and one of a version to come.
    """
    version = attrs.get(FORMAT)
    if not isinstance(version, int) or version < 1:
        raise InputError("is no archive of spinfit", "give the outcome.h5 of a fit, or a batch.h5", file=file)
    own = attrs.get(KIND, "fit")
    newest = BATCH_FORMAT_VERSION if own == "batch" else FORMAT_VERSION
    if version > newest:
        found = f"is an archive of format {version}; this version of spinfit reads up to {newest}"
        raise InputError(found, "use a newer spinfit", file=file)
    if own != kind:
        right = "name one of its fits" if own == "batch" else "give a batch.h5"
        raise InputError(f'is an archive of kind "{own!s:.20}"', right, file=file)
    return version


def archive_from(root: Group, file: str) -> Archive:
    """Make an archive of the tree that was read.

    Raises
    ------
    InputError
        When something is missing, of the wrong kind, or contradicts itself.
    """
    version = version_of(root.attrs, file)
    # In a batch's archive a fit is an entry: since format 3 with the digest that it had as a root.
    if version > 1 and not (is_intact(root) or is_intact(as_root(root))):
        found = "does not hold what was written: its digest is another" if DIGEST in root.attrs else "has no digest"
        raise InputError(f"is damaged or was changed ({found})", _DAMAGED, file=file)
    reader = _Reader(root, "", file)
    results = reader.into(OUTCOME_GROUP)
    if version == 1:
        process, record, job = results, _record(results.text("outcome_json"), results), results.text("job")
        entries = [name for name in root.members if name != OUTCOME_GROUP]
        lines = [n for n in entries if "fit" not in reader.into(n).group.members]
        listed = record["provenance"].get("traces")
        order = [t.get("name") for t in listed if isinstance(t, dict)] if isinstance(listed, list) else []
        traces = sorted((n for n in entries if n not in lines), key=lambda n: order.index(n) if n in order else -1)
    else:
        process, job = results.into("fit"), results.into("job").text("data")
        record = _record(results.into("outcome_json").text("data"), results)
        traces, lines = results.texts("traces"), results.texts("lines")
    parameters = _values(process.into("parameters"))
    _check_agreement(record, parameters, results)
    inner = process.into("correlations")
    names = inner.texts("names")
    provenance = dict(record["provenance"])
    message, engine = provenance.pop("message", ""), provenance.pop("engine", {})
    name = provenance.pop("name", "")
    if not isinstance(message, str) or not isinstance(engine, dict) or not isinstance(name, str):
        raise results.wrong("provenance is of the wrong kind", "outcome_json")
    outcome = Outcome(
        name=name,
        parameters=parameters,
        quality=_quality(record, results),
        correlation_names=tuple(names),
        correlation_matrix=inner.array("matrix", "f", (len(names), len(names))),
        warnings=_notes(record, results),
        curves=tuple(_curves(reader.into(one), one) for one in traces),
        fractions=_values(process.into("fractions")),
        provenance=provenance,
        engine=engine,
        budget=_budget(record, results),
        positions=tuple(_table(reader.into(one), one, version) for one in lines),
        message=message,
    )
    return Archive(version, outcome, record, job, _files(results.into("input")) if version > 1 else {})


def _size(path: str | Path) -> int:
    try:
        where = Path(path)
        if where.is_dir():
            raise InputError("is a folder", "name a file in it", file=path)
        if where.exists() and not where.is_file():
            raise InputError("is not a regular file", "name an archive", file=path)
        with open(where, "rb") as stream:
            start = stream.read(8)
        size = where.stat().st_size
    except FileNotFoundError as error:
        raise InputError("there is no such file", "check the name and the folder", file=path) from error
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or error
        raise InputError(f"cannot be read ({reason})", "check the name and the permissions", file=path) from error
    if start != SIGNATURE:
        raise InputError("is not HDF5", "give the outcome.h5 of a fit, or a batch.h5", file=path)
    if size > LARGEST:
        raise InputError(f"has {size:.3g} bytes", f"an archive has at most {LARGEST:.3g}", file=path)
    return size


def read_group(path: str | Path, under: Sequence[str] = ()) -> Group:
    """Return everything in one group of an archive.

    Raises
    ------
    InputError
    """
    return tree_from(*ask("tree", file=str(path), path=str(Path(path).resolve()), size=_size(path), under=under))


def kind_of_archive(path: str | Path) -> Literal["fit", "batch"] | None:
    """Return what an HDF5 file is an archive of; None when it is none.

    Raises
    ------
    InputError
        When it cannot be read at all, or is of a version to come.
    """
    found, _ = ask("names", file=str(path), path=str(Path(path).resolve()), size=_size(path))
    attrs = found["attrs"]
    if FORMAT not in attrs:
        return None
    kind: Literal["fit", "batch"] = "batch" if attrs.get(KIND) == "batch" else "fit"
    version_of(attrs, str(path), kind=kind)
    return kind


def read_archive(path: str | Path, trace: str | None = None) -> Archive:
    """Read one fit from an archive.

    Parameters
    ----------
    path : str or Path
        An `outcome.h5`, or with `trace` a `batch.h5`.
    trace : str, optional
        Which fit of a batch.

    Raises
    ------
    InputError
        One line: no archive, damaged or changed, cut short, of a version to come, or no such fit in it.
    """
    kind = kind_of_archive(path)
    if trace is None:
        if kind is None:
            version_of({}, str(path))
        elif kind == "batch":
            raise InputError("holds many fits", "name one: --trace NAME", file=path)
        return archive_from(read_group(path), str(path))
    if kind != "batch":
        raise InputError("holds one fit", f'leave out "{trace:.60}"', place="--trace", file=path)
    found, _ = ask("names", file=str(path), path=str(Path(path).resolve()), size=_size(path))
    if trace not in found["names"] or trace.startswith("spinfit."):
        names = [name for name in found["names"] if not name.startswith("spinfit.")]
        raise InputError(f'holds no fit "{trace:.60}"', nearest(trace, names[:1000]), place="--trace", file=path)
    return archive_from(read_group(path, (trace,)), str(path))
