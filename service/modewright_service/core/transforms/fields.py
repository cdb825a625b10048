"""What every projection shares: its result, lumps at the ends, norms integrated on the grid, checks."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any, Final, Protocol

import numpy as np
from numpy.typing import ArrayLike, NDArray

from modewright.record import Record
from modewright_service.core.errors import InvalidRequest, Reason

from .grid import Grid, lump_mass

__all__ = [
    "LARGEST",
    "Collected",
    "Field",
    "Lumps",
    "Poll",
    "Projection",
    "check_finite",
    "no_poll",
    "numbers",
]

Floats = NDArray[np.float64]
Numbers = NDArray[Any]
Poll = Callable[[], None]

_SIDES = ("left", "right")
# Squares and their sums stay clear of overflow.
LARGEST: Final = 1e140


def no_poll() -> None:
    """Nothing to poll."""


@dataclass(frozen=True, eq=False)
class Projection:
    """What came of projecting fields of any batch shape (...).

    coefficients: (..., N), float64 or complex128.
    norm2: (...) ||f||^2. captured: (...) sum |c_n|^2 / ||f||^2, 1 for a field that vanishes.
    residual2: (...) ||f - sum c_n phi_n||^2. All three None where details were not asked for.
    left_lump_extrapolated, right_lump_extrapolated: that end has a lump whose value was not given, and the
        value of the field at the end was taken for it.
    """

    coefficients: NDArray[Any]
    captured: Floats | None
    norm2: Floats | None
    residual2: Floats | None
    left_lump_extrapolated: bool = False
    right_lump_extrapolated: bool = False


class Field(Protocol):
    """Fields of a batch, at the points of a grid."""

    def at(self, grid: Grid, chunk: slice) -> NDArray[Any]:
        """(points, B)."""


@dataclass(frozen=True, eq=False)
class Lumps:
    """The lumps at the two ends: mass (0.0 for none), the modes' values (N,), the values given, flat."""

    masses: tuple[float, float]
    modes: tuple[Floats, Floats]
    given: tuple[Numbers | None, Numbers | None]

    @classmethod
    def of(
        cls, record: Record, left: ArrayLike | None, right: ArrayLike | None, batch: tuple[int, ...]
    ) -> Lumps:
        """Checked against the record and the batch shape; raises InvalidRequest."""
        masses = lump_mass(record, "left"), lump_mass(record, "right")
        given = [
            _lump_values(f"{side}_lump", value, batch, there=bool(modes.size))
            for side, value, modes in zip(
                _SIDES, (left, right), (record.left_lump, record.right_lump), strict=True
            )
        ]
        return cls(masses, (record.left_lump, record.right_lump), (given[0], given[1]))

    @property
    def is_complex(self) -> bool:
        """Whether a value given is complex."""
        return any(np.iscomplexobj(value) for value in self.given if value is not None)

    @property
    def extrapolated(self) -> tuple[bool, bool]:
        """Whether the left and the right lump take the field's value at the end."""
        left, right = (
            modes.size > 0 and value is None for modes, value in zip(self.modes, self.given, strict=True)
        )
        return left, right

    def values(self, rows: slice, ends: Numbers) -> list[Numbers]:
        """(B,) for each end: the value given, or the field's value there, ends (B, 2)."""
        return [end if value is None else value[rows] for value, end in zip(self.given, ends.T, strict=True)]

    def products(self, values: Sequence[Numbers]) -> Numbers | float:
        """(B, N): what the lumps with these values add to the coefficients; 0.0 without lumps."""
        total: Numbers | float = 0.0
        for mass, modes, value in zip(self.masses, self.modes, values, strict=True):
            if mass:
                total = total + mass * np.multiply.outer(value, modes)
        return total

    def norms(
        self, values: Sequence[Numbers], coefficients: Numbers
    ) -> tuple[Floats | float, Floats | float]:
        """What the lumps add to ||f||^2 and to ||f - sum c phi||^2, (B,)."""
        norm2: Floats | float = 0.0
        residual2: Floats | float = 0.0
        for mass, modes, value in zip(self.masses, self.modes, values, strict=True):
            if mass:
                norm2 = norm2 + mass * _squared(value)
                residual2 = residual2 + mass * _squared(value - coefficients @ modes)
        return norm2, residual2


class Collected:
    """Collects the blocks of a batch, flat, and gives them their shape back."""

    def __init__(
        self, record: Record, batch: tuple[int, ...], lumps: Lumps, dtype: Any, details: bool
    ) -> None:
        count = int(np.prod(batch, dtype=np.int64))
        self._batch, self._lumps, self._details = batch, lumps, details
        self._coefficients = np.empty((count, record.count), dtype)
        self._norm2, self._residual2 = np.zeros(count), np.zeros(count)

    def put(
        self,
        rows: slice,
        grid: Grid,
        coefficients: Numbers,
        lump_values: Sequence[Numbers],
        field: Field | None,
        poll: Poll,
    ) -> None:
        """One block of coefficients (B, N); its norms are integrated where the field is given."""
        self._coefficients[rows] = coefficients
        if field is None:
            return
        norm2, residual2 = _norms(grid, field, coefficients, poll)
        of_lumps = self._lumps.norms(lump_values, coefficients)
        self._norm2[rows], self._residual2[rows] = norm2 + of_lumps[0], residual2 + of_lumps[1]

    def projection(self) -> Projection:
        """The result, in the shape of the batch."""
        captured = norm2 = residual2 = None
        if self._details:
            squares = _squared(self._coefficients).sum(axis=-1)
            share = np.ones_like(squares)
            np.divide(squares, self._norm2, out=share, where=self._norm2 > 0.0)
            captured, norm2, residual2 = (
                array.reshape(self._batch) for array in (share, self._norm2, self._residual2)
            )
        left, right = self._lumps.extrapolated
        return Projection(
            self._coefficients.reshape(*self._batch, self._coefficients.shape[1]),
            captured,
            norm2,
            residual2,
            left,
            right,
        )


def _norms(grid: Grid, field: Field, coefficients: Numbers, poll: Poll) -> tuple[Floats, Floats]:
    """(B,) twice: ||f||^2 and ||f - sum c phi||^2 without the lumps."""
    series = coefficients @ grid.record.coefficients
    norm2, residual2 = np.zeros(series.shape[0]), np.zeros(series.shape[0])
    for chunk in grid.chunks():
        poll()
        values = field.at(grid, chunk).T
        weight = grid.weight[chunk]
        norm2 += _squared(values) @ weight
        values = values - grid.pieces.at(grid.element[chunk], grid.t[chunk], series)
        residual2 += _squared(values) @ weight
    return norm2, residual2


def _squared(values: Numbers) -> Floats:
    if np.iscomplexobj(values):
        return np.asarray(values.real**2 + values.imag**2)
    return np.asarray(values * values)


# ---- checks ----


def numbers(values: ArrayLike, field: str) -> Numbers:
    """An array of real or complex numbers, as it is; InvalidRequest for any other type."""
    try:
        array: Numbers = np.asarray(values)
    except ValueError:
        message = "rows of different lengths make no array"
        raise InvalidRequest.at(Reason.BAD_SHAPE, field, message, "ragged") from None
    if array.dtype.kind not in "fiuc":
        raise InvalidRequest.at(Reason.BAD_DTYPE, field, "not an array of numbers", str(array.dtype))
    return array


def check_finite(block: Numbers, first: int, batch: tuple[int, ...], field: str) -> None:
    """InvalidRequest, with its place, for a value that is not finite in rows `first`... of a batch.

    Values beyond LARGEST are refused as well.
    """
    with np.errstate(invalid="ignore"):
        good = np.abs(block) <= LARGEST
    if good.all():
        return
    row, column = divmod(int(np.argmin(good)), block.shape[1])
    value = block[row, column]
    place = [int(i) for i in np.unravel_index(first + row, batch)] if batch else []
    path = field + "".join(f"[{i}]" for i in [*place, column])
    if np.isfinite(value):
        raise InvalidRequest.at(Reason.BAD_VALUES, path, f"larger than {LARGEST}", str(value))
    raise InvalidRequest.at(Reason.NOT_FINITE, path, "not finite; gaps are not filled in", str(value))


def _lump_values(
    field: str, value: ArrayLike | None, batch: tuple[int, ...], *, there: bool
) -> Numbers | None:
    if value is None:
        return None
    array = numbers(value, field)
    if not there:
        message = "that end of the problem has no lump"
        raise InvalidRequest.at(Reason.BAD_VALUES, field, message, f"{array.size} values")
    if array.shape not in ((), batch):
        message = f"one number, or one for each field, shape {batch}"
        raise InvalidRequest.at(Reason.BAD_SHAPE, field, message, str(array.shape))
    flat = np.broadcast_to(array, batch).reshape(-1)
    if flat.size:
        check_finite(np.atleast_2d(flat), 0, (), field)
    return flat.astype(np.complex128 if np.iscomplexobj(flat) else np.float64, copy=False)
