"""From a species to matrices: H(B) = h0 + sum_a B_a zeeman[a].

    H/h = sum_i [ (mu_B/h) B.g_i.S_i + S_i.D_i.S_i + sum_kq B_k^q O_k^q(S_i) ]
        + sum_ij [ J S_i.S_j + S_i.T_ij.S_j + d_ij.(S_i x S_j) ]
        + sum_n [ S.A_n.I_n + I_n.P_n.I_n - (g_n mu_N/h) B.I_n ]

Energies are E/h in MHz, fields in mT along the molecular axes.

A species becomes several systems: one for each isotopologue, and, where equivalent nuclei have no
quadrupole tensor, one for each total spin F = sum I_k that they couple to.  A.(sum I_k) = A.F
conserves F, so this is exact, and n spins 1/2 need matrices n + 1 instead of 2^n times as large.
"""

from __future__ import annotations

import os
from collections.abc import Callable
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from spinfit.errors import InputError
from spinfit.nuclei import (
    MOST_SYSTEMS,
    NEGLIGIBLE,
    Exact,
    Kind,
    Site,
    Tensor,
    Weak,
    arrangements,
    isotopologues,
    kinds,
    label,
    settled,
    sizes,
    turned,
)
from spinfit.operators import (
    Matrix,
    add_bilinear,
    add_block,
    dimension,
    rotation_matrix,
    spin_matrices,
    stevens,
)
from spinfit.species import NO_TILT, Exchange, Nucleus, Species, Spin, principal, tilt_matrix
from spinfit.units import MU_B_OVER_H

MATRICES = 24
"""Complex n x n matrices that a calculation needs at once, at the least: for the estimate of memory."""

_LEVI_CIVITA = np.zeros((3, 3, 3))
_LEVI_CIVITA[[0, 1, 2], [1, 2, 0], [2, 0, 1]] = 1
_LEVI_CIVITA[[0, 1, 2], [2, 0, 1], [1, 2, 0]] = -1


@dataclass(frozen=True, eq=False)
class System:
    """One isotopologue of one species as matrices.

    Attributes
    ----------
    h0 : ndarray, shape (n, n), complex
        Hamiltonian without field, MHz.
    zeeman : ndarray, shape (3, n, n), complex
        dH/dB along the molecular axes, MHz/mT.
    spins : tuple of float
        Electron spins first, then the nuclei treated exactly (equivalent ones by their total spin
        F); n = prod(2s + 1).
    electrons : int
        How many of `spins` are electrons.
    frames : tuple of ndarray, shape (3, 3)
        Molecular frame and the principal frames of all anisotropic tensors, axes as columns, weak
        nuclei's too: the candidates for symmetry axes.
    weight : float
        Share of this system among all of the species', counted in states: with every state of a
        system populated equally by 1/n, weight/n is the population of a state.  Weights sum to 1.
        With a temperature, each system has its own partition function: exact for isotopologues;
        between total spins F it neglects terms of order (A/kT)^2.
    label : str
        Which isotopologue, and total spins F of equivalent nuclei: "63Cu, 1H F=3/2".
    weak : tuple of Weak
        Nuclei left out of the matrices, to be treated by perturbation.
    """

    h0: Matrix
    zeeman: Matrix
    spins: tuple[float, ...]
    electrons: int
    frames: tuple[Tensor, ...]
    weight: float = 1.0
    label: str = ""
    weak: tuple[Weak, ...] = ()


class Slope(NamedTuple):
    """Derivative of a system with respect to one parameter (units: those of the matrix / parameter).

    `h0` (n, n) and `zeeman` (3, n, n) belong to the system's; `weak` holds, for each weak nucleus
    and each of its kinds, the pair of (3, 3) derivatives of A and P.
    """

    h0: Matrix
    zeeman: Matrix
    weak: tuple[tuple[tuple[Tensor, Tensor], ...], ...]


def _quadratic(tensor: Tensor, spin: float) -> Matrix:
    """Return s.T.s, shape (2s+1, 2s+1)."""
    s = spin_matrices(spin)
    return np.einsum("aij,ajk->ik", s, np.tensordot(tensor, s, 1))


def zero_field_tensor(spin: Spin) -> Tensor:
    """Return the D-tensor in molecular axes, R diag(-D/3+E, -D/3-E, 2D/3) R^T, shape (3, 3), MHz."""
    return turned(spin.D * np.array([-1.0, -1.0, 2.0]) / 3 + spin.zfs_E * np.array([1.0, -1.0, 0.0]), spin.D_tilt)


def exchange_matrix(exchange: Exchange) -> Tensor:
    """Return K with S_i.K.S_j = J S_i.S_j + S_i.T.S_j + d.(S_i x S_j), shape (3, 3), MHz."""
    dipolar = turned(principal(exchange.dipolar), exchange.tilt)
    return exchange.J * np.eye(3) + dipolar + np.tensordot(exchange.antisymmetric, _LEVI_CIVITA, 1)


def _electron_part(species: Species) -> tuple[Matrix, Matrix]:
    """Return h0 (n, n) and zeeman (3, n, n) of the electron spins alone."""
    spins = tuple(float(spin.S) for spin in species.spins)
    n = dimension(spins)
    h0 = np.zeros((n, n), dtype=complex)
    zeeman = np.zeros((3, n, n), dtype=complex)
    for position, spin in enumerate(species.spins):
        before = dimension(spins[:position])
        g = turned(principal(spin.g), spin.g_tilt)
        add_block(zeeman, MU_B_OVER_H * np.tensordot(g, spin_matrices(spin.S), 1), before)
        own = _quadratic(zero_field_tensor(spin), spin.S)
        for (k, q), value in spin.stevens:
            own += value * stevens(spin.S, k, q)
        add_block(h0, own, before)
    for exchange in species.exchange:
        first, second = exchange.between
        add_bilinear(h0, exchange_matrix(exchange), spins, first - 1, second - 1)
    return h0, zeeman


def _memory() -> float:
    """Return the machine's memory in bytes, 8 GB where it cannot be asked."""
    try:
        return float(os.sysconf("SC_PHYS_PAGES") * os.sysconf("SC_PAGE_SIZE"))
    except (AttributeError, ValueError, OSError):
        return 8e9


def _check_size(species: Species, exact: list[Exact], ways: list[tuple[float, tuple[tuple[int, ...], ...]]]) -> None:
    """Refuse matrices that the machine cannot hold, before any is built."""
    of_electrons = dimension([spin.S for spin in species.spins])
    found = [sizes(exact, numbers) for _, numbers in ways]
    n = of_electrons * max(states for states, _ in found)
    matrices = sum(number for _, number in found)
    names = [f"nucleus {k}, {one.isotope or one.element}" for k, one in enumerate(species.nuclei, start=1)]
    weakest = min(exact, key=lambda one: max(map(abs, species.nuclei[one.index].A)), default=None)
    right = "use fewer or smaller spins"
    if weakest is not None:
        right = (
            f'drop the weakest coupled nuclei or set treat = "second order" for them ({names[weakest.index]}, first)'
        )
    place = "spin" if weakest is None else "nucleus"
    if matrices > MOST_SYSTEMS:
        raise InputError(f"the nuclei make {matrices} different matrices", right, place=place)
    # Half of the memory: other programs live there too.  Python's integers do not overflow.
    need, there = MATRICES * 16 * n * n, _memory()
    if need > there / 2:
        raise InputError(
            f"the spins make a matrix of {_number(n)} states, about {_number(need // 10**9)} GB of memory "
            f"where {there / 1e9:.0f} GB are there",
            right,
            place=place,
        )


def _number(value: int) -> str:
    """Write a whole number that may be too large for a float."""
    return str(value) if value < 10**7 else f"10^{len(str(value)) - 1}"


def _axis_frame(axis: tuple[float, float, float]) -> Tensor:
    """Return a right-handed frame whose z is along `axis`, as columns."""
    z = np.array(axis) / np.abs(axis).max()  # first, lest the squares of tiny components underflow
    z /= np.linalg.norm(z)
    x = np.cross(np.eye(3)[np.argmin(np.abs(z))], z)
    x /= np.linalg.norm(x)
    return np.column_stack([x, np.cross(z, x), z])


def _frames(species: Species) -> tuple[Tensor, ...]:
    """Return the molecular frame and the frames of all anisotropic tensors, without repeats."""
    tilts = [NO_TILT]
    for spin in species.spins:
        tilts += [spin.g_tilt] * bool(len(set(spin.g)) > 1) + [spin.D_tilt] * bool(spin.D != 0 or spin.zfs_E != 0)
    for exchange in species.exchange:
        tilts += [exchange.tilt] * (len(set(exchange.dipolar)) > 1)
    for nucleus in species.nuclei:
        tilts += [nucleus.A_tilt] * (len(set(nucleus.A)) > 1) + [nucleus.P_tilt] * (len(set(nucleus.P)) > 1)
    frames = [np.eye(3) if tilt == NO_TILT else tilt_matrix(tilt) for tilt in dict.fromkeys(tilts)]
    frames += [_axis_frame(one.antisymmetric) for one in species.exchange if any(one.antisymmetric)]
    return tuple(frames)


def _assemble(
    electrons: tuple[Matrix, Matrix],
    spins: tuple[float, ...],
    sites: tuple[Site, ...],
    resolved: list[tuple[Kind, ...]],
    nuclei: tuple[Nucleus, ...],
) -> tuple[Matrix, Matrix, tuple[float, ...]]:
    """Return h0, zeeman and all spins of the product of electrons and nuclear spins."""
    everything = (*spins, *(site.spin for site in sites))
    n = dimension(everything)
    h0 = np.zeros((n, n), dtype=complex)
    zeeman = np.zeros((3, n, n), dtype=complex)
    add_block(h0, electrons[0])
    add_block(zeeman, electrons[1])
    for position, site in enumerate(sites, start=len(spins)):
        kind = resolved[site.nucleus][site.kind]
        before = dimension(everything[:position])
        add_block(zeeman, kind.zeeman * spin_matrices(site.spin), before)
        add_bilinear(h0, kind.hyperfine, everything, nuclei[site.nucleus].couples_to - 1, position)
        if np.any(kind.quadrupole):
            add_block(h0, _quadratic(kind.quadrupole, site.spin), before)
    return h0, zeeman, everything


def systems(species: Species, *, perturb: bool = False, negligible: float = NEGLIGIBLE) -> tuple[System, ...]:
    """Return the species as matrices: every isotopologue, and every total spin of equivalent nuclei.

    Parameters
    ----------
    species : Species
    perturb : bool
        False puts every nucleus into the matrices, whatever its `treat`.  True leaves those out
        that ask for "first order" or "second order", or are weakly coupled (`settled`), and
        describes them in `System.weak`.
    negligible : float
        The rarest isotopologues are left out, as many as together stay below this share; the
        weights of the others are scaled to sum to 1.  Total spins F are never left out.

    Returns
    -------
    tuple of System

    Raises
    ------
    InputError
        A nucleus that cannot be (placed at ``nucleus.1.isotope`` and the like), or a matrix too
        large for the machine.
    """
    if perturb:
        species = settled(species)
    resolved = []
    for number, nucleus in enumerate(species.nuclei, start=1):
        try:
            resolved.append(kinds(nucleus))
        except InputError as error:
            raise error.at(place=f"nucleus.{number}") from None
    exact, weak = [], []
    for index, nucleus in enumerate(species.nuclei):
        if perturb and nucleus.treat != "exact":
            name, order = str(nucleus.isotope or nucleus.element), 1 if nucleus.treat == "first order" else 2
            weak.append(Weak(name, nucleus.couples_to - 1, nucleus.count, order, resolved[index]))
        else:
            exact.append(Exact(index, nucleus.count, resolved[index]))
    ways = isotopologues(exact, negligible)
    _check_size(species, exact, ways)
    electrons = _electron_part(species)
    spins = tuple(float(spin.S) for spin in species.spins)
    frames = _frames(species)
    result = []
    for sites, weight in arrangements(exact, ways).items():
        h0, zeeman, everything = _assemble(electrons, spins, sites, resolved, species.nuclei)
        name = label(sites, species.nuclei, resolved)
        result.append(System(h0, zeeman, everything, len(spins), frames, weight, name, tuple(weak)))
    return tuple(result)


def rotation(system: System, axis: tuple[float, float, float], angle: float) -> Matrix:
    """Return the unitary turning all spins in a system's matrices about `axis` by `angle` (rad), shape (n, n).

    A system has this rotation as a symmetry when U h0 U^+ = h0, U (v.zeeman) U^+ = (R v).zeeman
    and the tensors of its weak nuclei obey R A R^T = A, R P R^T = P.
    """
    return rotation_matrix(system.spins, axis, angle)


def derivative_matrices(
    build: Callable[[float], Species], at: float, step: float = 1e-4, *, perturb: bool = False
) -> tuple[Slope, ...]:
    """Return the derivative of every system with respect to one parameter.

    Central difference of the matrices, which are cheap.  They are linear in every parameter except
    tilts, so the difference is exact but for rounding (about 1e-16 max|h0| / step); for a tilt its
    relative error is step^2/6 (rad).

    Parameters
    ----------
    build : callable
        Value of the parameter -> species.  Whatever else is decided by the values must not change
        with it: settle the species (`settled`) when `perturb` is True.
    at : float
        Value at which the derivative is wanted.
    step : float
        Half the distance of the two values compared, in the parameter's unit.
    perturb : bool
        As for `systems`.

    Returns
    -------
    tuple of Slope
        One for each of ``systems(build(at))``, in the same order.

    Raises
    ------
    InputError
        A quadrupole tensor of equivalent nuclei appears only away from `at`.
    """
    here, below, above = (systems(build(value), perturb=perturb) for value in (at, at - step, at + step))
    if not [one.spins for one in here] == [one.spins for one in below] == [one.spins for one in above]:
        raise InputError("P of equivalent nuclei is 0", "start it from another value when it is varied", place="P")

    def slope(one: System, other: System) -> Slope:
        weak = tuple(
            tuple(
                ((b.hyperfine - a.hyperfine) / (2 * step), (b.quadrupole - a.quadrupole) / (2 * step))
                for a, b in zip(before.kinds, after.kinds, strict=True)
            )
            for before, after in zip(one.weak, other.weak, strict=True)
        )
        return Slope((other.h0 - one.h0) / (2 * step), (other.zeeman - one.zeeman) / (2 * step), weak)

    return tuple(slope(one, other) for one, other in zip(below, above, strict=True))
