"""The array codec: messages to NumPy views and back, every size checked before anything is touched."""

from __future__ import annotations

import math
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from modewright.v1 import transforms_pb2 as pb
from modewright_service.core.errors import InvalidRequest, LimitExceeded, Reason

__all__ = ["decode", "decode_axis", "encode", "room_for"]

_DTYPES: Final[dict[int, np.dtype[Any]]] = {
    pb.DTYPE_FLOAT32: np.dtype("<f4"),
    pb.DTYPE_FLOAT64: np.dtype("<f8"),
    pb.DTYPE_COMPLEX128: np.dtype("<c16"),
}
# More axes than this is a damaged message, not data.
_MAX_AXES: Final = 16
_SHOWN_AXES: Final = 8


def decode(array: pb.Array, field: str, *, real: bool = False, finite: bool = True) -> NDArray[Any]:
    """A read-only view of the message's data in its shape.

    field: its path, for errors. real: refuse complex elements. finite: refuse NaN and infinities.
    Raises InvalidRequest: BAD_DTYPE, BAD_SHAPE, BAD_VALUES with the first offending position.
    """
    dtype = _DTYPES.get(array.dtype)
    if dtype is None:
        raise InvalidRequest.at(
            Reason.BAD_DTYPE, f"{field}.dtype", "not a known element type", int(array.dtype)
        )
    if real and dtype.kind == "c":
        raise InvalidRequest.at(Reason.BAD_DTYPE, f"{field}.dtype", "must be real here", "DTYPE_COMPLEX128")
    if len(array.shape) > _MAX_AXES:
        raise InvalidRequest.at(
            Reason.BAD_SHAPE, f"{field}.shape", f"at most {_MAX_AXES} axes", len(array.shape)
        )
    shape = tuple(array.shape)
    # Python's integers: a product of 64-bit lengths must not wrap round to something that fits.
    wanted = math.prod(shape) * dtype.itemsize
    if wanted != len(array.data):
        raise InvalidRequest.at(
            Reason.BAD_SHAPE,
            f"{field}.shape",
            f"shape {_shape_text(shape)} needs {wanted} bytes of {dtype.name}",
            f"{len(array.data)} bytes",
        )
    values: NDArray[Any] = np.frombuffer(array.data, dtype=dtype).reshape(shape)
    if finite and values.size and not np.isfinite(values).all():
        flat = int(np.argmin(np.isfinite(values)))
        place = ", ".join(str(int(i)) for i in np.unravel_index(flat, shape)) if shape else ""
        raise InvalidRequest.at(
            Reason.BAD_VALUES, f"{field}[{place}]", "must be finite", str(values.reshape(-1)[flat])
        )
    return values


def decode_axis(array: pb.Array, field: str, *, least: int, finite: bool = True) -> NDArray[np.float64]:
    """Coordinates: one axis, float64 (or float32, widened), at least `least` of them.

    Raises InvalidRequest as `decode` does, and BAD_SHAPE for another number of axes or too few entries.
    """
    values = decode(array, field, real=True, finite=finite)
    if values.ndim != 1 or values.size < least:
        raise InvalidRequest.at(
            Reason.BAD_SHAPE,
            f"{field}.shape",
            f"must be one axis with at least {least} entries",
            _shape_text(values.shape),
        )
    return values.astype(np.float64)


def encode(values: NDArray[Any]) -> pb.Array:
    """An Array message of float64 or complex128 values (float32 stays as it is)."""
    number = pb.DTYPE_COMPLEX128 if values.dtype.kind == "c" else pb.DTYPE_FLOAT64
    if values.dtype == _DTYPES[pb.DTYPE_FLOAT32]:
        number = pb.DTYPE_FLOAT32
    data = np.ascontiguousarray(values, dtype=_DTYPES[number])
    return pb.Array(data=data.tobytes(), dtype=number, shape=values.shape)


def room_for(entries: int, itemsize: int, limit: int, field: str) -> None:
    """Refuse an answer that would not fit a message, before it is computed. Raises LimitExceeded."""
    size = entries * itemsize
    if size > limit:
        raise LimitExceeded.at(
            Reason.LIMIT_EXCEEDED,
            field,
            f"the answer would pass a message's limit ({limit} bytes): send fewer fields or points a call",
            f"{size} bytes",
            limit=limit,
            requested=size,
        )


def _shape_text(shape: tuple[int, ...]) -> str:
    more = ", ..." if len(shape) > _SHOWN_AXES else ""
    return "(" + ", ".join(map(str, shape[:_SHOWN_AXES])) + more + ")"
