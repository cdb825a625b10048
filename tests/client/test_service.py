"""Handles of services and bases against a scripted server: versions, counts, sizes, broken transfers."""

from __future__ import annotations

import os
import pickle
import signal
import threading
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from typing import Any

import grpc
import numpy as np
import pytest

import modewright
from modewright import channels, transfers
from modewright.arrays import from_message, to_message
from modewright.channels import MAX_MESSAGE, _host_and_port
from modewright.pieces import Pieces
from modewright.record import Record
from modewright.v1 import solve_pb2
from modewright.v1 import transforms_pb2 as pb
from tests.client.documents import PLAIN, STACK
from tests.client.scripted import KEY, Fail, Script, answer, serving
from tests.core.handmade import sines

PROBLEM = modewright.Problem.from_dict(PLAIN)


@pytest.fixture
def script() -> Script:
    return Script()


@pytest.fixture
def service(script: Script) -> Iterator[modewright.Service]:
    with serving(script) as address, modewright.connect(address) as handle:
        yield handle


# ---- answers ----


def test_exactly_the_modes_asked_for_come_back(script: Script, service: modewright.Service) -> None:
    script.steps = [lambda request, context: answer(8)]
    basis = service.solve(PROBLEM, modes=5)
    assert basis.count == len(basis) == 5
    for name in ("eigenvalues", "lower", "upper", "zeros", "groups", "confirmed", "tolerance_met"):
        array = getattr(basis, name)
        assert array.shape == (5,)
        assert not array.flags.writeable
    assert (basis.key, basis.rung, basis.rtol, basis.scale) == (KEY, 8, 1e-9, 1.0)
    assert basis.confirmed.all()


def test_fewer_modes_than_asked_for_are_never_passed_on(script: Script, service: modewright.Service) -> None:
    script.steps = [lambda request, context: answer(4)]
    with pytest.raises(modewright.InternalError, match="5 modes were asked for"):
        service.solve(PROBLEM, modes=5)


def test_newer_minor_versions_are_accepted(script: Script, service: modewright.Service) -> None:
    script.steps = [lambda request, context: answer(5, api_version="1.7")]
    assert service.solve(PROBLEM, modes=5).count == 5


@pytest.mark.parametrize("version", ["2.0", "10.1", "0.9", ""])
def test_another_major_version_is_refused(script: Script, service: modewright.Service, version: str) -> None:
    script.steps = [lambda request, context: answer(5, api_version=version)]
    with pytest.raises(modewright.VersionMismatch) as caught:
        service.solve(PROBLEM, modes=5)
    assert caught.value.metadata["found"] == version


def test_a_call_the_service_does_not_know_is_unsupported(service: modewright.Service) -> None:
    with pytest.raises(modewright.Unsupported, match="UNIMPLEMENTED"):
        service.check(PROBLEM)


def test_progress_comes_before_the_answer(service: modewright.Service) -> None:
    seen: list[modewright.Progress] = []
    basis = service.solve(PROBLEM, modes=3, progress=seen.append)
    assert basis.count == 3
    assert seen == [modewright.Progress("computing", 0, 0.5, 3)]


def test_a_callback_that_raises_cancels_the_solve(script: Script, service: modewright.Service) -> None:
    def hang(request: object, context: grpc.ServicerContext) -> None:
        script.cancelled.wait(30)

    def stop(progress: modewright.Progress) -> None:
        raise KeyboardInterrupt

    script.steps = [hang]
    with pytest.raises(KeyboardInterrupt):
        service.solve(PROBLEM, modes=3, progress=stop)
    assert script.cancelled.wait(30)


def test_an_interrupt_cancels_the_call(script: Script, service: modewright.Service) -> None:
    def interrupt(request: object, context: grpc.ServicerContext) -> None:
        context.add_callback(script.cancelled.set)
        os.kill(os.getpid(), signal.SIGINT)
        script.cancelled.wait(30)

    script.steps = [interrupt]
    # started with interrupts ignored, as in the background of a shell, Python ignores them too
    before = signal.signal(signal.SIGINT, signal.default_int_handler)
    try:
        with pytest.raises(KeyboardInterrupt):
            service.solve(PROBLEM, modes=3)
    finally:
        signal.signal(signal.SIGINT, before)
    assert script.cancelled.wait(30)
    assert service.solve(PROBLEM, modes=3).count == 3


def test_errors_speak_of_a_stack_in_its_own_names(script: Script, service: modewright.Service) -> None:
    from google.rpc import error_details_pb2, status_pb2

    def refuse(request: object, context: grpc.ServicerContext) -> None:
        status = status_pb2.Status(code=3, message="layers[1].p: must be positive (got -1)")
        info = error_details_pb2.ErrorInfo(
            reason="NEGATIVE_COEFFICIENT", domain="modewright", metadata={"number_0": "-1"}
        )
        bad = error_details_pb2.BadRequest()
        bad.field_violations.add(field="layers[1].p", description="must be positive (got -1)")
        status.details.add().Pack(info)
        status.details.add().Pack(bad)
        context.set_trailing_metadata((("grpc-status-details-bin", status.SerializeToString()),))
        context.abort(grpc.StatusCode.INVALID_ARGUMENT, "text")

    script.steps = [refuse]
    with pytest.raises(modewright.InvalidProblem) as caught:
        service.solve(STACK, modes=3)
    assert str(caught.value) == "stack.layers[1].conductivity: must be positive (got -1)"


# ---- arguments ----


@pytest.mark.parametrize("modes", [0, -1, 2.0, "3", True, None, 2**63, 10**30])
def test_modes_are_a_whole_number_from_one(service: modewright.Service, modes: Any) -> None:
    with pytest.raises(modewright.InvalidRequest, match="modes"):
        service.solve(PROBLEM, modes=modes)


def test_numpy_integers_count_as_whole_numbers(service: modewright.Service) -> None:
    assert service.solve(PROBLEM, modes=np.int64(3)).count == 3  # type: ignore[arg-type]


@pytest.mark.parametrize("rtol", [0.0, -1e-9, float("nan"), "1e-9", True])
def test_a_tolerance_is_a_positive_number(service: modewright.Service, rtol: Any) -> None:
    with pytest.raises(modewright.InvalidRequest, match="rtol"):
        service.solve(PROBLEM, modes=3, rtol=rtol)


@pytest.mark.parametrize("problem", [3, "pipe.toml", None, [PLAIN]])
def test_what_is_no_problem_is_refused(service: modewright.Service, problem: Any) -> None:
    with pytest.raises(modewright.InvalidProblem):
        service.solve(problem, modes=3)


def test_a_request_beyond_the_limit_is_refused_before_it_is_sent(
    script: Script, service: modewright.Service
) -> None:
    basis = service.solve(PROBLEM, modes=3)
    points = MAX_MESSAGE // 16 + 1
    with pytest.raises(modewright.LimitExceeded) as caught:
        basis.project(np.ones(points), x=np.linspace(0, 1, points))
    assert int(caught.value.metadata["requested"]) > int(caught.value.metadata["limit"]) == MAX_MESSAGE
    assert len(script.requests) == 1


@pytest.mark.parametrize(
    ("arguments", "field"),
    [
        ({"values": np.ones(5)}, "x"),
        ({"values": np.ones(5), "x": np.arange(5), "edges": np.arange(6)}, "x"),
        ({"values": np.ones(5), "x": np.arange(5), "measure": "length"}, "measure"),
        ({"values": np.ones(5), "x": np.arange(5), "interpolation": "conservative"}, "interpolation"),
        ({"values": np.ones(5), "edges": np.arange(6), "interpolation": "cubic"}, "interpolation"),
        ({"values": np.ones(5), "edges": np.arange(6), "measure": "area"}, "measure"),
        ({"values": np.ones((2, 5)), "x": np.arange(5), "axis": 0}, "values"),
        ({"values": np.ones((2, 5)), "x": np.arange(5), "axis": 2}, "axis"),
        ({"values": np.ones((2, 5)), "x": np.arange(5), "axis": 1.0}, "axis"),
        ({"values": np.ones((2, 5)), "x": np.arange(5), "left_lump": np.ones(3)}, "left_lump"),
        ({"values": np.float64(1.0), "x": np.arange(5)}, "values"),
        ({"values": [[1, 2, np.nan, 4, 5]], "x": np.arange(5)}, "values[0, 2]"),
        ({"values": np.ones(5), "x": [0, 1, np.inf, 3, 4]}, "x[2]"),
        ({"values": "exp(-x)", "x": np.arange(5)}, "x"),
        ({"values": [], "x": []}, "x"),
        ({"values": np.ones((2, 0)), "x": []}, "x"),
    ],
)
def test_arguments_that_do_not_fit_are_named(
    script: Script, service: modewright.Service, arguments: dict[str, Any], field: str
) -> None:
    basis = service.solve(PROBLEM, modes=3)
    with pytest.raises(modewright.InvalidRequest) as caught:
        basis.project(**arguments)
    assert caught.value.violations[0].field == field
    assert len(script.requests) == 1


def test_too_few_points_are_counted(script: Script, service: modewright.Service) -> None:
    basis = service.solve(PROBLEM, modes=3)
    for points in (0, 1):
        with pytest.raises(modewright.InvalidRequest) as caught:
            basis.project(np.ones(points), x=np.ones(points))
        assert caught.value.reason == "BAD_MESH"
        assert caught.value.violations[0].field == "x"
        assert caught.value.violations[0].number == str(points)


# ---- calls of moderate size ----


def _echo(request: pb.ProjectRequest, context: grpc.ServicerContext) -> pb.ProjectResponse:
    """Answers with the first three samples of each row, so that rows can be told apart."""
    rows = from_message(request.sampled.values)
    one = to_message(np.zeros(rows.shape[0]))
    return pb.ProjectResponse(
        basis_key=KEY,
        coefficients=to_message(np.ascontiguousarray(rows[:, :3])),
        captured=one,
        norm2=one,
        residual2=one,
        api_version="1.0",
    )


@pytest.mark.parametrize("dtype", ["float32", "float64", "complex128"])
def test_large_batches_are_split_and_put_together_again(
    script: Script, service: modewright.Service, dtype: str
) -> None:
    basis = service.solve(PROBLEM, modes=3)
    script.requests.clear()
    script.steps = [_echo] * 99
    values = np.arange(4 * 300 * 1000, dtype=dtype).reshape(4, 1000, 300)
    lump = np.arange(1200.0).reshape(4, 300)
    got = basis.project(values, x=np.linspace(0, 1, 1000), axis=1, left_lump=lump)
    np.testing.assert_array_equal(got, np.moveaxis(values, 1, -1)[..., :3])
    sizes = [request.ByteSize() for request in script.requests]
    # The mesh and the lumps come on top of the rows.
    assert max(sizes) <= transfers.CALL_BYTES + 8 * 1000 + 8 * 300 + 1000
    assert len(sizes) == -(
        -values.nbytes // (transfers.CALL_BYTES // (1000 * values.itemsize) * 1000 * values.itemsize)
    )
    sent = np.concatenate([from_message(request.left_lump) for request in script.requests])
    np.testing.assert_array_equal(sent, lump.ravel())


# ---- the basis as data ----


RECORD = sines(8)


def _chunks(data: bytes, request: solve_pb2.FetchBasisRequest, stop: int | None = None) -> Iterator[Any]:
    for start in range(request.offset, stop or len(data), 1000):
        yield solve_pb2.FetchBasisResponse(
            data=data[start : start + 1000],
            offset=start,
            total_size=len(data),
            basis_key=RECORD.basis_key,
            api_version="1.0",
        )


@pytest.fixture
def basis(script: Script, service: modewright.Service) -> modewright.Basis:
    script.steps = [lambda request, context: answer(8, basis_key=RECORD.basis_key)]
    solved = service.solve(PROBLEM, modes=5)
    script.requests.clear()
    return solved


def test_a_broken_transfer_goes_on_where_it_broke(script: Script, basis: modewright.Basis) -> None:
    data = RECORD.head(5).to_bytes()

    def broken(request: solve_pb2.FetchBasisRequest, context: grpc.ServicerContext) -> Iterator[Any]:
        yield from _chunks(data, request, stop=3000)
        context.abort(grpc.StatusCode.UNAVAILABLE, "gone")

    script.steps = [broken, Fail(grpc.StatusCode.UNAVAILABLE), lambda request, _: _chunks(data, request)]
    assert basis.record().to_bytes() == data
    assert [request.offset for request in script.requests] == [0, 3000, 3000]
    # Kept: no further call.
    np.testing.assert_array_equal(basis.modes([0.25, 0.5]), Pieces(RECORD).evaluate([0.25, 0.5], count=5))
    assert len(script.requests) == 3


def test_a_transfer_with_a_gap_is_not_believed(script: Script, basis: modewright.Basis) -> None:
    data = RECORD.to_bytes()
    script.steps = [lambda request, _: list(_chunks(data, request))[1:]]
    with pytest.raises(modewright.InternalError, match="asked for byte 0"):
        basis.record()


def test_a_damaged_transfer_is_not_believed(script: Script, basis: modewright.Basis) -> None:
    data = bytearray(RECORD.to_bytes())
    data[-100] ^= 1
    script.steps = [lambda request, _: _chunks(bytes(data), request)]
    with pytest.raises(modewright.InternalError, match="checksum"):
        basis.record()


def test_a_saved_basis_works_without_a_service(
    script: Script, basis: modewright.Basis, tmp_path: Path
) -> None:
    script.steps = [lambda request, _: _chunks(RECORD.to_bytes(), request)]
    basis.save(tmp_path / "sines.basis")
    loaded = modewright.load_basis(tmp_path / "sines.basis")
    assert loaded.count == 5
    assert loaded.key == RECORD.basis_key
    again = pickle.loads(pickle.dumps(loaded))
    x = np.linspace(0, 1, 7)
    expected = np.sqrt(2) * np.sin(np.pi * np.arange(1, 6)[:, None] * x)
    for offline in (loaded, again):
        np.testing.assert_allclose(offline.modes(x), expected, rtol=0, atol=1e-13)
        c = np.array([[1.0, 0, 2.0], [0, 1j, 0]])
        np.testing.assert_allclose(offline.reconstruct(c, x), c @ expected[:3], rtol=0, atol=1e-13)
        assert offline.reconstruct(c, 0.5).shape == (2,)
    with pytest.raises(modewright.InvalidRequest, match="without a service"):
        loaded.project("x")


@pytest.mark.parametrize("data", [b"", b"not a basis" * 20, Record.to_bytes(RECORD)[:-1]])
def test_a_file_that_is_no_basis_is_refused(tmp_path: Path, data: bytes) -> None:
    (tmp_path / "b").write_bytes(data)
    with pytest.raises(modewright.InvalidRequest, match="path: b is not a usable basis file"):
        modewright.load_basis(tmp_path / "b")


@pytest.mark.parametrize(
    ("call", "field"),
    [
        (lambda basis: basis.modes([0.5, 1.5]), "points[1]"),
        (lambda basis: basis.modes(["a"]), "points"),
        (lambda basis: basis.modes([0.5], quantity="slope"), "quantity"),
        (lambda basis: basis.modes([0.5], side="both"), "side"),
        (lambda basis: basis.reconstruct(np.ones(6), [0.5]), "coefficients"),
        (lambda basis: basis.reconstruct([1.0, np.nan], [0.5]), "coefficients[1]"),
        (lambda basis: basis.reconstruct(np.ones(5), [[0.5]]), "x"),
    ],
)
def test_wrong_arguments_of_evaluations_are_named(
    script: Script, basis: modewright.Basis, call: Any, field: str
) -> None:
    script.steps = [lambda request, _: _chunks(RECORD.to_bytes(), request)]
    with pytest.raises(modewright.InvalidRequest) as caught:
        call(basis)
    assert caught.value.violations[0].field == field


# ---- life of a handle ----


def test_a_closed_handle_refuses_calls(script: Script) -> None:
    with serving(script) as address:
        with modewright.connect(address) as service:
            basis = service.solve(PROBLEM, modes=3)
        with pytest.raises(modewright.ServiceClosed):
            service.solve(PROBLEM, modes=3)
        with pytest.raises(modewright.ServiceClosed):
            basis.project("x")


def test_threads_that_start_together_share_one_attachment(script: Script) -> None:
    with serving(script) as address:
        service = modewright.connect(address)
        with ThreadPoolExecutor(8) as threads:
            solved = [threads.submit(service.solve, PROBLEM, 3) for _ in range(32)]
            assert [basis.result().count for basis in solved] == [3] * 32
        assert [
            shared.users for (_, target), shared in channels._channels.items() if target.address == address
        ] == [1]
        service.close()
        assert all(target.address != address for _, target in channels._channels)


def test_handles_to_one_address_share_a_channel_until_the_last_closes(script: Script) -> None:
    with serving(script) as address:
        first, second = modewright.connect(address), modewright.connect(address)
        first.solve(PROBLEM, modes=3)
        second.solve(PROBLEM, modes=3)
        first.close()
        assert second.solve(PROBLEM, modes=3).count == 3
        second.close()
        with modewright.connect(address) as third:
            assert third.solve(PROBLEM, modes=3).count == 3


def test_connecting_costs_nothing_until_the_first_call() -> None:
    threads = threading.active_count()
    service = modewright.connect("nowhere.invalid:1")
    assert threading.active_count() == threads
    assert repr(service) == "Service(nowhere.invalid:1)"
    service.close()


def test_the_environment_names_the_service(script: Script, monkeypatch: pytest.MonkeyPatch) -> None:
    with serving(script) as address:
        monkeypatch.setenv("MODEWRIGHT_ADDRESS", address)
        with modewright.connect() as service:
            assert service.solve(PROBLEM, modes=3).count == 3
            assert service.address == address
            again = pickle.loads(pickle.dumps(service))
        with again:
            assert again.solve(PROBLEM, modes=3).count == 3


def test_handles_pickle_with_their_settings(script: Script, service: modewright.Service) -> None:
    basis = pickle.loads(pickle.dumps(service.solve(PROBLEM, modes=3)))
    script.steps = [_echo]
    assert basis.project(np.ones((2, 5)), x=np.linspace(0, 1, 5)).shape == (2, 3)
    assert basis.problem == PROBLEM
    assert basis.service is not None
    basis.service.close()
    # The original is untouched by its copy's end.
    assert service.solve(PROBLEM, modes=3).count == 3


def test_reprs_are_bounded(script: Script, service: modewright.Service) -> None:
    script.steps = [lambda request, context: answer(2000)]
    basis = service.solve(PROBLEM, modes=2000)
    assert len(repr(basis)) < 300
    assert "2000 modes" in repr(basis)


@pytest.mark.parametrize(
    ("address", "place"),
    [
        ("host:50051", ("host", 50051)),
        ("dns:///host.example:1", ("host.example", 1)),
        ("dns:host:1", ("host", 1)),
        ("[::1]:50051", ("::1", 50051)),
        ("unix:/run/service.sock", None),
        ("host", None),
        ("::1", None),
    ],
)
def test_places_of_targets(address: str, place: tuple[str, int] | None) -> None:
    assert _host_and_port(address) == place
