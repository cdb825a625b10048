"""Too much, too late, too many: refused with a reason by a real service, which goes on for everybody else."""

from __future__ import annotations

from collections.abc import Iterator

import grpc
import numpy as np
import pytest
from google.rpc.error_details_pb2 import ErrorInfo, RetryInfo
from google.rpc.status_pb2 import Status

import modewright
from modewright.v1 import basis_pb2, transforms_pb2
from tests.process.harness import PATIENCE, Running, modes, running, solve_request, unit_problem, until

STRING = {
    "layers": [{"start": 0.0, "end": 1.0}],
    "left": {"kind": "dirichlet"},
    "right": {"kind": "dirichlet"},
}
# The most that a service takes by default: some ten seconds of work.
MOST = 2048


@pytest.fixture(scope="module")
def live(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Running]:
    """One worker, before which one solve may wait."""
    with running(tmp_path_factory.mktemp("service"), queue=1) as service:
        yield service


def _heavy(offset: float) -> modewright.Problem:
    return modewright.Problem.from_dict({**STRING, "layers": [{"start": 0.0, "end": 1.0, "q": offset}]})


def _goes_on(live: Running) -> None:
    """The same worker answers an ordinary request."""
    (pid,) = live.service.pool.pids
    assert len(live.stub.Solve(solve_request(), timeout=PATIENCE).eigenvalues) == 8
    assert live.service.pool.pids == [pid]
    assert live.service.counters.worker_restarts == 0


def test_a_full_queue_says_when_to_come_back(live: Running) -> None:
    running_one = live.stub.Solve.future(solve_request(w=21.0, count=MOST))
    live.mid_solve()
    waiting = live.stub.Solve.future(solve_request(w=22.0))
    until(lambda: live.service.counters.solves_waiting == 1)
    with pytest.raises(grpc.RpcError) as caught:
        live.stub.Solve(solve_request(w=23.0))
    assert caught.value.code() is grpc.StatusCode.RESOURCE_EXHAUSTED
    status = Status.FromString(dict(caught.value.trailing_metadata())["grpc-status-details-bin"])
    info, retry = ErrorInfo(), RetryInfo()
    assert all(any(detail.Unpack(found) for detail in status.details) for found in (info, retry))
    assert (info.reason, info.metadata["limit"]) == ("QUEUE_FULL", "1")
    assert retry.retry_delay.ToNanoseconds() > 0
    with modewright.connect(live.address) as service:
        with pytest.raises(modewright.LimitExceeded) as refused:
            service.solve(_heavy(1.0), modes=8)
        assert refused.value.reason == "QUEUE_FULL"
        assert float(refused.value.metadata["retry_after_seconds"]) > 0
    # What waits is answered as soon as the one before it is called off.
    running_one.cancel()
    assert len(waiting.result(PATIENCE).eigenvalues) == 8
    _goes_on(live)


def test_the_client_s_time_limit_stops_the_solver(live: Running) -> None:
    before = live.service.counters.solves_finished
    with modewright.connect(live.address) as service:
        with pytest.raises(modewright.DeadlineExceeded):
            service.solve(_heavy(2.0), modes=MOST, timeout=0.5)
        until(lambda: not live.service.pool.busy_pids)
        assert live.service.counters.solves_finished == before
        assert service.solve(_heavy(3.0), modes=8).count == 8
    _goes_on(live)


def test_an_interrupted_client_stops_the_solver(live: Running) -> None:
    class Enough(Exception):
        pass

    def enough(report: modewright.Progress) -> None:
        if report.stage == "computing" and report.steps:
            raise Enough

    before = live.service.counters.solves_finished, live.service.counters.solves_cancelled
    with modewright.connect(live.address) as service:
        with pytest.raises(Enough):
            service.solve(_heavy(4.0), modes=MOST, progress=enough)
        until(lambda: live.service.counters.solves_cancelled == before[1] + 1)
        assert service.solve(_heavy(5.0), modes=8).count == 8
    assert live.service.counters.solves_finished == before[0] + 1
    _goes_on(live)


def test_a_watching_client_sees_the_solver_at_work(live: Running) -> None:
    seen: list[modewright.Progress] = []
    with modewright.connect(live.address) as service:
        basis = service.solve(_heavy(6.0), modes=1024, progress=seen.append)
    assert basis.count == 1024
    computing = [report for report in seen if report.stage == "computing" and report.steps > 0]
    assert computing
    assert [report.steps for report in computing] == sorted(report.steps for report in computing)
    assert computing[-1].elapsed_seconds > 0


# ---- messages ----


def _project(array: transforms_pb2.Array) -> transforms_pb2.ProjectRequest:
    basis = basis_pb2.BasisReference(problem=unit_problem(), specification=modes(8))
    x = np.linspace(0.0, 1.0, 5)
    mesh = transforms_pb2.Mesh(
        points=transforms_pb2.PointMesh(
            x=transforms_pb2.Array(data=x.tobytes(), dtype=transforms_pb2.DTYPE_FLOAT64, shape=[5])
        )
    )
    return transforms_pb2.ProjectRequest(
        basis=basis, sampled=transforms_pb2.SampledField(values=array, mesh=mesh)
    )


@pytest.mark.parametrize(
    ("size", "shape"),
    [(39, [5]), (40, [4]), (0, [5]), (40, [5, 2**62]), (40, [2**63, 2]), (32, [4])],
)
def test_arrays_of_a_wrong_size_are_refused(live: Running, size: int, shape: list[int]) -> None:
    array = transforms_pb2.Array(data=bytes(size), dtype=transforms_pb2.DTYPE_FLOAT64, shape=shape)
    with pytest.raises(grpc.RpcError) as caught:
        live.stub.Project(_project(array), timeout=PATIENCE)
    assert caught.value.code() is grpc.StatusCode.INVALID_ARGUMENT
    assert "sampled.values" in caught.value.details()
    _goes_on(live)


def test_what_is_far_too_large_is_refused_before_it_is_read(live: Running) -> None:
    """Beyond gRPC's own limit there is no reason in the answer, but the right status, and no harm."""
    array = transforms_pb2.Array(data=bytes(32 << 20), dtype=transforms_pb2.DTYPE_FLOAT64, shape=[1 << 22])
    with pytest.raises(grpc.RpcError) as caught:
        live.stub.Project(_project(array), timeout=PATIENCE)
    assert caught.value.code() is grpc.StatusCode.RESOURCE_EXHAUSTED
    _goes_on(live)


def test_bytes_that_are_no_message_harm_nobody(live: Running) -> None:
    call = live.channel.unary_unary(
        "/modewright.v1.EigenbasisService/Solve", request_serializer=bytes, response_deserializer=bytes
    )
    with pytest.raises(grpc.RpcError) as caught:
        call(b"\xff" * 1000, timeout=PATIENCE)
    assert caught.value.code() is grpc.StatusCode.INVALID_ARGUMENT
    assert "1000" in caught.value.details()
    _goes_on(live)
