"""Uncertainties by trying: profile likelihood and residual bootstrap.

Both start from a finished fit and do not assume that chi-squared is a parabola.  They cost a fit for
each point or resample, so they are asked for by name.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from spinfit.errors import InputError
from spinfit.fitting.data import Job
from spinfit.fitting.driver import engine_tolerance
from spinfit.fitting.noise import residual_noise
from spinfit.fitting.outcome import Outcome
from spinfit.fitting.parameters import members
from spinfit.fitting.residuals import Point, Problem, Progress, View, full_view
from spinfit.fitting.robust import settled_at
from spinfit.fitting.signals import Simulate
from spinfit.fitting.solve import Goal, descend
from spinfit.spectrum import simulate as _engine

Array = NDArray[np.float64]

# Rise of chi-squared at the ends of the 68.3 and 95.4 % intervals of one parameter.
_RISES = (1.0, 4.0)
_GOAL = Goal(gain=3e-3, evaluations=60)


@dataclass(frozen=True, eq=False)
class Profile:
    """How chi-squared rises when one parameter is held away from its best value, all others refitted.

    Attributes
    ----------
    name, unit : str
    values : ndarray, shape (n,)
        Held values, ascending, in the unit of the job.
    rise : ndarray, shape (n,)
        Of chi-squared, in units in which a parabola with the fit's noise uncertainty has 1 at one
        standard uncertainty.
    intervals : tuple of (low, high)
        68.3 and 95.4 %, in the unit of the job; None where the rise does not get there.
    """

    name: str
    unit: str
    values: Array
    rise: Array
    intervals: tuple[tuple[float | None, float | None], ...]


@dataclass(frozen=True, eq=False)
class Bootstrap:
    """Values of refits to resampled traces.

    Attributes
    ----------
    names : tuple of str
    units : tuple of str
    values : ndarray, shape (resamples, k)
        In the units of the job.
    failed : int
        Resamples whose fit did not converge; they are left out.
    """

    names: tuple[str, ...]
    units: tuple[str, ...]
    values: Array
    failed: int

    @property
    def uncertainty(self) -> Array:
        """Standard deviation of each parameter, shape (k,)."""
        return self.values.std(axis=0, ddof=1) if len(self.values) > 1 else np.zeros(len(self.names))

    def interval(self, share: float = 0.683) -> Array:
        """Shortest-tailed percentile interval of each parameter, shape (k, 2)."""
        return np.quantile(self.values, [(1 - share) / 2, (1 + share) / 2], axis=0).T


def _at(job: Job, outcome: Outcome, simulate: Simulate) -> tuple[Problem, View, Array]:
    """Return the problem and where the finished fit ended."""
    if job.lines:
        raise InputError("the job fits line positions", "profile and bootstrap are for traces", place="lines")
    problem = Problem(job, simulate)
    free = np.array([problem.parameters[n].from_job(outcome.parameters[n].value) for n in problem.names])
    free = np.clip(free, problem.lower, problem.upper)
    # A robust fit is the least-squares fit of its pseudo-values, which is what is profiled or resampled.
    view = settled_at(problem, full_view(job.traces, problem.noises, engine_tolerance(problem)), free)
    return problem, view, free


def profile(
    job: Job,
    outcome: Outcome,
    names: Sequence[str],
    *,
    points: int = 9,
    reach: float = 3.0,
    progress: Progress | None = None,
    simulate: Simulate = _engine,
) -> tuple[Profile, ...]:
    """Profile chi-squared over parameters of a finished fit.

    Parameters
    ----------
    names : sequence of str
        Varied parameters or groups of them.
    points : int
        Held values on either side and the best one together; odd.
    reach : float
        How far to go, in noise uncertainties.

    Raises
    ------
    InputError
        For a name that was not varied, or that has no uncertainty to set the range by.
    """
    problem, view, best = _at(job, outcome, simulate)
    single = [m for name in names for m in members(name, problem.parameters, place="profile")]
    out = []
    for name in dict.fromkeys(single):
        value = outcome.parameters[name]
        if name not in problem.names:
            raise InputError(f'"{name}" was not varied', "profile a parameter that is in vary", place="profile")
        if value.uncertainty_noise is None:
            raise InputError(f'"{name}" has no uncertainty', "the data do not determine it", place="profile")
        sigma = abs(problem.parameters[name].from_job(value.uncertainty_noise))
        out.append(_profiled(problem, view, best, name, sigma * reach * np.linspace(-1, 1, points), sigma, progress))
    return tuple(out)


def _profiled(
    problem: Problem,
    view: View,
    best: Array,
    name: str,
    distances: Array,
    sigma: float,
    progress: Progress | None,
) -> Profile:
    index = problem.names.index(name)
    held = np.zeros(best.size, dtype=bool)
    held[index] = True
    lowest = problem.evaluate(best, view)
    jacobian = problem.jacobian(lowest, view, central=True)
    # Rises are rescaled from weighted residuals to the noise that the uncertainty was stated for.
    alone = np.sqrt(np.linalg.pinv(jacobian.T @ jacobian)[index, index])
    unit = float(sigma / alone) ** 2 if alone > 0 else 1.0
    chi2 = np.empty(distances.size)
    middle = distances.size // 2
    for side in (range(middle, distances.size), range(middle, -1, -1)):
        free = best.copy()
        for k in side:  # outwards, each from its neighbour
            free[index] = np.clip(best[index] + distances[k], problem.lower[index], problem.upper[index])
            end = descend(problem, view, free, goal=_GOAL, held=held, progress=progress).point
            free, chi2[k] = end.free.copy(), end.chi2
    parameter = problem.parameters[name]
    at = np.clip(best[index] + distances, problem.lower[index], problem.upper[index])
    values = np.array([parameter.to_job(float(v)) for v in at])
    rise = (chi2 - chi2.min()) / unit
    order = np.argsort(values, kind="stable")
    values, rise = values[order], rise[order]
    intervals = tuple((_crossing(values, rise, level, -1), _crossing(values, rise, level, 1)) for level in _RISES)
    return Profile(name, parameter.unit, values, rise, intervals)


def _crossing(values: Array, rise: Array, level: float, direction: int) -> float | None:
    """First crossing of a level from the lowest point outwards.

    The square root of the rise is nearly straight, so that is what is interpolated.
    """
    k = int(np.argmin(rise))
    root = np.sqrt(rise)
    while 0 <= k + direction < rise.size:
        if rise[k + direction] >= level:
            part = (np.sqrt(level) - root[k]) / (root[k + direction] - root[k])
            return float(values[k] + part * (values[k + direction] - values[k]))
        k += direction
    return None


def bootstrap(
    job: Job,
    outcome: Outcome,
    count: int,
    *,
    seed: int = 1,
    progress: Progress | None = None,
    simulate: Simulate = _engine,
) -> Bootstrap:
    """Refit traces made of the fit and resampled residuals.

    Residuals are drawn in blocks that are long against their correlation (circular blocks: D. N.
    Politis, J. P. Romano, 1992, from memory), one by one when they are white, and scaled up for the
    degrees of freedom that the fit took.

    Parameters
    ----------
    count : int
        Resamples, at least 2.
    seed : int
        The same seed draws the same resamples.
    """
    if count < 2:
        raise InputError(f"{count} resamples", "take 2 or more; 200 give an uncertainty to 5 %", place="bootstrap")
    problem, view, best = _at(job, outcome, simulate)
    point = problem.evaluate(best, view)
    rng = np.random.default_rng(seed)
    rows, failed = [], 0
    for _ in range(count):
        again = _redrawn(problem, view, point, rng)
        end = descend(problem, again, best, goal=_GOAL, progress=progress)
        if end.converged:
            values = problem.in_job_units(end.point.free)
            rows.append([values[name] for name in problem.names])
        else:
            failed += 1
    units = tuple(problem.parameters[name].unit for name in problem.names)
    return Bootstrap(problem.names, units, np.array(rows).reshape(len(rows), len(problem.names)), failed)


def _redrawn(problem: Problem, view: View, point: Point, rng: np.random.Generator) -> View:
    """Return the view with new residuals on the fitted curves."""
    seen, at = [], 0
    share = 1 - (len(problem.names) + view.linear) / view.points
    for one, basis in zip(view.seen, problem.fitted_basis(point, view), strict=True):
        n = one.field.size
        residual = point.residual[at : at + n]
        at += n
        noise = residual_noise(residual, basis)
        length = 1 if noise.order == 0 else int(min(n // 4, 3 * np.ceil(_correlation_length(noise.covariances))))
        starts = rng.integers(0, n, size=-(-n // length))
        drawn = residual[(starts[:, None] + np.arange(length)).ravel()[:n] % n] / np.sqrt(share)
        signal = one.signal - residual + drawn
        seen.append(replace(one, signal=signal, rest=signal - one.basis @ (one.basis.T @ signal)))
    return replace(view, seen=tuple(seen))


def _correlation_length(covariances: Array) -> float:
    """Points that hang together: the sum of the autocorrelation over both sides, at least 1."""
    return max(1.0, float(np.abs(2 * covariances.sum() / covariances[0] - 1)))
