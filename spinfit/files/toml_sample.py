"""``[sweep]``, ``[sample]`` and ``[accuracy]`` tables."""

from __future__ import annotations

from typing import Any

import numpy as np

from spinfit.errors import InputError, nearest
from spinfit.files.keys import ACCURACY, SAMPLE, SWEEP
from spinfit.files.toml_table import Given, Table, describe
from spinfit.sites import POINT_GROUPS
from spinfit.sweep import DETECT, FORMS, MICROWAVE, Sample, Sweep

FORM_KEYS = {form: tuple(key for key in SAMPLE if form in SAMPLE[key].forms) for form in FORMS}
"""Which keys of ``[sample]`` go with which form."""

DEFAULT_TOLERANCE = 1e-3
MOST_POINTS = 10_000_000
MOST_ANGLES = 100_000


def read_sweep(data: object, given: Given) -> Sweep:
    """Read ``[sweep]``.

    Raises
    ------
    InputError
        For wrong, missing and unknown keys, non-positive conditions and a reversed or zero range.
    """
    table = Table(data, "sweep", SWEEP, path=("sweep",), given=given)
    table.require("frequency", '"9.5 GHz"')
    table.require("field", '"260, 360 mT" (first, last)')
    frequency = table.positive("frequency", "frequency")
    field = table.interval("field")
    assert frequency is not None
    assert field is not None
    values = {"points": table.integer("points", 2, MOST_POINTS), **conditions(table)}
    values["phase"] = table.quantity("phase", "angle")
    return Sweep(frequency=frequency, field=field, **{key: v for key, v in values.items() if v is not None})


def conditions(table: Table) -> dict[str, Any]:
    """Return temperature, microwave, modulation and detect of a sweep or a trace; None for each that is missing."""
    return {
        "temperature": table.positive("temperature", "temperature"),
        "microwave": table.choice("microwave", MICROWAVE),
        "modulation": table.positive("modulation", "field", zero=True),
        "detect": table.choice("detect", DETECT),
    }


def plane(table: Table) -> dict[str, tuple[float, float, float] | None]:
    """Return ``axis`` and ``from`` (as "start") of a rotation; None for each that is missing."""
    axis, start = table.vector("axis"), table.vector("from")
    if axis is not None and start is not None and parallel(axis, start):
        raise table.error("from", "is parallel to axis", "write the direction that the field has at angle 0")
    return {"axis": axis, "start": start}


def parallel(first: tuple[float, ...], second: tuple[float, ...]) -> bool:
    """Whether two vectors have one direction, or opposite ones."""
    a, b = np.array(first) / np.linalg.norm(first), np.array(second) / np.linalg.norm(second)
    return bool(np.linalg.norm(np.cross(a, b)) < 1e-6)


def read_sample(data: object, given: Given, *, job: bool) -> Sample:
    """Read ``[sample]``; a missing one is a powder.

    Parameters
    ----------
    data : object
        None when the file has no such table.
    job : bool
        In a job each trace has its angle, and a list of them means nothing.
    """
    if data is None:
        return Sample()
    table = Table(data, "sample", SAMPLE, path=("sample",), given=given)
    form = table.choice("form", FORMS) or "powder"
    for key in table.data:
        if key != "form" and key not in FORM_KEYS[form]:
            right = " or ".join(f'form = "{other}"' for other, keys in FORM_KEYS.items() if key in keys)
            raise table.error(key, f"means nothing for a {form}", f"write {right}, or take it out")
    if job and "angles" in table:
        raise table.error("angles", "a job has one angle for each trace", 'write angle = "..." in [[trace]]')
    values: dict[str, Any] = {"form": form, **plane(table)}
    values["angles"] = _angles(table)
    values["angle_zero"] = table.quantity("angle_zero", "angle")
    values["microwave_axis"] = table.vector("microwave_axis")
    values["tilt"] = table.quantities("tilt", "angle", 3)
    values["point_group"] = _point_group(table)
    values["director"] = table.vector("director")
    values["order"] = table.number("order")
    values["angle"] = table.quantity("angle", "angle")
    order = values["order"]
    if order is not None and not -0.5 <= order <= 1:
        raise table.error("order", f"{order:g}", "an order parameter <P2> lies between -0.5 and 1")
    if form == "aligned":
        table.require("order", "0.6 (<P2>, from -0.5 to 1)")
    sample = Sample(**{key: value for key, value in values.items() if value is not None})
    if form == "crystal" and parallel(sample.axis, sample.start):
        raise table.error("axis", "is parallel to from", "write from as the direction that the field has at angle 0")
    return sample


def _angles(table: Table) -> tuple[float, ...] | None:
    values = table.quantities("angles", "angle", None)
    if values is not None and len(values) > MOST_ANGLES:
        raise table.error("angles", f"{len(values)} angles", f"write at most {MOST_ANGLES}")
    return values


def _point_group(table: Table) -> str | None:
    value = table.text("point_group")
    if value is None:
        return None
    group = value.replace(" ", "")
    if group not in POINT_GROUPS:
        right = f"{nearest(group, POINT_GROUPS)} (write a short symbol such as 4/m, -3m, mmm)"
        raise table.error("point_group", f"{describe(value)} is not one of the 32 point groups", right)
    return group


def read_tolerance(data: object, given: Given) -> float:
    """Read ``[accuracy]``; a missing one has the default."""
    if data is None:
        return DEFAULT_TOLERANCE
    table = Table(data, "accuracy", ACCURACY, given=given)
    value = table.number("tolerance")
    if value is None:
        return DEFAULT_TOLERANCE
    if not 1e-8 <= value <= 0.5:
        raise InputError(f"{value:g}", "write a tolerance from 1e-8 to 0.5, such as 1e-3", place="accuracy.tolerance")
    return value
