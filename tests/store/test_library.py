"""One computation for all who want the same basis, stopped when nobody does any more."""

from __future__ import annotations

import asyncio
import math
import time
from collections.abc import AsyncIterator, Awaitable, Callable
from concurrent.futures import ThreadPoolExecutor
from contextlib import asynccontextmanager

import pytest

from modewright_service.core import digest
from modewright_service.core.errors import CoreError, Interrupted, InvalidProblem, Reason
from modewright_service.core.problem import Constant, Dirichlet, Expression, Layer, Problem
from modewright_service.core.solve import solve
from modewright_service.store.cache import RecordCache
from modewright_service.store.counters import Counters
from modewright_service.store.library import Library, Wanted
from modewright_service.store.orders import Computed, Order, Progress, StopFlag


class GatedSolver:
    """The real solver in a thread, once `gate` is open; remembers what it was told."""

    def __init__(self) -> None:
        self.gate = asyncio.Event()
        self.started: list[Order] = []
        self.cancelled: list[Order] = []
        self.extended: list[float] = []

    async def solve(self, order: Order) -> Computed:
        self.started.append(order)
        try:
            await self.gate.wait()
            record = await asyncio.to_thread(solve, order.problem, order.count, order.rtol, poll=StopFlag())
        except asyncio.CancelledError:
            self.cancelled.append(order)
            raise
        return Computed(memoryview(record.to_bytes()), 0.1)

    def extend(self, order: Order) -> None:
        self.extended.append(order.deadline)

    def progress(self, order: Order) -> Progress:
        return Progress(computing=self.gate.is_set())


def wanted(w: float = 1.0, modes: int = 8, *, p: str = "", exact: bool = False) -> Wanted:
    layer = Layer("only", 0.0, 1.0, p=Expression(p) if p else Constant(1.0), w=Constant(w))
    problem = Problem((layer,), Dirichlet(), Dirichlet())
    rung = digest.rung(modes)
    problem_digest = digest.problem_digest(problem)
    key = digest.basis_key(problem_digest, rung, 1e-9)
    return Wanted(problem, problem_digest, key, modes, rung, 1e-9, exact)


@asynccontextmanager
async def library() -> AsyncIterator[tuple[Library, GatedSolver, Counters]]:
    counters, solver = Counters(), GatedSolver()
    with ThreadPoolExecutor(2) as executor:
        yield Library(RecordCache(1 << 26, counters), solver, counters, executor), solver, counters


def on_a_loop(test: Callable[[], Awaitable[None]]) -> Callable[[], None]:
    def run() -> None:
        asyncio.run(test())  # type: ignore[arg-type]

    run.__name__ = test.__name__
    run.__doc__ = test.__doc__
    return run


async def _boarded(solver: GatedSolver, count: int = 1) -> None:
    while len(solver.started) < count:
        await asyncio.sleep(0)


@on_a_loop
async def test_200_equal_requests_solve_once() -> None:
    async with library() as (books, solver, counters):
        asking = [asyncio.ensure_future(books.obtain(wanted())) for _ in range(200)]
        await _boarded(solver)
        solver.gate.set()
        found = await asyncio.gather(*asking)
        assert len(solver.started) == 1
        assert len({id(answer.kept) for answer in found}) == 1
        assert [answer.shared for answer in found].count(False) == 1
        assert counters.solve_joins == 199
        again = await books.obtain(wanted())
        assert again.shared
        assert counters.cache_hits == 1
        assert len(solver.started) == 1


@on_a_loop
async def test_a_higher_rung_answers_fewer_modes_but_not_an_exact_key() -> None:
    async with library() as (books, solver, _):
        solver.gate.set()
        large = await books.obtain(wanted(modes=24))
        assert (await books.obtain(wanted(modes=3))).kept is large.kept
        assert books.find(wanted(modes=3, exact=True)) is None
        small = await books.obtain(wanted(modes=3, exact=True))
        assert small.kept.record.count == 8
        assert [order.count for order in solver.started] == [24, 8]


@on_a_loop
async def test_the_solve_stops_when_the_last_one_leaves() -> None:
    async with library() as (books, solver, _):
        first, second = (asyncio.ensure_future(books.obtain(wanted())) for _ in range(2))
        await _boarded(solver)
        first.cancel()
        await asyncio.wait({first})
        assert not solver.cancelled
        assert books.progress(wanted()) == Progress(computing=False)
        second.cancel()
        await asyncio.wait({second})
        await asyncio.sleep(0)
        assert solver.cancelled == solver.started
        assert books.progress(wanted()) is None
        # Whoever comes now gets a computation of their own.
        solver.gate.set()
        assert not (await books.obtain(wanted())).shared
        assert len(solver.started) == 2


@on_a_loop
async def test_a_deadline_ends_one_caller_and_not_the_solve() -> None:
    async with library() as (books, solver, _):
        patient = asyncio.ensure_future(books.obtain(wanted()))
        await _boarded(solver)
        with pytest.raises(Interrupted) as caught:
            await books.obtain(wanted(), time.monotonic() + 0.05)
        assert caught.value.reason is Reason.DEADLINE
        assert not solver.cancelled
        solver.gate.set()
        assert (await patient).kept.record.count == 8


@on_a_loop
async def test_the_deadline_of_a_solve_is_the_latest_of_its_callers() -> None:
    async with library() as (books, solver, _):
        now = time.monotonic()
        asking = []
        for deadline in (now + 50, now + 40, now + 60, math.inf):
            asking.append(asyncio.ensure_future(books.obtain(wanted(), deadline)))
            await asyncio.sleep(0)
        await _boarded(solver)
        assert solver.extended == [now + 60, math.inf]
        assert solver.started[0].deadline == math.inf
        solver.gate.set()
        await asyncio.gather(*asking)


@on_a_loop
async def test_different_keys_do_not_wait_for_each_other() -> None:
    async with library() as (books, solver, _):
        asking = [asyncio.ensure_future(books.obtain(wanted(w))) for w in (1.0, 2.0, 3.0)]
        await _boarded(solver, 3)
        assert len({order.basis_key for order in solver.started}) == 3
        solver.gate.set()
        await asyncio.gather(*asking)


@on_a_loop
async def test_every_caller_gets_an_error_of_its_own() -> None:
    async with library() as (books, solver, _):
        asking = [asyncio.ensure_future(books.obtain(wanted(p="x - 0.5"))) for _ in range(3)]
        await _boarded(solver)
        solver.gate.set()
        failures = await asyncio.gather(*asking, return_exceptions=True)
        assert all(isinstance(failure, InvalidProblem) for failure in failures)
        assert len({id(failure) for failure in failures}) == 3
        assert {str(failure) for failure in failures} == {str(failures[0])}
        # A failure is not remembered: the next caller asks the solver again.
        with pytest.raises(InvalidProblem):
            await books.obtain(wanted(p="x - 0.5"))
        assert len(solver.started) == 2


@on_a_loop
async def test_an_operator_is_built_once_and_kept() -> None:
    async with library() as (books, solver, counters):
        solver.gate.set()
        kept = (await books.obtain(wanted())).kept
        builds = []

        def build(poll: StopFlag) -> bytes:
            builds.append(poll)
            time.sleep(0.02)
            return bytes(100)

        got = await asyncio.gather(*(books.operator(kept, "mesh", build, len) for _ in range(20)))
        await books.operator(kept, "mesh", build, len)
        assert len(builds) == 1
        assert {len(operator) for operator in got} == {100}
        assert counters.operators_built == 1
        assert counters.operator_hits == 1


@on_a_loop
async def test_building_an_operator_stops_when_the_last_one_leaves() -> None:
    async with library() as (books, solver, _):
        solver.gate.set()
        kept = (await books.obtain(wanted())).kept
        stopped = asyncio.Event()
        loop = asyncio.get_running_loop()

        def build(poll: StopFlag) -> bytes:
            try:
                while True:
                    poll()
                    time.sleep(0.005)
            except CoreError:
                loop.call_soon_threadsafe(stopped.set)
                raise

        building = asyncio.ensure_future(books.operator(kept, "mesh", build, len))
        await asyncio.sleep(0.02)
        building.cancel()
        await asyncio.wait_for(stopped.wait(), 30)
