"""Projection by exact integration: coefficients in the inner product that the modes are orthonormal in.

    c_n = int f phi_n w dx + sum_j m_j f_j phi_nj

over the masses m_j at interfaces and of lumps at the ends. The field f is what the samples stand for
(:mod:`.interpolants`) or an expression; its product with a mode and with the weight is a polynomial on every
part of the union of the two meshes and is integrated as such. Nothing is sampled away: a coefficient is
that of the stated field to rounding, and what a projection is off by is what the interpolant is off by.

For samples the integrals are one (G, N) matrix, made once for a basis, a mesh and a meaning; every further
field then costs one product. Captured share and residual are integrated, from f and from f - sum c_n phi_n
on one and the same grid, never by subtraction from one.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from modewright.record import Record
from modewright_service.core.errors import InvalidRequest, LimitExceeded, Reason

from .fields import Collected, Lumps, Poll, Projection, check_finite, no_poll, numbers
from .grid import Grid, build_grid
from .interpolants import Interpolant, interpolant_of
from .meshes import CellMesh, PointMesh

__all__ = ["ProjectionPlan", "plan_projection"]

Floats = NDArray[np.float64]
# 33 million numbers: 256,000 points and 128 modes. Making it takes about three times the room.
MAX_MATRIX_BYTES: Final = 256 * 1024 * 1024
# Fields handled at once, so that memory does not grow with the batch.
_BATCH: Final = 256


@dataclass(frozen=True, eq=False)
class ProjectionPlan:
    """The integrals of one basis, mesh and meaning.

    matrix: (G, N), field values to coefficients, without the lumps. end_weights: (2, G), field values to
    the value of the field at the two ends. Read-only; may be cached (`nbytes`) and used by many threads.
    """

    record: Record
    interpolant: Interpolant
    grid: Grid
    matrix: Floats
    end_weights: Floats

    @property
    def nbytes(self) -> int:
        """Bytes held, for the accounts of a cache."""
        return int(self.matrix.nbytes + self.end_weights.nbytes) + self.grid.nbytes

    def apply(
        self,
        values: ArrayLike,
        left_lump: ArrayLike | None = None,
        right_lump: ArrayLike | None = None,
        *,
        details: bool = True,
        poll: Poll = no_poll,
    ) -> Projection:
        """Project fields given by `values` (..., G).

        left_lump, right_lump: (...) or one number: the value of the lump at that end, in the unit of the
        field; where a lump is there and no value is given, the field's end value is taken.
        details: whether to integrate norm2 and residual2, which costs more than the coefficients.
        Raises InvalidRequest for a wrong shape or type, a value that is not finite, a value for no lump.
        """
        fields = numbers(values, "values")
        if fields.ndim == 0 or fields.shape[-1] != self.interpolant.size:
            wanted = f"the last axis must have {self.interpolant.size} values, as the mesh has"
            raise InvalidRequest.at(Reason.BAD_SHAPE, "values", wanted, str(fields.shape))
        batch = fields.shape[:-1]
        flat = fields.reshape(-1, fields.shape[-1])
        lumps = Lumps.of(self.record, left_lump, right_lump, batch)
        dtype: Any = np.complex128 if np.iscomplexobj(flat) or lumps.is_complex else np.float64
        out = Collected(self.record, batch, lumps, dtype, details)
        for first in range(0, flat.shape[0], _BATCH):
            poll()
            rows = slice(first, min(first + _BATCH, flat.shape[0]))
            block = flat[rows].astype(dtype, copy=False)
            check_finite(block, first, batch, "values")
            known = lumps.values(rows, block @ self.end_weights.T)
            coefficients = block @ self.matrix + lumps.products(known)
            field = None
            if details:
                field = _Samples(self.interpolant, block.T, self.interpolant.system.solve(block.T))
            out.put(rows, self.grid, coefficients, known, field, poll)
        return out.projection()


def plan_projection(record: Record, mesh: PointMesh | CellMesh, *, poll: Poll = no_poll) -> ProjectionPlan:
    """The integrals of a basis with samples on a mesh.

    Raises InvalidRequest where the mesh does not fit the domain, LimitExceeded where the matrix would be
    too large.
    """
    size = mesh.size * record.count * 8
    if size > MAX_MATRIX_BYTES:
        raise LimitExceeded.at(
            Reason.LIMIT_EXCEEDED,
            "x" if isinstance(mesh, PointMesh) else "edges",
            f"{mesh.size} values times {record.count} modes need a matrix beyond {MAX_MATRIX_BYTES} bytes",
            size,
        )
    interpolant = interpolant_of(record, mesh)
    grid = build_grid(record, interpolant.bounds, interpolant.degree)
    matrix = np.zeros((interpolant.size, record.count))
    on_slopes = np.zeros((interpolant.system.size, record.count))
    for chunk in grid.chunks():
        poll()
        modes = grid.weighted_modes(chunk)
        for rows, target in zip(
            interpolant.rows(grid.interval[chunk], grid.x[chunk]), (matrix, on_slopes), strict=True
        ):
            if rows.nnz:
                # The points ascend, so that a chunk touches neighbouring samples only.
                first, last = int(rows.indices.min()), int(rows.indices.max()) + 1
                target[first:last] += rows[:, first:last].T @ modes
    poll()
    interpolant.system.gather(matrix, on_slopes)
    end_weights = interpolant.end_weights()
    matrix.flags.writeable = end_weights.flags.writeable = False
    return ProjectionPlan(record, interpolant, grid, matrix, end_weights)


@dataclass(frozen=True, eq=False)
class _Samples:
    """Fields given by samples: values (G, B) and the slopes (M, B) that follow from them."""

    interpolant: Interpolant
    values: NDArray[Any]
    slopes: NDArray[Any]

    def at(self, grid: Grid, chunk: slice) -> NDArray[Any]:
        values, slopes = self.interpolant.rows(grid.interval[chunk], grid.x[chunk])
        return np.asarray(values @ self.values + slopes @ self.slopes)
