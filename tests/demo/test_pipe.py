"""The demonstration's pipe: its shape factor against another implementation, its document."""

import csv
import math
import tomllib
from dataclasses import replace
from pathlib import Path

import ht
import pytest

from modewright.demo.pipe import invented_pipe, shape_factor, write_documents


@pytest.mark.parametrize(
    ("depth", "diameter"), [(0.9, 0.25), (0.6, 0.11), (2.0, 1.2), (100.0, 1.0), (0.51, 1.0)]
)
def test_shape_factor_agrees_with_the_general_purpose_library(depth: float, diameter: float) -> None:
    # The `ht` package, which cites Kreith, Manglik, Bohn and Bergman, Lavine, Incropera, DeWitt.
    assert shape_factor(depth, diameter) == pytest.approx(
        ht.conduction.S_isothermal_pipe_to_plane(D=diameter, Z=depth, L=1.0), rel=1e-13
    )


def test_shape_factor_of_a_deep_pipe_is_the_logarithm() -> None:
    # Incropera & DeWitt, same table: S = 2 pi L / ln(4 z / D) for z > 3 D / 2.
    assert shape_factor(50.0, 0.2) == pytest.approx(2.0 * math.pi / math.log(4.0 * 50.0 / 0.2), rel=1e-6)


@pytest.mark.parametrize(
    ("depth", "diameter"), [(0.1, 0.25), (0.125, 0.25), (1.0, 0.0), (1.0, -1.0), (math.nan, 1.0)]
)
def test_shape_factor_refuses_a_pipe_that_is_not_buried(depth: float, diameter: float) -> None:
    with pytest.raises(ValueError, match="depth"):
        shape_factor(depth, diameter)


def test_soil_film_carries_the_shape_factors_heat() -> None:
    pipe = invented_pipe()
    flow = pipe.soil_film * 2.0 * math.pi * pipe.outer_radius
    expected = pipe.soil_conductivity * ht.conduction.S_isothermal_pipe_to_plane(
        D=2.0 * pipe.outer_radius, Z=pipe.depth + pipe.soil_conductivity / pipe.ground_film, L=1.0
    )
    assert flow == pytest.approx(expected, rel=1e-13)


def test_ground_film_vanishes_when_it_is_large() -> None:
    pipe = replace(invented_pipe(), ground_film=1e12)
    assert pipe.effective_depth == pytest.approx(pipe.depth, rel=1e-11)


def test_water_stores_what_its_disc_stores() -> None:
    pipe = invented_pipe()
    r = pipe.inner_radius
    assert pipe.water_mass * 2.0 * math.pi * r == pytest.approx(
        pipe.water_heat_capacity * math.pi * r * r, rel=1e-14
    )


def test_document_holds_the_pipe(tmp_path: Path) -> None:
    pipe = invented_pipe()
    document = tomllib.loads(write_documents(pipe, tmp_path).read_text(encoding="utf-8"))
    stack = document["stack"]
    assert stack["geometry"] == "cylindrical"
    assert stack["start"] == pipe.inner_radius
    assert stack["inner"] == {"kind": "lump", "mass": pipe.water_mass, "resistance": 1.0 / pipe.still_film}
    assert stack["outer"] == {"kind": "film", "film": pipe.soil_film}
    assert [layer["name"] for layer in stack["layers"]] == ["steel", "foam", "casing"]
    assert [layer["thickness"] for layer in stack["layers"]] == [0.004, 0.037, 0.004]
    assert stack["layers"][0]["contact_resistance"] == 2.0e-3
    table = stack["layers"][1]["conductivity"]
    with (tmp_path / table["file"]).open(encoding="utf-8") as handle:
        rows = [tuple(map(float, row.values())) for row in csv.DictReader(handle)]
    assert tuple(rows) == pipe.layers[1].conductivity


def test_foam_table_covers_the_foam() -> None:
    foam = invented_pipe().layers[1]
    assert isinstance(foam.conductivity, tuple)
    assert foam.conductivity[0][0] == foam.inner
    assert foam.conductivity[-1][0] == foam.outer
