import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from gradred.errors import SurveyError
from gradred.newton.bodies import (
    point_gravity,
    point_potential,
    point_tensor,
    sphere_gravity,
    sphere_potential,
    sphere_tensor,
)
from gradred.tensor import to_matrix, trace
from gradred.units import EOTVOS, MILLIGAL, G

Array = NDArray[np.float64]

ORIGIN = np.zeros((1, 3))


def test_sphere_straight_below() -> None:
    # closed form G M / r2 and 2 G M / r3 evaluated in 40 digits, 13 of them printed:
    # R 100 m, 1000 kg/m3, centre 200 m below
    tensor = sphere_tensor(ORIGIN, [[0.0, 0.0, -200.0]], [100.0], [1000.0])[0]
    side, down = -34.9465530797573, 69.8931061595145
    np.testing.assert_allclose(tensor, [side, 0, 0, side, 0, down], rtol=1e-13, atol=1e-13)
    gravity = sphere_gravity(ORIGIN, [[0.0, 0.0, -200.0]], [100.0], [1000.0])[0]
    np.testing.assert_allclose(gravity, [0, 0, -0.698931061595145], rtol=1e-13, atol=1e-15)


def test_sphere_off_to_the_side() -> None:
    # same sphere, centre 100 m east, 50 m north, 200 m below; the source has z down: xz and yz
    # change their sign here
    centre = [[100.0, 50.0, -200.0]]
    tensor = sphere_tensor(ORIGIN, centre, [100.0], [1000.0])[0]
    expected = [
        -9.96044157921274,
        6.64029438614182,
        -26.5611775445673,
        -19.9208831584255,
        -13.2805887722836,
        29.8813247376382,
    ]
    np.testing.assert_allclose(tensor, expected, rtol=2e-13)  # the printed digits
    gravity = sphere_gravity(ORIGIN, centre, [100.0], [1000.0])[0]
    assert gravity[2] == pytest.approx(-0.464820607029928, rel=1e-13)
    assert gravity[0] == pytest.approx(0.232410303514964, rel=1e-13)


def test_inside_a_sphere_the_trace_is_that_of_poisson() -> None:
    centre = np.array([[10.0, -20.0, 30.0]])
    inside = centre + [[3.0, 4.0, -5.0]]
    tensor = sphere_tensor(inside, centre, [100.0], [1000.0])[0]
    # Poisson 1813: trace Γ = -4 π G ρ, shared equally by the three axes in a sphere
    third = -4.0 / 3.0 * np.pi * G * 1000.0 / EOTVOS
    np.testing.assert_allclose(tensor, [third, 0, 0, third, 0, third], rtol=1e-14, atol=1e-12)
    gravity = sphere_gravity(inside, centre, [100.0], [1000.0])[0]
    expected = third * EOTVOS / MILLIGAL * np.array([3.0, 4.0, -5.0])
    np.testing.assert_allclose(gravity, expected, rtol=1e-14)
    # centre of a sphere: 3/2 of the potential at its surface (Blakely 1995, from memory)
    at = [
        sphere_potential(p, centre, [100.0], [1000.0])[0] for p in (centre, centre + [[100, 0, 0]])
    ]
    assert at[0] == pytest.approx(1.5 * at[1], rel=1e-14)


@settings(deadline=None, max_examples=30)
@given(
    st.lists(st.floats(-500, 500), min_size=3, max_size=3),
    st.floats(1.0, 200.0),
    st.floats(-1000, 3000),
)
def test_gravity_and_tensor_are_derivatives_of_the_potential(
    at: list[float], radius: float, density: float
) -> None:
    point, centre = np.array([at]), np.array([[30.0, -40.0, -900.0]])
    h = 0.5
    steps = h * np.eye(3)

    def gravity(where: Array) -> Array:
        return sphere_gravity(where, centre, [radius], [density])

    slope = np.array(
        [
            sphere_potential(point + s, centre, [radius], [density])[0]
            - sphere_potential(point - s, centre, [radius], [density])[0]
            for s in steps
        ]
    ) / (2 * h)
    # central differences leave out h2/6 of the third derivative: (h / r)2 below 2e-6 at r > 400;
    # potentials of 1e-3 cancel to 1e-6 of themselves: 1e-9
    scale = np.abs(gravity(point)).max()
    np.testing.assert_allclose(slope / MILLIGAL, gravity(point)[0], rtol=0, atol=1e-5 * scale)
    bend = np.array([(gravity(point + s) - gravity(point - s))[0] for s in steps]) / (2 * h)
    tensor = to_matrix(sphere_tensor(point, centre, [radius], [density]))[0]
    np.testing.assert_allclose(
        bend * MILLIGAL / EOTVOS, tensor, rtol=0, atol=1e-5 * np.abs(tensor).max()
    )
    assert (
        abs(trace(sphere_tensor(point, centre, [radius], [density])[0]))
        < 1e-14 * np.abs(tensor).sum() + 1e-300
    )


def test_points_add_and_are_the_sphere_from_outside() -> None:
    centres = np.array([[0.0, 0.0, -300.0], [200.0, 100.0, -400.0]])
    mass = 4.0 / 3.0 * np.pi * 50.0**3 * np.array([500.0, -300.0])
    points = np.random.default_rng(0).uniform(-500, 500, (20, 3)) + [0, 0, 600.0]
    radii, density = [50.0, 50.0], [500.0, -300.0]
    for point_form, sphere_form in (
        (point_potential, sphere_potential),
        (point_gravity, sphere_gravity),
        (point_tensor, sphere_tensor),
    ):
        together = point_form(points, centres, mass)
        apart = sum(
            point_form(points, c[None], m[None]) for c, m in zip(centres, mass, strict=True)
        )
        # two terms of opposite sign: rounding of the larger
        np.testing.assert_allclose(together, apart, rtol=1e-12)
        ball = sphere_form(points, centres, radii, density)
        np.testing.assert_allclose(ball, together, rtol=1e-11)


def test_bad_arguments_are_refused() -> None:
    with pytest.raises(SurveyError) as caught:
        point_tensor([[0.0, 0.0]], [[0.0, 0.0, 1.0]], [1.0])
    assert str(caught.value) == (
        "SurveyError: points have the shape (1, 2), but must be (n, 3)\n"
        "  where: gradred.newton\n"
        "  cure:  give 3 numbers per row"
    )
    with pytest.raises(SurveyError, match="where the field is infinite"):
        point_tensor(ORIGIN, ORIGIN, [1.0])
    with pytest.raises(SurveyError, match="1 rows of the points are not finite"):
        point_tensor([[0.0, np.nan, 0.0]], [[0.0, 0.0, 1.0]], [1.0])
