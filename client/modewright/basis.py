"""The handle of a solved eigenbasis.

A :class:`Basis` holds the eigenvalues, their bounds, the key that names the basis and the problem it came
from. The eigenfunctions stay with the service until something here needs them (`modes`, `pieces`, `record`,
`save`); they are then fetched once and kept. A handle pins its key: should the service have forgotten the
basis, the problem is sent again and exactly that basis is recomputed, with equal numbers.
"""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any, Self

import numpy as np
from numpy.typing import ArrayLike, NDArray

from modewright import errors, transfers
from modewright.arrays import refuse
from modewright.ends import Ends, ends_from_message, ends_from_record
from modewright.pieces import Pieces
from modewright.problem import Problem
from modewright.record import Record, RecordError
from modewright.transfers import Projection
from modewright.v1 import basis_pb2, solve_pb2

if TYPE_CHECKING:
    from modewright.client import Service

__all__ = ["Basis", "Projection", "load_basis"]

_SHOWN_KEY = 12
_PER_MODE = ("eigenvalues", "lower", "upper", "zeros", "groups", "confirmed", "tolerance_met")


class Basis:
    """N eigenpairs of a problem; made by :meth:`modewright.Service.solve` or :func:`load_basis`.

    eigenvalues, lower, upper: (N,) ascending, lower <= lambda <= upper; bounds are computed in floating
    point with a margin for rounding, not by interval arithmetic. zeros: (N,) interior zeros of each mode.
    groups: (N,) modes with the same number cannot be told apart. confirmed: (N,) whether a comparison
    problem confirms the index; elsewhere it is the count of the discretised problem, and the lower bound may
    be far below. tolerance_met: (N,) whether upper - lower is at most rtol times max(abs(lambda), scale);
    where it is not, rounding or coefficients that vary too fast do not allow it: the bounds hold, but are as
    wide as they are.
    key: names the basis; equal keys mean equal numbers, and coefficients belong to a key. count: N. rtol:
    what it was solved for. scale: accuracies are relative to max(abs(lambda), scale). ends: the two ends as
    solved.
    problem: where it came from (None if loaded from a file). answered_from_cache, server_solve_count,
    solve_seconds, remarks: about the call that made this handle.

    The eigenfunctions are orthonormal in <f, g> = integral of f g w dx plus lumped masses; each is positive
    immediately right of the left end, or has p phi' > 0 there.
    """

    def __init__(
        self,
        service: Service | None,
        problem: Problem | None,
        answer: solve_pb2.SolveResponse | None = None,
        record: Record | None = None,
    ) -> None:
        self._service = service
        self._record = record
        self.problem = problem
        self.answered_from_cache = False
        self.server_solve_count = 0
        self.remarks: tuple[str, ...] = ()
        if answer is not None:
            self._take_answer(answer)
        elif record is not None:
            self._take_record(record)
        else:
            raise TypeError("a basis is made from an answer or from a record")
        for name in _PER_MODE:
            getattr(self, name).flags.writeable = False

    def _take_answer(self, answer: solve_pb2.SolveResponse) -> None:
        self.eigenvalues = np.array(answer.eigenvalues, dtype=np.float64)
        self.lower = np.array(answer.lower, dtype=np.float64)
        self.upper = np.array(answer.upper, dtype=np.float64)
        self.zeros = np.array(answer.zeros, dtype=np.int64)
        self.groups = np.array(answer.groups, dtype=np.int64)
        self.confirmed = np.array(answer.confirmed) == basis_pb2.COUNT_CONFIRMATION_COMPARISON
        self.tolerance_met = np.array(answer.tolerance_met, dtype=np.bool_)
        self.key = answer.basis_key
        self.problem_digest = answer.problem_digest
        self.algorithm_version = answer.algorithm_version
        self.rung = int(answer.specification.rung)
        self.rtol = answer.specification.rtol
        self.scale = answer.scale
        self.ends: Ends = ends_from_message(answer.ends)
        self.answered_from_cache = answer.answered_from_cache
        self.server_solve_count = answer.server_solve_count
        self.solve_seconds = answer.solve_seconds
        self.remarks = tuple(answer.remarks)

    def _take_record(self, record: Record) -> None:
        for name in ("eigenvalues", "lower", "upper", "zeros", "groups"):
            setattr(self, name, getattr(record, name).copy())
        self.confirmed = record.confirmed == 1
        self.tolerance_met = record.tolerance_met
        self.key = record.basis_key
        self.problem_digest = record.problem_digest
        self.algorithm_version = record.algorithm_version
        self.rung = record.count
        self.rtol = record.rtol
        self.scale = record.scale
        self.ends = ends_from_record(record)
        self.solve_seconds = record.solve_seconds

    @classmethod
    def from_answer(
        cls, service: Service, problem: Problem, modes: int, answer: solve_pb2.SolveResponse
    ) -> Self:
        """The handle for an answer, cut to the `modes` asked for. Raises InternalError if there are fewer."""
        sizes = {name: len(getattr(answer, name)) for name in _PER_MODE}
        if min(sizes.values()) < modes:
            raise errors.InternalError(f"{modes} modes were asked for, the answer holds {sizes}")
        for name in _PER_MODE:
            del getattr(answer, name)[modes:]
        return cls(service, problem, answer)

    @property
    def count(self) -> int:
        """Number of modes."""
        return int(self.eigenvalues.size)

    def __len__(self) -> int:
        return self.count

    def __repr__(self) -> str:
        first, last = self.eigenvalues[0], self.eigenvalues[-1]
        of = f" of {self.problem!r}" if self.problem is not None else ""
        return f"Basis({self.count} modes, lambda {first:g} to {last:g}, key {self.key[:_SHOWN_KEY]}...{of})"

    def __getstate__(self) -> dict[str, Any]:
        state = self.__dict__.copy()
        # What can be fetched again does not travel; what was loaded from a file has nowhere to be fetched
        # from.
        if self._service is not None:
            state["_record"] = None
        return state

    # ---- transforms ----

    def project(
        self,
        values: ArrayLike | str,
        x: ArrayLike | None = None,
        *,
        edges: ArrayLike | None = None,
        measure: str | None = None,
        interpolation: str | None = None,
        axis: int = -1,
        left_lump: ArrayLike | None = None,
        right_lump: ArrayLike | None = None,
        details: bool = False,
        timeout: float | None = None,
    ) -> Any:
        """Coefficients c_n = <f, phi_n> of fields f: an array (..., N), or a :class:`Projection` with
        `details`.

        values: point values with `x`, cell averages with `edges`, or one expression in x as a string.
        x: (G,) increasing; a coordinate may stand twice at an interface, left value first. Between points
        the field is the `interpolation` "cubic" (spline in each layer; default) or "linear".
        edges: (G + 1,) edges of cells that cover the domain. `measure` of the averages: "length" (dx),
        "cylindrical" (x dx), "spherical" (x**2 dx), "weight" (w dx); default: the problem's geometry.
        Inside a cell the field is "conservative" (smooth, right average; default) or "constant".
        axis: of `values` that runs over the samples. The other axes stay in order and lead the result.
        left_lump, right_lump: the lump's own value for each field, of the shape of the other axes or a
        number; without it the field's end value is taken, and `details` says so.

        Real values of any type are integrated in double precision, complex ones as they are. Large batches
        go in several calls. `timeout` in seconds is for all of them.
        Raises InvalidRequest for shapes, meshes and types that do not fit, and as `solve` does.
        """
        return transfers.project(
            self,
            transfers.field_of(values, x, edges, measure, interpolation, axis, left_lump, right_lump),
            details=details,
            timeout=timeout,
        )

    def reconstruct(
        self,
        coefficients: ArrayLike,
        x: ArrayLike,
        *,
        quantity: str = "value",
        side: str = "right",
        axis: int = -1,
        timeout: float | None = None,
    ) -> NDArray[Any]:
        """Fields from coefficients: sums of c_n phi_n at the points x, shape (..., points).

        coefficients: (..., K) with K <= N: the first K modes; `axis` says which axis runs over the modes.
        x: (points,) in any order inside the domain; a number gives shape (...).
        quantity: "value"; "derivative" u'; "flux" p u' (geometry factor included, along +x); "flux-density"
        -(p u')/r**g, for heat conduction the heat flux -k u' per area. side: "right" or "left" limit where
        it jumps.

        Raises InvalidRequest for shapes and types that do not fit and points outside the domain.
        """
        return transfers.reconstruct(self, coefficients, x, quantity, side, axis, timeout)

    def modes(
        self, points: ArrayLike, *, quantity: str = "value", side: str = "right"
    ) -> NDArray[np.float64]:
        """The modes themselves at points of any shape: (N,) + shape of points; evaluated here.

        quantity and side as in `reconstruct`. Raises InvalidRequest for points outside the domain.
        """
        x = transfers.real_array("points", points)
        return transfers.locally(
            "points", lambda: self.pieces().evaluate(x, *transfers.words(quantity, side))
        )

    # ---- the eigenfunctions as data ----

    def record(self, timeout: float | None = None) -> Record:
        """The whole basis as piecewise polynomials (fetched at the first use)."""
        if self._record is None:
            data = transfers.fetch(self, timeout)
            try:
                record = Record.from_bytes(data)
            except RecordError as error:
                raise errors.InternalError(f"the basis that was sent cannot be read: {error}") from error
            if record.basis_key != self.key:
                raise errors.InternalError(f"asked for basis {self.key}, got {record.basis_key}")
            self._record = record.head(self.count)
        return self._record

    def pieces(self) -> Pieces:
        """An evaluator of the modes and coefficients that needs no service."""
        return Pieces(self.record())

    def save(self, path: str | Path) -> None:
        """Writes the basis to a file that :func:`load_basis` reads: versioned, with its checksum."""
        Path(path).write_bytes(self.record().to_bytes())

    # ---- for transfers ----

    @property
    def service(self) -> Service | None:
        """The service behind the handle; None for a basis loaded without one."""
        return self._service

    @property
    def local_record(self) -> Record | None:
        """The record if it is here already."""
        return self._record

    def reference(self, *, whole: bool = False) -> basis_pb2.BasisReference:
        """How calls name this basis: by its key, or with `whole` by its problem as well."""
        reference = basis_pb2.BasisReference(basis_key=self.key, count=self.count)
        if whole and self.problem is not None:
            from modewright.document.messages import message_from_problem

            reference.problem.CopyFrom(message_from_problem(self.problem))
            reference.specification.modes = self.rung
            reference.specification.rtol = self.rtol
        return reference


def load_basis(path: str | Path, service: Service | None = None) -> Basis:
    """A basis from a file that `Basis.save` wrote.

    Without a service it evaluates modes and reconstructs fields by itself. With one it projects as well, as
    long as the service holds the basis of this key.
    Raises InvalidRequest for a file that is none or is damaged, OSError for one that cannot be opened.
    """
    try:
        record = Record.from_bytes(Path(path).read_bytes())
    except RecordError as error:
        refuse("path", f"{Path(path).name} is not a usable basis file: {error}", reason="BAD_REQUEST")
    return Basis(service, None, record=record)
