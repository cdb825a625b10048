"""Discs that cover Bernstein ellipses, and the interpolation error that a bound on them certifies.

A function that is analytic inside the ellipse with foci -1, 1 and half-axes (rho +- 1/rho)/2, and there
at most M in modulus, has Chebyshev coefficients |a_k| <= 2 M rho^-k. Interpolation of degree m in the
m+1 Chebyshev nodes of the first kind folds each a_k, k > m, once onto a lower coefficient, so

    sup |f - f_m| <= 2 sum_(k>m) |a_k| <= 4 M rho^-m / (rho - 1).

L. N. Trefethen, Approximation Theory and Approximation Practice (2013), theorems 8.1 and 8.2 (there
for the points of the second kind; the folding is the same up to signs).

The coefficients are real on the real line, so the upper half of the ellipse is enough.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from itertools import pairwise

import numpy as np
import numpy.typing as npt

RHO = (1.7, 2.5, 4.0, 5.5, 8.0, 14.0, 30.0)
# Discs to each ring between two ellipses: enough that circular arithmetic does not lose much, few
# enough that a round of bisection stays well below a millisecond per coefficient.
_PER_RING = 6
_BOUNDARY = 64


@dataclass(frozen=True, eq=False)
class Cover:
    """Discs (centre, radius) (n,) in the plane of t; the ellipse rho_k needs those with ``ring`` <= k."""

    centre: npt.NDArray[np.complex128]
    radius: npt.NDArray[np.float64]
    ring: npt.NDArray[np.int64]


@lru_cache(maxsize=1)
def cover() -> Cover:
    """The discs for all ellipses of RHO: one to each cell of the annulus |w| <= rho, t = (w + 1/w)/2."""
    centres, radii, rings = [], [], []
    inner = 1.0
    for ring, outer in enumerate(RHO):
        angles = np.linspace(0.0, np.pi, _PER_RING + 1)
        for start, stop in pairwise(angles):
            boundary = _joukowski(_cell_boundary(inner, outer, start, stop))
            low, high = boundary.real.min(), boundary.real.max()
            bottom, top = boundary.imag.min(), boundary.imag.max()
            centre = complex((low + high) / 2, (bottom + top) / 2)
            # The boundary is sampled; its chords stay within this margin of it.
            radii.append(1.01 * float(np.abs(boundary - centre).max()))
            centres.append(centre)
            rings.append(ring)
        inner = outer
    return Cover(np.array(centres), np.array(radii), np.array(rings))


def _joukowski(w: npt.NDArray[np.complex128]) -> npt.NDArray[np.complex128]:
    return (w + 1 / w) / 2


def _cell_boundary(inner: float, outer: float, start: float, stop: float) -> npt.NDArray[np.complex128]:
    arc = np.exp(1j * np.linspace(start, stop, _BOUNDARY))
    ray = np.linspace(inner, outer, _BOUNDARY)
    return np.concatenate((inner * arc, outer * arc, ray * arc[0], ray * arc[-1]))


def truncation(bounds: npt.NDArray[np.float64], degree: int, order: int = 0) -> npt.NDArray[np.float64]:
    """(K,) bounds of sup |g - g_m| for m = ``degree`` from bounds (K, n) of |f| on the discs of the cover.

    g is f itself, or f / (1 -+ t)^order for an f with a zero of that order at t = +-1: on the ellipse the
    distance from the focus is at least (rho + 1/rho)/2 - 1, and the maximum principle carries the
    quotient's bound inside.
    """
    discs = cover()
    best = np.full(len(bounds), np.inf)
    running = np.zeros(len(bounds))
    for ring, rho in enumerate(RHO):
        running = np.maximum(running, bounds[:, discs.ring == ring].max(axis=1))
        gap = (rho + 1 / rho) / 2 - 1
        best = np.minimum(best, 4 * running / gap**order * rho**-degree / (rho - 1))
    return best
