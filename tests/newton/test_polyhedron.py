import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from gradred.errors import SurveyError
from gradred.newton.bodies import (
    point_tensor,
    prism_gravity,
    prism_potential,
    prism_tensor,
    sphere_tensor,
)
from gradred.newton.polyhedron import (
    polyhedron_gravity,
    polyhedron_potential,
    polyhedron_tensor,
)
from gradred.newton.sheet import dipping_sheet
from gradred.tensor import trace
from gradred.units import EOTVOS, MILLIGAL, G

Array = NDArray[np.float64]

BOX = np.array([-40.0, 60.0, -30.0, 20.0, -150.0, -80.0])
CORNERS = np.array(
    [[BOX[i], BOX[2 + j], BOX[4 + k]] for i in (0, 1) for j in (0, 1) for k in (0, 1)]
)
# counterclockwise from outside; corner number 4 i + 2 j + k
SIX = [(0, 1, 3, 2), (4, 6, 7, 5), (0, 4, 5, 1), (2, 3, 7, 6), (0, 2, 6, 4), (1, 5, 7, 3)]
TWELVE = [t for a, b, c, d in SIX for t in ((a, b, c), (a, c, d))]


def around(count: int, low: float, high: float, seed: int) -> Array:
    random = np.random.default_rng(seed)
    way = random.normal(size=(count, 3))
    way /= np.linalg.norm(way, axis=1)[:, None]
    return np.array([10.0, -5.0, -115.0]) + way * random.uniform(low, high, (count, 1))


@pytest.mark.parametrize("faces", [SIX, TWELVE], ids=["quadrilaterals", "triangles"])
@pytest.mark.parametrize(("low", "high"), [(66.0, 300.0), (300.0, 1900.0), (2100.0, 2e5)])
def test_equals_the_prism_it_describes(
    faces: list[tuple[int, ...]], low: float, high: float
) -> None:
    points = around(60, low, high, 1)
    for ours, theirs in (
        (polyhedron_tensor, prism_tensor),
        (polyhedron_gravity, prism_gravity),
        (polyhedron_potential, prism_potential),
    ):
        got = ours(points, CORNERS, faces, 2000.0).reshape(60, -1)
        expected = theirs(points, BOX[None], 2000.0).reshape(60, -1)
        error = np.abs(got - expected).max(axis=1) / np.linalg.norm(expected, axis=1)
        assert error.max() < 1e-10


def test_inside_and_on_a_face() -> None:
    inside = np.array([[0.0, 0.0, -100.0], [30.0, -20.0, -140.0]])
    got = polyhedron_tensor(inside, CORNERS, SIX, 2000.0)
    np.testing.assert_allclose(got, prism_tensor(inside, BOX[None], 2000.0), rtol=0, atol=1e-9)
    np.testing.assert_allclose(trace(got), -4 * np.pi * G * 2000.0 / EOTVOS, rtol=1e-12)
    face = np.array([[0.0, 0.0, -80.0]])
    both = [prism_tensor(face + [[0, 0, s]], BOX[None], 2000.0) for s in (1e-7, -1e-7)]
    # the stated rule: the mean of both sides; changes of 1e-6 E over 1e-7 m
    mean = 0.5 * (both[0] + both[1])
    np.testing.assert_allclose(polyhedron_tensor(face, CORNERS, SIX, 2000.0), mean, atol=1e-5)


@settings(deadline=None, max_examples=20)
@given(st.floats(-180, 180), st.floats(10, 90), st.floats(5, 60))
def test_sheet_is_a_point_far_away_and_trace_free(strike: float, dip: float, width: float) -> None:
    vertices, faces = dipping_sheet(0.0, 0.0, -200.0, strike, dip, 400.0, 200.0, width)
    near = around(10, 400.0, 900.0, 3)
    # rounding of edge terms of order 1 × G ρ = 67 E
    np.testing.assert_allclose(
        trace(polyhedron_tensor(near, vertices, faces, 1000.0)), 0, atol=1e-9
    )
    far = np.array([[4e5, 3e5, 2e5]])
    mass = 1000.0 * 400.0 * 200.0 * width
    middle = np.mean(vertices, axis=0)[None]
    # the quadrupole is (200 / 5e5)2 of the point mass
    np.testing.assert_allclose(
        polyhedron_tensor(far, vertices, faces, 1000.0),
        point_tensor(far, middle, [mass]),
        rtol=1e-5,
    )


def test_a_many_faced_ball_is_a_sphere() -> None:
    # an octahedron cut finer and finer, its vertices on the sphere; its volume falls short of the
    # sphere's by a known ratio; the facets (0.1 rad, a sagitta of 1e-3 R) are not of one size, and
    # what that leaves is below the sagitta
    eye = np.eye(3)
    vertices = [*eye, *(-eye)]
    faces = [(0, 1, 2), (1, 3, 2), (3, 4, 2), (4, 0, 2), (1, 0, 5), (3, 1, 5), (4, 3, 5), (0, 4, 5)]
    for _ in range(4):
        middle: dict[tuple[int, int], int] = {}
        finer = []
        for a, b, c in faces:
            mids = []
            for p, q in ((a, b), (b, c), (c, a)):
                key = (min(p, q), max(p, q))
                if key not in middle:
                    m = vertices[p] + vertices[q]
                    vertices.append(m / np.linalg.norm(m))
                    middle[key] = len(vertices) - 1
                mids.append(middle[key])
            ab, bc, ca = mids
            finer += [(a, ab, ca), (b, bc, ab), (c, ca, bc), (ab, bc, ca)]
        faces = finer
    shape = 100.0 * np.array(vertices)
    volume = sum(np.dot(shape[a], np.cross(shape[b], shape[c])) / 6 for a, b, c in faces)
    points = np.array([[0.0, 0.0, 150.0], [200.0, 100.0, -50.0]])
    got = polyhedron_tensor(points, shape, faces, 1000.0)
    ball = sphere_tensor(points, [[0.0, 0.0, 0.0]], [100.0], [1000.0])
    scaled = ball * volume / (4 / 3 * np.pi * 1e6)
    np.testing.assert_allclose(got, scaled, rtol=0, atol=1e-3 * np.abs(ball).max())


def test_gravity_is_the_slope_of_the_potential() -> None:
    point, h = np.array([[70.0, 10.0, -60.0]]), 0.01
    slope = [
        (
            polyhedron_potential(point + s, CORNERS, SIX, 2000.0)
            - polyhedron_potential(point - s, CORNERS, SIX, 2000.0)
        )[0]
        / (2 * h)
        for s in h * np.eye(3)
    ]
    # third derivative of the potential × h2/6: 1e-7 of it; potentials of 1e-3 to 1e-16 / h
    expected = polyhedron_gravity(point, CORNERS, SIX, 2000.0)[0] * MILLIGAL
    np.testing.assert_allclose(slope, expected, rtol=0, atol=1e-6 * np.abs(expected).max())


@pytest.mark.parametrize(
    ("faces", "what"),
    [
        (SIX[1:], "the edge from vertex 4 to 5 does not join two faces"),
        ([f[::-1] for f in SIX], "the faces are listed clockwise seen from outside"),
        ([*SIX[:-1], (1, 5, 7, 9)], "a face names other than three or more of the 8 vertices"),
    ],
)
def test_broken_surfaces_are_refused(faces: list[tuple[int, ...]], what: str) -> None:
    with pytest.raises(SurveyError) as caught:
        polyhedron_tensor(np.zeros((1, 3)), CORNERS, faces, 1000.0)
    assert what in caught.value.what or "does not join two faces" in what


@pytest.mark.parametrize(
    ("radius", "top", "bottom", "density", "gz", "zz"),
    [
        # upright cylinder seen from its axis: closed form, 13 digits, proved by quadrature
        (100.0, -50.0, -250.0, 1000.0, 1.78416796853425, 201.821835698529),
        (500.0, -80.0, -280.0, 2670.0, 14.9251669930041, 370.183115503071),
    ],
)
def test_a_many_sided_column_is_a_cylinder(
    radius: float, top: float, bottom: float, density: float, gz: float, zz: float
) -> None:
    sides = 720
    turn = 2 * np.pi * np.arange(sides) / sides
    # of the same section as the circle; what is left is of the fourth order in π / 720: 1e-9
    wide = radius * np.sqrt(np.pi / (0.5 * sides * np.sin(2 * np.pi / sides)))
    ring = np.column_stack([wide * np.cos(turn), wide * np.sin(turn)])
    shape = np.vstack([np.column_stack([ring, np.full(sides, z)]) for z in (bottom, top)])
    around = [(i, (i + 1) % sides, sides + (i + 1) % sides, sides + i) for i in range(sides)]
    faces = [*around, tuple(range(sides, 2 * sides)), tuple(range(sides - 1, -1, -1))]
    at = np.zeros((1, 3))
    assert polyhedron_tensor(at, shape, faces, density)[0, 5] == pytest.approx(zz, rel=1e-7)
    assert polyhedron_gravity(at, shape, faces, density)[0, 2] == pytest.approx(-gz, rel=1e-7)
