"""Meshes that samples are given on, checked against the domain of a basis.

Points and cell edges that miss an end or an interface by rounding are moved onto it: interfaces are sums of
thicknesses as often as they are numbers, and a mesh made by another program meets them to a few units in
the last place only.
"""

from __future__ import annotations

import hashlib
from dataclasses import dataclass
from enum import StrEnum
from typing import Any, Final, TypeVar

import numpy as np
from numpy.typing import ArrayLike, NDArray

from modewright.record import Record
from modewright_service.core.errors import InvalidRequest, Reason, number_text

__all__ = ["CellMesh", "Interpolation", "Measure", "PointMesh", "Reconstruction", "Segments", "segments_of"]

# How far, in spacings of the mesh, a point may lie from an end or interface and still be meant to lie on it.
_SNAP: Final = 1e-9
_ULPS: Final = 16 * np.finfo(np.float64).eps

_Choice = TypeVar("_Choice", bound=StrEnum)


class Interpolation(StrEnum):
    """How point values are joined within a layer; cubic is linear where a layer has fewer than 4 points."""

    LINEAR = "linear"
    CUBIC = "cubic"


class Measure(StrEnum):
    """What a cell average is averaged with: dx, r dr, r^2 dr, or w dx."""

    LENGTH = "length"
    CYLINDRICAL = "cylindrical"
    SPHERICAL = "spherical"
    WEIGHT = "weight"


class Reconstruction(StrEnum):
    """What a field is taken to be within cells: the average itself, or a curve that keeps every average."""

    CONSTANT = "constant"
    CONSERVATIVE = "conservative"


@dataclass(frozen=True, eq=False)
class PointMesh:
    """Values at points x (G,), ascending; at an interface one point, none, or two (left value first)."""

    x: NDArray[np.float64]
    interpolation: Interpolation = Interpolation.CUBIC

    def __post_init__(self) -> None:
        object.__setattr__(self, "x", _coordinates(self.x, "x"))
        object.__setattr__(self, "interpolation", _choice(Interpolation, self.interpolation, "interpolation"))
        steps = np.diff(self.x)
        if steps.size == 0:
            raise _bad_mesh("x", "at least 2 points are needed", self.x.size)
        if steps.min() < 0:
            _not_ascending("x", self.x, steps, "not ascending")
        if steps.max() == 0.0 and self.x.size == 2:
            raise _bad_mesh("x[1]", "both points are the same", self.x[1])

    @property
    def size(self) -> int:
        """G, the number of values."""
        return int(self.x.size)

    def digest(self) -> str:
        """SHA-256 (hex) of the mesh and its meaning."""
        return _digest(f"points/{self.interpolation}", self.x)


@dataclass(frozen=True, eq=False)
class CellMesh:
    """Averages over cells between edges (G+1,), which ascend and cover the domain."""

    edges: NDArray[np.float64]
    measure: Measure = Measure.LENGTH
    reconstruction: Reconstruction = Reconstruction.CONSERVATIVE

    def __post_init__(self) -> None:
        object.__setattr__(self, "edges", _coordinates(self.edges, "edges"))
        object.__setattr__(self, "measure", _choice(Measure, self.measure, "measure"))
        object.__setattr__(
            self, "reconstruction", _choice(Reconstruction, self.reconstruction, "reconstruction")
        )
        if self.edges.size < 2:
            raise _bad_mesh("edges", "at least 2 edges are needed", self.edges.size)
        steps = np.diff(self.edges)
        if steps.min() <= 0:
            _not_ascending("edges", self.edges, steps, "not strictly ascending")
        if self.measure in (Measure.CYLINDRICAL, Measure.SPHERICAL) and self.edges[0] < 0:
            message = f"the {self.measure} measure needs radii, which are not negative"
            raise _bad_mesh("edges[0]", message, self.edges[0])

    @property
    def size(self) -> int:
        """G, the number of values."""
        return int(self.edges.size - 1)

    def digest(self) -> str:
        """SHA-256 (hex) of the mesh and its meaning."""
        return _digest(f"cells/{self.measure}/{self.reconstruction}", self.edges)


@dataclass(frozen=True, eq=False)
class Segments:
    """Where interpolants break: layers, cut at interfaces. `bounds` (C+1,) ascending; words for each."""

    bounds: NDArray[np.float64]
    names: tuple[str, ...]

    @property
    def start(self) -> float:
        """The left end of the domain."""
        return float(self.bounds[0])

    @property
    def end(self) -> float:
        """The right end of the domain."""
        return float(self.bounds[-1])

    def snap(self, mesh: NDArray[np.float64], field: str) -> NDArray[np.float64]:
        """The mesh (ascending) with points next to a bound moved onto it; refused outside the domain."""
        mesh = mesh.copy()
        steps = np.diff(mesh)
        positive = np.where(steps > 0, steps, np.inf)
        spacing = np.minimum(np.append(positive, np.inf), np.insert(positive, 0, np.inf))
        place = np.searchsorted(self.bounds, mesh)
        for offset in (-1, 0):
            bound = self.bounds[np.clip(place + offset, 0, self.bounds.size - 1)]
            near = np.abs(mesh - bound) <= np.maximum(_SNAP * spacing, _ULPS * np.abs(bound))
            mesh[near] = bound[near]
        outside = (mesh < self.start) | (mesh > self.end)
        if outside.any():
            index = int(np.argmax(outside))
            raise InvalidRequest.at(
                Reason.MESH_OUTSIDE_DOMAIN,
                f"{field}[{index}]",
                f"outside the domain [{self.start!r}, {self.end!r}]",
                mesh[index],
                start=self.start,
                end=self.end,
            )
        return mesh


def segments_of(record: Record) -> Segments:
    """The layers of a basis, cut where an interface lies inside one."""
    edges, layer = record.edges, record.layer
    breaks = np.diff(layer) != 0
    for x in record.joints[:, 0].tolist():
        index = int(np.argmin(np.abs(edges - x)))
        if 0 < index < edges.size - 1:
            breaks[index - 1] = True
    first = np.concatenate(([0], np.flatnonzero(breaks) + 1))
    bounds = np.append(edges[first], edges[-1])
    given = dict(enumerate(record.layer_names))
    names = tuple(
        f"the layer {given[i]!r}" if given.get(i) else f"layers[{i}]" for i in layer[first].tolist()
    )
    return Segments(bounds, names)


def _coordinates(values: ArrayLike, field: str) -> NDArray[np.float64]:
    array: NDArray[Any] = np.asarray(values)
    if array.dtype.kind not in "fiu":
        message = "a mesh is an array of real numbers"
        raise InvalidRequest.at(Reason.BAD_DTYPE, field, message, str(array.dtype))
    if array.ndim != 1:
        message = "a mesh has one axis"
        raise InvalidRequest.at(Reason.BAD_SHAPE, field, message, str(array.shape))
    out = array.astype(np.float64)
    finite = np.isfinite(out)
    if not finite.all():
        index = int(np.argmin(finite))
        raise InvalidRequest.at(Reason.NOT_FINITE, f"{field}[{index}]", "not finite", out[index])
    out.flags.writeable = False
    return out


def _choice(kind: type[_Choice], value: str, field: str) -> _Choice:
    try:
        return kind(value)
    except ValueError:
        message = f"unknown; one of {', '.join(kind)}"
        raise InvalidRequest.at(Reason.BAD_MESH, field, message, value) from None


def _bad_mesh(field: str, message: str, number: object) -> InvalidRequest:
    error = InvalidRequest.at(Reason.BAD_MESH, field, message, number)
    assert isinstance(error, InvalidRequest)
    return error


def _not_ascending(field: str, mesh: NDArray[np.float64], steps: NDArray[np.float64], message: str) -> None:
    index = int(np.argmin(steps)) + 1
    before = number_text(mesh[index - 1])
    raise _bad_mesh(f"{field}[{index}]", f"{message}: it follows {before}", mesh[index])


def _digest(meaning: str, mesh: NDArray[np.float64]) -> str:
    # The sum with 0.0 makes -0.0 and 0.0 one number.
    data = (mesh + 0.0).astype("<f8").tobytes()
    return hashlib.sha256(f"modewright/{meaning}/".encode() + data).hexdigest()
