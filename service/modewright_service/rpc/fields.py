"""Project and Reconstruct: messages of meshes and fields to the core's transforms and back.

Analysis matrices are built once for a basis, a mesh and a meaning, and kept with the basis; so are the
values of the modes at the points of a reconstruction while they are small. Everything that touches many
numbers runs in a thread.
"""

from __future__ import annotations

import hashlib
import math
from collections.abc import Callable, Mapping
from dataclasses import replace
from typing import TYPE_CHECKING, Any, Final, TypeVar

import numpy as np
from numpy.typing import NDArray

from modewright.v1 import transforms_pb2 as pb
from modewright_service.core.errors import CoreError, InvalidRequest, Reason, Unsupported
from modewright_service.rpc.arrays import decode, decode_axis, encode, room_for
from modewright_service.rpc.convert import API_VERSION
from modewright_service.rpc.desk import Context, Desk
from modewright_service.store.cache import Kept
from modewright_service.store.orders import StopFlag

if TYPE_CHECKING:
    from modewright.record import Record
    from modewright_service.core.transforms import CellMesh, PointMesh, Projection, ProjectionPlan

__all__ = ["project", "reconstruct"]

T = TypeVar("T")

_DRAFT: Final = "is drafted in the contract and not answered by this version"
# Modes at points up to this many numbers are kept and multiplied (8 MB); above it the sum over modes is made
# element by element first, which needs neither the memory nor N times the evaluations.
_KEPT_VALUES: Final = 1 << 20
# The core's names of a projection's arguments, in the request's own names.
_SAMPLED: Final = {
    "values": "sampled.values",
    "x": "sampled.mesh.points.x",
    "edges": "sampled.mesh.cells.edges",
    "measure": "sampled.mesh.cells.measure",
    "interpolation": "sampled.mesh.points.interpolation",
    "reconstruction": "sampled.mesh.cells.reconstruction",
}
_FORMULA: Final = {"values": "expression", "expression": "expression"}
_POINTS: Final = {"x": "points"}

_INTERPOLATIONS: Final = {
    pb.POINT_INTERPOLATION_UNSPECIFIED: "cubic",
    pb.POINT_INTERPOLATION_LINEAR: "linear",
    pb.POINT_INTERPOLATION_CUBIC: "cubic",
}
_MEASURES: Final = {
    pb.CELL_MEASURE_LENGTH: "length",
    pb.CELL_MEASURE_CYLINDRICAL: "cylindrical",
    pb.CELL_MEASURE_SPHERICAL: "spherical",
    pb.CELL_MEASURE_WEIGHT: "weight",
}
_OWN_MEASURE: Final = ("length", "cylindrical", "spherical")
_RECONSTRUCTIONS: Final = {
    pb.CELL_RECONSTRUCTION_UNSPECIFIED: "conservative",
    pb.CELL_RECONSTRUCTION_CONSTANT: "constant",
    pb.CELL_RECONSTRUCTION_CONSERVATIVE: "conservative",
}
_QUANTITIES: Final = {
    pb.QUANTITY_UNSPECIFIED: "value",
    pb.QUANTITY_VALUE: "value",
    pb.QUANTITY_DERIVATIVE: "derivative",
    pb.QUANTITY_FLUX: "flux",
    pb.QUANTITY_FLUX_DENSITY: "flux-density",
}
_SIDES: Final = {pb.SIDE_UNSPECIFIED: "right", pb.SIDE_LEFT: "left", pb.SIDE_RIGHT: "right"}


# ---- projection ----


async def project(desk: Desk, request: pb.ProjectRequest, context: Context) -> pb.ProjectResponse:
    """Coefficients of sampled fields or of an expression; see the contract for what is refused."""
    _project_options(request)
    form = request.WhichOneof("field")
    if form is None:
        raise InvalidRequest.at(Reason.BAD_REQUEST, "field", "needs sampled fields or an expression")
    left, right = (
        decode(getattr(request, name), name) if request.HasField(name) else None
        for name in ("left_lump", "right_lump")
    )
    values = _values(request.sampled) if form == "sampled" else None
    kept, count = await desk.basis(request.basis, context)
    deadline = desk.deadline(context)
    if values is None:

        def formula(poll: StopFlag) -> Projection:
            from modewright_service.core.transforms import project_expression

            record = kept.record.head(count)
            return _renamed(
                _FORMULA, lambda: project_expression(record, request.expression, left, right, poll=poll)
            )

        return _project_response(kept, await desk.run_stoppable(formula, deadline))
    rows = math.prod(values.shape[:-1])
    room_for(
        rows * (count + 3), 16 if values.dtype.kind == "c" else 8, desk.limits.message_bytes, "sampled.values"
    )
    mesh = await desk.run(_mesh, request.sampled.mesh, kept.record)
    if values.shape[-1] != mesh.size:
        text = f"has {values.shape[-1]} samples along its axis for a mesh of {mesh.size}"
        raise InvalidRequest.at(
            Reason.BAD_SHAPE, "sampled.values", text, str(tuple(request.sampled.values.shape))
        )
    plan = await desk.library.operator(
        kept,
        f"analysis/{count}/{mesh.digest()}",
        lambda poll: _plan(kept.record.head(count), mesh, poll),
        lambda plan: plan.nbytes,
    )

    def product(poll: StopFlag) -> Projection:
        return _renamed(_SAMPLED, lambda: plan.apply(values, left, right, poll=poll))

    return _project_response(kept, await desk.run_stoppable(product, deadline))


def _project_options(request: pb.ProjectRequest) -> None:
    if request.method not in (pb.PROJECTION_METHOD_UNSPECIFIED, pb.PROJECTION_METHOD_INTEGRATE):
        raise _unanswered("method", request.method, pb.PROJECTION_METHOD_FIT)
    _family(request.family)
    if request.further_axes:
        raise _unanswered("further_axes", 0, 0, str(len(request.further_axes)))


def _values(sampled: pb.SampledField) -> NDArray[Any]:
    """The samples with the coordinate's axis moved last. NaN for gaps is a draft: refused as not finite."""
    values = decode(sampled.values, "sampled.values")
    axis = sampled.axis if sampled.HasField("axis") else -1
    if not -values.ndim <= axis < values.ndim:
        text = f"is not an axis of values with {values.ndim} axes"
        raise InvalidRequest.at(Reason.BAD_SHAPE, "sampled.axis", text, axis)
    return np.moveaxis(values, axis, -1)


def _mesh(message: pb.Mesh, record: Record) -> PointMesh | CellMesh:
    """The core's mesh; runs in a thread, since a mesh may have a million points."""
    from modewright_service.core.transforms import CellMesh, Interpolation, Measure, PointMesh, Reconstruction

    prefix = "sampled.mesh"
    meaning = message.WhichOneof("meaning")
    if meaning == "points":
        points = message.points
        name = _chosen(_INTERPOLATIONS, points.interpolation, f"{prefix}.points.interpolation")
        x = decode_axis(points.x, f"{prefix}.points.x", least=2)
        return _renamed(_SAMPLED, lambda: PointMesh(x, Interpolation(name)))
    if meaning == "cells":
        cells = message.cells
        measures = {pb.CELL_MEASURE_UNSPECIFIED: _OWN_MEASURE[record.geometry], **_MEASURES}
        measure = _chosen(measures, cells.measure, f"{prefix}.cells.measure")
        inside = _chosen(_RECONSTRUCTIONS, cells.reconstruction, f"{prefix}.cells.reconstruction")
        edges = decode_axis(cells.edges, f"{prefix}.cells.edges", least=2)
        return _renamed(_SAMPLED, lambda: CellMesh(edges, Measure(measure), Reconstruction(inside)))
    if meaning == "elements":
        raise Unsupported.at(Reason.UNSUPPORTED_OPTION, f"{prefix}.elements", _DRAFT)
    raise InvalidRequest.at(Reason.BAD_REQUEST, prefix, "needs points or cells")


def _plan(record: Record, mesh: PointMesh | CellMesh, poll: StopFlag) -> ProjectionPlan:
    from modewright_service.core.transforms import plan_projection

    return _renamed(_SAMPLED, lambda: plan_projection(record, mesh, poll=poll))


def _project_response(kept: Kept, projection: Projection) -> pb.ProjectResponse:
    response = pb.ProjectResponse(
        basis_key=kept.key,
        coefficients=encode(projection.coefficients),
        left_lump_extrapolated=projection.left_lump_extrapolated,
        right_lump_extrapolated=projection.right_lump_extrapolated,
        algorithm_version=kept.record.algorithm_version,
        api_version=API_VERSION,
    )
    for name in ("captured", "norm2", "residual2"):
        values = getattr(projection, name)
        if values is not None:
            getattr(response, name).CopyFrom(encode(np.asarray(values)))
    return response


# ---- reconstruction ----


async def reconstruct(desk: Desk, request: pb.ReconstructRequest, context: Context) -> pb.ReconstructResponse:
    """Fields at points; see the contract for what is refused."""
    _family(request.family)
    if request.filter not in (pb.SUMMATION_FILTER_UNSPECIFIED, pb.SUMMATION_FILTER_NONE):
        raise _unanswered("filter", request.filter, pb.SUMMATION_FILTER_EXPONENTIAL)
    target = request.WhichOneof("target")
    if target == "cells":
        raise Unsupported.at(Reason.UNSUPPORTED_OPTION, "cells", _DRAFT)
    if target is None:
        raise InvalidRequest.at(Reason.BAD_REQUEST, "points", "is missing")
    quantity = _chosen(_QUANTITIES, request.quantity, "quantity")
    side = _chosen(_SIDES, request.side, "side")
    coefficients = decode(request.coefficients, "coefficients")
    points = decode_axis(request.points, "points", least=0)
    kept, count = await desk.basis(request.basis, context)
    if coefficients.ndim == 0 or not 1 <= coefficients.shape[-1] <= count:
        text = f"the last axis must have 1 to {count} coefficients, one for each mode"
        raise InvalidRequest.at(Reason.BAD_SHAPE, "coefficients", text, str(coefficients.shape))
    room_for(
        math.prod(coefficients.shape[:-1]) * (points.size + 2),
        16 if coefficients.dtype.kind == "c" else 8,
        desk.limits.message_bytes,
        "points",
    )
    record = kept.record.head(coefficients.shape[-1])
    matrix: NDArray[Any] | None = None
    if 0 < record.count * points.size <= _KEPT_VALUES:
        meaning = f"synthesis/{record.count}/{quantity}/{side}/{hashlib.sha256(points.tobytes()).hexdigest()}"
        matrix = await desk.library.operator(
            kept,
            meaning,
            lambda _: _combined(record, np.eye(record.count), points, quantity, side),
            _nbytes,
        )

    def work() -> pb.ReconstructResponse:
        return _reconstruct_response(kept, record, coefficients, points, quantity, side, matrix)

    return await desk.run(work)


def _nbytes(values: NDArray[Any]) -> int:
    return values.nbytes


def _combined(
    record: Record, coefficients: NDArray[Any], points: NDArray[np.float64], quantity: str, side: str
) -> NDArray[Any]:
    from modewright_service.core import transforms

    return _renamed(_POINTS, lambda: transforms.reconstruct(record, coefficients, points, quantity, side))


def _reconstruct_response(
    kept: Kept,
    record: Record,
    coefficients: NDArray[Any],
    points: NDArray[np.float64],
    quantity: str,
    side: str,
    matrix: NDArray[np.float64] | None,
) -> pb.ReconstructResponse:
    from modewright_service.core.transforms import lump_values

    wide = coefficients.astype(np.complex128 if coefficients.dtype.kind == "c" else np.float64, copy=False)
    if matrix is not None:
        values = wide @ matrix
    else:
        values = _combined(record, wide, points, quantity, side)
    response = pb.ReconstructResponse(
        basis_key=kept.key,
        values=encode(values),
        algorithm_version=kept.record.algorithm_version,
        api_version=API_VERSION,
    )
    for name, lump in zip(("left_lump", "right_lump"), lump_values(record, wide), strict=True):
        if lump is not None:
            getattr(response, name).CopyFrom(encode(np.asarray(lump)))
    return response


# ---- both ----


def _family(family: int) -> None:
    if family not in (pb.MODE_FAMILY_UNSPECIFIED, pb.MODE_FAMILY_MODES):
        raise _unanswered("family", family, pb.MODE_FAMILY_FLUX)


def _unanswered(field: str, value: int, last_known: int, shown: str = "") -> CoreError:
    """What an option gets that is drafted, or not in the contract at all."""
    if value > last_known:
        return InvalidRequest.at(Reason.UNKNOWN_OPTION, field, "not a known option", int(value))
    return Unsupported.at(Reason.UNSUPPORTED_OPTION, field, _DRAFT, shown or int(value))


def _chosen(choices: Mapping[Any, str], value: int, field: str) -> str:
    chosen = choices.get(value)
    if chosen is None:
        raise InvalidRequest.at(Reason.UNKNOWN_OPTION, field, "not a known option", int(value))
    return chosen


def _renamed(names: Mapping[str, str], work: Callable[[], T]) -> T:
    """What `work` returns; fields in the errors it raises get the request's names."""
    try:
        return work()
    except CoreError as error:
        renamed = []
        for violation in error.violations:
            head = violation.field.split("[")[0].split(".")[0]
            field = names.get(head, head) + violation.field.removeprefix(head)
            renamed.append(replace(violation, field=field))
        raise type(error)(error.reason, error.message, renamed, error.metadata) from None
