"""Coupled ends in the core: values, pairs, counts, bounds and complex modes.

Sources: the lattice's eigenvalues are those of the reference records (see ``tests/reference/data``); for
constant coefficients (2 pi k + theta)^2 in closed form; multiplicity at most two and the interlacing with
the Dirichlet problem: Magnus and Winkler, Hill's Equation, 1966, ch. II.
"""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

from modewright.pieces import Pieces
from modewright.record import Record
from modewright_service.core.problem import (
    Constant,
    Coupling,
    CouplingKind,
    Dirichlet,
    Expression,
    Interface,
    Layer,
    Problem,
)
from modewright_service.core.solve import SolveOptions, solve
from tests.reference.coverage import record_of

PERIODIC = Coupling(CouplingKind.PERIODIC)
WELLS = (Layer("wells", 0.0, 4.0, Constant(1.0), Expression("2000*cos(2*pi*x)"), Constant(1.0)),)
UNIT = (Layer("unit", 0.0, 1.0),)
LATTICE = (
    Layer("gap", 0.0, 0.5),
    Layer("wall", 0.5, 1.0, Constant(1.0), Constant(40.0), Constant(1.0)),
)


def bloch(phase: float) -> Coupling:
    return Coupling(CouplingKind.BLOCH, phase)


def gram(record: Record) -> NDArray[np.complex128]:
    """int conj(phi_i) phi_j w dx + the joints' masses, by Gauss points of the test's own."""
    t, weight = np.polynomial.legendre.leggauss(60)
    pieces = Pieces(record)
    total = np.zeros((record.count, record.count), dtype=np.complex128)
    for e in range(record.elements):
        element = np.full(t.size, e)
        modes = pieces.at(element, t)
        dx = 0.5 * (record.edges[e + 1] - record.edges[e]) * weight
        total += (modes.conj() * (pieces.coefficient_at("w", element, t) * dx)) @ modes.T
    for x, _, _, mass in record.joints:
        modes = pieces.evaluate(np.array([x]))
        total += mass * modes.conj() @ modes.T
    return total


def closing(record: Record, factor: complex) -> float:
    """How far the modes are from u(b) = factor u(a), p u'(b) = factor p u'(a), relative to their size."""
    pieces = Pieces(record)
    ends = record.edges[[0, -1]]
    worst = 0.0
    for quantity, size in (("value", 1.0), ("flux", np.sqrt(np.abs(record.eigenvalues) + 1.0))):
        at = pieces.evaluate(ends, quantity=quantity)  # type: ignore[arg-type]
        worst = max(worst, float((np.abs(at[:, 1] - factor * at[:, 0]) / size).max()))
    return worst


@pytest.mark.parametrize("name", ["lattice-bloch", "lattice-bloch-2"])
def test_complex_modes_of_a_lattice(name: str) -> None:
    listed = record_of(name)
    phase = float(listed["coupled"]["phase"])
    record = solve(Problem(LATTICE, coupling=bloch(phase)), 24, 1e-9)
    expected = np.array([float(value) for value in listed["eigenvalues"]])
    found = slice(0, expected.size)
    assert record.coefficients.dtype == np.complex128
    np.testing.assert_allclose(record.eigenvalues[found], expected, rtol=1e-13)
    assert np.all(record.lower[found] <= expected)
    assert np.all(expected <= record.upper[found])
    assert np.all(record.zeros == -1)
    assert np.abs(gram(record) - np.eye(24)).max() <= 1e-12
    assert closing(record, np.exp(1j * phase)) <= 1e-10
    again = Record.from_bytes(record.to_bytes())
    np.testing.assert_array_equal(again.coefficients, record.coefficients)


def test_a_phase_turns_the_lowest_value_real_and_positive() -> None:
    record = solve(Problem(UNIT, coupling=bloch(0.7)), 8, 1e-9)
    start = Pieces(record).evaluate(np.array([0.0]))[:, 0]
    np.testing.assert_allclose(start, np.ones(8), atol=1e-12)


@pytest.mark.parametrize("phase", [0.0, 0.3, 1.0, 3.0, np.pi, -2.0])
def test_constant_coefficients_in_closed_form(phase: float) -> None:
    k = np.arange(-80, 81)
    expected = np.sort((2.0 * np.pi * k + phase) ** 2)[:96]
    record = solve(Problem(UNIT, coupling=bloch(phase)), 96, 1e-9)
    size = np.maximum(expected, record.scale)
    assert (np.abs(record.eigenvalues - expected) / size).max() <= 1e-14
    assert np.all(record.lower <= expected)
    assert np.all(expected <= record.upper)
    assert np.all(record.confirmed == 1)
    assert np.abs(gram(record) - np.eye(96)).max() <= 1e-11


def test_an_equal_pair_is_chosen_at_the_seam() -> None:
    record = solve(Problem(UNIT, coupling=PERIODIC), 8, 1e-9)
    x = np.linspace(0.0, 1.0, 101)
    modes = Pieces(record).evaluate(x)
    for k in (1, 2, 3):
        angle = 2.0 * np.pi * k * x
        np.testing.assert_allclose(modes[2 * k - 1], np.sqrt(2.0) * np.cos(angle), atol=1e-11)
        np.testing.assert_allclose(modes[2 * k], np.sqrt(2.0) * np.sin(angle), atol=1e-11)


@pytest.mark.parametrize("coupling", [PERIODIC, bloch(1.0), Coupling(CouplingKind.ANTIPERIODIC)])
def test_wells_that_hardly_touch_are_groups_of_orthonormal_modes(coupling: Coupling) -> None:
    """Four deep wells: four values that agree to rounding, whatever the phase, and modes that stay apart."""
    record = solve(Problem(WELLS, coupling=coupling), 24, 1e-9)
    np.testing.assert_array_equal(record.groups[:8], [0, 0, 0, 0, 1, 1, 1, 1])
    assert np.abs(gram(record) - np.eye(24)).max() <= 1e-12
    # one well alone, its walls far enough: the splitting is below rounding
    one = solve(Problem((Layer("well", 0.0, 1.0, q=Expression("2000*cos(2*pi*x)")),)), 8, 1e-9)
    np.testing.assert_allclose(record.eigenvalues[:8:4], one.eigenvalues[:2], rtol=1e-12)


@pytest.mark.parametrize("seed", range(6))
def test_contrast_joints_and_interlacing(seed: int) -> None:
    rng = np.random.default_rng(seed)
    count = 24
    edges = np.concatenate([[0.0], np.cumsum(10.0 ** rng.uniform(-3, 1, count))])
    layers = tuple(
        Layer(
            f"layer-{i}",
            float(edges[i]),
            float(edges[i + 1]),
            Constant(float(10.0 ** rng.uniform(-4, 4))),
            Constant(0.0),
            Constant(float(10.0 ** rng.uniform(-2, 2))),
        )
        for i in range(count)
    )
    joints = (
        Interface(float(edges[3]), resistance=float(10.0 ** rng.uniform(-3, 3))),
        Interface(float(edges[9]), resistance=float(10.0 ** rng.uniform(-3, 3))),
        Interface(float(edges[5]), mass=3.0),
        Interface(float(edges[6]), spring=50.0),
    )
    phase = float(rng.uniform(0.1, 3.0))
    ring = solve(Problem(layers, interfaces=joints, coupling=bloch(phase)), 24, 1e-9)
    fixed = solve(Problem(layers, Dirichlet(), Dirichlet(), joints), 24, 1e-9)
    assert np.abs(gram(ring) - np.eye(24)).max() <= 1e-11
    # one condition more raises every value, by no more than to the next
    assert np.all(ring.lower <= fixed.upper)
    assert np.all(fixed.lower[:-1] <= ring.upper[1:])
    assert (ring.upper - ring.lower).max() <= 1e-9 * ring.eigenvalues[-1]
    mirrored = solve(Problem(layers, interfaces=joints, coupling=bloch(-phase)), 24, 1e-9)
    np.testing.assert_allclose(mirrored.eigenvalues, ring.eigenvalues, rtol=1e-12)


@pytest.mark.parametrize(("degree", "phase"), [(4, 0.0), (6, 1.0), (8, 2.5)])
def test_bounds_of_starved_rings_contain(degree: int, phase: float) -> None:
    rod = Layer("rod", 0.0, 1.0, Expression("2+sin(2*pi*x)"), Expression("30*cos(2*pi*x)"))
    problem = Problem((rod,), coupling=bloch(phase))
    exact = solve(problem, 24, 1e-12)
    options = SolveOptions(degree=degree, phase=8.0, passes=0)
    starved = solve(problem, 16, 1e-6, options=options)
    error = starved.eigenvalues - exact.eigenvalues[:16]
    assert error.max() > 1e-9
    assert np.all(starved.lower <= exact.upper[:16])
    assert np.all(exact.lower[:16] <= starved.upper)
