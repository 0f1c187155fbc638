from functools import cache

import numpy as np
import pytest
import xarray as xr
from numpy.typing import NDArray

from gradred import survey
from gradred.errors import FitError
from gradred.inversion.mesh import Mesh, mesh_under
from gradred.inversion.readings import StationReadings
from gradred.inversion.roughness import blocky, roughness_of
from gradred.inversion.voxels import VoxelSettings, averaged, fit_density, fit_voxels
from gradred.newton.bodies import prism_tensor
from gradred.newton.voxels import VoxelOperator
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
    assert model["voxel_density"].attrs["chi_squared"] == pytest.approx(0.95, abs=0.01)
    # every single reading, not only the averages that were fitted: 765 × 6 of them, 2 % sampling
    # error, less the freedom that the smooth model takes
    assert float(model["chi_squared_voxels"].mean()) == pytest.approx(1.0, abs=0.1)
    trials = model["tradeoff_weight"].to_numpy()
    assert len(trials) >= 2
    # law of the trade-off curve: a heavier norm fits worse and is smoother
    order = np.argsort(trials)
    assert np.all(np.diff(model["tradeoff_chi_squared"].to_numpy()[order]) > 0)
    assert np.all(np.diff(model["tradeoff_roughness"].to_numpy()[order]) < 0)


def mass_and_depth(model: xr.Dataset, reach: float = 800.0) -> tuple[float, float]:
    """Return the mass near the box over the planted one, and the height of its centre, m."""
    thick = (model["voxel_top"] - model["voxel_bottom"]).to_numpy()
    middle = 0.5 * (model["voxel_top"] + model["voxel_bottom"]).to_numpy()
    mass = model["voxel_density"].to_numpy() * thick * SETTINGS.cell**2
    x, y = np.meshgrid(model["cell_easting"].to_numpy(), model["cell_northing"].to_numpy())
    near = np.hypot(x - EAST - 1350.0, y - NORTH - 1500.0) < reach
    total = float(mass[:, near].sum())
    planted = DENSITY * 700.0 * 600.0 * 350.0
    return total / planted, float((mass * middle)[:, near].sum()) / total


@pytest.mark.parametrize("norm", ["smooth", "blocky"])
@pytest.mark.parametrize("seed", [0, 1, 2])
def test_the_planted_mass_comes_back_where_it_is(norm: str, seed: int) -> None:
    wanted = SETTINGS.model_copy(update={"norm": norm})
    model = fitted() if (norm, seed) == ("smooth", 0) else fit_voxels(flown(seed), ground(), wanted)
    mass, height = mass_and_depth(model)
    # what a fit without bounds is held to: the mass within 20 %
    assert mass == pytest.approx(1.0, abs=0.2)
    # the box reaches from -500 to -150 m, 385 m below the stations in the middle. A smooth model
    # hangs down: its centre is up to a third deeper; a blocky one is within a tenth
    assert height == pytest.approx(-325.0, abs=130.0 if norm == "smooth" else 60.0)
    density = model["voxel_density"].to_numpy()
    best = np.unravel_index(np.argmax(density), density.shape)
    assert abs(float(model["cell_easting"][best[2]]) - EAST - 1350.0) <= 350.0
    assert abs(float(model["cell_northing"][best[1]]) - NORTH - 1500.0) <= 300.0
    assert density.max() < 1.3 * DENSITY


def test_the_power_of_the_depth_sinks_the_model_and_adds_to_its_mass() -> None:
    heights, masses = [], []
    for power in (0.0, 1.5, 3.0):
        wanted = COARSE.model_copy(update={"depth_power": power, "cell": SETTINGS.cell})
        mass, height = mass_and_depth(fit_voxels(flown(), ground(), wanted))
        masses.append(mass)
        heights.append(height)
    assert np.all(np.diff(masses) > 0)
    assert np.all(np.diff(heights) < 0)


def test_what_levelling_left_on_a_line_is_not_fitted() -> None:
    data = flown()
    number = np.unique(data["line"].to_numpy().astype(str), return_inverse=True)[1]
    drift = np.random.default_rng(7).normal(0.0, 1.0, (number.max() + 1, 6))
    left = survey.put("lines", data, "gradient", data["gradient"] + drift[number], frame="enu")
    sd = np.full(drift[number].shape, 1.0)
    known = survey.put("lines", left, "sigma_levelling", sd, frame="enu")
    norms = []
    for part in (left, known):
        model = fit_voxels(part, ground(), SETTINGS)
        norms.append(float(np.sqrt(np.mean(model["voxel_density"].to_numpy() ** 2))))
    # as one does not know of the drift, it is put into the ground: measured 0.73
    assert norms[1] < 0.85 * norms[0]


def test_bounds_hold_and_the_misfit_with_them() -> None:
    # cells of 300 m below the planted 600 kg/m3 cannot follow the noise as well
    bounded = COARSE.model_copy(update={"lowest": -50.0, "highest": 400.0, "target": 1.0})
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


def small_mesh(layers: int = 4) -> Mesh:
    points = np.column_stack(
        [EAST + np.array([0.0, 900.0]), NORTH + np.array([0.0, 900.0]), [60, 60.0]]
    )
    return mesh_under(ground(), points, 200.0, 1000.0, layers, 0)


def test_roughness_of_a_level_model_is_its_size_only() -> None:
    mesh = small_mesh()
    matrix = roughness_of(mesh, 400.0, 3.0)
    level = np.full(matrix.shape[1], 3.0)
    parts = matrix @ level
    size = len(level)
    # differences of equal cells vanish; 1e-16 of 3
    np.testing.assert_allclose(parts[size:], 0.0, atol=1e-12)
    weight = (mesh.depth_below_stations / mesh.depth_below_stations.min()) ** -1.5
    volume = np.sqrt(mesh.volumes / mesh.volumes.mean())
    np.testing.assert_allclose(parts[:size], 3.0 * weight * volume * 0.5, rtol=1e-12)


@pytest.mark.parametrize("layers", [4, 8, 16])
def test_roughness_of_a_slope_does_not_depend_on_the_layers(layers: int) -> None:
    mesh = small_mesh(layers)
    middle = 0.5 * (mesh.tops + mesh.bottoms)
    slope = 0.1 * (middle - mesh.tops[0]).ravel()
    parts = roughness_of(mesh, 1e9, 0.0) @ slope
    # (0.1 kg/m3 per m × 200 m)2 = 400 times the volume between middles, the geometric mean of two
    # layers of which one is 1.25 times as thick as the other; the last has nothing below it
    last = 1.25 ** (layers - 1) * 0.25 / (1.25**layers - 1.0)
    expected = 400.0 * np.sqrt(1.25) * (1.0 - last)
    # the size, over 1e9 m, is nothing
    assert float(parts @ parts) / slope.size == pytest.approx(expected, rel=1e-9)


def test_blocky_weights_leave_the_norm_and_flatten_what_is_large() -> None:
    matrix = roughness_of(small_mesh(), 400.0, 0.0)
    density = np.zeros(matrix.shape[1])
    density[10:14] = [100.0, -200.0, 50.0, 300.0]
    again = blocky(matrix, density)
    before, after = matrix @ density, again @ density
    # the factor is made for it: rounding
    assert after @ after == pytest.approx(before @ before, rel=1e-12)
    # the square of a large part now goes with its size
    large = np.abs(before) > 0.3 * np.abs(before).max()
    ratio = after[large] ** 2 / np.abs(before[large])
    # sqrt(q2 + e2) differs from |q| by (0.05 / 0.3)2 / 2 = 1.4 %
    np.testing.assert_allclose(ratio, ratio.mean(), rtol=0.02)
    assert blocky(matrix, np.zeros_like(density)) is matrix


def test_the_densities_are_those_of_a_direct_solution() -> None:
    random = np.random.default_rng(3)
    mesh = small_mesh(3)
    points = np.column_stack(
        [EAST + random.uniform(0, 900, 60), NORTH + random.uniform(0, 900, 60), np.full(60, 60.0)]
    )
    weights = random.uniform(0.2, 0.5, (60, 6))
    operator = VoxelOperator(points, mesh.prisms, weights)
    truth = random.normal(0.0, 200.0, operator.shape[1])
    data = operator.forward(truth) + random.normal(0.0, 1.0, 360) + (weights * 5.0).ravel()
    matrix = roughness_of(mesh, 400.0, 0.0)
    fit = fit_density(operator, data, weights.ravel(), matrix, lowest=-6000, highest=6000)
    # densities and the six constants as one dense least squares
    constants = np.kron(np.ones((60, 1)), np.eye(6)) * weights.ravel()[:, None]
    rough = np.sqrt(fit.trials[-1, 0]) * matrix.toarray()
    full = np.block(
        [[operator.matrix.astype(np.float64), constants], [rough, np.zeros((len(rough), 6))]]
    )
    wanted = np.concatenate([data, np.zeros(len(rough))])
    found = np.linalg.lstsq(full, wanted, rcond=None)[0]

    def objective(unknowns: Array) -> float:
        return float(np.sum((full @ unknowns - wanted) ** 2))

    # the search ends at 3e-4 of the first slope: measured 4e-4 of the objective too high
    reached = objective(np.concatenate([fit.density, fit.constants]))
    assert reached == pytest.approx(objective(found), rel=2e-3)
    assert reached >= objective(found)
    seen = np.sqrt(np.mean((operator.forward(fit.density - found[:-6])) ** 2))
    # a tenth of the noise of a reading, which is 1 in these units
    assert seen < 0.1
    # twice the readings are twice the densities, at twice the sd
    twice = fit_density(
        VoxelOperator(points, mesh.prisms, 0.5 * weights),
        data,
        0.5 * weights.ravel(),
        matrix,
        lowest=-6000,
        highest=6000,
    )
    # all numbers are the same but for powers of two
    np.testing.assert_allclose(twice.density, 2.0 * fit.density, rtol=1e-9)


def test_averages_along_the_line_keep_the_noise() -> None:
    n = 1000
    points = np.column_stack([np.arange(n) * 10.0, np.zeros(n), np.full(n, 80.0)])
    readings = np.random.default_rng(0).normal(5.0, 2.0, (n, 6))
    sigma, line = np.full((n, 6), 2.0), np.zeros(n, dtype=np.intp)
    at, mean, sd = averaged(StationReadings(points, readings, sigma, np.zeros((n, 6)), line), 100.0)
    assert len(at) == 100
    np.testing.assert_allclose(sd, 2.0 / np.sqrt(10.0))
    np.testing.assert_allclose(mean[0], readings[:10].mean(axis=0))
    # 600 scores: 3 % sampling error, at 4 of it
    assert np.std((mean - 5.0) / sd) == pytest.approx(1.0, abs=0.12)
    # what a line has in common stays
    common = np.full((n, 6), 1.5)
    _, _, sd = averaged(StationReadings(points, readings, sigma, common, line), 100.0)
    np.testing.assert_allclose(sd, np.sqrt(0.4 + 2.25))


def test_stations_inside_the_mesh_are_refused() -> None:
    data = flown()
    height = np.where(np.arange(data.sizes["station"]) < 3, -40.0, data["height"].to_numpy())
    low = survey.put("lines", data, "height", height)
    with pytest.raises(FitError) as caught:
        fit_voxels(low, ground(), COARSE)
    assert str(caught.value) == (
        "FitError: 3 stations stand up to 17 m below the top of their column\n"
        "  where: stage fit_voxels\n"
        "  cure:  use columns narrower than 300 m, or look at the heights of the terrain"
    )


def test_terrain_with_gaps_is_refused() -> None:
    terrain = ground()
    height = terrain["height"].to_numpy().copy()
    height[3, 4:6] = np.nan
    with pytest.raises(FitError) as caught:
        fit_voxels(flown(), survey.put("terrain", terrain, "height", height), COARSE)
    assert str(caught.value) == (
        "FitError: 2 terrain cells have no height\n"
        "  where: stage fit_voxels\n"
        "  cure:  fill them in read_terrain, or cut the model to where it is whole"
    )


def test_lines_without_a_good_station_are_refused() -> None:
    data = flown()
    flags = np.full(data.sizes["station"], 16)
    with pytest.raises(FitError) as caught:
        fit_voxels(survey.put("lines", data, "flag", flags), ground(), COARSE)
    assert str(caught.value) == (
        "FitError: none of the 765 stations is good\n"
        "  where: stage fit_voxels\n"
        "  cure:  look at the flags of the lines"
    )


def test_noise_that_cannot_be_reached_is_refused() -> None:
    data = flown()
    small = survey.put(
        "lines", data, "sigma", np.full((data.sizes["station"], 6), 0.02), frame="enu"
    )
    narrow = COARSE.model_copy(update={"lowest": -10.0, "highest": 10.0, "layers": 2})
    with pytest.raises(FitError) as caught:
        fit_voxels(small, ground(), narrow)
    assert caught.value.what.startswith("chi-squared per reading stays at ")
    assert str(caught.value).endswith(
        " and does not reach 0.95\n"
        "  where: stage fit_voxels\n"
        "  cure:  look at sigma and at the bounds; a finer mesh or a wider one may be needed"
    )
