"""Evaluating an eigenbasis from its record: NumPy only, no service needed.

On every element the modes and the coefficients p, q, w are Legendre series in t = (2 x - a - b)/(b - a).
Points are sorted into elements; one table of Legendre polynomials is made for all points by the three-term
recurrence, and each element then costs one matrix product (modes x coefficients) @ (coefficients x points).

At an edge between two elements `side` says which one answers: "right" (the default) takes the limit from the
right, "left" the one from the left. At the two ends of the domain there is only one. Values and fluxes
agree across edges except where the problem has a jump there (a contact resistance: value; a spring or a mass:
flux); derivatives jump wherever p does.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any, Final, Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from modewright.end_pieces import end_pieces
from modewright.record import Record
from modewright.series import legendre_derivative_vandermonde, legendre_vandermonde

__all__ = [
    "OutsideDomain",
    "Pieces",
    "Quantity",
    "Side",
    "legendre_derivative_vandermonde",
    "legendre_vandermonde",
]

Quantity = Literal["value", "derivative", "flux", "flux-density"]
Side = Literal["right", "left"]

QUANTITIES: Final = ("value", "derivative", "flux", "flux-density")
# Points are evaluated this many at a time: the table of a degree 40 stays within 3 MB, near the cache.
_CHUNK: Final = 8192
# A mesh written as text or summed from thicknesses misses the end by a few units in the last place.
_END_SLACK: Final = 16 * np.finfo(np.float64).eps


class OutsideDomain(ValueError):
    """A point that is not in the domain (or is NaN): `value`, its flat `index`, and the domain's two ends."""

    def __init__(self, value: float, index: int, start: float, end: float) -> None:
        super().__init__(value, index, start, end)
        self.value, self.index, self.start, self.end = value, index, start, end

    def __str__(self) -> str:
        return f"x[{self.index}] = {self.value!r} is outside the domain [{self.start!r}, {self.end!r}]"


class Pieces:
    """The modes of a record as functions.

    >>> pieces = Pieces(record)                                  # doctest: +SKIP
    >>> pieces.evaluate([0.1, 0.2], quantity="flux").shape       # doctest: +SKIP
    (24, 2)
    """

    def __init__(self, record: Record) -> None:
        self.record = record
        self._offsets = record.offsets
        self._ends = {piece.element: piece for piece in end_pieces(record)}

    # ---- where a point is ----

    def locate(self, x: ArrayLike, side: Side = "right") -> tuple[NDArray[np.intp], NDArray[np.float64]]:
        """For each point (flattened) its element and its t in [-1, 1]. Raises OutsideDomain.

        On an element beside a singular end t is xi in [0, 1], 0 at the end (:mod:`.end_pieces`).
        Points beyond an end by no more than 16 units in the last place are taken as the end.
        """
        if side not in ("right", "left"):
            raise ValueError(f"side: {side!r}, needed 'right' or 'left'")
        edges = self.record.edges
        points = np.asarray(x, dtype=np.float64).ravel()
        start, end = float(edges[0]), float(edges[-1])
        slack = _END_SLACK * max(abs(start), abs(end))
        inside = (points >= start - slack) & (points <= end + slack)
        if not inside.all():
            index = int(np.argmin(inside))
            raise OutsideDomain(float(points[index]), index, start, end)
        points = np.clip(points, start, end)
        element = np.searchsorted(edges, points, side=side) - 1
        np.clip(element, 0, edges.size - 2, out=element)
        left, right = edges[element], edges[element + 1]
        t = ((points - left) - (right - points)) / (right - left)
        for piece in self._ends.values():
            there = element == piece.element
            t[there] = piece.coordinate(points[there])
        return element, t

    # ---- values ----

    def evaluate(
        self, x: ArrayLike, quantity: Quantity = "value", side: Side = "right", count: int | None = None
    ) -> NDArray[np.float64]:
        """The first `count` (default all) modes at the points x.

        quantity: "value" phi; "derivative" phi'; "flux" p phi' (geometry factor included, along +x);
        "flux-density" -(p phi')/x^geometry, for heat conduction the heat flux -k u' per area.
        Returns (count,) + shape of x. Raises OutsideDomain, ValueError.
        """
        matrix = self.record.coefficients
        if count is not None:
            if not 0 < count <= self.record.count:
                raise ValueError(f"count: {count} modes wanted of {self.record.count}")
            matrix = matrix[:count]
        return self._series(matrix, x, quantity, side)

    def combine(
        self,
        coefficients: ArrayLike,
        x: ArrayLike,
        quantity: Quantity = "value",
        side: Side = "right",
    ) -> NDArray[Any]:
        """sum_n coefficients[..., n] phi_n at the points x, and the like for the other quantities.

        coefficients: (..., M) real or complex, of the first M modes. Returns (...,) + shape of x.
        """
        c = np.asarray(coefficients)
        c = c.astype(np.complex128 if np.iscomplexobj(c) else np.float64, copy=False)
        if c.ndim == 0 or not 0 < c.shape[-1] <= self.record.count:
            raise ValueError(f"coefficients: shape {c.shape}, needed (..., M), 1 <= M <= {self.record.count}")
        shape = np.shape(x)
        flat = c.reshape(-1, c.shape[-1])
        points = np.asarray(x, dtype=np.float64).ravel()
        modes = self.record.coefficients[: c.shape[-1]]
        if flat.shape[0] * modes.shape[1] <= points.size * modes.shape[0]:
            # Few fields, many points: first one piecewise polynomial for each field.
            out = self._series(flat @ modes, points, quantity, side)
        else:
            out = np.empty((flat.shape[0], points.size), dtype=np.result_type(flat, modes))
            for chunk in _slices(points.size):
                out[:, chunk] = flat @ self._series(modes, points[chunk], quantity, side)
        return out.reshape(c.shape[:-1] + shape)

    def coefficient(
        self, name: Literal["p", "q", "w"], x: ArrayLike, side: Side = "right"
    ) -> NDArray[np.float64]:
        """p, q or w (geometry factor included) as the modes were computed with them; the shape of x."""
        if name not in ("p", "q", "w"):
            raise ValueError(f"coefficient: {name!r}, needed 'p', 'q' or 'w'")
        element, t = self.locate(x, side)
        return self.coefficient_at(name, element, t).reshape(np.shape(x))

    def _series(self, matrix: NDArray[Any], x: ArrayLike, quantity: Quantity, side: Side) -> NDArray[Any]:
        """(M, S) piecewise series at the points x: (M,) + shape of x."""
        if quantity not in QUANTITIES:
            raise ValueError(f"quantity: {quantity!r}, needed one of {', '.join(QUANTITIES)}")
        shape = np.shape(x)
        element, t = self.locate(x, side)
        points = np.asarray(x, dtype=np.float64).ravel()
        order = None
        if np.any(np.diff(element) < 0):
            order = np.argsort(element, kind="stable")
            element, t, points = element[order], t[order], points[order]
        out = np.empty((matrix.shape[0], t.size), matrix.dtype)
        for chunk in _slices(t.size):
            self._fill(matrix, element[chunk], t[chunk], points[chunk], quantity, out[:, chunk])
        if order is not None:
            unsorted = np.empty_like(out)
            unsorted[:, order] = out
            out = unsorted
        return out.reshape((matrix.shape[0], *shape))

    # ---- where elements and their own coordinate are known ----

    def at(
        self,
        element: NDArray[np.intp],
        t: NDArray[np.float64],
        matrix: NDArray[Any] | None = None,
        *,
        derivative: bool = False,
    ) -> NDArray[Any]:
        """(M, P): piecewise series (M, S), default the modes, or d/dx of them, at t in [-1, 1] on elements.

        element: (P,) ascending; t: (P,). Series may be complex.
        """
        if matrix is None:
            matrix = self.record.coefficients
        out = np.empty((matrix.shape[0], t.size), matrix.dtype)
        quantity: Quantity = "derivative" if derivative else "value"
        for chunk in _slices(t.size):
            # the place itself matters for flux densities only
            self._fill(matrix, element[chunk], t[chunk], t[chunk], quantity, out[:, chunk])
        return out

    def coefficient_at(
        self, name: Literal["p", "q", "w"], element: NDArray[np.intp], t: NDArray[np.float64]
    ) -> NDArray[np.float64]:
        """(P,): p, q or w at t in [-1, 1] on elements."""
        series: NDArray[np.float64] = getattr(self.record, name)
        out = np.empty(t.size)
        for chunk in _slices(t.size):
            table = legendre_vandermonde(t[chunk], series.shape[1] - 1)
            out[chunk] = np.einsum("pk,kp->p", series[element[chunk]], table)
        for piece in self._ends.values():
            there = element == piece.element
            out[there] = piece.coefficient(name, t[there])
        return out

    def _fill(
        self,
        matrix: NDArray[Any],
        element: NDArray[np.intp],
        t: NDArray[np.float64],
        x: NDArray[np.float64],
        quantity: Quantity,
        out: NDArray[Any],
    ) -> None:
        """One chunk of points, sorted by element, into `out` (M, points)."""
        record, offsets = self.record, self._offsets
        starts = np.flatnonzero(np.diff(element, prepend=-1))
        present = element[starts]
        degree = int(record.degrees[present].max())
        if quantity == "value":
            table = legendre_vandermonde(t, degree)
        else:
            table = legendre_derivative_vandermonde(t, degree)
            factor = 2.0 / (record.edges[element + 1] - record.edges[element])
            if quantity != "derivative":
                factor *= self.coefficient_at("p", element, t)
            if quantity == "flux-density":
                radius = np.where(x != 0.0, x, 1.0) if self._ends else x
                factor /= -(radius**record.geometry)
            # end elements have their own rule; p may be infinite there
            factor[np.isin(element, list(self._ends))] = 1.0
            table *= factor
        stops = np.append(starts[1:], t.size)
        for e, start, stop in zip(present.tolist(), starts.tolist(), stops.tolist(), strict=True):
            series = matrix[:, offsets[e] : offsets[e + 1]]
            piece = self._ends.get(e)
            if piece is None:
                out[:, start:stop] = series @ table[: series.shape[1], start:stop]
            elif quantity == "value":
                out[:, start:stop] = piece.values(series, t[start:stop])
            else:
                out[:, start:stop] = piece.derivatives(series, t[start:stop], quantity)
                if quantity == "flux-density" and not piece.centre:
                    out[:, start:stop] /= x[start:stop] ** record.geometry


def _slices(size: int) -> Iterator[slice]:
    for start in range(0, size, _CHUNK):
        yield slice(start, min(start + _CHUNK, size))
