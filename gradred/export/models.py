"""The density model: CF NetCDF, and the bodies as a table with their cautions."""

from __future__ import annotations

from pathlib import Path

import pandas as pd
import xarray as xr

from gradred import survey
from gradred.inversion.cautions import CAUTION
from gradred.stage import Settings, stage


class ModelSettings(Settings):
    """Settings of the stage ``write_model``: there is nothing to set."""


def body_table(model: xr.Dataset) -> pd.DataFrame:
    """Return one row per parameter of every body: value, standard error, held or fitted."""
    rows = []
    for number, kind in enumerate(model["body_kind"].to_numpy()):
        names = model["body_parameter"].to_numpy()[number]
        values = model["body_value"].to_numpy()[number]
        errors = model["body_sigma"].to_numpy()[number]
        for name, value, error in zip(names, values, errors, strict=True):
            if name:
                label, unit = str(name).removesuffix("]").split(" [")
                rows.append(
                    {
                        "body": number + 1,
                        "kind": kind,
                        "parameter": label,
                        "unit": unit,
                        "value": value,
                        "standard_error": error,
                        "from": "held" if error == 0.0 else "fitted",
                    }
                )
    return pd.DataFrame(rows)


@stage(makes=None, needs={"model": ()})
def write_model(model: xr.Dataset, settings: ModelSettings, folder: Path) -> list[Path]:
    """Write the density model as NetCDF, and its bodies as a table under the cautions."""
    made = [folder / "model.nc"]
    survey.save("model", model.assign_attrs(caution=CAUTION), made[0])
    if "body_kind" in model:
        path = folder / "bodies.csv"
        text = body_table(model).round(3).to_csv(index=False, lineterminator="\n")
        path.write_text(f"# {CAUTION}\n{text}", encoding="utf-8")
        made.append(path)
    return made
