"""Averages over distributed parameters where widths of first order are not good enough.

A Gaussian of variance 1 is the sum of narrower ones, of variance s, about evenly spaced nodes.  Each
node is a spectrum of its own whose resonances have the width that s leaves to first order: there are
no ripples, however few nodes there are, and what the first order misses falls with s.  The rules with
s = 1, 1/2, 1/4, ... are extrapolated to s = 0 (L. F. Richardson, Phil. Trans. R. Soc. A 226, 299 (1927);
W. Romberg, 1955; both from memory); with several distributed parameters, rules are combined as in a
sparse grid that grows where the spectrum still changes (T. Gerstner, M. Griebel, Computing 71, 65
(2003), from memory).  Parameters with a correlation are written as independent ones.

A spread's share in the error is first told from a few directions, by how far resonances and their
weights miss what the first order predicts one standard deviation away.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import replace
from functools import lru_cache, reduce
from itertools import product
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import minimize_scalar

from spinfit.branches import FWHM_PER_SIGMA
from spinfit.broadening import Broadening
from spinfit.hamiltonian import System

Array = NDArray[np.float64]
Transform = NDArray[np.complex128]
Levels = tuple[int, ...]

AVERAGED = ("D", "E")
"""What is averaged over where need be."""
EXACT = 0.1
"""Part of the tolerance by which a rule may miss a Gaussian, where a resonance moves evenly with the parameter."""
ENOUGH = 0.5
"""Part of the tolerance at which the average is left as it is."""
LEAST_GAIN = 0.1
"""The least part of a correction that is taken for the next one, however fast they fall."""
EXTRAPOLATED = 0.5
"""Part of what the oldest rules still do to an extrapolation that is taken for the next correction at the most."""
TOGETHER = 5.0
"""Factor on the product of two parameters' relative corrections, which is their common one."""
MOST_NODES = 400
"""Spectra at which the average gives up."""
MOST_HALVINGS = 8


class Node(NamedTuple):
    """One spectrum of an average; both of one number for each independent parameter.

    Attributes
    ----------
    at : tuple of float
        Place in standard deviations.
    left : tuple of float
        Share of the variance that is left to widths of first order.
    """

    at: tuple[float, ...]
    left: tuple[float, ...]


Mixture = Mapping[Node, float]
"""Nodes and their shares, which sum to 1; some may be negative."""


def independent(broadening: Broadening) -> Array:
    """Return the matrix from independent parameters to those of a broadening, shape (k, len(spread)).

    A lower triangle whose product with its transpose is the covariance (A.-L. Cholesky), for full
    correlation too; the columns of what is not linear (turns of a crystal) are left out.
    """
    covariance = broadening.covariance
    out = np.zeros((len(covariance), len(broadening.spread)))
    for j in range(len(broadening.spread)):
        column = covariance[j:, j] - out[j:, :j] @ out[j, :j]
        if column[0] > 1e-12:
            out[j:, j] = column / math.sqrt(column[0])
    return out


def axes(broadening: Broadening) -> Array:
    """Return the columns of `independent` that are averaged over where need be, D and E, shape (k, axes).

    Spreads of g and A are narrow beside g and A, as a rule, and their widths good to a few 1e-3.
    """
    chosen = [name in AVERAGED for name in broadening.spread]
    return independent(broadening)[:, np.array(chosen, dtype=bool)]


def moved(system: System, broadening: Broadening, node: Node) -> tuple[System, Broadening]:
    """Return a system at a node of its distribution, and what is left of its broadening there."""
    matrix = axes(broadening)
    shift = matrix @ np.array(node.at) / FWHM_PER_SIGMA
    h0 = system.h0 + np.tensordot(shift, broadening.h0, 1)
    zeeman = system.zeeman + np.tensordot(shift, broadening.zeeman, 1)
    covariance = broadening.covariance + (matrix * (np.array(node.left) - 1.0)) @ matrix.T
    return replace(system, h0=h0, zeeman=zeeman), replace(broadening, covariance=covariance)


def expanded(
    every: Sequence[System], widths: Sequence[Broadening | None], mixture: Mixture
) -> tuple[tuple[System, ...], tuple[Broadening | None, ...]]:
    """Return the systems of all nodes, their weights times the nodes' shares, and their broadenings."""
    if not mixture:
        return tuple(every), tuple(widths)
    pairs = [
        (replace(there, weight=system.weight * share), left)
        for node, share in mixture.items()
        for system, own in zip(every, widths, strict=True)
        for there, left in [moved(system, own, node)]
    ]
    return tuple(a for a, _ in pairs), tuple(b for _, b in pairs)


# Lines over which rules are measured: their middle is the resonance, their unit its standard deviation.
_FIELD = np.linspace(-7.0, 7.0, 281)


def _slope(at: Array, variance: float) -> Array:
    """Return the derivative of Gaussians about `at`, shape (n, fields)."""
    y = _FIELD - at[:, None]
    return -y * np.exp(-0.5 * y * y / variance) / (math.sqrt(2 * math.pi) * variance**1.5)


def _even(count: int, step: float, variance: float) -> tuple[Array, Array]:
    at = (np.arange(count) - 0.5 * (count - 1)) * step
    shares = np.exp(-0.5 * at * at / (1.0 - variance))
    return at, shares / shares.sum()


@lru_cache(maxsize=64)
def narrower(halvings: int, error: float) -> tuple[tuple[float, float], ...]:
    """Return (place, share) of the fewest evenly spaced Gaussians of variance 2**-halvings that sum to one of 1.

    Parameters
    ----------
    error : float
        By which the derivative may miss, relative to its top.
    """
    if halvings == 0:
        return ((0.0, 1.0),)
    variance = 0.5**halvings
    whole = _slope(np.zeros(1), 1.0)[0]

    def miss(step: float, count: int) -> float:
        at, shares = _even(count, step, variance)
        return float(np.abs(shares @ _slope(at, variance) - whole).max() / whole.max())

    count = 3
    while True:
        best = minimize_scalar(miss, bounds=(0.5 * variance**0.5, 3.0 * variance**0.5), args=(count,), method="bounded")
        if best.fun <= error:
            return tuple((float(x), float(w)) for x, w in zip(*_even(count, best.x, variance), strict=True))
        count += 1


@lru_cache(maxsize=64)
def _extrapolated(halvings: int, error: float) -> tuple[tuple[tuple[float, float], float], ...]:
    """Return ((place, variance), share) of the rules up to one, extrapolated to no variance."""
    variances = 0.5 ** np.arange(halvings + 1)
    out = []
    for k, variance in enumerate(variances):
        others = np.delete(variances, k)
        factor = float(np.prod(others / (others - variance)))
        out += [((x, float(variance)), factor * share) for x, share in narrower(k, error)]
    return tuple(out)


def _change(level: int, error: float) -> dict[tuple[float, float], float]:
    """Return a rule less the one before it."""
    out = dict(_extrapolated(level, error))
    if level:
        for place, share in _extrapolated(level - 1, error):
            out[place] = out.get(place, 0.0) - share
    return out


def surplus(levels: Levels, error: float) -> dict[Node, float]:
    """Return what rules of these levels, one for each parameter, add to all of lower levels."""
    out: dict[Node, float] = {}
    for several in product(*(_change(level, error).items() for level in levels)):
        node = Node(tuple(place[0] for place, _ in several), tuple(place[1] for place, _ in several))
        out[node] = out.get(node, 0.0) + math.prod(share for _, share in several)
    return out


class Averaged(NamedTuple):
    """An average over a distribution.

    Attributes
    ----------
    mixture : Mixture
    total : ndarray
        The average of the nodes' transforms.
    error : float
        Estimated, relative to the top of the spectrum.
    """

    mixture: Mixture
    total: Transform
    error: float


def averaged(
    spectrum: Callable[[Node], Transform],
    height: Callable[[Transform], float],
    first: Sequence[float],
    tolerance: float,
) -> Averaged:
    """Average over the distribution until the spectrum changes by less than the tolerance.

    Parameters
    ----------
    spectrum : callable
        Transform of a node's spectrum; asked for once for each node.
    height : callable
        Largest value of a transform's spectrum in the window.
    first : sequence of float
        Estimated errors of the first order, one for each independent parameter, relative to the top.
    tolerance : float
    """
    exact = EXACT * tolerance
    origin: Levels = (0,) * len(first)
    known: dict[Node, Transform] = {}

    def add(levels: Levels) -> Transform:
        mixture = surplus(levels, exact)
        for node in mixture:
            if node not in known:
                known[node] = spectrum(node)
        for node, share in mixture.items():
            shares[node] = shares.get(node, 0.0) + share
        return _sum(mixture, known)

    shares: dict[Node, float] = {}
    total = add(origin)
    sizes = {origin: 1.0}
    gained: dict[Levels, float] = {}
    while True:
        expected = {levels: _expected(levels, sizes, gained, first) for levels in _next(sizes)}
        if not expected:
            error = sizes[max(sizes)]
            break
        error = sum(expected.values())
        if error <= ENOUGH * tolerance:
            break
        chosen = max(expected, key=lambda levels: (expected[levels], levels))
        new = sum(node not in known for node in surplus(chosen, exact))
        if len(known) + new > MOST_NODES:
            break
        change = add(chosen)
        total = total + change
        top = max(height(total), 1e-300)
        sizes[chosen] = height(change) / top
        if sum(level > 0 for level in chosen) == 1:
            gained[chosen] = height(_sum(_old_rules(chosen, exact), known)) / top
    mixture = {node: share for node, share in shares.items() if abs(share) > 1e-12}
    return Averaged(mixture, total, error)


def _sum(mixture: Mixture, known: Mapping[Node, Transform]) -> Transform:
    return sum(share * known[node] for node, share in mixture.items())


def _old_rules(levels: Levels, error: float) -> Mixture:
    """Return what rules before the last two do to the extrapolation of one parameter's, or the first to two."""
    axis, level = int(np.argmax(levels)), max(levels)
    rest = dict(_extrapolated(level, error))
    last = 0.5 ** np.arange(level + 1)[-2:]
    pair = (0.0, 1.0) if level == 1 else (-last[1] / (last[0] - last[1]), last[0] / (last[0] - last[1]))
    for variance, factor, number in zip(last, pair, (level - 1, level), strict=True):
        for x, share in narrower(number, error):
            place = x, float(variance)
            rest[place] = rest.get(place, 0.0) - factor * share
    count = len(levels)
    return {
        Node(tuple(x * (k == axis) for k in range(count)), tuple(s if k == axis else 1.0 for k in range(count))): share
        for (x, s), share in rest.items()
        if abs(share) > 1e-12
    }


def _next(sizes: Mapping[Levels, float]) -> Iterator[Levels]:
    """Yield levels that are not known while all the lower ones are."""
    ahead = {tuple(np.add(levels, one)) for levels in sizes for one in np.eye(len(levels), dtype=int)}
    for levels in sorted(tuple(map(int, one)) for one in ahead - set(sizes)):
        if max(levels) <= MOST_HALVINGS and all(lower in sizes for lower, _ in _lower(levels)):
            yield levels


def _lower(levels: Levels) -> Iterator[tuple[Levels, int]]:
    for axis, level in enumerate(levels):
        if level:
            yield (*levels[:axis], level - 1, *levels[axis + 1 :]), axis


def _expected(
    levels: Levels, sizes: Mapping[Levels, float], gained: Mapping[Levels, float], first: Sequence[float]
) -> float:
    """Return how large the change by a rule of these levels will be, by those before it."""
    spread = [axis for axis, level in enumerate(levels) if level]
    if len(spread) == 1:
        axis, level = spread[0], levels[spread[0]]
        if level == 1:
            return first[axis]

        def alone(of: int) -> float:
            return sizes[(*levels[:axis], of, *levels[axis + 1 :])]

        left = gained[(*levels[:axis], level - 1, *levels[axis + 1 :])]
        if level == 2:
            return left
        gain = alone(level - 1) / max(alone(level - 2), 1e-300)
        return min(EXTRAPOLATED * left, alone(level - 1) * min(1.0, max(LEAST_GAIN, gain)))
    single = [sizes[(*(0,) * axis, levels[axis], *(0,) * (len(levels) - axis - 1))] for axis in spread]
    together = TOGETHER ** (len(spread) - 1) * math.prod(single)
    before = [sizes[lower] for lower, _ in _lower(levels) if sum(level > 0 for level in lower) == len(spread)]
    return reduce(min, before, together)
