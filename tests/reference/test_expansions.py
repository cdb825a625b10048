"""Closed-form expansion coefficients of ``data/expansions.json`` against the service's projections.

Each record gives a function, a problem, the normalised eigenfunction and the coefficients, confirmed
there by 45-digit quadrature. Most functions are polynomials of degree two at most, so a cubic spline
through point values and the spline of their cumulative integrals through cell averages reproduce them
exactly: the same coefficients must come back from an expression, from point values and from cell
averages on a non-uniform mesh.

Tolerance, as promised: 1e-10 of the largest coefficient.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
import scipy.special
from numpy.typing import NDArray

import modewright
from tests.reference.functions import as_function
from tests.reference.load import expansions, problem_from_record

# Polynomials of degree two at most on (0, 1).
POLYNOMIAL = (
    *("parabola-sine", "linear-cosine", "one-plate-biot1", "one-exp-graded", "linear-tip-mass"),
    *("square-fourier-bessel", "one-cylinder-biot1"),
)
COVERED = (*POLYNOMIAL, "step-legendre", "exp-chebyshev")
# Infinite ends.
UNCOVERED = (
    "gaussian-hermite",
    "exponential-laguerre",
)
_BY_NAME = {record["name"]: record for record in expansions()}


@pytest.fixture(scope="module")
def bases(service: modewright.Service) -> dict[str, modewright.Basis]:
    return {
        name: service.solve(
            problem_from_record({"name": name, **_BY_NAME[name]["problem"]}),
            modes=len(_BY_NAME[name]["coefficients"]),
        )
        for name in COVERED
    }


def _expected(record: dict[str, Any]) -> NDArray[np.float64]:
    return np.array([float(value) for value in record["coefficients"]])


def _expression(record: dict[str, Any]) -> str:
    """The function; a step written as x/abs(x), which has no value at 0, by its own name."""
    return str(record["f"]).replace("0.5*(1+x/abs(x))", "step(x)")


def _graded(count: int) -> NDArray[np.float64]:
    """Edges on (0, 1), finest in the middle of the left half."""
    s = np.linspace(0.0, 1.0, count + 1)
    return s + 0.08 * np.sin(2.0 * np.pi * s) * (1.0 - s)


def _assert_close(found: NDArray[np.float64], record: dict[str, Any]) -> None:
    expected = _expected(record)
    np.testing.assert_allclose(found, expected, rtol=0.0, atol=1e-10 * float(np.max(np.abs(expected))))


def test_every_expansion_is_either_covered_or_named_as_uncovered() -> None:
    assert sorted((*COVERED, *UNCOVERED)) == sorted(_BY_NAME)


@pytest.mark.parametrize("name", COVERED)
def test_from_an_expression(name: str, bases: dict[str, modewright.Basis]) -> None:
    record = _BY_NAME[name]
    _assert_close(bases[name].project(_expression(record)), record)


@pytest.mark.parametrize("name", POLYNOMIAL)
def test_from_point_values(name: str, bases: dict[str, modewright.Basis]) -> None:
    record = _BY_NAME[name]
    x = _graded(60)
    _assert_close(bases[name].project(as_function(record["f"])(x), x=x), record)


@pytest.mark.parametrize("name", POLYNOMIAL)
def test_from_cell_averages(name: str, bases: dict[str, modewright.Basis]) -> None:
    """Averages in dx, exact by Simpson's rule for polynomials of degree two."""
    record = _BY_NAME[name]
    edges = _graded(60)
    f = as_function(record["f"])
    averages = (f(edges[:-1]) + 4.0 * f((edges[:-1] + edges[1:]) / 2.0) + f(edges[1:])) / 6.0
    _assert_close(bases[name].project(averages, edges=edges, measure="length"), record)


def test_a_lump_of_its_own_value(bases: dict[str, modewright.Basis]) -> None:
    """The tip mass at rest at 0 below a rod displaced by x: c_n loses m (1 - 0) phi_n(1)."""
    basis = bases["linear-tip-mass"]
    record = _BY_NAME["linear-tip-mass"]
    x = _graded(60)
    with_tip = basis.project(x, x=x, right_lump=1.0)
    without = basis.project(x, x=x, right_lump=0.0)
    _assert_close(with_tip, record)
    np.testing.assert_allclose(with_tip - without, 0.5 * basis.modes([1.0])[:, 0], rtol=0.0, atol=1e-10)


@pytest.mark.parametrize("name", COVERED)
def test_parseval(name: str, bases: dict[str, modewright.Basis]) -> None:
    """Bessel's inequality, and norm^2 = sum c^2 + residual^2 with the residual integrated on its own."""
    record = _BY_NAME[name]
    projection = bases[name].project(_expression(record), details=True)
    explained = float(np.sum(_expected(record) ** 2))
    exact = {
        # integral of x^2 (1-x)^2, of x^2, of 1, of exp(2x), of x^2 and 1/2 of the mass at 1, of x^5, of x,
        # of 1 on (0, 1), of exp(2x) / sqrt(1-x^2) on (-1, 1): pi I_0(2)
        "parabola-sine": 1.0 / 30.0,
        "linear-cosine": 1.0 / 3.0,
        "one-plate-biot1": 1.0,
        "one-exp-graded": (np.exp(2.0) - 1.0) / 2.0,
        "linear-tip-mass": 1.0 / 3.0 + 0.5,
        "square-fourier-bessel": 1.0 / 6.0,
        "one-cylinder-biot1": 0.5,
        "step-legendre": 1.0,
        "exp-chebyshev": np.pi * scipy.special.i0(2.0),
    }[name]
    assert float(projection.norm) ** 2 == pytest.approx(exact, rel=1e-12)
    assert float(projection.captured) == pytest.approx(explained / exact, rel=1e-9)
    assert float(projection.residual) ** 2 == pytest.approx(exact - explained, rel=1e-6, abs=1e-14 * exact)
