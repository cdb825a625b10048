"""The eigenvalues of the condensed chain, found by counting so that none can be missed.

Every index n keeps a bracket (low, high) with count(low) <= n < count(high). Brackets are cut by Newton steps
of the twisted factorisation, accepted only while the bracket isolates one eigenvalue, else by bisection; all
indices advance together. In the end every value is confirmed by two counts a few units of rounding to either
side of it: half-way between two eigenvalues that are close a Newton step is as small as at an eigenvalue,
since the twisted vector is then the sum of both.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from modewright_service.core.condensed import Evaluation, Vectors
from modewright_service.core.errors import NotConverged, Reason

__all__ = ["Spectrum", "System", "eigenvalues", "floor_below"]

Array = NDArray[np.float64]
IntArray = NDArray[np.int64]

_EPS = float(np.finfo(float).eps)
# Bisection halves a bracket; 200 rounds pass from 1e30 to one unit of rounding with room for Newton's
# retries.
_ROUNDS = 200
# Units of rounding to either side between which a value must be confirmed by counts, whose own sign is
# rounding closer by.
_CONFIRMED = 64.0


class System(Protocol):
    """A discrete problem that can be counted and corrected at many lambda at once."""

    @property
    def multiplicity(self) -> int:
        """How many eigenvalues may coincide: 1 for separated ends, 2 for coupled ones."""

    def count(self, lam: Array) -> IntArray:
        """(T,) number of eigenvalues below each lambda."""

    def evaluate(self, lam: Array, index: IntArray) -> Evaluation:
        """Counts and corrections towards the eigenvalue of each index at (T,) lambda."""

    def vectors(self, lam: Array, scale: float) -> Vectors:
        """Vectors of unit norm at (T,) converged eigenvalues, members of close groups orthogonal."""


@dataclass(frozen=True, eq=False)
class Spectrum:
    """values: (N,) ascending eigenvalues of the discrete problem. evaluations: chain evaluations spent."""

    values: Array
    evaluations: int


def floor_below(system: System, scale: float) -> float:
    """A lambda below the whole discrete spectrum, not much further down than needed.

    scale: a positive lambda of the size of the smallest eigenvalue gaps, the first trial.
    """
    trial = -1e-3 * scale
    # to 1e33 times the scale: what binds deeper is not within doubles of the rest
    for _ in range(120):
        if int(system.count(np.array([trial]))[0]) == 0:
            return trial
        trial *= 2.0
    raise NotConverged.at(
        Reason.NOT_CONVERGED, "modes", "no lower end of the spectrum was found", repr(float(trial))
    )


def eigenvalues(
    system: System,
    first: int,
    count: int,
    floor: float,
    top: float,
    scale: float,
    poll: Callable[[], None],
) -> Spectrum:
    """`count` eigenvalues from index `first` on, all of which lie in (floor, top).

    scale: size of a typical low eigenvalue, for the stopping rule near lambda = 0.
    Raises NotConverged where a bracket does not close (which a consistent count excludes).
    """
    index = first + np.arange(count)
    low_end, high_end = _range(system, first, first + count, floor, top) if first else (floor, top)
    # eigenvalues grow like the square of their index
    start = np.sqrt((low_end - floor) / (high_end - floor))
    parameters = np.linspace(start, 1.0, int(1.3 * count) + 3)
    grid = floor + (high_end - floor) * parameters**2
    counts = np.maximum.accumulate(system.count(grid))
    above = np.searchsorted(counts, index, side="right")
    if int(counts[-1]) < first + count:
        raise NotConverged.at(
            Reason.NOT_CONVERGED, "modes", f"{int(counts[-1])} found below the top", str(first + count)
        )
    above = np.maximum(above, 1)
    low, high = grid[above - 1].copy(), grid[above].copy()
    count_low, count_high = counts[above - 1].copy(), counts[above].copy()

    value = 0.5 * (low + high)
    active = np.ones(count, dtype=bool)
    last_step = np.full(count, np.inf)
    evaluations = 1
    for _ in range(_ROUNDS):
        if not active.any():
            break
        poll()
        a = np.flatnonzero(active)
        result = system.evaluate(value[a], index[a])
        evaluations += 1
        is_below = result.count <= index[a]
        low[a] = np.where(is_below, value[a], low[a])
        count_low[a] = np.where(is_below, result.count, count_low[a])
        high[a] = np.where(is_below, high[a], value[a])
        count_high[a] = np.where(is_below, count_high[a], result.count)
        width = high[a] - low[a]
        step = np.abs(result.step)
        rounding = 4.0 * _EPS * (np.abs(value[a]) + scale)
        isolated = count_high[a] - count_low[a] <= system.multiplicity
        target = value[a] + result.step
        # close to an eigenvalue its side is decided by rounding: a step this small may leave the bracket
        slack = 1e3 * rounding
        inside = (target >= low[a] - slack) & (target <= high[a] + slack)
        shrinking = step <= 0.5 * last_step[a]
        newton = isolated & inside & (shrinking | (step <= slack))
        done = newton & ((step <= np.maximum(rounding, 1e-9 * width)) | ((step <= slack) & ~shrinking))
        done |= width <= rounding
        last_step[a] = np.where(newton, step, np.inf)
        value[a] = np.where(newton, target, 0.5 * (low[a] + high[a]))
        active[a[done]] = False
    if active.any():
        n = int(np.flatnonzero(active)[0])
        raise NotConverged.at(
            Reason.NOT_CONVERGED, "modes", f"bracket of index {n} did not close", repr(float(value[n]))
        )
    value, counted = _confirmed(system, index, value, low, high, scale, poll)
    return Spectrum(np.maximum.accumulate(value), evaluations + counted)


def _range(system: System, first: int, end: int, floor: float, top: float) -> tuple[float, float]:
    """(low, high) within (floor, top), not much wider than the indices first..end-1 need."""
    low, high = floor, top
    for _ in range(_ROUNDS):
        trials = np.linspace(low, high, 18)[1:-1]
        counts = system.count(trials)
        under, over = trials[counts <= first], trials[counts >= end]
        before = high - low
        low = max(low, float(under.max(initial=low)))
        high = min(high, float(over.min(initial=high)))
        if high - low > 0.5 * before:
            break
    return low, high


def _confirmed(
    system: System,
    index: IntArray,
    value: Array,
    low: Array,
    high: Array,
    scale: float,
    poll: Callable[[], None],
) -> tuple[Array, int]:
    """The values, those that counts do not confirm replaced by bisection of (low, high); and counts spent."""
    margin = _CONFIRMED * _EPS * (np.abs(value) + scale)
    above_value = system.count(value - margin) > index
    wrong = np.flatnonzero(above_value | (system.count(value + margin) <= index))
    poll()
    value, counted = value.copy(), 2
    a, b = low[wrong], high[wrong]
    a = np.where(above_value[wrong], a, np.maximum(a, value[wrong] + margin[wrong]))
    b = np.where(above_value[wrong], np.minimum(b, value[wrong] - margin[wrong]), b)
    active = np.arange(wrong.size)
    for _ in range(_ROUNDS):
        middle = 0.5 * (a + b)
        active = active[(b - a)[active] > 4.0 * _EPS * (np.abs(middle) + scale)[active]]
        if active.size == 0:
            break
        below = system.count(middle[active]) <= index[wrong][active]
        a[active] = np.where(below, middle[active], a[active])
        b[active] = np.where(below, b[active], middle[active])
        counted += 1
        poll()
    value[wrong] = 0.5 * (a + b)
    return value, counted
