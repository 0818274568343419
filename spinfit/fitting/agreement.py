"""Do two fits of the same job to the same data agree: bit for bit, or within what their uncertainties allow?"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from spinfit.fitting.outcome import Outcome, Value

LARGEST_SHIFT = 0.1
"""Standard uncertainties that a value may move by: other versions and processors round otherwise, and a search then
ends elsewhere within its goal, which is far less."""
LARGEST_CHANGE = 0.1
"""Part of itself that an uncertainty may change by."""
# Of chi-squared over its expectation; a value that the data do not determine may move freely at the same chi-squared.
_LARGEST_MISFIT_CHANGE = 1e-3


@dataclass(frozen=True)
class Change:
    """One parameter that did not come out bit for bit.

    Attributes
    ----------
    before, after : Value or None
        None where only one of the fits has it.
    shift : float or None
        |after - before| in standard uncertainties (the part from noise, where there is one); None without any.
    agrees : bool
    """

    name: str
    before: Value | None
    after: Value | None
    shift: float | None
    agrees: bool


@dataclass(frozen=True)
class Agreement:
    """What a comparison found.

    Attributes
    ----------
    identical : bool
        Every value, uncertainty, correlation and curve is the same number.
    agrees : bool
    changes : tuple of Change
        Parameters and fractions that differ, the largest shift first.
    remarks : tuple of str
        What else differs, each a sentence; empty when all else is the same.
    versions : mapping of name -> (before, after)
        Those that differ; "" for one that is not stated.
    """

    identical: bool
    agrees: bool
    changes: tuple[Change, ...]
    remarks: tuple[str, ...]
    versions: Mapping[str, tuple[str, str]]


def _scale(value: Value) -> float | None:
    """Return the standard uncertainty to measure a shift by: that of the noise, which is what a fit is made of."""
    for sigma in (value.uncertainty_noise, value.uncertainty):
        if sigma is not None and math.isfinite(sigma) and sigma > 0:
            return sigma
    return None


def _numbers(value: Value) -> tuple[float | None, ...]:
    found = (value.value, value.uncertainty, value.uncertainty_noise, value.uncertainty_field)
    return tuple(None if v is None or math.isnan(v) else v for v in found)


def _judged(name: str, before: Value | None, after: Value | None) -> Change | None:
    """Compare one parameter; None when it is the same bit for bit."""
    if before is None or after is None or before.unit != after.unit:
        return Change(name, before, after, None, False)
    if _numbers(before) == _numbers(after):
        return None
    step = abs(after.value - before.value)
    first, second = _scale(before), _scale(after)
    if first is None and second is None:
        # Nothing says how far an undetermined value may move; chi-squared decides then.  What was held must stay.
        free = before.varied or before.tied or before.derived
        return Change(name, before, after, None, bool(free and math.isfinite(step)))
    if first is None or second is None:
        return Change(name, before, after, None, False)
    shift = step / min(first, second)
    close = abs(first - second) <= LARGEST_CHANGE * max(first, second)
    return Change(name, before, after, shift, bool(shift <= LARGEST_SHIFT and close))


def _changes(before: Mapping[str, Value], after: Mapping[str, Value]) -> list[Change]:
    names = dict.fromkeys((*before, *after))
    found = [_judged(name, before.get(name), after.get(name)) for name in names]
    return [one for one in found if one is not None]


def _same(first: object, second: object) -> bool:
    if isinstance(first, np.ndarray) and isinstance(second, np.ndarray):
        return np.array_equal(first, second, equal_nan=first.dtype.kind == "f" and second.dtype.kind == "f")
    return bool(first == second)


def _same_data(before: Outcome, after: Outcome) -> list[str]:
    """Say where the data as fitted differ."""
    remarks = []
    names = [[c.trace for c in one.curves] + [t.name for t in one.positions] for one in (before, after)]
    if names[0] != names[1]:
        return [f"the traces were {', '.join(names[0])} and are {', '.join(names[1])}"]
    pairs = [*zip(before.curves, after.curves, strict=True)]
    for one, two in pairs:
        if not (_same(one.measured, two.measured) and _same(one.used, two.used)):
            remarks.append(f"the points of {one.trace} as read, or which of them are used, are not the same")
    for table, other in zip(before.positions, after.positions, strict=True):
        if not (_same(table.setting, other.setting) and _same(table.used, other.used)):
            remarks.append(f"the lines of {table.name} as read, or which of them are used, are not the same")
    return remarks


def _same_results(before: Outcome, after: Outcome) -> bool:
    """Whether curves and correlations are the same bit for bit."""
    keys = ("field", "measured", "fitted", "residual", "baseline", "used", "noise", "scale")
    curves = all(
        _same(getattr(one, key), getattr(two, key))
        for one, two in zip(before.curves, after.curves, strict=True)
        for key in keys
    )
    tables = all(
        _same(getattr(one, key), getattr(two, key))
        for one, two in zip(before.positions, after.positions, strict=True)
        for key in ("measured", "fitted", "residual", "uncertainty", "lower", "upper", "used")
    )
    correlations = before.correlation_names == after.correlation_names
    return curves and tables and correlations and _same(before.correlation_matrix, after.correlation_matrix)


def _quality_remarks(before: Outcome, after: Outcome) -> list[str]:
    first, second = before.quality, after.quality
    remarks = []
    for key in ("points", "free_parameters", "converged", "finished"):
        if getattr(first, key) != getattr(second, key):
            remarks.append(f"{key.replace('_', ' ')}: {getattr(first, key)} before, {getattr(second, key)} now")
    largest = max(abs(first.chi2_reduced), abs(second.chi2_reduced))
    if not abs(first.chi2_reduced - second.chi2_reduced) <= _LARGEST_MISFIT_CHANGE * largest and not (
        math.isnan(first.chi2_reduced) and math.isnan(second.chi2_reduced)
    ):
        remarks.append(f"reduced chi-square: {first.chi2_reduced:.6g} before, {second.chi2_reduced:.6g} now")
    return remarks


def _versions(before: Outcome, after: Outcome) -> dict[str, tuple[str, str]]:
    stated = [one.provenance.get("versions") for one in (before, after)]
    first, second = ({str(k): str(v) for k, v in s.items()} if isinstance(s, Mapping) else {} for s in stated)
    names = dict.fromkeys((*first, *second))
    return {n: (first.get(n, ""), second.get(n, "")) for n in names if first.get(n) != second.get(n)}


def compare_outcomes(before: Outcome, after: Outcome) -> Agreement:
    """Compare two fits of one job to the same data.

    Values agree when they moved by at most `LARGEST_SHIFT` standard uncertainties and these changed by at most
    `LARGEST_CHANGE` of themselves; what was not varied must be the same number.  Points, free parameters and
    convergence must be the same, and chi-squared within a thousandth.
    """
    changes = _changes(before.parameters, after.parameters)
    changes += [
        Change(f"fraction of {one.name}", one.before, one.after, one.shift, one.agrees)
        for one in _changes(before.fractions, after.fractions)
    ]
    remarks = _same_data(before, after) + _quality_remarks(before, after)
    identical = not changes and not remarks and _same_results(before, after)
    changes.sort(key=lambda one: (one.agrees, -(math.inf if one.shift is None else one.shift)))
    agrees = not remarks and all(one.agrees for one in changes)
    return Agreement(identical, agrees, tuple(changes), tuple(remarks), _versions(before, after))
