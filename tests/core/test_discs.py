"""Circular arithmetic contains what it should; the discs cover the ellipses they are meant for."""

import mpmath
import numpy as np
import pytest

from modewright_service.core import discs
from modewright_service.core.cover import RHO, cover, truncation
from modewright_service.core.discs import Disc
from modewright_service.core.evaluation import run
from modewright_service.core.expressions import parse

UNARY = {
    "exp": mpmath.exp,
    "log": mpmath.log,
    "sqrt": mpmath.sqrt,
    "sin": mpmath.sin,
    "cos": mpmath.cos,
    "tan": mpmath.tan,
    "sinh": mpmath.sinh,
    "cosh": mpmath.cosh,
    "tanh": mpmath.tanh,
    "sech": mpmath.sech,
    "logistic": lambda z: 1 / (1 + mpmath.exp(-z)),
}


def random_discs(seed: int, count: int, spread: float, largest: float) -> tuple[Disc, np.ndarray]:
    """Discs, and a point of each (most on its rim)."""
    rng = np.random.default_rng(seed)
    centre = spread * (rng.standard_normal(count) + 1j * rng.standard_normal(count))
    radius = largest * 10.0 ** rng.uniform(-6, 0, count)
    share = np.where(rng.random(count) < 0.7, 1.0, rng.random(count))
    points = centre + radius * share * (1 - 1e-12) * np.exp(2j * np.pi * rng.random(count))
    return Disc(centre, radius), points


def distances(values: Disc, truth: list[mpmath.mpc]) -> np.ndarray:
    return np.array([float(abs(t - mpmath.mpc(c))) for t, c in zip(truth, values.centre, strict=True)])


@pytest.mark.parametrize("scale", [(1.0, 1.0), (8.0, 3.0), (60.0, 20.0)], ids=["near", "wide", "far"])
@pytest.mark.parametrize("name", UNARY)
def test_functions_contain_their_values(name: str, scale: tuple[float, float]) -> None:
    with mpmath.workdps(40), np.errstate(all="ignore"):
        a, points = random_discs(17, 200, *scale)
        result = discs.settled(discs.FUNCTIONS[name](a))
        known = np.isfinite(result.radius)
        assert known.sum() > 40
        truth = [UNARY[name](mpmath.mpc(z)) for z in points[known]]
        far = distances(Disc(result.centre[known], result.radius[known]), truth)
    assert (far <= result.radius[known]).all()


@pytest.mark.parametrize("largest", [1e-3, 1.0, 100.0])
@pytest.mark.parametrize("name", UNARY)
def test_ranges_of_real_intervals_contain_samples(name: str, largest: float) -> None:
    rng = np.random.default_rng(23)
    left = rng.uniform(-3, 3, 100)
    left = np.abs(left) if name in ("log", "sqrt") else left
    width = largest * 10.0 ** rng.uniform(-4, 0, 100)
    with np.errstate(all="ignore"):
        ends = left.astype(np.longdouble), (left + width).astype(np.longdouble)
        value = discs.settled(discs.FUNCTIONS[name](discs.interval(*ends)))
    known = np.isfinite(value.radius)
    assert known.sum() > (20 if name == "tan" else 90)
    inside = (left[:, np.newaxis] + width[:, np.newaxis] * np.array([0, 1e-3, 0.37, 0.8, 1]))[known]
    with mpmath.workdps(40):
        truth = np.array([np.longdouble(str(mpmath.re(UNARY[name](mpmath.mpf(x))))) for x in inside.ravel()])
    truth = truth.reshape(inside.shape)
    assert (discs.low(value)[known][:, np.newaxis] <= truth).all()
    assert (truth <= discs.high(value)[known][:, np.newaxis]).all()


@pytest.mark.parametrize("exponent", [2.0, 5.0, 0.0, -1.0, -3.0, 0.5, -0.5, 2.5])
def test_powers_contain_their_values(exponent: float) -> None:
    with mpmath.workdps(40), np.errstate(all="ignore"):
        a, points = random_discs(3, 200, 1.0, 1.0)
        result = discs.settled(discs.power(a, exponent))
        known = np.isfinite(result.radius)
        assert known.sum() > 40
        truth = [mpmath.power(mpmath.mpc(z), mpmath.mpf(exponent)) for z in points[known]]
        far = distances(Disc(result.centre[known], result.radius[known]), truth)
    assert (far <= result.radius[known]).all()


@pytest.mark.parametrize("symbol", ["+", "-", "*", "/"])
def test_operations_contain_their_values(symbol: str) -> None:
    with mpmath.workdps(40), np.errstate(all="ignore"):
        a, first = random_discs(5, 200, 1.0, 0.5)
        b, second = random_discs(6, 200, 1.0, 0.5)
        result = discs.settled(discs.OPERATIONS[symbol](a, b))
        known = np.isfinite(result.radius)
        pairs = [(mpmath.mpc(u), mpmath.mpc(v)) for u, v in zip(first[known], second[known], strict=True)]
        apply = {"+": mpmath.fadd, "-": mpmath.fsub, "*": mpmath.fmul, "/": mpmath.fdiv}[symbol]
        far = distances(Disc(result.centre[known], result.radius[known]), [apply(u, v) for u, v in pairs])
    assert known.sum() > 100
    assert (far <= result.radius[known]).all()


@pytest.mark.parametrize(
    ("text", "centre", "radius"),
    [
        ("1/x", 0.5, 0.6),  # a pole inside
        ("log(x)", -1.0 + 0.1j, 0.2),  # across the cut
        ("sqrt(x)", 0.1, 0.2),  # the branch point inside
        ("x**0.5", -1.0, 0.1),
        ("tan(x)", 1.5, 0.2),  # pi/2 inside
        ("tanh(x)", 1.5j, 0.2),  # i pi/2 inside
        ("1/(1+x**2)", 0.9j, 0.2),  # i inside
        ("exp(x)", 1e6, 1.0),  # overflow
    ],
)
def test_no_bound_where_a_singularity_may_be_inside(text: str, centre: complex, radius: float) -> None:
    value = run(parse(text), Disc(np.array([centre], dtype=complex), np.array([radius])))
    assert np.isinf(value.radius).all()


def test_running_error_bounds_the_rounding() -> None:
    # Cancellation: the computed value has about 6 digits left, and the radius says so.
    x = np.linspace(0.5, 1.5, 101) * 1e-5
    value = run(parse("(1 - cos(x))/x**2"), discs.exact(x))
    with mpmath.workdps(40):
        truth = [(1 - mpmath.cos(mpmath.mpf(t))) / mpmath.mpf(t) ** 2 for t in x]
        error = np.array([float(abs(t - mpmath.mpf(c))) for t, c in zip(truth, value.centre, strict=True)])
    assert (error <= value.radius).all()
    assert error.max() > 1e-8
    assert value.radius.max() < 1e-4


@pytest.mark.parametrize(
    "text",
    ["abs(x)", "min(x, x**2 - 1)", "max(sin(3*x), 0)", "where(x < 0.3, x, 5)", "sign(x)", "sqrt(abs(x))"],
)
def test_ranges_of_branches_contain_samples(text: str) -> None:
    left = np.linspace(-2, 2, 40)
    pieces = discs.interval(left[:-1], left[1:])
    value = run(parse(text), pieces)
    inside = left[:-1, np.newaxis] + np.diff(left)[:, np.newaxis] * np.linspace(0, 1, 33)
    numpy_form = {
        "abs(x)": np.abs(inside),
        "min(x, x**2 - 1)": np.minimum(inside, inside**2 - 1),
        "max(sin(3*x), 0)": np.maximum(np.sin(3 * inside), 0),
        "where(x < 0.3, x, 5)": np.where(inside < 0.3, inside, 5),
        "sign(x)": np.sign(inside),
        "sqrt(abs(x))": np.sqrt(np.abs(inside)),
    }[text]
    assert (discs.low(value)[:, np.newaxis] <= numpy_form).all()
    assert (numpy_form <= discs.high(value)[:, np.newaxis]).all()
    assert (value.radius < 6).all()


@pytest.mark.parametrize("ring", range(len(RHO)))
def test_discs_cover_the_filled_upper_half_ellipse(ring: int) -> None:
    rng = np.random.default_rng(ring)
    w = rng.uniform(1, RHO[ring], 20_000) * np.exp(1j * np.pi * rng.random(20_000))
    t = (w + 1 / w) / 2
    all_discs = cover()
    used = all_discs.ring <= ring
    nearest = np.abs(t[:, np.newaxis] - all_discs.centre[used]) - all_discs.radius[used]
    assert (nearest.min(axis=1) < 0).all()


@pytest.mark.parametrize("degree", [6, 12, 20])
def test_truncation_bounds_chebyshev_interpolation(degree: int) -> None:
    # 1/(t - 1.2): the pole fixes rho = 1.2 + sqrt(0.44); the error of interpolation is classical.
    pole = 1.2
    some = cover()
    distance = np.abs(some.centre - pole) - some.radius
    bounds = np.where(distance > 0, 1 / np.maximum(distance, 1e-300), np.inf)[np.newaxis]
    bound = truncation(bounds, degree)[0]
    nodes = np.cos(np.pi * (np.arange(degree + 1) + 0.5) / (degree + 1))
    series = np.polynomial.chebyshev.chebfit(nodes, 1 / (nodes - pole), degree)
    t = np.linspace(-1, 1, 2001)
    error = np.abs(np.polynomial.chebyshev.chebval(t, series) - 1 / (t - pole)).max()
    assert error <= bound
    assert np.isfinite(bound)
