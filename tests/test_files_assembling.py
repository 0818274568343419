"""From columns to an ordered sweep: units, directions, repeated fields, glitches that are and lines that are not."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from spinfit.errors import InputError
from spinfit.files.raw import RawTrace
from spinfit.files.reading import assemble, read
from spinfit.files.sweeps import find_foreign, find_runs, find_spikes, find_unrepeated, lag, noise_level

SHARED = Path(__file__).resolve().parents[2] / "shared"
RUBY = SHARED / "ruby"
BLIND = SHARED / "blind"
needs_ruby = pytest.mark.skipif(not RUBY.is_dir(), reason="the measured crystal rotation is not here")
needs_blind = pytest.mark.skipif(not BLIND.is_dir(), reason="the traces with withheld values are not here")


def raw(x, y, *, names=("field", "signal"), units=("mT", ""), more=()):
    columns = np.column_stack([x, y, *more])
    return RawTrace(columns, names, units, file="f.csv")


def codes(result):
    return [code for code, _ in result.notes]


def gaussian(x, centre, fwhm):
    return np.exp(-4 * np.log(2) * ((x - centre) / fwhm) ** 2)


def lorentzian(x, centre, fwhm):
    return 1 / (1 + (2 * (x - centre) / fwhm) ** 2)


# Units, calibration, columns


def test_units_of_the_file_and_of_the_job():
    x, y = np.array([3300.0, 3301.0]), np.array([1.0, 2.0])
    np.testing.assert_array_equal(assemble(raw(x, y, units=("G", ""))).field, [330.0, 330.1])
    result = assemble(raw(x, y, units=("G", "")), field_unit="mT")
    np.testing.assert_array_equal(result.field, x)
    assert codes(result) == ["field_unit"]
    assert codes(assemble(raw(x, y, units=("", "")), field_unit="mT")) == []


def test_calibration():
    volts, y = np.array([1.0, 2.0]), np.array([1.0, 2.0])
    no_unit, millivolt = raw(volts, y, units=("", "")), raw(1e3 * volts, y, units=("mV", ""))
    for one in (no_unit, millivolt):
        np.testing.assert_allclose(assemble(one, field_calibration=(216.0, 3.0)).field, [219.0, 435.0], rtol=1e-15)
    falling = assemble(no_unit, field_calibration=(-216.0, 500.0))
    np.testing.assert_allclose(falling.field, [68.0, 284.0])
    np.testing.assert_array_equal(falling.signal, [2.0, 1.0])


def test_columns():
    x, y, z = np.arange(3.0), np.arange(3.0) ** 2, np.ones(3)
    three = raw(y, x, more=(z,), names=("", "", ""), units=("", "", ""))
    result = assemble(three, columns={"field": 2, "signal": 1}, field_unit="mT")
    np.testing.assert_array_equal(result.signal, y)
    named = raw(z, x, more=(y,), names=("time", "field", "signal"), units=("s", "mT", ""))
    np.testing.assert_array_equal(assemble(named).signal, y)
    two = raw(y, x, names=("", ""), units=("", "mT"))
    np.testing.assert_array_equal(assemble(two, columns={"signal": 1}).field, x)
    unknown = raw(x, y, more=(z,), names=("field", "chopped", "other"), units=("mT", "", ""))
    assert codes(assemble(unknown)) == ["columns"]


@pytest.mark.parametrize(
    ("units", "keywords", "says"),
    [
        (("", ""), {}, 'f.csv: field_unit: the file gives no unit for its field; write field_unit = "mT"'),
        (("Hz", ""), {}, 'field_unit: the field column\'s unit "Hz" is no field'),
        (("V", ""), {}, "field_calibration: the field column is in V"),
        (("", ""), {"field_unit": "mm"}, '"mm" is not a unit of field'),
        (("", ""), {"field_unit": "mT", "field_calibration": (1.0, 0.0)}, "write one of them"),
        (("", ""), {"field_calibration": (0.0, 0.0)}, "a slope that is not 0"),
        (("mT", ""), {"columns": {"field": 3}}, "columns.field: there is no column"),
        (("mT", ""), {"columns": {"signal": 0}}, "columns.signal: there is no column"),
        (("mT", ""), {"columns": {"feild": 1}}, 'did you mean "field"?'),
        (("mT", ""), {"columns": {"field": 2, "signal": 2}}, "both field and signal"),
        (("mT", ""), {"direction": "down"}, "direction: the field only goes up"),
        (("mT", ""), {"direction": "sideways"}, 'direction: "sideways" is not known'),
        (("mT", ""), {"fit_range": (5.0, 1.0)}, "fit_range: 5 to 1 mT; write the smaller field first"),
        (("mT", ""), {"fit_range": (500.0, 600.0)}, "the trace covers 0 to 9 mT"),
        (("mT", ""), {"exclude": [(-1.0, 100.0)]}, "exclude: no point is left"),
    ],
)
def test_refusals(units, keywords, says):
    one = raw(np.arange(10.0), np.arange(10.0), units=units)
    with pytest.raises(InputError) as caught:
        assemble(one, **keywords)
    assert says in str(caught.value)
    assert "\n" not in str(caught.value)


def test_windows():
    x = np.arange(10.0)
    result = assemble(raw(x, x), fit_range=(2.0, 8.0), exclude=[(3.0, 4.0), (7.5, 9.0)])
    np.testing.assert_array_equal(x[result.used], [2.0, 5.0, 6.0, 7.0])
    assert len(result.field) == 10


# Order of the points


@settings(derandomize=True, deadline=None)
@given(st.lists(st.tuples(st.integers(-50, 50), st.floats(-1e3, 1e3)), min_size=2, max_size=60))
def test_any_order_comes_out_increasing_with_repeats_averaged(points):
    x, y = np.array(points, dtype=float).T
    if len(np.unique(x)) < 2:
        return
    result = assemble(raw(x, y), mask_glitches=False)
    assert (np.diff(result.field) > 0).all()
    left_out = {i for code, _ in result.notes if code == "stray_fields" for i in range(len(x))}
    if not left_out:
        np.testing.assert_array_equal(result.field, np.unique(x))
        expected = [y[x == b].mean() for b in result.field]
        np.testing.assert_allclose(result.signal, expected, rtol=1e-12, atol=1e-9)


def up_and_down(n=2000, jitter=0.02, seed=3, tail=300):
    """A triangle in time with a noisy reading and a wait at its foot, as a home-built spectrometer records it."""
    rng = np.random.default_rng(seed)
    triangle = np.concatenate([np.linspace(0, 500, n), np.linspace(500, 0, n)[1:], np.zeros(tail)])
    return triangle + rng.normal(size=len(triangle)) * jitter, n


@pytest.mark.parametrize("jitter", [0.0, 0.02, 0.5])
def test_up_and_down_parts(jitter):
    x, n = up_and_down(jitter=jitter)
    y = np.where(np.arange(len(x)) < n, 1.0, -1.0)
    near_turn = 500 - 10 * jitter - 1
    for direction, value in (("up", 1.0), ("down", -1.0)):
        result = assemble(raw(x, y), direction=direction, mask_glitches=False)
        assert (result.signal[result.field < near_turn][5:] == value).mean() > 0.99
        assert abs(np.sum(result.field > 100) - 0.8 * n) < 20
    assert "sweeps" in codes(assemble(raw(x, y), mask_glitches=False))


def test_runs_of_an_interrupted_recording():
    one, two = np.linspace(0, 390, 3800), np.linspace(0, 520, 5000)
    x = np.concatenate([one, two, two[::-1]])
    runs, stray = find_runs(x)
    assert [(r.start, r.stop, r.direction) for r in runs] == [
        (0, 3800, "up"),
        (3800, 8800, "up"),
        (8800, 13800, "down"),
    ]
    assert not stray.any()


def test_stray_field_readings_are_left_out():
    x = np.linspace(300, 400, 1001)
    x[[200, 700]] = [900.0, -50.0]
    result = assemble(raw(x, np.ones(1001)))
    assert len(result.field) == 999
    assert result.field[-1] == 400.0
    assert "stray_fields" in codes(result)


def test_shuffled_points_are_sorted_and_told():
    rng = np.random.default_rng(5)
    x = np.linspace(300, 400, 500)
    order = rng.permutation(500)
    result = assemble(raw(x[order], np.sin(x)[order]))
    np.testing.assert_array_equal(result.signal, np.sin(x))
    assert codes(result) == ["unsorted"]
    with pytest.raises(InputError, match="stands in no order"):
        assemble(raw(x[order], np.sin(x)[order]), direction="up")


def test_uneven_spacing_is_kept():
    x = np.concatenate([np.linspace(300, 320, 50), np.linspace(320.1, 321, 200), np.linspace(330, 400, 30)])
    result = assemble(raw(x, np.sin(x)))
    np.testing.assert_array_equal(result.field, x)
    assert result.used.all()
    assert codes(result) == []


# Glitches


def test_noise_level():
    rng = np.random.default_rng(7)
    x = np.arange(20000.0)
    for signal in (np.zeros_like(x), 500 * gaussian(x, 1e4, 300), 1e-3 * x):
        # A median absolute deviation of n points is good to about 1.2/sqrt(n); 5 of these.
        assert noise_level(signal + 2.0 * rng.normal(size=len(x))) == pytest.approx(
            2.0, rel=5 * 1.2 / np.sqrt(len(x)) * 2
        )


@settings(derandomize=True, deadline=None, max_examples=200)
@given(
    shape=st.sampled_from([gaussian, lorentzian]),
    fwhm=st.floats(2.0, 30.0),
    offset=st.floats(0.0, 1.0),
    height=st.sampled_from([5.0, 10.0, 20.0, 50.0, 200.0, 1e4]),
    noise=st.sampled_from([0.0, 1.0]),
    derivative=st.booleans(),
    seed=st.integers(0, 10**6),
)
def test_no_line_of_two_points_or_more_is_a_glitch(shape, fwhm, offset, height, noise, derivative, seed):
    x = np.arange(200.0)
    line = shape(x, 100 + offset, fwhm)
    if derivative:
        h = 1e-4
        line = (shape(x + h, 100 + offset, fwhm) - shape(x - h, 100 + offset, fwhm)) / (2 * h)
        line = line / np.abs(line).max()
    signal = height * line + noise * np.random.default_rng(seed).normal(size=len(x))
    assert not find_spikes(signal).any()


@pytest.mark.parametrize("noise", [0.0, 1.0])
def test_steps_ramps_and_coarse_digits_are_no_glitches(noise):
    x = np.arange(300.0)
    e = noise * np.random.default_rng(11).normal(size=300)
    for signal in (
        100.0 * (x > 150),
        100.0 * (x > 150) + 30.0 * (x > 152),
        10.0 * x,
        np.maximum(x - 150, 0) * 50,
        50 * np.exp((x - 299) / 5),
        np.round(0.6 * np.sin(x / 20)),
    ):
        assert not find_spikes(signal + e).any()
    assert not find_spikes(np.where(x == 100, 1.0, 0.0)).any()  # one digit of a coarse digitiser


@settings(derandomize=True, deadline=None, max_examples=100)
@given(
    where=st.integers(5, 290),
    height=st.sampled_from([-40.0, 40.0, 300.0]),
    pair=st.booleans(),
    seed=st.integers(0, 999),
)
def test_single_and_double_glitches_are_found(where, height, pair, seed):
    x = np.arange(300.0)
    signal = 30 * gaussian(x, 150, 60) + np.random.default_rng(seed).normal(size=300)
    signal[where : where + 1 + pair] += height
    expected = np.zeros(300, dtype=bool)
    expected[where : where + 1 + pair] = True
    np.testing.assert_array_equal(find_spikes(signal), expected)


def test_glitches_are_masked_and_told():
    x = np.linspace(330, 340, 500)
    y = gaussian(x, 335, 0.5) + 0.01 * np.random.default_rng(13).normal(size=500)
    y[123] += 3
    result = assemble(raw(x, y))
    assert not result.used[123]
    assert result.used.sum() == 499
    (note,) = result.notes
    assert note[0] == "glitches"
    assert f"{x[123]:.2f} mT" in note[1]
    assert assemble(raw(x, y), mask_glitches=False).used.all()


def test_lag_between_sweeps():
    x = np.linspace(300, 350, 3000)
    rng = np.random.default_rng(17)
    for shift in (-0.3, 0.0, 0.12):
        a = np.gradient(gaussian(x, 325, 2.0)) + 1e-4 * rng.normal(size=3000)
        b = np.gradient(gaussian(x, 325 + shift, 2.0)) + 1e-4 * rng.normal(size=3000)
        assert lag((x, a), (x, b)) == pytest.approx(shift, abs=0.01)
    assert lag((x, rng.normal(size=3000)), (x, rng.normal(size=3000))) is None


def two_sweeps(rng, fwhm=1.0, second=1.0):
    x = np.linspace(300, 350, 2500)
    sweeps = []
    for shift, scale in ((0.2, 1.0), (-0.2, second)):
        y = 40 * np.gradient(gaussian(x, 320 + shift, fwhm), x) * fwhm + scale * 30 * gaussian(x, 335 + shift, fwhm)
        sweeps.append(y + rng.normal(size=len(x)) + 0.1 * (x - 300) * (shift > 0))
    return x, *sweeps


@pytest.mark.parametrize("fwhm", [0.1, 0.5, 3.0])
@pytest.mark.parametrize("second", [1.0, 0.3])
def test_lines_in_both_sweeps_are_no_glitches(fwhm, second):
    x, up, down = two_sweeps(np.random.default_rng(19), fwhm, second)
    assert not find_unrepeated((x, up), (x, down)).any()
    assert not find_unrepeated((x, down), (x, up)).any()


def test_what_one_sweep_alone_shows_is_a_glitch():
    x, up, down = two_sweeps(np.random.default_rng(23))
    knock = 30 * gaussian(x, 342, 0.15) - 25 * gaussian(x, 342.2, 0.15)  # some eight points wide
    found = find_unrepeated((x, up + knock), (x, down))
    assert found[np.abs(knock) > 15].all()
    assert not found[np.abs(x - 342.1) > 1].any()
    assert not find_unrepeated((x, down), (x, up + knock)).any()  # the other sweep is not to blame
    both = assemble(raw(np.concatenate([x, x[::-1] + 0.003]), np.concatenate([up + knock, down[::-1]])))
    near = np.abs(both.field - 342.1) < 0.3
    assert both.glitch[near].any()
    assert not both.glitch[~near].any()
    assert {"sweeps", "glitches", "sweep_lag"} <= set(codes(both))


def test_sweeps_that_differ_altogether_are_left_alone():
    x, up, down = two_sweeps(np.random.default_rng(29))
    assert not find_unrepeated((x, up + 50 * gaussian(x, 310, 8)), (x, down)).any()


def test_a_sweep_that_two_others_contradict():
    x, up, down = two_sweeps(np.random.default_rng(31))
    wrong = (x[:1000], 10.0 * (x[:1000] - 300))
    assert find_foreign([(x, up), wrong, (x, down)]) == [1]
    assert find_foreign([(x, up), wrong]) == []  # one against one: nobody knows
    assert find_foreign([(x, up), (x, down), (x, up + 40)]) == []  # an offset is no contradiction


# Real recordings


@needs_ruby
@pytest.mark.parametrize("angle", ["090", "100", "110", "120", "140", "150", "160", "170", "180"])
def test_measured_up_and_down_sweeps(angle):
    one = read(RUBY / f"angle_{angle}.txt")
    np.testing.assert_array_equal(one.columns, np.loadtxt(RUBY / f"angle_{angle}.txt"))
    keywords = {"columns": {"field": 2, "signal": 1}, "field_calibration": (216.0, 3.0)}
    up, down = (assemble(one, direction=d, **keywords) for d in ("up", "down"))
    for part in (up, down):
        assert (np.diff(part.field) > 0).all()
        assert part.field[-1] > 518
        assert part.glitch.mean() < 0.01
        # Sorting a noisy gaussmeter leaves steps near the sweep's own 0.1 mT.
        assert np.diff(part.field).max() < 0.5
    lines = np.abs(up.signal) > 0.3 * np.abs(up.signal).max()
    if np.abs(up.signal).max() > 0.2:  # strong lines: none of their points is a glitch, and both sweeps agree on them
        assert not up.glitch[lines].any()
        back = np.interp(up.field, down.field, down.signal)
        assert abs(up.field[up.signal.argmax()] - up.field[back.argmax()]) < 1.0


@needs_ruby
def test_measured_recording_with_an_aborted_start():
    one = read(RUBY / "angle_130.txt")
    result = assemble(one, columns={"field": 2, "signal": 1}, field_calibration=(216.0, 3.0))
    assert {"foreign_sweep", "glitches", "sweeps", "sweep_lag"} <= set(codes(result))
    assert np.abs(result.signal[result.used & (result.field < 200)]).max() < 0.1


@needs_blind
@pytest.mark.parametrize(
    ("name", "points", "span", "frequency"),
    [
        ("glass_copper.csv", 1601, (234.95001, 364.95001), 9400.05),
        ("standard_organic_radical.csv", 801, (324.95001, 344.95001), 9400.05),
        ("resin_radical.jdx", 1200, (1204.0, 1226.0), 34079.168),
        ("dye_triplet.txt", 2001, (130.0, 470.0), 9372.8),
        ("glaze_chromium.csv", 1801, (120.0, 620.0), 9477.11),
        ("amber_iron.csv", 2401, (60.0, 460.0), 9425.75),
    ],
)
def test_traces_of_the_laboratory(name, points, span, frequency):
    one = read(BLIND / name)
    result = assemble(one)
    assert one.header["frequency"] == pytest.approx(frequency, rel=1e-12)
    assert len(result.field) == points == result.used.sum()
    assert (result.field[0], result.field[-1]) == pytest.approx(span, rel=1e-12)


@needs_blind
def test_line_positions_of_the_laboratory():
    one = read(BLIND / "crystal_lines.csv")
    assert one.names == ("angle", "field")
    assert one.units == ("deg", "mT")
    assert one.columns.shape == (71, 2)
