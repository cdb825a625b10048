"""Small problems and a quadrature of their own for the tests of the spectral core."""

from __future__ import annotations

import itertools
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from modewright.pieces import Pieces
from modewright.record import Record
from modewright_service.core.problem import Constant, Dirichlet, End, Interface, Layer, Problem


def layered(
    edges: Sequence[float],
    p: Sequence[float],
    w: Sequence[float],
    q: Sequence[float] | None = None,
    left: End | None = None,
    right: End | None = None,
    interfaces: Sequence[Interface] = (),
) -> Problem:
    """Layers of constant coefficients; Dirichlet ends unless told otherwise."""
    potentials = q if q is not None else [0.0] * len(p)
    layers = tuple(
        Layer(
            f"layer-{i}",
            float(a),
            float(b),
            Constant(float(p[i])),
            Constant(float(potentials[i])),
            Constant(float(w[i])),
        )
        for i, (a, b) in enumerate(itertools.pairwise(edges))
    )
    return Problem(layers, left or Dirichlet(), right or Dirichlet(), tuple(interfaces))


def gram(record: Record, points: int = 64) -> NDArray[np.float64]:
    """<phi_i, phi_j> by Gauss-Legendre quadrature on every element, masses included."""
    pieces = Pieces(record)
    t, weight = np.polynomial.legendre.leggauss(points)
    total = np.zeros((record.count, record.count))
    for a, b in zip(record.edges[:-1], record.edges[1:], strict=True):
        x = 0.5 * (a + b) + 0.5 * (b - a) * t
        phi = pieces.evaluate(x)
        total += (phi * (pieces.coefficient("w", x) * weight * 0.5 * (b - a))) @ phi.T
    for end, lump in ((record.left, record.left_lump), (record.right, record.right_lump)):
        if lump.size:
            total += end.mass * np.outer(lump, lump)
    for x, _, _, mass in record.joints:
        phi = pieces.evaluate(np.array([x]), side="left")[:, 0]
        total += mass * np.outer(phi, phi)
    return total


def relative(record: Record, difference: NDArray[np.float64]) -> NDArray[np.float64]:
    """`difference` in units of max(|lambda|, Lambda)."""
    scaled: NDArray[np.float64] = np.abs(difference) / np.maximum(np.abs(record.eigenvalues), record.scale)
    return scaled
