"""How many threads linear algebra may use; to be settled before numpy is loaded."""

from __future__ import annotations

import os

THREADS = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "VECLIB_MAXIMUM_THREADS")
"""Environment variables that the libraries under numpy look at when they are loaded."""
COMPILED = "NUMBA_NUM_THREADS"
"""The one that the compiler of kernels looks at, and takes no nonsense in; the others pass over it by themselves."""


def one_thread() -> None:
    """Keep linear algebra to one thread in this process, unless the user's environment says otherwise.

    The matrices are small: threads would wait for each other more than they save, and several fits at once
    would fight over the cores.  The libraries look when numpy is loaded, which only commands do.
    """
    for name in THREADS:
        os.environ.setdefault(name, "1")
    given = os.environ.get(COMPILED, "1").strip()
    if not (given.isascii() and given.isdigit() and int(given)):  # it would refuse to be loaded
        os.environ[COMPILED] = "1"


def single_threaded() -> dict[str, str]:
    """Return this process's environment with one thread each, whatever the user set, for processes side by side."""
    return dict(os.environ) | dict.fromkeys((*THREADS, COMPILED), "1")
