"""The demonstration from end to end: finite volumes, the real service, then tables, files and a picture."""

from __future__ import annotations

import csv
import json
import sys
import textwrap
import time
from pathlib import Path
from typing import TextIO

import numpy as np
import numpy.typing as npt

import modewright
from modewright.demo.findings import Findings, examine
from modewright.demo.finite_volume import Cooling, cool_down
from modewright.demo.pipe import BuriedPipe, invented_pipe, write_documents
from modewright.demo.report import (
    CAUTION,
    SHOWN_HOURS,
    closing,
    flux_rows,
    headline,
    mode_rows,
    render,
    summary,
)

__all__ = ["run_demonstration"]

MODES = 16
# Cells of steel, foam and casing. With so many, and sixteen steps between snapshots, the flux is good to a
# few times 1e-6, and all of it takes half a second.
CELLS = (16, 160, 32)
STEPS = 16
MINUTE, HOUR = 60.0, 3600.0


def logger_times() -> npt.NDArray[np.float64]:
    """Times of the snapshots, s: every minute at first, every hour in the end, 72 h in all."""
    return np.concatenate(
        [
            np.arange(0.0, 10.0) * MINUTE,
            np.arange(10.0, 60.0, 5.0) * MINUTE,
            np.arange(1.0, 6.0, 0.25) * HOUR,
            np.arange(6.0, 73.0) * HOUR,
        ]
    )


def run_demonstration(
    folder: Path, address: str | None = None, out: TextIO | None = None, timeout: float | None = None
) -> None:
    """Run the demonstration, print its tables to ``out`` (standard output) and write its files to ``folder``.

    ``address``: of a running service; without one, the service is started for the occasion. ``timeout``:
    seconds for each call. Raises ``modewright.ModewrightError`` when the service fails and ``OSError`` when
    the folder cannot be written.
    """
    stream = sys.stdout if out is None else out

    def say(text: str = "") -> None:
        print(text, file=stream)

    began = time.perf_counter()
    folder.mkdir(parents=True, exist_ok=True)
    pipe = invented_pipe()
    times = logger_times()
    cooling = cool_down(pipe, CELLS, times, STEPS)
    coarse = cool_down(pipe, [count // 2 for count in CELLS], times, STEPS // 2)
    own_change = {
        "outer_flux": float(np.abs(coarse.outer_flux / cooling.outer_flux - 1.0).max()),
        "water_K": float(np.abs(coarse.water - cooling.water).max()),
    }
    document = write_documents(pipe, folder)
    say(headline(pipe, cooling))
    say()

    problem = modewright.Problem.load(document)
    with modewright.connect(address, timeout=timeout) as service:
        basis = service.solve(problem, modes=MODES)
        basis.save(folder / "basis.record")
        findings = examine(basis, pipe, cooling)

    say(render(mode_rows(findings, times)))
    say("Bounds are computed in floating point with a margin for rounding, not by interval arithmetic.")
    say("1/lambda: time constant. share, left after: of the first snapshot's squared norm, with the water.")
    say("decay check: largest |c(t) - c(0) exp(-lambda t)| over the snapshots, relative to |c(0)|. It shows")
    say("the finite-volume program's error, which is no smaller in the modes that hold little of the field.")
    say()
    say(render(flux_rows(pipe, cooling, findings, SHOWN_HOURS)))
    say("Heat flux through the casing. FV: finite volumes. modes: from each snapshot's coefficients.")
    say("foretold: from those of the first snapshot alone, by exp(-lambda t). Differences relative to FV.")
    say()
    say(closing(pipe, cooling, findings, own_change))
    say()
    write_results(folder, pipe, cooling, findings, own_change)
    picture = draw_picture(folder, pipe, cooling, findings)
    say(CAUTION)
    say()
    names = ", ".join(sorted(path.name for path in folder.iterdir() if path.is_file()))
    say(textwrap.fill(f"Files in {folder}: {names}", width=100, break_on_hyphens=False))
    if not picture:
        say("No picture: matplotlib is not installed; the extra 'plot' brings it.")
    say(f"{time.perf_counter() - began:.1f} s in all.")


def write_results(
    folder: Path, pipe: BuriedPipe, cooling: Cooling, findings: Findings, own_change: dict[str, float]
) -> None:
    """Write snapshots, coefficients, tables and summary."""
    np.savez(
        folder / "snapshots.npz",
        edges=cooling.mesh.edges,
        values=cooling.cells,
        left_lump=cooling.water,
        measure=np.array("cylindrical"),
        times=cooling.times,
        outer_flux=cooling.outer_flux,
    )
    np.savez(
        folder / "coefficients.npz",
        coefficients=findings.coefficients,
        captured=findings.captured,
        residual=findings.residual,
        norm=findings.norm,
        eigenvalues=findings.eigenvalues,
        basis_key=np.array(findings.key),
        problem_digest=np.array(findings.digest),
        times=cooling.times,
    )
    for name, (header, rows) in (
        ("modes.csv", mode_rows(findings, cooling.times)),
        ("outer-flux.csv", flux_rows(pipe, cooling, findings)),
    ):
        with (folder / name).open("w", newline="", encoding="utf-8") as handle:
            writer = csv.writer(handle, lineterminator="\n")
            writer.writerow(header)
            writer.writerows(rows)
    text = json.dumps(summary(pipe, cooling, findings, own_change), indent=2)
    (folder / "summary.json").write_text(text + "\n", encoding="utf-8")


def draw_picture(folder: Path, pipe: BuriedPipe, cooling: Cooling, findings: Findings) -> bool:
    """Draw the picture; False where matplotlib is missing."""
    from modewright.demo import picture

    try:
        picture.draw(pipe, cooling, findings, folder / "cooling.png")
    except ModuleNotFoundError as missing:
        if missing.name is None or missing.name.partition(".")[0] != "matplotlib":
            raise
        return False
    return True
