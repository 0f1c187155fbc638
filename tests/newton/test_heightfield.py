from functools import cache
from itertools import pairwise
from pathlib import Path
from typing import Any

import matplotlib.cbook
import numba
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from gradred.errors import FitError, SurveyError
from gradred.newton.bodies import prism_gravity, prism_tensor
from gradred.newton.heightfield import (
    cell_edges,
    exact_terrain_tensor,
    terrain_attraction,
    terrain_gravity,
    terrain_tensor,
)
from gradred.newton.pyramid import surface_at
from gradred.tensor import trace
from gradred.units import EOTVOS, G

Array = NDArray[np.float64]
Terrain = tuple[Array, Array, Array]

DATA = Path(__file__).parents[1] / "data"
DENSITY = 2670.0


@cache
def jacksboro() -> Terrain:
    """Return 3-arcsecond terrain of relief 840 m, oblong cells; a sample data set of matplotlib.

    The latitudes stated in it are one grid height too far north; only the step is used here.
    """
    sample: Any = matplotlib.cbook.get_sample_data("jacksboro_fault_dem.npz")
    height = np.asarray(sample["elevation"], dtype=np.float64)[::-1]
    sample.close()
    step = np.radians(3.0 / 3600.0) * 6371e3
    x = np.arange(height.shape[1]) * step * np.cos(np.radians(36.3))
    return x, np.arange(height.shape[0]) * step, np.ascontiguousarray(height)


@cache
def wisconsin() -> Terrain:
    """Return the whole part of a real ground surface at 200 m (tests/data/SOURCES.md)."""
    with np.load(DATA / "dem" / "wisconsin_surface_and_bedrock_200m.npz") as stored:
        height, x, y = stored["surface_m"][::-1], stored["x_m"], stored["y_m"][::-1]
    rows, columns = np.s_[150:330], np.s_[90:250]
    part = np.asarray(height[rows, columns], dtype=np.float64)
    part = np.where(np.isfinite(part), part, np.nanmedian(part))
    return x[columns], y[rows], np.ascontiguousarray(part)


def draped(terrain: Terrain, count: int, clearance: float, seed: int) -> Array:
    """Return stations at random places, a clearance above the cell below them."""
    x, y, height = terrain
    random = np.random.default_rng(seed)
    i = random.integers(3, len(x) - 3, count)
    j = random.integers(3, len(y) - 3, count)
    shift = random.uniform(-0.5, 0.5, (count, 2)) * [x[1] - x[0], y[1] - y[0]]
    return np.stack([x[i] + shift[:, 0], y[j] + shift[:, 1], height[j, i] + clearance], axis=1)


@pytest.mark.parametrize("tolerance", [0.1, 0.01])
@pytest.mark.parametrize(
    ("terrain", "clearance"), [(jacksboro, 80.0), (jacksboro, 10.0), (wisconsin, 60.0)]
)
def test_the_tolerance_is_kept_at_every_station_over_real_terrain(
    terrain: object, clearance: float, tolerance: float
) -> None:
    x, y, height = terrain()  # type: ignore[operator]
    points = draped((x, y, height), 200, clearance, seed=int(clearance))
    exact = exact_terrain_tensor(points, height, x, y, density=DENSITY, base=0.0)
    got = terrain_tensor(points, height, x, y, density=DENSITY, base=0.0, tolerance=tolerance)
    assert np.abs(got - exact).max() < tolerance


def test_exact_columns_are_the_prisms_they_stand_for() -> None:
    x, y, height = jacksboro()
    part = height[100:130, 100:125] - 400.0  # some columns stand below the base, some above
    x, y = x[100:125], y[100:130]
    ex, ey = cell_edges(x, "x"), cell_edges(y, "y")
    points = draped((x, y, part), 20, 60.0, seed=3)
    points[0, :2] = ex[5], ey[7]  # above a corner of cells
    w, s = np.meshgrid(ex[:-1], ey[:-1])
    e, n = np.meshgrid(ex[1:], ey[1:])
    low, high = np.minimum(part, 0.0), np.maximum(part, 0.0)
    prisms = np.stack([w, e, s, n, low, high], axis=-1).reshape(-1, 6)
    density = np.where(part > 0.0, DENSITY, -DENSITY).ravel()
    # two orders of the same 750 terms of up to 100 E: rounding
    expected = prism_tensor(points, prisms, density)
    got = exact_terrain_tensor(points, part, x, y, density=DENSITY, base=0.0)
    np.testing.assert_allclose(got, expected, rtol=0, atol=1e-9)
    got = terrain_tensor(points, part, x, y, density=DENSITY, base=0.0, tolerance=0.01)
    np.testing.assert_allclose(got, expected, rtol=0, atol=0.01)


@pytest.mark.parametrize(
    ("height", "width", "above", "density", "zz"),
    [
        # Gaussian hills on a flat base, on their axis: closed in one integral, computed in 40
        # digits by two different integrals
        (200.0, 500.0, 280.0, 2670.0, 398.72285106517),
        (50.0, 300.0, 130.0, 2670.0, 148.08442440866),
        (100.0, 400.0, 180.0, 2000.0, 181.29628597149),
    ],
)
def test_gaussian_hills(
    height: float, width: float, above: float, density: float, zz: float
) -> None:
    errors = []
    for cell in (20.0, 10.0):
        axis = np.arange(-6 * width, 6 * width + 1, cell)
        hill = height * np.exp(-(axis[:, None] ** 2 + axis**2) / (2 * width**2))
        at = np.array([[0.0, 0.0, above]])
        got = terrain_tensor(at, hill, axis, axis, density=density, base=0.0, tolerance=0.002)
        errors.append(got[0, 5] - zz)
        np.testing.assert_allclose(got[0, [1, 2, 4]], 0.0, atol=0.004)
    # flat tops leave out terms of the second order in the cell: a quarter at half the cell, and
    # what is left is far below the tolerance of any survey
    assert abs(errors[1]) < 0.3 * abs(errors[0]) + 0.004
    assert abs(errors[1]) < 2e-3 * zz


def test_cone() -> None:
    # cone of height 200 m and radius 500 m, 80 m above its top: 40 digits
    axis = np.arange(-510.0, 511.0, 5.0)
    hill = np.maximum(200.0 * (1.0 - np.hypot(axis[:, None], axis) / 500.0), 0.0)
    at = np.array([[0.0, 0.0, 280.0]])
    got = terrain_tensor(at, hill, axis, axis, density=2670.0, base=0.0, tolerance=0.01)[0, 5]
    # the tip, flat over one cell, misses 2 m over 5 m: measured 0.06 %, allowed twice that
    assert got == pytest.approx(423.73824490766, rel=1.2e-3)


@settings(deadline=None, max_examples=15)
@given(st.floats(10.0, 500.0), st.floats(20.0, 300.0), st.floats(-3000.0, 3000.0))
def test_a_level_model_is_one_prism(thick: float, clearance: float, density: float) -> None:
    axis = np.arange(-1500.0, 1501.0, 50.0)
    at = np.array([[30.0, -420.0, thick + clearance], [1600.0, 10.0, thick + clearance]])
    level = np.full((61, 61), thick)
    got = terrain_tensor(at, level, axis, axis, density=density, base=0.0, tolerance=0.01)
    box = [[-1525.0, 1525.0, -1525.0, 1525.0, 0.0, thick]]
    np.testing.assert_allclose(got, prism_tensor(at, box, density), rtol=0, atol=0.01)


def test_linear_in_density_and_base_by_base() -> None:
    x, y, height = jacksboro()
    points = draped((x, y, height), 30, 80.0, seed=8)
    one, double = (
        terrain_tensor(points, height, x, y, density=rho, base=0.0, tolerance=tolerance)
        for rho, tolerance in ((1000.0, 0.01), (2000.0, 0.02))
    )
    np.testing.assert_allclose(double, 2.0 * one, rtol=1e-12)
    raised = terrain_tensor(points, height, x, y, density=1000.0, base=200.0, tolerance=0.01)
    ex, ey = cell_edges(x, "x"), cell_edges(y, "y")
    plate = prism_tensor(points, [[ex[0], ex[-1], ey[0], ey[-1], 0.0, 200.0]], 1000.0)
    np.testing.assert_allclose(raised + plate, one, rtol=0, atol=0.02)
    assert not terrain_tensor(points, height, x, y, density=0.0, base=0.0, tolerance=0.01).any()


def test_threads_and_order_do_not_matter() -> None:
    x, y, height = jacksboro()
    points = draped((x, y, height), 90, 80.0, seed=9)
    keywords = {"density": DENSITY, "base": 0.0, "tolerance": 0.05}
    together = terrain_tensor(points, height, x, y, **keywords)  # type: ignore[arg-type]
    threads = numba.get_num_threads()
    numba.set_num_threads(1)
    try:
        alone = terrain_tensor(points, height, x, y, **keywords)  # type: ignore[arg-type]
    finally:
        numba.set_num_threads(threads)
    np.testing.assert_array_equal(together, alone)
    turned = terrain_tensor(points[::-1], height, x, y, **keywords)  # type: ignore[arg-type]
    np.testing.assert_array_equal(turned[::-1], together)


def test_hard_places() -> None:
    cell = 30.0
    axis_x, axis_y = np.arange(0.0, 900.0, cell), np.arange(0.0, 600.0, 20.0)
    cliff = np.where(axis_x[None, :] < 450.0, 300.0, 0.0) * np.ones((30, 1))
    points = np.array(
        [
            [436.0, 300.0, 305.0],  # 5 m above the edge of a cliff
            [460.0, 300.0, 150.0],  # below the summit, beside the wall
            [435.0, 310.0, 320.0],  # above the common edge of two cells
            [300.0, 300.0, 300.0],  # on the ground
            [300.0, 300.0, 120.0],  # inside the rock
            [-500.0, 300.0, 400.0],  # outside the model
            [450.0, 300.0, -50.0],  # below all of it
        ]
    )
    got = terrain_tensor(points, cliff, axis_x, axis_y, density=DENSITY, base=0.0, tolerance=0.01)
    exact = exact_terrain_tensor(points, cliff, axis_x, axis_y, density=DENSITY, base=0.0)
    np.testing.assert_allclose(got, exact, rtol=0, atol=0.01)
    wall = prism_tensor(points, [[-15.0, 435.0, -10.0, 590.0, 0.0, 300.0]], DENSITY)
    # the same block in 450 pieces: rounding, but for the third point above the edge of the wall
    np.testing.assert_allclose(np.delete(exact, 2, 0), np.delete(wall, 2, 0), rtol=0, atol=1e-8)
    inside = trace(got[4])
    # Poisson: -4 π G ρ within the rock, zero elsewhere
    assert inside == pytest.approx(-4 * np.pi * G * DENSITY / EOTVOS, abs=0.02)
    np.testing.assert_allclose(trace(np.delete(got, 4, 0)), 0.0, atol=0.02)


def test_uneven_cells() -> None:
    random = np.random.default_rng(4)
    x, y = (np.cumsum(random.uniform(10.0, 60.0, n)) for n in (70, 50))
    height = random.uniform(100.0, 200.0, (50, 70))
    points = np.stack([random.uniform(300, 1500, 40), random.uniform(300, 900, 40)], axis=1)
    points = np.column_stack([points, random.uniform(210.0, 400.0, 40)])
    exact = exact_terrain_tensor(points, height, x, y, density=DENSITY, base=0.0)
    got = terrain_tensor(points, height, x, y, density=DENSITY, base=0.0, tolerance=0.05)
    assert np.abs(got - exact).max() < 0.05


def test_what_cannot_be_served_is_refused() -> None:
    axis = np.arange(0.0, 300.0, 30.0)
    height = np.full((10, 10), 100.0)
    at = np.array([[150.0, 150.0, 200.0]])
    keywords = {"density": DENSITY, "base": 0.0, "tolerance": 0.1}

    def refusal(*arguments: object, **changed: object) -> str:
        with pytest.raises((SurveyError, FitError)) as caught:
            terrain_tensor(*arguments, **(keywords | changed))  # type: ignore[arg-type]
        return str(caught.value)

    gap = height.copy()
    gap[3, 4] = np.nan
    assert refusal(at, gap, axis, axis) == (
        "SurveyError: 1 of 100 terrain cells have no height\n"
        "  where: terrain model\n"
        "  cure:  fill them or cut the model to where it is whole; a gap is not level ground"
    )
    assert refusal(at, height, axis[:-1], axis) == (
        "SurveyError: heights have the shape (10, 10) for 10 northings and 9 eastings\n"
        "  where: terrain model\n"
        "  cure:  give one row per northing and one column per easting"
    )
    assert refusal(at, height, axis[::-1], axis).startswith(
        "SurveyError: eastings of the terrain cells must be two or more ascending numbers"
    )
    assert refusal(at, height, axis, axis, tolerance=0.0).startswith(
        "SurveyError: tolerance 0 E and surface 'prism' cannot be served"
    )


def rough(count: int, cell: float, seed: int) -> Terrain:
    """Return a small, rough model."""
    axis = np.arange(count, dtype=np.float64) * cell
    random = np.random.default_rng(seed)
    return axis, axis, 100.0 + 15.0 * random.normal(size=(count, count))


def refined(terrain: Terrain, cuts: int) -> Array:
    """Return prisms of the bilinear surface, every cell cut into cuts × cuts flat pieces."""
    x, y, height = terrain
    ex, ey = cell_edges(x, "x"), cell_edges(y, "y")
    prisms = []
    for j in range(len(y)):
        for i in range(len(x)):
            wx = np.linspace(ex[i], ex[i + 1], cuts + 1)
            wy = np.linspace(ey[j], ey[j + 1], cuts + 1)
            for south, north in pairwise(wy):
                for west, east in pairwise(wx):
                    middle = (0.5 * (west + east), 0.5 * (south + north))
                    top = surface_at(height, ex, ey, i, j, *middle)
                    prisms.append((west, east, south, north, 0.0, top))
    return np.array(prisms)


def test_the_bilinear_surface_against_fine_prisms() -> None:
    terrain = rough(12, 30.0, 1)
    x, y, height = terrain
    random = np.random.default_rng(2)
    points = np.column_stack([random.uniform(60, 270, (12, 2)), random.uniform(190, 240, 12)])
    four, eight = (prism_tensor(points, refined(terrain, n), DENSITY) for n in (8, 16))
    # flat pieces err with the square of their side (Richardson 1911, Phil. Trans. A 210, 307-357)
    limit = (4.0 * eight - four) / 3.0
    exact = exact_terrain_tensor(
        points, height, x, y, density=DENSITY, base=0.0, surface="bilinear"
    )
    flat = exact_terrain_tensor(points, height, x, y, density=DENSITY, base=0.0)
    # what is left is of the fourth power: below the 5e-3 E by which the last two still differ less
    assert np.abs(exact - limit).max() < 5e-3
    assert np.abs(flat - limit).max() > 1.0
    for tolerance in (0.1, 0.01):
        got = terrain_tensor(
            points, height, x, y, density=DENSITY, base=0.0, tolerance=tolerance, surface="bilinear"
        )
        assert np.abs(got - limit).max() < tolerance + 5e-3


@pytest.mark.parametrize("tolerance", [0.1, 0.01])
def test_the_tolerance_is_kept_against_the_bilinear_surface(tolerance: float) -> None:
    x, y, height = jacksboro()
    x, y, height = x[100:220], y[100:220], np.ascontiguousarray(height[100:220, 100:220])
    points = draped((x, y, height), 60, 80.0, seed=5)
    keywords = {"density": DENSITY, "base": 0.0, "surface": "bilinear"}
    exact = exact_terrain_tensor(points, height, x, y, **keywords)  # type: ignore[arg-type]
    got = terrain_tensor(points, height, x, y, tolerance=tolerance, **keywords)  # type: ignore[arg-type]
    assert np.abs(got - exact).max() < tolerance


def test_a_slope_is_the_same_slope_at_any_cell_size() -> None:
    at = np.array([[30.0, -20.0, 120.0], [-400.0, 300.0, 40.0]])
    got = []
    for cell in (25.0, 50.0):
        axis = np.arange(-6000.0 + cell / 2, 6000.0, cell)
        slope = 0.1 * axis[None, :] + 0.05 * axis[:, None]
        got.append(
            terrain_tensor(
                at,
                slope,
                axis,
                axis,
                density=DENSITY,
                base=-1000.0,
                tolerance=0.01,
                surface="bilinear",
            )
        )
    # two sums to 0.01 E each; the rim, level over half a cell, differs by 2 m at 6 km: 0.002 E
    np.testing.assert_allclose(got[0], got[1], rtol=0, atol=0.022)


def test_gravity_in_the_same_pass() -> None:
    x, y, height = jacksboro()
    x, y, height = x[:90], y[:80], np.ascontiguousarray(height[:80, :90])
    points = draped((x, y, height), 25, 80.0, seed=6)
    ex, ey = cell_edges(x, "x"), cell_edges(y, "y")
    w, s = np.meshgrid(ex[:-1], ey[:-1])
    e, n = np.meshgrid(ex[1:], ey[1:])
    prisms = np.stack([w, e, s, n, np.zeros_like(w), height], axis=-1).reshape(-1, 6)
    keywords = {"density": DENSITY, "base": 0.0, "tolerance": 0.05}
    tensor, gravity = terrain_attraction(points, height, x, y, **keywords)  # type: ignore[arg-type]
    np.testing.assert_allclose(tensor, prism_tensor(points, prisms, DENSITY), rtol=0, atol=0.05)
    # stated: 0.1 mGal per E of tolerance, measured 0.004 mGal at 0.05 E; here cells of 90 m
    np.testing.assert_allclose(gravity, prism_gravity(points, prisms, DENSITY), rtol=0, atol=0.02)
    np.testing.assert_array_equal(
        gravity,
        terrain_gravity(points, height, x, y, **keywords),  # type: ignore[arg-type]
    )


def test_gravity_of_a_gaussian_hill() -> None:
    # hill of 200 m and 500 m on a flat base, 280 m above it: gz 15.400732403492 mGal, 40 digits
    axis = np.arange(-3000.0, 3001.0, 20.0)
    hill = 200.0 * np.exp(-(axis[:, None] ** 2 + axis**2) / (2 * 500.0**2))
    at = np.array([[0.0, 0.0, 280.0]])
    got = terrain_gravity(
        at, hill, axis, axis, density=2670.0, base=0.0, tolerance=0.01, surface="bilinear"
    )
    # bilinear pieces cut the rounded top by cell² / 12 of its curvature, 0.03 m under the station
    # or 2 π G ρ 0.03 m = 0.003 mGal; and the model ends at 6 widths
    np.testing.assert_allclose(got[0], [0.0, 0.0, -15.400732403492], rtol=0, atol=8e-3)
