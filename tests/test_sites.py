"""Rotations of the point groups: orders, closure and the settings of the axes."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from spinfit.errors import InputError
from spinfit.sites import LAUE_CLASSES, POINT_GROUPS, laue_class, operations

# Orders of the pure rotation groups, with how many turns of each order (identity left out), and the
# point groups of the Laue class: International Tables for Crystallography A, chapter 10.1 (from memory).
TABLE = {
    "1": (1, {}, "1 -1"),
    "2": (2, {2: 1}, "2 m 2/m"),
    "222": (4, {2: 3}, "222 mm2 mmm"),
    "4": (4, {2: 1, 4: 2}, "4 -4 4/m"),
    "422": (8, {2: 5, 4: 2}, "422 4mm -42m 4/mmm"),
    "3": (3, {3: 2}, "3 -3"),
    "32": (6, {2: 3, 3: 2}, "32 3m -3m"),
    "6": (6, {2: 1, 3: 2, 6: 2}, "6 -6 6/m"),
    "622": (12, {2: 7, 3: 2, 6: 2}, "622 6mm -6m2 6/mmm"),
    "23": (12, {2: 3, 3: 8}, "23 m-3"),
    "432": (24, {2: 9, 3: 8, 4: 6}, "432 -43m m-3m"),
}


def orders(rotations: np.ndarray) -> dict[int, int]:
    """Count the turns by their order, the identity left out."""
    angles = Rotation.from_matrix(rotations[1:]).magnitude()
    found = np.rint(2 * np.pi / angles).astype(int)
    return {int(k): int(n) for k, n in zip(*np.unique(found, return_counts=True), strict=True)} if len(found) else {}


@pytest.mark.parametrize("laue", TABLE)
def test_group_orders_and_turns(laue: str) -> None:
    count, turns, members = TABLE[laue]
    for symbol in members.split():
        rotations = operations(symbol)
        assert laue_class(symbol) == laue
        assert rotations.shape == (count, 3, 3)
        # turns of order 3 and 4 by two thirds or three quarters have the same order as by one
        assert orders(rotations) == turns


@pytest.mark.parametrize("laue", TABLE)
def test_operations_are_a_group_of_proper_rotations(laue: str) -> None:
    rotations = operations(laue)
    np.testing.assert_array_equal(rotations[0], np.eye(3))
    np.testing.assert_allclose(np.linalg.det(rotations), 1, atol=1e-12)
    np.testing.assert_allclose(
        rotations @ rotations.transpose(0, 2, 1), np.broadcast_to(np.eye(3), rotations.shape), atol=1e-12
    )
    for a, b in itertools.product(rotations, repeat=2):
        assert (np.abs(a @ b - rotations).max(axis=(1, 2)) < 1e-12).sum() == 1


def test_the_32_point_groups_fall_into_11_classes() -> None:
    assert len(LAUE_CLASSES) == 11
    assert len(set(POINT_GROUPS)) == len(POINT_GROUPS) == 32


@pytest.mark.parametrize(
    ("symbol", "axis", "order"),
    [
        ("2/m", (0, 1, 0), 2),  # unique axis b along y
        ("-4", (0, 0, 1), 4),
        ("-3", (0, 0, 1), 3),
        ("3m", (1, 0, 0), 2),  # a mirror normal to a leaves a twofold axis along a
        ("-3m", (1, 0, 0), 2),
        ("-3m", (np.cos(2 * np.pi / 3), np.sin(2 * np.pi / 3), 0), 2),  # along b as well
        ("6/m", (0, 0, 1), 6),
        ("622", (np.cos(np.pi / 6), np.sin(np.pi / 6), 0), 2),
        ("4/mmm", (1, 1, 0), 2),
        ("m-3", (1, 1, 1), 3),
        ("-43m", (0, 0, 1), 4),
    ],
)
def test_settings(symbol: str, axis: tuple[float, float, float], order: int) -> None:
    turn = Rotation.from_rotvec(2 * np.pi / order * np.array(axis) / np.linalg.norm(axis)).as_matrix()
    assert (np.abs(operations(symbol) - turn).max(axis=(1, 2)) < 1e-12).any()


@pytest.mark.parametrize(
    ("symbol", "axis", "order"), [("-3m", (0, 1, 0), 2), ("2", (0, 0, 1), 2), ("m-3", (0, 0, 1), 4)]
)
def test_settings_leave_out(symbol: str, axis: tuple[float, float, float], order: int) -> None:
    turn = Rotation.from_rotvec(2 * np.pi / order * np.array(axis, dtype=float)).as_matrix()
    assert (np.abs(operations(symbol) - turn).max(axis=(1, 2)) > 0.5).all()


# General positions hkl -> the equivalent faces, as rotations alone, International Tables A (from memory).
def test_faces_of_a_cubic_crystal() -> None:
    h, k, m = 1.0, 2.0, 3.0
    even = [p for p in itertools.permutations(range(3)) if round(np.linalg.det(np.eye(3)[list(p)])) == 1]
    faces = operations("23") @ np.array([h, k, m])
    expected = {
        tuple((np.array([h, k, m])[list(p)] * signs).tolist())
        for p in even
        for signs in itertools.product((1, -1), repeat=3)
        if np.prod(signs) == 1
    }
    assert {tuple(np.round(face, 9).tolist()) for face in faces} == expected


def test_faces_of_a_tetragonal_crystal() -> None:
    faces = operations("4/m") @ np.array([1.0, 2.0, 3.0])
    expected = {(1, 2, 3), (-1, -2, 3), (-2, 1, 3), (2, -1, 3)}
    assert {tuple(np.round(face, 9).tolist()) for face in faces} == expected


@pytest.mark.parametrize(("wrong", "near"), [("4/mm", "4/mmm"), ("m3m", "m-3m"), ("-42", "-42m")])
def test_unknown_symbols_are_refused(wrong: str, near: str) -> None:
    with pytest.raises(InputError, match="not one of the 32 point groups") as caught:
        operations(wrong)
    assert near in str(caught.value)


def test_operations_cannot_be_written_into() -> None:
    with pytest.raises(ValueError, match="read-only"):
        operations("4")[0, 0, 0] = 2
