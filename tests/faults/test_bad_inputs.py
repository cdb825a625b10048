"""Bad inputs, each through the embedded service: a typed error that names the field and the number.

Every case says which exception, which reason and which field are wanted, and the number (or the name)
that the message must show. Some are refused by the client before anything is sent; what the client lets
through, the service refuses. Each call carries a deadline, so that an input that keeps the service busy
fails by its type, and after each one the service answers an ordinary request.
"""

from __future__ import annotations

import copy
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
import pytest

import modewright
from modewright import InvalidProblem, InvalidRequest, LimitExceeded, Unsupported

GOOD: dict[str, Any] = {
    "layers": [
        {"name": "inner", "start": 0.0, "end": 0.4, "p": 1.0, "w": 2.0},
        {"name": "outer", "start": 0.4, "end": 1.0, "p": "1+x", "w": 1.0},
    ],
    "left": {"kind": "dirichlet"},
    "right": {"kind": "film", "film": 2.0},
}
MODES = 6
MESH = np.linspace(0.0, 1.0, 21)

Document = dict[str, Any]


@dataclass(frozen=True)
class Bad:
    """What is wrong, and what the error has to say."""

    kind: type[modewright.ModewrightError]
    reason: str
    field: str
    number: str


def _document(**changes: Any) -> Document:
    """The good document with changes by path: ``layers_1_p`` is ``layers[1].p``."""
    document = copy.deepcopy(GOOD)
    for path, value in changes.items():
        *parents, last = path.split("_")
        target: Any = document
        for parent in parents:
            target = target[int(parent)] if parent.isdigit() else target[parent]
        target[last] = value
    return document


def _table(x: list[float], values: list[float]) -> dict[str, Any]:
    return {"samples": {"x": x, "values": values, "interpolation": "linear"}}


def _both_layers(**fields: Any) -> Document:
    document = copy.deepcopy(GOOD)
    for layer in document["layers"]:
        layer.update(fields)
    return document


NEGATIVE, UNSORTED = [1.0, 1.0, -0.3, 1.0], [0.4, 0.8, 0.6, 1.0]
GRID = [0.4, 0.6, 0.8, 1.0]
ONE_MEGABYTE = "+".join(["x"] * 500_000)
DEEP = "(" * 5000 + "x" + ")" * 5000

PROBLEMS: dict[str, tuple[Document, Bad]] = {
    "negative p": (
        _document(layers_0_p=-1.5),
        Bad(InvalidProblem, "NEGATIVE_COEFFICIENT", "layers[0].p", "-1.5"),
    ),
    "p negative in a part of the layer": (
        _document(layers_1_p="1-1.25*x"),
        Bad(InvalidProblem, "NEGATIVE_COEFFICIENT", "layers[1].p", "-0."),
    ),
    "negative w": (
        _document(layers_0_w=-2e-3),
        Bad(InvalidProblem, "NEGATIVE_COEFFICIENT", "layers[0].w", "-0.002"),
    ),
    "w negative in a part of the layer": (
        _document(layers_1_w="cos(3*x)"),
        Bad(InvalidProblem, "NEGATIVE_COEFFICIENT", "layers[1].w", "-0."),
    ),
    "a negative sample of w": (
        _document(layers_1_w=_table(GRID, NEGATIVE)),
        Bad(InvalidProblem, "NEGATIVE_COEFFICIENT", "layers[1].w", "-0.3"),
    ),
    "w zero everywhere and no mass": (
        _both_layers(w=0.0),
        Bad(InvalidProblem, "ZERO_WEIGHT", "layers[0].w", "0"),
    ),
    "p zero on a layer": (
        _document(layers_0_p=0.0),
        Bad(Unsupported, "UNSUPPORTED_COEFFICIENT", "layers[0].p", "0"),
    ),
    "p is NaN": (
        _document(layers_0_p=float("nan")),
        Bad(InvalidProblem, "NOT_FINITE", "layers[0].p", "nan"),
    ),
    "q infinite": (
        _document(layers_0_q=float("inf")),
        Bad(InvalidProblem, "NOT_FINITE", "layers[0].q", "inf"),
    ),
    "a pole inside": (
        _document(layers_1_q="1/(x-0.7)**2"),
        Bad(InvalidProblem, "", "layers[1].q", "0.7"),
    ),
    "a pole between two numbers": (
        _document(layers_1_q="1/(x-2**0.5/2)**2"),
        Bad(InvalidProblem, "", "layers[1].q", "0.707106"),
    ),
    "the logarithm of a negative number": (
        _document(layers_1_q="log(x-0.7)"),
        Bad(InvalidProblem, "INVALID_COEFFICIENT", "layers[1].q", "0."),
    ),
    "a gap between layers": (
        _document(layers_1_start=0.45),
        Bad(InvalidProblem, "LAYER_GAP", "layers[1].start", "0.45"),
    ),
    "overlapping layers": (
        _document(layers_1_start=0.35),
        Bad(InvalidProblem, "LAYER_GAP", "layers[1].start", "0.35"),
    ),
    "a layer backwards": (
        _document(layers_1_end=0.2),
        Bad(InvalidProblem, "BAD_DOMAIN", "layers[1].end", "0.2"),
    ),
    "no layers": (
        _document(layers=[]),
        Bad(InvalidProblem, "BAD_DOMAIN", "layers", "0"),
    ),
    "an infinite interval": (
        _document(layers_1_end=float("inf")),
        Bad(Unsupported, "UNSUPPORTED_INTERVAL", "layers[1].end", "inf"),
    ),
    "unsorted samples": (
        _document(layers_1_p=_table(UNSORTED, [1.0, 2.0, 3.0, 4.0])),
        Bad(InvalidProblem, "BAD_SAMPLES", "layers[1].p.samples.x[2]", "0.6"),
    ),
    "duplicate samples": (
        _document(layers_1_p=_table([0.4, 0.6, 0.6, 1.0], [1.0, 2.0, 3.0, 4.0])),
        Bad(InvalidProblem, "BAD_SAMPLES", "layers[1].p.samples.x[2]", "0.6"),
    ),
    "NaN among the samples": (
        _document(layers_1_p=_table(GRID, [1.0, float("nan"), 3.0, 4.0])),
        Bad(InvalidProblem, "NOT_FINITE", "layers[1].p.samples.values[1]", "nan"),
    ),
    "samples that stop short of the layer": (
        _document(layers_1_p=_table([0.4, 0.6, 0.8, 0.9], [1.0, 2.0, 3.0, 4.0])),
        Bad(InvalidProblem, "BAD_SAMPLES", "layers[1].p.samples.x", "0.9"),
    ),
    "samples and values of different lengths": (
        _document(layers_1_p=_table(GRID, [1.0, 2.0, 3.0])),
        Bad(InvalidProblem, "BAD_SAMPLES", "layers[1].p.samples.values", "3"),
    ),
    "a single sample": (
        _document(layers_1_p=_table([0.4], [1.0])),
        Bad(InvalidProblem, "BAD_SAMPLES", "layers[1].p.samples.x", "1"),
    ),
    "an unknown name in an expression": (
        _document(layers_1_p="1+conductivity*x"),
        Bad(InvalidProblem, "EXPRESSION_NAME", "layers[1].p", "conductivity"),
    ),
    "a call of what is not a function": (
        _document(layers_1_p="__import__('os').getpid()"),
        Bad(InvalidProblem, "EXPRESSION_", "layers[1].p", "column 1"),
    ),
    "a broken expression": (
        _document(layers_1_q="2*(x+1"),
        Bad(InvalidProblem, "EXPRESSION_SYNTAX", "layers[1].q", "column 7"),
    ),
    "an expression of a megabyte": (
        _document(layers_1_q=ONE_MEGABYTE),
        Bad(InvalidProblem, "EXPRESSION_TOO_LONG", "layers[1].q", "999999"),
    ),
    "five thousand parentheses": (
        _document(layers_1_q=DEEP),
        Bad(InvalidProblem, "EXPRESSION_TOO_LONG", "layers[1].q", ""),
    ),
    "a negative film": (
        _document(right_film=-2.5),
        Bad(InvalidProblem, "BAD_END_CONDITION", "right.film", "-2.5"),
    ),
    "a Robin end of zeros": (
        _document(left={"kind": "robin", "alpha": 0.0, "beta": 0.0}),
        Bad(InvalidProblem, "BAD_END_CONDITION", "left", "0"),
    ),
    "a negative mass": (
        _document(left={"kind": "lump", "mass": -4.0}),
        Bad(InvalidProblem, "BAD_END_CONDITION", "left.mass", "-4"),
    ),
    "an unknown end": (
        _document(left={"kind": "frozen"}),
        Bad(InvalidProblem, "BAD_END_CONDITION", "left.kind", "frozen"),
    ),
    "a bounded end that is regular": (
        _document(left={"kind": "bounded"}),
        Bad(InvalidProblem, "BAD_END_CONDITION", "left.kind", "bounded"),
    ),
    "ends coupled with a phase": (
        {"layers": GOOD["layers"], "coupling": {"kind": "bloch", "phase": 0.5}},
        Bad(Unsupported, "UNSUPPORTED_COUPLING", "coupling.phase", "0.5"),
    ),
    "an interface outside the domain": (
        _document(interfaces=[{"x": 1.3, "resistance": 1.0}]),
        Bad(InvalidProblem, "BAD_INTERFACE", "interfaces[0].x", "1.3"),
    ),
    "two interfaces at one place": (
        _document(interfaces=[{"x": 0.4, "resistance": 1.0}, {"x": 0.4, "spring": 1.0}]),
        Bad(InvalidProblem, "BAD_INTERFACE", "interfaces[1].x", "0.4"),
    ),
    "a negative resistance": (
        _document(interfaces=[{"x": 0.4, "resistance": -1e-4}]),
        Bad(InvalidProblem, "BAD_INTERFACE", "interfaces[0].resistance", "-0.0001"),
    ),
    "the centre of a cylinder": (
        _document(geometry="cylindrical"),
        Bad(InvalidProblem, "BAD_END_CONDITION", "left.kind", ""),
    ),
    "a negative radius": (
        _document(geometry="spherical", layers_0_start=-0.1),
        Bad(InvalidProblem, "BAD_DOMAIN", "layers[0].start", "-0.1"),
    ),
    "a length of nothing": (
        {"layers": [{"start": 0.0, "end": 1e-300}], "left": GOOD["left"], "right": GOOD["right"]},
        Bad(InvalidProblem, "BAD_DOMAIN", "layers", "inf"),
    ),
    "a length beyond all units": (
        {"layers": [{"start": 0.0, "end": 1e200}], "left": GOOD["left"], "right": GOOD["right"]},
        Bad(InvalidProblem, "BAD_DOMAIN", "layers", "0.0"),
    ),
    "a massless layer that nothing holds": (
        _document(layers_0_w=0.0, layers_0_q=-2500.0),
        Bad(modewright.NotConverged, "NOT_CONVERGED", "layers[0].q", "-2500"),
    ),
    "an unknown geometry": (
        _document(geometry="toroidal"),
        Bad(InvalidProblem, "", "geometry", "toroidal"),
    ),
    "a misspelt field": (
        _document(layers_0_rho=1.0),
        Bad(InvalidProblem, "", "layers[0].rho", "rho"),
    ),
}

Call = Callable[[modewright.Basis], object]

REQUESTS: dict[str, tuple[Call, Bad]] = {
    "a mesh outside the domain": (
        lambda basis: basis.project(np.ones(21), x=MESH * 1.2),
        Bad(InvalidRequest, "MESH_OUTSIDE_DOMAIN", "x[17]", "1.02"),
    ),
    "a mesh that stops short": (
        lambda basis: basis.project(np.ones(21), x=MESH * 0.8),
        Bad(InvalidRequest, "BAD_MESH", "x", "0.8"),
    ),
    "an unsorted mesh": (
        lambda basis: basis.project(np.ones(21), x=MESH[::-1]),
        Bad(InvalidRequest, "BAD_MESH", "x", "0.95"),
    ),
    "a mesh with a point twice": (
        lambda basis: basis.project(np.ones(22), x=np.sort(np.append(MESH, MESH[12]))),
        Bad(InvalidRequest, "BAD_MESH", "x", "0.6"),
    ),
    "NaN in a mesh": (
        lambda basis: basis.project(np.ones(21), x=np.where(MESH == 0.5, np.nan, MESH)),
        Bad(InvalidRequest, "", "x", "nan"),
    ),
    "a mesh of two axes": (
        lambda basis: basis.project(np.ones(20), x=MESH[:20].reshape(4, 5)),
        Bad(InvalidRequest, "BAD_SHAPE", "x", "(4, 5)"),
    ),
    "values that do not fit the mesh": (
        lambda basis: basis.project(np.ones((3, 20)), x=MESH),
        Bad(InvalidRequest, "BAD_SHAPE", "values", "20"),
    ),
    "edges that do not fit the averages": (
        lambda basis: basis.project(np.ones(21), edges=MESH, measure="length"),
        Bad(InvalidRequest, "BAD_SHAPE", "values", "21"),
    ),
    "NaN among the values": (
        lambda basis: basis.project(np.where(MESH == 0.5, np.nan, 1.0), x=MESH),
        Bad(InvalidRequest, "", "values", "nan"),
    ),
    "values that are text": (
        lambda basis: basis.project(np.full(21, "warm"), x=MESH),
        Bad(InvalidRequest, "BAD_DTYPE", "values", "U4"),
    ),
    "an unknown measure": (
        lambda basis: basis.project(np.ones(20), edges=MESH, measure="area"),
        Bad(InvalidRequest, "", "measure", "area"),
    ),
    "an unknown name in a function": (
        lambda basis: basis.project("exp(-y)"),
        Bad(InvalidRequest, "EXPRESSION_NAME", "expression", "y"),
    ),
    "too many coefficients": (
        lambda basis: basis.reconstruct(np.ones(MODES + 1), x=MESH),
        Bad(InvalidRequest, "BAD_SHAPE", "coefficients", str(MODES + 1)),
    ),
    "points outside the domain": (
        lambda basis: basis.reconstruct(np.ones(MODES), x=[0.5, -0.01]),
        Bad(InvalidRequest, "MESH_OUTSIDE_DOMAIN", "x", "-0.01"),
    ),
    "an unknown quantity": (
        lambda basis: basis.reconstruct(np.ones(MODES), x=MESH, quantity="entropy"),
        Bad(InvalidRequest, "", "quantity", "entropy"),
    ),
    "an unknown side": (
        lambda basis: basis.reconstruct(np.ones(MODES), x=MESH, side="top"),
        Bad(InvalidRequest, "", "side", "top"),
    ),
}

SELECTIONS: dict[str, tuple[dict[str, Any], Bad]] = {
    "a thousand million modes": (
        {"modes": 10**9},
        Bad(InvalidRequest, "TOO_MANY_MODES", "modes", "1000000000"),
    ),
    "no modes": ({"modes": 0}, Bad(InvalidRequest, "", "modes", "0")),
    "minus three modes": ({"modes": -3}, Bad(InvalidRequest, "", "modes", "-3")),
    "two and a half modes": ({"modes": 2.5}, Bad(InvalidRequest, "", "modes", "2.5")),
    "a tolerance of zero": ({"modes": 8, "rtol": 0.0}, Bad(InvalidRequest, "BAD_TOLERANCE", "rtol", "0")),
    "a negative tolerance": (
        {"modes": 8, "rtol": -1e-9},
        Bad(InvalidRequest, "BAD_TOLERANCE", "rtol", "-1e-09"),
    ),
    "a tolerance of NaN": (
        {"modes": 8, "rtol": float("nan")},
        Bad(InvalidRequest, "BAD_TOLERANCE", "rtol", "nan"),
    ),
    "a tolerance beyond doubles": (
        {"modes": 8, "rtol": 1e-20},
        Bad(InvalidRequest, "BAD_TOLERANCE", "rtol", "1e-20"),
    ),
}


@pytest.fixture(scope="module")
def basis(service: modewright.Service) -> modewright.Basis:
    return service.solve(modewright.Problem.from_dict(GOOD), modes=MODES)


@pytest.fixture(autouse=True)
def _still_answers(service: modewright.Service, basis: modewright.Basis) -> Iterator[None]:
    """After each case, an ordinary request gets an ordinary answer."""
    yield
    again = service.solve(modewright.Problem.from_dict(GOOD), modes=MODES)
    np.testing.assert_array_equal(again.eigenvalues, basis.eigenvalues)


def _check(error: modewright.ModewrightError, bad: Bad) -> None:
    text = str(error)
    named = [v for v in error.violations if v.field.startswith(bad.field)]
    assert isinstance(error, bad.kind), text
    assert error.reason.startswith(bad.reason), (error.reason, text)
    assert named, [v.field for v in error.violations]
    assert any(bad.number in str(violation) for violation in named), text
    assert bad.field in text
    assert bad.number in text
    # A message is for a person: it does not quote a megabyte back.
    assert len(text) < 2000


def test_there_are_more_than_forty() -> None:
    assert len(PROBLEMS) + len(REQUESTS) + len(SELECTIONS) >= 40


@pytest.mark.parametrize("title", PROBLEMS)
def test_bad_problem(title: str, service: modewright.Service) -> None:
    document, bad = PROBLEMS[title]
    with pytest.raises(modewright.ModewrightError) as refused:
        service.solve(modewright.Problem.from_dict(document), modes=MODES, timeout=20.0)
    _check(refused.value, bad)


@pytest.mark.parametrize("title", REQUESTS)
def test_bad_request(title: str, basis: modewright.Basis) -> None:
    call, bad = REQUESTS[title]
    with pytest.raises(modewright.ModewrightError) as refused:
        call(basis)
    _check(refused.value, bad)


@pytest.mark.parametrize("title", SELECTIONS)
def test_bad_selection(title: str, service: modewright.Service) -> None:
    options, bad = SELECTIONS[title]
    with pytest.raises(modewright.ModewrightError) as refused:
        service.solve(modewright.Problem.from_dict(GOOD), timeout=20.0, **options)
    _check(refused.value, bad)


def test_a_table_of_a_hundred_thousand_and_one(service: modewright.Service) -> None:
    x = np.linspace(0.4, 1.0, 100_001)
    document = _document(layers_1_p=_table(x.tolist(), np.ones_like(x).tolist()))
    with pytest.raises((InvalidProblem, LimitExceeded)) as refused:
        service.solve(modewright.Problem.from_dict(document), modes=MODES, timeout=20.0)
    assert "layers[1].p" in str(refused.value)
    assert "100001" in str(refused.value)
