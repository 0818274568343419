"""Signs and names of axes that a trace does not determine, and which of them to report.

A powder pattern knows most components of a hyperfine or quadrupole tensor by their size: the other
sign of a single one moves its lines by a second-order amount, often below the noise.  On its way from a
rough start a descent may carry such a component through zero.  Which sign is then reported is a matter
of chance; here it is the sign that the start had, unless the other fits significantly better.

Likewise x, y and z of a powder's g tensor are names: they are given out as the start has them.
"""

from __future__ import annotations

import itertools
import re

import numpy as np
from numpy.typing import NDArray

from spinfit.errors import InputError
from spinfit.fitting.outcome import Note
from spinfit.fitting.residuals import Point, Problem, Progress, View
from spinfit.fitting.solve import Descent, Goal, descend
from spinfit.species import Species

Array = NDArray[np.float64]

# A flipped sign that changes chi-squared by less than this (2 standard deviations) fits as well.
SIGN_CHI2 = 4.0
# Among the many signs of single components one is told only by 3 standard deviations.
SINGLE_CHI2 = 9.0
# By first order in the other parameters a flip this much worse is not worth a descent.
_HOPELESS = 400.0
# These have a meaning of their own on either side of zero.
_CORRECTIONS = ("field_offset", "phase", "angle_zero")


def flippable(problem: Problem, index: int) -> bool:
    """Whether a varied parameter may have either sign: energies and tilts, not corrections of an axis."""
    parameter = problem.parameters[problem.names[index]]
    if parameter.kind not in ("energy", "angle") or parameter.name.rpartition(".")[2] in _CORRECTIONS:
        return False
    low, high = problem.lower[index], problem.upper[index]
    return bool(low < 0 < high)


def flipped(problem: Problem, free: Array, which: NDArray[np.intp]) -> Array | None:
    """Return the values with some signs turned round; None where a limit forbids it."""
    other = free.copy()
    other[which] *= -1
    return other if np.all((other >= problem.lower) & (other <= problem.upper)) else None


def rise_of(problem: Problem, view: View, point: Point, jacobian: Array, which: NDArray[np.intp]) -> float:
    """Rise of chi-squared, per point, when signs are turned round and the others follow to first order.

    Where the flip is a symmetry the columns of the Jacobian keep their span; elsewhere the refit only
    helps less than a descent would.  Infinite where the flipped model has no meaning.
    """
    other = flipped(problem, point.free, which)
    return float("inf") if other is None else rise_at(problem, view, point, jacobian, other)


def rise_at(problem: Problem, view: View, point: Point, jacobian: Array, other: Array) -> float:
    """Rise of chi-squared, per point, at other values when all parameters follow to first order."""
    try:
        there = problem.evaluate(other, view)
    except InputError:
        return float("inf")
    step = np.linalg.lstsq(jacobian, there.residual, rcond=1e-6)[0]
    after = there.residual - jacobian @ step
    return (float(after @ after) - point.chi2) / per_point(view, point)


def per_point(view: View, point: Point) -> float:
    return max(point.chi2 / max(view.points - view.linear - point.free.size, 1), 1e-12)


def restored(problem: Problem, view: View, descent: Descent, progress: Progress | None = None) -> Descent:
    """Turn back the signs that changed on the way and that the trace does not determine.

    All that changed are tried together, then one by one; each try descends again from the flipped
    point.  The flipped fit is kept when its chi-squared is not significantly higher.
    """
    changed = np.array(
        [
            k
            for k in range(len(problem.names))
            if flippable(problem, k) and problem.start[k] * descent.point.free[k] < 0
        ],
        dtype=np.intp,
    )
    if changed.size == 0:
        return descent
    tries = [changed] if changed.size == 1 else [changed, *changed[:, None]]
    for which in tries:
        still = which[problem.start[which] * descent.point.free[which] < 0]
        if still.size < which.size:
            continue
        jacobian = descent.jacobian
        if jacobian is None:
            jacobian = problem.jacobian(descent.point, view)
        if rise_of(problem, view, descent.point, jacobian, which) > _HOPELESS:
            continue
        other = flipped(problem, descent.point.free, which)
        assert other is not None
        goal = Goal(evaluations=40 + 10 * len(problem.names), central=True)
        again = descend(problem, view, other, goal=goal, progress=progress)
        kept = np.all(problem.start[which] * again.point.free[which] > 0)
        rise = (again.point.chi2 - descent.point.chi2) / per_point(view, descent.point)
        if again.converged and ((kept and rise < SINGLE_CHI2) or rise < -SINGLE_CHI2):
            descent = again
    return descent


def named_as_started(problem: Problem, view: View, descent: Descent, progress: Progress | None = None) -> Descent:
    """Give the axes of g the names with which its components are nearest to where they started.

    Only where g alone has axes and each of its components is free, so that a renaming is the same model.
    """
    free = descent.point.free.copy()
    for one in problem.job.species if problem.job.sample.form == "powder" else ():
        names = [f"{one.name}.g_{axis}" for axis in "xyz"]
        if not _only_g_has_axes(one) or not all(_is_free(problem, name) for name in names):
            continue
        at = [problem.names.index(name) for name in names]
        start, found = problem.start[at], free[at]
        orders = itertools.permutations(
            range(3)
        )  # the first one leaves all as it is, and wins when others are no nearer
        free[at] = found[list(min(orders, key=lambda order: float(np.sum((found[list(order)] - start) ** 2))))]
    if np.array_equal(free, descent.point.free):
        return descent
    again = descend(problem, view, free, goal=Goal(central=True), progress=progress)
    same = again.point.chi2 - descent.point.chi2 < 0.01 * per_point(view, descent.point)
    return again if again.converged and same else descent


def _only_g_has_axes(one: Species) -> bool:
    """Whether nothing of a species but g points anywhere."""
    spin = one.spins[0]
    tensors = (*((n.A, n.P) for n in one.nuclei), (one.width.hidden_hyperfine, one.spread.g, one.spread.A))
    plain = len(one.spins) == 1 and spin.D == 0 and spin.zfs_E == 0 and not spin.stevens and one.crystal_field is None
    return plain and all(len(set(tensor)) == 1 for several in tensors for tensor in several)


def _is_free(problem: Problem, name: str) -> bool:
    """Whether a parameter is varied without limits, and no tie of another hangs on it."""
    if name not in problem.names or name in problem.job.limits:
        return False
    return not any(re.search(rf"(?<![\w.]){re.escape(name)}(?![\w.])", text) for text in problem.job.ties.values())


def single_sign_notes(
    problem: Problem, view: View, point: Point, jacobian: Array, known: NDArray[np.bool_]
) -> list[Note]:
    """Name the components of tensors whose sign, each by itself, the trace does not determine."""
    open_signs: dict[str, list[str]] = {}
    for k, name in enumerate(problem.names):
        if not known[k] or point.free[k] == 0 or problem.parameters[name].kind != "energy":
            continue
        tensor = _tensor_of(problem, name)
        if tensor and flippable(problem, k):
            rise = rise_of(problem, view, point, jacobian[:, known], np.array([k]))
            if rise < SINGLE_CHI2:
                open_signs.setdefault(tensor, []).append(name)
    notes = []
    for names in open_signs.values():
        listed = names[0] if len(names) == 1 else ", ".join(names[:-1]) + " and " + names[-1]
        which = "sign of" if len(names) == 1 else "signs, each by itself, of"
        text = (
            f"The {which} {listed} cannot be told from the data: the other sign fits as well. "
            "Signs are reported as the start had them; only sizes are measured."
        )
        notes.append(Note("single_signs", text))
    return notes


def _tensor_of(problem: Problem, name: str) -> str:
    """Return the tensor of which a component is one of several; E counts with D; "" for a number by itself."""
    head, _, last = name.rpartition(".")
    if last == "E":
        return name
    if ".crystal_field." in name:  # its signs are told by the order of the orbitals, not by one trace
        return ""
    parameter = problem.parameters[name]
    for group in parameter.groups:
        if sum(group in other.groups for other in problem.parameters.values()) > 1 and not _one_sided(last):
            return group
    return ""


def _one_sided(last: str) -> bool:
    """Whether a number is one for which a sign means nothing to a reader: widths and Stevens terms."""
    return last.startswith(("B", "hidden"))
