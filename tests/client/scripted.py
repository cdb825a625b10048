"""A real gRPC server that follows a script: it fails in the way and in the order that a test asks for."""

from __future__ import annotations

import threading
from collections.abc import Callable, Iterator
from concurrent import futures
from contextlib import contextmanager
from dataclasses import dataclass, field
from typing import Any

import grpc
from google.rpc import error_details_pb2, status_pb2

from modewright.v1 import basis_pb2, eigenbasis_service_pb2_grpc, solve_pb2
from modewright.v1 import transforms_pb2 as pb

KEY = "ab" * 32


@dataclass
class Fail:
    """One failed call; with a reason it carries the details that the service sends."""

    code: grpc.StatusCode
    text: str = "as the script says"
    reason: str = ""


Step = Fail | Callable[[Any, grpc.ServicerContext], Any]


@dataclass
class Script:
    """The steps still to come (an answer once they are used up) and what arrived."""

    steps: list[Step] = field(default_factory=list)
    requests: list[Any] = field(default_factory=list)
    metadata: list[dict[str, str]] = field(default_factory=list)
    time_left: list[float] = field(default_factory=list)
    cancelled: threading.Event = field(default_factory=threading.Event)
    lock: threading.Lock = field(default_factory=threading.Lock)

    def step(self, request: Any, context: grpc.ServicerContext) -> Any:
        """Follows the next step: what it returns, or None where the ordinary answer is due."""
        with self.lock:
            self.requests.append(request)
            self.metadata.append(dict(context.invocation_metadata()))
            self.time_left.append(context.time_remaining())
            step = self.steps.pop(0) if self.steps else None
        if isinstance(step, Fail):
            if step.reason:
                status = status_pb2.Status(code=step.code.value[0], message=step.text)
                info = error_details_pb2.ErrorInfo(reason=step.reason, domain="modewright")
                status.details.add().Pack(info)
                context.set_trailing_metadata((("grpc-status-details-bin", status.SerializeToString()),))
            context.abort(step.code, step.text)
        return step(request, context) if step is not None else None


def answer(modes: int, **changes: Any) -> solve_pb2.SolveResponse:
    """An answer of Solve with made-up eigenvalues 1, 2, ...; `changes` replace its fields."""
    values = [float(n + 1) for n in range(modes)]
    fields: dict[str, Any] = {
        "basis_key": KEY,
        "problem_digest": "cd" * 32,
        "algorithm_version": "1",
        "api_version": "1.0",
        "specification": basis_pb2.ResolvedSpecification(modes=modes, rung=8, rtol=1e-9),
        "eigenvalues": values,
        "lower": values,
        "upper": values,
        "zeros": range(modes),
        "groups": range(modes),
        "confirmed": [basis_pb2.COUNT_CONFIRMATION_COMPARISON] * modes,
        "tolerance_met": [True] * modes,
        "scale": 1.0,
    }
    return solve_pb2.SolveResponse(**{**fields, **changes})


class _Servicer(eigenbasis_service_pb2_grpc.EigenbasisServiceServicer):
    def __init__(self, script: Script) -> None:
        self._script = script

    def Solve(self, request: solve_pb2.SolveRequest, context: grpc.ServicerContext) -> Any:
        return self._script.step(request, context) or answer(request.specification.modes)

    def WatchSolve(
        self, request: solve_pb2.WatchSolveRequest, context: grpc.ServicerContext
    ) -> Iterator[Any]:
        progress = solve_pb2.SolveProgress(
            stage=solve_pb2.SOLVE_STAGE_COMPUTING, elapsed_seconds=0.5, steps=3
        )
        context.add_callback(self._script.cancelled.set)
        yield solve_pb2.WatchSolveResponse(progress=progress)
        self._script.step(request, context)
        yield solve_pb2.WatchSolveResponse(answer=answer(request.specification.modes))

    def FetchBasis(
        self, request: solve_pb2.FetchBasisRequest, context: grpc.ServicerContext
    ) -> Iterator[Any]:
        yield from self._script.step(request, context) or ()

    def Project(self, request: pb.ProjectRequest, context: grpc.ServicerContext) -> Any:
        return self._script.step(request, context)

    def Reconstruct(self, request: pb.ReconstructRequest, context: grpc.ServicerContext) -> Any:
        return self._script.step(request, context)


@contextmanager
def serving(
    script: Script, credentials: grpc.ServerCredentials | None = None, port: int = 0
) -> Iterator[str]:
    """The address of a server that follows `script`."""
    server = grpc.server(
        futures.ThreadPoolExecutor(max_workers=4),
        options=[("grpc.max_receive_message_length", 8 * 1024 * 1024)],
    )
    eigenbasis_service_pb2_grpc.add_EigenbasisServiceServicer_to_server(_Servicer(script), server)
    place = f"localhost:{port}"
    if credentials is None:
        port = server.add_insecure_port(place)
    else:
        port = server.add_secure_port(place, credentials)
    server.start()
    try:
        yield f"localhost:{port}"
    finally:
        server.stop(grace=None).wait()
