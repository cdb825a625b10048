"""Logs on stderr: one JSON object a line for machines, or plain text for a person at a terminal."""

from __future__ import annotations

import json
import logging
import sys
import time
from typing import Final

__all__ = ["configure"]

# What every record has; anything else was given by `extra` and belongs into the line.
_STANDARD: Final = frozenset(logging.makeLogRecord({}).__dict__) | {"message", "asctime", "taskName"}


def _extra(record: logging.LogRecord) -> dict[str, object]:
    return {key: value for key, value in record.__dict__.items() if key not in _STANDARD}


class _Json(logging.Formatter):
    def format(self, record: logging.LogRecord) -> str:
        line: dict[str, object] = {
            "time": time.strftime("%Y-%m-%dT%H:%M:%S", time.gmtime(record.created))
            + f".{int(record.msecs):03d}Z",
            "level": record.levelname.lower(),
            "logger": record.name,
            "message": record.getMessage(),
            **_extra(record),
        }
        if record.exc_info:
            line["traceback"] = self.formatException(record.exc_info)
        return json.dumps(line, default=str)


class _Text(logging.Formatter):
    def format(self, record: logging.LogRecord) -> str:
        text = super().format(record)
        extra = " ".join(f"{key}={value}" for key, value in _extra(record).items())
        return f"{text} [{extra}]" if extra else text


def configure(level: str, form: str) -> None:
    """Send this package's logs to stderr; the root logger and other packages' loggers stay as they are."""
    handler = logging.StreamHandler(sys.stderr)
    handler.setFormatter(_Json() if form == "json" else _Text("%(asctime)s %(levelname)s %(message)s"))
    logger = logging.getLogger("modewright_service")
    logger.handlers[:] = [handler]
    logger.setLevel(level.upper())
    logger.propagate = False
