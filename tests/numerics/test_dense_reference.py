"""The dense solver itself, against the reference eigenvalues: it must earn its place as a judge.

Sources: the records' own, see ``tests/reference/data``. Tolerance 5e-13 of s_n: some hundred units of
rounding, what a dense driver leaves of a pencil turned upside down at a condition of about 25. The
product takes no part here.
"""

from __future__ import annotations

import numpy as np
import pytest

from tests.numerics.dense_reference import solve_dense
from tests.numerics.random_problems import random_document
from tests.reference.coverage import AHEAD, REGULAR, record_of
from tests.reference.functions import dense_from_document, dense_from_record

# tanh-layer is 1e-3 wide: elements as short as its width lose digits to the contrast of stiffness. The
# triple wells are 400 to 2500 high and their lowest eigenvalue is 1e-16: rounding of the coefficient
# alone is 1e-13.
NAMES = tuple(name for name in (*REGULAR, *AHEAD) if name != "tanh-layer" and not name.startswith("triple"))


@pytest.mark.parametrize("name", NAMES)
def test_dense_reference_against_the_records(name: str) -> None:
    record = record_of(name)
    problem = dense_from_record(record, pieces=2 if len(record["layers"]) > 1 else 6)
    count = min(len(record["eigenvalues"]), 20)
    expected = np.array([float(value) for value in record["eigenvalues"][:count]])
    found = solve_dense(problem, count).eigenvalues
    size = np.maximum(np.abs(expected), problem.scale())
    assert float(np.max(np.abs(found - expected) / size)) <= 5e-13


def test_a_thinner_mesh_gives_the_same_values() -> None:
    problem = dense_from_document(random_document(3))
    coarse, fine = solve_dense(problem, 12, degree=44), solve_dense(problem, 12, degree=54)
    size = np.maximum(np.abs(fine.eigenvalues), problem.scale())
    assert float(np.max(np.abs(coarse.eigenvalues - fine.eigenvalues) / size)) <= 5e-13
    x = np.linspace(problem.layers[0].start, problem.layers[-1].end, 41)[1:-1]
    np.testing.assert_allclose(
        coarse.at(x), fine.at(x), rtol=0.0, atol=1e-9 * float(np.abs(fine.at(x)).max())
    )
