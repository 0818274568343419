"""Robust losses: against their published definitions, against scipy's own robust solver, and on glitches."""

from __future__ import annotations

import io
import tomllib
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import scipy.integrate
import scipy.optimize
from fit_jobs import FIELDS, TRUE_G, clean_signal, job, level, noisy, species, trace
from stub_engine import simulate as stub

from spinfit.errors import InputError
from spinfit.files.job import read_job
from spinfit.files.toml_fit import read_fit
from spinfit.fitting.areas import fitted_area
from spinfit.fitting.driver import fit
from spinfit.fitting.parameters import Binding
from spinfit.fitting.resample import bootstrap, profile
from spinfit.fitting.robust import LISTED, SCALES, Loss
from spinfit.report.outcome_json import curves_text

NAMES = [f"r.g_{axis}" for axis in "xyz"]
ROBUST = ("huber", "soft_l1", "cauchy")


def glitched(seed: int, *, count: int = 3, size: float = 60.0) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """A noisy trace, the same with glitches, and where these are.

    They all point up and stand on the low-field flank of one line, which they pull to one side.
    """
    signal, noise = noisy(seed)
    rng = np.random.default_rng(1000 + seed)
    places = rng.choice(np.flatnonzero(np.abs(FIELDS - 325.5) < 1.0), size=count, replace=False)
    bad = signal.copy()
    bad[places] += size * noise * rng.uniform(0.5, 1.0, count)
    return signal, bad, np.sort(places)


def scattered(seed: int, count: int = 12) -> np.ndarray:
    """A noisy trace with glitches of either sign anywhere."""
    signal, noise = noisy(seed)
    rng = np.random.default_rng(2000 + seed)
    places = rng.choice(FIELDS.size, size=count, replace=False)
    signal[places] += noise * rng.choice([-1, 1], count) * rng.uniform(20, 80, count)
    return signal


@pytest.mark.parametrize("name", ["linear", *ROBUST])
def test_weights_are_the_published_loss_s(name: str) -> None:
    """psi is half the derivative of c^2 rho((r/c)^2): scipy's rho, differentiated numerically, and its own slope."""
    rho = {
        "linear": lambda z: z,
        "soft_l1": lambda z: 2 * (np.sqrt(1 + z) - 1),
        "huber": lambda z: np.where(z <= 1, z, 2 * np.sqrt(z) - 1),
        "cauchy": np.log1p,
    }[name]
    c, step = 1.7, 1e-5
    loss = Loss(name, c)
    r = np.array([-8.0, -3.0, -1.2, 0.3, 1.0, 2.5, 20.0])

    def half(x: np.ndarray) -> np.ndarray:
        return c**2 * rho((x / c) ** 2) / 2

    assert r * loss.weight(r) == pytest.approx((half(r + step) - half(r - step)) / (2 * step), rel=1e-6)
    slope = ((r + step) * loss.weight(r + step) - (r - step) * loss.weight(r - step)) / (2 * step)
    assert loss.slope(r) == pytest.approx(slope, rel=1e-5, abs=1e-6)


@pytest.mark.parametrize("name", ROBUST)
def test_default_scales_keep_95_percent(name: str) -> None:
    """mean(psi')^2 / mean(psi^2) under a normal density, by scipy's quadrature."""
    loss = Loss(name, SCALES[name])

    def mean(values: object) -> float:
        def inside(r: float) -> float:
            return float(values(np.array([r]))[0]) * np.exp(-r * r / 2) / np.sqrt(2 * np.pi)

        return 2 * sum(scipy.integrate.quad(inside, *ends)[0] for ends in ((0, loss.scale), (loss.scale, 12)))

    efficiency = mean(loss.slope) ** 2 / mean(lambda r: (r * loss.weight(r)) ** 2)
    assert efficiency == pytest.approx(0.95, abs=1e-3)


@pytest.mark.parametrize("name", ROBUST)
def test_same_minimum_as_scipy_s_robust_solver(name: str) -> None:
    """scipy.optimize.least_squares with the same loss, over g, width, scale and baseline alike."""
    _, bad, _ = glitched(3)
    one = job(trace(bad), loss=name)
    outcome = fit(one, simulate=stub)
    noise = outcome.quality.noise

    def residual(p: np.ndarray) -> np.ndarray:
        model = stub((species(g=tuple(p[:3]), width=p[3]),), _sweep(), fields=FIELDS).signal
        return (bad - p[4] * model - p[5] - p[6] * (FIELDS - 335)) / noise

    start = [
        *(outcome.parameters[n].value for n in NAMES),
        outcome.parameters["r.width.gaussian"].value,
        3.0,
        0.3,
        0.02,
    ]
    found = scipy.optimize.least_squares(
        residual,
        start,
        loss=name,
        f_scale=SCALES[name],
        x_scale=[1e-3] * 3 + [0.1, 1, 0.1, 0.01],
        xtol=1e-12,
        ftol=1e-12,
    )
    for k, n in enumerate([*NAMES, "r.width.gaussian"]):
        value = outcome.parameters[n]
        assert abs(value.value - found.x[k]) < 0.05 * value.uncertainty_noise


def _sweep():
    from spinfit.sweep import Sweep

    return Sweep(9400.0, (float(FIELDS[0]), float(FIELDS[-1])))


@pytest.mark.parametrize("name", ROBUST)
def test_glitches_do_not_move_g(name: str) -> None:
    """Within its uncertainty of the clean trace's g, while plain least squares is not."""
    clean, bad, places = glitched(5)
    reference = fit(job(trace(clean)), simulate=stub)
    plain = fit(job(trace(bad)), simulate=stub)
    robust = fit(job(trace(bad), loss=name), simulate=stub)
    assert robust.quality.converged
    moved = {n: robust.parameters[n].value - reference.parameters[n].value for n in NAMES}
    for n in NAMES:
        assert abs(moved[n]) < robust.parameters[n].uncertainty_noise
    # The line under the glitches is what plain least squares gets wrong by many of the clean uncertainties.
    wrong = max(
        abs(plain.parameters[n].value - reference.parameters[n].value) / reference.parameters[n].uncertainty_noise
        for n in NAMES
    )
    assert wrong > 3
    (note,) = [w for w in robust.warnings if w.code == "down_weighted"]
    assert "t lie more than 4 standard deviations off" in note.text
    weight = robust.curves[0].weight
    assert weight is not None
    assert weight[places].max() < 0.3
    assert np.median(np.delete(weight, places)) > 0.8
    assert plain.curves[0].weight is None


def test_uncertainties_match_the_scatter() -> None:
    """40 traces with glitches of their own: the scatter of g is known to 11 %."""
    values, said = [], []
    for seed in range(40):
        outcome = fit(job(trace(scattered(seed)), loss="huber"), simulate=stub)
        values.append([outcome.parameters[n].value for n in NAMES])
        said.append([outcome.parameters[n].uncertainty_noise for n in NAMES])
    scatter, mean = np.std(values, axis=0), np.mean(said, axis=0)
    assert np.all(scatter < 1.4 * mean)
    assert np.all(mean < 1.8 * scatter)
    # And it is about the truth.
    assert np.all(np.abs(np.mean(values, axis=0) - TRUE_G) < 4 * mean / np.sqrt(40))


def test_cauchy_lets_go_of_what_huber_still_feels() -> None:
    """Nearly half of a flank lifted: huber gives each such point a constant pull, cauchy next to none."""
    clean, bad, _ = glitched(5, count=18)
    reference = fit(job(trace(clean)), simulate=stub).parameters["r.g_z"].value
    found = {name: fit(job(trace(bad), loss=name), simulate=stub).parameters["r.g_z"] for name in ("huber", "cauchy")}
    assert abs(found["cauchy"].value - reference) < found["cauchy"].uncertainty_noise
    assert abs(found["huber"].value - reference) > 2 * abs(found["cauchy"].value - reference)


def test_without_glitches_it_is_nearly_least_squares() -> None:
    signal, _ = noisy(9)
    plain = fit(job(trace(signal)), simulate=stub)
    robust = fit(job(trace(signal), loss="huber"), simulate=stub)
    for n in NAMES:
        a, b = plain.parameters[n], robust.parameters[n]
        assert abs(a.value - b.value) < 0.5 * a.uncertainty_noise
        # 95 % efficiency: 2.6 % wider.
        assert b.uncertainty_noise == pytest.approx(1.026 * a.uncertainty_noise, rel=0.05)
    assert "down_weighted" not in [w.code for w in robust.warnings]


def test_weights_stand_in_curves_csv() -> None:
    _, bad, places = glitched(5)
    used = np.ones(FIELDS.size, dtype=bool)
    used[:5] = False
    outcome = fit(job(replace(trace(bad), used=used), loss="cauchy"), simulate=stub)
    table = pd.read_csv(io.StringIO(curves_text(outcome)))
    assert list(table.columns) == ["field_mT", "measured", "fitted", "residual", "r", "weight"]
    assert (table["weight"][:5] == 0).all()
    far = np.abs(table["residual"]) > 2 * LISTED * outcome.curves[0].noise
    assert (table["weight"][far] < 0.2).all()
    assert set(places) <= set(np.flatnonzero(table["weight"] < 0.5))
    # The residual column is measured less fitted, not what the fit made of it.
    assert np.allclose(table["measured"] - table["fitted"], table["residual"], atol=1e-6)
    assert np.allclose(table["measured"], bad, atol=1e-6)


def test_profile_bootstrap_and_area_go_with_it() -> None:
    bad = scattered(2)
    one = job(trace(bad), loss="huber")
    outcome = fit(one, simulate=stub)
    sigma = outcome.parameters["r.g_z"].uncertainty_noise
    (found,) = profile(one, outcome, ["r.g_z"], simulate=stub)
    low, high = found.intervals[0]
    assert (high - low) / 2 == pytest.approx(sigma, rel=0.1)
    again = bootstrap(one, outcome, 40, simulate=stub)
    assert again.uncertainty[again.names.index("r.g_z")] == pytest.approx(sigma, rel=0.4)
    area = fitted_area(one, outcome, simulate=stub)
    assert area.value == pytest.approx(3.0, abs=5 * area.uncertainty)


def test_a_rough_start_reaches_the_same_minimum() -> None:
    _, bad, _ = glitched(7)
    near = fit(job(trace(bad), loss="huber"), simulate=stub)
    far = species(g=(2.005, 2.026, 2.053), width=1.1)
    rough = fit(job(trace(bad), model=(far,), loss="huber"), simulate=stub)
    for n in NAMES:
        assert abs(near.parameters[n].value - rough.parameters[n].value) < 0.1 * near.parameters[n].uncertainty_noise


def read(text: str):
    from spinfit.sweep import Sample

    parameters = Binding((species(),), Sample(), ()).parameters
    return read_fit(tomllib.loads(text)["fit"], parameters)


def test_keys_of_the_job() -> None:
    table = read('[fit]\nvary = ["r.g"]\nloss = "cauchy"\nloss_scale = 3\n')
    assert (table.loss, table.loss_scale) == ("cauchy", 3.0)
    assert read('[fit]\nvary = ["r.g"]\n').loss == "linear"


def test_a_job_file_s_loss_reaches_the_fit(tmp_path: Path) -> None:
    """What stands in the file is what the fit is given."""
    _, bad, _ = glitched(5)
    np.savetxt(tmp_path / "kiln.csv", np.column_stack([FIELDS, bad]), delimiter=",", fmt="%.8g")
    text = """
        [[species]]
        name = "r"
        S = "1/2"
        g = [2.0, 2.05, 2.1]
        [species.width]
        gaussian = "1 mT"
        [[trace]]
        file = "kiln.csv"
        field_unit = "mT"
        frequency = "9.5 GHz"
        [fit]
        vary = ["r.g"]
    """
    path = tmp_path / "kiln.toml"
    path.write_text(text, encoding="utf-8")
    assert (read_job(path).loss, read_job(path).loss_scale) == ("linear", None)
    path.write_text(f'{text}loss = "huber"\n loss_scale = 2.0\n', encoding="utf-8")
    assert (read_job(path).loss, read_job(path).loss_scale) == ("huber", 2.0)


@pytest.mark.parametrize(
    ("line", "words"),
    [
        ('loss = "hubber"', 'fit.loss: "hubber" is not known; did you mean "huber"'),
        ("loss_scale = 2.0", "fit.loss_scale: means nothing for least squares"),
        ('loss = "huber"\nloss_scale = 0.0', "fit.loss_scale: 0; write a positive"),
    ],
)
def test_wrong_keys(line: str, words: str) -> None:
    with pytest.raises(InputError, match=words.replace("(", "\\(")):
        read(f'[fit]\nvary = ["r.g"]\n{line}\n')


def test_noise_level_is_not_the_glitches() -> None:
    """The yardstick of "off" is the trace's own noise, which glitches hardly move."""
    signal = clean_signal(species())
    noise = level(signal, 60.0)
    _, bad, _ = glitched(5)
    outcome = fit(job(trace(bad), loss="huber"), simulate=stub)
    assert outcome.quality.noise == pytest.approx(noise, rel=0.2)
