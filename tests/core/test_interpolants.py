"""The fields that samples stand for: splines against SciPy's, averages kept, interfaces respected."""

import numpy as np
import pytest
from scipy.interpolate import CubicSpline

from modewright.record import Record
from modewright_service.core.quadrature import gauss_legendre
from modewright_service.core.transforms import CellMesh, PointMesh
from modewright_service.core.transforms.interpolants import Interpolant, interpolant_of
from tests.core.handmade import annulus, contact, logarithmic_sines, sines

RNG = np.random.default_rng(11)


def evaluate(field: Interpolant, values: np.ndarray, x: np.ndarray, side: str = "right") -> np.ndarray:
    """The field at x."""
    interval = np.clip(np.searchsorted(field.bounds, x, side=side) - 1, 0, field.bounds.size - 2)  # type: ignore[call-overload]
    on_values, on_slopes = field.rows(interval, x)
    columns = values[:, np.newaxis]
    return np.asarray(on_values @ columns + on_slopes @ field.system.solve(columns))[:, 0]


def graded(start: float, stop: float, size: int) -> np.ndarray:
    """An uneven mesh, steps within a factor of 3."""
    steps = RNG.uniform(1, 3, size - 1)
    return start + (stop - start) * np.concatenate(([0], np.cumsum(steps) / steps.sum()))


@pytest.mark.parametrize("size", [4, 5, 40])
def test_points_make_the_not_a_knot_spline(size: int) -> None:
    x, values = graded(0, 1, size), RNG.standard_normal(size)
    field = interpolant_of(sines(), PointMesh(x))
    at = np.linspace(0, 1, 333)
    expected = CubicSpline(x, values, bc_type="not-a-knot")(at)
    np.testing.assert_allclose(evaluate(field, values, at), expected, rtol=0, atol=1e-12)


@pytest.mark.parametrize("interpolation", ["linear", "cubic"])
def test_few_points_make_lines(interpolation: str) -> None:
    x, values = np.array([0, 0.3, 1]), np.array([1.0, 3.0, 2.0])
    field = interpolant_of(sines(), PointMesh(x, interpolation))  # type: ignore[arg-type]
    at = np.linspace(0, 1, 50)
    np.testing.assert_allclose(evaluate(field, values, at), np.interp(at, x, values), rtol=0, atol=1e-15)


def test_cell_centres_are_continued_to_the_ends() -> None:
    x = (np.arange(20) + 0.5) / 20
    at = np.linspace(0, 1, 101)
    values = 1 + at[0] + x - 2 * x**2 + x**3
    field = interpolant_of(sines(), PointMesh(x))
    np.testing.assert_allclose(evaluate(field, values, at), 1 + at - 2 * at**2 + at**3, rtol=0, atol=1e-13)


@pytest.mark.parametrize("double", [False, True])
def test_layers_are_cut_at_an_interface(double: bool) -> None:
    """A cubic on the left of 1/2, another on the right of it, with a jump or with a kink."""
    jump = 0.7 if double else 0.0

    def left(x: np.ndarray) -> np.ndarray:
        return x - 3 * x**3

    def right(x: np.ndarray) -> np.ndarray:
        return left(np.array(0.5)) + jump + 2 * (x - 0.5) ** 2

    halves = graded(0, 0.5, 9), graded(0.5, 1, 7)
    x = np.concatenate((halves[0], halves[1][0 if double else 1 :]))
    values = np.concatenate((left(halves[0]), right(halves[1])[0 if double else 1 :]))
    field = interpolant_of(contact(), PointMesh(x))
    at = np.linspace(0, 0.499, 100)
    np.testing.assert_allclose(evaluate(field, values, at), left(at), rtol=0, atol=1e-14)
    np.testing.assert_allclose(evaluate(field, values, 0.501 + at), right(0.501 + at), rtol=0, atol=1e-14)
    middle = np.array([0.5])
    assert evaluate(field, values, middle, "left")[0] == pytest.approx(float(left(middle)[0]), abs=1e-15)
    assert evaluate(field, values, middle, "right")[0] == pytest.approx(
        float(left(middle)[0]) + jump, abs=1e-15
    )


def test_a_point_next_to_an_interface_by_rounding_is_on_it() -> None:
    near = np.nextafter(0.5, 0)
    x = np.array([0, 0.2, 0.4, near, 0.5, 0.8, 1.0])
    values = np.array([0, 0, 0, 0, 1.0, 1.0, 1.0])
    field = interpolant_of(contact(), PointMesh(x))
    at = np.array([0.45, 0.499999, 0.500001, 0.9])
    np.testing.assert_allclose(evaluate(field, values, at), [0, 0, 1, 1], rtol=0, atol=1e-12)


def test_a_layer_with_one_point_is_constant() -> None:
    x = np.array([0, 0.2, 0.4, 0.75])
    field = interpolant_of(contact(), PointMesh(x, "linear"))  # type: ignore[arg-type]
    at = np.array([0.3, 0.51, 0.99])
    np.testing.assert_allclose(evaluate(field, np.array([0, 2, 4, 9.0]), at), [3, 9, 9], rtol=1e-14)


RECORDS = {"length": sines, "cylindrical": annulus, "spherical": annulus, "weight": logarithmic_sines}
DENSITIES = {
    "length": np.ones_like,
    "cylindrical": lambda x: x,
    "spherical": lambda x: x**2,
    "weight": lambda x: x**-2.0,
}


def averages(function: object, edges: np.ndarray, measure: str) -> np.ndarray:
    """Averages over cells with a measure, by Gauss quadrature."""
    t, weight = gauss_legendre(30)
    x = edges[:-1, None] + np.diff(edges)[:, None] * (1 + t) / 2
    density = DENSITIES[measure](x) * weight
    return np.asarray(np.sum(function(x) * density, axis=1) / np.sum(density, axis=1))  # type: ignore[operator]


@pytest.mark.parametrize("reconstruction", ["constant", "conservative"])
@pytest.mark.parametrize("measure", list(RECORDS))
@pytest.mark.parametrize("cells", [1, 2, 3, 30])
def test_averages_are_kept(measure: str, reconstruction: str, cells: int) -> None:
    """Random averages come back from the field, whatever the measure."""
    record: Record = RECORDS[measure]()
    edges = graded(record.edges[0], record.edges[-1], cells + 1)
    values = RNG.standard_normal(cells)
    field = interpolant_of(record, CellMesh(edges, measure, reconstruction))  # type: ignore[arg-type]

    def inside(x: np.ndarray) -> np.ndarray:
        return evaluate(field, values, x.ravel()).reshape(x.shape)

    # Random values: slopes reach a few times their size.
    np.testing.assert_allclose(averages(inside, edges, measure), values, rtol=0, atol=2e-13)


@pytest.mark.parametrize("measure", list(RECORDS))
def test_a_constant_is_kept_everywhere(measure: str) -> None:
    record: Record = RECORDS[measure]()
    edges = graded(record.edges[0], record.edges[-1], 13)
    field = interpolant_of(record, CellMesh(edges, measure))  # type: ignore[arg-type]
    at = np.linspace(edges[0], edges[-1], 100)
    np.testing.assert_allclose(evaluate(field, np.full(12, 4.5), at), 4.5, rtol=1e-12)


def test_cells_are_cut_at_an_interface() -> None:
    edges = np.concatenate((np.linspace(0, 0.5, 8), np.linspace(0.5, 1, 6)[1:]))
    middle = (edges[:-1] + edges[1:]) / 2
    field = interpolant_of(contact(), CellMesh(edges))
    at = np.linspace(0, 1, 97)
    # Averages of a line are its values in the middle; the two lines jump at 1/2.
    values = np.where(middle < 0.5, middle, 3 - middle)
    np.testing.assert_allclose(
        evaluate(field, values, at), np.where(at < 0.5, at, 3 - at), rtol=0, atol=1e-13
    )


def test_a_cell_across_an_interface_is_constant() -> None:
    edges = np.array([0, 0.1, 0.2, 0.3, 0.45, 0.55, 0.7, 0.85, 1.0])
    middle = (edges[:-1] + edges[1:]) / 2
    field = interpolant_of(contact(), CellMesh(edges))
    at = np.array([0.05, 0.44, 0.46, 0.5, 0.54, 0.56, 0.9])
    expected = np.where((at > 0.45) & (at < 0.55), 0.5, at)
    np.testing.assert_allclose(evaluate(field, middle, at), expected, rtol=0, atol=1e-13)


def test_end_weights_are_the_field_at_the_ends() -> None:
    x = graded(0.01, 0.995, 30)
    field = interpolant_of(sines(), PointMesh(x))
    values = RNG.standard_normal(30)
    np.testing.assert_allclose(
        field.end_weights() @ values, evaluate(field, values, np.array([0, 1.0])), rtol=1e-12
    )
