"""The demonstration's picture: the pipe cooling, the modes that do it, and the two programs side by side.

Needs matplotlib, which the ``plot`` extra brings; it is imported here alone and drawn without a display.
"""

from __future__ import annotations

import math
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from modewright.demo.findings import Findings
from modewright.demo.finite_volume import Cooling
from modewright.demo.pipe import BuriedPipe
from modewright.demo.report import HOUR, duration

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["draw"]

Floats = npt.NDArray[np.float64]

SECTION_HOURS = (0.0, 1.5, 12.0, 72.0)
PROFILE_HOURS = (0.0, 6.0, 24.0, 48.0, 72.0)
SHOWN_MODES = 5
INK = "#22303c"
FAINT = "#8795a1"
HAZE = "#c3ccd4"
# Shades of the layers from the water outwards, quiet enough to lie under lines.
SHADES = ("#c9d3dc", "#fbf1d5", "#dcd7d2")
WATER_SHADE = "#dceaf5"
# Width of the strip that stands for the water left of the wall, mm.
WATER_STRIP = 3.5
MODE_COLOURS = ("#8c2d04", "#d9601a", "#2b7a78", "#3b5b92", "#7a4fa3")
# Lowest share that the picture shows.
DECAY_FLOOR = 1e-6


def draw(pipe: BuriedPipe, cooling: Cooling, findings: Findings, target: Path) -> None:
    """Draw the picture and write it as PNG to ``target``. Raises ImportError without matplotlib."""
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    figure = Figure(figsize=(13.0, 12.2), facecolor="white")
    FigureCanvasAgg(figure)
    grid = figure.add_gridspec(
        3, 1, height_ratios=(0.86, 1.0, 1.0), hspace=0.30, left=0.06, right=0.94, top=0.895, bottom=0.065
    )
    figure.text(
        0.06,
        0.978,
        "A buried pipe cools after its pump has stopped",
        fontsize=17,
        color=INK,
        weight="bold",
        va="top",
    )
    figure.text(
        0.06,
        0.951,
        f"Invented district-heating network. {len(findings.eigenvalues)} modes of the layered wall with its"
        " water, solved with bounds, against a finite-volume program.",
        fontsize=10.5,
        color=FAINT,
        va="top",
    )
    figure.text(
        0.94,
        0.012,
        "Invented data. Not a design approval: local codes and licensed practice decide.",
        fontsize=8.5,
        color=FAINT,
        ha="right",
    )
    _sections(figure, grid[0], pipe, cooling, findings)
    middle = grid[1].subgridspec(1, 2, wspace=0.24)
    lower = grid[2].subgridspec(1, 2, wspace=0.24)
    _modes(figure.add_subplot(middle[0]), pipe, findings)
    _profiles(figure.add_subplot(middle[1]), pipe, cooling, findings)
    _flux(figure.add_subplot(lower[0]), pipe, cooling, findings)
    _decay(figure.add_subplot(lower[1]), cooling, findings)
    figure.savefig(target, dpi=130)


def _nearest(cooling: Cooling, hour: float) -> int:
    return int(np.argmin(np.abs(cooling.times - hour * HOUR)))


def _temper(axes: Axes, title: str, xlabel: str, ylabel: str) -> None:
    axes.set_title(title, loc="left", fontsize=11.5, color=INK, weight="bold", pad=8)
    axes.set_xlabel(xlabel, color=INK)
    axes.set_ylabel(ylabel, color=INK)
    axes.tick_params(colors=INK, labelsize=9)
    for side in ("top", "right"):
        axes.spines[side].set_visible(False)
    for side in ("left", "bottom"):
        axes.spines[side].set_color(FAINT)


def _dots(colour: Any, size: float = 3.4) -> dict[str, Any]:
    """Style of what the finite-volume program found."""
    return {"marker": "o", "ms": size, "mfc": "white", "mec": colour, "mew": 0.9, "ls": "none"}


def _shade_layers(axes: Axes, pipe: BuriedPipe) -> None:
    """Shade and name water and layers over a radius in mm, and set the axis to them."""
    inner = pipe.inner_radius * 1e3
    spans = [("water", inner - WATER_STRIP, inner, WATER_SHADE)]
    spans += [
        (layer.name, layer.inner * 1e3, layer.outer * 1e3, shade)
        for layer, shade in zip(pipe.layers, SHADES, strict=True)
    ]
    for name, start, end, shade in spans:
        axes.axvspan(start, end, color=shade, zorder=0, linewidth=0)
        axes.annotate(
            name,
            ((start + end) / 2.0, 0.0),
            xycoords=("data", "axes fraction"),
            xytext=(0, 5),
            textcoords="offset points",
            ha="center",
            fontsize=8,
            color=FAINT,
        )
    axes.set_xlim(inner - WATER_STRIP, pipe.outer_radius * 1e3)


def _time_axis(axes: Axes, hours: Floats) -> None:
    """A logarithmic axis of hours, named in words."""
    axes.set_xscale("log")
    axes.set_xticks((1 / 60, 0.1, 1.0, 10.0, 72.0), ["1 min", "6 min", "1 h", "10 h", "72 h"])
    axes.set_xlim(float(hours[1]) * 0.9, float(hours[-1]) * 1.1)


def _sections(figure: Figure, cell: Any, pipe: BuriedPipe, cooling: Cooling, findings: Findings) -> None:
    """Cross-sections at a few times, coloured by the reconstructed temperature."""
    row = cell.subgridspec(
        1, len(SECTION_HOURS) + 1, width_ratios=(*[1.0] * len(SECTION_HOURS), 0.05), wspace=0.04
    )
    angle = np.linspace(0.0, 2.0 * math.pi, 241)
    radii = np.concatenate([[0.0, pipe.inner_radius], findings.points]) * 1e3
    low, high = pipe.soil_temperature, pipe.soil_temperature + float(cooling.water[0])
    mesh = None
    for place, hour in enumerate(SECTION_HOURS):
        axes = figure.add_subplot(row[place])
        index = _nearest(cooling, hour)
        water = findings.water[index]
        values = np.concatenate([[water, water], findings.fields[index]]) + pipe.soil_temperature
        between = (values[:-1] + values[1:]) / 2.0
        mesh = axes.pcolormesh(
            np.outer(radii, np.cos(angle)),
            np.outer(radii, np.sin(angle)),
            np.repeat(between[:, None], len(angle) - 1, axis=1),
            cmap="inferno",
            vmin=low,
            vmax=high,
            rasterized=True,
        )
        for layer in pipe.layers:
            circle = layer.inner * 1e3
            axes.plot(circle * np.cos(angle), circle * np.sin(angle), color="white", lw=0.6, alpha=0.7)
        rim = pipe.outer_radius * 1e3
        axes.plot(rim * np.cos(angle), rim * np.sin(angle), color=INK, lw=1.2)
        dark = water + pipe.soil_temperature < low + 0.6 * (high - low)
        axes.text(
            0.0,
            0.0,
            f"{water + pipe.soil_temperature:.1f} °C",
            ha="center",
            va="center",
            fontsize=13,
            color="white" if dark else INK,
            weight="bold",
        )
        title = "the pump stops" if hour == 0.0 else f"{duration(cooling.times[index])} later"
        axes.set_title(title, fontsize=11, color=INK)
        axes.set_xlim(-1.02 * rim, 1.02 * rim)
        axes.set_ylim(-1.02 * rim, 1.02 * rim)
        axes.set_aspect("equal")
        axes.set_axis_off()
    bar = figure.colorbar(mesh, cax=figure.add_subplot(row[-1]))  # type: ignore[arg-type]
    bar.set_label("temperature, °C", color=INK)
    bar.ax.tick_params(colors=INK, labelsize=9)


def _modes(axes: Axes, pipe: BuriedPipe, findings: Findings) -> None:
    """The first modes over the radius, scaled to a largest value of one; the water's value in its strip."""
    _shade_layers(axes, pipe)
    inner = pipe.inner_radius * 1e3
    for n in range(min(SHOWN_MODES, len(findings.modes))):
        size = max(float(np.abs(findings.modes[n]).max()), abs(float(findings.water_modes[n])))
        colour, water = MODE_COLOURS[n], findings.water_modes[n] / size
        axes.plot(
            findings.points * 1e3,
            findings.modes[n] / size,
            color=colour,
            lw=1.8,
            label=f"n = {n}: {duration(findings.time_constants[n])}",
        )
        axes.plot([inner - WATER_STRIP, inner], [water, water], color=colour, lw=1.8)
    axes.axhline(0.0, color=FAINT, lw=0.6)
    axes.set_ylim(-1.25, 1.6)
    axes.set_yticks((-1.0, -0.5, 0.0, 0.5, 1.0))
    _temper(axes, "Modes and their time constants", "radius, mm", "φₙ / max |φₙ|")
    axes.legend(loc="upper right", ncols=3, fontsize=8.5, frameon=False, labelcolor=INK)


def _profiles(axes: Axes, pipe: BuriedPipe, cooling: Cooling, findings: Findings) -> None:
    """Temperature over the radius: cell averages as dots, the reconstruction as lines."""
    from matplotlib import colormaps

    _shade_layers(axes, pipe)
    soil, inner = pipe.soil_temperature, pipe.inner_radius * 1e3
    centres = cooling.mesh.centroids * 1e3
    shades = colormaps["inferno"](np.linspace(0.78, 0.08, len(PROFILE_HOURS)))
    for shade, hour in zip(shades, PROFILE_HOURS, strict=True):
        i = _nearest(cooling, hour)
        water = findings.water[i] + soil
        axes.plot([inner - WATER_STRIP, inner], [water, water], color=shade, lw=1.6)
        axes.plot(findings.points * 1e3, findings.fields[i] + soil, color=shade, lw=1.6)
        axes.plot(inner - WATER_STRIP / 2.0, cooling.water[i] + soil, **_dots(shade))
        axes.plot(centres[::6], cooling.cells[i, ::6] + soil, **_dots(shade))
        axes.annotate(
            "0 h" if hour == 0.0 else duration(cooling.times[i]),
            (inner, water),
            xytext=(0, 5),
            textcoords="offset points",
            ha="center",
            fontsize=9,
            color=shade,
        )
    axes.plot([], [], color=INK, lw=1.6, label="reconstructed from the modes")
    axes.plot([], [], **_dots(INK), label="finite volumes (every sixth cell)")
    axes.axhline(soil, color=FAINT, lw=0.8, ls=":")
    axes.annotate(
        "undisturbed soil",
        (95.0, soil),
        xytext=(0, 3),
        textcoords="offset points",
        fontsize=8,
        color=FAINT,
    )
    axes.set_ylim(0.0, 120.0)
    _temper(axes, "Temperature through the wall", "radius, mm", "°C")
    axes.legend(loc="upper right", fontsize=8.5, frameon=False, labelcolor=INK)


def _flux(axes: Axes, pipe: BuriedPipe, cooling: Cooling, findings: Findings) -> None:
    """Heat flux into the soil over time, per area and per metre of pipe."""
    hours = cooling.times / HOUR
    flux = findings.foretold_flux
    axes.plot(hours[1:], flux[1:], color=MODE_COLOURS[1], lw=2.2, label="foretold from the first snapshot")
    axes.plot(hours[1:], cooling.outer_flux[1:], **_dots(INK), label="finite volumes")
    _time_axis(axes, hours)
    peak = int(np.argmax(flux))
    axes.annotate(
        f"the last peak's heat arrives:\n{flux[peak]:.1f} W/m² after {hours[peak]:.2f} h",
        (hours[peak], flux[peak]),
        xytext=(-20, -70),
        textcoords="offset points",
        ha="right",
        fontsize=9,
        color=INK,
        arrowprops={"arrowstyle": "-", "color": FAINT, "lw": 0.8},
    )
    axes.set_ylim(0.0, float(cooling.outer_flux.max()) * 1.12)
    _temper(axes, "Heat flux into the soil", "time after the pump stopped", "W/m² of casing")
    right = axes.twinx()
    right.set_ylim(0.0, axes.get_ylim()[1] * 2.0 * math.pi * pipe.outer_radius)
    right.set_ylabel("W per metre of pipe", color=INK)
    right.tick_params(colors=INK, labelsize=9)
    right.spines["right"].set_color(FAINT)
    for side in ("top", "left", "bottom"):
        right.spines[side].set_visible(False)
    axes.legend(loc="lower left", fontsize=8.5, frameon=False, labelcolor=INK)


def _decay(axes: Axes, cooling: Cooling, findings: Findings) -> None:
    """Coefficients of every snapshot over time against exp(-lambda t), each relative to its start."""
    hours = cooling.times / HOUR
    fine = np.geomspace(hours[1], hours[-1], 300)
    for n in range(min(SHOWN_MODES, len(findings.modes))):
        share = np.abs(findings.coefficients[:, n] / findings.coefficients[0, n])
        law = np.exp(-findings.eigenvalues[n] * cooling.times)
        apart = np.abs(share - law) > 0.1 * law
        seen = (share > DECAY_FLOOR) & (hours > 0.0)
        axes.plot(fine, np.exp(-findings.eigenvalues[n] * fine * HOUR), color=MODE_COLOURS[n], lw=1.5)
        axes.plot(hours[seen & apart], share[seen & apart], **_dots(HAZE, size=2.0))
        axes.plot(hours[seen & ~apart], share[seen & ~apart], **_dots(MODE_COLOURS[n]), label=f"n = {n}")
    axes.set_yscale("log")
    _time_axis(axes, hours)
    axes.set_ylim(DECAY_FLOOR, 2.0)
    _temper(axes, "Each mode decays at its own rate", "time after the pump stopped", "|cₙ(t) / cₙ(0)|")
    axes.plot([], [], color=FAINT, lw=1.5, label="exp(−λₙ t)")
    axes.plot([], [], **_dots(FAINT), label="projected")
    axes.plot([], [], **_dots(HAZE, size=2.0), label="finite-volume error")
    axes.legend(loc="lower left", fontsize=8.5, frameon=False, labelcolor=INK)
