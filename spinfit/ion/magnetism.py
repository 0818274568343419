"""Moments of an ion against temperature: van Vleck's formula on the exact levels."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import constants

from spinfit.errors import InputError
from spinfit.ion.model import Levels
from spinfit.units import K_B_OVER_H

_MU_B = constants.physical_constants["Bohr magneton"][0]
MOLAR_FROM_RECIPROCAL_MHZ = constants.mu_0 * constants.N_A * _MU_B**2 / (constants.h * 1e6) / (4 * np.pi * 1e-6)
"""Molar susceptibility in cm^3/mol (the trade's cgs unit) of 1 muB^2 per MHz."""


@dataclass(frozen=True, eq=False)
class Magnetism:
    """Susceptibility and effective moment.

    Attributes
    ----------
    temperature : ndarray, shape (n,)
        K.
    chi : ndarray, shape (n, 3, 3)
        cm^3/mol, molecular axes, in the limit of a small field.
    moment : ndarray, shape (n,)
        Effective moment sqrt(3 k T chi/N_A muB^2) of the powder, Bohr magnetons.
    complete : bool
        False when only the lowest levels were known, so that mixing with the rest is missing.
    """

    temperature: NDArray[np.float64]
    chi: NDArray[np.float64]
    moment: NDArray[np.float64]
    complete: bool


def susceptibility(levels: Levels, temperatures: Sequence[float]) -> Magnetism:
    """Return the zero-field susceptibility (J. H. van Vleck, The Theory of Electric and Magnetic
    Susceptibilities (1932)): chi = sum_n p_n [sum_same |mu|^2/kT + sum_other 2 |mu|^2/(E_m - E_n)].

    Parameters
    ----------
    temperatures : sequence of float
        K, positive.
    """
    T = np.asarray(temperatures, dtype=float)
    if not (np.all(np.isfinite(T)) and np.all(T > 0)):
        raise InputError("a temperature that is not positive", "write positive kelvins", place="temperature")
    moments = levels.moments(slice(None))
    energies = levels.excitation
    gap = energies[None, :] - energies[:, None]
    same = np.abs(gap) <= levels.tolerance
    inverse = np.where(same, 0.0, 2.0 / np.where(same, 1.0, gap))
    products = np.einsum("inm,jmn->ijnm", moments, moments, optimize=True).real
    first = np.einsum("ijnm,nm->ijn", products, same.astype(float))
    second = np.einsum("ijnm,nm->ijn", products, inverse)
    kT = K_B_OVER_H * T
    weights = np.exp(-energies[None, :] / kT[:, None])
    weights /= weights.sum(axis=1, keepdims=True)
    chi = np.einsum("tn,ijn->tij", weights / kT[:, None], first) + np.einsum("tn,ijn->tij", weights, second)
    moment = np.sqrt(np.trace(chi, axis1=1, axis2=2) * kT)
    return Magnetism(T, chi * MOLAR_FROM_RECIPROCAL_MHZ, moment, levels.complete)


def independent_part(levels: Levels, *, manifold: int) -> NDArray[np.float64]:
    """Return the temperature-independent susceptibility of the ground manifold, shape (3, 3), cm^3/mol.

    What mixing of the lowest `manifold` states (2S+1, or 2 for a doublet) with all higher ones gives.

    Raises
    ------
    InputError
        When the manifold leaves no higher state.
    """
    count = len(levels.energies)
    if not 0 < manifold <= count:
        raise InputError(f"a ground manifold of {manifold} of {count} states", f"write 1 to {count}")
    moments = levels.moments(slice(manifold, None), slice(0, manifold))
    gap = levels.energies[None, manifold:] - levels.energies[:manifold, None]
    products = np.einsum("inm,jnm->ijnm", moments, moments.conj()).real
    return np.einsum("ijnm,nm->ij", products, 2.0 / gap) / manifold * MOLAR_FROM_RECIPROCAL_MHZ
