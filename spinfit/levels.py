"""Energy levels, their slopes and transition intensities, in batches over fields and directions.

One LAPACK call diagonalises a whole batch of H(B, n) = h0 + B n.zeeman.  Slopes come from
Hellmann-Feynman, dE_i/dB = <i| n.zeeman |i>; intensities are those of M = -dH/dB between the
eigenstates.  Energies are E/h in MHz, fields in mT.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray
from scipy import constants

from spinfit.characters import Characters
from spinfit.hamiltonian import System
from spinfit.moments import moments
from spinfit.weak import Felt, felt

Array = NDArray[np.float64]

KELVIN_PER_MHZ = constants.h * 1e6 / constants.k
"""h/k, K/MHz."""

BLOCK_BYTES = 192_000_000
"""Largest working set of one batch: about ten complex (n, n) matrices a point."""

FORBIDDEN = 1e-26
"""Squared moment of a transition, beside the square of the largest slope of a level, that is rounding."""


@dataclass(frozen=True, eq=False)
class Levels:
    """Eigenvalues and what the resonance search needs of the eigenvectors, for m points.

    Attributes
    ----------
    energy : ndarray, shape (m, n)
        Sorted, MHz; by character where that is asked for.
    slope : ndarray, shape (m, n)
        dE/dB, MHz/mT.
    intensity : ndarray, shape (m, n, n), or None
        |M|^2 of each pair of levels in the chosen microwave direction, (MHz/mT)^2.
    shift : ndarray, shape (m, k, n)
        First-order shift of each level by each of k further operators, MHz.
    felt : dict
        For each electron spin with weakly coupled nuclei, what they feel of it, if asked for.
    population : ndarray, shape (m, n), or None
        Of each level, when a `state` is given.
    order : ndarray of int, shape (m, n), or None
        The place by energy of each level, where levels are ordered by character.
    """

    energy: Array
    slope: Array
    intensity: Array | None
    shift: Array
    felt: dict[int, Felt] = field(default_factory=dict)
    population: Array | None = None
    order: NDArray[np.intp] | None = None


Operators = tuple[NDArray[np.complex128], NDArray[np.complex128]]
"""Operators linear in the field: zero-field parts, shape (k, n, n), and dH/dB parts, shape (k, 3, n, n)."""


def solve(
    system: System,
    directions: Array,
    fields: Array,
    *,
    microwave: str | Array = "perpendicular",
    intensities: bool = True,
    operators: Operators | None = None,
    weak: bool = False,
    state: NDArray[np.complex128] | None = None,
    characters: Characters | None = None,
    order: NDArray[np.intp] | None = None,
    near: NDArray[np.intp] | None = None,
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
    operators : (h0, zeeman), optional
        Operators whose expectation values are wanted.
    weak : bool
        Whether weakly coupled nuclei are asked about.
    state : ndarray, shape (n, n), optional
        Density matrix whose diagonal between the eigenstates is wanted, such as `zero_field_state`.
    characters : Characters, optional
        Orders levels by character.
    order : ndarray of int, shape (m, n), optional
        The order found before, to be kept.
    near : ndarray of int, shape (m, n), optional
        The order at a neighbouring field, to be preferred.
    """
    n = system.h0.shape[0]
    m = len(fields)
    block = max(1, BLOCK_BYTES // (160 * n * n))
    if m <= block:
        how = intensities, operators, weak, state, characters
        return _solve_block(system, directions, fields, microwave, *how, order, near)
    parts = []
    for start in range(0, m, block):
        part = slice(start, start + block)
        along = microwave if isinstance(microwave, str) else microwave[part]
        how = intensities, operators, weak, state, characters
        known = (None if one is None else one[part] for one in (order, near))
        parts.append(_solve_block(system, directions[part], fields[part], along, *how, *known))
    return Levels(
        np.concatenate([p.energy for p in parts]),
        np.concatenate([p.slope for p in parts]),
        np.concatenate([p.intensity for p in parts]) if intensities else None,
        np.concatenate([p.shift for p in parts]),
        {k: Felt(*map(np.concatenate, zip(*(p.felt[k] for p in parts), strict=True))) for k in parts[0].felt},
        None if state is None else np.concatenate([p.population for p in parts]),
        None if characters is None else np.concatenate([p.order for p in parts]),
    )


def _solve_block(
    system: System,
    directions: Array,
    fields: Array,
    microwave: str | Array,
    intensities: bool,
    operators: Operators | None,
    weak: bool,
    state: NDArray[np.complex128] | None,
    characters: Characters | None,
    order: NDArray[np.intp] | None,
    near: NDArray[np.intp] | None,
) -> Levels:
    along = directions * fields[:, None]
    energy, vectors = np.linalg.eigh(_matrices(system, along))
    if characters is not None:
        energy, vectors, order = characters.arranged(along, energy, vectors, order, near)
    shift = _expectation(vectors, along, operators)
    seen = felt(system, energy, vectors) if weak else {}
    population = None if state is None else np.einsum("mai,mai->mi", vectors.conj(), state @ vectors).real
    slope, intensity = moments(vectors, system.zeeman, directions, microwave if intensities else None)
    if intensity is not None and not (isinstance(microwave, str) and microwave == "perpendicular"):
        # along the field a pure Zeeman operator moves nothing: what is left is rounding, not a weak spectrum
        intensity[intensity < FORBIDDEN * (slope * slope).max(axis=1)[:, None, None]] = 0.0
    return Levels(energy, slope, intensity, shift, seen, population, order)


def levels(system: System, directions: Array, fields: Array) -> Array:
    """Return the energies alone, shape (m, n), MHz, at every (direction, field) of two equally long lists."""
    return np.linalg.eigvalsh(_matrices(system, directions * fields[:, None]))


def _matrices(system: System, fields: Array) -> NDArray[np.complex128]:
    """Return H at fields given as vectors, shape (m, 3), mT."""
    # real times real: half the work of a product of complex matrices
    h = (fields @ np.ascontiguousarray(system.zeeman).view(float).reshape(3, -1)).view(complex)
    h = h.reshape(-1, *system.h0.shape)
    h += system.h0
    return h


def _expectation(vectors: NDArray, fields: Array, operators: Operators | None) -> Array:
    """Return <i|O|i> of each operator at each point, shape (m, k, n); `fields` are vectors, mT."""
    m, n = vectors.shape[:2]
    if operators is None:
        return np.empty((m, 0, n))
    out = np.empty((m, len(operators[0]), n))
    for k, (h0, zeeman) in enumerate(zip(*operators, strict=True)):
        operator = h0 + np.dot(fields, zeeman.reshape(3, n * n)).reshape(m, n, n) if zeeman.any() else h0
        turned = operator @ vectors
        out[:, k] = np.einsum("mai,mai->mi", vectors.real, turned.real)
        out[:, k] += np.einsum("mai,mai->mi", vectors.imag, turned.imag)
    return out


def populations(energy: Array, temperature: float) -> Array:
    """Return Boltzmann's populations with the full partition function, same shape as `energy` (..., n), MHz."""
    p = np.exp((energy[..., :1] - energy) * (KELVIN_PER_MHZ / temperature))
    return p / p.sum(axis=-1, keepdims=True)


def occupation(got: Levels, temperature: float | None) -> Array | None:
    """Return the population of each level, shape (m, n): the state's, else Boltzmann's, else None for even ones."""
    if got.population is not None or temperature is None:
        return got.population
    return populations(got.energy, temperature)


def zero_field_state(system: System, populations: Sequence[float]) -> NDArray[np.complex128]:
    """Return the density matrix of electron sublevels populated at zero field, shape (n, n), less its mean.

    What populates the sublevels (intersystem crossing, say) knows the molecule, not the field.  The
    coherences that the field makes of it average out, so that level i of the field is populated by
    sum_k p_k |<i|k>|^2 over the zero-field states k (S. S. Kim, S. I. Weissman, J. Magn. Reson. 24,
    167 (1976), from memory).  Nuclear states are populated evenly; what is equal for all states is
    taken away, for it makes no signal.

    Parameters
    ----------
    populations : sequence of float, length prod(2S + 1)
        Of the electron's sublevels at zero field, from the lowest up; scaled to sum to 1.  Levels
        that are degenerate share theirs evenly.
    """
    vectors, group, of_nuclei = _zero_field(system)
    share = np.asarray(populations, dtype=float) / sum(populations)
    share = (np.bincount(group, share) / np.bincount(group))[group] - 1 / len(group)
    share[np.abs(share) < 1e-12] = 0.0
    state = (vectors * share) @ vectors.conj().T
    return np.kron(state, np.eye(of_nuclei)) / of_nuclei


def shares_unevenly(system: System, populations: Sequence[float]) -> bool:
    """Whether `zero_field_state` has to level out populations that differ between degenerate levels."""
    _, group, _ = _zero_field(system)
    p = np.asarray(populations, dtype=float)
    mean = np.bincount(group, p) / np.bincount(group)
    return bool(np.abs(p - mean[group]).max() > 1e-9 * p.sum())


def _zero_field(system: System) -> tuple[NDArray[np.complex128], NDArray[np.intp], int]:
    """Return the electron's zero-field states, the number of the level each belongs to, and how many nuclear states."""
    n = len(system.h0)
    of_nuclei = n // math.prod(round(2 * s + 1) for s in system.spins[: system.electrons])
    of_electrons = n // of_nuclei
    # hyperfine and quadrupole terms have no trace over the nuclei
    alone = np.einsum("anbn->ab", system.h0.reshape(of_electrons, of_nuclei, of_electrons, of_nuclei)) / of_nuclei
    energy, vectors = np.linalg.eigh(alone)
    alike = 1e-8 * (np.abs(alone).max() + 1e3 * np.abs(system.zeeman).max())
    return vectors, np.concatenate([[0], np.cumsum(np.diff(energy) > alike)]), of_nuclei


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
