"""The problem as plain frozen data: layers with coefficients, end conditions, interfaces.

The equation is ``-(p u')' + q u = lambda w u`` on the union of the layers, in this sign and no other.
In cylindrical and spherical geometry (``g`` = 1, 2) the coefficients are those of the material; the
operator's are ``p r^g``, ``q r^g``, ``w r^g`` and every end and interface term is meant per unit area
of the surface it sits on.

Nothing is checked on construction; :func:`modewright_service.core.validation.validate` reports all
faults of a problem at once, with their field paths.
"""

from __future__ import annotations

import cmath
import math
from dataclasses import dataclass, field
from enum import StrEnum

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]


class Interpolation(StrEnum):
    """What a table of samples means between its points.

    ``step-left``: the sample at the left of an interval holds on it; ``step-right``: the one at the
    right; ``linear``; ``monotone-cubic``: the cubic Hermite interpolant with Fritsch-Carlson slopes;
    ``cubic-spline``: twice continuously differentiable, not-a-knot ends.
    """

    STEP_LEFT = "step-left"
    STEP_RIGHT = "step-right"
    LINEAR = "linear"
    MONOTONE_CUBIC = "monotone-cubic"
    CUBIC_SPLINE = "cubic-spline"


class Geometry(StrEnum):
    """The geometry whose factor r^g multiplies every coefficient and surface term."""

    PLANE = "plane"
    CYLINDRICAL = "cylindrical"
    SPHERICAL = "spherical"

    @property
    def power(self) -> int:
        """The exponent g of the factor r^g."""
        return {Geometry.PLANE: 0, Geometry.CYLINDRICAL: 1, Geometry.SPHERICAL: 2}[self]


class CouplingKind(StrEnum):
    """How the two ends are tied to each other."""

    PERIODIC = "periodic"
    ANTIPERIODIC = "antiperiodic"
    BLOCH = "bloch"


@dataclass(frozen=True)
class Constant:
    """A coefficient with one value on the whole layer."""

    value: float


@dataclass(frozen=True)
class Expression:
    """A coefficient given as an expression in x (see :mod:`.expressions` for the grammar)."""

    text: str


@dataclass(frozen=True, eq=False)
class Samples:
    """A coefficient given by a table: ``x`` (n,) ascending and covering the layer, ``values`` (n,)."""

    x: FloatArray
    values: FloatArray
    interpolation: Interpolation = Interpolation.LINEAR

    def _key(self) -> tuple[bytes, bytes, str]:
        x = np.ascontiguousarray(self.x, dtype=np.float64)
        values = np.ascontiguousarray(self.values, dtype=np.float64)
        return x.tobytes(), values.tobytes(), str(self.interpolation)

    def __eq__(self, other: object) -> bool:
        return isinstance(other, Samples) and self._key() == other._key()

    def __hash__(self) -> int:
        return hash(self._key())


Coefficient = Constant | Expression | Samples


@dataclass(frozen=True)
class Layer:
    """One layer ``start <= x <= end``. With ``reciprocal_p`` the field ``p`` holds 1/p."""

    name: str
    start: float
    end: float
    p: Coefficient = Constant(1.0)
    q: Coefficient = Constant(0.0)
    w: Coefficient = Constant(1.0)
    reciprocal_p: bool = False


@dataclass(frozen=True)
class Dirichlet:
    """u = 0."""


@dataclass(frozen=True)
class Neumann:
    """p u' = 0."""


@dataclass(frozen=True)
class Robin:
    """alpha u + beta p u' = 0, p u' along +x at both ends."""

    alpha: float
    beta: float


@dataclass(frozen=True)
class Film:
    """A film coefficient to a surrounding at zero: p u' = h u (left), -p u' = h u (right), h >= 0."""

    h: float


@dataclass(frozen=True)
class Lump:
    """A mass that carries lambda, with a film to the outside and a resistance between it and the end."""

    mass: float
    film: float = 0.0
    resistance: float = 0.0


@dataclass(frozen=True)
class Bounded:
    """The principal solution at a singular end."""


End = Dirichlet | Neumann | Robin | Film | Lump | Bounded


@dataclass(frozen=True)
class Interface:
    """An interior point: [u] = R p u', [p u'] = (S - lambda m) u, [.] the jump in the direction +x."""

    x: float
    resistance: float = 0.0
    spring: float = 0.0
    mass: float = 0.0


@dataclass(frozen=True)
class Coupling:
    """Ends tied together; ``phase`` (radians) is used by the Bloch kind."""

    kind: CouplingKind
    phase: float = 0.0

    @property
    def factor(self) -> complex:
        """u(b) / u(a), of modulus 1; real for multiples of pi, up to the rounding of pi itself."""
        if self.kind is not CouplingKind.BLOCH:
            return complex(1.0 if self.kind is CouplingKind.PERIODIC else -1.0)
        if not math.isfinite(self.phase):
            return 1.0 + 0.0j
        value = cmath.exp(1j * self.phase)
        near = abs(value.imag) < 1e-15 * max(1.0, abs(self.phase))
        return complex(round(value.real)) if near else value


@dataclass(frozen=True)
class Problem:
    """Layers from left to right, the two ends, and what sits in between."""

    layers: tuple[Layer, ...]
    left: End = field(default_factory=Dirichlet)
    right: End = field(default_factory=Dirichlet)
    interfaces: tuple[Interface, ...] = ()
    coupling: Coupling | None = None
    geometry: Geometry = Geometry.PLANE

    @property
    def start(self) -> float:
        """The left end of the domain."""
        return float(self.layers[0].start)

    @property
    def end(self) -> float:
        """The right end of the domain."""
        return float(self.layers[-1].end)
