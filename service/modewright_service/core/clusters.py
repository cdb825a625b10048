"""Orthonormal vectors for eigenvalues too close to be told apart one by one.

A single twisted vector has an error of rounding over relative gap; members of a close group would come out
parallel. So groups get block inverse iteration on the condensed chain, with a shift displaced from the group
by a thousandth of the gap around it, and a Rayleigh-Ritz step on the inverse (Parlett, The Symmetric
Eigenvalue Problem, 1998, ch. 4 and 14). Where even their eigenvalues agree to rounding any rotation of the
members would be as good; the one that diagonalises the position int x phi_i phi_j w dx is taken, members
ordered by it, so that the choice is reproducible.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from modewright_service.core.condensed import (
    Chain,
    Evaluation,
    Links,
    Vectors,
    condense,
    count_below,
    eigenvectors,
    evaluate,
    sweep_left,
)

__all__ = ["OpenChain", "separate"]

Array = NDArray[np.float64]
IntArray = NDArray[np.int64]

# Neighbours closer than this (relative to their size) form a group: beyond it single vectors are good to
# 1e-12.
_CLOSE = 1e-4
# Each step gains three digits (the displacement); five reach rounding from any start.
_STEPS = 5
# Eigenvalues of a group that agree to so many units of rounding are one eigenvalue with several vectors.
_EQUAL = 64.0 * float(np.finfo(float).eps)


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
        return separate(self.chain, lam, eigenvectors(self.chain, lam), scale)


@dataclass(frozen=True, eq=False)
class _Block:
    """m vectors: nodes (n+1, m), bubbles (E, J, m)."""

    nodes: Array
    bubbles: Array

    def __matmul__(self, matrix: Array) -> _Block:
        return _Block(self.nodes @ matrix, self.bubbles @ matrix)


def separate(chain: Chain, lam: Array, vectors: Vectors, scale: float) -> Vectors:
    """`vectors` with the members of close groups replaced by orthonormal ones.

    lam: (T,) ascending. scale: Lambda, the size that rounding is judged by near lambda = 0.
    """
    size = np.maximum(np.maximum(np.abs(lam[1:]), np.abs(lam[:-1])), scale)
    close = np.diff(lam) <= _CLOSE * size
    if not close.any():
        return vectors
    nodes, bubbles = vectors.nodes.copy(), vectors.bubbles.copy()
    starts = np.flatnonzero(np.concatenate([[True], ~close]))
    for start, stop in zip(starts, np.append(starts[1:], lam.size), strict=True):
        if stop - start < 2:
            continue
        below = lam[start] - lam[start - 1] if start > 0 else np.inf
        above = lam[stop] - lam[stop - 1] if stop < lam.size else np.inf
        around = min(below, above, abs(lam[start]) + scale)
        members = _group(chain, lam[start:stop], float(lam[start] - 1e-3 * around), scale)
        nodes[:, start:stop] = members.nodes
        bubbles[:, start:stop] = np.swapaxes(members.bubbles, 1, 2)
    return Vectors(nodes, bubbles, vectors.step)


def _group(chain: Chain, lam: Array, shift: float, scale: float) -> _Block:
    el = chain.elements
    links = condense(chain, np.array([shift]), with_mass=True)
    x, det, _ = sweep_left(chain, links, np.array([shift]))
    rng = np.random.default_rng(20_000)
    block = _Block(
        rng.standard_normal((chain.links + 1, lam.size)),
        rng.standard_normal((*el.theta.shape, lam.size)),
    )
    if chain.left_fixed:
        block.nodes[0] = 0.0
    if chain.right_fixed:
        block.nodes[-1] = 0.0
    block = _orthonormal(chain, block)
    for _ in range(_STEPS):
        block = _orthonormal(chain, _solve(chain, links, x, det, shift, _apply_mass(chain, block)))
    image = _solve(chain, links, x, det, shift, _apply_mass(chain, block))
    inverse = _inner(chain, block, image)
    values, rotation = np.linalg.eigh(-0.5 * (inverse + inverse.T))
    block = block @ rotation
    found = shift - 1.0 / values
    equal = np.abs(np.diff(found)) <= _EQUAL * (np.abs(found[1:]) + scale)
    starts = np.flatnonzero(np.concatenate([[True], ~equal]))
    for start, stop in zip(starts, np.append(starts[1:], lam.size), strict=True):
        if stop - start > 1:
            part = _Block(block.nodes[:, start:stop], block.bubbles[:, :, start:stop])
            _, rotation = np.linalg.eigh(_position(chain, part))
            part = part @ rotation
            block.nodes[:, start:stop], block.bubbles[:, :, start:stop] = part.nodes, part.bubbles
    return _orthonormal(chain, block)


def _apply_mass(chain: Chain, block: _Block) -> _Block:
    el = chain.elements
    at = np.flatnonzero(chain.element_of_link >= 0)
    ends = np.stack([block.nodes[at], block.nodes[at + 1]], axis=1)
    vertices = el.mass_c @ ends + np.swapaxes(el.mass, 1, 2) @ block.bubbles
    nodes = chain.mass[:, None] * block.nodes
    np.add.at(nodes, at, vertices[:, 0])
    np.add.at(nodes, at + 1, vertices[:, 1])
    return _Block(nodes, el.mass @ ends + el.theta[:, :, None] * block.bubbles)


def _inner(chain: Chain, a: _Block, b: _Block) -> Array:
    mb = _apply_mass(chain, b)
    result: Array = a.nodes.T @ mb.nodes + np.einsum("eja,ejb->ab", a.bubbles, mb.bubbles)
    return result


def _orthonormal(chain: Chain, block: _Block) -> _Block:
    for _ in range(2):
        gram = _inner(chain, block, block)
        size = 1.0 / np.sqrt(np.diag(gram))
        factor = np.linalg.cholesky(gram * np.outer(size, size))
        block = block @ (size[:, None] * np.linalg.inv(factor).T)
    return block


def _solve(chain: Chain, k: Links, x: Array, det: Array, shift: float, load: _Block) -> _Block:
    """(K - shift M)^-1 load: bubbles eliminated, one sweep each way with the pivots of the left sweep."""
    el = chain.elements
    n = chain.links
    at = np.flatnonzero(chain.element_of_link >= 0)
    l = shift + el.shift  # noqa: E741
    den = 1.0 - l[:, None] * el.theta
    pole = np.argmin(np.abs(den), axis=1)
    rows = np.arange(el.count)
    pole_load = np.zeros((n, load.nodes.shape[1]))
    pole_load[at] = load.bubbles[rows, pole]
    den[rows, pole] = np.inf
    driven = load.bubbles / den[:, :, None]
    vertices = l[:, None, None] * (np.swapaxes(el.mass, 1, 2) @ driven)
    rhs = load.nodes.copy()
    np.add.at(rhs, at, vertices[:, 0])
    np.add.at(rhs, at + 1, vertices[:, 1])

    g, a1, a2, delta = k.g[:, 0], k.a1[:, 0], k.a2[:, 0], k.delta[:, 0]
    d = x[:-1, 0] + k.alpha[:, 0] + g
    pivot = det[:, 0]
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
        u[n] = rhs[n] / x[n, 0]
    for j in range(last - 1, first - 1, -1):
        r, s = rhs[j] + g[j] * u[j + 1], pole_load[j] - a2[j] * u[j + 1]
        u[j] = (delta[j] * r - a1[j] * s) / pivot[j]
        c[j] = (d[j] * s - a1[j] * r) / pivot[j]
    if chain.left_fixed:
        c[0] = (pole_load[0] - (a2[0] * u[1] if not (chain.right_fixed and n == 1) else 0.0)) / pivot[0]
    ends = np.stack([u[at], u[at + 1]], axis=1)
    bubbles = driven + l[:, None, None] * (el.mass @ ends) / den[:, :, None]
    bubbles[rows, pole] = c[at]
    return _Block(u, bubbles)


def _position(chain: Chain, block: _Block) -> Array:
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
    result: Array = np.einsum("eva,evb,e->ab", ends, vertices, place)
    result += np.einsum("eja,ejb,e->ab", block.bubbles, inner, place)
    return 0.5 * (result + result.T)
