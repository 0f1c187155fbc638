import json
from itertools import product
from pathlib import Path

import mpmath
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from gradred.errors import SurveyError
from gradred.newton import elementary, prism
from gradred.newton.bodies import (
    point_tensor,
    prism_gravity,
    prism_potential,
    prism_tensor,
)
from gradred.tensor import trace
from gradred.units import EOTVOS, MILLIGAL, G

Array = NDArray[np.float64]

PUBLISHED = json.loads((Path(__file__).parents[1] / "published" / "prism.json").read_text())
BOX = np.array([[-50.0, 50.0, -40.0, 60.0, -130.0, -20.0]])

# whole sides and places between: no place lies on an edge, where the value is that of a rule
sides = st.integers(1, 100).map(float)
places = st.lists(st.integers(-400, 400).map(lambda n: n + 0.37), min_size=3, max_size=3)


@pytest.mark.parametrize("case", PUBLISHED["cases"], ids=lambda case: str(case["kind"]))
def test_forty_digit_values(case: dict[str, list[float]]) -> None:
    # closed forms of Nagy, Papp and Benedek 2000, J. Geodesy 74, 552-560, in 40 digits
    arguments = (np.array([case["point_m"]]), np.array([case["prism_m"]]), case["density_kg_m3"])
    for got, key in (
        (prism_tensor(*arguments)[0], "tensor_E"),
        (prism_gravity(*arguments)[0], "gravity_mGal"),
    ):
        expected = np.array([float(text) for text in case[key]])
        error = np.abs(got - expected).max() / np.linalg.norm(expected)
        assert error < 1e-11, (case["kind"], error)


@pytest.mark.parametrize(
    ("box", "density", "point", "potential", "gravity", "tensor"),
    [
        # closed forms in 40 digits and Gauss quadrature to 1e-16, z down: signs of z, xz, yz
        # are turned below
        (
            (-50, 50, -50, 50, 100, 200),
            1000.0,
            (0, 0, 0),
            4.437452746929573e-4,
            (0.0, 0.0, 0.2927236040238314),
            (-19.02181037576601, 0, 0, -19.02181037576601, 0, 38.04362075153202),
        ),
        (
            (-50, 50, -50, 50, 100, 200),
            1000.0,
            (120, -75, 20),
            3.475422152594579e-4,
            (-0.1132390623777504, 0.07055257651864185, 0.1227692805280696),
            (
                1.605282103104088,
                -6.890914150780596,
                -12.08028160891568,
                -5.181900581947382,
                7.480566097751905,
                3.576618478843294,
            ),
        ),
        (
            (0, 400, -150, 250, 0, 60),
            2670.0,
            (30, 20, -80),
            7.830265312871998e-3,
            (1.786996520947633, 0.2421203819938297, 2.63113054862837),
            (
                -70.13802296025981,
                9.048320404219168,
                152.3352173643798,
                -81.01252000953967,
                12.12309604827782,
                151.1505429697995,
            ),
        ),
        # the prism of Tsoulis 2012, Geophysics 77, F1-F11, at a point beside it
        (
            (0, 20, 0, 10, 0, 10),
            2670.0,
            (-1, -1, -1),
            2.717908712572218e-5,
            (0.1495820119405209, 0.1193739406784223, 0.1193739406784223),
            (
                40.72879767847103,
                223.5261670322335,
                223.5261670322335,
                -20.36439883923551,
                207.0203928229258,
                -20.36439883923551,
            ),
        ),
    ],
)
def test_published_boxes(
    box: tuple[float, ...],
    density: float,
    point: tuple[float, ...],
    potential: float,
    gravity: tuple[float, ...],
    tensor: tuple[float, ...],
) -> None:
    w, e, s, n, top, bottom = box
    where = np.array([[point[0], point[1], -point[2]]])
    body = (np.array([[w, e, s, n, -bottom, -top]]), density)
    up = np.array([1, 1, -1])
    upward = np.array([1, 1, -1, 1, -1, 1])
    # 16 printed digits; a few roundings of the largest component
    assert prism_potential(where, *body)[0] == pytest.approx(potential, rel=1e-13)
    np.testing.assert_allclose(
        prism_gravity(where, *body)[0], np.array(gravity) * up, rtol=0, atol=1e-13 * max(gravity)
    )
    np.testing.assert_allclose(
        prism_tensor(where, *body)[0],
        np.array(tensor) * upward,
        rtol=0,
        atol=1e-13 * np.abs(tensor).max(),
    )


def test_tsoulis_prism_at_its_corner() -> None:
    # Tsoulis 2012, Geophysics 77, F1-F11: V and gx at a corner, with G = 6.67259e-11 (seen
    # second-hand, and computed again in 40 digits)
    scale = 6.67259e-11 / G
    body = (np.zeros((1, 3)), [[0.0, 20.0, 0.0, 10.0, 0.0, 10.0]], 2670.0)
    assert prism_potential(*body)[0] * scale == pytest.approx(3.194037616042113e-05, rel=1e-14)
    gravity = prism_gravity(*body)[0] * MILLIGAL * scale
    expected = [2.313291489572651e-6, 1.919739199431870e-6, 1.919739199431870e-6]
    np.testing.assert_allclose(gravity, expected, rtol=1e-14)


def exact(point: Array, box: Array) -> Array:
    """Return the tensor per unit G ρ by the corner formula in 50 digits."""
    with mpmath.workdps(50):
        x, y, z = (
            [mpmath.mpf(float(box[2 * a + i])) - float(point[a]) for i in (0, 1)] for a in range(3)
        )
        xx, xy, xz, yy, yz, zz = (mpmath.mpf(0) for _ in range(6))
        for i, j, k in product((0, 1), repeat=3):
            sign = -1 if (i + j + k) % 2 == 0 else 1
            r = mpmath.sqrt(x[i] ** 2 + y[j] ** 2 + z[k] ** 2)
            xx -= sign * mpmath.atan(y[j] * z[k] / (x[i] * r))
            yy -= sign * mpmath.atan(x[i] * z[k] / (y[j] * r))
            zz -= sign * mpmath.atan(x[i] * y[j] / (z[k] * r))
            xy += sign * mpmath.log(z[k] + r)
            xz += sign * mpmath.log(y[j] + r)
            yz += sign * mpmath.log(x[i] + r)
        return np.array([float(v) for v in (xx, xy, xz, yy, yz, zz)])


@pytest.mark.parametrize("shape", [(1, 1, 1), (1, 30, 1), (30, 30, 1), (100, 1, 1)])
def test_every_distance_against_fifty_digits(shape: tuple[int, int, int]) -> None:
    random = np.random.default_rng(sum(shape))
    half = 0.5 * np.array(shape, dtype=float)
    box = np.stack([-half, half], axis=1).ravel()
    worst = 0.0
    for distance in np.geomspace(2e-2, 3e4, 40) * max(shape):
        way = random.normal(size=3)
        way /= np.linalg.norm(way)
        surface = way * np.min(half / np.abs(way))
        point = surface + distance * way
        truth = exact(point, box)
        got = prism_tensor(point[None], box[None], 1.0)[0] * EOTVOS / G
        worst = max(worst, np.abs(got - truth).max() / np.linalg.norm(truth))
    # a cube and a plate keep 2e-13; a needle 100 times as long as thick loses a factor of 100 in
    # the cancelling corner angles close to it
    assert worst < (1e-12 if max(shape) <= 30 else 1e-11)


@settings(deadline=None, max_examples=30)
@given(places, sides, sides, sides, st.integers(1, 9).map(lambda n: n / 10))
def test_a_prism_cut_in_two_is_the_same(
    at: list[float], a: float, b: float, c: float, share: float
) -> None:
    point = np.array([at])
    whole = np.array([[0.0, a, 0.0, b, 0.0, c]])
    cut = share * a
    halves = np.array([[0.0, cut, 0.0, b, 0.0, c], [cut, a, 0.0, b, 0.0, c]])
    # log of a small distance: the point may sit close to the cut, 1e-12 × 1e2 E
    np.testing.assert_allclose(
        prism_tensor(point, halves, 1000.0), prism_tensor(point, whole, 1000.0), rtol=0, atol=1e-9
    )
    np.testing.assert_allclose(
        prism_gravity(point, halves, 1000.0), prism_gravity(point, whole, 1000.0), atol=1e-12
    )
    np.testing.assert_allclose(
        prism_potential(point, halves, 1000.0), prism_potential(point, whole, 1000.0), rtol=1e-9
    )


@settings(deadline=None, max_examples=30)
@given(places)
def test_axes_may_be_exchanged(at: list[float]) -> None:
    point = np.array([at])
    turned = np.array([[at[1], at[2], at[0]]])
    box = BOX[:, [2, 3, 4, 5, 0, 1]]
    one = prism_tensor(point, BOX, 1000.0)[0]
    # y, z, x in the place of x, y, z
    other = prism_tensor(turned, box, 1000.0)[0][[5, 2, 4, 0, 1, 3]]
    np.testing.assert_allclose(other, one, rtol=0, atol=1e-9)


@settings(deadline=None, max_examples=30)
@given(places)
def test_trace_is_zero_outside_and_that_of_poisson_inside(at: list[float]) -> None:
    point = np.array(at)
    inside = np.all((point > BOX[0, ::2]) & (point < BOX[0, 1::2]))
    got = trace(prism_tensor(point[None], BOX, 1000.0)[0])
    # Poisson: -4 π G ρ = -838.7 E inside; rounding of terms up to 838 E
    assert got == pytest.approx(-4 * np.pi * G * 1000.0 / EOTVOS if inside else 0.0, abs=1e-10)


def test_on_faces_edges_and_corners_the_tensor_is_finite() -> None:
    places = np.array(
        [
            [50.0, 0.0, -70.0],
            [-50.0, 10.0, -50.0],
            [0.0, 60.0, -70.0],
            [10.0, -40.0, -70.0],
            [0.0, 0.0, -20.0],
            [0.0, 0.0, -130.0],
        ]
    )
    outward = np.array([[1, 0, 0], [-1, 0, 0], [0, 1, 0], [0, -1, 0], [0, 0, 1], [0, 0, -1]])
    on = prism_tensor(places, BOX, 1000.0)
    just_outside = prism_tensor(places + 1e-7 * outward, BOX, 1000.0)
    # the tensor changes by about 2 π G ρ / 50 m per metre: 1e-6 E over 1e-7 m
    np.testing.assert_allclose(on, just_outside, rtol=0, atol=1e-5)
    np.testing.assert_allclose(trace(on), 0.0, atol=1e-10)
    edges = np.array([[50.0, 60.0, -70.0], [50.0, 60.0, -20.0], [50.0, 60.0, 400.0]])
    assert np.isfinite(prism_tensor(edges, BOX, 1000.0)).all()
    # a prolonged edge is an ordinary point: the same as a hair beside it
    beside = prism_tensor(edges[2:] + [[1e-6, 1e-6, 0]], BOX, 1000.0)
    np.testing.assert_allclose(prism_tensor(edges[2:], BOX, 1000.0), beside, rtol=0, atol=1e-6)


def test_far_away_a_prism_is_a_point_and_linear_in_density() -> None:
    points = np.array([[3e6, -4e6, 5e6]])
    volume = np.prod(BOX[:, 1::2] - BOX[:, ::2])
    middle = 0.5 * (BOX[:, 1::2] + BOX[:, ::2])
    # the quadrupole is (100 / 7e6)2 of the point mass: 2e-10
    one = prism_tensor(points, BOX, 1000.0)
    np.testing.assert_allclose(one, point_tensor(points, middle, [1000.0 * volume]), rtol=1e-9)
    np.testing.assert_allclose(prism_tensor(points, BOX, -2500.0), -2.5 * one, rtol=1e-14)


def test_the_infinite_slab() -> None:
    # 2 π G ρ t: a slab 100 m thick reaching 2000 km each way, Gzz cancels to 0 and gz to
    # 2 π G ρ t (1 - 1 / √2 × 2 z / ... ) with what is missing beyond: t / (√2 π R) of it, 2e-5
    slab = np.array([[-2e6, 2e6, -2e6, 2e6, -100.0, 0.0]])
    at = np.array([[0.0, 0.0, 50.0]])
    bouguer = 2 * np.pi * G * 2670.0 * 100.0 / MILLIGAL
    assert prism_gravity(at, slab, 2670.0)[0, 2] == pytest.approx(-bouguer, rel=1e-4)
    assert np.abs(prism_tensor(at, slab, 2670.0)[0, 5]) < 0.1


def test_the_compiled_forms_are_their_own_text() -> None:
    random = np.random.default_rng(2)
    for _ in range(20):
        low = random.uniform(20.0, 300.0, 3) * random.choice([-1.0, 1.0], 3)
        box = np.stack([low, low + random.uniform(5.0, 50.0, 3)], axis=1).ravel()
        for form in (prism.middle_tensor, prism.near_tensor, prism.far_tensor):
            # the compiler may fuse products: one rounding of terms of order 1, cancelling to 1e-3
            np.testing.assert_allclose(form(*box), form.py_func(*box), rtol=1e-9, atol=1e-13)


def test_logarithm_and_arctangent_keep_their_digits() -> None:
    random = np.random.default_rng(3)
    x = np.concatenate(
        [np.exp(random.uniform(-600, 600, 2000)), 1 + random.uniform(-1e-8, 1e-8, 50)]
    )
    logs = np.array([elementary.fast_log(v) for v in x])
    # stated: one unit in the last place
    assert np.abs(logs - np.log(x)).max() <= 2.3e-16 * np.abs(np.log(x)).max()
    np.testing.assert_allclose(logs, np.log(x), rtol=4e-16, atol=1e-24)
    q = np.concatenate([random.uniform(-1, 1, 2000), 10.0 ** random.uniform(-20, 0, 500)]) * 0.999
    twice = np.array([elementary.fast_atanh2(3.7 * v, 3.7) for v in q])
    # the product 3.7 q is rounded, and the slope of atanh near 1 multiplies that
    error = np.abs(twice - 2 * np.arctanh(q)) / np.abs(2 * np.arctanh(q))
    assert np.all(error < 1e-15 + 4e-16 / (1.0 - np.abs(q)))
    a, b = random.normal(size=(2, 3000)) * 10.0 ** random.uniform(-8, 8, (2, 3000))
    angle = np.array([elementary.fast_arctan2(p, q) for p, q in zip(a, b, strict=True)])
    np.testing.assert_allclose(angle, np.arctan2(a, b), rtol=7e-16)
    assert elementary.fast_arctan2(0.0, 0.0) == 0.0


def test_a_prism_turned_inside_out_is_refused() -> None:
    with pytest.raises(SurveyError) as caught:
        prism_tensor(np.zeros((1, 3)), [[0, 1, 0, 1, 5, 4]], 1000.0)
    assert str(caught.value) == (
        "SurveyError: prism 0 has a side of negative length: [0.0, 1.0, 0.0, 1.0, 5.0, 4.0]\n"
        "  where: gradred.newton\n"
        "  cure:  give west, east, south, north, bottom, top in this order"
    )
    with pytest.raises(SurveyError, match="for 1 bodies, or are not finite"):
        prism_tensor(np.zeros((1, 3)), [[0, 1, 0, 1, 4, 5]], [1.0, 2.0])
