"""Starting a worker process, before or while the front serves.

Kept apart from the pool and free of heavy imports, so that `__main__` can start the workers first and import
gRPC and NumPy while they import theirs.
"""

from __future__ import annotations

import os
import socket
import subprocess
import sys
from dataclasses import dataclass
from pathlib import Path
from typing import Final

__all__ = ["SINGLE_THREADED", "Spawned", "WorkerSetup", "spawn"]

# Each worker is one thread's worth of load: parallelism comes from the number of workers. Read by BLAS
# libraries when they are loaded, hence set in the environment and not in the program.
SINGLE_THREADED: Final = dict.fromkeys(
    (
        "OMP_NUM_THREADS",
        "OPENBLAS_NUM_THREADS",
        "MKL_NUM_THREADS",
        "BLIS_NUM_THREADS",
        "VECLIB_MAXIMUM_THREADS",
        "NUMEXPR_NUM_THREADS",
        "NUMBA_NUM_THREADS",
    ),
    "1",
)


@dataclass(frozen=True)
class WorkerSetup:
    """What every worker of a pool has in common.

    board: file of the slot board. nice: added to the front's niceness. entry: "module:function" of the
        solver.
    """

    board: Path
    nice: int = 10
    entry: str = ""


@dataclass(eq=False)
class Spawned:
    """A started worker process and the front's end of its socket."""

    slot: int
    process: subprocess.Popen[bytes]
    sock: socket.socket


def spawn(setup: WorkerSetup, slot: int) -> Spawned:
    """Start the worker of `slot`. Raises OSError when the system cannot."""
    ours, theirs = socket.socketpair()
    try:
        # The worker imports from exactly where the front does, whatever put those folders there.
        paths = [path for path in sys.path if path]
        environment = {**os.environ, **SINGLE_THREADED, "PYTHONPATH": os.pathsep.join(paths)}
        # -P: the worker's working folder must not shadow modules; it is in PYTHONPATH if the front uses it.
        command = [sys.executable, "-P", "-m", "modewright_service.process.worker"]
        command += ["--fd", str(theirs.fileno()), "--board", str(setup.board), "--slot", str(slot)]
        command += ["--parent", str(os.getpid()), "--nice", str(setup.nice)]
        if setup.entry:
            command += ["--entry", setup.entry]
        process = subprocess.Popen(
            command,
            env=environment,
            pass_fds=[theirs.fileno()],
            stdin=subprocess.DEVNULL,
            stdout=subprocess.DEVNULL,
        )
    except OSError:
        ours.close()
        raise
    finally:
        theirs.close()
    ours.setblocking(False)
    return Spawned(slot, process, ours)
