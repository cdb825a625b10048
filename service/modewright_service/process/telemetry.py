"""Prometheus text over HTTP, made from the plain counters at the moment of the scrape.

prometheus_client is imported only where the port is switched on: an embedded service never pays for it.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from typing import TYPE_CHECKING, Any, Final

from modewright_service import __version__
from modewright_service.store.counters import Counters, Histogram

if TYPE_CHECKING:
    from prometheus_client.metrics_core import Metric

__all__ = ["MetricsPort", "split_address"]

_COUNTERS: Final = {
    "solves_started": "Solves given to a worker, retries not counted.",
    "solves_finished": "Solves that gave a basis.",
    "solves_failed": "Solves refused by the solver or lost.",
    "solves_cancelled": "Solves stopped because nobody waited any more or the deadline passed.",
    "solves_retried": "Solves tried again after their worker had died.",
    "records_damaged": "Records that came damaged from a worker and were thrown away.",
    "solve_joins": "Calls that joined a solve which another call had started.",
    "cache_hits": "Calls answered from the memory cache.",
    "cache_misses": "Calls that found no basis in the memory cache.",
    "cache_evictions": "Bases and operators put out of the memory cache.",
    "operators_built": "Analysis matrices built.",
    "operator_hits": "Analysis matrices found in the cache.",
    "worker_restarts": "Workers started again after they had ended.",
}
_GAUGES: Final = {
    "solves_running": "Solves in workers now.",
    "solves_waiting": "Solves that wait for a worker now.",
    "cache_bytes": "Bytes in the memory cache.",
    "cache_records": "Bases in the memory cache.",
    "workers_ready": "Workers that have started and live.",
    "calls_in_flight": "Calls being answered now.",
}


class _Collector:
    def __init__(self, counters: Counters, ready: Callable[[], bool]) -> None:
        self._counters = counters
        self._ready = ready

    def collect(self) -> Iterator[Metric]:
        """Called by prometheus_client for every scrape, in its own thread; reads plain numbers only."""
        from prometheus_client.core import CounterMetricFamily, GaugeMetricFamily, HistogramMetricFamily

        counters = self._counters
        for name, text in _COUNTERS.items():
            yield CounterMetricFamily(f"modewright_{name}", text, value=getattr(counters, name))
        for name, text in _GAUGES.items():
            yield GaugeMetricFamily(f"modewright_{name}", text, value=getattr(counters, name))
        yield GaugeMetricFamily(
            "modewright_serving", "Whether health says SERVING.", value=int(self._ready())
        )
        info = GaugeMetricFamily("modewright_info", "The version that runs.", labels=["version"])
        info.add_metric([__version__], 1)
        yield info
        solve = HistogramMetricFamily(
            "modewright_solve_seconds", "Seconds that a finished solve took in its worker."
        )
        solve.add_metric([], *_buckets(counters.solve_seconds))
        yield solve
        calls = CounterMetricFamily("modewright_calls", "Calls answered.", labels=["method", "status"])
        for (method, status), count in list(counters.calls.items()):
            calls.add_metric([method, status], count)
        yield calls
        seconds = HistogramMetricFamily(
            "modewright_call_seconds", "Seconds to answer a call.", labels=["method"]
        )
        for method, histogram in list(counters.call_seconds.items()):
            seconds.add_metric([method], *_buckets(histogram))
        yield seconds


def _buckets(histogram: Histogram) -> tuple[list[tuple[str, float]], float]:
    total, buckets = 0.0, []
    for edge, count in zip([*map(str, histogram.edges), "+Inf"], histogram.counts, strict=True):
        total += count
        buckets.append((edge, total))
    return buckets, histogram.total


class MetricsPort:
    """Serves /metrics on `address` (host:port, port 0 for any) until closed. Raises OSError."""

    def __init__(self, address: str, counters: Counters, ready: Callable[[], bool]) -> None:
        from prometheus_client import CollectorRegistry, start_http_server

        registry = CollectorRegistry()
        collector: Any = _Collector(counters, ready)
        registry.register(collector)
        host, port = split_address(address)
        self._server, self._thread = start_http_server(port, host, registry)
        self.port = int(self._server.server_port)

    def close(self) -> None:
        """Stop serving."""
        self._server.shutdown()
        self._server.server_close()
        self._thread.join()


def split_address(address: str) -> tuple[str, int]:
    """Host and port of "host:port". Raises ValueError naming the address."""
    host, colon, port = address.rpartition(":")
    if not colon or not port.isdecimal():
        raise ValueError(f"{address!r} is not host:port")
    return host.strip("[]") or "0.0.0.0", int(port)
