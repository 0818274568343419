"""The sums over a mesh for pairs of levels whose resonances come and go: compiled and in numpy, with widths."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import integrate

from spinfit import loop_kernels, loop_sums
from spinfit.branches import FWHM_PER_SIGMA, Request
from spinfit.landscape import Landscape
from spinfit.lineshape import FieldGrid, Shape
from spinfit.orientations import Mesh
from spinfit.resonance import SAFETY, can_reach
from spinfit.sheets import Grain, Histograms

SHAPE = Shape(1.0, 0.0, detect="absorption")
GRID = FieldGrid.covering(0.0, 400.0, SHAPE.scale, SHAPE.reach(1e-3), 1e-3, 40.0)
REQUEST = Request(9500.0, 1e-3, 500.0, Grain.of(SHAPE, 1e-3), SHAPE.scale, 1e-3)
CENTRE, BEND, DEPTH, SHARE = 210.0, 0.15, 3000.0, 0.3


def landscape(mesh: Mesh, width: float | None) -> Landscape:
    """Return a fold: gap = bend (B - centre)^2 - depth (cos^2 theta - share), all of one FWHM in MHz."""
    fields = np.linspace(0.0, 500.0, 41)
    leaves = np.arange(0, 40, 2)[:, None] + np.arange(3)
    theta = np.linspace(0.0, 0.5 * math.pi, mesh.thetas + 1)[:, None] + 0.0 * mesh.phi()
    away = (fields - CENTRE)[:, None, None]
    gap = BEND * away**2 - DEPTH * (np.cos(theta) ** 2 - SHARE)
    columns = [gap, 2 * BEND * away + 0 * gap, np.ones_like(gap)]
    if width is not None:
        columns.append(np.full_like(gap, width**2))
    return Landscape.of(fields, leaves, np.array(columns), mesh)


@pytest.mark.parametrize("width", [None, 0.0, 4.0])
@pytest.mark.parametrize("mesh", [Mesh("axial", 64, 1), Mesh("octant", 24, 8)])
def test_compiled_and_numpy_sums_agree(mesh, width):
    land, step = landscape(mesh, width), 0.7
    fields = step * (0.5 + np.arange(700))
    sums = [np.zeros(len(fields)), np.zeros(len(fields))]
    loop_sums.in_frequency_numpy(sums[0], fields, land, REQUEST, step)
    loop_sums._in_frequency_compiled(sums[1], fields, land, REQUEST, step)
    assert sums[0].any()
    assert sums[1] == pytest.approx(sums[0], abs=1e-9 * np.abs(sums[0]).max())
    if width is not None:  # everything is summed in frequency
        return
    both = [Histograms(GRID, SHAPE.scale) for _ in range(2)]
    used = loop_sums.in_field_numpy(both[0], land, REQUEST, step)
    assert used == loop_sums._in_field_compiled(both[1], land, REQUEST, step) > 0
    expected = both[0].transform()
    assert both[1].transform() == pytest.approx(expected, abs=1e-9 * np.abs(expected).max())


@pytest.mark.parametrize("part", [1.0, 0.6, 0.1, 0.0])
def test_a_broadened_kernel_has_the_moments_of_its_gaussian(part):
    # a kernel without moments, convolved with a Gaussian of variance 1 - part
    rest = 1 - part
    want = [1, 0, rest, 0, 3 * rest**2, 0]
    moments = [integrate.quad(lambda u, p=p: u**p * loop_sums.kernel(u, part), -12, 12)[0] for p in range(6)]
    assert moments == pytest.approx(want, abs=1e-9)


@pytest.mark.parametrize("width", [60.0, 250.0, 800.0])
def test_a_fold_with_a_width_in_frequency(width):
    # at each field: the integral over cos(theta) of a Gaussian in the gap, then the common line
    sigma = width / FWHM_PER_SIGMA
    fields = np.linspace(50.0, 380.0, 300)
    histograms = Histograms(GRID, SHAPE.scale)
    land = landscape(Mesh("axial", 512, 1), width)
    loop_sums.add_looping(histograms, [land], REQUEST, loop_sums.field_step(land, REQUEST))
    got = GRID.sample(GRID.render(histograms.transform(), SHAPE), fields)
    fine = np.arange(-20.0, 460.0, 0.02)
    cosine, weights = np.polynomial.legendre.leggauss(1000)
    cosine, weights = 0.5 * (cosine + 1), 0.5 * weights
    density = np.zeros_like(fine)
    for x, w in zip(cosine, weights, strict=True):
        gap = BEND * (fine - CENTRE) ** 2 - DEPTH * (x * x - SHARE)
        density += w * np.exp(-0.5 * (gap / sigma) ** 2) / (sigma * math.sqrt(2 * math.pi))
    bell = np.exp(-0.5 * (fields[:, None] - fine) ** 2) / math.sqrt(2 * math.pi)
    want = bell @ density * 0.02
    assert np.abs(got - want).max() < 1e-3 * want.max()


def test_the_reach_of_a_cubic_is_one_formula():
    rng = np.random.default_rng(5)
    values = rng.normal(size=(4, 500))
    values[:2] += 1.5
    want = can_reach(*values)
    got = [bool(loop_kernels._reaches(*one, SAFETY)) for one in values.T]
    assert got == list(want)
    assert 0 < want.sum() < 500
