"""The aircraft's own attraction: a constant tensor in body axes, seen at several headings."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Final

import numpy as np
import xarray as xr
from pydantic import Field
from scipy import sparse

from gradred import survey
from gradred.errors import FitError
from gradred.reduction.crossings import (
    Array,
    Index,
    distance_along,
    find_crossings,
    huber_weights,
)
from gradred.reduction.levelling import crossing_differences
from gradred.stage import Eotvos, Metres, Settings, stage
from gradred.tensor import body_to_enu

_ROUNDS: Final = 30

SEPARABLE: Final = np.array(
    # xx    xy   xz   yy   yz   zz
    [
        [0.5, 0.0, 0.0, -0.5, 0.0, 0.0],
        [0.0, 1.0, 0.0, 0.0, 0.0, 0.0],
        [0.0, 0.0, 1.0, 0.0, 0.0, 0.0],
        [0.0, 0.0, 0.0, 0.0, 1.0, 0.0],
    ]
)
"""Rows: xx − yy, xy, xz, yz of a trace-free body tensor. The fifth, zz with xx = yy = −zz/2, looks
the same at every heading and cannot be told from a constant of the instrument: it is held at 0."""


class SelfGradientSettings(Settings):
    """Settings of the stage ``remove_self_gradient``."""

    window: Metres = Field(
        150.0,
        ge=10,
        le=2000,
        description="half width of the stretch of a line that estimates its reading at a crossing",
    )
    drift_sd: Eotvos = Field(
        5.0,
        ge=0.01,
        le=1000,
        description="expected offset of a line from its drift, E: what the headings must outvote",
    )


@dataclass(frozen=True)
class SelfGradient:
    """A tensor (6,) in body axes, E, and the covariance (4, 4) of its SEPARABLE elements, E2."""

    tensor: Array
    covariance: Array
    misfit_before: Array
    misfit_after: Array


def self_gradient(
    gradient: Array,
    turning: Array,
    difference: Any,
    line: Index,
    *,
    drift_sd: float,
) -> SelfGradient:
    r"""Estimate a constant tensor in body axes from readings on crossing lines, in the enu frame.

    .. math:: Γ^{(1)} - Γ^{(2)} = (K^{(1)} - K^{(2)}) s + b^{(1)} - b^{(2)} + ε

    at every crossing, with K the 6 × 4 matrices that turn the separable elements s from body to
    enu and b the offset of each line and component, of which only the expected size is known. All
    components and crossings are solved together by least squares with Huber's weights.

    Assumes that the self-gradient is constant in body axes, and that line offsets do not depend
    on heading: an offset that does is a self-gradient and comes out as one.

    Parameters
    ----------
    gradient : (n, 6) array
        Readings, E, enu; NaN where there is none.
    turning : (n, 6, 6) array
        Takes body components to enu components at each station.
    difference : (k, n) sparse array
        First line minus second line at every crossing.
    line : (n,) int array
        Number of the line of each station, from 0.
    drift_sd : float
        Expected size of b, E.

    Returns
    -------
    SelfGradient
        With zz and xx + yy held at zero, which headings cannot separate.

    Accuracy
    --------
    As its covariance says: near drift_sd over the root of half the number of lines.

    Source
    ------
    Least squares by headings, common practice, no source; the weights are those of Huber 1964,
    Annals of Mathematical Statistics 35, 73-101.

    Checked by
    ----------
    ``tests/reduction/test_self_gradient.py``: a planted tensor comes back within its standard
    error, over many seeds with the stated covariance.
    """
    crossings, lines = difference.shape[0], int(line.max()) + 1
    seen = (difference @ np.nan_to_num(gradient)).T.ravel()
    patterns = np.nan_to_num(turning @ SEPARABLE.T)
    turned = np.concatenate([difference @ patterns[:, c, :] for c in range(6)])
    member = sparse.csr_array(
        (np.ones(len(line)), (np.arange(len(line)), line)), shape=(len(line), lines)
    )
    offsets = (difference @ member).toarray()
    spread = np.sqrt(np.asarray(difference.multiply(difference).sum(axis=1)).ravel())
    weights = np.ones((6, crossings))
    for _ in range(_ROUNDS):
        estimate, covariance, residual = _solve(seen, turned, offsets, spread, weights, drift_sd)
        scale = np.median(np.abs(residual), axis=1, keepdims=True) / 0.674489750196082
        scale = np.maximum(scale, 1e-6)
        weights, last = huber_weights(residual / scale) / scale**2, weights
        if np.allclose(weights, last, rtol=1e-3):
            break
    rms = [
        np.sqrt(np.mean(d.reshape(6, -1) ** 2, axis=1)) for d in (seen, seen - turned @ estimate)
    ]
    return SelfGradient(estimate @ SEPARABLE, covariance, rms[0], rms[1])


def _solve(
    seen: Array, turned: Array, offsets: Array, spread: Array, weights: Array, drift_sd: float
) -> tuple[Array, Array, Array]:
    """Return the four elements, their covariance and (6, k) residuals, offsets eliminated.

    Each component has its own offsets and shares the four elements, so the offsets are taken out
    component by component and only a 4 × 4 system is left.
    """
    k = len(spread)
    normal, right = np.zeros((4, 4)), np.zeros(4)
    kept = []
    for c in range(6):
        w = weights[c] / spread**2
        block, rows = turned[c * k : (c + 1) * k], seen[c * k : (c + 1) * k]
        own = (offsets * w[:, None]).T @ offsets + np.eye(offsets.shape[1]) / drift_sd**2
        mixed = np.linalg.solve(own, (offsets * w[:, None]).T @ np.column_stack([block, rows]))
        clean = np.column_stack([block, rows]) - offsets @ mixed
        normal += (block * w[:, None]).T @ clean[:, :4]
        right += (block * w[:, None]).T @ clean[:, 4]
        kept.append(clean)
    covariance = np.linalg.inv(normal)
    estimate = covariance @ right
    residual = np.stack([clean[:, 4] - clean[:, :4] @ estimate for clean in kept]) / spread
    return np.asarray(estimate), np.asarray(covariance, dtype=np.float64), residual


@stage(
    makes="lines",
    needs={
        "lines": ("gradient", "line", "easting", "northing", "flag", "heading", "pitch", "roll")
    },
    adds=("removed_self", "sigma_self"),
    physics=self_gradient,
)
def remove_self_gradient(lines: xr.Dataset, settings: SelfGradientSettings) -> xr.Dataset:
    """Remove the aircraft's own attraction, a constant tensor in body axes, found by its headings.

    What no heading shows (zz, and xx + yy with it) is left in the readings as a constant, which
    ``level_lines`` with the datum "zero-mean" takes out.
    """
    survey.frame_of("lines", lines, "gradient", "enu", where="stage remove_self_gradient")
    names, line = np.unique(lines["line"].to_numpy().astype(str), return_inverse=True)
    easting, northing = lines["easting"].to_numpy(), lines["northing"].to_numpy()
    crossings = find_crossings(easting, northing, line)
    along = distance_along(easting, northing, line)
    difference, both = crossing_differences(
        crossings, along, line, survey.good(lines), settings.window
    )
    _enough(int(both.sum()), len(names))
    attitude = [lines[name].to_numpy() for name in ("heading", "pitch", "roll")]
    turning = body_to_enu(*attitude).on_components()
    found = self_gradient(
        lines["gradient"].to_numpy(), turning, difference, line, drift_sd=settings.drift_sd
    )
    patterns = turning @ SEPARABLE.T
    variance = np.einsum("nci,ij,ncj->nc", patterns, found.covariance, patterns)
    return survey.subtract(
        lines,
        "self",
        turning @ found.tensor,
        np.sqrt(variance),
        body_tensor=found.tensor,
        body_sigma=np.sqrt(np.diag(SEPARABLE.T @ found.covariance @ SEPARABLE)),
        misfit_before=found.misfit_before,
        misfit_after=found.misfit_after,
        not_separable="zz, and xx + yy = -zz",
    )


def _enough(crossings: int, lines: int) -> None:
    if crossings < max(lines // 2, 4):
        raise FitError(
            f"{lines} lines have only {crossings} crossings with readings on both sides",
            where="stage remove_self_gradient",
            cure="fly lines at several headings that cross, or leave this stage out",
        )
