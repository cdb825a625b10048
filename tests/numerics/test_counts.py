"""Counts: of the comparison problem, of nearly equal neighbours, of zeros next to an end.

The comparison problem's eigenvalues must lie below the true ones however coarse it is, and approach them
with the square of its pieces' length where the coefficients are smooth.
"""

from __future__ import annotations

import numpy as np
import pytest

from modewright_service.core.approximation import approximate
from modewright_service.core.comparison import build_comparison
from modewright_service.core.problem import resolve
from modewright_service.core.solve import solve
from tests.numerics.core_problems import core_problem
from tests.numerics.dense_reference import solve_dense
from tests.numerics.random_problems import random_document
from tests.reference.coverage import record_of
from tests.reference.functions import dense_from_document
from tests.reference.load import document_from_record

MODES = 12


@pytest.mark.parametrize("seed", range(200, 215))
@pytest.mark.parametrize("cuts", [1, 4, 32])
def test_a_comparison_never_counts_too_few(cuts: int, seed: int) -> None:
    document = random_document(seed)
    problem = core_problem(document)
    mesh = approximate(problem)
    exact = solve_dense(dense_from_document(document), MODES, degree=40).eigenvalues
    comparison = build_comparison(mesh, resolve(problem), np.full(mesh.elements, cuts))
    size = np.maximum(np.abs(exact), 1.0)
    distances = np.array([1e-9, 1e-6, 1e-3, 0.1])
    nu = (exact[:, None] + size[:, None] * np.concatenate([distances, -distances])).ravel()
    # the distance of 1e-9 is far more than the dense solver's error
    assert np.all(comparison.count(nu) >= (exact[None, :] < nu[:, None]).sum(axis=1))


def test_a_comparison_gains_a_second_order() -> None:
    """How far below lambda_3 the comparison's own lies, by bisection: a quarter for twice the pieces."""
    document = {
        "layers": [{"start": 0.0, "end": 1.0, "p": "2+sin(3*x)", "q": "40*cos(5*x)", "w": "exp(x)"}],
        "left": {"kind": "neumann"},
        "right": {"kind": "film", "film": 2.0},
    }
    problem = core_problem(document)
    mesh = approximate(problem)
    exact = float(solve_dense(dense_from_document(document), 4, degree=40).eigenvalues[3])

    def loss(cuts: int) -> float:
        comparison = build_comparison(mesh, resolve(problem), np.full(mesh.elements, cuts))
        low, high = 0.0, exact
        for _ in range(45):
            middle = 0.5 * (low + high)
            low, high = (middle, high) if comparison.count(np.array([middle]))[0] <= 3 else (low, middle)
        return exact - low

    losses = np.array([loss(cuts) for cuts in (64, 128, 256)])
    assert np.all(losses > 0.0)
    # the ratio tends to 4; pieces near a turning point of the load come a little later
    assert np.all(losses[:-1] / losses[1:] > 3.3)


@pytest.mark.parametrize("rtol", [1e-6, 1e-9, 1e-12])
@pytest.mark.parametrize("count", [8, 48])
def test_wells_that_agree_to_rounding(count: int, rtol: float) -> None:
    """The record triple-well-beta50 (source beside it): triplets, each of whose members counts."""
    record = record_of("triple-well-beta50")
    found = solve(core_problem(document_from_record(record)), count, rtol)
    exact = np.array([float(value) for value in record["eigenvalues"][:count]])
    size = np.maximum(np.abs(exact), found.scale)
    slack = 2.3e-16 * size
    m = exact.size
    assert np.all(found.lower[:m] <= exact + slack)
    assert np.all(exact <= found.upper[:m] + slack)
    assert float(np.max(np.abs(found.eigenvalues[:m] - exact) / size)) <= 1e-11
    assert found.confirmed.all()


def test_a_zero_within_rounding_of_a_lump() -> None:
    """A layer of 2e-6 with all the weight, a massless one, a lump: high modes end at the lump with 1e-13 of
    their size, and change sign just before it.
    """
    document = {
        "layers": [
            {"start": 0.0, "end": 2e-6, "p": 16.0, "w": 0.07},
            {"start": 2e-6, "end": 0.6, "p": 0.15, "w": 0.0},
        ],
        "left": {"kind": "dirichlet"},
        "right": {"kind": "lump", "mass": 0.012},
    }
    found = solve(core_problem(document), MODES, 1e-9)
    np.testing.assert_array_equal(found.zeros, np.arange(MODES))
