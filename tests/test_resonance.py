"""Resonance fields and weights against the eigenfield equation and plain diagonalisation.

The eigenfield equation (G. G. Belford, R. L. Belford, J. F. Burkhalter, J. Magn. Reson. 11, 251
(1973)) gives every resonance field as a generalised eigenvalue; it knows nothing of searching.
"""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from reference import Line, eigenfields, levels, plain_weights, unit
from scipy import constants

from spinfit.hamiltonian import System, systems
from spinfit.resonance import Resonances, find
from spinfit.species import Exchange, Nucleus, Species, Spin

MU_B = constants.physical_constants["Bohr magneton in Hz/T"][0] * 1e-9  # MHz/mT
X_BAND = 9500.0
CLOSE = 0.05
"""mT: roots closer than this are compared by number and mean, because they are about to coalesce."""

angle = st.floats(-3.1, 3.1)
angles = st.tuples(angle, angle, angle)
component = st.floats(-1, 1)
direction = st.tuples(component, component, component).filter(lambda v: np.linalg.norm(v) > 0.2)


def g_values(draw: st.DrawFn) -> tuple[float, ...]:
    return tuple(draw(st.floats(1.7, 2.6)) for _ in range(3))


@st.composite
def single_spins(draw: st.DrawFn) -> Species:
    """One spin to 7/2, nothing collinear, B_k^q of any sign, perhaps a small nucleus on the smaller ones."""
    s = draw(st.integers(1, 7)) / 2
    stevens: list[tuple[tuple[int, int], float]] = []
    if s > 0.5:
        for _ in range(draw(st.integers(0, 2))):
            k = draw(st.sampled_from([k for k in (2, 4, 6) if k <= 2 * s]))
            scale = {2: 300.0, 4: 10.0, 6: 0.3}[k]
            stevens.append(((k, draw(st.integers(-k, k))), scale * draw(component)))
    spin = Spin(
        s,
        g_values(draw),
        draw(st.floats(-12000, 12000)) if s > 0.5 else 0.0,
        draw(st.floats(-1500, 1500)) if s > 0.5 else 0.0,
        g_tilt=draw(angles),
        D_tilt=draw(angles),
        stevens=tuple(dict(stevens).items()),
    )
    nuclei = ()
    if s <= 1 and draw(st.booleans()):
        couplings = tuple(draw(st.floats(-120, 120)) for _ in range(3))
        nuclei = (Nucleus(isotope=draw(st.sampled_from(["1H", "14N", "13C"])), A=couplings, A_tilt=draw(angles)),)
    return Species(spins=(spin,), nuclei=nuclei)


@st.composite
def pairs(draw: st.DrawFn) -> Species:
    """Two coupled spins, at most 2 x 4 levels."""
    second = draw(st.sampled_from([0.5, 1.0, 1.5]))
    spins = (
        Spin(0.5, g_values(draw), g_tilt=draw(angles)),
        Spin(second, g_values(draw), draw(st.floats(-3000, 3000)) if second > 0.5 else 0.0, D_tilt=draw(angles)),
    )
    a, b = draw(st.floats(-800, 800)), draw(st.floats(-800, 800))
    coupling = Exchange(
        J=draw(st.floats(-8000, 8000)),
        dipolar=(a, b, -a - b),
        tilt=draw(angles),
        antisymmetric=tuple(draw(st.floats(-300, 300)) for _ in range(3)),
    )
    return Species(spins=spins, exchange=(coupling,))


def merged(fields: np.ndarray) -> list[tuple[int, float]]:
    """Return (number, mean) of groups of fields that follow each other within `CLOSE`."""
    groups: list[list[float]] = []
    for field in np.sort(fields):
        if groups and field - groups[-1][-1] < CLOSE:
            groups[-1].append(float(field))
        else:
            groups.append([float(field)])
    return [(len(group), float(np.mean(group))) for group in groups]


def agree(found: np.ndarray, exact: np.ndarray, low: float, high: float) -> None:
    """Assert that two lists of fields are the same to 1e-4 mT, away from the ends of the range."""
    inside = [[one for one in merged(v) if low + CLOSE < one[1] < high - CLOSE] for v in (found, exact)]
    assert [n for n, _ in inside[0]] == [n for n, _ in inside[1]], inside
    for (count, a), (_, b) in zip(*inside, strict=True):
        assert a == pytest.approx(b, abs=1e-4 if count == 1 else 2e-3)


def check(species: Species, along: tuple[float, float, float], frequency: float, high: float = 900.0) -> None:
    (system, *_) = systems(species)
    got = find(system, np.array([unit(along)]), frequency, (0.0, high))
    agree(got.field, eigenfields(system, along, frequency, (0.0, high)), 0.0, high)


@given(single_spins(), direction, st.sampled_from([X_BAND, 34000.0, 3500.0]))
@settings(derandomize=True, max_examples=60, deadline=None)
def test_fields_of_random_spins(species: Species, along: tuple[float, float, float], frequency: float) -> None:
    check(species, along, frequency, 900.0 if frequency < 20000 else 2500.0)


@given(pairs(), direction)
@settings(derandomize=True, max_examples=30, deadline=None)
def test_fields_of_random_pairs(species: Species, along: tuple[float, float, float]) -> None:
    check(species, along, X_BAND)


@given(st.floats(8500, 10500), st.floats(0, 0.33), direction)
@settings(derandomize=True, max_examples=40, deadline=None)
def test_fields_where_transitions_loop(d: float, rhombicity: float, along: tuple[float, float, float]) -> None:
    """S = 5/2 with D close to h nu: up to three resonances between one pair of levels."""
    check(Species(spins=(Spin(2.5, (2.0,), d, rhombicity=rhombicity),)), along, X_BAND)


def test_a_loop_has_several_resonances_of_one_pair() -> None:
    """The system above does loop, otherwise that test would be easy."""
    system = systems(Species(spins=(Spin(2.5, (2.0,), 9000.0, 900.0),)))[0]
    n = np.array([unit(v) for v in np.random.default_rng(3).normal(size=(60, 3))])
    got = find(system, n, X_BAND, (0.0, 900.0))
    same = np.stack([got.direction, got.lower, got.upper])
    _, count = np.unique(same, axis=1, return_counts=True)
    assert count.max() >= 2
    for k in range(60):
        agree(got.field[got.direction == k], eigenfields(system, n[k], X_BAND, (0.0, 900.0)), 0.0, 900.0)


@pytest.mark.parametrize("axis", [(0, 0, 1), (1, 0, 0), (0, 1, 0)])
@pytest.mark.parametrize(
    "spin",
    [
        Spin(1, (2.0,), 3000.0, -400.0),
        Spin(2.5, (2.0,), 1200.0),
        Spin(2.5, (2.0,), 1500.0, 100.0),
        Spin(3.5, (2.0,), -900.0, 60.0),
        Spin(2.5, (2.0,), stevens=(((4, 0), 5.0), ((4, 4), 25.0))),
    ],
)
def test_fields_on_axes_where_levels_truly_cross(axis: tuple[float, float, float], spin: Spin) -> None:
    """Sorted levels have kinks there.  A root is found unless its pair kinks at the very field."""
    check(Species(spins=(spin,)), axis, X_BAND)


def test_pure_zeeman_field() -> None:
    """h nu = g mu_B B."""
    system = systems(Species(spins=(Spin(g=(2.0, 2.0, 2.3)),)))[0]
    got = find(system, np.eye(3), X_BAND, (0.0, 500.0))
    assert got.field == pytest.approx(X_BAND / MU_B / np.array([2.0, 2.0, 2.3]), abs=1e-6)
    assert got.slope == pytest.approx(MU_B * np.array([2.0, 2.0, 2.3]))


@pytest.mark.parametrize("low", [0.0, 20.0])
def test_a_start_at_or_near_zero_field(low: float) -> None:
    """Kramers pairs have no definite slopes at zero; resonances just above it must still be found."""
    d = X_BAND / 2 * 0.998  # S = 3/2: 2D is the splitting, so that the field is close to zero
    system = systems(Species(spins=(Spin(1.5, (2.0,), d),)))[0]
    n = unit((0.2, 0.3, 0.9))
    got = find(system, n[None], X_BAND, (low, 600.0))
    exact = eigenfields(system, n, X_BAND, (low, 600.0))
    assert low > 0 or exact[0] < 3.0
    agree(got.field, exact, low, 600.0)


def test_only_fields_in_the_range_count() -> None:
    system = systems(Species(spins=(Spin(1, (2.0,), 3000.0, -400.0),)))[0]
    n = np.array([unit((0.3, 0.5, 0.8))])
    everything = find(system, n, X_BAND, (0.0, 600.0)).field
    assert len(everything) == 3
    some = find(system, n, X_BAND, (everything[1] - 1e-3, everything[1] + 1e-3)).field
    assert some == pytest.approx(everything[1:2], abs=1e-5)
    assert len(find(system, n, X_BAND, (everything[1] + 1e-3, everything[2] - 1e-3)).field) == 0


def test_many_directions_are_as_good_as_one() -> None:
    system = systems(Species(spins=(Spin(2, (1.9, 2.0, 2.1), 5000.0, 800.0, D_tilt=(0.2, 0.5, 0.9)),)))[0]
    n = np.array([unit(v) for v in np.random.default_rng(5).normal(size=(40, 3))])
    together = find(system, n, X_BAND, (0.0, 900.0))
    assert (np.diff(together.direction) >= 0).all()
    for k in range(40):
        alone = find(system, n[k : k + 1], X_BAND, (0.0, 900.0))
        mine = together.direction == k
        assert together.field[mine] == pytest.approx(alone.field, abs=1e-6)
        assert together.lower[mine].tolist() == alone.lower.tolist()
        assert together.upper[mine].tolist() == alone.upper.tolist()


# --- slopes and weights --------------------------------------------------------------------------


def weighted(species: Species, along: tuple[float, float, float], **how: object) -> tuple[Resonances, System]:
    (system, *_) = systems(species)
    named = dict(how)
    if "axis" in named:
        named["microwave"] = np.array([unit(named.pop("axis"))])
    if "mode" in named:
        named["microwave"] = named.pop("mode")
    return find(system, np.array([unit(along)]), X_BAND, (0.0, 900.0), **named), system


WAYS = [
    {},
    {"mode": "parallel"},
    {"axis": (0.5, -0.3, 0.8)},
    {"temperature": 5.0},
    {"mode": "parallel", "temperature": 1.5},
]


@pytest.mark.parametrize("way", WAYS, ids=str)
@given(species=single_spins() | pairs(), along=direction)
@settings(derandomize=True, max_examples=12, deadline=None)
def test_weights_of_random_systems(species: Species, along: tuple[float, float, float], way: dict) -> None:
    """|M|^2 (population difference) / |d(E_j - E_i)/dB| from single eigenvectors."""
    got, system = weighted(species, along, **way)
    lines = [Line(*one) for one in zip(got.field, got.lower, got.upper, strict=True)]
    expected = plain_weights(system, along, lines, **way)
    gentle = np.abs(got.slope) > 0.5  # next to a fold the weight diverges, and with it what rounding does to it
    scale = np.abs(expected[gentle]).max(initial=1e-12)
    assert got.weight[gentle] == pytest.approx(expected[gentle], rel=1e-4, abs=1e-6 * scale)


@given(single_spins() | pairs(), direction)
@settings(derandomize=True, max_examples=20, deadline=None)
def test_slopes_and_levels_of_random_systems(species: Species, along: tuple[float, float, float]) -> None:
    got, system = weighted(species, along)
    h = 1e-3
    for field, i, j, slope in zip(got.field, got.lower, got.upper, got.slope, strict=True):
        at = levels(system, along, np.array([field - h, field, field + h]))
        assert at[1, j] - at[1, i] == pytest.approx(X_BAND, abs=0.05)
        # a kink closer than h would spoil the difference, not the slope
        bend = abs(at[2, j] - at[2, i] + at[0, j] - at[0, i] - 2 * (at[1, j] - at[1, i])) / h
        assert slope == pytest.approx((at[2, j] - at[2, i] - at[0, j] + at[0, i]) / (2 * h), abs=1e-3 + bend)
