"""What the demonstration finds: the modal answer beside the finite-volume one.

All modal numbers come from the service: the basis, the coefficients of every snapshot, and the fields and
fluxes put together from them. Here they are only set side by side.

Two modal answers are compared with the finite-volume program. *Reconstructed*: each snapshot's own
coefficients, summed again. *Foretold*: the coefficients of the first snapshot alone, each multiplied by
exp(-lambda_n t), which is exact in time for a linear problem with constant surroundings.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

import modewright
from modewright.demo.finite_volume import Cooling
from modewright.demo.pipe import BuriedPipe

__all__ = ["Findings", "examine"]

Floats = npt.NDArray[np.float64]

POINTS_PER_LAYER = 60


@dataclass(frozen=True)
class Findings:
    """The modal answer; T snapshots, N modes, P points. Temperatures are above the soil's.

    ``eigenvalues``, ``lower``, ``upper`` (N,) 1/s; ``zeros`` (N,) counted inside; ``confirmed`` (N,) by a
    comparison problem. ``coefficients`` (T, N) in the basis's own normalisation. ``captured`` (T,) share of
    the squared norm that the modes hold, ``residual`` (T,) norm of what is left, ``norm`` (T,). ``points``
    (P,) m, interfaces twice, the inner side first; ``modes`` (N, P); ``water_modes`` (N,) the water's own
    value in each mode. ``fields`` (T, P) K, ``water`` (T,) K and ``outer_flux`` (T,) W/m2 are reconstructed;
    ``foretold_water`` and ``foretold_flux`` (T,) come from the first snapshot alone.
    """

    eigenvalues: Floats
    lower: Floats
    upper: Floats
    zeros: npt.NDArray[np.int64]
    confirmed: npt.NDArray[np.bool_]
    key: str
    digest: str
    solve_seconds: float
    coefficients: Floats
    captured: Floats
    residual: Floats
    norm: Floats
    points: Floats
    modes: Floats
    water_modes: Floats
    fields: Floats
    water: Floats
    outer_flux: Floats
    foretold_water: Floats
    foretold_flux: Floats

    @property
    def time_constants(self) -> Floats:
        """(N,) 1 / lambda, s."""
        return np.asarray(1.0 / self.eigenvalues)

    def decayed(self, times: Floats) -> Floats:
        """(T, N) the first snapshot's coefficients times exp(-lambda_n t)."""
        return np.asarray(self.coefficients[0] * np.exp(-np.multiply.outer(times, self.eigenvalues)))

    def shares(self) -> tuple[Floats, Floats]:
        """For the first snapshot: each mode's share of the squared norm, and what is left after that mode.

        Both (N,). What is left is summed from the far end, so that small remainders keep their digits.
        """
        squares = self.coefficients[0] ** 2
        whole = self.norm[0] ** 2
        beyond = np.cumsum(squares[::-1])[::-1] - squares
        return squares / whole, (beyond + self.residual[0] ** 2) / whole

    def decay_departure(self, times: Floats) -> Floats:
        """(N,) largest |c_n(t) - c_n(0) exp(-lambda_n t)| over the snapshots, relative to |c_n(0)|."""
        departure = np.abs(self.coefficients - self.decayed(times)).max(axis=0)
        return np.asarray(departure / np.abs(self.coefficients[0]))


def _viewing_points(pipe: BuriedPipe) -> tuple[Floats, list[tuple[slice, str]]]:
    """Points of every layer, faces included, and the side from which each block's outer face is seen."""
    blocks = [np.linspace(layer.inner, layer.outer, POINTS_PER_LAYER) for layer in pipe.layers]
    parts = []
    for index in range(len(blocks)):
        start = index * POINTS_PER_LAYER
        parts.append((slice(start, start + POINTS_PER_LAYER - 1), "right"))
        parts.append((slice(start + POINTS_PER_LAYER - 1, start + POINTS_PER_LAYER), "left"))
    return np.concatenate(blocks), parts


def examine(basis: modewright.Basis, pipe: BuriedPipe, cooling: Cooling) -> Findings:
    """Project all snapshots on the basis, reconstruct fields, water and outer flux, and foretell them."""
    projection = basis.project(
        cooling.cells,
        edges=cooling.mesh.edges,
        measure="cylindrical",
        left_lump=cooling.water,
        details=True,
    )
    coefficients = np.asarray(projection.coefficients)
    points, parts = _viewing_points(pipe)
    modes = np.empty((len(basis.eigenvalues), len(points)))
    fields = np.empty((len(coefficients), len(points)))
    for where, side in parts:
        modes[:, where] = basis.modes(points[where], side=side)
        fields[:, where] = basis.reconstruct(coefficients, x=points[where], side=side)
    water_modes = basis.record().left_lump
    outer = np.array([pipe.outer_radius])

    def flux(of: Floats) -> Floats:
        return np.asarray(basis.reconstruct(of, x=outer, quantity="flux-density", side="left"))[:, 0]

    decay = np.exp(-np.multiply.outer(cooling.times, basis.eigenvalues))
    foretold = coefficients[0] * decay
    return Findings(
        eigenvalues=basis.eigenvalues,
        lower=basis.lower,
        upper=basis.upper,
        zeros=basis.zeros,
        confirmed=basis.confirmed,
        key=basis.key,
        digest=basis.problem_digest,
        solve_seconds=basis.solve_seconds,
        coefficients=coefficients,
        captured=np.asarray(projection.captured),
        residual=np.asarray(projection.residual),
        norm=np.asarray(projection.norm),
        points=points,
        modes=modes,
        water_modes=water_modes,
        fields=fields,
        water=coefficients @ water_modes,
        outer_flux=flux(coefficients),
        foretold_water=foretold @ water_modes,
        foretold_flux=flux(foretold),
    )
