"""The committed demo survey: its files are what its script makes, and hold what it states."""

import gzip
import json
from dataclasses import fields
from functools import cache
from io import BytesIO
from pathlib import Path
from typing import Final

import numpy as np
import pandas as pd
import pytest
from numpy.typing import NDArray

from demo_survey import make_demo
from gradred import simulate
from gradred.newton.sheet import dipping_sheet
from gradred.tensor import COMPONENTS, body_to_enu, from_matrix
from gradred.units import EOTVOS

Array = NDArray[np.float64]

FEW: Final = np.arange(17, 4700, 391)


@cache
def lines() -> pd.DataFrame:
    tables = [
        pd.read_csv(
            BytesIO(gzip.decompress((make_demo.FOLDER / f"lines_{name}.csv.gz").read_bytes()))
        )
        for name in make_demo.FLIGHTS
    ]
    return pd.concat(tables, ignore_index=True)


@cache
def flown() -> make_demo.Survey:
    return make_demo.fly_block(make_demo.read_terrain())


def elements(table: pd.DataFrame) -> Array:
    return table[list(simulate.ELEMENTS)].to_numpy().reshape(-1, 3, 3)


def test_the_terrain_is_what_the_script_makes() -> None:
    made, stands = make_demo.make_terrain(), make_demo.read_terrain()
    np.testing.assert_array_equal(made.easting, stands.easting)
    np.testing.assert_array_equal(made.northing, stands.northing)
    # one step of rounding where another machine's Fourier transform differs in the last bit
    assert np.abs(made.heights - stands.heights).max() <= 1.0 / 16.0
    assert np.mean(made.heights != stands.heights) < 1e-3


def test_a_few_stations_made_again_are_those_of_the_files() -> None:
    survey, terrain = flown(), make_demo.read_terrain()
    table = lines().iloc[FEW]
    assert len(lines()) == len(survey.line)
    perfect, field = make_demo.without_faults(survey.motion.select(FEW), terrain)
    drift, noise = (part[FEW] for part in make_demo.faults(survey))
    # printed to 0.001 E; elements of 1e6 E are good to 1e-9 E
    np.testing.assert_allclose(elements(table), perfect + drift + noise, rtol=0, atol=5.1e-4)
    with np.load(make_demo.FOLDER / "truth_stations.npz") as truth:
        for name in ("bodies", "terrain"):
            # kept in single precision: 6e-8 of 300 E
            np.testing.assert_allclose(truth[name][FEW], field[name], rtol=0, atol=2e-5)
        np.testing.assert_allclose(truth["drift"][FEW], drift.reshape(-1, 9), rtol=0, atol=2e-6)
    motion = survey.motion.select(FEW)
    for name in ("longitude", "latitude", "height", "heading", "pitch", "roll"):
        half = 0.51 * 10.0 ** -int(make_demo.COLUMNS[name][1:-1])
        np.testing.assert_allclose(table[name], getattr(motion, name), rtol=0, atol=half)
    np.testing.assert_allclose(table[["wx", "wy", "wz"]], motion.rates, rtol=0, atol=0.51e-11)
    assert list(pd.to_datetime(table["time"])) == list(pd.to_datetime(motion.time))


def test_the_digits_of_the_files_rebuild_the_rotation_far_below_the_noise() -> None:
    table = lines()
    rates = table[["wx", "wy", "wz"]].to_numpy()
    left = np.trace(elements(table), axis1=1, axis2=2) - 2.0 * np.sum(rates**2, axis=1) / EOTVOS
    drift, noise = make_demo.faults(flown())
    expected = np.trace(drift + noise, axis1=1, axis2=2)
    # what is outside has no trace: drift and noise are left. Three elements printed to 0.001 E,
    # 4 ω δω of rates up to 0.01 rad/s printed to 1e-11 rad/s
    np.testing.assert_allclose(left, expected, rtol=0, atol=0.0015 + 4 * 0.01 * 0.5e-11 / EOTVOS)


def test_what_the_files_hold_less_all_but_the_bodies_is_the_bodies() -> None:
    table, motion = lines(), flown().motion
    drift, noise = make_demo.faults(flown())
    rates = table[["wx", "wy", "wz"]].to_numpy()
    square = np.sum(rates**2, axis=1)[:, None, None] * np.eye(3)
    turning = (rates[:, :, None] * rates[:, None, :] - square) / EOTVOS
    in_body = from_matrix(elements(table) + turning - drift - noise) - make_demo.SELF_GRADIENT
    angles = [table[name].to_numpy() for name in ("heading", "pitch", "roll")]
    parts = simulate.field(motion, make_demo.CRS)
    with np.load(make_demo.FOLDER / "truth_stations.npz") as truth:
        got = body_to_enu(*angles).tensor(in_body) - parts["normal"] - parts["tide"]
        # angles printed to 1e-5 degrees turn 4600 E by 0.0004 E at the most, times two angles
        np.testing.assert_allclose(got - truth["terrain"], truth["bodies"], rtol=0, atol=0.003)


def test_truth_json_states_what_the_script_used() -> None:
    survey, terrain = flown(), make_demo.read_terrain()
    expected = make_demo.truth(make_demo.clearance(survey, terrain))
    stands = json.loads((make_demo.FOLDER / "truth.json").read_text(encoding="utf-8"))
    assert stands == json.loads(json.dumps(expected))
    assert list(stands["self_gradient_body_E"]) == list(COMPONENTS)


def test_the_block_is_as_its_readme_says() -> None:
    table, terrain = lines(), make_demo.read_terrain()
    assert table.groupby("kind")["line"].nunique().to_dict() == {"tie": 7, "traverse": 31}
    assert table["time"].is_monotonic_increasing
    assert table["time"].is_unique
    assert 35.0 < table["clearance"].min() < table["clearance"].max() < 120.0
    assert 75.0 < table["clearance"].mean() < 85.0
    inside = (np.abs(axis - axis.mean()) < 3000.0 for axis in (terrain.northing, terrain.easting))
    relief = np.ptp(terrain.heights[np.ix_(*inside)])
    assert 200.0 < relief < 300.0
    place = simulate.grid_points(flown().motion, make_demo.CRS)
    reach = [terrain.easting[0], terrain.easting[-1], terrain.northing[0], terrain.northing[-1]]
    assert np.min(place[:, 0]) - reach[0] > 3000.0 < reach[1] - np.max(place[:, 0])
    assert np.min(place[:, 1]) - reach[2] > 3000.0 < reach[3] - np.max(place[:, 1])
    north = simulate.grid_north(flown().motion.longitude, flown().motion.latitude, make_demo.CRS)
    assert 0.9 < north.min() < north.max() < 1.1


def boxes() -> list[Array]:
    """Return west, east, south, north, top around each of the bodies, metres."""
    out = []
    for body in make_demo.BODIES:
        if isinstance(body, simulate.Sphere):
            east, north, r = body.easting, body.northing, body.radius
            out.append(np.array([east - r, east + r, north - r, north + r, body.height + r]))
        elif isinstance(body, simulate.Prism):
            out.append(np.array([body.west, body.east, body.south, body.north, body.top]))
        else:
            shape = [getattr(body, field.name) for field in fields(body)][:-1]
            low, high = (f(dipping_sheet(*shape)[0], axis=0) for f in (np.min, np.max))
            out.append(np.array([low[0], high[0], low[1], high[1], high[2]]))
    return out


def test_the_bodies_lie_under_the_ground_and_show_between_30_and_100_e() -> None:
    terrain = make_demo.read_terrain()
    for west, east, south, north, top in boxes():
        over_east = (terrain.easting > west - 25.0) & (terrain.easting < east + 25.0)
        over_north = (terrain.northing > south - 25.0) & (terrain.northing < north + 25.0)
        above = terrain.ellipsoidal()[np.ix_(over_north, over_east)]
        assert above.min() > top + 20.0
    points = simulate.grid_points(flown().motion, make_demo.CRS)
    for body in make_demo.BODIES:
        assert 30.0 < np.abs(body.tensor(points)[:, 5]).max() < 100.0


def test_the_folder_is_small() -> None:
    assert sum(path.stat().st_size for path in make_demo.FOLDER.glob("*.*")) < 8_000_000


def test_no_file_carries_the_hour_it_was_written() -> None:
    # RFC 1952: byte 3 holds the flags (no name), bytes 4 to 7 the time
    for name in make_demo.FLIGHTS:
        head = (make_demo.FOLDER / f"lines_{name}.csv.gz").read_bytes()[:8]
        assert head[3:8] == bytes(5)


@pytest.mark.slow
def test_made_twice_every_file_is_the_same_byte_for_byte(tmp_path: Path) -> None:
    folders = [tmp_path / "one", tmp_path / "two"]
    for folder in folders:
        folder.mkdir()
        make_demo.main(folder)
    one, two = ({p.name: p.read_bytes() for p in folder.iterdir()} for folder in folders)
    assert one == two
    committed = {path.name for path in make_demo.FOLDER.iterdir() if path.is_file()}
    assert committed - set(one) == {"README.md", "make_demo.py"}
