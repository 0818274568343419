"""From a rough start to the pattern of a crystal's lines.

Starts around the given one are compared by how well their levels fit the measured fields: at each
field the gaps of all pairs of levels are compared with h nu, which takes one diagonalisation a line and
no search for resonances.  The best are followed with every line assigned to a resonance
(`spinfit.fitting.positions`), at first with a large scatter, then with what the lines themselves show.

The measure for all of this is the likelihood of a mixture: a line is a normal deviate about its
resonance or, one time in ten, belongs to nothing and may lie anywhere in the range.  So a few lines of
something else, or misread ones, neither lead the search away nor decide between its ends.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray
from scipy.stats import qmc

from spinfit.errors import InputError
from spinfit.fitting.assignment import distances
from spinfit.fitting.positions import LineProblem, State

Array = NDArray[np.float64]

# Starts that are compared, and those of them that are followed.
_SEEDS, _FOLLOWED = 256, 5
# How far seeds lie from the start: numbers and angles in typical steps, energies by a factor.
_SPAN, _FACTOR = 8.0, 1.8
# mT: scatter with which the following of a start begins at the most, and the smallest there is.
_COARSE, _FINEST = 20.0, 1e-6
# Scatters at which starts are compared, mT.
_COMPARED = (20.0, 6.0, 2.0, 0.6)
# Share of lines that may belong to nothing.
_STRAY = 0.1
_ROUNDS = 12
# In log-likelihood: ends this close are one.
_SAME = 0.01
# Starts closer than this many typical steps in every parameter lead to the same place.
_ALIKE = 1.5


def mixture(residual: Array, scatter: float, span: float) -> float:
    """Log-likelihood of residuals (mT, infinite for lines without a partner) as normal deviates with strays.

    Parameters
    ----------
    scatter : float
        mT.
    span : float
        mT; the range in which a line that belongs to nothing may lie.
    """
    normal = np.exp(-0.5 * (residual / scatter) ** 2) / (scatter * math.sqrt(2 * math.pi))
    return float(np.sum(np.log((1 - _STRAY) * normal + _STRAY / span)))


def likeliest_scatter(residual: Array, span: float, varied: int) -> tuple[float, float]:
    """Return the scatter that makes a mixture likeliest, mT, and the log-likelihood there.

    The scatter counts the degrees of freedom that were used up.
    """
    share = max(residual.size - varied, 1) / residual.size
    grown = np.abs(residual) / math.sqrt(share)
    least = max(_FINEST, 1e-7 * span)
    grid = np.geomspace(least, max(span, 2 * least), 120)
    values = [mixture(grown, scatter, span) for scatter in grid]
    best = int(np.argmax(values))
    return float(grid[best]), values[best]


class LineSearch:
    """The likeliest pattern that can be reached from a start."""

    def __init__(self, lines: LineProblem) -> None:
        self.lines = lines
        fields = np.concatenate([table.field for table in lines.problem.job.lines])
        self.span = max(float(np.ptp(fields)), 10.0)

    def run(self, *, wide: bool) -> tuple[State, float, bool]:
        """Find the pattern.

        Parameters
        ----------
        wide : bool
            Whether other starts around the given one are tried as well.

        Returns
        -------
        state : State
        common : float
            Scatter of the lines, mT.
        converged : bool
        """
        starts = self._seeds() if wide else [(self.lines.problem.start, _COARSE)]
        best, highest = None, -math.inf
        for start, scatter in starts:
            found = self._followed(start, scatter)
            if found is None:
                continue
            _, height = likeliest_scatter(_stray(found[0]), self.span, start.size)
            if abs(height - highest) < _SAME:
                break  # two different starts ended at the same place
            if height > highest:
                best, highest = found, height
        if best is None:
            raise InputError("the model has no line at the start", "change g or D", place="species")
        return best

    def _seeds(self) -> list[tuple[Array, float]]:
        """The start and the best of many around it, each with the scatter at which it is best."""
        draws = [self.lines.problem.start, *self._draws()]
        compared = []
        for number, free in enumerate(draws):
            try:
                # The start itself is as good as its neighbours unless they are clearly better.
                compared.append((*self._promise(free), -number, free))
            except InputError:
                continue
        if not compared:
            return [(self.lines.problem.start, _COARSE)]
        compared.sort(key=lambda item: (-item[0], -item[2]))
        kept: list[tuple[Array, float]] = []
        for _, scatter, _, free in compared:
            if all(np.max(np.abs(free - other) / self.lines.steps) > _ALIKE for other, _ in kept):
                kept.append((free, scatter))
            if len(kept) == _FOLLOWED:
                break
        if not any(free is self.lines.problem.start for free, _ in kept):
            kept.append((self.lines.problem.start, _COARSE))
        return kept

    def _promise(self, free: Array) -> tuple[float, float]:
        """Return how likely the measured fields are at some values, and at which scatter."""
        species, sample, tables = self.lines.problem.model(free)
        pairs = [distances(species, sample, table) for table in tables]
        best = (-math.inf, _COARSE)
        for scatter in _COMPARED:
            nearest = np.concatenate([np.sqrt(np.min((d / scatter) ** 2 + cost, axis=1)) for d, cost in pairs])
            best = max(best, (mixture(nearest * scatter, scatter, self.span), scatter))
        return best

    def _draws(self) -> list[Array]:
        """Points around the start, always the same; corrections of axes stay where they are."""
        problem = self.lines.problem
        moved = [k for k, name in enumerate(problem.names) if not name.endswith(("field_offset", "field_scale"))]
        if not moved:
            return []
        unit = qmc.Sobol(len(moved), scramble=True, rng=np.random.default_rng(1)).random(_SEEDS) * 2 - 1
        out = np.tile(problem.start, (_SEEDS, 1))
        for column, k in zip(unit.T, moved, strict=True):
            energy = problem.parameters[problem.names[k]].kind == "energy" and problem.start[k] != 0
            if energy:
                out[:, k] = problem.start[k] * _FACTOR**column
            else:
                out[:, k] = problem.start[k] + _SPAN * self.lines.steps[k] * column
        return list(np.clip(out, problem.lower, problem.upper))

    def _followed(self, start: Array, scatter: float) -> tuple[State, float, bool] | None:
        """Descend with a scatter that shrinks to what the lines themselves show."""
        common, free, found = scatter, start, None
        for _ in range(_ROUNDS):
            try:
                state, converged = self.lines.descend(free, np.full(self.lines.given.size, common))
            except InputError:
                return found
            free = state.free
            shown, _ = likeliest_scatter(_stray(state), self.span, free.size)
            found = (state, shown, converged)
            if shown > 0.7 * common:
                break
            common = max(shown, 0.2 * common)
        return found


def _stray(state: State) -> Array:
    """Residuals, mT; infinite where a line has no partner."""
    return np.where(state.free_lines, np.inf, state.residual)
