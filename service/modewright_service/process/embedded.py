"""Embedded mode: the service as the child of the one program that uses it.

The parent hands over one end of a socket pair (or the writing end of a pipe). The child writes one JSON
line to it when it serves, and ends when the other end closes, which the system sees to even if the parent
is killed.
"""

from __future__ import annotations

import contextlib
import json
import os
import select
import socket
import stat
import threading
from collections.abc import Callable

from modewright_service import __version__

__all__ = ["announce", "watch_parent"]


def announce(fd: int, address: str) -> None:
    """Write the ready line, {"address", "pid", "version"}. Raises OSError when nobody listens."""
    line = json.dumps({"address": address, "pid": os.getpid(), "version": __version__}) + "\n"
    os.write(fd, line.encode())


def watch_parent(fd: int, gone: Callable[[], None]) -> None:
    """Call `gone` once, from a thread of its own, when the other end of `fd` has been closed."""
    readable = stat.S_ISSOCK(os.fstat(fd).st_mode)

    def watch() -> None:
        poller = select.poll()
        # Hang-ups and errors are always reported: they are all that the writing end of a pipe will ever see.
        poller.register(fd, select.POLLIN if readable else 0)
        while True:
            for _, events in poller.poll():
                if events & (select.POLLHUP | select.POLLERR | select.POLLNVAL) or not _drained(fd):
                    gone()
                    return

    threading.Thread(target=watch, name="parent-watch", daemon=True).start()


def _drained(fd: int) -> bool:
    """Read what the parent wrote, which means nothing; False at the end of file."""
    with contextlib.suppress(OSError), socket.socket(fileno=os.dup(fd)) as line:
        return bool(line.recv(4096))
    return False
