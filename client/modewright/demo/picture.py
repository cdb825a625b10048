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
# Shades of the layers from the water outwards, quiet enough to lie under lines.
SHADES = ("#c9d3dc", "#fbf1d5", "#dcd7d2")
WATER_SHADE = "#dceaf5"
MODE_COLOURS = ("#8c2d04", "#d9601a", "#2b7a78", "#3b5b92", "#7a4fa3")
# Below this share of its start a coefficient is the finite-volume program's own error.
DECAY_FLOOR = 1e-6


def draw(pipe: BuriedPipe, cooling: Cooling, findings: Findings, target: Path) -> None:
    """Draw the picture and write it as PNG to ``target``. Raises ImportError without matplotlib."""
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    figure = Figure(figsize=(13.0, 12.2), facecolor="white")
    FigureCanvasAgg(figure)
    grid = figure.add_gridspec(
        3, 1, height_ratios=(0.86, 1.0, 1.0), hspace=0.30, left=0.06, right=0.94, top=0.895, bottom=0.05
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


def _shade_layers(axes: Axes, pipe: BuriedPipe, names: bool) -> None:
    for layer, shade in zip(pipe.layers, SHADES, strict=True):
        axes.axvspan(layer.inner * 1e3, layer.outer * 1e3, color=shade, zorder=0, linewidth=0)
        if names:
            middle = (layer.inner + layer.outer) * 500.0
            axes.annotate(
                layer.name,
                (middle, 0.0),
                xycoords=("data", "axes fraction"),
                xytext=(0, 5),
                textcoords="offset points",
                ha="center",
                fontsize=8,
                color=FAINT,
            )


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
    """The first modes over the radius, scaled to a largest value of one; the water's value as a dot."""
    _shade_layers(axes, pipe, names=True)
    margin = 3.0
    axes.axvspan(
        pipe.inner_radius * 1e3 - margin, pipe.inner_radius * 1e3, color=WATER_SHADE, zorder=0, linewidth=0
    )
    for n in range(min(SHOWN_MODES, len(findings.modes))):
        size = max(float(np.abs(findings.modes[n]).max()), abs(float(findings.water_modes[n])))
        span = findings.time_constants[n]
        axes.plot(
            findings.points * 1e3,
            findings.modes[n] / size,
            color=MODE_COLOURS[n],
            lw=1.8,
            label=f"n = {n}: {duration(span)}",
        )
        axes.plot(
            pipe.inner_radius * 1e3 - margin / 2.0,
            findings.water_modes[n] / size,
            "o",
            ms=5,
            color=MODE_COLOURS[n],
        )
    axes.axhline(0.0, color=FAINT, lw=0.6)
    axes.set_xlim(pipe.inner_radius * 1e3 - margin, pipe.outer_radius * 1e3)
    axes.set_ylim(-1.25, 1.6)
    axes.set_yticks((-1.0, -0.5, 0.0, 0.5, 1.0))
    axes.annotate(
        "water",
        (pipe.inner_radius * 1e3 - margin / 2.0, 0.0),
        xycoords=("data", "axes fraction"),
        xytext=(0, 5),
        textcoords="offset points",
        ha="center",
        fontsize=8,
        color=FAINT,
    )
    _temper(axes, "Modes and their time constants", "radius, mm", "φₙ / max |φₙ|")
    axes.legend(loc="upper right", ncols=3, fontsize=8.5, frameon=False, labelcolor=INK)


def _profiles(axes: Axes, pipe: BuriedPipe, cooling: Cooling, findings: Findings) -> None:
    """Temperature over the radius: cell averages as dots, the reconstruction as lines."""
    from matplotlib import colormaps

    _shade_layers(axes, pipe, names=False)
    centres = cooling.mesh.centroids * 1e3
    shades = colormaps["inferno"](np.linspace(0.78, 0.08, len(PROFILE_HOURS)))
    for shade, hour in zip(shades, PROFILE_HOURS, strict=True):
        i = _nearest(cooling, hour)
        axes.plot(findings.points * 1e3, findings.fields[i] + pipe.soil_temperature, color=shade, lw=1.6)
        axes.plot(
            centres[::3],
            cooling.cells[i, ::3] + pipe.soil_temperature,
            "o",
            ms=3.2,
            mfc="white",
            mec=shade,
            mew=0.9,
        )
        axes.annotate(
            "0 h" if hour == 0.0 else duration(cooling.times[i]),
            (pipe.layers[0].inner * 1e3, findings.fields[i, 0] + pipe.soil_temperature),
            xytext=(-4, 0),
            textcoords="offset points",
            ha="right",
            va="center",
            fontsize=8.5,
            color=shade,
        )
    axes.plot([], [], color=INK, lw=1.6, label="reconstructed from the modes")
    axes.plot([], [], "o", ms=3.2, mfc="white", mec=INK, label="finite volumes (every third cell)")
    axes.axhline(pipe.soil_temperature, color=FAINT, lw=0.8, ls=":")
    axes.set_xlim(pipe.inner_radius * 1e3 - 4.0, pipe.outer_radius * 1e3)
    _temper(axes, "Temperature through the wall", "radius, mm", "°C")
    axes.legend(
        loc="upper right", fontsize=8.5, frameon=True, framealpha=0.85, edgecolor="none", labelcolor=INK
    )


def _flux(axes: Axes, pipe: BuriedPipe, cooling: Cooling, findings: Findings) -> None:
    """Heat flux into the soil over time, per area and per metre of pipe."""
    hours = cooling.times / HOUR
    around = 2.0 * math.pi * pipe.outer_radius
    axes.plot(
        hours[1:],
        findings.foretold_flux[1:],
        color="#d9601a",
        lw=2.2,
        label="foretold from the first snapshot",
    )
    axes.plot(
        hours[1:], cooling.outer_flux[1:], "o", ms=3.6, mfc="white", mec=INK, mew=0.9, label="finite volumes"
    )
    axes.set_xscale("log")
    ticks = (1 / 60, 0.1, 1.0, 10.0, 72.0)
    axes.set_xticks(ticks, ["1 min", "6 min", "1 h", "10 h", "72 h"])
    axes.set_xlim(hours[1] * 0.9, hours[-1] * 1.1)
    peak = int(np.argmax(findings.foretold_flux))
    axes.annotate(
        f"the last peak's heat arrives:\n{findings.foretold_flux[peak]:.1f} W/m² after {hours[peak]:.1f} h",
        (hours[peak], findings.foretold_flux[peak]),
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
    right.set_ylim(0.0, axes.get_ylim()[1] * around)
    right.spines["top"].set_visible(False)
    right.set_ylabel("W per metre of pipe", color=INK)
    right.tick_params(colors=INK, labelsize=9)
    right.spines["right"].set_color(FAINT)
    axes.legend(loc="lower left", fontsize=8.5, frameon=False, labelcolor=INK)


def _decay(axes: Axes, cooling: Cooling, findings: Findings) -> None:
    """Coefficients of every snapshot over time against exp(-lambda t), each relative to its start."""
    hours = cooling.times / HOUR
    for n in range(min(SHOWN_MODES, len(findings.modes))):
        share = np.abs(findings.coefficients[:, n] / findings.coefficients[0, n])
        seen = (share > DECAY_FLOOR) & (hours > 0.0)
        fine = np.geomspace(hours[1], hours[-1], 300)
        law = np.exp(-findings.eigenvalues[n] * fine * HOUR)
        axes.plot(fine, law, color=MODE_COLOURS[n], lw=1.5)
        axes.plot(
            hours[seen], share[seen], "o", ms=3.6, mfc="white", mec=MODE_COLOURS[n], mew=0.9, label=f"n = {n}"
        )
    axes.set_xscale("log")
    axes.set_yscale("log")
    axes.set_xticks((1 / 60, 0.1, 1.0, 10.0, 72.0), ["1 min", "6 min", "1 h", "10 h", "72 h"])
    axes.set_xlim(hours[1] * 0.9, hours[-1] * 1.1)
    axes.set_ylim(DECAY_FLOOR, 2.0)
    _temper(axes, "Each mode decays at its own rate", "time after the pump stopped", "|cₙ(t) / cₙ(0)|")
    axes.plot([], [], color=FAINT, lw=1.5, label="exp(−λₙ t)")
    axes.plot([], [], "o", ms=3.6, mfc="white", mec=FAINT, label="projected")
    axes.legend(loc="lower left", fontsize=8.5, frameon=False, labelcolor=INK)
