"""The buried pipe of the demonstration: its layers, its surroundings, and its problem document.

A service pipe of steel carries hot water through an invented district-heating network. Around it lie
insulating foam and a casing; around the casing lies soil. Everything is given as temperature above the
undisturbed soil, so that the soil is at zero and the problem is homogeneous.

- *Water* is well mixed. Per unit area of the inner wall it stores rho c r_i / 2 (the capacity of a disc of
  radius r_i divided by its circumference), and it meets the steel through a film of 1/h. It is therefore a
  lump at the left end: mass rho c r_i / 2, resistance 1/h, no film of its own to the outside.
- *Foam* has a conductivity given as a table over the radius: its cell gas has been lost from the outside
  inwards over the years.
- *Soil* is taken as quasi-steady: a film on the casing whose coefficient follows from the conduction shape
  factor of a horizontal cylinder under an isothermal plane surface. The soil's own heat capacity is left
  out, which the command says beside its results.

All values are invented round numbers of a plausible size. None is a measurement of a real pipe.
"""

from __future__ import annotations

import csv
import math
from dataclasses import dataclass
from itertools import accumulate
from pathlib import Path

__all__ = ["BuriedPipe", "Layer", "invented_pipe", "shape_factor", "write_documents"]

FOAM_TABLE_NAME = "foam-conductivity.csv"
DOCUMENT_NAME = "problem.toml"


def shape_factor(depth: float, diameter: float) -> float:
    """Conduction shape factor of a buried horizontal cylinder, per metre of its length (dimensionless).

    S / L = 2 pi / arccosh(2 z / D), the heat flow from the cylinder being k S (T_cylinder - T_surface).
    Valid for an isothermal cylinder much longer than its diameter under an isothermal plane surface.

    Parameters
    ----------
    depth
        z, distance of the axis from the surface, m; more than half the diameter.
    diameter
        D, outer diameter of the cylinder, m.

    Raises
    ------
    ValueError
        When the cylinder is not wholly below the surface or a number is not positive and finite.

    References
    ----------
    F. P. Incropera, D. P. DeWitt, Fundamentals of Heat and Mass Transfer, table of conduction shape factors
    (horizontal isothermal cylinder of length L buried in a semi-infinite medium).
    E. Hahne, U. Grigull, Formfaktor und Formwiderstand der stationaeren mehrdimensionalen Waermeleitung,
    International Journal of Heat and Mass Transfer 18 (1975) 751-767.
    """
    if not (math.isfinite(depth) and math.isfinite(diameter) and diameter > 0.0):
        raise ValueError(
            f"depth {depth!r} and diameter {diameter!r} must be finite and the diameter positive"
        )
    if 2.0 * depth <= diameter:
        raise ValueError(f"depth {depth!r} m of the axis must exceed half the diameter, {diameter / 2.0!r} m")
    return 2.0 * math.pi / math.acosh(2.0 * depth / diameter)


@dataclass(frozen=True)
class Layer:
    """One shell of material.

    ``inner``, ``outer``: radii in m. ``conductivity``: W/(m K), a number, or a table ((radius, value), ...)
    that is linear between its points and covers the layer. ``heat_capacity``: J/(m3 K), per volume.
    ``contact``: resistance between this layer and the next one outside, m2 K/W.
    """

    name: str
    inner: float
    outer: float
    conductivity: float | tuple[tuple[float, float], ...]
    heat_capacity: float
    contact: float = 0.0


@dataclass(frozen=True)
class BuriedPipe:
    """The pipe, its water and its soil. Units are SI; temperatures in degrees Celsius."""

    layers: tuple[Layer, ...]
    water_heat_capacity: float  # J/(m3 K)
    running_film: float  # W/(m2 K), between water and steel while the pump runs
    still_film: float  # W/(m2 K), by free convection after it has stopped
    depth: float  # m, of the axis
    soil_conductivity: float  # W/(m K)
    ground_film: float  # W/(m2 K), between the ground's surface and the air
    soil_temperature: float  # undisturbed
    supply_temperature: float  # held for days
    peak_temperature: float  # held for ``peak_seconds`` before the pump stops
    peak_seconds: float

    @property
    def inner_radius(self) -> float:
        """Radius of the inner wall, m."""
        return self.layers[0].inner

    @property
    def outer_radius(self) -> float:
        """Radius of the casing's outer surface, m."""
        return self.layers[-1].outer

    @property
    def water_mass(self) -> float:
        """Heat capacity of the water per area of inner wall, rho c r_i / 2, J/(m2 K)."""
        return self.water_heat_capacity * self.inner_radius / 2.0

    @property
    def effective_depth(self) -> float:
        """Depth of the axis, m, with the ground's surface film counted as k / h more metres of soil.

        The equivalent layer is common practice for buried pipes; no source.
        """
        return self.depth + self.soil_conductivity / self.ground_film

    @property
    def soil_film(self) -> float:
        """Film coefficient on the casing that stands for the soil, k S / (2 pi r_o L), W/(m2 K)."""
        factor = shape_factor(self.effective_depth, 2.0 * self.outer_radius)
        return self.soil_conductivity * factor / (2.0 * math.pi * self.outer_radius)

    @property
    def supply_excess(self) -> float:
        """Supply temperature above the soil, K."""
        return self.supply_temperature - self.soil_temperature

    @property
    def peak_excess(self) -> float:
        """Peak temperature above the soil, K."""
        return self.peak_temperature - self.soil_temperature


def invented_pipe() -> BuriedPipe:
    """The pipe that the demonstration shows. Every number is invented."""
    foam = (
        (0.0840, 0.0304),
        (0.0885, 0.0285),
        (0.0930, 0.0276),
        (0.0980, 0.0273),
        (0.1030, 0.0277),
        (0.1080, 0.0288),
        (0.1130, 0.0304),
        (0.1175, 0.0322),
        (0.1210, 0.0337),
    )
    # Radii are added up from the inner one, as a stack does, so that meshes meet its faces bit for bit.
    materials: tuple[tuple[str, float, float | tuple[tuple[float, float], ...], float, float], ...] = (
        ("steel", 0.004, 50.0, 3.65e6, 2.0e-3),
        ("foam", 0.037, foam, 8.4e4, 0.0),
        ("casing", 0.004, 0.40, 1.8e6, 0.0),
    )
    radii = list(accumulate((material[1] for material in materials), initial=0.080))
    return BuriedPipe(
        layers=tuple(
            Layer(name, inner, outer, conductivity, capacity, contact)
            for (name, _, conductivity, capacity, contact), inner, outer in zip(
                materials, radii[:-1], radii[1:], strict=True
            )
        ),
        water_heat_capacity=4.07e6,
        running_film=3000.0,
        still_film=220.0,
        depth=0.90,
        soil_conductivity=1.4,
        ground_film=15.0,
        soil_temperature=9.0,
        supply_temperature=80.0,
        peak_temperature=105.0,
        peak_seconds=900.0,
    )


def write_documents(pipe: BuriedPipe, folder: Path) -> Path:
    """Write the problem document (TOML) and the foam's table (CSV) that it names; the document's path."""
    for layer in pipe.layers:
        if not isinstance(layer.conductivity, float):
            with (folder / FOAM_TABLE_NAME).open("w", newline="", encoding="utf-8") as handle:
                rows = csv.writer(handle, lineterminator="\n")
                rows.writerow(("radius", "conductivity"))
                rows.writerows((repr(radius), repr(value)) for radius, value in layer.conductivity)
    target = folder / DOCUMENT_NAME
    target.write_text(document_text(pipe), encoding="utf-8")
    return target


def document_text(pipe: BuriedPipe) -> str:
    """The problem document: a stack of material layers that the client turns into p, q and w."""
    lines = [
        "# A buried pre-insulated pipe after its pump has stopped. All values are invented.",
        "# Temperatures are counted from the undisturbed soil; lengths in m, W, J, K, s.",
        'name = "buried pipe"',
        "",
        "[stack]",
        'geometry = "cylindrical"',
        f"start = {pipe.inner_radius!r}",
        "",
        "[stack.inner]  # well-mixed water: rho c r / 2 per area of wall, behind its film 1/h",
        'kind = "lump"',
        f"mass = {pipe.water_mass!r}",
        f"resistance = {1.0 / pipe.still_film!r}",
        "",
        "[stack.outer]  # the soil: k S / (2 pi r L), S the shape factor of a buried cylinder",
        'kind = "film"',
        f"film = {pipe.soil_film!r}",
    ]
    for layer in pipe.layers:
        lines += ["", "[[stack.layers]]", f'name = "{layer.name}"', f"thickness = {thickness(layer)!r}"]
        if isinstance(layer.conductivity, float):
            lines.append(f"conductivity = {layer.conductivity!r}")
        else:
            lines.append(
                f'conductivity = {{ file = "{FOAM_TABLE_NAME}", columns = ["radius", "conductivity"],'
                ' interpolation = "linear" }'
            )
        lines.append(f"heat_capacity = {layer.heat_capacity!r}")
        if layer.contact:
            lines.append(f"contact_resistance = {layer.contact!r}")
    return "\n".join(lines) + "\n"


def thickness(layer: Layer) -> float:
    """Thickness of a layer in m, free of the last-digit noise of the subtraction."""
    return round(layer.outer - layer.inner, 12)
