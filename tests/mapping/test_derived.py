import numpy as np
import pytest
import xarray as xr
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from gradred import survey
from gradred.errors import SurveyError
from gradred.mapping.derived import DERIVED, DeriveSettings, derive_maps, derived_maps
from gradred.newton.bodies import point_tensor
from gradred.tensor import enu_to_grid
from tests.synthetic import CRS

Array = NDArray[np.float64]


def field() -> xr.Dataset:
    axis = np.arange(-500.0, 501.0, 100.0)
    x, y = np.meshgrid(axis, axis)
    points = np.column_stack([x.ravel(), y.ravel(), np.zeros(x.size)])
    tensor = point_tensor(points, [[30.0, 20.0, -400.0]], [5e9]).reshape(*x.shape, 6)
    grid = survey.new("grid", CRS, easting=axis, northing=axis)
    return survey.put("grid", grid, "gradient", tensor, frame="grid")


def test_over_a_point_the_dimensionality_is_one() -> None:
    # eigenvalues 2, -1, -1 of a point: I1 = -3, I2 = 2, D = 27 × 4 / (4 × 27) = 1 everywhere
    out = derive_maps(field(), DeriveSettings())
    np.testing.assert_allclose(out["dimensionality"], 1.0, rtol=1e-12)
    k = 2 * 6.67430e-11 * 1e9 * 5e9 / np.sum(np.array([30.0, 20.0, 400.0]) ** 2) ** 1.5 / 2
    middle = derived_maps(point_tensor(np.zeros((1, 3)), [[30.0, 20.0, -400.0]], [5e9]))
    assert middle["invariant_1"][0] == pytest.approx(-3 * k**2, rel=1e-12)
    assert middle["invariant_2"][0] == pytest.approx(2 * k**3, rel=1e-12)


def test_over_a_line_of_mass_the_dimensionality_is_zero() -> None:
    # infinite line along y at depth h: Γzz = -Γxx = 2 G λ (h² - x²) / r⁴, Γyy = 0
    x, h = np.array([-200.0, 50.0, 300.0]), 150.0
    r4 = (x**2 + h**2) ** 2
    zz, xz = (h**2 - x**2) / r4, -2 * x * h / r4
    none = np.zeros_like(x)
    got = derived_maps(1e6 * np.stack([-zz, none, xz, none, none, zz], axis=1))
    np.testing.assert_allclose(got["dimensionality"], 0.0, atol=1e-12)
    # closed form: the gradient of gz of a line has the length 1 / r² and half its zz as curvature
    np.testing.assert_allclose(got["total_gradient"], 1e6 / (x**2 + h**2), rtol=1e-12)
    np.testing.assert_allclose(got["horizontal_curvature"], 0.5e6 * np.abs(zz), rtol=1e-12)
    expected = np.degrees(np.arctan2(h**2 - x**2, 2 * np.abs(x) * h))
    np.testing.assert_allclose(got["tilt"], expected, rtol=1e-12)


@settings(deadline=None, max_examples=30)
@given(st.lists(st.floats(-100, 100), min_size=5, max_size=5), st.floats(-180, 180))
def test_turning_the_map_changes_nothing(five: list[float], angle: float) -> None:
    xx, xy, xz, yy, yz = five
    tensor = np.array([[xx, xy, xz, yy, yz, -(xx + yy)]])
    turned = enu_to_grid(angle).tensor(tensor)
    for name in ("horizontal_curvature", "invariant_1", "invariant_2", "total_gradient"):
        # products of up to three numbers of 200: rounding 1e-9
        np.testing.assert_allclose(
            derived_maps(turned)[name], derived_maps(tensor)[name], rtol=1e-9, atol=1e-8
        )
    both = [derived_maps(t)["dimensionality"] for t in (tensor, turned)]
    assert np.isnan(both[0]).all() or (0.0 <= both[0][0] <= 1.0)


def test_missing_stays_missing_and_nothing_is_nothing() -> None:
    grid = field()
    tensor = grid["gradient"].to_numpy().copy()
    tensor[0, 0], tensor[1, 1] = np.nan, 0.0
    grid = survey.put("grid", grid, "gradient", tensor, frame="grid")
    before = grid.copy(deep=True)
    out = derive_maps(grid, DeriveSettings())
    xr.testing.assert_identical(grid, before)
    for name in DERIVED:
        assert np.isnan(out[name].to_numpy()[0, 0])
    assert np.isnan(out["tilt"].to_numpy()[1, 1])
    assert out["total_gradient"].to_numpy()[1, 1] == 0.0


def test_another_frame_is_refused() -> None:
    grid = field()
    grid["gradient"].attrs["frame"] = "enu"
    with pytest.raises(SurveyError) as caught:
        derive_maps(grid, DeriveSettings())
    assert caught.value.what == ("'gradient' of grid is in the frame 'enu', but must be in 'grid'")
