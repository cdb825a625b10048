"""The health probe for containers: asks a service over gRPC, and says so by the exit status."""

from __future__ import annotations

import sys
from pathlib import Path

import grpc

__all__ = ["probe"]


def probe(address: str, *, service: str = "", timeout: float = 5.0, ca: str = "") -> int:
    """0 when the service at `address` says SERVING within `timeout` seconds, 1 otherwise.

    service: what to ask about; empty for the whole. ca: PEM file of the authority of its certificate, for
        TLS.
    """
    from grpc_health.v1 import health_pb2, health_pb2_grpc

    options = [("grpc.enable_retries", 0)]
    if ca:
        try:
            authority = Path(ca).read_bytes()
        except OSError as error:
            print(f"{ca}: {error.strerror}", file=sys.stderr)
            return 1
        channel = grpc.secure_channel(address, grpc.ssl_channel_credentials(authority), options)
    else:
        channel = grpc.insecure_channel(address, options)
    with channel:
        try:
            answer = health_pb2_grpc.HealthStub(channel).Check(
                health_pb2.HealthCheckRequest(service=service), timeout=timeout
            )
        except grpc.RpcError as error:
            print(f"{address}: {error.code().name}: {error.details()}", file=sys.stderr)
            return 1
    name = health_pb2.HealthCheckResponse.ServingStatus.Name(answer.status)
    if answer.status == health_pb2.HealthCheckResponse.SERVING:
        return 0
    print(f"{address}: {name}", file=sys.stderr)
    return 1
