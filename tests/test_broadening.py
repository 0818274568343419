"""Widths from spreads and hidden hyperfine, against closed forms and plain averages over the distribution.

Sources: the definitions of the conventions page; a Gaussian distribution of g alone moves a line by
dB/B = -dg/g, so its FWHM in field is B w/g (A. Abragam, B. Bleaney, Electron Paramagnetic Resonance of
Transition Ions, 1970, on broadening by distributed parameters; from memory).
"""

from dataclasses import replace
from itertools import product

import numpy as np
import pytest
from scipy import constants
from scipy.spatial.transform import Rotation

from spinfit.lineshape import GAUSSIAN_FWHM
from spinfit.species import Nucleus, Species, Spin, Spread, Width
from spinfit.spectrum import simulate
from spinfit.sweep import Sample, Sweep

MU_B = constants.value("Bohr magneton in Hz/T") * 1e-9  # MHz/mT
FWHM_PER_SIGMA = 2 * np.sqrt(2 * np.log(2))


def far(a: np.ndarray, b: np.ndarray) -> float:
    """Return the largest difference relative to the largest value."""
    return float(np.abs(a - b).max() / np.abs(b).max())


def wider(width: float, fwhm: float) -> Width:
    """Return a Gaussian width (peak to peak) with a further FWHM, mT, in quadrature."""
    return Width(gaussian=float(np.hypot(width, fwhm / GAUSSIAN_FWHM)))


def averaged(species: Species, sweep: Sweep, change, points: int = 31) -> np.ndarray:
    """Return the spectrum averaged over a Gaussian; `change(species, t)` moves it by t FWHM."""
    x = np.linspace(-4, 4, points)
    weight = np.exp(-0.5 * x**2)
    signals = [simulate(change(species, float(t / FWHM_PER_SIGMA)), sweep).signal for t in x]
    return np.average(signals, axis=0, weights=weight)


def test_hidden_hyperfine_of_an_isotropic_g_is_a_gaussian() -> None:
    sweep = Sweep(9500.0, (330.0, 350.0), 400)
    spin = Spin(g=(2.0,))
    hidden = simulate(Species("s", (spin,), width=Width(gaussian=0.6, hidden_hyperfine=(30.0,))), sweep)
    plain = simulate(Species("s", (spin,), width=wider(0.6, 30.0 / (2.0 * MU_B))), sweep)
    assert far(hidden.signal, plain.signal) < 1e-3


@pytest.mark.parametrize("axis", range(3))
def test_hidden_hyperfine_along_an_axis_of_a_crystal(axis: int) -> None:
    g, hidden = (2.0, 2.1, 2.3), (20.0, 45.0, 70.0)
    start = tuple(float(v) for v in np.eye(3)[axis])
    turn = tuple(float(v) for v in np.eye(3)[(axis + 1) % 3])
    sample = Sample(form="crystal", start=start, axis=turn)
    sweep = Sweep(9500.0, (280.0, 350.0), 1400)
    got = simulate(Species("s", (Spin(g=g),), width=Width(gaussian=0.6, hidden_hyperfine=hidden)), sweep, sample)
    width = wider(0.6, hidden[axis] / (g[axis] * MU_B))
    assert far(got.signal, simulate(Species("s", (Spin(g=g),), width=width), sweep, sample).signal) < 1e-3


@pytest.mark.parametrize("axis", range(3))
def test_spread_of_g_along_an_axis_of_a_crystal(axis: int) -> None:
    g, spread = (2.0, 2.1, 2.3), (0.006, 0.012, 0.02)
    start = tuple(float(v) for v in np.eye(3)[axis])
    turn = tuple(float(v) for v in np.eye(3)[(axis + 1) % 3])
    sample = Sample(form="crystal", start=start, axis=turn)
    sweep = Sweep(9500.0, (280.0, 350.0), 1400)
    narrow = Species("s", (Spin(g=g),), width=Width(gaussian=0.6))
    got = simulate(replace(narrow, spread=Spread(g=spread)), sweep, sample)
    field = 9500.0 / (g[axis] * MU_B)
    width = wider(0.6, field * spread[axis] / g[axis])
    assert far(got.signal, simulate(replace(narrow, width=width), sweep, sample).signal) < 1e-3


def test_spread_of_g_in_a_powder() -> None:
    species = Species("s", (Spin(g=(2.02, 2.06, 2.25)),), width=Width(gaussian=0.6))
    sweep = Sweep(9500.0, (285.0, 350.0), 800)
    got = simulate(replace(species, spread=Spread(g=(0.0, 0.0, 0.02))), sweep)

    def change(one: Species, t: float) -> Species:
        return replace(one, spins=(Spin(g=(2.02, 2.06, 2.25 + 0.02 * t)),))

    assert far(got.signal, averaged(species, sweep, change)) < 2e-3


def test_spread_of_D_in_a_powder() -> None:
    spin = Spin(S=1, g=(2.0,), D=1500.0, E=-200.0)
    species = Species("s", (spin,), width=Width(gaussian=1.5))
    sweep = Sweep(9500.0, (250.0, 430.0), 800)
    got = simulate(replace(species, spread=Spread(D=100.0)), sweep)

    def change(one: Species, t: float) -> Species:
        return replace(one, spins=(replace(spin, D=1500.0 + 100.0 * t),))

    assert far(got.signal, averaged(species, sweep, change)) < 2e-3


@pytest.mark.parametrize("correlation", [-0.8, 0.0, 0.8])
def test_correlated_spreads_of_g_and_A(correlation: float) -> None:
    """One direction along z: widths of the m_I lines differ by the sign of m_I when g and A go together."""
    nucleus = Nucleus(isotope="63Cu", A=(-30.0, -30.0, -500.0))
    spin = Spin(g=(2.05, 2.05, 2.25))
    sample = Sample(form="crystal", start=(0.0, 0.0, 1.0), axis=(1.0, 0.0, 0.0))
    sweep = Sweep(9500.0, (260.0, 345.0), 1700)
    species = Species("s", (spin,), (nucleus,), width=Width(gaussian=1.0))
    wide = Spread(g=(0.0, 0.0, 0.02), A=(0.0, 0.0, 40.0), correlation_g_A=correlation)
    got = simulate(replace(species, spread=wide), sweep, sample)
    x = np.linspace(-3.6, 3.6, 25)
    total, weights = 0.0, 0.0
    for a in x:
        for b in x:
            weight = np.exp(-0.5 * (a * a + b * b))
            if weight < 1e-4:
                continue
            g_z = 2.25 + 0.02 * a / FWHM_PER_SIGMA
            a_z = -500.0 + 40.0 * (correlation * a + np.sqrt(1 - correlation**2) * b) / FWHM_PER_SIGMA
            one = Species(
                "s", (Spin(g=(2.05, 2.05, g_z)),), (replace(nucleus, A=(-30.0, -30.0, a_z)),), width=Width(1.0)
            )
            total = total + weight * simulate(one, sweep, sample).signal
            weights += weight
    assert far(got.signal, total / weights) < 1e-2


def test_widths_that_fields_do_not_tell_of_are_followed() -> None:
    # E spread about zero: fields and weights do not depend on azimuth, widths go with its cosine
    sweep = Sweep(9500.0, (230.0, 440.0), 700)
    spin = Spin(S=1, g=(2.0,), D=1500.0)
    narrow = Species("s", (spin,), width=Width(gaussian=1.0))
    got = simulate(replace(narrow, spread=Spread(E=100.0)), sweep, tolerance=1e-4).signal
    want = averaged(narrow, sweep, lambda one, t: replace(one, spins=(replace(spin, E=100.0 * t),)))
    assert far(got, want) < 1e-3


def test_a_spread_of_zero_changes_nothing() -> None:
    species = Species("s", (Spin(g=(2.0, 2.05, 2.2)),), width=Width(gaussian=0.6))
    sweep = Sweep(9500.0, (290.0, 350.0), 300)
    same = simulate(replace(species, spread=Spread(g=(0.0, 0.0, 0.0))), sweep).signal
    assert np.array_equal(same, simulate(species, sweep).signal)


@pytest.mark.parametrize("angle", [25.0, 60.0])
def test_spread_of_tilt_is_the_average_over_turned_crystals(angle: float) -> None:
    """Small turns about three axes: a line moves by its first derivative, so that the average is a wider line."""
    spin = Spin(S=1.5, g=(1.98, 2.0, 2.04), D=2500.0, E=300.0)
    sweep = Sweep(9500.0, (100.0, 520.0), 2400)
    sample = Sample(form="crystal", start=(0.2, 0.1, 1.0), axis=(0.0, 1.0, 0.0), angles=(np.radians(angle),))
    narrow = Species("s", (spin,), width=Width(gaussian=2.5))
    fwhm = np.radians(0.6)
    got = simulate(replace(narrow, spread=Spread(tilt=float(fwhm))), sweep, sample)
    # 7 nodes of Gauss-Hermite about each axis; turning the crystal or both fields the other way round is the same.
    x, weight = np.polynomial.hermite_e.hermegauss(7)
    sigma = fwhm / FWHM_PER_SIGMA
    total = 0.0
    for (a, p), (b, q), (c, r) in product(zip(x, weight, strict=True), repeat=3):
        turn = Rotation.from_rotvec(sigma * np.array([a, b, c]))
        start, axis = (tuple(map(float, turn.apply(v))) for v in (sample.start, sample.axis))
        turned = replace(sample, start=start, axis=axis)
        total = total + p * q * r * simulate(narrow, sweep, turned).signal
    plain = simulate(narrow, sweep, sample).signal
    expected = total / weight.sum() ** 3
    assert far(got.signal, expected) < 2e-2
    assert far(plain, expected) > 0.1


def test_an_s_half_line_of_isotropic_g_does_not_feel_tilt() -> None:
    sweep, sample = Sweep(9500.0, (330.0, 350.0), 400), Sample(form="crystal")
    narrow = Species("s", (Spin(g=(2.0,)),), width=Width(gaussian=0.6))
    turned = replace(narrow, spread=Spread(tilt=0.02))
    assert far(simulate(turned, sweep, sample).signal, simulate(narrow, sweep, sample).signal) < 1e-3
