"""Averages over distributed D and E against plain sums over the distribution, and against closed forms.

The reference of a spectrum is a trapezoid over the distribution, of spectra without any spread, with steps that
move every line by less than its own width; such a sum of a smooth function times a Gaussian converges
exponentially (L. N. Trefethen, J. A. C. Weideman, SIAM Rev. 56, 385 (2014), from memory).
"""

from dataclasses import replace

import numpy as np
import pytest
from scipy.stats import norm

from spinfit.broadening import broadening
from spinfit.derivatives import signal_changes
from spinfit.distribution import AVERAGED, averaged, axes, expanded, independent, moved, narrower, surplus
from spinfit.fitting.parameters import Binding
from spinfit.hamiltonian import systems
from spinfit.species import Species, Spin, Spread, Width
from spinfit.spectrum import simulate
from spinfit.sweep import Sample, Sweep

FWHM_PER_SIGMA = 2 * np.sqrt(2 * np.log(2))
PER_CM = 29979.2458  # MHz
TOLERANCE = 1e-3

TRIPLET = Species("s", (Spin(S=1, g=(2.0,), D=1500.0, E=-200.0),), width=Width(gaussian=1.0))
AXIAL = Species("s", (Spin(S=1, g=(2.0,), D=1500.0),), width=Width(gaussian=1.0))
FLAT = Species("s", (Spin(S=1, g=(2.0,), D=100.0),), width=Width(gaussian=2.0))
QUARTET = Species("s", (Spin(S=1.5, g=(2.0,), D=6000.0, E=600.0),), width=Width(gaussian=2.0))
SEXTET = Species("s", (Spin(S=2.5, g=(2.0,), D=0.3 * PER_CM, E=0.03 * PER_CM),), width=Width(gaussian=8.0))
ALLOWED = Sweep(9500.0, (230.0, 440.0), 700)
WIDE = Sweep(9500.0, (50.0, 550.0), 900)
LOW = Sweep(9500.0, (60.0, 300.0), 700)


def turned(*start: float) -> Sample:
    """Return a crystal with the field along a direction."""
    return Sample(form="crystal", start=start, axis=(start[1], -start[0], 0.0))


CASES = {
    "triplet": (TRIPLET, Spread(D=150.0), ALLOWED, Sample(), 81),
    "axial, spread of E": (AXIAL, Spread(E=100.0), ALLOWED, Sample(), 81),
    "D and E": (TRIPLET, Spread(D=150.0, E=60.0, correlation_D_E=1.0), ALLOWED, Sample(), 81),
    "through zero": (FLAT, Spread(D=400.0), replace(ALLOWED, field=(280.0, 400.0)), turned(0.6, 0.3, 1.0), 161),
    "quartet": (QUARTET, Spread(D=120.0), WIDE, turned(0.3, 0.2, 1.0), 121),
    "sextet": (SEXTET, Spread(D=0.06 * PER_CM), LOW, turned(0.3, 0.2, 1.0), 241),
}


def summed(species: Species, spread: Spread, sweep: Sweep, sample: Sample, points: int) -> np.ndarray:
    """Return the sum over D and E, which move together."""
    spin = species.spins[0]
    x = np.linspace(-4.5, 4.5, points)
    signals = []
    for t in x / FWHM_PER_SIGMA:
        there = replace(spin, D=spin.D + t * spread.D, E=spin.E + t * spread.E)
        signals.append(simulate(replace(species, spins=(there,)), sweep, sample, tolerance=3e-4).signal)
    return np.average(signals, axis=0, weights=np.exp(-0.5 * x**2))


@pytest.mark.parametrize("name", CASES)
def test_the_promise_holds_where_the_first_order_does_not(name: str) -> None:
    species, spread, sweep, sample, points = CASES[name]
    wide = replace(species, spread=spread)
    expected = summed(species, spread, sweep, sample, points)
    top = np.abs(expected).max()
    got = simulate(wide, sweep, sample, tolerance=TOLERANCE)
    assert np.abs(got.signal - expected).max() < TOLERANCE * top
    told = got.report["s"]["spreads"]
    assert told["nodes"] > 1
    assert told["estimated_error"] < TOLERANCE
    first = simulate(wide, sweep, sample, tolerance=TOLERANCE, spread_tolerance=np.inf)
    assert set(first.report["s"]["spreads"]) == {"first_order_errors"}
    error = np.abs(first.signal - expected).max() / top
    assert error > TOLERANCE
    assert error / 3 < sum(told["first_order_errors"].values()) < 3 * error


def test_narrow_spreads_are_left_to_the_first_order() -> None:
    got = simulate(replace(TRIPLET, spread=Spread(D=30.0)), ALLOWED)
    assert set(got.report["s"]["spreads"]) == {"first_order_errors"}
    assert len(got.report["s"]["systems"]) == 1
    assert "spreads" not in simulate(replace(TRIPLET, spread=Spread(g=(0.01,))), ALLOWED).report["s"]


def test_a_report_sums_the_work_of_all_nodes() -> None:
    one = simulate(replace(TRIPLET, spread=Spread(D=30.0)), ALLOWED).report["s"]["systems"][0]
    got = simulate(replace(TRIPLET, spread=Spread(D=150.0)), ALLOWED).report["s"]
    (joined,) = got["systems"]
    assert joined["directions"] >= got["spreads"]["nodes"] * one["directions"]
    assert joined["symmetry"] == one["symmetry"]


def test_a_spread_too_wide_is_warned_of(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("spinfit.distribution.MOST_NODES", 30)
    species, spread, sweep, sample, _ = CASES["sextet"]
    got = simulate(replace(species, spread=spread), sweep, sample)
    assert any(code == "accuracy" and "spreads are so wide" in text for code, text in got.warnings)


@pytest.mark.parametrize("halvings", [1, 2, 4])
def test_narrower_gaussians_sum_to_one_of_variance_1(halvings: int) -> None:
    """Against scipy's density, with values and derivatives by finite steps of a thousandth."""
    at, shares = np.array(narrower(halvings, 1e-4)).T
    field = np.linspace(-5.0, 5.0, 10001)
    density = shares @ norm.pdf(field, at[:, None], 0.5 ** (0.5 * halvings))
    got, expected = np.gradient(density, field), np.gradient(norm.pdf(field), field)
    assert np.abs(got - expected).max() < 1.1e-4 * expected.max()
    assert shares.sum() == pytest.approx(1.0, abs=1e-12)
    assert len(narrower(halvings, 1e-2)) < len(at)


def test_rules_of_all_levels_together_are_a_distribution_of_the_same_moments() -> None:
    total: dict = {}
    for levels in [(0, 0), (1, 0), (2, 0), (0, 1), (1, 1)]:
        for node, share in surplus(levels, 1e-5).items():
            total[node] = total.get(node, 0.0) + share
    share = np.array(list(total.values()))
    at, left = (np.array([node[k] for node in total]) for k in (0, 1))
    assert share.sum() == pytest.approx(1.0, abs=1e-10)
    assert share @ (at**2 + left) == pytest.approx(1.0, abs=2e-3)
    assert share @ (at[:, 0] * at[:, 1]) == pytest.approx(0.0, abs=1e-12)
    # extrapolated: nothing is left to widths of the first parameter, where the second one has a single node
    first = {node: s for levels in [(0, 0), (1, 0), (2, 0)] for node, s in surplus(levels, 1e-5).items()}
    assert len(first) == len({node for node in total if node.left[1] == 1.0})


@pytest.mark.parametrize("bends", [(0.03,), (0.2,), (0.03, 0.06)])
def test_lines_that_move_by_a_parabola(bends: tuple[float, ...]) -> None:
    """A line at x + b x^2 has the mean transform exp(-q^2/(2 + 4ibq))/sqrt(1 + 2ibq), by completing the square."""
    q = np.linspace(0.0, 12.0, 400)
    whole = np.exp(-0.5 * (0.2 * q) ** 2)

    def spectrum(node):
        out = whole.astype(complex)
        for x, s, b in zip(*node, bends, strict=True):
            out = out * np.exp(-1j * q * (x + b * x * x) - 0.5 * s * (q * (1 + 2 * b * x)) ** 2)
        return out

    def height(transform):
        return float(np.abs(transform).max())

    got = averaged(spectrum, height, [min(1.0, 4 * b) for b in bends], 1e-3)
    exact = whole.astype(complex)
    for b in bends:
        exact = exact * np.exp(-0.5 * q**2 / (1 + 2j * b * q)) / np.sqrt(1 + 2j * b * q)
    assert np.abs(got.total - exact).max() < 1e-3
    assert got.error < 1e-3
    assert sum(got.mixture.values()) == pytest.approx(1.0, abs=1e-9)


@pytest.mark.parametrize("correlation", [-1.0, -0.4, 0.0, 1.0])
def test_independent_parameters_have_the_covariance_of_the_spreads(correlation: float) -> None:
    spread = Spread(g=(0.01, 0.02), D=150.0, E=60.0, correlation_D_E=correlation)
    (own,) = broadening(replace(TRIPLET, spread=spread))
    assert own.spread == ("g_perp", "g_par", "D", "E")
    matrix = independent(own)
    assert np.allclose(matrix @ matrix.T, own.covariance, atol=1e-12)
    assert axes(own).shape == (4, len(AVERAGED))


def test_a_node_is_the_species_moved() -> None:
    species = replace(TRIPLET, spread=Spread(D=150.0, E=60.0, correlation_D_E=0.6))
    (system,), (own,) = systems(species, perturb=True), broadening(species)
    node = next(node for node in surplus((1, 1), 1e-3) if node.at[0] * node.at[1] != 0)
    there, left = moved(system, own, node)
    x, y = np.array(node.at) / FWHM_PER_SIGMA
    spin = replace(species.spins[0], D=1500.0 + 150.0 * x, E=-200.0 + 60.0 * (0.6 * x + 0.8 * y))
    (same,) = systems(replace(species, spins=(spin,)), perturb=True)
    assert np.abs(there.h0 - same.h0).max() < 1e-9
    s, r = node.left
    assert np.allclose(left.covariance, [[s, 0.6 * s], [0.6 * s, 0.36 * s + 0.64 * r]])
    several, widths = expanded((system,), (own,), {node: 0.25, node._replace(at=(0.0, 0.0)): 0.75})
    assert [one.weight for one in several] == [0.25, 0.75]
    assert len(widths) == 2


@pytest.mark.parametrize("name", ["g", "D", "E", "spread.D", "width.gaussian"])
def test_derivatives_are_those_of_the_nodes(name: str) -> None:
    """Against differences of first-order spectra of species moved to the nodes by hand."""
    species = replace(TRIPLET, spread=Spread(D=150.0))
    spectrum = simulate(species, ALLOWED, keep=True)
    (kept,) = spectrum.kept
    binding = Binding((species,), Sample(), ())
    parameter = binding.parameters[f"s.{name}"]

    def model(step: float) -> Species:
        return binding.apply({parameter.name: parameter.value + step})[0][0]

    (change,) = signal_changes(kept, [(model(1e-4 * parameter.scale), Sample())])
    derivative = change[0] / (1e-4 * parameter.scale)
    step = 0.01 * np.abs(spectrum.signal).max() / np.abs(derivative).max()
    sides = []
    for there in (model(step), model(-step)):
        total = 0.0
        for node, share in kept.mixture.items():
            spin = there.spins[0]
            spin = replace(spin, D=spin.D + node.at[0] * there.spread.D / FWHM_PER_SIGMA)
            left = Spread(D=there.spread.D * node.left[0] ** 0.5)
            one = replace(there, spins=(spin,), spread=left)
            total = total + share * simulate(one, ALLOWED, spread_tolerance=np.inf).signal
        sides.append(total)
    difference = (sides[0] - sides[1]) / (2 * step)
    assert np.abs(derivative - difference).max() < 1e-2 * np.abs(difference).max()
