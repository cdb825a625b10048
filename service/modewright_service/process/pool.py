"""Supervised workers: one process a slot, respawned when it dies, with a bounded queue before them.

Everything here runs on the event loop's thread, in plain functions that cannot be interrupted half-way: a
frame from a worker, a new order, a cancellation and the death of a worker are each handled in one step, and
`_dispatch` then pairs waiting tickets with idle workers.

A worker that dies in a solve (out of memory, killed) takes nothing else along: its slot is started anew and
the solve is tried once more at the head of the queue; if that attempt dies as well, its callers get
WORKER_LOST. A worker that does not heed a cancellation within a grace period is killed.
"""

from __future__ import annotations

import asyncio
import contextlib
import itertools
import logging
import subprocess
from collections import deque
from collections.abc import Callable, Iterable
from dataclasses import dataclass, field
from pathlib import Path
from typing import Final

from modewright_service.core.errors import CoreError, Interrupted, LimitExceeded, Reason, number_text
from modewright_service.process import frames
from modewright_service.process.slots import SlotBoard
from modewright_service.process.spawn import Spawned, WorkerSetup, spawn
from modewright_service.process.spool import Spool
from modewright_service.store.counters import Counters
from modewright_service.store.orders import Computed, Order, Progress, damaged

__all__ = ["PoolLimits", "WorkerPool"]

_log = logging.getLogger(__name__)

# The first attempt and one more: a solve that kills two workers would kill a third.
_ATTEMPTS: Final = 2
# A crash loop at start (a broken installation, no memory) must not eat the machine.
_BACKOFF: Final = (0.1, 0.5, 2.0, 5.0, 15.0)
_BROKEN_AFTER: Final = 3
_REAP_SECONDS: Final = 5.0


@dataclass(frozen=True)
class PoolLimits:
    """queue: solves that may wait for a worker. cancel_grace: seconds a worker has to heed a cancellation.
    start: seconds in which a worker must have imported the solver.
    """

    queue: int = 256
    cancel_grace: float = 10.0
    start: float = 120.0


_DEFAULT_LIMITS: Final = PoolLimits()


@dataclass(eq=False)
class _Ticket:
    """One solve on its way through the pool."""

    number: int
    order: Order
    payload: bytes
    path: Path
    future: asyncio.Future[Computed]
    attempts: int = 0
    worker: _Worker | None = None


@dataclass(eq=False)
class _Worker:
    """The front's view of one process."""

    spawned: Spawned
    writer: asyncio.StreamWriter
    ready: bool = False
    ticket: _Ticket | None = None
    busy: bool = field(default=False)
    """Also true while it winds down a cancelled ticket."""


class WorkerPool:
    """Solves orders in `slots` worker processes.

    spawned: workers started ahead of time, by slot; the pool starts the rest. on_change is called whenever
    the pool becomes able or unable to solve (`usable`).
    """

    def __init__(
        self,
        setup: WorkerSetup,
        board: SlotBoard,
        spool: Spool,
        slots: int,
        counters: Counters,
        limits: PoolLimits = _DEFAULT_LIMITS,
        spawned: Iterable[Spawned] = (),
        on_change: Callable[[bool], None] = lambda _: None,
    ) -> None:
        self._setup = setup
        self._board = board
        self._spool = spool
        self._slots = slots
        self._counters = counters
        self._limits = limits
        self._spawned = {worker.slot: worker for worker in spawned}
        self._on_change = on_change
        self._numbers = itertools.count(1)
        self._waiting: deque[_Ticket] = deque()
        self._workers: dict[int, _Worker] = {}
        self._tasks: list[asyncio.Task[None]] = []
        self._failed_starts = [0] * slots
        self._mean_seconds = 0.0
        self._closing = False

    # ---- what callers see ----

    def start(self) -> None:
        """Begin to supervise; workers become ready one by one afterwards."""
        self._tasks = [asyncio.create_task(self._supervise(slot)) for slot in range(self._slots)]

    @property
    def usable(self) -> bool:
        """Whether some worker is ready."""
        return any(worker.ready for worker in self._workers.values())

    @property
    def pids(self) -> list[int]:
        """Process ids of the workers that are ready, by slot."""
        return [w.spawned.process.pid for _, w in sorted(self._workers.items()) if w.ready]

    @property
    def busy_pids(self) -> list[int]:
        """Process ids of the workers that solve at this moment, by slot."""
        return [w.spawned.process.pid for _, w in sorted(self._workers.items()) if w.ticket is not None]

    async def solve(self, order: Order) -> Computed:
        """See `modewright_service.store.orders.Solver`."""
        self._refuse()
        number = next(self._numbers)
        path = self._spool.path(f"{number}.record")
        job = frames.Job(number, order.problem, order.count, order.rtol, str(path))
        future: asyncio.Future[Computed] = asyncio.get_running_loop().create_future()
        ticket = _Ticket(number, order, frames.encode(job), path, future)
        self._waiting.append(ticket)
        self._dispatch()
        try:
            return await future
        except asyncio.CancelledError:
            self._abandon(ticket)
            raise

    def extend(self, order: Order) -> None:
        """See `modewright_service.store.orders.Solver`."""
        for slot, worker in self._workers.items():
            if worker.ticket is not None and worker.ticket.order is order:
                self._board.extend(slot, order.deadline)

    def progress(self, order: Order) -> Progress:
        """See `modewright_service.store.orders.Solver`."""
        for slot, worker in self._workers.items():
            if worker.ticket is not None and worker.ticket.order is order:
                return Progress(computing=True, steps=self._board.steps(slot))
        for position, ticket in enumerate(self._waiting):
            if ticket.order is order:
                return Progress(computing=False, position=position, starting=not self.usable)
        # Computed; the record is being read.
        return Progress(computing=True, steps=order.steps)

    async def close(self) -> None:
        """Stop solving: running and waiting solves fail with SHUTTING_DOWN, the processes end."""
        self._closing = True
        stopped = CoreError(
            Reason.SHUTTING_DOWN, "the service is shutting down", metadata={"retry_after_seconds": "1.0"}
        )
        for ticket in [*self._waiting, *(w.ticket for w in self._workers.values() if w.ticket)]:
            _fail(ticket, stopped)
        self._waiting.clear()
        for slot, worker in self._workers.items():
            self._board.cancel(slot)
            self._dismiss(worker)
        unattended, self._spawned = list(self._spawned.values()), {}
        for spawned in unattended:
            spawned.sock.close()
            spawned.process.kill()
            await _reap(spawned.process)
        # Supervisors that wait for a worker see it end; those that wait to start one are cancelled.
        _, pending = (
            await asyncio.wait(self._tasks, timeout=2 * _REAP_SECONDS) if self._tasks else (set(), set())
        )
        for task in pending:
            task.cancel()
        for result in await asyncio.gather(*self._tasks, return_exceptions=True):
            if isinstance(result, Exception):
                _log.error("a supervisor failed", exc_info=result)
        self._count()

    def _dismiss(self, worker: _Worker) -> None:
        """Have a worker end: by the end of its socket, or at once when it has nothing that it could lose."""
        worker.writer.close()
        if not worker.ready:
            # Still importing the solver: it would look at its socket only after that.
            worker.spawned.process.kill()

    # ---- the queue ----

    def _refuse(self) -> None:
        """Raise what a new order cannot be accepted for."""
        if self._closing:
            raise CoreError(
                Reason.SHUTTING_DOWN, "the service is shutting down", metadata={"retry_after_seconds": "1.0"}
            )
        if not self.usable and min(self._failed_starts) >= _BROKEN_AFTER:
            raise self._broken()
        idle = any(worker.ready and not worker.busy for worker in self._workers.values())
        if not idle and len(self._waiting) >= self._limits.queue:
            # When about one place should be free, by the solves seen lately; a guess is better than none.
            wait = min(max(self._mean_seconds / self._slots, 0.1), 30.0)
            raise LimitExceeded(
                Reason.QUEUE_FULL,
                f"{len(self._waiting)} solves already wait for a worker (the limit is {self._limits.queue})",
                metadata={
                    "waiting": str(len(self._waiting)),
                    "limit": str(self._limits.queue),
                    "retry_after_seconds": number_text(wait),
                },
            )

    def _broken(self) -> CoreError:
        return CoreError(
            Reason.WORKER_LOST,
            "no worker process can be started; the log of the service says why",
            metadata={"retry_after_seconds": "5.0"},
        )

    def _dispatch(self) -> None:
        for slot, worker in self._workers.items():
            if not self._waiting:
                break
            if worker.ready and not worker.busy:
                self._begin(slot, worker, self._waiting.popleft())
        self._count()

    def _begin(self, slot: int, worker: _Worker, ticket: _Ticket) -> None:
        ticket.attempts += 1
        ticket.worker = worker
        worker.ticket = ticket
        worker.busy = True
        self._board.arm(slot, ticket.order.deadline)
        worker.writer.write(ticket.payload)
        if ticket.attempts == 1:
            self._counters.solves_started += 1

    def _abandon(self, ticket: _Ticket) -> None:
        """Nobody waits for this ticket any more."""
        worker = ticket.worker
        if worker is None:
            with contextlib.suppress(ValueError):
                self._waiting.remove(ticket)
            self._counters.solves_cancelled += 1
            self._count()
            return
        if worker.ticket is not ticket:  # it ended in the meantime
            return
        worker.ticket = None
        self._counters.solves_cancelled += 1
        self._board.cancel(worker.spawned.slot)
        asyncio.get_running_loop().call_later(self._limits.cancel_grace, self._enforce, worker, ticket.number)
        self._count()

    def _enforce(self, worker: _Worker, number: int) -> None:
        """Kill a worker that still runs the abandoned job `number` after the grace period."""
        if self._workers.get(worker.spawned.slot) is worker and worker.busy and worker.ticket is None:
            _log.warning(
                "killed a worker that did not heed a cancellation",
                extra={"slot": worker.spawned.slot, "pid": worker.spawned.process.pid, "job": number},
            )
            worker.spawned.process.kill()

    # ---- one slot ----

    async def _supervise(self, slot: int) -> None:
        while not self._closing:
            spawned = self._spawned.pop(slot, None)
            if spawned is None:
                try:
                    spawned = spawn(self._setup, slot)
                except OSError:
                    _log.exception("cannot start a worker", extra={"slot": slot})
            if spawned is not None and await self._attend(spawned):
                self._failed_starts[slot] = 0
            else:
                self._failed_starts[slot] += 1
            if self._closing:
                return
            self._counters.worker_restarts += 1
            if min(self._failed_starts) >= _BROKEN_AFTER and not self.usable:
                while self._waiting:
                    _fail(self._waiting.popleft(), self._broken())
            failures = self._failed_starts[slot]
            if failures:
                await asyncio.sleep(_BACKOFF[min(failures, len(_BACKOFF)) - 1])

    async def _attend(self, spawned: Spawned) -> bool:
        """Serve one process until it ends. Returns whether it ever became ready."""
        reader, writer = await asyncio.open_connection(sock=spawned.sock)
        worker = _Worker(spawned, writer)
        self._workers[spawned.slot] = worker
        if self._closing:  # begun while it connected
            self._dismiss(worker)
        try:
            async with asyncio.timeout(self._limits.start) as starting:
                while True:
                    message = await frames.read_frame(reader)
                    starting.reschedule(None)
                    self._handle(worker, message)
        except (EOFError, TimeoutError):
            pass
        finally:
            del self._workers[spawned.slot]
            writer.close()
            status = await _reap(spawned.process)
        if not self._closing:
            _log.warning(
                "a worker ended",
                extra={
                    "slot": spawned.slot,
                    "pid": spawned.process.pid,
                    "status": status,
                    "ready": worker.ready,
                },
            )
            self._requeue(worker)
        if not self.usable:
            self._on_change(False)
        return worker.ready

    def _requeue(self, worker: _Worker) -> None:
        ticket, worker.ticket = worker.ticket, None
        if ticket is not None and not ticket.future.done():
            ticket.worker = None
            if ticket.attempts < _ATTEMPTS:
                self._counters.solves_retried += 1
                self._waiting.appendleft(ticket)
            else:
                self._counters.solves_failed += 1
                _fail(
                    ticket,
                    CoreError(
                        Reason.WORKER_LOST,
                        f"the process that solved this ended unexpectedly, {ticket.attempts} times",
                        metadata={"attempts": str(ticket.attempts), "retry_after_seconds": "1.0"},
                    ),
                )
        self._dispatch()

    def _handle(self, worker: _Worker, message: frames.FromWorker) -> None:
        if isinstance(message, frames.Ready):
            was_usable = self.usable
            worker.ready = True
            if not was_usable:
                self._on_change(True)
            self._dispatch()
            return
        ticket, worker.ticket = worker.ticket, None
        worker.busy = False
        if ticket is None:  # abandoned: whatever came out of it is dropped
            if isinstance(message, frames.Finished):
                Path(message.path).unlink(missing_ok=True)
        elif not ticket.future.done():
            self._settle(ticket, worker.spawned.slot, message)
        self._dispatch()

    def _settle(self, ticket: _Ticket, slot: int, message: frames.FromWorker) -> None:
        ticket.order.steps = self._board.steps(slot)
        match message:
            case frames.Finished():
                try:
                    data = self._spool.take(Path(message.path))
                except (OSError, ValueError) as error:  # ValueError: an empty file cannot be mapped
                    self._counters.records_damaged += 1
                    _log.error("a record cannot be read from the spool", exc_info=error)
                    _fail(ticket, damaged())
                    return
                self._counters.solves_finished += 1
                self._counters.solve_seconds.add(message.seconds)
                weight = 0.2 if self._mean_seconds else 1.0
                self._mean_seconds += weight * (message.seconds - self._mean_seconds)
                ticket.future.set_result(Computed(memoryview(data), message.seconds))
            case frames.Failed(error=CoreError() as error):
                if isinstance(error, Interrupted):
                    self._counters.solves_cancelled += 1
                else:
                    self._counters.solves_failed += 1
                ticket.future.set_exception(error)
            case frames.Crashed():
                self._counters.solves_failed += 1
                _log.error("the solver failed", extra={"traceback": message.traceback})
                _fail(
                    ticket,
                    CoreError(
                        Reason.INTERNAL, "the solver failed unexpectedly; the log of the service says why"
                    ),
                )
            case _:
                _fail(ticket, CoreError(Reason.INTERNAL, "a worker sent something unexpected"))

    def _count(self) -> None:
        workers = self._workers.values()
        self._counters.solves_waiting = len(self._waiting)
        self._counters.solves_running = sum(worker.busy for worker in workers)
        self._counters.workers_ready = sum(worker.ready for worker in workers)


def _fail(ticket: _Ticket, error: CoreError) -> None:
    if not ticket.future.done():
        ticket.future.set_exception(error)


async def _reap(process: subprocess.Popen[bytes]) -> int:
    """The exit status of a process whose socket has closed; one that lingers is killed."""

    def wait() -> int:
        try:
            return process.wait(_REAP_SECONDS)
        except subprocess.TimeoutExpired:
            process.kill()
            return process.wait()

    return await asyncio.to_thread(wait)
