"""One least-squares descent: lmfit drives, and stops when nothing is left to gain.

The trust-region reflective algorithm (lmfit's ``least_squares``) is used because it takes limits as
they are, without a transformation that flattens the residual near them, and because its first step
is bounded: parameters are handed over in natural steps from the start, so that the first step is of
the order of half a line width.

A descent ends when the Gauss-Newton step that remains would lower chi-squared by less than
`Goal.gain` times the chi-squared of a point: the remaining distance is then a few hundredths of a
standard uncertainty.  The step itself is still taken if it helps.

A Jacobian costs as much as one to several evaluations.  Where a step did what its Jacobian had promised,
the next one is that Jacobian with the step's own outcome put in (C. G. Broyden, Math. Comput. 19, 577
(1965)); where it did not, and before a descent ends far from the last one, the Jacobian is computed anew.
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
# How much of what a Jacobian promised for the steps since it was computed may be missing, relative to that, for it to
# be carried on, and for it to be believed that nothing is left to gain.
_CARRIED, _BELIEVED = 0.3, 0.1
# How far such steps may have led, standard deviations, for uncertainties to follow from it.
_NEAR = 0.5
# That missing part, squared, of a misfit that stays, relative to what is left to gain: beyond this it may lead astray.
_MISLED = 0.03


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


class _Misled(Exception):
    """Leaves the optimiser when a step by a Jacobian that was carried on went uphill."""


@dataclass(frozen=True, eq=False)
class _Slope:
    """The Jacobian in use.

    Attributes
    ----------
    point : Point
    jacobian : ndarray, shape (points, k)
    error : float
        Of what it promised for the steps since it was computed, relative to what it promised; 0 where it was.
    moved : float
        What these steps changed the residuals by, standard deviations.
    """

    point: Point
    jacobian: Array
    error: float = 0.0
    moved: float = 0.0


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
        self.slope: _Slope | None = None
        self.steps = np.ones(start.size)

    def free(self, params: lmfit.Parameters) -> Array:
        free = self.origin.copy()
        for k in self.moving:
            value = self.origin[k] + params[f"p{k}"].value * self.steps[k]
            free[k] = min(max(value, self.problem.lower[k]), self.problem.upper[k])
        return free

    def evaluate(self, free: Array) -> Point:
        """Evaluate at a point."""
        for known in (self.at, self.best):
            if known is not None and np.array_equal(known.free, free):
                return known
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
        """Residuals; where the model has no meaning the trace is left unexplained."""
        try:
            self.at = self.evaluate(self.free(params))
        except InputError:
            if self.best is None:
                raise
            self._turn_back()
            return np.concatenate([seen.rest for seen in self.view.seen])
        if self.slope is not None and self.at.chi2 >= self.slope.point.chi2 and self.at is not self.slope.point:
            self._turn_back()
        return self.at.residual

    def _turn_back(self) -> None:
        """Begin again from where the Jacobian is, with a new one, if it was not computed there."""
        if self.slope is not None and self.slope.moved > 0:
            raise _Misled

    def jacobian(self, params: lmfit.Parameters) -> Array:
        """Jacobian in natural steps at the point the optimiser accepted; may end the descent."""
        self.at = self.evaluate(self.free(params))
        slope = self._slope_at(self.at)
        step, gain = self._remaining(slope)
        enough = self.goal.gain * max(self.at.chi2 / self.view.points, 1e-12)
        if slope.moved > 0 and not self._trusted(slope, gain, enough):
            slope = self.compute(self.at)
            step, gain = self._remaining(slope)
        if gain <= enough:
            free = self.at.free.copy()
            free[self.moving] += step * self.steps[self.moving]
            self.evaluate(np.clip(free, self.problem.lower, self.problem.upper))
            raise _Converged
        return slope.jacobian[:, self.moving] * self.steps[self.moving]

    def compute(self, point: Point) -> _Slope:
        """Compute the Jacobian at a point."""
        jacobian = self.problem.jacobian(point, self.view, central=self.goal.central, wanted=self.moving)
        self.slope = _Slope(point, jacobian)
        return self.slope

    def _slope_at(self, point: Point) -> _Slope:
        """Carry the Jacobian on to a point, or compute it there."""
        before = self.slope
        if before is None:
            return self.compute(point)
        if np.array_equal(before.point.free, point.free):
            return before
        move = (point.free - before.point.free)[self.moving] / self.steps[self.moving]
        promised = before.jacobian[:, self.moving] @ (move * self.steps[self.moving])
        missing = point.residual - before.point.residual - promised
        # What the parameters cannot follow does no harm to the next step.
        inside = np.linalg.norm(np.linalg.qr(before.jacobian[:, self.moving])[0].T @ missing)
        size = float(np.linalg.norm(promised))
        error = before.error + float(inside) / max(size, 1e-300)
        if error > _CARRIED or not point.chi2 < before.point.chi2:
            return self.compute(point)
        jacobian = before.jacobian.copy()
        jacobian[:, self.moving] += np.outer(missing, move / (move @ move) / self.steps[self.moving])
        self.slope = _Slope(point, jacobian, error, before.moved + size)
        return self.slope

    def _trusted(self, slope: _Slope, gain: float, enough: float) -> bool:
        """Whether a Jacobian that was carried on can tell which way to go, or that nothing is left to gain."""
        # A misfit that stays turns the error of the Jacobian into one of the gradient.
        misfit = max(slope.point.chi2 - self.view.points, 0.0)
        if slope.error**2 * misfit > _MISLED * gain:
            return False
        if gain > enough:
            return True
        near = _NEAR * np.sqrt(slope.point.chi2 / self.view.points)
        return slope.error <= _BELIEVED and (slope.moved <= near or not self.goal.central)

    def _remaining(self, slope: _Slope) -> tuple[Array, float]:
        """Return the step that remains, in natural steps, and what it would lower chi-squared by."""
        low, high = self._room(slope.point.free)
        low, high = np.maximum(low, -_LONGEST), np.minimum(high, _LONGEST)
        scaled = slope.jacobian[:, self.moving] * self.steps[self.moving]
        return bounded_step(slope.point.residual, scaled, low, high)

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
    # The k x k triangle has the same minimum as the whole.
    orthonormal, triangle = np.linalg.qr(jacobian)
    inside = orthonormal.T @ residual
    step = np.linalg.lstsq(triangle, -inside, rcond=_BLIND)[0]
    if np.any((step < low) | (step > high)):
        # An open interval is what the solver wants.
        high = np.where(high > low, high, low + 1e-12)
        step = np.clip(optimize.lsq_linear(triangle, -inside, (low, high), method="bvls").x, low, high)
    after = inside + triangle @ step
    return step, float(inside @ inside - after @ after)


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
        converged, message = _driven(run)
    except _Converged:
        converged, message = True, "the remaining step is far below the uncertainties"
    except _Exhausted:
        message = f"not converged after {run.used} evaluations"
    except KeyboardInterrupt:
        raise Interrupted(run.best) from None
    assert run.best is not None
    jacobian = None if run.slope is None else run.slope.jacobian
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


def _driven(run: _Run) -> tuple[bool, str]:
    """Drive to the end, with a new Jacobian wherever one that was carried on led uphill."""
    run.at = run.evaluate(run.origin)
    if run.moving.size == 0:
        return True, "nothing to vary"
    while True:
        try:
            return _drive(run, run.compute(run.at))
        except _Misled:
            assert run.slope is not None
            run.at = run.slope.point
            run.origin = run.at.free


def _drive(run: _Run, slope: _Slope) -> tuple[bool, str]:
    """Hand the problem to lmfit; returns only if lmfit's own criteria end the descent."""
    problem = run.problem
    run.steps = problem.natural_steps(slope.point, run.view, slope.jacobian)
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
