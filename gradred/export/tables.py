"""Lines and ledger as tables: Parquet, CSV, and the sizes of every correction."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any, Final

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import xarray as xr
from pydantic import Field
from pyproj import CRS

from gradred import survey
from gradred.stage import Cost, Settings, Sizes, stage
from gradred.survey import CORRECTIONS
from gradred.tensor import COMPONENTS

_DIGITS: Final = {"degree": 8, "m": 3, "E": 4, "rad/s": 13, "1": 4}


class TableSettings(Settings):
    """Settings of the stage ``write_lines``."""

    csv: bool = Field(True, description="write lines.csv.gz beside lines.parquet")


class LedgerSettings(Settings):
    """Settings of the stage ``write_ledger``: there is nothing to set."""


def line_table(lines: xr.Dataset) -> tuple[pd.DataFrame, dict[str, dict[str, str]]]:
    """Return every variable of the lines as columns, and unit, meaning and frame of each column.

    Tensors become six columns with the component as suffix, axial vectors three.
    """
    columns: dict[str, Any] = {}
    told: dict[str, dict[str, str]] = {}
    for row in survey.VARIABLES:
        if row.part != "lines" or row.name not in lines:
            continue
        variable = lines[row.name]
        values = variable.to_numpy()
        about = {"unit": "UTC" if row.unit == "time" else row.unit, "meaning": row.meaning}
        if "frame" in variable.attrs:
            about["frame"] = str(variable.attrs["frame"])
        if values.ndim == 1:
            columns[row.name], told[row.name] = values, about
            continue
        labels = COMPONENTS if row.dims[1] == "component" else survey.AXES
        for number, label in enumerate(labels):
            name = f"{row.name}_{label}"
            columns[name], told[name] = values[:, number], about
    return pd.DataFrame(columns), told


@stage(
    makes=None,
    needs={"lines": ("gradient",)},
    forecast=lambda _, sizes: _table_cost(sizes),
)
def write_lines(lines: xr.Dataset, settings: TableSettings, folder: Path) -> list[Path]:
    """Write the lines with their whole ledger as GeoParquet and as CSV with a table of columns."""
    table, told = line_table(lines)
    made = [_parquet(table, told, lines, folder / "lines.parquet")]
    if settings.csv:
        made += _csv(table, told, folder)
    return made


def _table_cost(sizes: Sizes) -> Cost:
    return Cost(0.5 + 6e-5 * sizes["stations"], 2000.0 * sizes["stations"])


def _parquet(
    table: pd.DataFrame, told: dict[str, dict[str, str]], lines: xr.Dataset, path: Path
) -> Path:
    """Write GeoParquet 1.1: points of longitude and latitude as WKB, units in the fields."""
    whole = pa.Table.from_pandas(table, preserve_index=False)
    points = np.zeros(
        len(table), dtype=[("order", "u1"), ("kind", "<u4"), ("x", "<f8"), ("y", "<f8")]
    )
    points["order"], points["kind"] = 1, 1
    points["x"], points["y"] = table["longitude"], table["latitude"]
    whole = whole.append_column("geometry", pa.array([p.tobytes() for p in points], pa.binary()))
    fields = [
        field.with_metadata({k: v.encode() for k, v in told.get(field.name, {}).items()})
        for field in whole.schema
    ]
    geo = {
        "version": "1.1.0",
        "primary_column": "geometry",
        "columns": {
            "geometry": {
                "encoding": "WKB",
                "geometry_types": ["Point"],
                "crs": CRS.from_epsg(4326).to_json_dict(),
            }
        },
    }
    about = {
        b"geo": json.dumps(geo).encode(),
        b"survey_crs": str(lines.attrs["crs"]).encode(),
        b"record": str(lines.attrs.get("record", "[]")).encode(),
    }
    pq.write_table(pa.table(whole.columns, schema=pa.schema(fields, metadata=about)), path)
    return path


def _csv(table: pd.DataFrame, told: dict[str, dict[str, str]], folder: Path) -> list[Path]:
    rounded = table.copy()
    for name, about in told.items():
        if about["unit"] in _DIGITS and rounded[name].dtype.kind == "f":
            rounded[name] = rounded[name].round(_DIGITS[about["unit"]])
    path = folder / "lines.csv.gz"
    # no time in the gzip header: equal runs give equal bytes
    rounded.to_csv(path, index=False, compression={"method": "gzip", "mtime": 0})
    key = folder / "lines_columns.csv"
    rows = [{"column": name, "frame": "", **about} for name, about in told.items()]
    pd.DataFrame(rows)[["column", "unit", "frame", "meaning"]].to_csv(key, index=False)
    return [path, key]


def ledger_summary(lines: xr.Dataset) -> pd.DataFrame:
    """Return what each correction moved: rms, peak and standard deviation per component, E.

    Rows "as read" and "left" open and close the ledger; rms and peak of these two and of every
    correction are over the good stations. ``sigma_rms`` is the rms of the correction's own
    standard deviation, and of the noise for what is left.
    """
    chosen = survey.good(lines)
    rows: list[dict[str, Any]] = []

    def add(what: str, values: np.ndarray[Any, Any], sigma: np.ndarray[Any, Any] | None) -> None:
        for number, component in enumerate(COMPONENTS):
            column = values[chosen, number]
            rows.append(
                {
                    "entry": what,
                    "component": component,
                    "mean_E": float(np.mean(column)) if column.size else float("nan"),
                    "rms_E": float(np.sqrt(np.mean(column**2))) if column.size else float("nan"),
                    "peak_E": float(np.max(np.abs(column), initial=0.0)),
                    "sigma_rms_E": float("nan")
                    if sigma is None or not column.size
                    else float(np.sqrt(np.mean(sigma[chosen, number] ** 2))),
                }
            )

    add("as read", lines["as_read"].to_numpy(), None)
    for key in survey.removed(lines):
        values, sigma = lines[f"removed_{key}"].to_numpy(), lines[f"sigma_{key}"].to_numpy()
        add(CORRECTIONS[key], values, sigma)
    noise = lines["sigma"].to_numpy() if "sigma" in lines else None
    add("left", lines["gradient"].to_numpy(), noise)
    return pd.DataFrame(rows)


@stage(makes=None, needs={"lines": ("gradient", "as_read")})
def write_ledger(lines: xr.Dataset, settings: LedgerSettings, folder: Path) -> list[Path]:
    """Write what each correction moved, per component, and how sure it is, as a table."""
    path = folder / "ledger.csv"
    ledger_summary(lines).round(6).to_csv(path, index=False)
    return [path]
