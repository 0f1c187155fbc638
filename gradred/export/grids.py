"""Grids as rasters: one GeoTIFF per map, and all of them in one CF NetCDF."""

from __future__ import annotations

from pathlib import Path
from typing import Any, Final

import h5py
import numpy as np
import rasterio
import xarray as xr
from affine import Affine
from numpy.typing import NDArray
from pydantic import Field
from pyproj import CRS

from gradred import survey
from gradred.stage import Settings, stage
from gradred.tensor import COMPONENTS

_NODATA: Final = -9999.0


class GridSettings(Settings):
    """Settings of the stage ``write_grids``."""

    geotiff: bool = Field(True, description="write one GeoTIFF per map into the folder grids")


def maps_of(grid: xr.Dataset) -> dict[str, xr.DataArray]:
    """Return every map of a grid by name: tensors as one map per component."""
    found: dict[str, xr.DataArray] = {}
    for row in survey.VARIABLES:
        if row.part != "grid" or row.name not in grid or row.dims[0] != "northing":
            continue
        if "component" in row.dims:
            for number, component in enumerate(COMPONENTS):
                found[f"{row.name}_{component}"] = grid[row.name].isel(component=number)
        else:
            found[row.name] = grid[row.name]
    return found


def georeference(grid: xr.Dataset) -> Affine:
    """Return the transform from column and row, row 0 in the north, to easting and northing."""
    easting, northing = grid["easting"].to_numpy(), grid["northing"].to_numpy()
    dx, dy = (float(axis[1] - axis[0]) for axis in (easting, northing))
    return Affine(dx, 0.0, easting[0] - 0.5 * dx, 0.0, -dy, northing[-1] + 0.5 * dy)


@stage(makes=None, needs={"grid": ("gradient",)})
def write_grids(grid: xr.Dataset, settings: GridSettings, folder: Path) -> list[Path]:
    """Write the maps as GeoTIFF, north up, in the survey CRS, and as CF NetCDF."""
    made = [folder / "grid.nc"]
    survey.save("grid", _with_mapping(grid), made[0])
    _georeferenced(made[0], str(grid.attrs["crs"]))
    if settings.geotiff:
        (folder / "grids").mkdir(exist_ok=True)
        for name, values in maps_of(grid).items():
            made.append(_geotiff(grid, name, values, folder / "grids" / f"{name}.tif"))
    return made


def _with_mapping(grid: xr.Dataset) -> xr.Dataset:
    """Return the grid with its projection spelled out for CF readers in its attributes."""
    mapping = CRS.from_user_input(grid.attrs["crs"]).to_cf()
    return grid.assign_attrs(crs_wkt=mapping["crs_wkt"])


def _georeferenced(path: Path, crs: str) -> None:
    """Name the grid mapping of CF section 5.6 in a saved grid, and its axes as projected ones.

    Added to the file behind ``survey.save``: the mapping belongs to the file, not to the survey.
    """
    with h5py.File(path, "r+") as stored:
        mapping = stored.create_dataset("crs", data=np.int32(0))
        for key, value in CRS.from_user_input(crs).to_cf().items():
            mapping.attrs[key] = value
        for name, axis in (("easting", "x"), ("northing", "y")):
            stored[name].attrs["standard_name"] = f"projection_{axis}_coordinate"
            stored[name].attrs["axis"] = axis.upper()
        for row in survey.VARIABLES:
            mapped = row.part == "grid" and row.dims[:2] == ("northing", "easting")
            if mapped and row.name in stored:
                stored[row.name].attrs["grid_mapping"] = "crs"


def _geotiff(grid: xr.Dataset, name: str, values: xr.DataArray, path: Path) -> Path:
    band: NDArray[Any] = values.to_numpy()[::-1].astype(np.float32)
    profile = {
        "driver": "GTiff",
        "width": band.shape[1],
        "height": band.shape[0],
        "count": 1,
        "dtype": "float32",
        "crs": grid.attrs["crs"],
        "transform": georeference(grid),
        "nodata": _NODATA,
        "compress": "deflate",
        "predictor": 3,
    }
    about = {"frame": values.attrs.get("frame", "grid"), "record": grid.attrs.get("record", "[]")}
    with rasterio.open(path, "w", **profile) as raster:
        raster.write(np.where(np.isfinite(band), band, np.float32(_NODATA)), 1)
        raster.set_band_description(1, f"{name}: {values.attrs['long_name']}")
        raster.set_band_unit(1, values.attrs["units"])
        raster.update_tags(**about)
    return path
