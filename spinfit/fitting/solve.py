"""One least-squares descent: lmfit drives, and stops when nothing is left to gain.

The trust-region reflective algorithm (lmfit's ``least_squares``) is used because it takes limits as
they are, without a transformation that flattens the residual near them, and because its first step
is bounded: parameters are handed over in natural steps from the start, so that the first step is of
the order of half a line width.

A descent ends when the Gauss-Newton step that remains would lower chi-squared by less than
`Goal.gain` times the chi-squared of a point: the remaining distance is then a few hundredths of a
standard uncertainty.  The step itself is still taken if it helps.
"""

from __future__ import annotations

import warnings
from dataclasses import dataclass
from typing import Any

import lmfit
import numpy as np
from numpy.typing import NDArray
from scipy import optimize

from spinfit.errors import InputError
from spinfit.fitting.residuals import Point, Problem, Progress, View

Array = NDArray[np.float64]

# Singular values of the Jacobian in natural steps below this are directions the data do not see.
_BLIND = 1e-6
# The step that ends a descent is at most this many natural steps long in each parameter.
_LONGEST = 2.0
# A parameter this close to a limit, in typical steps, is on it.
_ON_LIMIT = 1e-4


@dataclass(frozen=True)
class Goal:
    """When to stop, and how well to look.

    Attributes
    ----------
    gain : float
        In chi-squared, over chi-squared per point, below which nothing is left to gain.
    evaluations : int
        Of the model, at most.
    central : bool
        Whether the Jacobian is worth two evaluations a parameter.
    """

    gain: float = 1e-3
    evaluations: int = 200
    central: bool = False


@dataclass(frozen=True, eq=False)
class Descent:
    """Where a descent ended.

    `jacobian` is that of the last accepted point but at most one step of less than `Goal.gain`
    away; None when the descent stopped before one was computed.
    """

    point: Point
    jacobian: Array | None
    converged: bool
    message: str


class _Converged(Exception):
    """Leaves the optimiser when there is nothing left to gain."""


class _Exhausted(Exception):
    """Leaves the optimiser when the evaluations are used up."""


class Interrupted(Exception):
    """The user stopped the fit; `point` is the best so far, None before the first evaluation."""

    def __init__(self, point: Point | None) -> None:
        super().__init__("stopped by the user")
        self.point = point


class _Run:
    """State of one descent: best point, Jacobian there, and the count of evaluations."""

    def __init__(
        self, problem: Problem, view: View, start: Array, held: NDArray[np.bool_], goal: Goal, progress: Progress | None
    ) -> None:
        self.problem, self.view, self.goal, self.progress = problem, view, goal, progress
        self.origin = start
        self.moving = np.flatnonzero(~held)
        self.best: Point | None = None
        self.used = 0
        self.at: Point | None = None
        self.latest: tuple[Point, Array] | None = None
        self.steps = np.ones(start.size)

    def free(self, params: lmfit.Parameters) -> Array:
        free = self.origin.copy()
        for k in self.moving:
            value = self.origin[k] + params[f"p{k}"].value * self.steps[k]
            free[k] = min(max(value, self.problem.lower[k]), self.problem.upper[k])
        return free

    def evaluate(self, free: Array) -> Point:
        """Evaluate at a point; where the model has no meaning the trace is left unexplained."""
        if self.used >= self.goal.evaluations:
            raise _Exhausted
        self.used += 1
        point = self.problem.evaluate(free, self.view)
        if self.best is None or point.chi2 < self.best.chi2:
            self.best = point
        if self.progress is not None:
            best = self.best
            self.progress(self.problem.evaluations, best.chi2, self.problem.in_job_units(best.free))
        return point

    def residual(self, params: lmfit.Parameters) -> Array:
        try:
            self.at = self.evaluate(self.free(params))
        except InputError:
            if self.best is None:
                raise
            return np.concatenate([seen.rest for seen in self.view.seen])
        return self.at.residual

    def jacobian(self, params: lmfit.Parameters) -> Array:
        """Jacobian in natural steps at the point the optimiser accepted; may end the descent."""
        free = self.free(params)
        if self.at is None or not np.array_equal(self.at.free, free):
            self.at = self.problem.evaluate(free, self.view)
        point = self.at
        if self.latest is None or self.latest[0] is not point:
            self.latest = (point, self.problem.jacobian(point, self.view, central=self.goal.central))
        jacobian = self.latest[1]
        low, high = self._room(point.free)
        low, high = np.maximum(low, -_LONGEST), np.minimum(high, _LONGEST)
        step, gain = bounded_step(point.residual, jacobian[:, self.moving] * self.steps[self.moving], low, high)
        if gain <= self.goal.gain * max(point.chi2 / self.view.points, 1e-12):
            free = point.free.copy()
            free[self.moving] += step * self.steps[self.moving]
            self.evaluate(np.clip(free, self.problem.lower, self.problem.upper))
            raise _Converged
        return jacobian[:, self.moving] * self.steps[self.moving]

    def _room(self, free: Array) -> tuple[Array, Array]:
        low = (self.problem.lower - free) / self.steps
        high = (self.problem.upper - free) / self.steps
        return low[self.moving], high[self.moving]


def bounded_step(residual: Array, jacobian: Array, low: Array, high: Array) -> tuple[Array, float]:
    """Gauss-Newton step that keeps inside limits, and what it would lower chi-squared by.

    Parameters
    ----------
    low, high : ndarray, shape (k,)
        Of the step; low <= 0 <= high.

    Returns
    -------
    step : ndarray, shape (k,)
    gain : float
        By the linear model.
    """
    step = np.linalg.lstsq(jacobian, -residual, rcond=_BLIND)[0]
    if np.any((step < low) | (step > high)):
        # The k x k triangle has the same minimum as the whole; an open interval is what the solver wants.
        orthonormal, triangle = np.linalg.qr(jacobian)
        high = np.where(high > low, high, low + 1e-12)
        found = optimize.lsq_linear(triangle, -orthonormal.T @ residual, (low, high), method="bvls")
        step = np.clip(found.x, low, high)
    after = residual + jacobian @ step
    return step, float(residual @ residual - after @ after)


def descend(
    problem: Problem,
    view: View,
    start: Array,
    *,
    goal: Goal = Goal(),
    held: NDArray[np.bool_] | None = None,
    progress: Progress | None = None,
) -> Descent:
    """Minimise chi-squared from a start.

    Parameters
    ----------
    start : ndarray, shape (k,)
        Internal units, inside the limits.
    held : ndarray of bool, shape (k,), optional
        Parameters that stay where they are.

    Raises
    ------
    Interrupted
        On Ctrl-C.
    InputError
        When the model has no meaning at the start.
    """
    held = np.zeros(start.size, dtype=bool) if held is None else held
    run = _Run(problem, view, np.clip(start, problem.lower, problem.upper), held, goal, progress)
    converged, message = False, ""
    try:
        converged, message = _drive(run)
    except _Converged:
        converged, message = True, "the remaining step is far below the uncertainties"
    except _Exhausted:
        message = f"not converged after {run.used} evaluations"
    except KeyboardInterrupt:
        raise Interrupted(run.best) from None
    assert run.best is not None
    jacobian = None if run.latest is None else run.latest[1]
    return Descent(_on_limits(run.best, problem, view), jacobian, converged, message)


def _on_limits(point: Point, problem: Problem, view: View) -> Point:
    """Put parameters that are next to a limit on it: the optimiser keeps strictly inside."""
    near = np.array([_ON_LIMIT * problem.parameters[name].scale for name in problem.names])
    free = np.where(point.free - problem.lower <= near, problem.lower, point.free)
    free = np.where(problem.upper - point.free <= near, problem.upper, free)
    if np.array_equal(free, point.free):
        return point
    moved = problem.evaluate(free, view)
    per_point = point.chi2 / max(view.points, 1)
    return moved if moved.chi2 <= point.chi2 + 1e-2 * per_point else point


def least_squares(minimizer: lmfit.Minimizer, **how: Any) -> Any:
    """Run lmfit's least squares without warnings of the covariance that it works out and nobody asks for."""
    with warnings.catch_warnings():
        warnings.filterwarnings("ignore", category=RuntimeWarning, module=r"lmfit\.")
        return minimizer.minimize(method="least_squares", **how)


def _drive(run: _Run) -> tuple[bool, str]:
    """Hand the problem to lmfit; returns only if lmfit's own criteria end the descent."""
    problem = run.problem
    first = run.evaluate(run.origin)
    if run.moving.size == 0:
        return True, "nothing to vary"
    run.at = first
    run.latest = (first, problem.jacobian(first, run.view, central=run.goal.central))
    run.steps = problem.natural_steps(first, run.view, run.latest[1])
    params = lmfit.Parameters()
    for k in run.moving:
        low = (problem.lower[k] - run.origin[k]) / run.steps[k]
        high = (problem.upper[k] - run.origin[k]) / run.steps[k]
        params.add(f"p{k}", value=0.0, min=low, max=high)
    minimizer = lmfit.Minimizer(run.residual, params, calc_covar=False)
    result = least_squares(
        minimizer,
        jac=run.jacobian,
        x_scale=1.0,
        ftol=1e-9,
        xtol=1e-6,
        gtol=1e-12,
        max_nfev=10 * run.goal.evaluations,
    )
    # A step shorter than 1e-6 natural steps: the engine's own error is what moves chi-squared now.
    return bool(result.success), "no shorter step helps" if result.success else str(result.message)
