"""The factored coefficients of an end element: P, R and W as polynomials in t.

p, q and w are evaluated beside the end to many digits (:mod:`.precise`), their powers divided out, and
interpolated at Chebyshev points in t. r = q - s(s-1) p/y^2 - s p'/y is formed there before anything is
rounded: its terms cancel to the order of the first correction of the coefficients. The truncation is
estimated from the last coefficients and checked at other points; this near a singularity no bound by
enclosures is to be had. The width is taken as large as the polynomials allow.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import mpmath
import numpy as np

from .coefficients import CoefficientMesh, divided_by_distance, positive_floor
from .description import FloatArray
from .end_elements import EndMap
from .errors import NotConverged, Reason
from .fitting import Source, undefined_error
from .legendre import EXTENDED, UNIT, chebyshev_interpolation, lebesgue, vandermonde
from .precise import extended, precise_value, to_precise

__all__ = ["choose_map", "fit_end"]

_DEGREE = 24
# Truncation admitted, relative to the coefficient.
_TOLERANCE = 2e-15
# Last coefficients that are dropped may add up to this share.
_DROPPED = 4e-17
# Digits beyond those that x = a + y and the difference quotient lose.
_DIGITS = 36
# Relative step of the difference quotient y p'/p, whose error is of its square.
_STEP_DIGITS = 14
_SHRINK = 0.35
_MOST_TRIALS = 60
# p may vary by about this factor over an element beside its power.
_MOST_VARIATION = 30.0
_CHECKS = 7
# Largest whole number b = m kappa tried: higher ones crowd the functions towards the end.
_MOST_STEPS = 8


def choose_map(alpha: float, gamma: float, d: float, delta: float, condition: str) -> EndMap:
    """Exponents of the end element for p ~ y^alpha, w ~ y^gamma, D = d and coefficients in powers of y^delta.

    condition: "principal", "dirichlet" or "neumann". delta: inf where the coefficients are pure powers. v
    is then a series in y^kappa and y^delta, kappa = 2 + gamma - alpha; m = b / kappa makes both whole
    powers of t where some b <= 8 does, else y^kappa alone, y^delta being at least t.
    """
    kappa = 2.0 + gamma - alpha
    # (1 - alpha + D) / 2; a natural end of a regular problem takes the other exponent, 0
    s = 0.0 if condition == "neumann" else 0.5 * (1.0 - alpha + d)
    b = 1
    if np.isfinite(delta):
        # r then stays bounded beside its power
        b = min(int(np.ceil(kappa / delta - 1e-9)), _MOST_STEPS)
        for trial in range(1, _MOST_STEPS + 1):
            ratio = trial * delta / kappa
            if abs(ratio - round(ratio)) < 1e-9 and round(ratio) >= 1:
                b = trial
                break
    return EndMap(b / kappa, s, alpha, gamma)


@dataclass(frozen=True, eq=False)
class _Values:
    """P, R and W at points t (n,) (extended), in natural units; with s, R t h^2 in the place of R."""

    p: Any
    r: Any
    w: Any


def _evaluate(sources: list[Source], place: float, inward: int, end: EndMap, width: float, t: Any) -> _Values:
    """The factored coefficients at points t, y = h t^m, x = place + inward y."""
    smallest = float(t.min()) ** end.m * width
    lost = max(0.0, np.log10(max(abs(place), 1e-300) / smallest)) if place else 0.0
    rows: list[list[Any]] = []
    with mpmath.workdps(int(_DIGITS + _STEP_DIGITS + lost)):
        step = mpmath.mpf(10) ** -_STEP_DIGITS
        s, alpha, gamma, m, h, x0 = (
            mpmath.mpf(v) for v in (end.s, end.alpha, end.gamma, end.m, width, place)
        )
        for point in t:
            part = to_precise(point) ** m
            y = h * part
            scale = part**alpha
            p, q, w = (_real(source, x0 + inward * y) for source in sources)
            slope = mpmath.mpf(0)
            if end.s:
                up, down = (_real(sources[0], x0 + inward * y * (1 + k * step)) for k in (1, -1))
                slope = (up - down) / (2 * step)
            r = (q * y**2 - s * (s - 1) * p - s * slope) / scale
            if not end.s:
                r /= h**2 * to_precise(point) ** (1 + end.flat)
            rows.append([extended(p / scale), extended(r), extended(w / part**gamma)])
    columns = np.array(rows, dtype=EXTENDED).T
    return _Values(*columns)


def _real(source: Source, x: Any) -> Any:
    try:
        value = precise_value(source, x)
    except (ZeroDivisionError, ValueError, OverflowError):
        raise undefined_error(source, float(x)) from None
    if isinstance(value, mpmath.mpc) or not mpmath.isfinite(value):
        raise undefined_error(source, float(x))
    return value


def fit_end(
    sources: list[Source],
    place: float,
    left: bool,
    end: EndMap,
    widest: float,
    layer: int,
    energy: float,
    poll: Callable[[], None],
) -> CoefficientMesh:
    """A mesh of one element beside the end at x = `place`, at most `widest` long.

    sources: p, q, w of the layer. energy: int q u^2 beside which an error of q does not matter, for u of
    size 1. Raises InvalidProblem where one is undefined, NotConverged where no width makes them smooth.
    """
    inward = 1 if left else -1
    width = widest
    smallest = max(1e3 * float(np.spacing(abs(place))), 1e-200)
    for _ in range(_MOST_TRIALS):
        poll()
        far = place + inward * width
        width = abs(far - place)
        found = _fitted(sources, place, left, end, width, energy)
        if found is not None:
            p, r, w, errors = found
            edges = np.array([place, far] if left else [far, place])
            return CoefficientMesh(
                edges,
                np.array([layer]),
                *(p[None], r[None], w[None]),
                p_error=np.array([errors[0]]),
                q_error=np.array([errors[1]]),
                w_error=np.array([errors[2]]),
                w_absolute=np.array([errors[2] * float(np.abs(w).sum())]),
            )
        width *= _SHRINK
        if width < smallest:
            break
    side = "left" if left else "right"
    message = "the coefficients do not behave like powers times smooth functions beside this end"
    raise NotConverged.at(Reason.NOT_CONVERGED, side, message, width)


def _fitted(
    sources: list[Source], place: float, left: bool, end: EndMap, width: float, energy: float
) -> tuple[FloatArray, FloatArray, FloatArray, tuple[float, float, float]] | None:
    inward = 1 if left else -1
    nodes, project = chebyshev_interpolation(_DEGREE)
    t = (1 + nodes) / 2 if left else (1 - nodes) / 2
    values = _evaluate(sources, place, inward, end, width, t)
    if float(values.p.min()) <= 0.0 or float(values.w.min()) <= 0.0:
        return None
    series = [column @ project for column in (values.p, values.r, values.w)]
    # with s, r goes back to p; h m int t^power R v^2 dt is the energy that an error of R makes
    admitted = energy * (end.power + 1.0) / (2.0 * width * end.m)
    unit = width**2 if end.s else 1.0
    r_size = max(float(np.abs(values.r).max()), float(values.p.min()) if end.s else 0.0, admitted * unit)
    floors = (float(values.p.min()), r_size, float(values.w.min()))
    tails = [float(np.abs(c[-3:]).sum()) * lebesgue(_DEGREE) for c in series]
    if any(tail > _TOLERANCE * floor for tail, floor in zip(tails, floors, strict=True)):
        return None
    # points between the nodes, denser towards the end
    checks = ((np.arange(_CHECKS, dtype=EXTENDED) + EXTENDED(0.37)) / _CHECKS) ** 2
    table = vandermonde(2 * checks - 1 if left else 1 - 2 * checks, _DEGREE)
    seen = _evaluate(sources, place, inward, end, width, checks)
    for k, column in enumerate((seen.p, seen.r, seen.w)):
        tails[k] = max(tails[k], 2 * float(np.abs(table @ series[k] - column).max()))
    if any(tail > _TOLERANCE * floor for tail, floor in zip(tails, floors, strict=True)):
        return None
    reduced, growth = series[1], tails[1]
    if end.s:
        # r / t: what r is at t = 0 is the rounding of s
        divided = 2 * divided_by_distance(reduced, -1 if left else 1) / EXTENDED(width) ** 2
        reduced = np.append(divided, EXTENDED(0))
        # an error of r y^2 that vanishes at the end, in the inequality of bounds._end_term
        power = end.power
        growth *= min(_DEGREE**2, (1.0 + 1.0 / power) ** 2 if power > 0.0 else np.inf) / width**2
    r_floor = max(float(np.abs(reduced).max()), floors[0] / unit if end.s else 0.0)
    sizes = (floors[0], r_floor, floors[2])
    rounded = []
    for c, size in zip((series[0], reduced, series[2]), sizes, strict=True):
        short = c.astype(np.float64)
        last = np.cumsum(np.abs(short[::-1]))[::-1] <= _DROPPED * size
        short[last] = 0.0
        rounded.append(short)
    p, r, w = rounded
    if float(np.abs(p).sum()) > 2 * _MOST_VARIATION * floors[0]:
        return None
    lower = [float(positive_floor(c[None])[0]) for c in (p, w)]
    if min(lower) <= 0.0:
        return None
    rounding = [
        2 * UNIT * float(np.abs(c).sum()) + _DROPPED * size for c, size in zip(rounded, sizes, strict=True)
    ]
    errors = (
        (tails[0] + rounding[0]) / lower[0],
        growth + rounding[1],
        (tails[2] + rounding[2]) / lower[1],
    )
    return p, r, w, errors
