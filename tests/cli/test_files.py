"""File layouts of the command line: what goes in comes back, and what is wrong is named with its place."""

from pathlib import Path

import numpy as np
import pytest

from modewright.cli.files import (
    InputFileError,
    read_coefficients,
    read_points,
    read_snapshots,
    write_arrays,
    write_table,
)


def written(path: Path, text: str) -> Path:
    path.write_text(text, encoding="utf-8")
    return path


def test_points_and_snapshots_from_csv(tmp_path: Path) -> None:
    path = written(tmp_path / "u.csv", "x,morning,evening\n0,1,4\n0.5,2,5\n\n1,3,6\n")
    snapshots = read_snapshots(path)
    np.testing.assert_array_equal(snapshots.x, [0.0, 0.5, 1.0])
    np.testing.assert_array_equal(snapshots.values, [[1.0, 2.0, 3.0], [4.0, 5.0, 6.0]])
    assert snapshots.edges is None


def test_points_may_be_any_named_column(tmp_path: Path) -> None:
    path = written(tmp_path / "u.csv", "first,depth\n10,0\n20,1\n")
    snapshots = read_snapshots(path, x="depth")
    np.testing.assert_array_equal(snapshots.x, [0.0, 1.0])
    np.testing.assert_array_equal(snapshots.values, [[10.0, 20.0]])


def test_headless_csv_has_the_points_first(tmp_path: Path) -> None:
    snapshots = read_snapshots(written(tmp_path / "u.csv", "0,7\n1,8\n"))
    np.testing.assert_array_equal(snapshots.x, [0.0, 1.0])
    np.testing.assert_array_equal(snapshots.values, [[7.0, 8.0]])


def test_cell_averages_from_csv(tmp_path: Path) -> None:
    path = written(tmp_path / "cells.csv", "start,end,u\n0,0.25,1\n0.25,1,2\n")
    snapshots = read_snapshots(path)
    np.testing.assert_array_equal(snapshots.edges, [0.0, 0.25, 1.0])
    np.testing.assert_array_equal(snapshots.values, [[1.0, 2.0]])


def test_snapshots_from_npz_keep_every_array(tmp_path: Path) -> None:
    path = tmp_path / "u.npz"
    values = np.arange(12.0).reshape(2, 2, 3)
    write_arrays(
        path,
        {"values": values, "edges": [0, 1, 2, 3], "measure": "cylindrical", "left_lump": np.ones((2, 2))},
    )
    snapshots = read_snapshots(path)
    np.testing.assert_array_equal(snapshots.values, values)
    np.testing.assert_array_equal(snapshots.edges, [0, 1, 2, 3])
    assert snapshots.measure == "cylindrical"
    assert snapshots.arrays["left_lump"].shape == (2, 2)


def test_renamed_arrays(tmp_path: Path) -> None:
    path = tmp_path / "u.npz"
    write_arrays(path, {"T": np.ones((4, 5)), "r": np.linspace(0, 1, 5)})
    snapshots = read_snapshots(path, values="T", x="r")
    assert snapshots.values.shape == (4, 5)
    assert snapshots.x is not None
    assert snapshots.x.shape == (5,)


def test_table_brings_every_digit_back(tmp_path: Path) -> None:
    numbers = np.array([0.1, 1.0 / 3.0, 1e-300, np.pi * 1e17])
    write_table(tmp_path / "t.csv", ("x", "u"), (numbers, -numbers))
    snapshots = read_snapshots(tmp_path / "t.csv")
    np.testing.assert_array_equal(snapshots.x, numbers)
    np.testing.assert_array_equal(snapshots.values, [-numbers])


def test_coefficients_from_both_kinds_of_file(tmp_path: Path) -> None:
    rows = np.array([[1.0, 2.0, 3.0], [4.0, 5.0, 6.0]])
    write_table(tmp_path / "c.csv", ("snapshot", "captured", "c0", "c1", "c2"), ([0, 1], [1, 1], *rows.T))
    np.testing.assert_array_equal(read_coefficients(tmp_path / "c.csv").values, rows)
    write_arrays(
        tmp_path / "c.npz", {"coefficients": rows, "problem_digest": "ab", "basis_key": "cd", "rtol": 1e-9}
    )
    read = read_coefficients(tmp_path / "c.npz")
    np.testing.assert_array_equal(read.values, rows)
    assert (read.problem_digest, read.basis_key, read.rtol) == ("ab", "cd", 1e-9)


def test_points_alone(tmp_path: Path) -> None:
    np.testing.assert_array_equal(read_points(written(tmp_path / "x.csv", "x\n1\n2\n")), [1.0, 2.0])
    write_arrays(tmp_path / "x.npz", {"x": [3.0, 4.0]})
    np.testing.assert_array_equal(read_points(tmp_path / "x.npz"), [3.0, 4.0])


BAD_TABLES = {
    "word": ("x,u\n0,1\n1,warm\n", r"row 3, column 'u': 'warm' is not a number"),
    "short row": ("x,u\n0,1\n1\n", r"row 3 has 1 columns, the first row has 2"),
    "no points": ("r,u\n0,1\n", r"no column 'x'; it has r, u"),
    "gap": ("start,end,u\n0,1,5\n1.5,2,6\n", r"cell 2 starts at 1\.5, the one before ends at 1\.0"),
    "empty": ("", r"is empty"),
    "header alone": ("x,u\n", r"header but no rows"),
    "no values": ("x\n0\n1\n", r"no column of values"),
}


@pytest.mark.parametrize("name", BAD_TABLES)
def test_bad_tables_are_named_with_their_place(tmp_path: Path, name: str) -> None:
    text, message = BAD_TABLES[name]
    path = written(tmp_path / "bad.csv", text)
    with pytest.raises(InputFileError, match=message) as caught:
        read_snapshots(path)
    assert str(path) in str(caught.value)


def test_binary_rubbish(tmp_path: Path) -> None:
    rubbish = bytes(range(256))
    (tmp_path / "bad.npz").write_bytes(rubbish)
    with pytest.raises(InputFileError, match="NPZ"):
        read_snapshots(tmp_path / "bad.npz")
    (tmp_path / "bad.csv").write_bytes(rubbish)
    with pytest.raises(InputFileError, match="CSV"):
        read_snapshots(tmp_path / "bad.csv")


def test_archive_cut_short(tmp_path: Path) -> None:
    write_arrays(tmp_path / "whole.npz", {"values": np.ones(500), "x": np.arange(500.0)})
    (tmp_path / "cut.npz").write_bytes((tmp_path / "whole.npz").read_bytes()[:900])
    with pytest.raises(InputFileError, match="NPZ"):
        read_snapshots(tmp_path / "cut.npz")


def test_pickled_objects_are_not_loaded(tmp_path: Path) -> None:
    np.savez(tmp_path / "o.npz", values=np.array([{"a": 1}], dtype=object), x=np.arange(1.0))
    with pytest.raises(InputFileError, match=r"[Oo]bject"):
        read_snapshots(tmp_path / "o.npz")


def test_one_array_is_no_archive(tmp_path: Path) -> None:
    path = tmp_path / "one.npz"
    with path.open("wb") as handle:
        np.save(handle, np.ones(3))
    with pytest.raises(InputFileError, match="one array"):
        read_snapshots(path)


@pytest.mark.parametrize(
    ("arrays", "message"),
    [
        ({"x": [0.0]}, r"no array 'values'; it has x"),
        ({"values": [0.0]}, r"neither points 'x' nor cell edges 'edges'; it has values"),
        ({"values": [0.0], "x": [0.0], "edges": [0.0, 1.0]}, r"both points 'x' and cell edges 'edges'"),
    ],
)
def test_archives_that_lack_or_confuse_arrays(
    tmp_path: Path, arrays: dict[str, list[float]], message: str
) -> None:
    write_arrays(tmp_path / "a.npz", arrays)
    with pytest.raises(InputFileError, match=message):
        read_snapshots(tmp_path / "a.npz")


def test_other_kinds_of_file_are_refused(tmp_path: Path) -> None:
    with pytest.raises(InputFileError, match=r"must end in \.npz or \.csv, not '\.xls'"):
        read_snapshots(tmp_path / "u.xls")


@pytest.mark.parametrize("text", ["x,u\n0,1\n", "snapshot,captured\n0,1\n"])
def test_table_without_coefficients(tmp_path: Path, text: str) -> None:
    with pytest.raises(InputFileError, match="no columns c0"):
        read_coefficients(written(tmp_path / "c.csv", text))


def test_coefficients_need_an_axis(tmp_path: Path) -> None:
    write_arrays(tmp_path / "c.npz", {"coefficients": 3.0})
    with pytest.raises(InputFileError, match=r"shape \(\)"):
        read_coefficients(tmp_path / "c.npz")
