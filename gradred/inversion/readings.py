"""What a model is fitted to: the good readings in the frame of the grid, with their noise."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from gradred import survey
from gradred.errors import FitError, SurveyError
from gradred.mapping.layer import used_readings

Array = NDArray[np.float64]


@dataclass(frozen=True)
class StationReadings:
    """Points (n, 3) m, readings and sd (n, 6) E, ``grid``, and the number of each one's line.

    A component that holds nothing of its own is NaN.
    """

    points: Array
    readings: Array
    sigma: Array
    line: NDArray[np.intp]

    @property
    def count(self) -> int:
        """Number of readings, all components together."""
        return int(np.count_nonzero(np.isfinite(self.readings)))


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
    _, line = np.unique(lines["line"].to_numpy().astype(str)[good], return_inverse=True)
    return StationReadings(points, readings, spread, line)
