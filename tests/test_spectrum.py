"""simulate(): species, sweep and sample to a spectrum; what is added, ordered, turned and refused."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from reference import Line, gaussian, plain_resonances, plain_weights, unit
from scipy import constants
from scipy.spatial.transform import Rotation

from spinfit.errors import InputError
from spinfit.hamiltonian import systems
from spinfit.species import Nucleus, Species, Spin, Width
from spinfit.spectrum import simulate
from spinfit.sweep import Sample, Sweep

MU_B = constants.physical_constants["Bohr magneton in Hz/T"][0] * 1e-9  # MHz/mT
X_BAND = 9500.0
SWEEP = Sweep(X_BAND, (280.0, 380.0), 801)
WIDTH = 1.5
TRIPLET = Species("t", (Spin(1, (1.95, 2.0, 2.1), 900.0, 120.0, D_tilt=(0.2, 0.5, 0.1)),), width=Width(gaussian=WIDTH))
RADICAL = Species("r", (Spin(g=(2.002, 2.006, 2.01)),), width=Width(gaussian=1.0))


def far(a: np.ndarray, b: np.ndarray) -> float:
    return float(np.abs(a - b).max() / np.abs(b).max())


def test_species_add_up_with_their_amounts() -> None:
    one, other = replace(RADICAL, amount=2.5), replace(TRIPLET, amount=-0.5)
    both = simulate([one, other], SWEEP)
    alone = [simulate(s, SWEEP).parts[0] for s in (RADICAL, TRIPLET)]
    assert both.parts == pytest.approx(np.array(alone), abs=1e-12)
    assert both.signal == pytest.approx(2.5 * alone[0] - 0.5 * alone[1], abs=1e-12)
    assert set(both.report) == {"r", "t"}


def test_any_fields_in_any_order() -> None:
    some = np.array([345.0, 300.5, 339.2, 338.0, 338.0])
    whole = simulate(RADICAL, SWEEP)
    got = simulate(RADICAL, SWEEP, fields=some)
    assert got.fields.tolist() == some.tolist()
    fine = simulate(RADICAL, Sweep(X_BAND, (300.5, 345.0), 44501)).signal
    expected = np.interp(some, np.linspace(300.5, 345.0, 44501), fine)
    assert np.abs(got.signal - expected).max() < 2e-3 * np.abs(whole.signal).max()
    assert got.signal[3] == got.signal[4]


def test_isotopologues_are_averaged() -> None:
    """Natural copper is 63Cu and 65Cu in their abundances, the second's A scaled by its g_n."""
    spin, width = Spin(g=(2.05, 2.25)), Width(gaussian=2.0)
    sweep = Sweep(X_BAND, (260.0, 350.0), 501)
    natural = Species("cu", (spin,), (Nucleus(element="Cu", A=(-60.0, -500.0)),), width=width)
    parts = []
    for system in systems(natural):
        name = system.label.split(",")[0]
        g = 1.0 if name == "63Cu" else 2.3817 / 2.2236  # magnetic moments, from memory
        one = Species("cu", (spin,), (Nucleus(isotope=name, A=(-60.0 * g, -500.0 * g)),), width=width)
        parts.append(system.weight * simulate(one, sweep).signal)
    assert len(parts) == 2
    assert far(simulate(natural, sweep).signal, np.sum(parts, axis=0)) < 2e-3


def test_an_isotropic_line_is_a_gaussian() -> None:
    """One line at h nu / g mu_B of area g mu_B S(S+1)/6h = g mu_B / 8h."""
    species = Species("s", (Spin(g=(2.0,)),), width=Width(gaussian=2.0))
    got = simulate(species, SWEEP)
    expected = 2.0 * MU_B / 8 * gaussian(got.fields - X_BAND / (2.0 * MU_B), 2.0, 1)
    assert far(got.signal, expected) < 1e-3


@pytest.mark.parametrize("microwave", ["perpendicular", "parallel"])
@pytest.mark.parametrize("angle", [0.0, 0.7, 2.0])
def test_a_crystal_is_a_sum_of_lines(angle: float, microwave: str) -> None:
    """The field is `start` turned about `axis`; the microwave field lies along the rotation axis."""
    sample = Sample("crystal", axis=(0, 0, 1), start=(1, 0, 0), angles=(angle,), tilt=(0.3, 0.4, 0.5))
    sweep = replace(SWEEP, microwave=microwave)
    got = simulate(TRIPLET, sweep, sample)
    # components in molecular axes: the tilt's columns are the molecular axes in crystal components
    axes = Rotation.from_euler("ZYZ", sample.tilt).as_matrix()
    n = axes.T @ np.array([np.cos(angle), np.sin(angle), 0.0])
    system = systems(TRIPLET)[0]
    lines = plain_resonances(system, n, X_BAND, (250.0, 410.0))
    how = {"mode": "parallel"} if microwave == "parallel" else {"axis": axes.T @ np.array([0.0, 0.0, 1.0])}
    weights = plain_weights(system, n, lines, **how)
    expected = sum(w * gaussian(got.fields - line.field, WIDTH, 1) for w, line in zip(weights, lines, strict=True))
    assert isinstance(lines[0], Line)
    assert far(got.signal, expected) < 1e-3


def test_a_crystal_turned_by_its_angle_zero() -> None:
    at = Sample("crystal", axis=(0, 1, 1), start=(1, 0, 0), angles=(0.6,))
    shifted = replace(at, angles=(0.9,), angle_zero=0.3)
    assert simulate(TRIPLET, SWEEP, at).signal == pytest.approx(simulate(TRIPLET, SWEEP, shifted).signal, abs=1e-12)
    assert simulate(TRIPLET, SWEEP, at, angle=0.9).signal == pytest.approx(
        simulate(TRIPLET, SWEEP, replace(at, angles=(0.9,))).signal, abs=1e-12
    )


def test_a_powder_is_the_mean_of_crystals() -> None:
    """Averaged over directions, the microwave field over both normals: the powder of a broad line."""
    species = replace(TRIPLET, width=Width(gaussian=12.0))
    sweep = Sweep(X_BAND, (200.0, 460.0), 201)
    cos, share = np.polynomial.legendre.leggauss(12)
    total = np.zeros(201)
    for c, w in zip(0.5 * (cos + 1), 0.5 * share, strict=True):
        for phi in (np.arange(16) + 0.5) * 2 * np.pi / 16:
            n = np.array([np.sqrt(1 - c * c) * np.cos(phi), np.sqrt(1 - c * c) * np.sin(phi), c])
            first = unit(np.cross(n, (0.3, -0.5, 0.8)))
            for wave in (first, np.cross(n, first)):
                sample = Sample("crystal", axis=tuple(first), start=tuple(n), microwave_axis=tuple(wave))
                total += 0.5 * w / 16 * simulate(species, sweep, sample, tolerance=1e-2).signal
    assert far(simulate(species, sweep).signal, total) < 1e-2


def test_temperature_weighs_the_transitions() -> None:
    """At 1 K a large part of the upper triplet levels is empty: the lines are no longer alike."""
    warm, cold = (simulate(TRIPLET, replace(SWEEP, temperature=t), Sample("crystal")) for t in (300.0, 1.0))
    kt = constants.k * 300.0 / (constants.h * 1e6)
    plain = simulate(TRIPLET, SWEEP, Sample("crystal"))
    assert far(warm.signal * kt / X_BAND, plain.signal) < 2e-3  # h nu / n k T against 1/n
    assert far(cold.signal / np.abs(cold.signal).max(), plain.signal / np.abs(plain.signal).max()) > 0.1


def test_what_was_used_is_reported() -> None:
    report = simulate(TRIPLET, SWEEP).report["t"]["systems"][0]
    assert report["symmetry"] == "half"
    assert report["diagonalisations"] >= report["directions"] > 1
    assert 0 <= report["estimated_error"] <= 1e-3


def test_a_species_without_a_width_is_refused() -> None:
    with pytest.raises(InputError, match=r"has no width.*width\.gaussian"):
        simulate(replace(RADICAL, width=Width()), SWEEP)
