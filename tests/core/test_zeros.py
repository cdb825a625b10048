"""Exact zeros: their order by rational series, and polynomials that keep them."""

from fractions import Fraction

import numpy as np
import pytest

from modewright_service.core.expressions import parse
from modewright_service.core.legendre import (
    differentiated,
    times_distance,
    vandermonde,
    vanishing,
    vanishing_order,
)
from modewright_service.core.zeros import TERMS, zero_order


@pytest.mark.parametrize(
    ("text", "x", "order"),
    [
        ("x**2", 0.0, 2),
        ("x**2", 1.0, 0),
        ("1-x**2", 1.0, 1),
        ("1-x**2", -1.0, 1),
        ("(x-0.3)**3*(1+x)", 0.3, 3),
        ("x*exp(x+1)", 0.0, 1),
        ("sin(x)**2/(2+cos(x))", 0.0, 2),
        ("1-cos(x)", 0.0, 2),
        ("exp(x)-1-x", 0.0, 2),
        ("x-sin(x)", 0.0, 3),
        ("tanh(x)*tan(x)", 0.0, 2),
        ("log(x)*(x-1)", 1.0, 2),
        ("sqrt(x**4)", 0.0, 2),
        ("sinh(x)-x", 0.0, 3),
        ("cosh(x)-1", 0.0, 2),
        ("1/cosh(x)", 0.0, 0),
        ("exp(sin(3*x))", 2.0, 0),
        ("0*x", 0.0, TERMS),
        ("x**0.5", 0.0, None),
        ("sin(x)", np.pi, 0),  # the double pi is not pi: sin is 1.2e-16 there, which is not zero
    ],
)
def test_order_of_zeros(text: str, x: float, order: int | None) -> None:
    assert zero_order(parse(text), x, {}) == order


def test_branches_are_those_of_the_side() -> None:
    program = parse("abs(x-0.5)")
    index = next(k for k, step in enumerate(program.steps) if step.name == "abs")
    assert zero_order(program, 0.5, {index: 1}) == zero_order(program, 0.5, {index: -1}) == 1


@pytest.mark.parametrize("order", [1, 2, 3])
@pytest.mark.parametrize("side", [-1, 1])
@pytest.mark.parametrize("degree", [0, 4, 12])
def test_rounded_series_vanish_exactly_and_stay_near(side: int, order: int, degree: int) -> None:
    rng = np.random.default_rng(degree)
    product = rng.standard_normal(degree + 1).astype(np.longdouble) / 3 ** np.arange(degree + 1)
    for _ in range(order):
        product = times_distance(product, side)
    rounded, bound = vanishing(product, side, order)
    # Exact rational arithmetic: P_k(+-1) = (+-1)^k, and the derivatives of the series likewise.
    assert vanishing_order(rounded, side) >= order
    value = sum((Fraction(float(c)) * side**k for k, c in enumerate(rounded)), Fraction(0))
    slope = sum(
        (Fraction(float(c)) * side ** (k + 1) * k * (k + 1) / 2 for k, c in enumerate(rounded)), Fraction(0)
    )
    assert value == 0
    assert slope == 0 or order < 2
    t = side * (1 - 10.0 ** -np.linspace(-0.3, 4, 50).astype(np.longdouble))
    difference = vandermonde(t, degree + order) @ (rounded.astype(np.longdouble) - product)
    assert (np.abs(difference) <= bound * (1 - side * t) ** order + 1e-18).all()


def test_series_operations_against_numpy() -> None:
    rng = np.random.default_rng(1)
    series = rng.standard_normal(9)
    legendre = np.polynomial.legendre
    np.testing.assert_allclose(differentiated(series)[:-1], legendre.legder(series), rtol=1e-13, atol=1e-13)
    for side in (-1, 1):
        expected = legendre.legmul(series, [1.0, -side])
        np.testing.assert_allclose(times_distance(series, side), expected, rtol=1e-13, atol=1e-13)
