"""The coordinate xi = int m dx that belongs to the measure of a cell average."""

from __future__ import annotations

from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from modewright.end_pieces import end_pieces
from modewright.record import Record
from modewright.series import legendre_vandermonde
from modewright_service.core.errors import InvalidRequest, Reason
from modewright_service.core.quadrature import gauss_legendre

from .meshes import Measure

__all__ = ["Coordinate", "coordinate"]

Floats = NDArray[np.float64]

# Degree up to which w is looked for as a polynomial in x beside a singular end.
_DEGREE = 24
_ROUNDING = 1e-14


class Coordinate(Protocol):
    """xi as a polynomial in x; `degree` is its degree."""

    @property
    def degree(self) -> int:
        """Polynomial degree in x, on an element."""

    def difference(self, low: Floats, high: Floats) -> Floats:
        """xi(high) - xi(low), shapes alike."""


class _Radial:
    """xi = x^(g+1)/(g+1): dx, r dr, r^2 dr; differences are factored, so that thin cells lose no digits."""

    def __init__(self, geometry: int) -> None:
        self.degree = geometry + 1

    def difference(self, low: Floats, high: Floats) -> Floats:
        step = high - low
        if self.degree == 1:
            return step
        if self.degree == 2:
            return step * (high + low) / 2.0
        return step * (high * high + high * low + low * low) / 3.0


class _Weight:
    """xi = int w dx, from the polynomials of w that the modes were computed with."""

    def __init__(self, record: Record) -> None:
        self._edges = record.edges
        w = _plain_weight(record)
        half = np.diff(record.edges)[:, np.newaxis] / 2.0
        # int_{-1}^t P_0 = P_1 + P_0 and int_{-1}^t P_k = (P_{k+1} - P_{k-1})/(2k+1) (NIST DLMF 18.9.7).
        series = np.zeros((w.shape[0], w.shape[1] + 1))
        scaled = half * w / (2.0 * np.arange(w.shape[1]) + 1.0)
        series[:, 1:] = scaled
        series[:, : w.shape[1] - 1] -= scaled[:, 1:]
        series[:, 0] += scaled[:, 0]
        # At t = 1 every P_k is 1; at t = -1 the series vanishes.
        series[1:, 0] += np.cumsum(series.sum(axis=1))[:-1]
        self._series = series
        self.degree = w.shape[1]

    def _at(self, x: Floats) -> Floats:
        edges = self._edges
        element = np.clip(np.searchsorted(edges, x, side="right") - 1, 0, edges.size - 2)
        left, right = edges[element], edges[element + 1]
        t = ((x - left) - (right - x)) / (right - left)
        table = legendre_vandermonde(t, self.degree)
        return np.asarray(np.einsum("xk,kx->x", self._series[element], table))

    def difference(self, low: Floats, high: Floats) -> Floats:
        return self._at(high) - self._at(low)


def _plain_weight(record: Record) -> Floats:
    """(E, d+1): Legendre coefficients of w in x on every element, those beside singular ends included.

    Raises InvalidRequest where w is no polynomial in x there: xi would be none.
    """
    pieces = end_pieces(record)
    if not pieces:
        return record.w
    columns = max(record.w.shape[1], _DEGREE + 1)
    w = np.zeros((record.elements, columns))
    w[:, : record.w.shape[1]] = record.w
    nodes, weights = gauss_legendre(columns)
    for piece in pieces:
        half = piece.width / 2.0
        # from the end inwards, so that nothing cancels beside it
        y = half * (1.0 + nodes) if piece.left else half * (1.0 - nodes)
        values = piece.coefficient("w", (y / piece.width) ** (1.0 / piece.m))
        table = legendre_vandermonde(nodes, columns - 1)
        series = (table @ (values * weights)) * (np.arange(columns) + 0.5)
        if not np.abs(series[-3:]).max() <= _ROUNDING * np.abs(series).max():
            message = f"w is no polynomial beside x = {piece.place!r}: averages in w dx cannot be taken apart"
            raise InvalidRequest.at(Reason.BAD_VALUES, "measure", message, "weight", x=piece.place)
        w[piece.element] = np.where(np.abs(series) > _ROUNDING * np.abs(series).max(), series, 0.0)
    used = 1 + int(np.flatnonzero(w.any(axis=0)).max(initial=0))
    return w[:, :used]


def coordinate(measure: Measure, record: Record | None = None) -> Coordinate:
    """The coordinate of a measure; the record is needed for the weight."""
    if measure is Measure.WEIGHT:
        if record is None:
            raise ValueError("the weight measure needs the basis")
        return _Weight(record)
    return _Radial({Measure.LENGTH: 0, Measure.CYLINDRICAL: 1, Measure.SPHERICAL: 2}[measure])
