"""Averages and sums over many points against those that add up every point."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import ndimage

from spinfit.fitting.smoothing import gaussian, running_sum


@pytest.mark.parametrize("mode", ["reflect", "nearest"])
@pytest.mark.parametrize(("points", "sigma"), [(500, 0.0), (500, 3.0), (5000, 64.0), (5001, 150.3), (700, 170.0)])
def test_a_gaussian_average_is_that_of_scipy_ndimage(points, sigma, mode):
    values = 7.0 + np.cumsum(np.random.default_rng(3).normal(size=points))
    wanted = ndimage.gaussian_filter1d(values, sigma, mode=mode) if sigma else values
    np.testing.assert_allclose(gaussian(values, sigma, mode=mode), wanted, rtol=1e-12, atol=1e-11)


@pytest.mark.parametrize("points", [1, 3, 63, 64, 65, 900, 1000])
def test_a_running_sum_adds_up_every_stretch(points):
    values = np.random.default_rng(4).normal(size=1000) + 2.0
    wanted = [values[k : k + points].sum() for k in range(1000 - points + 1)]
    np.testing.assert_allclose(running_sum(values, points), wanted, rtol=1e-11, atol=1e-11)
