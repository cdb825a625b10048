"""The array codec: exact round trips, and every wrong size refused before the bytes are touched."""

from __future__ import annotations

import numpy as np
import pytest

from modewright.v1 import transforms_pb2 as pb
from modewright_service.core.errors import CoreError, InvalidRequest, LimitExceeded, Reason
from modewright_service.rpc.arrays import decode, decode_axis, encode, room_for


@pytest.mark.parametrize("dtype", ["<f4", "<f8", "<c16"])
@pytest.mark.parametrize("shape", [(), (0,), (7,), (2, 3), (2, 0, 4)])
def test_round_trip(dtype: str, shape: tuple[int, ...]) -> None:
    values = np.random.default_rng(1).normal(size=shape).astype(dtype)
    back = decode(encode(values), "f")
    assert back.dtype == np.dtype(dtype)
    assert back.shape == shape
    np.testing.assert_array_equal(back, values)


def test_strides_and_byte_order_are_put_right() -> None:
    values = np.arange(12.0).reshape(3, 4).T.astype(">f8")
    message = encode(values)
    assert np.frombuffer(message.data, "<f8").tolist() == values.ravel().tolist()
    np.testing.assert_array_equal(decode(message, "f"), values)


@pytest.mark.parametrize(
    ("message", "reason", "field", "number"),
    [
        (pb.Array(data=bytes(8), dtype=0, shape=[1]), Reason.BAD_DTYPE, "f.dtype", "0"),
        (pb.Array(data=bytes(8), dtype=77, shape=[1]), Reason.BAD_DTYPE, "f.dtype", "77"),
        (pb.Array(data=bytes(8), dtype=2, shape=[2]), Reason.BAD_SHAPE, "f.shape", "8 bytes"),
        (pb.Array(data=bytes(9), dtype=2, shape=[1]), Reason.BAD_SHAPE, "f.shape", "9 bytes"),
        # 2**32 * 2**32 * 8 is 0 in 64-bit arithmetic.
        (pb.Array(data=b"", dtype=2, shape=[2**32, 2**32]), Reason.BAD_SHAPE, "f.shape", "0 bytes"),
        (pb.Array(data=bytes(8), dtype=2, shape=[1] * 40), Reason.BAD_SHAPE, "f.shape", "40"),
        (encode(np.array([[1.0, 2.0], [np.nan, 4.0]])), Reason.BAD_VALUES, "f[1, 0]", "nan"),
        (encode(np.array([1.0, -np.inf])), Reason.BAD_VALUES, "f[1]", "-inf"),
    ],
)
def test_refused(message: pb.Array, reason: Reason, field: str, number: str) -> None:
    with pytest.raises(InvalidRequest) as caught:
        decode(message, "f")
    assert caught.value.reason is reason
    assert caught.value.violations[0].field == field
    assert number in str(caught.value)


def test_axes_are_one_dimensional_and_real() -> None:
    assert decode_axis(encode(np.array([1, 2], dtype="<f4")), "x", least=2).dtype == np.float64
    for values, reason in (
        (np.ones((2, 2)), Reason.BAD_SHAPE),
        (np.ones(1), Reason.BAD_SHAPE),
        (np.ones(3) * 1j, Reason.BAD_DTYPE),
    ):
        with pytest.raises(CoreError) as caught:
            decode_axis(encode(values), "x", least=2)
        assert caught.value.reason is reason


def test_an_answer_that_cannot_be_sent_is_not_computed() -> None:
    room_for(128, 8, 1024, "points")
    with pytest.raises(LimitExceeded) as caught:
        room_for(129, 8, 1024, "points")
    assert caught.value.metadata == {"limit": "1024", "requested": "1032"}
