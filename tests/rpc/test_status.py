"""Reasons and statuses: one registry, one code for each, details that fit into a trailer.

Source of the detail messages and the meaning of the codes: the published google.rpc error model (AIP-193).
"""

from __future__ import annotations

import grpc
import pytest
from google.rpc.error_details_pb2 import BadRequest, ErrorInfo, RetryInfo
from google.rpc.status_pb2 import Status

from modewright.v1 import errors_pb2
from modewright_service.core.errors import CoreError, InvalidProblem, LimitExceeded, Reason, Violation
from modewright_service.rpc.status import CODES, status_of

BLOCKS = {
    range(1, 30): grpc.StatusCode.INVALID_ARGUMENT,
    range(30, 50): grpc.StatusCode.FAILED_PRECONDITION,
    range(50, 51): grpc.StatusCode.NOT_FOUND,
    range(51, 52): grpc.StatusCode.OUT_OF_RANGE,
    range(52, 54): grpc.StatusCode.RESOURCE_EXHAUSTED,
    range(54, 55): grpc.StatusCode.CANCELLED,
    range(55, 56): grpc.StatusCode.DEADLINE_EXCEEDED,
    range(56, 58): grpc.StatusCode.UNAVAILABLE,
    range(58, 59): grpc.StatusCode.INTERNAL,
}
PREFIX = "ERROR_REASON_"


def contract_reasons() -> dict[str, int]:
    values = errors_pb2.ErrorReason.items()
    return {name.removeprefix(PREFIX): number for name, number in values if number}


def details(status: Status) -> tuple[ErrorInfo, BadRequest, RetryInfo]:
    found = ErrorInfo(), BadRequest(), RetryInfo()
    for packed in status.details:
        assert any(packed.Unpack(message) for message in found)
    return found


def test_the_core_and_the_contract_have_the_same_reasons() -> None:
    assert {reason.value for reason in Reason} == set(contract_reasons())


@pytest.mark.parametrize("reason", list(Reason))
def test_every_reason_has_the_code_of_its_block_in_the_contract(reason: Reason) -> None:
    number = contract_reasons()[reason.value]
    expected = next(code for block, code in BLOCKS.items() if number in block)
    status = status_of(CoreError(reason, "what happened", metadata={"reached": "1e-07"}))
    info, bad, _ = details(status)
    assert CODES[reason] is expected
    assert status.code == expected.value[0]
    assert status.message == "what happened"
    assert (info.reason, info.domain, dict(info.metadata)) == (
        reason.value,
        "modewright",
        {"reached": "1e-07"},
    )
    assert not bad.field_violations


def test_violations_name_field_number_and_reason() -> None:
    error = InvalidProblem(
        Reason.NEGATIVE_COEFFICIENT,
        violations=[
            Violation("layers[1].p", "p must be positive", "-2.0", Reason.NEGATIVE_COEFFICIENT),
            Violation("left.kind", "is missing", "", Reason.BAD_END_CONDITION),
        ],
    )
    info, bad, _ = details(status_of(error))
    assert [v.field for v in bad.field_violations] == ["layers[1].p", "left.kind"]
    assert [v.reason for v in bad.field_violations] == ["NEGATIVE_COEFFICIENT", "BAD_END_CONDITION"]
    assert bad.field_violations[0].description == "p must be positive (got -2.0)"
    assert dict(info.metadata) == {"number_0": "-2.0"}


def test_a_wait_becomes_retry_info() -> None:
    error = LimitExceeded(Reason.QUEUE_FULL, "full", metadata={"retry_after_seconds": "1.25"})
    _, _, retry = details(status_of(error))
    assert (retry.retry_delay.seconds, retry.retry_delay.nanos) == (1, 250_000_000)


def test_many_long_violations_still_fit_a_trailer() -> None:
    violations = [
        Violation(f"layers[{i}].p", "ä long story " * 100, "9" * 1000, Reason.BAD_SAMPLES) for i in range(64)
    ]
    status = status_of(InvalidProblem(Reason.BAD_SAMPLES, "", violations, {"note": "n" * 5000}))
    info, bad, _ = details(status)
    shown = len(bad.field_violations)
    # gRPC refuses trailers above 8 KiB by default; base64 makes four bytes of three.
    assert status.ByteSize() * 4 // 3 < 7 * 1024
    assert shown >= 1
    assert int(info.metadata["violations_omitted"]) == 64 - shown
    assert bad.field_violations[0].field == "layers[0].p"
