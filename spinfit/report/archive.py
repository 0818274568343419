"""`outcome.h5`: one fit in one file that a generic viewer of HDF5 opens on the picture of the fit.

Each trace is a NeXus NXentry whose default NXdata is measured and fitted against the field; the
parameters, the correlations, the job's text and `outcome.json` stand beside them.  Nothing in the
file depends on when or where it was written.
"""

from __future__ import annotations

import io
from collections.abc import Mapping

import h5py
import numpy as np

from spinfit.files.curves import write_nxdata
from spinfit.fitting.outcome import Curves, Outcome, PositionTable, Value
from spinfit.report.outcome_json import outcome_text

FORMAT_VERSION = 1
"""Of the layout below; readers accept this and every older one."""

OUTCOME_GROUP = "spinfit.outcome"
"""Where the results stand; no trace can be called so, since names hold no dots."""

_NUMBERS = ("value", "uncertainty", "uncertainty_noise", "uncertainty_field", "start")
_FLAGS = ("varied", "at_limit", "tied", "derived")


def _text(group: h5py.Group, name: str, text: str) -> None:
    group.create_dataset(name, data=text, dtype=h5py.string_dtype("utf-8"), track_times=False)


def _texts(group: h5py.Group, name: str, texts: list[str]) -> None:
    group.create_dataset(name, data=np.array(texts, dtype=object), dtype=h5py.string_dtype("utf-8"), track_times=False)


def _numbers(group: h5py.Group, name: str, values: object, *, units: str = "") -> None:
    data = group.create_dataset(name, data=np.asarray(values), track_times=False)
    if units:
        data.attrs["units"] = units


def _values(group: h5py.Group, values: Mapping[str, Value]) -> None:
    """Write parameters as columns of one length; what is missing is NaN."""
    group.attrs["NX_class"] = "NXcollection"
    _texts(group, "name", list(values))
    _texts(group, "unit", [value.unit for value in values.values()])
    for key in _NUMBERS:
        column = [getattr(value, key) for value in values.values()]
        _numbers(group, key, np.array([np.nan if v is None else v for v in column], dtype=float))
    for key in _FLAGS:
        _numbers(group, key, np.array([getattr(value, key) for value in values.values()], dtype=bool))


def _trace(entry: h5py.Group, curves: Curves, name: str) -> None:
    """Write one trace as NXentry: measured and fitted first, then the rest on the same axis."""
    entry.attrs["NX_class"] = "NXentry"
    entry.attrs["default"] = "fit"
    _text(entry, "title", f"{name}: {curves.trace}")
    signals = {
        "measured": curves.measured,
        "fitted": curves.fitted,
    }
    write_nxdata(entry.create_group("fit"), curves.field, signals)
    write_nxdata(entry.create_group("residual"), curves.field, {"residual": curves.residual})
    parts = {f"species_{key}": part for key, part in curves.parts.items()}
    write_nxdata(entry.create_group("parts"), curves.field, {"baseline": curves.baseline, **parts})
    _numbers(entry, "used", curves.used)
    _numbers(entry, "frequency", curves.frequency, units="MHz")
    _numbers(entry, "noise", curves.noise)
    _numbers(entry, "scale", curves.scale)
    _text(entry, "detect", curves.detect)


def _positions(group: h5py.Group, table: PositionTable) -> None:
    """Write one table of line positions as columns of one length."""
    group.attrs["NX_class"] = "NXcollection"
    names = ["angle"] if table.setting.shape[1] == 1 else ["theta", "phi"]
    for name, column in zip(names, np.rad2deg(table.setting).T, strict=True):
        _numbers(group, name, column, units="deg")
    for name in ("measured", "fitted", "residual", "uncertainty"):
        _numbers(group, name, getattr(table, name), units="mT")
    for name in ("lower", "upper", "used"):
        _numbers(group, name, getattr(table, name))
    _numbers(group, "frequency", table.frequency, units="MHz")


def _fill(root: h5py.File, outcome: Outcome) -> None:
    root.attrs["NX_class"] = "NXroot"
    root.attrs["spinfit_format"] = FORMAT_VERSION
    for curves in outcome.curves:
        _trace(root.create_group(curves.trace), curves, outcome.name)
    if outcome.curves:
        root.attrs["default"] = outcome.curves[0].trace
    for table in outcome.positions:
        _positions(root.create_group(table.name), table)
    fit = root.create_group(OUTCOME_GROUP)
    fit.attrs["NX_class"] = "NXcollection"
    _values(fit.create_group("parameters"), outcome.parameters)
    _values(fit.create_group("fractions"), outcome.fractions)
    correlations = fit.create_group("correlations")
    correlations.attrs["NX_class"] = "NXcollection"
    _texts(correlations, "names", list(outcome.correlation_names))
    _numbers(correlations, "matrix", np.asarray(outcome.correlation_matrix, dtype=float))
    _text(fit, "outcome_json", outcome_text(outcome))
    _text(fit, "job", str(outcome.provenance.get("job", "")))


def archive_bytes(outcome: Outcome) -> bytes:
    """Return the bytes of `outcome.h5`; the same outcome gives the same bytes."""
    buffer = io.BytesIO()
    with h5py.File(buffer, "w") as root:
        _fill(root, outcome)
    return buffer.getvalue()
