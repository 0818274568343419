"""Traces with withheld values, each from three rough starts that must end at the same place."""

from pathlib import Path

import pytest

from spinfit.files.job import read_job
from spinfit.fitting.driver import fit

BLIND = Path(__file__).resolve().parents[2] / "shared" / "blind"

pytestmark = pytest.mark.skipif(not BLIND.is_dir(), reason="the withheld traces are not here")

TRACE = """
[[trace]]
file = "{file}"
field_uncertainty = "0.02 mT"
frequency_uncertainty = "0.2 MHz"
{more}
"""
RADICAL = """
[[species]]
name = "r"
S = "1/2"
g = {g}
[species.width]
gaussian = "{width} mT"
lorentzian = "0.1 mT"
[fit]
vary = ["r.g", "r.width"]
"""
ZERO_FIELD = """
[[species]]
name = "r"
S = "{S}"
g = {g}
D = "{D} MHz"
E = "{E} MHz"
[species.width]
gaussian = "{width} mT"
[fit]
vary = ["r.g", "r.D", "r.E", "r.width"]
"""
CASES = {
    "resin_radical.jdx": (
        RADICAL,
        "",
        [
            {"g": [2.0023, 2.0045, 2.0065], "width": 0.3},
            {"g": [2.0000, 2.0040, 2.0090], "width": 0.8},
            {"g": [2.0040, 2.0050, 2.0060], "width": 0.2},
        ],
    ),
    "dye_triplet.txt": (
        ZERO_FIELD,
        "",
        [
            {"S": 1, "g": 2.003, "D": 2000, "E": -300, "width": 1.0},
            {"S": 1, "g": 2.003, "D": 2500, "E": -200, "width": 1.5},
            {"S": 1, "g": 2.010, "D": 1600, "E": -150, "width": 1.0},
        ],
    ),
    "glaze_chromium.csv": (
        ZERO_FIELD,
        'temperature = "80 K"',
        [
            {"S": "3/2", "g": 1.980, "D": 1500, "E": 150, "width": 3.0},
            {"S": "3/2", "g": 1.970, "D": 2500, "E": 300, "width": 2.0},
            {"S": "3/2", "g": 1.985, "D": 800, "E": 80, "width": 4.0},
        ],
    ),
}


@pytest.mark.parametrize("file", CASES)
def test_three_rough_starts_agree(file, tmp_path):
    species, more, starts = CASES[file]
    outcomes = []
    for n, start in enumerate(starts):
        job = tmp_path / f"job_{n}.toml"
        job.write_text(TRACE.format(file=BLIND / file, more=more) + species.format(**start), encoding="utf-8")
        outcomes.append(fit(read_job(job)))
    for outcome in outcomes:
        assert outcome.quality.converged
        assert outcome.quality.chi2_reduced == pytest.approx(1, abs=0.15)
    for name, first in outcomes[0].parameters.items():
        if first.varied:
            for other in outcomes[1:]:
                assert abs(other.parameters[name].value - first.value) < 0.2 * first.uncertainty, name
    if file == "resin_radical.jdx":
        for component in "xyz":
            g = outcomes[0].parameters[f"r.g_{component}"]
            assert g.uncertainty_noise < 2e-5
            assert g.uncertainty < 5e-5
