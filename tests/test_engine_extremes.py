"""The engine where systems are large, extreme or degenerate, against closed forms and plain diagonalisation.

Turned Stevens terms to sixth order, several nuclei, splittings of a thousand quanta, a quantum just where a loop
closes, and spins without any splitting.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from reference import levels, plain_resonances, plain_weights, unit
from scipy.optimize import minimize_scalar
from scipy.spatial.transform import Rotation

from spinfit.derivatives import signal_changes
from spinfit.fitting.parameters import Binding
from spinfit.hamiltonian import System, rotation, systems
from spinfit.operators import stevens
from spinfit.resonance import find
from spinfit.species import Nucleus, Species, Spin, Width
from spinfit.spectrum import simulate
from spinfit.sweep import Sample, Sweep

X_BAND = 9500.0
ANGLES = st.tuples(*[st.floats(-3, 3)] * 3)
DIRECTION = st.tuples(*[st.floats(-1, 1)] * 3).filter(lambda v: np.linalg.norm(v) > 0.2)


def turned_spin(spin: Spin, by: Rotation) -> Spin:
    """Return a spin in other axes, Stevens terms too: their matrix is turned and projected on O_k^q of the same k."""
    vector = by.as_rotvec()
    angle = float(np.linalg.norm(vector))
    bare = systems(Species(spins=(replace(spin, D=0.0, E=0.0),)))[0]
    turn = rotation(bare, tuple(vector / angle), angle)
    terms = []
    for k in sorted({k for (k, _), _ in spin.stevens}):
        whole = sum(value * stevens(spin.S, *kq) for kq, value in spin.stevens if kq[0] == k)
        whole = turn @ whole @ turn.conj().T
        for q in range(-k, k + 1):
            operator = stevens(spin.S, k, q)
            value = float(np.vdot(operator, whole).real / np.vdot(operator, operator).real)
            terms.append(((k, q), value))
            whole = whole - value * operator
        assert np.abs(whole).max() < 1e-9 * max(abs(value) for _, value in spin.stevens) * np.abs(operator).max()

    def tilt(angles: tuple[float, ...]) -> tuple[float, ...]:
        return tuple(float(v) for v in (by * Rotation.from_euler("ZYZ", angles)).as_euler("ZYZ"))

    return replace(spin, g_tilt=tilt(spin.g_tilt), D_tilt=tilt(spin.D_tilt), stevens=tuple(terms))


OCTET = Spin(
    3.5,
    (1.98, 2.0, 2.03),
    700.0,
    120.0,
    g_tilt=(0.2, 0.4, 0.1),
    D_tilt=(0.5, 0.9, 0.3),
    stevens=(((4, -3), 3.0), ((4, 0), 0.8), ((6, 2), 0.02), ((6, -5), 0.05)),
)
AROUND = Rotation.from_euler("ZYZ", [0.4, 1.1, -0.8])


def test_a_powder_of_sixth_order_terms_does_not_know_its_axes() -> None:
    sweep = Sweep(34000.0, (1050.0, 1390.0), 400)
    here, there = (
        simulate(Species("s", (spin,), width=Width(gaussian=14.0)), sweep)
        for spin in (OCTET, turned_spin(OCTET, AROUND))
    )
    assert not here.warnings
    assert not there.warnings
    assert np.abs(here.signal - there.signal).max() < 2e-3 * np.abs(here.signal).max()


@settings(derandomize=True, max_examples=15, deadline=None)
@given(DIRECTION)
def test_fields_of_turned_sixth_order_terms(along: tuple[float, float, float]) -> None:
    here, there = (
        find(systems(Species(spins=(spin,)))[0], unit(way)[None], 34000.0, (900.0, 1600.0))
        for spin, way in ((OCTET, along), (turned_spin(OCTET, AROUND), AROUND.apply(along)))
    )
    assert here.lower.tolist() == there.lower.tolist()
    np.testing.assert_allclose(there.field, here.field, atol=1e-4)
    np.testing.assert_allclose(there.weight, here.weight, rtol=1e-3, atol=1e-6 * here.weight.max())


# --- several nuclei -------------------------------------------------------------------------------


@st.composite
def several_nuclei(draw: st.DrawFn) -> Species:
    """Draw a spin of at most 1 with two or three nuclei of all sizes, everything tilted."""
    s = draw(st.sampled_from([0.5, 0.5, 1.0]))
    nuclei = []
    for _ in range(draw(st.integers(2, 3))):
        name = draw(st.sampled_from(["1H", "13C", "14N"] if len(nuclei) < 2 else ["1H"]))
        size = draw(st.sampled_from([2.0, 30.0, 400.0]))
        a = tuple(size * draw(st.floats(-1, 1)) for _ in range(3))
        p = (-0.7, -0.9, 1.6) if name == "14N" else (0.0, 0.0, 0.0)
        nuclei.append(Nucleus(name, A=a, P=p, A_tilt=draw(ANGLES), P_tilt=draw(ANGLES), treat="exact"))
    d = draw(st.floats(-2000, 2000)) if s > 0.5 else 0.0
    return Species(spins=(Spin(s, (1.9, 2.0, 2.2), d, g_tilt=draw(ANGLES)),), nuclei=tuple(nuclei))


def grouped(fields: np.ndarray, weights: np.ndarray, apart: float) -> np.ndarray:
    """Return total weight and mean field of lines that follow each other within `apart`, shape (n, 2)."""
    rank = np.argsort(fields)
    fields, weights = fields[rank], weights[rank]
    part = np.cumsum(np.diff(fields, prepend=fields[:1]) > apart)
    total = np.bincount(part, weights)
    return np.column_stack([total, np.bincount(part, weights * fields) / np.maximum(total, 1e-300)])


@settings(derandomize=True, max_examples=10, deadline=None)
@given(several_nuclei(), DIRECTION)
def test_lines_of_several_nuclei(species: Species, along: tuple[float, float, float]) -> None:
    """Against plain roots of all pairs of levels; lines closer than the search's grid by their sum."""
    (system,) = systems(species)
    window = (250.0, 430.0)
    lines = plain_resonances(system, along, X_BAND, window, points=60)
    exact = grouped(np.array([one.field for one in lines]), plain_weights(system, along, lines), 2e-3)
    got = find(system, unit(along)[None], X_BAND, window)
    found = grouped(got.field, got.weight, 2e-3)
    worth = 1e-4 * exact[:, 0].max()
    exact, found = (one[one[:, 0] > worth] for one in (exact, found))
    assert len(exact) == len(found)
    np.testing.assert_allclose(found[:, 1], exact[:, 1], atol=1e-3)
    np.testing.assert_allclose(found[:, 0], exact[:, 0], rtol=2e-3, atol=worth)


# --- splittings of many quanta --------------------------------------------------------------------


@pytest.mark.parametrize("spin", [1.5, 2.5, 3.5])
@settings(derandomize=True, max_examples=6, deadline=None)
@given(st.floats(3, 6), st.floats(0.0, 1 / 3), DIRECTION)
def test_doublets_far_below_the_splitting(
    spin: float, power: float, rhombicity: float, along: tuple[float, float, float]
) -> None:
    """With D far above h nu each Kramers pair is a doublet of its own: h nu = g' mu_B B.

    g' to first order in B/D follows from the pair's two states at zero field; the next order is B^2/D^2 of it.
    """
    d = X_BAND * 10**power
    system = systems(Species(spins=(Spin(spin, (2.0,), d, rhombicity * d),)))[0]
    n = unit(along)
    energies, vectors = np.linalg.eigh(system.h0)
    moment = np.tensordot(n, system.zeeman, 1)
    pairs = [vectors[:, k : k + 2] for k in range(0, len(energies), 2)]
    per_field = np.array([np.ptp(np.linalg.eigvalsh(v.conj().T @ moment @ v)) for v in pairs])
    got = find(system, n[None], X_BAND, (0.0, 900.0))
    expected = {k: X_BAND / slope for k, slope in enumerate(per_field) if slope > X_BAND / 880}
    lone = {int(i) // 2: field for i, j, field in zip(got.lower, got.upper, got.field, strict=True) if j == i + 1}
    assert set(expected) <= set(lone)
    for k, field in expected.items():
        # other pairs lie at least D/2 away and are mixed in by the moment: relative (moment B / D)^2 and rounding of D
        mixed = (np.abs(moment).sum(axis=1).max() * field / (0.5 * d)) ** 2
        assert lone[k] == pytest.approx(field, rel=4 * mixed + 1e-14 * np.abs(energies).max() / X_BAND + 1e-7)


# --- a quantum just where a loop closes -----------------------------------------------------------


def least_gap(system: System, along: np.ndarray, pair: tuple[int, int]) -> tuple[float, float]:
    """Return the field at which two levels are closest within the window, and their distance."""

    def gap(field: float) -> float:
        at = levels(system, along, field)
        return float(at[pair[1]] - at[pair[0]])

    fields = np.linspace(20.0, 600.0, 300)
    at = levels(system, along, fields)
    k = int(np.clip(np.argmin(at[:, pair[1]] - at[:, pair[0]]), 1, 298))
    best = minimize_scalar(gap, bounds=(fields[k - 1], fields[k + 1]), method="bounded", options={"xatol": 1e-10})
    return float(best.x), gap(best.x)


@settings(derandomize=True, max_examples=15, deadline=None)
@given(st.floats(0.7, 1.4), st.floats(0.02, 0.3), st.floats(0.2, 1.3), st.floats(0.1, 1.4))
def test_a_quantum_at_a_near_crossing(ratio: float, rhombicity: float, theta: float, phi: float) -> None:
    """At the least distance of two levels a loop closes: no resonance just below it, two just above, apart as the root.

    Near the least distance the gap is gap_0 + curvature (B - B_0)^2 / 2.
    """
    d = ratio * X_BAND
    system = systems(Species(spins=(Spin(2.5, (2.0,), d, rhombicity * d),)))[0]
    n = np.array([np.sin(theta) * np.cos(phi), np.sin(theta) * np.sin(phi), np.cos(theta)])
    for pair in ((1, 2), (2, 3), (3, 4)):
        field, gap = least_gap(system, n, pair)
        at = levels(system, n, np.array([field - 0.05, field, field + 0.05]))
        bend = float(np.diff(at[:, pair[1]] - at[:, pair[0]], 2)[0] / 0.05**2)
        if gap < 500 or not 40 < field < 580 or bend < 1e-2:
            continue
        for above, count in ((-0.01, 0), (0.01, 2)):
            window = (max(field - 5.0, 1.0), field + 5.0)
            got = find(system, n[None], gap + above, window)
            mine = np.sort(got.field[(got.lower == pair[0]) & (got.upper == pair[1])])
            near = mine[np.abs(mine - field) < 3 * np.sqrt(2 * 0.01 / bend)]
            assert len(near) == count
            if count:
                assert near.mean() == pytest.approx(field, abs=5e-3)
                assert np.ptp(near) == pytest.approx(2 * np.sqrt(2 * above / bend), rel=0.1)


# --- no splitting at all --------------------------------------------------------------------------


@pytest.mark.parametrize("temperature", [None, 4.0])
@pytest.mark.parametrize("spin", [1, 2.5, 3.5])
def test_a_spin_without_splittings_is_a_doublet_in_all_but_strength(spin: float, temperature: float | None) -> None:
    """S(S+1) in place of 3/4 without a temperature; with one, the magnetisation of a Brillouin function.

    All |M|^2 between neighbours times differences of populations sum to the mean of S_z.
    """
    sweep = Sweep(X_BAND, (290.0, 370.0), 300, temperature=temperature)
    g = (2.0, 2.05, 2.2)
    nuclei = (Nucleus("1H", A=(0.0,), treat="exact"),)
    many = simulate(Species("s", (Spin(spin, g),), nuclei, width=Width(gaussian=2.0)), sweep).signal
    half = simulate(Species("s", (Spin(0.5, g),), width=Width(gaussian=2.0)), sweep).signal
    if temperature is None:
        expected = spin * (spin + 1) / 0.75
    else:
        x = X_BAND * 1e6 * 6.62607015e-34 / (1.380649e-23 * temperature)  # both exact by definition, SI
        m = np.arange(-spin, spin + 1)
        expected = (m * np.exp(m * x)).sum() / np.exp(m * x).sum() / (0.5 * np.tanh(0.5 * x))
    assert np.abs(many - expected * half).max() < 2e-3 * np.abs(many).max()


# --- derivatives of random systems ----------------------------------------------------------------


@st.composite
def crystal_spins(draw: st.DrawFn) -> Species:
    """Draw a spin with Stevens terms, or a doublet with two nuclei, everything tilted."""
    s = draw(st.sampled_from([0.5, 1.0, 2.0, 2.5, 3.0]))
    width = Width(gaussian=4.0)
    if s == 0.5:
        nuclei = tuple(
            Nucleus(name, A=tuple(draw(st.floats(50, 200)) for _ in range(3)), A_tilt=draw(ANGLES), treat="exact")
            for name in ("1H", "14N")
        )
        return Species("s", (Spin(s, (1.95, 2.0, 2.1), g_tilt=draw(ANGLES)),), nuclei, width=width)
    terms = {2: ((2, -1), 40.0), 4: ((4, 3), 3.0), 6: ((6, -4), 0.05)}
    ranks = tuple(terms[k] for k in (2, 4, 6) if k <= 2 * s)
    d = draw(st.floats(300, 900)) * draw(st.sampled_from([-1, 1]))
    return Species("s", (Spin(s, (1.95, 2.0, 2.1), d, 0.2 * d, D_tilt=draw(ANGLES), stevens=ranks),), width=width)


@settings(derandomize=True, max_examples=10, deadline=None)
@given(crystal_spins(), st.floats(0.0, 3.0))
def test_derivatives_of_random_crystals(species: Species, angle: float) -> None:
    """Every parameter of the Hamiltonian against a central difference."""
    sample = Sample(form="crystal", axis=(0.3, 1.0, 0.2), start=(0.0, 0.2, -1.0), angles=(angle,))
    sweep = Sweep(X_BAND, (100.0, 600.0), 600, temperature=30.0)
    binding = Binding((species,), sample, ())
    parameters = binding.parameters
    # P must stay traceless; widths are no matter of levels
    left_out = (".P_", "width", "spread", "amount")
    names = [n for n in parameters if n.startswith("s.") and not any(part in n for part in left_out)]
    kept = simulate(species, sweep, sample, keep=True).kept[0]

    def moved(name: str, step: float) -> Species:
        return binding.apply({name: parameters[name].value + step})[0][0]

    # Each moves levels by about 1 MHz, lines by a hundredth of their width; the difference errs by the square of that.
    sizes = {"tilt": 3e-4, ".g_": 1e-4, ".B4": 2e-3, ".B6": 1e-4}
    steps = {n: next((size for part, size in sizes.items() if part in n), 0.2) for n in names}
    found = signal_changes(kept, [(moved(n, 1e-2 * steps[n]), sample) for n in names])
    for name, change in zip(names, found, strict=True):
        above, below = (simulate(moved(name, s * steps[name]), sweep, sample).signal for s in (1, -1))
        difference, derivative = 0.5 * (above - below), 100 * change.reshape(above.shape)
        size = max(np.abs(difference).max(), 1e-5 * np.abs(above).max())
        assert np.abs(derivative - difference).max() < 2e-3 * size, name
