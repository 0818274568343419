"""The engine on random and awkward systems: the short form of ``scripts/campaign random``.

Nothing here is compared with a stored result: a spectrum is held against itself at a fifth of the
tolerance, in other axes, in other units and at the opposite field, and matrices against their traces.
"""

from __future__ import annotations

import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

ROOT = Path(__file__).resolve().parents[1]
sys.path.insert(0, str(ROOT / "scripts"))

from campaign_random import Trial, attempt, awkward, random_species  # noqa: E402

from spinfit.hamiltonian import systems  # noqa: E402
from spinfit.levels import solve  # noqa: E402
from spinfit.resonance import find  # noqa: E402
from spinfit.species import Exchange, Nucleus, Species, Spin, Width  # noqa: E402
from spinfit.spectrum import simulate  # noqa: E402
from spinfit.sweep import Sweep  # noqa: E402

AWKWARD = {trial.name: trial for trial in awkward()}
SLOW = {
    "S=1, E at the quantum",
    "S=2, D/h nu 1000",
    "S=3/2, D/h nu 1000",
    "S=7/2, D/h nu 1000",
    "S=5/2, two nuclei",
    "S=1, two nuclei",
    "two nuclei, A through zero",
    "two nuclei, A of opposite sign",
    "parallel mode, hardly allowed",
    "0.001 mT wide, g spread over 30 mT",
    "P far larger than A",
    "S=1, D = 9499 MHz",
    "S=1, D = 9500 MHz",
    "S=1, D = 9501 MHz",
}
SMALL = [random_species(np.random.default_rng([7, k]), states=12) for k in range(12)]


@pytest.mark.parametrize("name", sorted(set(AWKWARD) - SLOW))
def test_awkward_systems_keep_the_promise_or_warn(name: str) -> None:
    got = attempt(AWKWARD[name], 60.0)
    assert got.good, got


def test_resonances_at_zero_field_warn() -> None:
    trial = AWKWARD["S=1, D = 9500 MHz"]
    warned = simulate(trial.species, trial.sweep).warnings
    assert any("zero field" in text for _, text in warned)


def test_a_window_without_features_is_right_in_itself() -> None:
    """Far from any turning point a spectrum is a hundredth of its top, and the promise is about the window."""
    one = Species("s", (Spin(g=(2.0, 2.05, 2.2)),), width=Width(gaussian=0.5))
    got = simulate(one, Sweep(9500.0, (320.0, 323.0), 256))
    closer = simulate(one, Sweep(9500.0, (320.0, 323.0), 256), tolerance=1e-5)
    # the same window as part of the whole
    inside = np.concatenate([[295.0], got.fields, [350.0]])
    whole = simulate(one, Sweep(9500.0, (295.0, 350.0)), fields=inside, tolerance=1e-5).signal[1:-1]
    top = np.abs(whole).max()
    for other in (closer.signal, whole):
        assert np.abs(got.signal - other).max() < 1e-3 * top


@pytest.mark.parametrize("trial", SMALL, ids=range(len(SMALL)))
def test_traces_and_sums(trial: Trial) -> None:
    """Sums over all levels are traces: of H, of its slope, and of the microwave operator squared."""
    rng = np.random.default_rng(3)
    unit = rng.normal(size=(5, 3))
    unit /= np.linalg.norm(unit, axis=1, keepdims=True)
    field = rng.uniform(50, 1200, 5)
    for system in systems(trial.species):
        got = solve(system, unit, field)
        along = np.tensordot(unit, system.zeeman, 1)
        whole = system.h0 + field[:, None, None] * along
        size = np.abs(whole).max()
        np.testing.assert_allclose(got.energy.sum(axis=1), np.trace(whole, axis1=1, axis2=2).real, atol=1e-10 * size)
        np.testing.assert_allclose(got.slope.sum(axis=1), np.trace(along, axis1=1, axis2=2).real, atol=1e-7)
        every = (np.abs(system.zeeman) ** 2).sum() - (np.abs(along) ** 2).sum(axis=(1, 2))
        np.testing.assert_allclose(got.intensity.sum(axis=(1, 2)), 0.5 * every, rtol=1e-9)


@pytest.mark.parametrize("trial", SMALL[:6], ids=range(6))
def test_the_opposite_field_has_the_same_resonances(trial: Trial) -> None:
    """Time reversal: H(-B) has the levels of H(B)."""
    (system, *_) = systems(trial.species)
    unit = np.array([[0.3, -0.5, 0.7], [0.9, 0.1, -0.2]])
    unit /= np.linalg.norm(unit, axis=1, keepdims=True)
    there, back = (
        find(system, way, trial.sweep.frequency, trial.sweep.field, temperature=trial.sweep.temperature)
        for way in (unit, -unit)
    )
    assert len(there.field) == len(back.field)
    np.testing.assert_allclose(there.field, back.field, atol=1e-4)
    np.testing.assert_allclose(there.weight, back.weight, rtol=1e-4, atol=1e-6 * there.weight.max(initial=0))


def turned(species: Species, by: Rotation) -> Species:
    """Return a species with all its tensors in other axes (B_k^q, which are not tilted, must be absent)."""

    def tilt(angles: tuple[float, ...]) -> tuple[float, float, float]:
        return tuple((by * Rotation.from_euler("ZYZ", angles)).as_euler("ZYZ"))

    spins = tuple(replace(one, g_tilt=tilt(one.g_tilt), D_tilt=tilt(one.D_tilt)) for one in species.spins)
    nuclei = tuple(replace(one, A_tilt=tilt(one.A_tilt), P_tilt=tilt(one.P_tilt)) for one in species.nuclei)
    exchange = tuple(replace(one, tilt=tilt(one.tilt)) for one in species.exchange)
    return replace(species, spins=spins, nuclei=nuclei, exchange=exchange)


TURNED = {
    "pair": Species(
        "s",
        (Spin(g=(2.0, 2.05, 2.2), g_tilt=(0.2, 0.7, 0.1)), Spin(g=(2.02, 2.06, 2.2))),
        (),
        (Exchange(J=500.0, dipolar=(200.0, 100.0, -300.0), tilt=(0.5, 1.0, 0.2)),),
        Width(gaussian=2.0),
    ),
    "two nuclei": Species(
        "s",
        (Spin(g=(2.0, 2.01, 2.05)),),
        (
            Nucleus(isotope="1H", A=(60.0, 70.0, 110.0), A_tilt=(0.3, 0.5, 0.2), treat="exact"),
            Nucleus(isotope="14N", A=(10.0, 20.0, 90.0), P=(-1.0, -1.5, 2.5), treat="exact"),
        ),
        (),
        Width(gaussian=1.0),
    ),
    "triplet": Species(
        "s", (Spin(1, (1.9, 2.0, 2.1), 1200.0, 150.0, D_tilt=(0.3, 0.6, 0.2)),), (), (), Width(gaussian=5.0)
    ),
}


@pytest.mark.parametrize("name", sorted(TURNED))
def test_powder_spectra_do_not_know_the_molecular_axes(name: str) -> None:
    species, sweep = TURNED[name], Sweep(9500.0, (250.0, 430.0), 512)
    here = simulate(species, sweep)
    there = simulate(turned(species, Rotation.from_euler("ZYZ", [0.4, 1.1, -0.8])), sweep)
    assert not here.warnings
    assert np.abs(here.signal - there.signal).max() < 2e-3 * np.abs(here.signal).max()
