"""What lies under the lines of a trace: an empty-tube background, a polynomial, or a smooth curve.

All of it is linear and solved at every step of the fit together with the scale.  A smooth background is
a cubic spline b whose curvature is penalised (P. H. C. Eilers, B. D. Marx, Stat. Sci. 11, 89 (1996), from memory): with
rho points to a mT and the smoothness L,

    sum_i (rest_i - b(B_i))^2 + rho (L / 2 pi)^4 integral b''^2 dB

is least.  Of a wave of period L in the rest b takes half, of shorter ones the 4th power of the ratio less,
of longer ones nearly all; a straight line costs nothing.  Since the model is solved together with it, b is not
drawn through the lines, whatever the detection.

With columns K and penalty rows P the least sum over b is rest' R^2 rest, R^2 = 1 - K (K'K + P'P)^-1 K'.
Residuals and Jacobian are multiplied by the symmetric root R, which for a polynomial is the projection
away from it.  The covariance that follows is the Bayesian one, in which the background may be any that the
penalty lets expect (G. Wahba, J. R. Stat. Soc. B 45, 133 (1983), from memory): it is inside every uncertainty.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import BSpline

from spinfit.fitting.data import Trace

Array = NDArray[np.float64]

# Pieces of the spline to a smoothness: the penalty, not the pieces, sets what it can follow.
_PIECES = 6
_FEWEST_PIECES = 8
_MOST_PIECES = 300
# Points that a piece must have at least.
_POINTS_TO_A_PIECE = 4
# Singular values of the known columns below this part of the largest are the same column twice.
_SAME_COLUMN = 1e-10


def known_columns(trace: Trace, field: Array, background: Array | None) -> Array:
    """Background and baseline columns, shape (n, q).

    Legendre polynomials over the used range, or the splines of a smooth baseline, continued straight
    beyond it.
    """
    columns = [] if background is None else [background]
    first, last = trace.field[trace.used][[0, -1]]
    if trace.smoothness is not None:
        columns.extend(_splines(field, _knots(trace)).T)
    elif trace.baseline is not None:
        x = (2 * field - first - last) / max(last - first, np.finfo(float).tiny)
        columns.extend(np.polynomial.legendre.legvander(x, trace.baseline).T)
    return np.stack(columns, axis=1) if columns else np.zeros((field.size, 0))


def penalty_rows(trace: Trace, points: int) -> Array:
    """Rows whose squares times the coefficients make the penalty, shape (m, q); none for a polynomial.

    `points` is how many the trace is seen at, which sets what a curvature is weighed against.
    """
    known = 0 if trace.background is None else 1
    if trace.smoothness is None:
        return np.zeros((0, known + (0 if trace.baseline is None else trace.baseline + 1)))
    knots = _knots(trace)
    inner = knots[3:-3]
    # The second derivative of a cubic spline is straight between knots: two Gauss points are exact.
    half = np.diff(inner) / 2
    middle = (inner[:-1] + inner[1:]) / 2
    nodes = np.concatenate([middle - half / math.sqrt(3), middle + half / math.sqrt(3)])
    curvature = np.stack([BSpline(knots, one, 3)(nodes, nu=2) for one in np.eye(knots.size - 4)], axis=1)
    density = points / (inner[-1] - inner[0])
    strength = density * (trace.smoothness / (2 * math.pi)) ** 4
    rows = np.sqrt(strength * np.tile(half, 2))[:, None] * curvature
    return np.column_stack((np.zeros((rows.shape[0], known)), rows))


def shortest_smoothness(length: float, points: int) -> float:
    """The shortest smoothness, mT, of a baseline over a length of `points` points."""
    return _PIECES * length / min(_MOST_PIECES, max(points // _POINTS_TO_A_PIECE, 1))


def _knots(trace: Trace) -> Array:
    first, last = trace.field[trace.used][[0, -1]]
    assert trace.smoothness is not None
    pieces = max(_FEWEST_PIECES, math.ceil(_PIECES * (last - first) / trace.smoothness))
    step = (last - first) / pieces
    return first + step * np.arange(-3, pieces + 4)


def _splines(field: Array, knots: Array) -> Array:
    """Cubic B-splines at any field, shape (n, q)."""
    first, last = knots[3], knots[-4]
    inside = np.clip(field, first, last)
    eye = np.eye(knots.size - 4)
    value = BSpline.design_matrix(inside, knots, 3).toarray()
    out = np.flatnonzero(inside != field)
    if out.size:
        slope = np.stack([BSpline(knots, one, 3)(inside[out], nu=1) for one in eye], axis=1)
        value[out] += (field - inside)[out, None] * slope
    return value


def removing(known: Array, penalty: Array) -> Array:
    """Columns Q, shape (n, q'), with 1 - Q Q' the root R of the module's docstring.

    Without a penalty Q is an orthonormal basis of the columns.

    Parameters
    ----------
    known : ndarray, shape (n, q)
    penalty : ndarray, shape (m, q)
    """
    n = known.shape[0]
    left, singular, _ = np.linalg.svd(np.vstack((known, penalty)), full_matrices=False)
    left = left[:n, singular > _SAME_COLUMN * singular.max(initial=0.0)]
    if penalty.shape[0] == 0:
        return left
    # What is kept of each direction of the columns: S = Q1 Q1' with Q1 the upper part of an orthonormal basis.
    basis, roots, _ = np.linalg.svd(left, full_matrices=False)
    taken = np.minimum(roots**2, 1.0)
    felt = taken > 1e-12
    return basis[:, felt] * np.sqrt(1 - np.sqrt(1 - taken[felt]))


def coefficients(known: Array, penalty: Array, rest: Array) -> Array:
    """Coefficients of the known columns that leave the least, penalty included, shape (q,)."""
    longer = np.concatenate((rest, np.zeros(penalty.shape[0])))
    return np.linalg.lstsq(np.vstack((known, penalty)), longer, rcond=_SAME_COLUMN)[0]


def taken(basis: Array, shape: Array) -> float:
    """Part of a shape's sum of squares that the known columns take away, 0 to 1."""
    size = float(shape @ shape)
    left = shape - basis @ (basis.T @ shape)
    return 1 - float(left @ left) / size if size > 0 else 0.0
