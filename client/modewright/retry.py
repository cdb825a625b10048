"""The one place where a call is made again.

Two rules, and no others (gRPC's own retries are off, see :mod:`modewright.channels`):

- UNAVAILABLE - nobody listening yet, a replica draining, a worker lost - is tried again, at most 5 attempts
  in all, after 0.05 s, doubling up to 1 s, each wait shortened at random so that many clients spread out.
  Every call of the contract may be repeated without harm. A refused TLS handshake looks the same to gRPC
  and is told apart
  first: it raises HandshakeFailed at once.
- NOT_FOUND for a basis means that this replica does not hold it. The call is made once more with the whole
  problem in it.

All of it happens within the one deadline of the call: each attempt gets what is left of it, and no wait goes
beyond it.
"""

from __future__ import annotations

import random
import time
from collections.abc import Callable
from dataclasses import dataclass, field
from typing import TypeVar

import grpc

from modewright import errors
from modewright.status import error_from_call, is_code

__all__ = ["Retry", "Schedule"]

T = TypeVar("T")


@dataclass(frozen=True)
class Schedule:
    """How often and after which waits.

    attempts: calls in all. first, longest: seconds before the second attempt, and at most.
    """

    attempts: int = 5
    first: float = 0.05
    longest: float = 1.0

    def wait(self, failures: int, spread: float) -> float:
        """Seconds to wait after so many failures; `spread` in [0, 1) picks within the upper half."""
        full = min(self.longest, self.first * 2.0 ** (failures - 1))
        return full * (0.5 + 0.5 * spread)


@dataclass
class Retry:
    """Makes one call, with its repetitions, within `timeout` seconds.

    rename: from the contract's field paths to those of the document, for errors. handshake: tells after an
    UNAVAILABLE whether TLS was refused, and why; None for channels without TLS.
    """

    timeout: float
    rename: Callable[[str], str] | None = None
    handshake: Callable[[float], str | None] | None = None
    schedule: Schedule = field(default_factory=Schedule)
    clock: Callable[[], float] = time.monotonic
    sleep: Callable[[float], None] = time.sleep
    spread: Callable[[], float] = random.random

    def __call__(self, invoke: Callable[[float], T], resend: Callable[[float], T] | None = None) -> T:
        """What `invoke(seconds left)` returns; `resend` is called in its place after an unknown basis.

        Raises one of :mod:`modewright.errors`.
        """
        deadline = self.clock() + self.timeout
        failures = 0
        while True:
            left = max(deadline - self.clock(), 0.0)
            try:
                return invoke(left)
            except grpc.RpcError as error:
                decoded = error_from_call(error, self.rename)
                if isinstance(decoded, errors.BasisNotFound) and resend is not None:
                    invoke, resend = resend, None
                    continue
                if isinstance(decoded, errors.DeadlineExceeded) and not decoded.reason:
                    message = f"no answer within the time limit of {self.timeout:g} s"
                    raise errors.DeadlineExceeded(message, reason="DEADLINE") from None
                if not is_code(error, grpc.StatusCode.UNAVAILABLE):
                    raise decoded from None
                failures += 1
                self._give_up_or_wait(decoded, failures, deadline)

    def _give_up_or_wait(self, error: errors.ModewrightError, failures: int, deadline: float) -> None:
        """Waits for the next attempt, or raises why there is none."""
        left = deadline - self.clock()
        # A service that answered with a reason did so through a good handshake.
        if failures == 1 and self.handshake is not None and not error.reason and left > 0.0:
            refused = self.handshake(left)
            if refused is not None:
                raise errors.HandshakeFailed(f"the TLS handshake failed: {refused}") from None
        wait = self.schedule.wait(failures, self.spread())
        if failures >= self.schedule.attempts or wait >= deadline - self.clock():
            tries = f"after {failures} attempt{'s' if failures > 1 else ''}"
            message = f"{error.message} ({tries})"
            raise errors.Unavailable(
                message, reason=error.reason, violations=error.violations, metadata=error.metadata
            ) from None
        self.sleep(wait)
