"""The field axis from g standards: closed forms, coverage of the uncertainties, and the table of standards."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import constants

from spinfit.errors import InputError
from spinfit.fitting.calibrate import (
    Line,
    Reading,
    Standard,
    calibrate,
    fit_line,
    profile,
    read_standard,
    standard,
    standards,
)

MU_B = constants.physical_constants["Bohr magneton"][0]


def resonance_mt(g, frequency_mhz):
    return constants.h * frequency_mhz * 1e6 / (g * MU_B) * 1e3


def lorentzian(field, centre, pp, phase=0.0):
    """Derivative of cos(phase) 1/(1+x^2) + sin(phase) x/(1+x^2), half width sqrt(3)/2 pp."""
    gamma = math.sqrt(3) / 2 * pp
    x = (field - centre) / gamma
    return (np.cos(phase) * (-2 * x) + np.sin(phase) * (1 - x**2)) / (1 + x**2) ** 2


def gaussian(field, centre, pp):
    x = (field - centre) / (pp / 2)
    return -x * np.exp(-0.5 * x**2)


FIELD = np.linspace(333.0, 337.0, 1001)


@pytest.mark.parametrize("detect", ["derivative", "absorption"])
@pytest.mark.parametrize(("gauss", "lorentz"), [(0.3, 0.0), (0.0, 0.3), (0.2, 0.15)])
def test_profile_is_the_hilbert_pair_of_the_line(gauss, lorentz, detect):
    """Against a direct convolution of the Lorentzian's closed form with a Gaussian."""
    x = np.linspace(-40, 40, 160001)
    gamma, sigma = math.sqrt(3) / 2 * lorentz, gauss / 2
    if lorentz == 0:
        gamma = 1e-3  # narrower than the steps matter: the convolution is then the Gaussian's own pair
    u = x / gamma
    pair = (1 + 1j * u) / (1 + u**2)
    if sigma:
        kernel = np.exp(-0.5 * (x / sigma) ** 2)
        pair = np.convolve(pair, kernel[np.abs(x) < 8 * sigma], mode="same")
    if detect == "derivative":
        pair = np.gradient(pair, x)
    inside = np.abs(x) < 2
    expected = np.stack([pair.real, pair.imag], axis=1)[inside]
    found = profile(x[inside], 0.0, gauss, lorentz, detect)
    np.testing.assert_allclose(found / np.abs(found[:, 0]).max(), expected / np.abs(expected[:, 0]).max(), atol=8e-3)


@settings(derandomize=True, deadline=None, max_examples=25)
@given(st.floats(334.3, 335.7), st.floats(0.08, 0.4), st.floats(-0.5, 0.5), st.floats(-3, 3))
def test_a_clean_line_is_found_exactly(centre, width, phase, slope):
    signal = 500 * lorentzian(FIELD, centre, width, phase) + 20 + slope * FIELD
    line = fit_line(FIELD, signal)
    assert line.centre == pytest.approx(centre, abs=1e-5)
    assert line.phase == pytest.approx(phase, abs=1e-4)
    assert line.width == pytest.approx(width, rel=2e-3)


def test_gaussian_is_told_from_lorentzian_and_inverted_lines_are_the_same_line():
    noise = np.random.default_rng(3).normal(0, 2, FIELD.size)
    upright = fit_line(FIELD, 500 * gaussian(FIELD, 335.0, 0.4) + noise)
    inverted = fit_line(FIELD, -500 * gaussian(FIELD, 335.0, 0.4) + noise)
    assert upright.shape == inverted.shape == "gaussian"
    assert upright.centre == pytest.approx(335.0, abs=4 * upright.uncertainty)
    assert inverted.centre == pytest.approx(335.0, abs=4 * inverted.uncertainty)
    assert abs(inverted.phase) < 0.1
    assert upright.width == pytest.approx(0.4, rel=0.03)
    assert fit_line(FIELD, 500 * lorentzian(FIELD, 335.0, 0.2) + noise).shape == "lorentzian"


def test_absorption_line():
    signal = 300 * np.exp(-0.5 * ((FIELD - 335.1) / 0.3) ** 2) + np.random.default_rng(1).normal(0, 1, FIELD.size)
    line = fit_line(FIELD, signal, detect="absorption")
    assert line.centre == pytest.approx(335.1, abs=4 * line.uncertainty)


def test_uncertainty_of_the_centre_covers_the_truth():
    hits, centres, sigmas = 0, [], []
    for seed in range(100):
        noise = np.random.default_rng(seed).normal(0, 5, FIELD.size)
        line = fit_line(FIELD, 200 * lorentzian(FIELD, 335.0, 0.2) + noise)
        hits += abs(line.centre - 335.0) < line.uncertainty
        centres.append(line.centre)
        sigmas.append(line.uncertainty)
    assert 55 <= hits <= 81  # 68 expected; a binomial's 2.8 standard deviations
    assert np.std(centres) == pytest.approx(np.mean(sigmas), rel=0.25)


def test_offset_and_its_budget():
    known = resonance_mt(2.0036, 9400.0)
    signal = 1000 * lorentzian(FIELD, known - 0.21, 0.15) + np.random.default_rng(0).normal(0, 3, FIELD.size)
    dpph = standard("DPPH")
    reading = read_standard("a", FIELD, signal, dpph, frequency=9400.0, frequency_uncertainty=0.2)
    result = calibrate([reading])
    # JCGM 100: independent parts in quadrature, each by its sensitivity dB/dg = -B/g, dB/dnu = B/nu.
    parts = [reading.line.uncertainty, known * 0.0002 / 2.0036, known * 0.2 / 9400.0]
    assert result.offset == pytest.approx(0.21, abs=0.001)
    assert result.field_uncertainty == pytest.approx(math.sqrt(sum(p**2 for p in parts)), rel=1e-6)
    assert result.scale == 1
    assert result.scale_uncertainty is None


def reading(known, indicated, *, fit=1e-3, g_part=0.03, name="s"):
    line = Line(indicated, fit, "lorentzian", 0.0, 0.1, 0.1, 0.0, 0.0)
    return Reading("t", Standard(name, 2.0, 1e-4), 9400.0, line, known, g_part, 0.0)


def test_two_standards_give_offset_and_scale():
    offset, scale = -0.35, 1.0004
    fields = np.array([335.2, 1210.7])
    result = calibrate([reading(scale * b + offset, b, name=str(b)) for b in fields])
    assert result.offset == pytest.approx(offset, abs=1e-9)
    assert result.scale == pytest.approx(scale, abs=1e-12)
    # The slope through two points with independent uncertainties u: sqrt(2) u / distance.
    u = math.hypot(1e-3, 0.03)
    assert result.scale_uncertainty == pytest.approx(math.sqrt(2) * u / np.ptp(fields), rel=1e-6)
    assert result.field_uncertainty == pytest.approx(u / math.sqrt(2), rel=1e-6)


def test_the_same_standard_again_does_not_reduce_the_error_of_its_g():
    once = calibrate([reading(335.2, 335.0)])
    again = calibrate([reading(335.2, 335.0), reading(335.2, 335.0)])
    other = calibrate([reading(335.2, 335.0, name="one"), reading(335.2, 335.0, name="two")])
    assert again.field_uncertainty == pytest.approx(math.hypot(1e-3 / math.sqrt(2), 0.03))
    assert other.field_uncertainty == pytest.approx(once.field_uncertainty / math.sqrt(2))
    assert again.scale_uncertainty is None


def test_standards_that_disagree_show_in_chi_squared():
    result = calibrate([reading(335.2, 335.0, name="one"), reading(335.2, 334.0, name="two")])
    u2 = 2 * (1e-6 + 9e-4)
    assert result.chi2 == pytest.approx(1 / u2, rel=1e-6)
    assert calibrate([reading(335.2, 335.0)]).chi2 is None


def test_table_of_standards():
    table = standards()
    assert table["dpph"].g == 2.0036  # common practice: DPPH powder 2.0036(2)
    assert table["dpph"].uncertainty == 0.0002
    assert table["cr3+ in mgo"].g == 1.98  # W. Low, Phys. Rev. 105, 801 (1957), from memory
    assert all(row.source and row.uncertainty > 0 for row in table.values())


def test_what_cannot_be_calibrated_is_refused():
    with pytest.raises(InputError, match=r'"DPQH" is not a known standard; did you mean "DPPH"\?'):
        standard("DPQH")
    noise = np.random.default_rng(0).normal(0, 1, FIELD.size)
    with pytest.raises(InputError, match="no line stands out of the noise"):
        fit_line(FIELD, noise)
