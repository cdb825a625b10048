"""gRPC channels: made when first needed, one per process and address, never used across a fork.

A channel is kept under (process id, target) and shared by the handles that lease it. A forked child makes
its own and leaves the parent's untouched - it is not even dropped there, because closing it would reach
into threads that the child does not have. Fork while no other thread is within a call: gRPC skips its own
preparations for a fork otherwise, and a call in the child may then wait for ever; start processes by spawn
or forkserver where threads are calling.

Limits: answers up to 8 MiB. gRPC's own retries are off: they end silently above a buffer of 256 KiB and
after a stream's first message; :mod:`modewright.retry` does it instead. Keepalive pings stay off, as
servers answer them with GOAWAY unless configured for them.
"""

from __future__ import annotations

import os
import socket
import ssl
from dataclasses import dataclass
from pathlib import Path

import grpc

from modewright.errors import InvalidRequest, Violation
from modewright.forking import ForkSafeLock

__all__ = ["MAX_MESSAGE", "Target", "Tls", "handshake_failure", "lease", "release"]

MAX_MESSAGE = 8 * 1024 * 1024

_OPTIONS = (
    ("grpc.enable_retries", 0),
    ("grpc.max_receive_message_length", MAX_MESSAGE),
    # A server that restarts is found again within a second, as quickly as the retries ask for it.
    ("grpc.initial_reconnect_backoff_ms", 50),
    ("grpc.min_reconnect_backoff_ms", 50),
    ("grpc.max_reconnect_backoff_ms", 1000),
)

# HTTP/2's opening (RFC 9113, section 3.4) and an empty SETTINGS frame: enough for a server to answer.
_HTTP2_OPENING = b"PRI * HTTP/2.0\r\n\r\nSM\r\n\r\n" + bytes(3) + b"\x04" + bytes(5)


@dataclass(frozen=True)
class Tls:
    """How to trust the service and to be trusted by it; paths of PEM files.

    ca: issuers to trust; None means gRPC's built-in list. certificate, key: the client's own, for services
    that ask for one. server_name: the name to expect in the service's certificate where it is not the
    address.
    """

    ca: str | None = None
    certificate: str | None = None
    key: str | None = None
    server_name: str | None = None

    def __post_init__(self) -> None:
        if (self.certificate is None) != (self.key is None):
            missing = "key" if self.key is None else "certificate"
            violation = Violation(f"tls.{missing}", "is missing: certificate and key belong together")
            raise InvalidRequest(reason="BAD_REQUEST", violations=[violation])


@dataclass(frozen=True)
class Target:
    """Where a service is: a gRPC target ("host:port", "unix:/path", "dns:///name:port") and its TLS."""

    address: str
    tls: Tls | None = None


@dataclass
class _Shared:
    channel: grpc.Channel
    users: int = 0


_channels: dict[tuple[int, Target], _Shared] = {}
_lock = ForkSafeLock()


def lease(target: Target) -> grpc.Channel:
    """The channel of this process to the target; `release` it once for every lease."""
    key = (os.getpid(), target)
    with _lock:
        if key not in _channels:
            _channels[key] = _Shared(_open(target))
        _channels[key].users += 1
        return _channels[key].channel


def release(target: Target) -> None:
    """Gives back a lease; the last one closes the channel."""
    key = (os.getpid(), target)
    with _lock:
        shared = _channels.get(key)
        if shared is None:
            return
        shared.users -= 1
        if shared.users > 0:
            return
        del _channels[key]
    shared.channel.close()


def _open(target: Target) -> grpc.Channel:
    tls = target.tls
    if tls is None:
        return grpc.insecure_channel(target.address, options=_OPTIONS)
    credentials = grpc.ssl_channel_credentials(
        root_certificates=_read("ca", tls.ca),
        private_key=_read("key", tls.key),
        certificate_chain=_read("certificate", tls.certificate),
    )
    options: tuple[tuple[str, int | str], ...] = _OPTIONS
    if tls.server_name is not None:
        options = (*options, ("grpc.ssl_target_name_override", tls.server_name))
    return grpc.secure_channel(target.address, credentials, options=options)


def _read(name: str, path: str | None) -> bytes | None:
    if path is None:
        return None
    try:
        return Path(path).read_bytes()
    except OSError as error:
        violation = Violation(f"tls.{name}", f"{path} cannot be read: {error.strerror}")
        raise InvalidRequest(reason="BAD_REQUEST", violations=[violation]) from error


def handshake_failure(target: Target, timeout: float) -> str | None:
    """Why TLS with the target is refused, or None when it is not (or the target cannot be asked this way).

    gRPC reports a wrong issuer, a wrong name and a missing client certificate as UNAVAILABLE, like a service
    that is not there. A handshake through the standard library's TLS tells them apart. It goes on to read
    the answer to HTTP/2's opening, since with TLS 1.3 a missing client certificate only shows there: as an
    alert, or as a connection closed before the first byte. The latter counts when it happens twice, as a
    server may stop just then.
    """
    tls, place = target.tls, _host_and_port(target.address)
    if tls is None or place is None:
        return None
    try:
        if any(_opening_is_answered(tls, place, min(timeout / 2, 5.0)) for _ in range(2)):
            return None
    except ssl.SSLError as error:
        return str(error)
    except OSError:
        return None
    given = "without a client certificate" if tls.certificate is None else f"with {tls.certificate}"
    return f"the service closes every connection right after the handshake, {given}"


def _opening_is_answered(tls: Tls, place: tuple[str, int], timeout: float) -> bool:
    """Whether anything comes back over TLS. Raises ssl.SSLError if refused, OSError without a peer."""
    context = ssl.create_default_context(cafile=tls.ca)
    context.set_alpn_protocols(["h2"])
    if tls.certificate is not None:
        context.load_cert_chain(tls.certificate, tls.key)
    with (
        socket.create_connection(place, timeout=timeout) as plain,
        context.wrap_socket(plain, server_hostname=tls.server_name or place[0]) as secured,
    ):
        try:
            secured.sendall(_HTTP2_OPENING)
            return bool(secured.recv(1))
        except ConnectionError:
            return False


def _host_and_port(address: str) -> tuple[str, int] | None:
    """The host and port of a target; None for Unix sockets and for schemes that only gRPC resolves."""
    plain = address.removeprefix("dns:").lstrip("/")
    host, colon, port = plain.rpartition(":")
    if not colon or not port.isdigit() or (":" in host and not host.startswith("[")):
        return None
    return host.strip("[]"), int(port)
