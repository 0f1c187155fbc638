"""The report of a run: one page that opens without a network."""

from __future__ import annotations

import base64
import io
import json
from pathlib import Path
from typing import Any, Final

import numpy as np
import xarray as xr
from jinja2 import Environment, PackageLoader, select_autoescape
from matplotlib.figure import Figure
from pydantic import Field

from gradred import survey
from gradred.export import figures
from gradred.export.maps import tensor_sheet
from gradred.export.models import body_table
from gradred.export.tables import ledger_summary
from gradred.inversion.cautions import CAUTION
from gradred.stage import Cost, Crs, Settings, stage
from gradred.tensor import COMPONENTS

Row = list[str]

_CHECKS: Final = {
    "motion": (
        ("trace_slope", "trace of the readings on 2|ω|², slope (1 is right)"),
        (
            "antisymmetric_slope",
            "change of the rates on the antisymmetric part, slope (1 is right)",
        ),
        ("rates_from", "rates"),
    ),
    "terrain": (
        ("density", "density of the ground, kg/m3"),
        ("tolerance", "tolerance of the terrain sum, E"),
        ("proof_max", "largest error found against exact prisms, E"),
        ("proof_rms", "rms error against exact prisms, E"),
        ("proof_stations", "stations summed again"),
    ),
    "self": (
        ("body_tensor", "self-gradient in body axes, E (xx xy xz yy yz zz)"),
        ("body_sigma", "its standard errors, E"),
        ("not_separable", "not told apart from a constant"),
    ),
    "levelling": (
        ("crossings", "crossings used"),
        ("misfit_before", "rms misfit at crossings before, E (xx xy xz yy yz zz)"),
        ("misfit_after", "rms misfit at crossings after, E"),
        ("unlevelled", "lines without a crossing"),
    ),
}


class ReportSettings(Settings):
    """Settings of the stage ``write_report``."""

    survey_name: str = Field(description="name of the survey at the top of the page")
    crs: Crs = Field(description="survey CRS, told on the page")
    profiles: int = Field(3, ge=0, le=30, description="number of line profiles shown")
    dots: int = Field(110, ge=60, le=300, description="dots per inch of the figures")


@stage(makes=None, forecast=lambda _, sizes: Cost(12.0 + 2e-5 * sizes["stations"], 5e8))
def write_report(
    settings: ReportSettings,
    folder: Path,
    lines: xr.Dataset | None = None,
    terrain: xr.Dataset | None = None,
    grid: xr.Dataset | None = None,
    model: xr.Dataset | None = None,
) -> list[Path]:
    """Write one page: what was flown, what was removed, how good it is, maps, model, settings."""
    page = {
        "name": settings.survey_name,
        "crs": settings.crs,
        "caution": CAUTION,
        "flown": _flown(lines, terrain, settings),
        "removed": _removed(lines, model, settings),
        "worth": _worth(lines, grid, model, settings),
        "field": _field(grid, settings),
        "model": _model(model, settings),
        "record": _record(lines, grid, model),
    }
    loader = Environment(
        loader=PackageLoader("gradred", "export"),
        autoescape=select_autoescape(default=True),
        trim_blocks=True,
        lstrip_blocks=True,
    )
    path = folder / "report.html"
    text = loader.get_template("report.html.jinja").render(**page)
    path.write_text(text, encoding="utf-8")
    return [path]


def picture(figure: Figure, dots: int) -> str:
    """Return a figure as text that a page can hold; equal figures give equal text."""
    stream = io.BytesIO()
    figure.savefig(stream, format="png", dpi=dots, metadata={"Software": "gradred"})
    return "data:image/png;base64," + base64.b64encode(stream.getvalue()).decode()


def _flown(
    lines: xr.Dataset | None, terrain: xr.Dataset | None, settings: ReportSettings
) -> dict[str, Any] | None:
    if lines is None:
        return None
    names = lines["line"].to_numpy().astype(str)
    kinds = lines["kind"].to_numpy().astype(str)
    counts = {kind: len(np.unique(names[kinds == kind])) for kind in np.unique(kinds)}
    time = lines["time"].to_numpy()
    facts = [
        ["stations", f"{len(names):,}"],
        ["lines", ", ".join(f"{n} {kind}s" for kind, n in counts.items())],
        ["flown", f"{str(time.min())[:10]} to {str(time.max())[:10]}"],
    ]
    if "clearance" in lines and lines["clearance"].notnull().any():
        low, mid, high = np.nanpercentile(lines["clearance"].to_numpy(), [0, 50, 100])
        facts.append(["clearance", f"{mid:.0f} m (median), {low:.0f} to {high:.0f} m"])
    about = lines["terrain_height"].attrs if "terrain_height" in lines else {}
    for key in ("compared_offset", "compared_spread"):
        if key in about:
            label = key.removeprefix("compared_")
            facts.append(
                [f"height less clearance less terrain model, {label}", f"{about[key]:.2f} m"]
            )
    flags = [[name.replace("_", " "), str(n)] for name, n in survey.flag_counts(lines).items() if n]
    return {
        "facts": facts,
        "flags": flags,
        "map": picture(figures.survey_map(lines, terrain), settings.dots),
    }


def _removed(
    lines: xr.Dataset | None, model: xr.Dataset | None, settings: ReportSettings
) -> dict[str, Any] | None:
    if lines is None or "as_read" not in lines:
        return None
    table = ledger_summary(lines)
    entries = list(dict.fromkeys(table["entry"]))
    rows = []
    for entry in entries:
        own = table[table["entry"] == entry]
        cells = [
            f"{r:.3g}" + (f" ± {s:.2g}" if np.isfinite(s) else "")
            for r, s in zip(own["rms_E"], own["sigma_rms_E"], strict=True)
        ]
        rows.append([entry, *cells, f"{own['peak_E'].max():.3g}"])
    return {
        "components": list(COMPONENTS),
        "rows": rows,
        "closure": f"{survey.closure(lines):.1g}",
        "bars": picture(figures.ledger_bars(lines), settings.dots),
        "profiles": [
            {"line": n, "picture": picture(figures.line_profile(lines, n, model), settings.dots)}
            for n in figures.chosen_lines(lines, settings.profiles)
        ],
    }


def _worth(
    lines: xr.Dataset | None,
    grid: xr.Dataset | None,
    model: xr.Dataset | None,
    settings: ReportSettings,
) -> dict[str, Any] | None:
    if lines is None:
        return None
    checks: list[Row] = []
    for key, wanted in _CHECKS.items():
        if f"removed_{key}" in lines:
            about = lines[f"removed_{key}"].attrs
            checks += [[label, said(about[name])] for name, label in wanted if name in about]
    noise: list[Row] = []
    if "sigma" in lines:
        about = lines["sigma"].attrs
        for label, name in (
            ("rms of the noise of one reading, E (xx xy xz yy yz zz)", "rms"),
            ("shortest wavelength the readings hold, m", "cutoff_wavelength"),
            ("filter", "filter"),
            ("ground speed, m/s", "ground_speed"),
            ("density, E/√Hz, one-sided", "density"),
            ("rms of the trace, E (noise alone)", "trace_rms"),
            ("the same from its fast part, E", "trace_white"),
        ):
            if name in about:
                noise.append([label, said(about[name])])
    fits = _fits(grid, model)
    shown = None
    if "sigma" in lines and fits:
        shown = picture(figures.residual_histograms(lines, grid, model), settings.dots)
    return {"checks": checks, "noise": noise, "fits": fits, "histograms": shown}


def _fits(grid: xr.Dataset | None, model: xr.Dataset | None) -> list[Row]:
    rows = []
    if grid is not None and "chi_squared" in grid:
        rows.append(["mapped field, rms residual, E", *_six(grid["residual_rms"])])
        rows.append(["mapped field, chi-squared", *_six(grid["chi_squared"])])
    there = [k for k in ("bodies", "voxels") if model is not None and f"chi_squared_{k}" in model]
    if model is not None:
        rows += [[f"{k}, chi-squared", *_six(model[f"chi_squared_{k}"])] for k in there]
    return rows


def _six(values: xr.DataArray) -> Row:
    return [f"{v:.2f}" for v in values.to_numpy()]


def _field(grid: xr.Dataset | None, settings: ReportSettings) -> dict[str, Any] | None:
    if grid is None:
        return None
    about = grid["datum"].attrs if "datum" in grid else {}
    facts = [
        [label, said(about[name])]
        for name, label in (
            ("surface_kind", "map surface"),
            ("line_spacing", "line spacing, m"),
            ("shortest_wavelength", "shortest wavelength resolved, m"),
            ("sources", "sources of the layer"),
            ("missing_cells", "cells too far from a station"),
        )
        if name in about
    ]
    sheet = picture(tensor_sheet(grid, settings.survey_name), settings.dots)
    return {"facts": facts, "tensor": sheet}


def _model(model: xr.Dataset | None, settings: ReportSettings) -> dict[str, Any] | None:
    if model is None:
        return None
    out: dict[str, Any] = {"bodies": [], "sections": None, "tradeoff": None}
    if "body_kind" in model:
        for row in body_table(model).itertuples():
            error = "held" if row.standard_error == 0.0 else f"± {row.standard_error:.3g}"
            out["bodies"].append(
                [f"{row.body}, {row.kind}", row.parameter, f"{row.value:,.1f}", error, row.unit]
            )
    if "voxel_density" in model:
        out["sections"] = picture(figures.model_sections(model), settings.dots)
        out["tradeoff"] = picture(figures.tradeoff(model), settings.dots)
    return out


def _record(*parts: xr.Dataset | None) -> list[Row]:
    """Return every stage with its settings, once, in the order it was called."""
    rows: list[Row] = []
    for part in parts:
        for call in json.loads(part.attrs.get("record", "[]")) if part is not None else []:
            row = [call["stage"], json.dumps(call["settings"], ensure_ascii=False)]
            if row not in rows:
                rows.append(row)
    return rows


def said(value: Any) -> str:
    """Return an attribute as it is printed: numbers to four digits."""
    if isinstance(value, str):
        return value
    array = np.atleast_1d(value)
    return "  ".join(f"{v:.4g}" if array.dtype.kind == "f" else str(v) for v in array)
