"""The process behind `spinfit.batch.workers`.

It takes one call after another from its line, sends back what came of each, and lives no longer than the
process that started it.  A call says by `allow` how long it may take from now; by `stop_after` it asks to be
interrupted itself, as Ctrl-C would, while it can still hand in what it has.
"""

from __future__ import annotations

import _thread
import ctypes
import gc
import importlib
import os
import signal
import sys
import threading
import time
from collections.abc import Iterator, Sequence
from contextlib import contextmanager, suppress
from multiprocessing.connection import Connection
from typing import Any

_PARENT_DEATH_SIGNAL = 1  # PR_SET_PDEATHSIG of Linux's prctl(2)
_EVERY = 1.0  # seconds between looks at the parent, where the system does not tell of its end

_line: Connection | None = None
_called_off = False


def allow(seconds: float | None) -> None:
    """Say that what follows may take this long, None for any time; then the process is killed.

    Means nothing in a process that `spinfit.batch.workers.Workers` did not start.
    """
    if _line is not None:
        _line.send(("allow", seconds))


def note(content: Any) -> None:
    """Say how far the call is, which `spinfit.batch.workers.Overrun` then holds if its process has to be killed."""
    if _line is not None:
        _line.send(("note", content))


@contextmanager
def stop_after(seconds: float | None) -> Iterator[None]:
    """Raise KeyboardInterrupt in the block when it takes longer; only in a process of `Workers`."""
    global _called_off
    if seconds is None or _line is None or threading.current_thread() is not threading.main_thread():
        yield
        return
    _called_off = False
    timer = threading.Timer(seconds, _call_off)
    timer.daemon = True
    timer.start()
    try:
        yield
    finally:
        timer.cancel()
        _called_off = False


def _call_off() -> None:
    global _called_off
    _called_off = True
    _thread.interrupt_main()


def _on_interrupt(number: int, frame: object) -> None:
    """Ctrl-C on the terminal reaches every process; here only `stop_after` may interrupt."""
    if _called_off:
        raise KeyboardInterrupt


def die_with(parent: int) -> None:
    """See that this process ends when its parent does, even in the middle of a call into C."""
    if sys.platform == "linux":
        with suppress(OSError, AttributeError):
            ctypes.CDLL(None).prctl(_PARENT_DEATH_SIGNAL, int(signal.SIGKILL), 0, 0, 0)

    def watch() -> None:
        while os.getppid() == parent:
            time.sleep(_EVERY)
        os.kill(os.getpid(), signal.SIGKILL)

    if os.getppid() != parent:  # it ended before the system was asked to tell
        os.kill(os.getpid(), signal.SIGKILL)
    threading.Thread(target=watch, daemon=True).start()


def _answer(message: tuple[Any, ...]) -> tuple[str, Any]:
    function, args, kwargs = message
    try:
        return "result", function(*args, **kwargs)
    except KeyboardInterrupt:
        return "error", InterruptedError("interrupted")
    except BaseException as error:
        return "error", error


def serve(line: Connection) -> None:
    """Answer calls until the line closes."""
    settled = False
    while True:
        try:
            message = line.recv()
        except (EOFError, OSError):
            return
        except Exception as error:  # a function that cannot be found here
            line.send(("error", error))
            continue
        answer = _answer(message)
        try:
            line.send(answer)
        except ConnectionError:
            return
        except Exception:  # what cannot be pickled is said in words
            line.send(("error", RuntimeError(f"{type(answer[1]).__name__}: {answer[1]}")))
        if not settled:
            settled = True
            settle()


def settle() -> None:
    """Take what the first call has loaded and compiled out of the garbage collector's sight.

    It stays for good, and to look through it takes a tenth of a second, which every twentieth short fit paid.
    """
    gc.collect()
    gc.freeze()


def main(arguments: Sequence[str]) -> None:
    """Run the process; arguments are its line's file descriptor, the parent's process id, and what to import."""
    global _line
    signal.signal(signal.SIGINT, _on_interrupt)
    die_with(int(arguments[1]))
    line = Connection(int(arguments[0]))
    try:
        sys.path[:] = line.recv()
        for module in arguments[2:]:
            importlib.import_module(module)
    except EOFError:
        return
    except Exception as error:
        line.send(("complaint", f"{type(error).__name__}: {error}"))
        return
    _line = line
    line.send(("ready", None))
    serve(line)
