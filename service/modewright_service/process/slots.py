"""Cancel flags and deadlines that a running solve can read at the price of a memory access.

A small file, memory-mapped by the front and by every worker, holds two lines of 64 bytes for each worker. The
front writes the first: a stop byte and the deadline on the monotonic clock. The worker writes the second:
how often its solver has polled, which is the life sign that a watcher sees. Nothing has to be received, so
a worker deep inside a factorisation needs no thread to listen, and there is no shared memory segment for
anyone to unlink.

The front arms a slot before it sends the job that runs in it, so that a flag can never meet the job after
the one it was meant for. The monotonic clock is one for all processes of a machine on Linux and macOS,
hence a deadline needs no translation.
"""

from __future__ import annotations

import math
import mmap
import struct
import time
from pathlib import Path
from typing import Final, Self

__all__ = ["SlotBoard", "StopCause"]

# A cache line for each writer: nobody's write slows the readers of another line down.
_LINE: Final = 128
_STEPS_AT: Final = 64
_DEADLINE_AT: Final = 8
# Native alignment and order: packed by one 8-byte store, so that a reader never sees half a number.
_DEADLINE: Final = struct.Struct("@d")
_STEPS: Final = struct.Struct("@Q")

StopCause = str
"""Why a solve should stop: "" (go on), "cancelled" or "deadline"."""


class SlotBoard:
    """The lines of `slots` workers in the file at `path`.

    Made once by the front with `create`, opened by each worker with the constructor.
    """

    def __init__(self, path: Path) -> None:
        with path.open("r+b") as file:
            self._map = mmap.mmap(file.fileno(), 0)

    @classmethod
    def create(cls, path: Path, slots: int) -> Self:
        """A new board of idle slots."""
        path.write_bytes(bytes(_LINE * slots))
        board = cls(path)
        for slot in range(slots):
            board.arm(slot, math.inf)
        return board

    def arm(self, slot: int, deadline: float) -> None:
        """Make `slot` ready for a new job that must end by `deadline` (monotonic seconds, inf for none)."""
        self.extend(slot, deadline)
        self.report(slot, 0)
        self._map[slot * _LINE] = 0

    def extend(self, slot: int, deadline: float) -> None:
        """Move the deadline of the job in `slot`."""
        _DEADLINE.pack_into(self._map, slot * _LINE + _DEADLINE_AT, deadline)

    def cancel(self, slot: int) -> None:
        """Tell the job in `slot` to stop at its next poll."""
        self._map[slot * _LINE] = 1

    def cause(self, slot: int) -> StopCause:
        """Why the job in `slot` should stop now; empty while it may go on."""
        if self._map[slot * _LINE]:
            return "cancelled"
        (deadline,) = _DEADLINE.unpack_from(self._map, slot * _LINE + _DEADLINE_AT)
        return "deadline" if time.monotonic() >= deadline else ""

    def report(self, slot: int, steps: int) -> None:
        """Say that the solver in `slot` has polled `steps` times."""
        _STEPS.pack_into(self._map, slot * _LINE + _STEPS_AT, steps)

    def steps(self, slot: int) -> int:
        """How often the solver in `slot` has polled since its job began."""
        (steps,) = _STEPS.unpack_from(self._map, slot * _LINE + _STEPS_AT)
        return int(steps)

    def close(self) -> None:
        """Release the mapping."""
        self._map.close()
