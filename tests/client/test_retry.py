"""What is tried again, how often, and within which time; against a real server that fails on purpose."""

from __future__ import annotations

import socket
import threading
from pathlib import Path
from typing import Any

import grpc
import pytest

import modewright
from modewright.retry import Retry, Schedule
from tests.client.documents import PLAIN
from tests.client.scripted import KEY, Fail, Script, serving

PROBLEM = modewright.Problem.from_dict(PLAIN)
DATA = Path(__file__).parent / "data"
UNAVAILABLE = Fail(grpc.StatusCode.UNAVAILABLE)


def test_unavailable_is_tried_again_until_it_works() -> None:
    script = Script([UNAVAILABLE, Fail(grpc.StatusCode.UNAVAILABLE, reason="SHUTTING_DOWN"), UNAVAILABLE])
    with serving(script) as address, modewright.connect(address) as service:
        basis = service.solve(PROBLEM, modes=5)
    assert basis.eigenvalues.tolist() == [1.0, 2.0, 3.0, 4.0, 5.0]
    assert len(script.requests) == 4
    assert {request.SerializeToString() for request in script.requests} == {
        script.requests[0].SerializeToString()
    }


def test_unavailable_is_tried_five_times_at_most() -> None:
    script = Script([Fail(grpc.StatusCode.UNAVAILABLE, reason="WORKER_LOST")] * 9)
    with (
        serving(script) as address,
        modewright.connect(address) as service,
        pytest.raises(modewright.Unavailable, match="after 5 attempts") as caught,
    ):
        service.solve(PROBLEM, modes=5)
    assert caught.value.reason == "WORKER_LOST"
    assert len(script.requests) == 5


@pytest.mark.parametrize(
    ("fail", "kind"),
    [
        (Fail(grpc.StatusCode.INVALID_ARGUMENT, reason="ZERO_WEIGHT"), modewright.InvalidProblem),
        (Fail(grpc.StatusCode.INTERNAL, reason="INTERNAL"), modewright.InternalError),
        (Fail(grpc.StatusCode.RESOURCE_EXHAUSTED, reason="QUEUE_FULL"), modewright.LimitExceeded),
        (Fail(grpc.StatusCode.UNKNOWN), modewright.InternalError),
        (Fail(grpc.StatusCode.ABORTED), modewright.InternalError),
        (Fail(grpc.StatusCode.DEADLINE_EXCEEDED, reason="DEADLINE"), modewright.DeadlineExceeded),
        (Fail(grpc.StatusCode.OUT_OF_RANGE, reason="SPECTRUM_EXHAUSTED"), modewright.SpectrumExhausted),
    ],
)
def test_nothing_else_is_tried_again(fail: Fail, kind: type[modewright.ModewrightError]) -> None:
    script = Script([fail])
    with serving(script) as address, modewright.connect(address) as service:
        with pytest.raises(kind) as caught:
            service.solve(PROBLEM, modes=5)
        assert type(caught.value) is kind
    assert len(script.requests) == 1


def test_a_service_that_starts_late_is_found() -> None:
    with socket.socket() as probe:
        probe.bind(("localhost", 0))
        port = probe.getsockname()[1]
    script = Script()
    served = threading.Event()
    over = threading.Event()

    def late() -> None:
        with serving(script, port=port):
            served.set()
            over.wait(30)

    # The first attempts find nobody: the server is started by the first wait.
    thread = threading.Thread(target=late)

    def sleep(seconds: float) -> None:
        if not thread.is_alive():
            thread.start()
        served.wait(30)
        threading.Event().wait(seconds)

    with modewright.connect(f"localhost:{port}", timeout=30) as service:
        original = service._retry

        def patched(*args: Any) -> Retry:
            retry = original(*args)
            retry.sleep = sleep
            return retry

        service._retry = patched  # type: ignore[method-assign]
        try:
            assert service.solve(PROBLEM, modes=3).count == 3
        finally:
            over.set()
            thread.join()


def test_nobody_there_is_unavailable_within_the_time_limit() -> None:
    with socket.socket() as probe:
        probe.bind(("localhost", 0))
        port = probe.getsockname()[1]
        with (
            modewright.connect(f"localhost:{port}", timeout=5) as service,
            pytest.raises(modewright.Unavailable),
        ):
            service.solve(PROBLEM, modes=3)


def test_attempts_share_one_deadline() -> None:
    def fail_late(request: object, context: grpc.ServicerContext) -> None:
        threading.Event().wait(1.0)
        context.abort(grpc.StatusCode.UNAVAILABLE, "late")

    script = Script([fail_late])
    with serving(script) as address, modewright.connect(address) as service:
        service.solve(PROBLEM, modes=3, timeout=20.0)
    first, second = script.time_left
    # gRPC rounds the time that it sends along, by less than half a second here.
    assert second <= first - 0.5


def test_a_call_that_outlasts_its_deadline_is_stopped_on_both_sides() -> None:
    script = Script()

    def hang(request: object, context: grpc.ServicerContext) -> None:
        context.add_callback(script.cancelled.set)
        script.cancelled.wait(30)

    script.steps = [hang]
    with serving(script) as address, modewright.connect(address) as service:
        with pytest.raises(modewright.DeadlineExceeded, match=r"0\.2 s"):
            service.solve(PROBLEM, modes=3, timeout=0.2)
        assert script.cancelled.wait(30)
    assert len(script.requests) == 1


@pytest.mark.parametrize("timeout", [0, -1.0, float("inf"), float("nan"), "1", True])
def test_a_time_limit_is_a_positive_finite_number(timeout: Any) -> None:
    with pytest.raises(modewright.InvalidRequest, match="timeout"):
        modewright.connect("localhost:1", timeout=timeout)


def test_the_route_goes_with_every_call() -> None:
    script = Script([UNAVAILABLE])
    with serving(script) as address, modewright.connect(address) as service:
        service.solve(PROBLEM, modes=3)
    assert [metadata["modewright-route"] for metadata in script.metadata] == [PROBLEM.route] * 2


# ---- waits ----


def test_waits_double_up_to_their_limit_and_are_spread() -> None:
    schedule = Schedule()
    longest = [schedule.wait(failures, 1.0) for failures in range(1, 8)]
    assert longest == [0.05, 0.1, 0.2, 0.4, 0.8, 1.0, 1.0]
    assert [schedule.wait(failures, 0.0) for failures in (1, 7)] == [0.025, 0.5]


class _Down(grpc.RpcError, grpc.Call):  # type: ignore[misc]
    def code(self) -> grpc.StatusCode:
        return grpc.StatusCode.UNAVAILABLE

    def details(self) -> str:
        return "nobody there"

    def trailing_metadata(self) -> None:
        return None


for _name in ("add_callback", "cancel", "initial_metadata", "is_active", "time_remaining"):
    setattr(_Down, _name, lambda self: None)
_Down.__abstractmethods__ = frozenset()


def test_no_wait_reaches_beyond_the_deadline() -> None:
    now = [100.0]
    lefts: list[float] = []

    def sleep(seconds: float) -> None:
        now[0] += seconds

    def invoke(left: float) -> None:
        lefts.append(left)
        now[0] += 0.06
        raise _Down

    retry = Retry(0.25, clock=lambda: now[0], sleep=sleep, spread=lambda: 1.0)
    with pytest.raises(modewright.Unavailable, match="after 2 attempts"):
        retry(invoke)
    assert lefts == pytest.approx([0.25, 0.14])
    assert now[0] <= 100.25


# ---- the basis that is not there ----


def _coefficients(request: Any, context: grpc.ServicerContext) -> Any:
    from modewright.v1 import transforms_pb2 as pb

    one = pb.Array(data=bytes(8), dtype=pb.DTYPE_FLOAT64)
    return pb.ProjectResponse(
        basis_key=KEY,
        coefficients=pb.Array(data=bytes(24), dtype=pb.DTYPE_FLOAT64, shape=[3]),
        captured=one,
        norm2=one,
        residual2=one,
        api_version="1.0",
    )


NOT_FOUND = Fail(grpc.StatusCode.NOT_FOUND, reason="BASIS_NOT_FOUND")


def test_an_unknown_basis_is_sent_whole_once() -> None:
    script = Script()
    with serving(script) as address, modewright.connect(address) as service:
        basis = service.solve(PROBLEM, modes=3)
        script.requests.clear()
        script.steps = [UNAVAILABLE, NOT_FOUND, UNAVAILABLE, _coefficients]
        assert basis.project("x").shape == (3,)
    keys, wholes = script.requests[:2], script.requests[2:]
    assert len(wholes) == 2
    for request in keys:
        assert request.basis.basis_key == KEY
        assert request.basis.count == 3
        assert not request.basis.HasField("problem")
    for request in wholes:
        assert request.basis.basis_key == KEY
        assert len(request.basis.problem.layers) == 2
        # The rung and tolerance of the answer, so that the same basis is recomputed.
        assert request.basis.specification.modes == 8
        assert request.basis.specification.rtol == 1e-9
        assert request.expression == "x"


def test_a_basis_unknown_twice_is_an_error() -> None:
    script = Script()
    with serving(script) as address, modewright.connect(address) as service:
        basis = service.solve(PROBLEM, modes=3)
        script.steps = [NOT_FOUND, NOT_FOUND]
        with pytest.raises(modewright.BasisNotFound):
            basis.project("x")
    assert len(script.requests) == 3


def test_a_not_found_without_the_reason_is_not_a_missing_basis() -> None:
    script = Script()
    with serving(script) as address, modewright.connect(address) as service:
        basis = service.solve(PROBLEM, modes=3)
        script.steps = [Fail(grpc.StatusCode.NOT_FOUND, "a proxy knows no such route")]
        with pytest.raises(modewright.InternalError, match="no such route"):
            basis.project("x")
    assert len(script.requests) == 2


# ---- TLS ----


def _server_credentials(ask_for_client: bool = False) -> grpc.ServerCredentials:
    key, chain = (DATA / "server.key").read_bytes(), (DATA / "server.pem").read_bytes()
    authority = (DATA / "authority.pem").read_bytes() if ask_for_client else None
    return grpc.ssl_server_credentials([(key, chain)], authority, ask_for_client)


def _tls(**changes: str | None) -> modewright.Tls:
    return modewright.Tls(**{"ca": str(DATA / "authority.pem"), **changes})


CALLER = {"certificate": str(DATA / "caller.pem"), "key": str(DATA / "caller.key")}


@pytest.mark.parametrize("ask_for_client", [False, True])
def test_good_certificates_are_accepted(ask_for_client: bool) -> None:
    script = Script([UNAVAILABLE])
    tls = _tls(**CALLER) if ask_for_client else _tls()
    with (
        serving(script, _server_credentials(ask_for_client)) as address,
        modewright.connect(address, tls=tls) as service,
    ):
        # An UNAVAILABLE after a good handshake is tried again as ever.
        assert service.solve(PROBLEM, modes=3).count == 3
    assert len(script.requests) == 2


@pytest.mark.parametrize(
    ("changes", "ask_for_client"),
    [
        ({"ca": str(DATA / "stranger.pem")}, False),
        ({"server_name": "elsewhere.test"}, False),
        ({}, True),
    ],
    ids=["unknown issuer", "wrong name", "no client certificate"],
)
def test_a_refused_handshake_is_named_and_not_tried_again(
    changes: dict[str, str | None], ask_for_client: bool, monkeypatch: pytest.MonkeyPatch
) -> None:
    waits: list[float] = []
    monkeypatch.setattr(Schedule, "wait", lambda self, failures, spread: waits.append(failures) or 0.01)
    script = Script()
    with (
        serving(script, _server_credentials(ask_for_client)) as address,
        modewright.connect(address, tls=_tls(**changes), timeout=20) as service,
        pytest.raises(modewright.HandshakeFailed, match="TLS"),
    ):
        service.solve(PROBLEM, modes=3)
    assert not waits
    assert not script.requests


def test_a_plain_server_behind_a_tls_client_is_a_failed_handshake() -> None:
    with (
        serving(Script()) as address,
        modewright.connect(address, tls=_tls(), timeout=20) as service,
        pytest.raises(modewright.HandshakeFailed),
    ):
        service.solve(PROBLEM, modes=3)


def test_certificates_that_cannot_be_read_are_named() -> None:
    with (
        modewright.connect("localhost:1", tls=modewright.Tls(ca="absent.pem")) as service,
        pytest.raises(modewright.InvalidRequest, match="absent"),
    ):
        service.solve(PROBLEM, modes=3)
    with pytest.raises(modewright.InvalidRequest, match="belong together"):
        modewright.Tls(certificate="caller.pem")
