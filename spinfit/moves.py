"""Small changes of a spin system, and what they do to its resonances at the knots of an average.

A few further diagonalisations, at the resonances or at the nodes about them, give the change of every
level difference, slope and strength, without sums over states, so that degenerate levels need no care.
At a resonance the level difference stays h nu, hence

    dB = -d(gap)/(d gap/dB),     W = strength/|d gap/dB| taken at the moved resonance.

What a parameter does that breaks the symmetry of the average cancels between the images of each
direction; it is taken out of the matrices beforehand.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace
from functools import lru_cache
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from spinfit import hermite
from spinfit.branches import FWHM_PER_SIGMA, KnotData, Request, stencil
from spinfit.hamiltonian import System
from spinfit.levels import occupation, solve, zero_field_state
from spinfit.nodes import FieldNodes
from spinfit.operators import rotation_matrix
from spinfit.powder import Average
from spinfit.symmetry import Symmetry

Array = NDArray[np.float64]

TURNS = 7
"""Turns about an axis that average out every harmonic that operators of sixth rank hold."""


class Move(NamedTuple):
    """A small change of what is averaged.

    Attributes
    ----------
    system : System
    request : Request
        With the broadening that goes with the system.
    field, wave : ndarray, shape (d, 3), or None
        Of a crystal: the moved directions of both fields in molecular axes.
    """

    system: System
    request: Request
    field: Array | None = None
    wave: Array | None = None


class Moved(NamedTuple):
    """Changes of branches at the knots, each of shape (changes, branches, knots); variance may be None."""

    field: Array
    weight: Array
    variance: Array | None


@lru_cache(maxsize=32)
def _group(kind: str) -> tuple[tuple[tuple[float, float, float], float], ...]:
    """Return turns (axis in the domain's frame, angle) over whose images an average of this kind is even."""
    z = (0.0, 0.0, 1.0)
    if kind == "half":
        return ((z, 0.0),)
    if kind == "quarter":
        return ((z, 0.0), (z, math.pi))
    if kind == "octant":
        return ((z, 0.0), (z, math.pi), ((1.0, 0.0, 0.0), math.pi), ((0.0, 1.0, 0.0), math.pi))
    if kind == "axial":
        return tuple((z, 2 * math.pi * k / TURNS) for k in range(TURNS))
    vectors = Rotation.create_group("I").as_rotvec()
    angles = np.linalg.norm(vectors, axis=1)
    axes = np.where(angles[:, None] > 1e-9, vectors / np.maximum(angles, 1e-9)[:, None], z)
    return tuple((tuple(map(float, axis)), float(angle)) for axis, angle in zip(axes, angles, strict=True))


def symmetrised(base: System, moved: System, symmetry: Symmetry) -> System:
    """Return a moved system without what of the move the images of each direction cancel.

    Parameters
    ----------
    base : System
        Which has the symmetry.
    moved : System
        A little different.

    Returns
    -------
    System
        `base` plus the mean of the difference over the turns of the symmetry.
    """
    turns = _turns(base.spins, symmetry.kind, symmetry.axes.tobytes())
    if len(turns) == 1:
        return moved
    n = len(base.h0)
    h0, zeeman = moved.h0 - base.h0, moved.zeeman - base.zeeman
    mean_h0, mean_zeeman = np.zeros_like(h0), np.zeros_like(zeeman)
    for u, matrix in turns:
        back = u.conj().T
        mean_h0 += u @ h0 @ back
        mean_zeeman += u @ np.dot(matrix, zeeman.reshape(3, -1)).reshape(3, n, n) @ back
    return replace(moved, h0=base.h0 + mean_h0 / len(turns), zeeman=base.zeeman + mean_zeeman / len(turns))


@lru_cache(maxsize=32)
def _turns(spins: tuple[float, ...], kind: str, axes: bytes) -> tuple[tuple[NDArray, Array], ...]:
    """Return the turns of `_group` as unitary matrices of spins, and as rotations, in molecular axes."""
    frame = np.frombuffer(axes).reshape(3, 3)
    out = []
    for axis, angle in _group(kind):
        along = frame @ np.array(axis)
        matrix = Rotation.from_rotvec(angle * along).as_matrix()
        out.append((rotation_matrix(spins, tuple(along), angle), matrix))
    return tuple(out)


class Places:
    """The knots at which an average's changes are looked at, and where its resonances lie among the nodes."""

    def __init__(self, average: Average, kept: NDArray[np.intp]) -> None:
        knots = average.knots
        data, branches = knots.data, knots.branches
        self.average, self.kept = average, kept
        self.directions = knots.rings.directions(average.symmetry.axes)[kept]
        self.shape = len(branches.pair), len(kept)
        self.field, self.slope = branches.field[:, kept].ravel(), branches.slope[:, kept].ravel()
        self.row = np.repeat(branches.pair, len(kept))
        self.number = np.tile(np.arange(len(kept)), len(branches.pair))
        self.lower, self.upper = data.pairs[0][self.row], data.pairs[1][self.row]
        first = data.fields[data.leaves[:, 0]]
        leaf = data.leaves[np.clip(np.searchsorted(first, self.field, side="right") - 1, 0, len(first) - 1)].T
        self.half = 0.5 * (data.fields[leaf[2]] - data.fields[leaf[0]])
        self.t = (self.field - data.fields[leaf[1]]) / self.half
        self.leaf, self.middle = leaf, data.fields[leaf[1]]

    @property
    def few(self) -> bool:
        """Whether there are fewer resonances than nodes, and no pair of levels that needs the nodes."""
        data = self.average.knots.data
        return not self.average.loops and data.order is None and self.field.size <= len(data.fields) * len(self.kept)

    def before(self) -> KnotData:
        """Return the average's own numbers at the kept knots."""
        data, kept = self.average.knots.data, self.kept
        variance = None if data.variance is None else data.variance[:, :, kept]
        arrays = (one[:, :, kept] for one in (data.gap, data.slope, data.strength))
        ladder = None if data.ladder is None else lambda: data.ladder().only(kept)
        return KnotData(data.fields, data.leaves, data.pairs, *arrays, variance, data.parents, ladder)

    def after(self, move: Move) -> KnotData:
        """Return the same for a system little different."""
        data = self.average.knots.data
        request = replace(move.request, weigh=self.average.request.weigh)
        nodes = FieldNodes(move.system, request, self.directions)
        order = None if data.order is None else data.order[:, self.kept]
        nodes.settle_on(data.fields, data.leaves, order)
        return nodes.data(data.parents)

    def by_nodes(self, data: KnotData) -> tuple[Array, Array, Array | None]:
        """Return field, weight and variance of every resonance by numbers at the nodes, each of shape (q,)."""
        row, at = self.row, self.number
        c = hermite.quintic(data.gap[row, self.leaf, at], data.slope[row, self.leaf, at] * self.half)
        # one Newton step from the known resonance: the move is small
        t = self.t - hermite.value(c, self.t) / (self.slope * self.half)
        field = self.middle + self.half * t
        steep = np.maximum(np.abs(hermite.slope(c, t) / self.half), 1e-300)
        nodes, basis = stencil(data.fields, self.leaf[1], field)
        weight = (basis * data.strength[row, nodes, at]).sum(axis=0) / steep
        if data.variance is None:
            return field, weight, None
        return field, weight, (basis * data.variance[row, nodes, at]).sum(axis=0) / (steep * FWHM_PER_SIGMA) ** 2

    def by_resonances(self, base: System, moved: Sequence[Move]) -> Moved:
        """Return the changes of every branch by levels at the resonances themselves."""
        here = self._levels(base, self.average.request)
        weight_slope, variance_slope = self._along_field()
        there = [self._levels(one.system, one.request) for one in moved]
        shifts = [(new[0] - here[0]) / -self.slope for new in there]
        weights = [new[1] - here[1] + weight_slope * s for new, s in zip(there, shifts, strict=True)]
        shape = (len(moved), *self.shape)
        variance = None
        if here[2] is not None:
            widths = [new[2] - here[2] + variance_slope * s for new, s in zip(there, shifts, strict=True)]
            variance = np.reshape(widths, shape)
        return Moved(np.reshape(shifts, shape), np.reshape(weights, shape), variance)

    def _levels(self, system: System, request: Request) -> tuple[Array, Array, Array | None]:
        """Return gap, weight and variance at the known resonance fields, each of shape (q,)."""
        row = np.arange(len(self.field))
        broadening = request.broadening
        got = solve(
            system,
            self.directions[self.number],
            self.field,
            microwave=request.microwave,
            operators=None if broadening is None else (broadening.h0, broadening.zeeman),
            state=None if request.populations is None else zero_field_state(system, request.populations),
        )
        gap = got.energy[row, self.upper] - got.energy[row, self.lower]
        steep = np.abs(got.slope[row, self.upper] - got.slope[row, self.lower])
        weight = got.intensity[row, self.lower, self.upper] / steep
        p = occupation(got, request.temperature)
        weight = weight * (1.0 / got.energy.shape[1] if p is None else p[row, self.lower] - p[row, self.upper])
        if self.average.request.weigh is not None:
            weight = weight * self.average.request.weigh(self.directions)[self.number]
        if broadening is None:
            return gap, weight, None
        shift = got.shift[row, :, self.upper] - got.shift[row, :, self.lower]
        own = broadening.variance(shift[:, :, None], self.directions[self.number])[:, 0]
        return gap, weight, own / (steep * FWHM_PER_SIGMA) ** 2

    def _along_field(self) -> tuple[Array, Array]:
        """Return how weight and variance of every resonance change along the field, each of shape (q,), 1/mT."""
        data = self.average.knots.data
        knot = self.kept[self.number]
        gap, slope = data.gap[self.row, self.leaf, knot], data.slope[self.row, self.leaf, knot]
        c = hermite.quintic(gap, slope * self.half)
        step = 1e-3 * self.half
        sides = []
        for sign in (1, -1):
            t = self.t + sign * step / self.half
            steep = np.maximum(np.abs(hermite.slope(c, t) / self.half), 1e-300)
            nodes, basis = stencil(data.fields, self.leaf[1], self.field + sign * step)
            weight = (basis * data.strength[self.row, nodes, knot]).sum(axis=0) / steep
            variance = 0.0
            if data.variance is not None:
                variance = (basis * data.variance[self.row, nodes, knot]).sum(axis=0)
                variance = variance / (steep * FWHM_PER_SIGMA) ** 2
            sides.append((weight, variance))
        return tuple((above - below) / (2 * step) for above, below in zip(*sides, strict=True))
