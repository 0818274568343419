"""Resonance fields against the direction of the field: along a rotation or a path, and over the sphere.

For pictures and for the eye: exact resonances (`spinfit.resonance.find`), nuclei that couple weakly
left out, since they only split each line further.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from spinfit.crystal import every_site
from spinfit.hamiltonian import System, systems
from spinfit.isotropic import isotropic
from spinfit.resonance import Resonances, find
from spinfit.species import Species
from spinfit.sweep import Sample, Sweep
from spinfit.treatment import decided

Array = NDArray[np.float64]

NEGLIGIBLE = 1e-4
"""Weight relative to the strongest below which a resonance is left out."""
WORK = 2_000_000
"""Directions times squared states that are searched at once."""
SAME_SITE = 1e-6
"""Sites whose directions differ by no more than this have the same lines."""


@dataclass(frozen=True, eq=False)
class Strand:
    """One line as the direction changes: the k-th resonance of one pair of levels of one system.

    Attributes
    ----------
    species : int
        Index into the species asked for.
    site : int
        0 but for crystals of several sites.
    lower, upper : int
        Levels counted from 1 by energy.
    place : ndarray of int, shape (m,)
        Indices into the directions, ascending, without a gap.
    field, weight : ndarray, shape (m,)
        mT; relative to the strongest resonance of all.
    """

    species: int
    site: int
    lower: int
    upper: int
    place: NDArray[np.intp]
    field: Array
    weight: Array


@dataclass(frozen=True, eq=False)
class SphereLines:
    """Every resonance of one species over a hemisphere.

    Attributes
    ----------
    theta, phi : ndarray, shapes (t,) and (p,)
        Centres of the cells, rad; the field's direction in molecular axes.
    system : ndarray of int, shape (r,)
        Isotopologue and the like, for species that are several systems.
    direction : ndarray of int, shape (r,)
        Cell of each resonance, theta first: ``theta_index * p + phi_index``.
    lower, upper : ndarray of int, shape (r,)
        Levels counted from 1 by energy.
    field, weight : ndarray, shape (r,)
        mT; any scale.
    """

    theta: Array
    phi: Array
    system: NDArray[np.intp]
    direction: NDArray[np.intp]
    lower: NDArray[np.intp]
    upper: NDArray[np.intp]
    field: Array
    weight: Array

    def shares(self) -> list[tuple[tuple[int, int], float]]:
        """Return pairs of levels with their share of the intensity over the sphere, the strongest first."""
        area = np.abs(self.weight) * np.sin(self.theta)[self.direction // len(self.phi)]
        total = float(area.sum()) or 1.0
        pairs, place = np.unique(np.stack([self.lower, self.upper]), axis=1, return_inverse=True)
        share = np.bincount(place.ravel(), area, pairs.shape[1]) / total
        order = np.argsort(-share, kind="stable")
        return [((int(pairs[0, k]), int(pairs[1, k])), float(share[k])) for k in order]

    def fields_of(self, pair: tuple[int, int]) -> Array:
        """Return the field of a pair's strongest resonance in each cell, shape (t, p), mT; NaN where it has none."""
        return self._strongest((self.lower == pair[0]) & (self.upper == pair[1]))

    def _strongest(self, which: NDArray[np.bool_]) -> Array:
        grid = np.full(len(self.theta) * len(self.phi), np.nan)
        own = np.flatnonzero(which)
        order = own[np.argsort(np.abs(self.weight[own]), kind="stable")]
        grid[self.direction[order]] = self.field[order]  # of several, the last one stays
        return grid.reshape(len(self.theta), len(self.phi))

    def _across(self) -> Array:
        """Return by how much each resonance's field changes across its cell, shape (r,), mT."""
        out = np.zeros(len(self.field))
        keys, place = np.unique(np.stack([self.system, self.lower, self.upper]), axis=1, return_inverse=True)
        for n in range(keys.shape[1]):
            own = place.ravel() == n
            grid = self._strongest(own)
            round_it = np.concatenate([grid[:, -1:], grid, grid[:, :1]], axis=1)
            steps = np.gradient(grid, axis=0) ** 2 + (0.5 * (round_it[:, 2:] - round_it[:, :-2])) ** 2
            out[own] = np.sqrt(np.nan_to_num(steps)).ravel()[self.direction[own]]
        return out

    def absorption_at(self, field: float, width: float) -> Array:
        """Return what each direction absorbs at a field, shape (t, p), any scale.

        Each cell's lines are averaged over the cell: where the field changes by more than the width from
        one cell to the next, a narrow line would else be seen in some of them only.

        Parameters
        ----------
        width : float
            Peak-to-peak width of Gaussian lines, mT.
        """
        own = width / 2
        sigma = np.sqrt(own**2 + self._across() ** 2 / 6)
        one = self.weight * (own / sigma) * np.exp(-0.5 * ((self.field - field) / sigma) ** 2)
        grid = np.bincount(self.direction, one, len(self.theta) * len(self.phi))
        return grid.reshape(len(self.theta), len(self.phi))


def _systems(species: Species, sweep: Sweep, sample: Sample) -> tuple[System, ...]:
    if sample.form == "solution":
        return systems(isotropic(species), perturb=True)
    scale = max(species.width.gaussian, species.width.lorentzian) or 1.0
    one = decided(species, sweep.frequency, sweep.field, scale, 1e-2, sweep.microwave).species
    return systems(one, perturb=True)


def _found(
    species: Species,
    system: System,
    sweep: Sweep,
    directions: Array,
    microwave: str | Array,
    window: tuple[float, float],
) -> Resonances:
    """Find resonances, so many directions at a time."""
    step = max(8, WORK // len(system.h0) ** 2)
    parts = []
    for start in range(0, len(directions), step):
        block = slice(start, start + step)
        got = find(
            system,
            directions[block],
            sweep.frequency,
            window,
            microwave=microwave if isinstance(microwave, str) else microwave[block],
            temperature=sweep.temperature,
            populations=species.populations,
            accuracy=2.0,
        )
        parts.append((got.direction + start, got.field, got.lower, got.upper, got.slope, got.intensity, got.weight))
    return Resonances(*(np.concatenate(column) for column in zip(*parts, strict=True)))


def _window(sweep: Sweep) -> tuple[float, float]:
    return max(sweep.field[0], 0.0), sweep.field[1]


def rotation(species: Sequence[Species], sweep: Sweep, sample: Sample, angles: Sequence[float]) -> list[Strand]:
    """Return the lines of a crystal as it turns, at every site.

    Parameters
    ----------
    angles : sequence of float
        rad, ascending and close enough together for lines to be followed.
    """
    field, microwave = every_site(sample, angles)
    kept: list[int] = []
    for k in range(field.shape[1]):
        if not any(_same_path(field, microwave, k, other) for other in kept):
            kept.append(k)
    parallel = sweep.microwave == "parallel"
    paths = [(site, field[:, k], "parallel" if parallel else microwave[:, k]) for site, k in enumerate(kept)]
    return _strands(species, sweep, sample, paths)


def _same_path(field: Array, microwave: Array, one: int, other: int) -> bool:
    """Say whether two sites see the same directions all along: then their lines are the same."""
    return all(
        np.abs(np.abs(np.einsum("ai,ai->a", v[:, one], v[:, other])) - 1).max() < SAME_SITE for v in (field, microwave)
    )


def path(species: Sequence[Species], sweep: Sweep, sample: Sample, directions: Array) -> list[Strand]:
    """Return the lines along a path of directions in molecular axes, shape (d, 3)."""
    return _strands(species, sweep, sample, [(0, directions, sweep.microwave)])


def great_circles(steps: int) -> Array:
    """Return directions from z to x, on to y, and back to z, shape (3 steps + 1, 3)."""
    turn = np.linspace(0, np.pi / 2, steps, endpoint=False)
    zero = np.zeros_like(turn)
    sine, cosine = np.sin(turn), np.cos(turn)
    parts = [np.stack([sine, zero, cosine], 1), np.stack([cosine, sine, zero], 1), np.stack([zero, cosine, sine], 1)]
    return np.concatenate([*parts, [[0.0, 0.0, 1.0]]])


def _strands(
    species: Sequence[Species], sweep: Sweep, sample: Sample, paths: Sequence[tuple[int, Array, str | Array]]
) -> list[Strand]:
    found: list[tuple[int, int, Resonances, Array]] = []
    for number, one in enumerate(species):
        for system in _systems(one, sweep, sample):
            for site, directions, microwave in paths:
                got = _found(one, system, sweep, directions, microwave, _window(sweep))
                found.append((number, site, got, got.weight * system.weight * one.amount))
    top = max((float(np.abs(weight).max(initial=0.0)) for *_, weight in found), default=0.0) or 1.0
    strands = []
    for number, site, got, weight in found:
        strands += _followed(number, site, got, weight / top)
    return [strand for strand in strands if np.abs(strand.weight).max() >= NEGLIGIBLE]


def _followed(species: int, site: int, got: Resonances, weight: Array) -> list[Strand]:
    """Cut resonances into strands: of one pair, neighbours in direction that have as many resonances as it."""
    strands = []
    pairs, place = np.unique(np.stack([got.lower, got.upper]), axis=1, return_inverse=True)
    for n in range(pairs.shape[1]):
        own = np.flatnonzero(place.ravel() == n)
        own = own[np.lexsort((got.field[own], got.direction[own]))]
        where, first, count = np.unique(got.direction[own], return_index=True, return_counts=True)
        ends = np.flatnonzero((np.diff(where) != 1) | (np.diff(count) != 0)) + 1
        for run in np.split(np.arange(len(where)), ends):
            for k in range(count[run[0]]):
                rows = own[first[run] + k]
                lower, upper = int(pairs[0, n]) + 1, int(pairs[1, n]) + 1
                strands.append(Strand(species, site, lower, upper, where[run], got.field[rows], weight[rows]))
    return strands


def over_sphere(species: Species, sweep: Sweep, sample: Sample, *, polar: int = 36, around: int = 144) -> SphereLines:
    """Find the resonances of one species in every cell of a hemisphere.

    The other half is the same: the spectrum does not change when the field is reversed.

    Parameters
    ----------
    polar, around : int
        Cells from the pole to the equator, and around.
    """
    theta = (np.arange(polar) + 0.5) * (np.pi / 2 / polar)
    phi = (np.arange(around) + 0.5) * (2 * np.pi / around)
    t, p = (grid.ravel() for grid in np.meshgrid(theta, phi, indexing="ij"))
    directions = np.stack([np.sin(t) * np.cos(p), np.sin(t) * np.sin(p), np.cos(t)], axis=1)
    columns = []
    for number, system in enumerate(_systems(species, sweep, sample)):
        got = _found(species, system, sweep, directions, sweep.microwave, _window(sweep))
        which = np.full(len(got.field), number)
        columns.append((which, got.direction, got.lower + 1, got.upper + 1, got.field, got.weight * system.weight))
    return SphereLines(theta, phi, *(np.concatenate(column) for column in zip(*columns, strict=True)))
