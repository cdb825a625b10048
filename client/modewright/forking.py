"""A lock that a forked child finds open."""

from __future__ import annotations

import os
import threading
from types import TracebackType

__all__ = ["ForkSafeLock"]


class ForkSafeLock:
    """A lock for state that every process holds for itself; meant for modules, as it is never collected.

    Another thread of the parent may hold it while forking. In the child nobody would ever release it: the
    child gets a new one.
    """

    def __init__(self) -> None:
        self._renew()
        os.register_at_fork(after_in_child=self._renew)

    def _renew(self) -> None:
        self._lock = threading.Lock()

    def __enter__(self) -> None:
        self._lock.acquire()

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._lock.release()
