"""Workers under fire: killed, cancelled, late, deaf, too many, told to stop. Every solve is a real one."""

from __future__ import annotations

import asyncio
import os
import signal
import time
from collections.abc import AsyncIterator, Awaitable, Callable
from contextlib import asynccontextmanager
from pathlib import Path

import pytest

from modewright.record import Record
from modewright_service.core.errors import CoreError, InvalidProblem, Reason
from modewright_service.core.problem import Constant, Dirichlet, Expression, Layer, Problem
from modewright_service.process.crew import hire
from modewright_service.process.pool import PoolLimits, WorkerPool
from modewright_service.process.settings import Settings
from modewright_service.store.counters import Counters
from modewright_service.store.orders import Computed, Order, Progress
from tests.process.harness import HEAVY, alive

PATIENCE = 100.0


def order(count: int = 8, w: float = 1.0, p: str = "") -> Order:
    layer = Layer("only", 0.0, 1.0, p=Expression(p) if p else Constant(1.0), w=Constant(w))
    return Order(f"{count}/{w}", Problem((layer,), Dirichlet(), Dirichlet()), count, 1e-9)


def heavy(w: float = 1.0) -> Order:
    """About a second of work."""
    return order(HEAVY, w)


@asynccontextmanager
async def pool(
    folder: Path, slots: int = 1, limits: PoolLimits | None = None, entry: str = ""
) -> AsyncIterator[tuple[WorkerPool, Counters]]:
    counters = Counters()
    crew = hire(Settings(workers=slots, worker_nice=0, spool=folder / "spool"), entry)
    workers = WorkerPool(
        crew.setup, crew.board, crew.spool, slots, counters, limits or PoolLimits(), crew.spawned
    )
    workers.start()
    try:
        await eventually(lambda: len(workers.pids) == slots)
        yield workers, counters
    finally:
        await workers.close()
        crew.board.close()
        crew.spool.close()


async def eventually(condition: Callable[[], bool]) -> None:
    async with asyncio.timeout(PATIENCE):
        while not condition():
            await asyncio.sleep(0.005)


async def computing(workers: WorkerPool, what: Order, steps: int = 1) -> None:
    """Wait until a worker is in the midst of an order."""
    await eventually(lambda: workers.progress(what).steps >= steps)


def eigenvalues(computed: Computed) -> list[float]:
    return Record.from_bytes(computed.data).eigenvalues.tolist()


def run(test: Callable[[], Awaitable[None]]) -> None:
    async def limited() -> None:
        async with asyncio.timeout(2 * PATIENCE):
            await test()

    asyncio.run(limited())


def test_a_killed_worker_is_replaced_and_its_solve_tried_again(tmp_path: Path) -> None:
    async def test() -> None:
        async with pool(tmp_path, slots=2) as (workers, counters):
            # The one in the second slot only has to go on, whatever happens in the first.
            victim, bystander = heavy(1.0), heavy(4.0)
            first = asyncio.ensure_future(workers.solve(victim))
            second = asyncio.ensure_future(workers.solve(bystander))
            await computing(workers, victim)
            await computing(workers, bystander)
            killed, other = workers.busy_pids
            os.kill(killed, signal.SIGKILL)
            small, large = eigenvalues(await second), eigenvalues(await first)
            assert large == pytest.approx([4.0 * value for value in small], rel=1e-12)
            assert counters.solves_retried == counters.worker_restarts == 1
            assert counters.solves_finished == 2
            await eventually(lambda: len(workers.pids) == 2)
            assert other in workers.pids
            assert killed not in workers.pids

    run(test)


def test_a_solve_that_loses_two_workers_is_given_up(tmp_path: Path) -> None:
    async def test() -> None:
        async with pool(tmp_path) as (workers, counters):
            doomed = heavy()
            solving = asyncio.ensure_future(workers.solve(doomed))
            for _ in range(2):
                await computing(workers, doomed)
                (pid,) = workers.busy_pids
                os.kill(pid, signal.SIGKILL)
                await eventually(lambda pid=pid: pid not in workers.pids)  # type: ignore[misc]
            with pytest.raises(CoreError) as caught:
                await solving
            assert caught.value.reason is Reason.WORKER_LOST
            assert caught.value.metadata["attempts"] == "2"
            # And the slot works again.
            assert len(eigenvalues(await workers.solve(order()))) == 8
            assert counters.worker_restarts == 2

    run(test)


def test_before_the_first_worker_is_ready_an_order_is_starting(tmp_path: Path) -> None:
    async def test() -> None:
        crew = hire(Settings(workers=1, worker_nice=0, spool=tmp_path / "spool"))
        workers = WorkerPool(crew.setup, crew.board, crew.spool, 1, Counters(), spawned=crew.spawned)
        workers.start()
        first, second = heavy(), order()
        tasks = [asyncio.ensure_future(workers.solve(o)) for o in (first, second)]
        await asyncio.sleep(0)
        # Nothing has been read from the worker: this task has not let go of the loop for long enough.
        assert workers.progress(first) == Progress(computing=False, position=0, starting=True)
        assert workers.progress(second) == Progress(computing=False, position=1, starting=True)
        await computing(workers, first)
        assert workers.progress(second) == Progress(computing=False, position=0, starting=False)
        tasks[0].cancel()
        assert len(eigenvalues(await tasks[1])) == 8
        await workers.close()
        crew.board.close()
        crew.spool.close()

    run(test)


def test_an_idle_worker_that_dies_is_replaced(tmp_path: Path) -> None:
    async def test() -> None:
        async with pool(tmp_path) as (workers, counters):
            (pid,) = workers.pids
            os.kill(pid, signal.SIGKILL)
            await eventually(lambda: workers.pids not in ([], [pid]))
            assert len(eigenvalues(await workers.solve(order()))) == 8
            assert counters.solves_retried == 0

    run(test)


def test_a_cancelled_solve_stops_and_the_worker_lives(tmp_path: Path) -> None:
    async def test() -> None:
        async with pool(tmp_path) as (workers, counters):
            (pid,) = workers.pids
            unwanted = heavy()
            solving = asyncio.ensure_future(workers.solve(unwanted))
            await computing(workers, unwanted)
            solving.cancel()
            await asyncio.wait({solving})
            # The same process takes the next job: it was not killed, and it did not finish the unwanted one.
            assert len(eigenvalues(await workers.solve(order()))) == 8
            assert workers.pids == [pid]
            assert (counters.solves_cancelled, counters.solves_finished) == (1, 1)
            assert list((tmp_path / "spool").glob("front-*/*.record")) == []

    run(test)


def test_a_waiting_solve_can_be_cancelled(tmp_path: Path) -> None:
    async def test() -> None:
        async with pool(tmp_path) as (workers, counters):
            running, waiting, last = heavy(), order(w=2.0), order(w=3.0)
            first, second, third = (asyncio.ensure_future(workers.solve(o)) for o in (running, waiting, last))
            await computing(workers, running)
            assert [workers.progress(o).position for o in (waiting, last)] == [0, 1]
            assert counters.solves_waiting == 2
            second.cancel()
            await asyncio.wait({second})
            assert workers.progress(last).position == 0
            first.cancel()
            assert len(eigenvalues(await third)) == 8

    run(test)


def test_a_deadline_stops_the_solver_itself(tmp_path: Path) -> None:
    async def test() -> None:
        async with pool(tmp_path) as (workers, _):
            late = heavy()
            late.deadline = time.monotonic() + 1000.0
            solving = asyncio.ensure_future(workers.solve(late))
            await computing(workers, late)
            # Moved while it runs, into the past: the solver's own poll must notice, nobody cancels it.
            late.deadline = time.monotonic()
            workers.extend(late)
            with pytest.raises(CoreError) as caught:
                await solving
            assert caught.value.reason is Reason.DEADLINE
            assert len(eigenvalues(await workers.solve(order()))) == 8

    run(test)


def test_a_worker_deaf_to_cancellation_is_killed(tmp_path: Path) -> None:
    async def test() -> None:
        entry = "tests.process.test_pool:deaf_solve"
        async with pool(tmp_path, limits=PoolLimits(cancel_grace=0.3), entry=entry) as (workers, counters):
            (pid,) = workers.pids
            solving = asyncio.ensure_future(workers.solve(heavy()))
            await eventually(lambda: bool(workers.busy_pids))
            solving.cancel()
            await asyncio.wait({solving})
            await eventually(lambda: workers.pids not in ([], [pid]))
            assert not alive(pid)
            assert counters.worker_restarts == 1

    run(test)


def deaf_solve(problem, count, rtol, *, poll):
    """The real solver, never polling, and again and again."""
    from modewright_service.core.solve import solve

    while True:
        solve(problem, count, rtol)


def test_a_full_queue_refuses_and_says_when_to_come_back(tmp_path: Path) -> None:
    async def test() -> None:
        async with pool(tmp_path, limits=PoolLimits(queue=2)) as (workers, _):
            running = heavy()
            tasks = [asyncio.ensure_future(workers.solve(running))]
            await computing(workers, running)
            tasks += [asyncio.ensure_future(workers.solve(order(w=w))) for w in (2.0, 3.0)]
            await asyncio.sleep(0)
            with pytest.raises(CoreError) as caught:
                await workers.solve(order(w=4.0))
            assert caught.value.reason is Reason.QUEUE_FULL
            assert caught.value.metadata["limit"] == "2"
            assert float(caught.value.metadata["retry_after_seconds"]) > 0
            tasks[0].cancel()
            for task in tasks[1:]:
                assert len(eigenvalues(await task)) == 8

    run(test)


def test_errors_of_the_solver_come_through_as_they_are(tmp_path: Path) -> None:
    async def test() -> None:
        async with pool(tmp_path) as (workers, counters):
            with pytest.raises(InvalidProblem) as caught:
                await workers.solve(order(p="x - 0.5"))
            assert caught.value.reason is Reason.NEGATIVE_COEFFICIENT
            assert caught.value.violations[0].field == "layers[0].p"
            assert counters.solves_failed == 1

    run(test)


def test_a_defect_of_the_solver_is_internal_and_its_worker_goes_on(tmp_path: Path) -> None:
    async def test() -> None:
        async with pool(tmp_path) as (workers, _):
            wrong = order()
            wrong.count = "eight"  # type: ignore[assignment]
            (pid,) = workers.pids
            with pytest.raises(CoreError) as caught:
                await workers.solve(wrong)
            assert caught.value.reason is Reason.INTERNAL
            assert len(eigenvalues(await workers.solve(order()))) == 8
            assert workers.pids == [pid]

    run(test)


def test_workers_that_cannot_start_are_given_up_in_words(tmp_path: Path) -> None:
    async def test() -> None:
        counters = Counters()
        crew = hire(Settings(workers=1, spool=tmp_path / "spool"), "modewright_service.no_such_module:solve")
        workers = WorkerPool(crew.setup, crew.board, crew.spool, 1, counters, spawned=crew.spawned)
        workers.start()
        with pytest.raises(CoreError) as caught:
            await workers.solve(order())
        assert caught.value.reason is Reason.WORKER_LOST
        assert "started" in str(caught.value)
        with pytest.raises(CoreError, match="started"):
            await workers.solve(order())
        await workers.close()
        crew.board.close()
        crew.spool.close()

    run(test)


def test_closing_fails_what_runs_and_what_waits_and_ends_the_processes(tmp_path: Path) -> None:
    async def test() -> None:
        async with pool(tmp_path) as (workers, _):
            running = heavy()
            tasks = [asyncio.ensure_future(workers.solve(o)) for o in (running, order(w=2.0))]
            await computing(workers, running)
            (pid,) = workers.pids
            await workers.close()
            failures = await asyncio.gather(*tasks, return_exceptions=True)
            assert [getattr(f, "reason", f) for f in failures] == [Reason.SHUTTING_DOWN] * 2
            assert not alive(pid)
            with pytest.raises(CoreError) as caught:
                await workers.solve(order())
            assert caught.value.reason is Reason.SHUTTING_DOWN

    run(test)
