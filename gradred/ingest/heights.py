"""Stations against the ground: coverage by the terrain model, and the datum and unit of heights."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Final

import numpy as np
import xarray as xr
from numpy.typing import NDArray
from pydantic import Field
from pyproj import CRS

from gradred import survey
from gradred.errors import ReadingsError
from gradred.ingest.faults import number_of
from gradred.ingest.positions import to_map
from gradred.ingest.readings import told
from gradred.stage import Metres, Settings, stage

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

_FOOT: Final = 0.3048
_LEAST_RELIEF: Final = 5.0
"""m, robust spread of the ground below which its slope against the model says nothing."""


class HeightSettings(Settings):
    """Settings of the stage ``check_heights``."""

    offset_limit: Metres = Field(
        5.0,
        ge=0.1,
        le=1000,
        description="largest median of (height - clearance) minus terrain model, m",
    )
    spread_limit: Metres = Field(
        20.0,
        ge=0.1,
        le=1000,
        description="largest robust spread of that difference, m; trees and cells widen it",
    )
    depth_limit: Metres = Field(
        0.0,
        ge=0,
        le=100,
        description="how far a station may stand below the terrain model, m, as over a valley "
        "narrower than its cells",
    )


@dataclass(frozen=True)
class Comparison:
    """Ground measured from the air against a terrain model, metres; slope and ratio bare."""

    stations: int
    offset: float
    spread: float
    slope: float
    misfit: float
    ratio: float


def compare_heights(measured: Array, model: Array) -> Comparison:
    r"""Compare the height of the ground measured from the air with a terrain model, both in m.

    .. math:: d = (h - c) - t, \quad \text{offset} = \operatorname{med} d, \quad
        \text{spread} = 1.4826 \operatorname{med} |d - \text{offset}|

    and the slope b of h − c = a + b t by least squares, without the stations whose misfit to it
    is over four times the robust spread of the misfits. A slope near 0.3048 or 3.2808 tells feet
    taken for metres, or metres for feet; a steady offset tells a geoid separation left out or
    added twice. Over ground too flat for a slope the ratio of the medians of h − c and t tells
    feet.

    Parameters
    ----------
    measured : (n,) array
        h − c: height of the instrument less its measured clearance, m.
    model : (n,) array
        t: height of the terrain model below it, m; not NaN, as ``measured``.

    Returns
    -------
    Comparison
        Slope and misfit, the spread about the sloping line, are NaN where the ground is too flat.

    Accuracy
    --------
    Offset: 1.25 spread / √n for n independent stations. Slope: spread / (relief √n).

    Source
    ------
    Huber, P. J. (1981), Robust Statistics, Wiley, chapter 5 (from memory) for the median deviation;
    the rest is common practice, no source.

    Checked by
    ----------
    ``tests/ingest/test_heights.py``: planted offsets and slopes come back.
    """
    difference = measured - model
    offset = float(np.median(difference))
    slope, misfit = _slope(measured, model)
    level = float(np.median(model))
    ratio = float(np.median(measured)) / level if level else float("nan")
    return Comparison(len(model), offset, _robust_spread(difference), slope, misfit, ratio)


def _robust_spread(values: Array) -> float:
    return float(1.482602218505602 * np.median(np.abs(values - np.median(values))))


def _slope(measured: Array, model: Array) -> tuple[float, float]:
    """Return the slope by least squares without outliers, and the robust spread of its misfit."""
    if len(model) < 10 or _robust_spread(model) < _LEAST_RELIEF:
        return float("nan"), float("nan")
    kept = np.ones(len(model), dtype=bool)
    middle = float(np.median(model))
    for _ in range(5):
        slope, level = np.polyfit(model[kept] - middle, measured[kept], 1)
        misfit = measured - level - slope * (model - middle)
        kept = np.abs(misfit) <= max(4.0 * _robust_spread(misfit), 1e-6)
    return float(slope), _robust_spread(misfit)


@stage(
    makes="lines",
    needs={
        "lines": ("longitude", "latitude", "height", "easting", "northing", "line", "time", "flag"),
        "terrain": ("height",),
    },
    adds=("terrain_height",),
    physics=compare_heights,
)
def check_heights(lines: xr.Dataset, terrain: xr.Dataset, settings: HeightSettings) -> xr.Dataset:
    """Compare the stations with the terrain model, and refuse a mix-up of datum or unit.

    Stations outside the model are flagged. What was compared stands in the attributes of
    ``terrain_height``.
    """
    if lines.attrs["crs"] != terrain.attrs["crs"]:
        raise ReadingsError(
            f"the lines are in {lines.attrs['crs']}, the terrain model in {terrain.attrs['crs']}",
            where="stage check_heights",
            cure="state one 'crs' at the top of the pipeline file, for both",
        )
    ground = terrain_below(lines, terrain)
    there = np.isfinite(lines["easting"].to_numpy()) & np.isfinite(lines["northing"].to_numpy())
    outside = there & np.isnan(ground)
    if not np.any(there & ~outside):
        raise _nowhere(lines, terrain)
    attrs: dict[str, Any] = {"outside_terrain_model": int(np.count_nonzero(outside))}
    if "clearance" in lines:
        measured = (lines["height"] - lines["clearance"]).to_numpy()
        both = np.isfinite(measured) & np.isfinite(ground)
        if both.any():
            found = compare_heights(measured[both], ground[both])
            _judge(found, lines, terrain, settings)
            attrs |= {f"compared_{name}": value for name, value in vars(found).items()}
    _above_ground(lines, ground, settings)
    out = survey.flag(lines, "outside_terrain_model", outside)
    return survey.put("lines", out, "terrain_height", ground, **attrs)


def terrain_below(lines: xr.Dataset, terrain: xr.Dataset) -> Array:
    """Return the (n,) height of the terrain model below each station, m; NaN outside its cells.

    Bilinear between cell centres; in the outer half of the outermost cells, that of their centres.
    """
    inside = np.ones(lines.sizes["station"], dtype=bool)
    place: list[Array] = []
    for axis in ("northing", "easting"):
        centres, at = terrain[axis].to_numpy(), lines[axis].to_numpy()
        step = (centres[-1] - centres[0]) / (len(centres) - 1)
        index = (at - centres[0]) / step
        with np.errstate(invalid="ignore"):
            inside &= (index >= -0.5) & (index <= len(centres) - 0.5)
        place.append(np.clip(np.nan_to_num(index), 0.0, len(centres) - 1.0))
    heights = terrain["height"].to_numpy()
    low = [np.minimum(p.astype(np.intp), n - 2) for p, n in zip(place, heights.shape, strict=True)]
    north, east = (p - q for p, q in zip(place, low, strict=True))
    row, column = low
    south_side = (1.0 - east) * heights[row, column] + east * heights[row, column + 1]
    north_side = (1.0 - east) * heights[row + 1, column] + east * heights[row + 1, column + 1]
    return np.where(inside, (1.0 - north) * south_side + north * north_side, np.nan)


def _judge(
    found: Comparison, lines: xr.Dataset, terrain: xr.Dataset, limits: HeightSettings
) -> None:
    """Refuse heights that do not belong to one another, naming the likely cause."""
    where = f"stage check_heights, {number_of(found.stations, 'station')} with a clearance"
    feet = _feet(found.slope)
    if feet is not None and found.misfit < 0.5 * found.spread:
        raise ReadingsError(
            f"(height - clearance) rises by {found.slope:.4f} m per metre of the terrain model",
            where=where,
            cure=feet,
        )
    if abs(found.offset) > limits.offset_limit:
        flat = _feet(found.ratio) if np.isnan(found.slope) else None
        raise ReadingsError(
            f"(height - clearance) is {found.offset:+.2f} m from the terrain model in the median, "
            f"with a spread of {found.spread:.2f} m; the limit is {limits.offset_limit:g} m",
            where=where,
            cure=flat or _datum(found.offset, lines, terrain),
        )
    if found.spread > limits.spread_limit:
        raise ReadingsError(
            f"(height - clearance) minus the terrain model has a spread of {found.spread:.2f} m; "
            f"the limit is {limits.spread_limit:g} m",
            where=where,
            cure="check the CRS of the terrain model and the clearances; over rough ground or "
            "coarse cells raise 'spread_limit'",
        )


def _feet(rise: float) -> str | None:
    """Return the cure where heights rise, or stand, as if one of the two were in feet."""
    if abs(rise / _FOOT - 1.0) < 0.1:
        return (
            "1 ft = 0.3048 m: the terrain model is likely in feet (read_terrain, unit), "
            "or the heights of the lines are metres taken for feet"
        )
    if abs(rise * _FOOT - 1.0) < 0.1:
        return (
            "1 m = 3.2808 ft: the heights of the lines are likely in feet (read_lines, units), "
            "or those of the terrain model are metres taken for feet"
        )
    return None


def _datum(offset: float, lines: xr.Dataset, terrain: xr.Dataset) -> str:
    """Return the cure for a constant offset, naming a stated separation that it equals."""
    for part, data in (("lines", lines), ("terrain model", terrain)):
        separation = float(data["height"].attrs.get("separation", 0.0))
        if separation and abs(abs(offset) - abs(separation)) < max(2.0, 0.1 * abs(separation)):
            return (
                f"that is near the geoid separation of {separation:g} m stated for the {part}: "
                "heights of the other are likely orthometric too, or both are ellipsoidal"
            )
    return (
        "a constant offset is the sign of a datum mix-up: check 'height_reference' and "
        "'separation' of read_lines and read_terrain"
    )


def _above_ground(lines: xr.Dataset, ground: Array, limits: HeightSettings) -> None:
    height = lines["height"].to_numpy()
    with np.errstate(invalid="ignore"):
        below = height < ground - limits.depth_limit
    if not below.any():
        return
    worst = int(np.nanargmin(height - ground))
    raise ReadingsError(
        f"{number_of(int(below.sum()), 'station')} of {len(height)} below the ground, the worst by "
        f"{ground[worst] - height[worst]:.2f} m (height {height[worst]:.2f} m, terrain model "
        f"{ground[worst]:.2f} m)",
        where=f"stage check_heights, line {lines['line'].to_numpy()[worst]}, "
        f"{told(lines['time'].to_numpy()[worst])}",
        cure="check unit and vertical reference of lines and terrain model; where the model is "
        "too coarse for the ground, raise 'depth_limit'",
    )


def _nowhere(lines: xr.Dataset, terrain: xr.Dataset) -> ReadingsError:
    """Return the refusal of lines of which no station lies over the terrain model."""
    sides = [
        f"{axis} {low:.0f} to {high:.0f}"
        for axis in ("easting", "northing")
        for low, high in [(np.nanmin(lines[axis]), np.nanmax(lines[axis]))]
    ]
    model = [
        f"{axis} {float(terrain[axis][0]):.0f} to {float(terrain[axis][-1]):.0f}"
        for axis in ("easting", "northing")
    ]
    found = _zone_that_fits(lines, terrain)
    return ReadingsError(
        f"all {number_of(lines.sizes['station'], 'station')} lie outside the terrain model: "
        f"{' and '.join(sides)}, the model {' and '.join(model)}",
        where=f"stage check_heights, {terrain.attrs['crs']}",
        cure="the EPSG code of the terrain model or of the survey is likely the wrong one"
        + (f"; the model would lie under the lines if it were in {found}" if found else ""),
    )


def _zone_that_fits(lines: xr.Dataset, terrain: xr.Dataset) -> str | None:
    """Return the UTM zone whose numbers would put the terrain model under the lines, if any."""
    middle = [np.array([np.nanmedian(lines[name])]) for name in ("longitude", "latitude")]
    for code in (*range(32601, 32661), *range(32701, 32761)):
        place = to_map(middle[0], middle[1], CRS(f"EPSG:{code}"))
        if all(
            float(terrain[axis][0]) <= at[0] <= float(terrain[axis][-1])
            for axis, at in zip(("easting", "northing"), place, strict=True)
        ):
            return f"EPSG:{code}"
    return None
