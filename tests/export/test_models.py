from pathlib import Path

import netCDF4
import numpy as np
import pandas as pd
import pytest
import xarray as xr

from gradred import survey
from gradred.errors import SurveyError
from gradred.export.models import ModelSettings, body_table, write_model
from gradred.inversion.cautions import CAUTION
from tests.export.parts import grid_of, model_of
from tests.synthetic import EAST, NORTH


def test_every_parameter_of_a_body_has_its_row() -> None:
    table = body_table(model_of())
    # five of the sphere, seven of the prism; the places left empty make no row
    assert list(table["body"]) == [1] * 5 + [2] * 7
    assert list(table["kind"]) == ["sphere"] * 5 + ["prism"] * 7
    assert list(table["parameter"][5:]) == [
        "easting", "northing", "top", "width", "length", "extent", "density"
    ]  # fmt: skip
    assert list(table["unit"]) == (["m"] * 4 + ["kg/m3"]) + (["m"] * 6 + ["kg/m3"])
    held = table[table["from"] == "held"]
    assert list(zip(held["body"], held["parameter"], strict=True)) == [
        (1, "radius"),
        (2, "extent"),
    ]
    assert (held["standard_error"] == 0.0).all()


def test_the_table_of_bodies_opens_under_its_caution(tmp_path: Path) -> None:
    write_model(model_of(), ModelSettings(), tmp_path)
    first, rest = (tmp_path / "bodies.csv").read_text(encoding="utf-8").split("\n", 1)
    assert first == f"# {CAUTION}"
    for word in ("not unique", "Not for navigation", "dig", "licensed practice"):
        assert word in first
    assert rest.startswith("body,kind,parameter,unit,value,standard_error,from\n")
    table = pd.read_csv(tmp_path / "bodies.csv", comment="#")
    assert len(table) == 12
    # printed to three decimals
    assert table["value"][4] == 450.123
    assert table["value"][0] == EAST + 120.0


def test_the_voxels_are_cf_with_place_and_unit(tmp_path: Path) -> None:
    write_model(model_of(), ModelSettings(), tmp_path)
    with netCDF4.Dataset(tmp_path / "model.nc") as stored:
        assert stored["voxel_density"].units == "kg m-3"
        assert stored["voxel_top"].units == "m"
        assert stored["voxel_density"].dimensions == ("layer", "cell_northing", "cell_easting")
        np.testing.assert_array_equal(stored["cell_easting"][:], EAST + 100.0 * np.arange(4.0))
        np.testing.assert_array_equal(stored["cell_northing"][:], NORTH + 100.0 * np.arange(3.0))
        assert stored["voxel_density"][1, 2, 3] == 120.0
        assert stored.caution == CAUTION
        assert stored.crs == "EPSG:32633"
        assert stored.Conventions == "CF-1.11"
    part, again = survey.open_part(tmp_path / "model.nc")
    assert part == "model"
    xr.testing.assert_equal(again, model_of())


def test_a_model_without_bodies_has_no_table(tmp_path: Path) -> None:
    bodies = [name for name in model_of().data_vars if str(name).startswith("body_")]
    made = write_model(model_of().drop_vars(bodies), ModelSettings(), tmp_path)
    assert made == list(tmp_path.iterdir()) == [tmp_path / "model.nc"]


def test_equal_models_give_equal_bytes_and_stay_as_they_are(tmp_path: Path) -> None:
    model = model_of()
    before = model.copy(deep=True)
    for name in ("a", "b"):
        (tmp_path / name).mkdir()
        write_model(model, ModelSettings(), tmp_path / name)
    body_table(model)
    xr.testing.assert_identical(model, before)
    for name in ("model.nc", "bodies.csv"):
        assert (tmp_path / "a" / name).read_bytes() == (tmp_path / "b" / name).read_bytes()


def test_another_part_is_refused(tmp_path: Path) -> None:
    with pytest.raises(SurveyError) as caught:
        write_model(grid_of(), ModelSettings(), tmp_path)
    assert str(caught.value) == (
        "SurveyError: this is the part 'grid', not 'model'\n"
        "  where: going into stage write_model\n"
        "  cure:  hand over the model"
    )
