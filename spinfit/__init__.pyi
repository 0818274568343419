"""The public interface for type checkers, which do not see what is imported when it is used."""

from spinfit.errors import InputError
from spinfit.files.job import Model, read_job, read_model
from spinfit.fitting.data import Job, Lines, Trace
from spinfit.fitting.driver import fit
from spinfit.fitting.outcome import Outcome
from spinfit.species import Exchange, Nucleus, Species, Spin, Spread, Width
from spinfit.spectrum import Spectrum, simulate
from spinfit.sweep import Sample, Sweep

__version__: str
__all__ = [
    "Exchange",
    "InputError",
    "Job",
    "Lines",
    "Model",
    "Nucleus",
    "Outcome",
    "Sample",
    "Species",
    "Spectrum",
    "Spin",
    "Spread",
    "Sweep",
    "Trace",
    "Width",
    "fit",
    "read_job",
    "read_model",
    "simulate",
]
