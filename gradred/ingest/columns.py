"""Which column of a delivered table holds what, and in which unit: settings of ``read_lines``."""

from __future__ import annotations

from typing import Annotated, Final

from pydantic import AfterValidator, Field, model_validator

from gradred.stage import Settings
from gradred.tensor import COMPONENTS
from gradred.units import FACTORS

NINE: Final = ("xx", "xy", "xz", "yx", "yy", "yz", "zx", "zy", "zz")
DIAGONAL: Final = ("xx", "yy", "zz")

_COMPLETE: Final = (
    NINE,
    COMPONENTS,
    *(tuple(name for name in COMPONENTS if name != absent) for absent in DIAGONAL),
)


def _accepted(quantity: str) -> AfterValidator:
    units = FACTORS[quantity]

    def known(unit: str) -> str:
        if unit not in units:
            raise ValueError(f"write one of the units of {quantity} {', '.join(units)}")
        return unit

    return AfterValidator(known)


GradientUnit = Annotated[str, _accepted("gradient")]
LengthUnit = Annotated[str, _accepted("length")]
AngleUnit = Annotated[str, _accepted("angle")]
RateUnit = Annotated[str, _accepted("rate")]


def _column(what: str) -> str | None:
    found: str | None = Field(None, min_length=1, description=f"column of {what}")
    return found


class LineColumns(Settings):
    """Settings of the stage ``read_lines``: the name of the column that holds each variable."""

    line: str = Field(min_length=1, description="column of the name of the flight line")
    flight: str | None = _column("the name of the flight; without it the UTC date names it")
    kind: str | None = _column("traverse, tie or repeat")
    time: str | None = _column("the time: ISO text, or the time of day beside a date column")
    date: str | None = _column("the date, in 'date_format'")
    seconds: str | None = _column("seconds of the day, beside a date column")
    longitude: str | None = _column("longitude, positive east")
    latitude: str | None = _column("latitude, positive north")
    easting: str | None = _column("easting in 'position_crs'")
    northing: str | None = _column("northing in 'position_crs'")
    height: str = Field(min_length=1, description="column of the height of the instrument")
    clearance: str | None = _column("the measured height above ground")
    heading: str | None = _column("heading, clockwise from true north")
    pitch: str | None = _column("pitch, nose up positive")
    roll: str | None = _column("roll, right wing down positive")
    rate_x: str | None = _column("the rate of the instrument about its x axis")
    rate_y: str | None = _column("the rate of the instrument about its y axis")
    rate_z: str | None = _column("the rate of the instrument about its z axis")
    turbulence: str | None = _column("rms vertical acceleration in units of normal gravity")
    xx: str | None = _column("the element xx in the axes of 'frame'")
    xy: str | None = _column("the element xy")
    xz: str | None = _column("the element xz")
    yx: str | None = _column("the element yx")
    yy: str | None = _column("the element yy")
    yz: str | None = _column("the element yz")
    zx: str | None = _column("the element zx")
    zy: str | None = _column("the element zy")
    zz: str | None = _column("the element zz")

    @model_validator(mode="after")
    def _complete(self) -> LineColumns:
        self._check_distinct()
        self._check_time()
        self._check_positions()
        for group in (("heading", "pitch", "roll"), ("rate_x", "rate_y", "rate_z")):
            if 0 < sum(self.delivers(name) for name in group) < 3:
                raise ValueError(f"name the columns of {', '.join(group)} all, or none of them")
        if self.elements not in _COMPLETE:
            raise ValueError(
                "name the columns of all nine elements, of the six xx xy xz yy yz zz, "
                "or of five of these, without one of xx yy zz"
            )
        return self

    def _check_distinct(self) -> None:
        taken: dict[str, str] = {}
        for name in type(self).model_fields:
            column = getattr(self, name)
            if column is not None and taken.setdefault(column, name) != name:
                raise ValueError(f"the column {column!r} is named for {taken[column]} and {name}")

    def _check_time(self) -> None:
        ways = ((True, False, False), (True, True, False), (False, True, True))
        if tuple(self.delivers(name) for name in ("time", "date", "seconds")) not in ways:
            raise ValueError("name the column of time, of date and time, or of date and seconds")

    def _check_positions(self) -> None:
        pairs = (("longitude", "latitude"), ("easting", "northing"))
        counts = [sum(self.delivers(name) for name in pair) for pair in pairs]
        if 1 in counts or counts == [0, 0]:
            raise ValueError(
                "name the columns of longitude and latitude, of easting and northing, or of both"
            )

    def delivers(self, name: str) -> bool:
        """Return whether a variable has a column."""
        return getattr(self, name) is not None

    @property
    def elements(self) -> tuple[str, ...]:
        """The delivered elements of the tensor: nine, six or five."""
        return tuple(name for name in NINE if self.delivers(name))


class LineUnits(Settings):
    """Settings of the stage ``read_lines``: the unit of each delivered quantity."""

    gradient: GradientUnit = Field(description="unit of the tensor's elements: E, s-2, mGal/km ...")
    height: LengthUnit = Field(description="unit of height: m, km, ft, ft-us")
    clearance: LengthUnit | None = Field(None, description="unit of clearance: m, km, ft, ft-us")
    longitude: AngleUnit | None = Field(
        None, description="unit of longitude and latitude: deg, rad, mrad"
    )
    easting: LengthUnit | None = Field(
        None, description="unit of easting and northing: m, km, ft, ft-us"
    )
    attitude: AngleUnit | None = Field(
        None, description="unit of heading, pitch and roll: deg, rad, mrad"
    )
    rates: RateUnit | None = Field(
        None, description="unit of the rates: rad/s, mrad/s, deg/s, deg/h"
    )


GROUPS: Final = {
    "clearance": "clearance",
    "longitude": "longitude",
    "easting": "easting",
    "attitude": "heading",
    "rates": "rate_x",
}
"""Per unit that may be left out, a column that calls for it."""
