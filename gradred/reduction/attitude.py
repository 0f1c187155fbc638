"""From the axes of the instrument to east, north and up."""

from __future__ import annotations

import numpy as np
import xarray as xr
from numpy.typing import NDArray
from pydantic import Field

from gradred import survey
from gradred.errors import ReadingsError
from gradred.reduction.crossings import Array, Index
from gradred.stage import Degrees, Settings, stage
from gradred.tensor import Rotation, body_to_enu, ned_to_enu


class RotateSettings(Settings):
    """Settings of the stage ``rotate_to_enu``."""

    follows_track: bool = Field(
        True,
        description="the instrument's heading follows the aircraft: it is checked against the "
        "course over ground; false for a platform that keeps a heading of its own",
    )
    crab: Degrees = Field(
        30.0, ge=1, le=80, description="largest difference of heading and course on a line"
    )


def course_over_ground(longitude: Array, latitude: Array) -> Array:
    r"""Return the course of a track, clockwise from true north, from its positions.

    .. math:: \tan α = \frac{N \cos φ\, \dot λ}{M \dot φ}

    Parameters
    ----------
    longitude, latitude : (n,) arrays
        Degrees, in flying order, n at least 2.

    Returns
    -------
    (n,) array
        Degrees, 0 to 360.

    Accuracy
    --------
    0.2 degrees: the Earth is taken as a sphere.

    Source
    ------
    Geometry of a track on a sphere, common practice, no source.

    Checked by
    ----------
    ``tests/reduction/test_attitude.py`` against the forward azimuth of PROJ.
    """
    east = np.gradient(np.unwrap(longitude, period=360.0)) * np.cos(np.radians(latitude))
    return np.asarray(np.degrees(np.arctan2(east, np.gradient(latitude))) % 360.0)


def check_headings(
    heading: Array,
    longitude: Array,
    latitude: Array,
    names: NDArray[np.str_],
    line: Index,
    crab: float,
) -> None:
    """Refuse headings that do not lie along the tracks; the median of each line decides."""
    off: dict[str, float] = {}
    for number in range(len(names)):
        here = np.flatnonzero((line == number) & np.isfinite(heading + longitude + latitude))
        if len(here) < 3:
            continue
        course = course_over_ground(longitude[here], latitude[here])
        difference = (heading[here] - course + 180.0) % 360.0 - 180.0
        # a difference near ±180 must not average to nothing
        middle = float(np.degrees(np.angle(np.exp(1j * np.radians(difference)).mean())))
        if abs(middle) > crab:
            off[str(names[number])] = middle
    if off:
        first, angle = next(iter(off.items()))
        guess = "reversed" if abs(angle) > 150.0 else "counted from another direction"
        raise ReadingsError(
            f"the heading of line {first} lies {angle:.0f} degrees off its course over ground",
            where=f"stage rotate_to_enu, {len(off)} of {len(names)} lines",
            cure=f"headings look {guess}: they count clockwise from true north, where the nose "
            "points; set follows_track = false for a platform with a heading of its own",
        )


@stage(
    makes="lines",
    needs={"lines": ("gradient", "as_read", "line", "longitude", "latitude")},
    adds=("gradient", "as_read"),
    physics=course_over_ground,
)
def rotate_to_enu(lines: xr.Dataset, settings: RotateSettings) -> xr.Dataset:
    """Turn readings and ledger from the axes they were delivered in to east, north, up."""
    frame = lines["gradient"].attrs["frame"]
    if frame == "enu":
        return lines
    turn = ned_to_enu() if frame == "ned" else _from_body(lines, settings)
    out = lines
    for name in lines.data_vars:
        variable = lines[name]
        if variable.attrs.get("frame") != frame or "component" not in variable.dims:
            continue
        values = variable.to_numpy()
        spread = str(name).startswith("sigma")
        turned = turn.spread(values) if spread else turn.tensor(values)
        kept = {k: v for k, v in variable.attrs.items() if k not in ("units", "long_name", "frame")}
        out = survey.put("lines", out, str(name), turned, frame="enu", **kept)
    return out


def _from_body(lines: xr.Dataset, settings: RotateSettings) -> Rotation:
    wanted = ("heading", "pitch", "roll")
    missing = [name for name in wanted if name not in lines]
    if missing:
        raise ReadingsError(
            f"readings in body axes need {', '.join(missing)}",
            where="stage rotate_to_enu",
            cure="name the attitude columns in read_lines",
        )
    heading, pitch, roll = (lines[name].to_numpy() for name in wanted)
    if settings.follows_track:
        names, line = np.unique(lines["line"].to_numpy().astype(str), return_inverse=True)
        longitude, latitude = lines["longitude"].to_numpy(), lines["latitude"].to_numpy()
        check_headings(heading, longitude, latitude, names, line, settings.crab)
    return body_to_enu(heading, pitch, roll)
