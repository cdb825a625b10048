"""A forecast of what a solve will cost, from the coefficients alone."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Final

from modewright_service.core.problem import Problem

__all__ = ["Estimate", "estimate"]

# Radians of the highest mode in an element of degree 32, and its unknowns, as the solver chooses them.
_PHASE: Final = 20.0
_UNKNOWNS: Final = 32
# Measured on one core of this decade for 8 to 1024 modes: fixed cost, cost an element, cost a mode and
# element.
_SECONDS_FIXED: Final = 0.03
_SECONDS_ELEMENT: Final = 5.4e-3
_SECONDS_MODE_ELEMENT: Final = 1.0e-5


@dataclass(frozen=True)
class Estimate:
    """pieces: polynomial pieces that the coefficients need. unknowns: of the discretised problem. seconds: of
    one core, an order of magnitude. scale: (pi / integral of sqrt(w/p) dx)^2, 0 where w vanishes everywhere.
    remarks: what is valid but unusual. end_classes: of the left and the right end.
    """

    pieces: int
    unknowns: int
    seconds: float
    scale: float
    remarks: tuple[str, ...]
    end_classes: tuple[str, str]


def estimate(problem: Problem, modes: int, poll: Callable[[], None]) -> Estimate:
    """The forecast for the lowest `modes` of a validated problem.

    Raises InvalidProblem for coefficients that are negative between the points that can be looked at, as the
    solve would, and whatever poll raises.
    """
    import numpy as np

    from modewright_service.core.approximation import approximate
    from modewright_service.core.end_plan import plan_ends
    from modewright_service.core.mesh import fundamental

    plans = plan_ends(problem)
    mesh = approximate(problem, ends=(plans[0].map, plans[1].map), poll=poll)
    pieces = int(mesh.edges.size - 1)
    elements = max(pieces, int(np.ceil(np.pi * (modes + 1) / _PHASE)))
    seconds = _SECONDS_FIXED + elements * (_SECONDS_ELEMENT + modes * _SECONDS_MODE_ELEMENT)
    remarks = []
    weightless = [i for i in range(len(problem.layers)) if not mesh.w[mesh.layer == i].any()]
    if weightless:
        names = ", ".join(problem.layers[i].name or f"layers[{i}]" for i in weightless[:5])
        more = ", ..." if len(weightless) > 5 else ""
        remarks.append(f"w is zero throughout {len(weightless)} of the layers ({names}{more})")
    loose = float(max(mesh.p_error.max(), mesh.w_error.max()))
    if loose > 1e-9:
        remarks.append(
            f"the coefficients are resolved to {loose:.1g} only, on the largest mesh; bounds will be as wide"
        )
    return Estimate(
        pieces,
        elements * _UNKNOWNS,
        seconds,
        fundamental(mesh),
        tuple(remarks),
        (plans[0].classification, plans[1].classification),
    )
