"""What a model is fitted to: the good readings in the frame of the grid, with their noise."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from gradred import survey
from gradred.errors import FitError, SurveyError
from gradred.mapping.layer import used_readings
from gradred.tensor import enu_to_grid

Array = NDArray[np.float64]


@dataclass(frozen=True)
class StationReadings:
    """Points (n, 3) m, readings and sd (n, 6) E, ``grid``, and the number of each one's line.

    ``sigma`` is that of the noise from reading to reading, ``common`` that of what levelling left
    on a line, which no averaging along the line takes away; 0 where no line was levelled. A
    component that holds nothing of its own is NaN.
    """

    points: Array
    readings: Array
    sigma: Array
    common: Array
    line: NDArray[np.intp]

    @property
    def count(self) -> int:
        """Number of readings, all components together."""
        return int(np.count_nonzero(np.isfinite(self.readings)))

    def closed(self, level: Array) -> Array:
        """Return (..., 6) constants fitted to the readings, zz by zero trace where it has none."""
        if np.isfinite(self.readings[:, 5]).any():
            return level
        out = level.copy()
        out[..., 5] = -out[..., 0] - out[..., 3]
        return out


def station_readings(lines: xr.Dataset, *, where: str) -> StationReadings:
    """Return the good readings of a survey, or refuse lines that have none or no noise."""
    good = survey.good(lines)
    if not good.any():
        raise FitError(
            f"none of the {len(good)} stations is good",
            where=where,
            cure="look at the flags of the lines",
        )
    sigma = lines["sigma"].to_numpy()[good]
    bad = int(np.count_nonzero(~(sigma > 0.0)))
    if bad:
        raise SurveyError(
            f"'sigma' is missing or not above 0 in {bad} of {sigma.size} good readings",
            where=where,
            cure="put estimate_noise before this stage",
        )
    points, readings, spread = used_readings(lines)
    common = np.zeros_like(spread)
    if "sigma_levelling" in lines:
        turn = enu_to_grid(lines["convergence"].to_numpy()[good])
        common = turn.spread(np.nan_to_num(lines["sigma_levelling"].to_numpy()[good]))
    _, line = np.unique(lines["line"].to_numpy().astype(str)[good], return_inverse=True)
    return StationReadings(points, readings, spread, common, line)
