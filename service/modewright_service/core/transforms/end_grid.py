"""Quadrature beside a singular end, where weight and modes are powers of the distance y times series.

Squares and products of fields and modes hold y^gamma times 1, y^s and y^(2 s), times series in y and in
y^(1/m). Where s and 1/m are whole numbers, one Gauss-Jacobi rule with the weight y^gamma is exact on the
part that touches the end. Elsewhere parts are graded towards the end, Gauss-Legendre on each and
Gauss-Jacobi on the last, which is so short that its integral is rounding whatever the powers.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from modewright.end_pieces import EndPiece
from modewright_service.core.end_elements import jacobi_rule
from modewright_service.core.quadrature import gauss_legendre

__all__ = ["EndNodes", "end_nodes"]

Floats = NDArray[np.float64]
Indices = NDArray[np.intp]

# Far over near distance of graded parts: a power between is a polynomial of degree 20 to 1e-15.
_RATIO: Final = 4.0
# Points beyond half the degree of what is polynomial, for powers on parts of that ratio.
_SPARE: Final = 12
_ROUNDING: Final = 1e-18
_MOST_PARTS: Final = 80


@dataclass(frozen=True, eq=False)
class EndNodes:
    """X points in the order of x; part: the part that each is in; xi: its coordinate; weight: of the inner
    product, w included.
    """

    part: Indices
    xi: Floats
    x: Floats
    weight: Floats


def end_nodes(piece: EndPiece, breaks: Floats, degree: int, field_degree: int) -> EndNodes:
    """Points on the parts between ascending `breaks` (P+1,) that cover the end element.

    degree: of the modes' series. field_degree: of the field in x on every part.
    """
    near, far = _distances(piece, breaks)
    whole = _whole(piece.s) and _whole(1.0 / piece.m) and piece.s >= 0.0
    part: list[int] = []
    low: list[float] = []
    high: list[float] = []
    for k, (a, b) in enumerate(zip(near.tolist(), far.tolist(), strict=True)):
        cuts = _graded(piece, a, b, whole)
        part += [k] * (len(cuts) - 1)
        low += cuts[:-1]
        high += cuts[1:]
    # degree in y of what is a power series there, w's own included
    span = (degree + 0.5 * (piece.w.size - 1)) / piece.m + max(piece.s, 0.0)
    found = [
        _touching(piece, b, span, field_degree, whole) if a == 0.0 else _apart(a, b, degree, field_degree)
        for a, b in zip(low, high, strict=True)
    ]
    counts = np.array([y.size for y, _ in found])
    y = np.concatenate([nodes for nodes, _ in found])
    weight = np.concatenate([weights for _, weights in found])
    # on the part that touches the end the rule holds (y/h)^gamma already
    held = np.repeat(np.array(low) == 0.0, counts)
    xi = (y / piece.width) ** (1.0 / piece.m)
    table = np.polynomial.legendre.legval(2.0 * xi - 1.0 if piece.left else 1.0 - 2.0 * xi, piece.w)
    weight = (
        weight * np.asarray(table, dtype=np.float64) * np.where(held, 1.0, (y / piece.width) ** piece.gamma)
    )
    x = piece.place + y if piece.left else piece.place - y
    order = np.argsort(y if piece.left else -y, kind="stable")
    index = np.repeat(np.array(part, dtype=np.intp), counts)
    return EndNodes(index[order], xi[order], x[order], weight[order])


def _whole(value: float) -> bool:
    return abs(value - round(value)) < 1e-12


def _distances(piece: EndPiece, breaks: Floats) -> tuple[Floats, Floats]:
    """The near and the far distance of every part."""
    y = breaks - piece.place if piece.left else piece.place - breaks
    y = np.clip(y, 0.0, piece.width)
    # the element's own ends exactly
    y[0 if piece.left else -1] = 0.0
    y[-1 if piece.left else 0] = piece.width
    return (y[:-1], y[1:]) if piece.left else (y[1:], y[:-1])


def _graded(piece: EndPiece, near: float, far: float, whole: bool) -> list[float]:
    """Ascending distances from near to far, no two neighbours but the first further apart than the ratio."""
    if near == 0.0:
        if whole:
            return [0.0, far]
        # the first power that is not whole, and how small the rest of its integral must become
        powers = [power for power in (piece.s, 2.0 * piece.s, 1.0 / piece.m) if not _whole(power)]
        power = max(piece.gamma + 1.0 + min([*powers, 2.0]), 0.1)
        steps = min(int(np.ceil(-np.log(_ROUNDING) / (power * np.log(_RATIO)))), _MOST_PARTS)
        return [0.0, *(far * _RATIO ** np.arange(-steps, 1.0)).tolist()]
    steps = max(1, int(np.ceil(np.log(far / near) / np.log(_RATIO))))
    return [near, *(near * (far / near) ** (np.arange(1, steps) / steps)).tolist(), far]


def _touching(
    piece: EndPiece, far: float, span: float, field_degree: int, whole: bool
) -> tuple[Floats, Floats]:
    count = int(np.ceil(max(span, field_degree + 0.5 * (piece.w.size - 1) / piece.m))) + 2
    nodes, weights = jacobi_rule(count if whole else min(count, 40), piece.gamma)
    return far * nodes, far * (far / piece.width) ** piece.gamma * weights


def _apart(near: float, far: float, degree: int, field_degree: int) -> tuple[Floats, Floats]:
    # a short part sees a short piece of a mode
    share = 1.0 - near / far
    count = int(np.ceil(degree * min(1.0, share + 0.25))) + field_degree + _SPARE
    nodes, weights = gauss_legendre(count)
    half = 0.5 * (far - near)
    return near + half * (1.0 + nodes), half * weights
