"""Tables of samples as exact piecewise polynomials.

Each interpolation is turned into one polynomial per interval between knots, in powers of the distance
from the interval's left knot. Steps between equal values are merged, so that a long flat table costs
one piece.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.interpolate import CubicSpline, PchipInterpolator

from . import discs
from .description import FloatArray, Interpolation, Samples
from .discs import Array, Disc


@dataclass(frozen=True, eq=False)
class Table:
    """Pieces between ``knots`` (K+1,): sum_j powers[k, j] (x - origins[k])^j on piece k; powers (K, d+1).

    The origin is the knot with the smaller value, where the polynomial is then exact: a table that falls
    to zero is zero there, not a rounding error beside it.
    """

    knots: FloatArray
    origins: FloatArray
    powers: FloatArray

    @property
    def degree(self) -> int:
        """The degree of the pieces."""
        return int(self.powers.shape[1]) - 1

    def piece(self, x: FloatArray) -> Array:
        """The piece that holds each x; the outer ones are continued."""
        place = np.searchsorted(self.knots, x, side="right") - 1
        return np.clip(place, 0, len(self.powers) - 1)

    def on(self, pieces: Array, x: Disc) -> Disc:
        """The polynomial of piece ``pieces[i]`` on the discs ``x[i, ...]``."""
        shape = (-1,) + (1,) * (x.centre.ndim - 1)
        origin = self.origins[pieces].reshape(shape).astype(x.centre.dtype)
        distance = discs.sub(x, discs.exact(origin))
        powers = self.powers[pieces].astype(x.centre.dtype)
        value = discs.exact(powers[:, -1].reshape(shape))
        for j in range(self.degree - 1, -1, -1):
            value = discs.add(discs.mul(value, distance), discs.exact(powers[:, j].reshape(shape)))
        return Disc(
            np.broadcast_to(value.centre, x.centre.shape), np.broadcast_to(value.radius, x.centre.shape)
        )


def table(samples: Samples) -> Table:
    """The piecewise polynomial that ``samples`` stand for.

    ``monotone-cubic`` takes the slopes of F. N. Fritsch and J. Butland, SIAM J. Sci. Stat. Comput. 5
    (1984) 300-304 (the weighted harmonic mean); ``cubic-spline`` has not-a-knot ends, and is the
    parabola or the line through three or two samples.
    """
    x = np.asarray(samples.x, dtype=np.float64)
    values = np.asarray(samples.values, dtype=np.float64)
    match Interpolation(samples.interpolation):
        case Interpolation.STEP_LEFT:
            return _steps(x, values[:-1])
        case Interpolation.STEP_RIGHT:
            return _steps(x, values[1:])
        case Interpolation.LINEAR:
            slopes = np.diff(values) / np.diff(x)
            return _from_ends(x, values, np.stack((slopes, slopes), axis=1), 1)
        case Interpolation.MONOTONE_CUBIC:
            slope = PchipInterpolator(x, values).derivative()(x)
        case Interpolation.CUBIC_SPLINE:
            slope = CubicSpline(x, values, bc_type="not-a-knot")(x, 1)
    return _from_ends(x, values, np.stack((slope[:-1], slope[1:]), axis=1), 3)


def _steps(x: FloatArray, values: FloatArray) -> Table:
    keep = np.flatnonzero(np.concatenate(([True], values[1:] != values[:-1])))
    return Table(np.append(x[keep], x[-1]), x[keep], values[keep, np.newaxis])


def _from_ends(x: FloatArray, values: FloatArray, slopes: FloatArray, degree: int) -> Table:
    """Hermite pieces from the values (K+1,) and each piece's slopes at its left and right end (K, 2)."""
    turned = np.abs(values[1:]) < np.abs(values[:-1])
    width = np.where(turned, -1, 1) * np.diff(x)
    near = np.where(turned, values[1:], values[:-1])
    far = np.where(turned, values[:-1], values[1:])
    near_slope = np.where(turned, slopes[:, 1], slopes[:, 0])
    far_slope = np.where(turned, slopes[:, 0], slopes[:, 1])
    origins = np.where(turned, x[1:], x[:-1])
    if degree == 1:
        return Table(x, origins, np.stack((near, near_slope), axis=1))
    chord = (far - near) / width
    second = (3 * chord - 2 * near_slope - far_slope) / width
    third = (near_slope + far_slope - 2 * chord) / (width * width)
    return Table(x, origins, np.stack((near, near_slope, second, third), axis=1))
