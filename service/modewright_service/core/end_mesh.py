"""End elements as parts of a mesh: cutting them, and what phases and integrals need of them."""

from __future__ import annotations

import itertools
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from . import coefficients
from .coefficients import CoefficientMesh, positive_floor
from .description import FloatArray
from .end_elements import EndMap
from .legendre import (
    EXTENDED,
    UNIT,
    chebyshev_interpolation,
    differentiated,
    lebesgue,
    reexpanded,
    times_distance,
    vandermonde,
)

__all__ = [
    "EndSamples",
    "comparable_weight",
    "cut_ends",
    "end_samples",
    "factored_values",
    "graded",
    "inner_springs",
    "restrict",
    "roomy",
    "with_ends",
]

# Degree of the polynomials beside a cut end element: (y/h)^alpha on [1/2, 1] converges by 5.8 a degree.
_DEGREE = 24
# Truncation admitted, relative to the coefficient; parts that need more are cut at the geometric mean.
_TOLERANCE = 4e-16
# Last coefficients that are dropped may add up to this share.
_DROPPED = 4e-17
# Below this ratio of distances the parts are cut no further, whatever the tails say.
_SMALLEST_RATIO = 1.05


def factored_values(
    end: EndMap, width: Any, series: tuple[Any, Any, Any], y: Any, left: bool
) -> tuple[Any, Any, Any]:
    """p, q, w at distances y in (0, width] from the end, in the precision of y.

    series: Legendre coefficients (d+1,) of P, R, W in tau.
    """
    part = y / width
    t = part ** (1.0 / end.m)
    tau = 2 * t - 1 if left else 1 - 2 * t
    table = vandermonde(tau, series[0].size - 1)
    big_p, r, big_w = (table @ c.astype(y.dtype) for c in series)
    slope = table @ differentiated(series[0].astype(y.dtype)) * (2 if left else -2)
    scale = part**end.alpha
    s = end.s
    barrier = s * (s - 1 + end.alpha) * big_p + (s / end.m) * t * slope
    return scale * big_p, part**end.q_exponent * r + scale * barrier / y**2, part**end.gamma * big_w


@dataclass(frozen=True, eq=False)
class _Part:
    """A plain element cut from an end element, in distances from the end."""

    near: float
    far: float
    p: FloatArray
    q: FloatArray
    w: FloatArray
    p_error: float
    q_error: float
    w_error: float


def _fit(
    mesh: CoefficientMesh, element: int, end: EndMap, near: float, far: float, left: bool
) -> tuple[_Part, bool]:
    """Polynomials on the part between two distances, and whether they have converged."""
    width = float(mesh.edges[element + 1] - mesh.edges[element])
    nodes, project = chebyshev_interpolation(_DEGREE)
    low, high = EXTENDED(near), EXTENDED(far)
    # nodes ascend with x; the distance falls with x at a right end
    y = (low + high) / 2 + (high - low) / 2 * (nodes if left else -nodes)
    rows = (mesh.p[element], mesh.q[element], mesh.w[element])
    values = factored_values(end, EXTENDED(width), rows, y, left)
    series = [v @ project for v in values]
    tails = [float(np.abs(c[-3:]).sum()) * lebesgue(_DEGREE) for c in series]
    floors = [float(np.abs(v).min()) for v in (values[0], values[2])]
    largest = float(np.abs(values[1]).max())
    p_scale = float(np.abs(values[0]).max()) / far**2
    sizes = (floors[0], max(largest, 1e-3 * p_scale), floors[1])
    good = all(tail <= _TOLERANCE * size for tail, size in zip(tails, sizes, strict=True))
    rounded = []
    for c, size in zip(series, sizes, strict=True):
        short = c.astype(np.float64)
        short[np.cumsum(np.abs(short[::-1]))[::-1] <= _DROPPED * size] = 0.0
        rounded.append(short)
    change = [t + 2 * UNIT * float(np.abs(c).sum()) for t, c in zip(tails, rounded, strict=True)]
    p_error = float(mesh.p_error[element]) + change[0] / floors[0]
    w_error = float(mesh.w_error[element]) + (change[2] / floors[1] if floors[1] > 0.0 else 0.0)
    steep = max((near / width) ** end.q_exponent, (far / width) ** end.q_exponent)
    barrier = abs(end.s * (end.s - 1 + end.alpha)) + abs(end.s / end.m)
    q_error = float(mesh.q_error[element]) * steep + change[1]
    q_error += float(mesh.p_error[element]) * barrier * float(np.abs(values[0] / y**2).max())
    p, q, w = rounded
    return _Part(near, far, p, q, w, p_error, q_error, w_error), good


def _parts(mesh: CoefficientMesh, element: int, end: EndMap, cuts: list[float], left: bool) -> list[_Part]:
    """Plain parts between ascending distances `cuts`, cut further where a polynomial does not converge."""
    found = []
    pending = list(itertools.pairwise(cuts))
    while pending:
        near, far = pending.pop()
        part, good = _fit(mesh, element, end, near, far, left)
        if good or far / near < _SMALLEST_RATIO:
            found.append(part)
        else:
            middle = _on_grid(mesh, element, float(np.sqrt(near * far)), left)
            pending += [(near, middle), (middle, far)]
    return sorted(found, key=lambda part: part.near)


def _on_grid(mesh: CoefficientMesh, element: int, y: float, left: bool) -> float:
    """The distance of the double next to the point at distance y."""
    if left:
        a = float(mesh.edges[element])
        return (a + y) - a
    b = float(mesh.edges[element + 1])
    return b - (b - y)


def _inner(mesh: CoefficientMesh, element: int, end: EndMap, y: float, left: bool) -> CoefficientMesh:
    """The mesh whose end element reaches to distance y only; its far part is missing."""
    width = float(mesh.edges[element + 1] - mesh.edges[element])
    ratio = EXTENDED(y) / EXTENDED(width)
    c = ratio ** (1 / EXTENDED(end.m))
    shift = np.array([c - 1 if left else 1 - c])
    one = slice(element, element + 1)
    result = replace(mesh, **{name: getattr(mesh, name).copy() for name in _ROWS})
    for name, exponent in (("p", end.alpha), ("q", end.q_exponent), ("w", end.gamma)):
        series = reexpanded(getattr(mesh, name)[one], shift, np.array([c])) * ratio ** EXTENDED(exponent)
        getattr(result, name)[element] = series[0].astype(np.float64)
    rounding = {name: 2 * UNIT * np.abs(getattr(result, name)[one]).sum(axis=1) for name in ("p", "q", "w")}
    result.p_error[one] += rounding["p"] / positive_floor(result.p[one])
    result.w_error[one] += rounding["w"] / positive_floor(result.w[one])
    result.q_error[one] = mesh.q_error[one] * float(ratio**end.q_exponent) + rounding["q"]
    result.w_absolute[one] = mesh.w_absolute[one] * float(ratio**end.gamma) + rounding["w"]
    return result


_ROWS = ("p", "q", "w", "p_error", "q_error", "w_error", "w_absolute")


def cut_ends(mesh: CoefficientMesh, edges: FloatArray) -> CoefficientMesh:
    """`mesh` with its end elements cut at those of `edges` that lie inside them, or a little finer.

    The innermost part stays an end element; the others become plain ones, by interpolation of the factored
    coefficients in extended precision with the truncation estimated from the last coefficients.
    """
    for left in (True, False):
        end = mesh.left_map if left else mesh.right_map
        if end is None:
            continue
        element = 0 if left else mesh.elements - 1
        a, b = float(mesh.edges[element]), float(mesh.edges[element + 1])
        inside = edges[(edges > a) & (edges < b)]
        if inside.size:
            distances = np.sort(inside - a if left else b - inside)
            mesh = _cut(mesh, element, end, [*distances.tolist(), b - a], left)
    return mesh


def _cut(mesh: CoefficientMesh, element: int, end: EndMap, cuts: list[float], left: bool) -> CoefficientMesh:
    parts = _parts(mesh, element, end, cuts, left)
    inner = _inner(mesh, element, end, cuts[0], left)
    columns = max(mesh.p.shape[1], 1 + max(_last(c) for part in parts for c in (part.p, part.q, part.w)))
    arrays: dict[str, Any] = {}
    if not left:
        parts = parts[::-1]
    place = 1 if left else mesh.elements - 1
    for name in ("p", "q", "w"):
        rows = np.array([getattr(part, name) for part in parts])
        own = getattr(inner, name)
        old = np.zeros((mesh.elements, columns))
        old[:, : own.shape[1]] = own
        new = np.zeros((len(parts), columns))
        kept = min(columns, rows.shape[1])
        new[:, :kept] = rows[:, :kept]
        arrays[name] = np.insert(old, place, new, axis=0)
    for name in ("p_error", "q_error", "w_error"):
        arrays[name] = np.insert(getattr(inner, name), place, [getattr(part, name) for part in parts])
    w_absolute = [part.w_error * float(np.abs(part.w).sum()) for part in parts]
    arrays["w_absolute"] = np.insert(inner.w_absolute, place, w_absolute)
    a, b = float(mesh.edges[element]), float(mesh.edges[element + 1])
    points = [a + part.near if left else b - part.near for part in parts]
    edges = np.insert(mesh.edges, element + 1, points)
    layer = np.insert(mesh.layer, place, [mesh.layer[element]] * len(parts))
    return replace(mesh, edges=edges, layer=layer, **arrays)


def restrict(mesh: CoefficientMesh, edges: FloatArray) -> CoefficientMesh:
    """The same polynomials on a finer mesh whose ``edges`` contain the old ones
    (:func:`.coefficients.restrict`).

    Edges within an end element cut it (:func:`cut_ends`); the result may then have a few more.
    """
    edges = np.asarray(edges, dtype=np.float64)
    cut = cut_ends(mesh, edges)
    if cut is not mesh:
        edges = np.union1d(edges, cut.edges)
    return coefficients.restrict(cut, edges)


def _last(series: FloatArray) -> int:
    return int(np.flatnonzero(series).max(initial=0))


def graded(mesh: CoefficientMesh, chosen: list[int], share: float) -> CoefficientMesh:
    """The mesh with the end elements `chosen` cut down to `share` of their width, in steps of a quarter."""
    steps = int(np.ceil(np.log(1.0 / share) / np.log(4.0))) if share < 1.0 else 0
    edges = []
    for element in chosen:
        a, b = mesh.edges[element], mesh.edges[element + 1]
        distances = (b - a) * 0.25 ** np.arange(1, steps + 1)
        edges.append(a + distances if element == 0 else b - distances)
    return cut_ends(mesh, np.concatenate(edges)) if edges and steps else mesh


def with_ends(
    mesh: CoefficientMesh,
    ends: tuple[EndMap | None, EndMap | None],
    elements: tuple[CoefficientMesh | None, CoefficientMesh | None],
) -> CoefficientMesh:
    """`mesh` between the end elements given as meshes of one element each."""
    pieces = [piece for piece in (elements[0], mesh, elements[1]) if piece is not None]
    columns = max(piece.p.shape[1] for piece in pieces)
    arrays: dict[str, Any] = {}
    for name in ("p", "q", "w"):
        rows = [np.pad(c, ((0, 0), (0, columns - c.shape[1]))) for c in (getattr(m, name) for m in pieces)]
        arrays[name] = np.concatenate(rows)
    used = 1 + max(int(np.flatnonzero(c.any(axis=0)).max(initial=0)) for c in arrays.values())
    arrays = {name: np.ascontiguousarray(c[:, :used]) for name, c in arrays.items()}
    for name in ("layer", "p_error", "q_error", "w_error", "w_absolute"):
        arrays[name] = np.concatenate([getattr(piece, name) for piece in pieces])
    edges = np.concatenate([pieces[0].edges, *(piece.edges[1:] for piece in pieces[1:])])
    return CoefficientMesh(edges=edges, left_map=ends[0], right_map=ends[1], **arrays)


@dataclass(frozen=True, eq=False)
class EndSamples:
    """P, R, W of an end element at points z in (0, 1), with y = h z^(2 / kappa) and what makes phases of
    them.

    sqrt((lambda w - r) / p) dy = sqrt((lambda w - q) / p) dz with the numbers p, q, w (n,) given here.
    y: (n,) distances, in the order of z.
    """

    p: FloatArray
    q: FloatArray
    w: FloatArray
    y: FloatArray


def end_samples(mesh: CoefficientMesh, element: int, end: EndMap, z: FloatArray) -> EndSamples:
    """The end element seen in the variable in which its phase is even."""
    width = float(mesh.edges[element + 1] - mesh.edges[element])
    b = end.steps
    kappa = b / end.m
    t = z ** (2.0 / b)
    tau = 2.0 * t - 1.0 if element == 0 else 1.0 - 2.0 * t
    vander = vandermonde(tau, mesh.p.shape[1] - 1)
    p, r, w = vander @ mesh.p[element], vander @ mesh.q[element], vander @ mesh.w[element]
    scale = (2.0 * width / kappa) ** 2
    return EndSamples(
        p, scale * z ** (2.0 * (1 + end.flat) / b - 2.0) * r, scale * w, width * z ** (2.0 / kappa)
    )


def roomy(mesh: CoefficientMesh) -> CoefficientMesh:
    """The mesh with columns enough for :func:`comparable_weight`."""
    extra = max((end.w_steps for _, end in mesh.end_maps), default=0)
    if extra == 0:
        return mesh
    p, q, w = (np.pad(c, ((0, 0), (0, extra))) for c in (mesh.p, mesh.q, mesh.w))
    return replace(mesh, p=p, q=q, w=w)


def comparable_weight(mesh: CoefficientMesh) -> FloatArray:
    """(E, d+1): w as multiples of it can be added to q: on end elements W t^(b-1-f), as r is (y/h)^beta R.

    The columns must have room (:func:`roomy`).
    """
    weight = mesh.w.copy()
    for element, end in mesh.end_maps:
        series = mesh.w[element].astype(EXTENDED)
        for _ in range(end.w_steps):
            # 2 t = 1 + tau at the left, 1 - tau at the right
            series = times_distance(series, -1 if element == 0 else 1)[:-1] / 2
        weight[element] = series.astype(np.float64)
    return weight


def inner_springs(mesh: CoefficientMesh) -> list[tuple[bool, float]]:
    """(left?, p(h) s / h) of each end element: what its transformation leaves at the inner node."""
    found = []
    for element, end in mesh.end_maps:
        width = float(mesh.edges[element + 1] - mesh.edges[element])
        left = element == 0
        signs = 1.0 if left else (-1.0) ** np.arange(mesh.p.shape[1])
        found.append((left, float((mesh.p[element] * signs).sum()) * end.s / width))
    return found
