"""The promise of the powder average: its error against dense sums, in quick systems of every kind.

The references (`dense`) diagonalise every direction of a mesh; two meshes must agree far better than
the tolerance before they count.  `scripts/campaign engine` does the same for many more systems.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from dense import Scan, converged
from reference import frequency_broadened, plain_powder
from scipy.spatial.transform import Rotation

from spinfit.hamiltonian import systems
from spinfit.species import Exchange, Nucleus, Species, Spin, Width
from spinfit.spectrum import Spectrum, simulate
from spinfit.sweep import Sweep

X_BAND = 9500.0


def engine(species: Species, scan: Scan, tolerance: float = 1e-3) -> Spectrum:
    first, last, points = scan.fields
    sweep = Sweep(
        scan.frequency, (first, last), points, temperature=scan.temperature, microwave=scan.mode, detect=scan.detect
    )
    return simulate(species, sweep, tolerance=tolerance)


def far(a: np.ndarray, b: np.ndarray) -> float:
    """Return the largest difference relative to the largest value."""
    return float(np.abs(a - b).max() / np.abs(b).max())


def of(*spins: Spin, width: float = 0.0, lorentzian: float = 0.0, **others: object) -> Species:
    return Species("s", spins, width=Width(gaussian=width, lorentzian=lorentzian), **others)


COPPER = Nucleus(isotope="63Cu", A=(-30.0, -60.0, -540.0))
SYSTEMS = {
    "rhombic doublet": (of(Spin(g=(2.0, 2.05, 2.25)), width=2.0), Scan(X_BAND, (290, 350, 400), 2.0), "octant", 90, 3),
    "Lorentzian": (
        of(Spin(g=(2.0, 2.05, 2.25)), lorentzian=4.0),
        Scan(X_BAND, (290, 350, 400), 0.0, 4.0),
        "octant",
        50,
        4,
    ),
    "window within": (
        of(Spin(g=(2.0, 2.05, 2.25)), width=2.0),
        Scan(X_BAND, (314, 327, 200), 2.0),
        "octant",
        90,
        3,
    ),
    "axial copper": (
        of(Spin(g=(2.05, 2.25)), width=1.0, nuclei=(replace(COPPER, A=(-40.0, -540.0)),)),
        Scan(X_BAND, (265, 350, 400), 1.0),
        "axial",
        300,
        6,
    ),
    "triplet": (of(Spin(1, (2.0,), 900, -150), width=6.0), Scan(X_BAND, (140, 420, 400), 6.0), "octant", 60, 8),
    "triplet, parallel mode": (
        of(Spin(1, (2.0,), 900, -150), width=6.0),
        Scan(X_BAND, (140, 420, 400), 6.0, mode="parallel"),
        "octant",
        60,
        8,
    ),
    "triplet, 5 K": (
        of(Spin(1, (2.0, 2.1), 1500), width=4.0),
        Scan(X_BAND, (140, 440, 400), 4.0, temperature=5.0),
        "axial",
        250,
        8,
    ),
    "pair": (
        of(
            Spin(g=(2.0,)),
            Spin(g=(2.05,)),
            width=1.5,
            exchange=(Exchange(J=2000.0, dipolar=(300.0, 300.0, -600.0)),),
        ),
        Scan(X_BAND, (300, 370, 400), 1.5),
        "axial",
        200,
        12,
    ),
    "nothing collinear": (
        of(Spin(1, (1.95, 2.0, 2.1), 500, 100, g_tilt=(0.2, 0.9, 0.0), D_tilt=(0.3, 0.6, 0.2)), width=10.0),
        Scan(X_BAND, (120, 430, 300), 10.0),
        "hemisphere",
        20,
        8,
    ),
}


@pytest.mark.parametrize("name", SYSTEMS)
def test_the_promise(name: str) -> None:
    species, scan, domain, size, nodes = SYSTEMS[name]
    around = {"axial": 1, "octant": size, "hemisphere": 4 * size}[domain]
    truth, difference, _ = converged(
        systems(species), scan, domain, size, around, nodes=nodes, enough=3e-4, seconds=30.0
    )
    assert difference < 3e-4
    for tolerance in (1e-3, 1e-2):
        assert far(engine(species, scan, tolerance).signal, truth) < tolerance


def test_the_dense_sum_against_other_ways() -> None:
    """The reference itself: plain exact roots, and a narrow Gaussian in frequency without any root."""
    species, scan = of(Spin(1, (2.0,), 900, -150), width=8.0), Scan(X_BAND, (140, 420, 100), 8.0)
    systems_ = systems(species)
    truth, difference, _ = converged(systems_, scan, "octant", 40, 40, nodes=8)
    fields = np.linspace(*scan.fields)
    assert difference < 1e-4
    assert far(plain_powder(systems_[0], X_BAND, fields, 8.0, 60, 60, octant=True, points=12), truth) < 1e-3
    axial = systems(of(Spin(1, (2.0,), 900), width=8.0))
    truth, difference, _ = converged(axial, scan, "axial", 100, 1, nodes=8)
    assert difference < 1e-4
    wide, narrow = (frequency_broadened(axial[0], X_BAND, fields, 8.0, 250, 1, w, octant=True) for w in (30.0, 15.0))
    assert far((4 * narrow - wide) / 3, truth) < 1e-3


# --- invariances ---------------------------------------------------------------------------------


def turned(by: Rotation, tilt: tuple[float, float, float]) -> tuple[float, float, float]:
    """Return the tilt of a tensor after the whole molecule has been turned."""
    axes = by * Rotation.from_euler("ZYZ", tilt)
    return tuple(float(a) for a in axes.as_euler("ZYZ"))


@pytest.mark.parametrize("angles", [(0.3, 0.8, -0.5), (1.0, 2.0, 3.0)])
def test_turning_all_tensors_together_changes_nothing(angles: tuple[float, float, float]) -> None:
    by = Rotation.from_euler("ZYZ", angles)
    scan = Scan(X_BAND, (200, 450, 500), 3.0)

    def molecule(turn: Rotation) -> Species:
        spin = Spin(
            1, (1.95, 2.0, 2.1), 500, 100, g_tilt=turned(turn, (0.2, 0.9, 0.0)), D_tilt=turned(turn, (0.1, 0.2, 0.3))
        )
        nucleus = Nucleus(isotope="1H", A=(90.0, 40.0, 20.0), A_tilt=turned(turn, (0.5, 0.3, 0.1)))
        return of(spin, width=3.0, nuclei=(nucleus,))

    assert far(engine(molecule(by), scan).signal, engine(molecule(Rotation.identity()), scan).signal) < 2e-3


@pytest.mark.parametrize("order", [(1, 2, 0), (2, 0, 1), (1, 0, 2), (2, 1, 0)])
def test_labels_of_the_axes_change_nothing(order: tuple[int, int, int]) -> None:
    """g, D and A permuted together; D and E follow from the permuted tensor."""
    scan = Scan(X_BAND, (200, 480, 500), 3.0)
    g, d = np.array([1.95, 2.0, 2.1]), np.array([-1200.0 / 3 + 150, -1200.0 / 3 - 150, 2 * 1200.0 / 3])
    a = np.array([90.0, 40.0, 20.0])

    def molecule(k: list[int]) -> Species:
        zz, yy, xx = d[k[2]], d[k[1]], d[k[0]]
        spin = Spin(1, tuple(g[k]), 1.5 * float(zz), 0.5 * float(xx - yy))
        return of(spin, width=3.0, nuclei=(Nucleus(isotope="1H", A=tuple(a[k])),))

    assert far(engine(molecule(list(order)), scan).signal, engine(molecule([0, 1, 2]), scan).signal) < 2e-3


@pytest.mark.parametrize(("detect", "sign"), [("absorption", 1), ("derivative", -1), ("second derivative", 1)])
def test_a_spectrum_is_even_in_the_field(detect: str, sign: int) -> None:
    """H(-B) has the energies of H(B) after time reversal; odd derivatives change sign."""
    species = of(Spin(1, (2.0,), 9000.0, 500.0), width=8.0)
    got = engine(species, Scan(X_BAND, (-300, 300, 601), 8.0, detect=detect)).signal
    assert np.abs(got).max() > 0
    assert got == pytest.approx(sign * got[::-1], abs=1e-3 * np.abs(got).max())  # the promised tolerance


@pytest.mark.parametrize("tolerance", [1e-2, 1e-3])
def test_neither_points_nor_window_matter(tolerance: float) -> None:
    species = of(Spin(1, (2.0,), 900, -150), width=3.0)
    whole = engine(species, Scan(X_BAND, (130, 450, 3201), 3.0), tolerance)
    for first, last, points in ((280, 400, 301), (336, 342, 13), (130, 450, 65)):
        part = engine(species, Scan(X_BAND, (first, last, points), 3.0), tolerance)
        same = np.interp(part.fields, whole.fields, whole.signal)
        assert np.abs(part.signal - same).max() < 2 * tolerance * np.abs(whole.signal).max()


def test_all_tolerances_tell_one_story() -> None:
    """Errors shrink with the tolerance."""
    species, scan = of(Spin(1.5, (2.0,), 1500, 200), width=5.0), Scan(X_BAND, (50, 600, 600), 5.0)
    best = engine(species, scan, 1e-5).signal
    for tolerance in (1e-1, 1e-2, 1e-3, 1e-4):
        assert far(engine(species, scan, tolerance).signal, best) < tolerance


def test_a_doublet_of_isotropic_g_needs_one_direction() -> None:
    got = engine(of(Spin(g=(2.0,)), width=1.0), Scan(X_BAND, (330, 350, 200), 1.0))
    assert got.report["s"]["systems"][0]["directions"] == 1


def test_a_pure_zeeman_transition_has_no_parallel_mode():
    # the microwave field's operator is the Zeeman operator along the field: diagonal between its own states
    species = Species("s", (Spin(g=(2.0, 2.05, 2.2)),), width=Width(gaussian=1.0))
    got = simulate(species, Sweep(9500.0, (270.0, 380.0), 256, microwave="parallel"))
    assert not got.signal.any()
    assert ("empty", "s: nothing is resonant in the parallel mode between 270 and 380 mT") in got.warnings
    across = simulate(species, Sweep(9500.0, (270.0, 380.0), 256))
    assert across.signal.any()
    assert not across.warnings
    beside = simulate(species, Sweep(9500.0, (100.0, 200.0), 256))
    assert ("empty", "s: nothing is resonant between 100 and 200 mT") in beside.warnings


def test_a_spectrum_that_meets_zero_field_says_how_far_it_may_err():
    # 1 MHz from the quantum: at this tolerance the spectrum was found a quarter of its top wrong
    species = Species("s", (Spin(S=1, g=(2.0,), D=9499.0),), width=Width(gaussian=4.0))
    got = simulate(species, Sweep(9500.0, (0.0, 800.0), 512), tolerance=1e-2)
    fine = simulate(species, Sweep(9500.0, (0.0, 800.0), 512), tolerance=2e-4)
    error = np.abs(got.signal - fine.signal).max() / np.abs(fine.signal).max()
    assert 0.01 < error < got.report["s"]["systems"][0]["estimated_error"]


@pytest.mark.parametrize("tolerance", [1e-2, 1e-3, 1e-4])
def test_a_line_forbidden_along_the_axis_in_parallel_mode(tolerance):
    # at 715 mT the one knot that is resonant lies on the axis, where there is no intensity; a broad hump about 500 mT
    # has little of a derivative beside its height
    spin = Spin(1.0, (2.0492637724862406, 1.9755684093140278), -29259.29735794806)
    species = Species("s", (spin,), width=Width(gaussian=10.33))
    sweep = Sweep(9500.0, (300.0, 800.0), 400, temperature=227.6, microwave="parallel")
    got = simulate(species, sweep, tolerance=tolerance).signal
    (system,) = systems(species)
    want = plain_powder(
        system, 9500.0, sweep.fields, 10.33, 1500, 1, mode="parallel", temperature=227.6, octant=True, points=24
    )
    assert np.abs(got - want).max() < 1.5 * tolerance * np.abs(want).max()
