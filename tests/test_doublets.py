"""Three rings hold a doublet without structure: B^-2 is the quadratic form n.g.g^T.n, worked out here."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy import constants

from spinfit.branches import Request
from spinfit.doublets import doublet
from spinfit.hamiltonian import systems
from spinfit.lineshape import Shape
from spinfit.orientations import Mesh
from spinfit.sheets import Grain, continued, restored
from spinfit.species import Nucleus, Species, Spin
from spinfit.symmetry import symmetry_of

NU = 9500.0
MU_B_OVER_H = constants.physical_constants["Bohr magneton in Hz/T"][0] * 1e-9  # MHz/mT
SHAPE = Shape.from_widths(0.5, 0.0)
REQUEST = Request(NU, 100.0, 700.0, Grain.of(SHAPE, 1e-3), SHAPE.scale, 1e-3)


@pytest.mark.parametrize("g", [(2.0, 2.05, 2.25), (1.2, 2.9), (1.4, 2.2, 5.5)])
def test_fields_and_weights_everywhere(g: tuple[float, ...]) -> None:
    (system,) = systems(Species("s", (Spin(g=g, g_tilt=(0.3, 0.7, -0.2)),)))
    symmetry = symmetry_of(system)
    rings, _, branches, _ = doublet(system, symmetry, REQUEST)
    mesh = Mesh(symmetry.kind, 12, 1 if symmetry.kind == "axial" else 10)
    x, y, inverse = continued(branches.field, branches.weight)
    fields, weights = restored(rings.to_mesh(x, mesh), rings.to_mesh(y, mesh), inverse[:, :, None])
    theta, phi = np.meshgrid(np.linspace(0, np.pi / 2, mesh.thetas + 1), mesh.phi(), indexing="ij")
    n = np.stack([np.sin(theta) * np.cos(phi), np.sin(theta) * np.sin(phi), np.cos(theta)], axis=-1) @ symmetry.axes.T
    tensor = np.real([[np.trace(a @ b) for b in system.zeeman] for a in system.zeeman]) * 2 / MU_B_OVER_H**2  # g.g^T
    square = np.einsum("...i,ij,...j->...", n, tensor, n)
    assert fields[0] == pytest.approx(NU / (MU_B_OVER_H * np.sqrt(square)), rel=1e-9)
    # |M|^2 for b1: (mu_B/2)^2 of the part of b1.g normal to n.g; none for b1 along n, so all of it is perpendicular
    along = np.einsum("...i,ij->...j", n, tensor)
    moment = np.trace(tensor) - np.einsum("...i,...i->...", along, along) / square
    want = moment / np.sqrt(square)
    assert weights[0] / weights[0].max() == pytest.approx(want / want.max(), abs=1e-9)


def test_where_a_direction_has_more_to_say() -> None:
    (system,) = systems(Species("s", (Spin(g=(2.0, 2.05, 2.25)),)))
    symmetry = symmetry_of(system)
    assert doublet(system, symmetry, REQUEST) is not None
    assert doublet(system, symmetry, replace(REQUEST, weigh=lambda n: n[:, 2] ** 2)) is None
    assert doublet(system, symmetry, replace(REQUEST, populations=(0.7, 0.3))) is None
    assert doublet(system, symmetry, replace(REQUEST, high=130.0)) is None
    proton = Nucleus(isotope="1H", A=(3.0, 4.0, 8.0), treat="second order")
    (weak,) = systems(Species("s", (Spin(g=(2.0, 2.05, 2.25)),), (proton,)), perturb=True)
    assert doublet(weak, symmetry_of(weak), REQUEST) is None
