"""Archives: what goes in comes out, a generic reader of NeXus opens them, and no damage passes."""

from __future__ import annotations

import io
import json
import time
from dataclasses import fields, replace
from pathlib import Path

import h5py
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from nexusformat.nexus import nxload
from outcomes import curves, outcome

from spinfit.errors import InputError
from spinfit.files import guard
from spinfit.files.tree import DIGEST, Data, Group, digest_of, is_intact, sealed, tree_from, write_tree
from spinfit.fitting.data import Job, Lines, Trace
from spinfit.fitting.outcome import Note, PositionTable, Quality, Value
from spinfit.report.archive import archive_bytes, archive_tree
from spinfit.report.archive_reading import archive_from, kind_of_archive, read_archive, read_group
from spinfit.report.outcome_json import outcome_record, outcome_text
from spinfit.species import Species, Spin
from spinfit.sweep import Sample

FORMAT_1 = Path(__file__).parent / "archives" / "format_1.h5"


def job(*traces, lines=(), **more) -> Job:
    made = [
        Trace(
            name,
            curves(name).field - 0.1,
            curves(name).measured,
            curves(name).used,
            9432.1,
            temperature=77.0,
            background=np.cos(curves(name).field),
        )
        for name in traces
    ]
    files = {"kiln-07.csv": b"\x00\xff field\n", "../odd \u00fc;\"'<b>.csv": b""}
    return Job((Species(name="cu", spins=(Spin(),)),), Sample(), tuple(made), (), files=files, lines=lines, **more)


def positions(name="turn", columns=1, seed=0):
    draw = np.random.default_rng(seed)
    n = 6
    column = draw.normal(300, 20, n)
    fitted = np.where(np.arange(n) == 2, np.nan, column + 0.01)
    return PositionTable(
        name, 9432.1, draw.uniform(0, 3, (n, columns)), column, fitted, column - fitted, np.full(n, 0.1),
        np.arange(n), np.arange(n) + 1, np.arange(n) != 2, draw.normal(size=(7 if columns == 1 else 0, 3)),
    )  # fmt: skip


def same(first, second) -> bool:
    if isinstance(first, np.ndarray):
        return first.dtype.kind == second.dtype.kind and np.array_equal(
            first, second, equal_nan=first.dtype.kind == "f"
        )
    if isinstance(first, dict):
        return list(first) == list(second) and all(same(first[key], second[key]) for key in first)
    return first == second


def assert_same(first, second, skip=()):
    """Every field of two dataclasses, arrays bit for bit."""
    for one in fields(first):
        if one.name not in skip:
            assert same(getattr(first, one.name), getattr(second, one.name)), one.name


def write(tmp_path, content: bytes, name="outcome.h5") -> Path:
    path = tmp_path / name
    path.write_bytes(content)
    return path


def refusal(path, **more) -> str:
    with pytest.raises(InputError) as caught:
        read_archive(path, **more)
    text = str(caught.value)
    assert "\n" not in text
    assert text.startswith(str(path))
    return text


def assert_whole(found, read):
    """An archive's outcome against the one that went in."""
    for first, second in zip(found.curves, read.curves, strict=True):
        assert_same(first, second)
    for first, second in zip(found.positions, read.positions, strict=True):
        assert_same(first, second)
    assert read.parameters == found.parameters
    assert list(read.parameters) == list(found.parameters)
    assert read.fractions == found.fractions
    np.testing.assert_array_equal(read.correlation_matrix, found.correlation_matrix)
    skip = ("seconds", "curves", "positions", "correlation_matrix", "engine", "provenance")
    assert_same(found, read, skip)
    assert outcome_record(replace(read, provenance=found.provenance, engine=found.engine)) == outcome_record(found)


# What goes in comes out -----------------------------------------------------------------------------


def test_everything_comes_back(tmp_path):
    found = outcome(curves("b", species=1), curves("a"), budget={"cu.g_par": {"noise": 0.0014, "frequency": 0.0004}})
    given_job = job("b", "a")
    more = {"bootstrap": {"resamples": 7}}
    path = write(tmp_path, archive_bytes(found, given_job, more))
    archive = read_archive(path)
    assert archive.format == 2
    assert_whole(found, archive.outcome)
    assert archive.job == found.provenance["job"]
    assert archive.files == given_job.files
    assert archive.record == json.loads(outcome_text(found, more))
    assert archive.outcome.engine == {"tolerance": 1e-4}
    root = read_group(path)
    np.testing.assert_array_equal(
        root.members["b"].members["as_read"].members["field"].values, given_job.traces[0].field
    )
    assert root.members["b"].members["temperature"].attrs["units"] == "K"


@pytest.mark.parametrize("columns", [1, 2])
def test_tables_of_line_positions_come_back(tmp_path, columns):
    found = replace(outcome(), curves=(), positions=(positions("turn", columns), positions("again", columns, 1)))
    lines = tuple(Lines(t.name, t.measured, t.frequency, angle=t.setting[:, 0]) for t in found.positions)
    assert_whole(found, read_archive(write(tmp_path, archive_bytes(found, job(lines=lines)))).outcome)


def test_an_outcome_without_covariance_and_with_odd_texts(tmp_path):
    evil = "<script>alert(1)</script> \"'&\\ \u00fc\u2028 \U0001f9ea %s {0}"
    found = outcome(
        parameters={"cu.g": Value(float("nan"), None, unit="")},
        quality=Quality(False, False, float("nan"), 80.0, 1, 1, 1.0, 1.0),
        correlation_names=(),
        correlation_matrix=np.zeros((0, 0)),
        fractions={},
        warnings=(Note("x", evil), Note("y", "")),
        message=evil,
        name=evil,
        provenance={"job": evil, "versions": {}},
    )
    archive = read_archive(write(tmp_path, archive_bytes(found)))
    assert np.isnan(archive.outcome.parameters["cu.g"].value)
    assert np.isnan(archive.outcome.quality.chi2_reduced)
    assert (archive.job, archive.outcome.name, archive.outcome.message) == (evil, evil, evil)
    assert archive.outcome.warnings == found.warnings


texts = st.text(st.characters(exclude_characters="\x00", exclude_categories=["Cs"]), max_size=12)


@settings(derandomize=True, deadline=None, max_examples=25)
@given(
    texts,
    st.dictionaries(texts.filter(bool), st.binary(max_size=40), max_size=3),
    st.lists(st.tuples(st.floats(), st.none() | st.floats(allow_nan=False)), min_size=1, max_size=4),
)
def test_any_texts_names_bytes_and_numbers_come_back(tmp_path_factory, text, contents, numbers):
    values = {f"p{n}": Value(v, u, unit=text) for n, (v, u) in enumerate(numbers)}
    found = outcome(parameters=values, name=text, message=text, provenance={"job": text})
    content = archive_bytes(found, replace(job(), files=contents))
    archive = read_archive(write(tmp_path_factory.mktemp("a"), content))
    assert archive.files == contents
    assert (archive.job, archive.outcome.name) == (text, text)
    for name, value in values.items():
        read = archive.outcome.parameters[name]
        np.testing.assert_array_equal([read.value], [value.value])
        assert (read.uncertainty, read.unit) == (value.uncertainty, text)


def test_same_bytes_each_time_and_nothing_of_the_run(tmp_path):
    content = archive_bytes(outcome(seconds=1.0), job("kiln_07"))
    assert archive_bytes(outcome(seconds=2.0), job("kiln_07", path="/somewhere/else.toml")) == content
    assert b"/somewhere" not in content


# Others can read it ---------------------------------------------------------------------------------


def test_a_reader_of_nexus_opens_on_the_plot(tmp_path):
    """The path of nexusformat (the NeXus community's own package) to what is plotted by default."""
    found = outcome(curves("b"), curves("a"))
    path = write(tmp_path, archive_bytes(found, job("b", "a")))
    root = nxload(path)
    assert root.nxclass == "NXroot"
    data = root.get_default()
    assert data.nxpath == "/b/fit"
    np.testing.assert_array_equal(data.nxsignal.nxvalue, found.curves[0].measured)
    (axis,) = data.nxaxes
    np.testing.assert_array_equal(axis.nxvalue, found.curves[0].field)
    assert axis.attrs["units"] == "mT"
    assert list(np.atleast_1d(data.attrs["auxiliary_signals"])) == ["fitted"]
    assert root["b"].nxclass == "NXentry"
    assert root["spinfit.outcome/fit"].nxclass == "NXprocess"
    assert root["spinfit.outcome/job"].nxclass == "NXnote"
    for entry in root.NXentry:
        for group in entry.NXdata:
            assert group.nxsignal.shape == group.nxaxes[0].shape
    lines = replace(outcome(), curves=(), positions=(positions(),))
    data = nxload(write(tmp_path, archive_bytes(lines), "lines.h5")).get_default()
    assert data.nxsignal.attrs["units"] == "mT"
    np.testing.assert_allclose(data.nxaxes[0].nxvalue, np.rad2deg(lines.positions[0].setting[:, 0]))


def test_a_repacked_copy_is_the_same_archive(tmp_path):
    """Other programs lay a file out anew; the digest is over what is in it."""
    path = write(tmp_path, archive_bytes(outcome(), job("kiln_07")))
    copy = tmp_path / "copy.h5"
    with h5py.File(path, "r") as old, h5py.File(copy, "w", libver="latest") as new:
        for key, value in old.attrs.items():
            new.attrs[key] = value
        for name in old:
            old.copy(name, new)
    assert copy.read_bytes() != path.read_bytes()
    assert_whole(read_archive(path).outcome, read_archive(copy).outcome)


# Older and newer ------------------------------------------------------------------------------------


def test_the_first_format_is_read():
    """Written by the program as it was when archives held results only."""
    archive = read_archive(FORMAT_1)
    found = outcome(curves("kiln_07", points=24), curves("b", points=24, seed=1))
    assert archive.format == 1
    assert archive.files == {}
    assert_whole(found, archive.outcome)
    assert archive.job == found.provenance["job"]


def test_lines_of_the_first_format(tmp_path):
    table = positions()
    names = {"measured": table.measured, "fitted": table.fitted, "residual": table.residual}
    with h5py.File(tmp_path / "a.h5", "w") as root:
        write_tree(root, read_group(FORMAT_1))
        for name in ("kiln_07", "b"):
            del root[name]
        group = root.create_group("turn")
        group["angle"] = np.rad2deg(table.setting[:, 0])
        for name, values in {**names, "uncertainty": table.uncertainty}.items():
            group[name] = values
        for name in ("lower", "upper", "used"):
            group[name] = getattr(table, name)
        group["frequency"] = table.frequency
    (read,) = read_archive(tmp_path / "a.h5").outcome.positions
    assert_same(table, read, ("setting", "drawn"))
    np.testing.assert_allclose(read.setting, table.setting)


def changed(tmp_path, change, *, seal=True, name="changed.h5") -> Path:
    """An archive whose tree a function has changed, with a fresh digest unless told otherwise."""
    tree = change(archive_tree(outcome(), job("kiln_07")))
    path = tmp_path / name
    with h5py.File(path, "w") as root:
        write_tree(root, sealed(tree) if seal else tree)
    return path


def put(node: Group, *names: str, value) -> Group:
    """Return a tree with one member in another shape; None takes it out."""
    first, *rest = names
    members = dict(node.members)
    inner = put(members[first], *rest, value=value) if rest else value
    members = {k: v for k, v in members.items() if k != first} | ({} if inner is None else {first: inner})
    return Group(members, node.attrs)


def test_what_is_no_archive(tmp_path):
    assert "is not HDF5" in refusal(write(tmp_path, b"1,2\n"))
    assert "no such file" in refusal(tmp_path / "none.h5")
    assert "is a folder" in refusal(tmp_path)
    with h5py.File(tmp_path / "other.h5", "w") as root:
        root["x"] = np.arange(3)
    assert kind_of_archive(tmp_path / "other.h5") is None
    assert "is no archive of spinfit" in refusal(tmp_path / "other.h5")
    newer = changed(tmp_path, lambda t: Group(t.members, {**t.attrs, "spinfit_format": 3}))
    assert "use a newer spinfit" in refusal(newer)
    assert "holds one fit" in refusal(FORMAT_1, trace="b")


def test_foreign_files_with_odd_attributes_are_no_archives(tmp_path):
    """An attribute of a kind that h5py cannot read is nobody's trouble unless somebody asks for it."""
    with h5py.File(tmp_path / "a.h5", "w") as root:
        kind = h5py.h5t.vlen_create(h5py.h5t.py_create(np.dtype([("a", "i4"), ("b", "f8")])))
        h5py.h5a.create(root.id, b"odd", kind, h5py.h5s.create_simple((2,)))
        root.attrs["empty"] = h5py.Empty("f8")
    assert kind_of_archive(tmp_path / "a.h5") is None
    with h5py.File(tmp_path / "a.h5", "r+") as root:
        root.attrs["spinfit_format"] = "two"
    assert "is no archive of spinfit" in refusal(tmp_path / "a.h5")


# Damage ---------------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def small() -> bytes:
    return archive_bytes(outcome(curves("kiln_07", points=24)), job("kiln_07"))


def test_an_archive_cut_short_anywhere_is_refused(tmp_path, small):
    for size in [*range(8, 200, 16), *range(200, len(small), len(small) // 60), len(small) - 1]:
        refusal(write(tmp_path, small[:size]))


def test_no_flipped_bit_passes(tmp_path, small, monkeypatch):
    """What is read back is what went in, or nothing: a changed number never passes."""
    monkeypatch.setattr(guard, "SECONDS", 0.2)
    good = read_archive(write(tmp_path, small))
    draw = np.random.default_rng(1)
    refused = 0
    for _ in range(60):
        content = bytearray(small)
        content[draw.integers(len(content))] ^= 1 << int(draw.integers(8))
        try:
            read = read_archive(write(tmp_path, bytes(content)))
        except InputError:
            refused += 1
            continue
        assert read.record == good.record  # the bit lay in an unused corner of the file
        assert read.files == good.files
        assert_whole(good.outcome, read.outcome)
    assert refused > 5


@pytest.mark.parametrize(
    ("path", "value"),
    [
        (("kiln_07",), None),
        (("kiln_07",), Data("text")),
        (("kiln_07", "fit", "measured"), Data(np.arange(3.0))),
        (("kiln_07", "fit", "measured"), Data("text")),
        (("kiln_07", "used"), Data(np.zeros((2, 2), dtype=bool))),
        (("kiln_07", "frequency"), Data("9 GHz")),
        (("kiln_07", "parts"), None),
        (("spinfit.outcome",), None),
        (("spinfit.outcome", "traces"), Data(["none"])),
        (("spinfit.outcome", "traces"), Data(["kiln_07/fit"])),
        (("spinfit.outcome", "fit", "parameters", "name"), Data(["a"] * 10)),
        (("spinfit.outcome", "fit", "parameters", "name"), Data(np.arange(10.0))),
        (("spinfit.outcome", "fit", "parameters", "value"), Data(np.arange(10.0))),
        (("spinfit.outcome", "fit", "parameters", "varied"), Data(np.arange(10.0))),
        (("spinfit.outcome", "fit", "correlations", "matrix"), Data(np.zeros((1, 5)))),
        (("spinfit.outcome", "job", "data"), Data(np.arange(3))),
        (("spinfit.outcome", "input", "file_1", "data"), Data(np.arange(3, dtype=np.uint8))),
        (("spinfit.outcome", "input", "file_1"), None),
        *[
            (("spinfit.outcome", "outcome_json", "data"), Data(text))
            for text in (
                "", "[]", "{}", "{", "[" * 100_000, '{"parameters": 3}', '{"parameters": {"cu.g_par": 1}}',
                '{"quality": {"noise": "loud"}, "parameters": {}}', '{"warnings": [1]}', '{"provenance": []}',
                '{"budget": {"a": 1}}', '{"provenance": {"engine": 3}}', '{"provenance": {"name": 3}}', "1e999", "null",
            )
        ],
    ],
)  # fmt: skip
def test_every_part_is_checked(tmp_path, path, value):
    """Well-formed HDF5 with the right digest, made by somebody who means harm."""
    refusal(changed(tmp_path, lambda tree: put(tree, *path, value=value)))


def test_a_changed_number_and_a_lost_digest_are_seen(tmp_path):
    def doctored(tree):
        inner = tree.members["spinfit.outcome"].members["fit"].members["parameters"].members["value"]
        values = np.array(inner.values)
        values[0] += 0.001
        return put(tree, "spinfit.outcome", "fit", "parameters", "value", value=Data(values))

    digest = digest_of(archive_tree(outcome(), job("kiln_07")))
    path = changed(tmp_path, lambda t: Group(doctored(t).members, {**t.attrs, DIGEST: digest}), seal=False)
    assert "is damaged or was changed" in refusal(path)
    assert "contradicts the columns on cu.g_perp" in refusal(changed(tmp_path, doctored))
    assert "has no digest" in refusal(changed(tmp_path, lambda t: t, seal=False))


def test_links_objects_and_bombs_are_refused(tmp_path):
    def spoil(name, make):
        path = write(tmp_path, archive_bytes(outcome(), job("kiln_07")), f"{name}.h5")
        with h5py.File(path, "r+") as root:
            make(root)
        return refusal(path)

    def outside(root):
        del root["kiln_07/fit/measured"]
        root["kiln_07/fit/measured"] = h5py.ExternalLink("/etc/passwd", "/")

    def soft(root):
        root["kiln_07/fit/more"] = h5py.SoftLink("/kiln_07/fit/measured")

    def loop(root):
        root["kiln_07/again"] = root["/"]

    def objects(root):
        root["kiln_07"].create_dataset("obj", (2,), h5py.vlen_dtype(np.float64))

    def bomb(root):
        root["kiln_07"].create_dataset("zeros", (10**9,), "f8", chunks=(10**6,), compression="gzip")

    assert "is a link" in spoil("outside", outside)
    assert "is a link" in spoil("soft", soft)
    assert "nested more than" in spoil("loop", loop)
    assert "holds object" in spoil("objects", objects)
    assert "unpacks 0 stored bytes" in spoil("bomb", bomb)


def test_the_digest_is_over_everything():
    tree = archive_tree(outcome(), job("kiln_07"))
    whole = digest_of(tree)
    fit = ("kiln_07", "fit")
    drawn = tree.members["kiln_07"].members["fit"]
    others = [
        put(tree, "title", value=Data("x")),
        put(tree, *fit, "title", value=Data("x")),
        put(tree, *fit, "measured", value=Data(-np.asarray(drawn.members["measured"].values))),
        put(tree, *fit, value=Group(drawn.members, {"NX_class": "NXdata"})),
        put(tree, "kiln_07", "detect", value=Data(["derivative"])),
        Group(tree.members, {**tree.attrs, "default": "x"}),
    ]
    assert len({whole, *map(digest_of, others)}) == 1 + len(others)
    assert is_intact(sealed(tree))
    assert not is_intact(tree)


@settings(derandomize=True, deadline=None, max_examples=60)
@given(st.data())
def test_any_tree_is_an_archive_or_one_line(data):
    """Junk in place of any member, numbers of any kind and shape."""
    tree = archive_tree(outcome(curves(points=5)), job("kiln_07"))
    path, node = [], tree
    while isinstance(node, Group) and node.members and data.draw(st.integers(0, 4)):
        path.append(data.draw(st.sampled_from(sorted(node.members))))
        node = node.members[path[-1]]
    junk = st.one_of(
        texts.map(Data),
        st.lists(texts, max_size=3).map(Data),
        st.sampled_from(["f8", "f4", "i8", "u1", "b1"]).flatmap(
            lambda kind: st.sampled_from([(), (0,), (5,), (10,), (2, 2)]).map(lambda shape: Data(np.ones(shape, kind)))
        ),
        st.just(Group()),
        st.none(),
    )
    if path:
        tree = put(tree, *path, value=data.draw(junk))
    try:
        archive_from(sealed(tree), "f.h5")
    except InputError as error:
        assert "\n" not in str(error)  # noqa: PT017


def test_trees_come_back_from_a_file():
    tree = sealed(archive_tree(outcome(), job("kiln_07")))
    buffer = io.BytesIO()
    with h5py.File(buffer, "w") as root:
        write_tree(root, tree)
    found = tree_from(*guard.ask("tree", file="f.h5", content=buffer.getvalue()))
    assert is_intact(found)
    assert digest_of(found) == digest_of(tree)


def test_an_array_in_several_places_is_stored_once():
    long, short = np.arange(500.0), np.arange(5.0)
    tree = Group(
        {
            "a": Group({"x": Data(long), "y": Data(short)}),
            "b": Group({"x": Data(long.copy()), "y": Data(short.copy())}),
            "c": Group({"x": Data(long, {"units": "mT"}), "\u00fc": Data(long.astype("f4"))}),
            "d": Group({"x": Data(long.reshape(2, 250)), "y": Data(long > 3)}),
        }
    )
    buffer = io.BytesIO()
    with h5py.File(buffer, "w") as root:
        write_tree(root, tree)
        assert root["a/x"] == root["b/x"]
        assert root["a/y"] != root["b/y"]
        assert len({root[name].id for name in ("a/x", "c/x", "c/\u00fc", "d/x", "d/y")}) == 5
    found = tree_from(*guard.ask("tree", file="f.h5", content=buffer.getvalue()))
    assert digest_of(found) == digest_of(tree)


@pytest.mark.parametrize("points", [801, 40_000])  # the longer ones are packed
def test_what_is_written_does_not_depend_on_the_hour(points):
    found, given_job = outcome(curves(points=points)), job("kiln_07")
    first = archive_bytes(found, given_job)
    time.sleep(1.1)  # HDF5 counts times in seconds
    assert archive_bytes(found, given_job) == first
    with h5py.File(io.BytesIO(first)) as root:
        np.testing.assert_array_equal(root["kiln_07/fit/measured"], found.curves[0].measured)
        assert (root["kiln_07/fit/measured"].compression == "gzip") == (points == 40_000)
