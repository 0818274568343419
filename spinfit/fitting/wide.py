"""Starts that are far off: the trace is integrated before it is broadened.

A derivative has as much above as below its baseline: broadened, it fades, and lines that do not overlap tell
nothing of each other.  Its integral, the absorption, keeps its area and feels a line from afar.  So candidates are
drawn wide around the start, compared in that view on few points, the best of them followed down over narrower
broadenings, and compared again as the trace was measured.  The integral's own slow noise does no harm: it is only
asked where to begin.  Spectra that take long to simulate are sketched (`spinfit.sketch`) in these views.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterator, Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from spinfit.errors import InputError
from spinfit.fitting.data import Job, Trace
from spinfit.fitting.residuals import Problem, Progress, View, broadened_view
from spinfit.fitting.signals import Simulate
from spinfit.fitting.solve import Goal, descend
from spinfit.fitting.starts import (
    COARSE_TOLERANCE,
    NARROWING,
    WIDEST,
    amounts_of,
    broadenings,
    coarse_to_fine,
    draws,
    from_turning_points,
    shapes_of,
    span_of,
    tell,
)
from spinfit.sketch import sketch, sketchable, zero_field_span
from spinfit.spectrum import simulate

Array = NDArray[np.float64]

# Draws that are compared, for models of few and of many levels; how many are followed in the broadened integrals,
# and how many are handed on.
_DRAWN, _DRAWN_OF_MANY, _MANY_LEVELS = 256, 64, 6
_FOLLOWED, _KEPT = 12, 6
# How many are followed at a time where each is expensive.
_AT_A_TIME = 4
# Candidates whose chi-squared in a broadened view is this many times that of the best minimum there lead nowhere; of
# sketches, which have been followed farther.
_HOPELESS, _HOPELESS_SKETCH = 3.0, 1.25
# Tolerance of the sketches that are compared last.
_FINE = 3e-3
# Levels farther apart than this part of h nu at zero field may come within h nu of each other again, and take long.
_WIDE_APART = 0.4
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


def quick_engine(problem: Problem, start: Array) -> Simulate | None:
    """Return what sketches the spectra of a problem, None where simulations are as quick.

    Sketches take the place of the engine itself, never of another one that was given.
    """
    if problem.signals.simulate is not simulate or not problem.job.traces:
        return None
    species, sample, traces = problem.model(start)
    nu = min(trace.frequency for trace in traces)
    looping = any(sketchable(one, sample) and zero_field_span(one) > _WIDE_APART * nu for one in species)
    return sketch if looping else None


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
        quick = quick_engine(problem, start)
        self.sketched = quick is not None
        job: Job = replace(problem.job, traces=tuple(map(integrated, problem.job.traces)))
        self.summed = Problem(job, quick or problem.signals.simulate)
        self.plain = problem if quick is None else Problem(problem.job, quick)
        self.widths = broadenings(problem, start)
        self.held = shapes_of(problem.names)

    def _view(self, problem: Problem, broadening: float, tolerance: float = COARSE_TOLERANCE) -> View | None:
        view = broadened_view(problem.job.traces, problem.noises, broadening, tolerance)
        return view if view.points > view.linear + self.start.size else None

    def _followed(self, problem: Problem, free: Array, widths: Sequence[float], *, held: bool = True) -> Array:
        """Follow the minimum over some broadenings; shapes of lines are held or not."""
        for broadening in widths:
            view = self._view(problem, broadening)
            if view is not None:
                fixed = self.held if held and not self.held.all() else np.zeros_like(self.held)
                try:
                    found = descend(problem, view, free, goal=_GOAL, held=fixed, progress=self.progress)
                except InputError:  # the model has no meaning here, and may have further on
                    continue
                free = found.point.free
        return free

    def from_start(self) -> Array:
        """Where the broadened integrals lead from the start itself."""
        return self._followed(self.summed, self.start, self.widths[:3])

    def narrowed(self, free: Array) -> Array:
        """Follow the minimum from a broadened trace and model to nearly the real ones, as far as is worth it."""
        if not self.sketched:
            return coarse_to_fine(self.problem, free, progress=self.progress, widest=WIDEST / NARROWING)
        return self._followed(self.plain, free, self.widths[2:], held=False)

    def candidates(self, best: Array | None = None) -> Iterator[Array]:
        """Yield the best of many draws, each unlike the others, best first.

        Parameters
        ----------
        best : ndarray, shape (k,), optional
            A minimum that was found already; what is much worse in a broadened view is left out.
        """
        if not self.widths:
            return
        last = self.widths[min(2, len(self.widths) - 1)]
        count = _DRAWN_OF_MANY if self._levels() >= _MANY_LEVELS and not self.sketched else _DRAWN
        tried = [self.start, *draws(self.problem, self.start, count, wide=True)]
        tried += list(from_turning_points(self.problem, self.start))
        if not self.sketched:
            first = self._ranked(self.summed, tried, self.widths[min(1, len(self.widths) - 1)], _FOLLOWED)
            led = [self._followed(self.summed, free, self.widths[1:3]) for free in first]
            yield from self._ranked(self.plain, led, last, _KEPT, best=best)
            return
        yield from self._led(self._ranked(self.plain, tried, last, _FOLLOWED), last, best)

    def _led(self, first: Sequence[Array], last: float, best: Array | None) -> Iterator[Array]:
        """Yield where sketches lead from some candidates, unless other such ends, or a minimum, are better there.

        The way of many over sketches is cheaper than one descent over simulations.
        """
        ends = [] if best is None else [best]
        for k in range(0, len(first), _AT_A_TIME):
            new = []
            for free in first[k : k + _AT_A_TIME]:
                new.append(self._followed(self.plain, self._followed(self.summed, free, self.widths[1:2]), [last]))
            ends += new
            found = self._ranked(self.plain, ends, last, _KEPT, tolerance=_FINE, part=_HOPELESS_SKETCH)
            yield from (free for free in found if any(free is one for one in new))

    def around(self, best: Array) -> Iterator[Array]:
        """Yield candidates that differ from a minimum in two parameters, best first.

        A hyperfine pattern that is off by one line, or two tensors that have traded a feature, are such minima:
        one parameter alone does not lead out of them, and what the rest of the trace has fixed must stay.
        """
        moving = np.flatnonzero(~self.held & ~amounts_of(self.problem.names))
        pairs = list(itertools.combinations(map(int, moving), 2))
        if not pairs or not self.widths:
            return
        count = _PAIRED_OF_MANY if self._levels() >= _MANY_LEVELS and not self.sketched else _PAIRED
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
        last = self.widths[min(2, len(self.widths) - 1)]
        found = self._ranked(self.plain, tried, last, _KEPT)
        yield from self._led(found, last, best) if self.sketched else found

    def _levels(self) -> int:
        return max(int(2 * spin.S + 1) for one in self.problem.job.species for spin in one.spins)

    def _spans(self) -> Array:
        pairs = zip(self.problem.names, self.start, strict=True)
        return np.array([span_of(self.problem.parameters[name], value) for name, value in pairs])

    def _ranked(
        self,
        problem: Problem,
        tried: Sequence[Array],
        broadening: float,
        keep: int,
        *,
        best: Array | None = None,
        tolerance: float = COARSE_TOLERANCE,
        part: float = np.inf,
    ) -> list[Array]:
        """Return those with the least chi-squared in a broadened view, each unlike the others.

        What is `part` times as bad as the best of them, or hopeless beside a minimum that is known, is left out.
        """
        view = self._view(problem, broadening, tolerance)
        if view is None:
            return list(tried[:keep])
        most = np.inf if best is None else _HOPELESS * max(problem.evaluate(best, view).chi2, view.points)
        found = []
        for number, free in enumerate(tried):
            try:
                point = problem.evaluate(free, view)
            except InputError:  # the model has no meaning there
                continue
            tell(problem, point, self.progress)
            # Upside down is no way to fit a trace as long as there is another.
            if point.chi2 <= most:
                found.append((min(point.scales) <= 0, point.chi2, number, free))
        found.sort(key=lambda item: item[:3])
        spans = self._spans()
        kept: list[Array] = []
        for *_, free in (item for item in found if item[1] <= part * found[0][1]):
            if all(np.max(np.abs(free - other) / spans) > 1.0 for other in kept):
                kept.append(free)
            if len(kept) == keep:
                break
        return kept
