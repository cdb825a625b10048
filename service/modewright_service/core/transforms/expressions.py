"""Projecting a field that is given as an expression in x.

The expression is replaced by polynomials on a mesh of its own, by the same certified approximation that the
coefficients of a problem go through: kinks and jumps become edges, narrow features are seen, and the error
of the polynomials is bounded. From there on everything is exact integration, as for samples.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from modewright.pieces import legendre_vandermonde
from modewright.record import Record
from modewright_service.core import discs
from modewright_service.core.approximation import approximate
from modewright_service.core.errors import (
    CoreError,
    InvalidProblem,
    InvalidRequest,
    NotConverged,
    Reason,
    Unsupported,
    Violation,
)
from modewright_service.core.evaluation import point_signs, run
from modewright_service.core.expressions import parse
from modewright_service.core.problem import Constant, Expression, Layer, Problem
from modewright_service.core.quadrature import gauss_legendre

from .fields import LARGEST, Collected, Lumps, Poll, Projection, no_poll
from .grid import Grid, build_grid

__all__ = ["project_expression"]

Floats = NDArray[np.float64]

# What the polynomials may be off by, as a share of the field's norm, before the projection is refused.
_ADMITTED: Final = 1e-10
# Samples of an expression on each element, to learn its size.
_LOOKS: Final = 16


@dataclass(frozen=True, eq=False)
class _Polynomials:
    """A field by Legendre coefficients (I, d+1) on intervals between bounds (I+1,)."""

    bounds: Floats
    series: Floats

    def values(self, interval: NDArray[np.intp], x: Floats) -> Floats:
        left, right = self.bounds[interval], self.bounds[interval + 1]
        t = np.clip(((x - left) - (right - x)) / (right - left), -1.0, 1.0)
        table = legendre_vandermonde(t, self.series.shape[1] - 1)
        return np.asarray(np.einsum("xk,kx->x", self.series[interval], table))

    def at(self, grid: Grid, chunk: slice) -> Floats:
        return self.values(grid.interval[chunk], grid.x[chunk])[:, np.newaxis]


def project_expression(
    record: Record,
    text: str,
    left_lump: ArrayLike | None = None,
    right_lump: ArrayLike | None = None,
    *,
    poll: Poll = no_poll,
) -> Projection:
    """The projection of the field `text`, an expression in x; the coefficients have shape (N,).

    Raises InvalidRequest (field `values`) for an expression that cannot be read or has no finite value
    somewhere in the domain, NotConverged for one that polynomials do not approach to 1e-10 of its norm.
    """
    field, errors = _approximated(record, text, poll)
    grid = build_grid(record, field.bounds, field.series.shape[1] - 1)
    lumps = Lumps.of(record, left_lump, right_lump, ())
    out = Collected(record, (), lumps, np.complex128 if lumps.is_complex else np.float64, details=True)
    coefficients = np.zeros((1, record.count))
    for chunk in grid.chunks():
        poll()
        coefficients += field.at(grid, chunk).T @ grid.weighted_modes(chunk)
    ends = field.values(np.array([0, field.bounds.size - 2]), field.bounds[[0, -1]])[np.newaxis]
    rows = slice(0, 1)
    known = lumps.values(rows, ends)
    out.put(rows, grid, coefficients + lumps.products(known), known, field, poll)
    projection = out.projection()
    _check_error(grid, errors, projection, text)
    return projection


def _approximated(record: Record, text: str, poll: Poll) -> tuple[_Polynomials, Floats]:
    """The polynomials, and a bound of their error on each interval.

    The field takes the place of q in a problem whose lowest eigenvalue is about the field's size: beside
    that the approximation counts what is small in q as small.
    """
    bounds = record.layer_edges.tolist()
    try:
        length = bounds[-1] - bounds[0]
        p = max(_size(record, text) * (length / math.pi) ** 2, 1e-250)
        layers = tuple(
            Layer(f"part {i}", bounds[i], bounds[i + 1], p=Constant(p), q=Expression(text))
            for i in range(len(bounds) - 1)
        )
        mesh = approximate(Problem(layers), poll=poll)
    except (InvalidProblem, Unsupported) as error:
        raise _as_request(error) from None
    size = np.abs(mesh.q).sum(axis=1)
    good = (size <= LARGEST) & (mesh.q_error <= LARGEST)
    if not good.all():
        x = float(mesh.edges[np.argmin(good)])
        message = f"the expression {text[:80]!r} has no finite value near x = {x!r}"
        raise InvalidRequest.at(Reason.NOT_FINITE, "values", message, "inf", x=x)
    return _Polynomials(mesh.edges, mesh.q), mesh.q_error


def _size(record: Record, text: str) -> float:
    """The largest modulus of the expression that samples find; 1.0 where they find none."""
    program = parse(text)
    nodes, _ = gauss_legendre(_LOOKS)
    left, right = record.edges[:-1, np.newaxis], record.edges[1:, np.newaxis]
    points = discs.exact((((1.0 - nodes) * left + (1.0 + nodes) * right) / 2.0).astype(np.longdouble))
    found = np.abs(run(program, points, signs=point_signs(program, points)).centre)
    largest = float(np.max(found, where=found <= LARGEST, initial=0.0))
    return largest if largest > 0.0 else 1.0


def _as_request(error: CoreError) -> InvalidRequest:
    """The same complaint about the field `values` of a request."""
    reason = Reason.NOT_FINITE if isinstance(error, Unsupported) else error.reason
    violations = [
        Violation(
            "values", "the field" + v.message[1:] if v.message[:2] == "q " else v.message, v.number, reason
        )
        for v in error.violations
    ]
    return InvalidRequest(reason, error.message, violations, error.metadata)


def _check_error(grid: Grid, errors: Floats, projection: Projection, text: str) -> None:
    norm2 = projection.norm2
    assert norm2 is not None
    error2 = float(np.sum(errors[grid.interval] ** 2 * grid.weight))
    if not error2 <= _ADMITTED**2 * float(norm2) and error2 > 0.0:
        reached = math.sqrt(error2 / float(norm2)) if norm2 > 0.0 else math.inf
        message = f"polynomials approach this expression to {_ADMITTED} of its norm at best"
        raise NotConverged.at(Reason.NOT_CONVERGED, "values", message, text[:80], reached=reached)
