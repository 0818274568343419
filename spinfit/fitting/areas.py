"""Fitted areas: amount times scale of each trace, with an uncertainty.

With everything linear solved inside, the scale is a function s(p) of the parameters.  Its variance is
that at fixed p, sigma^2/|m|^2 with m the model's signal outside the baseline's space, and what the
parameters' covariance adds through ds/dp; the two are independent at a least-squares minimum.
"""

from __future__ import annotations

import math

import numpy as np

from spinfit.fitting.data import Job
from spinfit.fitting.driver import engine_tolerance
from spinfit.fitting.noise import residual_noise
from spinfit.fitting.outcome import Outcome
from spinfit.fitting.quantify import FittedArea
from spinfit.fitting.residuals import Point, Problem, View, full_view
from spinfit.fitting.robust import settled_at
from spinfit.fitting.signals import Simulate
from spinfit.fitting.uncertainty import tied_slopes
from spinfit.spectrum import simulate as _engine

# Part of a parameter's noise uncertainty by which it is moved for ds/dp: short against the curvature,
# and a scale is an average over the trace, which the engine's error hardly moves.
_STEP = 0.5


def fitted_area(job: Job, outcome: Outcome, index: int = 0, *, simulate: Simulate = _engine) -> FittedArea:
    """Area of one trace of a finished fit.

    Parameters
    ----------
    index : int
        Of the trace in the job.
    """
    problem = Problem(job, simulate)
    view = full_view(job.traces, problem.noises, engine_tolerance(problem))
    free = np.array([problem.parameters[n].from_job(outcome.parameters[n].value) for n in problem.names])
    free = np.clip(free, problem.lower, problem.upper)
    view = settled_at(problem, view, free)
    point = problem.evaluate(free, view)
    total = sum(one.amount for one in point.species)
    known = [name for name in outcome.correlation_names if name in problem.names]
    places = [problem.names.index(name) for name in known]
    sigmas = np.array([_sigma(problem, outcome, name) for name in known])
    slopes = np.zeros(len(known))
    for k, (place, sigma) in enumerate(zip(places, sigmas, strict=True)):
        if sigma == 0:
            continue
        ends = []
        for side in (_STEP, -_STEP):
            moved = free.copy()
            moved[place] = np.clip(free[place] + side * sigma, problem.lower[place], problem.upper[place])
            ends.append((moved[place], problem.evaluate(moved, view).scales[index]))
        slopes[k] = (ends[0][1] - ends[1][1]) / (ends[0][0] - ends[1][0])
    scale = point.scales[index]
    moving = tied_slopes(problem, free)
    amounts = sum(moving.get(f"{one.name}.amount", np.zeros(len(problem.names))) for one in point.species)
    gradient = total * slopes + scale * np.asarray(amounts)[places]
    covariance = np.asarray(outcome.correlation_matrix) * np.outer(sigmas, sigmas)
    variance = float(gradient @ covariance @ gradient) + total**2 * _scale_variance(problem, view, point, index)
    fractions = {name: (one.value, one.uncertainty) for name, one in outcome.fractions.items()}
    thermal = job.traces[index].temperature is not None
    return FittedArea(scale * total, math.sqrt(max(variance, 0.0)), fractions, thermal)


def _sigma(problem: Problem, outcome: Outcome, name: str) -> float:
    return abs(problem.parameters[name].from_job(outcome.parameters[name].uncertainty_noise or 0.0))


def _scale_variance(problem: Problem, view: View, point: Point, index: int) -> float:
    """Variance of a trace's scale with the parameters held."""
    seen, signal = view.seen[index], point.signals[index]
    column = signal / seen.noise
    shape = column - seen.basis @ (seen.basis.T @ column)
    size = float(shape @ shape)
    if size == 0:
        return math.inf
    at = sum(one.field.size for one in view.seen[:index])
    residual = point.residual[at : at + seen.field.size]
    noise = residual_noise(residual, np.column_stack((seen.basis, shape / math.sqrt(size))))
    weights = (shape / size)[:, None]
    return float((weights.T @ noise.applied(weights))[0, 0])
