"""Running a program on discs, with the branches of abs, min, max, sign, step and where either fixed
for every element (so that the coefficient is analytic there) or covered by the hull of both.
"""

from __future__ import annotations

from collections.abc import Mapping
from functools import lru_cache
from typing import Any

import numpy as np

from . import discs
from .discs import Array, Disc
from .expressions import Instruction, Program

# Steps whose value switches with the sign of an argument.
SWITCHES = ("abs", "sign", "step", "min", "max", "where<", "where<=", "where>", "where>=")
# Higher powers in a product chain are rare and gain nothing over exp(n log a).
MAX_INTEGER_POWER = 64

Signs = Mapping[int, Array]


def switches(program: Program) -> list[int]:
    """The steps of ``program`` that switch."""
    return [index for index, step in enumerate(program.steps) if step.name in SWITCHES]


def run(
    program: Program,
    x: Disc,
    samples: Disc | None = None,
    signs: Signs | None = None,
    arguments: dict[int, Disc] | None = None,
) -> Disc:
    """The value of ``program`` on the discs ``x``.

    ``samples`` is the table's value on the same discs, for programs that use one. ``signs`` maps every
    switching step to the sign (-1, 0, 1) of its argument, broadcastable to ``x``; without it both
    branches are covered where the sign is open (real centres only). ``arguments``, if given, receives
    the switching steps' arguments. Undefined results have centre 0 and an infinite radius.
    """
    values: list[Disc] = []
    with np.errstate(all="ignore"):
        for index, step in enumerate(program.steps):
            inputs = [values[operand] for operand in step.operands]
            if step.name in SWITCHES:
                argument = discs.sub(inputs[0], inputs[1]) if step.name in ("min", "max") else inputs[0]
                if arguments is not None:
                    arguments[index] = argument
                sign = None if signs is None else signs[index]
                values.append(_switch(step.name, argument, inputs, sign))
            else:
                values.append(_plain(step, inputs, x, samples, program))
        result = discs.settled(values[-1])
    shape = np.broadcast_shapes(result.centre.shape, x.centre.shape)
    return Disc(np.broadcast_to(result.centre, shape), np.broadcast_to(result.radius, shape))


def _plain(step: Instruction, inputs: list[Disc], x: Disc, samples: Disc | None, program: Program) -> Disc:
    name = step.name
    if name == "number":
        return discs.exact(np.asarray(step.value, dtype=x.centre.dtype))
    if name == "x":
        return x
    if name == "samples":
        if samples is None:
            raise ValueError("this program needs the values of its table")
        return samples
    if name == "**":
        return _power(step, inputs, program)
    if name in discs.OPERATIONS:
        return discs.OPERATIONS[name](inputs[0], inputs[1])
    return discs.FUNCTIONS[name](inputs[0])


def _power(step: Instruction, inputs: list[Disc], program: Program) -> Disc:
    exponent = _literal(program, step.operands[1])
    if exponent is not None and (abs(exponent) <= MAX_INTEGER_POWER or not exponent.is_integer()):
        return discs.power(inputs[0], exponent)
    return discs.exp(discs.mul(inputs[1], discs.log(inputs[0])))


def _literal(program: Program, index: int) -> float | None:
    """The value of a step that is a literal, possibly negated."""
    step = program.steps[index]
    if step.name == "number":
        return step.value
    if step.name == "neg":
        inner = _literal(program, step.operands[0])
        return None if inner is None else -inner
    if step.name == "/":
        top, bottom = (_literal(program, operand) for operand in step.operands)
        return None if top is None or not bottom else top / bottom
    return None


def _switch(name: str, argument: Disc, inputs: list[Disc], sign: Array | None) -> Disc:
    if sign is not None:
        return _branch(name, sign, inputs)
    if name == "abs":
        return _real_abs(argument)
    if name in ("min", "max"):
        pick = np.minimum if name == "min" else np.maximum
        a, b = inputs
        return discs.interval(pick(discs.low(a), discs.low(b)), pick(discs.high(a), discs.high(b)))
    known = discs.settled(argument)
    positive, negative = discs.low(known) > 0, discs.high(known) < 0
    up = _branch(name, np.ones_like(known.radius), inputs)
    down = _branch(name, -np.ones_like(known.radius), inputs)
    at_zero = _branch(name, np.zeros_like(known.radius), inputs)
    both = discs.hull(discs.hull(up, down), at_zero)
    chosen = discs.choose(positive, up, discs.choose(negative, down, both))
    return discs.choose(
        np.isfinite(known.radius), chosen, Disc(chosen.centre, np.full_like(known.radius, np.inf))
    )


def _branch(name: str, sign: Array, inputs: list[Disc]) -> Disc:
    """The value of a switching step whose argument has this sign."""
    if name == "abs":
        return Disc(np.where(sign < 0, -inputs[0].centre, inputs[0].centre), inputs[0].radius)
    if name in ("min", "max"):
        first = sign <= 0 if name == "min" else sign >= 0
        return discs.choose(first, inputs[0], inputs[1])
    if name in ("sign", "step"):
        value = np.asarray(sign if name == "sign" else sign >= 0, dtype=inputs[0].centre.dtype)
        known = np.where(np.isfinite(inputs[0].radius), 0, np.inf)
        return Disc(value, known.astype(inputs[0].radius.dtype))
    holds = {"where<": sign < 0, "where<=": sign <= 0, "where>": sign > 0, "where>=": sign >= 0}[name]
    return discs.choose(holds, inputs[1], inputs[2])


def _real_abs(a: Disc) -> Disc:
    lowest, highest = discs.low(a), discs.high(a)
    bottom = np.maximum(np.maximum(lowest, -highest), 0)
    folded = discs.interval(bottom, np.maximum(-lowest, highest))
    return discs.choose(lowest >= 0, a, discs.choose(highest <= 0, discs.neg(a), folded))


def uses(program: Program, name: str) -> bool:
    """Whether some step of ``program`` has this name."""
    return any(step.name == name for step in program.steps)


@lru_cache(maxsize=512)
def constant_value(program: Program) -> float | None:
    """The value of a program without x and samples; None if it has either. May be inf or nan."""
    if uses(program, "x") or uses(program, "samples"):
        return None
    origin = discs.exact(np.zeros((), dtype=np.longdouble))
    signs = _constant_signs(program)
    value = run(program, origin, signs=signs)
    return float(value.centre) if np.isfinite(value.radius) else float("nan")


def _constant_signs(program: Program) -> dict[int, Array]:
    origin = discs.exact(np.zeros((), dtype=np.longdouble))
    return point_signs(program, origin)


def point_signs(program: Program, x: Disc, samples: Disc | None = None) -> dict[int, Any]:
    """The signs of the switching steps' arguments at points (real centres, radius zero)."""
    signs: dict[int, Any] = {}
    for index in switches(program):
        # An argument may itself hold switches, all of which come earlier in the program.
        part = Program(program.steps[: index + 1])
        arguments: dict[int, Disc] = {}
        run(part, x, samples, {**signs, index: np.ones(())}, arguments)
        argument = arguments[index]
        signs[index] = np.broadcast_to(np.sign(argument.centre), x.centre.shape)
    return signs


def degree(program: Program, samples_degree: int | None = None) -> int | None:
    """A degree in x of a program that is a polynomial; None if it is not one.

    ``samples_degree`` is that of the pieces of the table, where the program uses one.
    """
    degrees: list[int | None] = []
    for step in program.steps:
        known = [degrees[operand] for operand in step.operands]
        found = samples_degree if step.name == "samples" else _step_degree(step, known, program)
        degrees.append(found)
    return degrees[-1]


def _step_degree(step: Instruction, known: list[int | None], program: Program) -> int | None:
    if step.name == "number":
        return 0
    if step.name == "x":
        return 1
    if step.name in SWITCHES or not known or any(d is None for d in known):
        return None
    degrees = [d for d in known if d is not None]
    if step.name in ("+", "-", "neg"):
        return max(degrees)
    if step.name == "*":
        return sum(degrees)
    if step.name == "/":
        return degrees[0] if degrees[1] == 0 else None
    if step.name == "**":
        exponent = _literal(program, step.operands[1])
        if exponent is not None and exponent.is_integer() and 0 <= exponent <= MAX_INTEGER_POWER:
            return degrees[0] * int(exponent)
    return 0 if max(degrees) == 0 else None
