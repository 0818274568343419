"""Quintic polynomials through three equidistant nodes with slopes, and their roots.

A leaf [a, b] of a field search has nodes at t = -1, 0, 1; values f and slopes d = df/dt at the
three nodes fix a quintic c0 + c1 t + ... + c5 t^5.  Everything works on flat arrays of leaves.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


def quintic(f: Array, d: Array) -> Array:
    """Return coefficients, shape (6, ...), from values and slopes of shape (3, ...) at t = -1, 0, 1."""
    even = 0.5 * (f[2] + f[0]) - f[1]
    even_slope = 0.25 * (d[2] - d[0])
    odd = 0.5 * (f[2] - f[0])
    odd_slope = 0.5 * (d[2] + d[0])
    c5 = 0.5 * (odd_slope - 3 * odd + 2 * d[1])
    return np.stack([f[1], d[1], 2 * even - even_slope, odd - d[1] - c5, even_slope - even, c5])


def value(c: Array, t: Array) -> Array:
    """Return the polynomial at t; c has shape (6, ...)."""
    return c[0] + t * (c[1] + t * (c[2] + t * (c[3] + t * (c[4] + t * c[5]))))


def slope(c: Array, t: Array) -> Array:
    """Return d/dt of the polynomial at t; c has shape (6, ...)."""
    return c[1] + t * (2 * c[2] + t * (3 * c[3] + t * (4 * c[4] + t * 5 * c[5])))


def curvature(c: Array, t: Array) -> Array:
    """Return d2/dt2 of the polynomial at t; c has shape (6, ...)."""
    return 2 * c[2] + t * (6 * c[3] + t * (12 * c[4] + t * 20 * c[5]))


def refine(c: Array, low: Array, high: Array, rounds: int = 5) -> Array:
    """Return the root inside each bracket [low, high] over which the polynomial changes sign.

    Newton steps from the secant point, kept inside the shrinking bracket by bisection.
    """
    low, high = np.array(low, dtype=float), np.array(high, dtype=float)
    f_low, f_high = value(c, low), value(c, high)
    rising = f_high >= f_low
    span = f_high - f_low
    t = np.where(span != 0, low - f_low * (high - low) / np.where(span != 0, span, 1.0), 0.5 * (low + high))
    t = np.clip(t, low, high)
    for _ in range(rounds):
        f, g = value(c, t), slope(c, t)
        above = (f > 0) == rising
        high = np.where(above, t, high)
        low = np.where(above, low, t)
        new = t - f / np.where(g != 0, g, 1.0)
        t = np.where((new >= low) & (new <= high) & (g != 0), new, 0.5 * (low + high))
    return t


SAMPLES = np.linspace(-1.0, 1.0, 9)


def brackets(c: Array, f: Array) -> tuple[NDArray[np.intp], Array, Array]:
    """Find every bracket in [-1, 1] over which a quintic changes sign, folds included.

    Parameters
    ----------
    c : ndarray, shape (6, q)
    f : ndarray, shape (3, q)
        Node values at t = -1, 0, 1, which decide the sign there so that neighbouring leaves agree.

    Returns
    -------
    which, low, high : ndarrays, shape (r,)
        Index of the leaf and the bracket.
    """
    v = value(c[:, None, :], SAMPLES[:, None])
    v[0], v[4], v[8] = f[0], f[1], f[2]
    positive = v >= 0
    k, q = np.nonzero(positive[1:] != positive[:-1])
    low, high = SAMPLES[k], SAMPLES[k + 1]
    g = slope(c[:, None, :], SAMPLES[:, None])
    # a fold hides between two samples of one sign when the polynomial heads for zero and turns back
    turning = (positive[1:] == positive[:-1]) & (g[1:] * g[:-1] < 0) & ((g[:-1] > 0) != positive[:-1])
    kf, qf = np.nonzero(turning)
    if len(kf) == 0:
        return q, low, high
    t = _extremum(c[:, qf], SAMPLES[kf], SAMPLES[kf + 1])
    crossed = (value(c[:, qf], t) >= 0) != positive[kf, qf]
    kf, qf, t = kf[crossed], qf[crossed], t[crossed]
    return (
        np.concatenate([q, qf, qf]),
        np.concatenate([low, SAMPLES[kf], t]),
        np.concatenate([high, t, SAMPLES[kf + 1]]),
    )


def _extremum(c: Array, low: Array, high: Array) -> Array:
    derivative = np.zeros_like(c)
    derivative[:5] = c[1:] * np.arange(1, 6)[:, None]
    return refine(derivative, low, high)
