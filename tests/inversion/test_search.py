import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray
from scipy.optimize import OptimizeResult

from gradred.inversion.search import Body, Problem, Regional, covariance_of
from gradred.inversion.shapes import SHAPES
from gradred.units import G

Array = NDArray[np.float64]

VALUES = {
    "sphere": np.array([100.0, -50.0, -350.0, 120.0, 700.0]),
    "prism": np.array([-200.0, 150.0, -120.0, 400.0, 300.0, 250.0, -450.0]),
    "sheet": np.array([50.0, 250.0, -100.0, 40.0, 60.0, 700.0, 400.0, 80.0, 600.0]),
}


def problem(kinds: list[str], regional: Regional = "constant", seed: int = 0) -> Problem:
    random = np.random.default_rng(seed)
    points = np.column_stack([random.uniform(-800, 800, (60, 2)), random.uniform(60, 140, 60)])
    bodies = [
        Body(k, VALUES[k], np.ones(len(VALUES[k]), dtype=bool), np.full(len(VALUES[k]), np.inf))
        for k in kinds
    ]
    readings = random.normal(0.0, 30.0, (60, 6))
    readings[7, 2] = np.nan
    return Problem(points, readings, random.uniform(2.0, 4.0, (60, 6)), bodies, regional)


@pytest.mark.parametrize("kind", ["sphere", "prism", "sheet"])
@pytest.mark.parametrize("regional", ["constant", "linear"])
def test_jacobian_is_the_slope_of_the_residuals(kind: str, regional: Regional) -> None:
    wanted = problem([kind, "sphere"], regional)
    moved = np.random.default_rng(1).normal(0.0, 0.5, len(wanted.names))
    jacobian = wanted.jacobian(moved)
    for column in range(len(moved)):

        def slope(step: float, column: int = column) -> Array:
            half = np.zeros(len(moved))
            half[column] = 0.5 * step
            rise = wanted.residuals(moved + half) - wanted.residuals(moved - half)
            return np.asarray(rise / step)

        # two steps, extrapolated to none (Richardson); the module's own step cuts off 1e-6
        extrapolated = (4.0 * slope(0.02) - slope(0.04)) / 3.0
        size = np.abs(extrapolated).max()
        np.testing.assert_allclose(jacobian[:, column], extrapolated, rtol=0, atol=1e-5 * size)


def test_derivatives_of_a_sphere_in_closed_form() -> None:
    # potential G m / r: on the vertical through the centre zz is 2 G m / r3, so that its slope by
    # the centre's height is 6 G m / r4, by the radius 3 zz / R, by the density zz / rho
    values = np.array([0.0, 0.0, -300.0, 100.0, 500.0])
    body = Body("sphere", values, np.ones(5, dtype=bool), np.full(5, np.inf))
    slopes = body.derivatives(values, np.array([[0.0, 0.0, 80.0]]))[0, 5]
    zz = 2.0 * G * 4.0 / 3.0 * np.pi * 100.0**3 * 500.0 / 380.0**3 * 1e9
    expected = [0.0, 0.0, 3.0 * zz / 380.0, 3.0 * zz / 100.0, zz / 500.0]
    # a central difference of 0.1 m cuts off (0.1 / 100)2 of the slope by the radius
    np.testing.assert_allclose(slopes, expected, rtol=2e-6, atol=1e-9 * zz)


@pytest.mark.parametrize("regional", ["constant", "linear"])
def test_the_regional_field_is_eliminated_as_if_it_were_fitted_along(regional: Regional) -> None:
    wanted = problem(["prism"], regional)
    values = wanted.values(np.zeros(7))
    level = wanted.trend(wanted.points) @ wanted.coefficients(values)
    misfit = np.nan_to_num(wanted.readings) - wanted.tensor(values, wanted.points) - level
    scores = wanted.residuals(np.zeros(7))[:360]
    # the same least squares by two ways: rounding
    np.testing.assert_allclose(scores, (misfit * wanted.weights).ravel(), atol=1e-9)


@settings(deadline=None, max_examples=20)
@given(st.floats(-2000, 2000).filter(lambda x: abs(x) > 1.0), st.integers(0, 100))
def test_the_tensor_is_linear_in_the_contrast_and_has_no_trace(density: float, seed: int) -> None:
    points = np.random.default_rng(seed).uniform([-900, -900, 60], [900, 900, 200], (20, 3))
    for kind, values in VALUES.items():
        other = np.append(values[:-1], density)
        got = SHAPES[kind].tensor(other, points)
        np.testing.assert_allclose(
            got, SHAPES[kind].tensor(values, points) * density / values[-1], rtol=1e-12
        )
        trace = got[:, 0] + got[:, 3] + got[:, 5]
        # outside mass the trace is 0: rounding of the sums over faces
        np.testing.assert_allclose(trace, 0.0, atol=1e-9 * np.abs(got).max())


def test_covariance_of_independent_noise_is_that_of_least_squares() -> None:
    wanted = problem(["sphere"])
    free = np.array([True, True, True, False, True])
    body = Body("sphere", VALUES["sphere"], free, np.full(5, np.inf))
    wanted = Problem(wanted.points, wanted.readings, wanted.sigma, [body])
    jacobian = wanted.jacobian(np.zeros(4))
    # residuals of size 0.5 that change sign from one reading to the next: nothing is common to a
    # line, and chi-squared is below 1
    fun = np.append(0.5 * (-1.0) ** np.arange(60)[:, None] * np.ones((60, 6)), np.zeros(4))
    end = OptimizeResult()
    end.update(x=np.zeros(4), fun=fun, jac=jacobian)
    got = covariance_of(wanted, end, np.repeat(np.arange(6), 10))
    units = jacobian / wanted.steps
    np.testing.assert_allclose(got, np.linalg.inv(units.T @ units), rtol=1e-9)
