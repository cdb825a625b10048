"""A worker killed by SIGKILL in the midst of a solve: that call is tried again, and nobody else notices."""

from __future__ import annotations

import functools
import os
import signal
import threading
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import numpy as np
import pytest

import modewright
from modewright.retry import Retry, Schedule
from tests.process.harness import HEAVY, running, until

HEAT = {
    "layers": [{"start": 0.0, "end": 1.0, "p": 2.0}],
    "left": {"kind": "film", "film": 3.0},
    "right": {"kind": "neumann"},
}
OTHER = {**HEAT, "left": {"kind": "dirichlet"}}
X = np.linspace(0.0, 1.0, 101)


class Bystander:
    """Projects and reconstructs on a basis that is there, until told to stop."""

    def __init__(self, basis: modewright.Basis) -> None:
        self.basis = basis
        self.rounds = 0
        self.stop = threading.Event()

    def __call__(self) -> None:
        expected = self.basis.project(np.sin(X), x=X)
        while not self.stop.is_set():
            c = self.basis.project(np.sin(X), x=X)
            np.testing.assert_array_equal(c, expected)
            assert np.isfinite(self.basis.reconstruct(c, x=X)).all()
            self.rounds += 1


def test_the_killed_solve_is_tried_again_and_nobody_else_notices(tmp_path: Path) -> None:
    with (
        running(tmp_path) as live,
        modewright.connect(live.address) as service,
        ThreadPoolExecutor(2) as others,
    ):
        problem = modewright.Problem.from_dict(HEAT)
        bystander = Bystander(service.solve(modewright.Problem.from_dict(OTHER), modes=8))
        watching = others.submit(bystander)
        try:
            solving = others.submit(service.solve, problem, HEAVY)
            killed = live.mid_solve()
            before = bystander.rounds
            os.kill(killed, signal.SIGKILL)
            solved = solving.result()
            until(lambda: bystander.rounds > before or watching.done())
        finally:
            bystander.stop.set()
        watching.result()
        assert live.service.counters.solves_retried == live.service.counters.worker_restarts == 1
        assert live.service.pool.pids not in ([], [killed])
        again = service.solve(problem, modes=8)
        np.testing.assert_array_equal(solved.eigenvalues[:8], again.eigenvalues)


def test_a_solve_that_kills_every_worker_is_unavailable(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    # The client's usual five attempts would only kill more of them.
    monkeypatch.setattr("modewright.client.Retry", functools.partial(Retry, schedule=Schedule(attempts=2)))
    with running(tmp_path) as live, modewright.connect(live.address) as service:
        problem = modewright.Problem.from_dict(HEAT)
        stop = threading.Event()

        def murder() -> None:
            while not stop.wait(0.01):
                for pid in live.service.pool.busy_pids:
                    os.kill(pid, signal.SIGKILL)

        murderer = threading.Thread(target=murder)
        murderer.start()
        try:
            with pytest.raises(modewright.Unavailable) as caught:
                service.solve(problem, modes=HEAVY)
        finally:
            stop.set()
            murderer.join()
        assert caught.value.reason == "WORKER_LOST"
        assert live.service.counters.worker_restarts == 4
        assert service.solve(problem, modes=8).count == 8
