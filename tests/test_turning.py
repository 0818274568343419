"""Turning points, noise and widths read off a trace without a model.

Truths are closed forms: the derivative of a Gaussian line of standard deviation s has its extrema at
+-s from the centre (peak-to-peak width 2 s); that of a Lorentzian of half width w at +-w/sqrt(3).
"""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import constants
from scipy.signal import lfilter

from spinfit.fitting import turning
from spinfit.fitting.turning import analyse, largest_modulation

FIELD = np.linspace(320.0, 350.0, 1501)


def gaussian_derivative(field, centre, sigma):
    x = (field - centre) / sigma
    return -x * np.exp(0.5 - 0.5 * x**2)


def lorentzian_derivative(field, centre, half_width):
    x = (field - centre) / half_width
    return -2 * x / (1 + x**2) ** 2 * 8 / 3**1.5


def kinds(analysis):
    return [point.kind for point in analysis.turning_points]


@settings(derandomize=True, deadline=None, max_examples=40)
@given(st.floats(330, 340), st.floats(0.1, 3.0), st.sampled_from([gaussian_derivative, lorentzian_derivative]))
def test_one_line_without_noise(centre, width, line):
    found = analyse(FIELD, 1000 * line(FIELD, centre, width))
    assert kinds(found) == ["maximum", "crossing", "minimum"]
    half = width if line is gaussian_derivative else width / np.sqrt(3)
    fields = [point.field for point in found.turning_points]
    # A parabola through the top of a skew peak misses it by a few hundredths of the width.
    np.testing.assert_allclose(fields, [centre - half, centre, centre + half], atol=0.06 * half + 0.002)
    assert found.narrowest == pytest.approx(2 * half, rel=0.08, abs=0.01)


def test_g_of_a_turning_point_is_h_nu_over_mu_b_b():
    found = analyse(FIELD, gaussian_derivative(FIELD, 335.0, 0.5), frequency=9400.0)
    crossing = found.turning_points[1]
    g = constants.h * 9.4e9 / (constants.physical_constants["Bohr magneton"][0] * 0.335)
    assert crossing.g == pytest.approx(g, rel=1e-5)
    assert crossing.g_uncertainty == pytest.approx(g * crossing.field_uncertainty / crossing.field)


def test_without_a_frequency_there_is_no_g():
    assert {point.g for point in analyse(FIELD, gaussian_derivative(FIELD, 335.0, 0.5)).turning_points} == {None}


@pytest.mark.parametrize("seed", range(40))
def test_noise_and_drift_alone_show_nothing(seed):
    rng = np.random.default_rng(seed)
    drift = 3 + 0.2 * (FIELD - 320) + 2 * ((FIELD - 335) / 15) ** 2
    assert analyse(FIELD, drift + rng.normal(0, 1, FIELD.size)).turning_points == ()


@pytest.mark.parametrize("seed", range(20))
def test_slow_noise_is_not_taken_for_lines(seed):
    """Noise through a detector with a time constant of some points: an autoregressive process of order 1."""
    white = np.random.default_rng(seed).normal(0, 1, FIELD.size + 100)
    slow = lfilter([np.sqrt(1 - 0.9**2)], [1, -0.9], white)[100:]  # standard deviation 1
    found = analyse(FIELD, slow)
    assert found.turning_points == ()
    assert found.white_noise < 0.5
    line = analyse(FIELD, slow + 40 * gaussian_derivative(FIELD, 335.0, 0.5))
    assert kinds(line) == ["maximum", "crossing", "minimum"]
    assert line.noise == pytest.approx(1, rel=0.35)
    assert abs(line.turning_points[1].field - 335.0) < 4 * line.turning_points[1].field_uncertainty


def test_white_noise_is_not_called_slow():
    found = analyse(
        FIELD, 40 * gaussian_derivative(FIELD, 335.0, 0.5) + np.random.default_rng(3).normal(0, 1, FIELD.size)
    )
    assert found.noise == found.white_noise == pytest.approx(1, rel=0.08)


def test_a_narrow_line_on_a_broad_weak_one_shows_both():
    rng = np.random.default_rng(7)
    broad = 4.0 * gaussian_derivative(FIELD, 327.0, 1.6)
    narrow = 60.0 * gaussian_derivative(FIELD, 341.0, 0.08)
    found = analyse(FIELD, broad + narrow + rng.normal(0, 1, FIELD.size))
    assert kinds(found) == ["maximum", "crossing", "minimum"] * 2
    fields = np.array([point.field for point in found.turning_points])
    sigmas = np.array([point.field_uncertainty for point in found.turning_points])
    truth = np.array([325.4, 327.0, 328.6, 340.92, 341.0, 341.08])
    assert np.all(np.abs(fields - truth) < 4 * sigmas + 0.01)
    assert found.narrowest == pytest.approx(0.16, rel=0.1)
    assert found.signal_to_noise == pytest.approx(60, rel=0.1)
    assert found.peak_to_peak == pytest.approx(120, rel=0.1)


def test_field_uncertainties_are_those_of_the_noise():
    deviations, sigmas = [], []
    for seed in range(60):
        noise = np.random.default_rng(seed).normal(0, 1, FIELD.size)
        crossing = analyse(FIELD, 50 * gaussian_derivative(FIELD, 335.0, 0.5) + noise).turning_points[1]
        deviations.append(crossing.field - 335.0)
        sigmas.append(crossing.field_uncertainty)
    # 60 draws know a standard deviation to 9 %; the adaptive scale adds a little.
    assert np.std(deviations) / np.mean(sigmas) == pytest.approx(1, abs=0.35)


def test_two_lines_far_apart_have_no_crossing_between_them():
    signal = gaussian_derivative(FIELD, 326.0, 0.4) - 0.0 + gaussian_derivative(FIELD, 344.0, 0.4)
    fields = [point.field for point in analyse(FIELD, signal).turning_points if point.kind == "crossing"]
    np.testing.assert_allclose(fields, [326.0, 344.0], atol=0.01)


def test_absorption_has_maxima_only():
    signal = np.exp(-0.5 * ((FIELD - 330) / 0.8) ** 2) + 0.5 * np.exp(-0.5 * ((FIELD - 340) / 0.8) ** 2)
    found = analyse(FIELD, signal, detect="absorption")
    assert kinds(found) == ["maximum", "maximum"]
    np.testing.assert_allclose([point.field for point in found.turning_points], [330, 340], atol=0.01)
    assert found.narrowest is None


def test_uneven_points_and_offset_do_not_matter():
    field = 320 + 30 * np.linspace(0, 1, 1501) ** 1.3
    signal = 500 + 100 * gaussian_derivative(field, 335.0, 0.6)
    fields = [point.field for point in analyse(field, signal).turning_points]
    np.testing.assert_allclose(fields, [334.4, 335.0, 335.6], atol=0.04)


def test_modulation_limit_is_a_third_of_the_narrowest_width():
    assert largest_modulation(0.3) == pytest.approx(0.1)  # common practice


def test_short_and_flat_traces_are_survived():
    assert analyse(np.arange(8.0), np.zeros(8)).turning_points == ()
    assert analyse(np.arange(8.0), np.ones(8)).signal_to_noise == 0


def test_nothing_stands_out_of_a_million_points_of_noise():
    """Their highest stands ten standard deviations above their lowest, more than that of a few thousand."""
    values = np.random.default_rng(2).normal(size=1_000_000)
    assert np.ptp(values) > turning.SIGNIFICANT
    assert turning._extrema(values, {0.0: 1.0}) == []
    assert turning.significant(8000) == turning.SIGNIFICANT
