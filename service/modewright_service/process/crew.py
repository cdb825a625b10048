"""The workers of a service before it has begun: hired first of all, while the front still imports."""

from __future__ import annotations

from dataclasses import dataclass, field

from modewright_service.process.settings import Settings, SettingsError
from modewright_service.process.slots import SlotBoard
from modewright_service.process.spawn import Spawned, WorkerSetup, spawn
from modewright_service.process.spool import Spool

__all__ = ["Crew", "hire"]


@dataclass(eq=False)
class Crew:
    """Their spool, their board, and the processes started so far."""

    setup: WorkerSetup
    spool: Spool
    board: SlotBoard
    slots: int
    spawned: list[Spawned] = field(default_factory=list)


def hire(settings: Settings, entry: str = "") -> Crew:
    """Make the spool and the board, and start every worker.

    entry: "module:function" to solve with; empty for the solver of the core.
    Raises SettingsError when the spool cannot be used, OSError when no process can be started.
    """
    try:
        spool = Spool(settings.spool)
    except OSError as error:
        raise SettingsError(f"spool: {settings.spool}: {error}") from error
    path = spool.path("board")
    board = SlotBoard.create(path, settings.slots)
    setup = WorkerSetup(path, settings.worker_nice, entry)
    return Crew(setup, spool, board, settings.slots, [spawn(setup, slot) for slot in range(settings.slots)])
