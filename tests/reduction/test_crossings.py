import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from gradred.reduction.crossings import (
    distance_along,
    find_crossings,
    huber_weights,
    reading_weights,
)
from tests.synthetic import pattern


def test_a_grid_of_lines_crosses_once_per_pair() -> None:
    flight = pattern(traverses=7, ties=4)
    found = find_crossings(flight.easting, flight.northing, flight.line)
    assert len(found) == 7 * 4
    # the crossing lies on both lines: its place computed from either is the same to rounding
    # of eastings near 1e6 m (1e-10 m)
    places = []
    for side in range(2):
        a, b, f = found.stations[:, side], found.following[:, side], found.fraction[:, side]
        places.append(
            np.stack([x[a] + f * (x[b] - x[a]) for x in (flight.easting, flight.northing)])
        )
    np.testing.assert_allclose(places[0], places[1], rtol=0, atol=1e-8)
    # the closed form: traverse k at easting 100 + k (2800 / 6), tie m at northing 100 + m (2800/3)
    east = 350_100.0 + found.line[:, 0] * 2800.0 / 6
    north = 5_300_100.0 + (found.line[:, 1] - 7) * 2800.0 / 3
    np.testing.assert_allclose(places[0], np.stack([east, north]), rtol=0, atol=1e-8)


@settings(deadline=None, max_examples=30)
@given(st.floats(0.0, 360.0))
def test_turning_the_map_keeps_the_crossings(angle: float) -> None:
    flight = pattern(traverses=5, ties=3, step=97.0)
    c, s = np.cos(np.radians(angle)), np.sin(np.radians(angle))
    x, y = flight.easting - flight.easting.mean(), flight.northing - flight.northing.mean()
    assert len(find_crossings(c * x - s * y, s * x + c * y, flight.line)) == 15


def test_lines_that_meet_at_a_small_angle_are_left_out() -> None:
    t = np.linspace(-1000.0, 1000.0, 41)
    east, north = np.concatenate([t, t]), np.concatenate([0 * t + 3.0, 0.1 * t])
    line = np.repeat([0, 1], 41)
    assert len(find_crossings(east, north, line)) == 0
    assert len(find_crossings(east, north, line, angle=5.0)) == 1


@settings(deadline=None, max_examples=30)
@given(st.floats(-5, 5), st.floats(-5, 5), st.floats(-5, 5))
def test_a_quadratic_along_the_line_is_read_exactly(a: float, b: float, c: float) -> None:
    flight = pattern(traverses=3, ties=2, step=30.0)
    found = find_crossings(flight.easting, flight.northing, flight.line)
    along = distance_along(flight.easting, flight.northing, flight.line)
    good = np.ones(len(along), dtype=bool)
    good[::7] = False
    weights = reading_weights(found, 0, along, flight.line, good, 150.0)
    field = a + b * along / 1e3 + c * (along / 1e3) ** 2
    before, after = found.stations[:, 0], found.following[:, 0]
    place = along[before] + found.fraction[:, 0] * (along[after] - along[before])
    # least squares with a quadratic is exact for one: rounding of the pseudo-inverse, 1e-12 of
    # values up to 60
    expected = a + b * place / 1e3 + c * (place / 1e3) ** 2
    np.testing.assert_allclose(weights @ field, expected, rtol=0, atol=1e-9)
    np.testing.assert_allclose(np.asarray(weights.sum(axis=1)), 1.0, rtol=1e-11)


def test_a_crossing_without_a_good_reading_has_no_weights() -> None:
    flight = pattern(traverses=3, ties=2)
    found = find_crossings(flight.easting, flight.northing, flight.line)
    along = distance_along(flight.easting, flight.northing, flight.line)
    none = np.zeros(len(along), dtype=bool)
    assert reading_weights(found, 1, along, flight.line, none, 100.0).nnz == 0


def test_huber_weights_bound_the_pull() -> None:
    pull = huber_weights(np.array([0.0, 1.0, 5.0, -50.0])) * np.array([0.0, 1.0, 5.0, -50.0])
    # Huber 1964: the influence is the residual up to 1.345 and constant beyond
    assert pull == pytest.approx([0.0, 1.0, 1.345, -1.345])
