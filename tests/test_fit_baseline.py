"""Smooth baselines solved with the model: their algebra, what they follow, and what they do to uncertainties."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from fit_jobs import FIELDS, SCALE, TRUE_G, clean_signal, job, level, noisy, species, trace
from stub_engine import simulate as stub

from spinfit.errors import InputError
from spinfit.files.job import read_job
from spinfit.fitting.areas import fitted_area
from spinfit.fitting.baseline import coefficients, known_columns, penalty_rows, removing, taken
from spinfit.fitting.driver import fit

NAMES = [f"r.g_{axis}" for axis in "xyz"]
SMOOTH = 6.0


def columns(smoothness: float, fields: np.ndarray = FIELDS) -> tuple[np.ndarray, np.ndarray]:
    one = trace(np.zeros(fields.size), fields=fields, baseline=None, smoothness=smoothness)
    return known_columns(one, fields, None), penalty_rows(one, fields.size)


def test_removing_leaves_the_least_penalised_sum() -> None:
    """|rest - Q Q' rest|^2 is the minimum over coefficients of misfit plus penalty, solved here as one system."""
    known, penalty = columns(8.0)
    rest = np.random.default_rng(1).normal(size=FIELDS.size)
    basis = removing(known, penalty)
    left = rest - basis @ (basis.T @ rest)
    normal = known.T @ known + penalty.T @ penalty
    best = np.linalg.solve(normal, known.T @ rest)
    least = float(np.sum((rest - known @ best) ** 2) + np.sum((penalty @ best) ** 2))
    assert float(left @ left) == pytest.approx(least, rel=1e-9)
    assert coefficients(known, penalty, rest) == pytest.approx(best, rel=1e-6, abs=1e-9)


def test_without_penalty_it_is_the_projection() -> None:
    one = trace(np.zeros(FIELDS.size), baseline=3)
    basis = removing(known_columns(one, FIELDS, None), penalty_rows(one, FIELDS.size))
    assert basis.T @ basis == pytest.approx(np.eye(4), abs=1e-12)


@pytest.mark.parametrize("smoothness", [3.0, 6.0])
def test_half_of_a_wave_of_that_period_is_taken(smoothness: float) -> None:
    """1/(1 + (L/period)^4), the filter of penalised second derivatives on an endless line."""
    known, penalty = columns(smoothness)
    middle = np.abs(FIELDS - FIELDS.mean()) < 7
    for period in (smoothness / 2, smoothness, 2 * smoothness):
        wave = np.sin(2 * np.pi * FIELDS / period)
        under = known @ coefficients(known, penalty, wave)
        gain = float(under[middle] @ wave[middle] / (wave[middle] @ wave[middle]))
        assert gain == pytest.approx(1 / (1 + (smoothness / period) ** 4), abs=0.03)


def test_a_straight_line_costs_nothing() -> None:
    known, penalty = columns(SMOOTH)
    line = 3.0 - 0.2 * FIELDS
    assert taken(removing(known, penalty), line) == pytest.approx(1.0, abs=1e-12)
    beyond = np.linspace(310.0, 360.0, 40)
    one = trace(np.zeros(FIELDS.size), baseline=None, smoothness=SMOOTH)
    again = known_columns(one, beyond, None) @ coefficients(known, penalty, line)
    assert again == pytest.approx(3.0 - 0.2 * beyond, rel=1e-6)


def drifting(seed: int, snr: float = 60.0, **conditions) -> tuple[np.ndarray, np.ndarray]:
    """A trace on a background of a few slow waves, as high as the lines; the background as well."""
    rng = np.random.default_rng(seed)
    signal = clean_signal(species(), **conditions)
    noise = level(signal, snr)
    under = np.zeros(FIELDS.size)
    for period in (60.0, 90.0, 140.0):
        under += 0.5 * np.ptp(signal) * rng.normal() * np.sin(2 * np.pi * (FIELDS / period + rng.random()))
    return signal + under + noise * rng.normal(size=FIELDS.size), under


def smooth(signal: np.ndarray, smoothness: float = SMOOTH, **more):
    return job(trace(signal, baseline=None, smoothness=smoothness, **more))


def test_slow_background_does_not_move_g() -> None:
    signal, under = drifting(4)
    straight = fit(job(trace(signal, baseline=1)), simulate=stub)
    curved = fit(smooth(signal), simulate=stub)
    assert curved.quality.converged
    for name, true in zip(NAMES, TRUE_G, strict=True):
        value = curved.parameters[name]
        assert abs(value.value - true) < 3 * value.uncertainty
    # What a straight line leaves is systematic, and is not noise in the smooth one.
    assert straight.quality.chi2_reduced > 10
    assert curved.quality.chi2_reduced == pytest.approx(1.0, abs=0.2)
    # The background comes out as it went in: the line's own offset and slope are part of it.
    found = curved.curves[0].baseline - (0.3 + 0.02 * (FIELDS - 335))
    assert np.abs(found - under).max() < 0.02 * np.ptp(under)


def test_uncertainties_hold_the_background() -> None:
    """40 backgrounds: the deviations from the truth are what the uncertainties say, for g and for the area."""
    deviations = []
    for seed in range(40):
        one = smooth(drifting(seed)[0])
        outcome = fit(one, simulate=stub)
        row = [
            (outcome.parameters[n].value - t) / outcome.parameters[n].uncertainty
            for n, t in zip(NAMES, TRUE_G, strict=True)
        ]
        area = fitted_area(one, outcome, simulate=stub)
        deviations.append([*row, (area.value - SCALE) / area.uncertainty])
    # A root mean square of 40 is known to 11 %; the background's own share makes it no smaller than 0.7.
    rms = np.sqrt(np.mean(np.square(deviations), axis=0))
    assert np.all(rms < 1.4)
    assert np.all(rms > 0.6)


def test_a_shorter_smoothness_costs_precision() -> None:
    signal, _ = noisy(4)
    stiff, loose = (
        fitted_area(one := smooth(signal, length), fit(one, simulate=stub), simulate=stub).uncertainty
        for length in (30.0, 3.0)
    )
    assert loose > 1.05 * stiff


def test_a_baseline_that_could_be_the_lines_is_said() -> None:
    signal, _ = drifting(4)
    codes = [note.code for note in fit(smooth(signal, 1.2), simulate=stub).warnings]
    assert "baseline_takes_lines" in codes
    assert "baseline_takes_lines" not in [note.code for note in fit(smooth(signal), simulate=stub).warnings]


def test_asymmetric_lets_unexplained_lines_stand() -> None:
    """A broad absorption that no species explains: a smooth baseline climbs it, an asymmetric one less by far."""
    signal, under = drifting(4, detect="absorption")
    hump = 1.0 * np.ptp(clean_signal(species(), detect="absorption")) * np.exp(-((FIELDS - 340.0) ** 2) / 2 / 1.5**2)
    conditions = {"detect": "absorption"}
    even = fit(smooth(signal + hump, 12.0, **conditions), simulate=stub)
    uneven = fit(smooth(signal + hump, 12.0, asymmetry=0.01, **conditions), simulate=stub)
    assert uneven.quality.converged
    truth = 0.3 + 0.02 * (FIELDS - 335) + under
    beside = np.abs(FIELDS - 340.0) < 8
    errors = [np.sqrt(np.mean((o.curves[0].baseline - truth)[beside] ** 2)) for o in (even, uneven)]
    assert errors[1] < 0.5 * errors[0]


def test_asymmetric_without_anything_unexplained_is_right() -> None:
    signal, _ = drifting(6, detect="absorption")
    outcome = fit(smooth(signal, asymmetry=0.05, detect="absorption"), simulate=stub)
    even = fit(smooth(signal, detect="absorption"), simulate=stub)
    for name, true in zip(NAMES, TRUE_G, strict=True):
        value = outcome.parameters[name]
        assert abs(value.value - true) < 4 * value.uncertainty
        # Expectiles know less than means.
        assert value.uncertainty > even.parameters[name].uncertainty


# Keys -------------------------------------------------------------------------------------------------

JOB = """
[[species]]
name = "r"
S = "1/2"
g = 2.0
[species.width]
gaussian = "1 mT"
[[trace]]
file = "t.csv"
frequency = "9.4 GHz"
field_unit = "mT"
{keys}
[fit]
vary = ["r.g"]
"""


def read(folder: Path, keys: str):
    x = np.linspace(320.0, 350.0, 400)
    (folder / "t.csv").write_text("\n".join(f"{b:.4f},{np.sin(b):.5f}" for b in x), encoding="utf-8")
    (folder / "job.toml").write_text(JOB.format(keys=keys), encoding="utf-8")
    return read_job(folder / "job.toml").traces[0]


def test_keys_are_read(tmp_path: Path) -> None:
    one = read(tmp_path, 'baseline = "smooth"\nsmoothness = "200 G"')
    assert (one.baseline, one.smoothness, one.asymmetry) == (None, 20.0, None)
    assert read(tmp_path, 'baseline = "smooth"').smoothness == pytest.approx(30.0)
    one = read(tmp_path, 'baseline = "asymmetric"\ndetect = "absorption"\nasymmetry = 0.01')
    assert (one.baseline, one.asymmetry) == (None, 0.01)
    assert read(tmp_path, 'baseline = "asymmetric"\ndetect = "absorption"').asymmetry == 0.05
    assert read(tmp_path, "baseline = 2").smoothness is None


@pytest.mark.parametrize(
    ("keys", "words"),
    [
        ('baseline = "asymmetric"', r"trace\.1\.baseline: a derivative has lines on both sides.*\"smooth\""),
        ('smoothness = "20 mT"', r"trace\.1\.smoothness: .*baseline = \"smooth\""),
        ('baseline = "smooth"\nsmoothness = 20', r"trace\.1\.smoothness: 20 has no unit"),
        ('baseline = "smooth"\nsmoothness = "0.1 mT"', r"trace\.1\.smoothness: 0\.1 mT is too short for 400 points"),
        ('baseline = "smooth"\nasymmetry = 0.1', r"trace\.1\.asymmetry: .*baseline = \"asymmetric\""),
        ('baseline = "asymmetric"\ndetect = "absorption"\nasymmetry = 0.7', r"trace\.1\.asymmetry: 0\.7"),
        ('baseline = "wavy"', r"trace\.1\.baseline: \"wavy\"; .*\"smooth\""),
    ],
)
def test_wrong_keys_say_what_is_right(tmp_path: Path, keys: str, words: str) -> None:
    with pytest.raises(InputError, match=words):
        read(tmp_path, keys)


def test_unused_points_have_a_baseline_too() -> None:
    signal, under = drifting(4)
    used = np.abs(FIELDS - 338.0) > 2
    used[:30] = False
    one = job(replace(trace(signal, baseline=None, smoothness=SMOOTH), used=used))
    curves = fit(one, simulate=stub).curves[0]
    found = curves.baseline - (0.3 + 0.02 * (FIELDS - 335))
    assert np.abs(found - under)[30:].max() < 0.05 * np.ptp(under)
    assert np.all(np.isfinite(curves.fitted))
