"""The encoding of an eigenbasis: equal bytes for equal content, damage noticed, views instead of copies."""

import hashlib
import json
import mmap
import pickle
import struct
import subprocess
import sys
from dataclasses import fields, replace
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from modewright.record import EndInfo, Record, RecordError
from tests.core.handmade import contact, sines, tip_mass

# What `golden_record` is written as. It changes with FORMAT_VERSION and for no other reason.
GOLDEN = "6845ad284cb866dea78bf1b5f7ffd0e8d79b65fc4f4c08619f71717f1f173b02"


def golden_record() -> Record:
    """A record of round numbers: nothing in it depends on a library's rounding."""
    return Record(
        algorithm_version="1",
        problem_digest="a" * 64,
        basis_key="c" * 64,
        rtol=1e-9,
        eigenvalues=np.array([1.0, 4.0, 9.5]),
        lower=np.array([0.5, 3.5, 9.0]),
        upper=np.array([1.0, 4.0, 9.5]),
        zeros=np.arange(3),
        groups=np.arange(3),
        confirmed=np.array([1, 1, 0], dtype=np.uint8),
        scale=0.1,
        geometry=2,
        layer_names=("wall", "Dämmung"),
        edges=np.array([1.0, 1.5, 4.0]),
        layer=np.array([0, 1]),
        degrees=np.array([1, 2]),
        coefficients=np.arange(15.0).reshape(3, 5) / 8,
        p=np.ones((2, 1)),
        q=np.zeros((2, 1)),
        w=np.array([[1.0, 0.25], [2.0, 0.0]]),
        left=EndInfo("lump", mass=0.1, resistance=0.5, film=2.0),
        right=EndInfo("film", stiffness=3.0),
        left_lump=np.array([0.5, -0.25, 0.125]),
        joints=np.array([[1.5, 0.25, 0.0, 0.0]]),
    )


@pytest.fixture(params=[sines, tip_mass, contact, golden_record])
def record(request: pytest.FixtureRequest) -> Record:
    made: Record = request.param()
    return made


def test_reading_returns_what_was_written(record: Record) -> None:
    back = Record.from_bytes(record.to_bytes())
    for item in fields(Record):
        written, read = getattr(record, item.name), getattr(back, item.name)
        if isinstance(written, np.ndarray):
            np.testing.assert_array_equal(read, written, strict=True)
        else:
            assert read == written, item.name


def test_equal_content_gives_equal_bytes(record: Record) -> None:
    data = record.to_bytes()
    assert Record.from_bytes(data).to_bytes() == data
    assert pickle.loads(pickle.dumps(record)).to_bytes() == data
    assert replace(record, solve_seconds=12.5).to_bytes() == data


def test_pickles_keep_the_time_of_the_solve() -> None:
    assert pickle.loads(pickle.dumps(replace(sines(), solve_seconds=0.25))).solve_seconds == 0.25


def test_bytes_are_the_same_in_another_process() -> None:
    script = (
        "import hashlib\nfrom tests.client.test_record import golden_record\n"
        "print(hashlib.sha256(golden_record().to_bytes()).hexdigest())"
    )
    root = Path(__file__).parents[2]
    answer = subprocess.run(
        [sys.executable, "-c", script], cwd=root, capture_output=True, text=True, check=True
    )
    here = hashlib.sha256(golden_record().to_bytes()).hexdigest()
    assert here == GOLDEN
    assert answer.stdout.strip() == GOLDEN


def test_the_layout_is_the_documented_one() -> None:
    data = golden_record().to_bytes()
    magic, version, length = struct.unpack_from("<8sIQ", data)
    assert (magic, version) == (b"MWBASIS\x00", 1)
    header = json.loads(data[20 : 20 + length])
    assert header["fields"]["rtol"] == {"f": (1e-9).hex()}
    name, dtype, shape = header["arrays"][0]
    start = -(-(20 + length) // 64) * 64
    first = np.frombuffer(data, dtype, shape[0], start)
    assert name == "eigenvalues"
    np.testing.assert_array_equal(first, [1.0, 4.0, 9.5])
    assert data[-32:] == hashlib.sha256(data[:-32]).digest()


def test_arrays_cannot_be_written_to(record: Record) -> None:
    with pytest.raises(ValueError, match="read-only"):
        record.coefficients[0, 0] = 1.0
    with pytest.raises(ValueError, match="read-only"):
        Record.from_bytes(record.to_bytes()).eigenvalues[0] = 1.0


def test_a_record_leaves_the_callers_arrays_writable() -> None:
    values = np.array([1.0, 4.0, 9.5])
    made = replace(golden_record(), eigenvalues=values)
    values[0] = 2.0
    assert made.count == 3


def test_a_mapped_file_is_not_copied(tmp_path: Path) -> None:
    path = tmp_path / "basis"
    path.write_bytes(sines().to_bytes())
    with path.open("rb") as file:
        mapped = mmap.mmap(file.fileno(), 0, access=mmap.ACCESS_READ)
    record = Record.from_bytes(mapped)
    assert not record.coefficients.flags.owndata
    assert record.to_bytes() == path.read_bytes()
    numpy_map = np.memmap(path, dtype=np.uint8, mode="r")
    assert np.shares_memory(Record.from_bytes(numpy_map).coefficients, numpy_map)


def test_head_keeps_the_key_and_the_first_modes(record: Record) -> None:
    head = record.head(2)
    assert head.count == 2
    assert head.basis_key == record.basis_key
    np.testing.assert_array_equal(head.coefficients, record.coefficients[:2])
    assert head.left_lump.size in (0, 2)
    assert Record.from_bytes(head.to_bytes()).count == 2
    assert record.head(record.count) is record


@pytest.mark.parametrize("count", [0, -1, 4])
def test_head_refuses_other_counts(count: int) -> None:
    with pytest.raises(RecordError, match=f"{count} modes wanted of 3"):
        golden_record().head(count)


def test_layer_edges() -> None:
    np.testing.assert_array_equal(golden_record().layer_edges, [1.0, 1.5, 4.0])
    np.testing.assert_array_equal(contact().layer_edges, [0.0, 0.5, 1.0])
    np.testing.assert_array_equal(sines().layer_edges, [0.0, 1.0])


@given(place=st.integers(0, len(golden_record().to_bytes()) - 1), change=st.integers(1, 255))
def test_every_changed_byte_is_noticed(place: int, change: int) -> None:
    data = bytearray(golden_record().to_bytes())
    data[place] ^= change
    with pytest.raises(RecordError):
        Record.from_bytes(data)


@given(place=st.integers(0, len(golden_record().to_bytes()) - 1), change=st.integers(1, 255))
def test_unverified_damage_raises_nothing_but_record_errors(place: int, change: int) -> None:
    data = bytearray(golden_record().to_bytes())
    data[place] ^= change
    try:
        record = Record.from_bytes(data, verify=False)
    except RecordError:
        return
    assert record.coefficients.shape == (record.count, int(np.sum(record.degrees + 1)))


@given(size=st.integers(0, len(golden_record().to_bytes()) - 1))
def test_every_cut_is_noticed(size: int) -> None:
    data = golden_record().to_bytes()[:size]
    with pytest.raises(RecordError):
        Record.from_bytes(data)
    with pytest.raises(RecordError):
        Record.from_bytes(data, verify=False)


def test_another_version_is_refused_by_its_number() -> None:
    data = bytearray(golden_record().to_bytes())
    data[8] = 7
    with pytest.raises(RecordError, match="format version 7, this program reads 1"):
        Record.from_bytes(data)


@pytest.mark.parametrize(
    ("name", "value"),
    [
        ("lower", np.zeros(2)),
        ("coefficients", np.zeros((3, 4))),
        ("left_lump", np.zeros(2)),
        ("layer", np.zeros(3)),
        ("degrees", np.array([-1, 4])),
        ("edges", np.array([1.0, 1.0, 4.0])),
        ("p", np.ones(2)),
        ("joints", np.zeros((1, 3))),
        ("geometry", 3),
    ],
)
def test_parts_that_do_not_fit_are_refused_by_name(name: str, value: object) -> None:
    with pytest.raises(RecordError, match=f"^{name}: "):
        replace(golden_record(), **{name: value})


def test_nan_has_no_place_in_a_header() -> None:
    with pytest.raises(RecordError, match="NaN"):
        replace(golden_record(), rtol=float("nan")).to_bytes()


def test_negative_zero_is_zero() -> None:
    assert replace(golden_record(), rtol=-0.0).to_bytes() == replace(golden_record(), rtol=0.0).to_bytes()
