"""What a servicer raises by mistake stays in the log; callers get INTERNAL and an id that leads there."""

from __future__ import annotations

import asyncio
import logging
from pathlib import Path

import grpc
import pytest
from google.rpc.error_details_pb2 import ErrorInfo
from google.rpc.status_pb2 import Status

from modewright.v1 import solve_pb2
from modewright.v1.eigenbasis_service_pb2_grpc import (
    EigenbasisServiceServicer,
    EigenbasisServiceStub,
    add_EigenbasisServiceServicer_to_server,
)
from modewright_service.rpc.interceptors import CallGuard
from modewright_service.store.counters import Counters


class Faulty(EigenbasisServiceServicer):
    """A servicer with a defect in a unary and in a streaming call."""

    async def Solve(self, request, context):
        raise ZeroDivisionError("secret detail")

    async def WatchSolve(self, request, context):
        yield solve_pb2.WatchSolveResponse()
        raise KeyError("secret detail")


async def _failures(address: str, counters: Counters) -> list[grpc.aio.AioRpcError]:
    server = grpc.aio.server(interceptors=[CallGuard(counters, 1 << 20)])
    add_EigenbasisServiceServicer_to_server(Faulty(), server)
    server.add_insecure_port(address)
    await server.start()
    found = []
    async with grpc.aio.insecure_channel(address) as channel:
        stub = EigenbasisServiceStub(channel)
        try:
            await stub.Solve(solve_pb2.SolveRequest())
        except grpc.aio.AioRpcError as error:
            found.append(error)
        try:
            async for _ in stub.WatchSolve(solve_pb2.WatchSolveRequest()):
                pass
        except grpc.aio.AioRpcError as error:
            found.append(error)
    await server.stop(None)
    return found


def test_a_defect_becomes_internal_with_an_incident(tmp_path: Path, caplog: pytest.LogCaptureFixture) -> None:
    counters = Counters()
    logger = logging.getLogger("modewright_service")
    propagate, logger.propagate = logger.propagate, True
    try:
        failures = asyncio.run(_failures(f"unix:{tmp_path / 's'}", counters))
    finally:
        logger.propagate = propagate
    assert len(failures) == 2
    logged = {record.__dict__["incident"]: record for record in caplog.records}
    for error in failures:
        assert error.code() is grpc.StatusCode.INTERNAL
        assert "secret" not in str(error)
        trailers = dict(error.trailing_metadata())
        info = ErrorInfo()
        assert Status.FromString(trailers["grpc-status-details-bin"]).details[0].Unpack(info)
        assert info.reason == "INTERNAL"
        record = logged[info.metadata["incident"]]
        assert record.exc_info is not None
        assert "secret detail" in str(record.exc_info[1])
    assert counters.calls == {("Solve", "INTERNAL"): 1, ("WatchSolve", "INTERNAL"): 1}
    assert counters.calls_in_flight == 0
