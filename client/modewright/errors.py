"""What can go wrong, as one tree of exceptions.

::

    ModewrightError
    ├── InvalidProblem          the problem document or the problem itself is wrong (also a ValueError)
    ├── InvalidRequest          a mesh, an array, a count or a tolerance is wrong (also a ValueError)
    ├── Unsupported             a valid problem of a kind this version does not solve
    ├── SpectrumExhausted       fewer eigenvalues exist than were asked for
    ├── LimitExceeded           larger than the service accepts, or its queue is full
    ├── NotConverged            the tolerance was not reached; the message says what was
    ├── BasisNotFound           the service does not hold this basis, and it could not be sent again
    ├── VersionMismatch         the service or the file speaks another major version
    ├── ServiceNotInstalled     embedded mode needs the ``service`` extra
    ├── ServiceClosed           the service handle was closed
    ├── InternalError           a defect of the service
    └── TransportError          no answer came back
        ├── Unavailable         the service cannot be reached, or stayed unreachable through the retries
        ├── DeadlineExceeded    the time limit of the call ran out (also a TimeoutError)
        ├── Cancelled           the call was cancelled
        ├── HandshakeFailed     TLS was refused by one side; never retried
        └── StartFailed         the embedded service did not start

Each carries ``reason`` (a name of the contract's ``ErrorReason``, or an empty string), ``violations`` (which
field of the document or request, what is wrong, and the offending number), and ``metadata`` (the numbers the
service sent along). ``str()`` names the field and the number. All of them pickle. Nothing here needs gRPC;
the decoding of a gRPC status is in :mod:`modewright.status`.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, replace
from types import MappingProxyType
from typing import Any, Self

__all__ = [
    "BasisNotFound",
    "Cancelled",
    "DeadlineExceeded",
    "HandshakeFailed",
    "InternalError",
    "InvalidProblem",
    "InvalidRequest",
    "LimitExceeded",
    "ModewrightError",
    "NotConverged",
    "ServiceClosed",
    "ServiceNotInstalled",
    "SpectrumExhausted",
    "StartFailed",
    "TransportError",
    "Unavailable",
    "Unsupported",
    "VersionMismatch",
    "Violation",
]

# Messages stay readable in a terminal: the rest is in .violations.
_SHOWN_VIOLATIONS = 5


@dataclass(frozen=True)
class Violation:
    """One wrong field.

    field: path in the document's own names, for example ``layers[1].p`` or ``left.film``.
    message: what is wrong with it.
    number: the offending number as text, empty where there is none.
    """

    field: str
    message: str
    number: str = ""

    def __str__(self) -> str:
        place = f"{self.field}: " if self.field else ""
        number = f" (got {self.number})" if self.number and self.number not in self.message else ""
        return f"{place}{self.message}{number}"


class ModewrightError(Exception):
    """Base of everything this package raises on purpose.

    message: a sentence for a person; without it the violations speak.
    """

    def __init__(
        self,
        message: str = "",
        *,
        reason: str = "",
        violations: Iterable[Violation] = (),
        metadata: Mapping[str, str] | None = None,
    ) -> None:
        super().__init__(message)
        self.message = message
        self.reason = reason
        self.violations = tuple(violations)
        self.metadata: Mapping[str, str] = MappingProxyType(dict(metadata or {}))

    @property
    def retry_after(self) -> float | None:
        """Seconds after which the service says another attempt makes sense, or None."""
        text = self.metadata.get("retry_after_seconds")
        return float(text) if text is not None else None

    def renamed(self, rename: Callable[[str], str]) -> Self:
        """The same error with every field path passed through `rename`."""
        violations = [replace(v, field=rename(v.field)) for v in self.violations]
        return type(self)(self.message, reason=self.reason, violations=violations, metadata=self.metadata)

    def __str__(self) -> str:
        lines = [str(v) for v in self.violations if str(v) not in self.message]
        hidden = len(lines) - _SHOWN_VIOLATIONS
        if hidden > 0:
            lines = [*lines[:_SHOWN_VIOLATIONS], f"... and {hidden} more"]
        detail = "; ".join(lines)
        if self.message and detail:
            return f"{self.message}: {detail}"
        return self.message or detail or self.reason or type(self).__name__

    def __repr__(self) -> str:
        return f"{type(self).__name__}({str(self)!r})"

    def __reduce__(self) -> tuple[Any, ...]:
        return (_rebuild, (type(self), self.message, self.reason, self.violations, dict(self.metadata)))


def _rebuild(
    kind: type[ModewrightError],
    message: str,
    reason: str,
    violations: tuple[Violation, ...],
    metadata: dict[str, str],
) -> ModewrightError:
    return kind(message, reason=reason, violations=violations, metadata=metadata)


class InvalidProblem(ModewrightError, ValueError):
    """The problem can never be solved as stated; ``violations`` lists everything found wrong with it."""


class InvalidRequest(ModewrightError, ValueError):
    """A mesh, an array, a count, a tolerance or an option can never work."""


class Unsupported(ModewrightError):
    """A meaningful problem of a kind that this version does not solve."""


class SpectrumExhausted(ModewrightError):
    """Fewer eigenvalues exist than were asked for."""


class LimitExceeded(ModewrightError):
    """Larger than the service accepts, or its queue is full (then ``retry_after`` may say when to come
    back).
    """


class NotConverged(ModewrightError):
    """The tolerance was not reached within the limits of mesh and degree."""


class BasisNotFound(ModewrightError):
    """The service does not hold this basis and the handle could not send its problem again."""


class VersionMismatch(ModewrightError):
    """The other side, or a file, uses a major version this client does not know."""


class ServiceNotInstalled(ModewrightError):
    """Embedded mode needs the ``service`` extra of this package."""


class ServiceClosed(ModewrightError):
    """The service handle was closed before this call."""


class InternalError(ModewrightError):
    """A defect of the service, or an answer this client cannot make sense of."""


class TransportError(ModewrightError):
    """No answer came back."""


class Unavailable(TransportError):
    """The service cannot be reached, or stayed unreachable through the retries."""


class DeadlineExceeded(TransportError, TimeoutError):
    """The time limit of the call ran out; the service stops working on it as well."""


class Cancelled(TransportError):
    """The call was cancelled."""


class HandshakeFailed(TransportError):
    """TLS was refused by one of the sides: an unknown issuer, a wrong name, a missing client certificate."""


class StartFailed(TransportError):
    """The embedded service did not start; the message ends with the tail of its log."""
