"""Processes that work off calls, each of which may hang or die without costing more than the call it was at.

`Workers` is an executor like those of `concurrent.futures`.  It differs in three ways: the death of a process
fails the one call that this process was at, and a new process takes its place; a call that overruns what it
asked for (`spinfit.batch.child.allow`) has its process killed, even where it hangs inside a C library; and the
processes are started afresh (`spinfit.batch.child`), so that they inherit neither threads nor locks nor a main
module, have one thread of linear algebra each, and die with the process that started them.
"""

from __future__ import annotations

import os
import subprocess
import sys
import threading
import time
from collections import deque
from collections.abc import Callable, Sequence
from concurrent.futures import BrokenExecutor, Executor, Future, ProcessPoolExecutor
from multiprocessing import Pipe, get_context
from multiprocessing.connection import wait
from pathlib import Path
from typing import Any

from spinfit.threads import single_threaded

_ROOT = str(Path(__file__).resolve().parents[2])
_START = "import sys; sys.path.insert(0, sys.argv[1]); from spinfit.batch.child import main; main(sys.argv[2:])"
# Processes that die before they are ready, in a row, before it is plain that none will ever be.
_MOST_FALSE_STARTS = 3
# Seconds for a process to end by itself once it is told to.
_LEAVE = 2.0


class WorkerDied(BrokenExecutor):
    """The process that was at this call ended: a crash, or somebody or something killed it."""


class NoWorkers(BrokenExecutor):
    """No process can be had: the call was not begun, and no other will be."""


class Overrun(Exception):
    """The call took longer than it had asked for and its process was killed.

    The arguments are those seconds, and what the call last said by `spinfit.batch.child.note`, None without.
    """


class _Call:
    def __init__(self, function: Callable[..., Any], args: tuple[Any, ...], kwargs: dict[str, Any]) -> None:
        self.future: Future[Any] = Future()
        self.message = (function, args, kwargs)


class _Process:
    """One process and the call it is at."""

    def __init__(self, preload: Sequence[str]) -> None:
        self.connection, theirs = Pipe()
        # -P: nothing in the folder where the user stands takes the place of a module.
        command = [sys.executable, "-P", "-c", _START, _ROOT, str(theirs.fileno()), str(os.getpid()), *preload]
        try:
            self.process = subprocess.Popen(
                command,
                pass_fds=[theirs.fileno()],
                stdin=subprocess.DEVNULL,
                stdout=subprocess.DEVNULL,
                stderr=subprocess.DEVNULL,
                env=single_threaded(),
            )
        finally:
            theirs.close()
        self.connection.send(list(sys.path))
        self.ready = False
        self.call: _Call | None = None
        self.deadline: float | None = None
        self.allowed = 0.0
        self.note: Any = None
        self.calls = 0

    def end(self, *, patience: float = 0.0) -> int:
        """Close the line, wait a little for the process to leave, then kill it; return its exit code."""
        self.connection.close()
        try:
            return self.process.wait(patience) if patience else self.process.wait(0.05)
        except subprocess.TimeoutExpired:
            self.process.kill()
            return self.process.wait()


def described(code: int) -> str:
    """Say how a process ended."""
    return f"signal {-code}" if code < 0 else f"exit code {code}"


class Workers(Executor):
    """An executor of processes that are replaced when they die.

    Parameters
    ----------
    count : int
        Of processes; each starts when there is work for it.
    preload : sequence of str
        Modules that a process imports before its first call.
    most_calls : int
        After which a process leaves and another takes its place: what libraries do not give back, the system does.
    """

    is_local = True
    """What its processes write is there for the process that started them, before it is on the disk too."""

    def __init__(self, count: int, *, preload: Sequence[str] = (), most_calls: int = 500) -> None:
        if count < 1:
            raise ValueError(f"{count} workers")
        self._most_calls = most_calls
        self._leaving: list[subprocess.Popen[bytes]] = []
        self._max_workers = count
        self._preload = tuple(preload)
        self._waiting: deque[_Call] = deque()
        self._processes: list[_Process] = []
        self._lock = threading.RLock()  # a callback of a future may submit the next call
        self._closing = False
        self._killing = False
        self._false_starts = 0
        self._complaint = ""
        self._rung = False
        self._wake, self._bell = Pipe(duplex=False)
        self._thread = threading.Thread(target=self._manage, name="spinfit workers", daemon=True)
        self._thread.start()

    def submit(self, function: Callable[..., Any], /, *args: Any, **kwargs: Any) -> Future[Any]:
        """See `concurrent.futures.Executor.submit`; the function must be importable by its name."""
        call = _Call(function, args, kwargs)
        with self._lock:
            if self._closing:
                raise RuntimeError("cannot schedule new futures after shutdown")
            self._waiting.append(call)
            self._ring()
        return call.future

    def _ring(self) -> None:
        """Wake the managing thread; once is enough, and the pipe never fills."""
        if not self._rung:
            self._rung = True
            self._bell.send_bytes(b"!")

    def shutdown(self, wait: bool = True, *, cancel_futures: bool = False) -> None:
        """See `concurrent.futures.Executor.shutdown`."""
        with self._lock:
            if not self._closing:
                self._closing = True
                self._ring()
            if cancel_futures:
                for call in self._waiting:
                    call.future.cancel()
        if wait:
            self._thread.join()

    def kill(self) -> None:
        """End at once: waiting calls are cancelled, running ones fail with `WorkerDied`."""
        with self._lock:
            self._killing = True
            self._ring()
        self.shutdown(wait=True, cancel_futures=True)

    def pids(self) -> list[int]:
        """Return the process ids of the processes there are."""
        with self._lock:
            return [one.process.pid for one in self._processes]

    # What the managing thread does -----------------------------------------------------------------

    def _manage(self) -> None:
        try:
            while self._step():
                pass
        finally:
            self._closing = True
            for one in self._processes:
                if one.call is not None:
                    one.call.future.set_exception(WorkerDied("ended with the batch"))
                    one.process.kill()
            for one in self._processes:
                one.end(patience=0.0 if self._killing else _LEAVE)
            self._processes.clear()
            for process in self._leaving:
                process.kill()
                process.wait()
            self._fail_waiting(NoWorkers("ended with the batch"))

    def _step(self) -> bool:
        """Hand out calls, wait for something to happen, see to it; False when all is done."""
        self._leaving = [process for process in self._leaving if process.poll() is None]
        with self._lock:
            self._hand_out()
            busy = any(one.call is not None for one in self._processes)
            if self._killing or (self._closing and not busy and not self._waiting):
                return False
        lines = {one.connection: one for one in self._processes}
        for line in wait([self._wake, *lines], timeout=self._patience()):
            if line is self._wake:
                with self._lock:
                    self._wake.recv_bytes()
                    self._rung = False
            else:
                self._hear(lines[line])  # type: ignore[index]
        now = time.monotonic()
        for one in [one for one in self._processes if one.deadline is not None and one.deadline <= now]:
            self._lose(one, Overrun(one.allowed, one.note))
        return True

    def _patience(self) -> float | None:
        deadlines = [one.deadline for one in self._processes if one.deadline is not None]
        return max(0.0, min(deadlines) - time.monotonic()) if deadlines else None

    def _hand_out(self) -> None:
        """Give waiting calls to idle processes, and start processes while there are too few."""
        idle = [one for one in self._processes if one.call is None and one.ready]
        for one in idle:
            while self._waiting and one.call is None:
                call = self._waiting.popleft()
                if call.future.set_running_or_notify_cancel():
                    self._give(one, call)
        starting = sum(not one.ready for one in self._processes)
        while len(self._waiting) > starting and len(self._processes) < self._max_workers:
            try:
                self._processes.append(_Process(self._preload))
            except OSError as error:  # no more processes or memory: those that run have to do
                if self._processes:
                    return
                self._fail_waiting(NoWorkers(f"no process can be started ({error.strerror or error})"))
            starting += 1

    def _give(self, one: _Process, call: _Call) -> None:
        one.call, one.note = call, None
        try:
            one.connection.send(call.message)
        except ConnectionError:
            pass  # it died idle, which its end of the line will say
        except Exception as error:  # what cannot be pickled is the caller's mistake
            one.call = None
            call.future.set_exception(error)

    def _hear(self, one: _Process) -> None:
        """Take one message of a process; its end of the line closes when it dies."""
        try:
            kind, content = one.connection.recv()
        except (EOFError, OSError):
            self._lose(one, None)
            return
        if kind == "ready":
            one.ready, self._false_starts = True, 0
        elif kind == "complaint":
            self._complaint = str(content)
        elif kind == "note":
            one.note = content
        elif kind == "allow":
            one.allowed = content or 0.0
            one.deadline = None if content is None else time.monotonic() + content
        elif one.call is not None:
            call, one.call, one.deadline = one.call, None, None
            if kind == "result":
                call.future.set_result(content)
            else:
                call.future.set_exception(content)
            one.calls += 1
            if one.calls >= self._most_calls:
                with self._lock:
                    self._processes.remove(one)
                one.connection.close()  # which it takes for the end
                self._leaving.append(one.process)

    def _lose(self, one: _Process, why: BaseException | None) -> None:
        """Take a process out; the call it was at fails."""
        if why is not None:
            one.process.kill()
        with self._lock:
            self._processes.remove(one)
        code = one.end()
        if one.call is not None:
            one.call.future.set_exception(why or WorkerDied(described(code)))
        elif not one.ready:
            self._false_starts += 1
            if self._false_starts >= _MOST_FALSE_STARTS:
                why = self._complaint or described(code)
                self._fail_waiting(NoWorkers(f"processes end before they begin to work ({why})"))

    def _fail_waiting(self, why: BaseException) -> None:
        with self._lock:
            waiting, self._waiting = list(self._waiting), deque()
        for call in waiting:
            if call.future.set_running_or_notify_cancel():
                call.future.set_exception(why)


def process_pool(count: int, *, preload: Sequence[str] = ()) -> Executor:
    """Return `Workers`, or the standard library's pool where file descriptors cannot be handed on."""
    if os.name == "posix":
        return Workers(count, preload=preload)
    return ProcessPoolExecutor(count, mp_context=get_context("spawn"))
