"""A measured crystal rotation as one job: ruby, three days, a zero of the gaussmeter for each.

The reference is what the report that came with the data found from line positions (in the folder's README):
g = 1.98(1), |D| = 5.75(5) GHz, zero of angle 97.5(2) deg.
"""

from __future__ import annotations

import math
from pathlib import Path

import pytest

from spinfit.files.job import read_job
from spinfit.fitting.driver import fit

RUBY = Path(__file__).resolve().parents[2] / "shared" / "ruby"
pytestmark = pytest.mark.skipif(not RUBY.is_dir(), reason="the measured rotation is not here")

# Angle on the dial: day, angle (deg) and zero of the gaussmeter (mT) as a fit of the lines' positions had them, rough
# admixture of dispersion (deg), a line of something else (mT).
TRACES = {
    140: (1, 140.3, -5.7, 20, "324, 334"),
    150: (1, 150.0, -5.7, 20, "324, 334"),
    160: (2, 159.7, -5.4, 25, "324, 334"),
    170: (3, 169.6, 3.4, 5, "316, 325"),
}
TRACE = """
[[trace]]
name = "a{angle}"
file = "{folder}/angle_{angle}.txt"
columns = {{ field = 2, signal = 1 }}
field_calibration = {{ slope = "216 mT/V", zero = "3 mT" }}
field_offset = "{zero} mT"
direction = "up"
fit_range = "150, 510 mT"
exclude = ["{other} mT"]
frequency = "9.185 GHz"
frequency_uncertainty = "5 MHz"
temperature = "295 K"
angle = "{turned} deg"
baseline = 2
phase = "{phase} deg"
group = ["day_{day}", "at_{angle}"]
"""
JOB = """
[sample]
form = "crystal"
axis = [0, 1, 0]
from = [0, 0, 1]
microwave_axis = [-0.1, 0, 1]
angle_zero = "97.4 deg"
[[species]]
name = "cr"
S = "3/2"
g = [2.004, 2.006]
D = "-5.733 GHz"
[species.width]
lorentzian = "0.5 mT"
gaussian = "0.5 mT"
hidden_hyperfine = "50 MHz"
[species.spread]
tilt = "0.2 deg"
[fit]
start = "near"
vary = ["cr.g", "cr.D", "cr.width", "cr.spread.tilt", "sample.angle_zero", "sample.microwave_axis_x", {corrections}]
"""


def test_one_job_fits_three_days_of_a_rotation(tmp_path):
    text, corrections = "", [f"day_{day}.field_offset" for day in (1, 2, 3)]
    for angle, (day, turned, zero, phase, other) in TRACES.items():
        text += TRACE.format(folder=RUBY, angle=angle, turned=turned, day=day, zero=zero, phase=phase, other=other)
        # The dial is read to 1 deg; one angle is the reference of the others.
        corrections += [f"at_{angle}.phase", *([f"at_{angle}.angle_zero"] if angle != 150 else [])]
    (tmp_path / "job.toml").write_text(JOB.format(corrections=", ".join(f'"{c}"' for c in corrections)) + text)
    outcome = fit(read_job(tmp_path / "job.toml"))
    found = outcome.parameters
    assert outcome.quality.converged
    # Stretches without lines have some 7 already: the noise is slower than the sampling.
    assert outcome.quality.chi2_reduced < 20
    for name, true, known in (
        ("cr.g_perp", 1.98, 0.01),
        ("cr.g_par", 1.98, 0.01),
        ("cr.D", -5.75, 0.05),
        ("sample.angle_zero", 97.5, 0.2),
    ):
        value = found[name]
        assert abs(value.value - true) < 3 * math.hypot(value.uncertainty, known), name
    # One of these angles alone leaves 0.04 GHz.  Ruby has D -5.747 GHz and g_par 1.984 (literature, from memory): with
    # the misfit that there is, uncertainties by J'J alone, 0.004 GHz and 0.003, left them 4 and 9 uncertainties off.
    assert found["cr.D"].uncertainty < 0.02
    assert abs(found["cr.D"].value + 5.747) < 3 * found["cr.D"].uncertainty
    assert abs(found["cr.g_par"].value - 1.984) < 3 * found["cr.g_par"].uncertainty
    # g follows the frequency: 5 MHz in 9185 is 1 in 1800.
    assert found["cr.g_perp"].uncertainty_field > 0.5 * 2 * 5 / 9185
    assert all(abs(found[f"at_{angle}.angle_zero"].value) < 1 for angle in TRACES if angle != 150)
    assert 0.05 < found["cr.spread.tilt"].value < 0.5
