"""Index and zeros: mode n of a problem with separated ends has n interior zeros.

Source: Sturm's oscillation theorem (Zettl, Sturm-Liouville Theory, 2005, theorem 4.3.1); a change of
sign across a contact resistance counts as one. The zeros are counted from the returned pieces by the
tests' own method, and the count the service reports is compared as well. With a mass at an end the
theorem still holds: the n-th mode has n zeros in the interior, the lump's value being that of the end
(Fulton, Proc. R. Soc. Edinburgh 77A (1977) 293-308, for the right end in the eigenvalue parameter).
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

import modewright
from tests.reference.coverage import AHEAD, COUPLED, COVERED, highest_low_index
from tests.reference.own_checks import count_zeros


@pytest.mark.parametrize("name", COVERED)
def test_zeros_equal_the_index(name: str, solved: Callable[..., modewright.Basis]) -> None:
    modes = highest_low_index(name) + 1
    basis = solved(name, modes=modes)
    expected = np.arange(modes)
    np.testing.assert_array_equal(basis.zeros, expected)
    np.testing.assert_array_equal(count_zeros(basis.record()), expected)


@pytest.mark.parametrize("name", AHEAD)
def test_zeros_of_what_can_be_told_apart(name: str, solved: Callable[..., modewright.Basis]) -> None:
    """In a group of values as close as rounding (2e-15 in a triple well) only the subspace is defined."""
    modes = highest_low_index(name) + 1
    basis = solved(name, modes=modes)
    alone = np.bincount(basis.groups)[basis.groups] == 1
    assert np.count_nonzero(alone) >= modes // 2
    expected = np.flatnonzero(alone)
    np.testing.assert_array_equal(basis.zeros[alone], expected)
    np.testing.assert_array_equal(count_zeros(basis.record())[alone], expected)


@pytest.mark.parametrize("name", COUPLED)
def test_zeros_of_coupled_ends(name: str, solved: Callable[..., modewright.Basis]) -> None:
    """On a ring zeros come in pairs: 0, 2, 2, 4, 4, ... of a <= x < b with periodic ends, 1, 1, 3, 3, ...
    with antiperiodic ones (Magnus and Winkler, Hill's Equation, 1966, theorem 2.1).
    """
    modes = highest_low_index(name) + 1
    index = np.arange(modes)
    expected = 2 * (index // 2) + 1 if name.startswith("anti") else 2 * ((index + 1) // 2)
    np.testing.assert_array_equal(solved(name, modes=modes).zeros, expected)
