"""The noise of a trace: how large it is, whether it is white, and what it does to a projection.

Two estimates serve two ends.  Before a fit, `noise_level` reads the noise off the trace itself, from
differences of neighbouring points that a smooth line hardly touches; it weights the traces and is
the yardstick of chi-squared.  After a fit, `residual_noise` reads the noise off the residuals, as an
autoregressive process whose order the data choose (order 0 is white noise); it sets the
uncertainties.  Points are taken in their order, which is the order of time: noise is correlated in
time, not in field.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import fft, linalg, special

Array = NDArray[np.float64]

# Median absolute deviation of a standard normal deviate.
_MAD_NORMAL = float(special.ndtri(0.75))
# Fourth differences remove cubic pieces of a line and keep most of the independent information.
_DIFFERENCE_ORDER = 4
# Differences beyond this many standard deviations are lines or glitches; the variance of a standard
# normal deviate cut there is 1 - 2 c pdf(c) / P(|x| < c).
_CUT = 3.0
_CUT_VARIANCE = 1 - 2 * _CUT * math.exp(-(_CUT**2) / 2) / math.sqrt(2 * math.pi) / math.erf(_CUT / math.sqrt(2))
# A level below this fraction of the signal's range is rounding of the numbers, not noise.
_FLOOR = 1e-7
# More coefficients than this cannot be told from a drift in traces of a thousand points.
_LARGEST_ORDER = 6


def _runs_of(used: NDArray[np.bool_]) -> list[slice]:
    """Stretches of neighbouring used points."""
    edges = np.flatnonzero(np.diff(np.concatenate(([False], used, [False])).astype(np.int8)))
    return [slice(int(a), int(b)) for a, b in zip(edges[::2], edges[1::2], strict=True)]


def noise_level(signal: Array, used: NDArray[np.bool_] | None = None) -> float:
    """Estimate the standard deviation of white noise from the trace itself.

    The normalised fourth differences of neighbouring points have the noise's standard deviation
    and none of a locally cubic signal.  Those beyond three times their median absolute deviation,
    where a line is sharper than that, are left out, and the root mean square of the others is
    corrected for the missing tails; that is half again as precise as the median alone.  Never 0:
    noise-free data get a floor of 1e-7 of their range, so that weights stay finite.

    Parameters
    ----------
    signal : ndarray, shape (n,)
    used : ndarray of bool, shape (n,), optional
        Differences are taken inside stretches of used points only.

    Returns
    -------
    float
        In the signal's unit.
    """
    signal = np.asarray(signal, dtype=float)
    used = np.ones(signal.size, dtype=bool) if used is None else np.asarray(used, dtype=bool)
    kept = signal[used]
    if kept.size == 0:
        return 1.0
    floor = _FLOOR * float(np.ptp(kept))
    if floor == 0.0:
        floor = _FLOOR * max(abs(float(kept[0])), 1.0)
    order = _DIFFERENCE_ORDER
    norm = math.sqrt(math.comb(2 * order, order))
    pieces = [np.diff(signal[run], order) for run in _runs_of(used) if run.stop - run.start > order]
    if not pieces:
        return max(float(np.std(np.diff(kept))) / math.sqrt(2.0) if kept.size > 2 else floor, floor)
    differences = np.concatenate(pieces) / norm
    level = float(np.median(np.abs(differences))) / _MAD_NORMAL
    level = math.sqrt(float(np.mean(differences[np.abs(differences) <= _CUT * level] ** 2)) / _CUT_VARIANCE)
    if level <= floor:  # more than half of the points repeat: a coarse digitiser or no noise
        level = float(np.sqrt(np.mean(differences**2)))
    return max(level, floor)


def autocorrelation(residual: Array, lags: int) -> Array:
    """Sample autocorrelation at lags 0 to `lags`, shape (lags + 1,); the mean is not removed."""
    return _lagged_products(residual, lags) / max(float(residual @ residual), np.finfo(float).tiny)


def _lagged_products(residual: Array, lags: int) -> Array:
    n = residual.size
    return np.array([residual[: n - k] @ residual[k:] for k in range(min(lags, n - 1) + 1)])


@dataclass(frozen=True)
class RunsTest:
    """Wald-Wolfowitz test of the signs of the residuals.

    `z` is the standardised number of runs of one sign (A. Wald, J. Wolfowitz, Ann. Math. Stat. 11,
    147 (1940)): far below 0 when neighbours hang together.
    """

    runs: int
    expected: float
    z: float


def runs_test(residual: Array) -> RunsTest:
    """Count the runs of one sign and compare with what independent signs would give."""
    positive = residual > 0
    n = positive.size
    up = int(positive.sum())
    down = n - up
    runs = 1 + int(np.count_nonzero(positive[1:] != positive[:-1])) if n else 0
    if up == 0 or down == 0 or n < 3:
        return RunsTest(runs, float(runs), 0.0)
    expected = 1 + 2 * up * down / n
    variance = (expected - 1) * (expected - 2) / (n - 1)
    return RunsTest(runs, expected, (runs - expected) / math.sqrt(variance) if variance > 0 else 0.0)


@dataclass(frozen=True, eq=False)
class ResidualNoise:
    """The noise of one trace as its residuals show it.

    Attributes
    ----------
    variance : float
        Of one point, corrected for the fitted parameters; in the residual's unit squared.
    order : int
        Of the autoregressive process; 0 is white noise.
    covariances : ndarray, shape (m,)
        Autocovariance at lags 0 to m - 1, 0 beyond.
    uneven : float
        How many standard deviations the squared residuals at the points that carry the parameters
        exceed those elsewhere; above 4 the model misses the lines themselves.
    """

    variance: float
    order: int
    covariances: Array
    uneven: float = 0.0

    def applied(self, columns: Array) -> Array:
        """Multiply the noise's covariance matrix with columns, shape (n, k) -> (n, k)."""
        if self.order == 0:
            return self.variance * columns
        n = columns.shape[0]
        lags = self.covariances[:n]
        size = fft.next_fast_len(2 * n, real=True)
        kernel = np.zeros(size)
        kernel[: lags.size] = lags
        kernel[size - lags.size + 1 :] = lags[:0:-1]
        spectrum = fft.rfft(kernel)[:, None] * fft.rfft(columns, size, axis=0)
        return fft.irfft(spectrum, size, axis=0)[:n]


def residual_noise(residual: Array, basis: Array) -> ResidualNoise:
    """Read the noise off the residuals of a least-squares fit.

    Residuals are the noise minus its projection on what was fitted, so their plain
    autocovariances are too small.  With H the projector on the fitted space, E[r r'] = (1-H) C (1-H)
    is linear in the autocovariances of C; solving for them at the first few lags removes the bias.
    The order of the autoregressive process through them is the one of least AICc (C. M. Hurvich,
    C.-L. Tsai, Biometrika 76, 297 (1989), from memory), and an order above 0 must also improve the likelihood by
    more than white noise would in 1 of 20 traces.

    Parameters
    ----------
    residual : ndarray, shape (n,)
    basis : ndarray, shape (n, k)
        This trace's rows of an orthonormal basis of the fitted space (parameters, scale, baseline).
    """
    n = residual.size
    freedom = n - float(np.sum(basis**2))
    total = float(residual @ residual)
    variance = total / max(freedom, 1.0)
    if n < 30 or variance == 0.0:
        return ResidualNoise(variance, 0, np.array([variance]))
    lags = min(2 * _LARGEST_ORDER, n // 8)
    unbiased = _unbiased_covariances(residual, basis, lags)
    order, coefficients, innovation = _autoregression(unbiased, min(_LARGEST_ORDER, lags), freedom)
    if order == 0:
        noise = ResidualNoise(variance, 0, np.array([variance]))
    else:
        covariances = _extend(unbiased[: order + 1], coefficients, n)
        noise = ResidualNoise(float(covariances[0]), order, covariances)
    innovations = np.convolve(residual, np.concatenate(([1.0], -coefficients)))[:n]
    return ResidualNoise(
        noise.variance, noise.order, noise.covariances, _unevenness(innovations, innovation, basis, freedom / n)
    )


def _shifted(columns: Array, lag: int) -> Array:
    """Multiply with the symmetric matrix that has ones on the diagonals `lag` and -`lag`."""
    if lag == 0:
        return columns
    out = np.zeros_like(columns)
    out[lag:] += columns[:-lag]
    out[:-lag] += columns[lag:]
    return out


def _unbiased_covariances(residual: Array, basis: Array, lags: int) -> Array:
    """Solve for the autocovariances at lags 0 to `lags` that explain the residuals' products.

    E[sum_i r_i r_(i+l)] = 1/2 sum_m c_m tr(S_l (1-H) S_m (1-H)), S_0 = 1 taken once.
    """
    n = residual.size
    moved = np.array([_shifted(basis, lag) for lag in range(lags + 1)])
    inner = basis.T @ moved
    flat = moved.reshape(lags + 1, -1)
    system = np.einsum("lij,mji->lm", inner, inner) - 2.0 * (flat @ flat.T)
    system[np.diag_indices(lags + 1)] += [n if lag == 0 else 2.0 * (n - lag) for lag in range(lags + 1)]
    products = _lagged_products(residual, lags)
    products[1:] *= 2.0
    return linalg.solve(system, products, assume_a="sym")


def _autoregression(covariances: Array, largest: int, freedom: float) -> tuple[int, Array, float]:
    """Return order, coefficients and innovation variance by Levinson's recursion and AICc."""
    coefficients = np.zeros(0)
    innovation = float(covariances[0])
    white = freedom * math.log(innovation)
    best = (0, coefficients, innovation)
    best_score = white
    for order in range(1, largest + 1):
        reflection = (covariances[order] - coefficients @ covariances[order - 1 : 0 : -1]) / innovation
        if not abs(reflection) < 1:  # the estimates are no longer those of a stationary process
            break
        coefficients = np.concatenate((coefficients - reflection * coefficients[::-1], [reflection]))
        innovation *= 1 - reflection**2
        score = freedom * math.log(innovation) + 2 * order * freedom / max(freedom - order - 1, 1.0)
        gain = white - freedom * math.log(innovation)
        if score < best_score and special.chdtrc(order, gain) < 0.05:
            best, best_score = (order, coefficients.copy(), innovation), score
    return best


def _extend(first: Array, coefficients: Array, n: int) -> Array:
    """Continue autocovariances by the autoregression until they have died away or fill the trace."""
    order = coefficients.size
    out = np.zeros(n)
    out[: order + 1] = first
    for lag in range(order + 1, n):
        out[lag] = coefficients @ out[lag - 1 : lag - order - 1 : -1] if lag > order else 0.0
        if lag > 4 * order and np.abs(out[lag - order : lag + 1]).max() < 1e-4 * first[0]:
            return out[: lag + 1]
    return out


def _unevenness(innovations: Array, variance: float, basis: Array, share: float) -> float:
    """Standardised excess of the squared innovations at the points of high leverage."""
    leverage = np.sum(basis**2, axis=1)
    weight = leverage - leverage.mean()
    # Residuals are smaller by 1 - leverage where the fit follows the noise.
    expected = variance * np.maximum(1 - leverage, 0.1)
    excess = innovations**2 / expected - 1
    scale = math.sqrt(2 * float(weight @ weight))
    return float(weight @ excess) / scale if scale > 0 else 0.0


def local_covariance(residual: Array, columns: Array, bandwidth: int) -> Array:
    """Covariance of columns' projections of the residuals without assuming the noise is even.

    The Bartlett-weighted sum of products of scores columns_i residual_i (W. K. Newey, K. D. West,
    Econometrica 55, 703 (1987)), shape (k, k): it stays right when the residuals are large where
    the lines are, that is, when the model misses the trace.
    """
    scores = columns * residual[:, None]
    out = scores.T @ scores
    for lag in range(1, min(bandwidth, residual.size - 1) + 1):
        cross = scores[lag:].T @ scores[:-lag]
        out += (1 - lag / (bandwidth + 1)) * (cross + cross.T)
    return out
