"""Orthogonal polynomials as eigenfunctions: computed modes obey the polynomials' own laws.

Modes have unit norm and are positive beside the left end; rescaled to the usual normalisation they must
satisfy the three-term recurrence (NIST DLMF 18.9.1 with table 18.9.1) to 1e-11 up to degree 200, at points
over the whole interval, its singular ends included, and agree with the polynomials themselves.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
import scipy.special
from numpy.typing import NDArray

import modewright

DEGREE = 200
X = np.concatenate([[-1.0, -1.0 + 1e-9], np.linspace(-0.999, 0.999, 201), [1.0 - 1e-9, 1.0]])
TOLERANCE = 1e-11


def _modes(service: modewright.Service, p: str, w: str, end: str) -> NDArray[np.float64]:
    """(201, points): modes 0 to 200, made positive at the right end."""
    layer: dict[str, Any] = {"name": "interval", "start": -1.0, "end": 1.0, "p": p, "w": w}
    document = {"layers": [layer], "left": {"kind": end}, "right": {"kind": end}}
    basis = service.solve(modewright.Problem.from_dict(document), modes=DEGREE + 1)
    np.testing.assert_array_equal(basis.zeros, np.arange(DEGREE + 1))
    signs = np.where(np.arange(DEGREE + 1) % 2 == 0, 1.0, -1.0)
    return np.asarray(basis.modes(X) * signs[:, np.newaxis])


def test_legendre(service: modewright.Service) -> None:
    """P_n = phi_n / sqrt(n + 1/2): (n+1) P_{n+1} = (2n+1) x P_n - n P_{n-1}; the largest term is n + 1."""
    n = np.arange(DEGREE + 1)[:, np.newaxis]
    legendre = _modes(service, "1-x**2", "1", "bounded") / np.sqrt(n + 0.5)
    k = n[1:-1]
    defect = (k + 1) * legendre[2:] - (2 * k + 1) * X * legendre[1:-1] + k * legendre[:-2]
    assert float(np.abs(defect / (k + 1)).max()) <= TOLERANCE
    exact = np.polynomial.legendre.legvander(X, DEGREE).T
    assert float(np.abs(legendre - exact).max()) <= TOLERANCE


def test_chebyshev(service: modewright.Service) -> None:
    """T_0 = sqrt(pi) phi_0, T_n = sqrt(pi/2) phi_n: T_{n+1} = 2 x T_n - T_{n-1}; T_n = cos(n arccos x)."""
    size = np.full((DEGREE + 1, 1), np.sqrt(np.pi / 2.0))
    size[0] = np.sqrt(np.pi)
    chebyshev = size * _modes(service, "sqrt(1-x**2)", "1/sqrt(1-x**2)", "neumann")
    defect = chebyshev[2:] - 2.0 * X * chebyshev[1:-1] + chebyshev[:-2]
    assert float(np.abs(defect).max()) <= TOLERANCE
    exact = np.cos(np.arange(DEGREE + 1)[:, np.newaxis] * np.arccos(X))
    assert float(np.abs(chebyshev - exact).max()) <= TOLERANCE


@pytest.mark.parametrize("order", [1.5, pytest.param(2.5, marks=pytest.mark.long)])
def test_gegenbauer(order: float, service: modewright.Service) -> None:
    """C_n^(a): (n+1) C_{n+1} = 2 (n+a) x C_n - (n+2a-1) C_{n-1}, weight (1-x^2)^(a-1/2); norms: DLMF 18.3."""
    a = order
    n = np.arange(DEGREE + 1)[:, np.newaxis]
    log = (
        np.log(np.pi)
        + (1.0 - 2.0 * a) * np.log(2.0)
        + scipy.special.gammaln(n + 2.0 * a)
        - scipy.special.gammaln(n + 1.0)
        - np.log(n + a)
        - 2.0 * scipy.special.gammaln(a)
    )
    modes = _modes(service, f"(1-x**2)**{a + 0.5}", f"(1-x**2)**{a - 0.5}", "bounded")
    gegenbauer = np.exp(log / 2.0) * modes
    k = n[1:-1]
    defect = (
        (k + 1) * gegenbauer[2:]
        - 2.0 * (k + a) * X * gegenbauer[1:-1]
        + (k + 2.0 * a - 1.0) * gegenbauer[:-2]
    )
    # the largest value, at the ends: binomial(n + 2a - 1, n)
    size = (k + 1) * scipy.special.binom(k + 2.0 * a, k + 1)
    assert float(np.abs(defect / size).max()) <= TOLERANCE
