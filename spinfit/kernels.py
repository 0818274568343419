"""The innermost sums: depositing weighted resonances on a grid by cubic B-splines.

Each kernel exists twice, in numpy and, where the optional package numba is installed (extra
``fast``), compiled; both give the same numbers to rounding and stand under the same tests.
`COMPILED` says which are in use.
"""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from spinfit.compiling import kept_compiled

try:
    from numba import njit
except ImportError:  # the extra is optional
    njit = None

Array = NDArray[np.float64]

COMPILED = njit is not None
"""Whether the compiled kernels are in use."""


def taps(u: Array) -> tuple[Array, Array, Array, Array]:
    """Return the four cubic B-spline weights of a point a fraction u past its left neighbour."""
    v = 1 - u
    u2, v2 = u * u, v * v
    return v2 * v / 6, 2 / 3 - u2 + 0.5 * u2 * u, 2 / 3 - v2 + 0.5 * v2 * v, u2 * u / 6


def deposit_numpy(into: Array, rows: NDArray[np.intp] | np.intp, x: Array, weights: Array) -> None:
    """Add weights at places x, in grid steps, to one of several histograms each, in place.

    Parameters
    ----------
    into : ndarray, shape (r, count), C-contiguous
    rows : ndarray of int, shape (n,), or one int
    x, weights : ndarray, shape (n,)
        Points with x outside 1 to count - 3 are left out.
    """
    count = into.shape[1]
    inside = (x >= 1) & (x < count - 3)
    if not inside.all():
        x, weights = x[inside], weights[inside]
        rows = rows if np.ndim(rows) == 0 else rows[inside]
    i = x.astype(np.intp)
    shares = taps(x - i)
    i += rows * count
    flat = into.reshape(-1)
    for k in range(4):
        flat += np.bincount(i + (k - 1), weights=weights * shares[k], minlength=flat.size)


def smear_classes(smear: Array, least: float, ratio: float, rows: int) -> tuple[NDArray[np.intp], Array]:
    """Return the lower of the two histograms that share each point by its smear, and the share of the upper one.

    Row 0 is for no smear, row k for `least` x `ratio`^(k - 1); shares are smooth, so that no edge between
    classes shows.
    """
    rung = np.where(smear < least, smear / least, 1 + np.log(np.maximum(smear, least) / least) / math.log(ratio))
    rung = np.minimum(rung, rows - 1 - 1e-9)
    lower = rung.astype(np.intp)
    part = rung - lower
    return lower, part * part * (3 - 2 * part)


def deposit_smeared_numpy(into: Array, x: Array, weights: Array, smear: Array, least: float, ratio: float) -> None:
    """Add weights at places x, each shared smoothly between the two histograms next to its smear.

    Parameters
    ----------
    into : ndarray, shape (r, count), C-contiguous
        Row 0 is for no smear, row k for `least` x `ratio`^(k - 1).
    x, weights, smear : ndarray, shape (n,)
    """
    lower, upper = smear_classes(smear, least, ratio, len(into))
    rows = np.concatenate([lower, lower + 1])
    shares = np.concatenate([weights * (1 - upper), weights * upper])
    deposit_numpy(into, rows, np.concatenate([x, x]), shares)


def slopes_of_taps(u: Array) -> tuple[Array, Array, Array, Array]:
    """Return how the four weights of `taps` change with the place of the point."""
    v = 1 - u
    u2, v2 = u * u, v * v
    return -0.5 * v2, 1.5 * u2 - 2 * u, 2 * v - 1.5 * v2, 0.5 * u2


def deposit_changes_numpy(
    into: Array, rows: NDArray[np.intp] | np.intp, x: Array, weights: Array, moves: Array
) -> None:
    """Add first-order changes of points at places x, in grid steps, in place.

    Parameters
    ----------
    into : ndarray, shape (c, r, count), C-contiguous
        Histograms of each of c changes.
    rows : ndarray of int, shape (n,), or one int
    x : ndarray, shape (n,)
        Points with x outside 1 to count - 3 are left out.
    weights : ndarray, shape (c, n)
        Changes of weight.
    moves : ndarray, shape (c, n)
        Weight times change of place.
    """
    count = into.shape[2]
    inside = (x >= 1) & (x < count - 3)
    if not inside.all():
        x, weights, moves = x[inside], weights[:, inside], moves[:, inside]
        rows = rows if np.ndim(rows) == 0 else rows[inside]
    i = x.astype(np.intp)
    shares, slopes = taps(x - i), slopes_of_taps(x - i)
    i += rows * count
    for flat, weight, move in zip(into.reshape(len(into), -1), weights, moves, strict=True):
        for k in range(4):
            flat += np.bincount(i + (k - 1), weights=weight * shares[k] + move * slopes[k], minlength=flat.size)


def deposit_sheet_changes_numpy(
    into: Array,
    place: tuple[float, float],
    sheet: tuple[Array, Array, Array, Array],
    changes: tuple[Array, Array],
    inverse: bool,
    least: float,
    ratio: float,
) -> None:
    """Add first-order changes of one branch over a mesh, each point smeared as in `deposit_smeared_numpy`, in place.

    Parameters
    ----------
    into : ndarray, shape (c, r, count), C-contiguous
        Histograms of each of c changes.
    place : (float, float)
        Places in grid steps are field x the first + the second.
    sheet : (field, weight, share, smear), ndarrays of shape (n,)
        Weight and share of the solid angle multiply; a smear of shape (0,) is none at all.
    changes : (of field, of weight), ndarrays of shape (c, n)
        Of B^-2 and W B^-3 when `inverse`.
    """
    field, weight, share, smear = sheet
    change_b, change_w = changes
    if inverse:
        cube = field * field * field
        change_b = -0.5 * cube * change_b
        change_w = cube * change_w + (3 * weight / field) * change_b
    moves, weights = change_b * (weight * share * place[0]), change_w * share
    x = field * place[0] + place[1]
    if not len(smear):
        deposit_changes_numpy(into, np.intp(0), x, weights, moves)
        return
    lower, upper = smear_classes(smear, least, ratio, into.shape[1])
    deposit_changes_numpy(into, lower, x, weights * (1 - upper), moves * (1 - upper))
    deposit_changes_numpy(into, lower + 1, x, weights * upper, moves * upper)


def compiled(function: Callable) -> Callable:
    """Compile a kernel where numba is installed; return it as it is otherwise."""
    # without checks for division by zero, which would keep loops from being vectorised
    return function if njit is None else kept_compiled(njit, function, error_model="numpy", fastmath={"contract"})


taps_at, slopes_at = compiled(taps), compiled(slopes_of_taps)
"""`taps` and `slopes_of_taps` for one point, inside other kernels."""


def _smear_class(smear, least, scale, rows):
    """Return `smear_classes` of one point; `scale` is 1/log(ratio)."""
    rung = smear / least
    if rung >= 1.0:
        rung = 1.0 + math.log(rung) * scale
    rung = min(rung, rows - 1 - 1e-9)
    row = int(rung)
    part = rung - row
    return row, part * part * (3.0 - 2.0 * part)


def _add(row, i, weight, t):
    """Add a weight at four neighbouring places of one histogram, in shares t."""
    row[i - 1] += weight * t[0]
    row[i] += weight * t[1]
    row[i + 1] += weight * t[2]
    row[i + 2] += weight * t[3]


smear_class, add_at = compiled(_smear_class), compiled(_add)
"""Parts of other kernels."""


def _deposit(into, rows, x, weights):
    count = into.shape[1]
    for n in range(x.size):
        if x[n] >= 1.0 and x[n] < count - 3:
            i = int(x[n])
            row = rows[n] if rows.size > 1 else rows[0]
            add_at(into[row], i, weights[n], taps_at(x[n] - i))


def _smeared(into, x, weights, smear, least, ratio):
    rows, count = into.shape
    scale = 1.0 / math.log(ratio)
    for n in range(x.size):
        if x[n] >= 1.0 and x[n] < count - 3:
            row, upper = smear_class(smear[n], least, scale, rows)
            i = int(x[n])
            t = taps_at(x[n] - i)
            add_at(into[row], i, weights[n] * (1.0 - upper), t)
            add_at(into[row + 1], i, weights[n] * upper, t)


def _changes(into, rows, x, weights, moves):
    changes, _, count = into.shape
    for n in range(x.size):
        if x[n] >= 1.0 and x[n] < count - 3:
            i = int(x[n])
            row = rows[n] if rows.size > 1 else rows[0]
            t, d = taps_at(x[n] - i), slopes_at(x[n] - i)
            for k in range(changes):
                add_at(into[k, row], i, weights[k, n], t)
                add_at(into[k, row], i, moves[k, n], d)


def _sheet_changes(into, factor, origin, field, weight, share, smear, by_field, by_weight, inverse, least, ratio):
    changes, rows, count = into.shape
    scale = 1.0 / math.log(ratio)
    for n in range(field.size):
        b = field[n]
        x = b * factor + origin
        if x >= 1.0 and x < count - 3:
            i = int(x)
            t, d = taps_at(x - i), slopes_at(x - i)
            row, upper = 0, 0.0
            if smear.size:
                row, upper = smear_class(smear[n], least, scale, rows)
            cube = b * b * b
            third = 3.0 * weight[n] / b
            whole = weight[n] * share[n] * factor
            for k in range(changes):
                m = by_field[k, n]
                w = by_weight[k, n]
                if inverse:
                    m = -0.5 * cube * m
                    w = cube * w + third * m
                m = m * whole
                w = w * share[n]
                both = (
                    w * t[0] + m * d[0],
                    w * t[1] + m * d[1],
                    w * t[2] + m * d[2],
                    w * t[3] + m * d[3],
                )
                if upper > 0.0:
                    add_at(into[k, row + 1], i, upper, both)
                add_at(into[k, row], i, 1.0 - upper, both)


_compiled_deposit, _compiled_smeared = compiled(_deposit), compiled(_smeared)
_compiled_changes, _compiled_sheet_changes = compiled(_changes), compiled(_sheet_changes)


def deposit(into: Array, rows: NDArray[np.intp] | np.intp, x: Array, weights: Array) -> None:
    """Do what `deposit_numpy` does, compiled where that is possible."""
    if COMPILED:
        _compiled_deposit(into, np.atleast_1d(np.asarray(rows, dtype=np.intp)), x, weights)
    else:
        deposit_numpy(into, rows, x, weights)


def deposit_smeared(into: Array, x: Array, weights: Array, smear: Array, least: float, ratio: float) -> None:
    """Do what `deposit_smeared_numpy` does, compiled where that is possible."""
    if COMPILED:
        _compiled_smeared(into, x, weights, smear, least, ratio)
    else:
        deposit_smeared_numpy(into, x, weights, smear, least, ratio)


def deposit_changes(into: Array, rows: NDArray[np.intp] | np.intp, x: Array, weights: Array, moves: Array) -> None:
    """Do what `deposit_changes_numpy` does, compiled where that is possible."""
    if COMPILED:
        _compiled_changes(into, np.atleast_1d(np.asarray(rows, dtype=np.intp)), x, weights, moves)
    else:
        deposit_changes_numpy(into, rows, x, weights, moves)


def deposit_sheet_changes(
    into: Array,
    place: tuple[float, float],
    sheet: tuple[Array, Array, Array, Array],
    changes: tuple[Array, Array],
    inverse: bool,
    least: float,
    ratio: float,
) -> None:
    """Do what `deposit_sheet_changes_numpy` does, compiled where that is possible."""
    if COMPILED:
        _compiled_sheet_changes(into, *place, *sheet, *changes, inverse, least, ratio)
    else:
        deposit_sheet_changes_numpy(into, place, sheet, changes, inverse, least, ratio)
