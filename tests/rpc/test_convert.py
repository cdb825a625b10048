"""Messages to problems and back: every form arrives, and what the core could not be told is refused."""

from __future__ import annotations

import numpy as np
import pytest

from modewright.v1 import basis_pb2, problem_pb2
from modewright_service.core import digest
from modewright_service.core import problem as core
from modewright_service.core.errors import CoreError, InvalidProblem, InvalidRequest, Reason, Unsupported
from modewright_service.rpc.convert import checked_key, ends_message, problem_from, wanted_from
from tests.process.harness import constant, modes, unit_problem

NEUMANN = problem_pb2.EndCondition(kind=problem_pb2.END_KIND_NEUMANN)


def _full() -> problem_pb2.Problem:
    table = problem_pb2.Samples(
        x=[1.5, 1.7, 2.0], values=[1.0, 2.0, 1.5], interpolation=problem_pb2.INTERPOLATION_MONOTONE_CUBIC
    )
    return problem_pb2.Problem(
        name="label",
        geometry=problem_pb2.GEOMETRY_CYLINDRICAL,
        layers=[
            problem_pb2.Layer(name="steel", start=1.0, end=1.5, p=constant(50.0), reciprocal_p=True),
            problem_pb2.Layer(
                name="foam",
                start=1.5,
                end=2.0,
                p=problem_pb2.Coefficient(samples=table),
                q=problem_pb2.Coefficient(expression="x**2"),
            ),
        ],
        left=problem_pb2.EndCondition(kind=problem_pb2.END_KIND_LUMP, mass=3.0, resistance=0.5),
        right=problem_pb2.EndCondition(kind=problem_pb2.END_KIND_FILM, film=2.0),
        interfaces=[problem_pb2.Interface(x=1.5, resistance=0.1)],
    )


def test_a_whole_problem_arrives() -> None:
    problem = problem_from(_full())
    steel, foam = problem.layers
    assert problem.geometry is core.Geometry.CYLINDRICAL
    assert (steel.name, steel.start, steel.end, steel.reciprocal_p) == ("steel", 1.0, 1.5, True)
    assert (steel.p, steel.q, steel.w) == (core.Constant(50.0), core.Constant(0.0), core.Constant(1.0))
    assert foam.q == core.Expression("x**2")
    assert foam.p == core.Samples(
        np.array([1.5, 1.7, 2.0]), np.array([1.0, 2.0, 1.5]), core.Interpolation.MONOTONE_CUBIC
    )
    assert problem.left == core.Lump(3.0, 0.0, 0.5)
    assert problem.right == core.Film(2.0)
    assert problem.interfaces == (core.Interface(1.5, 0.1),)
    core.validate(problem)


@pytest.mark.parametrize(
    ("end", "expected"),
    [
        (NEUMANN, core.Neumann()),
        (problem_pb2.EndCondition(kind=problem_pb2.END_KIND_DIRICHLET), core.Dirichlet()),
        (
            problem_pb2.EndCondition(kind=problem_pb2.END_KIND_ROBIN, alpha=-1.0, beta=0.0),
            core.Robin(-1.0, 0.0),
        ),
        (problem_pb2.EndCondition(kind=problem_pb2.END_KIND_LUMP, mass=1.0, film=2.0), core.Lump(1.0, 2.0)),
        (problem_pb2.EndCondition(kind=problem_pb2.END_KIND_BOUNDED), core.Bounded()),
    ],
)
def test_every_kind_of_end(end: problem_pb2.EndCondition, expected: core.End) -> None:
    message = unit_problem()
    message.right.CopyFrom(end)
    assert problem_from(message).right == expected


def test_resolved_ends_say_what_was_solved() -> None:
    message = _full()
    ends = ends_message(problem_from(message), ("regular", "limit-point"))
    # At r = 1 the factor r is 1; at r = 2 a film of 2 counts twice.
    assert ends.left == basis_pb2.EndReport(
        kind=problem_pb2.END_KIND_LUMP, end_class=basis_pb2.END_CLASS_REGULAR, mass=3.0, resistance=0.5
    )
    assert ends.right == basis_pb2.EndReport(
        kind=problem_pb2.END_KIND_FILM, end_class=basis_pb2.END_CLASS_LIMIT_POINT, stiffness=4.0
    )
    message.right.CopyFrom(problem_pb2.EndCondition(kind=problem_pb2.END_KIND_ROBIN, alpha=1.0, beta=0.0))
    fixed = ends_message(problem_from(message), ("regular", "regular"))
    assert fixed.right.kind == problem_pb2.END_KIND_DIRICHLET


def _broken(**changes: object) -> problem_pb2.Problem:
    message = unit_problem()
    for name, value in changes.items():
        field = getattr(message, name)
        field.CopyFrom(value)
    return message


@pytest.mark.parametrize(
    ("message", "kind", "reason", "field", "number"),
    [
        (
            _broken(left=problem_pb2.EndCondition()),
            InvalidProblem,
            Reason.BAD_END_CONDITION,
            "left.kind",
            "0",
        ),
        (
            _broken(left=problem_pb2.EndCondition(kind=problem_pb2.END_KIND_FILM)),
            InvalidProblem,
            Reason.BAD_END_CONDITION,
            "left.film",
            "",
        ),
        (
            _broken(left=problem_pb2.EndCondition(kind=problem_pb2.END_KIND_NEUMANN, film=7.5)),
            InvalidProblem,
            Reason.BAD_END_CONDITION,
            "left.film",
            "7.5",
        ),
        (
            _broken(
                left=problem_pb2.EndCondition(
                    kind=problem_pb2.END_KIND_NEUMANN, exponents=problem_pb2.EndExponents(p=1)
                )
            ),
            Unsupported,
            Reason.UNSUPPORTED_END,
            "left.exponents",
            "",
        ),
        (
            problem_pb2.Problem(layers=unit_problem().layers, left=NEUMANN),
            InvalidProblem,
            Reason.BAD_END_CONDITION,
            "right",
            "",
        ),
        (
            problem_pb2.Problem(
                layers=[problem_pb2.Layer(end=1.0, p=problem_pb2.Coefficient())], left=NEUMANN, right=NEUMANN
            ),
            InvalidProblem,
            Reason.INVALID_COEFFICIENT,
            "layers[0].p",
            "",
        ),
        (
            problem_pb2.Problem(geometry=9, layers=unit_problem().layers, left=NEUMANN, right=NEUMANN),
            InvalidProblem,
            Reason.UNKNOWN_OPTION,
            "geometry",
            "9",
        ),
        (
            problem_pb2.Problem(
                layers=unit_problem().layers,
                left=NEUMANN,
                right=NEUMANN,
                parameters=[problem_pb2.Parameter(name="a", value=1)],
            ),
            Unsupported,
            Reason.UNSUPPORTED_OPTION,
            "parameters",
            "1",
        ),
    ],
)
def test_what_the_core_could_not_be_told(
    message: problem_pb2.Problem, kind: type[CoreError], reason: Reason, field: str, number: str
) -> None:
    with pytest.raises(kind) as caught:
        problem_from(message)
    assert caught.value.reason is reason
    assert [v.field for v in caught.value.violations] == [field]
    assert caught.value.violations[0].number == number


def test_all_faults_are_found_at_once_and_the_certain_ones_count() -> None:
    message = unit_problem()
    message.parameters.add(name="a", value=1)
    message.left.film = 1.0
    message.right.kind = problem_pb2.END_KIND_UNSPECIFIED
    with pytest.raises(InvalidProblem) as caught:
        problem_from(message)
    assert [v.field for v in caught.value.violations] == ["parameters", "left.film", "right.kind"]
    assert caught.value.reason is Reason.BAD_END_CONDITION


def test_a_coupling_reaches_the_core_unless_its_modes_are_complex() -> None:
    message = problem_pb2.Problem(
        layers=unit_problem().layers,
        coupling=problem_pb2.Coupling(kind=problem_pb2.COUPLING_KIND_ANTIPERIODIC),
    )
    problem = problem_from(message)
    assert problem.coupling == core.Coupling(core.CouplingKind.ANTIPERIODIC)
    assert ends_message(problem, ("regular", "regular")).left.kind == problem_pb2.END_KIND_COUPLED
    message.coupling.kind, message.coupling.phase = problem_pb2.COUPLING_KIND_BLOCH, 0.5
    with pytest.raises(Unsupported) as caught:
        problem_from(message)
    assert caught.value.reason is Reason.UNSUPPORTED_COUPLING
    assert caught.value.violations[0].field == "coupling.phase"


def test_specifications_resolve_to_rungs() -> None:
    problem = problem_from(unit_problem())
    wanted = wanted_from(problem, modes(10, 1e-4), max_modes=100)
    assert (wanted.modes, wanted.rung, wanted.rtol, wanted.exact) == (10, 12, 1e-6, False)
    assert wanted.basis_key == digest.basis_key(digest.problem_digest(problem), 12, 1e-6)
    default = wanted_from(problem, basis_pb2.BasisSpecification(), max_modes=100, default_modes=8)
    assert (default.modes, default.rtol) == (8, 1e-9)
    pinned = wanted_from(problem, modes(12, 1e-6), max_modes=100, pinned_key=wanted.basis_key)
    assert pinned.exact
    assert pinned.basis_key == wanted.basis_key


@pytest.mark.parametrize(
    ("specification", "reason", "field", "number"),
    [
        (basis_pb2.BasisSpecification(), Reason.BAD_REQUEST, "specification.modes", ""),
        (modes(0), Reason.TOO_MANY_MODES, "specification.modes", "0"),
        (modes(101), Reason.TOO_MANY_MODES, "specification.modes", "101"),
        (modes(10**9), Reason.TOO_MANY_MODES, "specification.modes", "1000000000"),
        (modes(8, 1e-13), Reason.BAD_TOLERANCE, "specification.rtol", "1e-13"),
        (modes(8, 0.5), Reason.BAD_TOLERANCE, "specification.rtol", "0.5"),
        (modes(8, float("nan")), Reason.BAD_TOLERANCE, "specification.rtol", "nan"),
        (
            basis_pb2.BasisSpecification(below=3.0),
            Reason.UNSUPPORTED_SELECTION,
            "specification.below",
            "",
        ),
    ],
)
def test_specifications_refused(
    specification: basis_pb2.BasisSpecification, reason: Reason, field: str, number: str
) -> None:
    with pytest.raises(CoreError) as caught:
        wanted_from(problem_from(unit_problem()), specification, max_modes=100)
    assert caught.value.reason is reason
    assert [(v.field, v.number) for v in caught.value.violations] == [(field, number)]


def test_a_key_of_another_problem_is_a_version_mismatch() -> None:
    key = "0" * 64
    with pytest.raises(CoreError) as caught:
        wanted_from(problem_from(unit_problem()), modes(8), max_modes=100, pinned_key=key)
    assert caught.value.reason is Reason.VERSION_MISMATCH
    assert caught.value.metadata["expected"] == key
    assert len(caught.value.metadata["found"]) == 64


@pytest.mark.parametrize("key", ["0" * 63, "0" * 65, "G" * 64, "A" * 64, "é" * 64])
def test_what_cannot_be_a_key(key: str) -> None:
    with pytest.raises(InvalidRequest):
        checked_key(key, "basis.basis_key")
