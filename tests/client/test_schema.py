"""The committed JSON Schema and the parser say the same about documents.

They may differ only where a schema cannot follow: in what a file of samples holds, in lengths that must
agree, and in sums of thicknesses. Such documents are listed here by name.
"""

from __future__ import annotations

import json
from importlib import resources
from typing import Any

import jsonschema
import pytest

import modewright
from modewright.document.messages import message_from_problem
from modewright.problem import END_KINDS, GEOMETRIES, INTERPOLATIONS
from modewright.v1 import problem_pb2
from tests.client.documents import GOOD
from tests.client.test_documents import BAD

SCHEMA: dict[str, Any] = json.loads(
    resources.files("modewright.document").joinpath("problem.schema.json").read_text(encoding="utf-8")
)
VALIDATOR = jsonschema.Draft202012Validator(SCHEMA)

# What only the parser can see.
BEYOND_THE_SCHEMA = {
    "NaN",
    "an infinite film",
    "an enormous integer",
    "lengths that differ",
    "an unreadable file",
    "a contact behind the last layer",
    "a negative inner radius",
    "a thickness that vanishes",
}


def test_the_schema_is_a_schema() -> None:
    jsonschema.Draft202012Validator.check_schema(SCHEMA)


@pytest.mark.parametrize("name", sorted(GOOD))
def test_the_schema_accepts_what_the_parser_accepts(name: str) -> None:
    assert modewright.Problem.from_dict(GOOD[name]).to_dict() == GOOD[name]
    VALIDATOR.validate(GOOD[name])


@pytest.mark.parametrize("name", sorted(BAD))
def test_the_schema_refuses_what_the_parser_refuses(name: str) -> None:
    document, _, _ = BAD[name]
    assert VALIDATOR.is_valid(document) == (name in BEYOND_THE_SCHEMA)


def test_the_exceptions_are_real() -> None:
    assert set(BAD) >= BEYOND_THE_SCHEMA


def test_words_are_the_same_in_schema_parser_and_contract() -> None:
    definitions = SCHEMA["$defs"]
    kinds = [end["properties"]["kind"]["const"] for end in definitions["end"]["oneOf"]]
    for words, schema_words, enum, prefix in (
        (GEOMETRIES, definitions["geometry"]["enum"], problem_pb2.Geometry, "GEOMETRY"),
        (INTERPOLATIONS, definitions["interpolation"]["enum"], problem_pb2.Interpolation, "INTERPOLATION"),
        (tuple(END_KINDS), kinds, problem_pb2.EndKind, "END_KIND"),
    ):
        contract = {name.removeprefix(f"{prefix}_").lower().replace("_", "-") for name in enum.keys()}
        # coupled ends are reported as such, and asked for by a coupling of their own
        assert set(words) == set(schema_words) == contract - {"unspecified", "coupled"}


def test_field_names_are_those_of_the_contract() -> None:
    plain = set(SCHEMA["properties"]) - {"stack"}
    # Parameters are drafted in the contract and no part of documents yet.
    assert plain == set(problem_pb2.Problem.DESCRIPTOR.fields_by_name) - {"parameters"}
    layer = set(SCHEMA["$defs"]["layer"]["properties"])
    assert layer == set(problem_pb2.Layer.DESCRIPTOR.fields_by_name)
    interface = set(SCHEMA["$defs"]["interface"]["properties"])
    assert interface == set(problem_pb2.Interface.DESCRIPTOR.fields_by_name)


def test_only_the_numbers_of_a_kind_are_set_in_its_message() -> None:
    for end in SCHEMA["$defs"]["end"]["oneOf"]:
        numbers = dict.fromkeys(set(end["properties"]) - {"kind"}, 1.0)
        kind = {"kind": end["properties"]["kind"]["const"], **numbers}
        document = {"layers": [{"start": 0, "end": 1}], "left": kind, "right": {"kind": "neumann"}}
        message = message_from_problem(modewright.Problem.from_dict(document)).left
        assert {field.name for field, _ in message.ListFields()} == set(end["properties"])
