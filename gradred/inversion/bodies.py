"""A few simple bodies, fitted to the readings with standard errors."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Annotated, Any, Final

import numpy as np
import xarray as xr
from numpy.typing import NDArray
from pydantic import Field
from scipy.optimize import OptimizeResult

from gradred import survey
from gradred.errors import FitError
from gradred.inversion.cautions import CAUTION
from gradred.inversion.readings import StationReadings, station_readings
from gradred.inversion.search import (
    Body,
    Loss,
    Problem,
    Regional,
    best_contrasts,
    covariance_of,
    search,
)
from gradred.inversion.shapes import SHAPES, Start, derivative_step_of
from gradred.stage import Cost, Settings, Sizes, stage
from gradred.tensor import enu_to_grid

Array = NDArray[np.float64]

_WHERE: Final = "stage fit_bodies"
_ROUNDS: Final = 200
_SCATTER: Final = 10.0
_TRIES: Final = 10
_SAME: Final = 0.01
_MASS: Final = "excess mass [1e9 kg]"


class BodySettings(Settings):
    """Settings of the stage ``fit_bodies``."""

    bodies: list[Annotated[Start, Field(discriminator="kind")]] = Field(
        min_length=1, max_length=20, description="the bodies, each with its start values"
    )
    regional: Regional = Field(
        "constant",
        description="what is fitted to each component beside the bodies: 'constant', or 'linear', "
        "a plane over easting and northing",
    )
    loss: Loss = Field(
        "squares",
        description="'squares', or 'soft': residuals beyond one sd count by their size, so that "
        "outliers pull little",
    )
    starts: int = Field(
        1,
        ge=1,
        le=100,
        description="number of starts: the stated one, and the best of ten times as many by "
        "chance, within some 100 m and 10 degrees or the stated sd; the best end is kept",
    )
    seed: int = Field(1, ge=0, le=2**31, description="seed of the starts by chance")
    rounds: int = Field(_ROUNDS, ge=5, le=10_000, description="most evaluations of one search")


@dataclass(frozen=True)
class Fit:
    """Per body parameters with standard errors, and excess mass with its own, kg.

    ``regional`` holds (1 or 3, 6) coefficients, E and E/km; ``agreed`` counts the starts that
    ended at this minimum.
    """

    values: list[Array]
    errors: list[Array]
    masses: Array
    mass_errors: Array
    regional: Array
    chi_squared: float
    agreed: int


def fit_shapes(
    problem: Problem,
    line: NDArray[np.intp],
    *,
    loss: Loss = "squares",
    starts: int = 1,
    seed: int = 1,
    rounds: int = _ROUNDS,
) -> Fit:
    r"""Fit bodies and a regional field per component to readings in the ``grid`` frame.

    .. math:: \min_{p, c} \sum L\left(\frac{Γ_{obs} - Γ(p) - B c}{σ}\right)
        + \sum_j \left(\frac{p_j - p_j^0}{s_j}\right)^2

    by a trust region within bounds, with L(r) = r² or 2 (√(1 + r²) - 1). The regional field B c is
    linear and is eliminated at every step. Standard errors come from the Jacobian at the minimum,
    scaled by max(1, χ²/(n - p)), and widened by what the residuals show to be common to a line.

    Assumes that the bodies are of the stated kinds, that nothing else but the regional field is in
    the readings, and that noise is independent between lines and between components.

    Parameters
    ----------
    problem : Problem
        Points (n, 3), m; readings and their sd (n, 6), E; the bodies with start, free parameters
        and sd a priori, in m, degrees, kg/m3; kind of regional field.
    line : (n,) int array
        Number of the flight line of each reading.
    loss : "squares" or "soft"
        L.
    starts, seed : int
        How many searches, and the seed of all starts but the first.
    rounds : int
        Most evaluations of each.

    Returns
    -------
    Fit
        Standard errors are zero for what was held.

    Accuracy
    --------
    That of the standard errors, for bodies of the stated kind and what was held: over 60 seeds the
    errors of a sphere were 0.88 standard errors rms with independent noise, and 1.00 to 1.03 with
    drift of half to one sd of the noise left on the lines. The minimum found is the lowest of those
    next to the starts, not proven to be the lowest of all.

    Source
    ------
    Branch, Coleman and Li 1999, SIAM J. Scientific Computing 21, 1-23, as in scipy; elimination of
    the linear part: Golub and Pereyra 1973, SIAM J. Numerical Analysis 10, 413-432 (from memory).

    Checked by
    ----------
    ``tests/inversion/test_bodies.py``: planted bodies come back within their standard errors over
    many seeds, with independent noise and with drift left on the lines; derivatives in
    ``tests/inversion/test_search.py``.
    """
    ends = _ends(problem, starts, seed, rounds, loss)
    found = min(ends, key=lambda end: float(end.cost))
    values = problem.values(found.x)
    errors, masses, mass_errors = _spread(problem, values, covariance_of(problem, found, line))
    scores = found.fun[: problem.weights.size]
    return Fit(
        values,
        errors,
        masses,
        mass_errors,
        problem.coefficients(values),
        float(np.sum(scores**2)) / int(np.count_nonzero(problem.weights)),
        sum(end.cost - found.cost < _SAME for end in ends),
    )


def _ends(
    problem: Problem, starts: int, seed: int, rounds: int, loss: Loss
) -> list[OptimizeResult]:
    """Return the end of every search; of many, those that came to one, of none, its refusal."""
    ends: list[OptimizeResult] = []
    refusal: FitError | None = None
    for moved in _starts(problem, starts, np.random.default_rng(seed)):
        try:
            ends.append(search(problem, moved, rounds, loss))
        except FitError as error:
            refusal = refusal or error
    if refusal is not None and not ends:
        raise refusal
    return ends


def _starts(problem: Problem, starts: int, random: np.random.Generator) -> list[Array]:
    """Return the stated start, and the best of many by chance, whose contrasts are fitted first."""
    low, high = problem.bounds
    spread = np.where(problem.prior > 0.0, 1.0 / np.maximum(problem.prior, 1e-300), _SCATTER)
    tries = [
        best_contrasts(problem, np.clip(spread * random.normal(size=len(low)), low, high))
        for _ in range(_TRIES * (starts - 1))
    ]
    tries.sort(key=lambda found: found[0])
    return [np.zeros(len(low)), *(moved for _, moved in tries[: starts - 1])]


def _spread(
    problem: Problem, values: list[Array], covariance: Array
) -> tuple[list[Array], Array, Array]:
    """Return standard errors per body, and masses with theirs, kg."""
    cuts = np.cumsum([body.free.sum() for body in problem.bodies])
    errors, masses, mass_errors = [], [], []
    for body, own, last in zip(problem.bodies, values, cuts, strict=True):
        block = slice(last - body.free.sum(), last)
        error = np.zeros(len(own))
        error[body.free] = np.sqrt(np.diag(covariance)[block])
        slope = _mass_slope(body.kind, own)[body.free]
        errors.append(error)
        masses.append(own[-1] * SHAPES[body.kind].volume(own))
        mass_errors.append(float(slope @ covariance[block, block] @ slope) ** 0.5)
    return errors, np.array(masses), np.array(mass_errors)


def _mass_slope(kind: str, values: Array) -> Array:
    """Return the derivatives of the mass by the parameters, kg per unit of each."""
    shape = SHAPES[kind]
    out = np.zeros(len(values))
    out[-1] = shape.volume(values)
    for number, unit in enumerate(list(shape.parameters.values())[:-1]):
        half = np.zeros(len(values))
        half[number] = derivative_step_of(unit)
        rise = shape.volume(values + half) - shape.volume(values - half)
        out[number] = values[-1] * rise / (2.0 * half[number])
    return out


def _forecast(settings: BodySettings, sizes: Sizes) -> Cost:
    free = sum(len(SHAPES[b.kind].parameters) - len(b.hold) for b in settings.bodies)
    tensors = sizes["stations"] * (2.0 * free + len(settings.bodies))
    # 20 steps of 1.6 us per tensor; the Jacobian of 48 bytes an entry row, and its copies: measured
    return Cost(1.0 + settings.starts * 20.0 * 1.6e-6 * tensors, 1100.0 * sizes["stations"] * free)


@stage(
    makes="model",
    needs={"lines": ("gradient", "sigma", "line", "height", "convergence", "flag")},
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
    survey.frame_of("lines", lines, "gradient", "enu", where=_WHERE)
    used = station_readings(lines, where=_WHERE)
    bodies = [_body(number, start) for number, start in enumerate(settings.bodies, 1)]
    _enough(used, bodies)
    problem = Problem(used.points, used.readings, used.sigma, bodies, settings.regional)
    fit = fit_shapes(
        problem,
        used.line,
        loss=settings.loss,
        starts=settings.starts,
        seed=settings.seed,
        rounds=settings.rounds,
    )
    out = model if model is not None else survey.new("model", lines.attrs["crs"])
    out = _told(out, [body.kind for body in bodies], fit, settings.starts)
    everywhere = np.column_stack([lines[n].to_numpy() for n in ("easting", "northing", "height")])
    predicted = np.full((len(everywhere), 6), np.nan)
    whole = np.isfinite(everywhere).all(axis=1)
    predicted[whole] = problem.tensor(fit.values, everywhere[whole])
    level = problem.trend(everywhere) @ fit.regional
    about: dict[str, Any] = {"constants": fit.regional[0]}
    if settings.regional == "linear":
        about |= {"per_km_easting": fit.regional[1], "per_km_northing": fit.regional[2]}
    return with_predictions(out, lines, "bodies", predicted, level, **about)


def _body(number: int, start: Start) -> Body:
    names = list(SHAPES[start.kind].parameters)
    for key, stated in (("hold", set(start.hold)), ("sd", set(start.sd))):
        unknown = sorted(stated - set(names))
        if unknown:
            raise FitError(
                f"body {number}, a {start.kind}, has no parameter {unknown[0]!r}",
                where=f"{_WHERE}, {key}",
                cure=f"name some of: {', '.join(names)}",
            )
    return Body(
        start.kind,
        np.array([getattr(start, name) for name in names], dtype=np.float64),
        np.array([name not in start.hold for name in names]),
        np.array([start.sd.get(name, np.inf) for name in names]),
    )


def _enough(used: StationReadings, bodies: Sequence[Body]) -> None:
    free = sum(int(body.free.sum()) for body in bodies)
    if not free:
        raise FitError(
            "every parameter of every body is held: there is nothing to fit",
            where=f"{_WHERE}, hold",
            cure="free what the readings show, such as easting, northing and a height",
        )
    if used.count <= free + 18:
        raise FitError(
            f"{used.count} readings cannot tell {free} parameters and a regional field",
            where=_WHERE,
            cure="look at the flags of the lines, or hold more",
        )


def _told(model: xr.Dataset, kinds: Sequence[str], fit: Fit, starts: int) -> xr.Dataset:
    width = max(len(SHAPES[kind].parameters) for kind in kinds) + 1
    names = np.full((len(kinds), width), "", dtype=object)
    values, errors = (np.full((len(kinds), width), np.nan) for _ in range(2))
    for row, kind in enumerate(kinds):
        shape = SHAPES[kind].parameters
        n = len(shape)
        names[row, : n + 1] = [*(f"{name} [{unit}]" for name, unit in shape.items()), _MASS]
        values[row, : n + 1] = [*fit.values[row], fit.masses[row] / 1e9]
        errors[row, : n + 1] = [*fit.errors[row], fit.mass_errors[row] / 1e9]
    out = survey.put("model", model, "body_kind", np.array(kinds, dtype=object))
    out = survey.put("model", out, "body_parameter", names)
    about: dict[str, Any] = {"caution": CAUTION, "starts": starts, "starts_that_agree": fit.agreed}
    out = survey.put("model", out, "body_value", values, **about)
    return survey.put("model", out, "body_sigma", errors)


def with_predictions(
    model: xr.Dataset, lines: xr.Dataset, kind: str, predicted: Array, level: Array, **about: Any
) -> xr.Dataset:
    """Return a model with its predicted tensors, residuals and chi-squared at the stations.

    Parameters
    ----------
    model, lines : xr.Dataset
        The parts.
    kind : str
        "bodies" or "voxels".
    predicted : (station, 6) array
        E, ``grid``, of the masses alone.
    level : (station, 6) array
        Regional field that was fitted with them, E, ``grid``; the residuals are less it too.
    **about
        Attributes of the prediction.
    """
    to_enu = enu_to_grid(lines["convergence"].to_numpy()).inverse()
    there = to_enu.tensor(predicted)
    residual = lines["gradient"].to_numpy() - there - to_enu.tensor(level)
    good = survey.good(lines)
    scaled = residual[good] / lines["sigma"].to_numpy()[good]
    out = survey.put("model", model, f"predicted_{kind}", there, frame="enu", **about)
    out = survey.put("model", out, f"residual_{kind}", residual, frame="enu")
    return survey.put("model", out, f"chi_squared_{kind}", np.mean(scaled**2, axis=0))
