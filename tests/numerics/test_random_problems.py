"""Random layered problems, all kinds of ends and joints, against the dense solver of the tests.

The dense solver is judged by the reference records in ``test_dense_reference.py``; on these problems
two of its meshes agree to 2e-14 of s_n, and 1e-13 is granted for its error. The promise at rtol 1e-12
is an error of 1e-11 of s_n. Modes are compared too: their error is of the order of the square root of
the eigenvalue's in energy and smaller in value, magnified by s_n over the distance to the next
eigenvalue.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from numpy.typing import NDArray

import modewright
from modewright.record import Record
from tests.numerics.dense_reference import DenseModes, DenseProblem, solve_dense
from tests.numerics.random_problems import random_document
from tests.reference.functions import dense_from_document
from tests.reference.own_checks import count_zeros, element_values, orthonormality_defect

MODES = 12
DENSE_ERROR = 1e-13
CASES = [("plane", seed) for seed in range(20)]
CASES += [(geometry, seed) for geometry in ("cylindrical", "spherical") for seed in range(40, 46)]

Case = tuple[modewright.Basis, DenseProblem, DenseModes]


@pytest.fixture(scope="module")
def solve_case(service: modewright.Service) -> Callable[[str, int], Case]:
    kept: dict[tuple[str, int], Case] = {}

    def solve(geometry: str, seed: int) -> Case:
        if (geometry, seed) not in kept:
            document = random_document(seed, geometry)
            dense = dense_from_document(document)
            basis = service.solve(modewright.Problem.from_dict(document), modes=MODES, rtol=1e-12)
            kept[geometry, seed] = basis, dense, solve_dense(dense, MODES, degree=44)
        return kept[geometry, seed]

    return solve


@pytest.mark.parametrize(("geometry", "seed"), CASES)
def test_eigenvalues_and_bounds(geometry: str, seed: int, solve_case: Callable[[str, int], Case]) -> None:
    basis, dense, exact = solve_case(geometry, seed)
    size = np.maximum(np.abs(exact.eigenvalues), dense.scale())
    assert float(np.max(np.abs(basis.eigenvalues - exact.eigenvalues) / size)) <= 1e-11 + DENSE_ERROR
    assert np.all(basis.lower <= exact.eigenvalues + DENSE_ERROR * size)
    assert np.all(exact.eigenvalues <= basis.upper + DENSE_ERROR * size)


@pytest.mark.parametrize(("geometry", "seed"), CASES)
def test_modes(geometry: str, seed: int, solve_case: Callable[[str, int], Case]) -> None:
    basis, dense, exact = solve_case(geometry, seed)
    start, end = dense.layers[0].start, dense.layers[-1].end
    x = start + (end - start) * (np.arange(60) + 0.5) / 60.0
    size = np.maximum(np.abs(exact.eigenvalues), dense.scale())
    gap = np.diff(exact.eigenvalues)
    gap = np.minimum(np.append(gap, np.inf), np.append(np.inf, gap))
    expected = exact.at(x)
    allowed = 1e-7 * (1.0 + size / gap) * np.abs(expected).max(axis=1)
    assert np.all(np.abs(basis.modes(x) - expected).max(axis=1) <= allowed)


@pytest.mark.parametrize(("geometry", "seed"), CASES)
def test_zeros_and_norms(geometry: str, seed: int, solve_case: Callable[[str, int], Case]) -> None:
    """A lump behind a resistance counts as one more point of the mode, on its side of the resistance."""
    basis, dense, _ = solve_case(geometry, seed)
    record = basis.record()
    np.testing.assert_array_equal(basis.zeros, np.arange(MODES))
    np.testing.assert_array_equal(count_zeros(record) + _changes_to_lumps(record), np.arange(MODES))
    assert orthonormality_defect(record, [layer.w for layer in dense.layers]) <= 1e-10


def _changes_to_lumps(record: Record) -> NDArray[np.int64]:
    changes = np.zeros(record.count, dtype=np.int64)
    for end, lump, e, t in (
        (record.left, record.left_lump, 0, -1.0),
        (record.right, record.right_lump, record.elements - 1, 1.0),
    ):
        if end.resistance > 0.0:
            changes += element_values(record, e, np.array([t]))[:, 0] * lump < 0.0
    return changes
