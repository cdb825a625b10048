"""Which field takes away the lowest eigenvalue, where there is none.

Functions that vanish wherever w and the point masses are have no norm. Should the form be negative on one of
them, adding it to any function lowers the Rayleigh quotient without end. Such functions live on runs of
massless layers, fixed where the run meets mass; the comparison problem (:mod:`.comparison`) of the run alone,
far below, has no eigenvalue exactly if the form is positive there.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace

import numpy as np

from modewright_service.core.approximation import CoefficientMesh
from modewright_service.core.comparison import Comparison, build_comparison
from modewright_service.core.problem import EndTerm, Problem, Resolved, Robin

__all__ = ["unbounded_below"]

# Pieces per element of the comparison problem.
_PIECES = 64
# -nu in units that make a point mass a wall.
_FAR = 1e30


def unbounded_below(problem: Problem, resolved: Resolved, mesh: CoefficientMesh) -> tuple[str, float] | None:
    """(field, value) of the negative term to blame in a massless run, None where all runs are positive.

    Ends are blamed first, then springs, then q: the first whose removal leaves nothing negative, else the
    first that is negative at all.
    """
    whole = build_comparison(mesh, resolved, np.where(mesh.w.any(axis=1), 1, _PIECES))
    for first, last in _runs(whole):
        run = _alone(whole, first, last)
        if not _negative(run):
            continue
        negative = list(_negative_terms(problem, mesh, whole, run, first))
        for field, value, without in negative:
            if not _negative(without):
                return field, value
        if negative:
            return negative[0][:2]
    return None


def _runs(whole: Comparison) -> list[tuple[int, int]]:
    """(first, last + 1) of the pieces of each massless run."""
    hollow = np.concatenate([[False], whole.w_upper == 0.0, [False]])
    change = np.flatnonzero(hollow[1:] != hollow[:-1])
    return [(int(a), int(b)) for a, b in zip(change[::2], change[1::2], strict=True)]


def _alone(whole: Comparison, first: int, last: int) -> Comparison:
    """The run with u = 0 beside it; a resistance at its left edge makes that end elastic."""
    left, right = whole.left, whole.right
    if whole.left_piece is not None:
        left = EndTerm(dirichlet=True)
    if first > 0:
        resistance = float(whole.resistance[first - 1])
        left = EndTerm(stiffness=1.0 / resistance) if resistance > 0.0 else EndTerm(dirichlet=True)
    if last < whole.pieces or whole.right_piece is not None:
        right = EndTerm(dirichlet=True)
    part = slice(first, last)
    names = ("length", "p", "q", "w_lower", "w_upper", "resistance", "spring", "mass")
    length, p, q, w_lower, w_upper, resistance, spring, mass = (
        getattr(whole, name)[part].copy() for name in names
    )
    return Comparison(
        *(length, p, q, w_lower, w_upper, resistance, spring, mass), left, right, whole.means.part(part)
    )


def _negative(run: Comparison) -> bool:
    size = float((run.p / run.length).max())
    masses = [*run.mass[run.mass > 0.0], *(end.mass for end in (run.left, run.right) if end.mass > 0.0)]
    nu = -_FAR * size / min(masses, default=1.0)
    return bool(run.count(np.array([nu]))[0] > 0)


def _negative_terms(
    problem: Problem, mesh: CoefficientMesh, whole: Comparison, run: Comparison, first: int
) -> Iterator[tuple[str, float, Comparison]]:
    """(field, value, the run without it) of every negative term."""
    if first == 0 and run.left.stiffness < 0.0:
        yield *_end_field(problem, "left", run.left), replace(run, left=EndTerm())
    if first + run.pieces == whole.pieces and run.right.stiffness < 0.0:
        yield *_end_field(problem, "right", run.right), replace(run, right=EndTerm())
    edges = mesh.edges[0] + np.cumsum(whole.length)
    for j in np.flatnonzero(run.spring < 0.0):
        places = [abs(interface.x - edges[first + j]) for interface in problem.interfaces]
        number = int(np.argmin(places))
        spring = run.spring.copy()
        spring[j] = 0.0
        field = f"interfaces[{number}].spring"
        yield field, float(problem.interfaces[number].spring), replace(run, spring=spring)
    if run.q.min() < 0.0:
        lowest = int(np.argmin(run.q))
        middle = edges[first + lowest] - 0.5 * run.length[lowest]
        element = int(np.searchsorted(mesh.edges[1:-1], middle))
        means = replace(run.means, q=np.maximum(run.means.q, 0.0))
        yield (
            f"layers[{mesh.layer[element]}].q",
            float(mesh.q[element, 0]),
            replace(run, q=np.maximum(run.q, 0.0), means=means),
        )


def _end_field(problem: Problem, side: str, end: EndTerm) -> tuple[str, float]:
    condition = problem.left if side == "left" else problem.right
    if isinstance(condition, Robin):
        return f"{side}.alpha", float(condition.alpha)
    return side, end.stiffness
