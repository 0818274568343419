"""Delimited text: round trips in every dialect, the same numbers as numpy.loadtxt, and one-line refusals."""

from __future__ import annotations

import io
import os
import re

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from spinfit.errors import InputError
from spinfit.files import text as text_module
from spinfit.files.conditions import column_name, is_field, understand
from spinfit.files.raw import RawTrace
from spinfit.files.reading import read
from spinfit.files.text import read_text

finite = st.floats(allow_nan=False, allow_infinity=False)
tables = st.integers(2, 4).flatmap(
    lambda m: st.lists(st.lists(finite, min_size=m, max_size=m), min_size=1, max_size=12)
)
DIALECTS = [
    (",", "."),
    (";", "."),
    (";", ","),
    ("\t", "."),
    ("\t", ","),
    (" ", "."),
    ("   ", "."),
    ("  ", ","),
    (", ", "."),
]
ENCODINGS = ["utf-8", "utf-8-sig", "utf-16", "utf-16-le", "utf-16-be", "latin-1"]


def written(rows, separator, decimal):
    """Write rows as a script would; every number has a decimal mark, so that commas are not in doubt."""
    return [separator.join(f"{v:.17e}".replace(".", decimal) for v in row) for row in rows]


@settings(derandomize=True, deadline=None, max_examples=150)
@given(
    rows=tables,
    dialect=st.sampled_from(DIALECTS),
    end=st.sampled_from(["\n", "\r\n", "\r"]),
    encoding=st.sampled_from(ENCODINGS),
    heading=st.booleans(),
    trailing=st.booleans(),
    comments=st.sampled_from(["", "#", "%", ";"]),
)
def test_round_trip(rows, dialect, end, encoding, heading, trailing, comments):
    separator, decimal = dialect
    lines = written(rows, separator, decimal)
    if trailing:
        lines = [line + separator for line in lines]
    names = [f"c{k}" for k in range(len(rows[0]))]
    if heading:
        lines.insert(0, separator.join(names))
    if comments:
        lines = [f"{comments} frequency 9.4 GHz", *lines[:2], f"{comments} a remark", "", *lines[2:]]
    raw = read_text((end.join(lines) + end).encode(encoding), "f")
    np.testing.assert_array_equal(raw.columns, np.array(rows))
    assert raw.header == ({"frequency": 9400.0} if comments else {})
    if heading:
        assert raw.names == tuple(names)


@settings(derandomize=True, deadline=None, max_examples=60)
@given(rows=tables, dialect=st.sampled_from(DIALECTS))
def test_fast_and_slow_path_agree(rows, dialect):
    lines = written(rows, *dialect)
    fast = read_text("\n".join(lines).encode(), "f").columns
    slow = read_text("\n".join([*lines, "# letters send the block down the slow path"]).encode(), "f").columns
    assert text_module._fast("\n".join(lines), text_module._dialect(lines), len(rows[0])) is not None
    np.testing.assert_array_equal(fast, slow)


def test_same_numbers_as_numpy():
    rng = np.random.default_rng(1)
    content = "\n".join(f"{a:.9g},{b:.12g},{c:.3f}" for a, b, c in rng.normal(size=(500, 3)) * 1e3)
    np.testing.assert_array_equal(
        read_text(content.encode(), "f").columns, np.loadtxt(io.StringIO(content), delimiter=",")
    )


@pytest.mark.parametrize(
    ("first_line", "names", "unit"),
    [
        ("field/mT,signal", ("field", "signal"), "mT"),
        ("field (G),intensity", ("field", "intensity"), "G"),
        ("Field [T],y", ("Field", "y"), "T"),
        ("B/mT,I", ("B", "I"), "mT"),
        ("field_mT,signal", ("field", "signal"), "mT"),
        ("B in mT,signal", ("B", "signal"), "mT"),
        ("magnetic field / gauss,signal", ("magnetic field", "signal"), "G"),
        ('"B0 [mT]","signal"', ("B0", "signal"), "mT"),
        ("# field/mT, signal", ("field", "signal"), "mT"),
        ("% B(mT)\tsignal", ("B", "signal"), "mT"),
    ],
)
def test_headings(first_line, names, unit):
    raw = read_text(f"{first_line}\n340.0,1.5\n341.0,1.6\n".encode(), "f")
    assert raw.names == names
    assert raw.units == (unit, "")
    assert is_field(raw.names[0])


def test_a_comment_of_two_words_heads_no_columns():
    assert read_text(b"# equal populations\n1.0 2.0\n3.0 4.0\n", "f").names == ("", "")
    assert column_name("lower level") == ("lower level", "")


@pytest.mark.parametrize(
    ("line", "expected"),
    [
        ("frequency 9.40005 GHz", {"frequency": 9400.05}),
        ("Microwave frequency: 9,4 GHz", {"frequency": 9400.0}),
        ("MW Frequency / GHz = 9.4", {"frequency": 9400.0}),
        ("mw_frequency=9.4e9 Hz", {"frequency": 9400.0}),
        (
            "freq. 9400 MHz, temperature = 4.2 K; modulation 1 G",
            {"frequency": 9400.0, "temperature": 4.2, "modulation": 0.1},
        ),
        ("Temp. (K): 77", {"temperature": 77.0}),
        ("temperature 25 C", {"temperature": 298.15}),
        ("modulation amplitude (pp): 0.2 mT", {"modulation": 0.2}),
        ("modulation frequency 100 kHz", {}),
        ("angle 180 deg", {"angle": np.pi}),
        ("microwave parallel", {"microwave": "parallel"}),
        ("detection: second derivative", {"detect": "second derivative"}),
        ("powder field standard, g = 2.0036(2)", {}),
        ("field direction turned in the ac plane; 0 deg near c; reading error of the fields 0.05 mT", {}),
        ("helium temperature 3 K below", {}),
    ],
)
def test_header_lines(line, expected):
    header, notes = {}, []
    understand(line, header, notes)
    assert header == pytest.approx(expected)
    assert notes == []


@pytest.mark.parametrize(
    ("line", "expected", "says"),
    [
        ("frequency 9.4", {"frequency": 9400.0}, "taken as GHz"),
        ("frequency 9400", {"frequency": 9400.0}, "taken as MHz"),
        ("modulation 2", {}, "is not used"),
        ("frequency 9.4 parsec", {"frequency": 9400.0}, "no known unit"),
        ("temperature -5 K", {}, "not plausible"),
        ("frequency 9.4 GHz, frequency 9.5 GHz", {"frequency": 9400.0}, "stands twice"),
    ],
)
def test_doubtful_header_lines_are_told(line, expected, says):
    header, notes = {}, []
    understand(line, header, notes)
    assert header == pytest.approx(expected)
    assert len(notes) == 1
    assert says in notes[0][1]


@pytest.mark.parametrize(
    ("content", "says"),
    [
        ("field/mT,signal\n1.0,2.0\n3.0,oops\n", 'f: line 3: "oops" is not a number; write a number'),
        ("1.0,2.0\n3.0\n", 'f: line 2: "3.0" has 1 column; the lines above have 2'),
        ("1.0,2.0\n3.0,4.0,5.0\n", "line 2: "),
        ("1.0,2.0\n\n# x\n3.0,nan\n", 'f: line 4: "nan" is not finite'),
        ("1.0,2.0\n3.0,-inf\n", 'f: line 2: "-inf" is not finite'),
        ("1.0,2.0\n3.0,1e999\n", 'f: line 2: "1e999" is not finite'),
        ("1.0,2.0,3.0\n1.0,,3.0\n", "f: line 2: an empty field"),
        ("1.0,x\n2.0,3.0\n", 'f: line 1: "x" is not a number'),
        ("1.0\n2.0\n", "has one column"),
        ("no numbers here\n", "holds no line of numbers"),
        ("1.0 2.0\n3.0 4.0 # fine\n0x10 5.0\n", 'line 3: "0x10" is not a number'),
        ("field/mT,signal\n340,5,12,3\n341,5,12,4\n", "separate by semicolons"),
    ],
)
def test_refusals(content, says):
    with pytest.raises(InputError) as caught:
        read_text(content.encode(), "f")
    assert says in str(caught.value)
    assert "\n" not in str(caught.value)


@pytest.mark.parametrize(
    ("content", "says"),
    [
        (b"", "is empty"),
        (b"\n \r\n", "is empty"),
        (bytes(range(256)) * 4, "neither text nor a format known here"),
        (b"\x89PNG\r\n\x1a\n\x00\x00", "neither text nor a format known here"),
        (b"\x89HDF\r\n\x1a\n" + bytes(100), "damaged HDF5"),
    ],
)
def test_files_that_are_no_data(tmp_path, content, says):
    path = tmp_path / "trace.csv"
    path.write_bytes(content)
    with pytest.raises(InputError) as caught:
        read(path)
    assert says in str(caught.value)
    assert str(caught.value).startswith(str(path))


def test_missing_folder_and_unreadable(tmp_path):
    with pytest.raises(InputError, match="there is no such file"):
        read(tmp_path / "none.csv")
    with pytest.raises(InputError, match="is a folder"):
        read(tmp_path)
    with pytest.raises(InputError, match="cannot be read"):
        read("bad\0name")
    fifo = tmp_path / "pipe"
    os.mkfifo(fifo)
    with pytest.raises(InputError, match="not a regular file"):
        read(fifo)


@pytest.fixture(scope="module")
def scratch(tmp_path_factory):
    return tmp_path_factory.mktemp("scratch")


pieces = st.sampled_from(
    ["1", "2.5", "-3e5", ",", ";", "\t", " ", "\n", "#", "%", "nan", "inf", "##", "=", "TITLE", "XYDATA", "(X++(Y..Y))",
     "(XY..XY)", "NPOINTS", "FIRSTX", "LASTX", "XYPOINTS", "$$", "A1", "J3", "S2", "%", "?", "END", "\r", "é",
     "\ufeff", "\x00", "##TITLE=x\n", "##FIRSTX=1\n", "##LASTX=2\n", "##NPOINTS=3\n", "##XYDATA=(X++(Y..Y))\n",
     "field/mT", "frequency 9 GHz"]
)  # fmt: skip


@settings(derandomize=True, deadline=None, max_examples=400, suppress_health_check=[HealthCheck.too_slow])
@given(
    content=st.one_of(
        st.binary(max_size=300),
        st.text(max_size=300).map(lambda t: t.encode("utf-8", "surrogatepass")),
        st.lists(pieces, max_size=40).map(lambda p: "".join(p).encode()),
        st.binary(max_size=200).map(lambda b: b"\x89HDF\r\n\x1a\n" + b),
    ),
    suffix=st.sampled_from([".csv", ".jdx", ".h5", ""]),
)
def test_any_bytes_give_a_trace_or_an_input_error(scratch, content, suffix):
    path = scratch / f"any{suffix}"
    path.write_bytes(content)
    try:
        raw = read(path)
    except InputError as caught:
        message = str(caught)
    else:
        message = ""
        assert isinstance(raw, RawTrace)
        assert raw.columns.ndim == 2
        assert raw.columns.shape[1] == len(raw.names) == len(raw.units) >= 2
        assert len(raw.columns) >= 1
        assert np.isfinite(raw.columns).all()
    assert len(message.splitlines()) <= 1


@settings(derandomize=True, deadline=None, max_examples=400)
@given(st.text("12.-+eE,; \t#%x", max_size=12))
def test_a_line_of_plain_numbers_is_seen_at_once(line):
    """The short way of telling a line of numbers against the long one."""
    quick = text_module._looks_numeric(text_module._without_comment(line)), text_module._without_comment(line)
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(text_module, "_ROW", re.compile("(?!)"))
        slow = text_module._looks_numeric(text_module._without_comment(line)), text_module._without_comment(line)
    assert quick == slow
