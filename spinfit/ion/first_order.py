"""The first-order formula g = g_e - n lambda/Delta, with its table of n, beside the exact model."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spinfit.errors import InputError
from spinfit.ion.determinants import one_electron
from spinfit.ion.model import IonModel, Levels, solve, space_operators
from spinfit.ion.tensors import spin_states
from spinfit.operators import spin_matrices


@dataclass(frozen=True)
class Mixing:
    """What one excited level gives to g along one axis: the formula's n and its Delta (MHz)."""

    axis: str
    n: float
    delta: float


@dataclass(frozen=True, eq=False)
class FirstOrder:
    """First-order g of an orbital-singlet ground state.

    Attributes
    ----------
    g : ndarray, shape (3, 3)
        g_e - k sum n lambda/Delta, molecular axes.
    lam : float
        lambda = +-zeta/2S, MHz: + below half filling of the shell.
    terms : tuple of Mixing
        n and Delta along x, y, z; contributions below 1e-6 are left out.
    S : float
    """

    g: NDArray[np.float64]
    lam: float
    terms: tuple[Mixing, ...]
    S: float


def first_order(model: IonModel) -> FirstOrder:
    """Return the first-order g, its n and Delta.

    With the levels |n> that the model has without spin-orbit coupling and the ground state |0, M_S = S>,

        g_ij = g_e d_ij - (2 zeta k/S) Re sum_n <0|L_i|n><n|sum l_j s_z|0>/(E_n - E_0),

    which for a single term is the textbook's g_e - 2 lambda sum_n <0|L_i|n><n|L_j|0>/(E_n - E_0)
    (M. H. L. Pryce, Proc. Phys. Soc. A 63, 25 (1950)).

    Raises
    ------
    InputError
        Where the ground state is orbitally degenerate: the formula does not apply.
    """
    if model.space == "level":
        raise InputError("the ground level alone has no first-order formula", 'use the space "term"', place="space")
    bare = solve(replace(model, zeta=0.0))
    if not bare.complete:
        raise InputError(f"{model.shell} has too many states for the first-order sum", 'use the space "term"')
    states, S = spin_states(model, bare)
    if S == 0:
        raise InputError("the ground state has no spin", "choose a field that leaves unpaired electrons")
    ground = states[:, 0]
    orbital, _ = bare.operators()
    to_ground = np.array([bare.states.conj().T @ (m @ ground) for m in orbital])
    coupled = np.array([bare.states.conj().T @ (m @ ground) for m in _coupling(model)])
    gaps = bare.energies - bare.energies[0]
    other = gaps > bare.tolerance
    inverse = np.zeros_like(gaps)
    inverse[other] = 1 / gaps[other]
    sign = 1 if model.shell.count < 2 * model.shell.l + 1 else -1
    lam = sign * model.zeta / (2 * S)
    # -(2 zeta/S) X = -4 sign lambda X: each level's n is 4 sign X.
    share = 4 * sign * np.einsum("in,jn->ijn", to_ground.conj(), coupled).real
    tensor = model.g_spin * np.eye(3) - model.reduction * lam * (share @ inverse)
    return FirstOrder((tensor + tensor.T) / 2, lam, _table(share, bare), S)


def _coupling(model: IonModel) -> tuple:
    """Return sum_i l_j s_z for j = x, y, z in the model's space."""
    shell = model.shell
    basis = space_operators(shell.l, shell.count, model.space).basis
    s_z = spin_matrices(0.5)[2]
    operators = [one_electron(shell.l, shell.count, np.kron(s_z, m)) for m in spin_matrices(shell.l)]
    return tuple(operators if basis is None else [(basis.T @ (m @ basis)).toarray() for m in operators])


def _table(share: NDArray[Any], bare: Levels) -> tuple[Mixing, ...]:
    """Collect n by level along each axis."""
    rows = []
    edges = np.cumsum((0, *bare.degeneracies()))
    for axis, name in enumerate("xyz"):
        for start, stop in zip(edges[1:-1], edges[2:], strict=True):
            n = float(share[axis, axis, start:stop].sum())
            if abs(n) > 1e-6:
                rows.append(Mixing(name, n, float(bare.energies[start] - bare.energies[0])))
    return tuple(rows)
