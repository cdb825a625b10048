"""Moving fields: requests of Project and Reconstruct, their split into calls of moderate size, and
FetchBasis.

A batch is laid out as rows (fields) by columns (samples or modes). Calls carry about 1 MiB of rows at most
in either
direction: larger ones cost more time than they save, and messages are limited to 8 MiB. What can be checked
without the problem - types, shapes, finite values - is checked here, so that an error names the caller's
own index.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, TypeVar, cast

import numpy as np
from numpy.typing import ArrayLike, NDArray

from modewright import arrays, errors
from modewright.arrays import field_array, real_vector, refuse, to_message
from modewright.checks import choice_list, quote
from modewright.document.messages import number_of
from modewright.pieces import QUANTITIES, OutsideDomain, Quantity, Side
from modewright.v1 import solve_pb2
from modewright.v1 import transforms_pb2 as pb

if TYPE_CHECKING:
    from modewright.basis import Basis

__all__ = ["Projection", "fetch", "field_of", "project", "reconstruct"]

T = TypeVar("T")

# Bytes of rows in one call, either way.
CALL_BYTES = 1024 * 1024

_SIDES = ("right", "left")
_MEASURES = ("length", "cylindrical", "spherical", "weight")
_INTERPOLATIONS = ("cubic", "linear")
_CELL_INTERPOLATIONS = ("conservative", "constant")


@dataclass(frozen=True)
class Projection:
    """Coefficients and what they leave out; (...) are the axes of the fields.

    coefficients: (..., N). captured: (...) sum of |c_n|**2 over <f, f>. norm: (...) square root of <f, f>.
    residual: (...) norm of f - sum of c_n phi_n, integrated from the difference itself, lumps included.
    lumps_extrapolated: for the left and the right end, whether the field's end value stood in for the
    lump's own.
    key: of the basis.
    """

    coefficients: NDArray[Any]
    captured: NDArray[np.float64]
    residual: NDArray[np.float64]
    norm: NDArray[np.float64]
    lumps_extrapolated: tuple[bool, bool]
    key: str


@dataclass(frozen=True)
class Field:
    """What is projected: rows (fields, samples) with the mesh, or an expression; lump values by row."""

    batch: tuple[int, ...]
    rows: NDArray[Any] | None
    mesh: pb.Mesh | None
    expression: str
    lumps: dict[str, NDArray[Any]]


# ---- checks of arguments ----


def real_array(name: str, values: ArrayLike) -> NDArray[np.float64]:
    """Real numbers of any shape as float64. Raises InvalidRequest."""
    array = field_array(name, values)
    if array.dtype.kind == "c":
        refuse(name, "must be real", reason="BAD_DTYPE")
    return array.astype(np.float64, copy=False)


def words(quantity: str, side: str) -> tuple[Quantity, Side]:
    """The two words checked. Raises InvalidRequest."""
    known("quantity", quantity, QUANTITIES)
    known("side", side, _SIDES)
    return cast("Quantity", quantity), cast("Side", side)


def known(name: str, word: object, among: tuple[str, ...]) -> None:
    """Raises InvalidRequest unless the word is among those."""
    if word not in among:
        refuse(name, f"must be {choice_list(among)}, not {quote(word)}", reason="UNKNOWN_OPTION")


def locally(name: str, evaluate: Callable[[], T]) -> T:
    """What `evaluate` returns; a point outside the domain becomes an InvalidRequest about `name`."""
    try:
        return evaluate()
    except OutsideDomain as error:
        message = f"is outside the domain [{error.start!r}, {error.end!r}]"
        refuse(f"{name}[{error.index}]", message, repr(error.value), reason="MESH_OUTSIDE_DOMAIN")


def _finite(name: str, array: NDArray[Any]) -> None:
    good = np.isfinite(array)
    if not good.all():
        place = np.unravel_index(int(np.argmin(good)), array.shape)
        index = ", ".join(str(int(i)) for i in place)
        refuse(f"{name}[{index}]", "must be finite", array[place], reason="BAD_VALUES")


def _last_axis(name: str, array: NDArray[Any], axis: int) -> NDArray[Any]:
    """The array with its `axis` moved last."""
    if isinstance(axis, bool) or not hasattr(axis, "__index__"):
        refuse("axis", f"must be a whole number, not {quote(axis)}", reason="BAD_SHAPE")
    if not -array.ndim <= axis < array.ndim:
        refuse("axis", f"is not an axis of {name}, which has shape {array.shape}", axis, reason="BAD_SHAPE")
    return np.moveaxis(array, axis, -1)


def field_of(
    values: ArrayLike | str,
    x: ArrayLike | None,
    edges: ArrayLike | None,
    measure: str | None,
    interpolation: str | None,
    axis: int,
    left_lump: ArrayLike | None,
    right_lump: ArrayLike | None,
) -> Field:
    """The arguments of `Basis.project` checked and brought into rows. Raises InvalidRequest."""
    lumps = {"left_lump": left_lump, "right_lump": right_lump}
    if isinstance(values, str):
        others = {"x": x, "edges": edges, "measure": measure, "interpolation": interpolation}
        for name, given in others.items():
            if given is not None:
                refuse(name, "does not belong to an expression", reason="BAD_REQUEST")
        return Field((), None, None, values, _lumps(lumps, ()))
    array = field_array("values", values)
    if array.ndim == 0:
        refuse("values", "needs at least one axis", reason="BAD_SHAPE")
    mesh, samples = _mesh(x, edges, measure, interpolation)
    _finite("values", array)
    moved = _last_axis("values", array, axis)
    if moved.shape[-1] != samples:
        kind = "points of x" if edges is None else "cells between edges"
        message = f"has {moved.shape[-1]} samples on axis {axis} for {samples} {kind}"
        refuse("values", message, str(array.shape), reason="BAD_SHAPE")
    batch = moved.shape[:-1]
    return Field(batch, moved.reshape(-1, samples), mesh, "", _lumps(lumps, batch))


def _mesh(
    x: ArrayLike | None, edges: ArrayLike | None, measure: str | None, interpolation: str | None
) -> tuple[pb.Mesh, int]:
    """The mesh message and its number of samples."""
    if (x is None) == (edges is None):
        refuse("x", "needs either x (point values) or edges (cell averages)", reason="BAD_REQUEST")
    if edges is None:
        assert x is not None
        if measure is not None:
            refuse("measure", "belongs to cell averages, which need edges", reason="BAD_REQUEST")
        points = real_vector("x", x)
        _finite("x", points)
        if points.size < 2:
            refuse("x", "needs at least two entries", points.size, reason="BAD_MESH")
        message = pb.PointMesh(x=to_message(points))
        if interpolation is not None:
            known("interpolation", interpolation, _INTERPOLATIONS)
            number = number_of(pb.PointInterpolation, "POINT_INTERPOLATION", interpolation)
            message.interpolation = number
        return pb.Mesh(points=message), points.size
    cells = real_vector("edges", edges)
    _finite("edges", cells)
    if cells.size < 2:
        refuse("edges", "needs at least two entries", cells.size, reason="BAD_SHAPE")
    cell_message = pb.CellMesh(edges=to_message(cells))
    if measure is not None:
        known("measure", measure, _MEASURES)
        cell_message.measure = number_of(pb.CellMeasure, "CELL_MEASURE", measure)
    if interpolation is not None:
        known("interpolation", interpolation, _CELL_INTERPOLATIONS)
        number = number_of(pb.CellReconstruction, "CELL_RECONSTRUCTION", interpolation)
        cell_message.reconstruction = number
    return pb.Mesh(cells=cell_message), cells.size - 1


def _lumps(given: dict[str, ArrayLike | None], batch: tuple[int, ...]) -> dict[str, NDArray[Any]]:
    """The lump values, one for each row."""
    rows = {}
    for name, values in given.items():
        if values is None:
            continue
        array = field_array(name, values)
        _finite(name, array)
        try:
            rows[name] = np.broadcast_to(array, batch).reshape(-1)
        except ValueError:
            refuse(name, f"has shape {array.shape} for fields of shape {batch}", reason="BAD_SHAPE")
    return rows


# ---- calls ----


class _Calls:
    """The calls of one operation on a basis, within one time limit."""

    def __init__(self, basis: Basis, method: str, timeout: float | None, names: dict[str, str]) -> None:
        if basis.service is None:
            raise errors.InvalidRequest(
                "this basis was loaded without a service: load_basis(path, service=...) gives it one",
                reason="BAD_REQUEST",
            )
        self.service = basis.service
        self.basis = basis
        self.method = method
        self.names = names
        self.limit = self.service.time_limit(method, timeout)
        self.deadline = time.monotonic() + self.limit

    def left(self) -> float:
        """Seconds left. Raises DeadlineExceeded when there are none."""
        left = self.deadline - time.monotonic()
        if left <= 0.0:
            message = f"{self.method} took longer than {self.limit:g} s"
            raise errors.DeadlineExceeded(message, reason="DEADLINE")
        return left

    def unary(self, request: Any) -> Any:
        """One call: by the basis's key, and with the whole problem where the service does not hold it."""
        request.basis.CopyFrom(self.basis.reference())

        def whole() -> Any:
            request.basis.CopyFrom(self.basis.reference(whole=True))
            return request

        answer = self.service.unary(
            self.method,
            request,
            self.basis.problem,
            resend=whole if self.basis.problem is not None else None,
            rename=self._rename,
            timeout=self.left(),
        )
        if answer.basis_key != self.basis.key:
            raise errors.InternalError(f"asked for basis {self.basis.key}, answered for {answer.basis_key}")
        return answer

    def _rename(self, path: str) -> str:
        """The caller's argument for a field of the request."""
        for field, argument in self.names.items():
            if path == field or path.startswith((f"{field}[", f"{field}.")):
                return argument + path.removeprefix(field).removeprefix(".shape").removeprefix(".dtype")
        return path


def _slices(total: int, size: int) -> Iterator[slice]:
    for start in range(0, total, size):
        yield slice(start, min(start + size, total))


def _rows_per_call(*bytes_per_row: int) -> int:
    return max(1, CALL_BYTES // max(1, *bytes_per_row))


_PROJECT_NAMES = {
    "sampled.values": "values",
    "sampled.mesh.points.x": "x",
    "sampled.mesh.cells.edges": "edges",
    "sampled.mesh.cells.measure": "measure",
    "sampled.mesh.points.interpolation": "interpolation",
    "sampled.mesh.cells.reconstruction": "interpolation",
    "sampled.mesh": "x",
    "sampled.axis": "axis",
}


def project(basis: Basis, field: Field, *, details: bool, timeout: float | None) -> Any:
    """Coefficients of a field's rows, in calls of moderate size."""
    calls = _Calls(basis, "Project", timeout, _PROJECT_NAMES)
    if field.rows is None:
        request = pb.ProjectRequest(expression=field.expression)
        answers = [_project(calls, request, field, slice(0, 1), scalar=True)]
    else:
        per_row = (field.rows.shape[1] * field.rows.itemsize, basis.count * field.rows.itemsize)
        # A batch of no fields still goes out once, for the checks and the type of the answer.
        parts = list(_slices(field.rows.shape[0], _rows_per_call(*per_row))) or [slice(0, 0)]
        answers = []
        for part in parts:
            sampled = pb.SampledField(values=to_message(field.rows[part]), mesh=field.mesh)
            answers.append(_project(calls, pb.ProjectRequest(sampled=sampled), field, part))

    def joined(name: str) -> NDArray[Any]:
        return np.concatenate([np.atleast_1d(arrays.from_message(getattr(a, name))) for a in answers])

    count = basis.count
    coefficients = joined("coefficients").reshape((*field.batch, count))
    if not details:
        return coefficients
    return Projection(
        coefficients=coefficients,
        captured=joined("captured").reshape(field.batch)[()],
        residual=np.sqrt(joined("residual2")).reshape(field.batch)[()],
        norm=np.sqrt(joined("norm2")).reshape(field.batch)[()],
        lumps_extrapolated=(
            any(answer.left_lump_extrapolated for answer in answers),
            any(answer.right_lump_extrapolated for answer in answers),
        ),
        key=basis.key,
    )


def _project(
    calls: _Calls, request: pb.ProjectRequest, field: Field, part: slice, scalar: bool = False
) -> Any:
    for name, values in field.lumps.items():
        chosen = values[0] if scalar else values[part]
        getattr(request, name).CopyFrom(to_message(np.asarray(chosen)))
    return calls.unary(request)


def reconstruct(
    basis: Basis,
    coefficients: ArrayLike,
    x: ArrayLike,
    quantity: str,
    side: str,
    axis: int,
    timeout: float | None,
) -> NDArray[Any]:
    """Fields from coefficients: by the service, or here for a basis that was loaded without one."""
    checked = words(quantity, side)
    points = real_array("x", x)
    if points.ndim > 1:
        refuse("x", f"must have one axis or be a number, has shape {points.shape}", reason="BAD_SHAPE")
    _finite("x", points)
    array = field_array("coefficients", coefficients)
    if array.ndim == 0:
        refuse("coefficients", "needs at least one axis", reason="BAD_SHAPE")
    _finite("coefficients", array)
    moved = _last_axis("coefficients", array, axis)
    modes = moved.shape[-1]
    if not 1 <= modes <= basis.count:
        message = f"has {modes} coefficients on axis {axis} for {basis.count} modes"
        refuse("coefficients", message, str(array.shape), reason="BAD_SHAPE")
    rows = moved.reshape(-1, modes)
    record = basis.local_record
    if basis.service is None and record is not None:
        values = locally("x", lambda: basis.pieces().combine(rows, points.reshape(-1), *checked))
    else:
        values = _reconstruct(basis, rows, points.reshape(-1), quantity, side, timeout)
    return values.reshape(moved.shape[:-1] + points.shape)


def _reconstruct(
    basis: Basis,
    rows: NDArray[Any],
    points: NDArray[np.float64],
    quantity: str,
    side: str,
    timeout: float | None,
) -> NDArray[Any]:
    calls = _Calls(basis, "Reconstruct", timeout, {"coefficients": "coefficients", "points": "x"})
    out = np.empty((rows.shape[0], points.size), np.complex128 if rows.dtype.kind == "c" else np.float64)
    # A single field at very many points is split along the points.
    across = _rows_per_call(out.itemsize)
    for columns in _slices(points.size, across):
        width = (columns.stop - columns.start) * out.itemsize
        for part in _slices(rows.shape[0], _rows_per_call(rows.shape[1] * rows.itemsize, width)):
            request = pb.ReconstructRequest(
                coefficients=to_message(rows[part]),
                points=to_message(points[columns]),
                quantity=number_of(pb.Quantity, "QUANTITY", quantity),
                side=number_of(pb.Side, "SIDE", side),
            )
            out[part, columns] = arrays.from_message(calls.unary(request).values)
    return out


def fetch(basis: Basis, timeout: float | None) -> bytes:
    """The basis's record as bytes; a broken transfer goes on where it broke."""
    calls = _Calls(basis, "FetchBasis", timeout, {})
    received = bytearray()

    def request(whole: bool = False) -> solve_pb2.FetchBasisRequest:
        return solve_pb2.FetchBasisRequest(basis=basis.reference(whole=whole), offset=len(received))

    def consume(parts: Iterator[solve_pb2.FetchBasisResponse]) -> bytes:
        total = None
        for part in parts:
            total = part.total_size
            if part.basis_key != basis.key or part.offset != len(received):
                asked, got = f"{len(received)} of basis {basis.key}", f"{part.offset} of {part.basis_key}"
                raise errors.InternalError(f"asked for byte {asked}, got byte {got}")
            received.extend(part.data)
        if total is None or len(received) != total:
            raise errors.InternalError(f"the basis ended after {len(received)} of {total} bytes")
        return bytes(received)

    resend = (lambda: request(whole=True)) if basis.problem is not None else None
    return calls.service.stream(
        "FetchBasis", request, consume, basis.problem, resend=resend, timeout=calls.left()
    )
