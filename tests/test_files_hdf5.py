"""HDF5: NXdata in its forms, written by h5py; links that leave the file and odd datasets are refused."""

from __future__ import annotations

import h5py
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from spinfit.errors import InputError
from spinfit.files.curves import write_nxdata, write_spectrum
from spinfit.files.reading import read

X, Y = np.linspace(3300.0, 3400.0, 11), np.arange(11.0) ** 2


def nexus(path, *, axes="B", signal="signal", default=True, units="G", x=X, y=Y):
    """Write a file by the convention."""
    with h5py.File(path, "w") as root:
        entry = root.create_group("entry")
        entry.attrs["NX_class"] = "NXentry"
        data = entry.create_group("data")
        data.attrs["NX_class"] = "NXdata"
        if default:
            root.attrs["default"], entry.attrs["default"] = "entry", "data"
        data.attrs["signal"], data.attrs["axes"] = signal, axes
        data.create_dataset("B", data=x).attrs["units"] = units
        data["signal"] = y
        entry.create_dataset("frequency", data=9.4).attrs["units"] = "GHz"
        sample = entry.create_group("sample")
        sample.attrs["NX_class"] = "NXsample"
        sample.create_dataset("temperature", data=77.0).attrs["units"] = "K"
    return path


@pytest.mark.parametrize("axes", ["B", ["B"], np.array(["B"], dtype=object), np.array([b"B"])])
@pytest.mark.parametrize("default", [True, False])
def test_convention(tmp_path, axes, default):
    raw = read(nexus(tmp_path / "a.h5", axes=axes, default=default))
    np.testing.assert_array_equal(raw.columns, np.column_stack([X, Y]))
    assert raw.names == ("B", "signal")
    assert raw.units == ("G", "")
    assert raw.header == {"frequency": 9400.0, "temperature": 77.0}
    assert raw.format == "HDF5"
    assert raw.notes == ()


def test_content_decides_not_the_name(tmp_path):
    path = nexus(tmp_path / "a.h5")
    path.rename(tmp_path / "a.csv")
    assert read(tmp_path / "a.csv").format == "HDF5"
    (tmp_path / "b.h5").write_text("1.0,2.0\n")
    with pytest.raises(InputError, match=r"is not HDF5 though its name ends in \.h5"):
        read(tmp_path / "b.h5")


def test_older_form_and_no_convention(tmp_path):
    with h5py.File(tmp_path / "old.h5", "w") as root:
        data = root.create_group("data")
        data.attrs["NX_class"] = "NXdata"
        data["b"] = X
        data["counts"] = Y
        data["counts"].attrs["signal"] = 1
        data["counts"].attrs["axes"] = "b"
    with h5py.File(tmp_path / "plain.h5", "w") as root:
        root["field_mT"] = X
        root["intensity"] = Y
    for name in ("old", "plain"):
        np.testing.assert_array_equal(read(tmp_path / f"{name}.h5").columns, np.column_stack([X, Y]))


@settings(derandomize=True, deadline=None, max_examples=25)
@given(values=st.lists(st.tuples(*[st.floats(allow_nan=False, allow_infinity=False)] * 2), min_size=1, max_size=20))
def test_round_trip(tmp_path_factory, values):
    path = tmp_path_factory.mktemp("h") / "s.h5"
    x, y = np.array(values).T
    header = {
        "frequency": 9400.05,
        "temperature": 4.2,
        "modulation": 0.1,
        "microwave": "parallel",
        "detect": "absorption",
    }
    write_spectrum(path, x, y, None, header)
    raw = read(path)
    np.testing.assert_array_equal(raw.columns, np.column_stack([x, y]))
    assert raw.header == header
    assert raw.units == ("mT", "")


def test_several_curves_give_the_signal_and_the_default_group(tmp_path):
    with h5py.File(tmp_path / "a.h5", "w") as root:
        root.attrs["default"] = "two"
        for name, factor in (("one", 1), ("two", 2)):
            write_nxdata(root.create_group(name), X, {"measured": factor * Y, "fitted": 0 * Y})
    raw = read(tmp_path / "a.h5")
    np.testing.assert_array_equal(raw.columns[:, 1], 2 * Y)
    assert raw.names == ("field", "measured")
    with h5py.File(tmp_path / "a.h5", "a") as root:
        del root.attrs["default"]
    raw = read(tmp_path / "a.h5")
    np.testing.assert_array_equal(raw.columns[:, 1], Y)
    assert [code for code, _ in raw.notes] == ["hdf5_groups"]


def test_same_bytes_each_time(tmp_path):
    for name in ("a", "b"):
        write_spectrum(tmp_path / f"{name}.h5", X, Y, None, {"frequency": 9400.0})
    assert (tmp_path / "a.h5").read_bytes() == (tmp_path / "b.h5").read_bytes()


def test_links_that_leave_the_file(tmp_path):
    nexus(tmp_path / "other.h5")
    for kind in ("external", "soft to external", "soft chain", "external storage", "virtual"):
        path = nexus(tmp_path / "a.h5")
        with h5py.File(path, "a") as root:
            data = root["entry/data"]
            del data["signal"]
            if kind == "external":
                data["signal"] = h5py.ExternalLink(str(tmp_path / "other.h5"), "/entry/data/signal")
            elif kind == "soft to external":
                root["away"] = h5py.ExternalLink(str(tmp_path / "other.h5"), "/entry")
                data["signal"] = h5py.SoftLink("/away/data/signal")
            elif kind == "soft chain":
                root["away"] = h5py.ExternalLink(str(tmp_path / "other.h5"), "/entry/data/signal")
                root["near"] = h5py.SoftLink("/away")
                data["signal"] = h5py.SoftLink("/near")
            elif kind == "external storage":
                data.create_dataset("signal", (11,), "f8", external=[(str(tmp_path / "raw.bin"), 0, 88)])
            else:
                layout = h5py.VirtualLayout((11,), "f8")
                layout[:] = h5py.VirtualSource(str(tmp_path / "other.h5"), "entry/data/signal", (11,))
                data.create_virtual_dataset("signal", layout)
        with pytest.raises(InputError, match="copy the data into the file"):
            read(path)


def test_soft_links_inside_the_file_are_followed_and_circles_are_not(tmp_path):
    path = nexus(tmp_path / "a.h5")
    with h5py.File(path, "a") as root:
        root["entry/raw"] = Y * 3
        del root["entry/data/signal"]
        root["entry/data/signal"] = h5py.SoftLink("/entry/raw")
    np.testing.assert_array_equal(read(path).columns[:, 1], Y * 3)
    with h5py.File(path, "a") as root:
        root["entry/loop"] = root["entry"]
        del root["entry/data/signal"]
        root["entry/data/signal"] = h5py.SoftLink("/entry/data/signal")
    with pytest.raises(InputError):
        read(path)


@pytest.mark.parametrize(
    ("change", "says"),
    [
        ({"y": np.arange(10.0)}, "B has 11 points, signal has 10"),
        ({"y": np.ones((11, 2))}, "has shape 11 x 2"),
        ({"y": np.full(11, np.nan)}, "nan at point 1"),
        ({"y": [b"a"] * 11}, "give real numbers"),
        ({"y": np.ones(11, dtype=complex)}, "give real numbers"),
        ({"signal": "none"}, "there is no such dataset"),
        ({"signal": ""}, None),
    ],
)
def test_refusals(tmp_path, change, says):
    path = nexus(tmp_path / "a.h5", **change)
    if says is None:  # the names tell
        assert read(path).names == ("B", "signal")
        return
    with pytest.raises(InputError) as caught:
        read(path)
    assert says in str(caught.value)
    assert "\n" not in str(caught.value)


def test_overlarge_dataset_is_refused_before_it_is_read(tmp_path):
    path = nexus(tmp_path / "a.h5")
    with h5py.File(path, "a") as root:
        del root["entry/data/signal"]
        root["entry/data"].create_dataset("signal", (10**11,), "f8", chunks=(10**6,))  # nothing is stored
    with pytest.raises(InputError, match=r"holds 1e\+11 numbers"):
        read(path)


def test_no_data_at_all_and_damage(tmp_path):
    with h5py.File(tmp_path / "a.h5", "w") as root:
        root["x"] = 1
    with pytest.raises(InputError, match="holds no NXdata group"):
        read(tmp_path / "a.h5")
    content = nexus(tmp_path / "b.h5").read_bytes()
    (tmp_path / "b.h5").write_bytes(content[: len(content) // 3])
    with pytest.raises(InputError, match="damaged HDF5"):
        read(tmp_path / "b.h5")
