"""The quadrature grid of a projection: parts on which modes, weight and field are all one polynomial each."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from functools import cached_property
from typing import Final

import numpy as np
from numpy.typing import NDArray

from modewright.end_pieces import EndPiece, end_pieces
from modewright.pieces import Pieces
from modewright.record import Record
from modewright_service.core.quadrature import gauss_counts, place_nodes

from .end_grid import end_nodes

__all__ = ["Grid", "build_grid", "lump_mass"]

Floats = NDArray[np.float64]
Indices = NDArray[np.intp]

# Points handled at once: with 256 fields a block of doubles is 8 MiB.
_CHUNK: Final = 4096


@dataclass(frozen=True, eq=False)
class Grid:
    """X points in ascending order with the weights of the inner product, point masses at interfaces included.

    element, t: the element of the basis that a point is in, and its coordinate there, in [-1, 1]; in [0, 1]
    beside a singular end (:mod:`modewright.end_pieces`).
    interval: the interval of the field that it is in. x: the point. weight: quadrature weight times w.
    """

    record: Record
    element: Indices
    t: Floats
    interval: Indices
    x: Floats
    weight: Floats

    @property
    def size(self) -> int:
        """X, the number of points."""
        return int(self.x.size)

    @property
    def nbytes(self) -> int:
        """Bytes of the arrays."""
        return 5 * 8 * self.size

    @cached_property
    def pieces(self) -> Pieces:
        """The evaluator of the basis."""
        return Pieces(self.record)

    def chunks(self) -> Iterator[slice]:
        """Slices of the points that cover them all."""
        for start in range(0, self.size, _CHUNK):
            yield slice(start, min(start + _CHUNK, self.size))

    def weighted_modes(self, chunk: slice) -> Floats:
        """(points, N): the modes times the weights, at the points of a chunk."""
        modes: Floats = self.pieces.at(self.element[chunk], self.t[chunk])
        modes *= self.weight[chunk]
        return modes.T


def build_grid(record: Record, bounds: Floats, degree: int) -> Grid:
    """The grid that integrates fields of `degree` on intervals between `bounds` (I+1,) against the modes."""
    edges = record.edges
    breaks = np.union1d(edges, bounds)
    middle = (breaks[:-1] + breaks[1:]) / 2.0
    element = np.clip(np.searchsorted(edges, middle, side="right") - 1, 0, edges.size - 2)
    interval = np.clip(np.searchsorted(bounds, middle, side="right") - 1, 0, bounds.size - 2)
    pieces = end_pieces(record)
    ends = [piece.element for piece in pieces]
    chosen = np.flatnonzero(~np.isin(element, ends))
    grid = _plain(record, element[chosen], interval[chosen], breaks[chosen], breaks[chosen + 1], degree)
    for piece in pieces:
        parts = np.flatnonzero(element == piece.element)
        grid = _joined(grid, piece, breaks[parts[0] : parts[-1] + 2], interval[parts], degree)
    return _with_masses(grid, bounds)


def _plain(
    record: Record, element: Indices, interval: Indices, start: Floats, stop: Floats, degree: int
) -> Grid:
    """Points on parts from `start` to `stop` of plain elements."""
    left, right = record.edges[element], record.edges[element + 1]
    # Both ends by the same formula, exact at the element's own ends.
    lower, upper = (((x - left) - (right - x)) / (right - left) for x in (start, stop))
    counts = gauss_counts(
        lower, upper, record.degrees[element].astype(np.int64), _weight_degrees(record)[element], degree
    )
    nodes = place_nodes(counts)
    part, s = nodes.part, nodes.s
    half = (stop - start)[part] / 2.0
    t = ((1.0 - s) * lower[part] + (1.0 + s) * upper[part]) / 2.0
    x = start[part] + half * (1.0 + s)
    element, interval = element[part], interval[part]
    weight = nodes.weight * half * Pieces(record).coefficient_at("w", element, t)
    return Grid(record, element, t, interval, x, weight)


def _joined(grid: Grid, piece: EndPiece, breaks: Floats, interval: Indices, degree: int) -> Grid:
    """The grid with the points of an end element, first or last."""
    found = end_nodes(piece, breaks, int(grid.record.degrees[piece.element]), degree)
    element = np.full(found.x.size, piece.element, dtype=np.intp)
    own = (element, found.xi, interval[found.part], found.x, found.weight)
    others = (grid.element, grid.t, grid.interval, grid.x, grid.weight)
    pairs = zip(own, others, strict=True) if piece.left else zip(others, own, strict=True)
    return Grid(grid.record, *(np.concatenate(pair) for pair in pairs))


def lump_mass(record: Record, side: str) -> float:
    """The mass of the lump at an end, 0.0 where there is none."""
    values = record.left_lump if side == "left" else record.right_lump
    end = record.left if side == "left" else record.right
    return end.mass if values.size else 0.0


def _weight_degrees(record: Record) -> NDArray[np.int64]:
    present = record.w != 0.0
    last = record.w.shape[1] - 1 - np.argmax(present[:, ::-1], axis=1)
    return np.where(present.any(axis=1), last, 0).astype(np.int64)


def _with_masses(grid: Grid, bounds: Floats) -> Grid:
    """Masses at interfaces, each a point of the grid: the limit from the left, where the solver puts them."""
    joints = grid.record.joints[grid.record.joints[:, 3] > 0.0]
    if joints.size == 0:
        return grid
    edges = grid.record.edges
    edge = np.array([int(np.argmin(np.abs(edges - x))) for x in joints[:, 0].tolist()])
    element = np.maximum(edge - 1, 0)
    interval = np.clip(np.searchsorted(bounds, edges[edge], side="left") - 1, 0, bounds.size - 2)
    place = np.searchsorted(grid.element, element, side="right")
    return Grid(
        grid.record,
        np.insert(grid.element, place, element),
        np.insert(grid.t, place, 1.0),
        np.insert(grid.interval, place, interval),
        np.insert(grid.x, place, edges[edge]),
        np.insert(grid.weight, place, joints[:, 3]),
    )
