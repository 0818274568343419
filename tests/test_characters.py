"""Levels of several nuclei, ordered by character: what the order may and may not change.

The spectrum of a powder is a sum over all pairs of levels at each direction, so neither the order of
levels nor a turn among states closer than any line is wide may be seen in it.  References are exact
resonances (`spinfit.resonance.find`, tested against the eigenfield equation) on a dense mesh.
"""

from __future__ import annotations

import numpy as np
import pytest

from spinfit.characters import Characters
from spinfit.hamiltonian import systems
from spinfit.levels import solve
from spinfit.lineshape import FieldGrid, Shape
from spinfit.orientations import Mesh
from spinfit.resonance import find
from spinfit.species import Nucleus, Species, Spin, Width
from spinfit.spectrum import simulate
from spinfit.sweep import Sweep
from spinfit.symmetry import symmetry_of

NU = 9500.0
PROTONS = (
    Nucleus(isotope="1H", A=(90.0, 100.0, 150.0), A_tilt=(0.3, 0.5, 0.2), treat="exact"),
    Nucleus(isotope="1H", A=(60.0, 80.0, 200.0), A_tilt=(1.0, 0.9, 0.4), treat="exact"),
)
NITROGEN_PROTON = (
    Nucleus(isotope="14N", A=(15.0, 15.0, 90.0), P=(-0.5, -0.5, 1.0), treat="exact"),
    Nucleus(isotope="1H", A=(30.0, 40.0, 10.0), treat="exact"),
)
RADICAL = Spin(g=(2.0, 2.01, 2.03))


def species(*nuclei: Nucleus, spin: Spin = RADICAL) -> Species:
    return Species("s", (spin,), nuclei, width=Width(gaussian=0.8))


def directions(count: int, seed: int = 5) -> np.ndarray:
    out = np.random.default_rng(seed).normal(size=(count, 3))
    return out / np.linalg.norm(out, axis=1, keepdims=True)


def test_one_nucleus_is_ordered_by_energy() -> None:
    (system,) = systems(species(PROTONS[0]))
    assert Characters.of(system, NU, 1.0) is None


def test_hyperfine_energies_as_large_as_the_quantum_are_ordered_by_energy() -> None:
    (system,) = systems(species(*PROTONS))
    assert Characters.of(system, NU, 1.0) is not None
    assert Characters.of(system, 500.0, 1.0) is None


@pytest.mark.parametrize("blur", [0.0, 20.0])
def test_sums_over_levels_do_not_know_the_order(blur: float) -> None:
    (system,) = systems(species(*PROTONS))
    unit, field = directions(40), np.full(40, 335.0)
    plain = solve(system, unit, field)
    named = solve(system, unit, field, characters=Characters.of(system, NU, blur))
    for a, b in ((plain.energy, named.energy), (plain.slope, named.slope), (plain.intensity, named.intensity)):
        axes = tuple(range(1, a.ndim))
        np.testing.assert_allclose(a.sum(axis=axes), b.sum(axis=axes), rtol=1e-9, atol=1e-6)
    if not blur:  # nothing but the order differs
        np.testing.assert_array_equal(np.sort(named.energy, axis=1), plain.energy)
        np.testing.assert_array_equal(np.take_along_axis(plain.energy, named.order, axis=1), named.energy)


def test_names_follow_crossing_sublevels() -> None:
    """Two isotropic nuclei with A1(B) + A2 m: first-order energies m1 A1/2 + m2 A2/2 name the levels."""
    first, second = (Nucleus(isotope="1H", A=(a,), treat="exact") for a in (100.0, 60.0))
    (system,) = systems(species(first, second, spin=Spin(g=(2.0,))))
    got = solve(
        system, directions(30), np.full(30, 335.0), characters=Characters.of(system, NU, 0.0), intensities=False
    )
    lower = got.energy[:, :4] - got.energy[:, :4].mean(axis=1, keepdims=True)
    # second order moves each level by less than A^2/(2 nu) = 0.5 MHz besides the nuclear Zeeman term
    m = np.array([[-0.5, -0.5], [-0.5, 0.5], [0.5, -0.5], [0.5, 0.5]])
    proton = 0.04257747 * 335.0  # MHz/mT of 1H, CODATA
    effective = np.array([100.0, 60.0]) / 2 + proton
    np.testing.assert_allclose(lower, np.tile(m @ effective, (30, 1)), atol=1.1)


def test_levels_of_exchanged_equal_nuclei_have_one_name() -> None:
    one = Nucleus(isotope="14N", A=(15.0, 15.0, 90.0), P=(-0.5, -0.5, 1.0), count=2, treat="exact")
    system = systems(species(one))[0]
    characters = Characters.of(system, NU, 0.0)
    # 2 electron levels x multisets of 2 out of 3
    assert len(np.unique(characters.slots)) == 12
    _, often = np.unique(characters.slots, return_counts=True)
    assert sorted(often) == [1] * 6 + [2] * 6


def exact_sum(one: Species, sweep: Sweep, mesh_size: tuple[int, int]) -> np.ndarray:
    """Return the spectrum summed over exact resonances of a dense mesh."""
    (system,) = systems(one)
    symmetry = symmetry_of(system)
    mesh = Mesh(symmetry.kind, *mesh_size)
    theta, phi = np.meshgrid(np.linspace(0, np.pi / 2, mesh.thetas + 1), mesh.phi(), indexing="ij")
    unit = np.stack([np.sin(theta) * np.cos(phi), np.sin(theta) * np.sin(phi), np.cos(theta)], -1).reshape(-1, 3)
    got = find(system, unit @ symmetry.axes.T, sweep.frequency, (sweep.field[0] - 8, sweep.field[1] + 8))
    shape = Shape.from_widths(one.width.gaussian, 0.0)
    grid = FieldGrid.covering(*sweep.field, shape.scale, shape.reach(1e-4), 1e-4)
    deposited = grid.deposit(got.field, got.weight * mesh.weights().ravel()[got.direction])
    return grid.sample(grid.coefficients({0: deposited}, shape), sweep.fields)


@pytest.mark.parametrize(
    ("nuclei", "mesh"), [(PROTONS, (28, 56)), (NITROGEN_PROTON, (28, 22))], ids=["tilted protons", "nitrogen, proton"]
)
def test_powders_of_two_nuclei_keep_the_promise(nuclei: tuple[Nucleus, ...], mesh: tuple[int, int]) -> None:
    one, sweep = species(*nuclei), Sweep(NU, (322.0, 350.0), 512)
    got = simulate(one, sweep)
    assert not got.warnings
    (used,) = got.report["s"]["systems"]
    assert used["directions"] < 1000  # ordered by energy it takes about 5000 and is not enough
    truth = exact_sum(one, sweep, mesh)
    assert np.abs(got.signal - truth).max() < 1e-3 * np.abs(truth).max()
