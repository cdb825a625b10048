"""Stacks of material layers: positions, coefficients, and errors in the stack's own names."""

from __future__ import annotations

import pickle

import pytest

import modewright
from tests.client.documents import STACK


@pytest.fixture
def problem() -> modewright.Problem:
    return modewright.Problem.from_dict(STACK)


def test_layers_follow_each_other_without_gaps(problem: modewright.Problem) -> None:
    assert problem.geometry == "cylindrical"
    assert problem.domain == (0.05, pytest.approx(0.097, rel=1e-15))
    for before, after in zip(problem.layers, problem.layers[1:], strict=False):
        assert before.end == after.start
    assert [layer.name for layer in problem.layers] == ["steel", "foam", ""]


def test_material_values_are_passed_on_without_the_geometry_factor(problem: modewright.Problem) -> None:
    steel, foam, casing = problem.layers
    assert (steel.p, steel.q, steel.w) == (48.0, 0.0, 3.7e6)
    assert isinstance(foam.p, modewright.Samples)
    assert casing.p == "0.4+0*x"
    assert problem.left == modewright.Lump(1.0e5, resistance=1e-3)
    assert problem.right == modewright.Film(4.0)
    assert problem.interfaces == (modewright.Interface(steel.end, resistance=2e-4),)


@pytest.mark.parametrize(
    ("path", "own"),
    [
        ("layers[1].p", "stack.layers[1].conductivity"),
        ("layers[1].p.samples.x[2]", "stack.layers[1].conductivity.samples.x[2]"),
        ("layers[0].w", "stack.layers[0].heat_capacity"),
        ("layers[2].end", "stack.layers[2].thickness"),
        ("layers[0].name", "stack.layers[0].name"),
        ("layers[1]", "stack.layers[1]"),
        ("layers", "stack.layers"),
        ("left.resistance", "stack.inner.resistance"),
        ("right", "stack.outer"),
        ("interfaces[0].resistance", "stack.layers[0].contact_resistance"),
        ("geometry", "stack.geometry"),
        ("specification.modes", "specification.modes"),
        ("", ""),
    ],
)
def test_field_paths_are_turned_into_the_stack_s_own(
    problem: modewright.Problem, path: str, own: str
) -> None:
    assert problem.field_in_document(path) == own


def test_plain_problems_keep_their_paths() -> None:
    plain = modewright.Problem.layered(
        modewright.Layer(0, 1), left=modewright.Neumann(), right=modewright.Neumann()
    )
    assert plain.field_in_document("layers[0].p") == "layers[0].p"


def test_building_in_python_says_the_same_as_the_document(problem: modewright.Problem) -> None:
    stack = modewright.Stack.of(
        modewright.StackLayer(0.004, 48, 3.7e6, "steel", contact_resistance=2e-4),
        modewright.StackLayer(
            0.04, modewright.Samples([0.05, 0.08, 0.1], [0.026, 0.028, 0.03]), 9.0e4, name="foam"
        ),
        modewright.StackLayer(0.003, "0.4+0*x", 2.1e6),
        inner=modewright.Lump(1e5, resistance=1e-3),
        outer=modewright.Film(4),
        geometry="cylindrical",
        start=0.05,
        name="pipe wall",
    )
    assert stack.problem() == problem
    assert stack.problem().route == problem.route
    assert pickle.loads(pickle.dumps(problem)) == problem
