"""Writing: whole or not at all, and back to the same numbers in every format."""

from __future__ import annotations

import io
import os
import stat

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from spinfit.errors import InputError
from spinfit.files.atomic import whole_file, write_bytes, write_text
from spinfit.files.curves import csv_text, write_spectrum
from spinfit.files.reading import assemble, read

finite = st.floats(-1e9, 1e9, allow_subnormal=False)


@settings(derandomize=True, deadline=None, max_examples=60)
@given(
    signal=st.lists(finite, min_size=2, max_size=30),
    suffix=st.sampled_from([".csv", ".jdx", ".h5"]),
    even=st.booleans(),
)
def test_round_trip(tmp_path_factory, signal, suffix, even):
    path = tmp_path_factory.getbasetemp() / f"round{suffix}"
    x = np.linspace(300.0, 360.0, len(signal)) if even else 300.0 + np.arange(len(signal)) ** 1.3
    header = {"frequency": 9432.1, "temperature": 120.0, "microwave": "parallel", "detect": "absorption"}
    write_spectrum(path, x, signal, None, header)
    one = read(path)
    result = assemble(one, mask_glitches=False)
    np.testing.assert_array_equal(result.field, x)
    np.testing.assert_array_equal(result.signal, signal)
    assert {key: one.header[key] for key in header} == header
    assert one.notes == ()


def test_csv_is_plain(tmp_path):
    write_spectrum(tmp_path / "a.csv", [1.0, 2.0], [0.1, -3e-7])
    assert (tmp_path / "a.csv").read_text() == "field_mT,signal\n1.0,0.1\n2.0,-3e-07\n"
    frame = pd.read_csv(io.StringIO(csv_text({"field_mT": [1.0], "measured": [2.0], "fitted": [3.0]})))
    assert list(frame.columns) == ["field_mT", "measured", "fitted"]


def test_unknown_suffix(tmp_path):
    with pytest.raises(InputError, match=r'"\.xls" is not a format to write; end the name in \.csv, \.jdx, \.h5'):
        write_spectrum(tmp_path / "a.xls", [1.0, 2.0], [1.0, 2.0])
    assert list(tmp_path.iterdir()) == []


def test_failure_leaves_the_old_file_and_nothing_beside_it(tmp_path):
    path = tmp_path / "a.csv"
    path.write_text("old")

    def fail():
        with whole_file(path) as beside:
            beside.write_text("half")
            assert path.read_text() == "old"
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        fail()
    assert path.read_text() == "old"
    assert list(tmp_path.iterdir()) == [path]
    with whole_file(path) as beside:
        beside.write_text("new")
    assert path.read_text() == "new"
    assert list(tmp_path.iterdir()) == [path]


def test_permissions_follow_the_umask(tmp_path):
    mask = os.umask(0o027)
    try:
        write_text(tmp_path / "a", "x")
    finally:
        os.umask(mask)
    assert stat.S_IMODE((tmp_path / "a").stat().st_mode) == 0o640


def test_links_stay_links_and_devices_are_written_to(tmp_path):
    (tmp_path / "real").write_text("old")
    (tmp_path / "link").symlink_to(tmp_path / "real")
    write_text(tmp_path / "link", "new")
    assert (tmp_path / "link").is_symlink()
    assert (tmp_path / "real").read_text() == "new"
    write_bytes(os.devnull, b"gone")


def test_places_that_cannot_be_written(tmp_path):
    with pytest.raises(InputError, match="there is no folder"):
        write_text(tmp_path / "none" / "a", "x")
    with pytest.raises(InputError, match="is a folder"):
        write_text(tmp_path, "x")
    (tmp_path / "file").write_text("")
    with pytest.raises(InputError, match="there is no folder"):
        write_text(tmp_path / "file" / "a", "x")
    with pytest.raises(InputError):
        write_text(tmp_path / ("a" * 300), "x")
