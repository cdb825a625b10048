"""The servicer of EigenbasisService: checking, solving, watching, fetching, and the transforms of fields."""

# ruff: noqa: N802 - the names are the contract's

from __future__ import annotations

import asyncio
import time
from collections.abc import AsyncIterator
from typing import Final

from modewright.v1 import (
    eigenbasis_service_pb2,
    eigenbasis_service_pb2_grpc,
    solve_pb2,
    transforms_pb2,
)
from modewright_service.core import digest
from modewright_service.core.errors import InvalidRequest, Reason
from modewright_service.rpc import convert, fields
from modewright_service.rpc.desk import Context, Desk
from modewright_service.rpc.estimate import estimate
from modewright_service.store.library import Found, Wanted

__all__ = ["EigenbasisServicer", "drafted_methods"]

_CHUNK: Final = 1024 * 1024
_INTERVAL_DEFAULT: Final = 0.2
_INTERVAL_RANGE: Final = (0.02, 60.0)


class EigenbasisServicer(eigenbasis_service_pb2_grpc.EigenbasisServiceServicer):
    """Each method validates, obtains the basis, does its work in a thread where it is heavy, and answers."""

    def __init__(self, desk: Desk) -> None:
        self._desk = desk

    async def Check(self, request: solve_pb2.CheckRequest, context: Context) -> solve_pb2.CheckResponse:
        """Validate and resolve a problem, forecast its cost; solves nothing."""
        desk = self._desk
        wanted = await desk.wanted(
            request.problem, request.specification, default_modes=convert.DEFAULT_MODES
        )
        kept = desk.library.find(wanted)
        forecast = await desk.run_stoppable(
            lambda poll: estimate(wanted.problem, wanted.rung, poll), desk.deadline(context)
        )
        return solve_pb2.CheckResponse(
            problem_digest=wanted.problem_digest,
            basis_key=kept.key if kept else wanted.basis_key,
            algorithm_version=digest.ALGORITHM_VERSION,
            api_version=convert.API_VERSION,
            specification=convert.resolved_specification(
                wanted.modes,
                kept.record.count if kept else wanted.rung,
                kept.record.rtol if kept else wanted.rtol,
            ),
            ends=convert.ends_message(wanted.problem, forecast.end_classes),
            scale=forecast.scale,
            cached=kept is not None,
            cost=solve_pb2.CostEstimate(
                pieces=forecast.pieces, unknowns=forecast.unknowns, seconds=forecast.seconds
            ),
            remarks=forecast.remarks,
        )

    async def Solve(self, request: solve_pb2.SolveRequest, context: Context) -> solve_pb2.SolveResponse:
        """The lowest eigenvalues with bounds, computed or from the store."""
        wanted = await self._desk.wanted(request.problem, request.specification)
        found = await self._desk.library.obtain(wanted, self._desk.deadline(context))
        return self._answer(wanted, found)

    async def WatchSolve(
        self, request: solve_pb2.WatchSolveRequest, context: Context
    ) -> AsyncIterator[solve_pb2.WatchSolveResponse]:
        """Progress, then the answer of Solve."""
        arrived = time.monotonic()
        interval = request.interval_seconds or _INTERVAL_DEFAULT
        least, most = _INTERVAL_RANGE
        if not least <= interval <= most:
            text = f"must be 0 or between {least:g} and {most:g}"
            raise InvalidRequest.at(Reason.BAD_REQUEST, "interval_seconds", text, interval)
        wanted = await self._desk.wanted(request.problem, request.specification)
        deadline = self._desk.deadline(context)
        solving = asyncio.ensure_future(self._desk.library.obtain(wanted, deadline))
        try:
            while not solving.done():
                await asyncio.wait({solving}, timeout=interval)
                if not solving.done():
                    yield self._progress(wanted, time.monotonic() - arrived)
            yield solve_pb2.WatchSolveResponse(answer=self._answer(wanted, await solving))
        finally:
            solving.cancel()

    def _progress(self, wanted: Wanted, elapsed: float) -> solve_pb2.WatchSolveResponse:
        progress = self._desk.library.progress(wanted)
        stage = solve_pb2.SOLVE_STAGE_COMPUTING
        if progress is not None and progress.starting:
            stage = solve_pb2.SOLVE_STAGE_STARTING
        elif progress is not None and not progress.computing:
            stage = solve_pb2.SOLVE_STAGE_QUEUED
        return solve_pb2.WatchSolveResponse(
            progress=solve_pb2.SolveProgress(
                stage=stage,
                queue_position=progress.position if progress else 0,
                elapsed_seconds=elapsed,
                steps=progress.steps if progress else 0,
            )
        )

    def _answer(self, wanted: Wanted, found: Found) -> solve_pb2.SolveResponse:
        return convert.solve_response(
            found.kept.record,
            wanted,
            shared=found.shared,
            solve_count=self._desk.counters.solves_finished,
            seconds=found.kept.seconds,
        )

    async def FetchBasis(
        self, request: solve_pb2.FetchBasisRequest, context: Context
    ) -> AsyncIterator[solve_pb2.FetchBasisResponse]:
        """The record of a basis in chunks."""
        kept, count = await self._desk.basis(request.basis, context)
        data = kept.data
        if count < kept.record.count:
            data = memoryview(await self._desk.run(kept.record.head(count).to_bytes))
        if request.offset > data.nbytes:
            raise InvalidRequest.at(
                Reason.BAD_REQUEST, "offset", f"the file has {data.nbytes} bytes", request.offset
            )
        for start in range(request.offset, data.nbytes, _CHUNK) or (request.offset,):
            yield solve_pb2.FetchBasisResponse(
                data=bytes(data[start : start + _CHUNK]),
                offset=start,
                total_size=data.nbytes,
                basis_key=kept.key,
                algorithm_version=kept.record.algorithm_version,
                api_version=convert.API_VERSION,
            )

    async def Project(
        self, request: transforms_pb2.ProjectRequest, context: Context
    ) -> transforms_pb2.ProjectResponse:
        """Coefficients of fields."""
        return await fields.project(self._desk, request, context)

    async def Reconstruct(
        self, request: transforms_pb2.ReconstructRequest, context: Context
    ) -> transforms_pb2.ReconstructResponse:
        """Fields from coefficients."""
        return await fields.reconstruct(self._desk, request, context)


def drafted_methods() -> frozenset[str]:
    """Methods of the contract that the servicer does not answer."""
    service = eigenbasis_service_pb2.DESCRIPTOR.services_by_name["EigenbasisService"]
    return frozenset(method.name for method in service.methods) - frozenset(vars(EigenbasisServicer))
