import numpy as np
import pytest
import xarray as xr

from gradred import survey
from gradred.newton.bodies import point_tensor, prism_tensor
from gradred.reduction.terrain import TerrainSettings, height_noise, remove_terrain
from gradred.tensor import enu_to_grid
from tests.synthetic import CRS, EAST, NORTH, lines_part, pattern


def block(step: float = 60.0) -> xr.Dataset:
    axis = np.arange(-1500.0, 4500.1, step)
    height = 20.0 * np.sin(axis / 400.0)[None, :] * np.cos(axis / 300.0)[:, None] - 60.0
    terrain = survey.new("terrain", CRS, easting=EAST + axis, northing=NORTH + axis)
    return survey.put("terrain", terrain, "height", height)


def flown() -> xr.Dataset:
    flight = pattern(traverses=5, ties=3, step=100.0)
    return lines_part(flight, np.zeros((len(flight.line), 6)))


def test_terrain_is_removed_and_added_back() -> None:
    data, terrain = flown(), block()
    before, ground = data.copy(deep=True), terrain.copy(deep=True)
    out = remove_terrain(data, terrain, TerrainSettings(density=2480.0, base=-200.0))
    xr.testing.assert_identical(data, before)
    xr.testing.assert_identical(terrain, ground)
    assert survey.closure(out) < 1e-12
    told = out["removed_terrain"].attrs
    assert told["density"] == 2480.0
    assert told["proof_stations"] == 50
    assert told["proof_max"] <= told["tolerance"] == 0.05
    assert 0.0 < told["proof_rms"] <= told["proof_max"]


def test_level_ground_is_a_prism_seen_from_true_axes() -> None:
    data, terrain = flown(), block()
    level = survey.put("terrain", terrain, "height", np.full_like(terrain["height"], -50.0))
    out = remove_terrain(data, level, TerrainSettings(density=2000.0, base=-450.0))
    axes = [EAST - 1530.0, EAST + 4530.0, NORTH - 1530.0, NORTH + 4530.0, -450.0, -50.0]
    points = np.column_stack([data[n].to_numpy() for n in ("easting", "northing", "height")])
    to_enu = enu_to_grid(data["convergence"].to_numpy()).inverse()
    expected = to_enu.tensor(prism_tensor(points, [axes], 2000.0))
    np.testing.assert_allclose(out["removed_terrain"].to_numpy(), expected, rtol=0, atol=0.06)
    np.testing.assert_array_equal(out["terrain_height"].to_numpy(), -50.0)
    # a density wrong by its standard deviation moves the removed tensor by sigma
    share = 50.0 / 2000.0 * np.abs(expected)
    assert np.all(out["sigma_terrain"].to_numpy() >= share - 0.01)


def test_sigma_of_heights_against_a_direct_sum() -> None:
    # independent errors of 1 m in cells of 20 m seen from 80 m: root of the sum of squared
    # tensors of point masses, which is what the closed form integrates
    axis = np.arange(-2000.0, 2001.0, 20.0)
    x, y = np.meshgrid(axis, axis)
    centres = np.column_stack([x.ravel(), y.ravel(), np.zeros(x.size)])
    mass = 2670.0 * 20.0 * 20.0 * 1.0
    offsets = np.array([0.0, 0.0, 80.0]) - centres
    # one mass seen from as many places is as many masses seen from one
    squares = (point_tensor(offsets, np.zeros((1, 3)), [mass]) ** 2).sum(axis=0)
    got = height_noise(2670.0, 1.0, 20.0, np.array([80.0]))[0]
    # stated: 0.1 % for cells of a quarter of the clearance; the plane ends at 25 clearances
    np.testing.assert_allclose(got, np.sqrt(squares), rtol=2e-3)
    # published figure: 10 m cells, 0.5 m, 40 m above 2670 kg/m3 make 0.855 E
    assert height_noise(2670.0, 0.5, 10.0, np.array([40.0]))[0, 5] == pytest.approx(0.855, abs=5e-4)


def test_stations_beyond_the_model_are_flagged_and_counted() -> None:
    data, terrain = flown(), block()
    some = terrain.isel(easting=slice(0, 51))  # the model ends at easting 1500 + 30 m
    out = remove_terrain(data, some, TerrainSettings(base=-200.0))
    east = data["easting"].to_numpy() - EAST
    beyond = east > 1530.0
    assert survey.flag_counts(out)["outside_terrain_model"] == np.count_nonzero(beyond)
    np.testing.assert_array_equal(np.isnan(out["terrain_height"].to_numpy()), beyond)
    margin = remove_terrain(data, terrain, TerrainSettings(base=-200.0, margin=2000.0))
    assert survey.flag_counts(margin)["outside_terrain_model"] > 0


def test_a_missing_position_stays_missing() -> None:
    data = flown()
    height = data["height"].to_numpy().copy()
    height[7] = np.nan
    out = remove_terrain(survey.put("lines", data, "height", height), block(), TerrainSettings())
    assert np.isnan(out["gradient"].to_numpy()).all(axis=1).sum() == 1


def test_missing_cells_are_refused() -> None:
    terrain = block()
    height = terrain["height"].to_numpy().copy()
    height[3, 4] = np.nan
    terrain = survey.put("terrain", terrain, "height", height)
    with pytest.raises(Exception, match="1 of 10201 terrain cells have no height"):
        remove_terrain(flown(), terrain, TerrainSettings())
