"""Starts that are far off: the trace is integrated before it is broadened.

A derivative has as much above as below its baseline: broadened, it fades, and lines that do not overlap tell
nothing of each other.  Its integral, the absorption, keeps its area and feels a line from afar.  So candidates are
drawn wide around the start, compared in that view on few points, the best of them followed down over narrower
broadenings, and compared again as the trace was measured.  The integral's own slow noise does no harm: it is only
asked where to begin.
"""

from __future__ import annotations

import itertools
from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from spinfit.errors import InputError
from spinfit.fitting.data import Job, Trace
from spinfit.fitting.residuals import Problem, Progress, View, broadened_view
from spinfit.fitting.solve import Goal, descend
from spinfit.fitting.starts import (
    COARSE_TOLERANCE,
    amounts_of,
    broadenings,
    draws,
    from_turning_points,
    shapes_of,
    span_of,
    tell,
)

Array = NDArray[np.float64]

# Draws that are compared, for models of few and of many levels; how many are followed in the broadened integrals,
# and how many are handed on.
_DRAWN, _DRAWN_OF_MANY, _MANY_LEVELS = 256, 64, 6
_FOLLOWED, _KEPT = 12, 6
# The same for each pair of parameters, around the start and around a minimum.
_PAIRED, _PAIRED_OF_MANY = 32, 8
_INTEGRATED = {"absorption": 0, "derivative": 1, "second derivative": 2}
_GOAL = Goal(gain=0.3, evaluations=15)


def integrated(trace: Trace) -> Trace:
    """A trace as absorption, with as many more orders of baseline as there were integrations."""
    steps = _INTEGRATED[trace.detect]
    field = trace.field
    signal = np.interp(field, field[trace.used], trace.signal[trace.used])
    under = trace.background
    for _ in range(steps):
        signal = _summed(field, signal)
        under = None if under is None else _summed(field, under)
    order = 3 if trace.smoothness is not None else -1 if trace.baseline is None else trace.baseline
    return replace(
        trace,
        signal=signal,
        background=under,
        detect="absorption",
        baseline=order + steps if order + steps >= 0 else None,
        smoothness=None,
        asymmetry=None,
    )


def _summed(field: Array, values: Array) -> Array:
    """Integral by trapezoids from the first field on."""
    return np.concatenate(([0.0], np.cumsum(np.diff(field) * (values[:-1] + values[1:]) / 2)))


class Wide:
    """Candidates around a start that may be far off.

    Parameters
    ----------
    problem : Problem
    start : ndarray, shape (k,)
        Internal units, within the limits.
    """

    def __init__(self, problem: Problem, start: Array, *, progress: Progress | None = None) -> None:
        self.problem, self.start, self.progress = problem, start, progress
        job: Job = replace(problem.job, traces=tuple(map(integrated, problem.job.traces)))
        self.summed = Problem(job, problem.signals.simulate)
        self.widths = broadenings(problem, start)
        self.held = shapes_of(problem.names)

    def _view(self, problem: Problem, broadening: float) -> View | None:
        view = broadened_view(problem.job.traces, problem.noises, broadening, COARSE_TOLERANCE)
        return view if view.points > view.linear + self.start.size else None

    def _followed(self, free: Array, widths: Sequence[float]) -> Array:
        """Follow the minimum of the broadened integrals over some broadenings."""
        for broadening in widths:
            view = self._view(self.summed, broadening)
            if view is not None:
                held = self.held if not self.held.all() else np.zeros_like(self.held)
                try:
                    found = descend(self.summed, view, free, goal=_GOAL, held=held, progress=self.progress)
                except InputError:  # the model has no meaning here, and may have further on
                    continue
                free = found.point.free
        return free

    def from_start(self) -> Array:
        """Where the broadened integrals lead from the start itself."""
        return self._followed(self.start, self.widths[:3])

    def candidates(self) -> list[Array]:
        """The best of many draws, each unlike the others, best first."""
        if not self.widths:
            return []
        count = _DRAWN_OF_MANY if self._levels() >= _MANY_LEVELS else _DRAWN
        tried = [self.start, *draws(self.problem, self.start, count, wide=True)]
        tried += list(from_turning_points(self.problem, self.start))
        first = self._ranked(self.summed, tried, self.widths[min(1, len(self.widths) - 1)], _FOLLOWED)
        led = [self._followed(free, self.widths[1:3]) for free in first]
        return self._ranked(self.problem, led, self.widths[min(2, len(self.widths) - 1)], _KEPT)

    def around(self, best: Array) -> list[Array]:
        """Candidates that differ from a minimum in two parameters, best first.

        A hyperfine pattern that is off by one line, or two tensors that have traded a feature, are such minima:
        one parameter alone does not lead out of them, and what the rest of the trace has fixed must stay.
        """
        moving = np.flatnonzero(~self.held & ~amounts_of(self.problem.names))
        pairs = list(itertools.combinations(map(int, moving), 2))
        if not pairs or not self.widths:
            return []
        count = _PAIRED_OF_MANY if self._levels() >= _MANY_LEVELS else _PAIRED
        tried = []
        for n, (i, j) in enumerate(pairs):
            # A parameter that has run away is to be found near where the start had it.
            drawn = (draws(self.problem, centre, count, wide=True, seed=n) for centre in (self.start, best))
            for row in np.concatenate(list(drawn)):
                free = best.copy()
                free[[i, j]] = row[[i, j]]
                tried.append(free)
        spans = self._spans()
        tried = [free for free in tried if np.max(np.abs(free - best) / spans) > 1.0]
        return self._ranked(self.problem, tried, self.widths[min(2, len(self.widths) - 1)], _KEPT)

    def _levels(self) -> int:
        return max(int(2 * spin.S + 1) for one in self.problem.job.species for spin in one.spins)

    def _spans(self) -> Array:
        pairs = zip(self.problem.names, self.start, strict=True)
        return np.array([span_of(self.problem.parameters[name], value) for name, value in pairs])

    def _ranked(self, problem: Problem, tried: Sequence[Array], broadening: float, keep: int) -> list[Array]:
        view = self._view(problem, broadening)
        if view is None:
            return list(tried[:keep])
        found = []
        for number, free in enumerate(tried):
            try:
                point = problem.evaluate(free, view)
            except InputError:  # the model has no meaning there
                continue
            tell(problem, point, self.progress)
            # Upside down is no way to fit a trace as long as there is another.
            found.append((min(point.scales) <= 0, point.chi2, number, free))
        found.sort(key=lambda item: item[:3])
        spans = self._spans()
        kept: list[Array] = []
        for *_, free in found:
            if all(np.max(np.abs(free - other) / spans) > 1.0 for other in kept):
                kept.append(free)
            if len(kept) == keep:
                break
        return kept
