"""The embedded service: a child process of this one, reached over a Unix socket like any other service.

Its life:

- Started when first needed, one per process and set of options, as ``sys.executable -m
  modewright_service``; all handles of the process share it, and the last one to close stops it, as does the
  end of the process.
- A socket pair joins parent and child. The child writes one line of JSON with its address when it is ready,
  and exits when its side reads the end of file: a parent that is killed takes its service along.
- The socket and the log lie in a folder that only this user may enter. The folder goes with the service: the
  parent removes it, and the child does when it reads the end of file. What is left where both were killed is
  swept up by a later start.
- A forked child of this process goes on using its parent's service, through a channel of its own, as long as
  that answers, and otherwise starts one itself. Only the process that started a service stops it.
"""

from __future__ import annotations

import atexit
import contextlib
import json
import os
import re
import shutil
import socket
import stat
import subprocess
import sys
import tempfile
import time
from dataclasses import dataclass
from importlib import metadata
from pathlib import Path

from modewright.errors import ServiceNotInstalled, StartFailed
from modewright.forking import ForkSafeLock

__all__ = ["Options", "Running", "acquire", "release"]

# sun_path holds 108 bytes on Linux and 104 on macOS, gRPC adds some of its own.
_LONGEST_PATH = 100
_TAIL = 4000
_PREFIX = "modewright-"
_SOCKET = "service.sock"
_LOG = "service.log"
# Seconds. A folder this old without anybody listening is no service that is just starting.
_STALE_AFTER = 3600.0
_MODULE = "modewright_service"


@dataclass(frozen=True)
class Options:
    """How the embedded service is started.

    workers: processes that solve. start_timeout: seconds to wait for it. stop_timeout: seconds it is given to
    finish what it is doing before it is killed.
    """

    workers: int = 1
    start_timeout: float = 60.0
    stop_timeout: float = 10.0


class Running:
    """A service that this process, or the one it was forked from, has started."""

    def __init__(self, options: Options) -> None:
        """Starts it and waits until it is ready. Raises StartFailed, ServiceNotInstalled."""
        self.options = options
        self.pid = os.getpid()
        self.users = 0
        self.folder = _private_folder()
        self.log = self.folder / _LOG
        self.address = ""
        ours, theirs = socket.socketpair()
        self._life = ours
        try:
            with theirs, self.log.open("wb") as log:
                self._child = self._spawn(theirs, log.fileno())
            self.address = self._await_ready()
        except BaseException:
            self.stop(at_once=True)
            raise

    def _spawn(self, theirs: socket.socket, log: int) -> subprocess.Popen[bytes]:
        path = self.folder / _SOCKET
        command = [sys.executable, "-m", _MODULE, "--embedded", "--ready-fd", str(theirs.fileno())]
        command += ["--socket", str(path), "--folder", str(self.folder)]
        command += ["--workers", str(self.options.workers)]
        # A session of its own: Ctrl-C at a terminal interrupts the caller, which decides about its service.
        return subprocess.Popen(
            command,
            stdin=subprocess.DEVNULL,
            stdout=log,
            stderr=log,
            pass_fds=(theirs.fileno(),),
            start_new_session=True,
        )

    def _await_ready(self) -> str:
        """The address in the ready line. Raises StartFailed, ServiceNotInstalled."""
        deadline = time.monotonic() + self.options.start_timeout
        line = b""
        while not line.endswith(b"\n"):
            left = deadline - time.monotonic()
            if left <= 0.0:
                raise StartFailed(f"no ready line within {self.options.start_timeout:g} s{self._tail()}")
            self._life.settimeout(left)
            try:
                part = self._life.recv(4096)
            except TimeoutError:
                continue
            except ConnectionError:
                part = b""
            if not part:
                raise self._failed_start()
            line += part
        try:
            return str(json.loads(line)["address"])
        except (ValueError, KeyError, TypeError) as error:
            raise StartFailed(f"an unreadable ready line {line[:200]!r}{self._tail()}") from error

    def _failed_start(self) -> StartFailed | ServiceNotInstalled:
        try:
            code: int | str = self._child.wait(timeout=5.0)
        except subprocess.TimeoutExpired:
            code = "none yet"
        missing = missing_distributions()
        if missing:
            return ServiceNotInstalled(
                f"the embedded service needs {', '.join(missing)}: pip install 'modewright[service]', "
                "or connect to a running service by its address"
            )
        ended = f"the embedded service ended with exit code {code} before it was ready"
        return StartFailed(ended + self._tail())

    def _tail(self) -> str:
        """The end of the child's log, for a message."""
        with contextlib.suppress(OSError):
            text = self.log.read_bytes()[-_TAIL:].decode(errors="replace").strip()
            if text:
                return f"; its log ends with:\n{text}"
        return "; its log is empty"

    def alive(self) -> bool:
        """Whether it still runs; asked from a forked child, whether it still answers."""
        if os.getpid() == self.pid:
            return self._child.poll() is None
        return _answers(self.address.removeprefix("unix:"))

    def forget(self) -> None:
        """In a forked child: lets go of the line that keeps the service alive; it is the parent's alone."""
        self._life.close()
        # Popen would warn, when collected here, about a process that is not this one's to wait for.
        if hasattr(self, "_child"):
            self._child.returncode = 0

    def stop(self, at_once: bool = False) -> None:
        """Ends it: by the end of file it waits for, then by signals. Does nothing in any other process."""
        if os.getpid() != self.pid:
            return
        self._life.close()
        child = getattr(self, "_child", None)
        if child is not None:
            patience = 0.0 if at_once else self.options.stop_timeout
            for end in (lambda: None, child.terminate, child.kill):
                end()
                with contextlib.suppress(subprocess.TimeoutExpired):
                    child.wait(timeout=patience)
                    break
                patience = 5.0
        shutil.rmtree(self.folder, ignore_errors=True)


def _private_folder() -> Path:
    """A fresh folder, mode 0700, short enough for the path of a socket in it."""
    longest = _LONGEST_PATH - len(f"/{_SOCKET}")
    for parent in (tempfile.gettempdir(), "/tmp"):
        folder = Path(tempfile.mkdtemp(prefix=_PREFIX, dir=parent))
        if len(os.fsencode(folder)) < longest:
            _sweep(folder)
            return folder
        folder.rmdir()
    raise StartFailed(f"no temporary folder with a path below {longest} bytes: set TMPDIR to a shorter one")


def _sweep(own: Path) -> None:
    """Removes what parents and services that were killed together left behind beside `own`: old folders of
    this user without a server.
    """
    for folder in own.parent.glob(f"{_PREFIX}*"):
        with contextlib.suppress(OSError):
            found = folder.lstat()
            ours = stat.S_ISDIR(found.st_mode) and found.st_uid == os.getuid()
            old = time.time() - found.st_mtime > _STALE_AFTER
            names = {entry.name for entry in folder.iterdir()} if ours and old else set()
            if _LOG in names and names <= {_SOCKET, _LOG} and not _answers(folder / _SOCKET):
                shutil.rmtree(folder)


def _answers(path: Path | str) -> bool:
    """Whether somebody listens at a Unix socket."""
    with contextlib.suppress(OSError), socket.socket(socket.AF_UNIX) as probe:
        probe.settimeout(1.0)
        probe.connect(str(path))
        return True
    return False


def missing_distributions() -> list[str]:
    """Distributions of the ``service`` extra that are not installed."""
    missing = []
    for requirement in metadata.requires("modewright") or ():
        name = re.match(r"[\w.-]+", requirement)
        if name is None or not re.search(r"extra\s*==\s*[\"']service[\"']", requirement):
            continue
        try:
            metadata.version(name.group())
        except metadata.PackageNotFoundError:
            missing.append(name.group())
    return missing


# ---- the services of this process ----

_running: dict[Options, Running] = {}
_lock = ForkSafeLock()


def acquire(options: Options) -> Running:
    """The running service with these options, started if there is none; `release` it when done."""
    with _lock:
        found = _running.get(options)
        if found is None or not found.alive():
            if found is not None:
                found.stop(at_once=True)
            found = _running[options] = Running(options)
        found.users += 1
        return found


def release(running: Running) -> None:
    """Gives back what `acquire` returned; the last user of a service stops it."""
    with _lock:
        running.users -= 1
        if running.users > 0:
            return
        if _running.get(running.options) is running:
            del _running[running.options]
    running.stop()


def _after_fork() -> None:
    for running in _running.values():
        running.forget()
        running.users = 0


def _stop_all() -> None:
    for running in list(_running.values()):
        running.stop()
    _running.clear()


os.register_at_fork(after_in_child=_after_fork)
atexit.register(_stop_all)
