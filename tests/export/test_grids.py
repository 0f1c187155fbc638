import re
from pathlib import Path

import netCDF4
import numpy as np
import pytest
import rasterio
import xarray as xr

from gradred import survey
from gradred.errors import SurveyError
from gradred.export.grids import GridSettings, georeference, maps_of, write_grids
from tests.export.parts import grid_of, lines_of
from tests.synthetic import EAST, NORTH

SIX = ("xx", "xy", "xz", "yy", "yz", "zz")


def udunits(text: str) -> tuple[float, dict[str, int]]:
    """Return the factor and the powers of a unit as UDUNITS-2 reads it: '1e-9 s-2'."""
    factor, powers = 1.0, {}
    for word in text.split():
        if re.fullmatch(r"[0-9.]+(e[-+]?[0-9]+)?", word):
            factor *= float(word)
            continue
        match = re.fullmatch(r"(kg|m|s|degree|rad)(-?[0-9]+)?", word)
        assert match is not None, text
        powers[match[1]] = int(match[2] or 1)
    return factor, powers


def test_every_cell_lies_at_its_easting_and_northing(tmp_path: Path) -> None:
    grid = grid_of()
    write_grids(grid, GridSettings(), tmp_path)
    x, y = np.meshgrid(grid["easting"].to_numpy(), grid["northing"].to_numpy())
    names = {f"{name}_{c}" for name in ("gradient", "sigma") for c in SIX} | {"gz", "invariant_2"}
    assert {path.stem for path in (tmp_path / "grids").iterdir()} == names
    for name, values in maps_of(grid).items():
        with rasterio.open(tmp_path / "grids" / f"{name}.tif") as raster:
            seen = [value[0] for value in raster.sample(zip(x.ravel(), y.ravel(), strict=True))]
        there = np.isfinite(values.to_numpy().ravel())
        # single precision: 24 bits
        np.testing.assert_allclose(
            np.array(seen)[there], values.to_numpy().ravel()[there], rtol=6e-8
        )
        assert set(np.array(seen)[~there]) == {-9999.0}


def test_a_geotiff_tells_where_it_lies_and_what_it_holds(tmp_path: Path) -> None:
    grid = grid_of().assign_attrs(record='[{"stage": "map_field"}]')
    write_grids(grid, GridSettings(), tmp_path)
    told = {
        "gradient_xy": ("E", "gradient_xy: mapped gradient tensor"),
        "gz": ("mGal", "gz: mapped vertical attraction, positive down"),
        "invariant_2": ("E3", "invariant_2: determinant I2 of the tensor"),
    }
    for name, (unit, words) in told.items():
        with rasterio.open(tmp_path / "grids" / f"{name}.tif") as raster:
            # corner of the north-western cell, half a cell beyond its centre
            assert raster.transform.to_gdal() == (
                EAST - 50.0, 100.0, 0.0, NORTH + 200.0 + 25.0, 0.0, -50.0
            )  # fmt: skip
            assert (raster.width, raster.height, raster.count) == (7, 5, 1)
            assert raster.bounds == (EAST - 50.0, NORTH - 25.0, EAST + 650.0, NORTH + 225.0)
            assert raster.crs.to_epsg() == 32633
            assert raster.nodata == -9999.0
            assert raster.units == (unit,)
            assert raster.descriptions == (words,)
            assert raster.tags()["frame"] == "grid"
            assert raster.tags()["record"] == '[{"stage": "map_field"}]'
            # the missing cell: second row and third column from the south-west
            assert raster.index(EAST + 200.0, NORTH + 50.0) == (3, 2)
            missing = raster.read_masks(1) == 0
            expected = np.zeros((5, 7), dtype=bool)
            expected[3, 2] = True
            np.testing.assert_array_equal(missing, expected)


def test_the_transform_turns_cells_into_places() -> None:
    transform = georeference(grid_of())
    assert transform @ (0.5, 0.5) == (EAST, NORTH + 200.0)
    assert transform @ (6.5, 4.5) == (EAST + 600.0, NORTH)


def test_udunits_finds_the_size_of_every_unit(tmp_path: Path) -> None:
    grid = survey.put("grid", grid_of(), "surface", np.full((5, 7), 300.0))
    grid = survey.put("grid", grid, "invariant_1", np.ones((5, 7)))
    grid = survey.put("grid", grid, "tilt", np.ones((5, 7)))
    grid = survey.put("grid", grid, "dimensionality", np.ones((5, 7)))
    write_grids(grid, GridSettings(geotiff=False), tmp_path)
    # 1 E = 1e-9 s-2, 1 mGal = 1e-5 m s-2
    told = {
        "gradient": (1e-9, {"s": -2}),
        "sigma": (1e-9, {"s": -2}),
        "invariant_1": (1e-18, {"s": -4}),
        "invariant_2": (1e-27, {"s": -6}),
        "gz": (1e-5, {"m": 1, "s": -2}),
        "surface": (1.0, {"m": 1}),
        "tilt": (1.0, {"degree": 1}),
        "dimensionality": (1.0, {}),
        "easting": (1.0, {"m": 1}),
    }
    with netCDF4.Dataset(tmp_path / "grid.nc") as stored:
        for name, expected in told.items():
            assert udunits(stored[name].units) == expected, name
        assert stored["gradient"].units == "1e-9 s-2"
        assert stored["gradient"].dimensions == ("northing", "easting", "component")
        assert list(stored["component"][:]) == list(SIX)
        assert stored.Conventions == "CF-1.11"
        assert stored.crs_wkt.startswith('PROJCRS["WGS 84 / UTM zone 33N"')
        values = np.ma.filled(stored["gradient"][:], np.nan)
    np.testing.assert_array_equal(values, grid["gradient"])


def test_what_was_written_opens_again_as_it_was(tmp_path: Path) -> None:
    write_grids(grid_of(), GridSettings(geotiff=False), tmp_path)
    part, stored = survey.open_part(tmp_path / "grid.nc")
    assert part == "grid"
    xr.testing.assert_identical(stored.drop_attrs(deep=False), grid_of().drop_attrs(deep=False))
    assert stored.attrs["crs"] == "EPSG:32633"


def test_equal_grids_give_equal_bytes_and_stay_as_they_are(tmp_path: Path) -> None:
    grid = grid_of()
    before = grid.copy(deep=True)
    for name in ("a", "b"):
        (tmp_path / name).mkdir()
        write_grids(grid, GridSettings(), tmp_path / name)
    xr.testing.assert_identical(grid, before)
    for path in (tmp_path / "a").rglob("*.*"):
        other = tmp_path / "b" / path.relative_to(tmp_path / "a")
        assert path.read_bytes() == other.read_bytes(), path.name


def test_without_geotiff_there_is_one_file(tmp_path: Path) -> None:
    made = write_grids(grid_of(), GridSettings(geotiff=False), tmp_path)
    assert made == list(tmp_path.iterdir()) == [tmp_path / "grid.nc"]


def test_another_part_and_a_grid_without_a_field_are_refused(tmp_path: Path) -> None:
    with pytest.raises(SurveyError) as caught:
        write_grids(lines_of(3), GridSettings(), tmp_path)
    assert str(caught.value) == (
        "SurveyError: this is the part 'lines', not 'grid'\n"
        "  where: going into stage write_grids\n"
        "  cure:  hand over the grid"
    )
    with pytest.raises(SurveyError) as caught:
        write_grids(grid_of().drop_vars("gradient"), GridSettings(), tmp_path)
    assert str(caught.value) == (
        "SurveyError: the grid lack gradient\n"
        "  where: going into stage write_grids\n"
        "  cure:  deliver it, or put the stage that makes it before this one"
    )
    assert not list(tmp_path.iterdir())


def test_a_general_library_finds_the_place_of_the_netcdf(tmp_path: Path) -> None:
    write_grids(grid_of(), GridSettings(geotiff=False), tmp_path)
    # GDAL's netCDF driver goes by the grid mapping and the axes of CF, section 5.6
    with rasterio.open(f"netcdf:{tmp_path / 'grid.nc'}:gz") as raster:
        assert raster.crs.to_epsg() == 32633
        assert raster.transform.almost_equals(georeference(grid_of()))
    with netCDF4.Dataset(tmp_path / "grid.nc") as stored:
        assert stored["gradient"].grid_mapping == "crs"
        assert stored["easting"].standard_name == "projection_x_coordinate"
        assert stored["crs"].grid_mapping_name == "transverse_mercator"
