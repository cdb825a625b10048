"""The two services: embedded, and the command over TCP."""

from __future__ import annotations

import json
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path
from typing import IO

import pytest

import modewright


def _address_in(log: IO[str]) -> str:
    """The address in the service's own log, which says when it serves."""
    for line in log:
        record = json.loads(line)
        if record.get("message") == "serving":
            return str(record["address"])
    raise AssertionError("the service ended before it served")


@pytest.fixture(scope="session")
def remote(tmp_path_factory: pytest.TempPathFactory) -> Iterator[modewright.Service]:
    """A handle of the service run as its command on a port of its own."""
    folder: Path = tmp_path_factory.mktemp("remote")
    command = [sys.executable, "-m", "modewright_service", "--listen", "127.0.0.1:0", "--workers", "1"]
    command += [
        "--log-format",
        "json",
        "--spool",
        str(folder / "spool"),
        "--drain-seconds",
        "0",
        "--metrics",
        "",
    ]
    with subprocess.Popen(command, stderr=subprocess.PIPE, text=True) as process:
        assert process.stderr is not None
        try:
            with modewright.connect(_address_in(process.stderr)) as handle:
                yield handle
        finally:
            process.terminate()


@pytest.fixture(scope="session", params=["embedded", "remote"])
def either(request: pytest.FixtureRequest) -> modewright.Service:
    """Each of the two services in turn."""
    name = {"embedded": "service", "remote": "remote"}[request.param]
    handle: modewright.Service = request.getfixturevalue(name)
    return handle
