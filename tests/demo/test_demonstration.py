"""The whole demonstration on the real service, judged by numbers that it did not make itself.

The eigenvalues are compared with those of the finite-volume network's own matrix (NumPy's symmetric solver),
extrapolated from three meshes by Richardson's rule, twice; no modal code has a part in those.
"""

import csv
import io
import json
import re
import subprocess
import sys
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import modewright
from modewright.demo import run_demonstration
from modewright.demo.finite_volume import Network, graded_mesh
from modewright.demo.pipe import BuriedPipe, invented_pipe
from modewright.demo.run import MODES

FILES = {
    "basis.record",
    "coefficients.npz",
    "cooling.png",
    "foam-conductivity.csv",
    "modes.csv",
    "outer-flux.csv",
    "problem.toml",
    "snapshots.npz",
    "summary.json",
}


@dataclass(frozen=True)
class Outcome:
    folder: Path
    text: str
    summary: dict[str, Any]


@pytest.fixture(scope="module")
def outcome(service: modewright.Service, tmp_path_factory: pytest.TempPathFactory) -> Outcome:
    folder = tmp_path_factory.mktemp("demonstration") / "results"
    out = io.StringIO()
    run_demonstration(folder, service.address, out)
    summary = json.loads((folder / "summary.json").read_text(encoding="utf-8"))
    return Outcome(folder, out.getvalue(), summary)


def cut_at_table_points(pipe: BuriedPipe) -> BuriedPipe:
    """The same pipe with a layer for each interval of a table: cells never straddle a kink of it."""
    layers = []
    for layer in pipe.layers:
        if isinstance(layer.conductivity, float):
            layers.append(layer)
            continue
        pairs = list(zip(layer.conductivity[:-1], layer.conductivity[1:], strict=True))
        contacts = [0.0] * (len(pairs) - 1) + [layer.contact]
        layers += [
            replace(layer, inner=pair[0][0], outer=pair[1][0], conductivity=pair, contact=contact)
            for pair, contact in zip(pairs, contacts, strict=True)
        ]
    return replace(pipe, layers=tuple(layers))


def network_eigenvalues(cells: int, count: int) -> np.ndarray:
    pipe = cut_at_table_points(invented_pipe())
    network = Network.of(pipe, graded_mesh(pipe.layers, [cells] * len(pipe.layers)), pipe.still_film)
    # Entry (i, j) of the inverse is the resistance from the outer one of the two to the soil: no
    # cancellation, and the slow modes come out as the largest; the matrix itself has the steel's rates in it.
    to_soil = np.cumsum(1.0 / network.conductances[::-1])[::-1]
    place = np.arange(len(to_soil))
    root = np.sqrt(network.capacities)
    inverse = root[:, None] * to_soil[np.maximum.outer(place, place)] * root
    return np.asarray(1.0 / np.linalg.eigvalsh(inverse)[::-1][:count])


def test_eigenvalues_agree_with_the_extrapolated_network(outcome: Outcome) -> None:
    coarse, middle, fine = (network_eigenvalues(cells, 6) for cells in (24, 48, 96))
    np.testing.assert_allclose(np.log2((coarse - middle) / (middle - fine)), 2.0, atol=0.01)
    fourth = [middle + (middle - coarse) / 3.0, fine + (fine - middle) / 3.0]
    sixth = fourth[1] + (fourth[1] - fourth[0]) / 15.0
    computed = np.array(outcome.summary["eigenvalues_per_s"])[:6]
    # A next extrapolation would change the last by about its 63rd part: 2.5e-11 of the values.
    np.testing.assert_allclose(computed, sixth, rtol=1e-10)


def test_bounds_enclose_and_are_narrow(outcome: Outcome) -> None:
    value, lower, upper = (
        np.array(outcome.summary[name]) for name in ("eigenvalues_per_s", "lower_per_s", "upper_per_s")
    )
    assert len(value) == MODES
    assert np.all(lower <= value)
    assert np.all(value <= upper)
    assert np.all(upper - lower <= 1e-9 * np.maximum(value, value[1]))


def test_modes_agree_with_finite_volumes_within_the_latters_error(outcome: Outcome) -> None:
    summary = outcome.summary
    own = summary["finite_volume_change_on_halving"]
    assert summary["outer_flux_largest_relative_difference"] < own["outer_flux"]
    assert summary["foretold_flux_largest_relative_difference"] < own["outer_flux"]
    assert summary["foretold_water_largest_difference_K"] < own["water_K"]
    assert summary["relative_residual_largest"] < 1e-4


def test_shares_add_up(outcome: Outcome) -> None:
    shares = np.array(outcome.summary["share_of_first_snapshot"])
    left = np.array(outcome.summary["share_left_after_mode"])
    np.testing.assert_allclose(np.cumsum(shares) + left, 1.0, rtol=0.0, atol=1e-9)
    assert np.all(np.diff(left) < 0.0)
    assert outcome.summary["captured_share_smallest"] > 0.999


def test_tables_are_printed_and_written(outcome: Outcome) -> None:
    with (outcome.folder / "modes.csv").open(encoding="utf-8") as handle:
        rows = list(csv.DictReader(handle))
    assert [int(row["n"]) for row in rows] == list(range(MODES))
    assert float(rows[0]["1/lambda [h]"]) == pytest.approx(outcome.summary["time_constants_h"][0], rel=1e-4)
    for row in rows:
        assert row["lower bound [1/s]"] in outcome.text
    with (outcome.folder / "outer-flux.csv").open(encoding="utf-8") as handle:
        assert len(list(csv.DictReader(handle))) == outcome.summary["snapshots"]


def printed_tables(text: str) -> dict[tuple[str, str], str]:
    """(first cell of the row, heading) -> cell, for every table in the text; the first of equal headings."""
    cells: dict[tuple[str, str], str] = {}
    headings: list[str] = []
    for line in text.splitlines():
        row = re.split(r"\s{2,}", line.strip())
        if "  " in line.strip() and row[0] in ("n", "time [h]"):
            headings = row
        elif len(row) == len(headings) and re.fullmatch(r"[\d.]+", row[0]):
            for heading, cell in zip(headings, row, strict=True):
                cells.setdefault((row[0], heading), cell)
    return cells


def test_the_readme_shows_what_is_printed(outcome: Outcome) -> None:
    readme = Path(__file__).resolve().parents[2] / "README.md"
    shown = printed_tables(readme.read_text(encoding="utf-8"))
    printed = printed_tables(outcome.text)
    # Differences between two programs that agree to many digits are noise in their last ones.
    compared = {key: cell for key, cell in shown.items() if key[1] not in ("difference", "share")}
    assert len(compared) > 30
    for key, cell in compared.items():
        assert float(cell) == pytest.approx(float(printed[key]), rel=1e-6), key


def test_cautions_are_printed_and_written(outcome: Outcome) -> None:
    for text in (outcome.text.replace("\n", " "), outcome.summary["caution"]):
        assert "not a design approval" in text
        assert "local codes and licensed practice decide" in text
        assert "invented" in text


def test_every_file_is_there(outcome: Outcome) -> None:
    assert {path.name for path in outcome.folder.iterdir()} == FILES
    assert (outcome.folder / "cooling.png").read_bytes().startswith(b"\x89PNG\r\n\x1a\n")


def test_the_written_files_do_the_job_again(
    outcome: Outcome, service: modewright.Service, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """Document, snapshots and coefficients fit the command line as they are."""
    from modewright.cli import main

    out = tmp_path / "coefficients.npz"
    given = ["project", str(outcome.folder / "problem.toml"), "--modes", str(MODES)]
    given += [
        "--snapshots",
        str(outcome.folder / "snapshots.npz"),
        "-o",
        str(out),
        "--service",
        service.address,
    ]
    assert main(given) == 0, capsys.readouterr().err
    with np.load(out) as again, np.load(outcome.folder / "coefficients.npz") as first:
        np.testing.assert_array_equal(again["coefficients"], first["coefficients"])
        assert str(again["basis_key"]) == str(first["basis_key"])


def test_the_saved_basis_needs_no_service(outcome: Outcome) -> None:
    basis = modewright.load_basis(outcome.folder / "basis.record")
    pipe = invented_pipe()
    flux = basis.modes(np.array([pipe.outer_radius]), quantity="flux-density", side="left")[:, 0]
    value = basis.modes(np.array([pipe.outer_radius]), side="left")[:, 0]
    # The film's own law, -k u' = h u at the casing, which no part of the demonstration imposes on the modes.
    np.testing.assert_allclose(flux, pipe.soil_film * value, rtol=1e-6)


def test_without_matplotlib_it_says_so_and_goes_on(service: modewright.Service, tmp_path: Path) -> None:
    script = (
        "import sys\n"
        "sys.modules['matplotlib'] = None\n"
        "from modewright.cli import main\n"
        "sys.exit(main(sys.argv[1:]))\n"
    )
    arguments = ["demo", "--output", str(tmp_path / "out"), "--service", service.address]
    done = subprocess.run(
        [sys.executable, "-c", script, *arguments], capture_output=True, text=True, check=False
    )
    assert done.returncode == 0, done.stderr
    assert "No picture: matplotlib is not installed" in done.stdout
    assert {path.name for path in (tmp_path / "out").iterdir()} == FILES - {"cooling.png"}
