"""spinfit: from a measured magnetic-resonance trace to a g-tensor that stands up.

What stands in ``__all__`` is the public interface (``docs/api.md``): it changes as versions say, everything else may
change at any time.  Each name is imported when it is first used, so that ``import spinfit`` costs nothing.
"""

import importlib

__version__ = "0.1.0"

_HOMES = {
    "Exchange": "species",
    "InputError": "errors",
    "Job": "fitting.data",
    "Lines": "fitting.data",
    "Model": "files.job",
    "Nucleus": "species",
    "Outcome": "fitting.outcome",
    "Sample": "sweep",
    "Species": "species",
    "Spectrum": "spectrum",
    "Spin": "species",
    "Spread": "species",
    "Sweep": "sweep",
    "Trace": "fitting.data",
    "Width": "species",
    "fit": "fitting.driver",
    "read_job": "files.job",
    "read_model": "files.job",
    "simulate": "spectrum",
}
__all__ = [*_HOMES]


def __getattr__(name: str) -> object:
    if name not in _HOMES:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    found = getattr(importlib.import_module(f"{__name__}.{_HOMES[name]}"), name)
    return globals().setdefault(name, found)


def __dir__() -> list[str]:
    return sorted({*globals(), *__all__})
