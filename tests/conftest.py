"""Settings of the whole suite: tiers, and one BLAS thread a process."""

from __future__ import annotations

import os
from collections.abc import Iterator
from typing import TYPE_CHECKING

import pytest

if TYPE_CHECKING:
    import modewright

TIERS = ("core", "peers", "long")

# Before any test module loads NumPy: two processes with two BLAS threads each are slower than with one.
for _name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ.setdefault(_name, "1")


# First, so that "-m core" sees the marks that are added here.
@pytest.hookimpl(tryfirst=True)
def pytest_collection_modifyitems(items: list[pytest.Item]) -> None:
    """A test that names no tier belongs to core."""
    for item in items:
        if not any(item.get_closest_marker(tier) for tier in TIERS):
            item.add_marker(pytest.mark.core)


@pytest.fixture(scope="session")
def service() -> Iterator[modewright.Service]:
    """One embedded service for everything that only asks and changes nothing: it is started once."""
    import modewright

    with modewright.connect() as handle:
        yield handle
