"""Structural checks: every fault is reported, with its field in the document's names and its number."""

import pickle
from typing import Any

import numpy as np
import pytest

from modewright_service.core import validation
from modewright_service.core.errors import (
    CoreError,
    InvalidProblem,
    LimitExceeded,
    NotConverged,
    Reason,
    Unsupported,
    Violation,
)
from modewright_service.core.problem import (
    Constant,
    Coupling,
    CouplingKind,
    Dirichlet,
    End,
    Expression,
    Film,
    Geometry,
    Interface,
    Interpolation,
    Layer,
    Lump,
    Neumann,
    Problem,
    Robin,
    Samples,
    resolve,
    validate,
)

NAN, INF = float("nan"), float("inf")


def two_layers(**changes: Any) -> Problem:
    first = Layer("steel", 0.0, 0.4, Constant(50.0))
    second = Layer("foam", 0.4, 1.0, Constant(0.03))
    return Problem((first, second), **changes)


def one_layer(**changes: Any) -> Problem:
    return Problem((Layer("", 0.0, 1.0, **changes),))


def table(x: list[float], values: list[float], kind: Interpolation = Interpolation.LINEAR) -> Samples:
    return Samples(np.array(x), np.array(values), kind)


def layers(*spans: tuple[float, float], **changes: Any) -> Problem:
    return Problem(tuple(Layer("", a, b) for a, b in spans), **changes)


SAMPLES = "layers[0].p.samples"
FAULTS: list[tuple[Problem, str, str, str]] = [
    (Problem(()), "BAD_DOMAIN", "layers", "0"),
    (layers((0, 0.4), (0.5, 1)), "LAYER_GAP", "layers[1].start", "0.5"),
    (layers((0, 0.4), (0.3, 1)), "LAYER_GAP", "layers[1].start", "0.3"),
    (layers((0, 0.4), (0.4, 0.4)), "BAD_DOMAIN", "layers[1].end", "0.4"),
    (layers((1, 0)), "BAD_DOMAIN", "layers[0].end", "0"),
    (layers((1e16, 1e16 + 2)), "BAD_DOMAIN", "layers[0].end", "1.0000000000000002e+16"),
    (layers((0, NAN)), "NOT_FINITE", "layers[0].end", "nan"),
    (layers((0, INF), (INF, 1)), "NOT_FINITE", "layers[0].end", "inf"),
    (layers((0, INF)), "UNSUPPORTED_INTERVAL", "layers[0].end", "inf"),
    (layers((-INF, 0)), "UNSUPPORTED_INTERVAL", "layers[0].start", "-inf"),
    (layers((0, 1), geometry=Geometry.CYLINDRICAL), "BAD_END_CONDITION", "left.kind", "dirichlet"),
    (layers((-1, 1), geometry=Geometry.SPHERICAL), "BAD_DOMAIN", "layers[0].start", "-1"),
    (one_layer(p=Constant(-2.0)), "NEGATIVE_COEFFICIENT", "layers[0].p", "-2.0"),
    (one_layer(p=Constant(0.0)), "UNSUPPORTED_COEFFICIENT", "layers[0].p", "0.0"),
    (one_layer(p=Expression("1-2")), "NEGATIVE_COEFFICIENT", "layers[0].p", "-1.0"),
    (one_layer(p=Constant(0.0), reciprocal_p=True), "UNSUPPORTED_COEFFICIENT", "layers[0].p", "0.0"),
    (one_layer(q=Constant(NAN)), "NOT_FINITE", "layers[0].q", "nan"),
    (one_layer(w=Constant(-1e-9)), "NEGATIVE_COEFFICIENT", "layers[0].w", "-1e-09"),
    (one_layer(w=Constant(0.0)), "ZERO_WEIGHT", "layers[0].w", "0"),
    (one_layer(w=Expression("0*1")), "ZERO_WEIGHT", "layers[0].w", "0"),
    (one_layer(w=table([0, 1], [0, 0])), "ZERO_WEIGHT", "layers[0].w", "0"),
    (one_layer(q=Expression("2 +* x")), "EXPRESSION_SYNTAX", "layers[0].q", "column 4"),
    (one_layer(q=Expression("sqroot(x)")), "EXPRESSION_NAME", "layers[0].q", "column 1"),
    (one_layer(q=Expression("1/0")), "NOT_FINITE", "layers[0].q", "nan"),
    (one_layer(q="x"), "INVALID_COEFFICIENT", "layers[0].q", "str"),
    (one_layer(p=table([0, 1, 0.5], [1, 1, 1])), "BAD_SAMPLES", f"{SAMPLES}.x[2]", "0.5"),
    (one_layer(p=table([0, 0.5, 0.5, 1], [1, 1, 1, 1])), "BAD_SAMPLES", f"{SAMPLES}.x[2]", "0.5"),
    (one_layer(p=table([0, NAN, 1], [1, 1, 1])), "NOT_FINITE", f"{SAMPLES}.x[1]", "nan"),
    (one_layer(p=table([0, 0.5, 1], [1, 1, INF])), "NOT_FINITE", f"{SAMPLES}.values[2]", "inf"),
    (one_layer(p=table([0, 1], [1, 1, 1])), "BAD_SAMPLES", f"{SAMPLES}.values", "3"),
    (one_layer(p=table([0], [1])), "BAD_SAMPLES", f"{SAMPLES}.x", "1"),
    (one_layer(p=table([0, 0.9], [1, 1])), "BAD_SAMPLES", f"{SAMPLES}.x[1]", "0.9"),
    (one_layer(p=table([0.2, 1], [1, 1])), "BAD_SAMPLES", f"{SAMPLES}.x[0]", "0.2"),
    (one_layer(p=table([0, 0.5, 1], [1, -3, 1])), "NEGATIVE_COEFFICIENT", f"{SAMPLES}.values[1]", "-3.0"),
    (one_layer(p=table([0, 0.5, 1], [1, 0, 1])), "UNSUPPORTED_COEFFICIENT", f"{SAMPLES}.values[1]", "0.0"),
    (two_layers(left=Film(-1.0)), "BAD_END_CONDITION", "left.film", "-1.0"),
    (two_layers(right=Film(NAN)), "NOT_FINITE", "right.film", "nan"),
    (two_layers(right=Robin(0.0, 0.0)), "BAD_END_CONDITION", "right.alpha", "0.0"),
    (two_layers(right=Robin(1e300, 1e-300)), "BAD_END_CONDITION", "right.beta", "1e-300"),
    (two_layers(left=Lump(-1.0)), "BAD_END_CONDITION", "left.mass", "-1.0"),
    (two_layers(left=Lump(1.0, -2.0)), "BAD_END_CONDITION", "left.film", "-2.0"),
    (two_layers(left=Lump(1.0, 0.0, -3.0)), "BAD_END_CONDITION", "left.resistance", "-3.0"),
    (two_layers(left=None), "BAD_END_CONDITION", "left.kind", "NoneType"),
    (two_layers(interfaces=(Interface(2.0),)), "BAD_INTERFACE", "interfaces[0].x", "2.0"),
    (two_layers(interfaces=(Interface(0.0),)), "BAD_INTERFACE", "interfaces[0].x", "0.0"),
    (two_layers(interfaces=(Interface(0.2), Interface(0.2))), "BAD_INTERFACE", "interfaces[1].x", "0.2"),
    (two_layers(interfaces=(Interface(0.4, -1.0),)), "BAD_INTERFACE", "interfaces[0].resistance", "-1.0"),
    (two_layers(interfaces=(Interface(0.4, mass=-1.0),)), "BAD_INTERFACE", "interfaces[0].mass", "-1.0"),
    (two_layers(interfaces=(Interface(0.4, spring=NAN),)), "NOT_FINITE", "interfaces[0].spring", "nan"),
    (
        two_layers(coupling=Coupling(CouplingKind.BLOCH, 2e6)),
        "BAD_END_CONDITION",
        "coupling.phase",
        "2000000.0",
    ),
]


@pytest.mark.parametrize(
    ("problem", "reason", "field", "number"), FAULTS, ids=[f"{f}-{r}-{n}" for _, r, f, n in FAULTS]
)
def test_a_fault_names_its_field_and_number(
    problem: Problem, reason: Reason, field: str, number: str
) -> None:
    with pytest.raises(CoreError) as caught:
        validate(problem)
    assert caught.value.reason is Reason(reason)
    fault = caught.value.violations[0]
    assert (fault.field, fault.reason) == (field, reason)
    assert fault.number.startswith(number) or fault.number == str(float(number))
    assert field in str(caught.value)
    assert fault.number in str(caught.value)
    unsupported = reason.startswith("UNSUPPORTED")
    assert isinstance(caught.value, Unsupported if unsupported else InvalidProblem)


def test_all_faults_are_reported_at_once() -> None:
    problem = Problem(
        (Layer("a", 0, 1, Constant(-1), Expression("sinn(x)"), Constant(NAN)), Layer("a", 1.1, 2)),
        left=Film(-1),
        right=Robin(0.0, 0.0),
    )
    with pytest.raises(InvalidProblem) as caught:
        validate(problem)
    fields = [fault.field for fault in caught.value.violations]
    assert fields == [
        "layers[1].start",
        "layers[0].p",
        "layers[0].q",
        "layers[0].w",
        "left.film",
        "right.alpha",
    ]


def test_a_resistance_with_a_spring_is_refused() -> None:
    with pytest.raises(InvalidProblem, match="point of its own"):
        validate(two_layers(interfaces=(Interface(0.4, resistance=1.0, spring=2.0),)))


def test_thousands_of_faults_stay_readable() -> None:
    problem = Problem(tuple(Layer("", i, i + 1, Constant(-1.0)) for i in range(1000)))
    with pytest.raises(InvalidProblem) as caught:
        validate(problem)
    assert len(caught.value.violations) == validation.MAX_VIOLATIONS


@pytest.mark.parametrize(
    ("problem", "field"),
    [
        (Problem(tuple(Layer("", i, i + 1) for i in range(validation.MAX_LAYERS + 1))), "layers"),
        (
            one_layer(
                p=Samples(np.linspace(0, 1, validation.MAX_SAMPLES + 1), np.ones(validation.MAX_SAMPLES + 1))
            ),
            "layers[0].p.samples.x",
        ),
    ],
)
def test_sizes_are_limited(problem: Problem, field: str) -> None:
    with pytest.raises(LimitExceeded) as caught:
        validate(problem)
    assert caught.value.reason is Reason.LIMIT_EXCEEDED
    assert caught.value.violations[0].field == field


@pytest.mark.parametrize(
    "problem",
    [
        two_layers(),
        layers((0, 0.1 + 0.2), (0.3, 1)),
        two_layers(interfaces=(Interface(0.4000000000000001, resistance=0.1), Interface(0.7, spring=-5.0))),
        Problem((Layer("", 0.0, 1.0, w=Constant(0.0)),), right=Lump(1.0)),
        one_layer(p=table([0, 1], [1, 0], Interpolation.STEP_LEFT)),
        one_layer(p=table([0, 1], [0, 1], Interpolation.STEP_RIGHT)),
        one_layer(w=table([-1, 0, 2], [0, 1, 0])),
        layers((0.5, 1), geometry=Geometry.CYLINDRICAL, left=Robin(1.0, 0.0), right=Robin(0.0, 2.0)),
    ],
)
def test_valid_problems_pass(problem: Problem) -> None:
    validate(problem)


# Signs from p u' = h u at the left and -p u' = h u at the right, put into alpha u + beta p u' = 0.
@pytest.mark.parametrize(
    ("end", "left", "right"),
    [
        (Robin(2.0, 4.0), -0.5, 0.5),
        (Robin(0.0, 3.0), 0.0, 0.0),
        (Film(1.5), 1.5, 1.5),
        (Lump(2.0, 0.25), 0.25, 0.25),
        (Neumann(), 0.0, 0.0),
    ],
)
def test_resolved_ends(end: End, left: float, right: float) -> None:
    resolved = resolve(two_layers(left=end, right=end))
    assert (resolved.left.stiffness, resolved.right.stiffness) == (left, right)
    assert not any(side.dirichlet for side in (resolved.left, resolved.right))
    assert resolved.left.mass == (2.0 if isinstance(end, Lump) else 0.0)


def test_dirichlet_by_either_name() -> None:
    resolved = resolve(two_layers(left=Dirichlet(), right=Robin(3.0, 0.0)))
    assert resolved.left.dirichlet
    assert resolved.right.dirichlet


def test_resolved_geometry_factors() -> None:
    problem = Problem(
        (Layer("", 2.0, 4.0),),
        left=Lump(3.0, 0.5, 0.1),
        right=Film(7.0),
        interfaces=(Interface(3.5, mass=2.0), Interface(3.0, resistance=0.9), Interface(2.5, spring=4.0)),
        geometry=Geometry.SPHERICAL,
    )
    validate(problem)
    resolved = resolve(problem)
    assert resolved.left.lump == (12.0, 2.0, 0.1 / 4)
    assert (resolved.left.mass, resolved.left.stiffness) == (0.0, 0.0)
    assert resolved.right.stiffness == 7.0 * 16
    assert [joint.x for joint in resolved.joints] == [2.5, 3.0, 3.5]
    assert [joint.resistance for joint in resolved.joints] == [0.0, 0.1, 0.0]
    assert [joint.spring for joint in resolved.joints] == [25.0, 0.0, 0.0]
    assert [joint.mass for joint in resolved.joints] == [0.0, 0.0, 24.5]


def test_interfaces_snap_to_the_edge_they_mean() -> None:
    problem = layers((0, 0.1 + 0.2), (0.3, 1), interfaces=(Interface(0.3, resistance=1.0),))
    validate(problem)
    resolved = resolve(problem)
    assert resolved.joints[0].x == resolved.layer_edges[1]


@pytest.mark.parametrize("kind", [InvalidProblem, Unsupported, LimitExceeded, NotConverged])
def test_errors_pickle(kind: type[CoreError]) -> None:
    fault = Violation("left.film", "must not be negative", "-1.0", Reason.BAD_END_CONDITION)
    error = kind(Reason.BAD_END_CONDITION, "two things", (fault,), {"reached": "1e-5"})
    again = pickle.loads(pickle.dumps(error))
    assert type(again) is kind
    assert (again.reason, again.violations, again.metadata) == (
        error.reason,
        error.violations,
        error.metadata,
    )
    assert str(again) == str(error) == "two things; left.film: must not be negative (got -1.0)"


def test_problems_pickle_and_compare() -> None:
    problem = two_layers(left=Lump(1.0), right=Film(2.0))
    sampled = one_layer(p=table([0, 1], [1, 2]))
    assert pickle.loads(pickle.dumps(problem)) == problem
    assert pickle.loads(pickle.dumps(sampled)) == sampled
    assert sampled != one_layer(p=table([0, 1], [1, 3]))
    assert len({sampled, one_layer(p=table([0, 1], [1, 2])), problem}) == 2
