"""A generic gRPC client that has none of our code: ``buf curl`` learns the contract by reflection."""

from __future__ import annotations

import base64
import json
import math
import os
import subprocess
import sys
import tempfile
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import grpc
import pytest
from google.rpc.error_details_pb2 import BadRequest, ErrorInfo
from grpc_health.v1 import health_pb2, health_pb2_grpc

from tests.peers import program

pytestmark = pytest.mark.peers

SERVICE = "modewright.v1.EigenbasisService"
UNIT_INTERVAL = {
    "layers": [{"start": 0, "end": 1}],
    "left": {"kind": "END_KIND_DIRICHLET"},
    "right": {"kind": "END_KIND_DIRICHLET"},
}


@pytest.fixture(scope="module")
def socket() -> Iterator[Path]:
    """A service of its own on a Unix socket, ready to answer."""
    # Not pytest's folder: a socket's path must stay below 100 bytes.
    with tempfile.TemporaryDirectory(prefix="mw-") as folder:
        path = Path(folder) / "service"
        command = [sys.executable, "-m", "modewright_service", "--listen", f"unix:{path}", "--workers", "1"]
        command += ["--spool", str(Path(folder) / "spool"), "--drain-seconds", "0"]
        with (Path(folder) / "log").open("wb") as log:
            process = subprocess.Popen(command, stderr=log, env={**os.environ, "PYTHONUNBUFFERED": "1"})
        try:
            with grpc.insecure_channel(f"unix:{path}") as channel:
                health_pb2_grpc.HealthStub(channel).Check(
                    health_pb2.HealthCheckRequest(), timeout=60, wait_for_ready=True
                )
            yield path
        finally:
            process.terminate()
            assert process.wait(timeout=60) == 0


def _unpadded(text: str) -> bytes:
    """Base64 as in JSON error details, which leave the padding out."""
    return base64.b64decode(text + "=" * (-len(text) % 4))


def _curl(socket: Path, method: str, request: dict[str, Any]) -> subprocess.CompletedProcess[str]:
    command = [program("buf"), "curl", "--protocol", "grpc", "--http2-prior-knowledge"]
    command += ["--unix-socket", str(socket), "--data", json.dumps(request), f"http://localhost/{method}"]
    return subprocess.run(command, capture_output=True, text=True, timeout=120, check=False)


def test_reflection_lists_the_contract(socket: Path) -> None:
    command = [program("buf"), "curl", "--protocol", "grpc", "--http2-prior-knowledge", "--list-methods"]
    command += ["--unix-socket", str(socket), "http://localhost"]
    listed = subprocess.run(command, capture_output=True, text=True, timeout=120, check=True).stdout.split()
    assert {f"{SERVICE}/{name}" for name in ("Check", "Solve", "WatchSolve", "FetchBasis")} <= set(listed)
    assert "grpc.health.v1.Health/Check" in listed


def test_solve_by_json(socket: Path) -> None:
    """-u'' = lambda u, u(0) = u(1) = 0: lambda_n = ((n + 1) pi)^2 (any textbook; elementary)."""
    request = {"problem": UNIT_INTERVAL, "specification": {"modes": "3"}}
    answer = json.loads(_curl(socket, f"{SERVICE}/Solve", request).stdout)
    exact = [((n + 1) * math.pi) ** 2 for n in range(3)]
    # The default tolerance, 1e-9 relative; the first eigenvalue is the scale itself.
    assert answer["eigenvalues"] == pytest.approx(exact, rel=1e-9)
    assert all(
        low <= value <= high for low, value, high in zip(answer["lower"], exact, answer["upper"], strict=True)
    )
    assert answer["zeros"] == ["0", "1", "2"]


def test_a_refusal_names_reason_field_and_number(socket: Path) -> None:
    problem = {**UNIT_INTERVAL, "layers": [{"start": 0, "end": 1, "p": {"constant": -2.5}}]}
    refused = _curl(socket, f"{SERVICE}/Solve", {"problem": problem, "specification": {"modes": "3"}})
    assert refused.returncode != 0
    error = json.loads(refused.stderr)
    assert error["code"] == "invalid_argument"
    details = {entry["type"]: _unpadded(entry["value"]) for entry in error["details"]}
    info = ErrorInfo.FromString(details["google.rpc.ErrorInfo"])
    assert (info.domain, info.reason) == ("modewright", "NEGATIVE_COEFFICIENT")
    (violation,) = BadRequest.FromString(details["google.rpc.BadRequest"]).field_violations
    assert violation.field == "layers[0].p"
    assert "-2.5" in violation.description
    assert float(info.metadata["number_0"]) == -2.5


def test_a_draft_call_is_unimplemented(socket: Path) -> None:
    refused = _curl(socket, f"{SERVICE}/Differentiate", {})
    assert json.loads(refused.stderr)["code"] == "unimplemented"
