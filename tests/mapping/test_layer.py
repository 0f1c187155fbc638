from functools import cache

import numba
import numpy as np
import pytest
import xarray as xr
from numpy.typing import NDArray

from gradred import survey
from gradred.errors import FitError, SurveyError
from gradred.mapping.layer import (
    MapSettings,
    fit_layer,
    map_field,
    predict,
    used_readings,
)
from gradred.mapping.layout import line_spacing, source_grid
from gradred.newton.bodies import point_gravity, point_tensor, sphere_gravity, sphere_tensor
from gradred.newton.layer import UNIT_MASS, pull_rows, tensor_rows
from gradred.stage import stage_of
from gradred.tensor import enu_to_grid, trace
from tests.synthetic import EAST, NORTH, Flight, lines_part, pattern

Array = NDArray[np.float64]

NOISE = 3.0
CENTRES = np.array(
    [[EAST + 1000.0, NORTH + 1300.0, -450.0], [EAST + 2100.0, NORTH + 1900.0, -380.0]]
)
RADII, DENSITY = np.array([220.0, 180.0]), np.array([700.0, -600.0])
SETTINGS = MapSettings(cell=150.0)


def bodies(points: Array) -> Array:
    return sphere_tensor(points, CENTRES, RADII, DENSITY)


@cache
def flown(seed: int = 0, frame: str = "enu") -> tuple[Flight, xr.Dataset]:
    """Return lines over two spheres, draped by ± 30 m, with white noise and a constant."""
    random = np.random.default_rng(seed)
    flight = pattern(traverses=16, ties=4, step=60.0)
    height = 60.0 + 30.0 * np.sin((flight.easting - EAST) / 300.0)
    points = np.column_stack([flight.easting, flight.northing, height])
    part = lines_part(flight, np.zeros((len(points), 6)))
    part = survey.put("lines", part, "height", height)
    turn = enu_to_grid(part["convergence"].to_numpy()).inverse()
    constant = np.array([5.0, -3.0, 2.0, 1.0, 4.0, -6.0])
    readings = turn.tensor(bodies(points)) + constant + random.normal(0, NOISE, (len(points), 6))
    part = survey.put("lines", part, "gradient", readings, frame=frame)
    part = survey.put("lines", part, "sigma", np.full((len(points), 6), NOISE), frame=frame)
    return flight, part


@cache
def mapped() -> xr.Dataset:
    grid: xr.Dataset = map_field(flown()[1], SETTINGS)
    return grid


def cells(grid: xr.Dataset) -> tuple[Array, NDArray[np.bool_]]:
    x, y = np.meshgrid(grid["easting"].to_numpy(), grid["northing"].to_numpy())
    surface = grid["surface"].to_numpy()
    points = np.column_stack([x.ravel(), y.ravel(), surface.ravel()])
    return points, np.isfinite(points[:, 2])


def test_rows_are_those_of_point_masses() -> None:
    random = np.random.default_rng(3)
    points = random.uniform(-500, 500, (7, 3)) + [0, 0, 700.0]
    sources = random.uniform(-500, 500, (5, 3)) - [0, 0, 300.0]
    mass = random.normal(size=5)
    # the same closed form written twice: rounding
    np.testing.assert_allclose(
        tensor_rows(points, sources) @ mass,
        point_tensor(points, sources, mass * UNIT_MASS),
        rtol=1e-11,
        atol=1e-12,
    )
    np.testing.assert_allclose(
        pull_rows(points, sources) @ mass,
        -point_gravity(points, sources, mass * UNIT_MASS)[:, 2],
        rtol=1e-11,
        atol=1e-14,
    )


def test_the_mapped_field_is_better_than_half_the_noise() -> None:
    grid = mapped()
    points, there = cells(grid)
    error = grid["gradient"].to_numpy().reshape(-1, 6)[there] - bodies(points[there])
    # the constants are told apart to the noise over the root of the readings and what of the
    # field is longer than the block: part of the error here
    assert np.sqrt(np.mean(error**2, axis=0)).max() < 0.5 * NOISE
    # noise alone, no prior, six components: 0.590 of the noise per reading in zz (Fourier least
    # squares, closed form); cells of 150 m average the readings of 60 m by 187 m
    assert np.sqrt(np.mean(error[:, 5] ** 2)) < 0.59 * NOISE


def test_standard_deviations_are_those_of_the_errors() -> None:
    grid = mapped()
    points, there = cells(grid)
    error = grid["gradient"].to_numpy().reshape(-1, 6)[there] - bodies(points[there])
    score = error / grid["sigma"].to_numpy().reshape(-1, 6)[there]
    # 441 cells whose errors hang together over some 200 m: about 150 independent, 6 % each; the
    # prior is not the spheres' own: 25 % in all
    assert np.sqrt(np.mean(score**2)) == pytest.approx(1.0, abs=0.25)


def test_residuals_are_the_noise_and_constants_come_back() -> None:
    grid = mapped()
    # 1020 readings per component less some 20 degrees of freedom: 2.2 % sampling error, at 4 of it
    np.testing.assert_allclose(grid["residual_rms"], NOISE, rtol=0.1)
    np.testing.assert_allclose(grid["chi_squared"], 1.0, atol=0.2)
    turned = enu_to_grid(-1.5).tensor(np.array([5.0, -3.0, 2.0, 1.0, 4.0, -6.0]))
    # what is longer than the block may stand in either: fields of the spheres at its edge, 1 E
    np.testing.assert_allclose(grid["datum"], turned, atol=1.0)


def test_the_map_is_a_harmonic_field() -> None:
    tensor = mapped()["gradient"].to_numpy()
    there = np.isfinite(tensor[..., 0])
    # point masses outside: no trace, to rounding of masses that nearly cancel
    np.testing.assert_allclose(trace(tensor)[there], 0.0, atol=1e-9)


def test_gz_is_that_of_the_bodies_but_for_a_level() -> None:
    grid = mapped()
    points, there = cells(grid)
    expected = -sphere_gravity(points[there], CENTRES, RADII, DENSITY)[:, 2]
    error = grid["gz"].to_numpy().ravel()[there] - expected
    # 10 % of the signal's range of 3 mGal, its own standard deviation says no less
    assert np.std(error) < 0.1
    assert np.median(grid["sigma_gz"].to_numpy().ravel()[there]) < 1.0


def test_input_is_not_changed_and_runs_are_the_same() -> None:
    _, data = flown()
    before = data.copy(deep=True)
    again = map_field(data, SETTINGS)
    xr.testing.assert_identical(data, before)
    xr.testing.assert_identical(again, mapped())


def test_flagged_readings_are_not_used() -> None:
    _, data = flown()
    spoiled = data["gradient"].to_numpy().copy()
    spoiled[100:110] = 1e5
    bad = np.zeros(data.sizes["station"], dtype=bool)
    bad[100:110] = True
    spoiled_part = survey.put("lines", data, "gradient", spoiled, frame="enu")
    out = map_field(survey.flag(spoiled_part, "spike", bad), SETTINGS)
    clean = mapped()
    there = np.isfinite(out["gradient"]) & np.isfinite(clean["gradient"])
    gap = (out["gradient"] - clean["gradient"]).to_numpy()[there.to_numpy()]
    # ten of 1000 readings fewer move the map by no more than its own standard deviation, 1 E
    assert np.abs(gap).max() < 1.0
    # whatever stands at a flagged station, the map is the same bit by bit
    xr.testing.assert_identical(out, map_field(survey.flag(data, "spike", bad), SETTINGS))


def test_a_completed_element_counts_for_nothing_of_its_own() -> None:
    _, data = flown()
    data = data.copy(deep=True)
    data["gradient"].attrs["completed"] = "zz"
    assert np.isnan(used_readings(data)[1][:, 5]).all()
    assert np.isfinite(used_readings(data)[1][:, :5]).all()


@pytest.mark.parametrize("surface", ["level", "drape"])
def test_other_surfaces(surface: str) -> None:
    axis = np.arange(-500.0, 3600.0, 50.0)
    terrain = survey.new("terrain", "EPSG:32633", easting=EAST + axis, northing=NORTH + axis)
    terrain = survey.put("terrain", terrain, "height", np.full((len(axis), len(axis)), -20.0))
    height = 150.0 if surface == "level" else None
    chosen = MapSettings(cell=300.0, surface=surface, height=height, clearance=120.0)
    grid = map_field(flown()[1], chosen, terrain=terrain)
    points, there = cells(grid)
    np.testing.assert_allclose(points[there, 2], 150.0 if surface == "level" else 100.0)
    error = grid["gradient"].to_numpy().reshape(-1, 6)[there] - bodies(points[there])
    assert np.sqrt(np.mean(error**2, axis=0)).max() < 0.5 * NOISE


def test_line_spacing_of_a_pattern() -> None:
    flight = pattern(traverses=16, ties=4)
    # lines 2800 / 15 = 186.7 m apart; the rule counts the block without its outer half spacings
    got = line_spacing(
        flight.easting[~flight.tie], flight.northing[~flight.tie], flight.line[~flight.tie]
    )
    assert got == pytest.approx(186.7, rel=0.08)


def lattice_gain(depth: float, count: int = 96) -> Array:
    """Return the noise gain of six components on endless square lattices, in closed form.

    Equal white noise, no prior, one source per station, ``depth`` in spacings below it: the
    variance of a component is the mean of |T|² / Σ|T|² over wavenumbers, T = Σ K exp(-k depth)
    over a wavenumber and its aliases, K = (-kx², -kx ky, i kx k, -ky², i ky k, k²) / k.
    """
    axis = 2.0 * np.pi * ((np.arange(count) + 0.5) / count - 0.5)
    x, y = np.meshgrid(axis, axis)
    seen = np.zeros((6, count, count), dtype=np.complex128)
    for alias in np.ndindex(9, 9):
        kx, ky = x + 2.0 * np.pi * (alias[0] - 4), y + 2.0 * np.pi * (alias[1] - 4)
        k = np.hypot(kx, ky)
        kernel = np.stack([-kx * kx, -kx * ky, 1j * kx * k, -ky * ky, 1j * ky * k, k * k])
        seen += kernel / k * np.exp((np.hypot(x, y) - k) * depth)
    power = np.abs(seen) ** 2
    return np.asarray(np.sqrt((power / power.sum(axis=0)).mean(axis=(1, 2))))


@pytest.mark.parametrize("depth", [1.0, 2.0])
def test_noise_gain_is_the_theoretical_one(depth: float) -> None:
    axis = 50.0 * np.arange(26.0)
    x, y = (part.ravel() for part in np.meshgrid(axis, axis))
    points = np.column_stack([x, y, np.zeros_like(x)])
    sources = points - [0.0, 0.0, 50.0 * depth]
    layer = fit_layer(points, np.zeros((676, 6)), np.ones((676, 6)), sources, prior_sd=1e6)
    middle = np.hypot(x - 625.0, y - 625.0) < 200.0
    rows = tensor_rows(points[middle], sources).reshape(-1, len(sources))
    gain = np.sqrt((layer.sigma(rows).reshape(-1, 6) ** 2).mean(axis=0))
    # a block of 26 × 26 for an endless lattice: 0.4 % in its middle
    np.testing.assert_allclose(gain, lattice_gain(depth), rtol=0.006)


def test_noise_gain_of_the_lattice_tends_to_that_without_aliases() -> None:
    # Σ|K|² = 2.75 to 3 k² without aliases gives 0.590, 0.417, 0.360, 0.211 for zz, xz, xx, xy with
    # directions weighed evenly; a square of wavenumbers weighs its diagonals more: 5 %
    bound = np.array([0.360, 0.211, 0.417, 0.360, 0.417, 0.590])
    np.testing.assert_allclose(lattice_gain(16.0), bound, rtol=0.05)


def test_rows_do_not_depend_on_the_number_of_threads() -> None:
    random = np.random.default_rng(8)
    points, sources = random.uniform(0, 500, (40, 3)), random.uniform(-900, -400, (30, 3))
    most = numba.get_num_threads()
    together = tensor_rows(points, sources), pull_rows(points, sources)
    numba.set_num_threads(1)
    try:
        alone = tensor_rows(points, sources), pull_rows(points, sources)
    finally:
        numba.set_num_threads(most)
    for one, other in zip(together, alone, strict=True):
        np.testing.assert_array_equal(one, other)


def test_a_layer_is_predicted_anywhere() -> None:
    random = np.random.default_rng(9)
    points = random.uniform(0, 500, (900, 3))
    sources, mass = random.uniform(-900, -400, (30, 3)), random.normal(size=30)
    # in parts or whole: the same sums
    np.testing.assert_allclose(
        predict(sources, mass, points), tensor_rows(points, sources) @ mass, rtol=1e-12, atol=1e-12
    )


def test_a_surface_in_the_layer_is_refused_and_a_low_cell_is_missing() -> None:
    _, data = flown()
    with pytest.raises(FitError) as caught:
        map_field(
            data, MapSettings(cell=300.0, surface="level", height=-300.0, spacing=95, depth=270)
        )
    assert str(caught.value) == (
        "FitError: the map surface is nowhere 95 m above the sources, whose highest stands at "
        "-180 m\n"
        "  where: stage map_field, surface\n"
        "  cure:  map a higher surface: below the ground the field cannot be continued"
    )
    # stations at 30 to 90 m, sources at -240 to -180 m: a plane at -110 m is clear of some alone
    grid = map_field(
        data, MapSettings(cell=300.0, surface="level", height=-110.0, spacing=95, depth=270)
    )
    low = grid["datum"].attrs["cells_too_near_the_layer"]
    assert 0 < low < grid["gz"].size
    assert np.isnan(grid["gz"].to_numpy()).sum() == grid["datum"].attrs["missing_cells"] >= low


def test_the_level_of_gz_is_stated() -> None:
    assert mapped()["gz"].attrs["level"] == (
        "attraction of the masses of the layer alone: its constant, and what is longer than the "
        "block, are not told by gradients"
    )


def test_sources_stand_below_every_station_near_them() -> None:
    random = np.random.default_rng(0)
    points = np.column_stack([random.uniform(0, 3000, (500, 2)), random.uniform(0, 300, 500)])
    sources = source_grid(points, 200.0, 300.0)
    apart = np.hypot(*(points[:, None, :2] - sources[:, :2]).T)
    nearest = np.argsort(apart, axis=1)[:, :8]
    # the flown surface there is the lowest of the eight nearest stations
    np.testing.assert_allclose(sources[:, 2], points[nearest, 2].min(axis=1) - 300.0)
    assert apart.min(axis=1).max() <= 400.0
    # a net of 200 m over 3 km and 400 m beyond it, less its corners
    assert 15**2 < len(sources) <= 19**2


def test_forecast_of_a_block() -> None:
    sizes = {"stations": 5600.0, "lines": 37.0, "terrain_cells": 1e5, "width": 6e3, "length": 6e3}
    forecast = stage_of(map_field).forecast
    assert forecast is not None
    cost = forecast(MapSettings(cell=50.0), sizes)
    # such a block took 17 s and 0.45 GB on two cores that were not idle: within a factor of three
    assert 17 / 3 < cost.seconds < 17 * 3
    assert 0.45e9 / 3 < cost.memory < 0.45e9 * 3


def test_noise_that_does_not_hold_is_seen_in_chi_squared() -> None:
    _, data = flown()
    small = survey.put(
        "lines", data, "sigma", np.full((data.sizes["station"], 6), 1.5), frame="enu"
    )
    grid = map_field(small, MapSettings(cell=300.0))
    assert (grid["chi_squared"] > 2.0).all()


def test_refusals() -> None:
    _, data = flown()
    with pytest.raises(SurveyError) as caught:
        map_field(data.drop_vars("sigma"), SETTINGS)
    assert str(caught.value) == (
        "SurveyError: the lines lack sigma\n"
        "  where: going into stage map_field\n"
        "  cure:  deliver it, or put the stage that makes it before this one"
    )
    with pytest.raises(FitError) as few:
        map_field(data.isel(station=slice(0, 40)), SETTINGS)
    assert str(few.value) == (
        "FitError: only 40 good stations are left to map\n"
        "  where: stage map_field\n"
        "  cure:  look at the flags of the lines"
    )
    with pytest.raises(FitError) as many:
        map_field(data, MapSettings(spacing=100.0, depth=250.0, most=1000))
    assert str(many.value) == (
        "FitError: 1175 sources at 100 m are more than the 1000 allowed\n"
        "  where: stage map_field\n"
        "  cure:  set a larger 'spacing', or 'most' (33 MB will be used)"
    )
    with pytest.raises(SurveyError) as bare:
        map_field(data, MapSettings(surface="drape"))
    assert str(bare.value) == (
        "SurveyError: a drape needs a terrain model, and there is none\n"
        "  where: stage map_field, surface\n"
        "  cure:  put read_terrain into the pipeline, or choose 'flown' or 'level'"
    )
    with pytest.raises(FitError) as narrow:
        map_field(data.isel(station=slice(0, 51)), SETTINGS)
    assert str(narrow.value) == (
        "FitError: the good stations cover no area\n"
        "  where: stage map_field\n"
        "  cure:  a map needs two lines or more, beside each other"
    )
    nothing = survey.put("lines", data, "sigma", 0.0 * data["sigma"].to_numpy(), frame="enu")
    with pytest.raises(SurveyError) as exact:
        map_field(nothing, SETTINGS)
    assert str(exact.value) == (
        "SurveyError: the smallest of 'sigma' is 0 E, but must be above 0\n"
        "  where: stage map_field\n"
        "  cure:  put estimate_noise before this stage"
    )
    with pytest.raises(ValueError, match="state 'height' with a level surface, and only with it"):
        MapSettings(surface="level")


def test_the_layer_is_the_least_squares_solution() -> None:
    # against numpy's dense solver with the same prior: 1e-8 of masses that nearly cancel
    random = np.random.default_rng(5)
    points = np.column_stack([random.uniform(0, 1000, (60, 2)), np.full(60, 100.0)])
    sources = np.column_stack([random.uniform(0, 1000, (12, 2)), np.full(12, -300.0)])
    readings = tensor_rows(points, sources) @ random.normal(size=12) + random.normal(0, 1, (60, 6))
    layer = fit_layer(points, readings, np.ones((60, 6)), sources)
    rows = np.zeros((60, 6, 18))
    rows[:, :, :12] = tensor_rows(points, sources)
    rows[:, np.arange(6), 12 + np.arange(6)] = 1.0
    prior = np.diag(np.r_[np.full(12, 1 / layer.prior_sd), np.full(6, 1e-4)])
    full = np.vstack([rows.reshape(-1, 18), prior])
    expected = np.linalg.lstsq(full, np.r_[readings.ravel(), np.zeros(18)], rcond=None)[0]
    np.testing.assert_allclose(layer.masses, expected[:12], rtol=1e-6, atol=1e-8)
    np.testing.assert_allclose(layer.constants, expected[12:], rtol=1e-6, atol=1e-8)
    covariance = np.linalg.inv(full.T @ full)
    some = tensor_rows(points[:3], sources).reshape(-1, 12)
    sd = np.sqrt(np.einsum("km,mn,kn->k", some, covariance[:12, :12], some))
    np.testing.assert_allclose(layer.sigma(some), sd, rtol=1e-6)


def test_residuals_stand_at_the_stations() -> None:
    grid = mapped()
    residual = grid["residual"].to_numpy()
    assert residual.shape == flown()[1]["gradient"].shape
    rms = np.sqrt(np.nanmean(residual**2, axis=0))
    np.testing.assert_allclose(rms, grid["residual_rms"], rtol=1e-12)
