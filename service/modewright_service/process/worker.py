"""A worker: one process that solves one problem at a time.

Started by the front as a fresh interpreter (never forked: gRPC and BLAS threads do not survive a fork),
with one end of a socket pair and the slot board. It reads jobs, solves them, writes records into the spool,
and ends when the front's end of the socket closes. It runs at a lower priority than the front, so that
health, cached answers and transforms stay quick while every core solves.
"""

from __future__ import annotations

import argparse
import importlib
import os
import signal
import socket
import sys
import time
import traceback
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any, Final

from modewright_service.core.errors import CoreError, Interrupted, LimitExceeded, Reason
from modewright_service.process import frames
from modewright_service.process.slots import SlotBoard

if TYPE_CHECKING:
    from modewright.record import Record

__all__ = ["DEFAULT_ENTRY", "main"]

DEFAULT_ENTRY: Final = "modewright_service.core.solve:solve"


class _Guard:
    """What the solver is given to call in its loops: stops the job when the front wants that."""

    def __init__(self, board: SlotBoard, slot: int, parent: int) -> None:
        self._board = board
        self._slot = slot
        self._parent = parent
        self._steps = 0

    def begin(self) -> None:
        """A new job starts."""
        self._steps = 0

    def poll(self) -> None:
        """Raise Interrupted when the job was cancelled or is past its deadline.

        Ends the process when the front has died: nobody is left to answer to.
        """
        self._steps += 1
        self._board.report(self._slot, self._steps)
        cause = self._board.cause(self._slot)
        if cause == "cancelled":
            raise Interrupted(Reason.CANCELLED, "the solve was cancelled")
        if cause == "deadline":
            raise Interrupted(Reason.DEADLINE, "the deadline of the call passed during the solve")
        if os.getppid() != self._parent:
            os._exit(0)


def main(arguments: Sequence[str] | None = None) -> int:
    """Run a worker until the front goes away. Returns the exit status."""
    parser = argparse.ArgumentParser(prog="modewright-worker")
    parser.add_argument("--fd", type=int, required=True)
    parser.add_argument("--board", type=Path, required=True)
    parser.add_argument("--slot", type=int, required=True)
    parser.add_argument("--parent", type=int, required=True)
    parser.add_argument("--nice", type=int, required=True)
    parser.add_argument("--entry", default=DEFAULT_ENTRY)
    options = parser.parse_args(arguments)

    # An interrupt typed at a terminal reaches the whole group; the front decides what it means for a worker.
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    if options.nice > 0:
        os.nice(options.nice)
    sock = socket.socket(fileno=options.fd)
    module, _, name = options.entry.partition(":")
    solve = getattr(importlib.import_module(module), name)
    guard = _Guard(SlotBoard(options.board), options.slot, options.parent)
    try:
        frames.send(sock, frames.Ready(os.getpid()))
        while True:
            job = frames.receive(sock)
            frames.send(sock, _run(solve, job, guard))
    except (EOFError, ConnectionError):
        return 0


def _run(solve: Callable[..., Record], job: frames.Job, guard: _Guard) -> frames.FromWorker:
    started = time.perf_counter()
    guard.begin()
    try:
        record = solve(job.problem, job.count, job.rtol, poll=guard.poll)
        seconds = time.perf_counter() - started
        guard.poll()
        _write(Path(job.path), record.to_bytes())
    except CoreError as error:
        return frames.Failed(job.number, error)
    except MemoryError:
        return frames.Failed(
            job.number,
            LimitExceeded(
                Reason.LIMIT_EXCEEDED, "the solve ran out of memory", metadata={"modes": str(job.count)}
            ),
        )
    except Exception:
        return frames.Crashed(job.number, traceback.format_exc())
    return frames.Finished(job.number, job.path, seconds)


def _write(path: Path, data: Any) -> None:
    # Under its final name only when whole, so that nobody can ever map half a record.
    partial = path.with_suffix(".partial")
    partial.write_bytes(data)
    partial.rename(path)


if __name__ == "__main__":
    sys.exit(main())
