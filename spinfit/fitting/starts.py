"""Where to begin, and how to get from there to the minimum.

A line that the start puts more than its own width away from where it is has no slope that points
there.  Broadening the trace and the model by the same Gaussian makes the two overlap; the minimum
of the broadened problem is near that of the sharper one, and so on down to the real widths
(`coarse_to_fine`).  When that fails too, candidates are drawn around the start, compared in the
broadened view, where a simulation is cheap, and the best of them followed down (`candidates`).
Draws are seeded: the same job tries the same candidates.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterator, Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray
from scipy.stats import qmc

from spinfit.errors import InputError
from spinfit.fitting.data import Trace
from spinfit.fitting.parameters import Parameter
from spinfit.fitting.residuals import Point, Problem, Progress, View, broadened_view
from spinfit.fitting.signals import narrowest_width
from spinfit.fitting.solve import Descent, Goal, descend
from spinfit.fitting.turning import analyse
from spinfit.units import g_of

Array = NDArray[np.float64]

# The first broadening is this part of the sweep; each next one is narrower by the factor.
WIDEST = 1 / 12
NARROWING = 2.5
# Of a broadened trace only positions are asked, not details.
COARSE_TOLERANCE = 1e-2
COARSE_GOAL = Goal(gain=0.3, evaluations=25)
_SCREENED = 64
_SEED = 20240229
# Engine error of a scan, in units of the noise.
_SCAN_ERROR = 0.3
# Scans of single parameters for another basin: points on either side, and how far the promise must go
# below the present chi-squared.
_SCAN_POINTS = 12
_PROMISE = 0.98
# Parameters that shape lines and do not move them: held while the view is broader than the lines.
_SHAPES = (".width.", ".spread.", ".phase")


def explained(point: Point, view: View) -> float:
    """Part of the traces' sum of squares, beyond the baseline, that the model explains; 0 to 1."""
    total = sum(float(seen.rest @ seen.rest) for seen in view.seen)
    return 1 - point.chi2 / total if total > 0 else 0.0


def broadenings(problem: Problem, free: Array, widest: float = WIDEST) -> list[float]:
    """Peak-to-peak widths from a part of the sweep down to the lines' own, mT."""
    species, _, traces = problem.model(free)
    span = max(float(np.ptp(trace.field[trace.used])) for trace in traces)
    end = max(narrowest_width(species), 3 * span / max(trace.field.size for trace in traces))
    out = []
    width = span * widest
    while width > 1.2 * end:
        out.append(width)
        width /= NARROWING
    return out


def shapes_of(names: Sequence[str]) -> NDArray[np.bool_]:
    """Which parameters shape lines without moving them."""
    return np.array([any(shape in f"{name}." or shape in name for shape in _SHAPES) for name in names], dtype=bool)


def coarse_to_fine(
    problem: Problem, start: Array, *, progress: Progress | None = None, widest: float = WIDEST
) -> Array:
    """Follow the minimum from a broadened trace and model to nearly the real ones.

    Returns
    -------
    free : ndarray, shape (k,)
        From where the descent at the real widths can begin.
    """
    free = start
    held = shapes_of(problem.names)
    for broadening in broadenings(problem, start, widest):
        view = broadened_view(problem.job.traces, problem.noises, broadening, COARSE_TOLERANCE)
        if view.points <= view.linear + free.size:
            continue
        fixed = held if not held.all() else np.zeros_like(held)
        free = descend(problem, view, free, goal=COARSE_GOAL, held=fixed, progress=progress).point.free
    return free


def reach_of(parameter: Parameter, wide: bool) -> tuple[str, float]:
    """How far candidates are drawn: ("add", distance) or ("times", factor)."""
    name = parameter.name
    if any(shape in name for shape in (".width.", ".spread.")) or name.endswith(".amount"):
        return "times", 2.0 if wide else 1.5
    if parameter.kind == "energy":
        return "times", 2.2 if wide else 1.3
    if parameter.kind == "angle":
        return "add", math.radians(45 if wide else 10)
    if ".g" in name and parameter.kind == "number":
        return "add", 0.17 if wide else 0.03
    return "add", (10 if wide else 3) * parameter.scale


def draws(problem: Problem, start: Array, count: int, *, wide: bool, seed: int = 0) -> Array:
    """Candidates around a start, shape (count, k), from a seeded Sobol sequence."""
    k = start.size
    unit = qmc.Sobol(k, scramble=True, rng=np.random.default_rng(_SEED + seed)).random(count) * 2 - 1
    out = np.empty((count, k))
    for column, name in enumerate(problem.names):
        parameter = problem.parameters[name]
        how, reach = reach_of(parameter, wide)
        if how == "times" and start[column] != 0:
            out[:, column] = start[column] * reach ** unit[:, column]
        else:
            distance = reach if how == "add" else 3 * parameter.scale
            out[:, column] = start[column] + distance * unit[:, column]
    return np.clip(out, problem.lower, problem.upper)


def tell(problem: Problem, best: Point, progress: Progress | None) -> None:
    """Report that a scan is under way; the best values are those from before it."""
    if progress is not None:
        progress(problem.evaluations, best.chi2, problem.in_job_units(best.free))


def candidates(
    problem: Problem, start: Array, *, wide: bool, keep: int = 4, progress: Progress | None = None
) -> list[Array]:
    """The best of many draws in a broadened view, each unlike the others, best first."""
    views = _screens(problem, start)
    if not views:
        return []
    found: list[tuple[float, int, Array]] = []
    tried = [start, *draws(problem, start, _SCREENED, wide=wide)]
    for number, free in enumerate(itertools.chain(tried, from_turning_points(problem, start))):
        for view in views:
            try:
                point = problem.evaluate(free, view)
            except InputError:  # the draw stands where the model has no meaning
                continue
            tell(problem, point, progress)
            found.append((point.chi2 / max(sum(float(s.rest @ s.rest) for s in view.seen), 1e-300), number, free))
    found.sort(key=lambda item: item[:2])
    spans = np.array([span_of(problem.parameters[n], v) for n, v in zip(problem.names, start, strict=True)])
    kept: list[Array] = []
    for _, _, free in found:
        if all(np.max(np.abs(free - other) / spans) > 1.0 for other in kept):
            kept.append(free)
        if len(kept) == keep:
            break
    return kept


def neighbours(problem: Problem, view: View, descent: Descent, *, progress: Progress | None = None) -> list[Array]:
    """Starts in other basins near a minimum, the most promising first.

    A weak feature far from the strong lines leaves several minima in the one parameter it depends
    on.  Each parameter that moves lines is scanned; all others follow to first order, by the Jacobian
    at the minimum, which is what keeps the strong lines in their places, and amounts exactly, since a
    species whose lines are misplaced may have lost all of its own.
    """
    if descent.jacobian is None:
        return []
    tolerance = max(view.stage.tolerance, min(problem.tolerance(_SCAN_ERROR), COARSE_TOLERANCE))
    view = replace(view, stage=replace(view.stage, tolerance=tolerance))
    best = problem.evaluate(descent.point.free, view)
    found: list[tuple[float, int, Array]] = []
    for index in map(int, np.flatnonzero(~shapes_of(problem.names) & ~amounts_of(problem.names))):
        for number, value in enumerate(_scan(problem, best.free[index], index)):
            try:
                chi2, free = _promise(problem, view, best, descent.jacobian, index, value)
            except InputError:  # the model has no meaning there
                continue
            tell(problem, best, progress)
            if chi2 < _PROMISE * best.chi2:
                found.append((chi2, 100 * index + number, free))
    found.sort(key=lambda item: item[:2])
    return [free for _, _, free in found[:2]]


def amounts_of(names: Sequence[str]) -> NDArray[np.bool_]:
    """Which parameters are amounts."""
    return np.array([name.endswith(".amount") for name in names], dtype=bool)


def _promise(
    problem: Problem, view: View, best: Point, jacobian: Array, index: int, value: float
) -> tuple[float, Array]:
    """Chi-squared, to first order, with one parameter moved and the others following; and where that is."""
    others = np.arange(best.free.size) != index
    furthest = 5 * np.array([problem.parameters[name].scale for name in problem.names])[others]
    free = best.free.copy()
    free[index] = value
    moved = best.residual + jacobian[:, index] * (value - best.free[index])
    step = _followed(jacobian[:, others], moved, furthest)
    # Other species stay where they are, so that they need not be simulated again.
    own = np.array([name.split(".")[0] == problem.names[index].split(".")[0] for name in problem.names])[others]
    free[others] += np.where(own, step, 0.0)
    free = np.clip(free, problem.lower, problem.upper)
    point = problem.evaluate(free, view)
    # Amounts enter linearly: their columns at the new place cost nothing and may differ altogether.
    there = jacobian.copy()
    for k in np.flatnonzero(amounts_of(problem.names)):
        there[:, k] = problem.column(point, view, int(k))
    step = _followed(there[:, others], point.residual, furthest)
    after = point.residual + there[:, others] @ step
    free[others] += step
    return float(after @ after), np.clip(free, problem.lower, problem.upper)


def _followed(jacobian: Array, residual: Array, furthest: Array) -> Array:
    """Least-squares step of bounded length in each parameter."""
    if jacobian.shape[1] == 0:
        return np.zeros(0)
    return np.clip(np.linalg.lstsq(jacobian, -residual, rcond=1e-6)[0], -furthest, furthest)


def _scan(problem: Problem, value: float, index: int) -> Array:
    """Values on either side of a best one, the reach of a rough start away at most."""
    how, reach = reach_of(problem.parameters[problem.names[index]], wide=False)
    unit = np.linspace(-1, 1, 2 * _SCAN_POINTS + 1)
    unit = unit[unit != 0]
    return value * reach**unit if how == "times" and value != 0 else value + reach * unit


def _screens(problem: Problem, start: Array) -> list[View]:
    widths = broadenings(problem, start)
    out = []
    for broadening in widths[:2]:
        view = broadened_view(problem.job.traces, problem.noises, broadening, COARSE_TOLERANCE)
        if view.points > view.linear + 1:
            out.append(view)
    return out


def span_of(parameter: Parameter, value: float) -> float:
    how, reach = reach_of(parameter, wide=False)
    return 0.3 * (reach if how == "add" else max(abs(value) * (reach - 1), parameter.scale))


def from_turning_points(problem: Problem, start: Array) -> Iterator[Array]:
    """Candidates whose g components lie at turning points of the first trace.

    In the derivative of an S = 1/2 powder pattern the extreme and the middle turning points lie at
    the principal values of g (F. K. Kneubuehl, J. Chem. Phys. 33, 1074 (1960)).
    """
    species = problem.job.species
    if len(species) != 1 or len(species[0].spins) != 1 or species[0].spins[0].S != 0.5 or species[0].nuclei:
        return
    prefix = f"{species[0].name}.g"
    components = [k for k, name in enumerate(problem.names) if name.startswith(prefix) and "tilt" not in name]
    fields, narrowest = turning_fields(problem.job.traces[0])
    if not components or len(fields) < len(components):
        return
    trace = problem.job.traces[0]
    g = [g_of(field, trace.frequency) for field in fields]
    width = [k for k, name in enumerate(problem.names) if name.endswith(".width.gaussian")]
    for chosen in itertools.combinations(g, len(components)):
        for order in itertools.permutations(chosen) if len(components) == 2 else (sorted(chosen),):
            free = start.copy()
            rank = np.argsort(np.argsort(start[components])) if len(components) == 3 else np.arange(len(components))
            free[components] = np.array(order)[rank]
            for k in width:
                free[k] = narrowest if narrowest else free[k]
            yield np.clip(free, problem.lower, problem.upper)


def turning_fields(trace: Trace, most: int = 6) -> tuple[list[float], float | None]:
    """True fields of the largest turning points, ascending, and the narrowest width, mT.

    For a derivative the crossings count as well: a principal value in the middle of the pattern
    shows as one.
    """
    field = trace.field[trace.used] * trace.field_scale + trace.field_offset
    if field.size < 8:
        return [], None
    found = analyse(field, trace.signal[trace.used], frequency=trace.frequency, detect=trace.detect)
    extrema = sorted((p for p in found.turning_points if p.kind != "crossing"), key=lambda p: -abs(p.height))[:most]
    crossings = [p for p in found.turning_points if p.kind == "crossing"][: most // 2]
    return sorted({p.field for p in (*extrema, *crossings) if p.field > 0}), found.narrowest
