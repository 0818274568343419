"""Sketched spectra against simulated ones, and what a search does with them."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from spinfit.fitting.data import Job, Trace
from spinfit.fitting.residuals import Problem
from spinfit.fitting.wide import Wide, quick_engine
from spinfit.sketch import sketch, sketchable, zero_field_span
from spinfit.species import Nucleus, Species, Spin, Width
from spinfit.spectrum import Spectrum, simulate
from spinfit.sweep import Sample, Sweep

IRON = Spin(S=2.5, g=(2.0,), D=9000.0, E=2400.0)
SPINS = {
    "looping": IRON,
    "axial": Spin(S=2.5, g=(2.0,), D=7000.0),
    "turned": replace(IRON, D_tilt=(0.3, 0.5, 0.1), g=(1.9, 2.0, 2.2)),
    "triplet": Spin(S=1.0, g=(2.0,), D=4000.0, E=600.0),
    "integer": Spin(S=2.0, g=(2.05,), D=8000.0, E=1500.0),
}


def species(spin: Spin, width: float = 20.0) -> Species:
    return Species("s", (spin,), width=Width(gaussian=width))


def _misses(one: Species, sweep: Sweep, **how: float) -> float:
    """What of a simulated spectrum its sketch leaves, as a part of its norm."""
    wanted = simulate((one,), sweep, Sample(), tolerance=3e-3).signal
    found = sketch((one,), sweep, Sample(), **how).signal
    return float(np.linalg.norm(wanted - found) / np.linalg.norm(wanted))


@pytest.mark.parametrize("detect", ["absorption", "derivative"])
@pytest.mark.parametrize("name", SPINS)
def test_sketches_resemble_spectra(name: str, detect: str) -> None:
    # The module promises a few per cent of a broadened absorption; a derivative shows its errors more.
    sweep = Sweep(9500.0, (20.0, 500.0), points=240, temperature=30.0, detect=detect)
    assert _misses(species(SPINS[name]), sweep) < (0.06 if detect == "absorption" else 0.12)


def test_parallel_fields_populations_and_phases_are_sketched_as_well() -> None:
    sweep = Sweep(9500.0, (20.0, 500.0), points=240, microwave="parallel", detect="absorption")
    assert _misses(species(SPINS["integer"]), sweep) < 0.08
    sweep = Sweep(9500.0, (100.0, 520.0), points=240, detect="absorption", phase=0.6)
    polarised = replace(species(SPINS["triplet"]), populations=(0.1, 0.2, 0.7))
    assert _misses(polarised, sweep) < 0.08


def test_more_directions_come_nearer() -> None:
    sweep = Sweep(9500.0, (20.0, 500.0), points=240, temperature=30.0, detect="derivative")
    assert _misses(species(IRON), sweep, tolerance=1e-3) < 0.7 * _misses(species(IRON), sweep)


def test_the_middle_of_the_field_is_reached_from_both_sides() -> None:
    """A spectrum is even in the field: what lies below zero shows in its tail above, and the other way round."""
    sweep = Sweep(9500.0, (0.0, 300.0), points=200, temperature=30.0, detect="absorption")
    both = np.concatenate((-sweep.fields[:0:-1], sweep.fields))
    signal = sketch((species(IRON),), sweep, Sample(), fields=both).signal
    assert signal == pytest.approx(signal[::-1], rel=1e-6, abs=1e-6 * np.abs(signal).max())


def test_sketches_change_smoothly() -> None:
    """Second differences shrink with the square of the step: no line comes or goes at once."""
    sweep = Sweep(9500.0, (20.0, 500.0), points=240, temperature=30.0)
    bends = []
    for step in (20.0, 10.0):
        below, here, above = (
            sketch((species(replace(IRON, D=9000.0 + move)),), sweep, Sample()).signal for move in (-step, 0.0, step)
        )
        bends.append(np.abs(above - 2 * here + below).max())
    assert bends[1] == pytest.approx(bends[0] / 4, rel=0.15)


def test_the_span_of_levels_without_field() -> None:
    """S = 1: D/3 + E over -2D/3, closed form."""
    assert zero_field_span(species(SPINS["triplet"])) == pytest.approx(4600.0)


def test_what_is_sketched() -> None:
    iron = species(IRON)
    assert sketchable(iron, Sample())
    assert not sketchable(iron, Sample(form="crystal"))
    assert not sketchable(species(Spin(g=(2.0,))), Sample())
    assert not sketchable(replace(iron, nuclei=(Nucleus("55Mn", A=(200.0,)),)), Sample())


def test_other_species_are_simulated() -> None:
    sweep = Sweep(9500.0, (20.0, 500.0), points=240, temperature=30.0, detect="absorption")
    several = (species(IRON), replace(species(Spin(g=(2.0,))), name="r", amount=0.1))
    found = sketch(several, sweep, Sample())
    assert np.array_equal(found.parts[1], simulate((several[1],), sweep, tolerance=1e-2).parts[0])
    assert found.signal == pytest.approx(found.parts[0] + 0.1 * found.parts[1])


def _problem(spin: Spin, engine=simulate) -> Problem:
    sweep = Sweep(9500.0, (20.0, 500.0), points=240, temperature=30.0)
    signal = sketch((species(spin),), sweep, Sample()).signal
    trace = Trace("t", sweep.fields, signal, np.ones(240, dtype=bool), 9500.0, temperature=30.0)
    return Problem(Job((species(spin),), Sample(), (trace,), ("s.g", "s.D", "s.E")), engine)


def test_searches_sketch_what_takes_long() -> None:
    def another(*args: object, **how: object) -> Spectrum:
        return simulate(*args, **how)

    iron, small = _problem(IRON), _problem(Spin(S=1.5, g=(2.0,), D=900.0, E=100.0))
    assert quick_engine(iron, iron.start) is sketch
    assert quick_engine(small, small.start) is None
    # An engine that was asked for is not replaced.
    assert quick_engine(_problem(IRON, another), iron.start) is None


def test_candidates_hold_the_answer() -> None:
    """A trace that is a sketch itself: the best candidate from a start far off is what it was made with."""
    problem = _problem(IRON)
    start = problem.start * np.array([1.03, 1.5, 1.3])
    wide = Wide(problem, start)
    assert wide.sketched
    best = next(iter(wide.candidates()))
    assert best[0] == pytest.approx(2.0, abs=2e-3)
    assert best[1:] == pytest.approx(problem.start[1:], rel=0.02)
