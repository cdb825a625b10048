"""TLS for the server: certificates from files, read anew when they change, and clients' ones if wanted."""

from __future__ import annotations

import logging
from collections.abc import Callable
from pathlib import Path
from typing import cast

import grpc

__all__ = ["server_credentials"]

_log = logging.getLogger(__name__)


class _Files:
    """The three files as gRPC's configuration; read again when one of them was changed."""

    def __init__(self, certificate: str, key: str, client_ca: str) -> None:
        self._paths = [Path(certificate), Path(key), *([Path(client_ca)] if client_ca else [])]
        self._times: list[int] = []

    def read(self) -> grpc.ServerCertificateConfiguration:
        """Raises OSError when a file cannot be read."""
        self._times = self._stamps()
        chain, key, *authorities = [path.read_bytes() for path in self._paths]
        return grpc.ssl_server_certificate_configuration(
            [(key, chain)], authorities[0] if authorities else None
        )

    def fetch(self) -> grpc.ServerCertificateConfiguration | None:
        """Called by gRPC for every handshake; None keeps what is in use."""
        try:
            return None if self._stamps() == self._times else self.read()
        except OSError:
            # Half-way through a rotation a file may be missing: the next handshake asks again.
            _log.warning("a TLS file cannot be read; the certificate in use stays", exc_info=True)
            return None

    def _stamps(self) -> list[int]:
        return [path.stat().st_mtime_ns for path in self._paths]


def server_credentials(certificate: str, key: str, client_ca: str) -> grpc.ServerCredentials:
    """Credentials from PEM files; with `client_ca`, clients must show a certificate from it.

    Raises OSError when a file cannot be read.
    """
    files = _Files(certificate, key, client_ca)
    # The stubs leave out that None, which keeps the configuration, may be returned.
    fetch = cast("Callable[[], grpc.ServerCertificateConfiguration]", files.fetch)
    return grpc.dynamic_ssl_server_credentials(files.read(), fetch, bool(client_ca))
