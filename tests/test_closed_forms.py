"""Resonances and powder spectra against closed forms of the literature, worked out in the tests."""

from __future__ import annotations

import math

import numpy as np
import pytest
from reference import unit
from scipy import constants
from scipy.integrate import trapezoid
from scipy.optimize import brentq, minimize
from scipy.spatial.transform import Rotation
from scipy.special import ellipk, voigt_profile

from spinfit.hamiltonian import System, systems
from spinfit.isotopes import isotope
from spinfit.resonance import Resonances, find
from spinfit.species import Nucleus, Species, Spin, Width
from spinfit.spectrum import simulate
from spinfit.sweep import Sweep

MU_B = constants.physical_constants["Bohr magneton in Hz/T"][0] * 1e-9  # MHz/mT
MU_N = constants.physical_constants["nuclear magneton in MHz/T"][0] * 1e-3  # MHz/mT
X_BAND = 9500.0


def one(*spins: Spin, **others: object) -> System:
    return systems(Species(spins=spins, **others))[0]


def along(system: System, direction: tuple[float, float, float], frequency: float, high: float, **how) -> Resonances:
    return find(system, np.array([unit(direction)]), frequency, (0.0, high), **how)


# --- doublets ------------------------------------------------------------------------------------


def test_effective_g() -> None:
    """h nu = g(n) mu_B B with g(n)^2 = n.G.n, G = g.g^T; weight B (Tr G - n.G^2.n / n.G.n) (closed form)."""
    tilt, values = (0.4, 1.1, -0.7), np.array([1.9, 2.1, 2.5])
    axes = Rotation.from_euler("ZYZ", tilt).as_matrix()
    big_g = axes @ np.diag(values**2) @ axes.T
    n = np.array([unit(v) for v in np.random.default_rng(0).normal(size=(20, 3))])
    got = find(one(Spin(g=tuple(values), g_tilt=tilt)), n, X_BAND, (0.0, 500.0))
    square = np.einsum("ki,ij,kj->k", n, big_g, n)
    assert got.field == pytest.approx(X_BAND / (np.sqrt(square) * MU_B), rel=1e-9)
    mixed = np.trace(big_g) - np.einsum("ki,ij,kj->k", n, big_g @ big_g, n) / square
    # |M|^2 = (mu_B/2h)^2 mixed/2; population difference 1/2; slope mu_B g/h
    assert got.weight == pytest.approx(MU_B / 16 * mixed / np.sqrt(square), rel=1e-9)


@pytest.mark.parametrize("frequency", [X_BAND, 34000.0])
def test_halving_the_frequency_halves_zeeman_fields(frequency: float) -> None:
    """Only g B / nu is measured (common practice)."""
    system = one(Spin(g=(2.0, 2.1, 2.3), g_tilt=(0.1, 0.6, 0.0)))
    n = np.array([unit((0.3, -0.4, 0.7)), unit((1, 2, 0))])
    whole, half = (find(system, n, f, (0.0, 1500.0)).field for f in (frequency, frequency / 2))
    assert half == pytest.approx(whole / 2, rel=1e-9)


def axial_density(b: np.ndarray, g_perp: float, g_par: float, frequency: float) -> tuple[np.ndarray, np.ndarray]:
    """Return the density of fields of an axial doublet and its weight at each field.

    F. K. Kneubuehl, J. Chem. Phys. 33, 1074 (1960): cos^2 theta = (g^2 - g_perp^2) / (g_par^2 - g_perp^2)
    with g = h nu / mu_B B, and the density is |d cos theta / dB|.
    """
    g = frequency / (MU_B * b)
    cos2 = (g**2 - g_perp**2) / (g_par**2 - g_perp**2)
    inside = (cos2 > 0) & (cos2 < 1)
    safe = np.where(inside, cos2, 0.5)
    density = np.where(inside, g**2 / b / np.abs(g_par**2 - g_perp**2) / np.sqrt(safe), 0.0)
    fourth = (g_par**4 * safe + g_perp**4 * (1 - safe)) / g**2
    return density, MU_B / 16 * (2 * g_perp**2 + g_par**2 - fourth) / g


@pytest.mark.parametrize(("g_perp", "g_par"), [(2.05, 2.25), (2.2, 2.0)])
def test_axial_powder(g_perp: float, g_par: float) -> None:
    """The density above times the weight, convolved with a Gaussian line."""
    sigma, tolerance = 0.4, 1e-4
    fields = np.linspace(295.0, 350.0, 401)
    ends = sorted(X_BAND / MU_B / np.array([g_perp, g_par]))
    # the substitution B = b_perp + d s^2 takes the inverse root out of the density at g_perp
    b_perp, b_par = X_BAND / MU_B / g_perp, X_BAND / MU_B / g_par
    s = (np.arange(6000) + 0.5) / 6000
    b = b_perp + (b_par - b_perp) * s**2
    density, weight = axial_density(b, g_perp, g_par, X_BAND)
    step = 2 * s * abs(b_par - b_perp) / 6000
    assert (density * step).sum() == pytest.approx(1, abs=1e-6)
    expected = voigt_profile(fields[:, None] - b, sigma, 0.0) @ (density * weight * step)
    species = Species(spins=(Spin(g=(g_perp, g_par)),), width=Width(gaussian=2 * sigma))
    sweep = Sweep(X_BAND, (295.0, 350.0), 401, detect="absorption")
    got = simulate(species, sweep, tolerance=tolerance).signal
    assert np.abs(got - expected).max() < 2 * tolerance * expected.max()
    assert ends[0] > 295 + 5 * sigma
    assert ends[1] < 350 - 5 * sigma


def rhombic_density(u: np.ndarray, a: np.ndarray) -> np.ndarray:
    """Return the density of u = sum a_i n_i^2 over the sphere, a rising: complete elliptic integrals.

    F. K. Kneubuehl, J. Chem. Phys. 33, 1074 (1960), in terms of u = g^2.
    """
    first, middle, last = a
    one_side = (u - first) * (last - middle)
    other = (last - u) * (middle - first)
    inside = (u > first) & (u < last) & (one_side != other)  # at the middle value the density is infinite
    one_side, other = (np.where(inside, v, w) for v, w in ((one_side, 1.0), (other, 2.0)))
    m = np.minimum(one_side, other) / np.maximum(one_side, other)
    return np.where(inside, ellipk(m) / (np.pi * np.sqrt(np.maximum(one_side, other))), 0.0)


def level_curve(u: float, a: np.ndarray, power: np.ndarray) -> tuple[float, float]:
    """Return the density of u and its product with the mean of sum power_i n_i^2 on the curve u = const.

    With x_i = n_i^2 the sphere's measure is dx_1 dx_2 / (2 pi sqrt(x_1 x_2 x_3)); x_1 and x_2 are
    linear in x_3 on the curve, and x_3 = low + (high - low) sin^2 s takes the roots at the ends.
    """
    low, high = max(0.0, (u - a[1]) / (a[2] - a[1])), (u - a[0]) / (a[2] - a[0])
    s = (np.arange(4000) + 0.5) * 0.5 * np.pi / 4000
    x3 = low + (high - low) * np.sin(s) ** 2
    # 1 - x_1 - x_3 and its like, written without cancellation at the ends
    x1 = (max(a[1] - u, 0.0) + (a[2] - a[1]) * (x3 - low)) / (a[1] - a[0])
    x2 = (a[2] - a[0]) * (high - low) * np.cos(s) ** 2 / (a[1] - a[0])
    measure = (high - low) * np.sin(2 * s) / np.sqrt(x1 * x2 * x3) / (2 * np.pi * (a[1] - a[0]))
    measure *= 0.5 * np.pi / 4000
    return float(measure.sum()), float(measure @ (power[0] * x1 + power[1] * x2 + power[2] * x3))


G_RHOMBIC = np.array([2.0, 2.09, 2.25])


def graded(ends: np.ndarray, count: int) -> tuple[np.ndarray, np.ndarray]:
    """Return nodes and weights of a quadrature over consecutive intervals, dense towards all ends."""
    s = (np.arange(count) + 0.5) / count
    x, dx = s**3 * (10 - 15 * s + 6 * s**2), 30 * s**2 * (1 - s) ** 2 / count
    nodes = [lo + (hi - lo) * x for lo, hi in zip(ends, ends[1:], strict=False)]
    weights = [(hi - lo) * dx for lo, hi in zip(ends, ends[1:], strict=False)]
    return np.concatenate(nodes), np.concatenate(weights)


def test_the_two_forms_of_the_rhombic_density_agree() -> None:
    a = G_RHOMBIC**2
    for u in (4.1, 4.3, 4.4, 4.6, 5.0):
        assert level_curve(u, a, a)[0] == pytest.approx(float(rhombic_density(np.array([u]), a)[0]), rel=1e-3)
        assert level_curve(u, a, a)[1] == pytest.approx(u * level_curve(u, a, a)[0], rel=1e-9)
    nodes, weights = graded(a, 4000)
    assert weights @ rhombic_density(nodes, a) == pytest.approx(1, abs=1e-5)


def test_rhombic_powder() -> None:
    """The elliptic density in u = g^2 times the mean weight on each curve of constant u, convolved with a line."""
    sigma, tolerance = 0.5, 1e-4
    a = G_RHOMBIC**2
    nodes, du = graded(a, 700)
    away = np.abs(nodes[:, None] - a).min(axis=1) > 1e-7  # at the very ends the curve is a point
    nodes, du = nodes[away], du[away]
    curve = np.array([level_curve(u, a, a**2) for u in nodes])
    density = rhombic_density(nodes, a)
    fourth = curve[:, 1] / curve[:, 0]  # mean of n.G^2.n at each g
    g = np.sqrt(nodes)
    weight = MU_B / 16 * (a.sum() - fourth / nodes) / g
    fields = np.linspace(295.0, 350.0, 501)
    expected = voigt_profile(fields[:, None] - X_BAND / (MU_B * g), sigma, 0.0) @ (density * weight * du)
    species = Species(spins=(Spin(g=tuple(G_RHOMBIC)),), width=Width(gaussian=2 * sigma))
    got = simulate(species, Sweep(X_BAND, (295.0, 350.0), 501, detect="absorption"), tolerance=tolerance).signal
    assert np.abs(got - expected).max() < 5 * tolerance * expected.max()


# --- Kramers doublets ----------------------------------------------------------------------------

THIRD = 1 / 3


@pytest.mark.parametrize(
    ("s", "rhombicity", "doublet", "expected"),
    [
        (1.5, 0.0, 0, (4, 4, 2)),
        (2.5, 0.0, 0, (6, 6, 2)),
        (3.5, 0.0, 0, (8, 8, 2)),
        (1.5, THIRD, 0, (1.464, 2.0, 5.464)),
        (1.5, THIRD, 1, (1.464, 2.0, 5.464)),
        (2.5, THIRD, 1, (30 / 7, 30 / 7, 30 / 7)),
        (2.5, THIRD, 0, (0.607, 0.857, 9.678)),
        (2.5, THIRD, 2, (0.607, 0.857, 9.678)),
        (3.5, THIRD, 1, (2.791, 3.746, 8.393)),
    ],
)
def test_effective_g_of_kramers_doublets(
    s: float, rhombicity: float, doublet: int, expected: tuple[float, float, float]
) -> None:
    """h nu << |D|, g = 2: T. Castner et al., J. Chem. Phys. 32, 668 (1960); R. Aasa, ibid. 52, 3919 (1970).

    Without an order: which axis has which value depends on the doublet.  S = 7/2 has a middle doublet
    on each side of the centre.
    """
    system = one(Spin(s, (2.0,), 3e6, rhombicity=rhombicity))
    got = find(system, np.eye(3), 100.0, (0.0, 30.0))
    pairs = (doublet,) if s < 3.5 or not rhombicity else (1, 2)
    found = []
    for d in pairs:
        mine = (got.lower == 2 * d) & (got.upper == 2 * d + 1)
        assert got.direction[mine].tolist() == [0, 1, 2]
        found.append(sorted(100.0 / (MU_B * got.field[mine])))
    assert any(values == pytest.approx(sorted(expected), abs=2e-3) for values in found), found


# --- triplets ------------------------------------------------------------------------------------

D, E, G = 2500.0, -400.0, 2.0


def test_triplet_along_z() -> None:
    """Levels -2D/3 and D/3 +- sqrt((g mu_B B)^2 + E^2): from the 2 x 2 block (closed form)."""
    got = along(one(Spin(1, (G,), D, E)), (0, 0, 1), X_BAND, 600.0)
    x = G * MU_B
    expected = sorted(
        [
            math.sqrt((X_BAND - D) ** 2 - E**2) / x,
            math.sqrt((X_BAND + D) ** 2 - E**2) / x,
            math.sqrt((X_BAND / 2) ** 2 - E**2) / x,
        ]
    )
    assert got.field == pytest.approx(expected, abs=1e-5)


@pytest.mark.parametrize("axis", [0, 1])
def test_triplet_along_x_and_y(axis: int) -> None:
    """The same block with the D-tensor's values permuted: D' = (3/2) D_a, E' = half the others' difference."""
    tensor = np.array([-D / 3 + E, -D / 3 - E, 2 * D / 3])
    d = 1.5 * tensor[axis]
    e = 0.5 * (tensor[(axis + 1) % 3] - tensor[(axis + 2) % 3])
    got = along(one(Spin(1, (G,), D, E)), tuple(np.eye(3)[axis]), X_BAND, 700.0)
    x = G * MU_B
    squares = [(X_BAND - d) ** 2 - e**2, (X_BAND + d) ** 2 - e**2, (X_BAND / 2) ** 2 - e**2]
    assert got.field == pytest.approx(sorted(math.sqrt(v) / x for v in squares), abs=1e-5)


def test_lowest_field_of_the_half_field_line() -> None:
    """B = sqrt((h nu)^2 - 4 (D^2 + 3E^2)/3) / 2 g mu_B: P. Kottis, R. Lefebvre, J. Chem. Phys. 39, 393 (1963)."""
    system = one(Spin(1, (G,), D, E))

    def lowest(at: np.ndarray) -> float:
        n = (math.sin(at[0]) * math.cos(at[1]), math.sin(at[0]) * math.sin(at[1]), math.cos(at[0]))
        got = along(system, n, X_BAND, 400.0)
        return float(got.field[(got.lower == 0) & (got.upper == 2)].min())

    best = minimize(lowest, (0.9, 0.7), method="Nelder-Mead", options={"xatol": 1e-5, "fatol": 1e-8})
    expected = math.sqrt(X_BAND**2 - 4 * (D**2 + 3 * E**2) / 3) / (2 * G * MU_B)
    assert best.fun == pytest.approx(expected, abs=1e-5)


def test_parallel_mode_of_an_integer_spin() -> None:
    """S = 1 along z: h nu = 2 sqrt((g mu_B B)^2 + E^2), |M_z|^2 = (g mu_B)^2 (2E / h nu)^2.

    The states are cos a |+1> + sin a |-1> and the opposite, tan 2a = E / g mu_B B.
    """
    e, x = 1800.0, G * MU_B
    system = one(Spin(1, (G,), 60000.0, e))
    got = along(system, (0, 0, 1), X_BAND, 400.0, microwave="parallel")
    field = math.sqrt((X_BAND / 2) ** 2 - e**2) / x
    slope = 4 * x**2 * field / X_BAND
    assert got.field == pytest.approx([field], abs=1e-6)
    assert got.weight == pytest.approx([x**2 * (2 * e / X_BAND) ** 2 / 3 / slope], rel=1e-6)
    normal = along(system, (0, 0, 1), X_BAND, 400.0)
    assert normal.weight == pytest.approx([0.0], abs=1e-9)


# --- Breit-Rabi ----------------------------------------------------------------------------------


def breit_rabi(field: float, f_upper: bool, m: float, spin: float, a: float, g: float, g_n: float) -> float:
    """Return the energy, MHz, of S = 1/2 with one nucleus, isotropic.

    G. Breit, I. I. Rabi, Phys. Rev. 38, 2082 (1931).
    """
    split = a * (spin + 0.5)
    x = (g * MU_B + g_n * MU_N) * field / split
    inner = 1 + 4 * m * x / (2 * spin + 1) + x * x
    root = abs(1 + math.copysign(1, m) * x) if abs(m) == spin + 0.5 else math.sqrt(inner)
    sign = 1 if f_upper else -1
    if abs(m) == spin + 0.5:  # the stretched states have no partner: linear at all fields
        return a * spin / 2 + math.copysign(1, m) * (0.5 * g * MU_B - g_n * MU_N * spin) * field
    return -split / (2 * (2 * spin + 1)) - g_n * MU_N * m * field + sign * 0.5 * split * root


@pytest.mark.parametrize(
    ("name", "spin", "a"),
    [("1H", 0.5, 1420.405751768), ("55Mn", 2.5, -245.0), ("63Cu", 1.5, 500.0)],  # the hydrogen atom's from memory
)
def test_breit_rabi(name: str, spin: float, a: float) -> None:
    """Every pair of levels of the closed form: the fields at which it is h nu apart."""
    g, g_n = 2.0023, isotope(name).g_n
    system = one(Spin(g=(g,)), nuclei=(Nucleus(isotope=name, A=(a,)),))
    states = [(True, m) for m in np.arange(-spin - 0.5, spin + 1)] + [(False, m) for m in np.arange(-spin + 0.5, spin)]
    grid = np.linspace(0.01, 600.0, 400)
    energies = [[breit_rabi(b, up, m, spin, a, g, g_n) for b in grid] for up, m in states]
    expected = []
    for i, first in enumerate(states):
        for j, second in enumerate(states[:i]):
            gap = np.abs(np.subtract(energies[i], energies[j])) - X_BAND

            def off(b: float, first=first, second=second) -> float:
                difference = breit_rabi(b, *first, spin, a, g, g_n) - breit_rabi(b, *second, spin, a, g, g_n)
                return abs(difference) - X_BAND

            for k in np.flatnonzero((gap[1:] < 0) != (gap[:-1] < 0)):
                expected.append(brentq(off, grid[k], grid[k + 1], xtol=1e-12))
    got = along(system, (0.3, 0.4, 0.5), X_BAND, 600.0)
    assert len(expected) >= (2 * spin + 1)
    assert got.field == pytest.approx(sorted(expected), abs=1e-5)


# --- cubic field ---------------------------------------------------------------------------------


def cubic(a: float) -> System:
    """S = 5/2 in a cubic field: a = 120 B4_0, B4_4 = 5 B4_0."""
    return one(Spin(2.5, (2.0,), stevens=(((4, 0), a / 120), ((4, 4), a / 24))))


def test_cubic_fine_structure_to_first_order() -> None:
    """Along [001] the lines lie at hnu/g mu_B plus (2, -5/2, 0, 5/2, -2) a / g mu_B (A. Abragam, B. Bleaney, 1970)."""
    a, x = 1.0, 2.0 * MU_B
    got = along(cubic(a), (0, 0, 1), X_BAND, 600.0)
    strong = got.weight > 0.1 * got.weight.max()
    expected = X_BAND / x + np.sort(np.array([2, -2.5, 0, 2.5, -2])) * a / x
    assert got.field[strong] == pytest.approx(expected, abs=5 * a**2 / X_BAND / x)
    assert got.weight[strong] / got.weight.max() == pytest.approx(np.array([8, 5, 9, 5, 8]) / 9, rel=2e-3)


def test_cubic_fine_structure_exactly() -> None:
    """Along [001] m = +-5/2 mixes with -+3/2 only: three blocks of closed form."""
    a, x = 620.0, 2.0 * MU_B

    def energies(b: float) -> np.ndarray:
        out = [a + x * b / 2, a - x * b / 2]
        for sign in (1, -1):
            p, q = a / 2 + sign * 2.5 * x * b, -1.5 * a - sign * 1.5 * x * b
            out += [(p + q) / 2 + s * math.hypot((p - q) / 2, math.sqrt(5) * a / 2) for s in (1, -1)]
        return np.sort(out)

    got = along(cubic(a), (0, 0, 1), X_BAND, 600.0)
    assert len(got.field) >= 5
    for field, i, j in zip(got.field, got.lower, got.upper, strict=True):
        at = energies(field)
        assert at[j] - at[i] == pytest.approx(X_BAND, abs=1e-3)
    # and none is missing: count the sign changes of the closed form
    grid = np.array([energies(b) for b in np.linspace(0.0, 600.0, 6001)])
    lower, upper = np.triu_indices(6, 1)
    gap = grid[:, upper] - grid[:, lower] - X_BAND
    assert len(got.field) == ((gap[1:] < 0) != (gap[:-1] < 0)).sum()


# --- sum rules -----------------------------------------------------------------------------------


@pytest.mark.parametrize("s", [0.5, 1.0, 1.5, 2.0, 2.5, 3.0, 3.5])
def test_weights_of_a_spin_sum_to_its_moment(s: float) -> None:
    """Zeeman alone: sum over m of |<m+1|S_x|m>|^2 = S(S+1)(2S+1)/6, hence the area g mu_B S(S+1)/6 h."""
    d = 1.0  # MHz: lifts the coincidence of the lines, moves the sum by (D/h nu)^2
    n = np.array([unit((0.3, 0.5, 0.8))])
    got = find(one(Spin(s, (2.0,), d if s > 0.5 else 0.0)), n, X_BAND, (300.0, 380.0))
    assert got.weight.sum() == pytest.approx(2.0 * MU_B * s * (s + 1) / 6, rel=1e-6)


@pytest.mark.parametrize("s", [1.0, 2.5])
def test_area_of_a_powder_spectrum(s: float) -> None:
    """The same for the integrated absorption of a powder; D moves it by about (D/h nu)^2."""
    species = Species(spins=(Spin(s, (2.0,), 150.0, 20.0),), width=Width(gaussian=2.0))
    got = simulate(species, Sweep(X_BAND, (280.0, 400.0), 1201, detect="absorption"))
    assert trapezoid(got.signal, got.fields) == pytest.approx(2.0 * MU_B * s * (s + 1) / 6, rel=3e-3)
