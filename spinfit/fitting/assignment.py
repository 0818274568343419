"""Which calculated resonance each measured line is.

At one setting of the crystal the measured lines and the calculated ones are paired so that the sum of
their costs is lowest (linear assignment; H. W. Kuhn, Naval Res. Logist. Q. 2, 83 (1955), from memory).
The cost of a pair is its squared distance in units of the scatter, capped so that a line that belongs to
nothing does no harm, plus a little for weak transitions, which are measured less often than strong ones.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, fields, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import optimize

from spinfit.crystal import laboratory_directions
from spinfit.fitting.data import Lines
from spinfit.fitting.signals import sample_of, true_field
from spinfit.hamiltonian import System, systems
from spinfit.levels import solve
from spinfit.resonance import find
from spinfit.sites import operations
from spinfit.species import Species, tilt_matrix
from spinfit.sweep import Sample

Array = NDArray[np.float64]
Indices = NDArray[np.intp]

CAP = 25.0
"""Largest cost of a distance: beyond five times the scatter a line belongs to nothing."""
# Transitions weaker than this part of the strongest of their setting are not looked for.
_WEAKEST = 1e-7
# Cost of a factor of e in weight: ten orders of magnitude are worth a distance of five times the scatter.
_WEAKNESS = 1.0
_FORBIDDEN = 1e6
# How far above the highest measured field resonances are looked for.
_BEYOND = 1.25
# MHz/mT: a gap that changes less is not followed to a resonance.
_FLAT = 1.0
# mT: lines of two sites this close are one.
_SAME = 1e-6


@dataclass(frozen=True, eq=False)
class Calculated:
    """Resonances of a table's settings; every array has shape (r,) or (r, 3).

    Attributes
    ----------
    setting, site : ndarray of int
    one, system : ndarray of int
        Number of the species and of its system.
    field : ndarray
        mT.
    lower, upper : ndarray of int
        From 0 by energy.
    slope : ndarray
        Of the gap, MHz/mT.
    weight : ndarray
        Relative to the strongest of the setting.
    """

    setting: Indices
    site: Indices
    one: Indices
    system: Indices
    field: Array
    lower: Indices
    upper: Indices
    slope: Array
    weight: Array

    def only(self, kept: NDArray[Any]) -> Calculated:
        return Calculated(**{f.name: getattr(self, f.name)[kept] for f in fields(self)})


def settings(table: Lines) -> tuple[Array, Indices]:
    """Return the distinct angles or directions of a table, and which each line has."""
    given = table.angle[:, None] if table.angle is not None else table.direction
    assert given is not None
    distinct, place = np.unique(given, axis=0, return_inverse=True)
    return distinct, place.ravel()


def at_settings(table: Lines, distinct: Array) -> Lines:
    """Return the table with one line at each of the given settings."""
    one = distinct[:, 0] if table.angle is not None else None
    two = None if table.angle is not None else distinct
    return replace(table, field=np.zeros(len(distinct)), angle=one, direction=two, uncertainty=None, levels=None)


def directions(sample: Sample, table: Lines) -> tuple[Array, str | Array]:
    """Field and microwave field of each line of a table in each site's molecular axes, (lines, sites, 3)."""
    sample = sample_of(sample, table)
    if table.angle is not None:
        field, wave = laboratory_directions(sample, table.angle)
    else:
        assert table.direction is not None
        theta, phi = table.direction.T
        field = np.stack([np.sin(theta) * np.cos(phi), np.sin(theta) * np.sin(phi), np.cos(theta)], axis=1)
        wave = None
    frames = operations(sample.point_group) @ tilt_matrix(sample.tilt)
    along: str | Array = table.microwave
    if wave is not None and table.microwave != "parallel":
        along = np.einsum("ai,kij->akj", wave, frames)
    return np.einsum("ai,kij->akj", field, frames), along


def systems_of(species: Sequence[Species]) -> list[tuple[System, ...]]:
    return [systems(one) for one in species]


def calculated(species: Sequence[Species], sample: Sample, table: Lines, *, highest: float | None = None) -> Calculated:
    """Every resonance at a table's distinct settings, up to a little above the highest measured field."""
    return calculated_each(species, sample, (table,), highest=highest)[0]


def calculated_each(
    species: Sequence[Species], sample: Sample, tables: Sequence[Lines], *, highest: float | None = None
) -> list[Calculated]:
    """Every resonance at each table's distinct settings; tables taken under the same conditions share one search."""
    alike: dict[tuple[object, ...], list[int]] = {}
    for n, table in enumerate(tables):
        by_angle = table.angle is not None and table.microwave != "parallel"
        alike.setdefault((table.frequency, table.temperature, table.microwave, by_angle), []).append(n)
    out: dict[int, Calculated] = {}
    for members in alike.values():
        placed = [directions(sample, at_settings(tables[n], settings(tables[n])[0])) for n in members]
        edges = np.cumsum([0] + [len(field) for field, _ in placed])
        field = np.concatenate([field for field, _ in placed])
        waves = [wave for _, wave in placed if not isinstance(wave, str)]
        along = np.concatenate(waves) if waves else placed[0][1]
        top = max(_BEYOND * float(np.max(true_field(tables[n], tables[n].field))) for n in members)
        found = _found(species, tables[members[0]], field, along, top if highest is None else highest)
        for n, first, last in zip(members, edges[:-1], edges[1:], strict=True):
            own = found.only((found.setting >= first) & (found.setting < last))
            out[n] = replace(own, setting=own.setting - first)
    return [out[n] for n in range(len(tables))]


def _found(species: Sequence[Species], table: Lines, field: Array, wave: str | Array, top: float) -> Calculated:
    """Every resonance up to a field, by the number of the setting; `field` has shape (settings, sites, 3)."""
    count, sites = field.shape[:2]
    flat = field.reshape(-1, 3)
    along = wave if isinstance(wave, str) else np.ascontiguousarray(wave.reshape(-1, 3))
    pieces = []
    for n, several in enumerate(systems_of(species)):
        for k, system in enumerate(several):
            got = find(
                system,
                flat,
                table.frequency,
                (0.0, top),
                microwave=along,
                temperature=table.temperature,
                populations=species[n].populations,
            )
            setting, site = np.divmod(got.direction, sites)
            number = np.full((2, got.field.size), [[n], [k]], dtype=np.intp)
            size = np.abs(got.weight) * system.weight * abs(species[n].amount)
            pieces.append((setting, site, *number, got.field, got.lower, got.upper, got.slope, size))
    found = Calculated(*(np.concatenate(column) for column in zip(*pieces, strict=True)))
    strongest = np.zeros(count)
    np.maximum.at(strongest, found.setting, found.weight)
    found = replace(found, weight=found.weight / np.maximum(strongest[found.setting], 1e-300))
    return _without_twins(found.only(found.weight > _WEAKEST))


def _without_twins(found: Calculated) -> Calculated:
    """Leave one of the lines that equivalent sites have at one place."""
    order = np.lexsort((found.site, found.field, found.upper, found.lower, found.system, found.one, found.setting))
    found = found.only(order)
    if found.field.size < 2:
        return found
    same = np.diff(found.field) < _SAME
    for key in ("setting", "one", "system", "lower", "upper"):
        same &= np.diff(getattr(found, key)) == 0
    same &= np.diff(found.site) != 0
    return found.only(np.concatenate(([True], ~same)))


def assign(found: Calculated, table: Lines, scatter: Array) -> Indices:
    """Return which calculated line each measured one is, -1 for none, shape (lines,).

    Parameters
    ----------
    scatter : ndarray, shape (lines,)
        mT.
    """
    _, place = settings(table)
    measured = true_field(table, table.field)
    out = np.full(measured.size, -1, dtype=np.intp)
    for setting in range(int(place.max()) + 1):
        rows, columns = np.flatnonzero(place == setting), np.flatnonzero(found.setting == setting)
        if columns.size == 0:
            continue
        distance = (measured[rows, None] - found.field[columns]) / scatter[rows, None]
        # Beyond the cap a long distance still costs a little more than a shorter one.
        square = distance**2
        cost = np.where(square > CAP, CAP * (1 + np.log(np.maximum(square, CAP) / CAP)), square)
        cost = cost - _WEAKNESS * np.log(found.weight[columns])
        if table.levels is not None:
            for side, own in ((0, found.lower), (1, found.upper)):
                label = table.levels[rows, side][:, None]
                cost = np.where((label > 0) & (label != own[columns] + 1), _FORBIDDEN, cost)
        taken, given = optimize.linear_sum_assignment(cost)
        good = cost[taken, given] < _FORBIDDEN
        out[rows[taken[good]]] = columns[given[good]]
    return out


def distances(species: Sequence[Species], sample: Sample, table: Lines) -> tuple[Array, Array]:
    """How far each measured field is from a resonance of each pair of levels, to first order.

    Returns
    -------
    distance : ndarray, shape (lines, pairs)
        (gap - h nu) / slope at the measured field, mT, for the pairs of every site, system and species.
    cost : ndarray, shape (lines, pairs)
        In squared scatters: what a weak transition costs.
    """
    field, wave = directions(sample, table)
    count, sites = field.shape[:2]
    measured = np.abs(true_field(table, table.field))
    distance, weight = [], []
    for one, several in zip(species, systems_of(species), strict=True):
        for system in several:
            lower, upper = np.triu_indices(len(system.h0), 1)
            along = wave if isinstance(wave, str) else wave.reshape(-1, 3)
            got = solve(system, field.reshape(-1, 3), np.repeat(measured, sites), microwave=along)
            gap = got.energy[:, upper] - got.energy[:, lower] - table.frequency
            slope = np.maximum(np.abs(got.slope[:, upper] - got.slope[:, lower]), _FLAT)
            distance.append((gap / slope).reshape(count, -1))
            strength = got.intensity[:, lower, upper] / slope * system.weight * abs(one.amount)
            if table.levels is not None:
                for side, own in ((0, lower), (1, upper)):
                    label = np.repeat(table.levels[:, side], sites)[:, None]
                    strength = np.where((label > 0) & (label != own + 1), 0.0, strength)
            weight.append(strength.reshape(count, -1))
    all_weights = np.concatenate(weight, axis=1)
    relative = all_weights / np.maximum(all_weights.max(axis=1, keepdims=True), 1e-300)
    return np.concatenate(distance, axis=1), -_WEAKNESS * np.log(np.maximum(relative, _WEAKEST))


def gaps(species: Sequence[Species], sample: Sample, table: Lines, which: Calculated, rows: Indices) -> Array:
    """Gap of each assigned line's two levels at its calculated field, MHz, shape (rows,).

    Parameters
    ----------
    which : Calculated
        One entry for each of `rows`.
    """
    field, _ = directions(sample, table)
    along = field[rows, which.site]
    out = np.empty(rows.size)
    every = systems_of(species)
    for n, k in set(zip(which.one.tolist(), which.system.tolist(), strict=True)):
        own = np.flatnonzero((which.one == n) & (which.system == k))
        got = solve(every[n][k], along[own], which.field[own], intensities=False)
        line = np.arange(own.size)
        out[own] = got.energy[line, which.upper[own]] - got.energy[line, which.lower[own]]
    return out
