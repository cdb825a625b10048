"""Where the elements lie: fine enough in phase for the highest lambda asked for, in every layer.

The phase of a mode over an element is int sqrt(|lambda w - q| / p) dx, oscillating or decaying. A polynomial
of degree k resolves theta radians to rounding when k exceeds theta/2 + 3.6 (theta/2)^(1/3) by a few (the
decay of Bessel coefficients J_k(theta/2) in a Legendre expansion: Abramowitz and Stegun, Handbook of
Mathematical Functions, 1964, eqs. 9.3.1 and 10.1.47); variable coefficients need some more.
"""

from __future__ import annotations

from typing import Final

import numpy as np
from numpy.typing import NDArray

from modewright_service.core.approximation import CoefficientMesh, restrict
from modewright_service.core.end_mesh import end_samples

__all__ = ["bisect_elements", "choose_degree", "fundamental", "phase_at", "refine_for", "top_for_phase"]

Array = NDArray[np.float64]

# Gauss points a phase integral uses on each element; a square root's kink costs digits that are not needed.
_POINTS = 16
# Far over near distance of plain elements beside a singular end.
_RATIO = 4.0


def _sampled(mesh: CoefficientMesh, points: int = _POINTS) -> tuple[Array, Array, Array, Array]:
    """p, q, w (E, points) and the weights dx (E, points); on end elements what gives the same phases."""
    t, weight = np.polynomial.legendre.leggauss(points)
    vander = np.polynomial.legendre.legvander(t, mesh.p.shape[1] - 1).T
    dx = 0.5 * np.diff(mesh.edges)[:, None] * weight
    p, q, w = mesh.p @ vander, mesh.q @ vander, mesh.w @ vander
    for element, end in mesh.end_maps:
        if end.alpha != 1.0:
            # Langer's term: by Hardy's inequality a negative q0 p/y^2 binds nothing as long as D^2 >= 0
            left, right = mesh.edges[:-1, None], mesh.edges[1:, None]
            x = 0.5 * (left + right) + 0.5 * (right - left) * t
            y = x - mesh.edges[0] if element == 0 else mesh.edges[-1] - x
            lifted = q + 0.25 * (1.0 - end.alpha) ** 2 * p / y**2
            q = np.where((q < 0.0) & mesh.plain[:, None], np.minimum(lifted, 0.0), q)
    for element, end in mesh.end_maps:
        own = end_samples(mesh, element, end, 0.5 * (t + 1.0))
        p[element], q[element], w[element], dx[element] = own.p, own.q, own.w, 0.5 * weight
    return p, q, w, dx


def fundamental(mesh: CoefficientMesh) -> float:
    """Lambda = (pi / int sqrt(w/p) dx)^2; where w = 0 everywhere, (pi / b - a)^2 p in the mean instead."""
    p, _, w, dx = _sampled(mesh)
    travel = float((np.sqrt(np.maximum(w, 0.0) / p) * dx).sum())
    with np.errstate(over="ignore", under="ignore"):
        return float(np.square(np.float64(np.pi / travel))) if travel > 0.0 else 0.0


def phase_at(mesh: CoefficientMesh, lam: float) -> float:
    """int sqrt((lambda w - q)+ / p) dx; layers of w = 0, where lambda changes nothing, count for nothing."""
    p, q, w, dx = _sampled(mesh)
    q = np.where(w > 0.0, q, 0.0)
    return float((np.sqrt(np.maximum(lam * w - q, 0.0) / p) * dx).sum())


def top_for_phase(mesh: CoefficientMesh, phase: float, scale: float) -> float:
    """The lambda at which int sqrt((lambda w - q)+ / p) dx reaches `phase`.

    Divided by pi, that integral is about the number of eigenvalues below lambda.
    """
    low, high = 0.0, scale
    if phase_at(mesh, low) >= phase:
        low, high = -scale, 0.0
        while phase_at(mesh, low) >= phase:
            low, high = 2.0 * low, low
    else:
        while phase_at(mesh, high) < phase:
            low, high = high, 2.0 * high
    for _ in range(60):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if phase_at(mesh, middle) < phase else (low, middle)
    return high


# Degrees to choose from and the radians an element of that degree may hold: half as many terms again as
# constant coefficients would need, the reserve being for variable ones.
DEGREES: Final = ((32, 20.0), (24, 13.0), (16, 6.0), (10, 1.5))


def choose_degree(mesh: CoefficientMesh, low: float, top: float) -> tuple[int, float]:
    """(degree, phase): the pair of least cost, elements times k + 8, for all lambda in (low, top).

    Few long layers want high degrees, thousands of thin ones low degrees. Where the coefficients themselves
    need a high degree, so do the modes.
    """
    orders = mesh.p.shape[1] - 1
    per_element = _phases(mesh, low, top, _POINTS)
    best, least = DEGREES[0], np.inf
    for degree, phase in DEGREES:
        if degree < min(orders + 6, DEGREES[0][0]):
            continue
        cost = float(np.maximum(1.0, np.ceil(per_element / phase)).sum()) * (degree + 8)
        if cost < least:
            best, least = (degree, phase), cost
    return best


def _phases(mesh: CoefficientMesh, low: float, top: float, points: int) -> Array:
    """(E,) radians of each element, the larger of what lambda = low and top give."""
    p, q, w, dx = _sampled(mesh, points)
    density = np.sqrt(np.maximum(np.abs(top * w - q), np.abs(low * w - q)) / p)
    result: Array = (density * dx).sum(axis=1)
    return result


def refine_for(
    mesh: CoefficientMesh, low: float, top: float, phase: float, least: int, most: int
) -> CoefficientMesh:
    """Cut elements into parts of equal phase, at most `phase` each for every lambda in (low, top).

    least: elements wanted at least. most: where more would be needed, the phase allowed grows instead.
    """
    points = 32
    per_element = _phases(mesh, low, top, points)
    allowed = phase
    parts = np.maximum(1, np.ceil(per_element / allowed)).astype(np.int64)
    while parts.sum() > max(most, mesh.edges.size - 1):
        allowed *= 1.25
        parts = np.maximum(1, np.ceil(per_element / allowed)).astype(np.int64)
    if parts.sum() < least:
        parts = parts * int(np.ceil(least / parts.sum()))
    if int(parts.max()) == 1:
        return mesh
    t = np.linspace(-1.0, 1.0, 2 * points + 1)
    vander = np.polynomial.legendre.legvander(t, mesh.p.shape[1] - 1).T
    edges = [mesh.edges[:1]]
    ends = dict(mesh.end_maps)
    for e, n in enumerate(parts):
        a, b = mesh.edges[e], mesh.edges[e + 1]
        if n > 1 and e in ends:
            kappa = ends[e].steps / ends[e].m
            edges.append(_end_cuts(a, b, int(n), kappa, e == 0))
        elif n > 1:
            local_p, local_q, local_w = mesh.p[e] @ vander, mesh.q[e] @ vander, mesh.w[e] @ vander
            local = np.sqrt(
                np.maximum(np.abs(top * local_w - local_q), np.abs(low * local_w - local_q)) / local_p
            )
            # a floor keeps cuts inside where the density vanishes at a point
            local = local + 0.1 * local.max() + np.finfo(float).tiny
            travelled = np.concatenate([[0.0], np.cumsum(0.5 * (local[1:] + local[:-1]))])
            cuts = np.interp(np.arange(1, n) / n * travelled[-1], travelled, t)
            edges.append(a + 0.5 * (cuts + 1.0) * (b - a))
        edges.append(np.array([b]))
    return restrict(mesh, np.concatenate(edges))


def _end_cuts(a: float, b: float, parts: int, kappa: float, left: bool) -> Array:
    """Where an end element is cut into parts of equal phase, y = h z^(2 / kappa), neighbours not too unequal.

    A solution that is singular at the end has a polynomial of degree 32 on (y, 4 y) to 1e-15.
    """
    distances = (np.arange(1, parts) / parts) ** (2.0 / kappa)
    graded = [distances[0]]
    for far in [*distances[1:], 1.0]:
        between = int(np.ceil(np.log(far / graded[-1]) / np.log(_RATIO)))
        graded.extend(graded[-1] * (far / graded[-1]) ** (np.arange(1, between + 1) / between))
    inside = np.array(graded[:-1]) * (b - a)
    return a + inside if left else (b - inside)[::-1]


def bisect_elements(mesh: CoefficientMesh, marked: NDArray[np.bool_]) -> CoefficientMesh:
    """Halve the marked elements; a marked end element keeps a quarter of its width."""
    share = np.full(mesh.elements, 0.5)
    for element, _ in mesh.end_maps:
        share[element] = 1.0 / _RATIO if element == 0 else 1.0 - 1.0 / _RATIO
    middle = (mesh.edges[:-1] + share * np.diff(mesh.edges))[marked]
    return restrict(mesh, np.sort(np.concatenate([mesh.edges, middle])))
