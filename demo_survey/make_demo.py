"""Make the demo survey: an invented block on an invented island, flown by an invented aircraft.

    python demo_survey/make_demo.py

writes every data file of this folder again, byte for byte. Nothing in it is real: the block lies
where there is open ocean. Every number that the readings were made with stands in ``truth.json``.
"""

from __future__ import annotations

import gzip
import json
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any, Final

import numpy as np
import rasterio
from numpy.typing import NDArray
from pyproj import Transformer
from rasterio import Affine
from scipy.interpolate import RectBivariateSpline
from scipy.ndimage import gaussian_filter, map_coordinates

from gradred import simulate
from gradred.flight import Motion, fly, wander

Array = NDArray[np.float64]
Body = simulate.Sphere | simulate.Prism | simulate.Sheet

FOLDER: Final = Path(__file__).parent
CRS: Final = "EPSG:32623"
WEST, SOUTH, SIDE = 677_000.0, 3_507_000.0, 6_000.0
MARGIN, CELL = 3_500.0, 25.0
GEOID_SEPARATION: Final = 17.25
GROUND_DENSITY: Final = 2480.0
BASE: Final = 0.0
SPEED, CLEARANCE = 50.0, 80.0
SIGMA, DRIFT, TILT, ALTIMETER_SIGMA = 4.0, 3.0, 2.0, 0.5
SELF_GRADIENT: Final = (6.0, -3.5, 4.5, -8.0, 2.5, 2.0)
SEEDS: Final = {"terrain": 1101, "flight": 1102, "drift": 1103, "noise": 1104, "altimeter": 1105}

BODIES: Final[tuple[Body, ...]] = (
    simulate.Sphere(WEST + 1500.0, SOUTH + 1500.0, 220.0, radius=230.0, density=620.0),
    simulate.Prism(
        WEST + 4050.0, WEST + 4850.0, SOUTH + 1300.0, SOUTH + 1900.0, -150.0, 310.0, -450.0
    ),
    simulate.Sheet(
        WEST + 2900.0, SOUTH + 4300.0, 270.0,
        strike=60.0, dip=55.0, length=1500.0, extent=700.0, thickness=150.0, density=700.0,
    ),
)  # fmt: skip

FLIGHTS: Final = {
    "F01": ("2024-05-14T11:32:05.250", range(0, 11)),
    "F02": ("2024-05-14T15:10:41.500", range(11, 21)),
    "F03": ("2024-05-15T11:24:17.125", range(21, 31)),
    "F04": ("2024-05-15T15:48:52.750", range(31, 38)),
}
"""Take-off to landing: UTC of the first reading, and the lines flown, ties last."""

COLUMNS: Final = {
    "flight": "s", "line": "s", "kind": "s", "time": "s",
    "longitude": ".8f", "latitude": ".8f", "height": ".3f", "clearance": ".2f",
    "heading": ".5f", "pitch": ".5f", "roll": ".5f",
    "wx": ".11f", "wy": ".11f", "wz": ".11f",
    **dict.fromkeys(simulate.ELEMENTS, ".3f"),
}  # fmt: skip
"""Columns of the line files with the format of their numbers."""


@dataclass(frozen=True)
class Terrain:
    """The delivered model: orthometric heights, rows along northing, at cell centres, metres."""

    heights: NDArray[np.float32]
    easting: Array
    northing: Array

    def ellipsoidal(self) -> Array:
        """Return the heights above the ellipsoid, metres."""
        return self.heights.astype(np.float64) + GEOID_SEPARATION


@dataclass(frozen=True)
class Survey:
    """The block as flown: motion with, per station, the names and the number of the line."""

    motion: Motion
    line: NDArray[np.intp]
    flight: list[str]

    def names(self) -> list[str]:
        """Return the (n,) names of the lines: L1010 and on for traverses, T9010 and on for ties."""
        return [f"L{1010 + 10 * n}" if n < 31 else f"T{9010 + 10 * (n - 31)}" for n in self.line]

    def kinds(self) -> list[str]:
        """Return traverse or tie for each of the (n,) stations."""
        return ["traverse" if n < 31 else "tie" for n in self.line]


def make_terrain() -> Terrain:
    """Return hills with a power-law spectrum, rounded to 1/16 m: the delivered model is the truth.

    Amplitudes fall with the wavenumber as k**-2.1 beyond 6 km: a self-affine surface, smoothed a
    little as weathered ground is.
    """
    count = round((SIDE + 2.0 * MARGIN) / CELL)
    centres = np.arange(0.5, count) * CELL - MARGIN
    random = np.random.default_rng(SEEDS["terrain"])
    # the model is cut from a period of twice its size, so that its edges do not meet
    white = np.fft.rfft2(random.standard_normal((2 * count, 2 * count)))
    ky = np.fft.fftfreq(2 * count, CELL)[:, None]
    kx = np.fft.rfftfreq(2 * count, CELL)[None, :]
    square = kx**2 + ky**2
    spectrum = (square + 6000.0**-2) ** (-2.1 / 2.0) * np.exp(-2.0 * np.pi**2 * square * 30.0**2)
    hills = np.fft.irfft2(white * spectrum, s=white.shape[:1] * 2)[:count, :count]
    inside = (centres > 0.0) & (centres < SIDE)
    block = hills[np.ix_(inside, inside)]
    hills = (hills - block.mean()) / (block.max() - block.min())
    heights = np.round((430.0 + 280.0 * hills) * 16.0) / 16.0
    return Terrain(heights.astype(np.float32), WEST + centres, SOUTH + centres)


def drape(terrain: Terrain) -> RectBivariateSpline:
    """Return the flight surface, ellipsoidal height by northing and easting: smoothed ground."""
    smooth = gaussian_filter(terrain.ellipsoidal(), 250.0 / CELL, mode="nearest")
    return RectBivariateSpline(terrain.northing, terrain.easting, smooth + CLEARANCE)


def fly_line(
    number: int, start: np.datetime64, surface: RectBivariateSpline, random: np.random.Generator
) -> Motion:
    """Return the motion along one line, a reading every second, heading alternating.

    The pilot holds line and height to some metres; the platform keeps the instrument level to
    0.3 degrees and turns with the crab angle of the aircraft in a wind from the south-west.
    """
    tie, back = number >= 31, number % 2 == 1
    seconds = np.arange(-8.0, (SIDE + 200.0) / SPEED + 9.0, 0.5)
    count = len(seconds)
    along = SPEED * seconds - 100.0 + 10.0 * wander(random, count, 60.0)
    if back:
        along = SIDE - along
    across = (1000.0 * (number - 31) if tie else 200.0 * number) + 5.0 * wander(random, count, 40.0)
    easting, northing = (along, across) if tie else (across, along)
    easting, northing = WEST + easting, SOUTH + northing
    height = surface(northing, easting, grid=False) + 2.0 * wander(random, count, 24.0)
    longitude, latitude = _to_geographic(easting, northing)
    bearing = (90.0 if tie else 0.0) + (180.0 if back else 0.0)
    track = bearing + simulate.grid_north(longitude, latitude, CRS)
    wind_to_the_right = 4.0 * np.sin(np.radians(45.0 - track))
    crab = -np.degrees(np.arcsin(wind_to_the_right / SPEED))
    swing = [wander(random, count, 8.0), wander(random, count, 6.0), wander(random, count, 6.0)]
    attitude = np.stack([track + crab + 0.5 * swing[0], 0.3 * swing[1], 0.3 * swing[2]], axis=1)
    at = np.arange(0.0, (SIDE + 200.0) / SPEED)
    return fly(start, seconds, np.stack([longitude, latitude, height], axis=1), attitude, at)


def _to_geographic(easting: Array, northing: Array) -> tuple[Array, Array]:
    back = Transformer.from_crs(CRS, "EPSG:4326", always_xy=True).transform
    longitude, latitude = back(easting, northing)
    return longitude, latitude


def fly_block(terrain: Terrain) -> Survey:
    """Return the whole block: 31 traverses 200 m apart and 7 ties, 160 s from line to line."""
    surface = drape(terrain)
    random = np.random.default_rng(SEEDS["flight"])
    motions, lines, flights = [], [], []
    for flight, (begin, numbers) in FLIGHTS.items():
        for place, number in enumerate(numbers):
            start = np.datetime64(begin, "ns") + np.timedelta64(place * (124 + 160), "s")
            motions.append(fly_line(number, start, surface, random))
            lines += [number] * len(motions[-1].time)
            flights += [flight] * len(motions[-1].time)
    return Survey(Motion.join(motions), np.array(lines), flights)


def ground(terrain: Terrain) -> simulate.Layer:
    """Return the mass of the ground: one column per cell from the base up, every cell exact."""
    return simulate.Layer(
        terrain.ellipsoidal(), terrain.easting, terrain.northing, GROUND_DENSITY, BASE, 0.0
    )


def faults(survey: Survey) -> tuple[Array, Array]:
    """Return the (n, 3, 3) drift and noise of the instrument, E, in the body frame."""
    drift = simulate.drift(
        np.random.default_rng(SEEDS["drift"]), survey.line, constant=DRIFT, tilt=TILT
    )
    noise = simulate.white_noise(np.random.default_rng(SEEDS["noise"]), len(survey.line), SIGMA)
    return drift, noise


def without_faults(motion: Motion, terrain: Terrain) -> tuple[Array, dict[str, Array]]:
    """Return the (n, 3, 3) perfect readings, body, and the parts of the field, enu, in E."""
    field = simulate.field(motion, CRS, BODIES, [ground(terrain)])
    outside = np.sum(list(field.values()), axis=0)
    return simulate.read(motion, outside, np.array(SELF_GRADIENT)), field


def clearance(survey: Survey, terrain: Terrain) -> Array:
    """Return the (n,) true height above the ground between cell centres, metres."""
    easting, northing, height = simulate.grid_points(survey.motion, CRS).T
    place = [(northing - terrain.northing[0]) / CELL, (easting - terrain.easting[0]) / CELL]
    return np.asarray(height - map_coordinates(terrain.ellipsoidal(), place, order=1))


def write_lines(folder: Path, survey: Survey, above_ground: Array, reading: Array) -> None:
    """Write one gzipped table per flight."""
    motion = survey.motion
    columns: dict[str, Any] = {
        "flight": survey.flight, "line": survey.names(), "kind": survey.kinds(),
        "time": np.datetime_as_string(motion.time, unit="ms"),
        "longitude": motion.longitude, "latitude": motion.latitude, "height": motion.height,
        "clearance": above_ground,
        "heading": motion.heading, "pitch": motion.pitch, "roll": motion.roll,
        **dict(zip(("wx", "wy", "wz"), motion.rates.T, strict=True)),
        **dict(zip(simulate.ELEMENTS, reading.reshape(-1, 9).T, strict=True)),
    }  # fmt: skip
    for flight in FLIGHTS:
        here = [n for n, name in enumerate(survey.flight) if name == flight]
        rows = (
            ",".join(format(columns[name][n], form) for name, form in COLUMNS.items()) for n in here
        )
        text = "\n".join([",".join(COLUMNS), *rows, ""])
        # gzip.compress writes no name, and with mtime=0 no time: the same bytes at every run
        packed = gzip.compress(text.encode(), 9, mtime=0)
        (folder / f"lines_{flight}.csv.gz").write_bytes(packed)


def write_terrain(folder: Path, terrain: Terrain) -> None:
    """Write the model as a GeoTIFF, row 0 north."""
    west, north = terrain.easting[0] - CELL / 2, terrain.northing[-1] + CELL / 2
    corner = Affine(CELL, 0.0, west, 0.0, -CELL, north)
    rows, columns = terrain.heights.shape
    with rasterio.open(
        folder / "terrain.tif", "w", driver="GTiff", width=columns, height=rows, count=1,
        dtype="float32", crs=CRS, transform=corner, compress="deflate", predictor=3, zlevel=9,
    ) as file:  # fmt: skip
        file.write(terrain.heights[::-1], 1)
        file.set_band_unit(1, "m")
        file.set_band_description(1, "height of the ground above the geoid")


def read_terrain(folder: Path = FOLDER) -> Terrain:
    """Return the delivered model as it stands in ``terrain.tif``."""
    with rasterio.open(folder / "terrain.tif") as file:
        heights, corner = file.read(1)[::-1], file.transform
    rows, columns = heights.shape
    easting = corner.c + CELL * (np.arange(columns) + 0.5)
    return Terrain(heights, easting, corner.f - CELL * (np.arange(rows)[::-1] + 0.5))


def truth(above_ground: Array) -> dict[str, Any]:
    """Return all that the readings were made with."""
    return {
        "caution": "invented survey; nothing in it is a place, an aircraft or an instrument",
        "crs": CRS,
        "block": {"west": WEST, "south": SOUTH, "side": SIDE, "unit": "m"},
        "terrain": {
            "file": "terrain.tif", "heights": "orthometric, m, exact as delivered",
            "geoid_separation_m": GEOID_SEPARATION,
            "density_kg_m3": GROUND_DENSITY, "base_m": BASE,
            "rule": "one flat-topped column per cell from the base, an ellipsoidal height, to the "
            "delivered height plus the geoid separation; nothing outside the model",
        },
        "bodies": [
            {"kind": type(body).__name__.lower(), **asdict(body)} for body in BODIES
        ],
        "bodies_units": "m, degrees, kg/m3 as contrast to the ground; grid frame; heights above "
        "the ellipsoid",
        "normal_field": "GRS80, gravitational part only",
        "tide": "Moon and Sun, rigid Earth",
        "self_gradient_body_E": dict(
            zip(("xx", "xy", "xz", "yy", "yz", "zz"), SELF_GRADIENT, strict=True)
        ),
        "noise": {
            "sd_E": SIGMA, "of": "each of the nine elements of each reading, white, no filter",
            "ground_speed_m_s": SPEED, "reading_every_s": 1.0,
        },
        "drift": {
            "constant_sd_E": DRIFT, "change_along_a_line_sd_E": TILT,
            "of": "each of the nine elements, anew on every line",
        },
        "altimeter_sd_m": ALTIMETER_SIGMA,
        "clearance_m": {
            "mean": round(float(above_ground.mean()), 2),
            "lowest": round(float(above_ground.min()), 2),
            "highest": round(float(above_ground.max()), 2),
        },
        "seeds": SEEDS,
        "stations_file": "truth_stations.npz: bodies and terrain, enu, E; drift, body, E, rows of "
        "xx xy xz yx ... zz; one row per reading in the order of the line files",
    }  # fmt: skip


def main(folder: Path = FOLDER) -> None:
    """Write every data file of the demo survey into a folder."""
    write_terrain(folder, make_terrain())
    terrain = read_terrain(folder)
    survey = fly_block(terrain)
    perfect, field = without_faults(survey.motion, terrain)
    drift, noise = faults(survey)
    above_ground = clearance(survey, terrain)
    altimeter = np.random.default_rng(SEEDS["altimeter"]).standard_normal(len(above_ground))
    write_lines(folder, survey, above_ground + ALTIMETER_SIGMA * altimeter, perfect + drift + noise)
    text = json.dumps(truth(above_ground), indent=2, ensure_ascii=False)
    (folder / "truth.json").write_text(text + "\n", encoding="utf-8")
    np.savez_compressed(
        folder / "truth_stations.npz",
        bodies=field["bodies"].astype(np.float32),
        terrain=field["terrain"].astype(np.float32),
        drift=drift.reshape(-1, 9).astype(np.float32),
    )
    print(f"{len(survey.line)} readings on {len(set(survey.line))} lines")


if __name__ == "__main__":
    main()
