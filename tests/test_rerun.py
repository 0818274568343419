"""`spinfit rerun` and `inspect` of archives, through the command line: agree, differ, refuse."""

from __future__ import annotations

import csv
import hashlib
import json
import shutil
from dataclasses import replace
from pathlib import Path

import h5py
import numpy as np
import pytest
from nexusformat.nexus import nxload
from outcomes import outcome
from test_cli_fit import G, write_trace

from spinfit.cli import main
from spinfit.errors import InputError
from spinfit.files.tree import DIGEST, Data, Group, digest_of, sealed, write_tree
from spinfit.fitting.agreement import compare_outcomes
from spinfit.fitting.outcome import Value
from spinfit.kernels import COMPILED
from spinfit.report import batch_archive
from spinfit.report.archive import as_entry
from spinfit.report.archive_reading import read_archive, read_group
from spinfit.report.batch_archive import build_batch_archive, read_batch_summary, write_batch_archive

JOB = """# odd characters: \u00fc \u2028 <script>alert('x')</script> & "
[[species]]
name = "radical"
S = "1/2"
g = 2.005
[species.width]
gaussian = "1.0 mT"

[[trace]]
file = "../data/trace \u00fc.csv"
background = "../data/empty.csv"
field_uncertainty = "0.02 mT"

[fit]
vary = ["radical.g", "radical.width.gaussian"]
"""


@pytest.fixture(scope="module")
def fitted(tmp_path_factory) -> Path:
    """A folder in which a job was fitted, whose data are gone since."""
    folder = tmp_path_factory.mktemp("fit")
    for name in ("data", "jobs"):
        (folder / name).mkdir()
    write_trace(folder / "data", name="trace \u00fc.csv", points=200)
    field = np.linspace(300, 400, 50)
    rows = "".join(f"{b},{np.cos(b / 9)}\n" for b in field)
    (folder / "data" / "empty.csv").write_text("field/mT,signal\n" + rows)
    (folder / "jobs" / "j\u00f6b.toml").write_text(JOB, encoding="utf-8")
    assert main(["fit", str(folder / "jobs" / "j\u00f6b.toml"), "--out", str(folder / "out")]) == 0
    shutil.rmtree(folder / "data")
    shutil.rmtree(folder / "jobs")
    return folder / "out" / "outcome.h5"


def doctored(fitted: Path, tmp_path: Path, change) -> Path:
    """A copy whose tree a function has changed, with a fresh digest."""
    path = tmp_path / "doctored.h5"
    with h5py.File(path, "w") as root:
        write_tree(root, sealed(change(read_group(fitted))))
    return path


def put(node: Group, *names: str, value) -> Group:
    first, *rest = names
    inner = put(node.members[first], *rest, value=value) if rest else value
    return Group({**node.members, first: inner}, node.attrs)


def test_a_fit_repeats_bit_for_bit_from_its_archive_alone(fitted, tmp_path, capsys, monkeypatch):
    monkeypatch.chdir(tmp_path)
    capsys.readouterr()
    assert main(["rerun", str(fitted), "--out", "again"]) == 0
    out, err = capsys.readouterr()
    assert err == ""
    assert "j\u00f6b: the numbers agree bit for bit\nversions: the same as before" in out
    # The same bits again, except for what names the folder of the job.
    assert (tmp_path / "again" / "outcome.h5").read_bytes() == fitted.read_bytes()
    assert (tmp_path / "again" / "outcome.json").read_bytes() == (fitted.parent / "outcome.json").read_bytes()
    assert sorted(path.name for path in tmp_path.iterdir()) == ["again"]
    assert main(["rerun", str(fitted), "--json"]) == 0
    record = json.loads(capsys.readouterr().out)
    assert (record["agrees"], record["bit_for_bit"], record["changes"], record["versions"]) == (True, True, [], {})


def test_the_archive_is_free_of_its_machine(fitted):
    content = fitted.read_bytes()
    for word in (str(fitted.parent), str(Path.home())):
        assert word.encode() not in content


def shifted(tree: Group, by: float) -> Group:
    """Move g in the columns and in outcome.json alike."""
    columns = ("spinfit.outcome", "fit", "parameters", "value")
    node = tree
    for name in columns:
        node = node.members[name]
    names = tree.members["spinfit.outcome"].members["fit"].members["parameters"].members["name"].values
    values = np.array(node.values)
    at = names.index("radical.g")
    values[at] += by
    record = json.loads(tree.members["spinfit.outcome"].members["outcome_json"].members["data"].values)
    record["parameters"]["radical.g"]["value"] = float(values[at])
    tree = put(tree, *columns, value=Data(values))
    return put(tree, "spinfit.outcome", "outcome_json", "data", value=Data(json.dumps(record)))


def test_a_doctored_value_is_told(fitted, tmp_path, capsys):
    sigma = read_archive(fitted).outcome.parameters["radical.g"].uncertainty_noise
    path = doctored(fitted, tmp_path, lambda tree: shifted(tree, 3 * sigma))
    assert main(["rerun", str(path)]) == 1
    out = capsys.readouterr().out
    assert "the numbers do not agree" in out
    (line,) = [line for line in out.splitlines() if line.startswith("radical.g ")]
    assert line.endswith("differs")
    assert float(line.split()[-2]) == pytest.approx(3, rel=0.02)
    slight = doctored(fitted, tmp_path, lambda tree: shifted(tree, 0.05 * sigma))
    assert main(["rerun", str(slight)]) == 0
    assert "the largest shift is 0.05 standard uncertainties (radical.g)" in capsys.readouterr().out


def test_other_versions_are_named(fitted, tmp_path, capsys):
    def older(tree):
        note = tree.members["spinfit.outcome"].members["outcome_json"].members["data"].values
        record = json.loads(note)
        record["provenance"]["versions"] |= {"numpy": "1.0", "abacus": "7"}
        return put(tree, "spinfit.outcome", "outcome_json", "data", value=Data(json.dumps(record)))

    path = doctored(fitted, tmp_path, older)
    assert main(["rerun", str(path)]) == 0
    assert f"versions: numpy 1.0 before, {np.__version__} now; abacus 7 before, none now" in capsys.readouterr().out


def test_other_data_in_the_archive_are_refused(fitted, tmp_path, capsys):
    def other(tree):
        content = b"# frequency 9.4 GHz\nfield/mT,signal\n" + b"".join(b"%d,%d\n" % (300 + k, k * k) for k in range(90))
        data = Data(np.frombuffer(content, dtype=np.uint8))
        tree = put(tree, "spinfit.outcome", "input", "file_1", "data", value=data)
        digest = hashlib.sha256(content).hexdigest()
        return put(tree, "spinfit.outcome", "input", "file_1", "sha256", value=Data(digest))

    assert main(["rerun", str(doctored(fitted, tmp_path, other))]) == 2
    assert "not those that its results were found from" in capsys.readouterr().err


@pytest.mark.parametrize("name", ["../../escape.csv", "/etc/passwd", "none.csv"])
def test_names_in_a_job_are_looked_up_and_never_opened(fitted, tmp_path, capsys, name):
    def elsewhere(tree):
        text = tree.members["spinfit.outcome"].members["job"].members["data"].values
        return put(tree, "spinfit.outcome", "job", "data", value=Data(text.replace("../data/trace \u00fc.csv", name)))

    (tmp_path.parent.parent / "escape.csv").write_text("# frequency 9.4 GHz\nfield/mT,signal\n1,2\n2,3\n")
    assert main(["rerun", str(doctored(fitted, tmp_path, elsewhere))]) == 2
    err = capsys.readouterr().err
    assert f'"{name}" was not kept' in err
    assert err.count("\n") == 1


def test_bad_files_are_one_line_and_exit_2(fitted, tmp_path, capsys):
    for number, content in enumerate((b"", b"junk", fitted.read_bytes()[:5000], b"\x89HDF\r\n\x1a\n" + b"\x00" * 99)):
        path = tmp_path / f"{number}.h5"
        path.write_bytes(content)
        assert main(["rerun", str(path), "--out", str(tmp_path / "out")]) == 2
        err = capsys.readouterr().err
        assert err.startswith(f"spinfit: {path}: ")
        assert err.count("\n") == 1
        assert not (tmp_path / "out").exists()
    old = Path(__file__).parent / "archives" / "format_1.h5"
    assert main(["rerun", str(old)]) == 2
    assert "format 1, which kept no input files" in capsys.readouterr().err


def test_what_is_in_an_archive(fitted, tmp_path, capsys):
    assert main(["inspect", str(fitted), "--plot", str(tmp_path / "fit.png")]) == 0
    out = capsys.readouterr().out
    for text in (
        "archive of a fit, format 2: j\u00f6b",
        "trace \u00fc.csv",
        "repeats the fit",
        "radical.g",
        "SHA-256",
        "agrees",
    ):
        assert text in out
    assert (tmp_path / "fit.png").read_bytes().startswith(b"\x89PNG")
    assert main(["inspect", str(fitted), "--json"]) == 0
    record = json.loads(capsys.readouterr().out)
    assert record["parameters"]["radical.g"]["value"] == pytest.approx(G, abs=1e-3)
    assert [one["name"] for one in record["files"]] == ["../data/trace \u00fc.csv", "../data/empty.csv"]
    assert record["job"] == JOB
    assert set(record["versions"]) == {"spinfit", "python", "numpy", "scipy", "lmfit"} | (
        {"numba"} if COMPILED else set()
    )
    assert main(["inspect", str(Path(__file__).parent / "archives" / "format_1.h5")]) == 0
    out = capsys.readouterr().out
    assert "it cannot be rerun" in out
    assert "has no digest to check" in out


def test_line_positions_repeat_too(tmp_path, capsys):
    angles = np.arange(0, 180, 15)
    g = np.hypot(2.3 * np.cos(np.radians(angles)), 2.0 * np.sin(np.radians(angles)))
    lines = "angle_deg,field_mT\n" + "".join(
        f"{a},{9400 / (13.99624493 * x):.4f}\n" for a, x in zip(angles, g, strict=True)
    )
    (tmp_path / "l.csv").write_text(lines)
    (tmp_path / "j.toml").write_text(
        '[[species]]\nname = "c"\nS = "1/2"\ng = [2.0, 2.0, 2.28]\n[species.width]\ngaussian = "1 mT"\n'
        '[sample]\nform = "crystal"\naxis = [0, 1, 0]\nfrom = [0, 0, 1]\n[[lines]]\nfile = "l.csv"\n'
        'frequency = "9.4 GHz"\n[fit]\nvary = ["c.g_z", "c.g_x"]\n'
    )
    main(["fit", str(tmp_path / "j.toml"), "--out", str(tmp_path / "out")])
    capsys.readouterr()
    assert main(["rerun", str(tmp_path / "out" / "outcome.h5")]) == 0
    assert "agree bit for bit" in capsys.readouterr().out


# The comparison itself ------------------------------------------------------------------------------


def moved(**changes):
    found = outcome()
    return replace(found, parameters={**found.parameters, **changes})


def test_what_agrees_and_what_does_not():
    first = outcome()
    assert compare_outcomes(first, outcome(seconds=99.0)).identical
    g = first.parameters["cu.g_perp"]
    near = compare_outcomes(first, moved(**{"cu.g_perp": replace(g, value=g.value + 0.05 * 0.0001)}))
    assert (near.agrees, near.identical) == (True, False)
    assert near.changes[0].shift == pytest.approx(0.05)  # in units of the part from noise
    for other in (
        replace(g, value=g.value + 0.0002),
        replace(g, uncertainty=0.0004, uncertainty_noise=0.00015),
        replace(g, uncertainty=None, uncertainty_noise=None),
        replace(g, unit="mT"),
        replace(g, value=float("nan")),
    ):
        assert not compare_outcomes(first, moved(**{"cu.g_perp": other})).agrees
    # What was held is held; what nothing determines may move, since chi-squared stays.
    assert not compare_outcomes(first, moved(**{"cu.amount": Value(1.0 + 1e-12)})).agrees
    free = moved(**{"cu.amount": Value(1.0, varied=True)})
    assert compare_outcomes(free, moved(**{"cu.amount": Value(1.5, varied=True)})).agrees
    quality = first.quality
    for other in (
        replace(quality, chi2_reduced=1.03),
        replace(quality, points=759),
        replace(quality, converged=False),
        replace(quality, chi2_reduced=float("nan")),
    ):
        found = compare_outcomes(first, outcome(quality=other))
        assert not found.agrees
        assert len(found.remarks) == 1
    missing = dict(first.parameters)
    del missing["radical.g"]
    assert not compare_outcomes(first, replace(first, parameters=missing)).agrees
    masked = replace(first.curves[0], used=~first.curves[0].used)
    assert "which of them are used" in compare_outcomes(first, outcome(masked)).remarks[0]
    assert "the traces were" in compare_outcomes(first, replace(first, curves=())).remarks[0]


# Batches --------------------------------------------------------------------------------------------


@pytest.fixture
def batch(fitted, tmp_path) -> Path:
    """The folder of a batch as `spinfit batch` leaves it: one good fit twice, a damaged one, a failed one."""
    folder = tmp_path / "batch"
    rows = []
    for name, status in (("b", "good"), ("a", "good"), ("torn", "good"), ("none", "failed"), ("lost", "good")):
        value = "2.0061" if status == "good" else ""
        rows.append({"trace": name, "status": status, "note": "x,\n\"", "jar": "007", "hash": "1e5", "radical.g": value,
                     "radical.g_uncertainty": value and "0.0001", "warnings": "", "seconds": "1.5"})  # fmt: skip
        if name not in ("none", "lost"):
            (folder / name).mkdir(parents=True)
            content = fitted.read_bytes()
            (folder / name / "outcome.h5").write_bytes(content[: len(content) // 2] if name == "torn" else content)
    with open(folder / "summary.csv", "w", encoding="utf-8", newline="") as stream:
        writer = csv.DictWriter(stream, rows[0])
        writer.writeheader()
        writer.writerows(rows)
    (folder / "units.json").write_text('{"radical.g_uncertainty": "", "chi2": "mT", "jar": "l"}')
    return folder


def test_a_batch_in_one_file(batch, fitted, capsys):
    path, skipped = build_batch_archive(batch)
    assert path == batch / "batch.h5"
    assert list(skipped) == ["torn", "lost"]
    assert "damaged" in skipped["torn"]
    summary = read_batch_summary(path)
    assert summary.fits == ("b", "a")
    assert dict(summary.skipped) == skipped
    assert summary.table["trace"] == ["b", "a", "torn", "none", "lost"]
    assert summary.table["note"][0] == 'x,\n"'
    np.testing.assert_array_equal(summary.table["radical.g"], [2.0061, 2.0061, 2.0061, np.nan, 2.0061])
    assert "seconds" not in summary.table
    one, single = read_archive(path, "a"), read_archive(fitted)
    assert one.outcome.parameters == single.outcome.parameters
    assert one.files == single.files
    assert main(["rerun", str(path), "--trace", "a"]) == 0
    assert "agree bit for bit" in capsys.readouterr().out
    assert main(["inspect", str(path)]) == 0
    out = capsys.readouterr().out
    for text in ("archive of a batch: 2 fits", "4 good, 1 failed", "b, a", "torn: ", "lost: there is no outcome.h5"):
        assert text in out
    assert main(["inspect", str(path), "--json"]) == 0
    assert json.loads(capsys.readouterr().out)["fits"] == ["b", "a"]


def test_a_batch_opens_on_its_first_g(batch):
    root = nxload(write_batch_archive(batch))
    data = root.get_default()
    assert data.nxpath == "/spinfit.summary/overview"
    np.testing.assert_array_equal(data.nxsignal.nxvalue, [2.0061, 2.0061, 2.0061, np.nan, 2.0061])
    assert data.nxerrors.nxvalue[0] == 0.0001
    assert root["a"].get_default().nxname == "fit"


def test_a_batch_can_be_made_again_and_is_then_the_same(batch):
    first = write_batch_archive(batch).read_bytes()
    text = (batch / "summary.csv").read_text(encoding="utf-8")
    (batch / "summary.csv").write_text(text.replace("1.5", "9.9"), encoding="utf-8")
    assert write_batch_archive(batch).read_bytes() == first
    (batch / "summary.csv").unlink()
    path, skipped = build_batch_archive(batch)
    assert read_batch_summary(path).fits == ("a", "b")
    assert list(skipped) == ["torn"]
    assert read_batch_summary(path).table == {}


def test_a_known_archive_is_copied_and_any_other_is_read(batch, monkeypatch):
    """What is copied as it stands is what reading and writing it gives; a hash of another file is no pass."""
    read = write_batch_archive(batch)
    trees = {name: read_group(read, (name,)) for name in "ab"}
    known = {name: hashlib.sha256((batch / name / "outcome.h5").read_bytes()).hexdigest() for name in "ab"}
    asked, single = [], batch_archive._single
    monkeypatch.setattr(batch_archive, "_single", lambda path: asked.append(path.parent.name) or single(path))
    path, skipped = build_batch_archive(batch, known | {"torn": "0" * 64})
    assert asked == ["torn"]
    for name, tree in trees.items():
        copied = read_group(path, (name,))
        assert digest_of(copied) == digest_of(tree)
        assert copied.attrs == tree.attrs
        assert read_archive(path, name).outcome.parameters == read_archive(read, name).outcome.parameters
    assert set(skipped) == {"torn", "lost"}
    with h5py.File(path) as whole:
        assert whole["a"].attrs["NX_class"] == "NXentry"
        assert whole["a/spinfit.outcome"].attrs["NX_class"] == "NXsubentry"
        assert whole["a"].attrs[DIGEST] == read_group(batch / "a" / "outcome.h5").attrs[DIGEST]


def test_a_batch_of_format_2_is_read(batch, tmp_path):
    """Its fits have digests of their own, made anew when they became entries."""
    path = tmp_path / "old.h5"
    tree = read_group(batch / "a" / "outcome.h5")
    with h5py.File(path, "w") as root:
        write_tree(root.create_group("a"), sealed(as_entry(tree)))
        root.attrs.update({"NX_class": "NXroot", "spinfit_format": 2, "spinfit_kind": "batch"})
    assert read_archive(path, "a").record == read_archive(batch / "a" / "outcome.h5").record
    with h5py.File(path, "r+") as root:
        root["a/spinfit.outcome"].attrs["NX_class"] = "NXnote"
    with pytest.raises(InputError, match="its digest is another"):
        read_archive(path, "a")


@pytest.mark.parametrize("name", ["..", ".", "../out", "/etc", "a/b", "", "spinfit.summary", "C:\\x", "x" * 300, "b"])
def test_names_in_a_table_stay_in_the_folder(batch, name, fitted):
    (batch.parent / "out").mkdir()
    shutil.copy(fitted, batch.parent / "out" / "outcome.h5")
    shutil.copy(fitted, batch / "outcome.h5")
    with open(batch / "summary.csv", "a", encoding="utf-8", newline="") as stream:
        csv.writer(stream).writerow([name, "good", "", "", "", "", "", "", ""])
    path, skipped = build_batch_archive(batch)
    assert read_batch_summary(path).fits == ("b", "a")
    assert len(skipped) == 3


def test_what_a_batch_refuses(batch, tmp_path, capsys):
    path = write_batch_archive(batch)
    before = path.read_bytes()
    for arguments, says in (
        ([str(path)], "name one: --trace NAME"),
        ([str(path), "--trace", "bb"], "did you mean"),
        ([str(path), "--trace", "spinfit.summary"], "holds no fit"),
        ([str(path), "--trace", "../a"], "holds no fit"),
        ([str(batch / "a" / "outcome.h5"), "--trace", "a"], "holds one fit"),
    ):
        assert main(["rerun", *arguments]) == 2
        assert says in capsys.readouterr().err
    assert main(["inspect", str(path), "--plot", str(tmp_path / "a.png")]) == 2
    (tmp_path / "empty").mkdir()
    with pytest.raises(InputError, match="holds no fit that could be kept"):
        write_batch_archive(tmp_path / "empty")
    assert list((tmp_path / "empty").iterdir()) == []
    for text, says in (
        ("a,b\n1,2\n", "no column trace"),
        ("trace\n1,2\n", "another number here"),
        ("trace\n\xff", None),
    ):
        (batch / "summary.csv").write_bytes(text.encode("latin-1"))
        with pytest.raises(InputError, match=says):
            write_batch_archive(batch)
        assert path.read_bytes() == before


def test_a_damaged_batch_is_told(batch, capsys):
    path = write_batch_archive(batch)
    content = path.read_bytes()
    with h5py.File(path, "r+") as root:
        (trace,) = root["a/spinfit.outcome/traces"].asstr()[()]
        root[f"a/{trace}/frequency"][...] = 1.0
        root["spinfit.summary/table/column_6/values"][0] = 2.1
    with pytest.raises(InputError, match="is damaged or was changed"):
        read_archive(path, "a")
    assert read_archive(path, "b").outcome.name == "j\u00f6b"
    with pytest.raises(InputError, match="is damaged or was changed"):
        read_batch_summary(path)
    for size in (100, len(content) // 2, len(content) - 1):
        path.write_bytes(content[:size])
        assert main(["inspect", str(path)]) == 2
        assert capsys.readouterr().err.count("\n") == 1
