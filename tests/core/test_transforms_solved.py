"""Transforms of bases that the solver made, held against an identity that knows nothing of either.

If L f = 1 in the weak sense, end conditions, contact resistances and lumps included, then
<f, phi_n> lambda_n = <1, phi_n>, since L is symmetric and L phi_n = lambda_n phi_n. f is elementary for
layered walls, so that the identity ties projection, eigenvalues, geometry factors and lumps together.
"""

import numpy as np
import pytest

from modewright.record import Record
from modewright_service.core.problem import Constant, Film, Geometry, Interface, Layer, Lump, Problem
from modewright_service.core.solve import solve
from modewright_service.core.transforms import (
    CellMesh,
    PointMesh,
    lump_values,
    plan_projection,
    project_expression,
    reconstruct,
)
from tests.core.test_interpolants import averages

# Conductivity and heat capacity of two layers of a hollow cylinder, 1 < r < 1.5 < 2.
K, C = (2.0, 0.3), (1.5, 4.0)
CONTACT, FILM = 0.4, 1.3
LUMP = Lump(mass=0.8, film=0.05, resistance=0.6)


@pytest.fixture(scope="module")
def pipe() -> Record:
    """The pipe with a lump behind a resistance inside, a contact resistance, and a film outside."""
    layers = (
        Layer("steel", 1.0, 1.5, p=Constant(K[0]), w=Constant(C[0])),
        Layer("foam", 1.5, 2.0, p=Constant(K[1]), w=Constant(C[1])),
    )
    problem = Problem(
        layers, LUMP, Film(FILM), (Interface(1.5, resistance=CONTACT),), geometry=Geometry.CYLINDRICAL
    )
    return solve(problem, 24, 1e-12)


def steady() -> tuple[np.ndarray, float]:
    """f with a source of C in the layers and of the mass in the lump; f_i = -C r^2/(4 K) + A_i ln r + B_i.

    Returns (A_1, B_1, A_2, B_2) and the value of the lump. Balances per unit area of the faces:
    lump: film T - K f'(1) = mass, T - f(1) = -R K f'(1); contact: flux continuous, f jumps by R K f';
    outside: -K f'(2) = film f(2).
    """

    def slope(layer: int, r: float) -> tuple[np.ndarray, float]:
        # K f' as a row in the unknowns, and its known part.
        row = np.zeros(5)
        row[2 * layer] = K[layer] / r
        return row, -C[layer] * r / 2

    def value(layer: int, r: float) -> tuple[np.ndarray, float]:
        row = np.zeros(5)
        row[2 * layer], row[2 * layer + 1] = np.log(r), 1
        return row, -C[layer] * r**2 / (4 * K[layer])

    lump = np.array([0, 0, 0, 0, 1.0]), 0.0
    balances = [
        ((LUMP.film, lump), (-1.0, slope(0, 1.0)), LUMP.mass),
        ((1.0, lump), (-1.0, value(0, 1.0)), (LUMP.resistance, slope(0, 1.0)), 0.0),
        ((1.0, slope(0, 1.5)), (-1.0, slope(1, 1.5)), 0.0),
        ((1.0, value(1, 1.5)), (-1.0, value(0, 1.5)), (-CONTACT, slope(0, 1.5)), 0.0),
        ((1.0, slope(1, 2.0)), (FILM, value(1, 2.0)), 0.0),
    ]
    matrix = np.array([sum(factor * row for factor, (row, _) in terms) for *terms, _ in balances])
    right = [total - sum(factor * known for factor, (_, known) in terms) for *terms, total in balances]
    found = np.linalg.solve(matrix, np.array(right))
    return found[:4], float(found[4])


def field(r: np.ndarray) -> np.ndarray:
    """f, the second layer from 1.5 on."""
    a1, b1, a2, b2 = steady()[0]
    first = -C[0] * r**2 / (4 * K[0]) + a1 * np.log(r) + b1
    return np.where(r < 1.5, first, -C[1] * r**2 / (4 * K[1]) + a2 * np.log(r) + b2)


def expression() -> str:
    """f as text."""
    parts = [
        f"({-c / (4 * k)!r})*x**2 + ({float(a)!r})*log(x) + ({float(b)!r})"
        for k, c, a, b in zip(K, C, steady()[0][0::2], steady()[0][1::2], strict=True)
    ]
    return f"where(x < 1.5, {parts[0]}, {parts[1]})"


def wanted(pipe: Record) -> np.ndarray:
    """<1, phi_n>/lambda_n."""
    return np.asarray(project_expression(pipe, "1", left_lump=1.0).coefficients / pipe.eigenvalues)


def test_the_identity_for_an_expression(pipe: Record) -> None:
    found = project_expression(pipe, expression(), left_lump=steady()[1])
    exact = wanted(pipe)
    np.testing.assert_allclose(found.coefficients, exact, rtol=0, atol=1e-11 * np.abs(exact).max())


def test_the_identity_for_points_and_cells(pipe: Record) -> None:
    halves = np.linspace(1, 1.5, 401), np.linspace(1.5, 2, 301)
    x = np.concatenate(halves)
    values = np.concatenate((field(np.append(halves[0][:-1], 1.5 - 1e-15)), field(halves[1])))
    points = plan_projection(pipe, PointMesh(x)).apply(values, left_lump=steady()[1])
    exact = wanted(pipe)
    size = np.abs(exact).max()
    np.testing.assert_allclose(points.coefficients, exact, rtol=0, atol=1e-9 * size)
    edges = np.unique(x)
    mesh = CellMesh(edges, "cylindrical")  # type: ignore[arg-type]
    cells = plan_projection(pipe, mesh).apply(averages(field, edges, "cylindrical"), left_lump=steady()[1])
    np.testing.assert_allclose(cells.coefficients, exact, rtol=0, atol=1e-8 * size)


def test_the_field_and_its_heat_flux_come_back(pipe: Record) -> None:
    """Coefficients fall as <1, phi_n>/lambda_n: 24 modes leave 1e-3 of the field, a percent of the flux."""
    lump = steady()[1]
    c = project_expression(pipe, expression(), left_lump=lump).coefficients
    r = np.array([1.2, 1.4, 1.7, 1.9])
    np.testing.assert_allclose(reconstruct(pipe, c, r), field(r), rtol=1e-3)
    left, right = lump_values(pipe, c)
    assert right is None
    assert left == pytest.approx(lump, rel=1e-3)
    # Outside, the flux density is the film's: heat balance of the whole pipe.
    density = reconstruct(pipe, c, [2.0], "flux-density")
    assert density[0] == pytest.approx(FILM * float(field(np.array([2.0]))[0]), rel=1e-2)


def test_modes_are_orthonormal_by_the_transform(pipe: Record) -> None:
    """Each mode and its lump's own value, as points on both sides of the contact."""
    x = np.concatenate((np.linspace(1, 1.5, 1201), np.linspace(1.5, 2, 1201)))
    unit = np.eye(pipe.count)
    values = np.concatenate(
        [
            reconstruct(pipe, unit, part, side=side)
            for part, side in zip(np.split(x, 2), ("left", "right"), strict=True)
        ],
        axis=1,
    )
    found = plan_projection(pipe, PointMesh(x)).apply(values, left_lump=pipe.left_lump)
    np.testing.assert_allclose(found.coefficients, unit, rtol=0, atol=1e-8)
    assert found.residual2 is not None
    assert found.residual2.max() < 1e-14
