"""Crystals: rotation patterns against closed forms and eigenfields, sites, and the microwave field."""

from __future__ import annotations

import numpy as np
import pytest
from reference import eigenfields, plain_resonances, plain_weights
from scipy.signal import argrelextrema

from spinfit.crystal import crystal_directions, laboratory_directions, remarks, site_directions
from spinfit.errors import InputError
from spinfit.hamiltonian import systems
from spinfit.resonance import find
from spinfit.sites import operations
from spinfit.species import Species, Spin, Width, tensor_matrix, tilt_matrix
from spinfit.spectrum import simulate
from spinfit.sweep import Sample, Sweep
from spinfit.units import MU_B_OVER_H

TILT = (0.3, 0.7, -0.4)
G = (1.95, 2.05, 2.30)
NU = 9500.0
SWEEP = Sweep(NU, (280, 370), 1801, detect="absorption")


def centres(signal: np.ndarray, fields: np.ndarray = SWEEP.fields) -> np.ndarray:
    """Return the tops of separate absorption lines, by a parabola through three points."""
    k = argrelextrema(signal, np.greater)[0]
    k = k[signal[k] > 0.02 * signal.max()]
    y0, y1, y2 = signal[k - 1], signal[k], signal[k + 1]
    return fields[k] + 0.5 * (y0 - y2) / (y0 - 2 * y1 + y2) * (fields[1] - fields[0])


def test_directions_turn_right_handed_about_the_axis() -> None:
    sample = Sample(form="crystal", axis=(0, 0, 2), start=(3, 0, 0), angle_zero=np.deg2rad(10))
    field, microwave = laboratory_directions(sample, [np.deg2rad(10), np.deg2rad(100)])
    np.testing.assert_allclose(field, [[1, 0, 0], [0, 1, 0]], atol=1e-15)
    np.testing.assert_allclose(microwave, [[0, 0, 1], [0, 0, 1]], atol=1e-15)


def test_a_start_off_the_plane_moves_on_a_cone() -> None:
    field, _ = laboratory_directions(Sample(form="crystal", axis=(0, 0, 1), start=(1, 0, 1)), np.linspace(0, 6, 7))
    np.testing.assert_allclose(field[:, 2], np.sqrt(0.5), atol=1e-15)
    np.testing.assert_allclose(np.linalg.norm(field, axis=1), 1, atol=1e-15)


def test_tilt_carries_crystal_axes_into_molecular_axes() -> None:
    """The field along the molecular z axis has the components (0, 0, 1) in molecular axes."""
    z = tilt_matrix(TILT)[:, 2]
    field, _ = crystal_directions(Sample(form="crystal", start=tuple(z), axis=(0, 1, 0), tilt=TILT), [0.0])
    np.testing.assert_allclose(field, [[0, 0, 1]], atol=1e-15)


def test_rotation_pattern_of_a_rhombic_g() -> None:
    """g^2 = n^T (g g^T) n (closed form), the molecule tilted in the crystal, out of the plane's axes."""
    species = Species(spins=(Spin(0.5, G),), width=Width(gaussian=0.5))
    angles = np.deg2rad([0, 20, 75, 130, 171])
    sample = Sample(form="crystal", axis=(1, 1, 0), start=(0, 0, 1), angles=tuple(angles), angle_zero=0.05, tilt=TILT)
    spectrum = simulate(species, SWEEP, sample, tolerance=1e-4)
    assert spectrum.signal.shape == (5, SWEEP.points)
    assert spectrum.parts.shape == (1, 5, SWEEP.points)
    molecular = tilt_matrix(TILT)
    square = molecular @ np.diag(np.square(G)) @ molecular.T
    axis = np.array([1, 1, 0]) / np.sqrt(2)
    for angle, signal in zip(angles, spectrum.signal, strict=True):
        n = np.cos(angle - 0.05) * np.array([0, 0, 1]) + np.sin(angle - 0.05) * np.cross(axis, [0, 0, 1])
        expected = NU / (MU_B_OVER_H * np.sqrt(n @ square @ n))
        assert centres(signal) == pytest.approx([expected], abs=2e-4)


def test_each_angle_alone_is_its_row_of_all() -> None:
    species = Species(spins=(Spin(0.5, G),), width=Width(gaussian=0.5))
    sample = Sample(form="crystal", angles=(0.1, 0.9), tilt=TILT, point_group="222")
    both = simulate(species, SWEEP, sample)
    for k, angle in enumerate(sample.angles):
        alone = simulate(species, SWEEP, sample, angle=angle)
        assert alone.signal.shape == (SWEEP.points,)
        np.testing.assert_allclose(both.signal[k], alone.signal, rtol=0, atol=1e-12 * both.signal.max())


@pytest.mark.parametrize("symbol", ["2/m", "4/m", "mmm", "-3m", "m-3"])
def test_sites_lie_where_turned_tensors_put_them(symbol: str) -> None:
    """Each site's tensor is R T g^2 T^T R^T in the crystal frame: the lines are at n^T G n of them all."""
    species = Species(spins=(Spin(0.5, G),), width=Width(gaussian=0.2))
    axis, start = np.array([0.2, -0.5, 1.0]), np.array([1.0, 0.3, 0.4])
    sample = Sample(form="crystal", axis=tuple(axis), start=tuple(start), angles=(0.8,), tilt=TILT, point_group=symbol)
    axis, start = axis / np.linalg.norm(axis), start / np.linalg.norm(start)
    # the part along the axis stays, the part across it turns
    across = start - axis * (axis @ start)
    n = axis * (axis @ start) + across * np.cos(0.8) + np.cross(axis, across) * np.sin(0.8)
    first = tilt_matrix(TILT) @ np.diag(np.square(G)) @ tilt_matrix(TILT).T
    fields = [NU / (MU_B_OVER_H * np.sqrt(n @ r @ first @ r.T @ n)) for r in operations(symbol)]
    directions = site_directions(sample, sample.angles)
    assert directions.share.sum() == pytest.approx(1)
    (system,) = systems(species)
    got = find(system, directions.field, NU, (200, 450))
    np.testing.assert_allclose(
        np.sort(np.repeat(got.field, np.rint(directions.share * len(fields)).astype(int))), np.sort(fields), atol=1e-6
    )


def test_magnetically_equivalent_sites_are_merged() -> None:
    """The field in the plane normal to a fourfold axis: sites turned by 180 degrees are equivalent."""
    general = Sample(form="crystal", axis=(0, 0, 1), start=(1, 0.2, 0), tilt=TILT, point_group="4/m")
    assert site_directions(general, [0.3]).share.tolist() == [0.5, 0.5]
    along = Sample(form="crystal", axis=(1, 0, 0), start=(0, 0, 1), tilt=TILT, point_group="4/m")
    # along the fourfold axis all fields are equivalent, but the microwave field tells two pairs apart
    assert site_directions(along, [0.0]).share.tolist() == [0.5, 0.5]


@pytest.mark.parametrize("symbol", ["2", "4", "-3m", "m-3m"])
def test_area_does_not_depend_on_the_number_of_sites(symbol: str) -> None:
    """With an isotropic g all sites coincide: the spectrum is that of one site."""
    species = Species(spins=(Spin(0.5, (2.0,)),), width=Width(gaussian=0.5))
    one = simulate(species, SWEEP, Sample(form="crystal", angles=(0.3,))).signal
    many = simulate(species, SWEEP, Sample(form="crystal", angles=(0.3,), point_group=symbol)).signal
    np.testing.assert_allclose(many, one, rtol=0, atol=1e-12 * one.max())


def test_a_spectrum_has_the_symmetry_of_the_crystal() -> None:
    """Turned by 90 degrees about the fourfold axis a crystal is the same; by 45 it is not."""
    species = Species(spins=(Spin(1.5, (1.98,), D=3000, E=400),), width=Width(gaussian=2.0))
    sample = Sample(form="crystal", axis=(0, 0, 1), start=(1, 0, 0), tilt=TILT, point_group="4/m")
    sweep = Sweep(NU, (50, 600), 1101)
    a, b, c = (simulate(species, sweep, sample, angle=x).signal for x in (0.2, 0.2 + np.pi / 2, 0.2 + np.pi / 4))
    np.testing.assert_allclose(a, b, rtol=0, atol=1e-6 * np.abs(a).max())
    assert np.abs(a - c).max() > 0.1 * np.abs(a).max()


@pytest.mark.parametrize("mode", ["perpendicular", "parallel"])
def test_high_spin_crystal_against_eigenfields(mode: str) -> None:
    """S = 3/2, tensors tilted against each other: G. G. Belford et al., J. Magn. Reson. 11, 251 (1973)."""
    species = Species(
        spins=(Spin(1.5, (1.95, 2.0, 2.1), D=4000, E=700, D_tilt=(0.2, 0.6, 0.1)),), width=Width(gaussian=1.0)
    )
    sample = Sample(form="crystal", axis=(1, 0, 1), start=(0, 1, 0), tilt=TILT, microwave_axis=(1, 0, 1))
    sweep = Sweep(NU, (100, 700), 6001, microwave=mode, temperature=20.0, detect="absorption")
    (system,) = systems(species)
    field, wave = crystal_directions(sample, [0.7])
    signal = simulate(species, sweep, sample, angle=0.7, tolerance=1e-4).signal
    lines = plain_resonances(system, field[0], NU, (60, 740))
    np.testing.assert_allclose([line.field for line in lines], eigenfields(system, field[0], NU, (60, 740)), atol=1e-5)
    axis = wave[0] if mode == "perpendicular" else None
    weights = plain_weights(system, field[0], lines, mode=mode, axis=axis, temperature=20.0)
    expected = sum(
        w * np.exp(-2 * (sweep.fields - line.field) ** 2) * np.sqrt(2 / np.pi)  # sigma = pp width / 2
        for w, line in zip(weights, lines, strict=True)
    )
    np.testing.assert_allclose(signal, expected, rtol=0, atol=2e-4 * expected.max())


def test_microwave_axis_counts_as_given() -> None:
    """S = 1/2, isotropic g: |M.b1|^2 falls as sin^2 of the angle between the fields (closed form)."""
    species = Species(spins=(Spin(0.5, (2.0,)),), width=Width(gaussian=0.5))
    right = simulate(species, SWEEP, Sample(form="crystal")).signal
    for degrees in (90, 60, 20):
        b1 = (np.cos(np.deg2rad(degrees)), 0.0, np.sin(np.deg2rad(degrees)))
        sample = Sample(form="crystal", start=(1, 0, 0), axis=(0, 1, 0), microwave_axis=b1)
        got = simulate(species, SWEEP, sample)
        np.testing.assert_allclose(
            got.signal, right * np.sin(np.deg2rad(degrees)) ** 2, rtol=0, atol=1e-9 * right.max()
        )
        assert [code for code, _ in got.warnings] == (["oblique_microwave"] if degrees < 80 else [])


def test_remarks_name_the_angle() -> None:
    sample = Sample(form="crystal", axis=(0, 0, 1), start=(1, 0, 0), microwave_axis=(1, 0, 0))
    ((_, text),) = remarks(sample, np.deg2rad([90, 30]), "perpendicular")
    assert "at 30 deg the microwave field is 30 deg from" in text
    assert remarks(sample, [0.0], "parallel") == ()


def test_what_has_no_direction_is_refused() -> None:
    with pytest.raises(InputError, match="microwave_axis: .* has no direction"):
        simulate(Species(), SWEEP, Sample(form="crystal", microwave_axis=(0, 0, 0)))
    with pytest.raises(InputError, match='did you mean "4/mmm"'):
        simulate(Species(), SWEEP, Sample(form="crystal", point_group="4/mm"))


def test_axial_tensor_in_the_crystal_frame() -> None:
    """A tilt of the sample and the same tilt of the tensor the other way cancel: only their product counts."""
    axes = tilt_matrix(TILT)
    tilted = Species(spins=(Spin(0.5, G, g_tilt=TILT),), width=Width(gaussian=0.5))
    np.testing.assert_allclose(tensor_matrix(G, TILT), axes @ np.diag(G) @ axes.T, atol=1e-15)
    plain = Species(spins=(Spin(0.5, G),), width=Width(gaussian=0.5))
    a = simulate(tilted, SWEEP, Sample(form="crystal"), angle=0.4).signal
    b = simulate(plain, SWEEP, Sample(form="crystal", tilt=TILT), angle=0.4).signal
    np.testing.assert_allclose(a, b, rtol=0, atol=1e-9 * a.max())
