"""Sums and Gaussian averages over neighbouring points, in a time that does not grow with how many these are."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import fft, ndimage

Array = NDArray[np.float64]

# Points beyond which a Fourier transform takes less time than summing.
_WIDE = 64
_TRUNCATED = 4.0
"""Standard deviations at which a Gaussian is cut off, as scipy.ndimage does."""


def gaussian(values: Array, sigma: float, *, mode: str) -> Array:
    """Return the average with Gaussian weights.

    Parameters
    ----------
    values : ndarray, shape (n,)
    sigma : float
        Standard deviation, in points; 0 leaves the values as they are.
    mode : "reflect" or "nearest"
        How the values go on beyond their ends, as in `scipy.ndimage.gaussian_filter1d`.
    """
    if not sigma:
        return values
    if sigma < _WIDE:
        return ndimage.gaussian_filter1d(values, sigma, mode=mode)
    reach = int(_TRUNCATED * sigma + 0.5)
    weights = np.exp(-0.5 * (np.arange(-reach, reach + 1) / sigma) ** 2)
    longer = np.pad(values, reach, mode={"reflect": "symmetric", "nearest": "edge"}[mode])
    return _convolved(longer, weights / weights.sum())[2 * reach : 2 * reach + values.size]


def _convolved(values: Array, weights: Array) -> Array:
    length = fft.next_fast_len(values.size + weights.size - 1, real=True)
    return fft.irfft(fft.rfft(values, length) * fft.rfft(weights, length), length)


def running_sum(values: Array, points: int) -> Array:
    """Return the sums over so many neighbouring points, shape (n - points + 1,)."""
    if points < _WIDE:
        return np.convolve(values, np.ones(points), mode="valid")
    sums = np.concatenate(([0.0], np.cumsum(values)))
    return sums[points:] - sums[:-points]
