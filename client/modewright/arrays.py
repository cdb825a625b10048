"""Between NumPy arrays and the contract's Array message: bytes in C order, little-endian, a dtype, a shape.

float32, float64 and complex128 travel as they are. float16 becomes float32, integers and long doubles
float64, complex64 complex128; foreign byte orders and strides are put right. Booleans, text, dates, objects
and masked arrays are refused with BAD_DTYPE, since no reading of them as samples of a field is obvious.
"""

from __future__ import annotations

from math import prod
from typing import Any, NoReturn

import numpy as np
from numpy.typing import ArrayLike, NDArray

from modewright.errors import InternalError, InvalidRequest, Violation
from modewright.v1 import transforms_pb2 as pb

__all__ = ["field_array", "from_message", "real_vector", "refuse", "to_message"]

_DTYPES: dict[pb.Dtype, np.dtype[Any]] = {
    pb.DTYPE_FLOAT32: np.dtype("<f4"),
    pb.DTYPE_FLOAT64: np.dtype("<f8"),
    pb.DTYPE_COMPLEX128: np.dtype("<c16"),
}
_NUMBERS = {dtype: number for number, dtype in _DTYPES.items()}


def refuse(field: str, message: str, number: object = "", *, reason: str) -> NoReturn:
    """Raises InvalidRequest about one field."""
    raise InvalidRequest(reason=reason, violations=[Violation(field, message, str(number))])


def field_array(name: str, values: ArrayLike) -> NDArray[Any]:
    """The values as a native array of one of the three dtypes that travel; `name` is for errors.

    Raises InvalidRequest (BAD_DTYPE, BAD_SHAPE for ragged lists).
    """
    if isinstance(values, np.ma.MaskedArray):
        refuse(name, "is a masked array; fill or drop the masked entries first", reason="BAD_DTYPE")
    try:
        array = np.asarray(values)
    except ValueError:
        refuse(name, "is not rectangular", reason="BAD_SHAPE")
    kind, size = array.dtype.kind, array.dtype.itemsize
    if kind == "c":
        return array.astype(np.complex128, copy=False)
    if kind == "f" and size <= 4:
        return array.astype(np.float32, copy=False)
    if kind in "iuf":
        return array.astype(np.float64, copy=False)
    return refuse(name, f"has elements of type {array.dtype}, which are no numbers", reason="BAD_DTYPE")


def real_vector(name: str, values: ArrayLike) -> NDArray[np.float64]:
    """The values as a float64 vector. Raises InvalidRequest."""
    array = field_array(name, values)
    if array.dtype.kind == "c":
        refuse(name, "must be real", reason="BAD_DTYPE")
    if array.ndim != 1:
        refuse(name, f"must have one axis, has shape {array.shape}", reason="BAD_SHAPE")
    return array.astype(np.float64, copy=False)


def to_message(array: NDArray[Any]) -> pb.Array:
    """The message of an array that `field_array` or `real_vector` made."""
    little = array.astype(array.dtype.newbyteorder("<"), copy=False)
    return pb.Array(data=little.tobytes(order="C"), dtype=_NUMBERS[little.dtype], shape=array.shape)


def from_message(message: pb.Array) -> NDArray[Any]:
    """A fresh native array. Raises InternalError for a message whose parts do not fit together."""
    dtype = _DTYPES.get(message.dtype)
    shape = tuple(message.shape)
    if dtype is None:
        raise InternalError(f"an array of the answer has the unknown dtype {message.dtype}")
    if len(message.data) != prod(shape) * dtype.itemsize:
        raise InternalError(f"an array of the answer has {len(message.data)} bytes for shape {shape}")
    stored = np.frombuffer(message.data, dtype=dtype).reshape(shape)
    return stored.astype(dtype.newbyteorder("="), copy=True)
