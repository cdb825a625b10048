"""Messages between the front and a worker: length-prefixed pickles over a socket pair.

Both ends are the same program and version, started by the same user, and the socket has no name that another
process could connect to; that is what makes pickle acceptable here and nowhere else in the service.
"""

from __future__ import annotations

import asyncio
import pickle
import socket
import struct
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Final

if TYPE_CHECKING:
    from modewright_service.core.problem import Problem

__all__ = [
    "Crashed",
    "Failed",
    "Finished",
    "FromWorker",
    "Job",
    "Ready",
    "encode",
    "read_frame",
    "receive",
    "send",
]

_LENGTH: Final = struct.Struct("<Q")
# A problem with the most samples the contract admits is a few megabytes; anything near this is a defect.
_MAX_FRAME: Final = 1 << 30


@dataclass(frozen=True)
class Job:
    """One solve: front to worker. `path` is where the record is to be written."""

    number: int
    problem: Problem
    count: int
    rtol: float
    path: str


@dataclass(frozen=True)
class Ready:
    """The worker has imported the solver and waits for jobs."""

    pid: int


@dataclass(frozen=True)
class Finished:
    """The record is at `path`; the solve took `seconds`."""

    number: int
    path: str
    seconds: float


@dataclass(frozen=True)
class Failed:
    """The solver refused the job with a typed error."""

    number: int
    error: Exception


@dataclass(frozen=True)
class Crashed:
    """The solver raised something that it should not have: a defect, with its traceback as text."""

    number: int
    traceback: str


FromWorker = Ready | Finished | Failed | Crashed


def encode(message: Any) -> bytes:
    """`message` as one frame."""
    payload = pickle.dumps(message, protocol=pickle.HIGHEST_PROTOCOL)
    return _LENGTH.pack(len(payload)) + payload


def send(sock: socket.socket, message: Any) -> None:
    """Send one frame, blocking (the worker's side)."""
    sock.sendall(encode(message))


def receive(sock: socket.socket) -> Any:
    """The next frame, blocking (the worker's side). Raises EOFError when the front has gone."""
    length = _checked(_read(sock, _LENGTH.size))
    return pickle.loads(_read(sock, length))


async def read_frame(reader: asyncio.StreamReader) -> Any:
    """The next frame (the front's side). Raises EOFError when the worker has gone."""
    try:
        length = _checked(await reader.readexactly(_LENGTH.size))
        return pickle.loads(await reader.readexactly(length))
    except (asyncio.IncompleteReadError, ConnectionError) as error:
        raise EOFError("the worker closed its end") from error


def _checked(prefix: bytes) -> int:
    (length,) = _LENGTH.unpack(prefix)
    if length > _MAX_FRAME:
        raise EOFError(f"a frame of {length} bytes: the stream is damaged")
    return int(length)


def _read(sock: socket.socket, size: int) -> bytes:
    parts = []
    while size:
        part = sock.recv(min(size, 1 << 20))
        if not part:
            raise EOFError("the front closed its end")
        parts.append(part)
        size -= len(part)
    return b"".join(parts)
