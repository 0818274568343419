"""Outcomes for programs: `outcome.json` and `curves.csv`.

Nothing that changes from run to run goes in (no dates, no wall time), keys keep their order and there
is never a NaN: what could not be had is null.
"""

from __future__ import annotations

import io
import json
import math
from collections.abc import Mapping
from dataclasses import asdict, is_dataclass
from typing import Any

import numpy as np

from spinfit.fitting.outcome import Curves, Outcome, PositionTable, Value

VALUE_KEYS = ("value", "uncertainty", "uncertainty_noise", "uncertainty_field", "unit", "varied", "at_limit")
_AT_ONCE = 1000
QUALITY_KEYS = ("converged", "finished", "chi2_reduced", "noise", "points", "free_parameters", "aicc", "bic")


def clean(content: Any) -> Any:
    """Return plain JSON types: arrays as lists, numpy numbers as Python's, what is not finite as None."""
    if content is None or isinstance(content, (str, bool)):
        return content
    if isinstance(content, np.ndarray):
        return clean(content.tolist())
    if isinstance(content, (np.bool_, np.integer, int)):
        return content.item() if isinstance(content, np.generic) else content
    if isinstance(content, (float, np.floating)):
        return float(content) if math.isfinite(content) else None
    if isinstance(content, Mapping):
        return {str(key): clean(value) for key, value in content.items()}
    if isinstance(content, (list, tuple)):
        return [clean(value) for value in content]
    if is_dataclass(content) and not isinstance(content, type):
        return clean(asdict(content))
    return str(content)


def value_record(value: Value) -> dict[str, Any]:
    """Return one parameter's record; a value that follows from a crystal field says so by one more key."""
    record = {key: getattr(value, key) for key in VALUE_KEYS}
    return record | {"derived": True} if value.derived else record


def outcome_record(outcome: Outcome, more: Mapping[str, Any] | None = None) -> dict[str, Any]:
    """Return an outcome as plain JSON types, without its curves.

    `more` is put behind it: what was tried beyond the fit (``profiles``, ``bootstrap``).

    Keys: ``parameters``, ``fractions``, ``quality``, ``correlations`` {names, matrix}, ``budget`` {name:
    {source: standard uncertainty}}, ``warnings`` [{code, text}] and ``provenance``, which holds the job's
    name, what the engine used and the optimiser's message as well.
    """
    return clean(
        {
            "parameters": {name: value_record(value) for name, value in outcome.parameters.items()},
            "fractions": {name: value_record(value) for name, value in outcome.fractions.items()},
            "quality": {key: getattr(outcome.quality, key) for key in QUALITY_KEYS},
            "correlations": {"names": outcome.correlation_names, "matrix": outcome.correlation_matrix},
            "budget": outcome.budget,
            **({"axes": [asdict(axis) for axis in outcome.axes]} if outcome.axes else {}),
            "warnings": [{"code": note.code, "text": note.text} for note in outcome.warnings],
            "provenance": {
                "name": outcome.name,
                **outcome.provenance,
                "traces": [
                    {"name": c.trace, "frequency_MHz": c.frequency, "scale": c.scale, "noise": c.noise}
                    for c in outcome.curves
                ],
                **({"lines": [_table_record(t) for t in outcome.positions]} if outcome.positions else {}),
                "engine": outcome.engine,
                "message": outcome.message,
            },
            **(more or {}),
        }
    )


def _table_record(table: PositionTable) -> dict[str, Any]:
    return {
        "name": table.name,
        "frequency_MHz": table.frequency,
        "lines": len(table.measured),
        "left_out": int(np.sum(~table.used)),
    }


def outcome_text(outcome: Outcome, more: Mapping[str, Any] | None = None) -> str:
    """Return the text of `outcome.json`."""
    return json.dumps(outcome_record(outcome, more), indent=2, ensure_ascii=False, allow_nan=False) + "\n"


def _columns(curves: Curves, species: list[str]) -> list[np.ndarray]:
    missing = np.full(curves.field.shape, np.nan)
    parts = [curves.parts.get(name, missing) for name in species]
    weight = [] if curves.weight is None else [curves.weight]
    return [curves.field, curves.measured, curves.fitted, curves.residual, *parts, *weight]


def _quoted(name: str) -> str:
    return '"' + name.replace('"', '""') + '"' if any(c in name for c in ',"\n') else name


def curves_text(outcome: Outcome) -> str:
    """Return the text of `curves.csv`: field_mT, measured, fitted, residual, one column a species.

    With more than one trace a column ``trace`` stands in front.  Nine digits keep a field of 400 mT
    to a millionth of a mT.  After a robust fit a column ``weight`` stands last: what each point counted.  A
    curve that is not there (a fit that was stopped) leaves its cells empty.
    """
    species = list(dict.fromkeys(name for curves in outcome.curves for name in curves.parts))
    several = len(outcome.curves) > 1
    out = io.StringIO()
    header = [*(["trace"] if several else []), "field_mT", "measured", "fitted", "residual", *species]
    header += ["weight"] if any(curves.weight is not None for curves in outcome.curves) else []
    out.write(",".join(map(_quoted, header)) + "\n")
    for curves in outcome.curves:
        front = _quoted(curves.trace) + "," if several else ""
        out.write(_rows(np.column_stack(_columns(curves, species)), front))
    return out.getvalue()


def _rows(table: np.ndarray, front: str) -> str:
    """Return a table's lines, each behind `front`; what is not finite leaves its cell empty."""
    if not np.isfinite(table).all():
        cells = (",".join(f"{v:.9g}" if math.isfinite(v) else "" for v in row) for row in table)
        return "".join(f"{front}{row}\n" for row in cells)
    # One call for many lines takes half as long as one for each.
    line = front.replace("%", "%%") + ",".join(["%.9g"] * table.shape[1]) + "\n"
    parts = (table[n : n + _AT_ONCE] for n in range(0, len(table), _AT_ONCE))
    return "".join(line * len(part) % tuple(part.ravel().tolist()) for part in parts)
