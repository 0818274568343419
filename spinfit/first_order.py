"""How far widths of first order err, told from a few directions.

A resonance at B0 moves by b x to first order when a distributed parameter is x standard deviations off
its mean, and by b x + q x^2 + c x^3 in truth; its weight changes by 1 + w x + v x^2.  Averaged over x,
the line is shifted, widened and skewed beyond what its width b says: its density G becomes

    G + v G - (q + w b) G' + (3 b c + q^2 + v b^2) G'' - b^2 q G''' + b^3 c G'''',

the terms of an Edgeworth series up to the first powers of the small numbers.  Levels one standard deviation
off tell q, c, w and v.  Summed over a few directions, each line as broad as these lie apart, that is what
the first order misses in a spectrum, to a factor of two or so.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from spinfit.branches import FWHM_PER_SIGMA, Request
from spinfit.broadening import turned
from spinfit.distribution import Node, axes, moved
from spinfit.hamiltonian import System
from spinfit.levels import occupation, solve, zero_field_state
from spinfit.resonance import find

Array = NDArray[np.float64]

POINTS = 256
"""Fields at which the sums are taken."""
FOLD_SLOPE = 8.0
"""MHz/mT below which a resonance is close to a fold, where fields say little and the average works in frequency."""
FELT = 1e-4
"""Part of the largest weight below which a resonance is left out."""


def first_order_errors(
    system: System,
    request: Request,
    window: tuple[float, float],
    directions: Array,
    share: Array,
    spacing: float,
    microwave: str | Array | None = None,
) -> Array:
    """Return the error that the width of first order makes for each of `axes`, relative to the top.

    Parameters
    ----------
    system : System
    request : Request
        With the broadening.
    window : (float, float)
        mT.
    directions : ndarray, shape (d, 3)
        Molecular axes.
    share : ndarray, shape (d,)
        Of the average.
    spacing : float
        How far the directions lie apart, rad; 0 for a crystal's.
    microwave : str or ndarray, shape (d, 3), optional
        In place of the request's.

    Returns
    -------
    ndarray, shape (axes,)
        Of the derivative of the absorption; at most 1.
    """
    broadening = request.broadening
    matrix = axes(broadening)
    count = matrix.shape[1]
    errors = np.zeros(count)
    along = request.microwave if microwave is None else microwave
    found = find(
        system,
        directions,
        request.frequency,
        (request.low, request.high),
        microwave=along,
        temperature=request.temperature,
        populations=request.populations,
    )
    weight = found.weight * share[found.direction]
    kept = (np.abs(weight) > FELT * np.abs(weight).max(initial=0.0)) & (np.abs(found.slope) > FOLD_SLOPE)
    found, weight = found.only(kept), weight[kept]
    if not len(weight):
        return errors
    unit = directions[found.direction]
    wave = along if isinstance(along, str) else along[found.direction]
    row = np.arange(len(weight))

    def levels(there: System, field: Array) -> tuple[Array, Array]:
        """Return how far a resonance is from `field`, mT, and its weight there."""
        state = None if request.populations is None else zero_field_state(there, request.populations)
        got = solve(there, unit, field, microwave=wave, state=state)
        slope = got.slope[row, found.upper] - got.slope[row, found.lower]
        slope = np.where(np.abs(slope) < FOLD_SLOPE, np.copysign(FOLD_SLOPE, found.slope), slope)
        gap = got.energy[row, found.upper] - got.energy[row, found.lower] - request.frequency
        p = occupation(got, request.temperature)
        p = 1.0 / got.energy.shape[1] if p is None else p[row, found.lower] - p[row, found.upper]
        return -gap / slope, got.intensity[row, found.lower, found.upper] * p / np.abs(slope)

    operators = (
        np.concatenate((broadening.h0, np.zeros((3, *system.h0.shape)))),
        np.concatenate((broadening.zeeman, turned(system.zeeman))),
    )
    got = solve(system, unit, found.field, intensities=False, operators=operators)
    shift = (got.shift[row, :, found.upper] - got.shift[row, :, found.lower]) / found.slope[:, None]
    rows = len(broadening.h0)
    # turned, the field changes as in truth: this is how fast the resonance moves over the sphere
    apart = np.linalg.norm(shift[:, rows:], axis=1) * spacing
    own = broadening.variance(shift[:, :rows, None] * found.slope[:, None, None], unit)[:, 0]
    variance = request.scale**2 + own / (found.slope * FWHM_PER_SIGMA) ** 2 + apart**2
    step = (window[1] - window[0]) / (POINTS - 1)
    sigma = np.sqrt(np.maximum(variance, step**2))
    here = levels(system, found.field)[1]
    terms = np.zeros((count, 5, len(weight)))
    for axis in range(count):
        b = -(shift[:, :rows] @ matrix[:, axis]) / FWHM_PER_SIGMA
        sides = []
        for x in (1.0, -1.0):
            at = tuple(x * (k == axis) for k in range(count))
            there, _ = moved(system, broadening, Node(at, (1.0,) * count))
            sides.append(levels(there, np.maximum(found.field + x * b, 1e-3)))
        (above, strong), (below, weak) = sides
        q, c = (np.clip(v / sigma, -1.0, 1.0) for v in (0.5 * (above + below), 0.5 * (above - below)))
        w, v = (np.clip(r, -1.0, 1.0) for r in (0.5 * (strong - weak) / here, 0.5 * (strong + weak) / here - 1.0))
        b = b / sigma
        terms[axis] = v, -(q + w * b), 3 * b * c + q**2 + v * b**2, -(b**2) * q, b**3 * c
    total, missed = np.zeros(POINTS), np.zeros((count, POINTS))
    fields = np.linspace(*window, POINTS)
    for sign in (1, -1) if request.low < step else (1,):  # the spectrum is even in B
        near = (sign * found.field > window[0] - 5 * sigma) & (sign * found.field < window[1] + 5 * sigma)
        y = (fields - sign * found.field[near, None]) / sigma[near, None]
        bell = np.exp(-0.5 * y * y) * (weight[near] / sigma[near] ** 2)[:, None]
        # derivatives of a Gaussian: Hermite polynomials He_n with the sign of (-1)^n
        hermite = [np.ones_like(y), y]
        for n in range(1, 5):
            hermite.append(y * hermite[n] - n * hermite[n - 1])
        total -= (bell * hermite[1]).sum(axis=0)
        for n in range(5):
            odd = sign**n  # of shifts, for a resonance at -B
            missed += odd * (-1) ** (n + 1) * np.einsum("ar,rf->af", terms[:, n, near], bell * hermite[n + 1])
    top = np.abs(total).max()
    return np.minimum(np.abs(missed).max(axis=1) / top, 1.0) if top > 0 else errors
