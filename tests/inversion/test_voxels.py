from functools import cache

import numpy as np
import pytest
import xarray as xr
from numpy.typing import NDArray

from gradred import survey
from gradred.errors import FitError
from gradred.inversion.mesh import mesh_under
from gradred.inversion.voxels import VoxelSettings, averaged, fit_voxels, roughness_of
from gradred.newton.bodies import prism_tensor
from gradred.tensor import enu_to_grid
from tests.synthetic import CRS, EAST, NORTH, lines_part, pattern

Array = NDArray[np.float64]

NOISE = 3.0
BOX = np.array([[EAST + 1000.0, EAST + 1700.0, NORTH + 1200.0, NORTH + 1800.0, -500.0, -150.0]])
DENSITY = 600.0
SETTINGS = VoxelSettings(cell=200.0, depth=1000.0, layers=6, smooth_length=300.0, spacing=120.0)
COARSE = SETTINGS.model_copy(update={"cell": 300.0, "layers": 4, "spacing": 240.0})


def ground() -> xr.Dataset:
    axis = np.arange(-1000.0, 4001.0, 50.0)
    height = -30.0 + 15.0 * np.sin(axis / 500.0)[None, :] * np.ones((len(axis), 1))
    terrain = survey.new("terrain", CRS, easting=EAST + axis, northing=NORTH + axis)
    return survey.put("terrain", terrain, "height", height)


@cache
def flown(seed: int = 0) -> xr.Dataset:
    random = np.random.default_rng(seed)
    flight = pattern(traverses=12, ties=3, step=60.0)
    points = np.column_stack([flight.easting, flight.northing, np.full(len(flight.line), 60.0)])
    part = lines_part(flight, np.zeros((len(points), 6)))
    turn = enu_to_grid(part["convergence"].to_numpy()).inverse()
    field = turn.tensor(prism_tensor(points, BOX, DENSITY))
    readings = field + [3.0, 0, -2.0, 1.0, 0, -4.0] + random.normal(0.0, NOISE, field.shape)
    part = survey.put("lines", part, "gradient", readings, frame="enu")
    return survey.put("lines", part, "sigma", np.full(field.shape, NOISE), frame="enu")


@cache
def fitted() -> xr.Dataset:
    model: xr.Dataset = fit_voxels(flown(), ground(), SETTINGS)
    return model


def test_the_misfit_is_the_noise() -> None:
    model = fitted()
    assert model["voxel_density"].attrs["chi_squared"] == pytest.approx(1.0, abs=0.01)
    # every single reading, not only the averages that were fitted: 765 × 6 of them, 2 % sampling
    # error, less the freedom that the smooth model takes
    assert float(model["chi_squared_voxels"].mean()) == pytest.approx(1.0, abs=0.1)
    trials = model["tradeoff_weight"].to_numpy()
    assert len(trials) >= 2
    # law of the trade-off curve: a heavier norm fits worse and is smoother
    order = np.argsort(trials)
    assert np.all(np.diff(model["tradeoff_chi_squared"].to_numpy()[order]) > 0)
    assert np.all(np.diff(model["tradeoff_roughness"].to_numpy()[order]) < 0)


def test_the_planted_mass_comes_back_where_it_is() -> None:
    model = fitted()
    density = model["voxel_density"].to_numpy()
    thick = (model["voxel_top"] - model["voxel_bottom"]).to_numpy()
    mass = density * thick * 200.0**2
    x, y = np.meshgrid(model["cell_easting"].to_numpy(), model["cell_northing"].to_numpy())
    planted = DENSITY * 700.0 * 600.0 * 350.0
    near = np.hypot(x - EAST - 1350.0, y - NORTH - 1500.0) < 600.0
    # gradients hold mass down weakly: a smooth model spreads it sideways and downward, and a
    # constant per component takes what is widest of it. Measured 1.4 of the planted mass within
    # 600 m (0.9 with a norm that does not relax with depth, 2.3 with the power 3)
    assert 0.7 < mass[:, near].sum() / planted < 1.6
    best = np.unravel_index(np.argmax(density), density.shape)
    middle = 0.5 * (model["voxel_top"] + model["voxel_bottom"]).to_numpy()[best]
    assert abs(x[best[1:]] - EAST - 1350.0) <= 350.0
    assert abs(y[best[1:]] - NORTH - 1500.0) <= 300.0
    # the body reaches from -500 to -150 m
    assert -550.0 < middle < -100.0
    assert density.max() < 1.3 * DENSITY


def test_bounds_hold_and_the_misfit_with_them() -> None:
    bounded = COARSE.model_copy(update={"lowest": -50.0, "highest": 400.0})
    model = fit_voxels(flown(), ground(), bounded)
    density = model["voxel_density"].to_numpy()
    assert density.min() >= -50.0
    assert density.max() <= 400.0
    # both bounds are in use
    assert np.count_nonzero(density == -50.0) > 0
    assert np.count_nonzero(density == 400.0) > 0
    assert model["voxel_density"].attrs["chi_squared"] == pytest.approx(1.0, abs=0.01)


def test_input_is_not_changed_and_bodies_stay_in_the_model() -> None:
    data, terrain = flown(), ground()
    before = data.copy(deep=True)
    first = survey.put("model", survey.new("model", CRS), "body_kind", np.array(["sphere"]))
    model = fit_voxels(data, terrain, SETTINGS, model=first)
    xr.testing.assert_identical(data, before)
    assert model["body_kind"].to_numpy()[0] == "sphere"
    np.testing.assert_array_equal(model["voxel_density"], fitted()["voxel_density"])


def test_the_mesh_hangs_under_the_terrain() -> None:
    points = np.column_stack(
        [EAST + np.array([0.0, 3000.0]), NORTH + np.array([0.0, 2000.0]), [60, 60.0]]
    )
    mesh = mesh_under(ground(), points, 200.0, 1000.0, 6, 1)
    assert mesh.shape == (6, 12, 17)
    # tops of the first layer are the terrain's own means: a sine, averaged over 200 m
    mean = 15.0 * np.sin((mesh.easting - EAST) / 500.0) * np.sinc(200.0 / 500.0 / 2 / np.pi) - 30.0
    # cells of 50 m sample the sine: their midpoint rule is (50 / 500)2 / 24 off
    np.testing.assert_allclose(mesh.tops[0], np.broadcast_to(mean, (12, 17)), atol=0.02)
    np.testing.assert_allclose(mesh.bottoms[-1], mesh.tops[0] - 1000.0, rtol=1e-12)
    np.testing.assert_array_equal(mesh.bottoms[:-1], mesh.tops[1:])
    volume = np.prod(mesh.prisms[:, 1::2] - mesh.prisms[:, ::2], axis=1)
    np.testing.assert_allclose(volume, mesh.volumes, rtol=1e-9)


def test_roughness_of_a_level_model_is_its_size_only() -> None:
    points = np.column_stack(
        [EAST + np.array([0.0, 900.0]), NORTH + np.array([0.0, 900.0]), [60, 60.0]]
    )
    mesh = mesh_under(ground(), points, 200.0, 1000.0, 4, 0)
    matrix = roughness_of(mesh, 400.0, 3.0)
    level = np.full(matrix.shape[1], 3.0)
    parts = matrix @ level
    size = len(level)
    # differences of equal cells vanish; 1e-16 of 3
    np.testing.assert_allclose(parts[size:], 0.0, atol=1e-12)
    weight = (mesh.depth_below_stations / mesh.depth_below_stations.min()) ** -1.5
    volume = np.sqrt(mesh.volumes / mesh.volumes.mean())
    np.testing.assert_allclose(parts[:size], 3.0 * weight * volume * 0.5, rtol=1e-12)


def test_averages_along_the_line_keep_the_noise() -> None:
    n = 1000
    points = np.column_stack([np.arange(n) * 10.0, np.zeros(n), np.full(n, 80.0)])
    readings = np.random.default_rng(0).normal(5.0, 2.0, (n, 6))
    at, mean, sd = averaged(
        points, readings, np.full((n, 6), 2.0), np.zeros(n, dtype=np.intp), 100.0
    )
    assert len(at) == 100
    np.testing.assert_allclose(sd, 2.0 / np.sqrt(10.0))
    np.testing.assert_allclose(mean[0], readings[:10].mean(axis=0))
    # 600 scores: 3 % sampling error, at 4 of it
    assert np.std((mean - 5.0) / sd) == pytest.approx(1.0, abs=0.12)


def test_noise_that_cannot_be_reached_is_refused() -> None:
    data = flown()
    small = survey.put(
        "lines", data, "sigma", np.full((data.sizes["station"], 6), 0.02), frame="enu"
    )
    narrow = COARSE.model_copy(update={"lowest": -10.0, "highest": 10.0, "layers": 2})
    with pytest.raises(FitError) as caught:
        fit_voxels(small, ground(), narrow)
    assert "and does not reach 1" in caught.value.what
    assert caught.value.where == "stage fit_voxels"
