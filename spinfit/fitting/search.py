"""The best minimum that can be reached from a start: which ways are taken, in which order, and when to stop."""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from spinfit.errors import InputError
from spinfit.fitting.noise import residual_noise
from spinfit.fitting.other_signs import best_signs
from spinfit.fitting.residuals import Point, Problem, Progress, View
from spinfit.fitting.signals import narrowest_width
from spinfit.fitting.smoothing import running_sum
from spinfit.fitting.solve import Descent, Goal, descend
from spinfit.fitting.starts import COARSE_TOLERANCE, candidates, coarse_to_fine, explained, neighbours
from spinfit.fitting.wide import Wide

Array = NDArray[np.float64]

# Two descents whose chi-squared differ by less than this part ended at the same or an equivalent minimum.
_SAME = 1e-3
# A descent is good below this chi-squared per degree of freedom, which the estimate of the noise leaves
# uncertain by some per cent, or when no more than this part of the trace's sum of squares is unexplained.
_AT_NOISE = 1.2
_LITTLE = 0.05
# Standard deviations from which something in the residuals is no chance: of one place, 1 in 10^7; of the sum of
# squares over a stretch of the trace, whose tail is longer and which has many chances, found rare by trial.
_STANDS_OUT = 5.3
_STRETCH_STANDS_OUT = 6.5
_MEDIAN_OF_NORMAL = 0.6745
_MOST_MOVES = 4
# Candidates that must end again at the best minimum before the search gives up on a better one.
_ENOUGH = 2
# A minimum that leaves more than this part of the trace is far from the right one; less than the other, beside it
# if it is not the right one.
_FAR, _NEAR = 0.15, 0.01
# Less than this part is left by a shape that is not quite the lines', not by a line in a wrong place.
_MISFIT = 0.003
# A width that has shrunk to this part of the start's is no line's.
_RUN_AWAY = 0.05
# Engine error, in units of the noise, that a search through expensive spectra allows itself.
_SEARCH_ERROR = 0.3
_SEARCH_GAIN, _SEARCH_EVALUATIONS = 1.0, 15
# Chi-squared per point of a misfit that no weak line in a wrong place makes.
_SYSTEMATIC = 3.0


class Search:
    """The best minimum that can be reached from a start.

    A start that already explains half of the trace goes straight down.  Otherwise, or when that
    ends short of the noise, the way over integrated and broadened traces is taken, then that over broadened
    ones, then scans for other basins, then candidates, drawn near the start and drawn wide, until one of
    them has ended at the noise or at the best minimum again.

    Attributes
    ----------
    best : Descent or None
        Best so far; there when the search is stopped from outside.
    """

    def __init__(self, problem: Problem, view: View, *, goal: Goal, progress: Progress | None = None) -> None:
        self.problem, self.view, self.goal, self.progress = problem, view, goal, progress
        self.best: Descent | None = None
        self._ends = 0
        self._scanned: Descent | None = None
        self._turned: Descent | None = None

    def run(self, start: Array, *, automatic: bool = False) -> Descent:
        """Search from a start; with `automatic` the start counts as one candidate among many.

        Then signs and the names of a tensor's axes are not taken from the start either.
        """
        start = np.clip(start, self.problem.lower, self.problem.upper)
        self._search(start, automatic)
        if automatic:
            self._turn_signs()
        return self._found()

    def _search(self, start: Array, automatic: bool) -> None:
        problem = self.problem
        if not automatic and explained(problem.evaluate(start, self.view), self.view) > 0.5:
            self._follow(start)
            if self._good():
                return
        wide = Wide(problem, start, progress=self.progress)
        if wide.sketched:
            self._loosen()
        self._follow_all(wide, [wide.from_start()])
        if not self._good() and not wide.sketched:
            self._follow(coarse_to_fine(problem, start, progress=self.progress))
        if not self._good() and not wide.sketched:
            self._leave_for_better_basins()
        if automatic and not self._good():
            self._turn_signs()
        if self._good() or (not automatic and self._found().converged and self._left() < _MISFIT):
            return

        def drawn_wide() -> Iterable[Array]:
            return wide.candidates(self._found().point.free)

        def in_pairs() -> Iterable[Array]:
            return wide.around(self._found().point.free)

        def drawn_near() -> Iterable[Array]:
            return candidates(wide.plain, start, wide=automatic, progress=self.progress)

        left = self._left()
        if wide.sketched:
            ways = [drawn_wide, in_pairs]
        elif automatic or left > _FAR:
            ways = [drawn_wide, in_pairs, drawn_near]
        else:
            ways = [in_pairs, drawn_near, drawn_wide]
            # A trace with little noise that is explained but for a misfit: its lines are in their places.
            if left < _NEAR and self._found().point.chi2 > _SYSTEMATIC * self.view.points:
                ways.pop()
        for way in ways:
            if not self._good():
                self._ends = 0  # ways from one start that end together prove little
                self._follow_all(wide, way())

    def _turn_signs(self) -> None:
        """Try other signs and axes of the best minimum, once of each."""
        if self._found() is not self._turned:
            goal, progress = self.goal, self.progress
            self.best = self._turned = best_signs(self.problem, self.view, self._found(), goal=goal, progress=progress)

    def _loosen(self) -> None:
        """Search where spectra are expensive no more precisely than the noise is worth."""
        self.goal = replace(self.goal, gain=max(self.goal.gain, _SEARCH_GAIN), evaluations=_SEARCH_EVALUATIONS)
        tolerance = min(self.problem.tolerance(_SEARCH_ERROR), COARSE_TOLERANCE)
        if tolerance > self.view.stage.tolerance:
            self.view = replace(self.view, stage=replace(self.view.stage, tolerance=tolerance))
            if self.best is not None:
                self.best = replace(self.best, point=self.problem.evaluate(self.best.point.free, self.view))

    def _found(self) -> Descent:
        assert self.best is not None
        return self.best

    def _left(self) -> float:
        """Part of the traces, beyond their noise, that the best minimum leaves."""
        total = sum(float(seen.rest @ seen.rest) for seen in self.view.seen)
        points = self.view.points
        return max(self._found().point.chi2 - points, 0.0) / max(total - points, 1e-300)

    def _follow_all(self, wide: Wide, starts: Iterable[Array]) -> None:
        """Go down from candidates until one ends where nothing is left to look for, or several at the best."""
        for free in starts:
            try:
                self._follow(wide.narrowed(free))
            except InputError:  # the way led to where the model has no meaning, such as a width of 0
                continue
            if not self._good() and not self._agreed and not wide.sketched:
                self._leave_for_better_basins()
            if self._good() or self._agreed:
                break

    def _follow(self, free: Array) -> None:
        descent = descend(self.problem, self.view, free, goal=self.goal, progress=self.progress)
        if self.best is None:
            self.best = descent
            return
        ratio = descent.point.chi2 / max(self.best.point.chi2, 1e-300)
        if abs(ratio - 1) < _SAME:
            # The same minimum, or one with its axes named otherwise: the first is named as the start was.
            self._ends += 1
            if descent.converged and not self.best.converged:
                self.best = descent
        elif ratio < 1:
            self._ends = 0
            self.best = descent

    @property
    def _agreed(self) -> bool:
        """Whether candidates drawn apart have ended at the best minimum often enough."""
        return self._ends >= _ENOUGH

    def _leave_for_better_basins(self) -> None:
        """Try what a scan of single parameters promises, as long as it keeps its promise.

        Not where a width has run away to nothing, on a line that is not there: such lines cost most to simulate.
        """
        least = _RUN_AWAY * narrowest_width(self.problem.job.species)
        if self.best is not None and narrowest_width(self.best.point.species) < least:
            return
        for _ in range(_MOST_MOVES):
            if self.best is None or self.best is self._scanned:
                return
            self._scanned = self.best
            before = self.best.point.chi2
            for free in neighbours(self.problem, self.view, self.best, progress=self.progress):
                self._follow(free)
                if self.best.point.chi2 < before * (1 - _SAME):
                    break
            else:
                return

    def _good(self) -> bool:
        return _good(self.problem, self.best, self.view)


def _good(problem: Problem, descent: Descent | None, view: View) -> bool:
    """Whether a descent ended where no other minimum need be looked for, its scale the right way up.

    That is when what is left is at the noise, or little of the trace (noise that is correlated is
    larger than neighbouring points show), and has no features of lines.
    """
    if descent is None or not descent.converged or min(descent.point.scales) <= 0:
        return False
    freedom = max(view.points - view.linear - descent.point.free.size, 1)
    total = sum(float(seen.rest @ seen.rest) for seen in view.seen)
    if descent.point.chi2 > max(_AT_NOISE * freedom, freedom + _LITTLE * (total - freedom)):
        return False
    return _featureless(problem, descent.point, view)


def _featureless(problem: Problem, point: Point, view: View) -> bool:
    """Whether the residuals look like noise that is correlated, rather than like a line in a wrong place.

    A missed line makes the residuals large where the model's lines are, or, averaged over about a line
    width, larger in some place than the rest of the trace lets expect of noise, white or not.
    """
    at = 0
    for trace, seen, basis in zip(point.traces, view.seen, problem.fitted_basis(point, view), strict=True):
        residual = point.residual[at : at + seen.field.size]
        at += seen.field.size
        if residual_noise(residual, basis).uneven > _STANDS_OUT:
            return False
        spacing = float(np.median(np.diff(seen.field))) * trace.field_scale
        width = narrowest_width(point.species) / spacing
        for points in {int(np.clip(width * factor, 3, residual.size // 8 + 1)) for factor in (1, 2, 4)}:
            averaged = running_sum(residual, points) / points
            usual = float(np.median(np.abs(averaged))) / _MEDIAN_OF_NORMAL
            if float(np.abs(averaged).max()) > _STANDS_OUT * usual:
                return False
        if _stretch(residual, width) > _STRETCH_STANDS_OUT:
            return False
    return True


def _stretch(residual: Array, width: float) -> float:
    """How far the sum of squares of the worst stretch stands above that of the others, in standard deviations.

    Weak lines that are all a little off (a hyperfine pattern's) show in no single place.
    """
    worst = 0.0
    squares = residual**2
    for points in {int(np.clip(width * factor, 8, residual.size // 6 + 1)) for factor in (4, 12, 36)}:
        sums = running_sum(squares, points)
        # A sum of squares of correlated noise varies more than one of white noise; the quartiles tell by how much.
        low, usual = np.quantile(sums, (0.25, 0.5))
        deviation = max(float(usual - low) / _MEDIAN_OF_NORMAL, float(usual) * math.sqrt(2 / points))
        worst = max(worst, (float(sums.max()) - float(usual)) / max(deviation, 1e-300))
    return worst
