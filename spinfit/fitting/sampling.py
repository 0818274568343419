"""Posterior of the varied parameters by an affine-invariant ensemble of walkers.

What is sampled is

    p(parameters | traces)  ~  chi2(parameters)^(-(n - q)/2)     within the limits, 0 outside:

flat priors in the unit of the job; scale and baseline (q numbers) solved at every point, which stands for a
scale whose logarithm has a flat prior; one unknown factor on the noise of all traces marginalised with the prior
1/sigma.  Where the fit's uncertainties were widened because neighbouring residuals hang together, the logarithm is
multiplied by the mean share of white noise in these variances.  Field axis and frequency are not part of it.

The sampler is emcee's (D. Foreman-Mackey, D. W. Hogg, D. Lang, J. Goodman, Publ. Astron. Soc. Pac. 125, 306 (2013);
the moves are J. Goodman's and J. Weare's, 2010, from memory), which is an optional dependency.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spinfit.errors import InputError
from spinfit.fitting.data import Job
from spinfit.fitting.driver import engine_tolerance
from spinfit.fitting.outcome import Note, Outcome
from spinfit.fitting.residuals import Problem, Progress, View, full_view
from spinfit.fitting.signals import Simulate
from spinfit.spectrum import simulate as _engine

try:
    import emcee
except ImportError:  # the extra `sampling` is not installed
    emcee = None

Array = NDArray[np.float64]

LEVELS = (0.025, 0.16, 0.5, 0.84, 0.975)
LEAST_STEPS = 50
# Walkers for each parameter, and at least; the ensemble needs more than two for each.
_WALKERS, _FEWEST_WALKERS = 4, 16
# Autocorrelation times that a chain must be long for its estimates to be trusted, and that are left out at its
# start: what emcee's own pages recommend, from memory.
_LONG, _SETTLING = 50, 5
# Columns of the Jacobian below this part of the longest direction are left at the parameter's own scale.
_BLIND = 1e-4


@dataclass(frozen=True, eq=False)
class Posterior:
    """Draws from the posterior.

    Attributes
    ----------
    names, units : tuple of str
    values : ndarray, shape (m, k)
        Draws after the settling, in the units of the job.
    steps, walkers, discarded : int
        Steps of each walker, and how many at the start were left out.
    autocorrelation : ndarray, shape (k,)
        Steps after which a walker has forgotten where it was.
    acceptance : float
        Part of the moves that were taken.
    tempered : float
        Factor on the logarithm of the posterior for correlated residuals; 1 for white ones.
    notes : tuple of Note
    """

    names: tuple[str, ...]
    units: tuple[str, ...]
    values: Array
    steps: int
    walkers: int
    discarded: int
    autocorrelation: Array
    acceptance: float
    tempered: float
    notes: tuple[Note, ...] = ()

    @property
    def quantiles(self) -> Array:
        """Of each parameter at `LEVELS`, shape (k, 5)."""
        return np.quantile(self.values, LEVELS, axis=0).T

    @property
    def deviation(self) -> Array:
        """Standard deviation of each parameter, shape (k,)."""
        return self.values.std(axis=0, ddof=1)


def check_sampling(job: Job, steps: int) -> None:
    """Refuse what cannot be sampled before the fit, not after it.

    Raises
    ------
    InputError
        Without emcee, for too few steps, for robust losses and for tables of line positions.
    """
    if emcee is None:
        right = 'install it: python3 -m pip install "spinfit[sampling]"'
        raise InputError("needs emcee, which is not installed", right, place="--sample")
    if steps < LEAST_STEPS:
        raise InputError(f"{steps} steps", f"take {LEAST_STEPS} or more; 1000 is a beginning", place="--sample")
    if job.lines:
        raise InputError("the job fits line positions", "take --sample out: it is for traces", place="--sample")
    if job.loss != "linear" or any(trace.asymmetry is not None for trace in job.traces):
        right = "take loss out of [fit], or an asymmetric baseline out of [[trace]]; or use --bootstrap"
        raise InputError("a robust fit has no likelihood to sample", right, place="--sample")


def sample(
    job: Job,
    outcome: Outcome,
    steps: int,
    *,
    seed: int = 1,
    progress: Progress | None = None,
    simulate: Simulate = _engine,
) -> Posterior:
    """Sample the posterior around a finished fit.

    Parameters
    ----------
    steps : int
        Of each walker.
    seed : int
        The same seed draws the same posterior on the same machine.

    Raises
    ------
    InputError
        As `check_sampling`; and for a parameter that neither the data nor limits bound.
    """
    check_sampling(job, steps)
    problem = Problem(job, simulate)
    if not problem.names:
        raise InputError("nothing is varied", "vary a parameter", place="fit.vary")
    free = np.array([problem.parameters[n].from_job(outcome.parameters[n].value) for n in problem.names])
    free = np.clip(free, problem.lower, problem.upper)
    view = full_view(job.traces, problem.noises, engine_tolerance(problem))
    spread = _spread(problem, view, free)
    target = _Target(problem, view, _tempering(outcome), progress)
    walkers = max(_FEWEST_WALKERS, _WALKERS * free.size)
    rng = np.random.default_rng(seed)
    start = _inside(problem, free, spread, walkers, rng, target)
    sampler = emcee.EnsembleSampler(walkers, free.size, target)
    # emcee draws from the older generator only, and takes its state.
    state = emcee.State(start, random_state=np.random.RandomState(seed).get_state())
    stopped = False
    try:
        for _ in sampler.sample(state, iterations=steps):
            pass
    except KeyboardInterrupt:
        stopped = True
        if sampler.iteration < LEAST_STEPS:
            raise
    return _posterior(problem, sampler, target.power, stopped)


class _Target:
    """Logarithm of the posterior."""

    def __init__(self, problem: Problem, view: View, tempered: float, progress: Progress | None) -> None:
        self.problem, self.view, self.progress = problem, view, progress
        self.power = tempered
        self.exponent = tempered * (view.points - view.linear) / 2
        self.best = math.inf

    def __call__(self, free: Array) -> float:
        problem = self.problem
        if np.any(free < problem.lower) or np.any(free > problem.upper):
            return -math.inf
        try:
            point = problem.evaluate(free, self.view)
        except InputError:  # the model has no meaning there
            return -math.inf
        self.best = min(self.best, point.chi2)
        if self.progress is not None:
            self.progress(problem.evaluations, self.best, problem.in_job_units(free))
        return -self.exponent * math.log(max(point.chi2, 1e-300))


def _tempering(outcome: Outcome) -> float:
    """Mean share of white noise in the variances of the fit; 1 where that is nearly all."""
    shares = []
    for parts in outcome.budget.values():
        white, more = parts.get("noise", 0.0) ** 2, parts.get("correlation and misfit", 0.0) ** 2
        if white > 0:
            shares.append((white + more) / white)
    share = 1 / float(np.mean(shares)) if shares else 1.0
    return 1.0 if share > 0.9 else share


def _spread(problem: Problem, view: View, free: Array) -> Array:
    """A matrix whose columns are one standard deviation along each direction of the posterior, shape (k, k).

    Raises
    ------
    InputError
        For a parameter that nothing bounds.
    """
    point = problem.evaluate(free, view)
    jacobian = problem.jacobian(point, view, central=True)
    scales = np.array([problem.parameters[name].scale for name in problem.names])
    variance = point.chi2 / max(view.points - view.linear - free.size, 1)
    _, singular, right = np.linalg.svd(jacobian * scales, full_matrices=False)
    bounded = np.isfinite(problem.upper - problem.lower)
    blind = singular < _BLIND * singular.max(initial=0.0)
    for row in right[blind]:
        for k in np.flatnonzero((np.abs(row) > 0.3) & ~bounded):
            name = problem.names[k]
            found = f"{name} is not determined by the data and has no limits"
            raise InputError(found, f'give it limits: "{name}" = [low, high]', place="fit.limits")
    length = np.where(blind, 1.0, math.sqrt(variance) / np.maximum(singular, 1e-300))
    return scales[:, None] * right.T * np.minimum(length, 1e3)


def _inside(
    problem: Problem, free: Array, spread: Array, walkers: int, rng: np.random.Generator, target: _Target
) -> Array:
    """Walkers' first places: drawn from the covariance, where the model means something."""
    out = []
    for attempt in range(200 * walkers):
        # Where draws keep falling outside, they move closer to the best values.
        near = 0.7 ** (attempt // (20 * walkers))
        place = free + near * spread @ rng.normal(size=free.size)
        low, high = problem.lower, problem.upper
        place = np.where(place < low, 2 * low - place, np.where(place > high, 2 * high - place, place))
        if math.isfinite(target(place)):
            out.append(place)
        if len(out) == walkers:
            return np.array(out)
    raise InputError("no walkers can be placed within the limits", "widen the limits", place="fit.limits")


def _posterior(problem: Problem, sampler: Any, tempered: float, stopped: bool) -> Posterior:
    """Cut the settling off and say what the chain is worth."""
    steps = sampler.iteration
    times = np.nan_to_num(sampler.get_autocorr_time(tol=0), nan=float(steps))
    discarded = int(min(math.ceil(_SETTLING * times.max()), steps // 2))
    chain = sampler.get_chain(discard=discarded, flat=True)
    values = np.stack([[problem.in_job_units(row)[name] for name in problem.names] for row in chain])
    notes = []
    if stopped:
        notes.append(Note("sampling_stopped", f"The sampling was stopped after {steps} steps."))
    if steps < _LONG * times.max():
        worst = problem.names[int(np.argmax(times))]
        text = (
            f"{steps} steps are {steps / times.max():.0f} autocorrelation times of {worst} ({times.max():.0f} steps); "
            f"{_LONG} are needed for quantiles to be trusted: ask for {_rounded(_LONG * times.max())} or more."
        )
        notes.append(Note("short_chain", text))
    if tempered < 1:
        text = f"Residuals are correlated: the posterior was widened, its logarithm multiplied by {tempered:.2f}."
        notes.append(Note("tempered_posterior", text))
    return Posterior(
        names=problem.names,
        units=tuple(problem.parameters[name].unit for name in problem.names),
        values=values,
        steps=steps,
        walkers=sampler.nwalkers,
        discarded=discarded,
        autocorrelation=times,
        acceptance=float(np.mean(sampler.acceptance_fraction)),
        tempered=tempered,
        notes=tuple(notes),
    )


def _rounded(steps: float) -> int:
    """Round up to one digit and a half: 1370 becomes 1500."""
    unit = 10 ** max(int(math.log10(max(steps, 1))) - 1, 0) * 5
    return int(math.ceil(steps / unit) * unit)
