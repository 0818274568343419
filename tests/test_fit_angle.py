"""What the uncertainty of an angle's reading does to what is fitted, against closed forms for S = 1/2.

g^2 = g_par^2 cos^2 + g_perp^2 sin^2 of the angle between field and axis; a resonance fixes g at its angle, so that an
angle wrong by t changes what follows from it by (d g/d angle) t / (d g/d parameter).
"""

import json
import math

import numpy as np
import pytest

from spinfit.cli import main
from spinfit.errors import InputError
from spinfit.files.job import read_job
from spinfit.fitting.data import Job, Trace, sharing_angle
from spinfit.fitting.driver import fit
from spinfit.species import Species, Spin, Width
from spinfit.spectrum import simulate
from spinfit.sweep import Sample, Sweep

FREQUENCY = 9400.0
MU_B = 13.996244936  # MHz/mT, CODATA 2018
PERP, PAR = 2.02, 2.15
ONE_DEGREE = math.radians(1)
FIELDS = np.linspace(300.0, 345.0, 500)
SAMPLE = Sample(form="crystal", axis=(0.0, 1.0, 0.0), start=(0.0, 0.0, 1.0))


def g_at(angle: float) -> float:
    return math.hypot(PAR * math.cos(angle), PERP * math.sin(angle))


def trace_at(angle: float, name: str, **more) -> Trace:
    species = Species("c", (Spin(g=(PERP, PAR)),), width=Width(gaussian=1.0))
    sweep = Sweep(FREQUENCY, (FIELDS[0], FIELDS[-1]), FIELDS.size)
    signal = simulate(species, sweep, SAMPLE, fields=FIELDS, angle=angle).signal
    signal = signal + 0.01 * np.ptp(signal) * np.random.default_rng(5).normal(size=signal.size)
    return Trace(name, FIELDS, signal, np.ones(FIELDS.size, dtype=bool), FREQUENCY, angle=angle, **more)


def outcome_of(*traces: Trace):
    start = Species("c", (Spin(g=(PERP, PAR)),), width=Width(gaussian=1.0))
    return fit(Job((start,), SAMPLE, traces, ("c.g_par", "c.width.gaussian"), start="near"))


def test_one_trace_moves_by_the_derivative_of_g():
    angle = math.radians(50)
    outcome = outcome_of(trace_at(angle, "t", angle_uncertainty=ONE_DEGREE))
    expected = (PAR**2 - PERP**2) / PAR * math.tan(angle) * ONE_DEGREE
    value = outcome.parameters["c.g_par"]
    assert value.uncertainty_field == pytest.approx(expected, rel=0.01)
    assert outcome.budget["c.g_par"]["angle"] == pytest.approx(expected, rel=0.01)
    assert value.uncertainty == pytest.approx(math.hypot(value.uncertainty_noise, value.uncertainty_field))
    # a width does not follow a line's place
    assert outcome.budget["c.width.gaussian"]["angle"] < 0.05 * outcome.budget["c.width.gaussian"]["noise"]


def test_readings_are_independent_but_for_parts_of_one_sweep():
    angle = math.radians(50)
    alone = outcome_of(trace_at(angle, "t", angle_uncertainty=ONE_DEGREE)).budget["c.g_par"]["angle"]
    apart = [trace_at(angle, name, angle_uncertainty=ONE_DEGREE, file=f"{name}.csv") for name in ("a", "b")]
    together = [trace_at(angle, name, angle_uncertainty=ONE_DEGREE, file="both.csv") for name in ("a", "b")]
    assert outcome_of(*apart).budget["c.g_par"]["angle"] == pytest.approx(alone / math.sqrt(2), rel=0.02)
    assert outcome_of(*together).budget["c.g_par"]["angle"] == pytest.approx(alone, rel=0.02)


def test_which_traces_share_a_reading():
    traces = [
        trace_at(0.3, "a", file="1.csv", group=("day_1", "at_17")),
        trace_at(0.3, "b", file="2.csv", group=("day_2", "at_17")),
        trace_at(0.3, "c", file="3.csv", group=("day_2",)),
        trace_at(0.5, "d", file="1.csv", group=("day_1",)),
        trace_at(0.3, "e", file="5.csv", group=("day_3",)),
    ]
    # the third shares a group with the second, not with the first of the reading
    assert sharing_angle(traces) == [[0, 1], [2], [3], [4]]


def test_nothing_is_said_of_angles_that_are_exact():
    outcome = outcome_of(trace_at(math.radians(50), "t"))
    assert "angle" not in outcome.budget["c.g_par"]
    assert outcome.parameters["c.g_par"].uncertainty_field == 0


JOB = """
[sample]
form = "{form}"
{plane}
[[species]]
name = "c"
S = "1/2"
g = [2.02, 2.15]
{width}
[[{kind}]]
file = "{file}"
frequency = "9.4 GHz"
angle_uncertainty = "1 deg"
{more}
[fit]
start = "near"
vary = ["c.g_perp", "c.g_par"]
"""
PLANE = "axis = [0, 1, 0]\nfrom = [0, 0, 1]"


def test_positions_at_three_angles(tmp_path, capsys):
    """Each angle is read by itself, so that their parts in a fit of fields by least squares add in quadrature."""
    angles = np.radians([20.0, 40.0, 65.0])
    rows = "".join(f"{math.degrees(a):g},{FREQUENCY / (MU_B * g_at(a)):.6f},0.01\n" for a in angles)
    (tmp_path / "lines.csv").write_text("angle_deg,field_mT,uncertainty_mT\n" + rows)
    job = tmp_path / "job.toml"
    job.write_text(JOB.format(form="crystal", plane=PLANE, width="", kind="lines", file="lines.csv", more=""))
    assert main(["fit", str(job), "--json"]) == 0
    budget = json.loads(capsys.readouterr().out)["budget"]
    # rows: angles; columns: d g/d(g_perp, g_par)
    slopes = np.array([[PERP * math.sin(a) ** 2 / g_at(a), PAR * math.cos(a) ** 2 / g_at(a)] for a in angles])
    turns = [(PERP**2 - PAR**2) * math.sin(a) * math.cos(a) / g_at(a) * ONE_DEGREE for a in angles]
    # fields weigh alike, and d B = -B/g d g = -h nu/(mu_B g^2) d g
    weights = np.diag([g_at(a) ** -2 for a in angles])
    expected = np.linalg.norm(np.linalg.pinv(weights @ slopes) @ weights @ np.diag(turns), axis=1)
    for name, one in zip(("c.g_perp", "c.g_par"), expected, strict=True):
        assert budget[name]["angle"] == pytest.approx(one, rel=0.01)
    assert main(["fit", str(job), "--out", str(tmp_path / "out")]) == 0
    assert "angle" in next(line for line in capsys.readouterr().out.splitlines() if "uncertainty of" in line)
    assert "share-4" in (tmp_path / "out" / "report.html").read_text()


def test_an_angle_means_nothing_for_a_powder(tmp_path):
    (tmp_path / "t.csv").write_text("field_mT,signal\n" + "".join(f"{b},{b % 7}\n" for b in range(300, 345)))
    job = tmp_path / "job.toml"
    width = '[species.width]\ngaussian = "1 mT"'
    job.write_text(JOB.format(form="powder", plane="", width=width, kind="trace", file="t.csv", more=""))
    with pytest.raises(InputError, match="angle_uncertainty: means nothing for a powder"):
        read_job(job)
