"""Where a coefficient must be cut: the places at which a branch switches or a coefficient is zero.

An interval of a layer is divided as long as the enclosure of some argument of abs, min, max, sign, step
or where (or of p or w itself, whose zeros matter as much) holds zero there; all other intervals are
settled. What is left in the end are intervals of a few units in the last place, whose
best point becomes an element edge. Where enclosures cannot settle too many intervals (an argument that
vanishes on a stretch, crossings that accumulate) the rest is returned as *open* stretches, on which no
analyticity may be assumed.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from . import discs
from .description import FloatArray
from .discs import Array, Disc
from .evaluation import point_signs, run, switches
from .expressions import Program
from .samples import Table

_START = 16
_MOST_OPEN = 512
# Parts per round: work grows with the parts, overhead with the rounds.
_PARTS = 8
_ROUNDS = 30
_ULPS = 4.0
# Candidate points looked at in a final interval of a few units in the last place.
_CANDIDATES = 33


@dataclass(frozen=True)
class Cuts:
    """``points`` ascending inside the interval; ``open`` the stretches that could not be settled;
    ``negative`` a stretch on which the coefficient is certainly negative, if one was met.
    """

    points: tuple[float, ...] = ()
    open: tuple[tuple[float, float], ...] = ()
    negative: tuple[float, float] | None = None


@dataclass(eq=False)
class _Search:
    program: Program
    table: Table | None
    signed: bool
    negative: tuple[float, float] | None = None
    switching: list[int] = field(default_factory=list)

    def __post_init__(self) -> None:
        self.switching = switches(self.program)

    def samples(self, x: Disc, middle: FloatArray) -> Disc | None:
        return None if self.table is None else self.table.on(self.table.piece(middle), x)

    def undecided(self, left: FloatArray, right: FloatArray) -> Array:
        """(K,) whether some argument may be zero on [left, right]."""
        x = discs.interval(left.astype(np.longdouble), right.astype(np.longdouble))
        arguments: dict[int, Disc] = {}
        value = run(self.program, x, self.samples(x, (left + right) / 2), None, arguments)
        result = np.zeros(left.shape, dtype=bool)
        for index in self.switching:
            result |= _may_vanish(arguments[index])
        if self.signed:
            result |= _may_vanish(value)
            below = np.flatnonzero(discs.high(value) < 0)
            if below.size and self.negative is None:
                self.negative = float(left[below[0]]), float(right[below[0]])
        return result

    def sizes(self, x: FloatArray) -> Array:
        """(C, n) moduli of the arguments at points, the least of which marks the cut."""
        points = discs.exact(x.astype(np.longdouble))
        arguments: dict[int, Disc] = {}
        samples = self.samples(points, x)
        signs = point_signs(self.program, points, samples)
        value = run(self.program, points, samples, signs, arguments)
        rows = [arguments[index] for index in self.switching] + ([value] if self.signed else [])
        return np.array([np.broadcast_to(_modulus(row), x.shape) for row in rows])


def _modulus(disc: Disc) -> Array:
    return np.where(np.isfinite(disc.radius), np.abs(disc.centre), np.inf)


def _may_vanish(disc: Disc) -> Array:
    """Whether the disc holds zero without being zero exactly."""
    return (np.abs(disc.centre) <= disc.radius) & (disc.radius > 0)


def find_cuts(program: Program, table: Table | None, left: float, right: float, signed: bool) -> Cuts:
    """Cuts of one coefficient inside (left, right).

    ``signed`` asks for the zeros of the coefficient itself too, and for a stretch where it is negative.
    """
    search = _Search(program, table, signed)
    if not search.switching and not signed:
        return Cuts()
    edges = np.linspace(left, right, _START + 1)
    edges[0], edges[-1] = left, right
    lows, highs = edges[:-1], edges[1:]
    done: list[tuple[float, float]] = []
    for _ in range(_ROUNDS):
        keep = search.undecided(lows, highs)
        lows, highs = lows[keep], highs[keep]
        if search.negative is not None or lows.size == 0:
            break
        small = highs - lows <= _ULPS * np.spacing(np.maximum(np.abs(lows), np.abs(highs)))
        # At an edge in 0 the spacing is no limit; the layer's own resolution is.
        small |= highs - lows <= (right - left) * 2.0**-52
        done.extend(zip(lows[small].tolist(), highs[small].tolist(), strict=True))
        lows, highs = lows[~small], highs[~small]
        if lows.size > _MOST_OPEN:
            break
        steps = lows[:, np.newaxis] + (highs - lows)[:, np.newaxis] * (np.arange(1, _PARTS) / _PARTS)
        lows, highs = (
            np.concatenate((lows[:, np.newaxis], steps), axis=1).ravel(),
            np.concatenate((steps, highs[:, np.newaxis]), axis=1).ravel(),
        )
        # Near the last bit some parts are empty.
        lows, highs = lows[highs > lows], highs[highs > lows]
    remaining = zip(lows.tolist(), highs.tolist(), strict=True)
    clusters = _merged([*done, *remaining])
    points, stretches = [], []
    for low, high in clusters:
        resolution = max(16 * np.spacing(max(abs(low), abs(high))), (right - left) * 2.0**-48)
        if high - low <= resolution:
            points.append(_best_point(search, low, high))
        else:
            stretches.append((low, high))
    inside = tuple(sorted({point for point in points if left < point < right}))
    return Cuts(inside, tuple(stretches), search.negative)


def _merged(intervals: list[tuple[float, float]]) -> list[tuple[float, float]]:
    """Touching intervals joined."""
    merged: list[tuple[float, float]] = []
    for low, high in sorted(intervals):
        if merged and low <= merged[-1][1]:
            merged[-1] = merged[-1][0], max(high, merged[-1][1])
        else:
            merged.append((low, high))
    return merged


def _best_point(search: _Search, low: float, high: float) -> float:
    """The point of a final interval where an argument is zero or least."""
    candidates = np.unique(np.linspace(low, high, _CANDIDATES))
    sizes = search.sizes(candidates)
    # The argument that varies most over the interval, relative to its size there, is the one meant.
    largest = sizes.max(axis=1)
    scaled = np.where(largest[:, np.newaxis] > 0, sizes, np.inf)
    row = int(np.argmin(np.nanmin(scaled, axis=1)))
    return float(candidates[int(np.argmin(sizes[row]))])
