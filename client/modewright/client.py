"""The handle of a service: embedded in this process's company, or remote.

A :class:`Service` is a description - an address or how to start one, TLS, time limits - until its first
call, which makes the channel (and starts the embedded service). So it pickles, and a copy that arrives in
another process, by pickle or by fork, connects there by itself.
"""

from __future__ import annotations

import math
import os
from collections.abc import Callable, Iterable, Iterator, Mapping
from dataclasses import dataclass
from types import TracebackType
from typing import Any, Self, TypeVar

import grpc

from modewright import channels, embedded, errors
from modewright.arrays import refuse
from modewright.basis import Basis
from modewright.channels import MAX_MESSAGE, Target, Tls
from modewright.checks import Checks, quote
from modewright.document.messages import message_from_problem, word_of
from modewright.ends import Ends, ends_from_message
from modewright.forking import ForkSafeLock
from modewright.problem import Problem
from modewright.retry import Retry
from modewright.stack import Stack
from modewright.v1 import basis_pb2, eigenbasis_service_pb2_grpc, solve_pb2

__all__ = ["TIMEOUTS", "Check", "Progress", "Service", "connect"]

T = TypeVar("T")

ADDRESS_VARIABLE = "MODEWRIGHT_ADDRESS"
ROUTE_HEADER = "modewright-route"
_API_MAJOR = "1"

# Seconds. None is infinite: a forgotten service must not hold a pipeline for ever.
TIMEOUTS: Mapping[str, float] = {
    "Check": 30.0,
    "Solve": 600.0,
    "WatchSolve": 600.0,
    "FetchBasis": 300.0,
    "Project": 300.0,
    "Reconstruct": 300.0,
}


@dataclass(frozen=True)
class Check:
    """What the service would make of a problem; nothing was solved.

    modes, rung, rtol: the specification as resolved. ends: what holds at both ends. scale: of the
    eigenvalues.
    cached: whether a solve would be answered at once. pieces, unknowns, seconds: a rough forecast of the
    work.
    remarks: on things that are valid but unusual.
    """

    problem_digest: str
    basis_key: str
    algorithm_version: str
    api_version: str
    modes: int
    rung: int
    rtol: float
    ends: Ends
    scale: float
    cached: bool
    pieces: int
    unknowns: int
    seconds: float
    remarks: tuple[str, ...]


@dataclass(frozen=True)
class Progress:
    """How far a solve is. stage: "starting" while the service has no worker that is ready, "queued" while it
    waits for one, "computing"; steps: signs of life of the solver.
    """

    stage: str
    queue_position: int
    elapsed_seconds: float
    steps: int


@dataclass
class _Attachment:
    """What one process holds for a handle."""

    pid: int
    target: Target
    running: embedded.Running | None
    stub: Any
    suspect: bool = False


_lock = ForkSafeLock()


def _give_back(attachment: _Attachment) -> None:
    channels.release(attachment.target)
    if attachment.running is not None:
        embedded.release(attachment.running)


def connect(
    address: str | None = None,
    *,
    tls: Tls | bool | None = None,
    timeout: float | None = None,
    workers: int = 1,
    start_timeout: float = 60.0,
) -> Service:
    """A service: the one at `address`, or one embedded in this process's company.

    address: "host:port", "dns:///name:port" or "unix:/path"; where it is None, the environment variable
    MODEWRIGHT_ADDRESS, and without that the embedded service, a child process started at the first call.
    tls: True for TLS with gRPC's built-in issuers, or a :class:`~modewright.channels.Tls`.
    timeout: seconds for every call in place of the defaults of TIMEOUTS.
    workers, start_timeout: of the embedded service.

    Returns at once: what can go wrong with the connection shows in the first call.
    """
    if address is not None and (not isinstance(address, str) or not address.strip()):
        refuse("address", f"must be a target such as host:port, not {quote(address)}", reason="BAD_REQUEST")
    if isinstance(workers, bool) or not isinstance(workers, int) or workers < 1:
        refuse("workers", "must be a whole number from 1", workers, reason="BAD_REQUEST")
    _seconds("start_timeout", start_timeout)
    if timeout is not None:
        _seconds("timeout", timeout)
    certificates = Tls() if tls is True else (tls or None)
    return Service(address, certificates, timeout, embedded.Options(workers, start_timeout))


def _seconds(name: str, value: float) -> float:
    number = isinstance(value, (int, float)) and not isinstance(value, bool)
    if not number or not 0.0 < value < math.inf:
        refuse(name, "must be a positive, finite number of seconds", value, reason="BAD_REQUEST")
    return float(value)


class Service:
    """A service as seen from here; made by :func:`connect`. Use it in a ``with`` statement, or call
    `close`.
    """

    def __init__(
        self, address: str | None, tls: Tls | None, timeout: float | None, options: embedded.Options
    ) -> None:
        self._address = address
        self._tls = tls
        self._timeout = timeout
        self._options = options
        self._attachment: _Attachment | None = None
        self._closed = False

    # ---- life ----

    @property
    def address(self) -> str:
        """The gRPC target; starts the embedded service if it is not running yet."""
        return self._attach().target.address

    def close(self) -> None:
        """Gives back the channel and, as its last user, stops the embedded service; refuses later calls."""
        self._closed = True
        self._detach()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def __reduce__(self) -> tuple[Any, ...]:
        return Service, (self._address, self._tls, self._timeout, self._options)

    def __repr__(self) -> str:
        place = self._address or os.environ.get(ADDRESS_VARIABLE) or "embedded"
        return f"Service({place}{', TLS' if self._tls else ''}{', closed' if self._closed else ''})"

    def _attach(self) -> _Attachment:
        """What this process needs for calls, made at the first one and made again in a forked child."""
        if self._closed:
            raise errors.ServiceClosed("this service handle was closed; connect() makes a new one")
        held = self._attachment
        if held is not None and held.pid == os.getpid():
            if not (held.suspect and held.running is not None and not held.running.alive()):
                return held
            # The embedded service was killed: another one takes over.
            self._detach()
        made = self._make_attachment()
        with _lock:
            # Another thread may have been faster, or have closed the handle.
            if not self._closed and (self._attachment is None or self._attachment.pid != made.pid):
                self._attachment = made
                return made
        _give_back(made)
        return self._attach()

    def _make_attachment(self) -> _Attachment:
        address = self._address or os.environ.get(ADDRESS_VARIABLE)
        running = None if address else embedded.acquire(self._options)
        target = Target(address, self._tls) if address else Target(running.address if running else "")
        stub = eigenbasis_service_pb2_grpc.EigenbasisServiceStub(channels.lease(target))
        return _Attachment(os.getpid(), target, running, stub)

    def _detach(self) -> None:
        with _lock:
            held, self._attachment = self._attachment, None
        if held is not None and held.pid == os.getpid():
            _give_back(held)

    # ---- calls ----

    def check(
        self,
        problem: Problem | Stack | Mapping[str, Any],
        modes: int | None = None,
        *,
        rtol: float | None = None,
        timeout: float | None = None,
    ) -> Check:
        """Validates a problem and says what a solve would be; solves nothing. Raises as `solve` does."""
        problem = as_problem(problem)
        request = solve_pb2.CheckRequest(problem=message_from_problem(problem))
        if modes is not None or rtol is not None:
            request.specification.CopyFrom(specification(8 if modes is None else modes, rtol))
        answer = self.unary("Check", request, problem, timeout=timeout)
        return Check(
            problem_digest=answer.problem_digest,
            basis_key=answer.basis_key,
            algorithm_version=answer.algorithm_version,
            api_version=answer.api_version,
            modes=answer.specification.modes,
            rung=answer.specification.rung,
            rtol=answer.specification.rtol,
            ends=ends_from_message(answer.ends),
            scale=answer.scale,
            cached=answer.cached,
            pieces=answer.cost.pieces,
            unknowns=answer.cost.unknowns,
            seconds=answer.cost.seconds,
            remarks=tuple(answer.remarks),
        )

    def solve(
        self,
        problem: Problem | Stack | Mapping[str, Any],
        modes: int,
        *,
        rtol: float | None = None,
        timeout: float | None = None,
        progress: Callable[[Progress], object] | None = None,
    ) -> Basis:
        """The lowest `modes` eigenpairs of a problem: exactly so many, or an error.

        problem: a :class:`~modewright.problem.Problem`, a stack, or a document as a dictionary.
        rtol: accuracy relative to max(abs(lambda), scale), from 1e-12 to 1e-2; the service's default is 1e-9.
        timeout: seconds for all of it. progress: called now and then with a :class:`Progress` while it lasts.

        Raises InvalidProblem, InvalidRequest, Unsupported, SpectrumExhausted, LimitExceeded, NotConverged and
        what the transport adds (:mod:`modewright.errors`).
        """
        problem = as_problem(problem)
        message, wanted = message_from_problem(problem), specification(modes, rtol)
        if progress is None:
            request = solve_pb2.SolveRequest(problem=message, specification=wanted)
            answer = self.unary("Solve", request, problem, timeout=timeout)
        else:
            watch = solve_pb2.WatchSolveRequest(problem=message, specification=wanted)
            answer = self._watch(watch, problem, progress, timeout)
        return Basis.from_answer(self, problem, modes, answer)

    def _watch(
        self,
        request: solve_pb2.WatchSolveRequest,
        problem: Problem,
        progress: Callable[[Progress], object],
        timeout: float | None,
    ) -> Any:
        def consume(updates: Iterable[solve_pb2.WatchSolveResponse]) -> Any:
            for update in updates:
                if update.WhichOneof("update") == "answer":
                    return update.answer
                report = update.progress
                stage = word_of(solve_pb2.SolveStage, "SOLVE_STAGE", report.stage)
                progress(Progress(stage, report.queue_position, report.elapsed_seconds, report.steps))
            raise errors.InternalError("the stream of progress ended without the answer")

        answer = self.stream("WatchSolve", lambda: request, consume, problem, timeout=timeout)
        _check_version(answer.api_version)
        return answer

    # ---- what basis handles call ----

    def time_limit(self, method: str, timeout: float | None) -> float:
        """Seconds for a call: its own, the handle's, or the method's default."""
        if timeout is not None:
            return _seconds("timeout", timeout)
        return self._timeout if self._timeout is not None else TIMEOUTS[method]

    def unary(
        self,
        method: str,
        request: Any,
        problem: Problem | None,
        *,
        resend: Callable[[], Any] | None = None,
        rename: Callable[[str], str] | None = None,
        timeout: float | None = None,
    ) -> Any:
        """One unary call with its repetitions; what `resend` makes is sent after an unknown basis."""
        _check_size(request)

        def send(message: Any, left: float) -> Any:
            call = getattr(self._attach().stub, method).future(
                message, timeout=left, metadata=_route(problem)
            )
            return self._watched(call, call.result)

        def send_whole(left: float) -> Any:
            assert resend is not None
            message = resend()
            _check_size(message)
            return send(message, left)

        retry = self._retry(method, problem, rename, timeout)
        answer = retry(lambda left: send(request, left), send_whole if resend is not None else None)
        _check_version(answer.api_version)
        return answer

    def stream(
        self,
        method: str,
        request: Callable[[], Any],
        consume: Callable[[Iterator[Any]], T],
        problem: Problem | None,
        *,
        resend: Callable[[], Any] | None = None,
        timeout: float | None = None,
    ) -> T:
        """One call with a streamed answer: what `consume` makes of it.

        `request` is made anew for every attempt, so that it can ask for what is still missing.
        """

        def invoke(make: Callable[[], Any]) -> Callable[[float], T]:
            def once(left: float) -> T:
                call = getattr(self._attach().stub, method)(make(), timeout=left, metadata=_route(problem))
                return self._watched(call, lambda: consume(call))

            return once

        retry = self._retry(method, problem, None, timeout)
        return retry(invoke(request), invoke(resend) if resend is not None else None)

    def _retry(
        self,
        method: str,
        problem: Problem | None,
        rename: Callable[[str], str] | None,
        timeout: float | None,
    ) -> Retry:
        # The start of an embedded service has its own time limit and does not count towards the call's.
        self._attach()
        names = [rename or _argument] if problem is None else [problem.field_in_document, rename or _argument]

        def renamed(path: str) -> str:
            for name in names:
                path = name(path)
            return path

        def handshake(left: float) -> str | None:
            return channels.handshake_failure(self._attach().target, left)

        return Retry(
            timeout=self.time_limit(method, timeout),
            rename=renamed,
            handshake=handshake if self._tls is not None else None,
        )

    def _watched(self, call: Any, wait: Callable[[], T]) -> T:
        """The outcome of a running call, which is cancelled when the wait for it is interrupted."""
        try:
            return wait()
        except grpc.RpcError as error:
            held = self._attachment
            if held is not None and call.code() is grpc.StatusCode.UNAVAILABLE:
                held.suspect = True
            raise error
        except grpc.FutureCancelledError as error:
            raise errors.Cancelled("the call was cancelled") from error
        except BaseException:
            call.cancel()
            raise


def as_problem(problem: Problem | Stack | Mapping[str, Any]) -> Problem:
    """A problem from any of the forms that calls accept. Raises InvalidProblem."""
    if isinstance(problem, Problem):
        return problem
    if isinstance(problem, Stack):
        return problem.problem()
    if isinstance(problem, Mapping):
        return Problem.from_dict(problem)
    checks = Checks()
    checks.wrong("problem", f"must be a Problem, a Stack or a document, not {quote(problem)}")
    checks.finish()
    raise AssertionError("unreachable")


def specification(modes: int, rtol: float | None) -> basis_pb2.BasisSpecification:
    """What is wanted of a basis. Raises InvalidRequest for what cannot be sent; the service checks ranges."""
    if isinstance(modes, bool) or not hasattr(modes, "__index__"):
        refuse("modes", f"must be a whole number, not {quote(modes)}", reason="TOO_MANY_MODES")
    count = modes.__index__()
    if not 1 <= count < 2**63:
        refuse("modes", "must be a whole number from 1", count, reason="TOO_MANY_MODES")
    wanted = basis_pb2.BasisSpecification(modes=count)
    if rtol is not None:
        if isinstance(rtol, bool) or not isinstance(rtol, (int, float)) or not rtol > 0.0:
            refuse("rtol", f"must be a positive number, not {quote(rtol)}", reason="BAD_TOLERANCE")
        wanted.rtol = float(rtol)
    return wanted


def _argument(path: str) -> str:
    """The argument of `solve` that a field of the request came from."""
    return path.removeprefix("basis.").removeprefix("specification.")


def _route(problem: Problem | None) -> tuple[tuple[str, str], ...]:
    return ((ROUTE_HEADER, problem.route),) if problem is not None else ()


def _check_size(message: Any) -> None:
    """Raises LimitExceeded for a request that the service would refuse to receive."""
    size = message.ByteSize()
    if size > MAX_MESSAGE:
        raise errors.LimitExceeded(
            f"the request of {size} bytes is larger than the limit of {MAX_MESSAGE} bytes",
            reason="LIMIT_EXCEEDED",
            metadata={"limit": str(MAX_MESSAGE), "requested": str(size)},
        )


def _check_version(version: str) -> None:
    """Raises VersionMismatch for an answer of another major version; newer minor ones only add to it."""
    if version.split(".")[0] != _API_MAJOR:
        raise errors.VersionMismatch(
            f"the service speaks version {version or 'unknown'} of the contract, this client {_API_MAJOR}.x",
            reason="VERSION_MISMATCH",
            metadata={"expected": _API_MAJOR, "found": version},
        )
