"""What is put down of each fit, and the call that a worker gets; light, so that the parent of a batch stays small.

What fits, draws and writes (`spinfit.batch.work`) is loaded in the workers alone.
"""

from __future__ import annotations

import errno
import importlib
from collections.abc import Mapping
from typing import Any

from spinfit.batch.tasks import Order

WORK = "spinfit.batch.work"

READING = 120.0
"""Seconds after which reading a job's files is given up: a damaged HDF5 file can hang its library for good."""

GOOD, POOR, LATE, FAILED, WAITING = "good", "not converged", "time limit", "failed", "not run"
"""What can have become of a trace."""

NO_ROOM = (errno.ENOSPC, errno.EDQUOT, errno.EROFS, errno.EFBIG)
"""What the system says where nothing more can be written."""


class NoRoom(Exception):
    """There is no room to write to: no later fit of the batch could be kept either."""


def grace(limit: float) -> float:
    """Return the seconds after which a fit that does not stop by itself at its time limit is killed."""
    # Large spins take some seconds to evaluate their best values once more, on a busy machine some more.
    return limit + max(20.0, 0.5 * limit)


def failed(name: str, free: Mapping[str, str], digest: str, kind: str, reason: str) -> dict[str, Any]:
    """Return the record of a fit that came to nothing.

    `kind` is "input" where the same files would fail again; anything else is worth another try.
    """
    return {
        "trace": name,
        "hash": digest,
        "status": FAILED,
        "kind": kind,
        "reason": _writable(reason)[:500],
        "free": dict(free),
    }


def said(error: OSError) -> str:
    """Return why something could not be written."""
    return error.strerror or str(error)


def unwritten(name: str, free: Mapping[str, str], digest: str, error: OSError) -> dict[str, Any]:
    """Return the record of a fit whose files could not be written."""
    return failed(name, free, digest, "write", f"cannot be written ({said(error)})")


def _writable(text: str) -> str:
    """Return a text on one line as UTF-8 can hold it: names of files need not be UTF-8."""
    return " ".join(text.encode("utf-8", "replace").decode("utf-8").split())


def late(limit: float, values: Mapping[str, float]) -> dict[str, Any]:
    """Return what makes a failed record one of a fit that was stopped at its time limit, with its best values."""
    return {"status": LATE, "limit": limit, "parameters": {name: [v, None, ""] for name, v in values.items()}}


def call(order: Order) -> dict[str, Any]:
    """Do an order in the process where this is called (see `spinfit.batch.work.do`)."""
    return importlib.import_module(WORK).do(order)
