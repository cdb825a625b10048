"""Bounds when the discretisation is not good enough: they widen, and they still contain.

The meshes are starved on purpose through the core's options: elements of low degree, too few of them,
no refinement. The exact values are those of the reference records (``data/reference_problems.json``,
each with its source) and, for the hidden bumps, of the tests' dense solver with elements cut around the
bump.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from modewright_service.core.solve import SolveOptions, solve
from tests.numerics.core_problems import core_problem
from tests.numerics.dense_reference import solve_dense
from tests.reference.coverage import record_of
from tests.reference.functions import dense_from_document, dense_from_record
from tests.reference.load import document_from_record

COUNT = 12
STARVED = {
    "degree 2": SolveOptions(degree=2, phase=3.0, passes=0),
    "degree 3, one pass": SolveOptions(degree=3, phase=3.0, passes=1),
    "degree 4": SolveOptions(degree=4, phase=4.0, passes=0),
    "degree 6, long elements": SolveOptions(degree=6, phase=12.0, passes=0),
    "degree 10, long elements": SolveOptions(degree=10, phase=40.0, passes=0),
}
NAMES = (
    "dirichlet-unit",
    "neumann-unit",
    "plate-biot-1",
    "robin-negative",
    "mathieu-q5-dirichlet",
    "exponential-potential",
    "graetz-plates",
    "exp-graded-rod-free",
    "slab-3-layer",
    "slab-contact-resistance",
    "slab-lumped-capacity",
    "woods-saxon",
    "w-x-squared",
    "bead-on-string",
    "triple-well-beta20",
)
# Height and width of exp(-((x - c)/width)^2), and the error of the dense solver: what two of its meshes
# differ by, rounded up (the contrast of stiffness costs it digits where p has the bump).
BUMPS = {
    "q, wide": ("q", 1e4, 2e-2, 1e-12),
    "q, narrow": ("q", 1e6, 1e-3, 1e-12),
    "q, needle": ("q", 1e7, 1e-5, 1e-12),
    "q, pit": ("q", -2e3, 5e-3, 1e-12),
    "p, narrow": ("p", 1e3, 1e-3, 2e-10),
    "w, narrow": ("w", 1e3, 1e-3, 1e-12),
}
CENTRE = 0.3717


@pytest.mark.parametrize("starved", STARVED)
@pytest.mark.parametrize("name", NAMES)
def test_starved_bounds_contain(name: str, starved: str) -> None:
    record = record_of(name)
    found = solve(core_problem(document_from_record(record)), COUNT, 1e-9, options=STARVED[starved])
    exact = np.array([float(value) for value in record["eigenvalues"][:COUNT]])
    size = np.maximum(np.abs(exact), dense_from_record(record).scale())
    # A half unit of rounding for the reference value itself, which has 30 digits.
    slack = 2.3e-16 * np.abs(exact)
    assert np.all(found.lower <= exact + slack)
    assert np.all(exact - slack <= found.upper)
    error = np.abs(found.eigenvalues - exact) / size
    width = (found.upper - found.lower) / size
    assert np.all(width >= error - slack)
    if starved == "degree 2":
        # Really starved: three digits are wrong somewhere, and the widths say so.
        assert float(np.max(error)) > 1e-4
        assert float(np.max(width)) > 1e-4


def _with_bump(coefficient: str, height: float, width: float) -> dict[str, Any]:
    bump = f"{height!r}*exp(-((x-{CENTRE})/{width!r})**2)"
    layer = {"name": "body", "start": 0.0, "end": 1.0, "p": 1.0, "q": 0.0, "w": 1.0}
    layer[coefficient] = bump if coefficient == "q" else f"1+{bump}"
    return {"layers": [layer], "left": {"kind": "dirichlet"}, "right": {"kind": "film", "film": 1.0}}


def _dense(document: dict[str, Any], width: float) -> tuple[np.ndarray, np.ndarray]:
    """Eigenvalues and sizes; elements one width wide to seven widths, then growing away from the bump."""
    near = width * np.arange(-7.0, 8.0)
    far = 7.0 * width * 2.0 ** np.arange(1.0, 14.0)
    cuts = CENTRE + np.concatenate([near, far[far < 0.3], -far[far < 0.3]])
    dense = dense_from_document(document, pieces=8, cuts=tuple(np.sort(cuts)))
    values = solve_dense(dense, COUNT, degree=26).eigenvalues
    return values, np.maximum(np.abs(values), dense.scale())


@pytest.mark.parametrize("title", BUMPS)
def test_hidden_bump_is_seen(title: str) -> None:
    """At the default settings: within bounds, and as exact as anything else."""
    coefficient, height, width, dense_error = BUMPS[title]
    document = _with_bump(coefficient, height, width)
    exact, size = _dense(document, width)
    found = solve(core_problem(document), COUNT, 1e-9)
    assert np.all(found.lower <= exact + dense_error * size)
    assert np.all(exact <= found.upper + dense_error * size)
    assert float(np.max((found.upper - found.lower) / size)) <= 1e-9
    # The bump is not a detail: without it an eigenvalue would be far away.
    assert abs(found.eigenvalues[0] - 4.11585836581) > 1e-2


@pytest.mark.parametrize("starved", ["degree 3, one pass", "degree 6, long elements"])
@pytest.mark.parametrize("title", BUMPS)
def test_hidden_bump_on_a_starved_mesh(title: str, starved: str) -> None:
    coefficient, height, width, dense_error = BUMPS[title]
    document = _with_bump(coefficient, height, width)
    exact, size = _dense(document, width)
    found = solve(core_problem(document), COUNT, 1e-9, options=STARVED[starved])
    assert np.all(found.lower <= exact + dense_error * size)
    assert np.all(exact <= found.upper + dense_error * size)
