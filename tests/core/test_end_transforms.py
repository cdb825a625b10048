"""Projection and reconstruction on bases with singular ends."""

from __future__ import annotations

import numpy as np
import pytest

from modewright_service.core.errors import InvalidRequest
from modewright_service.core.problem import Bounded, Dirichlet, Expression, Geometry, Layer, Neumann, Problem
from modewright_service.core.solve import solve
from modewright_service.core.transforms import (
    CellMesh,
    Measure,
    PointMesh,
    plan_projection,
    project_expression,
    reconstruct,
)


def _rod() -> Problem:
    return Problem((Layer("rod", 0.0, 1.0),), Bounded(), Dirichlet(), geometry=Geometry.CYLINDRICAL)


def _algebraic(p: str, w: str, left: Dirichlet | Neumann) -> Problem:
    layer = Layer("body", 0.0, 1.0, Expression(p), Expression("0"), Expression(w))
    return Problem((layer,), left, Dirichlet())


def test_samples_of_every_meaning_agree_in_a_rod() -> None:
    """1 - r^2 is reproduced exactly by splines in r and in r^2/2: c_n = 4 sqrt(2) / z^3 times a sign.

    int_0^1 (1 - r^2) J_0(z r) r dr = 4 J_1(z) / z^3 at the zeros z of J_0 (NIST DLMF 10.22.4 twice), and
    phi_n = sqrt(2) J_0(z r) / |J_1(z)|; norm^2 = int (1 - r^2)^2 r dr = 1/6.
    """
    record = solve(_rod(), 16, 1e-9)
    z = np.sqrt(record.eigenvalues)
    exact = 4.0 * np.sqrt(2.0) / z**3 * np.where(np.arange(16) % 2 == 0, 1.0, -1.0)
    edges = np.linspace(0.0, 1.0, 31) ** 1.2
    by_length = 1.0 - (edges[1:] ** 2 + edges[1:] * edges[:-1] + edges[:-1] ** 2) / 3.0
    by_area = 1.0 - (edges[1:] ** 2 + edges[:-1] ** 2) / 2.0
    found = [
        plan_projection(record, PointMesh(edges)).apply(1.0 - edges**2),
        plan_projection(record, CellMesh(edges, Measure.LENGTH)).apply(by_length),
        plan_projection(record, CellMesh(edges, Measure.CYLINDRICAL)).apply(by_area),
        plan_projection(record, CellMesh(edges, Measure.WEIGHT)).apply(by_area),
        project_expression(record, "1-x**2"),
    ]
    for projection in found:
        # cubic splines of a parabola carry the rounding of their slopes
        np.testing.assert_allclose(projection.coefficients, exact, rtol=0.0, atol=1e-13)
        assert projection.norm2 is not None
        assert projection.residual2 is not None
        assert float(projection.norm2) == pytest.approx(1.0 / 6.0, rel=1e-12)
        rest = 1.0 / 6.0 - float(np.sum(exact**2))
        assert float(projection.residual2) == pytest.approx(rest, rel=1e-7)


def test_fields_and_fluxes_at_the_centre() -> None:
    """u = sum c_n phi_n is even in r: its slope and its flux vanish at r = 0."""
    record = solve(_rod(), 16, 1e-9)
    c = project_expression(record, "1-x**2").coefficients
    x = np.array([0.0, 1e-6, 0.5])
    assert float(reconstruct(record, c, [0.0])[0]) == pytest.approx(1.0, abs=2e-3)
    np.testing.assert_allclose(reconstruct(record, c, x, "derivative")[:2], 0.0, atol=1e-4)
    assert float(reconstruct(record, c, [0.0], "flux")[0]) == 0.0
    assert float(reconstruct(record, c, [0.0], "flux-density")[0]) == 0.0


@pytest.mark.parametrize(
    ("p", "w", "left", "norm2"),
    [
        ("x**0.5", "1", Dirichlet(), 1.0 / 3.0),
        ("x**0.3*(1+x)", "x**(-0.7)", Neumann(), 1.0 / 2.3),
        ("1", "x**(-0.5)", Dirichlet(), 1.0 / 2.5),
    ],
)
def test_parseval_with_powers_that_are_not_whole(
    p: str, w: str, left: Dirichlet | Neumann, norm2: float
) -> None:
    """norm^2 = int x^2 w dx in closed form, and sum c^2 + residual^2, the latter integrated on its own."""
    projection = project_expression(solve(_algebraic(p, w, left), 24, 1e-9), "x")
    assert projection.norm2 is not None
    assert projection.residual2 is not None
    assert float(projection.norm2) == pytest.approx(norm2, rel=1e-13)
    explained = float(np.sum(projection.coefficients**2))
    assert explained + float(projection.residual2) == pytest.approx(norm2, rel=1e-13)


def test_averages_in_a_weight_that_is_no_polynomial_are_refused() -> None:
    record = solve(_algebraic("1", "x**(-0.5)", Dirichlet()), 8, 1e-9)
    with pytest.raises(InvalidRequest) as refused:
        plan_projection(record, CellMesh(np.linspace(0.0, 1.0, 11), Measure.WEIGHT))
    assert refused.value.violations[0].field == "measure"
