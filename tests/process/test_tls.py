"""TLS: the server's certificate, clients' certificates where wanted, and files changed while it serves."""

from __future__ import annotations

import shutil
from pathlib import Path

import grpc
import pytest

from modewright.v1.eigenbasis_service_pb2_grpc import EigenbasisServiceStub
from modewright_service.process.probe import probe
from modewright_service.process.settings import SettingsError
from tests.process.harness import NO_RETRIES, PATIENCE, running, solve_request

# Made for tests: one authority that signed the server's and the caller's certificates (see the README there).
DATA = Path(__file__).parents[1] / "client" / "data"
FILES = {"tls_certificate": str(DATA / "server.pem"), "tls_key": str(DATA / "server.key")}


def _credentials(*, caller: bool = False) -> grpc.ChannelCredentials:
    key, chain = ((DATA / name).read_bytes() if caller else None for name in ("caller.key", "caller.pem"))
    return grpc.ssl_channel_credentials((DATA / "authority.pem").read_bytes(), key, chain)


def test_a_call_and_the_probe_over_tls(tmp_path: Path) -> None:
    with running(tmp_path, _credentials(), listen="localhost:0", **FILES) as live:
        assert len(live.stub.Solve(solve_request(), timeout=PATIENCE).eigenvalues) == 8
        assert probe(live.address, ca=str(DATA / "authority.pem"), timeout=PATIENCE) == 0
        assert probe(live.address, timeout=2.0) == 1


def test_a_client_without_a_certificate_is_kept_out(tmp_path: Path) -> None:
    files = {**FILES, "tls_client_ca": str(DATA / "authority.pem")}
    with running(tmp_path, _credentials(caller=True), listen="localhost:0", **files) as live:
        assert len(live.stub.Solve(solve_request(), timeout=PATIENCE).eigenvalues) == 8
        with (
            grpc.secure_channel(live.address, _credentials(), NO_RETRIES) as stranger,
            pytest.raises(grpc.RpcError) as caught,
        ):
            EigenbasisServiceStub(stranger).Solve(solve_request(), timeout=PATIENCE)
        assert caught.value.code() is grpc.StatusCode.UNAVAILABLE


def test_changed_files_are_taken_up_and_missing_ones_are_survived(tmp_path: Path) -> None:
    certificate, key = tmp_path / "server.pem", tmp_path / "server.key"
    # The caller's certificate is a valid one, but for another name: the client refuses it.
    shutil.copy(DATA / "caller.pem", certificate)
    shutil.copy(DATA / "caller.key", key)
    files = {"tls_certificate": str(certificate), "tls_key": str(key)}
    with running(tmp_path, _credentials(), listen="localhost:0", **files) as live:

        def answered() -> bool:
            with grpc.secure_channel(live.address, _credentials(), NO_RETRIES) as channel:
                try:
                    EigenbasisServiceStub(channel).Solve(solve_request(), timeout=PATIENCE)
                except grpc.RpcError as error:
                    if error.code() is grpc.StatusCode.UNAVAILABLE:
                        return False
                    raise
            return True

        assert not answered()
        shutil.copy(DATA / "server.pem", certificate)
        shutil.copy(DATA / "server.key", key)
        assert answered()
        certificate.unlink()
        assert answered()


def test_a_certificate_that_cannot_be_read_is_named(tmp_path: Path) -> None:
    files = {"tls_certificate": str(tmp_path / "absent.pem"), "tls_key": str(DATA / "server.key")}
    with pytest.raises(SettingsError, match=r"absent\.pem"), running(tmp_path, listen="localhost:0", **files):
        pass
