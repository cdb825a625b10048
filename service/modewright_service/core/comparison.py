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
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from modewright_service.core.approximation import CoefficientMesh, ranges
from modewright_service.core.averages import Averages, averages
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
    ends. means: the bounds of second order.
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

    @property
    def pieces(self) -> int:
        return int(self.length.size)

    def count(self, nu: Array, *, fraction: float = 1.0, poll: Callable[[], None] | None = None) -> IntArray:
        """(T,) eigenvalues below each nu; fraction multiplies p and 1/R (a bound of part of the energy)."""
        with np.errstate(over="ignore", under="ignore"):
            return _count(self, np.asarray(nu, dtype=np.float64), fraction, poll)


def build_comparison(mesh: CoefficientMesh, resolved: Resolved, cuts: IntArray) -> Comparison:
    """The comparison problem with element e of `mesh` cut into cuts[e] pieces."""
    bounds = ranges(mesh, cuts)
    length = np.diff(bounds.edges)
    resistance, spring, mass = np.zeros((3, length.size))
    for joint in resolved.joints:
        piece = int(np.argmin(np.abs(bounds.edges[1:] - joint.x)))
        resistance[piece], spring[piece], mass[piece] = joint.resistance, joint.spring, joint.mass
    return Comparison(
        length,
        bounds.p_lower,
        bounds.q_lower,
        bounds.w_lower,
        bounds.w_upper,
        *(resistance, spring, mass),
        *(resolved.left, resolved.right),
        averages(bounds, float(bounds.edges[-1] - bounds.edges[0])),
    )


def _count(c: Comparison, nu: Array, fraction: float, poll: Callable[[], None] | None) -> IntArray:
    count = np.zeros(nu.size, dtype=np.int64)
    u, v = _start(c.left, nu, fraction, count)
    for j, p, load in _pieces(c, nu, fraction, poll):
        u, v = _advance(u, v, c.length[j], p, load, count)
        if c.spring[j] != 0.0 or c.mass[j] != 0.0:
            v = v + (c.spring[j] - nu * c.mass[j]) * u
        if c.resistance[j] > 0.0:
            u, v = _through(u, v, c.resistance[j] / fraction, count)
    return _finish(c.right, nu, fraction, u, v, count)


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
