"""Drawing of one map: the field, what shows its place and size, and what it is worth."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Final

import numpy as np
import xarray as xr
from cmcrameri import cm
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.image import AxesImage
from numpy.typing import NDArray
from pyproj import CRS, Proj, Transformer

Array = NDArray[np.float64]

INK: Final = "#1d2733"
FAINT: Final = "#6b7684"

# symmetric about zero where the sign means something, else from low to high
_SYMMETRIC: Final = ("gradient", "invariant_2", "tilt")
_TITLES: Final = {
    "gradient_xx": "$\\Gamma_{xx}$",
    "gradient_xy": "$\\Gamma_{xy}$",
    "gradient_xz": "$\\Gamma_{xz}$",
    "gradient_yy": "$\\Gamma_{yy}$",
    "gradient_yz": "$\\Gamma_{yz}$",
    "gradient_zz": "$\\Gamma_{zz}$",
    "gz": "$g_z$, positive down",
    "horizontal_curvature": "horizontal curvature",
    "invariant_1": "invariant $I_1$",
    "invariant_2": "invariant $I_2$",
    "dimensionality": "dimensionality",
    "total_gradient": "total gradient of $g_z$",
    "tilt": "tilt of the gradient of $g_z$",
    "surface": "height of the map surface",
    "sigma_gz": "standard deviation of $g_z$",
}
_UNITS: Final = {"E2": "E²", "E3": "E³", "degree": "°", "1": ""}


@dataclass(frozen=True)
class Ground:
    """Where a map lies: extent in metres, CRS, and grid convergence at its middle, degrees."""

    west: float
    east: float
    south: float
    north: float
    crs: str
    convergence: float

    @property
    def extent(self) -> tuple[float, float, float, float]:
        """West, east, south, north in kilometres."""
        return self.west / 1e3, self.east / 1e3, self.south / 1e3, self.north / 1e3


def ground_of(grid: xr.Dataset) -> Ground:
    """Return the place of a part with easting and northing."""
    easting, northing = grid["easting"].to_numpy(), grid["northing"].to_numpy()
    dx, dy = 0.5 * (easting[1] - easting[0]), 0.5 * (northing[1] - northing[0])
    crs = str(grid.attrs["crs"])
    middle = Transformer.from_crs(crs, "EPSG:4326", always_xy=True).transform(
        easting.mean(), northing.mean()
    )
    convergence = float(Proj(crs).get_factors(*middle).meridian_convergence)
    return Ground(
        float(easting[0] - dx),
        float(easting[-1] + dx),
        float(northing[0] - dy),
        float(northing[-1] + dy),
        crs,
        convergence,
    )


def title_of(name: str) -> str:
    """Return what a map is called on its sheet."""
    if name.startswith("sigma_") and name not in _TITLES:
        return f"standard deviation of {_TITLES['gradient_' + name.removeprefix('sigma_')]}"
    return _TITLES.get(name, name.replace("_", " "))


def as_written(text: str) -> str:
    """Return a name so that a figure shows it as it is: dollar signs open no formula."""
    return text.replace("$", r"\$")


def unit_of(values: xr.DataArray) -> str:
    """Return the unit as it is printed."""
    unit = str(values.attrs.get("units", ""))
    return _UNITS.get(unit, unit)


def limits_of(name: str, values: Array) -> tuple[float, float]:
    """Return the range of the colours without half a per cent at either end, even if signed."""
    there = values[np.isfinite(values)]
    if not there.size:
        return -1.0, 1.0
    low, high = np.percentile(there, [0.5, 99.5])
    if name.startswith(_SYMMETRIC):
        high = max(abs(float(low)), abs(float(high)))
        low = -high
    return float(low), float(high if high > low else low + 1e-9)


def draw_field(
    axes: Axes, ground: Ground, name: str, values: Array, limits: tuple[float, float]
) -> AxesImage:
    """Draw the cells of a map; missing cells stay white."""
    colours = cm.vik if name.startswith(_SYMMETRIC) else cm.batlow
    return axes.imshow(
        values,
        origin="lower",
        extent=ground.extent,
        cmap=colours,
        vmin=limits[0],
        vmax=limits[1],
        interpolation="nearest",
    )


def draw_frame(axes: Axes, ground: Ground, *, labels: bool = True) -> None:
    """Draw the grid's axes in kilometres and faint meridians and parallels, named if asked."""
    axes.set_xlim(ground.west / 1e3, ground.east / 1e3)
    axes.set_ylim(ground.south / 1e3, ground.north / 1e3)
    axes.set_aspect("equal")
    axes.tick_params(labelsize=7, colors=INK, length=3, width=0.6)
    for spine in axes.spines.values():
        spine.set_linewidth(0.6)
        spine.set_color(INK)
    if labels:
        axes.set_xlabel("easting, km", fontsize=7, color=INK)
        axes.set_ylabel("northing, km", fontsize=7, color=INK)
    axes.ticklabel_format(useOffset=False, style="plain")
    _graticule(axes, ground, labels=labels)


def _graticule(axes: Axes, ground: Ground, *, labels: bool) -> None:
    there = Transformer.from_crs(ground.crs, "EPSG:4326", always_xy=True)
    back = Transformer.from_crs("EPSG:4326", ground.crs, always_xy=True)
    corners = np.array(
        [(x, y) for x in (ground.west, ground.east) for y in (ground.south, ground.north)]
    )
    lon, lat = there.transform(corners[:, 0], corners[:, 1])
    # a map across 180° keeps its corners together
    lon = lon[0] + (lon - lon[0] + 180.0) % 360.0 - 180.0
    step = _minutes(max(np.ptp(lon), np.ptp(lat)))
    style: dict[str, Any] = {"color": INK, "linewidth": 0.35, "alpha": 0.45, "dashes": (6, 4)}
    small: dict[str, Any] = {"fontsize": 5.5, "color": INK, "alpha": 0.8}
    for value in np.arange(np.ceil(lon.min() / step), lon.max() / step) * step:
        x, y = back.transform(np.full(50, value), np.linspace(lat.min(), lat.max(), 50))
        axes.plot(x / 1e3, y / 1e3, **style)
        top = float(np.interp(ground.north, y, x))
        if labels and ground.west < top < ground.east:
            axes.text(
                top / 1e3,
                ground.north / 1e3,
                _angle(value, "EW", step),
                ha="center",
                va="bottom",
                **small,
            )
    for value in np.arange(np.ceil(lat.min() / step), lat.max() / step) * step:
        x, y = back.transform(np.linspace(lon.min(), lon.max(), 50), np.full(50, value))
        axes.plot(x / 1e3, y / 1e3, **style)
        side = float(np.interp(ground.east, x, y))
        if labels and ground.south < side < ground.north:
            axes.text(
                ground.east / 1e3,
                side / 1e3,
                " " + _angle(value, "NS", step),
                ha="left",
                va="center",
                **small,
            )


def _minutes(span: float) -> float:
    """Return a step of whole minutes or degrees that gives two to five lines over a span."""
    steps = np.array([0.5, 1, 2, 5, 10, 15, 20, 30, 60, 120, 300, 600]) / 60.0
    return float(steps[np.argmin(np.abs(span / steps - 3.0))])


def _angle(value: float, signs: str, step: float) -> str:
    value = (value + 180.0) % 360.0 - 180.0
    degrees, minutes = divmod(round(abs(value) * 60.0, 2), 60.0)
    told = f"{minutes:04.1f}" if step < 1.0 / 60.0 else f"{minutes:02.0f}"
    return f"{degrees:.0f}°{told}′{signs[0] if value >= 0 else signs[1]}"


def draw_scale(axes: Axes, ground: Ground) -> None:
    """Draw a bar of a round length, and arrows to grid and true north where they differ."""
    width, height = ground.east - ground.west, ground.north - ground.south
    length = float(10.0 ** np.floor(np.log10(0.3 * width)))
    length *= max(f for f in (1.0, 2.0, 5.0) if f * length <= 0.3 * width)
    x0, y0 = ground.west + 0.05 * width, ground.south + 0.05 * height
    halves = [(x0, x0 + 0.5 * length, INK), (x0 + 0.5 * length, x0 + length, "white")]
    for left, right, colour in halves:
        axes.fill_between(
            [left / 1e3, right / 1e3],
            y0 / 1e3,
            (y0 + 0.012 * height) / 1e3,
            facecolor=colour,
            edgecolor=INK,
            linewidth=0.6,
            zorder=5,
        )
    label = f"{length / 1e3:g} km" if length >= 1e3 else f"{length:g} m"
    box = {"facecolor": "white", "alpha": 0.75, "edgecolor": "none", "pad": 1.0}
    axes.text(
        (x0 + 0.5 * length) / 1e3,
        (y0 + 0.02 * height) / 1e3,
        label,
        fontsize=6.5,
        color=INK,
        ha="center",
        va="bottom",
        bbox=box,
        zorder=5,
    )
    _north(axes, ground, ground.east - 0.08 * width, ground.south + 0.04 * height, 0.1 * height)


def _north(axes: Axes, ground: Ground, x: float, y: float, size: float) -> None:
    arrows = [("grid N", 0.0)]
    if abs(ground.convergence) > 0.1:
        # true north lies at minus the convergence from grid north, clockwise
        arrows.append(
            (f"true N {-ground.convergence:+.1f}°".replace("-", "−"), -ground.convergence)
        )
    for rank, (label, angle) in enumerate(arrows):
        # drawn five times too wide, and said in figures: one degree does not show
        turn = np.radians(np.clip(5.0 * angle, -40.0, 40.0))
        tip = (x + size * np.sin(turn)) / 1e3, (y + size * np.cos(turn)) / 1e3
        axes.annotate(
            "",
            tip,
            (x / 1e3, y / 1e3),
            arrowprops={"arrowstyle": "-|>" if rank == 0 else "->", "color": INK, "linewidth": 0.9},
            zorder=6,
        )
        axes.text(
            tip[0],
            tip[1] + 0.12 * size / 1e3 * (1 + 1.6 * rank),
            label,
            fontsize=5.5,
            color=INK,
            ha="center",
            va="bottom",
            zorder=6,
            bbox={"facecolor": "white", "alpha": 0.7, "edgecolor": "none", "pad": 0.6},
        )


def colour_bar(
    figure: Figure, axes: Axes, image: AxesImage, unit: str, *, pad: float = 0.09
) -> None:
    """Put a colour bar beside a map."""
    bar = figure.colorbar(image, ax=axes, shrink=0.8, pad=pad, aspect=28, extend="both")
    bar.ax.tick_params(labelsize=7, colors=INK, width=0.5)
    bar.set_label(unit, fontsize=8, color=INK)
    bar.outline.set_linewidth(0.5)


def crs_text(ground: Ground) -> str:
    """Return the CRS in words, with its code."""
    return f"{CRS.from_user_input(ground.crs).name} ({ground.crs})"
