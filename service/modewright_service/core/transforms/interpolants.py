"""The fields that samples stand for: piecewise polynomials, linear in the samples, layer by layer.

A field is a sum of the values v and of slopes s that follow from them,

    f(x) = sum_i D_i(x) v_i + sum_j S_j(x) s_j,      B s = R v,

with B tridiagonal, so that neither the evaluation of many fields nor the matrix of their integrals ever
needs the dense inverse of B: the first solves with B for the fields, the second with B transposed for the
integrals.

Point values: straight lines, or the not-a-knot cubic spline. Layers are cut at interfaces. Where the
points of a layer stop short of its end, as cell centres do, the last piece is continued, over at most one
spacing.

Cell averages: the cumulative integral over the measure m dx is known at the edges; a cubic spline in the
coordinate xi = int m dx goes through it, and its derivative d/dxi is the field, which keeps every average
exactly, and constants too. In xi = r^2/2 a field of a cylinder is again a polynomial in r on each cell.
A cell that reaches over an interface is taken as constant.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csr_array

from modewright.record import Record
from modewright_service.core.errors import InvalidRequest, Reason

from .measures import Coordinate, coordinate
from .meshes import CellMesh, Interpolation, Measure, PointMesh, Reconstruction, Segments, segments_of
from .splines import Run, SlopeSystem, slope_system

__all__ = ["Interpolant", "interpolant_of"]

Floats = NDArray[np.float64]
Indices = NDArray[np.intp]

# A layer's outermost point may be this many spacings away from the layer's end.
_REACH: Final = 1.0 + 1e-9
# Share of the whole weight under which a cell counts as having none.
_NO_WEIGHT: Final = 4 * np.finfo(np.float64).eps


@dataclass(frozen=True, eq=False)
class Interpolant:
    """A field, linear in `size` values, on I intervals that cover the domain.

    bounds: (I+1,) ascending. degree: the polynomial degree in x on an interval.
    nodes: (2, I) between which an interval's polynomial is made; it may reach beyond them.
    values: (2, I) the values at its two nodes (twice the same for averages).
    slopes: (2, I) the slopes at its two nodes, -1 for an interval without.
    averages: values are averages over intervals; slopes are those of the cumulative integral over `axis`.
    """

    size: int
    bounds: Floats
    degree: int
    nodes: Floats
    values: Indices
    slopes: Indices
    averages: bool
    axis: Coordinate
    system: SlopeSystem

    def rows(self, interval: Indices, x: Floats) -> tuple[csr_array, csr_array]:
        """D (X, G) and S (X, M) at points x, each in the interval named for it."""
        low, high = self.nodes[:, interval]
        width = self.axis.difference(low, high)
        lone = width == 0.0
        tau = self.axis.difference(low, x) / np.where(lone, 1.0, width)
        smooth = self.slopes[0, interval] >= 0
        if self.averages:
            first, second = np.where(smooth, 6.0 * tau * (1.0 - tau), 1.0), np.zeros_like(tau)
            slopes = np.stack([1.0 - tau * (4.0 - 3.0 * tau), tau * (3.0 * tau - 2.0)])
        else:
            second = np.where(smooth, tau * tau * (3.0 - 2.0 * tau), tau)
            second[lone] = 0.0
            first = 1.0 - second
            slopes = np.stack([width * tau * (1.0 - tau) ** 2, width * tau * tau * (tau - 1.0)])
        everywhere = np.ones(x.size, dtype=np.bool_)
        return (
            _pairs(self.values[:, interval], np.stack([first, second]), everywhere, self.size),
            _pairs(self.slopes[:, interval], slopes, smooth, self.system.size),
        )

    def end_weights(self) -> Floats:
        """(2, G): the values' weights in f at the left and at the right end of the domain."""
        ends = np.array([0, self.bounds.size - 2])
        values, slopes = self.rows(ends, self.bounds[[0, -1]])
        weights = np.ascontiguousarray(values.toarray().T)
        self.system.gather(weights, slopes.toarray().T)
        return weights.T


def interpolant_of(record: Record, mesh: PointMesh | CellMesh) -> Interpolant:
    """The field that samples on `mesh` stand for.

    Raises InvalidRequest where the mesh does not fit the domain.
    """
    segments = segments_of(record)
    if isinstance(mesh, PointMesh):
        return _of_points(mesh, segments)
    return _of_cells(mesh, segments, coordinate(mesh.measure, record))


def _pairs(columns: Indices, weights: Floats, present: NDArray[np.bool_], width: int) -> csr_array:
    """(X, width) with two entries in each row that is present; columns, weights: (2, X)."""
    pointers = np.concatenate(([0], np.cumsum(2 * present)))
    indices = columns[:, present].T.ravel()
    return csr_array((weights[:, present].T.ravel(), indices, pointers), shape=(present.size, width))


def _slope_numbers(intervals: list[int], smooth: list[bool]) -> Indices:
    """(2, I): the numbers of the slopes at the ends of each interval; groups of intervals, smooth or not."""
    parts, first = [], 0
    for count, is_smooth in zip(intervals, smooth, strict=True):
        if is_smooth:
            index = np.arange(first, first + count)
            parts.append(np.stack([index, index + 1]))
            first += count + 1
        else:
            parts.append(np.full((2, count), -1))
    return np.concatenate(parts, axis=1)


# ---- point values ----


def _of_points(mesh: PointMesh, segments: Segments) -> Interpolant:
    x = segments.snap(mesh.x, "x")
    _check_doubles(x, segments)
    bounds, pairs, runs = [segments.start], [], []
    counts, smooth = [], []
    for start, stop, name in zip(
        segments.bounds[:-1].tolist(), segments.bounds[1:].tolist(), segments.names, strict=True
    ):
        # Of two points at one interface the first belongs to the layer on the left, the second to the right.
        first = int(np.searchsorted(x, start, side="right"))
        first -= int(first > 0 and x[first - 1] == start)
        last = int(np.searchsorted(x, stop, side="left"))
        last -= int(last == x.size or x[last] > stop)
        _check_reach(x, first, last, start, stop, name)
        index = np.arange(first, last + 1)
        pairs.append(np.stack([index[:-1], index[1:]]) if index.size > 1 else np.stack([index, index]))
        bounds += [*x[index[1:-1]].tolist(), stop]
        counts.append(pairs[-1].shape[1])
        smooth.append(mesh.interpolation is Interpolation.CUBIC and index.size >= 4)
        if smooth[-1]:
            runs.append(Run(np.diff(x[index]), index))
    values = np.concatenate(pairs, axis=1)
    return Interpolant(
        size=x.size,
        bounds=np.array(bounds),
        degree=3 if runs else 1,
        nodes=x[values],
        values=values,
        slopes=_slope_numbers(counts, smooth),
        averages=False,
        axis=coordinate(Measure.LENGTH),
        system=slope_system(runs, x.size),
    )


def _check_doubles(x: Floats, segments: Segments) -> None:
    double = np.flatnonzero(np.diff(x) == 0.0)
    at_interface = np.isin(x[double], segments.bounds[1:-1])
    if not at_interface.all():
        index = int(double[np.argmin(at_interface)]) + 1
        message = "a point given twice, which only an interface between layers may be"
        raise InvalidRequest.at(Reason.BAD_MESH, f"x[{index}]", message, x[index])
    thrice = np.flatnonzero(np.diff(double) == 1)
    if thrice.size:
        index = int(double[thrice[0]]) + 2
        raise InvalidRequest.at(Reason.BAD_MESH, f"x[{index}]", "an interface given three times", x[index])


def _check_reach(x: Floats, first: int, last: int, start: float, stop: float, name: str) -> None:
    """A layer needs a point, and its outermost points no further from its ends than from the next ones."""
    where = f"{name} from {start!r} to {stop!r}"
    if last < first:
        raise InvalidRequest.at(Reason.BAD_MESH, "x", f"no point in {where}", f"{x.size} points")
    if x.size == 1:
        return
    if last == first:
        # a layer of one cell: its neighbours' distances, or the only one there is, say how wide that may be
        before = x[first] - x[first - 1] if first > 0 else x[first + 1] - x[first]
        after = x[last + 1] - x[last] if last + 1 < x.size else x[last] - x[last - 1]
    else:
        before, after = x[first + 1] - x[first], x[last] - x[last - 1]
    for index, gap, spacing in ((first, x[first] - start, before), (last, stop - x[last], after)):
        if gap > _REACH * spacing:
            message = f"further from the end of {where} than one spacing of the mesh, {float(spacing)!r}"
            raise InvalidRequest.at(Reason.BAD_MESH, f"x[{index}]", message, x[index], gap=gap)


# ---- cell averages ----


def _of_cells(mesh: CellMesh, segments: Segments, axis: Coordinate) -> Interpolant:
    edges = segments.snap(mesh.edges, "edges")
    for index, end in ((0, segments.start), (edges.size - 1, segments.end)):
        if edges[index] != end:
            message = f"the cells stop short of the end of the domain, {end!r}"
            raise InvalidRequest.at(Reason.BAD_MESH, f"edges[{index}]", message, edges[index])
    narrow = np.diff(edges) <= 0.0
    if narrow.any():
        index = int(np.argmax(narrow)) + 1
        message = "a cell of no width beside an end or an interface"
        raise InvalidRequest.at(Reason.BAD_MESH, f"edges[{index}]", message, edges[index])
    cells = np.arange(edges.size - 1)
    conservative = mesh.reconstruction is Reconstruction.CONSERVATIVE
    counts, smooth, runs = [cells.size], [False], []
    if conservative:
        steps = _cell_weights(edges, axis, mesh.measure)
        groups = _cell_groups(edges, segments)
        counts = [group.size for group in groups]
        smooth = [group.size >= 2 for group in groups]
        runs = [Run(steps[group], group) for group in groups if group.size >= 2]
    return Interpolant(
        size=cells.size,
        bounds=edges,
        degree=2 * axis.degree if runs else 0,
        nodes=np.stack([edges[:-1], edges[1:]]),
        values=np.stack([cells, cells]),
        slopes=_slope_numbers(counts, smooth),
        averages=True,
        axis=axis,
        system=slope_system(runs, cells.size),
    )


def _cell_weights(edges: Floats, axis: Coordinate, measure: Measure) -> Floats:
    weights = axis.difference(edges[:-1], edges[1:])
    empty = weights <= _NO_WEIGHT * weights.sum()
    if measure is Measure.WEIGHT and empty.any():
        index = int(np.argmax(empty))
        message = "the weight vanishes on the cell that starts here: its average over w dx has no meaning"
        raise InvalidRequest.at(Reason.BAD_MESH, f"edges[{index}]", message, edges[index])
    return weights


def _cell_groups(edges: Floats, segments: Segments) -> list[Indices]:
    """Cells in order, grouped by segment; a cell that reaches over a bound is a group of its own."""
    segment = np.searchsorted(segments.bounds, edges[:-1], side="right")
    across = np.searchsorted(segments.bounds, edges[1:], side="left") > segment
    change = (np.diff(segment) != 0) | across[1:] | across[:-1]
    return np.split(np.arange(edges.size - 1), np.flatnonzero(change) + 1)
