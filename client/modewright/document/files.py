"""The files around problem documents: JSON, TOML, YAML, and tables of samples as CSV or NPZ.

Nothing in a file is executed: YAML is read with the safe loader and NPZ without pickled objects.
"""

from __future__ import annotations

import csv
import json
import tomllib
import zipfile
from collections.abc import Mapping
from io import StringIO
from pathlib import Path
from typing import Any

import numpy as np

from modewright.checks import Checks, choice_list, quote
from modewright.errors import InvalidProblem, Violation
from modewright.problem import MAX_SAMPLES, Problem, Samples

__all__ = ["load", "read_document", "read_samples"]

_SUFFIXES = (".json", ".toml", ".yaml", ".yml")

# A document with the most samples allowed in a handful of layers is a few megabytes.
_MAX_DOCUMENT = 64 * 1024 * 1024


def load(path: Path) -> Problem:
    """The problem of the document at `path`. Raises InvalidProblem, OSError."""
    return Problem.from_dict(read_document(path), base=path.parent)


def read_document(path: Path) -> Mapping[str, Any]:
    """The dictionary in a .json, .toml, .yaml or .yml file. Raises InvalidProblem, OSError."""
    suffix = path.suffix.lower()
    if suffix not in _SUFFIXES:
        raise _refused(path, f"must end in {choice_list(_SUFFIXES)}", reason="UNKNOWN_OPTION")
    if (size := path.stat().st_size) > _MAX_DOCUMENT:
        raise _refused(path, f"is larger than {_MAX_DOCUMENT} bytes", str(size), reason="LIMIT_EXCEEDED")
    try:
        text = path.read_text(encoding="utf-8")
        document = _parse(suffix, text, path)
    except (UnicodeDecodeError, ValueError, RecursionError) as error:
        if isinstance(error, InvalidProblem):
            raise
        raise _refused(path, f"is not readable as {suffix[1:].upper()}: {error}") from error
    if not isinstance(document, Mapping):
        raise _refused(path, f"must hold a table of named fields, not {quote(document)}")
    return document


def _parse(suffix: str, text: str, path: Path) -> Any:
    if suffix == ".json":
        return json.loads(text, object_pairs_hook=_unique)
    if suffix == ".toml":
        return tomllib.loads(text)
    try:
        import yaml
    except ImportError as error:
        message = "needs the yaml extra: pip install 'modewright[yaml]'"
        raise _refused(path, message, reason="UNKNOWN_OPTION") from error
    try:
        return yaml.safe_load(text)
    except yaml.YAMLError as error:
        raise ValueError(str(error)) from error


def _unique(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    """The object of a JSON text; of two members with one name, neither can be taken for the one meant."""
    found: dict[str, Any] = {}
    for key, value in pairs:
        if key in found:
            raise ValueError(f"the key {quote(key)} occurs twice in one object")
        found[key] = value
    return found


def _refused(path: Path, message: str, number: str = "", *, reason: str = "BAD_REQUEST") -> InvalidProblem:
    violation = Violation(path.name, message, number)
    return InvalidProblem("not a valid problem document", reason=reason, violations=[violation])


def read_samples(path: Path, columns: object, interpolation: str) -> Samples:
    """Samples from two columns of a CSV file, or two arrays of an NPZ file.

    columns: two names of the file's header line (NPZ: of its arrays) or two column numbers counted from 0;
    None means the first two. CSV: commas, an optional header line, lines starting with # are skipped.
    Raises InvalidProblem.
    """
    checks = Checks(reason="BAD_SAMPLES")
    wanted = _column_names(checks, columns)
    checks.finish()
    suffix = path.suffix.lower()
    if suffix not in (".csv", ".npz"):
        checks.wrong("file", f"must end in .csv or .npz, not {quote(path.name)}")
        checks.finish()
    try:
        read = _from_npz if suffix == ".npz" else _from_csv
        x, values = read(checks, path, wanted)
    except (OSError, zipfile.BadZipFile, UnicodeDecodeError, ValueError, csv.Error) as error:
        if isinstance(error, InvalidProblem):
            raise
        checks.wrong("file", f"{path.name} cannot be read: {error}")
    checks.finish()
    return Samples(x, values, interpolation)


def _column_names(checks: Checks, columns: object) -> tuple[int | str, int | str]:
    if columns is None:
        return 0, 1
    items = checks.items("columns", columns)
    whole = all(isinstance(item, (int, str)) and not isinstance(item, bool) for item in items)
    if len(items) != 2 or not whole:
        checks.wrong("columns", f"must be two names or two numbers, not {quote(columns)}")
        return 0, 1
    return items[0], items[1]


def _pick(checks: Checks, names: list[str], wanted: tuple[int | str, int | str]) -> list[int]:
    """Positions of the wanted columns among `names`."""
    picked = []
    for index, column in enumerate(wanted):
        if isinstance(column, str) and column in names:
            picked.append(names.index(column))
        elif isinstance(column, int) and 0 <= column < len(names):
            picked.append(column)
        else:
            checks.wrong(f"columns[{index}]", f"{column!r} is not a column: {quote(names)}")
    checks.finish()
    return picked


def _from_npz(checks: Checks, path: Path, wanted: tuple[int | str, int | str]) -> tuple[Any, Any]:
    with np.load(path, allow_pickle=False) as archive:
        names = list(archive.files)
        x, values = (archive[names[index]] for index in _pick(checks, names, wanted))
        return x, values


def _from_csv(checks: Checks, path: Path, wanted: tuple[int | str, int | str]) -> tuple[Any, Any]:
    text = path.read_text(encoding="utf-8-sig")
    lines = [line for line in text.splitlines() if line.strip() and not line.lstrip().startswith("#")]
    rows = list(csv.reader(StringIO("\n".join(lines)), skipinitialspace=True))
    if not rows:
        raise ValueError("it has no rows")
    header = not all(_is_number(cell) for cell in rows[0])
    names = [cell.strip() for cell in rows[0]] if header else [str(index) for index in range(len(rows[0]))]
    rows = rows[1:] if header else rows
    if len(rows) > MAX_SAMPLES:
        raise ValueError(f"it has {len(rows)} rows, the limit is {MAX_SAMPLES}")
    first, second = _pick(checks, names, wanted)
    table = np.empty((2, len(rows)))
    for index, row in enumerate(rows):
        try:
            table[:, index] = float(row[first]), float(row[second])
        except (ValueError, IndexError) as error:
            raise ValueError(f"row {index + 1} is not two numbers: {quote(row)}") from error
    return table[0], table[1]


def _is_number(cell: str) -> bool:
    try:
        float(cell)
    except ValueError:
        return False
    return True
