"""The contract's promises that can be read off its text, against the code."""

from __future__ import annotations

import pytest

from modewright.v1 import eigenbasis_service_pb2, errors_pb2
from modewright_service.core.errors import Reason
from modewright_service.rpc.eigenbasis import EigenbasisServicer, drafted_methods
from modewright_service.rpc.status import CODES
from tests.contract import source

PREFIX = "ERROR_REASON_"


def test_the_core_repeats_the_registry_of_reasons() -> None:
    names = errors_pb2.ErrorReason.DESCRIPTOR.values_by_name
    registered = {name.removeprefix(PREFIX) for name in names}
    assert registered == {"UNSPECIFIED", *Reason}


def test_every_reason_is_under_a_heading_that_names_its_status() -> None:
    statuses = source.reason_statuses()
    assert set(statuses) == {reason.value for reason in Reason}
    assert all(statuses.values())


@pytest.mark.parametrize("reason", list(Reason))
def test_a_reason_travels_with_the_status_the_contract_says(reason: Reason) -> None:
    assert {CODES[reason].name} == source.reason_statuses()[reason.value]


def test_draft_calls_are_those_the_service_does_not_answer() -> None:
    assert set(drafted_methods()) == source.drafted_calls()


def test_every_call_has_its_own_request_and_response() -> None:
    methods = eigenbasis_service_pb2.DESCRIPTOR.services_by_name["EigenbasisService"].methods
    messages = [message.name for method in methods for message in (method.input_type, method.output_type)]
    assert len(set(messages)) == len(messages) == 2 * len(source.commented_calls())


def test_what_the_service_answers_is_in_the_contract() -> None:
    answered = set(source.commented_calls()) - source.drafted_calls()
    assert answered == {name for name in vars(EigenbasisServicer) if name[0].isupper()}
