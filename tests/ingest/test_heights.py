"""Stations against the terrain model: coverage, datum and unit, each slip named."""

from pathlib import Path
from typing import Any

import numpy as np
import pytest
import xarray as xr
from hypothesis import given
from hypothesis import settings as budget
from hypothesis import strategies as st

from gradred import survey
from gradred.errors import ReadingsError
from gradred.ingest.heights import HeightSettings, check_heights, compare_heights, terrain_below
from gradred.ingest.positions import projected_crs, to_geographic
from gradred.ingest.rasters import read_terrain
from tests.ingest.deliveries import message
from tests.ingest.terrain_files import CRS, geotiff, hills, settings
from tests.synthetic import lines_part, pattern

LIMITS = HeightSettings()


def terrain_part(folder: Path, factor: float = 1.0, **stated: Any) -> xr.Dataset:
    path = geotiff(folder / "t.tif", factor * hills(), west=350_000.0, north=5_303_000.0)
    terrain: xr.Dataset = read_terrain(settings(path, **stated))
    return terrain


def lines_over(terrain: xr.Dataset, seed: int = 1) -> xr.Dataset:
    """Return 1342 stations 60 m above the model, with 1 m of noise in the clearance."""
    flight = pattern()
    lines = lines_part(flight, np.zeros((len(flight.line), 6)))
    crs = projected_crs(CRS, where="here")
    places = to_geographic(flight.easting, flight.northing, crs)
    for name, values in zip(("longitude", "latitude"), places, strict=True):
        lines = survey.put("lines", lines, name, values)
    clearance = 60.0 + np.random.default_rng(seed).standard_normal(len(flight.line))
    lines = survey.put("lines", lines, "height", terrain_below(lines, terrain) + 60.0)
    return survey.put("lines", lines, "clearance", clearance)


def refusal(lines: xr.Dataset, terrain: xr.Dataset, limits: HeightSettings = LIMITS) -> list[str]:
    with pytest.raises(ReadingsError) as caught:
        check_heights(lines, terrain, limits)
    return str(caught.value).splitlines()


def test_the_height_below_a_station_is_bilinear_and_none_outside(tmp_path: Path) -> None:
    terrain = terrain_part(tmp_path)
    lines = lines_over(terrain).isel(station=slice(0, 4))
    # a cell centre; midway between four; in the outer half of a corner cell; outside
    for name, places in {
        "easting": [350_150.0, 350_100.0, 350_010.0, 349_999.0],
        "northing": [5_300_250.0, 5_300_100.0, 5_300_010.0, 5_300_250.0],
    }.items():
        lines = survey.put("lines", lines, name, places)
    found, h = terrain_below(lines, terrain), hills()
    assert found[0] == h[2, 1]
    # a mean of four numbers near 300: a few roundings
    assert found[1] == pytest.approx(h[:2, :2].mean(), rel=1e-15)
    assert found[2] == h[0, 0]
    assert np.isnan(found[3])


def test_what_was_compared_stays_with_the_terrain_height(tmp_path: Path) -> None:
    terrain = terrain_part(tmp_path)
    lines = lines_over(terrain)
    before = lines.copy(deep=True)
    out = check_heights(lines, terrain, LIMITS)
    xr.testing.assert_identical(lines, before)
    attrs = out["terrain_height"].attrs
    assert attrs["compared_stations"] == 1342
    # the median of 1342 differences of 1 m: sd 1.25 / √1342 = 0.034 m, four of it; the median
    # deviation: 1.17 / √1342 = 0.032; the slope: 1 m / (25 m √1342) = 0.001
    assert abs(attrs["compared_offset"]) < 0.14
    assert attrs["compared_spread"] == pytest.approx(1.0, abs=0.13)
    assert attrs["compared_slope"] == pytest.approx(1.0, abs=0.004)
    assert not out["flag"].to_numpy().any()
    np.testing.assert_array_equal(out["terrain_height"], terrain_below(lines, terrain))


@given(st.floats(-100, 100), st.floats(0.2, 4.0), st.integers(0, 2**31))
@budget(deadline=None, max_examples=30)
def test_planted_offsets_and_slopes_come_back(offset: float, slope: float, seed: int) -> None:
    random = np.random.default_rng(seed)
    model = random.uniform(200.0, 500.0, 300)
    measured = slope * model + random.standard_normal(300)
    measured[::20] += 80.0  # one in twenty over trees
    found = compare_heights(measured, model)
    # sd of the slope: 1 / (87 √285) = 7e-4; six of it, for 30 examples
    assert found.slope == pytest.approx(slope, abs=4e-3)
    shifted = compare_heights(measured + offset, model)
    # the median moves with its data: rounding of numbers below 2500
    assert shifted.offset - found.offset == pytest.approx(offset, abs=1e-9)
    assert shifted.spread == pytest.approx(found.spread, abs=1e-9)


def test_the_parts_are_saved_and_opened_unchanged(tmp_path: Path) -> None:
    terrain = terrain_part(tmp_path)
    lines = check_heights(lines_over(terrain), terrain, LIMITS)
    for part, data in (("lines", lines), ("terrain", terrain)):
        survey.save(part, data, tmp_path / "part.nc")
        name, again = survey.open_part(tmp_path / "part.nc")
        assert name == part
        xr.testing.assert_identical(again, data)


def test_stations_outside_the_model_are_flagged_and_counted(tmp_path: Path) -> None:
    terrain = terrain_part(tmp_path)
    lines = lines_over(terrain)
    north = lines["northing"].to_numpy().copy()
    north[:7] += 50_000.0
    north[7] = np.nan
    out = check_heights(survey.put("lines", lines, "northing", north), terrain, LIMITS)
    assert survey.flag_counts(out)["outside_terrain_model"] == 7
    assert out["terrain_height"].attrs["outside_terrain_model"] == 7


def test_lines_outside_the_terrain_model(tmp_path: Path) -> None:
    terrain = terrain_part(tmp_path)
    lines = lines_over(terrain)
    # the same places on the map of zone 32: 453 km further east at longitude 13, latitude 48
    path = geotiff(tmp_path / "t.tif", hills(60, 60), west=797_000.0, north=5_313_000.0)
    wrong = read_terrain(settings(path))
    assert "\n".join(refusal(lines, wrong)) == message(
        "all 1342 stations lie outside the terrain model: easting 350000 to 353000 and northing "
        "5300000 to 5303000, the model easting 797050 to 802950 and northing 5307050 to 5312950",
        "stage check_heights, EPSG:32633",
        "the EPSG code of the terrain model or of the survey is likely the wrong one; "
        "the model would lie under the lines if it were in EPSG:32632",
    )


def test_lines_and_terrain_on_two_maps(tmp_path: Path) -> None:
    terrain = terrain_part(tmp_path)
    lines = lines_over(terrain)
    assert "\n".join(refusal(lines, terrain.assign_attrs(crs="EPSG:32632"))) == message(
        "the lines are in EPSG:32633, the terrain model in EPSG:32632",
        "stage check_heights",
        "state one 'crs' at the top of the pipeline file, for both",
    )


def test_terrain_in_feet_declared_as_metres(tmp_path: Path) -> None:
    lines = lines_over(terrain_part(tmp_path))
    feet = terrain_part(tmp_path, 1.0 / 0.3048)
    told = refusal(lines, feet)
    slope = float(told[0].split("rises by ")[1].split(" m per")[0])
    # sd of the slope: 1 m / (25 m / 0.3048 √1342) = 3e-4
    assert slope == pytest.approx(0.3048, abs=2e-3)
    assert "\n".join(told) == message(
        f"(height - clearance) rises by {slope:.4f} m per metre of the terrain model",
        "stage check_heights, 1342 stations with a clearance",
        "1 ft = 0.3048 m: the terrain model is likely in feet (read_terrain, unit), "
        "or the heights of the lines are metres taken for feet",
    )


def test_metres_declared_as_feet(tmp_path: Path) -> None:
    lines = lines_over(terrain_part(tmp_path))
    assert refusal(lines, terrain_part(tmp_path, unit="ft"))[2] == (
        "  cure:  1 m = 3.2808 ft: the heights of the lines are likely in feet "
        "(read_lines, units), or those of the terrain model are metres taken for feet"
    )


def test_feet_over_ground_too_flat_for_a_slope(tmp_path: Path) -> None:
    terrain = terrain_part(tmp_path)
    flat = terrain.assign(height=terrain["height"].copy(data=300.0 + 0.01 * hills()))
    feet = terrain.assign(height=terrain["height"].copy(data=flat["height"].to_numpy() / 0.3048))
    told = refusal(lines_over(flat), feet)
    assert told[0].startswith("ReadingsError: (height - clearance) is -69")
    assert told[2].startswith("  cure:  1 ft = 0.3048 m: the terrain model is likely in feet")


def test_a_separation_left_out(tmp_path: Path) -> None:
    terrain = terrain_part(tmp_path, height_reference="orthometric", separation=45.5)
    lines = lines_over(terrain_part(tmp_path))
    told = refusal(lines, terrain)
    assert told[0].startswith("ReadingsError: (height - clearance) is -45.")
    assert told[0].endswith("; the limit is 5 m")
    assert told[2] == (
        "  cure:  that is near the geoid separation of 45.5 m stated for the terrain model: "
        "heights of the other are likely orthometric too, or both are ellipsoidal"
    )
    told = refusal(lines_over(terrain), terrain_part(tmp_path))
    assert told[2] == (
        "  cure:  a constant offset is the sign of a datum mix-up: check 'height_reference' and "
        "'separation' of read_lines and read_terrain"
    )
    check_heights(lines, terrain, HeightSettings(offset_limit=50.0))


def test_a_model_of_another_ground(tmp_path: Path) -> None:
    terrain = terrain_part(tmp_path)
    lines = lines_over(terrain)
    mirrored = terrain.assign(height=terrain["height"].copy(data=hills()[::-1].copy()))
    told = refusal(lines, mirrored, HeightSettings(offset_limit=100.0, spread_limit=10.0))
    assert told[0].endswith("the limit is 10 m")
    assert told[2].startswith("  cure:  check the CRS of the terrain model and the clearances")


def test_a_station_below_the_ground(tmp_path: Path) -> None:
    terrain = terrain_part(tmp_path)
    lines = lines_over(terrain).drop_vars("clearance")
    height = lines["height"].to_numpy().copy()
    height[5] -= 62.5
    lines = survey.put("lines", lines, "height", height)
    ground = terrain_below(lines, terrain)[5]
    assert "\n".join(refusal(lines, terrain)) == message(
        f"1 station of 1342 below the ground, the worst by 2.50 m (height {height[5]:.2f} m, "
        f"terrain model {ground:.2f} m)",
        "stage check_heights, line L000, 2031-03-05T08:00:05",
        "check unit and vertical reference of lines and terrain model; where the model is too "
        "coarse for the ground, raise 'depth_limit'",
    )
    out = check_heights(lines, terrain, HeightSettings(depth_limit=3.0))
    assert "compared_offset" not in out["terrain_height"].attrs
