"""Services to test: inside this process, where counters and workers can be seen, or as the real command."""

from __future__ import annotations

import asyncio
import contextlib
import json
import os
import select
import socket
import subprocess
import sys
import threading
import time
from collections.abc import Callable, Coroutine, Iterator
from concurrent.futures import Future
from pathlib import Path
from typing import Any, TypeVar

import grpc

from modewright.v1 import basis_pb2, problem_pb2, solve_pb2
from modewright.v1.eigenbasis_service_pb2_grpc import EigenbasisServiceStub
from modewright_service.process.crew import hire
from modewright_service.process.lifecycle import Service
from modewright_service.process.settings import Settings

T = TypeVar("T")

# No test waits this long unless something hangs.
PATIENCE = 120.0
NO_RETRIES = [("grpc.enable_retries", 0), ("grpc.max_receive_message_length", 16 * 1024 * 1024)]


class Running:
    """A service on a loop of its own in a thread of this process, with a channel to it.

    credentials: of the channel, for a service with TLS. entry: "module:function" that workers solve with.
    """

    def __init__(
        self, folder: Path, credentials: grpc.ChannelCredentials | None = None, **settings: Any
    ) -> None:
        listen = settings.pop("listen", f"unix:{folder / 'service.sock'}")
        self._entry = settings.pop("entry", "")
        given = {"workers": 1, "worker_nice": 0, "drain_seconds": 0.0, "grace_seconds": 5.0, **settings}
        self.settings = Settings(listen=listen, spool=folder / "spool", **given)
        self._loop = asyncio.new_event_loop()
        self._thread = threading.Thread(target=self._loop.run_forever)
        self._thread.start()
        try:
            self.service: Service = self.run(self._create())
            self.address = self.run(self.service.start())
            if credentials is None:
                self.channel = grpc.insecure_channel(self.address, NO_RETRIES)
            else:
                self.channel = grpc.secure_channel(self.address, credentials, NO_RETRIES)
            self.stub = EigenbasisServiceStub(self.channel)
            until(lambda: len(self.service.pool.pids) == self.settings.slots)
        except BaseException:
            self.close()
            raise

    async def _create(self) -> Service:
        self._crew = hire(self.settings, self._entry)
        return Service(self.settings, self._crew)

    def mid_solve(self) -> int:
        """Wait until the worker of the first slot is in the midst of a solve; its process id."""
        found: list[int] = []

        def polling() -> bool:
            found[:] = self.service.pool.busy_pids
            return bool(found) and self._crew.board.steps(0) > 0

        until(polling)
        return found[0]

    def run(self, work: Coroutine[Any, Any, T]) -> T:
        """The outcome of a coroutine on the service's loop."""
        return asyncio.run_coroutine_threadsafe(work, self._loop).result(PATIENCE)

    def submit(self, work: Coroutine[Any, Any, T]) -> Future[T]:
        """A coroutine begun on the service's loop."""
        return asyncio.run_coroutine_threadsafe(work, self._loop)

    def close(self) -> None:
        if hasattr(self, "channel"):  # its start did not fail
            self.channel.close()
        try:
            if hasattr(self, "service"):
                self.run(self.service.stop(0.0))
        finally:
            self._loop.call_soon_threadsafe(self._loop.stop)
            self._thread.join()
            self._loop.close()


@contextlib.contextmanager
def running(
    folder: Path, credentials: grpc.ChannelCredentials | None = None, **settings: Any
) -> Iterator[Running]:
    """A service in this process."""
    service = Running(folder, credentials, **settings)
    try:
        yield service
    finally:
        service.close()


class Child:
    """The service as the command that people run, embedded, with its end of the ready line."""

    def __init__(self, folder: Path, *arguments: str) -> None:
        folder.mkdir(parents=True, exist_ok=True)
        self.life, theirs = socket.socketpair()
        command = [
            sys.executable,
            "-m",
            "modewright_service",
            "--embedded",
            "--ready-fd",
            str(theirs.fileno()),
        ]
        command += ["--socket", str(folder / "s.sock"), "--spool", str(folder / "spool")]
        command += ["--workers", "1", "--worker-nice", "0"]
        with theirs, (folder / "log").open("wb") as log:
            self.process = subprocess.Popen(
                [*command, *arguments], pass_fds=[theirs.fileno()], stdout=log, stderr=log
            )
        readable, _, _ = select.select([self.life], [], [], PATIENCE)
        assert readable, (folder / "log").read_text()
        line = self.life.recv(4096)
        assert line, (folder / "log").read_text()
        self.ready = json.loads(line)
        self.channel = grpc.insecure_channel(self.ready["address"], NO_RETRIES)
        self.stub = EigenbasisServiceStub(self.channel)

    def close(self) -> None:
        self.channel.close()
        self.life.close()
        self.process.wait(PATIENCE)


@contextlib.contextmanager
def child(folder: Path, *arguments: str) -> Iterator[Child]:
    """The embedded command, ended by the end of its parent's line."""
    service = Child(folder, *arguments)
    try:
        yield service
    finally:
        service.close()


def until(condition: Callable[[], bool]) -> None:
    """Wait for something that another thread or process will bring about."""
    deadline = time.monotonic() + PATIENCE
    while not condition():
        assert time.monotonic() < deadline, "waited in vain"
        time.sleep(0.01)


def alive(pid: int) -> bool:
    """Whether a process exists and is no zombie."""
    try:
        return Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()[0] != "Z"
    except OSError:
        return False


def kill(pid: int, signal: int) -> None:
    os.kill(pid, signal)


# ---- problems ----


def constant(value: float) -> problem_pb2.Coefficient:
    return problem_pb2.Coefficient(constant=value)


def unit_problem(w: float = 1.0) -> problem_pb2.Problem:
    """-u'' = lambda w u on (0, 1), u = 0 at both ends: lambda_n = ((n + 1) pi)^2 / w."""
    return problem_pb2.Problem(
        layers=[problem_pb2.Layer(start=0.0, end=1.0, w=constant(w))],
        left=problem_pb2.EndCondition(kind=problem_pb2.END_KIND_DIRICHLET),
        right=problem_pb2.EndCondition(kind=problem_pb2.END_KIND_DIRICHLET),
    )


def modes(count: int, rtol: float | None = None) -> basis_pb2.BasisSpecification:
    return basis_pb2.BasisSpecification(modes=count, rtol=rtol)


def solve_request(w: float = 1.0, count: int = 8) -> solve_pb2.SolveRequest:
    return solve_pb2.SolveRequest(problem=unit_problem(w), specification=modes(count))


# Takes about a second in a worker: long enough to be interrupted, short enough to be finished.
HEAVY = 512


def heavy_request(w: float = 1.0) -> solve_pb2.SolveRequest:
    """A solve of about a second; another `w` is another problem."""
    return solve_request(w, HEAVY)
