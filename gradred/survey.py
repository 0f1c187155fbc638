"""THE DATA: the parts of a survey, what every variable in them means, the door checks, the files.

A part is an ``xarray.Dataset``. ``VARIABLES`` is the whole contract: dimensions, unit, frame and
meaning of each variable. A variable is made with ``put``, which takes all of that from the table,
and is looked at again by ``check`` at the door of every stage.
"""

from __future__ import annotations

import os
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

import numpy as np
import pandas as pd
import xarray as xr
from numpy.typing import ArrayLike, NDArray

from gradred.errors import SurveyError
from gradred.tensor import COMPONENTS, FRAMES
from gradred.units import CF_UNITS

PARTS: Final = ("lines", "terrain", "grid", "model")
AXES: Final = ("x", "y", "z")
KINDS: Final = ("traverse", "tie", "repeat")

FLAGS: Final[dict[str, int]] = {
    "reading_missing": 1,
    "position_missing": 2,
    "attitude_missing": 4,
    "rates_missing": 8,
    "spike": 16,
    "outside_terrain_model": 32,
    "rejected_by_processor": 64,
}
"""Why a station is left out of every estimate; its readings stay in place."""

CORRECTIONS: Final[dict[str, str]] = {
    "motion": "rotation of the platform",
    "tide": "tide of Moon and Sun",
    "normal": "normal field of the level ellipsoid",
    "terrain": "attraction of the terrain",
    "self": "self-gradient of the aircraft",
    "levelling": "drift found by levelling",
}
"""The columns of the ledger, in working order."""


@dataclass(frozen=True)
class Variable:
    """One row of the contract: where a variable lives, its dimensions, unit and meaning."""

    part: str
    name: str
    dims: tuple[str, ...]
    unit: str
    meaning: str
    tensor: bool = False
    text: bool = False


def _rows(part: str, dims: tuple[str, ...], *rows: tuple[str, str, str]) -> list[Variable]:
    tensor = dims[-1:] == ("component",)
    return [
        Variable(
            part, name, dims, unit, meaning, tensor=tensor and unit == "E", text=unit == "text"
        )
        for name, unit, meaning in rows
    ]


_STATION: Final = ("station",)
_TENSOR: Final = ("station", "component")
_MAP: Final = ("northing", "easting")
_MAP_TENSOR: Final = ("northing", "easting", "component")
_CELL: Final = ("layer", "cell_northing", "cell_easting")

VARIABLES: Final[tuple[Variable, ...]] = (
    *_rows(
        "lines",
        _STATION,
        ("time", "time", "UTC of the reading"),
        ("longitude", "degree", "geodetic longitude, positive east"),
        ("latitude", "degree", "geodetic latitude, positive north"),
        ("height", "m", "height of the instrument above the ellipsoid"),
        ("easting", "m", "easting in the survey CRS"),
        ("northing", "m", "northing in the survey CRS"),
        ("convergence", "degree", "azimuth of grid north, positive east of true north"),
        ("line", "text", "name of the flight line"),
        ("flight", "text", "name of the flight"),
        ("kind", "text", "traverse, tie or repeat"),
        ("heading", "degree", "heading, clockwise from true north"),
        ("pitch", "degree", "pitch, nose up positive"),
        ("roll", "degree", "roll, right wing down positive"),
        ("clearance", "m", "measured height of the instrument above ground"),
        ("terrain_height", "m", "height of the terrain model below the station, ellipsoidal"),
        ("turbulence", "1", "rms vertical acceleration in units of normal gravity"),
        ("flag", "1", "why a station is left out of estimates, bit by bit"),
    ),
    *_rows(
        "lines",
        ("station", "axis"),
        ("rates", "rad/s", "rate of the instrument relative to inertial space, body axes"),
        ("antisymmetric", "E", "m of the antisymmetric part [m×] of the nine-element reading"),
    ),
    *_rows(
        "lines",
        _TENSOR,
        ("gradient", "E", "gradient tensor, reduced so far"),
        ("sigma", "E", "standard deviation of the noise of one reading"),
        ("as_read", "E", "symmetric part of the tensor as it was read"),
        *((f"removed_{key}", "E", f"removed: {text}") for key, text in CORRECTIONS.items()),
        *((f"sigma_{key}", "E", f"sd of removed: {text}") for key, text in CORRECTIONS.items()),
    ),
    *_rows(
        "terrain",
        _MAP,
        ("height", "m", "height of the ground above the ellipsoid, cell centres"),
        ("bedrock", "m", "height of the top of bedrock above the ellipsoid, cell centres"),
    ),
    *_rows(
        "grid",
        _MAP_TENSOR,
        ("gradient", "E", "mapped gradient tensor"),
        ("sigma", "E", "standard deviation of the mapped gradient tensor"),
    ),
    *_rows(
        "grid",
        _MAP,
        ("gz", "mGal", "mapped vertical attraction, positive down"),
        ("sigma_gz", "mGal", "standard deviation of the mapped vertical attraction"),
        ("surface", "m", "height of the map surface above the ellipsoid"),
        ("horizontal_curvature", "E", "magnitude of the differential curvature"),
        ("invariant_1", "E2", "second-order invariant I1 of the tensor"),
        ("invariant_2", "E3", "determinant I2 of the tensor"),
        ("dimensionality", "1", "-27 I2^2 / (4 I1^3): 0 over a line source, 1 over a point"),
        ("total_gradient", "E", "length of the gradient of gz"),
        ("tilt", "degree", "angle of the gradient of gz above the horizontal"),
    ),
    *_rows(
        "grid",
        _TENSOR,
        ("residual", "E", "reading minus mapped field and constant; missing where not used"),
    ),
    *_rows(
        "grid",
        ("component",),
        ("residual_rms", "E", "rms of reading minus mapped field at the stations"),
        ("chi_squared", "1", "mean of squared residual over variance at the stations"),
        ("datum", "E", "constant per component estimated with the field"),
    ),
    *_rows("model", ("body",), ("body_kind", "text", "sphere, prism or sheet")),
    *_rows(
        "model",
        ("body", "parameter"),
        ("body_parameter", "text", "name of the parameter, with its unit"),
        ("body_value", "1", "estimate, in the unit of its name"),
        ("body_sigma", "1", "standard error; 0 where the parameter was held"),
    ),
    *_rows(
        "model",
        _CELL,
        ("voxel_density", "kg/m3", "density contrast of the cell"),
        ("voxel_top", "m", "height of the cell's top above the ellipsoid"),
        ("voxel_bottom", "m", "height of the cell's bottom above the ellipsoid"),
    ),
    *_rows(
        "model",
        _TENSOR,
        *(
            (f"predicted_{kind}", "E", f"tensor predicted by the {kind}")
            for kind in ("bodies", "voxels")
        ),
        *(
            (f"residual_{kind}", "E", f"reading minus prediction of the {kind}")
            for kind in ("bodies", "voxels")
        ),
    ),
    *_rows(
        "model",
        ("component",),
        *(
            (f"chi_squared_{kind}", "1", f"mean squared residual over variance, {kind}")
            for kind in ("bodies", "voxels")
        ),
    ),
    *_rows(
        "model",
        ("trial",),
        ("tradeoff_weight", "1", "weight of the model norm"),
        ("tradeoff_chi_squared", "1", "chi-squared per datum at that weight"),
        ("tradeoff_roughness", "1", "model norm at that weight"),
    ),
)

_TABLE: Final = {(row.part, row.name): row for row in VARIABLES}
_COORDINATES: Final[dict[str, tuple[str, str]]] = {
    "easting": ("m", "easting in the survey CRS"),
    "northing": ("m", "northing in the survey CRS"),
    "cell_easting": ("m", "easting of the cell's centre in the survey CRS"),
    "cell_northing": ("m", "northing of the cell's centre in the survey CRS"),
}


def variable(part: str, name: str) -> Variable:
    """Return the contract of one variable, or refuse a name that is not in the table."""
    try:
        return _TABLE[part, name]
    except KeyError:
        raise SurveyError(
            f"the part {part!r} has no variable {name!r}",
            where="survey.VARIABLES",
            cure="add a row to the table, or correct the name",
        ) from None


def new(part: str, crs: str, **coordinates: ArrayLike) -> xr.Dataset:
    """Return an empty part in a CRS, with its coordinates of dimension.

    Parameters
    ----------
    part : str
        One of ``PARTS``.
    crs : str
        The survey CRS, as "EPSG:32633".
    **coordinates : (n,) arrays
        Cell centres along ``easting`` and ``northing``, metres, for the gridded parts.
    """
    data = xr.Dataset(attrs={"part": part, "crs": crs})
    for name, values in coordinates.items():
        unit, meaning = _COORDINATES[name]
        attrs = {"units": unit, "long_name": meaning}
        data = data.assign_coords({name: (name, np.asarray(values, dtype=np.float64), attrs)})
    return data


def put(
    part: str,
    data: xr.Dataset,
    name: str,
    values: ArrayLike,
    *,
    frame: str | None = None,
    **attrs: Any,
) -> xr.Dataset:
    """Return ``data`` with a variable of the table added or replaced.

    Parameters
    ----------
    part, name : str
        Row of the table; it gives dimensions, unit and long name.
    data : xr.Dataset
        The part so far; not changed.
    values : array
        In the table's unit, shaped as its dimensions.
    frame : str, optional
        Frame of a tensor or an axial vector; a tensor is refused without one.
    **attrs
        Further attributes of the variable.
    """
    row = variable(part, name)
    if (row.tensor and frame is None) or (frame is not None and frame not in FRAMES):
        raise SurveyError(
            f"{name!r} of {part} cannot be in the frame {frame!r}",
            where="survey.put",
            cure=f"name one of: {', '.join(FRAMES)}",
        )
    array = np.asarray(values)
    labels: dict[str, Any] = {
        "units": row.unit,
        "long_name": row.meaning,
        **({"frame": frame} if frame else {}),
    }
    if row.unit in ("time", "text"):
        labels.pop("units")
    if row.text:
        array = array.astype(str).astype(object)
    elif row.unit == "time":
        array = array.astype("datetime64[ns]")
    elif name != "flag":
        array = array.astype(np.float64)
    if name == "flag":
        array = array.astype(np.int32)
        labels["flag_masks"] = np.array(list(FLAGS.values()), dtype=np.int32)
        labels["flag_meanings"] = " ".join(FLAGS)
    data = data.assign({name: xr.Variable(row.dims, array, {**labels, **attrs})})
    for dim, names in (("component", COMPONENTS), ("axis", AXES)):
        if dim in row.dims and dim not in data.coords:
            data = data.assign_coords({dim: np.array(names, dtype=object)})
    return data


def check(part: str, data: xr.Dataset, needs: Iterable[str], *, where: str) -> None:
    """Refuse a part that is not what it says, or that lacks what a stage needs.

    Every variable of the table that is present is looked at: dimensions, unit, frame, kind of
    number. Variables that are not in the table are refused.
    """
    if data.attrs.get("part") != part:
        raise SurveyError(
            f"this is the part {data.attrs.get('part')!r}, not {part!r}",
            where=where,
            cure=f"hand over the {part}",
        )
    missing = [name for name in needs if name not in data.variables]
    if missing:
        raise SurveyError(
            f"the {part} lack {', '.join(missing)}",
            where=where,
            cure="deliver it, or put the stage that makes it before this one",
        )
    for name in data.data_vars:
        _check_variable(variable(part, str(name)), data[str(name)], where)


def _check_variable(row: Variable, found: xr.DataArray, where: str) -> None:
    def refuse(what: str, cure: str) -> SurveyError:
        return SurveyError(f"{row.name!r} of {row.part} {what}", where=where, cure=cure)

    if found.dims != row.dims:
        raise refuse(
            f"has dimensions {found.dims}", f"it must have {row.dims}; make it with survey.put"
        )
    unit = None if row.unit in ("time", "text") else row.unit
    if found.attrs.get("units") != unit:
        raise refuse(
            f"is in {found.attrs.get('units')!r}",
            f"it must be in {unit!r}; make it with survey.put",
        )
    if row.tensor and found.attrs.get("frame") not in FRAMES:
        raise refuse(
            f"is in the frame {found.attrs.get('frame')!r}", f"name one of: {', '.join(FRAMES)}"
        )
    if found.dtype.kind == "f" and np.isinf(found.to_numpy()).any():
        raise refuse("holds infinite numbers", "find the reader or stage that made them")


def frame_of(part: str, data: xr.Dataset, name: str, expected: str, *, where: str) -> None:
    """Refuse a tensor that is not in the expected frame."""
    found = data[name].attrs.get("frame")
    if found != expected:
        raise SurveyError(
            f"{name!r} of {part} is in the frame {found!r}, but must be in {expected!r}",
            where=where,
            cure="put the stage that turns it before this one (rotate_to_enu for lines)",
        )


def good(lines: xr.Dataset) -> NDArray[np.bool_]:
    """Return (station,) True where no flag is raised and the whole gradient is there."""
    flagged = lines["flag"].to_numpy() != 0
    return np.asarray(~flagged & np.isfinite(lines["gradient"].to_numpy()).all(axis=1))


def flag(lines: xr.Dataset, name: str, stations: NDArray[np.bool_]) -> xr.Dataset:
    """Return ``lines`` with one flag raised at the stations given by a (station,) mask."""
    raised = lines["flag"].to_numpy() | np.where(stations, FLAGS[name], 0)
    return put("lines", lines, "flag", raised)


def flag_counts(lines: xr.Dataset) -> dict[str, int]:
    """Return how many stations carry each flag, zero counts included."""
    raised = lines["flag"].to_numpy()
    return {name: int(np.count_nonzero(raised & bit)) for name, bit in FLAGS.items()}


def removed(lines: xr.Dataset) -> tuple[str, ...]:
    """Return the corrections that stand in the ledger of ``lines``, in working order."""
    return tuple(key for key in CORRECTIONS if f"removed_{key}" in lines)


def subtract(
    lines: xr.Dataset, correction: str, amount: NDArray[np.float64], sigma: ArrayLike, **attrs: Any
) -> xr.Dataset:
    """Return ``lines`` with a correction subtracted from the gradient and kept in the ledger.

    Parameters
    ----------
    lines : xr.Dataset
        The part; not changed.
    correction : str
        A key of ``CORRECTIONS`` that the ledger does not hold yet.
    amount : (station, component) array
        What is removed, E, in the frame of ``gradient``.
    sigma : (station, component) array or float
        Its standard deviation, E.
    **attrs
        What the correction assumed, kept with it.
    """
    if correction in removed(lines):
        raise SurveyError(
            f"{CORRECTIONS[correction]} has been removed already",
            where=f"ledger of the lines, removed_{correction}",
            cure="name the stage once in the pipeline file",
        )
    frame = lines["gradient"].attrs["frame"]
    kept = lines["gradient"].attrs
    reduced = lines["gradient"].to_numpy() - amount
    out = lines.assign(gradient=lines["gradient"].copy(data=reduced).assign_attrs(kept))
    out = put("lines", out, f"removed_{correction}", amount, frame=frame, **attrs)
    spread = np.broadcast_to(np.asarray(sigma, dtype=np.float64), reduced.shape)
    return put("lines", out, f"sigma_{correction}", spread, frame=frame)


def closure(lines: xr.Dataset) -> float:
    """Return the largest |as-read − current − Σ removed| over all readings that are there, E."""
    total = lines["gradient"].to_numpy().copy()
    for key in removed(lines):
        total += lines[f"removed_{key}"].to_numpy()
    gap = np.abs(lines["as_read"].to_numpy() - total)
    return float(np.nanmax(gap)) if np.isfinite(gap).any() else 0.0


def save(part: str, data: xr.Dataset, path: Path) -> None:
    """Write a part as CF NetCDF; the file appears whole or not at all.

    Units are written so that UDUNITS parses them (1 E is ``1e-9 s-2``); times as integer
    nanoseconds, so that what is opened again equals what was saved, bit by bit.
    """
    check(part, data, (), where=f"saving {path.name}")
    out = data.copy()
    encoding: dict[str, dict[str, Any]] = {}
    for name in out.variables:
        found = out[name]
        unit = found.attrs.get("units")
        if unit is not None:
            out[name].attrs["units"] = CF_UNITS[unit]
            out[name].attrs["gradred_units"] = unit
        encoding[str(name)] = {"_FillValue": None}
        if found.dtype.kind == "M":
            encoding[str(name)] = {"units": "nanoseconds since 1970-01-01", "dtype": "int64"}
    out.attrs["Conventions"] = "CF-1.11"
    scratch = path.with_name(f".{path.name}.{os.getpid()}")
    try:
        out.to_netcdf(scratch, engine="h5netcdf", encoding=encoding)
        scratch.replace(path)
    finally:
        scratch.unlink(missing_ok=True)


def open_part(path: Path) -> tuple[str, xr.Dataset]:
    """Return the name and the data of a part that ``save`` wrote, checked at the door."""
    with xr.open_dataset(path, engine="h5netcdf", decode_timedelta=False) as stored:
        data = stored.load()
    data.attrs.pop("Conventions", None)
    # what an exported grid says beside for other programs
    data = data.drop_vars("crs", errors="ignore")
    for name in data.variables:
        attrs: dict[str, Any] = data[name].attrs
        for beside in ("grid_mapping", "standard_name", "axis"):
            attrs.pop(beside, None)
        if "gradred_units" in attrs:
            attrs["units"] = attrs.pop("gradred_units")
        data[name].encoding = {}
    data.encoding = {}
    part = str(data.attrs.get("part"))
    if part not in PARTS:
        raise SurveyError(
            f"no part of a survey is called {part!r}",
            where=str(path),
            cure="open a file that gradred saved",
        )
    check(part, data, (), where=str(path))
    return part, data


def table() -> pd.DataFrame:
    """Return the contract as a table: part, name, dimensions, unit, meaning."""
    rows: list[Mapping[str, str]] = [
        {
            "part": row.part,
            "name": row.name,
            "dimensions": " × ".join(row.dims),
            "unit": row.unit,
            "meaning": row.meaning,
        }
        for row in VARIABLES
    ]
    return pd.DataFrame(rows)
