"""Evaluating an eigenbasis, against closed forms."""

import pickle
from dataclasses import replace

import numpy as np
import pytest
from numpy.polynomial import legendre
from scipy.special import j0, j1, y0, y1

from modewright.pieces import (
    OutsideDomain,
    Pieces,
    legendre_derivative_vandermonde,
    legendre_vandermonde,
)
from tests.core.handmade import annulus, annulus_zeros, contact, legendre_series, sines

K = np.pi * np.arange(1, 13)[:, np.newaxis]
# Unsorted, several chunks of the evaluator long.
X = np.random.default_rng(7).random(20_000)


@pytest.mark.parametrize("degree", [0, 1, 2, 40])
def test_legendre_tables(degree: int) -> None:
    t = np.linspace(-1, 1, 101)
    np.testing.assert_allclose(
        legendre_vandermonde(t, degree), legendre.legvander(t, degree).T, rtol=0, atol=1e-14
    )
    derivatives = np.array([legendre.legval(t, legendre.legder(row)) for row in np.eye(degree + 1)])
    # |P_k'| <= k (k + 1)/2 = 820.
    np.testing.assert_allclose(
        legendre_derivative_vandermonde(t, degree), derivatives, rtol=0, atol=820 * 1e-13
    )


def test_values_and_derivatives_of_sines() -> None:
    pieces = Pieces(sines())
    np.testing.assert_allclose(pieces.evaluate(X), np.sqrt(2) * np.sin(K * X), rtol=0, atol=1e-13)
    # Differentiating a series of degree 30 on elements of width 1/5 magnifies its rounding by some 1e4.
    np.testing.assert_allclose(
        pieces.evaluate(X, "derivative"), np.sqrt(2) * K * np.cos(K * X), rtol=0, atol=1e-10
    )


def test_flux_and_its_density_in_a_cylinder() -> None:
    """p = r: the flux is r phi', its density -phi'; Bessel's functions from SciPy."""
    record = annulus()
    k = annulus_zeros(8)[:, np.newaxis]
    r = np.linspace(1, 2, 301)
    pieces = Pieces(record)
    shape = j0(k * r) * y0(k) - y0(k * r) * j0(k)
    slope = -k * (j1(k * r) * y0(k) - y1(k * r) * j0(k))
    scale = np.sum(pieces.evaluate(r) * shape, axis=1) / np.sum(shape**2, axis=1)
    np.testing.assert_allclose(pieces.evaluate(r), scale[:, None] * shape, rtol=0, atol=1e-13)
    np.testing.assert_allclose(pieces.evaluate(r, "flux"), scale[:, None] * slope * r, rtol=0, atol=1e-10)
    np.testing.assert_allclose(
        pieces.evaluate(r, "flux-density"), -scale[:, None] * slope, rtol=0, atol=1e-10
    )


def test_sides_of_a_contact_resistance() -> None:
    """[u] = R p u' with the flux continuous."""
    pieces = Pieces(contact(resistance=0.5))
    left, right = (pieces.evaluate([0.5], side=side)[:, 0] for side in ("left", "right"))
    flux_left, flux_right = (pieces.evaluate([0.5], "flux", side)[:, 0] for side in ("left", "right"))
    np.testing.assert_allclose(flux_left, flux_right, rtol=0, atol=1e-10)
    np.testing.assert_allclose(right - left, 0.5 * flux_left, rtol=0, atol=1e-10)
    assert np.abs(right - left).max() > 1


def test_ends_belong_to_the_domain_on_either_side() -> None:
    pieces = Pieces(sines())
    ends = [0.0, 1.0]
    np.testing.assert_array_equal(pieces.evaluate(ends, side="left"), pieces.evaluate(ends, side="right"))
    beyond = np.nextafter(1.0, 2.0)
    np.testing.assert_array_equal(pieces.evaluate([beyond]), pieces.evaluate([1.0]))


@pytest.mark.parametrize(("x", "index"), [([0.5, 1.001], 1), ([-1e-9], 0), ([0.1, np.nan], 1), (np.inf, 0)])
def test_points_outside_are_refused_with_their_number(x: object, index: int) -> None:
    with pytest.raises(OutsideDomain, match=rf"x\[{index}\] = ") as caught:
        Pieces(sines()).evaluate(x)  # type: ignore[arg-type]
    copy = pickle.loads(pickle.dumps(caught.value))
    assert str(copy) == str(caught.value)
    assert (copy.start, copy.end) == (0.0, 1.0)


@pytest.mark.parametrize("x", [0.3, [], [0.3], [[0.1, 0.2], [0.3, 0.4]]])
def test_shapes(x: object) -> None:
    pieces = Pieces(sines())
    assert pieces.evaluate(x).shape == (12, *np.shape(x))  # type: ignore[arg-type]
    assert pieces.evaluate(x, count=3).shape == (3, *np.shape(x))  # type: ignore[arg-type]
    assert pieces.combine(np.ones((5, 2, 4)), x).shape == (5, 2, *np.shape(x))  # type: ignore[arg-type]
    assert pieces.coefficient("w", x).shape == np.shape(x)  # type: ignore[arg-type]


@pytest.mark.parametrize("fields", [1, 400])
@pytest.mark.parametrize("dtype", [np.float64, np.complex128])
@pytest.mark.parametrize("quantity", ["value", "derivative", "flux", "flux-density"])
def test_combinations_are_sums_of_modes(fields: int, dtype: type, quantity: str) -> None:
    """Both orders of summation, chosen by size, agree with the plain sum."""
    pieces = Pieces(annulus())
    rng = np.random.default_rng(3)
    c = rng.standard_normal((fields, 8)).astype(dtype)
    if dtype is np.complex128:
        c += 1j * rng.standard_normal((fields, 8))
    r = 1 + X[:100]
    modes = pieces.evaluate(r, quantity)  # type: ignore[arg-type]
    combined = pieces.combine(c, r, quantity)  # type: ignore[arg-type]
    assert combined.dtype == dtype
    np.testing.assert_allclose(combined, c @ modes, rtol=0, atol=1e-13 * np.abs(modes).max() * 8)


def test_elements_of_different_degree() -> None:
    coarse, fine = (
        legendre_series(lambda x: np.sin(x)[np.newaxis], np.array([0, 1, 3.0]), k)[0] for k in (15, 22)
    )
    record = replace(
        sines(1, 2),
        edges=np.array([0, 1, 3.0]),
        degrees=np.array([15, 22]),
        coefficients=np.concatenate((coarse[0], fine[1]))[np.newaxis],
    )
    x = np.array([2.5, 0.2, 1.0, 3.0, 0.999])
    np.testing.assert_allclose(Pieces(record).evaluate(x)[0], np.sin(x), rtol=0, atol=1e-14)


@pytest.mark.parametrize("arguments", [{"quantity": "heat"}, {"side": "both"}, {"count": 0}, {"count": 13}])
def test_unknown_words_and_counts_are_refused(arguments: dict[str, object]) -> None:
    with pytest.raises(ValueError, match=str(next(iter(arguments.values())))):
        Pieces(sines()).evaluate([0.5], **arguments)  # type: ignore[arg-type]


def test_combining_more_coefficients_than_modes_is_refused() -> None:
    with pytest.raises(ValueError, match="1 <= M <= 12"):
        Pieces(sines()).combine(np.ones(13), [0.5])
