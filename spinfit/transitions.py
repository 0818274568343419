"""What each pair of levels contributes to a spectrum, and what the sweep does not reach.

Exact resonances (`spinfit.resonance.find`) are summed over a mesh of directions, from zero field to
where the highest could be.  It is a survey for people, good to about a per cent, computed only when
asked for; the spectrum itself does not come from it.

The highest resonance is bounded by the highest field at which two levels of neighbouring projection
can be h nu apart: (h nu + span of the levels at zero field) / smallest |g| mu_B.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from spinfit.alignment import NARROW, Alignment, mesh_directions, ring_directions
from spinfit.crystal import site_directions
from spinfit.hamiltonian import System, systems
from spinfit.isotropic import isotropic
from spinfit.resonance import find
from spinfit.species import Species
from spinfit.sweep import Sample, Sweep
from spinfit.symmetry import symmetry_of
from spinfit.treatment import decided
from spinfit.units import MU_B_OVER_H

Array = NDArray[np.float64]

LEAST = 1e-4
"""Share of a species' intensity below which a transition is not listed."""
OUTSIDE = 0.01
"""Share of the intensity outside the sweep from which on a warning says so."""
POLAR = ((12, 24), (40, 12), (10**9, 8))
"""Polar angles of the mesh for systems up to so many states."""
SMALLEST_G = 0.05
"""g below which the field range of the search grows no further."""
WORK = 1_000_000
"""Directions times squared states that are searched at once."""

Angles = tuple[float, float]


@dataclass(frozen=True)
class Transition:
    """One pair of levels of one system of a species.

    Attributes
    ----------
    system : str
        Isotopologue and total spins, empty where there is only one.
    lower, upper : int
        Levels counted from 1 by energy.
    low, high : float
        Lowest and highest resonance field, mT.
    at_low, at_high : (theta, phi)
        Directions of the static field there, rad, molecular axes.
    share : float
        Of the species' intensity, emission counted as positive; all of a species sum to 1.
    net : float
        The same with emission negative.
    inside : float
        Share of this transition's intensity that lies within the sweep.
    resonances : int
        Most resonances of the pair in one direction: more than 1 for a looping transition.
    """

    system: str
    lower: int
    upper: int
    low: float
    high: float
    at_low: Angles
    at_high: Angles
    share: float
    net: float
    inside: float
    resonances: int


@dataclass(frozen=True)
class Survey:
    """All transitions of a species, the strongest first, and the intensity outside the sweep.

    Attributes
    ----------
    transitions : tuple of Transition
        Those with at least `LEAST` of the intensity.
    below, above : float
        Shares of the intensity below and above the sweep.
    searched : float
        mT up to which resonances were sought.
    directions : int
        At which they were sought, all systems together.
    split : tuple of str
        Nuclei whose weak coupling splits the transitions further: fields are those before that.
    """

    transitions: tuple[Transition, ...]
    below: float
    above: float
    searched: float
    directions: int
    split: tuple[str, ...] = ()

    @property
    def outside(self) -> float:
        """Share of the intensity outside the sweep."""
        return self.below + self.above


def transitions(species: Species, sweep: Sweep, sample: Sample | None = None) -> Survey:
    """Survey the transitions of a species.

    Parameters
    ----------
    species : Species
    sweep : Sweep
    sample : Sample, optional
        A powder by default.  In solution tensors are averaged; a crystal's angles count evenly.

    Returns
    -------
    Survey
    """
    sample = sample or Sample()
    if sample.form == "solution":
        one = isotropic(species)
    else:
        scale = max(species.width.gaussian, species.width.lorentzian) or 1.0
        one = decided(species, sweep.frequency, sweep.field, scale, 1e-2, sweep.microwave).species
    every = systems(one, perturb=True)
    top = max(_highest(one, system, sweep) for system in every)
    parts = [_lines(one, system, sweep, sample, top) for system in every]
    lines = _Lines.joined([part._replace(weight=part.weight * s.weight) for part, s in zip(parts, every, strict=True)])
    size = np.abs(lines.weight)
    size = size / (size.sum() or 1.0)
    # the spectrum is even in the field: a sweep through zero sees both ends of it
    below, above = lines.field < sweep.field[0], lines.field > max(sweep.field[1], -sweep.field[0])
    listed = _listed(lines, size, ~(below | above), [one.label for one in every] if len(every) > 1 else [""])
    return Survey(
        tuple(sorted(listed, key=lambda row: -row.share)),
        float(size[below].sum()),
        float(size[above].sum()),
        top,
        sum(part.directions for part in parts),
        tuple(weak.name for weak in every[0].weak),
    )


class _Lines(NamedTuple):
    """Resonances, one a row, and at how many directions they were sought."""

    system: NDArray[np.intp]
    lower: NDArray[np.intp]
    upper: NDArray[np.intp]
    field: Array
    weight: Array
    way: Array  # (r, 3): direction of the field
    number: NDArray[np.intp]  # of the direction
    directions: int

    @classmethod
    def joined(cls, parts: list[_Lines]) -> _Lines:
        """Put the lines of several systems together."""
        system = np.repeat(np.arange(len(parts)), [len(part.field) for part in parts])
        columns = [np.concatenate(column) for column in list(zip(*parts, strict=True))[1:-1]]
        return cls(system, *columns, sum(part.directions for part in parts))


def _highest(species: Species, system: System, sweep: Sweep) -> float:
    """Return the field beyond which no allowed resonance can be, mT."""
    energy = np.linalg.eigvalsh(system.h0)
    g = max(SMALLEST_G, min(abs(value) for spin in species.spins for value in spin.g))
    return max((sweep.frequency + float(energy[-1] - energy[0])) / (g * MU_B_OVER_H), *sweep.field)


def _directions(system: System, sweep: Sweep, sample: Sample) -> tuple[Array, Array, str | Array]:
    """Return directions of the field (d, 3), their shares, and the microwave field's direction."""
    if sample.form == "crystal":
        where = site_directions(sample, sample.angles)
        along = "parallel" if sweep.microwave == "parallel" else where.microwave
        return where.field, where.share / len(sample.angles), along
    symmetry = symmetry_of(system)
    if sample.form == "solution" or symmetry.kind == "point":
        return np.array([[0.0, 0.0, 1.0]]), np.ones(1), sweep.microwave
    polar = next(count for size, count in POLAR if len(system.h0) <= size)
    around = polar if symmetry.kind == "octant" else 2 * polar if symmetry.kind == "quarter" else 4 * polar
    if symmetry.kind == "axial":
        polar, around = 4 * polar, 1
    alignment = Alignment.of(sample) if sample.form == "aligned" else None
    if alignment is not None and alignment.feature < NARROW:
        return *ring_directions(alignment, polar, 2 * polar), sweep.microwave
    return *mesh_directions(alignment, symmetry, polar, around), sweep.microwave


def _lines(species: Species, system: System, sweep: Sweep, sample: Sample, top: float) -> _Lines:
    """Return the resonances of one system; weights hold the share of their direction."""
    directions, share, microwave = _directions(system, sweep, sample)
    polarised = species.populations if sample.form != "solution" else None
    step = max(8, WORK // len(system.h0) ** 2)
    columns = []
    for start in range(0, len(directions), step):
        block = slice(start, start + step)
        along = microwave if isinstance(microwave, str) else microwave[block]
        got = find(
            system,
            directions[block],
            sweep.frequency,
            (0.0, top),
            microwave=along,
            temperature=sweep.temperature,
            populations=polarised,
        )
        number = start + got.direction
        columns.append((got.lower, got.upper, got.field, got.weight * share[number], directions[number], number))
    joined = [np.concatenate(column) for column in zip(*columns, strict=True)]
    return _Lines(np.zeros(len(joined[0]), dtype=np.intp), *joined, len(directions))


def _listed(lines: _Lines, size: Array, inside: NDArray[np.bool_], labels: list[str]) -> list[Transition]:
    """Return the transitions that carry enough of the intensity `size`, shape (r,), summing to 1."""
    keys = np.stack([lines.system, lines.lower, lines.upper])
    pairs, place = np.unique(keys, axis=1, return_inverse=True)
    place = place.ravel()
    share = np.bincount(place, size, pairs.shape[1])
    found = []
    for k in np.flatnonzero(share >= LEAST):
        rows = np.flatnonzero(place == k)
        low, high = rows[np.argmin(lines.field[rows])], rows[np.argmax(lines.field[rows])]
        system, lower, upper = (int(value) for value in pairs[:, k])
        found.append(
            Transition(
                labels[system],
                lower + 1,
                upper + 1,
                float(lines.field[low]),
                float(lines.field[high]),
                _angles(lines.way[low]),
                _angles(lines.way[high]),
                float(share[k]),
                float((np.sign(lines.weight[rows]) * size[rows]).sum()),
                float(size[rows][inside[rows]].sum() / share[k]),
                int(np.bincount(lines.number[rows]).max()),
            )
        )
    return found


def _angles(way: Array) -> Angles:
    """Return (theta, phi) of a direction or its opposite: z, at the equator y, at its edge x is not negative."""
    z, y, x = np.where(np.abs(way) > 1e-9, way, 0.0)[::-1]
    if (z, y, x) < (0.0, 0.0, 0.0):
        x, y, z = -x, -y, -z
    theta = float(np.arctan2(np.hypot(x, y), z))
    return theta, float(np.arctan2(y, x)) + 0.0 if theta > 1e-9 else 0.0


def remarks(name: str, survey: Survey) -> tuple[tuple[str, str], ...]:
    """Warn, as (code, text), when much intensity lies outside the sweep."""
    if survey.outside <= OUTSIDE:
        return ()
    text = (
        f"{name}: {100 * survey.outside:.3g} % of the intensity lies outside the sweep "
        f"({100 * survey.below:.2g} % below, {100 * survey.above:.2g} % above)"
    )
    return (("outside_sweep", text),)
