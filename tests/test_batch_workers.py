"""The executor of batches: processes that die, hang or overrun cost the call they were at and nothing else."""

from __future__ import annotations

import os
import subprocess
import sys
import textwrap
import time
from concurrent.futures import CancelledError

import batch_jobs as calls
import pytest

from spinfit.batch.workers import NoWorkers, Overrun, WorkerDied, Workers

pytestmark = pytest.mark.skipif(os.name != "posix", reason="processes are handed their line by a file descriptor")


@pytest.fixture
def workers():
    pool = Workers(2)
    yield pool
    pool.kill()


def is_alive(pid: int) -> bool:
    """Whether a process runs; one that waits to be buried does not."""
    try:
        with open(f"/proc/{pid}/stat", encoding="ascii") as stream:
            return stream.read().rpartition(")")[2].split()[0] not in "ZX"
    except FileNotFoundError:
        return False


def gone(pids: list[int], seconds: float = 20) -> bool:
    until = time.monotonic() + seconds
    while any(is_alive(pid) for pid in pids):
        if time.monotonic() > until:
            return False
        time.sleep(0.02)
    return True


def test_answers_in_order_of_asking(workers):
    assert list(workers.map(calls.square, range(20))) == [x * x for x in range(20)]
    assert len(workers.pids()) <= 2


def test_what_a_call_raises_arrives(workers):
    with pytest.raises(ValueError, match="too small"):
        workers.submit(calls.fails, "too small").result(60)
    assert workers.submit(calls.square, 3).result(60) == 9


def test_one_thread_each_whatever_the_user_set(workers, monkeypatch):
    monkeypatch.setenv("OMP_NUM_THREADS", "7")
    fresh = Workers(1)
    assert fresh.submit(calls.environment, "OMP_NUM_THREADS").result(60) == "1"
    fresh.shutdown()
    assert os.environ["OMP_NUM_THREADS"] == "7"


def test_a_death_fails_its_own_call_alone(workers):
    slow = workers.submit(calls.sleeps, 1.0)
    dead = workers.submit(calls.dies)
    with pytest.raises(WorkerDied, match="signal 9"):
        dead.result(60)
    assert slow.result(60) == "slept"
    assert list(workers.map(calls.square, range(4))) == [0, 1, 4, 9]


def test_an_idle_worker_that_is_killed_is_replaced(workers):
    pid = workers.submit(calls.own_pid).result(60)
    os.kill(pid, 9)
    assert gone([pid])
    # The very next call may be handed to the dead one before its end is heard; the one after it is not.
    for _ in range(2):
        try:
            assert workers.submit(calls.square, 5).result(60) == 25
            break
        except WorkerDied:
            continue
    else:
        raise AssertionError("no worker took the dead one's place")


def test_what_overruns_is_killed_though_it_hears_no_signal(workers):
    begun = time.monotonic()
    with pytest.raises(Overrun) as caught:
        workers.submit(calls.hangs_after, 0.3).result(60)
    assert caught.value.args == (0.3, "so far")
    assert time.monotonic() - begun < 50
    assert workers.submit(calls.square, 2).result(60) == 4


def test_a_call_can_end_itself_in_time(workers):
    assert workers.submit(calls.counts_until, 0.2).result(60) == "best so far"


def test_a_process_leaves_after_its_share_of_calls():
    workers = Workers(1, most_calls=3)
    pids = [workers.submit(calls.own_pid).result(60) for _ in range(7)]
    workers.shutdown()
    assert [pids.count(pid) for pid in dict.fromkeys(pids)] == [3, 3, 1]
    assert gone(pids)


def test_what_cannot_be_sent_is_the_callers_error(workers):
    with pytest.raises(Exception, match="pickle|local|lambda"):
        workers.submit(lambda: 1).result(60)
    assert workers.submit(calls.square, 2).result(60) == 4


def test_kill_ends_everything_at_once():
    workers = Workers(1)
    running = workers.submit(calls.sleeps, 600)
    waiting = [workers.submit(calls.square, n) for n in range(50)]
    while not running.running():
        time.sleep(0.01)
    pids = workers.pids()
    workers.kill()
    with pytest.raises(WorkerDied):
        running.result(1)
    for future in waiting:
        with pytest.raises((NoWorkers, CancelledError)):
            future.result(1)
    assert gone(pids)
    with pytest.raises(RuntimeError):
        workers.submit(calls.square, 1)


def test_processes_that_never_begin_are_given_up(monkeypatch):
    workers = Workers(1, preload=("no_module_of_this_name",))
    with pytest.raises(NoWorkers, match="no_module_of_this_name"):
        workers.submit(calls.square, 1).result(60)
    workers.kill()


@pytest.mark.skipif(sys.platform != "linux", reason="looks into /proc")
def test_workers_die_with_their_parent():
    """SIGKILL leaves the parent no time to end them; one is in the middle of a call that hears no signal."""
    script = textwrap.dedent(f"""
        import sys, time
        sys.path.insert(0, {os.path.dirname(calls.__file__)!r})
        import batch_jobs as calls
        from spinfit.batch.workers import Workers
        workers = Workers(2)
        first = workers.submit(calls.hangs_after, 500)
        second = workers.submit(calls.sleeps, 500)
        while not (first.running() and second.running()):
            time.sleep(0.01)
        print(*workers.pids(), flush=True)
        time.sleep(600)
    """)
    parent = subprocess.Popen([sys.executable, "-c", script], stdout=subprocess.PIPE, text=True)
    pids = [int(word) for word in parent.stdout.readline().split()]
    assert len(pids) == 2
    assert all(map(is_alive, pids))
    parent.kill()
    parent.wait(30)
    parent.stdout.close()
    assert gone(pids)
