"""The commands: each takes the parsed options, does its work through the client, and returns the summary."""

from __future__ import annotations

import argparse
import logging
from collections.abc import Callable
from dataclasses import asdict
from typing import Any

import numpy as np
import numpy.typing as npt

import modewright
from modewright.cli.files import (
    InputFileError,
    Snapshots,
    read_coefficients,
    read_points,
    read_snapshots,
    write_arrays,
    write_table,
)

__all__ = ["COMMANDS"]

Array = npt.NDArray[Any]

_log = logging.getLogger("modewright.cli")

# With --points, numbers of one array: 800 MB, room for 100,000 fields on 1,000 points.
_MOST_NUMBERS = 100_000_000


def _solve(
    service: modewright.Service, options: argparse.Namespace, modes: int, rtol: float | None
) -> modewright.Basis:
    problem = modewright.Problem.load(options.document)
    _log.info("%s: %r", options.document, problem)

    def report(progress: modewright.Progress) -> None:
        _log.info(
            "%s, %.1f s, %d steps of the solver", progress.stage, progress.elapsed_seconds, progress.steps
        )

    basis = service.solve(problem, modes, rtol=rtol, progress=report if options.verbose else None)
    _log.info("basis %s, %d modes", basis.key, len(basis.eigenvalues))
    for remark in basis.remarks:
        _log.warning("%s", remark)
    return basis


def _about(command: str, options: argparse.Namespace, basis: modewright.Basis) -> dict[str, Any]:
    """The part of a summary that every command on a basis shares."""
    return {
        "command": command,
        "document": str(options.document),
        "problem_digest": basis.problem_digest,
        "basis_key": basis.key,
        "rtol": basis.rtol,
        "modes": len(basis.eigenvalues),
    }


def check(options: argparse.Namespace) -> dict[str, Any]:
    """Validate a document; nothing is solved."""
    problem = modewright.Problem.load(options.document)
    with modewright.connect(options.service, timeout=options.timeout) as service:
        answer = service.check(problem, modes=options.modes, rtol=options.rtol)
    return {"command": "check", "document": str(options.document), "valid": True, **asdict(answer)}


def solve(options: argparse.Namespace) -> dict[str, Any]:
    """Solve; write eigenvalues, bounds and zeros, and the modes on points if asked."""
    target = options.output
    if options.points is not None and (target is None or target.suffix.lower() != ".npz"):
        raise modewright.InvalidRequest("--points needs --output with a name in .npz")
    _check_numbers(options, options.modes, "modes")
    with modewright.connect(options.service, timeout=options.timeout) as service:
        basis = _solve(service, options, options.modes, options.rtol)
        columns = {
            "eigenvalues": basis.eigenvalues,
            "lower": basis.lower,
            "upper": basis.upper,
            "zeros": basis.zeros,
            "groups": basis.groups,
            "tolerance_met": basis.tolerance_met.astype(np.int64),
        }
        if target is not None and target.suffix.lower() == ".csv":
            write_table(target, ("n", *columns), (np.arange(len(basis.eigenvalues)), *columns.values()))
        elif target is not None:
            arrays: dict[str, npt.ArrayLike] = {
                **columns,
                "basis_key": basis.key,
                "problem_digest": basis.problem_digest,
            }
            if options.points is not None:
                x = _evenly(options)
                arrays |= {"x": x, "modes": basis.modes(x)}
            write_arrays(target, arrays)
        if options.save_basis is not None:
            basis.save(options.save_basis)
    return {
        **_about("solve", options, basis),
        **{name: np.asarray(values).tolist() for name, values in columns.items()},
        "tolerance_met": basis.tolerance_met.tolist(),
        "confirmed": basis.confirmed.tolist(),
        "remarks": list(basis.remarks),
        "scale": basis.scale,
        "answered_from_cache": basis.answered_from_cache,
        "server_solve_count": basis.server_solve_count,
        "solve_seconds": basis.solve_seconds,
        "output": None if target is None else str(target),
    }


def _check_numbers(options: argparse.Namespace, count: int, what: str) -> None:
    """Raises LimitExceeded where so many modes or fields on --points are more than memory is asked for."""
    if options.points is not None and options.points * count > _MOST_NUMBERS:
        message = (
            f"{options.points} points for {count} {what} are {options.points * count} numbers, more than"
            f" {_MOST_NUMBERS}"
        )
        violation = modewright.Violation("--points", message, str(options.points))
        raise modewright.LimitExceeded(reason="LIMIT_EXCEEDED", violations=[violation])


def _evenly(options: argparse.Namespace) -> Array:
    """Equally spaced points over the document's interval, both ends included."""
    start, end = modewright.Problem.load(options.document).domain
    return np.linspace(start, end, options.points)


def _lump(options: argparse.Namespace, side: str, snapshots: Snapshots) -> Array | float | None:
    """A lump's own values: what the option names or says, else what the file has under the usual name."""
    given = getattr(options, f"{side}_lump")
    if isinstance(given, float):
        return given
    if given is not None and given not in snapshots.arrays:
        raise InputFileError(options.snapshots, f"has no array {given!r} for --{side}-lump")
    return snapshots.arrays.get(given or f"{side}_lump")


def project(options: argparse.Namespace) -> dict[str, Any]:
    """Project snapshots or an expression; write coefficients, captured share, residual and norm."""
    keywords: dict[str, Any] = {"details": True}
    values: Any = options.expression
    if options.snapshots is not None:
        snapshots = read_snapshots(options.snapshots, options.values, options.x, options.edges)
        values = snapshots.values
        if not -values.ndim <= options.axis < values.ndim:
            raise InputFileError(
                options.snapshots,
                f"array {options.values!r} of shape {values.shape} has no axis {options.axis}",
            )
        keywords["axis"] = options.axis
        if snapshots.edges is not None:
            keywords["edges"] = snapshots.edges
            keywords["measure"] = options.measure or snapshots.measure
        else:
            keywords["x"] = snapshots.x
        for side in ("left", "right"):
            lump = _lump(options, side, snapshots)
            if lump is not None:
                keywords[f"{side}_lump"] = lump
        if options.interpolation is not None:
            keywords["interpolation"] = options.interpolation
    with modewright.connect(options.service, timeout=options.timeout) as service:
        basis = _solve(service, options, options.modes, options.rtol)
        projection = basis.project(values, **keywords)
    coefficients = np.asarray(projection.coefficients)
    parts = {
        "captured": np.asarray(projection.captured),
        "residual": np.asarray(projection.residual),
        "norm": np.asarray(projection.norm),
    }
    if options.output.suffix.lower() == ".csv":
        flat = coefficients.reshape(-1, coefficients.shape[-1])
        if np.iscomplexobj(flat):
            raise modewright.InvalidRequest("complex coefficients need an output in .npz")
        header = ("snapshot", *parts, *(f"c{n}" for n in range(flat.shape[1])))
        write_table(
            options.output,
            header,
            (np.arange(len(flat)), *(part.ravel() for part in parts.values()), *flat.T),
        )
    else:
        write_arrays(
            options.output,
            {
                "coefficients": coefficients,
                **parts,
                "eigenvalues": basis.eigenvalues,
                "basis_key": basis.key,
                "problem_digest": basis.problem_digest,
                "rtol": float(basis.rtol),
            },
        )
    relative = np.divide(
        parts["residual"], parts["norm"], out=np.zeros(parts["norm"].shape), where=parts["norm"] > 0
    )
    return {
        **_about("project", options, basis),
        "shape": list(coefficients.shape),
        "captured_smallest": float(parts["captured"].min()),
        "relative_residual_largest": float(relative.max()),
        "lumps_extrapolated": bool(np.any(projection.lumps_extrapolated)),
        "output": str(options.output),
    }


def reconstruct(options: argparse.Namespace) -> dict[str, Any]:
    """Reconstruct fields from coefficients on points; the file written is a file of snapshots again."""
    given = read_coefficients(options.coefficients)
    count = given.values.shape[-1]
    modes = options.modes or count
    if modes != count:
        raise InputFileError(
            options.coefficients, f"holds {count} coefficients a snapshot, --modes says {modes}"
        )
    _check_numbers(options, modes, "modes")
    _check_numbers(options, given.values.size // count, "fields")
    points = read_points(options.at) if options.at is not None else _evenly(options)
    with modewright.connect(options.service, timeout=options.timeout) as service:
        basis = _solve(service, options, modes, options.rtol or given.rtol)
        if given.problem_digest and given.problem_digest != basis.problem_digest:
            raise InputFileError(
                options.coefficients,
                f"belongs to problem {given.problem_digest[:16]}..., {options.document} is"
                f" {basis.problem_digest[:16]}...",
            )
        if given.basis_key and given.basis_key != basis.key:
            if not given.problem_digest:
                raise InputFileError(
                    options.coefficients,
                    f"belongs to basis {given.basis_key[:16]}..., this is {basis.key[:16]}..., and without a"
                    " problem_digest nothing says that they are of one problem",
                )
            _log.warning(
                "the coefficients were made with basis %s, this is %s of the same problem",
                given.basis_key,
                basis.key,
            )
        elif not given.basis_key and not given.problem_digest:
            _log.info("the file does not say which problem its coefficients belong to")
        fields = np.asarray(
            basis.reconstruct(given.values, x=points, quantity=options.quantity, side=options.side)
        )
    if options.output.suffix.lower() == ".csv":
        if np.iscomplexobj(fields):
            raise modewright.InvalidRequest("complex fields need an output in .npz")
        flat = fields.reshape(-1, len(points))
        write_table(options.output, ("x", *(f"u{i}" for i in range(len(flat)))), (points, *flat))
    else:
        write_arrays(
            options.output,
            {"x": points, "values": fields, "quantity": options.quantity, "basis_key": basis.key},
        )
    return {
        **_about("reconstruct", options, basis),
        "quantity": options.quantity,
        "shape": list(fields.shape),
        "smallest": _extreme(fields, np.min),
        "largest": _extreme(fields, np.max),
        "output": str(options.output),
    }


def _extreme(fields: Array, of: Callable[..., Any]) -> float | None:
    """Smallest or largest value; of the modulus for complex fields; None where there is none."""
    if not fields.size:
        return None
    return float(of(np.abs(fields) if np.iscomplexobj(fields) else fields))


def demo(options: argparse.Namespace) -> None:
    """The demonstration prints its own tables."""
    from modewright.demo import run_demonstration

    run_demonstration(options.output, options.service, timeout=options.timeout)


COMMANDS: dict[str, Callable[[argparse.Namespace], dict[str, Any] | None]] = {
    "check": check,
    "solve": solve,
    "project": project,
    "reconstruct": reconstruct,
    "demo": demo,
}
