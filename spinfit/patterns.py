"""Splitting patterns: the lines of all weakly coupled nuclei together, for every pair of levels.

Lines are merged and dropped by bounds on what that does to a spectrum.  While the eigenvalues of every
nucleus are smooth functions of direction and field and the lines are few, each is followed as such.
Otherwise the pattern stands on a fixed grid of offsets, with shares that interpolate whatever is
smooth over the line width: these have no kinks where levels of a nucleus nearly cross, and their number
does not grow with that of the nuclei.  Energies are E/h in MHz, fields in mT.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import fft

from spinfit.hamiltonian import System
from spinfit.weak import Felt, Terms, sets, split_by, terms

Array = NDArray[np.float64]
Index = NDArray[np.intp]

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
    limit = MERGED * scale * math.sqrt(tolerance / 1e-3)
    drop = 0.05 * tolerance
    solved, smooth = _solve_sets(system, seen, along, pairs, scale, drop, strength)
    offset, share = np.zeros((m, p, 1)), np.ones((m, p, 1))
    if smooth:
        for ways in solved:
            if max(_most_lines(sets_) for _, sets_ in ways) > 4 * MOST_LINES:
                smooth = False
                break
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
    count = offset.shape[2]
    kept = (share.max(axis=0) * strength[:, None] > drop / count).ravel()
    flat = [v.transpose(1, 2, 0).reshape(p * count, m)[kept] for v in (offset, share)]
    return Pattern(np.repeat(np.arange(p), count)[kept], *flat, gridded=False)


Ways = list[tuple[float, list[tuple[int, tuple[Array, Array]]]]]


def _solve_sets(
    system: System,
    seen: dict[int, Felt],
    along: Array,
    pairs: tuple[Index, Index],
    scale: float,
    drop: float,
    strength: Array,
) -> tuple[list[Ways], bool]:
    """Return, for each weak nucleus, the lines of its sets, and whether all are smooth functions."""
    smooth, solved = True, []
    used = np.unique(np.concatenate(pairs))
    for one in system.weak:
        ways: Ways = []
        cache: dict[tuple[int, float], tuple[Array, Array]] = {}
        for share, found in sets(one):
            joined = []
            for often, parts in found:
                columns = []
                for part in parts:
                    key = (id(part.kind), part.spin)
                    if key not in cache:
                        solved_part = terms(part, one.order, seen[one.electron], along)
                        smooth &= _smooth(solved_part, used, scale)
                        cache[key] = split_by(solved_part, *pairs)
                    offset, intensity = cache[key]
                    # flips of several units are mostly nowhere
                    felt = part.share * (intensity.max(axis=0) * strength[:, None]).max(axis=0)
                    kept = felt > 0.1 * drop / offset.shape[2]
                    columns.append((offset[..., kept], part.share * intensity[..., kept]))
                both = tuple(np.concatenate(c, axis=2) for c in zip(*columns, strict=True))
                joined.append((often, both))
            ways.append((share, joined))
        solved.append(ways)
    return solved, smooth


def _smooth(one: Terms, used: Index, scale: float) -> bool:
    """Whether sorted eigenvalues are smooth: neighbours nowhere come much closer than elsewhere."""
    if one.energy.shape[-1] == 1:
        return True
    gap = np.abs(np.diff(one.energy[:, used], axis=-1))
    low, high = gap.min(axis=(0, 2)), gap.max(axis=(0, 2))
    return bool(np.all((low >= KINK * high) | (high < 0.05 * scale)))


def _most_lines(found: list[tuple[int, tuple[Array, Array]]]) -> int:
    """Return into how many lines a product may fall before any are merged, as a rough bound."""
    return sum(often * lines[0].shape[2] ** min(often, 2) for often, lines in found)


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
    block = max(1, 500_000 // (m * size))
    for start in range(0, p, block):
        part = slice(start, min(p, start + block))
        total: NDArray | float = 1.0
        for ways in solved:
            mixed: NDArray | float = 0.0
            for weight, found in ways:
                product: NDArray | float = weight
                for often, (offset, share) in found:
                    # total spins F differ by little in their lines: together they cost one deposit
                    few = _merged(offset[:, part], share[:, part], MERGED * step, 0.3 * drop, strength[part])
                    one = _deposited(*few, step, size)
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
    # sinc(u - t) = (-1)^t sin(pi u) / (pi (u - t)), and the Gaussian's mixed term is a power
    u = np.clip(u, 1e-9, 1 - 1e-9)
    wave, power = np.sin(np.pi * u), np.exp(u / TAPER**2)
    damped = wave * power ** (1 - TAPS)
    kernel = []
    for t in range(1 - TAPS, TAPS + 1):
        kernel.append(damped / (u - t) * ((-1) ** t * math.exp(-0.5 * (t / TAPER) ** 2)))
        damped = damped * power
    scaled = share / sum(kernel)
    flat = np.zeros(m * p * size)
    # tap by tap: together they would not fit into any cache
    place = (first + (1 - TAPS)) % size
    for one in kernel:
        flat += np.bincount((base + place).ravel(), (scaled * one).ravel(), minlength=flat.size)
        place += 1
        place[place == size] = 0
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
