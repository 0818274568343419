"""One batch at a time in a folder: a lock of the operating system, which ends with the process that holds it."""

from __future__ import annotations

import os
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import BinaryIO

from spinfit.errors import InputError

try:
    import fcntl
except ImportError:  # not a POSIX system
    import msvcrt

    def _take(stream: BinaryIO) -> None:
        msvcrt.locking(stream.fileno(), msvcrt.LK_NBLCK, 1)  # type: ignore[attr-defined]

else:

    def _take(stream: BinaryIO) -> None:
        fcntl.flock(stream.fileno(), fcntl.LOCK_EX | fcntl.LOCK_NB)


LOCK = ".batch.lock"


@contextmanager
def locked(folder: Path) -> Iterator[None]:
    """Hold the folder's lock.

    The file stays behind, empty of meaning: whether somebody holds the lock is known to the system alone, so that
    nothing is left to clear away after a crash.

    Raises
    ------
    InputError
        When another batch is writing to the folder, or the folder cannot be written to.
    """
    path = folder / LOCK
    try:
        # Neither truncated nor replaced: the one who holds the lock may have written its number there.
        stream = os.fdopen(os.open(path, os.O_RDWR | os.O_CREAT, 0o666), "r+b", buffering=0)
    except OSError as error:
        reason = error.strerror or str(error)
        raise InputError(
            f"cannot be written to ({reason})", "name a folder that can be", place="--out", file=folder
        ) from error
    with stream:
        try:
            _take(stream)
        except OSError:
            number = stream.read(20).decode("ascii", "replace").strip()
            who = f"process {number}" if number.isdigit() else "another process"
            raise InputError(
                f"is being written to by another batch ({who})", "wait for its end, or name another folder",
                place="--out", file=folder,
            ) from None  # fmt: skip
        stream.truncate(0)
        stream.write(f"{os.getpid()}\n".encode())
        yield
