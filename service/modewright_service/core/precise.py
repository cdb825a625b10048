"""Programs evaluated to many digits, for the few points beside a singular end where doubles cancel."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import mpmath
import numpy as np

from .evaluation import SWITCHES
from .expressions import Program
from .fitting import Source
from .legendre import EXTENDED

__all__ = ["extended", "precise_value", "to_precise"]


def _sech(x: Any) -> Any:
    return 1 / mpmath.cosh(x)


def _logistic(x: Any) -> Any:
    return 1 / (1 + mpmath.exp(-x))


_FUNCTIONS: dict[str, Callable[[Any], Any]] = {
    **{name: getattr(mpmath, name) for name in ("sin", "cos", "tan", "sinh", "cosh", "tanh", "exp", "log")},
    "sqrt": mpmath.sqrt,
    "sech": _sech,
    "logistic": _logistic,
    "neg": lambda x: -x,
}


def precise_value(source: Source, x: Any) -> Any:
    """The coefficient at x (an mpf) in mpmath's working precision.

    Raises ZeroDivisionError or ValueError where it is not defined, and returns a complex number where a root
    or a logarithm leaves the real line.
    """
    samples = None
    if source.table is not None:
        piece = int(source.table.piece(np.array([float(x)]))[0])
        distance = x - mpmath.mpf(float(source.table.origins[piece]))
        samples = mpmath.mpf(0)
        for power in source.table.powers[piece][::-1]:
            samples = samples * distance + mpmath.mpf(float(power))
    return _run(source.program, x, samples)


def _run(program: Program, x: Any, samples: Any) -> Any:
    values: list[Any] = []
    for step in program.steps:
        inputs = [values[operand] for operand in step.operands]
        values.append(_step(step.name, step.value, inputs, x, samples))
    return values[-1]


def _step(name: str, literal: float, inputs: list[Any], x: Any, samples: Any) -> Any:
    match name:
        case "number":
            return mpmath.mpf(literal)
        case "x":
            return x
        case "samples":
            return samples
        case "+":
            return inputs[0] + inputs[1]
        case "-":
            return inputs[0] - inputs[1]
        case "*":
            return inputs[0] * inputs[1]
        case "/":
            return inputs[0] / inputs[1]
        case "**":
            return inputs[0] ** inputs[1]
    if name in SWITCHES:
        return _switch(name, inputs)
    return _FUNCTIONS[name](inputs[0])


def _switch(name: str, inputs: list[Any]) -> Any:
    match name:
        case "abs":
            return abs(inputs[0])
        case "sign":
            return mpmath.sign(inputs[0])
        case "step":
            return mpmath.mpf(1 if inputs[0] >= 0 else 0)
        case "min":
            return min(inputs)
        case "max":
            return max(inputs)
    holds = {
        "where<": inputs[0] < 0,
        "where<=": inputs[0] <= 0,
        "where>": inputs[0] > 0,
        "where>=": inputs[0] >= 0,
    }[name]
    return inputs[1] if holds else inputs[2]


def to_precise(value: Any) -> Any:
    """An extended number as an mpf, exactly."""
    high = float(value)
    return mpmath.mpf(high) + mpmath.mpf(float(value - EXTENDED(high)))


def extended(value: Any) -> Any:
    """An mpf rounded to an extended number."""
    high = float(value)
    return EXTENDED(high) + EXTENDED(float(value - high))
