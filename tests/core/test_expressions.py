"""The expression language: grammar, errors with columns, values."""

import math

import numpy as np
import pytest

from modewright_service.core import discs
from modewright_service.core.errors import InvalidProblem, Reason
from modewright_service.core.evaluation import constant_value, degree, point_signs, run
from modewright_service.core.expressions import MAX_DEPTH, MAX_LENGTH, parse
from modewright_service.core.rewriting import smooth_form

X = np.linspace(-2.5, 3.0, 23)


def values(text: str, x: np.ndarray = X, *, smooth: bool = False) -> np.ndarray:
    program = smooth_form(parse(text)) if smooth else parse(text)
    points = discs.exact(np.asarray(x, dtype=np.longdouble))
    return np.asarray(run(program, points, signs=point_signs(program, points)).centre, dtype=np.float64)


# The expected side is NumPy's, with the precedence that the grammar promises written out in parentheses.
CASES = [
    ("1 + 2*x", 1 + 2 * X),
    ("-x**2", -(X**2)),
    ("2**-1", np.full_like(X, 0.5)),
    ("2**3**2", np.full_like(X, 512.0)),
    ("x - 1 - 2", (X - 1) - 2),
    ("8/2/2", np.full_like(X, 2.0)),
    ("--x", X),
    ("+x", X),
    ("1.5e-3*x + .5 + 2.", 1.5e-3 * X + 2.5),
    ("sin(pi*x)*e", np.sin(np.pi * X) * np.e),
    ("exp(x)/(1 + exp(x))", np.exp(X) / (1 + np.exp(X))),
    ("tanh(x) - sinh(x)/cosh(x)", np.zeros_like(X)),
    ("log(x**2 + 1)", np.log(X**2 + 1)),
    ("sqrt(abs(x))", np.sqrt(np.abs(X))),
    ("min(x, 1, x**2)", np.minimum(np.minimum(X, 1), X**2)),
    ("max(x, -1)", np.maximum(X, -1)),
    ("sign(x) + 2*step(x)", np.sign(X) + 2 * (X >= 0)),
    ("where(x < 0.5, x, 3)", np.where(X < 0.5, X, 3)),
    ("where(x*x >= 1, where(x > 0, 1, 2), tan(x))", np.where(X * X >= 1, np.where(X > 0, 1, 2), np.tan(X))),
    ("(x**2 + 1)**-2.5", (X**2 + 1) ** -2.5),
    ("(x + 10)**(x/2)", (X + 10) ** (X / 2)),
    ("x**3", X**3),
    (" x\t+\n1 ", X + 1),
]


@pytest.mark.parametrize(("text", "expected"), CASES, ids=[text for text, _ in CASES])
def test_values(text: str, expected: np.ndarray) -> None:
    np.testing.assert_allclose(values(text), expected, rtol=1e-14, atol=1e-14)


@pytest.mark.parametrize(
    ("text", "reason", "column", "says"),
    [
        ("", Reason.EXPRESSION_SYNTAX, 1, "empty"),
        ("1 +", Reason.EXPRESSION_SYNTAX, 4, "the end"),
        ("(x", Reason.EXPRESSION_SYNTAX, 3, "')'"),
        ("x)", Reason.EXPRESSION_SYNTAX, 2, "operator"),
        ("2 $ x", Reason.EXPRESSION_SYNTAX, 3, "'$'"),
        ("2 x", Reason.EXPRESSION_SYNTAX, 3, "operator"),
        ("x < 1", Reason.EXPRESSION_SYNTAX, 3, "operator"),
        ("where(x, 1, 2)", Reason.EXPRESSION_SYNTAX, 8, "comparison"),
        ("sin x", Reason.EXPRESSION_SYNTAX, 1, "parentheses"),
        ("x(2)", Reason.EXPRESSION_SYNTAX, 1, "not a function"),
        ("sin(x, 2)", Reason.EXPRESSION_SYNTAX, 1, "one argument"),
        ("min(x)", Reason.EXPRESSION_SYNTAX, 1, "two arguments"),
        ("1 + 1e999", Reason.EXPRESSION_SYNTAX, 5, "overflows"),
        ("2 + sinn(x)", Reason.EXPRESSION_NAME, 5, "'sin'"),
        ("y", Reason.EXPRESSION_NAME, 1, "'y'"),
        ("__import__(1)", Reason.EXPRESSION_NAME, 1, "unknown name"),
        ("x.real", Reason.EXPRESSION_SYNTAX, 2, "'.'"),
        ("'a'", Reason.EXPRESSION_SYNTAX, 1, "unexpected character"),
        ("lambda: 1", Reason.EXPRESSION_SYNTAX, 7, "':'"),
    ],
)
def test_errors_name_the_column(text: str, reason: Reason, column: int, says: str) -> None:
    with pytest.raises(InvalidProblem) as caught:
        parse(text)
    assert caught.value.reason is reason
    assert caught.value.violations[0].number == f"column {column}"
    assert says in str(caught.value)


def test_length_and_depth_are_bounded() -> None:
    with pytest.raises(InvalidProblem) as caught:
        parse("1+" * 500_000 + "1")
    assert caught.value.reason is Reason.EXPRESSION_TOO_LONG
    assert caught.value.violations[0].number == "1000001"
    with pytest.raises(InvalidProblem) as caught:
        parse("(" * (MAX_DEPTH + 1) + "x" + ")" * (MAX_DEPTH + 1))
    assert caught.value.reason is Reason.EXPRESSION_TOO_LONG
    with pytest.raises(InvalidProblem) as caught:
        parse("-" * 4000 + "x")
    assert caught.value.reason is Reason.EXPRESSION_TOO_LONG


def test_the_longest_sum_evaluates() -> None:
    terms = MAX_LENGTH // 2
    assert constant_value(parse("+".join(["1"] * terms))) == terms
    np.testing.assert_array_equal(values("+".join(["x"] * terms)), terms * X)


def test_equal_parts_are_evaluated_once() -> None:
    program = parse("exp((x-7)/0.6) + exp((x - 7)/0.6)*exp( (x-7)/0.60 )")
    assert sum(step.name == "exp" for step in program.steps) == 1


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("3", 0),
        ("x", 1),
        ("(1 - x**2)*(x + 1)/3", 3),
        ("(x**2)**4", 8),
        ("exp(1)*x", 1),
        ("1/x", None),
        ("x**0.5", None),
        ("abs(x)", None),
        ("sin(x)", None),
    ],
)
def test_degree_of_polynomials(text: str, expected: int | None) -> None:
    assert degree(parse(text)) == expected


def test_constant_values() -> None:
    assert constant_value(parse("2*pi")) == 2 * math.pi
    assert constant_value(parse("where(1 <= 1, 5, 6) + max(1, 2)")) == 7.0
    assert constant_value(parse("x")) is None
    assert math.isnan(constant_value(parse("log(0-1)")) or 0.0)
    assert math.isnan(constant_value(parse("1/0")) or 0.0)


@pytest.mark.parametrize(
    "text",
    [
        "-50/(1+exp((x-7)/0.6))*(1-5*exp((x-7)/0.6)/(3*(1+exp((x-7)/0.6))))",
        "-30/cosh(x)**2",
        "2/(3+exp(x))**2*exp(x)",
        "x/exp(2*x)",
        "-(x/(2 + exp(-x)))",
        "exp(x)**2/(exp(x)+1)**3",
        "1/(x*(x**2 + 3))",
    ],
)
def test_rewritten_quotients_keep_their_value(text: str) -> None:
    np.testing.assert_allclose(values(text, smooth=True), values(text), rtol=3e-15)


def test_rewritten_quotients_do_not_overflow() -> None:
    far = np.array([-1e5, 0.0, 1e5])
    np.testing.assert_array_equal(values("exp(x)/(1 + exp(x))", far, smooth=True), [0.0, 0.5, 1.0])
    np.testing.assert_array_equal(values("1/cosh(x)", far, smooth=True), [0.0, 1.0, 0.0])
