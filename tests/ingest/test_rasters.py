"""Terrain models: heights arrive as they are, or are turned, filled or refused as stated."""

import tempfile
from pathlib import Path
from typing import Any

import numpy as np
import pyproj
import pytest
import xarray as xr
from hypothesis import given
from hypothesis import settings as budget
from hypothesis import strategies as st
from rasterio.transform import Affine

from gradred import survey
from gradred.errors import ReadingsError
from gradred.ingest.positions import between_maps
from gradred.ingest.rasters import read_terrain
from tests.ingest.deliveries import message
from tests.ingest.terrain_files import Array, geotiff, hills, settings


def refusal(path: Path, **changes: Any) -> str:
    with pytest.raises(ReadingsError) as caught:
        read_terrain(settings(path, **changes))
    return str(caught.value)


def test_a_model_on_the_survey_crs_is_passed_through_bit_by_bit(tmp_path: Path) -> None:
    heights = hills()
    terrain = read_terrain(settings(geotiff(tmp_path / "t.tif", heights)))
    np.testing.assert_array_equal(terrain["height"], heights)
    np.testing.assert_array_equal(terrain["easting"], 500_050.0 + 100.0 * np.arange(40))
    np.testing.assert_array_equal(terrain["northing"], 5_207_050.0 + 100.0 * np.arange(30))
    assert terrain["height"].attrs["missing_cells"] == 0


def test_a_model_with_row_0_in_the_south_is_the_same(tmp_path: Path) -> None:
    turned = Affine(100.0, 0.0, 500_000.0, 0.0, 100.0, 5_207_000.0)
    path = geotiff(tmp_path / "s.tif", hills()[::-1], transform=turned)
    expected = read_terrain(settings(geotiff(tmp_path / "t.tif", hills())))
    xr.testing.assert_equal(read_terrain(settings(path)), expected)


def test_feet_and_a_separation(tmp_path: Path) -> None:
    path = geotiff(tmp_path / "t.tif", hills() / 0.3048, unit="ft")
    terrain = read_terrain(
        settings(path, unit="ft", height_reference="orthometric", separation=-33.5)
    )
    # one division and one multiplication: two roundings
    np.testing.assert_allclose(terrain["height"], hills() - 33.5, rtol=4e-16, atol=1e-12)
    assert terrain["height"].attrs["separation"] == -33.5
    assert refusal(path) == message(
        "the file says its heights are in 'ft', not 'm'",
        "t.tif, stage read_terrain, unit",
        "state the unit that the heights are in, or correct the file",
    )


def test_an_extent_keeps_the_cells_inside(tmp_path: Path) -> None:
    path = geotiff(tmp_path / "t.tif", hills())
    extent = [500_500.0, 5_207_200.0, 501_500.0, 5_208_000.0]
    terrain = read_terrain(settings(path, extent=extent))
    np.testing.assert_array_equal(terrain["height"], hills()[2:10, 5:15])
    assert refusal(path, extent=[499_000.0, 5_207_200.0, 501_500.0, 5_208_000.0]) == message(
        "the extent 499000, 5207200, 501500, 5208000 reaches beyond the terrain model, "
        "500000, 5207000, 504000, 5210000",
        "t.tif, stage read_terrain, extent",
        "state an extent inside the model, or deliver a larger model",
    )


def plane(easting: Array, northing: Array) -> Array:
    return np.asarray(300.0 + 0.01 * (easting - 502_000.0) - 0.02 * (northing - 5_208_000.0))


def test_a_turned_model_keeps_a_plane(tmp_path: Path) -> None:
    # a plane of the survey CRS, delivered in the next zone: bilinear interpolation keeps it, but
    # for the curvature of one map against the other: the scale changes along the 4 km by 1e-5 at
    # 456 km from the meridian, by 1e-7 within a cell of 100 m, whose rise is 2 m
    source, target = pyproj.CRS("EPSG:32632"), pyproj.CRS("EPSG:32633")
    corner = between_maps(np.array([502_000.0]), np.array([5_208_000.0]), target, source)
    west, north = np.round(corner[0][0], -2) - 2000.0, np.round(corner[1][0], -2) + 2000.0
    centres = 100.0 * (np.arange(40) + 0.5)
    x, y = np.meshgrid(west + centres, north - 4000.0 + centres)
    back = between_maps(x.ravel(), y.ravel(), source, target)
    heights = plane(*back).reshape(x.shape)
    path = geotiff(tmp_path / "t.tif", heights, west=west, north=north, crs="EPSG:32632")
    terrain = read_terrain(settings(path, cell=100.0))
    easting, northing = np.meshgrid(terrain["easting"], terrain["northing"])
    inner = terrain["height"].to_numpy()
    np.testing.assert_allclose(inner, plane(easting, northing), atol=1e-6, rtol=0.0)
    assert terrain["height"].attrs["delivered_in"] == "EPSG:32632 (WGS 84 / UTM zone 32N)"
    # the two grids are turned by 2 × 2.2 degrees: 4 km keep more than 3.4 km
    assert min(terrain["height"].shape) >= 34
    assert terrain["height"].attrs["missing_cells"] == 0
    assert refusal(path) == message(
        "the terrain model is in EPSG:32632 (WGS 84 / UTM zone 32N), and must be turned to "
        "EPSG:32633 (WGS 84 / UTM zone 33N)",
        "t.tif, stage read_terrain",
        "state the size of a cell of the turned model, 'cell', in metres",
    )


def test_coarser_cells_keep_the_mean(tmp_path: Path) -> None:
    path = geotiff(tmp_path / "t.tif", hills())
    # 38 × 28 old cells inside the outermost centres; 300 m cells are means of 3 × 3 of them
    extent = [500_100.0, 5_207_100.0, 503_700.0, 5_209_800.0]
    coarse = read_terrain(settings(path, cell=300.0, extent=extent))["height"].to_numpy()
    expected = hills()[1:28, 1:37].reshape(9, 3, 12, 3).mean(axis=(1, 3))
    # the points fall on the old centres: rounding of sums of nine
    np.testing.assert_allclose(coarse, expected, rtol=1e-14)


def test_finer_cells_lie_on_the_surface_between_centres(tmp_path: Path) -> None:
    path = geotiff(tmp_path / "t.tif", hills())
    extent = [500_050.0, 5_207_050.0, 500_250.0, 5_207_150.0]
    fine = read_terrain(settings(path, cell=50.0, extent=extent))["height"].to_numpy()
    h = hills()[:2, :2]
    # a quarter of the way from the first centre, in both directions: weights 9, 3, 3 and 1 of 16
    expected = (9.0 * h[0, 0] + 3.0 * h[0, 1] + 3.0 * h[1, 0] + h[1, 1]) / 16.0
    assert fine.shape == (2, 4)
    assert fine[0, 0] == pytest.approx(expected, rel=1e-14)


def test_an_extent_between_two_cells_is_refused(tmp_path: Path) -> None:
    path = geotiff(tmp_path / "t.tif", hills())
    assert refusal(path, extent=[500_100.0, 5_207_100.0, 500_200.0, 5_208_000.0]) == message(
        "the terrain model has 1 × 9 cells of 100 m",
        "t.tif, stage read_terrain",
        "state a larger extent, or a smaller cell",
    )


def test_a_raster_crs_that_there_is_not(tmp_path: Path) -> None:
    path = geotiff(tmp_path / "t.tif", hills(), crs=None)
    assert refusal(path, raster_crs="EPSG:99999") == message(
        "there is no EPSG:99999",
        "stage read_terrain, raster_crs",
        "look the code up in the EPSG register",
    )
    expected = read_terrain(settings(geotiff(tmp_path / "t.tif", hills())))
    stated = geotiff(tmp_path / "t.tif", hills(), crs=None)
    xr.testing.assert_equal(read_terrain(settings(stated, raster_crs="EPSG:32633")), expected)


def test_degrees_are_turned_to_metres(tmp_path: Path) -> None:
    heights = np.full((40, 40), 123.0)
    path = geotiff(tmp_path / "t.tif", heights, west=15.0, north=47.0, cell=0.001, crs="EPSG:4326")
    terrain = read_terrain(settings(path, cell=90.0))
    # a constant stays one under weights that add up to 1, to the rounding of four of them
    np.testing.assert_allclose(terrain["height"], 123.0, rtol=1e-14)
    # between outermost centres 0.039 degrees: 2.96 km of longitude at latitude 47 (32.9 cells),
    # 4.34 km of latitude (48.2), less up to one cell for the start on a multiple of 90 m
    assert terrain["height"].shape == (47, 32)


def test_missing_cells_are_refused_filled_or_kept(tmp_path: Path) -> None:
    heights = hills()
    heights[3, 4] = heights[3, 5] = -9999.0
    path = geotiff(tmp_path / "t.tif", heights, nodata=-9999.0)
    assert refusal(path) == message(
        "2 cells of 1200 have no height",
        "t.tif",
        "state a smaller 'extent', or fill = 'nearest'",
    )
    kept = read_terrain(settings(path, fill="keep"))["height"]
    assert kept.attrs["missing_cells"] == 2
    assert np.isnan(kept.to_numpy()[3, 4:6]).all()
    filled = read_terrain(settings(path, fill="nearest"))["height"]
    assert (filled.attrs["missing_cells"], filled.attrs["filled_cells"]) == (0, 2)
    assert filled.to_numpy()[3, 4] in (hills()[2, 4], hills()[4, 4], hills()[3, 3])
    untold = geotiff(tmp_path / "untold.tif", heights)
    assert refusal(untold) == message(
        "2 cells of 1200 have heights like -9999 m",
        "untold.tif",
        "if that means no height, state 'nodata' = -9999; else check the unit",
    )
    assert read_terrain(settings(untold, fill="keep", nodata=-9999.0))["height"].identical(
        kept.assign_attrs(source="untold.tif")
    )


@pytest.mark.parametrize(
    ("profile", "what", "where", "cure"),
    [
        (
            {"transform": Affine(90.0, 10.0, 5e5, 10.0, -90.0, 52e5)},
            "the raster is rotated",
            "t.tif, transform (90.0, 10.0, 500000.0, 10.0, -90.0, 5200000.0)",
            "deliver a raster with rows along easting or longitude, georeferenced",
        ),
        (
            {"transform": Affine(-90.0, 0.0, 5e5, 0.0, -90.0, 52e5)},
            "a cell is -90 wide and 90 high",
            "t.tif, transform (-90.0, 0.0, 500000.0, 0.0, -90.0, 5200000.0)",
            "deliver a raster with rows along easting or longitude, georeferenced",
        ),
        (
            {"transform": Affine.identity()},
            "the raster does not tell where it lies",
            "t.tif, transform (1.0, 0.0, 0.0, 0.0, 1.0, 0.0)",
            "deliver a raster with rows along easting or longitude, georeferenced",
        ),
        (
            {"crs": None, "west": 15.0, "north": 47.0, "cell": 0.001},
            "the file does not tell its CRS, and its coordinates look like degrees",
            "t.tif",
            "state it in 'raster_crs', as 'EPSG:4326'",
        ),
        ({"crs": None}, "the file does not tell its CRS", "t.tif", "state it in 'raster_crs'"),
        (
            {"count": 2},
            "the raster has 2 bands",
            "t.tif",
            "state which one holds the heights in 'band'",
        ),
    ],
    ids=["rotated", "mirrored", "no place", "degrees", "no CRS", "bands"],
)
def test_rasters_that_are_no_terrain_model(
    tmp_path: Path, profile: dict[str, Any], what: str, where: str, cure: str
) -> None:
    path = geotiff(tmp_path / "t.tif", hills(), **profile)
    assert refusal(path) == message(what, where, cure)


def test_absurd_heights_and_another_crs_than_stated(tmp_path: Path) -> None:
    path = geotiff(tmp_path / "t.tif", hills() * 1000.0)
    assert refusal(path).splitlines()[0] == (
        "ReadingsError: 1200 cells of 1200 have heights like 320000 m"
    )
    path = geotiff(tmp_path / "t.tif", hills())
    assert refusal(path, raster_crs="EPSG:32632") == message(
        "the file says EPSG:32633 (WGS 84 / UTM zone 33N), but EPSG:32632 (WGS 84 / UTM zone 32N) "
        "is stated",
        "t.tif",
        "leave out 'raster_crs', or correct the file",
    )


@pytest.mark.parametrize("content", [b"", b"II*\0junk", b"CDF\x01junk", b"\x89HDF\r\n\x1a\nx"])
def test_files_that_are_no_raster(tmp_path: Path, content: bytes) -> None:
    (tmp_path / "t.tif").write_bytes(content)
    kind = "NetCDF file" if b"DF" in content else "GeoTIFF"
    told = refusal(tmp_path / "t.tif", variable="height")
    assert told.startswith(f"ReadingsError: is not a {kind} that can be read: ")
    assert told.endswith("  cure:  deliver the terrain model as GeoTIFF or NetCDF")


@given(
    st.sampled_from(["t.tif", "t.nc"]),
    st.lists(st.tuples(st.integers(0, 800), st.integers(0, 255)), min_size=1, max_size=5),
    st.integers(0, 20_000),
)
@budget(deadline=None, max_examples=30)
def test_a_damaged_file_is_read_or_refused(
    name: str, changes: list[tuple[int, int]], cut: int
) -> None:
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / name
        write = geotiff(path, hills(), compress="deflate") if name == "t.tif" else netcdf(path)
        content = bytearray(write.read_bytes())
        for place, value in changes:
            content[place] = value
        path.write_bytes(content[: len(content) - cut])
        try:
            terrain = [read_terrain(settings(path, variable="z", fill="keep"))]
        except ReadingsError:
            terrain = []
        for part in terrain:
            survey.check("terrain", part, ("height",), where="fuzz")


def test_bedrock_on_the_grid_of_the_surface(tmp_path: Path) -> None:
    surface = geotiff(tmp_path / "surface.tif", hills())
    rock = geotiff(tmp_path / "rock.tif", hills() - 40.0)
    terrain = read_terrain(settings(surface, bedrock=rock))
    np.testing.assert_array_equal(terrain["bedrock"], hills() - 40.0)
    high = geotiff(tmp_path / "high.tif", hills() / 0.3048)
    # the highest cell: 349.96 m (1 / 0.3048 - 1)
    assert refusal(surface, bedrock=high).splitlines()[0] == (
        "ReadingsError: the bedrock stands up to 798.3 m above the ground, more than 1 m in "
        "1200 cells of 1200"
    )
    small = geotiff(tmp_path / "small.tif", hills(20, 40))
    assert refusal(surface, bedrock=small) == message(
        "the bedrock's grid of 40 × 20 cells is not the grid of the surface, 40 × 30 cells",
        "small.tif beside surface.tif",
        "resample the bedrock to the cells of the surface",
    )


def netcdf(path: Path, **changes: Any) -> Path:
    """Write hills as a CF grid, rows from north to south."""
    x, y = 500_050.0 + 100.0 * np.arange(40), 5_207_050.0 + 100.0 * np.arange(30)
    grid = xr.Dataset(
        {"z": (("y", "x"), hills()[::-1], {"units": "m", "grid_mapping": "map"}), "map": 0},
        {
            "y": ("y", y[::-1], {"standard_name": "projection_y_coordinate", "units": "m"}),
            "x": ("x", x, {"standard_name": "projection_x_coordinate", "units": "m"}),
        },
    )
    grid["map"].attrs = pyproj.CRS("EPSG:32633").to_cf()
    grid.assign_coords(**changes).to_netcdf(path, engine="h5netcdf")
    return path


def test_netcdf_by_its_cf_coordinates(tmp_path: Path) -> None:
    terrain = read_terrain(settings(netcdf(tmp_path / "t.nc"), variable="z"))
    expected = read_terrain(settings(geotiff(tmp_path / "t.tif", hills())))
    xr.testing.assert_equal(terrain, expected)


def test_netcdf_that_is_no_even_grid(tmp_path: Path) -> None:
    path = netcdf(tmp_path / "t.nc")
    assert refusal(path) == message("no variable is stated", "t.nc", "write one of: z")
    assert refusal(path, variable="zz") == message(
        "there is no grid 'zz'", "t.nc", "did you mean 'z'?"
    )
    uneven = netcdf(tmp_path / "u.nc", x=500_050.0 + 100.0 * np.arange(40) ** 1.1)
    assert refusal(uneven, variable="z").startswith(
        "ReadingsError: the coordinate x is not evenly spaced: "
    )
