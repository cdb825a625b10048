"""From a problem document (a dictionary) to a Problem.

Every complaint of structure is collected with its path in the document and raised at once as InvalidProblem.
A document is either plain (``layers``, ``left``, ``right``, ...) or one ``stack`` of material layers.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import MISSING, fields
from pathlib import Path
from typing import Any, TypeVar

from modewright.checks import Checks, choice_list, quote
from modewright.document import files
from modewright.errors import InvalidProblem
from modewright.problem import END_KINDS, Coupling, End, Interface, Layer, Problem, Samples
from modewright.stack import Stack, StackLayer

__all__ = ["problem_from_document"]

T = TypeVar("T")

_PLAIN = ("name", "geometry", "layers", "left", "right", "interfaces", "coupling")
_FILE_KEYS = ("file", "columns", "interpolation")


def problem_from_document(document: Mapping[str, Any], base: Path) -> Problem:
    """The problem of a document whose files of samples are relative to the folder `base`."""
    checks = Checks()
    known = checks.table("", document, (*_PLAIN, "stack"))
    if "stack" in known:
        for key in known:
            if key not in ("name", "stack"):
                checks.wrong(key, "belongs to a document without a stack")
        problem = _stack(checks, known, base)
    else:
        problem = _plain(checks, known, base)
    checks.finish("not a valid problem document")
    if problem is None:
        raise AssertionError("a problem that was not made must leave a violation")
    return problem


def _plain(checks: Checks, known: Mapping[str, Any], base: Path) -> Problem | None:
    if "layers" not in known:
        checks.wrong("layers", "is missing", reason="BAD_DOMAIN")
    coupling = None
    if "coupling" in known:
        coupling = checks.part("coupling", lambda: _coupling(known["coupling"]))
    layers = _each(checks, "layers", known.get("layers", ()), lambda value: _layer(value, base))
    interfaces = _each(checks, "interfaces", known.get("interfaces", ()), _interface)
    ends: dict[str, End | None] = {}
    for side in ("left", "right"):
        if side in known:
            ends[side] = _end(checks, side, known[side])
        elif "coupling" not in known:
            checks.wrong(side, "is missing", reason="BAD_END_CONDITION")
    if checks.violations:
        return None
    return checks.part(
        "",
        lambda: Problem(
            layers=tuple(layers),
            left=ends.get("left"),
            right=ends.get("right"),
            interfaces=tuple(interfaces),
            coupling=coupling,
            geometry=known.get("geometry", "plane"),
            name=known.get("name", ""),
        ),
    )


def _stack(checks: Checks, known: Mapping[str, Any], base: Path) -> Problem | None:
    keys = [item.name for item in fields(Stack) if item.name != "name"]
    table = checks.table("stack", known["stack"], keys, ("layers", "inner", "outer"))
    nested = Checks("stack")
    layers = _each(nested, "layers", table.get("layers", ()), lambda value: _stack_layer(value, base))
    ends = {side: _end(nested, side, table[side]) for side in ("inner", "outer") if side in table}
    checks.violations.extend(nested.violations)
    if checks.violations:
        return None
    inner, outer = ends["inner"], ends["outer"]
    if inner is None or outer is None:
        return None
    options = {key: table[key] for key in ("geometry", "start") if key in table}
    name = checks.text("name", known.get("name", ""))
    return checks.part("stack", lambda: Stack(tuple(layers), inner, outer, name=name, **options).problem())


def _each(checks: Checks, name: str, value: object, make: Callable[[Any], T]) -> list[T]:
    """Every entry of a list made into a T; complaints carry the entry's number."""
    made = []
    for index, item in enumerate(checks.items(name, value)):
        part = checks.part(f"{name}[{index}]", lambda item=item: make(item))  # type: ignore[misc]
        if part is not None:
            made.append(part)
    return made


def _layer(value: object, base: Path) -> Layer:
    return Layer(**_arguments(value, Layer, base, ("p", "q", "w")))


def _stack_layer(value: object, base: Path) -> StackLayer:
    return StackLayer(**_arguments(value, StackLayer, base, ("conductivity", "heat_capacity")))


def _interface(value: object) -> Interface:
    return Interface(**_arguments(value, Interface))


def _coupling(value: object) -> Coupling:
    return Coupling(**_arguments(value, Coupling))


def _end(checks: Checks, side: str, value: object) -> End | None:
    """An end condition: a table with its `kind` and the numbers that belong to it."""
    return checks.part(side, lambda: _end_of_kind(value))


def _end_of_kind(value: object) -> End:
    checks = Checks(reason="BAD_END_CONDITION")
    if not isinstance(value, Mapping):
        checks.wrong("", f"must be a table with a kind, not {quote(value)}")
    elif "kind" not in value:
        checks.wrong("kind", f"is missing: {choice_list(END_KINDS)}")
    else:
        checks.choice("kind", value["kind"], END_KINDS)
    checks.finish()
    assert isinstance(value, Mapping)
    kind = END_KINDS[value["kind"]]
    numbers = {key: item for key, item in value.items() if key != "kind"}
    return kind(**_arguments(numbers, kind, reason="BAD_END_CONDITION"))


def _arguments(
    value: object,
    kind: type[Any],
    base: Path = Path(),
    coefficients: tuple[str, ...] = (),
    reason: str = "BAD_REQUEST",
) -> dict[str, Any]:
    """The fields of a table as arguments of the dataclass `kind`; samples are made or read on the way."""
    checks = Checks(reason=reason)
    every = [item for item in fields(kind) if item.init]
    required = [item.name for item in every if item.default is MISSING]
    arguments = dict(checks.table("", value, [item.name for item in every], required))
    for name in coefficients:
        if isinstance(arguments.get(name), Mapping):
            made = checks.part(name, lambda name=name: _samples(arguments[name], base))  # type: ignore[misc]
            arguments[name] = 0.0 if made is None else made
    if checks.violations:
        # The constructor's own complaints about the other fields belong beside these.
        present = {name: arguments.get(name, 0.0) for name in arguments.keys() | set(required)}
        missing = {violation.field for violation in checks.violations}
        extra = Checks()
        extra.part("", lambda: kind(**present))
        checks.violations += [violation for violation in extra.violations if violation.field not in missing]
    checks.finish()
    return arguments


def _samples(value: Mapping[str, Any], base: Path) -> Samples:
    """Samples written inline or kept in a file."""
    checks = Checks(reason="BAD_SAMPLES")
    if ("samples" in value) == ("file" in value):
        checks.wrong("", f"needs either samples or a file, not {quote(dict(value))}")
        checks.finish()
    if "samples" in value:
        table = checks.table("", value, ("samples",))
        inner = checks.table("samples", table["samples"], ("x", "values", "interpolation"), ("x", "values"))
        checks.finish()
        made = checks.part("samples", lambda: Samples(**inner))
    else:
        table = checks.table("", value, _FILE_KEYS)
        path = Path(checks.text("file", table["file"]))
        interpolation = table.get("interpolation", "linear")
        checks.finish()
        columns = table.get("columns")
        made = checks.part("", lambda: files.read_samples(base / path, columns, interpolation))
    checks.finish()
    if made is None:
        raise InvalidProblem("samples without a value and without a complaint")
    return made
