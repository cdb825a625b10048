"""The coefficients of the reference records as NumPy functions, and as a dense problem.

Used only to check the product against quadrature and a dense solver; the expressions come from the
project's own data files.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from tests.numerics.dense_reference import DenseEnd, DenseJoint, DenseLayer, DenseProblem, Function
from tests.reference.load import document_from_record

_NAMES = {name: getattr(np, name) for name in ("exp", "sin", "cos", "tanh", "cosh", "sqrt", "abs", "pi")}


def as_function(text: float | str) -> Function:
    """The function of x that a coefficient stands for."""
    code = compile(str(text), "<reference coefficient>", "eval")

    def function(x: NDArray[np.float64]) -> NDArray[np.float64]:
        value = eval(code, {"__builtins__": {}}, {**_NAMES, "x": x})  # noqa: S307 - the project's own data
        return np.broadcast_to(np.asarray(value, dtype=float), np.shape(x))

    return function


def _end(end: dict[str, Any], side: str, factor: float) -> DenseEnd:
    match end["kind"]:
        case "dirichlet":
            return DenseEnd(dirichlet=True)
        case "neumann" | "bounded":
            # Lambda, which is all that singular records are read for, depends on no condition
            return DenseEnd()
        case "robin":
            outward = end["beta"] if side == "right" else -end["beta"]
            return DenseEnd(stiffness=factor * end["alpha"] / outward)
        case "film":
            return DenseEnd(stiffness=factor * end["film"])
        case "lump":
            film, mass = factor * end.get("film", 0.0), factor * end["mass"]
            return DenseEnd(stiffness=film, mass=mass, resistance=end.get("resistance", 0.0) / factor)
    raise ValueError(f"the dense solver has no end {end['kind']!r}")


def _joint(interface: dict[str, float], power: int) -> DenseJoint:
    factor = interface["x"] ** power
    return DenseJoint(
        interface["x"],
        resistance=interface.get("resistance", 0.0) / factor,
        spring=interface.get("spring", 0.0) * factor,
        mass=interface.get("mass", 0.0) * factor,
    )


def dense_from_document(
    document: dict[str, Any], pieces: int = 2, cuts: tuple[float, ...] = ()
) -> DenseProblem:
    """The same problem for the dense solver; ``cuts`` refine it where a coefficient is steep.

    In cylindrical and spherical geometry everything per area is multiplied by the area, r or r^2, at
    its place: -(r^g p u')' + r^g q u = lambda r^g w u.
    """
    power = ("plane", "cylindrical", "spherical").index(document.get("geometry", "plane"))

    def material(layer: dict[str, Any], name: str, default: float) -> Function:
        function = as_function(layer.get(name, default))
        return lambda x: function(x) * x**power

    layers = tuple(
        DenseLayer(
            layer["start"],
            layer["end"],
            material(layer, "p", 1.0),
            material(layer, "q", 0.0),
            material(layer, "w", 1.0),
            pieces=pieces,
            cuts=tuple(cut for cut in cuts if layer["start"] < cut < layer["end"]),
        )
        for layer in document["layers"]
    )
    joints = tuple(_joint(interface, power) for interface in document.get("interfaces", []))
    left = _end(document["left"], "left", layers[0].start ** power)
    right = _end(document["right"], "right", layers[-1].end ** power)
    return DenseProblem(layers, left, right, joints)


def dense_from_record(record: dict[str, Any], pieces: int = 2, cuts: tuple[float, ...] = ()) -> DenseProblem:
    """The problem of a regular record for the dense solver."""
    return dense_from_document(document_from_record(record), pieces, cuts)
