"""What every servicer needs: problems resolved, bases obtained, deadlines, heavy work off the event loop."""

from __future__ import annotations

import asyncio
import math
import time
from collections.abc import Callable
from concurrent.futures import Executor
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Final, TypeVar

import grpc

from modewright.v1 import basis_pb2, problem_pb2
from modewright_service.core.errors import CoreError, InvalidRequest, Reason
from modewright_service.core.problem import validate
from modewright_service.rpc.convert import checked_key, problem_from, wanted_from
from modewright_service.store.cache import Kept
from modewright_service.store.counters import Counters
from modewright_service.store.library import Library, Wanted
from modewright_service.store.orders import StopFlag

__all__ = ["Context", "Desk", "Limits"]

T = TypeVar("T")
if TYPE_CHECKING:
    Context = grpc.aio.ServicerContext[Any, Any]
else:  # generic in the stubs only
    Context = grpc.aio.ServicerContext

# Below this a problem is a few layers without tables: resolving it costs less than a change of thread.
_SMALL_PROBLEM: Final = 8192


@dataclass(frozen=True)
class Limits:
    """max_modes: of one basis. message_bytes: of a request and of an answer. call_seconds: of a call that
    sets no deadline, and the most for one that does.
    """

    max_modes: int = 2048
    message_bytes: int = 8 * 1024 * 1024
    call_seconds: float = 3600.0


class Desk:
    """Shared by the servicers; used on the event loop's thread."""

    def __init__(self, library: Library, counters: Counters, limits: Limits, executor: Executor) -> None:
        self.library = library
        self.counters = counters
        self.limits = limits
        self._executor = executor

    def deadline(self, context: Context) -> float:
        """When the caller gives up, in monotonic seconds."""
        remaining = context.time_remaining()
        if remaining is None or not math.isfinite(remaining):
            remaining = self.limits.call_seconds
        return time.monotonic() + min(remaining, self.limits.call_seconds)

    async def run(self, work: Callable[..., T], *arguments: Any) -> T:
        """Run `work` in a thread."""
        return await asyncio.get_running_loop().run_in_executor(self._executor, work, *arguments)

    async def run_stoppable(self, work: Callable[[StopFlag], T], deadline: float) -> T:
        """Run `work` in a thread with a poll that ends it with the call."""
        flag = StopFlag(deadline)
        try:
            return await self.run(work, flag)
        except asyncio.CancelledError:
            flag.stop()
            raise

    async def wanted(
        self,
        problem: problem_pb2.Problem,
        specification: basis_pb2.BasisSpecification,
        *,
        prefix: str = "",
        default_modes: int | None = None,
        pinned_key: str = "",
    ) -> Wanted:
        """The basis that a problem and a specification ask for.

        Raises CoreError for everything that is wrong with either.
        """

        def resolve() -> Wanted:
            core_problem = problem_from(problem)
            validate(core_problem)
            return wanted_from(
                core_problem,
                specification,
                max_modes=self.limits.max_modes,
                field=f"{prefix}specification",
                default_modes=default_modes,
                pinned_key=pinned_key,
            )

        if problem.ByteSize() < _SMALL_PROBLEM:
            return resolve()
        return await self.run(resolve)

    async def basis(self, reference: basis_pb2.BasisReference, context: Context) -> tuple[Kept, int]:
        """The basis that a request refers to, computed if need be, and how many of its modes to use.

        Raises CoreError: BASIS_NOT_FOUND for an unknown key alone, BAD_REQUEST for an empty reference,
        BAD_SHAPE for a count beyond the basis, and all that `wanted` and a solve raise.
        """
        key = checked_key(reference.basis_key, "basis.basis_key")
        kept = self.library.get(key) if key else None
        modes = 0
        if kept is None and reference.HasField("problem"):
            wanted = await self.wanted(
                reference.problem, reference.specification, prefix="basis.", pinned_key=key
            )
            kept = (await self.library.obtain(wanted, self.deadline(context))).kept
            modes = 0 if key else wanted.modes
        elif kept is None and key:
            raise CoreError(
                Reason.BASIS_NOT_FOUND,
                f"this replica does not hold the basis {key[:12]}...: send its problem along",
                metadata={"basis_key": key},
            )
        elif kept is None:
            raise InvalidRequest.at(Reason.BAD_REQUEST, "basis", "needs a basis_key or a problem")
        else:
            self.counters.cache_hits += 1
        held = kept.record.count
        count = reference.count or modes or held
        if not 1 <= count <= held:
            raise InvalidRequest.at(
                Reason.BAD_SHAPE,
                "basis.count",
                f"the basis has {held} modes",
                reference.count,
                available=held,
            )
        return kept, count
