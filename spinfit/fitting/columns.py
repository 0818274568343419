"""Derivatives of traces' signals with respect to free parameters, followed through the engine.

A parameter is moved by a ten-thousandth of its typical change, with everything that is tied to it;
the engine says what that does to the spectrum it has already made (`spinfit.derivatives`).  Ties,
limits and crystal fields therefore need no rules of their own.  Where the engine cannot tell, or a
parameter has no effect to first order (a rhombicity at an axial start), the column is left to
differences of simulations.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from spinfit.errors import InputError
from spinfit.fitting.data import Trace
from spinfit.fitting.signals import Signals, Stage, conditions
from spinfit.species import Species
from spinfit.sweep import Sample

Array = NDArray[np.float64]
Model = Callable[[Array], tuple[tuple[Species, ...], Sample, tuple[Trace, ...]]]

# Of a parameter's typical change.  Levels move by some 1e-3 MHz then, a hundred million times their
# rounding, while the second order of that is as small beside the first.
STEP = 1e-4
# A typical change that moves the signal by less than this part of its largest value moves it by its
# second order, if at all.
_STILL = 1e-5


@dataclass(frozen=True, eq=False)
class Moved:
    """A model with one parameter moved by `step`, internal units."""

    step: float
    species: tuple[Species, ...]
    sample: Sample
    traces: tuple[Trace, ...]


def exact_changes(
    signals: Signals,
    species: tuple[Species, ...],
    sample: Sample,
    traces: Sequence[Trace],
    fields: Sequence[Array],
    stage: Stage,
    moved: Sequence[Moved | None],
    scales: Sequence[float],
) -> list[list[Array | None] | None]:
    """Return d(signal)/d(parameter) of every trace for each moved model.

    Parameters
    ----------
    fields : sequence of ndarray
        Of each trace, mT, as in the file.
    moved : sequence of Moved or None
        None for parameters that are not asked for.
    scales : sequence of float
        Typical change of each parameter.

    Returns
    -------
    list of (list of ndarray or None), or None
        For each parameter the derivative for each trace, None where the trace does not feel it; None
        instead of the list where only differences of simulations can tell.
    """
    out: list[list[Array | None] | None] = [None if one is None else [] for one in moved]
    largest = [0.0] * len(moved)
    for number, (trace, field) in enumerate(zip(traces, fields, strict=True)):
        asked = [k for k, columns in enumerate(out) if columns is not None]
        if not asked:
            break
        several = [_Move(moved[k], moved[k].traces[number]) for k in asked]
        found = _of_trace(signals, species, sample, trace, field, stage, several)
        size = float(np.abs(signals.total(species, trace, sample, field, stage)).max())
        for k, change in zip(asked, found, strict=True):
            if change is None:
                out[k] = None
                continue
            column = change / moved[k].step
            effect = float(np.abs(column).max()) * scales[k] / size if size > 0 else 0.0
            largest[k] = max(largest[k], effect)
            out[k].append(column if column.any() else None)
    return [None if size < _STILL else columns for columns, size in zip(out, largest, strict=True)]


@dataclass(frozen=True, eq=False)
class _Move:
    """A moved model and one trace of it."""

    model: Moved
    trace: Trace


def _of_trace(
    signals: Signals,
    species: tuple[Species, ...],
    sample: Sample,
    trace: Trace,
    field: Array,
    stage: Stage,
    moved: Sequence[_Move],
) -> list[Array | None]:
    """Return the change of one trace's signal by each move, shape (n,); None where it is not known."""
    out: list[Array | None] = []
    samples = []
    for one in moved:
        turned = _turned(one.model.sample, one.trace, trace)
        samples.append(turned)
        shifted = replace(
            one.trace,
            field_offset=trace.field_offset,
            field_scale=trace.field_scale,
            phase=trace.phase,
            angle=trace.angle,
        )
        same = turned is not None and conditions(shifted) == conditions(trace)
        out.append(np.zeros(field.size) if same else None)
    for number, own in enumerate(species):
        kept = [k for k, change in enumerate(out) if change is not None]
        followed = signals.changes(
            own, trace, sample, field, stage, [(moved[k].model.species[number], samples[k]) for k in kept]
        )
        if followed is None:
            return [None] * len(moved)
        part = signals.part(own, trace, sample, field, stage)
        for k, change in zip(kept, followed.by_model, strict=True):
            if change is None:
                out[k] = None
                continue
            new = moved[k]
            shift = (new.trace.field_scale - trace.field_scale) * field + new.trace.field_offset - trace.field_offset
            total = own.amount * change + (new.model.species[number].amount - own.amount) * part
            if shift.any():
                total = total + own.amount * followed.by_field * shift
            if new.trace.phase != trace.phase:
                total = total + own.amount * followed.by_phase * (new.trace.phase - trace.phase)
            out[k] = out[k] + total
    return out


def _turned(sample: Sample, new: Trace, trace: Trace) -> Sample | None:
    """Return a sample in which a change of a trace's angle stands as one of the angle zero; None where it cannot."""
    if new.angle == trace.angle:
        return sample
    if sample.form != "crystal" or new.angle is None or trace.angle is None:
        return None
    return replace(sample, angle_zero=sample.angle_zero + trace.angle - new.angle)


def move(model: Model, free: Array, index: int, step: float) -> Moved | None:
    """Return the model with one free parameter moved, None where it has no meaning there.

    Parameters
    ----------
    model : callable
        As `spinfit.fitting.residuals.Problem.model`.
    """
    there = free.copy()
    there[index] += step
    try:
        return Moved(float(there[index] - free[index]), *model(there))
    except InputError:
        return None
