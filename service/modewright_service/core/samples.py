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
    """``knots`` (K+1,), ``powers`` (K, d+1): the value on piece k is sum_j powers[k, j] (x - knots[k])^j."""

    knots: FloatArray
    powers: FloatArray

    @property
    def degree(self) -> int:
        """The degree of the pieces."""
        return self.powers.shape[1] - 1

    def piece(self, x: FloatArray) -> Array:
        """The piece that holds each x; the outer ones are continued."""
        place = np.searchsorted(self.knots, x, side="right") - 1
        return np.clip(place, 0, len(self.powers) - 1)

    def on(self, pieces: Array, x: Disc) -> Disc:
        """The polynomial of piece ``pieces[i]`` on the discs ``x[i, ...]``."""
        shape = (-1,) + (1,) * (x.centre.ndim - 1)
        origin = self.knots[pieces].reshape(shape).astype(x.centre.dtype)
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
            return Table(x, np.stack((values[:-1], np.diff(values) / np.diff(x)), axis=1))
        case Interpolation.MONOTONE_CUBIC:
            cubic = PchipInterpolator(x, values)
        case Interpolation.CUBIC_SPLINE:
            cubic = CubicSpline(x, values, bc_type="not-a-knot")
    return Table(x, np.ascontiguousarray(cubic.c[::-1].T))


def _steps(x: FloatArray, values: FloatArray) -> Table:
    keep = np.flatnonzero(np.concatenate(([True], values[1:] != values[:-1])))
    return Table(np.append(x[keep], x[-1]), values[keep, np.newaxis])
