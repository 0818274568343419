"""What part of the sphere is enough for a spin system, found by testing its matrices.

A spectrum is even in the field direction, so the most general system needs half a sphere; rotation
symmetry reduces it to a quarter, an octant, one meridian or one point.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from spinfit.hamiltonian import System, rotation

Array = NDArray[np.float64]

KINDS = ("point", "axial", "octant", "quarter", "half")
"""Size of the domain, by symmetry: all rotations, any turn about z, three twofold axes, one, none."""


@dataclass(frozen=True, eq=False)
class Symmetry:
    """What part of the sphere is enough for a system.

    Attributes
    ----------
    kind : str
        One of `KINDS`.
    axes : ndarray, shape (3, 3)
        The frame in which the domain stands, axes as columns in molecular components; z is the
        rotation axis where there is one.
    """

    kind: str
    axes: Array


@lru_cache(maxsize=256)
def _turn(axis: tuple[float, float, float], angle: float) -> Array:
    k = np.array([[0, -axis[2], axis[1]], [axis[2], 0, -axis[0]], [-axis[1], axis[0], 0]])
    return np.eye(3) + np.sin(angle) * k + (1 - np.cos(angle)) * k @ k


class _Tested:
    """A system whose symmetry is asked for: its matrices side by side, and what counts as no change of them."""

    def __init__(self, system: System) -> None:
        self.system = system
        n = len(system.h0)
        self.matrices = np.concatenate([system.h0[None], system.zeeman])
        largest = np.abs(self.matrices).reshape(4, n * n).max(axis=1)
        zeeman = max(largest[1:])
        self.scale = 1e-9 * np.array([largest[0] + 1e3 * zeeman, zeeman, zeeman, zeeman])
        self.tensors = [t for one in system.weak for kind in one.kinds for t in (kind.hyperfine, kind.quadrupole)]

    def invariant(self, axis: Array, angle: float) -> bool:
        """Whether turning every spin and the field about `axis` leaves H(B) as it is."""
        axis = tuple(axis.tolist())
        turn = _turn(axis, angle)
        u = rotation(self.system, axis, angle)
        expected = self.matrices.copy()
        expected[1:] = np.dot(turn.T, self.matrices[1:].reshape(3, -1)).reshape(expected[1:].shape)
        miss = np.abs(u @ self.matrices @ u.conj().T - expected)
        if (miss.reshape(4, -1).max(axis=1) > self.scale).any():
            return False
        return all(np.abs(turn @ t @ turn.T - t).max() <= 1e-9 * np.abs(t).max() for t in self.tensors)


def symmetry_of(system: System, *others: System) -> Symmetry:
    """Find the largest symmetry that a system, and others beside it, have among the frames of its tensors.

    Each candidate is tested on the matrices: a rotation counts only if it turns H(B) into H(RB)
    to 1e-9, whatever the terms of the Hamiltonian are.
    """
    frames = system.frames or (np.eye(3),)
    any_angle = 1.0  # rad; an angle that is no fraction of a turn stands for all angles
    axes = [frame[:, k] for frame in frames for k in (2, 0, 1)]
    every = [_Tested(one) for one in (system, *others)]
    continuous = [axis for axis in axes if all(one.invariant(axis, any_angle) for one in every)]
    if continuous:
        z = continuous[0]
        if any(abs(z @ axis) < 0.999 for axis in continuous):
            return Symmetry("point", np.eye(3))
        return Symmetry("axial", _frame_about(z))
    best: Symmetry | None = None
    for frame in frames:
        twofold = [all(one.invariant(frame[:, k], np.pi) for one in every) for k in range(2)]
        # two such turns make the third, and one of them forbids it
        twofold.append(all(twofold) or (not any(twofold) and all(one.invariant(frame[:, 2], np.pi) for one in every)))
        if all(twofold):
            return Symmetry("octant", _with_unique_z(frame, _anisotropy(system)))
        if any(twofold) and best is None:
            k = twofold.index(True)
            best = Symmetry("quarter", frame[:, [(k + 1) % 3, (k + 2) % 3, k]])
    anisotropy = _anisotropy(system)
    return best or Symmetry("half", _with_unique_z(np.linalg.eigh(anisotropy)[1], anisotropy))


def _anisotropy(system: System) -> Array:
    """Return a symmetric tensor, shape (3, 3), with the directions in which the spectrum differs most.

    n.Q.n = Tr[(n.Z) H0 (n.Z) H0] sees D and A (to second order) and Tr[(n.Z)^2] sees g; which
    combination does not matter, since it only places the grid.
    """
    z, h0 = system.zeeman, system.h0
    zh = z @ h0
    second = np.einsum("aij,bji->ab", zh, zh).real / max(np.abs(np.trace(h0 @ h0)), 1e-300)
    return second + 1e-3 * np.einsum("aij,bji->ab", z, z).real / len(h0)


def _with_unique_z(frame: Array, tensor: Array) -> Array:
    """Return the frame with its axes turned round so that z is the one that differs from the other two."""
    along = np.einsum("ak,ab,bk->k", frame, tensor, frame)
    order = np.argsort(along)
    low, middle, high = along[order]
    if high - middle < middle - low:
        order = order[::-1]
    turned = frame[:, order]
    return turned * np.array([1, 1, np.sign(np.linalg.det(turned))])


def _frame_about(z: Array) -> Array:
    x = np.eye(3)[np.argmin(np.abs(z))]
    x = x - (x @ z) * z
    x /= np.linalg.norm(x)
    return np.column_stack([x, np.cross(z, x), z])
