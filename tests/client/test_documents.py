"""Problem documents: read, checked, written, and turned into messages and back."""

from __future__ import annotations

import copy
import json
import math
import pickle
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import modewright
from modewright.document.messages import message_from_problem, problem_from_message
from modewright.v1 import problem_pb2
from tests.client.documents import GOOD, INFINITE, PLAIN, STACK

_TOML = """
name = "two slabs"
interfaces = [{ x = 0.5, resistance = 0.1 }]
left = { kind = "film", film = 3 }
right = { kind = "lump", mass = 0.25, resistance = 0.5 }

[[layers]]
name = "left"
start = 0
end = 0.5
p = 2
q = "1+x"

[[layers]]
start = 0.5
end = 1
reciprocal_p = true
w = "exp(-x)"
[layers.p.samples]
x = [0.5, 0.7, 1]
values = [1, 2, 1.5]
"""


@pytest.mark.parametrize("name", sorted(GOOD))
def test_a_canonical_document_is_reproduced(name: str) -> None:
    problem = modewright.Problem.from_dict(GOOD[name])
    assert problem.to_dict() == GOOD[name]


@pytest.mark.parametrize("name", sorted(GOOD))
def test_saved_json_is_standard_and_reads_back(name: str, tmp_path: Path) -> None:
    problem = modewright.Problem.from_dict(GOOD[name])
    path = tmp_path / "problem.json"
    problem.save(path)

    def refuse(text: str) -> float:
        raise AssertionError(f"{text} is not JSON")

    json.loads(path.read_text(encoding="utf-8"), parse_constant=refuse)
    assert modewright.Problem.load(path) == problem


def test_toml_says_the_same_as_json(tmp_path: Path) -> None:
    path = tmp_path / "problem.toml"
    path.write_text(_TOML, encoding="utf-8")
    problem = modewright.Problem.load(path)
    assert problem == modewright.Problem.from_dict(PLAIN)
    assert problem.route == modewright.Problem.from_dict(PLAIN).route


def test_native_infinities_of_toml(tmp_path: Path) -> None:
    path = tmp_path / "oscillator.toml"
    path.write_text(
        'left.kind = "bounded"\nright.kind = "bounded"\n[[layers]]\nstart = -inf\nend = inf\nq = "x**2"\n',
        encoding="utf-8",
    )
    problem = modewright.Problem.load(path)
    assert problem == modewright.Problem.from_dict(INFINITE)
    assert problem.domain == (-math.inf, math.inf)


def test_yaml_says_the_same_as_json(tmp_path: Path) -> None:
    yaml = pytest.importorskip("yaml")
    path = tmp_path / "problem.yaml"
    path.write_text(yaml.safe_dump(PLAIN), encoding="utf-8")
    assert modewright.Problem.load(path) == modewright.Problem.from_dict(PLAIN)


def test_building_in_python_says_the_same_as_the_document() -> None:
    table = modewright.Samples([0.5, 0.7, 1.0], [1.0, 2.0, 1.5])
    built = modewright.Problem.layered(
        modewright.Layer(0, 0.5, p=2, q="1+x", name="left"),
        modewright.Layer(0.5, np.float64(1.0), p=table, w="exp(-x)", reciprocal_p=True),
        left=modewright.Film(3),
        right=modewright.Lump(0.25, resistance=0.5),
        interfaces=[modewright.Interface(0.5, resistance=0.1)],
        name="two slabs",
    )
    assert built == modewright.Problem.from_dict(PLAIN)
    assert hash(built) == hash(modewright.Problem.from_dict(PLAIN))


# ---- messages ----


@pytest.mark.parametrize("name", sorted(GOOD))
def test_messages_carry_all_of_a_problem(name: str) -> None:
    problem = modewright.Problem.from_dict(GOOD[name])
    sent = message_from_problem(problem).SerializeToString()
    back = problem_from_message(problem_pb2.Problem.FromString(sent))
    # A stack travels as its layers; the name of the document goes along.
    plain = modewright.Problem(
        problem.layers,
        problem.left,
        problem.right,
        problem.interfaces,
        problem.coupling,
        problem.geometry,
        problem.name,
    )
    assert back == plain


_numbers = st.floats(allow_nan=False, allow_infinity=False, width=64)
_coefficients = st.one_of(
    _numbers,
    st.sampled_from(["x", "1+x**2", "where(x<0.5, 1, 2)"]),
    st.builds(
        lambda values, word: modewright.Samples(np.arange(float(len(values))), values, word),
        st.lists(_numbers, min_size=2, max_size=5),
        st.sampled_from(["linear", "step-left", "step-right", "monotone-cubic", "cubic-spline"]),
    ),
)
_layers = st.builds(
    modewright.Layer,
    start=_numbers,
    end=_numbers,
    p=_coefficients,
    q=_coefficients,
    w=_coefficients,
    name=st.text(max_size=8),
    reciprocal_p=st.booleans(),
)
_ends = st.one_of(
    st.builds(modewright.Dirichlet),
    st.builds(modewright.Neumann),
    st.builds(modewright.Bounded),
    st.builds(modewright.Film, _numbers),
    st.builds(modewright.Robin, _numbers, _numbers),
    st.builds(modewright.Lump, _numbers, _numbers, _numbers),
)
_interfaces = st.builds(modewright.Interface, _numbers, _numbers, _numbers, _numbers)
_problems = st.builds(
    lambda layers, left, right, interfaces, geometry, name: modewright.Problem(
        tuple(layers), left, right, tuple(interfaces), None, geometry, name
    ),
    st.lists(_layers, min_size=1, max_size=3),
    _ends,
    _ends,
    st.lists(_interfaces, max_size=2),
    st.sampled_from(["plane", "cylindrical", "spherical"]),
    st.text(max_size=8),
)


@settings(deadline=None, derandomize=True)
@given(_problems)
def test_any_problem_survives_document_message_and_pickle(problem: modewright.Problem) -> None:
    again = modewright.Problem.from_dict(json.loads(json.dumps(problem.to_dict())))
    assert again == problem
    assert again.route == problem.route
    assert problem_from_message(message_from_problem(problem)) == problem
    assert pickle.loads(pickle.dumps(problem)) == problem


# ---- the route ----


def test_the_route_is_the_hash_of_the_sorted_document() -> None:
    text = (
        '{"geometry":"plane","layers":[{"end":1.0,"p":1.0,"q":0.0,"start":0.0,"w":1.0}],'
        '"left":{"kind":"dirichlet"},"right":{"kind":"neumann"}}'
    )
    problem = modewright.Problem.from_dict(json.loads(text))
    # From sha256sum of coreutils.
    assert problem.route == "a3727950eea4b436060a34767a2fc80475070992251c05cb9af83b51c5b58b7a"
    assert (
        modewright.Problem.from_dict({**json.loads(text), "layers": [{"end": 1, "start": -0.0}]}) == problem
    )


@pytest.mark.parametrize("change", [("film", 3.5), ("film", 3.0000000000000004)])
def test_another_number_is_another_route(change: tuple[str, float]) -> None:
    document = copy.deepcopy(PLAIN)
    document["left"][change[0]] = change[1]
    assert modewright.Problem.from_dict(document).route != modewright.Problem.from_dict(PLAIN).route


# ---- complaints ----


def _changed(path: str, value: Any, document: dict[str, Any] = PLAIN) -> dict[str, Any]:
    changed = copy.deepcopy(document)
    *parents, last = (int(part) if part.isdigit() else part for part in path.split("/"))
    target: Any = changed
    for parent in parents:
        target = target[parent]
    if value is None:
        del target[last]
    else:
        target[last] = value
    return changed


BAD: dict[str, tuple[dict[str, Any], str, str]] = {
    "unknown field": (_changed("layer", []), "layer", "did you mean layers"),
    "unknown field of a layer": (_changed("layers/0/rho", 1.0), "layers[0].rho", "known are"),
    "no left end": (_changed("left", None), "left", "is missing"),
    "no layers": (_changed("layers", None), "layers", "is missing"),
    "empty layers": (_changed("layers", []), "layers", "at least one"),
    "layers that are no list": (_changed("layers", 3), "layers", "must be a list, not 3"),
    "a layer that is no table": (_changed("layers/0", 3), "layers[0]", "table"),
    "no end of a layer": (_changed("layers/1/end", None), "layers[1].end", "is missing"),
    "text for a number": (_changed("layers/1/end", "one"), "layers[1].end", "must be a number"),
    "a flag for a number": (_changed("layers/1/end", True), "layers[1].end", "not True"),
    "NaN": (_changed("layers/0/start", math.nan), "layers[0].start", "nan"),
    "an enormous integer": (_changed("layers/0/p", 10**400), "layers[0].p", "too large"),
    "an infinite film": (_changed("left/film", math.inf), "left.film", "inf"),
    "no kind": (_changed("left", {"film": 2.0}), "left.kind", "dirichlet, neumann"),
    "unknown kind": (_changed("left/kind", "fixed"), "left.kind", "'fixed'"),
    "a number of another kind": (_changed("left/alpha", 1.0), "left.alpha", "not a field"),
    "no film": (_changed("left/film", None), "left.film", "is missing"),
    "unknown geometry": (_changed("geometry", "planar"), "geometry", "'planar'"),
    "empty expression": (_changed("layers/0/p", " "), "layers[0].p", "empty"),
    "a list for a coefficient": (_changed("layers/0/p", [1, 2]), "layers[0].p", "expression"),
    "neither samples nor file": (_changed("layers/0/p", {}), "layers[0].p", "samples or a file"),
    "lengths that differ": (_changed("layers/1/p/samples/x", [0.5, 1.0]), "layers[1].p.samples.values", "3"),
    "one sample": (
        _changed("layers/1/p/samples", {"x": [1], "values": [1]}),
        "layers[1].p.samples.x",
        "at least 2",
    ),
    "text among the samples": (
        _changed("layers/1/p/samples/x", [0.5, "a", 1.0]),
        "layers[1].p.samples.x",
        "list of numbers",
    ),
    "unknown interpolation": (
        _changed("layers/1/p/samples/interpolation", "spline"),
        "layers[1].p.samples.interpolation",
        "'spline'",
    ),
    "an unreadable file": (_changed("layers/0/p", {"file": "absent.csv"}), "layers[0].p.file", "absent.csv"),
    "ends beside a coupling": (_changed("coupling", {"kind": "periodic"}), "left", "left out"),
    "a phase of a periodic coupling": (
        {"layers": PLAIN["layers"], "coupling": {"kind": "periodic", "phase": 1.0}},
        "coupling.phase",
        "bloch",
    ),
    "an interface without x": (_changed("interfaces", [{"mass": 1.0}]), "interfaces[0].x", "is missing"),
    "a stack beside layers": ({**STACK, "layers": []}, "layers", "without a stack"),
    "a thickness of zero": (
        _changed("stack/layers/1/thickness", 0.0, STACK),
        "stack.layers[1].thickness",
        "positive",
    ),
    "no conductivity": (
        _changed("stack/layers/0/conductivity", None, STACK),
        "stack.layers[0].conductivity",
        "is missing",
    ),
    "a contact behind the last layer": (
        _changed("stack/layers/2/contact_resistance", 0.1, STACK),
        "stack.layers[2].contact_resistance",
        "0.1",
    ),
    "a negative inner radius": (_changed("stack/start", -0.1, STACK), "stack.start", "-0.1"),
    "a thickness that vanishes": (
        _changed("stack/layers/1/thickness", 1e-20, STACK),
        "stack.layers[1].thickness",
        "1e-20",
    ),
    "no outer face": (_changed("stack/outer", None, STACK), "stack.outer", "is missing"),
}


@pytest.mark.parametrize("name", sorted(BAD))
def test_a_bad_document_names_the_field_and_the_value(name: str) -> None:
    document, field, text = BAD[name]
    with pytest.raises(modewright.InvalidProblem) as caught:
        modewright.Problem.from_dict(document)
    found = {violation.field: str(violation) for violation in caught.value.violations}
    assert field in found
    assert text in found[field]
    assert caught.value.reason


def test_all_complaints_come_at_once() -> None:
    document = _changed("layers/0/p", [], _changed("left/kind", "fixed", _changed("geometry", 1)))
    with pytest.raises(modewright.InvalidProblem) as caught:
        modewright.Problem.from_dict(document)
    assert {violation.field for violation in caught.value.violations} >= {"layers[0].p", "left.kind"}


# ---- files ----


def test_samples_from_csv_and_npz_relative_to_the_document(tmp_path: Path) -> None:
    folder = tmp_path / "tables"
    folder.mkdir()
    x, values = np.array([0.0, 0.25, 1.0]), np.array([1.0, 1.5, 0.1 + 0.2])
    rows = "".join(f"{a!r}, 9, {b!r}\n" for a, b in zip(x.tolist(), values.tolist(), strict=True))
    (folder / "a.csv").write_text(f"# measured\nradius, count, k\n\n{rows}", encoding="utf-8")
    np.savez(folder / "b.npz", r=x, k=values)
    document = {
        "layers": [
            {
                "start": 0,
                "end": 1,
                "p": {"file": "tables/a.csv", "columns": ["radius", "k"], "interpolation": "monotone-cubic"},
                "q": {"file": "tables/a.csv", "columns": [0, 2]},
                "w": {"file": "tables/b.npz", "columns": ["r", "k"]},
            }
        ],
        "left": {"kind": "neumann"},
        "right": {"kind": "neumann"},
    }
    path = tmp_path / "problem.json"
    path.write_text(json.dumps(document), encoding="utf-8")
    layer = modewright.Problem.load(path).layers[0]
    assert layer.p == modewright.Samples(x, values, "monotone-cubic")
    assert layer.q == layer.w == modewright.Samples(x, values)


@pytest.mark.parametrize(
    ("content", "columns", "message"),
    [
        ("a,b\n1,2\n", ["a", "c"], "'c' is not a column"),
        ("1,2\n3,4\n", [0, 5], "5 is not a column"),
        ("a,b\n1,2\n3\n", None, "row 2 is not two numbers"),
        ("", None, "no rows"),
        ("a,b\n1,2\n3,4\n", ["a"], "two names or two numbers"),
    ],
)
def test_an_unusable_table_says_why(tmp_path: Path, content: str, columns: Any, message: str) -> None:
    (tmp_path / "t.csv").write_text(content, encoding="utf-8")
    document = _changed("layers/0/p", {"file": "t.csv", **({"columns": columns} if columns else {})})
    with pytest.raises(modewright.InvalidProblem, match="layers\\[0\\]") as caught:
        modewright.Problem.from_dict(document, base=tmp_path)
    assert message in str(caught.value)


@pytest.mark.parametrize(
    ("name", "content", "message"),
    [
        ("p.ini", "", "must end in .json"),
        ("p.json", "{", "not readable as JSON"),
        ("p.json", '{"layers": [{"start": 0, "end": 1, "end": 2}]}', "the key 'end' occurs twice"),
        ("p.toml", "a = ", "not readable as TOML"),
        ("p.json", "[1]", "table of named fields"),
        ("p.json", "[" * 100_000, "not readable as JSON"),
    ],
)
def test_an_unreadable_document_names_the_file(tmp_path: Path, name: str, content: str, message: str) -> None:
    (tmp_path / name).write_text(content, encoding="utf-8")
    with pytest.raises(modewright.InvalidProblem) as caught:
        modewright.Problem.load(tmp_path / name)
    assert message in str(caught.value)
    assert name in str(caught.value)


def test_an_npz_with_objects_is_not_executed(tmp_path: Path) -> None:
    np.savez(tmp_path / "t.npz", x=np.array([print, 1], dtype=object), k=np.ones(2))
    document = _changed("layers/0/p", {"file": "t.npz"})
    with pytest.raises(modewright.InvalidProblem, match="allow_pickle"):
        modewright.Problem.from_dict(document, base=tmp_path)


# ---- bounded texts ----


def test_reprs_are_bounded() -> None:
    table = modewright.Samples(np.arange(50_000.0), np.ones(50_000))
    layers = [modewright.Layer(i, i + 1, p=table) for i in range(500)]
    problem = modewright.Problem(tuple(layers), modewright.Neumann(), modewright.Neumann())
    assert len(repr(problem)) < 200
    assert len(repr(table)) < 200
