"""Other signs and other orders of axes than a search from nowhere has come down to.

A descent cannot carry a component of A, or D, through zero where that costs it what it has gained, nor exchange two
components: each choice of signs and axes has a minimum of its own, many of them nearly as good as the best.  A
start that means something has chosen (`spinfit.fitting.signs`); where it does not, all are tried here.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from spinfit.fitting.residuals import Problem, Progress, View
from spinfit.fitting.signs import flippable, flipped, per_point, rise_at
from spinfit.fitting.solve import Descent, Goal, descend

Array = NDArray[np.float64]

# Rounds, each from the best of the one before, and descents in each.
_ROUNDS, _TRIED = 3, 4
# By first order in all parameters, in chi-squared per point: what is this much worse is not worth a descent.
_HOPELESS = 400.0
# Another choice must be better by this much; a tie leaves things as they are.
_BETTER = 0.1


def best_signs(
    problem: Problem, view: View, descent: Descent, *, goal: Goal, progress: Progress | None = None
) -> Descent:
    """Try other signs of energies, and other orders of the axes of hyperfine tensors, and keep what fits best.

    Parameters
    ----------
    descent : Descent
        Where a search ended.
    goal : Goal
        Of the descents that are tried.
    """
    for _ in range(_ROUNDS):
        jacobian = problem.jacobian(descent.point, view) if descent.jacobian is None else descent.jacobian
        promising = []
        for number, other in enumerate(others(problem, descent.point.free)):
            rise = rise_at(problem, view, descent.point, jacobian, other)
            if rise < _HOPELESS:
                promising.append((rise, number, other))
        best = descent
        for _, _, other in sorted(promising, key=lambda item: item[:2])[:_TRIED]:
            again = descend(problem, view, other, goal=goal, progress=progress)
            if again.converged and again.point.chi2 < best.point.chi2 - _BETTER * per_point(view, best.point):
                best = again
        if best is descent:
            break
        descent = best
    return descent


def others(problem: Problem, free: Array) -> Iterator[Array]:
    """Yield values, shape (k,), with signs of energies turned round, one by one and by tensors, and axes of A renamed.

    Limits hold: what lies outside is left out.
    """
    tensors: dict[str, list[int]] = {}
    for k, name in enumerate(problem.names):
        if problem.parameters[name].kind == "energy" and flippable(problem, k) and free[k] != 0:
            tensors.setdefault(_home(name), []).append(k)
    for home, several in tensors.items():
        choices = [[k] for k in several] + ([several] if len(several) > 1 else [])
        for which in choices:
            other = flipped(problem, free, np.array(which, dtype=np.intp))
            if other is not None:
                yield other
        if home.endswith(".A") and len(several) == 3:
            for order in itertools.permutations(several):
                other = free.copy()
                other[several] = free[list(order)]
                inside = bool(np.all((other >= problem.lower) & (other <= problem.upper)))
                if list(order) != several and inside:
                    yield other


def _home(name: str) -> str:
    """Return the tensor that a parameter belongs to; D and E of a spin are one."""
    head, _, last = name.rpartition(".")
    return f"{head}.zero_field" if last in ("D", "E") else f"{head}.{last.partition('_')[0]}"
