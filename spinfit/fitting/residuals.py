"""Residuals of a model over any number of traces, with what is linear solved inside.

Of each trace the scale, the polynomial baseline and the scale of an empty-tube background enter
linearly.  They are not handed to the optimiser but solved at every step (variable projection,
G. H. Golub, V. Pereyra, SIAM J. Numer. Anal. 10, 413 (1973), from memory): the residual is what of the trace
lies outside the space that model, background and baseline span.  Its Jacobian is the model's,
projected the same way (L. Kaufman, BIT 15, 49 (1975), from memory); at the minimum the inverse of its normal
matrix is the covariance of the parameters with all linear coefficients left free, the Schur
complement of the full normal matrix.

Everything is weighted by the noise of its trace, so that residuals count standard deviations.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Collection, Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from spinfit.errors import InputError
from spinfit.fitting.baseline import known_columns, penalty_rows, removing
from spinfit.fitting.columns import STEP, exact_changes, move
from spinfit.fitting.data import Job, Trace
from spinfit.fitting.noise import noise_level
from spinfit.fitting.parameters import Binding, Parameter, expand_vary
from spinfit.fitting.signals import Signals, Simulate, Stage, conditions, narrowest_width
from spinfit.fitting.smoothing import gaussian
from spinfit.fitting.ties import compile_ties
from spinfit.species import Species
from spinfit.sweep import Sample

Array = NDArray[np.float64]

# A finite-difference step should move the signal by this part of its largest value: small enough for
# the curvature (half of it is the error) and far above the engine's own error.
_STEP_EFFECT = 0.02
# Beyond these the step is taken again.
_STEP_WINDOW = (0.004, 0.08)
# The engine's tolerance while the size of such a step is sought.
_TRIED_AT = 1e-2
# Parameters whose columns need no difference of simulations.
_KNOWN_COLUMNS = (".amount", ".field_offset", ".field_scale", ".phase")
# Half the distance of the two sides of a derivative with respect to the field, in narrowest widths.
_FIELD_STEP = 0.02
# Points to a peak-to-peak width that a broadened trace keeps.
_POINTS_PER_WIDTH = 6.0


@dataclass(frozen=True, eq=False)
class Seen:
    """One trace as a stage of the fit sees it.

    Attributes
    ----------
    field : ndarray, shape (n,)
        As in the file, mT.
    signal : ndarray, shape (n,)
        Weighted: divided by `noise`.
    noise : float, or ndarray of shape (n,)
        Of one point, in the signal's unit; of each point where a robust loss weighs them.
    known : ndarray, shape (n, q)
        Weighted background and baseline columns.
    penalty : ndarray, shape (m, q)
        Of a smooth baseline, weighted; no rows otherwise.
    basis : ndarray, shape (n, q')
        1 - basis basis' takes the known columns away: orthonormal where they have no penalty.
    rest : ndarray, shape (n,)
        The signal without what `basis` takes away.
    weight : ndarray, shape (n,), or None
        Of each point, from a robust loss; None when all count alike.
    deviation : ndarray, shape (n,), or None
        Standardised residuals of a robust fit whose pseudo-values the signal holds; else None.
    """

    field: Array
    signal: Array
    noise: float | Array
    known: Array
    penalty: Array
    basis: Array
    rest: Array
    weight: Array | None = None
    deviation: Array | None = None


@dataclass(frozen=True, eq=False)
class View:
    """All traces as one stage of the fit sees them."""

    seen: tuple[Seen, ...]
    stage: Stage

    @property
    def points(self) -> int:
        return sum(one.field.size for one in self.seen)

    @property
    def linear(self) -> int:
        """Number of linear coefficients: a scale for each trace, backgrounds, what baselines amount to."""
        return sum(1 + round(float(np.sum(one.basis**2))) for one in self.seen)


@dataclass(frozen=True, eq=False)
class Point:
    """The model at one set of values.

    Attributes
    ----------
    free : ndarray, shape (k,)
        The varied parameters, internal units.
    signals : tuple of ndarray
        Sum of amount times part, for each trace, unscaled and unweighted.
    scales : tuple of float
    residual : ndarray, shape (points,)
        Weighted, all traces one after the other.
    chi2 : float
    """

    free: Array
    species: tuple[Species, ...]
    sample: Sample
    traces: tuple[Trace, ...]
    signals: tuple[Array, ...]
    scales: tuple[float, ...]
    residual: Array
    chi2: float


def seen_of(trace: Trace, field: Array, signal: Array, background: Array | None, noise: float | Array) -> Seen:
    """One trace, or what a stage has made of it, with its weights (see `Seen` for the shapes)."""
    known = known_columns(trace, field, background) / np.reshape(noise, (-1, 1))
    # What the penalty lets expect of a background does not depend on what becomes of single points.
    penalty = penalty_rows(trace, field.size) / float(np.min(noise))
    basis = removing(known, penalty)
    weighted = signal / noise
    return Seen(field, weighted, noise, known, penalty, basis, weighted - basis @ (basis.T @ weighted))


def full_view(traces: Sequence[Trace], noises: Sequence[float], tolerance: float) -> View:
    """Every used point of every trace as it was measured."""
    seen = []
    for trace, noise in zip(traces, noises, strict=True):
        background = None if trace.background is None else trace.background[trace.used]
        seen.append(seen_of(trace, trace.field[trace.used], trace.signal[trace.used], background, noise))
    return View(tuple(seen), Stage(0.0, tolerance))


def broadened_view(traces: Sequence[Trace], noises: Sequence[float], broadening: float, tolerance: float) -> View:
    """The traces convolved with a Gaussian, on as many points as that leaves meaning to.

    Parameters
    ----------
    broadening : float
        Peak-to-peak width of the derivative of the Gaussian, mT: its standard deviation is half of it.
    """
    seen = []
    for trace, noise in zip(traces, noises, strict=True):
        field, signal = trace.field[trace.used], trace.signal[trace.used]
        step = float(np.median(np.diff(field)))
        even = np.linspace(field[0], field[-1], max(8, int((field[-1] - field[0]) / step) + 1))
        spacing = even[1] - even[0]
        sigma = broadening / 2 / spacing
        count = int(max(8, min(even.size, _POINTS_PER_WIDTH * (field[-1] - field[0]) / broadening)))
        kept = np.linspace(field[0], field[-1], count)
        # Points deep inside an excluded stretch would be the interpolation's, not the trace's.
        inside = field[np.clip(np.searchsorted(field, kept), 1, field.size - 1)]
        before = field[np.clip(np.searchsorted(field, kept), 1, field.size - 1) - 1]
        kept = kept[(inside - before) < max(broadening, 3 * step)]

        def smooth(
            values: Array, field: Array = field, even: Array = even, sigma: float = sigma, kept: Array = kept
        ) -> Array:
            return np.interp(kept, even, _convolved(np.interp(even, field, values), sigma))

        background = None if trace.background is None else smooth(trace.background[trace.used])
        averaged = noise / math.sqrt(max(2 * math.sqrt(math.pi) * sigma, 1.0))
        seen.append(seen_of(trace, kept, smooth(signal), background, averaged))
    return View(tuple(seen), Stage(broadening, tolerance))


def _convolved(values: Array, sigma: float) -> Array:
    """Gaussian smoothing that leaves a straight line alone: ends are continued by point reflection."""
    pad = int(min(values.size - 1, math.ceil(4 * sigma)))
    if pad < 1:
        return values
    before = 2 * values[0] - values[pad:0:-1]
    after = 2 * values[-1] - values[-2 : -pad - 2 : -1]
    longer = np.concatenate((before, values, after))
    return gaussian(longer, sigma, mode="nearest")[pad : pad + values.size]


class Problem:
    """A job made ready for an optimiser.

    Parameters
    ----------
    job : Job
    simulate : callable
        As `spinfit.spectrum.simulate`.

    Attributes
    ----------
    parameters : dict of name -> Parameter
    names : tuple of str
        The varied parameters; `free` arrays follow this order.
    lower, upper : ndarray, shape (k,)
        Limits, internal units, infinite where there are none.
    start : ndarray, shape (k,)
    noises : tuple of float
        Of each trace, from the trace itself.
    evaluations : int

    Raises
    ------
    InputError
        For names the model does not have, ties that make no sense, limits that exclude the start.
    """

    def __init__(self, job: Job, simulate: Simulate) -> None:
        self.job = job
        self.binding = Binding(job.species, job.sample, (*job.traces, *job.lines), units=job.units)
        self.parameters: dict[str, Parameter] = self.binding.parameters
        self.names = expand_vary(job.vary, self.parameters)
        self.ties = compile_ties(job.ties, self.parameters, varied=self.names)
        self.start = np.array([self.parameters[name].value for name in self.names])
        limits = [self._limits(name) for name in self.names]
        self.lower = np.array([low for low, _ in limits])
        self.upper = np.array([high for _, high in limits])
        self.noises = tuple(noise_level(trace.signal, trace.used) for trace in job.traces)
        self.signals = Signals(simulate)
        self.evaluations = 0
        self._steps = np.array([0.01 * self.parameters[name].scale for name in self.names])
        self._tried = [False] * len(self.names)

    def _limits(self, name: str) -> tuple[float, float]:
        parameter = self.parameters[name]
        low, high = self.job.limits.get(name, (-math.inf, math.inf))
        if not low < high:
            raise InputError(
                "the lower limit is not below the upper one", "write [low, high]", place=f"fit.limits.{name}"
            )
        if not low <= parameter.value <= high:
            unit = f" {parameter.unit}" if parameter.unit else ""
            shown = [f"{parameter.to_job(v):g}" for v in (parameter.value, low, high)]
            raise InputError(
                f"{name} starts at {shown[0]}{unit}, outside its limits {shown[1]} to {shown[2]}{unit}",
                "start inside the limits or widen them",
                place=f"fit.limits.{name}",
            )
        return max(low, parameter.hard_limits[0]), min(high, parameter.hard_limits[1])

    def tolerance(self, error_to_noise: float) -> float:
        """The engine's tolerance that keeps its error below a part of every trace's noise."""
        allowed = 1.0
        for trace, noise in zip(self.job.traces, self.noises, strict=True):
            kept = trace.signal[trace.used]
            largest = float(np.abs(kept - np.median(kept)).max()) if kept.size else 0.0
            if largest > 0:
                allowed = min(allowed, error_to_noise * noise / largest)
        return allowed

    def values(self, free: Array) -> dict[str, float]:
        """Varied and tied parameters by name, internal units."""
        return self.ties.apply(dict(zip(self.names, map(float, free), strict=True)))

    def model(self, free: Array) -> tuple[tuple[Species, ...], Sample, tuple[Trace, ...]]:
        """Species, sample and traces with the values put in."""
        return self.binding.apply(self.values(free))

    def evaluate(self, free: Array, view: View) -> Point:
        """Simulate every trace and solve for what is linear."""
        self.evaluations += 1
        species, sample, traces = self.model(free)
        signals, scales, residuals = [], [], []
        for trace, seen in zip(traces, view.seen, strict=True):
            signal = self.signals.total(species, trace, sample, seen.field, view.stage)
            shape = _projected(signal / seen.noise, seen.basis)
            size = float(shape @ shape)
            scale = float(shape @ seen.rest) / size if size > 0 else 0.0
            signals.append(signal)
            scales.append(scale)
            residuals.append(seen.rest - scale * shape)
        residual = np.concatenate(residuals)
        free = np.array(free, dtype=float)
        chi2 = float(residual @ residual)
        return Point(free, species, sample, traces, tuple(signals), tuple(scales), residual, chi2)

    def jacobian(
        self, point: Point, view: View, *, central: bool = False, wanted: Collection[int] | None = None
    ) -> Array:
        """Projected Jacobian of the residual, shape (points, k).

        Columns follow from the engine's own derivatives; where it cannot tell, differences of
        simulations take their place.  Forward differences lead a descent well; the uncertainties want
        `central` ones, whose error does not look like a change of width.  Columns that are not `wanted`
        are 0.
        """
        wanted = range(len(self.names)) if wanted is None else wanted
        columns = np.zeros((len(self.names), view.points))
        followed = self._followed(point, view, wanted)
        for k in wanted:
            changes = self._column(point, view, k, central) if followed[k] is None else followed[k]
            columns[k] = self.projected_change(point, view, changes)
        return columns.T

    def column(self, point: Point, view: View, index: int) -> Array:
        """One column of the projected Jacobian, shape (points,)."""
        changes = self._followed(point, view, [index])[index]
        changes = self._column(point, view, index, False) if changes is None else changes
        return self.projected_change(point, view, changes)

    def _followed(self, point: Point, view: View, wanted: Collection[int]) -> list[list[Array | None] | None]:
        """Return d(signal) of every trace for each parameter as the engine knows it, None where it does not."""
        scales = [self.parameters[name].scale for name in self.names]
        moved = [
            move(self.model, point.free, k, self._inside(point.free[k], STEP * scale, k)) if k in wanted else None
            for k, scale in enumerate(scales)
        ]
        fields = [seen.field for seen in view.seen]
        model = (point.species, point.sample, point.traces)
        return exact_changes(self.signals, *model, fields, view.stage, moved, scales)

    def projected_change(self, point: Point, view: View, changes: Sequence[Array | None]) -> Array:
        """Carry changes of the traces' signals to the change of the projected residual.

        Parameters
        ----------
        changes : sequence of ndarray or None
            d(signal) of each trace, unscaled and unweighted; None where nothing changes.
        """
        pieces = []
        for seen, signal, scale, change in zip(view.seen, point.signals, point.scales, changes, strict=True):
            if change is None:
                pieces.append(np.zeros(seen.field.size))
                continue
            shape = _projected(signal / seen.noise, seen.basis)
            size = float(shape @ shape)
            column = _projected(change / seen.noise, seen.basis)
            if size > 0:
                column = column - shape * (float(shape @ column) / size)
            pieces.append(-scale * column)
        return np.concatenate(pieces)

    def fitted_basis(self, point: Point, view: View) -> list[Array]:
        """For each trace an orthonormal basis of scale, background and baseline, shape (n, q + 1)."""
        out = []
        for seen, signal in zip(view.seen, point.signals, strict=True):
            shape = _projected(signal / seen.noise, seen.basis)
            size = float(np.linalg.norm(shape))
            out.append(np.column_stack((seen.basis, shape / size)) if size > 0 else seen.basis)
        return out

    def _column(self, point: Point, view: View, index: int, central: bool) -> list[Array | None]:
        """Derivative of every trace's signal by one free parameter, by finite differences.

        The step corrects itself until it moves the signal by about 2 %, within the parameter's
        scale, and is remembered.
        """
        largest = self.parameters[self.names[index]].scale
        self._try_step(point, view, index)
        for _ in range(4):
            step = float(np.clip(self._steps[index], 1e-7 * largest, largest))
            step = self._inside(point.free[index], step, index)
            step, changes, effect = self._one_side(point, view, index, step)
            wanted = abs(step) * (_STEP_EFFECT / effect if effect > 0 else 100.0)
            self._steps[index] = float(np.clip(wanted, abs(step) / 100, min(abs(step) * 100, largest)))
            if _STEP_WINDOW[0] <= effect <= _STEP_WINDOW[1] or abs(step) == self._steps[index]:
                break
        back = point.free[index] - step
        if central and self.lower[index] <= back <= self.upper[index]:
            try:
                behind, _ = self._difference(point, view, index, -step)
            except InputError:  # the model ends there: one side has to do
                return changes
            changes = [a if a is None or b is None else (a + b) / 2 for a, b in zip(changes, behind, strict=True)]
        return changes

    def _try_step(self, point: Point, view: View, index: int) -> None:
        """Let the step of a parameter's first difference find its size where a simulation is cheap."""
        if self._tried[index]:
            return
        self._tried[index] = True
        if view.stage.tolerance >= _TRIED_AT or self.names[index].endswith(_KNOWN_COLUMNS):
            return
        cheap = replace(view, stage=replace(view.stage, tolerance=_TRIED_AT))
        self._column(self.evaluate(point.free, cheap), cheap, index, False)

    def _one_side(self, point: Point, view: View, index: int, step: float) -> tuple[float, list[Array | None], float]:
        """Return the step and the difference over it, on the other side where the model ends on this one."""
        try:
            return step, *self._difference(point, view, index, step)
        except InputError:
            if not self.lower[index] <= point.free[index] - step <= self.upper[index]:
                raise
            return -step, *self._difference(point, view, index, -step)

    def _inside(self, value: float, step: float, index: int) -> float:
        """Turn or shorten a step that would leave the limits."""
        if value + step <= self.upper[index]:
            return step
        if value - step >= self.lower[index]:
            return -step
        room = self.upper[index] - value, value - self.lower[index]
        return 0.5 * room[0] if room[0] > room[1] else -0.5 * room[1]

    def _difference(self, point: Point, view: View, index: int, step: float) -> tuple[list[Array | None], float]:
        """Return the difference quotients and the largest change relative to the largest signal."""
        free = point.free.copy()
        free[index] += step
        step = free[index] - point.free[index]
        species, sample, traces = self.model(free)
        same_model = species == point.species and sample == point.sample
        changes: list[Array | None] = []
        effect = 0.0
        for new, old, seen, signal in zip(traces, point.traces, view.seen, point.signals, strict=True):
            change = self._change(point, new, old, seen, view.stage, signal, None if same_model else (species, sample))
            if change is not None:
                size = float(np.abs(signal).max())
                effect = max(effect, float(np.abs(change).max()) / size if size > 0 else 0.0)
                change = change / step
            changes.append(change)
        return changes, effect

    def _change(
        self,
        point: Point,
        new: Trace,
        old: Trace,
        seen: Seen,
        stage: Stage,
        signal: Array,
        model: tuple[tuple[Species, ...], Sample] | None,
    ) -> Array | None:
        """Change of one trace's signal; None when there is none."""
        shifted = (new.field_offset, new.field_scale) != (old.field_offset, old.field_scale)
        if model is None and conditions(new) == conditions(old):
            if not shifted:
                return None
            move = (new.field_scale - old.field_scale) * seen.field + (new.field_offset - old.field_offset)
            return self.slope(point, old, seen, stage) * move
        if model is None and conditions(replace(new, phase=old.phase)) == conditions(old) and not shifted:
            # cos(phase) chi'' + sin(phase) chi': a quarter turn on is the derivative, exactly.
            quarter = replace(old, phase=old.phase + math.pi / 2)
            turned = self.signals.total(point.species, quarter, point.sample, seen.field, stage)
            return turned * (new.phase - old.phase)
        species, sample = (point.species, point.sample) if model is None else model
        return self.signals.total(species, new, sample, seen.field, stage) - signal

    def slope(self, point: Point, trace: Trace, seen: Seen, stage: Stage) -> Array:
        """Derivative of a trace's unscaled signal with respect to the true field, shape (n,)."""
        width = math.hypot(narrowest_width(point.species), stage.broadening) or float(np.median(np.diff(seen.field)))
        return self.signals.slope(point.species, trace, point.sample, seen.field, stage, _FIELD_STEP * width)

    def natural_steps(self, point: Point, view: View, jacobian: Array) -> Array:
        """Steps that change the residual by about a third of the model's size, shape (k,).

        They scale the optimiser's first step: about half a line width for whatever moves lines.
        """
        size = math.sqrt(max(_power(point, view), 1e-300))
        out = np.empty(len(self.names))
        for k, name in enumerate(self.names):
            effect = float(np.linalg.norm(jacobian[:, k]))
            largest = 20 * self.parameters[name].scale
            out[k] = min(size / (3 * effect), largest) if effect > 0 else self.parameters[name].scale
        return out

    def in_job_units(self, free: Array) -> Mapping[str, float]:
        """Varied parameters by name in the units of the job."""
        return {n: self.parameters[n].to_job(float(v)) for n, v in zip(self.names, free, strict=True)}


def _power(point: Point, view: View) -> float:
    """Sum of squares of the weighted, scaled model without what the baseline can take over."""
    total = 0.0
    for seen, signal, scale in zip(view.seen, point.signals, point.scales, strict=True):
        shape = scale * _projected(signal / seen.noise, seen.basis)
        total += float(shape @ shape)
    return total


def _projected(columns: Array, basis: Array) -> Array:
    return columns - basis @ (basis.T @ columns)


Progress = Callable[[int, float, Mapping[str, float]], object]
