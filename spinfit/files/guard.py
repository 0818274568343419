"""Read HDF5 in a child process, because a damaged file can crash or hang the HDF5 library.

Of 8000 small files with one to eight changed places 18 made HDF5 2.0 walk along a damaged tree for ever, and 2 made it
read outside its memory.  Neither can be caught inside a process, and to tell such files from good ones beforehand
would take a second HDF5 library.  So every file is read by a child.  It is started at the first one (0.2 s) and
kept for the next (1 ms each, and the time to copy the numbers); it has a limit on its time and on its memory, and
what it answers are numbers and texts, never objects.
"""

from __future__ import annotations

import atexit
import json
import os
import subprocess
import sys
import threading
from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spinfit.errors import InputError

SIGNATURE = b"\x89HDF\r\n\x1a\n"
"""How an HDF5 file begins (or goes on after 512, 1024, ... bytes of something else)."""
SECONDS = 4.0
"""Processor time that a file may take, and what each byte adds; seconds."""
SECONDS_PER_BYTE = 2e-7
MEMORY = 2**30
"""Memory that a file may take beyond the child's own, and what each of its bytes adds at most; bytes."""
MEMORY_PER_BYTE = 8
MEMORY_CEILING = 2**32
# A machine busy with other work gives the child a part of a processor.
_PATIENCE = 20.0
# The library may leak what a damaged file left half open.
_MOST_FAILURES = 200
_LONGEST_ANSWER = 2**28
# Of a larger file (a batch's archive) a part is read at a time.
_MOST_READ = 2**30
_START = (
    "import json, sys; sys.path[:] = json.loads(sys.argv[1]); from spinfit.files.hdf5_child import serve; "
    "serve(int(sys.argv[2]), int(sys.argv[3]))"
)

Arrays = list[NDArray[Any]]


def cpu_limit(size: int) -> float:
    """Return the processor time that a file of some size may take, seconds."""
    return SECONDS + SECONDS_PER_BYTE * min(size, _MOST_READ)


def memory_limit(size: int) -> int:
    """Return the memory that a file of some size may take, bytes."""
    return min(MEMORY + MEMORY_PER_BYTE * size, MEMORY_CEILING)


class _Broken(Exception):
    """The child ended or was given up, with why."""


class _Child:
    """The process that reads, started when it is first needed."""

    def __init__(self) -> None:
        self.lock = threading.Lock()
        self.process: subprocess.Popen[bytes] | None = None
        self.failures = 0
        atexit.register(self.stop)

    def start(self) -> subprocess.Popen[bytes]:
        """Return the running child."""
        if self.process is not None and self.process.poll() is None and self.failures < _MOST_FAILURES:
            return self.process
        self.stop()
        # -P: the folder where the user stands is no place to import from.
        command = [sys.executable, "-P", "-c", _START, json.dumps(sys.path), "0", "1"]
        self.failures = 0
        self.process = subprocess.Popen(
            command,
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            stderr=subprocess.DEVNULL,
            bufsize=0,
            start_new_session=True,  # Ctrl-C is for the parent, which ends the child when it ends
            env=os.environ | {"OMP_NUM_THREADS": "1", "OPENBLAS_NUM_THREADS": "1"},
        )
        return self.process

    def stop(self) -> None:
        """End the child."""
        process, self.process = self.process, None
        if process is not None:
            process.kill()
            process.wait()
            for stream in (process.stdin, process.stdout):
                if stream is not None:
                    stream.close()

    def forget(self) -> None:
        """Leave the child to the process from which this one was forked."""
        process, self.process = self.process, None
        self.lock = threading.Lock()
        if process is not None:
            process.returncode = 0  # not ours to wait for
            for stream in (process.stdin, process.stdout):
                if stream is not None:
                    stream.close()

    def ask(self, header: bytes, content: bytes, wait: float) -> tuple[dict[str, Any], Arrays]:
        """Send a question and return the answer.

        Raises
        ------
        _Broken
        """
        process = self.start()
        late = threading.Event()

        def give_up() -> None:
            late.set()
            process.kill()

        timer = threading.Timer(wait, give_up)
        timer.daemon = True
        timer.start()
        try:
            answer, arrays = _exchanged(process, header, content)
        except _Broken as broken:
            code = process.poll() if str(broken) else process.wait()
            self.stop()
            raise _Broken(_ENDLESS if late.is_set() else str(broken) or _ending(code)) from None
        except BaseException:  # stopped by the user half-way: what the child still says answers nothing
            self.stop()
            raise
        finally:
            timer.cancel()
        self.failures += "arrays" not in answer
        return answer, arrays


_ENDLESS = "reading it does not end"
_LIMIT_SIGNALS = (24,)  # SIGXCPU, which not every system has by name


def _ending(code: int | None) -> str:
    """Say how the child ended."""
    return _ENDLESS if code is not None and -code in _LIMIT_SIGNALS else "the HDF5 library crashes on it"


def _exchanged(process: subprocess.Popen[bytes], header: bytes, content: bytes) -> tuple[dict[str, Any], Arrays]:
    """Write the question and read the answer."""
    assert process.stdin is not None
    try:
        for part in (header + b"\n", content):
            left = memoryview(part)
            while left:
                left = left[process.stdin.write(left) :]
    except OSError:  # it is gone
        raise _Broken("") from None
    size = int.from_bytes(_read(process, 8), "little")
    if size > _LONGEST_ANSWER:
        raise _Broken("its answer is too long")
    answer = json.loads(_read(process, size))
    arrays = []
    for kind, shape in answer.get("arrays", []):
        dtype = np.dtype(kind)
        length = int(np.prod(shape, dtype=np.int64)) * dtype.itemsize
        arrays.append(np.frombuffer(_read(process, length), dtype=dtype).reshape(shape))
    return answer, arrays


def _read(process: subprocess.Popen[bytes], size: int) -> bytearray:
    """Read from the child."""
    content = bytearray(size)
    view, at = memoryview(content), 0
    assert process.stdout is not None
    while at < size:
        got = process.stdout.readinto(view[at:])  # type: ignore[attr-defined]  # a raw stream, as bufsize is 0
        if not got:
            raise _Broken("")
        at += got
    return content


_child = _Child()
if hasattr(os, "register_at_fork"):
    os.register_at_fork(after_in_child=lambda: _child.forget())


def ask(
    what: str, *, file: str, content: bytes = b"", path: str = "", size: int | None = None, under: Sequence[str] = ()
) -> tuple[dict[str, Any], Arrays]:
    """Have the child read an HDF5 file.

    Parameters
    ----------
    what : str
        "trace", "tree", "names" (see `spinfit.files.hdf5_child`).
    file : str
        What to call the file in errors.
    content : bytes
        The file itself, or
    path : str
        where it stands.
    size : int, optional
        Of the file at `path`.
    under : sequence of str
        Names that lead from the root to the group that is wanted.

    Raises
    ------
    InputError
        What the child refused, and when it crashed or did not end.
    """
    size = len(content) if size is None else size
    seconds = cpu_limit(size)
    header = {
        "what": what, "file": file, "path": path, "under": list(under), "length": len(content),
        "seconds": seconds, "memory": memory_limit(size),
    }  # fmt: skip
    with _child.lock:
        try:
            answer, arrays = _child.ask(json.dumps(header).encode(), content, _PATIENCE * seconds)
        except _Broken as broken:
            raise InputError(f"is a damaged HDF5 file ({broken})", "take an undamaged copy", file=file) from None
        except OSError as error:
            reason = error.strerror or error
            right = "free memory or processes: HDF5 files are read in a second process"
            raise InputError(f"cannot be read ({reason})", right, file=file) from error
    if "refused" in answer:
        found, right, place = answer["refused"]
        raise InputError(found, right, place=place, file=file)
    return answer["found"], arrays
