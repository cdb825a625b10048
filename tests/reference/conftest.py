from __future__ import annotations

from collections.abc import Callable

import pytest

import modewright
from tests.reference.load import problem_from_record, records


@pytest.fixture(scope="session")
def solved(service: modewright.Service) -> Callable[..., modewright.Basis]:
    """Solves a record by its name, once for each count of modes and tolerance."""
    by_name = {record["name"]: record for record in records()}
    kept: dict[tuple[str, int, float], modewright.Basis] = {}

    def solve(name: str, modes: int, rtol: float = 1e-9) -> modewright.Basis:
        key = (name, modes, rtol)
        if key not in kept:
            kept[key] = service.solve(problem_from_record(by_name[name]), modes=modes, rtol=rtol)
        return kept[key]

    return solve
