"""Exact counts of a comparison problem whose eigenvalues lie below the true ones.

On each of many short pieces p and q are replaced by lower bounds and w by the bound that makes -nu w
smallest: the form K - nu M can only fall, and with it every eigenvalue (the min-max principle: Weinstein and
Stenger, Methods of Intermediate Problems for Eigenvalues, 1972, ch. 1). With constant pieces the solution is
trigonometric or hyperbolic and its zeros are counted exactly (Sturm's oscillation theorem), independent of
every element of the discretisation:

    count(nu) <= m   implies   lambda_m >= nu.

Where a coefficient varies little over a piece, its mean less a term of second order serves instead of its
least value (:mod:`.averages`).

The state is (u, p u') with u >= 0, rescaled freely; a change of sign adds one to the count.

Coupled ends, u(b) = e^{i theta} u(a): with u(a) = 0 there is one condition more, so that coupling adds at
most one to the count of that problem (one negative pivot), and does so exactly if (tr M - 2 cos theta) / M_12
< 0 for the matrix M that carries (u, p u') from a to b; M_12 has the sign of (-1)^zeros.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from modewright_service.core.approximation import CoefficientMesh, ranges
from modewright_service.core.averages import Averages, averages
from modewright_service.core.end_comparison import EndPiece, end_piece
from modewright_service.core.problem import EndTerm, Resolved

__all__ = ["Comparison", "build_comparison"]

Array = NDArray[np.float64]
IntArray = NDArray[np.int64]

# Pieces between two looks at whether the solve is still wanted: some milliseconds of work.
_POLL_EVERY = 64


@dataclass(frozen=True, eq=False)
class Comparison:
    """Constant pieces, left to right.

    length, p, q: (P,). w_lower, w_upper: (P,), used for nu < 0 and nu >= 0. resistance, spring, mass: (P,)
    point terms at the right end of each piece (the mass and spring before the resistance). left, right: the
    ends. means: the bounds of second order. factor: u(b) / u(a) where they are coupled. left_piece,
    right_piece: what stands for the end elements, whose places among the pieces are left out.
    """

    length: Array
    p: Array
    q: Array
    w_lower: Array
    w_upper: Array
    resistance: Array
    spring: Array
    mass: Array
    left: EndTerm
    right: EndTerm
    means: Averages
    factor: complex | None = None
    left_piece: EndPiece | None = None
    right_piece: EndPiece | None = None

    @property
    def pieces(self) -> int:
        return int(self.length.size)

    def count(self, nu: Array, *, fraction: float = 1.0, poll: Callable[[], None] | None = None) -> IntArray:
        """(T,) eigenvalues below each nu; fraction multiplies p and 1/R (a bound of part of the energy)."""
        with np.errstate(over="ignore", under="ignore"):
            values = np.asarray(nu, dtype=np.float64)
            count = _count(self, values, fraction, poll)
            return count if self.factor is None else count + _closing(self, values, fraction, count, poll)


def build_comparison(mesh: CoefficientMesh, resolved: Resolved, cuts: IntArray) -> Comparison:
    """The comparison problem with element e of `mesh` cut into cuts[e] pieces."""
    bounds = ranges(mesh, cuts)
    length = np.diff(bounds.edges)
    resistance, spring, mass = np.zeros((3, length.size))
    for joint in resolved.joints:
        piece = int(np.argmin(np.abs(bounds.edges[1:] - joint.x)))
        resistance[piece], spring[piece], mass[piece] = joint.resistance, joint.spring, joint.mass
    ends: list[EndPiece | None] = [None, None]
    for element, end in mesh.end_maps:
        piece = 0 if element == 0 else length.size - 1
        ends[0 if element == 0 else 1] = end_piece(mesh, bounds, element, piece, end)
    if ends[0] is not None:
        # what hangs on the inner node of the left end element comes after it
        ends[0] = replace(ends[0], spring=ends[0].spring + spring[0])
    inside = slice(0 if ends[0] is None else 1, length.size - (0 if ends[1] is None else 1))
    return Comparison(
        length[inside],
        bounds.p_lower[inside],
        bounds.q_lower[inside],
        bounds.w_lower[inside],
        bounds.w_upper[inside],
        resistance[inside],
        spring[inside],
        mass[inside],
        resolved.left,
        resolved.right,
        averages(bounds, float(bounds.edges[-1] - bounds.edges[0])).part(inside),
        resolved.factor,
        ends[0],
        ends[1],
    )


def _count(c: Comparison, nu: Array, fraction: float, poll: Callable[[], None] | None) -> IntArray:
    count = np.zeros(nu.size, dtype=np.int64)
    fixed = EndTerm(dirichlet=True)
    left, right = (c.left, c.right) if c.factor is None else (fixed, fixed)
    if c.left_piece is None:
        u, v = _start(left, nu, fraction, count)
    else:
        u = np.ones_like(nu)
        v, zeros = c.left_piece.stiffness(nu, fraction)
        count += zeros
    for j, p, load in _pieces(c, nu, fraction, poll):
        u, v = _advance(u, v, c.length[j], p, load, count)
        if c.spring[j] != 0.0 or c.mass[j] != 0.0:
            v = v + (c.spring[j] - nu * c.mass[j]) * u
        if c.resistance[j] > 0.0:
            u, v = _through(u, v, c.resistance[j] / fraction, count)
    if c.right_piece is not None:
        stiffness, zeros = c.right_piece.stiffness(nu, fraction)
        count += zeros + ((v + stiffness * u) < 0.0)
        return count
    return _finish(right, nu, fraction, u, v, count)


def _closing(
    c: Comparison, nu: Array, fraction: float, zeros: IntArray, poll: Callable[[], None] | None
) -> IntArray:
    """(T,) 1 where coupling the ends adds an eigenvalue to the `zeros` with u(a) = u(b) = 0."""
    # u and p u' of the solutions that start as (1, 0) and (0, 1), over e^log
    m = np.zeros((2, 2, nu.size))
    m[0, 0] = m[1, 1] = 1.0
    log = np.zeros(nu.size)
    for j, p, load in _pieces(c, nu, fraction, poll):
        h = c.length[j]
        square = -load / p
        root = np.sqrt(np.abs(square))
        phase = root * h
        small = phase < 1e-8
        root = np.where(small, 1.0, root)
        turning = (square > 0.0) & ~small
        tangent = np.tanh(phase)
        # a decaying piece is divided by its cosh
        diagonal = np.where(turning, np.cos(phase), 1.0)
        over = np.where(small, h / p, np.where(turning, np.sin(phase), tangent) / (p * root))
        under = np.where(small, h * load, np.where(turning, -np.sin(phase), tangent) * (p * root))
        log += np.where(turning | small, 0.0, phase + np.log1p(np.exp(-2.0 * phase)) - np.log(2.0))
        m = np.stack([diagonal * m[0] + over * m[1], under * m[0] + diagonal * m[1]])
        m[1] += (c.spring[j] - nu * c.mass[j]) * m[0]
        m[0] += c.resistance[j] / fraction * m[1]
        # rows have different units: a common factor keeps them within range
        size = np.abs(m).max(axis=(0, 1))
        m /= size
        log += np.log(size)
    cosine = complex(c.factor or 1.0).real
    trace = m[0, 0] + m[1, 1] - 2.0 * cosine * np.exp(np.minimum(-log, 700.0))
    return np.asarray(trace * np.where(zeros % 2 == 0, 1.0, -1.0) < 0.0, dtype=np.int64)


def _pieces(
    c: Comparison, nu: Array, fraction: float, poll: Callable[[], None] | None
) -> Iterator[tuple[int, Array, Array]]:
    """Pieces from left to right with p and q - nu w (T,) on each."""
    negative = nu < 0.0
    for j in range(c.pieces):
        if poll is not None and j % _POLL_EVERY == 0:
            poll()
        load = c.q[j] - nu * np.where(negative, c.w_lower[j], c.w_upper[j])
        p, mean, usable = c.means.piece(j, nu, fraction)
        yield j, np.where(usable, p, fraction * c.p[j]), np.where(usable, mean, load)


def _start(end: EndTerm, nu: Array, fraction: float, count: IntArray) -> tuple[Array, Array]:
    one = np.ones_like(nu)
    if end.dirichlet:
        return np.zeros_like(nu), one
    if end.lump is not None:
        mass, film, resistance = end.lump
        return _through(one, film - nu * mass, resistance / fraction, count)
    return one, end.stiffness - nu * end.mass


def _finish(end: EndTerm, nu: Array, fraction: float, u: Array, v: Array, count: IntArray) -> IntArray:
    if end.dirichlet:
        return count
    if end.lump is not None:
        mass, film, resistance = end.lump
        u, v = _through(u, v, resistance / fraction, count)
        stiffness = film - nu * mass
    else:
        stiffness = end.stiffness - nu * end.mass
    count += (v + stiffness * u) < 0.0
    return count


def _through(u: Array, v: Array, resistance: float, count: IntArray) -> tuple[Array, Array]:
    """Across a resistance: [u] = R p u'."""
    return _positive(u + resistance * v, v, count)


def _positive(u: Array, v: Array, count: IntArray) -> tuple[Array, Array]:
    negative = u < 0.0
    count += negative
    sign = np.where(negative, -1.0, 1.0)
    return u * sign, v * sign


def _advance(u: Array, v: Array, h: float, p: Array, load: Array, count: IntArray) -> tuple[Array, Array]:
    """Over one piece of constant p and load = q - nu w; u >= 0 in and out, the larger of |u|, |v| h / p
    normalised to one.
    """
    square = -load / p
    phase2 = square * (h * h)
    root = np.sqrt(np.abs(square))
    # below 1e-16 in the squared phase both branches are the straight line u + v h / p
    small = np.abs(phase2) < 1e-16
    root = np.where(small, 1.0, root)
    phase = root * h
    impedance = p * root

    turning = (phase2 > 0.0) & ~small
    angle = np.arctan2(impedance * u, v) + np.where(turning, phase, 0.0)
    turns = np.floor(angle / np.pi)
    rest = angle - turns * np.pi
    u_turn, v_turn = np.sin(rest) / impedance, np.cos(rest)
    count += np.where(turning, turns, 0.0).astype(np.int64)

    tangent = np.tanh(np.where(turning, 0.0, phase))
    reach = np.where(small, h / p, tangent / impedance)
    u_flat = u + v * reach
    v_flat = v + np.where(small, h * load, impedance * tangent) * u
    negative = ~turning & (u_flat < 0.0)
    count += negative
    sign = np.where(negative, -1.0, 1.0)

    u = np.where(turning, np.maximum(u_turn, 0.0), u_flat * sign)
    v = np.where(turning, v_turn, v_flat * sign)
    size = np.maximum(np.abs(u), np.abs(v) * (h / p))
    size = np.where(size > 0.0, size, 1.0)
    return u / size, v / size
