"""``spinfit quantify`` through the command line: traces of known amounts, conditions, and what is refused."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest

from spinfit.cli import main
from spinfit.species import Species, Spin, Width
from spinfit.spectrum import simulate
from spinfit.sweep import Sweep

AMOUNT = 2.5


def write(path: Path, amount: float, *, seed: int, temperature: float = 77.0, g=(2.0, 2.0, 2.0)) -> None:
    sweep = Sweep(9500.0, (320.0, 360.0), points=1500, temperature=temperature)
    signal = amount * simulate(Species(spins=(Spin(g=g),), width=Width(gaussian=1.0)), sweep).signal
    # The reference's height is 1 at 77 K; everything is measured with the same detector.
    standard = Sweep(9500.0, (320.0, 360.0), points=1500, temperature=77.0)
    scale = 1.0 / float(np.abs(simulate(Species(width=Width(gaussian=1.0)), standard).signal).max())
    noise = np.random.default_rng(seed).normal(0, 0.0012, sweep.points)
    header = f"# frequency 9.5 GHz\n# temperature {temperature} K\n# modulation 0.1 mT\nfield/mT,signal\n"
    rows = "\n".join(f"{b:.5f},{s:.6g}" for b, s in zip(sweep.fields, scale * signal + noise + 0.05, strict=True))
    path.write_text(header + rows + "\n", encoding="utf-8")


JOB = """
[[species]]
name = "r"
S = "1/2"
g = {g}
[species.width]
gaussian = "0.9 mT"
[[trace]]
file = "{file}"
[fit]
vary = ["r.g", "r.width.gaussian"]
"""


@pytest.fixture
def bench(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.chdir(tmp_path)
    write(tmp_path / "glaze.csv", AMOUNT, seed=1, g=(2.02, 2.01, 1.99))
    write(tmp_path / "standard.csv", 1.0, seed=2)
    (tmp_path / "glaze.toml").write_text(JOB.format(g="[2.02, 2.01, 1.99]", file="glaze.csv"), encoding="utf-8")
    (tmp_path / "standard.toml").write_text(JOB.format(g=2.0, file="standard.csv"), encoding="utf-8")
    return tmp_path


def record(capsys: pytest.CaptureFixture[str], *arguments: str, code: int = 0) -> dict:
    assert main(["quantify", *arguments, "--json"]) == code
    return json.loads(capsys.readouterr().out)


def refused(capsys: pytest.CaptureFixture[str], *arguments: str) -> str:
    assert main(["quantify", *arguments]) == 2
    said = capsys.readouterr()
    assert said.out == ""
    assert said.err.count("\n") == 1
    return said.err


def test_ratio_of_known_amounts(bench: Path, capsys: pytest.CaptureFixture[str]) -> None:
    found = record(capsys, "glaze.csv", "--reference", "standard.csv", "--spin", "1/2", "--reference-spin", "1/2")
    ratio = found["ratio"]
    assert abs(ratio["value"] - AMOUNT) < 2 * ratio["uncertainty"]
    assert ratio["uncertainty"] < 0.2 * AMOUNT
    assert found["ratio_fitted"] is None
    assert {"noise of the trace", "truncation of the reference"} <= set(ratio["relative_parts"])
    assert found["trace"]["integral"]["lost_if_lorentzian"] > found["trace"]["integral"]["lost_if_gaussian"]


def test_conditions_from_a_file_and_over_it(bench: Path, capsys: pytest.CaptureFixture[str]) -> None:
    plain = record(capsys, "glaze.csv", "--reference", "standard.csv")["ratio"]["value"]
    (bench / "bench.toml").write_text(
        '[trace]\ngain = 200\npower = "0.5 mW"\nscans = 4\nrelative_uncertainty = 0.05\n'
        '[reference]\ngain = 50\npower = "2 mW"\nscans = 1\n',
        encoding="utf-8",
    )
    arguments = ("glaze.csv", "--reference", "standard.csv", "--conditions", "bench.toml")
    found = record(capsys, *arguments)
    # gain 50/200, power sqrt(2/0.5), scans 1/4
    assert found["ratio"]["value"] == pytest.approx(plain / 4 * 2 / 4, rel=1e-12)
    assert found["ratio"]["relative_parts"]["other of the trace"] == 0.05
    over = record(capsys, *arguments, "--gain", "100")
    assert over["ratio"]["value"] == pytest.approx(2 * found["ratio"]["value"], rel=1e-12)


def test_jobs_give_fitted_areas_too(bench: Path, capsys: pytest.CaptureFixture[str]) -> None:
    found = record(capsys, "glaze.toml", "--reference", "standard.toml")
    fitted = found["ratio_fitted"]
    assert abs(fitted["value"] - AMOUNT) < 4 * fitted["uncertainty"]
    assert fitted["uncertainty"] < 0.02 * AMOUNT
    assert abs(found["ratio"]["value"] - AMOUNT) < 2 * found["ratio"]["uncertainty"]
    assert main(["fit", "glaze.toml", "--out", "out"]) == 0
    capsys.readouterr()
    again = record(capsys, "out", "--reference", "standard.toml")
    assert again["ratio_fitted"]["value"] == pytest.approx(fitted["value"], rel=1e-6)
    assert again["ratio"] is None
    assert "no_fit_uncertainty" in [w["code"] for w in again["warnings"]]


def test_screen_has_ratio_corrections_and_doubts(bench: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["quantify", "glaze.csv", "--reference", "standard.csv", "--baseline", "asymmetric"]) == 0
    text = capsys.readouterr().out
    for word in (
        "by integration",
        "lost if Gaussian",
        "polynomial of order 1",
        "temperature (Boltzmann)",
        "taken as equal",
    ):
        assert word in text


def test_noise_against_a_reference_is_no_result(bench: Path, capsys: pytest.CaptureFixture[str]) -> None:
    write(bench / "empty.csv", 0.0, seed=4)
    found = record(capsys, "empty.csv", "--reference", "standard.csv", code=1)
    assert "no_signal" in [w["code"] for w in found["warnings"]]


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["--gain", "5"], ("gain", "standard.csv", "--reference-gain")),
        (["--gain", "0", "--reference-gain", "5"], ("--gain", "positive")),
        (["--power", "3 mT", "--reference-power", "1 mW"], ("--power", "W, mW, uW")),
        (["--spin", "0.3"], ("--spin", '"5/2"')),
        (["--g", "2,2,2,2"], ("--g", "three values")),
        (["--baseline", "wavy"], ("--baseline", "asymmetric")),
        (["--smoothness", "10 mT"], ("--smoothness", "--baseline asymmetric")),
        (["--range", "300, 350 mT"], ("300 to 350 mT", "glaze.csv", "320 to 360 mT")),
        (["--range", "350, 340 mT"], ("--range", "smaller field first")),
        (["--reference-baseline-range", "10, 20 mT"], ("baseline-range", "standard.csv", "320 to 360 mT")),
        (["--conditions", "none.toml"], ("none.toml", "no such file")),
        (["--reference-temperature", "-4 K"], ("--reference-temperature", "positive")),
    ],
)
def test_wrong_input_is_one_line(
    bench: Path, capsys: pytest.CaptureFixture[str], arguments: list[str], words: tuple[str, ...]
) -> None:
    said = refused(capsys, "glaze.csv", "--reference", "standard.csv", *arguments)
    for word in words:
        assert word in said


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("[trace]\ngian = 3\n", ("bench.toml", "trace", "gain")),
        ('[trace]\nS = "7/3"\n', ("bench.toml", "trace.S", "5/2")),
        ("[trace]\npower = 3\n", ("bench.toml", "trace.power", "3 mW")),
        ("[sample]\n", ("bench.toml", "sample")),
        ("[trace]\ng = [2.0, -1.0]\n", ("bench.toml", "trace.g", "positive")),
    ],
)
def test_wrong_conditions_are_one_line(
    bench: Path, capsys: pytest.CaptureFixture[str], text: str, words: tuple[str, ...]
) -> None:
    (bench / "bench.toml").write_text(text, encoding="utf-8")
    said = refused(capsys, "glaze.csv", "--reference", "standard.csv", "--conditions", "bench.toml")
    for word in words:
        assert word in said


def test_a_folder_without_an_outcome_is_refused(bench: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (bench / "empty").mkdir()
    assert "spinfit fit" in refused(capsys, "empty", "--reference", "standard.csv")
    (bench / "empty" / "outcome.json").write_text('{"a": 1}', encoding="utf-8")
    assert "no outcome" in refused(capsys, "empty", "--reference", "standard.csv")


def test_curie_s_law_is_undone(bench: Path, capsys: pytest.CaptureFixture[str]) -> None:
    write(bench / "cold.csv", 1.0, seed=5, temperature=19.0)
    found = record(capsys, "cold.csv", "--reference", "standard.csv")
    factor = next(f["factor"] for f in found["factors"] if f["name"].startswith("temperature"))
    # tanh of h nu / 2kT in place of the whole fraction: 0.02 % here.
    assert factor == pytest.approx(19.0 / 77.0, rel=1e-3)
    assert abs(found["ratio"]["value"] - 1.0) < 2 * found["ratio"]["uncertainty"]
