"""Coefficient expressions in x: a whitelist grammar, its parser, and its program.

::

    expression := term (("+" | "-") term)*
    term       := factor (("*" | "/") factor)*
    factor     := ("+" | "-") factor | power
    power      := atom ["**" factor]
    atom       := number | "x" | "pi" | "e" | name "(" arguments ")" | "(" expression ")"

with the functions of one argument sin cos tan sinh cosh tanh exp log sqrt abs sign step, the functions
min and max of two or more, and ``where(a < b, c, d)`` whose condition is one comparison. ``**`` binds
to the right and tighter than a sign before it, so ``-x**2`` is -(x**2). ``step(y)`` is 0 for y < 0 and
1 from 0 on; ``sign(0)`` is 0.

The text is bounded in length and depth, is never handed to Python's own evaluator, and every error
reports the column, counted from 1.
"""

from __future__ import annotations

import difflib
import math
import re
from collections.abc import Iterable
from dataclasses import dataclass
from functools import lru_cache

from .errors import InvalidProblem, Reason

MAX_LENGTH = 4096
MAX_DEPTH = 64

UNARY = ("sin", "cos", "tan", "sinh", "cosh", "tanh", "exp", "log", "sqrt", "abs", "sign", "step")
VARIADIC = ("min", "max")
COMPARISONS = ("<=", ">=", "<", ">")
CONSTANTS = {"pi": math.pi, "e": math.e}
NAMES = ("x", *CONSTANTS, *UNARY, *VARIADIC, "where")

_TOKEN = re.compile(
    r"(?P<number>(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?)"
    r"|(?P<name>[A-Za-z_][A-Za-z_0-9]*)"
    r"|(?P<symbol>\*\*|<=|>=|[-+*/(),<>])"
)
_SPACE = re.compile(r"[ \t\r\n]*")


@dataclass(frozen=True)
class Instruction:
    """One step of a program: an operation on the results of earlier steps.

    ``name`` is ``number`` (with its value), ``x``, ``samples`` (the table of a coefficient given by
    samples), ``neg``, one of the symbols ``+ - * / **``, a function's name, or ``where<`` and the like,
    whose first operand is the difference of the two sides of its condition.
    """

    name: str
    operands: tuple[int, ...] = ()
    value: float = 0.0


@dataclass(frozen=True)
class Program:
    """An expression as a list of steps, each equal subexpression once; the last step is the result.

    A list instead of a tree: long sums cannot exhaust the interpreter's stack, and a subexpression that
    is written three times is evaluated once.
    """

    steps: tuple[Instruction, ...]


class Builder:
    """Collects the steps of a program; an equal step is returned instead of repeated."""

    def __init__(self, steps: Iterable[Instruction] = ()) -> None:
        self.steps = list(steps)
        self._index = {self._key(step): index for index, step in enumerate(self.steps)}

    @staticmethod
    def _key(step: Instruction) -> tuple[str, tuple[int, ...], str]:
        return step.name, step.operands, step.value.hex()

    def add(self, name: str, *operands: int, value: float = 0.0) -> int:
        """The index of this step, new or known."""
        step = Instruction(name, operands, value)
        known = self._index.setdefault(self._key(step), len(self.steps))
        if known == len(self.steps):
            self.steps.append(step)
        return known

    def number(self, value: float) -> int:
        """The index of a literal."""
        return self.add("number", value=float(value))

    def program(self, result: int) -> Program:
        """The program that ends in step ``result``, without the steps it does not need."""
        needed = {result}
        for index in range(result, -1, -1):
            if index in needed:
                needed.update(self.steps[index].operands)
        order = sorted(needed)
        place = {index: position for position, index in enumerate(order)}
        steps = (self.steps[index] for index in order)
        return Program(
            tuple(Instruction(s.name, tuple(place[o] for o in s.operands), s.value) for s in steps)
        )


@dataclass(frozen=True)
class _Token:
    kind: str
    text: str
    column: int


def _error(reason: Reason, message: str, column: int) -> InvalidProblem:
    error = InvalidProblem.at(reason, "expression", message, f"column {column}", column=column)
    assert isinstance(error, InvalidProblem)
    return error


def _tokens(text: str) -> list[_Token]:
    tokens = []
    position = 0
    while True:
        space = _SPACE.match(text, position)
        position = space.end() if space else position
        if position == len(text):
            tokens.append(_Token("end", "the end", position + 1))
            return tokens
        match = _TOKEN.match(text, position)
        if match is None:
            message = f"unexpected character {text[position]!r}"
            raise _error(Reason.EXPRESSION_SYNTAX, message, position + 1)
        tokens.append(_Token(str(match.lastgroup), match.group(), position + 1))
        position = match.end()


class _Parser:
    """Recursive descent over the tokens; ``depth`` bounds the recursion."""

    def __init__(self, text: str) -> None:
        self.tokens = _tokens(text)
        self.index = 0
        self.depth = 0
        self.builder = Builder()

    @property
    def token(self) -> _Token:
        return self.tokens[self.index]

    def take(self) -> _Token:
        token = self.token
        self.index += 1
        return token

    def accept(self, *symbols: str) -> str:
        if self.token.kind == "symbol" and self.token.text in symbols:
            return self.take().text
        return ""

    def expect(self, symbol: str) -> None:
        if not self.accept(symbol):
            raise self.unexpected(f"expected {symbol!r}")

    def unexpected(self, wanted: str) -> InvalidProblem:
        token = self.token
        found = token.text if token.kind == "end" else repr(token.text)
        return _error(Reason.EXPRESSION_SYNTAX, f"{wanted}, found {found}", token.column)

    def whole(self) -> Program:
        if self.token.kind == "end":
            raise _error(Reason.EXPRESSION_SYNTAX, "the expression is empty", 1)
        node = self.expression()
        if self.token.kind != "end":
            raise self.unexpected("expected an operator or the end")
        return self.builder.program(node)

    def expression(self) -> int:
        node = self.term()
        while symbol := self.accept("+", "-"):
            node = self.builder.add(symbol, node, self.term())
        return node

    def term(self) -> int:
        node = self.factor()
        while symbol := self.accept("*", "/"):
            node = self.builder.add(symbol, node, self.factor())
        return node

    def factor(self) -> int:
        self.depth += 1
        if self.depth > MAX_DEPTH:
            message = f"nested more than {MAX_DEPTH} deep"
            raise _error(Reason.EXPRESSION_TOO_LONG, message, self.token.column)
        symbol = self.accept("+", "-")
        if symbol:
            argument = self.factor()
            node = self.builder.add("neg", argument) if symbol == "-" else argument
        else:
            node = self.power()
        self.depth -= 1
        return node

    def power(self) -> int:
        base = self.atom()
        if self.accept("**"):
            return self.builder.add("**", base, self.factor())
        return base

    def atom(self) -> int:
        token = self.token
        if token.kind == "number":
            self.take()
            value = float(token.text)
            if not math.isfinite(value):
                message = f"the number {token.text} overflows"
                raise _error(Reason.EXPRESSION_SYNTAX, message, token.column)
            return self.builder.number(value)
        if token.kind == "name":
            self.take()
            return self.named(token)
        if self.accept("("):
            node = self.expression()
            self.expect(")")
            return node
        raise self.unexpected("expected a number, x, a function or '('")

    def named(self, token: _Token) -> int:
        name = token.text
        if name not in NAMES:
            close = difflib.get_close_matches(name.lower(), NAMES, n=1, cutoff=0.0)
            message = f"unknown name {name[:40]!r}; did you mean {close[0]!r}?"
            raise _error(Reason.EXPRESSION_NAME, message, token.column)
        is_call = self.token.kind == "symbol" and self.token.text == "("
        if name == "x" or name in CONSTANTS:
            if is_call:
                message = f"{name} is not a function; write {name}*( for a product"
                raise _error(Reason.EXPRESSION_SYNTAX, message, token.column)
            return self.builder.add("x") if name == "x" else self.builder.number(CONSTANTS[name])
        if not is_call:
            message = f"the function {name} needs its argument in parentheses"
            raise _error(Reason.EXPRESSION_SYNTAX, message, token.column)
        self.take()
        if name == "where":
            return self.where()
        arguments = [self.expression()]
        while self.accept(","):
            arguments.append(self.expression())
        self.expect(")")
        least = 1 if name in UNARY else 2
        if len(arguments) < least or (name in UNARY and len(arguments) > 1):
            wanted = "one argument" if name in UNARY else "two arguments or more"
            message = f"the function {name} takes {wanted}, found {len(arguments)}"
            raise _error(Reason.EXPRESSION_SYNTAX, message, token.column)
        node = arguments[0]
        if name in UNARY:
            return self.builder.add(name, node)
        for other in arguments[1:]:
            node = self.builder.add(name, node, other)
        return node

    def where(self) -> int:
        left = self.expression()
        comparison = self.accept(*COMPARISONS)
        if not comparison:
            raise self.unexpected("where() needs a comparison (< <= > >=) first")
        condition = self.builder.add("-", left, self.expression())
        self.expect(",")
        then = self.expression()
        self.expect(",")
        otherwise = self.expression()
        self.expect(")")
        return self.builder.add("where" + comparison, condition, then, otherwise)


@lru_cache(maxsize=512)
def parse(text: str) -> Program:
    """The program of ``text``.

    Raises :class:`InvalidProblem` with reason EXPRESSION_SYNTAX, EXPRESSION_NAME or EXPRESSION_TOO_LONG;
    the violation's field is ``expression`` and its number the column.
    """
    if len(text) > MAX_LENGTH:
        error = InvalidProblem.at(
            Reason.EXPRESSION_TOO_LONG,
            "expression",
            f"an expression has at most {MAX_LENGTH} characters",
            len(text),
        )
        raise error
    return _Parser(text).whole()
