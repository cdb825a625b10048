"""From a failed gRPC call to one of the exceptions of :mod:`modewright.errors`.

The service puts a ``google.rpc.Status`` into the trailing metadata ``grpc-status-details-bin``. Its
``ErrorInfo`` names the reason and carries numbers, its ``BadRequest`` the fields. The reason picks the
class; where there is none (a proxy answered, or nobody did) the status code does. Text is never matched.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable

import grpc
from google.protobuf.message import DecodeError
from google.rpc import error_details_pb2, status_pb2

from modewright import errors

__all__ = ["DOMAIN", "REASONS", "error_from_call", "is_code"]

DOMAIN = "modewright"
_DETAILS_KEY = "grpc-status-details-bin"

# Every reason of the contract; a test holds this table against the enum.
REASONS: dict[str, type[errors.ModewrightError]] = {
    "INVALID_COEFFICIENT": errors.InvalidProblem,
    "NEGATIVE_COEFFICIENT": errors.InvalidProblem,
    "NOT_FINITE": errors.InvalidProblem,
    "ZERO_WEIGHT": errors.InvalidProblem,
    "LAYER_GAP": errors.InvalidProblem,
    "BAD_DOMAIN": errors.InvalidProblem,
    "BAD_SAMPLES": errors.InvalidProblem,
    "EXPRESSION_SYNTAX": errors.InvalidProblem,
    "EXPRESSION_NAME": errors.InvalidProblem,
    "EXPRESSION_TOO_LONG": errors.InvalidProblem,
    "BAD_END_CONDITION": errors.InvalidProblem,
    "BAD_INTERFACE": errors.InvalidProblem,
    "TOO_MANY_MODES": errors.InvalidRequest,
    "BAD_TOLERANCE": errors.InvalidRequest,
    "BAD_SHAPE": errors.InvalidRequest,
    "BAD_DTYPE": errors.InvalidRequest,
    "BAD_MESH": errors.InvalidRequest,
    "MESH_OUTSIDE_DOMAIN": errors.InvalidRequest,
    "BAD_VALUES": errors.InvalidRequest,
    "BAD_REQUEST": errors.InvalidRequest,
    "UNKNOWN_OPTION": errors.InvalidRequest,
    "UNSUPPORTED_END": errors.Unsupported,
    "UNSUPPORTED_COUPLING": errors.Unsupported,
    "UNSUPPORTED_INTERVAL": errors.Unsupported,
    "UNSUPPORTED_COEFFICIENT": errors.Unsupported,
    "UNSUPPORTED_SELECTION": errors.Unsupported,
    "UNSUPPORTED_OPTION": errors.Unsupported,
    "NOT_CONVERGED": errors.NotConverged,
    "VERSION_MISMATCH": errors.VersionMismatch,
    "RESONANCE": errors.Unsupported,
    "BASIS_NOT_FOUND": errors.BasisNotFound,
    "SPECTRUM_EXHAUSTED": errors.SpectrumExhausted,
    "LIMIT_EXCEEDED": errors.LimitExceeded,
    "QUEUE_FULL": errors.LimitExceeded,
    "CANCELLED": errors.Cancelled,
    "DEADLINE": errors.DeadlineExceeded,
    "WORKER_LOST": errors.Unavailable,
    "SHUTTING_DOWN": errors.Unavailable,
    "INTERNAL": errors.InternalError,
}

_CODES: dict[grpc.StatusCode, type[errors.ModewrightError]] = {
    grpc.StatusCode.INVALID_ARGUMENT: errors.InvalidRequest,
    grpc.StatusCode.FAILED_PRECONDITION: errors.Unsupported,
    grpc.StatusCode.UNIMPLEMENTED: errors.Unsupported,
    grpc.StatusCode.OUT_OF_RANGE: errors.InvalidRequest,
    grpc.StatusCode.RESOURCE_EXHAUSTED: errors.LimitExceeded,
    grpc.StatusCode.CANCELLED: errors.Cancelled,
    grpc.StatusCode.DEADLINE_EXCEEDED: errors.DeadlineExceeded,
    grpc.StatusCode.UNAVAILABLE: errors.Unavailable,
}

# The first words of paths into a problem; an error about anything else in the same call is about the request.
_PROBLEM_WORDS = (
    *("problem", "name", "geometry", "layers", "left", "right", "interfaces", "coupling", "domain"),
    "parameters",
)


def is_code(error: grpc.RpcError, code: grpc.StatusCode) -> bool:
    """Whether the call failed with this status code."""
    return isinstance(error, grpc.Call) and error.code() is code


def error_from_call(
    error: grpc.RpcError, rename: Callable[[str], str] | None = None
) -> errors.ModewrightError:
    """The exception for a failed call; `rename` turns field paths into those of the document in hand."""
    if not isinstance(error, grpc.Call):
        return errors.TransportError(f"the call failed before it was sent: {error}")
    code, text = error.code(), error.details() or ""
    status = _details(error.trailing_metadata())
    if status is None:
        kind = _CODES.get(code, errors.InternalError)
        return kind(f"{code.name}: {text}" if text else code.name)
    reason, metadata, violations = _unpack(status)
    kind = REASONS.get(reason) or _CODES.get(code, errors.InternalError)
    if kind is errors.InvalidProblem and violations and not _about_problem(violations):
        kind = errors.InvalidRequest
    message = _without(status.message or text, violations)
    decoded = kind(message, reason=reason, violations=violations, metadata=metadata)
    return decoded.renamed(rename) if rename is not None else decoded


def _details(trailing: Iterable[tuple[str, str | bytes]] | None) -> status_pb2.Status | None:
    """The google.rpc.Status of a call's trailing metadata, if there is a readable one."""
    for key, value in trailing or ():
        if key == _DETAILS_KEY and isinstance(value, bytes):
            try:
                return status_pb2.Status.FromString(value)
            except DecodeError:
                # A proxy's garbage is no reason to hide the code.
                return None
    return None


def _unpack(status: status_pb2.Status) -> tuple[str, dict[str, str], list[errors.Violation]]:
    reason, metadata, violations = "", {}, []
    for detail in status.details:
        info, bad = error_details_pb2.ErrorInfo(), error_details_pb2.BadRequest()
        retry = error_details_pb2.RetryInfo()
        if detail.Unpack(info) and info.domain == DOMAIN:
            reason = info.reason
            metadata.update(info.metadata)
        elif detail.Unpack(bad):
            violations += [(entry.field, entry.description) for entry in bad.field_violations]
        elif detail.Unpack(retry):
            seconds = retry.retry_delay.seconds + retry.retry_delay.nanos * 1e-9
            metadata["retry_after_seconds"] = repr(seconds)
    numbered = [
        errors.Violation(field, text, metadata.get(f"number_{index}", ""))
        for index, (field, text) in enumerate(violations)
    ]
    return reason, metadata, numbered


def _without(message: str, violations: Iterable[errors.Violation]) -> str:
    """The status text without the violations, which it repeats in the contract's field names."""
    for violation in violations:
        bare = f"{violation.field}: {violation.message}"
        # The service appends the number even where the message holds it already.
        for text in (f"{bare} (got {violation.number})", str(violation), bare):
            message = message.replace(text, "", 1)
    return message.strip("; ")


def _about_problem(violations: Iterable[errors.Violation]) -> bool:
    return any(violation.field.split(".")[0].split("[")[0] in _PROBLEM_WORDS for violation in violations)
