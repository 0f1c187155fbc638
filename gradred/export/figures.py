"""Figures of the report: where was flown, what was removed, how noisy it is, the model."""

from __future__ import annotations

from typing import Any, Final

import numpy as np
import xarray as xr
from cmcrameri import cm
from matplotlib.colors import LightSource
from matplotlib.figure import Figure
from matplotlib.patches import Rectangle
from numpy.typing import NDArray

from gradred import survey
from gradred.export.sheet import FAINT, INK, as_written, draw_frame, draw_scale, ground_of
from gradred.export.tables import ledger_summary
from gradred.newton.sheet import dipping_sheet
from gradred.reduction.crossings import distance_along
from gradred.tensor import COMPONENTS

Array = NDArray[np.float64]

# told apart also in grey and by the colour-blind: steps of lightness with a change of hue
HUES: Final = ("#1f3a5f", "#c2592f", "#4b8b6a", "#9a7bb8", "#c79a2b", "#6b7684")
_KINDS: Final = {"traverse": HUES[0], "tie": HUES[1], "repeat": HUES[2]}


def _figure(width: float, height: float) -> Figure:
    return Figure(figsize=(width, height), layout="constrained", facecolor="white")


def _tidy(axes: Any, across: str, up: str) -> None:
    axes.tick_params(labelsize=7, colors=INK, length=3, width=0.6)
    axes.set_xlabel(across, fontsize=7.5, color=INK)
    axes.set_ylabel(up, fontsize=7.5, color=INK)
    for side in ("top", "right"):
        axes.spines[side].set_visible(False)
    for side in ("left", "bottom"):
        axes.spines[side].set_linewidth(0.6)


def survey_map(lines: xr.Dataset, terrain: xr.Dataset | None) -> Figure:
    """Return the map of what was flown over the shaded ground, flagged stations marked."""
    figure = _figure(6.6, 6.2)
    axes = figure.subplots()
    easting, northing = lines["easting"].to_numpy(), lines["northing"].to_numpy()
    if terrain is not None:
        ground = ground_of(terrain)
        height = terrain["height"].to_numpy()
        cell = float(np.diff(terrain["easting"].to_numpy()[:2])[0])
        shade = LightSource(315, 45).hillshade(np.nan_to_num(height), dx=cell, dy=cell, vert_exag=2)
        axes.imshow(
            shade,
            origin="lower",
            extent=ground.extent,
            cmap="gray",
            vmin=-0.3,
            vmax=1.1,
            alpha=0.75,
        )
    else:
        ground = ground_of(_frame_of(lines))
    kinds = lines["kind"].to_numpy().astype(str)
    for kind, hue in _KINDS.items():
        here = kinds == kind
        if here.any():
            axes.plot(
                easting[here] / 1e3, northing[here] / 1e3, ".", ms=1.2, color=hue, label=f"{kind}s"
            )
    bad = ~survey.good(lines)
    if bad.any():
        axes.plot(
            easting[bad] / 1e3, northing[bad] / 1e3, "x", ms=4, color="#b3261e", label="flagged"
        )
    draw_frame(axes, ground)
    draw_scale(axes, ground)
    axes.legend(fontsize=7, loc="upper left", markerscale=6, framealpha=0.85)
    return figure


def _frame_of(lines: xr.Dataset) -> xr.Dataset:
    place = np.stack([lines[name].to_numpy() for name in ("easting", "northing")])
    low, high = np.nanmin(place, axis=1), np.nanmax(place, axis=1)
    # a single line or station still has ground around it
    least = max(100.0, 0.1 * float((high - low).max()))
    margin = 0.5 * np.maximum(least - (high - low), 0.0)
    axes = {
        name: np.linspace(low[n] - margin[n], high[n] + margin[n], 20)
        for n, name in enumerate(("easting", "northing"))
    }
    return survey.new("grid", str(lines.attrs["crs"]), **axes)


def ledger_bars(lines: xr.Dataset) -> Figure:
    """Return bars of the rms that each correction moved, per component, with its own deviation."""
    table = ledger_summary(lines)
    entries = list(dict.fromkeys(table["entry"]))
    figure = _figure(7.4, 0.42 * len(entries) + 1.0)
    axes = figure.subplots()
    for rank, component in enumerate(COMPONENTS):
        rows = table[table["component"] == component].set_index("entry").loc[entries]
        place = np.arange(len(entries)) + (rank - 2.5) * 0.13
        size = np.fmax(rows["rms_E"].to_numpy(), 1e-6)
        axes.barh(place, size, height=0.12, color=HUES[rank], label=component)
        axes.plot(rows["sigma_rms_E"].to_numpy(), place, "|", ms=5, color="#b3261e", mew=1.2)
    axes.set_yticks(range(len(entries)), entries, fontsize=7.5)
    axes.invert_yaxis()
    axes.set_xscale("log")
    _tidy(axes, "rms, E (red: its own standard deviation)", "")
    axes.legend(fontsize=7, ncols=6, loc="lower center", bbox_to_anchor=(0.45, 1.0), frameon=False)
    return figure


def chosen_lines(lines: xr.Dataset, count: int) -> list[str]:
    """Return the traverses on which the reduced zz varies most, in order of their names."""
    names = lines["line"].to_numpy().astype(str)
    good, kinds = survey.good(lines), lines["kind"].to_numpy().astype(str)
    zz = lines["gradient"].to_numpy()[:, 5]
    spread = {
        name: float(np.std(zz[(names == name) & good]))
        for name in np.unique(names[(kinds == "traverse") & good])
    }
    return sorted(sorted(spread, key=lambda name: -spread[name])[:count])


def line_profile(lines: xr.Dataset, name: str, model: xr.Dataset | None) -> Figure:
    """Return the profile of one line: zz as it was read, each removed part, and what is left."""
    names = lines["line"].to_numpy().astype(str)
    here = np.flatnonzero(names == name)
    easting, northing = lines["easting"].to_numpy(), lines["northing"].to_numpy()
    along = distance_along(easting[here], northing[here], np.zeros(len(here), dtype=np.intp)) / 1e3
    figure = _figure(7.4, 5.6)
    top, middle, bottom = figure.subplots(3, 1, sharex=True, height_ratios=[1.1, 1.2, 1.6])
    ground = lines["terrain_height"].to_numpy()[here] if "terrain_height" in lines else None
    height = lines["height"].to_numpy()[here]
    top.plot(along, height, color=INK, lw=0.9, label="instrument")
    if ground is not None and np.isfinite(ground).any():
        top.fill_between(along, np.nanmin(ground) - 10, ground, color="#c9bfa8", label="ground")
    _tidy(top, "", "height, m")
    for rank, key in enumerate(survey.removed(lines)):
        part = lines[f"removed_{key}"].to_numpy()[here, 5]
        mean = np.mean(part, where=np.isfinite(part)) if np.isfinite(part).any() else 0.0
        middle.plot(along, part - mean, lw=0.8, color=HUES[rank % 6], label=key)
    middle.set_yscale("symlog", linthresh=10.0)
    _tidy(middle, "", "removed zz less\nits mean, E")
    left = lines["gradient"].to_numpy()[here, 5]
    bottom.plot(along, left, ".", ms=3, color=FAINT, label="reduced zz")
    for kind, hue in (("bodies", "#b3261e"), ("voxels", HUES[0])):
        if model is not None and f"predicted_{kind}" in model:
            shown = left - model[f"residual_{kind}"].to_numpy()[here, 5]
            bottom.plot(along, shown, lw=1.2, color=hue, label=f"predicted by the {kind}")
    _tidy(bottom, f"distance along {as_written(name)}, km", "zz, E")
    for axes in (top, middle, bottom):
        if axes.get_legend_handles_labels()[0]:
            axes.legend(fontsize=6.5, ncols=6, loc="upper right", frameon=False)
    return figure


def residual_histograms(
    lines: xr.Dataset, grid: xr.Dataset | None, model: xr.Dataset | None
) -> Figure:
    """Return histograms of residual over standard deviation, beside the normal law."""
    shown = {}
    if grid is not None and "residual" in grid:
        # the noise of a component hardly changes by the turn from true to grid axes
        shown["field"] = grid["residual"].to_numpy()
    for kind in ("bodies", "voxels"):
        if model is not None and f"residual_{kind}" in model:
            shown[kind] = model[f"residual_{kind}"].to_numpy()
    figure = _figure(7.4, 2.4)
    good, sigma = survey.good(lines), lines["sigma"].to_numpy()
    edges = np.linspace(-4, 4, 41)
    middle = 0.5 * (edges[1:] + edges[:-1])
    row = figure.subplots(1, 6, sharey=True)
    for number, (axes, component) in enumerate(zip(row, COMPONENTS, strict=True)):
        for hue, (kind, residual) in zip(HUES, shown.items(), strict=False):
            counts, _ = np.histogram((residual / sigma)[good, number], edges)
            share = counts / (max(counts.sum(), 1) * (edges[1] - edges[0]))
            axes.step(middle, share, where="mid", lw=0.9, color=hue, label=kind)
        axes.plot(middle, np.exp(-0.5 * middle**2) / np.sqrt(2 * np.pi), lw=0.8, ls="--", color=INK)
        axes.set_title(component, fontsize=8, color=INK)
        _tidy(axes, "residual / sd", "")
    row[-1].legend(fontsize=6, frameon=False)
    return figure


def model_sections(model: xr.Dataset) -> Figure:
    """Return a slice and two sections of the voxels through their strongest cell, with bodies."""
    density = model["voxel_density"].to_numpy()
    tops, bottoms = model["voxel_top"].to_numpy(), model["voxel_bottom"].to_numpy()
    east, north = model["cell_easting"].to_numpy(), model["cell_northing"].to_numpy()
    layer, row, column = np.unravel_index(np.argmax(np.abs(density)), density.shape)
    limit = float(np.percentile(np.abs(density), 99.8))
    style: dict[str, Any] = {"cmap": cm.vik, "vmin": -limit, "vmax": limit, "rasterized": True}
    figure = _figure(7.4, 8.4)
    plan, across, along = figure.subplots(3, 1, height_ratios=[2.6, 1, 1])
    half = 0.5 * (east[1] - east[0])
    box = [(axis[0] - half) / 1e3 for axis in (east, north)]
    ends = [(axis[-1] + half) / 1e3 for axis in (east, north)]
    image = plan.imshow(
        density[layer],
        origin="lower",
        extent=(box[0], ends[0], box[1], ends[1]),
        cmap=cm.vik,
        vmin=-limit,
        vmax=limit,
    )
    middle = float(0.5 * (tops[layer] + bottoms[layer]).mean())
    plan.set_title(
        f"layer {layer + 1}, near height {middle:.0f} m", fontsize=8, color=INK, loc="left"
    )
    plan.axhline(north[row] / 1e3, color=INK, lw=0.5, ls=":")
    plan.axvline(east[column] / 1e3, color=INK, lw=0.5, ls=":")
    _tidy(plan, "easting, km", "northing, km")
    for axes, axis, cut, name, at in (
        (
            across,
            east,
            np.s_[:, row, :],
            "easting",
            f"section at northing {north[row] / 1e3:.2f} km",
        ),
        (
            along,
            north,
            np.s_[:, :, column],
            "northing",
            f"section at easting {east[column] / 1e3:.2f} km",
        ),
    ):
        for n, value in enumerate(axis):
            edges = np.append(tops[cut][:, n], bottoms[cut][-1, n])
            axes.pcolormesh(
                np.array([value - half, value + half]) / 1e3,
                edges,
                density[cut][:, n : n + 1],
                **style,
            )
        axes.set_title(at, fontsize=8, color=INK, loc="left")
        _tidy(axes, f"{name}, km", "height, m")
    if "body_kind" in model:
        _outlines(plan, across, along, model, (east[column], north[row]))
    bar = figure.colorbar(image, ax=[plan, across, along], shrink=0.5, aspect=30)
    bar.set_label("density contrast, kg/m3", fontsize=8, color=INK)
    bar.ax.tick_params(labelsize=7)
    return figure


def _outlines(
    plan: Any, across: Any, along: Any, model: xr.Dataset, cut: tuple[float, float]
) -> None:
    """Draw the box around every fitted body on the plan, and on the sections that cross it."""
    for kind, names, values in zip(
        model["body_kind"].to_numpy(),
        model["body_parameter"].to_numpy(),
        model["body_value"].to_numpy(),
        strict=True,
    ):
        known = {str(n).split(" [")[0]: v for n, v in zip(names, values, strict=True) if n}
        low, high = body_box(str(kind), known)
        style: dict[str, Any] = {"fill": False, "edgecolor": INK, "linewidth": 0.9}
        crossed = [low[axis] <= cut[axis] <= high[axis] for axis in (0, 1)]
        for axes, a, b, unit, shown in (
            (plan, 0, 1, 1e3, True),
            (across, 0, 2, 1.0, crossed[1]),
            (along, 1, 2, 1.0, crossed[0]),
        ):
            if shown:
                corner = (low[a] / 1e3, low[b] / unit)
                size = ((high[a] - low[a]) / 1e3, (high[b] - low[b]) / unit)
                axes.add_patch(Rectangle(corner, *size, **style))


def body_box(kind: str, known: dict[str, float]) -> tuple[Array, Array]:
    """Return the lowest and highest easting, northing and height of a body, m."""
    if kind == "sphere":
        centre = np.array([known["easting"], known["northing"], known["height"]])
        return centre - known["radius"], centre + known["radius"]
    if kind == "prism":
        half = np.array([0.5 * known["width"], 0.5 * known["length"], 0.0])
        top = np.array([known["easting"], known["northing"], known["top"]])
        return top - half - [0.0, 0.0, known["extent"]], top + half
    order = ("easting", "northing", "top", "strike", "dip", "length", "extent", "thickness")
    corners, _ = dipping_sheet(*(known[name] for name in order))
    return corners.min(axis=0), corners.max(axis=0)


def tradeoff(model: xr.Dataset) -> Figure:
    """Return misfit against model norm over the trials of the voxel fit."""
    figure = _figure(3.6, 2.6)
    axes = figure.subplots()
    order = np.argsort(model["tradeoff_weight"].to_numpy())
    x = model["tradeoff_roughness"].to_numpy()[order]
    y = model["tradeoff_chi_squared"].to_numpy()[order]
    axes.loglog(x, y, "o-", ms=3.5, lw=0.8, color=HUES[0])
    axes.axhline(1.0, color="#b3261e", lw=0.7, ls="--")
    _tidy(axes, "model norm", "chi-squared per reading")
    return figure
