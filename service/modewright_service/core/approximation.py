"""Piecewise polynomial approximations of p, q and w with computed error bounds.

Each layer is cut at the knots of its tables, at interfaces inside it, and where a branch of its
expressions switches or p or w is zero (:mod:`.cuts`). The pieces are then halved until every
coefficient is met to the tolerance on every element (:mod:`.fitting`), all elements of one generation
at once. A narrow bump between the nodes is not missed: the bound rests on enclosures of the coefficient
in the complex plane, not on samples.

When the number of elements reaches its limit, or an element the resolution of double precision, the
error bounds say what was reached; nothing is refused for being too fine.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from .coefficients import CoefficientMesh, Ranges, ranges
from .cuts import find_cuts
from .description import Constant, Expression, FloatArray, Layer, Problem
from .end_elements import EndMap
from .end_fitting import fit_end
from .end_mesh import restrict, with_ends
from .errors import CoreError, InvalidProblem, Reason, Unsupported
from .evaluation import constant_value
from .expressions import parse
from .fitting import Fit, Source, fit, joined, make_source, negative_error, undefined_error, values_at
from .legendre import UNIT
from .problem import resolve
from .validation import has_mass, zero_weight_error

__all__ = ["CoefficientMesh", "Ranges", "approximate", "ranges", "restrict"]

Poll = Callable[[], None]
# Exponents of the left and the right end, None where the end is plain.
Ends = tuple[EndMap | None, EndMap | None]
# What a layer consists of: (value, relative error) of constant p, q, w, or the sources of the three.
_Part = list[tuple[float, float]] | list[Source]

DEFAULT_TOLERANCE = 4e-15
DEFAULT_MAX_ELEMENTS = 4000
DEFAULT_MAX_DEGREE = 24
_NAMES = ("p", "q", "w")
# An element is not halved below these shares of its layer and of the spacing of doubles.
_SMALLEST_SHARE = 2.0**-44
_SMALLEST_SPACINGS = 256.0
# Elements that every later layer may count on, however greedy the ones before it are.
_RESERVE = 16
_LOOKS = 32
# Elements fitted at once: the discs of a batch then take a few megabytes.
_BATCH = 2048
# Share of its layer that an end element has at most.
_END_SHARE = 0.25
# Factor from one cut to the next beside an end element, and the share of the layer up to which it is cut so.
_GRADING = 2.0
_SHORT = 1e-9
# Share of a layer at which a coefficient is looked at beside an end where it is infinite.
_JUST_INSIDE = 1e-6


def _no_poll() -> None:
    return None


@dataclass(eq=False)
class _Rows:
    """Accepted elements: their ends, owner, series and errors."""

    left: list[FloatArray] = field(default_factory=list)
    right: list[FloatArray] = field(default_factory=list)
    layer: list[int] = field(default_factory=list)
    fits: dict[str, list[Fit]] = field(default_factory=lambda: {name: [] for name in _NAMES})
    count: int = 0

    def add(self, left: FloatArray, right: FloatArray, layer: int, fits: dict[str, Fit]) -> None:
        self.left.append(left)
        self.right.append(right)
        self.layer.extend([layer] * len(left))
        for name in _NAMES:
            self.fits[name].append(fits[name])
        self.count += len(left)


def approximate(
    problem: Problem,
    *,
    tolerance: float = DEFAULT_TOLERANCE,
    max_elements: int = DEFAULT_MAX_ELEMENTS,
    max_degree: int = DEFAULT_MAX_DEGREE,
    ends: Ends = (None, None),
    poll: Poll = _no_poll,
) -> CoefficientMesh:
    """Polynomials for the coefficients of a validated problem, with bounds of their errors.

    ``ends``: the exponents of the left and the right end where there is to be an end element.

    ``tolerance`` bounds the truncation of p and w relative to their least value on each element, and of
    q relative to the larger of its greatest modulus there and Lambda times the layer's mean w
    (Lambda = (pi / int sqrt(w/p) dx)^2). Rounding comes on top; the errors returned hold both.
    ``max_elements`` limits halving only: knots and interfaces are always edges. A branch is taken to
    switch at the double next to its crossing; the bounds do not cover what lies between the two.

    Raises :class:`InvalidProblem` for a coefficient that is negative or undefined somewhere and for
    w = 0 everywhere without a mass; :class:`Unsupported` where p vanishes or a coefficient is infinite
    at an end; whatever ``poll`` raises.
    """
    resolved = resolve(problem)
    joints = [joint.x for joint in resolved.joints]
    edges = resolved.layer_edges
    power = problem.geometry.power
    parts: list[_Part] = []
    for index, layer in enumerate(problem.layers):
        plain = power == 0 and not _has_end(index, len(problem.layers), ends)
        constants = _constants(layer, index) if plain else None
        parts.append(constants or _sources(layer, index, power, max_degree))
    scales = _q_scales(parts, edges)
    rows = _Rows()
    total = len(problem.layers)
    outer = _outer_elements(parts, edges, joints, ends, scales, poll)
    bounds = edges.copy()
    for k, found in ((0, outer[0]), (-1, outer[1])):
        if found is not None:
            bounds[k] = found.edges[1 + k]
    for index, part in enumerate(parts):
        left, right = float(bounds[index]), float(bounds[index + 1])
        inside = [x for x in joints if left < x < right]
        inside += _graded(index, edges, bounds)
        if isinstance(part[0], tuple):
            _add_constant(rows, part, index, [left, *inside, right], max_degree)
            continue
        poll()
        task = _LayerTask(
            index,
            part,
            (left, right),
            tolerance,
            scales[index],
            max_degree,
            max_elements - _RESERVE * (total - index - 1),
            (index == 0, index == total - 1),
        )
        task.run(rows, inside, poll)
    mesh = _assembled(rows, bounds)
    if outer != (None, None):
        mesh = with_ends(mesh, ends, outer)
    if not np.any(mesh.w) and not has_mass(problem):
        raise zero_weight_error()
    return mesh


def _has_end(index: int, total: int, ends: Ends) -> bool:
    return (index == 0 and ends[0] is not None) or (index == total - 1 and ends[1] is not None)


def _outer_elements(
    parts: list[_Part], edges: FloatArray, joints: list[float], ends: Ends, scales: list[float], poll: Poll
) -> tuple[CoefficientMesh | None, CoefficientMesh | None]:
    """The end elements, each well within its layer and clear of interfaces, knots and switches."""
    found: list[CoefficientMesh | None] = []
    for at_left, end in zip((True, False), ends, strict=True):
        if end is None:
            found.append(None)
            continue
        index = 0 if at_left else len(parts) - 1
        sources = [source for source in parts[index] if isinstance(source, Source)]
        left, right = float(edges[index]), float(edges[index + 1])
        place, span = (left, right - left) if at_left else (right, right - left)
        inside = [x for x in joints if left < x < right]
        near = (left, right - _END_SHARE * span) if at_left else (left + _END_SHARE * span, right)
        for source in sources:
            if source.table is not None:
                inside += [float(knot) for knot in source.table.knots if left < knot < right]
            else:
                just_inside = _JUST_INSIDE * span
                first, last = (
                    (near[0] + just_inside, near[1]) if at_left else (near[0], near[1] - just_inside)
                )
                inside += find_cuts(source.program, None, first, last, source.signed).points
        widest = min([_END_SHARE * span, *(0.5 * abs(x - place) for x in inside)])
        found.append(fit_end(sources, place, at_left, end, widest, index, scales[index] * span, poll))
    return found[0], found[1]


def _graded(index: int, edges: FloatArray, bounds: FloatArray) -> list[float]:
    """Cuts from an end element on, at distances that grow by a factor, where it is very short.

    Halving stops at a share of the layer; what is steep beside a short end element must not.
    """
    found = []
    span = float(edges[index + 1] - edges[index])
    for k, place in ((index, float(edges[0])), (index + 1, float(edges[-1]))):
        y = abs(float(bounds[k]) - place)
        if k in (0, len(edges) - 1) and y > 0.0:
            inward = 1.0 if k == 0 else -1.0
            while (y := y * _GRADING) < _SHORT * span:
                found.append(place + inward * y)
    return found


def _constants(layer: Layer, index: int) -> list[tuple[float, float]] | None:
    """(value, relative error) of p, q, w where all three are constant; None if one is not."""
    found = []
    for name in _NAMES:
        coefficient = getattr(layer, name)
        if isinstance(coefficient, Constant):
            value, error = float(coefficient.value), 0.0
        elif isinstance(coefficient, Expression):
            program = parse(coefficient.text)
            known = constant_value(program)
            if known is None:
                return None
            if not math.isfinite(known):
                raise InvalidProblem.at(Reason.NOT_FINITE, f"layers[{index}].{name}", "must be finite", known)
            value, error = known, 0.0 if len(program.steps) == 1 else 2 * UNIT
        else:
            return None
        if name == "p" and layer.reciprocal_p:
            value, error = 1.0 / value, error + 2 * UNIT
        found.append((value, error))
    return found


def _sources(layer: Layer, index: int, power: int, max_degree: int) -> list[Source]:
    coefficients = (layer.p, layer.q, layer.w)
    return [
        make_source(
            coefficient,
            name,
            f"layers[{index}].{name}",
            power,
            layer.reciprocal_p and name == "p",
            max_degree,
        )
        for name, coefficient in zip(_NAMES, coefficients, strict=True)
    ]


def _add_constant(
    rows: _Rows, constants: list[tuple[float, float]], index: int, edges: list[float], max_degree: int
) -> None:
    count = len(edges) - 1
    fits = {}
    for name, (value, error) in zip(_NAMES, constants, strict=True):
        series = np.zeros((count, max_degree + 1))
        series[:, 0] = value
        relative = np.full(count, error)
        fits[name] = Fit(series, abs(value) * relative, relative, np.ones(count, bool), series[:, 0])
    rows.add(np.array(edges[:-1]), np.array(edges[1:]), index, fits)


def _q_scales(parts: list[_Part], edges: FloatArray) -> list[float]:
    """Lambda times the mean w of each layer, from samples: the size below which q cannot matter."""
    if all(isinstance(part, list) and isinstance(part[0], tuple) for part in parts):
        return [0.0] * len(parts)
    phase = 0.0
    means = []
    fractions = (np.arange(_LOOKS) + 0.5) / _LOOKS
    for index, part in enumerate(parts):
        left, right = float(edges[index]), float(edges[index + 1])
        x = (left + (right - left) * fractions)[:, np.newaxis]
        p, w = (_looked_at(part[k], x) for k in (0, 2))
        with np.errstate(all="ignore"):
            ratio = np.sqrt(np.maximum(w, 0.0) / p)
        phase += float(np.where(np.isfinite(ratio), ratio, 0.0).mean()) * (right - left)
        means.append(float(np.mean(w)))
    with np.errstate(all="ignore"):
        scales = (np.pi / np.float64(phase)) ** 2 * np.array(means)
    return [float(scale) if np.isfinite(scale) and scale > 0 else 0.0 for scale in scales]


def _looked_at(part: Source | tuple[float, float], x: FloatArray) -> FloatArray:
    if isinstance(part, tuple):
        return np.array([part[0]])
    return np.asarray(values_at(part, x, x[:, 0]).centre[:, 0], dtype=np.float64)


@dataclass(eq=False)
class _LayerTask:
    """Cutting, fitting and halving of one layer."""

    index: int
    sources: list[Source]
    ends: tuple[float, float]
    tolerance: float
    scale: float
    max_degree: int
    budget: int
    outermost: tuple[bool, bool]
    opened: dict[str, list[tuple[float, float]]] = field(default_factory=dict)

    def run(self, rows: _Rows, inside: list[float], poll: Poll) -> None:
        left, right = self.ends
        cuts = {left, right, *inside}
        for source in self.sources:
            cuts.update(self._cuts_of(source))
        edges = np.array(sorted(cuts))
        self._check_points(edges)
        lows, highs = edges[:-1], edges[1:]
        smallest = (right - left) * _SMALLEST_SHARE
        while lows.size:
            fits = self._fitted(lows, highs, poll)
            good = fits["p"].good & fits["q"].good & fits["w"].good
            spacing = _SMALLEST_SPACINGS * np.spacing(np.maximum(np.abs(lows), np.abs(highs)))
            small = highs - lows <= np.maximum(smallest, spacing)
            self._refuse_unbounded(fits, small, lows, highs)
            halve = ~(good | small)
            if rows.count + len(lows) + int(halve.sum()) > self.budget:
                halve[:] = False
            done = ~halve
            rows.add(
                lows[done], highs[done], self.index, {name: found.rows(done) for name, found in fits.items()}
            )
            lows, highs = lows[halve], highs[halve]
            middle = lows + (highs - lows) / 2
            lows, highs = np.concatenate((lows, middle)), np.concatenate((middle, highs))

    def _cuts_of(self, source: Source) -> list[float]:
        left, right = self.ends
        if source.table is not None:
            knots = source.table.knots
            # Knots that miss the layer's edge by rounding would leave slivers beside it.
            slack = (right - left) * 1e-12
            return [float(k) for k in knots[(knots > left + slack) & (knots < right - slack)]]
        found = find_cuts(source.program, None, left, right, source.signed)
        if found.negative is not None:
            middle = sum(found.negative) / 2
            value = values_at(source, np.array([[middle]]), np.array([middle])).centre[0, 0]
            raise negative_error(source, middle, float(value))
        self.opened[source.name] = list(found.open)
        return [*found.points, *(x for stretch in found.open for x in stretch if left < x < right)]

    def _check_points(self, edges: FloatArray) -> None:
        """Refuse a coefficient that is infinite, or a p that is zero, at an end or a cut."""
        shift = (self.ends[1] - self.ends[0]) * _JUST_INSIDE
        for source in self.sources:
            values = values_at(source, edges[:, np.newaxis], edges)
            centre, radius = values.centre[:, 0], values.radius[:, 0]
            for k in np.flatnonzero(~np.isfinite(radius)):
                x = float(edges[k])
                inside = np.array([x + (shift if k == 0 else -shift)])
                if not np.isfinite(values_at(source, inside[:, np.newaxis], inside).radius).all():
                    # Not a singular point but a stretch: the logarithm of a negative number, an overflow.
                    raise undefined_error(source, x)
                raise self._singular(source, x, "is not finite")
            if source.name == "p":
                for k in np.flatnonzero(np.abs(centre) <= radius):
                    raise self._singular(source, float(edges[k]), "is zero")

    def _singular(self, source: Source, x: float, what: str) -> CoreError:
        at_end = (x == self.ends[0] and self.outermost[0]) or (x == self.ends[1] and self.outermost[1])
        message = f"{source.name} {what} at x = {x!r}; singular points are not handled by this version"
        if at_end:
            return Unsupported.at(Reason.UNSUPPORTED_END, source.path, message, x, x=x)
        if what == "is zero":
            return Unsupported.at(Reason.UNSUPPORTED_COEFFICIENT, source.path, message, x, x=x)
        return undefined_error(source, x)

    def _refuse_unbounded(
        self, fits: dict[str, Fit], small: Any, lows: FloatArray, highs: FloatArray
    ) -> None:
        """On the smallest elements p must have shown a positive bound, and all a finite one."""
        for source in self.sources:
            found = fits[source.name]
            bad = ~np.isfinite(found.absolute)
            if source.name == "p":
                bad |= found.floor <= 0
            for k in np.flatnonzero(small & bad):
                nearest = float(highs[k] if highs[k] == self.ends[1] else lows[k])
                if np.isfinite(found.absolute[k]):
                    raise self._singular(source, nearest, "is zero")
                raise undefined_error(source, nearest)

    def _fitted(self, lows: FloatArray, highs: FloatArray, poll: Poll) -> dict[str, Fit]:
        found: dict[str, list[Fit]] = {name: [] for name in _NAMES}
        for start in range(0, len(lows), _BATCH):
            poll()
            left, right = lows[start : start + _BATCH], highs[start : start + _BATCH]
            for source in self.sources:
                found[source.name].append(
                    fit(
                        source,
                        left,
                        right,
                        tolerance=self.tolerance,
                        scale=self.scale,
                        most_degree=self.max_degree,
                        opened=self._opened(source, left, right),
                    )
                )
        return {name: joined(fits) for name, fits in found.items()}

    def _opened(self, source: Source, lows: FloatArray, highs: FloatArray) -> Any:
        opened = np.zeros(lows.shape, dtype=bool)
        for start, stop in self.opened.get(source.name, ()):
            opened |= (lows < stop) & (highs > start)
        return opened


def _assembled(rows: _Rows, edges: FloatArray) -> CoefficientMesh:
    left = np.concatenate(rows.left)
    order = np.argsort(left, kind="stable")
    fits = {name: joined(rows.fits[name]).rows(order) for name in _NAMES}
    used = max(
        int(np.flatnonzero(c.any(axis=0)).max(initial=0)) for c in (found.series for found in fits.values())
    )
    return CoefficientMesh(
        np.append(left[order], edges[-1]),
        np.array(rows.layer, dtype=np.int64)[order],
        np.ascontiguousarray(fits["p"].series[:, : used + 1]),
        np.ascontiguousarray(fits["q"].series[:, : used + 1]),
        np.ascontiguousarray(fits["w"].series[:, : used + 1]),
        fits["p"].relative,
        fits["q"].absolute,
        fits["w"].relative,
        fits["w"].absolute,
    )
