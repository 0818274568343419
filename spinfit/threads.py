"""How many threads linear algebra may use; to be settled before numpy is loaded."""

from __future__ import annotations

import os

THREADS = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "VECLIB_MAXIMUM_THREADS")
"""Environment variables that the libraries under numpy look at when they are loaded."""


def one_thread() -> None:
    """Keep linear algebra to one thread in this process, unless the user's environment says otherwise.

    The matrices are small: threads would wait for each other more than they save, and several fits at once
    would fight over the cores.  The libraries look when numpy is loaded, which only commands do.
    """
    for name in THREADS:
        os.environ.setdefault(name, "1")


def single_threaded() -> dict[str, str]:
    """Return this process's environment with one thread each, whatever the user set, for processes side by side."""
    return dict(os.environ) | dict.fromkeys((*THREADS, "NUMBA_NUM_THREADS"), "1")
