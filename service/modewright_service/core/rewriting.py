"""Quotients rewritten so that they neither overflow nor look singular to circular arithmetic.

``exp(u)/(c + exp(u))`` overflows to inf/inf for large u, and a disc around exp(u) whose radius in u
passes log 2 holds zero although 1 + exp(u) is far from it. A division whose factors include such terms
becomes a product of

    exp(u)^n              ->  exp(n u)
    cosh(u)^-n            ->  sech(u)^n
    1/(c + exp(u))        ->  logistic(log c - u)/c        (literal c > 0)
    exp(u)/(c + exp(u))   ->  logistic(u - log c)

The rewritten program has the same value; digests are made from the original.
"""

from __future__ import annotations

from functools import lru_cache

from .expressions import Builder, Instruction, Program

_MAX_POWER = 64


@lru_cache(maxsize=512)
def smooth_form(program: Program) -> Program:
    """``program`` with its quotients rewritten; the same object when there is nothing to rewrite."""
    if not any(step.name == "/" for step in program.steps) or not any(
        step.name in ("exp", "cosh") for step in program.steps
    ):
        return program
    builder = Builder()
    place: list[int] = []
    for step in program.steps:
        operands = tuple(place[operand] for operand in step.operands)
        index = builder.add(step.name, *operands, value=step.value)
        if step.name == "/":
            index = _rewritten(builder, index)
        place.append(index)
    return builder.program(place[-1])


class _Factors:
    """A product as exponents of steps, in order of first appearance."""

    def __init__(self, builder: Builder, root: int) -> None:
        self.builder = builder
        self.sign = 1
        self.exponents: dict[int, int] = {}
        pending = [(root, 1)]
        while pending:
            index, exponent = pending.pop()
            step = builder.steps[index]
            if step.name in ("*", "/"):
                left, right = step.operands
                pending.append((right, exponent if step.name == "*" else -exponent))
                pending.append((left, exponent))
            elif step.name == "neg":
                self.sign *= -1 if exponent % 2 else 1
                pending.append((step.operands[0], exponent))
            elif (power := _whole_power(builder, step)) is not None:
                pending.append((step.operands[0], exponent * power))
            else:
                self.exponents[index] = self.exponents.get(index, 0) + exponent

    def take(self, index: int, count: int) -> None:
        self.exponents[index] -= count


def _whole_power(builder: Builder, step: Instruction) -> int | None:
    if step.name != "**":
        return None
    exponent = builder.steps[step.operands[1]]
    if exponent.name != "number" or not exponent.value.is_integer():
        return None
    return int(exponent.value) if 1 <= exponent.value <= _MAX_POWER else None


def _shifted_exponential(builder: Builder, index: int) -> tuple[int, int] | None:
    """(c, exp step) of a step c + exp(u) with a literal c > 0."""
    step = builder.steps[index]
    if step.name != "+":
        return None
    for constant, exponential in (step.operands, step.operands[::-1]):
        first, second = builder.steps[constant], builder.steps[exponential]
        if first.name == "number" and first.value > 0 and second.name == "exp":
            return constant, exponential
    return None


def _rewritten(builder: Builder, root: int) -> int:
    factors = _Factors(builder, root)
    made: list[tuple[int, int]] = []
    for index, exponent in list(factors.exponents.items()):
        step = builder.steps[index]
        if exponent < 0 and step.name == "cosh":
            made.append((builder.add("sech", step.operands[0]), -exponent))
            factors.take(index, exponent)
        elif exponent < 0 and (found := _shifted_exponential(builder, index)) is not None:
            made.extend(_logistic_factors(builder, factors, found, -exponent))
            factors.take(index, exponent)
    for index, exponent in list(factors.exponents.items()):
        step = builder.steps[index]
        if step.name == "exp" and exponent < 0:
            argument = builder.add("neg", step.operands[0])
            made.append((builder.add("exp", argument), -exponent))
            factors.take(index, exponent)
    if not made:
        return root
    made.extend((index, exponent) for index, exponent in factors.exponents.items() if exponent)
    return _product(builder, made, factors.sign)


def _logistic_factors(
    builder: Builder, factors: _Factors, found: tuple[int, int], count: int
) -> list[tuple[int, int]]:
    """The factors that replace (c + exp(u))^-count, with as many exp(u) as the product offers."""
    constant, exponential = found
    argument = builder.steps[exponential].operands[0]
    is_one = builder.steps[constant].value == 1.0
    paired = min(count, max(factors.exponents.get(exponential, 0), 0))
    made = []
    if paired:
        factors.take(exponential, paired)
        shifted = argument if is_one else builder.add("-", argument, builder.add("log", constant))
        made.append((builder.add("logistic", shifted), paired))
    if count > paired:
        shifted = (
            builder.add("neg", argument)
            if is_one
            else builder.add("-", builder.add("log", constant), argument)
        )
        made.append((builder.add("logistic", shifted), count - paired))
        if not is_one:
            made.append((constant, paired - count))
    return made


def _product(builder: Builder, factors: list[tuple[int, int]], sign: int) -> int:
    result: int | None = None
    for index, exponent in sorted(factors, key=lambda factor: factor[1] < 0):
        power = index if abs(exponent) == 1 else builder.add("**", index, builder.number(abs(exponent)))
        if result is None:
            result = power if exponent > 0 else builder.add("/", builder.number(1.0), power)
        else:
            result = builder.add("*" if exponent > 0 else "/", result, power)
    assert result is not None
    return result if sign > 0 else builder.add("neg", result)
