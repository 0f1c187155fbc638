"""Real lines and a real surface, as they were published (tests/data/SOURCES.md)."""

from pathlib import Path

import numpy as np
import pytest
import xarray as xr

from gradred.ingest.heights import HeightSettings, check_heights, compare_heights
from gradred.ingest.rasters import TerrainFileSettings, read_terrain
from gradred.ingest.tables import LineSettings, read_lines

DATA = Path(__file__).parents[1] / "data"
FIXED_WING = DATA / "lines" / "fixedwing_225401_excerpt.csv"
ELEMENTS = ("xx", "xy", "xz", "yy", "yz", "zz")


def with_elements(source: Path, folder: Path, *, header: int, rows: int) -> Path:
    """Write rows of a real table with six columns of zeros: no gradiometer flew there."""
    lines = source.read_text(encoding="utf-8").splitlines()[: header + rows]
    told = [*lines[: header - 1], ",".join([lines[header - 1], *ELEMENTS])]
    told += [row + ",0" * 6 for row in lines[header:]]
    path = folder / source.name
    path.write_text("\n".join([*told, ""]), encoding="utf-8")
    return path


def fixed_wing(folder: Path) -> xr.Dataset:
    columns = {
        "line": "line", "flight": "flight", "date": "date_yyyymmdd", "seconds": "utc_sod_s",
        "longitude": "lon_deg", "latitude": "lat_deg", "easting": "east_m", "northing": "north_m",
        "height": "gps_elev_ortho_m", "clearance": "laser_m", "heading": "bearing_deg",
        "pitch": "pitch_noseup_deg", "roll": "roll_rightdown_deg",
        **{name: name for name in ELEMENTS},
    }  # fmt: skip
    stated = {
        "crs": "EPSG:32615", "tables": [with_elements(FIXED_WING, folder, header=2, rows=40)],
        "delimiter": ",", "header": 2, "columns": columns, "date_format": "YYYYMMDD",
        "units": {
            "gradient": "E", "height": "m", "clearance": "m", "longitude": "deg", "easting": "m",
            "attitude": "deg",
        },
        "frame": "body", "sign": "static-positive",
        # of the geoid there: a round figure, from memory
        "height_reference": "orthometric", "separation": -28.0,
    }  # fmt: skip
    lines: xr.Dataset = read_lines(LineSettings.model_validate(stated))
    return lines


def test_a_real_fixed_wing_line(tmp_path: Path) -> None:
    lines = fixed_wing(tmp_path)
    assert lines.sizes["station"] == 40
    # the first row of the file: day 20191128, second 56297.4 = 15:38:17.4
    assert lines["time"].to_numpy()[0] == np.datetime64("2019-11-28T15:38:17.4")
    assert lines["height"].to_numpy()[0] == pytest.approx(170.18 - 28.0, abs=1e-12)
    # published easting 636724.27, northing 3748996.47, with longitude and latitude to 1e-7
    # degrees, which is 9 and 11 mm: half of it each, and half a centimetre of the printed metres
    assert lines["easting"].to_numpy()[0] == pytest.approx(636_724.27, abs=0.011)
    assert lines["northing"].to_numpy()[0] == pytest.approx(3_748_996.47, abs=0.011)
    # flown at 60 to 70 m/s along its published bearing of 110 degrees true, printed to 0.01: grid
    # north lies 0.82 degrees east of true north, so that an azimuth on the map is 0.82 degrees less
    east, north = np.diff(lines["easting"]), np.diff(lines["northing"])
    assert np.hypot(east, north).mean() == pytest.approx(65.0, abs=10.0)
    true_course = np.degrees(np.arctan2(east, north)) + lines["convergence"].to_numpy()[:-1]
    difference = true_course - lines["heading"].to_numpy()[:-1]
    assert abs(float(np.median(difference))) < 0.2
    table = np.genfromtxt(FIXED_WING, delimiter=",", skip_header=1, names=True)
    ground = compare_heights(
        (lines["height"] - lines["clearance"]).to_numpy() + 28.0, table["dtm_ortho_m"]
    )
    # a laser over fields against the elevation model that was delivered with it: decimetres
    assert abs(ground.offset) < 1.0
    assert ground.spread < 1.0


def test_real_helicopter_lines_over_real_ground(tmp_path: Path) -> None:
    columns = {
        "line": "line", "date": "date", "time": "time_utc", "longitude": "lon_deg",
        "latitude": "lat_deg", "easting": "east_m", "northing": "north_m", "height": "alt_m",
        "clearance": "height_m", **{name: name for name in ELEMENTS},
    }  # fmt: skip
    source = DATA / "lines" / "heli_lines_wisconsin.csv"
    stated = {
        "crs": "EPSG:3071", "tables": [with_elements(source, tmp_path, header=2, rows=50)],
        "delimiter": ",", "header": 2, "columns": columns, "date_format": "YYYY/MM/DD",
        "units": {
            "gradient": "E", "height": "m", "clearance": "m", "longitude": "deg", "easting": "m",
        },
        "frame": "ned", "sign": "static-positive",
        "height_reference": "orthometric", "separation": -35.0,
    }  # fmt: skip
    lines = read_lines(LineSettings.model_validate(stated))
    assert lines["flight"].to_numpy()[0] == "2021-01-20"
    # this delivery's easting and northing are of NAD83(HARN), a metre from WGS 84
    gap = np.hypot(
        lines["easting"].to_numpy()[0] - 724_307.21, lines["northing"].to_numpy()[0] - 491_569.63
    )
    assert 0.5 < gap < 2.0


def test_a_real_surface_in_feet(tmp_path: Path) -> None:
    stated = {
        "crs": "EPSG:3071", "surface": DATA / "dem" / "wisconsin_top_bedrock_feet_excerpt.tif",
        "unit": "ft", "height_reference": "orthometric", "separation": -35.0,
    }  # fmt: skip
    terrain = read_terrain(TerrainFileSettings.model_validate(stated))
    with np.load(DATA / "dem" / "wisconsin_surface_and_bedrock_200m.npz") as model:
        metres = model["bedrock_top_m"][320:350, 130:166][::-1]
        np.testing.assert_allclose(terrain["easting"], model["x_m"][130:166], atol=1e-3)
        np.testing.assert_allclose(terrain["northing"], model["y_m"][320:350][::-1], atol=1e-3)
    # the metres were rounded to centimetres; single precision of 900 ft is 6e-5 ft
    np.testing.assert_allclose(terrain["height"], metres - 35.0, atol=0.0051)


def test_simulated_readings_on_real_lines_stand_over_real_ground() -> None:
    folder = DATA / "wisconsin"
    names = zip(ELEMENTS, ("nn", "ne", "nd", "ee", "ed", "dd"), strict=True)
    plain = ("line", "time", "longitude", "latitude", "height", "clearance")
    lines = read_lines(
        LineSettings.model_validate(
            {
                "crs": "EPSG:3071", "tables": [folder / "lines.csv.gz"], "delimiter": ",",
                "header": 1, "columns": {name: name for name in plain} | dict(names),
                "units": {"gradient": "E", "height": "m", "clearance": "m", "longitude": "deg"},
                "frame": "ned", "sign": "static-positive", "height_reference": "ellipsoid",
            }
        )
    )  # fmt: skip
    terrain = read_terrain(
        TerrainFileSettings.model_validate(
            {
                "crs": "EPSG:3071", "surface": folder / "surface.tif",
                "bedrock": folder / "bedrock.tif", "unit": "m",
                "height_reference": "orthometric", "separation": -35.0,
            }
        )
    )  # fmt: skip
    attrs = check_heights(lines, terrain, HeightSettings())["terrain_height"].attrs
    assert attrs["compared_stations"] == lines.sizes["station"] == 1022
    # real radar heights against the published surface of 200 m cells, over farmland
    assert abs(attrs["compared_offset"]) < 0.5
    assert attrs["compared_spread"] < 2.0
    assert attrs["compared_slope"] == pytest.approx(1.0, abs=0.01)
