"""Species tumbling in solution: every line's field and width.

Tensors are averaged (`spinfit.isotropic`).  Equivalent nuclei count by their total spin F.  Strongly
coupled nuclei are treated exactly (for one: G. Breit, I. I. Rabi, Phys. Rev. 38, 2082 (1931)); those
whose exact treatment would not move the spectrum are added to the exact lines by perturbation to
second order in a (R. W. Fessenden, J. Chem. Phys. 37, 747 (1962), for S = 1/2:
a m + a^2 [F(F+1) - m^2] / 2 nu).  The criterion is `third_order`.

The Lorentzian width of a line is `lorentzian` + a + b m + c m^2, peak to peak, with m the projection
on the field of the nuclear spin that stands first among the species' nuclei, summed over its
equivalent ones: for a positive coupling the line of the largest m lies lowest in field.  The
Gaussian width is common to all lines; `hidden_hyperfine` adds to it the root mean square of its
components, taken to field by 1/|d nu/dB|.  Spreads average out.
"""

from __future__ import annotations

import itertools
import math
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from spinfit.errors import InputError
from spinfit.isotopes import mixtures
from spinfit.isotropic import Core, Lines, Response, core_of, exact_lines, isotropic
from spinfit.lineshape import GAUSSIAN_FWHM, FieldGrid, Shape
from spinfit.nuclei import NEGLIGIBLE, Exact, arrangements, isotopologues, kinds, sizes
from spinfit.operators import coupled_spins, dimension, multiplicity
from spinfit.species import Nucleus, Species, principal
from spinfit.sweep import Sweep
from spinfit.units import MU_B_OVER_H

Array = NDArray[np.float64]

LARGEST = 1500
"""States of the largest matrix into which nuclei are put of our own choice."""
MOST_WORK = 1e6
"""Sum of the cubes of all blocks' sizes up to which nuclei are treated exactly of our own choice."""
GRAIN = 0.04
"""How close in line widths, at the default tolerance, lines of like behaviour are merged when there are many."""
MANY = 50_000
"""Number of lines from which on neighbours are merged."""


# Which nuclei are exact ----------------------------------------------------------------------------


def third_order(nuclei: tuple[Nucleus, ...], frequency: float, g: float) -> Array:
    """Estimate what second order leaves out for each nucleus, mT, shape (nuclei,).

    The largest of the term of third order in the nucleus's own coupling, |a|^3 F / nu^2, and of what
    the mixing of its projection with another one's adds: with c = |a_1 a_2| (F_1 + 1/2) (F_2 + 1/2) / 4 nu
    between states |a_1 - a_2|/2 apart, both levels move by c^2 over that, or by c at most, in opposite
    directions.  It is that of the outermost lines; most lines are less far off.
    """
    a = np.array([one.A[0] for one in nuclei])
    total = np.array([max(kind.spin for kind in kinds(one)) * one.count for one in nuclei])
    error = np.abs(a) ** 3 * total / frequency**2
    for i, j in itertools.combinations(range(len(nuclei)), 2):
        c = abs(a[i] * a[j]) * (total[i] + 0.5) * (total[j] + 0.5) / (4 * frequency)
        apart = 0.5 * abs(a[i] - a[j])
        mixing = 2 * c * min(1.0, c / apart if apart else 1.0)
        error[[i, j]] = np.maximum(error[[i, j]], mixing)
    return error / (g * MU_B_OVER_H)


def settle(species: Species, frequency: float, allowed: float) -> tuple[Species, tuple[tuple[str, str], ...]]:
    """Decide every "auto" of an isotropic species' nuclei; return it and warnings (code, text).

    Parameters
    ----------
    allowed : float
        mT by which a line may be off.
    """
    nuclei = list(species.nuclei)
    several = len(species.spins) > 1  # their states lie close together: second order is of no use
    error = third_order(species.nuclei, frequency, min(abs(spin.g[0]) for spin in species.spins))
    exact = {k for k, one in enumerate(nuclei) if one.treat == "exact" or (several and one.treat == "auto")}
    wanted = [k for k, one in enumerate(nuclei) if one.treat == "auto" and not several and error[k] > allowed]
    warnings = []
    for k in sorted(wanted, key=lambda k: -abs(nuclei[k].A[0])):
        if _work(species, sorted(exact | {k})) <= MOST_WORK:
            exact.add(k)
            continue
        name = nuclei[k].isotope or nuclei[k].element
        text = f"{name} with a = {nuclei[k].A[0]:g} MHz is treated to second order, which may be {error[k]:.2g} mT off"
        warnings.append(("second_order", f'{text}; treat = "exact" takes it exactly'))
    settled = [
        replace(one, treat="exact" if k in exact else "second order" if one.treat == "auto" else one.treat)
        for k, one in enumerate(nuclei)
    ]
    return replace(species, nuclei=tuple(settled)), tuple(warnings)


def _work(species: Species, chosen: list[int]) -> float:
    """Return the sum of the cubes of the sizes of all blocks, infinite beyond `LARGEST` states."""
    exact = [Exact(k, species.nuclei[k].count, kinds(species.nuclei[k])) for k in chosen]
    ways = isotopologues(exact, NEGLIGIBLE)
    spins = [spin.S for spin in species.spins]
    if dimension(spins) * max(sizes(exact, numbers)[0] for _, numbers in ways) > LARGEST:
        return math.inf
    work = 0.0
    for sites in arrangements(exact, ways):
        counts = np.ones(1)
        for spin in (*spins, *(site.spin for site in sites)):
            counts = np.convolve(counts, np.ones(multiplicity(spin)))
        work += float((counts**3).sum())
    return work


# Weak nuclei ---------------------------------------------------------------------------------------


def pattern(nucleus: Nucleus) -> Array:
    """Return what `count` equivalent nuclei may be, shape (5, states): share, a m, two terms in a^2, m.

    The rows are share of the states, sum a m (MHz), sum a^2 [F(F+1) - m^2]/4 and sum a^2 m/4 (MHz^2;
    zero to first order), and sum m, over the kinds of isotopes that fill the places.
    """
    own = kinds(nucleus)
    columns = []
    for share, filling in mixtures([kind.share for kind in own], nucleus.count):
        if share < 1e-9:
            continue
        parts = []
        for kind, count in zip(own, filling, strict=True):
            states = [
                (often / multiplicity(kind.spin) ** count, total, total - k)
                for total, often in (coupled_spins(kind.spin, count) if count and kind.spin else ((0.0, 1),))
                for k in range(multiplicity(total))
            ]
            s, total, m = np.array(states).T
            a = kind.hyperfine[0, 0]
            square = 0.0 if nucleus.treat == "first order" else 0.25 * a * a
            parts.append(np.array([s, a * m, square * (total * (total + 1) - m * m), square * m, m]))
        for choice in itertools.product(*(part.T for part in parts)):
            rows = np.array(choice)
            columns.append([share * rows[:, 0].prod(), *rows[:, 1:].sum(axis=0)])
    return np.array(columns).T


def split(lines: Lines, response: Response, nucleus: Nucleus, *, first: bool) -> Lines:
    """Split every line by one weak nucleus, or several equivalent ones.

    Parameters
    ----------
    first : bool
        Whether this nucleus is the one by whose projection the widths go.
    """
    share, linear, even, odd, m = (row[:, None] for row in pattern(nucleus))
    e, origin = nucleus.couples_to - 1, lines.origin
    shift = linear * response.first[e, origin]
    shift = shift + even * response.even[e, origin] + odd * response.odd[e, origin]
    return Lines(
        (lines.field - shift / lines.slope).ravel(),
        (share * lines.weight).ravel(),
        np.broadcast_to(lines.slope, shift.shape).ravel(),
        (lines.m + (m if first else np.zeros_like(m))).ravel(),
        np.broadcast_to(origin, shift.shape).ravel(),
    )


def behaviour(response: Response, weak: list[Nucleus], slope: Array, grain: float) -> NDArray[np.intp]:
    """Number the exact lines by how weak nuclei split them, shape (r,), alike to within `grain` (mT)."""
    linear, square = 0.0, 0.0
    for one in weak:
        top = max(kind.spin for kind in kinds(one)) * one.count
        linear += abs(one.A[0]) * top
        square += 0.25 * one.A[0] ** 2 * top * (top + 1)
    moved = np.concatenate([linear * response.first, square * response.even, square * response.odd]) / slope
    _, alike = np.unique(np.rint(moved / grain), axis=1, return_inverse=True)
    return alike.ravel()


def merged(lines: Lines, alike: NDArray[np.intp], grain: float) -> Lines:
    """Put lines that lie within `grain` (mT), split alike further on and have one m together, at their centre.

    Centres keep the first moment, so that a line moves a Gaussian by (grain/sigma)^2 / 24 of its second
    derivative at most.
    """
    cell = np.floor(lines.field / grain).astype(np.int64)
    m = np.rint(2 * (lines.m - lines.m.min())).astype(np.int64)
    key = (alike[lines.origin] * (m.max() + 1) + m) * (np.ptp(cell) + 1) + cell - cell.min()
    _, first, place = np.unique(key, return_index=True, return_inverse=True)
    weight = np.bincount(place, lines.weight)
    field = np.bincount(place, lines.weight * lines.field) / np.where(weight != 0, weight, 1.0)
    return Lines(field, weight, lines.slope[first], lines.m[first], lines.origin[first])


# Spectrum ------------------------------------------------------------------------------------------


def shape_of(species: Species, sweep: Sweep, m: float, slope: float) -> Shape:
    """Return the shape of the lines with this projection of the first nucleus and this d nu/dB (MHz/mT).

    Raises
    ------
    InputError
        The width is not positive.
    """
    width = species.width
    lorentzian = width.lorentzian
    if width.a is not None:
        lorentzian += width.a + (width.b or 0.0) * m + (width.c or 0.0) * m * m
    hidden = math.sqrt(float(np.mean(principal(width.hidden_hyperfine) ** 2)))
    gaussian = math.hypot(width.gaussian, hidden / (abs(slope) * GAUSSIAN_FWHM))
    if lorentzian < 0:
        found = f"the width a + b m + c m^2 is {lorentzian:.3g} mT at m = {m:g}"
        raise InputError(found, "change a, b or c so that it is positive for every line", place=f"{species.name}.width")
    if gaussian == 0 and lorentzian == 0:
        raise InputError(
            "has no width", 'give width.gaussian, width.lorentzian or width.a, e.g. "0.1 mT"', place=species.name
        )
    return Shape.from_widths(gaussian, lorentzian, detect=sweep.detect, modulation=sweep.modulation, phase=sweep.phase)


def _extremes(species: Species, sweep: Sweep) -> list[Shape]:
    """Return the shapes that occur, one for each m, at the free slope."""
    slope = max(abs(spin.g[0]) for spin in species.spins) * MU_B_OVER_H
    top = 0.0
    if species.nuclei:
        top = max(kind.spin for kind in kinds(species.nuclei[0])) * species.nuclei[0].count
    steps = round(4 * top)
    return [shape_of(species, sweep, -top + 0.5 * k, slope) for k in range(steps + 1)]


def _extent(species: Species) -> float:
    """Return the largest shift by all weak nuclei, mT."""
    g = min(abs(spin.g[0]) for spin in species.spins) * MU_B_OVER_H
    size = sum(
        max(abs(kind.hyperfine[0, 0]) * kind.spin for kind in kinds(one)) * one.count
        for one in species.nuclei
        if one.treat != "exact"
    )
    return 1.05 * size / g


def _systems(species: Species) -> tuple[list[tuple[float, Core]], list[Nucleus]]:
    """Return (weight, core) of every isotopologue and total spin, and the weak nuclei."""
    resolved, exact, weak = {}, [], []
    for index, nucleus in enumerate(species.nuclei):
        resolved[index] = kinds(nucleus)
        if nucleus.treat == "exact":
            exact.append(Exact(index, nucleus.count, resolved[index]))
        else:
            weak.append(nucleus)
    ways = isotopologues(exact, NEGLIGIBLE)
    n = dimension([spin.S for spin in species.spins]) * max(sizes(exact, numbers)[0] for _, numbers in ways)
    if n > 4 * LARGEST:
        raise InputError(
            f"the spins make a matrix of {n} states",
            'set treat = "second order" for the weakest nuclei',
            place="nucleus",
        )
    every = arrangements(exact, ways)
    return [(weight, core_of(species, sites, resolved)) for sites, weight in every.items()], weak


def solution(
    species: Species, sweep: Sweep, fields: Array, *, tolerance: float = 1e-3
) -> tuple[Array, dict[str, object], tuple[tuple[str, str], ...]]:
    """Compute a species' spectrum in solution, for an amount of 1.

    Parameters
    ----------
    species : Species
        Its tensors are averaged here.
    sweep : Sweep
        Conditions; the fields are those of `fields`.
    fields : ndarray, shape (n,)
        mT.
    tolerance : float
        Relative to the largest value in the window.

    Returns
    -------
    signal : ndarray, shape (n,)
    report : dict
        How each nucleus was treated, numbers of lines and of distinct widths.
    warnings : tuple of (code, text)

    Raises
    ------
    InputError
        No positive width for some line; a matrix too large.
    """
    plain = isotropic(species)
    shapes = _extremes(plain, sweep)
    scale, reach = min(shape.scale for shape in shapes), max(shape.reach(tolerance) for shape in shapes)
    plain, warnings = settle(plain, sweep.frequency, tolerance * scale)
    window = float(fields.min()), float(fields.max())
    grid = FieldGrid.covering(*window, scale, reach, tolerance)
    margin = reach + _extent(plain)
    low, high = window[0] - margin, window[1] + margin
    if low < 0:
        low, high = 0.0, max(high, -low)
    cores, weak = _systems(plain)
    lines, response = _every_exact_line(cores, sweep, (low, high), bool(weak), tolerance)
    if plain.width.a is None:
        lines = lines._replace(m=np.zeros(len(lines.m)))
    grain = GRAIN * scale * math.sqrt(tolerance / 1e-3)
    alike = behaviour(response, weak, lines.slope, grain)
    for nucleus in weak:
        lines = split(lines, response, nucleus, first=nucleus is plain.nuclei[0] and plain.width.a is not None)
        if len(lines.field) > MANY:
            lines = merged(lines, alike, grain)
    histograms: dict[Shape, Array] = {}
    _deposit(histograms, grid, lines, plain, sweep)
    signal = np.zeros(len(fields))
    for shape, histogram in histograms.items():
        signal += grid.sample(grid.coefficients({0: histogram}, shape), fields)
    report: dict[str, object] = {
        "form": "solution",
        "nuclei": [_treatment(one) for one in plain.nuclei],
        "exact_systems": len(cores),
        "lines": len(lines.field),
        "widths": len(histograms),
    }
    return signal, report, warnings


def _every_exact_line(
    cores: list[tuple[float, Core]], sweep: Sweep, field_range: tuple[float, float], respond: bool, tolerance: float
) -> tuple[Lines, Response]:
    """Return the lines of all isotopologues and total spins, those too weak to be seen left out."""
    found = [
        exact_lines(
            core,
            sweep.frequency,
            field_range,
            microwave=sweep.microwave,
            temperature=sweep.temperature,
            respond=respond,
        )
        for _, core in cores
    ]
    lines = Lines(*(np.concatenate(column) for column in zip(*(one for one, _ in found), strict=True)))
    response = Response(*(np.concatenate(column, axis=1) for column in zip(*(one for _, one in found), strict=True)))
    share = np.repeat([weight for weight, _ in cores], [len(one.field) for one, _ in found])
    weight = lines.weight * share
    keep = np.abs(weight) > 1e-3 * tolerance * np.abs(weight).max(initial=0.0) * min(1.0, 100 / max(len(weight), 1))
    lines = Lines(*(column[keep] for column in lines._replace(weight=weight)))
    return lines._replace(origin=np.arange(len(lines.field))), Response(*(one[:, keep] for one in response))


def _deposit(histograms: dict[Shape, Array], grid: FieldGrid, lines: Lines, species: Species, sweep: Sweep) -> None:
    """Add lines to the histograms of their shapes; slopes within 1 % count as one where they matter at all."""
    hidden = max(species.width.hidden_hyperfine) > 0
    widths = species.width.a is not None
    slope = np.exp(0.01 * np.round(100 * np.log(np.abs(lines.slope)))) if hidden else np.ones(len(lines.field))
    m = lines.m if widths else np.zeros(len(lines.field))
    for m_one, slope_one in sorted(set(zip(m.tolist(), slope.tolist(), strict=True))):
        own = (m == m_one) & (slope == slope_one)
        shape = shape_of(species, sweep, m_one, slope_one)
        into = histograms.setdefault(shape, np.zeros(grid.count))
        into += grid.deposit(lines.field[own], lines.weight[own])
        if grid.start < 0:
            into += grid.deposit(-lines.field[own], lines.weight[own])


def _treatment(nucleus: Nucleus) -> dict[str, object]:
    return {
        "nucleus": nucleus.isotope or nucleus.element,
        "count": nucleus.count,
        "a": nucleus.A[0],
        "treat": nucleus.treat,
    }
