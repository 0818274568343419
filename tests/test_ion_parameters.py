"""Crystal field to spin parameters, their derivatives and what they determine."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.spatial.transform import Rotation

from spinfit.errors import InputError
from spinfit.ion.crystal_field import Ligand, from_octahedral, from_orbitals, from_overlap
from spinfit.ion.model import IonModel, racah_to_slater
from spinfit.ion.names import Shell
from spinfit.ion.parameters import rank_check, spin_jacobian, spin_parameters, start_parameters, tilt_of
from spinfit.species import tensor_matrix, tilt_matrix
from spinfit.units import G_ELECTRON
from spinfit.units import MHZ_PER_WAVENUMBER as CM


def chromium(turn=None):
    ligands = [(1, 0, 0), (-1, 0, 0), (0, 1, 0), (0, -1, 0), (0, 0, 1), (0, 0, -1)]
    kinds = ["O", "O", "O", "O", "N", "N"]
    rotate = np.eye(3) if turn is None else turn
    field = from_overlap(
        2,
        [
            Ligand(tuple(rotate @ np.array(p, float)), k, e * CM, pi * CM, pi * CM)
            for p, k, (e, pi) in zip(ligands, kinds, [(7500, 1000)] * 4 + [(6500, 100)] * 2, strict=True)
        ],
    )
    return IonModel(Shell(3, 2, 3), 250 * CM, racah_to_slater(700 * CM, 3000 * CM), field)


def test_tensors_turn_with_the_ligands():
    """The same complex turned by R has g' = R g R^T and D' = R D R^T."""
    turn = Rotation.from_euler("ZYZ", [0.4, 1.1, -0.7]).as_matrix()
    here, there = spin_parameters(chromium()), spin_parameters(chromium(turn))
    np.testing.assert_allclose(there.g, turn @ here.g @ turn.T, atol=1e-9)
    np.testing.assert_allclose(there.D, turn @ here.D @ turn.T, atol=1e-4 * np.abs(here.D).max())
    spin = there.as_spin()
    np.testing.assert_allclose(tensor_matrix(spin.g, spin.g_tilt), there.g, atol=1e-9)
    D = tensor_matrix((-spin.D / 3 + spin.E, -spin.D / 3 - spin.E, 2 * spin.D / 3), spin.D_tilt)
    np.testing.assert_allclose(D, there.D, atol=1e-6 * np.abs(there.D).max())


@given(
    alpha=st.floats(-3.1, 3.1), beta=st.sampled_from([0.0, 1e-13, 0.3, 1.5, 3.0, math.pi]), gamma=st.floats(-3.1, 3.1)
)
@settings(max_examples=60, derandomize=True)
def test_tilts_go_there_and_back(alpha, beta, gamma):
    axes = tilt_matrix((alpha, beta, gamma))
    np.testing.assert_allclose(tilt_matrix(tilt_of(axes)), axes, atol=1e-9)


def copper(zeta=829.0):
    energies = {"x2-y2": 15000.0, "z2": 7000.0, "xy": 0.0, "xz": -500.0, "yz": -1500.0}
    return IonModel(Shell(3, 2, 9), zeta * CM, crystal_field=from_orbitals(2, energies).scaled(CM))


def test_derivatives_tend_to_those_of_the_formula():
    """g_z = g_e + 8 zeta/Delta: dg_z/dDelta = -8 zeta/Delta^2, dg_z/dzeta = 8/Delta, as zeta/Delta -> 0."""
    zeta = 2.0
    result = spin_jacobian(copper(zeta), ["xy", "zeta", "xz", "reduction"])
    delta = 15000 * CM
    assert result.dg[0, 2, 2] == pytest.approx(8 * zeta * CM / delta**2, rel=1e-3)
    assert result.dg[1, 2, 2] == pytest.approx(8 / delta, rel=1e-3)
    assert result.dg[2, 1, 1] == pytest.approx(2 * zeta * CM / (15500 * CM) ** 2, rel=1e-3)
    assert result.dg[3, 2, 2] == pytest.approx(8 * zeta / 15000, rel=1e-3)
    assert np.abs(result.dD).max() == 0


def test_derivatives_agree_with_finer_steps():
    model = chromium()
    names = ["e_sigma_O", "e_pi_N", "F2", "zeta"]
    one, two = (spin_jacobian(model, names, step=s) for s in (1e-4, 1e-3))
    np.testing.assert_allclose(one.dg, two.dg, atol=1e-4 * np.abs(two.dg).max())
    np.testing.assert_allclose(one.dD, two.dD, atol=1e-3 * np.abs(two.dD).max())
    # D and g are homogeneous: scaling every energy scales D and leaves g
    everything = list(model.parameters)
    full = spin_jacobian(model, everything)
    values = np.array([model.parameters[n] for n in everything])
    np.testing.assert_allclose(np.einsum("n,nij->ij", values, full.dg), 0, atol=1e-6)
    np.testing.assert_allclose(
        np.einsum("n,nij->ij", values, full.dD), full.value.D, atol=1e-3 * abs(full.value.D).max()
    )


def test_rank_says_what_g_determines():
    """Three g values fix three gaps; a common shift of all orbitals, and z2, change nothing."""
    names = ["x2-y2", "z2", "xy", "xz", "yz"]
    report = rank_check(copper(), names, g_uncertainty=1e-4)
    assert report.rank == 3
    assert "z2" in report.undetermined
    assert len(report.loose) == 2
    three = rank_check(copper(), ["xy", "xz", "yz"], g_uncertainty=1e-4)
    assert three.rank == 3
    assert three.determined == ("xy", "xz", "yz")
    # sigma(Delta) = sigma(g) Delta^2/(n zeta) in first order: 1e-4 x 15000^2/(8 x 829) cm^-1
    assert three.uncertainties[0] / CM == pytest.approx(1e-4 * 15000**2 / (8 * 829), rel=0.15)
    # One axial complex, isotropic bonds: only the products zeta/Delta count, so zeta and all gaps together are loose.
    loose = rank_check(copper(), ["zeta", "xy", "xz", "yz"], g_uncertainty=1e-4)
    assert loose.rank == 3
    assert "zeta" in loose.undetermined


def test_unknown_parameters_and_grounds_without_a_spin():
    with pytest.raises(InputError, match='did you mean "xz"'):
        spin_jacobian(copper(), ["xzz"])
    cobalt = IonModel(Shell(3, 2, 6), 400 * CM, racah_to_slater(900 * CM, 3900 * CM), from_octahedral(9000 * CM))
    with pytest.raises(InputError, match="even"):
        spin_parameters(cobalt)


def test_starts():
    assert start_parameters("Cu2+").S == 0.5
    assert start_parameters("Cu2+", 1.0) is None
    assert start_parameters("Eu3+") is None
    nickel = start_parameters("Ni2+", 1.0)
    np.testing.assert_allclose(nickel.g, 2.21 * np.eye(3), atol=0.1)
    erbium = start_parameters("Er3+", 0.5)
    np.testing.assert_allclose(np.diag(erbium.g), 6.8, atol=0.1)  # cubic gamma 7, K. R. Lea et al. (1962)
    assert spin_parameters(copper(0.0)).g == pytest.approx(G_ELECTRON * np.eye(3))


def test_rounding_makes_no_tilt():
    """A cubic field has no D, and an axial one no E, whatever the diagonalisation rounds."""
    racah = racah_to_slater(900 * CM, 3800 * CM)
    cubic = IonModel(Shell(3, 2, 8), 600 * CM, racah, from_octahedral(9000 * CM))
    spin = spin_parameters(cubic).as_spin()
    assert (spin.D, spin.E) == (0.0, 0.0)
    assert spin.g_tilt == spin.D_tilt == (0.0, 0.0, 0.0)
    axial = spin_parameters(IonModel(Shell(3, 2, 8), 600 * CM, racah, from_octahedral(9000 * CM, 50 * CM))).as_spin()
    assert axial.g_tilt == axial.D_tilt == (0.0, 0.0, 0.0)
    assert abs(axial.E) < 1e-6 * abs(axial.D)
