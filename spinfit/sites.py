"""Symmetry-related sites of a crystal: the rotations of its point group.

The spin Hamiltonian is even under inversion (spins and fields are axial vectors), so a paramagnetic
centre and its inverse have the same spectrum.  Every operation counts as its rotation alone, the
inversion removed from the improper ones, and of the 32 point groups 11 remain, the Laue classes.

Settings, in an orthogonal crystal frame x, y, z: z along c; the unique axis b along y in monoclinic
crystals; x along a in trigonal and hexagonal ones, where the twofold axes of 32, 3m and -3m lie
along a (the settings 321, 3m1 and -3m1; for 312, 31m and -31m turn the frame by 30 degrees about z);
x, y, z along the cubic, tetragonal and orthorhombic axes.

How an operation acts: if the columns of T are the molecular axes of the first site in crystal
components, those of site k are the columns of R_k T, with R_k the operation (`operations`).
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from spinfit.errors import InputError, nearest

Array = NDArray[np.float64]

LAUE_CLASSES: dict[str, tuple[str, ...]] = {
    "1": ("1", "-1"),
    "2": ("2", "m", "2/m"),
    "222": ("222", "mm2", "mmm"),
    "4": ("4", "-4", "4/m"),
    "422": ("422", "4mm", "-42m", "4/mmm"),
    "3": ("3", "-3"),
    "32": ("32", "3m", "-3m"),
    "6": ("6", "-6", "6/m"),
    "622": ("622", "6mm", "-6m2", "6/mmm"),
    "23": ("23", "m-3"),
    "432": ("432", "-43m", "m-3m"),
}
"""The 32 point groups (short Hermann-Mauguin symbols) by the rotations they leave."""

POINT_GROUPS = tuple(symbol for members in LAUE_CLASSES.values() for symbol in members)
"""All 32 symbols."""

_X, _Y, _Z, _DIAGONAL = (1, 0, 0), (0, 1, 0), (0, 0, 1), (1, 1, 1)
_GENERATORS: dict[str, tuple[tuple[tuple[int, int, int], int], ...]] = {
    "1": (),
    "2": ((_Y, 2),),
    "222": ((_X, 2), (_Z, 2)),
    "4": ((_Z, 4),),
    "422": ((_Z, 4), (_X, 2)),
    "3": ((_Z, 3),),
    "32": ((_Z, 3), (_X, 2)),
    "6": ((_Z, 6),),
    "622": ((_Z, 6), (_X, 2)),
    "23": ((_X, 2), (_DIAGONAL, 3)),
    "432": ((_Z, 4), (_DIAGONAL, 3)),
}
"""Rotations (axis, order) that make each group."""


def _rotation(axis: tuple[int, int, int], order: int) -> Array:
    """Return the turn by 2 pi/order about an axis, right-handed, shape (3, 3)."""
    n = np.array(axis) / np.linalg.norm(axis)
    angle = 2 * np.pi / order
    cross = np.array([[0, -n[2], n[1]], [n[2], 0, -n[0]], [-n[1], n[0], 0]])
    return np.cos(angle) * np.eye(3) + np.sin(angle) * cross + (1 - np.cos(angle)) * np.outer(n, n)


def laue_class(symbol: str) -> str:
    """Return the rotations that a point group leaves, by the symbol of their group: "4" for "4/m".

    Raises
    ------
    InputError
        Not one of the 32 symbols; the nearest one is named.
    """
    plain = symbol.replace(" ", "")
    for group, members in LAUE_CLASSES.items():
        if plain in members:
            return group
    raise InputError(
        f'"{symbol}" is not one of the 32 point groups',
        f"{nearest(plain, POINT_GROUPS)} (write a short symbol such as 4/m, -3m, mmm)",
        place="point_group",
    )


def operations(symbol: str) -> Array:
    """Return the rotations of a point group, inversion removed from improper operations.

    Parameters
    ----------
    symbol : str
        Short Hermann-Mauguin symbol, "-3m".

    Returns
    -------
    ndarray, shape (k, 3, 3)
        Proper rotations in the crystal frame, the identity first; k = 1, 2, 4, 8, 3, 6, 12 or 24.
        The array is read-only.

    Raises
    ------
    InputError
        Not one of the 32 symbols; the nearest one is named.
    """
    return _group(laue_class(symbol))


@lru_cache(maxsize=len(LAUE_CLASSES))
def _group(laue: str) -> Array:
    """Multiply the generators until nothing new comes."""
    generators = [_rotation(axis, order) for axis, order in _GENERATORS[laue]]
    found = [np.eye(3)]
    for one in found:  # the list grows while it is walked
        for generator in generators:
            product = generator @ one
            if not any(np.allclose(product, other, atol=1e-9) for other in found):
                found.append(product)
    group = np.array(found)
    group[np.abs(group) < 1e-15] = 0.0
    group.setflags(write=False)
    return group
