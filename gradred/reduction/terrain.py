"""The attraction of the terrain, along the lines, with the proof of its tolerance."""

from __future__ import annotations

from typing import Final, Literal

import numpy as np
import xarray as xr
from numpy.typing import NDArray
from pydantic import Field

from gradred import survey
from gradred.errors import FitError
from gradred.newton.heightfield import cell_edges, exact_terrain_tensor, terrain_tensor
from gradred.reduction.crossings import Array
from gradred.stage import Cost, Eotvos, KilogramsPerCubicMetre, Metres, Settings, Sizes, stage
from gradred.tensor import enu_to_grid
from gradred.units import EOTVOS, G

_SHARE: Final = np.sqrt([3 / 8, 1 / 8, 1 / 2, 3 / 8, 1 / 2, 1.0])
"""Standard deviation of each component over that of zz where the source is white in the plane: the
mean of cos⁴, cos² sin², cos², ... over all directions of the wave vector."""


class TerrainSettings(Settings):
    """Settings of the stage ``remove_terrain``."""

    density: KilogramsPerCubicMetre = Field(
        2670.0,
        ge=500,
        le=6000,
        description="density of the ground, kg/m3; rock is near 2670, or write '2.67 g/cm3'",
    )
    density_sd: KilogramsPerCubicMetre = Field(
        50.0, ge=0, le=1000, description="standard deviation of the density, kg/m3"
    )
    base: Metres = Field(
        0.0,
        ge=-11000,
        le=9000,
        description="ellipsoidal height from which the ground's mass is counted",
    )
    tolerance: Eotvos = Field(
        0.05, ge=0.0005, le=10, description="largest error of the sum against exact prisms, E"
    )
    surface: Literal["bilinear", "prism"] = Field(
        "bilinear",
        description="the ground between cell centres: bilinear, which is nearer to real ground by "
        "0.5 E at 25 m cells and 80 m clearance, or flat-topped cells",
    )
    height_sd: Metres = Field(
        1.0, ge=0, le=100, description="standard deviation of the terrain model, cell by cell"
    )
    margin: Metres = Field(
        0.0,
        ge=0,
        le=200_000,
        description="stations nearer than this to the model's edge are flagged",
    )
    proof: int = Field(
        50, ge=10, le=10_000, description="stations recomputed with exact prisms in every run"
    )
    seed: int = Field(1, ge=0, le=2**31, description="seed of the choice of those stations")


def height_noise(density: float, height_sd: float, cell: float, clearance: Array) -> Array:
    r"""Return what independent height errors of the cells make of a tensor, ``grid`` frame.

    .. math:: σ(Γ_{zz}) = G ρ σ_h d \sqrt{3π/4} / z^2

    and the other components in the ratios of a source that is white in the plane.

    Parameters
    ----------
    density : float
        kg/m3.
    height_sd : float
        σ_h of one cell, m.
    cell : float
        d, m.
    clearance : (n,) array
        z, m above the model.

    Returns
    -------
    (n, 6) array
        E.

    Accuracy
    --------
    0.1 % of a direct sum over cells at z = 4 d; for cells larger than z an upper bound.

    Source
    ------
    Sum of squared point-mass gradients over a plane; derived here, compared with the figures of
    Dransfield and Zeng 2009, Geophysics 74, I37-I42.

    Checked by
    ----------
    ``tests/reduction/test_terrain.py`` against a direct sum.
    """
    z = np.maximum(clearance, 0.5 * cell)
    zz = G * density * height_sd * cell * np.sqrt(0.75 * np.pi) / z**2 / EOTVOS
    return np.asarray(zz[:, None] * _SHARE)


def _forecast(settings: TerrainSettings, sizes: Sizes) -> Cost:
    # measured on two cores: 30 µs per station at 0.1 E, growing with the root of the tolerance
    each = 3e-5 * np.sqrt(max(0.1 / settings.tolerance, 0.1))
    pieces = 15.0 if settings.surface == "bilinear" else 1.0
    proof = settings.proof * sizes["terrain_cells"] * 1.5e-8 * pieces
    return Cost(1.0 + each * sizes["stations"] + proof, 250.0 * sizes["terrain_cells"])


@stage(
    makes="lines",
    needs={
        "lines": ("gradient", "height", "convergence", "flag"),
        "terrain": ("height",),
    },
    adds=("removed_terrain", "sigma_terrain", "terrain_height"),
    physics=terrain_tensor,
    forecast=_forecast,
)
def remove_terrain(lines: xr.Dataset, terrain: xr.Dataset, settings: TerrainSettings) -> xr.Dataset:
    """Remove the attraction of the ground between a base and the surface of the terrain model.

    Stations beyond the model, or within ``margin`` of its edge, are flagged. A random sample of
    stations is summed again with exact prisms; a run that breaks its tolerance is refused.
    """
    survey.frame_of("lines", lines, "gradient", "enu", where="stage remove_terrain")
    points = np.column_stack([lines[n].to_numpy() for n in ("easting", "northing", "height")])
    whole = np.isfinite(points).all(axis=1)
    ground = surface_below(terrain, points)
    tensor = np.full((len(points), 6), np.nan)
    tensor[whole] = _removed(points[whole], terrain, settings)
    proof = _proof(points[whole], tensor[whole], terrain, settings)
    to_enu = enu_to_grid(lines["convergence"].to_numpy()).inverse()
    amount = to_enu.tensor(tensor)
    cell = float(np.sqrt(_step(terrain, "easting") * _step(terrain, "northing")))
    rough = height_noise(settings.density, settings.height_sd, cell, points[:, 2] - ground)
    sigma = np.sqrt(
        (settings.density_sd / settings.density * amount) ** 2
        + np.nan_to_num(to_enu.spread(rough), nan=0.0) ** 2
        + settings.tolerance**2 / 9.0
    )
    out = survey.flag(lines, "outside_terrain_model", whole & ~_covered(terrain, points, settings))
    if "terrain_height" not in out:  # check_heights has told more about it
        out = survey.put("lines", out, "terrain_height", ground)
    return survey.subtract(
        out,
        "terrain",
        amount,
        sigma,
        density=settings.density,
        base=settings.base,
        surface=settings.surface,
        tolerance=settings.tolerance,
        **proof,
    )


def _sums(terrain: xr.Dataset) -> tuple[Array, Array, Array]:
    heights = terrain["height"].to_numpy()
    return heights, terrain["easting"].to_numpy(), terrain["northing"].to_numpy()


def _removed(points: Array, terrain: xr.Dataset, settings: TerrainSettings) -> Array:
    return terrain_tensor(
        points,
        *_sums(terrain),
        density=settings.density,
        base=settings.base,
        tolerance=settings.tolerance,
        surface=settings.surface,
    )


def _proof(
    points: Array, tensor: Array, terrain: xr.Dataset, settings: TerrainSettings
) -> dict[str, float | int]:
    random = np.random.default_rng(settings.seed)
    chosen = random.permutation(len(points))[: settings.proof]
    exact = exact_terrain_tensor(
        points[chosen],
        *_sums(terrain),
        density=settings.density,
        base=settings.base,
        surface=settings.surface,
    )
    error = np.abs(tensor[chosen] - exact)
    worst = float(error.max(initial=0.0))
    if worst > settings.tolerance:
        raise FitError(
            f"the terrain sum is off by {worst:.3g} E, more than {settings.tolerance:g} E",
            where=f"stage remove_terrain, {len(chosen)} stations summed again with exact prisms",
            cure="ask for a smaller tolerance, and report this: it should not happen",
        )
    rms = float(np.sqrt(np.mean(error**2))) if error.size else 0.0
    return {"proof_stations": len(chosen), "proof_max": worst, "proof_rms": rms}


def _step(terrain: xr.Dataset, axis: str) -> float:
    return float(np.median(np.diff(terrain[axis].to_numpy())))


def _covered(terrain: xr.Dataset, points: Array, settings: TerrainSettings) -> NDArray[np.bool_]:
    inside = np.ones(len(points), dtype=bool)
    for column, axis in enumerate(("easting", "northing")):
        edges = cell_edges(terrain[axis].to_numpy(), f"{axis}s")
        inside &= points[:, column] >= edges[0] + settings.margin
        inside &= points[:, column] <= edges[-1] - settings.margin
    return inside


def surface_below(terrain: xr.Dataset, points: Array) -> Array:
    """Return the (n,) height of the cell below each station, m; NaN outside the model."""
    heights, easting, northing = _sums(terrain)
    ex, ey = cell_edges(easting, "eastings"), cell_edges(northing, "northings")
    column = np.searchsorted(ex, points[:, 0], side="right") - 1
    row = np.searchsorted(ey, points[:, 1], side="right") - 1
    inside = (column >= 0) & (column < len(easting)) & (row >= 0) & (row < len(northing))
    out = np.full(len(points), np.nan)
    out[inside] = heights[row[inside], column[inside]]
    return out
