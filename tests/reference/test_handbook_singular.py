"""Handbook figures of problems with singular ends, against the service's answers.

Tables and tolerances as in :mod:`tests.reference.test_handbook`: each figure to its printed decimals, and to
1e-9 against its recomputation. Rods and balls are solved twice: written out, p = w = r^g, and as materials
of p = w = 1 in the geometry with its centre at r = 0.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

import modewright
from tests.reference.load import handbook_tables
from tests.reference.test_handbook import _check, _figures, _labelled

_TABLES = {table["quantity"]: table for table in handbook_tables()}
_GEOMETRIES = ("plane", "cylindrical", "spherical")
_BOUNDED = {"kind": "bounded"}


def _written(right: dict[str, Any], p: str, q: str = "0", w: str | None = None) -> modewright.Problem:
    """On (0, 1), bounded at 0."""
    layer = {"name": "body", "start": 0.0, "end": 1.0, "p": p, "q": q, "w": p if w is None else w}
    return modewright.Problem.from_dict({"layers": [layer], "left": _BOUNDED, "right": right})


def _body(power: int, right: dict[str, Any], left: str = "bounded") -> modewright.Problem:
    layer = {"name": "body", "start": 0.0, "end": 1.0}
    document = {"geometry": _GEOMETRIES[power], "layers": [layer], "left": {"kind": left}, "right": right}
    return modewright.Problem.from_dict(document)


def _between_poles(p: str, q: str = "0", w: str = "1", end: str = "bounded") -> modewright.Problem:
    """On (-1, 1), the same end on both sides."""
    layer = {"name": "body", "start": -1.0, "end": 1.0, "p": p, "q": q, "w": w}
    ends = {"left": {"kind": end}, "right": {"kind": end}}
    return modewright.Problem.from_dict({"layers": [layer], **ends})


@pytest.mark.parametrize("order", [0, 1, 2])
def test_zeros_of_bessel_functions(order: int, service: modewright.Service) -> None:
    figures = _TABLES[f"zeros j_{{{order},s}} of J_{order}"]["values"]
    problem = _written({"kind": "dirichlet"}, "x", f"{order**2}/x")
    roots = np.sqrt(service.solve(problem, modes=8).eigenvalues)
    for root, figure in zip(roots, figures, strict=False):
        _check(float(root), figure)


@pytest.mark.parametrize("order", [1, 2])
def test_zeros_of_their_derivatives(order: int, service: modewright.Service) -> None:
    figures = _TABLES[f"zeros j'_{{{order},s}} of J_{order}'"]["values"]
    problem = _written({"kind": "neumann"}, "x", f"{order**2}/x")
    roots = np.sqrt(service.solve(problem, modes=8).eigenvalues)
    for root, figure in zip(roots, figures, strict=False):
        _check(float(root), figure)


@pytest.mark.parametrize("written", [True, False])
@pytest.mark.parametrize(
    ("power", "figure"),
    [
        pytest.param(power, figure, id=f"{_GEOMETRIES[power]}-{figure['label']}")
        for power, table in (
            (1, "cylinder zeta_1 (zeta J1/J0 = Bi)"),
            (2, "sphere zeta_1 (1 - zeta cot zeta = Bi)"),
        )
        for figure in _TABLES[table]["values"]
    ],
)
def test_first_root(power: int, figure: dict[str, Any], written: bool, service: modewright.Service) -> None:
    right = {"kind": "film", "film": _labelled(figure)}
    problem = _written(right, f"x**{power}") if written else _body(power, right)
    _check(float(np.sqrt(service.solve(problem, modes=8).eigenvalues[0])), figure)


@pytest.mark.parametrize(
    ("power", "figure"),
    [
        pytest.param(power, figure, id=f"{_GEOMETRIES[power]}-{figure['label']}")
        for power, table in (
            (1, "cylinder C_1 = 2 J1/(z(J0^2+J1^2))"),
            (2, "sphere C_1 = 4(sin z - z cos z)/(2z - sin 2z)"),
        )
        for figure in _TABLES[table]["values"]
    ],
)
def test_first_amplitude(power: int, figure: dict[str, Any], service: modewright.Service) -> None:
    """The uniform initial excess 1 excites the first mode with C_1 = c_0 phi_0(0) at the centre."""
    basis = service.solve(_body(power, {"kind": "film", "film": _labelled(figure)}), modes=8)
    _check(float(basis.project("1")[0] * basis.modes([0.0])[0, 0]), figure)


def test_cylinder_roots(service: modewright.Service) -> None:
    """Neumann at the centre, the symmetry condition, means the bounded solution."""
    figures = _TABLES["roots of a J1(a) = J0(a)"]["values"]
    problem = _body(1, {"kind": "film", "film": 1.0}, left="neumann")
    roots = np.sqrt(service.solve(problem, modes=8).eigenvalues)
    for root, figure in zip(roots, figures, strict=False):
        _check(float(root), figure)


@pytest.mark.parametrize("figure", _figures("prolate spheroidal lambda_{0n}(c=1)"))
def test_spheroidal_eigenvalues(figure: dict[str, Any], service: modewright.Service) -> None:
    """Printed digits were cut, not rounded, in two of the four: a whole unit of the last place."""
    basis = service.solve(_between_poles("1-x**2", "x**2"), modes=8)
    found = float(basis.eigenvalues[int(_labelled(figure))])
    assert abs(found - float(figure["recomputed"])) <= 1e-9 * found
    assert 0.0 <= found - float(figure["published"]) <= 10.0 ** -figure["decimals"]


def test_graetz_in_a_tube(service: modewright.Service) -> None:
    figures = _TABLES["Graetz circular tube, sqrt(lambda_n)"]["values"]
    layer = {"name": "fluid", "start": 0.0, "end": 1.0, "w": "1-x**2"}
    document = {
        "geometry": "cylindrical",
        "layers": [layer],
        "left": _BOUNDED,
        "right": {"kind": "dirichlet"},
    }
    roots = np.sqrt(service.solve(modewright.Problem.from_dict(document), modes=8).eigenvalues)
    for root, figure in zip(roots, figures, strict=False):
        _check(float(root), figure)


@pytest.mark.parametrize(
    ("quantity", "problem"),
    [
        ("Legendre k(k+1)", _between_poles("1-x**2")),
        (
            "Chebyshev first kind k^2",
            _between_poles("sqrt(1-x**2)", w="1/sqrt(1-x**2)", end="neumann"),
        ),
    ],
)
def test_polynomials(quantity: str, problem: modewright.Problem, service: modewright.Service) -> None:
    figures = _TABLES[quantity]["values"]
    values = service.solve(problem, modes=8).eigenvalues
    for value, figure in zip(values, figures, strict=False):
        _check(float(value), figure)


def test_ends_are_classified(service: modewright.Service) -> None:
    """Legendre's poles are limit-circle, those of m = 1 limit-point, Chebyshev's ends regular.

    Zettl, Sturm-Liouville Theory (2005), ch. 14.
    """
    for problem, expected in (
        (_between_poles("1-x**2"), "limit-circle"),
        (_between_poles("1-x**2", "1/(1-x**2)"), "limit-point"),
        (_between_poles("sqrt(1-x**2)", w="1/sqrt(1-x**2)", end="neumann"), "regular"),
    ):
        record = service.solve(problem, modes=8).record()
        assert (record.left.classification, record.right.classification) == (expected, expected)
