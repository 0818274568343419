"""Level diagrams against the closed forms of S = 1/2 and S = 1, and the command that shows them."""

from __future__ import annotations

import csv
import json
from pathlib import Path

import numpy as np
import pytest

from spinfit.cli import main
from spinfit.diagram import diagram
from spinfit.errors import InputError
from spinfit.hamiltonian import systems
from spinfit.report.diagram_plots import diagram_figure
from spinfit.species import Nucleus, Species, Spin
from spinfit.units import MU_B_OVER_H, field_of

NU = 9500.0
Z = (0.0, 0.0, 1.0)


def test_a_doublet_opens_as_g_mu_b_b() -> None:
    found = diagram(systems(Species("r", (Spin(0.5, (2.0, 2.1, 2.2)),)))[0], (0, 3, 0), NU, (0.0, 500.0), points=11)
    assert found.direction == pytest.approx([0, 1, 0])
    half = 0.5 * 2.1 * MU_B_OVER_H * np.linspace(0, 500, 11)
    assert found.energies == pytest.approx(np.stack([-half, half], axis=1), abs=1e-9)
    assert found.resonances.field == pytest.approx([field_of(2.1, NU)])
    assert found.ends[:, 0] == pytest.approx([-NU / 2, NU / 2])


def test_a_triplet_along_z() -> None:
    # E = D/3 +- sqrt(E^2 + (g mu_B B)^2) and -2D/3 (two-level problem of T_x and T_y)
    d, e = 1500.0, 200.0
    found = diagram(systems(Species("t", (Spin(1.0, (2.0,), d, e),)))[0], Z, NU, (0.0, 600.0), points=25)
    root = np.hypot(e, 2.0 * MU_B_OVER_H * found.fields)
    exact = np.sort(np.stack([d / 3 - root, d / 3 + root, np.full(25, -2 * d / 3)], axis=1), axis=1)
    assert found.energies == pytest.approx(exact, abs=1e-6)
    apart = found.ends[1] - found.ends[0]
    assert apart == pytest.approx(np.full(len(apart), NU), abs=1e-3)
    # h nu = sqrt(E^2 + b^2) +- D from m = 0, and 2 sqrt(E^2 + b^2) between the outer levels
    strong = np.abs(found.resonances.weight) > 1e-6
    fields = np.sqrt((NU + np.array([-d, d])) ** 2 - e**2) / (2.0 * MU_B_OVER_H)
    assert found.resonances.field[strong] == pytest.approx(fields, rel=1e-6)


def test_levels_of_several_spins_keep_their_trace() -> None:
    copper = Species("cu", (Spin(0.5, (2.05, 2.26)),), (Nucleus("63Cu", A=(-40.0, -500.0)),))
    found = diagram(systems(copper)[0], (1, 1, 1), NU, (0.0, 400.0))
    assert found.energies.shape == (401, 8)
    assert found.energies.sum(axis=1) == pytest.approx(np.zeros(401), abs=1e-6)
    assert (np.diff(found.energies, axis=1) >= 0).all()


@pytest.mark.parametrize(
    ("direction", "fields", "points", "says"),
    [
        ((0, 0, 0), (0, 100), 5, "no direction"),
        ((0, 0, np.nan), (0, 100), 5, "no direction"),
        (Z, (100, 100), 5, "100 to 100 mT"),
        (Z, (-1, 100), 5, "-1 to 100 mT"),
        (Z, (0, 100), 1, "1 points"),
    ],
)
def test_impossible_diagrams_are_refused(direction: tuple, fields: tuple, points: int, says: str) -> None:
    with pytest.raises(InputError, match=says):
        diagram(systems(Species())[0], direction, NU, fields, points=points)


def test_the_picture_shows_levels_and_every_strong_transition() -> None:
    system = systems(Species("t", (Spin(1.0, (2.0,), 1500.0, 200.0),)))[0]
    found = diagram(system, (1, 0, 1), NU, (0.0, 600.0), populations=(0.7, 0.2, 0.1))
    figure = diagram_figure(found, frequency=NU)
    upper, lower = figure.axes[:2]
    weight = found.resonances.weight
    drawn = (np.abs(weight) > 1e-3 * np.abs(weight).max()).sum()
    assert len(upper.lines) == 3 + drawn
    assert upper.get_ylabel() == "E/h / GHz"
    assert lower.get_xlabel() == "magnetic field / mT"
    assert lower.get_ylim()[0] < -1  # there is emission
    assert {text.get_text() for text in upper.texts} == {"1", "2", "3"}
    close = diagram(
        systems(Species("c", (Spin(0.5),), (Nucleus("63Cu", A=(-30.0,)),)))[0], Z, NU, (0.0, 400.0), points=5
    )
    assert {text.get_text() for text in diagram_figure(close, frequency=NU).axes[0].texts} == {"1–4", "5–8"}
    empty = diagram(system, Z, NU, (0.0, 10.0), points=5)
    assert len(diagram_figure(empty, frequency=NU).axes[0].lines) == 3


# The command


MODEL = """
[sweep]
frequency = "9.5 GHz"
field = "100, 600 mT"
points = 101
[[species]]
name = "t"
S = "1"
g = 2.0
D = "1500 MHz"
E = "200 MHz"
[species.width]
gaussian = "1 mT"
[[species]]
name = "cu"
S = "1/2"
g = [2.05, 2.26]
[species.width]
gaussian = "1 mT"
[[species.nucleus]]
element = "Cu"
A = "-40, -540 MHz"
[[species.nucleus]]
isotope = "1H"
A = "5 MHz"
treat = "second order"
"""


@pytest.fixture
def here(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.chdir(tmp_path)
    (tmp_path / "m.toml").write_text(MODEL, encoding="utf-8")
    return tmp_path


def test_the_command_prints_levels_and_transitions(here: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["diagram", "m.toml"]) == 0
    out, err = capsys.readouterr()
    assert err == ""
    assert "level 3" in out
    assert "transitions at 9.5 GHz" in out
    assert f"{np.sqrt(8000.0**2 - 200.0**2) / (2 * MU_B_OVER_H):.3f}" in out


def test_the_command_writes_json_csv_and_a_picture(here: Path, capsys: pytest.CaptureFixture[str]) -> None:
    argv = ["diagram", "m.toml", "--direction", "90, 0 deg", "--field", "0, 500 mT", "--points", "6"]
    assert main([*argv, "-o", "levels.csv", "--plot", "levels.png", "--json"]) == 0
    found = json.loads(capsys.readouterr().out)
    assert (found["species"], found["theta_deg"], found["phi_deg"]) == ("t", 90.0, 0.0)
    assert found["field_mT"] == [0, 100, 200, 300, 400, 500]
    # along x T_x stays at D/3 - E while the other two mix: E = -D/6 + E/2 +- sqrt(((D + E)/2)^2 + b^2)
    b = 2.0 * MU_B_OVER_H * np.array(found["field_mT"])
    root, middle = np.hypot(850.0, b), -250.0 + 100.0
    exact = np.sort([middle - root, middle + root, np.full(6, 300.0)], axis=0)
    assert np.array(found["energy_MHz"]) == pytest.approx(exact, abs=1e-6)
    with (here / "levels.csv").open(encoding="utf-8") as file:
        rows = list(csv.DictReader(file))
    assert list(rows[0]) == ["field_mT", "level_1_MHz", "level_2_MHz", "level_3_MHz"]
    assert [float(row["level_1_MHz"]) for row in rows] == pytest.approx(found["energy_MHz"][0])
    assert (here / "levels.png").read_bytes().startswith(b"\x89PNG\r\n\x1a\n")


def test_one_system_of_a_mixture_is_shown_and_said(here: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["diagram", "m.toml", "--species", "cu", "--json"]) == 0
    out, err = capsys.readouterr()
    assert json.loads(out)["system"] == "63Cu"
    assert len(json.loads(out)["energy_MHz"]) == 8
    assert "the most abundant of 2 systems" in err
    assert "left out (1H)" in err


def test_a_crystal_gives_direction_and_microwave_axis(here: Path, capsys: pytest.CaptureFixture[str]) -> None:
    sample = '[sample]\nform = "crystal"\naxis = [0, 1, 0]\nfrom = [0, 0, 1]\nangles = "90, 100 deg"\n'
    (here / "c.toml").write_text(sample + MODEL, encoding="utf-8")
    assert main(["diagram", "c.toml", "--json"]) == 0
    found = json.loads(capsys.readouterr().out)
    assert found["theta_deg"] == pytest.approx(90)
    assert main(["lines", "c.toml", "--json"]) == 0
    lines = [row for row in json.loads(capsys.readouterr().out) if row["species"] == "t"]
    first = [row for row in lines if row["theta_deg"] == pytest.approx(90)]
    inside = [row for row in found["transitions"] if 100 <= row["field_mT"]]
    assert [row["weight"] for row in inside] == pytest.approx([row["weight"] for row in first], abs=1e-9)


@pytest.mark.parametrize(
    ("argv", "says"),
    [
        (["--direction", "30 deg"], "--direction"),
        (["--field", "300, 200 mT"], "--field: 300 to 200 mT"),
        (["--field", "3"], "--field"),
        (["--points", "1"], "--points: 1 points; write 2 to 100000"),
        (["--points", "many"], '--points: "many" is not a whole number'),
        (["--species", "cv"], '--species: there is no species "cv"; did you mean "cu"?'),
        (["--plot", "m.gif"], '".gif" is not a format of pictures'),
    ],
)
def test_bad_options_are_refused(argv: list[str], says: str, here: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["diagram", "m.toml", *argv]) == 2
    out, err = capsys.readouterr()
    assert out == ""
    assert err.count("\n") == 1
    assert says in err
