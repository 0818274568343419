"""Nuclei of a species: which isotopes they may be, with which tensors, in which combinations.

Equivalent nuclei without a quadrupole tensor enter by their total spin F = sum I_k: A.(sum I_k) =
A.F conserves F, so this is exact, and n spins 1/2 need matrices n + 1 instead of 2^n times as
large.
"""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass, replace
from fractions import Fraction
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from spinfit.errors import InputError
from spinfit.isotopes import Isotope, isotope, mixtures, natural
from spinfit.operators import coupled_spins, multiplicity
from spinfit.species import NO_TILT, Angles, Nucleus, Species, principal, tilt_matrix
from spinfit.units import MU_N_OVER_H

Tensor = NDArray[np.float64]

NEGLIGIBLE = 1e-4
"""Isotopologues that together are rarer than this are left out; the others' shares then sum to 1 again."""
WEAK_LIMIT = 50.0
"""A nucleus whose largest |A| is at most this (MHz) counts as weakly coupled when `treat` is "auto"."""
MOST_EQUIVALENT = 200
"""Largest `count` of equivalent nuclei."""
MOST_SYSTEMS = 20_000
"""Largest number of isotopologues, and of matrices, of one species."""


@dataclass(frozen=True, eq=False)
class Kind:
    """What a nucleus may be: one isotope with its tensors, or all spinless ones together.

    Attributes
    ----------
    name : str
        "63Cu"; of spinless isotopes the most abundant.
    spin : float
        I; 0 for spinless isotopes, whose tensors are zero.
    share : float
        Fraction of the nuclei; a nucleus's kinds sum to 1.
    hyperfine, quadrupole : ndarray, shape (3, 3)
        A and P in molecular axes, MHz.
    zeeman : float
        -g_n mu_N/h, MHz/mT: the nuclear Zeeman term is zeeman x B.I.
    """

    name: str
    spin: float
    share: float
    hyperfine: Tensor
    quadrupole: Tensor
    zeeman: float


@dataclass(frozen=True, eq=False)
class Weak:
    """A nucleus, or `count` equivalent ones, to be treated by perturbation.

    Attributes
    ----------
    name : str
        Isotope or element as given.
    electron : int
        Which of the system's spins it couples to, counted from 0.
    count : int
        Number of equivalent nuclei.
    order : int
        1 or 2.
    kinds : tuple of Kind
        What each of them may be, with shares; they fill the places independently.
    """

    name: str
    electron: int
    count: int
    order: int
    kinds: tuple[Kind, ...]


class Exact(NamedTuple):
    """A nucleus that is treated exactly: its place in the species (from 0), how many, and what they may be."""

    index: int
    count: int
    kinds: tuple[Kind, ...]


class Site(NamedTuple):
    """A nuclear spin in the matrix: kind `kind` of nucleus `nucleus`; `spin` is I, or F of equivalent ones."""

    nucleus: int
    kind: int
    spin: float


def turned(values: Tensor, tilt: Angles) -> Tensor:
    """Return the matrix in molecular axes of a tensor with these principal values, shape (3, 3)."""
    if tilt == NO_TILT:
        return np.diag(values)
    axes = tilt_matrix(tilt)
    return (axes * values) @ axes.T


def _isotopes(nucleus: Nucleus) -> tuple[Isotope, ...]:
    """Return the isotopes that a nucleus may be, shares as abundances."""
    if nucleus.element is not None:
        try:
            found = natural(nucleus.element)
        except InputError as error:
            raise error.at(place="element") from None
        if not any(one.spin for one in found):
            raise InputError(
                f"no natural isotope of {nucleus.element} has a nuclear spin", "leave the nucleus out", place="element"
            )
        return found
    try:
        one = isotope(str(nucleus.isotope))
    except InputError as error:
        raise error.at(place="isotope") from None
    if not one.spin:
        raise InputError(f"{one.name} has no nuclear spin", "leave the nucleus out", place="isotope")
    return (replace(one, abundance=1.0),)


def _quadrupole_factor(one: Isotope) -> float:
    """Return Q / [I(2I - 1)], to which P is proportional; 0 for I < 1."""
    return one.quadrupole / (one.spin * (2 * one.spin - 1)) if one.spin >= 1 else 0.0


def kinds(nucleus: Nucleus) -> tuple[Kind, ...]:
    """Return what a nucleus may be, each isotope with its own tensors, spinless ones merged.

    A and P of an element are those of its most abundant isotope that has a spin, or a quadrupole
    moment; the other isotopes' A scale with the signed g_n, their P with Q/[I(2I-1)].

    Raises
    ------
    InputError
        Unknown isotope or element; no nuclear spin; P where no isotope has a quadrupole moment;
        more than `MOST_EQUIVALENT` equivalent nuclei.
    """
    if nucleus.count > MOST_EQUIVALENT:
        raise InputError(f"count = {nucleus.count}", f"write at most {MOST_EQUIVALENT}", place="count")
    found = sorted(_isotopes(nucleus), key=lambda one: -one.abundance)
    magnetic = [one for one in found if one.spin]
    quadrupolar = [one for one in found if one.spin >= 1]
    hyperfine = turned(principal(nucleus.A), nucleus.A_tilt)
    quadrupole = turned(principal(nucleus.P), nucleus.P_tilt)
    if not quadrupolar and any(nucleus.P):
        raise InputError(
            f"{nucleus.isotope or nucleus.element} has I = 1/2 and no quadrupole interaction", "leave P out", place="P"
        )
    result = []
    for one in magnetic:
        factor = _quadrupole_factor(one) / _quadrupole_factor(quadrupolar[0]) if quadrupolar else 0.0
        a, p = hyperfine * (one.g_n / magnetic[0].g_n), quadrupole * factor
        result.append(Kind(one.name, one.spin, one.abundance, a, p, -one.g_n * MU_N_OVER_H))
    spinless = [one for one in found if not one.spin]
    if spinless:
        share = sum(one.abundance for one in spinless)
        result.append(Kind(spinless[0].name, 0.0, share, np.zeros((3, 3)), np.zeros((3, 3)), 0.0))
    return tuple(result)


def settled(species: Species) -> Species:
    """Return the species with every "auto" of its nuclei decided, for good.

    A nucleus is taken as weak, "second order", when no principal value of A exceeds `WEAK_LIMIT`,
    else as "exact".  A fit settles its species once, so that no parameter on its way moves a
    nucleus from one treatment to the other.
    """
    nuclei = []
    for nucleus in species.nuclei:
        if nucleus.treat == "auto":
            weak = max(abs(value) for value in nucleus.A) <= WEAK_LIMIT
            nucleus = replace(nucleus, treat="second order" if weak else "exact")
        nuclei.append(nucleus)
    return replace(species, nuclei=tuple(nuclei))


def _drop(ways: list[tuple[float, tuple]], allowed: float) -> list[tuple[float, tuple]]:
    """Leave out the rarest of (share, ...), as many as together stay below `allowed`; keep the order."""
    rarest = sorted(range(len(ways)), key=lambda k: ways[k][0])
    lost = np.cumsum([ways[k][0] for k in rarest])
    dropped = set(rarest[: int(np.searchsorted(lost, allowed))])
    return [way for k, way in enumerate(ways) if k not in dropped]


def isotopologues(exact: list[Exact], negligible: float) -> list[tuple[float, tuple[tuple[int, ...], ...]]]:
    """Return (share, for each nucleus how many of each kind), shares summing to 1.

    The rarest are left out, as many as together stay below `negligible`.
    """
    ways: list[tuple[float, tuple[tuple[int, ...], ...]]] = [(1.0, ())]
    for number, nucleus in enumerate(exact, start=1):
        fillings = mixtures([kind.share for kind in nucleus.kinds], nucleus.count)
        fillings = _drop([(share, filling) for share, filling in fillings], negligible / (2 * len(exact)))
        if len(ways) * len(fillings) > MOST_SYSTEMS:
            raise InputError(
                f"the first {number} nuclei make {len(ways) * len(fillings)} isotopologues",
                'name one isotope instead of an element or set treat = "second order"',
                place=f"nucleus.{nucleus.index + 1}",
            )
        ways = [(a * b, (*before, filling)) for a, before in ways for b, filling in fillings]
        ways = _drop(ways, negligible / (2 * len(exact)))
    total = sum(share for share, _ in ways)
    return [(share / total, numbers) for share, numbers in ways]


def _couplings(nucleus: int, index: int, kind: Kind, count: int) -> list[tuple[float, tuple[Site, ...]]]:
    """Return (share of the states, spins in the matrix) for `count` equivalent nuclei of one kind."""
    if not kind.spin or not count:
        return [(1.0, ())]
    if count == 1 or np.any(kind.quadrupole):
        # I.P.I of each nucleus mixes the total spins, so nuclei with P stand in the matrix one by one.
        return [(1.0, (Site(nucleus, index, kind.spin),) * count)]
    states = multiplicity(kind.spin) ** count
    return [
        (often * multiplicity(total) / states, (Site(nucleus, index, total),) if total else ())
        for total, often in coupled_spins(kind.spin, count)
    ]


def sizes(exact: list[Exact], numbers: tuple[tuple[int, ...], ...]) -> tuple[int, int]:
    """Return (nuclear states in the largest matrix, number of matrices) of one isotopologue, building none."""
    states, matrices = 1, 1
    for nucleus, filling in zip(exact, numbers, strict=True):
        for kind, count in zip(nucleus.kinds, filling, strict=True):
            if np.any(kind.quadrupole):
                states *= multiplicity(kind.spin) ** count
            elif kind.spin and count:
                states *= multiplicity(kind.spin * count)
                matrices *= len(coupled_spins(kind.spin, count))
    return states, matrices


def arrangements(
    exact: list[Exact], ways: list[tuple[float, tuple[tuple[int, ...], ...]]]
) -> dict[tuple[Site, ...], float]:
    """Return the sets of nuclear spins that stand in a matrix, with their weights, equal ones merged.

    `ways` comes from `isotopologues`.  A weight is the share of states, so that the weights sum
    to 1 and weight / (2F+1) is the population of each state when all are populated equally.
    """
    weights: dict[tuple[Site, ...], float] = {}
    for share, numbers in ways:
        groups = [
            _couplings(nucleus.index, index, kind, filling[index])
            for nucleus, filling in zip(exact, numbers, strict=True)
            for index, kind in enumerate(nucleus.kinds)
        ]
        for choice in itertools.product(*groups):
            sites = tuple(itertools.chain.from_iterable(part for _, part in choice))
            weights[sites] = weights.get(sites, 0.0) + share * math.prod(factor for factor, _ in choice)
    return weights


def label(sites: tuple[Site, ...], nuclei: tuple[Nucleus, ...], resolved: list[tuple[Kind, ...]]) -> str:
    """Return "63Cu, 1H F=3/2", or "" without nuclear spins.

    F is the total spin of equivalent nuclei.  A nucleus with a name has it in brackets; several of
    the same isotope or element without names are numbered, "14N_1".
    """
    parts = []
    for site in sites:
        nucleus, kind = nuclei[site.nucleus], resolved[site.nucleus][site.kind]
        alike = [k for k, one in enumerate(nuclei) if (one.isotope, one.element) == (nucleus.isotope, nucleus.element)]
        name = kind.name
        if nucleus.name:
            name = f"{name} ({nucleus.name})"
        elif len(alike) > 1:
            name = f"{name}_{alike.index(site.nucleus) + 1}"
        coupled = nucleus.count > 1 and not np.any(kind.quadrupole)
        parts.append(f"{name} F={Fraction(site.spin)}" if coupled else name)
    return ", ".join(parts)
