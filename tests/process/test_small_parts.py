"""Slots, spool, settings, logs: the small parts that the rest stands on."""

from __future__ import annotations

import argparse
import io
import json
import logging
import math
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest

from modewright_service.process import logs
from modewright_service.process.settings import Settings, SettingsError, add_flags, parse
from modewright_service.process.slots import SlotBoard
from modewright_service.process.spool import Spool

# ---- slots ----


def test_what_the_front_writes_the_worker_sees(tmp_path: Path) -> None:
    front = SlotBoard.create(tmp_path / "board", 3)
    worker = SlotBoard(tmp_path / "board")
    assert [worker.cause(slot) for slot in range(3)] == ["", "", ""]
    front.arm(1, time.monotonic() + 1000.0)
    assert worker.cause(1) == ""
    front.cancel(1)
    assert [worker.cause(slot) for slot in range(3)] == ["", "cancelled", ""]
    front.arm(1, time.monotonic() - 1.0)
    assert worker.cause(1) == "deadline"
    front.extend(1, math.inf)
    assert worker.cause(1) == ""
    worker.report(2, 12345)
    assert [front.steps(slot) for slot in range(3)] == [0, 0, 12345]
    front.arm(2, math.inf)
    assert front.steps(2) == 0
    worker.close()
    front.close()


# ---- spool ----


def test_a_record_is_taken_and_leaves_no_name(tmp_path: Path) -> None:
    spool = Spool(tmp_path / "spool")
    path = spool.path("1.record")
    path.write_bytes(b"content")
    data = spool.take(path)
    assert bytes(data) == b"content"
    assert not path.exists()
    spool.close()
    assert bytes(data) == b"content"
    assert not spool.folder.exists()


def test_a_killed_front_is_swept_and_a_living_one_is_not(tmp_path: Path) -> None:
    root = tmp_path / "spool"
    program = (
        "import sys, time; from pathlib import Path; from modewright_service.process.spool import Spool\n"
        "spool = Spool(Path(sys.argv[1])); spool.path('left.record').write_bytes(b'x' * 1000)\n"
        "print(spool.folder, flush=True); time.sleep(600)"
    )
    dead, alive = (
        subprocess.Popen([sys.executable, "-c", program, str(root)], stdout=subprocess.PIPE, text=True)
        for _ in range(2)
    )
    folders = []
    for process in (dead, alive):
        assert process.stdout is not None
        with process.stdout:
            folders.append(Path(process.stdout.readline().strip()))
    dead.send_signal(signal.SIGKILL)
    dead.wait()
    spool = Spool(root)
    assert spool.swept == 1
    assert not folders[0].exists()
    assert (folders[1] / "left.record").exists()
    spool.close()
    alive.kill()
    alive.wait()


def test_somebody_elses_spool_is_refused(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    (tmp_path / "spool").mkdir()
    monkeypatch.setattr("os.getuid", lambda: 12345678)
    with pytest.raises(PermissionError, match="another user"):
        Spool(tmp_path / "spool")


# ---- settings ----


def _flags(*arguments: str) -> argparse.Namespace:
    parser = argparse.ArgumentParser()
    add_flags(parser)
    return parser.parse_args(arguments)


def test_flags_win_over_the_environment_and_that_over_defaults() -> None:
    environment = {
        "MODEWRIGHT_WORKERS": "3",
        "MODEWRIGHT_QUEUE": "7",
        "MODEWRIGHT_REFLECTION": "no",
        "MODEWRIGHT_SPOOL": "/somewhere",
        "MODEWRIGHT_CALL_SECONDS": "12.5",
    }
    settings = parse(_flags("--queue", "9", "--channelz"), environment)
    assert (settings.workers, settings.slots, settings.queue) == (3, 3, 9)
    assert (settings.reflection, settings.channelz) == (False, True)
    assert settings.spool == Path("/somewhere")
    assert settings.call_seconds == 12.5
    assert settings.listen == Settings().listen
    assert Settings().slots >= 1


@pytest.mark.parametrize(
    ("arguments", "environment", "named"),
    [
        (["--workers", "two"], {}, ["--workers", "two"]),
        ([], {"MODEWRIGHT_REFLECTION": "perhaps"}, ["MODEWRIGHT_REFLECTION", "perhaps"]),
        (["--max-modes", "0"], {}, ["max_modes", "0"]),
        (["--call-seconds", "nan"], {}, ["call_seconds", "nan"]),
        (["--tls-key", "key.pem"], {}, ["tls_certificate"]),
        (["--tls-client-ca", "ca.pem"], {}, ["tls_client_ca"]),
        (["--log-level", "loud"], {}, ["log_level", "loud"]),
        (["--workers", "100000"], {}, ["workers", "100000"]),
        (["--listen", "nowhere"], {}, ["listen", "nowhere"]),
        ([], {"MODEWRIGHT_LISTEN": "localhost:99999"}, ["listen", "localhost:99999", "between 0 and 65535"]),
        (["--metrics", "9100"], {}, ["metrics", "9100"]),
    ],
)
def test_settings_that_cannot_be_used(
    arguments: list[str], environment: dict[str, str], named: list[str]
) -> None:
    with pytest.raises(SettingsError) as caught:
        parse(_flags(*arguments), environment)
    assert all(word in str(caught.value) for word in named)


# ---- logs ----


def test_a_log_line_is_one_object(monkeypatch: pytest.MonkeyPatch) -> None:
    stream = io.StringIO()
    logger = logging.getLogger("modewright_service")
    before = logger.handlers[:], logger.level, logger.propagate
    monkeypatch.setattr("sys.stderr", stream)
    try:
        logs.configure("info", "json")
        try:
            raise ValueError("two\nlines")
        except ValueError:
            logger.getChild("part").exception("it %s", "broke", extra={"slot": 3})
        logger.debug("not shown")
    finally:
        logger.handlers[:], logger.level, logger.propagate = before
    (line,) = stream.getvalue().splitlines()
    record = json.loads(line)
    assert (record["message"], record["slot"], record["level"]) == ("it broke", 3, "error")
    assert record["logger"] == "modewright_service.part"
    assert "two\nlines" in record["traceback"]
