"""A small finite-volume program for the buried pipe: the invented snapshots come from here.

It is deliberately a different method from the one it is compared with: control volumes in the radius, a
second-order implicit step in time, NumPy alone. It solves c u_t = (1/r) (k r u_r)_r, u counted from the soil.

*Space.* Cell edges meet the layers' faces; within a layer they crowd smoothly towards both faces. The
unknown of a cell is its average under r dr, placed at the cell's centroid under that measure, where a field
linear in r takes exactly its average. Two neighbours are joined by the resistance of the half cells between
them, the integral of dr / (k r), plus a contact resistance where they belong to two layers. The water is one
more unknown in front. Everything is per radian and metre of pipe; multiply by 2 pi for a metre of pipe.

*Time.* One step of TR-BDF2 with gamma = 2 - sqrt 2: L-stable, second order, both stages with one matrix.
Every step conserves energy to rounding: the heat that leaves is summed with the step's own weights.

References
----------
S. V. Patankar, Numerical Heat Transfer and Fluid Flow (1980), chapter 4: control volumes and resistances.
R. E. Bank et al., Transient simulation of silicon devices and circuits, IEEE Transactions on Electron
Devices 32 (1985) 1992-2007: the TR-BDF2 step. The three-term recurrence is the Thomas algorithm.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from modewright.demo.pipe import BuriedPipe, Layer

__all__ = ["Cooling", "Mesh", "Network", "cool_down", "graded_mesh"]

Floats = npt.NDArray[np.float64]

_GAMMA = 2.0 - math.sqrt(2.0)
_END_WEIGHT = _GAMMA / 2.0
_TRAPEZOID_WEIGHT = math.sqrt(2.0) / 4.0
# Four points integrate 1/(k r) over half a cell to rounding for the ratios of radii met here.
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(4)
# Width of a cell at a face relative to the mean: 1 - this.
_CROWDING = 0.75


@dataclass(frozen=True)
class Mesh:
    """Cells of the pipe wall. ``edges`` (cells + 1,) in m; ``layer`` (cells,) index of each cell's layer."""

    edges: Floats
    layer: npt.NDArray[np.int64]

    @property
    def centroids(self) -> Floats:
        """(cells,) centroids under r dr, m: (2/3) (b^3 - a^3) / (b^2 - a^2)."""
        left, right = self.edges[:-1], self.edges[1:]
        return np.asarray(2.0 / 3.0 * (left * left + left * right + right * right) / (left + right))


def graded_mesh(layers: Sequence[Layer], cells: Sequence[int]) -> Mesh:
    """Cells whose edges meet the layers' faces and crowd smoothly towards them.

    ``cells`` gives the number of cells of each layer. The map x(s) = s - (a / 2 pi) sin(2 pi s) is smooth, so
    that halving the spacing in s keeps the second order.
    """
    edges = [np.array([layers[0].inner])]
    for layer, count in zip(layers, cells, strict=True):
        s = np.arange(1, count + 1) / count
        mapped = s - _CROWDING / (2.0 * math.pi) * np.sin(2.0 * math.pi * s)
        inside = layer.inner + (layer.outer - layer.inner) * mapped
        inside[-1] = layer.outer
        edges.append(inside)
    return Mesh(np.concatenate(edges), np.repeat(np.arange(len(layers)), cells))


def _conductivity(layer: Layer, radius: Floats) -> Floats:
    if isinstance(layer.conductivity, float):
        return np.full_like(radius, layer.conductivity)
    table = np.array(layer.conductivity)
    return np.asarray(np.interp(radius, table[:, 0], table[:, 1]))


def _resistance(layer: Layer, start: Floats, end: Floats) -> Floats:
    """Integral of dr / (k r) from ``start`` to ``end``, elementwise, K per W/rad and metre."""
    half = (end - start) / 2.0
    points = (start + end)[:, None] / 2.0 + half[:, None] * _NODES
    flat = 1.0 / (_conductivity(layer, points.ravel()) * points.ravel())
    return np.asarray(half * (flat.reshape(points.shape) @ _WEIGHTS))


@dataclass(frozen=True)
class Network:
    """Heat capacities and conductances: water, then cells, then the soil at zero.

    ``capacities`` (1 + cells,) J/K and ``conductances`` (1 + cells,) W/K, both per radian and metre;
    conductance i joins unknown i to unknown i + 1, the last one the outermost cell to the soil.
    """

    mesh: Mesh
    capacities: Floats
    conductances: Floats

    @classmethod
    def of(cls, pipe: BuriedPipe, mesh: Mesh, inner_film: float) -> Network:
        """The network of a pipe on a mesh, the water's film coefficient being ``inner_film`` in W/(m2 K)."""
        edges, centroids = mesh.edges, mesh.centroids
        inner_half, outer_half = np.empty(len(centroids)), np.empty(len(centroids))
        volumetric = np.empty(len(centroids))
        contact = np.zeros(len(centroids) - 1)
        for index, layer in enumerate(pipe.layers):
            own = np.flatnonzero(mesh.layer == index)
            inner_half[own] = _resistance(layer, edges[own], centroids[own])
            outer_half[own] = _resistance(layer, centroids[own], edges[own + 1])
            volumetric[own] = layer.heat_capacity
            if index + 1 < len(pipe.layers):
                contact[own[-1]] = layer.contact / layer.outer
        volumes = np.diff(edges * edges) / 2.0
        between = 1.0 / (outer_half[:-1] + contact + inner_half[1:])
        to_water = 1.0 / (inner_half[0] + 1.0 / (inner_film * edges[0]))
        to_soil = 1.0 / (outer_half[-1] + 1.0 / (pipe.soil_film * edges[-1]))
        return cls(
            mesh,
            np.concatenate([[pipe.water_mass * edges[0]], volumetric * volumes]),
            np.concatenate([[to_water], between, [to_soil]]),
        )

    def rates(self, water_held: bool) -> tuple[Floats, Floats, Floats]:
        """The tridiagonal matrix of u' = A u as (lower, diagonal, upper), each (1 + cells,), in 1/s.

        With ``water_held`` the water's row is zero: its temperature stays what it is.
        """
        lower, upper = np.zeros_like(self.capacities), np.zeros_like(self.capacities)
        lower[1:] = self.conductances[:-1] / self.capacities[1:]
        upper[:-1] = self.conductances[:-1] / self.capacities[:-1]
        diagonal = -self.conductances / self.capacities - lower
        if water_held:
            diagonal[0] = upper[0] = 0.0
        return lower, diagonal, upper

    def steady(self, water: float) -> Floats:
        """The steady field (1 + cells,) with the water held at ``water`` K above the soil."""
        resistances = 1.0 / self.conductances
        beyond = np.cumsum(resistances[::-1])[::-1]
        return np.asarray(water * beyond / beyond[0])

    def energy(self, field: Floats) -> float:
        """Heat stored above the soil's temperature, J per metre of pipe."""
        return float(2.0 * math.pi * (self.capacities @ field))

    def outflow(self, field: Floats) -> float:
        """Heat flow into the soil, W per metre of pipe."""
        return float(2.0 * math.pi * self.conductances[-1] * field[-1])


class _Stepper:
    """TR-BDF2 steps of one length: the matrix I - (gamma dt / 2) A factored once."""

    def __init__(self, network: Network, step: float, water_held: bool) -> None:
        self._step = step
        self._network = network
        self._lower, self._diagonal, self._upper = network.rates(water_held)
        scale = _END_WEIGHT * step
        below = (-scale * self._lower).tolist()
        middle = (1.0 - scale * self._diagonal).tolist()
        above = (-scale * self._upper).tolist()
        pivots, ratios = [1.0 / middle[0]], [0.0]
        for i in range(1, len(middle)):
            ratios.append(below[i] * pivots[i - 1])
            pivots.append(1.0 / (middle[i] - ratios[i] * above[i - 1]))
        self._pivots, self._ratios, self._above = pivots, ratios, above

    def _solve(self, right: Floats) -> Floats:
        forward, previous = [], 0.0
        for value, ratio in zip(right.tolist(), self._ratios, strict=True):
            previous = value - ratio * previous
            forward.append(previous)
        backward, following = [], 0.0
        for value, pivot, above in zip(
            reversed(forward), reversed(self._pivots), reversed(self._above), strict=True
        ):
            following = (value - above * following) * pivot
            backward.append(following)
        backward.reverse()
        return np.array(backward)

    def advance(self, field: Floats) -> tuple[Floats, float]:
        """One step: the new field and the heat that has left during it, J per metre."""
        rate = self._diagonal * field
        rate[1:] += self._lower[1:] * field[:-1]
        rate[:-1] += self._upper[:-1] * field[1:]
        middle = self._solve(field + _END_WEIGHT * self._step * rate)
        bdf = 1.0 / (_GAMMA * (2.0 - _GAMMA))
        new = self._solve(bdf * middle - (bdf - 1.0) * field)
        flow = self._network.outflow
        lost = _TRAPEZOID_WEIGHT * (flow(field) + flow(middle)) + _END_WEIGHT * flow(new)
        return new, self._step * lost


@dataclass(frozen=True)
class Cooling:
    """What the finite-volume program found.

    ``times`` (T,) s after the pump stopped; ``water`` (T,) K; ``cells`` (T, cells) averages under r dr, K;
    ``outer_flux`` (T,) W/m2 through the casing's surface; ``energy`` (T,) J/m stored; ``lost`` (T,) J/m left.
    Temperatures are counted from the undisturbed soil.
    """

    mesh: Mesh
    times: Floats
    water: Floats
    cells: Floats
    outer_flux: Floats
    energy: Floats
    lost: Floats


def output_times(last: float, count: int, first: float = 60.0) -> Floats:
    """Zero and ``count`` - 1 times in geometric progression from ``first`` to ``last``, s."""
    return np.concatenate([[0.0], np.geomspace(first, last, count - 1)])


def _run(network: Network, field: Floats, times: Floats, steps: int, held: bool) -> tuple[Floats, Floats]:
    """Fields (T, unknowns) at ``times`` and the heat (T,) that has left by then; ``steps`` an interval."""
    fields, losses = [field], [0.0]
    for length in np.diff(times):
        stepper = _Stepper(network, float(length) / steps, held)
        lost = losses[-1]
        for _ in range(steps):
            field, part = stepper.advance(field)
            lost += part
        fields.append(field)
        losses.append(lost)
    return np.array(fields), np.array(losses)


def cool_down(pipe: BuriedPipe, cells: Sequence[int], times: Floats, steps: int) -> Cooling:
    """The pipe's history: steady at supply temperature, a peak, then the pump stops and it cools.

    Parameters
    ----------
    pipe
        The pipe.
    cells
        Number of cells of each layer.
    times
        (T,) ascending, from 0: seconds after the pump stopped.
    steps
        Time steps in each interval of ``times``.
    """
    mesh = graded_mesh(pipe.layers, cells)
    running = Network.of(pipe, mesh, pipe.running_film)
    start = running.steady(pipe.supply_excess)
    start[0] = pipe.peak_excess
    warm_up = output_times(pipe.peak_seconds, 24, first=1.0)
    peak, _ = _run(running, start, warm_up, steps, held=True)
    still = Network.of(pipe, mesh, pipe.still_film)
    fields, lost = _run(still, peak[-1], times, steps, held=False)
    return Cooling(
        mesh=mesh,
        times=times,
        water=fields[:, 0],
        cells=fields[:, 1:],
        outer_flux=np.array([still.outflow(field) for field in fields]) / (2.0 * math.pi * pipe.outer_radius),
        energy=np.array([still.energy(field) for field in fields]),
        lost=lost,
    )
