"""Delivered flight lines → the part ``lines``: delimited tables with a column map and units.

A delivery that cannot be vouched for is refused, every fault of a table told with its row and
column; a value that is merely missing is kept as NaN and its station flagged.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Final, Literal

import numpy as np
import xarray as xr
from pydantic import Field, model_validator

from gradred import survey
from gradred.errors import ReadingsError
from gradred.ingest.checks import (
    flight_faults,
    missing_faults,
    name_faults,
    order_faults,
    value_faults,
)
from gradred.ingest.columns import DIAGONAL, GROUPS, NINE, LineColumns, LineUnits
from gradred.ingest.delimited import Delimited, Dialect, read_delimited
from gradred.ingest.faults import merged, tell
from gradred.ingest.kinds import line_kinds
from gradred.ingest.positions import place
from gradred.ingest.readings import Readings, Texts, Times
from gradred.ingest.times import DateFormat, times
from gradred.stage import Cost, Crs, InputFile, Metres, Settings, Sizes, progress, stage
from gradred.tensor import COMPONENTS, axial_vector, from_matrix
from gradred.units import factor

Sign = Literal["static-positive", "static-negative"]
RatesSign = Literal["right-handed", "left-handed"]

ATTITUDE: Final = ("heading", "pitch", "roll")
RATES: Final = ("rate_x", "rate_y", "rate_z")
_TEXTS: Final = ("line", "flight", "kind", "time", "date")


class LineSettings(Settings):
    """Settings of the stage ``read_lines``."""

    crs: Crs = Field(description="survey CRS, projected, in metres, as 'EPSG:32633'")
    tables: list[InputFile] = Field(
        min_length=1, description="tables of readings, plain or gzipped, in the order of flight"
    )
    delimiter: Literal[",", ";", "\t", "|", " "] = Field(
        description="what stands between two values; a blank stands for any run of blanks"
    )
    header: int = Field(
        ge=0,
        le=10_000,
        description="row of the file with the names of the columns, counted from 1; 0 where there "
        "is none, and columns are named '1', '2', ...",
    )
    comment: str = Field("", description="what rows start with that are to be skipped")
    encoding: Literal["utf-8", "latin-1"] = Field("utf-8", description="encoding of the text")
    nulls: list[str] = Field(
        [], description="texts that mean a missing value, besides an empty field"
    )
    columns: LineColumns = Field(description="column that holds each variable")
    units: LineUnits = Field(description="unit of each delivered quantity")
    frame: Literal["body", "ned", "enu"] = Field(
        description="axes of the tensor: 'body', 'ned' (x north, y east, z down) or "
        "'enu' (x east, y north, z up)"
    )
    sign: Sign = Field(
        description="'static-positive' where an instrument at rest reads +Γ = ∇∇V, "
        "'static-negative' where it reads −Γ"
    )
    rates_sign: RatesSign | None = Field(
        None,
        description="'right-handed' where rates are those of the instrument against inertial "
        "space, right-handed about its axes; 'left-handed' where they are the opposite",
    )
    date_format: DateFormat = Field("YYYY-MM-DD", description="how a date column is written")
    ahead_of_utc: float = Field(
        0.0,
        ge=-86_400,
        le=86_400,
        description="what delivered times are ahead of UTC, s; GPS time since 2017 is 18 s ahead",
    )
    position_crs: Crs | None = Field(
        None,
        description="CRS of delivered easting and northing; the survey's where it is not stated",
    )
    position_tolerance: Metres = Field(
        5.0,
        ge=0.01,
        le=1000,
        description="how far delivered longitude, latitude and easting, northing may disagree, m; "
        "realisations of WGS 84 differ by up to 2 m",
    )
    height_reference: Literal["ellipsoid", "orthometric"] = Field(
        description="what delivered heights are counted from"
    )
    separation: Metres | None = Field(
        None,
        ge=-150,
        le=150,
        description="height of the geoid above the ellipsoid, m; added to orthometric heights",
    )
    ties: list[str] = Field([], description="patterns of the names of tie lines, as 'T*'")
    repeats: list[str] = Field([], description="patterns of the names of repeat lines")

    @model_validator(mode="after")
    def _stated(self) -> LineSettings:
        for unit, column in GROUPS.items():
            if self.columns.delivers(column) and getattr(self.units, unit) is None:
                raise ValueError(f"state the unit of {unit} in 'units': {column} has a column")
        if self.columns.delivers("rate_x") and self.rates_sign is None:
            raise ValueError("state 'rates_sign': the rates have columns")
        if self.frame == "body" and not self.columns.delivers("heading"):
            raise ValueError("name the columns of heading, pitch, roll: readings are in body axes")
        if (self.height_reference == "orthometric") != (self.separation is not None):
            raise ValueError("state 'separation' with orthometric heights, and only with them")
        if self.columns.delivers("kind") and (self.ties or self.repeats):
            raise ValueError("name a column of kind, or patterns of ties and repeats, not both")
        return self


def given(settings: LineSettings) -> tuple[str, ...]:
    """Return the variables that these settings deliver besides those that always come."""
    columns = settings.columns
    names = {
        "heading": ATTITUDE,
        "rate_x": ("rates",),
        "clearance": ("clearance",),
        "turbulence": ("turbulence",),
        "yx": ("antisymmetric",),
    }
    return tuple(name for key, group in names.items() if columns.delivers(key) for name in group)


def _cost(settings: LineSettings, sizes: Sizes) -> Cost:
    # measured: 1.5e6 stations/s with 25 columns, which are held about three times
    return Cost(0.5 + 4e-6 * sizes["stations"], 1500.0 * sizes["stations"])


@stage(
    makes="lines",
    adds=(
        "time", "longitude", "latitude", "height", "easting", "northing", "convergence",
        "line", "flight", "kind", "gradient", "as_read", "flag",
    ),
    gives=given,
    forecast=_cost,
)  # fmt: skip
def read_lines(settings: LineSettings) -> xr.Dataset:
    """Read flight lines from delimited tables; readings keep their order, missing ones a flag."""
    readings = _read(settings)
    kinds, kind_faults = line_kinds(readings, settings.ties, settings.repeats)
    tell(
        [
            *name_faults(readings),
            *value_faults(readings),
            *missing_faults(readings),
            *order_faults(readings),
            *(flight_faults(readings) if settings.columns.delivers("flight") else ()),
            *kind_faults,
        ],
        "the readings cannot be vouched for",
    )
    placed = place(readings, settings.crs, settings.position_crs, settings.position_tolerance)
    texts = {"line": readings.line, "flight": readings.flight, "kind": kinds}
    data = survey.new("lines", settings.crs)
    for name, values in {"time": readings.time, **vars(placed), **texts}.items():
        data = survey.put("lines", data, name, values)
    return _flagged(_with_tensor(_with_motion(data, readings, settings), readings, settings))


def _read(settings: LineSettings) -> Readings:
    """Return all tables, one after another, in gradred's units and the survey's signs."""
    numbers, texts = _wanted(settings.columns)
    dialect = Dialect(
        settings.delimiter, settings.header, settings.comment, settings.nulls, settings.encoding
    )
    tables, when, faults = [], [], []
    for number, path in enumerate(settings.tables):
        progress(number, len(settings.tables), path.name)
        try:
            table = read_delimited(path, dialect, numbers, texts)
            when.append(times(table, settings.columns, settings.date_format, settings.ahead_of_utc))
            tables.append(table)
        except ReadingsError as error:
            faults.append(error)
        except ExceptionGroup as group:
            faults.extend(error for error in group.exceptions if isinstance(error, ReadingsError))
    tell(merged(faults), "the tables cannot be read")
    return _joined(tables, np.concatenate(when), settings)


def _wanted(columns: LineColumns) -> tuple[dict[str, str], dict[str, str]]:
    """Return the columns of numbers and of texts, each with the variable that it is wanted for."""
    numbers: dict[str, str] = {}
    texts: dict[str, str] = {}
    for name in LineColumns.model_fields:
        column = getattr(columns, name)
        if column is not None:
            (texts if name in _TEXTS else numbers)[column] = name
    return numbers, texts


def _joined(tables: Sequence[Delimited], time: Times, settings: LineSettings) -> Readings:
    columns = settings.columns

    def text(name: str) -> Texts | None:
        column = getattr(columns, name)
        if column is None:
            return None
        return np.concatenate([table.text(column) for table in tables])

    factors = _factors(settings)
    values = {
        name: np.concatenate([table.number(getattr(columns, name)) for table in tables]) * by
        for name, by in factors.items()
    }
    if settings.separation is not None:
        values["height"] += settings.separation
    line, flight = text("line"), text("flight")
    assert line is not None
    if flight is None:
        flight = np.datetime_as_string(time, unit="D").astype(object)
    return Readings(tables, time, line, flight, text("kind"), values)


def _factors(settings: LineSettings) -> dict[str, float]:
    """Return what each delivered number is to be multiplied by: its unit and its sign."""
    units = settings.units
    sign = 1.0 if settings.sign == "static-positive" else -1.0
    turn = -1.0 if settings.rates_sign == "left-handed" else 1.0
    groups: tuple[tuple[Sequence[str], str | None, str, float], ...] = (
        (("longitude", "latitude"), units.longitude, "angle", 1.0),
        (("easting", "northing"), units.easting, "length", 1.0),
        (("height",), units.height, "length", 1.0),
        (("clearance",), units.clearance, "length", 1.0),
        (ATTITUDE, units.attitude, "angle", 1.0),
        (RATES, units.rates, "rate", turn),
        (NINE, units.gradient, "gradient", sign),
    )
    found = {"turbulence": 1.0} if settings.columns.delivers("turbulence") else {}
    for names, unit, quantity, by in groups:
        for name in names:
            if settings.columns.delivers(name) and unit is not None:
                found[name] = by * factor(unit, quantity, where="stage read_lines, units")
    return found


def _with_motion(data: xr.Dataset, readings: Readings, settings: LineSettings) -> xr.Dataset:
    for name in ("height", *ATTITUDE, "clearance", "turbulence"):
        if name in readings.values:
            values = readings.values[name]
            values = values % 360.0 if name == "heading" else values
            data = survey.put("lines", data, name, values)
    data["height"].attrs["separation"] = settings.separation or 0.0
    if settings.columns.delivers("rate_x"):
        rates = np.stack([readings.values[name] for name in RATES], axis=-1)
        data = survey.put("lines", data, "rates", rates, frame="body")
    return data


def _with_tensor(data: xr.Dataset, readings: Readings, settings: LineSettings) -> xr.Dataset:
    """Return the part with its readings: symmetric part, and the rest where it was delivered."""
    elements = settings.columns.elements
    attrs: dict[str, str] = {}
    if len(elements) == 9:
        matrix = np.stack([readings.values[name] for name in NINE], axis=-1).reshape(-1, 3, 3)
        tensor = from_matrix(matrix)
        data = survey.put(
            "lines", data, "antisymmetric", axial_vector(matrix), frame=settings.frame
        )
    else:
        delivered = dict(readings.values)
        if len(elements) == 5:
            absent = next(name for name in DIAGONAL if name not in elements)
            first, second = (delivered[name] for name in DIAGONAL if name != absent)
            delivered[absent] = -(first + second)
            attrs["completed"] = absent
        tensor = np.stack([delivered[name] for name in COMPONENTS], axis=-1)
    for name in ("gradient", "as_read"):
        data = survey.put("lines", data, name, tensor, frame=settings.frame, **attrs)
    return data


def _flagged(data: xr.Dataset) -> xr.Dataset:
    """Return the part with a flag at every station where something that came is missing."""
    data = survey.put("lines", data, "flag", np.zeros(data.sizes["station"]))
    for name, group in {
        "reading_missing": ("gradient", "antisymmetric"),
        "position_missing": ("longitude", "latitude", "height", "easting", "northing"),
        "attitude_missing": ATTITUDE,
        "rates_missing": ("rates",),
    }.items():
        gone = np.zeros(data.sizes["station"], dtype=bool)
        for variable in group:
            if variable in data:
                absent = np.isnan(data[variable].to_numpy())
                gone |= absent.reshape(len(gone), -1).any(axis=1)
        data = survey.flag(data, name, gone)
    return data
