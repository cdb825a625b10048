"""The exact order of a zero of a coefficient at a point, from rational power series.

A coefficient that vanishes at the end of an element (w = x**2 at 0, 1 - x**2 at 1) can be approximated
with a small *relative* error only by a polynomial that vanishes there to the same order, and whether it
does is decided exactly: a double is a rational number, and sums, products, quotients and powers of
rational series are rational. Functions are expanded where their series is rational (sin at 0, log at
1); elsewhere only "not zero" can be known, from an enclosure of the value.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from fractions import Fraction
from typing import Any

import numpy as np

from . import discs
from .evaluation import SWITCHES, run
from .expressions import Instruction, Program

# Zeros of a higher order are not followed; w = x**8 is already beyond any use known to us.
TERMS = 9
_MAX_POWER = 64


@dataclass(frozen=True)
class Local:
    """What is known at the point: the first TERMS coefficients, or else the order of the zero alone."""

    terms: tuple[Fraction, ...] | None = None
    order: int | None = None

    @property
    def zero_order(self) -> int | None:
        """The order of the zero (0: none), TERMS for one that vanishes to all known orders, None: open."""
        if self.terms is None:
            return self.order
        return next((k for k, term in enumerate(self.terms) if term), TERMS)


def zero_order(
    program: Program, x: float, signs: dict[int, int], sample_terms: tuple[Fraction, ...] | None = None
) -> int | None:
    """The order of the zero of ``program`` at ``x`` from the side on which the branches are ``signs``.

    ``sample_terms`` are the table's powers about ``x``. 0 when it is not zero there, TERMS when it
    vanishes identically as far as can be seen, None when that cannot be told.
    """
    point = discs.exact(np.asarray(x, dtype=np.longdouble))
    locals_: list[Local] = []
    for index, step in enumerate(program.steps):
        inputs = [locals_[operand] for operand in step.operands]
        known = _step(step, inputs, x, signs.get(index, 0), sample_terms)
        if known.zero_order is None and _excludes_zero(program, index, point, signs):
            known = Local(order=0)
        locals_.append(known)
    return locals_[-1].zero_order


def _excludes_zero(program: Program, index: int, point: discs.Disc, signs: dict[int, int]) -> bool:
    part = Program(program.steps[: index + 1])
    if any(step.name == "samples" for step in part.steps):
        return False
    value = run(part, point, signs={key: np.asarray(sign) for key, sign in signs.items()})
    return bool(np.abs(value.centre) > value.radius)


def _step(
    step: Instruction, inputs: list[Local], x: float, sign: int, samples: tuple[Fraction, ...] | None
) -> Local:
    name = step.name
    if name == "number":
        return _constant(Fraction(step.value))
    if name == "x":
        return Local(_padded([Fraction(x), Fraction(1)]))
    if name == "samples":
        return Local(_padded(list(samples))) if samples is not None else Local()
    if name in SWITCHES:
        return _branch(name, inputs, sign)
    if name == "neg":
        return Local(tuple(-t for t in inputs[0].terms), None) if inputs[0].terms else inputs[0]
    if name in ("+", "-"):
        return _sum(inputs[0], inputs[1], -1 if name == "-" else 1)
    if name == "*":
        return _product(inputs[0], inputs[1])
    if name == "/":
        return _quotient(inputs[0], inputs[1])
    if name == "**":
        return _power(inputs[0], inputs[1])
    return _function(name, inputs[0])


def _branch(name: str, inputs: list[Local], sign: int) -> Local:
    if name == "abs":
        return _step(Instruction("neg"), inputs[:1], 0.0, 0, None) if sign < 0 else inputs[0]
    if name in ("min", "max"):
        first = sign <= 0 if name == "min" else sign >= 0
        return inputs[0] if first else inputs[1]
    if name in ("sign", "step"):
        return _constant(Fraction(sign if name == "sign" else int(sign >= 0)))
    holds = {"where<": sign < 0, "where<=": sign <= 0, "where>": sign > 0, "where>=": sign >= 0}[name]
    return inputs[1] if holds else inputs[2]


def _padded(terms: list[Fraction]) -> tuple[Fraction, ...]:
    return tuple([*terms, *([Fraction(0)] * TERMS)][:TERMS])


def _constant(value: Fraction) -> Local:
    return Local(_padded([value]))


def _sum(a: Local, b: Local, sign: int) -> Local:
    if a.terms is not None and b.terms is not None:
        return Local(tuple(s + sign * t for s, t in zip(a.terms, b.terms, strict=True)))
    first, second = a.zero_order, b.zero_order
    if first is None or second is None or first == second:
        return Local()
    return Local(order=min(first, second))


def _product(a: Local, b: Local) -> Local:
    if a.terms is not None and b.terms is not None:
        return Local(_multiplied(a.terms, b.terms))
    first, second = a.zero_order, b.zero_order
    if first is None or second is None:
        # An exact zero stays one whatever it multiplies, as long as that is finite.
        return Local()
    return Local(order=min(first + second, TERMS))


def _multiplied(a: tuple[Fraction, ...], b: tuple[Fraction, ...]) -> tuple[Fraction, ...]:
    return tuple(sum((a[j] * b[k - j] for j in range(k + 1)), Fraction(0)) for k in range(TERMS))


def _quotient(a: Local, b: Local) -> Local:
    if b.zero_order != 0:
        return Local()
    if a.terms is None or b.terms is None:
        return Local(order=a.zero_order)
    result: list[Fraction] = []
    for k in range(TERMS):
        carried = sum((result[j] * b.terms[k - j] for j in range(k)), Fraction(0))
        result.append((a.terms[k] - carried) / b.terms[0])
    return Local(tuple(result))


def _power(base: Local, exponent: Local) -> Local:
    if exponent.terms is None or any(exponent.terms[1:]):
        return Local(order=0) if base.zero_order == 0 else Local()
    value = exponent.terms[0]
    if value.denominator != 1 or not 0 <= value <= _MAX_POWER:
        return Local(order=0) if base.zero_order == 0 else Local()
    if base.terms is None:
        return Local() if base.order is None else Local(order=min(base.order * int(value), TERMS))
    result = _padded([Fraction(1)])
    for _ in range(int(value)):
        result = _multiplied(result, base.terms)
    return Local(result)


# Power series about 0 (about 1 for log and sqrt, in the distance from 1) whose coefficients are rational.
_SERIES: dict[str, Any] = {
    "exp": lambda k: Fraction(1, math.factorial(k)),
    "sin": lambda k: Fraction((-1) ** (k // 2), math.factorial(k)) if k % 2 else Fraction(0),
    "cos": lambda k: Fraction(0) if k % 2 else Fraction((-1) ** (k // 2), math.factorial(k)),
    "sinh": lambda k: Fraction(k % 2, math.factorial(k)),
    "cosh": lambda k: Fraction(1 - k % 2, math.factorial(k)),
    "log": lambda k: Fraction((-1) ** (k + 1), k) if k else Fraction(0),
}


def _function(name: str, argument: Local) -> Local:
    if name in ("exp", "cosh", "sech", "logistic") and (argument.terms is None or argument.terms[0]):
        return Local(order=0)
    if name in ("tan", "tanh") and argument.terms is not None and argument.terms[0] == 0:
        top, bottom = ("sin", "cos") if name == "tan" else ("sinh", "cosh")
        return _quotient(_function(top, argument), _function(bottom, argument))
    if name == "sqrt":
        # A root halves the order; an odd one leaves a branch point, which is no element's end.
        order = argument.zero_order
        return Local(order=order // 2) if order is not None and order % 2 == 0 and order < TERMS else Local()
    if name in ("sinh", "tanh", "sin", "tan") and argument.terms is None and argument.order:
        return Local(order=argument.order)
    series = _SERIES.get(name)
    at = Fraction(1 if name == "log" else 0)
    if series is None or argument.terms is None or argument.terms[0] != at:
        return Local(order=0) if name in ("sech", "logistic") else Local()
    inner = (Fraction(0), *argument.terms[1:])
    power, result = _padded([Fraction(1)]), [Fraction(0)] * TERMS
    for k in range(TERMS):
        result = [r + series(k) * p for r, p in zip(result, power, strict=True)]
        power = _multiplied(power, inner)
    return Local(tuple(result))
