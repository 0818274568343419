"""Parts of a recorded field axis (up, down, interrupted), and glitches of the signal along it.

Both work in the order in which the points were taken, for that is the order in which things go wrong.
The criteria are our own; their limits stand beside them.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view
from numpy.typing import NDArray
from scipy import ndimage

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

_SPIKE = 8.0  # noise levels; one point
_PAIR = 15.0  # noise levels; two points in a row
_SPIKE_RATIO = 4.0  # times the range of six neighbours; a Gaussian line of 2 points FWHM reaches 2
_PAIR_RATIO = 6.0  # times the range of six neighbours; a Gaussian line of 2 points FWHM reaches 4
_LONE = 6.0  # noise levels outside what the other sweep saw near that field
_LONE_RATIO = 3.0  # and that many times the height of what it saw there
_SEEN = 4.0  # noise levels; lower is noise, not something that the other sweep saw
_FOREIGN = 10.0  # times the difference of two other runs
_LONE_MOST = 0.02  # share of points; more are no glitches, the sweeps differ


@dataclass(frozen=True)
class Run:
    """Points `start` to `stop` (not included) of a file, all with the field going one way."""

    start: int
    stop: int
    direction: str  # "up", "down"

    @property
    def part(self) -> slice:
        return slice(self.start, self.stop)


def _turning_points(field: Floats, least: float) -> list[int]:
    """Return the indices where the field turns by at least `least`; less is jitter of the reading."""
    # Only local extremes can be turning points: among very many points, a few.
    step = np.sign(np.diff(field))
    moving = np.flatnonzero(step)
    flips = moving[1:][step[moving[1:]] != step[moving[:-1]]]
    turns, low, high, way = [0], 0, 0, 0
    for i in [*flips.tolist(), len(field) - 1]:
        if way >= 0 and field[i] > field[high]:
            high = i
        if way <= 0 and field[i] < field[low]:
            low = i
        if way >= 0 and field[high] - field[i] >= least:
            turns += [high] if way else []  # the first way taken is no turn
            way, low = -1, i
        elif way <= 0 and field[i] - field[low] >= least:
            turns += [low] if way else []
            way, high = 1, i
    return [*turns, len(field)]


def find_runs(field: Floats) -> tuple[list[Run], Bools]:
    """Split a recorded field axis where it turns or jumps.

    Parameters
    ----------
    field : ndarray, shape (n,)
        In the order of recording.

    Returns
    -------
    runs : list of Run
        Empty when the points stand in no order at all.
    stray : ndarray of bool, shape (n,)
        Single readings (at most two) between jumps: the field cannot have been there.
    """
    n = len(field)
    stray = np.zeros(n, dtype=bool)
    steps = np.diff(field)
    span = float(np.ptp(field))
    if n < 3 or span == 0 or (steps >= 0).all() or (steps <= 0).all():
        return [Run(0, n, "down" if n > 1 and field[-1] < field[0] else "up")], stray
    moving = np.abs(steps[steps != 0])
    median = float(np.median(moving))
    jumps = np.flatnonzero(np.abs(steps) > max(50 * median, 0.03 * span)) + 1
    edges = [0, *jumps.tolist(), n]
    runs: list[Run] = []
    for a, b in zip(edges[:-1], edges[1:], strict=True):
        if b - a <= 2 and n > 20:
            stray[a:b] = True
            continue
        turns = _turning_points(field[a:b], max(0.02 * span, min(10 * median, 0.2 * span)))
        for c, d in zip(turns[:-1], turns[1:], strict=True):
            end = min(a + d, b - 1)
            runs.append(Run(a + c, a + d, "up" if field[end] >= field[a + c] else "down"))
    if len(runs) > max(3, n // 20) or stray.sum() > max(2, n // 20):
        return [], np.zeros(n, dtype=bool)
    return runs, stray


def noise_level(signal: Floats) -> float:
    """Return the standard deviation of white noise from second differences, by their median: lines do not matter."""
    if len(signal) < 4:
        return 0.0
    second = signal[1:-1] - 0.5 * (signal[:-2] + signal[2:])
    return float(1.4826 * np.median(np.abs(second)) / np.sqrt(1.5))


def _quantum(signal: Floats) -> float:
    """Return the smallest step between different values: the digitiser's, when the file is coarse."""
    steps = np.diff(np.unique(signal))
    return float(steps.min()) if len(steps) else 0.0


def find_spikes(signal: Floats) -> Bools:
    """Find single points, and pairs of points, that stand far off their neighbours.

    A point is a spike when it differs from the median of its three neighbours on either side by more than 8 noise
    levels and 4 times the range of these neighbours; a pair when both its points do by 15 and 6.  Steps never pass
    (the range holds the step), and lines of 2 points full width or more never do, whatever their height.

    Parameters
    ----------
    signal : ndarray, shape (n,)
        One run, in order.

    Returns
    -------
    ndarray of bool, shape (n,)
    """
    n = len(signal)
    bad = np.zeros(n, dtype=bool)
    if n < 12:
        return bad
    floor = max(noise_level(signal), _quantum(signal))
    for m, least, ratio in ((1, _SPIKE, _SPIKE_RATIO), (2, _PAIR, _PAIR_RATIO)):
        window = sliding_window_view(signal, 6 + m)
        around = np.sort(np.concatenate([window[:, :3], window[:, 3 + m :]], axis=1), axis=1)
        off = window[:, 3 : 3 + m] - 0.5 * (around[:, 2] + around[:, 3])[:, None]  # from their median
        limit = np.maximum(least * floor, ratio * (around[:, -1] - around[:, 0]))
        found = (np.abs(off).min(axis=1) > limit) & (np.abs(off.sum(axis=1)) >= np.abs(off).max(axis=1))
        for k in range(m):
            bad[3 + k : 3 + k + len(found)] |= found
    return bad


def _common_grid(a: tuple[Floats, Floats], b: tuple[Floats, Floats]) -> tuple[Floats, Floats, Floats] | None:
    """Put two sweeps on one even grid where they overlap; None when they hardly do."""
    low, high = max(a[0][0], b[0][0]), min(a[0][-1], b[0][-1])
    n = min(len(a[0]), len(b[0]), 8192)
    if n < 50 or high - low < 0.2 * (a[0][-1] - a[0][0]):
        return None
    grid = np.linspace(low, high, n)
    return grid, np.interp(grid, *a), np.interp(grid, *b)


def lag(a: tuple[Floats, Floats], b: tuple[Floats, Floats]) -> float | None:
    """Return by how much lines of sweep `b` stand at higher field than those of sweep `a`, mT.

    The largest cross-correlation within 2 % of the common range, refined by a parabola; None when the sweeps do not
    resemble each other (correlation below 0.5) or hardly overlap.
    """
    common = _common_grid(a, b)
    if common is None:
        return None
    grid, ya, yb = common
    ya, yb = ya - ya.mean(), yb - yb.mean()
    size = float(np.sqrt((ya @ ya) * (yb @ yb)))
    most = max(3, len(grid) // 50)
    length = 2 * len(grid)
    product = np.fft.irfft(np.conj(np.fft.rfft(ya, length)) * np.fft.rfft(yb, length), length)
    near = np.concatenate([product[-most:], product[: most + 1]])
    k = int(np.argmax(near))
    if size == 0 or near[k] < 0.5 * size or k in (0, 2 * most):
        return None
    left, mid, right = near[k - 1 : k + 2]
    curve = left - 2 * mid + right
    fine = 0.5 * (left - right) / curve if curve < 0 else 0.0
    return float((k - most + fine) * (grid[1] - grid[0]))


def find_unrepeated(a: tuple[Floats, Floats], b: tuple[Floats, Floats]) -> Bools:
    """Find what sweep `a` shows and sweep `b` over the same fields does not.

    The two are aligned by `lag` and brought to one baseline (medians in 20 windows).  A point of `a` is alone when it
    lies outside the range of `b` near its field by more than 6 noise levels and 3 times the height over the baseline
    that `b` has there (below 4 noise levels it has none); points beside it that are outside by 3 noise levels go with
    it.  A line that is in both is never alone, however narrow, nor one that lost up to three quarters of its height.

    Parameters
    ----------
    a, b : (field, signal), each shape (n,)
        Field increasing.

    Returns
    -------
    ndarray of bool, shape of `a`
        All False when more than 2 % would be: then the sweeps differ by more than glitches.
    """
    field, signal = a
    none = np.zeros(len(field), dtype=bool)
    inside = (field >= b[0][0]) & (field <= b[0][-1])
    if len(b[0]) < 50 or inside.sum() < 50:
        return none
    shift = lag(a, b) or 0.0
    step = float(np.ptp(field[inside])) / inside.sum()
    if step == 0:
        return none
    reach = 2 * int(np.ceil(max(abs(shift), 5 * step) / step)) + 1
    grid = np.linspace(field[inside][0], field[inside][-1], int(inside.sum()))
    other = np.interp(grid + shift, *b)
    parts = np.array_split(np.arange(len(grid)), 20)
    centres = [grid[p].mean() for p in parts]
    base = np.interp(grid, centres, [np.median(other[p]) for p in parts])
    difference = np.interp(grid, field, signal) - other
    drift = np.interp(grid, centres, [np.median(difference[p]) for p in parts])
    residual = difference - drift
    noise = float(1.4826 * np.median(np.abs(residual - np.median(residual))) / np.sqrt(2))
    noise = max(noise, _quantum(signal))
    other, base = other + drift, base + drift
    top, bottom = ndimage.maximum_filter1d(other, reach), ndimage.minimum_filter1d(other, reach)
    height = np.interp(field, grid, np.maximum(top - base, base - bottom))
    top, bottom = np.interp(field, grid, top), np.interp(field, grid, bottom)
    outside = np.where(inside, np.maximum(signal - top, bottom - signal), 0.0)
    height = np.where(height > _SEEN * noise, height, 0.0)
    alone = outside > np.maximum(_LONE * noise, _LONE_RATIO * height)
    labels, _ = ndimage.label(outside > 3 * noise)
    with_them = np.isin(labels, np.unique(labels[alone & (labels > 0)]))
    alone = alone | with_them
    return alone if alone.mean() <= _LONE_MOST else none


def _apart(a: tuple[Floats, Floats], b: tuple[Floats, Floats]) -> float | None:
    """Return the median difference of two sweeps where they overlap, a constant offset aside; None when they do not."""
    low, high = max(a[0][0], b[0][0]), min(a[0][-1], b[0][-1])
    inside = (a[0] >= low) & (a[0] <= high)
    if high <= low or inside.sum() < 50:
        return None
    difference = a[1][inside] - np.interp(a[0][inside], *b)
    return float(np.median(np.abs(difference - np.median(difference))))


def find_foreign(sweeps: list[tuple[Floats, Floats]]) -> list[int]:
    """Find runs that two others, which agree with each other, contradict: an aborted start, a cable pulled.

    Parameters
    ----------
    sweeps : list of (field, signal)
        Each with its field increasing.

    Returns
    -------
    list of int
        Positions in `sweeps`.
    """
    n = len(sweeps)
    apart = {(i, j): _apart(sweeps[i], sweeps[j]) for i in range(n) for j in range(n) if i != j} if n <= 50 else {}
    found = []
    for i in range(n):
        mine = {j: apart[i, j] for j in range(n) if (i, j) in apart and apart[i, j] is not None}
        theirs = [apart[j, k] for j in mine for k in mine if j != k and apart[j, k] is not None]
        if len(mine) >= 2 and theirs and min(mine.values()) > _FOREIGN * max(min(theirs), noise_level(sweeps[i][1])):
            found.append(i)
    return found
