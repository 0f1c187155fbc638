"""The search for the parameters of bodies: residuals, their derivatives, standard errors."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Final, Literal

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import OptimizeResult, least_squares

from gradred.errors import FitError
from gradred.inversion.shapes import SHAPES, bounds_of, derivative_step_of, step_of
from gradred.stage import progress

Array = NDArray[np.float64]
Loss = Literal["squares", "soft"]
Regional = Literal["constant", "linear"]

_WHERE: Final = "stage fit_bodies"
_DEGENERATE: Final = 1e-7
_AT_BOUND: Final = 0.01
_BENDS: Final = 3


@dataclass(frozen=True)
class Body:
    """Start of a body: kind, parameters, which are free, their sd a priori (inf: none)."""

    kind: str
    start: Array
    free: NDArray[np.bool_]
    spread: Array

    @property
    def names(self) -> list[str]:
        """Names of the free parameters."""
        return [n for n, f in zip(SHAPES[self.kind].parameters, self.free, strict=True) if f]

    @property
    def steps(self) -> Array:
        """Steps of the free parameters, in their units."""
        units = SHAPES[self.kind].parameters.values()
        return np.array([step_of(u) for u, f in zip(units, self.free, strict=True) if f])

    def tensor(self, values: Array, points: Array) -> Array:
        """Return (n, 6) E, ``grid``."""
        return SHAPES[self.kind].tensor(values, points)

    def derivatives(self, values: Array, points: Array) -> Array:
        """Return (n, 6, free) derivatives of the tensor, E per unit of each free parameter.

        The contrast is a factor, its derivative the tensor of unit contrast; all others are
        central differences over a fixed step, wherever the start lies.
        """
        shape = SHAPES[self.kind]
        out = np.empty((len(points), 6, int(self.free.sum())))
        for column, number in enumerate(np.flatnonzero(self.free)):
            if number == len(values) - 1:
                out[..., column] = shape.unit_tensor(values, points)
                continue
            half = np.zeros(len(values))
            half[number] = derivative_step_of(list(shape.parameters.values())[number])
            rise = shape.unit_tensor(values + half, points)
            rise -= shape.unit_tensor(values - half, points)
            out[..., column] = values[-1] * rise / (2.0 * half[number])
        return out


@dataclass(frozen=True)
class Problem:
    """Readings, E, ``grid``, NaN where there is none, and the bodies to explain them."""

    points: Array
    readings: Array
    sigma: Array
    bodies: Sequence[Body]
    regional: Regional = "constant"

    @cached_property
    def steps(self) -> Array:
        """Steps of all free parameters; the search moves in them."""
        return np.concatenate([body.steps for body in self.bodies])

    @cached_property
    def names(self) -> list[str]:
        """Names of all free parameters."""
        return [f"{n} of body {k}" for k, body in enumerate(self.bodies, 1) for n in body.names]

    @cached_property
    def bounds(self) -> tuple[Array, Array]:
        """Lowest and highest moves, in steps from the start."""
        rows = []
        for body in self.bodies:
            values = body.start[body.free]
            rows += [
                [(edge - value) / step for edge in bounds_of(name)]
                for name, value, step in zip(body.names, values, body.steps, strict=True)
            ]
        edges = np.array(rows).reshape(-1, 2)
        return edges[:, 0], edges[:, 1]

    @cached_property
    def weights(self) -> Array:
        """1 / σ, (n, 6), E⁻¹; 0 where there is no reading."""
        return np.where(np.isfinite(self.readings), 1.0 / self.sigma, 0.0)

    @cached_property
    def prior(self) -> Array:
        """One over the sd a priori of each free parameter, in steps; 0 where there is none."""
        return np.concatenate([body.steps / body.spread[body.free] for body in self.bodies])

    def trend(self, points: Array) -> Array:
        """Return (n, 1 or 3) basis of the regional field: 1, and easting and northing in km."""
        one = np.ones((len(points), 1))
        if self.regional == "constant":
            return one
        return np.hstack([one, (points[:, :2] - self.points[:, :2].mean(axis=0)) / 1e3])

    @cached_property
    def _planes(self) -> list[Array]:
        """Orthonormal columns of the weighted regional basis, per component."""
        basis = self.trend(self.points)
        return [np.linalg.qr(basis * w[:, None])[0] for w in self.weights.T]

    def without_trend(self, weighted: Array) -> Array:
        """Return weighted (n, 6, ...) quantities less their best regional field."""
        out = np.empty_like(weighted)
        for c, plane in enumerate(self._planes):
            out[:, c] = weighted[:, c] - plane @ (plane.T @ weighted[:, c])
        return out

    def values(self, moved: Array) -> list[Array]:
        """Return the parameters of every body for moves in steps from the start."""
        cuts = np.cumsum([body.free.sum() for body in self.bodies])[:-1]
        out = []
        for body, move in zip(self.bodies, np.split(moved * self.steps, cuts), strict=True):
            values = body.start.copy()
            values[body.free] += move
            out.append(values)
        return out

    def tensor(self, values: Sequence[Array], points: Array) -> Array:
        """Return the (n, 6) sum of the bodies' tensors, E."""
        none = np.zeros((len(points), 6))
        pairs = zip(self.bodies, values, strict=True)
        return np.asarray(sum((body.tensor(v, points) for body, v in pairs), none))

    def coefficients(self, values: Sequence[Array]) -> Array:
        """Return (1 or 3, 6) coefficients of the regional field, E and E/km."""
        misfit = np.nan_to_num(self.readings) - self.tensor(values, self.points)
        basis = self.trend(self.points)
        found = [
            np.linalg.lstsq(basis * w[:, None], m * w, rcond=None)[0]
            for m, w in zip(misfit.T, self.weights.T, strict=True)
        ]
        return np.stack(found, axis=1)

    def residuals(self, moved: Array) -> Array:
        """Return (6 n + p,) scores: readings, then the free parameters against their prior."""
        misfit = np.nan_to_num(self.readings) - self.tensor(self.values(moved), self.points)
        scores = self.without_trend(misfit * self.weights).ravel()
        return np.concatenate([scores, self.prior * moved])

    def jacobian(self, moved: Array) -> Array:
        """Return (6 n + p, p) derivatives of ``residuals`` per step."""
        pairs = zip(self.bodies, self.values(moved), strict=True)
        slope = np.concatenate([b.derivatives(v, self.points) for b, v in pairs], axis=2)
        slope *= -self.weights[..., None] * self.steps
        own = self.without_trend(slope).reshape(-1, len(moved))
        return np.concatenate([own, np.diag(self.prior)])


def best_contrasts(problem: Problem, moved: Array) -> tuple[float, Array]:
    """Return the misfit and the moves with the free contrasts, which are linear, fitted to them."""
    columns, places, last = [], [], -1
    rest = np.nan_to_num(problem.readings)
    for body, values in zip(problem.bodies, problem.values(moved), strict=True):
        last += len(body.names)
        if body.free[-1]:
            columns.append(SHAPES[body.kind].unit_tensor(values, problem.points))
            places.append(last)
        else:
            rest = rest - body.tensor(values, problem.points)
    weighted = problem.without_trend(rest * problem.weights).ravel()
    if not columns:
        return float(weighted @ weighted), moved
    basis = problem.without_trend(np.stack(columns, axis=2) * problem.weights[..., None])
    design = basis.reshape(-1, len(columns))
    contrast = np.linalg.lstsq(design, weighted, rcond=None)[0]
    stated = [body.start[-1] for body in problem.bodies if body.free[-1]]
    out = moved.copy()
    out[places] = (contrast - stated) / problem.steps[places]
    return float(np.sum((weighted - design @ contrast) ** 2)), np.clip(out, *problem.bounds)


def search(problem: Problem, start: Array, rounds: int, loss: Loss) -> OptimizeResult:
    """Return the minimum next to ``start``, or refuse one that is not at rest within bounds."""
    done = 0

    def watched(moved: Array) -> Array:
        nonlocal done
        done += 1
        progress(min(done, rounds), rounds, "bodies")
        return problem.residuals(moved)

    found = least_squares(
        watched,
        start,
        jac=problem.jacobian,
        bounds=problem.bounds,
        loss="soft_l1" if loss == "soft" else "linear",
        max_nfev=rounds,
        xtol=1e-8,
        ftol=1e-10,
    )
    if not found.success:
        raise FitError(
            f"the search for the bodies had not come to rest after {rounds} evaluations",
            where=_WHERE,
            cure="start nearer, hold what the readings do not show, or allow more 'rounds'",
        )
    low, high = problem.bounds
    ended = np.minimum(found.x - low, high - found.x) < _AT_BOUND
    if ended.any():
        number = int(np.flatnonzero(ended)[0])
        name = problem.names[number]
        edge = bounds_of(name.split(" of ")[0])[int(found.x[number] - low[number] > _AT_BOUND)]
        raise FitError(
            f"{name} ended on its bound, {edge:g}: what it trades with has run away",
            where=_WHERE,
            cure="hold it, hold another parameter of the body at a nearer value, or start nearer",
        )
    return found


def covariance_of(problem: Problem, found: OptimizeResult, line: NDArray[np.intp]) -> Array:
    r"""Return the (p, p) covariance of the free parameters, each in its unit.

    .. math:: C = H^{-1} \left(\max(1, \tfrac{χ^2}{n - p}) H + \sum_{c,l,k} t_{ck} \,
        (J^T b_{lk}) (J^T b_{lk})^T\right) H^{-1}, \quad H = J^T J

    The second part is for errors that the readings of one line have in common, as drift leaves
    them: b are Legendre polynomials along line l, orthonormal, and t the amount by which the
    squared residual along them exceeds that of independent noise, from all lines of a component.
    """
    jacobian = found.jac
    inverse = _inverse(problem, jacobian)
    n = int(np.count_nonzero(problem.weights))
    reduced = float(np.sum(found.fun[: problem.weights.size] ** 2)) / (n - len(found.x))
    middle = max(1.0, reduced) * (jacobian.T @ jacobian)
    scores = found.fun[: problem.weights.size].reshape(-1, 6)
    slopes = jacobian[: problem.weights.size].reshape(-1, 6, len(found.x))
    along = [_along(np.flatnonzero(line == number)) for number in np.unique(line)]
    for c in range(6):
        for k in range(_BENDS):
            seen = [(at, basis[:, k]) for at, basis in along if k < basis.shape[1]]
            excess = sum(float(b @ scores[at, c]) ** 2 - max(1.0, reduced) for at, b in seen)
            common = max(0.0, excess) / sum(len(at) for at, _ in seen)
            if common > 0.0:
                for at, b in seen:
                    pull = np.sqrt(common * len(at)) * (b @ slopes[at, c])
                    middle += np.outer(pull, pull)
    return np.asarray(inverse @ middle @ inverse * np.outer(problem.steps, problem.steps))


def _along(at: NDArray[np.intp]) -> tuple[NDArray[np.intp], Array]:
    """Return the stations of a line, and orthonormal polynomials along them."""
    order = min(_BENDS, len(at))
    place = np.linspace(-1.0, 1.0, len(at)) if len(at) > 1 else np.zeros(1)
    return at, np.linalg.qr(np.polynomial.legendre.legvander(place, order - 1))[0]


def _inverse(problem: Problem, jacobian: Array) -> Array:
    """Return the inverse of H, or refuse parameters that cannot be told apart."""
    size = np.linalg.norm(jacobian, axis=0)
    blind = [name for name, s in zip(problem.names, size, strict=True) if s == 0.0]
    scaled = jacobian / np.where(size > 0.0, size, 1.0)
    values, vectors = np.linalg.eigh(scaled.T @ scaled)
    if blind or values[0] < _DEGENERATE * values[-1]:
        worst = np.argsort(-np.abs(vectors[:, 0]))[:2]
        told = blind or [problem.names[i] for i in sorted(worst)]
        raise FitError(
            f"the readings do not tell apart: {', '.join(told)}",
            where=_WHERE,
            cure="hold one of them at a value known from elsewhere, or state its 'sd'",
        )
    return np.asarray((vectors / values) @ vectors.T / np.outer(size, size))
