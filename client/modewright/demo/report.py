"""The demonstration's words and tables: for the terminal, for CSV files and for the JSON summary."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import numpy.typing as npt

from modewright.demo.findings import Findings
from modewright.demo.finite_volume import Cooling
from modewright.demo.pipe import BuriedPipe

__all__ = ["CAUTION", "flux_rows", "headline", "mode_rows", "render", "summary"]

Floats = npt.NDArray[np.float64]
Table = tuple[tuple[str, ...], list[tuple[str, ...]]]

HOUR = 3600.0
# Times at which the terminal's table shows the flux; the CSV file has all of them.
SHOWN_HOURS = (0.0, 5 / 60, 0.5, 1.0, 1.5, 3.0, 6.0, 12.0, 24.0, 48.0, 72.0)

CAUTION = (
    "Caution. The pipe, its tables and its history are invented, and the soil is taken as quasi-steady.\n"
    "This is not a design approval. Hot and pressurised water can scald and burst pipes: for a real\n"
    "installation, local codes and licensed practice decide."
)


def duration(seconds: float) -> str:
    """A time span in the unit in which it is easiest to read."""
    if seconds < 120.0:
        return f"{seconds:.3g} s"
    if seconds < 2.0 * HOUR:
        return f"{seconds / 60.0:.3g} min"
    return f"{seconds / HOUR:.3g} h"


def mode_rows(findings: Findings, times: Floats) -> Table:
    """Header and rows of the table of modes."""
    header: tuple[str, ...] = (
        "n",
        "lambda [1/s]",
        "lower bound [1/s]",
        "upper bound [1/s]",
        "1/lambda [h]",
        "share",
        "left after",
        "decay check",
    )
    shares, left = findings.shares()
    departure = findings.decay_departure(times)
    rows: list[tuple[str, ...]] = [
        (
            str(n),
            f"{value:.6e}",
            f"{findings.lower[n]:.14e}",
            f"{findings.upper[n]:.14e}",
            f"{1.0 / value / HOUR:.5g}",
            f"{shares[n]:.3e}",
            f"{left[n]:.3e}",
            f"{departure[n]:.1e}",
        )
        for n, value in enumerate(findings.eigenvalues)
    ]
    return header, rows


def flux_rows(
    pipe: BuriedPipe, cooling: Cooling, findings: Findings, hours: tuple[float, ...] | None = None
) -> Table:
    """Header and rows of the outer heat flux over time, both programs; at ``hours`` or at every snapshot."""
    header: tuple[str, ...] = (
        "time [h]",
        "water [C]",
        "FV [W/m2]",
        "modes [W/m2]",
        "difference",
        "foretold [W/m2]",
        "difference",
        "per metre [W/m]",
    )
    chosen = np.arange(len(cooling.times))
    if hours is not None:
        chosen = np.array([int(np.argmin(np.abs(cooling.times - hour * HOUR))) for hour in hours])
    around = 2.0 * math.pi * pipe.outer_radius
    rows: list[tuple[str, ...]] = []
    for i in chosen:
        volume, modal, foretold = cooling.outer_flux[i], findings.outer_flux[i], findings.foretold_flux[i]
        rows.append(
            (
                f"{cooling.times[i] / HOUR:.4g}",
                f"{findings.water[i] + pipe.soil_temperature:.3f}",
                f"{volume:.5f}",
                f"{modal:.5f}",
                f"{modal / volume - 1.0:+.1e}",
                f"{foretold:.5f}",
                f"{foretold / volume - 1.0:+.1e}",
                f"{modal * around:.4f}",
            )
        )
    return header, rows


def render(table: Table) -> str:
    """A table as aligned text, numbers to the right."""
    header, rows = table
    widths = [max(len(row[i]) for row in [header, *rows]) for i in range(len(header))]
    lines = [
        "  ".join(cell.rjust(width) for cell, width in zip(row, widths, strict=True))
        for row in [header, *rows]
    ]
    lines.insert(1, "  ".join("-" * width for width in widths))
    return "\n".join(lines)


def summary(
    pipe: BuriedPipe, cooling: Cooling, findings: Findings, own_change: dict[str, float]
) -> dict[str, Any]:
    """The quotable numbers, ready for JSON. ``own_change``: what a halved mesh and step change (see run)."""
    flux_change = np.abs(findings.outer_flux / cooling.outer_flux - 1.0)
    foretold_change = np.abs(findings.foretold_flux / cooling.outer_flux - 1.0)
    peak = int(np.argmax(findings.outer_flux))
    shares, left = findings.shares()
    return {
        "caution": CAUTION.replace("\n", " "),
        "invented": True,
        "basis_key": findings.key,
        "soil_film_W_per_m2K": pipe.soil_film,
        "water_mass_J_per_m2K": pipe.water_mass,
        "modes": len(findings.eigenvalues),
        "solve_seconds": findings.solve_seconds,
        "zeros": findings.zeros.tolist(),
        "confirmed_by_comparison": int(findings.confirmed.sum()),
        "eigenvalues_per_s": findings.eigenvalues.tolist(),
        "lower_per_s": findings.lower.tolist(),
        "upper_per_s": findings.upper.tolist(),
        "time_constants_h": (findings.time_constants / HOUR).tolist(),
        "share_of_first_snapshot": shares.tolist(),
        "share_left_after_mode": left.tolist(),
        "snapshots": len(cooling.times),
        "relative_residual_first": float(findings.residual[0] / findings.norm[0]),
        "relative_residual_largest": float((findings.residual / findings.norm).max()),
        "captured_share_smallest": float(findings.captured.min()),
        "decay_departure": findings.decay_departure(cooling.times).tolist(),
        "outer_flux_largest_W_per_m2": float(findings.outer_flux[peak]),
        "outer_flux_largest_at_h": float(cooling.times[peak] / HOUR),
        "outer_flux_largest_relative_difference": float(flux_change.max()),
        "foretold_flux_largest_relative_difference": float(foretold_change.max()),
        "water_largest_difference_K": float(np.abs(findings.water - cooling.water).max()),
        "foretold_water_largest_difference_K": float(np.abs(findings.foretold_water - cooling.water).max()),
        "finite_volume_change_on_halving": own_change,
        "heat_lost_kWh_per_m": float(cooling.lost[-1] / 3.6e6),
        "hours": float(cooling.times[-1] / HOUR),
    }


def headline(pipe: BuriedPipe, cooling: Cooling) -> str:
    """What is looked at, in a few lines."""
    names = ", ".join(f"{layer.name} {(layer.outer - layer.inner) * 1e3:.0f} mm" for layer in pipe.layers)
    return (
        "A buried pre-insulated pipe cools after its pump has stopped (invented values).\n"
        f"  pipe      {names}; inner radius {pipe.inner_radius * 1e3:.0f} mm\n"
        f"  water     well mixed, {pipe.water_mass:.4g} J/(m2 K) of wall, behind a film of"
        f" {pipe.still_film:g} W/(m2 K)\n"
        f"  soil      axis {pipe.depth:g} m deep, {pipe.soil_conductivity:g} W/(m K): as a film,"
        f" {pipe.soil_film:.4f} W/(m2 K); {pipe.soil_temperature:g} C far away\n"
        f"  history   {pipe.supply_temperature:g} C for days, {pipe.peak_temperature:g} C for the last"
        f" {duration(pipe.peak_seconds)}, then the pump stops\n"
        f"  snapshots {len(cooling.times)} over {cooling.times[-1] / HOUR:g} h by a finite-volume program:"
        f" {len(cooling.mesh.layer)} cell averages and the water's temperature each"
    )


def closing(pipe: BuriedPipe, cooling: Cooling, findings: Findings, own_change: dict[str, float]) -> str:
    """The findings in sentences."""
    facts = summary(pipe, cooling, findings, own_change)
    hour = cooling.times[-1] / HOUR
    return (
        f"The service solved for {facts['modes']} modes in {facts['solve_seconds']:.2f} s;"
        f" {facts['confirmed_by_comparison']} of {facts['modes']} indices are confirmed by a comparison"
        " problem.\n"
        f"Residual of the projection: {facts['relative_residual_first']:.1e} of the first snapshot's norm,"
        f" at most {facts['relative_residual_largest']:.1e} over all.\n"
        f"Outer heat flux: largest {facts['outer_flux_largest_W_per_m2']:.3f} W/m2,"
        f" {facts['outer_flux_largest_at_h']:.2f} h after the pump stopped;"
        f" {facts['heat_lost_kWh_per_m']:.3f} kWh per metre lost in {hour:g} h.\n"
        f"Modes against finite volumes: flux within {facts['outer_flux_largest_relative_difference']:.1e},"
        f" water within {facts['water_largest_difference_K']:.1e} K.\n"
        "Foretold from the first snapshot alone: flux within"
        f" {facts['foretold_flux_largest_relative_difference']:.1e}, water within"
        f" {facts['foretold_water_largest_difference_K']:.1e} K.\n"
        "Halving the finite-volume program's own mesh and steps changes its flux by"
        f" {own_change['outer_flux']:.1e} and its\nwater by {own_change['water_K']:.1e} K,"
        " which measures its own error."
    )
