"""Checks of a problem: every fault found is reported at once, each with its field path.

Structural checks only: signs of expressions and of interpolated tables are certified by
:mod:`.approximation`, which bounds the coefficients between the points that can be looked at.
"""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np

from .description import (
    Bounded,
    Coefficient,
    Constant,
    Coupling,
    CouplingKind,
    Dirichlet,
    End,
    Expression,
    Film,
    FloatArray,
    Geometry,
    Interface,
    Interpolation,
    Layer,
    Lump,
    Neumann,
    Problem,
    Robin,
    Samples,
)
from .errors import CoreError, InvalidProblem, LimitExceeded, Reason, Unsupported, Violation, number_text
from .evaluation import constant_value
from .expressions import parse

MAX_LAYERS = 10_000
MAX_SAMPLES = 100_000
MAX_INTERFACES = 10_000
# A message that lists thousands of faults helps nobody and may pass the size limit of an answer.
MAX_VIOLATIONS = 64
# Layer edges and interfaces written in decimals (0.1 + 0.2 against 0.3) are taken as one point.
SNAP = 1e-12

# Beyond a million turns the reduction of a phase costs more digits than a solve keeps.
_LARGEST_PHASE = 1e6

_UNSUPPORTED = {
    Reason.UNSUPPORTED_END,
    Reason.UNSUPPORTED_COUPLING,
    Reason.UNSUPPORTED_INTERVAL,
    Reason.UNSUPPORTED_COEFFICIENT,
}
Report = Callable[..., None]


class _Faults:
    """Collects violations in the order of the document."""

    def __init__(self) -> None:
        self.found: list[Violation] = []

    def add(self, reason: Reason, field: str, message: str, number: object = "") -> None:
        if len(self.found) < MAX_VIOLATIONS:
            self.found.append(Violation(field, message, number_text(number), reason))

    def finite(self, value: object, field: str) -> bool:
        """Whether ``value`` is a finite real number; reports it otherwise."""
        try:
            number = float("text" if isinstance(value, str) else value)  # type: ignore[arg-type]
        except (TypeError, ValueError, OverflowError):
            self.add(Reason.NOT_FINITE, field, "must be a real number", str(value))
            return False
        if not math.isfinite(number):
            self.add(Reason.NOT_FINITE, field, "must be finite", number)
            return False
        return True

    def non_negative(self, value: float, field: str, reason: Reason) -> None:
        if self.finite(value, field) and value < 0.0:
            self.add(reason, field, "must not be negative", value)

    def raise_if_any(self) -> None:
        """InvalidProblem if anything is malformed, else LimitExceeded, else Unsupported."""
        if not self.found:
            return
        reasons = [fault.reason or Reason.INVALID_COEFFICIENT for fault in self.found]
        hard = [r for r in reasons if r not in _UNSUPPORTED and r is not Reason.LIMIT_EXCEEDED]
        if hard:
            raise InvalidProblem(hard[0], "", self.found)
        if Reason.LIMIT_EXCEEDED in reasons:
            raise LimitExceeded(Reason.LIMIT_EXCEEDED, "", self.found)
        raise Unsupported(reasons[0], "", self.found)


def validate(problem: Problem) -> None:
    """Raise one error that names every structural fault of ``problem``.

    Raises :class:`InvalidProblem` for anything malformed, :class:`LimitExceeded` for too many layers
    or samples, :class:`Unsupported` when the problem is well formed but not of a kind handled here.
    The error's reason is that of its first violation of that class; field paths are those of the
    problem document (``layers[1].p.samples.x[4]``, ``left.film``).
    """
    faults = _Faults()
    if not problem.layers:
        faults.add(Reason.BAD_DOMAIN, "layers", "at least one layer is needed", 0)
        faults.raise_if_any()
    _check_limits(problem, faults)
    faults.raise_if_any()
    domain_known = _check_layers(problem, faults)
    for index, layer in enumerate(problem.layers):
        _check_coefficients(layer, f"layers[{index}]", faults)
    _check_geometry(problem, faults)
    _check_end(problem.left, "left", faults)
    _check_end(problem.right, "right", faults)
    if domain_known:
        _check_interfaces(problem, faults)
    if problem.coupling is not None:
        _check_coupling(problem, problem.coupling, faults)
    if not faults.found:
        _check_weight(problem, faults)
    faults.raise_if_any()


def layer_edges(problem: Problem) -> list[float]:
    """The L+1 edges of the layers; a layer begins where the one before it ends."""
    return [float(problem.layers[0].start), *(float(layer.end) for layer in problem.layers)]


def snapped_interface(x: float, edges: list[float]) -> float:
    """``x``, or the layer edge that it was meant to be (within a rounding error of the span)."""
    array = np.asarray(edges)
    nearest = int(np.argmin(np.abs(array - x)))
    return float(array[nearest]) if abs(array[nearest] - x) <= _snap_width(array, nearest) else float(x)


def _snap_width(edges: FloatArray, index: int) -> float:
    """Largest distance at which a point counts as edge ``index``: SNAP of the thinner neighbour."""
    widths = np.diff(edges[max(index - 1, 0) : index + 2])
    return max(SNAP * float(np.min(widths)), 4.0 * float(np.spacing(np.abs(edges[index]))))


def _check_limits(problem: Problem, faults: _Faults) -> None:
    for count, limit, field in (
        (len(problem.layers), MAX_LAYERS, "layers"),
        (len(problem.interfaces), MAX_INTERFACES, "interfaces"),
    ):
        if count > limit:
            faults.add(Reason.LIMIT_EXCEEDED, field, f"at most {limit} are accepted", count)


def _check_layers(problem: Problem, faults: _Faults) -> bool:
    before = len(faults.found)
    last = len(problem.layers) - 1
    for index, layer in enumerate(problem.layers):
        path = f"layers[{index}]"
        ends_ok = True
        for value, field, outer in ((layer.start, "start", index == 0), (layer.end, "end", index == last)):
            if outer and isinstance(value, int | float) and math.isinf(value):
                message = "an infinite end of the domain is not handled by this version"
                faults.add(Reason.UNSUPPORTED_INTERVAL, f"{path}.{field}", message, value)
                ends_ok = False
            elif not faults.finite(value, f"{path}.{field}"):
                ends_ok = False
        if not ends_ok:
            continue
        if not layer.end > layer.start:
            message = f"must lie right of its start {number_text(layer.start)}"
            faults.add(Reason.BAD_DOMAIN, f"{path}.end", message, layer.end)
        elif layer.end - layer.start < 64 * float(np.spacing(max(abs(layer.start), abs(layer.end)))):
            message = "the layer is too thin to hold distinct points in double precision"
            faults.add(Reason.BAD_DOMAIN, f"{path}.end", message, layer.end)
    if len(faults.found) == before:
        edges = np.asarray(layer_edges(problem))
        for index in range(1, last + 1):
            start = problem.layers[index].start
            gap = start - edges[index]
            if abs(gap) > _snap_width(edges, index):
                word = "a gap" if gap > 0 else "an overlap"
                message = f"{word} after layer {index - 1}, which ends at {number_text(edges[index])}"
                faults.add(Reason.LAYER_GAP, f"layers[{index}].start", message, start)
    return len(faults.found) == before


def _check_geometry(problem: Problem, faults: _Faults) -> None:
    if problem.geometry is Geometry.PLANE:
        return
    start = problem.layers[0].start
    if not math.isfinite(start):
        return
    if start < 0.0:
        faults.add(Reason.BAD_DOMAIN, "layers[0].start", "a radius must not be negative", start)
    elif start == 0.0 and not isinstance(problem.left, Bounded | Neumann):
        message = "at the centre r = 0 there is no surface: only bounded (or neumann, the same) suits it"
        faults.add(Reason.BAD_END_CONDITION, "left.kind", message, type(problem.left).__name__.lower())


def _check_coefficients(layer: Layer, path: str, faults: _Faults) -> None:
    for field, coefficient in (("p", layer.p), ("q", layer.q), ("w", layer.w)):
        where = f"{path}.{field}"
        match coefficient:
            case Constant(value):
                _check_value(value, field, where, layer, faults)
            case Expression(text):
                _check_expression(text, field, where, layer, faults)
            case Samples():
                _check_samples(coefficient, field, where, layer, faults)
            case _:
                message = "must be a number, an expression or samples"
                faults.add(Reason.INVALID_COEFFICIENT, where, message, type(coefficient).__name__)


def _check_value(value: float, field: str, where: str, layer: Layer, faults: _Faults) -> None:
    """The sign rules for one value of p (or 1/p), q or w."""
    if not faults.finite(value, where):
        return
    if field == "p" and value <= 0.0:
        name = "1/p" if layer.reciprocal_p else "p"
        if value < 0.0:
            faults.add(Reason.NEGATIVE_COEFFICIENT, where, f"{name} must be positive", value)
        else:
            message = f"{name} = 0 is not handled by this version"
            faults.add(Reason.UNSUPPORTED_COEFFICIENT, where, message, value)
    elif field == "w" and value < 0.0:
        faults.add(Reason.NEGATIVE_COEFFICIENT, where, "w must not be negative", value)


def _check_expression(text: str, field: str, where: str, layer: Layer, faults: _Faults) -> None:
    try:
        tree = parse(text)
    except CoreError as error:
        for fault in error.violations:
            faults.add(fault.reason or error.reason, where, fault.message, fault.number)
        return
    value = constant_value(tree)
    if value is not None:
        _check_value(value, field, where, layer, faults)


def _check_samples(samples: Samples, field: str, where: str, layer: Layer, faults: _Faults) -> None:
    where = f"{where}.samples"
    try:
        x = np.asarray(samples.x, dtype=np.float64)
        values = np.asarray(samples.values, dtype=np.float64)
        interpolation = Interpolation(samples.interpolation)
    except (TypeError, ValueError) as error:
        faults.add(Reason.BAD_SAMPLES, where, f"not a table of real numbers: {error}")
        return
    if x.ndim != 1 or values.ndim != 1:
        name, array = ("x", x) if x.ndim != 1 else ("values", values)
        faults.add(Reason.BAD_SAMPLES, f"{where}.{name}", "must be one list of numbers", str(array.shape))
        return
    if x.size != values.size:
        message = f"there must be one for each of the {x.size} in x"
        faults.add(Reason.BAD_SAMPLES, f"{where}.values", message, values.size)
        return
    if x.size > MAX_SAMPLES:
        faults.add(Reason.LIMIT_EXCEEDED, f"{where}.x", f"at most {MAX_SAMPLES} are accepted", x.size)
        return
    if x.size < 2:
        faults.add(Reason.BAD_SAMPLES, f"{where}.x", "at least two samples are needed", x.size)
        return
    for name, array in (("x", x), ("values", values)):
        bad = np.flatnonzero(~np.isfinite(array))
        if bad.size:
            faults.add(Reason.NOT_FINITE, f"{where}.{name}[{bad[0]}]", "must be finite", array[bad[0]])
            return
    unsorted = np.flatnonzero(np.diff(x) <= 0.0)
    if unsorted.size:
        index = int(unsorted[0]) + 1
        word = "duplicate of" if x[index] == x[index - 1] else "not right of"
        message = f"samples must ascend: {word} its predecessor {number_text(x[index - 1])}"
        faults.add(Reason.BAD_SAMPLES, f"{where}.x[{index}]", message, x[index])
        return
    _check_coverage(x, where, layer, faults)
    # A step table does not use the last (or first) value; the others pass through every value.
    used = {Interpolation.STEP_LEFT: values[:-1], Interpolation.STEP_RIGHT: values[1:]}
    offset = 1 if interpolation is Interpolation.STEP_RIGHT else 0
    inside = used.get(interpolation, values)
    if field in ("p", "w") and inside.size:
        index = int(np.argmin(inside))
        if inside[index] < 0.0 or (field == "p" and inside[index] == 0.0):
            _check_value(float(inside[index]), field, f"{where}.values[{index + offset}]", layer, faults)


def _check_coverage(x: FloatArray, where: str, layer: Layer, faults: _Faults) -> None:
    if not (math.isfinite(layer.start) and math.isfinite(layer.end)):
        return
    slack = SNAP * (layer.end - layer.start)
    for index, point, edge, short in (
        (0, x[0], layer.start, x[0] > layer.start + slack),
        (x.size - 1, x[-1], layer.end, x[-1] < layer.end - slack),
    ):
        if short:
            message = f"the samples do not reach the layer's edge {number_text(edge)}"
            faults.add(Reason.BAD_SAMPLES, f"{where}.x[{index}]", message, point)


def _check_end(end: End, side: str, faults: _Faults) -> None:
    reason = Reason.BAD_END_CONDITION
    match end:
        case Dirichlet() | Neumann() | Bounded():
            pass
        case Robin(alpha, beta):
            finite = [faults.finite(alpha, f"{side}.alpha"), faults.finite(beta, f"{side}.beta")]
            if all(finite) and alpha == 0.0 and beta == 0.0:
                faults.add(reason, f"{side}.alpha", "alpha and beta must not both be zero", alpha)
            elif all(finite) and beta != 0.0 and not math.isfinite(alpha / beta):
                faults.add(reason, f"{side}.beta", "alpha / beta overflows", beta)
        case Film(h):
            faults.non_negative(h, f"{side}.film", reason)
        case Lump(mass, film, resistance):
            faults.non_negative(mass, f"{side}.mass", reason)
            faults.non_negative(film, f"{side}.film", reason)
            faults.non_negative(resistance, f"{side}.resistance", reason)
        case _:
            faults.add(reason, f"{side}.kind", "unknown end condition", type(end).__name__)


def _check_interfaces(problem: Problem, faults: _Faults) -> None:
    reason = Reason.BAD_INTERFACE
    edges = layer_edges(problem)
    seen: dict[float, int] = {}
    for index, interface in enumerate(problem.interfaces):
        path = f"interfaces[{index}]"
        faults.non_negative(interface.resistance, f"{path}.resistance", reason)
        faults.non_negative(interface.mass, f"{path}.mass", reason)
        faults.finite(interface.spring, f"{path}.spring")
        if not faults.finite(interface.x, f"{path}.x"):
            continue
        x = snapped_interface(interface.x, edges)
        if not edges[0] < x < edges[-1]:
            message = f"must lie inside ({number_text(edges[0])}, {number_text(edges[-1])})"
            faults.add(reason, f"{path}.x", message, interface.x)
        elif seen.setdefault(x, index) != index:
            faults.add(reason, f"{path}.x", f"same place as interfaces[{seen[x]}]", interface.x)
        if interface.resistance > 0.0 and (interface.spring != 0.0 or interface.mass > 0.0):
            message = "u has two values at a resistance: a spring or a mass needs a point of its own"
            faults.add(reason, path, message, _both(interface))


def _both(interface: Interface) -> str:
    return f"resistance {interface.resistance!r}, spring {interface.spring!r}, mass {interface.mass!r}"


def _check_coupling(problem: Problem, coupling: Coupling, faults: _Faults) -> None:
    if coupling.kind not in list(CouplingKind):
        faults.add(Reason.BAD_END_CONDITION, "coupling.kind", "unknown coupling", str(coupling.kind))
        return
    if faults.finite(coupling.phase, "coupling.phase") and abs(coupling.phase) > _LARGEST_PHASE:
        message = f"a phase beyond {_LARGEST_PHASE:g} radians has lost its digits: reduce it to (-pi, pi]"
        faults.add(Reason.BAD_END_CONDITION, "coupling.phase", message, coupling.phase)
    if problem.geometry is not Geometry.PLANE:
        message = "the two ends of a radius are different surfaces and cannot be coupled"
        faults.add(Reason.UNSUPPORTED_COUPLING, "coupling.kind", message, str(problem.geometry))


def has_mass(problem: Problem) -> bool:
    """Whether a lump or a point mass carries lambda somewhere."""
    ends = (problem.left, problem.right)
    lumps = any(isinstance(end, Lump) and end.mass > 0.0 for end in ends)
    return lumps or any(interface.mass > 0.0 for interface in problem.interfaces)


def zero_weight_error() -> InvalidProblem:
    """w = 0 on every layer and no mass anywhere: lambda has nothing to act on."""
    message = "w is zero on every layer and there is no mass: the problem has no eigenvalues"
    violation = Violation("layers[0].w", message, "0", Reason.ZERO_WEIGHT)
    return InvalidProblem(Reason.ZERO_WEIGHT, "", (violation,))


def _is_zero(coefficient: Coefficient) -> bool:
    match coefficient:
        case Constant(value):
            return value == 0.0
        case Expression(text):
            return constant_value(parse(text)) == 0.0
        case Samples(values=values):
            return not np.any(values)


def _check_weight(problem: Problem, faults: _Faults) -> None:
    if has_mass(problem) or not all(_is_zero(layer.w) for layer in problem.layers):
        return
    error = zero_weight_error()
    faults.found.extend(error.violations)
