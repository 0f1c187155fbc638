"""A density model of many cells under the terrain, as simple as the noise allows."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final, Literal

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
from gradred.inversion.readings import StationReadings, station_readings
from gradred.inversion.roughness import blocky, roughness_of
from gradred.newton.bodies import prism_tensor
from gradred.newton.voxels import VoxelOperator
from gradred.reduction.crossings import distance_along
from gradred.stage import Cost, KilogramsPerCubicMetre, Metres, Settings, Sizes, progress, stage

Array = NDArray[np.float64]

_STEPS: Final = 400
_REST: Final = 3e-4
# by how much ln chi-squared rises with ln weight near the target, for a first guess: 0.1 to 0.3
_SLOPE: Final = 0.2
_BLOCKY_ROUNDS: Final = 6
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
    norm: Literal["smooth", "blocky"] = Field(
        "smooth",
        description="'smooth': squares of densities and their differences; 'blocky': their sizes, "
        "for bodies with edges",
    )
    depth_power: float = Field(
        0.0,
        ge=0,
        le=4,
        description="power of the depth by which the norm is relaxed downward: 0 suits readings of "
        "all components, more sinks the model and adds to its mass",
    )
    lowest: KilogramsPerCubicMetre = Field(
        -3000.0, ge=-6000, le=0, description="lowest density contrast of a cell"
    )
    highest: KilogramsPerCubicMetre = Field(
        3000.0, ge=0, le=6000, description="highest density contrast of a cell"
    )
    target: float = Field(
        0.95,
        ge=0.5,
        le=2.0,
        description="chi-squared per reading that the fit shall reach: below 1 by the share of the "
        "noise that the densities follow, 3 to 6 % for the demo survey",
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
    target: float = 0.95,
    rounds: int = 0,
) -> VoxelFit:
    r"""Fit densities between bounds to readings, with the weight of the norm by the misfit.

    .. math:: \min_ρ \sum \frac{(Γ_{obs} - A ρ - c)^2}{σ^2} + β |R ρ|^2, \quad
        β: \; χ^2 = n

    For each β the densities are found by conjugate gradients, and where these leave the bounds
    by a projected quasi-Newton search; β then follows the discrepancy principle. Where ``rounds``
    are asked for, R is made ``blocky`` that many times, and β found anew.

    Assumes that σ is the error: a wrong σ makes a model too rough or too smooth.

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
    rounds : int
        Of reweighting; 0 for a smooth model.

    Returns
    -------
    VoxelFit
        Its trials are those of the smooth model.

    Accuracy
    --------
    χ²/n within 0.01 of the target; each search to 3e-4 of the slope at no density. Excess mass
    within 1 km of the three bodies of the demo survey: 1.07 to 1.24 of the truth where smooth,
    0.85 to 1.0 where blocky; the centres of mass 120 to 180 m too deep, and within 75 m.

    Source
    ------
    Discrepancy principle: Morozov 1966, Soviet Mathematics Doklady 7, 414-417 (from memory);
    depth weighting and norm: Li and Oldenburg 1998, Geophysics 63, 109-119; search within bounds:
    Byrd, Lu, Nocedal and Zhu 1995, SIAM J. Scientific Computing 16, 1190-1208.

    Checked by
    ----------
    ``tests/inversion/test_voxels.py``: planted mass comes back, bounds hold, misfit as asked; the
    minimum against a direct solution.
    """
    normal = _Normal(operator, data, weights, roughness)
    bounds = (lowest, highest)
    density = np.zeros(operator.shape[1])
    balance = float(normal.sizes.sum() / max(normal.rough_sizes.sum(), 1e-300))
    density, trials = _to_target(
        normal, density, float(np.log(balance)) + 8.0, -2.0, bounds, target
    )
    log_weight = float(np.log(trials[-1][0]))
    chi_squared = trials[-1][1]
    for number in range(rounds):
        progress(number, rounds, "blocky norm")
        normal = _Normal(operator, data, weights, blocky(roughness, density))
        density, _ = _bounded(normal, density, float(np.exp(log_weight)), *bounds)
        change = np.log(target / normal.chi_squared(density)) / _SLOPE
        log_weight += float(np.clip(change, -1.0, 1.0))
    if rounds:
        density, ends = _to_target(normal, density, log_weight, -0.5, bounds, target)
        chi_squared = ends[-1][1]
    rest = normal.data - operator.forward(density)
    return VoxelFit(density, normal.level(rest), chi_squared, np.array(trials))


def _to_target(
    normal: _Normal,
    density: Array,
    log_weight: float,
    step: float,
    bounds: tuple[float, float],
    target: float,
) -> tuple[Array, list[tuple[float, float, float]]]:
    """Return the densities whose weight of the norm brings the misfit to its target, and trials."""
    trials: list[tuple[float, float, float]] = []
    low, high = -np.inf, np.inf
    for trial in range(_TRIALS):
        progress(trial, _TRIALS, "weight of the model norm")
        weight = float(np.exp(log_weight))
        density, rested = _bounded(normal, density, weight, *bounds)
        chi_squared = normal.chi_squared(density)
        trials.append((weight, chi_squared, normal.norm(density)))
        if abs(chi_squared - target) < _CLOSE:
            if not rested:
                raise FitError(
                    f"the densities had not come to rest after {_STEPS} steps",
                    where="stage fit_voxels",
                    cure="use larger cells, or look at sigma: it may be too small",
                )
            return density, trials
        if chi_squared > target:
            high = log_weight
        else:
            low = log_weight
        log_weight = _next(trials, low, high, step, target)
    raise FitError(
        f"chi-squared per reading stays at {trials[-1][1]:.2f} and does not reach {target:g}",
        where="stage fit_voxels",
        cure="look at sigma and at the bounds; a finer mesh or a wider one may be needed",
    )


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


def _bounded(
    normal: _Normal, start: Array, weight: float, lowest: float, highest: float
) -> tuple[Array, bool]:
    """Return the best densities for one weight within bounds, and whether they came to rest."""
    density, rested = _descend(normal, start, weight)
    if density.min() >= lowest and density.max() <= highest:
        return density, rested
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
        options={"maxiter": _STEPS, "maxcor": 20, "ftol": 1e-7},
    )
    return np.clip(found.x / scale, lowest, highest), bool(found.success)


def _descend(normal: _Normal, density: Array, weight: float) -> tuple[Array, bool]:
    """Solve by conjugate gradients, scaled by the diagonal; tell whether they came to rest."""
    size = normal.sizes + weight * normal.rough_sizes
    slope = normal.gradient(np.zeros_like(density), weight)
    enough = _REST**2 * float(slope @ (slope / size))
    rest = normal.gradient(density, weight)
    scaled = rest / size
    way, power = scaled.copy(), float(rest @ scaled)
    out = density.copy()
    for _ in range(_STEPS):
        if power <= enough:
            return out, True
        product = normal.product(way, weight)
        step = power / float(way @ product)
        out += step * way
        rest -= step * product
        scaled = rest / size
        power, last = float(rest @ scaled), power
        way = scaled + power / last * way
    return out, power <= enough


def averaged(used: StationReadings, spacing: float) -> tuple[Array, Array, Array]:
    """Return points, readings and their sd averaged along lines over stretches of a length, m.

    The noise falls with the root of the number of readings; what a line has in common stays.
    """
    along = distance_along(used.points[:, 0], used.points[:, 1], used.line)
    stretch = np.floor(along / spacing).astype(np.int64)
    _, group = np.unique(used.line * (stretch.max() + 1) + stretch, return_inverse=True)
    count = np.bincount(group).astype(np.float64)[:, None]

    def mean(values: Array) -> Array:
        return np.stack([np.bincount(group, column) for column in values.T], axis=1) / count

    spread = np.sqrt(mean(used.sigma**2) / count + mean(used.common**2))
    return mean(used.points), mean(used.readings), spread


def _forecast(settings: VoxelSettings, sizes: Sizes) -> Cost:
    side = 2.0 * settings.padding
    columns = (sizes["width"] / settings.cell + side) * (sizes["length"] / settings.cell + side)
    flown = sizes["lines"] * max(sizes["width"], sizes["length"])
    count = min(sizes["stations"], max(flown / settings.spacing, 1.0))
    entries = 6.0 * count * columns * settings.layers
    steps = 250.0 if settings.norm == "blocky" else 130.0
    # tensors at 30 ns an entry, both products of a step at 0.6 ns; then all stations once more
    seconds = entries * (3e-8 + 6e-10 * steps) + 2e-7 * sizes["stations"] * columns
    return Cost(2.0 + seconds, 4.2 * entries)


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
    """Fit the density contrast of a mesh under the terrain, as simple as the noise allows."""
    survey.frame_of("lines", lines, "gradient", "enu", where="stage fit_voxels")
    used = station_readings(lines, where="stage fit_voxels")
    at, data, spread = averaged(used, settings.spacing)
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
        rounds=_BLOCKY_ROUNDS if settings.norm == "blocky" else 0,
    )
    out = model if model is not None else survey.new("model", lines.attrs["crs"])
    out = _told(out, mesh, fit)
    everywhere = np.column_stack([lines[n].to_numpy() for n in ("easting", "northing", "height")])
    predicted = np.full((len(everywhere), 6), np.nan)
    whole = np.isfinite(everywhere).all(axis=1)
    predicted[whole] = prism_tensor(everywhere[whole], mesh.prisms, fit.density)
    constants = used.closed(fit.constants)
    level = np.broadcast_to(constants, predicted.shape)
    return with_predictions(out, lines, "voxels", predicted, level, constants=constants)


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
