"""Aligned samples: the Maier-Saupe distribution, weights of field directions, and spectra at the limits."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from reference import gaussian, plain_weights, sphere, two_normals
from scipy.integrate import quad
from scipy.special import eval_legendre

from spinfit.alignment import Alignment, order_of, orientation_weight, ring_directions, strength_of
from spinfit.errors import InputError
from spinfit.hamiltonian import systems
from spinfit.resonance import find
from spinfit.species import Nucleus, Species, Spin, Width, tilt_matrix
from spinfit.spectrum import simulate
from spinfit.sweep import Sample, Sweep
from spinfit.symmetry import Symmetry, symmetry_of
from spinfit.units import MU_B_OVER_H

ORDERS = (-0.49, -0.3, -0.01, 0.05, 0.4, 0.8, 0.97)
ANGLES = (0.0, 0.4, 1.1, math.pi / 2)
DIRECTOR = (1.0, -0.5, 0.8)
RHOMBIC = Species(spins=(Spin(0.5, (1.98, 2.05, 2.25)),), width=Width(gaussian=1.0))
SWEEP = Sweep(9500.0, (285, 360), 751)


def made(order: float, angle: float, director: tuple[float, float, float] = DIRECTOR) -> Sample:
    return Sample(form="aligned", order=order, angle=angle, director=director)


def density(strength: float, count: int = 200) -> tuple[np.ndarray, np.ndarray]:
    """Return cos(beta) and shares of the Maier-Saupe distribution, by Gauss-Legendre over 0 to 1."""
    x, w = np.polynomial.legendre.leggauss(count)
    x, w = (x + 1) / 2, w / 2
    f = w * np.exp(strength * (x**2 - (strength > 0)))
    return x, f / f.sum()


@pytest.mark.parametrize("order", [*ORDERS, 0.0, 0.999, 1 - 2e-6])
def test_the_order_parameter_is_reproduced(order: float) -> None:
    strength = strength_of(order)

    def moment(power: int) -> float:
        def f(x: float) -> float:
            return x**power * math.exp(strength * (x * x - (strength > 0)))

        points = [max(0.0, 1 - 30 / max(abs(strength), 31))] if strength > 0 else None
        return quad(f, 0, 1, points=points, epsabs=1e-15, epsrel=1e-12, limit=500)[0]

    assert 1.5 * moment(2) / moment(0) - 0.5 == pytest.approx(order, abs=1e-9)


@pytest.mark.parametrize("strength", [39.999, 40.001, -39.999, -40.001])
def test_quadrature_and_closed_form_meet(strength: float) -> None:
    x, f = density(strength)
    assert order_of(strength) == pytest.approx(1.5 * f @ x**2 - 0.5, rel=1e-11)


@pytest.mark.parametrize("order", ORDERS)
@pytest.mark.parametrize("angle", ANGLES)
def test_weight_is_its_legendre_series(order: float, angle: float) -> None:
    """Sum over even l of (2l+1) <P_l> P_l(cos a) P_l(n.u): the addition theorem, averaged over both azimuths."""
    directions, _ = sphere(12, 7)
    cosine = directions @ (np.array(DIRECTOR) / np.linalg.norm(DIRECTOR))
    x, f = density(strength_of(order))
    expected = sum(
        (2 * n + 1) * (f @ eval_legendre(n, x)) * eval_legendre(n, math.cos(angle)) * eval_legendre(n, cosine)
        for n in range(0, 102, 2)
    )
    got = orientation_weight(made(order, angle), directions)
    np.testing.assert_allclose(got, expected, rtol=0, atol=2e-6 * expected.max())


def test_weight_counts_molecules_laid_out() -> None:
    """Molecules laid out over beta and both azimuths, fields counted in bands of n.u."""
    order, angle = 0.6, 0.5
    x, f = density(strength_of(order))
    azimuth = (np.arange(720) + 0.5) / 720 * 2 * np.pi
    # the ordering axis u about the director z; the field at `angle` from z
    cosine = np.abs(x[:, None] * math.cos(angle) + np.sqrt(1 - x[:, None] ** 2) * np.cos(azimuth) * math.sin(angle))
    edges = np.linspace(0, 1, 11)
    counted = np.histogram(cosine, edges, weights=np.repeat(f[:, None], 720, axis=1) / 720)[0]
    alignment = Alignment.of(made(order, angle, (0, 0, 1)))
    expected = [
        quad(lambda c: float(alignment.at(np.array(c))), a, b)[0] for a, b in zip(edges, edges[1:], strict=False)
    ]
    np.testing.assert_allclose(counted, expected, atol=1e-3)


@pytest.mark.parametrize("order", [*ORDERS, 0.995])
def test_weights_are_one_on_the_mean_and_keep_p2(order: float) -> None:
    """<P2> of the field in the molecule is <P2> of the molecules times P2(cos a), as products of P_l go."""
    for angle in ANGLES:
        x, w = np.polynomial.legendre.leggauss(300)
        weight = Alignment.of(made(order, angle)).at(x)
        assert w @ weight / 2 == pytest.approx(1, abs=2e-6)
        assert w @ (weight * eval_legendre(2, x)) / 2 == pytest.approx(
            order * eval_legendre(2, math.cos(angle)), abs=2e-6
        )
        assert (weight >= -1e-9 * weight.max()).all()


@pytest.mark.parametrize("kind", ["octant", "quarter", "half", "axial", "point"])
def test_weights_of_a_domain_average_over_its_images(kind: str) -> None:
    frame = tilt_matrix((0.3, 0.8, -0.2))
    symmetry, sample = Symmetry(kind, frame), made(0.7, 0.6)
    turns = {
        "octant": [(1, 1, 1), (-1, -1, 1), (1, -1, -1), (-1, 1, -1)],
        "quarter": [(1, 1, 1), (-1, -1, 1)],
        "half": [(1, 1, 1)],
    }
    directions, shares = sphere(16, 32)
    got = orientation_weight(sample, directions, symmetry=symmetry)
    own = directions @ frame
    if kind in turns:
        expected = np.mean([orientation_weight(sample, own * np.array(s) @ frame.T) for s in turns[kind]], axis=0)
    elif kind == "axial":
        phi = np.linspace(0, 2 * np.pi, 400, endpoint=False)
        s = np.sqrt(1 - own[:, 2:] ** 2)
        ring = np.stack([s * np.cos(phi), s * np.sin(phi), np.broadcast_to(own[:, 2:], s.shape[:1] + phi.shape)], -1)
        expected = orientation_weight(sample, (ring @ frame.T).reshape(-1, 3)).reshape(len(own), -1).mean(axis=1)
    else:
        expected = np.ones(len(directions))
    np.testing.assert_allclose(got, expected, rtol=0, atol=2e-6 * expected.max())
    assert shares @ got == pytest.approx(1, abs=1e-6)


def test_reversed_axes_are_the_same() -> None:
    directions, _ = sphere(6, 5)
    weight = orientation_weight(made(0.7, 0.6), directions)
    np.testing.assert_allclose(orientation_weight(made(0.7, math.pi - 0.6), -directions), weight, rtol=1e-9)
    np.testing.assert_allclose(orientation_weight(made(0.7, 0.0), directions, angle=-0.6), weight, rtol=1e-9)


def test_no_order_is_a_powder() -> None:
    powder = simulate(RHOMBIC, SWEEP).signal
    for angle in (0.0, 1.0):
        aligned = simulate(RHOMBIC, SWEEP, made(0.0, angle)).signal
        np.testing.assert_allclose(aligned, powder, rtol=0, atol=2e-3 * np.abs(powder).max())


def test_complete_order_along_the_field_is_one_direction() -> None:
    """All molecules have u along the field: one line at g(u), g^2 = u^T (g g^T) u (closed form)."""
    u = np.array(DIRECTOR) / np.linalg.norm(DIRECTOR)
    (system,) = systems(RHOMBIC)
    lines = find(system, u[None], SWEEP.frequency, (200, 500))
    field = SWEEP.frequency / (MU_B_OVER_H * np.linalg.norm(u * (1.98, 2.05, 2.25)))
    assert lines.field == pytest.approx([field], abs=1e-6)
    expected = lines.weight[0] * gaussian(SWEEP.fields - field, 1.0, 1)
    got = simulate(RHOMBIC, SWEEP, made(1.0, 0.0)).signal
    np.testing.assert_allclose(got, expected, rtol=0, atol=1e-3 * expected.max())
    # and order that is nearly complete tends to it
    off = [
        np.abs(simulate(RHOMBIC, SWEEP, made(p, 0.0)).signal - expected).max() / expected.max()
        for p in (0.9995, 0.99999)
    ]
    assert off[1] < 0.05 * off[0]


@pytest.mark.parametrize(("order", "angle"), [(1.0, 0.7), (-0.5, 0.0), (-0.5, 1.2), (0.55, 0.9), (-0.35, 0.3)])
def test_spectrum_against_molecules_laid_out_one_by_one(order: float, angle: float) -> None:
    """Molecules laid out over beta and the two azimuths in the laboratory, each with its g along the field."""
    if order in (1, -0.5):
        x, f, psi = np.array([float(order == 1)]), np.ones(1), (np.arange(400) + 0.5) / 400 * np.pi
    else:
        (x, f), psi = density(strength_of(order), 100), (np.arange(120) + 0.5) / 120 * np.pi
    cosine = (x[:, None] * math.cos(angle) + np.sqrt(1 - x[:, None] ** 2) * np.cos(psi) * math.sin(angle)).ravel()
    share = np.repeat(f / len(psi), len(psi))
    azimuth = (np.arange(240) + 0.5) / 240 * 2 * np.pi
    u = np.array(DIRECTOR) / np.linalg.norm(DIRECTOR)
    across, other = (v[0] for v in two_normals(u[None]))
    turn = azimuth[:, None, None]
    n = cosine[:, None] * u + np.sqrt(1 - cosine[:, None] ** 2) * (np.cos(turn) * across + np.sin(turn) * other)
    g = np.array([1.98, 2.05, 2.25])
    along = n.reshape(-1, 3) * g
    length = np.linalg.norm(along, axis=1)
    # perpendicular weight of S = 1/2 in field: B x (Tr G - n G^2 n / n G n) up to a constant (see the powder's)
    square = np.sum((n.reshape(-1, 3) * g**2) ** 2, axis=1)
    field = SWEEP.frequency / (MU_B_OVER_H * length)
    weight = np.tile(share, len(azimuth)) * field * (np.sum(g**2) - square / length**2)
    grid = np.arange(284, 361, 0.025)
    place = (field - grid[0]) / 0.025
    left = place.astype(int)
    histogram = np.bincount(left, weight * (1 - place + left), len(grid))
    histogram += np.bincount(left + 1, weight * (place - left), len(grid))
    shape = np.array([gaussian(b - grid, 2.0, 1) @ histogram for b in SWEEP.fields])
    got = simulate(replace(RHOMBIC, width=Width(gaussian=2.0)), SWEEP, made(order, angle)).signal
    shape *= (got @ shape) / (shape @ shape)
    np.testing.assert_allclose(got, shape, rtol=0, atol=4e-3 * np.abs(got).max())


def test_several_levels_and_low_symmetry_against_a_plain_weighted_sum() -> None:
    species = Species(
        spins=(Spin(0.5, (2.0, 2.04, 2.2)),),
        nuclei=(Nucleus("63Cu", A=(-60.0, -90.0, -500.0), A_tilt=(0.4, 0.5, 0.1)),),
        width=Width(gaussian=6.0),
    )
    (system,) = systems(species)
    assert symmetry_of(system).kind == "half"
    sweep = Sweep(9500.0, (260, 380), 201)
    got = simulate(species, sweep, made(0.5, 0.8), tolerance=2e-3)
    directions, shares = sphere(36, 72)
    lines = find(system, directions, 9500.0, (220, 420))
    weight = lines.weight * shares[lines.direction]
    x, f = density(strength_of(0.5))
    cosine = directions @ (np.array(DIRECTOR) / np.linalg.norm(DIRECTOR))
    series = sum(
        (2 * n + 1) * (f @ eval_legendre(n, x)) * eval_legendre(n, math.cos(0.8)) * eval_legendre(n, cosine)
        for n in range(0, 42, 2)
    )
    weight *= series[lines.direction]
    expected = gaussian(sweep.fields[:, None] - lines.field, 6.0, 1) @ weight
    np.testing.assert_allclose(got.signal, expected, rtol=0, atol=4e-3 * np.abs(expected).max())


def test_weights_of_lines_are_those_of_a_powder() -> None:
    """One direction at complete order: |M|^2 is the mean of two directions normal to the field."""
    u = np.array(DIRECTOR) / np.linalg.norm(DIRECTOR)
    (system,) = systems(RHOMBIC)
    lines = find(system, u[None], SWEEP.frequency, (200, 500))
    (expected,) = plain_weights(system, u, [(lines.field[0], 0, 1)])
    got = simulate(RHOMBIC, Sweep(9500.0, (285, 360), 7501, detect="absorption"), made(1.0, 0.0))
    assert np.trapezoid(got.signal, got.fields) == pytest.approx(expected, rel=1e-4)


def test_rings_keep_to_complete_order() -> None:
    for order, angle in ((1.0, 0.6), (-0.5, 0.6)):
        alignment = Alignment.of(made(order, angle))
        directions, share = ring_directions(alignment, 400, 16)
        assert share.sum() == pytest.approx(1)
        np.testing.assert_allclose(np.linalg.norm(directions, axis=1), 1, atol=1e-12)
        p2 = share @ eval_legendre(2, directions @ alignment.director)
        assert p2 == pytest.approx(order * eval_legendre(2, math.cos(angle)), abs=1e-9)
        with pytest.raises(InputError, match="complete order has no weight at single directions"):
            alignment.weight(directions)


def test_impossible_orders_are_refused() -> None:
    with pytest.raises(InputError, match="between -0.5 and 1"):
        strength_of(1.01)
