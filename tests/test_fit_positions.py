"""Fits of line positions, against fields from the eigenfield equation and from a closed form.

Eigenfields: G. G. Belford, R. L. Belford, J. F. Burkhalter, J. Magn. Reson. 11, 251 (1973), from memory;
solved here by `scipy.linalg.eig` with matrices written down in this file.
"""

from __future__ import annotations

import csv
import json
from pathlib import Path

import numpy as np
import pytest
from scipy import constants, linalg, stats

from spinfit.cli import main
from spinfit.errors import InputError
from spinfit.files.job import read_job
from spinfit.fitting.driver import fit
from spinfit.fitting.lines_outcome import fit_lines
from spinfit.spectrum import simulate

MU_B = constants.physical_constants["Bohr magneton in Hz/T"][0] * 1e-9  # MHz/mT
FREQUENCY = 9500.0
ZERO = 3.4
TRUE = {"c.g_perp": 1.984, "c.g_par": 1.978, "c.D": 2100.0, "sample.angle_zero": ZERO}

SZ = np.diag([1.5, 0.5, -0.5, -1.5])
SX = np.diag(np.sqrt([3.0, 4.0, 3.0]) / 2, 1) + np.diag(np.sqrt([3.0, 4.0, 3.0]) / 2, -1)

JOB = """
[[lines]]
file = "lines.csv"
frequency = "9.5 GHz"
field_uncertainty = "0.02 mT"
frequency_uncertainty = "0.2 MHz"
[sample]
form = "crystal"
axis = [0, 1, 0]
from = [0, 0, 1]
[[species]]
name = "c"
S = "3/2"
g = [{g_perp}, {g_par}]
D = "{D} MHz"
[species.width]
gaussian = "1 mT"
[fit]
vary = ["c.g", "c.D", "sample.angle_zero"]
"""


def eigenfields(angle: float) -> np.ndarray:
    """Every field between 150 and 520 mT at which two levels of the spin 3/2 are h nu apart, mT."""
    zero = TRUE["c.D"] * (SZ @ SZ - 1.25 * np.eye(4))
    zeeman = MU_B * (TRUE["c.g_par"] * np.cos(angle) * SZ + TRUE["c.g_perp"] * np.sin(angle) * SX)
    one = np.eye(4)
    left = FREQUENCY * np.eye(16) - (np.kron(zero, one) - np.kron(one, zero))
    found = linalg.eigvals(left, np.kron(zeeman, one) - np.kron(one, zeeman))
    found = found[np.isfinite(found)]
    fields = np.sort(found[np.abs(found.imag) < 1e-6 * np.abs(found)].real)
    return fields[(fields > 150) & (fields < 520)]


def write_lines(folder: Path, *, scatter=0.05, seed=1, step=20, stated=None, wrong=0) -> np.ndarray:
    """Write a table of lines of all angles; the first `wrong` lines are off by several mT."""
    rng = np.random.default_rng(seed)
    rows = [(a, b) for a in range(0, 181, step) for b in eigenfields(np.radians(a - ZERO))]
    table = np.array(rows)
    table[:, 1] += scatter * rng.normal(size=len(table))
    table[5 : 5 + 9 * wrong : 9, 1] += 4.0
    head = "angle_deg,field_mT" + ("" if stated is None else ",uncertainty_mT")
    more = "" if stated is None else f",{stated}"
    text = "\n".join([head, *(f"{a:g},{b:.4f}{more}" for a, b in table)])
    (folder / "lines.csv").write_text(text + "\n")
    return table


def job_in(folder: Path, *, g_perp=1.97, g_par=1.99, D=1900, more="") -> Path:
    path = folder / "job.toml"
    path.write_text(JOB.format(g_perp=g_perp, g_par=g_par, D=D) + more)
    return path


NEAR = {"g_perp": 1.98, "g_par": 1.98, "D": 2090}


def fit_near(path: Path):
    """Fit from a start near enough that no other need be tried."""
    return fit_lines(read_job(path), progress=None, simulate=simulate, wide=False)


@pytest.mark.parametrize("start", [{}, {"g_perp": 2.01, "g_par": 1.96, "D": 2900}, {"D": -1500}])
def test_rough_starts_find_the_values_within_their_uncertainties(tmp_path, start):
    table = write_lines(tmp_path)
    outcome = fit(read_job(job_in(tmp_path, **start)))
    assert outcome.quality.converged
    assert outcome.quality.points == len(table)
    # The scatter is known to 1 / sqrt(2 n): three times that.
    assert outcome.quality.noise == pytest.approx(0.05, rel=3 / np.sqrt(2 * len(table)))
    for name, true in TRUE.items():
        value = outcome.parameters[name]
        true = -true if name == "c.D" and start.get("D", 1) < 0 else true
        assert abs(value.value - true) < 3.5 * value.uncertainty_noise, name
    assert "sign_of_D" in {note.code for note in outcome.warnings}


def test_uncertainties_are_those_of_repeated_tables(tmp_path):
    """Squared standardised errors of 8 tables and 4 parameters: chi-squared with 32 degrees of freedom."""
    pulls = []
    for seed in range(8):
        write_lines(tmp_path, seed=100 + seed, step=30)
        found = fit_near(job_in(tmp_path, **NEAR)).parameters
        pulls += [(found[name].value - true) / found[name].uncertainty_noise for name, true in TRUE.items()]
    low, high = stats.chi2.ppf([0.001, 0.999], len(pulls))
    # The scatter is estimated from some 24 degrees of freedom, which widens a square by 24/22.
    assert low < np.sum(np.square(pulls)) < high * 24 / 22


def test_lines_that_fit_nothing_are_left_out_and_listed(tmp_path):
    table = write_lines(tmp_path, wrong=3)
    outcome = fit(read_job(job_in(tmp_path)))
    (positions,) = outcome.positions
    assert list(np.flatnonzero(~positions.used)) == [5, 14, 23]
    note = next(n for n in outcome.warnings if n.code == "outliers")
    assert f"{table[5, 1]:.6g}" in note.text
    for name, true in TRUE.items():
        value = outcome.parameters[name]
        assert abs(value.value - true) < 3.5 * value.uncertainty_noise, name


def test_scatter_larger_than_stated_widens_uncertainties(tmp_path):
    write_lines(tmp_path, stated=0.01)
    outcome = fit_near(job_in(tmp_path, **NEAR))
    assert "large_scatter" in {note.code for note in outcome.warnings}
    for name, true in TRUE.items():
        value = outcome.parameters[name]
        assert abs(value.value - true) < 3.5 * value.uncertainty_noise, name


def test_field_and_frequency_act_on_g_as_the_closed_form_says(tmp_path):
    """S = 1/2: g = h nu / (muB B), so that relative changes of g are those of nu and -B."""
    angles = np.arange(0, 91, 10)
    g = np.sqrt((2.2 * np.cos(np.radians(angles))) ** 2 + (2.05 * np.sin(np.radians(angles))) ** 2)
    fields = FREQUENCY / (MU_B * g)
    rows = "\n".join(f"{a},{b:.5f}" for a, b in zip(angles, fields, strict=True))
    (tmp_path / "lines.csv").write_text(f"angle_deg,field_mT\n{rows}\n")
    text = JOB.format(g_perp=2.0, g_par=2.3, D=0).replace('D = "0 MHz"\n', "").replace('"3/2"', '"1/2"')
    text = text.replace('"c.D", "sample.angle_zero"', "").replace('"c.g", ', '"c.g"')
    (tmp_path / "job.toml").write_text(text)
    outcome = fit_near(tmp_path / "job.toml")
    for name, true in (("c.g_par", 2.2), ("c.g_perp", 2.05)):
        assert outcome.parameters[name].value == pytest.approx(true, abs=2e-7)
        budget = outcome.budget[name]
        assert budget["frequency"] == pytest.approx(true * 0.2 / FREQUENCY, rel=0.01)
        assert budget["field axis"] == pytest.approx(true * 0.02 / (FREQUENCY / MU_B / true), rel=0.2)


def test_parameters_without_effect_are_named(tmp_path):
    write_lines(tmp_path)
    path = job_in(tmp_path, **NEAR)
    path.write_text(path.read_text().replace('"sample.angle_zero"]', '"sample.angle_zero", "sample.tilt_gamma"]'))
    outcome = fit_near(path)
    note = next(n for n in outcome.warnings if n.code == "undetermined")
    assert "sample.tilt_gamma" in note.text
    assert outcome.parameters["sample.tilt_gamma"].uncertainty is None
    assert outcome.parameters["c.D"].uncertainty is not None


def test_the_command_writes_fields_against_angle(tmp_path, capsys):
    table = write_lines(tmp_path, step=45)
    assert main(["fit", str(job_in(tmp_path)), "--out", str(tmp_path / "out")]) == 0
    shown = capsys.readouterr().out
    assert "c.g_par" in shown
    assert "field axis" in shown
    with (tmp_path / "out" / "curves.csv").open() as file:
        rows = list(csv.DictReader(file))
    assert len(rows) == len(table)
    assert [float(row["measured_mT"]) for row in rows] == pytest.approx(table[:, 1], abs=1e-4)
    assert all(abs(float(row["residual_mT"])) < 0.3 and int(row["lower"]) < int(row["upper"]) for row in rows)
    record = json.loads((tmp_path / "out" / "outcome.json").read_text())
    assert record["provenance"]["lines"][0]["lines"] == len(table)
    assert (tmp_path / "out" / "fit.png").stat().st_size > 10_000
    first = (tmp_path / "out" / "outcome.json").read_bytes()
    assert main(["fit", str(tmp_path / "job.toml"), "--out", str(tmp_path / "out")]) == 0
    assert (tmp_path / "out" / "outcome.json").read_bytes() == first


def test_traces_and_lines_do_not_mix(tmp_path):
    write_lines(tmp_path)
    field = np.linspace(300, 350, 200)
    rows = "\n".join(f"{b:.3f},{np.sin(b):.4f}" for b in field)
    (tmp_path / "trace.csv").write_text(f"field/mT,signal\n{rows}\n")
    trace = '\n[[trace]]\nfile = "trace.csv"\nfrequency = "9.5 GHz"\nangle = "0 deg"\n'
    with pytest.raises(InputError, match="two jobs"):
        fit(read_job(job_in(tmp_path, more=trace)))
