import numpy as np
import pytest
import xarray as xr
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from gradred import survey
from gradred.errors import ReadingsError
from gradred.reduction.motion import (
    MotionSettings,
    rates_from_attitude,
    remove_motion,
    rotation_sigma,
    rotation_term,
)
from gradred.tensor import axial_vector, from_matrix, to_matrix, trace
from gradred.units import EARTH_RATE, EOTVOS
from tests.synthetic import lines_part, pattern

Array = NDArray[np.float64]

rates_list = st.lists(st.floats(-0.2, 0.2), min_size=3, max_size=3)


def cross(v: Array) -> Array:
    x, y, z = np.moveaxis(v, -1, 0)
    o = np.zeros_like(x)
    return np.stack([o, -z, y, z, o, -x, -y, x, o], axis=-1).reshape(*x.shape, 3, 3)


def turning(noise: float = 2.0, seed: int = 0) -> xr.Dataset:
    """Return nine-element readings of a constant tensor on a platform that swings."""
    random = np.random.default_rng(seed)
    flight = pattern(traverses=6, ties=3)
    n = len(flight.line)
    t = np.arange(n, dtype=float)[:, None]
    pace, size = np.array([0.05, 0.07, 0.03]), np.array([8e-3, 6e-3, 5e-3])
    rates = size * np.sin(2 * np.pi * pace * t + np.array([0.1, 0.5, 2.0]))
    change = size * 2 * np.pi * pace * np.cos(2 * np.pi * pace * t + np.array([0.1, 0.5, 2.0]))
    gamma = np.array([10.0, -5.0, 3.0, -4.0, 8.0, -6.0])
    W = cross(rates)
    reading = to_matrix(gamma) - (W @ W + cross(change)) / EOTVOS
    reading = reading + random.normal(0.0, noise, (n, 3, 3))
    part = lines_part(flight, from_matrix(reading), frame="body")
    part = survey.put("lines", part, "antisymmetric", axial_vector(reading), frame="body")
    return survey.put("lines", part, "rates", rates, frame="body")


def test_the_trace_at_one_degree_per_second() -> None:
    # 2 ω² at 1 deg/s: 609 234.8396 E, computed in 40 digits
    rates = np.radians([[1.0, 0.0, 0.0], [0.0, 0.6, 0.8]])
    np.testing.assert_allclose(trace(rotation_term(rates)), 609234.8396, atol=1e-4)


def test_the_rate_of_the_earth() -> None:
    # ω² = 5.317494117 E (GRS80's rate, nine decimals); a platform at rest on the pole reads it
    # across the axis and nothing along it
    term = rotation_term(np.array([[0.0, 0.0, -EARTH_RATE]]))[0]
    np.testing.assert_allclose(term, [5.317494117, 0, 0, 5.317494117, 0, 0], atol=1e-9)


@settings(deadline=None, max_examples=30)
@given(rates_list)
def test_the_term_is_minus_the_square_of_the_cross_product_matrix(rates: list[float]) -> None:
    omega = np.array([rates])
    W = cross(omega)
    # products of 0.2 rad/s: 4e7 E to 1e-16
    np.testing.assert_allclose(rotation_term(omega), from_matrix(-W @ W) / EOTVOS, atol=1e-8)


def test_sigma_is_the_spread_of_noisy_rates() -> None:
    random = np.random.default_rng(1)
    rates, sd = np.array([[0.02, -0.01, 0.03]]), 1e-6
    noisy = rotation_term(rates + random.normal(0.0, sd, (40_000, 3)))
    # 40 000 samples: 0.35 %, at 4 of it
    np.testing.assert_allclose(rotation_sigma(rates, sd)[0], noisy.std(axis=0), rtol=0.015)


def test_what_is_left_is_the_tensor_and_the_ledger_closes() -> None:
    data = turning()
    before = data.copy(deep=True)
    out = remove_motion(data, MotionSettings())
    xr.testing.assert_identical(data, before)
    rest = out["gradient"].to_numpy().mean(axis=0)
    # noise of 2 E over √549 readings (less off the diagonal): 0.085 E, at 4 of it
    np.testing.assert_allclose(rest, [10.0, -5.0, 3.0, -4.0, 8.0, -6.0], atol=0.35)
    # terms up to 2e5 E: rounding 3e-11
    assert survey.closure(out) < 1e-9
    told = out["removed_motion"].attrs
    assert told["trace_slope"] == pytest.approx(1.0, abs=5 * told["trace_slope_sd"])
    assert told["antisymmetric_slope"] == pytest.approx(1.0, abs=0.02)
    assert told["rates_from"] == "delivered"


def refusal(data: xr.Dataset) -> str:
    with pytest.raises(ReadingsError) as caught:
        remove_motion(data, MotionSettings())
    return str(caught.value)


def test_degrees_declared_as_radians_are_caught_by_the_trace() -> None:
    data = turning()
    data = survey.put("lines", data, "rates", np.degrees(data["rates"].to_numpy()), frame="body")
    assert refusal(data) == (
        "ReadingsError: the rates do not belong to the readings: the trace follows 2|ω|² with the "
        "slope 0.000305\n"
        "  where: stage remove_motion, all lines together\n"
        "  cure:  rates 57.3 times what the readings say; this looks like deg/s declared as "
        "rad/s: correct the unit or the sign in read_lines"
    )


def test_degrees_are_caught_by_the_antisymmetric_part_alone() -> None:
    data = turning()
    data["gradient"].attrs["completed"] = "zz"
    data = survey.put("lines", data, "rates", np.degrees(data["rates"].to_numpy()), frame="body")
    told = refusal(data)
    assert "changes of the rates follow the antisymmetric part by" in told
    assert "this looks like deg/s declared as rad/s" in told


def test_a_turned_sign_is_caught_by_the_antisymmetric_part() -> None:
    data = turning()
    data = survey.put("lines", data, "rates", -data["rates"].to_numpy(), frame="body")
    assert "the sign of the rates or of the readings is turned" in refusal(data)


def test_rates_too_small_to_be_judged_are_not_refused() -> None:
    data = turning()
    data = survey.put("lines", data, "rates", np.zeros((data.sizes["station"], 3)), frame="body")
    quiet = np.random.default_rng(2).normal(0.0, 3.0, (data.sizes["station"], 3))
    data = survey.put("lines", data, "antisymmetric", quiet, frame="body")
    data = survey.put("lines", data, "gradient", np.tile(quiet, 2), frame="body")
    assert np.isnan(remove_motion(data, MotionSettings())["removed_motion"].attrs["trace_slope"])


def test_a_completed_element_stays_minus_the_sum_of_the_others() -> None:
    data = turning()
    five = data["gradient"].to_numpy().copy()
    five[:, 5] = -(five[:, 0] + five[:, 3])
    for name in ("gradient", "as_read"):
        data = survey.put("lines", data, name, five, frame="body", completed="zz")
    out = remove_motion(data.drop_vars("antisymmetric"), MotionSettings())
    # as delivered: no trace; rounding of 2e5 E
    np.testing.assert_allclose(trace(out["gradient"].to_numpy()), 0.0, atol=1e-9)
    assert survey.closure(out) < 1e-9
    rest = out["gradient"].to_numpy().mean(axis=0)
    np.testing.assert_allclose(rest[:5], [10.0, -5.0, 3.0, -4.0, 8.0], atol=0.35)


def test_rates_from_attitude_hold_earth_and_transport_rate() -> None:
    # a level flight straight east along a parallel: closed form. ω is the Earth's rate plus the
    # rate of longitude about the axis, seen in body axes (x east, y south, z down)
    n, latitude, pace = 40, 35.0, 60.0 / (6371e3 * np.cos(np.radians(35.0)))
    seconds = np.arange(n, dtype=float)
    longitude = 10.0 + np.degrees(pace) * seconds
    attitude = np.tile([90.0, 0.0, 0.0], (n, 1))
    got = rates_from_attitude(
        seconds, longitude, np.full(n, latitude), attitude, np.zeros(n, dtype=np.intp)
    )
    spin = EARTH_RATE + pace
    expected = spin * np.array([0.0, -np.cos(np.radians(latitude)), -np.sin(np.radians(latitude))])
    # longitudes of 10 degrees differ by 5e-4 a second: 1e-16 × 0.2 rad / 1 s
    np.testing.assert_allclose(got, np.tile(expected, (n, 1)), rtol=0, atol=1e-14)


def test_without_rates_the_attitude_serves_and_says_so() -> None:
    data = turning().drop_vars(["rates", "antisymmetric"])
    still = np.zeros((data.sizes["station"], 6))
    data = survey.put("lines", data, "gradient", still, frame="body")
    for name in ("pitch", "roll"):
        data = survey.put("lines", data, name, np.zeros(data.sizes["station"]))
    out = remove_motion(data, MotionSettings(attitude_sd=0.01))
    assert out["removed_motion"].attrs["rates_from"] == "attitude, differentiated"
    # a straight flight turns with the Earth (5.3 E) and with the vertical it follows: 50 m/s east
    # at 48 degrees add 1.17e-5 rad/s to 7.29e-5 about the axis, at most (8.46e-5)2 = 7.2 E
    assert 5.3 < np.abs(out["removed_motion"].to_numpy()).max() < 7.2
    with pytest.raises(ReadingsError) as caught:
        remove_motion(data.drop_vars("roll"), MotionSettings())
    assert str(caught.value) == (
        "ReadingsError: the lines hold neither rates nor roll\n"
        "  where: stage remove_motion\n"
        "  cure:  deliver rates or the whole attitude, or leave this stage out if the rotation "
        "was removed before delivery"
    )
