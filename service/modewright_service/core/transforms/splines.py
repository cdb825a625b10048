"""The tridiagonal system of the slopes of cubic splines, for many separate runs of nodes at once.

A run has nodes y_0 < ... < y_m and the mean slopes delta_i over its intervals, linear in the samples. With
h_i = y_{i+1} - y_i its slopes s obey, inside,

    h_i s_{i-1} + 2 (h_{i-1} + h_i) s_i + h_{i-1} s_{i+1} = 3 (h_i delta_{i-1} + h_{i-1} delta_i),

and at its two ends the not-a-knot condition, a third derivative that does not jump at the second and the
last but one node (de Boor, A Practical Guide to Splines, chapter IV). Two intervals give the parabola.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import solve_banded
from scipy.sparse import csr_array

__all__ = ["Run", "SlopeSystem", "slope_system"]

Floats = NDArray[np.float64]
Indices = NDArray[np.intp]

_COLUMNS: Final = 16


@dataclass(frozen=True, eq=False)
class Run:
    """One spline: steps h (m,), m >= 2; samples (m+1,) at the nodes, or (m,) that are mean slopes."""

    steps: Floats
    samples: Indices


@dataclass(frozen=True, eq=False)
class SlopeSystem:
    """B s = R v for M slopes of G values; `bands` (3, M) as scipy.linalg.solve_banded takes them."""

    bands: Floats
    right_side: csr_array

    @property
    def size(self) -> int:
        """M, the number of slopes."""
        return int(self.bands.shape[1])

    def solve(self, values: NDArray[Any]) -> NDArray[Any]:
        """(M, B) slopes of fields with values (G, B), real or complex."""
        if self.size == 0:
            return np.zeros((0, values.shape[1]), values.dtype)
        return np.asarray(solve_banded((1, 1), self.bands, self.right_side @ values, check_finite=False))

    def gather(self, on_values: Floats, on_slopes: Floats) -> None:
        """The adjoint: adds to functionals of values (G, N) those of slopes (M, N) in the values' terms."""
        if self.size == 0:
            return
        transposed = np.zeros_like(self.bands)
        transposed[0, 1:] = self.bands[2, :-1]
        transposed[1] = self.bands[1]
        transposed[2, :-1] = self.bands[0, 1:]
        adjoint = self.right_side.T.tocsr()
        # A few columns at a time: the matrix of a large mesh is there once, not four times.
        for first in range(0, on_slopes.shape[1], _COLUMNS):
            columns = slice(first, first + _COLUMNS)
            solved = solve_banded((1, 1), transposed, on_slopes[:, columns], check_finite=False)
            on_values[:, columns] += adjoint @ solved


def slope_system(runs: Sequence[Run], size: int) -> SlopeSystem:
    """One system for all runs, on `size` samples; the slopes are numbered run after run, node after node."""
    blocks = [_bands(run.steps) for run in runs]
    if not blocks:
        return SlopeSystem(np.zeros((3, 0)), csr_array((0, size)))
    bands = np.concatenate([block[0] for block in blocks], axis=1)
    rows, columns, entries = [], [], []
    first = 0
    for run, (_, weights) in zip(runs, blocks, strict=True):
        m = run.steps.size
        # Row i of the right side: weights[0, i] delta_{i-1} + weights[1, i] delta_i, shifted inwards at ends.
        left = np.clip(np.arange(-1, m), 0, m - 2)
        for interval, weight in ((left, weights[0]), (left + 1, weights[1])):
            if run.samples.size == m:
                parts = [(run.samples[interval], weight)]
            else:
                slope = weight / run.steps[interval]
                parts = [(run.samples[interval + 1], slope), (run.samples[interval], -slope)]
            for column, entry in parts:
                rows.append(np.arange(first, first + m + 1))
                columns.append(column)
                entries.append(entry)
        first += m + 1
    data = (np.concatenate(entries), (np.concatenate(rows), np.concatenate(columns)))
    return SlopeSystem(bands, csr_array(data, shape=(first, size)))


def _bands(h: Floats) -> tuple[Floats, Floats]:
    """Bands (3, m+1), and weights (2, m+1) of two neighbouring mean slopes; rows scaled to order one."""
    m = h.size
    bands, weights = np.zeros((3, m + 1)), np.zeros((2, m + 1))
    before, after = h[:-1], h[1:]
    both = before + after
    if m == 2:
        bands[1] = 1.0
        bands[0, 1] = bands[2, 1] = 1.0
        weights[:, 0] = 2.0, 0.0
        weights[:, 1] = after[0] / both[0], before[0] / both[0]
        weights[:, 2] = 0.0, 2.0
        return bands, weights
    bands[1, 1:-1] = 2.0
    bands[2, :-2] = after / both
    bands[0, 2:] = before / both
    weights[0, 1:-1] = 3.0 * after / both
    weights[1, 1:-1] = 3.0 * before / both
    # Not-a-knot: h_1 s_0 + (h_0 + h_1) s_1 = ((3 h_0 + 2 h_1) h_1 delta_0 + h_0^2 delta_1)/(h_0 + h_1).
    total = both[0]
    bands[1, 0], bands[0, 1] = h[1] / total, 1.0
    weights[:, 0] = (3.0 * h[0] + 2.0 * h[1]) * h[1] / total**2, (h[0] / total) ** 2
    total = both[-1]
    bands[1, -1], bands[2, -2] = h[-2] / total, 1.0
    weights[:, -1] = (h[-1] / total) ** 2, (3.0 * h[-1] + 2.0 * h[-2]) * h[-2] / total**2
    return bands, weights
