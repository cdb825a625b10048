"""Stacks of materials in the three geometries against closed forms.

In a uniform layer -(1/r^g) (r^g k u')' = lambda c u is solved by cos and sin (plane), J0 and Y0
(cylindrical), cos/r and sin/r (spherical) of sqrt(lambda c/k) r. The tests carry (u, k u') through the
layers, across contact resistances and from a film or a lump at the inner face to the film at the outer
one, and find the zeros of what is left over by scanning and bisection. Source: Carslaw and Jaeger,
Conduction of Heat in Solids, 2nd ed. 1959, sections 3.9, 7.10 and 9.13, and the composite walls of
Ozisik, Heat Conduction, 2nd ed. 1993, chapter 7 (both from memory).

Tolerance 1e-9 of s_n for the eigenvalues, the promise at the default tolerance.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.optimize import brentq
from scipy.special import j0, j1, y0, y1

import modewright

MODES = 8


@dataclass(frozen=True)
class Wall:
    """thickness, conductivity, heat capacity and contact resistance to the next of each layer; both faces."""

    geometry: str
    start: float
    layers: tuple[tuple[float, float, float, float], ...]
    outer_film: float
    inner_film: float = 0.0
    inner_mass: float = 0.0
    inner_resistance: float = 0.0

    def stack(self) -> modewright.Stack:
        if self.inner_mass > 0.0:
            inner: modewright.Lump | modewright.Film = modewright.Lump(
                self.inner_mass, self.inner_film, self.inner_resistance
            )
        else:
            inner = modewright.Film(self.inner_film)
        layers = [
            modewright.StackLayer(thickness, k, c, name=f"material-{i}", contact_resistance=contact)
            for i, (thickness, k, c, contact) in enumerate(self.layers)
        ]
        outer = modewright.Film(self.outer_film)
        return modewright.Stack.of(
            *layers, inner=inner, outer=outer, geometry=self.geometry, start=self.start
        )

    def left_over(self, eigenvalue: NDArray[np.float64] | float) -> NDArray[np.float64]:
        """k u' + h u at the outer face, for a field that meets every other condition."""
        value = np.asarray(eigenvalue, dtype=float)
        flux = self.inner_film - value * self.inner_mass
        u = 1.0 + self.inner_resistance * flux
        r = self.start
        for thickness, k, c, contact in self.layers:
            u, flux = _carry(self.geometry, r, r + thickness, np.sqrt(value * c / k), k, u, flux)
            u = u + contact * flux
            r += thickness
        return flux + self.outer_film * u

    def roots(self, beyond: float) -> NDArray[np.float64]:
        """All eigenvalues below ``beyond``, by scanning in sqrt(lambda)."""
        grid = np.linspace(1e-5, 1.0, 40001) ** 2 * beyond
        values = self.left_over(grid)
        at = np.flatnonzero(values[1:] * values[:-1] < 0.0)
        found = [
            brentq(lambda v: float(self.left_over(v)), grid[i], grid[i + 1], xtol=1e-25, rtol=1e-14)
            for i in at
        ]
        return np.array(found)

    def scale(self) -> float:
        return float(np.pi / sum(thickness * np.sqrt(c / k) for thickness, k, c, _ in self.layers)) ** 2


def _carry(geometry, a, b, wave, k, u, flux):
    """(u, k u') from r = a to r = b of a uniform layer, as combination of the two solutions."""
    slope = flux / k
    if geometry == "plane":
        cos, sin = np.cos(wave * (b - a)), np.sin(wave * (b - a))
        return u * cos + slope * sin / wave, k * (slope * cos - u * wave * sin)
    if geometry == "spherical":
        # r u obeys the plane equation.
        v, dv = a * u, u + a * slope
        cos, sin = np.cos(wave * (b - a)), np.sin(wave * (b - a))
        v, dv = v * cos + dv * sin / wave, dv * cos - v * wave * sin
        return v / b, k * (dv - v / b) / b
    # Wronskian of J0 and Y0: 2/(pi x) (NIST DLMF 10.5.2).
    factor = np.pi * wave * a / 2.0
    one = factor * (-u * y1(wave * a) - slope / wave * y0(wave * a))
    two = factor * (u * j1(wave * a) + slope / wave * j0(wave * a))
    value = one * j0(wave * b) + two * y0(wave * b)
    return value, -k * wave * (one * j1(wave * b) + two * y1(wave * b))


# Brick, mineral wool and plaster; a steel pipe with foam and a plastic casing around water; a lined vessel.
# Materials of common practice, no source: only the closed form is checked.
WALLS = {
    "plane": Wall(
        "plane", 0.0, ((0.24, 0.8, 1.5e6, 0.0), (0.12, 0.04, 5e4, 0.02), (0.02, 0.6, 1.2e6, 0.0)), 25.0, 8.0
    ),
    "plane with a lump": Wall(
        "plane", -0.3, ((0.1, 1.4, 2e6, 0.005), (0.2, 0.3, 1e6, 0.0)), 12.0, 2.0, 3e5, 0.1
    ),
    "cylindrical": Wall("cylindrical", 0.05, ((0.05, 0.03, 6e4, 0.0),), 6.0, 300.0),
    "pipe with water": Wall(
        "cylindrical",
        0.0545,
        ((0.0036, 50.0, 3.7e6, 1e-3), (0.06, 0.027, 9e4, 0.0), (0.003, 0.4, 2.1e6, 0.0)),
        3.0,
        0.0,
        4.1e6 * 0.0545 / 2.0,
        1.0 / 500.0,
    ),
    "spherical": Wall("spherical", 0.4, ((0.1, 0.5, 1e6, 0.0), (0.3, 2.0, 2e6, 0.0)), 10.0, 50.0),
    "vessel": Wall(
        "spherical", 0.5, ((0.01, 16.0, 4e6, 2e-3), (0.1, 0.04, 6e4, 0.0)), 8.0, 1.0, 4e6 * 0.5 / 3.0
    ),
}


@pytest.mark.parametrize("title", WALLS)
def test_eigenvalues(title: str, service: modewright.Service) -> None:
    wall = WALLS[title]
    basis = service.solve(wall.stack().problem(), modes=MODES)
    expected = wall.roots(beyond=float(basis.eigenvalues[-1]) * 1.01)
    assert len(expected) == MODES
    size = np.maximum(expected, wall.scale())
    assert float(np.max(np.abs(basis.eigenvalues - expected) / size)) <= 1e-9
    # The roots themselves are found to a few units of rounding of the products of layers.
    assert np.all(basis.lower <= expected + 1e-12 * size)
    assert np.all(expected - 1e-12 * size <= basis.upper)


@pytest.mark.parametrize("title", WALLS)
def test_heat_flux_leaves_through_the_outer_film(title: str, service: modewright.Service) -> None:
    """-k u' = h u at the outer face; p u' is -r^g times that."""
    wall = WALLS[title]
    basis = service.solve(wall.stack().problem(), modes=MODES, rtol=1e-12)
    outer = wall.stack().edges[-1]
    one = np.eye(MODES)
    value = basis.reconstruct(one, x=[outer])[:, 0]
    density = basis.reconstruct(one, x=[outer], quantity="flux-density")[:, 0]
    flux = basis.reconstruct(one, x=[outer], quantity="flux")[:, 0]
    power = ("plane", "cylindrical", "spherical").index(wall.geometry)
    # The natural condition is met as the mode's energy error allows: the root of 1e-12.
    np.testing.assert_allclose(density, wall.outer_film * value, rtol=1e-5)
    np.testing.assert_allclose(flux, -density * outer**power, rtol=1e-12)


@pytest.mark.parametrize("title", [t for t, wall in WALLS.items() if wall.geometry != "plane"])
def test_cell_averages_weigh_with_the_area(title: str, service: modewright.Service) -> None:
    """Cell averages in r dr and r^2 dr of a constant and of r^2 project as the expressions do.

    The cumulative integral of r^2 is a polynomial of degree four or five, so its spline on 4 x 120
    cells a layer is exact to some 1e-9 only; the constant's is exact enough for 1e-8 as well.
    """
    wall = WALLS[title]
    basis = service.solve(wall.stack().problem(), modes=MODES)
    power = {"cylindrical": 1, "spherical": 2}[wall.geometry]
    faces = wall.stack().edges
    edges = np.unique(np.concatenate([np.linspace(a, b, 481) for a, b in pairwise(faces)]))

    def average(degree: int) -> NDArray[np.float64]:
        upper, lower = power + 1 + degree, power + 1
        return np.diff(edges**upper) / upper / (np.diff(edges**lower) / lower)

    mass = {"left_lump": 1.0} if wall.inner_mass > 0.0 else {}
    found = basis.project(average(0), edges=edges, measure=wall.geometry, **mass)
    expected = basis.project("1", **mass)
    np.testing.assert_allclose(found, expected, rtol=0.0, atol=1e-8 * float(np.abs(expected).max()))
    mass = {"left_lump": wall.start**2} if wall.inner_mass > 0.0 else {}
    found = basis.project(average(2), edges=edges, measure=wall.geometry, **mass)
    expected = basis.project("x**2", **mass)
    np.testing.assert_allclose(found, expected, rtol=0.0, atol=1e-7 * float(np.abs(expected).max()))
