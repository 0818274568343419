"""Directions, symmetry and continuation over the sphere, against spherical harmonics and group theory."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from spinfit.hamiltonian import systems
from spinfit.orientations import Mesh, Rings
from spinfit.species import Exchange, Nucleus, Species, Spin
from spinfit.symmetry import symmetry_of

TILT = (0.4, 0.9, -0.3)
DOMAINS = ("axial", "octant", "quarter", "half")
HARMONIC = {"axial": 0, "octant": 2, "quarter": 2, "half": 1}
"""Spacing of the azimuthal orders m that each domain's symmetry leaves."""


def kind_of(*spins: Spin, **others: object) -> str:
    return symmetry_of(systems(Species(spins=spins, **others))[0]).kind


@pytest.mark.parametrize(
    ("expected", "spins", "others"),
    [
        ("point", (Spin(g=(2.0,)),), {}),
        ("point", (Spin(g=(2.0,)),), {"nuclei": (Nucleus(isotope="1H", A=(1420.4,)),)}),
        ("axial", (Spin(g=(2.0, 2.2)),), {}),
        ("axial", (Spin(g=(2.0, 2.2), g_tilt=TILT),), {}),
        ("axial", (Spin(2, (2.0,), 900.0, D_tilt=TILT),), {}),
        ("axial", (Spin(1, (2.0,), 900.0, 900.0),), {}),  # E = D: (2, -4, 2) D/3 is axial about y
        ("axial", (Spin(2.5, (2.0,), stevens=(((4, 0), 5.0),)),), {}),
        ("octant", (Spin(g=(2.0, 2.1, 2.2)),), {}),
        ("octant", (Spin(g=(2.0, 2.1, 2.2), g_tilt=TILT),), {}),
        ("octant", (Spin(2.5, (2.0,), stevens=(((4, 0), 5.0), ((4, 4), 25.0))),), {}),
        ("octant", (Spin(1, (2.0, 2.1, 2.2), 900.0, 100.0),), {}),
        ("quarter", (Spin(1, (2.0, 2.1, 2.2), 900.0, 100.0, D_tilt=(0.0, 0.4, 0.0)),), {}),  # common y
        ("quarter", (Spin(1, (2.0, 2.1, 2.2), 900.0, 100.0, D_tilt=(0.4, 0.0, 0.0)),), {}),  # common z
        ("half", (Spin(1, (2.0, 2.1, 2.2), 900.0, 100.0, D_tilt=TILT),), {}),
        ("quarter", (Spin(2.5, (2.0,), 900.0, stevens=(((4, -3), 5.0), ((4, 2), 5.0))),), {}),  # y^3 z: about x
        ("half", (Spin(2.5, (2.0,), 900.0, stevens=(((4, -3), 5.0), ((4, 1), 5.0))),), {}),
        ("half", (Spin(g=(2.0, 2.1, 2.2)), Spin(g=(2.0, 2.1, 2.2), g_tilt=TILT)), {"exchange": (Exchange(J=5.0),)}),
    ],
)
def test_symmetry_of_known_systems(expected: str, spins: tuple[Spin, ...], others: dict) -> None:
    assert kind_of(*spins, **others) == expected


def test_an_antisymmetric_exchange_between_equal_isotropic_spins_is_axial() -> None:
    pair = (Spin(g=(2.0,)), Spin(g=(2.0,)))
    coupled = (Exchange(J=100.0, antisymmetric=(10.0, 20.0, 30.0)),)
    found = symmetry_of(systems(Species(spins=pair, exchange=coupled))[0])
    assert found.kind == "axial"
    assert abs(found.axes[:, 2] @ np.array([10.0, 20.0, 30.0])) == pytest.approx(np.sqrt(1400))


def test_the_frame_of_a_tilted_tensor() -> None:
    """The domain stands in the tensor's axes, whose order may change."""
    found = symmetry_of(systems(Species(spins=(Spin(g=(2.0, 2.1, 2.3), g_tilt=TILT),)))[0])
    axes = Rotation.from_euler("ZYZ", TILT).as_matrix()
    assert np.abs(found.axes.T @ axes).max(axis=0) == pytest.approx(np.ones(3))


def harmonics(kind: str, degree: int) -> list[tuple[int, int, bool]]:
    """Return (l, m, sine) of the even real spherical harmonics up to a degree that a domain's symmetry allows."""
    out = []
    for l in range(0, degree + 1, 2):  # noqa: E741
        for m in range(0, l + 1):
            if (kind == "axial" and m) or m % max(HARMONIC[kind], 1):
                continue
            out.append((l, m, False))
            if m and kind in ("quarter", "half"):
                out.append((l, m, True))
    return out


def real_harmonic(l: int, m: int, sine: bool, n: np.ndarray) -> np.ndarray:  # noqa: E741
    """Return Re or Im of an unnormalised (x + iy)^m d^m P_l(z)/dz^m at unit vectors n (..., 3)."""
    legendre = np.polynomial.Legendre.basis(l).deriv(m) if m else np.polynomial.Legendre.basis(l)
    azimuth = (n[..., 0] + 1j * n[..., 1]) ** m
    value = (azimuth.imag if sine else azimuth.real) * legendre(n[..., 2])
    return value / max(1.0, float(legendre(1.0)))


def points(theta: np.ndarray, phi: np.ndarray) -> np.ndarray:
    s = np.sin(theta)
    return np.stack([s * np.cos(phi), s * np.sin(phi), np.cos(theta) + 0 * phi], axis=-1)


def mesh_points(mesh: Mesh) -> np.ndarray:
    theta = np.linspace(0, 0.5 * np.pi, mesh.thetas + 1)[:, None]
    return points(theta + 0 * mesh.phi(), mesh.phi() + 0 * theta)


def degree_of(rings: Rings) -> int:
    """Return a degree that every ring, the shortest one too, can hold: 1 + extra intervals a right angle."""
    return 2 * rings.extra + (2 if rings.kind in ("axial", "octant") else 0)  # the last sine would be missing


@pytest.mark.parametrize("kind", DOMAINS)
@pytest.mark.parametrize(("rings", "extra"), [(8, 2), (16, 4), (24, 6)])
def test_continuation_of_low_harmonics_is_exact(kind: str, rings: int, extra: int) -> None:
    """To the mesh and to finer knots."""
    knots = Rings(kind, rings, rings + extra, extra)
    mesh = Mesh(kind, 36, 1 if kind == "axial" else 24)
    finer = Rings(kind, 2 * rings, 2 * rings + extra, extra)
    n, there = points(*knots.angles()), mesh_points(mesh)
    known = harmonics(kind, degree_of(knots))
    values, on_mesh, on_finer = (
        np.stack([real_harmonic(*one, at) for one in known]) for at in (n, there, points(*finer.angles()))
    )
    assert np.abs(knots.to_mesh(values, mesh) - on_mesh).max() < 1e-9
    assert np.abs(knots.to_finer(values, finer) - on_finer).max() < 1e-9


@pytest.mark.parametrize("kind", DOMAINS)
def test_continuation_converges_exponentially_for_a_resonance_field(kind: str) -> None:
    """The field of a doublet, (n.G.n)^(-1/2), symmetric as the domain says."""
    turned = {"axial": (2.0, 2.0, 2.6), "octant": (2.0, 2.2, 2.6)}.get(kind, (2.0, 2.2, 2.6))
    frame = {"quarter": Rotation.from_euler("z", 0.6), "half": Rotation.from_euler("ZYZ", TILT)}.get(kind)
    axes = np.eye(3) if frame is None else frame.as_matrix()
    g = axes @ np.diag(np.square(turned)) @ axes.T

    def miss(rings: int) -> float:
        knots = Rings(kind, rings, rings + rings // 4, rings // 4)
        mesh = Mesh(kind, 60, 1 if kind == "axial" else 40)
        field = [np.einsum("...i,ij,...j->...", n, g, n) ** -0.5 for n in (points(*knots.angles()), mesh_points(mesh))]
        return float(np.abs(knots.to_mesh(field[0][None], mesh)[0] - field[1]).max())

    assert miss(24) < 1e-6
    assert miss(24) < 0.01 * miss(8)


@pytest.mark.parametrize("kind", DOMAINS)
def test_mesh_weights_integrate_harmonics(kind: str) -> None:
    """Every harmonic but the first averages to zero over the sphere."""
    mesh = Mesh(kind, 12, 1 if kind == "axial" else 16)
    weights, n = mesh.weights(), mesh_points(mesh)
    assert weights.sum() == pytest.approx(1)
    assert (weights >= 0).all()
    for l, m, sine in harmonics(kind, 14):  # noqa: E741
        expected = 1.0 if l == 0 else 0.0
        assert (weights * real_harmonic(l, m, sine, n)).sum() == pytest.approx(expected, abs=1e-12)


@pytest.mark.parametrize("kind", DOMAINS)
def test_knot_weights_integrate_low_harmonics(kind: str) -> None:
    knots = Rings(kind, 8, 10, 2)
    w, n = knots.knot_weights(), points(*knots.angles())
    assert w.sum() == pytest.approx(1)
    for l, m, sine in harmonics(kind, 4):  # noqa: E741
        assert (w * real_harmonic(l, m, sine, n)).sum() == pytest.approx(1.0 if l == 0 else 0.0, abs=1e-12)


@pytest.mark.parametrize("kind", DOMAINS)
@pytest.mark.parametrize("size", [8, 16, 32])
def test_halved_knots_are_knots(kind: str, size: int) -> None:
    extra = 2 * (size // 8)
    rings = Rings(kind, size, size + extra, extra)
    coarse, kept = rings.halved(), rings.halved_knots()
    assert (kept >= 0).all()
    assert len(set(kept.tolist())) == len(kept)
    fine_n, coarse_n = points(*rings.angles()), points(*coarse.angles())
    assert fine_n[kept] == pytest.approx(coarse_n, abs=1e-12)
    assert len(coarse_n) < 0.5 * len(fine_n) + 2


def test_known_knots_within_a_finer_set() -> None:
    coarse, fine = Rings("octant", 8, 10, 2), Rings("octant", 16, 20, 4)
    where = coarse.within(fine)
    a, b = points(*coarse.angles()), points(*fine.angles())
    for k, at in enumerate(where):
        distance = np.abs(b - a[k]).max(axis=1)
        assert (distance.min() > 1e-9) if at < 0 else (np.argmin(distance) == at)


@pytest.mark.parametrize("kind", DOMAINS)
def test_directions_are_unit_vectors_in_the_given_frame(kind: str) -> None:
    axes = Rotation.from_euler("ZYZ", TILT).as_matrix()
    knots = Rings(kind, 8, 10, 2)
    n = knots.directions(axes)
    assert np.linalg.norm(n, axis=1) == pytest.approx(np.ones(len(n)))
    assert n @ axes == pytest.approx(points(*knots.angles()), abs=1e-12)


def test_half_sphere_knots_hold_no_direction_twice() -> None:
    """Opposite directions are the same one: on the equator only half of the circle is kept."""
    n = points(*Rings("half", 8, 10, 2).angles())
    overlap = np.abs(n @ n.T) - np.eye(len(n))
    assert overlap.max() < 1 - 1e-6


@pytest.mark.parametrize(("kind", "harmonics"), [("octant", 2), ("octant", 4), ("quarter", 2), ("half", 2)])
def test_splines_leave_few_harmonics_around_as_they_are(kind: str, harmonics: int) -> None:
    """Three azimuths hold cos 2 phi, but no spline through them does: nothing of it may be lost."""
    knots, mesh = Rings(kind, 16, harmonics, 4), Mesh(kind, 20, 24)
    finer = Rings(kind, 32, 2 * harmonics, 8)

    def form(n: np.ndarray) -> np.ndarray:
        return n[..., 0] ** 2 - 0.4 * n[..., 1] ** 2 + (0.3 * n[..., 0] * n[..., 1] if kind != "octant" else 0.0)

    values = form(points(*knots.angles()))[None]
    assert np.abs(knots.to_mesh_locally(values, mesh)[0] - form(mesh_points(mesh))).max() < 1e-4
    assert np.abs(knots.to_finer_locally(values, finer)[0] - form(points(*finer.angles()))).max() < 1e-4
