"""Counts of what the service has done, as plain numbers.

They belong to no metrics library: answers carry one of them, tests read them, and the process room exposes
them in whatever text a monitoring system wants.
"""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass, field

__all__ = ["Counters"]

# Upper edges in seconds: a cached answer takes a millisecond, a hard solve minutes.
_EDGES = (0.001, 0.0025, 0.005, 0.01, 0.025, 0.05, 0.1, 0.25, 0.5, 1.0, 2.5, 5.0, 10.0, 30.0, 60.0, 300.0)


@dataclass
class Histogram:
    """Counts of durations in seconds by bucket (not cumulative), with their sum."""

    edges: tuple[float, ...] = _EDGES
    counts: list[int] = field(default_factory=lambda: [0] * (len(_EDGES) + 1))
    total: float = 0.0

    def add(self, seconds: float) -> None:
        """Count one duration."""
        index = next((i for i, edge in enumerate(self.edges) if seconds <= edge), len(self.edges))
        self.counts[index] += 1
        self.total += seconds


@dataclass
class Counters:
    """Everything counted since the process started. Changed on the event loop's thread only."""

    solves_started: int = 0
    solves_finished: int = 0
    solves_failed: int = 0
    solves_cancelled: int = 0
    solves_retried: int = 0
    solves_running: int = 0
    solves_waiting: int = 0
    records_damaged: int = 0
    solve_joins: int = 0
    cache_hits: int = 0
    cache_misses: int = 0
    cache_evictions: int = 0
    cache_bytes: int = 0
    cache_records: int = 0
    operators_built: int = 0
    operator_hits: int = 0
    worker_restarts: int = 0
    workers_ready: int = 0
    calls_in_flight: int = 0
    solve_seconds: Histogram = field(default_factory=Histogram)
    calls: Counter[tuple[str, str]] = field(default_factory=Counter)
    """(method, status name) -> calls answered."""
    call_seconds: dict[str, Histogram] = field(default_factory=dict)

    def call_ended(self, method: str, status: str, seconds: float) -> None:
        """Count one answered call."""
        self.calls[method, status] += 1
        self.call_seconds.setdefault(method, Histogram()).add(seconds)
