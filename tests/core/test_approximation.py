"""Coefficient meshes: the stated error bounds hold against 60-digit evaluation, and they are small."""

from collections.abc import Callable
from typing import Any

import mpmath
import numpy as np
import pytest
from mpmath import mpf

from modewright_service.core.approximation import CoefficientMesh, approximate, ranges, restrict
from modewright_service.core.errors import InvalidProblem, Reason, Unsupported
from modewright_service.core.problem import (
    Coefficient,
    Constant,
    Expression,
    Geometry,
    Interface,
    Interpolation,
    Layer,
    Lump,
    Neumann,
    Problem,
    Samples,
    validate,
)

Exact = Callable[[Any], Any]
ONE, ZERO = Constant(1.0), Constant(0.0)


def problem(
    p: Coefficient | str = ONE,
    q: Coefficient | str = ZERO,
    w: Coefficient | str = ONE,
    *,
    start: float = 0.0,
    end: float = 1.0,
    **options: Any,
) -> Problem:
    made = [Expression(c) if isinstance(c, str) else c for c in (p, q, w)]
    return Problem((Layer("", start, end, *made),), **options)


def errors_against(mesh: CoefficientMesh, series: np.ndarray, exact: Exact, relative: bool) -> np.ndarray:
    """(E,) largest |f - f~| (over f if relative) at points of every element, its ends included."""
    rng = np.random.default_rng(7)
    return np.array([_worst(mesh, series[e], e, exact, relative, rng) for e in range(mesh.elements)])


def _worst(
    mesh: CoefficientMesh, row: np.ndarray, e: int, exact: Exact, relative: bool, rng: np.random.Generator
) -> float:
    with mpmath.workdps(60):
        a, b = mpf(float(mesh.edges[e])), mpf(float(mesh.edges[e + 1]))
        near = 1 - mpf(10) ** -18
        points = [-near, near, *(mpf(float(t)) for t in (-1 + 1e-6, 1 - 1e-6, *rng.uniform(-1, 1, 5)))]
        worst = mpf(0)
        for t in points:
            truth = exact((a + b) / 2 + (b - a) / 2 * t)
            error = abs(_series(row, t) - truth)
            worst = max(worst, error / truth if relative and truth else error)
        return float(worst)


def _series(row: np.ndarray, t: Any) -> Any:
    before, now, total = mpf(0), mpf(1), mpf(0)
    for k, c in enumerate(row):
        total += mpf(float(c)) * now
        before, now = now, ((2 * k + 1) * t * now - k * before) / (k + 1)
    return total


# Doubles as they are: mpf(0.1) is the double next to 1/10, which is what the expression's literal means.
WELL = "-50/(1+exp((x-7)/0.6))*(1-5*exp((x-7)/0.6)/(3*(1+exp((x-7)/0.6))))"


def _well(x: Any) -> Any:
    g = mpmath.exp((x - 7) / mpf(0.6))
    return -50 / (1 + g) * (1 - 5 * g / (3 * (1 + g)))


# name of the coefficient, text, the same in mpmath, domain, largest error bound admitted
CASES: dict[str, tuple[str, str, Exact, float, float, float]] = {
    "tanh layer": (
        "p",
        "1.01+0.99*tanh((x-0.5)/0.001)",
        lambda x: mpf(1.01) + mpf(0.99) * mpmath.tanh((x - mpf(0.5)) / mpf(0.001)),
        *(0, 1, 1e-14),
    ),
    "graded": ("p", "exp(2*x)", lambda x: mpmath.exp(2 * x), 0, 1, 1e-14),
    "power": ("p", "x**3", lambda x: x**3, 1, np.e, 1e-14),
    "square": ("p", "(1+x)**2", lambda x: (1 + x) ** 2, 0, 1, 1e-14),
    "small scale": ("p", "1e-12*exp(x*1e6)", lambda x: mpf(1e-12) * mpmath.exp(x * 1e6), 0, 1e-6, 1e-14),
    "oscillating": ("p", "2+cos(200*x)", lambda x: 2 + mpmath.cos(200 * x), 0, 1, 1e-14),
    "narrow in p": (
        "p",
        "1+1e4*exp(-((x-0.3137)/0.000001)**2)",
        lambda x: 1 + 10000 * mpmath.exp(-(((x - mpf(0.3137)) / mpf(0.000001)) ** 2)),
        *(0, 1, 2e-14),
    ),
    "root": ("p", "sqrt(x+0.01)", lambda x: mpmath.sqrt(x + mpf(0.01)), 0, 1, 1e-14),
    "logarithm": ("p", "2+log(x)", lambda x: 2 + mpmath.log(x), 0.5, 3, 1e-14),
    "real power": ("p", "x**-1.5", lambda x: x ** mpf(-1.5), 0.1, 2, 1e-14),
    "well": ("q", WELL, _well, 0, 15, 1e-12),
    "inverse square": ("q", "1/(x+0.1)**2", lambda x: 1 / (x + mpf(0.1)) ** 2, 0, np.pi, 1e-12),
    "exponential": ("q", "exp(x)", mpmath.exp, 0, np.pi, 1e-13),
    "cosine": ("q", "2*1*cos(2*x)", lambda x: 2 * mpmath.cos(2 * x), 0, np.pi, 1e-14),
    "sech": ("q", "-30/cosh(x*50)**2", lambda x: -30 / mpmath.cosh(50 * x) ** 2, 0, 1, 1e-12),
    "bump": (
        "q",
        "1e4*exp(-((x-0.3137)/0.0005)**2)",
        lambda x: 10000 * mpmath.exp(-(((x - mpf(0.3137)) / mpf(0.0005)) ** 2)),
        *(0, 1, 1e-11),
    ),
    "needle": (
        "q",
        "1e4*exp(-((x-0.3137)/0.000001)**2)",
        lambda x: 10000 * mpmath.exp(-(((x - mpf(0.3137)) / mpf(0.000001)) ** 2)),
        *(0, 1, 1e-11),
    ),
    "steep step": (
        "q",
        "exp((x-0.5)*1e4)/(1+exp((x-0.5)*1e4))",
        lambda x: 1 / (1 + mpmath.exp(-(x - mpf(0.5)) * 10000)),
        *(0, 1, 1e-13),
    ),
    "square at 0": ("w", "x**2", lambda x: x**2, 0, 1, 1e-14),
    "parabola": ("w", "1-x**2", lambda x: 1 - x**2, 0, 1, 1e-14),
    "parabola, both ends": ("w", "1-x**2", lambda x: 1 - x**2, -1, 1, 1e-14),
    "double zero inside": ("w", "(x-0.3)**2", lambda x: (x - mpf(0.3)) ** 2, 0, 1, 1e-14),
    "kinked zero inside": ("w", "abs(x-0.3)", lambda x: abs(x - mpf(0.3)), 0, 1, 1e-14),
    "transcendental zero": (
        "w",
        "sin(x)**2*exp(x)",
        lambda x: mpmath.sin(x) ** 2 * mpmath.exp(x),
        0,
        3,
        1e-12,
    ),
}


@pytest.mark.parametrize("name", CASES)
def test_error_bounds_hold(name: str) -> None:
    which, text, exact, start, end, admitted = CASES[name]
    mesh = approximate(problem(**{which: text}, start=start, end=end))
    error = errors_against(mesh, getattr(mesh, which), exact, relative=which != "q")
    bound = getattr(mesh, f"{which}_error")
    assert (error <= bound).all()
    assert bound.max() <= admitted
    assert mesh.elements <= 100


@pytest.mark.parametrize("name", ["tanh layer", "bump", "square at 0", "parabola, both ends", "power"])
def test_restriction_keeps_the_function_and_its_bounds(name: str) -> None:
    which, text, exact, start, end, _ = CASES[name]
    mesh = approximate(problem(**{which: text}, start=start, end=end))
    edges = np.unique(np.concatenate([mesh.edges[:-1] + s * np.diff(mesh.edges) for s in (0, 0.3, 0.8, 1)]))
    fine = restrict(mesh, np.union1d(edges, mesh.edges))
    assert fine.elements >= 3 * mesh.elements
    error = errors_against(fine, getattr(fine, which), exact, relative=which != "q")
    bound = getattr(fine, f"{which}_error")
    assert (error <= bound).all()
    assert bound.max() <= getattr(mesh, f"{which}_error").max() + 1e-13 * max(
        1.0, np.abs(getattr(mesh, which)).max()
    )


@pytest.mark.parametrize(
    "text", ["abs(x-0.3)", "1-x**2", "x**2*(1-x)", "(x-0.6)**2*exp(x)", "0.7*(0.9-x)**2"]
)
@pytest.mark.parametrize("parts", [2, 3, 4, 7])
def test_restriction_keeps_zeros_of_w_relative(text: str, parts: int) -> None:
    mesh = approximate(problem(w=text, end=0.9 if "0.9" in text else 1.0))
    shares = np.arange(parts)[:, np.newaxis] / parts
    edges = np.append((mesh.edges[:-1] + shares * np.diff(mesh.edges)).T.ravel(), mesh.edges[-1])
    once = restrict(mesh, edges)
    twice = restrict(once, np.union1d(edges, (edges[1:] + edges[:-1]) / 2))
    assert max(once.w_error.max(), twice.w_error.max()) < 5e-12


def test_restriction_without_new_edges_is_the_identity() -> None:
    mesh = approximate(problem(p="1+x", w="2+sin(20*x)"))
    same = restrict(mesh, mesh.edges)
    np.testing.assert_array_equal(same.w, mesh.w)
    np.testing.assert_array_equal(same.w_error, mesh.w_error)
    with pytest.raises(ValueError, match="every edge"):
        restrict(mesh, np.array([0.0, 0.1234, 1.0]))


@pytest.mark.parametrize(
    "name", ["tanh layer", "well", "parabola, both ends", "needle", "kinked zero inside"]
)
def test_ranges_contain_the_coefficient(name: str) -> None:
    which, text, exact, start, end, _ = CASES[name]
    mesh = approximate(problem(**{which: text}, start=start, end=end))
    found = ranges(mesh, np.arange(mesh.elements) % 5 + 1)
    low, high = getattr(found, f"{which}_lower"), getattr(found, f"{which}_upper")
    inside = found.edges[:-1] + np.diff(found.edges) * np.array([[0.001], [0.3], [0.999]])
    truth = np.array([[float(exact(mpf(float(x)))) for x in row] for row in inside])
    assert (low <= truth).all()
    assert (truth <= high).all()
    if which == "p":
        assert (low > 0).all()
    # They close up as the pieces get shorter.
    closer = ranges(mesh, 16 * (np.arange(mesh.elements) % 5 + 1))
    gap = (getattr(closer, f"{which}_upper") - getattr(closer, f"{which}_lower")).max()
    assert gap <= 0.2 * (high - low).max() + 1e-9 * np.abs(truth).max()


@pytest.mark.parametrize("name", ["tanh layer", "bump", "needle", "well"])
@pytest.mark.parametrize("starved", [{"max_elements": 3}, {"max_elements": 12, "max_degree": 6}])
def test_starved_meshes_admit_their_error(name: str, starved: dict[str, int]) -> None:
    which, text, exact, start, end, _ = CASES[name]
    mesh = approximate(problem(**{which: text}, start=start, end=end), **starved)
    error = errors_against(mesh, getattr(mesh, which), exact, relative=which != "q")
    assert mesh.elements <= starved["max_elements"]
    bound = getattr(mesh, f"{which}_error")
    assert (error <= bound).all()
    assert bound.max() > 1e-6
    # Where the bump sits a bound exists and is not blown up beyond the bump itself by much.
    if name == "bump":
        assert bound.max() < 1e6


def test_hidden_needle_is_found_without_being_sampled() -> None:
    mesh = approximate(problem(q=CASES["needle"][1]))
    near = (mesh.edges[:-1] < 0.3137) & (mesh.edges[1:] > 0.3137)
    assert np.diff(mesh.edges)[near].max() < 1e-5
    assert np.abs(mesh.q).sum(axis=1).max() > 5e3


@pytest.mark.parametrize("factor", [1e-12, 1e12])
@pytest.mark.parametrize("length", [1e-6, 1e6])
def test_scales_change_nothing_but_the_scale(factor: float, length: float) -> None:
    def scaled(f: float, a: float) -> CoefficientMesh:
        x = f"(x/{a!r})"
        layer = Layer(
            "",
            0.0,
            a,
            Expression(f"{f!r}*(1.01+0.99*tanh(({x}-0.5)/0.01))"),
            Expression(f"{f / a**2!r}*1e4*exp(-(({x}-0.3)/0.01)**2)"),
            Expression(f"{f!r}*(2+sin(9*{x}))"),
        )
        return approximate(Problem((layer,)))

    plain, other = scaled(1.0, 1.0), scaled(factor, length)
    # The texts differ in rounded literals, so edges may differ by an occasional halving, errors little.
    assert abs(plain.elements - other.elements) <= 2
    assert other.p_error.max() < 1e-13
    assert other.w_error.max() < 1e-13
    assert other.q_error.max() < 1e-14 * 1e4 * factor / length**2 * 1e2


def test_switches_become_edges() -> None:
    mesh = approximate(
        problem(p="where(x<0.3,1,10)*(1+x)", q="max(sin(20*x),0.5)+abs(x-0.7)", w="step(x-0.4)")
    )
    crossings = [(np.arcsin(0.5) + 2 * np.pi * k) / 20 for k in range(4)]
    crossings += [(np.pi - np.arcsin(0.5) + 2 * np.pi * k) / 20 for k in range(3)]
    wanted = np.array([0.3, 0.7, 0.4, *(x for x in crossings if x < 1)])
    assert np.abs(mesh.edges[:, np.newaxis] - wanted).min(axis=0).max() < 1e-15
    assert np.isin([0.3, 0.4, 0.7], mesh.edges).all()
    left = mesh.edges[1:] <= 0.4
    assert not mesh.w[left].any()
    assert (mesh.w_error[left] == 0).all()
    np.testing.assert_array_equal(mesh.w[~left, 0], 1.0)
    # q is resolved to rounding of Lambda times the mean w, which is of the order of 100 here.
    assert mesh.q_error.max() < 1e-12


def test_crossings_that_accumulate_leave_an_honest_bound() -> None:
    mesh = approximate(problem(q="where(sin(1/(x+0.001))<0,1,0)"), max_elements=300)
    assert mesh.elements <= 300 + 320  # the edges at settled crossings are not counted against the limit
    x = np.linspace(1e-4, 1 - 1e-4, 40_001)
    element = np.searchsorted(mesh.edges, x, side="right") - 1
    t = (2 * x - mesh.edges[element] - mesh.edges[element + 1]) / np.diff(mesh.edges)[element]
    value = np.einsum("nk,nk->n", np.polynomial.legendre.legvander(t, mesh.q.shape[1] - 1), mesh.q[element])
    truth = np.where(np.sin(1 / (x + 0.001)) < 0, 1.0, 0.0)
    assert (np.abs(value - truth) <= mesh.q_error[element] + 1e-12).all()


TABLE_X = np.array([0.0, 0.1, 0.35, 0.5, 0.8, 1.0])
TABLE_VALUES = np.array([1.0, 2.0, 1.5, 4.0, 3.0, 3.5])


@pytest.mark.parametrize("kind", list(Interpolation))
@pytest.mark.parametrize("geometry", [Geometry.PLANE, Geometry.SPHERICAL])
def test_tables_pass_through_their_samples(kind: Interpolation, geometry: Geometry) -> None:
    samples = Samples(TABLE_X, TABLE_VALUES, kind)
    shifted = Samples(TABLE_X + 1, TABLE_VALUES, kind)
    given = samples if geometry is Geometry.PLANE else shifted
    offset = 0.0 if geometry is Geometry.PLANE else 1.0
    mesh = approximate(problem(w=given, start=offset, end=1 + offset, geometry=geometry))
    np.testing.assert_array_equal(mesh.edges, given.x)
    assert mesh.w_error.max() < 1e-14
    ends = np.stack([mesh.w @ (-1.0) ** np.arange(mesh.w.shape[1]), mesh.w.sum(axis=1)])
    ends /= np.stack([mesh.edges[:-1], mesh.edges[1:]]) ** geometry.power
    left, right = TABLE_VALUES[:-1], TABLE_VALUES[1:]
    expected = {
        Interpolation.STEP_LEFT: (left, left),
        Interpolation.STEP_RIGHT: (right, right),
    }.get(kind, (left, right))
    np.testing.assert_allclose(ends, expected, rtol=1e-13)


def test_tables_match_scipy_between_samples() -> None:
    from scipy.interpolate import CubicSpline, PchipInterpolator

    x = np.linspace(0.01, 0.99, 99)
    references = {
        Interpolation.CUBIC_SPLINE: CubicSpline(TABLE_X, TABLE_VALUES)(x),
        Interpolation.MONOTONE_CUBIC: PchipInterpolator(TABLE_X, TABLE_VALUES)(x),
        Interpolation.LINEAR: np.interp(x, TABLE_X, TABLE_VALUES),
    }
    for kind, expected in references.items():
        mesh = approximate(problem(q=Samples(TABLE_X, TABLE_VALUES, kind)))
        element = np.searchsorted(mesh.edges, x, side="right") - 1
        t = (2 * x - mesh.edges[element] - mesh.edges[element + 1]) / np.diff(mesh.edges)[element]
        value = np.einsum(
            "nk,nk->n", np.polynomial.legendre.legvander(t, mesh.q.shape[1] - 1), mesh.q[element]
        )
        np.testing.assert_allclose(value, expected, rtol=1e-13)


@pytest.mark.parametrize("values", [[0.0, 1.0, 0.0, 0.0, 2.0], [1.0, 0.0, 0.3, 1.0, 0.0]])
@pytest.mark.parametrize("kind", [Interpolation.LINEAR, Interpolation.MONOTONE_CUBIC])
def test_tables_that_touch_zero_keep_relative_errors(values: list[float], kind: Interpolation) -> None:
    mesh = approximate(problem(w=Samples(np.linspace(0, 1, 5) ** 1.5, np.array(values), kind)))
    assert mesh.w_error.max() < 2e-13


def test_reciprocal_p() -> None:
    layer = Layer("", 1.0, 2.0, Samples(np.array([1.0, 2.0]), np.array([1.0, 4.0])), reciprocal_p=True)
    mesh = approximate(Problem((layer,), geometry=Geometry.CYLINDRICAL))
    error = errors_against(mesh, mesh.p, lambda x: x / (1 + 3 * (x - 1)), relative=True)
    assert (error <= mesh.p_error).all()
    assert mesh.p_error.max() < 1e-14


@pytest.mark.parametrize("geometry", [Geometry.CYLINDRICAL, Geometry.SPHERICAL])
def test_geometry_factor_multiplies_all_three(geometry: Geometry) -> None:
    g = geometry.power
    mesh = approximate(problem("exp(x)", "sin(x)", Constant(3.0), start=0.5, end=2.5, geometry=geometry))
    parts = [
        (errors_against(mesh, mesh.p, lambda x: mpmath.exp(x) * x**g, True), mesh.p_error),
        (errors_against(mesh, mesh.q, lambda x: mpmath.sin(x) * x**g, False), mesh.q_error),
        (errors_against(mesh, mesh.w, lambda x: 3 * x**g, True), mesh.w_error),
    ]
    assert all((error <= bound).all() for error, bound in parts)


def test_interfaces_inside_a_layer_become_edges() -> None:
    mesh = approximate(problem(interfaces=(Interface(0.25, resistance=1.0),)))
    np.testing.assert_array_equal(mesh.edges, [0.0, 0.25, 1.0])


INVALID, NEGATIVE = Reason.INVALID_COEFFICIENT, Reason.NEGATIVE_COEFFICIENT
SINGULAR_END, SINGULAR_INSIDE = Reason.UNSUPPORTED_END, Reason.UNSUPPORTED_COEFFICIENT
DIPPING = Samples(TABLE_X, np.array([1, 1, 5, 0.01, 5, 1.0]), Interpolation.CUBIC_SPLINE)


@pytest.mark.parametrize(
    ("name", "coefficient", "reason", "place"),
    [
        ("p", "x-0.5", NEGATIVE, (0.0, 0.5)),
        ("w", "1-2*exp(-((x-0.3)/0.001)**2)", NEGATIVE, (0.299, 0.301)),
        ("w", "cos(4*x)", NEGATIVE, (0.39, 1.0)),
        ("w", DIPPING, NEGATIVE, (0.35, 0.8)),
        ("q", "1/(x-0.5)", INVALID, (0.5, 0.5)),
        ("q", "1/(x-1/3)", INVALID, (0.3333, 0.3334)),
        ("q", "log(x-0.5)", INVALID, (0.0, 0.5)),
        ("q", "tan(3*x)", INVALID, (0.52, 0.53)),
        ("q", "exp(1e5*x)", INVALID, (0.0, 1.0)),
        ("p", "x", SINGULAR_END, (0.0, 0.0)),
        ("p", "1-x**2", SINGULAR_END, (1.0, 1.0)),
        ("p", "x**0.5", SINGULAR_END, (0.0, 0.0)),
        ("w", "x**(-0.5)", SINGULAR_END, (0.0, 0.0)),
        ("q", "1/x", SINGULAR_END, (0.0, 0.0)),
        ("p", "(x-0.3)**2", SINGULAR_INSIDE, (0.3, 0.3)),
    ],
)
def test_refused_with_field_and_place(
    name: str, coefficient: Coefficient | str, reason: Reason, place: tuple[float, float]
) -> None:
    given = problem(**{name: coefficient})
    validate(given)
    kind = InvalidProblem if reason in (INVALID, NEGATIVE) else Unsupported
    with pytest.raises(kind) as caught:
        approximate(given)
    error: Any = caught.value
    assert error.reason is reason
    assert error.violations[0].field == f"layers[0].{name}"
    assert place[0] <= float(error.metadata["x"]) <= place[1]
    assert error.violations[0].number


def test_weight_that_is_zero_everywhere_needs_a_mass() -> None:
    given = problem(w="where(x<2,0,1)")
    validate(given)
    with pytest.raises(InvalidProblem) as caught:
        approximate(given)
    assert caught.value.reason is Reason.ZERO_WEIGHT
    mesh = approximate(problem(w="where(x<2,0,1)", left=Neumann(), right=Lump(1.0)))
    assert not mesh.w.any()


def test_poll_may_interrupt() -> None:
    class StopHereError(Exception):
        pass

    def stop() -> None:
        raise StopHereError

    with pytest.raises(StopHereError):
        approximate(problem(p="2+sin(x)"), poll=stop)


def test_equal_problems_give_equal_bytes() -> None:
    first, second = (approximate(problem(p="2+sin(30*x)", w="x**2")) for _ in range(2))
    assert first.p.tobytes() == second.p.tobytes()
    assert first.w.tobytes() == second.w.tobytes()
