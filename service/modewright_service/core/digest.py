"""Keys: what a problem is, what a basis of it is, and which sizes bases are made in.

A problem's digest is the SHA-256 of our own canonical encoding of its resolved content: a schema tag, strings
with their length, integers and IEEE-754 doubles little-endian, -0 written as 0, NaN refused. Ends and
interfaces enter as resolved (geometry applied), expressions as their parsed program: white space,
parentheses and the spelling of a literal make no difference, and an expression that is only a number is
that number.
"""

from __future__ import annotations

import hashlib
import math
import struct
from collections.abc import Iterable
from typing import Final

import numpy as np

from modewright_service.core.description import Coefficient, Constant, Expression, Samples
from modewright_service.core.errors import InvalidProblem, InvalidRequest, Reason
from modewright_service.core.expressions import parse
from modewright_service.core.problem import EndTerm, Problem, resolve
from modewright_service.core.selection import Lowest, Selection

__all__ = [
    "ALGORITHM_VERSION",
    "DEFAULT_RTOL",
    "RTOL_RUNGS",
    "basis_key",
    "canonical_bytes",
    "problem_digest",
    "rtol_rung",
    "rung",
    "selection_key",
]

# Raised whenever equal requests may be answered with other numbers than before.
ALGORITHM_VERSION: Final = "1"
_SCHEMA: Final = "modewright problem 1"
_BASIS_SCHEMA: Final = "modewright basis 1"
RTOL_RUNGS: Final = (1e-6, 1e-9, 1e-12)
DEFAULT_RTOL: Final = 1e-9
_FIRST_RUNG: Final = 8


class _Writer:
    """Appends typed values; every string and list is preceded by its length, so no two contents coincide."""

    def __init__(self) -> None:
        self.parts: list[bytes] = []

    def text(self, value: str) -> None:
        data = value.encode("utf-8")
        self.integer(len(data))
        self.parts.append(data)

    def integer(self, value: int) -> None:
        self.parts.append(struct.pack("<q", value))

    def numbers(self, values: Iterable[float]) -> None:
        array = np.asarray(list(values), dtype="<f8") + 0.0
        if np.isnan(array).any():
            raise InvalidProblem.at(Reason.NOT_FINITE, "problem", "a number is NaN", "nan")
        self.integer(array.size)
        self.parts.append(array.tobytes())

    def coefficient(self, coefficient: Coefficient) -> None:
        match coefficient:
            case Constant(value):
                self.text("constant")
                self.numbers([value])
            case Expression(text):
                steps = parse(text).steps
                if len(steps) == 1 and steps[0].name == "number":
                    self.coefficient(Constant(steps[0].value))
                    return
                self.text("expression")
                self.integer(len(steps))
                for step in steps:
                    self.text(step.name)
                    self.integer(len(step.operands))
                    for operand in step.operands:
                        self.integer(operand)
                    self.numbers([step.value])
            case Samples(x, values, interpolation):
                self.text("samples")
                self.text(str(interpolation))
                self.numbers(x)
                self.numbers(values)

    def end(self, end: EndTerm) -> None:
        self.text(end.kind)
        self.integer(int(end.dirichlet))
        self.numbers([end.stiffness, end.mass, *(end.lump or ())])


def canonical_bytes(problem: Problem) -> bytes:
    """The canonical encoding of a validated problem.

    Raises InvalidProblem on NaN and on expressions that do not parse, Unsupported on ends that do not
    resolve.
    """
    resolved = resolve(problem)
    out = _Writer()
    out.text(_SCHEMA)
    out.integer(problem.geometry.power)
    out.numbers(resolved.layer_edges)
    out.integer(len(problem.layers))
    for layer in problem.layers:
        out.text(layer.name)
        out.integer(int(layer.reciprocal_p))
        for coefficient in (layer.p, layer.q, layer.w):
            out.coefficient(coefficient)
    out.end(resolved.left)
    out.end(resolved.right)
    out.integer(len(resolved.joints))
    for joint in resolved.joints:
        out.numbers([joint.x, joint.resistance, joint.spring, joint.mass])
    if resolved.factor is not None:
        out.text("coupled")
        out.numbers([resolved.factor.real, resolved.factor.imag])
    return b"".join(out.parts)


def problem_digest(problem: Problem) -> str:
    """SHA-256 of :func:`canonical_bytes`, 64 hexadecimal digits."""
    return hashlib.sha256(canonical_bytes(problem)).hexdigest()


def rung(modes: int) -> int:
    """The number of modes a request for `modes` is solved for: 8, 12, 16, 24, 32, 48, ... (ratio <= 1.5).

    Raises InvalidRequest below 1.
    """
    if modes < 1:
        raise InvalidRequest.at(
            Reason.BAD_REQUEST, "modes", "at least one mode must be asked for", str(modes)
        )
    step = _FIRST_RUNG
    while True:
        if modes <= step:
            return step
        if modes <= step + step // 2:
            return step + step // 2
        step *= 2


def rtol_rung(rtol: float) -> float:
    """The next tighter of 1e-6, 1e-9, 1e-12.

    Raises InvalidRequest outside [1e-12, 1).
    """
    if not math.isfinite(rtol) or not RTOL_RUNGS[-1] <= rtol < 1.0:
        raise InvalidRequest.at(
            Reason.BAD_TOLERANCE, "rtol", f"must be at least {RTOL_RUNGS[-1]:g} and below 1", repr(rtol)
        )
    return next(step for step in RTOL_RUNGS if step <= rtol or step == RTOL_RUNGS[-1])


def basis_key(digest: str, modes: int, rtol: float) -> str:
    """Key of the lowest `modes` (a rung) of the problem with this digest, at the rung rtol."""
    out = _Writer()
    out.text(_BASIS_SCHEMA)
    out.text(digest)
    out.text(ALGORITHM_VERSION)
    out.integer(modes)
    out.numbers([rtol])
    return hashlib.sha256(b"".join(out.parts)).hexdigest()


def selection_key(digest: str, selection: Selection, rtol: float) -> str:
    """Key of a selection of the problem with this digest, at the rung rtol: that of :func:`basis_key` for the
    lowest, whose number must be a rung.
    """
    if isinstance(selection, Lowest):
        return basis_key(digest, selection.count, rtol)
    out = _Writer()
    out.text(_BASIS_SCHEMA)
    out.text(digest)
    out.text(ALGORITHM_VERSION)
    word, numbers = selection.canonical
    out.text(word)
    out.numbers([*numbers, rtol])
    return hashlib.sha256(b"".join(out.parts)).hexdigest()
