"""Gauss quadrature on parts of elements, with as many points as the exact integral needs and no more.

On a part of an element the integrands of a projection are polynomials, so that Gauss quadrature of half
their degree is exact. On a part that is small beside its element far fewer points reach rounding accuracy,
since a mode of degree 30 hardly bends there. The number is taken from the error bound for analytic integrands
(Trefethen, Approximation Theory and Approximation Practice, Theorem 19.3; constant quoted from memory,
and tested against higher orders): n points on [-1, 1] err by no more than
(64/15) M r^(-2n) / (1 - r^(-2)), M the largest modulus within the ellipse of foci -1, 1 and semi-axes
summing to r. A polynomial of degree d that is bounded by 1 on the element is bounded there by R^d, R the
parameter of an ellipse about the element that holds the part's own (Bernstein's inequality).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

__all__ = ["Nodes", "gauss_counts", "gauss_legendre", "place_nodes"]

# Relative error admitted in the square of a residual: a residual of 1e-13 of the field is still integrated.
_TOLERANCE: Final = 1e-26
_RADII: Final = np.geomspace(1.3, 1e6, 40)[:, np.newaxis]
# Parts looked at together: 40 radii of doubles then take 10 MB.
_CHUNK: Final = 32_768


@lru_cache(maxsize=256)
def gauss_legendre(n: int) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Nodes and weights of n points on [-1, 1], read-only; exact to degree 2 n - 1.

    Newton's method on P_n and the weights 2/((1 - t^2) P_n'(t)^2) (NIST DLMF 3.5.V and 18.9) in extended
    precision: near the ends the weights are that sensitive to the nodes that in double precision they lose
    three digits at n = 50 (NumPy's and SciPy's rules are off by 1e-12 there).
    """
    nodes = np.polynomial.legendre.leggauss(n)[0].astype(np.longdouble)
    for _ in range(2):
        value, slope = _legendre_with_slope(nodes, n)
        nodes -= value / slope
    _, slope = _legendre_with_slope(nodes, n)
    weights = 2 / ((1 - nodes) * (1 + nodes) * slope**2)
    rounded = nodes.astype(np.float64), weights.astype(np.float64)
    for array in rounded:
        array.flags.writeable = False
    return rounded


def _legendre_with_slope(t: NDArray[Any], n: int) -> tuple[NDArray[Any], NDArray[Any]]:
    """P_n and P_n' inside (-1, 1), in the precision of t."""
    before, value = np.zeros_like(t), np.ones_like(t)
    for k in range(n):
        before, value = value, ((2 * k + 1) * t * value - k * before) / (k + 1)
    return value, n * (before - t * value) / ((1 - t) * (1 + t))


def gauss_counts(
    lower: NDArray[np.float64],
    upper: NDArray[np.float64],
    mode_degree: NDArray[np.int64],
    weight_degree: NDArray[np.int64],
    field_degree: int,
) -> NDArray[np.int64]:
    """(P,): points that integrate (f - phi)^2 w to rounding on the parts [lower, upper] of [-1, 1].

    phi and w are polynomials of mode_degree and weight_degree on the whole element, f one of field_degree
    on the part. Never more than the exact number max(field, mode) + floor(weight/2) + 1.
    """
    out = np.empty(lower.size, dtype=np.int64)
    for start in range(0, lower.size, _CHUNK):
        chunk = slice(start, start + _CHUNK)
        out[chunk] = _counts(
            lower[chunk], upper[chunk], mode_degree[chunk], weight_degree[chunk], field_degree
        )
    return out


def _counts(
    lower: NDArray[np.float64],
    upper: NDArray[np.float64],
    mode_degree: NDArray[np.int64],
    weight_degree: NDArray[np.int64],
    field_degree: int,
) -> NDArray[np.int64]:
    exact = np.maximum(mode_degree, field_degree) + weight_degree // 2 + 1
    half = (upper - lower) / 2.0
    centre = np.abs(upper + lower) / 2.0
    # The part's ellipse lies in a box; |z-1| + |z+1| is convex, so that its corner bounds the outer ellipse.
    right = centre + half * (_RADII + 1.0 / _RADII) / 2.0
    height = half * (_RADII - 1.0 / _RADII) / 2.0
    total = (np.hypot(right - 1.0, height) + np.hypot(right + 1.0, height)) / 2.0
    outer = np.log(total + np.sqrt(np.maximum(total * total - 1.0, 0.0)))
    radius = np.log(_RADII)
    growth = np.maximum(2.0 * mode_degree * outer, 2.0 * field_degree * radius) + weight_degree * outer
    constant = np.log(64.0 / 15.0 / (1.0 - _RADII**-2.0) / _TOLERANCE)
    needed = np.ceil(np.min((growth + constant) / (2.0 * radius), axis=0)).astype(np.int64)
    return np.asarray(np.minimum(exact, np.maximum(needed, 2)), dtype=np.int64)


@dataclass(frozen=True)
class Nodes:
    """Quadrature points ordered by part: `part` (X,), `s` (X,) in [-1, 1] on the part, `weight` for ds."""

    part: NDArray[np.intp]
    s: NDArray[np.float64]
    weight: NDArray[np.float64]


def place_nodes(counts: NDArray[np.int64]) -> Nodes:
    """`counts[i]` Gauss points on part i, for all parts."""
    total = int(counts.sum())
    part = np.repeat(np.arange(counts.size), counts)
    s, weight = np.empty(total), np.empty(total)
    starts = np.cumsum(counts) - counts
    for n in np.unique(counts).tolist():
        nodes, weights = gauss_legendre(n)
        where = starts[counts == n][:, np.newaxis] + np.arange(n)
        s[where], weight[where] = nodes, weights
    return Nodes(part, s, weight)
