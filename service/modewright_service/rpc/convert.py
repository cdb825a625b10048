"""Messages of the contract to the core's data and back: the only module that knows both.

What it refuses is what the core could not even be told: a coefficient without a form, an unknown enum
value, a number that does not belong to its end condition, a drafted option. All faults of a problem's
structure are collected; the core's own checks of the numbers follow.
"""

from __future__ import annotations

from typing import Final

import numpy as np

from modewright.record import Record
from modewright.v1 import basis_pb2, problem_pb2, solve_pb2
from modewright_service.core import digest
from modewright_service.core import problem as core
from modewright_service.core.errors import (
    CoreError,
    InvalidProblem,
    InvalidRequest,
    Reason,
    Unsupported,
    Violation,
    number_text,
)
from modewright_service.store.library import Wanted

__all__ = ["API_VERSION", "DEFAULT_MODES", "ends_message", "problem_from", "solve_response", "wanted_from"]

API_VERSION: Final = "1.0"
DEFAULT_RTOL: Final = 1e-9
DEFAULT_MODES: Final = 8
_RTOL_RANGE: Final = (1e-12, 1e-2)
_KEY_LENGTH: Final = 64

_GEOMETRIES: Final = {
    problem_pb2.GEOMETRY_UNSPECIFIED: core.Geometry.PLANE,
    problem_pb2.GEOMETRY_PLANE: core.Geometry.PLANE,
    problem_pb2.GEOMETRY_CYLINDRICAL: core.Geometry.CYLINDRICAL,
    problem_pb2.GEOMETRY_SPHERICAL: core.Geometry.SPHERICAL,
}
_INTERPOLATIONS: Final = {
    problem_pb2.INTERPOLATION_UNSPECIFIED: core.Interpolation.LINEAR,
    problem_pb2.INTERPOLATION_STEP_LEFT: core.Interpolation.STEP_LEFT,
    problem_pb2.INTERPOLATION_STEP_RIGHT: core.Interpolation.STEP_RIGHT,
    problem_pb2.INTERPOLATION_LINEAR: core.Interpolation.LINEAR,
    problem_pb2.INTERPOLATION_MONOTONE_CUBIC: core.Interpolation.MONOTONE_CUBIC,
    problem_pb2.INTERPOLATION_CUBIC_SPLINE: core.Interpolation.CUBIC_SPLINE,
}
_COUPLINGS: Final = {
    problem_pb2.COUPLING_KIND_PERIODIC: core.CouplingKind.PERIODIC,
    problem_pb2.COUPLING_KIND_ANTIPERIODIC: core.CouplingKind.ANTIPERIODIC,
    problem_pb2.COUPLING_KIND_BLOCH: core.CouplingKind.BLOCH,
}
_END_NAMES: Final = {
    "dirichlet": problem_pb2.END_KIND_DIRICHLET,
    "neumann": problem_pb2.END_KIND_NEUMANN,
    "robin": problem_pb2.END_KIND_ROBIN,
    "film": problem_pb2.END_KIND_FILM,
    "lump": problem_pb2.END_KIND_LUMP,
    "bounded": problem_pb2.END_KIND_BOUNDED,
    "periodic": problem_pb2.END_KIND_COUPLED,
    "antiperiodic": problem_pb2.END_KIND_COUPLED,
    "bloch": problem_pb2.END_KIND_COUPLED,
}
_END_CLASSES: Final = {
    "regular": basis_pb2.END_CLASS_REGULAR,
    "limit-circle": basis_pb2.END_CLASS_LIMIT_CIRCLE,
    "limit-point": basis_pb2.END_CLASS_LIMIT_POINT,
    "undetermined": basis_pb2.END_CLASS_UNDETERMINED,
}
# kind -> (required numbers, optional ones)
_END_NUMBERS: Final[dict[int, tuple[tuple[str, ...], tuple[str, ...]]]] = {
    problem_pb2.END_KIND_DIRICHLET: ((), ()),
    problem_pb2.END_KIND_NEUMANN: ((), ()),
    problem_pb2.END_KIND_ROBIN: (("alpha", "beta"), ()),
    problem_pb2.END_KIND_FILM: (("film",), ()),
    problem_pb2.END_KIND_LUMP: (("mass",), ("film", "resistance")),
    problem_pb2.END_KIND_BOUNDED: ((), ()),
}
_ALL_NUMBERS: Final = ("alpha", "beta", "film", "mass", "resistance")
_DRAFT: Final = "is drafted in the contract and not answered by this version"


class _Faults:
    def __init__(self) -> None:
        self.found: list[Violation] = []

    def add(self, reason: Reason, field: str, message: str, number: object = "") -> None:
        self.found.append(Violation(field, message, number_text(number), reason))

    def raise_any(self) -> None:
        if not self.found:
            return
        kinds = (Reason.UNSUPPORTED_OPTION, Reason.UNSUPPORTED_END, Reason.UNSUPPORTED_COUPLING)
        certain = [violation for violation in self.found if violation.reason not in kinds]
        # A fault that no version could accept tells more than one that a later version will.
        kind = InvalidProblem if certain else Unsupported
        reason = (certain or self.found)[0].reason or Reason.BAD_REQUEST
        raise kind(reason, "", self.found)


# ---- problems ----


def problem_from(message: problem_pb2.Problem) -> core.Problem:
    """The core's problem, its numbers unchecked.

    Raises InvalidProblem or Unsupported with every structural fault.
    """
    faults = _Faults()
    geometry = _GEOMETRIES.get(message.geometry)
    if geometry is None:
        faults.add(Reason.UNKNOWN_OPTION, "geometry", "not a known geometry", int(message.geometry))
    if message.parameters:
        faults.add(Reason.UNSUPPORTED_OPTION, "parameters", _DRAFT, len(message.parameters))
    layers = tuple(_layer(layer, f"layers[{i}]", faults) for i, layer in enumerate(message.layers))
    coupling = _coupling(message.coupling, faults) if message.HasField("coupling") else None
    ends: list[core.End] = []
    for side in ("left", "right"):
        if message.HasField(side):
            end: problem_pb2.EndCondition = getattr(message, side)
            if coupling is not None:
                faults.add(Reason.BAD_END_CONDITION, side, "coupled ends have no condition of their own")
            ends.append(_end(end, side, faults))
        else:
            if not message.HasField("coupling"):
                faults.add(Reason.BAD_END_CONDITION, side, "is missing")
            ends.append(core.Neumann())
    interfaces = tuple(
        core.Interface(item.x, item.resistance, item.spring, item.mass) for item in message.interfaces
    )
    faults.raise_any()
    return core.Problem(layers, ends[0], ends[1], interfaces, coupling, geometry or core.Geometry.PLANE)


def _layer(message: problem_pb2.Layer, field: str, faults: _Faults) -> core.Layer:
    coefficients = {
        name: _coefficient(getattr(message, name), f"{field}.{name}", faults)
        for name in ("p", "q", "w")
        if message.HasField(name)
    }
    return core.Layer(
        message.name, message.start, message.end, reciprocal_p=message.reciprocal_p, **coefficients
    )


def _coefficient(message: problem_pb2.Coefficient, field: str, faults: _Faults) -> core.Coefficient:
    form = message.WhichOneof("form")
    if form == "constant":
        return core.Constant(message.constant)
    if form == "expression":
        return core.Expression(message.expression)
    if form == "samples":
        samples = message.samples
        interpolation = _INTERPOLATIONS.get(samples.interpolation)
        if interpolation is None:
            number = int(samples.interpolation)
            faults.add(
                Reason.UNKNOWN_OPTION, f"{field}.samples.interpolation", "not a known interpolation", number
            )
            interpolation = core.Interpolation.LINEAR
        x = np.array(samples.x, dtype=np.float64)
        return core.Samples(x, np.array(samples.values, dtype=np.float64), interpolation)
    faults.add(Reason.INVALID_COEFFICIENT, field, "needs a constant, an expression or samples")
    return core.Constant(1.0)


def _end(message: problem_pb2.EndCondition, field: str, faults: _Faults) -> core.End:
    if message.HasField("exponents"):
        faults.add(Reason.UNSUPPORTED_END, f"{field}.exponents", _DRAFT)
    numbers = _END_NUMBERS.get(message.kind)
    if numbers is None:
        faults.add(Reason.BAD_END_CONDITION, f"{field}.kind", "not a known kind of end", int(message.kind))
        return core.Neumann()
    required, optional = numbers
    kind = problem_pb2.EndKind.Name(message.kind).removeprefix("END_KIND_").lower()
    for name in _ALL_NUMBERS:
        if message.HasField(name) and name not in required + optional:
            text = f"does not belong to a {kind} end"
            faults.add(Reason.BAD_END_CONDITION, f"{field}.{name}", text, getattr(message, name))
        if not message.HasField(name) and name in required:
            faults.add(Reason.BAD_END_CONDITION, f"{field}.{name}", f"is missing: a {kind} end needs it")
    match message.kind:
        case problem_pb2.END_KIND_DIRICHLET:
            return core.Dirichlet()
        case problem_pb2.END_KIND_NEUMANN:
            return core.Neumann()
        case problem_pb2.END_KIND_ROBIN:
            return core.Robin(message.alpha, message.beta)
        case problem_pb2.END_KIND_FILM:
            return core.Film(message.film)
        case problem_pb2.END_KIND_LUMP:
            return core.Lump(message.mass, message.film, message.resistance)
        case _:
            return core.Bounded()


def _coupling(message: problem_pb2.Coupling, faults: _Faults) -> core.Coupling | None:
    kind = _COUPLINGS.get(message.kind)
    if kind is None:
        faults.add(Reason.UNKNOWN_OPTION, "coupling.kind", "not a known coupling", int(message.kind))
        return None
    coupling = core.Coupling(kind, message.phase)
    if coupling.factor.imag != 0.0:
        text = "complex modes are not answered by this version: the phase must be a multiple of pi"
        faults.add(Reason.UNSUPPORTED_COUPLING, "coupling.phase", text, message.phase)
    return coupling


# ---- what is wanted of a basis ----


def wanted_from(
    problem: core.Problem,
    specification: basis_pb2.BasisSpecification,
    *,
    max_modes: int,
    field: str = "specification",
    default_modes: int | None = None,
    pinned_key: str = "",
) -> Wanted:
    """The basis that a validated problem and a specification ask for.

    default_modes: taken where the specification selects nothing. pinned_key: the key it must come out as.
    Raises InvalidRequest (BAD_REQUEST, TOO_MANY_MODES, BAD_TOLERANCE), Unsupported (UNSUPPORTED_SELECTION)
    and CoreError (VERSION_MISMATCH) for a pinned key that does not come out.
    """
    modes = _modes(specification, max_modes, field, default_modes)
    rtol = specification.rtol if specification.HasField("rtol") else DEFAULT_RTOL
    least, most = _RTOL_RANGE
    if not least <= rtol <= most:
        text = f"must be between {least:g} and {most:g}"
        raise InvalidRequest.at(Reason.BAD_TOLERANCE, f"{field}.rtol", text, rtol)
    rung, rtol = digest.rung(modes), digest.rtol_rung(rtol)
    problem_digest = digest.problem_digest(problem)
    key = digest.basis_key(problem_digest, rung, rtol)
    if pinned_key and pinned_key != key:
        raise CoreError(
            Reason.VERSION_MISMATCH,
            "this problem and specification do not give the basis of the key sent along with them: another "
            "algorithm version made it, or they do not belong together",
            metadata={"expected": pinned_key, "found": key, "algorithm_version": digest.ALGORITHM_VERSION},
        )
    return Wanted(problem, problem_digest, key, modes, rung, rtol, exact=bool(pinned_key))


def _modes(
    specification: basis_pb2.BasisSpecification, max_modes: int, field: str, default: int | None
) -> int:
    selection = specification.WhichOneof("selection")
    if selection is None:
        if default is None:
            raise InvalidRequest.at(
                Reason.BAD_REQUEST, f"{field}.modes", "is missing: how many of the lowest?"
            )
        return default
    if selection != "modes":
        raise Unsupported.at(Reason.UNSUPPORTED_SELECTION, f"{field}.{selection}", _DRAFT)
    if not 1 <= specification.modes <= max_modes:
        text = f"must be between 1 and {max_modes}"
        raise InvalidRequest.at(
            Reason.TOO_MANY_MODES, f"{field}.modes", text, specification.modes, limit=max_modes
        )
    return specification.modes


def checked_key(key: str, field: str) -> str:
    """A basis key as it was sent. Raises InvalidRequest for what cannot be one."""
    if key and (len(key) != _KEY_LENGTH or not set(key) <= set("0123456789abcdef")):
        text = f"must be {_KEY_LENGTH} lower-case hexadecimal digits"
        raise InvalidRequest.at(Reason.BAD_REQUEST, field, text, f"{key[:80]!r}")
    return key


# ---- answers ----


def ends_message(problem: core.Problem, classes: tuple[str, str]) -> basis_pb2.Ends:
    """What the ends of a validated problem are resolved to, with the classes that the core gives them."""
    resolved = core.resolve(problem)
    left, right = (
        _end_report(term, name) for term, name in zip((resolved.left, resolved.right), classes, strict=True)
    )
    return basis_pb2.Ends(left=left, right=right)


def _end_report(term: core.EndTerm, end_class: str) -> basis_pb2.EndReport:
    mass, film, resistance = term.lump or (term.mass, 0.0, 0.0)
    kind = "dirichlet" if term.dirichlet else term.kind
    return basis_pb2.EndReport(
        kind=_END_NAMES[kind],
        end_class=_END_CLASSES[end_class],
        stiffness=term.stiffness,
        mass=mass,
        resistance=resistance,
        film=film,
    )


def resolved_specification(modes: int, rung: int, rtol: float) -> basis_pb2.ResolvedSpecification:
    """What a specification became."""
    return basis_pb2.ResolvedSpecification(modes=modes, rung=rung, rtol=rtol)


def solve_response(
    record: Record, wanted: Wanted, *, shared: bool, solve_count: int, seconds: float
) -> solve_pb2.SolveResponse:
    """The answer to a Solve from a basis with at least the wanted modes."""
    n = wanted.modes
    confirmed = {
        0: basis_pb2.COUNT_CONFIRMATION_DISCRETE,
        1: basis_pb2.COUNT_CONFIRMATION_COMPARISON,
    }
    return solve_pb2.SolveResponse(
        basis_key=record.basis_key,
        problem_digest=record.problem_digest,
        algorithm_version=record.algorithm_version,
        api_version=API_VERSION,
        specification=resolved_specification(n, record.count, record.rtol),
        eigenvalues=record.eigenvalues[:n].tolist(),
        lower=record.lower[:n].tolist(),
        upper=record.upper[:n].tolist(),
        zeros=record.zeros[:n].tolist(),
        groups=record.groups[:n].tolist(),
        confirmed=[confirmed[int(value)] for value in record.confirmed[:n]],
        tolerance_met=record.tolerance_met[:n].tolist(),
        scale=record.scale,
        ends=ends_message(wanted.problem, (record.left.classification, record.right.classification)),
        answered_from_cache=shared,
        server_solve_count=solve_count,
        solve_seconds=seconds,
        remarks=_remarks(record.head(n)),
    )


def _remarks(record: Record) -> list[str]:
    remarks = []
    groups = record.groups.tolist()
    short = np.flatnonzero(~record.tolerance_met)
    if short.size:
        size = np.maximum(np.abs(record.eigenvalues), record.scale)
        widths = ((record.upper - record.lower) / size)[short]
        worst = int(np.argmax(widths))
        remarks.append(
            f"the tolerance {record.rtol:g} was not met for {short.size} of the eigenvalues: the bounds of "
            f"mode {short[worst]} are {widths[worst]:.2g} apart, relative to max(|lambda|, scale)"
        )
    unconfirmed = int(np.count_nonzero(record.confirmed == 0))
    if unconfirmed:
        remarks.append(
            f"{unconfirmed} of the indices rest on the discrete count only; their lower bounds are those of "
            "a comparison problem alone, and may be far below"
        )
    together = len(groups) - len(set(groups))
    if together:
        remarks.append(
            f"{together} of the eigenvalues cannot be told apart from the one before; only the space "
            "that a group's modes span is determined"
        )
    return remarks
