"""The element beside a singular end, where modes and coefficients are powers times series.

With y the distance from the end, h the element's width and xi = (y/h)^(1/m) (see :class:`.record.Record`),

    u = xi^(m s) v,    du/dy = xi^(m (s-1)) / h (s v + xi v_xi / m),    p = xi^(m alpha) P.

At the end itself the powers say whether a value is zero, finite or infinite. The coordinate of a point is
xi, in [0, 1], at both ends.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from modewright.record import Record
from modewright.series import legendre_derivative_vandermonde, legendre_vandermonde

__all__ = ["EndPiece", "end_pieces"]

Floats = NDArray[np.float64]

# Exponents this close to zero are rounding: s = 1 - alpha cancels alpha in the flux.
_ZERO = 1e-12


@dataclass(frozen=True, eq=False)
class EndPiece:
    """One end element. element: its index; left: at which end; place: the end's x; width: h; the rest:
    exponents.

    centre: the power of x that a flux density is divided by and that vanishes at this end, else 0.
    p, q, w: (d+1,) series of P, Q and W.
    """

    element: int
    left: bool
    place: float
    width: float
    m: float
    s: float
    alpha: float
    beta: float
    gamma: float
    centre: int
    p: Floats
    q: Floats
    w: Floats

    def coordinate(self, x: Floats) -> Floats:
        """xi of points of the element."""
        y = x - self.place if self.left else self.place - x
        result: Floats = np.clip(y / self.width, 0.0, 1.0) ** (1.0 / self.m)
        return result

    def _t(self, xi: Floats) -> Floats:
        return 2.0 * xi - 1.0 if self.left else 1.0 - 2.0 * xi

    @property
    def flat(self) -> int:
        """The order to which v_xi vanishes at a natural end of a regular problem."""
        return int(np.floor(self.m * (1.0 - self.alpha) + 1e-9)) if self.s == 0.0 and self.alpha < 1.0 else 0

    def _slope(self, series: NDArray[Any], xi: Floats, divided: int = 0) -> NDArray[Any]:
        """d/dxi of series (..., k+1), divided by xi so many times: (..., P)."""
        if divided:
            slopes = _differentiated(series) * (2.0 if self.left else -2.0)
            for _ in range(divided):
                slopes = 2.0 * _divided_by_distance(slopes, -1 if self.left else 1)
            return slopes @ legendre_vandermonde(self._t(xi), slopes.shape[-1] - 1)
        table = legendre_derivative_vandermonde(self._t(xi), series.shape[-1] - 1)
        slope: NDArray[Any] = series @ table * (2.0 if self.left else -2.0)
        return slope

    def values(self, series: NDArray[Any], xi: Floats) -> NDArray[Any]:
        """(M, P): u from its series (M, k+1)."""
        table = legendre_vandermonde(self._t(xi), series.shape[-1] - 1)
        return _times_power(series @ table, xi, self.m * self.s)

    def derivatives(self, series: NDArray[Any], xi: Floats, quantity: str) -> NDArray[Any]:
        """(M, P): u', p u' or -(p u')/x^g along +x, from the series (M, k+1) of v."""
        slope = self._slope(series, xi, self.flat) / self.m
        power = self.s - 1.0
        factor = np.full(xi.shape, (1.0 if self.left else -1.0) / self.width)
        if quantity != "derivative":
            factor = factor * (legendre_vandermonde(self._t(xi), self.p.size - 1).T @ self.p)
            power += self.alpha
        if quantity == "flux-density":
            power -= self.centre
            factor = -factor / self.width**self.centre
        if self.s == 0.0:
            return _times_power(slope * factor, xi, self.m * power + 1.0 + self.flat)
        table = legendre_vandermonde(self._t(xi), series.shape[-1] - 1)
        return _times_power((self.s * (series @ table) + xi * slope) * factor, xi, self.m * power)

    def coefficient(self, name: str, xi: Floats) -> Floats:
        """(P,): p, q or w."""
        if name == "w":
            return _times_power(self._sum(self.w, xi), xi, self.m * self.gamma)
        if name == "p":
            return _times_power(self._sum(self.p, xi), xi, self.m * self.alpha)
        result = _times_power(self._sum(self.q, xi), xi, self.m * self.beta)
        s = self.s
        if s == 0.0:
            return result
        # s(s-1) p/y^2 + s p'/y
        barrier = s * (s - 1.0 + self.alpha) * self._sum(self.p, xi) + s / self.m * xi * self._slope(
            self.p, xi
        )
        if np.abs(barrier).max(initial=0.0) <= _ZERO * float(np.abs(self.p).sum()):
            return result
        with np.errstate(invalid="ignore"):
            # at the end both may be infinite: the barrier is the stronger
            part = _times_power(barrier, xi, self.m * (self.alpha - 2.0)) / self.width**2
            return np.where(np.isinf(part), part, result + part)

    def _sum(self, series: Floats, xi: Floats) -> Floats:
        result: Floats = series @ legendre_vandermonde(self._t(xi), series.size - 1)
        return result


def _differentiated(series: NDArray[Any]) -> NDArray[Any]:
    """Series of d/dt: c'_k = (2k+1) (c_{k+1} + c_{k+3} + ...) (NIST DLMF 18.9.18)."""
    result = np.zeros_like(series)
    for k in range(series.shape[-1] - 1):
        result[..., k] = (2 * k + 1) * series[..., k + 1 :: 2].sum(axis=-1)
    return result


def _divided_by_distance(series: NDArray[Any], side: int) -> NDArray[Any]:
    """The series f with (1 + t) f (side -1) or (1 - t) f (side 1) equal to `series`, which vanishes there."""
    degree = series.shape[-1] - 1
    quotient = np.zeros((*series.shape[:-1], degree + 2), dtype=series.dtype)
    # t P_k = ((k+1) P_{k+1} + k P_{k-1}) / (2k+1) (NIST DLMF 18.9.1), from the highest coefficient down
    for k in range(degree - 1, -1, -1):
        value = series[..., k + 1] - quotient[..., k + 1]
        value = value + side * quotient[..., k + 2] * (k + 2) / (2 * k + 5)
        quotient[..., k] = -side * value * (2 * k + 1) / (k + 1)
    return quotient[..., : max(degree, 1)]


def _times_power(values: NDArray[Any], xi: Floats, power: float) -> NDArray[Any]:
    """values (..., P) times xi^power, 0 where the values are."""
    if abs(power) < _ZERO:
        return values
    with np.errstate(divide="ignore", over="ignore"):
        scale = xi**power
    if np.isfinite(scale).all():
        return np.asarray(values * scale)
    with np.errstate(invalid="ignore"):
        return np.asarray(np.where(values == 0.0, 0.0, values * scale))


def end_pieces(record: Record) -> tuple[EndPiece, ...]:
    """The end elements of a record."""
    found = []
    for left, exponents in ((True, record.left_map), (False, record.right_map)):
        if exponents.size == 0:
            continue
        element = 0 if left else record.elements - 1
        a, b = float(record.edges[element]), float(record.edges[element + 1])
        place = a if left else b
        m, s, alpha, beta, gamma = (float(number) for number in exponents)
        centre = record.geometry if place == 0.0 else 0
        rows = (record.p[element], record.q[element], record.w[element])
        found.append(EndPiece(element, left, place, b - a, m, s, alpha, beta, gamma, centre, *rows))
    return tuple(found)
