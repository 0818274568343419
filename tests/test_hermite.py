"""Quintics through three nodes against numpy's polynomials."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from numpy.polynomial import Polynomial

from spinfit import hermite

NODES = np.array([-1.0, 0.0, 1.0])


def through(*polynomials: Polynomial) -> tuple[np.ndarray, np.ndarray]:
    """Return coefficients (6, q) and node values (3, q) of the quintics through some polynomials' nodes."""
    f = np.stack([p(NODES) for p in polynomials], axis=1)
    d = np.stack([p.deriv()(NODES) for p in polynomials], axis=1)
    return hermite.quintic(f, d), f


def roots_of(polynomial: Polynomial) -> np.ndarray:
    """Return what the module finds in [-1, 1], rising."""
    c, f = through(polynomial)
    which, low, high = hermite.brackets(c, f)
    return np.sort(hermite.refine(c[:, which], low, high, 14))


@given(st.lists(st.floats(-10, 10), min_size=6, max_size=6))
@settings(derandomize=True, max_examples=50)
def test_every_quintic_is_its_own_interpolation(coefficients: list[float]) -> None:
    p = Polynomial(coefficients)
    c, _ = through(p)
    assert c[:, 0] == pytest.approx(coefficients, abs=1e-12)


def test_value_slope_and_curvature() -> None:
    p = Polynomial([1.0, -2.0, 3.0, 0.5, -1.5, 0.7])
    c, _ = through(p)
    for t in np.linspace(-1, 1, 7):
        assert hermite.value(c, t) == pytest.approx(p(t))
        assert hermite.slope(c, t) == pytest.approx(p.deriv()(t))
        assert hermite.curvature(c, t) == pytest.approx(p.deriv(2)(t))


def test_the_error_falls_as_the_sixth_power_of_the_length() -> None:
    """f^(6) / 6! t^2 (t^2 - 1)^2 (C. Hermite's remainder): halving the length gains 64."""

    def miss(length: float) -> float:
        t = np.linspace(-1, 1, 41)
        c = hermite.quintic(np.exp(length * NODES), length * np.exp(length * NODES))
        return float(np.abs(hermite.value(c[:, None], t) - np.exp(length * t)).max())

    assert miss(1.0) / miss(0.5) == pytest.approx(64, rel=0.3)


@given(st.lists(st.floats(-0.98, 0.98), min_size=1, max_size=3))
@settings(derandomize=True, max_examples=100)
def test_all_roots_are_found(roots: list[float]) -> None:
    """Roots further apart than the distance between samples, so that none can hide."""
    roots = sorted(roots)
    if any(b - a < 0.26 for a, b in zip(roots, roots[1:], strict=False)):
        roots = roots[:1]
    p = Polynomial.fromroots(roots) * Polynomial([3.0, 0.0, 1.0])
    assert roots_of(p) == pytest.approx(roots, abs=1e-9)


@given(st.floats(-0.95, 0.95), st.floats(0.001, 0.12), st.sampled_from([1.0, -1.0]))
@settings(derandomize=True, max_examples=200)
def test_both_roots_of_a_fold_are_found(middle: float, half: float, sign: float) -> None:
    """A fold narrower than the distance between samples."""
    low, high = middle - half, middle + half
    assume(np.abs(8 * np.array([low, high, middle]) % 1.0).min() > 0 or half == 0)  # none exactly on a sample
    p = sign * Polynomial.fromroots([low, high])
    expected = [r for r in (low, high) if -1 < r < 1]
    assert roots_of(p) == pytest.approx(expected, abs=1e-7)


def test_a_fold_that_just_misses_has_no_root() -> None:
    assert len(roots_of(Polynomial([1e-6 + 0.09, -0.6, 1.0]))) == 0  # (t - 0.3)^2 + 1e-6


def test_neighbouring_leaves_share_a_root_at_their_node_once() -> None:
    """A root exactly at the common node belongs to one of the two leaves, not to both or none."""
    line = Polynomial([0.0, 1.0])
    left, right = Polynomial([-1.0, 1.0]), Polynomial([1.0, 1.0])  # the line seen from leaves about -1 and +1
    assert line(0) == 0
    assert len(roots_of(left)) + len(roots_of(right)) == 1


def test_many_leaves_at_once() -> None:
    shifts = np.linspace(-0.9, 0.9, 13)
    polynomials = [Polynomial([-s, 1.0, 0.0, 0.1]) for s in shifts]
    c, f = through(*polynomials)
    which, low, high = hermite.brackets(c, f)
    t = hermite.refine(c[:, which], low, high, 8)
    assert np.bincount(which, minlength=13).tolist() == [1] * 13
    for k, root in zip(which, t, strict=True):
        assert polynomials[k](root) == pytest.approx(0, abs=1e-12)
