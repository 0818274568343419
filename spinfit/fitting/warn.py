"""What a sceptical reader of a fit should be told, one note each.

Checks before the fit (`check_before`) refuse what cannot be fitted; notes after it (`notes_after`)
carry a stable code and a sentence with the names of the parameters.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from spinfit.errors import InputError
from spinfit.fitting.baseline import taken
from spinfit.fitting.equivalent import AXES, conventional
from spinfit.fitting.noise import autocorrelation, runs_test
from spinfit.fitting.one_angle import one_angle_notes
from spinfit.fitting.outcome import Note
from spinfit.fitting.residuals import Point, Problem, View
from spinfit.fitting.signals import Stage, narrowest_width
from spinfit.fitting.signs import SIGN_CHI2, single_sign_notes
from spinfit.fitting.solve import Descent
from spinfit.fitting.turning import LARGEST_MODULATION
from spinfit.fitting.uncertainty import Covariances
from spinfit.species import Species

Array = NDArray[np.float64]

STRONG_CORRELATION = 0.9
# A species that rises nowhere in the window to this part of its largest signal has no line there.
_NO_LINE = 1e-3
# Signal outside the sweep, relative to the largest inside, that is worth a note.
_BEYOND = 0.02
# Standardised runs and correlation of neighbours: less than 1 trace of white noise in 30 000 goes so far.
_RUNS_Z = -4.0
_NEIGHBOURS_Z = 4.5
_LOOK_POINTS = 1024
# Part of a model's sum of squares that a smooth baseline may take over before that is worth a note.
_TAKEN = 0.2


def check_before(problem: Problem, view: View) -> None:
    """Refuse traces with fewer points than free parameters.

    Raises
    ------
    InputError
    """
    free = len(problem.names)
    for trace, seen in zip(problem.job.traces, view.seen, strict=True):
        linear = 1 + round(float(np.sum(seen.basis**2)))
        if seen.field.size <= linear:
            raise _too_few(trace.name, trace.file, seen.field.size, linear)
    if view.points <= free + view.linear:
        trace = problem.job.traces[0]
        raise _too_few(trace.name, trace.file, view.points, free + view.linear)


def _too_few(name: str, file: str, points: int, free: int) -> InputError:
    return InputError(
        f"{points} points to be fitted, but {free} free parameters (scale and baseline counted)",
        "vary fewer parameters or widen fit_range",
        place=name,
        file=file or None,
    )


def check_lines(problem: Problem, point: Point, view: View) -> None:
    """Refuse a species that has no line inside any trace's window.

    Raises
    ------
    InputError
    """
    for one in point.species:
        if not any(_has_line(problem, one, point, view, n) for n in range(len(view.seen))):
            windows = ", ".join(f"{s.field[0]:g} to {s.field[-1]:g} mT" for s in view.seen)
            raise InputError(
                f'species "{one.name}" has no line in the fitted field range ({windows})',
                "change its g (or D, A) or the fit_range, or leave the species out",
                place=one.name,
            )


def _has_line(problem: Problem, one: Species, point: Point, view: View, index: int) -> bool:
    seen, trace = view.seen[index], point.traces[index]
    coarse = Stage(0.0, 1e-2)
    inside = float(np.abs(problem.signals.part(one, trace, point.sample, seen.field, view.stage)).max())
    if inside == 0 or not math.isfinite(inside):
        return False
    # Wide enough for g from 1 up; narrow lines may fall between the points, which is on the safe side.
    wide = np.linspace(0.02, 2.2, _LOOK_POINTS) * max(float(seen.field[-1]), trace.frequency / 14.0)
    return inside > _NO_LINE * float(np.abs(problem.signals.part(one, trace, point.sample, wide, coarse)).max())


def notes_after(
    problem: Problem, view: View, descent: Descent, spread: Covariances | None, at_limit: NDArray[np.bool_]
) -> list[Note]:
    """All notes on a finished or broken-off fit, most important first."""
    point = descent.point
    notes = []
    if not descent.converged:
        notes.append(Note("not_converged", f"The fit has not converged: {descent.message}."))
    for name, where in zip(problem.names, _limits_hit(problem, point.free, at_limit), strict=True):
        if where:
            text = f"{name} ended at its {where}; it has no uncertainty and the others' hold for it fixed there."
            notes.append(Note("at_limit", text))
    notes += _scale_notes(point)
    if spread is not None:
        notes += _blind_notes(spread) + _correlation_notes(problem, spread)
        notes += _residual_notes(point, view, spread)
        if descent.jacobian is not None:
            notes += _sign_notes(problem, view, point, descent.jacobian, spread)
            notes += single_sign_notes(problem, view, point, descent.jacobian, spread.known)
        notes += _setting_notes(problem, point)
        notes += one_angle_notes(problem, view, point)
    notes += _background_notes(view, point)
    notes += _modulation_notes(point)
    notes += _beyond_notes(problem, view, point)
    return notes


def _limits_hit(problem: Problem, free: Array, at_limit: NDArray[np.bool_]) -> list[str]:
    out = []
    for k, name in enumerate(problem.names):
        parameter = problem.parameters[name]
        low = abs(free[k] - problem.lower[k]) <= abs(free[k] - problem.upper[k])
        bound = problem.lower[k] if low else problem.upper[k]
        unit = f" {parameter.unit}" if parameter.unit else ""
        side = "lower" if low else "upper"
        out.append(f"{side} limit {parameter.to_job(float(bound)):g}{unit}" if at_limit[k] else "")
    return out


def _scale_notes(point: Point) -> list[Note]:
    return [
        Note("negative_scale", f"The scale of {trace.name} came out negative: the trace is upside down for this model.")
        for trace, scale in zip(point.traces, point.scales, strict=True)
        if scale < 0
    ]


def _blind_notes(spread: Covariances) -> list[Note]:
    notes = []
    for names in spread.blind:
        if len(names) == 1:
            text = f"The data do not determine {names[0]}: it has next to no effect on the trace."
        else:
            text = f"The data determine only combinations of {_listed(names)}, not each by itself."
        notes.append(Note("undetermined", text))
    return notes


def _listed(names: Sequence[str]) -> str:
    return names[0] if len(names) == 1 else ", ".join(names[:-1]) + " and " + names[-1]


def _correlation_notes(problem: Problem, spread: Covariances) -> list[Note]:
    names = [name for name, known in zip(problem.names, spread.known, strict=True) if known]
    matrix = spread.correlation
    notes = []
    for row, column in zip(*np.triu_indices(len(names), 1), strict=True):
        if abs(matrix[row, column]) > STRONG_CORRELATION:
            text = (
                f"{names[row]} and {names[column]} are strongly correlated ({matrix[row, column]:+.3f}): "
                "the data know a combination of the two better than either."
            )
            notes.append(Note("strong_correlation", text))
    return notes


def _residual_notes(point: Point, view: View, spread: Covariances) -> list[Note]:
    notes = []
    at = 0
    for trace, seen, noise in zip(point.traces, view.seen, spread.traces, strict=True):
        residual = point.residual[at : at + seen.field.size]
        at += seen.field.size
        runs = runs_test(residual)
        neighbours = float(autocorrelation(residual, 1)[-1])
        linked = runs.z < _RUNS_Z or neighbours * math.sqrt(residual.size) > _NEIGHBOURS_Z
        if linked or noise.uneven > 6:
            detail = f"{runs.runs} runs of one sign, {runs.expected:.0f} expected; correlation {neighbours:.2f}"
            where = ", largest on the lines" if noise.uneven > 4 else ""
            text = (
                f"The residuals of {trace.name} are systematic ({detail}{where}; variance {noise.variance:.2f} times "
                "that of the noise): the model misses something or the noise is correlated; uncertainties were widened."
            )
            notes.append(Note("systematic_residuals", text))
    return notes


def _sign_notes(problem: Problem, view: View, point: Point, jacobian: Array, spread: Covariances) -> list[Note]:
    """Try the other sign of D (with E), of A, and of both together, the rest refitted linearly."""
    notes: list[Note] = []
    values = problem.values(point.free)
    moving = set(values)
    for n, one in enumerate(point.species):
        zfs = [x for x in moving if x.startswith(f"{one.name}.") and x.rsplit(".", 1)[1] in ("D", "E")]
        flips = [("D", [x for x in zfs if x.endswith(".D")], _flip_zfs)]
        flips.append(("A", [x for x in moving if x.startswith(f"{one.name}.") and _is_hyperfine(x)], _flip_hyperfine))
        before = len(notes)
        for symbol, names, flip in flips:
            if names and _as_good(problem, view, point, jacobian, spread, n, flip(one)):
                named = _listed(sorted(names))
                why = " without a temperature" if symbol == "D" and point.traces[0].temperature is None else ""
                text = f"The sign of {named} is not determined{why}: the other sign fits as well."
                notes.append(Note(f"sign_of_{symbol}", text))
        (_, ds, _), (_, hyperfine, _) = flips
        both = _flip_zfs(_flip_hyperfine(one))
        # The hyperfine shifts know the sign of A against that of D, as in Mn(II); populations alone know either.
        if ds and hyperfine and len(notes) == before and _as_good(problem, view, point, jacobian, spread, n, both):
            named = _listed(sorted(ds + hyperfine))
            text = (
                f"The signs of {named} are determined only against each other: with all of them turned round the fit "
                "is as good."
            )
            notes.append(Note("sign_of_D_and_A", text))
    return notes


def _is_hyperfine(name: str) -> bool:
    last = name.rsplit(".", 1)[1]
    return last in ("A", "A_x", "A_y", "A_z", "A_perp", "A_par")


def _flip_zfs(species: Species) -> Species:
    spins = tuple(
        replace(spin, D=-spin.D, E=-spin.E, stevens=tuple((kq, -b) for kq, b in spin.stevens)) for spin in species.spins
    )
    return replace(species, spins=spins)


def _flip_hyperfine(species: Species) -> Species:
    nuclei = tuple(replace(nucleus, A=tuple(-a for a in nucleus.A)) for nucleus in species.nuclei)
    return replace(species, nuclei=nuclei)


def _as_good(
    problem: Problem, view: View, point: Point, jacobian: Array, spread: Covariances, index: int, other: Species
) -> bool:
    """Whether a changed species fits as well once the other parameters follow, to first order."""
    species = (*point.species[:index], other, *point.species[index + 1 :])
    pieces = []
    for seen, trace in zip(view.seen, point.traces, strict=True):
        column = problem.signals.total(species, trace, point.sample, seen.field, view.stage) / seen.noise
        shape = column - seen.basis @ (seen.basis.T @ column)
        pieces.append(seen.rest - shape * (float(shape @ seen.rest) / max(float(shape @ shape), 1e-300)))
    residual = np.concatenate(pieces)
    known = spread.known
    # Columns keep their span, up to sign, where the flip is a symmetry; elsewhere the refit only helps less.
    step = np.linalg.lstsq(jacobian[:, known], residual, rcond=1e-6)[0]
    after = residual - jacobian[:, known] @ step
    per_point = max(point.chi2 / max(view.points - view.linear - point.free.size, 1), 1e-12)
    return (float(after @ after) - point.chi2) / per_point < SIGN_CHI2


def _setting_notes(problem: Problem, point: Point) -> list[Note]:
    """D and E in the conventional setting, where the fit ended in another."""
    notes = []
    for one in point.species:
        name = f"{one.name}.D"
        if len(one.spins) != 1 or name not in problem.parameters or one.spins[0].D == 0:
            continue
        spin = one.spins[0]
        if 0 <= spin.zfs_E / spin.D <= 1 / 3:
            continue
        D, E, axes = conventional(spin.D, spin.zfs_E)
        parameter = problem.parameters[name]
        shown = [f"{parameter.to_job(v):.6g} {parameter.unit}" for v in (D, E)]
        text = (
            f"With axes x, y, z renamed {', '.join(AXES[k] for k in axes)}, {one.name} has D = {shown[0]} and "
            f"E = {shown[1]} (0 <= E/D <= 1/3): the same tensor in the conventional setting."
        )
        notes.append(Note("other_setting", text))
    return notes


def _background_notes(view: View, point: Point) -> list[Note]:
    """Say where a smooth baseline could stand in for the lines themselves."""
    notes = []
    for trace, seen, signal in zip(point.traces, view.seen, point.signals, strict=True):
        share = taken(seen.basis, signal / seen.noise) if trace.smoothness is not None else 0.0
        if share > _TAKEN:
            text = (
                f"The smooth baseline of {trace.name} could take over {100 * share:.0f} % of the model's signal: "
                f"what is broader than {trace.smoothness:g} mT is not told from background. A longer one would tell."
            )
            notes.append(Note("baseline_takes_lines", text))
    return notes


def _modulation_notes(point: Point) -> list[Note]:
    narrowest = narrowest_width(point.species)
    return [
        Note(
            "over_modulation",
            f"The modulation of {trace.name}, {trace.modulation:g} mT, is more than a third of the narrowest line "
            f"width, {narrowest:.3g} mT: lines are broadened by it and narrow features may be lost.",
        )
        for trace in point.traces
        if trace.modulation > LARGEST_MODULATION * narrowest > 0
    ]


def _beyond_notes(problem: Problem, view: View, point: Point) -> list[Note]:
    """Look a quarter of the sweep beyond either end of what was measured."""
    notes = []
    for seen, trace in zip(view.seen, point.traces, strict=True):
        first, last = float(trace.field[0]), float(trace.field[-1])
        quarter = (last - first) / 4
        step = min((last - first) / (trace.field.size - 1), (narrowest_width(point.species) or quarter) / 3)
        count = int(min(max(quarter / step, 8), 4096))
        lowest = max(first - quarter, min(first, step))
        outside = [np.linspace(lowest, first, count)[:-1]] if lowest < first - step else []
        outside.append(np.linspace(last, last + quarter, count)[1:])
        beyond = np.concatenate(outside)
        stage = Stage(0.0, 1e-2)
        largest = 0.0
        fields = np.concatenate((beyond, seen.field))
        order = np.argsort(fields, kind="stable")
        signal = np.empty(fields.size)
        signal[order] = problem.signals.total(point.species, trace, point.sample, fields[order], stage)
        inside = float(np.abs(signal[beyond.size :]).max())
        largest = float(np.abs(signal[: beyond.size]).max())
        if inside > 0 and largest > _BEYOND * inside:
            where = float(beyond[int(np.argmax(np.abs(signal[: beyond.size])))])
            text = (
                f"The model has lines beyond the sweep of {trace.name}, the largest near {where:.4g} mT: "
                "they cannot be checked against the data."
            )
            notes.append(Note("lines_beyond_sweep", text))
    return notes
