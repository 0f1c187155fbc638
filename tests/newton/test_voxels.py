import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from gradred.newton.bodies import prism_tensor
from gradred.newton.voxels import VoxelOperator

Array = NDArray[np.float64]


def mesh() -> tuple[Array, Array, Array]:
    random = np.random.default_rng(0)
    w, s = (a.ravel() for a in np.meshgrid(np.arange(0, 600.0, 100), np.arange(0, 500.0, 100)))
    top = random.uniform(-20, 20, w.size)
    prisms = np.column_stack([w, w + 100, s, s + 100, top - 150, top])
    points = np.column_stack([random.uniform(0, 600, (40, 2)), random.uniform(60, 120, 40)])
    return points, prisms, random.uniform(0.2, 0.5, (40, 6))


def test_forward_is_the_sum_of_prisms() -> None:
    points, prisms, weights = mesh()
    density = np.random.default_rng(1).normal(0, 300, len(prisms))
    got = VoxelOperator(points, prisms, weights).forward(density)
    expected = (prism_tensor(points, prisms, density) * weights).ravel()
    # stated: single precision, 30 terms
    np.testing.assert_allclose(got, expected, rtol=0, atol=3e-6 * np.abs(expected).max())


@settings(deadline=None, max_examples=20)
@given(st.integers(0, 2**31))
def test_dot_test(seed: int) -> None:
    operator = VoxelOperator(*mesh())
    random = np.random.default_rng(seed)
    x, y = random.normal(size=operator.shape[1]), random.normal(size=operator.shape[0])
    left, right = operator.forward(x) @ y, x @ operator.adjoint(y)
    size = np.linalg.norm(operator.forward(x)) * np.linalg.norm(y)
    # both products run in single precision over 240 and 30 terms
    assert abs(left - right) < 1e-5 * size


def test_sensitivity_is_the_length_of_the_columns() -> None:
    operator = VoxelOperator(*mesh())
    expected = np.linalg.norm(operator.matrix.astype(np.float64), axis=0)
    np.testing.assert_allclose(operator.sensitivity(), expected, rtol=1e-6)
