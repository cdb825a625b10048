"""Problems to and from the contract's messages: the only translation, used by every call.

The two forms have the same field names; words of the document are the messages' enum names in lower case with
hyphens, without their prefix.
"""

from __future__ import annotations

from dataclasses import fields
from typing import Any

import numpy as np

from modewright.checks import Checks
from modewright.problem import (
    END_KINDS,
    Coefficient,
    Coupling,
    End,
    Interface,
    Layer,
    Problem,
    Samples,
)
from modewright.v1 import problem_pb2 as pb

__all__ = ["message_from_problem", "number_of", "problem_from_message", "word_of"]


def number_of(enum: Any, prefix: str, word: str) -> Any:
    """The enum value of a document's word: ("END_KIND", "film") is END_KIND_FILM."""
    return enum.Value(f"{prefix}_{word.replace('-', '_').upper()}")


def word_of(enum: Any, prefix: str, number: int) -> str:
    """The document's word of an enum value; "unspecified" for 0, the number itself where it is unknown."""
    try:
        name: str = enum.Name(number)
    except ValueError:
        return str(number)
    return name.removeprefix(f"{prefix}_").lower().replace("_", "-")


# ---- to messages ----


def message_from_problem(problem: Problem) -> pb.Problem:
    """The message of a problem. A stack's layers go as plain layers."""
    message = pb.Problem(
        name=problem.name,
        geometry=number_of(pb.Geometry, "GEOMETRY", problem.geometry),
        layers=[_layer_message(layer) for layer in problem.layers],
        interfaces=[
            pb.Interface(x=at.x, resistance=at.resistance, spring=at.spring, mass=at.mass)
            for at in problem.interfaces
        ],
    )
    if problem.left is not None:
        message.left.CopyFrom(_end_message(problem.left))
    if problem.right is not None:
        message.right.CopyFrom(_end_message(problem.right))
    if problem.coupling is not None:
        kind = number_of(pb.CouplingKind, "COUPLING_KIND", problem.coupling.kind)
        message.coupling.CopyFrom(pb.Coupling(kind=kind, phase=problem.coupling.phase))
    return message


def _layer_message(layer: Layer) -> pb.Layer:
    return pb.Layer(
        name=layer.name,
        start=layer.start,
        end=layer.end,
        p=_coefficient_message(layer.p),
        q=_coefficient_message(layer.q),
        w=_coefficient_message(layer.w),
        reciprocal_p=layer.reciprocal_p,
    )


def _coefficient_message(value: Coefficient) -> pb.Coefficient:
    if isinstance(value, Samples):
        interpolation = number_of(pb.Interpolation, "INTERPOLATION", value.interpolation)
        samples = pb.Samples(x=value.x, values=value.values, interpolation=interpolation)
        return pb.Coefficient(samples=samples)
    if isinstance(value, str):
        return pb.Coefficient(expression=value)
    return pb.Coefficient(constant=value)


def _end_message(end: End) -> pb.EndCondition:
    message = pb.EndCondition(kind=number_of(pb.EndKind, "END_KIND", end.kind))
    for item in fields(end):
        setattr(message, item.name, getattr(end, item.name))
    return message


# ---- from messages ----


def problem_from_message(message: pb.Problem) -> Problem:
    """The problem of a message. Raises InvalidProblem for a message that misses what a problem needs."""
    geometry = word_of(pb.Geometry, "GEOMETRY", message.geometry)
    coupling = None
    if message.HasField("coupling"):
        kind = word_of(pb.CouplingKind, "COUPLING_KIND", message.coupling.kind)
        coupling = Coupling(kind, message.coupling.phase)
    return Problem(
        layers=tuple(_layer(layer) for layer in message.layers),
        left=_end(message.left) if message.HasField("left") else None,
        right=_end(message.right) if message.HasField("right") else None,
        interfaces=tuple(Interface(at.x, at.resistance, at.spring, at.mass) for at in message.interfaces),
        coupling=coupling,
        geometry="plane" if geometry == "unspecified" else geometry,
        name=message.name,
    )


def _layer(message: pb.Layer) -> Layer:
    return Layer(
        start=message.start,
        end=message.end,
        p=_coefficient(message, "p", 1.0),
        q=_coefficient(message, "q", 0.0),
        w=_coefficient(message, "w", 1.0),
        name=message.name,
        reciprocal_p=message.reciprocal_p,
    )


def _coefficient(layer: pb.Layer, name: str, default: float) -> Coefficient:
    if not layer.HasField(name):
        return default
    message: pb.Coefficient = getattr(layer, name)
    form = message.WhichOneof("form")
    if form == "constant":
        return message.constant
    if form == "expression":
        return message.expression
    if form == "samples":
        interpolation = word_of(pb.Interpolation, "INTERPOLATION", message.samples.interpolation)
        return Samples(
            np.asarray(message.samples.x, dtype=np.float64),
            np.asarray(message.samples.values, dtype=np.float64),
            "linear" if interpolation == "unspecified" else interpolation,
        )
    checks = Checks(reason="INVALID_COEFFICIENT")
    checks.wrong(name, "has no form")
    checks.finish()
    raise AssertionError("unreachable")


def _end(message: pb.EndCondition) -> End:
    word = word_of(pb.EndKind, "END_KIND", message.kind)
    checks = Checks(reason="BAD_END_CONDITION")
    checks.choice("kind", word, END_KINDS)
    checks.finish()
    kind = END_KINDS[word]
    numbers = {item.name: getattr(message, item.name) for item in fields(kind)}
    return kind(**numbers)
