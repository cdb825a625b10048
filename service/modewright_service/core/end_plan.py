"""What each finite end is, and whether an end element goes there.

The coefficients are looked at very close to the end, to hundreds of digits, where the first of their powers
is all that is left of them: p ~ p0 y^alpha, q ~ q0 y^e, w ~ w0 y^gamma. With kappa = 2 + gamma - alpha and
D^2 = (1 - alpha)^2 + 4 q0/p0 (q0 of the power alpha - 2), an end is regular where 1/p, q and w are
integrable, else limit-circle or limit-point by D / kappa < 1 (the Frobenius exponents (1 - alpha -+ D)/2
and the integrability of w u^2: Zettl, Sturm-Liouville Theory, 2005, ch. 7).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import mpmath
import numpy as np

from .description import Bounded, Constant, Dirichlet, End, Expression, Film, Neumann, Problem, Robin
from .end_elements import EndMap
from .end_fitting import choose_map
from .errors import CoreError, InvalidProblem, Reason, Unsupported
from .evaluation import constant_value
from .expressions import parse
from .fitting import Source, make_source
from .precise import precise_value

__all__ = ["EndPlan", "Exponents", "local_exponents", "plan_ends"]

# Distances 10^-k of the layer at which powers and first corrections are read off.
_PLACES = (100, 101, 102, 200, 201)
_DIGITS = 700
# Slopes a hundred decades apart must agree to this; a logarithm moves them by 2e-3.
_STEADY = 1e-4
_EXACT = 1e-12
# Beyond this a power is no power.
_LARGEST = 50.0


@dataclass(frozen=True)
class Exponents:
    """p ~ y^alpha, w ~ y^gamma, q ~ y^q_exponent (None: q = 0); d2: D^2, nan where q is too singular.

    delta: power of y of the first correction to any of them, inf where there is none.
    """

    alpha: float
    gamma: float
    q_exponent: float | None
    d2: float
    delta: float
    q_positive: bool

    @property
    def regular(self) -> bool:
        """Whether 1/p, q and w are integrable."""
        return self.alpha < 1.0 and self.gamma > -1.0 and (self.q_exponent is None or self.q_exponent > -1.0)

    @property
    def smooth(self) -> bool:
        """Whether p > 0 and all three look like power series: nothing is to be done."""
        powers = [self.gamma, 0.0 if self.q_exponent is None else self.q_exponent]
        whole = all(power >= 0.0 and _whole(power) for power in powers)
        return self.alpha == 0.0 and whole and (np.isinf(self.delta) or _whole(self.delta))


@dataclass(frozen=True)
class EndPlan:
    """map: exponents of the end element, None where the end is plain. classification: what the end is."""

    map: EndMap | None
    classification: str = "regular"


def _whole(value: float) -> bool:
    return abs(value - round(value)) < _EXACT


def plan_ends(problem: Problem) -> tuple[EndPlan, EndPlan]:
    """The plans of the left and of the right end of a validated problem.

    Raises InvalidProblem for a condition that does not suit the end, Unsupported for an end without a lowest
    eigenvalue or of a kind that is not handled.
    """
    return _plan(problem, True), _plan(problem, False)


def _plan(problem: Problem, left: bool) -> EndPlan:
    side = "left" if left else "right"
    end = problem.left if left else problem.right
    found = None if problem.coupling is not None else local_exponents(problem, left)
    if found is None or found.smooth:
        if isinstance(end, Bounded) and problem.coupling is None:
            raise _condition(side, "the end is regular: its condition must be stated", "bounded")
        return EndPlan(None)
    kappa = 2.0 + found.gamma - found.alpha
    if found.regular:
        return EndPlan(choose_map(*_of(found), _regular_condition(end, side)))
    _check_singular(found, kappa, side)
    nu = float(np.sqrt(found.d2)) / kappa
    principal_is_natural = found.alpha >= 1.0 and found.d2 == (1.0 - found.alpha) ** 2
    if not (isinstance(end, Bounded) or (isinstance(end, Neumann) and principal_is_natural)):
        word = type(end).__name__.lower()
        raise _condition(side, "the end is singular: only the bounded solution is handled there", word)
    return EndPlan(choose_map(*_of(found), "principal"), "limit-circle" if nu < 1.0 else "limit-point")


def _of(found: Exponents) -> tuple[float, float, float, float]:
    return found.alpha, found.gamma, float(np.sqrt(found.d2)), found.delta


def _regular_condition(end: End, side: str) -> str:
    match end:
        case Dirichlet() | Robin(beta=0.0):
            return "dirichlet"
        case Neumann() | Robin(alpha=0.0) | Film(0.0):
            return "neumann"
        case Bounded():
            raise _condition(side, "the end is regular: its condition must be stated", "bounded")
    message = "beside a coefficient that is zero or infinite only dirichlet and neumann are handled"
    raise Unsupported.at(Reason.UNSUPPORTED_END, f"{side}.kind", message, type(end).__name__.lower())


def _check_singular(found: Exponents, kappa: float, side: str) -> None:
    if np.isnan(found.d2) or found.d2 < 0.0:
        if found.q_positive:
            message = "q rises faster than p/y^2 beside this end: such a wall is not handled by this version"
        else:
            message = "solutions oscillate without end beside this end: there is no lowest eigenvalue"
        number: object = found.q_exponent if np.isnan(found.d2) else found.d2
        raise Unsupported.at(Reason.UNSUPPORTED_END, side, message, number)
    if kappa <= _EXACT:
        message = "p vanishes by two powers more than w beside this end: the spectrum is not discrete"
        raise Unsupported.at(Reason.UNSUPPORTED_END, side, message, kappa)


def _condition(side: str, message: str, word: str) -> CoreError:
    return InvalidProblem.at(Reason.BAD_END_CONDITION, f"{side}.kind", message, word)


def local_exponents(problem: Problem, left: bool) -> Exponents | None:
    """The powers of the coefficients at an end; None where they are constants or cannot be evaluated there.

    Raises Unsupported where they follow no powers: logarithms, essential singularities.
    """
    index = 0 if left else len(problem.layers) - 1
    layer = problem.layers[index]
    power = problem.geometry.power
    coefficients = (layer.p, layer.q, layer.w)
    if power == 0 and all(_is_constant(c) for c in coefficients):
        return None
    place = float(layer.start if left else layer.end)
    if not np.isfinite(place):
        return None
    sources = [
        make_source(c, name, f"layers[{index}].{name}", power, layer.reciprocal_p and name == "p", 24)
        for c, name in zip(coefficients, "pqw", strict=True)
    ]
    span = float(layer.end) - float(layer.start)
    try:
        p, q, w = (_read(source, place, 1 if left else -1, span) for source in sources)
    except (ZeroDivisionError, ValueError, OverflowError, TypeError):
        # the approximation says where it is undefined
        return None
    if p is None or w is None:
        return None
    side = "left" if left else "right"
    for found, source in zip((p, q, w), sources, strict=True):
        if found is not None and not found.steady:
            message = f"{source.name} follows no power of the distance beside this end"
            raise Unsupported.at(Reason.UNSUPPORTED_END, side, message, found.slope)
    return _combined(p, q, w)


def _is_constant(coefficient: object) -> bool:
    match coefficient:
        case Constant():
            return True
        case Expression(text):
            return constant_value(parse(text)) is not None
    return False


@dataclass(frozen=True)
class _Power:
    """value ~ c y^slope, next to leading y^(slope + delta); steady: whether it is a power at all."""

    slope: float
    delta: float
    steady: bool
    leading: Any


def _read(source: Source, place: float, inward: int, span: float) -> _Power | None:
    """The first powers of one coefficient; None where it is zero beside the end."""
    with mpmath.workdps(_DIGITS):
        y = [mpmath.mpf(span) * mpmath.mpf(10) ** -k for k in _PLACES]
        values = [precise_value(source, mpmath.mpf(place) + inward * step) for step in y]
        if any(isinstance(value, mpmath.mpc) or not mpmath.isfinite(value) for value in values):
            raise ValueError(source.name)
        if any(value == 0 for value in values):
            return None
        near, far = (
            (mpmath.log(abs(values[k])) - mpmath.log(abs(values[k + 1]))) / mpmath.log(10) for k in (3, 0)
        )
        slope = float(near)
        steady = bool(abs(near) < _LARGEST and abs(near - far) < _STEADY)
        if not steady:
            return _Power(slope, np.inf, False, mpmath.mpf(0))
        slope = float(round(slope)) if abs(slope - round(slope)) < 1e-13 else slope
        rest = [value / step ** mpmath.mpf(slope) for value, step in zip(values, y, strict=True)]
        first, second = abs(rest[0] - rest[1]), abs(rest[1] - rest[2])
        floor = abs(rest[0]) * mpmath.mpf(10) ** (60 - _DIGITS)
        delta = np.inf
        if first > floor and second > floor:
            delta = float(mpmath.log(first / second) / mpmath.log(10))
            delta = float(round(delta)) if abs(delta - round(delta)) < 1e-12 else delta
        # a sum of decimal powers misses its double: a drift, no correction
        return _Power(slope, delta if delta > 1e-3 else np.inf, True, rest[4])


def _combined(p: _Power, q: _Power | None, w: _Power) -> Exponents:
    deltas = [p.delta, w.delta]
    d2 = (1.0 - p.slope) ** 2
    positive = True
    if q is not None:
        positive = bool(q.leading > 0)
        gap = q.slope - p.slope + 2.0
        if gap < -_EXACT:
            d2 = float("nan")
        elif gap < _EXACT:
            with mpmath.workdps(60):
                exact = (1 - mpmath.mpf(p.slope)) ** 2 + 4 * q.leading / p.leading
                d2 = float(exact) if abs(exact) > _EXACT else 0.0
            deltas.append(q.delta)
        else:
            deltas += [gap, gap + q.delta]
    return Exponents(p.slope, w.slope, None if q is None else q.slope, d2, _least(deltas), positive)


def _least(deltas: Sequence[float]) -> float:
    return min(deltas, default=float("inf"))
