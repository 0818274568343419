"""The sampled posterior: against the covariance in the linear regime, against a direct integral where it is not."""

from __future__ import annotations

import json
import math
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from fit_jobs import FIELDS, job, noisy, trace
from scipy.signal import lfilter
from stub_engine import simulate as stub

from spinfit.cli import main
from spinfit.errors import InputError
from spinfit.fitting import sampling
from spinfit.fitting.driver import fit
from spinfit.fitting.residuals import Problem, full_view
from spinfit.fitting.sampling import LEVELS, Posterior, sample
from spinfit.species import Species, Width
from spinfit.spectrum import simulate
from spinfit.sweep import Sweep

pytest.importorskip("emcee", reason="posteriors are an optional extra")

NAMES = ("r.g_x", "r.g_y", "r.g_z", "r.width.gaussian")


@pytest.fixture(scope="module")
def linear() -> tuple[object, object, Posterior]:
    signal, _ = noisy(3, snr=100.0)
    one = job(trace(signal))
    outcome = fit(one, simulate=stub)
    return one, outcome, sample(one, outcome, 800, simulate=stub)


def test_linear_regime_is_the_covariance(linear: tuple) -> None:
    """Deviations, correlations and quantiles of a normal distribution, as the fit states them."""
    _, outcome, posterior = linear
    assert posterior.names == NAMES
    independent = len(posterior.values) / posterior.autocorrelation.max()
    assert independent > 200
    for k, name in enumerate(NAMES):
        value = outcome.parameters[name]
        # A standard deviation from m independent draws is known to 1/sqrt(2m); four of those.
        assert posterior.deviation[k] == pytest.approx(
            value.uncertainty_noise, rel=4 / math.sqrt(2 * independent) + 0.03
        )
        off = (posterior.values[:, k].mean() - value.value) / value.uncertainty_noise
        assert abs(off) < 4 / math.sqrt(independent) + 0.05
        width = (posterior.quantiles[k, 3] - posterior.quantiles[k, 1]) / 2
        assert width == pytest.approx(value.uncertainty_noise, rel=0.25)
    assert np.corrcoef(posterior.values.T) == pytest.approx(outcome.correlation_matrix, abs=0.2)


def test_chain_tells_what_it_is_worth(linear: tuple) -> None:
    _, _, posterior = linear
    assert 0.2 < posterior.acceptance < 0.9
    assert posterior.discarded < 400
    assert posterior.tempered == 1.0
    assert np.all(posterior.autocorrelation > 1)
    # 800 steps are less than 50 autocorrelation times of some 40 steps.
    assert ("short_chain" in [n.code for n in posterior.notes]) == (800 < 50 * posterior.autocorrelation.max())


def test_same_seed_same_draws(linear: tuple) -> None:
    one, outcome, _ = linear
    first, again = (sample(one, outcome, 60, seed=4, simulate=stub) for _ in range(2))
    other = sample(one, outcome, 60, seed=5, simulate=stub)
    assert np.array_equal(first.values, again.values)
    assert not np.array_equal(first.values, other.values)


def test_a_short_chain_is_said(linear: tuple) -> None:
    one, outcome, _ = linear
    (note,) = [n for n in sample(one, outcome, 60, simulate=stub).notes if n.code == "short_chain"]
    assert "autocorrelation times" in note.text


def test_limit_cuts_the_posterior_as_an_integral_does() -> None:
    """One parameter, cut at half a deviation above its best: quantiles by quadrature of the same density."""
    signal, _ = noisy(3)
    free = job(trace(signal), vary=("r.g_z",))
    outcome = fit(free, simulate=stub)
    value = outcome.parameters["r.g_z"]
    limits = {"r.g_z": (value.value - 1.0, value.value + 0.5 * value.uncertainty_noise)}
    limited = replace(free, limits=limits)
    posterior = sample(limited, outcome, 600, simulate=stub)
    assert posterior.values.max() <= limits["r.g_z"][1]
    problem = Problem(limited, stub)
    view = full_view(limited.traces, problem.noises, 1e-3)
    grid = value.value + value.uncertainty_noise * np.linspace(-6, 0.5, 400)
    chi2 = np.array([problem.evaluate(np.array([g]), view).chi2 for g in grid])
    density = np.exp(-(view.points - view.linear) / 2 * (np.log(chi2) - np.log(chi2.min())))
    below = np.cumsum(density) / density.sum()
    expected = np.interp(LEVELS, below, grid)
    off = (posterior.quantiles[0] - expected) / value.uncertainty_noise
    assert np.abs(off[1:4]).max() < 0.2
    assert np.abs(off).max() < 0.4


def test_correlated_residuals_widen_it() -> None:
    signal, noise = noisy(3)
    rng = np.random.default_rng(12)
    slow = lfilter([0.8], [1.0, -0.6], rng.normal(size=FIELDS.size + 100))[100:]
    one = job(trace(signal + noise * slow))
    outcome = fit(one, simulate=stub)
    posterior = sample(one, outcome, 300, simulate=stub)
    assert posterior.tempered < 0.9
    assert "tempered_posterior" in [n.code for n in posterior.notes]
    ratios = [
        s / outcome.parameters[n].uncertainty_noise for n, s in zip(posterior.names, posterior.deviation, strict=True)
    ]
    # One factor stands for all parameters: their mean variance is met, not each.
    assert np.sqrt(np.mean(np.square(ratios))) == pytest.approx(1.0, rel=0.3)


def test_what_cannot_be_sampled_is_refused(monkeypatch: pytest.MonkeyPatch) -> None:
    signal, _ = noisy(3)
    one = job(trace(signal))
    outcome = fit(one, simulate=stub)
    with pytest.raises(InputError, match="--sample: 10 steps; take 50 or more"):
        sample(one, outcome, 10, simulate=stub)
    with pytest.raises(InputError, match="no likelihood"):
        sample(replace(one, loss="huber"), outcome, 100, simulate=stub)
    # The stand-in engine has Gaussian lines only.
    blind = job(trace(signal), vary=("r.g_z", "r.width.lorentzian"))
    with pytest.raises(InputError, match=r"r\.width\.lorentzian is not determined .*give it limits"):
        sample(blind, fit(blind, simulate=stub), 100, simulate=stub)
    monkeypatch.setattr(sampling, "emcee", None)
    with pytest.raises(InputError, match=r"needs emcee.*spinfit\[sampling\]"):
        sample(one, outcome, 100, simulate=stub)


JOB = """
[[species]]
name = "r"
S = "1/2"
g = 2.0
[species.width]
gaussian = "1 mT"
[[trace]]
file = "t.csv"
frequency = "9.5 GHz"
field_unit = "mT"
[fit]
vary = ["r.g"]
"""


@pytest.fixture
def bench(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.chdir(tmp_path)
    sweep = Sweep(9500.0, (330.0, 348.0), points=300)
    signal = simulate(Species(width=Width(gaussian=1.0)), sweep).signal
    signal = signal / np.abs(signal).max() + np.random.default_rng(1).normal(0, 0.02, 300)
    rows = "\n".join(f"{b:.4f},{s:.5f}" for b, s in zip(sweep.fields, signal, strict=True))
    (tmp_path / "t.csv").write_text(rows, encoding="utf-8")
    (tmp_path / "job.toml").write_text(JOB, encoding="utf-8")
    return tmp_path


def test_command_writes_and_shows_it(bench: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["fit", "job.toml", "--sample", "50", "--out", "out"]) == 0
    text = capsys.readouterr().out
    assert "posterior of" in text
    assert "flat priors" in text
    record = json.loads((bench / "out" / "outcome.json").read_text(encoding="utf-8"))
    found = record["posterior"]["parameters"]["r.g"]
    fitted = record["parameters"]["r.g"]
    assert list(found["quantiles"]) == ["0.025", "0.16", "0.5", "0.84", "0.975"]
    assert found["mean"] == pytest.approx(fitted["value"], abs=fitted["uncertainty_noise"])
    assert record["posterior"]["steps"] == 50
    assert found["autocorrelation_time"] > 0
    assert "<h3>Posterior</h3>" in (bench / "out" / "report.html").read_text(encoding="utf-8")


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["job.toml", "--sample", "many"], ("--sample", "whole number", "1000")),
        (["job.toml", "--sample", "10"], ("--sample", "50 or more")),
        (["job.toml", "job.toml", "--compare", "--sample", "100"], ("--sample", "--compare")),
    ],
)
def test_wrong_input_is_one_line(
    bench: Path, capsys: pytest.CaptureFixture[str], arguments: list[str], words: tuple[str, ...]
) -> None:
    assert main(["fit", *arguments]) == 2
    said = capsys.readouterr()
    assert said.err.count("\n") == 1
    for word in words:
        assert word in said.err
