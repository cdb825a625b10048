"""The memory cache counts bytes, forgets the least recently used, and knows which basis answers what."""

from __future__ import annotations

from dataclasses import replace

import pytest

from modewright_service.store.cache import Kept, RecordCache
from modewright_service.store.counters import Counters
from tests.core.handmade import sines


def kept(key: str, problem: str = "p", count: int = 8, rtol: float = 1e-9) -> Kept:
    record = replace(sines(count, 2), basis_key=key, problem_digest=problem, rtol=rtol)
    return Kept(record, memoryview(record.to_bytes()), 0.5)


SIZE = kept("a").size


@pytest.fixture
def counters() -> Counters:
    return Counters()


def test_least_recently_used_goes_first(counters: Counters) -> None:
    cache = RecordCache(2 * SIZE, counters)
    cache.put(kept("a"))
    cache.put(kept("b"))
    assert cache.get("a") is not None
    cache.put(kept("c"))
    assert cache.get("b") is None
    assert cache.get("a") is not None
    assert cache.get("c") is not None
    assert cache.size == 2 * SIZE == counters.cache_bytes
    assert counters.cache_evictions == 1
    assert counters.cache_records == len(cache) == 2


def test_putting_a_key_again_does_not_count_twice(counters: Counters) -> None:
    cache = RecordCache(10 * SIZE, counters)
    cache.put(kept("a"))
    cache.put(kept("a"))
    assert len(cache) == 1
    assert cache.size == SIZE


def test_the_newest_stays_whatever_its_size(counters: Counters) -> None:
    cache = RecordCache(SIZE // 2, counters)
    cache.put(kept("a"))
    assert cache.get("a") is not None
    cache.put(kept("b"))
    assert cache.get("a") is None
    assert cache.get("b") is not None


def test_covering_takes_the_smallest_that_suffices(counters: Counters) -> None:
    cache = RecordCache(100 * SIZE, counters)
    for key, count, rtol in (("24", 24, 1e-9), ("12", 12, 1e-9), ("12t", 12, 1e-12), ("8", 8, 1e-6)):
        cache.put(kept(key, "p", count, rtol))
    cache.put(kept("other", "q", 10))

    def found(modes: int, rtol: float, problem: str = "p") -> str | None:
        basis = cache.covering(problem, modes, rtol)
        return basis.key if basis else None

    assert found(8, 1e-6) == "8"
    # Tighter than what the smallest was solved for: the next larger one, and the looser of two.
    assert found(8, 1e-9) == "12"
    assert found(12, 1e-12) == "12t"
    assert found(13, 1e-9) == "24"
    assert found(13, 1e-12) is None
    assert found(25, 1e-6) is None
    assert found(8, 1e-9, "q") == "other"
    assert found(8, 1e-9, "nobody's") is None


def test_covering_forgets_what_was_evicted(counters: Counters) -> None:
    cache = RecordCache(SIZE, counters)
    cache.put(kept("a", "p"))
    cache.put(kept("b", "q"))
    assert cache.covering("p", 8, 1e-6) is None


def test_operators_leave_with_their_basis(counters: Counters) -> None:
    cache = RecordCache(2 * SIZE + 100, counters)
    cache.put(kept("a"))
    cache.put_operator("a", "mesh", "matrix", 100)
    assert cache.operator("a", "mesh") == "matrix"
    assert cache.size == SIZE + 100
    cache.put(kept("b"))
    assert cache.operator("a", "mesh") == "matrix"
    cache.put(kept("c"))
    assert cache.get("b") is None, "the use of an operator is a use of its basis"
    cache.put(kept("d"))
    assert cache.operator("a", "mesh") is None
    assert cache.size == 2 * SIZE


def test_older_operators_of_the_last_basis_go(counters: Counters) -> None:
    cache = RecordCache(SIZE + 150, counters)
    cache.put(kept("a"))
    cache.put_operator("a", "first", 1, 100)
    cache.put_operator("a", "second", 2, 100)
    assert cache.operator("a", "first") is None
    assert cache.operator("a", "second") == 2
    assert cache.size == SIZE + 100


def test_an_operator_of_no_basis_is_not_kept(counters: Counters) -> None:
    cache = RecordCache(SIZE, counters)
    cache.put_operator("gone", "mesh", 1, 100)
    assert cache.operator("gone", "mesh") is None
    assert cache.size == 0
