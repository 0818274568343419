"""Exact resonances of single directions, deposited with their own widths."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from spinfit.branches import FWHM_PER_SIGMA, Request
from spinfit.hamiltonian import System
from spinfit.levels import solve
from spinfit.resonance import Resonances
from spinfit.sheets import Histograms

Array = NDArray[np.float64]


def deposit(
    histograms: Histograms, system: System, request: Request, got: Resonances, directions: Array, weights: Array
) -> None:
    """Add resonances to histograms, each as broad as the request's broadening makes it.

    Parameters
    ----------
    got : Resonances
        From `spinfit.resonance.find`.
    directions : ndarray, shape (d, 3)
        The directions that `got.direction` counts.
    weights : ndarray, shape (r,)
        Weight of each resonance.
    """
    if request.broadening is None or not len(got.field):
        histograms.points(got.field, weights)
        return
    histograms.broadened(got.field, weights, own_variance(system, request, got, directions))


def own_variance(system: System, request: Request, got: Resonances, directions: Array) -> Array:
    """Return the variance of each resonance's own broadening, shape (r,), mT^2."""
    broadening = request.broadening
    unit = directions[got.direction]
    levels = solve(system, unit, got.field, intensities=False, operators=(broadening.h0, broadening.zeeman))
    row = np.arange(len(got.field))
    shift = levels.shift[row, :, got.upper] - levels.shift[row, :, got.lower]
    variance = broadening.variance(shift[:, :, None], unit)[:, 0]
    return variance / (np.maximum(np.abs(got.slope), 1e-9) * FWHM_PER_SIGMA) ** 2
