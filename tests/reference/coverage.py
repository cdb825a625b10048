"""Which reference records this version answers, and which it does not."""

from __future__ import annotations

from typing import Any

from tests.reference.load import records

REGULAR = (
    "dirichlet-unit",
    "neumann-unit",
    "mixed-dn",
    "plate-biot-0p1",
    "plate-biot-1",
    "plate-biot-100",
    "robin-negative",
    "annulus-1-2",
    "mathieu-q1-neumann",
    "mathieu-q5-dirichlet",
    "inverse-square-shifted",
    "exponential-potential",
    "graetz-plates",
    "exp-graded-rod",
    "exp-graded-rod-free",
    "power-graded-rod",
    "tapered-string",
    "slab-2-layer",
    "slab-3-layer",
    "slab-10-layer",
    "slab-contact-resistance",
    "rod-tip-mass",
    "slab-lumped-capacity",
    "tanh-layer",
    "woods-saxon",
    "w-x-squared",
)

SINGULAR = (
    "bessel0-dirichlet",
    "bessel1-neumann",
    "bessel-half-dirichlet",
    "bessel2p5-robin",
    "cylinder-biot-1",
    "sphere-biot-5",
    "legendre",
    "assoc-legendre-m1",
    "assoc-legendre-m3",
    "chebyshev-first",
    "gegenbauer-2",
    "jacobi-1p5-0p5",
    "spheroidal-c1-m0",
    "spheroidal-c4-m1",
    "graetz-tube",
    "p-sqrt-x-dirichlet",
    "p-sqrt-x-neumann",
    "p-x-three-halves",
    "w-inverse-sqrt",
)

COVERED = (*REGULAR, *SINGULAR)

# Regular problems as well, with point terms or nearly degenerate groups: promised for a later version,
# answered by this one.
AHEAD = (
    "delta-in-box",
    "bead-on-string",
    "triple-well-beta20",
    "triple-well-beta30",
    "triple-well-beta50",
)

# Coupled ends: eigenvalues may be double, and zeros come in pairs.
COUPLED = (
    "periodic-unit",
    "antiperiodic-unit",
    "mathieu-q25-periodic",
    "lattice-band-edges",
)

# Refused as unsupported, by what they need.
COMPLEX = ("lattice-bloch", "lattice-bloch-2")
INFINITE = (
    "hermite-oscillator",
    "hermite-weighted",
    "laguerre",
    "airy-halfline",
    "quartic-oscillator",
    "sextic-oscillator",
    "hydrogen-l0",
    "hydrogen-l1",
    "hydrogen-l2",
    "morse-8",
    "sech2-well-30",
    "double-well-1e-8",
)
UNCOVERED = (*COMPLEX, *INFINITE)

_BY_NAME = {record["name"]: record for record in records()}


def record_of(name: str) -> dict[str, Any]:
    return _BY_NAME[name]


def highest_low_index(name: str) -> int:
    """The highest index up to 100 that a record lists."""
    record = record_of(name)
    listed = [int(entry["index"]) for entry in record.get("also", [])]
    return max([len(record["eigenvalues"]) - 1, *(index for index in listed if index <= 100)])
