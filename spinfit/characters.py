"""Levels ordered by what they are, not by how high they lie, where several nuclei make them cross.

Sublevels of two nuclei cross and nearly cross all over the sphere.  Ordered by energy they have a kink
at every such place, and pairs of levels swap their intensities there, so that nothing continues them
well.  The spectrum does not ask which of two close levels is which: here every level takes the name of
the product state

    |electron level i> x |sublevel of nucleus 1 in i> x |sublevel of nucleus 2 in i> ...

that it resembles most, by its overlap, so that levels keep their name through a narrow anticrossing.
The electron's levels are those of H averaged over the nuclei, a nucleus's sublevels those of H averaged
over the other nuclei and over the electron level.  Names that differ by an exchange of equal nuclei are
one name, and their levels are ordered by energy.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import linear_sum_assignment

from spinfit.hamiltonian import System
from spinfit.operators import dimension, multiplicity

Array = NDArray[np.float64]
Index = NDArray[np.intp]
Matrix = NDArray[np.complex128]

DISTINCT = 0.4
"""Largest hyperfine and quadrupole energy, as a share of the quantum: levels of one name must stay below
those of the next electron level, or resonances would be sought in the wrong direction."""


@dataclass(frozen=True, eq=False)
class Characters:
    """The product states of a system, for any number of fields and directions.

    Attributes
    ----------
    electron : ndarray, shape (4, e, e)
        The electrons' part of the Hamiltonian: without field, then along x, y, z.
    sizes : tuple of int
        Number of sublevels of each nucleus.
    slots : ndarray of int, shape (n,)
        The name of each place in the order of levels, rising.
    name : ndarray of int, shape (n,)
        The name of each product state.
    blur : float
        MHz; levels closer than that are not told apart.
    """

    electron: Matrix
    sizes: tuple[int, ...]
    slots: Index
    name: Index
    blur: float

    @classmethod
    def of(cls, system: System, frequency: float, blur: float) -> Characters | None:
        """Return the product states of a system, or None where levels are better ordered by energy.

        Parameters
        ----------
        frequency : float
            Of the quantum, MHz.
        blur : float
            Energy that is not seen, MHz.
        """
        spins = [multiplicity(spin) for spin in system.spins]
        of_nuclei = spins[system.electrons :]
        if sum(d > 1 for d in of_nuclei) < 2:
            return None
        e, n = dimension(system.spins[: system.electrons]), len(system.h0)
        whole = np.concatenate([system.h0[None], system.zeeman])
        shape = (4, e, n // e, e, n // e)
        electron = np.einsum("xanbn->xab", whole.reshape(shape)) / (n // e)
        rest = system.h0 - np.kron(electron[0], np.eye(n // e))
        if np.ptp(np.linalg.eigvalsh(rest)) > DISTINCT * frequency:
            return None
        nuclei = []
        for k, d in enumerate(of_nuclei):
            before = int(np.prod(of_nuclei[:k], dtype=int))
            after = n // (e * before * d)
            split = whole.reshape(4, e, before, d, after, e, before, d, after)
            nuclei.append(np.einsum("xapicbpjc->xaibj", split) / (before * after))
        name = _names(e, of_nuclei, nuclei)
        return cls(electron, tuple(of_nuclei), np.sort(name), name, blur)

    def arranged(
        self, fields: Array, energy: Array, vectors: Matrix, order: Index | None = None, near: Index | None = None
    ) -> tuple[Array, Matrix, Index]:
        """Return energies (m, n), states as columns (m, n, n), and which eigenvector takes each place, (m, n).

        Levels closer than `blur` whose eigenvectors mix several names are turned into the states of
        these names that they span, with mean energies: a coupling that small is not seen, but where it
        mixes states it would be continued to where the levels are far apart.

        Parameters
        ----------
        fields : ndarray, shape (m, 3)
            The field as a vector, mT.
        energy : ndarray, shape (m, n)
            Rising, MHz.
        vectors : ndarray, shape (m, n, n)
            Eigenvectors as columns.
        order : ndarray of int, shape (m, n), optional
            Found before for a system very like this one.
        near : ndarray of int, shape (m, n), optional
            That of a neighbouring field: it is kept unless another name is clear.
        """
        overlap = self._overlap(fields, energy, vectors)
        share = overlap.real**2 + overlap.imag**2
        if order is None:
            order = self._order(share, near)
        close = np.diff(energy, axis=1) < self.blur
        energy = np.take_along_axis(energy, order, axis=1)
        vectors = np.take_along_axis(vectors, order[:, None, :], axis=2)
        own = np.take_along_axis(share, order[:, :, None], axis=2)[..., 0]
        for point, places in _mixed(order, close, own):
            some = point[:, None, None]
            block = overlap[some, places[:, :, None], order[some[..., 0], places][:, None, :]]
            left, _, right = np.linalg.svd(block)
            turn = (left @ right).conj().swapaxes(-1, -2)
            states = np.arange(vectors.shape[1])[:, None]
            vectors[some, states, places[:, None, :]] = vectors[some, states, places[:, None, :]] @ turn
            mean = (turn.real**2 + turn.imag**2).swapaxes(-1, -2) @ energy[point[:, None], places][..., None]
            energy[point[:, None], places] = mean[..., 0]
        return energy, vectors, order

    def _order(self, share: Array, near: Index | None) -> Index:
        """Return which eigenvector takes each place, shape (m, n), by what is in the product states (m, n, n)."""
        names = np.flatnonzero(np.diff(self.slots, prepend=-1))
        alike = share if len(names) == len(self.slots) else np.add.reduceat(share, names, axis=1)
        if near is not None:
            alike = alike.copy() if alike is share else alike
            points = np.arange(len(alike))[:, None]
            alike[points, np.searchsorted(self.slots[names], self.slots), near] += HELD
        owner = alike.argmax(axis=1)
        order = np.argsort(owner, axis=1, kind="stable")
        unclear = np.flatnonzero((np.take_along_axis(owner, order, axis=1) != self.slots).any(axis=1))
        place_of_name = np.searchsorted(self.slots[names], self.slots)
        for point in unclear:
            place, level = linear_sum_assignment(-alike[point, place_of_name])
            own = np.empty_like(self.slots)
            own[level] = self.slots[place]
            order[point] = np.argsort(own, kind="stable")
        return order

    def _overlap(self, fields: Array, energy: Array, vectors: Matrix) -> Matrix:
        """Return the overlap of each product state, by name, with each eigenvector, shape (m, n, n)."""
        m, n, _ = vectors.shape
        _, electron = np.linalg.eigh(self.electron[0] + np.tensordot(fields, self.electron[1:], 1))
        e = electron.shape[-1]
        overlap = (electron.conj().swapaxes(-1, -2) @ vectors.reshape(m, e, -1)).reshape(m, e, n // e, n)
        # what the nuclei feel: the levels of each electron level, as an operator on the nuclei
        weight = (overlap.real**2 + overlap.imag**2).sum(axis=2)
        own = np.where(weight == weight.max(axis=1, keepdims=True), weight, 0.0)
        centre = (own * energy[:, None]).sum(axis=2) / np.maximum(own.sum(axis=2), 1e-300)
        shift = np.where(own > 0, energy[:, None] - centre[:, :, None], 0.0)
        felt = (overlap * shift[:, :, None]) @ overlap.conj().swapaxes(-1, -2)
        before = 1
        for d in self.sizes:
            after = n // (e * before * d)
            alone = np.einsum("miaubavb->miuv", felt.reshape(m, e, before, d, after, before, d, after))
            _, states = np.linalg.eigh(alone)
            overlap = states.conj().swapaxes(-1, -2)[:, :, None] @ overlap.reshape(m, e, before, d, after * n)
            before *= d
        return overlap.reshape(m, n, n)[:, np.argsort(self.name, kind="stable")]


HELD = 0.9
"""Share of another name that a level may gain along the field before it takes that name."""
PURE = 0.99
"""Share of a name in a level from which on the level counts as that name's state."""


def _mixed(order: Index, close: NDArray[np.bool_], own: Array) -> Iterator[tuple[Index, Index]]:
    """Yield runs of close levels that mix names, by their length: points (q,) and the places they take (q, length).

    Parameters
    ----------
    order : ndarray of int, shape (m, n)
    close : ndarray of bool, shape (m, n - 1)
        Whether a level lies close to the next by energy.
    own : ndarray, shape (m, n)
        Share of its name in the level of each place.
    """
    place = np.argsort(order, axis=1)
    impure = np.take_along_axis(own, place, axis=1) < PURE
    run = np.concatenate([np.zeros((len(close), 1), dtype=np.intp), np.cumsum(~close, axis=1)], axis=1)
    run += np.arange(len(run))[:, None] * run.shape[1]
    _, first, length = np.unique(run.ravel(), return_index=True, return_counts=True)
    some = np.add.reduceat(impure.ravel(), first) > 0
    for size in np.unique(length[some & (length > 1)]):
        at = first[some & (length == size)][:, None] + np.arange(size)
        yield at[:, 0] // place.shape[1], place.ravel()[at]


def _names(e: int, sizes: list[int], nuclei: list[Matrix]) -> Index:
    """Return the name of each product state, shape (n,): the same where equal nuclei are exchanged."""
    kind = []
    for k, one in enumerate(nuclei):
        top = np.abs(one).max()
        same = [j for j in range(k) if sizes[j] == sizes[k] and np.abs(one - nuclei[j]).max() <= 1e-9 * top]
        kind.append(kind[same[0]] if same else k)
    states = np.indices([e, *sizes]).reshape(1 + len(sizes), -1)
    for one in set(kind):
        rows = [1 + k for k, other in enumerate(kind) if other == one]
        states[rows] = np.sort(states[rows], axis=0)
    return np.unique(states, axis=1, return_inverse=True)[1].ravel()
