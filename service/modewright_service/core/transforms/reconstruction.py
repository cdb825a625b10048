"""Reconstruction: fields and their derivatives and fluxes at points, from coefficients."""

from __future__ import annotations

from typing import Any, get_args

import numpy as np
from numpy.typing import ArrayLike, NDArray

from modewright.pieces import OutsideDomain, Pieces, Quantity, Side
from modewright.record import Record
from modewright_service.core.errors import InvalidRequest, LimitExceeded, Reason

from .fields import check_finite, numbers

__all__ = ["lump_values", "reconstruct"]

# Bytes of an answer: beyond this the batch has to be cut by whoever asks.
MAX_BYTES = 1024 * 1024 * 1024


def reconstruct(
    record: Record,
    coefficients: ArrayLike,
    x: ArrayLike,
    quantity: str = "value",
    side: str = "right",
) -> NDArray[Any]:
    """sum_n c_n phi_n at the points x, or the like of another quantity.

    coefficients: (..., M), real or complex, of the first M modes, 1 <= M <= N. x: (P,), in any order.
    quantity: "value"; "derivative" d/dx; "flux" p u' along +x, geometry factor included; "flux-density"
    -(p u')/x^g, for heat conduction -k u' per unit area.
    side: which limit counts at an interface, "left" or "right".
    Returns (..., P), float64 or complex128.

    Raises InvalidRequest for wrong shapes or types, points outside the domain, coefficients that are not
    finite.
    """
    c = _coefficients(record, coefficients)
    points = numbers(x, "x")
    if points.dtype.kind == "c":
        raise InvalidRequest.at(Reason.BAD_DTYPE, "x", "points are real numbers", str(points.dtype))
    if points.ndim != 1:
        raise InvalidRequest.at(Reason.BAD_SHAPE, "x", "points have one axis", str(points.shape))
    for field, value, kind in (("quantity", quantity, Quantity), ("side", side, Side)):
        if value not in get_args(kind):
            message = f"unknown; one of {', '.join(get_args(kind))}"
            raise InvalidRequest.at(Reason.BAD_VALUES, field, message, str(value))
    size = int(np.prod(c.shape[:-1], dtype=np.int64)) * points.size * c.itemsize
    if size > MAX_BYTES:
        message = f"the answer would have {size} bytes, {MAX_BYTES} at most"
        raise LimitExceeded.at(Reason.LIMIT_EXCEEDED, "x", message, points.size)
    try:
        return Pieces(record).combine(c, points, quantity, side)  # type: ignore[arg-type]
    except OutsideDomain as error:
        finite = np.isfinite(error.value)
        raise InvalidRequest.at(
            Reason.MESH_OUTSIDE_DOMAIN if finite else Reason.NOT_FINITE,
            f"x[{error.index}]",
            f"outside the domain [{error.start!r}, {error.end!r}]" if finite else "not finite",
            error.value,
            start=error.start,
            end=error.end,
        ) from None


def lump_values(record: Record, coefficients: ArrayLike) -> tuple[NDArray[Any] | None, NDArray[Any] | None]:
    """(...) values of the left and of the right lump for coefficients (..., M); None where there is no lump.

    Raises InvalidRequest as `reconstruct` does.
    """
    c = _coefficients(record, coefficients)
    left, right = (
        c @ modes[: c.shape[-1]] if modes.size else None for modes in (record.left_lump, record.right_lump)
    )
    return left, right


def _coefficients(record: Record, coefficients: ArrayLike) -> NDArray[Any]:
    c = numbers(coefficients, "coefficients")
    if c.ndim == 0 or not 1 <= c.shape[-1] <= record.count:
        message = f"the last axis must have 1 to {record.count} coefficients, one for each mode"
        raise InvalidRequest.at(Reason.BAD_SHAPE, "coefficients", message, str(c.shape))
    if c.size:
        check_finite(c.reshape(-1, c.shape[-1]), 0, c.shape[:-1], "coefficients")
    return c.astype(np.complex128 if c.dtype.kind == "c" else np.float64, copy=False)
