"""The demonstration, as a user runs it: every job fitted through the command line from its rough start.

The truth stands in ``scripts/make_demo_spectra.py``; fits know only the files.  The traces were made with
noise, drift and axis errors drawn once from a seed and stored, so that nothing here is drawn anew.
"""

from __future__ import annotations

import importlib.util
import json
import math
import re
import sys
import tomllib
from pathlib import Path
from types import ModuleType
from typing import Any

import numpy as np
import pytest

from spinfit.cli import main

ROOT = Path(__file__).resolve().parents[1]
RACK = ROOT / "demo_spectra"
Fitted = tuple[str, dict[str, Any], Path]

JOBS = sorted(path.stem for path in RACK.glob("*.toml"))


def script(name: str) -> ModuleType:
    """Import a script by its path."""
    spec = importlib.util.spec_from_file_location(name, ROOT / "scripts" / f"{name}.py")
    module = importlib.util.module_from_spec(spec)
    sys.modules[name] = module
    spec.loader.exec_module(module)
    return module


maker = script("make_demo_spectra")
DEMOS = {demo.name: demo for demo in maker.DEMOS}


@pytest.fixture(scope="module", params=JOBS)
def fitted(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> Fitted:
    """Fit one job; return its name, its outcome and the folder."""
    out = tmp_path_factory.mktemp("demo") / request.param
    assert main(["fit", str(RACK / f"{request.param}.toml"), "--out", str(out)]) == 0
    return request.param, json.loads((out / "outcome.json").read_text(encoding="utf-8")), out


def test_truth_within_three_standard_uncertainties(fitted: Fitted) -> None:
    name, outcome, _ = fitted
    varied = {key: value for key, value in outcome["parameters"].items() if value["varied"]}
    truth = DEMOS[name].truth
    assert set(varied) == set(truth)
    off = {key: (value["value"] - truth[key]) / value["uncertainty"] for key, value in varied.items()}
    assert all(abs(pull) <= 3 for pull in off.values()), off


def test_uncertainties_add_up_and_are_small(fitted: Fitted) -> None:
    """Parts add in quadrature (JCGM 100, 5.1.2); g of a good trace is good to a few 1e-4 (common practice)."""
    _, outcome, _ = fitted
    for key, value in outcome["parameters"].items():
        if value["varied"]:
            whole = math.hypot(value["uncertainty_noise"], value["uncertainty_field"])
            assert value["uncertainty"] == pytest.approx(whole, rel=1e-9), key
            if re.fullmatch(r"\w+\.g(_[xyz])?", key):
                assert 0 < value["uncertainty"] < 5e-4, key


def test_fit_is_good(fitted: Fitted) -> None:
    """What is left over is the noise that was added, as far as its own spread tells: the variance of n normal
    deviates has a relative standard deviation of sqrt(2/n)."""
    name, outcome, out = fitted
    quality = outcome["quality"]
    assert quality["converged"]
    assert quality["finished"]
    residual = np.genfromtxt(out / "curves.csv", delimiter=",", names=True)["residual"]
    added = DEMOS[name].height / DEMOS[name].signal_to_noise
    freedom = quality["points"] - quality["free_parameters"]
    assert abs(np.sum(residual**2) / freedom / added**2 - 1) < 3 * math.sqrt(2 / freedom)
    assert {path.name for path in out.iterdir()} >= {"outcome.json", "curves.csv", "fit.png"}
    assert (out / "fit.png").read_bytes().startswith(b"\x89PNG")
    assert "NaN" not in (out / "outcome.json").read_text(encoding="utf-8")


def test_every_trace_has_a_model_and_every_job_a_trace() -> None:
    assert {path.stem for path in (RACK / "models").glob("*.toml")} == set(DEMOS)
    assert set(JOBS) == {name for name, demo in DEMOS.items() if demo.axis_error is None} | {"bottle_chromium"}


@pytest.mark.parametrize("name", DEMOS)
def test_model_files_are_what_the_script_writes(name: str) -> None:
    assert (RACK / "models" / f"{name}.toml").read_text(encoding="utf-8") == DEMOS[name].model_text


@pytest.mark.parametrize("name", DEMOS)
def test_models_simulate(name: str, tmp_path: Path) -> None:
    out = tmp_path / "spectrum.csv"
    assert main(["simulate", str(RACK / "models" / f"{name}.toml"), "-o", str(out)]) == 0
    columns = np.loadtxt(out, delimiter=",", skiprows=1)
    sweep = tomllib.loads(DEMOS[name].model_text)["sweep"]
    assert columns.shape == (sweep["points"], 2)
    assert np.ptp(columns[:, 1]) > 0


def test_traces_are_what_the_script_makes(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The script runs, and its traces differ from the stored ones by the noise at most.

    A generator's stream may change between versions of numpy, so draws are not compared.
    """
    quick = DEMOS["varnish_radical"]
    monkeypatch.setattr(maker, "DEMOS", (quick,))
    maker.main(tmp_path)
    made, stored = (
        np.array([[float(cell.replace(",", ".")) for cell in line.split(";")] for line in text.splitlines()[3:]])
        for text in ((folder / quick.file).read_text(encoding="utf-8") for folder in (tmp_path, RACK))
    )
    np.testing.assert_array_equal(made[:, 0], stored[:, 0])
    # Two noises at the most, and axis errors of a few 0.01 mT against lines 0.3 mT wide.
    noise = quick.height / quick.signal_to_noise
    assert np.std(made[:, 1] - stored[:, 1]) < 0.1 * quick.height + 2 * noise
    assert (tmp_path / "models" / "varnish_radical.toml").is_file()


def test_standard_reveals_the_axis_error(capsys: pytest.CaptureFixture[str]) -> None:
    """The standard's trace gives the offset of its session, and the job holds what it gives."""
    assert main(["calibrate", str(RACK / "session_standard.csv"), "--standard", "dpph", "--json"]) == 0
    found = json.loads(capsys.readouterr().out)
    truth = DEMOS["session_standard"].axis_error
    assert abs(found["field_offset_mT"] - truth) < 3 * found["field_uncertainty_mT"]
    # g = 2.0036(2) alone leaves 336.3 mT x 0.0002/2.0036.
    assert found["field_uncertainty_mT"] == pytest.approx(0.0336, rel=0.05)
    (trace,) = tomllib.loads((RACK / "bottle_chromium.toml").read_text(encoding="utf-8"))["trace"]
    pasted = tomllib.loads("\n".join(found["job_lines"]))
    assert {key: trace[key] for key in pasted} == pasted
