"""Gauss quadrature: exactness, and the number of points that a part of an element needs."""

from fractions import Fraction

import mpmath
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from modewright.pieces import legendre_vandermonde
from modewright_service.core.quadrature import gauss_counts, gauss_legendre, place_nodes


@pytest.mark.parametrize("n", [1, 2, 5, 20, 50, 100])
def test_weights_against_forty_digits(n: int) -> None:
    """Newton's method on mpmath's P_n, and NIST DLMF 3.5.V's weights, in 40 digits."""
    nodes, weights = gauss_legendre(n)
    with mpmath.workdps(40):
        for node, weight in list(zip(nodes.tolist(), weights.tolist(), strict=True))[: n // 2 + 1]:
            exact = mpmath.findroot(lambda t: mpmath.legendre(n, t), node)
            slope = n * (mpmath.legendre(n - 1, exact) - exact * mpmath.legendre(n, exact)) / (1 - exact**2)
            assert node == pytest.approx(float(exact), rel=0, abs=1.2e-16)
            # Where long double is no longer than double the weights are good to 1e-12 only.
            extended = np.finfo(np.longdouble).eps < 1e-18
            assert weight == pytest.approx(
                float(2 / ((1 - exact**2) * slope**2)), rel=5e-16 if extended else 1e-11, abs=0
            )


@pytest.mark.parametrize("n", [1, 2, 5, 20, 50, 100])
def test_exact_to_twice_the_number_of_points(n: int) -> None:
    nodes, weights = gauss_legendre(n)
    degrees = range(0, 2 * n, max(1, n // 7))
    moments = [weights @ nodes**k for k in degrees]
    exact = [float(Fraction(1 + (-1) ** k, k + 1)) for k in degrees]
    np.testing.assert_allclose(moments, exact, rtol=0, atol=4e-15)


@given(
    centre=st.floats(-0.999, 0.999),
    share=st.floats(1e-6, 1.0),
    degree=st.integers(0, 40),
    weight_degree=st.integers(0, 12),
    field_degree=st.integers(0, 6),
)
def test_counts_suffice_to_rounding(
    centre: float, share: float, degree: int, weight_degree: int, field_degree: int
) -> None:
    """The stated number of points integrates (tau^d - P_k)^2 P_m as the exact number does."""
    half = share * (1 - abs(centre))
    lower, upper = np.array([centre - half]), np.array([centre + half])
    n = int(gauss_counts(lower, upper, np.array([degree]), np.array([weight_degree]), field_degree)[0])
    exact = max(degree, field_degree) + weight_degree // 2 + 1
    assert 1 <= n <= max(exact, 2)

    def integral(points: int) -> float:
        s, weight = gauss_legendre(points)
        t = centre + half * s
        mode = legendre_vandermonde(t, degree)[-1]
        w = legendre_vandermonde(t, weight_degree)[-1]
        return float(((s**field_degree - mode) ** 2 * w) @ weight)

    # The integrand is at most 4, the sum carries some rounding of t magnified by the degree.
    assert integral(n) == pytest.approx(integral(exact + 5), rel=0, abs=2e-13)


def test_small_parts_need_few_points() -> None:
    lower, upper = np.array([-1.0, 0.0]), np.array([1.0, 0.02])
    counts = gauss_counts(lower, upper, np.array([32, 32]), np.array([0, 0]), 3)
    assert counts[0] == 33
    assert counts[1] <= 12


def test_nodes_are_ordered_by_part() -> None:
    nodes = place_nodes(np.array([3, 1, 2]))
    np.testing.assert_array_equal(nodes.part, [0, 0, 0, 1, 2, 2])
    assert nodes.s[0] < nodes.s[1] < nodes.s[2]
    np.testing.assert_allclose(np.bincount(nodes.part, nodes.weight), 2.0, rtol=1e-15)
