"""From the end of a descent to an `Outcome`: quality, curves, fractions, provenance."""

from __future__ import annotations

import math
import platform
from collections.abc import Mapping
from importlib.metadata import version

import lmfit
import numpy as np
import scipy
from numpy.typing import NDArray

from spinfit import __version__
from spinfit.fitting.baseline import coefficients, known_columns
from spinfit.fitting.data import Trace
from spinfit.fitting.outcome import Curves, Note, Outcome, Quality, Value
from spinfit.fitting.residuals import Point, Problem, Seen, View
from spinfit.fitting.robust import weights_of
from spinfit.fitting.signals import true_field
from spinfit.fitting.solve import Descent
from spinfit.fitting.uncertainty import Covariances, budget_of, fractions_of, reported_values
from spinfit.kernels import COMPILED

Array = NDArray[np.float64]

# An exact fit of exact data has no residual; its logarithm is taken of rounding instead.
_SMALLEST_CHI2 = 1e-20


def quality_of(problem: Problem, view: View, descent: Descent, finished: bool) -> Quality:
    """Chi-squared with the noise from the trace itself, AICc and BIC with the noise left free.

    The information criteria hold for Gaussian noise of unknown level: n ln(chi2/n) plus the penalty
    for k free parameters and the noise level (K. P. Burnham, D. R. Anderson, Model Selection and
    Multimodel Inference, 2002, from memory).
    """
    points, chi2 = view.points, max(descent.point.chi2, _SMALLEST_CHI2)
    free = len(problem.names) + view.linear
    k = free + 1
    likelihood = points * math.log(chi2 / points)
    return Quality(
        converged=descent.converged,
        finished=finished,
        chi2_reduced=descent.point.chi2 / max(points - free, 1),
        noise=problem.noises[0],
        points=points,
        free_parameters=free,
        aicc=likelihood + 2 * k + 2 * k * (k + 1) / max(points - k - 1, 1),
        bic=likelihood + k * math.log(points),
    )


def curves_of(problem: Problem, view: View, point: Point) -> tuple[Curves, ...]:
    """Every trace with its fit, over all its points, used or not."""
    out = []
    weights = weights_of(problem, view)
    for trace, seen, scale, noise, signal, weight in zip(
        point.traces, view.seen, point.scales, problem.noises, point.signals, weights, strict=True
    ):
        parts = {
            one.name: scale * one.amount * problem.signals.part(one, trace, point.sample, trace.field, view.stage)
            for one in point.species
        }
        baseline = _baseline(trace, seen, scale, signal)
        fitted = np.sum(list(parts.values()), axis=0) + baseline
        out.append(
            Curves(
                trace=trace.name,
                frequency=trace.frequency,
                field=true_field(trace, trace.field),
                measured=trace.signal,
                fitted=fitted,
                residual=trace.signal - fitted,
                baseline=baseline,
                used=trace.used,
                parts=parts,
                noise=noise,
                scale=scale,
                detect=trace.detect,
                weight=None if weight is None else _laid_out(weight, trace.used),
            )
        )
    return tuple(out)


def _laid_out(weight: Array, used: NDArray[np.bool_]) -> Array:
    """Weights of the used points over all points."""
    out = np.zeros(used.size)
    out[used] = weight
    return out


def _baseline(trace: Trace, seen: Seen, scale: float, signal: Array) -> Array:
    """Solve the linear coefficients of background and baseline and lay them over the whole trace."""
    if seen.known.shape[1] == 0:
        return np.zeros(trace.field.size)
    rest = seen.signal - scale * signal / seen.noise
    return known_columns(trace, trace.field, trace.background) @ coefficients(seen.known, seen.penalty, rest)


def provenance_of(problem: Problem) -> dict[str, object]:
    """Which input, which versions, which job."""
    job = problem.job
    versions = {
        "spinfit": __version__,
        "python": platform.python_version(),
        "numpy": np.__version__,
        "scipy": scipy.__version__,
        "lmfit": lmfit.__version__,
    }
    if COMPILED:  # compiled sums may differ from numpy's in the last digit
        versions["numba"] = version("numba")
    inputs = {
        trace.name: {
            "file": trace.file,
            "sha256": trace.sha256,
            "temperature_K": trace.temperature,
            "modulation_mT": trace.modulation,
            "detect": trace.detect,
        }
        for trace in job.traces
    }
    return {"input": inputs, "versions": versions, "job": job.text}


def _with_derived(values: Mapping[str, Value], derived: Mapping[str, Value]) -> dict[str, Value]:
    """Put each species' derived values behind the last parameter of its crystal field."""
    last = {name.split(".")[0]: name for name in values if ".crystal_field." in name}
    out: dict[str, Value] = {}
    for name, value in values.items():
        out[name] = value
        species = name.split(".")[0]
        if last.get(species) == name:
            out |= {key: one for key, one in derived.items() if key.split(".")[0] == species}
    return out


def outcome_of(
    problem: Problem,
    view: View,
    descent: Descent,
    spread: Covariances | None,
    at_limit: NDArray[np.bool_],
    notes: list[Note],
    *,
    finished: bool,
    seconds: float,
    derived: Mapping[str, Value] | None = None,
) -> Outcome:
    """Put everything a fit found together; `derived` values stand after their species' crystal field."""
    point = descent.point
    parameters = _with_derived(reported_values(problem, point.free, spread, at_limit), derived or {})
    known = np.zeros(len(problem.names), dtype=bool) if spread is None else spread.known
    names = tuple(name for name, ok in zip(problem.names, known, strict=True) if ok)
    amounts = [(one.name, one.amount) for one in point.species]
    reports = {f"{trace} {species}": report for (trace, species), report in problem.signals.reports.items()}
    return Outcome(
        name=problem.job.name,
        parameters=parameters,
        quality=quality_of(problem, view, descent, finished),
        correlation_names=names,
        correlation_matrix=np.zeros((0, 0)) if spread is None else spread.correlation,
        warnings=tuple(notes),
        curves=curves_of(problem, view, point),
        fractions=fractions_of(amounts, problem, point.free, spread),
        provenance=provenance_of(problem),
        engine={"tolerance": view.stage.tolerance, "simulations": problem.signals.simulations, "reports": reports},
        budget={} if spread is None else budget_of(problem, point.free, spread),
        message=descent.message,
        seconds=seconds,
    )
