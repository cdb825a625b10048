"""Arrays on the wire: types, orders of bytes and axes, refusals."""

from __future__ import annotations

import datetime
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis.extra import numpy as hnp

from modewright.arrays import field_array, from_message, real_vector, to_message
from modewright.errors import InternalError, InvalidRequest
from modewright.v1 import transforms_pb2 as pb

_VALUES = [[1, 2, 3], [4, 5, 6]]


@pytest.mark.parametrize(
    ("given_type", "sent"),
    [
        ("float16", pb.DTYPE_FLOAT32),
        ("float32", pb.DTYPE_FLOAT32),
        (">f4", pb.DTYPE_FLOAT32),
        ("float64", pb.DTYPE_FLOAT64),
        (">f8", pb.DTYPE_FLOAT64),
        ("longdouble", pb.DTYPE_FLOAT64),
        ("int8", pb.DTYPE_FLOAT64),
        (">i4", pb.DTYPE_FLOAT64),
        ("uint64", pb.DTYPE_FLOAT64),
        ("complex64", pb.DTYPE_COMPLEX128),
        (">c16", pb.DTYPE_COMPLEX128),
    ],
)
def test_numbers_of_every_type_arrive_as_they_are(given_type: str, sent: int) -> None:
    array = np.array(_VALUES, dtype=given_type)
    message = to_message(field_array("values", array))
    assert message.dtype == sent
    assert list(message.shape) == [2, 3]
    back = from_message(message)
    assert back.dtype.isnative
    np.testing.assert_array_equal(back, _VALUES)


def test_the_bytes_are_little_endian_in_c_order() -> None:
    array = np.asfortranarray(np.array([[1.0, 2.0], [3.0, 4.0]], dtype=">f8"))
    message = to_message(field_array("values", array))
    assert message.data == np.array([1.0, 2.0, 3.0, 4.0], dtype="<f8").tobytes()


@settings(deadline=None, derandomize=True)
@given(hnp.arrays(hnp.floating_dtypes(sizes=(32, 64)), hnp.array_shapes(min_dims=0, max_dims=4, min_side=0)))
def test_any_array_comes_back_bit_for_bit(array: np.ndarray[Any, np.dtype[Any]]) -> None:
    native = field_array("values", array)
    back = from_message(pb.Array.FromString(to_message(native).SerializeToString()))
    assert back.shape == native.shape
    assert back.tobytes() == native.tobytes()


@pytest.mark.parametrize("view", [np.s_[::2], np.s_[::-1], np.s_[:, None], np.s_[..., 1]])
def test_views_are_sent_as_they_look(view: Any) -> None:
    array = np.arange(24.0).reshape(4, 6)[view]
    np.testing.assert_array_equal(from_message(to_message(field_array("values", array))), array)


@pytest.mark.parametrize(
    ("values", "reason"),
    [
        (np.array([True, False]), "BAD_DTYPE"),
        (np.array(["a", "b"]), "BAD_DTYPE"),
        (np.array([object(), 1]), "BAD_DTYPE"),
        (np.array([datetime.date(2024, 1, 1)], dtype="datetime64[D]"), "BAD_DTYPE"),
        (np.ma.masked_array([1.0, 2.0], [True, False]), "BAD_DTYPE"),
        ([[1.0], [2.0, 3.0]], "BAD_SHAPE"),
    ],
)
def test_what_is_no_field_is_refused_by_name(values: Any, reason: str) -> None:
    with pytest.raises(InvalidRequest) as caught:
        field_array("values", values)
    assert caught.value.reason == reason
    assert caught.value.violations[0].field == "values"


def test_a_mesh_is_a_real_vector() -> None:
    with pytest.raises(InvalidRequest, match="shape \\(2, 3\\)"):
        real_vector("x", np.array(_VALUES))
    with pytest.raises(InvalidRequest, match="must be real"):
        real_vector("x", [1j, 2.0])


@pytest.mark.parametrize(
    "message",
    [
        pb.Array(data=b"1234567", dtype=pb.DTYPE_FLOAT64, shape=[1]),
        pb.Array(data=bytes(8), dtype=pb.DTYPE_FLOAT64, shape=[2**33, 2**31]),
        pb.Array(data=bytes(8), dtype=pb.DTYPE_UNSPECIFIED, shape=[1]),
    ],
)
def test_an_answer_that_does_not_fit_together_is_an_internal_error(message: pb.Array) -> None:
    with pytest.raises(InternalError):
        from_message(message)
