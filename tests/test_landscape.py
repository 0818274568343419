"""What the sums over a mesh are given: compiled and in numpy, against smooth functions of the direction."""

from __future__ import annotations

import numpy as np
import pytest

from spinfit import landscape, loop_kernels
from spinfit.landscape import View, doubled, doubled_numpy, surroundings, surroundings_numpy
from spinfit.orientations import Mesh

KINDS = ["axial", "octant", "quarter", "half"]
FIELDS = np.array([10.0, 30.0, 35.0, 60.0, 100.0, 130.0, 180.0, 200.0, 210.0])
LEAVES = np.array([[0, 1, 2], [2, 3, 4], [4, 5, 6], [6, 7, 8]])


def mesh_of(kind: str, thetas: int = 64, phis: int = 48) -> Mesh:
    return Mesh(kind, thetas, 1 if kind == "axial" else phis)


def smooth(mesh: Mesh, fields: np.ndarray = FIELDS) -> np.ndarray:
    """Return even functions of the direction with the symmetry of the mesh's domain, (2, k, thetas + 1, azimuths)."""
    theta = np.linspace(0.0, 0.5 * np.pi, mesh.thetas + 1)[:, None]
    phi = np.zeros(1) if mesh.kind == "axial" else mesh.phi()
    x, y, z = np.sin(theta) * np.cos(phi), np.sin(theta) * np.sin(phi), np.cos(theta) + 0 * phi
    value = 3 * x * x - z * z + x**4 * z * z
    if mesh.kind in ("quarter", "half"):
        value = value + x * y * (1 + x * x)
    if mesh.kind == "half":
        value = value + x * z * (y * y - 0.3) + y * z
    if mesh.kind == "axial":
        value = 3 * z * z - z**4
    return np.array([value + 0.01 * fields[:, None, None], value * fields[:, None, None]])


@pytest.mark.parametrize("kind", KINDS)
def test_every_second_point_tells_the_others(kind):
    mesh = mesh_of(kind, phis=96)
    half = smooth(Mesh(kind, mesh.thetas // 2, max(1, mesh.phis // 2)))
    rows = np.array([[0, 65], [3, 20], [10, 11], [0, 0], [30, 65], [0, 30], [5, 6], [64, 65], [0, 1]])
    whole = slice(0, mesh.thetas + 1)
    for got in (doubled(half, mesh, rows), doubled_numpy(half, mesh, rows, whole)):
        want = smooth(mesh)
        for node, (first, last) in enumerate(rows):
            some = slice(first, last)
            assert np.abs(got[:, node, some] - want[:, node, some]).max(initial=0.0) < 1e-4 * np.abs(want).max()
            assert not got[:, node, :first].any()
            assert not got[:, node, last:].any()
    assert doubled(half, mesh, rows) == pytest.approx(doubled_numpy(half, mesh, rows, whole), abs=1e-12)
    part = slice(13, 30)
    want = doubled(half, mesh, np.tile(np.array([13, 30]), (len(FIELDS), 1)))[:, :, part]
    inside = np.tile(np.array([0, 17]), (len(FIELDS), 1))
    for got in (doubled(half, mesh, inside, None, part), doubled_numpy(half, mesh, inside, part)):
        assert got == pytest.approx(want, abs=1e-12)


@pytest.mark.parametrize("kind", KINDS)
def test_differences_and_bends(kind):
    mesh = mesh_of(kind, 16, 8)
    gap, slope = smooth(mesh)
    rows = np.array([[0, 17], [3, 9], [10, 12], [0, 0], [2, 17], [0, 5], [5, 9], [14, 17], [0, 3]])
    want = surroundings_numpy(FIELDS, gap, slope, mesh, rows)
    for got, expected in zip(surroundings(FIELDS, gap, slope, mesh, rows), want, strict=True):
        assert got == pytest.approx(expected, abs=1e-12)
    # where nodes and rows about one are all there, what numpy makes of them
    assert want[2][0] == pytest.approx(np.gradient(slope, FIELDS, axis=0)[0])
    inside = want[0][0, 1:-1]
    assert inside == pytest.approx(np.gradient(gap[0], axis=0)[1:-1])


def test_the_gradient_between_uneven_nodes():
    shares = landscape._gradients(FIELDS)
    values = np.random.default_rng(3).normal(size=len(FIELDS))
    padded = np.concatenate([[0.0], values, [0.0]])
    got = sum(shares[:, i] * padded[i : i + len(values)] for i in range(3))
    assert got == pytest.approx(np.gradient(values, FIELDS))
    assert not landscape._gradients(FIELDS[:1]).any()


def test_a_view_holds_what_its_leaves_need():
    reach = np.array([[0.0, 0.2], [0.3, 0.31], [1.0, 0.0], [0.9, 1.0]])  # the third is never resonant
    view = View.of(reach, LEAVES, len(FIELDS), 64, 4)
    assert view.leaves.tolist() == [[0, 17], [16, 21], [0, 0], [56, 65]]
    for leaf, (first, last) in zip(LEAVES[[0, 1, 3]], view.leaves[[0, 1, 3]], strict=True):
        for node in range(max(0, leaf[1] - 3), min(len(FIELDS), leaf[1] + 4)):
            assert view.nodes[node, 0] <= max(0, first - 8)
            assert view.nodes[node, 1] >= min(65, last + 8)
    half = view.every(2)
    assert half.leaves.tolist() == [[0, 9], [8, 11], [0, 0], [28, 33]]
    seen = np.zeros((4, 65), dtype=int)
    for band, rows in view.bands(65, 10):
        for leaf, (first, last) in enumerate(band.leaves + rows.start):
            seen[leaf, first:last] += 1
            if first < last:
                assert rows.start <= max(0, first - 1)
                assert rows.stop >= min(65, last + 1)
    for leaf, (first, last) in enumerate(view.leaves):
        assert seen[leaf, first:last].tolist() == [1] * (last - first)
        assert seen[leaf].sum() == last - first
    nothing = View.of(np.tile([1.0, 0.0], (4, 1)), LEAVES, len(FIELDS), 64, 4)
    assert not nothing.nodes.any()


@pytest.mark.parametrize("octant", [True, False])
def test_what_is_compiled_runs_as_it_stands(octant):
    # without numba the plain function is what the name stands for
    mesh = mesh_of("octant" if octant else "quarter", 16, 8)
    half = smooth(Mesh(mesh.kind, 8, 4))
    rows = np.tile(np.array([0, 17]), (len(FIELDS), 1))
    out = np.zeros((2, len(FIELDS), 17, len(mesh.phi())))
    loop_kernels._doubled(half, rows, 0, octant, 0, landscape.MIDDLE, out)
    assert out == pytest.approx(doubled_numpy(half, mesh, rows, slice(0, 17)), abs=1e-12)


@pytest.mark.parametrize("kind", KINDS)
def test_bands_are_parts_of_the_whole(kind):
    mesh = mesh_of(kind, phis=96)
    gap, slope = smooth(mesh)
    values = np.array([gap, slope, gap])
    view = View.of(np.array([[0.0, 0.2], [0.3, 0.31], [1.0, 0.0], [0.6, 1.0]]), LEAVES, len(FIELDS), 64, 4)
    whole = landscape.Landscape.of(FIELDS, LEAVES, values, mesh, view)
    seen = 0
    for band, some in view.bands(65, 7):
        part = landscape.Landscape.of(FIELDS, LEAVES, values[:, :, some], mesh, band, landscape.Scratch(), some)
        shift = some.start * part.azimuths
        for leaf, (first, last) in zip(LEAVES, part.points, strict=True):
            seen += last - first
            for name in ("gap", "slope", "strength", "bend", "along", "around"):
                got = getattr(part, name)[leaf, first:last]
                want = getattr(whole, name)[leaf, first + shift : last + shift]
                assert got == pytest.approx(want, abs=1e-12), name
            assert np.array_equal(part.weights[first:last], whole.weights[first + shift : last + shift])
    assert seen == np.diff(whole.points).sum()
