"""Orthonormality of 100 modes by a quadrature of the tests' own, with the exact weight of the problem.

Constant coefficients on uniform layers are the hard case, not the easy one: every element then has the same
interior eigenvalues and each of them meets eigenvalues of the whole. Tolerance 1e-10, the promise.
"""

from __future__ import annotations

from typing import Any

import pytest

import modewright
from tests.numerics.random_problems import random_document
from tests.reference.functions import dense_from_document
from tests.reference.own_checks import orthonormality_defect

MODES = 100
FIXED, FREE = {"kind": "dirichlet"}, {"kind": "neumann"}


def _uniform(
    count: int, left: dict[str, Any], right: dict[str, Any], **materials: list[float]
) -> dict[str, Any]:
    """Equally thick layers on (0, 1); ``materials`` gives the values of p or w to repeat."""
    layers = []
    for i in range(count):
        layer: dict[str, Any] = {"name": f"layer-{i}", "start": i / count, "end": (i + 1) / count}
        layers.append(layer | {name: values[i % len(values)] for name, values in materials.items()})
    return {"layers": layers, "left": left, "right": right}


DOCUMENTS = {
    "constant, fixed": _uniform(1, FIXED, FIXED),
    "constant, free": _uniform(1, FREE, FREE),
    "constant, mixed": _uniform(1, FIXED, FREE),
    "ten equal layers": _uniform(10, FIXED, FIXED),
    "sixteen equal layers, free": _uniform(16, FREE, FREE),
    "two materials, eight times": _uniform(16, FREE, FIXED, p=[1.0, 4.0], w=[1.0, 0.25]),
    "equal phases": _uniform(12, FIXED, FIXED, p=[1.0, 9.0], w=[4.0, 36.0]),
    "hollow layers": _uniform(7, FREE, FIXED, w=[1.0, 0.0]),
    "lumps at both ends": _uniform(
        4,
        {"kind": "lump", "mass": 0.7, "film": 2.0, "resistance": 0.3},
        {"kind": "lump", "mass": 0.2},
        p=[1.0, 0.1],
    ),
    "contact resistances": {
        **_uniform(4, FREE, FREE, p=[1.0, 30.0]),
        "interfaces": [{"x": 0.25, "resistance": 0.5}, {"x": 0.75, "resistance": 20.0}],
    },
    "graded": {
        "layers": [{"start": 0.0, "end": 1.0, "p": "exp(2*x)", "q": "50*cos(5*x)", "w": "1+x**2"}],
        "left": FIXED,
        "right": {"kind": "film", "film": 3.0},
    },
    "random": random_document(11),
}


@pytest.mark.parametrize("title", DOCUMENTS)
def test_orthonormality(title: str, service: modewright.Service) -> None:
    document = DOCUMENTS[title]
    basis = service.solve(modewright.Problem.from_dict(document), modes=MODES)
    weights = [layer.w for layer in dense_from_document(document).layers]
    record = basis.record()
    assert record.count == MODES
    assert orthonormality_defect(record, weights) <= 1e-10
