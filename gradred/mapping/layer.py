"""Harmonic gridding: one layer of masses below the ground that explains all components at once."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, Final, Literal

import numpy as np
import xarray as xr
from numpy.typing import NDArray
from pydantic import Field, model_validator
from scipy.interpolate import LinearNDInterpolator, NearestNDInterpolator, RegularGridInterpolator
from scipy.linalg import cho_factor, cho_solve, solve_triangular
from scipy.ndimage import uniform_filter
from scipy.optimize import minimize_scalar
from scipy.spatial import cKDTree

from gradred import survey
from gradred.errors import FitError, SurveyError
from gradred.mapping.layout import Sheet, clear_of, line_spacing, source_grid
from gradred.newton.layer import pull_rows, tensor_rows
from gradred.stage import Cost, Metres, Settings, Sizes, progress, stage
from gradred.tensor import enu_to_grid

Array = NDArray[np.float64]

_CHUNK: Final = 400
_LOOSE: Final = 1e4
"""E: standard deviation a priori of the constant of each component, which is left to the data."""

_LEVEL: Final = (
    "attraction of the masses of the layer alone: its constant, and what is longer than the block, "
    "are not told by gradients"
)


class MapSettings(Settings):
    """Settings of the stage ``map_field``."""

    cell: Metres = Field(100.0, ge=1, le=10_000, description="cell of the maps, m")
    surface: Literal["drape", "level", "flown"] = Field(
        "flown",
        description="map surface: 'drape' follows the terrain model, 'level' one height, 'flown' "
        "the heights of the stations",
    )
    clearance: Metres = Field(
        80.0, ge=0, le=5000, description="height of the drape above the terrain model"
    )
    height: Metres | None = Field(
        None,
        ge=-500,
        le=20_000,
        description="ellipsoidal height of the level surface; stated with it, and only with it",
    )
    spacing: Metres | None = Field(
        None,
        ge=1,
        le=10_000,
        description="distance between sources; half their depth where it is not given",
    )
    depth: Metres | None = Field(
        None,
        ge=1,
        le=50_000,
        description="depth of the sources below the flown surface; the line spacing and the "
        "clearance together where it is not given",
    )
    most: int = Field(
        9000, ge=100, le=30_000, description="largest number of sources; memory grows as its square"
    )

    @model_validator(mode="after")
    def _stated(self) -> MapSettings:
        if (self.surface == "level") != (self.height is not None):
            raise ValueError("state 'height' with a level surface, and only with it")
        return self


@dataclass(frozen=True)
class Layer:
    """Sources (m, 3), their masses and the constants (6,), and what tells their uncertainty.

    ``factor`` is the lower Cholesky factor of the posterior precision of masses and constants.
    """

    sources: Array
    masses: Array
    constants: Array
    factor: Array
    prior_sd: float
    evidence: float

    def tensor(self, points: Array) -> Array:
        """Return the (n, 6) tensor of the layer at points, E, ``grid``, without the constants."""
        return predict(self.sources, self.masses, points)

    def pull(self, points: Array) -> Array:
        """Return the (n,) vertical attraction at points, mGal, positive down."""
        return np.concatenate(
            [pull_rows(part, self.sources) @ self.masses for part in _parts(points)]
        )

    def sigma(self, rows: Array) -> Array:
        """Return the standard deviation of linear functions of the masses, given by (k, m) rows."""
        wide = np.zeros((rows.shape[1] + 6, len(rows)), order="F")
        wide[: rows.shape[1]] = rows.T
        half = solve_triangular(self.factor, wide, lower=True, overwrite_b=True, check_finite=False)
        return np.asarray(np.sqrt(np.einsum("mk,mk->k", half, half)))


def _parts(points: Array) -> list[Array]:
    return [points[first : first + _CHUNK] for first in range(0, len(points), _CHUNK)]


def predict(sources: Array, masses: Array, points: Array) -> Array:
    """Return the tensor of a layer of point masses at points, in the ``grid`` frame.

    Parameters
    ----------
    sources : (m, 3) array
        Easting, northing, height, m.
    masses : (m,) array
        In units of ``newton.layer.UNIT_MASS``, 1e9 kg.
    points : (n, 3) array
        Easting, northing, height, m; above the sources by their spacing or more.

    Returns
    -------
    (n, 6) array
        E; without the constants of the readings.
    """
    return np.concatenate([tensor_rows(part, sources) @ masses for part in _parts(points)])


def fit_layer(
    points: Array,
    readings: Array,
    sigma: Array,
    sources: Array,
    prior_sd: float | None = None,
) -> Layer:
    r"""Fit masses and one constant per component to readings in the ``grid`` frame.

    .. math:: \min_{m, c} \sum \frac{(Γ_{obs} - K m - c)^2}{σ^2} + \frac{|m|^2}{τ^2}

    with K the tensors of the masses at the stations' own positions. The strength τ a priori
    maximises the marginal likelihood of the readings; the inverse of the matrix of the normal
    equations is the covariance of masses and constants.

    Assumes sources below every station, and noise that is independent between readings.

    Parameters
    ----------
    points : (n, 3) array
        Easting, northing, height, m.
    readings : (n, 6) array
        E; NaN is left out.
    sigma : (n, 6) array
        Standard deviation of each, E.
    sources : (m, 3) array
        Easting, northing, height, m.
    prior_sd : float, optional
        τ, 1e9 kg; found from the readings where it is not given.

    Returns
    -------
    Layer

    Accuracy
    --------
    That of the posterior, as far as the noise is white and of the stated size; what is shorter
    than the spacing of the lines is not mapped, and no standard deviation tells what it was.

    Source
    ------
    Equivalent sources: Dampney 1969, Geophysics 34, 39-53; strength by marginal likelihood: MacKay
    1992, Neural Computation 4, 415-447.

    Checked by
    ----------
    ``tests/mapping/test_layer.py``: bodies in closed form, errors against their own deviations.
    """
    normal, right, power, count = _normal_equations(points, readings, sigma, sources)
    m = len(sources)

    def solved(log_prior: float) -> tuple[Any, Array, float]:
        matrix = normal.copy()
        strength = np.exp(-2.0 * log_prior)
        matrix[np.arange(m), np.arange(m)] += strength
        factor = cho_factor(matrix, lower=True, overwrite_a=True, check_finite=False)
        estimate = cho_solve(factor, right, check_finite=False)
        log_det = 2.0 * float(np.log(np.diag(factor[0])).sum())
        misfit = power - float(right @ estimate)
        return factor, estimate, 0.5 * (misfit + log_det + 2.0 * m * log_prior)

    if prior_sd is None:
        prior_sd = _likeliest(solved, normal, power / count)
    factor, estimate, value = solved(float(np.log(prior_sd)))
    lower = np.asarray(np.tril(factor[0]))
    return Layer(sources, estimate[:m], estimate[m:], lower, prior_sd, -value)


def _likeliest(
    solved: Callable[[float], tuple[Any, Array, float]], normal: Array, power: float
) -> float:
    """Return the strength a priori that maximises the marginal likelihood."""
    m = len(normal) - 6
    # readings of a few E from masses of unit order at the start; four decades on either side
    start = np.log(np.sqrt(max(power, 1.0) / max(np.trace(normal[:m, :m]) / m, 1e-300)))
    progress(0.5, 1.0, "strength of the layer")
    # the likelihood is flat within a tenth of its logarithm: 0.3 moves a map by 1 % of its sd
    found = minimize_scalar(
        lambda strength: solved(strength)[2],
        bounds=(start - 4.0, start + 8.0),
        method="bounded",
        options={"xatol": 0.3},
    )
    return float(np.exp(found.x))


def _normal_equations(
    points: Array, readings: Array, sigma: Array, sources: Array
) -> tuple[Array, Array, float, int]:
    """Return the matrix, the right side, the weighted power and the number of readings."""
    m = len(sources)
    normal, right = np.zeros((m + 6, m + 6)), np.zeros(m + 6)
    normal[np.arange(m, m + 6), np.arange(m, m + 6)] = _LOOSE**-2
    power, count = 0.0, 0
    for first in range(0, len(points), _CHUNK):
        part = slice(first, first + _CHUNK)
        progress(first, len(points), "normal equations of the layer")
        rows = np.zeros((len(points[part]), 6, m + 6))
        rows[:, :, :m] = tensor_rows(points[part], sources)
        rows[:, np.arange(6), m + np.arange(6)] = 1.0
        seen = np.isfinite(readings[part]) & np.isfinite(sigma[part])
        weight = np.where(seen, 1.0 / np.where(seen, sigma[part], 1.0), 0.0)
        scaled = (rows * weight[:, :, None]).reshape(-1, m + 6)
        data = (np.nan_to_num(readings[part]) * weight).ravel()
        normal += scaled.T @ scaled
        right += scaled.T @ data
        power += float(data @ data)
        count += int(np.count_nonzero(seen))
    return normal, right, power, count


def _line_spacing(lines: xr.Dataset, points: Array) -> float:
    """Return the spacing of the traverses; of all lines where no kind was delivered."""
    good = survey.good(lines)
    _, line = np.unique(lines["line"].to_numpy().astype(str)[good], return_inverse=True)
    chosen = np.ones(len(line), dtype=bool)
    if "kind" in lines and (lines["kind"].to_numpy()[good] == "traverse").any():
        chosen = lines["kind"].to_numpy()[good] == "traverse"
    return line_spacing(points[chosen, 0], points[chosen, 1], line[chosen])


def _sheet(points: Array, terrain: xr.Dataset | None, settings: MapSettings, reach: float) -> Sheet:
    cell = settings.cell
    axes = [
        np.arange(np.floor(points[:, a].min() / cell), np.ceil(points[:, a].max() / cell)) * cell
        + 0.5 * cell
        for a in (0, 1)
    ]
    x, y = np.meshgrid(*axes)
    near = cKDTree(points[:, :2]).query(np.column_stack([x.ravel(), y.ravel()]))[0]
    covered = np.asarray(near).reshape(x.shape) <= reach
    heights = _surface(points, x, y, terrain, settings)
    return Sheet(axes[0], axes[1], heights, covered & np.isfinite(heights))


def _surface(
    points: Array, x: Array, y: Array, terrain: xr.Dataset | None, settings: MapSettings
) -> Array:
    if settings.height is not None:
        return np.full(x.shape, settings.height)
    if settings.surface == "flown":
        linear = LinearNDInterpolator(points[:, :2], points[:, 2])(x, y)
        nearest = NearestNDInterpolator(points[:, :2], points[:, 2])(x, y)
        return np.asarray(np.where(np.isfinite(linear), linear, nearest))
    if terrain is None:
        raise SurveyError(
            "a drape needs a terrain model, and there is none",
            where="stage map_field, surface",
            cure="put read_terrain into the pipeline, or choose 'flown' or 'level'",
        )
    step = float(np.median(np.diff(terrain["easting"].to_numpy())))
    mean = uniform_filter(terrain["height"].to_numpy(), max(1, round(settings.cell / step)))
    axes = (terrain["northing"].to_numpy(), terrain["easting"].to_numpy())
    ground = RegularGridInterpolator(axes, mean, bounds_error=False)((y, x))
    return np.asarray(ground + settings.clearance)


def _forecast(settings: MapSettings, sizes: Sizes) -> Cost:
    length = sizes["lines"] * max(sizes["width"], sizes["length"], 1.0)
    apart = sizes["width"] * sizes["length"] / length
    spacing = settings.spacing or 0.5 * (settings.depth or apart + settings.clearance)
    count = (sizes["width"] / spacing + 6.0) * (sizes["length"] / spacing + 6.0)
    cells = sizes["width"] * sizes["length"] / settings.cell**2
    # products of matrices at 50 GFLOP/s: normal equations, 15 factors, posterior of 7 maps
    work = 12.0 * sizes["stations"] * count**2 + 5.0 * count**3 + 7.0 * cells * count**2
    return Cost(2.0 + work / 5e10, 24.0 * count**2 + 3e8)


@stage(
    makes="grid",
    needs={
        "lines": ("gradient", "sigma", "line", "height", "convergence", "flag"),
    },
    adds=(
        "gradient",
        "sigma",
        "gz",
        "sigma_gz",
        "surface",
        "residual",
        "residual_rms",
        "chi_squared",
        "datum",
    ),
    physics=fit_layer,
    forecast=_forecast,
)
def map_field(
    lines: xr.Dataset, settings: MapSettings, terrain: xr.Dataset | None = None
) -> xr.Dataset:
    """Map the field of all components together on a surface, by an equivalent layer.

    One constant per component belongs to the readings, not to the map. ``gz`` holds what the
    masses under the block explain: its level and what is longer than the block come from
    elsewhere. Cells further from a station than one and a half line spacings are missing.
    """
    survey.frame_of("lines", lines, "gradient", "enu", where="stage map_field")
    points, readings, sigma = used_readings(lines)
    apart = _line_spacing(lines, points) if len(points) else np.nan
    _enough(points, sigma, apart)
    depth = settings.depth or apart + _clearance(lines, settings)
    # two spacings above the layer the pattern of single masses has faded to exp(-4π), 3e-6
    spacing = settings.spacing or 0.5 * depth
    sources = source_grid(points, spacing, depth)
    _not_too_many(len(sources), settings, spacing)
    layer = fit_layer(points, readings, sigma, sources)
    sheet, low = clear_of(_sheet(points, terrain, settings, 1.5 * apart), sources, spacing)
    grid = survey.new("grid", lines.attrs["crs"], easting=sheet.easting, northing=sheet.northing)
    grid = _mapped(grid, sheet, layer)
    residual = readings - layer.tensor(points) - layer.constants
    everywhere = np.full((lines.sizes["station"], 6), np.nan)
    everywhere[survey.good(lines)] = residual
    grid = survey.put("grid", grid, "residual", everywhere, frame="grid")
    rms = np.sqrt(np.nanmean(residual**2, axis=0))
    grid = survey.put("grid", grid, "residual_rms", rms, frame="grid")
    grid = survey.put("grid", grid, "chi_squared", np.nanmean((residual / sigma) ** 2, axis=0))
    return survey.put(
        "grid",
        grid,
        "datum",
        layer.constants,
        frame="grid",
        sources=len(sources),
        source_spacing=spacing,
        line_spacing=apart,
        shortest_wavelength=2.0 * apart,
        surface_kind=settings.surface,
        missing_cells=int(np.count_nonzero(~sheet.covered)),
        cells_too_near_the_layer=low,
    )


def _clearance(lines: xr.Dataset, settings: MapSettings) -> float:
    """Return the clearance that was flown; the one of the settings where none was delivered."""
    if "clearance" not in lines or not np.isfinite(lines["clearance"]).any():
        return settings.clearance
    return float(np.nanmedian(lines["clearance"]))


def used_readings(lines: xr.Dataset) -> tuple[Array, Array, Array]:
    """Return points (n, 3), readings and sigma (n, 6) in the ``grid`` frame, good stations only.

    Where an element was completed by zero trace, zz holds nothing of its own and is left out.
    """
    good = survey.good(lines)
    points = np.column_stack([lines[n].to_numpy() for n in ("easting", "northing", "height")])
    turn = enu_to_grid(lines["convergence"].to_numpy()[good])
    readings = turn.tensor(lines["gradient"].to_numpy()[good])
    sigma = turn.spread(lines["sigma"].to_numpy()[good])
    if "completed" in lines["gradient"].attrs:
        readings[:, 5] = np.nan
    return points[good], readings, sigma


def _mapped(grid: xr.Dataset, sheet: Sheet, layer: Layer) -> xr.Dataset:
    points, shape = sheet.points, sheet.heights.shape

    def spread(values: Array) -> Array:
        whole = np.full((*shape, *values.shape[1:]), np.nan)
        whole[sheet.covered] = values
        return whole

    tensor, pull = layer.tensor(points), layer.pull(points)
    tensor_sd, pull_sd = np.empty((len(points), 6)), np.empty(len(points))
    for first in range(0, len(points), _CHUNK):
        progress(first, len(points), "standard deviation of the maps")
        part = slice(first, first + _CHUNK)
        rows = tensor_rows(points[part], layer.sources)
        tensor_sd[part] = layer.sigma(rows.reshape(-1, rows.shape[2])).reshape(-1, 6)
        pull_sd[part] = layer.sigma(pull_rows(points[part], layer.sources))
    grid = survey.put("grid", grid, "gradient", spread(tensor), frame="grid")
    grid = survey.put("grid", grid, "sigma", spread(tensor_sd), frame="grid")
    grid = survey.put("grid", grid, "gz", spread(pull), level=_LEVEL)
    grid = survey.put("grid", grid, "sigma_gz", spread(pull_sd))
    return survey.put("grid", grid, "surface", np.where(sheet.covered, sheet.heights, np.nan))


def _enough(points: Array, sigma: Array, apart: float) -> None:
    if len(points) < 50:
        raise FitError(
            f"only {len(points)} good stations are left to map",
            where="stage map_field",
            cure="look at the flags of the lines",
        )
    if not np.isfinite(apart):
        raise FitError(
            "the good stations cover no area",
            where="stage map_field",
            cure="a map needs two lines or more, beside each other",
        )
    known = sigma[np.isfinite(sigma)]
    if not len(known) or known.min() <= 0.0:
        raise SurveyError(
            f"the smallest of 'sigma' is {known.min(initial=0.0):g} E, but must be above 0",
            where="stage map_field",
            cure="put estimate_noise before this stage",
        )


def _not_too_many(sources: int, settings: MapSettings, spacing: float) -> None:
    if sources > settings.most:
        raise FitError(
            f"{sources} sources at {spacing:.0f} m are more than the {settings.most} allowed",
            where="stage map_field",
            cure=f"set a larger 'spacing', or 'most' ({24e-6 * sources**2:.0f} MB will be used)",
        )
