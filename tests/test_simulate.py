from typing import Final

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray
from pyproj import CRS, Proj, Transformer

from gradred import simulate, survey
from gradred.flight import Motion, Stations
from gradred.newton.ellipsoid import normal_tensor
from gradred.newton.tides import tide_tensor
from gradred.tensor import body_to_enu, from_matrix, to_matrix, trace
from gradred.units import EOTVOS, G
from tests.rough_flight import body_to_inertial, rough_flight

Array = NDArray[np.float64]

UTM: Final = "EPSG:32623"
EAST, NORTH = 680_000.0, 3_510_000.0

vectors = st.lists(st.floats(-0.1, 0.1), min_size=3, max_size=3).map(np.array)


def resting(rates: Array, acceleration: Array) -> Motion:
    one = np.zeros(1)
    return Motion(
        np.array(["2024-05-14T12:00:00"], dtype="datetime64[ns]"),
        one, one, one, one, one, one, rates[None], acceleration[None],
    )  # fmt: skip


@settings(deadline=None, max_examples=30)
@given(vectors, vectors)
def test_trace_of_a_reading_is_twice_the_square_of_the_rate(
    rates: Array, acceleration: Array
) -> None:
    gradient = np.array([[100.0, -20.0, 30.0, 250.0, 40.0, -350.0]])
    reading = simulate.read(resting(rates, acceleration), gradient)
    # rounding: elements up to 3e7 E
    assert np.trace(reading[0]) == pytest.approx(2.0 * rates @ rates / EOTVOS, rel=1e-13, abs=1e-7)
    np.testing.assert_allclose(
        0.5 * (reading[0] - reading[0].T),
        -simulate.cross_matrix(acceleration) / EOTVOS,
        rtol=1e-13,
        atol=1e-7,
    )


def test_trace_at_one_degree_per_second() -> None:
    # computed in 40 digits: 2 (π/180 s⁻¹)² = 609234.8396 E, printed to 1e-4 E
    rate = np.array([0.0, 0.0, np.radians(1.0)])
    reading = simulate.read(resting(rate, np.zeros(3)), np.zeros((1, 6)))
    assert np.trace(reading[0]) == pytest.approx(609234.8396, abs=5e-5)


def test_a_reading_governs_the_motion_of_a_free_particle_seen_from_the_turning_axes() -> None:
    # Newton's first law: far from all mass a particle stays where it is in inertial axes, so in
    # the turning axes r'' = M r − 2 ω × r'. Differentiated numerically, seven terms each.
    at, step = np.linspace(5.0, 55.0, 51), 0.05
    fixed = np.array([0.6, -0.3, 0.8])
    seen = [
        fixed @ body_to_inertial(rough_flight(t), t) for t in (at + k * step for k in range(-3, 4))
    ]
    first = np.tensordot([-1, 9, -45, 0, 45, -9, 1], np.array(seen), axes=1) / (60.0 * step)
    second = np.tensordot([2, -27, 270, -490, 270, -27, 2], np.array(seen), axes=1) / (
        180.0 * step**2
    )
    motion = rough_flight(at)
    reading = simulate.read(motion, np.zeros((len(at), 6))) * EOTVOS
    right = np.einsum("nij,nj->ni", reading, seen[3]) - 2.0 * np.cross(motion.rates, first)
    assert np.abs(reading).max() > 0.01
    # second difference: rounding 1e-16 · 6 / step² = 3e-13; the splines' fifth derivative jumps
    # at the knots, step³ of it, 0.05 s⁻⁵ at the most
    np.testing.assert_allclose(second, right, rtol=0, atol=1e-5)


@settings(deadline=None, max_examples=30)
@given(st.floats(0.0, 360.0), st.floats(-20.0, 20.0), st.floats(-20.0, 20.0))
def test_a_reading_at_rest_is_the_tensor_turned_into_the_body(
    heading: float, pitch: float, roll: float
) -> None:
    motion = resting(np.zeros(3), np.zeros(3))
    angles = {"heading": heading, "pitch": pitch, "roll": roll}
    motion = Motion(**{**vars(motion), **{k: np.array([v]) for k, v in angles.items()}})
    gradient = np.array([[1.0, 2.0, 3.0, 4.0, 5.0, -5.0]])
    own = np.array([6.0, 1.0, -2.0, -4.0, 3.0, -2.0])
    reading = simulate.read(motion, gradient, own)
    back = body_to_enu(heading, pitch, roll).tensor(from_matrix(reading)[0] - own)
    # rounding of numbers below 10
    np.testing.assert_allclose(back, gradient[0], rtol=0, atol=1e-13)


def over_flat_ground(offset: Array) -> tuple[Stations, Array]:
    """Stations at (n, 3) offsets from the centre of a buried sphere, in the grid."""
    place = offset + [EAST, NORTH, 150.0]
    back = Transformer.from_crs(UTM, "EPSG:4326", always_xy=True).transform
    longitude, latitude = back(place[:, 0], place[:, 1])
    time = np.full(len(place), np.datetime64("2024-05-14T12:00:00", "ns"))
    return Stations(time, longitude, latitude, place[:, 2]), place


def test_a_sphere_over_flat_ground_has_its_closed_form() -> None:
    offset = np.array([[0.0, 0.0, 430.0], [300.0, -200.0, 400.0], [-50.0, 120.0, 380.0]])
    stations, place = over_flat_ground(offset)
    sphere = simulate.Sphere(EAST, NORTH, 150.0, radius=200.0, density=600.0)
    edges = np.arange(-10_000.0, 10_001.0, 500.0)
    ground = simulate.Layer(
        np.full((len(edges), len(edges)), 300.0), EAST + edges, NORTH + edges, 2480.0, base=0.0
    )
    parts = simulate.field(stations, UTM, [sphere], [ground])
    # point mass: Γ = G m (3 r rᵀ − r² I) / r⁵, in grid axes; turned by the convergence that
    # PROJ gives for the same point
    mass = 600.0 * 4.0 / 3.0 * np.pi * 200.0**3
    r2 = np.sum(offset**2, axis=1)[:, None, None]
    grid = G * mass * (3 * offset[:, :, None] * offset[:, None, :] - r2 * np.eye(3)) / r2**2.5
    angle = np.radians(
        Proj(CRS(UTM)).get_factors(stations.longitude, stations.latitude).meridian_convergence
    )
    assert np.degrees(angle).min() > 0.9
    c, s, o = np.cos(angle), np.sin(angle), np.zeros(3)
    # grid east lies `angle` clockwise of true east
    turn = np.stack([c, s, o, -s, c, o, o, o, o + 1], axis=-1).reshape(-1, 3, 3)
    expected = turn @ grid @ np.swapaxes(turn, 1, 2) / EOTVOS
    # positions go through the projection and back, 1e-8 m of 400 m, and angles of 1e-7 degrees
    np.testing.assert_allclose(to_matrix(parts["bodies"]), expected, rtol=0, atol=1e-6)
    # a level plate reaches to the sides only by its edges, 10 km away: below 3 G ρ · 300 / 1e4
    assert np.abs(parts["terrain"]).max() < 3.0 * G * 2480.0 * 300.0 / 1e4 / EOTVOS * 4.0
    # as a single prism, which the sum of cells is; the layer's own tolerance is 0.001 E
    plate = simulate.Prism(
        EAST - 10_250, EAST + 10_250, NORTH - 10_250, NORTH + 10_250, 0.0, 300.0, 2480.0
    )
    whole = simulate.field(stations, UTM, [plate])["bodies"]
    np.testing.assert_allclose(parts["terrain"], whole, rtol=0, atol=0.001)
    np.testing.assert_array_equal(
        parts["normal"], normal_tensor(stations.latitude, stations.height)
    )
    np.testing.assert_array_equal(
        parts["tide"],
        tide_tensor(stations.time, stations.longitude, stations.latitude, stations.height),
    )
    np.testing.assert_allclose(place, simulate.grid_points(stations, UTM), rtol=0, atol=1e-6)


def test_an_upright_sheet_is_the_prism_it_fills() -> None:
    offset = np.array([[0.0, 0.0, 430.0], [300.0, -200.0, 400.0]])
    stations, _ = over_flat_ground(offset)
    sheet = simulate.Sheet(EAST, NORTH, 200.0, 0.0, 90.0, 1000.0, 400.0, 100.0, 700.0)
    prism = simulate.Prism(EAST - 50, EAST + 50, NORTH - 500, NORTH + 500, -200.0, 200.0, 700.0)
    # two closed forms of the same body: rounding at coordinates of 3.5e6 m, 5e-10 m of 200 m
    np.testing.assert_allclose(
        simulate.field(stations, UTM, [sheet])["bodies"],
        simulate.field(stations, UTM, [prism])["bodies"],
        rtol=0,
        atol=1e-7,
    )


@pytest.mark.parametrize(
    ("crs", "longitude", "latitude"),
    [(UTM, -43.1, 31.7), ("EPSG:32733", 13.0, -50.0), ("EPSG:3071", -88.0, 44.5)],
)
def test_grid_north_is_the_convergence_that_proj_gives(
    crs: str, longitude: float, latitude: float
) -> None:
    found = simulate.grid_north(np.array([longitude]), np.array([latitude]), crs)
    expected = Proj(CRS(crs)).get_factors(longitude, latitude).meridian_convergence
    # PROJ differentiates the projection numerically, to about 1e-6 degrees
    assert found[0] == pytest.approx(expected, abs=1e-5)


def test_drift_starts_anew_on_every_line_and_is_straight_on_it() -> None:
    line = np.repeat(np.arange(400), 50)
    drift = simulate.drift(np.random.default_rng(4), line, constant=3.0, tilt=2.0)
    by_line = drift.reshape(400, 50, 9)
    # second differences of a straight line: rounding
    assert np.abs(np.diff(by_line, n=2, axis=1)).max() < 1e-13
    # 3600 draws: a standard deviation is known to 1/sqrt(7200), four of them
    assert by_line.mean(axis=1).std() == pytest.approx(3.0, rel=0.05)
    assert (by_line[:, -1] - by_line[:, 0]).std() == pytest.approx(2.0, rel=0.05)


def test_noise_is_white_and_the_same_from_the_same_seed() -> None:
    noise = simulate.white_noise(np.random.default_rng(8), 20_000, 4.0)
    np.testing.assert_array_equal(
        noise, simulate.white_noise(np.random.default_rng(8), 20_000, 4.0)
    )
    sigma = from_matrix(noise).std(axis=0)
    # 20000 draws: 0.5 % standard error, five of them
    np.testing.assert_allclose(sigma, 4.0 / np.sqrt([1, 2, 2, 1, 2, 1]), rtol=0.025)
    correlation = np.corrcoef(noise.reshape(-1, 9).T) - np.eye(9)
    assert np.abs(correlation).max() < 5.0 / np.sqrt(20_000)


def test_a_lines_part_is_what_a_reader_would_make() -> None:
    at = np.arange(10.0, 20.0)
    motion = rough_flight(at)
    before = {name: values.copy() for name, values in vars(motion).items()}
    reading = simulate.read(motion, np.zeros((10, 6)))
    lines = simulate.lines_part(
        motion, UTM, reading, line=["L1"] * 10, flight=["F1"] * 10, kind=["traverse"] * 10
    )
    survey.check("lines", lines, ("gradient", "as_read", "rates", "antisymmetric"), where="here")
    assert lines["gradient"].attrs["frame"] == "body"
    # −dΩ/dt is the antisymmetric part, and the symmetric part has the trace 2 ω²; rounding
    np.testing.assert_allclose(
        lines["antisymmetric"], -motion.acceleration / EOTVOS, rtol=1e-12, atol=1e-6
    )
    np.testing.assert_allclose(
        trace(lines["gradient"].to_numpy()),
        2.0 * np.sum(motion.rates**2, axis=1) / EOTVOS,
        rtol=1e-12,
    )
    for name, values in before.items():
        np.testing.assert_array_equal(values, getattr(motion, name))
