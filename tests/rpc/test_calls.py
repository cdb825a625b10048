"""The calls of the contract on a real service: what each answers, and how it refuses."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from typing import Any

import grpc
import numpy as np
import pytest
from google.rpc.error_details_pb2 import ErrorInfo
from google.rpc.status_pb2 import Status

from modewright.pieces import Pieces
from modewright.record import Record
from modewright.v1 import basis_pb2, eigenbasis_service_pb2, problem_pb2, solve_pb2
from modewright.v1 import transforms_pb2 as pb
from modewright_service.rpc.arrays import decode, encode
from tests.process.harness import HEAVY, Running, constant, modes, running, solve_request, unit_problem

MIB = 1024 * 1024


@pytest.fixture(scope="module")
def live(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Running]:
    with running(tmp_path_factory.mktemp("service"), max_modes=HEAVY) as service:
        yield service


@pytest.fixture(scope="module")
def solved(live: Running) -> solve_pb2.SolveResponse:
    return live.stub.Solve(solve_request(count=12))


@pytest.fixture(scope="module")
def record(live: Running, solved: solve_pb2.SolveResponse) -> Record:
    return Record.from_bytes(fetch(live, by_key(solved)))


def by_key(solved: solve_pb2.SolveResponse, count: int = 0) -> basis_pb2.BasisReference:
    return basis_pb2.BasisReference(basis_key=solved.basis_key, count=count)


def fetch(live: Running, basis: basis_pb2.BasisReference, offset: int = 0) -> bytes:
    chunks = list(live.stub.FetchBasis(solve_pb2.FetchBasisRequest(basis=basis, offset=offset)))
    position = offset
    for chunk in chunks:
        assert chunk.offset == position
        assert len(chunk.data) <= MIB
        position += len(chunk.data)
    assert position == chunks[0].total_size
    return b"".join(chunk.data for chunk in chunks)


def refused(call: Callable[[], Any]) -> tuple[grpc.StatusCode, str, dict[str, str]]:
    """Code, reason and metadata of a call that must fail."""
    with pytest.raises(grpc.RpcError) as caught:
        call()
    trailers = dict(caught.value.trailing_metadata())
    status = Status.FromString(trailers["grpc-status-details-bin"])
    info = ErrorInfo()
    assert status.details[0].Unpack(info)
    assert status.code == caught.value.code().value[0]
    return caught.value.code(), info.reason, dict(info.metadata)


# ---- solving ----


def test_solve_answers_what_was_asked(solved: solve_pb2.SolveResponse) -> None:
    exact = (np.arange(1, 13) * np.pi) ** 2
    assert len(solved.eigenvalues) == len(solved.lower) == len(solved.upper) == 12
    assert np.all(np.array(solved.lower) <= exact)
    assert np.all(exact <= np.array(solved.upper))
    assert list(solved.zeros) == list(range(12))
    assert (solved.specification.modes, solved.specification.rung) == (12, 12)
    assert solved.specification.rtol == 1e-9
    assert solved.scale == pytest.approx(np.pi**2, rel=1e-12)
    assert solved.ends.left.kind == problem_pb2.END_KIND_DIRICHLET
    assert len(solved.basis_key) == len(solved.problem_digest) == 64
    assert not solved.answered_from_cache
    assert solved.api_version == "1.0"


def test_a_second_solve_and_one_for_fewer_modes_solve_nothing(
    live: Running, solved: solve_pb2.SolveResponse
) -> None:
    before = live.service.counters.solves_started
    again = live.stub.Solve(solve_request(count=12))
    fewer = live.stub.Solve(solve_request(count=5))
    assert again.answered_from_cache
    assert fewer.answered_from_cache
    assert live.service.counters.solves_started == before
    assert again.server_solve_count == fewer.server_solve_count
    assert list(again.eigenvalues) == list(solved.eigenvalues)
    assert list(fewer.eigenvalues) == list(solved.eigenvalues)[:5]
    # It was answered by the basis that was there, and says so.
    assert fewer.basis_key == solved.basis_key
    assert (fewer.specification.modes, fewer.specification.rung) == (5, 12)


def test_check_says_what_would_be_solved_and_solves_nothing(live: Running) -> None:
    before = live.service.counters.solves_started
    request = solve_pb2.CheckRequest(problem=unit_problem(w=4.0), specification=modes(9))
    checked = live.stub.Check(request)
    assert not checked.cached
    assert live.service.counters.solves_started == before
    assert checked.scale == pytest.approx(np.pi**2 / 4, rel=1e-12)
    assert checked.cost.pieces >= 1
    assert checked.cost.unknowns > 9
    assert checked.cost.seconds > 0
    answer = live.stub.Solve(solve_request(w=4.0, count=9))
    assert (answer.basis_key, answer.problem_digest) == (checked.basis_key, checked.problem_digest)
    assert answer.ends == checked.ends
    assert live.stub.Check(request).cached


def test_check_refuses_what_solve_refuses(live: Running) -> None:
    problem = unit_problem()
    problem.layers[0].p.expression = "x - 0.5"
    for call in (
        lambda: live.stub.Check(solve_pb2.CheckRequest(problem=problem)),
        lambda: live.stub.Solve(solve_pb2.SolveRequest(problem=problem, specification=modes(3))),
    ):
        code, reason, metadata = refused(call)
        assert code is grpc.StatusCode.INVALID_ARGUMENT
        assert reason == "NEGATIVE_COEFFICIENT"
        assert "number_0" in metadata


def test_check_remarks_on_a_massless_layer(live: Running) -> None:
    problem = unit_problem()
    problem.layers.add(name="water", start=1.0, end=2.0, w=constant(0.0))
    remarks = live.stub.Check(solve_pb2.CheckRequest(problem=problem)).remarks
    assert any("water" in remark for remark in remarks)


def test_watching_ends_with_the_answer_of_solve(live: Running) -> None:
    request = solve_pb2.WatchSolveRequest(
        problem=unit_problem(w=7.0), specification=modes(HEAVY), interval_seconds=0.02
    )
    *progress, last = live.stub.WatchSolve(request)
    assert last.WhichOneof("update") == "answer"
    assert len(last.answer.eigenvalues) == HEAVY
    assert progress
    assert {message.WhichOneof("update") for message in progress} == {"progress"}
    steps = [message.progress.steps for message in progress]
    elapsed = [message.progress.elapsed_seconds for message in progress]
    assert steps == sorted(steps)
    assert steps[-1] > 0
    assert elapsed == sorted(elapsed)
    assert progress[-1].progress.stage == solve_pb2.SOLVE_STAGE_COMPUTING


def test_watching_refuses_as_solve_does(live: Running) -> None:
    request = solve_pb2.WatchSolveRequest(problem=unit_problem(), specification=modes(10**9))
    assert refused(lambda: list(live.stub.WatchSolve(request)))[1] == "TOO_MANY_MODES"
    request = solve_pb2.WatchSolveRequest(
        problem=unit_problem(), specification=modes(3), interval_seconds=1e-6
    )
    assert refused(lambda: list(live.stub.WatchSolve(request)))[1] == "BAD_REQUEST"


# ---- bases ----


def test_the_fetched_file_is_the_record(record: Record, solved: solve_pb2.SolveResponse) -> None:
    assert record.basis_key == solved.basis_key
    assert record.count == 12
    assert record.eigenvalues.tolist() == list(solved.eigenvalues)


def test_a_transfer_resumes_where_it_broke_off(live: Running, solved: solve_pb2.SolveResponse) -> None:
    whole = fetch(live, by_key(solved))
    assert fetch(live, by_key(solved), offset=1000) == whole[1000:]
    assert fetch(live, by_key(solved), offset=len(whole)) == b""
    request = solve_pb2.FetchBasisRequest(basis=by_key(solved), offset=len(whole) + 1)
    code, reason, metadata = refused(lambda: list(live.stub.FetchBasis(request)))
    assert (code, reason) == (grpc.StatusCode.INVALID_ARGUMENT, "BAD_REQUEST")
    assert metadata["number_0"] == str(len(whole) + 1)


def test_a_file_of_fewer_modes(live: Running, solved: solve_pb2.SolveResponse, record: Record) -> None:
    few = Record.from_bytes(fetch(live, by_key(solved, count=3)))
    assert few.count == 3
    np.testing.assert_array_equal(few.coefficients, record.coefficients[:3])


def test_a_file_of_many_chunks(live: Running) -> None:
    answer = live.stub.Solve(solve_request(w=9.0, count=256))
    data = fetch(live, by_key(answer))
    assert len(data) > MIB
    assert Record.from_bytes(data).count == 256


def test_an_unknown_key_is_not_found_and_the_problem_heals_it(live: Running) -> None:
    request = solve_pb2.CheckRequest(problem=unit_problem(w=3.0), specification=modes(8))
    key = live.stub.Check(request).basis_key
    points = encode(np.array([0.5]))

    def reconstruct(basis: basis_pb2.BasisReference) -> pb.ReconstructResponse:
        return live.stub.Reconstruct(
            pb.ReconstructRequest(basis=basis, coefficients=encode(np.ones(1)), points=points)
        )

    alone = basis_pb2.BasisReference(basis_key=key)
    assert refused(lambda: reconstruct(alone)) == (
        grpc.StatusCode.NOT_FOUND,
        "BASIS_NOT_FOUND",
        {"basis_key": key},
    )
    whole = basis_pb2.BasisReference(basis_key=key, problem=unit_problem(w=3.0), specification=modes(8))
    assert reconstruct(whole).basis_key == key
    assert reconstruct(alone).basis_key == key


def test_a_key_and_a_problem_that_do_not_belong_together(live: Running) -> None:
    basis = basis_pb2.BasisReference(basis_key="f" * 64, problem=unit_problem(), specification=modes(8))
    request = solve_pb2.FetchBasisRequest(basis=basis)
    code, reason, metadata = refused(lambda: list(live.stub.FetchBasis(request)))
    assert (code, reason) == (grpc.StatusCode.FAILED_PRECONDITION, "VERSION_MISMATCH")
    assert metadata["expected"] == "f" * 64


@pytest.mark.parametrize(
    ("basis", "reason"),
    [
        (basis_pb2.BasisReference(), "BAD_REQUEST"),
        (basis_pb2.BasisReference(basis_key="nonsense"), "BAD_REQUEST"),
        (basis_pb2.BasisReference(problem=unit_problem()), "BAD_REQUEST"),
        (basis_pb2.BasisReference(problem=unit_problem(), specification=modes(8), count=9), "BAD_SHAPE"),
        (basis_pb2.BasisReference(problem=unit_problem(), specification=modes(8), count=-1), "BAD_SHAPE"),
    ],
)
def test_references_that_name_no_basis(live: Running, basis: basis_pb2.BasisReference, reason: str) -> None:
    # Of a problem that nobody else solves for more modes here.
    if basis.HasField("problem"):
        basis.problem.layers[0].w.constant = 11.0
    request = solve_pb2.FetchBasisRequest(basis=basis)
    assert refused(lambda: list(live.stub.FetchBasis(request)))[1] == reason


# ---- transforms ----


def sampled(values: np.ndarray, x: np.ndarray, **options: Any) -> pb.SampledField:
    return pb.SampledField(values=encode(values), mesh=pb.Mesh(points=pb.PointMesh(x=encode(x))), **options)


X = np.linspace(0.0, 1.0, 401)
# sin(pi x) and x (1 - x): the second has c_n = 4 sqrt(2) / ((n+1) pi)^3 for even n, 0 for odd (elementary).
SINE, PARABOLA = np.sin(np.pi * X), X * (1.0 - X)


def test_projection_meets_the_closed_form(live: Running, solved: solve_pb2.SolveResponse) -> None:
    answer = live.stub.Project(
        pb.ProjectRequest(basis=by_key(solved), sampled=sampled(np.stack([SINE, PARABOLA]), X))
    )
    c = decode(answer.coefficients, "c")
    n = np.arange(12)
    exact = np.where(n % 2 == 0, 4 * np.sqrt(2) / ((n + 1) * np.pi) ** 3, 0.0)
    # A cubic spline keeps the parabola exactly and the sine to h^4.
    np.testing.assert_allclose(c[1], exact, atol=1e-12)
    np.testing.assert_allclose(c[0], np.eye(12)[0] / np.sqrt(2), atol=1e-9)
    assert answer.basis_key == solved.basis_key
    assert decode(answer.norm2, "n")[1] == pytest.approx(1 / 30, rel=1e-12)
    captured, residual2 = decode(answer.captured, "c"), decode(answer.residual2, "r")
    assert captured[1] * (1 / 30) + residual2[1] == pytest.approx(1 / 30, rel=1e-10)


def test_any_axis_may_hold_the_coordinate(live: Running, solved: solve_pb2.SolveResponse) -> None:
    values = np.random.default_rng(2).normal(size=(2, 401, 3))
    middle = live.stub.Project(
        pb.ProjectRequest(basis=by_key(solved), sampled=sampled(values, X, axis=1))
    ).coefficients
    last = live.stub.Project(
        pb.ProjectRequest(basis=by_key(solved), sampled=sampled(np.moveaxis(values, 1, -1), X))
    ).coefficients
    assert middle == last
    assert list(middle.shape) == [2, 3, 12]


def test_matrices_of_a_mesh_are_made_once(live: Running, solved: solve_pb2.SolveResponse) -> None:
    x = np.linspace(0.0, 1.0, 77)
    request = pb.ProjectRequest(basis=by_key(solved), sampled=sampled(np.sin(x), x))
    first = live.stub.Project(request)
    built, hits = live.service.counters.operators_built, live.service.counters.operator_hits
    assert live.stub.Project(request).coefficients == first.coefficients
    assert live.service.counters.operators_built == built
    assert live.service.counters.operator_hits == hits + 1


def test_fewer_modes_are_the_first_ones(live: Running, solved: solve_pb2.SolveResponse) -> None:
    request = pb.ProjectRequest(basis=by_key(solved), sampled=sampled(PARABOLA, X))
    few = pb.ProjectRequest(basis=by_key(solved, count=4), sampled=sampled(PARABOLA, X))
    whole, part = (decode(live.stub.Project(r).coefficients, "c") for r in (request, few))
    # One product of a matrix with 4 columns, one with 12: equal to rounding.
    np.testing.assert_allclose(part, whole[:4], rtol=1e-13, atol=1e-15)


def test_cells_expressions_and_complex_fields(live: Running, solved: solve_pb2.SolveResponse) -> None:
    edges = X
    averages = np.diff(X**2 / 2 - X**3 / 3) / np.diff(X)
    cells = pb.SampledField(values=encode(averages), mesh=pb.Mesh(cells=pb.CellMesh(edges=encode(edges))))
    by_cells = live.stub.Project(pb.ProjectRequest(basis=by_key(solved), sampled=cells))
    formula = live.stub.Project(pb.ProjectRequest(basis=by_key(solved), expression="x*(1 - x)"))
    turned = live.stub.Project(pb.ProjectRequest(basis=by_key(solved), sampled=sampled(PARABOLA * 1j, X)))
    exact = decode(formula.coefficients, "c")
    assert exact.shape == (12,)
    np.testing.assert_allclose(decode(by_cells.coefficients, "c"), exact, atol=1e-10)
    np.testing.assert_allclose(decode(turned.coefficients, "c"), 1j * exact, atol=1e-12)


@pytest.mark.parametrize("quantity", [pb.QUANTITY_UNSPECIFIED, pb.QUANTITY_DERIVATIVE, pb.QUANTITY_FLUX])
@pytest.mark.parametrize("points", [np.linspace(0, 1, 33)[::-1], np.linspace(0, 1, 120_000)])
def test_reconstruction_agrees_with_the_record(
    live: Running,
    solved: solve_pb2.SolveResponse,
    record: Record,
    quantity: pb.Quantity,
    points: np.ndarray,
) -> None:
    c = np.random.default_rng(3).normal(size=(2, 5))
    answer = live.stub.Reconstruct(
        pb.ReconstructRequest(
            basis=by_key(solved), coefficients=encode(c), points=encode(points), quantity=quantity
        )
    )
    names = {pb.QUANTITY_UNSPECIFIED: "value", pb.QUANTITY_DERIVATIVE: "derivative", pb.QUANTITY_FLUX: "flux"}
    phi = Pieces(record.head(5)).evaluate(points, names[quantity])
    values = decode(answer.values, "v")
    assert values.shape == (2, points.size)
    np.testing.assert_allclose(values, c @ phi, atol=1e-11)
    assert not answer.HasField("left_lump")


def test_lumps_are_used_flagged_and_reconstructed(live: Running) -> None:
    problem = unit_problem()
    problem.left.CopyFrom(problem_pb2.EndCondition(kind=problem_pb2.END_KIND_LUMP, mass=2.0, resistance=0.5))
    basis = basis_pb2.BasisReference(problem=problem, specification=modes(24))
    field = sampled(np.stack([PARABOLA, PARABOLA]), X)
    without = live.stub.Project(pb.ProjectRequest(basis=basis, sampled=field))
    assert without.left_lump_extrapolated
    assert not without.right_lump_extrapolated
    given = live.stub.Project(
        pb.ProjectRequest(basis=basis, sampled=field, left_lump=encode(np.array([0.0, 1.0])))
    )
    assert not given.left_lump_extrapolated
    norm2 = decode(given.norm2, "n")
    # <f, f> = int f^2 + m f_lump^2, the mass being 2.
    np.testing.assert_allclose(norm2, [1 / 30, 1 / 30 + 2.0], rtol=1e-12)
    back = live.stub.Reconstruct(
        pb.ReconstructRequest(basis=basis, coefficients=given.coefficients, points=encode(X))
    )
    lump = decode(back.left_lump, "l")
    assert lump.shape == (2,)
    assert abs(lump[1] - 1.0) < abs(lump[1] - lump[0])


@pytest.mark.parametrize(
    ("change", "code", "reason"),
    [
        ({"method": pb.PROJECTION_METHOD_FIT}, grpc.StatusCode.FAILED_PRECONDITION, "UNSUPPORTED_OPTION"),
        ({"method": 99}, grpc.StatusCode.INVALID_ARGUMENT, "UNKNOWN_OPTION"),
        ({"family": pb.MODE_FAMILY_FLUX}, grpc.StatusCode.FAILED_PRECONDITION, "UNSUPPORTED_OPTION"),
        ({"further_axes": [pb.AxisBasis()]}, grpc.StatusCode.FAILED_PRECONDITION, "UNSUPPORTED_OPTION"),
        ({"sampled": pb.SampledField(values=encode(SINE))}, grpc.StatusCode.INVALID_ARGUMENT, "BAD_REQUEST"),
        ({"sampled": sampled(SINE, X, axis=1)}, grpc.StatusCode.INVALID_ARGUMENT, "BAD_SHAPE"),
        ({"sampled": sampled(SINE[1:], X)}, grpc.StatusCode.INVALID_ARGUMENT, "BAD_SHAPE"),
        ({"sampled": sampled(SINE, X + 0.1)}, grpc.StatusCode.INVALID_ARGUMENT, "MESH_OUTSIDE_DOMAIN"),
        ({"left_lump": encode(np.array(1.0))}, grpc.StatusCode.INVALID_ARGUMENT, "BAD_VALUES"),
        ({"expression": "y"}, grpc.StatusCode.INVALID_ARGUMENT, "EXPRESSION_NAME"),
    ],
)
def test_projections_refused(
    live: Running,
    solved: solve_pb2.SolveResponse,
    change: dict[str, Any],
    code: grpc.StatusCode,
    reason: str,
) -> None:
    arguments = {"basis": by_key(solved), **change}
    if "expression" not in change:
        arguments.setdefault("sampled", sampled(SINE, X))
    assert refused(lambda: live.stub.Project(pb.ProjectRequest(**arguments)))[:2] == (code, reason)


def test_a_projection_of_nothing_and_a_reconstruction_nowhere(
    live: Running, solved: solve_pb2.SolveResponse
) -> None:
    assert refused(lambda: live.stub.Project(pb.ProjectRequest(basis=by_key(solved))))[1] == "BAD_REQUEST"
    request = pb.ReconstructRequest(basis=by_key(solved), coefficients=encode(np.ones(3)))
    assert refused(lambda: live.stub.Reconstruct(request))[1] == "BAD_REQUEST"
    request.cells.edges.CopyFrom(encode(X))
    assert refused(lambda: live.stub.Reconstruct(request))[1] == "UNSUPPORTED_OPTION"
    outside = pb.ReconstructRequest(
        basis=by_key(solved), coefficients=encode(np.ones(3)), points=encode(np.array([0.5, 1.5]))
    )
    code, reason, metadata = refused(lambda: live.stub.Reconstruct(outside))
    assert (code, reason) == (grpc.StatusCode.INVALID_ARGUMENT, "MESH_OUTSIDE_DOMAIN")
    assert metadata["number_0"] == "1.5"


# ---- sizes, drafts, unknown calls ----


def test_a_large_request_is_refused_with_a_reason(live: Running, solved: solve_pb2.SolveResponse) -> None:
    values = np.zeros((8 * MIB // 8 // 401 + 1, 401))
    request = pb.ProjectRequest(basis=by_key(solved), sampled=sampled(values, X))
    code, reason, metadata = refused(lambda: live.stub.Project(request))
    assert (code, reason) == (grpc.StatusCode.RESOURCE_EXHAUSTED, "LIMIT_EXCEEDED")
    assert int(metadata["requested"]) > int(metadata["limit"]) == 8 * MIB


def test_an_answer_too_large_to_send_is_refused_before_it_is_made(
    live: Running, solved: solve_pb2.SolveResponse
) -> None:
    request = pb.ReconstructRequest(
        basis=by_key(solved),
        coefficients=encode(np.ones((2000, 1))),
        points=encode(np.linspace(0, 1, 1000)),
    )
    code, reason, _ = refused(lambda: live.stub.Reconstruct(request))
    assert (code, reason) == (grpc.StatusCode.RESOURCE_EXHAUSTED, "LIMIT_EXCEEDED")


SERVICE = eigenbasis_service_pb2.DESCRIPTOR.services_by_name["EigenbasisService"]
SERVED = {"Check", "Solve", "WatchSolve", "FetchBasis", "Project", "Reconstruct"}
DRAFTS = sorted({method.name for method in SERVICE.methods} - SERVED)


@pytest.mark.parametrize("name", [*DRAFTS, "NoSuchCall"])
def test_drafted_and_unknown_calls_say_so(live: Running, name: str) -> None:
    path = f"/{SERVICE.full_name}/{name}"
    call = live.channel.unary_unary(path, request_serializer=bytes, response_deserializer=bytes)
    code, reason, metadata = refused(lambda: call(b""))
    assert (code, reason) == (grpc.StatusCode.UNIMPLEMENTED, "UNSUPPORTED_OPTION")
    assert metadata == {"method": path}
