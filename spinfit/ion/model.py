"""The ion in its field: electron repulsion, spin-orbit coupling and crystal field, diagonalised exactly.

The whole configuration l^n on its Slater determinants, or only Hund's ground term ("term") or ground level
("level").  Energies are E/h in MHz.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field, replace
from functools import lru_cache
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import sparse
from scipy.sparse.linalg import LinearOperator, eigsh

from spinfit.errors import InputError, nearest
from spinfit.ion.crystal_field import CrystalField, no_field
from spinfit.ion.determinants import (
    angular_momenta,
    determinants,
    level_states,
    one_electron,
    repulsion_operator,
    spin_orbit_operator,
    term_states,
)
from spinfit.ion.names import Shell
from spinfit.ion.terms import hund
from spinfit.units import G_ELECTRON

SPACES = ("configuration", "term", "level")
DENSE = 1001
"""Up to this many states the whole spectrum is found with dense matrices."""


def racah_to_slater(B: float, C: float) -> dict[int, float]:
    """Return {2: F^2, 4: F^4} of a d shell: F^2 = 49B + 7C, F^4 = 63C/5 (E. U. Condon, G. H. Shortley)."""
    return {2: 49 * B + 7 * C, 4: 12.6 * C}


@dataclass(frozen=True, eq=False)
class IonModel:
    """One open shell with everything that acts on it.

    Attributes
    ----------
    shell : Shell
        l^n.
    zeta : float
        One-electron spin-orbit constant, MHz.
    slater : mapping of k -> F^k
        MHz; k = 2, 4 (d) or 2, 4, 6 (f).  Not used in the spaces "term" and "level".
    crystal_field : CrystalField
    reduction : float
        k of the Zeeman operator muB B.(k L + g_S S).  It does not touch `zeta`; `with_covalency` reduces both.
    g_spin : float
    space : str
        "configuration", "term" (Hund's) or "level" (Hund's).
    name : str
    """

    shell: Shell
    zeta: float
    slater: dict[int, float] = field(default_factory=dict)
    crystal_field: CrystalField | None = None
    reduction: float = 1.0
    g_spin: float = G_ELECTRON
    space: str = "configuration"
    name: str = ""

    def __post_init__(self) -> None:
        if self.space not in SPACES:
            raise InputError(f'there is no space "{self.space}"', nearest(self.space, SPACES), place="space")
        if not self.shell.open:
            raise InputError(f"{self.shell} has no open shell", "give an ion with unpaired electrons", place="ion")
        if self.shell.l > 3:
            raise InputError(f"{self.shell} is beyond the model", "it covers p, d and f shells", place="ion")
        for key, value in (("zeta", self.zeta), ("reduction", self.reduction), ("g_spin", self.g_spin)):
            if not math.isfinite(value):
                raise InputError(f"{key} = {value}", "write a finite number", place=key)
        for k, value in self.slater.items():
            if k % 2 or not 0 <= k <= 2 * self.shell.l or not math.isfinite(value):
                raise InputError(
                    f"F{k} = {value} does not exist here", "give finite F2, F4 (and F6 for f)", place="slater"
                )
        if self.crystal_field is not None and self.crystal_field.l != self.shell.l:
            raise InputError("the crystal field belongs to another kind of shell", f"give one for {self.shell}")

    @property
    def crystal(self) -> CrystalField:
        """The crystal field, or its absence."""
        return no_field(self.shell.l) if self.crystal_field is None else self.crystal_field

    @property
    def kramers(self) -> bool:
        """Whether the number of electrons is odd."""
        return self.shell.count % 2 == 1

    def with_covalency(self, k: float) -> IonModel:
        """Return the model with k L in place of L everywhere: in the Zeeman operator and in zeta (k zeta).

        K. W. H. Stevens, Proc. R. Soc. A 219, 542 (1953).
        """
        return replace(self, reduction=self.reduction * k, zeta=self.zeta * k)

    @property
    def parameters(self) -> dict[str, float]:
        """Every parameter the energies are linear in, MHz: zeta, F2.., and the crystal field's."""
        slater = {f"F{k}": v for k, v in self.slater.items()}
        return {"zeta": self.zeta} | slater | dict(zip(self.crystal.names, self.crystal.values, strict=True))

    def with_parameters(self, values: dict[str, float]) -> IonModel:
        """Return the model with some of `parameters` (or "reduction") replaced."""
        own = self.parameters
        for name in values:
            if name not in own and name != "reduction":
                raise InputError(f'the ion has no parameter "{name}"', nearest(name, [*own, "reduction"]))
        slater = {k: values.get(f"F{k}", v) for k, v in self.slater.items()}
        crystal = {name: v for name, v in values.items() if name in self.crystal.names}
        return replace(
            self,
            zeta=values.get("zeta", self.zeta),
            slater=slater,
            reduction=values.get("reduction", self.reduction),
            crystal_field=self.crystal.with_values(crystal) if crystal else self.crystal_field,
        )


@dataclass(frozen=True, eq=False)
class SpaceOperators:
    """Operators of one space: L and S (3 each), sum l.s, repulsion by k; sparse or dense alike."""

    orbital: tuple[Any, ...]
    spin: tuple[Any, ...]
    spin_orbit: Any
    repulsion: dict[int, Any]
    basis: Any

    @property
    def dimension(self) -> int:
        """Number of states."""
        return self.spin_orbit.shape[0]


@lru_cache(maxsize=32)
def space_operators(l: int, count: int, space: str) -> SpaceOperators:  # noqa: E741
    """Return the operators of l^count in a space; depends on the shell only, so it is kept."""
    orbital, spin = angular_momenta(l, count)
    coupled = spin_orbit_operator(l, count)
    if space == "configuration":
        repulsion = {k: repulsion_operator(l, count, k) for k in range(2, 2 * l + 1, 2)}
        return SpaceOperators(orbital, spin, coupled, repulsion, None)
    basis, S, L = term_states(l, count)
    if space == "level":
        basis = sparse.csr_array(basis @ level_states(S, L, hund((Shell(0, l, count),))[2]))

    def project(operator: Any) -> NDArray[Any]:
        return (basis.T @ (operator @ basis)).toarray()

    return SpaceOperators(
        tuple(project(m) for m in orbital), tuple(project(m) for m in spin), project(coupled), {}, basis
    )


def hamiltonian(model: IonModel) -> NDArray[Any] | sparse.csr_array:
    """Return H/h of the model at zero field, MHz; dense in the small spaces, sparse in the configuration."""
    shell = model.shell
    operators = space_operators(shell.l, shell.count, model.space)
    total = model.zeta * operators.spin_orbit
    for k, value in model.slater.items():
        if k in operators.repulsion:
            total = total + value * operators.repulsion[k]
    if model.crystal_field is not None and model.crystal_field.names:
        potential = one_electron(shell.l, shell.count, model.crystal_field.matrix())
        if operators.basis is None:
            total = total + potential
        else:
            total = total + (operators.basis.T @ (potential @ operators.basis)).toarray()
    return total


@dataclass(frozen=True, eq=False)
class Levels:
    """Eigenstates of a model at zero field.

    Attributes
    ----------
    model : IonModel
    energies : ndarray, shape (n,)
        MHz, rising, the lowest at its own value (not 0).
    states : ndarray, shape (dimension, n)
        Columns.
    complete : bool
        Whether all states are there; else only the lowest.
    tolerance : float
        Energies closer than this are one level, MHz.
    """

    model: IonModel
    energies: NDArray[np.float64]
    states: NDArray[np.complex128]
    complete: bool
    tolerance: float

    @property
    def excitation(self) -> NDArray[np.float64]:
        """Energies above the lowest, MHz."""
        return self.energies - self.energies[0]

    def degeneracies(self) -> tuple[int, ...]:
        """Return how many states each level has, from the lowest up."""
        edges = np.flatnonzero(np.diff(self.energies) > self.tolerance) + 1
        return tuple(int(n) for n in np.diff(np.concatenate([[0], edges, [len(self.energies)]])))

    def operators(self) -> tuple[tuple, tuple]:
        """Return ((L_x, L_y, L_z), (S_x, S_y, S_z)) of the space."""
        shell = self.model.shell
        operators = space_operators(shell.l, shell.count, self.model.space)
        return operators.orbital, operators.spin

    def matrices(
        self, columns: slice | NDArray[Any], rows: slice | NDArray[Any] | None = None
    ) -> tuple[NDArray[Any], NDArray[Any]]:
        """Return <row|L|column> and <row|S|column>, each of shape (3, rows, columns)."""
        right = self.states[:, columns]
        left = right if rows is None else self.states[:, rows]
        orbital, spin = self.operators()
        return (
            np.array([left.conj().T @ (m @ right) for m in orbital]),
            np.array([left.conj().T @ (m @ right) for m in spin]),
        )

    def moments(self, columns: slice | NDArray[Any], rows: slice | NDArray[Any] | None = None) -> NDArray[Any]:
        """Return <row| k L + g_S S |column>, shape (3, rows, columns): minus the moment in muB."""
        orbital, spin = self.matrices(columns, rows)
        return self.model.reduction * orbital + self.model.g_spin * spin


def solve(model: IonModel, *, lowest: int | None = None) -> Levels:
    """Find the levels of an ion in its field.

    Parameters
    ----------
    lowest : int, optional
        How many states are wanted.  All of them by default, up to `DENSE` states; beyond that (f5 to f9
        in the whole configuration) as many as Hund's term has, at least 24, by Lanczos iteration on the
        sparse matrix.

    Raises
    ------
    InputError
        When more states are asked for than there are.
    """
    matrix = hamiltonian(model)
    size = matrix.shape[0]
    if lowest is not None and not 1 <= lowest <= size:
        raise InputError(f"{lowest} states of {size}", f"ask for 1 to {size}", place="lowest")
    if size <= DENSE:
        dense = matrix.toarray() if sparse.issparse(matrix) else matrix
        if not np.any(dense.imag):
            dense = dense.real
        # A constant part (a whole multiplet's spin-orbit energy) would only cost digits.
        centre = float(np.trace(dense).real) / size
        energies, states = np.linalg.eigh(dense - centre * np.eye(size))
        kept = size if lowest is None else lowest
        tolerance = max(_tolerance(float(np.abs(energies).max())), 1e-15 * abs(centre))
        return Levels(model, energies[:kept] + centre, states[:, :kept], kept == size, tolerance)
    if lowest is None:
        S, L, _ = hund((model.shell,))
        lowest = max(24, round(2 * S + 1) * (2 * L + 1))
    energies, states, largest = _lanczos(matrix, lowest)
    return Levels(model, energies, states, False, _tolerance(largest))


def solve_ground(model: IonModel) -> Levels:
    """Find what the ground manifold needs: all levels of a small space, the 16 lowest of a large one."""
    large = model.space == "configuration" and dimension(model.shell) > DENSE
    return solve(model, lowest=16 if large else None)


def _tolerance(largest: float) -> float:
    """Say which energies are the same: rounding of the diagonalisation with a wide margin, MHz."""
    return max(1e-12 * largest, 1e-9)


def _lanczos(matrix: sparse.csr_array, count: int) -> tuple[NDArray[Any], NDArray[Any], float]:
    """Return the lowest energies and states of a large sparse Hermitian matrix, and a bound of all energies.

    Lanczos iteration finds one state of a degenerate level at a time and may stop before the last one.  What
    was found is therefore projected out and the rest searched again until nothing lower turns up.
    """
    size = matrix.shape[0]
    if not np.any(matrix.data.imag):
        matrix = matrix.real
    # The largest row sum bounds the spread of the eigenvalues.
    largest = float(abs(matrix).sum(axis=1).max())
    random = np.random.default_rng(1)  # fixed: the same bits on every run
    states = np.zeros((size, 0), dtype=matrix.dtype)
    wanted, energies = min(count, size - 2), np.zeros(0)
    for _ in range(20):
        more = 1 if len(energies) >= wanted else wanted - len(energies)
        found = _lowest_beyond(matrix, states, largest, more, random.normal(size=size))
        done = len(energies) >= wanted and _rayleigh(matrix, found)[0] > energies[-1] - _tolerance(largest)
        if done:
            break
        # For complex matrices the solver does not promise orthogonal states within a level.
        states, _ = np.linalg.qr(np.concatenate([states, found], axis=1))
        energies, turn = np.linalg.eigh(states.conj().T @ (matrix @ states))
        energies, states = energies[:wanted], (states @ turn)[:, :wanted]
    return energies, states, largest


def _rayleigh(matrix: sparse.csr_array, states: NDArray[Any]) -> NDArray[np.float64]:
    """Return <v|H|v>/<v|v> of each column."""
    return np.einsum("ai,ai->i", states.conj(), matrix @ states).real / np.linalg.norm(states, axis=0) ** 2


def _lowest_beyond(
    matrix: sparse.csr_array, known: NDArray[Any], largest: float, count: int, start: NDArray[Any]
) -> NDArray[np.complex128]:
    """Return the lowest states of what is left when known states are lifted out of the way."""

    def act(vector: NDArray[Any]) -> NDArray[Any]:
        return matrix @ vector + 2 * largest * (known @ (known.conj().T @ vector))

    size = matrix.shape[0]
    operator = LinearOperator(matrix.shape, matvec=act, matmat=act, dtype=matrix.dtype) if known.size else matrix
    vectors = min(size, max(4 * count, 60))
    start = start.astype(matrix.dtype)
    return eigsh(operator, k=count, which="SA", v0=start, ncv=vectors, tol=0, maxiter=50 * size)[1]


def dimension(shell: Shell) -> int:
    """Return the number of states of the whole configuration."""
    return len(determinants(shell.l, shell.count))
