"""The embedded service: a real child process, its start, its sharing, its end."""

from __future__ import annotations

import multiprocessing
import os
import pickle
import signal
import socket
import stat
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

import modewright
from modewright import embedded

PROBLEM = modewright.Problem.layered(
    modewright.Layer(0, 1), left=modewright.Dirichlet(), right=modewright.Dirichlet()
)
# What the child process of a test says when all went well.
OK = 7


@pytest.fixture(autouse=True)
def _no_address(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.delenv("MODEWRIGHT_ADDRESS", raising=False)


def _gone(pid: int) -> bool:
    """Whether a process has ended (one that waits to be collected by another counts as ended)."""
    try:
        return Path(f"/proc/{pid}/stat").read_text(encoding="ascii").rsplit(")", 1)[1].split()[0] == "Z"
    except FileNotFoundError:
        return True


def _wait_until(condition: Callable[[], bool]) -> None:
    """Waits for what must happen; a test that waits in vain is stopped by its time limit."""
    while not condition():
        time.sleep(0.02)


def _running(service: modewright.Service) -> embedded.Running:
    attachment = service._attach()
    assert attachment.running is not None
    return attachment.running


def _child_pid(service: modewright.Service) -> int:
    return _running(service)._child.pid


def _first_eigenvalues(service: modewright.Service) -> list[float]:
    return [float(value) for value in service.solve(PROBLEM, modes=2).eigenvalues / np.pi**2]


def _solves(service: modewright.Service) -> bool:
    return _first_eigenvalues(service) == pytest.approx([1.0, 4.0], rel=1e-9)


def _own(seconds: float = 61.0) -> modewright.Service:
    """A handle with a service that it shares with no other test, by settings of its own."""
    return modewright.connect(start_timeout=seconds)


def test_two_handles_share_one_service_until_the_last_closes() -> None:
    with _own() as first:
        with _own() as second, modewright.connect() as third:
            assert first.address == second.address
            # Other settings are another service; nothing was started for this one yet.
            assert third._attachment is None
            pid, folder = _child_pid(first), _running(first).folder
            assert stat.S_IMODE(folder.stat().st_mode) == 0o700
            assert len(os.fsencode(first.address.removeprefix("unix:"))) < 100
        assert _solves(first)
        assert not _gone(pid)
    assert _gone(pid)
    assert not folder.exists()


def test_a_killed_service_is_replaced() -> None:
    with _own() as service:
        basis = service.solve(PROBLEM, modes=3)
        before = _child_pid(service)
        os.kill(before, signal.SIGKILL)
        _wait_until(lambda: _gone(before))
        # The new service does not know the basis: the handle sends the problem again, and the key stays.
        x = np.linspace(0, 1, 41)
        c = basis.project(np.sin(np.pi * x), x=x)
        np.testing.assert_allclose(c, [np.sqrt(0.5), 0, 0], rtol=0, atol=1e-6)
        assert _child_pid(service) != before
        assert service.solve(PROBLEM, modes=3).key == basis.key


# ---- the end of the parent ----

_PARENT = """
import os, signal, sys, modewright
service = modewright.connect()
print(service._attach().running._child.pid, service._attach().running.folder, flush=True)
sys.stdin.readline()
{end}
"""


@pytest.mark.parametrize(
    "end",
    ["os.kill(os.getpid(), signal.SIGKILL)", "raise RuntimeError('crash')"],
    ids=["killed", "crashed"],
)
def test_the_service_ends_with_its_parent(end: str) -> None:
    code = _PARENT.format(end=end)
    with subprocess.Popen(
        [sys.executable, "-W", "error", "-c", code],
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        stderr=subprocess.DEVNULL,
        text=True,
    ) as parent:
        assert parent.stdout is not None
        assert parent.stdin is not None
        pid, folder = parent.stdout.readline().split()
        assert not _gone(int(pid))
        parent.stdin.write("\n")
        parent.stdin.close()
        parent.wait()
    _wait_until(lambda: _gone(int(pid)))
    # Of a killed parent, the service itself has removed it.
    assert not Path(folder).exists()


# ---- a start that fails ----


def test_a_failed_start_says_why(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(embedded, "_MODULE", "modewright_service_of_another_name")
    with _own() as service, pytest.raises(modewright.StartFailed) as caught:
        service.solve(PROBLEM, modes=2)
    assert "No module named" in str(caught.value)
    assert "exit code 1" in str(caught.value)


def test_a_missing_extra_is_named_with_the_line_that_installs_it(monkeypatch: pytest.MonkeyPatch) -> None:
    real = embedded.metadata.version

    def without_scipy(name: str) -> str:
        if name == "scipy":
            raise embedded.metadata.PackageNotFoundError(name)
        return real(name)

    monkeypatch.setattr(embedded.metadata, "version", without_scipy)
    monkeypatch.setattr(embedded, "_MODULE", "modewright_service_of_another_name")
    with _own() as service, pytest.raises(modewright.ServiceNotInstalled) as caught:
        service.solve(PROBLEM, modes=2)
    assert "needs scipy" in str(caught.value)
    assert "pip install 'modewright[service]'" in str(caught.value)


def test_nothing_is_missing_here() -> None:
    assert embedded.missing_distributions() == []


def test_a_service_that_never_gets_ready_is_stopped(monkeypatch: pytest.MonkeyPatch) -> None:
    started: list[subprocess.Popen[bytes]] = []
    real = subprocess.Popen

    def sleeping(command: list[str], **options: object) -> subprocess.Popen[bytes]:
        process = real([sys.executable, "-c", "import time; time.sleep(600)"], **options)  # type: ignore[call-overload]
        started.append(process)
        return process  # type: ignore[no-any-return]

    monkeypatch.setattr(embedded.subprocess, "Popen", sleeping)
    with (
        modewright.connect(start_timeout=0.5) as service,
        pytest.raises(modewright.StartFailed, match=r"no ready line within 0\.5 s"),
    ):
        service.solve(PROBLEM, modes=2)
    assert started[0].returncode is not None


def test_a_long_temporary_folder_is_passed_over(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    long = tmp_path / ("long" * 30)
    long.mkdir()
    monkeypatch.setattr(tempfile, "tempdir", str(long))
    folder = embedded._private_folder()
    try:
        assert len(os.fsencode(folder)) < 90
        assert not list(long.iterdir())
    finally:
        folder.rmdir()


def test_what_a_killed_parent_left_is_swept_up(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(tempfile, "tempdir", str(tmp_path))
    monkeypatch.setattr(embedded, "_LONGEST_PATH", 1000)
    real = embedded._answers
    long_ago = time.time() - 2 * embedded._STALE_AFTER

    def folder(name: str, *files: str, old: bool = True) -> Path:
        made = tmp_path / f"modewright-{name}"
        made.mkdir()
        for file in files:
            (made / file).touch()
        if old:
            os.utime(made, (long_ago, long_ago))
        return made

    left = folder("left", "service.log", "service.sock")
    kept = [
        folder("young", "service.log", old=False),
        folder("somebody-s", "service.log", "letters.txt"),
        folder("empty"),
    ]
    served = folder("served")
    monkeypatch.chdir(served)
    with socket.socket(socket.AF_UNIX) as listener:
        # By its short name: the length of the path is limited.
        listener.bind("service.sock")
        listener.listen()
        os.utime(served, (long_ago, long_ago))
        monkeypatch.setattr(embedded, "_answers", lambda path: real(os.path.relpath(path)))
        embedded._private_folder()
        assert not left.exists()
        assert all(path.exists() for path in [*kept, served])


# ---- other processes ----


def _in_fork(work: Callable[[], bool]) -> int:
    """The exit code of a forked child of this process that runs `work`: OK where it returned True."""
    pid = os.fork()
    if pid == 0:
        code = 1
        try:
            code = OK if work() else 2
        finally:
            os._exit(code)
    _, status = os.waitpid(pid, 0)
    return os.waitstatus_to_exitcode(status)


# Python 3.12 warns of any fork of a process with threads; that it works is what is tested here.
pytestmark = pytest.mark.filterwarnings("ignore:This process .* is multi-threaded:DeprecationWarning")


def test_a_forked_child_uses_its_parent_s_service_and_leaves_it_running(
    service: modewright.Service,
) -> None:
    basis = service.solve(PROBLEM, modes=3)
    address, pid = service.address, _child_pid(service)

    def work() -> bool:
        same = service.address == address
        c = basis.project("sin(pi*x)")
        service.close()
        return same and bool(abs(c[0] - np.sqrt(0.5)) < 1e-6)

    assert [_in_fork(work) for _ in range(3)] == [OK] * 3
    assert not _gone(pid)
    assert _solves(service)


def test_a_forked_child_starts_its_own_service_when_the_parent_s_is_gone() -> None:
    with _own() as service:
        assert _solves(service)
        old = _child_pid(service)
        os.kill(old, signal.SIGKILL)
        _wait_until(lambda: _gone(old))

        def work() -> bool:
            solved = _solves(service)
            child = _child_pid(service)
            service.close()
            return solved and child != old and _gone(child)

        assert _in_fork(work) == OK


def test_a_handle_made_before_the_fork_and_first_used_after_it() -> None:
    with _own() as unused:

        def work() -> bool:
            solved = _solves(unused)
            unused.close()
            return solved

        assert _in_fork(work) == OK
        assert unused._attachment is None


def _in_pool(basis: modewright.Basis) -> tuple[str, list[float]]:
    assert basis.service is not None
    return basis.service.address, basis.project("sin(2*pi*x)").tolist()


@pytest.mark.parametrize("method", ["fork", "spawn", "forkserver"])
def test_a_basis_can_be_sent_to_a_pool(service: modewright.Service, method: str) -> None:
    basis = service.solve(PROBLEM, modes=3)
    with multiprocessing.get_context(method).Pool(1) as pool:
        (one, first), (two, second) = pool.map(_in_pool, [basis, basis], chunksize=1)
        # One service for all handles of a process.
        assert one == two
        # Forked children share the parent's; others start one.
        assert (one == service.address) == (method == "fork")
    expected = basis.project("sin(2*pi*x)")
    np.testing.assert_allclose([first, second], [expected, expected], rtol=0, atol=1e-13)


def test_copies_of_a_handle_share_the_service_of_their_process(service: modewright.Service) -> None:
    with pickle.loads(pickle.dumps(service)) as copy:
        assert copy.address == service.address
