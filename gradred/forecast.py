"""What a run would find and cost, told before it is made: inputs, sizes, time, memory."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr

from gradred import survey
from gradred.pipeline_file import Pipeline, Step
from gradred.stage import Cost, files

_BASE_MEMORY = 0.4e9
"""Bytes of Python with the libraries loaded and their compiled code (measured)."""


def forecast(pipeline: Pipeline) -> str:
    """Read the inputs of a pipeline and tell what is there and what the run will take.

    Parameters
    ----------
    pipeline : Pipeline
        As ``pipeline_file.read_pipeline`` returns it, which has checked the chain already.

    Returns
    -------
    str
        A page of plain text. Inputs that a run would refuse are refused here.
    """
    parts = _inputs(pipeline)
    sizes = sizes_of(parts)
    told = [f"{pipeline.name} ({pipeline.crs}), {len(pipeline.steps)} stages", ""]
    told += ["inputs"] + [f"  {line}" for line in _files(pipeline)]
    told += ["", "found"] + [f"  {line}" for line in _found(parts, sizes)]
    told += ["", "expected on two cores"] + [f"  {line}" for line in _costs(pipeline, sizes)]
    return "\n".join(told)


def _inputs(pipeline: Pipeline) -> dict[str, xr.Dataset]:
    """Return the parts that the readers make: the stages that take no part."""
    parts = {}
    for step in pipeline.steps:
        if not step.stage.takes and step.stage.makes is not None:
            parts[step.stage.makes] = step.stage.function(settings=step.settings)
    return parts


def sizes_of(parts: Mapping[str, xr.Dataset]) -> dict[str, float]:
    """Return what forecasts go by: stations, lines, terrain cells, extent of the block, m."""
    sizes = {"stations": 0.0, "lines": 0.0, "terrain_cells": 0.0, "width": 0.0, "length": 0.0}
    if "lines" in parts:
        lines = parts["lines"]
        sizes["stations"] = float(lines.sizes["station"])
        sizes["lines"] = float(len(np.unique(lines["line"].to_numpy().astype(str))))
        sizes["width"] = float(np.ptp(lines["easting"].to_numpy()))
        sizes["length"] = float(np.ptp(lines["northing"].to_numpy()))
    if "terrain" in parts:
        sizes["terrain_cells"] = float(parts["terrain"]["height"].size)
    return sizes


def _files(pipeline: Pipeline) -> list[str]:
    told: dict[Path, str] = {}
    for step in pipeline.steps:
        for path in files(step.settings):
            told.setdefault(path, f"{path.name}, {_bytes(path.stat().st_size)}")
    return list(told.values())


def _found(parts: Mapping[str, xr.Dataset], sizes: Mapping[str, float]) -> list[str]:
    told = []
    if "lines" in parts:
        lines = parts["lines"]
        block = f"{sizes['width'] / 1e3:.1f} km × {sizes['length'] / 1e3:.1f} km"
        told.append(f"{sizes['stations']:,.0f} stations on {sizes['lines']:.0f} lines, {block}")
        counts = {name: n for name, n in survey.flag_counts(lines).items() if n}
        flags = ", ".join(f"{name} {n}" for name, n in counts.items()) or "none"
        told.append(f"flagged: {flags}")
        absent = [name for name in ("rates", "clearance", "antisymmetric") if name not in lines]
        if absent:
            told.append(f"not delivered: {', '.join(absent)}")
    if "terrain" in parts:
        height = parts["terrain"]["height"].to_numpy()
        cell = float(np.median(np.diff(parts["terrain"]["easting"].to_numpy())))
        low, high = np.nanmin(height), np.nanmax(height)
        told.append(
            f"terrain of {height.shape[1]} × {height.shape[0]} cells of {cell:g} m, "
            f"{low:.0f} to {high:.0f} m, {int(np.isnan(height).sum())} cells missing"
        )
    return told


def _costs(pipeline: Pipeline, sizes: Mapping[str, float]) -> list[str]:
    costs = [(step, cost_of(step, sizes)) for step in pipeline.steps]
    told = [
        f"{step.stage.name:<22}{_time(cost.seconds):>8}{_bytes(cost.memory):>10}"
        for step, cost in costs
        if cost.seconds >= 1.0 or cost.memory >= 0.1e9
    ]
    total = sum(cost.seconds for _, cost in costs) + 10.0
    peak = max(cost.memory for _, cost in costs) + _BASE_MEMORY
    return [*told, f"{'all, with start-up':<22}{_time(total):>8}{_bytes(peak):>10}"]


def cost_of(step: Step, sizes: Mapping[str, float]) -> Cost:
    """Return the expected cost of one step: its own forecast, else a copy of the lines."""
    if step.stage.forecast is not None:
        return step.stage.forecast(step.settings, sizes)
    return Cost(0.05 + 2e-6 * sizes["stations"], 1000.0 * sizes["stations"])


def _time(seconds: float) -> str:
    if seconds < 90.0:
        return f"{max(seconds, 1.0):.0f} s"
    return f"{seconds / 60.0:.0f} min" if seconds < 5400.0 else f"{seconds / 3600.0:.1f} h"


def _bytes(count: Any) -> str:
    size = float(count)
    for unit in ("B", "kB", "MB", "GB"):
        if size < 1000.0 or unit == "GB":
            return f"{size:.0f} {unit}" if unit != "GB" else f"{size:.1f} GB"
        size /= 1000.0
    raise AssertionError
