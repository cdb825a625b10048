"""One service from start to end: built, serving, draining, stopped.

Draining (on SIGTERM): health says NOT_SERVING while every call is still answered, so that balancers have
time to look away; then the server takes no new calls and those under way have a grace period; what is left
then is answered UNAVAILABLE with the reason SHUTTING_DOWN, which clients retry elsewhere.
"""

from __future__ import annotations

import asyncio
import contextlib
import importlib
import logging
import os
import shutil
import signal
import threading
import time
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from typing import Any, Final

import grpc
from grpc_health.v1 import health, health_pb2, health_pb2_grpc

from modewright.v1 import eigenbasis_service_pb2, eigenbasis_service_pb2_grpc
from modewright_service import __version__
from modewright_service.process.crew import Crew
from modewright_service.process.embedded import announce, watch_parent
from modewright_service.process.pool import PoolLimits, WorkerPool
from modewright_service.process.settings import Settings, SettingsError
from modewright_service.process.telemetry import MetricsPort
from modewright_service.rpc.desk import Desk, Limits
from modewright_service.rpc.eigenbasis import EigenbasisServicer, drafted_methods
from modewright_service.rpc.interceptors import CallGuard, UnservedCalls
from modewright_service.store.cache import RecordCache
from modewright_service.store.counters import Counters
from modewright_service.store.library import Library

__all__ = ["SERVICE_NAME", "Service", "serve"]

_log = logging.getLogger(__name__)

SERVICE_NAME: Final = eigenbasis_service_pb2.DESCRIPTOR.services_by_name["EigenbasisService"].full_name
# Above the limit that answers with a reason, so that only what is far too large meets gRPC's bare refusal.
_HEADROOM: Final = 1024 * 1024
# Time for the last answers, also those of calls refused at the end of the grace period, to leave.
_FLUSH_SECONDS: Final = 2.0
_ORPHAN_SECONDS: Final = 5.0
# How often a stopping service looks whether its last call has been answered.
_LOOK_SECONDS: Final = 0.05
_SERVING = health_pb2.HealthCheckResponse.SERVING
_NOT_SERVING = health_pb2.HealthCheckResponse.NOT_SERVING


class Service:
    """The service of one process. Create it on a running event loop; `start`, then `stop`."""

    def __init__(self, settings: Settings, crew: Crew) -> None:
        self.counters = Counters()
        self._settings = settings
        self._crew = crew
        self._executor = ThreadPoolExecutor(settings.threads, thread_name_prefix="transform")
        self.pool = WorkerPool(
            crew.setup,
            crew.board,
            crew.spool,
            crew.slots,
            self.counters,
            PoolLimits(settings.queue, settings.cancel_grace),
            crew.spawned,
            self._changed,
        )
        self.cache = RecordCache(settings.cache_bytes, self.counters)
        library = Library(self.cache, self.pool, self.counters, self._executor)
        limits = Limits(settings.max_modes, settings.message_bytes, settings.call_seconds)
        self._servicer = EigenbasisServicer(Desk(library, self.counters, limits, self._executor))
        module: Any = health  # its stubs leave the asynchronous half out
        self._health = module.aio.HealthServicer()
        self._server: grpc.aio.Server | None = None
        self._metrics: MetricsPort | None = None
        self._draining = False
        self._tasks: set[asyncio.Task[None]] = set()

    @property
    def serving(self) -> bool:
        """What health says."""
        return self.pool.usable and not self._draining

    @property
    def metrics_port(self) -> int:
        """The port of the metrics; 0 when there is none."""
        return self._metrics.port if self._metrics else 0

    async def start(self) -> str:
        """Begin to serve; returns the address for clients. Solves wait until the first worker is ready.

        Raises SettingsError for an address, a certificate or an option that cannot be used.
        """
        settings = self._settings
        self.pool.start()
        await self._tell_health()
        server = self._server = grpc.aio.server(
            interceptors=[CallGuard(self.counters, settings.message_bytes, drafted_methods())],
            options=self._options(),
        )
        eigenbasis_service_pb2_grpc.add_EigenbasisServiceServicer_to_server(self._servicer, server)
        health_pb2_grpc.add_HealthServicer_to_server(self._health, server)
        names = [SERVICE_NAME, health.SERVICE_NAME]
        if settings.channelz:
            names.append(_add_channelz(server))
        if settings.reflection:
            from grpc_reflection.v1alpha import reflection

            reflection.enable_server_reflection([*names, reflection.SERVICE_NAME], server)
        server.add_generic_rpc_handlers((UnservedCalls(),))
        address = self._bind(server)
        await server.start()
        if settings.metrics:
            try:
                self._metrics = MetricsPort(settings.metrics, self.counters, lambda: self.serving)
            except (OSError, ValueError) as error:
                raise SettingsError(f"metrics: {settings.metrics!r}: {error}") from error
        # SciPy takes half a second to import: before the first projection asks for it, off the event loop.
        self._executor.submit(importlib.import_module, "modewright_service.core.transforms")
        return address

    def _options(self) -> list[tuple[str, int]]:
        settings = self._settings
        options = [
            ("grpc.max_receive_message_length", settings.message_bytes + _HEADROOM),
            ("grpc.max_send_message_length", settings.message_bytes + _HEADROOM),
            # Two services on one port would each get a share of the calls; the second must fail instead.
            ("grpc.so_reuseport", 0),
            ("grpc.enable_channelz", int(settings.channelz)),
        ]
        if settings.max_connection_age:
            options.append(("grpc.max_connection_age_ms", round(settings.max_connection_age * 1000)))
        return options

    def _bind(self, server: grpc.aio.Server) -> str:
        settings = self._settings
        credentials = None
        if settings.tls_certificate:
            from modewright_service.process.tls import server_credentials

            try:
                credentials = server_credentials(
                    settings.tls_certificate, settings.tls_key, settings.tls_client_ca
                )
            except OSError as error:
                raise SettingsError(f"tls: cannot read {error.filename!r}: {error.strerror}") from error
        try:
            if credentials is not None:
                port = server.add_secure_port(settings.listen, credentials)
            else:
                port = server.add_insecure_port(settings.listen)
        except (OSError, RuntimeError, ValueError) as error:
            # gRPC's own words end in advice on its debugging that helps nobody here.
            reason = str(error).partition(";")[0]
            doubt = "do the TLS files fit together, and is it free?" if credentials else "is it free?"
            raise SettingsError(f"listen: cannot serve on {settings.listen!r}: {reason}: {doubt}") from error
        if settings.listen.startswith("unix:"):
            return settings.listen
        return f"{settings.listen.rpartition(':')[0]}:{port}"

    def _changed(self, usable: bool) -> None:
        _log.info("workers became %s", "ready" if usable else "unavailable")
        task = asyncio.create_task(self._tell_health())
        self._tasks.add(task)
        task.add_done_callback(self._tasks.discard)

    async def _tell_health(self) -> None:
        for name in ("", SERVICE_NAME):
            await self._health.set(name, _SERVING if self.serving else _NOT_SERVING)

    async def drain(self) -> None:
        """Say NOT_SERVING and go on answering for as long as balancers need to notice."""
        self._draining = True
        await self._tell_health()
        await self._health.enter_graceful_shutdown()
        _log.info("draining", extra={"seconds": self._settings.drain_seconds})
        await asyncio.sleep(self._settings.drain_seconds)

    async def stop(self, grace: float) -> None:
        """Take no more calls; those under way have `grace` seconds, then they get SHUTTING_DOWN."""
        self._draining = True
        if self._server is not None:
            stopping = asyncio.ensure_future(self._server.stop(grace + _FLUSH_SECONDS if grace else None))
            await self._last_answer(stopping, grace)
            await self.pool.close()
            # What is left are answers on their way, and watchers of health, who would stay for ever.
            await self._server.stop(_FLUSH_SECONDS if grace else None)
            await stopping
        else:
            await self.pool.close()
        if self._metrics is not None:
            await asyncio.to_thread(self._metrics.close)
        self._executor.shutdown(wait=False, cancel_futures=True)
        self._crew.board.close()
        self._crew.spool.close()
        _log.info("stopped")

    async def _last_answer(self, stopping: asyncio.Future[None], grace: float) -> None:
        """Wait until no call of this package is under way, at most `grace` seconds."""
        limit = time.monotonic() + grace
        while (left := limit - time.monotonic()) > 0.0:
            # Before the first look as well: a call that has just been accepted is not counted yet.
            await asyncio.wait({stopping}, timeout=min(left, _LOOK_SECONDS))
            if stopping.done() or not self.counters.calls_in_flight:
                return


def _add_channelz(server: grpc.aio.Server) -> str:
    try:
        from grpc_channelz.v1 import channelz, channelz_pb2
    except ImportError as error:
        raise SettingsError("channelz: needs the package grpcio-channelz") from error
    add: Any = channelz.add_channelz_servicer  # its stubs know the synchronous server only
    add(server)
    return str(channelz_pb2.DESCRIPTOR.services_by_name["Channelz"].full_name)


async def serve(
    settings: Settings, crew: Crew, ready_fd: int | None = None, folder: Path | None = None
) -> None:
    """Serve until told to stop: by SIGTERM or SIGINT, or, embedded, by the parent's end of `ready_fd`
    closing.

    folder: the parent's folder for this service, removed when the parent is gone.
    SIGTERM drains first; SIGINT, typed by a person, does not; a second signal ends the waiting.
    """
    loop = asyncio.get_running_loop()
    told: asyncio.Queue[str] = asyncio.Queue()
    loop.add_signal_handler(signal.SIGTERM, told.put_nowait, "terminate")
    # The parent of an embedded service may be interrupted at a terminal and go on: it decides when to stop.
    interrupt = "" if ready_fd is not None else "interrupt"
    loop.add_signal_handler(signal.SIGINT, lambda: told.put_nowait(interrupt) if interrupt else None)

    service = Service(settings, crew)
    try:
        address = await service.start()
    except SettingsError:
        await service.stop(0.0)
        raise
    _log.info(
        "serving",
        extra={"address": address, "workers": crew.slots, "version": __version__, "pid": os.getpid()},
    )
    if ready_fd is not None:

        def gone() -> None:
            # Nobody is left to wait for: whatever hangs must not keep this process alive.
            threading.Timer(_ORPHAN_SECONDS, os._exit, (0,)).start()
            if folder is not None:
                shutil.rmtree(folder, ignore_errors=True)
            loop.call_soon_threadsafe(told.put_nowait, "orphaned")

        watch_parent(ready_fd, gone)
        with contextlib.suppress(OSError):  # the parent has gone already, which the watch will see
            announce(ready_fd, address)

    cause = await told.get()
    _log.info("stopping", extra={"cause": cause})
    again = asyncio.ensure_future(told.get())
    if cause == "terminate":
        draining = asyncio.ensure_future(service.drain())
        await asyncio.wait({draining, again}, return_when=asyncio.FIRST_COMPLETED)
        draining.cancel()
    stopping = asyncio.ensure_future(service.stop(0.0 if cause == "orphaned" else settings.grace_seconds))
    await asyncio.wait({stopping, again}, return_when=asyncio.FIRST_COMPLETED)
    if not stopping.done():
        stopping.cancel()
        with contextlib.suppress(asyncio.CancelledError):
            await stopping
        await service.stop(0.0)
    again.cancel()
    await asyncio.gather(stopping, return_exceptions=True)
