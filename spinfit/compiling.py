"""Compiled kernels whose keeping is a convenience: a full or damaged disk makes them slower to start, never wrong."""

from __future__ import annotations

from collections.abc import Callable
from contextlib import suppress
from typing import Any


class _Forgiving:
    """What keeps compiled code between processes; where that fails, the code is compiled anew.

    numba raises whatever the disk does out of the first call of a kernel: a full disk under its cache would end every
    spectrum, though nothing of the user's had to be written.
    """

    def __init__(self, cache: Any) -> None:
        self._kept = cache

    def __getattr__(self, name: str) -> Any:
        return getattr(self._kept, name)

    def load_overload(self, *which: Any) -> Any:
        """Return what was kept; None where it cannot be read, for whatever reason."""
        try:
            return self._kept.load_overload(*which)
        except Exception:  # a file that was cut off raises almost anything
            return None

    def save_overload(self, *what: Any) -> None:
        """Keep compiled code where there is room for it."""
        with suppress(OSError):
            try:
                self._kept.save_overload(*what)
            except OSError:
                raise
            except Exception:  # the list of what is kept was cut off: begin a new one
                self._kept.flush()
                self._kept.save_overload(*what)


def kept_compiled(njit: Callable[..., Any], function: Callable, **options: Any) -> Callable:
    """Compile a function and keep the result for later processes where that is possible.

    Parameters
    ----------
    njit : callable
        numba's.
    function : callable
    options : optional
        Of `njit`.
    """
    try:
        made = njit(cache=True, **options)(function)
    except RuntimeError:  # nowhere to keep the compiled code: compile anew in each process
        return njit(**options)(function)
    if hasattr(made, "_cache"):
        made._cache = _Forgiving(made._cache)
    return made
