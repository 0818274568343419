"""What the varied parameters are known to: noise, field axis, frequency, angle.

The response of the least-squares values to a change e of the residuals is dp = -G e with
G = (J'J)^-1 J' and J the projected Jacobian, so that everything linear (scales, baselines) is
refitted along.  Three kinds of change go through it:

- the noise, with the covariance C that the residuals show: G C G', which is the familiar
  sigma^2 (J'J)^-1 when the noise is white and wider when neighbours hang together;
- a shift of the field axis by its standard uncertainty;
- a shift of the frequency by its own;
- a turn of the sample by the uncertainty of its angle's reading.

They are independent and combine in quadrature (JCGM 100:2008, 5.1.2).  Traces of one group share
one field axis; traces without a group share one as well, since averaging over traces of one magnet
does not make its calibration better.  Traces of one frequency share its uncertainty whatever their group.
Angles are read anew for every trace, but for parts of one sweep.

In the response to the noise J'J gives way to the second derivatives of chi-squared where these differ
(`spinfit.fitting.bending`).
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from spinfit.fitting.bending import bendings, stiffened
from spinfit.fitting.data import Trace, sharing_angle, sharing_axis, sharing_frequency
from spinfit.fitting.noise import ResidualNoise, local_covariance, residual_noise
from spinfit.fitting.outcome import Value
from spinfit.fitting.residuals import Point, Problem, Seen, View
from spinfit.fitting.signals import narrowest_width

Array = NDArray[np.float64]

# Singular values of the Jacobian with columns of unit length: below this finite differences of an
# engine of 1e-4 cannot tell a direction from none.
_BLIND = 3e-4
# A column this small against the noise moves chi-squared by less than 1 over a hundred typical steps.
_UNSEEN_STEPS = 100.0
# Below this, columns that are exact relative to each other have no direction at all: rounding of the model.
_NOWHERE = 1e-7
# Standard deviations by which squared residuals on the lines may exceed those beside them.
_UNEVEN = 4.5
# Part of a line width by which the frequency is moved, as a field, and at the most by which an angle is.
_FREQUENCY_STEP = 0.02


@dataclass(frozen=True, eq=False)
class Covariances:
    """Covariances of the varied parameters at the minimum, internal units.

    Attributes
    ----------
    known : ndarray of bool, shape (k,)
        Whether the data determine the parameter and it is not on a limit; rows and columns of the
        others are 0.
    noise, field : ndarray, shape (k, k)
        From the noise; from field axis, frequency and angles.
    white : ndarray, shape (k, k)
        What `noise` would be without correlation of neighbours and without misfit.
    field_shifts : ndarray, shape (m, k)
        The parameters' response to each shared standard shift of an axis, a frequency or an angle.
    shift_sources : tuple of str
        What each of these is: "field axis", "frequency" or "angle".
    blind : tuple of tuple of str
        Sets of parameters of which only combinations are determined.
    traces : tuple of ResidualNoise
        The noise of each trace in units of its level before the fit.
    """

    known: NDArray[np.bool_]
    noise: Array
    field: Array
    white: Array
    field_shifts: Array
    shift_sources: tuple[str, ...]
    blind: tuple[tuple[str, ...], ...]
    traces: tuple[ResidualNoise, ...]

    @property
    def correlation(self) -> Array:
        """Correlation matrix of the noise part, of the known parameters."""
        inner = self.noise[np.ix_(self.known, self.known)]
        sigma = np.sqrt(np.diag(inner))
        return inner / np.outer(sigma, sigma) if sigma.size and np.all(sigma > 0) else np.eye(sigma.size)


def spread_of(
    problem: Problem,
    view: View,
    point: Point,
    jacobian: Array,
    at_limit: NDArray[np.bool_],
    *,
    exact: NDArray[np.bool_] | None = None,
    left_open: NDArray[np.bool_] | None = None,
) -> Covariances:
    """Work out the covariances at the minimum.

    Parameters
    ----------
    jacobian : ndarray, shape (points, k)
        Projected, as `Problem.jacobian` gives it.
    at_limit : ndarray of bool, shape (k,)
        Parameters on a limit: the others' uncertainties are those with these held there.
    exact : ndarray of bool, shape (k,), optional
        Parameters whose columns are exact relative to each other, so that small differences count.
    left_open : ndarray of bool, shape (k,), optional
        Those of them that the data do not determine: they have no uncertainty, but the others' allow for
        their freedom.
    """
    known, blind = _seen_parameters(problem, jacobian, at_limit)
    if exact is None or left_open is None or not exact.any():
        return _covariances(problem, view, point, jacobian, known, blind)
    names = {name for name, is_exact in zip(problem.names, exact, strict=True) if is_exact}
    blind = tuple(one for one in blind if not names.issuperset(one))
    used = (known | exact) & ~at_limit & (np.linalg.norm(jacobian, axis=0) > 0)
    found = _covariances(problem, view, point, jacobian, used, blind, _NOWHERE)
    kept = used & ~left_open
    both = np.outer(kept, kept)
    return replace(
        found,
        known=kept,
        noise=found.noise * both,
        field=found.field * both,
        white=found.white * both,
        field_shifts=found.field_shifts * kept,
    )


def _covariances(
    problem: Problem,
    view: View,
    point: Point,
    jacobian: Array,
    known: NDArray[np.bool_],
    blind: tuple[tuple[str, ...], ...] = (),
    cut: float = 0.0,
) -> Covariances:
    """Carry noise, field axis and frequency to the parameters in `known`.

    Parameters
    ----------
    cut : float
        Directions whose singular value is at most this part of the largest are left where they are.
    """
    used = jacobian[:, known]
    size = np.linalg.norm(used, axis=0)
    left, singular, right = np.linalg.svd(used / size, full_matrices=False) if used.shape[1] else _nothing(used)
    kept = singular > cut * singular.max(initial=0.0)
    left, singular, right = left[:, kept], singular[kept], right[kept]
    response = (right.T / singular) @ left.T / size[:, None]
    blocks = _blocks(view)
    linear = problem.fitted_basis(point, view)
    traces = [
        residual_noise(point.residual[rows], np.column_stack((basis, left[rows])))
        for rows, basis in zip(blocks, linear, strict=True)
    ]
    noise, white = _of_noise(point, blocks, traces, response)
    shifts, sources = _axis_shifts(problem, view, point, response)
    if cut == 0:
        inverse = _filled(response @ response.T, known)
        bent = bendings(problem, view, point, jacobian * known, inverse, np.sqrt(np.diag(_filled(noise, known))))[known]
        if np.any(bent != 1):
            # An axis that is off takes noise and lines along: only the response to noise feels the bending.
            noise, white = _of_noise(point, blocks, traces, stiffened(response, bent))
    moved = np.zeros((shifts.shape[0], known.size))
    moved[:, known] = shifts
    return Covariances(
        known, _filled(noise, known), moved.T @ moved, _filled(white, known), moved, sources, blind, tuple(traces)
    )


def _of_noise(
    point: Point, blocks: Sequence[slice], traces: Sequence[ResidualNoise], response: Array
) -> tuple[Array, Array]:
    """Covariance that the noise of all traces makes, shape (k, k), and what it would be if it were white."""
    noise, white = np.zeros((response.shape[0],) * 2), np.zeros((response.shape[0],) * 2)
    for rows, one in zip(blocks, traces, strict=True):
        columns = response[:, rows].T
        white += one.variance * (columns.T @ columns)
        noise += _widened(columns.T @ one.applied(columns), one, point.residual[rows], columns)
    return noise, white


def propagated_to(
    problem: Problem,
    view: View,
    point: Point,
    jacobian: Array,
    used: NDArray[np.bool_],
    slopes: Sequence[Array],
) -> list[tuple[float | None, float | None]]:
    """Noise and field part of the uncertainty of quantities that follow from the parameters.

    Parameters
    ----------
    used : ndarray of bool, shape (k,)
        Parameters that are free; not each need be determined by itself.
    slopes : sequence of ndarray, shape (k,)
        Derivative of each quantity; none along directions in which no column moves.

    Returns
    -------
    list of (noise, field)
        None where nothing moves a quantity.
    """
    used = used & (np.linalg.norm(jacobian, axis=0) > 0)
    if not used.any():
        return [(None, None)] * len(slopes)
    spread = _covariances(problem, view, point, jacobian, used, cut=_NOWHERE)
    return [_parts(np.where(used, slope, 0.0), spread) for slope in slopes]


def _filled(inner: Array, known: NDArray[np.bool_]) -> Array:
    """Put a covariance of the known parameters into one of all, made symmetric to the last bit."""
    out = np.zeros((known.size, known.size))
    out[np.ix_(known, known)] = (inner + inner.T) / 2
    return out


def _nothing(used: Array) -> tuple[Array, Array, Array]:
    return np.zeros((used.shape[0], 0)), np.zeros(0), np.zeros((0, 0))


def _blocks(view: View) -> list[slice]:
    edges = np.cumsum([0] + [seen.field.size for seen in view.seen])
    return [slice(int(a), int(b)) for a, b in zip(edges[:-1], edges[1:], strict=True)]


def _widened(covariance: Array, noise: ResidualNoise, residual: Array, columns: Array) -> Array:
    """Widen where the residuals are larger on the lines than beside them."""
    if noise.uneven <= _UNEVEN:
        return covariance
    bandwidth = max(int(4 * (residual.size / 100) ** (2 / 9)), 4 * noise.order)
    local = np.diag(local_covariance(residual, columns, bandwidth))
    ratio = np.sqrt(np.maximum(local / np.maximum(np.diag(covariance), np.finfo(float).tiny), 1.0))
    return covariance * np.outer(ratio, ratio)


def _seen_parameters(
    problem: Problem, jacobian: Array, at_limit: NDArray[np.bool_]
) -> tuple[NDArray[np.bool_], tuple[tuple[str, ...], ...]]:
    """Find parameters without effect, and sets of which only combinations have one."""
    scales = np.array([problem.parameters[name].scale for name in problem.names])
    norms = np.linalg.norm(jacobian, axis=0)
    unseen = norms * scales * _UNSEEN_STEPS < 1.0
    known = ~at_limit & ~unseen
    blind = [(problem.names[k],) for k in np.flatnonzero(unseen & ~at_limit)]
    if known.any():
        _, singular, right = np.linalg.svd(jacobian[:, known] / norms[known], full_matrices=False)
        places = np.flatnonzero(known)
        for row in right[singular < _BLIND]:
            members = places[np.abs(row) > 0.1]
            blind.append(tuple(problem.names[k] for k in members))
            known[members] = False
    return known, tuple(blind)


def _axis_shifts(problem: Problem, view: View, point: Point, response: Array) -> tuple[Array, tuple[str, ...]]:
    """Response of the parameters to each shared standard shift, shape (m, k), and what shifts."""
    rows, sources = [], []
    for source, changes, sharing in (
        ("field axis", _field_changes, sharing_axis),
        ("frequency", _frequency_changes, sharing_frequency),
        ("angle", _angle_changes, sharing_angle),
    ):
        for members in sharing(point.traces):
            moved = changes(problem, view, point, members)
            if any(change is not None for change in moved):
                rows.append(-response @ problem.projected_change(point, view, moved))
                sources.append(source)
    return np.array(rows).reshape(len(rows), response.shape[0]), tuple(sources)


def _field_changes(problem: Problem, view: View, point: Point, members: Sequence[int]) -> list[Array | None]:
    """Change of each trace's signal when its axis is off by one standard uncertainty."""
    out: list[Array | None] = []
    for n, (trace, seen) in enumerate(zip(point.traces, view.seen, strict=True)):
        if n not in members or trace.field_uncertainty == 0:
            out.append(None)
        else:
            out.append(problem.slope(point, trace, seen, view.stage) * trace.field_uncertainty)
    return out


def _frequency_changes(problem: Problem, view: View, point: Point, members: Sequence[int]) -> list[Array | None]:
    """Change of each trace's signal when its frequency is off by one standard uncertainty."""
    out: list[Array | None] = []
    for n, (trace, seen) in enumerate(zip(point.traces, view.seen, strict=True)):
        if n not in members or trace.frequency_uncertainty == 0:
            out.append(None)
            continue
        step = _small(point, seen) * trace.frequency
        sides = [replace(trace, frequency=trace.frequency + s) for s in (step, -step)]
        out.append(_difference(problem, view, point, seen, sides) / (2 * step) * trace.frequency_uncertainty)
    return out


def _angle_changes(problem: Problem, view: View, point: Point, members: Sequence[int]) -> list[Array | None]:
    """Change of each trace's signal when its angle is off by one standard uncertainty."""
    out: list[Array | None] = []
    for n, (trace, seen) in enumerate(zip(point.traces, view.seen, strict=True)):
        if n not in members or trace.angle_uncertainty == 0 or trace.angle is None:
            out.append(None)
            continue
        # a resonance moves by its own field at the most in a turn of one radian, or little more
        step = _small(point, seen)
        sides = [replace(trace, angle=trace.angle + s) for s in (step, -step)]
        out.append(_difference(problem, view, point, seen, sides) / (2 * step) * trace.angle_uncertainty)
    return out


def _small(point: Point, seen: Seen) -> float:
    """Return the part of the highest field that is a small part of a line's width."""
    highest = max(abs(float(seen.field[-1])), abs(float(seen.field[0])), np.finfo(float).tiny)
    width = narrowest_width(point.species) or float(np.median(np.diff(seen.field)))
    return _FREQUENCY_STEP * width / highest


def _difference(problem: Problem, view: View, point: Point, seen: Seen, sides: Sequence[Trace]) -> Array:
    above, below = (
        problem.signals.total(point.species, trace, point.sample, seen.field, view.stage) for trace in sides
    )
    return above - below


def combined(noise: float, field: float) -> float:
    """Quadrature sum of independent standard uncertainties (JCGM 100:2008, 5.1.2)."""
    return math.hypot(noise, field)


def tied_slopes(problem: Problem, free: Array) -> dict[str, Array]:
    """Derivative of every varied or tied parameter by the varied ones, each of shape (k,)."""
    order = {name: k for k, name in enumerate(problem.names)}
    out = {name: row for name, row in zip(problem.names, np.eye(len(order)), strict=True)}
    for name, partials in problem.ties.gradient(problem.values(free)).items():
        out[name] = np.zeros(len(order))
        for inner, part in partials.items():
            if inner in order:
                out[name][order[inner]] += part
    return out


def budget_of(problem: Problem, free: Array, spread: Covariances) -> dict[str, dict[str, float]]:
    """How much of each uncertainty is what, in the units of the job.

    Returns
    -------
    mapping of name -> {source: standard uncertainty}
        "noise" as if it were white, "correlation and misfit" what widens it beyond that, "field
        axis" and "frequency", and "angle" where one has an uncertainty; their quadrature sum is the
        parameter's uncertainty.
    """
    out = {}
    for name, slope in tied_slopes(problem, free).items():
        noise, _ = _parts(slope, spread)
        if noise is None:
            continue
        white = float(slope @ spread.white @ slope)
        # Correlation can narrow as well: then the noise part is what it is, and nothing is added.
        parts = {"noise": min(math.sqrt(white), noise), "correlation and misfit": math.sqrt(max(noise**2 - white, 0.0))}
        for source in dict.fromkeys(("field axis", "frequency", *spread.shift_sources)):
            rows = [row for row, kind in zip(spread.field_shifts, spread.shift_sources, strict=True) if kind == source]
            parts[source] = math.sqrt(sum(float(slope @ row) ** 2 for row in rows))
        parameter = problem.parameters[name]
        out[name] = {source: abs(parameter.to_job(value)) for source, value in parts.items()}
    return out


def reported_values(
    problem: Problem, free: Array, spread: Covariances | None, at_limit: NDArray[np.bool_]
) -> dict[str, Value]:
    """Every parameter of the model with its uncertainty, in the units of the job."""
    values = problem.values(free)
    slopes = tied_slopes(problem, free)
    order = {name: k for k, name in enumerate(problem.names)}
    out = {}
    for name, parameter in problem.parameters.items():
        value = values.get(name, parameter.value)
        parts = _parts(slopes.get(name, np.zeros(len(order))), spread)
        limited = name in order and bool(at_limit[order[name]])
        shown = [None if p is None else abs(parameter.to_job(p)) for p in parts]
        out[name] = Value(
            value=parameter.to_job(value),
            uncertainty=None if None in shown else combined(*shown),
            uncertainty_noise=shown[0],
            uncertainty_field=shown[1],
            unit=parameter.unit,
            varied=name in order,
            at_limit=limited,
            tied=name in problem.ties.names,
            start=parameter.to_job(parameter.value),
        )
    return out


def _parts(slope: Array, spread: Covariances | None) -> tuple[float | None, float | None]:
    """Standard uncertainties of a linear combination; None when it has none or they are not known."""
    moving = slope != 0
    if spread is None or not moving.any() or not spread.known[moving].all():
        return None, None
    noise, field = (math.sqrt(max(float(slope @ c @ slope), 0.0)) for c in (spread.noise, spread.field))
    if not (math.isfinite(noise) and math.isfinite(field)):
        return None, None
    return noise, field


def fractions_of(
    species: Sequence[tuple[str, float]], problem: Problem, free: Array, spread: Covariances | None
) -> Mapping[str, Value]:
    """Relative numbers of spins, summing to 1, with uncertainties by linear propagation.

    Parameters
    ----------
    species : sequence of (name, amount)
    """
    total = sum(amount for _, amount in species)
    if total == 0:
        return {}
    moving = tied_slopes(problem, free)
    slopes = [moving.get(f"{name}.amount", np.zeros(len(problem.names))) for name, _ in species]
    whole = np.sum(slopes, axis=0)
    out = {}
    for (name, amount), slope in zip(species, slopes, strict=True):
        change = slope / total - amount / total**2 * whole
        noise, field = _parts(change, spread)
        both = None if noise is None or field is None else combined(noise, field)
        out[name] = Value(amount / total, both, noise, field, varied=bool(np.any(change)))
    return out
