"""Spin-polarised states: populations of zero-field sublevels against closed forms and plain sums.

Positive intensity is absorption (the lower level holds more), negative is emission.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray
from reference import _roots, _sum_lines, intensities, sphere

from spinfit.errors import InputError
from spinfit.hamiltonian import systems
from spinfit.levels import solve, zero_field_state
from spinfit.resonance import find
from spinfit.species import Exchange, Nucleus, Species, Spin, Width
from spinfit.spectrum import simulate
from spinfit.sweep import Sample, Sweep
from spinfit.units import MU_B_OVER_H

Array = NDArray[np.float64]
NU, G = 9500.0, 2.0023
LOOSE = 1.3
"""Allowed excess over the promised tolerance: the reference's own error is about a tenth of it."""


def triplet(d: float, e: float, p: tuple[float, ...] | None, width: float = 1.0, **more: object) -> Species:
    return Species("t", (Spin(1.0, (G,), d, e),), populations=p, width=Width(gaussian=width), **more)


def plain_populations(species: Species, vectors: NDArray) -> Array:
    """Return sum_k p_k |<i|k>|^2 of every level: states without nuclei, then each with every nuclear state."""
    states = np.linalg.eigh(systems(replace(species, nuclei=()))[0].h0)[1]
    of_nuclei = vectors.shape[-1] // len(states)
    p = np.repeat(np.array(species.populations) / sum(species.populations), of_nuclei) / of_nuclei
    return np.abs(vectors.conj().swapaxes(-1, -2) @ np.kron(states, np.eye(of_nuclei))) ** 2 @ p


def plain_powder(
    species: Species, fields: Array, width: float, n_theta: int, n_phi: int, octant: bool, weigh: object = None
) -> Array:
    """Return the derivative spectrum as the sum over many directions of exact lines."""
    total = np.zeros(len(fields))
    grid = np.linspace(fields[0] - 6 * width, fields[-1] + 6 * width, 40)
    directions, shares = sphere(n_theta, n_phi, octant=octant)
    for system in systems(species):
        for start in range(0, len(directions), 2000):
            some, share = directions[start : start + 2000], shares[start : start + 2000]
            which, i, j, at = _roots(system, some, NU, grid)
            along = np.tensordot(some[which], system.zeeman, 1)
            vectors = np.linalg.eigh(system.h0 + at[:, None, None] * along)[1]
            rows = np.arange(len(which))
            slopes = np.einsum("aik,aij,ajk->ak", vectors.conj(), along, vectors, optimize=True).real
            p = plain_populations(species, vectors)
            weight = intensities(system, some[which], vectors, "perpendicular", None)[rows, i, j]
            weight = weight * (p[rows, i] - p[rows, j]) / np.abs(slopes[rows, j] - slopes[rows, i]) * share[which]
            if weigh is not None:
                weight = weight * weigh(some[which])
            total += system.weight * _sum_lines(fields, at, weight, width, 1)
    return total


# Closed forms ----------------------------------------------------------------------------------------


@pytest.mark.parametrize(("d", "e"), [(1000.0, 0.0), (1000.0, 150.0), (-900.0, 120.0), (2500.0, -300.0)])
def test_a_triplet_along_z_is_populated_as_its_two_level_problem_says(d: float, e: float) -> None:
    # S.D.S: T_x, T_y, T_z at D/3 - E, D/3 + E, -2D/3; a field along z mixes T_x with T_y only
    # (A. Abragam, B. Bleaney, Electron Paramagnetic Resonance of Transition Ions, 1970, section 3.14, from memory)
    energies = {"x": d / 3 - e, "y": d / 3 + e, "z": -2 * d / 3}
    given = {"x": 0.6, "y": 0.1, "z": 0.3}
    if e == 0:
        given["y"] = given["x"] = 0.35
    low_to_high = tuple(given[name] for name in sorted(energies, key=lambda name: energies[name]))
    system = systems(triplet(d, e, low_to_high))[0]
    fields = np.array([40.0, 200.0, 338.0, 500.0])
    got = solve(system, np.tile([0.0, 0.0, 1.0], (4, 1)), fields, state=zero_field_state(system, low_to_high))
    for b, energy, population in zip(G * MU_B_OVER_H * fields, got.energy, got.population, strict=True):
        root = np.hypot(e, b)
        mean, half = 0.5 * (given["x"] + given["y"]), 0.5 * (given["y"] - given["x"]) * e / root
        exact = sorted([(d / 3 - root, mean - half), (d / 3 + root, mean + half), (-2 * d / 3, given["z"])])
        assert energy == pytest.approx([x for x, _ in exact], abs=1e-6)
        assert population + 1 / 3 == pytest.approx([p for _, p in exact], abs=1e-10)


@pytest.mark.parametrize(("d", "signs"), [(900.0, [1, -1]), (-900.0, [-1, 1])])
def test_a_high_field_triplet_absorbs_on_one_side_and_emits_on_the_other(d: float, signs: list[int]) -> None:
    # only T_z populated: m = 0 holds everything along z; the line to it from below emits.  m = 0 -> +1
    # stands at h nu - D, so low in field for D > 0
    populations = (1.0, 0.0, 0.0) if d > 0 else (0.0, 0.0, 1.0)
    got = find(systems(triplet(d, 0.0, None))[0], np.array([0.0, 0.0, 1.0]), NU, (250, 450), populations=populations)
    assert np.sign(got.weight).tolist() == signs
    assert got.field == pytest.approx((NU + np.array([-1, 1]) * abs(d)) / (G * MU_B_OVER_H), rel=1e-8)
    # |<0|S_x|+1>|^2 = 1/2, and the whole population is the difference
    assert got.weight == pytest.approx(np.array(signs) * 0.5 * (G * MU_B_OVER_H), rel=1e-9)


def test_the_axes_of_a_triplet_show_their_own_sublevels() -> None:
    # along each axis m = 0 is that axis's own sublevel: its excess over the mean decides between A/E and E/A
    populations = (0.5, 0.3, 0.2)  # D > 0, E > 0: T_z, T_x, T_y from the lowest up
    system = systems(triplet(300.0, 60.0, populations))[0]
    got = find(system, np.eye(3), 950_000.0, (33_800, 34_000), populations=populations)
    splitting = {0: -300.0 + 3 * 60.0, 1: -300.0 - 3 * 60.0, 2: 600.0}  # 3 x the tensor's components
    for axis, own in enumerate([0.3, 0.2, 0.5]):
        first, second = got.weight[got.direction == axis]
        absorbs_low = (own - (1 - own) / 2) * np.sign(splitting[axis]) > 0
        assert (first > 0) == absorbs_low
        assert (second > 0) != absorbs_low
        # at high field m = +1 and -1 share the other two sublevels evenly, to about D over h nu
        scale = 0.5 * G * MU_B_OVER_H * abs(own - (1 - own) / 2)
        assert np.abs([first, second]) == pytest.approx([scale, scale], rel=2e-3)


# Sums and symmetries ---------------------------------------------------------------------------------


SEVERAL = [
    triplet(1200.0, 150.0, (0.1, 0.2, 0.7)),
    Species("q", (Spin(1.5, (2.0, 2.01, 2.02), 2000.0, 300.0),), populations=(0.4, 0.4, 0.1, 0.1)),
    Species(
        "pair",
        (Spin(0.5, (2.002,)), Spin(0.5, (2.005, 2.004, 2.002))),
        exchange=(Exchange((1, 2), -3000.0, (200.0, 200.0, -400.0)),),
        populations=(0.2, 0.2, 0.2, 0.4),
    ),
    triplet(800.0, 50.0, (0.5, 0.2, 0.3), nuclei=(Nucleus("14N", A=(30.0, 40.0, 60.0), treat="exact"),)),
]


@pytest.mark.parametrize("species", SEVERAL, ids=lambda one: one.name + str(len(one.nuclei)))
def test_populations_are_those_of_the_plain_definition(species: Species) -> None:
    system = systems(species)[0]
    directions = np.random.default_rng(3).normal(size=(6, 3))
    directions /= np.linalg.norm(directions, axis=1, keepdims=True)
    fields = np.linspace(5.0, 400.0, 6)
    state = zero_field_state(system, species.populations)
    got = solve(system, directions, fields, state=state)
    h = system.h0 + np.einsum("m,ma,aij->mij", fields, directions, system.zeeman)
    n = len(system.h0)
    if species.name != "q":  # Kramers pairs: single zero-field states are arbitrary, their mean is not
        assert got.population + 1 / n == pytest.approx(plain_populations(species, np.linalg.eigh(h)[1]), abs=1e-10)
    assert got.population.sum(axis=1) == pytest.approx(np.zeros(6), abs=1e-12)
    blocks = solve(system, np.tile(directions, (400, 1)), np.tile(fields, 400), state=state)
    assert blocks.population[-6:] == pytest.approx(got.population, abs=1e-14)


def test_kramers_pairs_share_what_they_are_given() -> None:
    uneven = Species("q", (Spin(1.5, (2.0,), 2000.0),), populations=(0.8, 0.0, 0.1, 0.1))
    even = replace(uneven, populations=(0.4, 0.4, 0.1, 0.1))
    states = [zero_field_state(systems(one)[0], one.populations) for one in (uneven, even)]
    assert np.abs(states[0] - states[1]).max() < 1e-14
    sweep = Sweep(NU, (250.0, 450.0), 200)
    got, expected = simulate(uneven, sweep), simulate(even, sweep)
    assert np.array_equal(got.signal, expected.signal)
    assert [code for code, _ in got.warnings] == ["populations"]
    assert not expected.warnings


@pytest.mark.parametrize("sample", [Sample(), Sample("crystal", angles=(0.3,)), Sample("aligned", order=0.4)])
def test_equal_populations_make_no_signal(sample: Sample) -> None:
    got = simulate(triplet(1000.0, 100.0, (1.0, 1.0, 1.0)), Sweep(NU, (250.0, 450.0), 100), sample)
    assert not got.signal.any()


@pytest.mark.parametrize("populations", [None, (0.2, 0.3, 0.5)])
def test_a_window_in_which_nothing_resonates_is_empty(populations: tuple[float, ...] | None) -> None:
    got = simulate(triplet(100.0, 10.0, populations), Sweep(NU, (500.0, 550.0), 100))
    assert not got.signal.any()


def test_a_doublet_has_no_sublevels_at_zero_field() -> None:
    got = simulate(Species("r", populations=(0.9, 0.1)), Sweep(NU, (330.0, 350.0), 100))
    assert not got.signal.any()
    assert [code for code, _ in got.warnings] == ["populations"]


def test_scaling_populations_changes_nothing_and_exchanging_them_reverses_the_sign() -> None:
    sweep = Sweep(NU, (280.0, 400.0), 300)
    one = simulate(triplet(900.0, 90.0, (0.5, 0.3, 0.2)), sweep).signal
    assert np.abs(simulate(triplet(900.0, 90.0, (5.0, 3.0, 2.0)), sweep).signal - one).max() < 1e-12
    # the signal is linear in the populations and none for equal ones: p and 2/3 - p are opposite
    other = simulate(triplet(900.0, 90.0, (2 / 3 - 0.5, 2 / 3 - 0.3, 2 / 3 - 0.2)), sweep).signal
    assert np.abs(other + one).max() < 2e-3 * np.abs(one).max()


# Whole spectra ---------------------------------------------------------------------------------------


POWDERS = [
    (triplet(1000.0, 120.0, (0.5, 0.3, 0.2), 3.0), (280.0, 400.0), 80, 80, True),
    (triplet(-700.0, 0.0, (0.15, 0.15, 0.7), 2.0), (290.0, 390.0), 400, 1, True),
    (triplet(60.0, 8.0, (0.1, 0.2, 0.7), 4.0), (315.0, 365.0), 40, 40, True),  # lines cancel within the width
    (triplet(1000.0, 120.0, (0.34, 0.33, 0.33), 3.0), (120.0, 200.0), 60, 60, True),  # half field
    (
        Species(
            "pair",
            (Spin(0.5, (2.002,)), Spin(0.5, (2.005, 2.004, 2.002))),
            exchange=(Exchange((1, 2), -3000.0, (150.0, 250.0, -400.0)),),
            populations=(0.1, 0.2, 0.3, 0.4),
            width=Width(gaussian=3.0),
        ),
        (310.0, 370.0),
        40,
        40,
        True,
    ),
    (
        Species(
            "tilted",
            (Spin(1.0, (2.0, 2.01, 2.03), 900.0, 150.0, g_tilt=(0.3, 0.5, 0.1)),),
            populations=(0.2, 0.1, 0.7),
            width=Width(gaussian=4.0),
        ),
        (280.0, 400.0),
        60,
        160,
        False,
    ),
]


@pytest.mark.parametrize(("species", "window", "n_theta", "n_phi", "octant"), POWDERS)
def test_a_powder_is_the_plain_sum(
    species: Species, window: tuple[float, float], n_theta: int, n_phi: int, octant: bool
) -> None:
    sweep = Sweep(NU, window, 300)
    width = species.width.gaussian
    expected = plain_powder(species, sweep.fields, width, n_theta, n_phi, octant)
    finer = plain_powder(species, sweep.fields, width, n_theta * 5 // 4, max(1, n_phi * 5 // 4), octant)
    top = np.abs(finer).max()
    assert np.abs(expected - finer).max() < 2e-4 * top
    got = simulate(species, sweep)
    assert np.abs(got.signal - finer).max() < LOOSE * 1e-3 * top
    assert finer.min() < -0.1 * top


def test_nuclei_split_polarised_lines_exactly_or_by_perturbation() -> None:
    nitrogen = Nucleus("14N", A=(12.0, 12.0, 25.0), treat="exact")
    exact = triplet(600.0, 70.0, (0.6, 0.3, 0.1), 2.5, nuclei=(nitrogen,))
    sweep = Sweep(NU, (300.0, 380.0), 300)
    expected = plain_powder(exact, sweep.fields, 2.5, 40, 40, True)
    top = np.abs(expected).max()
    assert np.abs(simulate(exact, sweep).signal - expected).max() < LOOSE * 1e-3 * top
    weak = replace(exact, nuclei=(replace(nitrogen, treat="second order"),))
    assert np.abs(simulate(weak, sweep).signal - expected).max() < 3e-3 * top


def test_a_crystal_sums_its_exact_lines() -> None:
    species = triplet(1000.0, 120.0, (0.5, 0.3, 0.2), 1.0)
    sample = Sample("crystal", angles=(0.4,), start=(1.0, 0.0, 0.0), axis=(0.0, 1.0, 0.0))
    sweep = Sweep(NU, (280.0, 400.0), 500)
    direction = np.array([[np.cos(0.4), 0.0, -np.sin(0.4)]])
    got = find(systems(species)[0], direction, NU, (250, 420), microwave=np.array([[0.0, 1.0, 0.0]]))
    vectors = [
        np.linalg.eigh(
            systems(species)[0].h0 + b * (direction[0] @ systems(species)[0].zeeman.reshape(3, 9)).reshape(3, 3)
        )[1]
        for b in got.field
    ]
    p = plain_populations(species, np.array(vectors))
    row = np.arange(len(got.field))
    weight = 3 * got.weight * (p[row, got.lower] - p[row, got.upper])
    expected = _sum_lines(sweep.fields, got.field, weight, 1.0, 1)
    spectrum = simulate(species, sweep, sample).signal
    assert np.abs(spectrum - expected).max() < 1e-3 * np.abs(expected).max()


def test_an_aligned_sample_weighs_directions() -> None:
    species = triplet(700.0, 80.0, (0.1, 0.3, 0.6), 3.0)
    sample = Sample("aligned", order=0.3, angle=0.5)
    sweep = Sweep(NU, (290.0, 390.0), 300)
    from spinfit.alignment import orientation_weight

    expected = plain_powder(
        species, sweep.fields, 3.0, 40, 160, False, lambda directions: orientation_weight(sample, directions)
    )
    got = simulate(species, sweep, sample).signal
    assert np.abs(got - expected).max() < LOOSE * 1e-3 * np.abs(expected).max()


def test_solution_says_that_it_does_not_use_them() -> None:
    sweep = Sweep(NU, (330.0, 350.0), 200)
    polarised, plain = (simulate(triplet(0.0, 0.0, p), sweep, Sample("solution")) for p in ((0.6, 0.3, 0.1), None))
    assert np.array_equal(polarised.signal, plain.signal)
    assert [code for code, _ in polarised.warnings] == ["populations"]


@pytest.mark.parametrize("populations", [(0.5, 0.5), (0.5, 0.6, -0.1), (0.0, 0.0, 0.0), (np.nan, 0.5, 0.5)])
def test_impossible_populations_are_refused(populations: tuple[float, ...]) -> None:
    with pytest.raises(InputError, match="populations"):
        triplet(100.0, 0.0, populations)
