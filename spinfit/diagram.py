"""Energy levels against the field in one direction, and the transitions that the microwave finds there."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from spinfit.errors import InputError
from spinfit.hamiltonian import System
from spinfit.levels import solve
from spinfit.markup import html_table
from spinfit.resonance import Resonances, find

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Diagram:
    """Levels of one system, numbered from 0 by energy at each field.

    Attributes
    ----------
    direction : ndarray, shape (3,)
        Unit vector of the static field, molecular axes.
    fields : ndarray, shape (f,)
        mT.
    energies : ndarray, shape (f, n)
        MHz.
    resonances : Resonances
        Every pair of levels h nu apart within the fields.
    ends : ndarray, shape (2, r)
        Energies of the lower and the upper level of each resonance, MHz.
    """

    direction: Array
    fields: Array
    energies: Array
    resonances: Resonances
    ends: Array

    def _repr_html_(self) -> str:
        """Show the transitions, for a notebook."""
        got = self.resonances
        rows = [
            [f"{got.lower[k] + 1}-{got.upper[k] + 1}", f"{got.field[k]:.4f}", f"{got.weight[k]:.4g}"]
            for k in range(len(got.field))
        ]
        n = self.energies.shape[1]
        caption = f"{n} levels, {self.fields[0]:.6g} to {self.fields[-1]:.6g} mT"
        return html_table(["levels", "field / mT", "weight"], rows, caption=caption)


def diagram(
    system: System,
    direction: ArrayLike,
    frequency: float,
    field_range: tuple[float, float],
    *,
    points: int = 401,
    microwave: str | Array = "perpendicular",
    temperature: float | None = None,
    populations: tuple[float, ...] | None = None,
) -> Diagram:
    """Compute levels at even steps of the field, and the transitions between them.

    Parameters
    ----------
    direction : array_like, shape (3,)
        Of the static field, molecular axes; any length.
    frequency : float
        MHz.
    field_range : (float, float)
        mT, not negative.
    points : int
        Number of fields.
    microwave, temperature, populations
        See `spinfit.resonance.find`.

    Raises
    ------
    InputError
        No direction, a range that is none, fewer than two points.
    """
    way = np.asarray(direction, dtype=float)
    length = float(np.linalg.norm(way))
    if way.shape != (3,) or not (np.isfinite(length) and length > 0):
        raise InputError(f"{direction} has no direction", "write three numbers, not all 0", place="direction")
    first, last = field_range
    if not 0 <= first < last < np.inf:
        right = "write first and last field, not negative, the first one smaller"
        raise InputError(f"{first:g} to {last:g} mT", right, place="field")
    if points < 2:
        raise InputError(f"{points} points", "write at least 2", place="points")
    way = (way / length)[None]
    fields = np.linspace(first, last, points)
    energies = solve(system, np.repeat(way, points, axis=0), fields, intensities=False).energy
    found = find(
        system,
        way,
        frequency,
        field_range,
        microwave=microwave,
        temperature=temperature,
        populations=populations,
    )
    at = solve(system, np.repeat(way, len(found.field), axis=0), found.field, intensities=False).energy
    row = np.arange(len(found.field))
    return Diagram(way[0], fields, energies, found, np.stack([at[row, found.lower], at[row, found.upper]]))
