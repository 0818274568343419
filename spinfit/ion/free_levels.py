"""Terms and levels of a whole configuration, with their labels: repulsion, spin-orbit coupling, g of each level.

Each J is found in the block of one M_J, so that even f7 (327 levels) needs small matrices only.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from spinfit.ion.determinants import angular_momenta
from spinfit.ion.model import IonModel, hamiltonian
from spinfit.ion.names import half, term_symbol
from spinfit.ion.terms import Term


@dataclass(frozen=True)
class FreeTerm:
    """One LS term: its symbol without J, S, L and its energy above the lowest term, MHz."""

    term: str
    S: float
    L: int
    energy: float


@dataclass(frozen=True)
class FreeLevel:
    """One level of the free ion in intermediate coupling.

    Attributes
    ----------
    label : str
        By its largest part in LS coupling, "4I15/2".
    J : float
    energy : float
        Above the lowest level, MHz.
    g : float or None
        None for J = 0.
    share : float
        Weight of all terms of that S and L, 0 to 1.
    """

    label: str
    J: float
    energy: float
    g: float | None
    share: float


def _quantum_number(square: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return j from j(j+1), to the nearest half."""
    return np.round(2 * (np.sqrt(np.clip(square, 0, None) + 0.25) - 0.5)) / 2


def _square(vector: tuple) -> sparse.csr_array:
    """Return x^2 + y^2 + z^2 as a real sparse operator."""
    return sum((m @ m).real for m in vector).tocsr()


def _restrict(operator: sparse.csr_array, kept: NDArray[Any]) -> NDArray[Any]:
    """Return the dense block of a sparse operator."""
    return operator[kept][:, kept].toarray()


def free_terms(model: IonModel) -> tuple[FreeTerm, ...]:
    """Return every LS term of the configuration with its energy from the Slater parameters, rising.

    The block of M_L = 0 and the smallest M_S >= 0 holds each term once; within it S^2 and L^2 are
    diagonalised first, so that terms that coincide in energy keep their labels.
    """
    shell = model.shell
    orbital, spin = angular_momenta(shell.l, shell.count)
    m_s, m_l = spin[2].diagonal().real, orbital[2].diagonal().real
    kept = np.flatnonzero((np.abs(m_s - (shell.count % 2) / 2) < 0.1) & (np.abs(m_l) < 0.1))
    bare = IonModel(shell, 0.0, model.slater)
    energy = _restrict(hamiltonian(bare).real.tocsr(), kept)
    groups = _joint(_restrict(_square(spin), kept), _restrict(_square(orbital), kept))
    found = []
    for (S, L), states in groups.items():
        for value in np.linalg.eigvalsh(states.T @ energy @ states):
            found.append((float(value), S, int(L)))
    found.sort()
    lowest = found[0][0]
    return tuple(FreeTerm(term_symbol(S, L), S, L, value - lowest) for value, S, L in found)


def _joint(first: NDArray[Any], second: NDArray[Any]) -> dict[tuple[float, float], NDArray[Any]]:
    """Return (j1, j2) -> joint eigenstates of two commuting squares of angular momenta.

    They are told apart by the eigenvalues of first + second/pi, which no two pairs share.
    """
    _, states = np.linalg.eigh(first + second / np.pi)
    j1 = _quantum_number(np.einsum("ai,ab,bi->i", states, first, states))
    j2 = _quantum_number(np.einsum("ai,ab,bi->i", states, second, states))
    pairs = sorted({(float(a), float(b)) for a, b in zip(j1, j2, strict=True)})
    return {pair: states[:, (j1 == pair[0]) & (j2 == pair[1])] for pair in pairs}


def free_levels(model: IonModel, *, lowest: int | None = None) -> tuple[FreeLevel, ...]:
    """Return the J levels of the free ion in intermediate coupling, rising.

    The crystal field of the model is left out.  g of a level is <k L_z + g_S S_z>/M, which is Landé's value
    where one term makes up the level.

    Parameters
    ----------
    lowest : int, optional
        Only so many.
    """
    shell = model.shell
    whole = hamiltonian(IonModel(shell, model.zeta, model.slater)).real.tocsr()
    orbital, spin = angular_momenta(shell.l, shell.count)
    total = tuple((o + s).tocsr() for o, s in zip(orbital, spin, strict=True))
    m_j = total[2].diagonal().real
    moment = model.reduction * orbital[2].diagonal().real + model.g_spin * spin[2].diagonal().real
    squares = [_square(v) for v in (total, spin, orbital)]
    levels: list[FreeLevel] = []
    for m in (0.5,) if model.kramers else (0.0, 1.0):
        kept = np.flatnonzero(np.abs(m_j - m) < 0.1)
        j_square, s_square, l_square = (_restrict(square, kept) for square in squares)
        energy = _restrict(whole, kept)
        terms = _joint(s_square, l_square)
        values, states = np.linalg.eigh(j_square)
        j_of = _quantum_number(values)
        for J in sorted(set(j_of)):
            if (m == 0.0) != (J == 0.0):
                continue  # J = 0 only at M = 0; all others at M = 1, where <moment> gives g
            basis = states[:, j_of == J]
            energies, turn = np.linalg.eigh(basis.T @ energy @ basis)
            for value, vector in zip(energies, (basis @ turn).T, strict=True):
                levels.append(_level(float(value), float(J), vector, terms, moment[kept], m))
    levels.sort(key=lambda level: level.energy)
    zero = levels[0].energy
    kept_levels = levels if lowest is None else levels[:lowest]
    return tuple(FreeLevel(x.label, x.J, x.energy - zero, x.g, x.share) for x in kept_levels)


def _level(
    energy: float,
    J: float,
    vector: NDArray[Any],
    terms: dict[tuple[float, float], NDArray[Any]],
    moment: NDArray[Any],
    m: float,
) -> FreeLevel:
    """Label one state of a block by its largest term."""
    shares: dict[Term, float] = {
        (S, int(L)): float(np.sum((states.T @ vector) ** 2)) for (S, L), states in terms.items()
    }
    S, L = max(shares, key=shares.get)
    g = None if J == 0 else float(np.sum(moment * vector**2)) / m
    return FreeLevel(f"{term_symbol(S, L)}{half(J)}", J, energy, g, shares[S, L])
