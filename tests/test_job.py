"""Job files: every key is understood, every mistake is said with its place."""
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
from spinfit.files.job import read_job
from spinfit.files.toml_table import flatten
from spinfit.files.toml_trace import name_from
from spinfit.fitting.data import Job

CM = constants.c * 1e-4  # MHz per cm^-1

DATA = "# frequency 9.40005 GHz\n# temperature 120 K\n# modulation 0.2 mT\nfield/mT,signal\n"

JOB = """
[sample]
form = "crystal"
axis = [0, 0, 1]
[accuracy]
tolerance = 1e-2
[[species]]
name = "cr"
S = "3/2"
g = [1.987, 1.984]
D = "-0.19 cm^-1"
E = "0 MHz"
[species.width]
gaussian = "12 G"
[[species]]
name = "rad"
S = "1/2"
g = 2.0023
[species.width]
lorentzian = "1 mT"
[[trace]]
name = "kiln_07"
file = "data/kiln-07.csv"
frequency = "9.4321 GHz"
field_unit = "mT"
temperature = "100 K"
microwave = "perpendicular"
modulation = "0.2 mT"
detect = "derivative"
angle = "140 deg"
axis = [0, 1, 0]
from = [0, 0, 1]
direction = "both"
fit_range = "305, 345 mT"
exclude = ["325, 330 mT", "3101, 3109 G"]
background = "data/empty.csv"
baseline = 2
columns = {field = 1, signal = 2}
group = "day_2"
phase = "5 deg"
field_offset = "0.5 G"
field_scale = 1.001
field_uncertainty = "0.02 mT"
frequency_uncertainty = "0.2 MHz"
[[trace]]
file = "data/kiln-08.csv"
angle = "150 deg"
baseline = "none"
[[lines]]
name = "table"
file = "data/lines.csv"
field_uncertainty = "0.05 mT"
[fit]
vary = ["cr.g", "cr.D", "cr.width.gaussian", "rad.amount", "sample.angle_zero", "day_2.field_offset"]
start = "given"
[fit.limits]
"cr.g" = [1.9, 2.1]
"cr.D" = [-0.3, -0.1]
"cr.width.gaussian" = ["0.5 mT", "2 mT"]
"sample.angle_zero" = "-10, 10 deg"
[fit.tie]
"rad.g" = "cr.g_perp + 0.02"
"""


def sweep_text(header: str = DATA, n: int = 101) -> str:
    field = np.linspace(300, 350, n)
    # Every value different and smooth, so that nothing looks like a glitch.
    return header + "".join(f"{b:.4f},{100 * math.sin(b / 9):.5f}\n" for b in field)


@pytest.fixture
def folder(tmp_path):
    data = tmp_path / "data"
    data.mkdir()
    (data / "kiln-07.csv").write_text(sweep_text())
    (data / "kiln-08.csv").write_text(sweep_text(n=51))
    (data / "empty.csv").write_text(sweep_text(n=501))
    (data / "bare.csv").write_text(sweep_text("field/mT,signal\n"))
    (data / "volts.txt").write_text("".join(f"{math.sin(k / 9):.5f} {1.4 + k / 500:.4f} {k}\n" for k in range(100)))
    table = "# frequency 9.5 GHz\nangle_deg,field_mT,uncertainty_mT,lower,upper\n0,182.1,0.05,1,2\n10,184.6,0.05,0,0\n"
    (data / "lines.csv").write_text(table)
    (data / "sphere.csv").write_text("# frequency 9.5 GHz\ntheta_deg,phi_deg,field_mT\n0,0,182.1\n90,45,184.6\n")
    return tmp_path


def test_every_key_of_a_job(folder):
    job = read_job(write(folder, JOB, "job.toml"))
    first, second = job.traces
    assert (first.name, first.frequency, first.temperature, first.modulation) == ("kiln_07", 9432.1, 100.0, 0.2)
    assert first.angle == pytest.approx(math.radians(140))
    assert (first.axis, first.start, first.group, first.baseline) == ((0, 1, 0), (0, 0, 1), "day_2", 2)
    assert first.phase == pytest.approx(math.radians(5))
    assert (first.field_offset, first.field_scale) == (pytest.approx(0.05), 1.001)
    assert (first.field_uncertainty, first.frequency_uncertainty) == (0.02, 0.2)
    inside = (first.field >= 305) & (first.field <= 345)
    outside = ((first.field < 325) | (first.field > 330)) & ((first.field < 310.1) | (first.field > 310.9))
    assert np.array_equal(first.used, inside & outside)
    # The empty tube is measured on a finer grid: linear interpolation of a slow sine is good to (h^2/8)|f''|.
    assert first.background == pytest.approx(100 * np.sin(first.field / 9), abs=0.1**2 / 8 * 100 / 81 + 1e-4)
    assert (second.name, second.frequency, second.temperature) == ("kiln_08", pytest.approx(9400.05), 120.0)
    assert (second.modulation, second.baseline, second.axis, second.group) == (0.2, None, None, None)
    assert second.field_scale == 1.0
    assert second.used.all()
    assert len(second.sha256) == 64
    (table,) = job.lines
    assert table.angle == pytest.approx(np.radians([0, 10]))
    assert table.field.tolist() == [182.1, 184.6]
    assert table.uncertainty.tolist() == [0.05, 0.05]
    assert table.levels.tolist() == [[1, 2], [0, 0]]
    assert (table.name, table.frequency, table.field_uncertainty) == ("table", 9500.0, 0.05)
    assert job.limits["cr.g_par"] == (1.9, 2.1)
    assert job.limits["cr.D"] == pytest.approx((-0.3 * CM, -0.1 * CM))
    assert job.limits["cr.width.gaussian"] == (0.5, 2.0)
    assert job.limits["sample.angle_zero"] == pytest.approx((-math.pi / 18, math.pi / 18))
    assert job.ties == {"rad.g": "cr.g_perp + 0.02"}
    assert (job.start, job.tolerance, job.name, job.text) == ("given", 1e-2, "job", JOB)
    assert job.units["cr.D"] == "cm^-1"
    assert job.units["kiln_07.field_offset"] == "G"
    assert "kiln_08.field_offset" not in job.units


def test_what_the_job_says_wins_over_the_header_with_a_note(folder):
    notes = dict(read_job(write(folder, JOB, "job.toml")).traces[0].notes)
    job = read_job(write(folder, JOB, "job.toml"))
    texts = [text for code, text in job.traces[0].notes if code == "header_differs"]
    assert "header_differs" in notes
    assert texts == [
        "kiln_07: temperature is 100 K in the job and 120 K in data/kiln-07.csv; the job's is used",
        "kiln_07: frequency is 9.4321 GHz in the job and 9.40005 GHz in data/kiln-07.csv; the job's is used",
    ]
    assert not [code for code, _ in job.traces[1].notes if code == "header_differs"]


POWDER_JOB = """
[[species]]
name = "cr"
S = "3/2"
g = [1.98, 1.987, 1.984]
D = "0.1 GHz"
E = "10 MHz"
[species.stevens]
B2_0 = "1 MHz"
[species.width]
gaussian = "1 mT"
[[trace]]
file = "data/kiln-07.csv"
[fit]
vary = ["cr.g"]
"""


def test_names_in_fit_may_stand_without_quotes(folder):
    text = POWDER_JOB + '[fit.limits]\ncr.D = [0, 1]\n"cr.E" = [0, 20]\n[fit.tie]\ncr.E = "cr.B2_0 * 2"\n'
    job = read_job(write(folder, changed(text, '"cr.E" = [0, 20]\n', ""), "job.toml"))
    assert job.limits == {"cr.D": (0.0, 1000.0)}
    assert job.ties == {"cr.E": "cr.B2_0 * 2"}
    assert flatten({"a": {"b": 1, "63Cu": {"A": 2}}, "c.d": 3}, "x") == {"a.b": 1, "a.63Cu.A": 2, "c.d": 3}
    with pytest.raises(InputError, match=r"fit\.limits\.cr\.D: stands there twice"):
        flatten({"cr": {"D": 1}, "cr.D": 2}, "fit.limits")


def test_columns_and_calibration_of_a_home_built_spectrometer(folder):
    source = 'file = "data/volts.txt"\nfrequency = "9.185 GHz"\ncolumns = {field = 2, signal = 1}\n'
    source += 'field_calibration = {slope = "216 mT/V", zero = "3 mT"}'
    trace = read_job(write(folder, changed(POWDER_JOB, 'file = "data/kiln-07.csv"', source), "job.toml")).traces[0]
    assert trace.name == "volts"
    assert trace.field == pytest.approx(216 * (1.4 + np.arange(100) / 500) + 3)
    assert trace.signal[9] == pytest.approx(math.sin(1.0), abs=1e-5)


def test_tables_of_directions(folder):
    text = changed(
        POWDER_JOB, '[[trace]]\nfile = "data/kiln-07.csv"', '[[lines]]\nfile = "data/sphere.csv"\ngroup = "day"'
    )
    text = changed(text, "[[species]]", '[sample]\nform = "crystal"\n[[species]]')
    text = changed(text, 'vary = ["cr.g"]', 'vary = ["cr.D"]')
    job = read_job(write(folder, text, "job.toml"))
    assert job.traces == ()
    assert job.lines[0].direction == pytest.approx(np.array([[0, 0], [math.pi / 2, math.pi / 4]]))
    assert job.lines[0].angle is None
    assert (job.lines[0].levels, job.lines[0].uncertainty) == (None, None)


def test_starts_to_be_guessed_may_be_left_open(folder):
    text = changed(changed(POWDER_JOB, "g = [1.98, 1.987, 1.984]\n", ""), '[species.width]\ngaussian = "1 mT"\n', "")
    assert "species.1.g: is missing" in refusal(read_job, write(folder, text, "job.toml"))
    job = read_job(write(folder, text + 'start = "auto"\n[fit.limits]\n"cr.g" = [2.1, 2.2]\n', "job.toml"))
    assert job.start == "auto"
    # The free electron's g, CODATA.
    assert job.species[0].spins[0].g == pytest.approx((-constants.value("electron g factor"),))


def test_a_template_has_its_traces_put_in(folder):
    tables = tomllib.loads(POWDER_JOB)
    tables["trace"] = [{"file": "data/kiln-08.csv", "frequency": "9.5 GHz"}]
    job = read_job(folder / "template.toml", tables=tables)
    assert (job.traces[0].name, job.traces[0].frequency) == ("kiln_08", 9500.0)


@pytest.mark.parametrize(
    ("file", "name"),
    [("kiln-07.csv", "kiln_07"), ("a/b c.d.txt", "b_c_d"), ("7.jdx", "7"), ("übung.csv", "_bung"), (".csv", "_csv")],
)
def test_traces_are_called_after_their_file(file, name):
    assert name_from(file) == name


FILE = 'file = "data/kiln-07.csv"'


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        ("[[trace]]", "[trace]", "trace: stands in single brackets; write [[trace]], in double ones"),
        (f"[[trace]]\n{FILE}", "", 'trace: is missing; write [[trace]] with file = "..."'),
        ("[[species]]", "[sweep]\n[[species]]", '"sweep" does not belong here; it makes this a model file'),
        ("[[species]]", '[sample]\nform = "crystal"\nangles = "1 deg"\n[[species]]', "sample.angles: a job has one angle for each"),
        (FILE, "", "trace.1.file: is missing"),
        (FILE, 'file = "data/none.csv"', "there is no such file"),
        (FILE, 'file = "data/bare.csv"', "trace.1.frequency: is missing, here and in the header of data/bare.csv; write frequ"),
        (FILE, FILE + '\nfrequency = "9.4"', 'trace.1.frequency: "9.4" has no unit'),
        (FILE, FILE + '\nfrequency = "-9.4 GHz"', 'trace.1.frequency: "-9.4 GHz"; it must be positive'),
        (FILE, FILE + "\nfrequenzy = 1", 'trace.1: unknown key "frequenzy"; did you mean "frequency"?'),
        (FILE, FILE + '\nname = "a.b"', 'trace.1.name: "a.b" cannot be a name'),
        (FILE, FILE + '\nname = "cr"', 'trace.1.name: "cr" is the name of a species already'),
        (FILE, FILE + f"\n[[trace]]\n{FILE}", 'trace.2.name: "kiln_07" is the name of a trace already; write another name'),
        (FILE, FILE + '\ngroup = "cr"', 'trace.1.group: "cr" is the name of a species already'),
        (FILE, FILE + '\ngroup = ["day", "cr"]', 'trace.1.group: "cr" is the name of a species already'),
        (FILE, FILE + '\ngroup = ["day", "day"]', "trace.1.group: names one thing twice; write names such as"),
        (FILE, FILE + '\ngroup = ["a b"]', 'trace.1.group: "a b" cannot be a name; use letters, digits and _ only'),
        (FILE, FILE + "\ngroup = []", "trace.1.group: is an empty list; write names such as"),
        (FILE, FILE + '\nangle = "1 deg"', "trace.1.angle: means nothing for a powder"),
        (FILE, FILE + "\naxis = [0, 0, 1]", "trace.1.axis: means nothing for a powder"),
        (FILE, FILE + '\nfield_unit = "Tesla"', 'trace.1.field_unit: "Tesla" is not known'),
        (FILE, FILE + '\ndirection = "left"', 'trace.1.direction: "left" is not known'),
        (FILE, FILE + '\ndirection = "down"', 'trace.1.direction: the field only goes up; write direction = "both"'),
        (FILE, FILE + '\nfit_range = "340, 300 mT"', 'trace.1.fit_range: "340, 300 mT" runs backwards'),
        (FILE, FILE + '\nfit_range = "1, 2 T"', "trace.1.fit_range: no point lies in 1000 to 2000 mT; the trace covers 300 to 350"),
        (FILE, FILE + '\nfit_range = "320, 321.2 mT"', "trace.1: 3 points are left for a scale and a baseline of 3 free numbers"),
        (FILE, FILE + '\nfit_range = "320, 322.7 mT"', "fit.vary: 6 points for 6 free parameters, scales and baselines included"),
        (FILE, FILE + '\nexclude = "1, 2 mT"', "trace.1.exclude: "),
        (FILE, FILE + '\nexclude = ["2, 1 mT"]', 'trace.1.exclude.1: "2, 1 mT" runs backwards'),
        (FILE, FILE + '\nexclude = ["1, 999 mT"]', "trace.1.exclude: no point is left to use"),
        (FILE, FILE + '\nbaseline = "some"', 'trace.1.baseline: "some"; write the order of a polynomial'),
        (FILE, FILE + "\nbaseline = -1", "trace.1.baseline: -1; write a whole number from 0 to 20"),
        (FILE, FILE + "\nbaseline = 1.5", "trace.1.baseline: 1.5 is not a whole number"),
        (FILE, FILE + "\ncolumns = [1, 2]", "trace.1.columns: stands in double brackets"),
        (FILE, FILE + "\ncolumns = {field = 1, signal = 1}", "trace.1.columns.signal: 1 is the field's column"),
        (FILE, FILE + "\ncolumns = {field = 1, signal = 7}", 'trace.1.columns.signal: there is no column "7"'),
        (FILE, FILE + "\ncolumns = {field = 0}", "trace.1.columns.field: 0; write a whole number from 1"),
        (FILE, FILE + "\ncolumns = {x = 1}", 'trace.1.columns: unknown key "x"'),
        (FILE, FILE + '\nfield_calibration = {zero = "1 mT"}', "trace.1.field_calibration.slope: is missing"),
        (FILE, FILE + '\nfield_calibration = {slope = "0 mT/V"}', "trace.1.field_calibration.slope: is 0"),
        (FILE, FILE + '\nfield_calibration = {slope = "1 mT"}', 'trace.1.field_calibration.slope: "mT" is a unit of field'),
        (FILE, FILE + '\nbackground = "data/none.csv"', "there is no such file"),
        (FILE, FILE + "\nfield_scale = 0", "trace.1.field_scale: 0; a scale is positive, near 1"),
        (FILE, FILE + '\nfield_uncertainty = "-1 mT"', 'trace.1.field_uncertainty: "-1 mT"; it must not be negative'),
        (FILE, FILE + "\nfield_offset = 1", 'trace.1.field_offset: 1 has no unit; write a text with a unit, such as "1 mT"'),
        (f"[[trace]]\n{FILE}", '[[lines]]\nfile = "data/lines.csv"', "lines.1: line positions need a crystal and the sample is a po"),
        # Fit
        ('[fit]\nvary = ["cr.g"]', "", "fit: is missing; write [fit] with vary = ["),
        ('vary = ["cr.g"]', "", 'fit.vary: is missing; write vary = ["cu.g"'),
        ('vary = ["cr.g"]', "vary = []", "fit.vary: there is nothing to vary"),
        ('vary = ["cr.g"]', 'vary = "cr.g"', 'fit.vary: "cr.g" is not a list of names'),
        ('vary = ["cr.g"]', "vary = [1]", "fit.vary: a list of 1 is not a list of names"),
        ('vary = ["cr.g"]', 'vary = ["cr.gz"]', 'fit.vary: "cr.gz" is no parameter of this model; did you mean "cr.g'),
        ('vary = ["cr.g"]', 'vary = ["cr.amount"]', 'fit.vary: "cr.amount" cannot be varied; the scale is free'),
        ('vary = ["cr.g"]', 'vary = ["cr.D", "cr.B2_0"]', 'fit.vary: "cr.D" and "cr.B2_0" act alike'),
        ('vary = ["cr.g"]', 'vary = ["cr.g"]\nstart = "guess"', 'fit.start: "guess" is not known; write "given", "near", "auto"'),
        ('vary = ["cr.g"]', 'vary = ["cr.g"]\nmethod = "x"', 'fit: unknown key "method"'),
        ('vary = ["cr.g"]', 'vary = ["cr.g"]\nlimits = 3', "fit.limits: 3 is not a table; write [fit.limits]"),
        ('["cr.g"]', '["cr.g"]\n[fit.limits]\n"cr.g_z" = [2.1, 2.4]', "fit.limits.cr.g_z: the start, 1.984, is outside the limits 2.1 to"),
        ('["cr.g"]', '["cr.g"]\n[fit.limits]\n"cr.D" = ["1 cm^-1", "2 cm^-1"]', "the start, 0.1 GHz, is outside the limits 29.9792 to"),
        ('["cr.g"]', '["cr.g"]\n[fit.limits]\n"cr.g_z" = [2.1, 1.1]', "fit.limits.cr.g_z: the lower limit is not below the upper one"),
        ('["cr.g"]', '["cr.g"]\n[fit.limits]\n"cr.g_z" = [1.1]', "fit.limits.cr.g_z: a list of 1 is not a pair of limits"),
        ('["cr.g"]', '["cr.g"]\n[fit.limits]\n"cr.g_z" = "1, 3"', 'fit.limits.cr.g_z: "1, 3" is not a pair of limits'),
        ('["cr.g"]', '["cr.g"]\n[fit.limits]\n"cr.g_z" = [1.1, inf]', "fit.limits.cr.g_z: inf is no limit; write a finite number"),
        ('["cr.g"]', '["cr.g"]\n[fit.limits]\n"cr.D" = [0, "1 mT"]', 'fit.limits.cr.D: "mT" is a unit of field'),
        ('["cr.g"]', '["cr.g"]\n[fit.limits]\n"cr.D" = [0, nan]', "fit.limits.cr.D: nan is no limit; write a finite number in GHz"),
        ('["cr.g"]', '["cr.g"]\n[fit.limits]\n"cr.width.gaussian" = [-2, -1]', "the limits leave no possible value; possible is 0 to inf mT"),
        ('["cr.g"]', '["cr.g"]\n[fit.limits]\n"cr.gz" = [1, 3]', 'fit.limits.cr.gz: "cr.gz" is no parameter of this model; did you'),
        ('["cr.g"]', '["cr.g"]\n[fit.limits]\n"cr.g" = [1, 3]\n"cr.g_x" = [1, 3]', '"cr.g_x" has limits twice'),
        ('["cr.g"]', '["cr.g"]\n[fit.tie]\n"cr.D" = "cr.E"', '"cr.D" is in GHz and "cr.E" in MHz; give both in the same unit'),
        ('["cr.g"]', '["cr.D"]\n[fit.tie]\n"cr.g_x" = "cr.g_y"\n"cr.g_y" = "cr.g_x"', "the ties form a circle: cr.g_x -> cr.g_y"),
        ('["cr.g"]', '["cr.D"]\n[fit.tie]\n"cr.g_x" = "__import__(1)"', 'fit.tie.cr.g_x: "__import__(" calls a function'),
        ('["cr.g"]', '["cr.D"]\n[fit.tie]\n"cr.g_x" = 2', "fit.tie.cr.g_x: 2 is not a text"),
        ('["cr.g"]', '["cr.g"]\n[fit.tie]\n"cr.g_x" = "cr.g_y"', '"cr.g_x" is both varied and tied'),
        ('["cr.g"]', '["cr.D"]\n[fit.tie]\n"cr.g_x" = "1/(cr.g_y - 1.987)"', "fit.tie.cr.g_x: the arithmetic divides by 0"),
        (
            '["cr.g"]',
            '["cr.D"]\n[fit.tie]\n"cr.g_x" = "cr.g_y"\n[fit.limits]\n"cr.g_x" = [1, 3]',
            'fit.limits.cr.g_x: "cr.g_x" is tied and cannot have limits of its own',
        ),
    ],
)  # fmt: skip
def test_what_is_wrong_in_a_job_is_said(folder, old, new, message):
    path = write(folder, changed(POWDER_JOB, old, new), "job.toml")
    with pytest.raises(InputError) as caught:
        read_job(path)
    text = str(caught.value)
    assert message in text
    assert "\n" not in text
    assert text.startswith(str(folder))  # the job, or the data file that is wrong


def test_a_background_must_reach_over_what_is_fitted(folder):
    (folder / "data" / "short.csv").write_text(DATA + "310,1\n311,2\n312,3\n")
    path = write(folder, changed(POWDER_JOB, FILE, FILE + '\nbackground = "data/short.csv"'), "job.toml")
    assert "trace.1.background: covers 310 to 312 mT, and 300 to 350 mT are fitted" in refusal(read_job, path)


@pytest.mark.parametrize(
    ("heading", "message"),
    [
        ("angle_deg,height", 'column "height"'),
        ("angle,field_mT", 'column "angle" has no unit of angle'),
        ("theta_deg,field_mT", "columns are missing; head the columns angle_deg (or theta_deg, phi_deg), field_mT"),
        ("phi_deg,angle_deg", "columns are missing"),
    ],
)
def test_tables_of_lines_go_by_their_headings(folder, heading, message):
    (folder / "data" / "bad.csv").write_text(f"# frequency 9.5 GHz\n{heading}\n1,2\n3,4\n5,6\n")
    text = changed(POWDER_JOB, '[[trace]]\nfile = "data/kiln-07.csv"', '[[lines]]\nfile = "data/bad.csv"')
    path = write(folder, '[sample]\nform = "crystal"\n' + text, "job.toml")
    with pytest.raises(InputError) as caught:
        read_job(path)
    assert message in str(caught.value)
    assert "bad.csv" in str(caught.value)


def test_a_traces_own_axis_goes_with_the_samples_direction(folder):
    text = changed(POWDER_JOB, FILE, FILE + '\nangle = "1 deg"\naxis = [1, 0, 0]')
    path = write(folder, '[sample]\nform = "crystal"\n' + text, "job.toml")
    assert "trace.1.axis: axis and from are parallel; write both here" in refusal(read_job, path)


def test_crystals_need_an_angle_for_each_trace(folder):
    path = write(folder, '[sample]\nform = "crystal"\n' + POWDER_JOB, "job.toml")
    message = 'trace.1.angle: is missing, here and in the header of data/kiln-07.csv; write angle = "140 deg"'
    assert refusal(read_job, path) == message


# Whatever is in the file --------------------------------------------------------------------------------

KEYS = keys_of(tomllib.loads(JOB))


@FUZZ
@given(st.data())
def test_any_tables_are_a_job_or_an_input_error(folder, data):
    tables = damaged(data, tomllib.loads(JOB), KEYS)
    found, text = None, ""
    try:
        found = read_job(folder / "job.toml", tables=tables)
    except InputError as error:
        text = str(error)
    assert isinstance(found, Job) or text
    assert "\n" not in text
