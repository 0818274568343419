"""The fit: from a job to an outcome."""

from __future__ import annotations

import time
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spinfit.errors import InputError
from spinfit.fitting.crystal_fields import FieldResponse, derived_values, field_rank, responses_of, sharpened
from spinfit.fitting.data import Job
from spinfit.fitting.lines_outcome import fit_lines
from spinfit.fitting.outcome import Note, Outcome
from spinfit.fitting.residuals import Problem, Progress, View, full_view
from spinfit.fitting.robust import forgiving, is_robust, robust_notes, settle
from spinfit.fitting.search import Search
from spinfit.fitting.signals import Simulate
from spinfit.fitting.signs import named_as_started, restored
from spinfit.fitting.solve import Descent, Goal, Interrupted, descend
from spinfit.fitting.summary import outcome_of
from spinfit.fitting.uncertainty import spread_of
from spinfit.fitting.warn import check_before, check_lines, notes_after
from spinfit.spectrum import simulate as _engine

Array = NDArray[np.float64]

# The engine's error, relative to the largest signal, is kept below this part of the noise relative to
# the same: a line is drawn by about a hundred points, so that it then stays below a fifth of what the
# noise leaves open.  Never coarser than the job's tolerance, nor finer than a tenth of it.
_ERROR_TO_NOISE = 0.02
_FINEST = 0.1
# Until then chi-squared need not be known better than this times its value per point.
_ROUGH_GAIN = 0.3


def fit(job: Job, *, progress: Progress | None = None, simulate: Simulate = _engine) -> Outcome:
    """Fit a model to its traces.

    Parameters
    ----------
    job : Job
    progress : callable, optional
        Called after every evaluation with its number, the best chi-squared so far and the best
        values by name in the units of the job; best in the stage under way, since chi-squared of a
        broadened trace is another quantity.
    simulate : callable, optional
        The engine, as `spinfit.spectrum.simulate`.

    Returns
    -------
    Outcome
        After Ctrl-C the best so far, with ``quality.finished`` False.

    Raises
    ------
    InputError
        When the job cannot be fitted: no traces, too few points, a species without a line in the
        window, limits that exclude the start, names the model does not have.
    """
    begun = time.perf_counter()
    if job.lines:
        try:
            return fit_lines(job, progress=progress, simulate=simulate, wide=job.start != "near")
        except InputError as error:
            raise error.at(file=job.path or None) from None
    if not job.traces:
        raise InputError("the job has no trace", "add a [[trace]] table", file=job.path or None)
    try:
        problem = Problem(job, simulate)
        rough = full_view(job.traces, problem.noises, job.tolerance)
        check_before(problem, rough)
        descent, view, finished = _search(problem, rough, progress)
    except InputError as error:
        raise error.at(file=job.path or None) from None
    return _conclude(problem, view, descent, finished=finished, begun=begun)


def engine_tolerance(problem: Problem) -> float:
    """The tolerance that the noise of the traces allows, within a decade of the job's."""
    allowed = min(problem.tolerance(_ERROR_TO_NOISE), problem.job.tolerance)
    return max(allowed, _FINEST * problem.job.tolerance)


def _search(problem: Problem, rough: View, progress: Progress | None) -> tuple[Descent, View, bool]:
    """Search at the job's tolerance, then finish at the one that the noise calls for.

    Returns
    -------
    descent : Descent
    view : View
        In which the descent ended.
    finished : bool
        False when it was stopped.
    """
    search = Search(problem, rough, goal=Goal(_ROUGH_GAIN, 100 + 20 * len(problem.names)), progress=progress)
    automatic = problem.job.start == "auto"
    try:
        if not automatic:
            check_lines(problem, problem.evaluate(problem.start, rough), rough)
            if is_robust(problem):
                search.view = forgiving(problem, rough, search.goal, progress)
        if problem.job.start == "near":
            found = search.best = descend(problem, search.view, problem.start, goal=search.goal, progress=progress)
        else:
            found = search.run(problem.start, automatic=automatic)
        view = full_view(problem.job.traces, problem.noises, engine_tolerance(problem))
        fine = descend(problem, view, found.point.free, goal=Goal(central=True), progress=progress)
        if not automatic:
            fine = named_as_started(problem, view, restored(problem, view, fine, progress), progress)
        if is_robust(problem):
            fine, view = settle(problem, view, fine, goal=Goal(), progress=progress)
        return fine, view, True
    except Interrupted as stop:
        return _best_so_far(problem, rough, search.best, None if stop.point is None else stop.point.free), rough, False
    except KeyboardInterrupt:
        return _best_so_far(problem, rough, search.best, None), rough, False


def _best_so_far(problem: Problem, view: View, best: Descent | None, free: Array | None) -> Descent:
    """Whichever is better: the best finished descent, the broken-off one, or the start."""
    tried = [problem.evaluate(f, view) for f in (problem.start, free) if f is not None]
    if best is not None:
        tried.append(best.point)
    point = min(tried, key=lambda p: p.chi2)
    return Descent(point, None, False, "stopped before it was finished; these are the best values so far")


def _conclude(problem: Problem, view: View, descent: Descent, *, finished: bool, begun: float) -> Outcome:
    """Uncertainties, notes and everything else at the end of a search."""
    at_limit = limits_reached(problem, descent.point.free)
    spread = None
    field_notes: list[Note] = []
    responses = _responses(problem, descent)
    if finished and problem.names:
        # A descent that converged computed its last Jacobian a few hundredths of an uncertainty away.
        jacobian = descent.jacobian if descent.converged else None
        if jacobian is None:
            jacobian = problem.jacobian(descent.point, view, central=True)
        jacobian, pure = sharpened(problem, view, descent.point, jacobian, responses)
        descent = replace(descent, jacobian=jacobian)
        if np.all(np.isfinite(jacobian)):
            chi2 = descent.point.chi2 / max(view.points - view.linear - len(problem.names), 1)
            left_open, field_notes = field_rank(problem, jacobian, pure, at_limit, responses, chi2)
            spread = spread_of(problem, view, descent.point, jacobian, at_limit, exact=pure, left_open=left_open)
    notes = [Note(code, f"{trace.name}: {text}") for trace in problem.job.traces for code, text in trace.notes]
    if not finished:
        notes.append(Note("unfinished", "The fit was stopped; the values are the best so far and have no uncertainty."))
        descent = replace(descent, converged=False)
    notes += notes_after(problem, view, descent, spread, at_limit)
    notes += robust_notes(problem, view)
    notes += field_notes
    notes += [_engine_note(warning) for warning in problem.signals.warnings]
    return outcome_of(
        problem,
        view,
        descent,
        spread,
        at_limit,
        notes,
        finished=finished,
        seconds=time.perf_counter() - begun,
        derived=derived_values(problem, view, descent.point, spread, descent.jacobian, at_limit, responses),
    )


def _responses(problem: Problem, descent: Descent) -> list[FieldResponse]:
    """Derivatives of the crystal fields' models; none where a ground state is about to change its kind."""
    try:
        return responses_of(problem, descent.point)
    except InputError:
        return []


def limits_reached(problem: Problem, free: Array) -> NDArray[np.bool_]:
    """Which parameters ended on a limit."""
    return (free <= problem.lower) | (free >= problem.upper)


def _engine_note(warning: Any) -> Note:
    """Carry a warning of the engine over, whether it has a code or is a sentence only."""
    if isinstance(warning, tuple) and len(warning) == 2:
        return Note(str(warning[0]), str(warning[1]))
    return Note("engine", str(warning))
