"""End elements: quadrature and matrices by themselves, then whole problems with singular ends."""

from __future__ import annotations

import mpmath
import numpy as np
import pytest
from numpy.typing import NDArray

from modewright_service.core.end_elements import EndMap, end_reference, jacobi_rule

Array = NDArray[np.float64]


@pytest.mark.parametrize("power", [-0.9, -0.5, 0.0, 0.37, 3.0, 20.0])
def test_rule_integrates_powers(power: float) -> None:
    """int_0^1 t^b t^j dt = 1 / (b + j + 1), exact to degree 2 n - 1; a few units of rounding."""
    t, weight = jacobi_rule(20, power)
    degrees = np.arange(40)
    found = (weight[:, None] * t[:, None] ** degrees).sum(axis=0)
    np.testing.assert_allclose(found, 1.0 / (power + degrees + 1.0), rtol=4e-15)


@pytest.mark.parametrize("power", [-0.5, 0.0, 2.5])
def test_running_integral(power: float) -> None:
    """t^-b int_0^t x^b x^3 dx = t^4 / (b + 4)."""
    r = end_reference(16, 20, power, 0, 0, True)
    np.testing.assert_allclose(r.running @ r.t**3, r.t**4 / (power + 4.0), rtol=1e-14, atol=1e-16)
    mirrored = end_reference(16, 20, power, 0, 0, False)
    np.testing.assert_allclose(mirrored.running, -r.running, rtol=0.0, atol=0.0)


@pytest.mark.parametrize("order", [0, 1, 2, 5, 20])
def test_bessel_zeros_on_one_element(order: int) -> None:
    """-(x u')' + (n^2/x) u = lambda x u, bounded at 0, u(1) = 0: lambda = j_{n,k}^2 (NIST DLMF 10.21).

    Zeros by mpmath. One element of degree 24 resolves five of them to rounding.
    """
    end = EndMap(0.5, float(order), 1.0, 1.0)
    assert end.power == order
    assert end.steps == 1
    r = end_reference(24, 28, end.power, end.w_steps, end.flat, True)
    stiff = r.slopes.T @ (r.slopes * (r.weights * r.t / end.m)[:, None])
    mass = r.values.T @ (r.values * (r.weights * end.m)[:, None])
    factor = np.linalg.cholesky(stiff[2:, 2:])
    pencil = np.linalg.solve(factor, np.linalg.solve(factor, mass[2:, 2:]).T)
    found = 1.0 / np.linalg.eigvalsh(pencil)[::-1][:5]
    exact = np.array([float(mpmath.besseljzero(order, k) ** 2) for k in range(1, 6)])
    np.testing.assert_allclose(found, exact, rtol=1e-14)
