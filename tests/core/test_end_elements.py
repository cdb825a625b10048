"""End elements: quadrature and matrices by themselves, then whole problems with singular ends."""

from __future__ import annotations

import mpmath
import numpy as np
import pytest
import scipy.special
from numpy.typing import NDArray

from modewright.pieces import Pieces
from modewright.record import Record
from modewright_service.core.end_comparison import EndPiece
from modewright_service.core.end_elements import EndMap, end_reference, jacobi_rule
from modewright_service.core.errors import CoreError, InvalidProblem, Unsupported
from modewright_service.core.problem import (
    Bounded,
    Dirichlet,
    End,
    Expression,
    Film,
    Geometry,
    Layer,
    Neumann,
    Problem,
)
from modewright_service.core.solve import SolveOptions, solve
from modewright_service.core.transforms.grid import build_grid

Array = NDArray[np.float64]


@pytest.mark.parametrize("power", [-0.9, -0.5, 0.0, 0.37, 3.0, 20.0])
def test_rule_integrates_powers(power: float) -> None:
    """int_0^1 t^b t^j dt = 1 / (b + j + 1), exact to degree 2 n - 1; a few units of rounding."""
    t, weight = jacobi_rule(20, power)
    degrees = np.arange(40)
    found = (weight[:, None] * t[:, None] ** degrees).sum(axis=0)
    np.testing.assert_allclose(found, 1.0 / (power + degrees + 1.0), rtol=4e-15)


@pytest.mark.parametrize("power", [-0.5, 0.0, 2.5])
def test_running_integral(power: float) -> None:
    """t^-b int_0^t x^b x^3 dx = t^4 / (b + 4)."""
    r = end_reference(16, 20, power, 0, 0, True)
    np.testing.assert_allclose(r.running @ r.t**3, r.t**4 / (power + 4.0), rtol=1e-14, atol=1e-16)
    mirrored = end_reference(16, 20, power, 0, 0, False)
    np.testing.assert_allclose(mirrored.running, -r.running, rtol=0.0, atol=0.0)


@pytest.mark.parametrize("order", [0, 1, 2, 5, 20])
def test_bessel_zeros_on_one_element(order: int) -> None:
    """-(x u')' + (n^2/x) u = lambda x u, bounded at 0, u(1) = 0: lambda = j_{n,k}^2 (NIST DLMF 10.21).

    Zeros by mpmath. One element of degree 24 resolves five of them to rounding.
    """
    end = EndMap(0.5, float(order), 1.0, 1.0)
    assert end.power == order
    assert end.steps == 1
    r = end_reference(24, 28, end.power, end.w_steps, end.flat, True)
    stiff = r.slopes.T @ (r.slopes * (r.weights * r.t / end.m)[:, None])
    mass = r.values.T @ (r.values * (r.weights * end.m)[:, None])
    factor = np.linalg.cholesky(stiff[2:, 2:])
    pencil = np.linalg.solve(factor, np.linalg.solve(factor, mass[2:, 2:]).T)
    found = 1.0 / np.linalg.eigvalsh(pencil)[::-1][:5]
    exact = np.array([float(mpmath.besseljzero(order, k) ** 2) for k in range(1, 6)])
    np.testing.assert_allclose(found, exact, rtol=1e-14)


def _problem(
    p: str,
    q: str,
    w: str,
    left: End | None = None,
    right: End | None = None,
    domain: tuple[float, float] = (0.0, 1.0),
) -> Problem:
    layer = Layer("body", *domain, Expression(p), Expression(q), Expression(w))
    return Problem((layer,), left or Bounded(), right or Dirichlet())


def _relative(record: Record, exact: Array) -> Array:
    size = np.maximum(np.abs(exact), record.scale)
    result: Array = np.abs(record.eigenvalues - exact) / size
    return result


def _bessel_zeros(order: float, count: int) -> list[mpmath.mpf]:
    """Positive zeros of J_order, order > -1: mpmath's own, or by sign changes where the order is negative."""
    with mpmath.workdps(30):
        if order >= 0.0:
            return [mpmath.besseljzero(order, k) for k in range(1, count + 1)]
        found: list[mpmath.mpf] = []
        x = mpmath.mpf("0.05")
        while len(found) < count:
            if mpmath.besselj(order, x) * mpmath.besselj(order, x + mpmath.mpf("0.3")) < 0:
                found.append(
                    mpmath.findroot(lambda z: mpmath.besselj(order, z), (x, x + 0.3), solver="anderson")
                )
            x += mpmath.mpf("0.3")
        return found


_POWERS = [
    *[(1.0, 1.0, nu * nu, False) for nu in (0.0, 0.01, 0.1, 0.5, 1.0, 3.7, 20.0)],
    *[(0.0, 0.0, q0, False) for q0 in (-0.25, -0.2499, 0.75, 6.0)],
    *[(alpha, 0.0, 0.0, False) for alpha in (0.5, 0.75, 1.0, 1.25, 1.5)],
    *[(1.0, gamma, 0.0, False) for gamma in (-0.75, 0.0, 3.0)],
    *[(0.5, gamma, 0.0, True) for gamma in (-0.5, 0.0, 2.0)],
    (0.75, -0.75, 0.0, False),
    (1.5, 0.5, -0.05, False),
    (2.5, 1.5, 0.0, False),
]


@pytest.mark.parametrize(("alpha", "gamma", "q0", "natural"), _POWERS)
def test_pure_powers(alpha: float, gamma: float, q0: float, natural: bool) -> None:
    """-(x^a u')' + q0 x^(a-2) u = lambda x^g u, u(1) = 0: u = x^((1-a)/2) J_nu(z x^(kappa/2)).

    lambda = (kappa z / 2)^2, kappa = 2 + g - a, nu = sqrt((1-a)^2 + 4 q0) / kappa (NIST DLMF 10.13.4), -nu
    where p u' = 0 at a regular end. Zeros by mpmath. Error 1e-12 promised, 1e-14 reached; bounds contain
    the truth.
    """
    if natural:
        left: End = Neumann()
    else:
        left = Dirichlet() if alpha < 1.0 and q0 == 0.0 else Bounded()
    record = solve(_problem(f"x**{alpha}", f"{q0!r}*x**({alpha - 2.0})", f"x**({gamma})", left), 12, 1e-12)
    with mpmath.workdps(30):
        kappa = 2 + mpmath.mpf(gamma) - mpmath.mpf(alpha)
        nu = mpmath.sqrt((1 - mpmath.mpf(alpha)) ** 2 + 4 * mpmath.mpf(q0)) / kappa
        exact = [(kappa * z / 2) ** 2 for z in _bessel_zeros(float(-nu if natural else nu), 12)]
        lower, upper = ([mpmath.mpf(float(v)) for v in side] for side in (record.lower, record.upper))
        assert all(a <= value <= b for a, value, b in zip(lower, exact, upper, strict=True))
    values = np.array([float(value) for value in exact])
    assert float(_relative(record, values).max()) <= 1e-14
    assert float(((record.upper - record.lower) / np.maximum(values, record.scale)).max()) <= 1e-12
    np.testing.assert_array_equal(record.zeros, np.arange(12))
    assert record.confirmed.all()
    grid = build_grid(record, record.edges[[0, -1]], 0)
    modes = grid.pieces.at(grid.element, grid.t)
    assert float(np.abs((modes * grid.weight) @ modes.T - np.eye(12)).max()) <= 1e-13


@pytest.mark.parametrize("degree", [4, 8])
@pytest.mark.parametrize(("alpha", "gamma", "q0"), [(1.0, 1.0, 0.3), (1.5, 0.0, 0.0)])
def test_starved(alpha: float, gamma: float, q0: float, degree: int) -> None:
    """Elements far too coarse, no refinement: the bounds are wide, the truth (as above) is inside."""
    options = SolveOptions(degree=degree, phase=8.0, passes=0)
    problem = _problem(f"x**{alpha}", f"{q0!r}*x**({alpha - 2.0})", f"x**({gamma})")
    record = solve(problem, 10, 1e-9, options=options)
    kappa = 2.0 + gamma - alpha
    zeros = _bessel_zeros(float(np.sqrt((1.0 - alpha) ** 2 + 4.0 * q0)) / kappa, 10)
    exact = np.array([float((kappa * z / 2) ** 2) for z in zeros])
    assert bool(np.all(record.lower <= exact) and np.all(exact <= record.upper))
    error = record.eigenvalues - exact
    seen = error > 1e-11 * exact
    assert seen.any()
    assert bool(np.all((record.upper - record.lower)[seen] <= 50.0 * error[seen]))


@pytest.mark.parametrize("k", [1.6, 1.25, 2.5, 0.8])
@pytest.mark.parametrize("condition", [Dirichlet(), Neumann()])
def test_images_of_regular_problems(k: float, condition: End) -> None:
    """x = t^k turns -(P u_t)_t + Q u = lambda W u into p = k t^(k-1) P, q = Q t^(1-k) / k, w = W t^(1-k) / k.

    The eigenvalues are the same; those of the regular problem come from plain elements and certified
    coefficients. Corrections are powers 1/k and 2/k of x: hardly ever whole steps of the others.
    """
    plain = solve(_problem("1+t**2".replace("t", "x"), "5*x", "2-x", condition), 10, 1e-12)
    t, factor = f"x**{1.0 / k!r}", f"x**{(k - 1.0) / k!r}"
    image = _problem(
        f"{k}*{factor}*(1+({t})**2)", f"5*{t}/({k}*{factor})", f"(2-{t})/({k}*{factor})", condition
    )
    record = solve(image, 10, 1e-12)
    assert float(_relative(record, plain.eigenvalues).max()) <= 1e-12
    assert bool(np.all(record.lower <= plain.upper) and np.all(plain.lower <= record.upper))
    np.testing.assert_array_equal(record.zeros, np.arange(10))
    points = np.linspace(0.0, 1.0, 41)
    for quantity in ("value", "flux"):
        found = Pieces(record).evaluate(points**k, quantity=quantity)
        expected = Pieces(plain).evaluate(points, quantity=quantity)
        assert float(np.abs(found - expected).max()) <= 1e-9 * float(np.abs(expected).max())


@pytest.mark.parametrize("l", [0, 1, 3])
def test_coulomb_levels(l: int) -> None:  # noqa: E741
    """-u'' + (l(l+1)/x^2 - 2/x) u: -1/(n+l+1)^2 (NIST DLMF 18.39), the box wall at 250 being out of reach."""
    record = solve(_problem("1", f"{l * (l + 1)}/x**2-2/x", "1", domain=(0.0, 250.0)), 3, 1e-9)
    exact = -1.0 / (np.arange(3) + l + 1.0) ** 2
    assert float(np.abs(record.eigenvalues - exact).max()) <= 1e-13
    assert bool(np.all(record.lower <= exact) and np.all(exact <= record.upper))


@pytest.mark.parametrize("order", [0.0, 0.5, 1.0, 3.3, 20.0])
def test_bessel_modes_pointwise(order: float) -> None:
    """phi = sqrt(2) J_nu(z x) / |J_{nu+1}(z)| (NIST DLMF 10.22.37): values and fluxes, at the ends too."""
    problem = _problem("x", f"{order * order!r}/x", "x")
    record = Record.from_bytes(solve(problem, 8, 1e-9).to_bytes())
    x = np.concatenate([[0.0, 1e-12, 1e-6, 1e-3], np.linspace(0.01, 1.0, 50)])
    z = np.sqrt(record.eigenvalues)[:, np.newaxis]
    size = np.sqrt(2.0) / np.abs(scipy.special.jv(order + 1.0, z))
    pieces = Pieces(record)
    expected = size * scipy.special.jv(order, z * x)
    np.testing.assert_allclose(pieces.evaluate(x), expected, rtol=0.0, atol=2e-12)
    flux = size * z * x[1:] * scipy.special.jvp(order, z * x[1:])
    np.testing.assert_allclose(pieces.evaluate(x[1:], quantity="flux"), flux, rtol=0.0, atol=2e-11)
    assert not pieces.evaluate([0.0], quantity="flux").any()
    slopes = pieces.evaluate([0.0], quantity="derivative")[:, 0]
    if order == 0.5:
        assert bool(np.all(slopes == np.inf))
    else:
        expected = size[:, 0] * z[:, 0] / 2.0 if order == 1.0 else 0.0
        np.testing.assert_allclose(slopes, expected, rtol=1e-12, atol=1e-12)
    # relative accuracy close to the end too, where J_20 is 1e-70; P_j^(2,20) is 1e14 there for j = 30, which
    # costs half of the digits
    near = pieces.evaluate([1e-3])[:, 0] / (size[:, 0] * scipy.special.jv(order, z[:, 0] * 1e-3))
    np.testing.assert_allclose(near, 1.0, rtol=1e-7 if order > 10.0 else 1e-10)
    q = pieces.coefficient("q", x[1:])
    np.testing.assert_allclose(q, order * order / x[1:], rtol=1e-13, atol=1e-15)
    np.testing.assert_allclose(pieces.coefficient("p", x), x, rtol=1e-14, atol=1e-16)


def test_mirrored() -> None:
    """x -> -x: the same eigenvalues, modes mirrored; signs are fixed at the left end."""
    there = solve(_problem("x**1.5*(2-x)", "0.3/sqrt(x)", "1+x"), 8, 1e-9)
    back = solve(
        _problem("(-x)**1.5*(2+x)", "0.3/sqrt(-x)", "1-x", Dirichlet(), Bounded(), (-1.0, 0.0)), 8, 1e-9
    )
    np.testing.assert_allclose(back.eigenvalues, there.eigenvalues, rtol=1e-13)
    x = np.linspace(0.0, 1.0, 31)
    first, second = Pieces(there).evaluate(x), Pieces(back).evaluate(-x)
    np.testing.assert_allclose(np.abs(first), np.abs(second), rtol=0.0, atol=1e-10)
    assert bool(np.all(Pieces(there).evaluate([1e-4]) > 0.0))
    assert bool(np.all(Pieces(back).evaluate([-1.0], quantity="flux") > 0.0))


def test_an_offset_of_q_moves_the_eigenvalues_alone() -> None:
    """q + c w: every eigenvalue moves by c; what the bounds widen by is rounding of c."""
    low = solve(_problem("1", "-2/x", "1", domain=(0.0, 20.0)), 6, 1e-9)
    high = solve(_problem("1", "1e6-2/x", "1", domain=(0.0, 20.0)), 6, 1e-9)
    np.testing.assert_allclose(high.eigenvalues - 1e6, low.eigenvalues, rtol=0.0, atol=1e-9)
    assert bool(np.all(high.upper - high.lower <= low.upper - low.lower + 1e-11 * 1e6))
    x = np.array([1e-3, 0.5, 3.0])
    # q x is what is kept: its rounding is divided by 1e-3
    np.testing.assert_allclose(Pieces(high).coefficient("q", x), 1e6 - 2.0 / x, rtol=1e-11)


def test_centre_of_a_ball() -> None:
    """Heat flux density -p u' at r = 0 is zero, though r^2 divides it; modes sin(n pi r)/r for p = w = 1."""
    layer = Layer("ball", 0.0, 1.0)
    record = solve(Problem((layer,), Bounded(), Dirichlet(), geometry=Geometry.SPHERICAL), 6, 1e-9)
    n = np.arange(1, 7)
    assert float(_relative(record, (n * np.pi) ** 2).max()) <= 1e-14
    x = np.array([0.0, 1e-9, 0.3])
    density = Pieces(record).evaluate(x, quantity="flux-density")
    np.testing.assert_allclose(density[:, 0], 0.0, atol=1e-12)
    theta = n * np.pi * 0.3
    expected = -np.sqrt(2.0) * (theta * np.cos(theta) - np.sin(theta)) / 0.09
    np.testing.assert_allclose(density[:, 2], expected, rtol=1e-11)
    np.testing.assert_allclose(Pieces(record).evaluate([0.0])[:, 0], np.sqrt(2.0) * n * np.pi, rtol=1e-12)


@pytest.mark.parametrize("power", [-0.5, 0.0, 0.3, 5.0, 40.0])
def test_comparison_on_an_end_element(power: float) -> None:
    """Flux over value, and zeros, of 0F1(b + 1; -nu t), which is t^(-b/2) J_b(2 sqrt(nu t)); by SciPy."""
    piece = EndPiece(power, 1.0, 1.0, 0.0, 1.0, 1.0, 0.0)
    nu = np.concatenate([-np.geomspace(1e-3, 1e6, 30), np.linspace(0.01, 400.0, 41)])
    stiffness, zeros = piece.stiffness(nu, 1.0)
    x = 2.0 * np.sqrt(np.abs(nu))
    bessel, sign = (scipy.special.ive, 1.0), (scipy.special.jv, -1.0)
    expected = np.concatenate(
        [
            factor * x[part] / 2.0 * function(power + 1.0, x[part]) / function(power, x[part])
            for (function, factor), part in ((bessel, slice(0, 30)), (sign, slice(30, None)))
        ]
    )
    np.testing.assert_allclose(stiffness, expected, rtol=2e-11)
    points = np.linspace(1e-3, float(x[30:].max()) + 1.0, 100_000)
    values = scipy.special.jv(power, points)
    crossings = points[1:][values[1:] * values[:-1] < 0.0]
    np.testing.assert_array_equal(zeros[30:], np.searchsorted(crossings, x[30:]))
    assert not zeros[:30].any()


@pytest.mark.parametrize(
    ("problem", "kind", "field", "word"),
    [
        (_problem("1+x", "0", "1"), InvalidProblem, "left.kind", "regular"),
        (_problem("sqrt(x)", "0", "1"), InvalidProblem, "left.kind", "regular"),
        (_problem("x", "0", "x", Dirichlet()), InvalidProblem, "left.kind", "singular"),
        (_problem("x", "1/x", "x", Neumann()), InvalidProblem, "left.kind", "singular"),
        (_problem("sqrt(x)", "0", "1", Film(1.0)), Unsupported, "left.kind", "dirichlet and neumann"),
        (_problem("1", "-1/x**2", "1"), Unsupported, "left", "oscillate"),
        (_problem("1", "-1/x**3", "1"), Unsupported, "left", "oscillate"),
        (_problem("1", "1/x**3", "1"), Unsupported, "left", "wall"),
        (_problem("x**2", "0", "1"), Unsupported, "left", "discrete"),
        (_problem("-x*log(x/2)", "0", "1"), Unsupported, "left", "no power"),
        (_problem("exp(-1/x)", "0", "1"), Unsupported, "left", "no power"),
    ],
)
def test_refused(problem: Problem, kind: type[CoreError], field: str, word: str) -> None:
    with pytest.raises(kind) as refused:
        solve(problem, 4, 1e-9)
    assert refused.value.violations[0].field == field
    assert word in refused.value.violations[0].message
