"""How noisy the readings are: per component and line, from what changes too fast to be geology."""

from __future__ import annotations

from dataclasses import dataclass
from math import comb
from typing import Any, Final

import numpy as np
import xarray as xr
from numpy.typing import NDArray
from pydantic import Field
from scipy.special import ndtri

from gradred import survey
from gradred.errors import FitError
from gradred.reduction.crossings import Array, Index, distance_along
from gradred.stage import Settings, stage
from gradred.tensor import COMPONENTS, trace

_MEDIAN_OF_NORMAL: Final = float(ndtri(0.75))
_LEAST: Final = 30


class NoiseSettings(Settings):
    """Settings of the stage ``estimate_noise``."""

    order: int = Field(
        4,
        ge=2,
        le=8,
        description="order of the differences along the line: higher lets less geology through",
    )


@dataclass(frozen=True)
class Noise:
    """Standard deviations: per component (6,), factor per line (lines,), at stations (n, 6)."""

    component: Array
    line_factor: Array
    sigma: Array


def difference_noise(
    gradient: Array, line: Index, good: NDArray[np.bool_], *, order: int = 4
) -> Noise:
    r"""Estimate white noise from differences along the lines, in the frame of the readings.

    .. math:: d_i = \binom{2k}{k}^{-1/2} \sum_{j=0}^{k} (-1)^j \binom{k}{j} Γ_{i+j}, \quad
        σ_{c,l} = s_c r_l

    with :math:`s_c` the median size of all differences of a component over that of a normal
    variable, and :math:`r_l` the same of all components of a line together, each in units of its
    own :math:`s_c`, drawn towards 1 by its own sampling error.

    Assumes noise that is white from reading to reading, even steps, and lines that differ by one
    factor in all components. A wavelength of n readings passes with the amplitude
    :math:`\binom{2k}{k}^{-1/2} (2 \sin π/n)^k`: 0.03 at n = 12 and 0.3 at n = 6 for k = 4.

    Parameters
    ----------
    gradient : (n, 6) array
        Readings, E, in flying order within each line.
    line : (n,) int array
        Number of the line of each station, from 0.
    good : (n,) bool array
        Stations that may be used.
    order : int
        k.

    Returns
    -------
    Noise
        Standard deviations, E.

    Accuracy
    --------
    Per component 1.5 / √n relative; per line 1.5 / √(6 n_l) before it is drawn in. Red noise is
    underestimated: compare with the trace and with the crossings, which the stage reports.

    Source
    ------
    Differences: Hall, Kay and Titterington 1990, Biometrika 77, 521-528 (from memory); the median
    as a measure of spread: Hampel 1974, J. American Statistical Association 69, 383-393 (from
    memory).

    Checked by
    ----------
    ``tests/reduction/test_noise.py``: planted noise per component and line comes back within its
    sampling error, under a field of buried bodies.
    """
    differences, owner = _differences(gradient, line, good, order)
    if len(owner) < _LEAST:
        raise FitError(
            f"only {len(owner)} runs of {order + 1} good readings in a row, {_LEAST} are needed",
            where="stage estimate_noise",
            cure="lower its setting 'order', or look at why so many stations are flagged",
        )
    size = np.abs(differences)
    component = np.median(size, axis=0) / _MEDIAN_OF_NORMAL
    scaled = size / np.where(component > 0, component, 1.0)
    factor = np.ones(int(line.max()) + 1)
    error = np.full(len(factor), np.inf)
    for number in np.unique(owner):
        own = scaled[owner == number]
        factor[number] = np.median(own) / _MEDIAN_OF_NORMAL
        # differences of order 4 overlap: sampling error of the median, simulated, 1.5 / sqrt(n)
        error[number] = 1.5 / np.sqrt(own.size)
    factor = _drawn_in(factor, error)
    return Noise(component, factor, component * factor[line][:, None])


def _differences(
    gradient: Array, line: Index, good: NDArray[np.bool_], order: int
) -> tuple[Array, Index]:
    """Return (m, 6) differences of unit gain on white noise, and (m,) the line of each."""
    n = len(line) - order
    total = np.zeros((max(n, 0), gradient.shape[1]))
    whole = np.ones(max(n, 0), dtype=bool)
    for j in range(order + 1 if n > 0 else 0):
        total += (-1) ** j * comb(order, j) * gradient[j : j + n]
        whole &= good[j : j + n] & (line[j : j + n] == line[:n])
    return total[whole] / np.sqrt(comb(2 * order, order)), line[:n][whole]


def _drawn_in(factor: Array, error: Array) -> Array:
    """Return factors drawn towards 1 by their sampling error against their true spread."""
    seen = np.isfinite(error)
    spread = max(float(np.var(factor[seen]) - np.mean(error[seen] ** 2)), 0.0)
    weight = spread / (spread + np.where(seen, error, 1.0) ** 2)
    return np.asarray(np.where(seen, 1.0 + weight * (factor - 1.0), 1.0))


@stage(
    makes="lines",
    needs={"lines": ("gradient", "line", "flag", "time", "easting", "northing")},
    adds=("sigma",),
    physics=difference_noise,
)
def estimate_noise(lines: xr.Dataset, settings: NoiseSettings) -> xr.Dataset:
    """Estimate the standard deviation of one reading, per component and line.

    The attributes of ``sigma`` tell the figure whole: rms per component, the shortest wavelength
    the readings hold, the filter, the ground speed, the density in E/√Hz, and how the trace and
    the crossings agree with it.
    """
    frame = str(lines["gradient"].attrs["frame"])
    names, line = np.unique(lines["line"].to_numpy().astype(str), return_inverse=True)
    gradient, good = lines["gradient"].to_numpy(), survey.good(lines)
    found = difference_noise(np.nan_to_num(gradient), line, good, order=settings.order)
    factors = {str(n): round(float(f), 4) for n, f in zip(names, found.line_factor, strict=True)}
    told = _sampling(lines, line) | _agreement(lines, found, line, good, settings.order)
    return survey.put(
        "lines",
        lines,
        "sigma",
        found.sigma,
        frame=frame,
        rms=found.component,
        density=found.component * np.sqrt(2.0 * told["interval"]),
        density_unit="E/sqrt(Hz), one-sided",
        line_factors=", ".join(f"{name} {value}" for name, value in factors.items()),
        **told,
    )


def _sampling(lines: xr.Dataset, line: Index) -> dict[str, Any]:
    """Return step, speed and the shortest wavelength that the readings can hold."""
    along = distance_along(lines["easting"].to_numpy(), lines["northing"].to_numpy(), line)
    same = np.diff(line) == 0
    seconds = np.diff(lines["time"].to_numpy()).astype("timedelta64[ns]").astype(np.float64) * 1e-9
    step = float(np.median(np.diff(along)[same]))
    interval = float(np.median(seconds[same]))
    return {
        "interval": interval,
        "ground_speed": step / interval,
        "cutoff_wavelength": 2.0 * step,
        "filter": "none beyond the delivered one; the cut-off is the sampling limit",
    }


def _agreement(
    lines: xr.Dataset, found: Noise, line: Index, good: NDArray[np.bool_], order: int
) -> dict[str, Any]:
    """Return other measures of the same noise over what ``sigma`` leads one to expect."""
    told: dict[str, Any] = {}
    gradient = lines["gradient"]
    if "completed" not in gradient.attrs:
        # geology has no trace, so that all of it is noise; its constant is the levelling's
        total = trace(gradient.to_numpy())
        own = [total[(line == n) & good] for n in np.unique(line[good])]
        rms = float(np.sqrt(np.mean(np.concatenate([t - t.mean() for t in own]) ** 2)))
        told["trace_rms"] = rms
        quick, _ = _differences(np.nan_to_num(total)[:, None], line, good, order)
        told["trace_white"] = float(np.median(np.abs(quick)) / _MEDIAN_OF_NORMAL)
    if "removed_levelling" in lines:
        levelled = lines["removed_levelling"].attrs
        told["crossing_rms"] = np.asarray(levelled["misfit_after"], dtype=np.float64)
    told["components"] = " ".join(COMPONENTS)
    return told
