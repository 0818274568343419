"""Levels continued over the sphere through near crossings, against diagonalisation at every direction."""

from __future__ import annotations

from functools import partial

import numpy as np
import pytest

from spinfit.branches import KnotData, Ladder
from spinfit.crossings import Crossings, Window, misses
from spinfit.orientations import Mesh, Rings

FREQUENCY = 300.0


def three_levels(field: np.ndarray, theta: np.ndarray, phi: np.ndarray, narrow: float) -> tuple[np.ndarray, ...]:
    """Return energy, slope, and strengths between all levels of a 3x3 Hamiltonian; its upper two nearly cross.

    Their diagonal elements are equal on a cone about the z axis that opens with the field.
    """
    field, theta, phi = np.broadcast_arrays(field, theta, phi)
    h = np.zeros((*theta.shape, 3, 3))
    h[..., 1, 1] = 300.0 + 200.0 * np.cos(theta) ** 2 - field
    h[..., 2, 2] = 300.0 - 100.0 * np.cos(theta) ** 2 + field + 20.0 * np.cos(2 * phi) * np.sin(theta) ** 2
    h[..., 1, 2] = h[..., 2, 1] = narrow
    energy, vectors = np.linalg.eigh(h)
    rise = np.einsum("...ai,a,...ai->...i", vectors, [0.0, -1.0, 1.0], vectors)
    # a transition moment from the lowest level to the second basis state alone
    moment = np.zeros((3, 3))
    moment[0, 1] = moment[1, 0] = 1.0
    strength = (vectors.swapaxes(-1, -2) @ moment @ vectors) ** 2
    return energy, rise, strength


def knot_data(rings: Rings, fields: np.ndarray, narrow: float) -> KnotData:
    theta, phi = rings.angles()
    energy, rise, strength = three_levels(fields[:, None], theta, phi, narrow)
    pairs = (np.array([0, 0]), np.array([1, 2]))
    gap = np.stack([energy[..., u] - energy[..., 0] - FREQUENCY for u in (1, 2)])
    slope = np.stack([rise[..., u] - rise[..., 0] for u in (1, 2)])
    strong = np.stack([strength[..., 0, u] for u in (1, 2)])

    def partner(row: int, number: int, nodes: np.ndarray) -> np.ndarray:
        both = [pairs[0][row], pairs[1][row]]
        both[number // 2] += 2 * (number % 2) - 1
        return strength[nodes][..., both[0], both[1]]

    ladder = Ladder(energy.swapaxes(1, 2), rise.swapaxes(1, 2), partner)
    leaves = np.array([[0, 1, 2]])
    return KnotData(fields, leaves, pairs, gap, slope, strong, ladder=lambda: ladder)


@pytest.mark.parametrize("kind", ["axial", "octant", "quarter", "half"])
@pytest.mark.parametrize("narrow", [2.0, 0.2])
def test_a_near_crossing_is_followed(kind: str, narrow: float) -> None:
    rings, fields = Rings(kind, 16, 20, 4), np.array([40.0, 60.0, 80.0])
    data = knot_data(rings, fields, narrow)
    half, kept = rings.halved(), rings.halved_knots()
    crossings = Crossings(data, lambda v: half.to_finer_locally(v[:, kept], rings), rings.knot_weights(), 1e-6)
    mesh = Mesh(kind, 60, 40)
    theta = np.linspace(0.0, 0.5 * np.pi, mesh.thetas + 1)[:, None]
    phi = np.zeros(1) if kind == "axial" else mesh.phi()
    energy, rise, strength = three_levels(fields[:, None, None], theta, phi, narrow)
    for row, upper in enumerate((1, 2)):
        gap, slope, strong = crossings.continued(row, slice(0, 3), lambda v: rings.to_mesh_locally(v, mesh))
        plain, *_ = Crossings(data).continued(row, slice(0, 3), lambda v: rings.to_mesh_locally(v, mesh))
        want = energy[..., upper] - energy[..., 0] - FREQUENCY
        if kind == "axial":  # the azimuth of the meridian
            want = want[:, :, :1]
        # smooth functions on 16 rings, and a kink of sorted levels that no spline follows
        assert np.abs(gap - want).max() < 0.05
        assert np.abs(plain - want).max() > 0.5
        away = np.abs(energy[..., 2] - energy[..., 1]) > 4 * narrow
        assert np.abs(slope - rise[..., upper] + rise[..., 0])[away].max() < 0.05
        assert np.abs(strong - strength[..., 0, upper])[away].max() < 0.05
    by_crossings, plainly = (misses(c, np.array([0, 1]), c_to, 1.0) for c, c_to in _both(crossings, data, rings))
    assert by_crossings.miss.sum() < 0.3 * plainly.miss.sum()


def _both(crossings: Crossings, data: KnotData, rings: Rings):
    half, kept = rings.halved(), rings.halved_knots()

    def to_finer(values: np.ndarray) -> np.ndarray:
        return half.to_finer_locally(values[:, kept], rings)

    return (crossings, to_finer), (Crossings(data), to_finer)


@pytest.mark.parametrize("kind", ["axial", "half"])
def test_a_window_holds_what_is_asked_for_and_nothing_else(kind: str) -> None:
    rings, fields = Rings(kind, 16, 20, 4), np.array([40.0, 60.0, 80.0])
    data = knot_data(rings, fields, 0.2)
    half, kept = rings.halved(), rings.halved_knots()
    crossings = Crossings(data, lambda v: half.to_finer_locally(v[:, kept], rings), rings.knot_weights(), 1e-6)
    assert crossings.uses(0).any()
    mesh = Mesh(kind, 24, 16)
    whole = crossings.continued(0, slice(0, 3), partial(rings.to_mesh_locally, mesh=mesh))
    shape = whole.shape[2:]
    rows = np.array([[2, 9], [0, 0], [20, 25]])
    part = crossings.continued(0, slice(0, 3), partial(rings.to_mesh_locally, mesh=mesh), Window(shape, rows))
    for node, (first, last) in enumerate(rows):
        assert part[:, node, first:last] == pytest.approx(whole[:, node, first:last], abs=1e-9)
    assert not part[:, 1].any()
    nothing = crossings.continued(0, slice(0, 3), partial(rings.to_mesh_locally, mesh=mesh), Window(shape, 0 * rows))
    assert nothing.shape == whole.shape
    assert not nothing.any()
