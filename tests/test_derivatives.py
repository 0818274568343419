"""Derivatives of spectra against central differences of simulations at a tighter tolerance.

The difference is the definition of a derivative; its step moves the spectrum by about half a percent, so
that its own error, the square of that and what the engine errs over it, stays below a few 1e-3.
"""

from dataclasses import replace

import numpy as np
import pytest

from spinfit.derivatives import field_slope, phase_slope, signal_changes
from spinfit.fitting.parameters import Binding
from spinfit.species import Exchange, Nucleus, Species, Spin, Spread, Width
from spinfit.spectrum import simulate
from spinfit.sweep import Sample, Sweep

X_BAND = Sweep(9500.0, (250.0, 400.0), 700)
WIDE = Sweep(9500.0, (20.0, 520.0), 1000)

RADICAL = Species(name="s", spins=(Spin(g=(2.0, 2.05, 2.25)),), width=Width(gaussian=1.5, lorentzian=0.8))
TILTED = Species(
    name="s",
    spins=(Spin(g=(2.0, 2.05, 2.25)),),
    nuclei=(Nucleus(isotope="31P", A=(300.0, 340.0, 500.0), A_tilt=(0.2, 0.5, 0.3)),),
    width=Width(gaussian=2.0),
)
AXIAL = Species(
    name="s",
    spins=(Spin(g=(2.05, 2.25)),),
    nuclei=(Nucleus(isotope="63Cu", A=(-60.0, -500.0), P=(-8.0, 16.0)),),
    width=Width(gaussian=2.0),
)
TRIPLET = Species(name="s", spins=(Spin(S=1, g=(2.0,), D=1500.0, E=-200.0),), width=Width(gaussian=2.0))
SPREAD = Species(
    name="s",
    spins=(Spin(S=1, g=(1.99, 2.01), D=1500.0, E=-200.0),),
    width=Width(gaussian=2.0, hidden_hyperfine=(20.0, 30.0, 60.0)),
    spread=Spread(g=(0.01, 0.02), D=150.0, E=40.0),
)
QUARTET = Species(
    name="s", spins=(Spin(S=1.5, g=(1.96, 2.0), D=1000.0, E=120.0, D_tilt=(0.1, 0.3, 0.0)),), width=Width(gaussian=4.0)
)
CUBIC = Species(
    name="s",
    spins=(Spin(S=2.5, g=(2.0,), D=200.0, stevens=(((4, 0), 0.4), ((4, 4), 10.0))),),
    width=Width(gaussian=3.0),
)
PAIR = Species(
    name="s",
    spins=(Spin(g=(2.0, 2.05, 2.2)), Spin(g=(2.02,))),
    exchange=(
        Exchange(
            between=(1, 2),
            J=1500.0,
            dipolar=(300.0, 250.0, -550.0),
            tilt=(0.0, 0.4, 0.0),
            antisymmetric=(50.0, 0.0, 80.0),
        ),
    ),
    width=Width(gaussian=3.0),
)
LIGANDS = Species(
    name="s",
    spins=(Spin(g=(2.03, 2.06, 2.25)),),
    nuclei=(Nucleus(isotope="14N", A=(35.0, 35.0, 45.0), treat="second order"),),
    width=Width(gaussian=1.5),
)

CASES = {
    "radical": (RADICAL, X_BAND, ("g_x", "g_y", "g_z", "width.gaussian", "width.lorentzian")),
    "tilted": (
        TILTED,
        X_BAND,
        ("g_x", "g_tilt_beta", "31P.A_x", "31P.A_z", "31P.A_tilt_beta", "31P.A_tilt_alpha"),
    ),
    "axial": (AXIAL, X_BAND, ("g_perp", "g_par", "63Cu.A_perp", "63Cu.A_par")),
    "triplet": (TRIPLET, WIDE, ("g", "D", "E", "width.gaussian")),
    "triplet at 4 K": (TRIPLET, replace(WIDE, temperature=4.0), ("g", "D", "E")),
    "spreads": (
        SPREAD,
        WIDE,
        ("g_perp", "D", "E", "spread.D", "spread.E", "spread.g_par", "width.hidden_hyperfine_z", "width.gaussian"),
    ),
    "quartet": (QUARTET, WIDE, ("g_perp", "D", "D_tilt_beta")),
    "cubic": (CUBIC, WIDE, ("g", "D", "B4_0", "B4_4")),
    "pair": (PAIR, X_BAND, ("1.g_x", "2.g", "dipolar_12_tilt_beta", "antisymmetric_12_z")),
    "ligands": (LIGANDS, X_BAND, ("g_x", "g_z", "14N.A_x", "14N.A_z", "width.gaussian")),
}


def compare(
    species: Species, sweep: Sweep, sample: Sample, names: tuple[str, ...], worst: float = 5e-3, head: str = "s."
) -> None:
    binding = Binding((species,), sample, ())
    parameters = [binding.parameters[name if name.startswith("sample.") else head + name] for name in names]

    def model(parameter, step):
        changed, where, _ = binding.apply({parameter.name: parameter.value + step})
        return changed[0], where

    spectrum = simulate(species, sweep, sample, keep=True, tolerance=3e-4)
    small = [1e-4 * p.scale for p in parameters]
    found = signal_changes(spectrum.kept[0], [model(p, h) for p, h in zip(parameters, small, strict=True)])
    for parameter, change, h in zip(parameters, found, small, strict=True):
        assert change is not None, parameter.name
        derivative = change.reshape(spectrum.signal.shape) / h
        step = min(5e-3 * np.abs(spectrum.signal).max() / np.abs(derivative).max(), 3 * parameter.scale)
        sides = [model(parameter, s) for s in (step, -step)]
        above, below = (simulate(changed, sweep, where, tolerance=1e-4) for changed, where in sides)
        difference = (above.signal - below.signal) / (2 * step)
        error = np.abs(derivative - difference).max() / np.abs(difference).max()
        assert error < worst, (parameter.name, error)


@pytest.mark.parametrize("name", CASES)
def test_parameters_of_powders(name: str, monkeypatch: pytest.MonkeyPatch) -> None:
    # widths of first order alone: tests/test_distribution.py has the derivatives of averages over D and E
    monkeypatch.setattr("spinfit.spectrum.ENOUGH", np.inf)
    species, sweep, names = CASES[name]
    compare(species, sweep, Sample(), names)


def test_resonances_that_come_and_go() -> None:
    # the spectra of the difference, and the two sums of the derivative, err by up to the tolerance of their top
    # each, whatever the parameter does
    step, tolerance = 15.0, 1e-3
    species = Species(name="s", spins=(Spin(S=1.5, g=(1.98,), D=6500.0, E=600.0),), width=Width(gaussian=20.0))
    sweep = Sweep(9500.0, (20.0, 520.0), 200)
    spectrum = simulate(species, sweep, keep=True, tolerance=tolerance)
    assert spectrum.kept[0].averages[0].loops
    near, above, below = (
        replace(species, spins=(replace(species.spins[0], D=6500.0 + s),)) for s in (0.02, step, -step)
    )
    [change] = signal_changes(spectrum.kept[0], [(near, Sample())])
    difference = simulate(above, sweep, tolerance=tolerance).signal - simulate(below, sweep, tolerance=tolerance).signal
    allowed = 4 * tolerance * np.abs(spectrum.signal).max()
    assert np.abs(difference).max() > 10 * allowed
    assert change[0] * (2 * step / 0.02) == pytest.approx(difference, abs=allowed)


def test_an_isotropic_radical() -> None:
    sample = Sample()
    species = Species(
        name="s",
        spins=(Spin(g=(2.0, 2.0, 2.0)),),
        nuclei=(Nucleus(isotope="1H", A=(60.0,)),),
        width=Width(gaussian=1.0),
    )
    compare(species, X_BAND, sample, ("g_x", "1H.A", "width.gaussian"))


CRYSTAL = Sample(
    form="crystal",
    axis=(0.0, 1.0, 0.0),
    start=(0.0, 0.0, 1.0),
    angles=(0.3, 0.9),
    tilt=(0.2, 0.5, 0.1),
    angle_zero=0.05,
    point_group="222",
)


@pytest.mark.parametrize("microwave", ["perpendicular", "parallel"])
def test_crystals(microwave: str) -> None:
    sweep = replace(WIDE, microwave=microwave, temperature=20.0)
    species = replace(TRIPLET, spins=(replace(TRIPLET.spins[0], g=(2.0, 2.02, 2.1)),))
    names = ("g_x", "D", "E", "width.gaussian", "sample.tilt_alpha", "sample.tilt_beta", "sample.angle_zero")
    compare(species, sweep, CRYSTAL, names)


def test_a_crystal_with_spreads_and_sites_that_part() -> None:
    # along the twofold axis all sites are alike, and part when the crystal is tilted
    sample = replace(CRYSTAL, angles=(0.0, 0.4), angle_zero=0.0)
    compare(SPREAD, WIDE, sample, ("D", "sample.tilt_alpha", "sample.tilt_beta"))


@pytest.mark.parametrize("detect", ["absorption", "derivative", "second derivative"])
def test_field_and_phase(detect: str) -> None:
    sweep = replace(X_BAND, detect=detect, modulation=0.5, phase=0.3)
    kept = simulate(RADICAL, sweep, keep=True).kept[0]
    step = 1e-3
    above, below = (simulate(RADICAL, sweep, fields=sweep.fields + s).signal for s in (step, -step))
    difference = (above - below) / (2 * step)
    assert field_slope(kept)[0] == pytest.approx(difference, abs=5e-3 * np.abs(difference).max())
    above, below = (simulate(RADICAL, replace(sweep, phase=0.3 + s)).signal for s in (step, -step))
    difference = (above - below) / (2 * step)
    assert phase_slope(kept)[0] == pytest.approx(difference, abs=1e-5 * np.abs(difference).max())


def test_what_breaks_the_symmetry_has_no_effect_to_first_order() -> None:
    axial = replace(TRIPLET, spins=(Spin(S=1, g=(2.0,), D=1500.0, E=0.0),))
    moved = replace(axial, spins=(replace(axial.spins[0], E=1e-3),))
    kept = simulate(axial, WIDE, keep=True).kept[0]
    [change] = signal_changes(kept, [(moved, Sample())])
    assert np.abs(change).max() < 1e-9 * np.abs(simulate(axial, WIDE).signal).max()


def test_solutions_are_left_to_differences() -> None:
    sample = Sample(form="solution")
    spectrum = simulate(RADICAL, X_BAND, sample, keep=True)
    assert spectrum.kept == ()
