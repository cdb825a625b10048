"""What is answered where a coefficient is hard to resolve: the tolerance met, or plainly not, or a refusal.

Branch points, fast oscillations of small and large size, and massless layers that nothing holds. Exact
values: closed forms where there are any, else the tests' dense solver on elements graded towards the place.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from scipy.optimize import brentq
from scipy.special import jv

from modewright_service.core.errors import NotConverged, Reason
from modewright_service.core.solve import SolveOptions, solve
from tests.numerics.core_problems import core_problem
from tests.numerics.dense_reference import solve_dense
from tests.reference.functions import dense_from_document

FIXED, FREE = {"kind": "dirichlet"}, {"kind": "neumann"}
# Down to 1e-5: the dense solver loses rounding over the length of its smallest element.
GRADED = 0.6 * 4.0 ** -np.arange(0.0, 9.0)


def _layer(start: float, end: float, **coefficients: float | str) -> dict[str, Any]:
    return {"start": start, "end": end, **coefficients}


def _single(**coefficients: float | str) -> dict[str, Any]:
    return {"layers": [_layer(0.0, 1.0, **coefficients)], "left": FIXED, "right": FIXED}


def test_a_weight_with_a_branch_point_at_the_end() -> None:
    """-u'' = lambda sqrt(x) u: u = sqrt(x) J_0.4(0.8 sqrt(lambda) x^1.25), so lambda = (1.25 j_0.4,n)^2.

    Abramowitz and Stegun, Handbook of Mathematical Functions, 1964, eq. 9.1.51 (from memory).
    """
    grid = np.linspace(0.1, 60.0, 6_000)
    signs = np.sign(jv(0.4, grid))
    at = np.flatnonzero(signs[1:] * signs[:-1] < 0.0)[:12]
    roots = np.array([brentq(lambda z: jv(0.4, z), grid[i], grid[i + 1], xtol=1e-14) for i in at])
    exact = (1.25 * roots) ** 2
    record = solve(core_problem(_single(w="x**0.5")), 12, 1e-9)
    # jv is good to some 1e-15 near its zeros, where its slope is 0.1 and more
    assert np.all(record.lower <= exact * (1.0 + 1e-13))
    assert np.all(exact * (1.0 - 1e-13) <= record.upper)
    assert record.tolerance_met.all()
    assert record.confirmed.all()


@pytest.mark.parametrize(
    ("coefficients", "place"),
    [
        ({"p": "1+x**0.5"}, 0.0),
        ({"p": "2+x**0.5", "q": "x**0.5", "w": "x**1.5"}, 0.0),
        ({"w": "1+abs(x-0.3)**0.5"}, 0.3),
        ({"p": "1+abs(x-0.3)**0.5"}, 0.3),
        ({"w": "sqrt(x*(1-x))"}, 0.0),
    ],
)
def test_branch_points(coefficients: dict[str, float | str], place: float) -> None:
    cuts = np.concatenate([[place], place + GRADED, place - GRADED, 1.0 - GRADED])
    document = _single(**coefficients)
    record = solve(core_problem(document), 8, 1e-9)
    dense = dense_from_document(document, cuts=tuple(np.unique(cuts[(cuts > 0.0) & (cuts < 1.0)])))
    exact = solve_dense(dense, 8, degree=16).eigenvalues
    size = np.maximum(np.abs(exact), record.scale)
    # 4e-16 / 1e-5; the root over the smallest element is integrated to a millionth of its 3e-8
    assert np.all(record.lower <= exact + 1e-10 * size)
    assert np.all(exact <= record.upper + 1e-10 * size)
    assert record.tolerance_met.all()


@pytest.mark.parametrize(("height", "rate", "pieces"), [(1e4, 300.0, 40), (-3e4, 500.0, 60)])
def test_a_fast_potential_is_confirmed(height: float, rate: float, pieces: int) -> None:
    """Its comparison problem needs pieces of second order: constants below q lose half its slope on each."""
    document = _single(q=f"{height}*sin({rate}*x)")
    record = solve(core_problem(document), 8, 1e-9)
    exact = solve_dense(dense_from_document(document, pieces=pieces), 8, degree=24).eigenvalues
    size = np.maximum(np.abs(exact), record.scale)
    assert record.confirmed.all()
    assert record.tolerance_met.all()
    assert np.all(record.lower <= exact + 1e-12 * size)
    assert np.all(exact <= record.upper + 1e-12 * size)


def test_an_oscillation_too_fast_to_resolve_is_answered_with_its_width() -> None:
    """p = 1 + 0.001 sin(10^6 x) acts as its harmonic mean sqrt(1 - 10^-6), up to its wavelength squared.

    Classical homogenisation: Bensoussan, Lions and Papanicolaou, Asymptotic Analysis for Periodic
    Structures, 1978, ch. 1 (from memory).
    """
    record = solve(core_problem(_single(p="1+1e-3*sin(1e6*x)")), 8, 1e-9, options=SolveOptions(passes=1))
    exact = (np.arange(1, 9) * np.pi) ** 2 * np.sqrt(1.0 - 1e-6)
    assert np.all(record.lower < exact)
    assert np.all(exact < record.upper)
    assert not record.tolerance_met.any()
    # Not without information: the coefficient is known to a multiple of its own variation.
    assert np.all(record.upper - record.lower < 0.05 * exact)


@pytest.mark.parametrize("name", ["p", "w"])
def test_an_oscillation_that_leaves_no_bounds_is_refused(name: str) -> None:
    with pytest.raises(NotConverged) as caught:
        solve(core_problem(_single(**{name: "exp(3*sin(1e6*x))"})), 8, 1e-9)
    assert caught.value.reason is Reason.NOT_CONVERGED
    assert caught.value.violations[0].field == f"layers[0].{name}"
    assert "smooth" in caught.value.violations[0].message
    assert caught.value.metadata["wanted"] == "1e-09"


HOLLOW = _layer(0.0, 0.5, w=0.0)
SOLID = _layer(0.5, 1.0)
UNHELD: dict[str, tuple[dict[str, Any], str, str]] = {
    "left end": (
        {"layers": [HOLLOW, SOLID], "left": {"kind": "robin", "alpha": 3.0, "beta": 1.0}, "right": FIXED},
        "left.alpha",
        "3.0",
    ),
    "right end": (
        {
            "layers": [_layer(0.0, 0.5), _layer(0.5, 1.0, w=0.0)],
            "left": FREE,
            "right": {"kind": "robin", "alpha": -3.0, "beta": 1.0},
        },
        "right.alpha",
        "-3.0",
    ),
    "spring": (
        {
            "layers": [_layer(0.0, 0.3, w=0.0), _layer(0.3, 0.5, w=0.0), SOLID],
            "left": FREE,
            "right": FIXED,
            "interfaces": [{"x": 0.3, "spring": -9.0}],
        },
        "interfaces[0].spring",
        "-9.0",
    ),
    "potential": (
        {"layers": [{**HOLLOW, "q": -500.0}, SOLID], "left": FREE, "right": FIXED},
        "layers[0].q",
        "-500.0",
    ),
}


@pytest.mark.parametrize("title", UNHELD)
def test_what_leaves_no_lowest_eigenvalue_is_named(title: str) -> None:
    """-(p u')' on the massless half alone has a negative direction, to which no lambda is low enough."""
    document, field, number = UNHELD[title]
    with pytest.raises(NotConverged) as caught:
        solve(core_problem(document), 8, 1e-9)
    assert (caught.value.violations[0].field, caught.value.violations[0].number) == (field, number)


def test_a_negative_end_that_a_massless_layer_can_bear() -> None:
    """h = 0.3 < 1 / 0.5, the stiffness of the layer: a lowest eigenvalue exists.

    u is linear there, so the layer with its end is a film of 1 / (0.5 - 1 / 0.3) on the other one.
    """
    document = {
        "layers": [_layer(0.0, 0.5), _layer(0.5, 1.0, w=0.0)],
        "left": FREE,
        "right": {"kind": "robin", "alpha": -0.3, "beta": 1.0},
    }
    record = solve(core_problem(document), 8, 1e-9)
    stiffness = 1.0 / (0.5 - 1.0 / 0.3)
    lowest = brentq(lambda k: k * np.tanh(0.5 * k) + stiffness, 0.1, 3.0, xtol=1e-15)
    assert record.eigenvalues[0] == pytest.approx(-(lowest**2), rel=1e-12)
    assert record.lower[0] <= -(lowest**2) * (1.0 - 1e-14)
    assert record.upper[0] >= -(lowest**2) * (1.0 + 1e-14)
