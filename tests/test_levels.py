"""Batched levels, slopes and intensities against single diagonalisations and sum rules."""

from __future__ import annotations

import numpy as np
import pytest
from reference import intensities, matrix
from scipy import constants

from spinfit import levels
from spinfit.hamiltonian import System, systems
from spinfit.species import Nucleus, Species, Spin

RNG = np.random.default_rng(7)


def directions(count: int) -> np.ndarray:
    """Return random unit vectors, shape (count, 3)."""
    v = RNG.normal(size=(count, 3))
    return v / np.linalg.norm(v, axis=1, keepdims=True)


def low_symmetry() -> System:
    """A system in which nothing is collinear, 12 levels."""
    spin = Spin(2.5, (1.9, 2.0, 2.2), 800, 150, g_tilt=(0.3, 0.8, 0.1), D_tilt=(1.0, 0.4, 0.0))
    return systems(Species(spins=(spin,), nuclei=(Nucleus(isotope="1H", A=(20.0, 60.0)),)))[0]


@pytest.mark.parametrize("mode", ["perpendicular", "parallel"])
def test_levels_and_intensities_of_single_diagonalisations(mode: str) -> None:
    system, n = low_symmetry(), directions(7)
    fields = np.linspace(50, 900, 7)
    got = levels.solve(system, n, fields, microwave=mode)
    for k in range(7):
        energy, v = np.linalg.eigh(matrix(system, n[k], fields[k]))
        assert got.energy[k] == pytest.approx(energy, abs=1e-6)
        assert got.intensity[k] == pytest.approx(intensities(system, n[k], v, mode, None), rel=1e-6, abs=1e-9)


def test_intensities_along_an_axis() -> None:
    system, n, along = low_symmetry(), directions(4), directions(4)
    fields = np.linspace(100, 400, 4)
    got = levels.solve(system, n, fields, microwave=along)
    for k in range(4):
        _, v = np.linalg.eigh(matrix(system, n[k], fields[k]))
        assert got.intensity[k] == pytest.approx(intensities(system, n[k], v, "axis", along[k]), rel=1e-6, abs=1e-9)


def test_slopes_are_the_derivatives_of_the_energies() -> None:
    """Hellmann-Feynman against a central difference."""
    system, n = low_symmetry(), directions(6)
    fields, h = np.linspace(50, 900, 6), 1e-3
    slope = levels.solve(system, n, fields, intensities=False).slope
    up, down = (levels.solve(system, n, fields + s, intensities=False).energy for s in (h, -h))
    assert slope == pytest.approx((up - down) / (2 * h), abs=1e-4)


def test_without_intensities_the_rest_is_the_same() -> None:
    system, n, fields = low_symmetry(), directions(3), np.array([1.0, 20.0, 300.0])
    full, short = levels.solve(system, n, fields), levels.solve(system, n, fields, intensities=False)
    assert short.intensity is None
    assert short.energy == pytest.approx(full.energy, abs=1e-9)
    assert short.slope == pytest.approx(full.slope, abs=1e-9)


def test_blocks_join_without_a_seam(monkeypatch: pytest.MonkeyPatch) -> None:
    system, n, fields = low_symmetry(), directions(11), np.linspace(10, 500, 11)
    whole = levels.solve(system, n, fields, microwave=directions(11)[::-1])
    along = directions(11)
    whole = levels.solve(system, n, fields, microwave=along)
    monkeypatch.setattr(levels, "BLOCK_BYTES", 160 * 12 * 12 * 4)
    parts = levels.solve(system, n, fields, microwave=along)
    assert parts.energy == pytest.approx(whole.energy, abs=1e-9)
    assert parts.intensity == pytest.approx(whole.intensity, abs=1e-9)


def test_all_intensities_sum_to_the_trace_of_the_squared_moments() -> None:
    """Sum over all pairs of |M|^2 = Tr M^2; half of it over the normals, whole along the field."""
    system, n, fields = low_symmetry(), directions(5), np.linspace(20, 700, 5)
    normal = levels.solve(system, n, fields).intensity.sum(axis=(1, 2))
    along = levels.solve(system, n, fields, microwave="parallel").intensity.sum(axis=(1, 2))
    every = sum(np.trace(z @ z).real for z in system.zeeman)
    assert 2 * normal + along == pytest.approx(np.full(5, every), rel=1e-10)


def test_populations_follow_boltzmann() -> None:
    energy = np.array([[0.0, 9500.0, 30000.0], [-5000.0, 0.0, 1e9]])
    p = levels.populations(energy, 4.0)
    assert p.sum(axis=1) == pytest.approx(np.ones(2))
    assert p[0, 1] / p[0, 0] == pytest.approx(np.exp(-constants.h * 9.5e9 / (constants.k * 4.0)))
    assert p[1, 2] == 0


def test_the_difference_of_populations() -> None:
    energy = np.array([[0.0, 100.0, 300.0]])
    lower, upper = np.array([0, 1]), np.array([2, 2])
    assert levels.population_difference(energy, lower, upper, None) == pytest.approx(1 / 3)
    # high-temperature limit: h nu / (n k T)
    difference = levels.population_difference(energy, lower, upper, 300.0)
    expected = constants.h * 1e6 * np.array([[300.0, 200.0]]) / (3 * constants.k * 300.0)
    assert difference == pytest.approx(expected, rel=1e-4)
