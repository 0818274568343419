"""What the neighbours do to one electron: a crystal field in any of the usual forms.

Every form ends as a sum of named parameters times Hermitian matrices over |l, m> (order of
`spinfit.operators`), so that a derivative with respect to a parameter is the matrix itself.  Energies are
in MHz, axes are the molecular axes.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from spinfit.errors import InputError, nearest
from spinfit.ion.determinants import level_states, one_electron, term_states
from spinfit.ion.names import ORBITAL_LETTERS, Shell
from spinfit.ion.orbitals import REAL_ORBITALS, STEVENS_OVER_WYBOURNE, named_orbital, real_orbital, rotation, tesseral
from spinfit.ion.terms import hund
from spinfit.operators import stevens


@dataclass(frozen=True, eq=False)
class CrystalField:
    """A crystal field, linear in its parameters.

    Attributes
    ----------
    l : int
        Shell it acts on.
    names : tuple of str
        Parameters, such as "ten_Dq", "e_sigma_O", "B4_0".
    values : tuple of float
        MHz.
    operators : ndarray, shape (parameters, 2l+1, 2l+1)
        Hermitian.
    form : str
        "orbitals", "octahedral", "overlap", "wybourne", "stevens" or "none".
    remark : str
        Source or kind of the values; printed with every result that rests on them.
    """

    l: int  # noqa: E741
    names: tuple[str, ...]
    values: tuple[float, ...]
    operators: NDArray[np.complex128]
    form: str
    remark: str = ""

    def __post_init__(self) -> None:
        for name, value in zip(self.names, self.values, strict=True):
            if not math.isfinite(value):
                raise InputError(f"{value} is not finite", "write a finite energy", place=name)

    def matrix(self) -> NDArray[np.complex128]:
        """Return the field over |l, m>, shape (2l+1, 2l+1), MHz."""
        return np.tensordot(np.asarray(self.values), self.operators, axes=1) if self.names else self._zero()

    def _zero(self) -> NDArray[np.complex128]:
        return np.zeros((2 * self.l + 1, 2 * self.l + 1), dtype=complex)

    def value(self, name: str) -> float:
        """Return one parameter, MHz."""
        return self.values[self._index(name)]

    def with_values(self, values: Mapping[str, float]) -> CrystalField:
        """Return the same field with some parameters replaced, MHz."""
        new = list(self.values)
        for name, value in values.items():
            new[self._index(name)] = float(value)
        return replace(self, values=tuple(new))

    def scaled(self, factor: float) -> CrystalField:
        """Return the field with every parameter multiplied by `factor`."""
        return replace(self, values=tuple(factor * v for v in self.values))

    def _index(self, name: str) -> int:
        if name not in self.names:
            raise InputError(f'the crystal field has no parameter "{name}"', nearest(name, self.names))
        return self.names.index(name)

    def orbital_energies(self) -> NDArray[np.float64]:
        """Return the energies of the orbitals without spin-orbit coupling, rising, shape (2l+1,), MHz."""
        return np.linalg.eigvalsh(self.matrix())


def no_field(l: int) -> CrystalField:  # noqa: E741
    """Return the absence of a crystal field."""
    return CrystalField(l, (), (), np.zeros((0, 2 * l + 1, 2 * l + 1), dtype=complex), "none", "free ion")


def from_orbitals(l: int, energies: Mapping[str, float], *, remark: str = "") -> CrystalField:  # noqa: E741
    """Return a field given by the energies of the real orbitals.

    Parameters
    ----------
    energies : mapping of name -> MHz
        d: "z2", "x2-y2", "xy", "xz", "yz"; p: "x", "y", "z"; f: "z3", "xz2", "yz2", "z(x2-y2)", "xyz",
        "x(x2-3y2)", "y(3x2-y2)".  Every orbital must be named: one left out would be a silent zero.

    Raises
    ------
    InputError
        For an unknown orbital or one that is missing.
    """
    known = REAL_ORBITALS[l]
    for name in energies:
        if name not in known:
            raise InputError(f'"{name}" is not a {ORBITAL_LETTERS[l]} orbital', nearest(name, known))
    missing = [name for name in known if name not in energies]
    if missing:
        raise InputError(
            f"the energy of {', '.join(missing)} is missing",
            f"give all {len(known)} {ORBITAL_LETTERS[l]} orbitals (one of them may be 0)",
        )
    vectors = [named_orbital(l, name) for name in known]
    operators = np.array([np.outer(v, v.conj()) for v in vectors])
    return CrystalField(l, tuple(known), tuple(float(energies[n]) for n in known), operators, "orbitals", remark)


def from_octahedral(ten_Dq: float, Ds: float = 0.0, Dt: float = 0.0, *, remark: str = "") -> CrystalField:
    """Return a d field of an octahedron, elongated or compressed along z.

    x2-y2: 6Dq + 2Ds - Dt; z2: 6Dq - 2Ds - 6Dt; xy: -4Dq + 2Ds - Dt; xz, yz: -4Dq - Ds + 4Dt
    (C. J. Ballhausen, Introduction to Ligand Field Theory (1962)).  A tetrahedron has ten_Dq < 0.

    Parameters
    ----------
    ten_Dq, Ds, Dt : float
        MHz.
    """
    coefficients = {
        "z2": (0.6, -2, -6),
        "xz": (-0.4, -1, 4),
        "yz": (-0.4, -1, 4),
        "x2-y2": (0.6, 2, -1),
        "xy": (-0.4, 2, -1),
    }
    operators = np.zeros((3, 5, 5), dtype=complex)
    for name, row in coefficients.items():
        vector = named_orbital(2, name)
        operators += np.multiply.outer(np.array(row), np.outer(vector, vector.conj()))
    return CrystalField(2, ("ten_Dq", "Ds", "Dt"), (ten_Dq, Ds, Dt), operators, "octahedral", remark)


@dataclass(frozen=True)
class Ligand:
    """One ligand of the angular-overlap model.

    Attributes
    ----------
    position : (x, y, z)
        From the metal, any length; only the direction counts.
    kind : str
        Ligands of one kind share their parameters ("O", "N", "axial"); "" for a single kind.
    e_sigma, e_pi_x, e_pi_y : float
        MHz.  e_pi_x belongs to the ligand's pi orbital along `turn` from the direction of growing
        polar angle.
    turn : float
        rad.
    """

    position: tuple[float, float, float]
    kind: str = ""
    e_sigma: float = 0.0
    e_pi_x: float = 0.0
    e_pi_y: float = 0.0
    turn: float = 0.0


def from_overlap(l: int, ligands: Sequence[Ligand], *, remark: str = "") -> CrystalField:  # noqa: E741
    """Return the field of the angular-overlap model.

    V = sum over ligands of e_sigma |sigma><sigma| + e_pi_x |pi_x><pi_x| + e_pi_y |pi_y><pi_y| with the metal
    orbitals turned to point at the ligand (C. K. Jørgensen, R. Pappalardo, H.-H. Schmidtke, J. Chem. Phys.
    39, 1422 (1963); C. E. Schäffer, Struct. Bonding 5, 68 (1968)).

    Ligands of one kind must have the same parameters; the parameters are e_sigma, e_pi (where e_pi_x = e_pi_y
    throughout a kind) or e_pi_x, e_pi_y, each with _kind when there are several kinds.

    Raises
    ------
    InputError
        A ligand at the metal's own place, or two of a kind with different parameters.
    """
    if not ligands:
        raise InputError("there is no ligand", "give at least one")
    for number, ligand in enumerate(ligands, 1):
        if not all(math.isfinite(v) for v in ligand.position):
            raise InputError("a position that is not finite", "write three numbers", place=f"ligand.{number}")
        if math.hypot(*ligand.position) < 1e-6:
            raise InputError(
                "the ligand is at the metal's own place",
                "give its position relative to the metal",
                place=f"ligand.{number}",
            )
    kinds = list(dict.fromkeys(ligand.kind for ligand in ligands))
    terms: dict[str, list] = {}
    for kind in kinds:
        members = [ligand for ligand in ligands if ligand.kind == kind]
        energies = {(m.e_sigma, m.e_pi_x, m.e_pi_y) for m in members}
        if len(energies) > 1:
            raise InputError(f'ligands of kind "{kind}" differ in e_sigma or e_pi', "give them different kinds")
        end = f"_{kind}" if len(kinds) > 1 else ""
        _add_kind(l, members, end, terms)
    names = tuple(terms)
    operators = np.array([terms[name][1] for name in names])
    return CrystalField(l, names, tuple(terms[name][0] for name in names), operators, "overlap", remark)


def _add_kind(l: int, members: Sequence[Ligand], end: str, terms: dict[str, list]) -> None:  # noqa: E741
    """Add the parameters of one kind of ligand to `terms`: name -> [value, operator]."""
    projectors = sum(np.array([_projector(l, ligand, part) for part in range(3)]) for ligand in members)
    sigma, pi_x, pi_y = members[0].e_sigma, members[0].e_pi_x, members[0].e_pi_y
    terms[f"e_sigma{end}"] = [sigma, projectors[0]]
    if pi_x == pi_y:
        terms[f"e_pi{end}"] = [pi_x, projectors[1] + projectors[2]]
    else:
        terms[f"e_pi_x{end}"] = [pi_x, projectors[1]]
        terms[f"e_pi_y{end}"] = [pi_y, projectors[2]]


def _projector(l: int, ligand: Ligand, part: int) -> NDArray[np.complex128]:  # noqa: E741
    """Return |sigma><sigma| (part 0), |pi_x><pi_x| (1) or |pi_y><pi_y| (2) of a ligand."""
    x, y, z = ligand.position
    turned = rotation(l, math.atan2(y, x), math.atan2(math.hypot(x, y), z), ligand.turn)
    vector = turned @ real_orbital(l, *((0, "c"), (1, "c"), (1, "s"))[part])
    return np.outer(vector, vector.conj())


def _check_rank(l: int, k: int, q: int) -> None:  # noqa: E741
    key = parameter_name(k, q)
    if k % 2 or not 2 <= k <= 2 * l or abs(q) > k:
        ranks = ", ".join(str(rank) for rank in range(2, 2 * l + 1, 2))
        raise InputError(
            f"there is no such term for a {ORBITAL_LETTERS[l]} shell", f"k is {ranks} and q from -k to k", place=key
        )


def parameter_name(k: int, q: int) -> str:
    """Return "B4_0", "B4_m3"."""
    return f"B{k}_{'m' if q < 0 else ''}{abs(q)}"


def from_wybourne(l: int, coefficients: Mapping[tuple[int, int], float], *, remark: str = "") -> CrystalField:  # noqa: E741
    """Return a field of Wybourne coefficients, V = sum B^k_q x (combination `orbitals.tesseral`).

    Parameters
    ----------
    coefficients : mapping of (k, q) -> MHz
        Real; q < 0 is the imaginary part, the sine terms.
    """
    for k, q in coefficients:
        _check_rank(l, k, q)
    keys = tuple(coefficients)
    operators = np.array([tesseral(l, k, q) for k, q in keys]).reshape(len(keys), 2 * l + 1, 2 * l + 1)
    names = tuple(parameter_name(k, q) for k, q in keys)
    return CrystalField(l, names, tuple(float(coefficients[k]) for k in keys), operators, "wybourne", remark)


def from_stevens(shell: Shell, coefficients: Mapping[tuple[int, int], float], *, remark: str = "") -> CrystalField:
    """Return a field of Stevens coefficients B_k^q of the ground level, H = sum B_k^q O_k^q(J).

    Carried to one electron by the operator equivalents: within Hund's ground level the field acts exactly as
    sum B_k^q O_k^q(J), and in the wider spaces as the same field on every state
    (K. W. H. Stevens, Proc. Phys. Soc. A 65, 209 (1952)).

    Parameters
    ----------
    shell : Shell
        The open shell, whose ground level carries the operators.
    coefficients : mapping of (k, q) -> MHz

    Raises
    ------
    InputError
        Where the ground level has no moment of that rank (a half-filled shell, k > 2J).
    """
    names, values, operators = [], [], []
    for (k, q), value in coefficients.items():
        _check_rank(shell.l, k, q)
        factor = stevens_factor(shell.l, shell.count, k)
        if abs(factor) < 1e-12:
            raise InputError(
                f"the ground level of {shell} has no multipole of rank {k}",
                "give the field in Wybourne form or leave this term out",
                place=parameter_name(k, q),
            )
        names.append(parameter_name(k, q))
        values.append(float(value))
        operators.append(tesseral(shell.l, k, q) / (factor * STEVENS_OVER_WYBOURNE[k, abs(q)]))
    array = np.array(operators).reshape(len(names), 2 * shell.l + 1, 2 * shell.l + 1)
    return CrystalField(shell.l, tuple(names), tuple(values), array, "stevens", remark)


@lru_cache(maxsize=128)
def stevens_factor(l: int, count: int, k: int) -> float:  # noqa: E741
    """Return the operator-equivalent factor theta_k (alpha, beta, gamma) of Hund's ground level of l^count.

    Computed from the determinants, not from a table.
    """
    S, L, J = hund((Shell(0, l, count),))
    if 2 * J < k:
        return 0.0
    states, _, _ = term_states(l, count)
    level = states @ level_states(S, L, J)
    moment = level.T @ (one_electron(l, count, tesseral(l, k, 0).real) @ level)
    equivalent = stevens(J, k, 0).real
    return float(np.vdot(equivalent, moment) / np.vdot(equivalent, equivalent) / STEVENS_OVER_WYBOURNE[k, 0])
