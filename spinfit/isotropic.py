"""What fast tumbling leaves of a spin Hamiltonian, and its resonances, exactly.

Of every tensor the isotropic part stays: g and A are a third of their traces; D, E, Stevens
operators, P, dipolar and antisymmetric couplings average to nothing.  J stays.  Such a Hamiltonian
conserves the total projection M on the field and falls into blocks of M, within which levels do not
cross, so that every pair of levels is a smooth function of the field.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass, replace
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from spinfit import hermite
from spinfit.levels import KELVIN_PER_MHZ
from spinfit.nuclei import Kind, Site
from spinfit.operators import add_bilinear, add_block, dimension, spin_matrices
from spinfit.resonance import ZERO_FIELD
from spinfit.species import Nucleus, Species, principal
from spinfit.units import MU_B_OVER_H

Array = NDArray[np.float64]

LEAVES = 12
"""Pieces of the field range, each followed by a quintic."""
FORBIDDEN = 1e-8
"""Share of the largest intensity below which a pair of levels is forbidden."""


class Lines(NamedTuple):
    """Resonances; arrays of shape (r,).

    Attributes
    ----------
    field, weight, slope : ndarray
        mT; |M|^2 x population difference / |slope|; d nu/dB in MHz/mT.
    m : ndarray
        Projection of the first nucleus, mean of the two levels.
    origin : ndarray of int
        Which exact line it came from: the row of `Response`.
    """

    field: Array
    weight: Array
    slope: Array
    m: Array
    origin: NDArray[np.intp]


class Response(NamedTuple):
    """What a weak nucleus needs of the two levels of each exact line, for each electron; shape (electrons, r).

    `first` is the change of <S_z>.  `even` and `odd` are the changes of P + Q and P - Q, with
    P and Q = sum over other levels k of |<k|S_+|i>|^2 and |<k|S_-|i>|^2, each / (E_i - E_k), 1/MHz.
    """

    first: Array
    even: Array
    odd: Array


def _third(tensor: tuple[float, ...]) -> float:
    """Return a third of the trace; one number given is that number to the last digit."""
    return float(tensor[0]) if len(tensor) == 1 else float(principal(tensor).sum()) / 3


def isotropic(species: Species) -> Species:
    """Return the species with every tensor replaced by its isotropic part, equally coupled nuclei together."""
    spins = tuple(
        replace(spin, g=(_third(spin.g),), D=0.0, E=0.0, rhombicity=None, stevens=()) for spin in species.spins
    )
    exchange = tuple(replace(one, dipolar=(0.0,), antisymmetric=(0.0, 0.0, 0.0)) for one in species.exchange)
    together: dict[Nucleus, int] = {}
    for nucleus in species.nuclei:
        a = _third(nucleus.A)
        plain = replace(nucleus, A=(a,), P=(0.0,), A_tilt=(0.0,) * 3, P_tilt=(0.0,) * 3, count=1, name=None)
        together[plain] = together.get(plain, 0) + nucleus.count
    nuclei = tuple(replace(nucleus, count=count) for nucleus, count in together.items())
    return replace(species, spins=spins, exchange=exchange, nuclei=nuclei)


@dataclass(frozen=True, eq=False)
class Core:
    """The isotropic Hamiltonian h0 + B z of one set of spins, real; B along z.

    Attributes
    ----------
    h0, transverse : ndarray, shape (n, n)
        MHz; dH/dB_x, MHz/mT.
    z, total, first : ndarray, shape (n,)
        Diagonals of dH/dB_z (MHz/mT), of the projection of all spins, and of the first nucleus.
    electrons : ndarray, shape (e, n)
        Diagonals of each electron's S_z.
    raising : ndarray, shape (e, n, n)
        S_+ of each electron.
    """

    h0: Array
    transverse: Array
    z: Array
    total: Array
    first: Array
    electrons: Array
    raising: Array


def core_of(species: Species, sites: tuple[Site, ...], resolved: dict[int, tuple[Kind, ...]]) -> Core:
    spins = (*(spin.S for spin in species.spins), *(site.spin for site in sites))
    n, count = dimension(spins), len(species.spins)

    def placed(position: int, component: int) -> Array:
        out = np.zeros((n, n), dtype=complex)
        add_block(out, spin_matrices(spins[position])[component], dimension(spins[:position]))
        return out.real

    h0 = np.zeros((n, n), dtype=complex)
    for one in species.exchange:
        add_bilinear(h0, one.J * np.eye(3), spins, one.between[0] - 1, one.between[1] - 1)
    moments = [spin.g[0] * MU_B_OVER_H for spin in species.spins]
    first = np.zeros(n)
    for position, site in enumerate(sites, start=count):
        kind = resolved[site.nucleus][site.kind]
        add_bilinear(h0, kind.hyperfine, spins, species.nuclei[site.nucleus].couples_to - 1, position)
        moments.append(kind.zeeman)
        if site.nucleus == 0:
            first += np.diagonal(placed(position, 2))
    along = np.array([np.diagonal(placed(k, 2)) for k in range(len(spins))])
    transverse = sum(moment * placed(k, 0) for k, moment in enumerate(moments))
    # S_x is half of S_+ + S_-; in the order of falling projections S_+ is the upper triangle
    raising = np.array([2 * np.triu(placed(k, 0)) for k in range(count)])
    return Core(h0.real.copy(), transverse, np.array(moments) @ along, along.sum(axis=0), first, along[:count], raising)


class _Block(NamedTuple):
    """The states of one total projection."""

    index: NDArray[np.intp]
    h0: Array
    z: Array

    def solve(self, fields: Array) -> tuple[Array, Array]:
        """Return energies (f, n) and vectors (f, n, n) at `fields`, shape (f,)."""
        return np.linalg.eigh(self.h0 + fields[:, None, None] * np.diag(self.z))


def _blocks(core: Core) -> list[_Block]:
    keys = np.rint(2 * core.total).astype(int)
    indices = [np.flatnonzero(keys == key) for key in range(keys.min(), keys.max() + 1, 2)]
    return [_Block(i, core.h0[np.ix_(i, i)], core.z[i]) for i in indices]


def _roots(
    below: _Block, above: _Block, transverse: Array | None, frequency: float, low: float, high: float
) -> tuple[NDArray, NDArray, Array]:
    """Return (level of `below`, level of `above`, field) where the two differ by the frequency either way.

    Within a block levels do not cross, so that each pair of levels is a smooth function of the field.
    Pairs that are forbidden at all three nodes around a root are left out.
    """
    nodes = np.linspace(low, high, 2 * LEAVES + 1)
    (e_a, v_a), (e_b, v_b) = below.solve(nodes), above.solve(nodes)
    gap = e_b[:, None, :] - e_a[:, :, None]
    g_a, g_b = np.einsum("fki,k->fi", v_a**2, below.z), np.einsum("fki,k->fi", v_b**2, above.z)
    slope = g_b[:, None, :] - g_a[:, :, None]
    half = nodes[1] - nodes[0]
    operator = np.diag(below.z) if transverse is None else transverse
    size = (v_a.transpose(0, 2, 1) @ operator @ v_b) ** 2
    size = np.maximum(np.maximum(size[:-1:2], size[1::2]), size[2::2])
    allowed = size > FORBIDDEN * size.max()
    found = []
    # levels of one block come in one order only; those of two blocks in either
    for sign in (1,) if below is above else (1, -1):
        f, d = sign * gap - frequency, sign * slope * half
        leaves = np.arange(0, 2 * LEAVES, 2)
        f3 = np.stack([f[leaves + k] for k in range(3)]).reshape(3, -1)
        d3 = np.stack([d[leaves + k] for k in range(3)]).reshape(3, -1)
        c = hermite.quintic(f3, d3)
        which, start, end = hermite.brackets(c, f3)
        seen = allowed.ravel()[which]
        which, start, end = which[seen], start[seen], end[seen]
        t = hermite.refine(c[:, which], start, end)
        leaf, p, q = np.unravel_index(which, (LEAVES, *gap.shape[1:]))
        found.append((p, q, nodes[2 * leaf + 1] + half * t))
    p, q, fields = (np.concatenate(column) for column in zip(*found, strict=True))
    return p, q, fields


def _polished(
    below: _Block, above: _Block, frequency: float, p: NDArray, q: NDArray, fields: Array, reach: float
) -> tuple[Array, Array, Array, Array, Array, Array]:
    """Return exact fields and the two levels there: energies, slopes' difference (with sign), vectors."""
    row = np.arange(len(fields))
    for step in range(4):
        (e_a, v_a), (e_b, v_b) = below.solve(fields), above.solve(fields)
        e_a, e_b, v_a, v_b = e_a[row, p], e_b[row, q], v_a[row, :, p], v_b[row, :, q]
        gap, slope = e_b - e_a, v_b**2 @ above.z - v_a**2 @ below.z
        if step < 3:
            change = (np.copysign(frequency, gap) - gap) / np.where(slope != 0, slope, np.inf)
            fields = np.where(np.abs(change) <= reach, fields + change, fields)
    return fields, e_a, e_b, np.sign(gap) * slope, v_a, v_b


def exact_lines(
    core: Core,
    frequency: float,
    field_range: tuple[float, float],
    *,
    microwave: str = "perpendicular",
    temperature: float | None = None,
    respond: bool = False,
) -> tuple[Lines, Response]:
    """Find every resonance of the isotropic Hamiltonian that is not forbidden.

    Parameters
    ----------
    field_range : (float, float)
        mT, not negative.
    respond : bool
        Whether the response to weak nuclei is wanted; else it is empty.

    Returns
    -------
    Lines, Response
    """
    low, high = max(field_range[0], ZERO_FIELD), field_range[1]
    blocks = _blocks(core)
    pairs = (
        [(k, k) for k in range(len(blocks))]
        if microwave == "parallel"
        else list(itertools.pairwise(range(len(blocks))))
    )
    found: list[tuple[Array, ...]] = []
    for a, b in pairs:
        below, above = blocks[a], blocks[b]
        across = None if a == b else core.transverse[np.ix_(below.index, above.index)]
        p, q, fields = _roots(below, above, across, frequency, low, high)
        if not len(fields):
            continue
        reach = (high - low) / LEAVES
        fields, e_a, e_b, slope, v_a, v_b = _polished(below, above, frequency, p, q, fields, reach)
        # for projections that differ by 1 M_x and M_y are equally large
        moment = np.sum(v_a * (v_b * below.z if across is None else v_b @ across.T), axis=1)
        change = _difference(blocks, fields, np.minimum(e_a, e_b), np.maximum(e_a, e_b), temperature)
        weight = moment**2 * change / np.maximum(np.abs(slope), 1e-300)
        m = 0.5 * (_labels(core.first[below.index], v_a) + _labels(core.first[above.index], v_b))
        up = np.where(e_b > e_a, 1.0, -1.0)
        levels = [(b, e_b, v_b, up), (a, e_a, v_a, -up)]
        response = _response(core, blocks, frequency, fields, levels) if respond else np.empty((3, 0, len(fields)))
        found.append((fields, weight, slope, m, *response))
    if not found:
        none = np.empty(0)
        return Lines(none, none, none, none, np.empty(0, dtype=np.intp)), Response(
            *np.empty((3, len(core.electrons), 0))
        )
    field, weight, slope, m, *response = (np.concatenate(column, axis=-1) for column in zip(*found, strict=True))
    keep = np.abs(weight) > FORBIDDEN * np.abs(weight).max()
    lines = Lines(field[keep], weight[keep], slope[keep], m[keep], np.arange(int(keep.sum())))
    return lines, Response(*(one[:, keep] for one in response))


def _difference(blocks: list[_Block], fields: Array, lower: Array, upper: Array, temperature: float | None) -> Array:
    """Return the population difference of two levels with these energies, shape (r,)."""
    if temperature is None:
        return np.full(len(fields), 1 / sum(len(block.index) for block in blocks))
    every = np.concatenate([block.solve(fields)[0] for block in blocks], axis=1)
    factor = KELVIN_PER_MHZ / temperature
    share = np.exp((every.min(axis=1, keepdims=True) - every) * factor).sum(axis=1)
    ground = every.min(axis=1)
    return (np.exp((ground - lower) * factor) - np.exp((ground - upper) * factor)) / share


def _labels(values: Array, vectors: Array) -> Array:
    """Return the value nearest to the mean of a diagonal operator in each state, shape (r,)."""
    mean = vectors**2 @ values
    known = np.unique(values)
    return known[np.abs(mean[:, None] - known).argmin(axis=1)]


def _response(core: Core, blocks: list[_Block], frequency: float, fields: Array, levels: list) -> Array:
    """Return first, even, odd, shape (3, electrons, r): upper level minus lower one.

    Only levels across the electron's Zeeman gap count, farther than a quarter of the frequency:
    what nearer ones add is of third order.
    """
    out = np.zeros((3, len(core.electrons), len(fields)))
    for place, energy, vector, sign in levels:
        index = blocks[place].index
        for e, raising in enumerate(core.raising):
            out[0, e] += sign * (vector**2 @ core.electrons[e, index])
            for step in (1, -1):
                if not 0 <= place + step < len(blocks):
                    continue
                other = blocks[place + step]
                matrix = raising if step == 1 else raising.T
                energies, vectors = other.solve(fields)
                size = np.einsum("rki,kl,rl->ri", vectors, matrix[np.ix_(other.index, index)], vector) ** 2
                gap = energy[:, None] - energies
                far = np.abs(gap) > 0.25 * frequency
                term = sign * np.where(far, size / np.where(far, gap, 1.0), 0.0).sum(axis=1)
                out[1, e] += term
                out[2, e] += step * term
    return out
