"""Delivered terrain models → the part ``terrain``, in the survey CRS and above the ellipsoid."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Annotated, Any, Final, Literal

import numpy as np
import xarray as xr
from numpy.typing import NDArray
from pydantic import Field, model_validator
from pyproj import CRS
from scipy.ndimage import distance_transform_edt

from gradred import survey
from gradred.errors import ReadingsError
from gradred.ingest.columns import LengthUnit
from gradred.ingest.faults import number_of
from gradred.ingest.positions import between, known_crs, projected_crs, told_crs
from gradred.ingest.raster_files import Raster, read_raster
from gradred.stage import Cost, Crs, InputFile, Metres, Settings, Sizes, progress, stage
from gradred.units import factor

Array = NDArray[np.float64]
Rectangle = tuple[float, float, float, float]
Change = Callable[[Array, Array], tuple[Array, Array]]

_LOWEST, _HIGHEST = -12_000.0, 9_000.0
_NULL: Final = -9999.0
"""The height of no ground, and the commonest value of a missing one."""
_BEDROCK_ABOVE: Final = 1.0
"""Bedrock may stand above the ground by rounding of the models, but not by more than this, m."""

Coordinate = Annotated[float, Field(ge=-1e8, le=1e8)]


class TerrainFileSettings(Settings):
    """Settings of the stage ``read_terrain``."""

    crs: Crs = Field(description="survey CRS, projected, in metres, as 'EPSG:32633'")
    surface: InputFile = Field(description="heights of the ground: GeoTIFF or NetCDF")
    bedrock: InputFile | None = Field(
        None, description="heights of the top of bedrock, on the grid of the surface"
    )
    variable: str | None = Field(None, description="variable of a NetCDF file of the surface")
    bedrock_variable: str | None = Field(
        None, description="variable of a NetCDF file of the bedrock"
    )
    band: int | None = Field(
        None, ge=1, le=10_000, description="band with the heights, where a file has several"
    )
    raster_crs: Crs | None = Field(
        None, description="CRS of the files, where they do not tell it themselves"
    )
    unit: LengthUnit = Field(description="unit of the heights: m, km, ft, ft-us")
    height_reference: Literal["ellipsoid", "orthometric"] = Field(
        description="what delivered heights are counted from"
    )
    separation: Metres | None = Field(
        None,
        ge=-150,
        le=150,
        description="height of the geoid above the ellipsoid, m; added to orthometric heights",
    )
    nodata: float | None = Field(
        None,
        ge=-1e39,
        le=1e39,
        description="delivered value of cells without height, besides what the file tells",
    )
    cell: Metres | None = Field(
        None,
        ge=0.1,
        le=10_000,
        description="size of a cell after the turn to the survey CRS, m; needed where the files "
        "are in another CRS",
    )
    extent: tuple[Coordinate, Coordinate, Coordinate, Coordinate] | None = Field(
        None,
        description="west, south, east, north of what is kept, m in the survey CRS; all of the "
        "model, or the largest upright rectangle in it, where it is not stated",
    )
    fill: Literal["refuse", "nearest", "keep"] = Field(
        "refuse",
        description="cells without height: 'refuse' the model, fill with the 'nearest' height, "
        "or 'keep' them missing, which remove_terrain refuses",
    )

    @model_validator(mode="after")
    def _stated(self) -> TerrainFileSettings:
        if (self.height_reference == "orthometric") != (self.separation is not None):
            raise ValueError("state 'separation' with orthometric heights, and only with them")
        if self.extent is not None:
            west, south, east, north = self.extent
            if not (west < east and south < north):
                raise ValueError("state 'extent' as west, south, east, north")
        return self


def _gives(settings: TerrainFileSettings) -> tuple[str, ...]:
    return () if settings.bedrock is None else ("bedrock",)


def resampled(raster: Raster, x: Array, y: Array, to_raster: Change) -> Array:
    r"""Return heights at new cell centres by bilinear interpolation, averaged over each new cell.

    A new cell that is k times as wide as an old one is the mean of k × k points, so that a coarser
    model keeps its mass. Old heights are taken as those of cell centres; a point next to a missing
    one is missing. Nothing is extrapolated: beyond the outermost centres their height holds.

    Parameters
    ----------
    raster : Raster
        The old cells.
    x, y : (columns,) and (rows,) arrays
        New cell centres, evenly spaced.
    to_raster : function
        From (n,) new to (n,) old coordinates.

    Returns
    -------
    (rows, columns) array
        In the unit of the raster.

    Accuracy
    --------
    A plane is kept to the curvature of one map against the other. (The warp of a general raster
    library stretches its bilinear kernel when cells differ by 2 %, and leaves a plane by 8 % of
    its rise over a cell.)

    Source
    ------
    Bilinear interpolation, common practice, no source.

    Checked by
    ----------
    ``tests/ingest/test_rasters.py``: a plane on two maps; coarser cells keep the mean.
    """
    points = _points_per_side(raster, x, y, to_raster)
    inside = (np.arange(points) + 0.5) / points - 0.5
    xs = (x[:, None] + (x[1] - x[0]) * inside).ravel()
    out = np.empty((len(y), len(x)))
    for row, north in enumerate(y):
        progress(row, len(y), "turning the terrain model")
        ys = north + (y[1] - y[0]) * inside
        east, up = (grid.ravel() for grid in np.meshgrid(xs, ys))
        found = _bilinear(raster, *to_raster(east, up))
        out[row] = found.reshape(points, len(x), points).mean(axis=(0, 2))
    return out


def _points_per_side(raster: Raster, x: Array, y: Array, to_raster: Change) -> int:
    """Return how many old cells lie across a new one, in the middle of the model."""
    corners = np.array([x[len(x) // 2], x[len(x) // 2 - 1], x[len(x) // 2]])
    sides = np.array([y[len(y) // 2], y[len(y) // 2], y[len(y) // 2 - 1]])
    at = np.array(to_raster(corners, sides)) / np.array(raster.cell)[:, None]
    across = np.hypot(*(at[:, 1:] - at[:, :1])).max()
    # cells that are alike but for the scale of a map need one point
    return max(1, int(np.ceil(across - 0.25)))


def _bilinear(raster: Raster, x: Array, y: Array) -> Array:
    place = [
        np.clip((at - centres[0]) / step, 0.0, len(centres) - 1.0)
        for at, centres, step in zip((y, x), (raster.y, raster.x), raster.cell[::-1], strict=True)
    ]
    low = [
        np.minimum(at.astype(np.intp), size - 2)
        for at, size in zip(place, raster.heights.shape, strict=True)
    ]
    (row, column), (up, east) = low, (at - under for at, under in zip(place, low, strict=True))
    h = raster.heights
    below = (1.0 - east) * h[row, column] + east * h[row, column + 1]
    above = (1.0 - east) * h[row + 1, column] + east * h[row + 1, column + 1]
    return np.asarray((1.0 - up) * below + up * above)


def _cost(settings: TerrainFileSettings, sizes: Sizes) -> Cost:
    # measured: 7e5 turned cells per second, one point each; float64 held about four times
    return Cost(0.2 + 1.5e-6 * sizes["terrain_cells"], 40.0 * sizes["terrain_cells"])


@stage(makes="terrain", adds=("height",), gives=_gives, physics=resampled, forecast=_cost)
def read_terrain(settings: TerrainFileSettings) -> xr.Dataset:
    """Read the heights of the ground, and of bedrock, as cells of the survey CRS."""
    crs = projected_crs(settings.crs, where="crs of the survey")
    raster = read_raster(settings.surface, settings.variable, settings.band, settings.nodata)
    rasters = {"height": raster}
    if settings.bedrock is not None:
        below = read_raster(
            settings.bedrock, settings.bedrock_variable, settings.band, settings.nodata
        )
        _check_same_grid(settings, raster, below)
        rasters["bedrock"] = below
    paths = {"height": settings.surface, "bedrock": settings.bedrock or settings.surface}
    source = _source_crs(settings, raster)
    placed = {name: _placed(found, source, crs, settings) for name, found in rasters.items()}
    data = survey.new(
        "terrain", settings.crs, easting=placed["height"].x, northing=placed["height"].y
    )
    for name, found in placed.items():
        heights, counts = _filled(_in_metres(found, settings, paths[name]), settings, paths[name])
        attrs: dict[str, Any] = {
            "source": paths[name].name,
            "delivered_in": told_crs(source),
            "separation": settings.separation or 0.0,
            **counts,
        }
        data = survey.put("terrain", data, name, heights, **attrs)
    if "bedrock" in data:
        _check_bedrock(settings, data)
    return data


def _check_same_grid(settings: TerrainFileSettings, surface: Raster, bedrock: Raster) -> None:
    same = surface.heights.shape == bedrock.heights.shape and all(
        np.allclose(a, b, rtol=0.0, atol=1e-6 * step)
        for a, b, step in zip(
            (surface.x, surface.y), (bedrock.x, bedrock.y), surface.cell, strict=True
        )
    )
    if not same or surface.crs != bedrock.crs:
        assert settings.bedrock is not None
        raise ReadingsError(
            f"the bedrock's grid of {len(bedrock.x)} × {len(bedrock.y)} cells is not the grid of "
            f"the surface, {len(surface.x)} × {len(surface.y)} cells",
            where=f"{settings.bedrock.name} beside {settings.surface.name}",
            cure="resample the bedrock to the cells of the surface",
        )


def _source_crs(settings: TerrainFileSettings, raster: Raster) -> CRS:
    """Return the CRS of the files: what they tell, or what is stated where they do not."""
    name = settings.surface.name
    if settings.raster_crs is None:
        if raster.crs is not None:
            return raster.crs
        degrees = abs(raster.x).max() <= 360.0 and abs(raster.y).max() <= 90.0
        raise ReadingsError(
            "the file does not tell its CRS"
            + (", and its coordinates look like degrees" if degrees else ""),
            where=name,
            cure="state it in 'raster_crs'" + (", as 'EPSG:4326'" if degrees else ""),
        )
    stated = known_crs(settings.raster_crs, where="stage read_terrain, raster_crs")
    if raster.crs is not None and not _same(raster.crs, stated):
        raise ReadingsError(
            f"the file says {told_crs(raster.crs)}, but {told_crs(stated)} is stated",
            where=name,
            cure="leave out 'raster_crs', or correct the file",
        )
    return stated


def _same(first: CRS, second: CRS) -> bool:
    if first.equals(second, ignore_axis_order=True):
        return True
    code = first.to_epsg(min_confidence=70)
    return code is not None and code == second.to_epsg()


def _placed(raster: Raster, source: CRS, crs: CRS, settings: TerrainFileSettings) -> Raster:
    """Return the raster in the survey CRS and within the extent."""
    if not _same(source, crs):
        return _turned(raster, source, crs, settings)
    if settings.cell is not None and not np.allclose(raster.cell, settings.cell, rtol=1e-6):
        return _turned(raster, source, crs, settings)
    if settings.extent is None:
        return raster
    west, south, east, north = settings.extent
    columns = np.flatnonzero((raster.x >= west) & (raster.x <= east))
    rows = np.flatnonzero((raster.y >= south) & (raster.y <= north))
    _check_extent(settings, _edges(raster))
    _check_count(settings, len(columns), len(rows), raster.cell[0])
    inside = np.ix_(rows, columns)
    return Raster(raster.heights[inside], raster.x[columns], raster.y[rows], crs, raster.unit)


def _check_extent(settings: TerrainFileSettings, covered: Rectangle) -> None:
    """Refuse an extent that reaches beyond what the model covers."""
    assert settings.extent is not None
    west, south, east, north = settings.extent
    w, s, e, n = covered
    if west < w or east > e or south < s or north > n:
        raise ReadingsError(
            f"the extent {west:.0f}, {south:.0f}, {east:.0f}, {north:.0f} reaches beyond the "
            f"terrain model, {w:.0f}, {s:.0f}, {e:.0f}, {n:.0f}",
            where=f"{settings.surface.name}, stage read_terrain, extent",
            cure="state an extent inside the model, or deliver a larger model",
        )


def _turned(raster: Raster, source: CRS, crs: CRS, settings: TerrainFileSettings) -> Raster:
    """Return the raster in the survey CRS: the mean over each new cell of points inside it."""
    x, y = _new_centres(raster, source, crs, settings)
    back = between(crs, source)
    heights = resampled(raster, x, y, lambda east, north: back.transform(east, north))
    return Raster(heights, x, y, crs, raster.unit)


def _new_centres(
    raster: Raster, source: CRS, crs: CRS, settings: TerrainFileSettings
) -> tuple[Array, Array]:
    """Return the cell centres of the model in the survey CRS, on multiples of the cell."""
    size = settings.cell
    if size is None:
        raise ReadingsError(
            f"the terrain model is in {told_crs(source)}, and must be turned to {told_crs(crs)}",
            where=f"{settings.surface.name}, stage read_terrain",
            cure="state the size of a cell of the turned model, 'cell', in metres",
        )
    inner = _inner(raster, source, crs, settings)
    if settings.extent is not None:
        _check_extent(settings, inner)
    west, south, east, north = settings.extent or inner
    if settings.extent is None:
        west, south = np.ceil(west / size) * size, np.ceil(south / size) * size
    columns, rows = int((east - west) / size + 1e-6), int((north - south) / size + 1e-6)
    _check_count(settings, columns, rows, size)
    x, y = (np.arange(count, dtype=np.float64) + 0.5 for count in (columns, rows))
    return west + size * x, south + size * y


def _check_count(settings: TerrainFileSettings, columns: int, rows: int, size: float) -> None:
    if min(columns, rows) < 2:
        raise ReadingsError(
            f"the terrain model has {columns} × {rows} cells of {size:g} m",
            where=f"{settings.surface.name}, stage read_terrain",
            cure="state a larger extent, or a smaller cell",
        )


def _edges(raster: Raster) -> Rectangle:
    """Return west, south, east, north of the outermost cells."""
    width, height = raster.cell
    x, y = raster.x, raster.y
    return x[0] - width / 2, y[0] - height / 2, x[-1] + width / 2, y[-1] + height / 2


def _inner(raster: Raster, source: CRS, crs: CRS, settings: TerrainFileSettings) -> Rectangle:
    """Return the upright rectangle of the survey CRS inside the outermost cell centres."""
    along = np.linspace(0.0, 1.0, 65)
    xs, ys = (c[0] + (c[-1] - c[0]) * along for c in (raster.x, raster.y))
    level = np.ones_like(along)
    turn = between(source, crs)
    west, south, east, north = (
        np.array(turn.transform(x, y))
        for x, y in (
            (xs[0] * level, ys), (xs, ys[0] * level), (xs[-1] * level, ys), (xs, ys[-1] * level),
        )
    )  # fmt: skip
    inner = west[0].max(), south[1].max(), east[0].min(), north[1].min()
    if not (np.isfinite(inner).all() and inner[0] < inner[2] and inner[1] < inner[3]):
        raise ReadingsError(
            f"the terrain model in {told_crs(source)} covers no upright rectangle of "
            f"{told_crs(crs)}",
            where=settings.surface.name,
            cure="check the CRS of the model and of the survey",
        )
    return inner


def _in_metres(raster: Raster, settings: TerrainFileSettings, path: Path) -> Array:
    """Return the heights above the ellipsoid, metres; refuse what no ground can be."""
    by = factor(settings.unit, "length", where="stage read_terrain, unit")
    if raster.unit is not None:
        said = factor(raster.unit, "length", where=path.name)
        # the two kinds of foot differ by 2e-6, and files do not tell them apart
        if abs(said / by - 1.0) > 1e-5:
            raise ReadingsError(
                f"the file says its heights are in {raster.unit!r}, not {settings.unit!r}",
                where=f"{path.name}, stage read_terrain, unit",
                cure="state the unit that the heights are in, or correct the file",
            )
    heights = raster.heights * by
    wrong = (raster.heights == _NULL) | (heights < _LOWEST) | (heights > _HIGHEST)
    if wrong.any():
        value = raster.heights[wrong][0]
        raise ReadingsError(
            f"{number_of(int(wrong.sum()), 'cell')} of {heights.size} have heights like "
            f"{value:g} {settings.unit}",
            where=path.name,
            cure=f"if that means no height, state 'nodata' = {value:g}; else check the unit",
        )
    return heights + (settings.separation or 0.0)


def _filled(
    heights: Array, settings: TerrainFileSettings, path: Path
) -> tuple[Array, dict[str, int]]:
    """Return the heights after the stated rule for missing cells, and how many there were."""
    missing = np.isnan(heights)
    count = int(np.count_nonzero(missing))
    if count == heights.size:
        raise ReadingsError(
            "no cell has a height",
            where=path.name,
            cure="check the value of 'nodata' and the CRS of model and survey",
        )
    if count and settings.fill == "refuse":
        raise ReadingsError(
            f"{number_of(count, 'cell')} of {heights.size} have no height",
            where=path.name,
            cure="state a smaller 'extent', or fill = 'nearest'",
        )
    if count and settings.fill == "nearest":
        nearest = distance_transform_edt(missing, return_distances=False, return_indices=True)
        return heights[tuple(nearest)], {"missing_cells": 0, "filled_cells": count}
    return heights, {"missing_cells": count, "filled_cells": 0}


def _check_bedrock(settings: TerrainFileSettings, data: xr.Dataset) -> None:
    above = data["bedrock"].to_numpy() - data["height"].to_numpy()
    if np.nanmax(above) > _BEDROCK_ABOVE:
        assert settings.bedrock is not None
        count = int(np.count_nonzero(above > _BEDROCK_ABOVE))
        raise ReadingsError(
            f"the bedrock stands up to {np.nanmax(above):.1f} m above the ground, more than "
            f"{_BEDROCK_ABOVE:g} m in {number_of(count, 'cell')} of {above.size}",
            where=f"{settings.bedrock.name} beside {settings.surface.name}",
            cure="deliver heights of the top of bedrock, not depths, in the unit of the surface",
        )
