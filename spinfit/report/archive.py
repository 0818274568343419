"""`outcome.h5`: one fit in one file, with all that it takes to look at it and to repeat it.

Groups, classes and default attributes are those of the open NeXus standard, so that a generic viewer of HDF5 opens
the file on the plot of the measured and the fitted signal::

    kiln_07                   NXentry, one for each trace (or table of line positions)
        fit                   NXdata: measured, fitted against the true field
        residual, parts       NXdata: residual; baseline and each species
        as_read               NXcollection: field before offset and scale, background
        frequency, detect ... conditions
    spinfit.outcome           NXentry
        fit                   NXprocess: parameters, fractions, correlations, budget, quality, warnings, versions
        outcome_json, job     NXnote: the texts of outcome.json and of the job
        input                 NXcollection: NXnote file_1, file_2, ...: the bytes of every file that the job names

Nothing in it depends on when or where it was written, and a digest over the whole content stands at the root.
"""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from dataclasses import replace
from typing import Any

import h5py
import numpy as np
from numpy.typing import NDArray

from spinfit import __version__
from spinfit.files.tree import Attribute, Data, Group, change_text_attribute, sealed, write_tree
from spinfit.fitting.data import Job, Lines, Trace
from spinfit.fitting.outcome import Curves, Outcome, PositionTable, Value
from spinfit.report.outcome_json import QUALITY_KEYS, outcome_text

# Bytes by which the file grows in memory while it is written.
_BLOCK = 2**17

FORMAT_VERSION = 2
"""Of the layout; readers accept this and every older one.  1 held no input files and no digest."""

BATCH_FORMAT_VERSION = 3
"""Of the layout of a batch's archive.  Up to 2 each of its fits had a digest made anew; now it is that of the fit's own
archive."""

FORMAT, KIND = "spinfit_format", "spinfit_kind"
"""Attributes of the root: the layout's version, and "fit" or "batch"."""

OUTCOME_GROUP = "spinfit.outcome"
"""Where the results stand; no trace can be called so, since names hold no dots."""

NUMBERS = ("value", "uncertainty", "uncertainty_noise", "uncertainty_field", "start")
FLAGS = ("varied", "at_limit", "tied", "derived")


def collection(members: Mapping[str, Group | Data], kind: str = "NXcollection", **attrs: Attribute) -> Group:
    """Return a group of a NeXus class."""
    return Group(members, {"NX_class": kind, **attrs})


def note(content: str | bytes, kind: str, **texts: str) -> Group:
    """Return an NXnote: a text or bytes with its type of content."""
    data = content if isinstance(content, str) else np.frombuffer(content, dtype=np.uint8)
    return collection({"type": Data(kind), **{k: Data(v) for k, v in texts.items()}, "data": Data(data)}, "NXnote")


def _array(values: Any, unit: str = "", **attrs: Attribute) -> Data:
    return Data(np.asarray(values), {**({"units": unit} if unit else {}), **attrs})


def nxdata(
    axis: str, values: NDArray[Any], signals: Mapping[str, Any], *, unit: str, title: str, signal_unit: str = ""
) -> Group:
    """Return an NXdata group: the first of `signals` is what a generic viewer plots, the others beside it."""
    names = list(signals)
    more: dict[str, Attribute] = {"auxiliary_signals": names[1:]} if len(names) > 1 else {}
    label = f"{axis.replace('_', ' ')} / {unit}" if unit else axis.replace("_", " ")
    members: dict[str, Group | Data] = {axis: _array(np.asarray(values, dtype=float), unit, long_name=label)}
    members |= {name: _array(np.asarray(one, dtype=float), signal_unit) for name, one in signals.items()}
    members["title"] = Data(title)
    return collection(members, "NXdata", signal=names[0], axes=[axis], **more)


def values_group(values: Mapping[str, Value]) -> Group:
    """Return parameters as columns of one length; what is missing is NaN."""
    columns: dict[str, Group | Data] = {
        "name": Data(list(values)),
        "unit": Data([value.unit for value in values.values()]),
    }
    for key in NUMBERS:
        column = [getattr(value, key) for value in values.values()]
        columns[key] = _array(np.array([np.nan if v is None else v for v in column], dtype=float))
    for key in FLAGS:
        columns[key] = _array(np.array([getattr(value, key) for value in values.values()], dtype=bool))
    return collection(columns)


def _conditions(one: Trace | Lines | None) -> dict[str, Group | Data]:
    """Return the measuring conditions that the results do not hold."""
    if one is None:
        return {}
    found: dict[str, Group | Data] = {"microwave": Data(one.microwave)}
    for key, unit in (
        ("temperature", "K"), ("modulation", "mT"), ("phase", "rad"), ("field_uncertainty", "mT"),
        ("frequency_uncertainty", "MHz"), ("baseline", ""),
    ):  # fmt: skip
        value = getattr(one, key, None)
        if value is not None:
            found[key] = _array(value, unit)
    if isinstance(one, Trace) and one.angle is not None:
        found["angle"] = _array(one.angle, "rad")
    return found


def _trace(curves: Curves, name: str, trace: Trace | None) -> Group:
    """Return one trace: measured and fitted first, then the rest on the same axis."""

    def drawn(title: str, signals: Mapping[str, Any]) -> Group:
        return nxdata("field", curves.field, signals, unit="mT", title=f"{curves.trace}: {title}")

    parts = {f"species_{key}": part for key, part in curves.parts.items()}
    members: dict[str, Group | Data] = {
        "title": Data(f"{name}: {curves.trace}"),
        "fit": drawn("measured and fitted", {"measured": curves.measured, "fitted": curves.fitted}),
        "residual": drawn("measured less fitted", {"residual": curves.residual}),
        "parts": drawn("baseline and species", {"baseline": curves.baseline, **parts}),
        "used": _array(curves.used),
        "frequency": _array(float(curves.frequency), "MHz"),
        "noise": _array(float(curves.noise)),
        "scale": _array(float(curves.scale)),
        "detect": Data(curves.detect),
        **_conditions(trace),
    }
    if trace is not None:
        as_read: dict[str, Group | Data] = {"field": _array(trace.field, "mT")}
        if trace.background is not None:
            as_read["background"] = _array(trace.background)
        members["as_read"] = collection(as_read)
    weight = getattr(curves, "weight", None)
    if weight is not None:
        members["weight"] = _array(weight)
    return collection(members, "NXentry", default="fit")


def _positions(table: PositionTable, name: str, lines: Lines | None) -> Group:
    """Return one table of line positions; where no single angle tells the lines apart, they are counted."""
    title = f"{table.name}: measured and fitted fields of lines"
    signals = {"measured": table.measured, "fitted": table.fitted}
    if table.setting.shape[1] == 1:
        degrees = np.rad2deg(table.setting[:, 0])
        drawn = nxdata("angle", degrees, signals, unit="deg", signal_unit="mT", title=title)
    else:
        drawn = nxdata("line", np.arange(1, len(table.measured) + 1), signals, unit="", signal_unit="mT", title=title)
    members: dict[str, Group | Data] = {"title": Data(f"{name}: {table.name}"), "fit": drawn}
    members |= {key: _array(getattr(table, key), "mT") for key in ("residual", "uncertainty")}
    members |= {key: _array(getattr(table, key)) for key in ("lower", "upper", "used")}
    members |= {"setting": _array(table.setting, "rad"), "drawn": _array(table.drawn)}
    members |= {"frequency": _array(float(table.frequency), "MHz"), **_conditions(lines)}
    return collection(members, "NXentry", default="fit")


def _process(outcome: Outcome) -> Group:
    """Return what the fit found, in columns."""
    sources = list(dict.fromkeys(source for parts in outcome.budget.values() for source in parts))
    budget = [[parts.get(source, np.nan) for source in sources] for parts in outcome.budget.values()]
    versions = outcome.provenance.get("versions")
    named = versions if isinstance(versions, Mapping) else {}
    members: dict[str, Group | Data] = {
        "program": Data("spinfit"),
        "version": Data(__version__),
        "sequence_index": _array(1),
        "parameters": values_group(outcome.parameters),
        "fractions": values_group(outcome.fractions),
        "correlations": collection(
            {
                "names": Data(list(outcome.correlation_names)),
                "matrix": _array(np.asarray(outcome.correlation_matrix, dtype=float)),
            }
        ),
        "budget": collection(
            {
                "names": Data(list(outcome.budget)),
                "sources": Data(sources),
                "matrix": _array(np.array(budget, dtype=float).reshape(len(outcome.budget), len(sources))),
            }
        ),
        "quality": collection({key: _array(getattr(outcome.quality, key)) for key in QUALITY_KEYS}),
        "warnings": collection(
            {
                "code": Data([one.code for one in outcome.warnings]),
                "text": Data([one.text for one in outcome.warnings]),
            }
        ),
        "message": Data(outcome.message),
        "versions": collection({key: Data(str(value)) for key, value in named.items()}),
    }
    return collection(members, "NXprocess")


def _input(files: Mapping[str, bytes]) -> Group:
    """Return every input file; names are data here, never names of groups."""
    return collection(
        {
            f"file_{number}": note(
                content, "application/octet-stream", file_name=name, sha256=hashlib.sha256(content).hexdigest()
            )
            for number, (name, content) in enumerate(files.items(), 1)
        }
    )


def archive_tree(
    outcome: Outcome, job: Job | None = None, more: Mapping[str, Any] | None = None, *, record: str = ""
) -> Group:
    """Return everything on a fit as one tree.

    Parameters
    ----------
    outcome : Outcome
    job : Job, optional
        What was fitted: its files and conditions are kept, without which the fit cannot be repeated.
    more : mapping, optional
        What else stands in outcome.json (profiles, bootstrap).
    record : str, optional
        The text of outcome.json where it is there already.
    """
    traces = {one.name: one for one in job.traces} if job else {}
    lines = {one.name: one for one in job.lines} if job else {}
    entries: dict[str, Group | Data] = {
        one.trace: _trace(one, outcome.name, traces.get(one.trace)) for one in outcome.curves
    }
    entries |= {one.name: _positions(one, outcome.name, lines.get(one.name)) for one in outcome.positions}
    first = next(iter(entries), OUTCOME_GROUP)
    text = str(outcome.provenance.get("job", ""))
    results: dict[str, Group | Data] = {
        "title": Data(outcome.name),
        "traces": Data([one.trace for one in outcome.curves]),
        "lines": Data([one.name for one in outcome.positions]),
        "fit": _process(outcome),
        "outcome_json": note(record or outcome_text(outcome, more), "application/json", file_name="outcome.json"),
        "job": note(text, "application/toml", file_name=f"{outcome.name}.toml"),
        "input": _input(job.files if job else {}),
    }
    entries[OUTCOME_GROUP] = collection(results, "NXentry")
    attrs: dict[str, Attribute] = {"NX_class": "NXroot", "default": first, FORMAT: FORMAT_VERSION, KIND: "fit"}
    return Group(entries, attrs)


_LOWERED = {"NXroot": "NXentry", "NXentry": "NXsubentry"}
_RAISED = {lower: upper for upper, lower in _LOWERED.items()}


def _moved(root: Group, classes: Mapping[str, str]) -> Group:
    """Return a tree with the classes of its root and of the members of that changed."""

    def attrs(node: Group) -> Mapping[str, Attribute]:
        kind = str(node.attrs.get("NX_class", ""))
        return {**node.attrs, "NX_class": classes[kind]} if kind in classes else node.attrs

    members = {
        name: replace(node, attrs=attrs(node)) if isinstance(node, Group) else node
        for name, node in root.members.items()
    }
    return Group(members, attrs(root))


def as_entry(root: Group) -> Group:
    """Return a fit's tree as one entry of a larger archive: what were entries in it become subentries.

    Its digest stays that of the tree by itself (see `as_root`).
    """
    return _moved(root, _LOWERED)


def as_root(entry: Group) -> Group:
    """Return the tree that was made an entry."""
    return _moved(entry, _RAISED)


def make_entry(copied: h5py.Group) -> None:
    """Do to a copied tree in a file what `as_entry` does."""
    change_text_attribute(copied, "NX_class", _LOWERED)


def archive_bytes(
    outcome: Outcome, job: Job | None = None, more: Mapping[str, Any] | None = None, *, record: str = ""
) -> bytes:
    """Return the bytes of `outcome.h5`; the same outcome gives the same bytes (see `archive_tree`)."""
    with h5py.File("outcome.h5", "w", driver="core", backing_store=False, block_size=_BLOCK) as root:  # in memory
        write_tree(root, sealed(archive_tree(outcome, job, more, record=record)))
        root.flush()
        return bytes(root.id.get_file_image())
