"""Simulated readings on real flight lines over real ground and real bedrock in Wisconsin.

    python -m tests.wisconsin

writes ``tests/data/wisconsin`` again. Real are the positions, times and clearances of the
helicopter and the two surfaces (see ``tests/data/SOURCES.md``); no gradiometer flew there, and
every gradient is simulated here.
"""

from __future__ import annotations

import gzip
from dataclasses import dataclass
from pathlib import Path
from typing import Final

import numpy as np
import pandas as pd
import rasterio
from numpy.typing import NDArray
from rasterio import Affine

from gradred import simulate
from gradred.flight import Stations
from gradred.tensor import ned_to_enu

Array = NDArray[np.float64]

DATA: Final = Path(__file__).parent / "data"
FOLDER: Final = DATA / "wisconsin"
CRS: Final = "EPSG:3071"

ROWS, COLUMNS = slice(297, 467), slice(109, 184)
"""The rectangle of the published surfaces that holds the most stations and no missing cell."""

INSIDE: Final = 1000.0
"""Stations nearer than this to the rim of the rectangle are left out, metres."""

LEAST: Final = 5
"""Lines with fewer stations inside are left out."""

GEOID_SEPARATION: Final = -35.0
"""Height of the NAVD88 datum above the ellipsoid, metres: a round figure for the area, from memory,
taken as constant. It shifts stations and surfaces alike."""

GROUND_DENSITY, CONTRAST, SIGMA, SEED = 2000.0, 670.0, 3.0, 2021


@dataclass(frozen=True)
class Wisconsin:
    """What was simulated: stations, their lines, readings and the truth, E, ``enu``.

    ``bedrock`` (n, 6) is what a reduction with the right ground density should leave; ``reading``
    (n, 6) holds it together with ground, normal field, tide and noise.
    """

    stations: Stations
    line: NDArray[np.intp]
    clearance: Array
    bedrock: Array
    terrain: Array
    reading: Array
    surface_height: Array
    bedrock_height: Array
    easting: Array
    northing: Array


def simulate_wisconsin() -> Wisconsin:
    """Return six-element readings over the rectangle.

    The ground is of one density down to the ellipsoid, where all is cut off; the bedrock adds its
    contrast from its real top down to a level, its mean height: above the level the contrast is
    added, below it is taken away, so that the rim of the rectangle makes no cliff. Outside the
    rectangle there is nothing.
    """
    with np.load(DATA / "dem" / "wisconsin_surface_and_bedrock_200m.npz") as model:
        # the file has row 0 north
        surface, rock = (
            model[name][ROWS, COLUMNS][::-1].astype(np.float64) + GEOID_SEPARATION
            for name in ("surface_m", "bedrock_top_m")
        )
        easting, northing = model["x_m"][COLUMNS], model["y_m"][ROWS][::-1]
    table = _lines_inside(easting, northing)
    stations = Stations(
        pd.to_datetime(table["date"] + " " + table["time_utc"], format="%Y/%m/%d %H:%M:%S")
        .to_numpy()
        .astype("datetime64[ns]"),
        table["lon_deg"].to_numpy(),
        table["lat_deg"].to_numpy(),
        table["alt_m"].to_numpy() + GEOID_SEPARATION,
    )
    ground = simulate.Layer(surface, easting, northing, GROUND_DENSITY, base=0.0, tolerance=0.0)
    parts = simulate.field(stations, CRS, layers=[ground])
    rim = (easting[0] - 100.0, easting[-1] + 100.0, northing[0] - 100.0, northing[-1] + 100.0)
    level = simulate.Prism(*rim, bottom=0.0, top=float(rock.mean()), density=-CONTRAST)
    excess = simulate.Layer(rock, easting, northing, CONTRAST, base=0.0, tolerance=0.0)
    bedrock = simulate.field(stations, CRS, [level], [excess])
    anomaly = bedrock["bodies"] + bedrock["terrain"]
    noise = SIGMA * np.random.default_rng(SEED).standard_normal(anomaly.shape)
    return Wisconsin(
        stations,
        table["line"].to_numpy(),
        table["height_m"].to_numpy(),
        anomaly,
        parts["terrain"],
        anomaly + parts["terrain"] + parts["normal"] + parts["tide"] + noise,
        surface,
        rock,
        easting,
        northing,
    )


def _lines_inside(easting: Array, northing: Array) -> pd.DataFrame:
    table = pd.read_csv(DATA / "lines" / "heli_lines_wisconsin.csv", comment="#")
    inside = table["east_m"].between(easting[0] + INSIDE, easting[-1] - INSIDE)
    inside &= table["north_m"].between(northing[0] + INSIDE, northing[-1] - INSIDE)
    table = table[inside]
    return table[table.groupby("line")["line"].transform("size") >= LEAST].reset_index(drop=True)


def write(survey: Wisconsin, folder: Path) -> None:
    """Write the lines, the two surfaces and the truth as a contractor would deliver them.

    Heights of stations are ellipsoidal; the surfaces keep their NAVD88 heights; gradients are in
    north-east-down axes.
    """
    folder.mkdir(parents=True, exist_ok=True)
    in_ned = ned_to_enu().inverse().tensor(survey.reading)
    table = pd.DataFrame(
        {
            "line": survey.line,
            "time": np.datetime_as_string(survey.stations.time, unit="s"),
            "longitude": [f"{value:.7f}" for value in survey.stations.longitude],
            "latitude": [f"{value:.7f}" for value in survey.stations.latitude],
            "height": [f"{value:.2f}" for value in survey.stations.height],
            "clearance": [f"{value:.2f}" for value in survey.clearance],
            **{
                ned: [f"{value:.3f}" for value in values]
                for ned, values in zip(("nn", "ne", "nd", "ee", "ed", "dd"), in_ned.T, strict=True)
            },
        }
    )
    text = table.to_csv(index=False, lineterminator="\n")
    (folder / "lines.csv.gz").write_bytes(gzip.compress(text.encode(), 9, mtime=0))
    for name, heights in (("surface", survey.surface_height), ("bedrock", survey.bedrock_height)):
        _write_surface(folder / f"{name}.tif", heights - GEOID_SEPARATION, survey)
    np.savez_compressed(
        folder / "truth.npz",
        bedrock=survey.bedrock.astype(np.float32),
        terrain=survey.terrain.astype(np.float32),
    )


def _write_surface(path: Path, heights: Array, survey: Wisconsin) -> None:
    corner = Affine(200.0, 0.0, survey.easting[0] - 100.0, 0.0, -200.0, survey.northing[-1] + 100.0)
    rows, columns = heights.shape
    with rasterio.open(
        path, "w", driver="GTiff", width=columns, height=rows, count=1, dtype="float32",
        crs=CRS, transform=corner, compress="deflate", predictor=3, zlevel=9,
    ) as file:  # fmt: skip
        file.write(heights[::-1].astype(np.float32), 1)
        file.set_band_unit(1, "m")


if __name__ == "__main__":
    write(simulate_wisconsin(), FOLDER)
