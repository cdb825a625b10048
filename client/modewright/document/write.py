"""From a Problem to its document: the canonical form, from which an equal problem is read again.

Numbers are floats, samples are inline whatever file they came from, and fields that are empty or zero by
default are left out. Infinite ends are native floats in the dictionary and the words "inf" and "-inf" in
JSON text, which has no infinities.
"""

from __future__ import annotations

import json
import math
from dataclasses import fields
from typing import Any

from modewright.problem import Coefficient, End, Interface, Layer, Problem, Samples
from modewright.stack import Stack, StackLayer

__all__ = ["document_from_problem", "json_text"]


def document_from_problem(problem: Problem) -> dict[str, Any]:
    """The document of a problem, as fresh dictionaries and lists."""
    document: dict[str, Any] = {"name": problem.name} if problem.name else {}
    if problem.stack is not None:
        document["stack"] = _stack(problem.stack)
        return document
    document["geometry"] = problem.geometry
    document["layers"] = [_layer(layer) for layer in problem.layers]
    if problem.left is not None:
        document["left"] = _end(problem.left)
    if problem.right is not None:
        document["right"] = _end(problem.right)
    if problem.interfaces:
        document["interfaces"] = [_interface(interface) for interface in problem.interfaces]
    if problem.coupling is not None:
        document["coupling"] = {"kind": problem.coupling.kind}
        if problem.coupling.kind == "bloch":
            document["coupling"]["phase"] = problem.coupling.phase
    return document


def json_text(problem: Problem) -> str:
    """The document as JSON text of the standard, without infinities or NaN."""
    return json.dumps(_finite(document_from_problem(problem)), indent=2, allow_nan=False) + "\n"


def _finite(value: Any) -> Any:
    if isinstance(value, dict):
        return {key: _finite(item) for key, item in value.items()}
    if isinstance(value, list):
        return [_finite(item) for item in value]
    if isinstance(value, float) and math.isinf(value):
        return "inf" if value > 0 else "-inf"
    return value


def _coefficient(value: Coefficient) -> Any:
    if isinstance(value, Samples):
        x, values = value.x.tolist(), value.values.tolist()
        return {"samples": {"x": x, "values": values, "interpolation": value.interpolation}}
    return value


def _layer(layer: Layer) -> dict[str, Any]:
    document: dict[str, Any] = {"name": layer.name} if layer.name else {}
    document |= {"start": layer.start, "end": layer.end}
    document |= {name: _coefficient(getattr(layer, name)) for name in ("p", "q", "w")}
    if layer.reciprocal_p:
        document["reciprocal_p"] = True
    return document


def _end(end: End) -> dict[str, Any]:
    return {"kind": end.kind, **{item.name: getattr(end, item.name) for item in fields(end)}}


def _interface(interface: Interface) -> dict[str, Any]:
    numbers = {name: getattr(interface, name) for name in ("resistance", "spring", "mass")}
    return {"x": interface.x, **{name: number for name, number in numbers.items() if number}}


def _stack(stack: Stack) -> dict[str, Any]:
    return {
        "geometry": stack.geometry,
        "start": stack.start,
        "layers": [_stack_layer(layer) for layer in stack.layers],
        "inner": _end(stack.inner),
        "outer": _end(stack.outer),
    }


def _stack_layer(layer: StackLayer) -> dict[str, Any]:
    document: dict[str, Any] = {"name": layer.name} if layer.name else {}
    document["thickness"] = layer.thickness
    document["conductivity"] = _coefficient(layer.conductivity)
    document["heat_capacity"] = _coefficient(layer.heat_capacity)
    if layer.contact_resistance:
        document["contact_resistance"] = layer.contact_resistance
    return document
