"""Reads the reference records in ``data/`` and turns them into problems of the client.

A record states a problem in the conventions of ``data/CONVENTIONS.txt``: at every end ``A u + B p u' =
0`` with ``p u'`` along +x, or ``A u + B p u' = lambda G u`` (``lambda-robin``); ``friedrichs`` is the
principal solution at a singular end, called *bounded* here. The sign of ``B`` tells the physical
condition: a spring or film of stiffness h is ``A = h, B = -1`` at the left end and ``A = h, B = +1`` at
the right one, so ``lambda-robin`` is a lump of mass ``G / |B|`` with a film ``A / |B|`` to the outside.

This module imports nothing of the tests, so that it can be loaded by its path.
"""

from __future__ import annotations

import ast
import json
import math
from pathlib import Path
from typing import Any

import modewright

DATA = Path(__file__).resolve().parent / "data"
_CONSTANTS = {"pi": math.pi, "inf": math.inf}
_FUNCTIONS = {"exp": math.exp, "sqrt": math.sqrt}


def records() -> list[dict[str, Any]]:
    """The eigenvalue records, in the order of the file."""
    return list(json.loads((DATA / "reference_problems.json").read_text(encoding="utf-8")))


def expansions() -> list[dict[str, Any]]:
    """The closed-form expansions: a function, a problem, its coefficients."""
    return list(json.loads((DATA / "expansions.json").read_text(encoding="utf-8")))


def handbook_tables() -> list[dict[str, Any]]:
    """The handbook tables, with the values as printed and as recomputed."""
    return list(json.loads((DATA / "handbook_tables.json").read_text(encoding="utf-8")))


def number(value: float | str) -> float:
    """A number of a record: a JSON number or a constant expression such as ``"pi/2"``."""
    if isinstance(value, (int, float)):
        return float(value)
    return _evaluate(ast.parse(value, mode="eval").body)


def _evaluate(node: ast.expr) -> float:
    match node:
        case ast.Constant(value=int() | float() as constant):
            return float(constant)
        case ast.Name(id=name) if name in _CONSTANTS:
            return _CONSTANTS[name]
        case ast.UnaryOp(op=ast.USub(), operand=operand):
            return -_evaluate(operand)
        case ast.BinOp(left=left, op=ast.Div(), right=right):
            return _evaluate(left) / _evaluate(right)
        case ast.BinOp(left=left, op=ast.Mult(), right=right):
            return _evaluate(left) * _evaluate(right)
        case ast.Call(func=ast.Name(id=name), args=[argument]) if name in _FUNCTIONS:
            return _FUNCTIONS[name](_evaluate(argument))
    raise ValueError(f"not a constant expression of a record: {ast.unparse(node)!r}")


def coefficient(text: str) -> float | str:
    """A coefficient of a record: a number where the text is one, else the expression itself."""
    try:
        return float(text)
    except ValueError:
        return text


def _end(end: dict[str, Any], side: str) -> dict[str, Any]:
    kind = end["kind"]
    if kind == "friedrichs":
        return {"kind": "bounded"}
    if kind == "robin":
        return {"kind": "robin", "alpha": number(end["alpha"]), "beta": number(end["beta"])}
    if kind == "lambda-robin":
        outward = number(end["beta"]) * (1.0 if side == "right" else -1.0)
        if outward <= 0.0:
            raise ValueError(f"{side} lambda-robin end with beta {end['beta']} is no lump")
        film, mass = number(end["alpha"]) / outward, number(end["gamma"]) / outward
        return {"kind": "lump", "mass": mass, "film": film}
    if kind in ("dirichlet", "neumann"):
        return {"kind": kind}
    raise ValueError(f"unknown end {kind!r}")


def _interface(interface: dict[str, Any]) -> dict[str, float]:
    names = {"x": "x", "resistance": "resistance", "delta": "spring", "mass": "mass"}
    return {names[key]: number(value) for key, value in interface.items()}


def document_from_record(record: dict[str, Any]) -> dict[str, Any]:
    """The problem document (see ``problem_from_record``)."""
    document: dict[str, Any] = {
        "layers": [
            {
                "name": f"layer-{i}",
                "start": number(layer["from"]),
                "end": number(layer["to"]),
                **{name: coefficient(layer[name]) for name in ("p", "q", "w")},
            }
            for i, layer in enumerate(record["layers"])
        ]
    }
    if "name" in record:
        document["name"] = record["name"]
    if "coupled" in record:
        coupled = record["coupled"]
        document["coupling"] = {"kind": coupled["kind"]}
        if "phase" in coupled:
            document["coupling"]["phase"] = number(coupled["phase"])
    else:
        document["left"] = _end(record["left"], "left")
        document["right"] = _end(record["right"], "right")
    if record.get("interfaces"):
        document["interfaces"] = [_interface(interface) for interface in record["interfaces"]]
    return document


def problem_from_record(record: dict[str, Any]) -> modewright.Problem:
    """The problem of one record (fields ``domain``, ``layers``, ``left``, ``right``, ``interfaces``,
    ``coupled``).

    Raises:
        ValueError: if the layers do not cover the domain, or a field is none of the conventions'.
    """
    start, end = (number(value) for value in record["domain"])
    document = document_from_record(record)
    layers = document["layers"]
    if layers[0]["start"] != start or layers[-1]["end"] != end:
        raise ValueError(f"the layers of {record.get('name')!r} do not cover its domain")
    return modewright.Problem.from_dict(document)
