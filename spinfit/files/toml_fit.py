"""The ``[fit]`` table: what to vary, between which limits, tied how."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from spinfit.errors import InputError
from spinfit.files.keys import FIT, STARTS
from spinfit.files.toml_table import LARGEST_NUMBER, Table, describe, flatten, is_finite, quantity_of
from spinfit.fitting.data import LOSSES
from spinfit.fitting.parameters import Parameter, expand_vary, members
from spinfit.fitting.ties import compile_ties

_EXAMPLE = 'vary = ["cu.g", "cu.width.gaussian"]'


@dataclass(frozen=True)
class FitTable:
    """``[fit]`` as read; `limits` in internal units."""

    vary: tuple[str, ...] = ()
    start: str = "given"
    limits: Mapping[str, tuple[float, float]] = field(default_factory=dict)
    ties: Mapping[str, str] = field(default_factory=dict)
    loss: str = "linear"
    loss_scale: float | None = None


def start_of(data: object) -> str:
    """Return ``fit.start`` alone, which decides what a species may leave open."""
    if data is None:
        raise InputError("is missing", f"write [fit] with {_EXAMPLE}", place="fit")
    return Table(data, "fit", FIT).choice("start", STARTS) or "given"


def read_fit(data: object, parameters: Mapping[str, Parameter]) -> FitTable:
    """Read ``[fit]`` and check every name in it against the model.

    Raises
    ------
    InputError
        When nothing is varied; for unknown names, limits that are reversed or exclude the start,
        and ties that are not arithmetic, form a circle, or tie what is varied or limited.
    """
    start = start_of(data)
    table = Table(data, "fit", FIT)
    vary = _vary(table)
    single = expand_vary(vary, parameters)
    ties = flatten(table.table("tie") or {}, "fit.tie")
    compiled = compile_ties(ties, parameters, varied=single)
    limits = _limits(flatten(table.table("limits") or {}, "fit.limits"), parameters, check_start=start != "auto")
    for name in limits:
        if name in ties:
            found = f'"{name}" is tied and cannot have limits of its own'
            raise InputError(found, "limit what it is tied to", place=f"fit.limits.{name}")
    compiled.apply({name: parameter.value for name, parameter in parameters.items()})
    loss = table.choice("loss", LOSSES) or "linear"
    scale = table.number("loss_scale")
    if scale is not None and loss == "linear":
        raise table.error("loss_scale", "means nothing for least squares", 'write loss = "huber", or take it out')
    if scale is not None and scale <= 0:
        raise table.error("loss_scale", f"{scale:g}", "write a positive number of standard deviations, such as 1.345")
    return FitTable(vary, start, limits, ties, loss, scale)


def _vary(table: Table) -> tuple[str, ...]:
    table.require("vary", '["cu.g", "cu.width.gaussian"]')
    value = table.data["vary"]
    if not isinstance(value, list) or not all(isinstance(entry, str) for entry in value):
        raise table.error("vary", f"{describe(value)} is not a list of names", f"write {_EXAMPLE}")
    if not value:
        raise table.error("vary", "there is nothing to vary", f"write {_EXAMPLE}, or use simulate")
    return tuple(value)


def _limits(
    entries: Mapping[str, Any], parameters: Mapping[str, Parameter], *, check_start: bool
) -> dict[str, tuple[float, float]]:
    found: dict[str, tuple[float, float]] = {}
    for entry, value in entries.items():
        place = f"fit.limits.{entry}"
        for name in members(entry, parameters, place=place):
            if name in found:
                raise InputError(f'"{name}" has limits twice', "take one of them out", place=place)
            found[name] = _pair(value, parameters[name], place, check_start)
    return found


def _pair(value: object, parameter: Parameter, place: str, check_start: bool) -> tuple[float, float]:
    """Return (low, high) of one parameter in internal units."""
    unit = f" {parameter.unit}" if parameter.unit else ""
    if isinstance(value, str) and parameter.kind != "number":
        low, high = quantity_of(value, parameter.kind, place, 2)[0]
    elif isinstance(value, list) and len(value) == 2:
        low, high = (_limit(one, parameter, place) for one in value)
    else:
        raise InputError(f"{describe(value)} is not a pair of limits", "write [low, high]", place=place)
    if not low < high:
        raise InputError("the lower limit is not below the upper one", "write [low, high]", place=place)
    hard_low, hard_high = parameter.hard_limits
    if max(low, hard_low) >= min(high, hard_high):
        span = f"{parameter.to_job(hard_low):g} to {parameter.to_job(hard_high):g}{unit}"
        raise InputError("the limits leave no possible value", f"possible is {span}", place=place)
    if check_start and not low <= parameter.value <= high:
        shown = f"{parameter.to_job(low):.6g} to {parameter.to_job(high):.6g}{unit}"
        found = f"the start, {parameter.to_job(parameter.value):.6g}{unit}, is outside the limits {shown}"
        raise InputError(found, "change one of them", place=place)
    return max(low, hard_low), min(high, hard_high)


def _limit(value: object, parameter: Parameter, place: str) -> float:
    if isinstance(value, str) and parameter.kind != "number":
        return quantity_of(value, parameter.kind, place, 1)[0][0]
    if not is_finite(value) or abs(value) > LARGEST_NUMBER:  # type: ignore[arg-type]
        unit = f" in {parameter.unit}, or a text with a unit" if parameter.unit else ""
        raise InputError(f"{describe(value)} is no limit", f"write a finite number{unit}", place=place)
    return parameter.from_job(float(value))  # type: ignore[arg-type]
