"""Zero counts, norms and scales by the tests' own methods, from the arrays of a record.

Nothing here calls the product: Legendre series are summed by NumPy's ``legval``, integrals are
composite Gauss rules (Davis and Rabinowitz, Methods of Numerical Integration, 2nd ed. 1984, section
2.7).
"""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np
from numpy.polynomial import legendre
from numpy.typing import NDArray

from modewright.record import Record

# Below this share of its largest value on an element a mode is rounding noise there (a fixed end, the
# inner end of a steep decay), and below the other it has decayed to the end of the range of doubles.
_NOISE = 1e-12
_NOTHING = 1e-280
_SAMPLES_PER_DEGREE = 6


def element_values(record: Record, e: int, t: NDArray[np.float64]) -> NDArray[np.float64]:
    """(modes, points): the modes at t in [-1, 1] on element e."""
    first = int(np.sum(record.degrees[:e] + 1))
    own = record.coefficients[:, first : first + int(record.degrees[e]) + 1]
    return np.asarray(legendre.legval(t, own.T, tensor=True))


def count_zeros(record: Record) -> NDArray[np.int64]:
    """(modes,): changes of sign along the domain, of the values at dense points of every element, ends
    included.

    A solution has a bounded number of zeros an element (its degree), and Chebyshev points several times
    denser separate them; values that are noise are left out, so that a fixed end is none and a change
    across a resistance counts as one.
    """
    last = np.zeros(record.count)
    changes = np.zeros(record.count, dtype=np.int64)
    values = []
    for e, degree in enumerate(record.degrees):
        t = -np.cos(np.linspace(0.0, np.pi, _SAMPLES_PER_DEGREE * (int(degree) + 1)))
        values.append(element_values(record, e, t))
    for block in values:
        floor = np.maximum(_NOISE * np.abs(block).max(axis=1, keepdims=True), _NOTHING)
        signs = np.where(np.abs(block) > floor, np.sign(block), 0.0)
        # Carry the last sign over noise, so that each column holds the sign seen last.
        seen = np.concatenate([last[:, None], signs], axis=1)
        where = np.maximum.accumulate(np.where(seen != 0.0, np.arange(seen.shape[1]), 0), axis=1)
        seen = np.take_along_axis(seen, where, axis=1)
        changes += np.sum(seen[:, 1:] * seen[:, :-1] < 0.0, axis=1)
        last = seen[:, -1]
    return changes


def gram_matrix(record: Record, weights: Sequence[Callable[[NDArray[np.float64]], NDArray[np.float64]]]):
    """(modes, modes): inner products with the exact weight of each layer, lumps and point masses included.

    Two Gauss panels of 48 points an element integrate degree 95 exactly: twice the degree of a mode and what
    the weight needs besides.
    """
    nodes, rule = legendre.leggauss(48)
    t = np.concatenate([(nodes - 1.0) / 2.0, (nodes + 1.0) / 2.0])
    rule = np.concatenate([rule, rule]) / 2.0
    gram = np.zeros((record.count, record.count))
    for e in range(record.elements):
        a, b = record.edges[e], record.edges[e + 1]
        x = (a + b) / 2.0 + (b - a) / 2.0 * t
        values = element_values(record, e, t)
        weight = np.broadcast_to(weights[int(record.layer[e])](x), x.shape)
        gram += (values * (rule * (b - a) / 2.0 * weight)) @ values.T
    for end, lump in ((record.left, record.left_lump), (record.right, record.right_lump)):
        if lump.size:
            gram += end.mass * np.outer(lump, lump)
    for x, _, _, mass in record.joints[record.joints[:, 3] != 0.0]:
        at = element_values(record, int(np.flatnonzero(record.edges == x)[0]), np.array([-1.0]))[:, 0]
        gram += mass * np.outer(at, at)
    return gram


def orthonormality_defect(
    record: Record, weights: Sequence[Callable[[NDArray[np.float64]], NDArray[np.float64]]]
) -> float:
    """The largest entry of |G - I|."""
    return float(np.max(np.abs(gram_matrix(record, weights) - np.eye(record.count))))
