"""Nuclear data: spin, natural abundance, nuclear g factor and quadrupole moment of each isotope.

The numbers stand in `data/isotopes.csv` with their source; `scripts/make_isotopes.py` makes it.
"""

from __future__ import annotations

import csv
import math
import re
from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import lru_cache
from importlib import resources

from spinfit.errors import InputError, nearest


@dataclass(frozen=True)
class Isotope:
    """One isotope.

    Attributes
    ----------
    name : str
        Mass number and symbol, "63Cu".
    element : str
        "Cu".
    spin : float
        Nuclear spin I.
    abundance : float
        Natural abundance as a fraction of the element's atoms; 0 for one that does not occur.
    g_n : float
        Nuclear g factor, signed: moment = g_n mu_N I.  0 for a spinless isotope.
    quadrupole : float
        Spectroscopic electric quadrupole moment, barn; 0 for I < 1.
    """

    name: str
    element: str
    spin: float
    abundance: float
    g_n: float
    quadrupole: float


@lru_cache(maxsize=1)
def table() -> dict[str, Isotope]:
    """Return every known isotope by name, ordered by atomic and mass number."""
    text = resources.files("spinfit").joinpath("data/isotopes.csv").read_text(encoding="utf-8")
    rows = csv.DictReader(line for line in text.splitlines() if not line.startswith("#"))
    return {
        row["isotope"]: Isotope(
            row["isotope"],
            row["element"],
            float(row["spin"]),
            float(row["abundance"]),
            float(row["g_n"]),
            float(row["quadrupole"]),
        )
        for row in rows
    }


def isotope(name: str) -> Isotope:
    """Return the isotope called `name`, such as "63Cu".

    Raises
    ------
    InputError
        Not known; the nearest known one, or the known ones of the element, are named.
    """
    known = table()
    if name in known:
        return known[name]
    right = 'write mass number and symbol, e.g. "63Cu"'
    parts = re.fullmatch(r"\s*(\d*)[\s-]*([A-Za-z]{1,2})[\s-]*(\d*)\s*", name)
    if parts is not None:
        symbol, mass = parts[2].capitalize(), parts[1] or parts[3]
        own = [one.name for one in known.values() if one.element == symbol]
        if f"{mass}{symbol}" in known:
            right = f'did you mean "{mass}{symbol}"?'
        elif own:
            right = f"known of {symbol}: {', '.join(own)}"
        elif (near := nearest(f"{mass}{symbol}", known)).startswith("did"):
            right = near
    elif (near := nearest(name, known)).startswith("did"):
        right = near
    raise InputError(f'"{name}" is not a known isotope', right)


def natural(element: str) -> tuple[Isotope, ...]:
    """Return the isotopes of an element that occur in nature, by mass number.

    The abundances are those of the table, scaled to sum to 1.

    Raises
    ------
    InputError
        The element is not known (the nearest is named) or does not occur in nature.
    """
    known = [one for one in table().values() if one.element == element]
    if not known:
        near = nearest(element.strip().capitalize(), {one.element for one in table().values()})
        right = near if near.startswith("did") else 'write a symbol such as "Cu"'
        raise InputError(f'"{element}" is not a known element', right)
    total = sum(one.abundance for one in known)
    if total == 0:
        names = ", ".join(one.name for one in known)
        raise InputError(f"{element} has no natural isotopes", f"name an isotope instead of an element: {names}")
    return tuple(replace(one, abundance=one.abundance / total) for one in known if one.abundance)


def mixtures(shares: Sequence[float], count: int) -> list[tuple[float, tuple[int, ...]]]:
    """Return every way in which `count` places are filled by kinds with these shares.

    Parameters
    ----------
    shares : sequence of float
        Probability of each kind, summing to 1.
    count : int
        Number of equivalent places.

    Returns
    -------
    list of (float, tuple of int)
        Multinomial probability and how many places each kind holds.
    """
    if len(shares) == 1:
        return [(shares[0] ** count, (count,))]
    ways = []
    for first in range(count, -1, -1):
        factor = math.comb(count, first) * shares[0] ** first
        ways += [(factor * share, (first, *rest)) for share, rest in mixtures(shares[1:], count - first)]
    return ways
