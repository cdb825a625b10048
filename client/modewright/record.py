r"""The one encoding of an eigenbasis: what is solved, kept, sent and evaluated.

A `Record` holds the eigenvalues with their bounds and the eigenfunctions as piecewise polynomials. It is at
once the result of a solve, the entry of a store, the payload of a download and the file that a user keeps.

Bytes (everything little-endian)::

    magic      8 bytes   b"MWBASIS\x00"
    version    uint32    FORMAT_VERSION
    length     uint64    bytes of the header
    header     JSON, ASCII, sorted keys, no blanks; floating point numbers as C99 hexadecimal text
    arrays     in the order of the header's directory, C order, each starting at a multiple of 64 bytes
    trailer    32 bytes  SHA-256 of everything before it

Equal content gives equal bytes, so that two records may be compared by their bytes; the time a solve took is
not part of the content. `from_bytes` makes views of the buffer it is given, never copies: a memory-mapped
file of any size is opened at once (`verify=False` leaves out the one pass that the checksum needs).
"""

from __future__ import annotations

import hashlib
import json
import math
import struct
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, fields, replace
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

__all__ = ["FORMAT_VERSION", "EndInfo", "Record", "RecordError"]

FORMAT_VERSION: Final = 1
_MAGIC: Final = b"MWBASIS\x00"
_PREFIX: Final = struct.Struct("<8sIQ")
_ALIGNMENT: Final = 64
_DIGEST_SIZE: Final = hashlib.sha256().digest_size
# A header of a basis with thousands of layers is a few hundred kilobytes; more is a damaged length.
_MAX_HEADER: Final = 64 * 1024 * 1024

# The arrays and the types they are stored with, in the order in which they are written.
_ARRAYS: Final[Mapping[str, str]] = {
    "eigenvalues": "<f8",
    "lower": "<f8",
    "upper": "<f8",
    "zeros": "<i8",
    "groups": "<i8",
    "confirmed": "|u1",
    "edges": "<f8",
    "layer": "<i4",
    "degrees": "<i4",
    "coefficients": "<f8",
    "p": "<f8",
    "q": "<f8",
    "w": "<f8",
    "left_lump": "<f8",
    "right_lump": "<f8",
    "joints": "<f8",
    "left_map": "<f8",
    "right_map": "<f8",
}
# Written only where they hold something: records without them keep their bytes.
_OPTIONAL: Final = ("left_map", "right_map")
_COMPLEX: Final = "<c16"
_PER_MODE: Final = (
    *("eigenvalues", "lower", "upper", "zeros", "groups", "confirmed"),
    *("coefficients", "left_lump", "right_lump"),
)


class RecordError(ValueError):
    """Bytes that are not a record of this version, are damaged, or hold parts that do not fit together."""


@dataclass(frozen=True)
class EndInfo:
    """One end of the interval as it was solved, geometry factor included.

    kind: the end condition in the document's word (dirichlet, neumann, robin, film, lump, bounded).
    stiffness: h in the energy term h u^2 at the end (0 where there is none).
    mass: lumped mass m that the end carries, of the same unit as the integral of w (0: no lump).
    resistance: between the lump and the end (0: the lump's unknown is u at the end itself).
    film: from the lump to the outside.
    classification: "regular" or what else the end is.
    """

    kind: str
    stiffness: float = 0.0
    mass: float = 0.0
    resistance: float = 0.0
    film: float = 0.0
    classification: str = "regular"


def _no_array() -> NDArray[np.float64]:
    return np.zeros(0)


@dataclass(frozen=True, eq=False)
class Record:
    """One eigenbasis of -(p u')' + q u = lambda w u; N modes on E elements; its arrays cannot be written to.

    algorithm_version, problem_digest, basis_key: where it is from; projected coefficients belong to a key.
    rtol: the relative tolerance that it was solved for (relative to max(|lambda|, scale)).
    eigenvalues, lower, upper: (N,), ascending; lower <= eigenvalue <= upper.
    zeros: (N,) int64, interior zeros, a change of sign across a resistance counting as one; for coupled ends
        those of a <= x < b; -1 for complex modes.
    groups: (N,) int64; neighbours with the same number cannot be told apart.
    confirmed: (N,) uint8; 1: a comparison problem confirms the index, 0: only the discrete count does.
    scale: Lambda = (pi / int sqrt(w/p) dx)^2.
    geometry: 0 plane, 1 cylindrical, 2 spherical: p, q, w below are the material's times r^geometry.
    layer_names: names of the layers from left to right.
    edges: (E+1,) ascending ends of the elements. layer: (E,) int32, the layer that each element is in.
    degrees: (E,) int32, the polynomial degree k_e of the modes on each element.
    coefficients: (N, S) float64, or complex128 where the ends are coupled with a phase; S = sum(k_e + 1):
        Legendre coefficients of mode n, element after element, in
        t = (2 x - a - b) / (b - a) on element (a, b).
    p, q, w: (E, d+1) Legendre coefficients of what the modes were computed with (d may differ).
    left, right: the two ends.
    left_lump, right_lump: (N,) value of the lump's own unknown in each mode (u at the end where the
        resistance is 0); shape (0,) where that end has no lump.
    joints: (J, 4): x, resistance, spring, mass of each interface, geometry included.
    left_map, right_map: (5,) where the outermost element there lies beside a singular end, else (0,): m, s,
        alpha, beta, gamma. With y the distance from the end, h the element's width and xi = (y/h)^(1/m),
        the modes there are xi^(m s) times their series, in t = 2 xi - 1 at the left and 1 - 2 xi at the
        right; p and w are (y/h)^alpha and (y/h)^gamma times theirs, and q = (y/h)^beta Q + s(s-1) p/y^2 + s
        (dp/dy)/y, Q the series of q.
    first_index: index of the first mode.
    solve_seconds: how long the solve took; not part of the bytes.

    Raises RecordError when shapes do not fit together.
    """

    algorithm_version: str
    problem_digest: str
    basis_key: str
    rtol: float
    eigenvalues: NDArray[np.float64]
    lower: NDArray[np.float64]
    upper: NDArray[np.float64]
    zeros: NDArray[np.int64]
    groups: NDArray[np.int64]
    confirmed: NDArray[np.uint8]
    scale: float
    geometry: int
    layer_names: tuple[str, ...]
    edges: NDArray[np.float64]
    layer: NDArray[np.int32]
    degrees: NDArray[np.int32]
    coefficients: NDArray[Any]
    p: NDArray[np.float64]
    q: NDArray[np.float64]
    w: NDArray[np.float64]
    left: EndInfo
    right: EndInfo
    left_lump: NDArray[np.float64] = field(default_factory=_no_array)
    right_lump: NDArray[np.float64] = field(default_factory=_no_array)
    joints: NDArray[np.float64] = field(default_factory=lambda: np.zeros((0, 4)))
    left_map: NDArray[np.float64] = field(default_factory=_no_array)
    right_map: NDArray[np.float64] = field(default_factory=_no_array)
    first_index: int = 0
    solve_seconds: float = 0.0

    def __post_init__(self) -> None:
        for name in _ARRAYS:
            given = getattr(self, name)
            array = np.ascontiguousarray(given, dtype=np.dtype(_stored(name, given))).view()
            array.flags.writeable = False
            object.__setattr__(self, name, array)
        object.__setattr__(self, "layer_names", tuple(self.layer_names))
        self._check_shapes()

    def _check_shapes(self) -> None:
        if self.edges.ndim != 1 or self.edges.size < 2:
            raise RecordError(f"edges: shape {self.edges.shape}, needed (E+1,) with E >= 1")
        modes, elements = self.eigenvalues.size, self.edges.size - 1
        if self.degrees.shape != (elements,):
            raise RecordError(f"degrees: shape {self.degrees.shape}, needed {(elements,)}")
        if int(self.degrees.min()) < 0:
            raise RecordError(f"degrees: the least is {int(self.degrees.min())}, must not be negative")
        size = int(self.degrees.sum(dtype=np.int64)) + elements
        wanted: dict[str, tuple[tuple[int, ...], ...]] = dict.fromkeys(_PER_MODE[:6], ((modes,),))
        wanted["layer"] = ((elements,),)
        wanted["coefficients"] = ((modes, size),)
        wanted["left_map"] = wanted["right_map"] = ((5,), (0,))
        wanted["left_lump"] = wanted["right_lump"] = ((modes,), (0,))
        for name, shapes in wanted.items():
            shape = getattr(self, name).shape
            if shape not in shapes:
                raise RecordError(f"{name}: shape {shape}, needed {' or '.join(map(str, shapes))}")
        for name in ("p", "q", "w"):
            shape = getattr(self, name).shape
            if len(shape) != 2 or shape[0] != elements or shape[1] < 1:
                raise RecordError(f"{name}: shape {shape}, needed ({elements}, degree + 1)")
        if self.joints.ndim != 2 or self.joints.shape[1] != 4:
            raise RecordError(f"joints: shape {self.joints.shape}, needed (J, 4)")
        if not np.all(np.diff(self.edges) > 0):
            raise RecordError("edges: not ascending")
        if self.geometry not in (0, 1, 2):
            raise RecordError(f"geometry: {self.geometry}, needed 0, 1 or 2")

    @property
    def count(self) -> int:
        """Number of modes."""
        return int(self.eigenvalues.size)

    @property
    def tolerance_met(self) -> NDArray[np.bool_]:
        """(N,) whether upper - lower is no more than rtol max(|lambda|, scale)."""
        size = np.maximum(np.abs(self.eigenvalues), self.scale)
        return np.asarray(self.upper - self.lower <= self.rtol * size)

    @property
    def elements(self) -> int:
        """Number of elements."""
        return int(self.edges.size - 1)

    @property
    def offsets(self) -> NDArray[np.int64]:
        """(E+1,): element e holds coefficients[:, offsets[e]:offsets[e+1]]."""
        offsets = np.zeros(self.elements + 1, dtype=np.int64)
        np.cumsum(self.degrees.astype(np.int64) + 1, out=offsets[1:])
        return offsets

    @property
    def layer_edges(self) -> NDArray[np.float64]:
        """(L+1,): the edges at which the layer changes, and the two ends of the domain."""
        changes = np.flatnonzero(np.diff(self.layer)) + 1
        return self.edges[np.concatenate(([0], changes, [self.elements]))]

    @property
    def nbytes(self) -> int:
        """Bytes of the arrays, for the accounts of a cache."""
        return sum(int(getattr(self, name).nbytes) for name in _ARRAYS)

    def head(self, count: int) -> Record:
        """The first `count` modes, under the same key; views, not copies.

        Raises RecordError unless 1 <= count <= N.
        """
        if not 1 <= count <= self.count:
            raise RecordError(f"count: {count} modes wanted of {self.count}")
        if count == self.count:
            return self
        return replace(self, **{name: getattr(self, name)[:count] for name in _PER_MODE})

    # ---- bytes ----

    def to_bytes(self) -> bytes:
        """The record as bytes; equal content gives equal bytes."""
        scalars = {}
        for item in fields(self):
            if item.name not in _ARRAYS and item.name != "solve_seconds":
                scalars[item.name] = _pack(getattr(self, item.name))
        written = [name for name in _ARRAYS if name not in _OPTIONAL or getattr(self, name).size]
        types = {name: _stored(name, getattr(self, name)) for name in written}
        directory = [[name, dtype, list(getattr(self, name).shape)] for name, dtype in types.items()]
        header = json.dumps(
            {"arrays": directory, "fields": scalars},
            sort_keys=True,
            separators=(",", ":"),
            ensure_ascii=True,
            allow_nan=False,
        ).encode("ascii")
        parts = [_PREFIX.pack(_MAGIC, FORMAT_VERSION, len(header)), header]
        position = len(parts[0]) + len(header)
        for name, dtype in types.items():
            padding = -position % _ALIGNMENT
            payload = getattr(self, name).astype(dtype, copy=False).tobytes()
            parts += [bytes(padding), payload]
            position += padding + len(payload)
        digest = hashlib.sha256()
        for part in parts:
            digest.update(part)
        parts.append(digest.digest())
        return b"".join(parts)

    @classmethod
    def from_bytes(cls, buffer: Any, *, verify: bool = True) -> Record:
        """A record over `buffer` (bytes, memoryview, mmap, numpy.memmap), whose memory it goes on using.

        Raises RecordError on a wrong magic number or version, a wrong length, a checksum that does not match
        (unless verify is False) or contents that do not fit together.
        """
        view = memoryview(buffer).cast("B")
        header, position = _read_header(view, verify)
        try:
            scalars = {name: _unpack(value) for name, value in header["fields"].items()}
            arrays: dict[str, Any] = {}
            for name, dtype, shape in header["arrays"]:
                if dtype not in (_ARRAYS.get(name), _COMPLEX if name == "coefficients" else None):
                    raise RecordError(f"unknown array {name!r} of type {dtype!r}")
                position += -position % _ALIGNMENT
                arrays[name], position = _read_array(view, position, name, np.dtype(dtype), shape)
            if position != len(view) - _DIGEST_SIZE:
                raise RecordError(f"{len(view)} bytes, needed {position + _DIGEST_SIZE}")
            return cls(**scalars, **arrays)
        except (AttributeError, KeyError, TypeError, ValueError) as error:
            if isinstance(error, RecordError):
                raise
            raise RecordError(f"damaged header: {error}") from error

    def __reduce__(self) -> tuple[Callable[..., Record], tuple[bytes, float]]:
        return _restore, (self.to_bytes(), self.solve_seconds)


def _stored(name: str, array: Any) -> str:
    """The type that an array is written with: complex is kept where modes may be complex."""
    return _COMPLEX if name == "coefficients" and np.iscomplexobj(array) else _ARRAYS[name]


def _restore(data: bytes, solve_seconds: float) -> Record:
    return replace(Record.from_bytes(data), solve_seconds=solve_seconds)


def _pack(value: object) -> object:
    """Something JSON can write without loss: floats become {"f": hex}, an end becomes {"end": {...}}."""
    if isinstance(value, EndInfo):
        return {"end": {item.name: _pack(getattr(value, item.name)) for item in fields(value)}}
    if isinstance(value, tuple):
        return [_pack(item) for item in value]
    if isinstance(value, str):
        return value
    if isinstance(value, int | np.integer):
        return int(value)
    if isinstance(value, float | np.floating):
        # -0.0 and 0.0 are one number; NaN has no place in a record.
        number = float(value) + 0.0
        if math.isnan(number):
            raise RecordError("a number of the header is NaN")
        return {"f": number.hex()}
    raise RecordError(f"{type(value).__name__} cannot be written in the header")


def _unpack(value: Any) -> Any:
    if isinstance(value, dict):
        if set(value) == {"f"}:
            return float.fromhex(value["f"])
        return EndInfo(**{name: _unpack(item) for name, item in value["end"].items()})
    if isinstance(value, list):
        return tuple(_unpack(item) for item in value)
    return value


def _read_header(view: memoryview, verify: bool) -> tuple[Any, int]:
    """The header and the position behind it."""
    if len(view) < _PREFIX.size + _DIGEST_SIZE:
        raise RecordError(f"{len(view)} bytes are too few for a record")
    magic, version, length = _PREFIX.unpack_from(view)
    if magic != _MAGIC:
        raise RecordError(f"not a record: it starts with {magic!r}")
    if version != FORMAT_VERSION:
        raise RecordError(f"format version {version}, this program reads {FORMAT_VERSION}")
    end = _PREFIX.size + length
    if length > _MAX_HEADER or end > len(view) - _DIGEST_SIZE:
        raise RecordError(f"damaged: a header of {length} bytes in {len(view)} bytes")
    if verify:
        found = hashlib.sha256(view[:-_DIGEST_SIZE]).digest()
        if found != bytes(view[-_DIGEST_SIZE:]):
            raise RecordError("damaged: the checksum does not match")
    try:
        return json.loads(bytes(view[_PREFIX.size : end])), end
    except (ValueError, RecursionError) as error:
        raise RecordError(f"damaged header: {error}") from error


def _read_array(
    view: memoryview, position: int, name: str, dtype: np.dtype[Any], shape: list[Any]
) -> tuple[NDArray[Any], int]:
    if not all(isinstance(n, int) and n >= 0 for n in shape):
        raise RecordError(f"{name}: damaged shape {shape}")
    count = math.prod(shape)
    end = position + count * dtype.itemsize
    if end > len(view) - _DIGEST_SIZE:
        raise RecordError(f"{name}: {count} numbers reach behind the end of the bytes")
    if count == 0:
        return np.zeros(shape, dtype), end
    return np.frombuffer(view, dtype, count, position).reshape(shape), end
