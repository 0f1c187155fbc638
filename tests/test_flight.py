import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from gradred.flight import Motion, fly, navigation_rate, wander
from gradred.units import EARTH_RATE
from tests.rough_flight import START, body_to_inertial, rough_flight

Array = NDArray[np.float64]

RADIUS, ECCENTRICITY_SQUARED = 6378137.0, 0.00669437999014  # WGS 84, NIMA TR8350.2


def derivative(values: list[Array], step: float) -> Array:
    """Five-point central difference of values at -2, -1, 0, 1, 2 steps; error step**4 / 30."""
    return (values[0] - 8.0 * values[1] + 8.0 * values[3] - values[4]) / (12.0 * step)


def test_rates_are_those_of_the_differentiated_attitude_in_inertial_space() -> None:
    step, at = 0.01, np.linspace(5.0, 55.0, 101)
    around = [at + k * step for k in (-2, -1, 0, 1, 2)]
    turning = [body_to_inertial(rough_flight(t), t) for t in around]
    # dC/dt = C [ω×] with C from body to inertial axes
    cross = np.einsum("nji,njk->nik", turning[2], derivative(turning, step))
    expected = np.stack([cross[:, 2, 1], cross[:, 0, 2], cross[:, 1, 0]], axis=1)
    rates = rough_flight(at).rates
    assert np.abs(rates).max() > 0.05
    # rounding of the matrices, 2e-16 · 1.5 / step, and step**4 / 30 times a fifth derivative of 0.2
    np.testing.assert_allclose(rates, expected, rtol=0, atol=3e-10)


def test_acceleration_is_the_derivative_of_the_rates() -> None:
    step, at = 0.01, np.linspace(5.0, 55.0, 101)
    rates = [rough_flight(at + k * step).rates for k in (-2, -1, 0, 1, 2)]
    # the fifth derivative of the rates jumps at the knots of a quintic: step**4 / 30 of it
    np.testing.assert_allclose(
        rough_flight(at).acceleration, derivative(rates, step), rtol=0, atol=1e-9
    )


def test_a_stationary_platform_feels_the_rate_of_the_earth() -> None:
    knots = np.arange(6.0)
    path = np.broadcast_to([10.0, 60.0, 0.0], (6, 3))
    # heading east: forward is east, starboard is south
    motion = fly(START, knots, path, np.broadcast_to([90.0, 0.0, 0.0], (6, 3)), np.array([2.5]))
    expected = EARTH_RATE * np.array([0.0, -0.5, -np.sqrt(0.75)])
    # rounding of the spline's derivative, 1e-16 · 1 rad / 1 s and a condition number of 10
    np.testing.assert_allclose(motion.rates[0], expected, rtol=0, atol=1e-14)


@settings(deadline=None, max_examples=30)
@given(st.floats(-80.0, 80.0), st.floats(-100.0, 100.0), st.floats(-100.0, 100.0))
def test_transport_rate_is_that_of_the_literature(
    latitude: float, north: float, east: float
) -> None:
    # Groves 2013, section 5.4 (from memory): transport rate of the navigation axes,
    # (v_E / (R_E + h), -v_N / (R_N + h), -v_E tan φ / (R_E + h)), with the radii of curvature
    # R_N in the meridian and R_E across it
    phi, height = np.radians(latitude), 500.0
    shape = 1.0 - ECCENTRICITY_SQUARED * np.sin(phi) ** 2
    meridian = RADIUS * (1.0 - ECCENTRICITY_SQUARED) / shape**1.5 + height
    across = RADIUS / np.sqrt(shape) + height
    earth = EARTH_RATE * np.array([np.cos(phi), 0.0, -np.sin(phi)])
    transport = np.array([east / across, -north / meridian, -east * np.tan(phi) / across])
    got = navigation_rate(
        np.array([phi]), np.array([east / (across * np.cos(phi))]), np.array([north / meridian])
    )
    # rounding, 2e-16 of the Earth's rate
    np.testing.assert_allclose(got[0], earth + transport, rtol=0, atol=1e-19)


def test_positions_and_angles_pass_through_the_knots() -> None:
    knots = np.arange(10.0)
    random = np.random.default_rng(0)
    path = random.uniform(-1.0, 1.0, (10, 3)) + [5.0, 50.0, 700.0]
    attitude = random.uniform(-5.0, 5.0, (10, 3)) + [358.0, 0.0, 0.0]
    motion = fly(START, knots, path, attitude, knots)
    got = np.stack([motion.longitude, motion.latitude, motion.height], axis=1)
    # rounding of the spline at a condition number near 100
    np.testing.assert_allclose(got, path, rtol=1e-13)
    np.testing.assert_allclose(motion.heading, attitude[:, 0] % 360.0, rtol=0, atol=1e-10)
    assert motion.time[3] - motion.time[0] == np.timedelta64(3_000_000_000, "ns")


def test_stations_are_joined_and_selected_in_order() -> None:
    one, two = rough_flight(np.array([1.0, 2.0])), rough_flight(np.array([7.0]))
    both = Motion.join([one, two])
    assert list(both.time) == [*one.time, *two.time]
    np.testing.assert_array_equal(both.rates, np.concatenate([one.rates, two.rates]))
    np.testing.assert_array_equal(both.select(np.array([2])).rates, two.rates)


@pytest.mark.parametrize("correlation", [1.0, 5.0, 20.0])
def test_wander_has_unit_variance_and_the_stated_roughness(correlation: float) -> None:
    series = wander(np.random.default_rng(1), 200_000, correlation)
    # relative standard error of a variance: sqrt(2 √(2π) s / n), 3.2e-2 at s = 20; three of them
    assert np.var(series) == pytest.approx(1.0, abs=0.1)
    # white noise through a Gaussian of standard deviation s is correlated as exp(-k²/4s²)
    lag = round(2.0 * correlation)
    found = np.mean(series[lag:] * series[:-lag]) / np.var(series)
    assert found == pytest.approx(np.exp(-(lag**2) / (4.0 * correlation**2)), abs=0.05)
