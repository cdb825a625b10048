"""Errors as gRPC statuses: the one place where a reason meets a status code.

A failed call carries, beside its code and text, a google.rpc.Status in the trailer
``grpc-status-details-bin`` with ErrorInfo (reason, domain, numbers), BadRequest (field paths) where fields
are at fault, and RetryInfo where another attempt at a stated time makes sense.

The number of the i-th field violation is the metadata entry ``number_<i>``: google.rpc.BadRequest has no
place for it, and the description, which holds it as well, is for people.
"""

from __future__ import annotations

from collections.abc import Mapping
from types import MappingProxyType
from typing import Final

import grpc
from google.protobuf.duration_pb2 import Duration
from google.rpc.error_details_pb2 import BadRequest, ErrorInfo, RetryInfo
from google.rpc.status_pb2 import Status

from modewright_service.core.errors import CoreError, Reason, Violation

__all__ = ["CODES", "DETAILS_KEY", "DOMAIN", "code_of", "status_of"]

DOMAIN: Final = "modewright"
DETAILS_KEY: Final = "grpc-status-details-bin"

# gRPC peers accept 8 KiB of trailing metadata by default. The details travel as base64 (4/3), beside the
# text.
_MAX_DETAILS: Final = 4096
_MAX_TEXT: Final = 800
_MAX_FIELD: Final = 400

_INVALID = (
    *(Reason.INVALID_COEFFICIENT, Reason.NEGATIVE_COEFFICIENT, Reason.NOT_FINITE, Reason.ZERO_WEIGHT),
    *(
        Reason.LAYER_GAP,
        Reason.BAD_DOMAIN,
        Reason.BAD_SAMPLES,
        Reason.EXPRESSION_SYNTAX,
        Reason.EXPRESSION_NAME,
    ),
    *(Reason.EXPRESSION_TOO_LONG, Reason.BAD_END_CONDITION, Reason.BAD_INTERFACE, Reason.TOO_MANY_MODES),
    *(Reason.BAD_TOLERANCE, Reason.BAD_SHAPE, Reason.BAD_DTYPE, Reason.BAD_MESH, Reason.MESH_OUTSIDE_DOMAIN),
    *(Reason.BAD_VALUES, Reason.BAD_REQUEST, Reason.UNKNOWN_OPTION),
)
_PRECONDITION = (
    *(Reason.UNSUPPORTED_END, Reason.UNSUPPORTED_COUPLING, Reason.UNSUPPORTED_INTERVAL),
    *(Reason.UNSUPPORTED_COEFFICIENT, Reason.UNSUPPORTED_SELECTION, Reason.UNSUPPORTED_OPTION),
    *(Reason.NOT_CONVERGED, Reason.VERSION_MISMATCH, Reason.RESONANCE),
)
CODES: Final[Mapping[Reason, grpc.StatusCode]] = MappingProxyType(
    {
        **dict.fromkeys(_INVALID, grpc.StatusCode.INVALID_ARGUMENT),
        **dict.fromkeys(_PRECONDITION, grpc.StatusCode.FAILED_PRECONDITION),
        Reason.BASIS_NOT_FOUND: grpc.StatusCode.NOT_FOUND,
        Reason.SPECTRUM_EXHAUSTED: grpc.StatusCode.OUT_OF_RANGE,
        Reason.LIMIT_EXCEEDED: grpc.StatusCode.RESOURCE_EXHAUSTED,
        Reason.QUEUE_FULL: grpc.StatusCode.RESOURCE_EXHAUSTED,
        Reason.CANCELLED: grpc.StatusCode.CANCELLED,
        Reason.DEADLINE: grpc.StatusCode.DEADLINE_EXCEEDED,
        Reason.WORKER_LOST: grpc.StatusCode.UNAVAILABLE,
        Reason.SHUTTING_DOWN: grpc.StatusCode.UNAVAILABLE,
        Reason.INTERNAL: grpc.StatusCode.INTERNAL,
    }
)


def code_of(error: CoreError) -> grpc.StatusCode:
    """The status code that an error's reason comes with."""
    return CODES[error.reason]


def status_of(error: CoreError, code: grpc.StatusCode | None = None) -> Status:
    """The google.rpc.Status of an error; `code` overrides the one of its reason.

    Violations beyond what a trailer can hold are left out and counted in the metadata entry
    ``violations_omitted``.
    """
    number = (code or code_of(error)).value[0]
    shown = len(error.violations)
    while True:
        status = Status(code=number, message=_cut(str(error), _MAX_TEXT))
        for detail in _details(error, error.violations[:shown]):
            status.details.add().Pack(detail)
        if status.ByteSize() <= _MAX_DETAILS or not shown:
            return status
        shown = shown * 3 // 4


def _details(error: CoreError, violations: tuple[Violation, ...]) -> list[ErrorInfo | BadRequest | RetryInfo]:
    metadata = {key: _cut(value, _MAX_FIELD) for key, value in error.metadata.items()}
    metadata |= {f"number_{i}": _cut(v.number, _MAX_FIELD) for i, v in enumerate(violations) if v.number}
    omitted = len(error.violations) - len(violations)
    if omitted:
        metadata["violations_omitted"] = str(omitted)
    details: list[ErrorInfo | BadRequest | RetryInfo]
    details = [ErrorInfo(reason=error.reason.value, domain=DOMAIN, metadata=metadata)]
    if violations:
        details.append(BadRequest(field_violations=[_field(violation) for violation in violations]))
    wait = error.metadata.get("retry_after_seconds")
    if wait is not None:
        delay = Duration()
        delay.FromNanoseconds(round(float(wait) * 1e9))
        details.append(RetryInfo(retry_delay=delay))
    return details


def _field(violation: Violation) -> BadRequest.FieldViolation:
    text = violation.message
    if violation.number and violation.number not in text:
        text = f"{text} (got {violation.number})"
    reason = violation.reason.value if violation.reason else ""
    return BadRequest.FieldViolation(
        field=_cut(violation.field, _MAX_FIELD), description=_cut(text, _MAX_FIELD), reason=reason
    )


def _cut(text: str, length: int) -> str:
    return text if len(text) <= length else text[: length - 3] + "..."
