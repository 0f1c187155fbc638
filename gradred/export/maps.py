"""Maps as figures: one sheet per map, and all components in the arrangement of the tensor."""

from __future__ import annotations

import textwrap
from pathlib import Path
from typing import Any, Final

import numpy as np
import xarray as xr
from matplotlib.figure import Figure
from pydantic import Field

from gradred.export.grids import maps_of
from gradred.export.sheet import (
    FAINT,
    INK,
    Ground,
    as_written,
    colour_bar,
    crs_text,
    draw_field,
    draw_frame,
    draw_scale,
    ground_of,
    limits_of,
    title_of,
    unit_of,
)
from gradred.stage import Cost, Settings, stage

CAUTION: Final = "Not for navigation, obstacle clearance, dig or drilling safety."
_PLACES: Final = {
    "xx": (0, 0),
    "xy": (0, 1),
    "xz": (0, 2),
    "yy": (1, 1),
    "yz": (1, 2),
    "zz": (2, 2),
}


class DrawSettings(Settings):
    """Settings of the stage ``draw_maps``."""

    survey_name: str = Field(description="name of the survey on every map")
    dots: int = Field(200, ge=50, le=1200, description="dots per inch of the PNG files")
    pdf: bool = Field(False, description="write every map as PDF as well")
    contours: int = Field(
        0, ge=0, le=60, description="number of contour lines between the ends of the colours"
    )
    flight_path: bool = Field(False, description="draw the flight lines")


def map_sheet(
    grid: xr.Dataset,
    name: str,
    values: xr.DataArray,
    settings: DrawSettings,
    lines: xr.Dataset | None = None,
) -> Figure:
    """Return the figure of one map with frame, scale, north, colours, resolution and noise."""
    ground = ground_of(grid)
    figure = Figure(figsize=_size(ground), layout="constrained", facecolor="white")
    axes = figure.subplots()
    field = values.to_numpy()
    limits = limits_of(name, field)
    image = draw_field(axes, ground, name, field, limits)
    if settings.contours:
        _contours(axes, values, limits, settings.contours)
    if settings.flight_path and lines is not None:
        axes.plot(
            lines["easting"] / 1e3, lines["northing"] / 1e3, ".", color=INK, ms=0.7, alpha=0.6
        )
    draw_frame(axes, ground)
    draw_scale(axes, ground)
    colour_bar(figure, axes, image, unit_of(values))
    figure.suptitle(
        f"{title_of(name)}  ·  {as_written(settings.survey_name)}",
        fontsize=11,
        color=INK,
        x=0.02,
        ha="left",
    )
    wide = int(18 * figure.get_figwidth())
    foot = "\n".join(textwrap.fill(line, wide) for line in _foot(grid, name, ground).split("\n"))
    figure.supxlabel(foot, fontsize=6, color=FAINT, x=0.02, ha="left")
    return figure


def _size(ground: Ground) -> tuple[float, float]:
    """Return width and height in inches that leave a map of any shape little white."""
    shape = (ground.east - ground.west) / (ground.north - ground.south)
    across = float(np.clip(5.4 * shape, 3.2, 7.0))
    return across + 1.8, float(np.clip(across / shape, 2.5, 9.0)) + 1.2


def _contours(axes: Any, values: xr.DataArray, limits: tuple[float, float], count: int) -> None:
    axes.contour(
        values["easting"] / 1e3,
        values["northing"] / 1e3,
        values.to_numpy(),
        levels=np.linspace(limits[0], limits[1], count + 2)[1:-1],
        colors=INK,
        linewidths=0.3,
        alpha=0.6,
    )


def _foot(grid: xr.Dataset, name: str, ground: Ground) -> str:
    told = [crs_text(ground), "axes x easting, y northing, z up"]
    about = grid["datum"].attrs if "datum" in grid else {}
    worth = []
    if "shortest_wavelength" in about:
        worth.append(f"no wavelength below {float(about['shortest_wavelength']):.0f} m is resolved")
    if name.startswith("gradient_") and "sigma" in grid:
        sigma = grid["sigma"].sel(component=name.removeprefix("gradient_"))
        worth += _deviation(sigma, "E")
    if name == "gz" and "sigma_gz" in grid:
        worth += _deviation(grid["sigma_gz"], "mGal")
        worth.append("level and long wavelengths are not from this survey")
    worth.append("colours leave out half a per cent at either end")
    return "  ·  ".join(told) + "\n" + "  ·  ".join(worth) + f"\n{CAUTION}"


def _deviation(sigma: xr.DataArray, unit: str) -> list[str]:
    there = sigma.to_numpy()[np.isfinite(sigma.to_numpy())]
    return [f"standard deviation {np.median(there):.2g} {unit} (median)"] if there.size else []


def tensor_sheet(grid: xr.Dataset, survey_name: str) -> Figure:
    """Return the figure of the six components, each in its place of the tensor."""
    ground = ground_of(grid)
    figure = Figure(figsize=(11.0, 9.0), layout="constrained", facecolor="white")
    places = figure.subplots(3, 3)
    maps = maps_of(grid)
    for component, (row, column) in _PLACES.items():
        name = f"gradient_{component}"
        axes, values = places[row, column], maps[name]
        field = values.to_numpy()
        image = draw_field(axes, ground, name, field, limits_of(name, field))
        draw_frame(axes, ground, labels=False)
        axes.set_title(title_of(name), fontsize=12, color=INK, loc="left")
        colour_bar(figure, axes, image, unit_of(values), pad=0.02)
    for row, column in ((1, 0), (2, 0), (2, 1)):
        places[row, column].axis("off")
    places[2, 0].text(
        0.0,
        0.0,
        f"{as_written(survey_name)}\n{_foot(grid, 'tensor', ground)}".replace("  ·  ", "\n"),
        fontsize=8,
        color=INK,
        transform=places[2, 0].transAxes,
        va="bottom",
        linespacing=1.5,
    )
    draw_scale(places[2, 2], ground)
    return figure


@stage(
    makes=None,
    needs={"grid": ("gradient",)},
    forecast=lambda settings, _: Cost(22.0 * (settings.dots / 200.0), 3e8),
)
def draw_maps(
    grid: xr.Dataset, settings: DrawSettings, folder: Path, lines: xr.Dataset | None = None
) -> list[Path]:
    """Draw every map with scale bar, graticule, both norths and its standard deviation."""
    place = folder / "maps"
    place.mkdir(exist_ok=True)
    made = save_figure(tensor_sheet(grid, settings.survey_name), place / "tensor.png", settings)
    for name, values in maps_of(grid).items():
        figure = map_sheet(grid, name, values, settings, lines)
        made += save_figure(figure, place / f"{name}.png", settings)
    return made


def save_figure(figure: Figure, path: Path, settings: DrawSettings) -> list[Path]:
    """Write a figure so that equal runs give equal bytes."""
    figure.savefig(path, dpi=settings.dots, metadata={"Software": "gradred"})
    if not settings.pdf:
        return [path]
    printed = path.with_suffix(".pdf")
    figure.savefig(printed, metadata={"CreationDate": None, "Creator": "gradred", "Producer": None})
    return [path, printed]
