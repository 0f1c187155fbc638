"""Ratios measured in one run; absolute times drift with the machine and are asserted nowhere."""

import time
from collections.abc import Callable
from itertools import product

import numba
import numpy as np
import pytest
from numpy.typing import NDArray

from gradred.newton import prism
from gradred.newton.heightfield import exact_terrain_tensor, terrain_tensor

Array = NDArray[np.float64]

pytestmark = pytest.mark.benchmark


def seconds(work: Callable[[], object], repeats: int = 3) -> float:
    """Return the shortest of some runs after a first one that compiles."""
    work()
    taken = []
    for _ in range(repeats):
        begun = time.perf_counter()
        work()
        taken.append(time.perf_counter() - begun)
    return min(taken)


def corners(point: Array, boxes: Array) -> Array:
    """Return the sum of prisms by the textbook corner formula in vectorised numpy."""
    x, y, z = (boxes[:, 2 * a : 2 * a + 2] - point[a] for a in range(3))
    out = np.zeros(6)
    for i, j, k in product((0, 1), repeat=3):
        sign = 1.0 if (i + j + k) % 2 else -1.0
        a, b, c = x[:, i], y[:, j], z[:, k]
        r = np.sqrt(a * a + b * b + c * c)
        out += sign * np.array(
            [
                -np.arctan2(b * c, a * r).sum(),
                np.log(c + r).sum(),
                np.log(b + r).sum(),
                -np.arctan2(a * c, b * r).sum(),
                np.log(a + r).sum(),
                -np.arctan2(a * b, c * r).sum(),
            ]
        )
    return out


def test_prism_against_vectorised_numpy() -> None:
    random = np.random.default_rng(0)
    low = random.uniform(-3000, 3000, (20_000, 2))
    top = random.uniform(100.0, 400.0, 20_000)
    sides = (low[:, 0], low[:, 0] + 30, low[:, 1], low[:, 1] + 30, np.zeros(20_000), top)
    boxes = np.stack(sides, axis=1)
    points = np.array([[0.0, 0.0, 500.0]]) + random.uniform(0, 50, (20, 3))
    weights, out = np.ones(len(boxes)), np.empty((20, 6))
    threads = numba.get_num_threads()
    numba.set_num_threads(1)
    try:
        ours = seconds(lambda: prism.tensor_sums(points, boxes, weights, out)) / out.shape[0]
    finally:
        numba.set_num_threads(threads)
    theirs = seconds(lambda: corners(points[0], boxes))
    error = np.abs(corners(points[0], boxes) - out[0]).max() / np.linalg.norm(out[0])
    print(
        f"\nprism: {ours / 2e4 * 1e9:.1f} ns per pair and core, numpy {theirs / 2e4 * 1e9:.0f} ns, "
        f"ratio {theirs / ours:.1f}, difference {error:.1e}"
    )
    assert error < 1e-9  # the corner formula's own cancellation at 100 sides


def test_terrain_against_direct_sums() -> None:
    random = np.random.default_rng(0)
    count, cell = 1000, 30.0
    wave = np.hypot(np.fft.fftfreq(count)[:, None], np.fft.rfftfreq(count)[None])
    wave[0, 0] = np.inf
    spectrum = np.fft.rfft2(random.standard_normal((count, count))) * wave**-2.0
    height = np.fft.irfft2(spectrum, (count, count))
    height = 600.0 + 150.0 * height / height.std()
    axis = np.arange(count) * cell
    place = random.integers(50, count - 50, (5000, 2))
    shift = random.uniform(-15, 15, (5000, 2))
    above = height[place[:, 1], place[:, 0]] + 80.0
    points = np.column_stack([axis[place] + shift, above])
    some = points[:20]
    exact = exact_terrain_tensor(some, height, axis, axis, density=2670.0, base=0.0)
    direct = seconds(
        lambda: exact_terrain_tensor(some, height, axis, axis, density=2670.0, base=0.0), 1
    )
    scale = direct / len(some) * len(points)
    for tolerance in (0.1, 0.01):

        def work(asked: float = tolerance) -> Array:
            return terrain_tensor(
                points, height, axis, axis, density=2670.0, base=0.0, tolerance=asked
            )

        taken, error = seconds(work), np.abs(work()[: len(some)] - exact).max()
        print(
            f"terrain, 5,000 stations over 1,000 × 1,000 cells, {tolerance:g} E asked: "
            f"{taken:.2f} s, largest error {error:.4f} E, direct exact sums {scale:.0f} s "
            f"(from {len(some)} stations), ratio {scale / taken:.0f}"
        )
        assert error < tolerance
