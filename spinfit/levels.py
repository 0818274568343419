"""Energy levels, their slopes and transition intensities, in batches over fields and directions.

One LAPACK call diagonalises a whole batch of H(B, n) = h0 + B n.zeeman.  Slopes come from
Hellmann-Feynman, dE_i/dB = <i| n.zeeman |i>; intensities are those of M = -dH/dB between the
eigenstates.  Energies are E/h in MHz, fields in mT.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import constants

from spinfit.hamiltonian import System

Array = NDArray[np.float64]

KELVIN_PER_MHZ = constants.h * 1e6 / constants.k
"""h/k, K/MHz."""

BLOCK_BYTES = 192_000_000
"""Largest working set of one batch: about ten complex (n, n) matrices a point."""


@dataclass(frozen=True, eq=False)
class Levels:
    """Eigenvalues and what the resonance search needs of the eigenvectors, for m points.

    Attributes
    ----------
    energy : ndarray, shape (m, n)
        Sorted, MHz.
    slope : ndarray, shape (m, n)
        dE/dB, MHz/mT.
    intensity : ndarray, shape (m, n, n), or None
        |M|^2 of each pair of levels in the chosen microwave direction, (MHz/mT)^2.
    """

    energy: Array
    slope: Array
    intensity: Array | None


def solve(
    system: System,
    directions: Array,
    fields: Array,
    *,
    microwave: str | Array = "perpendicular",
    intensities: bool = True,
) -> Levels:
    """Diagonalise at every (direction, field) of two equally long lists.

    Parameters
    ----------
    directions : ndarray, shape (m, 3)
        Unit vectors of the static field, molecular axes.
    fields : ndarray, shape (m,)
        mT.
    microwave : str or ndarray, shape (m, 3)
        "perpendicular": half the sum over two directions normal to the field;
        "parallel": along the field; an array: along these unit vectors (molecular axes).
    intensities : bool
        Whether intensities are wanted at all.
    """
    n = system.h0.shape[0]
    m = len(fields)
    block = max(1, BLOCK_BYTES // (160 * n * n))
    if m <= block:
        return _solve_block(system, directions, fields, microwave, intensities)
    energy = np.empty((m, n))
    slope = np.empty((m, n))
    intensity = np.empty((m, n, n)) if intensities else None
    for start in range(0, m, block):
        part = slice(start, start + block)
        along = microwave if isinstance(microwave, str) else microwave[part]
        got = _solve_block(system, directions[part], fields[part], along, intensities)
        energy[part], slope[part] = got.energy, got.slope
        if intensity is not None:
            intensity[part] = got.intensity
    return Levels(energy, slope, intensity)


def _solve_block(system: System, directions: Array, fields: Array, microwave: str | Array, intensities: bool) -> Levels:
    n = system.h0.shape[0]
    m = len(fields)
    h = np.dot(directions * fields[:, None], system.zeeman.reshape(3, n * n)).reshape(m, n, n)
    h += system.h0
    energy, vectors = np.linalg.eigh(h)
    # rows (i, a) of V+ Z_a, then times V: two matrix products a point give all three components
    side_by_side = np.ascontiguousarray(system.zeeman.transpose(1, 0, 2)).reshape(n, 3 * n)
    half = vectors.conj().transpose(0, 2, 1) @ side_by_side
    if not intensities:
        along = np.einsum("miak,ma->mik", half.reshape(m, n, 3, n), directions)
        return Levels(energy, np.einsum("mik,mki->mi", along, vectors).real, None)
    moment = (half.reshape(m, 3 * n, n) @ vectors).reshape(m, n, 3, n)
    parallel = np.einsum("miaj,ma->mij", moment, directions)
    slope = np.einsum("mii->mi", parallel).real.copy()
    return Levels(energy, slope, _intensity(moment, parallel, microwave))


def _intensity(moment: NDArray, parallel: NDArray, microwave: str | Array) -> Array:
    if isinstance(microwave, str):
        along = _square(parallel)
        if microwave == "parallel":
            return along
        return 0.5 * (_square(moment).sum(axis=2) - along)
    return _square(np.einsum("miaj,ma->mij", moment, microwave))


def _square(z: NDArray) -> Array:
    return z.real**2 + z.imag**2


def populations(energy: Array, temperature: float) -> Array:
    """Return Boltzmann's populations with the full partition function, same shape as `energy` (..., n), MHz."""
    p = np.exp((energy[..., :1] - energy) * (KELVIN_PER_MHZ / temperature))
    return p / p.sum(axis=-1, keepdims=True)


def population_difference(
    energy: Array, lower: NDArray[np.intp], upper: NDArray[np.intp], temperature: float | None
) -> Array | float:
    """Return p_lower - p_upper, shape (..., pairs), from `energy` of shape (..., n).

    Without a temperature it is 1/n for every pair, so that the areas of different species compare.
    """
    if temperature is None:
        return 1.0 / energy.shape[-1]
    p = populations(energy, temperature)
    return p[..., lower] - p[..., upper]
