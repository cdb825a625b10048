"""What is asked of a spectrum: the lowest N, all below a lambda, a window, a range of indices.

A selection names eigenvalues of the exact operator; its `canonical` numbers are what a basis key is made of.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from .errors import InvalidRequest, Reason

__all__ = ["Below", "IndexRange", "Lowest", "Selection", "Window", "check_selection"]


@dataclass(frozen=True)
class Lowest:
    """The `count` lowest, indices 0 to count - 1."""

    count: int

    @property
    def canonical(self) -> tuple[str, tuple[float, ...]]:
        """A word and the numbers that tell this selection from others."""
        return "lowest", (float(self.count),)


@dataclass(frozen=True)
class Below:
    """Every eigenvalue below `limit`."""

    limit: float

    @property
    def canonical(self) -> tuple[str, tuple[float, ...]]:
        """A word and the numbers that tell this selection from others."""
        return "below", (self.limit,)


@dataclass(frozen=True)
class Window:
    """Every eigenvalue with lower <= lambda < upper."""

    lower: float
    upper: float

    @property
    def canonical(self) -> tuple[str, tuple[float, ...]]:
        """A word and the numbers that tell this selection from others."""
        return "window", (self.lower, self.upper)


@dataclass(frozen=True)
class IndexRange:
    """Indices first <= n < end."""

    first: int
    end: int

    @property
    def canonical(self) -> tuple[str, tuple[float, ...]]:
        """A word and the numbers that tell this selection from others."""
        return "indices", (float(self.first), float(self.end))


Selection = Lowest | Below | Window | IndexRange


def check_selection(selection: Selection) -> None:
    """Raises InvalidRequest, naming the field, for a selection that no problem can answer."""
    match selection:
        case Lowest(count):
            if count < 1:
                raise InvalidRequest.at(
                    Reason.BAD_REQUEST, "modes", "at least one mode must be asked for", str(count)
                )
        case Below(limit):
            if not math.isfinite(limit):
                raise InvalidRequest.at(Reason.NOT_FINITE, "below", "must be finite", repr(limit))
        case Window(lower, upper):
            for name, value in (("window.lower", lower), ("window.upper", upper)):
                if not math.isfinite(value):
                    raise InvalidRequest.at(Reason.NOT_FINITE, name, "must be finite", repr(value))
            if not lower < upper:
                text = f"must be above window.lower = {lower!r}"
                raise InvalidRequest.at(Reason.BAD_REQUEST, "window.upper", text, repr(upper))
        case IndexRange(first, end):
            if first < 0:
                raise InvalidRequest.at(
                    Reason.BAD_REQUEST, "index_range.first", "must not be negative", str(first)
                )
            if end <= first:
                text = f"must be above index_range.first = {first}"
                raise InvalidRequest.at(Reason.BAD_REQUEST, "index_range.end", text, str(end))
