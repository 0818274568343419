"""Effective g of the Kramers doublets of a spin S = 3/2, 5/2, 7/2 with h nu much below D, and back to E/D."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spinfit.errors import InputError
from spinfit.ion.names import half
from spinfit.operators import spin_matrices
from spinfit.units import G_ELECTRON

SPINS = (1.5, 2.5, 3.5)


def _check(S: float) -> None:
    if not (2 * S == round(2 * S) and round(2 * S) % 2 == 1 and 1.5 <= S <= 15.5):
        raise InputError(f"S = {S:g} has no Kramers doublets split by D", 'write S = "3/2", "5/2" or "7/2"', place="S")


def doublet_table(
    S: float, rhombicity: Sequence[float] | NDArray[np.float64], *, g: Sequence[float] | float = G_ELECTRON
) -> NDArray[np.float64]:
    """Return the effective g of every Kramers doublet of D [S_z^2 - S(S+1)/3] + E (S_x^2 - S_y^2).

    In the limit of a Zeeman energy much smaller than D (T. Castner et al., J. Chem. Phys. 32, 668 (1960);
    R. Aasa, J. Chem. Phys. 52, 3919 (1970)).

    Parameters
    ----------
    S : float
        Half-integer, at least 3/2.
    rhombicity : sequence of float, shape (n,)
        E/D, 0 to 1/3 for the usual choice of axes; any value is computed.
    g : float or three floats
        The true g along x, y, z.

    Returns
    -------
    ndarray, shape (n, S + 1/2, 3)
        g' along x, y, z; doublets by energy, from the lowest up, for D > 0 (D < 0 turns the order round).
    """
    _check(S)
    lam = np.atleast_1d(np.asarray(rhombicity, dtype=float))
    if not np.all(np.isfinite(lam)):
        raise InputError("an E/D that is not finite", "write numbers from 0 to 1/3", place="rhombicity")
    spins = spin_matrices(S)
    axial = spins[2] @ spins[2]
    rhombic = spins[0] @ spins[0] - spins[1] @ spins[1]
    _, states = np.linalg.eigh((axial + lam[:, None, None] * rhombic).real)
    pairs = states.reshape(len(lam), len(axial), -1, 2)
    moments = np.einsum("nadi,xab,nbdj->nxdij", pairs, spins, pairs, optimize=True)
    squares = 2 * np.einsum("nxdij,nxdji->ndx", moments, moments).real
    return np.sqrt(np.clip(squares, 0, None)) * np.broadcast_to(np.asarray(g, dtype=float), (3,))


@dataclass(frozen=True)
class DoubletMatch:
    """A doublet of a high spin that has a measured effective g.

    Attributes
    ----------
    S : float
    doublet : int
        Counted from 1 by energy for D > 0.
    rhombicity : float
        E/D.
    uncertainty : float or None
        Of E/D, from that of g'.
    g : (3,)
        g' of the model there, rising.
    misfit : float
        Root mean square of (model - measured)/measured.
    """

    S: float
    doublet: int
    rhombicity: float
    uncertainty: float | None
    g: tuple[float, float, float]
    misfit: float

    def as_record(self) -> dict[str, object]:
        """Return the machine-readable form."""
        return {
            "S": half(self.S),
            "doublet": self.doublet,
            "rhombicity": self.rhombicity,
            "uncertainty": self.uncertainty,
            "g": list(self.g),
            "misfit": self.misfit,
        }


@lru_cache(maxsize=16)
def _fine_table(S: float) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    lam = np.linspace(0, 1 / 3, 2001)
    table = doublet_table(S, lam, g=1.0)
    table.flags.writeable = False
    return lam, table


def doublet_matches(
    measured: Sequence[float],
    *,
    uncertainty: Sequence[float] | None = None,
    spins: Sequence[float] = SPINS,
    g: float = G_ELECTRON,
) -> tuple[DoubletMatch, ...]:
    """Return which doublets, at which E/D, come nearest to a measured effective g, best first.

    Parameters
    ----------
    measured : sequence of 1 or 3 float
        Effective g values in any order; one value means that all three are equal.
    uncertainty : sequence of float, optional
        Standard, one each.
    g : float
        True, isotropic g of the spin.

    Raises
    ------
    InputError
        For another number of values, or one that is negative or not finite.
    """
    values = np.asarray(measured, dtype=float)
    if values.shape not in ((1,), (3,)) or not np.all(np.isfinite(values)) or np.any(values < 0):
        raise InputError(f"{list(measured)} is no effective g", "write 1 or 3 values that are not negative", place="g")
    order = np.argsort(values) if len(values) == 3 else np.array([0])
    wanted = np.broadcast_to(values[order], (3,))
    sigma = None if uncertainty is None else np.broadcast_to(np.asarray(uncertainty, dtype=float)[order], (3,))
    # A relative measure, with a floor so that components near 0 (often not seen at all) do not rule.
    scale = np.maximum(wanted, 0.25 * wanted.max())
    matches = []
    for S in spins:
        _check(S)
        lam, table = _fine_table(S)
        for doublet in range(table.shape[1]):
            curve = np.sort(g * table[:, doublet], axis=1)
            misfit = np.sqrt(np.mean(((curve - wanted) / scale) ** 2, axis=1))
            matches.append(_best(S, doublet, lam, curve, misfit, sigma))
    return tuple(sorted(matches, key=lambda match: match.misfit))


def _best(
    S: float, doublet: int, lam: NDArray[Any], curve: NDArray[Any], misfit: NDArray[Any], sigma: NDArray[Any] | None
) -> DoubletMatch:
    """Refine the smallest misfit of one doublet by a parabola and propagate the uncertainty."""
    i = int(np.argmin(misfit))
    best = float(lam[i])
    if 0 < i < len(lam) - 1:
        a, b, c = misfit[i - 1 : i + 2] ** 2
        bend = a - 2 * b + c
        best += float((a - c) / (2 * bend)) * (lam[1] - lam[0]) if bend > 0 else 0.0
    error = None
    if sigma is not None and np.all(sigma > 0):
        slope = np.gradient(curve, lam, axis=0)[i]
        information = float(np.sum((slope / sigma) ** 2))
        error = information**-0.5 if information > 0 else None
    g = tuple(float(np.interp(best, lam, curve[:, k])) for k in range(3))
    return DoubletMatch(S, doublet + 1, float(best), error, g, float(misfit[i]))


def doublet_energies(S: float, rhombicity: float) -> NDArray[np.float64]:
    """Return the energies of the doublets over D, rising, shape (S + 1/2,), for D > 0."""
    _check(S)
    spins = spin_matrices(S)
    matrix = spins[2] @ spins[2] - S * (S + 1) / 3 * np.eye(len(spins[0]))
    matrix = matrix + rhombicity * (spins[0] @ spins[0] - spins[1] @ spins[1])
    return np.linalg.eigvalsh(matrix)[::2]


def thermal_share(S: float, rhombicity: float, D: float, temperature: float) -> NDArray[np.float64]:
    """Return the Boltzmann share of each doublet in the order of `doublet_table`; D in K (may be negative)."""
    if not (math.isfinite(temperature) and temperature > 0):
        raise InputError(f"{temperature} K", "a temperature is positive", place="temperature")
    weights = np.exp(-D * doublet_energies(S, rhombicity) / temperature)
    return weights / weights.sum()
