"""What is asked of whoever computes a basis, in words that neither gRPC nor worker processes appear in."""

from __future__ import annotations

import math
import time
from dataclasses import dataclass
from typing import TYPE_CHECKING, Protocol

from modewright_service.core.errors import CoreError, Interrupted, Reason

if TYPE_CHECKING:
    from modewright_service.core.problem import Problem

__all__ = ["Computed", "Order", "Progress", "Solver", "StopFlag", "damaged"]


@dataclass(eq=False)
class Order:
    """One basis to be computed.

    basis_key: what it will be known by. count, rtol: rungs of the ladder, not what a user typed.
    deadline: monotonic seconds at which the last caller interested in it gives up; may be moved while it runs
        (then call the solver's `extend`).
    steps: life signs of its solver, set when it has ended.
    """

    basis_key: str
    problem: Problem
    count: int
    rtol: float
    deadline: float = math.inf
    steps: int = 0


@dataclass(frozen=True)
class Computed:
    """The bytes of a record and the seconds that its solve took."""

    data: memoryview
    seconds: float


@dataclass(frozen=True)
class Progress:
    """How far an order is.

    computing: a worker has it. position: orders that wait before it. steps: life signs of the solver so far.
    starting: it waits because no worker is ready for work yet.
    """

    computing: bool
    position: int = 0
    steps: int = 0
    starting: bool = False


def damaged() -> CoreError:
    """The error for a record that was computed and did not arrive whole; another attempt may do better."""
    return CoreError(
        Reason.WORKER_LOST,
        "the computed basis was damaged on its way and thrown away; the log of the service says more",
        metadata={"retry_after_seconds": "0.1"},
    )


class StopFlag:
    """A poll for work in a thread: raises Interrupted once `stop` was called or the deadline has passed."""

    def __init__(self, deadline: float = math.inf) -> None:
        self._deadline = deadline
        self._stopped = False

    def stop(self) -> None:
        """Make the next poll raise."""
        self._stopped = True

    def __call__(self) -> None:
        if self._stopped:
            raise Interrupted(Reason.CANCELLED, "the call was cancelled")
        if time.monotonic() >= self._deadline:
            raise Interrupted(Reason.DEADLINE, "the deadline of the call passed")


class Solver(Protocol):
    """Computes bases somewhere."""

    async def solve(self, order: Order) -> Computed:
        """Compute the order's record.

        Cancelling the awaiting task stops the computation. Raises CoreError: whatever the numerical core
        refuses, and QUEUE_FULL, WORKER_LOST, SHUTTING_DOWN, DEADLINE from the solver itself.
        """

    def extend(self, order: Order) -> None:
        """Let a moved deadline of a running order take effect."""

    def progress(self, order: Order) -> Progress:
        """How far the order is."""
