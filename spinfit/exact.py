"""Exact resonances of single directions, deposited with their own widths and split by weak nuclei.

A resonance at B0 is split into lines where gap(B) + offset(B) = 0: the gap is the quintic through
B0 - h, B0 and B0 + h, where levels are solved again, and h holds the whole pattern.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from spinfit import hermite
from spinfit.branches import FWHM_PER_SIGMA, Request, parabola
from spinfit.hamiltonian import System
from spinfit.levels import occupation, solve, zero_field_state
from spinfit.patterns import pattern
from spinfit.resonance import Resonances
from spinfit.sheets import Histograms
from spinfit.weak import Felt, extent

Array = NDArray[np.float64]

BLOCK = 4000
"""Resonances that are split at once."""
ROOM = 1.15
"""Half length, in units of the pattern's reach, over which levels are solved again."""


class Lines(NamedTuple):
    """Exact resonances along given directions, as they were found.

    Attributes
    ----------
    request : Request
    found : Resonances
    field, wave : ndarray, shape (d, 3)
        Static and microwave field in the molecular axes; the latter counts where the request's
        microwave field is perpendicular and `members` are given.
    share : ndarray, shape (d,)
        Of each direction.
    angle : ndarray of int, shape (d,)
        Which of the sample's angles a direction belongs to.
    members : tuple of ndarray of int
        A crystal's sites of each direction; empty where there are no sites.
    """

    request: Request
    found: Resonances
    field: Array
    wave: Array
    share: Array
    angle: NDArray[np.intp]
    members: tuple[NDArray[np.intp], ...] = ()


def deposit(
    histograms: Histograms,
    system: System,
    request: Request,
    got: Resonances,
    directions: Array,
    weights: Array,
    microwave: str | Array | None = None,
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
    microwave : str or ndarray, shape (d, 3), optional
        In place of the request's.
    """
    if system.weak and len(got.field):
        microwave = request.microwave if microwave is None else microwave
        for start in range(0, len(got.field), BLOCK):
            block = np.zeros(len(got.field), dtype=bool)
            block[start : start + BLOCK] = True
            _deposit_split(histograms, system, request, got.only(block), directions, weights[block], microwave)
        return
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


def _deposit_split(
    histograms: Histograms,
    system: System,
    request: Request,
    got: Resonances,
    directions: Array,
    weights: Array,
    microwave: str | Array,
) -> None:
    """Add resonances, each as the lines into which weak nuclei split it."""
    row, fields, shares = split(system, request, got, directions, microwave)
    if request.broadening is None:
        histograms.points(fields, weights[row] * shares)
    else:
        variance = own_variance(system, request, got, directions)
        histograms.broadened(fields, weights[row] * shares, variance[row])


def split(
    system: System, request: Request, got: Resonances, directions: Array, microwave: str | Array
) -> tuple[NDArray[np.intp], Array, Array]:
    """Split resonances by weak nuclei.

    Returns
    -------
    row : ndarray of int, shape (l,)
        Resonance that each line belongs to.
    field : ndarray, shape (l,)
        mT.
    share : ndarray, shape (l,)
        Weight of the line relative to that of the resonance; together about 1, single ones may be negative.
    """
    r = len(got.field)
    steep = np.maximum(np.abs(got.slope), 1e-3)
    # next to a fold the pattern may reach past it: what lies beyond the fold has no resonance
    half = np.minimum(ROOM * extent(system, request.high) / steep, 0.4 * got.field)
    nodes = got.field + half * np.array([[-1.0], [0.0], [1.0]])
    unit = np.tile(directions[got.direction], (3, 1))
    along = microwave if isinstance(microwave, str) else np.tile(microwave[got.direction], (3, 1))
    state = None if request.populations is None else zero_field_state(system, request.populations)
    levels = solve(system, unit, nodes.ravel(), microwave=along, weak=True, state=state)
    at, lower, upper = np.arange(3 * r), np.tile(got.lower, 3), np.tile(got.upper, 3)
    gap = (levels.energy[at, upper] - levels.energy[at, lower]).reshape(3, r) - request.frequency
    slope = (levels.slope[at, upper] - levels.slope[at, lower]).reshape(3, r)
    strength = levels.intensity[at, lower, upper].reshape(3, r)
    p = occupation(levels, request.temperature)
    if p is not None:
        # electron and nuclear energies together are h nu apart at every line's own field
        strength = strength * p[at, lower].reshape(3, r)
    both = np.stack([lower, upper], axis=1)
    seen = {k: Felt(*(a[at[:, None], both] for a in one)) for k, one in levels.felt.items()}
    pair = (np.array([0]), np.array([1]))
    scale = request.scale * max(8.0, float(np.quantile(steep, 0.05)))
    found = pattern(system, seen, unit * nodes.reshape(-1, 1), pair, scale=scale, tolerance=request.tolerance)
    offset, share = (a.reshape(-1, 3, r) for a in (found.offset, found.share))
    c = hermite.quintic(gap, slope * half)
    t = np.zeros_like(offset[:, 1])
    for _ in range(6):
        value = hermite.value(c[:, None], t) + parabola(offset.transpose(1, 0, 2), t)
        rise = hermite.slope(c[:, None], t) + _bend(offset.transpose(1, 0, 2), t)
        t = np.clip(t - value / np.where(rise != 0, rise, np.inf), -1.5, 1.5)
    rise = hermite.slope(c[:, None], t) + _bend(offset.transpose(1, 0, 2), t)
    there = (rise * slope[1] > 0) & (np.abs(t) < 1.5)
    middle = np.where(strength[1] != 0, strength[1], np.inf)
    shares = parabola(share.transpose(1, 0, 2), t) * parabola(strength, t) / middle
    shares *= np.abs(slope[1] * half) / np.maximum(np.abs(rise), 1e-300)
    line, row = np.nonzero(there & (np.abs(shares) > 1e-9))
    return row, (got.field + half * t)[line, row], shares[line, row]


def _bend(s: Array, t: Array) -> Array:
    """Return the slope of `parabola`."""
    return 0.5 * (s[2] - s[0]) + 2 * t * (0.5 * (s[2] + s[0]) - s[1])
