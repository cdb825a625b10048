"""The coordinate xi = int m dx that belongs to the measure of a cell average."""

from __future__ import annotations

from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from modewright.pieces import Pieces, legendre_vandermonde
from modewright.record import Record

from .meshes import Measure

__all__ = ["Coordinate", "coordinate"]

Floats = NDArray[np.float64]


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
        self._pieces = Pieces(record)
        w = record.w
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
        element, t = self._pieces.locate(x)
        table = legendre_vandermonde(t, self.degree)
        return np.asarray(np.einsum("xk,kx->x", self._series[element], table))

    def difference(self, low: Floats, high: Floats) -> Floats:
        return self._at(high) - self._at(low)


def coordinate(measure: Measure, record: Record | None = None) -> Coordinate:
    """The coordinate of a measure; the record is needed for the weight."""
    if measure is Measure.WEIGHT:
        if record is None:
            raise ValueError("the weight measure needs the basis")
        return _Weight(record)
    return _Radial({Measure.LENGTH: 0, Measure.CYLINDRICAL: 1, Measure.SPHERICAL: 2}[measure])
