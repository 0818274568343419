"""From a crystal field to the g, D and E that a spectrum is made of, with derivatives and a rank check.

This is the door through which a fit varies orbital energies or e_sigma themselves: tensors in molecular
axes, smooth in the parameters, and which parameters they can determine.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spinfit.errors import InputError
from spinfit.ion.defaults import default_model
from spinfit.ion.model import IonModel, solve_ground
from spinfit.ion.quench import ground_state
from spinfit.ion.tensors import SpinHamiltonian, d_and_e, principal_axes
from spinfit.species import Angles, Spin


@dataclass(frozen=True, eq=False)
class SpinParameters:
    """What a spectrum needs of one ion.

    Attributes
    ----------
    S : float
        Spin of the ground manifold; 1/2 for a Kramers doublet.
    g : ndarray, shape (3, 3)
        Symmetric and positive, molecular axes.
    D : ndarray, shape (3, 3)
        Symmetric and traceless, MHz, molecular axes; 0 for S = 1/2.
    kind : str
        "spin Hamiltonian" or "doublet".
    error : float
        What the spin Hamiltonian leaves of the zero-field energies, rms, MHz.
    """

    S: float
    g: NDArray[np.float64]
    D: NDArray[np.float64]
    kind: str
    error: float = 0.0

    def as_spin(self) -> Spin:
        """Return a `species.Spin` with principal values and tilts."""
        values, axes = _principal(self.g)
        split = self.S >= 1 and np.abs(self.D).max() > _NO_SPLITTING
        D, E, D_axes = _zero_field(self.D) if split else (0.0, 0.0, np.eye(3))
        return Spin(
            S=self.S,
            g=(float(values[0]), float(values[1]), float(values[2])),
            D=D,
            E=E,
            g_tilt=tilt_of(axes),
            D_tilt=tilt_of(D_axes) if D else (0.0, 0.0, 0.0),
        )


# Off-diagonal parts below this, relative to the tensor, are rounding of the diagonalisation: a tilt made of
# them would only hide the symmetry.
_STRAIGHT = 1e-9
# A kilohertz: far above the rounding of a cubic field's D (about 1e-6 MHz), far below any line width.
_NO_SPLITTING = 1e-3


def _is_straight(tensor: NDArray[Any]) -> bool:
    off = tensor - np.diag(np.diag(tensor))
    return bool(np.abs(off).max() <= _STRAIGHT * np.abs(tensor).max())


def _principal(tensor: NDArray[Any]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return principal values and right-handed axes, as near as possible to x, y, z."""
    if _is_straight(tensor):
        return np.diag(tensor).copy(), np.eye(3)
    return principal_axes(tensor)


def _zero_field(tensor: NDArray[Any]) -> tuple[float, float, NDArray[np.float64]]:
    """Return D, E and axes, the molecular ones where D is diagonal there: E/D is then what it is."""
    if _is_straight(tensor):
        x, y, z = np.diag(tensor)
        if abs(z) > _STRAIGHT * np.abs(tensor).max():
            return float(1.5 * z), float((x - y) / 2), np.eye(3)
    return d_and_e(tensor)


def tilt_of(axes: NDArray[np.float64]) -> Angles:
    """Return the Euler angles (alpha, beta, gamma), intrinsic z, y', z'', of a right-handed set of axes.

    The inverse of `species.tilt_matrix`; where beta is 0 or pi, gamma is set to 0.
    """
    beta = math.acos(min(1.0, max(-1.0, float(axes[2, 2]))))
    if math.hypot(axes[0, 2], axes[1, 2]) < 1e-12:
        sign = 1.0 if axes[2, 2] > 0 else -1.0
        return math.atan2(sign * axes[1, 0], sign * axes[0, 0]), 0.0 if sign > 0 else math.pi, 0.0
    return math.atan2(axes[1, 2], axes[0, 2]), beta, math.atan2(axes[2, 1], -axes[2, 0])


def spin_parameters(model: IonModel) -> SpinParameters:
    """Return g and D of the ground manifold, else g of the ground doublet.

    Raises
    ------
    InputError
        When the ground state is neither.
    """
    ground = ground_state(model, solve_ground(model))
    if isinstance(ground, str):
        raise InputError(ground, "change the crystal field so that a spin or a doublet lies lowest")
    if isinstance(ground, SpinHamiltonian):
        return SpinParameters(ground.S, ground.g, ground.D_tensor, "spin Hamiltonian", ground.zfs_error)
    return SpinParameters(0.5, ground.matrix, np.zeros((3, 3)), "doublet")


@dataclass(frozen=True, eq=False)
class SpinJacobian:
    """Spin parameters and their derivatives.

    Attributes
    ----------
    value : SpinParameters
    names : tuple of str
        As in `IonModel.parameters`, or "reduction".
    dg : ndarray, shape (n, 3, 3)
        Per MHz (per 1 for "reduction").
    dD : ndarray, shape (n, 3, 3)
        MHz per MHz (MHz per 1 for "reduction").
    """

    value: SpinParameters
    names: tuple[str, ...]
    dg: NDArray[np.float64]
    dD: NDArray[np.float64]


def _scale(model: IonModel, name: str) -> float:
    """Return the size on which a parameter matters.

    Energies of a crystal field count from an arbitrary zero, so that theirs is that of the whole field.
    """
    if name == "reduction":
        return 1.0
    own = model.parameters
    if name not in own:
        model.with_parameters({name: 0.0})  # raises, with the nearest known name
    if name in model.crystal.names:
        return max(abs(v) for v in model.crystal.values) or model.zeta or 1.0
    return abs(own[name]) or 0.01 * max(abs(v) for v in own.values()) or 1.0


def spin_jacobian(model: IonModel, names: Sequence[str], *, step: float = 1e-4) -> SpinJacobian:
    """Return spin parameters with derivatives with respect to parameters of the model.

    Central differences on the exact model; the tensors are smooth (they are symmetric, not principal
    values), so that the relative error is about the square of `step`.

    Raises
    ------
    InputError
        For an unknown name, or where the ground state changes its kind within the step.
    """
    centre = spin_parameters(model)
    dg, dD = [], []
    for name in names:
        h = step * _scale(model, name)
        at = model.reduction if name == "reduction" else model.parameters[name]
        low, high = (spin_parameters(model.with_parameters({name: at + s * h})) for s in (-1, 1))
        if not low.S == high.S == centre.S:
            raise InputError(f"the ground state changes its spin at this {name}", "start away from the crossing")
        dg.append((high.g - low.g) / (2 * h))
        dD.append((high.D - low.D) / (2 * h))
    shape = (len(names), 3, 3)
    return SpinJacobian(centre, tuple(names), np.array(dg).reshape(shape), np.array(dD).reshape(shape))


@dataclass(frozen=True)
class RankReport:
    """Which crystal-field parameters given uncertainties of g and D determine.

    Attributes
    ----------
    rank : int
        How many combinations are determined.
    determined, undetermined : tuple of str
        Single parameters.
    loose : tuple of str
        Combinations that change nothing measurable, in words: "zeta +1.00, ten_Dq +0.98".
    uncertainties : tuple of float or None
        Standard, MHz, of each determined parameter, in the order of `determined`.
    """

    rank: int
    determined: tuple[str, ...]
    undetermined: tuple[str, ...]
    loose: tuple[str, ...]
    uncertainties: tuple[float, ...]


def rank_check(
    model: IonModel, names: Sequence[str], *, g_uncertainty: float = 1e-3, D_uncertainty: float = 30.0
) -> RankReport:
    """Say which parameters a measured g (and D, for S >= 1) can determine.

    A combination counts as undetermined when changing it by its own size moves no component of g or D
    by a standard uncertainty.

    Parameters
    ----------
    g_uncertainty : float
    D_uncertainty : float
        MHz.
    """
    jacobian = spin_jacobian(model, names)
    scales = np.array([_scale(model, name) for name in names])
    six = ([0, 1, 2, 0, 0, 1], [0, 1, 2, 1, 2, 2])
    rows = [jacobian.dg[:, six[0], six[1]] / g_uncertainty]
    if jacobian.value.S >= 1:
        rows.append(jacobian.dD[:, six[0], six[1]] / D_uncertainty)
    return rank_of(np.concatenate(rows, axis=1).T * scales, names, scales)


def rank_of(matrix: NDArray[np.float64], names: Sequence[str], scales: NDArray[np.float64]) -> RankReport:
    """Say which parameters a linear response determines.

    Parameters
    ----------
    matrix : ndarray, shape (m, n)
        What a change of each parameter by its own size does, in standard deviations.
    scales : ndarray, shape (n,)
        Those sizes, in the unit of the reported uncertainties.
    """
    _, singular, directions = np.linalg.svd(matrix, full_matrices=True)
    full = np.zeros(len(names))
    full[: len(singular)] = singular
    good = full > 1.0
    loose = directions[~good]
    free = np.sqrt((loose**2).sum(axis=0))
    known = free < 0.1
    inverse = (directions[good].T / full[good] ** 2) @ directions[good]
    sigma = np.sqrt(np.diag(inverse)) * scales
    return RankReport(
        int(good.sum()),
        tuple(n for n, k in zip(names, known, strict=True) if k),
        tuple(n for n, k in zip(names, known, strict=True) if not k),
        tuple(_in_words(names, vector) for vector in loose),
        tuple(float(s) for s, k in zip(sigma, known, strict=True) if k),
    )


def _in_words(names: Sequence[str], vector: NDArray[Any]) -> str:
    """Write a direction of relative changes with its largest part set to 1."""
    vector = vector / vector[np.argmax(np.abs(vector))]
    parts = [f"{name} {v:+.2f}" for name, v in zip(names, vector, strict=True) if abs(v) > 0.05]
    return ", ".join(parts)


def start_parameters(ion: str, S: float | None = None) -> SpinParameters | None:
    """Return g and D of an ion in its typical field, as a start of a fit; None when there is no such field.

    Parameters
    ----------
    S : float, optional
        Spin of the species; None is returned when the model's differs.
    """
    try:
        found = spin_parameters(default_model(ion))
    except InputError:
        return None
    return found if S is None or S == found.S else None
