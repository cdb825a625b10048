"""Legendre polynomials and their derivatives at points: NumPy only."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

__all__ = ["legendre_derivative_vandermonde", "legendre_vandermonde"]


def legendre_vandermonde(t: NDArray[np.float64], degree: int) -> NDArray[np.float64]:
    """(degree+1, len(t)): P_k(t) by (k+1) P_{k+1} = (2k+1) t P_k - k P_{k-1} (NIST DLMF 18.9.1)."""
    table = np.empty((degree + 1, t.size))
    table[0] = 1.0
    if degree:
        table[1] = t
    for k in range(1, degree):
        np.multiply(t, table[k], out=table[k + 1])
        table[k + 1] *= (2 * k + 1) / (k + 1)
        table[k + 1] -= (k / (k + 1)) * table[k - 1]
    return table


def legendre_derivative_vandermonde(t: NDArray[np.float64], degree: int) -> NDArray[np.float64]:
    """(degree+1, len(t)): P_k'(t) by P_{k+1}' = P_{k-1}' + (2k+1) P_k (from NIST DLMF 18.9.7 and 18.9.17)."""
    table = np.zeros((degree + 1, t.size))
    if degree == 0:
        return table
    values = legendre_vandermonde(t, degree - 1)
    table[1] = 1.0
    for k in range(1, degree):
        np.multiply(values[k], 2 * k + 1, out=table[k + 1])
        table[k + 1] += table[k - 1]
    return table
