"""How much rings gain by being drawn together, from the levels along one meridian at one field."""

from __future__ import annotations

import math
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from spinfit.branches import KnotData
from spinfit.nodes import FieldNodes
from spinfit.orientations import unstretched

Array = NDArray[np.float64]

MERIDIAN = 32
"""Points of the meridian, pole to pole, on which stretches are compared."""


@lru_cache(maxsize=8)
def _meridian(stretches: tuple[float, ...]) -> tuple[list[Array], Array, Array]:
    """Return theta for each stretch, all directions in the domain's frame, and what continues every second point.

    On a great circle a spectrum has period pi, so that Fourier series need no parity.
    """
    azimuth = 0.4  # rad; a meridian that is no symmetry plane
    s = np.pi * np.arange(MERIDIAN) / MERIDIAN
    north = s <= 0.5 * np.pi
    k = np.arange(1, MERIDIAN // 4)

    def basis(x: Array) -> Array:
        waves = 2 * np.outer(x, k)
        top = np.cos(2 * (MERIDIAN // 4) * x)[:, None]
        return np.concatenate([np.ones((len(x), 1)), np.cos(waves), np.sin(waves), top], axis=1)

    to_odd = basis(s[1::2]) @ np.linalg.inv(basis(s[::2]))
    thetas = []
    for stretch in stretches:
        folded = unstretched(np.where(north, s, np.pi - s), stretch)
        thetas.append(np.where(north, folded, np.pi - folded))
    theta = np.concatenate(thetas)
    sin = np.sin(theta)
    units = np.column_stack([sin * math.cos(azimuth), sin * math.sin(azimuth), np.cos(theta)])
    return thetas, units, to_odd


def along_meridian(
    nodes: FieldNodes, data: KnotData, rows: NDArray[np.intp], axes: Array, stretches: tuple[float, ...]
) -> tuple[list[float], int]:
    """Return for each stretch the error that every second point of a meridian makes, and the cost.

    Parameters
    ----------
    nodes : FieldNodes
    data : KnotData
        Of the nodes, at their directions.
    rows : ndarray of int
        Of the data: pairs of levels that count.
    axes : ndarray, shape (3, 3)
        Of the domain, as columns in molecular components.
    stretches : tuple of float
        See `spinfit.orientations.stretched`.
    """
    thetas, units, to_odd = _meridian(stretches)
    directions = units @ axes.T
    if not len(rows):
        return [0.0] * len(stretches), 0
    # one field in the middle tells where levels bend over the sphere
    middle = len(data.fields) // 2
    lower, upper = (side[rows] for side in data.pairs)
    energy = nodes.energies(directions, float(data.fields[middle]))
    gap = (energy[:, upper] - energy[:, lower]).T.reshape(len(rows), len(stretches), MERIDIAN)
    steep = np.abs(data.slope[rows, middle]).mean(axis=1)
    weight = np.abs(data.strength[rows, middle]).mean(axis=1) / np.maximum(steep, 1e-300)
    shift = np.abs(gap[:, :, ::2] @ to_odd.T - gap[:, :, 1::2]) / np.maximum(steep, 1e-300)[:, None, None]
    miss = np.einsum("p,pst->st", weight, np.minimum(shift / nodes.request.scale, 1.0))
    errors = []
    for angles, own in zip(thetas, miss, strict=True):
        width = np.gradient(angles)[1::2] * np.sin(angles[1::2])
        errors.append(float((own * width).sum()))
    return errors, len(directions)
