"""Coupled ends: the chain closed to a ring, u(b) = e^{i theta} u(a) and p u' likewise.

Links of :mod:`.condensed` are merged two by two from the left. Each keeps its pole c beside its two end
nodes; a merge eliminates the node between them together with the pole of whichever side gives the larger 2 x
2 pivot, so that nothing is divided by the near-zero pivot of a single node or a single pole (on a uniform
mesh all poles are met at once). What remains is one Hermitian 2 x 2 matrix in (u_a, c), whose inertia
completes the count, and
whose pencil with its mass matrix gives the corrections to the two nearest eigenvalues at a time: closed gaps,
where eigenvalues of periodic problems are double (Magnus and Winkler, Hill's Equation, 1966, ch. II), are
then as easy as open ones. In the notation of :mod:`.condensed`, X = (g, alpha, gamma, a1, a2, delta) left of
Y = (g', alpha', gamma', b1, b2, epsilon), with rho = gamma + alpha' + node terms, d = rho + g + g',
D = d epsilon - b1^2:

    G = g (g' epsilon + b1 b2) / D,      A = alpha + g (rho epsilon - b1 (b1 + b2)) / D,
    Gamma = gamma' + {g' rho epsilon - g' (b1 + b2)^2 - g b2 (b1 + b2) - b2^2 rho} / D.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from modewright_service.core.clusters import (
    EQUAL,
    Block,
    bubble_system,
    close_groups,
    inner_product,
    position,
    separate,
)
from modewright_service.core.condensed import (
    Chain,
    Evaluation,
    Field,
    Links,
    Vectors,
    away_from_zero,
    condense,
    expand,
)

__all__ = ["Ring"]

Array = NDArray[np.float64]
IntArray = NDArray[np.int64]
ComplexArray = NDArray[np.complex128]

# Members closer than this (relative) are taken from one pencil, both vectors at once.
_PAIR = 1e-12


@dataclass(frozen=True, eq=False)
class Ring:
    """A chain whose last node is its first, seen through the phase factor of the coupled ends."""

    chain: Chain
    multiplicity: int = 2

    def count(self, lam: Array) -> IntArray:
        """(T,) eigenvalues below each lambda, double ones counted twice."""
        return _close(self, lam).count

    def evaluate(self, lam: Array, index: IntArray) -> Evaluation:
        """Counts at (T,) lambda, and corrections towards the eigenvalue of each index (inf: not in reach)."""
        closed = _close(self, lam)
        roots, _ = _pencil(closed)
        # roots >= 0 belong to the indices count, count + 1; negative ones to count - 1, count - 2
        column = index - closed.count + np.count_nonzero(roots < 0.0, axis=1)
        inside = (column >= 0) & (column < 2)
        step = np.take_along_axis(roots, np.clip(column, 0, 1)[:, None], axis=1)[:, 0]
        return Evaluation(closed.count, np.where(inside, step, np.inf))

    def vectors(self, lam: Array, scale: float) -> Vectors:
        """Orthonormal vectors at (T,) ascending converged eigenvalues; real where the ring is, else complex.

        Pairs come from the pencil between them or, where they can be told apart, each from its own, and are
        made orthonormal together; larger groups (wells that hardly touch) by block inverse iteration. The
        first member of an equal pair is the one with the largest u(a), the second vanishes at a.
        """
        size = np.maximum(np.abs(lam), scale)
        groups = close_groups(lam, scale)
        place = lam.copy()
        column = np.full(lam.size, -1)
        for first, end in groups:
            if end - first == 2 and lam[first + 1] - lam[first] <= _PAIR * size[first]:
                place[first:end] = 0.5 * (lam[first] + lam[first + 1])
                column[first:end] = 0, 1
        closed = _close(self, place)
        roots, vectors = _pencil(closed)
        chosen = np.where(column >= 0, column, np.argmin(np.abs(roots), axis=1))
        pair = np.take_along_axis(vectors, chosen[:, None, None], axis=2)[:, :, 0]
        step = np.take_along_axis(roots, chosen[:, None], axis=1)[:, 0]
        found = _expand(self, place, pair, closed.merges, step)
        for first, end in groups:
            if end - first == 2:
                part = Block(found.nodes[:, first:end], np.swapaxes(found.bubbles[:, first:end], 1, 2))
                part = part @ _symmetric_root(inner_product(self.chain, part, part))
                if lam[first + 1] - lam[first] <= EQUAL * size[first]:
                    part = part @ np.linalg.eigh(_at_seam(part))[1]
                found.nodes[:, first:end] = part.nodes
                found.bubbles[:, first:end] = np.swapaxes(part.bubbles, 1, 2)
        return separate(lam, found, scale, lambda shift: _RingInverse(self, shift), least=3)

    @property
    def real(self) -> bool:
        """Whether the modes can be taken real: the factor is 1 or -1."""
        return self.factor.imag == 0.0

    @property
    def factor(self) -> complex:
        """u(b) / u(a)."""
        return complex(1.0 if self.chain.factor is None else self.chain.factor)


@dataclass(eq=False)
class _Macro:
    """(T,) each; mass: (T, 3, 3) over (left node, right node, pole)."""

    g: Array
    alpha: Array
    gamma: Array
    a1: Array
    a2: Array
    delta: Array
    mass: Array

    def mirrored(self) -> _Macro:
        order = [1, 0, 2]
        return _Macro(
            self.g, self.gamma, self.alpha, self.a2, self.a1, self.delta, self.mass[:, order][:, :, order]
        )


@dataclass(frozen=True, eq=False)
class _Merge:
    """How the eliminated unknowns follow: (u_j, c_gone) = back (T, 2, 3) (u_left, u_right, c_kept).

    kept_left: (T,) whether the pole kept is the left one. inverse: (T, 2, 2) of the block eliminated.
    """

    back: Array
    kept_left: NDArray[np.bool_]
    inverse: Array


def _link(k: Links, j: int) -> _Macro:
    targets = k.g.shape[1]
    mass = np.zeros((targets, 3, 3))
    mass[:, 0, 0], mass[:, 1, 1], mass[:, 2, 2] = k.m00[j], k.m11[j], k.theta[j]
    mass[:, 0, 1] = mass[:, 1, 0] = k.m01[j]
    mass[:, 0, 2] = mass[:, 2, 0] = k.m1[j]
    mass[:, 1, 2] = mass[:, 2, 1] = k.m2[j]
    return _Macro(k.g[j], k.alpha[j], k.gamma[j], k.a1[j], k.a2[j], k.delta[j], mass)


def _merge_into_left(
    x: _Macro, y: _Macro, term: Array, node_mass: float
) -> tuple[_Macro, Array, IntArray, Array, Array]:
    """Eliminate the node between and y's pole.

    Also returned: back, negative pivots, |D| for the choice, the inverse of the block eliminated.
    """
    rho = x.gamma + y.alpha + term
    d = rho + x.g + y.g
    scale = np.abs(x.g) + np.abs(y.g)
    det = away_from_zero(d * y.delta - y.a1**2, scale * np.abs(y.delta) + y.a1**2)
    t, s, r = y.delta / det, -y.a1 / det, d / det
    b12 = y.a1 + y.a2
    onward = y.g * t - y.a2 * s
    gamma = y.g * rho * y.delta - y.g * b12**2 - x.g * y.a2 * b12 - y.a2**2 * rho
    back = np.zeros((d.size, 2, 3))
    back[:, 0] = np.stack([t * x.g, onward, -t * x.a2], axis=1)
    back[:, 1] = np.stack([s * x.g, s * y.g - r * y.a2, -s * x.a2], axis=1)
    # rows of z = (u_left, u_right, c_kept, u_j, c_gone) in terms of the first three
    full = np.zeros((d.size, 5, 3))
    full[:, 0, 0] = full[:, 1, 1] = full[:, 2, 2] = 1.0
    full[:, 3:] = back
    mass = np.zeros((d.size, 5, 5))
    left, right = np.ix_([0, 3, 2], [0, 3, 2]), np.ix_([3, 1, 4], [3, 1, 4])
    mass[:, left[0], left[1]] += x.mass
    mass[:, right[0], right[1]] += y.mass
    mass[:, 3, 3] += node_mass
    merged = _Macro(
        x.g * onward,
        x.alpha + x.g * (rho * y.delta - y.a1 * b12) / det,
        y.gamma + gamma / det,
        x.a1 + x.g * t * x.a2,
        x.a2 * onward,
        x.delta - x.a2**2 * t,
        np.swapaxes(full, 1, 2) @ mass @ full,
    )
    negative = np.where(det < 0.0, 1, np.where(d < 0.0, 2, 0)).astype(np.int64)
    inverse = np.stack([np.stack([t, s], axis=1), np.stack([s, r], axis=1)], axis=1)
    return merged, back, negative, np.abs(det), inverse


def _merge(x: _Macro, y: _Macro, term: Array, node_mass: float) -> tuple[_Macro, _Merge, IntArray]:
    """Merge, keeping for every target the pole whose partner gives the larger pivot."""
    one, back_one, negative_one, det_one, inverse_one = _merge_into_left(x, y, term, node_mass)
    two, back_two, negative_two, det_two, inverse_two = _merge_into_left(
        y.mirrored(), x.mirrored(), term, node_mass
    )
    two = two.mirrored()
    back_two = back_two[:, :, [1, 0, 2]]
    keep_left = det_one >= det_two

    def pick(a: Array, b: Array) -> Array:
        return np.where(keep_left.reshape(-1, *[1] * (a.ndim - 1)), a, b)

    merged = _Macro(*(pick(getattr(one, f), getattr(two, f)) for f in _Macro.__dataclass_fields__))
    return (
        merged,
        _Merge(pick(back_one, back_two), keep_left, pick(inverse_one, inverse_two)),
        np.where(keep_left, negative_one, negative_two),
    )


@dataclass(frozen=True, eq=False)
class _Closed:
    """The ring's last 2 x 2: matrix and mass (T, 2, 2) Hermitian in (u_a, c); count (T,); the merges."""

    matrix: ComplexArray
    mass: ComplexArray
    count: IntArray
    merges: list[_Merge]


def _close(ring: Ring, lam: Array) -> _Closed:
    chain = ring.chain
    k = condense(chain, lam, with_mass=True)
    terms = chain.stiffness[:, None] - lam[None, :] * chain.mass[:, None]
    count = k.below.copy()
    macro = _link(k, 0)
    merges = []
    for j in range(1, chain.links):
        macro, merge, negative = _merge(macro, _link(k, j), terms[j], float(chain.mass[j]))
        merges.append(merge)
        count += negative
    factor = ring.factor
    matrix = np.zeros((lam.size, 2, 2), dtype=np.complex128)
    mass = np.zeros_like(matrix)
    opening = 2.0 * (1.0 - factor.real)
    matrix[:, 0, 0] = macro.alpha + macro.gamma + opening * macro.g + terms[0] + terms[-1]
    matrix[:, 1, 1] = macro.delta
    matrix[:, 1, 0] = macro.a1 + macro.a2 * factor
    matrix[:, 0, 1] = matrix[:, 1, 0].conj()
    m = macro.mass
    mass[:, 0, 0] = m[:, 0, 0] + m[:, 1, 1] + 2.0 * factor.real * m[:, 0, 1] + chain.mass[0] + chain.mass[-1]
    mass[:, 1, 1] = m[:, 2, 2]
    mass[:, 1, 0] = m[:, 2, 0] + m[:, 2, 1] * factor
    mass[:, 0, 1] = mass[:, 1, 0].conj()
    first = matrix[:, 0, 0].real
    det = first * macro.delta - np.abs(matrix[:, 1, 0]) ** 2
    count += np.where(det < 0.0, 1, np.where(first < 0.0, 2, 0))
    return _Closed(matrix, mass, count, merges)


def _pencil(closed: _Closed) -> tuple[Array, ComplexArray]:
    """Roots (T, 2) ascending and mass-orthonormal vectors (T, 2, 2) (columns) of matrix - root mass."""
    # unit diagonal first: u_a and c have different units
    size = 1.0 / np.sqrt(np.maximum(np.einsum("tii->ti", closed.mass).real, np.finfo(float).tiny))
    scale = size[:, :, None] * size[:, None, :]
    factor = np.linalg.cholesky(closed.mass * scale)
    half = np.linalg.solve(factor, closed.matrix * scale)
    reduced = np.linalg.solve(factor, np.swapaxes(half, 1, 2).conj())
    roots, vectors = np.linalg.eigh(0.5 * (reduced + np.swapaxes(reduced, 1, 2).conj()))
    back = np.linalg.solve(np.swapaxes(factor, 1, 2).conj(), vectors)
    return roots, back * size[:, :, None]


def _expand(ring: Ring, lam: Array, pair: ComplexArray, merges: list[_Merge], step: Array) -> Vectors:
    chain = ring.chain
    n = chain.links
    u = np.zeros((n + 1, lam.size), dtype=np.complex128)
    c = np.zeros((n, lam.size), dtype=np.complex128)
    u[0], u[n] = pair[:, 0], ring.factor * pair[:, 0]
    # `kept` follows the pole that the macro of links 0..j kept; the last macro's pole is pair[:, 1]
    kept = pair[:, 1]
    for j in range(n - 1, 0, -1):
        merge = merges[j - 1]
        known = np.stack([u[0], u[j + 1], kept], axis=1)
        found = np.einsum("tab,tb->ta", merge.back, known)
        u[j] = found[:, 0]
        c[j] = np.where(merge.kept_left, found[:, 1], kept)
        kept = np.where(merge.kept_left, kept, found[:, 1])
    c[0] = kept
    nodes: Field = u.real.copy() if ring.real else u
    poles: Field = c.real.copy() if ring.real else c
    return Vectors(nodes, expand(chain, lam, nodes, poles), step)


def _symmetric_root(gram: Field) -> Field:
    """gram^(-1/2) (Loewdin, J. Chem. Phys. 18, 1950, 365-375): the orthonormal basis nearest to the given."""
    values, rotation = np.linalg.eigh(gram)
    result: Field = (rotation / np.sqrt(values)) @ rotation.conj().T
    return result


def _at_seam(block: Block) -> Field:
    """-conj(u_i) u_j at the seam: its lowest vector has all of u(a)."""
    result: Field = -np.outer(block.nodes[0].conj(), block.nodes[0])
    return result


class _RingInverse:
    """(K - shift M)^-1 of a ring by its merges."""

    def __init__(self, ring: Ring, shift: float) -> None:
        self.chain = ring.chain
        self._ring = ring
        self._shift = shift
        self._closed = _close(ring, np.array([shift]))

    def start(self, size: int) -> Block:
        """Random vectors that close."""
        rng = np.random.default_rng(20_000)
        nodes = rng.standard_normal((self.chain.links + 1, size))
        bubbles = rng.standard_normal((*self.chain.elements.theta.shape, size))
        if not self._ring.real:
            nodes, bubbles = nodes.astype(np.complex128), bubbles.astype(np.complex128)
        nodes[-1] = self._factor * nodes[0]
        return Block(nodes, bubbles)

    @property
    def _factor(self) -> complex:
        return self._ring.factor.real if self._ring.real else self._ring.factor

    def order(self, block: Block) -> Field:
        """Two are told apart at the seam, more by their position."""
        return _at_seam(block) if block.nodes.shape[1] == 2 else position(self.chain, block)

    def solve(self, load: Block) -> Block:
        """(K - shift M)^-1 load; the load of the last node acts on the first."""
        n, merges = self.chain.links, self._closed.merges
        rhs, pole_load, back = bubble_system(self.chain, self._shift, load)
        gone = np.zeros((n, 2, rhs.shape[1]), dtype=rhs.dtype)
        # ends (left, right) and the pole of the macro so far; right is node j until it is merged
        left, pole = rhs[0].copy(), pole_load[0].copy()
        for j in range(1, n):
            merge = merges[j - 1]
            kept_left = bool(merge.kept_left[0])
            kept, lost = (pole, pole_load[j]) if kept_left else (pole_load[j], pole)
            gone[j] = rhs[j], lost
            added = merge.back[0].T @ gone[j]
            left = left + added[0]
            rhs[j + 1] += added[1]
            pole = kept + added[2]
        matrix = self._closed.matrix[0].real if self._ring.real else self._closed.matrix[0]
        factor = self._factor
        last = np.linalg.solve(matrix, np.stack([left + np.conj(factor) * rhs[n], pole]))
        u, c = np.zeros_like(rhs), np.zeros_like(pole_load)
        u[0], u[n], kept = last[0], factor * last[0], last[1]
        for j in range(n - 1, 0, -1):
            merge = merges[j - 1]
            found = merge.back[0] @ np.stack([u[0], u[j + 1], kept]) + merge.inverse[0] @ gone[j]
            u[j] = found[0]
            if merge.kept_left[0]:
                c[j] = found[1]
            else:
                c[j], kept = kept, found[1]
        c[0] = kept
        return back(u, c)
