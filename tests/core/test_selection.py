"""What may be asked of a spectrum: all below a lambda, a window, a range of indices.

Source: eigenvalues (n + 1)^2 pi^2 of a uniform rod with fixed ends; of p = w = e^x with u = 0 at both ends
(n + 1)^2 pi^2 + 1/4 (substitute u = e^(-x/2) v).
"""

from __future__ import annotations

import numpy as np
import pytest

from modewright_service.core.digest import problem_digest, selection_key
from modewright_service.core.errors import InvalidRequest, SpectrumExhausted
from modewright_service.core.problem import Constant, Coupling, CouplingKind, Expression, Layer, Problem
from modewright_service.core.selection import Below, IndexRange, Lowest, Selection, Window
from modewright_service.core.solve import SolveOptions, solve

ROD = Problem((Layer("rod", 0.0, 1.0),))
GRADED = Problem((Layer("rod", 0.0, 1.0, Expression("exp(x)"), Constant(0.0), Expression("exp(x)")),))
RAISED = Problem((Layer("rod", 0.0, 1.0, q=Constant(1e4)),))
RING = Problem((Layer("ring", 0.0, 1.0),), coupling=Coupling(CouplingKind.PERIODIC))


def exact(first: int, end: int, extra: float = 0.0) -> np.ndarray[tuple[int], np.dtype[np.float64]]:
    return ((np.arange(first, end) + 1) * np.pi) ** 2 + extra


@pytest.mark.parametrize(
    ("problem", "selection", "first", "end", "extra"),
    [
        (ROD, Below(1000.0), 0, 10, 0.0),
        (ROD, Window(1000.0, 2000.0), 10, 14, 0.0),
        (ROD, IndexRange(7, 9), 7, 9, 0.0),
        (ROD, IndexRange(5000, 5021), 5000, 5021, 0.0),
        (GRADED, IndexRange(300, 310), 300, 310, 0.25),
        (RAISED, Below(11_000.0), 0, 10, 1e4),
        (RAISED, Window(11_000.0, 12_000.0), 10, 14, 1e4),
    ],
)
def test_indices_values_and_bounds(
    problem: Problem, selection: Selection, first: int, end: int, extra: float
) -> None:
    record = solve(problem, selection, 1e-9)
    expected = exact(first, end, extra)
    assert record.first_index == first
    assert record.count == end - first
    np.testing.assert_allclose(record.eigenvalues, expected, rtol=1e-13)
    assert np.all(record.lower <= expected)
    assert np.all(expected <= record.upper)
    assert np.all(record.confirmed == 1)
    np.testing.assert_array_equal(record.zeros, np.arange(first, end))


def test_a_window_of_a_ring_holds_its_pairs() -> None:
    record = solve(RING, Window(1000.0, 4000.0), 1e-9)
    assert record.first_index == 11
    np.testing.assert_allclose(
        record.eigenvalues, (2.0 * np.pi * np.repeat(np.arange(6, 11), 2)) ** 2, rtol=1e-13
    )


@pytest.mark.parametrize("selection", [Window(10.0, 39.0), Below(1.0)])
def test_where_nothing_lies_the_neighbours_are_named(selection: Selection) -> None:
    with pytest.raises(SpectrumExhausted, match=r"lambda_0 = 9\.869"):
        solve(ROD, selection, 1e-9)


@pytest.mark.parametrize(
    ("selection", "field"),
    [
        (Lowest(0), "modes"),
        (Below(float("nan")), "below"),
        (Window(1.0, float("inf")), "window.upper"),
        (Window(3.0, 2.0), "window.upper"),
        (IndexRange(-1, 2), "index_range.first"),
        (IndexRange(4, 4), "index_range.end"),
        (Below(1e14), "below"),
    ],
)
def test_what_cannot_be_asked_is_refused_by_field(selection: Selection, field: str) -> None:
    with pytest.raises(InvalidRequest) as caught:
        solve(ROD, selection, 1e-9, options=SolveOptions(max_modes=1000))
    assert caught.value.violations[0].field == field


def test_keys_tell_selections_apart() -> None:
    digest = problem_digest(ROD)
    asked: list[Selection] = [Lowest(8), Below(8.0), IndexRange(0, 8), Window(0.0, 8.0), Window(0.0, 9.0)]
    assert len({selection_key(digest, selection, 1e-9) for selection in asked}) == len(asked)
