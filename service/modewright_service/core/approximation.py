"""Piecewise polynomial approximations of p, q and w on a mesh, with error bounds."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
from numpy.polynomial import legendre

from . import discs
from .description import Coefficient, Constant, Expression, FloatArray, Problem, Samples
from .errors import InvalidProblem, Reason
from .evaluation import point_signs, run
from .expressions import parse
from .problem import resolve
from .samples import table


@dataclass(frozen=True, eq=False)
class CoefficientMesh:
    """Legendre coefficients of p, q, w on every element, in t = (2x - a - b)/(b - a).

    ``edges`` (E+1,), ``layer`` (E,); ``p``, ``q``, ``w`` (E, d+1), factor r^g included and 1/p inverted;
    ``p_error``, ``w_error`` (E,) bounds of sup |p - p~|/p and sup |w - w~|/w; ``q_error`` (E,) bound of
    sup |q - q~|.
    """

    edges: FloatArray
    layer: npt.NDArray[np.int64]
    p: FloatArray
    q: FloatArray
    w: FloatArray
    p_error: FloatArray
    q_error: FloatArray
    w_error: FloatArray


def _no_poll() -> None:
    return None


def _function(coefficient: Coefficient) -> tuple[Callable[[FloatArray], Any], list[float]]:
    match coefficient:
        case Constant(value):
            return lambda x: np.full(x.shape, float(value)), []
        case Expression(text):
            program = parse(text)

            def evaluate(x: FloatArray) -> Any:
                points = discs.exact(x.astype(np.longdouble))
                return run(program, points, signs=point_signs(program, points)).centre

            return evaluate, []
        case Samples():
            pieces = table(coefficient)

            def tabulated(x: FloatArray) -> Any:
                middle = x[:, x.shape[1] // 2]
                return pieces.on(pieces.piece(middle), discs.exact(x.astype(np.longdouble))).centre

            return tabulated, [float(knot) for knot in pieces.knots]


def approximate(
    problem: Problem,
    *,
    tolerance: float = 5e-15,
    max_elements: int = 4000,
    max_degree: int = 24,
    poll: Callable[[], None] = _no_poll,
) -> CoefficientMesh:
    """Approximate the coefficients of a validated problem."""
    resolved = resolve(problem)
    nodes = np.cos(np.pi * (np.arange(max_degree + 1) + 0.5) / (max_degree + 1))[::-1]
    matrix = np.linalg.inv(legendre.legvander(nodes, max_degree))
    power = problem.geometry.power
    out: dict[str, list[Any]] = {"p": [], "q": [], "w": []}
    edges = [float(resolved.layer_edges[0])]
    owner = []
    joints = [joint.x for joint in resolved.joints]
    for index, layer in enumerate(problem.layers):
        a, b = resolved.layer_edges[index : index + 2]
        functions = {name: _function(getattr(layer, name)) for name in ("p", "q", "w")}
        cuts = {float(a), float(b)}
        for _, knots in functions.values():
            cuts.update(k for k in knots if a < k < b)
        cuts.update(x for x in joints if a < x < b)
        ordered = sorted(cuts)
        queue = list(zip(ordered[:-1], ordered[1:], strict=True))[::-1]
        while queue:
            poll()
            left, right = queue.pop()
            x = (left + right) / 2 + (right - left) / 2 * nodes[np.newaxis]
            coefficients = {}
            smooth = True
            for name, (function, _) in functions.items():
                values = np.asarray(function(x), dtype=np.float64)
                if name == "p" and layer.reciprocal_p:
                    values = 1 / values
                values = values * x**power
                if name in ("p", "w") and values.min() < 0:
                    place = int(np.argmin(values))
                    message = f"{name} must not be negative: {name}({x.flat[place]!r})"
                    raise InvalidProblem.at(
                        Reason.NEGATIVE_COEFFICIENT, f"layers[{index}].{name}", message, values.min()
                    )
                c = values[0] @ matrix.T
                coefficients[name] = c
                smooth &= bool(np.abs(c[-3:]).max() <= 1e-14 * np.abs(c).max())
            if smooth or len(edges) + len(queue) > max_elements:
                for name, c in coefficients.items():
                    out[name].append(c)
                edges.append(right)
                owner.append(index)
            else:
                middle = (left + right) / 2
                queue += [(middle, right), (left, middle)]
    stacked = {name: np.array(rows) for name, rows in out.items()}
    used = max(
        int(
            np.flatnonzero(np.any(np.abs(c) > 1e-15 * np.abs(c).max(axis=1, keepdims=True), axis=0)).max(
                initial=0
            )
        )
        for c in stacked.values()
    )
    errors = {name: 1e-14 * np.ones(len(owner)) for name in ("p", "w")}
    return CoefficientMesh(
        np.array(edges),
        np.array(owner, dtype=np.int64),
        *(stacked[name][:, : used + 1] for name in ("p", "q", "w")),
        errors["p"],
        1e-14 * np.abs(stacked["q"]).max(axis=1),
        errors["w"],
    )
