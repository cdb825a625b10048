"""The exception tree, its pickling, and the decoding of gRPC statuses."""

from __future__ import annotations

import pickle
import re
from collections.abc import Iterator

import grpc
import pytest
from google.protobuf import duration_pb2
from google.rpc import error_details_pb2, status_pb2

import modewright
from modewright import errors
from modewright.status import DOMAIN, REASONS, error_from_call
from modewright.v1 import errors_pb2


def _tree(kind: type[errors.ModewrightError]) -> Iterator[type[errors.ModewrightError]]:
    yield kind
    for below in kind.__subclasses__():
        yield from _tree(below)


ALL = sorted(_tree(errors.ModewrightError), key=lambda kind: kind.__name__)


class _Failed(grpc.RpcError, grpc.Call):  # type: ignore[misc]
    """A failed call as gRPC raises it, with given parts."""

    def __init__(self, code: grpc.StatusCode, text: str, status: status_pb2.Status | bytes | None) -> None:
        self._code, self._text = code, text
        if isinstance(status, status_pb2.Status):
            status = status.SerializeToString()
        self._trailing = (("other", "x"), ("grpc-status-details-bin", status)) if status is not None else None

    def code(self) -> grpc.StatusCode:
        return self._code

    def details(self) -> str:
        return self._text

    def trailing_metadata(self) -> object:
        return self._trailing

    def initial_metadata(self) -> object:
        return None

    def is_active(self) -> bool:
        return False

    def time_remaining(self) -> None:
        return None

    def cancel(self) -> bool:
        return False

    def add_callback(self, callback: object) -> bool:
        return False


def _status(
    reason: str, *fields: tuple[str, str], domain: str = DOMAIN, **metadata: str
) -> status_pb2.Status:
    message = "; ".join(f"{field}: {text}" for field, text in fields) or "no fields"
    status = status_pb2.Status(message=message)
    info = error_details_pb2.ErrorInfo(reason=reason, domain=domain, metadata=metadata)
    status.details.add().Pack(info)
    bad = error_details_pb2.BadRequest()
    for field, text in fields:
        bad.field_violations.add(field=field, description=text)
    status.details.add().Pack(bad)
    return status


# ---- the tree ----


def test_the_tree_in_the_docstring_is_the_real_one() -> None:
    assert errors.__doc__ is not None
    drawn = re.findall(r"^    ([│├└─ ]*)(\w+)(?:\s|$)", errors.__doc__, flags=re.MULTILINE)
    parents: dict[str, str] = {}
    path: list[str] = []
    for indent, name in drawn:
        depth = len(indent) // 4
        path[depth:] = [name]
        parents[name] = path[depth - 1] if depth else "Exception"
    real = {kind.__name__: kind.__bases__[0].__name__ for kind in ALL}
    assert parents == real


def test_all_of_the_tree_is_public() -> None:
    assert {kind.__name__ for kind in ALL} | {"Violation"} == set(errors.__all__)
    assert set(errors.__all__) <= set(modewright.__all__)


@pytest.mark.parametrize("kind", ALL)
def test_errors_pickle(kind: type[errors.ModewrightError]) -> None:
    error = kind(
        "why",
        reason="NOT_FINITE",
        violations=[errors.Violation("layers[0].p", "must be finite", "nan")],
        metadata={"limit": "3"},
    )
    again = pickle.loads(pickle.dumps(error))
    assert type(again) is kind
    assert (again.message, again.reason, again.violations) == (error.message, error.reason, error.violations)
    assert dict(again.metadata) == {"limit": "3"}
    assert str(again) == str(error) == "why: layers[0].p: must be finite (got nan)"


def test_invalid_input_is_a_value_error_and_a_deadline_a_timeout() -> None:
    assert issubclass(errors.InvalidProblem, ValueError)
    assert issubclass(errors.InvalidRequest, ValueError)
    assert issubclass(errors.DeadlineExceeded, TimeoutError)


def test_messages_stay_readable() -> None:
    many = [errors.Violation(f"layers[{i}].p", "must be positive", str(-i)) for i in range(1000)]
    error = errors.InvalidProblem("", violations=many)
    assert len(str(error)) < 400
    assert "995 more" in str(error)
    assert len(error.violations) == 1000


# ---- decoding ----


def test_every_reason_of_the_contract_has_its_class() -> None:
    names = {name.removeprefix("ERROR_REASON_") for name in errors_pb2.ErrorReason.keys()}
    assert set(REASONS) == names - {"UNSPECIFIED"}


@pytest.mark.parametrize("reason", sorted(REASONS))
def test_the_reason_picks_the_class(reason: str) -> None:
    failed = _Failed(grpc.StatusCode.UNKNOWN, "text", _status(reason))
    decoded = error_from_call(failed)
    assert type(decoded) is REASONS[reason]
    assert decoded.reason == reason


def test_fields_and_numbers_are_decoded() -> None:
    fields = (("layers[1].p", "must not be negative (got -2.0)"), ("left.film", "must be finite"))
    status = _status("NEGATIVE_COEFFICIENT", *fields, number_0="-2.0", number_1="nan", x="0.25")
    decoded = error_from_call(_Failed(grpc.StatusCode.INVALID_ARGUMENT, "text", status))
    assert type(decoded) is errors.InvalidProblem
    assert [(v.field, v.number) for v in decoded.violations] == [
        ("layers[1].p", "-2.0"),
        ("left.film", "nan"),
    ]
    assert decoded.metadata["x"] == "0.25"
    assert str(decoded) == "layers[1].p: must not be negative (got -2.0); left.film: must be finite (got nan)"


def test_renamed_fields_leave_no_trace_of_the_old_names() -> None:
    status = _status("NEGATIVE_COEFFICIENT", ("layers[1].p", "must not be negative"), number_0="-2.0")
    failed = _Failed(grpc.StatusCode.INVALID_ARGUMENT, "text", status)
    decoded = error_from_call(
        failed, lambda path: path.replace("layers[1].p", "stack.layers[1].conductivity")
    )
    assert str(decoded) == "stack.layers[1].conductivity: must not be negative (got -2.0)"


def test_a_problem_s_reason_about_an_argument_is_an_invalid_request() -> None:
    status = _status("EXPRESSION_NAME", ("expression", "y is not a known name"))
    decoded = error_from_call(_Failed(grpc.StatusCode.INVALID_ARGUMENT, "text", status))
    assert type(decoded) is errors.InvalidRequest


def test_retry_info_is_decoded() -> None:
    status = _status("QUEUE_FULL")
    delay = duration_pb2.Duration(seconds=1, nanos=500_000_000)
    status.details.add().Pack(error_details_pb2.RetryInfo(retry_delay=delay))
    decoded = error_from_call(_Failed(grpc.StatusCode.RESOURCE_EXHAUSTED, "text", status))
    assert type(decoded) is errors.LimitExceeded
    assert decoded.retry_after == 1.5


@pytest.mark.parametrize(
    ("code", "kind"),
    [
        (grpc.StatusCode.INVALID_ARGUMENT, errors.InvalidRequest),
        (grpc.StatusCode.UNIMPLEMENTED, errors.Unsupported),
        (grpc.StatusCode.RESOURCE_EXHAUSTED, errors.LimitExceeded),
        (grpc.StatusCode.UNAVAILABLE, errors.Unavailable),
        (grpc.StatusCode.DEADLINE_EXCEEDED, errors.DeadlineExceeded),
        (grpc.StatusCode.CANCELLED, errors.Cancelled),
        (grpc.StatusCode.INTERNAL, errors.InternalError),
        (grpc.StatusCode.UNKNOWN, errors.InternalError),
        (grpc.StatusCode.UNAUTHENTICATED, errors.InternalError),
    ],
)
@pytest.mark.parametrize("details", [None, b"\xff\xff garbage"], ids=["none", "garbage"])
def test_without_details_the_code_picks_the_class(
    code: grpc.StatusCode, kind: type[errors.ModewrightError], details: bytes | None
) -> None:
    decoded = error_from_call(_Failed(code, "what the proxy said", details))
    assert type(decoded) is kind
    assert "what the proxy said" in str(decoded)
    assert code.name in str(decoded)


def test_another_domain_s_reason_is_not_ours() -> None:
    status = _status("INVALID_COEFFICIENT", domain="proxy.example")
    decoded = error_from_call(_Failed(grpc.StatusCode.UNAVAILABLE, "text", status))
    assert type(decoded) is errors.Unavailable
    assert decoded.reason == ""
