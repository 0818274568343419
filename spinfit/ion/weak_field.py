"""Where the weak-field picture ends: a term's exact levels in a field against Landé's straight lines."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spinfit.errors import InputError
from spinfit.ion.lande import lande_g
from spinfit.ion.terms import lande_intervals, level_js
from spinfit.operators import spin_matrices
from spinfit.units import G_ELECTRON, MU_B_OVER_H


@dataclass(frozen=True, eq=False)
class TermInField:
    """Levels of lambda L.S + muB B (g_L L_z + g_S S_z).

    Attributes
    ----------
    field : ndarray, shape (n,)
        mT.
    J, M : ndarray, shape (states,)
        Quantum numbers that each line has at small field (M always).
    exact, first_order : ndarray, shape (n, states)
        MHz.
    """

    field: NDArray[np.float64]
    J: NDArray[np.float64]
    M: NDArray[np.float64]
    exact: NDArray[np.float64]
    first_order: NDArray[np.float64]


def term_in_field(
    S: float,
    L: int,
    lam: float,
    field: NDArray[np.float64],
    *,
    g_spin: float | None = None,
    g_orbital: float = 1.0,
) -> TermInField:
    """Return exact and first-order levels of one term in a field.

    States of one M never cross, so that the lines of each M keep the order of J that they have at zero field.

    Parameters
    ----------
    lam : float
        Of lambda L.S, MHz; not 0.
    field : ndarray, shape (n,)
        mT.
    """
    if lam == 0 or not np.isfinite(lam):
        raise InputError(f"lambda = {lam}", "write a spin-orbit constant that is not 0", place="lambda")
    g_s = G_ELECTRON if g_spin is None else g_spin
    field = np.atleast_1d(np.asarray(field, dtype=float))
    spin, orbital = spin_matrices(S), spin_matrices(L)
    size_s, size_l = len(spin[0]), len(orbital[0])
    coupling = lam * sum(np.kron(s, o) for s, o in zip(spin, orbital, strict=True)).real
    s_z = np.kron(np.diag(spin[2]).real, np.ones(size_l))
    l_z = np.kron(np.ones(size_s), np.diag(orbital[2]).real)
    zeeman = MU_B_OVER_H * (g_orbital * l_z + g_s * s_z)
    energies = lande_intervals(S, L, lam)
    rising = sorted(level_js(S, L), key=lambda J: energies[J])
    parts: list[tuple[float, float, NDArray[Any], NDArray[Any]]] = []
    for M in sorted({float(m) for m in s_z + l_z}):
        kept = np.flatnonzero(np.abs(s_z + l_z - M) < 0.1)
        block = coupling[np.ix_(kept, kept)] + field[:, None, None] * np.diag(zeeman[kept])
        exact = np.linalg.eigvalsh(block)
        js = [J for J in rising if abs(M) <= J]
        for k, J in enumerate(js):
            g = lande_g(S, L, J, g_spin=g_s, g_orbital=g_orbital) or 0.0
            parts.append((J, M, exact[:, k], energies[J] + g * M * MU_B_OVER_H * field))
    J, M = np.array([p[0] for p in parts]), np.array([p[1] for p in parts])
    return TermInField(field, J, M, np.array([p[2] for p in parts]).T, np.array([p[3] for p in parts]).T)


def parting_field(
    S: float,
    L: int,
    J: float,
    lam: float,
    *,
    share: float = 0.01,
    g_spin: float | None = None,
    g_orbital: float = 1.0,
) -> float | None:
    """Return the field in mT at which the exact levels of J leave Landé's lines by `share`.

    The largest departure of any M, against the largest first-order shift |g_J| J muB B.  None where there is
    no first-order shift or nothing to mix with (J = 0, S = 0 or L = 0).
    """
    g = lande_g(S, L, J, g_spin=g_spin, g_orbital=g_orbital)
    if not g or len(level_js(S, L)) == 1:
        return None

    def departure(B: float) -> float:
        levels = term_in_field(S, L, lam, np.array([B]), g_spin=g_spin, g_orbital=g_orbital)
        own = np.abs(levels.J - J) < 0.1
        return float(np.abs(levels.exact - levels.first_order)[0, own].max() / (abs(g) * J * MU_B_OVER_H * B))

    low, high = 1e-6 * abs(lam), 1e2 * abs(lam)
    if departure(high) < share:
        return None
    for _ in range(60):
        middle = np.sqrt(low * high)
        low, high = (middle, high) if departure(middle) < share else (low, middle)
        if high / low < 1 + 1e-9:
            break
    return float(np.sqrt(low * high))
