import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation as Reference

from gradred.errors import SurveyError
from gradred.tensor import (
    axial_vector,
    body_to_enu,
    enu_to_grid,
    from_matrix,
    horizontal_curvature,
    invariants,
    ned_to_body,
    ned_to_enu,
    to_matrix,
    trace,
)

Array = NDArray[np.float64]

angles = st.floats(-180.0, 180.0)
tensors = st.lists(st.floats(-1e4, 1e4), min_size=6, max_size=6).map(np.array)


@settings(deadline=None, max_examples=50)
@given(angles, st.floats(-89.0, 89.0), angles)
def test_yaw_pitch_roll_is_the_intrinsic_zyx_sequence(
    heading: float, pitch: float, roll: float
) -> None:
    # scipy, a general library: intrinsic ZYX turns the axes of ned into those of body
    expected = Reference.from_euler("ZYX", [heading, pitch, roll], degrees=True).as_matrix().T
    np.testing.assert_allclose(ned_to_body(heading, pitch, roll).matrix, expected, atol=1e-14)


def test_directions_of_the_body_axes() -> None:
    # conventions: heading 90 flies east; nose up lifts x; right wing down lowers y
    east, level = np.array([0.0, 1.0, 0.0]), np.array([1.0, 0.0, 0.0])
    np.testing.assert_allclose(
        ned_to_body(90.0, 0.0, 0.0).inverse().vector(level), east, atol=1e-15
    )
    nose_up = ned_to_body(0.0, 10.0, 0.0).inverse().vector(level)
    assert nose_up[2] == pytest.approx(-np.sin(np.radians(10.0)))
    right_down = ned_to_body(0.0, 0.0, 10.0).inverse().vector(np.array([0.0, 1.0, 0.0]))
    assert right_down[2] == pytest.approx(np.sin(np.radians(10.0)))
    up = body_to_enu(37.0, 0.0, 0.0).vector(np.array([0.0, 0.0, -1.0]))
    np.testing.assert_allclose(up, [0.0, 0.0, 1.0], atol=1e-15)


@settings(deadline=None, max_examples=50)
@given(tensors, angles, st.floats(-89.0, 89.0), angles)
def test_six_components_turn_as_the_matrix_does(
    tensor: Array, heading: float, pitch: float, roll: float
) -> None:
    turn = body_to_enu(heading, pitch, roll)
    matrix = turn.matrix @ to_matrix(tensor) @ turn.matrix.T
    # products of numbers up to 1e4: rounding 1e-11
    np.testing.assert_allclose(turn.tensor(tensor), from_matrix(matrix), rtol=0, atol=1e-10)
    there_and_back = turn.inverse().tensor(turn.tensor(tensor))
    np.testing.assert_allclose(there_and_back, tensor, rtol=0, atol=1e-10)


@settings(deadline=None, max_examples=50)
@given(tensors, angles, st.floats(-89.0, 89.0), angles)
def test_trace_and_invariants_are_the_same_in_every_frame(
    tensor: Array, heading: float, pitch: float, roll: float
) -> None:
    turned = body_to_enu(heading, pitch, roll).tensor(tensor)
    # sums of products of two and three numbers up to 1e4: rounding 1e-16 × 1e8 and 1e12, times 10
    assert trace(turned) == pytest.approx(trace(tensor), abs=1e-10)
    for got, expected, rounding in zip(
        invariants(turned), invariants(tensor), (1e-5, 1e-1), strict=True
    ):
        assert got == pytest.approx(expected, abs=rounding)
    assert invariants(tensor)[1] == pytest.approx(np.linalg.det(to_matrix(tensor)), abs=1e-1)


@settings(deadline=None, max_examples=30)
@given(tensors, st.floats(-5.0, 5.0))
def test_curvature_does_not_feel_the_convergence(tensor: Array, convergence: float) -> None:
    turned = enu_to_grid(convergence).tensor(tensor)
    expected = horizontal_curvature(tensor)
    assert horizontal_curvature(turned) == pytest.approx(expected, abs=1e-10)
    # conventions: one degree moves 100 E by about 2 × 1.7 %
    assert np.abs(turned - tensor).max() <= 4 * np.radians(5.0) * np.abs(tensor).max() + 1e-9


def test_grid_north_east_of_true_north_turns_a_north_vector_west() -> None:
    # convergence is the azimuth of grid north: true north lies west of it
    seen = enu_to_grid(2.0).vector(np.array([0.0, 1.0, 0.0]))
    np.testing.assert_allclose(seen, [-np.sin(np.radians(2)), np.cos(np.radians(2)), 0], atol=1e-15)


def test_axial_vector_of_a_cross_product_matrix() -> None:
    m = np.array([1.0, -2.0, 3.0])
    matrix = np.array([[0, -m[2], m[1]], [m[2], 0, -m[0]], [-m[1], m[0], 0]])
    np.testing.assert_array_equal(axial_vector(matrix), m)
    v = np.array([0.3, 0.4, -0.7])
    np.testing.assert_allclose(matrix @ v, np.cross(m, v), atol=1e-15)


def test_spread_of_independent_elements() -> None:
    random = np.random.default_rng(8)
    turn = body_to_enu(25.0, 3.0, -7.0)
    sigma = np.array([1.0, 2.0, 3.0, 4.0, 5.0, 6.0])
    sample = turn.tensor(random.normal(0.0, sigma, (40_000, 6)))
    # 40 000 samples: 0.35 % sampling error, at 4 of it
    np.testing.assert_allclose(turn.spread(sigma), sample.std(axis=0), rtol=0.014)


def test_frames_that_do_not_meet_are_refused() -> None:
    with pytest.raises(SurveyError) as caught:
        ned_to_body(0.0, 0.0, 0.0).then(ned_to_enu())
    assert str(caught.value) == (
        "SurveyError: a rotation to 'body' cannot be followed by one from 'ned'\n"
        "  where: joining ned→body and ned→enu\n"
        "  cure:  put the missing rotation between them, or turn one of them round"
    )
