"""What a projection or reconstruction refuses, with the field and the number in the error."""

import dataclasses
from collections.abc import Callable

import numpy as np
import pytest
from numpy.typing import NDArray

from modewright_service.core.errors import CoreError, InvalidRequest, LimitExceeded, NotConverged, Reason
from modewright_service.core.transforms import (
    CellMesh,
    PointMesh,
    lump_values,
    plan_projection,
    project_expression,
    reconstruct,
)
from modewright_service.core.transforms import projection as projection_module
from tests.core.handmade import contact, logarithmic_sines, record_of, sines, tip_mass

X = np.linspace(0, 1, 9)


def violation(call: Callable[[], object], kind: type[CoreError], reason: Reason) -> tuple[str, str]:
    """The field and the number of the one violation that the call must raise."""
    with pytest.raises(kind) as caught:
        call()
    assert caught.value.reason is reason
    (found,) = caught.value.violations
    assert found.field in str(caught.value)
    assert found.number in str(caught.value)
    return found.field, found.number


@pytest.mark.parametrize(
    ("x", "reason", "expected"),
    [
        ([0.0, 0.5, 1.2], Reason.MESH_OUTSIDE_DOMAIN, ("x[2]", "1.2")),
        ([-0.5, 0.5, 1.0], Reason.MESH_OUTSIDE_DOMAIN, ("x[0]", "-0.5")),
        ([0.0, 0.6, 0.5, 1.0], Reason.BAD_MESH, ("x[2]", "0.5")),
        ([0.0, 0.5, 0.5, 1.0], Reason.BAD_MESH, ("x[2]", "0.5")),
        ([0.0, 0.0, 0.5, 1.0], Reason.BAD_MESH, ("x[1]", "0.0")),
        ([0.0, 0.5, 0.6], Reason.BAD_MESH, ("x[2]", "0.6")),
        ([0.4, 0.5, 1.0], Reason.BAD_MESH, ("x[0]", "0.4")),
        ([0.5], Reason.BAD_MESH, ("x", "1")),
        ([], Reason.BAD_MESH, ("x", "0")),
        ([0.0, np.nan, 1.0], Reason.NOT_FINITE, ("x[1]", "nan")),
        ([0.0, np.inf], Reason.NOT_FINITE, ("x[1]", "inf")),
        ([[0.0, 1.0]], Reason.BAD_SHAPE, ("x", "(1, 2)")),
        (["a", "b"], Reason.BAD_DTYPE, ("x", "<U1")),
        ([0.0, 1j], Reason.BAD_DTYPE, ("x", "complex128")),
    ],
)
def test_points_that_do_not_fit(x: list[object], reason: Reason, expected: tuple[str, str]) -> None:
    assert violation(lambda: plan_projection(sines(), PointMesh(x)), InvalidRequest, reason) == expected  # type: ignore[arg-type]


def test_an_interface_given_three_times() -> None:
    x = np.array([0, 0.5, 0.5, 0.5, 1])
    call = lambda: plan_projection(contact(), PointMesh(x))  # noqa: E731
    assert violation(call, InvalidRequest, Reason.BAD_MESH) == ("x[3]", "0.5")


def test_a_layer_without_points_is_named() -> None:
    with pytest.raises(InvalidRequest, match=r"'layer 1' from 0\.5 to 1\.0"):
        plan_projection(contact(), PointMesh(np.array([0.0, 0.2, 0.4])))


def test_a_layer_without_a_name_is_numbered() -> None:
    record = dataclasses.replace(contact(), layer_names=("", ""))
    with pytest.raises(InvalidRequest, match=r"layers\[1\] from 0\.5 to 1\.0"):
        plan_projection(record, PointMesh(np.linspace(0.0, 0.5, 21)))
    with pytest.raises(InvalidRequest, match=r"no point in layers\[1\] from 0\.5 to 1\.0"):
        plan_projection(record, PointMesh(np.array([0.0, 0.2, 0.4])))


@pytest.mark.parametrize(
    ("edges", "reason", "expected"),
    [
        ([0.0, 0.5, 1.2], Reason.MESH_OUTSIDE_DOMAIN, ("edges[2]", "1.2")),
        ([0.0, 0.5], Reason.BAD_MESH, ("edges[1]", "0.5")),
        ([0.1, 1.0], Reason.BAD_MESH, ("edges[0]", "0.1")),
        ([0.0, 0.5, 0.5, 1.0], Reason.BAD_MESH, ("edges[2]", "0.5")),
        ([1.0], Reason.BAD_MESH, ("edges", "1")),
        ([0.0, np.nan, 1.0], Reason.NOT_FINITE, ("edges[1]", "nan")),
    ],
)
def test_cells_that_do_not_fit(edges: list[float], reason: Reason, expected: tuple[str, str]) -> None:
    call = lambda: plan_projection(sines(), CellMesh(edges))  # type: ignore[arg-type] # noqa: E731
    assert violation(call, InvalidRequest, reason) == expected


@pytest.mark.parametrize(
    ("arguments", "field"),
    [({"measure": "area"}, "measure"), ({"reconstruction": "flat"}, "reconstruction")],
)
def test_unknown_words_of_cells(arguments: dict[str, str], field: str) -> None:
    call = lambda: CellMesh(X, **arguments)  # type: ignore[arg-type] # noqa: E731
    assert violation(call, InvalidRequest, Reason.BAD_MESH) == (field, arguments[field])


def test_unknown_interpolation() -> None:
    call = lambda: PointMesh(X, "quintic")  # type: ignore[arg-type] # noqa: E731
    assert violation(call, InvalidRequest, Reason.BAD_MESH) == ("interpolation", "quintic")


def test_negative_radii() -> None:
    call = lambda: CellMesh(np.array([-1.0, 1.0]), "cylindrical")  # type: ignore[arg-type] # noqa: E731
    assert violation(call, InvalidRequest, Reason.BAD_MESH) == ("edges[0]", "-1.0")


def test_averages_over_no_weight() -> None:
    """w = 1 on (0, 1/2), 0 on (1/2, 1): a cell average over w dx is 0/0 there."""
    record = record_of(
        lambda x: np.ones((1, x.size)) * np.sqrt(2),
        np.zeros(1),
        np.array([0, 0.5, 1]),
        w=lambda x: np.where(x < 0.5, 1.0, 0.0),
    )
    mesh = CellMesh(np.array([0, 0.25, 0.5, 0.75, 1]), "weight")  # type: ignore[arg-type]
    call = lambda: plan_projection(record, mesh)  # noqa: E731
    assert violation(call, InvalidRequest, Reason.BAD_MESH) == ("edges[2]", "0.5")
    mesh = CellMesh(mesh.edges, reconstruction="constant")  # type: ignore[arg-type]
    found = plan_projection(record, mesh).apply([1.0, 1.0, 7.0, -9.0])
    assert found.captured == pytest.approx(1.0, abs=1e-14)


@pytest.mark.parametrize(
    ("values", "reason", "expected"),
    [
        (np.ones(8), Reason.BAD_SHAPE, ("values", "(8,)")),
        (np.ones((9, 3)), Reason.BAD_SHAPE, ("values", "(9, 3)")),
        (1.0, Reason.BAD_SHAPE, ("values", "()")),
        ([[1.0], [1.0, 2.0]], Reason.BAD_SHAPE, ("values", "ragged")),
        (np.array(["x"] * 9), Reason.BAD_DTYPE, ("values", "<U1")),
        (np.ones(9, dtype=bool), Reason.BAD_DTYPE, ("values", "bool")),
        (np.full(9, None), Reason.BAD_DTYPE, ("values", "object")),
        (np.where(X == 0.5, np.nan, 1.0), Reason.NOT_FINITE, ("values[4]", "nan")),
        (np.where(X == 0.5, 1e200, 1.0), Reason.BAD_VALUES, ("values[4]", "1e+200")),
    ],
)
def test_values_that_do_not_fit(values: object, reason: Reason, expected: tuple[str, str]) -> None:
    plan = plan_projection(sines(), PointMesh(X))
    assert violation(lambda: plan.apply(values), InvalidRequest, reason) == expected  # type: ignore[arg-type]


def test_the_place_of_a_gap_in_a_large_batch() -> None:
    values = np.ones((40, 30, 9))
    values[31, 7, 2] = np.inf
    plan = plan_projection(sines(), PointMesh(X))
    call = lambda: plan.apply(values)  # noqa: E731
    assert violation(call, InvalidRequest, Reason.NOT_FINITE) == ("values[31][7][2]", "inf")


def test_lump_values_that_do_not_fit() -> None:
    free, held = (plan_projection(record, PointMesh(X)) for record in (sines(), tip_mass()))
    fields = np.ones((5, 9))
    cases = [
        (lambda: free.apply(fields, left_lump=1.0), Reason.BAD_VALUES, ("left_lump", "1 values")),
        (lambda: held.apply(fields, right_lump=np.ones(4)), Reason.BAD_SHAPE, ("right_lump", "(4,)")),
        (lambda: held.apply(fields, right_lump=np.nan), Reason.NOT_FINITE, ("right_lump[0]", "nan")),
        (lambda: held.apply(fields, right_lump="hot"), Reason.BAD_DTYPE, ("right_lump", "<U3")),
    ]
    assert [violation(call, InvalidRequest, reason) for call, reason, _ in cases] == [c[2] for c in cases]


def test_a_matrix_too_large(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(projection_module, "MAX_MATRIX_BYTES", 800)
    call = lambda: plan_projection(sines(), PointMesh(X))  # noqa: E731
    assert violation(call, LimitExceeded, Reason.LIMIT_EXCEEDED) == ("x", str(9 * 12 * 8))


@pytest.mark.parametrize(
    ("text", "kind", "reason"),
    [
        ("exp(-x", InvalidRequest, Reason.EXPRESSION_SYNTAX),
        ("2*y", InvalidRequest, Reason.EXPRESSION_NAME),
        ("x" * 1_000_000, InvalidRequest, Reason.EXPRESSION_TOO_LONG),
        ("1/0", InvalidRequest, Reason.NOT_FINITE),
    ],
)
def test_expressions_that_cannot_be_projected(text: str, kind: type[CoreError], reason: Reason) -> None:
    field, _ = violation(lambda: project_expression(sines(), text), kind, reason)
    assert field == "values"


@pytest.mark.parametrize("text", ["1/x", "log(x - 0.5)", "1/(x - 0.3)", "sqrt(x - 0.5)"])
def test_expressions_without_a_finite_value_somewhere(text: str) -> None:
    with pytest.raises((InvalidRequest, NotConverged), match="values"):
        project_expression(sines(), text)


@pytest.mark.parametrize(
    ("arguments", "reason", "expected"),
    [
        ({"coefficients": np.ones(13)}, Reason.BAD_SHAPE, ("coefficients", "(13,)")),
        ({"coefficients": np.ones((3, 0))}, Reason.BAD_SHAPE, ("coefficients", "(3, 0)")),
        ({"coefficients": 1.0}, Reason.BAD_SHAPE, ("coefficients", "()")),
        ({"coefficients": [[1.0, np.nan]]}, Reason.NOT_FINITE, ("coefficients[0][1]", "nan")),
        ({"coefficients": ["a"]}, Reason.BAD_DTYPE, ("coefficients", "<U1")),
        ({"x": [0.5, 1.5]}, Reason.MESH_OUTSIDE_DOMAIN, ("x[1]", "1.5")),
        ({"x": [np.nan]}, Reason.NOT_FINITE, ("x[0]", "nan")),
        ({"x": [[0.5]]}, Reason.BAD_SHAPE, ("x", "(1, 1)")),
        ({"x": [0.5j]}, Reason.BAD_DTYPE, ("x", "complex128")),
        ({"quantity": "heat"}, Reason.BAD_VALUES, ("quantity", "heat")),
        ({"side": "both"}, Reason.BAD_VALUES, ("side", "both")),
    ],
)
def test_reconstructions_that_cannot_be(
    arguments: dict[str, object], reason: Reason, expected: tuple[str, str]
) -> None:
    given = {"coefficients": np.ones(12), "x": [0.5], **arguments}
    call = lambda: reconstruct(sines(), **given)  # type: ignore[arg-type] # noqa: E731
    assert violation(call, InvalidRequest, reason) == expected


def test_lump_values_check_their_coefficients() -> None:
    call = lambda: lump_values(tip_mass(), np.ones(11))  # noqa: E731
    assert violation(call, InvalidRequest, Reason.BAD_SHAPE) == ("coefficients", "(11,)")


def test_meshes_have_digests_of_their_meaning() -> None:
    edges = np.array([1.0, 2.0, 3.0])
    meshes = [
        PointMesh(edges),
        PointMesh(edges, "linear"),  # type: ignore[arg-type]
        PointMesh(edges[:2]),
        CellMesh(edges),
        CellMesh(edges, "cylindrical"),  # type: ignore[arg-type]
        CellMesh(edges, reconstruction="constant"),  # type: ignore[arg-type]
    ]
    assert len({mesh.digest() for mesh in meshes}) == len(meshes)
    assert PointMesh(np.array([0.0, 1.0])).digest() == PointMesh(np.array([-0.0, 1.0])).digest()


def test_the_domain_of_another_problem_is_named() -> None:
    with pytest.raises(InvalidRequest, match=r"x\[0\]: outside the domain \[1.0, 2.718281828459045\]"):
        plan_projection(logarithmic_sines(), PointMesh(X))


@pytest.mark.parametrize(
    ("x", "expected"),
    [
        (np.linspace(0.0, 0.5, 21), ("x[20]", "0.5")),
        (np.append(np.linspace(0.0, 0.5, 21)[:-1], 0.51), ("x[20]", "0.51")),
        (np.linspace(0.5, 1.0, 21), ("x[0]", "0.5")),
    ],
)
def test_points_that_reach_an_interface_only(x: NDArray[np.float64], expected: tuple[str, str]) -> None:
    """One point in a layer stands for a layer of one cell, not for one that the mesh never entered."""
    call = lambda: plan_projection(contact(), PointMesh(x))  # noqa: E731
    assert violation(call, InvalidRequest, Reason.BAD_MESH) == expected


def test_a_layer_of_one_cell_has_one_point() -> None:
    x = np.concatenate([np.linspace(0.0, 0.5, 3, endpoint=False) + 0.5 / 6, [0.75]])
    constant = plan_projection(contact(), PointMesh(x)).apply(np.full(4, 3.0))
    assert constant.norm2 == pytest.approx(
        9.0 * plan_projection(contact(), PointMesh(x)).apply(np.ones(4)).norm2
    )
