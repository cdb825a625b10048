"""Orthonormal vectors for eigenvalues too close to be told apart one by one.

A single twisted vector has an error of rounding over relative gap; members of a close group would come out
parallel. So groups get block inverse iteration on the condensed chain, with a shift displaced from the group
by a thousandth of the gap around it, and a Rayleigh-Ritz step on the inverse (Parlett, The Symmetric
Eigenvalue Problem, 1998, ch. 4 and 14). Where even their eigenvalues agree to rounding any rotation of the
members would be as good; the one that diagonalises the position int x phi_i phi_j w dx is taken, members
ordered by it, so that the choice is reproducible.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from modewright_service.core.condensed import (
    Chain,
    Evaluation,
    Field,
    Vectors,
    condense,
    count_below,
    eigenvectors,
    evaluate,
    sweep_left,
)

__all__ = [
    "CLOSE",
    "EQUAL",
    "Block",
    "Inverse",
    "OpenChain",
    "bubble_system",
    "close_groups",
    "inner_product",
    "position",
    "separate",
]

Array = NDArray[np.float64]
IntArray = NDArray[np.int64]

# Neighbours closer than this (relative to their size) form a group: beyond it single vectors are good to
# 1e-12.
CLOSE = 1e-4
# Each step gains three digits (the displacement); five reach rounding from any start.
_STEPS = 5
# Eigenvalues of a group that agree to so many units of rounding are one eigenvalue with several vectors.
EQUAL = 64.0 * float(np.finfo(float).eps)


@dataclass(frozen=True, eq=False)
class OpenChain:
    """The discrete problem with separated ends (a :class:`.spectrum.System`)."""

    chain: Chain
    multiplicity: int = 1

    def count(self, lam: Array) -> IntArray:
        """(T,) number of eigenvalues below each lambda."""
        return count_below(self.chain, lam)

    def evaluate(self, lam: Array, index: IntArray) -> Evaluation:
        """Counts and Newton corrections; the index decides nothing here, eigenvalues being simple."""
        return evaluate(self.chain, lam)

    def vectors(self, lam: Array, scale: float) -> Vectors:
        """Twisted vectors, close groups by block inverse iteration."""
        return separate(
            lam, eigenvectors(self.chain, lam), scale, lambda shift: _OpenInverse(self.chain, shift)
        )


@dataclass(frozen=True, eq=False)
class Block:
    """m vectors: nodes (n+1, m), bubbles (E, J, m)."""

    nodes: Field
    bubbles: Field

    def __matmul__(self, matrix: Field) -> Block:
        return Block(self.nodes @ matrix, self.bubbles @ matrix)


class Inverse(Protocol):
    """(K - shift M)^-1 of a discrete problem, ready to be applied many times."""

    @property
    def chain(self) -> Chain:
        """Whose K and M they are."""

    def start(self, size: int) -> Block:
        """`size` random vectors that satisfy the essential conditions."""

    def solve(self, load: Block) -> Block:
        """(K - shift M)^-1 load."""

    def order(self, block: Block) -> Field:
        """(m, m) Hermitian form that the members of one multiple eigenvalue are told apart by, ascending."""


def close_groups(lam: Array, scale: float) -> list[tuple[int, int]]:
    """(first, end) of the groups of two and more among (T,) ascending eigenvalues.

    scale: Lambda, the size that rounding is judged by near lambda = 0.
    """
    size = np.maximum(np.maximum(np.abs(lam[1:]), np.abs(lam[:-1])), scale)
    starts = np.flatnonzero(np.concatenate([[True], np.diff(lam) > CLOSE * size]))
    stops = np.append(starts[1:], lam.size)
    return [(int(a), int(b)) for a, b in zip(starts, stops, strict=True) if b - a > 1]


def separate(
    lam: Array, vectors: Vectors, scale: float, inverse: Callable[[float], Inverse], least: int = 2
) -> Vectors:
    """`vectors` with the members of close groups of `least` and more replaced by orthonormal ones.

    lam: (T,) ascending. scale: Lambda. inverse: of the problem, for a shift.
    """
    groups = [(a, b) for a, b in close_groups(lam, scale) if b - a >= least]
    if not groups:
        return vectors
    nodes, bubbles = vectors.nodes.copy(), vectors.bubbles.copy()
    for start, stop in groups:
        below = lam[start] - lam[start - 1] if start > 0 else np.inf
        above = lam[stop] - lam[stop - 1] if stop < lam.size else np.inf
        around = min(below, above, abs(lam[start]) + scale)
        members = _group(
            inverse(float(lam[start] - 1e-3 * around)), lam[start:stop], lam[start] - 1e-3 * around, scale
        )
        nodes[:, start:stop] = members.nodes
        bubbles[:, start:stop] = np.swapaxes(members.bubbles, 1, 2)
    return Vectors(nodes, bubbles, vectors.step)


def _group(inverse: Inverse, lam: Array, shift: float, scale: float) -> Block:
    chain = inverse.chain
    block = _orthonormal(chain, inverse.start(lam.size))
    for _ in range(_STEPS):
        block = _orthonormal(chain, inverse.solve(_apply_mass(chain, block)))
    form = inner_product(chain, block, inverse.solve(_apply_mass(chain, block)))
    values, rotation = np.linalg.eigh(-0.5 * (form + form.conj().T))
    block = block @ rotation
    found = shift - 1.0 / values
    equal = np.abs(np.diff(found)) <= EQUAL * (np.abs(found[1:]) + scale)
    starts = np.flatnonzero(np.concatenate([[True], ~equal]))
    for start, stop in zip(starts, np.append(starts[1:], lam.size), strict=True):
        if stop - start > 1:
            part = Block(block.nodes[:, start:stop], block.bubbles[:, :, start:stop])
            _, rotation = np.linalg.eigh(inverse.order(part))
            part = part @ rotation
            block.nodes[:, start:stop], block.bubbles[:, :, start:stop] = part.nodes, part.bubbles
    return _orthonormal(chain, block)


def _apply_mass(chain: Chain, block: Block) -> Block:
    el = chain.elements
    at = np.flatnonzero(chain.element_of_link >= 0)
    ends = np.stack([block.nodes[at], block.nodes[at + 1]], axis=1)
    vertices = el.mass_c @ ends + np.swapaxes(el.mass, 1, 2) @ block.bubbles
    nodes = chain.mass[:, None] * block.nodes
    np.add.at(nodes, at, vertices[:, 0])
    np.add.at(nodes, at + 1, vertices[:, 1])
    return Block(nodes, el.mass @ ends + el.theta[:, :, None] * block.bubbles)


def inner_product(chain: Chain, a: Block, b: Block) -> Field:
    mb = _apply_mass(chain, b)
    result: Field = a.nodes.conj().T @ mb.nodes + np.einsum("eja,ejb->ab", a.bubbles.conj(), mb.bubbles)
    return result


def _orthonormal(chain: Chain, block: Block) -> Block:
    for _ in range(2):
        gram = inner_product(chain, block, block)
        size = 1.0 / np.sqrt(np.diag(gram).real)
        factor = np.linalg.cholesky(gram * np.outer(size, size))
        block = block @ (size[:, None] * np.linalg.inv(factor).conj().T)
    return block


def bubble_system(
    chain: Chain, shift: float, load: Block
) -> tuple[Field, Field, Callable[[Field, Field], Block]]:
    """A load with all bubbles but one pole an element eliminated.

    Returned: the loads of nodes (n+1, m) and poles (n, m), and what makes a block of the solution's nodes and
    poles.
    """
    el = chain.elements
    at = np.flatnonzero(chain.element_of_link >= 0)
    l = shift + el.shift  # noqa: E741
    den = 1.0 - l[:, None] * el.theta
    pole = np.argmin(np.abs(den), axis=1)
    rows = np.arange(el.count)
    pole_load = np.zeros((chain.links, load.nodes.shape[1]), dtype=load.nodes.dtype)
    pole_load[at] = load.bubbles[rows, pole]
    den[rows, pole] = np.inf
    driven = load.bubbles / den[:, :, None]
    vertices = l[:, None, None] * (np.swapaxes(el.mass, 1, 2) @ driven)
    rhs = load.nodes.copy()
    np.add.at(rhs, at, vertices[:, 0])
    np.add.at(rhs, at + 1, vertices[:, 1])

    def back(u: Field, c: Field) -> Block:
        ends = np.stack([u[at], u[at + 1]], axis=1)
        bubbles = driven + l[:, None, None] * (el.mass @ ends) / den[:, :, None]
        bubbles[rows, pole] = c[at]
        return Block(u, bubbles)

    return rhs, pole_load, back


class _OpenInverse:
    """One sweep each way with the pivots of the left sweep."""

    def __init__(self, chain: Chain, shift: float) -> None:
        self.chain = chain
        self._shift = shift
        self._links = condense(chain, np.array([shift]), with_mass=False)
        x, det, _ = sweep_left(chain, self._links, np.array([shift]))
        self._x, self._det = x[:, 0], det[:, 0]

    def start(self, size: int) -> Block:
        """Random vectors, zero at fixed ends."""
        rng = np.random.default_rng(20_000)
        nodes = rng.standard_normal((self.chain.links + 1, size))
        if self.chain.left_fixed:
            nodes[0] = 0.0
        if self.chain.right_fixed:
            nodes[-1] = 0.0
        return Block(nodes, rng.standard_normal((*self.chain.elements.theta.shape, size)))

    def order(self, block: Block) -> Field:
        """Their position along x."""
        return position(self.chain, block)

    def solve(self, load: Block) -> Block:
        """(K - shift M)^-1 load."""
        chain, k, x, pivot = self.chain, self._links, self._x, self._det
        n = chain.links
        rhs, pole_load, back = bubble_system(chain, self._shift, load)
        g, a1, a2, delta = k.g[:, 0], k.a1[:, 0], k.a2[:, 0], k.delta[:, 0]
        d = x[:-1] + k.alpha[:, 0] + g
        first = 1 if chain.left_fixed else 0
        last = n - 1 if chain.right_fixed else n
        if chain.left_fixed:
            rhs[1] -= a2[0] / pivot[0] * pole_load[0]
        for j in range(first, last):
            rhs[j + 1] += (
                (g[j] * delta[j] + a1[j] * a2[j]) * rhs[j] - (a1[j] * g[j] + a2[j] * d[j]) * pole_load[j]
            ) / pivot[j]
        u, c = np.zeros_like(rhs), np.zeros_like(pole_load)
        if chain.right_fixed:
            if n > 1 or not chain.left_fixed:
                u[n - 1] = (delta[-1] * rhs[n - 1] - a1[-1] * pole_load[-1]) / pivot[-1]
                c[-1] = (d[-1] * pole_load[-1] - a1[-1] * rhs[n - 1]) / pivot[-1]
        else:
            u[n] = rhs[n] / x[n]
        for j in range(last - 1, first - 1, -1):
            r, s = rhs[j] + g[j] * u[j + 1], pole_load[j] - a2[j] * u[j + 1]
            u[j] = (delta[j] * r - a1[j] * s) / pivot[j]
            c[j] = (d[j] * s - a1[j] * r) / pivot[j]
        if chain.left_fixed:
            c[0] = (pole_load[0] - (a2[0] * u[1] if not (chain.right_fixed and n == 1) else 0.0)) / pivot[0]
        return back(u, c)


def position(chain: Chain, block: Block) -> Field:
    """int (x - a) / (b - a) phi_i phi_j w dx, over the elements' centres of mass only: enough to order
    members.
    """
    el = chain.elements
    edges = el.mesh.edges
    at = np.flatnonzero(chain.element_of_link >= 0)
    place = (0.5 * (edges[1:] + edges[:-1]) - edges[0]) / (edges[-1] - edges[0])
    ends = np.stack([block.nodes[at], block.nodes[at + 1]], axis=1)
    vertices = el.mass_c @ ends + np.swapaxes(el.mass, 1, 2) @ block.bubbles
    inner = el.mass @ ends + el.theta[:, :, None] * block.bubbles
    result: Field = np.einsum("eva,evb,e->ab", ends.conj(), vertices, place)
    result += np.einsum("eja,ejb,e->ab", block.bubbles.conj(), inner, place)
    return 0.5 * (result + result.conj().T)
