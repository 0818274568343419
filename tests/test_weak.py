"""Weakly coupled nuclei against exact diagonalisation of the whole product of spins.

The reference puts every nucleus into the matrices (`treat = "exact"`) and uses numpy's eigensolver at
single fields and directions, or the program's own exact resonances on shared directions; shares are
checked against binomials and against natural abundances.
"""

from __future__ import annotations

from dataclasses import replace
from math import comb

import numpy as np
import pytest

from spinfit.hamiltonian import systems
from spinfit.isotopes import natural
from spinfit.nuclei import Weak, kinds
from spinfit.patterns import node_slopes, pattern
from spinfit.species import Nucleus, Species, Spin, Width
from spinfit.spectrum import simulate
from spinfit.sweep import Sample, Sweep
from spinfit.symmetry import symmetry_of
from spinfit.treatment import decided
from spinfit.weak import felt

DOUBLET = Spin(g=(2.0, 2.05, 2.25))
NITROGEN = Nucleus(isotope="14N", A=(35.0, 30.0, 40.0), P=(-1.0, -0.5, 1.5))
PROTON = Nucleus(isotope="1H", A=(10.0, 15.0, 30.0), A_tilt=(0.3, 0.5, 0.2))
SIGMA = 5.0  # MHz


def treated(species: Species, how: str) -> Species:
    """Return the species with this treatment wherever the file would say nothing."""
    return replace(
        species, nuclei=tuple(replace(one, treat=how) if one.treat == "auto" else one for one in species.nuclei)
    )


def solved(system, field, direction):
    """Return energies, vectors and |M|^2 summed over two directions normal to the field."""
    energy, v = np.linalg.eigh(system.h0 + field * np.tensordot(direction, system.zeeman, 1))
    moment = v.conj().T @ system.zeeman @ v
    parallel = np.tensordot(direction, moment, 1)
    return energy, v, (np.abs(moment) ** 2).sum(axis=0) - np.abs(parallel) ** 2


def broadened(lines, frequencies):
    total = np.zeros_like(frequencies)
    for gap, weight in zip(*lines, strict=True):
        total += weight * np.exp(-0.5 * ((frequencies - gap) / SIGMA) ** 2)
    return total


def frequency_spectra(species: Species, field: float, direction, frequencies, order: str):
    """Return the spectrum at fixed field, exact and with weak nuclei, and the patterns used."""
    n = np.array(direction) / np.linalg.norm(direction)
    exact, weak, used = 0.0, 0.0, []
    for system in systems(treated(species, "exact")):
        energy, _, intensity = solved(system, field, n)
        i, j = np.triu_indices(len(energy), 1)
        near = (energy[j] - energy[i] > frequencies[0]) & (energy[j] - energy[i] < frequencies[-1])
        i, j = i[near], j[near]
        exact += broadened((energy[j] - energy[i], system.weight / len(energy) * intensity[i, j]), frequencies)
    for system in systems(treated(species, order), perturb=True):
        energy, v, intensity = solved(system, field, n)
        i, j = np.triu_indices(len(energy), 1)
        strong = intensity[i, j] > 1e-6 * intensity[i, j].max()
        i, j = i[strong], j[strong]
        strength = intensity[i, j] / intensity[i, j].max()
        found = pattern(
            system,
            felt(system, energy[None], v[None]),
            field * n[None],
            (i, j),
            scale=SIGMA,
            tolerance=1e-3,
            strength=strength,
        )
        used.append((found, strength))
        gap = (energy[j] - energy[i])[found.pair] + found.offset[:, 0]
        weight = system.weight / len(energy) * intensity[i, j][found.pair] * found.share[:, 0]
        weak += broadened((gap, weight), frequencies)
    return exact, weak, used


CASES = {
    "14N with P": (DOUBLET, (NITROGEN,), 3e-4),
    "14N and 1H": (DOUBLET, (NITROGEN, PROTON), 1e-3),
    "equivalent": (DOUBLET, (replace(NITROGEN, P=(0.0,), count=2), replace(PROTON, count=3)), 1e-3),
    "silicon": (DOUBLET, (Nucleus(element="Si", A=(30.0, 40.0, 50.0), count=3),), 1e-4),
    "triplet": (Spin(S=1, g=(2.0,), D=3000.0, E=-400.0), (PROTON,), 1e-3),
    "S = 5/2": (Spin(S=2.5, g=(2.0,), D=300.0, E=30.0), (PROTON,), 1e-3),
}


@pytest.mark.parametrize("name", CASES)
@pytest.mark.parametrize("direction", [(0, 0, 1), (1, 0.4, 0.7), (0.2, 1, 0.1)])
def test_second_order_meets_exact_levels(name, direction):
    spin, nuclei, allowed = CASES[name]
    species = Species(spins=(spin,), nuclei=nuclei)
    frequencies = np.arange(7500.0, 12500.0, 0.5)
    exact, weak, _ = frequency_spectra(species, 320.0, direction, frequencies, "second order")
    assert np.abs(weak - exact).max() <= allowed * exact.max()
    _, first, _ = frequency_spectra(species, 320.0, direction, frequencies, "first order")
    assert np.abs(first - exact).max() >= np.abs(weak - exact).max()


@pytest.mark.parametrize("name", CASES)
def test_shares_of_strong_pairs_sum_to_one(name):
    spin, nuclei, _ = CASES[name]
    _, _, used = frequency_spectra(
        Species(spins=(spin,), nuclei=nuclei), 320.0, (1, 0.4, 0.7), np.arange(8e3, 1e4, 1.0), "second order"
    )
    for found, strength in used:
        total = np.bincount(found.pair, found.share[:, 0], len(strength))
        assert np.allclose(total[strength > 0.1], 1, atol=3e-4)


def test_isotropic_equivalent_nuclei_give_binomials():
    # n spins 1/2: shares n over k / 2^n, A apart; F.C. Pascal's triangle, any textbook of EPR
    species = Species(spins=(Spin(g=(2.0,)),), nuclei=(Nucleus(isotope="1H", A=(12.0,), count=4, treat="first order"),))
    (system,) = systems(species, perturb=True)
    energy, v, _ = solved(system, 340.0, np.array([0.0, 0.0, 1.0]))
    seen = felt(system, energy[None], v[None])
    found = pattern(
        system, seen, np.array([[0.0, 0.0, 340.0]]), (np.array([0]), np.array([1])), scale=1.0, tolerance=1e-3
    )
    assert not found.gridded
    assert np.allclose(found.offset[:, 0], [-24, -12, 0, 12, 24], atol=1e-9)
    assert np.allclose(found.share[:, 0], [comb(4, k) / 16 for k in range(5)], atol=1e-9)


def test_natural_abundance_shares():
    species = Species(spins=(Spin(g=(2.0,)),), nuclei=(Nucleus(element="Si", A=(30.0,), treat="second order"),))
    (system,) = systems(species, perturb=True)
    energy, v, _ = solved(system, 340.0, np.array([0.0, 0.0, 1.0]))
    seen = felt(system, energy[None], v[None])
    found = pattern(
        system, seen, np.array([[0.0, 0.0, 340.0]]), (np.array([0]), np.array([1])), scale=1.0, tolerance=1e-3
    )
    abundance = {one.name: one.abundance for one in natural("Si")}
    middle = np.abs(found.offset[:, 0]) < 1
    assert found.share[middle, 0].sum() == pytest.approx(abundance["28Si"] + abundance["30Si"], abs=1e-3)
    assert found.share[~middle, 0] == pytest.approx([abundance["29Si"] / 2] * 2, abs=1e-3)


def test_cancelled_proton_flips():
    # Rowan, Hahn, Mims (1965): sin^2 and cos^2 of half the angle between the two nuclear axes
    species = Species(spins=(Spin(g=(2.0,)),), nuclei=(Nucleus(isotope="1H", A=(20.0, 40.0), treat="first order"),))
    (system,) = systems(species, perturb=True)
    field, n = 340.0, np.array([np.sin(0.7), 0.0, np.cos(0.7)])
    energy, v, _ = solved(system, field, n)
    found = pattern(
        system,
        felt(system, energy[None], v[None]),
        field * n[None],
        (np.array([0]), np.array([1])),
        scale=0.1,
        tolerance=1e-3,
    )
    kind = system.weak[0].kinds[0]
    below, above = (s * kind.hyperfine @ n / 2 + kind.zeeman * field * n for s in (-1, 1))
    half = np.arccos(below @ above / np.linalg.norm(below) / np.linalg.norm(above)) / 2
    a, b = np.linalg.norm(below) / 2, np.linalg.norm(above) / 2
    expected = sorted(
        [(b - a, np.cos(half) ** 2 / 2), (a - b, np.cos(half) ** 2 / 2)]
        + [(s * (a + b), np.sin(half) ** 2 / 2) for s in (-1, 1)]
    )
    assert not found.gridded
    assert np.allclose(found.offset[:, 0], [x for x, _ in expected], atol=1e-9)
    assert np.allclose(found.share[:, 0], [w for _, w in expected], atol=1e-9)


def far(a, b):
    return float(np.abs(a - b).max() / np.abs(b).max())


CRYSTAL = Sample(
    form="crystal", axis=(0, 1, 0), start=(1, 0, 0.3), angles=tuple(np.radians([0, 20, 50])), tilt=(0.3, 0.4, 0.5)
)
CRYSTALS = {
    "14N with P": (DOUBLET, (NITROGEN,), (280.0, 350.0), 1e-3),
    "protons": (DOUBLET, (PROTON,), (280.0, 350.0), 1e-3),
    "triplet": (Spin(S=1, g=(2.0,), D=3000.0, E=-400.0), (PROTON,), (0.0, 500.0), 1e-3),
    "S = 5/2": (Spin(S=2.5, g=(2.0,), D=300.0), (PROTON,), (240.0, 430.0), 1e-3),
}


@pytest.mark.parametrize("name", CRYSTALS)
def test_crystals_meet_exact_diagonalisation(name):
    spin, nuclei, field, allowed = CRYSTALS[name]
    species = Species("s", (spin,), nuclei=nuclei, width=Width(gaussian=0.6))
    sweep = Sweep(9500.0, field, 1024, temperature=20.0)
    exact = simulate(treated(species, "exact"), sweep, CRYSTAL).signal
    weak = simulate(treated(species, "second order"), sweep, CRYSTAL).signal
    first = simulate(treated(species, "first order"), sweep, CRYSTAL).signal
    assert far(weak, exact) <= allowed
    assert far(weak, exact) < far(first, exact)


POWDERS = {
    "14N isotropic": (DOUBLET, (replace(NITROGEN, A=(40.0,), P=(0.0,)),), 0.8, (280.0, 350.0)),
    "14N with P": (DOUBLET, (NITROGEN,), 0.8, (280.0, 350.0)),
    "proton near cancellation": (DOUBLET, (replace(PROTON, A_tilt=(0.0, 0.0, 0.0)),), 0.8, (280.0, 350.0)),
    "S = 5/2": (Spin(S=2.5, g=(2.0,), D=300.0), (Nucleus(isotope="1H", A=(10.0, 20.0)),), 1.0, (240.0, 430.0)),
}


@pytest.mark.parametrize("name", POWDERS)
def test_powders_meet_exact_diagonalisation(name):
    spin, nuclei, width, field = POWDERS[name]
    species = Species("s", (spin,), nuclei=nuclei, width=Width(gaussian=width))
    sweep = Sweep(9500.0, field, 1024)
    exact = simulate(treated(species, "exact"), sweep, tolerance=3e-4).signal
    assert far(simulate(treated(species, "second order"), sweep).signal, exact) <= 1e-3


def test_many_nuclei_cost_little():
    copper = Nucleus(isotope="63Cu", A=(-30.0, -550.0), treat="exact")
    ligands = (
        Nucleus(isotope="14N", A=(32.0, 34.0, 44.0), P=(-1.0, -1.0, 2.0), count=4, treat="second order"),
        Nucleus(isotope="1H", A=(6.0, 8.0, 14.0), count=9, treat="second order"),
    )
    species = Species("s", (Spin(g=(2.05, 2.25)),), nuclei=(copper, *ligands), width=Width(gaussian=1.5))
    out = simulate(species, Sweep(9500.0, (250.0, 345.0), 512))
    (used,) = out.report["s"]["systems"]
    assert np.all(np.isfinite(out.signal))
    # what costs: matrices of the copper alone, and at most about a hundred lines to a transition
    assert used["diagonalisations"] < 20_000
    assert used["pairs"] + used["looping"] < 28 * 120
    assert [one["treat"] for one in out.report["s"]["nuclei"]] == ["exact", "second order", "second order"]


def test_treatment_is_reported_and_can_be_overruled():
    species = Species(
        "s",
        (DOUBLET,),
        nuclei=(Nucleus(isotope="63Cu", A=(-30.0, -60.0, -550.0)), Nucleus(isotope="14N", A=(4.0,))),
        width=Width(gaussian=0.8),
    )
    asked = (9500.0, (280.0, 350.0), 0.4, 1e-3, "perpendicular")
    assert [one["treat"] for one in decided(species, *asked).nuclei] == ["exact", "second order"]
    assert [one["treat"] for one in decided(treated(species, "exact"), *asked).nuclei] == ["exact", "exact"]
    assert [one["treat"] for one in decided(treated(species, "first order"), *asked).nuclei] == ["first order"] * 2


def test_parallel_mode_of_a_doublet_is_exact_or_warned_of():
    # for S = 1/2 the moment along the field commutes with the electron's own Hamiltonian: only nuclei give intensity
    many = Species("s", (DOUBLET,), nuclei=(replace(NITROGEN, count=2),), width=Width(gaussian=0.8))
    found = decided(many, 9500.0, (280.0, 350.0), 0.4, 1e-3, "parallel")
    assert found.nuclei[0]["treat"] == "exact" or found.warnings
    one = Species("s", (DOUBLET,), nuclei=(PROTON,), width=Width(gaussian=0.8))
    assert decided(one, 9500.0, (280.0, 350.0), 0.4, 1e-3, "parallel").nuclei[0]["treat"] == "exact"


def test_weak_tensors_lower_the_symmetry():
    axial = Species(spins=(Spin(g=(2.0, 2.2)),), nuclei=(replace(PROTON, treat="second order"),))
    assert symmetry_of(systems(axial, perturb=True)[0]).kind == "half"
    plain = replace(axial, nuclei=(replace(axial.nuclei[0], A=(3.0, 8.0), A_tilt=(0.0, 0.0, 0.0)),))
    assert symmetry_of(systems(plain, perturb=True)[0]).kind == "axial"


def test_slopes_along_nodes_are_those_of_polynomials():
    fields = np.array([250.0, 270.0, 280.0, 300.0, 320.0, 350.0])
    values = np.stack([fields**2, 3 * fields])[:, :, None]
    assert np.allclose(node_slopes(fields, values)[:, :, 0], [2 * fields, np.full(6, 3.0)])


def test_kinds_of_a_weak_element_sum_to_one():
    nucleus = Nucleus(element="Cl", A=(5.0,), count=2, treat="second order")
    one = Weak("Cl", 0, 2, 2, kinds(nucleus))
    from spinfit.weak import sets

    ways = list(sets(one))
    assert sum(share for share, _ in ways) == pytest.approx(1)
    for _, found in ways:
        for _, parts in found:
            assert sum(part.share for part in parts) == pytest.approx(1)
