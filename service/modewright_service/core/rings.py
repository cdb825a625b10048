"""Coupled ends: the chain closed to a ring, u(b) = e^{i theta} u(a) and p u' likewise.

Links of :mod:`.condensed` are merged two by two, level after level, into one. Each link has one inner unknown
c beside its two end nodes: the pole kept apart there, later whatever a merge kept. A merge of links X and Y
meets three unknowns, the node between them and both c, and eliminates two of them: the node with c_Y, the
node with c_X (on a uniform mesh all poles are met at once, and the partner of a singular node is the cure),
or c_X with c_Y (where lambda is far from the poles, as in a fine mesh; what is kept then is the node's
deviation from the static interpolation between the ends). The largest relative pivot decides. What remains is
one Hermitian 2 x 2 matrix in (u_a, c), whose inertia completes the count, and whose pencil with its mass
matrix gives the corrections to the two nearest eigenvalues at a time: closed gaps, where eigenvalues of
periodic problems are double (Magnus and Winkler, Hill's Equation, 1966, ch. II), are then as easy as open
ones.

All formulas keep the row sums alpha, gamma of a link apart from its conductance g, which may be larger by
many orders. In the notation of :mod:`.condensed`, with rho = gamma + alpha' + node terms, d = rho + g + g'
and D = d delta' - a1'^2, keeping c_X gives

    G = g (g' delta' + a1' a2') / D,     A = alpha + g (rho delta' - a1' (a1' + a2')) / D,
    Gamma = gamma' + {g' rho delta' - g' (a1' + a2')^2 - g a2' (a1' + a2') - a2'^2 rho} / D,

and keeping the node as u = t u_left + s u_right + z, t + s = 1, t : s the static conductances, gives

    G = g s^2 + g' t^2 - rho t s,  A = alpha + rho t,  Gamma = gamma' + rho s,
    a1 = rho t + (g' t - g s),  a2 = rho s - (g' t - g s),  delta = g + g' + rho.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

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
# Cosine of two vectors beyond which they are not told apart.
_PARALLEL = 1.0 - 1e-14
# Links times lambdas handled together.
_NUMBERS = 60_000


@dataclass(frozen=True, eq=False)
class Ring:
    """A chain whose last node is its first, seen through the phase factor of the coupled ends."""

    chain: Chain
    multiplicity: int = 2

    def count(self, lam: Array) -> IntArray:
        """(T,) eigenvalues below each lambda, double ones counted twice."""
        parts = [_close(self, part, with_mass=False).count for part in _parts(self.chain, lam)]
        return np.concatenate(parts)

    def evaluate(self, lam: Array, index: IntArray) -> Evaluation:
        """Counts at (T,) lambda, and corrections towards the eigenvalue of each index (inf: not in reach)."""
        counts, steps = [], []
        for part, wanted in zip(_parts(self.chain, lam), _parts(self.chain, index), strict=True):
            closed = _close(self, part)
            roots, _ = _pencil(closed)
            # roots >= 0 belong to the indices count, count + 1; negative ones to count - 1, count - 2
            column = wanted - closed.count + np.count_nonzero(roots < 0.0, axis=1)
            inside = (column >= 0) & (column < 2)
            step = np.take_along_axis(roots, np.clip(column, 0, 1)[:, None], axis=1)[:, 0]
            counts.append(closed.count)
            steps.append(np.where(inside, step, np.inf))
        return Evaluation(np.concatenate(counts), np.concatenate(steps))

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
        found = self._vectors(place, column)
        for first, end in groups:
            if end - first == 2:
                part = Block(found.nodes[:, first:end], np.swapaxes(found.bubbles[:, first:end], 1, 2))
                part = part @ _symmetric_root(inner_product(self.chain, part, part))
                if lam[first + 1] - lam[first] <= EQUAL * size[first]:
                    part = part @ np.linalg.eigh(_at_seam(part))[1]
                found.nodes[:, first:end] = part.nodes
                found.bubbles[:, first:end] = np.swapaxes(part.bubbles, 1, 2)
        return separate(lam, found, scale, lambda shift: _RingInverse(self, shift), least=3)

    def _vectors(self, lam: Array, column: IntArray) -> Vectors:
        """Vectors of the pencil at each lambda: its `column`, or the one with the smaller root where -1."""
        parts = []
        for place, wish in zip(_parts(self.chain, lam), _parts(self.chain, column), strict=True):
            closed = _close(self, place)
            roots, vectors = _pencil(closed)
            chosen = np.where(wish >= 0, wish, np.argmin(np.abs(roots), axis=1))
            pair: Field = np.take_along_axis(vectors, chosen[:, None, None], axis=2)[:, :, 0]
            if self.real:
                pair = pair.real
            step = np.take_along_axis(roots, chosen[:, None], axis=1)[:, 0]
            nodes, poles = _expand(self, closed.levels, pair)
            parts.append((nodes, expand(self.chain, place, nodes, poles), step))
        return Vectors(
            np.concatenate([part[0] for part in parts], axis=1),
            np.concatenate([part[1] for part in parts], axis=1),
            np.concatenate([part[2] for part in parts]),
        )

    @property
    def real(self) -> bool:
        """Whether the modes can be taken real: the factor is 1 or -1."""
        return self.factor.imag == 0.0

    @property
    def factor(self) -> complex:
        """u(b) / u(a)."""
        return complex(1.0 if self.chain.factor is None else self.chain.factor)

    @property
    def scalar(self) -> float | complex:
        """The factor, a real number where it is one."""
        return self.factor.real if self.real else self.factor


def _parts(chain: Chain, values: NDArray[Any]) -> list[NDArray[Any]]:
    """(T,) values in parts that keep a level of merges within some tens of megabytes."""
    most = max(1, _NUMBERS // max(1, chain.links))
    return [values[i : i + most] for i in range(0, values.size, most)] or [values]


@dataclass(eq=False)
class _Macro:
    """Links merged so far, (L, T) each; mass: (L, T, 3, 3) over (left node, right node, inner), or None.

    strength: static conductance. size: the size that delta has where lambda is far from any pole.
    """

    g: Array
    alpha: Array
    gamma: Array
    a1: Array
    a2: Array
    delta: Array
    strength: Array
    size: Array
    mass: Array | None = None

    def __getitem__(self, part: slice) -> _Macro:
        mass = None if self.mass is None else self.mass[part]
        return _Macro(*(getattr(self, name)[part] for name in _NUMERIC)).weighted(mass)

    def weighted(self, mass: Array | None) -> _Macro:
        """The same with masses."""
        return replace(self, mass=mass)

    def mirrored(self) -> _Macro:
        order = [1, 0, 2]
        mass = None if self.mass is None else self.mass[..., order, :][..., order]
        return _Macro(
            self.g, self.gamma, self.alpha, self.a2, self.a1, self.delta, self.strength, self.size, mass
        )

    def joined(self, other: _Macro) -> _Macro:
        """These links and then those of `other`."""
        numbers = (np.concatenate([getattr(self, name), getattr(other, name)]) for name in _NUMERIC)
        mass = None
        if self.mass is not None and other.mass is not None:
            mass = np.concatenate([self.mass, other.mass])
        return _Macro(*numbers).weighted(mass)


_NUMERIC = ("g", "alpha", "gamma", "a1", "a2", "delta", "strength", "size")


@dataclass(frozen=True, eq=False)
class _Merge:
    """How what was eliminated follows: y = back z + inverse r.

    y = (node, inner unknown of X, that of Y), z = (left node, right node, what was kept), r the loads of y.
    back, inverse: (L, T, 3, 3).
    """

    back: Array
    inverse: Array


@dataclass(frozen=True, eq=False)
class _Option:
    """One way to merge; negative: pivots below zero; pivot: the relative size of what was eliminated."""

    macro: _Macro
    merge: _Merge | None
    negative: IntArray
    pivot: Array


def _links(k: Links, strength: Array, with_mass: bool) -> _Macro:
    ones = np.ones_like(k.g)
    mass = None
    if with_mass:
        mass = np.zeros((*k.g.shape, 3, 3))
        mass[..., 0, 0], mass[..., 1, 1], mass[..., 2, 2] = k.m00, k.m11, k.theta
        mass[..., 0, 1] = mass[..., 1, 0] = k.m01
        mass[..., 0, 2] = mass[..., 2, 0] = k.m1
        mass[..., 1, 2] = mass[..., 2, 1] = k.m2
    return _Macro(k.g, k.alpha, k.gamma, k.a1, k.a2, k.delta, strength[:, None] * ones, ones, mass)


def _matrix(rows: Sequence[Sequence[Array | float]], like: Array) -> Array:
    """(L, T, m, n) from m rows of n arrays or numbers."""
    return np.stack(
        [np.stack([np.broadcast_to(x, like.shape) for x in row], axis=-1) for row in rows], axis=-2
    )


def _keep_left(x: _Macro, y: _Macro, term: Array, with_merge: bool) -> _Option:
    """Eliminate the node between and y's inner unknown."""
    rho = x.gamma + y.alpha + term
    d = rho + x.g + y.g
    scale = x.strength + y.strength
    det = away_from_zero(d * y.delta - y.a1**2, scale * y.size)
    b12 = y.a1 + y.a2
    # inverse of [[d, a1'], [a1', delta']]
    t, s, r = y.delta / det, -y.a1 / det, d / det
    onward = y.g * t - y.a2 * s
    gamma = y.g * rho * y.delta - y.g * b12**2 - x.g * y.a2 * b12 - y.a2**2 * rho
    macro = _Macro(
        x.g * onward,
        x.alpha + x.g * (rho * y.delta - y.a1 * b12) / det,
        y.gamma + gamma / det,
        x.a1 + x.g * t * x.a2,
        x.a2 * onward,
        x.delta - x.a2**2 * t,
        x.strength * y.strength / scale,
        x.size,
    )
    negative = np.where(det < 0.0, 1, np.where(d < 0.0, 2, 0)).astype(np.int64)
    merge = None
    if with_merge:
        node = [t * x.g, onward, -t * x.a2]
        lost = [s * x.g, s * y.g - r * y.a2, -s * x.a2]
        merge = _Merge(
            _matrix([node, [0.0, 0.0, 1.0], lost], d),
            _matrix([[t, 0.0, s], [0.0, 0.0, 0.0], [s, 0.0, r]], d),
        )
    return _Option(macro, merge, negative, np.abs(det) / (scale * y.size))


def _keep_right(x: _Macro, y: _Macro, term: Array, with_merge: bool) -> _Option:
    """Eliminate the node between and x's inner unknown."""
    other = _keep_left(y.mirrored(), x.mirrored(), term, with_merge)
    merge = other.merge
    if merge is not None:
        rows, columns = [0, 2, 1], [1, 0, 2]
        back = merge.back[..., rows, :][..., columns]
        merge = _Merge(back, merge.inverse[..., rows, :][..., rows])
    return _Option(other.macro.mirrored(), merge, other.negative, other.pivot)


def _keep_node(x: _Macro, y: _Macro, term: Array, with_merge: bool) -> _Option:
    """Eliminate both inner unknowns; the node stays, as its deviation from the static interpolation."""
    dx, dy = away_from_zero(x.delta, x.size), away_from_zero(y.delta, y.size)
    gx, gy = x.g + x.a1 * x.a2 / dx, y.g + y.a1 * y.a2 / dy
    x12, y12 = x.a1 + x.a2, y.a1 + y.a2
    rho = (x.gamma - x.a2 * x12 / dx) + (y.alpha - y.a1 * y12 / dy) + term
    scale = x.strength + y.strength
    t, s = x.strength / scale, y.strength / scale
    tilt = gy * t - gx * s
    macro = _Macro(
        gx * s * s + gy * t * t - rho * t * s,
        (x.alpha - x.a1 * x12 / dx) + rho * t,
        (y.gamma - y.a2 * y12 / dy) + rho * s,
        rho * t + tilt,
        rho * s - tilt,
        gx + gy + rho,
        x.strength * y.strength / scale,
        scale,
    )
    merge = None
    if with_merge:
        merge = _Merge(
            _matrix(
                [
                    [t, s, 1.0],
                    [-(x.a1 + x.a2 * t) / dx, -x.a2 * s / dx, -x.a2 / dx],
                    [-y.a1 * t / dy, -(y.a2 + y.a1 * s) / dy, -y.a1 / dy],
                ],
                rho,
            ),
            _matrix([[0.0, 0.0, 0.0], [0.0, 1.0 / dx, 0.0], [0.0, 0.0, 1.0 / dy]], rho),
        )
    negative = (dx < 0.0).astype(np.int64) + (dy < 0.0)
    return _Option(macro, merge, negative, np.abs(dx * dy) / (x.size * y.size))


def _merge(x: _Macro, y: _Macro, term: Array, node_mass: Array) -> tuple[_Macro, _Merge | None, IntArray]:
    """Merge neighbours, for every pair and lambda in the way with the largest pivot."""
    with_merge = x.mass is not None
    options = [make(x, y, term, with_merge) for make in (_keep_left, _keep_right, _keep_node)]
    best = np.argmax(np.stack([option.pivot for option in options]), axis=0)

    def pick(arrays: Sequence[Array]) -> Array:
        choice = best.reshape(*best.shape, *[1] * (arrays[0].ndim - best.ndim))
        chosen: Array = np.choose(choice, arrays)
        return chosen

    values = (pick([getattr(option.macro, name) for option in options]) for name in _NUMERIC)
    negative = np.choose(best, [option.negative for option in options])
    made = [option.merge for option in options if option.merge is not None]
    if x.mass is None or y.mass is None or not made:
        return _Macro(*values), None, negative
    merge = _Merge(pick([item.back for item in made]), pick([item.inverse for item in made]))
    # rows: the unknowns of x, then of y, in terms of (left, right, kept)
    node, inner_x, inner_y = (merge.back[..., i, :] for i in range(3))
    left = np.broadcast_to(np.array([1.0, 0.0, 0.0]), node.shape)
    right = np.broadcast_to(np.array([0.0, 1.0, 0.0]), node.shape)
    of_x = np.stack([left, node, inner_x], axis=-2)
    of_y = np.stack([node, right, inner_y], axis=-2)
    mass = np.swapaxes(of_x, -1, -2) @ x.mass @ of_x + np.swapaxes(of_y, -1, -2) @ y.mass @ of_y
    mass += node_mass[:, None, None, None] * node[..., :, None] * node[..., None, :]
    return _Macro(*values).weighted(mass), merge, negative


@dataclass(frozen=True, eq=False)
class _Closed:
    """The ring's last 2 x 2: matrix and mass (T, 2, 2) Hermitian in (u_a, inner); count (T,); the merges.

    levels: of links (0, 1), (2, 3), ..., then of the pairs, and so on; an odd last one goes on as it is.
    """

    matrix: ComplexArray
    mass: ComplexArray | None
    count: IntArray
    levels: list[_Merge]


def _close(ring: Ring, lam: Array, with_mass: bool = True) -> _Closed:
    chain = ring.chain
    k = condense(chain, lam, with_mass)
    terms = chain.stiffness[:, None] - lam[None, :] * chain.mass[:, None]
    of_element = np.maximum(chain.element_of_link, 0)
    strength = np.where(chain.element_of_link >= 0, chain.elements.g[of_element], chain.conductance)
    macro = _links(k, strength, with_mass)
    count = k.below.copy()
    levels: list[_Merge] = []
    # nodes between the macros
    inner = np.arange(1, chain.links)
    while macro.g.shape[0] > 1:
        chain.poll()
        pairs = macro.g.shape[0] // 2
        odd = macro[2 * pairs :]
        between = inner[0::2][:pairs]
        merged, merge, negative = _merge(
            macro[0 : 2 * pairs : 2], macro[1 : 2 * pairs : 2], terms[between], chain.mass[between]
        )
        count += negative.sum(axis=0)
        if merge is not None:
            levels.append(merge)
        macro = merged.joined(odd) if odd.g.shape[0] else merged
        inner = inner[1::2]
    return _last(ring, macro, terms, count, levels)


def _last(ring: Ring, macro: _Macro, terms: Array, count: IntArray, levels: list[_Merge]) -> _Closed:
    chain, factor = ring.chain, ring.factor
    g, a1, a2 = macro.g[0], macro.a1[0], macro.a2[0]
    matrix = np.zeros((g.size, 2, 2), dtype=np.complex128)
    # |1 - e^{i theta}|^2 = 2 (1 - cos theta) is what is left of g
    matrix[:, 0, 0] = macro.alpha[0] + macro.gamma[0] + abs(1.0 - factor) ** 2 * g + terms[0] + terms[-1]
    matrix[:, 1, 1] = macro.delta[0]
    matrix[:, 1, 0] = a1 + a2 * factor
    matrix[:, 0, 1] = matrix[:, 1, 0].conj()
    first = matrix[:, 0, 0].real
    det = first * macro.delta[0] - np.abs(matrix[:, 1, 0]) ** 2
    count = count + np.where(det < 0.0, 1, np.where(first < 0.0, 2, 0))
    if macro.mass is None:
        return _Closed(matrix, None, count, levels)
    m = macro.mass[0]
    mass = np.zeros_like(matrix)
    mass[:, 0, 0] = m[:, 0, 0] + m[:, 1, 1] + 2.0 * factor.real * m[:, 0, 1] + chain.mass[0] + chain.mass[-1]
    mass[:, 1, 1] = m[:, 2, 2]
    mass[:, 1, 0] = m[:, 2, 0] + m[:, 2, 1] * factor
    mass[:, 0, 1] = mass[:, 1, 0].conj()
    return _Closed(matrix, mass, count, levels)


def _pencil(closed: _Closed) -> tuple[Array, ComplexArray]:
    """Roots (T, 2) ascending and mass-orthonormal vectors (T, 2, 2) (columns) of matrix - root mass."""
    if closed.mass is None:
        raise ValueError("closed without masses")
    # unit diagonal first: u_a and the inner unknown have different units
    size = 1.0 / np.sqrt(np.maximum(np.einsum("tii->ti", closed.mass).real, np.finfo(float).tiny))
    scale = size[:, :, None] * size[:, None, :]
    mass = closed.mass * scale
    # rounding may leave two nearly parallel vectors with a negative determinant
    cosine = np.abs(mass[:, 1, 0])
    shrink = np.where(cosine > _PARALLEL, _PARALLEL / np.maximum(cosine, _PARALLEL), 1.0)
    mass[:, 1, 0] *= shrink
    mass[:, 0, 1] *= shrink
    factor = np.linalg.cholesky(mass)
    half = np.linalg.solve(factor, closed.matrix * scale)
    reduced = np.linalg.solve(factor, np.swapaxes(half, 1, 2).conj())
    roots, vectors = np.linalg.eigh(0.5 * (reduced + np.swapaxes(reduced, 1, 2).conj()))
    back = np.linalg.solve(np.swapaxes(factor, 1, 2).conj(), vectors)
    return roots, back * size[:, :, None]


def _expand(
    ring: Ring, levels: list[_Merge], pair: Field, loads: list[Field] | None = None
) -> tuple[Field, Field]:
    """Nodes (n+1, T) and inner unknowns of the links (n, T) from the last two (T, 2).

    loads: of what each level eliminated, (pairs, 3, T), for an inhomogeneous system.
    """
    ends = np.stack([pair[:, 0], ring.scalar * pair[:, 0]])
    inner = pair[None, :, 1]
    for level in range(len(levels) - 1, -1, -1):
        merge = levels[level]
        pairs = merge.back.shape[0]
        z = np.stack([ends[:pairs], ends[1 : pairs + 1], inner[:pairs]], axis=-1)
        found = np.einsum("jtab,jtb->jta", merge.back, z)
        if loads is not None:
            found += np.einsum("jtab,jbt->jta", merge.inverse, loads[level])
        links = 2 * pairs + (ends.shape[0] - 1 - pairs)
        below = np.empty((links, pair.shape[0]), dtype=found.dtype)
        nodes = np.empty((links + 1, pair.shape[0]), dtype=found.dtype)
        below[0 : 2 * pairs : 2], below[1 : 2 * pairs : 2] = found[..., 1], found[..., 2]
        below[2 * pairs :] = inner[pairs:]
        nodes[0 : 2 * pairs + 1 : 2] = ends[: pairs + 1]
        nodes[1 : 2 * pairs : 2] = found[..., 0]
        nodes[2 * pairs + 1 :] = ends[pairs + 1 :]
        ends, inner = nodes, below
    return ends, inner


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
        nodes: Field = rng.standard_normal((self.chain.links + 1, size))
        bubbles: Field = rng.standard_normal((*self.chain.elements.theta.shape, size))
        if not self._ring.real:
            nodes, bubbles = nodes.astype(np.complex128), bubbles.astype(np.complex128)
        nodes[-1] = self._ring.scalar * nodes[0]
        return Block(nodes, bubbles)

    def order(self, block: Block) -> Field:
        """Two are told apart at the seam, more by their position."""
        return _at_seam(block) if block.nodes.shape[1] == 2 else position(self.chain, block)

    def solve(self, load: Block) -> Block:
        """(K - shift M)^-1 load; the load of the last node acts on the first."""
        rhs, inner, back = bubble_system(self.chain, self._shift, load)
        nodes = rhs
        loads: list[Field] = []
        for merge in self._closed.levels:
            pairs = merge.back.shape[0]
            gone = np.stack([nodes[1 : 2 * pairs : 2], inner[0 : 2 * pairs : 2], inner[1 : 2 * pairs : 2]], 1)
            loads.append(gone)
            added = np.einsum("jab,jat->jbt", merge.back[:, 0], gone)
            ends = np.concatenate([nodes[0 : 2 * pairs + 1 : 2], nodes[2 * pairs + 1 :]])
            ends[:pairs] += added[:, 0]
            ends[1 : pairs + 1] += added[:, 1]
            inner = np.concatenate([added[:, 2], inner[2 * pairs :]])
            nodes = ends
        matrix = self._closed.matrix[0].real if self._ring.real else self._closed.matrix[0]
        scalar = self._ring.scalar
        last = np.linalg.solve(matrix, np.stack([nodes[0] + np.conj(scalar) * nodes[1], inner[0]]))
        levels = [
            _Merge(*(np.repeat(item, last.shape[1], axis=1) for item in (merge.back, merge.inverse)))
            for merge in self._closed.levels
        ]
        return back(*_expand(self._ring, levels, last.T, loads))
