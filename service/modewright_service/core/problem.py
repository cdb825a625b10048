"""The problem, its checks, and its resolved ends and joints: what the solver builds from.

The data classes live in :mod:`.description`, the checks in :mod:`.validation`; both are offered here
under one name.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from .description import (
    Bounded,
    Coefficient,
    Constant,
    Coupling,
    CouplingKind,
    Dirichlet,
    End,
    Expression,
    Film,
    FloatArray,
    Geometry,
    Interface,
    Interpolation,
    Layer,
    Lump,
    Neumann,
    Problem,
    Robin,
    Samples,
)
from .validation import layer_edges, snapped_interface, validate

__all__ = [
    "Bounded",
    "Coefficient",
    "Constant",
    "Coupling",
    "CouplingKind",
    "Dirichlet",
    "End",
    "EndTerm",
    "Expression",
    "Film",
    "Geometry",
    "Interface",
    "Interpolation",
    "Joint",
    "Layer",
    "Lump",
    "Neumann",
    "Problem",
    "Resolved",
    "Robin",
    "Samples",
    "resolve",
    "validate",
]


@dataclass(frozen=True)
class EndTerm:
    """What an end adds to the weak form, geometry factor included.

    ``stiffness`` h adds h u^2 to the energy (p u' = h u at the left, -p u' = h u at the right; a Robin
    condition may make it negative), ``mass`` adds m u^2 to the norm. With a resistance between the end
    and a lump, ``lump`` = (mass, film, resistance) and the lump has an unknown of its own.
    """

    dirichlet: bool = False
    stiffness: float = 0.0
    mass: float = 0.0
    lump: tuple[float, float, float] | None = None
    kind: str = "neumann"


@dataclass(frozen=True)
class Joint:
    """An interior point with its terms, geometry factor included."""

    x: float
    resistance: float = 0.0
    spring: float = 0.0
    mass: float = 0.0


@dataclass(frozen=True, eq=False)
class Resolved:
    """``layer_edges`` (L+1,) ascending; the two ends; the joints ordered by x.

    ``factor``: u(b) = factor u(a) and p u' likewise where the ends are coupled, of modulus 1; else None.
    """

    layer_edges: FloatArray
    left: EndTerm
    right: EndTerm
    joints: tuple[Joint, ...]
    factor: complex | None = None


def _end_term(end: End, side: str, factor: float) -> EndTerm:
    match end:
        case Dirichlet():
            return EndTerm(dirichlet=True, kind="dirichlet")
        case Neumann():
            return EndTerm(kind="neumann")
        case Robin(alpha, beta):
            if beta == 0.0:
                return EndTerm(dirichlet=True, kind="robin")
            sign = -1.0 if side == "left" else 1.0
            # The sum with 0.0 turns a -0.0 from alpha = 0 into +0.0.
            return EndTerm(stiffness=sign * alpha / beta * factor + 0.0, kind="robin")
        case Film(h):
            return EndTerm(stiffness=h * factor, kind="film")
        case Lump(mass, film, resistance) if resistance > 0.0:
            return EndTerm(lump=(mass * factor, film * factor, resistance / factor), kind="lump")
        case Lump(mass, film):
            return EndTerm(stiffness=film * factor, mass=mass * factor, kind="lump")
        case Bounded():
            return EndTerm(kind="bounded")


def resolve(problem: Problem) -> Resolved:
    """Ends and joints of a validated problem with the factor r^g of their places applied.

    Films, masses and springs are multiplied by r^g, resistances divided by it; a Robin condition
    alpha u + beta p u' = 0 in the material's p becomes alpha r^g u + beta (p r^g) u' = 0.
    """
    edges = layer_edges(problem)
    power = problem.geometry.power
    factor = None
    if problem.coupling is not None:
        factor = problem.coupling.factor
        left = right = EndTerm(kind=str(problem.coupling.kind))
    else:
        left = _end_term(problem.left, "left", abs(edges[0]) ** power)
        right = _end_term(problem.right, "right", abs(edges[-1]) ** power)
    joints = []
    for interface in problem.interfaces:
        x = snapped_interface(interface.x, edges)
        area = abs(x) ** power
        joints.append(Joint(x, interface.resistance / area, interface.spring * area, interface.mass * area))
    joints.sort(key=lambda joint: joint.x)
    return Resolved(np.asarray(edges, dtype=np.float64), left, right, tuple(joints), factor)
