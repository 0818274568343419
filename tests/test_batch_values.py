"""The table of values and the template: what a cell becomes, what is refused, what a filled job says."""

from __future__ import annotations

import os
import tomllib
from pathlib import Path

import batch_jobs
import pytest

from spinfit.batch.tasks import jobs_plan, template_plan
from spinfit.batch.template import Template
from spinfit.batch.values import read_values
from spinfit.errors import InputError
from spinfit.files.job import read_job


@pytest.fixture
def here(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    batch_jobs.write_batch(tmp_path, 2)
    return tmp_path


def table(text: str, name: str = "values.csv"):
    Path(name).write_text(text, encoding="utf-8")
    return read_values(name)


def refused(text: str) -> str:
    with pytest.raises(InputError) as caught:
        table(text)
    assert str(caught.value).startswith("values.csv: ")
    assert "\n" not in str(caught.value)
    return str(caught.value).removeprefix("values.csv: ")


def test_cells_become_keys_of_the_trace(here):
    values = table(
        "file,temperature,frequency_GHz,phase / deg,field_offset [mT],baseline,field_scale,fit_range,exclude,"
        "columns.signal,field_calibration.slope,field_calibration.zero_mT,axis,microwave,sample\n"
        'a.csv,120 K,9.4321,1.5,-0.02,none,1.001,"320, 350 mT",330 mT,2,216 mT/V,3,0 0 1,parallel,tile 1\n'.replace(
            "330 mT,2", '"325, 330 mT; 340, 341 mT",2'
        )
    )
    (row,) = values.rows
    assert dict(row.keys) == {
        "temperature": "120 K",
        "frequency": "9.4321 GHz",
        "phase": "1.5 deg",
        "field_offset": "-0.02 mT",
        "baseline": "none",
        "field_scale": 1.001,
        "fit_range": "320, 350 mT",
        "exclude": ["325, 330 mT", "340, 341 mT"],
        "columns": {"signal": 2},
        "field_calibration": {"slope": "216 mT/V", "zero": "3 mT"},
        "axis": [0.0, 0.0, 1.0],
        "microwave": "parallel",
    }
    assert row.free == {"sample": "tile 1"}
    assert values.free == ("sample",)


def test_semicolons_comments_blank_lines_and_decimal_commas(here):
    values = table("# made by hand\nfile;temperature_K;sample\n\na.csv;77,5;x, y\nb.csv;;z\n")
    assert [dict(row.keys) for row in values.rows] == [{"temperature": "77.5 K"}, {}]
    assert values.rows[0].free == {"sample": "x, y"}
    assert [row.line for row in values.rows] == [4, 5]


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("file,temperature\na.csv,120\n", 'line 2.temperature: "120" has no unit'),
        ("file,temperature_K\na.csv,cold\n", "line 2.temperature_K: "),
        ("file,temprature\na.csv,120 K\n", 'a column "temprature", which is nearly "temperature"'),
        ("file,frequency_mT\na.csv,9\n", 'a column "frequency_mT", which is nearly "frequency"'),
        ("file,sample,sample\na.csv,1,2\n", 'two columns are headed "sample"'),
        ("file,temperature,temperature_K\na.csv,1 K,2\n", '"temperature_K" gives temperature a second time'),
        ("file,,b\na.csv,1,2\n", "column 2 has no heading"),
        ("file,sample\na.csv,1,2\n", "line 2: 3 cells under 2 headings"),
        ("file,sample\n,1\n", "line 2: the first column is empty"),
        ("file,sample\na.csv,1\na.csv,2\n", 'line 3: "a.csv" stands in line 2 already'),
        ("file,baseline\na.csv,1.5\n", 'line 2.baseline: "1.5" is not a whole number'),
        ("file,sample\n", "holds no rows"),
        ("", "holds no rows"),
        ('file,sample\na.csv,"1\n', "is no table"),
    ],
)
def test_refused(here, text, said):
    assert said in refused(text)


def test_a_table_that_is_not_there(here):
    with pytest.raises(InputError, match="nix.csv: --values: cannot be read"):
        read_values("nix.csv")


def test_rows_are_found_by_path_else_by_name(here):
    (here / "lists").mkdir()
    values = table("file,sample\n../traces/tile-00.csv,one\nelsewhere/tile-01.csv,two\n", "lists/v.csv")
    assert values.of("traces/tile-00.csv").free["sample"] == "one"
    assert values.of(str(here / "traces/tile-01.csv")).free["sample"] == "two"
    with pytest.raises(InputError, match='no row for "traces/tile-07.csv"'):
        values.of("traces/tile-07.csv")


def test_without_traces_the_table_says_which(here):
    values = table("file,name,temperature_K\ntraces/tile-01.csv,cold,77\ntraces/tile-00.csv,,290\n")
    plan = template_plan(Template("tile.toml"), [], values)
    assert [(task.name, task.file) for task in plan] == [
        ("cold", os.path.join("traces", "tile-01.csv")),
        ("tile_00", os.path.join("traces", "tile-00.csv")),
    ]


def test_a_filled_template_is_a_job(here):
    values = table("file,temperature_K\ntraces/tile-00.csv,77\n")
    plan = template_plan(Template("tile.toml"), ["traces/tile-00.csv"], values)
    order = plan.order(next(iter(plan)), here / "out")
    said = tomllib.loads(order.text)["trace"]
    assert said == [
        {
            "name": "tile_00",
            "file": "../../traces/tile-00.csv",
            "temperature": "77 K",
            "field_uncertainty": "0.02 mT",
        }
    ]
    assert "# rough" in order.text
    assert "# all there is" in order.text
    assert dict(order.shown) == {"../../traces/tile-00.csv": "traces/tile-00.csv"}
    (here / "out/tile_00").mkdir(parents=True)
    (here / "out/tile_00/job.toml").write_text(order.copy)
    job = read_job(here / "out/tile_00/job.toml")
    assert job.traces[0].temperature == 77
    assert len(job.traces[0].field) == 120


def test_a_template_that_cannot_be_cut_is_written_anew(here):
    inline = batch_jobs.TEMPLATE.replace("[[trace]]\nfield_uncertainty", "field_uncertainty")
    inline = 'trace = [{name = "t", phase = "3 deg"}]\n' + inline.replace('field_uncertainty = "0.02 mT"\n', "")
    (here / "tile.toml").write_text(inline)
    plan = template_plan(Template("tile.toml"), ["traces/tile-00.csv"])
    order = plan.order(next(iter(plan)), here / "out")
    tables = tomllib.loads(order.text)
    assert tables["trace"] == [{"name": "t", "phase": "3 deg", "file": "../../traces/tile-00.csv"}]
    assert tables["fit"] == tomllib.loads(inline)["fit"]


def test_tables_inside_the_trace_go_with_it(here):
    text = batch_jobs.TEMPLATE.replace(
        "[fit]", '[trace.columns]\nfield = 1\nsignal = 2\n\n# of the fit\n[fit]'
    )  # fmt: skip
    (here / "tile.toml").write_text(text)
    plan = template_plan(Template("tile.toml"), ["traces/tile-00.csv"])
    # A subtable of an array stands in single brackets that begin with the array's name.
    said = tomllib.loads(plan.order(next(iter(plan)), here / "out").text)
    assert said["trace"][0]["columns"] == {"field": 1, "signal": 2}
    assert said["fit"]["vary"] == ["r.g", "r.width.gaussian"]


def test_the_templates_background_is_found_from_its_folder(here):
    (here / "models").mkdir()
    text = batch_jobs.TEMPLATE.replace("[[trace]]", '[[trace]]\nbackground = "empty.csv"')
    (here / "models/tile.toml").write_text(text)
    batch_jobs.write_trace(here / "models/empty.csv", 5)
    plan = template_plan(Template("models/tile.toml"), ["traces/tile-00.csv"])
    order = plan.order(next(iter(plan)), here / "out")
    assert tomllib.loads(order.text)["trace"][0]["background"] == "../../models/empty.csv"
    first = order.hash
    batch_jobs.write_trace(here / "models/empty.csv", 6)
    assert plan.order(next(iter(plan)), here / "out").hash != first


def test_the_hash_tells_what_the_outcome_depends_on(here):
    template = Template("tile.toml")
    plan = template_plan(template, ["traces/tile-00.csv"], table("file,sample\ntraces/tile-00.csv,a\n"))
    other = template_plan(template, ["traces/tile-00.csv"], table("file,sample\ntraces/tile-00.csv,b\n"))
    first, second = (one.order(next(iter(one)), here / "out").hash for one in (plan, other))
    assert first == second  # a column of the user's own changes no fit
    warm = template_plan(template, ["traces/tile-00.csv"], table("file,temperature_K\ntraces/tile-00.csv,9\n"))
    assert warm.order(next(iter(warm)), here / "out").hash != first
    assert plan.order(next(iter(plan)), here / "out", pictures=False).hash != first
    assert plan.order(next(iter(plan)), here / "out", time_limit=5.0).hash == first


@pytest.mark.parametrize(
    ("old", "new", "said"),
    [
        ("[[trace]]", "[[trace]]\n[[trace]]", "trace: 2 traces; a template has one [[trace]]"),
        ("[[trace]]", "[trace]", "trace: no trace; a template has one [[trace]], in double brackets"),
        ("[[trace]]", "[[trase]]", 'unknown key "trase"; did you mean "trace"?'),
        ('"r.g", ', '"r.gz", ', 'fit.vary: "r.gz" is no parameter of this model'),
        ("field_uncertainty", "field_uncertanty", "field_uncertanty"),
        ("g = 2.005", "g = 2.005, 1", "line 5"),
    ],
)
def test_what_is_wrong_in_a_template_is_said_before_anything_runs(here, old, new, said):
    (here / "tile.toml").write_text(batch_jobs.TEMPLATE.replace(old, new, 1))
    with pytest.raises(InputError) as caught:
        Template("tile.toml")
    assert str(caught.value).startswith("tile.toml: ")
    assert said in str(caught.value)


@pytest.mark.parametrize(
    ("files", "said"),
    [
        (("a/kiln 1.csv", "b/kiln-1.csv"), 'two traces are called "kiln_1": a/kiln 1.csv and b/kiln-1.csv'),
        (("Kiln.csv", "kiln.csv"), "names that differ in case alone"),
    ],
)
def test_clashing_traces_are_refused(here, files, said):
    with pytest.raises(InputError, match=said):
        template_plan(Template("tile.toml"), files)


@pytest.mark.parametrize(
    ("files", "said"),
    [
        (("a/kiln.toml", "b/kiln.toml"), 'two jobs are called "kiln": a/kiln.toml and b/kiln.toml'),
        (("summary.csv.toml",), '"summary.csv" cannot be the name of a folder here'),
        ((".toml.toml",), '".toml" cannot be the name of a folder here'),
    ],
)
def test_clashing_jobs_are_refused(files, said):
    with pytest.raises(InputError, match=said):
        jobs_plan(files)
