"""The lock that survives a fork."""

from __future__ import annotations

import os
import threading

import pytest

from modewright.forking import ForkSafeLock


@pytest.mark.filterwarnings("ignore:This process .* is multi-threaded:DeprecationWarning")
def test_a_lock_held_by_another_thread_is_open_in_a_forked_child() -> None:
    lock = ForkSafeLock()
    held, done = threading.Event(), threading.Event()

    def hold() -> None:
        with lock:
            held.set()
            done.wait(60)

    thread = threading.Thread(target=hold)
    thread.start()
    held.wait(60)
    pid = os.fork()
    if pid == 0:
        with lock:
            os._exit(7)
    assert os.waitstatus_to_exitcode(os.waitpid(pid, 0)[1]) == 7
    assert lock._lock.locked()
    done.set()
    thread.join()
    assert not lock._lock.locked()
