"""The child process of `spinfit.files.guard`: opens an HDF5 file, checks it, and answers in numbers and texts.

A question is a line of JSON and the bytes of a file; an answer is eight bytes of length, JSON, and the bytes of the
arrays that the JSON announces.
"""

from __future__ import annotations

import io
import json
import math
import os
import time
from collections.abc import Mapping
from typing import Any, BinaryIO

import h5py
import numpy as np
from numpy.typing import NDArray

from spinfit.errors import InputError
from spinfit.files.hdf5_trace import trace_of
from spinfit.files.hdf5_tree import names_of, tree_of
from spinfit.files.raw import quote

try:
    import resource
except ImportError:  # not on every system; the parent's own patience then is the only limit
    resource = None

Arrays = list[NDArray[Any]]


def _own_memory() -> int | None:
    """Return the size of this process's address space in bytes, where the system tells."""
    try:
        with open("/proc/self/statm", encoding="ascii") as stream:
            return int(stream.read().split()[0]) * os.sysconf("SC_PAGE_SIZE")
    except (OSError, ValueError, AttributeError):
        return None


def set_limits(seconds: float, memory: int) -> None:
    """Give this process some more processor time, and memory beyond what it has; then the system ends it.

    Limits that the user or a scheduler has set stay.
    """
    if resource is None:
        return
    wanted = {resource.RLIMIT_CPU: math.ceil(time.process_time() + seconds), resource.RLIMIT_CORE: 0}
    own = _own_memory()
    if own is not None:
        wanted[resource.RLIMIT_AS] = own + memory
    for limit, value in wanted.items():
        hard = resource.getrlimit(limit)[1]
        resource.setrlimit(limit, (value if hard == resource.RLIM_INFINITY else min(value, hard), hard))


def answer_to(question: Mapping[str, Any], content: bytes) -> tuple[dict[str, Any], Arrays]:
    """Return what was found as JSON types, and arrays.

    Raises
    ------
    InputError
        Whatever is wrong with the file.
    """
    file, what = question["file"], question["what"]
    try:
        source: Any = question["path"] or io.BytesIO(content)
        # Files on read-only places and on systems without locks are read as well.
        locking = {"locking": False} if question["path"] else {}
        with h5py.File(source, "r", **locking) as root:
            if what == "trace":
                raw = trace_of(root, file)
                found = {"names": raw.names, "units": raw.units, "header": raw.header, "notes": raw.notes}
                return found, [raw.columns]
            if what == "tree":
                return tree_of(root, question["under"], file)
            return names_of(root, question["under"], file), []
    except InputError:
        raise
    except MemoryError as error:
        found = "needs more memory than a file of its size should"
        raise InputError(found, "take an undamaged copy", file=file) from error
    except Exception as error:  # h5py raises whatever its C library met in a damaged file
        found = f"is a damaged HDF5 file ({quote(error, 80)})"
        raise InputError(found, "take an undamaged copy", file=file) from error


def _send(stream: BinaryIO, answer: dict[str, Any], arrays: Arrays) -> None:
    text = json.dumps(answer).encode()
    stream.write(len(text).to_bytes(8, "little"))
    stream.write(text)
    for array in arrays:
        stream.write(np.ascontiguousarray(array).data.cast("B") if array.size else b"")
    stream.flush()


def serve(asked: int, said: int) -> None:
    """Answer questions until there are no more.

    Parameters
    ----------
    asked, said : int
        File descriptors to read from and to write to.
    """
    with open(asked, "rb") as questions, open(said, "wb") as answers:
        while line := questions.readline():
            question = json.loads(line)
            content = questions.read(question["length"])
            set_limits(question["seconds"], question["memory"])
            try:
                found, arrays = answer_to(question, content)
            except InputError as error:
                _send(answers, {"refused": [error.found, error.right, error.place]}, [])
            else:
                _send(answers, {"found": found, "arrays": [[a.dtype.str, a.shape] for a in arrays]}, arrays)
