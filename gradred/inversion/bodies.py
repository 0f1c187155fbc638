"""A few simple bodies, fitted to the readings with standard errors."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Annotated, Final

import numpy as np
import xarray as xr
from numpy.typing import NDArray
from pydantic import Field
from scipy.optimize import OptimizeResult, least_squares

from gradred import survey
from gradred.errors import FitError
from gradred.inversion.cautions import CAUTION
from gradred.inversion.shapes import SHAPES, Start, bounds_of, step_of
from gradred.mapping.layer import used_readings
from gradred.stage import Cost, Settings, Sizes, progress, stage
from gradred.tensor import enu_to_grid

Array = NDArray[np.float64]

_ROUNDS: Final = 200
_DEGENERATE: Final = 1e-7


class BodySettings(Settings):
    """Settings of the stage ``fit_bodies``."""

    bodies: list[Annotated[Start, Field(discriminator="kind")]] = Field(
        min_length=1, max_length=20, description="the bodies, each with its start values"
    )
    rounds: int = Field(_ROUNDS, ge=5, le=10_000, description="most evaluations of the search")


@dataclass(frozen=True)
class Fit:
    """Parameters with their covariance, constants (6,), and chi-squared per reading."""

    values: list[Array]
    errors: list[Array]
    constants: Array
    chi_squared: float


@dataclass(frozen=True)
class _Problem:
    """Readings, and which numbers of which body are free."""

    points: Array
    readings: Array
    sigma: Array
    kinds: Sequence[str]
    start: list[Array]
    free: list[NDArray[np.bool_]]

    @property
    def steps(self) -> Array:
        units = [np.array([step_of(u) for u in SHAPES[k].parameters.values()]) for k in self.kinds]
        return np.concatenate([u[f] for u, f in zip(units, self.free, strict=True)])

    @property
    def names(self) -> list[str]:
        return [
            f"{name} of body {number}"
            for number, (kind, free) in enumerate(zip(self.kinds, self.free, strict=True), 1)
            for name, chosen in zip(SHAPES[kind].parameters, free, strict=True)
            if chosen
        ]

    def bodies(self, moved: Array) -> list[Array]:
        """Return the parameters of every body for moves in steps from the start."""
        moves = np.split(moved * self.steps, np.cumsum([f.sum() for f in self.free])[:-1])
        out = []
        for start, free, move in zip(self.start, self.free, moves, strict=True):
            values = start.copy()
            values[free] += move
            out.append(values)
        return out

    def tensor(self, bodies: list[Array], points: Array) -> Array:
        none = np.zeros((len(points), 6))
        parts = (SHAPES[k].tensor(v, points) for k, v in zip(self.kinds, bodies, strict=True))
        return np.asarray(sum(parts, none))

    def constants(self, misfit: Array) -> Array:
        """Return the weighted mean of a misfit per component: the best constant."""
        weight = np.where(np.isfinite(misfit), self.sigma**-2.0, 0.0)
        total = (np.nan_to_num(misfit) * weight).sum(axis=0)
        return np.asarray(total / np.maximum(weight.sum(axis=0), 1e-300))

    def residuals(self, moved: Array) -> Array:
        misfit = self.readings - self.tensor(self.bodies(moved), self.points)
        misfit = misfit - self.constants(misfit)
        return np.asarray((misfit / self.sigma)[np.isfinite(self.readings)])


def fit_shapes(
    points: Array,
    readings: Array,
    sigma: Array,
    kinds: Sequence[str],
    start: list[Array],
    free: list[NDArray[np.bool_]],
    *,
    rounds: int = _ROUNDS,
) -> Fit:
    r"""Fit bodies and one constant per component to readings in the ``grid`` frame.

    .. math:: \min_{p, c} \sum \left(\frac{Γ_{obs} - Γ(p) - c}{σ}\right)^2, \quad
        C = (J^T J)^{-1} \max(1, χ^2/n)

    by a trust region within bounds; the constants are eliminated at every step.

    Assumes that the bodies are of the stated kinds, that nothing else but a constant is in the
    readings, and that their noise is independent.

    Parameters
    ----------
    points : (n, 3) array
        Easting, northing, height, m.
    readings, sigma : (n, 6) arrays
        E; NaN is left out.
    kinds : sequence of str
        "sphere", "prism" or "sheet".
    start : list of (k,) arrays
        Parameters of each body in the order of ``SHAPES``; m, degrees, kg/m3.
    free : list of (k,) bool arrays
        Which of them are fitted.
    rounds : int
        Most evaluations.

    Returns
    -------
    Fit
        Standard errors are zero for what was held.

    Accuracy
    --------
    That of the standard errors, for bodies of the stated kind; the minimum found is the one next
    to the start.

    Source
    ------
    Branch, Coleman and Li 1999, SIAM J. Scientific Computing 21, 1-23, as in scipy; covariance of
    least squares.

    Checked by
    ----------
    ``tests/inversion/test_bodies.py``: planted bodies come back within their standard errors over
    many seeds.
    """
    problem = _Problem(points, readings, sigma, kinds, start, free)
    found = _search(problem, rounds)
    bodies = problem.bodies(found.x)
    chi_squared = float(np.mean(found.fun**2))
    spread = _errors(problem, found.jac) * np.sqrt(max(1.0, chi_squared))
    errors = []
    pieces = np.split(spread, np.cumsum([f.sum() for f in free])[:-1])
    for own, piece in zip(free, pieces, strict=True):
        error = np.zeros(len(own))
        error[own] = piece
        errors.append(error)
    constants = problem.constants(readings - problem.tensor(bodies, points))
    return Fit(bodies, errors, constants, chi_squared)


def _search(problem: _Problem, rounds: int) -> OptimizeResult:
    bounds = np.array(
        [
            [(edge - value) / step_of(unit) for edge in bounds_of(name)]
            for kind, start, free in zip(problem.kinds, problem.start, problem.free, strict=True)
            for (name, unit), value, chosen in zip(
                SHAPES[kind].parameters.items(), start, free, strict=True
            )
            if chosen
        ]
    )
    done = 0

    def watched(moved: Array) -> Array:
        nonlocal done
        done += 1
        progress(min(done, rounds), rounds, "bodies")
        return problem.residuals(moved)

    # a step of 1e-4 of 10 m, 1 degree or 20 kg/m3 changes a field of 100 E by 1e-3 E: six digits
    found = least_squares(
        watched,
        np.zeros(len(bounds)),
        jac="3-point",
        diff_step=np.full(len(bounds), 1e-4),
        bounds=(bounds[:, 0], bounds[:, 1]),
        max_nfev=rounds,
        xtol=1e-8,
        ftol=1e-10,
    )
    if not found.success:
        raise FitError(
            f"the search for the bodies had not come to rest after {rounds} evaluations",
            where="stage fit_bodies",
            cure="start nearer, hold what the readings do not show, or allow more 'rounds'",
        )
    return found


def _errors(problem: _Problem, jacobian: Array) -> Array:
    """Return the standard errors of the free parameters, or refuse what cannot be told apart."""
    size = np.linalg.norm(jacobian, axis=0)
    blind = [name for name, s in zip(problem.names, size, strict=True) if s == 0.0]
    scaled = jacobian / np.where(size > 0.0, size, 1.0)
    values, vectors = np.linalg.eigh(scaled.T @ scaled)
    if blind or values[0] < _DEGENERATE * values[-1]:
        worst = np.argsort(-np.abs(vectors[:, 0]))[:2]
        told = blind or [problem.names[i] for i in sorted(worst)]
        raise FitError(
            f"the readings do not tell apart: {', '.join(told)}",
            where="stage fit_bodies",
            cure="hold one of them at a value known from elsewhere",
        )
    covariance = (vectors / values) @ vectors.T
    return np.asarray(np.sqrt(np.diag(covariance)) / size * problem.steps)


def _forecast(settings: BodySettings, sizes: Sizes) -> Cost:
    free = sum(len(SHAPES[b.kind].parameters) - len(b.hold) for b in settings.bodies)
    each = sizes["stations"] * len(settings.bodies) * 2e-6
    return Cost(1.0 + 20.0 * 2.0 * free * each, 96.0 * sizes["stations"] * (free + 4))


@stage(
    makes="model",
    needs={"lines": ("gradient", "sigma", "height", "convergence", "flag")},
    adds=(
        "body_kind",
        "body_parameter",
        "body_value",
        "body_sigma",
        "predicted_bodies",
        "residual_bodies",
        "chi_squared_bodies",
    ),
    physics=fit_shapes,
    forecast=_forecast,
)
def fit_bodies(
    lines: xr.Dataset, settings: BodySettings, model: xr.Dataset | None = None
) -> xr.Dataset:
    """Fit spheres, prisms and dipping sheets to the readings of all components at once."""
    survey.frame_of("lines", lines, "gradient", "enu", where="stage fit_bodies")
    points, readings, sigma = used_readings(lines)
    kinds = [body.kind for body in settings.bodies]
    start = [
        np.array([getattr(b, name) for name in SHAPES[b.kind].parameters], dtype=np.float64)
        for b in settings.bodies
    ]
    free = [_free(number, body) for number, body in enumerate(settings.bodies, 1)]
    fit = fit_shapes(points, readings, sigma, kinds, start, free, rounds=settings.rounds)
    out = model if model is not None else survey.new("model", lines.attrs["crs"])
    out = _told(out, kinds, fit)
    everywhere = np.column_stack([lines[n].to_numpy() for n in ("easting", "northing", "height")])
    problem = _Problem(points, readings, sigma, kinds, start, free)
    predicted = np.full((len(everywhere), 6), np.nan)
    whole = np.isfinite(everywhere).all(axis=1)
    predicted[whole] = problem.tensor(fit.values, everywhere[whole])
    return with_predictions(out, lines, "bodies", predicted, fit.constants)


def _free(number: int, body: Start) -> NDArray[np.bool_]:
    names = list(SHAPES[body.kind].parameters)
    unknown = sorted(set(body.hold) - set(names))
    if unknown:
        raise FitError(
            f"body {number}, a {body.kind}, has no parameter {unknown[0]!r} to hold",
            where="stage fit_bodies, hold",
            cure=f"name some of: {', '.join(names)}",
        )
    return np.array([name not in body.hold for name in names])


def _told(model: xr.Dataset, kinds: Sequence[str], fit: Fit) -> xr.Dataset:
    width = max(len(SHAPES[kind].parameters) for kind in kinds)
    names = np.full((len(kinds), width), "", dtype=object)
    values, errors = (np.full((len(kinds), width), np.nan) for _ in range(2))
    for row, kind in enumerate(kinds):
        shape = SHAPES[kind].parameters
        names[row, : len(shape)] = [f"{name} [{unit}]" for name, unit in shape.items()]
        values[row, : len(shape)] = fit.values[row]
        errors[row, : len(shape)] = fit.errors[row]
    out = survey.put("model", model, "body_kind", np.array(kinds, dtype=object))
    out = survey.put("model", out, "body_parameter", names)
    out = survey.put("model", out, "body_value", values, caution=CAUTION)
    return survey.put("model", out, "body_sigma", errors)


def with_predictions(
    model: xr.Dataset, lines: xr.Dataset, kind: str, predicted: Array, constants: Array
) -> xr.Dataset:
    """Return a model with its predicted tensors, residuals and chi-squared at the stations.

    Parameters
    ----------
    model, lines : xr.Dataset
        The parts.
    kind : str
        "bodies" or "voxels".
    predicted : (station, 6) array
        E, ``grid``, without the constants.
    constants : (6,) array
        Of the readings, E, ``grid``.
    """
    to_enu = enu_to_grid(lines["convergence"].to_numpy()).inverse()
    there = to_enu.tensor(predicted)
    level = to_enu.tensor(np.broadcast_to(constants, predicted.shape))
    residual = lines["gradient"].to_numpy() - there - level
    good = survey.good(lines)
    scaled = residual[good] / lines["sigma"].to_numpy()[good]
    out = survey.put("model", model, f"predicted_{kind}", there, frame="enu", constants=constants)
    out = survey.put("model", out, f"residual_{kind}", residual, frame="enu")
    return survey.put("model", out, f"chi_squared_{kind}", np.mean(scaled**2, axis=0))
