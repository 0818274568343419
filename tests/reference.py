"""Slow, obvious ways to what the engine computes fast: the references of the tests.

Everything here follows from the definition in the conventions, point by point, with
`numpy.linalg`, `scipy.linalg` and `scipy.optimize` alone.  Fields in mT, energies and frequencies
as E/h in MHz, widths peak to peak of the derivative in mT.  Levels are counted from 0 by energy.

A weight is |M|^2 (population difference) / |d(E_j - E_i)/dB| of one system; without a temperature
the population difference is 1/n, n the dimension of that system's matrix.  `System.weight` is not
in it.
"""

from __future__ import annotations

from itertools import combinations
from typing import NamedTuple

import numpy as np
import scipy.linalg
from numpy.typing import ArrayLike, NDArray
from scipy import constants
from scipy.interpolate import CubicSpline
from scipy.optimize import brentq, minimize_scalar

from spinfit.hamiltonian import System

Array = NDArray[np.float64]
MHZ_PER_KELVIN = constants.k / constants.h * 1e-6


class Line(NamedTuple):
    """One resonance: field (mT) and the two levels, counted from 0 by energy."""

    field: float
    lower: int
    upper: int


def unit(direction: ArrayLike) -> Array:
    """Return the direction with length 1."""
    vector = np.asarray(direction, dtype=float)
    return vector / np.linalg.norm(vector)


def matrix(system: System, direction: ArrayLike, field: float) -> NDArray[np.complex128]:
    """Return H at a field along a molecular direction, shape (n, n)."""
    return system.h0 + field * np.tensordot(unit(direction), system.zeeman, 1)


def levels(system: System, direction: ArrayLike, fields: ArrayLike) -> Array:
    """Return the energies at each field, rising, shape (..., n)."""
    along = np.tensordot(unit(direction), system.zeeman, 1)
    return np.linalg.eigvalsh(system.h0 + np.asarray(fields, dtype=float)[..., None, None] * along)


def eigenfields(
    system: System, direction: ArrayLike, frequency: float, field_range: tuple[float, float], residual: float = 1e-2
) -> Array:
    """Return the resonance fields in a range as generalised eigenvalues, rising.

    G. G. Belford, R. L. Belford, J. F. Burkhalter, J. Magn. Reson. 11, 251 (1973):
    (nu - F x 1 + 1 x F*) Z = B (G x 1 - 1 x G*) Z for H = F + B G.  The right side is singular, so
    some eigenvalues are infinite; others are complex.  Kept are the real ones in the range at
    which two levels are within `residual` (MHz) of the frequency.
    """
    n = len(system.h0)
    one = np.eye(n)
    along = np.tensordot(unit(direction), system.zeeman, 1)
    left = frequency * np.eye(n * n) - np.kron(system.h0, one) + np.kron(one, system.h0.conj())
    right = np.kron(along, one) - np.kron(one, along.conj())
    numerator, denominator = scipy.linalg.eig(left, right, right=False, homogeneous_eigvals=True)
    finite = np.abs(denominator) > 1e-12 * np.abs(denominator).max()
    found = numerator[finite] / denominator[finite]
    # Two roots about to coalesce are ill conditioned: rounding moves them by its square root, also off the axis.
    fields = found.real[np.abs(found.imag) < 1e-5 * (1 + np.abs(found.real))]
    fields = np.sort(fields[(fields >= field_range[0]) & (fields <= field_range[1])])
    energies = levels(system, direction, fields)
    mismatch = np.abs(energies[:, None, :] - energies[:, :, None] - frequency).reshape(len(fields), -1)
    return fields[mismatch.min(axis=1, initial=np.inf) < residual]


def plain_resonances(
    system: System, direction: ArrayLike, frequency: float, field_range: tuple[float, float], points: int = 400
) -> list[Line]:
    """Return every resonance of every pair of levels, by field, from a dense grid of fields.

    Sign changes of E_j - E_i - nu between grid points are refined with `brentq`.  Where the
    difference turns back between two points without changing sign (a loop's two roots in one
    cell), its turning point is sought first.
    """
    grid = np.linspace(*field_range, points)
    energies = levels(system, direction, grid)
    lines = []
    for i, j in combinations(range(energies.shape[1]), 2):
        excess = energies[:, j] - energies[:, i] - frequency

        def off(field: float, i: int = i, j: int = j) -> float:
            at = levels(system, direction, field)
            return at[j] - at[i] - frequency

        knots = list(zip(grid, excess, strict=True))
        for k in range(1, points - 1):
            nearer = abs(excess[k]) <= min(abs(excess[k - 1]), abs(excess[k + 1]))
            same = excess[k - 1] * excess[k] > 0 and excess[k] * excess[k + 1] > 0
            if nearer and same:
                sign = float(np.sign(excess[k]))
                turn = minimize_scalar(
                    lambda b, sign=sign: sign * off(b),
                    bounds=(grid[k - 1], grid[k + 1]),
                    method="bounded",
                    options={"xatol": 1e-9 * max(1.0, abs(grid[k]))},
                )
                knots.append((turn.x, off(turn.x)))
        knots.sort()
        for (a, at_a), (b, at_b) in zip(knots, knots[1:], strict=False):
            if at_a == 0:
                lines.append(Line(a, i, j))
            elif at_a * at_b < 0:
                lines.append(Line(brentq(off, a, b, xtol=1e-11, rtol=1e-14), i, j))
    return sorted(lines)


def populations(energies: Array, temperature: float) -> Array:
    """Return each level's population at a temperature (K), shape as `energies` (..., n), by Boltzmann."""
    factors = np.exp(-(energies - energies[..., :1]) / (MHZ_PER_KELVIN * temperature))
    return factors / factors.sum(axis=-1, keepdims=True)


def two_normals(direction: Array) -> tuple[Array, Array]:
    """Return two directions normal to the field and to each other, for directions of shape (..., 3)."""
    helper = np.where(np.abs(direction[..., 2:]) < 0.9, [0.0, 0.0, 1.0], [1.0, 0.0, 0.0])
    first = np.cross(helper, direction)
    first /= np.linalg.norm(first, axis=-1, keepdims=True)
    return first, np.cross(direction, first)


def intensities(
    system: System, directions: Array, vectors: NDArray[np.complex128], mode: str, axis: ArrayLike | None
) -> Array:
    """Return |M|^2 between all pairs of eigenvectors (columns), shape (..., n, n), MHz^2/mT^2.

    `mode` is "perpendicular" (mean of two directions normal to the field) or "parallel"; with an
    `axis` (molecular) it is |M.axis|^2.
    """
    if axis is not None:
        waves = [np.broadcast_to(unit(axis), directions.shape)]
    elif mode == "parallel":
        waves = [directions]
    else:
        waves = list(two_normals(directions))
    total = 0.0
    for wave in waves:
        moment = -np.tensordot(wave, system.zeeman, 1)
        total = total + np.abs(vectors.conj().swapaxes(-1, -2) @ moment @ vectors) ** 2 / len(waves)
    return total


def plain_weights(
    system: System,
    direction: ArrayLike,
    lines: list[Line],
    *,
    mode: str = "perpendicular",
    axis: ArrayLike | None = None,
    temperature: float | None = None,
    degenerate: float = 1e-6,
) -> Array:
    """Return the weight of each line, shape (len(lines),), MHz/mT.

    Levels closer than `degenerate` (MHz) share their intensities and slopes: single eigenvectors
    mean nothing there, the mean over the degenerate states does.
    """
    weights = []
    for field, lower, upper in lines:
        energies, vectors = np.linalg.eigh(matrix(system, direction, field))
        strength = intensities(system, unit(direction), vectors, mode, axis)
        along = np.tensordot(unit(direction), system.zeeman, 1)
        slopes = np.einsum("ik,ij,jk->k", vectors.conj(), along, vectors).real
        low = np.abs(energies - energies[lower]) < degenerate
        high = np.abs(energies - energies[upper]) < degenerate
        slope = slopes[high].mean() - slopes[low].mean()
        if temperature is None:
            difference = 1 / len(energies)
        else:
            shares = populations(energies, temperature)
            difference = shares[lower] - shares[upper]
        weights.append(strength[np.ix_(low, high)].mean() * difference / abs(slope))
    return np.array(weights)


def sphere(n_theta: int, n_phi: int, *, octant: bool = False) -> tuple[Array, Array]:
    """Return directions (n, 3) and shares (n,) summing to 1 over a hemisphere, or an octant.

    Gauss-Legendre in cos(theta), even steps in phi.  A hemisphere is enough for every system (the
    spectrum is even in B), an octant for tensors that are all along the molecular axes, a single
    phi for what is axial about z.
    """
    nodes, shares = np.polynomial.legendre.leggauss(n_theta)
    cos, shares = (nodes + 1) / 2, shares / 2
    phi = (np.arange(n_phi) + 0.5) / n_phi * (np.pi / 2 if octant else 2 * np.pi)
    sin = np.sqrt(1 - cos**2)
    x, y = np.outer(sin, np.cos(phi)), np.outer(sin, np.sin(phi))
    directions = np.stack([x, y, np.broadcast_to(cos[:, None], x.shape)], axis=-1).reshape(-1, 3)
    return directions, np.repeat(shares / n_phi, n_phi)


def gaussian(x: Array, width: float, order: int) -> Array:
    """Return a Gaussian of area 1 (order 0) or its first or second derivative; `width` is peak to peak."""
    sigma = width / 2
    value = np.exp(-((x / sigma) ** 2) / 2) / (sigma * np.sqrt(2 * np.pi))
    return value * (1.0, -x / sigma**2, (x**2 / sigma**2 - 1) / sigma**2)[order]


def _roots(system: System, directions: Array, frequency: float, grid: Array) -> tuple[NDArray, NDArray, NDArray, Array]:
    """Return (orientation, lower, upper, field) of all sign changes, for many directions at once."""
    along = np.tensordot(directions, system.zeeman, 1)
    energies = np.linalg.eigvalsh(system.h0 + grid[:, None, None] * along[:, None])
    lower, upper = np.triu_indices(energies.shape[-1], 1)
    excess = energies[..., upper] - energies[..., lower] - frequency
    which, cell, pair = np.nonzero((excess[:, :-1] < 0) != (excess[:, 1:] < 0))
    i, j = lower[pair], upper[pair]
    a, b = grid[cell], grid[cell + 1]
    at_a, at_b = excess[which, cell, pair], excess[which, cell + 1, pair]
    rows = np.arange(len(which))
    side = np.zeros(len(which))
    for turn in range(60):
        if not len(which) or np.max(b - a) < 1e-8:
            break
        # Regula falsi with halving of the end that stays (Illinois), every fourth step a bisection.
        middle = np.where(turn % 4 == 3, (a + b) / 2, b - at_b * (b - a) / (at_b - at_a))
        at = np.linalg.eigvalsh(system.h0 + middle[:, None, None] * along[which])
        value = at[rows, j] - at[rows, i] - frequency
        left = (value < 0) == (at_a < 0)
        at_b = np.where(left, np.where(side > 0, at_b / 2, at_b), value)
        at_a = np.where(left, value, np.where(side < 0, at_a / 2, at_a))
        a, b = np.where(left, middle, a), np.where(left, b, middle)
        side = np.where(left, 1, -1)
        if np.max(np.abs(value)) < 1e-7:
            return which, i, j, middle
    return which, i, j, (a + b) / 2


def plain_powder(
    system: System,
    frequency: float,
    fields: Array,
    width: float,
    n_theta: int,
    n_phi: int,
    *,
    order: int = 1,
    mode: str = "perpendicular",
    temperature: float | None = None,
    octant: bool = False,
    points: int = 60,
    block: int = 2000,
) -> Array:
    """Return a powder spectrum as the plain sum over many orientations of exact roots, shape of `fields`.

    Parameters
    ----------
    system : System
    frequency : float
        MHz.
    fields : ndarray
        Where the spectrum is wanted, mT; roots are sought six widths beyond its ends.
    width : float
        Gaussian, peak to peak, mT.
    n_theta, n_phi, octant
        As for `sphere`.
    order : int
        0 absorption, 1 first, 2 second derivative.
    points : int
        Fields of the grid that brackets the roots; two roots of a pair within one cell are missed.

    Notes
    -----
    Converges slowly, and not at all for looping transitions, see `frequency_broadened`.
    """
    directions, shares = sphere(n_theta, n_phi, octant=octant)
    grid = np.linspace(fields[0] - 6 * width, fields[-1] + 6 * width, points)
    places, heights = [], []
    for start in range(0, len(directions), block):
        some, share = directions[start : start + block], shares[start : start + block]
        which, i, j, at = _roots(system, some, frequency, grid)
        along = np.tensordot(some[which], system.zeeman, 1)
        energies, vectors = np.linalg.eigh(system.h0 + at[:, None, None] * along)
        rows = np.arange(len(which))
        strength = intensities(system, some[which], vectors, mode, None)[rows, i, j]
        slopes = np.einsum("aik,aij,ajk->ak", vectors.conj(), along, vectors, optimize=True).real
        slope = np.abs(slopes[rows, j] - slopes[rows, i])
        if temperature is None:
            difference = 1 / energies.shape[-1]
        else:
            p = populations(energies, temperature)
            difference = p[rows, i] - p[rows, j]
        places.append(at)
        heights.append(share[which] * strength * difference / slope)
    return _sum_lines(fields, np.concatenate(places), np.concatenate(heights), width, order)


def _sum_lines(fields: Array, places: Array, heights: Array, width: float, order: int) -> Array:
    """Add one Gaussian for each line, each only within six widths of its place."""
    rank = np.argsort(places)
    places, heights = places[rank], heights[rank]
    spectrum = np.zeros_like(fields)
    for start in range(0, len(places), 500):
        some, height = places[start : start + 500], heights[start : start + 500]
        first, last = np.searchsorted(fields, [some[0] - 6 * width, some[-1] + 6 * width])
        spectrum[first:last] += gaussian(fields[first:last, None] - some, width, order) @ height
    return spectrum


def frequency_broadened(
    system: System,
    frequency: float,
    fields: Array,
    width: float,
    n_theta: int,
    n_phi: int,
    narrow: float,
    *,
    order: int = 1,
    mode: str = "perpendicular",
    temperature: float | None = None,
    octant: bool = False,
) -> Array:
    """Return a powder spectrum without any root: a narrow Gaussian in frequency at every field.

    At each field of a fine grid, sum over orientations and pairs of |M|^2 (p_i - p_j) times a
    Gaussian in (E_j - E_i - nu) of standard deviation `narrow` (MHz), which tends to
    delta(E_j - E_i - nu) = sum over roots of delta(B - B_0) / |d(E_j - E_i)/dB|; then the
    Gaussian in field of peak-to-peak `width`.  There is no singularity where two roots meet.  The
    error falls as narrow^2: with f(narrow) and f(narrow/2), (4 f(narrow/2) - f(narrow)) / 3 is
    better by one order.  The orientations must be dense enough for the narrow Gaussian.
    """
    directions, shares = sphere(n_theta, n_phi, octant=octant)
    along = np.tensordot(directions, system.zeeman, 1)
    moments = np.linalg.eigvalsh(along)
    # A Gaussian sampled at its own standard deviation integrates to rounding by the trapezium rule.
    step = min(width / 8, narrow / np.max(moments[:, -1] - moments[:, 0]))
    low, high = fields[0] - 6 * width, fields[-1] + 6 * width
    grid = np.linspace(low, high, int(np.ceil((high - low) / step)) + 1)
    lower, upper = np.triu_indices(len(system.h0), 1)
    absorption = np.zeros(len(grid))
    for k, field in enumerate(grid):
        energies, vectors = np.linalg.eigh(system.h0 + field * along)
        off = (energies[:, upper] - energies[:, lower] - frequency) / narrow
        where, pair = np.nonzero(np.abs(off) < 7)
        near = np.unique(where)
        if not len(near):
            continue
        strength = intensities(system, directions[near], vectors[near], mode, None)[
            np.searchsorted(near, where), lower[pair], upper[pair]
        ]
        if temperature is None:
            difference = 1 / energies.shape[-1]
        else:
            p = populations(energies, temperature)
            difference = p[where, lower[pair]] - p[where, upper[pair]]
        bell = np.exp(-(off[where, pair] ** 2) / 2) / (narrow * np.sqrt(2 * np.pi))
        absorption[k] = np.sum(shares[where] * strength * difference * bell)
    spacing = grid[1] - grid[0]
    reach = int(np.ceil(6 * width / spacing))
    kernel = gaussian(spacing * np.arange(-reach, reach + 1), width, order) * spacing
    return CubicSpline(grid, np.convolve(absorption, kernel, mode="same"))(fields)
