"""Projection against closed forms: exactness, orders of convergence, lumps, interfaces, norms."""

import itertools
import math

import numpy as np
import pytest
from scipy.special import j0, j1, y0, y1

from modewright.pieces import Pieces
from modewright.record import Record
from modewright_service.core.quadrature import gauss_legendre
from modewright_service.core.transforms import (
    CellMesh,
    PointMesh,
    lump_values,
    plan_projection,
    project_expression,
    reconstruct,
)
from tests.core.handmade import (
    annulus,
    annulus_zeros,
    contact,
    logarithmic_sines,
    point_mass,
    record_of,
    sines,
    tip_mass,
)
from tests.core.test_interpolants import averages

RECORDS = [sines, annulus, logarithmic_sines, tip_mass, contact, point_mass]
N = np.arange(1, 13)


def two_sided(record: Record, size: int) -> np.ndarray:
    """A mesh with both limits at every inner layer edge."""
    edges = record.layer_edges
    return np.concatenate([np.linspace(a, b, size) for a, b in itertools.pairwise(edges)])


def modes_on(record: Record, x: np.ndarray) -> np.ndarray:
    """(N, G): the modes at the points, the left limit at the first of two equal points."""
    pieces = Pieces(record)
    first = np.append(np.diff(x) == 0, False)
    return np.where(first, pieces.evaluate(x, side="left"), pieces.evaluate(x))


@pytest.mark.parametrize("make", RECORDS)
def test_modes_are_orthonormal_through_the_transform(make: object) -> None:
    """Each mode, sampled finely, projects to a unit vector; masses and two-sided points included."""
    record: Record = make()  # type: ignore[operator]
    x = two_sided(record, 1501)
    found = plan_projection(record, PointMesh(x)).apply(modes_on(record, x))
    # The spline's error is some (k h)^4/384, k = 40, h = 1/1500.
    np.testing.assert_allclose(found.coefficients, np.eye(record.count), rtol=0, atol=1e-8)
    np.testing.assert_allclose(found.captured, 1.0, rtol=0, atol=1e-10)


@pytest.mark.parametrize("make", RECORDS)
def test_captured_and_residual_add_up(make: object) -> None:
    """Parseval's identity, the two shares integrated separately."""
    record: Record = make()  # type: ignore[operator]
    x = two_sided(record, 200)
    values = np.random.default_rng(5).standard_normal((7, 4)) @ [x**0, x, np.cos(3 * x), np.exp(-x)]
    found = plan_projection(record, PointMesh(x)).apply(values)
    assert found.captured is not None
    assert found.norm2 is not None
    assert found.residual2 is not None
    np.testing.assert_allclose(found.captured + found.residual2 / found.norm2, 1.0, rtol=0, atol=1e-12)
    assert found.residual2.min() > 0


def test_a_resolved_field_leaves_nothing() -> None:
    """Values of cubics on one layer: the spline is exact, and so is a basis that holds cubics."""
    # The four Legendre polynomials, orthonormal on (0, 1), as an artificial basis of one element.
    record = record_of(
        lambda x: np.array(
            [np.polynomial.legendre.legval(2 * x - 1, np.eye(4)[k]) * math.sqrt(2 * k + 1) for k in range(4)]
        ),
        np.arange(1.0, 5.0),
        np.array([0, 0.4, 1.0]),
        degree=3,
    )
    x = np.sort(np.random.default_rng(2).random(25))
    x[[0, -1]] = 0, 1
    values = np.array([x**3 - x, 1 + 0 * x, 2 - x**2])
    found = plan_projection(record, PointMesh(x)).apply(values)
    exact = [  # integrals of x^3 - x, 1 and 2 - x^2 against the shifted Legendre polynomials
        [-1 / 4, -1 / 60 * math.sqrt(3), 1 / 20 * math.sqrt(5), 1 / 140 * math.sqrt(7)],
        [1, 0, 0, 0],
        [5 / 3, -1 / 6 * math.sqrt(3), -1 / 30 * math.sqrt(5), 0],
    ]
    np.testing.assert_allclose(found.coefficients, exact, rtol=0, atol=1e-14)
    assert found.residual2 is not None
    # Rounding of values of order one, squared.
    assert found.residual2.max() < 1e-28


def test_linear_values_are_exact() -> None:
    """int_0^1 x sqrt(2) sin(n pi x) dx = -sqrt(2) (-1)^n/(n pi), from two points."""
    found = plan_projection(sines(), PointMesh(np.array([0.0, 1.0]))).apply([0.0, 1.0])
    np.testing.assert_allclose(
        found.coefficients, -np.sqrt(2) * (-1.0) ** N / (N * np.pi), rtol=0, atol=1e-15
    )
    assert found.norm2 == pytest.approx(1 / 3, abs=1e-15)


def test_steps_are_exact() -> None:
    """A field of 1 on the right of 1/2 alone; coefficients from its elementary integral."""
    record = contact()
    x = np.array([0, 0.25, 0.5, 0.5, 0.75, 1])
    found = plan_projection(record, PointMesh(x)).apply([0.0, 0, 0, 1, 1, 1])
    t, weight = gauss_legendre(60)
    exact = Pieces(record).evaluate(0.75 + 0.25 * t) @ weight * 0.25
    np.testing.assert_allclose(found.coefficients, exact, rtol=0, atol=1e-14)
    assert found.norm2 == pytest.approx(0.5, abs=1e-15)


def cosine_coefficients() -> np.ndarray:
    """int_0^1 e^{-x} sqrt(2) sin(k x) dx = sqrt(2) k (1 - e^{-1} cos k)/(1 + k^2), k = n pi."""
    k = N * np.pi
    return np.asarray(np.sqrt(2) * k * (1 - np.exp(-1) * np.cos(k)) / (1 + k**2))


@pytest.mark.parametrize(("interpolation", "order"), [("linear", 2), ("cubic", 4)], ids=["linear", "cubic"])
def test_order_of_point_values(interpolation: str, order: int) -> None:
    sizes = np.array([20, 40, 80])
    errors = []
    for size in sizes:
        x = np.linspace(0, 1, size + 1) ** 1.2
        plan = plan_projection(sines(), PointMesh(x, interpolation))  # type: ignore[arg-type]
        errors.append(np.abs(plan.apply(np.exp(-x)).coefficients - cosine_coefficients()).max())
    rates = np.log2(np.array(errors[:-1]) / errors[1:])
    assert rates.min() > order - 0.15
    assert errors[-1] < {2: 5e-5, 4: 5e-9}[order]


@pytest.mark.parametrize(
    ("reconstruction", "order", "last"), [("constant", 2, 3e-3), ("conservative", 3, 2e-6)]
)
def test_order_of_cell_averages(reconstruction: str, order: int, last: float) -> None:
    """Constants err by h^2 in a coefficient (by h in the field); the conservative curve by h^3 and better."""
    errors = []
    for size in (20, 40, 80):
        edges = np.linspace(0, 1, size + 1) ** 1.2
        values = -np.diff(np.exp(-edges)) / np.diff(edges)
        plan = plan_projection(sines(), CellMesh(edges, reconstruction=reconstruction))  # type: ignore[arg-type]
        errors.append(np.abs(plan.apply(values).coefficients - cosine_coefficients()).max())
    rates = np.log2(np.array(errors[:-1]) / errors[1:])
    assert rates.min() > order - 0.15
    assert errors[-1] < last


def radial_case() -> tuple[Record, np.ndarray, np.ndarray]:
    """The annulus, the zeros k, and int_1^2 (a + b ln r) phi_n r dr for a = 1, b = -1/ln 2.

    With L phi = -(r phi')' = k^2 r phi and L f = 0: k^2 int f phi r dr = [r (f' phi - f phi')], and
    f(1) = 1, f(2) = 0, phi(1) = phi(2) = 0 leave f(1) phi'(1).
    """
    record = annulus()
    k = annulus_zeros(8)
    slope = Pieces(record).evaluate([1.0], "derivative")[:, 0]
    first = -k * (j1(k) * y0(k) - y1(k) * j0(k))
    # The slope from SciPy's functions, the amplitude from the norm; not from the record.
    end = -k * (j1(2 * k) * y0(k) - y1(2 * k) * j0(k))
    amplitude = np.sqrt(2 / ((4 * end**2 - first**2) / k**2))
    np.testing.assert_allclose(slope, amplitude * np.abs(first), rtol=1e-9)
    return record, k, np.asarray(amplitude * np.abs(first) / k**2)


def profile(r: np.ndarray) -> np.ndarray:
    """The steady temperature of a hollow cylinder, 1 at r = 1 and 0 at r = 2."""
    return 1 - np.log(r) / np.log(2)


def test_cylindrical_averages_against_bessel_functions() -> None:
    record, _, exact = radial_case()
    edges = np.geomspace(1, 2, 121)
    values = averages(profile, edges, "cylindrical")
    found = plan_projection(record, CellMesh(edges, "cylindrical")).apply(values)  # type: ignore[arg-type]
    np.testing.assert_allclose(found.coefficients, exact, rtol=0, atol=1e-8)


def test_the_measure_matters() -> None:
    """Averages with r dr taken for averages with dx are wrong by what the two averages differ by."""
    record, _, exact = radial_case()
    edges = np.linspace(1, 2, 9)
    values = averages(profile, edges, "cylindrical")
    right, wrong = (
        np.abs(plan_projection(record, CellMesh(edges, measure)).apply(values).coefficients - exact).max()  # type: ignore[arg-type]
        for measure in ("cylindrical", "length")
    )
    assert right < 2e-4
    assert wrong > 5 * right


def test_weight_averages() -> None:
    """w = x^-2 on (1, e); f = sqrt(x) projects to int_0^1 sqrt(2) sin(n pi s) ds, s = ln x."""
    record = logarithmic_sines()
    edges = np.linspace(1, np.e, 200)
    values = averages(np.sqrt, edges, "weight")
    found = plan_projection(record, CellMesh(edges, "weight")).apply(values)  # type: ignore[arg-type]
    n = N[:10]
    exact = np.sqrt(2) * (1 - (-1.0) ** n) / (n * np.pi)
    np.testing.assert_allclose(found.coefficients, exact, rtol=0, atol=1e-7)


# ---- lumps and masses ----


def test_a_lump_is_part_of_the_inner_product() -> None:
    """f = 1 with the mass at rest at the value 3: c = int phi dx + 3 m phi(1)."""
    record = tip_mass(mass=0.7)
    found = plan_projection(record, PointMesh(np.array([0.0, 1.0]))).apply([1.0, 1.0], right_lump=3.0)
    k = np.sqrt(record.eigenvalues)
    amplitude = record.right_lump / np.sin(k)
    exact = amplitude * (1 - np.cos(k)) / k + 3 * 0.7 * record.right_lump
    np.testing.assert_allclose(found.coefficients, exact, rtol=0, atol=1e-14)
    assert found.norm2 == pytest.approx(1 + 0.7 * 9, abs=1e-14)
    assert not found.right_lump_extrapolated


def test_a_lump_without_a_value_takes_the_end_value_and_says_so() -> None:
    record = tip_mass()
    x = (np.arange(40) + 0.5) / 40
    plan = plan_projection(record, PointMesh(x))
    assumed, given = plan.apply(x**3), plan.apply(x**3, right_lump=1.0)
    np.testing.assert_allclose(assumed.coefficients, given.coefficients, rtol=0, atol=1e-14)
    assert (assumed.right_lump_extrapolated, given.right_lump_extrapolated) == (True, False)
    assert not assumed.left_lump_extrapolated


def test_one_lump_value_for_each_field() -> None:
    record = tip_mass()
    x = np.linspace(0, 1, 30)
    plan = plan_projection(record, PointMesh(x))
    values, lumps = np.random.default_rng(1).standard_normal((2, 5, 30)), np.arange(10.0).reshape(2, 5)
    together = plan.apply(values, right_lump=lumps)
    alone = plan.apply(values[1, 2], right_lump=lumps[1, 2])
    np.testing.assert_allclose(together.coefficients[1, 2], alone.coefficients, rtol=0, atol=1e-14)


def test_lumps_come_back() -> None:
    record = tip_mass()
    coefficients = np.eye(10)[:3]
    left, right = lump_values(record, coefficients)
    assert left is None
    np.testing.assert_array_equal(right, record.right_lump[:3])


def test_a_point_mass_is_part_of_the_inner_product() -> None:
    """f = 1: c = int phi dx + m phi(1/2)."""
    record = point_mass(mass=0.4)
    found = plan_projection(record, PointMesh(np.array([0.0, 1.0]))).apply([1.0, 1.0])
    t, weight = gauss_legendre(60)
    pieces = Pieces(record)
    halves = [pieces.evaluate(c + 0.25 * t) @ weight * 0.25 for c in (0.25, 0.75)]
    exact = halves[0] + halves[1] + 0.4 * pieces.evaluate([0.5])[:, 0]
    np.testing.assert_allclose(found.coefficients, exact, rtol=0, atol=1e-14)
    assert found.norm2 == pytest.approx(1.4, abs=1e-14)


# ---- batches ----


def test_batches_of_any_shape_and_type() -> None:
    x = np.linspace(0, 1, 50)
    plan = plan_projection(sines(), PointMesh(x))
    rng = np.random.default_rng(9)
    real = rng.standard_normal((300, 2, 50))
    found = plan.apply(real)
    assert found.coefficients.shape == (300, 2, 12)
    assert found.captured is not None
    assert found.captured.shape == (300, 2)
    one = plan.apply(real[299, 1])
    np.testing.assert_allclose(found.coefficients[299, 1], one.coefficients, rtol=0, atol=1e-14)
    single = plan.apply(real.astype(np.float32))
    assert single.coefficients.dtype == np.float64
    np.testing.assert_array_equal(
        single.coefficients, plan.apply(real.astype(np.float32).astype(np.float64)).coefficients
    )
    whole = plan.apply(np.arange(50))
    np.testing.assert_array_equal(whole.coefficients, plan.apply(np.arange(50.0)).coefficients)
    assert plan.apply(np.zeros((0, 50))).coefficients.shape == (0, 12)


def test_complex_fields_are_two_real_ones() -> None:
    x = np.linspace(0, 1, 50)
    plan = plan_projection(tip_mass(), PointMesh(x))
    real, imaginary = np.random.default_rng(9).standard_normal((2, 3, 50))
    found = plan.apply(real + 1j * imaginary, right_lump=1j)
    parts = plan.apply(real, right_lump=0.0), plan.apply(imaginary, right_lump=1.0)
    np.testing.assert_allclose(
        found.coefficients, parts[0].coefficients + 1j * parts[1].coefficients, atol=1e-14
    )
    assert found.residual2 is not None
    assert parts[0].residual2 is not None
    assert parts[1].residual2 is not None
    np.testing.assert_allclose(found.residual2, parts[0].residual2 + parts[1].residual2, rtol=1e-12)


def test_details_are_optional() -> None:
    found = plan_projection(sines(), PointMesh(np.linspace(0, 1, 9))).apply(np.ones(9), details=False)
    assert found.captured is found.norm2 is found.residual2 is None


def test_nothing_is_wholly_captured() -> None:
    found = plan_projection(sines(), PointMesh(np.linspace(0, 1, 9))).apply(np.zeros(9))
    assert (found.captured, found.norm2, found.residual2) == (1.0, 0.0, 0.0)


def test_the_poll_stops_the_work() -> None:
    class StopError(Exception):
        pass

    def stop() -> None:
        raise StopError

    mesh = PointMesh(np.linspace(0, 1, 9))
    with pytest.raises(StopError):
        plan_projection(sines(), mesh, poll=stop)
    with pytest.raises(StopError):
        plan_projection(sines(), mesh).apply(np.ones(9), poll=stop)


# ---- expressions ----


def test_expressions_against_closed_forms() -> None:
    found = project_expression(sines(), "exp(-x)")
    np.testing.assert_allclose(found.coefficients, cosine_coefficients(), rtol=0, atol=1e-13)
    assert found.norm2 == pytest.approx((1 - math.exp(-2)) / 2, rel=1e-13)


@pytest.mark.parametrize("factor", ["1e-30", "1e-9", "1e12"])
def test_the_size_of_an_expression_does_not_matter(factor: str) -> None:
    found = project_expression(sines(), f"{factor}*exp(-x)").coefficients / float(factor)
    np.testing.assert_allclose(found, cosine_coefficients(), rtol=0, atol=1e-13)


def test_a_jump_and_a_kink_in_an_expression() -> None:
    """int_a^1 sqrt(2) sin(k x) dx, and |x - a| twice by parts."""
    a, k = 0.3, N * np.pi
    step = project_expression(sines(), "step(x - 0.3)").coefficients
    exact = np.sqrt(2) * (np.cos(k * a) - np.cos(k)) / k
    np.testing.assert_allclose(step, exact, rtol=0, atol=1e-12)
    kink = project_expression(sines(), "abs(x - 0.3)").coefficients
    exact = np.sqrt(2) * ((a - (1 - a) * np.cos(k)) / k - 2 * np.sin(k * a) / k**2)
    np.testing.assert_allclose(kink, exact, rtol=0, atol=1e-12)


def test_a_narrow_bump_is_seen() -> None:
    """exp(-((x - c)/d)^2), d = 0.001: sqrt(2 pi) d sin(k c) exp(-(k d)^2/4), the tails beyond 0 and 1 nil."""
    d, c, k = 1e-3, 0.377, N * np.pi
    found = project_expression(sines(), "exp(-((x - 0.377)/0.001)**2)").coefficients
    exact = np.sqrt(2 * np.pi) * d * np.sin(k * c) * np.exp(-((k * d) ** 2) / 4)
    np.testing.assert_allclose(found, exact, rtol=0, atol=1e-12 * np.abs(exact).max())


def test_an_expression_under_a_weight() -> None:
    """w = x^-2 on (1, e), f = sqrt(x): as in the test of averages."""
    n = N[:10]
    found = project_expression(logarithmic_sines(), "sqrt(x)").coefficients
    np.testing.assert_allclose(found, np.sqrt(2) * (1 - (-1.0) ** n) / (n * np.pi), rtol=0, atol=1e-12)


def test_an_expression_with_a_lump() -> None:
    record = tip_mass()
    k = np.sqrt(record.eigenvalues)
    integral = record.right_lump / np.sin(k) * (np.sin(k) / k**2 - np.cos(k) / k)
    free = project_expression(record, "x")
    np.testing.assert_allclose(free.coefficients, integral + 0.7 * record.right_lump, rtol=0, atol=1e-13)
    assert free.right_lump_extrapolated
    held = project_expression(record, "x", right_lump=0.0)
    np.testing.assert_allclose(held.coefficients, integral, rtol=0, atol=1e-13)


# ---- there and back ----


@pytest.mark.parametrize("make", RECORDS)
def test_coefficients_survive_the_round_trip(make: object) -> None:
    record: Record = make()  # type: ignore[operator]
    x = two_sided(record, 1001)
    c = np.random.default_rng(4).standard_normal((3, record.count))
    values = c @ modes_on(record, x)
    lumps = lump_values(record, c)
    back = plan_projection(record, PointMesh(x)).apply(values, right_lump=lumps[1])
    np.testing.assert_allclose(back.coefficients, c, rtol=0, atol=1e-6)


def test_the_flux_of_a_known_field() -> None:
    """A parabola that vanishes at both walls: its series converges with 1/k^3, its flux with 1/k^2.

    Partial sums of 8 modes away from the walls against the parabola's own derivative.
    """
    record = annulus()
    found = project_expression(record, "(x - 1)*(2 - x)")
    r = np.linspace(1.2, 1.8, 50)
    value = reconstruct(record, found.coefficients, r)
    flux = reconstruct(record, found.coefficients, r, "flux")
    density = reconstruct(record, found.coefficients, r, "flux-density")
    np.testing.assert_allclose(value, (r - 1) * (2 - r), rtol=0, atol=1e-3)
    np.testing.assert_allclose(density, 2 * r - 3, rtol=0, atol=3e-2)
    np.testing.assert_allclose(flux, -r * density, rtol=1e-13, atol=1e-14)
