"""Line shapes and detection against scipy's Faddeeva function, quadrature and definitions."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.integrate import quad, trapezoid
from scipy.optimize import brentq
from scipy.special import voigt_profile, wofz

from spinfit.lineshape import GAUSSIAN_FWHM, LORENTZIAN_FWHM, FieldGrid, Shape, voigt_absorption

CENTRE = 337.0123
TOLERANCE = 1e-4


def line(shape: Shape, fields: np.ndarray, tolerance: float = TOLERANCE, centre: float = CENTRE) -> np.ndarray:
    """Return one resonance of weight 1 as the module draws it."""
    low, high = float(fields.min()), float(fields.max())
    grid = FieldGrid.covering(low, high, shape.scale, shape.reach(tolerance), tolerance)
    deposit = grid.deposit(np.array([centre]), np.array([1.0]))
    return grid.sample(grid.coefficients({0: deposit}, shape), fields)


def faddeeva(x: np.ndarray, sigma: float, gamma: float, order: int) -> np.ndarray:
    """Return chi'' + i chi' or its first or second derivative, w'(z) = -2 z w + 2i/sqrt(pi)."""
    root = sigma * math.sqrt(2)
    z = (x + 1j * gamma) / root
    w = wofz(z)
    first = -2 * z * w + 2j / math.sqrt(math.pi)
    values = (w, first, -2 * w - 2 * z * first)
    return values[order] / (sigma * math.sqrt(2 * math.pi)) / root**order


FIELDS = np.linspace(330.0, 345.0, 1501)


@pytest.mark.parametrize(("sigma", "gamma"), [(0.5, 0.0), (0.5, 0.2), (0.2, 0.8), (0.05, 1.0)])
@pytest.mark.parametrize("detect", ["absorption", "derivative", "second derivative"])
def test_voigt_profile_and_its_derivatives(sigma: float, gamma: float, detect: str) -> None:
    """A. Voigt's profile through the Faddeeva function (`scipy.special.wofz`)."""
    order = ["absorption", "derivative", "second derivative"].index(detect)
    expected = faddeeva(FIELDS - CENTRE, sigma, gamma, order).real
    got = line(Shape(sigma, gamma, detect), FIELDS)
    assert got == pytest.approx(expected, abs=TOLERANCE * np.abs(expected).max())


@pytest.mark.parametrize("tolerance", [1e-2, 1e-3, 1e-4])
def test_a_line_anywhere_on_the_grid_keeps_the_tolerance(tolerance: float) -> None:
    """Where a resonance falls between grid points must not show."""
    shape = Shape(0.5, 0.1)
    for centre in 336.0 + np.linspace(0, 0.3, 17):
        expected = faddeeva(FIELDS - centre, 0.5, 0.1, 1).real
        got = line(shape, FIELDS, tolerance, centre)
        assert np.abs(got - expected).max() < tolerance * np.abs(expected).max()


@pytest.mark.parametrize("detect", ["absorption", "derivative"])
def test_pure_lorentzian(detect: str) -> None:
    """chi'' = (1/pi Gamma) / (1 + x^2), x = (B - B0) / Gamma."""
    gamma = 0.4
    x = (FIELDS - CENTRE) / gamma
    height = 1 / (math.pi * gamma)
    expected = height / (1 + x**2) if detect == "absorption" else height * -2 * x / (1 + x**2) ** 2 / gamma
    got = line(Shape(0.0, gamma, detect), FIELDS)
    assert got == pytest.approx(expected, abs=TOLERANCE * np.abs(expected).max())


@pytest.mark.parametrize("pp", [0.3, 1.7])
def test_gaussian_width_is_peak_to_peak(pp: float) -> None:
    """The derivative's extrema lie one peak-to-peak width apart; FWHM = sqrt(2 ln 2) of it."""
    shape = Shape.from_widths(pp, 0.0, detect="second derivative")
    fields = CENTRE + np.linspace(-2 * pp, 2 * pp, 2001)
    curve = line(shape, fields)
    zeros = [
        brentq(lambda b: np.interp(b, fields, curve), CENTRE + s * 0.2 * pp, CENTRE + s * 0.9 * pp) for s in (-1, 1)
    ]
    assert zeros[1] - zeros[0] == pytest.approx(pp, rel=1e-3)
    half = line(Shape.from_widths(pp, 0.0, detect="absorption"), np.array([CENTRE, CENTRE + 0.5 * GAUSSIAN_FWHM * pp]))
    assert half[1] / half[0] == pytest.approx(0.5, abs=1e-3)


def test_lorentzian_width_is_peak_to_peak() -> None:
    """FWHM = sqrt(3) of the peak-to-peak width; the derivative's extremum lies half of that away."""
    pp = 0.9
    fields = CENTRE + np.linspace(0.2 * pp, 0.9 * pp, 4001)
    curve = line(Shape.from_widths(0.0, pp), fields)
    assert fields[np.argmin(curve)] - CENTRE == pytest.approx(0.5 * pp, rel=2e-3)
    shape = Shape.from_widths(0.0, pp, detect="absorption")
    half = line(shape, np.array([CENTRE, CENTRE + 0.5 * LORENTZIAN_FWHM * pp]))
    assert half[1] / half[0] == pytest.approx(0.5, abs=1e-3)


@pytest.mark.parametrize("harmonic", [1, 2])
@pytest.mark.parametrize("amplitude", [0.2, 1.0, 3.0])
def test_modulation_is_a_lock_in(harmonic: int, amplitude: float) -> None:
    """What a phase-sensitive detector gives: the Fourier component of chi''(B + (A/2) cos t).

    Normalised so that a small modulation gives the derivatives: first harmonic 2/(A/2) <chi'' cos t>,
    second harmonic 8/(A/2)^2 <chi'' cos 2t> (Taylor series of chi'').
    """
    shape = Shape(0.4, 0.2, ("derivative", "second derivative")[harmonic - 1], modulation=amplitude)
    a = 0.5 * amplitude
    t = (np.arange(400) + 0.5) * 2 * np.pi / 400
    swept = voigt_profile(FIELDS[:, None] + a * np.cos(t) - CENTRE, 0.4, 0.2)
    factor = 2 / a if harmonic == 1 else 8 / a**2
    expected = factor * (swept * np.cos(harmonic * t)).mean(axis=1)
    assert line(shape, FIELDS) == pytest.approx(expected, abs=2 * TOLERANCE * np.abs(expected).max())


def test_modulation_of_an_absorption_is_its_mean() -> None:
    """Detected without a lock-in, a modulated absorption is averaged over the cycle."""
    t = (np.arange(400) + 0.5) * 2 * np.pi / 400
    expected = voigt_profile(FIELDS[:, None] + 0.6 * np.cos(t) - CENTRE, 0.4, 0.1).mean(axis=1)
    got = line(Shape(0.4, 0.1, "absorption", modulation=1.2), FIELDS)
    assert got == pytest.approx(expected, abs=TOLERANCE * expected.max())


@pytest.mark.parametrize("gamma", [0.0, 0.3])
@pytest.mark.parametrize("detect", ["absorption", "derivative"])
def test_phase_mixes_in_the_dispersion(gamma: float, detect: str) -> None:
    """cos(phi) chi'' + sin(phi) chi'; both parts of the Faddeeva function."""
    order = ["absorption", "derivative"].index(detect)
    both = faddeeva(FIELDS - CENTRE, 0.5, gamma, order)
    for phase in (0.3, 0.5 * math.pi, -1.0):
        expected = math.cos(phase) * both.real + math.sin(phase) * both.imag
        got = line(Shape(0.5, gamma, detect, phase=phase), FIELDS)
        assert got == pytest.approx(expected, abs=5 * TOLERANCE * np.abs(expected).max())


def test_dispersion_is_the_hilbert_transform() -> None:
    """chi'(B) = (1/pi) PV int chi''(B') / (B - B') dB': x/(1+x^2) belongs to 1/(1+x^2).

    The principal value by subtracting the singularity: the integrand with chi''(B') - chi''(B) is smooth.
    """
    sigma, gamma = 0.5, 0.2
    dispersion = line(Shape(sigma, gamma, "absorption", phase=0.5 * math.pi), FIELDS)
    for b in (335.0, 336.7, 337.5, 340.0):
        value = quad(
            lambda u, b=b: (
                (voigt_profile(b - u - CENTRE, sigma, gamma) - voigt_profile(b + u - CENTRE, sigma, gamma))
                / (math.pi * u)
            ),
            0,
            400,
            limit=400,
            points=[abs(b - CENTRE)],
        )[0]
        assert np.interp(b, FIELDS, dispersion) == pytest.approx(value, abs=1e-3 * np.abs(dispersion).max())


def test_area_and_first_moment() -> None:
    """An absorption of weight 1 has area 1; the first moment of its derivative is -1."""
    fields = np.linspace(330.0, 345.0, 3001)
    assert trapezoid(line(Shape(0.5, 0.0, "absorption"), fields), fields) == pytest.approx(1, abs=1e-4)
    derivative = line(Shape(0.5, 0.0), fields)
    assert trapezoid(derivative * (fields - CENTRE), fields) == pytest.approx(-1, abs=1e-3)


@pytest.mark.parametrize("shape", [Shape(0.5, 0.0), Shape(0.3, 0.3, modulation=0.4, phase=0.4)])
def test_points_and_window_do_not_matter(shape: Shape) -> None:
    """A value at a field depends neither on the number of points nor on the window's edges."""
    wide = np.linspace(320.0, 360.0, 4001)
    whole = line(shape, wide)
    top = np.abs(whole).max()
    for narrow in (wide[1500:2500:7], wide[1690:1710], np.linspace(336.0, 338.0, 11)):
        same = np.interp(narrow, wide, whole)
        assert line(shape, narrow) == pytest.approx(same, abs=3 * TOLERANCE * top)


def test_a_line_outside_the_window_still_reaches_in() -> None:
    fields = np.linspace(338.0, 345.0, 701)
    expected = faddeeva(fields - CENTRE, 0.4, 0.5, 1).real
    peak = np.abs(faddeeva(FIELDS - CENTRE, 0.4, 0.5, 1).real).max()
    assert line(Shape(0.4, 0.5), fields) == pytest.approx(expected, abs=TOLERANCE * peak)


def test_integrated_deposits_are_boxes_and_ramps() -> None:
    """Order 1 is integrated once: +1/w and -1/w, w apart, make a box of area 1; order 2 a tent."""
    shape = Shape(0.2, 0.0, "absorption")
    fields = np.linspace(330.0, 345.0, 1501)
    grid = FieldGrid.covering(330.0, 345.0, shape.scale, shape.reach(TOLERANCE), TOLERANCE)
    box = grid.deposit(np.array([335.0, 338.0]), np.array([1.0, -1.0]) / 3)
    got = grid.sample(grid.coefficients({1: box}, shape), fields)
    spread = np.linspace(335.0, 338.0, 3001)
    expected = trapezoid(voigt_profile(fields[:, None] - spread, 0.2, 0.0), spread, axis=1) / 3
    assert got == pytest.approx(expected, abs=1e-3 * expected.max())
    tent = grid.deposit(np.array([335.0, 336.5, 338.0]), np.array([1.0, -2.0, 1.0]) / 1.5**2)
    got = grid.sample(grid.coefficients({2: tent}, shape), fields)
    height = (1 - np.abs(spread - 336.5) / 1.5) / 1.5
    expected = trapezoid(voigt_profile(fields[:, None] - spread, 0.2, 0.0) * height, spread, axis=1)
    assert got == pytest.approx(expected, abs=1e-3 * expected.max())


def test_exact_profile_function() -> None:
    x = np.linspace(-5, 5, 101)
    assert voigt_absorption(x, 0.7, 0.3).real == pytest.approx(voigt_profile(x, 0.7, 0.3), rel=1e-10)
    lorentzian = voigt_absorption(x, 0.0, 0.5)
    assert lorentzian.real == pytest.approx(1 / (math.pi * 0.5) / (1 + (x / 0.5) ** 2))
    assert lorentzian.imag == pytest.approx(1 / (math.pi * 0.5) * (x / 0.5) / (1 + (x / 0.5) ** 2))
