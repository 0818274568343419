"""Moments between eigenstates: slopes of levels and intensities of transitions, for many points at once.

As in `spinfit.kernels`, the numpy function has a compiled twin, which goes along the few elements of
the Zeeman matrices that differ from zero and computes no pair of levels twice.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from spinfit.kernels import COMPILED, compiled

Array = NDArray[np.float64]
States = NDArray[np.complex128]

SLOPES, PERPENDICULAR, PARALLEL, GIVEN = range(4)
"""What the compiled moments are asked for."""


def moments_numpy(
    vectors: States, zeeman: States, directions: Array, microwave: str | Array | None
) -> tuple[Array, Array | None]:
    """Return slopes of levels, shape (m, n), and intensities of their pairs, shape (m, n, n).

    Parameters
    ----------
    vectors : ndarray, shape (m, n, n)
        Eigenvectors as columns.
    zeeman : ndarray, shape (3, n, n)
        dH/dB along the axes.
    directions : ndarray, shape (m, 3)
        Of the static field, unit vectors.
    microwave : str, ndarray of shape (m, 3), or None
        "perpendicular", "parallel", or unit vectors; None for slopes alone.
    """
    n = len(zeeman[0])
    # rows (i, a) of V+ Z_a, then times V: two matrix products a point give all three components
    side_by_side = np.ascontiguousarray(zeeman.transpose(1, 0, 2)).reshape(n, 3 * n)
    half = vectors.conj().transpose(0, 2, 1) @ side_by_side
    if microwave is None:
        along = np.einsum("miak,ma->mik", half.reshape(-1, n, 3, n), directions)
        return np.einsum("mik,mki->mi", along, vectors).real, None
    moment = (half.reshape(-1, 3 * n, n) @ vectors).reshape(-1, n, 3, n)
    parallel = np.einsum("miaj,ma->mij", moment, directions)
    slope = np.einsum("mii->mi", parallel).real.copy()
    if not isinstance(microwave, str):
        return slope, _square(np.einsum("miaj,ma->mij", moment, microwave))
    along = _square(parallel)
    return slope, along if microwave == "parallel" else 0.5 * (_square(moment).sum(axis=2) - along)


def _square(z: States) -> Array:
    return z.real**2 + z.imag**2


def _compiled_moments(vectors, zeeman, directions, waves, asked, slope, intensity):
    m, n, _ = vectors.shape
    # which elements of the three matrices differ from zero: few, where spins stand side by side
    column = np.empty(n * n, dtype=np.intp)
    start = np.zeros(n + 1, dtype=np.intp)
    filled = 0
    for a in range(n):
        for b in range(n):
            if zeeman[0, a, b] != 0 or zeeman[1, a, b] != 0 or zeeman[2, a, b] != 0:
                column[filled] = b
                filled += 1
        start[a + 1] = filled
    # real and imaginary parts apart, for the sake of vector instructions
    vr, vi, tr, ti = np.empty((n, n)), np.empty((n, n)), np.empty((n, n)), np.empty((n, n))
    mr, mi = np.empty(n), np.empty(n)
    unit = np.empty((3, 3))
    last = 1
    if asked == PERPENDICULAR:
        last = 3
    elif asked == GIVEN:
        last = 2
    share = 0.5 if asked == PERPENDICULAR else 1.0
    for p in range(m):
        for a in range(n):
            for i in range(n):
                vr[a, i] = vectors[p, a, i].real
                vi[a, i] = vectors[p, a, i].imag
        x, y, z = directions[p, 0], directions[p, 1], directions[p, 2]
        unit[0, 0], unit[0, 1], unit[0, 2] = x, y, z
        if asked == PERPENDICULAR:  # two directions normal to the field
            if abs(z) < 0.7:
                s = 1.0 / math.sqrt(x * x + y * y)
                unit[1, 0], unit[1, 1], unit[1, 2] = -y * s, x * s, 0.0
            else:
                s = 1.0 / math.sqrt(y * y + z * z)
                unit[1, 0], unit[1, 1], unit[1, 2] = 0.0, -z * s, y * s
            unit[2, 0] = y * unit[1, 2] - z * unit[1, 1]
            unit[2, 1] = z * unit[1, 0] - x * unit[1, 2]
            unit[2, 2] = x * unit[1, 1] - y * unit[1, 0]
        elif asked == GIVEN:
            unit[1, 0], unit[1, 1], unit[1, 2] = waves[p, 0], waves[p, 1], waves[p, 2]
        if asked != SLOPES:
            intensity[p] = 0.0
        for u in range(last):
            for a in range(n):
                for i in range(n):
                    tr[a, i] = 0.0
                    ti[a, i] = 0.0
                for e in range(start[a], start[a + 1]):
                    b = column[e]
                    c = unit[u, 0] * zeeman[0, a, b] + unit[u, 1] * zeeman[1, a, b] + unit[u, 2] * zeeman[2, a, b]
                    cr, ci = c.real, c.imag
                    for i in range(n):
                        tr[a, i] += cr * vr[b, i] - ci * vi[b, i]
                        ti[a, i] += cr * vi[b, i] + ci * vr[b, i]
            if u == 0:
                for i in range(n):
                    slope[p, i] = 0.0
                for a in range(n):
                    for i in range(n):
                        slope[p, i] += vr[a, i] * tr[a, i] + vi[a, i] * ti[a, i]
                if asked != PARALLEL:
                    continue
            for i in range(n):
                for j in range(i, n):
                    mr[j] = 0.0
                    mi[j] = 0.0
                for a in range(n):
                    cr, ci = vr[a, i], vi[a, i]
                    for j in range(i, n):
                        mr[j] += cr * tr[a, j] + ci * ti[a, j]
                        mi[j] += cr * ti[a, j] - ci * tr[a, j]
                for j in range(i, n):
                    intensity[p, i, j] += share * (mr[j] * mr[j] + mi[j] * mi[j])
        if asked != SLOPES:
            for i in range(n):
                for j in range(i):
                    intensity[p, i, j] = intensity[p, j, i]


_compiled_moments = compiled(_compiled_moments)


def moments(
    vectors: States, zeeman: States, directions: Array, microwave: str | Array | None
) -> tuple[Array, Array | None]:
    """Do what `moments_numpy` does, compiled where that is possible."""
    if not COMPILED:
        return moments_numpy(vectors, zeeman, directions, microwave)
    m, n = vectors.shape[:2]
    slope, intensity = np.empty((m, n)), np.empty((0, n, n) if microwave is None else (m, n, n))
    waves, asked = directions, SLOPES
    if isinstance(microwave, str):
        asked = PARALLEL if microwave == "parallel" else PERPENDICULAR
    elif microwave is not None:
        waves, asked = np.ascontiguousarray(microwave, dtype=float), GIVEN
    _compiled_moments(*(_plain(one) for one in (vectors, zeeman, directions, waves)), asked, slope, intensity)
    return slope, None if microwave is None else intensity


def _plain(array: NDArray) -> NDArray:
    """Return an array as kernels are compiled for: contiguous and writeable, lest they be compiled again."""
    return array if array.flags.carray else array.copy()
