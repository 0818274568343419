"""Where the axes of tensors point, how well that is known, and what of a tensor the data leave open.

Euler angles are a poor report: near beta = 0 two of them say the same, and their uncertainties mean
nothing to anybody.  Here each principal axis is given by its direction cosines in the crystal frame
(of the first site; of a powder in the molecular frame), with standard uncertainties propagated from
all parameters at once, so that angles which are open only by themselves do no harm.

A rotation in one plane knows three of the six components of a tensor (D. S. Schonland, Proc. Phys. Soc.
73, 788 (1959), from memory).  Which ones the data know follows from the null space of the information
matrix J'J: a component is open when a direction of that space moves it.  For g the components are those
of g gT, which is what resonance fields of a doublet depend on.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np
from numpy.typing import NDArray

from spinfit.fitting.outcome import Axis, Note
from spinfit.fitting.residuals import Problem
from spinfit.species import Spin, principal, tilt_matrix

Array = NDArray[np.float64]
Propagate = Callable[[Sequence[Array]], list[tuple[float | None, float | None]]]
"""From slopes, each of shape (k,), to noise and field part of the uncertainty; None where it is not known."""

# rad and relative: steps of derivatives of rotation matrices and tensors, which are exact but for rounding.
_STEP = 1e-5
# Singular values of the Jacobian in typical steps, relative to the largest, below which a direction is open.
_OPEN = 1e-5
# A tensor's component moves along an open direction when it does so by more than this part of the tensor's
# largest change.
_MOVES = 1e-3
_PAIRS = ((0, 0), (1, 1), (2, 2), (0, 1), (0, 2), (1, 2))


def axes_of(problem: Problem, free: Array, propagate: Propagate) -> tuple[Axis, ...]:
    """Return the principal axes of every tensor whose direction was varied.

    Axes come in the order of the parameters x, y, z, or the parallel one alone; each points so that its
    largest component is positive.
    """
    out = []
    for name, which, spin_of in _tensors(problem):
        cosines, slopes = _cosines(problem, free, which, spin_of)
        if not np.any(slopes):
            continue
        labels = _labels(spin_of(problem.model(free)[0]), which)
        found = propagate([slopes[row, k] for k in labels for row in range(3)])
        for number, (k, label) in enumerate(labels.items()):
            axis = cosines[:, k] * np.sign(cosines[np.argmax(np.abs(cosines[:, k])), k])
            parts = found[3 * number : 3 * number + 3]
            sigma = tuple(None if None in part else float(np.hypot(*part)) for part in parts)
            out.append(Axis(name, label, tuple(map(float, axis)), sigma, _frame(problem)))
    return tuple(out)


def open_components(problem: Problem, free: Array, jacobian: Array, propagate: Propagate) -> list[Note]:
    """Say which components of varied tensors the data leave open, and what the others are.

    Parameters
    ----------
    jacobian : ndarray, shape (points, k)
        Of the weighted residuals, internal units.
    """
    scale = np.array([problem.parameters[name].scale for name in problem.names])
    _, singular, right = np.linalg.svd(jacobian * scale)
    rank = int(np.sum(singular > _OPEN * singular.max(initial=0.0)))
    null = right[rank:]
    notes = []
    for name, which, spin_of in _tensors(problem):
        slopes = _component_slopes(problem, free, which, spin_of)
        size = np.linalg.norm(slopes * scale, axis=1)
        opened = np.linalg.norm((slopes * scale) @ null.T, axis=1) > _MOVES * max(size.max(), 1e-300)
        if not opened.any() or not np.any(size[~opened] > _MOVES * size.max()):
            continue
        symbol = f"{name} {name}T" if which == "g" else name
        what = [f"{symbol}_{'xyz'[i]}{'xyz'[j]}" for i, j in _PAIRS]
        values = _components(problem, free, which, spin_of)
        unit = problem.parameters[name] if which == "D" and name in problem.parameters else None
        known = []
        for k in np.flatnonzero(~opened):
            noise, field = propagate([slopes[k]])[0]
            convert = (lambda v: v) if unit is None else unit.to_job
            sigma = "" if noise is None or field is None else f" +- {abs(convert(float(np.hypot(noise, field)))):.2g}"
            known.append(f"{what[k]} = {convert(float(values[k])):.7g}{sigma}")
        text = (
            f"The data cannot know {_listed([what[k] for k in np.flatnonzero(opened)])} ({_frame(problem)} axes): "
            f"a rotation in one plane tells three components of a tensor. Known are {_listed(known)}"
            f"{'' if unit is None else ' ' + unit.unit}. Add a rotation in another plane."
        )
        notes.append(Note("open_components", text))
    return notes


def _frame(problem: Problem) -> str:
    return "crystal" if problem.job.sample.form == "crystal" else "molecular"


def _tensors(problem: Problem):
    """Yield name, "g" or "D", and how to find the spin, of each tensor that has axes and may turn."""
    turning = [name for name in problem.values(problem.start) if "tilt_" in name]
    of_sample = any(name.startswith("sample.tilt_") for name in turning)
    for n, one in enumerate(problem.job.species):
        for k, spin in enumerate(one.spins):
            prefix = one.name if len(one.spins) == 1 else f"{one.name}.{k + 1}"
            for which, has in (("g", len(spin.g) > 1), ("D", spin.S > 0.5 and (spin.D != 0 or spin.zfs_E != 0))):
                if has and (of_sample or any(name.startswith(f"{prefix}.{which}_tilt_") for name in turning)):
                    yield f"{prefix}.{which}", which, lambda species, n=n, k=k: species[n].spins[k]


def _labels(spin: Spin, which: str) -> dict[int, str]:
    """Return which columns of the axes are told apart, and what they are called."""
    axial = len(spin.g) == 2 if which == "g" else spin.zfs_E == 0
    return {2: "par" if which == "g" else "z"} if axial else dict(enumerate("xyz"))


def _matrix(problem: Problem, free: Array, which: str, spin_of) -> Array:
    """Return a tensor's axes as columns, in the crystal frame where there is one."""
    species, sample, _ = problem.model(free)
    spin = spin_of(species)
    axes = tilt_matrix(spin.g_tilt if which == "g" else spin.D_tilt)
    return tilt_matrix(sample.tilt) @ axes if sample.form == "crystal" else axes


def _components(problem: Problem, free: Array, which: str, spin_of) -> Array:
    """Return xx, yy, zz, xy, xz, yz of g gT or of D, shape (6,)."""
    spin = spin_of(problem.model(free)[0])
    axes = _matrix(problem, free, which, spin_of)
    if which == "g":
        own = principal(spin.g) ** 2
    else:
        own = np.array([-spin.D / 3 + spin.zfs_E, -spin.D / 3 - spin.zfs_E, 2 * spin.D / 3])
    tensor = (axes * own) @ axes.T
    return np.array([tensor[i, j] for i, j in _PAIRS])


def _sides(problem: Problem, free: Array):
    """Yield for each parameter two points beside the given one and their distance."""
    for k, name in enumerate(problem.names):
        step = _STEP * problem.parameters[name].scale
        above, below = free.copy(), free.copy()
        above[k] = min(free[k] + step, problem.upper[k])
        below[k] = max(free[k] - step, problem.lower[k])
        yield above, below, above[k] - below[k]


def _component_slopes(problem: Problem, free: Array, which: str, spin_of) -> Array:
    """Derivatives of the six components, shape (6, k)."""
    columns = [
        (_components(problem, a, which, spin_of) - _components(problem, b, which, spin_of)) / distance
        for a, b, distance in _sides(problem, free)
    ]
    return np.stack(columns, axis=1)


def _cosines(problem: Problem, free: Array, which: str, spin_of) -> tuple[Array, Array]:
    """Axes as columns, and their derivatives, shape (3, 3, k) by component, axis and parameter."""
    columns = [
        (_matrix(problem, a, which, spin_of) - _matrix(problem, b, which, spin_of)) / distance
        for a, b, distance in _sides(problem, free)
    ]
    slopes = np.stack(columns, axis=2)
    return _matrix(problem, free, which, spin_of), np.where(np.abs(slopes) > 1e-9, slopes, 0.0)


def _listed(names: Sequence[str]) -> str:
    return names[0] if len(names) == 1 else ", ".join(names[:-1]) + " and " + names[-1]
