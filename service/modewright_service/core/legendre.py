"""Legendre series in extended precision: nodes, transforms, re-expansion, exact vanishing at an end.

The platform's long double is used where it has more digits than double (x86-64 and most 64-bit Linux
systems); elsewhere the same code runs in double and the rounding terms, which are computed from the
actual unit roundoff, grow accordingly.
"""

from __future__ import annotations

import math
from functools import lru_cache
from typing import Any

import numpy as np
import numpy.typing as npt

Array = npt.NDArray[Any]
FloatArray = npt.NDArray[np.float64]

UNIT = float(np.finfo(np.float64).eps) / 2
EXTENDED = np.longdouble
EXTENDED_UNIT = float(np.finfo(EXTENDED).eps) / 2
_PI = np.arccos(EXTENDED(-1))


def vandermonde(t: Array, degree: int) -> Array:
    """(..., degree+1): P_k(t) by (k+1) P_{k+1} = (2k+1) t P_k - k P_{k-1} (NIST DLMF 18.9.1)."""
    table = np.empty((*t.shape, degree + 1), dtype=t.dtype)
    table[..., 0] = 1
    if degree:
        table[..., 1] = t
    for k in range(1, degree):
        table[..., k + 1] = ((2 * k + 1) * t * table[..., k] - k * table[..., k - 1]) / (k + 1)
    return table


@lru_cache(maxsize=128)
def gauss(count: int) -> tuple[Array, Array]:
    """``count`` Gauss-Legendre nodes and weights in extended precision (Newton from the double ones)."""
    nodes = np.polynomial.legendre.leggauss(count)[0].astype(EXTENDED)
    for _ in range(2):
        table = vandermonde(nodes, count)
        # (1 - t^2) P_n' = n (P_{n-1} - t P_n), NIST DLMF 18.9.17
        slope = count * (table[:, count - 1] - nodes * table[:, count]) / (1 - nodes * nodes)
        nodes = nodes - table[:, count] / slope
    table = vandermonde(nodes, count)
    slope = count * (table[:, count - 1] - nodes * table[:, count]) / (1 - nodes * nodes)
    weights = 2 / ((1 - nodes * nodes) * slope * slope)
    return _frozen(nodes), _frozen(weights)


@lru_cache(maxsize=128)
def projector(degree: int) -> tuple[Array, Array]:
    """Gauss nodes (n,) and the matrix (n, degree+1) from a polynomial's values there to its series."""
    nodes, weights = gauss(degree + 1)
    scale = (2 * np.arange(degree + 1, dtype=EXTENDED) + 1) / 2
    return nodes, _frozen(vandermonde(nodes, degree) * weights[:, np.newaxis] * scale)


@lru_cache(maxsize=128)
def chebyshev_interpolation(degree: int) -> tuple[Array, Array]:
    """Chebyshev nodes of the first kind (n,), ascending, and the matrix (n, degree+1) from values there
    to the Legendre coefficients of the interpolant of that degree.
    """
    count = degree + 1
    angles = (np.arange(count, dtype=EXTENDED) + EXTENDED(0.5)) * _PI / count
    nodes = -np.cos(angles)
    orders = np.arange(count, dtype=EXTENDED)
    cosines = np.cos(orders[:, np.newaxis] * (_PI - angles))
    to_chebyshev = 2 * cosines / count
    to_chebyshev[0] /= 2
    points, project = projector(degree)
    chebyshev_there = np.cos(orders * np.arccos(points)[:, np.newaxis])
    to_legendre = (chebyshev_there @ to_chebyshev).T @ project
    return _frozen(nodes), _frozen(to_legendre)


def lebesgue(degree: int) -> float:
    """A bound of the Lebesgue constant of first-kind Chebyshev interpolation: 1 + (2/pi) log(n + 1).

    T. J. Rivlin, The Chebyshev Polynomials (1974), theorem 1.2 (there for n + 1 nodes).
    """
    return 1.0 + 2.0 / math.pi * math.log(degree + 1.0)


def differentiated(series: Array) -> Array:
    """Coefficients of d/dt, same shape: c'_k = (2k+1) (c_{k+1} + c_{k+3} + ...) (NIST DLMF 18.9.18)."""
    result = np.zeros_like(series)
    degree = series.shape[-1] - 1
    for k in range(degree):
        result[..., k] = (2 * k + 1) * series[..., k + 1 :: 2].sum(axis=-1)
    return result


def times_distance(series: Array, side: int) -> Array:
    """The series of (1 + t) f (side -1) or (1 - t) f (side +1), one degree higher.

    t P_k = ((k+1) P_{k+1} + k P_{k-1})/(2k+1) (NIST DLMF 18.9.1).
    """
    degree = series.shape[-1] - 1
    k = np.arange(degree + 1, dtype=series.dtype)
    shifted = np.zeros((*series.shape[:-1], degree + 2), dtype=series.dtype)
    shifted[..., 1:] += series * (k + 1) / (2 * k + 1)
    shifted[..., :degree] += (series * k / (2 * k + 1))[..., 1:]
    result = -side * shifted
    result[..., : degree + 1] += series
    return result


def reexpanded(series: Array, shift: Array, stretch: Array) -> Array:
    """Series (F, d+1) in tau of f(shift + stretch tau), from those (F, d+1) in t; extended precision."""
    degree = series.shape[1] - 1
    nodes, project = projector(degree)
    t = shift[:, np.newaxis] + stretch[:, np.newaxis] * nodes
    values = np.einsum("fnk,fk->fn", vandermonde(t, degree), series.astype(EXTENDED))
    return np.asarray(values @ project)


def end_derivatives(degree: int, order: int) -> list[int]:
    """2^r P_k^(r)(1) = (k+r)!/(r! (k-r)!) for k = 0..degree (r the order), exact integers."""
    r = order
    return [
        0 if k < r else math.factorial(k + r) // (math.factorial(r) * math.factorial(k - r))
        for k in range(degree + 1)
    ]


def vanishing_order(series: FloatArray, side: int, most: int = 8) -> int:
    """How many derivatives, the value first, of this one series are exactly zero at t = side."""
    if not np.any(series):
        return 0
    integers, _ = _integers(series)
    degree = len(integers) - 1
    order = 0
    while order < min(most, degree) and _end_value(integers, side, order) == 0:
        order += 1
    return order


def vanishing(series: Array, side: int, order: int) -> tuple[FloatArray, float]:
    """A double series near ``series`` (d+1,) that vanishes exactly to ``order`` at t = side.

    The coefficients from ``order`` on are rounded to one common quantum, and the lower ones solved for
    in integers, so that the end derivatives cancel exactly. Returned with a bound of
    sup |difference|/(1 -+ t)^order: each unit of change of coefficient k contributes at most
    max |P_k^(order)|/order! = (k+r)!/(2^r r!^2 (k-r)!), the mean-value form of Taylor's remainder.
    """
    degree = len(series) - 1
    top = float(np.max(np.abs(series)))
    # Sums of d+1 coefficients times the small integers of the end conditions stay within 53 bits.
    quantum = 2.0 ** (math.frexp(top)[1] - 50)
    integers = [int(np.rint(value / EXTENDED(quantum))) for value in series.astype(EXTENDED)]
    for r in range(order - 1, -1, -1):
        integers[r] = 0
        # Exact: (k+r)!/(k-r)! over (2r)! is a binomial coefficient.
        integers[r] = -_end_value(integers, side, r) // end_derivatives(r, r)[r]
    result = np.array([float(value) * quantum for value in integers])
    change = np.abs(result.astype(EXTENDED) - series.astype(EXTENDED)).astype(np.float64)
    change += 8 * EXTENDED_UNIT * top  # the series itself came out of extended arithmetic
    growth = end_derivatives(degree, order)
    scale = 2.0**order * math.factorial(order)
    bound = sum(float(change[k]) * growth[k] / scale for k in range(order, degree + 1))
    return result, bound


def _integers(series: FloatArray) -> tuple[list[int], int]:
    """The coefficients as integers times one power of two."""
    parts = [math.frexp(float(value)) for value in series]
    lowest = min(exponent for mantissa, exponent in parts if mantissa) - 53
    return [int(math.ldexp(m, 53)) << (e - lowest - 53) if m else 0 for m, e in parts], lowest


def _end_value(integers: list[int], side: int, order: int) -> int:
    """The derivative of this order at t = side, up to a positive factor."""
    growth = end_derivatives(len(integers) - 1, order)
    signs = [1 if side > 0 or (k - order) % 2 == 0 else -1 for k in range(len(integers))]
    return sum(a * b * s for a, b, s in zip(integers, growth, signs, strict=True))


def _frozen(array: Array) -> Array:
    array.setflags(write=False)
    return array
