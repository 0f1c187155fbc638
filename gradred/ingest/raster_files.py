"""GeoTIFF and NetCDF grids of heights → numbers at cell centres, as the file has them."""

from __future__ import annotations

import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

import h5py
import numpy as np
import rasterio
import xarray as xr
from numpy.typing import NDArray
from pyproj import CRS
from pyproj.exceptions import CRSError
from rasterio.errors import NotGeoreferencedWarning, RasterioError

from gradred.errors import GradredError, ReadingsError
from gradred.ingest.faults import nearest

Array = NDArray[np.float64]

_X_NAMES: Final = ("projection_x_coordinate", "longitude", "easting", "x", "lon")
_Y_NAMES: Final = ("projection_y_coordinate", "latitude", "northing", "y", "lat")
_UNITS: Final = {
    "m": ("m", "metre", "meter", "metres", "meters"),
    "ft": ("ft", "foot", "feet", "international foot"),
    "ft-us": ("ft-us", "us survey foot", "us_survey_foot", "survey_foot", "foot_us"),
    "km": ("km", "kilometre", "kilometer"),
}
_EVEN: Final = 0.01
"""Cell centres further than this from an even grid are refused, in cells."""


@dataclass(frozen=True)
class Raster:
    """A grid of heights as a file has it.

    Parameters
    ----------
    heights : (rows, columns) array
        In the file's unit, rows from south to north, NaN where there is none.
    x, y : (columns,) and (rows,) arrays
        Cell centres, ascending, in the units of the CRS.
    crs : CRS or None
        As the file tells it.
    unit : str or None
        As the file tells it, in gradred's spelling.
    """

    heights: Array
    x: Array
    y: Array
    crs: CRS | None
    unit: str | None

    @property
    def cell(self) -> tuple[float, float]:
        """Size of a cell along x and y, in the units of the CRS."""
        return (
            float(self.x[-1] - self.x[0]) / (len(self.x) - 1),
            float(self.y[-1] - self.y[0]) / (len(self.y) - 1),
        )


def read_raster(path: Path, variable: str | None, band: int | None, nodata: float | None) -> Raster:
    """Return the heights of a GeoTIFF or of one variable of a NetCDF file.

    Parameters
    ----------
    path : Path
        Known by its first bytes, not by its name.
    variable : str or None
        Of a NetCDF file.
    band : int or None
        Of a GeoTIFF that has several, from 1.
    nodata : float or None
        Value of cells without height, besides what the file tells itself.
    """
    try:
        with path.open("rb") as stream:
            head = stream.read(8)
    except OSError as error:
        raise ReadingsError(
            f"cannot be read: {error.strerror}", where=path.name, cure="name an existing raster"
        ) from None
    if head.startswith((b"CDF", b"\x89HDF")):
        raster = _netcdf(path, variable, "scipy" if head.startswith(b"CDF") else "h5netcdf")
    else:
        raster = _geotiff(path, band)
    if nodata is not None:
        raster.heights[raster.heights == nodata] = np.nan
    return raster


def _check_size(path: Path, columns: int, rows: int) -> None:
    if min(columns, rows) < 2:
        raise ReadingsError(
            f"the raster has {columns} × {rows} cells",
            where=path.name,
            cure="deliver a terrain model",
        )


def _geotiff(path: Path, band: int | None) -> Raster:
    try:
        with _unwarned(), rasterio.open(path, driver="GTiff") as file:
            _check_transform(path, file.transform)
            _check_size(path, file.width, file.height)
            number = _band(path, file.count, band)
            values = file.read(number, masked=True).astype(np.float64)
            scale, offset = file.scales[number - 1], file.offsets[number - 1]
            heights = np.ma.filled(values, np.nan) * scale + offset
            crs = CRS.from_wkt(file.crs.to_wkt()) if file.crs else None
            t, unit = file.transform, _unit(file.units[number - 1])
    except (RasterioError, CRSError, UnicodeDecodeError) as error:
        raise ReadingsError(
            f"is not a GeoTIFF that can be read: {(str(error).splitlines() or ['?'])[0]}",
            where=path.name,
            cure="deliver the terrain model as GeoTIFF or NetCDF",
        ) from None
    rows, columns = heights.shape
    x = t.c + t.a * (np.arange(columns) + 0.5)
    y = t.f + t.e * (np.arange(rows) + 0.5)
    if t.e < 0.0:
        y, heights = y[::-1], heights[::-1]
    return Raster(np.ascontiguousarray(heights), x, np.ascontiguousarray(y), _horizontal(crs), unit)


@contextmanager
def _unwarned() -> Iterator[None]:
    """Keep quiet about a raster without a place: it is refused in gradred's own words."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", NotGeoreferencedWarning)
        yield


def _check_transform(path: Path, transform: Any) -> None:
    if transform.is_identity:
        what = "the raster does not tell where it lies"
    elif transform.b != 0.0 or transform.d != 0.0:
        what = "the raster is rotated"
    elif not (transform.a > 0.0 and transform.e != 0.0):
        what = f"a cell is {transform.a:g} wide and {-transform.e:g} high"
    else:
        return
    raise ReadingsError(
        what,
        where=f"{path.name}, transform {tuple(transform)[:6]}",
        cure="deliver a raster with rows along easting or longitude, georeferenced",
    )


def _band(path: Path, count: int, band: int | None) -> int:
    if (band is None and count == 1) or (band is not None and band <= count):
        return band or 1
    raise ReadingsError(
        f"the raster has {count} bands" + ("" if band is None else f", not {band}"),
        where=path.name,
        cure="state which one holds the heights in 'band'",
    )


def _unit(text: str | None) -> str | None:
    """Return the unit that a file tells, in gradred's spelling; None where it tells none."""
    spelt = (text or "").strip().lower()
    return next((unit for unit, names in _UNITS.items() if spelt in names), None)


def _horizontal(crs: CRS | None) -> CRS | None:
    """Return the horizontal part of a CRS that also tells the vertical."""
    return crs.sub_crs_list[0] if crs is not None and crs.is_compound else crs


def _netcdf(path: Path, variable: str | None, engine: Any) -> Raster:
    data, crs = _loaded(path, variable, engine)
    x_name, y_name = _axis(path, data, _X_NAMES, "X"), _axis(path, data, _Y_NAMES, "Y")
    _check_size(path, data.sizes[x_name], data.sizes[y_name])
    data = data.transpose(y_name, x_name).sortby([y_name, x_name])
    x, y = (data[name].to_numpy().astype(np.float64) for name in (x_name, y_name))
    for name, centres in ((x_name, x), (y_name, y)):
        _check_even(path, name, centres)
    if str(data[x_name].attrs.get("units", "")).startswith("degree") and x.mean() > 180.0:
        x = x - 360.0
    heights = np.array(data.to_numpy(), dtype=np.float64)
    return Raster(heights, x, y, _horizontal(crs), _unit(data.attrs.get("units")))


def _loaded(path: Path, variable: str | None, engine: Any) -> tuple[xr.DataArray, CRS | None]:
    """Return the grid and its CRS from a NetCDF file."""
    try:
        if engine == "h5netcdf":
            # of a broken file h5py lets go cleanly, and h5netcdf does not
            with h5py.File(path, "r") as raw:
                raw.visititems(_touch)
        with xr.open_dataset(path, engine=engine, decode_timedelta=False) as stored:
            data = _variable(path, stored, variable).load()
            if data.dtype.kind not in "fiu":
                raise ValueError(f"{variable} holds no numbers")
            return data, _netcdf_crs(stored, data)
    except GradredError:
        raise
    except Exception as error:
        # a broken file makes the libraries below raise KeyError, IndexError, RuntimeError, ...
        raise ReadingsError(
            f"is not a NetCDF file that can be read: {(str(error).splitlines() or ['?'])[0]}",
            where=path.name,
            cure="deliver the terrain model as GeoTIFF or NetCDF",
        ) from None


def _touch(name: str, item: Any) -> None:
    """Read all that belongs to one object of an HDF5 file."""
    for _ in item.attrs.items():
        pass


def _variable(path: Path, stored: xr.Dataset, variable: str | None) -> xr.DataArray:
    flat = [str(name) for name, found in stored.data_vars.items() if found.ndim == 2]
    if variable is None or variable not in flat:
        what = "no variable is stated" if variable is None else f"there is no grid {variable!r}"
        raise ReadingsError(
            what,
            where=path.name,
            cure=nearest(variable or "", flat) if flat else "deliver a file with a grid in it",
        )
    return stored[variable]


def _axis(path: Path, data: xr.DataArray, names: tuple[str, ...], axis: str) -> str:
    """Return the dimension along x or y, by CF attributes or by its name."""
    for dim in map(str, data.dims):
        if dim not in data.coords or data[dim].dtype.kind not in "fiu":
            continue
        attrs = data[dim].attrs
        if attrs.get("axis") == axis or {attrs.get("standard_name"), dim.lower()} & {*names}:
            return dim
    raise ReadingsError(
        f"the grid has no coordinate along {axis.lower()}; its dimensions are "
        + ", ".join(map(str, data.dims)),
        where=path.name,
        cure="give each dimension a coordinate with the standard_name of the CF conventions",
    )


def _check_even(path: Path, name: str, centres: Array) -> None:
    even = np.linspace(centres[0], centres[-1], len(centres))
    step = (centres[-1] - centres[0]) / max(len(centres) - 1, 1)
    gap = float(np.abs(centres - even).max())
    if not gap <= _EVEN * step:
        raise ReadingsError(
            f"the coordinate {name} is not evenly spaced: {gap / step:.2g} cells off"
            if step > 0.0
            else f"the coordinate {name} stands still",
            where=path.name,
            cure="resample the model to an even grid",
        )


def _netcdf_crs(stored: xr.Dataset, data: xr.DataArray) -> CRS | None:
    name = data.attrs.get("grid_mapping") or data.encoding.get("grid_mapping")
    if name is not None and name in stored.variables:
        return CRS.from_cf(stored[name].attrs)
    code = stored.attrs.get("crs")
    return CRS(code) if isinstance(code, str) and code.startswith("EPSG:") else None
