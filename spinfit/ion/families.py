"""Families of ground doublets whose g runs along a curve: low-spin d5, octahedral d7, f^n in cubic and axial fields.

Each function takes three measured g values in any order and returns the best member of each family.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spinfit.ion.lande import lande_g
from spinfit.ion.names import Shell, half
from spinfit.ion.terms import hund
from spinfit.operators import spin_matrices, stevens
from spinfit.units import G_ELECTRON


@dataclass(frozen=True)
class Fitted:
    """The best member of a family.

    Attributes
    ----------
    g : (3,)
        Rising.
    parameters : tuple of (name, value, unit, low, high)
        With the range known for such ions.
    misfit : float
        Root mean square of (model - measured)/measured, components below a quarter of the largest weighted
        as that.
    expected : float
        What misfit the model has by its own neglects.
    penalty : float
        Added to the score: how easily the family fits anything.
    """

    name: str
    ion: str
    state: str
    g: tuple[float, float, float]
    parameters: tuple[tuple[str, float, str, float, float], ...]
    misfit: float
    expected: float
    penalty: float
    decide: str
    remark: str = ""


def _misfit(curve: NDArray[np.float64], measured: Sequence[float]) -> NDArray[np.float64]:
    """Return the relative misfit of many sorted triples, shape (n,)."""
    wanted = np.sort(np.asarray(measured, dtype=float))
    scale = np.maximum(wanted, 0.25 * wanted.max())
    return np.sqrt(np.mean(((np.sort(curve, axis=-1) - wanted) / scale) ** 2, axis=-1))


def _doublet_squares(states: NDArray[Any], moments: NDArray[Any]) -> NDArray[np.float64]:
    """Return g along x, y, z of doublets: states (n, dimension, 2), moments (3, dimension, dimension)."""
    inner = np.einsum("nai,xab,nbj->nxij", states.conj(), moments, states, optimize=True)
    return np.sqrt(np.clip(2 * np.einsum("nxij,nxji->nx", inner, inner).real, 0, None))


# ---------------------------------------------------------------- low-spin d5: one hole in t2g


def t2g_hole_g(delta: NDArray[np.float64], v: NDArray[np.float64], k: float = 1.0) -> NDArray[np.float64]:
    """Return g along x, y, z of the ground doublet of one hole in xy, xz, yz.

    J. S. Griffith, Proc. R. Soc. A 235, 23 (1956); C. P. S. Taylor, Biochim. Biophys. Acta 491, 137 (1977).

    Parameters
    ----------
    delta, v : ndarray, shape (n,)
        Energies over zeta: of the xz, yz pair above xy, and of yz minus xz.

    Returns
    -------
    ndarray, shape (n, 3)
    """
    # Within t2g the orbital momentum is that of l = 1 with the sign reversed; real orbitals yz, xz, xy behave
    # like x, y, z.
    epsilon = np.zeros((3, 3, 3))
    for i, j, m in ((0, 1, 2), (1, 2, 0), (2, 0, 1)):
        epsilon[i, j, m], epsilon[i, m, j] = 1, -1
    orbital = 1j * epsilon  # minus the l = 1 matrices -i epsilon
    spins = spin_matrices(0.5)
    big_l = np.array([np.kron(m, np.eye(2)) for m in orbital])
    big_s = np.array([np.kron(np.eye(3), m) for m in spins])
    coupling = np.einsum("xab,xbc->ac", big_l, big_s)
    zeros = np.zeros_like(delta)
    energies = np.stack([delta + v / 2, delta - v / 2, zeros], axis=1)  # electron energies of yz, xz, xy
    # For the hole energies and the spin-orbit constant change sign.
    diagonal = np.repeat(-energies, 2, axis=1)
    matrix = -coupling[None] + diagonal[:, :, None] * np.eye(6)
    _, states = np.linalg.eigh(matrix)
    return _doublet_squares(states[:, :, :2], k * big_l + G_ELECTRON * big_s)


def low_spin_d5_fits(measured: Sequence[float]) -> Iterator[Fitted]:
    """Fit the two splittings of low-spin d5, on a grid refined three times."""
    centre, width = np.array([0.0, 0.0]), np.array([12.0, 8.0])
    for _ in range(4):
        d, v = np.meshgrid(*(c + w * np.linspace(-1, 1, 49) for c, w in zip(centre, width, strict=True)), indexing="ij")
        g = t2g_hole_g(d.ravel(), v.ravel())
        misfit = _misfit(g, measured)
        best = int(np.argmin(misfit))
        centre, width = np.array([d.ravel()[best], v.ravel()[best]]), width / 12
    levels = np.sort([centre[0] + centre[1] / 2, centre[0] - centre[1] / 2, 0.0])
    axial, rhombic = _proper(levels)
    yield Fitted(
        "low-spin d5 (Fe3+, Ru3+, Os3+), one hole in t2g",
        "Fe3+",
        "d5 S=1/2",
        tuple(np.sort(g[best]).tolist()),
        (("|Delta|/zeta", axial, "", 0.5, 9.0), ("V/Delta", rhombic, "", 0.0, 2 / 3)),
        float(misfit[best]),
        0.03,
        # Hardly split t2g orbitals are a limit of the formula, not a low-spin complex.
        0.7 if axial >= 0.5 else 4.0,
        "near-infrared charge-transfer band; Moessbauer isomer shift; S = 1/2 by spin count",
    )


def _proper(levels: NDArray[np.float64]) -> tuple[float, float]:
    """Return |Delta| and V/Delta (0 to 2/3) of three rising energies, in the axes that make V smallest."""
    low, high = levels[1] - levels[0], levels[2] - levels[1]
    v, rest = min(low, high), max(low, high)
    delta = rest + v / 2
    return float(delta), float(v / delta) if delta > 0 else 0.0


# ---------------------------------------------------------------- octahedral high-spin d7


@lru_cache(maxsize=4)
def cobalt_curve(alpha: float = 1.5 * 0.93, ratio_k: float = 0.93) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return (distortion delta/|lambda|, g along x, y, z) of the lowest doublet of 4T1.

    H = delta (l_z^2 - 2/3) - alpha lambda l.S with l = 1, moment -alpha k l + g_e S
    (A. Abragam, M. H. L. Pryce, Proc. R. Soc. A 206, 173 (1951)); energies over |lambda|, lambda < 0.
    """
    orbital, spins = spin_matrices(1), spin_matrices(1.5)
    big_l = np.array([np.kron(m, np.eye(4)) for m in orbital])
    big_s = np.array([np.kron(np.eye(3), m) for m in spins])
    delta = np.concatenate([-np.geomspace(12, 0.02, 60), [0.0], np.geomspace(0.02, 12, 60)])
    coupling = alpha * np.einsum("xab,xbc->ac", big_l, big_s)
    axial = big_l[2] @ big_l[2] - 2 / 3 * np.eye(12)
    _, states = np.linalg.eigh(coupling + delta[:, None, None] * axial)
    return delta, _doublet_squares(states[:, :, :2], -alpha * ratio_k * big_l + G_ELECTRON * big_s)


def cobalt_fits(measured: Sequence[float]) -> Iterator[Fitted]:
    """Fit the axial distortion of octahedral high-spin Co2+."""
    delta, g = cobalt_curve()
    misfit = _misfit(g, measured)
    best = int(np.argmin(misfit))
    yield Fitted(
        "Co2+, high spin, octahedral, lowest doublet",
        "Co2+",
        "3d7 S=3/2, 4T1",
        tuple(np.sort(g[best]).tolist()),
        (("delta/|lambda|", float(delta[best]), "", -6.0, 6.0),),
        float(misfit[best]),
        0.05,
        0.5,
        "59Co hyperfine octet; line only seen below about 30 K",
    )


# ---------------------------------------------------------------- f^n Kramers doublets

F_IONS = {
    "Ce3+": (4, 1),
    "Nd3+": (4, 3),
    "Sm3+": (4, 5),
    "Dy3+": (4, 9),
    "Er3+": (4, 11),
    "Yb3+": (4, 13),
    "U3+": (5, 3),
}
_F_DECIDE = {
    "Ce3+": "no hyperfine; line only seen near 4 K",
    "Nd3+": "143,145Nd hyperfine octets (20 %)",
    "Sm3+": "147,149Sm hyperfine octets (29 %)",
    "Dy3+": "161,163Dy hyperfine sextets (44 %)",
    "Er3+": "167Er hyperfine octet (23 %); optical lines near 6500 cm^-1",
    "Yb3+": "171Yb doublet (14 %) and 173Yb sextet (16 %); optical lines near 10200 cm^-1",
    "U3+": "235U enrichment; optical spectrum",
}


def _level(ion: str) -> tuple[float, float]:
    """Return (J, g_J) of an f ion."""
    n, count = F_IONS[ion]
    S, L, J = hund((Shell(n, 3, count),))
    return J, float(lande_g(S, L, J) or 0.0)


@lru_cache(maxsize=16)
def cubic_doublets(J: float) -> tuple[float, ...]:
    """Return the isotropic g/g_J of the doublets of a J level in a cubic field, rising.

    Found by diagonalising cubic Stevens forms of several proportions; a doublet of its own symmetry does not
    depend on them (K. R. Lea, M. J. M. Leask, W. P. Wolf, J. Phys. Chem. Solids 23, 1381 (1962)).
    """
    spins = spin_matrices(J)
    found: set[float] = set()
    for six in (0.0,) if J < 3 else (0.0, 0.01, -0.01):
        matrix = stevens(J, 4, 0) + 5 * stevens(J, 4, 4)
        if six:
            matrix = matrix + six * (stevens(J, 6, 0) - 21 * stevens(J, 6, 4))
        energies, states = np.linalg.eigh(matrix)
        edges = np.flatnonzero(np.diff(energies) > 1e-6 * np.ptp(energies)) + 1
        for group in np.split(np.arange(len(energies)), edges):
            if len(group) == 2:
                found.add(round(float(_doublet_squares(states[None, :, group], spins)[0, 2]), 9))
    return tuple(sorted(found))


def cubic_fits(measured: Sequence[float]) -> Iterator[Fitted]:
    """Return the cubic doublets of every f ion against an isotropic g."""
    for ion in F_IONS:
        J, g_j = _level(ion)
        for ratio in cubic_doublets(J):
            g = np.full((1, 3), ratio * g_j)
            yield Fitted(
                f"{ion}, cubic doublet g = {ratio * g_j:.3f}",
                ion,
                f"{F_IONS[ion][0]}f{F_IONS[ion][1]} J={half(J)}",
                tuple(g[0].tolist()),
                (),
                float(_misfit(g, measured)[0]),
                0.015,
                0.3,
                _F_DECIDE[ion],
                "g of a cubic site, within about 2 %",
            )


def axial_fits(measured: Sequence[float]) -> Iterator[Fitted]:
    """Fit doublets cos t |M> + sin t |M - q> (q = 3, 4, 6: trigonal, tetragonal, hexagonal sites) of every f ion.

    The best q and M of each ion is returned; so free a form fits easily, which its penalty says.
    """
    for ion in F_IONS:
        J, g_j = _level(ion)
        curves, labels, angles = _axial_curves(J)
        misfit = _misfit(g_j * curves, measured)
        best = int(np.argmin(misfit))
        M, q = labels[best]
        share = float(np.sin(angles[best]) ** 2)
        mixed = f"M = {half(M)} with {half(M - q)}" if share > 1e-6 else f"M = {half(M)}"
        yield Fitted(
            f"{ion}, axial doublet, {mixed}",
            ion,
            f"{F_IONS[ion][0]}f{F_IONS[ion][1]} J={half(J)}",
            tuple(np.sort(g_j * curves[best]).tolist()),
            ((f"share of M = {half(M - q)}", share, "", 0.0, 1.0),),
            float(misfit[best]),
            0.03,
            1.5,
            _F_DECIDE[ion],
        )


@lru_cache(maxsize=16)
def _axial_curves(J: float) -> tuple[NDArray[np.float64], list[tuple[float, int]], NDArray[np.float64]]:
    """Return g/g_J along x, y, z of every mixed doublet, with its (M, q) and mixing angle."""
    spins = spin_matrices(J)
    size = round(2 * J) + 1
    turns = np.linspace(-np.pi / 2, np.pi / 2, 181)
    curves, labels, angles = [], [], []
    for q in (3, 4, 6):
        for k in range(size):
            M = J - k
            if abs(M - q) > J or M < 0.5:
                continue
            states = np.zeros((len(turns), size, 2))
            states[:, k, 0], states[:, k + q, 0] = np.cos(turns), np.sin(turns)
            # The time-reversed partner: |M> goes to (-1)^(J-M) |-M>.
            states[:, size - 1 - k, 1] += (-1) ** k * np.cos(turns)
            states[:, size - 1 - k - q, 1] += (-1) ** (k + q) * np.sin(turns)
            overlap = np.einsum("na,na->n", states[:, :, 0], states[:, :, 1])
            if np.abs(overlap).max() > 1e-9:
                continue  # M - q = -M: not a doublet of two different states
            curves.append(_doublet_squares(states, spins))
            labels += [(M, q)] * len(turns)
            angles.append(turns)
    return np.concatenate(curves), labels, np.concatenate(angles)
