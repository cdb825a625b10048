"""Problems built in Python, and the object that stands for a problem document.

A :class:`Problem` says -(p u')' + q u = lambda w u on consecutive layers, with a condition at each end::

    wall = Problem.layered(
        Layer(0.0, 0.2, p=0.9, w=1.6e6, name="brick"),
        Layer(0.2, 0.3, p=0.04, w=5.0e4, name="insulation"),
        left=Film(8.0),
        right=Film(25.0),
    )

The same thing as a document (a JSON, TOML or YAML file, or a dictionary) is read by :meth:`Problem.load` and
:meth:`Problem.from_dict`; the fields have the same names. Everything here is immutable, compares by content
and pickles. Only the structure is checked here (InvalidProblem lists every complaint); the service checks
the numbers.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field, fields
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Any, ClassVar, Self, TypeAlias

import numpy as np
from numpy.typing import ArrayLike, NDArray

from modewright.checks import Checks, quote

if TYPE_CHECKING:
    from modewright.stack import Stack

__all__ = [
    "GEOMETRIES",
    "INTERPOLATIONS",
    "Bounded",
    "Coefficient",
    "Coupling",
    "Dirichlet",
    "End",
    "Film",
    "Interface",
    "Layer",
    "Lump",
    "Neumann",
    "Problem",
    "Robin",
    "Samples",
]

GEOMETRIES = ("plane", "cylindrical", "spherical")
INTERPOLATIONS = ("linear", "step-left", "step-right", "monotone-cubic", "cubic-spline")
COUPLINGS = ("periodic", "antiperiodic", "bloch")

# The service refuses longer tables; saying so here spares the transfer.
MAX_SAMPLES = 100_000


def _set(instance: object, **values: object) -> None:
    """Stores normalised values in a frozen dataclass."""
    for name, value in values.items():
        object.__setattr__(instance, name, value)


@dataclass(frozen=True, eq=False)
class Samples:
    """A coefficient known at points.

    x: (S,) coordinates; values: (S,) the coefficient there; S from 2 to 100,000.
    interpolation: "linear", "step-left" (the value at the left of an interval holds on it), "step-right",
    "monotone-cubic" or "cubic-spline".

    Raises InvalidProblem for shapes that do not fit, values that are no numbers, an unknown interpolation.
    """

    x: NDArray[np.float64]
    values: NDArray[np.float64]
    interpolation: str = "linear"

    def __init__(self, x: ArrayLike, values: ArrayLike, interpolation: str = "linear") -> None:
        checks = Checks(reason="BAD_SAMPLES")
        arrays = {"x": _vector(checks, "x", x), "values": _vector(checks, "values", values)}
        checks.choice("interpolation", interpolation, INTERPOLATIONS)
        if not checks.violations:
            sizes = {name: array.size for name, array in arrays.items()}
            if sizes["x"] != sizes["values"]:
                checks.wrong("values", f"has {sizes['values']} entries, x has {sizes['x']}")
            elif sizes["x"] < 2:
                checks.wrong("x", "needs at least 2 samples", sizes["x"])
            elif sizes["x"] > MAX_SAMPLES:
                checks.wrong("x", f"has more than {MAX_SAMPLES} samples", sizes["x"])
        checks.finish()
        _set(self, interpolation=interpolation, **arrays)

    def _key(self) -> tuple[bytes, bytes, str]:
        return self.x.tobytes(), self.values.tobytes(), self.interpolation

    def __eq__(self, other: object) -> bool:
        return self._key() == other._key() if isinstance(other, Samples) else NotImplemented

    def __hash__(self) -> int:
        return hash(self._key())

    def __repr__(self) -> str:
        return (
            f"Samples({self.x.size} points on [{self.x.min():g}, {self.x.max():g}], "
            f"values {self.values.min():g} to {self.values.max():g}, {self.interpolation})"
        )


def _vector(checks: Checks, name: str, value: ArrayLike) -> NDArray[np.float64]:
    """A read-only float64 vector."""
    try:
        array = np.asarray(value)
    except ValueError:
        array = np.asarray(None)
    if array.dtype.kind not in "iuf" or array.ndim != 1:
        checks.wrong(name, f"must be a list of numbers, not {quote(value)}")
        return np.zeros(0)
    array = array.astype(np.float64) + 0.0
    bad = np.flatnonzero(~np.isfinite(array))
    if bad.size:
        checks.wrong(f"{name}[{bad[0]}]", "must be finite", float(array[bad[0]]), reason="NOT_FINITE")
    array.flags.writeable = False
    return array


Coefficient: TypeAlias = float | str | Samples


def coefficient(checks: Checks, name: str, value: object) -> Coefficient:
    """A number, an expression in x, or samples; anything else is noted in `checks`."""
    if isinstance(value, Samples):
        return value
    if isinstance(value, str):
        if not value.strip():
            checks.wrong(name, "must not be an empty expression", reason="EXPRESSION_SYNTAX")
        return value
    if isinstance(value, (bool, np.bool)) or not isinstance(value, (int, float, np.integer, np.floating)):
        checks.wrong(
            name,
            f"must be a number, an expression in x, or samples, not {quote(value)}",
            reason="INVALID_COEFFICIENT",
        )
        return 0.0
    return checks.number(name, value)


@dataclass(frozen=True)
class Layer:
    """One piece of the interval, from `start` to `end` (may be infinite).

    p, q, w: each a number, an expression in x, or :class:`Samples`; in cylindrical and spherical geometry
    those of the material, without the factor r or r squared. reciprocal_p: `p` holds 1/p instead.
    """

    start: float
    end: float
    p: Coefficient = 1.0
    q: Coefficient = 0.0
    w: Coefficient = 1.0
    name: str = ""
    reciprocal_p: bool = False

    def __post_init__(self) -> None:
        checks = Checks()
        _set(
            self,
            name=checks.text("name", self.name),
            start=checks.number("start", self.start, infinite=True),
            end=checks.number("end", self.end, infinite=True),
            p=coefficient(checks, "p", self.p),
            q=coefficient(checks, "q", self.q),
            w=coefficient(checks, "w", self.w),
            reciprocal_p=checks.flag("reciprocal_p", self.reciprocal_p),
        )
        checks.finish()


@dataclass(frozen=True)
class End:
    """Base of the conditions at one end of the interval."""

    kind: ClassVar[str] = ""

    def __post_init__(self) -> None:
        if not self.kind:
            raise TypeError("End is the base of Dirichlet, Neumann, Robin, Film, Lump and Bounded")
        checks = Checks(reason="BAD_END_CONDITION")
        _set(self, **{item.name: checks.number(item.name, getattr(self, item.name)) for item in fields(self)})
        checks.finish()


@dataclass(frozen=True)
class Dirichlet(End):
    """u = 0."""

    kind: ClassVar[str] = "dirichlet"


@dataclass(frozen=True)
class Neumann(End):
    """p u' = 0."""

    kind: ClassVar[str] = "neumann"


@dataclass(frozen=True)
class Robin(End):
    """alpha u + beta p u' = 0, with p u' taken along +x at both ends."""

    alpha: float
    beta: float
    kind: ClassVar[str] = "robin"


@dataclass(frozen=True)
class Film(End):
    """A film coefficient h = `film` >= 0 to the outside: p u' = h u at the left end, -p u' = h u at the
    right.
    """

    film: float
    kind: ClassVar[str] = "film"


@dataclass(frozen=True)
class Lump(End):
    """A lumped mass that carries lambda: a tip mass, well-mixed water, a vessel.

    mass: its mass or heat capacity (per area of the face in cylindrical and spherical geometry; for water
    that fills a pipe of radius r: rho c r / 2). film: from the lump to the outside. resistance: between the
    lump and the end of the interval; 0 means that the lump has the end's own value.
    """

    mass: float
    film: float = 0.0
    resistance: float = 0.0
    kind: ClassVar[str] = "lump"


@dataclass(frozen=True)
class Bounded(End):
    """The principal (bounded) solution at a singular end."""

    kind: ClassVar[str] = "bounded"


END_KINDS: Mapping[str, type[End]] = {
    kind.kind: kind for kind in (Dirichlet, Neumann, Robin, Film, Lump, Bounded)
}


@dataclass(frozen=True)
class Interface:
    """What sits at the interior point `x`; [.] is the jump in the direction of +x.

    resistance R: [u] = R p u'. spring S: [p u'] = S u. mass m: [p u'] = -lambda m u.
    """

    x: float
    resistance: float = 0.0
    spring: float = 0.0
    mass: float = 0.0

    def __post_init__(self) -> None:
        checks = Checks(reason="BAD_INTERFACE")
        _set(self, **{item.name: checks.number(item.name, getattr(self, item.name)) for item in fields(self)})
        checks.finish()


@dataclass(frozen=True)
class Coupling:
    """The two ends joined: kind "periodic", "antiperiodic", or "bloch" with its `phase` in radians."""

    kind: str
    phase: float = 0.0

    def __post_init__(self) -> None:
        checks = Checks(reason="UNSUPPORTED_COUPLING")
        kind = checks.choice("kind", self.kind, COUPLINGS)
        _set(self, kind=kind, phase=checks.number("phase", self.phase))
        if self.phase and kind != "bloch":
            checks.wrong("phase", f"belongs to the kind bloch, not to {kind}", self.phase)
        checks.finish()


@dataclass(frozen=True)
class Problem:
    """-(p u')' + q u = lambda w u on `layers`, from left to right.

    left, right: the conditions at the ends; both None when the ends are joined by `coupling`.
    interfaces: contact resistances, point springs and masses. geometry: "plane", "cylindrical" (coefficients
    times r) or "spherical" (times r squared). name: for people. stack: the stack of material layers that the
    layers were made from, if they were; errors and the document then use its names.

    Raises InvalidProblem with every structural complaint.
    """

    layers: tuple[Layer, ...]
    left: End | None = None
    right: End | None = None
    interfaces: tuple[Interface, ...] = ()
    coupling: Coupling | None = None
    geometry: str = "plane"
    name: str = ""
    stack: Stack | None = field(default=None, repr=False)

    def __post_init__(self) -> None:
        checks = Checks()
        layers = tuple(checks.items("layers", self.layers))
        interfaces = tuple(checks.items("interfaces", self.interfaces))
        _set(
            self,
            layers=layers,
            interfaces=interfaces,
            name=checks.text("name", self.name),
            geometry=checks.choice("geometry", self.geometry, GEOMETRIES),
        )
        if not layers and not checks.violations:
            checks.wrong("layers", "needs at least one layer", 0, reason="BAD_DOMAIN")
        _all_are(checks, "layers", layers, Layer)
        _all_are(checks, "interfaces", interfaces, Interface)
        if self.coupling is not None and not isinstance(self.coupling, Coupling):
            checks.wrong("coupling", f"must be a Coupling, not {quote(self.coupling)}")
        for side in ("left", "right"):
            end = getattr(self, side)
            if self.coupling is None and not isinstance(end, End):
                message = "is missing" if end is None else f"must be an end condition, not {quote(end)}"
                checks.wrong(side, message, reason="BAD_END_CONDITION")
            elif self.coupling is not None and end is not None:
                checks.wrong(side, "must be left out when the ends are coupled", reason="BAD_END_CONDITION")
        checks.finish()

    @classmethod
    def layered(
        cls,
        *layers: Layer,
        left: End | None = None,
        right: End | None = None,
        interfaces: Iterable[Interface] = (),
        coupling: Coupling | None = None,
        geometry: str = "plane",
        name: str = "",
    ) -> Self:
        """A problem of the given layers, from left to right."""
        return cls(layers, left, right, tuple(interfaces), coupling, geometry, name)

    # ---- documents ----

    @classmethod
    def load(cls, path: str | Path) -> Problem:
        """Reads a problem document: .json, .toml, or .yaml/.yml (needs the ``yaml`` extra).

        Files of samples are looked up relative to the document. Raises InvalidProblem, and OSError for a
        document that cannot be opened.
        """
        from modewright.document import files

        return files.load(Path(path))

    @classmethod
    def from_dict(cls, document: Mapping[str, Any], base: str | Path = ".") -> Problem:
        """Reads a problem document given as a dictionary.

        base: the folder that files of samples are relative to. Raises InvalidProblem.
        """
        from modewright.document import parse

        return parse.problem_from_document(document, Path(base))

    def to_dict(self) -> dict[str, Any]:
        """The document of this problem, samples included; ``from_dict`` makes an equal problem of it."""
        from modewright.document import write

        return write.document_from_problem(self)

    def save(self, path: str | Path) -> None:
        """Writes the document as JSON; infinite ends become the strings "inf" and "-inf"."""
        from modewright.document import write

        Path(path).write_text(write.json_text(self), encoding="utf-8")

    @cached_property
    def route(self) -> str:
        """SHA-256 of the document's sorted JSON: a hint for proxies that keep equal problems together."""
        text = json.dumps(self.to_dict(), sort_keys=True, separators=(",", ":"))
        return hashlib.sha256(text.encode()).hexdigest()

    def field_in_document(self, path: str) -> str:
        """A field path of the plain problem in the names of this document (a stack has its own)."""
        return self.stack.field_in_document(path) if self.stack is not None else path

    @property
    def domain(self) -> tuple[float, float]:
        """The two ends of the interval."""
        return self.layers[0].start, self.layers[-1].end

    def __repr__(self) -> str:
        start, end = self.domain
        ends = self.coupling.kind if self.coupling else f"{_kind(self.left)} to {_kind(self.right)}"
        name = f"{self.name!r}, " if self.name else ""
        count = len(self.layers)
        layers = f"{count} layer{'s' if count > 1 else ''}"
        return f"Problem({name}{self.geometry}, {layers} on [{start:g}, {end:g}], {ends})"


def _kind(end: End | None) -> str:
    return end.kind if end is not None else "free"


def _all_are(checks: Checks, name: str, items: tuple[object, ...], kind: type) -> None:
    for index, item in enumerate(items):
        if not isinstance(item, kind):
            checks.wrong(f"{name}[{index}]", f"must be {kind.__name__}, not {quote(item)}")
