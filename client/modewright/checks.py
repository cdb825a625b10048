"""Structural checks of what a person wrote: is it a number, a list, a known word.

A :class:`Checks` collects every complaint with its path and raises them together. Whether the numbers make a
problem that can be solved (signs, gaps, orders of x) is the service's to say: it is the one place that knows.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Mapping
from difflib import get_close_matches
from typing import Any, TypeVar

import numpy as np

from modewright.errors import InvalidProblem, ModewrightError, Violation

__all__ = ["Checks", "choice_list"]

T = TypeVar("T")

# A wrong value is quoted in messages up to this length.
_QUOTED = 60


def choice_list(words: Iterable[str]) -> str:
    """The words as they stand in a message: a, b or c."""
    *first, last = words
    return f"{', '.join(first)} or {last}" if first else last


def quote(value: object) -> str:
    """A wrong value as it stands in a message, cut to a readable length."""
    text = repr(value)
    return text if len(text) <= _QUOTED else f"{text[:_QUOTED]}... ({type(value).__name__})"


class Checks:
    """Collects violations below the path `prefix`; `finish` raises them.

    reason: of the error raised when none of the complaints came with its own.
    """

    def __init__(self, prefix: str = "", *, reason: str = "BAD_REQUEST") -> None:
        self.prefix = prefix
        self.violations: list[Violation] = []
        self._reason = ""
        self._default_reason = reason

    def path(self, name: str) -> str:
        """The full path of a field here."""
        if not self.prefix or not name:
            return self.prefix or name
        return f"{self.prefix}{name}" if name.startswith("[") else f"{self.prefix}.{name}"

    def wrong(self, name: str, message: str, value: object = "", *, reason: str = "") -> None:
        """Notes a complaint about the field `name`."""
        number = repr(float(value)) if isinstance(value, (int, float)) else str(value)
        self.violations.append(Violation(self.path(name), message, number))
        self._reason = self._reason or reason

    def include(self, name: str, error: ModewrightError) -> None:
        """Takes over the complaints of a part, below the field `name`."""
        nested = Checks(self.path(name))
        for violation in error.violations:
            field = nested.path(violation.field)
            self.violations.append(Violation(field, violation.message, violation.number))
        self._reason = self._reason or error.reason

    def part(self, name: str, make: Callable[[], T]) -> T | None:
        """What `make` returns; None where it raised an InvalidProblem, whose complaints are taken over."""
        try:
            return make()
        except InvalidProblem as error:
            self.include(name, error)
            return None

    def finish(self, message: str = "") -> None:
        """Raises InvalidProblem if anything was wrong."""
        if self.violations:
            raise InvalidProblem(
                message, reason=self._reason or self._default_reason, violations=self.violations
            )

    # ---- kinds of values ----

    def number(self, name: str, value: object, *, infinite: bool = False) -> float:
        """A finite number (with `infinite` also an infinite one, or the text inf / -inf for JSON)."""
        if infinite and isinstance(value, str) and value.strip().lstrip("+-") == "inf":
            return -math.inf if value.strip().startswith("-") else math.inf
        if isinstance(value, (bool, np.bool)) or not isinstance(value, (int, float, np.integer, np.floating)):
            self.wrong(name, f"must be a number, not {quote(value)}")
            return math.nan
        try:
            number = float(value)
        except OverflowError:
            self.wrong(name, "is too large for a floating point number", reason="NOT_FINITE")
            return math.nan
        if math.isnan(number) or (math.isinf(number) and not infinite):
            message = "must not be NaN" if infinite else "must be finite"
            self.wrong(name, message, number, reason="NOT_FINITE")
            return math.nan
        # -0.0 is no other number than 0.0, and must not make another document of it.
        return number + 0.0

    def text(self, name: str, value: object) -> str:
        """A string."""
        if not isinstance(value, str):
            self.wrong(name, f"must be a string, not {quote(value)}")
            return ""
        return value

    def flag(self, name: str, value: object) -> bool:
        """True or false."""
        if not isinstance(value, (bool, np.bool)):
            self.wrong(name, f"must be true or false, not {quote(value)}")
            return False
        return bool(value)

    def choice(self, name: str, value: object, words: Iterable[str], *, reason: str = "") -> str:
        """One of the words."""
        words = tuple(words)
        if not isinstance(value, str) or value not in words:
            self.wrong(name, f"must be {choice_list(words)}, not {quote(value)}", reason=reason)
            return words[0]
        return value

    def items(self, name: str, value: object) -> list[Any]:
        """A list."""
        if isinstance(value, (str, bytes, Mapping)) or not isinstance(value, Iterable):
            self.wrong(name, f"must be a list, not {quote(value)}")
            return []
        return list(value)

    def table(
        self, name: str, value: object, keys: Iterable[str], required: Iterable[str] = ()
    ) -> Mapping[str, Any]:
        """A mapping with no other keys than `keys`, all of `required` among them."""
        if not isinstance(value, Mapping):
            self.wrong(name, f"must be a table of named fields, not {quote(value)}")
            return {}
        known = tuple(keys)
        inner = Checks(self.path(name))
        for key in value:
            if key not in known:
                close = get_close_matches(str(key), known, n=1)
                hint = f"; did you mean {close[0]}?" if close else ""
                if known and not close:
                    hint = f"; known are {choice_list(known)}"
                inner.wrong(str(key)[:_QUOTED], f"is not a field of this place{hint}")
        for key in required:
            if key not in value:
                inner.wrong(key, "is missing")
        self.violations.extend(inner.violations)
        return {key: value[key] for key in known if key in value}
