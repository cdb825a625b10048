"""The reference eigenvalues, index by index, against the answers of the real service.

Sources: the ``source`` field of each record in ``data/reference_problems.json``; values confirmed there
by two routes to at least 30 digits. Errors are relative to ``s_n = max(|lambda_n|, Lambda)``, ``Lambda
= (pi / integral of sqrt(w/p))^2``, with the integral by the tests' own Gauss rule.

The tolerances are the promises: at the default tolerance an error and a width of at most 1e-9 s_n, at rtol
1e-12 an error of at most 1e-11 s_n, and the true value between the bounds always. Containment is judged in
decimal arithmetic, without rounding the reference value to a double first.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from decimal import Decimal
from typing import Any

import numpy as np
import pytest

import modewright
from tests.reference.coverage import (
    AHEAD,
    COUPLED,
    COVERED,
    REGULAR,
    SINGULAR,
    UNCOVERED,
    highest_low_index,
    record_of,
)
from tests.reference.functions import dense_from_document
from tests.reference.load import document_from_record, problem_from_record, records

DEFAULT_RTOL = 1e-9
TIGHT_RTOL = 1e-12
HIGH = tuple(
    name for name in COVERED if any(entry["index"] > 100 for entry in record_of(name).get("also", []))
)
# A thousand modes take seconds: these stand for all in the quick tier, the rest is long.
QUICK_HIGH = ("dirichlet-unit", "w-x-squared")
# Of singular and coupled ends at the tight tolerance likewise.
QUICK_TIGHT = ("bessel-half-dirichlet", "legendre", "p-x-three-halves", "lattice-band-edges")

Solved = Callable[..., modewright.Basis]


def _listed(name: str, low: int, high: int) -> Iterator[tuple[int, Decimal]]:
    record = record_of(name)
    yield from (
        (n, Decimal(value))
        for n, value in enumerate(record["eigenvalues"], start=record["first_index"])
        if low <= n <= high
    )
    yield from (
        (int(entry["index"]), Decimal(entry["value"]))
        for entry in record.get("also", [])
        if low <= entry["index"] <= high
    )


def _compare(basis: modewright.Basis, name: str, low: int, high: int) -> dict[str, Any]:
    """Indices whose true value is outside its bounds; the largest relative error and width."""
    # the scale knows nothing of ends, which coupled records do not have
    ends = {"left": {"kind": "neumann"}, "right": {"kind": "neumann"}}
    scale = dense_from_document({**document_from_record(record_of(name)), **ends}).scale()
    outside, error, width = [], 0.0, 0.0
    for n, true in _listed(name, low, high):
        size = max(abs(float(true)), scale)
        lower, value, upper = (float(a[n]) for a in (basis.lower, basis.eigenvalues, basis.upper))
        if not Decimal(lower) <= true <= Decimal(upper):
            outside.append((n, lower, str(true), upper))
        error = max(error, abs(float(Decimal(value) - true)) / size)
        width = max(width, (upper - lower) / size)
    return {"outside": outside, "error": error, "width": width}


def test_every_record_is_either_covered_or_named_as_uncovered() -> None:
    assert sorted((*COVERED, *AHEAD, *COUPLED, *UNCOVERED)) == sorted(record["name"] for record in records())


@pytest.mark.parametrize("name", [*COVERED, *AHEAD, *COUPLED])
def test_default_tolerance(name: str, solved: Solved) -> None:
    top = highest_low_index(name)
    basis = solved(name, modes=top + 1)
    found = _compare(basis, name, 0, top)
    assert basis.eigenvalues.shape == basis.lower.shape == basis.upper.shape == (top + 1,)
    assert np.all(basis.lower <= basis.eigenvalues)
    assert np.all(basis.eigenvalues <= basis.upper)
    assert found["outside"] == []
    assert found["error"] <= 1e-9
    assert found["width"] <= 1e-9


@pytest.mark.parametrize(
    "name",
    [
        *(*REGULAR, *AHEAD),
        *(
            name if name in QUICK_TIGHT else pytest.param(name, marks=pytest.mark.long)
            for name in (*SINGULAR, *COUPLED)
        ),
    ],
)
def test_tight_tolerance(name: str, solved: Solved) -> None:
    top = highest_low_index(name)
    found = _compare(solved(name, modes=top + 1, rtol=TIGHT_RTOL), name, 0, top)
    assert found["outside"] == []
    assert found["error"] <= 1e-11


def _check_high_indices(name: str, rtol: float, solved: Solved) -> None:
    found = _compare(solved(name, modes=1001, rtol=rtol), name, 0, 1000)
    assert found["outside"] == []
    assert found["error"] <= (1e-9 if rtol == DEFAULT_RTOL else 1e-11)
    if rtol == DEFAULT_RTOL:
        assert found["width"] <= 1e-9


@pytest.mark.parametrize(
    "name",
    [name if name in QUICK_HIGH else pytest.param(name, marks=pytest.mark.long) for name in HIGH],
)
def test_high_indices(name: str, solved: Solved) -> None:
    _check_high_indices(name, DEFAULT_RTOL, solved)


# A thousand modes take seconds: in the quick tier one problem stands for all.
@pytest.mark.parametrize(
    "name",
    [name if name == "w-x-squared" else pytest.param(name, marks=pytest.mark.long) for name in HIGH],
)
def test_high_indices_at_the_tight_tolerance(name: str, solved: Solved) -> None:
    _check_high_indices(name, TIGHT_RTOL, solved)


@pytest.mark.parametrize("name", UNCOVERED)
def test_what_is_not_covered_is_refused_by_name(name: str, service: modewright.Service) -> None:
    with pytest.raises(modewright.Unsupported) as refused:
        service.solve(problem_from_record(record_of(name)), modes=8)
    assert refused.value.reason.startswith("UNSUPPORTED")
    assert refused.value.violations[0].field
