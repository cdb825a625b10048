"""Eigenvalues, vectors and bounds of the core against closed forms and an independent exact count.

Closed forms: ((n + 1) pi)^2 and its relatives for the plain string (Courant and Hilbert, Methods of
Mathematical Physics I, 1953, ch. V); layered problems are judged by the exact transfer of constant layers.
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.optimize import brentq

from modewright.pieces import Pieces
from modewright_service.core.approximation import approximate
from modewright_service.core.comparison import build_comparison
from modewright_service.core.errors import Unsupported
from modewright_service.core.problem import Dirichlet, Film, Interface, Lump, Neumann, Problem, Robin, resolve
from modewright_service.core.solve import SolveOptions, solve

from .spectral import gram, layered, relative

RNG = np.random.default_rng(7)
MANY = np.concatenate([[0.0], np.cumsum(10.0 ** RNG.uniform(-3, 0, 40))])

PROBLEMS: dict[str, Problem] = {
    "string": layered([0, 1], [1], [1]),
    "string cut in two": layered([0, 0.5, 1], [1, 1], [1, 1]),
    "uniform layers": layered(list(np.linspace(0, 1, 9)), [1] * 8, [1] * 8, left=Neumann(), right=Film(1.0)),
    "free": layered([0, 1], [1], [1], left=Neumann(), right=Neumann()),
    "contrast 1e8": layered(
        [0, 0.25, 0.5, 0.75, 1], [1e8, 1, 1e8, 1], [1, 1, 1, 1], left=Neumann(), right=Film(1.0)
    ),
    "forty layers, contrast 1e8": layered(
        list(MANY),
        list(10.0 ** RNG.uniform(-4, 4, 40)),
        list(10.0 ** RNG.uniform(-1, 1, 40)),
        left=Neumann(),
        right=Film(1),
    ),
    "lumps behind resistances": layered(
        [0, 0.5, 1],
        [1, 2],
        [1, 3],
        left=Lump(2.0, 0.5, 0.3),
        right=Lump(1.0, 0.0, 1.0),
        interfaces=[Interface(0.5, resistance=0.2)],
    ),
    "negative end spring": layered([0, 0.5, 1], [1, 2], [1, 3], left=Lump(2.0), right=Robin(-3.0, 1.0)),
    "well": layered([0, 1, 2, 3], [1, 1, 1], [1, 1, 1], q=[0, -1e4, 0]),
    "two wells": layered([0, 1, 1.3, 2.3], [1, 1, 1], [1, 1, 1], q=[0, 1e3, 0]),
    "massless layer": layered([0, 1, 2, 3], [1, 1, 1], [1, 0, 1]),
}


@pytest.fixture(scope="module", params=sorted(PROBLEMS))
def solved(request: pytest.FixtureRequest):
    problem = PROBLEMS[request.param]
    return problem, solve(problem, 96, 1e-9)


def test_orthonormal(solved) -> None:
    _, record = solved
    # rounding of a vector is eps over relative gap: 1e-16 * 100 * a few, the two wells' pairs included
    assert np.abs(gram(record) - np.eye(record.count)).max() < 1e-11


def test_index_is_number_of_zeros(solved) -> None:
    _, record = solved
    np.testing.assert_array_equal(record.zeros, np.arange(record.count))


def test_bounds_agree_with_exact_counts(solved) -> None:
    """Constant layers make the comparison problem the problem itself: its counts bracket every eigenvalue."""
    problem, record = solved
    mesh = approximate(problem)
    exact = build_comparison(mesh, resolve(problem), np.ones(mesh.edges.size - 1, dtype=np.int64))
    # the comparison is widened by the coefficients' rounding, the count itself rounds by about a width
    margin = record.upper - record.lower + 1e-12 * np.maximum(np.abs(record.eigenvalues), record.scale)
    n = np.arange(record.count)
    np.testing.assert_array_less(exact.count(record.lower - margin), n + 1)
    np.testing.assert_array_less(n, exact.count(record.upper + margin))
    assert relative(record, record.upper - record.lower).max() < 1e-9


def test_sign_convention(solved) -> None:
    """u > 0 at the left end, or u' > 0 there where u is held at zero."""
    problem, record = solved
    quantity = "derivative" if isinstance(problem.left, Dirichlet) else "value"
    assert (Pieces(record).evaluate(record.edges[:1], quantity=quantity)[:, 0] > 0).all()


@pytest.mark.parametrize("count", [8, 100, 500])
def test_string(count: int) -> None:
    record = solve(PROBLEMS["string"], count, 1e-12)
    exact = (np.arange(1, count + 1) * math.pi) ** 2
    # 1e-16 per unknown that takes part: 5 count unknowns
    assert relative(record, record.eigenvalues - exact).max() < 1e-14 + 5e-16 * count
    assert ((record.lower <= exact) & (exact <= record.upper)).all()


def test_lump_behind_resistance_closed_form() -> None:
    """-u'' = lambda u, u(1) = 0, lump m behind R at x = 0: with k^2 = lambda the two conditions
    u'(0) = (u(0) - L)/R and u'(0) = -lambda m L eliminate to tan k = k (1/(lambda m) - R)."""
    mass, resistance = 0.4, 0.6
    record = solve(layered([0, 1], [1], [1], left=Lump(mass, 0.0, resistance)), 24, 1e-12)

    def characteristic(k: float) -> float:
        return math.sin(k) + k * (resistance - 1.0 / (k * k * mass)) * math.cos(k)

    grid = np.linspace(1e-3, 60.0, 20_001)
    values = [characteristic(k) for k in grid]
    roots = [
        brentq(characteristic, a, b, xtol=1e-15, rtol=1e-15)
        for a, b, fa, fb in zip(grid[:-1], grid[1:], values[:-1], values[1:], strict=True)
        if fa * fb < 0
    ]
    exact = np.array(roots[:16]) ** 2
    # brentq leaves one unit of rounding in k
    assert (np.abs(record.eigenvalues[:16] - exact) / exact).max() < 1e-13


@pytest.mark.parametrize("factor", [1e-12, 1e12])
@pytest.mark.parametrize("which", ["p", "w", "x"])
def test_scales(factor: float, which: str) -> None:
    """Only the scale of the answer changes: lambda with p / (w x^2)."""
    base = {"p": [1.0, 2.0], "w": [1.0, 3.0], "q": [-3.0, 4.0]}
    plain = solve(layered([0, 0.5, 1], **base, left=Neumann(), right=Film(1.0)), 48, 1e-9)
    if which == "p":
        problem = layered(
            [0, 0.5, 1],
            [v * factor for v in base["p"]],
            base["w"],
            [v * factor for v in base["q"]],
            left=Neumann(),
            right=Film(factor),
        )
        ratio = factor
    elif which == "w":
        problem = layered(
            [0, 0.5, 1], base["p"], [v * factor for v in base["w"]], base["q"], Neumann(), Film(1.0)
        )
        ratio = 1.0 / factor
    else:
        length = math.sqrt(factor)
        problem = layered(
            [0, 0.5 * length, length],
            base["p"],
            base["w"],
            [v / length**2 for v in base["q"]],
            left=Neumann(),
            right=Film(1.0 / length),
        )
        ratio = 1.0 / length**2
    scaled = solve(problem, 48, 1e-9)
    assert relative(plain, scaled.eigenvalues / ratio - plain.eigenvalues).max() < 1e-13
    assert relative(plain, (scaled.upper - scaled.lower) / ratio).max() < 1e-9


def test_inseparable_wells_stay_orthonormal() -> None:
    """Wells behind a wall of exp(-100): pairs agree to rounding and are grouped, vectors orthonormal."""
    record = solve(layered([0, 1, 2, 3], [1, 1, 1], [1, 1, 1], q=[0, 1e4, 0]), 48, 1e-9)
    assert np.abs(gram(record) - np.eye(record.count)).max() < 1e-11
    np.testing.assert_array_equal(record.groups[:8], [0, 0, 1, 1, 2, 2, 3, 3])


@pytest.mark.parametrize("degree", [4, 6, 10, 16])
@pytest.mark.parametrize("name", ["string", "negative end spring", "well", "lumps behind resistances"])
def test_starved_bounds_contain(name: str, degree: int) -> None:
    problem = PROBLEMS[name]
    starved = solve(problem, 24, 1e-9, options=SolveOptions(degree=degree, passes=0))
    good = solve(problem, 24, 1e-12)
    assert (starved.lower <= good.upper).all()
    assert (good.lower <= starved.upper).all()
    assert relative(good, good.upper - good.lower).max() < 1e-9
    if degree <= 6:
        # the point of the test: these meshes are visibly too coarse, and the bounds say so
        assert relative(good, starved.upper - starved.lower).max() > 1e-6


def test_adaptation_reaches_the_tolerance() -> None:
    coarse = solve(PROBLEMS["string"], 24, 1e-9, options=SolveOptions(degree=8, passes=0))
    refined = solve(PROBLEMS["string"], 24, 1e-9, options=SolveOptions(degree=8))
    assert relative(coarse, coarse.upper - coarse.lower).max() > 1e-9
    assert relative(refined, refined.upper - refined.lower).max() < 1e-9


def test_equal_problems_give_equal_bytes() -> None:
    first = solve(PROBLEMS["two wells"], 24, 1e-9)
    second = solve(PROBLEMS["two wells"], 24, 1e-9)
    assert first.to_bytes() == second.to_bytes()


def test_mass_in_lumps_alone_is_named() -> None:
    """Two masses on a weightless rod have two eigenvalues: the refusal says what is missing, no number."""
    with pytest.raises(Unsupported, match="w is zero in every layer") as caught:
        solve(layered([0, 1], [1], [0], left=Lump(2.0), right=Lump(1.0)), 2, 1e-9)
    (violation,) = caught.value.violations
    assert (violation.field, violation.number) == ("layers", "")
