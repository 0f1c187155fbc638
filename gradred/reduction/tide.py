"""The tide of Moon and Sun, along the lines."""

from __future__ import annotations

import numpy as np
import xarray as xr
from pydantic import Field

from gradred import survey
from gradred.newton.tides import tide_tensor
from gradred.stage import Settings, stage


class TideSettings(Settings):
    """Settings of the stage ``remove_tide``."""

    yielding: float = Field(
        0.2,
        ge=0,
        le=1,
        description="share of the tide taken as its standard deviation: what the yielding Earth "
        "and the oceans add to the rigid tide",
    )


@stage(
    makes="lines",
    needs={"lines": ("gradient", "time", "longitude", "latitude", "height")},
    adds=("removed_tide", "sigma_tide"),
    physics=tide_tensor,
)
def remove_tide(lines: xr.Dataset, settings: TideSettings) -> xr.Dataset:
    """Remove the gradient of Moon and Sun, below 0.0003 E, so that the ledger shows its size."""
    survey.frame_of("lines", lines, "gradient", "enu", where="stage remove_tide")
    time = lines["time"].to_numpy()
    place = np.column_stack([lines[n].to_numpy() for n in ("longitude", "latitude", "height")])
    whole = np.isfinite(place).all(axis=1) & ~np.isnat(time)
    tide = np.full((len(time), 6), np.nan)
    if whole.any():
        tide[whole] = tide_tensor(time[whole], *place[whole].T)
    return survey.subtract(lines, "tide", tide, settings.yielding * np.abs(tide))
