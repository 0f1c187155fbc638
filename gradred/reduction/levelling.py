"""Levelling at crossings: a slow drift per line that makes crossing lines agree."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Final, Literal

import numpy as np
import xarray as xr
from numpy.typing import NDArray
from pydantic import Field
from scipy import sparse

from gradred import survey
from gradred.errors import FitError
from gradred.reduction.crossings import (
    Array,
    Crossings,
    Index,
    distance_along,
    find_crossings,
    huber_weights,
    reading_weights,
)
from gradred.stage import Eotvos, Metres, Settings, stage

_ROUNDS: Final = 20


class LevelSettings(Settings):
    """Settings of the stage ``level_lines``."""

    order: int = Field(1, ge=0, le=3, description="order of the drift polynomial per line")
    window: Metres = Field(
        250.0,
        ge=10,
        le=2000,
        description="half width of the stretch of a line that estimates its reading at a crossing",
    )
    offset_sd: Eotvos = Field(
        10.0, ge=0.01, le=1000, description="expected size of the offset of a line, E"
    )
    bend_sd: Eotvos = Field(
        2.0,
        ge=0.01,
        le=1000,
        description="expected size of each further drift coefficient (slope, bend) of a line, E",
    )
    datum: Literal["zero-mean", "kept"] = Field(
        "zero-mean",
        description="crossings leave one constant per component open: "
        "'zero-mean' over the traverses, or 'kept' as the readings have it",
    )


@dataclass(frozen=True)
class Drift:
    """A drift at every station with its standard deviation, and the rms misfit at crossings."""

    drift: Array
    sigma: Array
    before: Array
    after: Array


def crossing_drift(
    gradient: Array,
    basis: Any,
    difference: Any,
    *,
    expected: Array,
    datum: Array | None = None,
) -> Drift:
    r"""Estimate the drift of every line from the differences at crossings, component by component.

    .. math:: \min_p \sum_k w_k (d_k - (D B p)_k)^2 / s_k^2 + \sum_j p_j^2 / τ_j^2

    with d = D Γ the differences at the crossings, D the weights that estimate them from the
    readings, B the drift polynomials, τ their expected size, s the standard deviation of a
    difference from the noise (estimated from the misfit itself) and w Huber's weights. Drift and
    noise are taken as independent between components; the field is taken as equal on both lines.

    Parameters
    ----------
    gradient : (n, 6) array
        Readings, E, in any frame common to all stations; NaN where there is none.
    basis : (n, p) sparse array
        Drift polynomials of every line at every station.
    difference : (k, n) sparse array
        First line minus second line at every crossing.
    expected : (p,) array
        τ, E.
    datum : (n,) array, optional
        Weights that add up to 1: the standard deviation is that of the drift less its mean by
        these weights, for readings whose constant is set by a rule of its own.

    Returns
    -------
    Drift
        Drift and its standard deviation (n, 6), and the rms misfit (6,) before and after, E.

    Accuracy
    --------
    As its standard deviation says: near the noise of one reading over the root of the crossings
    per line. Crossings do not see what all lines have in common at their crossings: a constant,
    and with slopes also a plane and its twist over the block; only τ holds these down.

    Source
    ------
    Least-squares levelling at crossings, common practice, no source; Huber 1964, Annals of
    Mathematical Statistics 35, 73-101, for the weights.

    Checked by
    ----------
    ``tests/reduction/test_levelling.py``: planted drifts come back within their standard deviation.
    """
    readings = np.nan_to_num(gradient)
    seen = difference @ readings
    design = (difference @ basis).toarray()
    spread = np.sqrt(np.asarray((difference.multiply(difference)).sum(axis=1)).ravel())
    drift, sigma = np.zeros_like(readings), np.zeros_like(readings)
    after = np.zeros(readings.shape[1])
    for c in range(readings.shape[1]):
        coefficients, covariance = _robust_ridge(design, seen[:, c], spread, expected)
        drift[:, c] = basis @ coefficients
        variance = basis.multiply(basis @ covariance).sum(axis=1)
        if datum is not None:
            mean = datum @ basis
            variance = variance - basis @ (2.0 * covariance @ mean) + mean @ covariance @ mean
        sigma[:, c] = np.sqrt(variance)
        after[c] = np.sqrt(np.mean((seen[:, c] - design @ coefficients) ** 2))
    return Drift(drift, sigma, np.sqrt(np.mean(seen**2, axis=0)), after)


def _robust_ridge(
    design: Array, seen: Array, spread: Array, expected: Array
) -> tuple[Array, Array]:
    """Return coefficients and their covariance, by reweighting until the scale is at rest."""
    weights = np.ones(len(seen))
    noise = max(_scale(seen / spread), 1e-6)
    for _ in range(_ROUNDS):
        scaled = np.sqrt(weights) / (spread * noise)
        normal = (design * scaled[:, None] ** 2).T @ design
        normal[np.diag_indices_from(normal)] += expected**-2.0
        covariance = np.linalg.inv(normal)
        coefficients = covariance @ (design.T @ (scaled**2 * seen))
        residual = (seen - design @ coefficients) / spread
        freedom = max(
            1.0, len(seen) - np.sum((design * scaled[:, None] ** 2) @ covariance * design)
        )
        last, noise = noise, max(_scale(residual) * np.sqrt(len(seen) / freedom), 1e-6)
        weights = huber_weights(residual / noise)
        if abs(noise - last) < 1e-4 * noise:
            break
    return np.asarray(coefficients), np.asarray(covariance, dtype=np.float64)


def _scale(residual: Array) -> float:
    """Return the standard deviation of normal noise from the median size, blind to outliers."""
    return float(np.median(np.abs(residual)) / 0.674489750196082)


def drift_basis(line: Index, along: Array, order: int) -> Any:
    """Return (n, lines × (order + 1)) Legendre polynomials in each line's own distance, sparse.

    Legendre polynomials over a line are nearly independent of one another, so that the expected
    size of a coefficient means the same for each.
    """
    numbers = np.unique(line)
    values = np.zeros((len(line), order + 1))
    column = np.zeros(len(line), dtype=np.intp)
    for n, number in enumerate(numbers):
        stations = np.flatnonzero(line == number)
        length = max(float(along[stations[-1]]), 1.0)
        values[stations] = np.polynomial.legendre.legvander(2 * along[stations] / length - 1, order)
        column[stations] = n * (order + 1)
    rows = np.repeat(np.arange(len(line)), order + 1)
    columns = (column[:, None] + np.arange(order + 1)).ravel()
    return sparse.csr_array(
        (values.ravel(), (rows, columns)), shape=(len(line), len(numbers) * (order + 1))
    )


def crossing_differences(
    crossings: Crossings, along: Array, line: Index, good: NDArray[np.bool_], window: float
) -> tuple[Any, NDArray[np.bool_]]:
    """Return (k, n) weights of first minus second line, and which crossings have both readings."""
    first = reading_weights(crossings, 0, along, line, good, window)
    second = reading_weights(crossings, 1, along, line, good, window)
    both = np.array((first.count_nonzero(axis=1) > 0) & (second.count_nonzero(axis=1) > 0))
    return (first - second)[both], both


@stage(
    makes="lines",
    needs={"lines": ("gradient", "line", "kind", "easting", "northing", "flag")},
    adds=("removed_levelling", "sigma_levelling"),
    physics=crossing_drift,
)
def level_lines(lines: xr.Dataset, settings: LevelSettings) -> xr.Dataset:
    """Remove a slow drift per line, so that lines agree where they cross.

    Lines that cross no other keep their readings, and are named in the attribute ``unlevelled``
    of ``removed_levelling``.
    """
    survey.frame_of("lines", lines, "gradient", "enu", where="stage level_lines")
    names, line = np.unique(lines["line"].to_numpy().astype(str), return_inverse=True)
    easting, northing = lines["easting"].to_numpy(), lines["northing"].to_numpy()
    good = survey.good(lines)
    crossings = find_crossings(easting, northing, line)
    along = distance_along(easting, northing, line)
    difference, both = crossing_differences(crossings, along, line, good, settings.window)
    _enough(int(both.sum()), len(names))
    basis = drift_basis(line, along, settings.order)
    gradient = lines["gradient"].to_numpy()
    datum = _datum(lines, good) if settings.datum == "zero-mean" else None
    expected = np.tile([settings.offset_sd] + settings.order * [settings.bend_sd], len(names))
    found = crossing_drift(gradient, basis, difference, expected=expected, datum=datum)
    amount = found.drift
    if datum is not None:
        amount = amount + datum @ np.nan_to_num(gradient - found.drift)
    unlevelled = sorted(set(names) - set(names[np.unique(crossings.line[both])]))
    return survey.subtract(
        lines,
        "levelling",
        amount,
        found.sigma,
        crossings=int(both.sum()),
        misfit_before=found.before,
        misfit_after=found.after,
        datum=settings.datum,
        unlevelled=", ".join(unlevelled) or "none",
    )


def _datum(lines: xr.Dataset, good: NDArray[np.bool_]) -> Array:
    """Return (n,) weights of the mean over the good readings of the traverses."""
    chosen = good & (lines["kind"].to_numpy() == "traverse")
    return np.asarray(chosen / max(np.count_nonzero(chosen), 1))


def _enough(crossings: int, lines: int) -> None:
    if crossings < lines:
        raise FitError(
            f"{lines} lines have only {crossings} crossings with readings on both sides",
            where="stage level_lines",
            cure="fly tie lines, or leave this stage out of the pipeline file",
        )
