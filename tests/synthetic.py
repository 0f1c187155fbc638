"""Small invented surveys for the tests: a crossing pattern of lines and a part made from it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from gradred import survey

Array = NDArray[np.float64]

CRS = "EPSG:32633"
EAST, NORTH = 350_000.0, 5_300_000.0


@dataclass(frozen=True)
class Flight:
    """Positions, line numbers and headings of a pattern of traverses and ties."""

    easting: Array
    northing: Array
    line: NDArray[np.intp]
    heading: Array
    tie: NDArray[np.bool_]


def pattern(traverses: int = 16, ties: int = 6, step: float = 50.0, side: float = 3000.0) -> Flight:
    """Return traverses flown north and south in turn, and ties flown east and west in turn."""
    along = np.arange(0.0, side + 1.0, step)
    parts = []
    for n in range(traverses + ties):
        tie = n >= traverses
        count, number = (ties, n - traverses) if tie else (traverses, n)
        across = np.full_like(along, 100.0 + number * (side - 200.0) / (count - 1))
        way = along if number % 2 == 0 else along[::-1]
        turn = 0.0 if number % 2 == 0 else 180.0
        east, north = (way, across) if tie else (across, way)
        parts.append((east, north, np.full(len(way), n), np.full(len(way), turn + 90.0 * tie)))
    east, north, line, heading = (np.concatenate(p) for p in zip(*parts, strict=True))
    return Flight(
        EAST + east, NORTH + north, line.astype(np.intp), heading % 360.0, line >= traverses
    )


def lines_part(flight: Flight, gradient: Array, *, frame: str = "enu", seed: int = 0) -> xr.Dataset:
    """Return a ``lines`` part at 1 s steps, 60 m above flat ground, with small pitch and roll."""
    n = len(flight.line)
    random = np.random.default_rng(seed)
    seconds = np.arange(n).astype("timedelta64[s]")
    values = {
        "time": np.datetime64("2031-03-05T08:00:00", "ns") + seconds,
        "longitude": 13.0 + (flight.easting - EAST) / 75_000.0,
        "latitude": 47.84 + (flight.northing - NORTH) / 111_000.0,
        "height": np.full(n, 60.0),
        "easting": flight.easting,
        "northing": flight.northing,
        "convergence": np.full(n, -1.5),
        "line": np.array([f"L{number:03d}" for number in flight.line]),
        "flight": np.full(n, "F1"),
        "kind": np.where(flight.tie, "tie", "traverse"),
        "heading": flight.heading,
        "pitch": random.normal(0.0, 0.5, n),
        "roll": random.normal(0.0, 0.5, n),
        "flag": np.zeros(n),
    }
    data = survey.new("lines", CRS)
    for name, column in values.items():
        data = survey.put("lines", data, name, column)
    for name in ("gradient", "as_read"):
        data = survey.put("lines", data, name, gradient, frame=frame)
    return data


def point_masses(flight: Flight, count: int = 4, seed: int = 5) -> Array:
    """Return (n, 6) E, enu, of buried point masses: Γ = G m (3 r rᵀ − r² I) / r⁵."""
    random = np.random.default_rng(seed)
    tensor = np.zeros((len(flight.line), 6))
    for _ in range(count):
        east, north = EAST + random.uniform(500, 2500), NORTH + random.uniform(500, 2500)
        depth, mass = random.uniform(400.0, 600.0), random.uniform(2e9, 6e9)
        x, y = east - flight.easting, north - flight.northing
        z = np.full_like(x, -60.0 - depth)
        r2 = x**2 + y**2 + z**2
        scale = 6.67430e-11 * 1e9 * mass / r2**2.5
        parts = (3 * x * x - r2, 3 * x * y, 3 * x * z, 3 * y * y - r2, 3 * y * z, 3 * z * z - r2)
        tensor += scale[:, None] * np.stack(parts, axis=1)
    return tensor
