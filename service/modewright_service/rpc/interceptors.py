"""What happens around every call: sizes, counts, and the one place where an exception becomes a status.

Servicers raise `CoreError` and never touch the status themselves. Anything else that they raise is a
defect: it is logged with its traceback under an incident id, and the caller gets INTERNAL with that id and
nothing more.
"""

from __future__ import annotations

import asyncio
import contextlib
import logging
import time
import uuid
from collections.abc import AsyncIterator, Awaitable, Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Final

import grpc
from google.protobuf.message import DecodeError, Message

from modewright_service.core.errors import CoreError, InvalidRequest, LimitExceeded, Reason
from modewright_service.rpc.status import DETAILS_KEY, code_of, status_of
from modewright_service.store.counters import Counters

__all__ = ["CallGuard", "PACKAGE_PREFIX", "UnservedCalls"]

_log = logging.getLogger(__name__)

PACKAGE_PREFIX: Final = "/modewright."

if TYPE_CHECKING:
    _Context = grpc.aio.ServicerContext[Any, Any]
    _Interceptor = grpc.aio.ServerInterceptor[Any, Any]
    _GenericHandler = grpc.GenericRpcHandler[Any, Any]
else:  # gRPC's classes are generic in their stubs only
    _Interceptor = grpc.aio.ServerInterceptor
    _GenericHandler = grpc.GenericRpcHandler


class CallGuard(_Interceptor):
    """Wraps the calls of this package; standard services (health, reflection) pass through untouched.

    drafts: names of methods that the contract has and this version does not answer: UNIMPLEMENTED, with a
        reason.
    message_bytes: largest request and largest answer. gRPC's own receive limit should be a little above it,
    so that most oversized requests get an error with a reason instead of gRPC's bare text.
    """

    def __init__(self, counters: Counters, message_bytes: int, drafts: frozenset[str] = frozenset()) -> None:
        self._counters = counters
        self._drafts = drafts
        self._limit = message_bytes

    async def intercept_service(
        self,
        continuation: Callable[[grpc.HandlerCallDetails], Awaitable[grpc.RpcMethodHandler[Any, Any]]],
        handler_call_details: grpc.HandlerCallDetails,
    ) -> grpc.RpcMethodHandler[Any, Any]:
        """Called by gRPC for every call."""
        handler: Any = await continuation(handler_call_details)
        method = handler_call_details.method
        if handler is None or not method.startswith(PACKAGE_PREFIX):
            return handler  # type: ignore[no-any-return]
        name = method.rpartition("/")[2]
        if name in self._drafts:
            return _refusing(method)
        serialisers = (_reading(handler.request_deserializer), handler.response_serializer)
        if handler.unary_unary is not None:
            return grpc.unary_unary_rpc_method_handler(self._unary(name, handler.unary_unary), *serialisers)
        if handler.unary_stream is not None:
            return grpc.unary_stream_rpc_method_handler(
                self._stream(name, handler.unary_stream), *serialisers
            )
        return handler  # type: ignore[no-any-return]

    def _unary(self, name: str, inner: Any) -> Any:
        async def answer(request: Any, context: _Context) -> Any:
            async with _Call(name, context, self._counters):
                self._check(request, "request")
                response = await inner(request, context)
                self._check(response, "answer")
                return response

        return answer

    def _stream(self, name: str, inner: Any) -> Any:
        async def answer(request: Any, context: _Context) -> AsyncIterator[Any]:
            async with _Call(name, context, self._counters):
                self._check(request, "request")
                # Closed here and not by the collector: a watcher that leaves must leave its solve at once.
                async with contextlib.aclosing(inner(request, context)) as responses:
                    async for response in responses:
                        yield response

        return answer

    def _check(self, message: Any, what: str) -> None:
        if isinstance(message, _Unreadable):
            raise InvalidRequest.at(
                Reason.BAD_REQUEST, what, f"is not a message of this call: {message.why}", message.size
            )
        size = message.ByteSize() if isinstance(message, Message) else 0
        if size > self._limit:
            raise LimitExceeded(
                Reason.LIMIT_EXCEEDED,
                f"the {what} has {size} bytes; at most {self._limit} are allowed",
                metadata={"limit": str(self._limit), "requested": str(size)},
            )


@dataclass(frozen=True)
class _Unreadable:
    """What a request is taken for whose bytes cannot be read."""

    why: str
    size: int


def _reading(parse: Callable[[bytes], Any]) -> Callable[[bytes], Any]:
    """`parse`, but never raising: gRPC would answer its exception with UNKNOWN and no reason."""

    def read(data: bytes) -> Any:
        try:
            return parse(data)
        except DecodeError as error:
            return _Unreadable(str(error), len(data))

    return read


class _Call:
    """One call being answered: counts it, and turns what it raises into its status."""

    def __init__(self, name: str, context: _Context, counters: Counters) -> None:
        self._name = name
        self._context = context
        self._counters = counters
        self._started = 0.0

    async def __aenter__(self) -> None:
        self._started = time.monotonic()
        self._counters.calls_in_flight += 1

    async def __aexit__(self, kind: object, error: BaseException | None, traceback: object) -> None:
        code = grpc.StatusCode.OK
        failure: CoreError | None = None
        if isinstance(error, CoreError):
            failure, code = error, code_of(error)
        elif isinstance(error, asyncio.CancelledError | GeneratorExit):
            code = grpc.StatusCode.CANCELLED
        elif isinstance(error, Exception) and not isinstance(error, grpc.aio.AbortError):
            failure, code = self._incident(error), grpc.StatusCode.INTERNAL
        elif error is not None:
            code = self._context.code() or grpc.StatusCode.UNKNOWN
        self._counters.calls_in_flight -= 1
        self._counters.call_ended(self._name, code.name, time.monotonic() - self._started)
        if failure is not None:
            await abort(self._context, failure)

    def _incident(self, error: Exception) -> CoreError:
        incident = uuid.uuid4().hex[:12]
        _log.error(
            "a call failed unexpectedly", exc_info=error, extra={"incident": incident, "method": self._name}
        )
        return CoreError(
            Reason.INTERNAL,
            f"a fault of the service, which its log describes under the id {incident}",
            metadata={"incident": incident},
        )


async def abort(context: _Context, error: CoreError, code: grpc.StatusCode | None = None) -> None:
    """End the call with an error's status; `code` overrides the one of its reason. Never returns."""
    status = status_of(error, code)
    details = ((DETAILS_KEY, status.SerializeToString()),)
    await context.abort(code or code_of(error), status.message, details)


def _refusing(method: str) -> grpc.RpcMethodHandler[Any, Any]:
    """A handler that refuses a call of any shape at once, before it reads a message."""

    async def refuse(_: AsyncIterator[bytes], context: _Context) -> None:
        error = CoreError(
            Reason.UNSUPPORTED_OPTION,
            f"{method} is not answered by this version of the service",
            metadata={"method": method[:200]},
        )
        await abort(context, error, grpc.StatusCode.UNIMPLEMENTED)

    return grpc.stream_stream_rpc_method_handler(refuse)


class UnservedCalls(_GenericHandler):
    """Answers every call of this package that no servicer takes: other versions' methods, typing errors."""

    def service(
        self, handler_call_details: grpc.HandlerCallDetails
    ) -> grpc.RpcMethodHandler[Any, Any] | None:
        """Called by gRPC for calls that no servicer took."""
        method = handler_call_details.method
        return _refusing(method) if method.startswith(PACKAGE_PREFIX) else None
