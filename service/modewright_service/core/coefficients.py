"""The coefficients as piecewise polynomials with error bounds, their refinement and their ranges."""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import lru_cache
from typing import Any

import numpy as np
import numpy.typing as npt

from .description import FloatArray
from .end_elements import EndMap
from .legendre import (
    EXTENDED,
    EXTENDED_UNIT,
    UNIT,
    reexpanded,
    vanishing,
    vanishing_order,
)

IntArray = npt.NDArray[np.int64]


@dataclass(frozen=True, eq=False)
class CoefficientMesh:
    """Legendre coefficients of p, q, w on every element, in t = (2x - a - b)/(b - a).

    ``edges`` (E+1,), ``layer`` (E,) the layer of each element; ``p``, ``q``, ``w`` (E, d+1), the factor
    r^g included and 1/p inverted. Bounds, each (E,), for the coefficient as written against its
    polynomial, rounding included:

    ``p_error`` of sup |p - p~|/p; ``q_error`` of sup |q - q~|; ``w_error`` of sup |w - w~|/w (0 where w
    is zero throughout; inf where w vanishes at a place that its polynomial cannot follow exactly);
    ``w_absolute`` of sup |w - w~|, always finite.

    With ``left_map`` or ``right_map`` the outermost element there is an end element
    (:mod:`.end_elements`): its rows hold P, R and W, powers of y/h divided out, as series in tau = 2 t - 1 at
    the left and 1 - 2 t at the right, y = h t^m, and its errors are those of P, R, W.
    """

    edges: FloatArray
    layer: IntArray
    p: FloatArray
    q: FloatArray
    w: FloatArray
    p_error: FloatArray
    q_error: FloatArray
    w_error: FloatArray
    w_absolute: FloatArray
    left_map: EndMap | None = None
    right_map: EndMap | None = None

    @property
    def elements(self) -> int:
        """The number of elements."""
        return len(self.layer)

    @property
    def end_maps(self) -> tuple[tuple[int, EndMap], ...]:
        """(element, its exponents) of the end elements."""
        ends = ((0, self.left_map), (self.elements - 1, self.right_map))
        return tuple((element, end) for element, end in ends if end is not None)

    @property
    def plain(self) -> npt.NDArray[np.bool_]:
        """(E,) which elements are not end elements."""
        mask = np.ones(self.elements, dtype=bool)
        mask[[element for element, _ in self.end_maps]] = False
        return mask


@dataclass(frozen=True, eq=False)
class Ranges:
    """Bounds of the coefficients as written, and of their means, on the pieces between ``edges`` (P+1,);
    arrays (P,).
    """

    edges: FloatArray
    p_lower: FloatArray
    p_upper: FloatArray
    q_lower: FloatArray
    q_upper: FloatArray
    w_lower: FloatArray
    w_upper: FloatArray
    p_mean_lower: FloatArray
    p_mean_upper: FloatArray
    q_mean_lower: FloatArray
    q_mean_upper: FloatArray
    w_mean_lower: FloatArray
    w_mean_upper: FloatArray


def restrict(mesh: CoefficientMesh, edges: FloatArray) -> CoefficientMesh:
    """The same polynomials on a finer mesh whose ``edges`` contain the old ones.

    The old polynomials are re-expanded (no new approximation is made), error bounds are inherited and
    the rounding of the new coefficients is added. Elements that are not divided keep their
    coefficients bit for bit. Raises ValueError when an old edge is missing.
    """
    edges = np.asarray(edges, dtype=np.float64)
    place = np.searchsorted(edges, mesh.edges)
    if len(edges) < 2 or place[-1] >= len(edges) or not np.array_equal(edges[place], mesh.edges):
        raise ValueError("the finer mesh must contain every edge of the coarser one")
    counts = np.diff(place)
    parent = np.repeat(np.arange(mesh.elements), counts)
    divided = np.flatnonzero(counts[parent] > 1)
    arrays = {name: getattr(mesh, name)[parent] for name in _PER_ELEMENT}
    fine = replace(mesh, edges=edges, **arrays)
    if divided.size == 0:
        return fine
    shift, stretch = _maps(mesh.edges, parent[divided], edges[divided], edges[divided + 1])
    p, p_change = _divided(mesh.p[parent[divided]], shift, stretch)
    q, q_change = _divided(mesh.q[parent[divided]], shift, stretch)
    w, w_change = _divided(mesh.w[parent[divided]], shift, stretch)
    fine.p[divided], fine.q[divided], fine.w[divided] = p, q, w
    fine.p_error[divided] += p_change / positive_floor(p)
    fine.q_error[divided] += q_change
    fine.w_absolute[divided] += w_change
    floor = positive_floor(w)
    with np.errstate(divide="ignore", invalid="ignore"):
        relative = np.where(w_change > 0, np.where(floor > 0, w_change / floor, np.inf), 0.0)
    # A zero at the end may have been rounded to either side of zero.
    touching = np.flatnonzero((floor <= 1e-10 * w[:, 0]) & (w_change > 0))
    _keep_zeros(mesh, fine, parent, divided, touching, relative, (shift, stretch))
    fine.w_error[divided] += relative
    return fine


_PER_ELEMENT = ("layer", "p", "q", "w", "p_error", "q_error", "w_error", "w_absolute")


def _maps(coarse: FloatArray, parent: IntArray, left: FloatArray, right: FloatArray) -> tuple[Any, Any]:
    """shift, stretch (F,): the parent's t is shift + stretch tau on the piece from left to right."""
    a, b = coarse[parent].astype(EXTENDED), coarse[parent + 1].astype(EXTENDED)
    width = b - a
    return ((left - a) + (right - b)) / width, (right - left) / width


def _divided(series: FloatArray, shift: Any, stretch: Any) -> tuple[FloatArray, FloatArray]:
    """Re-expanded series in double, with a bound of the change that rounding made (F,)."""
    if series.shape[1] == 1 or not np.any(series[:, 1:]):
        return series.copy(), np.zeros(len(series))
    exact = reexpanded(series, shift, stretch)
    rounded = exact.astype(np.float64)
    size = np.abs(series).sum(axis=1)
    # Recurrence and sums in extended precision: a few units of d^2, measured well below this.
    extended = 4.0 * series.shape[1] ** 2 * EXTENDED_UNIT * size
    return rounded, UNIT * np.abs(rounded).sum(axis=1) + extended


def positive_floor(series: FloatArray) -> FloatArray:
    """A lower bound of each polynomial on [-1, 1], 0 where none above 0 was found."""
    lower = series[:, 0] - np.abs(series[:, 1:]).sum(axis=1)
    weak = np.flatnonzero(lower <= 0.25 * series[:, 0])
    if weak.size and series.shape[1] > 1:
        lower[weak] = np.maximum(lower[weak], piece_bounds(series[weak])[0].min(axis=1))
    return np.asarray(np.maximum(lower, 0.0))


def piece_bounds(series: FloatArray, pieces: int = 16) -> tuple[FloatArray, FloatArray]:
    """Lower and upper bounds (F, pieces) on equal parts of the element, by |c_0| -+ sum |c_j|."""
    degree = series.shape[1] - 1
    fine = np.tensordot(series, _piece_matrices(degree, pieces), axes=(1, 1))
    rounding = 2 * (degree + 2) * UNIT * np.abs(series).sum(axis=1)[:, np.newaxis]
    spread = np.abs(fine[..., 1:]).sum(axis=2) + rounding
    return fine[..., 0] - spread, fine[..., 0] + spread


@lru_cache(maxsize=64)
def _piece_matrices(degree: int, pieces: int) -> FloatArray:
    """(pieces, degree+1, degree+1): row j holds the series of P_j on each part."""
    count = degree + 1
    centres = (2 * np.arange(pieces, dtype=EXTENDED) + 1 - pieces) / pieces
    fine = reexpanded(
        np.tile(np.eye(count), (pieces, 1)),
        np.repeat(centres, count),
        np.full(count * pieces, EXTENDED(1) / pieces),
    )
    return np.asarray(fine.reshape(pieces, count, count).astype(np.float64))


def _keep_zeros(
    mesh: CoefficientMesh,
    fine: CoefficientMesh,
    parent: IntArray,
    divided: IntArray,
    touching: IntArray,
    relative: FloatArray,
    maps: tuple[Any, Any],
) -> None:
    """Where the parent's w vanishes exactly at an end, its outermost part must do so too."""
    for position in touching:
        element = divided[position]
        above = parent[element]
        for side, shared in (
            (-1, fine.edges[element] == mesh.edges[above]),
            (1, fine.edges[element + 1] == mesh.edges[above + 1]),
        ):
            order = vanishing_order(mesh.w[above], side) if shared else 0
            if order == 0:
                continue
            series = reexpanded(
                mesh.w[above : above + 1], maps[0][position : position + 1], maps[1][position : position + 1]
            )[0]
            fine.w[element], change = vanishing(series, side, order)
            quotient = quotient_floor(fine.w[element], side, order)
            relative[position] = change / quotient if quotient > 0 else np.inf


def quotient_floor(series: FloatArray, side: int, order: int) -> float:
    """A lower bound on [-1, 1] of series / (1 -+ t)^order for a series that vanishes so; 0 if none."""
    quotient = series.astype(EXTENDED)
    for _ in range(order):
        quotient = divided_by_distance(quotient, side)
    return float(positive_floor(quotient.astype(np.float64)[np.newaxis])[0])


def divided_by_distance(series: Any, side: int) -> Any:
    """The series f with (1 + t) f (side -1) or (1 - t) f (side 1) equal to ``series``, one degree lower."""
    degree = len(series) - 1
    quotient = np.zeros(degree, dtype=series.dtype)
    # Row k+1 of times_distance: -side ((k+1)/(2k+1) f_k + (k+2)/(2k+5) f_{k+2}) + f_{k+1}.
    for k in range(degree - 1, -1, -1):
        value = series[k + 1]
        if k + 1 < degree:
            value = value - quotient[k + 1]
        if k + 2 < degree:
            value = value + side * quotient[k + 2] * (k + 2) / EXTENDED(2 * k + 5)
        quotient[k] = -side * value * (2 * k + 1) / EXTENDED(k + 1)
    return quotient


def ranges(mesh: CoefficientMesh, cuts: IntArray | int) -> Ranges:
    """Bounds of p, q, w as written on ``cuts`` (E,) equal parts of every element, errors included.

    From c_0 -+ sum |c_j| of the polynomial re-expanded on the part, so they close up like the length of
    the part times the slope. ``p_lower`` is positive; ``w_lower`` is never negative.
    """
    cuts = np.broadcast_to(np.asarray(cuts, dtype=np.int64), (mesh.elements,))
    parent = np.repeat(np.arange(mesh.elements), cuts)
    first = np.cumsum(cuts) - cuts
    local = np.arange(len(parent)) - first[parent]
    a, b = mesh.edges[parent], mesh.edges[parent + 1]
    left = a + (b - a) * (local / cuts[parent])
    edges = np.append(left, mesh.edges[-1])
    shift, stretch = _maps(mesh.edges, parent, edges[:-1], edges[1:])
    bounds = {name: _bounded(getattr(mesh, name), parent, shift, stretch) for name in ("p", "q", "w")}
    up, down = 1 + 4 * UNIT, 1 - 4 * UNIT
    p_error, w_error = mesh.p_error[parent], mesh.w_error[parent]
    w_absolute, q_error = mesh.w_absolute[parent], mesh.q_error[parent] * up
    with np.errstate(divide="ignore", invalid="ignore"):
        p_upper = np.where(p_error < 1, bounds["p"][1] / (1 - p_error), np.inf) * up
        w_relative = np.where(w_error < 1, bounds["w"][1] / (1 - w_error), np.inf)
        w_scaled = np.where(np.isfinite(w_error), bounds["w"][0] / (1 + w_error), 0.0)
    w_lower = np.maximum(np.maximum(w_scaled, bounds["w"][0] - w_absolute), 0.0) * down
    w_upper = np.maximum(np.minimum(w_relative, bounds["w"][1] + w_absolute), 0.0) * up
    q_low, q_high = bounds["q"][:2]
    means = {name: bounds[name][2] for name in bounds}
    slack = {name: 4 * UNIT * np.abs(means[name]) + bounds[name][3] for name in bounds}
    with np.errstate(divide="ignore", invalid="ignore"):
        p_mean_upper = np.where(p_error < 1, (means["p"] + slack["p"]) / (1 - p_error), np.inf)
    return Ranges(
        edges,
        np.maximum(bounds["p"][0], 0.0) / (1 + p_error) * down,
        p_upper,
        q_low - q_error - 4 * UNIT * np.abs(q_low),
        q_high + q_error + 4 * UNIT * np.abs(q_high),
        w_lower,
        w_upper,
        (means["p"] - slack["p"]) / (1 + p_error),
        p_mean_upper,
        means["q"] - slack["q"] - q_error,
        means["q"] + slack["q"] + q_error,
        np.maximum(means["w"] - slack["w"] - w_absolute, 0.0),
        means["w"] + slack["w"] + w_absolute,
    )


def _bounded(
    series: FloatArray, parent: IntArray, shift: Any, stretch: Any
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Lower and upper bound, mean, and the rounding of the mean, of each part."""
    rough = np.any(series[:, 1:], axis=1)[parent]
    lower, upper, mean = (series[parent, 0].copy() for _ in range(3))
    rounding = np.zeros(len(parent))
    part = np.flatnonzero(rough)
    if part.size == 0:
        return lower, upper, mean, rounding
    fine, change = _divided(series[parent[part]], shift[part], stretch[part])
    spread = (np.abs(fine[:, 1:]).sum(axis=1) + change) * (1 + 32 * UNIT)
    lower[part], upper[part] = fine[:, 0] - spread, fine[:, 0] + spread
    mean[part], rounding[part] = fine[:, 0], change
    # Half a part's variation or more: look closer before giving away the sign.
    weak = part[lower[part] <= 0.5 * upper[part]]
    if weak.size:
        closer = piece_bounds(fine[np.searchsorted(part, weak)])
        lower[weak] = np.maximum(lower[weak], closer[0].min(axis=1))
        upper[weak] = np.minimum(upper[weak], closer[1].max(axis=1))
    return lower, upper, mean, rounding
