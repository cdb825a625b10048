"""Bases on demand: from the cache, or by one computation that all who want the same basis share.

A computation that is under way is a *flight*. Whoever asks for its key boards it; each passenger may leave
at any time (cancelled, out of time), and when the last one has left, the computation is cancelled. The
flight's deadline is the latest of its passengers' deadlines and follows them as they board. Flights of
different keys know nothing of each other.
"""

from __future__ import annotations

import asyncio
import copy
import logging
import math
import time
from collections.abc import Callable
from concurrent.futures import Executor
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, TypeVar

from modewright_service.core.errors import CoreError, Interrupted, Reason
from modewright_service.store.cache import Kept, RecordCache
from modewright_service.store.counters import Counters
from modewright_service.store.orders import Order, Progress, Solver, StopFlag, damaged

if TYPE_CHECKING:
    from modewright_service.core.problem import Problem

__all__ = ["Found", "Library", "Wanted"]

_log = logging.getLogger(__name__)

T = TypeVar("T")


@dataclass(frozen=True, eq=False)
class Wanted:
    """A basis that somebody needs.

    basis_key: key of exactly the rung that the specification resolves to. modes: how many were asked for.
    rung, rtol: what would be solved. exact: only the basis of that key will do, not a higher rung.
    """

    problem: Problem
    problem_digest: str
    basis_key: str
    modes: int
    rung: int
    rtol: float
    exact: bool = False


@dataclass(frozen=True)
class Found:
    """A basis, and whether this call needed no solve of its own for it."""

    kept: Kept
    shared: bool


@dataclass(eq=False)
class _Flight:
    order: Order
    task: asyncio.Task[Kept]
    passengers: int = 0


@dataclass(eq=False)
class _Building:
    flag: StopFlag
    future: asyncio.Future[Any]
    passengers: int = 0


class Library:
    """Answers from `cache` and fills it through `solver`; heavy local work runs on `executor`.

    Used on the event loop's thread only.
    """

    def __init__(self, cache: RecordCache, solver: Solver, counters: Counters, executor: Executor) -> None:
        self._cache = cache
        self._solver = solver
        self._counters = counters
        self._executor = executor
        self._flights: dict[str, _Flight] = {}
        self._building: dict[tuple[str, str], _Building] = {}

    def get(self, basis_key: str) -> Kept | None:
        """The basis of a key, if it is here."""
        return self._cache.get(basis_key)

    def find(self, wanted: Wanted) -> Kept | None:
        """A basis that answers `wanted` without a solve, if one is here."""
        if wanted.exact:
            return self._cache.get(wanted.basis_key)
        return self._cache.covering(wanted.problem_digest, wanted.modes, wanted.rtol)

    def progress(self, wanted: Wanted) -> Progress | None:
        """How far the computation of `wanted` is; None when there is none under way."""
        flight = self._flights.get(wanted.basis_key)
        return self._solver.progress(flight.order) if flight else None

    async def obtain(self, wanted: Wanted, deadline: float = math.inf) -> Found:
        """The basis, computed if need be; `deadline` in monotonic seconds.

        Raises CoreError: what the solver raises, and Interrupted (DEADLINE) when the deadline passes first.
        """
        kept = self.find(wanted)
        if kept is not None:
            self._counters.cache_hits += 1
            return Found(kept, shared=True)
        self._counters.cache_misses += 1
        flight = self._flights.get(wanted.basis_key)
        joined = flight is not None
        if flight is None:
            flight = self._depart(wanted, deadline)
        else:
            self._counters.solve_joins += 1
            if deadline > flight.order.deadline:
                flight.order.deadline = deadline
                self._solver.extend(flight.order)
        return Found(await self._ride(flight, deadline), shared=joined)

    def _depart(self, wanted: Wanted, deadline: float) -> _Flight:
        order = Order(wanted.basis_key, wanted.problem, wanted.rung, wanted.rtol, deadline)
        flight = _Flight(order, asyncio.create_task(self._compute(order)))
        self._flights[wanted.basis_key] = flight
        flight.task.add_done_callback(lambda _: self._land(wanted.basis_key, flight))
        return flight

    async def _compute(self, order: Order) -> Kept:
        from modewright.record import Record, RecordError

        computed = await self._solver.solve(order)
        # The checksum of a large record takes a while: not on the event loop.
        loop = asyncio.get_running_loop()
        try:
            record = await loop.run_in_executor(self._executor, Record.from_bytes, computed.data)
            if record.basis_key != order.basis_key:
                raise RecordError(f"it is the basis {record.basis_key}, not {order.basis_key}")
        except RecordError as error:
            self._counters.records_damaged += 1
            _log.error("a damaged record was thrown away", exc_info=error)
            raise damaged() from error
        kept = Kept(record, computed.data, computed.seconds)
        self._cache.put(kept)
        return kept

    def _land(self, key: str, flight: _Flight) -> None:
        if self._flights.get(key) is flight:
            del self._flights[key]
        if not flight.task.cancelled():
            flight.task.exception()  # nobody may be left to look at it

    async def _ride(self, flight: _Flight, deadline: float) -> Kept:
        flight.passengers += 1
        try:
            timeout = None if math.isinf(deadline) else max(deadline - time.monotonic(), 0.0)
            await asyncio.wait({flight.task}, timeout=timeout)
        finally:
            flight.passengers -= 1
            if not flight.passengers and not flight.task.done():
                # From here on the flight takes nobody on board: the next caller starts afresh.
                del self._flights[flight.order.basis_key]
                flight.task.cancel()
        if not flight.task.done() or flight.task.cancelled():
            raise Interrupted(Reason.DEADLINE, "the deadline of the call passed before the basis was there")
        error = flight.task.exception()
        if isinstance(error, CoreError):
            # Each passenger gets its own: raising one object in many tasks entangles their tracebacks.
            raise copy.copy(error)
        return flight.task.result()

    async def operator(
        self, kept: Kept, operator_key: str, build: Callable[[StopFlag], T], size: Callable[[T], int]
    ) -> T:
        """An operator of a basis from the cache, else built once on the executor for all who wait for it.

        build: called in a thread with a poll to call in its loops; stopped when the last who waits has left.
        """
        cached: T | None = self._cache.operator(kept.key, operator_key)
        if cached is not None:
            self._counters.operator_hits += 1
            return cached
        place = (kept.key, operator_key)
        building = self._building.get(place)
        if building is None:
            flag = StopFlag()
            future = asyncio.get_running_loop().run_in_executor(self._executor, build, flag)
            building = self._building[place] = _Building(flag, future)
            future.add_done_callback(lambda done: self._shelve(place, done, size))
        building.passengers += 1
        try:
            await asyncio.wait({building.future})
        finally:
            building.passengers -= 1
            if not building.passengers and not building.future.done():
                building.flag.stop()
                self._building.pop(place, None)
        error = building.future.exception()
        if isinstance(error, CoreError):
            raise copy.copy(error)
        result: T = building.future.result()
        return result

    def _shelve(self, place: tuple[str, str], future: asyncio.Future[T], size: Callable[[T], int]) -> None:
        building = self._building.get(place)
        if building is not None and building.future is future:
            del self._building[place]
        if future.cancelled() or future.exception() is not None:
            return
        self._counters.operators_built += 1
        operator = future.result()
        self._cache.put_operator(*place, operator, size(operator))
