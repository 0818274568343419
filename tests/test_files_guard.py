"""HDF5 is read in a child process: what crashes, hangs or fills the memory there is one line here."""

from __future__ import annotations

import io
import json
import os
import random
import signal

import h5py
import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from spinfit.errors import InputError
from spinfit.files import guard
from spinfit.files.curves import write_nxdata
from spinfit.files.hdf5 import read_hdf5
from spinfit.files.hdf5_child import answer_to

X = np.linspace(330.0, 340.0, 16)


def file_bytes(fill=None, **options) -> bytes:
    buffer = io.BytesIO()
    with h5py.File(buffer, "w", **options) as root:
        write_nxdata(root.create_group("a"), X, {"signal": np.sin(X)})
        if fill:
            fill(root)
    return buffer.getvalue()


def refusal(content: bytes) -> str:
    with pytest.raises(InputError) as caught:
        read_hdf5(content, "f.h5")
    text = str(caught.value)
    assert text.startswith("f.h5: ")
    assert "\n" not in text
    return text


@pytest.fixture
def own_child(monkeypatch):
    """A child of its own for one test, with a program of the test's choice."""
    child = guard._Child()
    monkeypatch.setattr(guard, "_child", child)

    def runs(program: str):
        child.stop()
        monkeypatch.setattr(guard, "_START", program)

    yield runs
    child.stop()


def test_a_child_that_was_killed_is_replaced():
    content = file_bytes()
    first = read_hdf5(content, "f.h5")
    process = guard._child.process
    os.kill(process.pid, signal.SIGKILL)
    process.wait()
    np.testing.assert_array_equal(read_hdf5(content, "f.h5").columns, first.columns)
    assert guard._child.process.pid != process.pid


def test_a_child_is_kept_for_the_next_file_and_not_for_a_thousand_bad_ones(monkeypatch):
    read_hdf5(file_bytes(), "f.h5")
    process = guard._child.process
    read_hdf5(file_bytes(), "f.h5")
    assert guard._child.process is process
    monkeypatch.setattr(guard, "_MOST_FAILURES", 2)
    for _ in range(3):
        refusal(b"\x89HDF\r\n\x1a\n" + b"\x00" * 100)
    assert guard._child.process is not process


CRASHES = "import os, sys; sys.stdin.readline(); os.abort()"
ENDS_HALF_WAY = "import os; os.read(0, 9); os.write(1, (99).to_bytes(8, 'little') + b'{'); raise SystemExit"
SAYS_TOO_MUCH = "import os, time; os.read(0, 9); os.write(1, b'\\xff' * 8); time.sleep(60)"
RUNS_ON = """
import sys
sys.stdin.readline()
from spinfit.files.hdf5_child import set_limits
set_limits(0.01, 2**30)
while True: pass
"""
SLEEPS = "import time; time.sleep(60)"


@pytest.mark.parametrize(
    ("program", "says"),
    [
        (CRASHES, "the HDF5 library crashes on it"),
        (ENDS_HALF_WAY, "the HDF5 library crashes on it"),
        (SAYS_TOO_MUCH, "its answer is too long"),
        (RUNS_ON, "reading it does not end"),
        (SLEEPS, "reading it does not end"),
    ],
)
def test_every_way_in_which_a_child_can_fail(own_child, monkeypatch, program, says):
    own_child(program)
    if program is SLEEPS:
        monkeypatch.setattr(guard, "_PATIENCE", 0.02)
    assert says in refusal(file_bytes())


def test_the_child_has_a_limit_on_its_memory(monkeypatch):
    """A file whose (honest) numbers need more than a file of its size may take."""
    monkeypatch.setattr(guard, "MEMORY", 2**20)
    monkeypatch.setattr(guard, "MEMORY_PER_BYTE", 0)
    buffer = io.BytesIO()
    with h5py.File(buffer, "w") as root:
        write_nxdata(root.create_group("a"), np.arange(2e6), {"signal": np.arange(2e6)})
    assert "memory" in refusal(buffer.getvalue())


def test_limits_of_the_user_stay(own_child):
    """A scheduler may have limited the process already, further down than the guard would."""
    own_child(
        "import resource, sys; resource.setrlimit(resource.RLIMIT_CPU, (3, 3)); "
        "resource.setrlimit(resource.RLIMIT_AS, (2**31, 2**31)); " + guard._START
    )
    assert read_hdf5(file_bytes(), "f.h5").columns.shape == (16, 2)


def test_no_folder_of_the_user_is_imported_from(tmp_path, monkeypatch):
    """A file called h5py.py beside the data is data."""
    (tmp_path / "h5py.py").write_text("raise SystemExit")
    (tmp_path / "numpy.py").write_text("raise SystemExit")
    monkeypatch.chdir(tmp_path)
    guard._child.stop()
    assert read_hdf5(file_bytes(), "f.h5").columns.shape == (16, 2)


@pytest.mark.filterwarnings("ignore:.*fork.*:DeprecationWarning")  # Python 3.12 warns where a library has threads
def test_a_forked_process_gets_a_child_of_its_own():
    read_hdf5(file_bytes(), "f.h5")
    ours = guard._child.process.pid
    reading, writing = os.pipe()
    forked = os.fork()
    if forked == 0:  # nothing of pytest may run here
        found = b""
        try:
            read_hdf5(file_bytes(), "f.h5")
            found = json.dumps(guard._child.process.pid).encode()
            guard._child.stop()
        finally:
            os.write(writing, found)
            os._exit(0)
    os.close(writing)
    with open(reading, "rb") as stream:
        theirs = json.loads(stream.read())
    os.waitpid(forked, 0)
    assert theirs != ours
    read_hdf5(file_bytes(), "f.h5")
    assert guard._child.process.pid == ours


# Bombs and strange datasets -------------------------------------------------------------------------


def replaced(make):
    def fill(root):
        del root["a/signal"]
        make(root["a"])

    return file_bytes(fill)


def test_compression_bombs_are_refused_before_they_are_unpacked():
    def make(group):
        group.create_dataset("signal", data=np.zeros(8_000_000), compression="gzip", chunks=(2_000_000,))

    content = replaced(make)
    assert len(content) < 2**20
    assert "unpacks" in refusal(content)


def test_a_huge_chunk_behind_a_small_dataset_is_refused():
    def make(group):
        group.create_dataset("signal", (16,), "f8", chunks=(10**9 // 8,), maxshape=(None,), compression="gzip")

    assert "unpacks 0 stored bytes" in refusal(replaced(make))


def test_ordinary_compression_is_read():
    values = np.random.default_rng(0).normal(size=16).round(2)
    for options in ({"compression": "gzip"}, {"compression": "lzf"}, {"fletcher32": True}, {"shuffle": True}):
        content = replaced(lambda group, o=options: group.create_dataset("signal", data=values, chunks=(8,), **o))
        np.testing.assert_array_equal(read_hdf5(content, "f.h5").columns[:, 1], values)


def test_filters_that_need_a_plugin_are_refused():
    def make(group):
        plist = h5py.h5p.create(h5py.h5p.DATASET_CREATE)
        plist.set_chunk((8,))
        plist.set_filter(32015, h5py.h5z.FLAG_OPTIONAL, ())
        space = h5py.h5s.create_simple((16,))
        h5py.h5d.create(group.id, b"signal", h5py.h5t.NATIVE_DOUBLE, space, plist)

    assert "packed by filter 32015" in refusal(replaced(make))


@pytest.mark.parametrize(
    "make",
    [
        lambda g: g.create_dataset("signal", (16,), h5py.vlen_dtype(np.float64)),
        lambda g: g.create_dataset("signal", data=np.zeros(16, dtype="V8")),
        lambda g: g.create_dataset("signal", (16,), h5py.ref_dtype),
        lambda g: g.create_dataset("signal", data=np.zeros(16, dtype=[("a", "f8")])),
        lambda g: g.create_dataset("signal", data=h5py.Empty("f8")),
        lambda g: g.create_dataset(
            "signal", data=np.array([b"cos\nsystem"] * 16, dtype="O"), dtype=h5py.string_dtype()
        ),
        lambda g: g.create_group("signal"),
        lambda g: g.__setitem__("signal", np.dtype("f8")),
    ],
)
def test_what_is_not_numbers_is_refused(make):
    refusal(replaced(make))


def test_attributes_of_any_kind_are_no_trouble():
    def fill(root):
        for where in (root, root["a"], root["a/signal"]):
            where.attrs["units"] = np.array([1, 2, 3])
            where.attrs["frequency"] = np.array([b"\xff\xfe"])
            where.attrs["temperature"] = h5py.Empty("f8")
            where.attrs["title"] = "a\nb\x7f" * 100
            where.attrs.create("detect", np.array(["x", "y"], dtype=object), dtype=h5py.string_dtype())
            where.attrs["default"] = root["a"].ref

    assert read_hdf5(file_bytes(fill), "f.h5").columns.shape == (16, 2)


def test_datasets_in_other_files_are_not_even_looked_at(tmp_path, monkeypatch):
    """Opening a pipe waits for whoever writes into it: a reader that looked would hang."""
    os.mkfifo(tmp_path / "pipe.h5")
    monkeypatch.setattr(guard, "_PATIENCE", 0.5)
    layout = h5py.VirtualLayout((16,), "f8", maxshape=(None,))
    source = h5py.VirtualSource(str(tmp_path / "pipe.h5"), "x", (16,), maxshape=(None,))
    layout[: h5py.h5s.UNLIMITED] = source[: h5py.h5s.UNLIMITED]

    def virtual(group):
        group.create_virtual_dataset("signal", layout)

    def beside(group):
        group["signal"] = np.sin(X)
        group.create_virtual_dataset("frequency", layout)

    def unnamed(group):
        group.create_virtual_dataset("signal", layout)
        for key in list(group.attrs):
            del group.attrs[key]

    assert "another file" in refusal(replaced(virtual))
    assert "another file" in refusal(replaced(unnamed))
    assert read_hdf5(replaced(beside), "f.h5").header == {}


# Damage ---------------------------------------------------------------------------------------------


# Three of these made the library of HDF5 2.0 run on for ever when this was written.
def damaged(content: bytes, seed: int) -> bytes:
    draw = random.Random(seed)
    changed = bytearray(content)
    for _ in range(draw.choice([1, 1, 2, 4, 8])):
        at = draw.randrange(len(changed))
        if draw.random() < 0.5:
            changed[at] = draw.randrange(256)
        else:
            value = draw.choice([0, 1, 2**64 - 1, 2**31, 2**63, draw.randrange(len(changed))])
            changed[at : at + 8] = value.to_bytes(8, "little")
    return bytes(changed)


@pytest.mark.parametrize("options", [{}, {"libver": "latest"}])
def test_damage_gives_a_trace_or_one_line(options, monkeypatch):
    monkeypatch.setattr(guard, "SECONDS", 0.1)
    content = file_bytes(**options)
    good = 0
    for seed in range(150):
        try:
            raw = read_hdf5(damaged(content, seed), "f.h5")
        except InputError:
            continue
        good += 1
        assert np.isfinite(raw.columns).all()
    assert 0 < good < 150  # both happen


def test_truncation_anywhere_gives_one_line():
    content = file_bytes()
    for size in range(8, len(content), max(1, len(content) // 97)):
        refusal(content[:size])


NAMES = st.sampled_from("a data field B signal frequency temperature title x\u00fc B_mT".split())
WORDS = st.sampled_from(["", *"NXdata NXentry NXroot a data field signal B GHz mT . 1 /a ..".split()])
ATTRIBUTES = st.dictionaries(
    st.sampled_from(["NX_class", "default", "signal", "axes", "axis", "units", "frequency", "title", "detect"]),
    st.one_of(
        WORDS,
        st.integers(-2, 2),
        st.floats(),
        st.lists(WORDS, min_size=1, max_size=3),
        st.sampled_from([np.zeros((2, 2)), np.array([b"B"]), np.array([], dtype="f8"), h5py.Empty("S10"), 1j, True]),
    ),
    max_size=4,
)
DATASETS = st.one_of(
    st.lists(st.floats(), max_size=5),
    st.lists(st.integers(-(2**62), 2**62), min_size=1, max_size=5),
    st.text(st.characters(codec="utf-8", exclude_characters="\x00"), max_size=5),
    st.sampled_from(
        [np.zeros((3, 2)), np.float64(9.4), np.ones((1, 4)), h5py.Empty("f8"), np.zeros(3, dtype="S4"),
         np.zeros(2, dtype=[("a", "f8")]), np.ones(3, dtype=complex), np.ones(4, dtype=bool), np.ones(3, dtype="f2")]
    ),
    st.sampled_from(["/a", "/data/field", "../x", "nowhere", "/"]).map(h5py.SoftLink),
    st.just(h5py.ExternalLink("other.h5", "/a")),
)  # fmt: skip
GROUPS = st.recursive(
    st.dictionaries(NAMES, st.tuples(DATASETS, ATTRIBUTES), max_size=4),
    lambda inner: st.dictionaries(NAMES, st.tuples(inner | DATASETS, ATTRIBUTES), max_size=4),
    max_leaves=8,
)


def filled(group, members) -> None:
    for name, (content, attributes) in members.items():
        if isinstance(content, dict):
            made = group.create_group(name)
            filled(made, content)
        elif isinstance(content, (h5py.SoftLink, h5py.ExternalLink)):
            group[name] = content
            continue
        else:
            made = group.create_dataset(name, data=content)
        for key, value in attributes.items():
            made.attrs[key] = value


@settings(derandomize=True, deadline=None, max_examples=150, suppress_health_check=[HealthCheck.too_slow])
@given(GROUPS, ATTRIBUTES, st.sampled_from(["trace", "tree", "names"]))
def test_any_well_formed_file_is_read_or_refused(members, attributes, what):
    """In this process: files that h5py wrote do not hang its library."""
    buffer = io.BytesIO()
    with h5py.File(buffer, "w") as root:
        filled(root, members)
        for key, value in attributes.items():
            root.attrs[key] = value
    try:
        found, _ = answer_to({"what": what, "file": "f.h5", "path": "", "under": []}, buffer.getvalue())
    except InputError as error:
        assert str(error).isprintable()  # noqa: PT017
        assert "is a damaged" not in str(error)  # noqa: PT017
    else:
        json.dumps(found)


def test_the_child_itself_raises_nothing_else():
    question = {"what": "trace", "file": "f.h5", "path": "", "under": []}
    with pytest.raises(InputError, match="damaged HDF5"):
        answer_to(question, b"\x89HDF\r\n\x1a\n" + b"\x08" * 200)


def with_a_latin_1_name(root: h5py.File) -> None:
    """Add an attribute whose name is not UTF-8: h5py gives it as bytes, which JSON does not know."""
    space = h5py.h5s.create(h5py.h5s.SCALAR)
    h5py.h5a.create(root["a"].id, "größe".encode("latin-1"), h5py.h5t.NATIVE_DOUBLE, space)


def test_names_that_are_not_utf8():
    """A trace is read beside them; an archive has none, and the child says so and lives."""
    content = file_bytes(with_a_latin_1_name)
    np.testing.assert_array_equal(read_hdf5(content, "f.h5").columns[:, 0], X)
    assert "names" in guard.ask("names", file="f.h5", content=content, under=["a"])[0]
    process = guard._child.process
    with pytest.raises(InputError, match="/a: holds a name that is not UTF-8"):
        guard.ask("tree", file="f.h5", content=content)
    assert guard._child.process is process
    assert process.poll() is None
