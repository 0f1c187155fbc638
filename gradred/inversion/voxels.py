"""A density model of many cells under the terrain, as smooth as the noise allows."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
import xarray as xr
from numpy.typing import NDArray
from pydantic import Field
from scipy import sparse
from scipy.optimize import Bounds, minimize

from gradred import survey
from gradred.errors import FitError
from gradred.inversion.bodies import with_predictions
from gradred.inversion.cautions import CAUTION
from gradred.inversion.mesh import Mesh, mesh_under
from gradred.inversion.readings import station_readings
from gradred.newton.bodies import prism_tensor
from gradred.newton.voxels import VoxelOperator
from gradred.reduction.crossings import distance_along
from gradred.stage import Cost, KilogramsPerCubicMetre, Metres, Settings, Sizes, progress, stage

Array = NDArray[np.float64]

_STEPS: Final = 80
_TRIALS: Final = 14
_CLOSE: Final = 0.01


class VoxelSettings(Settings):
    """Settings of the stage ``fit_voxels``."""

    cell: Metres = Field(200.0, ge=5, le=20_000, description="side of a column, m")
    depth: Metres = Field(
        1500.0, ge=10, le=100_000, description="depth of the mesh below the ground"
    )
    layers: int = Field(9, ge=2, le=60, description="layers, growing in thickness downward")
    padding: int = Field(2, ge=0, le=20, description="columns beyond the outermost stations")
    spacing: Metres = Field(
        100.0,
        ge=1,
        le=10_000,
        description="readings along a line are averaged over this distance before the fit",
    )
    smooth_length: Metres = Field(
        400.0, ge=1, le=50_000, description="distance over which the density is expected to change"
    )
    depth_power: float = Field(
        1.5,
        ge=0,
        le=4,
        description="power of the depth by which the norm is relaxed downward: less keeps the "
        "model at the ground, more sinks it",
    )
    lowest: KilogramsPerCubicMetre = Field(
        -3000.0, ge=-6000, le=0, description="lowest density contrast of a cell"
    )
    highest: KilogramsPerCubicMetre = Field(
        3000.0, ge=0, le=6000, description="highest density contrast of a cell"
    )
    target: float = Field(
        1.0, ge=0.5, le=2.0, description="chi-squared per reading that the fit shall reach"
    )


@dataclass(frozen=True)
class VoxelFit:
    """Densities (m,), constants (6,), chi-squared per reading, and the trade-off that led there.

    ``trials`` holds weight of the model norm, chi-squared per reading and model norm of each trial.
    """

    density: Array
    constants: Array
    chi_squared: float
    trials: Array


class _Normal:
    """The normal equations in scaled densities and constants, without their matrix."""

    def __init__(
        self, operator: VoxelOperator, data: Array, weights: Array, roughness: sparse.csr_array
    ) -> None:
        self.operator = operator
        self.data = data
        self.weights = weights
        self.roughness = roughness
        self.count = int(np.count_nonzero(weights))
        # constants are eliminated: data and columns are taken less their weighted means
        self.power = np.maximum((weights.reshape(-1, 6) ** 2).sum(axis=0), 1e-300)
        self.sizes = operator.sensitivity() ** 2
        self.rough_sizes = np.asarray((roughness**2).sum(axis=0)).ravel()

    def level(self, weighted: Array) -> Array:
        """Return the (6,) constants that fit weighted readings best."""
        total = (weighted * self.weights).reshape(-1, 6).sum(axis=0)
        return np.asarray(total / self.power)

    def centred(self, weighted: Array) -> Array:
        """Return weighted readings less their best constants."""
        constant = np.tile(self.level(weighted), len(weighted) // 6)
        return np.asarray(weighted - constant * self.weights)

    def misfit(self, density: Array) -> Array:
        return self.centred(self.data - self.operator.forward(density))

    def chi_squared(self, density: Array) -> float:
        return float(np.sum(self.misfit(density) ** 2)) / self.count

    def norm(self, density: Array) -> float:
        return float(np.sum((self.roughness @ density) ** 2))

    def gradient(self, density: Array, weight: float) -> Array:
        """Return half the slope of the objective, downhill."""
        pull = self.operator.adjoint(self.misfit(density))
        return np.asarray(pull - weight * (self.roughness.T @ (self.roughness @ density)))

    def product(self, move: Array, weight: float) -> Array:
        seen = self.operator.adjoint(self.centred(self.operator.forward(move)))
        return np.asarray(seen + weight * (self.roughness.T @ (self.roughness @ move)))


def fit_density(
    operator: VoxelOperator,
    data: Array,
    weights: Array,
    roughness: sparse.csr_array,
    *,
    lowest: float,
    highest: float,
    target: float = 1.0,
) -> VoxelFit:
    r"""Fit densities between bounds to readings, with the weight of the norm by the misfit.

    .. math:: \min_ρ \sum \frac{(Γ_{obs} - A ρ - c)^2}{σ^2} + β |R ρ|^2, \quad
        β: \; χ^2 = n

    For each β the densities are found by conjugate gradients, and where these leave the bounds
    by a projected quasi-Newton search; β then follows the discrepancy principle.

    Assumes that σ is the noise: a wrong σ makes a model too rough or too smooth.

    Parameters
    ----------
    operator : VoxelOperator
        A with rows weighted by 1/σ.
    data : (6 n,) array
        Weighted readings.
    weights : (6 n,) array
        1/σ of each, E⁻¹; 0 where there is none.
    roughness : (k, m) sparse array
        R.
    lowest, highest : float
        Bounds, kg/m3.
    target : float
        χ²/n.

    Returns
    -------
    VoxelFit

    Accuracy
    --------
    χ²/n within 0.01 of the target; each search to 1e-3 of the start's slope.

    Source
    ------
    Discrepancy principle: Morozov 1966, Soviet Mathematics Doklady 7, 414-417 (from memory);
    depth weighting and norm: Li and Oldenburg 1998, Geophysics 63, 109-119; search within bounds:
    Byrd, Lu, Nocedal and Zhu 1995, SIAM J. Scientific Computing 16, 1190-1208.

    Checked by
    ----------
    ``tests/inversion/test_voxels.py``: planted mass comes back, bounds hold, misfit as asked.
    """
    normal = _Normal(operator, data, weights, roughness)
    balance = float(normal.sizes.sum() / max(normal.rough_sizes.sum(), 1e-300))
    log_weight, step = float(np.log(balance)) + 8.0, -2.0
    density = np.zeros(operator.shape[1])
    trials: list[tuple[float, float, float]] = []
    low, high = -np.inf, np.inf
    for trial in range(_TRIALS):
        progress(trial, _TRIALS, "weight of the model norm")
        weight = float(np.exp(log_weight))
        density = _bounded(normal, density, weight, lowest, highest)
        chi_squared = normal.chi_squared(density)
        trials.append((weight, chi_squared, normal.norm(density)))
        if abs(chi_squared - target) < _CLOSE:
            break
        if chi_squared > target:
            high = log_weight
        else:
            low = log_weight
        log_weight = _next(trials, low, high, step, target)
    else:
        raise FitError(
            f"chi-squared per reading stays at {trials[-1][1]:.2f} and does not reach {target:g}",
            where="stage fit_voxels",
            cure="look at sigma and at the bounds; a finer mesh or a wider one may be needed",
        )
    rest = normal.data - operator.forward(density)
    return VoxelFit(density, normal.level(rest), chi_squared, np.array(trials))


def _next(
    trials: list[tuple[float, float, float]], low: float, high: float, step: float, target: float
) -> float:
    """Return the next logarithm of the weight: downward in steps, then between the two sides."""
    last = float(np.log(trials[-1][0]))
    if not np.isfinite(low):
        return last + step
    if not np.isfinite(high):
        return last - step
    x, y = np.log([t[0] for t in trials]), np.log([t[1] for t in trials])
    order = np.argsort(x)
    between = float(np.interp(np.log(target), np.maximum.accumulate(y[order]), x[order]))
    inner = 0.15 * (high - low)
    return float(np.clip(between, low + inner, high - inner))


def _bounded(normal: _Normal, start: Array, weight: float, lowest: float, highest: float) -> Array:
    """Return the best densities for one weight: free if that keeps the bounds, else within them."""
    density = _descend(normal, start, weight)
    if density.min() >= lowest and density.max() <= highest:
        return density
    scale = np.sqrt(normal.sizes + weight * normal.rough_sizes)

    def objective(scaled: Array) -> tuple[float, Array]:
        moved = scaled / scale
        misfit = normal.misfit(moved)
        rough = normal.roughness @ moved
        value = 0.5 * float(misfit @ misfit + weight * (rough @ rough))
        slope = weight * (normal.roughness.T @ rough) - normal.operator.adjoint(misfit)
        return value, np.asarray(slope / scale)

    found = minimize(
        objective,
        np.clip(density, lowest, highest) * scale,
        jac=True,
        method="L-BFGS-B",
        bounds=Bounds(lowest * scale, highest * scale),
        options={"maxiter": 3 * _STEPS, "maxcor": 20, "ftol": 1e-7},
    )
    return np.clip(found.x / scale, lowest, highest)


def _descend(normal: _Normal, density: Array, weight: float) -> Array:
    """Solve by conjugate gradients, scaled by the diagonal."""
    size = normal.sizes + weight * normal.rough_sizes
    rest = normal.gradient(density, weight)
    scaled = rest / size
    way, power = scaled.copy(), float(rest @ scaled)
    first, out = power, density.copy()
    for _ in range(_STEPS):
        if power <= 1e-6 * first or power == 0.0:
            break
        product = normal.product(way, weight)
        step = power / float(way @ product)
        out += step * way
        rest -= step * product
        scaled = rest / size
        power, last = float(rest @ scaled), power
        way = scaled + power / last * way
    return out


def roughness_of(mesh: Mesh, smooth_length: float, depth_power: float) -> sparse.csr_array:
    r"""Return R: size and differences of neighbouring cells, weighted down with depth.

    .. math:: |Rρ|^2 = \sum v\,w^2 \left(\frac{ρ^2 d^2}{L^2} + \sum_{nb} (Δρ)^2\right), \quad
        w^2 = \left(\frac{z}{z_0}\right)^{-p}

    with v the volume of a cell, d its side, z its depth below the stations and z0 that of the
    uppermost: depth weighting of Li and Oldenburg 1998, Geophysics 63, 109-119. Gradients of one
    station fall with the third power of the distance, the root of their squares over a plane of
    stations with the second; with p = 3 planted bodies sank below their depth, with 1 they rose,
    with 1.5 their mass came back best (``tests/inversion/test_voxels.py``).
    """
    layers, rows, columns = mesh.shape
    number = np.arange(layers * rows * columns).reshape(mesh.shape)
    depth = mesh.depth_below_stations
    weight = (depth / depth.min()) ** (-0.5 * depth_power)
    volume = np.sqrt(mesh.volumes / mesh.volumes.mean())
    size = sparse.diags_array(weight * volume * mesh.cell / smooth_length)
    parts = [sparse.csr_array(size)]
    for axis in range(3):
        first = number.take(range(mesh.shape[axis] - 1), axis=axis).ravel()
        second = number.take(range(1, mesh.shape[axis]), axis=axis).ravel()
        between = np.sqrt(weight[first] * weight[second] * volume[first] * volume[second])
        row = np.arange(len(first))
        entries = np.concatenate([between, -between])
        places = (np.concatenate([row, row]), np.concatenate([first, second]))
        parts.append(sparse.csr_array((entries, places), shape=(len(first), number.size)))
    return sparse.csr_array(sparse.vstack(parts))


def averaged(
    points: Array, readings: Array, sigma: Array, line: NDArray[np.intp], spacing: float
) -> tuple[Array, Array, Array]:
    """Return points, readings and their sd averaged along lines over stretches of a length, m."""
    along = distance_along(points[:, 0], points[:, 1], line)
    stretch = np.floor(along / spacing).astype(np.int64)
    _, group = np.unique(line * (stretch.max() + 1) + stretch, return_inverse=True)
    count = np.bincount(group).astype(np.float64)

    def mean(values: Array) -> Array:
        return (
            np.stack([np.bincount(group, column) for column in values.T], axis=1) / count[:, None]
        )

    spread = np.sqrt(mean(sigma**2) / count[:, None])
    return mean(points), mean(readings), spread


def _forecast(settings: VoxelSettings, sizes: Sizes) -> Cost:
    side = 2.0 * settings.padding
    columns = (sizes["width"] / settings.cell + side) * (sizes["length"] / settings.cell + side)
    flown = sizes["lines"] * max(sizes["width"], sizes["length"])
    count = min(sizes["stations"], max(flown / settings.spacing, 1.0))
    entries = 6.0 * count * columns * settings.layers
    # one product reads all entries at 20 GB/s; about 900 of them
    return Cost(5.0 + entries * 4.0 / 2e10 * 900.0, 4.2 * entries)


@stage(
    makes="model",
    needs={
        "lines": ("gradient", "sigma", "line", "height", "convergence", "flag"),
        "terrain": ("height",),
    },
    adds=(
        "voxel_density",
        "voxel_top",
        "voxel_bottom",
        "predicted_voxels",
        "residual_voxels",
        "chi_squared_voxels",
        "tradeoff_weight",
        "tradeoff_chi_squared",
        "tradeoff_roughness",
    ),
    physics=fit_density,
    forecast=_forecast,
)
def fit_voxels(
    lines: xr.Dataset,
    terrain: xr.Dataset,
    settings: VoxelSettings,
    model: xr.Dataset | None = None,
) -> xr.Dataset:
    """Fit the density contrast of a mesh under the terrain, as smooth as the noise allows."""
    survey.frame_of("lines", lines, "gradient", "enu", where="stage fit_voxels")
    used = station_readings(lines, where="stage fit_voxels")
    at, data, spread = averaged(used.points, used.readings, used.sigma, used.line, settings.spacing)
    weights = np.where(np.isfinite(data), 1.0 / spread, 0.0)
    mesh = mesh_under(
        terrain, used.points, settings.cell, settings.depth, settings.layers, settings.padding
    )
    progress(0.0, 1.0, "tensors of the mesh")
    operator = VoxelOperator(at, mesh.prisms, weights)
    fit = fit_density(
        operator,
        (np.nan_to_num(data) * weights).ravel(),
        weights.ravel(),
        roughness_of(mesh, settings.smooth_length, settings.depth_power),
        lowest=settings.lowest,
        highest=settings.highest,
        target=settings.target,
    )
    out = model if model is not None else survey.new("model", lines.attrs["crs"])
    out = _told(out, mesh, fit)
    everywhere = np.column_stack([lines[n].to_numpy() for n in ("easting", "northing", "height")])
    predicted = np.full((len(everywhere), 6), np.nan)
    whole = np.isfinite(everywhere).all(axis=1)
    predicted[whole] = prism_tensor(everywhere[whole], mesh.prisms, fit.density)
    level = np.broadcast_to(fit.constants, predicted.shape)
    return with_predictions(out, lines, "voxels", predicted, level, constants=fit.constants)


def _told(model: xr.Dataset, mesh: Mesh, fit: VoxelFit) -> xr.Dataset:
    out = model.assign_coords(
        cell_easting=survey.new("model", "", cell_easting=mesh.easting)["cell_easting"],
        cell_northing=survey.new("model", "", cell_northing=mesh.northing)["cell_northing"],
    )
    out = survey.put(
        "model",
        out,
        "voxel_density",
        fit.density.reshape(mesh.shape),
        caution=CAUTION,
        chi_squared=fit.chi_squared,
    )
    out = survey.put("model", out, "voxel_top", mesh.tops)
    out = survey.put("model", out, "voxel_bottom", mesh.bottoms)
    for column, name in enumerate(("weight", "chi_squared", "roughness")):
        out = survey.put("model", out, f"tradeoff_{name}", fit.trials[:, column])
    return out
