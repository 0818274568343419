"""JCAMP-DX: the standard's own example of its forms, an independent encoder, and the general-purpose jcamp package."""

from __future__ import annotations

import contextlib
import io

import jcamp
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from spinfit.errors import InputError
from spinfit.files.curves import jcamp_text
from spinfit.files.jcamp import read_jcamp


def block(table, *, first=0.0, last=None, n=None, form="(X++(Y..Y))", label="XYDATA", extra=(), delta=None):
    """Write one block around the lines of a table."""
    labels = ["##TITLE= a sample", "##JCAMP-DX= 5.01", "##DATA TYPE= EMR SPECTRUM", *extra]
    labels.append("##XUNITS= MILLITESLA")
    for name, value in (("FIRSTX", first), ("LASTX", last), ("DELTAX", delta), ("NPOINTS", n)):
        if value is not None:
            labels.append(f"##{name}= {value!r}")
    return "\n".join([*labels, f"##{label}= {form}", *table, "##END=", ""])


def read(text):
    return read_jcamp(text.encode(), "f")


@pytest.mark.parametrize(
    "line",
    [
        "0 1 2 3 3 2 1 0 -1 -2 -3",  # AFFN
        "0+1+2+3+3+2+1+0-1-2-3",  # PAC
        "0 1BCCBA@abc",  # SQZ
        "0ABCCBA@abc",
        "0 1JJ%jjjjjj",  # DIF
        "0AJJ%jjjjjj",
        "0 1JJ%jX",  # DIF and DUP
    ],
)
def test_example_of_the_standard(line):
    # R. S. McDonald, P. A. Wilks, Appl. Spectrosc. 42, 151 (1988), the table of ordinate forms (from memory).
    raw = read(block([line], last=9.0, n=10))
    np.testing.assert_array_equal(raw.columns[:, 1], [1, 2, 3, 3, 2, 1, 0, -1, -2, -3])
    np.testing.assert_array_equal(raw.columns[:, 0], np.arange(10.0))
    assert raw.units[0] == "mT"
    assert raw.notes == ()


SQZ, DIF = "@ABCDEFGHI", "%JKLMNOPQR"
SQZ_MINUS, DIF_MINUS, DUP = "@abcdefghi", "%jklmnopqr", " STUVWXYZs"


def coded(value, plus, minus):
    """Write a whole number with its leading digit and sign replaced by one letter."""
    digits = str(abs(value))
    return (minus if value < 0 else plus)[int(digits[0])] + digits[1:]


def repeated(tokens):
    """Replace runs of the same token by one and a count."""
    out, i = "", 0
    while i < len(tokens):
        j = i
        while j < len(tokens) and tokens[j] == tokens[i]:
            j += 1
        count = str(j - i)
        out += tokens[i] + (DUP[int(count[0])] + count[1:] if j - i > 1 else "")
        i = j
    return out


def encode(values, form, per_line):
    """Write whole ordinates in lines, abscissas 0, 1, 2, ...; the standard's rules, written apart from the reader."""
    lines, start = [], 0
    while start < len(values):
        part = values[start : start + per_line]
        if form == "AFFN":
            lines.append(f"{start} " + " ".join(map(str, part)))
        elif form == "PAC":
            lines.append(f"{start}" + "".join(f"{v:+d}" for v in part))
        elif form in ("SQZ", "SQZDUP"):
            tokens = [coded(v, SQZ, SQZ_MINUS) for v in part]
            lines.append(f"{start}" + (repeated(tokens) if form == "SQZDUP" else "".join(tokens)))
        else:  # a line of differences is followed by one that begins with the last ordinate again, as a check
            tokens = [coded(int(b) - int(a), DIF, DIF_MINUS) for a, b in zip(part[:-1], part[1:], strict=True)]
            body = repeated(tokens) if form == "DIFDUP" else "".join(tokens)
            lines.append(f"{start}" + coded(part[0], SQZ, SQZ_MINUS) + body)
            if start + per_line >= len(values):
                break
            start += per_line - 1 if len(part) > 1 else 1
            continue
        start += per_line
    return lines


whole = st.lists(st.one_of(st.integers(-5, 5), st.integers(-(10**9), 10**9)), min_size=2, max_size=60)


@settings(derandomize=True, deadline=None, max_examples=200)
@given(
    values=whole,
    form=st.sampled_from(["AFFN", "PAC", "SQZ", "SQZDUP", "DIF", "DIFDUP"]),
    per_line=st.integers(2, 12),
    yfactor=st.sampled_from([None, 0.5, 2.0**-20]),
)
def test_every_form_round_trips(values, form, per_line, yfactor):
    extra = [] if yfactor is None else [f"##YFACTOR= {yfactor!r}"]
    raw = read(block(encode(values, form, per_line), last=len(values) - 1.0, n=len(values), extra=extra))
    np.testing.assert_array_equal(raw.columns[:, 1], np.array(values) * (yfactor or 1.0))
    np.testing.assert_array_equal(raw.columns[:, 0], np.arange(len(values)))
    assert raw.notes == ()


@settings(derandomize=True, deadline=None, max_examples=60)
@given(values=st.lists(st.integers(-(10**6), 10**6), min_size=4, max_size=40), form=st.sampled_from(["AFFN", "DIFDUP"]))
def test_same_numbers_as_the_jcamp_package(values, form):
    text = block(encode(values, form, 7), last=len(values) - 1.0, n=len(values))
    with contextlib.redirect_stdout(io.StringIO()):  # the package prints its checks
        other = jcamp.read(text.splitlines(keepends=True))
    ours = read(text).columns
    np.testing.assert_array_equal(ours[:, 0], other["x"])
    np.testing.assert_array_equal(ours[:, 1], other["y"])


@settings(derandomize=True, deadline=None, max_examples=60)
@given(
    signal=st.lists(st.floats(-1e6, 1e6, allow_subnormal=False), min_size=2, max_size=30),
    even=st.booleans(),
)
def test_what_we_write_the_jcamp_package_reads(signal, even):
    x = np.linspace(330.0, 340.0, len(signal)) if even else 330.0 + np.arange(len(signal)) ** 1.5
    text = jcamp_text(x, np.array(signal), ("field", "signal"), {"frequency": 9400.05})
    ours = read(text)
    with contextlib.redirect_stdout(io.StringIO()):
        other = jcamp.read(text.splitlines(keepends=True))
    for numbers in (ours.columns.T, (other["x"], other["y"])):
        np.testing.assert_allclose(numbers[0], x, rtol=1e-15)
        np.testing.assert_array_equal(numbers[1], signal)
    assert ours.header["frequency"] == 9400.05
    assert ours.notes == ()
    assert max(map(len, text.splitlines())) <= 80  # the standard's line length


def test_pairs():
    text = block(
        ["1.0, 10; 2.0, 20", "4.0 40"], form="(XY..XY)", label="XYPOINTS", extra=["##XFACTOR= 2.0", "##YFACTOR= 0.5"]
    )
    np.testing.assert_array_equal(read(text).columns, [[2.0, 5.0], [4.0, 10.0], [8.0, 20.0]])
    text = block(["1.0 10", "2.0 20"], form="(XY..XY)", label="PEAK TABLE", n=2)
    np.testing.assert_array_equal(read(text).columns, [[1.0, 10.0], [2.0, 20.0]])


def test_rounded_abscissas_of_the_lines_do_not_matter():
    x = np.linspace(1204.0, 1226.0, 1200)
    lines = [f"{x[i]:.2f} " + " ".join(str(k) for k in range(i, min(i + 8, 1200))) for i in range(0, 1200, 8)]
    raw = read(block(lines, first=1204.0, last=1226.0, n=1200, delta=0.0183))
    np.testing.assert_array_equal(raw.columns[:, 0], x)
    assert [code for code, _ in raw.notes] == []


@pytest.mark.parametrize(
    ("keywords", "table", "code"),
    [
        ({"last": 3.0, "n": 5}, ["0 1 2 3 4"], "jcamp_points"),
        ({"last": 3.0, "n": 4}, ["0 1 2", "1 3 4"], None),  # one step of doubt is allowed
        ({"last": 3.0, "n": 4}, ["0 1 2", "9 3 4"], "jcamp_abscissa"),
        ({"last": 3.0, "n": 4, "delta": 2.0}, ["0 1 2 3 4"], "jcamp_step"),
        ({"last": 3.0, "n": 4}, ["0AJJ", "2DJ"], "jcamp_check"),
        ({"last": 4.0, "n": 5}, ["0ABC?E"], "jcamp_missing"),
    ],
)
def test_contradictions_are_told(keywords, table, code):
    notes = [c for c, _ in read(block(table, **keywords)).notes]
    assert notes == ([] if code is None else [code])


def test_missing_labels_fall_back():
    np.testing.assert_array_equal(read(block(["5 1 2 3"], first=5.0, delta=0.5)).columns[:, 0], [5.0, 5.5, 6.0])
    raw = read(block(["5 1 2", "7 3 4"], first=None))
    np.testing.assert_array_equal(raw.columns[:, 0], [5.0, 6.0, 7.0, 8.0])
    assert [c for c, _ in raw.notes] == ["jcamp_step"]


@pytest.mark.parametrize(
    ("label", "key", "value", "noted"),
    [
        ("##.MICROWAVE FREQUENCY= 34.079168", "frequency", 34079.168, False),
        ("##.MICROWAVE FREQUENCY= 9400.05", "frequency", 9400.05, True),
        ("##.MICROWAVE_FREQUENCY= 9.4 GHz", "frequency", 9400.0, False),
        ("##.MICROWAVE FREQUENCY= 9.4E+09", "frequency", 9400.0, True),
        ("##.MODULATION AMPLITUDE= 1 G", "modulation", 0.1, False),
        ("##$TEMPERATURE= 77 K", "temperature", 77.0, False),
        ("$$ temperature 77 K", "temperature", 77.0, False),
        ("##COMMENTS= first line\nfrequency 9.5 GHz", "frequency", 9500.0, False),
    ],
)
def test_conditions(label, key, value, noted):
    raw = read(block(["0 1 2"], last=1.0, n=2, extra=label.split("\n")))
    assert raw.header[key] == pytest.approx(value, rel=1e-12)
    assert bool(raw.notes) == noted


def test_compound_file_gives_its_first_block():
    one, two = block(["0 1 2"], last=1.0, n=2), block(["0 3 4"], last=1.0, n=2)
    raw = read(f"##TITLE= all\n##DATA TYPE= LINK\n##BLOCKS= 2\n{one}{two}##END=\n")
    np.testing.assert_array_equal(raw.columns[:, 1], [1.0, 2.0])
    assert [c for c, _ in raw.notes] == ["jcamp_blocks"]


def test_comments_blank_lines_and_decimal_commas():
    text = block(["0 1 2 $$ a remark", "", "$$ another", "2 3 4"], last=3.0, n=4)
    np.testing.assert_array_equal(read(text).columns[:, 1], [1.0, 2.0, 3.0, 4.0])
    comma = block(["0,0 1,5 2,5", "2,0 3,5"], last=2, n=3).replace("FIRSTX= 0.0", "FIRSTX= 0,0")
    np.testing.assert_array_equal(read(comma).columns, [[0.0, 1.5], [1.0, 2.5], [2.0, 3.5]])


def test_a_file_cut_short_says_so():
    raw = read(block(["0 1 2", "2 3 4"], last=5.0, n=6).replace("##END=\n", ""))
    np.testing.assert_array_equal(raw.columns[:, 0], [0.0, 1.0, 2.0, 3.0])  # the spacing stays that of the header
    assert {c for c, _ in raw.notes} == {"jcamp_points", "jcamp_end"}


def test_exponent_or_squeezed_digit():
    np.testing.assert_array_equal(read(block(["0 1E+02 2.5e3 3"], last=2.0, n=3)).columns[:, 1], [100.0, 2500.0, 3.0])
    np.testing.assert_array_equal(read(block(["0E12E", "2e1"], last=2.0, n=3)).columns[:, 1], [512.0, 5.0, -51.0])


@pytest.mark.parametrize(
    ("text", "says"),
    [
        (block(["0 1 !"], last=1.0, n=2), 'line 9: "!" is no ordinate'),
        (block(["x 1 2"], last=1.0, n=2), "begins with no number"),
        (block(["0J"], last=1.0, n=2), "begins with a difference"),
        (block(["0S2"], last=1.0, n=2), "repeats nothing"),
        (block(["0AZ999999999999"], last=1.0, n=2), "repeats nothing"),
        (block(["0AT000000"], last=1.0, n=2), "repeats an ordinate too often"),
        (block(["07+.?"], last=1.0, n=2), "is no ordinate"),  # found by the fuzzer: a sign and a point, no digit
        (block([], last=1.0, n=2), "XYDATA is empty"),
        (block(["0 1 2"], last=0.0, n=2), "FIRSTX and LASTX are equal"),
        (block(["0 1 2"], last=float("inf"), n=2), "LASTX"),
        (block(["1 2 3"], form="(XY..XY)"), "is not made of pairs"),
        (block(["1 2 3"], form="(XYZ)"), "is not read"),
        ("##TITLE= x\n##NTUPLES= y\n##END=\n", "holds NTUPLES"),
        ("##TITLE= x\n##END=\n", "holds no table"),
    ],
)
def test_refusals(text, says):
    with pytest.raises(InputError) as caught:
        read(text)
    assert says in str(caught.value)
    assert "\n" not in str(caught.value)
