"""The memory cache: records and the operators made from them, counted by bytes, the oldest out first.

A record is kept as the bytes it arrived in (usually a memory-mapped file without a name) with its parsed view
on them; nothing is copied. Operators (analysis matrices of a mesh) belong to a record and leave with it.

Not thread-safe: it is used on the event loop's thread only. Whoever holds an entry may go on using it after
it was evicted.
"""

from __future__ import annotations

from collections import OrderedDict, defaultdict
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from modewright_service.store.counters import Counters

if TYPE_CHECKING:
    from modewright.record import Record

__all__ = ["Kept", "RecordCache"]


@dataclass(frozen=True, eq=False)
class Kept:
    """A basis in memory: `record` looks into `data`; `seconds` is what its solve took."""

    record: Record
    data: memoryview
    seconds: float

    @property
    def key(self) -> str:
        """The basis key."""
        return self.record.basis_key

    @property
    def size(self) -> int:
        """Bytes."""
        return self.data.nbytes


@dataclass(eq=False)
class _Operator:
    content: Any
    size: int


class RecordCache:
    """At most `capacity` bytes of records and operators.

    The entry used last always stays, whatever its size: a basis larger than the whole cache would otherwise
    be solved again for every call on it.
    """

    def __init__(self, capacity: int, counters: Counters) -> None:
        self._capacity = capacity
        self._counters = counters
        self._records: OrderedDict[str, Kept] = OrderedDict()
        self._by_problem: defaultdict[str, set[str]] = defaultdict(set)
        self._operators: defaultdict[str, OrderedDict[str, _Operator]] = defaultdict(OrderedDict)
        self._bytes = 0

    def __len__(self) -> int:
        return len(self._records)

    @property
    def size(self) -> int:
        """Bytes of everything kept."""
        return self._bytes

    def get(self, basis_key: str) -> Kept | None:
        """The basis of this key, and it becomes the one used last."""
        kept = self._records.get(basis_key)
        if kept is not None:
            self._records.move_to_end(basis_key)
        return kept

    def covering(self, problem_digest: str, modes: int, rtol: float) -> Kept | None:
        """The smallest basis of this problem with at least `modes` modes and a tolerance of at most `rtol`.

        Of two equally small ones the looser: it is what a solve would have given.
        """
        candidates = [self._records[key] for key in self._by_problem.get(problem_digest, ())]
        fitting = [kept for kept in candidates if kept.record.count >= modes and kept.record.rtol <= rtol]
        if not fitting:
            return None
        best = min(fitting, key=lambda kept: (kept.record.count, -kept.record.rtol))
        return self.get(best.key)

    def put(self, kept: Kept) -> None:
        """Keep a basis; what was used least recently makes room for it."""
        self._drop(kept.key)
        self._records[kept.key] = kept
        self._by_problem[kept.record.problem_digest].add(kept.key)
        self._bytes += kept.size
        self._shrink()

    def operator(self, basis_key: str, operator_key: str) -> Any | None:
        """An operator of this basis, or None."""
        operators = self._operators.get(basis_key)
        operator = operators.get(operator_key) if operators else None
        if operators is None or operator is None:
            return None
        operators.move_to_end(operator_key)
        self.get(basis_key)
        return operator.content

    def put_operator(self, basis_key: str, operator_key: str, content: Any, size: int) -> None:
        """Keep an operator of `size` bytes with its basis, as long as the basis itself is kept."""
        if basis_key not in self._records:
            return
        operators = self._operators[basis_key]
        old = operators.pop(operator_key, None)
        operators[operator_key] = _Operator(content, size)
        self._bytes += size - (old.size if old else 0)
        self._records.move_to_end(basis_key)
        self._shrink()

    def _shrink(self) -> None:
        while self._bytes > self._capacity and len(self._records) > 1:
            self._drop(next(iter(self._records)))
            self._counters.cache_evictions += 1
        # One basis is left: then its own older operators go, but not the newest.
        for operators in self._operators.values():
            while self._bytes > self._capacity and len(operators) > 1:
                _, old = operators.popitem(last=False)
                self._bytes -= old.size
                self._counters.cache_evictions += 1
        self._counters.cache_bytes = self._bytes
        self._counters.cache_records = len(self._records)

    def _drop(self, basis_key: str) -> None:
        kept = self._records.pop(basis_key, None)
        if kept is None:
            return
        self._bytes -= kept.size
        self._bytes -= sum(operator.size for operator in self._operators.pop(basis_key, {}).values())
        keys = self._by_problem[kept.record.problem_digest]
        keys.discard(basis_key)
        if not keys:
            del self._by_problem[kept.record.problem_digest]
