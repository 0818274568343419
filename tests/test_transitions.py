"""The survey of transitions against closed forms and against the areas of whole spectra."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest
from scipy.integrate import trapezoid

from spinfit.cli import main
from spinfit.species import Nucleus, Species, Spin, Width
from spinfit.spectrum import simulate
from spinfit.sweep import Sample, Sweep
from spinfit.transitions import transitions
from spinfit.units import MU_B_OVER_H, field_of

NU = 9500.0


def test_a_doublet_runs_from_g_parallel_to_g_perpendicular() -> None:
    found = transitions(Species("cu", (Spin(0.5, (2.05, 2.26)),)), Sweep(NU, (250.0, 400.0)))
    (one,) = found.transitions
    assert (one.lower, one.upper, one.resonances, one.system) == (1, 2, 1, "")
    assert [one.low, one.high] == pytest.approx([field_of(2.26, NU), field_of(2.05, NU)], rel=1e-9)
    assert one.at_low == pytest.approx((0.0, 0.0))
    assert one.at_high[0] == pytest.approx(np.pi / 2)
    assert [one.share, one.net, one.inside] == pytest.approx([1, 1, 1])
    assert found.outside == 0


def test_the_axes_of_a_rhombic_g_are_where_the_fields_are_extreme() -> None:
    (one,) = transitions(Species("r", (Spin(0.5, (1.9, 2.1, 2.0)),)), Sweep(NU, (250.0, 400.0))).transitions
    assert [one.low, one.high] == pytest.approx([field_of(2.1, NU), field_of(1.9, NU)], rel=1e-9)
    assert one.at_low == pytest.approx((np.pi / 2, np.pi / 2))
    assert one.at_high == pytest.approx((np.pi / 2, 0.0))


SEVERAL = [
    (Species("t", (Spin(1.0, (2.0,), 1500.0, 200.0),), width=Width(gaussian=2.0)), (300.0, 345.0)),
    (Species("q", (Spin(1.5, (2.0,), 3000.0, 0.0),), width=Width(gaussian=3.0)), (200.0, 330.0)),
    (
        Species(
            "cu",
            (Spin(0.5, (2.05, 2.26)),),
            (Nucleus(element="Cu", A=(-60.0, -500.0)),),
            width=Width(gaussian=2.0),
        ),
        (200.0, 320.0),
    ),
    (Species("fe", (Spin(2.5, (2.0,), 2000.0, 300.0),), width=Width(gaussian=4.0)), (100.0, 300.0)),
]


@pytest.mark.parametrize(("species", "window"), SEVERAL, ids=lambda value: getattr(value, "name", ""))
def test_shares_are_those_of_the_areas_of_the_absorption(species: Species, window: tuple[float, float]) -> None:
    found = transitions(species, Sweep(NU, window))
    whole = Sweep(NU, (0.0, found.searched + 20.0), 20_000, detect="absorption")
    spectrum = simulate(species, whole, tolerance=1e-2)
    inside = (whole.fields >= window[0]) & (whole.fields <= window[1])
    below = whole.fields < window[0]
    area = trapezoid(spectrum.signal, whole.fields)
    # lines have widths here, resonances there have none: the edges blur by a line's width
    assert trapezoid(spectrum.signal[inside], whole.fields[inside]) / area == pytest.approx(1 - found.outside, abs=0.02)
    assert trapezoid(spectrum.signal[below], whole.fields[below]) / area == pytest.approx(found.below, abs=0.02)
    assert 0.05 < found.outside < 0.95
    assert sum(one.share for one in found.transitions) == pytest.approx(1.0, abs=2e-3)
    assert sum(one.share * one.inside for one in found.transitions) == pytest.approx(1 - found.outside, abs=2e-3)


def test_a_looping_transition_counts_its_resonances() -> None:
    # D close to h nu: levels that come into resonance twice in one direction
    found = transitions(Species("q", (Spin(1.5, (1.98,), NU),)), Sweep(NU, (0.0, 500.0)))
    assert max(one.resonances for one in found.transitions) >= 2


def test_nothing_lies_beyond_the_field_that_is_searched() -> None:
    # the highest resonance of an axial triplet is at h nu + |D| along z
    d = 4000.0
    found = transitions(Species("t", (Spin(1.0, (2.0,), d),)), Sweep(NU, (300.0, 400.0)))
    assert max(one.high for one in found.transitions) == pytest.approx((NU + d) / (2 * MU_B_OVER_H), rel=1e-6)
    assert found.searched >= (NU + d) / (2 * MU_B_OVER_H)


def test_emission_shows_in_the_net_share() -> None:
    # T_z alone, field along z: m = 0 holds everything, one line absorbs as much as the other emits
    species = Species("t", (Spin(1.0, (2.0,), 900.0),), populations=(1.0, 0.0, 0.0))
    sample = Sample("crystal", axis=(1.0, 0.0, 0.0), start=(0.0, 0.0, 1.0), angles=(0.0,))
    found = transitions(species, Sweep(NU, (250.0, 450.0)), sample)
    assert {(one.lower, one.upper): round(one.net, 9) for one in found.transitions} == {(2, 3): 0.5, (1, 2): -0.5}


def test_every_form_of_a_sample_is_surveyed() -> None:
    species = Species("t", (Spin(1.0, (2.0,), 900.0, 100.0),))
    sweep = Sweep(NU, (250.0, 450.0))
    crystal = Sample("crystal", angles=(0.0, 0.5), point_group="222")
    assert 2 <= transitions(species, sweep, crystal).directions <= 8
    for order in (0.4, 0.999, 1.0):
        found = transitions(species, sweep, Sample("aligned", order=order))
        assert sum(one.share for one in found.transitions) == pytest.approx(1, abs=1e-3)
    # the director along z: complete order leaves that axis alone
    z = found.transitions
    assert all(one.low == pytest.approx(one.high) and one.at_low == pytest.approx((0, 0)) for one in z)
    radical = Species("r", (Spin(0.5, (2.0, 2.0, 2.03)),))
    (one,) = transitions(radical, sweep, Sample("solution")).transitions
    assert one.low == one.high == pytest.approx(field_of(2.01, NU))


def test_weak_nuclei_are_named() -> None:
    weak = Species("r", (Spin(0.5, (2.0, 2.0, 2.03)),), (Nucleus("1H", A=(4.0,), treat="second order"),))
    found = transitions(weak, Sweep(NU, (250.0, 450.0)))
    assert found.split == ("1H",)
    assert len(found.transitions) == 1


def test_equal_populations_leave_nothing_to_list() -> None:
    found = transitions(Species("t", (Spin(1.0, (2.0,), 900.0),), populations=(1, 1, 1)), Sweep(NU, (250.0, 450.0)))
    assert (found.transitions, found.outside) == ((), 0.0)


def test_a_spectrum_holds_the_survey_when_asked() -> None:
    species = Species("t", (Spin(1.0, (2.0,), 1500.0),))
    sweep = Sweep(NU, (300.0, 345.0), 200)
    plain, asked = simulate(species, sweep), simulate(species, sweep, parts=True)
    assert np.array_equal(plain.signal, asked.signal)
    assert not plain.warnings
    assert "transitions" not in plain.report["t"]
    assert [code for code, _ in asked.warnings] == ["outside_sweep"]
    survey = asked.report["t"]["transitions"]
    assert f"{100 * survey.outside:.3g} %" in asked.warnings[0][1]
    wide = simulate(species, Sweep(NU, (100.0, 500.0), 200), parts=True)
    assert not wide.warnings


MODEL = """
[sweep]
frequency = "9.5 GHz"
field = "300, 345 mT"
points = 101
[[species]]
name = "t"
S = "1"
g = 2.0
D = "1500 MHz"
[species.width]
gaussian = "1 mT"
"""


def test_simulate_prints_and_writes_the_parts(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    model = tmp_path / "m.toml"
    model.write_text(MODEL, encoding="utf-8")
    assert main(["simulate", str(model), "--parts"]) == 0
    out, err = capsys.readouterr()
    assert "levels" in out
    assert "field_mT" not in out
    assert "of the intensity lies outside the sweep" in err
    assert main(["simulate", str(model), "--parts", "-o", str(tmp_path / "m.csv")]) == 0
    assert "levels" in capsys.readouterr().out
    assert (tmp_path / "m.csv").read_text(encoding="utf-8").startswith("field_mT,signal")
    assert main(["simulate", str(model), "--parts", "--json"]) == 0
    (report,) = json.loads(capsys.readouterr().out)["report"]
    found = report["t"]["transitions"]
    lowest = min(row["lowest"]["field_mT"] for row in found["transitions"] if row["upper"] - row["lower"] == 1)
    assert lowest == pytest.approx((NU - 1500) / (2 * MU_B_OVER_H), rel=1e-6)
    assert found["share_above"] > 0.1
