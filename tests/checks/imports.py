"""Import rules between the rooms, read from the source with `ast`.

    rpc -> store -> core;  process -> all of these
    service -> modewright.v1, modewright.record, modewright.pieces (and what these two are made of:
    end_pieces, series) and nothing else of the client
    core, record and pieces import neither grpc nor protobuf; grpc is imported in rpc and process only
    client -> no service code; at import time NumPy, grpc and protobuf only

A rule is a room and the module prefixes its code may import beside the standard library. Imports
inside functions and under TYPE_CHECKING count as well: an optional library is named by a rule of its
own.
"""

from __future__ import annotations

import ast
import sys
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

SERVICE = "modewright_service"
RECORD = ("modewright.record", "modewright.pieces", "modewright.end_pieces", "modewright.series")
CONTRACT = "modewright.v1"


@dataclass(frozen=True)
class Rule:
    """What the modules below `room` (a dotted prefix) may import beside the standard library."""

    room: str
    allowed: tuple[str, ...]
    # Third-party modules allowed inside functions only, so that importing the room stays light.
    deferred: tuple[str, ...] = ()


# The first rule whose room is a prefix of the module decides.
RULES = (
    Rule("modewright.v1", ("grpc", "google.protobuf", CONTRACT)),
    Rule("modewright.record", ("numpy", *RECORD)),
    *(Rule(name, ("numpy", *RECORD)) for name in RECORD[1:]),
    Rule("modewright.demo", ("numpy", "modewright"), deferred=("matplotlib",)),
    Rule("modewright.cli", ("numpy", "modewright"), deferred=("matplotlib",)),
    Rule("modewright.document", ("numpy", "google", "modewright"), deferred=("yaml",)),
    Rule("modewright", ("numpy", "grpc", "google", "modewright")),
    Rule(f"{SERVICE}.core", ("numpy", "scipy", "mpmath", f"{SERVICE}.core", *RECORD)),
    Rule(f"{SERVICE}.store", ("numpy", f"{SERVICE}.core", f"{SERVICE}.store", *RECORD)),
    Rule(
        f"{SERVICE}.rpc",
        (
            *("numpy", "grpc", "google", "grpc_health", "grpc_reflection", "grpc_channelz"),
            *(f"{SERVICE}.core", f"{SERVICE}.store", f"{SERVICE}.rpc", CONTRACT, *RECORD),
        ),
    ),
    Rule(
        SERVICE,
        (
            *("numpy", "scipy", "grpc", "google", "grpc_health", "grpc_reflection", "grpc_channelz"),
            *("prometheus_client", SERVICE, CONTRACT, *RECORD),
        ),
    ),
)


@dataclass(frozen=True)
class Import:
    """One import statement: what it names, where, and whether it runs when the module is imported."""

    name: str
    line: int
    at_import: bool


def _within(module: str, prefix: str) -> bool:
    return module == prefix or module.startswith(prefix + ".")


def module_name(path: Path, source_root: Path) -> str:
    """Dotted name of the module at `path` below the import root `source_root`."""
    parts = path.relative_to(source_root).with_suffix("").parts
    return ".".join(parts[:-1] if parts[-1] == "__init__" else parts)


def _resolved(node: ast.ImportFrom, module: str, is_package: bool) -> str:
    """Absolute name of the module a ``from`` statement names."""
    if not node.level:
        return node.module or ""
    package = module.split(".")
    package = package[: len(package) - node.level + (1 if is_package else 0)]
    return ".".join([*package, *(node.module or "").split(".")]).rstrip(".")


def _is_type_checking(node: ast.AST) -> bool:
    return isinstance(node, ast.If) and "TYPE_CHECKING" in ast.unparse(node.test)


def imports(tree: ast.Module, module: str, is_package: bool) -> Iterator[Import]:
    """Every import of a module. ``from package import name`` gives ``package.name``."""
    pending: list[tuple[ast.AST, bool]] = [(tree, True)]
    while pending:
        node, at_import = pending.pop()
        if isinstance(node, ast.Import):
            for alias in node.names:
                yield Import(alias.name, node.lineno, at_import)
        elif isinstance(node, ast.ImportFrom):
            base = _resolved(node, module, is_package)
            for alias in node.names:
                yield Import(f"{base}.{alias.name}", node.lineno, at_import)
        inside = isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef | ast.Lambda)
        runs = at_import and not inside and not _is_type_checking(node)
        pending.extend((child, runs) for child in ast.iter_child_nodes(node))


def _fault(found: Import, rule: Rule) -> str | None:
    top = found.name.split(".")[0]
    if top in sys.stdlib_module_names:
        return None
    if any(_within(found.name, prefix) for prefix in rule.allowed):
        return None
    if any(_within(found.name, prefix) for prefix in rule.deferred):
        return "may be imported inside a function only" if found.at_import else None
    return f"is not for {rule.room}"


def violations(root: Path) -> list[str]:
    """One line for each import in client/ and service/ below `root` that breaks a rule."""
    found: list[str] = []
    for source_root in (root / "client", root / "service"):
        for path in sorted(source_root.rglob("*.py")):
            module = module_name(path, source_root)
            rule = next((rule for rule in RULES if _within(module, rule.room)), None)
            place = path.relative_to(root)
            if rule is None:
                found.append(f"{place}: no import rule covers {module}")
                continue
            tree = ast.parse(path.read_text(encoding="utf-8"), filename=str(path))
            for entry in imports(tree, module, path.name == "__init__.py"):
                fault = _fault(entry, rule)
                if fault is not None:
                    found.append(f"{place}:{entry.line}: {entry.name} {fault}")
    return found
