"""One coefficient on a batch of elements: interpolation, and a bound of all its errors.

The error of the polynomial that is handed out has four parts, each bounded on its own:

* truncation, from a bound of the coefficient on discs that cover Bernstein ellipses (:mod:`.cover`),
  or, where that does not help, from its range on pieces of the element;
* rounding in evaluating the coefficient at the nodes, from running error analysis in extended
  precision (:mod:`.discs`), times the Lebesgue constant;
* small last coefficients that are dropped;
* rounding of the rest to double.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from fractions import Fraction
from typing import Any

import numpy as np

from . import discs
from .coefficients import piece_bounds, positive_floor, quotient_floor
from .cover import cover, truncation
from .description import Coefficient, Constant, Expression, FloatArray, Samples
from .discs import Array, Disc
from .errors import InvalidProblem, Reason
from .evaluation import degree, point_signs, run
from .expressions import Builder, Program, parse
from .legendre import (
    EXTENDED,
    EXTENDED_UNIT,
    UNIT,
    chebyshev_interpolation,
    lebesgue,
    times_distance,
    vandermonde,
    vanishing,
)
from .rewriting import smooth_form
from .samples import Table, table
from .zeros import TERMS, zero_order

# Share of the tolerance that dropped coefficients may use.
_DROPPED_SHARE = 0.1
# p and w may vary by about this factor over an element (twice as much by the sum of coefficients):
# 1/p is then as smooth as p, and relative errors are not those of the smallest value blown up.
_MOST_VARIATION = 30.0
# Values of a table may fall below zero by the rounding of its own polynomial.
_TABLE_ROUNDING = 1e-14
_RANGE_PIECES = 8
# The nodes are Chebyshev's up to a shift d << 1/degree^4, which changes the interpolant by its error
# times about d degree^2.
_NODE_SHIFT = 1.01
# Relative rounding admitted in keeping a zero of w exact, before the element is halved for it.
_ZERO_ROUNDING = 1e-13
# Beyond this, products of coefficients and mesh sizes leave the range of double.
_LARGEST = 1e280


@dataclass(frozen=True, eq=False)
class Source:
    """One coefficient of one layer, factor r^g and inversion included.

    ``polynomial`` is its degree if it is one (between knots); ``tolerated`` how far below zero rounding
    may take it.
    """

    name: str
    path: str
    program: Program
    table: Table | None
    polynomial: int | None
    tolerated: float = 0.0

    @property
    def signed(self) -> bool:
        """Whether the coefficient must not be negative."""
        return self.name != "q"

    def samples(self, x: Disc, middle: FloatArray) -> Disc | None:
        """The table's values on discs ``x`` (K, ...), each row within the piece that holds its middle."""
        return None if self.table is None else self.table.on(self.table.piece(middle), x)


@dataclass(frozen=True, eq=False)
class Fit:
    """``series`` (K, d+1); ``absolute``, ``relative`` (K,) error bounds; ``good`` (K,) tolerance met.

    ``floor`` (K,) a lower bound of the coefficient, 0 where none above 0 is known.
    """

    series: FloatArray
    absolute: FloatArray
    relative: FloatArray
    good: Array
    floor: FloatArray

    def rows(self, chosen: Array) -> Fit:
        """The fit of the chosen elements (an index or a mask)."""
        parts = (self.series, self.absolute, self.relative, self.good, self.floor)
        return Fit(*(part[chosen] for part in parts))


def joined(fits: Sequence[Fit]) -> Fit:
    """Fits of several batches as one."""
    return Fit(
        np.concatenate([found.series for found in fits]),
        np.concatenate([found.absolute for found in fits]),
        np.concatenate([found.relative for found in fits]),
        np.concatenate([found.good for found in fits]),
        np.concatenate([found.floor for found in fits]),
    )


def make_source(
    coefficient: Coefficient, name: str, path: str, power: int, reciprocal: bool, most_degree: int
) -> Source:
    """The source of a coefficient: x^power times it, or times its reciprocal."""
    pieces: Table | None = None
    match coefficient:
        case Constant(value):
            program = Builder()
            base = program.program(program.number(value))
        case Expression(text):
            base = parse(text)
        case Samples():
            pieces = table(coefficient)
            program = Builder()
            base = program.program(program.add("samples"))
    builder = Builder(base.steps)
    root = len(base.steps) - 1
    if reciprocal:
        root = builder.add("/", builder.number(1.0), root)
    for _ in range(power):
        root = builder.add("*", root, builder.add("x"))
    whole = smooth_form(builder.program(root))
    known = degree(whole, None if pieces is None else pieces.degree)
    if known is not None and known > most_degree:
        known = None
    tolerated = 0.0
    if pieces is not None:
        tolerated = _TABLE_ROUNDING * float(np.abs(pieces.powers[:, 0]).max())
    return Source(name, path, whole, pieces, known, tolerated)


def undefined_error(source: Source, x: float) -> InvalidProblem:
    """The coefficient has no finite value at x."""
    message = f"{source.name} is not defined or not finite at x = {x!r}"
    error = InvalidProblem.at(Reason.INVALID_COEFFICIENT, source.path, message, repr(x), x=x)
    assert isinstance(error, InvalidProblem)
    return error


def negative_error(source: Source, x: float, value: float) -> InvalidProblem:
    """The coefficient is negative at x."""
    message = f"{source.name} must not be negative, but is at x = {x!r}"
    error = InvalidProblem.at(Reason.NEGATIVE_COEFFICIENT, source.path, message, value, x=x)
    assert isinstance(error, InvalidProblem)
    return error


@dataclass(frozen=True, eq=False)
class _Batch:
    """Elements with their nodes and the values there, in extended precision."""

    left: FloatArray
    right: FloatArray
    degree: int
    x: Array
    t: Array
    values: Disc
    signs: dict[int, Any]

    @property
    def middle(self) -> FloatArray:
        return (self.left + self.right) / 2


def values_at(source: Source, x: Array, middle: FloatArray, signs: dict[int, Any] | None = None) -> Disc:
    """Values at points (K, n) in extended precision, branches chosen point by point unless given."""
    points = discs.exact(x.astype(EXTENDED))
    samples = source.samples(points, middle)
    chosen = point_signs(source.program, points, samples) if signs is None else signs
    return run(source.program, points, samples, chosen)


def _evaluated(
    source: Source, left: FloatArray, right: FloatArray, most_degree: int, opened: Array
) -> _Batch:
    order = most_degree if source.polynomial is None else source.polynomial
    nodes, _ = chebyshev_interpolation(order)
    a, b = left.astype(EXTENDED)[:, np.newaxis], right.astype(EXTENDED)[:, np.newaxis]
    x = (a + b) / 2 + (b - a) / 2 * nodes
    middle = ((left + right) / 2)[:, np.newaxis]
    at_middle = discs.exact(middle.astype(EXTENDED))
    signs = point_signs(source.program, at_middle, source.samples(at_middle, middle[:, 0]))
    points = discs.exact(x)
    samples = source.samples(points, middle[:, 0])
    values = run(source.program, points, samples, signs)
    if opened.any():
        free = values_at(source, x, middle[:, 0])
        values = discs.choose(opened[:, np.newaxis], free, values)
    _check_values(source, x, values)
    # Where the rounded points lie in t, exact to the last place: the differences suffer no cancellation.
    t = ((x - a) - (b - x)) / (b - a)
    return _Batch(left, right, order, x, t, values, signs)


def _interpolant(batch: _Batch, values: Array) -> Array:
    """Legendre coefficients (K, d+1) of the polynomials with these values at the batch's points.

    The points miss the Chebyshev nodes by a rounding of x, which a steep coefficient feels when x is
    large against the element; one step of refinement with the residual there takes that out.
    """
    _, matrix = chebyshev_interpolation(batch.degree)
    series = values @ matrix
    if batch.degree:
        fitted = np.einsum("knj,kj->kn", vandermonde(batch.t, batch.degree), series)
        series += (values - fitted) @ matrix
    return np.asarray(series)


def _check_values(source: Source, x: Array, values: Disc) -> None:
    bad = ~np.isfinite(values.radius) | (np.abs(values.centre) > _LARGEST)
    if bad.any():
        raise undefined_error(source, float(x[bad][0]))
    if source.signed:
        below = values.centre < -(values.radius + source.tolerated)
        if below.any():
            place = np.unravel_index(int(np.argmin(values.centre)), x.shape)
            raise negative_error(source, float(x[place]), float(values.centre[place]))


def _disc_bounds(source: Source, batch: _Batch) -> FloatArray:
    """(K, n) bounds of the coefficient on the discs of the cover; inf where it may not be analytic."""
    discs_of_t = cover()
    half = ((batch.right - batch.left) / 2)[:, np.newaxis]
    middle = batch.middle
    centre = middle[:, np.newaxis] + half * discs_of_t.centre
    radius = half * discs_of_t.radius + 8 * UNIT * np.abs(middle)[:, np.newaxis]
    x = Disc(centre, radius)
    value = run(source.program, x, source.samples(x, middle), batch.signs)
    bounds = np.abs(value.centre) + value.radius
    if not np.isfinite(bounds).all():
        # What overflows in double may be harmless in the end: 1/(1 + exp(1000 x)).
        rows = np.flatnonzero(~np.isfinite(bounds).all(axis=1))
        again = Disc(centre[rows].astype(np.clongdouble), radius[rows].astype(EXTENDED))
        signs = {key: sign[rows] for key, sign in batch.signs.items()}
        value = run(source.program, again, source.samples(again, middle[rows]), signs)
        bounds[rows] = (np.abs(value.centre) + value.radius).astype(np.float64)
    return np.asarray(bounds, dtype=np.float64)


def fit(
    source: Source,
    left: FloatArray,
    right: FloatArray,
    *,
    tolerance: float,
    scale: float,
    most_degree: int,
    opened: Array,
) -> Fit:
    """Polynomials for the elements [left, right] (K,) with error bounds.

    ``tolerance`` is relative to the coefficient's least value on the element for p and w, and for q to
    the larger of its greatest modulus there and ``scale``. ``opened`` (K,) marks elements on which the
    branches are not settled.

    Raises :class:`InvalidProblem` at a node where the coefficient is undefined or negative.
    """
    with np.errstate(over="ignore", under="ignore", invalid="ignore"):
        return _fit(source, left, right, tolerance, scale, most_degree, opened)


def _fit(
    source: Source,
    left: FloatArray,
    right: FloatArray,
    tolerance: float,
    scale: float,
    most_degree: int,
    opened: Array,
) -> Fit:
    batch = _evaluated(source, left, right, most_degree, opened)
    extended = _interpolant(batch, batch.values.centre)
    largest = np.abs(batch.values.centre).max(axis=1).astype(np.float64)
    rounding = _rounding(batch, batch.values.radius, largest)
    series = np.zeros((len(left), most_degree + 1))
    series[:, : batch.degree + 1] = extended
    if source.polynomial is None:
        bounds = _disc_bounds(source, batch)
        cut = _NODE_SHIFT * truncation(bounds, batch.degree)
    else:
        bounds, cut = np.zeros((len(left), 1)), np.zeros(len(left))
    cut = np.where(opened, np.inf, cut)
    nothing = ((batch.values.centre == 0) & (batch.values.radius == 0)).all(axis=1) & (cut == 0)
    floor = np.zeros(len(left))
    if source.signed:
        floor = np.maximum(positive_floor(series) - rounding - np.where(np.isfinite(cut), cut, 0), 0.0)
        target = tolerance * floor
    else:
        target = tolerance * np.maximum(largest, scale)
    dropped = _drop(series, _DROPPED_SHARE * target)
    absolute = cut + rounding + dropped + UNIT * np.abs(series).sum(axis=1)
    good = cut <= target
    if source.signed:
        good &= (floor > 0) | nothing
    unsettled = np.flatnonzero(~good)
    if unsettled.size:
        spread = _range_error(source, batch, series, unsettled, opened)
        absolute[unsettled] = np.minimum(absolute[unsettled], spread)
        good[unsettled] = spread <= target[unsettled]
        if source.signed:
            # the range on pieces may show what the ellipses could not
            shown = positive_floor(series[unsettled]) - absolute[unsettled]
            floor[unsettled] = np.maximum(floor[unsettled], shown)
    # Values below the range of double are rounded to zero.
    absolute += np.finfo(np.float64).tiny
    absolute[nothing] = 0.0
    if source.signed:
        good &= nothing | (np.abs(series).sum(axis=1) <= 2 * _MOST_VARIATION * floor)
        with np.errstate(divide="ignore", invalid="ignore"):
            relative = np.where(nothing, 0.0, np.where(floor > 0, absolute / floor, np.inf))
    else:
        relative = np.full(len(left), np.inf)
    result = Fit(series, absolute, relative, good, floor)
    if source.name == "w":
        _follow_zeros(source, batch, bounds, result, tolerance, most_degree)
    return result


def _rounding(batch: _Batch, radius: Array, largest: FloatArray) -> FloatArray:
    """Rounding at the nodes and in the transform, as a bound on the polynomial."""
    count = batch.degree + 1
    at_nodes = lebesgue(batch.degree) * radius.max(axis=1).astype(np.float64)
    return np.asarray(at_nodes + 32 * count * EXTENDED_UNIT * largest)


def _drop(series: FloatArray, allowed: FloatArray) -> FloatArray:
    """Set last coefficients to zero in place while their moduli add up to ``allowed`` at most."""
    tails = np.cumsum(np.abs(series[:, ::-1]), axis=1)[:, ::-1]
    gone = tails <= allowed[:, np.newaxis]
    gone[:, 0] = False
    lost = np.where(gone, np.abs(series), 0.0).sum(axis=1)
    series[gone] = 0.0
    return np.asarray(lost)


def _range_error(source: Source, batch: _Batch, series: FloatArray, rows: Array, opened: Array) -> FloatArray:
    """Bounds of sup |f - f~| on the elements ``rows`` from the ranges of both on pieces."""
    left, right = batch.left[rows], batch.right[rows]
    cuts = np.linspace(0.0, 1.0, _RANGE_PIECES + 1)
    edges = (left[:, np.newaxis] + (right - left)[:, np.newaxis] * cuts).astype(EXTENDED)
    edges[:, -1] = right
    x = discs.interval(edges[:, :-1], edges[:, 1:])
    signs: dict[int, Any] | None = {key: sign[rows] for key, sign in batch.signs.items()}
    if opened[rows].any():
        signs = None
    value = run(source.program, x, source.samples(x, batch.middle[rows]), signs)
    low, high = discs.low(value), discs.high(value)
    least, most = piece_bounds(series[rows], _RANGE_PIECES)
    with np.errstate(invalid="ignore", over="ignore"):
        error = np.maximum(high - least, most - low).max(axis=1).astype(np.float64)
    return np.where(np.isfinite(error), error, np.inf)


def _follow_zeros(
    source: Source, batch: _Batch, bounds: FloatArray, result: Fit, tolerance: float, most_degree: int
) -> None:
    """Replace w on elements with a zero at one end by polynomials with the same zero (in place)."""
    for row in np.flatnonzero(result.floor <= 0):
        if not np.any(result.series[row]):
            continue
        ends = ((-1, float(batch.left[row])), (1, float(batch.right[row])))
        orders = [(side, _order(source, batch, int(row), x)) for side, x in ends]
        zeros = [(side, order) for side, order in orders if order]
        if len(zeros) == 1 and zeros[0][1] < min(TERMS, most_degree):
            _fit_quotient(source, batch, bounds, result, int(row), *zeros[0], tolerance)


def _order(source: Source, batch: _Batch, row: int, x: float) -> int:
    """The exact order of the zero of row ``row`` at its end x; 0 if there is none or it is not known."""
    signs = {key: int(np.asarray(sign)[row].flat[0]) for key, sign in batch.signs.items()}
    terms = None
    if source.table is not None:
        piece = int(source.table.piece(batch.middle[row : row + 1])[0])
        terms = _shifted(source.table, piece, x)
    return zero_order(source.program, x, signs, terms) or 0


def _shifted(pieces: Table, piece: int, x: float) -> tuple[Fraction, ...]:
    """The exact powers of a table's piece about x."""
    powers = [Fraction(float(value)) for value in pieces.powers[piece]]
    distance = Fraction(x) - Fraction(float(pieces.origins[piece]))
    for start in range(len(powers)):
        for j in range(len(powers) - 2, start - 1, -1):
            powers[j] += distance * powers[j + 1]
    return tuple(powers)


def _fit_quotient(
    source: Source,
    batch: _Batch,
    bounds: FloatArray,
    result: Fit,
    row: int,
    side: int,
    order: int,
    tolerance: float,
) -> None:
    """w = (1 -+ t)^order g: interpolate g, multiply back, round so that the zero stays exact."""
    one = slice(row, row + 1)
    alone = replace(batch, left=batch.left[one], right=batch.right[one], x=batch.x[one], t=batch.t[one])
    distance = (1 - side * alone.t[0]) ** order
    values = batch.values.centre[row] / distance
    radius = (batch.values.radius[row] / distance)[np.newaxis]
    whole = _interpolant(alone, values[np.newaxis])[0]
    series, lost = whole[: batch.degree + 1 - order], whole[batch.degree + 1 - order :]
    largest = np.abs(values).max(keepdims=True).astype(np.float64)
    error = float(_rounding(batch, radius, largest)[0])
    cut = 0.0
    if source.polynomial is None:
        cut = _NODE_SHIFT * float(truncation(bounds[row : row + 1], batch.degree, order)[0])
        cut += float(np.abs(lost).sum())
    floor = float(positive_floor(series.astype(np.float64)[np.newaxis])[0]) - error - cut
    if not floor > 0 or not np.isfinite(cut):
        return
    short = series.astype(np.float64)[np.newaxis].copy()
    dropped = float(_drop(short, np.array([_DROPPED_SHARE * tolerance * floor]))[0])
    product = np.where(short[0] != 0, series, 0)
    for _ in range(order):
        product = times_distance(product, side)
    last = int(np.flatnonzero(product).max(initial=order))
    final, change = vanishing(product[: last + 1], side, order)
    least = quotient_floor(final, side, order) - error - cut - dropped - change
    if not least > 0:
        return
    result.series[row] = 0.0
    result.series[row, : last + 1] = final
    result.relative[row] = (cut + error + dropped + change) / least
    result.absolute[row] = (cut + error + dropped + change) * 2.0**order
    # The exact zero costs digits where the degree is high; a shorter element has a lower one.
    result.good[row] = cut <= tolerance * least and change <= _ZERO_ROUNDING * least
    result.floor[row] = 0.0
