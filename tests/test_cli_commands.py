"""The commands beside ``fit``: convert, ion, lines, simulate, inspect, calibrate.

Truths: constants of `scipy.constants`, closed forms of S = 1/2 and of S = 1 along its axis, Hund's rules.
"""

from __future__ import annotations

import csv
import io
import json
import re

import numpy as np
import pytest
from scipy import constants

from spinfit.cli import main

MU_B = constants.physical_constants["Bohr magneton"][0]
PNG = b"\x89PNG\r\n\x1a\n"

MODEL = """
[sweep]
frequency = "9.5 GHz"
field = "280, 380 mT"
points = 501
[[species]]
name = "radical"
S = "1/2"
g = [2.0, 2.05, 2.2]
[species.width]
gaussian = "2 mT"
"""

TRIPLET = """
[sweep]
frequency = "9.5 GHz"
field = "0, 600 mT"
[[species]]
S = "1"
g = 2.0
D = "2 GHz"
[species.width]
gaussian = "1 mT"
"""


def field_mt(g, ghz):
    return constants.h * ghz * 1e9 / (g * MU_B) * 1e3


@pytest.fixture
def run(capsys):
    def call(*argv, code=0):
        assert main(list(argv)) == code
        out, err = capsys.readouterr()
        if code == 2:
            assert out == ""
            assert err.count("\n") == 1
            return err
        assert err == ""
        return out

    return call


@pytest.fixture
def here(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    (tmp_path / "m.toml").write_text(MODEL)
    (tmp_path / "t.toml").write_text(TRIPLET)
    return tmp_path


# convert


@pytest.mark.parametrize(
    "given",
    [
        ("--g", "2.0036", "--frequency", "9.43 GHz"),
        ("--g", "2.0036", "--field", "{B} mT"),
        ("--field", "{B} mT", "--frequency", "9430 MHz"),
    ],
)
def test_any_two_give_the_third(given, run):
    field = field_mt(2.0036, 9.43)
    words = [word.format(B=repr(field)) for word in given]
    found = json.loads(run("convert", *words, "--json"))
    assert found == pytest.approx({"g": 2.0036, "field_mT": field, "frequency_MHz": 9430.0}, rel=1e-9)
    assert run("convert", *words).startswith("g = 2.0036, field = ")


def test_energies_in_every_unit(run):
    values = json.loads(run("convert", "0.3 cm^-1", "--json"))["values"]
    joule = 0.3 * 100 * constants.h * constants.c
    expected = {
        "MHz": joule / constants.h / 1e6,
        "GHz": joule / constants.h / 1e9,
        "cm^-1": 0.3,
        "K": joule / constants.k,
        "meV": joule / constants.e * 1e3,
        "eV": joule / constants.e,
    }
    assert values == pytest.approx(expected, rel=1e-9)
    assert "cm^-1" in run("convert", "0.3 cm^-1")


def test_energy_as_field_and_field_as_energy(run):
    values = json.loads(run("convert", "-540 MHz", "--g", "2.26", "--json"))["values"]
    assert values["mT"] == pytest.approx(-constants.h * 540e6 / (2.26 * MU_B) * 1e3, rel=1e-9)
    values = json.loads(run("convert", "340 mT", "--g", "2", "--json"))["values"]
    assert values["GHz"] == pytest.approx(2 * MU_B * 0.34 / constants.h / 1e9, rel=1e-9)
    assert values["G"] == pytest.approx(3400)


@pytest.mark.parametrize(
    ("argv", "says"),
    [
        ((), "exactly two of --g, --field and --frequency"),
        (("--g", "2"), "exactly two"),
        (("--g", "2", "--field", "3 mT", "--frequency", "9 GHz"), "exactly two"),
        (("--g", "two", "--field", "3 mT"), '--g: "two" is not a number'),
        (("--g", "nan", "--field", "3 mT"), "--g"),
        (("--g", "0", "--field", "3 mT"), "--g: 0; write a positive value"),
        (("--g", "2", "--field", "3"), '--field: "3" has no unit'),
        (("--g", "2", "--field", "3 GHz"), "--field"),
        (("--g", "2", "--frequency", "-9 GHz"), "--frequency"),
        (("0.3",), "has no unit"),
        (("0.3 V",), "voltage"),
        (("0.3 cmm",), 'did you mean "cm^-1"?'),
        (("0.3 cm^-1", "--field", "3 mT"), "--field: stands beside a quantity"),
    ],
)
def test_convert_refuses(argv, says, run):
    assert says in run("convert", *argv, code=2)


# ion


def test_ion_records(run):
    found = json.loads(run("ion", "Er3+", "Eu(III)", "Cu+2", "--g-spin", "2", "--json"))
    assert [list(record) for record in found] == [["ion", "configuration", "term", "S", "L", "J", "g_J", "moment"]] * 3
    # Kittel's table (free rare-earth and iron-group ions): 4I15/2 6/5 9.59; 7F0; 2D5/2 3.55.
    assert [record["term"] for record in found] == ["4I15/2", "7F0", "2D5/2"]
    assert found[0]["g_J"] == pytest.approx(6 / 5)
    assert found[0]["moment"] == pytest.approx(9.59, abs=0.02)
    assert found[1]["g_J"] is None
    assert found[2]["moment"] == pytest.approx(3.55, abs=0.005)


def test_ion_table(run):
    out = run("ion", "Er3+", "Eu3+")
    lines = out.splitlines()
    assert lines[0].split()[:3] == ["ion", "configuration", "level"]
    assert re.search(r"Er3\+ +4f11 +4I15/2 +3/2 +6 +15/2 +1\.200", lines[2])
    assert "J = 0" in out


def test_ion_refuses(run):
    assert "Xx" in run("ion", "Xx3+", code=2)
    assert "--g-spin" in run("ion", "Er3+", "--g-spin", "two", code=2)


# lines


def test_lines_of_a_triplet_along_its_axis(here, run):
    """E = D m^2 + g muB B m: at theta = 0 the allowed fields are (h nu -+ D)/(g muB)."""
    rows = list(csv.DictReader(io.StringIO(run("lines", "t.toml", "--direction", "0, 0 deg"))))
    assert list(rows[0]) == ["theta_deg", "phi_deg", "field_mT", "weight", "lower", "upper", "slope_MHz_per_mT"]
    allowed = [row for row in rows if float(row["weight"]) > 1e-6]
    gamma = 2.0 * MU_B / constants.h * 1e-9  # MHz/mT
    fields = sorted(float(row["field_mT"]) for row in allowed)
    np.testing.assert_allclose(fields, [7500 / gamma, 11500 / gamma], atol=1e-4)
    for row in allowed:
        assert float(row["slope_MHz_per_mT"]) == pytest.approx(gamma, rel=1e-6)
        assert 1 <= int(row["lower"]) < int(row["upper"]) <= 3


def test_lines_of_a_powder_are_those_along_x_y_z(here, run):
    rows = json.loads(run("lines", "m.toml", "--json"))
    found = {(round(row["theta_deg"]), round(row["phi_deg"])): row["field_mT"] for row in rows}
    expected = {(90, 0): field_mt(2.0, 9.5), (90, 90): field_mt(2.05, 9.5), (0, 0): field_mt(2.2, 9.5)}
    assert found == pytest.approx(expected, abs=1e-4)


def test_lines_of_a_crystal_are_at_its_angles(here, run):
    crystal = '\n[sample]\nform = "crystal"\naxis = [0, 1, 0]\nfrom = [0, 0, 1]\nangles = "0, 90 deg"\n'
    (here / "c.toml").write_text(MODEL + crystal)
    rows = list(csv.DictReader(io.StringIO(run("lines", "c.toml"))))
    fields = [float(row["field_mT"]) for row in rows]
    np.testing.assert_allclose(fields, [field_mt(2.2, 9.5), field_mt(2.0, 9.5)], atol=1e-4)


def test_lines_with_several_species_name_them_and_go_to_a_file(here, run):
    (here / "two.toml").write_text(
        MODEL + '[[species]]\nname = "other"\nS = "1/2"\ng = 2.1\n[species.width]\ngaussian = "1 mT"\n'
    )
    assert run("lines", "two.toml", "--direction", "0, 0 deg", "-o", "l.csv") == ""
    rows = list(csv.DictReader(io.StringIO((here / "l.csv").read_text())))
    assert [row["species"] for row in rows] == ["radical", "other"]


def test_lines_of_many_nuclei_are_those_of_the_strong_ones(here, capsys):
    strong = '[[species.nucleus]]\nisotope = "63Cu"\nA = "-60, -60, -540 MHz"\n'
    weak = '[[species.nucleus]]\nisotope = "1H"\nA = "8 MHz"\ncount = 19\n'
    found, said = [], []
    for name, text in (("a.toml", MODEL + strong), ("b.toml", MODEL + strong + weak)):
        (here / name).write_text(text)
        assert main(["lines", name, "--direction", "0, 0 deg", "--json"]) == 0
        out, err = capsys.readouterr()
        found.append(json.loads(out))
        said.append(err)
    assert found[0] == found[1]
    assert said[0] == ""
    assert "19 1H split every line further" in said[1]


def test_lines_refuses(here, run):
    assert "--direction" in run("lines", "m.toml", "--direction", "30 deg", code=2)
    assert "nowhere.toml" in run("lines", "nowhere.toml", code=2)


# simulate


def test_simulate_to_standard_output_and_to_files(here, run):
    text = run("simulate", "m.toml")
    rows = list(csv.reader(io.StringIO(text)))
    assert rows[0] == ["field_mT", "signal"]
    data = np.array(rows[1:], dtype=float)
    assert data.shape == (501, 2)
    np.testing.assert_allclose(data[:, 0], np.linspace(280, 380, 501))
    # The turning points of a rhombic powder stand at the principal g values.
    assert abs(data[np.argmin(data[:, 1]), 0] - field_mt(2.0, 9.5)) < 2
    for name in ("s.csv", "s.jdx", "s.h5"):
        assert run("simulate", "m.toml", "-o", name, "--plot", "s.png") == ""
    assert (here / "s.csv").read_text() == text
    assert (here / "s.png").read_bytes().startswith(PNG)
    for name in ("s.jdx", "s.h5"):
        seen = json.loads(run("inspect", name, "--json"))
        assert seen["frequency_MHz"] == pytest.approx(9500)
        assert seen["points"] == 501


def test_simulate_with_noise(here, run):
    """The residual against the plain spectrum is white, of the deviation asked for, and follows the seed."""
    plain, noisy, again, other = (
        np.array(json.loads(run("simulate", "m.toml", "--json", *more))["signal"])
        for more in ([], ["--noise", "0.02"], ["--noise", "0.02", "--seed", "1"], ["--noise", "0.02", "--seed", "2"])
    )
    np.testing.assert_array_equal(noisy, again)
    assert not np.array_equal(noisy, other)
    noise = (noisy - plain) / np.abs(plain).max() / 0.02
    # Of 501 normal deviates: mean 0 +- 1/sqrt(501), deviation 1 +- 1/sqrt(2 501), neighbours as the mean.
    assert abs(noise.mean()) < 4 / 501**0.5
    assert abs(noise.std() - 1) < 4 / 1002**0.5
    assert abs(np.mean(noise[1:] * noise[:-1])) < 4 / 501**0.5


def test_simulate_json(here, run):
    found = json.loads(run("simulate", "m.toml", "--json"))
    assert len(found["field_mT"]) == len(found["signal"]) == 501
    assert found["frequency_MHz"] == 9500


def test_simulate_species_columns_add_up(here, run):
    (here / "two.toml").write_text(
        MODEL + '[[species]]\nname = "other"\nS = "1/2"\ng = 2.1\namount = 0.5\n[species.width]\ngaussian = "1 mT"\n'
    )
    rows = list(csv.reader(io.StringIO(run("simulate", "two.toml", "--species"))))
    assert rows[0] == ["field_mT", "signal", "radical", "other"]
    data = np.array(rows[1:], dtype=float)
    np.testing.assert_allclose(data[:, 2] + data[:, 3], data[:, 1], atol=1e-9 * np.abs(data[:, 1]).max())


def test_simulate_a_crystal_at_several_angles(here, run):
    crystal = '\n[sample]\nform = "crystal"\naxis = [0, 1, 0]\nfrom = [0, 0, 1]\nangles = "0, 30, 90 deg"\n'
    (here / "c.toml").write_text(MODEL + crystal)
    rows = list(csv.DictReader(io.StringIO(run("simulate", "c.toml", "--plot", "c.svg"))))
    assert list(dict.fromkeys(row["angle_deg"] for row in rows)) == ["0.0", "30.0", "90.0"]
    assert (here / "c.svg").read_text().lstrip().startswith("<?xml")
    one = list(csv.DictReader(io.StringIO(run("simulate", "c.toml", "--angle", "30 deg"))))
    assert [row["signal"] for row in one] == [row["signal"] for row in rows if row["angle_deg"] == "30.0"]
    assert "3 angles" in run("simulate", "c.toml", "-o", "c.jdx", code=2)
    assert not (here / "c.jdx").exists()


@pytest.mark.parametrize(
    ("argv", "says"),
    [
        (("-o", "s.txt"), 's.txt: -o: ".txt" is not a format to write; end the name in .csv, .jdx, .h5'),
        (("-o", "s"), "the name has no suffix"),
        (("-o", "nowhere/s.csv"), "there is no folder"),
        (("--plot", "s.gif"), 's.gif: --plot: ".gif" is not a format of pictures; end the name in .png, .svg, .pdf'),
        (("-o", "s.h5", "--species"), "--species"),
        (("--angle", "30 deg"), "a powder has no angle"),
        (("--noise", "-1"), "--noise: -1; write a positive number"),
        (("--seed", "2"), "--seed: there is no noise to choose; add --noise"),
        (("--noise", "0.1", "--seed", "-2"), "--seed: -2; write 0 or more"),
    ],
)
def test_simulate_refuses(argv, says, here, run):
    assert says in run("simulate", "m.toml", *argv, code=2)
    assert sorted(path.name for path in here.iterdir()) == ["m.toml", "t.toml"]


# inspect and calibrate


def write_line(path, *, centre=335.0, width=0.4, shape="gaussian", noise=5.0, header="# frequency 9.4 GHz\n", seed=5):
    field = np.linspace(330, 340, 1001)
    if shape == "gaussian":
        x = (field - centre) / (width / 2)
        line = -x * np.exp(0.5 - 0.5 * x**2)
    else:
        x = (field - centre) / (np.sqrt(3) / 2 * width)
        line = -x / (1 + x**2) ** 2 * 16 / 3**1.5
    signal = 1000 * line + 40 + np.random.default_rng(seed).normal(0, noise, field.size)
    rows = "".join(f"{a:.4f},{b:.4f}\n" for a, b in zip(field, signal, strict=True))
    path.write_text(f"{header}field/mT,signal\n{rows}")


def test_inspect_sees_what_was_put_in(here, run):
    write_line(here / "a.csv", header="# frequency 9.4 GHz\n# temperature 77 K\n# modulation 0.1 mT\n")
    seen = json.loads(run("inspect", "a.csv", "--json"))
    assert seen["points"] == 1001
    assert seen["field_mT"] == [330.0, 340.0]
    assert seen["spacing_mT"] == pytest.approx([0.01] * 3, abs=1e-6)
    assert seen["frequency_MHz"] == pytest.approx(9400)
    assert seen["temperature_K"] == 77
    assert seen["modulation_mT"] == pytest.approx(0.1)
    assert seen["noise"] == pytest.approx(5, rel=0.1)
    assert seen["signal_to_noise"] == pytest.approx(200, rel=0.15)
    assert seen["narrowest_width_mT"] == pytest.approx(0.4, rel=0.1)
    assert seen["modulation_too_large"] is False
    crossing = next(point for point in seen["turning_points"] if point["kind"] == "crossing")
    assert crossing["g"] == pytest.approx(constants.h * 9.4e9 / (MU_B * 0.335), rel=1e-5)


def test_inspect_says_when_the_modulation_was_too_large(here, run):
    write_line(here / "a.csv", header="# frequency 9.4 GHz\n# modulation 0.2 mT\n")
    assert "0.2 mT is too large: it broadens the lines" in run("inspect", "a.csv")
    assert json.loads(run("inspect", "a.csv", "--modulation", "0.05 mT", "--json"))["modulation_too_large"] is False
    write_line(here / "b.csv")
    assert "the file does not give the modulation" in run("inspect", "b.csv")


def test_inspect_without_a_frequency_says_how_to_see_g(here, run):
    write_line(here / "a.csv", header="")
    out = run("inspect", "a.csv", "--plot", "a.png")
    assert "add --frequency to see g" in out
    assert (here / "a.png").read_bytes().startswith(PNG)
    seen = json.loads(run("inspect", "a.csv", "--frequency", "9.4 GHz", "--json"))
    assert seen["turning_points"][0]["g"] is not None


def test_inspect_noise_alone(here, run):
    write_line(here / "a.csv", width=1e-6)
    assert "nothing stands out of the noise" in run("inspect", "a.csv")


def test_inspect_reads_home_built_columns(here, run):
    volts = np.linspace(0, 1.5, 200)
    rows = "".join(f"{np.sin(20 * v):.5f};{v:.5f}\n" for v in volts)
    (here / "v.txt").write_text(rows)
    seen = json.loads(
        run("inspect", "v.txt", "--columns", "2,1", "--field-slope", "216 mT/V", "--field-zero", "3 mT", "--json")
    )
    assert seen["field_mT"] == pytest.approx([3.0, 3 + 216 * 1.5])
    assert "--columns" in run("inspect", "v.txt", "--columns", "2", code=2)
    assert "--field-zero" in run("inspect", "v.txt", "--field-zero", "3 mT", code=2)


def test_inspect_takes_one_way_of_a_sweep_that_comes_back(here, run):
    """The two ways stand apart by the detector's lag; laid into each other they would be a comb of extrema."""
    field = np.concatenate([np.linspace(330, 340, 500), np.linspace(339.99, 330.01, 500)])
    centre = np.where(np.arange(1000) < 500, 335.1, 334.9)
    x = (field - centre) / 0.2
    signal = -1000 * x * np.exp(-0.5 * x**2) + np.random.default_rng(2).normal(0, 5, 1000)
    rows = "".join(f"{a:.5f},{b:.4f}\n" for a, b in zip(field, signal, strict=True))
    (here / "loop.csv").write_text("field/mT,signal\n" + rows)
    for argv, expected in (((), 335.1), (("--direction", "down"), 334.9)):
        seen = json.loads(run("inspect", "loop.csv", *argv, "--json"))
        assert [point["kind"] for point in seen["turning_points"]] == ["maximum", "crossing", "minimum"]
        assert seen["turning_points"][1]["field_mT"] == pytest.approx(expected, abs=0.01)


def test_inspect_advises_its_own_options(here, run):
    rows = "".join(f"{k},{k % 5},{300 + k}\n" for k in range(20))
    (here / "three.csv").write_text(rows)
    assert "add --columns 1,2" in run("inspect", "three.csv", code=2)
    assert "add --field-unit mT" in run("inspect", "three.csv", "--columns", "3,2", code=2)
    (here / "volts.csv").write_text("B/V,signal\n" + rows)
    assert json.loads(run("inspect", "three.csv", "--columns", "3,2", "--field-unit", "G", "--json"))["field_mT"] == [
        30,
        31.9,
    ]


def test_calibrate_gives_lines_that_a_job_takes(here, run):
    known = field_mt(2.0036, 9.4)
    write_line(here / "s.csv", centre=known - 0.21, width=0.15, shape="lorentzian")
    found = json.loads(run("calibrate", "s.csv", "--standard", "DPPH", "--json"))
    assert found["field_offset_mT"] == pytest.approx(0.21, abs=0.002)
    assert found["field_uncertainty_mT"] == pytest.approx(known * 0.0002 / 2.0036, rel=0.01)
    assert found["field_scale_uncertainty"] is None
    out = run("calibrate", "s.csv", "--standard", "DPPH")
    pasted = [line.strip() for line in out.splitlines() if line.startswith("    ")]
    assert pasted == found["job_lines"]
    import tomllib

    read = tomllib.loads("\n".join(pasted))
    assert read["field_offset"] == "0.210 mT"
    assert read["field_uncertainty"] == "0.033 mT"


def test_calibrate_with_two_standards_gives_the_scale(here, run):
    for name, g, ghz in (("a.csv", 2.0036, 9.4), ("b.csv", 2.0036 * 335 / 338.5, 9.4)):
        write_line(here / name, centre=(field_mt(g, ghz) + 0.3) / 1.0004, width=0.2, shape="lorentzian")
    # Both lines lie in one narrow field range: no scale can be had from them.
    found = json.loads(run("calibrate", "a.csv", "b.csv", "--g", "2.0036", "--g", repr(2.0036 * 335 / 338.5), "--json"))
    assert found["field_scale"] == 1
    field = np.linspace(1200, 1230, 3001)
    x = (field - (field_mt(2.0036, 34.0) + 0.3) / 1.0004) / (np.sqrt(3) / 2 * 0.2)
    rows = "".join(f"{a:.4f},{b:.4f}\n" for a, b in zip(field, -x / (1 + x**2) ** 2 * 1000, strict=True))
    (here / "q.csv").write_text("# frequency 34 GHz\nfield/mT,signal\n" + rows)
    found = json.loads(run("calibrate", "a.csv", "q.csv", "--g", "2.0036", "--g-uncertainty", "0.00001", "--json"))
    assert found["field_scale"] == pytest.approx(1.0004, abs=2e-6)
    assert found["field_offset_mT"] == pytest.approx(-0.3, abs=2e-3)
    assert any(line.startswith("field_scale = 1.0004") for line in found["job_lines"])


@pytest.mark.parametrize(
    ("argv", "says"),
    [
        ((), "no standard is named"),
        (("--standard", "DPPHH"), 'did you mean "DPPH"?'),
        (("--g", "-2"), "--g: -2; write a positive number"),
        (("--g", "2", "--g-uncertainty", "-1"), "--g-uncertainty"),
        (("--standard", "dpph", "--g", "2"), "--g"),
        (("--standard", "dpph", "--standard", "dpph"), "given 2 times for 1 traces"),
        (("--standard", "dpph", "--frequency", "9.4"), "--frequency"),
        (("--standard", "dpph"), "frequency"),
    ],
)
def test_calibrate_refuses(argv, says, here, run):
    write_line(here / "s.csv", header="")
    assert says in run("calibrate", "s.csv", *argv, code=2)


def test_calibrate_lists_its_standards(run):
    out = run("calibrate", "--list")
    assert re.search(r"DPPH +2\.0036\(2\) .*common practice", out)
    assert {"name", "g", "uncertainty", "source"} <= set(json.loads(run("calibrate", "--list", "--json"))[0])
    assert "no trace is named" in run("calibrate", "--standard", "dpph", code=2)


def test_calibrate_names_the_file_without_a_line(here, run):
    write_line(here / "s.csv", width=1e-6)
    assert "s.csv: no line stands out of the noise" in run("calibrate", "s.csv", "--standard", "dpph", code=2)
