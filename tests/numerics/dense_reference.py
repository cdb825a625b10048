"""A dense solver for layered problems that shares nothing with the product but the equation.

Galerkin in Legendre polynomials (bubbles are integrated Legendre polynomials; Szabo and Babuska, Finite
Element Analysis, 1991, chapter 2), coefficients called as Python functions at Gauss points, and one
dense ``scipy.linalg.eigh`` for the pencil turned upside down: ``M v = mu (K + s M) v``, ``lambda = 1/mu
- s``. Turning it upside down makes the low eigenvalues the large ones of a bounded operator, which a
backward stable driver gives to a few units of rounding; ``K v = lambda M v`` would lose the ratio of
the largest to the lowest.

Conventions are the product's: ``-(p u')' + q u = lambda w u``; a film of h at an end adds ``h u^2`` to
the energy, a lump its mass to the norm, a contact resistance ``[u]^2 / R`` and a resistance before a
lump ``(v - u)^2 / R`` with the lump's own value v.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.polynomial import legendre
from numpy.typing import ArrayLike, NDArray
from scipy.linalg import LinAlgError, eigh

Function = Callable[[NDArray[np.float64]], ArrayLike]


@dataclass(frozen=True)
class DenseLayer:
    """One layer with p, q, w as functions; ``pieces`` elements of equal length, or cut at ``cuts``."""

    start: float
    end: float
    p: Function
    q: Function
    w: Function
    pieces: int = 2
    cuts: tuple[float, ...] = ()


@dataclass(frozen=True)
class DenseEnd:
    """Dirichlet, or the natural condition with a stiffness and a mass at the end or behind a resistance."""

    dirichlet: bool = False
    stiffness: float = 0.0
    mass: float = 0.0
    resistance: float = 0.0


@dataclass(frozen=True)
class DenseJoint:
    """Contact resistance, point spring and point mass at the inner edge x; the last two without the first."""

    x: float
    resistance: float = 0.0
    spring: float = 0.0
    mass: float = 0.0


@dataclass(frozen=True)
class DenseProblem:
    layers: tuple[DenseLayer, ...]
    left: DenseEnd = field(default_factory=DenseEnd)
    right: DenseEnd = field(default_factory=DenseEnd)
    joints: tuple[DenseJoint, ...] = ()

    def scale(self) -> float:
        """(pi / integral of sqrt(w/p))^2, by Gauss's rule on a fine composite mesh."""
        total = 0.0
        t, weights = legendre.leggauss(40)
        for layer in self.layers:
            edges = np.union1d(np.linspace(layer.start, layer.end, 65), layer.cuts)
            half = np.diff(edges)[:, None] / 2.0
            x = (edges[:-1, None] + edges[1:, None]) / 2.0 + half * t
            total += float(np.sum(weights * half * np.sqrt(_at(layer.w, x) / _at(layer.p, x))))
        return (np.pi / total) ** 2


@dataclass(frozen=True)
class DenseModes:
    """The lowest eigenvalues and modes: values at x, and the lumps' own values."""

    eigenvalues: NDArray[np.float64]
    edges: NDArray[np.float64]
    local: NDArray[np.float64]
    left_lump: NDArray[np.float64]
    right_lump: NDArray[np.float64]

    def at(self, x: ArrayLike) -> NDArray[np.float64]:
        """Values (modes, points) at points x inside elements."""
        points = np.asarray(x, dtype=float)
        element = np.clip(np.searchsorted(self.edges, points, side="right") - 1, 0, len(self.edges) - 2)
        a, b = self.edges[element], self.edges[element + 1]
        shapes, _ = _shapes((2.0 * points - a - b) / (b - a), self.local.shape[1] - 1)
        return np.asarray(np.einsum("kgn,kg->ng", self.local[element].transpose(1, 0, 2), shapes))


def _at(function: Function, x: NDArray[np.float64]) -> NDArray[np.float64]:
    return np.broadcast_to(np.asarray(function(x), dtype=float), x.shape)


def _shapes(t: NDArray[np.float64], degree: int) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Vertex functions and bubbles with their derivatives in t, (degree + 1, points) each."""
    values = legendre.legvander(t, degree).T
    shapes, slopes = np.empty_like(values), np.empty_like(values)
    shapes[0], shapes[1] = (1.0 - t) / 2.0, (1.0 + t) / 2.0
    slopes[0], slopes[1] = -0.5, 0.5
    for k in range(2, degree + 1):
        norm = np.sqrt(2.0 * (2 * k - 1))
        shapes[k] = (values[k] - values[k - 2]) / norm
        slopes[k] = (2 * k - 1) * values[k - 1] / norm
    return shapes, slopes


def _number_unknowns(
    problem: DenseProblem, degree: int
) -> tuple[NDArray[np.float64], NDArray[np.int64], list[int]]:
    """Element edges, the unknown of each local function (elements, degree + 1), each element's layer."""
    broken = {joint.x for joint in problem.joints if joint.resistance > 0.0}
    edges, layer_of = [problem.layers[0].start], []
    for i, layer in enumerate(problem.layers):
        own = np.union1d(np.linspace(layer.start, layer.end, layer.pieces + 1), layer.cuts)
        edges.extend(own[1:])
        layer_of.extend([i] * (len(own) - 1))
    unknown = np.empty((len(layer_of), degree + 1), dtype=np.int64)
    count = 1
    for e in range(len(layer_of)):
        if e > 0 and edges[e] in broken:
            count += 1
        unknown[e, 0] = count - 1
        unknown[e, 2:] = count + np.arange(degree - 1)
        unknown[e, 1] = count + degree - 1
        count += degree
    return np.asarray(edges), unknown, layer_of


def _assemble(
    problem: DenseProblem, degree: int
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64], NDArray[np.int64], tuple[int, int]]:
    edges, unknown, layer_of = _number_unknowns(problem, degree)
    body = int(unknown.max()) + 1
    left_lump = body if problem.left.resistance > 0.0 else int(unknown[0, 0])
    right_lump = (
        body + (problem.left.resistance > 0.0) if problem.right.resistance > 0.0 else int(unknown[-1, 1])
    )
    size = max(body, left_lump + 1, right_lump + 1)
    stiffness, mass = np.zeros((size, size)), np.zeros((size, size))
    t, weights = legendre.leggauss(2 * degree + 12)
    shapes, slopes = _shapes(t, degree)
    for e, i in enumerate(layer_of):
        layer, half = problem.layers[i], (edges[e + 1] - edges[e]) / 2.0
        x = (edges[e] + edges[e + 1]) / 2.0 + half * t
        here = np.ix_(unknown[e], unknown[e])
        stiffness[here] += (slopes * (weights * _at(layer.p, x) / half)) @ slopes.T
        stiffness[here] += (shapes * (weights * half * _at(layer.q, x))) @ shapes.T
        mass[here] += (shapes * (weights * half * _at(layer.w, x))) @ shapes.T
    for end, at, lump in (
        (problem.left, unknown[0, 0], left_lump),
        (problem.right, unknown[-1, 1], right_lump),
    ):
        stiffness[lump, lump] += end.stiffness
        mass[lump, lump] += end.mass
        if end.resistance > 0.0:
            _couple(stiffness, int(at), lump, end.resistance)
    for joint in problem.joints:
        e = int(np.flatnonzero(edges == joint.x)[0])
        before, after = int(unknown[e - 1, 1]), int(unknown[e, 0])
        if joint.resistance > 0.0:
            _couple(stiffness, before, after, joint.resistance)
        stiffness[after, after] += joint.spring
        mass[after, after] += joint.mass
    return stiffness, mass, edges, unknown, (left_lump, right_lump)


def _couple(stiffness: NDArray[np.float64], one: int, other: int, resistance: float) -> None:
    stiffness[np.ix_([one, other], [one, other])] += np.array([[1.0, -1.0], [-1.0, 1.0]]) / resistance


def solve_dense(problem: DenseProblem, count: int, degree: int = 32) -> DenseModes:
    """The lowest ``count`` modes, of unit norm with the masses in it, with the product's sign."""
    stiffness, mass, edges, unknown, lumps = _assemble(problem, degree)
    fixed: list[int] = []
    if problem.left.dirichlet:
        fixed.append(int(unknown[0, 0]))
    if problem.right.dirichlet:
        fixed.append(int(unknown[-1, 1]))
    free = np.setdiff1d(np.arange(len(mass)), fixed)
    stiffness, mass = stiffness[np.ix_(free, free)], mass[np.ix_(free, free)]
    shift = 16.0 * problem.scale()
    for _ in range(60):
        try:
            inverse, vectors = eigh(mass, stiffness + shift * mass, driver="gvd")
            break
        except LinAlgError:
            shift *= 2.0
    else:
        raise ValueError("no shift makes the energy positive")
    inverse, vectors = inverse[::-1][:count], vectors[:, ::-1][:, :count]
    whole = np.zeros((int(unknown.max()) + 3, count))
    whole[free] = vectors / np.sqrt(inverse)
    local = whole[unknown]
    first = 1e-6 * (edges[1] - edges[0])
    modes = DenseModes(1.0 / inverse - shift, edges, local, whole[lumps[0]], whole[lumps[1]])
    sign = np.sign(modes.at([edges[0] + first])[:, 0])
    return DenseModes(modes.eigenvalues, edges, local * sign, whole[lumps[0]] * sign, whole[lumps[1]] * sign)


def constant(value: float) -> Function:
    """The constant function, for layers of one material."""
    return lambda x: np.full(np.shape(x), value)


def sequence(layers: Sequence[DenseLayer], **ends: DenseEnd) -> DenseProblem:
    """A problem of layers in the order given."""
    return DenseProblem(tuple(layers), **ends)
