"""``spinfit fit`` from a file to a folder: what is printed, what is written, what is refused.

The trace is a closed form: the derivative of one Gaussian line at h nu / (g muB).
"""

from __future__ import annotations

import csv
import io
import json
import os
import re

import h5py
import numpy as np
import pytest
from scipy import constants

from spinfit.cli import main
from spinfit.commands import fit as command

G = 2.0061
FREQUENCY = 9432.1
WIDTH = 0.8
CENTRE = constants.h * FREQUENCY * 1e6 / (G * constants.physical_constants["Bohr magneton"][0]) * 1e3
FILES = {"outcome.json", "curves.csv", "fit.png", "fit.svg", "report.html", "outcome.h5"}

JOB = """
[[species]]
name = "radical"
S = "1/2"
g = 2.005
[species.width]
gaussian = "1.0 mT"

[[trace]]
file = "trace.csv"
field_uncertainty = "0.02 mT"
frequency_uncertainty = "0.2 MHz"

[fit]
vary = ["radical.g", "radical.width.gaussian"]
"""


def write_trace(folder, *, points=400, noise=20.0, name="trace.csv", header=f"# frequency {FREQUENCY / 1e3} GHz\n"):
    field = np.linspace(CENTRE - 8, CENTRE + 8, points)
    x = (field - CENTRE) / (WIDTH / 2)
    signal = -2000 * x * np.exp(-0.5 * x**2) + 100 + 3 * (field - CENTRE)
    signal = signal + np.random.default_rng(11).normal(0, noise, points)
    rows = "".join(f"{a:.5f},{b:.4f}\n" for a, b in zip(field, signal, strict=True))
    (folder / name).write_text(f"{header}field/mT,signal\n{rows}")


@pytest.fixture
def folder(tmp_path, monkeypatch):
    write_trace(tmp_path)
    (tmp_path / "job.toml").write_text(JOB)
    monkeypatch.chdir(tmp_path)
    return tmp_path


def test_the_main_job(folder, capsys):
    assert main(["fit", "job.toml", "--out", "out/deep"]) == 0
    out, err = capsys.readouterr()
    assert err == ""
    assert {path.name for path in (folder / "out/deep").iterdir()} == FILES
    outcome = json.loads((folder / "out/deep/outcome.json").read_text(encoding="utf-8"))
    g = outcome["parameters"]["radical.g"]
    assert set(g) == {"value", "uncertainty", "uncertainty_noise", "uncertainty_field", "unit", "varied", "at_limit"}
    assert abs(g["value"] - G) < 3 * g["uncertainty_noise"]
    # The stated uncertainties of axis and frequency, by the sensitivities of g = h nu / muB B.
    assert g["uncertainty_field"] == pytest.approx(G * np.hypot(0.02 / CENTRE, 0.2 / FREQUENCY), rel=0.02)
    assert g["uncertainty"] == pytest.approx(np.hypot(g["uncertainty_noise"], g["uncertainty_field"]), rel=1e-9)
    width = outcome["parameters"]["radical.width.gaussian"]
    assert width["unit"] == "mT"
    assert abs(width["value"] - WIDTH) < 3 * width["uncertainty"]
    assert outcome["quality"]["converged"] is True
    assert outcome["quality"]["chi2_reduced"] == pytest.approx(1, abs=0.25)
    assert outcome["correlations"]["names"] == ["radical.g", "radical.width.gaussian"]
    assert outcome["provenance"]["job"] == JOB
    assert "radical.g" in out
    assert re.search(r"radical\.g +2\.0061\d*\(\d+\)", out)
    assert "noise part" in out
    assert "converged" in out


def test_curves_are_columns_that_add_up(folder):
    main(["fit", "job.toml", "--out", "out"])
    rows = list(csv.reader(io.StringIO((folder / "out/curves.csv").read_text())))
    assert rows[0] == ["field_mT", "measured", "fitted", "residual", "radical"]
    data = np.array(rows[1:], dtype=float)
    assert data.shape == (400, 5)
    np.testing.assert_allclose(data[:, 1] - data[:, 2], data[:, 3], atol=2e-5)
    baseline = data[:, 2] - data[:, 4]
    np.testing.assert_allclose(np.diff(baseline, 2), 0, atol=1e-4)  # a straight line


def test_a_rerun_gives_the_same_bits(folder):
    for out in ("one", "two"):
        assert main(["fit", "job.toml", "--out", out]) == 0
    for name in FILES:
        assert (folder / "one" / name).read_bytes() == (folder / "two" / name).read_bytes(), name


def test_several_traces_have_a_column_that_tells_them_apart(folder):
    write_trace(folder, name="second.csv")
    (folder / "job.toml").write_text(JOB.replace("[fit]", '[[trace]]\nfile = "second.csv"\n\n[fit]'))
    assert main(["fit", "job.toml", "--out", "out"]) == 0
    rows = list(csv.reader(io.StringIO((folder / "out/curves.csv").read_text())))
    assert rows[0][:2] == ["trace", "field_mT"]
    assert {row[0] for row in rows[1:]} == {"trace", "second"}
    with h5py.File(folder / "out/outcome.h5") as root:
        assert {"trace", "second"} <= set(root)


def test_json_is_outcome_json_and_nothing_else(folder, capsys):
    assert main(["fit", "job.toml", "--json", "--out", "out"]) == 0
    out, err = capsys.readouterr()
    assert err == ""
    assert out == (folder / "out/outcome.json").read_text(encoding="utf-8")


def test_without_out_nothing_is_written(folder, capsys):
    before = sorted(os.listdir(folder))
    assert main(["fit", "job.toml"]) == 0
    assert sorted(os.listdir(folder)) == before
    assert "nothing was written: add --out DIR" in capsys.readouterr().out


def test_ctrl_c_keeps_the_best_so_far(folder, monkeypatch, capsys):
    calls = []

    def stop(*args, **kwargs):
        calls.append(args)
        if len(calls) == 4:
            raise KeyboardInterrupt
        return "fitting"

    monkeypatch.setattr(command, "PROGRESS_EVERY", 0.0)
    monkeypatch.setattr(command, "progress_line", stop)
    assert main(["fit", "job.toml", "--out", "out"]) == 1
    outcome = json.loads((folder / "out/outcome.json").read_text(encoding="utf-8"))
    assert outcome["quality"]["finished"] is False
    assert outcome["quality"]["converged"] is False
    assert outcome["parameters"]["radical.g"]["uncertainty"] is None
    assert {path.name for path in (folder / "out").iterdir()} == FILES
    assert "STOPPED" in capsys.readouterr().out


def test_progress_is_plain_lines_where_nobody_watches(folder, monkeypatch, capsys):
    monkeypatch.setattr(command, "PROGRESS_EVERY", 0.0)
    assert main(["fit", "job.toml"]) == 0
    lines = capsys.readouterr().err.splitlines()
    assert lines
    assert all(line.startswith("spinfit: fitting: ") and "radical.g 2.00" in line for line in lines)


def test_old_results_are_replaced_whole(folder):
    (folder / "out").mkdir()
    (folder / "out/outcome.json").write_text("old")
    (folder / "out/mine.txt").write_text("kept")
    assert main(["fit", "job.toml", "--out", "out"]) == 0
    assert json.loads((folder / "out/outcome.json").read_text(encoding="utf-8"))["parameters"]
    assert (folder / "out/mine.txt").read_text() == "kept"
    assert {path.name for path in (folder / "out").iterdir()} == FILES | {"mine.txt"}


def test_when_one_file_cannot_be_written_none_is(folder, capsys):
    (folder / "out/fit.png").mkdir(parents=True)  # a folder stands where the picture should
    assert main(["fit", "job.toml", "--out", "out"]) == 2
    assert [path.name for path in (folder / "out").iterdir()] == ["fit.png"]
    err = capsys.readouterr().err
    assert err.count("\n") == 1
    assert "fit.png: is a folder" in err


BAD_PLACES = {"a file": ("job.toml", "is a file"), "below a file": ("job.toml/out", "cannot be made")}


@pytest.mark.parametrize("case", BAD_PLACES)
def test_a_place_that_cannot_be_written_is_refused_before_the_fit(case, folder, monkeypatch, capsys):
    place, says = BAD_PLACES[case]
    monkeypatch.setattr("spinfit.fitting.driver.fit", lambda *a, **k: pytest.fail("the fit was begun"))
    assert main(["fit", "job.toml", "--out", place]) == 2
    err = capsys.readouterr().err
    assert err.count("\n") == 1
    assert says in err
    assert "--out" in err


def changed(old, new):
    return JOB.replace(old, new)


BAD_JOBS = {
    "not toml": ("[[species\n", ["line 1"]),
    "unknown key": (changed("file =", "fiel ="), ["fiel", 'did you mean "file"?']),
    "unknown table": (changed("[fit]", "[fitt]"), ["fitt"]),
    "missing data": (changed("trace.csv", "nowhere.csv"), ["nowhere.csv", "no such file"]),
    "missing unit": (changed('"1.0 mT"', "1.0"), ["width.gaussian", "1.0 mT"]),
    "wrong unit": (changed('"1.0 mT"', '"1.0 GHz"'), ["width.gaussian", "GHz"]),
    "impossible spin": (changed('"1/2"', '"1/3"'), ["S", "1/3"]),
    "negative width": (changed('"1.0 mT"', '"-1.0 mT"'), ["width.gaussian", "-1"]),
    "not finite": (changed("g = 2.005", "g = nan"), ["g"]),
    "negative frequency": (changed('file = "trace.csv"', 'file = "trace.csv"\nfrequency = "-9 GHz"'), ["frequency"]),
    "reversed range": (changed('file = "trace.csv"', 'file = "trace.csv"\nfit_range = "340, 330 mT"'), ["fit_range"]),
    "name unknown": (changed('"radical.g"', '"radical.gg"'), ["radical.gg"]),
    "limits exclude": (JOB + '[fit.limits]\n"radical.g" = [2.1, 2.2]\n', ["radical.g", "2.1"]),
    "tie runs code": (JOB + '[fit.tie]\n"radical.width.gaussian" = "__import__(\'os\').getpid()"\n', ["fit.tie"]),
    "no line": (changed("g = 2.005", "g = 1.2"), ["radical"]),
}


@pytest.mark.parametrize("case", BAD_JOBS)
def test_bad_jobs_are_one_line_exit_2_and_leave_nothing(case, folder, capsys):
    text, says = BAD_JOBS[case]
    (folder / "job.toml").write_text(text)
    assert main(["fit", "job.toml", "--out", "out"]) == 2
    out, err = capsys.readouterr()
    assert out == ""
    assert err.count("\n") == 1, err
    assert "job.toml" in err or "nowhere.csv" in err
    for word in says:
        assert word in err
    assert not (folder / "out").exists()


BAD_TRACES = {
    "empty": b"",
    "binary": bytes(range(256)) * 8,
    "not finite": b"# frequency 9.4 GHz\nfield/mT,signal\n1,2\n2,nan\n3,4\n",
    "too few": b"# frequency 9.4 GHz\nfield/mT,signal\n330,2\n331,3\n332,4\n",
    "no frequency": b"field/mT,signal\n" + b"".join(b"%d,%d\n" % (300 + k, k % 7) for k in range(60)),
}


@pytest.mark.parametrize("case", BAD_TRACES)
def test_bad_traces_are_one_line_and_exit_2(case, folder, capsys):
    (folder / "trace.csv").write_bytes(BAD_TRACES[case])
    assert main(["fit", "job.toml"]) == 2
    out, err = capsys.readouterr()
    assert out == ""
    assert err.count("\n") == 1, err
    assert "trace" in err
    assert "a fault of spinfit" not in err


def test_profile_and_bootstrap_agree_with_the_covariance(folder, capsys):
    """One Gaussian line in white noise: chi-squared is nearly a parabola, so that all three are one number."""
    argv = ["fit", "job.toml", "--out", "out", "--profile", "radical.g", "--bootstrap", "40"]
    assert main(argv) == 0
    shown = capsys.readouterr().out
    assert "profile of" in shown
    assert "bootstrap of" in shown
    outcome = json.loads((folder / "out/outcome.json").read_text(encoding="utf-8"))
    g = outcome["parameters"]["radical.g"]
    low, high = outcome["profiles"]["radical.g"]["interval_68"]
    assert (high - low) / 2 == pytest.approx(g["uncertainty_noise"], rel=0.05)
    assert low < g["value"] < high
    drawn = outcome["bootstrap"]
    assert drawn["resamples"] + drawn["failed"] == 40
    # A standard deviation from 40 values is known to 11 %: three times that.
    assert drawn["parameters"]["radical.g"]["uncertainty"] == pytest.approx(g["uncertainty_noise"], rel=0.34)
    page = (folder / "out/report.html").read_text(encoding="utf-8")
    assert "Profiles of chi-squared" in page
    assert "Bootstrap" in page
    assert "shares of variance" in page


def test_the_budget_adds_up(folder, capsys):
    assert main(["fit", "job.toml", "--json"]) == 0
    outcome = json.loads(capsys.readouterr().out)
    parts = outcome["budget"]["radical.g"]
    g = outcome["parameters"]["radical.g"]
    assert set(parts) == {"noise", "correlation and misfit", "field axis", "frequency"}
    assert sum(v**2 for v in parts.values()) ** 0.5 == pytest.approx(g["uncertainty"], rel=1e-6)
    assert parts["frequency"] == pytest.approx(G * 0.2 / FREQUENCY, rel=0.02)
    assert parts["field axis"] == pytest.approx(G * 0.02 / CENTRE, rel=0.02)


def test_comparing_a_model_with_a_needless_component(folder, capsys):
    """The trace is one Gaussian: the isotropic model must not lose, and both have a folder of their own."""
    (folder / "axial.toml").write_text(JOB.replace("g = 2.005", "g = [2.004, 2.008]"))
    assert main(["fit", "job.toml", "axial.toml", "--compare", "--out", "both"]) == 0
    shown = capsys.readouterr().out
    assert "AICc above best" in shown
    assert {path.name for path in (folder / "both").iterdir()} == {"job", "axial"}
    assert main(["fit", "job.toml", "axial.toml", "--compare", "--json"]) == 0
    found = json.loads(capsys.readouterr().out)["comparison"]
    above = {model["name"]: model["aicc_above_best"] for model in found["models"]}
    # One needless parameter costs 2 on average and gains a squared normal deviate: 3 standard deviations.
    assert above["job"] < 9 - 2
    (test,) = found["tests"]
    assert (test["smaller"], test["larger"]) == ("job", "axial")


@pytest.mark.parametrize(
    ("argv", "says"),
    [
        (["job.toml", "--profile", "radical.h"], '"radical.h"'),
        (["job.toml", "--profile", "radical.amount"], "is not varied"),
        (["job.toml", "--bootstrap", "1"], "--bootstrap"),
        (["job.toml", "--bootstrap", "many"], "--bootstrap"),
        (["job.toml", "--compare"], "two or more"),
        (["job.toml", "job.toml", "--compare"], 'two jobs are called "job"'),
        (["job.toml", "other.toml", "--compare", "--bootstrap", "20"], "does not go with --compare"),
    ],
)
def test_what_goes_beyond_the_fit_is_checked_first(folder, capsys, argv, says):
    assert main(["fit", *argv, "--out", "out"]) == 2
    out, err = capsys.readouterr()
    assert out == ""
    assert err.count("\n") == 1
    assert says in err
    assert not (folder / "out").exists()
