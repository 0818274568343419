"""Double integrals and relative numbers of spins, against closed forms and scipy's own integration."""

from __future__ import annotations

import math

import numpy as np
import pytest
import scipy.integrate
from fit_jobs import FIELDS, SCALE, clean_signal, job, level, noisy, species, trace
from stub_engine import simulate as stub

from spinfit.errors import InputError
from spinfit.fitting.areas import fitted_area
from spinfit.fitting.driver import fit
from spinfit.fitting.integral import Baseline, double_integral
from spinfit.fitting.quantify import (
    Conditions,
    FittedArea,
    Side,
    compare_spins,
    field_swept_factor,
    spin_factor,
)
from spinfit.species import Species, Spin, Width
from spinfit.spectrum import simulate
from spinfit.sweep import Sweep
from spinfit.units import K_B_OVER_H

X = np.linspace(320.0, 360.0, 2001)


def gaussian_derivative(x: np.ndarray, centre: float, width: float) -> np.ndarray:
    """Of unit area; `width` is peak to peak, that is 2 sigma."""
    sigma = width / 2
    z = (x - centre) / sigma
    return -z / sigma**2 * np.exp(-(z**2) / 2) / math.sqrt(2 * math.pi)


def lorentzian(x: np.ndarray, centre: float, half: float) -> np.ndarray:
    return half / math.pi / ((x - centre) ** 2 + half**2)


def lorentzian_derivative(x: np.ndarray, centre: float, half: float) -> np.ndarray:
    return -2 * half / math.pi * (x - centre) / ((x - centre) ** 2 + half**2) ** 2


@pytest.mark.parametrize("width", [0.5, 2.0, 6.0])
@pytest.mark.parametrize("order", [1, 2, 3])
def test_gaussian_derivative_has_its_area(width: float, order: int) -> None:
    """Lines that end inside the sweep, under a straight line: trapezoids are exact to rounding for them."""
    found = double_integral(X, 3.0 * gaussian_derivative(X, 341.0, width) + 7 - 0.02 * X, baseline=Baseline(order))
    # 16 mT from the end of the sweep and 12 from the baseline's: 4 standard deviations of the widest.
    assert found.value == pytest.approx(3.0, rel=2e-4)
    assert found.lost[0] == pytest.approx(0.0, abs=1e-3)
    assert found.centre == pytest.approx(341.0, abs=0.01)


def test_second_derivative_and_absorption_have_the_same_area() -> None:
    z = (X - 340.0) / 1.0
    absorption = np.exp(-(z**2) / 2) / math.sqrt(2 * math.pi)
    assert double_integral(X, 2 * absorption + 1, detect="absorption").value == pytest.approx(2.0, rel=1e-6)
    second = (z**2 - 1) * absorption
    assert double_integral(X, 2 * second + 1, detect="second derivative").value == pytest.approx(2.0, rel=1e-3)


@pytest.mark.parametrize("half", [0.5, 1.0, 3.0])
def test_lorentzian_absorption_loses_what_the_arctangent_says(half: float) -> None:
    """Sweep of 2L about the line, the mean of the outer tenths taken off: all of it arctangents."""
    L = 20.0
    inner = 0.8 * L
    mean = (math.atan(L / half) - math.atan(inner / half)) / math.pi / (L - inner)
    expected = 2 / math.pi * math.atan(L / half) - 2 * L * mean
    signal = lorentzian(X, 340.0, half)
    found = double_integral(X, signal, detect="absorption", baseline=Baseline(0))
    # The mean over points stands for the mean over fields: a part 1/200 of its change across the end.
    assert found.value == pytest.approx(expected, rel=1e-3)
    assert found.value < 1


def test_lorentzian_tails_are_inside_the_uncertainty_and_bounded() -> None:
    for width in (0.5, 1.0, 2.0, 4.0):
        half = math.sqrt(3) / 2 * width
        found = double_integral(X, lorentzian_derivative(X, 340.0, half))
        missing = 1 - found.value
        assert missing > 0
        assert missing < 2 * found.uncertainty
        # The line's own width told the loss: read off turning points, hence not to rounding.
        assert found.lost[1] == pytest.approx(missing, rel=0.25)
        assert abs(found.lost[0]) < 0.01


def test_integral_agrees_with_scipy() -> None:
    """The same recipe in another's hands: cumulative trapezoids, a fitted polynomial, Simpson's rule."""
    rng = np.random.default_rng(5)
    x = np.sort(rng.uniform(320.0, 360.0, 1500))
    signal = 2 * gaussian_derivative(x, 338.0, 3.0) + lorentzian_derivative(x, 345.0, 1.0) + 0.1 + 0.003 * (x - 340)
    signal = signal + rng.normal(0, 1e-3, x.size)
    once = scipy.integrate.cumulative_trapezoid(signal, x, initial=0)
    span = x[-1] - x[0]
    ends = (x < x[0] + 0.1 * span) | (x > x[-1] - 0.1 * span)
    fitted = np.polynomial.Polynomial.fit(x[ends], once[ends], 2)
    expected = scipy.integrate.simpson(once - fitted(x), x=x)
    # Simpson's rule and trapezoids differ on uneven points of a rough curve only.
    assert double_integral(x, signal).value == pytest.approx(expected, rel=2e-4)


@pytest.mark.parametrize("order", [1, 2, "asymmetric"])
def test_noise_of_the_integral_is_what_repeated_noise_does(order: int | str) -> None:
    clean = gaussian_derivative(X[::4], 340.0, 3.0)
    noise = 0.01 * np.abs(clean).max()
    rng = np.random.default_rng(11)
    values, said = [], []
    for _ in range(150):
        found = double_integral(X[::4], clean + rng.normal(0, noise, clean.size), baseline=Baseline(order))
        values.append(found.value)
        said.append(found.noise)
    # A standard deviation of 150 values is known to 6 %; the asymmetric baseline's weights move with the noise.
    assert np.std(values) == pytest.approx(np.mean(said), rel=0.2 if order != "asymmetric" else 0.4)


def test_slow_noise_widens() -> None:
    rng = np.random.default_rng(3)
    white = rng.normal(0, 0.01, X.size)
    slow = np.convolve(white, np.exp(-np.arange(40) / 8), mode="same")
    slow *= white.std() / slow.std()
    line = gaussian_derivative(X, 340.0, 3.0)
    assert double_integral(X, line + slow).noise > 2 * double_integral(X, line + white).noise


def test_lines_where_the_baseline_is_taken_are_said() -> None:
    line = gaussian_derivative(X, 322.0, 1.0) + gaussian_derivative(X, 340.0, 1.0)
    assert "lines_in_baseline" in [code for code, _ in double_integral(X, line).notes]
    good = double_integral(X, line, baseline=Baseline(1, ((325.0, 335.0), (345.0, 360.0))))
    assert "lines_in_baseline" not in [code for code, _ in good.notes]


def test_noise_alone_is_no_signal() -> None:
    noise = np.random.default_rng(2).normal(size=X.size)
    assert "no_signal" in [code for code, _ in double_integral(X, noise).notes]


def test_baseline_range_without_points_is_refused() -> None:
    with pytest.raises(InputError, match=r"0 points of trace lie in 400 to 410 mT"):
        double_integral(X, np.zeros(X.size), baseline=Baseline(1, ((400.0, 410.0),)))


# Corrections ----------------------------------------------------------------------------------------


@pytest.mark.parametrize("g", [(2.0, 2.0, 2.0), (2.05, 2.05, 2.3), (1.5, 2.4, 3.0)])
def test_field_swept_factor_is_the_engine_s_area(g: tuple[float, float, float]) -> None:
    """The spectrum of a powder, integrated by scipy over all of it, against that of g = 2."""

    def area(values: tuple[float, float, float]) -> float:
        sweep = Sweep(9500.0, (150.0, 550.0), points=8001, detect="absorption")
        one = Species(spins=(Spin(g=values),), width=Width(gaussian=2.0))
        found = simulate(one, sweep)
        return float(scipy.integrate.simpson(found.signal, x=found.fields))

    assert field_swept_factor(g) / 2 == pytest.approx(area(g) / area((2.0, 2.0, 2.0)), rel=2e-3)


def test_field_swept_factor_near_the_published_approximation() -> None:
    """2/3 sqrt(sum g^2 / 3) + 1/9 sum g: R. Aasa, T. Vanngard (1975), from memory; good to a few parts in 1000."""
    for g in ((2.04, 2.06, 2.26), (1.8, 2.0, 2.4)):
        published = 2 / 3 * math.sqrt(sum(v * v for v in g) / 3) + sum(g) / 9
        assert field_swept_factor(g) == pytest.approx(published, rel=5e-3)
    assert field_swept_factor((2.0036,)) == pytest.approx(2.0036, rel=1e-12)
    assert field_swept_factor((2.05, 2.26)) == pytest.approx(field_swept_factor((2.05, 2.05, 2.26)), rel=1e-12)


@pytest.mark.parametrize("S", [0.5, 1.0, 2.5])
@pytest.mark.parametrize("temperature", [1.0, 4.2, 77.0])
def test_spin_factor_is_the_sum_over_transitions(S: float, temperature: float) -> None:
    """sum over m of |<m|S_+|m-1>|^2 (p_(m-1) - p_m) with Boltzmann's populations of an even ladder."""
    frequency = 9500.0
    m = np.arange(-S, S + 1)
    p = np.exp(-m * frequency / (K_B_OVER_H * temperature))
    p /= p.sum()
    ladder = S * (S + 1) - m[1:] * (m[1:] - 1)
    expected = float(ladder @ (p[:-1] - p[1:])) * K_B_OVER_H
    assert spin_factor(S, frequency, temperature) == pytest.approx(expected, rel=1e-10)
    assert spin_factor(S, frequency, 1e9) * 1e9 == pytest.approx(S * (S + 1) * 2 / 3 * frequency, rel=1e-6)


def measured(name: str, amount: float, gain: float = 1.0, **conditions) -> Side:
    """A simulated species, scaled by its conditions as a spectrometer would."""
    g, width = conditions.pop("tensor", (2.0, 2.0, 2.0)), conditions.pop("width", 2.0)
    sweep = Sweep(9500.0, (250.0, 400.0), points=3001, temperature=conditions.get("temperature"))
    S = conditions.get("S", 0.5)
    one = Species(spins=(Spin(S=S, g=g),), width=Width(gaussian=width))
    signal = simulate(one, sweep).signal * amount * gain
    signal = (
        signal * conditions.get("scans", 1) * math.sqrt(conditions.get("power", 1)) * conditions.get("modulation", 1)
    )
    integral = double_integral(sweep.fields, signal, name=name)
    return Side(name, "derivative", Conditions(frequency=9500.0, gain=gain, g=g, **conditions), integral)


def test_known_amounts_come_back() -> None:
    """Every condition differs between the two; the models' own weights are what the corrections undo."""
    first = measured(
        "a", 7.0, gain=500.0, scans=4, power=2.0, modulation=0.2, temperature=20.0, tensor=(2.0, 2.1, 2.3), width=3.0
    )
    second = measured("b", 2.0, gain=100.0, scans=9, power=8.0, modulation=0.5, temperature=4.0, S=1.5)
    found = compare_spins(first, second)
    assert found.good
    assert found.ratio is not None
    assert found.ratio.value == pytest.approx(3.5, rel=3e-3)
    assert {f.name for f in found.factors} >= {"gain", "scans", "modulation", "microwave power", "S(S+1)"}


def test_a_condition_of_one_side_only_is_refused() -> None:
    first, second = measured("a", 1.0, gain=10.0), measured("b", 1.0, gain=10.0)
    bare = Side("b", "derivative", Conditions(frequency=9500.0, g=(2.0,)), second.integral)
    with pytest.raises(InputError, match=r"gain: not known for b, .*--reference-gain"):
        compare_spins(first, bare)


def test_unstated_conditions_are_named() -> None:
    side = measured("a", 1.0)
    bare = Side("a", "derivative", Conditions(), side.integral)
    found = compare_spins(bare, bare)
    codes = {code for code, _ in found.notes}
    assert {"taken_as_equal", "g_unknown", "spin_half", "temperature"} <= codes
    assert found.ratio is not None
    assert found.ratio.value == pytest.approx(1.0)


def test_models_with_and_without_temperature() -> None:
    thermal = FittedArea(3.0, 0.1, {}, thermal=True)
    plain = FittedArea(2.0, 0.1, {}, thermal=False)

    def side(area: FittedArea, temperature: float | None) -> Side:
        return Side("a", "derivative", Conditions(9500.0, temperature), None, area)

    found = compare_spins(side(plain, 10.0), side(plain, 20.0)).fitted
    assert found is not None
    # The colder one has twice the signal a spin: half the spins.
    assert found.value == pytest.approx(0.5)
    with pytest.raises(InputError, match="no temperature"):
        compare_spins(side(thermal, 10.0), side(plain, None))


# Fitted areas ---------------------------------------------------------------------------------------


def test_fitted_area_scatters_as_it_says() -> None:
    """Fits to 40 draws of noise: the areas' standard deviation is known to 11 %."""
    values, said = [], []
    for seed in range(40):
        signal, _ = noisy(seed)
        one = job(trace(signal))
        area = fitted_area(one, fit(one, simulate=stub), simulate=stub)
        values.append(area.value)
        said.append(area.uncertainty)
    # The stand-in's lines have unit area each, so that the area is the scale.
    assert np.mean(values) == pytest.approx(SCALE, abs=4 * np.mean(said) / math.sqrt(40))
    assert np.std(values) == pytest.approx(np.mean(said), rel=0.3)


def test_areas_of_two_species_with_known_amounts() -> None:
    model = (species(), species(g=(2.03, 2.03, 2.03), name="s", amount=0.4, width=0.6))
    signal = clean_signal(*model)
    signal = signal + level(signal, 60.0) * np.random.default_rng(8).normal(size=FIELDS.size)
    start = (species(), species(g=(2.031, 2.031, 2.031), name="s", amount=0.3, width=0.6))
    one = job(trace(signal), model=start, vary=("r.g", "s.g", "s.amount"))
    outcome = fit(one, simulate=stub)
    area = fitted_area(one, outcome, simulate=stub)
    assert area.value == pytest.approx(1.4 * SCALE, abs=4 * area.uncertainty)
    part, sigma = area.fractions["s"]
    assert sigma is not None
    assert part == pytest.approx(0.4 / 1.4, abs=4 * sigma)
    assert sum(p for p, _ in area.fractions.values()) == pytest.approx(1.0)
