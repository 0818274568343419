"""A user's program, for the type checker only: everything public has the type that its page says."""

from typing import assert_type

import numpy as np
from numpy.typing import NDArray

import spinfit

spin = spinfit.Spin(0.5, g=(2.006, 2.004, 2.002))
nucleus = spinfit.Nucleus(isotope="14N", A=(15.0, 15.0, 90.0))
width = spinfit.Width(gaussian=0.4)
species = spinfit.Species("r", (spin,), nuclei=(nucleus,), width=width, spread=spinfit.Spread(g=(0.001,)))
sweep = spinfit.Sweep(frequency=9432.1, field=(332.0, 341.0), points=600)
spectrum = spinfit.simulate(species, sweep, spinfit.Sample("powder"), tolerance=1e-3)
assert_type(spectrum, spinfit.Spectrum)
assert_type(spectrum.fields, NDArray[np.float64])

model = spinfit.read_model("model.toml")
assert_type(model, spinfit.Model)
assert_type(model.species, tuple[spinfit.Species, ...])

job = spinfit.read_job("job.toml")
assert_type(job, spinfit.Job)
assert_type(job.traces, tuple[spinfit.Trace, ...])
assert_type(job.lines, tuple[spinfit.Lines, ...])
try:
    outcome = spinfit.fit(job)
except spinfit.InputError as error:
    assert_type(error.found, str)
    raise
assert_type(outcome, spinfit.Outcome)
value = outcome.parameters["r.g_x"]
assert_type(value.value, float)
assert_type(value.uncertainty, float | None)
assert_type(outcome.quality.converged, bool)
