"""Settings: from the environment (MODEWRIGHT_*) and from flags, which win.

The table of fields is the only list: flags, environment names and help text are made from it.
"""

from __future__ import annotations

import argparse
import os
import tempfile
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, fields
from pathlib import Path
from typing import Any, Final

__all__ = ["PREFIX", "Settings", "SettingsError", "parse"]

PREFIX: Final = "MODEWRIGHT_"
# More than the processors of any machine that this is meant for: a slip of the finger.
_MOST_WORKERS: Final = 1024
_TRUE: Final = {"1", "true", "yes", "on"}
_FALSE: Final = {"0", "false", "no", "off"}


class SettingsError(ValueError):
    """A setting that cannot be used; the text names it and its value."""


def _setting(default: Any, text: str, least: float | None = None, form: str = "") -> Any:
    """A field of the table. form: how help text names its value; by its type where that says enough."""
    return field(default=default, metadata={"help": text, "least": least, "form": form})


def available_cpus() -> int:
    """Processors that this process may use."""
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


def _default_spool() -> Path:
    return Path(tempfile.gettempdir()) / f"modewright-spool-{os.getuid()}"


@dataclass(frozen=True)
class Settings:
    """Everything about a service process that can be set; times in seconds, sizes in bytes."""

    listen: str = _setting("127.0.0.1:50151", "address to serve on: host:port, or unix:/path", form="ADDRESS")
    workers: int = _setting(0, "processes that solve; 0: one less than there are processors, at least one", 0)
    worker_nice: int = _setting(10, "niceness of the workers", 0)
    spool: Path = field(
        default_factory=_default_spool,
        metadata={"help": "folder through which workers hand over results", "form": "PATH"},
    )
    cache_bytes: int = _setting(512 * 1024 * 1024, "memory for bases and operators", 0, "BYTES")
    queue: int = _setting(256, "solves that may wait for a worker", 0)
    max_modes: int = _setting(2048, "most modes of one basis", 1)
    message_bytes: int = _setting(8 * 1024 * 1024, "largest request and answer", 64 * 1024, "BYTES")
    call_seconds: float = _setting(3600.0, "longest that any call may take", 1.0)
    cancel_grace: float = _setting(10.0, "time a worker has to heed a cancellation before it is killed", 0.1)
    threads: int = _setting(2, "threads for transforms in the front", 1)
    drain_seconds: float = _setting(
        15.0, "time between NOT_SERVING and the end of service: three health intervals of the balancer", 0.0
    )
    grace_seconds: float = _setting(25.0, "time that calls have to end after that", 0.0)
    max_connection_age: float = _setting(
        0.0, "connections are asked to reconnect after this time, so that clients spread; 0: never", 0.0
    )
    reflection: bool = _setting(True, "answer server reflection")
    channelz: bool = _setting(False, "answer channelz (needs grpcio-channelz)")
    metrics: str = _setting("", "host:port for Prometheus metrics over HTTP; empty: none", form="ADDRESS")
    tls_certificate: str = _setting(
        "", "PEM file of the certificate chain, which switches TLS on; reread when it changes", form="PATH"
    )
    tls_key: str = _setting("", "PEM file of its private key", form="PATH")
    tls_client_ca: str = _setting(
        "", "PEM file of the authorities that clients' certificates must come from", form="PATH"
    )
    log_level: str = _setting("info", "debug, info, warning or error", form="LEVEL")
    log_format: str = _setting("json", "json (an object a line) or text", form="FORMAT")

    def __post_init__(self) -> None:
        for item in fields(self):
            least = item.metadata.get("least")
            value = getattr(self, item.name)
            if least is not None and not value >= least:
                raise SettingsError(f"{item.name}: {value} is below {least:g}")
        if self.workers > _MOST_WORKERS:
            raise SettingsError(f"workers: {self.workers} is above {_MOST_WORKERS}")
        if not self.listen.startswith("unix:"):
            _check_address("listen", self.listen)
        if self.metrics:
            _check_address("metrics", self.metrics)
        if bool(self.tls_certificate) != bool(self.tls_key):
            raise SettingsError("tls_certificate and tls_key: one is set without the other")
        if self.tls_client_ca and not self.tls_certificate:
            raise SettingsError("tls_client_ca: needs tls_certificate and tls_key")
        if self.log_format not in ("json", "text"):
            raise SettingsError(f"log_format: {self.log_format!r} is neither json nor text")
        if self.log_level not in ("debug", "info", "warning", "error"):
            raise SettingsError(f"log_level: {self.log_level!r} is not debug, info, warning or error")

    @property
    def slots(self) -> int:
        """Worker processes to run: the front's own work needs a processor too, where there are several."""
        return self.workers or max(1, available_cpus() - 1)


def _check_address(name: str, address: str) -> None:
    host, _, port = address.rpartition(":")
    if not host or not port.isdecimal():
        raise SettingsError(f"{name}: {address!r} is not host:port")
    if int(port) > 65535:
        raise SettingsError(f"{name}: the port of {address!r} is not between 0 and 65535")


def add_flags(parser: argparse.ArgumentParser) -> None:
    """A flag for each setting; its default stays unset, so that the environment can speak."""
    for item in fields(Settings):
        flag = "--" + item.name.replace("_", "-")
        default = _default_spool() if item.name == "spool" else item.default
        shown = {True: "yes", False: "no"}[default] if isinstance(default, bool) else default
        shown = f"{shown:g}" if isinstance(shown, float) else shown
        text = f"{item.metadata['help']} (default: {'none' if shown == '' else shown}; "
        text = f"{text}{PREFIX}{item.name.upper()})".replace("%", "%%")
        if isinstance(default, bool):
            parser.add_argument(flag, action=argparse.BooleanOptionalAction, default=None, help=text)
        else:
            form = item.metadata.get("form") or ("SECONDS" if isinstance(default, float) else "NUMBER")
            parser.add_argument(flag, metavar=form, default=None, help=text)


def parse(flags: argparse.Namespace | None, environment: Mapping[str, str], **forced: Any) -> Settings:
    """The settings from flags, else the environment, else the defaults; `forced` overrides all.

    Raises SettingsError naming the setting.
    """
    values: dict[str, Any] = {}
    for item in fields(Settings):
        raw = getattr(flags, item.name, None)
        source = "--" + item.name.replace("_", "-")
        if raw is None:
            source = PREFIX + item.name.upper()
            raw = environment.get(source)
        if raw is None or raw == "":
            continue
        default = Path() if item.name == "spool" else item.default
        try:
            values[item.name] = _read(raw, type(default))
        except ValueError as error:
            raise SettingsError(f"{source}: {raw!r} is not {_kind(default)}") from error
    return Settings(**{**values, **forced})


def _read(raw: Any, kind: type[Any]) -> Any:
    if isinstance(raw, bool):
        return raw
    if kind is bool:
        if raw.lower() not in _TRUE | _FALSE:
            raise ValueError(raw)
        return raw.lower() in _TRUE
    return Path(raw) if issubclass(kind, Path) else kind(raw)


def _kind(default: Any) -> str:
    names: Sequence[tuple[type, str]] = ((bool, "yes or no"), (int, "a whole number"), (float, "a number"))
    return next((name for kind, name in names if isinstance(default, kind)), "text")
