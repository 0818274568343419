"""Noise estimates against what was put in."""

import numpy as np
import pytest
from scipy.linalg import toeplitz
from scipy.signal import lfilter

from spinfit.fitting.noise import autocorrelation, local_covariance, noise_level, residual_noise, runs_test


def smooth_basis(n: int) -> np.ndarray:
    x = np.arange(n)
    lines = [np.exp(-(((x - c) / 30) ** 2)) * s for c in (300, 400, 500) for s in (np.ones(n), x - c)]
    return np.linalg.qr(np.column_stack([np.ones(n), x, *lines]))[0]


def ar1(rng: np.random.Generator, n: int, phi: float) -> np.ndarray:
    return lfilter([1.0], [1.0, -phi], rng.normal(size=n + 300))[300:]


def test_level_of_white_noise_on_a_line():
    rng = np.random.default_rng(1)
    x = np.linspace(-10, 10, 2000)
    levels = [noise_level(300 * x * np.exp(-(x**2)) + 2.5 * x + rng.normal(size=x.size) * 3.0) for _ in range(40)]
    assert np.mean(levels) == pytest.approx(3.0, rel=0.01)
    assert np.std(levels) < 0.05 * 3.0


def test_level_ignores_unused_points_and_never_is_zero():
    rng = np.random.default_rng(2)
    signal = rng.normal(size=600)
    used = np.ones(600, dtype=bool)
    used[200:400] = False
    spoiled = signal.copy()
    spoiled[200:400] += 1e4 * rng.normal(size=200)
    assert noise_level(spoiled, used) == pytest.approx(noise_level(signal, used))
    assert noise_level(np.linspace(0, 1, 50)) > 0
    assert noise_level(np.zeros(50)) > 0
    assert noise_level(np.array([1.0, 2.0])) > 0


@pytest.mark.parametrize("phi", [0.0, 0.3, 0.7])
def test_covariance_of_projections_is_unbiased(phi):
    """The mean estimate over many residuals equals the exact G C G' of the process, C_ij = phi^|i-j|/(1-phi^2)."""
    rng = np.random.default_rng(3)
    n = 700
    basis = smooth_basis(n)
    lags = np.abs(np.subtract.outer(np.arange(n), np.arange(n)))
    exact = np.diag(basis.T @ (float(phi) ** lags) @ basis) / (1 - phi**2)
    ratios = []
    for _ in range(120):
        noise = ar1(rng, n, phi)
        found = residual_noise(noise - basis @ (basis.T @ noise), basis)
        ratios.append(np.diag(basis.T @ found.applied(basis)) / exact)
    # Standard error of the mean of 120 draws that scatter by 0.1 to 0.25 is at most 0.023.
    assert np.mean(ratios, axis=0) == pytest.approx(1.0, abs=0.07)


def test_white_noise_is_mostly_called_white():
    rng = np.random.default_rng(4)
    basis = smooth_basis(500)
    orders = []
    for _ in range(100):
        noise = rng.normal(size=500)
        orders.append(residual_noise(noise - basis @ (basis.T @ noise), basis).order)
    assert np.count_nonzero(np.array(orders) == 0) >= 75


def test_applied_is_the_toeplitz_matrix():
    """Against scipy.linalg.toeplitz."""
    rng = np.random.default_rng(5)
    noise = ar1(rng, 400, 0.8)
    found = residual_noise(noise, np.zeros((400, 0)))
    assert found.order >= 1
    first = np.zeros(400)
    first[: found.covariances.size] = found.covariances
    columns = rng.normal(size=(400, 3))
    assert found.applied(columns) == pytest.approx(toeplitz(first) @ columns, rel=1e-9, abs=1e-9)


def test_uneven_residuals_are_noticed():
    rng = np.random.default_rng(6)
    basis = smooth_basis(700)
    on_lines = np.sum(basis**2, axis=1) > 0.02
    residual = rng.normal(size=700) * np.where(on_lines, 3.0, 1.0)
    assert residual_noise(residual, basis).uneven > 6
    scores = local_covariance(residual, basis, 0)
    assert scores == pytest.approx((basis * residual[:, None] ** 2).T @ basis)


def test_runs_test_counts():
    """Counted by hand; mean and variance from the formulas of Wald and Wolfowitz (1940)."""
    found = runs_test(np.array([1.0, 2, -1, -1, 3, -2, 1, 1, -1, -1]))
    assert found.runs == 6
    assert found.expected == 6.0
    slow = np.sin(np.arange(400) / 20)
    assert runs_test(slow).z < -10
    assert runs_test(np.ones(10)).z == 0


def test_autocorrelation_of_alternating_signs():
    assert autocorrelation(np.array([1.0, -1, 1, -1]), 1) == pytest.approx([1, -0.75])
