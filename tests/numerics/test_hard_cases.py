"""Cases that break a solver which is right on ordinary ones: close pairs, massless layers, bound ends,
deep wells.

Each has a closed form, or the tests' dense solver on elements fine enough for it. The bounds must
contain, the error stays below the promise at the default tolerance, the index is the number of zeros.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.optimize import brentq

import modewright
from tests.numerics.dense_reference import solve_dense
from tests.reference.functions import dense_from_document
from tests.reference.own_checks import count_zeros, orthonormality_defect

FIXED, FREE = {"kind": "dirichlet"}, {"kind": "neumann"}


def _layer(start: float, end: float, **coefficients: float | str) -> dict[str, Any]:
    return {"start": start, "end": end, **coefficients}


def _solve(service: modewright.Service, document: dict[str, Any], modes: int) -> modewright.Basis:
    return service.solve(modewright.Problem.from_dict(document), modes=modes)


def _assert_right(basis: modewright.Basis, exact: NDArray[np.float64], granted: float) -> None:
    """granted: error of ``exact`` itself, relative to s_n."""
    size = np.maximum(np.abs(exact), basis.scale)
    assert float(np.max(np.abs(basis.eigenvalues - exact) / size)) <= 1e-9
    assert np.all(basis.lower <= exact + granted * size)
    assert np.all(exact <= basis.upper + granted * size)


@pytest.mark.parametrize("resistance", [1e2, 1e5, 1e7, 1e8, 1e9, 1e10, 1e12])
def test_close_pairs(resistance: float, service: modewright.Service) -> None:
    """Two equal halves joined by a large resistance: pairs (2 pi n)^2 and k^2 with k tan(k/2) = 2/R.

    By symmetry: even modes do not feel the joint, in odd ones -2 u = R u' on its left side. The pairs
    are about 8/R apart, down to less than rounding, and neither member may be lost or stand midway.
    """
    document = {
        "layers": [_layer(0.0, 0.5), _layer(0.5, 1.0)],
        "left": FREE,
        "right": FREE,
        "interfaces": [{"x": 0.5, "resistance": resistance}],
    }
    exact = []
    for n in range(6):
        even = 2.0 * np.pi * n
        distance = brentq(
            lambda d, even=even: (even + d) * np.tan(d / 2.0) - 2.0 / resistance,
            0.0,
            3.0,
            xtol=1e-30,
            rtol=1e-15,
        )
        exact += [even**2, (even + distance) ** 2]
    basis = _solve(service, document, 12)
    _assert_right(basis, np.array(exact), granted=1e-15)
    assert orthonormality_defect(basis.record(), [np.ones_like, np.ones_like]) <= 1e-10


@pytest.mark.parametrize("potential", [0.0, 2.0, -2.0, 500.0])
@pytest.mark.parametrize("place", ["left", "middle"])
def test_massless_layers(place: str, potential: float, service: modewright.Service) -> None:
    """w = 0 on a layer with a potential in it; negative ones weak enough for a lowest eigenvalue."""
    hollow = {"w": 0.0, "q": potential}
    if place == "left":
        layers = [_layer(0.0, 0.3, **hollow), _layer(0.3, 1.0)]
    else:
        layers = [_layer(0.0, 0.3), _layer(0.3, 0.6, **hollow), _layer(0.6, 1.0, w=2.0)]
    document = {"layers": layers, "left": FREE, "right": FIXED}
    basis = _solve(service, document, 12)
    dense = dense_from_document(document)
    _assert_right(basis, solve_dense(dense, 12, degree=44).eigenvalues, granted=1e-13)
    np.testing.assert_array_equal(basis.zeros, np.arange(12))
    assert orthonormality_defect(basis.record(), [layer.w for layer in dense.layers]) <= 1e-10


@pytest.mark.parametrize("modes", [1, 2, 6])
def test_ends_that_bind(modes: int, service: modewright.Service) -> None:
    """u' = h u at the right and -u' = g u at the left bind exp(h x) and exp(-g x): -h^2 and -g^2.

    With h = 80, g = 50 on (0, 1) their overlap changes that by exp(-100) only; the others are the k^2 with
    (k^2 - g h) sin k + (g + h) k cos k = 0 (separation of variables).
    """
    left = {"kind": "robin", "alpha": 50.0, "beta": 1.0}
    right = {"kind": "robin", "alpha": -80.0, "beta": 1.0}
    basis = _solve(service, {"layers": [_layer(0.0, 1.0)], "left": left, "right": right}, modes)

    def characteristic(k: float) -> float:
        return float((k**2 - 4000.0) * np.sin(k) + 130.0 * k * np.cos(k))

    grid = np.linspace(1e-3, 40.0, 40_001)
    values = np.array([characteristic(k) for k in grid])
    at = np.flatnonzero(values[1:] * values[:-1] < 0.0)
    roots = [brentq(characteristic, grid[i], grid[i + 1], xtol=1e-14, rtol=1e-14) ** 2 for i in at]
    exact = np.array([-6400.0, -2500.0, *roots])[:modes]
    _assert_right(basis, exact, granted=1e-13)
    np.testing.assert_array_equal(basis.zeros, np.arange(modes))


@pytest.mark.parametrize("modes", [1, 12])
def test_a_deep_well_in_a_wide_domain(modes: int, service: modewright.Service) -> None:
    """The modes decay to nothing long before the ends; what is left there has no sign."""
    document = {"layers": [_layer(-10.0, 10.0, q="-1e4*exp(-x**2)")], "left": FIXED, "right": FIXED}
    basis = _solve(service, document, modes)
    exact = solve_dense(dense_from_document(document, pieces=48), modes, degree=24).eigenvalues
    _assert_right(basis, exact, granted=1e-13)
    np.testing.assert_array_equal(basis.zeros, np.arange(modes))
    np.testing.assert_array_equal(count_zeros(basis.record()), np.arange(modes))


def test_a_contrast_of_seventeen_decades(service: modewright.Service) -> None:
    """p w = 1: in t = integral of dx/p, 0 < t < T, it is -u'' = lambda u, so lambda = (n pi / T)^2."""
    document = {
        "layers": [_layer(0.0, 1.0, p="exp(20*x)", w="exp(-20*x)")],
        "left": FREE,
        "right": FREE,
    }
    exact = (np.arange(12) * np.pi * 20.0 / -np.expm1(-20.0)) ** 2
    basis = _solve(service, document, 12)
    _assert_right(basis, exact, granted=1e-15)
    np.testing.assert_array_equal(basis.zeros, np.arange(12))


@pytest.mark.parametrize("shift", [1e2, -1e3, 1e4, -1e6, 1e8, -1e12])
def test_a_shifted_potential(shift: float, service: modewright.Service) -> None:
    """q = c moves every eigenvalue by c and leaves zeros and relative widths alone."""
    document = {"layers": [_layer(0.0, 1.0, q=shift)], "left": FIXED, "right": FIXED}
    basis = _solve(service, document, 12)
    exact = (np.arange(1, 13) * np.pi) ** 2 + shift
    _assert_right(basis, exact, granted=1e-15)
    size = np.maximum(np.abs(exact), basis.scale)
    assert float(np.max((basis.upper - basis.lower) / size)) <= 1e-9
    np.testing.assert_array_equal(basis.zeros, np.arange(12))


@pytest.mark.parametrize("sign", [pytest.param(1.0, marks=pytest.mark.long), -1.0])
def test_a_large_potential_that_varies(sign: float, service: modewright.Service) -> None:
    """An offset of 1e5 under a varying potential and weight, on layers one of which is massless."""
    layers = [
        _layer(0.0, 0.5, q=f"{sign}*1e5*(1+0.1*x)", w="1+x"),
        _layer(0.5, 0.6, q=3.0 * sign, w=0.0),
        _layer(0.6, 1.0, p=3.0, q=f"{sign}*1e5*exp(-x/10)", w=0.7),
    ]
    document = {"layers": layers, "left": FIXED, "right": {"kind": "film", "film": 2.0}}
    basis = _solve(service, document, 12)
    dense = solve_dense(dense_from_document(document, pieces=24), 12, degree=30)
    _assert_right(basis, dense.eigenvalues, granted=1e-13)
    pieces = basis.pieces()
    assert pieces.coefficient("q", 0.25) == pytest.approx(sign * 1e5 * 1.025, rel=1e-14)
