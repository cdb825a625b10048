"""Circular arithmetic on arrays: a disc (centre, radius) that contains every value meant.

The same formulas serve three uses, told apart by the type of the centres only:

* complex centres: an enclosure of a coefficient on a disc of the complex plane. A finite radius says
  that the coefficient is analytic there, because every operation that meets a pole, a branch point or
  a branch cut answers an infinite radius;
* real centres with the radius of an interval: the range of a coefficient on a piece of the real line;
* real centres with radius zero: a value with a bound on the rounding errors made in computing it, as
  every operation adds its own (a running error analysis).

Radii for f(disc) come from the Taylor series about the centre with every coefficient replaced by its
modulus (a majorant), which is exact for exp and close for the others while the radius is small against
the distance to the next singularity. Rounding of the radii themselves is not directed; the slack of
``GUARD`` covers it.

References: M. S. Petkovic, L. D. Petkovic, Complex Interval Arithmetic and Its Applications (1998),
chapter 1, for circular arithmetic; N. J. Higham, Accuracy and Stability of Numerical Algorithms (2002),
section 3.3, for running error analysis.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, NamedTuple

import numpy as np
import numpy.typing as npt

Array = npt.NDArray[Any]

# An elementary function of the platform's library is taken to be right within this many units of
# rounding (glibc documents at most a few for those used here).
FUNCTION_UNITS = 8.0
GUARD = 1.0 + 2.0**-40


class Disc(NamedTuple):
    """Centres (real or complex) and radii >= 0 of one shape; a radius of inf says: nothing known."""

    centre: Array
    radius: Array


def unit(centre: Array) -> Any:
    """The unit roundoff of the arithmetic of ``centre``."""
    return np.finfo(centre.dtype).eps / 2


def exact(centre: Array) -> Disc:
    """Discs of radius zero about ``centre``."""
    centre = np.asarray(centre)
    return Disc(centre, np.zeros(centre.shape, dtype=np.finfo(centre.dtype).dtype))


def settled(disc: Disc) -> Disc:
    """``disc`` with everything that overflowed or is undefined turned into (0, inf)."""
    good = np.isfinite(disc.centre) & np.isfinite(disc.radius)
    if good.all():
        return disc
    return Disc(np.where(good, disc.centre, 0), np.where(good, disc.radius, np.inf))


def _underflow(centre: Array) -> Any:
    """What a positive result that was rounded to zero may have been."""
    return np.finfo(centre.dtype).tiny


def _rounded(centre: Array, radius: Array, units: float = 1.0) -> Disc:
    return Disc(centre, (radius + units * unit(centre) * np.abs(centre)) * GUARD)


def neg(a: Disc) -> Disc:
    return Disc(-a.centre, a.radius)


def add(a: Disc, b: Disc) -> Disc:
    return _rounded(a.centre + b.centre, a.radius + b.radius)


def sub(a: Disc, b: Disc) -> Disc:
    return _rounded(a.centre - b.centre, a.radius + b.radius)


def mul(a: Disc, b: Disc) -> Disc:
    radius = np.abs(a.centre) * b.radius + np.abs(b.centre) * a.radius + a.radius * b.radius
    return _rounded(a.centre * b.centre, radius, 2.0)


def inverse(a: Disc) -> Disc:
    """1/a, the exact image of the disc; unknown when the disc holds 0."""
    size = np.abs(a.centre)
    gap = size - a.radius
    centre = 1 / a.centre
    # |1/z - 1/c| <= r / (|c| (|c| - r)), which keeps the centre where the rounding analysis wants it.
    radius = np.where(gap > 0, a.radius / (size * np.where(gap > 0, gap, 1)), np.inf)
    return _rounded(centre, radius, 4.0)


def div(a: Disc, b: Disc) -> Disc:
    quotient = mul(a, inverse(b))
    centre = a.centre / b.centre
    return _rounded(centre, quotient.radius + np.abs(quotient.centre - centre))


def _majorant_radius(size: Array, ratio: Array, growth: Callable[[Array], Array]) -> Array:
    """``size`` times ``growth(ratio)`` where ratio < 1, else inf."""
    inside = ratio < 1
    return np.where(inside, size * growth(np.where(inside, ratio, 0)), np.inf)


def power(a: Disc, exponent: float) -> Disc:
    """a ** exponent for a real exponent.

    A non-negative integer exponent is entire: radius (|c| + r)^n - |c|^n. Otherwise
    |(1 + t)^s - 1| <= (1 - |t|)^-|s| - 1, and the principal branch needs the disc off the cut.
    """
    whole = float(exponent).is_integer()
    if whole and exponent >= 0:
        n = int(exponent)
        centre = a.centre**n if n else np.ones_like(a.centre)
        size = np.abs(a.centre)
        positive = size > 0
        safe = np.where(positive, size, 1)
        relative = safe**n * np.expm1(n * np.log1p(a.radius / safe))
        radius = np.where(positive, relative, a.radius**n if n else 0)
        result = _rounded(centre, radius, 2.0 * max(n, 1))
        if n and n % 2 == 0 and not np.iscomplexobj(a.centre):
            return choose(_wide(a), _from_modulus(a, lambda y: y**n, 2.0 * n), result)
        return result
    if not whole and exponent > 0 and not np.iscomplexobj(a.centre):
        return _monotone(a, lambda y: y**exponent, 2.0 * exponent + FUNCTION_UNITS, 0.0)
    off_cut = a if whole else _off_cut(a)
    size = np.abs(off_cut.centre)
    ratio = off_cut.radius / size
    if whole:
        centre = 1 / off_cut.centre ** int(-exponent)
    else:
        centre = off_cut.centre**exponent
    s = abs(float(exponent))
    radius = _majorant_radius(np.abs(centre), ratio, lambda t: np.expm1(-s * np.log1p(-t)))
    return _rounded(centre, radius, 2.0 * s + FUNCTION_UNITS)


def _wide(a: Disc) -> Array:
    """Real intervals, not the rounding errors of points: their images are taken end by end."""
    return a.radius > 2.0**-20 * (np.abs(a.centre) + a.radius)


def _monotone(
    a: Disc, function: Callable[[Array], Array], units: float = FUNCTION_UNITS, least: float = -np.inf
) -> Disc:
    """A monotone function of real discs in [least, inf): about its value for points, else end by end."""
    # An interval that begins at the bound was widened by rounding and by the guard of the operations that
    # made it: on the smallest elements by as much as this.
    inside = low(a) >= least - 2.0**-12 * (high(a) - least if np.isfinite(least) else 0)
    start, stop = np.maximum(low(a), least), np.maximum(high(a), least)
    ends = function(np.where(inside, start, 1)), function(np.where(inside, stop, 1))
    slack = units * unit(a.centre) * np.maximum(np.abs(ends[0]), np.abs(ends[1])) + _underflow(a.centre)
    bottom, top = np.minimum(*ends) - slack, np.maximum(*ends) + slack
    at_point = function(np.where(inside, np.maximum(a.centre, least), 1))
    around = np.where(a.radius == 0, 0, np.maximum(top - at_point, at_point - bottom))
    across = interval(bottom, top)
    wide = _wide(a)
    centre = np.where(wide, across.centre, at_point)
    radius = np.where(wide, across.radius, around + _underflow(a.centre))
    return _rounded(centre, np.where(inside, radius, np.inf), units)


def _from_modulus(a: Disc, function: Callable[[Array], Array], units: float = FUNCTION_UNITS) -> Disc:
    """An even function, monotone on [0, inf), of wide real discs."""
    bottom = np.maximum(np.maximum(low(a), -high(a)), 0)
    return _monotone(interval(bottom, np.maximum(-low(a), high(a))), function, units, 0.0)


def _off_cut(a: Disc) -> Disc:
    """``a`` where it stays off the cut (-inf, 0] of log and sqrt, unknown elsewhere."""
    real, size = a.centre.real, np.abs(a.centre)
    distance = np.where(real > 0, size, np.abs(a.centre.imag))
    clear = a.radius < distance
    return Disc(np.where(clear, a.centre, 1), np.where(clear, a.radius, np.inf))


def exp(a: Disc) -> Disc:
    if not np.iscomplexobj(a.centre):
        return _monotone(a, np.exp)
    centre = np.exp(a.centre)
    # |exp z - exp c| <= exp(Re c + r) - |exp c|; the sum first, so that a large radius cannot meet 0 * inf.
    wide = np.exp(a.centre.real + a.radius)
    radius = np.where(a.radius > 1, wide, np.abs(centre) * np.expm1(np.minimum(a.radius, 1)))
    return _rounded(centre, radius + _underflow(centre), FUNCTION_UNITS)


def log(a: Disc) -> Disc:
    a = _off_cut(a)
    ratio = a.radius / np.abs(a.centre)
    ones = np.ones_like(ratio)
    return _rounded(np.log(a.centre), _majorant_radius(ones, ratio, lambda t: -np.log1p(-t)), FUNCTION_UNITS)


def sqrt(a: Disc) -> Disc:
    if not np.iscomplexobj(a.centre):
        return _monotone(a, np.sqrt, least=0.0)
    a = _off_cut(a)
    centre = np.sqrt(a.centre)
    ratio = a.radius / np.abs(a.centre)
    return _rounded(
        centre, _majorant_radius(np.abs(centre), ratio, lambda t: t / (1 + np.sqrt(1 - t))), FUNCTION_UNITS
    )


def _oscillating(value: Array, slope: Array, radius: Array) -> Disc:
    """From |f(c + z) - f(c)| <= |f(c)| (cosh r - 1) + |f'(c)| sinh r, true of sin, cos, sinh, cosh."""
    half = np.sinh(radius / 2)
    grown = np.abs(value) * 2 * half * half + np.abs(slope) * np.sinh(radius)
    # Near its zeros the library's sin is right in relative terms, but only for the rounded argument.
    return _rounded(value, np.where(radius == 0, 0, grown), FUNCTION_UNITS)


def _within_one(a: Disc, disc: Disc) -> Disc:
    """``disc``, or [-1, 1] where it is wider than that and the argument is real."""
    if np.iscomplexobj(a.centre):
        return disc
    beyond = (disc.radius >= 1) & np.isfinite(a.radius)
    return Disc(np.where(beyond, 0, disc.centre), np.where(beyond, 1, disc.radius))


def sin(a: Disc) -> Disc:
    return _within_one(a, _oscillating(np.sin(a.centre), np.cos(a.centre), a.radius))


def cos(a: Disc) -> Disc:
    return _within_one(a, _oscillating(np.cos(a.centre), np.sin(a.centre), a.radius))


def sinh(a: Disc) -> Disc:
    if not np.iscomplexobj(a.centre):
        return _monotone(a, np.sinh)
    return _oscillating(np.sinh(a.centre), np.cosh(a.centre), a.radius)


def cosh(a: Disc) -> Disc:
    result = _oscillating(np.cosh(a.centre), np.sinh(a.centre), a.radius)
    if np.iscomplexobj(a.centre):
        return result
    return choose(_wide(a), _from_modulus(a, np.cosh), result)


def _tail(a: Disc) -> tuple[Array, Array, Array]:
    """The side s = sign Re c, E = exp(-2 s c), and a bound of |exp(-2 s z) - E| on the disc."""
    side = np.where(a.centre.real < 0, -1.0, 1.0)
    small = np.exp(-2 * side * a.centre)
    return side, small, np.abs(small) * np.expm1(2 * a.radius)


def tanh(a: Disc) -> Disc:
    """The better of two bounds: one near the origin, one far out where tanh is almost +-1.

    Near: tanh(c + z) - tanh c = sech^2(c) T / (1 + tanh(c) T), T = tanh z, |T| <= tan r. Far:
    tanh z = s (-1 + 2/(1 + E)), E = exp(-2 s z).
    """
    if not np.iscomplexobj(a.centre):
        return _monotone(a, np.tanh)
    centre = np.tanh(a.centre)
    _, small, spread = _tail(a)
    away = np.abs(1 + small)
    slope = 4 * np.abs(small) / (away * away)
    grown = np.tan(np.where(a.radius < 1.5, a.radius, 0))
    room = 1 - np.abs(centre) * grown
    near_holds = (a.radius < 1.5) & (room > 0)
    near = np.where(near_holds, slope * grown / np.where(near_holds, room, 1), np.inf)
    left = away - spread
    far = np.where(left > 0, 2 * spread / (away * np.where(left > 0, left, 1)), np.inf)
    radius = np.where(a.radius == 0, 0, np.fmin(near, far))
    return _rounded(centre, radius, FUNCTION_UNITS)


def tan(a: Disc) -> Disc:
    """tan z = -i tanh(i z); a real argument keeps a real centre."""
    turned = tanh(Disc(1j * a.centre, a.radius))
    if np.iscomplexobj(a.centre):
        return _rounded(-1j * turned.centre, turned.radius)
    return _rounded(np.tan(a.centre), turned.radius, 2 * FUNCTION_UNITS)


def sech(a: Disc) -> Disc:
    """1/cosh, by 2 E / (1 + E^2) with E = exp(-s z), which stays finite and small far out."""
    side, small, spread = _tail(a)
    once = np.exp(-side * a.centre)
    once_spread = np.abs(once) * np.expm1(a.radius)
    away = np.abs(1 + small)
    left = away - spread
    centre = 2 * once / (1 + small)
    numerator = once_spread * away + np.abs(once) * spread
    radius = np.where(left > 0, 2 * numerator / (away * np.where(left > 0, left, 1)), np.inf)
    radius = np.where(a.radius == 0, 0, radius) + _underflow(centre)
    result = _rounded(centre, radius, 2 * FUNCTION_UNITS)
    if np.iscomplexobj(a.centre):
        return result
    return choose(_wide(a), _from_modulus(a, lambda y: 1 / np.cosh(y)), result)


def logistic(a: Disc) -> Disc:
    """1/(1 + exp(-z)) = (1 + tanh(z/2))/2, without losing its small values at the left."""
    if not np.iscomplexobj(a.centre):
        return _monotone(a, _real_logistic, 2 * FUNCTION_UNITS)
    half = tanh(Disc(a.centre / 2, a.radius / 2))
    side = np.where(a.centre.real < 0, -1.0, 1.0)
    small = np.exp(-side * a.centre)
    centre = np.where(a.centre.real < 0, small / (1 + small), 1 / (1 + small))
    near = half.radius / 2
    # On the left |exp(z)/(1 + exp(z)) - centre| is relative to exp(z), not to 1.
    spread = np.abs(small) * np.expm1(a.radius)
    away = np.abs(1 + small)
    left = away - spread
    far = np.where(left > 0, spread / (away * np.where(left > 0, left, 1)), np.inf)
    radius = np.where(a.radius == 0, 0, np.fmin(near, far)) + _underflow(centre)
    return _rounded(centre, radius, 2 * FUNCTION_UNITS)


def _real_logistic(y: Array) -> Array:
    small = np.exp(-np.abs(y))
    return np.asarray(np.where(y < 0, small, 1) / (1 + small))


def hull(a: Disc, b: Disc) -> Disc:
    """A disc that contains both."""
    centre = (a.centre + b.centre) / 2
    radius = np.abs(a.centre - b.centre) / 2 + np.maximum(a.radius, b.radius)
    return _rounded(centre, radius, 2.0)


def choose(first: Array, a: Disc, b: Disc) -> Disc:
    """``a`` where ``first`` holds, else ``b``."""
    return Disc(np.where(first, a.centre, b.centre), np.where(first, a.radius, b.radius))


def interval(low: Array, high: Array) -> Disc:
    """The real interval [low, high] as a disc."""
    centre = low + (high - low) / 2
    return _rounded(centre, (high - low) / 2, 2.0)


def low(a: Disc) -> Array:
    """The smallest real value; -inf where nothing is known."""
    return np.asarray(a.centre.real - a.radius)


def high(a: Disc) -> Array:
    """The largest real value; inf where nothing is known."""
    return np.asarray(a.centre.real + a.radius)


FUNCTIONS: dict[str, Callable[[Disc], Disc]] = {
    "neg": neg,
    "sin": sin,
    "cos": cos,
    "tan": tan,
    "sinh": sinh,
    "cosh": cosh,
    "tanh": tanh,
    "exp": exp,
    "log": log,
    "sqrt": sqrt,
    "sech": sech,
    "logistic": logistic,
}
OPERATIONS: dict[str, Callable[[Disc, Disc], Disc]] = {"+": add, "-": sub, "*": mul, "/": div}
