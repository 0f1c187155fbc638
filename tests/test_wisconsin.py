"""The committed readings over Wisconsin are what ``tests/wisconsin.py`` makes of the real data."""

from functools import cache

import numpy as np
import pandas as pd
import rasterio

from gradred import simulate
from gradred.newton.bodies import prism_tensor
from gradred.newton.ellipsoid import normal_tensor
from gradred.newton.tides import tide_tensor
from gradred.tensor import enu_to_grid, ned_to_enu
from tests import wisconsin

ELEMENTS = ["nn", "ne", "nd", "ee", "ed", "dd"]


@cache
def made() -> wisconsin.Wisconsin:
    return wisconsin.simulate_wisconsin()


def test_the_committed_lines_are_the_simulated_ones() -> None:
    table = pd.read_csv(wisconsin.FOLDER / "lines.csv.gz")
    in_enu = ned_to_enu().tensor(table[ELEMENTS].to_numpy())
    # printed to 0.001 E
    np.testing.assert_allclose(in_enu, made().reading, rtol=0, atol=5.1e-4)
    np.testing.assert_array_equal(table["line"], made().line)
    # printed to 1e-7 degrees and to 0.01 m
    np.testing.assert_allclose(table["longitude"], made().stations.longitude, rtol=0, atol=1e-9)
    np.testing.assert_allclose(table["height"], made().stations.height, rtol=0, atol=0.0051)
    assert list(pd.to_datetime(table["time"])) == list(pd.to_datetime(made().stations.time))


def test_the_committed_surfaces_are_the_published_ones() -> None:
    with np.load(wisconsin.DATA / "dem" / "wisconsin_surface_and_bedrock_200m.npz") as model:
        for name, key in (("surface", "surface_m"), ("bedrock", "bedrock_top_m")):
            with rasterio.open(wisconsin.FOLDER / f"{name}.tif") as file:
                assert file.crs.to_epsg() == 3071
                np.testing.assert_array_equal(
                    file.read(1), model[key][wisconsin.ROWS, wisconsin.COLUMNS]
                )
                west, north = file.xy(0, 0)
            assert west == model["x_m"][wisconsin.COLUMNS][0]
            assert north == model["y_m"][wisconsin.ROWS][0]
            assert np.isfinite(model[key][wisconsin.ROWS, wisconsin.COLUMNS]).all()


def test_the_committed_truth_is_the_simulated_one() -> None:
    with np.load(wisconsin.FOLDER / "truth.npz") as truth:
        # single precision: 6e-8 of 100 E
        np.testing.assert_allclose(truth["bedrock"], made().bedrock, rtol=0, atol=1e-5)
        np.testing.assert_allclose(truth["terrain"], made().terrain, rtol=0, atol=1e-5)


def test_the_bedrock_signal_is_that_of_its_relief_about_a_level() -> None:
    survey = made()
    level, few = survey.bedrock_height.mean(), slice(None, None, 100)
    east, north = np.meshgrid(survey.easting, survey.northing)
    rock = survey.bedrock_height.ravel()
    low, high = np.minimum(rock, level), np.maximum(rock, level)
    sides = [(axis + half).ravel() for axis in (east, north) for half in (-100.0, 100.0)]
    cells = np.stack([*sides, low, high], axis=1)
    points = simulate.grid_points(survey.stations, wisconsin.CRS)[few]
    tensor = prism_tensor(points, cells, np.sign(rock - level) * wisconsin.CONTRAST)
    convergence = simulate.grid_north(
        survey.stations.longitude, survey.stations.latitude, wisconsin.CRS
    )[few]
    # the same mass summed in two ways: rounding of two plates 250 m thick against each other
    np.testing.assert_allclose(
        enu_to_grid(convergence).inverse().tensor(tensor), survey.bedrock[few], rtol=0, atol=1e-6
    )


def test_what_is_neither_earth_nor_tide_is_white_noise_of_3_e() -> None:
    survey, at = made(), made().stations
    rest = survey.reading - survey.bedrock - survey.terrain - normal_tensor(at.latitude, at.height)
    rest -= tide_tensor(at.time, at.longitude, at.latitude, at.height)
    # 1022 readings: a standard deviation is known to 2.2 %, four of them
    np.testing.assert_allclose(rest.std(axis=0), 3.0, rtol=0.09)


def test_the_helicopter_flew_above_the_ground_model() -> None:
    survey = made()
    east, north, height = simulate.grid_points(survey.stations, wisconsin.CRS).T
    column = np.floor((east - survey.easting[0]) / 200.0).astype(int)
    row = np.floor((north - survey.northing[0]) / 200.0).astype(int)
    corners = [survey.surface_height[row + i, column + j] for i in (0, 1) for j in (0, 1)]
    assert np.min(height - np.max(corners, axis=0)) > 15.0
    # real clearances against a real model of 200 m cells: they agree to some metres
    assert abs(np.median(height - survey.clearance - np.mean(corners, axis=0))) < 1.0
