"""Stacks of material layers: walls, pipe walls and shells described by thickness and material.

A :class:`Stack` is what a thermal engineer has in hand - thickness, conductivity, volumetric heat capacity,
contact resistances, what is on both sides - in plane, cylindrical or spherical geometry. ``problem()``
makes the :class:`~modewright.problem.Problem` of it: conductivity becomes p, heat capacity w, positions are
added up from `start`. The geometry factor r**g is not multiplied in here: a problem holds material
coefficients and its geometry, and the service applies the factor once, to coefficients, films, resistances
and lumps alike.

Any consistent units do. In SI: m, W/(m K), J/(m3 K), m2 K/W, W/(m2 K) make lambda a decay rate in 1/s.

This is no design approval of a wall, a pipe or a vessel: local codes and licensed practice decide.
"""

from __future__ import annotations

import math
import re
from collections.abc import Iterable
from dataclasses import dataclass
from itertools import accumulate

from modewright.checks import Checks, quote
from modewright.problem import GEOMETRIES, Coefficient, End, Interface, Layer, Problem, coefficient

__all__ = ["Stack", "StackLayer"]

_LAYER_FIELDS = {"p": "conductivity", "w": "heat_capacity", "start": "thickness", "end": "thickness"}
_STACK_FIELDS = {
    "left": "inner",
    "right": "outer",
    "geometry": "geometry",
    "layers": "layers",
    "interfaces": "layers",
    "domain": "layers",
}


@dataclass(frozen=True)
class StackLayer:
    """One material layer.

    thickness: > 0. conductivity, heat_capacity (volumetric): numbers, expressions in x or
    :class:`~modewright.problem.Samples`, both over the absolute coordinate (the radius, not the depth in
    the layer).
    contact_resistance: to the next layer, >= 0, per area.
    """

    thickness: float
    conductivity: Coefficient
    heat_capacity: Coefficient
    name: str = ""
    contact_resistance: float = 0.0

    def __post_init__(self) -> None:
        checks = Checks()
        values = {
            "thickness": checks.number("thickness", self.thickness),
            "conductivity": coefficient(checks, "conductivity", self.conductivity),
            "heat_capacity": coefficient(checks, "heat_capacity", self.heat_capacity),
            "name": checks.text("name", self.name),
            "contact_resistance": checks.number("contact_resistance", self.contact_resistance),
        }
        for key, value in values.items():
            object.__setattr__(self, key, value)
        if self.thickness <= 0.0:
            checks.wrong("thickness", "must be positive", self.thickness, reason="BAD_DOMAIN")
        checks.finish()


@dataclass(frozen=True)
class Stack:
    """Material layers from the inside out (plane: from left to right).

    start: coordinate of the inner face; the inner radius in cylindrical and spherical geometry.
    inner, outer: the conditions at the two faces (:class:`~modewright.problem.Film`,
    :class:`~modewright.problem.Lump`, ...). name: for people.

    Raises InvalidProblem with every structural complaint.
    """

    layers: tuple[StackLayer, ...]
    inner: End
    outer: End
    geometry: str = "plane"
    start: float = 0.0
    name: str = ""

    def __post_init__(self) -> None:
        checks = Checks()
        layers = tuple(checks.items("layers", self.layers))
        values = {
            "layers": layers,
            "geometry": checks.choice("geometry", self.geometry, GEOMETRIES),
            "start": checks.number("start", self.start),
            "name": checks.text("name", self.name),
        }
        for key, value in values.items():
            object.__setattr__(self, key, value)
        if not layers and not checks.violations:
            checks.wrong("layers", "needs at least one layer", 0, reason="BAD_DOMAIN")
        for index, layer in enumerate(layers):
            if not isinstance(layer, StackLayer):
                checks.wrong(f"layers[{index}]", f"must be StackLayer, not {quote(layer)}")
        for side in ("inner", "outer"):
            if not isinstance(getattr(self, side), End):
                message = f"must be an end condition, not {quote(getattr(self, side))}"
                checks.wrong(side, message, reason="BAD_END_CONDITION")
        if self.geometry != "plane" and self.start < 0.0:
            checks.wrong("start", "must not be negative: it is a radius", self.start, reason="BAD_DOMAIN")
        checks.finish()
        if layers[-1].contact_resistance:
            place, value = f"layers[{len(layers) - 1}].contact_resistance", layers[-1].contact_resistance
            checks.wrong(place, "has no next layer to lead to", value, reason="BAD_INTERFACE")
        edges = self.edges
        for index, layer in enumerate(layers):
            if not edges[index + 1] > edges[index] or not math.isfinite(edges[index + 1]):
                checks.wrong(
                    f"layers[{index}].thickness",
                    f"vanishes beside the coordinate {edges[index]!r}",
                    layer.thickness,
                    reason="BAD_DOMAIN",
                )
        checks.finish()

    @classmethod
    def of(
        cls,
        *layers: StackLayer,
        inner: End,
        outer: End,
        geometry: str = "plane",
        start: float = 0.0,
        name: str = "",
    ) -> Stack:
        """A stack of the given layers, from the inside out."""
        return cls(layers, inner, outer, geometry, start, name)

    @property
    def edges(self) -> tuple[float, ...]:
        """Coordinates of the faces, from the inner to the outer one."""
        return tuple(accumulate((layer.thickness for layer in self.layers), initial=self.start))

    def problem(self) -> Problem:
        """The problem of this stack."""
        edges = self.edges
        return Problem(
            layers=tuple(
                Layer(start, end, p=layer.conductivity, w=layer.heat_capacity, name=layer.name)
                for layer, start, end in zip(self.layers, edges[:-1], edges[1:], strict=True)
            ),
            left=self.inner,
            right=self.outer,
            interfaces=tuple(
                Interface(edges[index + 1], resistance=self.layers[index].contact_resistance)
                for index in self._contacts()
            ),
            geometry=self.geometry,
            name=self.name,
            stack=self,
        )

    def _contacts(self) -> Iterable[int]:
        """Numbers of the layers with a contact resistance behind them."""
        return [index for index, layer in enumerate(self.layers) if layer.contact_resistance]

    def field_in_document(self, path: str) -> str:
        """The stack's own name for a field of its problem: ``layers[0].p`` is ``layers[0].conductivity``."""
        match = re.fullmatch(r"(layers|interfaces)\[(\d+)\](?:\.(\w+)(.*))?|(\w+)(.*)", path)
        if match is None:
            return path
        kind, number, part, rest, word, tail = match.groups()
        if kind == "layers":
            field = f".{_LAYER_FIELDS.get(part, part)}{rest}" if part else ""
            return f"stack.layers[{number}]{field}"
        if kind == "interfaces":
            contacts = list(self._contacts())
            if int(number) >= len(contacts):
                return "stack.layers"
            return f"stack.layers[{contacts[int(number)]}].contact_resistance"
        known = _STACK_FIELDS.get(word)
        return f"stack.{known}{tail}" if known else path
