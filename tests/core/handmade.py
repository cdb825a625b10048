"""Records written down from closed forms, so that transforms are tested without the solver.

Every function expands known eigenfunctions in Legendre series on elements; degree and number of elements are
such that the expansion is exact to rounding.
"""

from collections.abc import Callable
from typing import Any

import numpy as np
from scipy.optimize import brentq
from scipy.special import j0, j1, y0, y1

from modewright.pieces import legendre_vandermonde
from modewright.record import EndInfo, Record
from modewright_service.core.quadrature import gauss_legendre

Function = Callable[[Any], Any]

DIRICHLET, NEUMANN = EndInfo("dirichlet"), EndInfo("neumann")


def legendre_series(function: Function, edges: np.ndarray, degree: int) -> np.ndarray:
    """(..., E, degree+1) coefficients of a function of x (P,) -> (..., P) on each element."""
    t, weight = gauss_legendre(degree + 20)
    x = edges[:-1, None] + (edges[1:] - edges[:-1])[:, None] * (1 + t) / 2
    values = function(x.ravel()).reshape(-1, *x.shape)
    factor = (2 * np.arange(degree + 1) + 1) / 2
    return np.einsum("nep,kp,p,k->nek", values, legendre_vandermonde(t, degree), weight, factor)


def record_of(
    modes: Function,
    eigenvalues: np.ndarray,
    edges: np.ndarray,
    *,
    w: Function = np.ones_like,
    p: Function = np.ones_like,
    degree: int = 30,
    weight_degree: int = 0,
    left: EndInfo = DIRICHLET,
    right: EndInfo = DIRICHLET,
    layer: Any = None,
    **parts: Any,
) -> Record:
    """The record of modes x (P,) -> (N, P)."""
    edges = np.asarray(edges, dtype=float)
    elements, count = edges.size - 1, eigenvalues.size
    layer = np.zeros(elements, dtype=int) if layer is None else np.asarray(layer)
    index = np.arange(count)
    return Record(
        algorithm_version="1",
        problem_digest="d" * 64,
        basis_key="b" * 64,
        rtol=1e-9,
        eigenvalues=eigenvalues,
        lower=eigenvalues * (1 - 1e-12),
        upper=eigenvalues * (1 + 1e-12),
        zeros=index,
        groups=index,
        confirmed=np.ones(count, dtype=np.uint8),
        scale=9.9,
        layer_names=tuple(f"layer {i}" for i in range(int(layer.max()) + 1)),
        edges=edges,
        layer=layer,
        degrees=np.full(elements, degree),
        coefficients=legendre_series(modes, edges, degree).reshape(count, -1),
        p=legendre_series(p, edges, weight_degree)[0],
        q=np.zeros((elements, 1)),
        w=legendre_series(w, edges, weight_degree)[0],
        left=left,
        right=right,
        **{"geometry": 0, **parts},
    )


def sines(count: int = 12, elements: int = 4, **parts: Any) -> Record:
    """-u'' = lambda u on (0, 1), u = 0 at both ends: sqrt(2) sin((n+1) pi x)."""
    k = np.pi * np.arange(1, count + 1)
    edges = np.linspace(0, 1, elements + 1) ** 1.2
    return record_of(lambda x: np.sqrt(2) * np.sin(np.outer(k, x)), k**2, edges, **parts)


def annulus(count: int = 8) -> Record:
    """The cylinder 1 < r < 2 between cold walls: J0(k r) Y0(k) - Y0(k r) J0(k), weight r."""
    k = annulus_zeros(count)[:, None]

    def raw(r: Any) -> Any:
        return j0(k * r) * y0(k) - y0(k * r) * j0(k)

    # int r C0(k r)^2 dr = r^2/2 (C0^2 + C1^2) (NIST DLMF 10.22.5), C0 vanishing at both ends.
    first = j1(k * np.array([1.0, 2.0])) * y0(k) - y1(k * np.array([1.0, 2.0])) * j0(k)
    norm = np.sqrt((4 * first[:, 1] ** 2 - first[:, 0] ** 2) / 2)
    # Positive beside r = 1: the derivative there is -k C1(k).
    sign = -np.sign(first[:, 0])
    return record_of(
        lambda r: (sign / norm)[:, None] * raw(r),
        k[:, 0] ** 2,
        np.linspace(1, 2, 5),
        w=lambda r: r,
        p=lambda r: r,
        weight_degree=1,
        geometry=1,
    )


def annulus_zeros(count: int) -> np.ndarray:
    """The first zeros k of J0(k) Y0(2 k) - Y0(k) J0(2 k)."""

    def cross(k: float) -> float:
        return float(j0(k) * y0(2 * k) - y0(k) * j0(2 * k))

    return np.array(
        [brentq(cross, np.pi * n - 0.3, np.pi * n + 0.3, xtol=1e-15) for n in range(1, count + 1)]
    )


def logarithmic_sines(count: int = 10) -> Record:
    """-u'' = lambda u / x^2 on (1, e): sqrt(2 x) sin((n+1) pi ln x), lambda = (n+1)^2 pi^2 + 1/4."""
    k = np.pi * np.arange(1, count + 1)
    return record_of(
        lambda x: np.sqrt(2 * x) * np.sin(np.outer(k, np.log(x))),
        k**2 + 0.25,
        np.linspace(1, np.e, 6),
        w=lambda x: x**-2.0,
        weight_degree=22,
    )


def tip_mass(mass: float = 0.7, count: int = 10) -> Record:
    """A rod held at 0 with a mass at 1, u'(1) = lambda m u(1): sin(k x), cot k = m k."""
    k = np.array(
        [
            brentq(lambda k: np.cos(k) - mass * k * np.sin(k), np.pi * n + 1e-9, np.pi * (n + 1), xtol=1e-15)
            for n in range(count)
        ]
    )
    amplitude = 1 / np.sqrt(0.5 - np.sin(2 * k) / (4 * k) + mass * np.sin(k) ** 2)
    return record_of(
        lambda x: amplitude[:, None] * np.sin(np.outer(k, x)),
        k**2,
        np.linspace(0, 1, 4),
        right=EndInfo("lump", mass=mass),
        right_lump=amplitude * np.sin(k),
    )


def contact(resistance: float = 0.5, pairs: int = 5) -> Record:
    """Two slabs with free ends and a resistance between them at 1/2.

    Even modes cos(2 pi j x); odd ones cos(k x) and -cos(k (1 - x)) with cot(k/2) = R k/2.
    """
    half = np.array(
        [
            brentq(
                lambda h: np.cos(h) - resistance * h * np.sin(h),
                np.pi * j + 1e-9,
                np.pi * (j + 1),
                xtol=1e-15,
            )
            for j in range(pairs)
        ]
    )
    odd, even = 2 * half, 2 * np.pi * np.arange(pairs)
    k = np.sort(np.concatenate((odd, even)))
    is_odd = np.isin(k, odd)
    squares = np.where(k > 0, 0.5 + np.sin(k) / np.where(k > 0, 2 * k, 1.0), 1.0)
    amplitude = 1 / np.sqrt(np.where(is_odd, squares, np.where(k > 0, 0.5, 1.0)))

    def modes(x: Any) -> Any:
        right = np.where(is_odd[:, None], -np.cos(np.outer(k, 1 - x)), np.cos(np.outer(k, x)))
        return amplitude[:, None] * np.where(x < 0.5, np.cos(np.outer(k, x)), right)

    return record_of(
        modes,
        k**2,
        np.array([0.0, 0.2, 0.5, 0.75, 1.0]),
        left=NEUMANN,
        right=NEUMANN,
        layer=[0, 0, 1, 1],
        joints=np.array([[0.5, resistance, 0.0, 0.0]]),
    )


def point_mass(mass: float = 0.4, count: int = 6) -> Record:
    """A string held at both ends, a mass in the middle: 2 cos(k/2) = m k sin(k/2), or k/2 multiples of pi."""
    half = np.array(
        [
            brentq(lambda h: np.cos(h) - mass * h * np.sin(h), np.pi * j + 1e-9, np.pi * (j + 1), xtol=1e-15)
            for j in range(count)
        ]
    )
    moved, still = 2 * half, 2 * np.pi * np.arange(1, count + 1)
    k = np.sort(np.concatenate((moved, still)))[:count]
    is_still = np.isin(k, still)
    squares = 0.5 - np.sin(k) / (2 * k) + mass * np.sin(k / 2) ** 2
    amplitude = 1 / np.sqrt(np.where(is_still, 0.5, squares))

    def modes(x: Any) -> Any:
        mirrored = np.where(is_still[:, None], -1.0, 1.0) * np.sin(np.outer(k, 1 - x))
        return amplitude[:, None] * np.where(x < 0.5, np.sin(np.outer(k, x)), mirrored)

    return record_of(modes, k**2, np.array([0.0, 0.25, 0.5, 1.0]), joints=np.array([[0.5, 0.0, 0.0, mass]]))
