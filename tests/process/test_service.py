"""The service as a process: ready line, probe, drain, orphans, metrics, and equal bytes from cold starts."""

from __future__ import annotations

import os
import signal
import socket
import subprocess
import sys
import threading
import urllib.request
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from dataclasses import fields
from pathlib import Path

import grpc
import pytest
from grpc_health.v1 import health_pb2, health_pb2_grpc

from modewright.v1 import basis_pb2, solve_pb2
from modewright_service import __version__
from modewright_service.__main__ import main
from modewright_service.process.lifecycle import SERVICE_NAME
from modewright_service.process.probe import probe
from modewright_service.process.settings import Settings
from tests.process.harness import (
    NO_RETRIES,
    PATIENCE,
    Running,
    alive,
    child,
    heavy_request,
    modes,
    running,
    solve_request,
    unit_problem,
    until,
)

SERVING = health_pb2.HealthCheckResponse.SERVING
NOT_SERVING = health_pb2.HealthCheckResponse.NOT_SERVING


def _health(channel: grpc.Channel, name: str = "") -> int:
    return health_pb2_grpc.HealthStub(channel).Check(health_pb2.HealthCheckRequest(service=name)).status


def _workers(front: int) -> list[int]:
    children = Path(f"/proc/{front}/task/{front}/children").read_text().split()
    return [int(pid) for pid in children if alive(int(pid))]


# ---- embedded: ready, orphaned ----


def test_the_ready_line_says_where_and_who(tmp_path: Path) -> None:
    with child(tmp_path) as service:
        assert service.ready == {
            "address": f"unix:{tmp_path / 's.sock'}",
            "pid": service.process.pid,
            "version": __version__,
        }
        assert len(service.stub.Solve(solve_request()).eigenvalues) == 8
        assert probe(service.ready["address"]) == 0
        assert probe(service.ready["address"], service=SERVICE_NAME) == 0
    assert service.process.returncode == 0
    assert list((tmp_path / "spool").glob("front-*")) == []


def test_a_service_and_its_workers_end_with_the_parent(tmp_path: Path) -> None:
    with child(tmp_path) as service:
        answer = service.stub.Solve.future(heavy_request())
        until(lambda: bool(_workers(service.process.pid)))
        workers = _workers(service.process.pid)
        # What the system does with a parent's descriptors when it is killed.
        service.life.close()
        service.process.wait(PATIENCE)
        until(lambda: not any(alive(pid) for pid in workers))
        assert answer.exception().code() in (grpc.StatusCode.UNAVAILABLE, grpc.StatusCode.CANCELLED)


def test_workers_end_with_a_killed_front(tmp_path: Path) -> None:
    with child(tmp_path) as service:
        service.stub.Solve(solve_request())
        workers = _workers(service.process.pid)
        assert len(workers) == 1
        service.process.send_signal(signal.SIGKILL)
        until(lambda: not alive(workers[0]))


def test_a_working_worker_ends_with_a_killed_front(tmp_path: Path) -> None:
    with child(tmp_path) as service:
        watching = service.stub.WatchSolve(
            solve_pb2.WatchSolveRequest(
                problem=unit_problem(), specification=modes(2048), interval_seconds=0.02
            )
        )
        until(lambda: next(watching).progress.steps > 0)
        (worker,) = _workers(service.process.pid)
        service.process.send_signal(signal.SIGKILL)
        until(lambda: not alive(worker))


def test_two_cold_processes_give_identical_bytes(tmp_path: Path) -> None:
    def fetched(folder: Path) -> bytes:
        problem = unit_problem()
        problem.layers[0].p.expression = "1 + x**2/3"
        problem.layers.add(name="second", start=1.0, end=1.5)
        basis = basis_pb2.BasisReference(problem=problem, specification=modes(24))
        with child(folder) as service:
            chunks = service.stub.FetchBasis(solve_pb2.FetchBasisRequest(basis=basis))
            return b"".join(chunk.data for chunk in chunks)

    with ThreadPoolExecutor(2) as both:
        one, other = both.map(fetched, [tmp_path / "one", tmp_path / "other"])
    assert len(one) > 10_000
    assert one == other


# ---- the command ----


def _refused(*arguments: str, **environment: str) -> str:
    """What the command says about settings that it cannot use."""
    command = [sys.executable, "-m", "modewright_service", *arguments]
    done = subprocess.run(
        command, env={**os.environ, **environment}, capture_output=True, text=True, timeout=PATIENCE
    )
    assert done.returncode == 2, done.stderr
    assert "Traceback" not in done.stderr
    return done.stderr


def test_a_setting_that_cannot_be_used_ends_the_command_in_words(tmp_path: Path) -> None:
    assert "MODEWRIGHT_QUEUE: 'many' is not a whole number" in _refused(MODEWRIGHT_QUEUE="many")
    assert "--ready-fd: 77 is not open" in _refused("--embedded", "--ready-fd", "77", "--socket", "s")
    spool = ["--workers", "1", "--spool", str(tmp_path / "spool")]
    (tmp_path / "file").touch()
    assert "spool" in _refused("--spool", str(tmp_path / "file"))
    absent = str(tmp_path / "absent.pem")
    assert absent in _refused(*spool, "--tls-certificate", absent, "--tls-key", absent)
    with socket.create_server(("127.0.0.1", 0)) as taken:
        address = f"127.0.0.1:{taken.getsockname()[1]}"
        said = _refused(*spool, "--listen", address)
        assert "listen" in said
        assert address in said
        listen = ["--listen", f"unix:{tmp_path / 's'}"]
        assert f"metrics: '{address}'" in _refused(*spool, *listen, "--metrics", address)
    # Nothing is left behind, of a service that had begun to start either.
    assert list((tmp_path / "spool").glob("front-*")) == []


def test_help_lists_every_setting_with_its_variable(capsys: pytest.CaptureFixture[str]) -> None:
    with pytest.raises(SystemExit) as ended:
        main(["--help"])
    assert ended.value.code == 0
    said = " ".join(capsys.readouterr().out.split())
    for item in fields(Settings):
        assert f"--{item.name.replace('_', '-')}" in said
        assert f"MODEWRIGHT_{item.name.upper()})" in said


def test_the_probe_of_nobody_fails(tmp_path: Path) -> None:
    command = [sys.executable, "-m", "modewright_service", "--probe", f"unix:{tmp_path / 'nobody'}"]
    done = subprocess.run(command, capture_output=True, text=True, timeout=PATIENCE)
    assert done.returncode == 1
    assert "UNAVAILABLE" in done.stderr
    assert probe("localhost:1", ca=str(tmp_path / "absent.pem")) == 1


def test_sigterm_drains_before_it_stops(tmp_path: Path) -> None:
    """NOT_SERVING while calls are still answered; then new calls fail and the running one ends well."""
    command = [sys.executable, "-m", "modewright_service", "--listen", f"unix:{tmp_path / 's'}"]
    command += ["--workers", "1", "--worker-nice", "0", "--drain-seconds", "2"]
    command += ["--spool", str(tmp_path / "spool")]
    process = subprocess.Popen(command, stderr=subprocess.DEVNULL)
    with grpc.insecure_channel(f"unix:{tmp_path / 's'}", NO_RETRIES) as channel:
        grpc.channel_ready_future(channel).result(PATIENCE)
        until(lambda: _health(channel) == SERVING)
        health = health_pb2_grpc.HealthStub(channel)
        told = health.Watch(health_pb2.HealthCheckRequest(service=SERVICE_NAME))
        assert next(told).status == SERVING
        from modewright.v1.eigenbasis_service_pb2_grpc import EigenbasisServiceStub

        stub = EigenbasisServiceStub(channel)
        stub.Solve(solve_request())
        long = stub.Solve.future(heavy_request())
        process.send_signal(signal.SIGTERM)
        assert next(told).status == NOT_SERVING
        assert stub.Solve(solve_request()).answered_from_cache
        assert len(long.result(PATIENCE).eigenvalues) == 512
        assert process.wait(PATIENCE) == 0
    assert list((tmp_path / "spool").glob("front-*")) == []


# ---- in this process ----


def _metrics(live: Running) -> dict[str, float]:
    """What a scrape sees: by name with labels."""
    url = f"http://127.0.0.1:{live.service.metrics_port}/metrics"
    with urllib.request.urlopen(url, timeout=PATIENCE) as answer:
        lines = answer.read().decode().splitlines()
    return {
        name: float(value)
        for name, value in (line.rsplit(" ", 1) for line in lines if not line.startswith("#"))
    }


def test_what_is_left_at_the_end_of_the_grace_period_is_unavailable(tmp_path: Path) -> None:
    with running(tmp_path, grace_seconds=0.1) as live:
        watching = live.stub.WatchSolve(
            solve_pb2.WatchSolveRequest(
                problem=unit_problem(), specification=modes(2048), interval_seconds=0.02
            )
        )
        until(lambda: next(watching).progress.steps > 0)
        stopping = live.submit(live.service.stop(0.1))
        with pytest.raises(grpc.RpcError) as caught:
            for _ in watching:
                pass
        assert caught.value.code() is grpc.StatusCode.UNAVAILABLE
        assert any(key == "grpc-status-details-bin" for key, _ in caught.value.trailing_metadata())
        stopping.result(PATIENCE)


def test_200_concurrent_equal_requests_solve_once(tmp_path: Path) -> None:
    with running(tmp_path, metrics="127.0.0.1:0") as live:
        calls = [live.stub.Solve.future(solve_request(w=3.0, count=16)) for _ in range(200)]
        answers = [call.result(PATIENCE) for call in calls]
        assert live.service.counters.solves_finished == 1
        assert [answer.answered_from_cache for answer in answers].count(False) == 1
        assert len({tuple(answer.eigenvalues) for answer in answers}) == 1
        assert {answer.server_solve_count for answer in answers} == {1}
        seen = _metrics(live)
        assert seen["modewright_solves_started_total"] == seen["modewright_solves_finished_total"] == 1
        assert seen["modewright_solve_joins_total"] + seen["modewright_cache_hits_total"] == 199
        # And an equal one, and one for fewer modes, are answered without a solve.
        for count in (16, 3):
            assert live.stub.Solve(solve_request(w=3.0, count=count)).answered_from_cache
        seen = _metrics(live)
        assert seen["modewright_solves_started_total"] == 1
        assert seen['modewright_calls_total{method="Solve",status="OK"}'] == 202


def test_a_caller_that_goes_away_stops_its_solve(tmp_path: Path) -> None:
    with running(tmp_path) as live:
        watching = live.stub.WatchSolve(
            solve_pb2.WatchSolveRequest(
                problem=unit_problem(), specification=modes(2048), interval_seconds=0.02
            )
        )
        until(lambda: next(watching).progress.steps > 0)
        watching.cancel()
        until(lambda: live.service.counters.solves_cancelled == 1)
        # A deadline does the same, and the one worker is free for others soon after.
        with pytest.raises(grpc.RpcError) as caught:
            live.stub.Solve(solve_request(w=2.0, count=2048), timeout=0.2)
        assert caught.value.code() is grpc.StatusCode.DEADLINE_EXCEEDED
        assert len(live.stub.Solve(solve_request()).eigenvalues) == 8
        assert live.service.counters.solves_finished == 1


def test_cached_answers_and_transforms_do_not_queue(tmp_path: Path) -> None:
    with running(tmp_path) as live:
        key = live.stub.Solve(solve_request()).basis_key
        long = live.stub.Solve.future(solve_request(w=2.0, count=1024))
        until(lambda: bool(live.service.pool.busy_pids))
        assert live.stub.Solve(solve_request()).answered_from_cache
        basis = basis_pb2.BasisReference(basis_key=key)
        assert list(live.stub.FetchBasis(solve_pb2.FetchBasisRequest(basis=basis)))
        assert _health(live.channel) == SERVING
        assert not long.done()
        long.cancel()


@pytest.fixture(scope="module")
def equipped(tmp_path_factory: pytest.TempPathFactory) -> Iterator[object]:
    folder = tmp_path_factory.mktemp("equipped")
    with running(folder, metrics="127.0.0.1:0", channelz=True, reflection=True) as live:
        yield live


def test_metrics_are_prometheus_text(equipped) -> None:
    equipped.stub.Solve(solve_request(w=5.0))
    equipped.stub.Solve(solve_request(w=5.0))
    values, counters = _metrics(equipped), equipped.service.counters
    assert values["modewright_solves_finished_total"] == counters.solves_finished >= 1
    assert values["modewright_cache_hits_total"] == counters.cache_hits >= 1
    assert values["modewright_workers_ready"] == 1
    assert values["modewright_serving"] == 1
    assert values['modewright_calls_total{method="Solve",status="OK"}'] >= 2
    assert values['modewright_solve_seconds_bucket{le="+Inf"}'] == counters.solves_finished
    assert values[f'modewright_info{{version="{__version__}"}}'] == 1


def test_reflection_and_channelz_answer_when_switched_on(equipped) -> None:
    from grpc_channelz.v1 import channelz_pb2, channelz_pb2_grpc
    from grpc_reflection.v1alpha import reflection_pb2, reflection_pb2_grpc

    stub = reflection_pb2_grpc.ServerReflectionStub(equipped.channel)
    request = reflection_pb2.ServerReflectionRequest(list_services="")
    (answer,) = list(stub.ServerReflectionInfo(iter([request])))
    names = {service.name for service in answer.list_services_response.service}
    assert {SERVICE_NAME, "grpc.health.v1.Health", "grpc.channelz.v1.Channelz"} <= names
    servers = channelz_pb2_grpc.ChannelzStub(equipped.channel).GetServers(channelz_pb2.GetServersRequest())
    assert len(servers.server) >= 1


def test_reflection_is_absent_when_switched_off(tmp_path: Path) -> None:
    from grpc_reflection.v1alpha import reflection_pb2, reflection_pb2_grpc

    with running(tmp_path, reflection=False) as live:
        stub = reflection_pb2_grpc.ServerReflectionStub(live.channel)
        request = reflection_pb2.ServerReflectionRequest(list_services="")
        with pytest.raises(grpc.RpcError) as caught:
            list(stub.ServerReflectionInfo(iter([request])))
        assert caught.value.code() is grpc.StatusCode.UNIMPLEMENTED


def test_health_is_per_service_and_unknown_names_are_not_found(equipped) -> None:
    assert _health(equipped.channel) == _health(equipped.channel, SERVICE_NAME) == SERVING
    with pytest.raises(grpc.RpcError) as caught:
        _health(equipped.channel, "modewright.v9.Other")
    assert caught.value.code() is grpc.StatusCode.NOT_FOUND


def test_health_follows_the_workers(tmp_path: Path) -> None:
    with running(tmp_path) as live:
        seen = []
        told = health_pb2_grpc.HealthStub(live.channel).Watch(health_pb2.HealthCheckRequest(service=""))

        def watch() -> None:
            for answer in told:
                seen.append(answer.status)
                if seen[-2:] == [NOT_SERVING, SERVING]:
                    break

        watcher = threading.Thread(target=watch)
        watcher.start()
        until(lambda: seen == [SERVING])
        os.kill(live.service.pool.pids[0], signal.SIGKILL)
        watcher.join(PATIENCE)
        told.cancel()
        assert seen == [SERVING, NOT_SERVING, SERVING]
