"""The same model, job and data written in other units give the same numbers, through files and the command line.

The units are those that each kind of key allows; the factors between them are made here from CODATA's constants as
`scipy.constants` has them, not taken from the program.
"""

from __future__ import annotations

import io
import json
import math
from contextlib import redirect_stdout

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import constants

from spinfit.cli import main
from spinfit.files.job import read_model
from spinfit.files.reading import assemble, read
from spinfit.spectrum import simulate
from spinfit.units import UNITS

# How many of each unit are one MHz, mT, rad, s, mT/V.
_PER_MHZ = {"Hz": 1e6, "kHz": 1e3, "MHz": 1.0, "GHz": 1e-3}
PER_BASE = {
    "field": {"mT": 1.0, "T": 1e-3, "G": 10.0},
    "frequency": _PER_MHZ,
    "energy": _PER_MHZ
    | {
        "cm^-1": 1e6 / (100 * constants.c),
        "K": 1e6 * constants.h / constants.k,
        "meV": 1e9 * constants.h / constants.e,
        "eV": 1e6 * constants.h / constants.e,
    },
    "angle": {"rad": 1.0, "deg": 180 / math.pi},
    "field per voltage": {"mT/V": 1.0, "T/V": 1e-3, "G/V": 10.0, "mT/mV": 1e-3, "T/mV": 1e-6, "G/mV": 1e-2},
}
UNIT = {kind: st.sampled_from(sorted(table)) for kind, table in PER_BASE.items()}


def test_every_unit_of_these_kinds_is_tried():
    assert {kind: set(table) for kind, table in UNITS.items() if kind in PER_BASE} == {
        kind: set(table) for kind, table in PER_BASE.items()
    }


def quantity(kind: str, unit: str, *values: float) -> str:
    """Write values in MHz, mT, rad in another unit, to the last digit."""
    return ", ".join(repr(value * PER_BASE[kind][unit]) for value in values) + f" {unit}"


MODEL = {
    "frequency": ("frequency", 9500.0), "field": ("field", 300.0, 380.0), "modulation": ("field", 0.3),
    "D": ("energy", 700.0), "E": ("energy", 60.0), "A": ("energy", 30.0, 40.0, 90.0),
    "A_tilt": ("angle", 0.2, 0.5, 0.1), "gaussian": ("field", 0.9), "lorentzian": ("field", 0.3),
    "hidden": ("energy", 8.0, 9.0, 14.0), "D_spread": ("energy", 20.0),
}  # fmt: skip
MODEL_TEXT = """[sweep]
frequency = "{frequency}"
field = "{field}"
points = 400
temperature = "77 K"
modulation = "{modulation}"
[accuracy]
tolerance = 1e-2
[[species]]
name = "pair"
S = "1"
g = [2.004, 2.003, 2.002]
D = "{D}"
E = "{E}"
[[species.nucleus]]
isotope = "1H"
A = "{A}"
A_tilt = "{A_tilt}"
[species.width]
gaussian = "{gaussian}"
lorentzian = "{lorentzian}"
hidden_hyperfine = "{hidden}"
[species.spread]
D = "{D_spread}"
"""


def model_text(units: dict[str, str]) -> str:
    """Write the model, each key in its unit."""
    return MODEL_TEXT.format(**{key: quantity(kind, units[key], *v) for key, (kind, *v) in MODEL.items()})


BASE = {"field": "mT", "frequency": "MHz", "energy": "MHz", "angle": "rad", "field per voltage": "mT/V"}


@pytest.fixture(scope="module")
def plain(tmp_path_factory):
    """The spectrum of the model in the units that the program uses itself."""
    path = tmp_path_factory.mktemp("plain") / "m.toml"
    path.write_text(model_text({key: BASE[kind] for key, (kind, *_) in MODEL.items()}))
    model = read_model(path)
    return simulate(model.species, model.sweep, model.sample, tolerance=model.tolerance)


@settings(derandomize=True, deadline=None, max_examples=12)
@given(units=st.fixed_dictionaries({key: UNIT[kind] for key, (kind, *_) in MODEL.items()}))
def test_a_spectrum_is_the_same_in_all_units(tmp_path_factory, plain, units):
    folder = tmp_path_factory.mktemp("model")
    (folder / "m.toml").write_text(model_text(units))
    for suffix in (".csv", ".jdx", ".h5"):
        out = folder / f"out{suffix}"
        assert main(["simulate", str(folder / "m.toml"), "-o", str(out)]) == 0
        found = assemble(read(out))
        np.testing.assert_allclose(found.field, plain.fields, rtol=1e-13)
        np.testing.assert_allclose(found.signal, plain.signal, rtol=0, atol=1e-9 * abs(plain.signal).max())


JOB = {
    "frequency": ("frequency", 9432.1), "frequency_uncertainty": ("frequency", 0.2),
    "field_uncertainty": ("field", 0.02), "field_offset": ("field", 0.05), "modulation": ("field", 0.1),
    "fit_range": ("field", 330.0, 343.0), "exclude": ("field", 331.0, 331.5), "phase": ("angle", 0.02),
    "A": ("energy", 18.0, 60.0), "gaussian": ("field", 0.7), "limit": ("energy", 40.0, 90.0),
}  # fmt: skip
JOB_TEXT = """[[species]]
name = "r"
S = "1/2"
g = [2.006, 2.003]
[[species.nucleus]]
isotope = "1H"
A = "{A}"
[species.width]
gaussian = "{gaussian}"
[accuracy]
tolerance = 1e-2
[[trace]]
name = "t"
file = "t.csv"
{axis}
frequency = "{frequency}"
frequency_uncertainty = "{frequency_uncertainty}"
field_uncertainty = "{field_uncertainty}"
field_offset = "{field_offset}"
modulation = "{modulation}"
fit_range = "{fit_range}"
exclude = ["{exclude}"]
phase = "{phase}"
[fit]
vary = ["r.g", "r.1H.A", "r.width.gaussian", "t.phase"]
[fit.limits]
"r.1H.A_par" = ["{low}", "{high}"]
"""
UNITS_OF_JOB = st.fixed_dictionaries({key: UNIT[kind] for key, (kind, *_) in JOB.items()})
AXES = st.sampled_from([("field", "mT"), ("field", "T"), ("field", "G")] + [
    ("field per voltage", unit) for unit in sorted(PER_BASE["field per voltage"])
])  # fmt: skip
KINDS = {"r.g_perp": None, "r.g_par": None, "r.1H.A_perp": "energy", "r.1H.A_par": "energy",
         "r.width.gaussian": "field", "t.phase": "angle"}  # fmt: skip


@pytest.fixture(scope="module")
def trace(tmp_path_factory):
    """A trace of the job's model with noise; field in mT."""
    path = tmp_path_factory.mktemp("trace") / "m.toml"
    path.write_text(
        '[sweep]\nfrequency = "9432.1 MHz"\nfield = "329, 344 mT"\npoints = 300\nmodulation = "0.1 mT"\n'
        '[[species]]\nS = "1/2"\ng = [2.0055, 2.0028]\n[[species.nucleus]]\nisotope = "1H"\nA = "20, 64 MHz"\n'
        '[species.width]\ngaussian = "0.8 mT"\n'
    )
    model = read_model(path)
    found = simulate(model.species, model.sweep, model.sample)
    top = abs(found.signal).max()
    return found.fields, found.signal / top + np.random.default_rng(3).normal(0, 0.01, len(found.fields))


def written(folder, trace, units, axis):
    """Write the trace and its job, and return the outcome's values and uncertainties in MHz, mT and rad."""
    field, signal = trace
    kind, unit = axis
    if kind == "field":
        column, line = field * PER_BASE[kind][unit], f'field_unit = "{unit}"'
    else:  # volts of a field probe: 20 mT of field a volt, 10 mT at none
        slope, zero = quantity(kind, unit, 20.0), quantity("field", units["field_offset"], 10.0)
        column, line = (field - 10.0) / 20.0, f'field_calibration = {{slope = "{slope}", zero = "{zero}"}}'
    rows = "".join(f"{a!r},{b!r}\n" for a, b in zip(column.tolist(), signal.tolist(), strict=True))
    (folder / "t.csv").write_text("field,signal\n" + rows)
    texts = {key: quantity(kind, units[key], *values) for key, (kind, *values) in JOB.items()}
    low, high = (quantity("energy", units["limit"], value) for value in JOB["limit"][1:])
    (folder / "job.toml").write_text(JOB_TEXT.format(axis=line, low=low, high=high, **texts))
    said = io.StringIO()
    with redirect_stdout(said):
        assert main(["fit", str(folder / "job.toml"), "--json"]) == 0
    outcome = json.loads(said.getvalue())
    assert outcome["quality"]["converged"]
    found = {}
    for name, kind in KINDS.items():
        value = outcome["parameters"][name]
        factor = 1.0 if kind is None else PER_BASE[kind][value["unit"]]
        found[name] = [value[key] / factor for key in ("value", "uncertainty", "uncertainty_field")]
    return found, outcome["quality"]


@pytest.fixture(scope="module")
def plain_fit(tmp_path_factory, trace):
    """The fit in the units that the program uses itself."""
    folder = tmp_path_factory.mktemp("plain_fit")
    return written(folder, trace, {key: BASE[kind] for key, (kind, *_) in JOB.items()}, ("field", "mT"))


@settings(derandomize=True, deadline=None, max_examples=6)
@given(units=UNITS_OF_JOB, axis=AXES)
def test_an_outcome_is_the_same_in_all_units(tmp_path_factory, trace, plain_fit, units, axis):
    """To 1e-9 of each value; what is itself near 0, and parts of uncertainties, to 1e-7 of the uncertainty.

    Starts that are the same but for the last bit of a double end in steps that differ by what is left to go.
    """
    found, quality = written(tmp_path_factory.mktemp("job"), trace, units, axis)
    expected, plain_quality = plain_fit
    for name, (value, uncertainty, field_part) in expected.items():
        assert found[name][0] == pytest.approx(value, rel=1e-9, abs=1e-7 * uncertainty), name
        assert found[name][1] == pytest.approx(uncertainty, rel=1e-7), name
        assert found[name][2] == pytest.approx(field_part, rel=1e-7, abs=1e-7 * uncertainty), name
    for key in ("chi2_reduced", "noise", "aicc", "points", "free_parameters"):
        assert quality[key] == pytest.approx(plain_quality[key], rel=1e-9), key
