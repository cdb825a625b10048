"""Typed errors of the numerical core.

::

    CoreError
    +-- InvalidProblem       the problem can never be solved as written
    +-- InvalidRequest       the request around it can never work (meshes, shapes, counts)
    +-- Unsupported          well posed, but not handled by this version
    +-- SpectrumExhausted    fewer eigenvalues exist than were asked for
    +-- LimitExceeded        a size limit of this service
    +-- NotConverged         the accuracy asked for was not reached
    +-- Interrupted          cancelled, or out of time

Every error carries a machine-readable ``reason`` (the names are those of the contract's
``ErrorReason`` without its prefix), the violated fields in the problem document's own names, and the
offending numbers. Nobody needs to match the English text.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from enum import StrEnum
from typing import Any


class Reason(StrEnum):
    """Why a call failed; one registry for the core, the service and its clients."""

    INVALID_COEFFICIENT = "INVALID_COEFFICIENT"
    NEGATIVE_COEFFICIENT = "NEGATIVE_COEFFICIENT"
    NOT_FINITE = "NOT_FINITE"
    ZERO_WEIGHT = "ZERO_WEIGHT"
    LAYER_GAP = "LAYER_GAP"
    BAD_DOMAIN = "BAD_DOMAIN"
    BAD_SAMPLES = "BAD_SAMPLES"
    EXPRESSION_SYNTAX = "EXPRESSION_SYNTAX"
    EXPRESSION_NAME = "EXPRESSION_NAME"
    EXPRESSION_TOO_LONG = "EXPRESSION_TOO_LONG"
    BAD_END_CONDITION = "BAD_END_CONDITION"
    BAD_INTERFACE = "BAD_INTERFACE"
    UNSUPPORTED_END = "UNSUPPORTED_END"
    UNSUPPORTED_COUPLING = "UNSUPPORTED_COUPLING"
    UNSUPPORTED_INTERVAL = "UNSUPPORTED_INTERVAL"
    UNSUPPORTED_COEFFICIENT = "UNSUPPORTED_COEFFICIENT"
    UNSUPPORTED_SELECTION = "UNSUPPORTED_SELECTION"
    UNSUPPORTED_OPTION = "UNSUPPORTED_OPTION"
    TOO_MANY_MODES = "TOO_MANY_MODES"
    BAD_TOLERANCE = "BAD_TOLERANCE"
    BAD_SHAPE = "BAD_SHAPE"
    BAD_DTYPE = "BAD_DTYPE"
    BAD_MESH = "BAD_MESH"
    MESH_OUTSIDE_DOMAIN = "MESH_OUTSIDE_DOMAIN"
    BAD_VALUES = "BAD_VALUES"
    BAD_REQUEST = "BAD_REQUEST"
    UNKNOWN_OPTION = "UNKNOWN_OPTION"
    BASIS_NOT_FOUND = "BASIS_NOT_FOUND"
    SPECTRUM_EXHAUSTED = "SPECTRUM_EXHAUSTED"
    NOT_CONVERGED = "NOT_CONVERGED"
    LIMIT_EXCEEDED = "LIMIT_EXCEEDED"
    QUEUE_FULL = "QUEUE_FULL"
    CANCELLED = "CANCELLED"
    DEADLINE = "DEADLINE"
    WORKER_LOST = "WORKER_LOST"
    SHUTTING_DOWN = "SHUTTING_DOWN"
    VERSION_MISMATCH = "VERSION_MISMATCH"
    RESONANCE = "RESONANCE"
    INTERNAL = "INTERNAL"


@dataclass(frozen=True)
class Violation:
    """One violated field.

    ``field`` is a path in the problem document's names (``layers[1].p``, ``left.film``), ``number``
    the offending value as text, ``reason`` the reason of this one violation where several differ.
    """

    field: str
    message: str
    number: str = ""
    reason: Reason | None = None

    def __str__(self) -> str:
        value = f" (got {self.number})" if self.number else ""
        return f"{self.field}: {self.message}{value}"


class CoreError(Exception):
    """Base of the core's errors; plain fields only, so that it pickles between processes.

    ``violations`` may be empty (an interruption violates nothing); ``metadata`` holds further numbers
    as text. ``str()`` names every violated field and its number.
    """

    def __init__(
        self,
        reason: Reason,
        message: str = "",
        violations: Sequence[Violation] = (),
        metadata: Mapping[str, str] | None = None,
    ) -> None:
        self.reason = Reason(reason)
        self.message = message
        self.violations = tuple(violations)
        self.metadata: dict[str, str] = dict(metadata or {})
        super().__init__(self.reason, message, self.violations, self.metadata)

    def __str__(self) -> str:
        parts = [self.message] if self.message else []
        parts.extend(str(violation) for violation in self.violations)
        return "; ".join(parts) or self.reason.value

    def __reduce__(self) -> tuple[Any, ...]:
        return type(self), (self.reason, self.message, self.violations, self.metadata)

    @classmethod
    def at(
        cls, reason: Reason, field: str, message: str, number: object = "", **metadata: object
    ) -> CoreError:
        """The error for one violated field; ``number`` and the metadata are turned into text."""
        text = number_text(number)
        extra = {key: number_text(value) for key, value in metadata.items()}
        return cls(reason, "", (Violation(field, message, text, reason),), extra)


class InvalidProblem(CoreError):
    """The problem is not one that can be solved: a coefficient, a layer, an end or an interface."""


class InvalidRequest(CoreError):
    """A mesh, an array's shape or type, a count or a tolerance that can never work."""


class Unsupported(CoreError):
    """A well-posed problem of a kind that this version does not handle."""


class SpectrumExhausted(CoreError):
    """Fewer eigenvalues exist than were asked for."""


class LimitExceeded(CoreError):
    """A size limit of the service was passed."""


class NotConverged(CoreError):
    """The accuracy asked for was not reached; the metadata say what was."""


class Interrupted(CoreError):
    """Raised between the loops of a computation when it was cancelled or ran out of time."""


def number_text(number: object) -> str:
    """A number as text that reads back to the same double; text is kept as it is."""
    if isinstance(number, str):
        return number
    if isinstance(number, bool | int):
        return str(number)
    try:
        return repr(float(number))  # type: ignore[arg-type]
    except (TypeError, ValueError):
        return str(number)
