"""Terrain models for the tests of ingest, written as GeoTIFF."""

from __future__ import annotations

import warnings
from pathlib import Path
from typing import Any

import numpy as np
import rasterio
from numpy.typing import NDArray
from rasterio.errors import NotGeoreferencedWarning
from rasterio.transform import Affine

from gradred.ingest.rasters import TerrainFileSettings

Array = NDArray[np.float64]

CRS = "EPSG:32633"


def geotiff(
    path: Path,
    heights: Array,
    *,
    west: float = 500_000.0,
    north: float = 5_210_000.0,
    cell: float = 100.0,
    crs: str | None = CRS,
    transform: Affine | None = None,
    unit: str | None = None,
    **profile: Any,
) -> Path:
    """Write heights, row 0 in the south, and return the path."""
    rows, columns = heights.shape
    place = transform or Affine(cell, 0.0, west, 0.0, -cell, north)
    stated = {"dtype": "float64", "count": 1, **profile}
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", NotGeoreferencedWarning)
        with rasterio.open(
            path,
            "w",
            driver="GTiff",
            width=columns,
            height=rows,
            crs=crs,
            transform=place,
            **stated,
        ) as file:
            for band in range(1, stated["count"] + 1):
                file.write(heights[::-1].astype(stated["dtype"]), band)
            if unit is not None:
                file.set_band_unit(1, unit)
    return path


def settings(surface: Path, **changes: Any) -> TerrainFileSettings:
    """Return settings that read a surface in metres above the ellipsoid, with changes."""
    stated: dict[str, Any] = {
        "crs": CRS, "surface": surface, "unit": "m", "height_reference": "ellipsoid", **changes,
    }  # fmt: skip
    return TerrainFileSettings.model_validate(stated)


def hills(rows: int = 30, columns: int = 40) -> Array:
    """Return smooth hills between 250 and 350 m."""
    north, east = np.mgrid[0:rows, 0:columns]
    return np.asarray(300.0 + 30.0 * np.sin(north / 5.0) + 20.0 * np.cos(east / 7.0))
