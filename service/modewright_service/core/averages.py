"""Constant pieces that bound the form from below to second order in their length.

On a piece of length h let c = q - nu w. With t = int dx / p, T its length in t and L = int c dx, the function
R(x) = int (c - L / (T p)) dx vanishes at both ends of the piece, so that integration by parts and the
inequality between the arithmetic and the geometric mean give, for every u and every 0 < eps < 1,

    int c u^2 dx = (L/T) int u^2 dt - 2 int R u u' dx
                >= (L/T - max R^2 / eps) int u^2 dt - eps int p u'^2 dx.

The form is therefore no less than that of the constants (1 - eps) h/T for p and L/h - max R^2 T / (eps h) for
c. R is of second order in h where c varies, so the loss is too, with eps of the size of R; the least and
largest values on a piece lose a first order. |R| <= (h/2) max |c - L/(T p)|, half the integral of its slope's
modulus. T <= (h / m) (1 + v^2 / (1 - v)) for a mean m of p from which p differs by v m at most: the series of
1/p, whose first term has no integral.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from modewright_service.core.coefficients import Ranges

__all__ = ["Averages", "averages"]

Array = NDArray[np.float64]

# Above this share of the p-energy, or of variation of p, least and largest values are as good.
_MOST_SHARE = 0.3


@dataclass(frozen=True, eq=False)
class Averages:
    """(P,) each: length; p, a lower bound of h/T; q, w_lower, w_upper: bounds of the means.

    q_size, w_size: bounds of max |c - L/(T p)| for c = q and c = w. settled: whether all these are finite and
    p varies little. total: length of the whole interval.
    """

    length: Array
    p: Array
    q: Array
    w_lower: Array
    w_upper: Array
    q_size: Array
    w_size: Array
    settled: NDArray[np.bool_]
    total: float

    def part(self, pieces: slice) -> Averages:
        """Those of some of the pieces."""
        names = ("length", "p", "q", "w_lower", "w_upper", "q_size", "w_size", "settled")
        return replace(self, **{name: getattr(self, name)[pieces] for name in names})

    def piece(self, j: int, nu: Array, fraction: float) -> tuple[Array, Array, NDArray[np.bool_]]:
        """p and q - nu w (T,) of piece j at each nu, and where they are worth having.

        fraction: multiplies p, the part of its energy that the form keeps.
        """
        p, h = fraction * self.p[j], self.length[j]
        load = self.q[j] - nu * np.where(nu < 0.0, self.w_lower[j], self.w_upper[j])
        rest = 0.5 * h * (self.q_size[j] + np.abs(nu) * self.w_size[j])
        # p u'^2 and |c| u^2 are of one size in a mode, or the first is that of the slowest mode
        size = np.sqrt(p * (np.abs(load) + p * (np.pi / self.total) ** 2))
        share = rest / size
        usable = self.settled[j] & (share <= _MOST_SHARE)
        # R^2 / (eps p) with eps = R / size
        return p * (1.0 - np.where(usable, share, 0.0)), load - rest * (size / p), usable


def averages(bounds: Ranges, total: float) -> Averages:
    """The averages of the pieces of `bounds`; total: length of the whole interval."""
    length = np.diff(bounds.edges)
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        middle = bounds.p_mean_lower
        variation = np.maximum(bounds.p_upper - middle, bounds.p_mean_upper - bounds.p_lower) / middle
        p = middle / (1.0 + variation**2 / (1.0 - variation))
        spread = bounds.p_upper / bounds.p_lower - 1.0
        sizes = []
        for low, high, mean_low, mean_high in (
            (bounds.q_lower, bounds.q_upper, bounds.q_mean_lower, bounds.q_mean_upper),
            (bounds.w_lower, bounds.w_upper, bounds.w_mean_lower, bounds.w_mean_upper),
        ):
            most = np.maximum(np.abs(mean_low), np.abs(mean_high))
            sizes.append(np.maximum(high - mean_low, mean_high - low) + most * spread)
    settled = (variation <= _MOST_SHARE) & np.isfinite(sizes[0]) & np.isfinite(sizes[1])
    return Averages(
        length,
        np.where(settled, p, 1.0),
        bounds.q_mean_lower,
        bounds.w_mean_lower,
        bounds.w_mean_upper,
        np.where(settled, sizes[0], 0.0),
        np.where(settled, sizes[1], 0.0),
        settled,
        total,
    )
