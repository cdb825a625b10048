"""Element matrices, decomposed once so that they can be condensed for any lambda.

On each element u is a polynomial: two vertex functions (1 -+ t)/2 and the integrated Legendre functions
b_j = (P_{j+1} - P_{j-1}) / sqrt(2(2j+1)) (Szabo and Babuska, Finite Element Analysis, 1991, sec. 3.1), for
which the stiffness of a constant p is the identity up to a factor. With a shift s >= 0 that makes the
bubbles' C = K_bb + s M_bb positive definite, C = L L^T and the decomposition of L^-1 M_bb L^-T give
energy-orthonormal bubble modes v_j with masses theta_j = 1/(mu_j + s), mu_j the element's fixed-ends
eigenvalues (theta_j = 0 where w = 0). Vertex functions are extended C-orthogonally to the bubbles; then, with
l = lambda + s,

    S(l) = C_c - l M_c - l^2 sum_j m_j m_j^T / (1 - l theta_j)

is the element's condensed 2 x 2 matrix (Wittrick and Williams, Q. J. Mech. Appl. Math. 24, 1971, 263-284).
S is carried as g = -S_01 and the row sums alpha, gamma: row sums come from the function 1, whose p-energy is
exactly zero, so a large p never buries a small q or lambda w.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np
from numpy.typing import NDArray

from modewright_service.core.approximation import CoefficientMesh
from modewright_service.core.end_elements import EndReference, end_reference
from modewright_service.core.quadrature import gauss_legendre

__all__ = ["Elements", "Reference", "build_elements", "reference"]

Array = NDArray[np.float64]
# Values of modes: complex where the ends are coupled with a phase.
Field = NDArray[Any]


@dataclass(frozen=True, eq=False)
class Reference:
    """The shape functions of one degree k on [-1, 1] at G Gauss-Legendre points.

    points, weights: (G,). values, slopes: (G, k+1), columns: two vertex functions, then k-1 bubbles.
    to_legendre: (k+1, k+1); row i holds the Legendre coefficients of shape function i.
    antiderivative: (G, G), the values of a polynomial of degree < G to those of its integral from -1.
    """

    degree: int
    points: Array
    weights: Array
    values: Array
    slopes: Array
    to_legendre: Array
    antiderivative: Array


def _legendre(t: Array, degree: int) -> Array:
    values: Array = np.polynomial.legendre.legvander(t, degree).astype(np.float64, copy=False)
    return values


@lru_cache(maxsize=64)
def reference(degree: int, points: int) -> Reference:
    """Shape functions of `degree` >= 2 at `points` Gauss-Legendre points (cached; do not write to it)."""
    t, weight = gauss_legendre(points)
    shapes = np.zeros((degree + 1, degree + 1))
    shapes[0, :2] = (0.5, -0.5)
    shapes[1, :2] = (0.5, 0.5)
    for j in range(1, degree):
        norm = 1.0 / np.sqrt(2.0 * (2 * j + 1))
        shapes[j + 1, j + 1] = norm
        shapes[j + 1, j - 1] = -norm
    legendre = _legendre(t, degree)
    slopes = np.zeros((points, degree + 1))
    slopes[:, 0] = -0.5
    slopes[:, 1] = 0.5
    for j in range(1, degree):
        slopes[:, j + 1] = legendre[:, j] * np.sqrt((2 * j + 1) / 2.0)
    full = _legendre(t, points)
    # analysis: values at the Gauss points -> Legendre coefficients (exact below degree G)
    analysis = (full[:, :points] * weight[:, None]).T * (np.arange(points)[:, None] + 0.5)
    # integral of P_j from -1: (P_{j+1} - P_{j-1})/(2j+1), and 1 + t for j = 0
    integral = np.zeros((points, points))
    integral[:, 0] = 1.0 + t
    for j in range(1, points):
        integral[:, j] = (full[:, j + 1] - full[:, j - 1]) / (2 * j + 1)
    return Reference(degree, t, weight, legendre @ shapes.T, slopes, shapes, integral @ analysis)


@dataclass(frozen=True, eq=False)
class Elements:
    """Decomposed elements: E elements of degree k, J = k - 1 bubbles.

    mesh: the coefficients they come from. reference: the shape functions.
    ends: (element, shape functions) of the end elements (:mod:`.end_elements`).
    p, q, w: (E, G) coefficient values at the Gauss points; half: (E,) half lengths; weights: (E, G) of the
        quadrature in x. On end elements the coefficients of v_t^2, v^2, v^2 in the weight t^(m D), the
        weights those of Gauss-Jacobi, half = 1.
    shift: (E,) s. theta: (E, J) descending masses of the bubble modes; modes: (E, J, J), columns v_j in
        bubbles.
    kappa: (E, J, 2) C(v_j, N_v); mass: (E, J, 2) m_j = M(v_j, psi_v).
    g: (E,) -C_c[0, 1]; rows: (E, 2) row sums of C_c; mass_c: (E, 2, 2) M_c.
    """

    mesh: CoefficientMesh
    reference: Reference
    ends: tuple[tuple[int, EndReference], ...]
    half: Array
    weights: Array
    p: Array
    q: Array
    w: Array
    shift: Array
    theta: Array
    modes: Array
    kappa: Array
    mass: Array
    g: Array
    rows: Array
    mass_c: Array

    @property
    def count(self) -> int:
        return int(self.half.size)

    def values_of(self, shapes: Field) -> Field:
        """(E, T, G): u (on end elements v) at the quadrature points, from shapes (E, T, k+1)."""
        result: Field = np.matmul(shapes, self.reference.values.T)
        for element, own in self.ends:
            result[element] = shapes[element] @ own.values.T
        return result

    def fluxes_of(self, shapes: Field) -> Field:
        """(E, T, G): p u' at the quadrature points (on end elements that of v, t^(m D) divided out)."""
        result: Field = np.matmul(shapes, self.reference.slopes.T)
        for element, own in self.ends:
            result[element] = shapes[element] @ own.slopes.T
        result *= (self.p / self.half[:, None])[:, None, :]
        return result

    def running(self, load: Field) -> Field:
        """(E, T, G): integrals of a load (E, T, G) from the left, on end elements from the singular end."""
        result: Field = np.matmul(load, self.reference.antiderivative.T) * self.half[:, None, None]
        for element, own in self.ends:
            result[element] = load[element] @ own.running.T
        return result

    def residuals(self, flux: Field, load: Field) -> Field:
        """(E, T): flux at the left of each element, from the residual of its left vertex function.

        int p u' N' + int (q - lambda w) u N, negated, flux and load given at the quadrature points.
        """
        ref = self.reference
        result: Field = np.einsum("etg,g->et", flux, ref.weights * ref.slopes[:, 0])
        result += np.einsum("etg,eg->et", load, self.weights * ref.values[:, 0])
        for element, own in self.ends:
            result[element] = load[element] @ (own.weights * own.values[:, 0])
        return -result

    def legendre_of(self, shapes: Field) -> Field:
        """(E, T, k+1): Legendre coefficients in each element's own variable."""
        result: Field = np.matmul(shapes, self.reference.to_legendre)
        for element, own in self.ends:
            result[element] = shapes[element] @ own.to_legendre
        return result


def build_elements(mesh: CoefficientMesh, degree: int) -> Elements:
    """Matrices and decompositions of all elements of `mesh`, shape functions of `degree` >= 2."""
    orders = mesh.p.shape[1] - 1
    # exact for shape * shape * coefficient, and for (q - lambda w) u against Legendre degree k + d
    extra = max((end.steps - 1 for _, end in mesh.end_maps), default=0)
    ref = reference(degree, degree + orders + 2 + extra)
    coefficient_values = _legendre(ref.points, orders).T
    p, q, w = mesh.p @ coefficient_values, mesh.q @ coefficient_values, mesh.w @ coefficient_values
    half = 0.5 * np.diff(mesh.edges)
    weights = ref.weights * half[:, None]
    ends = _ends(mesh, ref, p, q, w, half, weights)
    stiff_p = _products(ref.slopes, p * (ref.weights / half[:, None]))
    stiff_q = _products(ref.values, q * weights)
    masses = _products(ref.values, w * weights)
    for e, own in ends:
        one = slice(e, e + 1)
        stiff_p[one] = _products(own.slopes, p[one] * own.weights)
        stiff_q[one] = _products(own.values, q[one] * own.weights)
        masses[one] = _products(own.values, w[one] * own.weights)
        # bubbles that are zero get an energy, so that they stay zero
        empty = np.flatnonzero(~own.values[:, 2:].any(axis=0)) + 2
        stiff_p[e, empty, empty] = 1.0
    shift = _shifts(stiff_p[:, 2:, 2:], stiff_q[:, 2:, 2:], masses[:, 2:, 2:], q, w)
    s = shift[:, None, None]
    no_p = stiff_q + s * masses
    energy = stiff_p + no_p

    lower = np.linalg.cholesky(energy[:, 2:, 2:])
    half_way = np.linalg.solve(lower, masses[:, 2:, 2:])
    pencil = np.linalg.solve(lower, np.swapaxes(half_way, 1, 2))
    theta, vectors = np.linalg.eigh(0.5 * (pencil + np.swapaxes(pencil, 1, 2)))
    theta = np.maximum(theta[:, ::-1], 0.0)
    modes = np.linalg.solve(np.swapaxes(lower, 1, 2), vectors[:, :, ::-1])

    modes_t = np.swapaxes(modes, 1, 2)
    kappa = modes_t @ energy[:, 2:, :2]
    mass = modes_t @ masses[:, 2:, :2] - theta[:, :, None] * kappa
    kappa_t = np.swapaxes(kappa, 1, 2)
    g = -(energy[:, 0, 1] - np.einsum("ej,ej->e", kappa[:, :, 0], kappa[:, :, 1]))
    # C(1, psi_v): 1 = N_0 + N_1 has no p-energy, only the q + s w part remains
    one_vertices = no_p[:, :2, 0] + no_p[:, :2, 1]
    one_bubbles = np.einsum("ebj,eb->ej", modes, no_p[:, 2:, 0] + no_p[:, 2:, 1])
    rows = one_vertices - np.einsum("ejv,ej->ev", kappa, one_bubbles)
    cross = kappa_t @ (modes_t @ masses[:, 2:, :2])
    mass_c = masses[:, :2, :2] - cross - np.swapaxes(cross, 1, 2) + kappa_t @ (theta[:, :, None] * kappa)
    return Elements(
        mesh, ref, ends, half, weights, p, q, w, shift, theta, modes, kappa, mass, g, rows, mass_c
    )


def _ends(
    mesh: CoefficientMesh, ref: Reference, p: Array, q: Array, w: Array, half: Array, weights: Array
) -> tuple[tuple[int, EndReference], ...]:
    """Shape functions of the end elements; their rows of p, q, w, half and weights are written in place."""
    found = []
    for e, end in mesh.end_maps:
        own = end_reference(ref.degree, ref.points.size, end.power, end.w_steps, end.flat, e == 0)
        tau = 2.0 * own.t - 1.0 if e == 0 else 1.0 - 2.0 * own.t
        scale = float(mesh.edges[e + 1] - mesh.edges[e]) * end.m
        table = _legendre(tau, mesh.p.shape[1] - 1)
        p[e] = (table @ mesh.p[e]) * own.t ** (1 - end.flat) / scale
        q[e] = (table @ mesh.q[e]) * scale
        w[e] = (table @ mesh.w[e]) * own.t**end.w_steps * scale
        half[e] = 1.0
        weights[e] = own.weights
        found.append((e, own))
    return tuple(found)


def _products(shapes: Array, weights: Array) -> Array:
    """sum_g weights[e, g] shapes[g, i] shapes[g, j] -> (E, k+1, k+1)."""
    scaled = shapes[None, :, :] * weights[:, :, None]
    result: Array = np.matmul(shapes.T, scaled)
    return 0.5 * (result + np.swapaxes(result, 1, 2))


def _shifts(stiff_p: Array, stiff_q: Array, masses: Array, q: Array, w: Array) -> Array:
    """(E,) the smallest shift of a doubling ladder with K_p/2 + K_q + s M positive definite on the bubbles.

    Half of K_p is held back so that C is never nearly singular. Without negative q no shift is needed.
    """
    shift = np.zeros(stiff_p.shape[0])
    for e in np.flatnonzero(np.min(q, axis=1) < 0.0):
        base = 0.5 * stiff_p[e] + stiff_q[e]
        step = float(np.max(-q[e])) / float(np.max(w[e])) if np.max(w[e]) > 0 else 0.0
        trial = 0.0
        for _ in range(60):
            try:
                np.linalg.cholesky(base + trial * masses[e])
                break
            except np.linalg.LinAlgError:
                trial = max(2.0 * trial, 0.25 * step)
        shift[e] = trial
    return shift
