"""The attraction of a terrain model to a tolerance in eotvos.

Heights stand at the centres of the cells of a rectilinear grid; the mass is a column of one density
per cell between a base and the height. Cells near the station are summed exactly, those further out
in blocks that grow with their distance. How fast they may grow is found for each call on a sample
of its own stations, so that the tolerance is kept on the terrain and the clearances at hand.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Final, Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from gradred.errors import FitError, SurveyError
from gradred.newton.blocks import exact_sums, pyramid_sums
from gradred.newton.bodies import rows
from gradred.newton.pyramid import Pyramid, pyramid_of
from gradred.units import EOTVOS, MILLIGAL, G

Array = NDArray[np.float64]
Surface = Literal["prism", "bilinear"]

# fmt: off
_OPENINGS: Final = (1.5, 2.0, 2.5, 3.0, 3.5, 4.0, 5.0, 6.0, 8.0, 10.0, 12.0, 16.0, 20.0, 24.0, 32.0)
# fmt: on
_CUTS: Final = (4.0, 8.0, 16.0, 32.0)
_EXACT_CUTS: Final = 24.0
_SAMPLE: Final = 96
_SAFETY: Final = 2.0
_GROUP: Final = 16
_BITS: Final = 16
_SINGLE: Final = np.ones(1, dtype=np.float32)
_DOUBLE: Final = np.ones(1)
_FLOOR: Final = 0.004
"""E at 2670 kg/m3: below ten times what single precision leaves, the far field is double."""


@dataclass(frozen=True)
class Columns:
    """A terrain model: edges of the cells along x and y, and heights (rows along y), m."""

    edges_x: Array
    edges_y: Array
    heights: Array
    base: float


def cell_edges(centres: Array, what: str) -> Array:
    """Return the edges of cells midway between their centres; outer cells reach as far as inward.

    A single cell has no neighbour to tell its size and is refused by the terrain functions.
    """
    if centres.ndim != 1 or len(centres) < 2 or np.any(np.diff(centres) <= 0.0):
        raise SurveyError(
            f"{what} of the terrain cells must be two or more ascending numbers",
            where="terrain model",
            cure="turn the model so that row 0 is south and column 0 west; resample a single cell",
        )
    middle = 0.5 * (centres[1:] + centres[:-1])
    first, last = 2.0 * centres[0] - middle[0], 2.0 * centres[-1] - middle[-1]
    return np.concatenate([[first], middle, [last]])


def columns_of(heights: ArrayLike, easting: ArrayLike, northing: ArrayLike, base: float) -> Columns:
    """Return a terrain model checked for shape, order and missing cells."""
    field = np.ascontiguousarray(np.asarray(heights, dtype=np.float64))
    x, y = (np.asarray(axis, dtype=np.float64) for axis in (easting, northing))
    if field.shape != (len(y), len(x)):
        raise SurveyError(
            f"heights have the shape {field.shape} for {len(y)} northings and {len(x)} eastings",
            where="terrain model",
            cure="give one row per northing and one column per easting",
        )
    missing = int(np.count_nonzero(~np.isfinite(field)))
    if missing:
        raise SurveyError(
            f"{missing} of {field.size} terrain cells have no height",
            where="terrain model",
            cure="fill them or cut the model to where it is whole; a gap is not level ground",
        )
    return Columns(cell_edges(x, "eastings"), cell_edges(y, "northings"), field, float(base))


@dataclass(frozen=True)
class _Engine:
    """A terrain model made ready to be summed; ``cuts`` 0 stands for flat tops."""

    model: Columns
    pyramid: Pyramid
    unit: Any

    def sums(self, points: Array, opening: float, cuts: float, width: int = 6) -> Array:
        """Return (n, width) sums per unit G ρ: the tensor, and the attraction for a width of 9."""
        order, groups = grouped(points)
        out = np.empty((len(points), width))
        pyramid = self.pyramid
        pyramid_sums(
            points[order],
            groups,
            self.model.base,
            opening,
            cuts,
            self.unit,
            pyramid.heights,
            (pyramid.top, pyramid.skew_x, pyramid.skew_y, pyramid.spread),
            pyramid.shape,
            pyramid.split,
            pyramid.starts,
            pyramid.sizes,
            pyramid.edges_x,
            pyramid.edges_y,
            out,
        )
        unsorted = np.empty_like(out)
        unsorted[order] = out
        return unsorted


def grouped(points: Array) -> tuple[NDArray[np.intp], NDArray[np.int64]]:
    """Return an order of the stations along a Hilbert curve, and where its groups begin and end.

    Hilbert 1891, Mathematische Annalen 38, 459-460: neighbours on the curve are neighbours in the
    plane. The order of equal places is that of their heights, so that it does not matter how the
    stations were given.
    """
    side = 1 << _BITS
    low, span = points[:, :2].min(axis=0), max(float(np.ptp(points[:, :2], axis=0).max()), 1e-9)
    x, y = ((points[:, :2] - low) / span * (side - 1)).astype(np.int64).T
    key = np.zeros(len(points), dtype=np.int64)
    s = side >> 1
    while s:
        right, up = (x & s) > 0, (y & s) > 0
        key += s * s * ((3 * right) ^ up)
        # turn the quadrant so that the curve goes on
        flip = ~up & right
        x, y = np.where(flip, side - 1 - x, x), np.where(flip, side - 1 - y, y)
        x, y = np.where(up, x, y), np.where(up, y, x)
        s >>= 1
    order = np.lexsort((points[:, 2], points[:, 1], points[:, 0], key))
    starts = np.append(np.arange(0, len(points), _GROUP), len(points))
    return order, starts.astype(np.int64)


def _sample(points: Array, model: Columns) -> Array:
    """Return stations for the calibration: half spread evenly, half of the lowest above ground."""
    if len(points) <= _SAMPLE:
        return points
    even = np.linspace(0, len(points) - 1, _SAMPLE // 2).astype(np.intp)
    column = np.clip(np.searchsorted(model.edges_x, points[:, 0]) - 1, 0, None)
    row = np.clip(np.searchsorted(model.edges_y, points[:, 1]) - 1, 0, None)
    ground = model.heights[
        np.minimum(row, model.heights.shape[0] - 1), np.minimum(column, model.heights.shape[1] - 1)
    ]
    low = np.argsort(points[:, 2] - ground, kind="stable")[: _SAMPLE // 2]
    return np.asarray(points[np.unique(np.concatenate([even, low]))])


def _cuts(sample: Array, engine: _Engine, tolerance: float) -> float:
    """Return into how many pieces near cells must be cut for the bilinear surface."""
    for cuts in _CUTS:
        rough, fine = (engine.sums(sample, 4.0, c) for c in (cuts, 4.0 * cuts))
        # pieces' errors fall with the fourth power of their number, so that four times as many
        # stand for the truth
        if 1.5 * np.abs(rough - fine).max() <= tolerance:
            return cuts
    raise _beyond(tolerance)


def _opening(sample: Array, engine: _Engine, cuts: float, tolerance: float) -> float:
    """Return the smallest opening whose sums on the sample agree with those of twice the opening.

    Blocks' errors fall with the third power of the opening or faster, so that the doubled one
    stands for the truth; the tolerance is asked for with a factor of two to spare.
    """
    for opening in _OPENINGS:
        rough, fine = (engine.sums(sample, o, cuts) for o in (opening, 2.0 * opening))
        if _SAFETY * np.abs(rough - fine).max() <= tolerance:
            return opening
    raise _beyond(tolerance)


def _beyond(tolerance: float) -> FitError:
    return FitError(
        f"a tolerance of {tolerance * G * 2670.0 / EOTVOS:.2g} E at 2670 kg/m3 is below what "
        "blocks can give here",
        where="terrain sum",
        cure="ask for a larger tolerance, or use exact_terrain_tensor",
    )


def _summed(points: Array, model: Columns, tolerance: float, surface: Surface, width: int) -> Array:
    """Return (n, width) sums per unit G ρ to a tolerance of the tensor per unit G ρ."""
    bilinear = surface == "bilinear"
    pyramid = pyramid_of(model.edges_x, model.edges_y, model.heights, bilinear=bilinear)
    unit = _SINGLE if tolerance >= _FLOOR * EOTVOS / (G * 2670.0) else _DOUBLE
    engine = _Engine(model, pyramid, unit)
    sample = _sample(points, model)
    cuts = _cuts(sample, engine, tolerance / 3.0) if bilinear else 0.0
    share = 2.0 / 3.0 if bilinear else 1.0
    opening = _opening(sample, engine, cuts, share * tolerance)
    return engine.sums(points, opening, cuts, width)


def terrain_tensor(
    points: ArrayLike,
    heights: ArrayLike,
    easting: ArrayLike,
    northing: ArrayLike,
    *,
    density: float,
    base: float,
    tolerance: float,
    surface: Surface = "prism",
) -> Array:
    r"""Return the tensor of a terrain model in the ``grid`` frame, to a tolerance.

    .. math:: Γ = G ρ \sum_{cells} \nabla\nabla \int_{base}^{h} \frac{dv}{ℓ}

    with cells near the station as exact prisms, further ones in blocks with their moments up to
    second order in height and width. Where the surface lies below the base the column counts
    negative: with base 0 and a density contrast a sea floor is treated as it should be.

    Assumes a flat Earth, and no mass beyond the model.

    Parameters
    ----------
    points : (n, 3) array
        Easting, northing, height, m; also below or inside the terrain.
    heights : (rows, columns) array
        Surface at the cell centres, m, rows along northing; missing cells are refused.
    easting, northing : (columns,), (rows,) arrays
        Cell centres, ascending, m; spacing may vary.
    density : float
        kg/m3.
    base : float
        Height from which the columns stand, m.
    tolerance : float
        Largest error against the exact sum over all cells, E, in any component.
    surface : str
        "prism": flat-topped cells; "bilinear": the surface that is bilinear between the cell
        centres, and level beyond the outermost. The two differ by 0.5 E at 25 m cells and 80 m
        clearance.

    Returns
    -------
    (n, 6) array
        E.

    Accuracy
    --------
    The tolerance, found on a sample of the stations with a factor of two to spare; the run proves
    it on others against exact sums.

    Source
    ------
    Exact columns: Nagy, Papp and Benedek 2000, J. Geodesy 74, 552-560. Growing blocks: Barnes and
    Hut 1986, Nature 324, 446-449, here in one pass over a regular pyramid.

    Checked by
    ----------
    ``tests/newton/test_heightfield.py`` against exact sums over real terrain and closed forms.
    """
    return _terrain(points, heights, easting, northing, density, base, tolerance, surface, width=6)


def _terrain(
    points: ArrayLike,
    heights: ArrayLike,
    easting: ArrayLike,
    northing: ArrayLike,
    density: float,
    base: float,
    tolerance: float,
    surface: Surface,
    *,
    width: int,
) -> Array:
    model, where = columns_of(heights, easting, northing, base), rows(points, 3, "points")
    if tolerance <= 0.0 or surface not in ("prism", "bilinear"):
        raise SurveyError(
            f"tolerance {tolerance:g} E and surface {surface!r} cannot be served",
            where="terrain sum",
            cure="give a positive tolerance, and the surface 'prism' or 'bilinear'",
        )
    if density == 0.0 or len(where) == 0:
        return np.zeros((len(where), width))
    out = _summed(where, model, tolerance * EOTVOS / (G * abs(density)), surface, width)
    out[:, :6] *= G * density / EOTVOS
    out[:, 6:] *= G * density / MILLIGAL
    return out


def terrain_attraction(
    points: ArrayLike,
    heights: ArrayLike,
    easting: ArrayLike,
    northing: ArrayLike,
    *,
    density: float,
    base: float,
    tolerance: float,
    surface: Surface = "prism",
) -> tuple[Array, Array]:
    """Return tensor (n, 6) in E and gravity (n, 3) in mGal, ``grid`` frame, in one pass.

    Arguments as ``terrain_tensor``; the tolerance is that of the tensor; gravity is then good to
    some 0.1 mGal per E of it (measured: 0.004 mGal at 0.05 E).
    """
    out = _terrain(points, heights, easting, northing, density, base, tolerance, surface, width=9)
    return out[:, :6], out[:, 6:]


def terrain_gravity(
    points: ArrayLike,
    heights: ArrayLike,
    easting: ArrayLike,
    northing: ArrayLike,
    *,
    density: float,
    base: float,
    tolerance: float,
    surface: Surface = "prism",
) -> Array:
    """Return the gravity of a terrain model, (n, 3) mGal; arguments as ``terrain_attraction``."""
    return terrain_attraction(
        points,
        heights,
        easting,
        northing,
        density=density,
        base=base,
        tolerance=tolerance,
        surface=surface,
    )[1]


def exact_terrain_tensor(
    points: ArrayLike,
    heights: ArrayLike,
    easting: ArrayLike,
    northing: ArrayLike,
    *,
    density: float,
    base: float,
    surface: Surface = "prism",
) -> Array:
    """Return the tensor of a terrain model, ``grid`` frame, (n, 6) E, by exact prisms throughout.

    Arguments as ``terrain_tensor``; 1e-10 of the largest column for flat tops, at the cost of all
    pairs. The bilinear surface is made of pieces of a cell's side over 24 times its distance in
    sides, two along each axis at least: good to 1e-3 E where no piece is touched.
    """
    model, where = columns_of(heights, easting, northing, base), rows(points, 3, "points")
    cuts = _EXACT_CUTS if surface == "bilinear" else 0.0
    out = np.empty((len(where), 6))
    exact_sums(
        np.ascontiguousarray(where),
        model.edges_x,
        model.edges_y,
        model.heights,
        model.base,
        cuts,
        out,
    )
    return G * density / EOTVOS * out
