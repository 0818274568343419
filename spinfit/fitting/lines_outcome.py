"""A fit of line positions from the job to its outcome."""

from __future__ import annotations

import math
import time
from collections.abc import Callable, Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from spinfit.errors import InputError
from spinfit.fitting.assignment import at_settings, calculated, settings
from spinfit.fitting.axes import axes_of, open_components
from spinfit.fitting.data import Job, sharing_axis, sharing_frequency
from spinfit.fitting.line_search import LineSearch
from spinfit.fitting.outcome import Axis, Note, Outcome, PositionTable, Quality
from spinfit.fitting.positions import OUTLIER, LineProblem, State, kept_lines, standard_scatter
from spinfit.fitting.residuals import Problem, Progress
from spinfit.fitting.signals import Simulate, true_field
from spinfit.fitting.summary import provenance_of
from spinfit.fitting.uncertainty import Covariances, budget_of, fractions_of, reported_values
from spinfit.species import Species

Array = NDArray[np.float64]
Kept = NDArray[np.bool_]

# Singular values of the Jacobian with columns of unit length: below this only combinations are known.
_BLIND = 1e-5
# A parameter that moves no line by more than its scatter over this many typical steps is not seen.
_UNSEEN_STEPS = 100.0
# Standard deviations by which chi-squared may exceed its expectation before uncertainties are widened.
_EXCESS = 2.0
_SIGN_CHI2 = 4.0
# Part of a quantity's slope that may lie along directions the lines do not see.
_LEAK = 1e-3
_DRAWN_ANGLES = 181
_DRAWN_WEIGHT = 1e-3


def fit_lines(job: Job, *, progress: Progress | None, simulate: Simulate, wide: bool = True) -> Outcome:
    """Fit the model to tables of line positions.

    Parameters
    ----------
    wide : bool
        Whether starts around the given one are tried too.

    Raises
    ------
    InputError
        When traces stand beside the tables, or the model has no lines.
    """
    begun = time.perf_counter()
    if job.traces:
        raise InputError(
            "the job has traces and tables of lines", "fit them in two jobs", place="lines", file=job.path or None
        )
    problem = Problem(job, simulate)
    lines = LineProblem(problem, progress)
    try:
        state, common, converged = LineSearch(lines).run(wide=wide)
        finished = True
        state, kept, scatter, converged = _polished(lines, state, common, converged)
    except KeyboardInterrupt:
        finished = converged = False
        scatter = lines.scatter(1.0)
        state = lines.evaluate(problem.start, scatter)
        kept = np.ones(scatter.size, dtype=bool)
    at_limit = (state.free <= problem.lower) | (state.free >= problem.upper)
    spread, blind = (None, ()) if not finished else _spread(lines, state, kept, scatter, at_limit)
    quality = _quality(lines, state, kept, scatter, finished=finished, converged=converged)
    notes = [Note(code, f"{t.name}: {text}") for t in job.lines for code, text in t.notes]
    axes: tuple[Axis, ...] = ()
    if finished:
        notes += _notes(lines, state, kept, scatter, at_limit, blind, quality)
        jacobian, propagate = _propagation(lines, state, kept, scatter, at_limit)
        axes = axes_of(problem, state.free, propagate)
        notes += open_components(problem, state.free, jacobian, propagate)
    else:
        notes.append(Note("unfinished", "The fit was stopped; the values are those of the start."))
    known = np.zeros(len(problem.names), dtype=bool) if spread is None else spread.known
    provenance = provenance_of(problem) | {
        "input": {table.name: {"file": table.file, "sha256": table.sha256} for table in job.lines}
    }
    return Outcome(
        name=job.name,
        parameters=reported_values(problem, state.free, spread, at_limit),
        quality=quality,
        correlation_names=tuple(n for n, ok in zip(problem.names, known, strict=True) if ok),
        correlation_matrix=np.zeros((0, 0)) if spread is None else spread.correlation,
        warnings=tuple(notes),
        curves=(),
        fractions=fractions_of([(one.name, one.amount) for one in state.species], problem, state.free, spread),
        provenance=provenance,
        engine={"evaluations": lines.evaluations},
        budget={} if spread is None else budget_of(problem, state.free, spread),
        positions=_tables(lines, state, kept, scatter),
        axes=axes,
        message="" if converged else "the descent did not converge",
        seconds=time.perf_counter() - begun,
    )


def _polished(lines: LineProblem, state: State, common: float, converged: bool) -> tuple[State, Kept, Array, bool]:
    """Leave outliers out and finish by plain least squares, until the same lines are left out twice."""
    varied = state.free.size
    scatter = lines.scatter(common)
    kept = kept_lines(state, scatter)
    for _ in range(6):
        if kept.sum() <= varied:
            raise InputError(
                f"{int(kept.sum())} of {kept.size} lines agree with the model, for {varied} parameters",
                "start closer, or vary fewer",
                place="lines",
            )
        state, converged = lines.descend(state.free, scatter, kept=kept, loss="linear")
        scatter = lines.scatter(max(standard_scatter(state.residual, kept, varied), 1e-6))
        now = kept_lines(state, scatter)
        if np.array_equal(now, kept):
            break
        kept = now
    return state, kept, scatter, converged


def _excess(lines: LineProblem, state: State, kept: Kept, scatter: Array) -> float:
    """Chi-squared per degree of freedom with the uncertainties as given or found."""
    freedom = max(int(kept.sum()) - state.free.size, 1)
    return float(np.sum((state.residual / scatter)[kept] ** 2)) / freedom


def _spread(
    lines: LineProblem, state: State, kept: Kept, scatter: Array, at_limit: Kept
) -> tuple[Covariances, tuple[tuple[str, ...], ...]]:
    """Covariances from the lines' scatter, the field axes and the frequencies."""
    problem = lines.problem
    count = state.free.size
    jacobian = (lines.jacobian(state) / scatter[:, None])[kept]
    norms = np.linalg.norm(jacobian, axis=0)
    unseen = norms * lines.steps * _UNSEEN_STEPS < 1.0
    known = ~unseen & ~at_limit
    blind = [(problem.names[k],) for k in np.flatnonzero(unseen & ~at_limit)]
    if known.any():
        _, singular, right = np.linalg.svd(jacobian[:, known] / norms[known], full_matrices=False)
        places = np.flatnonzero(known)
        for row in right[singular < _BLIND]:
            members = places[np.abs(row) > 0.1]
            blind.append(tuple(problem.names[k] for k in members))
            known[members] = False
    inner = jacobian[:, known]
    response = np.linalg.pinv(inner) if inner.shape[1] else np.zeros((0, inner.shape[0]))
    white = np.zeros((count, count))
    white[np.ix_(known, known)] = response @ response.T
    freedom = max(int(kept.sum()) - count, 1)
    excess = _excess(lines, state, kept, scatter)
    factor = excess if excess > 1 + _EXCESS * math.sqrt(2 / freedom) else 1.0
    rows, sources = [], []
    for source, shift in _axis_shifts(lines, state):
        row = np.zeros(count)
        row[known] = -response @ (shift / scatter)[kept]
        rows.append(row)
        sources.append(source)
    moved = np.array(rows).reshape(len(rows), count)
    spread = Covariances(known, factor * white, moved.T @ moved, white, moved, tuple(sources), tuple(blind), ())
    return spread, tuple(blind)


def _axis_shifts(lines: LineProblem, state: State) -> list[tuple[str, Array]]:
    """What each shared standard shift of an axis, a frequency or an angle does to the residuals, mT."""
    out = []
    whole = np.cumsum([0] + [table.field.size for table in state.tables])
    for source, change, key, sharing in (
        ("field axis", lines.field_change(state), "field_uncertainty", sharing_axis),
        ("frequency", lines.frequency_change(state), "frequency_uncertainty", sharing_frequency),
    ):
        for members in sharing(state.tables):
            shift = np.zeros(state.residual.size)
            for n, table in enumerate(state.tables):
                if n in members:
                    shift[whole[n] : whole[n + 1]] = getattr(table, key)
            if shift.any():
                out.append((source, change * shift))
    for n, table in enumerate(state.tables):
        if table.angle is None or table.angle_uncertainty == 0:
            continue
        change = lines.angle_change(state, n) * table.angle_uncertainty
        # each angle was read once, whatever lines there are
        for angle in np.unique(table.angle):
            shift = np.zeros(state.residual.size)
            shift[whole[n] : whole[n + 1]] = np.where(table.angle == angle, change, 0.0)
            out.append(("angle", np.where(state.free_lines, 0.0, shift)))
    return out


def _propagation(
    lines: LineProblem, state: State, kept: Kept, scatter: Array, at_limit: Kept
) -> tuple[Array, Callable[[Sequence[Array]], list[tuple[float | None, float | None]]]]:
    """Return the weighted Jacobian with limits held, and how to carry it to what follows from the parameters."""
    jacobian = np.where(at_limit, 0.0, lines.jacobian(state) / scatter[:, None])[kept]
    left, singular, right = np.linalg.svd(jacobian * lines.steps, full_matrices=False)
    seen = singular > _BLIND * singular.max(initial=0.0)
    left, singular, right = left[:, seen], singular[seen], right[seen]
    freedom = max(int(kept.sum()) - state.free.size, 1)
    excess = _excess(lines, state, kept, scatter)
    factor = excess if excess > 1 + _EXCESS * math.sqrt(2 / freedom) else 1.0
    shifts = [(shift / scatter)[kept] for _, shift in _axis_shifts(lines, state)]

    def propagate(slopes: Sequence[Array]) -> list[tuple[float | None, float | None]]:
        out: list[tuple[float | None, float | None]] = []
        for slope in slopes:
            scaled = slope * lines.steps
            inside = right @ scaled
            outside = np.linalg.norm(scaled - right.T @ inside)
            if outside > _LEAK * np.linalg.norm(scaled):
                out.append((None, None))
                continue
            response = left @ (inside / singular)
            field = math.sqrt(sum(float(response @ shift) ** 2 for shift in shifts))
            out.append((math.sqrt(factor) * float(np.linalg.norm(response)), field))
        return out

    return jacobian, propagate


def _quality(
    lines: LineProblem, state: State, kept: Kept, scatter: Array, *, finished: bool, converged: bool
) -> Quality:
    points, free = int(kept.sum()), state.free.size
    chi2 = max(float(np.sum((state.residual / scatter)[kept] ** 2)), 1e-20)
    # As if the scatter were unknown, as for traces: what counts is how the sum of squares changes.
    weighted = np.where(np.isnan(lines.given), 1.0, scatter)
    likelihood = points * math.log(max(float(np.sum((state.residual / weighted)[kept] ** 2)), 1e-20) / points)
    k = free + 1
    return Quality(
        converged=converged,
        finished=finished,
        chi2_reduced=chi2 / max(points - free, 1),
        noise=standard_scatter(state.residual, kept, free),
        points=points,
        free_parameters=free,
        aicc=likelihood + 2 * k + 2 * k * (k + 1) / max(points - k - 1, 1),
        bic=likelihood + k * math.log(points),
    )


def _listed(names: tuple[str, ...] | list[str]) -> str:
    return names[0] if len(names) == 1 else ", ".join(names[:-1]) + " and " + names[-1]


def _notes(
    lines: LineProblem,
    state: State,
    kept: Kept,
    scatter: Array,
    at_limit: Kept,
    blind: tuple[tuple[str, ...], ...],
    quality: Quality,
) -> list[Note]:
    problem = lines.problem
    notes = []
    if not quality.converged:
        notes.append(Note("not_converged", "The fit has not converged."))
    for name in np.array(problem.names)[at_limit]:
        notes.append(Note("at_limit", f"{name} ended at its limit; the others' uncertainties hold for it fixed there."))
    for names in blind:
        what = f"The lines do not determine {names[0]}: it moves next to none of them."
        if len(names) > 1:
            what = f"The lines determine only combinations of {_listed(names)}, not each by itself."
        notes.append(Note("undetermined", what))
    notes += _outlier_notes(state, kept, scatter)
    if np.isnan(lines.given).any():
        text = (
            f"The uncertainty of the fields, {quality.noise:.3g} mT, is their scatter about the fit: "
            "it cannot tell whether the model is right. Give a column uncertainty_mT to test that."
        )
        notes.append(Note("scatter_estimated", text))
    elif quality.chi2_reduced > 1 + _EXCESS * math.sqrt(2 / max(quality.points - quality.free_parameters, 1)):
        times = math.sqrt(quality.chi2_reduced)
        text = f"The lines scatter {times:.3g} times as much as stated; uncertainties were widened."
        notes.append(Note("large_scatter", text))
    notes += _sign_notes(lines, state, kept, scatter)
    return notes


def _outlier_notes(state: State, kept: Kept, scatter: Array) -> list[Note]:
    notes, at = [], 0
    for table in state.tables:
        rows = slice(at, at + table.field.size)
        at += table.field.size
        out = np.flatnonzero(~kept[rows])
        if out.size:
            shown = ", ".join(f"{_setting(table, k)} {table.field[k]:.6g} mT" for k in out[:8])
            more = f" and {out.size - 8} more" if out.size > 8 else ""
            text = (
                f"{out.size} of {table.field.size} lines of {table.name} fit nothing within {OUTLIER:g} times the "
                f"scatter and were left out: {shown}{more}."
            )
            notes.append(Note("outliers", text))
    return notes


def _setting(table, row: int) -> str:
    given = table.angle[row : row + 1] if table.angle is not None else table.direction[row]
    return "at " + ", ".join(f"{math.degrees(v):.4g}" for v in given) + " deg"


def _sign_notes(lines: LineProblem, state: State, kept: Kept, scatter: Array) -> list[Note]:
    """Try the other sign of D with E: level labels or nothing else tell it from positions."""
    notes = []
    for index, one in enumerate(state.species):
        names = [n for n in lines.problem.names if n in (f"{one.name}.D", f"{one.name}.E")]
        if not names:
            continue
        species = (*state.species[:index], _mirrored(one), *state.species[index + 1 :])
        residual = lines.residual_of(species, state, scatter)
        rise = float(np.sum((residual / scatter)[kept] ** 2) - np.sum((state.residual / scatter)[kept] ** 2))
        if rise < _SIGN_CHI2:
            text = (
                f"The sign of {_listed(names)} is not determined by the fields of lines: the other sign fits as well."
            )
            notes.append(Note("sign_of_D", text))
    return notes


def _mirrored(one: Species) -> Species:
    spins = tuple(
        replace(spin, D=-spin.D, E=-spin.E, stevens=tuple((kq, -b) for kq, b in spin.stevens)) for spin in one.spins
    )
    return replace(one, spins=spins)


def _tables(lines: LineProblem, state: State, kept: Kept, scatter: Array) -> tuple[PositionTable, ...]:
    out = []
    for table, block, which in zip(state.tables, lines.blocks, state.lines, strict=True):
        partner = ~state.free_lines[block]
        measured = true_field(table, table.field)
        given = table.direction if table.angle is None else table.angle[:, None]
        fitted = np.where(partner, which.field, np.nan)
        out.append(
            PositionTable(
                name=table.name,
                frequency=table.frequency,
                setting=_as_read(lines, table, given),
                measured=measured,
                fitted=fitted,
                residual=measured - fitted,
                uncertainty=scatter[block],
                lower=np.where(partner, which.lower + 1, 0),
                upper=np.where(partner, which.upper + 1, 0),
                used=kept[block],
                drawn=_drawn(state, table, measured),
            )
        )
    return tuple(out)


def _as_read(lines: LineProblem, table, given: Array) -> Array:
    """Settings as in the file, without corrections of a table's own zero of angle."""
    read = next(t for t in lines.problem.job.lines if t.name == table.name)
    return given if read.angle is None else read.angle[:, None]


def _drawn(state: State, table, measured: Array) -> Array:
    """Calculated lines at many angles between the first and the last one measured."""
    if table.angle is None:
        return np.zeros((0, 3))
    grid = np.linspace(table.angle.min(), table.angle.max(), _DRAWN_ANGLES)[:, None]
    fine = at_settings(table, grid)
    found = calculated(state.species, state.sample, fine, highest=1.1 * float(measured.max()))
    found = found.only(found.weight > _DRAWN_WEIGHT)
    distinct, _ = settings(fine)
    return np.stack([distinct[found.setting, 0], found.field, found.weight], axis=1)
