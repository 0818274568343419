"""Fits of line positions: fields at which a crystal's lines stand against angle.

Each residual is a measured field less the calculated resonance field it is assigned to
(`spinfit.fitting.assignment`), divided by its uncertainty or, where the table gives none, by the
scatter that the fit itself finds.  Lines are assigned anew at every evaluation; how a rough start finds
the pattern is in `spinfit.fitting.line_search`.

Derivatives: a resonance field follows a parameter p as dB/dp = -(dG/dp) / (dG/dB), with G the gap of
the two levels; dG/dp at fixed field is taken by differences of exact eigenvalues.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import lmfit
import numpy as np
from numpy.typing import NDArray

from spinfit.errors import InputError
from spinfit.fitting.assignment import CAP, Calculated, assign, calculated_each, gaps
from spinfit.fitting.data import Lines
from spinfit.fitting.residuals import Problem, Progress
from spinfit.fitting.signals import true_field
from spinfit.fitting.solve import least_squares
from spinfit.species import Species
from spinfit.sweep import Sample

Array = NDArray[np.float64]
Indices = NDArray[np.intp]

# How far in typical steps a parameter is moved for a difference of eigenvalues.
_STEP = 1e-2
# rad by which a crystal is turned either way for a difference of eigenvalues.
_TURN = 1e-4
# A residual beyond this many times the scatter is an outlier: one normal line in 150 000.
OUTLIER = 4.5


@dataclass(frozen=True, eq=False)
class State:
    """The model at one set of values, with every line assigned.

    Attributes
    ----------
    residual : ndarray, shape (lines,)
        Measured less calculated, mT; of lines without a partner five times their scatter.
    lines : tuple of Calculated
        For each table the partner of each measured line (of a line without one, any).
    free_lines : ndarray of bool, shape (lines,)
        Lines without a partner.
    cost : float
        Sum of capped squares.
    """

    free: Array
    species: tuple[Species, ...]
    sample: Sample
    tables: tuple[Lines, ...]
    residual: Array
    lines: tuple[Calculated, ...]
    free_lines: NDArray[np.bool_]
    cost: float


class LineProblem:
    """A job of line positions made ready for an optimiser."""

    def __init__(self, problem: Problem, progress: Progress | None = None) -> None:
        self.problem, self.progress = problem, progress
        tables = problem.job.lines
        self.given = np.concatenate(
            [np.full(t.field.size, np.nan) if t.uncertainty is None else t.uncertainty for t in tables]
        )
        self.blocks = [
            slice(b - t.field.size, b) for b, t in zip(np.cumsum([t.field.size for t in tables]), tables, strict=True)
        ]
        self.evaluations = 0
        self.steps = np.array([problem.parameters[name].scale for name in problem.names])
        self._best = math.inf

    def scatter(self, common: float) -> Array:
        """Uncertainty of each line, mT, when those not given have `common`."""
        return np.where(np.isnan(self.given), common, np.maximum(self.given, 0.0))

    def evaluate(self, free: Array, scatter: Array) -> State:
        """Calculate every line and assign the measured ones."""
        self.evaluations += 1
        species, sample, tables = self.problem.binding.apply(self.problem.values(free))
        state = self._assigned(np.array(free), species, sample, tables, scatter)
        if self.progress is not None:
            self._best = min(self._best, state.cost)
            self.progress(self.evaluations, self._best, self.problem.in_job_units(state.free))
        return state

    def residual_of(self, species: tuple[Species, ...], state: State, scatter: Array) -> Array:
        """Residuals, mT, of other species with the rest of a state, assigned anew."""
        return self._assigned(state.free, species, state.sample, state.tables, scatter).residual

    def _assigned(
        self, free: Array, species: tuple[Species, ...], sample: Sample, tables: tuple[Lines, ...], scatter: Array
    ) -> State:
        residual, lines, lonely = np.empty(scatter.size), [], np.zeros(scatter.size, dtype=bool)
        every = calculated_each(species, sample, tables)
        for table, block, found in zip(tables, self.blocks, every, strict=True):
            which = assign(found, table, scatter[block])
            lonely[block] = which < 0
            if found.field.size == 0:
                raise InputError(
                    f"the model has no line below {1.25 * table.field.max():.4g} mT", "change g or D", place=table.name
                )
            lines.append(found.only(np.maximum(which, 0)))
            distance = true_field(table, table.field) - lines[-1].field
            residual[block] = np.where(which < 0, math.sqrt(CAP) * scatter[block], distance)
        cost = float(np.minimum((residual / scatter) ** 2, CAP).sum())
        return State(free, species, sample, tables, residual, tuple(lines), lonely, cost)

    def jacobian(self, state: State) -> Array:
        """Derivative of the residuals, mT over internal units, shape (lines, k)."""
        out = np.zeros((state.residual.size, state.free.size))
        for k in range(state.free.size):
            step = _STEP * self.steps[k]
            sides = []
            for sign in (1, -1):
                free = state.free.copy()
                free[k] = np.clip(free[k] + sign * step, self.problem.lower[k], self.problem.upper[k])
                sides.append((free[k], self._moved(state, free)))
            (high, above), (low, below) = sides
            out[:, k] = (above - below) / (high - low)
        out[state.free_lines] = 0.0
        return out

    def _moved(self, state: State, free: Array) -> Array:
        """Measured less calculated field at values close by, to first order in the field."""
        species, sample, tables = self.problem.binding.apply(self.problem.values(free))
        out = np.empty(state.residual.size)
        for table, block, which in zip(tables, self.blocks, state.lines, strict=True):
            gap = gaps(species, sample, table, which, np.arange(table.field.size))
            slope = np.where(np.abs(which.slope) > 1e-3, which.slope, np.inf)
            out[block] = true_field(table, table.field) - which.field + (gap - table.frequency) / slope
        return out

    def frequency_change(self, state: State) -> Array:
        """d(residual)/d(frequency), mT/MHz."""
        slopes = np.concatenate([which.slope for which in state.lines])
        return np.where(np.abs(slopes) > 1e-3, -1 / np.where(slopes == 0, np.inf, slopes), 0.0)

    def angle_change(self, state: State, number: int) -> Array:
        """d(residual)/d(angle) of the lines of one table, mT/rad, shape (lines of the table,)."""
        table, which = state.tables[number], state.lines[number]
        rows = np.arange(table.field.size)
        above, below = (
            gaps(state.species, state.sample, replace(table, angle=table.angle + turn), which, rows)
            for turn in (_TURN, -_TURN)
        )
        slope = np.where(np.abs(which.slope) > 1e-3, which.slope, np.inf)
        return (above - below) / (2 * _TURN) / slope

    def field_change(self, state: State) -> Array:
        """d(residual)/d(shift of the field axis): 1 for every line that has a partner."""
        return np.where(state.free_lines, 0.0, 1.0)

    def descend(self, start: Array, scatter: Array, *, kept: NDArray[np.bool_] | None = None, loss: str = "cauchy"):
        """Minimise from a start with lmfit; lines that are not `kept` do not count."""
        problem = self.problem
        kept = np.ones(scatter.size, dtype=bool) if kept is None else kept
        params = lmfit.Parameters()
        for k in range(start.size):
            low, high = ((limit - start[k]) / self.steps[k] for limit in (problem.lower[k], problem.upper[k]))
            params.add(f"p{k}", value=0.0, min=low, max=high)
        at: list[State] = []

        def free_of(p: lmfit.Parameters) -> Array:
            moved = start + np.array([p[f"p{k}"].value for k in range(start.size)]) * self.steps
            return np.clip(moved, problem.lower, problem.upper)

        def residual(p: lmfit.Parameters) -> Array:
            try:
                at[:] = [self.evaluate(free_of(p), scatter)]
            except InputError:
                if not at:
                    raise
                return np.full(int(kept.sum()), 10 * math.sqrt(CAP))
            return (at[0].residual / scatter)[kept]

        def jacobian(p: lmfit.Parameters) -> Array:
            free = free_of(p)
            if not np.array_equal(at[0].free, free):
                at[:] = [self.evaluate(free, scatter)]
            return (self.jacobian(at[0]) * self.steps / scatter[:, None])[kept]

        minimizer = lmfit.Minimizer(residual, params, calc_covar=False)
        result = least_squares(minimizer, jac=jacobian, loss=loss, ftol=1e-10, xtol=1e-9, gtol=1e-12, max_nfev=60)
        return self.evaluate(free_of(result.params), scatter), bool(result.success)


def kept_lines(state: State, scatter: Array) -> NDArray[np.bool_]:
    """Lines that are no outliers."""
    return ~state.free_lines & (np.abs(state.residual) <= OUTLIER * scatter)


def standard_scatter(residual: Array, kept: NDArray[np.bool_], varied: int) -> float:
    count = int(kept.sum())
    return float(np.sqrt(np.sum(residual[kept] ** 2) / max(count - varied, 1)))
