"""Which values of a batch stand far from the others: robust z by median and median absolute deviation.

z = (x - median) / sqrt((1.4826 MAD)^2 + u^2) with the value's own standard uncertainty u, so that what is merely
uncertain is not called an outlier.  Beyond 3.5 a value is named, the limit of B. Iglewicz and D. C. Hoaglin, How to
Detect and Handle Outliers, 1993 (from memory).
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

LIMIT = 3.5
FEWEST = 5
"""Values, below which nothing can be said of a single one."""
# The standard deviation of a normal distribution over its median absolute deviation.
_NORMAL = 1.4826
# Of the median: two values that agree to a double's last digits do not make a third one an outlier.
_ROUNDING = 1e-12


def robust_z(values: Sequence[float], uncertainties: Sequence[float], good: Sequence[bool]) -> NDArray[np.float64]:
    """Return how far each value stands from the median of the good ones, in robust standard deviations.

    Parameters
    ----------
    values, uncertainties : sequence of float, length n
        NaN for what is missing; a missing uncertainty counts as none.
    good : sequence of bool, length n
        Which values make up median and MAD.

    Returns
    -------
    ndarray, shape (n,)
        NaN for missing values, and everywhere when fewer than `FEWEST` are good.
    """
    x = np.asarray(values, dtype=float)
    u = np.nan_to_num(np.asarray(uncertainties, dtype=float))
    kept = x[np.asarray(good, dtype=bool) & np.isfinite(x)]
    if kept.size < FEWEST:
        return np.full(x.shape, np.nan)
    middle = np.median(kept)
    spread = _NORMAL * np.median(np.abs(kept - middle))
    scale = np.sqrt(spread**2 + u**2 + (_ROUNDING * middle) ** 2)
    with np.errstate(divide="ignore", invalid="ignore"):
        z = (x - middle) / scale
    return np.where(x == middle, 0.0, z)


def outlying(z: NDArray[np.float64]) -> NDArray[np.bool_]:
    """Say which are beyond the limit; what is missing is not."""
    return np.nan_to_num(np.abs(z)) > LIMIT
