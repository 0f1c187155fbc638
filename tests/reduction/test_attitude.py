import numpy as np
import pytest
import xarray as xr
from hypothesis import given, settings
from hypothesis import strategies as st
from pyproj import Geod

from gradred import survey
from gradred.errors import ReadingsError
from gradred.reduction.attitude import RotateSettings, course_over_ground, rotate_to_enu
from gradred.tensor import body_to_enu, invariants, trace
from tests.synthetic import lines_part, pattern


def body_lines(seed: int = 0) -> xr.Dataset:
    flight = pattern(traverses=4, ties=2)
    random = np.random.default_rng(seed)
    return lines_part(flight, random.normal(0, 50, (len(flight.line), 6)), frame="body")


@settings(deadline=None, max_examples=30)
@given(st.floats(0, 359), st.floats(-75, 75), st.floats(-180, 180))
def test_course_is_the_forward_azimuth_of_proj(
    azimuth: float, latitude: float, longitude: float
) -> None:
    geod = Geod(ellps="WGS84")
    way = np.arange(0.0, 400.0, 50.0)
    lon, lat, _ = geod.fwd(np.full(8, longitude), np.full(8, latitude), np.full(8, azimuth), way)
    difference = (course_over_ground(np.array(lon), np.array(lat)) - azimuth + 180) % 360 - 180
    # stated: a sphere, whose meridian and parallel radii differ by 0.7 % at most
    assert np.abs(difference).max() < 0.2


def test_readings_and_ledger_turn_together() -> None:
    data = body_lines()
    random = np.random.default_rng(1)
    amount = random.normal(0, 1e4, (data.sizes["station"], 6))
    data = survey.subtract(data, "motion", amount, 0.5, rates_from="delivered")
    before = data.copy(deep=True)
    out = rotate_to_enu(data, RotateSettings())
    xr.testing.assert_identical(data, before)
    # 1e4 E turned: rounding 1e-11
    assert survey.closure(out) < 1e-9
    for name in ("gradient", "as_read", "removed_motion", "sigma_motion"):
        assert out[name].attrs["frame"] == "enu"
    assert out["removed_motion"].attrs["rates_from"] == "delivered"
    angles = [data[name].to_numpy() for name in ("heading", "pitch", "roll")]
    np.testing.assert_array_equal(
        out["gradient"].to_numpy(), body_to_enu(*angles).tensor(data["gradient"].to_numpy())
    )
    # laws: trace and invariants do not depend on the axes; 1e12 E3 to rounding
    for before_, after in zip(
        invariants(data["gradient"].to_numpy()), invariants(out["gradient"].to_numpy()), strict=True
    ):
        np.testing.assert_allclose(after, before_, rtol=1e-9, atol=1e-2)
    np.testing.assert_allclose(
        trace(out["as_read"].to_numpy()), trace(data["as_read"].to_numpy()), atol=1e-9
    )


def test_north_east_down_only_changes_names_and_signs() -> None:
    flight = pattern(traverses=2, ties=2)
    tensor = np.tile([1.0, 2.0, 3.0, 4.0, 5.0, 6.0], (len(flight.line), 1))
    out = rotate_to_enu(lines_part(flight, tensor, frame="ned"), RotateSettings())
    # ee = yy, en = xy, eu = -yz, nn = xx, nu = -xz, uu = zz
    np.testing.assert_array_equal(out["gradient"].to_numpy()[0], [4.0, 2.0, -5.0, 1.0, -3.0, 6.0])
    again = rotate_to_enu(out, RotateSettings())
    np.testing.assert_array_equal(again["gradient"].to_numpy(), out["gradient"].to_numpy())


@pytest.mark.parametrize(
    ("turn", "guess"), [(180.0, "reversed"), (90.0, "counted from another direction")]
)
def test_a_heading_off_its_course_is_refused(turn: float, guess: str) -> None:
    data = body_lines()
    wrong = (data["heading"].to_numpy() + turn) % 360.0
    data = survey.put("lines", data, "heading", wrong)
    with pytest.raises(ReadingsError) as caught:
        rotate_to_enu(data, RotateSettings())
    told = str(caught.value)
    # positions of the synthetic lines are not those of the CRS: the course is a hundredth of a
    # degree off, so that ±180 may show with either sign
    assert told.replace("-180", "180") == (
        f"ReadingsError: the heading of line L000 lies {turn:.0f} degrees off its course over "
        "ground\n"
        "  where: stage rotate_to_enu, 6 of 6 lines\n"
        f"  cure:  headings look {guess}: they count clockwise from true north, where the nose "
        "points; set follows_track = false for a platform with a heading of its own"
    )
    assert rotate_to_enu(data, RotateSettings(follows_track=False))["gradient"].frame == "enu"


def test_body_axes_without_attitude_are_refused() -> None:
    with pytest.raises(ReadingsError) as caught:
        rotate_to_enu(body_lines().drop_vars(["pitch", "roll"]), RotateSettings())
    assert str(caught.value) == (
        "ReadingsError: readings in body axes need pitch, roll\n"
        "  where: stage rotate_to_enu\n"
        "  cure:  name the attitude columns in read_lines"
    )
