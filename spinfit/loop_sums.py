"""The two sums over a mesh that make the spectrum of one pair of levels whose resonances come and go.

The spectrum is the integral over the sphere of strength x delta(gap), and a smoothed delta function
has no singularity: at a fixed field the sum over a mesh of strength x K(gap / h) / h converges
quickly once the kernel's width h is about the difference of the gap between neighbouring directions.
Where resonances are steep along the field, h is narrow in field, and there it is cheaper to solve for
the field and smear that.  A smooth share divides every (direction, field) between the two sums; both
smear by the same kernel of sixth order, and both leave turning points, where neighbours agree, sharp.

Where resonances have widths of their own, the kernel in frequency is broadened by them, which is
right at folds too, and everything is summed in frequency: a share must not change within a width.

Both sums exist twice: here in numpy, and compiled in `spinfit.loop_kernels`.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from spinfit import hermite, kernels, loop_kernels
from spinfit.branches import Request, parabola, stencil
from spinfit.landscape import TAPS, Landscape
from spinfit.resonance import SAFETY, ZERO_FIELD, can_reach
from spinfit.sheets import SMEAR_RATIO, Histograms, point_share

Array = NDArray[np.float64]
Index = NDArray[np.intp]

STEP = 1.0
"""Distance of the fields at which the sum in frequency is taken, in line widths, at the default tolerance.

That sum is smooth over several line widths: everything sharper is in the other one.
"""
STEP_OF_ALL = 0.5
"""The same where everything is summed in frequency."""
KERNEL_REACH = 5.0
"""Where the kernel is cut, in units of its width, at the default tolerance."""
FOLD = 60.0
"""How many times farther than its smear from a fold a resonance lies before it is solved for."""
OVER_POINTS = ("gap", "slope", "strength", "bend", "along", "around", "own")
"""What a `Landscape` has at every point of its mesh."""
FIELDS, BLOCK = 20, 6000
"""Numbers of fields and of points handled at a time, so that they stay in the processor's cache."""


def kernel(u: Array, part: Array | float = 1.0) -> Array:
    """Return the kernel of unit area whose second and fourth moments vanish, see `sheets.smear_kernel`.

    Where only a part of its variance is the kernel's own, and the rest is a Gaussian's that it is
    convolved with, these moments are the Gaussian's.
    """
    square = u * u
    shape = 1.0 + part * (0.5 * (1.0 - square) + 0.125 * part * (square * (square - 6.0) + 3.0))
    return np.exp(-0.5 * square) * shape * (1 / math.sqrt(2 * math.pi))


def kernel_reach(request: Request) -> float:
    """Return where the kernel is cut, in units of its width: where it is a tenth of the tolerance, or little more."""
    return KERNEL_REACH - max(0.0, 0.8 * math.log10(request.tolerance / 1e-3))


def reach(land: Landscape, thetas: int, finer: tuple[float, float], request: Request) -> Array:
    """Return the share of the meridian, first and last, in which each leaf can be resonant, shape (l, 2).

    Parameters
    ----------
    land : Landscape
        On a mesh of few rows.
    thetas : int
        Intervals of its rows.
    finer : (float, float)
        How many times closer along theta and phi points of the coarsest mesh lie that is to be summed.
    """
    step, coarser = field_step(land, request, finer), max(1.0, 1 / min(finer))
    out = np.tile(np.array([1.0, 0.0]), (len(land.leaves), 1))
    for number, leaf in enumerate(land.leaves):
        half = 0.5 * (land.fields[leaf[2]] - land.fields[leaf[0]])
        low, high = _hull(land.gap[leaf], land.slope[leaf] * half)
        widest = request.grain.smear * coarser * _apart_at_most(land, leaf, request, step)
        if land.broad:
            more = land.own[leaf] + (request.grain.smear * step * land.slope[leaf]) ** 2
            widest = np.sqrt(widest**2 + more.max(axis=0))
        margin = 1.2 * kernel_reach(request) * widest + 0.5 * (high - low)
        rows = np.flatnonzero(((low <= margin) & (high >= -margin)).reshape(-1, land.azimuths).any(axis=1))
        if len(rows):
            out[number] = max(0, rows[0] - 1) / thetas, min(thetas, rows[-1] + 1) / thetas
    return out


def _hull(f: Array, g: Array) -> tuple[Array, Array]:
    """Return least and largest of a leaf's gaps and of what their slopes, times half the leaf, lead to."""
    hull = np.stack([*f, f[0] + g[0] / 3, f[1] - g[1] / 3, f[1] + g[1] / 3, f[2] - g[2] / 3])
    return hull.min(axis=0), hull.max(axis=0)


def _apart_at_most(land: Landscape, leaf: Index, request: Request, step: float) -> Array:
    bend = np.abs(land.bend[leaf])
    return _apart(land.along[leaf], land.around[leaf], bend, request, step).max(axis=0)


def add_looping(histograms: Histograms, lands: Iterable[Landscape], request: Request, step: float) -> int:
    """Add one pair of levels; return the number of points used.

    Parameters
    ----------
    lands : iterable of Landscape
        Parts of one mesh.
    step : float
        Distance of the fields of the sum in frequency, mT (`field_step`).
    """
    first = 0.0 if request.low <= ZERO_FIELD else request.low  # the spectrum is even in B: half a step off zero
    fields = first + step * (0.5 + np.arange(max(1, math.ceil((request.high - first) / step))))
    density = np.zeros(len(fields))
    in_frequency, in_field = _COMPILED if kernels.COMPILED else (in_frequency_numpy, in_field_numpy)
    used = 0
    for land in lands:
        used += in_frequency(density, fields, land, request, step)
        if not land.broad:
            used += in_field(histograms, land, request, step)
    some = density != 0
    # hides the grain of the fields themselves
    smear = np.full(int(some.sum()), request.grain.smear * step)
    histograms.smeared(fields[some], density[some], smear)
    return used


def _in_frequency_compiled(density: Array, fields: Array, land: Landscape, request: Request, step: float) -> int:
    return loop_kernels.in_frequency(
        density,
        fields,
        land.fields,
        land.leaves,
        land.gap,
        land.slope,
        land.strength,
        land.bend,
        land.along,
        land.around,
        land.own,
        land.weights,
        land.points,
        step,
        (request.grain.far, request.grain.smear, FOLD),
        kernel_reach(request),
        TAPS,
    )


def _in_field_compiled(histograms: Histograms, land: Landscape, request: Request, step: float) -> int:
    grid = histograms.grid
    return loop_kernels.in_field(
        histograms.plain,
        grid.start,
        grid.step,
        float(histograms.sizes[0]),
        SMEAR_RATIO,
        land.fields,
        land.leaves,
        land.gap,
        land.slope,
        land.strength,
        land.bend,
        land.along,
        land.around,
        land.weights,
        land.points,
        step,
        (request.grain.far, request.grain.smear, FOLD),
        request.grain.close,
        SAFETY,
        TAPS,
    )


_COMPILED = _in_frequency_compiled, _in_field_compiled


def in_frequency_numpy(density: Array, fields: Array, land: Landscape, request: Request, step: float) -> int:
    """Add the flat resonances' share of the intensity at each field; return the number of points summed.

    Parameters
    ----------
    density : ndarray, shape (q,)
        Added to, in place.
    fields : ndarray, shape (q,)
        In steps of `step`, mT.
    """
    used = 0
    for leaf, points in zip(land.leaves, land.points, strict=True):
        if points[0] == points[1]:
            continue
        seen = replace(land, **{name: getattr(land, name)[:, slice(*points)] for name in OVER_POINTS})
        ends = land.fields[leaf]
        here = slice(*np.searchsorted(fields, [ends[0], ends[2]]))
        if here.start == here.stop:
            continue
        half = 0.5 * (ends[2] - ends[0])
        f, g = seen.gap[leaf], seen.slope[leaf] * half
        bend = np.abs(seen.bend[leaf])
        apart = _apart_at_most(seen, leaf, request, step)
        widest = request.grain.smear * apart
        flat = np.ones(len(apart), dtype=bool)
        if land.broad:
            more = seen.own[leaf] + (request.grain.smear * step * seen.slope[leaf]) ** 2
            widest = np.sqrt(widest**2 + more.max(axis=0))
        else:
            steep = np.minimum(np.abs(seen.slope[leaf]), np.abs(g + g[[1, 2, 0]]) / (2 * half)).min(axis=0)
            flat = nearness(apart, steep, bend.max(axis=0), request) > 0.25
        low, high = _hull(f, g)
        widest = 1.2 * kernel_reach(request) * widest
        margin = widest + 0.25 * (high - low)
        at = np.flatnonzero((low <= margin) & (high >= -margin) & flat)
        c, widest = hermite.quintic(f[:, at], g[:, at]), widest[at]
        # a few fields at a time: few of the points are near resonance at all of them
        for start in range(here.start, here.stop, FIELDS):
            some = slice(start, min(start + FIELDS, here.stop))
            t = (fields[some] - ends[1]) / half
            gap = (t[:, None] ** np.arange(6)) @ c
            near = np.flatnonzero((np.abs(gap) < widest).any(axis=0))
            used += len(near)
            for first in range(0, len(near), BLOCK):
                part = near[first : first + BLOCK]
                slope = np.abs((t[:, None] ** np.arange(5) * (np.arange(1, 6) / half)) @ c[1:, part])
                where = points[0] + at[part]
                density[some] += step * _density(
                    land, leaf, fields[some], where, gap[:, part], slope, request, step
                )
    return used


def _density(
    land: Landscape, leaf: Index, fields: Array, at: Index, gap: Array, slope: Array, request: Request, step: float
) -> Array:
    """Return the sum over points `at` of strength x kernel at each field, from gap and slope there."""
    indices, basis = stencil(land.fields, np.full(len(fields), leaf[1]), fields, TAPS)
    nodes = indices[:, :1], at
    strength = basis.T @ land.strength[nodes]
    t = 2 * (fields[:, None] - land.fields[leaf[1]]) / (land.fields[leaf[2]] - land.fields[leaf[0]])
    bend, *steps = (parabola(v[leaf][:, None, at], t) for v in (land.bend, land.along, land.around))
    bend = np.abs(bend)
    apart = _apart(*steps, bend, request, step)
    square = whole = (request.grain.smear * apart) ** 2
    if land.broad:
        square = square + (request.grain.smear * step * slope) ** 2
        whole = square + np.maximum(basis.T @ land.own[nodes], 0.0)
    some = np.flatnonzero(gap * gap < kernel_reach(request) ** 2 * whole)
    apart, slope, bend, gap, square, whole, strength = (
        v.ravel()[some] for v in (apart, slope, bend, gap, square, whole, strength)
    )
    rest = 1.0 if land.broad else 1 - point_share(nearness(apart, slope, bend, request), 1.0)
    width = np.sqrt(whole)
    part = strength * rest * kernel(gap / width, square / whole) / width * land.weights[at][some % len(at)]
    return np.bincount(some // len(at), weights=part, minlength=len(fields))


def field_step(land: Landscape, request: Request, finer: tuple[float, float] = (1.0, 1.0)) -> float:
    """Return the distance of the fields at which the sum in frequency is taken, mT.

    Short beside the line, and so short that at most folds a natural smear is as long.

    Parameters
    ----------
    finer : (float, float)
        How many times closer along theta and phi the points of the mesh lie that it is for.
    """
    longest = (
        (STEP_OF_ALL if land.broad else STEP) * request.scale * min(2.0, max(1.0, (request.tolerance / 1e-3) ** 0.3))
    )
    some = slice(None, None, 1 + land.gap.shape[1] // 2000)
    gap, slope, bend = (np.abs(v[:, some]) for v in (land.gap, land.slope, land.bend))
    width = request.grain.smear * np.hypot(land.along[:, some] / finer[0], land.around[:, some] / finer[1])
    near = (gap <= 4 * width + 0.5 * slope * np.gradient(land.fields)[:, None]) & (width + bend > 0)
    if not near.any():
        return longest
    typical = np.quantile(width[near] / np.maximum(bend[near], 1e-12), 0.1)
    return max(0.02 * request.scale, min(longest, math.sqrt(typical / FOLD) / 0.9))


def _apart(along: Array, around: Array, bend: Array, request: Request, step: float) -> Array:
    """Return how far apart neighbours are in frequency, MHz, and no less than a step of the fields resolves.

    A share near a fold ends where the smear is 1/FOLD of the distance; it must be as long as a step there.
    """
    least = bend * (FOLD * (0.9 * step) ** 2 / request.grain.smear)
    return np.sqrt(along * along + around * around + least * least + loop_kernels.TINY)


def nearness(apart: Array, slope: Array, bend: Array, request: Request) -> Array:
    """Return how badly a resonance can be solved for, 1 where it must not be: flat, or near a fold along the field.

    A fold lies about slope/bend away, and a smear must be short beside that.
    """
    grain = request.grain
    return np.sqrt((apart / grain.far) ** 2 + FOLD * grain.smear * apart * bend) / np.maximum(slope, 1e-9)


def in_field_numpy(histograms: Histograms, land: Landscape, request: Request, step: float) -> int:
    """Add the steep resonances' share; return their number."""
    used = 0
    grain = request.grain
    for leaf, points in zip(land.leaves, land.points, strict=True):
        if points[0] == points[1]:
            continue
        seen = slice(*points)
        ends = land.fields[leaf]
        half = 0.5 * (ends[2] - ends[0])
        f, g = land.gap[leaf, seen], land.slope[leaf, seen] * half
        near = can_reach(f[0], f[1], g[0], g[1]) | can_reach(f[1], f[2], g[1], g[2])
        steep = np.maximum(np.abs(g).max(axis=0), np.abs(np.diff(f, axis=0)).max(axis=0)) / half
        apart = np.hypot(land.along[leaf, seen], land.around[leaf, seen]).min(axis=0)
        at = np.flatnonzero(near & (apart < 1.5 * grain.far * steep))
        if not len(at):
            continue
        c = hermite.quintic(f[:, at], g[:, at])
        q, low, high = hermite.brackets(c, f[:, at])
        c, point = c[:, q], points[0] + at[q]
        t = hermite.refine(c, low, high)
        slope = np.maximum(np.abs(hermite.slope(c, t)) / half, 1e-9)
        field = ends[1] + half * t
        indices, basis = stencil(land.fields, np.full(len(field), leaf[1]), field, TAPS)
        nodes = indices, point
        strength = (basis * land.strength[nodes]).sum(axis=0)
        bend, *steps = (parabola(v[leaf][:, point], t) for v in (land.bend, land.along, land.around))
        bend = np.abs(bend)
        apart = _apart(*steps, bend, request, step)
        share = point_share(nearness(apart, slope, bend, request), 1.0)
        some = np.flatnonzero(share > 0)
        weight = (strength / slope * share * land.weights[point])[some]
        histograms.smeared(field[some], weight, grain.smear_for((apart / slope)[some]))
        used += len(some)
    return used
