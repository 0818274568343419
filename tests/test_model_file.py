"""Model files: every key is understood, every mistake is said with its place."""
# ruff: noqa: E501  (the tables of mistakes read best with one mistake a line)

from __future__ import annotations

import math
import tomllib

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import constants
from toml_files import FUZZ, changed, damaged, keys_of, refusal, write

from spinfit.errors import InputError
from spinfit.files.job import Model, model_from, read_model
from spinfit.files.toml_table import describe, parse_toml
from spinfit.fitting.parameters import parameters_of

CM = constants.c * 1e-4  # MHz per cm^-1

MODEL = """
[sweep]
frequency = "9.5 GHz"
field = "260, 360 mT"
points = 2048
temperature = "77 K"
microwave = "parallel"
modulation = "1 G"
detect = "absorption"
phase = "10 deg"

[sample]
form = "powder"

[accuracy]
tolerance = 1e-2

[[species]]
name = "cu"
ion = "Cu2+"
S = "1/2"
g = [2.041, 2.068, 2.262]
g_tilt = "0, 30, 0 deg"
D = "0 MHz"
E = "0 MHz"
amount = 2.0
[[species.nucleus]]
isotope = "63Cu"
A = "-35, -60, -540 MHz"
A_tilt = "0, 25, 0 deg"
P = "-6, -4, 10 MHz"
P_tilt = "0, 0.5, 0 rad"
count = 1
couples_to = 1
treat = "exact"
[[species.nucleus]]
element = "N"
name = "left"
A = "30, 40 MHz"
count = 2
treat = "second order"
[species.width]
gaussian = "0.8 mT"
lorentzian = "2 G"
hidden_hyperfine = "20, 20, 40 MHz"
[species.spread]
g = [0.005, 0.005, 0.02]
A = "5, 5, 15 MHz"
correlation = {g_A = 0.5}

[[species]]
name = "fe"
S = 2.5
g = 2
D = "0.3 cm^-1"
rhombicity = 0.1
D_tilt = "1, 2, 3 deg"
populations = [1, 1, 2, 2, 3, 3]
[species.stevens]
B4_0 = "5.1 MHz"
B4_m3 = "0 MHz"
[species.width]
gaussian = "0.8 mT"
[species.spread]
g = [0.01, 0.02]
D = "300 MHz"
E = "100 MHz"
correlation = {D_E = -0.5}

[[species]]
name = "pair"
[[species.spin]]
S = "1/2"
g = [2.0, 2.2]
[[species.spin]]
S = "1"
g = 2.1
D = "1 GHz"
E = "0.1 GHz"
[[species.exchange]]
between = [2, 1]
J = "60 cm^-1"
dipolar = "900, 900, -1800 MHz"
tilt = "0, 35, 0 deg"
antisymmetric = "0, 0, 5 MHz"
[species.width]
lorentzian = "0.8 mT"
"""


def read(tmp_path, text: str) -> Model:
    return read_model(write(tmp_path, text))


# Everything is understood ----------------------------------------------------------------------------


def test_every_key_of_a_model(tmp_path):
    model = read(tmp_path, MODEL)
    sweep = model.sweep
    assert (sweep.frequency, sweep.field, sweep.points) == (9500.0, (260.0, 360.0), 2048)
    assert (sweep.temperature, sweep.microwave, sweep.detect) == (77.0, "parallel", "absorption")
    assert sweep.modulation == pytest.approx(0.1)
    assert sweep.phase == pytest.approx(math.pi / 18)
    assert model.tolerance == 1e-2
    cu, fe, pair = model.species
    assert (cu.name, cu.ion, cu.amount) == ("cu", "Cu2+", 2.0)
    assert cu.spins[0].g == (2.041, 2.068, 2.262)
    assert cu.spins[0].g_tilt[1] == pytest.approx(math.pi / 6)
    copper, nitrogen = cu.nuclei
    assert (copper.isotope, copper.A, copper.P, copper.treat) == ("63Cu", (-35, -60, -540), (-6, -4, 10), "exact")
    assert copper.P_tilt == (0.0, 0.5, 0.0)
    assert (nitrogen.element, nitrogen.name, nitrogen.count, nitrogen.A) == ("N", "left", 2, (30.0, 40.0))
    assert cu.width.lorentzian == pytest.approx(0.2)
    assert cu.width.hidden_hyperfine == (20.0, 20.0, 40.0)
    assert cu.spread.A == (5.0, 5.0, 15.0)
    assert cu.spread.correlation_g_A == 0.5
    assert fe.spins[0].S == 2.5
    assert fe.spins[0].D == pytest.approx(0.3 * CM)
    assert fe.spins[0].zfs_E == pytest.approx(0.03 * CM)
    assert fe.spins[0].stevens == (((4, 0), 5.1), ((4, -3), 0.0))
    assert fe.populations == pytest.approx([v / 12 for v in (1, 1, 2, 2, 3, 3)])
    assert (fe.spread.D, fe.spread.E, fe.spread.correlation_D_E) == (300.0, 100.0, -0.5)
    assert [spin.S for spin in pair.spins] == [0.5, 1.0]
    assert pair.exchange[0].between == (2, 1)
    assert pair.exchange[0].J == pytest.approx(60 * CM)
    assert pair.exchange[0].antisymmetric == (0.0, 0.0, 5.0)
    assert (model.name, model.text) == ("model", MODEL)


def test_units_are_kept_by_name(tmp_path):
    units = read(tmp_path, MODEL).units
    expected = {
        "cu.g_x": "",
        "cu.g_tilt_beta": "deg",
        "cu.63Cu.A_z": "MHz",
        "cu.63Cu.P_tilt_gamma": "rad",
        "cu.left.A_perp": "MHz",
        "cu.width.lorentzian": "G",
        "cu.amount": "",
        "cu.spread.correlation_g_A": "",
        "fe.D": "cm^-1",
        "fe.rhombicity": "",
        "fe.B4_m3": "MHz",
        "fe.spread.g_par": "",
        "pair.1.g_perp": "",
        "pair.2.D": "GHz",
        "pair.J_21": "cm^-1",
        "pair.dipolar_21_z": "MHz",
        "pair.dipolar_21_tilt_beta": "deg",
    }
    assert {name: units[name] for name in expected} == expected
    # What the file does not give is not there.
    assert "cu.63Cu.P_x" in units
    assert "fe.amount" not in units
    assert "fe.width.lorentzian" not in units


def test_the_same_model_in_other_units(tmp_path):
    other = MODEL
    for old, new in [
        ('"9.5 GHz"', '"9500 MHz"'),
        ('"260, 360 mT"', '"2600, 3600 G"'),
        ('"1 G"', '"1e-4 T"'),
        ('"10 deg"', f'"{math.pi / 18!r} rad"'),
        ('"-35, -60, -540 MHz"', '"-35000, -60000, -540000 kHz"'),
        ('"60 cm^-1"', f'"{60 * CM / 1000!r} GHz"'),
    ]:
        other = changed(other, old, new)
    first, second = read(tmp_path, MODEL), read(tmp_path, other)
    for one, two in zip(first.species, second.species, strict=True):
        values, others = (parameters_of([s], first.sample) for s in (one, two))
        for name, p in values.items():
            assert others[name].value == pytest.approx(p.value, rel=1e-12), name
    assert second.sweep.field == pytest.approx(first.sweep.field, rel=1e-12)
    assert second.sweep.modulation == pytest.approx(first.sweep.modulation, rel=1e-12)


SHORT = """
[sweep]
frequency = "9.5 GHz"
field = "260, 360 mT"
[[species]]
S = "3/2"
g = 2.0
D = "1 GHz"
[species.width]
gaussian = "1 mT"
"""


def test_a_short_model_has_the_documented_defaults(tmp_path):
    model = read(tmp_path, SHORT)
    assert model.tolerance == 1e-3
    assert model.sample.form == "powder"
    assert (model.sweep.detect, model.sweep.microwave, model.sweep.temperature) == ("derivative", "perpendicular", None)
    assert (model.species[0].name, model.species[0].amount) == ("species", 1.0)


@pytest.mark.parametrize(
    ("S", "value"), [('"1/2"', 0.5), ('"7/2"', 3.5), ('"2"', 2.0), ("1", 1.0), ("2.5", 2.5), ('"1.5"', 1.5)]
)
def test_spins_may_be_written_in_several_ways(tmp_path, S, value):
    text = changed(changed(SHORT, '"3/2"', S), '"1 GHz"', '"0 GHz"')
    assert read(tmp_path, text).species[0].spins[0].S == value


def test_samples(tmp_path):
    crystal = """
[sample]
form = "crystal"
axis = [0, 0, 1]
from = [1, 0, 0]
angles = "0, 5, 10 deg"
angle_zero = "2 deg"
microwave_axis = [1, 1, 0]
tilt = "0, 3, 0 deg"
point_group = "4/m"
"""
    sample = read(tmp_path, crystal + SHORT).sample
    assert sample.form == "crystal"
    assert sample.angles == pytest.approx(np.radians([0, 5, 10]))
    assert (sample.microwave_axis, sample.point_group, sample.start) == ((1.0, 1.0, 0.0), "4/m", (1.0, 0.0, 0.0))
    assert sample.tilt[1] == pytest.approx(math.radians(3))
    aligned = '[sample]\nform = "aligned"\ndirector = [0, 1, 1]\norder = -0.25\nangle = "90 deg"\n'
    sample = read(tmp_path, aligned + SHORT).sample
    assert (sample.director, sample.order, sample.angle) == ((0.0, 1.0, 1.0), -0.25, pytest.approx(math.pi / 2))
    widths = '[species.width]\na = "0.1 mT"\nb = "-0.01 mT"\nc = "0.02 mT"'
    solution = '[sample]\nform = "solution"\n' + changed(SHORT, '[species.width]\ngaussian = "1 mT"', widths)
    width = read(tmp_path, solution).species[0].width
    assert (width.a, width.b, width.c) == (0.1, -0.01, 0.02)


# What is wrong in a model --------------------------------------------------------------------------------

CRYSTAL = '[sample]\nform = "crystal"\n'


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        # The file as a whole
        (SHORT, "", "is empty; write a model or a job in TOML"),
        ("[sweep]", "[sweep", "line 2: is not TOML: expected ']' at the end of a table declaration"),
        ('frequency = "9.5 GHz"', "frequency = 9.5 GHz", "line 3: is not TOML"),
        ('frequency = "9.5 GHz"', 'frequency = "9.5 GHz"\nfrequency = "9 GHz"', "line 4: is not TOML: cannot overwrite"),
        ("[sweep]", "[sweeep]", 'unknown key "sweeep"; did you mean "sweep"?'),
        ("[[species]]", "[species]", "species: stands in single brackets; write [[species]], in double ones"),
        ("[sweep]", "[[sweep]]", "sweep: a list of 1 is not a table; write it under [sweep]"),
        ("[sweep]", '[[trace]]\nfile = "a.csv"\n[sweep]', '"trace" does not belong here; it makes this a job file'),
        ("[sweep]", "[fit]\n[sweep]", '"fit" does not belong here; it makes this a job file'),
        # Sweep
        ('frequency = "9.5 GHz"', "", 'sweep.frequency: is missing; write frequency = "9.5 GHz"'),
        ('field = "260, 360 mT"', "", 'sweep.field: is missing; write field = "260, 360 mT"'),
        ('"9.5 GHz"', "9.5", 'sweep.frequency: 9.5 has no unit; write a text with a unit, such as "9.5 GHz"'),
        ('"9.5 GHz"', '"9.5 mT"', 'sweep.frequency: "mT" is a unit of field, wanted is a frequency'),
        ('"9.5 GHz"', '"9.5 Ghz"', 'sweep.frequency: "Ghz" is not a unit of frequency; did you mean "GHz"?'),
        ('"9.5 GHz"', '"0 GHz"', 'sweep.frequency: "0 GHz"; it must be positive'),
        ('"9.5 GHz"', '"-9.5 GHz"', 'sweep.frequency: "-9.5 GHz"; it must be positive'),
        ('"9.5 GHz"', '"nan GHz"', 'sweep.frequency: "nan GHz" is not finite'),
        ('"9.5 GHz"', '"1e300 GHz"', "sweep.frequency: 1e+303 MHz is beyond reason; up to 1e+09 MHz is taken"),
        ('"9.5 GHz"', "nan", "sweep.frequency: nan is not a text with a unit; write a text with a unit"),
        ('"9.5 GHz"', "true", "sweep.frequency: true is not a text with a unit"),
        ('"9.5 GHz"', "1979-05-27", "sweep.frequency: 1979-05-27 is not a text with a unit"),
        ('"9.5 GHz"', "{a = 1}", "sweep.frequency: a table is not a text with a unit"),
        ('"260, 360 mT"', '"360, 260 mT"', 'sweep.field: "360, 260 mT" runs backwards; write the smaller field first'),
        ('"260, 360 mT"', '"300, 300 mT"', 'sweep.field: "300, 300 mT" is a range of no length'),
        ('"260, 360 mT"', '"300 mT"', 'sweep.field: "300 mT" has 1 number, wanted 2 numbers'),
        ('"260, 360 mT"', '"260, inf mT"', 'sweep.field: "260, inf mT" is not finite'),
        ("[[species]]", "points = 1e11\n[[species]]", "sweep.points: 1e+11; write a whole number from 2 to 10000000"),
        ("[[species]]", "points = 1\n[[species]]", "sweep.points: 1; write a whole number from 2 to 10000000"),
        ("[[species]]", "points = 2.5\n[[species]]", "sweep.points: 2.5 is not a whole number"),
        ("[[species]]", "points = inf\n[[species]]", "sweep.points: inf is not a whole number"),
        ("[[species]]", "points = true\n[[species]]", "sweep.points: true is not a whole number"),
        ("[[species]]", f"points = 0x{'f' * 5000}\n[[species]]", "sweep.points: an enormous number is not a whole number"),
        ("[[species]]", 'temperature = "0 K"\n[[species]]', 'sweep.temperature: "0 K"; it must be positive'),
        ("[[species]]", 'temperature = "5 C"\n[[species]]', 'sweep.temperature: "C" is not a unit of temperature'),
        ("[[species]]", 'modulation = "-1 mT"\n[[species]]', 'sweep.modulation: "-1 mT"; it must not be negative'),
        ("[[species]]", 'detect = "derivate"\n[[species]]', 'sweep.detect: "derivate" is not known; did you mean "derivative"'),
        ("[[species]]", 'microwave = "xyz"\n[[species]]', 'sweep.microwave: "xyz" is not known; write "perpendicular", "pa'),
        ("[[species]]", "microwave = 1\n[[species]]", "sweep.microwave: 1 is not a text"),
        ("[[species]]", 'temprature = "5 K"\n[[species]]', 'sweep: unknown key "temprature"; did you mean "temperature"?'),
        ("[sweep]", "[accuracy]\ntolerance = 0\n[sweep]", "accuracy.tolerance: 0; write a tolerance from 1e-8 to 0.5"),
        ("[sweep]", '[accuracy]\ntolerance = "1 %"\n[sweep]', 'accuracy.tolerance: "1 %" is not a number'),
        ("[sweep]", "accuracy = 3\n[sweep]", "accuracy: 3 is not a table; write it under [accuracy]"),
        # Sample
        ("[sweep]", '[sample]\nform = "pwder"\n[sweep]', 'sample.form: "pwder" is not known; did you mean "powder"?'),
        ("[sweep]", "[sample]\naxis = [0, 0, 1]\n[sweep]", 'sample.axis: means nothing for a powder; write form = "crystal"'),
        ("[sweep]", CRYSTAL + "axis = [0, 0, 0]\n[sweep]", "sample.axis: [0, 0, 0] has no direction"),
        ("[sweep]", CRYSTAL + "axis = [0, 1]\n[sweep]", "sample.axis: 2 numbers, wanted 3"),
        ("[sweep]", CRYSTAL + "axis = [0, 0, nan]\n[sweep]", "sample.axis: nan is not finite"),
        ("[sweep]", CRYSTAL + "axis = [0, 0, 1e99]\n[sweep]", "sample.axis: 1e+99 is too large"),
        ("[sweep]", CRYSTAL + "axis = [1, 0, 0]\n[sweep]", "sample.axis: is parallel to from"),
        ("[sweep]", CRYSTAL + "axis = [1, 0, 0]\nfrom = [2, 0, 0]\n[sweep]", "sample.from: is parallel to axis"),
        ("[sweep]", CRYSTAL + 'point_group = "4/n"\n[sweep]', 'sample.point_group: "4/n" is not one of the 32 point groups; did'),
        ("[sweep]", CRYSTAL + 'angles = "0, 5"\n[sweep]', 'sample.angles: "0, 5" has no unit'),
        ("[sweep]", CRYSTAL + 'tilt = "0, 5 deg"\n[sweep]', 'sample.tilt: "0, 5 deg" has 2 numbers, wanted 3 numbers'),
        ("[sweep]", '[sample]\nform = "aligned"\n[sweep]', "sample.order: is missing; write order = 0.6"),
        ("[sweep]", '[sample]\nform = "aligned"\norder = 1.5\n[sweep]', "sample.order: 1.5; an order parameter <P2> lies between"),
        # Spins
        ('S = "3/2"', 'S = "0.3"', 'species.1.S: "0.3" is an impossible spin; write a positive multiple of 1/2'),
        ('S = "3/2"', "S = 0.3", "species.1.S: 0.3 is an impossible spin"),
        ('S = "3/2"', 'S = "1/0"', 'species.1.S: "1/0" is an impossible spin'),
        ('S = "3/2"', 'S = "-1/2"', 'species.1.S: "-1/2" is not a spin'),
        ('S = "3/2"', "S = 0", "species.1.S: 0 is an impossible spin"),
        ('S = "3/2"', "S = inf", "species.1.S: inf is an impossible spin"),
        ('S = "3/2"', "S = nan", "species.1.S: nan is an impossible spin"),
        ('S = "3/2"', "", 'species.1.S: is missing; write S = "1/2"'),
        ('S = "3/2"', 'S = "99999/2"', "species.1: its spin space has 100000 dimensions, one matrix of which takes 160 GB"),
        ("g = 2.0", "", "species.1.g: is missing; write g = 2.0 (or [perpendicular, parallel] or [x, y, z])"),
        ("g = 2.0", 'g = "2.0"', 'species.1.g: "2.0" is not a number; write plain numbers'),
        ("g = 2.0", "g = [2, 2, 2, 2]", "species.1.g: 4 numbers, wanted 1 or 2 or 3"),
        ("g = 2.0", "g = []", "species.1.g: 0 numbers, wanted 1 or 2 or 3"),
        ("g = 2.0", "g = [2, inf]", "species.1.g: inf is not finite"),
        ("g = 2.0", "g = 0", "species.1.g: is 0 in every direction"),
        ("g = 2.0", "g = 3400", "species.1.g: 3400 is beyond reason"),
        ("g = 2.0", "gg = 2.0", 'species.1: unknown key "gg"; did you mean "g"?'),
        ("g = 2.0", 'g = 2\ng_tilt = "1 deg"', 'species.1.g_tilt: "1 deg" has 1 number, wanted 3 numbers'),
        ("g = 2.0", 'g = 2\ng_tilt = "1, 2, 3 mT"', 'species.1.g_tilt: "mT" is a unit of field, wanted is a angle'),
        ('D = "1 GHz"', "D = 1", 'species.1.D: 1 has no unit; write a text with a unit, such as "1 cm^-1"'),
        ('D = "1 GHz"', 'D = "1 GHz"\nE = "1 MHz"\nrhombicity = 0.1', "species.1.rhombicity: stands beside E"),
        ('D = "1 GHz"', "rhombicity = 0.1", "species.1.rhombicity: stands there without D"),
        ('S = "3/2"', 'S = "1/2"', "species.1.D: has no effect on S = 1/2; take D out, or give a larger S"),
        ("[species.width]", '[species.stevens]\nB4_0 = "1 MHz"\n[species.width]', "species.1.stevens: B4_0 has no effect on S = 1.5; k"),
        ("[species.width]", '[species.stevens]\nB2_3 = "1 MHz"\n[species.width]', "species.1.stevens: there is no operator B2_3"),
        ("[species.width]", '[species.stevens]\nB3_0 = "1 MHz"\n[species.width]', "there is no operator B3_0; k is 2, 4 or 6"),
        ("[species.width]", '[species.stevens]\nB4 = "1 MHz"\n[species.width]', 'species.1.stevens: "B4" is no operator'),
        ("[species.width]", "[species.stevens]\nB2_0 = 1\n[species.width]", "species.1.stevens.B2_0: 1 has no unit"),
        # Species
        ('S = "3/2"', 'S = "3/2"\nname = "a b"', 'species.1.name: "a b" cannot be a name; use letters, digits and _ only'),
        ('S = "3/2"', 'S = "3/2"\nname = "sample"', 'species.1.name: "sample" is the name of the sample'),
        ('S = "3/2"', 'S = "3/2"\nname = ""', "species.1.name: is empty"),
        ('S = "3/2"', 'S = "3/2"\nion = "Xx9+"', "species.1.ion: "),
        ('S = "3/2"', 'S = "3/2"\namount = -1', "species.1.amount: -1; an amount is not negative"),
        ('S = "3/2"', 'S = "3/2"\namount = nan', "species.1.amount: nan is not finite"),
        ('S = "3/2"', 'S = "3/2"\npopulations = [1, 2]', "species.1.populations: has 2 numbers; write 4, one for each"),
        ('S = "3/2"', 'S = "3/2"\npopulations = [1, -2, 1, 1]', "species.1.populations: has a negative number"),
        ('S = "3/2"', 'S = "3/2"\npopulations = [0, 0, 0, 0]', "species.1.populations: has a negative number or nothing but 0"),
        ('S = "3/2"', 'S = "3/2"\npopulations = [nan, 0, 0, 0]', "species.1.populations: is not a list of numbers"),
        ("[species.width]", "[[species.spin]]\n[species.width]", "species.1.S: stands beside [[species.spin]]; move S into"),
        # Widths and spreads
        ("[species.width]\n", "", 'unknown key "gaussian"'),
        ('[species.width]\ngaussian = "1 mT"', "", 'species.1.width: is missing; write [species.width] with gaussian = "1 mT"'),
        ('gaussian = "1 mT"', "", "species.1.width: no width is positive"),
        ('gaussian = "1 mT"', 'gaussian = "0 mT"', "species.1.width: no width is positive"),
        ('gaussian = "1 mT"', 'gaussian = "-1 mT"', 'species.1.width.gaussian: "-1 mT"; it must not be negative'),
        ('gaussian = "1 mT"', "gaussian = 1", 'species.1.width.gaussian: 1 has no unit; write a text with a unit, such as "1 mT"'),
        ('gaussian = "1 mT"', 'gausian = "1 mT"', 'species.1.width: unknown key "gausian"; did you mean "gaussian"?'),
        ('gaussian = "1 mT"', 'hidden_hyperfine = "1, -1 MHz"', "species.1.width.hidden_hyperfine: "),
        ('gaussian = "1 mT"', 'a = "1 mT"', "species.1.width.a: is a width of solutions and the sample is a powder"),
        ("[species.width]", "[species.spread]\ng = -1\n[species.width]", "species.1.spread.g: -1; a spread is not negative"),
        ("[species.width]", '[species.spread]\nA = "1 MHz"\n[species.width]', "species.1.spread.A: there is no nucleus"),
        ("[species.width]", "[species.spread]\ncorrelation = {g_A = 2}\n[species.width]", "correlation.g_A: 2; a correlation lies"),
        ("[species.width]", "[species.spread]\ncorrelation = {g_B = 0}\n[species.width]", 'correlation: unknown key "g_B"; did you'),
    ],
)  # fmt: skip
def test_what_is_wrong_in_a_model_is_said(tmp_path, old, new, message):
    path = write(tmp_path, changed(SHORT, old, new))
    assert message in refusal(read_model, path)


NUCLEUS = '[[species.nucleus]]\nisotope = "63Cu"\nA = "1 MHz"\n'


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        ('"63Cu"', '"64Xx"', "species.1.nucleus.1.isotope: "),
        ('"63Cu"', '"12C"', "species.1.nucleus.1.isotope: 12C has no nuclear spin; take this nucleus out"),
        ('"63Cu"', "63", "species.1.nucleus.1.isotope: 63 is not a text"),
        ('isotope = "63Cu"', 'isotope = "63Cu"\nelement = "Cu"', "species.1.nucleus.1: gives both isotope and element"),
        ('isotope = "63Cu"', "", "species.1.nucleus.1: gives neither isotope nor element; write isotope"),
        ('A = "1 MHz"', "", 'species.1.nucleus.1.A: is missing; write A = "-35, -60, -540 MHz"'),
        ('"1 MHz"', '"1 mT"', 'species.1.nucleus.1.A: "mT" is a unit of field, wanted is a energy'),
        ('"1 MHz"', '"1, 2, 3, 4 MHz"', "species.1.nucleus.1.A: "),
        ('A = "1 MHz"', 'A = "1 MHz"\nP = "1, 2, 3 MHz"', "species.1.nucleus.1.P: the trace is 6, not 0; write traceless princip"),
        ('A = "1 MHz"', 'A = "1 MHz"\ncount = 0', "species.1.nucleus.1.count: 0; write a whole number from 1 to"),
        ('A = "1 MHz"', 'A = "1 MHz"\ncouples_to = 2', "species.1.nucleus.1.couples_to: there is no spin 2; there is one spin"),
        ('A = "1 MHz"', 'A = "1 MHz"\ntreat = "exactly"', 'species.1.nucleus.1.treat: "exactly" is not known; did you mean "exact"'),
        ('A = "1 MHz"', 'A = "1 MHz"\nname = "width"', 'species.1.nucleus.1.name: "width" means something else'),
        ('A = "1 MHz"', 'A = "1 MHz"\nspin = 1', 'species.1.nucleus.1: unknown key "spin"'),
        ('A = "1 MHz"', 'A = "1 MHz"\nP = "1, 1, -2 MHz"\ncount = 9\ntreat = "exact"', "species.1: its spin space has 1048576 dimensions, one matrix"),
        ('A = "1 MHz"', 'A = "1 MHz"\nP = "1, 1, -2 MHz"\ncount = 900\ntreat = "exact"', "species.1: its spin space has 10^542 dimensions"),
        ('isotope = "63Cu"', 'isotope = "1H"\nP = "-1, -1, 2 MHz"', "species.1.nucleus.1.P: 1H has no quadrupole moment (I < 1)"),
    ],
)  # fmt: skip
def test_what_is_wrong_with_a_nucleus_is_said(tmp_path, old, new, message):
    path = write(tmp_path, changed(SHORT, "[species.width]", changed(NUCLEUS, old, new) + "[species.width]"))
    assert message in refusal(read_model, path)


PAIR = """
[sweep]
frequency = "9.5 GHz"
field = "260, 360 mT"
[[species]]
name = "pair"
[[species.spin]]
S = "1/2"
g = 2.0
[[species.spin]]
S = "1/2"
g = 2.1
[[species.exchange]]
between = [1, 2]
J = "1 GHz"
[species.width]
gaussian = "1 mT"
"""


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        ("between = [1, 2]", "between = [1, 3]", "species.1.exchange.1.between: there is no spin 3; spins are counted from 1 to 2"),
        ("between = [1, 2]", "between = [1, 1]", "species.1.exchange.1.between: spin 1 with itself; name two different spins"),
        ("between = [1, 2]", "between = [1]", "species.1.exchange.1.between: a list of 1 is not a pair of spins"),
        ("between = [1, 2]", "", "species.1.exchange.1.between: is missing; write between = [1, 2]"),
        ('J = "1 GHz"', "J = 1", "species.1.exchange.1.J: 1 has no unit"),
        ('J = "1 GHz"', 'dipolar = "1, 1, 1 MHz"', "species.1.exchange.1.dipolar: the trace is 3, not 0"),
        ('J = "1 GHz"', 'tilt = "1, 1, 1 deg"', "species.1.exchange.1.tilt: turns nothing"),
        ("[species.width]", "[[species.exchange]]\nbetween = [2, 1]\n[species.width]", "spins 2 and 1 are coupled twice"),
        ('[[species.spin]]\nS = "1/2"\ng = 2.1', "", "species.1.spin: is one table; write S and g in [[species]] itself"),
        ("g = 2.1", 'g = 2.1\nwidth = "1 mT"', 'species.1.spin.2: unknown key "width"'),
        ('name = "pair"', 'name = "pair"\ng = 2', "species.1.g: stands beside [[species.spin]]; move g into"),
        ('"1 mT"', '"1 mT"\n[[species]]\nname = "pair"', "species.2.name: two species are called"),
        ('"1 mT"', '"1 mT"\n[[species]]', 'species.2.name: is missing; write name = "..." (there are several species)'),
    ],
)  # fmt: skip
def test_what_is_wrong_with_coupled_spins_is_said(tmp_path, old, new, message):
    path = write(tmp_path, changed(PAIR, old, new))
    assert message in refusal(read_model, path)


def test_coupling_needs_two_spins(tmp_path):
    text = changed(SHORT, "[species.width]", "[[species.exchange]]\nbetween = [1, 2]\n[species.width]")
    assert "species.1.exchange.1: there is only one spin to couple" in refusal(read_model, write(tmp_path, text))


def test_files_that_are_no_toml(tmp_path):
    assert "there is no such file" in refusal(read_model, tmp_path / "none.toml")
    assert "is a folder" in refusal(read_model, tmp_path)
    path = tmp_path / "junk.toml"
    path.write_bytes(b"[sweep]\n\xff\xfe\x00")
    assert refusal(read_model, path) == "line 2: is not UTF-8 text; save it as UTF-8"
    path.write_bytes(bytes(range(256)))
    assert "line 1: is not TOML" in refusal(read_model, write(tmp_path, "\x00\x01", "b.toml"))
    assert "is nested too deeply" in refusal(read_model, write(tmp_path, "a = " + "[" * 100_000, "c.toml"))
    assert "more than 60 parts" in refusal(read_model, write(tmp_path, "a." * 100_000 + "a = 1", "d.toml"))
    assert "is not TOML" in refusal(read_model, write(tmp_path, "a = " + "1" * 10_000, "e.toml"))
    path.write_bytes(b"\xef\xbb\xbf" + SHORT.replace("\n", "\r\n").encode())
    assert read_model(path).sweep.frequency == 9500.0


# Whatever is in the file --------------------------------------------------------------------------------

KEYS = keys_of(tomllib.loads(MODEL))


@FUZZ
@given(st.data())
def test_any_tables_are_a_model_or_an_input_error(data):
    tables = damaged(data, tomllib.loads(MODEL), KEYS)
    found, text = None, ""
    try:
        found = model_from(tables)
    except InputError as error:
        text = str(error)
    assert isinstance(found, Model) or text
    assert "\n" not in text


@FUZZ
@given(st.data())
def test_any_text_is_a_model_or_an_input_error(tmp_path, data):
    text = data.draw(st.one_of(st.text(max_size=60), st.just(MODEL)))
    for _ in range(data.draw(st.integers(0, 4))):
        at = data.draw(st.integers(0, len(text)))
        text = text[:at] + data.draw(st.text(max_size=4)) + text[at + data.draw(st.integers(0, 6)) :]
    path = tmp_path / "model.toml"
    path.write_bytes(text.encode("utf-8", "surrogatepass"))
    message = ""
    try:
        read_model(path)
    except InputError as error:
        message = str(error)
    assert message == "" or message.startswith(str(path))
    assert "\n" not in message


def test_descriptions_are_short():
    assert describe(0xF << 20_000) == "an enormous number"
    assert len(describe("x" * 1000)) == 42
    assert describe("a\nb") == '"a b"'
    with pytest.raises(InputError, match="line 1: is not TOML"):
        parse_toml("= 3")
