"""``spinfit summary``: conditions by truth tables, sorting, what is printed, what is refused, the picture."""

from __future__ import annotations

import json
import operator

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from matplotlib.image import imread
from toml_files import FUZZ

from spinfit.batch.query import condition
from spinfit.cli import main
from spinfit.errors import InputError
from spinfit.report.column_plot import column_figure

COLUMNS = ["trace", "status", "outlier", "temperature", "cu.g_z", "cu.g_z_uncertainty", "converged", "warnings"]
ROWS = """kiln_1,good,,77,2.31,0.002,True,
kiln_2,good,,120,2.29,0.001,True,header_differs
kiln_3,not converged,,9.5,2.4,,False,at_limit header_differs
kiln_4,failed,,,,,,
kiln_5,good,cu.g_z,300,3.5,0.001,True,
"""
UNITS = {"temperature": "K", "cu.g_z": ""}


@pytest.fixture
def folder(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    (tmp_path / "out").mkdir()
    (tmp_path / "out/summary.csv").write_text(",".join(COLUMNS) + "\n" + ROWS)
    (tmp_path / "out/units.json").write_text(json.dumps(UNITS))
    return tmp_path


def chosen(capsys, *options: str) -> list[str]:
    assert main(["summary", "out", "--json", *options]) == 0
    return [row["trace"][-1] for row in json.loads(capsys.readouterr().out)]


@pytest.mark.parametrize(
    ("where", "kept"),
    [
        ("cu.g_z > 2.3", "135"),
        ("cu.g_z >= 2.31 and temperature < 100", "13"),
        ("2.3 < cu.g_z", "135"),
        ("cu.g_z < 2.3 or temperature = 9.5", "23"),
        ("not status = good", "34"),
        ('status = "not converged"', "3"),
        ("status != good", "34"),
        ("outlier ~ cu", "5"),
        ("warnings ~ at_limit", "3"),
        ("converged = false", "3"),
        ("temperature = 120.0", "2"),
        ('cu.g_z = ""', "4"),
        ("not (temperature > 100 or cu.g_z > 2.35)", "14"),
        ("temperature > 100 and temperature > 200 or trace = kiln_3", "35"),
        ("cu.g_z_uncertainty < 0.0015", "25"),
        ("temperature > cu.g_z", "1235"),
    ],
)
def test_where(folder, capsys, where, kept):
    assert "".join(chosen(capsys, "--where", where)) == kept


@pytest.mark.parametrize(
    ("where", "said"),
    [
        ("", "is empty"),
        ("cu.g_z >", "ends too early"),
        ("cu.g_z", "ends too early"),
        ("cu.gz > 2", 'there is no column "cu.gz"; did you mean "cu.g_z"?'),
        ("STATUS = good", 'there is no column "STATUS"; known: converged, cu.g_z,'),
        ("(cu.g_z > 2", 'a ")" is missing'),
        ("cu.g_z > 2 temperature", '"temperature" was not expected'),
        ("cu.g_z + 2 > 3", '"+" is no comparison'),
        ("cu.g_z > > 3", '">" was not expected'),
        ("not " * 60 + "cu.g_z > 1", "nested more than 50 deep"),
        ('trace = "kiln', "cannot be read"),
        ("__import__('os').system('x') > 0", "__import__"),
    ],
)
def test_conditions_that_are_refused(folder, capsys, where, said):
    assert main(["summary", "out", "--where", where]) == 2
    error = capsys.readouterr().err
    assert said in error
    assert error.count("\n") == 1


@FUZZ
@given(
    st.recursive(
        st.tuples(st.sampled_from("ab"), st.sampled_from(["<", "<=", ">", ">=", "=", "!="]), st.integers(-2, 2)),
        lambda inner: st.tuples(inner, st.sampled_from(["and", "or"]), inner) | st.tuples(st.just("not"), inner),
        max_leaves=6,
    ),
    st.integers(-2, 2),
    st.integers(-2, 2),
)
def test_conditions_mean_what_python_means(tree, a, b):
    """Against Python's own operators on random trees, written with brackets everywhere."""
    marks = {"<": "lt", "<=": "le", ">": "gt", ">=": "ge", "=": "eq", "!=": "ne"}

    def said(node):
        if node[0] == "not":
            return f"not ({said(node[1])})"
        return (
            f"{node[0]} {node[1]} {node[2]}"
            if node[0] in ("a", "b")
            else f"({said(node[0])}) {node[1]} ({said(node[2])})"
        )

    def true(node):
        if node[0] == "not":
            return not true(node[1])
        if node[0] in ("a", "b"):
            return getattr(operator, marks[node[1]])({"a": a, "b": b}[node[0]], node[2])
        return (all if node[1] == "and" else any)((true(node[0]), true(node[2])))

    assert condition(said(tree), ["a", "b"])({"a": str(a), "b": f"{b}.0"}) == true(tree)


@FUZZ
@given(st.text(max_size=30))
def test_any_text_is_a_condition_or_refused(text):
    try:
        found = condition(text, COLUMNS)
    except InputError as refused:
        said = str(refused)
        found = None
    assert "\n" not in said if found is None else found(dict.fromkeys(COLUMNS, "1")) in (True, False)


def test_sorted_numbers_as_numbers_empty_last(folder, capsys):
    assert chosen(capsys, "--sort", "temperature") == list("31254")
    assert chosen(capsys, "--sort", "temperature", "--reverse") == list("52134")
    assert chosen(capsys, "--sort", "status,cu.g_z") == list("42153")
    assert main(["summary", "out", "--sort", "temprature"]) == 2
    assert 'did you mean "temperature"?' in capsys.readouterr().err


def test_printed_with_uncertainties_and_units(folder, capsys):
    assert main(["summary", "out"]) == 0
    out = capsys.readouterr().out
    lines = out.splitlines()
    assert lines[0].split() == "trace status outlier temperature / K cu.g_z warnings".split()
    assert "2.310(2)" in lines[2]
    assert lines[-1] == "3 good, 1 not converged, 1 failed"
    assert main(["summary", "out/summary.csv", "--columns", "temperature"]) == 0
    assert capsys.readouterr().out.splitlines()[0].split() == ["trace", "temperature", "/", "K"]


def test_json_has_types(folder, capsys):
    assert main(["summary", "out", "--json", "--where", "trace = kiln_4 or trace = kiln_5"]) == 0
    four, five = json.loads(capsys.readouterr().out)
    assert four["cu.g_z"] is None
    assert (five["temperature"], five["converged"], five["cu.g_z"]) == (300, True, 3.5)


def test_a_column_drawn_against_another(folder, capsys):
    assert main(["summary", "out", "--plot", "g.png", "--x", "temperature", "--y", "cu.g_z"]) == 0
    assert imread("g.png").ndim == 3
    for options, said in (
        (["--plot", "g.png"], "--y: is missing"),
        (["--plot", "g.tif", "--y", "cu.g_z"], '".tif" is not a format of pictures'),
        (["--y", "cu.g_z"], "add --plot FILE.png"),
        (["--plot", "g.png", "--y", "status"], "no row has numbers in both columns"),
        (["--plot", "g.png", "--y", "cu.gz"], 'did you mean "cu.g_z"?'),
    ):
        assert main(["summary", "out", *options]) == 2
        assert said in capsys.readouterr().err


def test_the_picture_has_points_bars_and_open_outliers():
    x, y = np.array([1.0, 2.0, 3.0]), np.array([2.1, 2.2, 9.0])
    figure = column_figure(
        x, y, labels=("temperature / K", "cu.g_z"), y_uncertainty=np.array([0.1, np.nan, 0.2]), marked=[0, 0, 1]
    )
    (axes,) = figure.axes
    plain, open_ = axes.containers
    assert plain.lines[0].get_xydata().tolist() == [[1.0, 2.1], [2.0, 2.2]]
    assert open_.lines[0].get_xydata().tolist() == [[3.0, 9.0]]
    bars = open_.lines[2][0].get_segments()
    np.testing.assert_allclose(bars[0][:, 1], [8.8, 9.2])
    assert (axes.get_xlabel(), axes.get_ylabel()) == ("temperature / K", "cu.g_z")
    assert [text.get_text() for text in axes.get_legend().get_texts()] == ["outlier"]


@pytest.mark.parametrize("content", ["", "a,b\n1,2\n", "trace,status\nx,y,z\n"])
def test_what_is_no_table_is_refused(tmp_path, capsys, content):
    (tmp_path / "summary.csv").write_text(content)
    assert main(["summary", str(tmp_path)]) == 2
    error = capsys.readouterr().err
    assert str(tmp_path / "summary.csv") in error
    assert error.count("\n") == 1
