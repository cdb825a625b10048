"""NPZ and CSV files in and out. Only this module of the command line knows their layouts.

*Snapshots* in NPZ: ``values`` (any batch axes and one coordinate axis) with ``x`` (points) or ``edges``
(cell averages), and if wanted ``measure`` (a word), ``left_lump`` and ``right_lump`` (batch shape). In CSV:
a header, then one row a point, ``x`` first and a column for each snapshot; for cell averages ``start`` and
``end`` of each cell come first. *Coefficients* in NPZ: ``coefficients`` (..., N), with ``problem_digest``
and ``basis_key`` to say what they belong to; in CSV a row a snapshot with columns ``c0``, ``c1``, ... A file
that ``reconstruct`` writes is a file of snapshots.
"""

from __future__ import annotations

import csv
import zipfile
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

__all__ = [
    "Coefficients",
    "InputFileError",
    "Snapshots",
    "read_coefficients",
    "read_points",
    "read_snapshots",
    "write_arrays",
    "write_table",
]

Array = npt.NDArray[Any]
Floats = npt.NDArray[np.float64]


class InputFileError(ValueError):
    """A file that cannot be used; the message names the file, the place in it and the number."""

    def __init__(self, path: Path, message: str) -> None:
        super().__init__(f"{path}: {message}")
        self.path = path


@dataclass(frozen=True)
class Snapshots:
    """What a file of snapshots holds: ``x`` or ``edges`` is None. ``arrays``: everything else by name."""

    values: Array
    x: Array | None = None
    edges: Array | None = None
    measure: str | None = None
    arrays: Mapping[str, Array] = field(default_factory=dict)


@dataclass(frozen=True)
class Coefficients:
    """Coefficients (..., N) and, where the file says so, what they belong to."""

    values: Array
    problem_digest: str = ""
    basis_key: str = ""
    rtol: float | None = None


def _suffix(path: Path) -> str:
    suffix = path.suffix.lower()
    if suffix not in (".npz", ".csv"):
        raise InputFileError(path, f"must end in .npz or .csv, not {suffix!r}")
    return suffix


def _read_npz(path: Path) -> dict[str, Array]:
    try:
        # Opened here: numpy leaves a file that it opened itself to the collector when the archive is damaged.
        with path.open("rb") as handle:
            archive = np.load(handle, allow_pickle=False)
            if not isinstance(archive, np.lib.npyio.NpzFile):
                raise InputFileError(path, "is one array, not an NPZ archive of named ones")
            return {name: archive[name] for name in archive.files}
    except (zipfile.BadZipFile, EOFError) as error:
        raise InputFileError(path, f"is not a whole NPZ archive ({error})") from None
    except ValueError as error:
        if isinstance(error, InputFileError):
            raise
        raise InputFileError(path, f"cannot be read as NPZ ({error})") from None


def _named(path: Path, arrays: Mapping[str, Array], name: str) -> Array:
    if name not in arrays:
        raise InputFileError(path, f"has no array {name!r}; it has {', '.join(sorted(arrays)) or 'none'}")
    return arrays[name]


def _word(arrays: Mapping[str, Array], name: str) -> str:
    return str(arrays[name].item()) if name in arrays and arrays[name].ndim == 0 else ""


def _number(path: Path, row: int, column: str, text: str) -> float:
    try:
        return float(text)
    except ValueError:
        raise InputFileError(path, f"row {row}, column {column!r}: {text!r} is not a number") from None


def _read_csv(path: Path) -> tuple[list[str], Floats]:
    """Header and numbers (rows, columns); a first row that is all numbers gets the header x, u0, u1, ..."""
    try:
        with path.open(newline="", encoding="utf-8-sig") as handle:
            rows = [(number, row) for number, row in enumerate(csv.reader(handle), start=1) if any(row)]
    except (UnicodeDecodeError, csv.Error) as error:
        raise InputFileError(path, f"is not readable as CSV ({error})") from None
    if not rows:
        raise InputFileError(path, "is empty")
    first = [cell.strip() for cell in rows[0][1]]
    if all(_is_number(cell) for cell in first):
        header = ["x", *(f"u{i}" for i in range(len(first) - 1))]
    else:
        header = first
        rows = rows[1:]
        if not rows:
            raise InputFileError(path, "has a header but no rows of numbers")
    table = np.empty((len(rows), len(header)))
    for i, (number, row) in enumerate(rows):
        if len(row) != len(header):
            raise InputFileError(
                path, f"row {number} has {len(row)} columns, the first row has {len(header)}"
            )
        table[i] = [_number(path, number, name, cell.strip()) for name, cell in zip(header, row, strict=True)]
    return header, table


def _is_number(text: str) -> bool:
    try:
        float(text)
    except ValueError:
        return False
    return True


def _column(path: Path, header: list[str], name: str) -> int:
    if name not in header:
        raise InputFileError(path, f"has no column {name!r}; it has {', '.join(header)}")
    return header.index(name)


def read_snapshots(path: Path, values: str = "values", x: str = "x", edges: str = "edges") -> Snapshots:
    """Read a file of snapshots; the names are those of the arrays (NPZ) or, for ``x``, of the column (CSV).

    Raises InputFileError, and OSError for a file that cannot be opened.
    """
    if _suffix(path) == ".csv":
        return _snapshots_from_table(path, x)
    arrays = _read_npz(path)
    field_values = _named(path, arrays, values)
    if x in arrays and edges in arrays:
        raise InputFileError(path, f"has both points {x!r} and cell edges {edges!r}; only one can be meant")
    if edges in arrays:
        return Snapshots(
            field_values, edges=arrays[edges], measure=_word(arrays, "measure") or None, arrays=arrays
        )
    if x not in arrays:
        found = ", ".join(sorted(arrays))
        raise InputFileError(path, f"has neither points {x!r} nor cell edges {edges!r}; it has {found}")
    return Snapshots(field_values, x=arrays[x], arrays=arrays)


def _snapshots_from_table(path: Path, x: str) -> Snapshots:
    header, table = _read_csv(path)
    if header[:2] == ["start", "end"]:
        gaps = np.flatnonzero(table[1:, 0] != table[:-1, 1])
        if len(gaps):
            row = int(gaps[0])
            start, end = float(table[row + 1, 0]), float(table[row, 1])
            raise InputFileError(path, f"cell {row + 2} starts at {start!r}, the one before ends at {end!r}")
        edges = np.concatenate([table[:1, 0], table[:, 1]])
        snapshots = Snapshots(table[:, 2:].T, edges=edges)
    else:
        place = _column(path, header, x)
        snapshots = Snapshots(np.delete(table, place, axis=1).T, x=table[:, place])
    if not snapshots.values.shape[0]:
        raise InputFileError(path, "has coordinates but no column of values")
    return snapshots


def read_coefficients(path: Path, name: str = "coefficients") -> Coefficients:
    """Read coefficients that ``project`` wrote: an array (..., N), or columns c0, c1, ...."""
    if _suffix(path) == ".csv":
        header, table = _read_csv(path)
        columns: list[int] = []
        while f"c{len(columns)}" in header:
            columns.append(header.index(f"c{len(columns)}"))
        if not columns:
            raise InputFileError(path, f"has no columns c0, c1, ...; it has {', '.join(header)}")
        return Coefficients(table[:, columns])
    arrays = _read_npz(path)
    values = _named(path, arrays, name)
    if values.ndim == 0 or values.shape[-1] == 0:
        raise InputFileError(
            path, f"array {name!r} has shape {values.shape}: no coefficients along its last axis"
        )
    rtol = arrays.get("rtol")
    return Coefficients(
        values,
        _word(arrays, "problem_digest"),
        _word(arrays, "basis_key"),
        float(rtol) if rtol is not None and rtol.ndim == 0 and rtol.dtype.kind == "f" else None,
    )


def read_points(path: Path, name: str = "x") -> Array:
    """Read points: the array ``name`` of an NPZ file, or the first column of a CSV file."""
    if _suffix(path) == ".csv":
        return np.array(_read_csv(path)[1][:, 0])
    return _named(path, _read_npz(path), name)


def write_arrays(path: Path, arrays: Mapping[str, npt.ArrayLike]) -> None:
    """Write an NPZ archive."""
    np.savez(path, allow_pickle=False, **{name: np.asarray(value) for name, value in arrays.items()})


def write_table(path: Path, header: Sequence[str], columns: Sequence[npt.ArrayLike]) -> None:
    """Write a CSV file of columns of equal length; floats with the digits that bring them back."""
    lists = [np.asarray(column).tolist() for column in columns]
    with path.open("w", newline="", encoding="utf-8") as handle:
        writer = csv.writer(handle, lineterminator="\n")
        writer.writerow(header)
        writer.writerows(zip(*lists, strict=True))
