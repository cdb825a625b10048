"""Problem documents as problems of the numerical core, for tests that set options no client can set."""

from __future__ import annotations

from typing import Any

from modewright_service.core.problem import (
    Coefficient,
    Constant,
    Dirichlet,
    End,
    Expression,
    Film,
    Interface,
    Layer,
    Lump,
    Neumann,
    Problem,
    Robin,
)


def _coefficient(value: float | str) -> Coefficient:
    return Expression(value) if isinstance(value, str) else Constant(float(value))


def _end(end: dict[str, Any]) -> End:
    match end:
        case {"kind": "dirichlet"}:
            return Dirichlet()
        case {"kind": "neumann"}:
            return Neumann()
        case {"kind": "robin", "alpha": alpha, "beta": beta}:
            return Robin(alpha, beta)
        case {"kind": "film", "film": film}:
            return Film(film)
        case {"kind": "lump"}:
            return Lump(end["mass"], end.get("film", 0.0), end.get("resistance", 0.0))
    raise ValueError(f"no such end: {end!r}")


def core_problem(document: dict[str, Any]) -> Problem:
    """A plane problem of constants and expressions."""
    layers = tuple(
        Layer(
            name=layer.get("name", f"layer-{i}"),
            start=layer["start"],
            end=layer["end"],
            p=_coefficient(layer.get("p", 1.0)),
            q=_coefficient(layer.get("q", 0.0)),
            w=_coefficient(layer.get("w", 1.0)),
        )
        for i, layer in enumerate(document["layers"])
    )
    interfaces = tuple(Interface(**interface) for interface in document.get("interfaces", []))
    return Problem(layers, _end(document["left"]), _end(document["right"]), interfaces)
