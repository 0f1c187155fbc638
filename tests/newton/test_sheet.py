import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray

from gradred.newton.sheet import dipping_sheet


def _volume(vertices: NDArray[np.float64], faces: NDArray[np.int64]) -> float:
    a, b, c = (vertices[faces[:, k]] for k in range(3))
    return float(np.einsum("ij,ij->", a, np.cross(b, c))) / 6.0


def test_an_upright_sheet_striking_north_is_the_box_it_should_be() -> None:
    vertices, _ = dipping_sheet(100.0, 200.0, -50.0, 0.0, 90.0, 400.0, 300.0, 20.0)
    # rounding of cos 90° = 6e-17 times 300 m
    assert vertices.min(axis=0) == pytest.approx([90.0, 0.0, -350.0], abs=1e-12)
    assert vertices.max(axis=0) == pytest.approx([110.0, 400.0, -50.0], abs=1e-12)


def test_a_flat_sheet_reaches_to_the_right_of_strike() -> None:
    vertices, _ = dipping_sheet(0.0, 0.0, -50.0, 90.0, 0.0, 400.0, 300.0, 20.0)
    # looking east, right is south; rounding of sin 90° times 400 m
    assert vertices.min(axis=0) == pytest.approx([-200.0, -300.0, -60.0], abs=1e-12)
    assert vertices.max(axis=0) == pytest.approx([200.0, 0.0, -40.0], abs=1e-12)


def test_a_sheet_striking_north_east_dips_to_the_south_east() -> None:
    vertices, _ = dipping_sheet(0.0, 0.0, 0.0, 45.0, 30.0, 2.0, 100.0, 2.0)
    lower_edge = vertices[4:].mean(axis=0)
    # 100 m down a slope of 30°: 50 m down, 86.6 m to the south-east
    assert lower_edge == pytest.approx(
        [np.sqrt(3) / 2 * 100 / np.sqrt(2), -np.sqrt(3) / 2 * 100 / np.sqrt(2), -50.0], abs=1e-12
    )


@given(
    strike=st.floats(-360.0, 360.0),
    dip=st.floats(0.0, 180.0),
    length=st.floats(1.0, 5000.0),
    extent=st.floats(1.0, 3000.0),
    thickness=st.floats(0.1, 500.0),
)
def test_volume_is_length_times_extent_times_thickness(
    strike: float, dip: float, length: float, extent: float, thickness: float
) -> None:
    vertices, faces = dipping_sheet(0.0, 0.0, -200.0, strike, dip, length, extent, thickness)
    # a sum of twelve determinants of corners up to 4 km away: rounding of 12 · eps · (4 km)³
    rounding = 12 * 2.3e-16 * np.abs(vertices).max() ** 3
    expected = length * extent * thickness
    assert _volume(vertices, faces) == pytest.approx(expected, abs=rounding + 1e-12 * expected)


def test_every_edge_is_shared_by_two_faces_in_opposite_senses() -> None:
    _, faces = dipping_sheet(0.0, 0.0, 0.0, 10.0, 60.0, 3.0, 2.0, 1.0)
    edges = {(int(f[k]), int(f[(k + 1) % 3])) for f in faces for k in range(3)}
    assert len(edges) == 36
    assert all((b, a) in edges for a, b in edges)
