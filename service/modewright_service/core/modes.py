"""From condensed vectors to normalised piecewise polynomials, their fluxes and their zeros.

The flux is rebuilt from the equation, sigma' = (q - lambda w) u, starting on each element from the consistent
nodal flux (the residual of the left vertex function). The difference d = sigma - p u' carries the whole error
of a mode; it is what the lower bounds of :mod:`.bounds` are made of.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from modewright_service.core.condensed import Chain, Field, Vectors
from modewright_service.core.elements import Elements

__all__ = ["FluxDefect", "Modes", "flux_defects", "interior_zeros", "make_modes"]

Array = NDArray[np.float64]

_EPS = float(np.finfo(float).eps)
# Decaying tails keep their relative accuracy down to here; below, doubles lose digits.
_FADED = 1e-280


@dataclass(frozen=True, eq=False)
class Modes:
    """T normalised modes.

    shapes: (E, T, k+1) coefficients of the element shape functions. nodes: (n+1, T) values on the chain.
    Complex where the ends are coupled with a phase.
    """

    shapes: Field
    nodes: Field

    def legendre(self, elements: Elements) -> Field:
        """(T, E (k+1)) Legendre coefficients, element after element."""
        values = elements.legendre_of(self.shapes)
        return np.ascontiguousarray(np.swapaxes(values, 0, 1)).reshape(values.shape[1], -1)


def make_modes(chain: Chain, vectors: Vectors) -> Modes:
    """Shape-function coefficients of unit norm, sign fixed."""
    el = chain.elements
    at = np.flatnonzero(chain.element_of_link >= 0)
    left, right = vectors.nodes[at], vectors.nodes[at + 1]
    amplitudes = vectors.bubbles - (
        left[:, :, None] * el.kappa[:, None, :, 0] + right[:, :, None] * el.kappa[:, None, :, 1]
    )
    bubbles = np.matmul(amplitudes, np.swapaxes(el.modes, 1, 2))
    for element, _ in el.ends:
        _chop(bubbles[element])
    shapes = np.concatenate([left[:, :, None], right[:, :, None], bubbles], axis=2)
    nodes = vectors.nodes
    factor = _signs(chain, shapes, nodes) / _norms(chain, shapes, nodes)
    return Modes(shapes * factor[None, :, None], nodes * factor)


def _chop(bubbles: Field) -> None:
    """Set the last coefficients to zero that are rounding, in place; (T, J), by degree.

    Jacobi polynomials with a high exponent are so large at the end that rounding there would pass for values.
    """
    small = np.abs(bubbles) <= 2.0 * _EPS * np.abs(bubbles).max(axis=1, keepdims=True)
    trailing = np.logical_and.accumulate(small[:, ::-1], axis=1)[:, ::-1]
    bubbles[trailing] = 0.0


def _norms(chain: Chain, shapes: Field, nodes: Field) -> Array:
    """(T,) norms by quadrature, point masses included."""
    el = chain.elements
    norm2: Array = np.einsum("etg,eg->t", _square(el.values_of(shapes)), el.w * el.weights)
    norm2 += (chain.mass[:, None] * _square(nodes)).sum(axis=0)
    return np.sqrt(norm2)


def _square(values: Field) -> Array:
    """|values|^2."""
    result: Array = values.real**2 + values.imag**2 if np.iscomplexobj(values) else values * values
    return result


def _signs(chain: Chain, shapes: Field, nodes: Field) -> Field:
    """+-1, or a phase factor, so that u > 0 right of the left end, or p u' > 0 there where u vanishes."""
    # slope at t = -1 of the shape functions of the first element
    slope = shapes[0] @ _end_slopes(chain.elements.reference.degree, -1.0)
    if chain.elements.mesh.left_map is not None:
        lead = _first_value(chain.elements, shapes[0])
    elif chain.left_fixed:
        lead = slope
    else:
        lead = nodes[chain.left_node]
        if chain.factor is not None:
            # the second of an equal pair is made to vanish at the seam
            peak = np.abs(shapes[0] @ chain.elements.reference.values.T).max(axis=1)
            lead = np.where(np.abs(lead) > 1e-6 * peak, lead, slope)
    if np.iscomplexobj(lead):
        size = np.abs(lead)
        phase: Field = np.where(size > 0.0, lead.conj() / np.where(size > 0.0, size, 1.0), 1.0)
        return phase
    return np.where(lead < 0.0, -1.0, 1.0)


def _first_value(el: Elements, shapes: Field) -> Field:
    """(T,) v at the first point of the left end element at which it is more than rounding.

    Rounding is relative to t^(b/2) v, t^b the weight of the mass: with a high b v itself is noise at the end.
    """
    own, end = el.ends[0][1], el.mesh.end_maps[0][1]
    values = shapes @ own.values.T
    size = np.abs(values) * own.t ** (0.5 * max(end.power + end.w_steps, 0.0))
    first = np.argmax(size > 1e-6 * size.max(axis=1, keepdims=True), axis=1)
    result: Field = np.take_along_axis(values, first[:, None], axis=1)[:, 0]
    return result


def _end_slopes(degree: int, t: float) -> Array:
    """(k+1,) derivatives d/dt of the shape functions at t = -1 or 1: P_j(+-1) = (+-1)^j."""
    j = np.arange(1, degree)
    return np.concatenate([[-0.5, 0.5], np.sqrt((2 * j + 1) / 2.0) * np.where(t < 0, (-1.0) ** j, 1.0)])


@dataclass(frozen=True, eq=False)
class FluxDefect:
    """scaled: (T, E G + joints) entries whose products sum to the Gram matrix int d_i d_j / p.

    energy: (T,) int p u'^2 + |q| u^2 + |point terms|, the size that rounding works on.
    by_element: (T, E) the elements' shares of int d^2 / p.
    """

    scaled: Field
    energy: Array
    by_element: Array


def flux_defects(chain: Chain, lam: Array, modes: Modes) -> FluxDefect:
    """Rebuilt flux minus p u' of every mode at the Gauss points, divided by sqrt(p)."""
    el = chain.elements
    at = np.flatnonzero(chain.element_of_link >= 0)
    u, flux = el.values_of(modes.shapes), el.fluxes_of(modes.shapes)
    load = el.q[:, None, :] * u - lam[None, :, None] * (el.w[:, None, :] * u)
    weights = el.weights
    start = el.residuals(flux, load)
    sigma = el.running(load)
    plain = el.mesh.plain
    sigma[plain] += start[plain, :, None]
    root = np.sqrt(weights / el.p)
    defect = (sigma - flux) * root[:, None, :]
    by_element = _square(defect).sum(axis=2).T
    scaled = np.swapaxes(defect, 0, 1).reshape(lam.size, -1)

    energy = np.einsum("etg,eg->t", _square(flux), weights / el.p)
    energy += np.einsum("etg,eg->t", _square(u), weights * np.abs(el.q))
    energy += (np.abs(chain.stiffness)[:, None] * _square(modes.nodes)).sum(axis=0)
    resistances = np.flatnonzero(chain.element_of_link < 0)
    jumps = np.zeros((lam.size, resistances.size), dtype=scaled.dtype)
    end_flux = start + np.einsum("etg,eg->et", load, weights)
    for column, j in enumerate(resistances):
        through = chain.conductance[j] * (modes.nodes[j + 1] - modes.nodes[j])
        energy += _square(through) / chain.conductance[j]
        jumps[:, column] = (_joint_flux(chain, lam, modes, start, end_flux, at, int(j)) - through) / np.sqrt(
            chain.conductance[j]
        )
    return FluxDefect(np.concatenate([scaled, jumps], axis=1), energy, by_element)


def _joint_flux(
    chain: Chain, lam: Array, modes: Modes, start: Field, end_flux: Field, at: NDArray[np.int64], j: int
) -> Field:
    """(T,) flux through resistance link j: of the element right of it, or from the lump behind it."""
    follower = np.flatnonzero(at == j + 1)
    # the point terms of a node between a resistance and an element make sigma jump by (S - lambda m) u
    if follower.size:
        node = j + 1
        terms = chain.stiffness[node] - lam * chain.mass[node]
        flux: Field = start[follower[0]] - terms * modes.nodes[node]
        return flux
    leader = np.flatnonzero(at == j - 1)
    terms = chain.stiffness[j] - lam * chain.mass[j]
    flux = end_flux[leader[0]] + terms * modes.nodes[j]
    return flux


def interior_zeros(chain: Chain, modes: Modes, legendre: Field) -> NDArray[np.int64]:
    """(T,) sign changes inside the interval, one across a resistance included, counted on the polynomials.

    legendre: what :meth:`Modes.legendre` returned. Sampled at 2 k + 3 Chebyshev-Lobatto points an element,
    more than twice as dense as the zeros that a polynomial of degree k with some twenty radians can have.
    With coupled ends those of a <= x < b, the change from b to a counting where there is one; -1 for complex
    modes, which have none.
    """
    if np.iscomplexobj(legendre):
        return np.full(legendre.shape[0], -1, dtype=np.int64)
    el = chain.elements
    k = el.reference.degree
    t = -np.cos(np.pi * np.arange(2 * k + 3) / (2 * k + 2))
    vander = np.polynomial.legendre.legvander(t, k)
    coefficients = legendre.reshape(legendre.shape[0], el.count, k + 1)
    samples = np.matmul(coefficients, vander.T)
    for element, end in el.mesh.end_maps:
        # in the norm that its rounding is small in
        inward = 0.5 * (1.0 + t) if element == 0 else 0.5 * (1.0 - t)
        samples[:, element] *= inward ** (0.5 * max(end.power + end.w_steps, 0.0))
    # what is below the rounding of its own element, or decayed to the end of the range of doubles, has no
    # sign and takes the one before it
    peak = np.max(np.abs(samples), axis=2, keepdims=True)
    signs = np.where(np.abs(samples) > np.maximum(1e-12 * peak, _FADED), np.sign(samples), 0.0)
    signs = signs.reshape(legendre.shape[0], -1)
    # beside a lump that hardly moves the last zero may lie within rounding of the end; the node's own value
    # comes from a recurrence in which nothing cancels
    for column, node, fixed in (
        (0, chain.left_node, chain.left_fixed),
        (-1, chain.right_node, chain.right_fixed),
    ):
        if not fixed:
            value = modes.nodes[node, : signs.shape[0]]
            signs[:, column] = np.where(np.abs(value) > _FADED, np.sign(value), signs[:, column])
    if chain.left_node == 1:
        signs = np.concatenate([np.sign(modes.nodes[:1].T), signs], axis=1)
    if chain.right_node < chain.links:
        signs = np.concatenate([signs, np.sign(modes.nodes[-1:].T)], axis=1)
    last = np.maximum.accumulate(np.where(signs != 0.0, np.arange(signs.shape[1]), 0), axis=1)
    filled = np.take_along_axis(signs, last, axis=1)
    changes = np.count_nonzero(filled[:, 1:] * filled[:, :-1] < 0.0, axis=1)
    if chain.factor is not None:
        first = np.take_along_axis(signs, np.argmax(signs != 0.0, axis=1)[:, None], axis=1)[:, 0]
        changes += chain.factor.real * filled[:, -1] * first < 0.0
    return np.asarray(changes, dtype=np.int64)
