"""Weakly coupled nuclei: how they split the transitions of the exactly treated spins.

With the electron (and strongly coupled nuclear) spins in level i, of energy E_i, a weak nucleus feels

    h_i = (A^T <i|S|i> - g_n mu_N/h B) . I  +  I.P.I
          + sum over k != i of (I.A^T <i|S|k>) (<k|S|i>.A I) / (E_i - E_k),

the last line in second order only (C. P. Slichter, Principles of Magnetic Resonance, chapter on
perturbation; the operator keeps its order, so that its antisymmetric part is linear in I).  A
transition i -> j then becomes lines n -> n' that are shifted by the difference of the eigenvalues of
h_j and h_i and have the share |<n|n'>|^2 / (2I+1) of its intensity (J. R. Rowan, E. L. Hahn,
W. B. Mims, Phys. Rev. 137, A61 (1965)): where the nuclear Zeeman term turns the axis of
quantisation, nuclear spins flip along and satellites appear.

Equivalent nuclei without P enter by their total spin F, which holds their second-order cross terms;
those between different nuclei, and those of equivalent nuclei with P, are left out.  Without P
the second-order operator counts along the axis of the linear term only: it is smaller by A/E.

Lines are merged and dropped by bounds on what that does to a spectrum (`Pattern`).  Energies are E/h in
MHz, fields in mT.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from functools import lru_cache
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy import fft

from spinfit.hamiltonian import System
from spinfit.isotopes import mixtures
from spinfit.nuclei import Kind, Weak
from spinfit.operators import add_block, coupled_spins, dimension, multiplicity, spin_matrices

Array = NDArray[np.float64]
Index = NDArray[np.intp]

MOST_COUPLED = 12
"""Largest 2F for which equivalent nuclei are coupled to total spins; larger sets are multiplied out."""
MERGED = 0.06
"""Lines closer than this everywhere, in line widths, are merged at the default tolerance."""
KINK = 0.15
"""Ratio of the smallest to the largest nuclear splitting below which eigenvalues are no smooth functions."""
SPACING = 0.45
"""Step of the grid of offsets in line widths."""
TAPS, TAPER = 7, 2.0
"""Reach of the grid's kernel to each side and the width of its Gaussian, in steps."""
MOST_LINES = 64
"""Lines of a pattern above which a grid of offsets takes their place, if it has fewer points."""


class Felt(NamedTuple):
    """What weak nuclei feel of one electron spin in every level, for m points.

    Attributes
    ----------
    mean : ndarray, shape (m, n, 3)
        <i|S|i>.
    square : ndarray, shape (m, n, 3, 3)
        Real, symmetric part of sum_k <i|S_a|k><k|S_b|i>/(E_i - E_k), 1/MHz.
    axial : ndarray, shape (m, n, 3)
        Its imaginary, antisymmetric part as a vector, e_abc Im(..)_bc / 2.
    """

    mean: Array
    square: Array
    axial: Array


class Part(NamedTuple):
    """A nuclear spin, or total spin, with its share of the states of the set it belongs to."""

    share: float
    spin: float
    kind: Kind


class _Terms(NamedTuple):
    """Eigenvalues (m, n, d) of one part in every level, with axes (m, n, 3) or eigenvectors (m, n, d, d)."""

    energy: Array
    axis: Array | None
    vectors: NDArray[np.complex128] | None


def electron_matrices(system: System, electron: int) -> NDArray[np.complex128]:
    """Return the spin matrices of one electron spin in a system's product space, shape (3, n, n)."""
    n = len(system.h0)
    out = np.zeros((3, n, n), dtype=complex)
    add_block(out, spin_matrices(system.spins[electron]), dimension(system.spins[:electron]))
    return out


def felt(system: System, energy: Array, vectors: NDArray[np.complex128]) -> dict[int, Felt]:
    """Return, for each electron spin that has weak nuclei, what they feel.

    Denominators are kept from vanishing: 1/x becomes x/(x^2 + 4 |a S|^2) with the largest coupling
    a of a weak nucleus, which bounds a shift by a quarter of the coupling itself.

    Parameters
    ----------
    energy : ndarray, shape (m, n)
    vectors : ndarray, shape (m, n, n)
        Eigenvectors as columns.
    """
    n = energy.shape[1]
    out = {}
    for electron in sorted({one.electron for one in system.weak}):
        spins = electron_matrices(system, electron)
        side_by_side = np.ascontiguousarray(spins.transpose(1, 0, 2)).reshape(n, 3 * n)
        s = vectors.conj().transpose(0, 2, 1) @ side_by_side
        s = (s.reshape(-1, 3 * n, n) @ vectors).reshape(-1, n, 3, n).transpose(0, 1, 3, 2)
        mean = np.einsum("miia->mia", s).real.copy()
        if all(one.order == 1 for one in system.weak):
            out[electron] = Felt(mean, np.zeros((*mean.shape, 3)), np.zeros_like(mean))
            continue
        strongest = max(_size(one) for one in system.weak)
        gap = energy[:, :, None] - energy[:, None, :]
        size = (s.real**2 + s.imag**2).sum(axis=-1)
        inverse = gap / np.maximum(gap**2 + (2 * strongest) ** 2 * size, 1e-30)
        # rows: (n, k) (k, 3): real and imaginary parts apart are smaller and faster than complex ones
        re, im = s.real * inverse[..., None], s.imag * inverse[..., None]
        square = re.swapaxes(-1, -2) @ s.real + im.swapaxes(-1, -2) @ s.imag
        turn = im.swapaxes(-1, -2) @ s.real - re.swapaxes(-1, -2) @ s.imag
        axial = np.stack([turn[..., 1, 2], turn[..., 2, 0], turn[..., 0, 1]], axis=-1)
        out[electron] = Felt(mean, square, axial)
    return out


def _size(one: Weak) -> float:
    return max(float(np.linalg.norm(kind.hyperfine, 2)) * max(kind.spin, 0.5) for kind in one.kinds)


def extent(system: System, field: float) -> float:
    """Return how far, MHz, weak nuclei shift transitions: at most, or 4.5 standard deviations if less."""
    most = square = 0.0
    for one in system.weak:
        spin = system.spins[one.electron]
        reach = 0.0
        for kind in one.kinds:
            a, p = np.linalg.norm(kind.hyperfine, 2), np.linalg.norm(kind.quadrupole, 2)
            # transitions change <S> by about one; satellites by nuclear flips besides
            linear = a * max(1.0, 0.5 * spin) + 2 * abs(kind.zeeman) * field * (a > 0)
            reach = max(reach, kind.spin * linear + kind.spin**2 * 2 * p)
        most += one.count * reach
        square += one.count * reach**2
    return min(most, 4.5 * math.sqrt(square))


@lru_cache(maxsize=256)
def _fillings(shares: tuple[float, ...], count: int) -> tuple[tuple[float, tuple[int, ...]], ...]:
    ways = sorted(mixtures(shares, count), key=lambda way: -way[0])
    total, kept = 0.0, []
    for share, filling in ways:
        kept.append((share, filling))
        total += share
        if total > 1 - 1e-4:
            break
    return tuple((share / total, filling) for share, filling in kept)


def sets(one: Weak) -> Iterator[tuple[float, list[tuple[int, list[Part]]]]]:
    """Yield the ways to fill equivalent places with isotopes.

    Each is (share, sets): a set is a list of parts, of which the spin is one or the other by their
    shares, and how often the set occurs; different sets are independent.
    """
    if one.count == 1:
        yield 1.0, [(1, [Part(kind.share, kind.spin, kind) for kind in one.kinds])]
        return
    for share, filling in _fillings(tuple(kind.share for kind in one.kinds), one.count):
        found: list[tuple[int, list[Part]]] = []
        for kind, count in zip(one.kinds, filling, strict=True):
            if not count or not kind.spin:
                continue
            if count == 1 or np.any(kind.quadrupole) or 2 * count * kind.spin > MOST_COUPLED:
                found.append((count, [Part(1.0, kind.spin, kind)]))
                continue
            states = multiplicity(kind.spin) ** count
            coupled = coupled_spins(kind.spin, count)
            found.append((1, [Part(often * multiplicity(f) / states, f, kind) for f, often in coupled]))
        yield share, found


def _terms(part: Part, order: int, seen: Felt, along: Array) -> _Terms:
    """Solve the effective Hamiltonian of one part; `along` is the field as a vector, shape (m, 3), mT."""
    kind, spin = part.kind, part.spin
    linear = seen.mean @ kind.hyperfine + kind.zeeman * along[:, None, :]
    square = None
    if order == 2 and kind.hyperfine.any():
        linear = linear - seen.axial @ _cofactors(kind.hyperfine)
        square = kind.hyperfine.T @ seen.square @ kind.hyperfine
    if kind.quadrupole.any():
        i = spin_matrices(spin)
        tensor = kind.quadrupole if square is None else kind.quadrupole + square
        pairs = np.einsum("aij,bjk->abik", i, i).reshape(9, -1)
        flat = np.broadcast_to(tensor, (*linear.shape[:2], 3, 3)).reshape(*linear.shape[:2], 9)
        d = multiplicity(spin)
        h = (linear @ i.reshape(3, -1) + flat @ pairs).reshape(*linear.shape[:2], d, d)
        energy, vectors = np.linalg.eigh(h)
        return _Terms(energy, None, vectors)
    length = np.linalg.norm(linear, axis=-1)
    axis = linear / np.maximum(length, 1e-12)[..., None]
    m = spin - np.arange(multiplicity(spin))
    energy = length[..., None] * m
    if square is not None:
        own = np.einsum("mia,miab,mib->mi", axis, square, axis)[..., None]
        across = np.trace(square, axis1=-2, axis2=-1)[..., None] - own
        energy = energy + 0.5 * (spin * (spin + 1) - m**2) * across + m**2 * own
    return _Terms(energy, axis, None)


def _cofactors(a: Array) -> Array:
    """Return the matrix of cofactors, with (A x) x (A y) = cof(A) (x x y)."""
    return np.array([np.cross(a[1], a[2]), np.cross(a[2], a[0]), np.cross(a[0], a[1])])


@lru_cache(maxsize=64)
def _turning(spin: float) -> Array:
    """Return coefficients in powers of cos(beta) of |<m| exp(-i beta I_y) |m'>|^2, shape (2I+1, d^2), d = 2I+1."""
    d = multiplicity(spin)
    if d == 1:
        return np.ones((1, 1))
    values, vectors = np.linalg.eigh(spin_matrices(spin)[1])
    x = np.cos((np.arange(d) + 0.5) * np.pi / d)
    turned = np.einsum("ik,bk,jk->bij", vectors, np.exp(-1j * np.arccos(x)[:, None] * values), vectors.conj())
    return np.linalg.solve(np.vander(x, d, increasing=True), (np.abs(turned) ** 2).reshape(d, d * d))


def _lines(terms: _Terms, lower: Index, upper: Index) -> tuple[Array, Array]:
    """Return offsets and intensities of the lines of each pair of levels, shape (m, p, d*d)."""
    low, high = terms.energy[:, lower], terms.energy[:, upper]
    d = low.shape[-1]
    offset = high[..., None, :] - low[..., :, None]
    if terms.axis is None:
        overlap = terms.vectors[:, lower].conj().swapaxes(-1, -2) @ terms.vectors[:, upper]
        intensity = (overlap.real**2 + overlap.imag**2) / d
    else:
        cos = np.einsum("mpa,mpa->mp", terms.axis[:, lower], terms.axis[:, upper])
        powers = np.clip(cos, -1, 1)[..., None] ** np.arange(d)
        intensity = (powers @ _turning((d - 1) / 2)) / d
    shape = (*low.shape[:2], d * d)
    return offset.reshape(shape), intensity.reshape(shape)


@dataclass(frozen=True, eq=False)
class Pattern:
    """Splitting patterns of pairs of levels at m points.

    Attributes
    ----------
    pair : ndarray of int, shape (l,)
        Which pair each line belongs to, rising.
    offset, share : ndarray, shape (l, m)
        Shift of the transition's frequency, MHz, and share of its intensity.
    gridded : bool
        Offsets are the same at all points, and shares may be negative: together they interpolate.
    """

    pair: Index
    offset: Array
    share: Array
    gridded: bool


def pattern(
    system: System,
    seen: dict[int, Felt],
    along: Array,
    pairs: tuple[Index, Index],
    *,
    scale: float,
    tolerance: float,
    strength: Array | None = None,
) -> Pattern:
    """Return the splitting pattern of each pair of levels, all weak nuclei together.

    Parameters
    ----------
    seen : dict
        From `felt`, for m points.
    along : ndarray, shape (m, 3)
        The field as a vector in molecular axes, mT.
    pairs : (lower, upper), each shape (p,)
    scale : float
        Length over which lines are smooth in frequency, MHz.
    tolerance : float
    strength : ndarray, shape (p,), optional
        Largest strength of each pair relative to the strongest: weak pairs need less.
    """
    lower, upper = pairs
    m, p = len(along), len(lower)
    strength = np.ones(p) if strength is None else strength
    solved, smooth = _solve_sets(system, seen, along, pairs, scale)
    limit = MERGED * scale * math.sqrt(tolerance / 1e-3)
    drop = 0.05 * tolerance
    offset, share = np.zeros((m, p, 1)), np.ones((m, p, 1))
    if smooth:
        for ways in solved:
            mixed = [_product(sets_, limit, drop, strength) for _, sets_ in ways]
            weights = [w for w, _ in ways]
            one = _merged(
                np.concatenate([o for o, _ in mixed], axis=2),
                np.concatenate([w * s for w, (_, s) in zip(weights, mixed, strict=True)], axis=2),
                limit,
                drop,
                strength,
            )
            if offset.shape[2] * one[0].shape[2] > 40 * MOST_LINES:
                smooth = False
                break
            offset, share = _convolved((offset, share), one, limit, drop, strength)
    if not smooth or offset.shape[2] > MOST_LINES:
        grid = _gridded(solved, (m, p), scale * SPACING, drop, strength)
        if not smooth or len(grid.pair) < offset.shape[2] * p:
            return grid
    lines = offset.shape[2]
    kept = (share.max(axis=0) * strength[:, None] > drop / lines).ravel()
    flat = [v.transpose(1, 2, 0).reshape(p * lines, m)[kept] for v in (offset, share)]
    return Pattern(np.repeat(np.arange(p), lines)[kept], *flat, gridded=False)


Ways = list[tuple[float, list[tuple[int, tuple[Array, Array]]]]]


def _solve_sets(
    system: System, seen: dict[int, Felt], along: Array, pairs: tuple[Index, Index], scale: float
) -> tuple[list[Ways], bool]:
    """Return, for each weak nucleus, the lines of its sets, and whether all are smooth functions."""
    smooth, solved = True, []
    used = np.unique(np.concatenate(pairs))
    for one in system.weak:
        ways: Ways = []
        cache: dict[tuple[int, float], tuple[Array, Array]] = {}
        for share, found in sets(one):
            lines = []
            for often, parts in found:
                columns = []
                for part in parts:
                    key = (id(part.kind), part.spin)
                    if key not in cache:
                        terms = _terms(part, one.order, seen[one.electron], along)
                        smooth &= _smooth(terms, used, scale)
                        cache[key] = _lines(terms, *pairs)
                    offset, intensity = cache[key]
                    columns.append((offset, part.share * intensity))
                joined = tuple(np.concatenate(c, axis=2) for c in zip(*columns, strict=True))
                lines.append((often, joined))
            ways.append((share, lines))
        solved.append(ways)
    return solved, smooth


def _smooth(terms: _Terms, used: Index, scale: float) -> bool:
    """Whether sorted eigenvalues are smooth: neighbours nowhere come much closer than elsewhere."""
    if terms.energy.shape[-1] == 1:
        return True
    gap = np.abs(np.diff(terms.energy[:, used], axis=-1))
    low, high = gap.min(axis=(0, 2)), gap.max(axis=(0, 2))
    return bool(np.all((low >= KINK * high) | (high < 0.05 * scale)))


def _product(
    found: list[tuple[int, tuple[Array, Array]]], limit: float, drop: float, strength: Array
) -> tuple[Array, Array]:
    """Return the convolution of independent sets, shape (m, p, l)."""
    out = None
    for often, lines in found:
        one = _merged(*lines, limit, drop, strength)
        for _ in range(often):
            out = one if out is None else _convolved(out, one, limit, drop, strength)
    if out is None:  # spinless isotopes alone
        return np.zeros((1, 1, 1)), np.ones((1, 1, 1))
    return out


def _convolved(
    a: tuple[Array, Array], b: tuple[Array, Array], limit: float, drop: float, strength: Array
) -> tuple[Array, Array]:
    offset = a[0][..., :, None] + b[0][..., None, :]
    share = a[1][..., :, None] * b[1][..., None, :]
    flat = (*offset.shape[:2], -1)
    return _merged(offset.reshape(flat), share.reshape(flat), limit, drop, strength)


def _merged(offset: Array, share: Array, limit: float, drop: float, strength: Array) -> tuple[Array, Array]:
    """Drop lines that matter nowhere; merge those that lie together everywhere, at their mean."""
    share = np.broadcast_to(share, np.broadcast_shapes(offset.shape, share.shape))
    offset = np.broadcast_to(offset, share.shape)
    top = (share.max(axis=0) * strength[:, None]).max(axis=0) if share.shape[1] > 1 else share.max(axis=(0, 1))
    keep = np.flatnonzero(top > drop / max(4, offset.shape[2]))
    offset, share = offset[..., keep], share[..., keep]
    order = np.argsort(offset.mean(axis=(0, 1)), kind="stable")
    offset, share = offset[..., order], share[..., order]
    apart = np.abs(np.diff(offset, axis=2)).max(axis=(0, 1))
    edges, run = [0], 0.0
    for k, step in enumerate(apart, start=1):
        run += step
        if run > limit:
            edges.append(k)
            run = 0.0
    if len(edges) == offset.shape[2]:
        return offset, share
    total = np.add.reduceat(share, edges, axis=2)
    mean = np.add.reduceat(share * offset, edges, axis=2) / np.maximum(total, 1e-300)
    # where nothing is left a mean of shares says nothing
    plain = np.add.reduceat(offset, edges, axis=2) / np.diff([*edges, offset.shape[2]])
    return np.where(total > 1e-12, mean, plain), total


def _gridded(solved: list[Ways], shape: tuple[int, int], step: float, drop: float, strength: Array) -> Pattern:
    """Return the pattern on fixed offsets, by Fourier products.

    Shares are those of a Gaussian-windowed sinc, which interpolates what is smooth over the line
    width; as functions of direction they have no kinks where levels of a nucleus cross.
    """
    m, p = shape
    reach = 0.0
    for ways in solved:
        reach += max(sum(n * float(np.abs(lines[0]).max()) for n, lines in found) for _, found in ways)
    half = math.ceil(reach / step) + 2 * TAPS
    size = fft.next_fast_len(2 * half + 1, real=True)
    at = (np.arange(size) + size // 2) % size - size // 2
    pairs, offsets, shares = [], [], []
    block = max(1, 4_000_000 // (m * size))
    for start in range(0, p, block):
        part = slice(start, min(p, start + block))
        total: NDArray | float = 1.0
        for ways in solved:
            mixed: NDArray | float = 0.0
            for weight, found in ways:
                product: NDArray | float = weight
                for often, (offset, share) in found:
                    one = _deposited(offset[:, part], share[:, part], step, size)
                    product = product * fft.rfft(one, axis=-1) ** often
                mixed = mixed + product
            total = total * mixed
        values = fft.irfft(total, size, axis=-1)
        top = np.abs(values).max(axis=0) * strength[part, None]
        row, place = np.nonzero(top > drop)
        order = np.lexsort((at[place], row))
        row, place = row[order], place[order]
        pairs.append(start + row)
        offsets.append(step * at[place])
        shares.append(values[:, row, place].T)
    offset = np.broadcast_to(np.concatenate(offsets)[:, None], (len(np.concatenate(offsets)), m))
    return Pattern(np.concatenate(pairs), offset, np.concatenate(shares), gridded=True)


def _deposited(offset: Array, share: Array, step: float, size: int) -> Array:
    """Return shares on a periodic grid, shape (m, p, size)."""
    m, p, lines = offset.shape
    x = offset / step
    first = np.floor(x)
    u = x - first
    base = np.arange(m * p).reshape(m, p, 1) * size
    first = first.astype(np.intp)
    flat = np.zeros(m * p * size)
    kernel = [np.sinc(u - t) * np.exp(-0.5 * ((u - t) / TAPER) ** 2) for t in range(1 - TAPS, TAPS + 1)]
    norm = sum(kernel)
    for t, k in zip(range(1 - TAPS, TAPS + 1), kernel, strict=True):
        place = (base + (first + t) % size).ravel()
        flat += np.bincount(place, (share * k / norm).ravel(), minlength=flat.size)
    return flat.reshape(m, p, size)


def node_slopes(fields: Array, values: Array, most: int = 5) -> Array:
    """Return derivatives along the field of values known at nodes, shape (l, k, n), by polynomials.

    Through up to `most` nodes about each; offsets are small and vary slowly.
    """
    k = len(fields)
    matrix = np.zeros((k, k))
    for i in range(k):
        first = max(0, min(i - most // 2, k - most))
        near = np.arange(first, min(first + most, k))
        if len(near) < 2:
            continue
        x = (fields[near] - fields[i]) / np.ptp(fields[near])
        rows = np.linalg.solve(np.vander(x, increasing=True).T, np.eye(len(near))[1])
        matrix[i, near] = rows / np.ptp(fields[near])
    return np.einsum("ij,ljn->lin", matrix, values)


def names(weak: Sequence[Weak]) -> list[dict[str, object]]:
    """Return how weak nuclei are treated, for reports."""
    order = {1: "first order", 2: "second order"}
    return [{"nucleus": one.name, "count": one.count, "treat": order[one.order]} for one in weak]
