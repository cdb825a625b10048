"""The element next to an end where coefficients vanish or blow up like powers.

With y the distance from the end and h the element's width, p = (y/h)^alpha P, w = (y/h)^gamma W, and u =
(y/h)^s v, s the exponent of the solution wanted. The form on the element becomes

    int p (y/h)^(2s) v_y^2 dy + int (r - lambda w) (y/h)^(2s) v^2 dy + p(h) (s/h) v(h)^2,
    r = q - s(s-1) p/y^2 - s p'/y = (y/h)^(alpha - 2 + 1/m) R,

(Jacobi's transformation), the last term a spring at the inner node. With y = h t^m, m (2 + gamma - alpha) a
whole number b, and D = alpha + 2s - 1, all three integrals have one weight t^(m D) dt beside polynomials,

    t P / (h m) v_t^2,    h m R v^2,    h m t^(b-1) W v^2,

so that one Gauss-Jacobi rule serves them all, and v is as smooth in t as P, R and W are. The end itself is
natural for v: it carries no unknown of its own. Basis: 1 (the inner node's function) and (1 - t)
P_j^(2, beta)(2t - 1), beta = m D + b - 1, orthogonal under the weight of the mass: with Legendre polynomials
instead, high exponents lose all digits.

At a natural end of a regular problem, s = 0 and D = alpha - 1 < 0, so that polynomials have no finite
energy where m D <= -1. There v_t vanishes like t^f, f = floor(-m D): the common weight is t^(m D + f), the
factors above are divided by t^f, r = (y/h)^(alpha - 2 + (1 + f)/m) R, and the basis is 1 and int_t^1 x^f
Q_j dx with polynomials Q_j orthogonal under the weight of the energy.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import eigvalsh_tridiagonal

from modewright_service.core.legendre import EXTENDED, gauss, projector

__all__ = ["EndMap", "EndReference", "end_reference", "jacobi_rule"]

Array = NDArray[np.float64]


@dataclass(frozen=True)
class EndMap:
    """Exponents of an end element: y = h t^m, u = (y/h)^s v, p ~ y^alpha, w ~ y^gamma."""

    m: float
    s: float
    alpha: float
    gamma: float

    @property
    def flat(self) -> int:
        """f, the order to which v_t vanishes at the end whatever the mode."""
        return int(np.floor(self.m * (1.0 - self.alpha) + 1e-9)) if self.s == 0.0 and self.alpha < 1.0 else 0

    @property
    def power(self) -> float:
        """m D + f, the exponent of the weight that all integrals share; above -1."""
        return self.m * (self.alpha + 2.0 * self.s - 1.0) + self.flat

    @property
    def w_steps(self) -> int:
        """b - 1 - f, the power of t that the mass has beside the common weight."""
        return self.steps - 1 - self.flat

    @property
    def steps(self) -> int:
        """b = m (2 + gamma - alpha), at least 1."""
        return round(self.m * (2.0 + self.gamma - self.alpha))

    @property
    def q_exponent(self) -> float:
        """That of r, of which (y/h)^q_exponent is divided out."""
        return self.alpha - 2.0 + (1.0 + self.flat) / self.m


def _recurrence(count: int, a: Any, b: Any) -> tuple[Any, Any]:
    """Diagonal (count,) and off-diagonal (count,) of t P_j for orthonormal Jacobi polynomials on [0, 1].

    Weight (1-t)^a t^b; NIST DLMF 18.9.2 and 18.3, moved from [-1, 1]. The first off-diagonal entry couples
    P_0 and P_1.
    """
    j = np.arange(count, dtype=EXTENDED)
    a, b = EXTENDED(a), EXTENDED(b)
    total = 2 * j + a + b
    with np.errstate(invalid="ignore", divide="ignore"):
        diagonal = (b * b - a * a) / (total * (total + 2))
    diagonal[0] = (b - a) / (a + b + 2)
    k = j + 1
    total = 2 * k + a + b
    with np.errstate(invalid="ignore", divide="ignore"):
        square = 4 * k * (k + a) * (k + b) * (k + a + b) / (total**2 * (total + 1) * (total - 1))
    # k = 1: the factors k + a + b and total - 1 are one and the same
    square[0] = 4 * (1 + a) * (1 + b) / ((a + b + 2) ** 2 * (a + b + 3))
    return (1 + diagonal) / 2, np.sqrt(square) / 2


def _first(a: float, b: float) -> Any:
    """1 / sqrt(int (1-t)^a t^b dt), a = 0 or 2 (Euler's beta integral)."""
    c = EXTENDED(b)
    return np.sqrt(c + 1) if a == 0.0 else np.sqrt((c + 1) * (c + 2) * (c + 3) / 2)


def _jacobi(t: Any, count: int, a: float, b: float) -> tuple[Any, Any]:
    """Orthonormal polynomials 0..count-1 at t, and their derivatives: (n, count) each, extended precision."""
    diagonal, off = _recurrence(max(count, 2), a, b)
    values, slopes = np.zeros((2, t.size, count), dtype=EXTENDED)
    values[:, 0] = _first(a, b)
    for j in range(count - 1):
        values[:, j + 1] = (t - diagonal[j]) * values[:, j]
        slopes[:, j + 1] = values[:, j] + (t - diagonal[j]) * slopes[:, j]
        if j:
            values[:, j + 1] -= off[j - 1] * values[:, j - 1]
            slopes[:, j + 1] -= off[j - 1] * slopes[:, j - 1]
        values[:, j + 1] /= off[j]
        slopes[:, j + 1] /= off[j]
    return values, slopes


@lru_cache(maxsize=64)
def _rule(count: int, b: float) -> tuple[Any, Any]:
    diagonal, off = _recurrence(count + 1, 0.0, b)
    start = eigvalsh_tridiagonal(diagonal[:count].astype(np.float64), off[: count - 1].astype(np.float64))
    nodes = start.astype(EXTENDED)
    for _ in range(3):
        values, slopes = _jacobi(nodes, count + 1, 0.0, b)
        nodes = nodes - values[:, count] / slopes[:, count]
    values, _ = _jacobi(nodes, count, 0.0, b)
    return nodes, 1 / np.square(values).sum(axis=1)


def jacobi_rule(count: int, b: float) -> tuple[Array, Array]:
    """Nodes and weights with sum f(t) weight = int_0^1 f(t) t^b dt up to degree 2 count - 1; b > -1.

    Newton's method on the orthonormal polynomial and the reciprocals of its kernel, sums of squares, in
    extended precision (Szego, Orthogonal Polynomials, 1939, sec. 3.4).
    """
    nodes, weights = _rule(count, b)
    return nodes.astype(np.float64), weights.astype(np.float64)


@dataclass(frozen=True, eq=False)
class EndReference:
    """Shape functions of an end element: column 0 the left vertex, 1 the right one, then k - 1 bubbles.

    The singular end's vertex is a column of zeros. t, weights: (G,) Gauss-Jacobi points, 0 at the end.
    values, slopes: (G, k+1), slopes along +x per unit of t.
    to_legendre: (k+1, k+1) as in :class:`.elements.Reference`. running: (G, G), a load at the points to the
    flux along +x that it adds up to from the singular end, both with t^(m D) divided out.
    """

    t: Array
    weights: Array
    values: Array
    slopes: Array
    to_legendre: Array
    running: Array


@lru_cache(maxsize=64)
def end_reference(
    degree: int, points: int, power: float, w_steps: int, flat: int, left: bool
) -> EndReference:
    """Shape functions at `points` Gauss-Jacobi points (cached, read-only), exponents as in :class:`EndMap`.

    With flat > 1 the last flat - 1 bubbles, whose degree would pass `degree`, are zero.
    """
    nodes, weights = _rule(points, power)
    vertex = 1 if left else 0
    bubbles = degree - 1 if flat == 0 else degree - flat

    def shapes(t: Any) -> tuple[Any, Any]:
        values, slopes = np.zeros((2, t.size, degree + 1), dtype=EXTENDED)
        values[:, vertex] = 1
        inside = slice(2, 2 + bubbles)
        if flat == 0:
            jacobi, jacobi_slopes = _jacobi(t, bubbles, 2.0, power + w_steps)
            values[:, inside] = (1 - t)[:, None] * jacobi
            slopes[:, inside] = (1 - t)[:, None] * jacobi_slopes - jacobi
        else:
            values[:, inside], slopes[:, inside] = _flat_bubbles(t, bubbles, power + 1.0 + flat, flat)
        return values, slopes

    values, slopes = shapes(nodes)
    tau, project = projector(degree)
    side = 1 if left else -1
    to_legendre = shapes((1 + side * tau) / 2)[0].T @ project
    # zeta(t) = t^-b int_0^t x^b f(x) dx = t int_0^1 x^b f(t x) dx, f by its expansion
    table, _ = _jacobi(nodes, points, 0.0, power)
    analysis = (table * weights[:, None]).T
    products = _jacobi(np.outer(nodes, nodes).ravel(), points, 0.0, power)[0]
    scaled = np.einsum("k,ikn->in", weights, products.reshape(points, points, points))
    running = side * nodes[:, None] * (scaled @ analysis)
    parts = (nodes, weights, values, side * slopes, to_legendre, running)
    return EndReference(*(part.astype(np.float64) for part in parts))


def _flat_bubbles(t: Any, count: int, weight: float, flat: int) -> tuple[Any, Any]:
    """int_t^1 x^f Q_j dx and its derivative at t, Q_j orthonormal under t^weight."""
    u, rule = gauss((count + flat) // 2 + 1)
    u, rule = (1 + u) / 2, rule / 2
    x = t[:, None] + (1 - t)[:, None] * u
    table = _jacobi(x.ravel(), count, 0.0, weight)[0].reshape(t.size, u.size, count)
    values = (1 - t)[:, None] * np.einsum("k,ik,ikj->ij", rule, x**flat, table)
    slopes = -(t**flat)[:, None] * _jacobi(t, count, 0.0, weight)[0]
    return values, slopes
