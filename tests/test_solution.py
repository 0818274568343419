"""Species in solution: fields by closed forms and full matrices, intensities by counting, widths by m."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from reference import gaussian, plain_resonances, plain_weights
from scipy import constants
from scipy.interpolate import CubicSpline
from scipy.optimize import brentq
from scipy.special import comb

from spinfit.errors import InputError
from spinfit.hamiltonian import systems
from spinfit.isotopes import isotope, natural
from spinfit.isotropic import core_of, exact_lines, isotropic
from spinfit.nuclei import Site, kinds
from spinfit.solution import pattern, settle, solution, third_order
from spinfit.species import Exchange, Nucleus, Species, Spin, Spread, Width
from spinfit.spectrum import simulate
from spinfit.sweep import Sample, Sweep
from spinfit.units import MU_B_OVER_H, MU_N_OVER_H

NU = 9500.0
G = 2.0023
GAMMA = G * MU_B_OVER_H
FREE = NU / GAMMA
Z = (0.0, 0.0, 1.0)
LIQUID = Sample(form="solution")


def radical(*nuclei: Nucleus, width: Width | None = None, g: float = G) -> Species:
    return Species(spins=(Spin(0.5, (g,)),), nuclei=nuclei, width=width or Width(gaussian=0.02))


def lines_of(species: Species, low: float = 1.0, high: float = 700.0, **how: object) -> np.ndarray:
    """Return (field, weight, m) of every exact line of a species whose nuclei are single, by field."""
    plain = isotropic(species)
    resolved = {k: kinds(one) for k, one in enumerate(plain.nuclei)}
    core = core_of(plain, tuple(Site(k, 0, resolved[k][0].spin) for k in resolved), resolved)
    lines, _ = exact_lines(core, NU, (low, high), **how)
    order = np.argsort(lines.field)
    return np.array([lines.field[order], lines.weight[order], lines.m[order]])


def strong(lines: np.ndarray) -> np.ndarray:
    return lines[:, lines[1] > 0.01 * lines[1].max()]


def breit_rabi(spin: float, a: float, g_n: float, projection: float, field: float, upper: bool) -> float:
    """Return the energy, MHz: G. Breit, I. I. Rabi, Phys. Rev. 38, 2082 (1931), g_n mu_N with its sign."""
    x = (GAMMA + g_n * MU_N_OVER_H) * field / (a * (spin + 0.5))
    shift = -a / 4 - g_n * MU_N_OVER_H * field * projection
    if abs(projection) == spin + 0.5:
        return shift + 0.5 * a * (spin + 0.5) * (1 + math.copysign(1, projection) * x)
    root = 0.5 * a * (spin + 0.5) * math.sqrt(1 + 4 * projection * x / (2 * spin + 1) + x * x)
    return shift + math.copysign(root, 1 if upper else -1)


@pytest.mark.parametrize(
    ("name", "a"), [("1H", 1420.405751768), ("2H", 218.26), ("63Cu", 600.0), ("51V", 320.0), ("209Bi", 900.0)]
)
def test_one_nucleus_against_breit_rabi(name: str, a: float) -> None:
    """Hydrogen's A of the free atom is a clock value (from memory); the others are invented."""
    one = isotope(name)
    expected = []
    for m in np.arange(-one.spin, one.spin + 1):  # electron up and down with the same nuclear m

        def gap(b: float, m: float = m, spin: float = one.spin, g_n: float = one.g_n) -> float:
            return breit_rabi(spin, a, g_n, m + 0.5, b, True) - breit_rabi(spin, a, g_n, m - 0.5, b, False) - NU

        expected.append(brentq(gap, 10, 700, xtol=1e-11))
    found = strong(lines_of(radical(Nucleus(name, A=(a,)))))
    for m, field in zip(np.arange(-one.spin, one.spin + 1), expected, strict=True):
        k = np.abs(found[0] - field).argmin()
        assert found[0, k] == pytest.approx(field, abs=1e-7)
        assert found[2, k] == m


def test_a_negative_coupling_reverses_the_order_of_m() -> None:
    assert strong(lines_of(radical(Nucleus("14N", A=(45.0,)))))[2].tolist() == [1, 0, -1]
    assert strong(lines_of(radical(Nucleus("14N", A=(-45.0,)))))[2].tolist() == [-1, 0, 1]


def test_nitroxide_to_second_order() -> None:
    """h nu = g mu_B B + a m + a^2 [I(I+1) - m^2] / 2 nu; third order is a^3/nu^2 (R. W. Fessenden, 1962)."""
    a = 45.0
    found = strong(lines_of(radical(Nucleus("14N", A=(a,)))))
    expected = [(NU - a * m - a * a * (2 - m * m) / (2 * NU)) / GAMMA for m in (1, 0, -1)]
    np.testing.assert_allclose(found[0], expected, atol=2 * a**3 / NU**2 / GAMMA)
    # the gaps differ by a^2/nu, the larger one at high field
    assert np.diff(found[0], 2) == pytest.approx(a * a / NU / GAMMA, rel=0.01)


SYSTEMS = {
    "manganese": Species(spins=(Spin(2.5, (2.0,)),), nuclei=(Nucleus("55Mn", A=(-250.0,)),)),
    "two nuclei": radical(Nucleus("63Cu", A=(-240.0,)), Nucleus("14N", A=(40.0,))),
    "biradical": Species(
        spins=(Spin(0.5, (2.006,)), Spin(0.5, (2.008,))),
        exchange=(Exchange(J=60.0),),
        nuclei=(Nucleus("14N", A=(45.0,)), Nucleus("15N", A=(-63.0,), couples_to=2)),
    ),
    "hydrogen": radical(Nucleus("1H", A=(1420.0,))),
}


@pytest.mark.parametrize("temperature", [None, 1.5])
@pytest.mark.parametrize("mode", ["perpendicular", "parallel"])
@pytest.mark.parametrize("name", SYSTEMS)
def test_lines_against_full_matrices(name: str, mode: str, temperature: float | None) -> None:
    """Every line that is not forbidden, by dense diagonalisation of the product space."""
    species = SYSTEMS[name]
    (system,) = systems(species)
    low, high = (250.0, 420.0) if mode == "perpendicular" else (260.0, 400.0)
    plain = plain_resonances(system, Z, NU, (low, high), points=800)
    weights = plain_weights(system, Z, plain, mode=mode, temperature=temperature)
    found = lines_of(species, low, high, microwave=mode, temperature=temperature)
    assert len(found[0])
    seen = weights > 1e-4 * weights.max()

    # lines that coincide (degenerate ones) are compared by their sum, in the order of field
    def summed(fields: np.ndarray, heights: np.ndarray) -> np.ndarray:
        return gaussian(np.linspace(low, high, 4001)[:, None] - fields, 0.5, 0) @ heights

    expected = summed(np.array([line.field for line in plain])[seen], weights[seen])
    np.testing.assert_allclose(summed(found[0], found[1]), expected, rtol=0, atol=1e-3 * expected.max())


def test_parallel_mode_of_hydrogen() -> None:
    """Only M = 0 to M = 0 is allowed: sqrt(a^2 + x^2) = nu with x = (g mu_B + g_n mu_N) B / h (closed form)."""
    a, g_n = 1420.0, isotope("1H").g_n
    found = lines_of(radical(Nucleus("1H", A=(a,))), microwave="parallel")
    assert found[0] == pytest.approx([math.sqrt(NU**2 - a * a) / (GAMMA + g_n * MU_N_OVER_H)], abs=1e-8)


@pytest.mark.parametrize("count", [1, 2, 3, 6, 9])
def test_equivalent_protons_are_binomial(count: int) -> None:
    nucleus = Nucleus("1H", A=(10.0,), count=count)
    share, linear, _, _, m = pattern(nucleus)
    for k in range(count + 1):
        assert share[m == k - count / 2].sum() == pytest.approx(comb(count, k) / 2**count)
    np.testing.assert_allclose(linear, 10.0 * m)
    # and in the spectrum, lines apart by a: areas between the middles
    sweep = Sweep(NU, (FREE - 5, FREE + 5), 8001, detect="absorption")
    for treat in ("exact", "second order"):
        spectrum = simulate(radical(replace(nucleus, treat=treat)), sweep, LIQUID)
        order = (FREE - spectrum.fields) * GAMMA / 10.0 + count / 2
        areas = [spectrum.signal[np.rint(order) == k].sum() for k in range(count + 1)]
        np.testing.assert_allclose(areas / np.sum(areas), comb(count, np.arange(count + 1)) / 2**count, atol=2e-4)


def test_equivalent_deuterons_by_convolution() -> None:
    share, _, _, _, m = pattern(Nucleus("2H", A=(2.0,), count=4))
    expected = np.ones(1)
    for _ in range(4):
        expected = np.convolve(expected, np.ones(3) / 3)
    np.testing.assert_allclose([share[m == k].sum() for k in range(-4, 5)], expected, rtol=1e-12)


@pytest.mark.parametrize("spin", [0.5, 2.5])
@pytest.mark.parametrize("a", [8.0, -30.0])
def test_weak_nuclei_against_exact_ones(spin: float, a: float) -> None:
    """Second order beside a strongly coupled nucleus misses no more than `third_order` says."""
    species = Species(
        spins=(Spin(spin, (2.0,)),),
        nuclei=(Nucleus("51V", A=(-150.0,), treat="exact"), Nucleus("1H", A=(a,), count=2, treat="exact")),
        width=Width(gaussian=0.1),
    )
    weak = replace(species, nuclei=(species.nuclei[0], replace(species.nuclei[1], treat="second order")))
    first = replace(species, nuclei=(species.nuclei[0], replace(species.nuclei[1], treat="first order")))
    sweep = Sweep(NU, (280, 400), 6001)
    exact, second, linear = (solution(one, sweep, sweep.fields, tolerance=1e-4)[0] for one in (species, weak, first))
    # a shift of all lines by d changes a Gaussian derivative (sigma = 0.05) by at most 1.74 d / sigma of its top
    shift = third_order(species.nuclei, NU, 2.0)[1]
    missed = np.abs(second - exact).max() / np.abs(exact).max()
    assert missed < 1.74 * shift / 0.05 + 3e-4
    assert np.abs(linear - exact).max() / np.abs(exact).max() > 3 * missed


def test_many_groups_against_the_product_of_their_cosines() -> None:
    """To first order the transform of the spectrum is the line's times cos(a k / 2 gamma)^n of every group."""
    groups = [(15.2, 4), (13.9, 4), (6.1, 6), (2.3, 9), (1.1, 2), (0.8, 9)]
    nuclei = tuple(Nucleus("1H", A=(a,), count=n, treat="first order") for a, n in groups)
    sweep = Sweep(NU, (FREE - 8, FREE + 8), 4096)
    got, report, _ = solution(radical(*nuclei), sweep, sweep.fields)
    fine = np.arange(2**15) * 0.002 - 2**14 * 0.002
    k = 2 * np.pi * np.fft.rfftfreq(len(fine), 0.002)
    transform = 1j * k * np.exp(-0.5 * (0.01 * k) ** 2)
    for a, n in groups:
        transform = transform * np.cos(0.5 * k * a / GAMMA) ** n
    signal = np.fft.fftshift(np.fft.irfft(transform, len(fine))) / 0.002
    expected = CubicSpline(fine, signal)(sweep.fields - FREE)
    expected *= (got @ expected) / (expected @ expected)
    np.testing.assert_allclose(got, expected, rtol=0, atol=1e-3 * np.abs(expected).max())
    assert report["lines"] < np.prod([n + 1 for _, n in groups])


def test_large_radicals_by_choice_of_our_own_agree_with_all_exact() -> None:
    nuclei = (Nucleus("14N", A=(30.0,), count=2), Nucleus("1H", A=(9.0,), count=4), Nucleus("1H", A=(1.5,), count=3))
    sweep = Sweep(NU, (FREE - 6, FREE + 6), 3001)
    chosen, report, warnings = solution(radical(*nuclei), sweep, sweep.fields)
    exact = radical(*(replace(one, treat="exact") for one in nuclei))
    expected, _, _ = solution(exact, sweep, sweep.fields, tolerance=1e-4)
    np.testing.assert_allclose(chosen, expected, rtol=0, atol=1e-3 * np.abs(expected).max())
    assert [one["treat"] for one in report["nuclei"]] == ["exact", "exact", "second order"]
    assert warnings == ()


def test_equally_coupled_nuclei_count_as_equivalent() -> None:
    apart = isotropic(radical(Nucleus("1H", A=(9.0,), name="x"), Nucleus("1H", A=(5.0, 9.0, 13.0), count=2)))
    assert apart.nuclei == (Nucleus("1H", A=(9.0,), P=(0.0,), count=3),)


@pytest.mark.parametrize("temperature", [None, 0.3])
def test_area_of_a_line(temperature: float | None) -> None:
    """(g mu_B)^2 / 4 x difference / (g mu_B), the difference 1/2, or tanh(h nu / 2kT) (closed form)."""
    sweep = Sweep(NU, (FREE - 2, FREE + 2), 4001, temperature=temperature, detect="absorption")
    spectrum = simulate(radical(), sweep, LIQUID)
    share = 0.5 if temperature is None else math.tanh(constants.h * NU * 1e6 / (2 * constants.k * temperature))
    assert np.trapezoid(spectrum.signal, spectrum.fields) == pytest.approx(0.25 * GAMMA * share, rel=1e-6)


def test_area_does_not_depend_on_nuclei() -> None:
    sweep = Sweep(NU, (FREE - 40, FREE + 40), 16001, detect="absorption")
    bare, rich = (
        simulate(radical(*nuclei, width=Width(gaussian=0.2)), sweep, LIQUID).signal.sum()
        for nuclei in ((), (Nucleus(element="Cu", A=(-200.0,)), Nucleus("1H", A=(5.0,), count=3)))
    )
    assert rich == pytest.approx(bare, rel=5e-3)  # the weight's own field dependence over 40 mT


def test_natural_isotopes_scale_with_their_moments() -> None:
    species = radical(Nucleus(element="N", A=(45.0,)), width=Width(gaussian=0.05))
    sweep = Sweep(NU, (FREE - 4, FREE + 4), 8001, detect="absorption")
    spectrum = simulate(species, sweep, LIQUID)
    n14, n15 = natural("N")
    a15 = 45.0 * n15.g_n / n14.g_n
    expected = np.zeros(len(spectrum.fields))
    for one, a in ((n14, 45.0), (n15, a15)):
        for m in np.arange(-one.spin, one.spin + 1):
            field = (NU - a * m - a * a * (one.spin * (one.spin + 1) - m * m) / (2 * NU)) / GAMMA
            expected += one.abundance / (2 * one.spin + 1) * gaussian(spectrum.fields - field, 0.05, 0)
    expected *= (expected @ spectrum.signal) / (expected @ expected)
    np.testing.assert_allclose(spectrum.signal, expected, rtol=0, atol=3e-3 * expected.max())


def test_widths_go_by_m() -> None:
    """Peak-to-peak widths a + b m + c m^2 read off the derivative, m = 1, 0, -1 from low field."""
    a, b, c = 0.10, -0.03, 0.02
    species = radical(Nucleus("14N", A=(45.0,)), width=Width(a=a, b=b, c=c))
    sweep = Sweep(NU, (FREE - 5, FREE + 5), 40001)
    spectrum = simulate(species, sweep, LIQUID, tolerance=1e-4)
    for m in (1, 0, -1):
        near = np.abs(spectrum.fields - (FREE - 45.0 * m / GAMMA)) < 0.8
        fields, signal = spectrum.fields[near], spectrum.signal[near]
        assert fields[signal.argmin()] - fields[signal.argmax()] == pytest.approx(a + b * m + c * m * m, abs=6e-4)
    assert spectrum.report["species"]["widths"] == 3


def test_widths_go_by_the_first_nucleus_even_when_it_is_weak() -> None:
    """m is the sum over two equivalent protons; a second nucleus, strongly coupled, does not count."""
    nuclei = (Nucleus("1H", A=(20.0,), count=2, treat="second order"), Nucleus("31P", A=(400.0,)))
    species = radical(*nuclei, width=Width(a=0.1, b=0.04))
    sweep = Sweep(NU, (FREE - 12, FREE + 12), 96001)
    spectrum = simulate(species, sweep, LIQUID, tolerance=1e-4)
    centres = lines_of(radical(nuclei[1]))
    for m in (1, 0, -1):
        for centre in strong(centres)[0]:
            near = np.abs(spectrum.fields - (centre - 20.0 * m / GAMMA)) < 0.3
            fields, signal = spectrum.fields[near], spectrum.signal[near]
            assert fields[signal.argmin()] - fields[signal.argmax()] == pytest.approx(0.1 + 0.04 * m, abs=2e-3)


def test_gaussian_and_lorentzian_convolve_with_the_width_by_m() -> None:
    species = radical(width=Width(a=0.05, lorentzian=0.03, gaussian=0.1))
    same = radical(width=Width(lorentzian=0.08, gaussian=0.1))
    sweep = Sweep(NU, (FREE - 2, FREE + 2), 2001, modulation=0.05, phase=0.3)
    a, b = (simulate(one, sweep, LIQUID).signal for one in (species, same))
    np.testing.assert_allclose(a, b, rtol=0, atol=1e-12 * np.abs(a).max())


def test_hidden_hyperfine_is_taken_to_field() -> None:
    """FWHM in MHz over g mu_B: 2.8 MHz with g = 2 are 0.1 mT."""
    species = radical(width=Width(hidden_hyperfine=(3.0,)))
    sweep = Sweep(NU, (FREE - 2, FREE + 2), 40001, detect="absorption")
    spectrum = simulate(species, sweep, LIQUID)
    above = spectrum.fields[spectrum.signal > 0.5 * spectrum.signal.max()]
    assert np.ptp(above) == pytest.approx(3.0 / GAMMA, abs=3e-4)


def test_what_averages_out_does_not_show() -> None:
    sweep = Sweep(NU, (300, 380), 2001)
    full = Species(
        spins=(Spin(1.0, (1.9, 2.0, 2.1), D=3000.0, E=500.0, g_tilt=(0.1, 0.2, 0.3), stevens=(((2, 1), 50.0),)),),
        nuclei=(Nucleus("14N", A=(10.0, 20.0, 60.0), A_tilt=(1.0, 0.5, 0.2), P=(-1.0, -1.0, 2.0)),),
        spread=Spread(g=(0.1,), D=100.0),
        width=Width(gaussian=0.5),
    )
    plain = Species(spins=(Spin(1.0, (2.0,)),), nuclei=(Nucleus("14N", A=(30.0,)),), width=Width(gaussian=0.5))
    a, b = (simulate(one, sweep, LIQUID).signal for one in (full, plain))
    np.testing.assert_allclose(a, b, rtol=0, atol=1e-9 * np.abs(b).max())


def test_strong_exchange_halves_the_couplings() -> None:
    """J much larger than a: five lines 1:2:3:2:1 spaced by a/2 (D. J. E. Ingram's textbook case; common practice)."""
    species = Species(
        spins=(Spin(0.5, (G,)),) * 2,
        exchange=(Exchange(J=1e5),),
        nuclei=(Nucleus("14N", A=(45.0,), name="x"), Nucleus("14N", A=(45.0,), couples_to=2)),
        width=Width(gaussian=0.05),
    )
    sweep = Sweep(NU, (FREE - 3, FREE + 3), 6001, detect="absorption")
    spectrum = simulate(species, sweep, LIQUID)
    order = np.rint((FREE - spectrum.fields) * GAMMA / 22.5)
    areas = np.array([spectrum.signal[order == m].sum() for m in (2, 1, 0, -1, -2)])
    np.testing.assert_allclose(areas / areas.sum(), np.array([1, 2, 3, 2, 1]) / 9, atol=2e-3)


def test_values_do_not_depend_on_the_window() -> None:
    species = radical(
        Nucleus("14N", A=(45.0,)), Nucleus("1H", A=(3.0,), count=2), width=Width(gaussian=0.1, lorentzian=0.05)
    )
    wide = simulate(species, Sweep(NU, (FREE - 5, FREE + 5), 1001), LIQUID)
    part = wide.fields[(wide.fields > FREE + 1.4) & (wide.fields < FREE + 1.7)]
    narrow = simulate(species, Sweep(NU, (FREE - 5, FREE + 5), 1001), LIQUID, fields=part).signal
    np.testing.assert_allclose(
        narrow, np.interp(part, wide.fields, wide.signal), rtol=0, atol=2e-3 * np.abs(wide.signal).max()
    )


def test_lines_at_negative_field_show_near_zero() -> None:
    species = radical(width=Width(lorentzian=2.0), g=2.0)
    fields = np.linspace(0, 20, 401)
    signal = simulate(species, Sweep(100.0, (0, 20), 401, detect="absorption"), LIQUID, tolerance=1e-4).signal
    centre, half = 100.0 / (2.0 * MU_B_OVER_H), math.sqrt(3.0)
    expected = sum(half / ((fields - c) ** 2 + half**2) for c in (centre, -centre))
    expected *= (signal @ expected) / (expected @ expected)
    np.testing.assert_allclose(signal, expected, rtol=0, atol=2e-4 * expected.max())


def test_too_many_states_are_said_and_not_silent() -> None:
    nuclei = tuple(Nucleus("55Mn", A=(300.0 + 20 * k,)) for k in range(6))
    settled, warnings = settle(isotropic(radical(*nuclei)), NU, 1e-4)
    assert "exact" in {one.treat for one in settled.nuclei}
    assert "second order" in {one.treat for one in settled.nuclei}
    assert len(warnings) == sum(one.treat == "second order" for one in settled.nuclei)
    assert "is treated to second order, which may be" in warnings[0][1]


@pytest.mark.parametrize(
    ("width", "message"),
    [
        (Width(), "has no width"),
        (Width(a=0.1, b=0.2), r"width: the width a \+ b m \+ c m\^2 is -0.1 mT at m = -1"),
    ],
)
def test_widths_that_are_not_positive_are_refused(width: Width, message: str) -> None:
    with pytest.raises(InputError, match=message):
        simulate(radical(Nucleus("14N", A=(45.0,)), width=width), Sweep(NU, (330, 345)), LIQUID)
