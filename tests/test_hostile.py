"""Input that means harm: it is data, answered in one line, and what is written stays where the user said."""

from __future__ import annotations

import io
import re
import signal
from pathlib import Path

import h5py
import numpy as np
import pytest
from fit_jobs import MODEL
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from test_cli_fit import JOB, write_trace

from spinfit.cli import main
from spinfit.errors import InputError, on_one_line
from spinfit.files.curves import write_nxdata
from spinfit.files.jcamp import read_jcamp
from spinfit.files.job import job_of, model_from
from spinfit.files.reading import assemble, read_content
from spinfit.files.toml_crystal_field import crystal_fields_of
from spinfit.files.toml_table import parse_toml
from spinfit.fitting.parameters import Binding
from spinfit.fitting.ties import compile_ties, evaluate, parse_tie
from spinfit.sweep import Sample

LONGEST_LINE = 400
"""Characters of an error: more than a terminal's few lines help nobody."""

junk = settings(derandomize=True, deadline=None, max_examples=150, suppress_health_check=[HealthCheck.too_slow])


def refused(reader, *arguments) -> str:
    """The one line with which something is refused."""
    with pytest.raises(InputError) as caught:
        reader(*arguments)
    text = str(caught.value)
    assert text.isprintable()
    assert len(text) <= LONGEST_LINE
    return text


def answered(reader, *arguments) -> None:
    """A valid object or one line."""
    try:
        reader(*arguments)
    except InputError as error:
        assert str(error).isprintable()  # noqa: PT017


# Ties -----------------------------------------------------------------------------------------------

PARAMETERS = Binding(MODEL, Sample()).parameters


@pytest.mark.parametrize(
    "text",
    [
        "(" * 500 + "1" + ")" * 499,
        "-" * 999 + "1",
        "2" + "**2" * 300,
        "9**9**9**9",
        "10**12**12",
        "r.g_x**1000",
        "r.g_x**1e308",
        "r.g_x**(1/0)",
        "r.g_x**-1e400",
        "r.g_x**r.g_x",
        "1e999",
        "9" * 999,
        "1e-99999999999999999999 / 0",
        "r.g_x * 1e308 * 1e308",
        "1" + "+1" * 600,
        "r" * 2000,
        "r.g_x" * 300,
        "a." * 499 + "b",
        "__import__('os').system('x')",
        "r.g_x.__class__.__mro__",
        "(lambda: 1)()",
        "[1][0]",
        "r.g_x if 1 else 2",
        "r.g_x := 2",
        "f'{1}'",
        "1j",
        "0x10",
        "1_000",
        "\u0661\u0662",
        "\x1b[31m",
        "r.g_x\x00",
        "",
        " ",
        "\uff08" * 20,
    ],
)
def test_ties_are_bounded_arithmetic(text):
    refused(lambda: compile_ties({"r.g_y": text}, PARAMETERS).apply({}))


def test_the_largest_tie_that_is_taken_is_quick_to_work_out():
    sum_of_many = "+".join(["r.g_x"] * 166)
    assert evaluate(parse_tie(sum_of_many), {"r.g_x": 1.0}) == 166
    nested = "(" * 18 + "r.g_x" + "**2)" * 18
    refused(evaluate, parse_tie(nested), {"r.g_x": 2.0})
    ties = compile_ties({"r.g_y": sum_of_many, "r.g_z": sum_of_many.replace("_x", "_y")}, PARAMETERS)
    assert ties.gradient({"r.g_x": 1.0})["r.g_z"] == {"r.g_x": 166.0**2}


# Readers --------------------------------------------------------------------------------------------

ESCAPES = "\x1b[2J\x1b]0;title\x07\x9b31m\u202e"


def test_nothing_that_a_terminal_obeys_is_said():
    """Errors and notes quote what stood in the file."""
    assert on_one_line("a\n \tb") == "a b"
    assert on_one_line(ESCAPES).isprintable()
    toml = '"' + "".join(f"\\u{ord(c):04x}" for c in ESCAPES) + '"'
    for text in (f"{toml} = 1", f"species = {toml}", f"[[species]]\nname = {toml}", f"[{toml}]"):
        refused(lambda t=text: model_from(parse_toml(t)))
    refused(parse_tie, ESCAPES)
    latin = "# \x9b31m\nfield/mT,\x9b2J,c\n" + "".join(f"{300 + k},{k},{k}\n" for k in range(20))
    raw = read_content(latin.encode("latin-1"), "a.csv")
    assert all(name.isprintable() for name in raw.names)
    assert all(text.isprintable() for _, text in assemble(raw).notes)
    labels = "##TITLE= \x9b31m\n##JCAMP-DX= 5\n##XUNITS= \x9b\n##FIRSTX= 1\n##LASTX= 2\n##NPOINTS= 2\n"
    jdx = labels + "##XYDATA= (X++(Y..Y))\n1 2 3\n##END=\n"
    found = read_jcamp(jdx.encode(), "a.jdx")
    assert found.header["title"].isprintable()
    buffer = io.BytesIO()
    with h5py.File(buffer, "w") as root:
        for name in ("a\x1b[31m", "b"):
            write_nxdata(root.create_group(name), np.arange(9.0), {"signal\x1b": np.arange(9.0)}, axis="B\x9b")
        root["title"] = ESCAPES
    found = read_content(buffer.getvalue(), "a.h5")
    said = [*found.names, *found.header.values(), *(text for _, text in found.notes)]
    assert all(text.isprintable() for text in said)


LABELS = (
    *("TITLE JCAMP-DX XUNITS YUNITS XFACTOR YFACTOR FIRSTX LASTX DELTAX NPOINTS BLOCKS XYDATA XYPOINTS END").split(),
    *(".MICROWAVE FREQUENCY", "PEAK TABLE", "NTUPLES", ""),
)
VALUES = st.sampled_from(
    ["", "1", "-1", "0", "1e999", "nan", "1e-320", "9" * 400, "MILLITESLA", "(X++(Y..Y))", "(XY..XY)", "1,5", "$$ c"]
)
ORDINATES = st.text(alphabet="0123456789ABIabi@%JRjrSZs?+-.,;E \n", max_size=60)


@junk
@given(st.lists(st.tuples(st.sampled_from(LABELS), VALUES, ORDINATES), max_size=12), st.binary(max_size=8))
def test_any_jcamp_is_read_or_refused(lines, noise):
    text = "".join(f"##{label}= {value}\n{rest}\n" for label, value, rest in lines)
    answered(lambda: assemble(read_jcamp(text.encode() + noise, "a.jdx"), field_unit="mT"))


IONS = """
[[ion]]
name = "Ni2+"
zeta = "600 cm^-1"
racah = {B = "900 cm^-1", C = "3800 cm^-1"}
space = "term"
[[ion.ligand]]
position = [0, 0, 2.1]
kind = "O"
e_sigma = "4000 cm^-1"
e_pi = "750 cm^-1"
[[ion.ligand]]
angles = "90, 0 deg"
e_sigma = "4000 cm^-1"
"""
WORDS = (
    *(
        "Ni2+ Cu2+ Er3+ term configuration level position angles e_sigma O orbitals octahedral wybourne geometry"
    ).split(),
    *("stevens", "slater", "reduction", "source", "600 cm^-1"),
)
PIECES = st.one_of(
    st.sampled_from(["nan", "-inf", "1e400", "0", "-1", "[]", "{}", '""', "9" * 40, "true", "1979-01-01", "[[[[0]]]]"]),
    st.sampled_from(
        ["orbitals", "octahedral", "wybourne", "geometry", "stevens", "slater", "reduction", "source", *WORDS]
    ),
    st.text(max_size=5),
)


@junk
@given(st.lists(st.tuples(st.integers(0, 60), PIECES), min_size=1, max_size=4))
def test_any_crystal_field_file_is_read_or_refused(changes):
    tokens = re.split(r"(\s+|[=\[\]{},])", IONS)
    for at, piece in changes:
        tokens[at * 7 % len(tokens)] = piece
    answered(lambda: crystal_fields_of(parse_toml("".join(tokens))))


@pytest.mark.parametrize(
    "text",
    [
        "a = " + "[" * 5000,
        "a = " + "{a=" * 3000,
        ".".join(["a"] * 3000) + " = 1",
        "a = " + "9" * 10_000,
        "a = 1e" + "9" * 400,
        '"' + "k" * 100_000 + '" = 1',
        "[[species]]\n" * 3000,
        '[[species]]\nname = "' + "n" * 100_000 + '"',
        '[[species]]\nname = "a"\nS = "99999999999/2"',
        '[[species]]\nname = "a"\nS = "1/0"',
        '[[species]]\nname = "a"\nS = "' + "1" * 5000 + '"',
        '[[species]]\nname = "a"\nS = "1/2"\ng = [' + "2," * 10_000 + "2]",
        '[[species]]\nname = "a"\nS = "1/2"\ng = "' + "2," * 10_000 + '2 MHz"',
        "trace = 1\nfit = 2",
        '[[species]]\nname = "a"\nS = "1/2"\n[fit]\nvary = ["a.g"]\n[fit.limits]\n"' + "k" * 9999 + '" = [1, 2]',
        "[fit]\nvary = [" + '"a",' * 10_000 + "]\n[[trace]]\nfile = 't'",
    ],
    ids=range(16),
)
def test_huge_and_deep_toml_is_refused(text):
    refused(lambda: model_from(parse_toml(text)))
    refused(lambda: job_of(text, "j", {}))


@pytest.fixture
def processor_time():
    """End a test after 30 s of processor time: what is tried here would otherwise run for hours."""

    def give_up(number, frame):
        raise AssertionError("does not end")

    before = signal.signal(signal.SIGPROF, give_up)
    signal.setitimer(signal.ITIMER_PROF, 30)
    yield
    signal.setitimer(signal.ITIMER_PROF, 0)
    signal.signal(signal.SIGPROF, before)


@pytest.mark.parametrize(
    ("file", "text"),
    [
        ("a.csv", "# frequency" + " " * 1900 + "x\n1,2\n2,3\n"),
        ("a.csv", ("# modulation" + "\t" * 1900 + "amp\n") * 20 + "1,2\n2,3\n"),
        ("a.csv", "# microwave" + " " * 1900 + "frequency (" + " " * 1900 + "\n1,2\n2,3\n"),
        ("a.csv", "1" * 1_000_000 + "x\n"),
        ("a.csv", "1,2\n" + "1" * 1_000_000 + "x,1\n"),
        ("a.csv", "field (" + "(" * 300_000 + ",signal\n1,2\n2,3\n"),
        ("a.csv", "field [" + "[" * 300_000 + "\tsignal\n1\t2\n2\t3\n"),
        ("a.jdx", "##TITLE= a\n##COMMENTS= frequency" + " " * 100_000 + "x\n##END=\n"),
        ("a.jdx", "##TITLE= a\n##FIRSTX= 1\n##LASTX= 2\n##NPOINTS= 2\n##XYDATA= (X++(Y..Y))\n" + "1" * 300_000 + "x\n"),
    ],
    ids=range(9),
)
def test_long_rows_of_one_character_are_read_in_one_go(processor_time, file, text):
    """Patterns that could split a row of blanks, digits or brackets in several ways would try them all."""
    answered(lambda: assemble(read_content(text.encode(), file), field_unit="mT"))


# Output ---------------------------------------------------------------------------------------------


def tree_of(folder: Path) -> set[str]:
    return {path.relative_to(folder).as_posix() for path in folder.rglob("*") if path.is_file()}


@pytest.mark.parametrize("name", ["../x", "..", "/tmp/x", "a/b", "a\\b", "", ".", "a b", "\u00fc", "x\x00"])
@pytest.mark.parametrize("key", ["trace", "species"])
def test_names_that_could_be_paths_are_refused(tmp_path, capsys, key, name):
    write_trace(tmp_path, points=100)
    written = '"' + "".join(c if " " <= c < "\x7f" and c not in '\\"' else f"\\u{ord(c):04x}" for c in name) + '"'
    text = (
        JOB.replace("[[trace]]", f"[[trace]]\nname = {written}")
        if key == "trace"
        else JOB.replace('"radical"', written)
    )
    (tmp_path / "job.toml").write_text(text)
    before = tree_of(tmp_path)
    assert main(["fit", str(tmp_path / "job.toml"), "--out", str(tmp_path / "out" / "deep")]) == 2
    assert capsys.readouterr().err.count("\n") == 1
    assert tree_of(tmp_path) == before
    assert not (tmp_path / "out" / "deep").exists()


def test_odd_file_names_stay_in_the_folder(tmp_path, capsys):
    """Traces are called after their files, jobs after theirs."""
    data = tmp_path / "data"
    data.mkdir()
    write_trace(data, points=100, name=".. ; $(touch x) `y`\u202e.csv")
    text = JOB.replace("trace.csv", ".. ; $(touch x) `y`\u202e.csv".replace("\u202e", "\\u202e"))
    (data / "-- \u00fc'.toml").write_text(text, encoding="utf-8")
    before = tree_of(tmp_path)
    code = main(["fit", str(data / "-- \u00fc'.toml"), "--out", str(tmp_path / "out")])
    if code == 2:  # an unprintable character in the job is refused
        assert capsys.readouterr().err.count("\n") == 1
        assert tree_of(tmp_path) == before
    else:
        assert {name.split("/")[0] for name in tree_of(tmp_path) - before} == {"out"}


def test_a_job_whose_name_is_the_folder_above_is_refused(tmp_path, capsys):
    write_trace(tmp_path, points=100)
    for name in ("...toml", "b.toml"):  # the stem of the first is ".."
        (tmp_path / name).write_text(JOB)
    before = tree_of(tmp_path)
    jobs = [str(tmp_path / "...toml"), str(tmp_path / "b.toml")]
    assert main(["fit", *jobs, "--compare", "--out", str(tmp_path / "out")]) == 2
    assert "cannot be the name of a folder" in capsys.readouterr().err
    assert main(["batch", *jobs, "--out", str(tmp_path / "out")]) == 2
    assert capsys.readouterr().err.count("\n") == 1
    assert tree_of(tmp_path) == before
