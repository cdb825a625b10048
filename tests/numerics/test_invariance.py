"""A change of units changes the scale of the answer and nothing else.

-(p u')' + q u = lambda w u with p, q, w, films, springs, masses and 1/R all multiplied by c has the
same eigenvalues, and modes smaller by sqrt(c). With lengths multiplied by l (and q by 1/l^2, films and
springs by 1/l, masses and R by l) the eigenvalues are divided by l^2 and the modes by sqrt(l). Both
follow by substitution.

Tolerance 1e-11 of s_n: far below the tolerance asked for (1e-9), since the same mesh must be chosen
whatever the units; above it by more than the rounding that the factors bring into the coefficients.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

import modewright

MODES = 24


def _document(factor: float, length: float) -> dict[str, Any]:
    """Three layers with a table, an expression and a constant; a lump behind a resistance and a film."""
    c, l = factor, length  # noqa: E741 - as in the docstring
    grid = np.array([0.0, 0.1, 0.25, 0.4])
    table = {
        "x": list(grid * l),
        "values": list(c * np.array([0.5, 0.8, 0.6, 1.1])),
        "interpolation": "monotone-cubic",
    }
    return {
        "layers": [
            {"name": "tabled", "start": 0.0, "end": 0.4 * l, "p": {"samples": table}, "w": 2.0 * c},
            {
                "name": "graded",
                "start": 0.4 * l,
                "end": 1.0 * l,
                "p": f"{c!r}*exp(x/{l!r})",
                "q": f"{3.0 * c / l**2!r}*cos(4*x/{l!r})",
                "w": c,
            },
            {
                "name": "plain",
                "start": 1.0 * l,
                "end": 1.5 * l,
                "p": 0.05 * c,
                "q": 0.2 * c / l**2,
                "w": 0.4 * c,
            },
        ],
        "left": {"kind": "lump", "mass": 0.6 * c * l, "film": 0.3 * c / l, "resistance": 0.2 * l / c},
        "right": {"kind": "film", "film": 1.5 * c / l},
        "interfaces": [{"x": 1.0 * l, "resistance": 0.7 * l / c}],
    }


def _solve(service: modewright.Service, factor: float, length: float) -> modewright.Basis:
    return service.solve(modewright.Problem.from_dict(_document(factor, length)), modes=MODES)


@pytest.mark.parametrize(
    ("factor", "length"),
    [
        (1e12, 1.0),
        (1e-12, 1.0),
        (1.0, 1e6),
        (1.0, 1e-6),
        (1e12, 1e-6),
        (1e-12, 1e6),
        (1e12, 1e6),
        (1e-12, 1e-6),
    ],
)
def test_units(factor: float, length: float, service: modewright.Service) -> None:
    plain, scaled = _solve(service, 1.0, 1.0), _solve(service, factor, length)
    size = np.maximum(np.abs(plain.eigenvalues), plain.eigenvalues[-1] / MODES**2)
    assert float(np.max(np.abs(scaled.eigenvalues * length**2 - plain.eigenvalues) / size)) <= 1e-11
    assert float(np.max((scaled.upper - scaled.lower) * length**2 / size)) <= 2e-9
    assert np.all(scaled.lower * length**2 <= plain.upper)
    assert np.all(plain.lower <= scaled.upper * length**2)
    np.testing.assert_array_equal(scaled.zeros, plain.zeros)
    x = np.linspace(0.0, 1.5, 31)
    modes = plain.modes(x)
    np.testing.assert_allclose(
        scaled.modes(np.minimum(x * length, 1.5 * length)) * np.sqrt(factor * length),
        modes,
        rtol=0.0,
        atol=1e-8 * float(np.abs(modes).max()),
    )
