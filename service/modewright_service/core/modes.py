"""From condensed vectors to normalised piecewise polynomials, their fluxes and their zeros.

The flux is rebuilt from the equation, sigma' = (q - lambda w) u, starting on each element from the consistent
nodal flux (the residual of the left vertex function). The difference d = sigma - p u' carries the whole error
of a mode; it is what the lower bounds of :mod:`.bounds` are made of.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from modewright_service.core.condensed import Chain, Vectors

__all__ = ["FluxDefect", "Modes", "flux_defects", "interior_zeros", "make_modes"]

Array = NDArray[np.float64]

# Decaying tails keep their relative accuracy down to here; below, doubles lose digits.
_FADED = 1e-280


@dataclass(frozen=True, eq=False)
class Modes:
    """T normalised modes.

    shapes: (E, T, k+1) coefficients of the element shape functions. nodes: (n+1, T) values on the chain.
    """

    shapes: Array
    nodes: Array

    def legendre(self, to_legendre: Array) -> Array:
        """(T, E (k+1)) Legendre coefficients, element after element."""
        values = np.matmul(self.shapes, to_legendre)
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
    shapes = np.concatenate([left[:, :, None], right[:, :, None], bubbles], axis=2)
    nodes = vectors.nodes
    factor = 1.0 / _norms(chain, shapes, nodes)
    factor = factor * _signs(chain, shapes, nodes)
    return Modes(shapes * factor[None, :, None], nodes * factor)


def _norms(chain: Chain, shapes: Array, nodes: Array) -> Array:
    """(T,) norms by quadrature, point masses included."""
    el = chain.elements
    values = np.matmul(shapes, el.reference.values.T)
    weights = el.w * (el.reference.weights * el.half[:, None])
    norm2: Array = np.einsum("etg,eg->t", values * values, weights) + (chain.mass[:, None] * nodes**2).sum(
        axis=0
    )
    return np.sqrt(norm2)


def _signs(chain: Chain, shapes: Array, nodes: Array) -> Array:
    """+-1 so that u > 0 right of the left end, or p u' > 0 where u vanishes there."""
    if chain.left_fixed:
        # slope at t = -1 of the shape functions of the first element
        slopes = _end_slopes(chain.elements.reference.degree, -1.0)
        lead = shapes[0] @ slopes
    else:
        lead = nodes[chain.left_node]
    return np.where(lead < 0.0, -1.0, 1.0)


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

    scaled: Array
    energy: Array
    by_element: Array


def flux_defects(chain: Chain, lam: Array, modes: Modes) -> FluxDefect:
    """Rebuilt flux minus p u' of every mode at the Gauss points, divided by sqrt(p)."""
    el = chain.elements
    ref = el.reference
    at = np.flatnonzero(chain.element_of_link >= 0)
    u = np.matmul(modes.shapes, ref.values.T)
    flux = np.matmul(modes.shapes, ref.slopes.T) * (el.p / el.half[:, None])[:, None, :]
    load = el.q[:, None, :] * u - lam[None, :, None] * (el.w[:, None, :] * u)
    weights = ref.weights * el.half[:, None]
    # residual of the left vertex function: sigma(left) = -(int p u' N' + (q - lambda w) u N)
    start = -(
        np.einsum("etg,g->et", flux, ref.weights * ref.slopes[:, 0])
        + np.einsum("etg,eg->et", load, weights * ref.values[:, 0])
    )
    sigma = start[:, :, None] + np.matmul(load, ref.antiderivative.T) * el.half[:, None, None]
    root = np.sqrt(weights / el.p)
    defect = (sigma - flux) * root[:, None, :]
    by_element = np.einsum("etg,etg->te", defect, defect)
    scaled = np.swapaxes(defect, 0, 1).reshape(lam.size, -1)

    energy = np.einsum("etg,eg->t", flux * flux, weights / el.p)
    energy += np.einsum("etg,eg->t", u * u, weights * np.abs(el.q))
    energy += (np.abs(chain.stiffness)[:, None] * modes.nodes**2).sum(axis=0)
    resistances = np.flatnonzero(chain.element_of_link < 0)
    jumps = np.zeros((lam.size, resistances.size))
    end_flux = start + np.einsum("etg,eg->et", load, weights)
    for column, j in enumerate(resistances):
        through = chain.conductance[j] * (modes.nodes[j + 1] - modes.nodes[j])
        energy += through**2 / chain.conductance[j]
        jumps[:, column] = (_joint_flux(chain, lam, modes, start, end_flux, at, int(j)) - through) / np.sqrt(
            chain.conductance[j]
        )
    return FluxDefect(np.concatenate([scaled, jumps], axis=1), energy, by_element)


def _joint_flux(
    chain: Chain, lam: Array, modes: Modes, start: Array, end_flux: Array, at: NDArray[np.int64], j: int
) -> Array:
    """(T,) flux through resistance link j: of the element right of it, or from the lump behind it."""
    follower = np.flatnonzero(at == j + 1)
    # the point terms of a node between a resistance and an element make sigma jump by (S - lambda m) u
    if follower.size:
        node = j + 1
        terms = chain.stiffness[node] - lam * chain.mass[node]
        flux: Array = start[follower[0]] - terms * modes.nodes[node]
        return flux
    leader = np.flatnonzero(at == j - 1)
    terms = chain.stiffness[j] - lam * chain.mass[j]
    flux = end_flux[leader[0]] + terms * modes.nodes[j]
    return flux


def interior_zeros(chain: Chain, modes: Modes, legendre: Array) -> NDArray[np.int64]:
    """(T,) sign changes inside the interval, one across a resistance included, counted on the polynomials.

    legendre: what :meth:`Modes.legendre` returned. Sampled at 2 k + 3 Chebyshev-Lobatto points an element,
    more than twice as dense as the zeros that a polynomial of degree k with some twenty radians can have.
    """
    el = chain.elements
    k = el.reference.degree
    t = -np.cos(np.pi * np.arange(2 * k + 3) / (2 * k + 2))
    vander = np.polynomial.legendre.legvander(t, k)
    coefficients = legendre.reshape(legendre.shape[0], el.count, k + 1)
    samples = np.matmul(coefficients, vander.T)
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
    return np.asarray(changes, dtype=np.int64)
