"""The attraction of a terrain model to a tolerance in eotvos.

Heights stand at the centres of the cells of a rectilinear grid; the mass is a column of one density
per cell between a base and the height. Cells near the station are summed exactly, those further out
in blocks that grow with their distance. How fast they may grow is found for each call on a sample
of its own stations, so that the tolerance is kept on the terrain and the clearances at hand.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final, Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from gradred.errors import FitError, SurveyError
from gradred.newton.bodies import rows
from gradred.newton.columns import exact_sums, pyramid_sums
from gradred.units import EOTVOS, G

Array = NDArray[np.float64]
Surface = Literal["prism"]

_OPENINGS: Final = (
    1.5,
    2.0,
    2.5,
    3.0,
    4.0,
    5.0,
    6.0,
    8.0,
    10.0,
    12.0,
    16.0,
    20.0,
    24.0,
    32.0,
    48.0,
)
_SAMPLE: Final = 96
_SAFETY: Final = 2.0


@dataclass(frozen=True)
class Columns:
    """A terrain model: edges of the cells along x and y, and heights (rows along y), m."""

    edges_x: Array
    edges_y: Array
    heights: Array
    base: float

    @property
    def sides(self) -> tuple[Array, Array, Array, Array]:
        """West, east, south and north sides of columns and rows."""
        return self.edges_x[:-1], self.edges_x[1:], self.edges_y[:-1], self.edges_y[1:]


@dataclass(frozen=True)
class _Pyramid:
    """Blocks of columns, level by level, as ``pyramid_sums`` takes them."""

    shape: NDArray[np.int64]
    split: NDArray[np.int64]
    starts: NDArray[np.int64]
    sizes: Array
    edges_x: Array
    edges_y: Array
    blocks: Array


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


def _pyramid(model: Columns) -> _Pyramid:
    width, depth = np.diff(model.edges_x), np.diff(model.edges_y)
    area = depth[:, None] * width[None, :]
    volume = area * model.heights
    # sums over each block of area × height times 1, x, y and the height, about its own centre
    sums = [volume, np.zeros_like(volume), np.zeros_like(volume), volume * model.heights]
    ex, ey = model.edges_x, model.edges_y
    levels = [_level(ex, ey, *sums)]
    while max(len(ex), len(ey)) > 3:
        ex, ey, sums = _coarser(ex, ey, sums)
        levels.append(_level(ex, ey, *sums))
    counts = [[lines.shape[1], len(x), len(y)] for lines, _, x, y in levels]
    return _Pyramid(
        np.array([[len(y) - 1, len(x) - 1] for _, _, x, y in levels]),
        np.array([split for _, split, _, _ in levels]),
        np.concatenate([np.zeros((1, 3), np.int64), np.cumsum(counts, axis=0)[:-1]]),
        np.array([max(np.diff(x).max(), np.diff(y).max()) for _, _, x, y in levels]),
        np.concatenate([x for _, _, x, _ in levels]),
        np.concatenate([y for _, _, _, y in levels]),
        np.concatenate([lines for lines, _, _, _ in levels], axis=1),
    )


def _coarser(ex: Array, ey: Array, sums: list[Array]) -> tuple[Array, Array, list[Array]]:
    """Join blocks two by two; an odd last one stays alone."""
    bx, by = (np.append(edges[:-1:2], edges[-1]) for edges in (ex, ey))
    across, up = np.arange(0, len(ex) - 1, 2), np.arange(0, len(ey) - 1, 2)
    shift_x = _centres(ex) - np.repeat(_centres(bx), 2)[: len(ex) - 1]
    shift_y = _centres(ey) - np.repeat(_centres(by), 2)[: len(ey) - 1]
    volume, at_x, at_y, square = sums
    moved = [volume, at_x + volume * shift_x, at_y + volume * shift_y[:, None], square]
    joined = [np.add.reduceat(np.add.reduceat(part, across, axis=1), up, axis=0) for part in moved]
    return bx, by, joined


def _centres(edges: Array) -> Array:
    return np.asarray(0.5 * (edges[1:] + edges[:-1]))


def _level(
    ex: Array, ey: Array, volume: Array, at_x: Array, at_y: Array, square: Array
) -> tuple[Array, tuple[int, int], Array, Array]:
    """Return (7, lines) of one level, in how many lines a block is split, and its edges.

    Oblong blocks stand as two lines, set apart so that the second moments along both axes agree;
    what both axes share then acts as a lowering of the top.
    """
    width, depth = np.diff(ex)[None, :], np.diff(ey)[:, None]
    area = depth * width
    top = volume / area
    short = np.minimum(width, depth) ** 2 / 12.0
    lift = 0.5 * (square - volume * top) - 0.5 * area * short
    ratio = float(np.median(width) / np.median(depth))
    split = (1, 1) if 0.98 < ratio < 1.02 else ((2, 1) if ratio > 1.0 else (1, 2))
    if split == (1, 1):
        lift = 0.5 * (square - volume * top) - area * (width**2 + depth**2) / 48.0
    apart = np.sqrt(np.abs(width**2 - depth**2) / 12.0)
    x = np.broadcast_to(_centres(ex)[None, :], area.shape)
    y = np.broadcast_to(_centres(ey)[:, None], area.shape)
    parts = [x, y, area, top, at_x, at_y, lift]
    if split == (2, 1):
        parts = [np.repeat(part, 2, axis=1) for part in parts]
        parts[0] = parts[0] + np.repeat(apart, 2, axis=1) * np.tile([-1.0, 1.0], len(ex) - 1)
    elif split == (1, 2):
        # the lines of a row share one northing: the median of the level stands for its blocks
        parts = [np.repeat(part, 2, axis=0) for part in parts]
        shift = np.median(apart, axis=1, keepdims=True) * np.ones_like(area)
        sign = np.tile([-1.0, 1.0], len(ey) - 1)[:, None]
        parts[1] = parts[1] + np.repeat(shift, 2, axis=0) * sign
    count = split[0] * split[1]
    for n in (2, 4, 5, 6):
        parts[n] = parts[n] / count
    return np.stack([part.ravel() for part in parts]), split, ex, ey


def _sum(points: Array, model: Columns, pyramid: _Pyramid, opening: float) -> Array:
    out = np.empty((len(points), 6))
    pyramid_sums(
        points,
        *model.sides,
        model.heights,
        model.base,
        opening,
        pyramid.shape,
        pyramid.split,
        pyramid.starts,
        pyramid.sizes,
        pyramid.edges_x,
        pyramid.edges_y,
        pyramid.blocks,
        out,
    )
    return out


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


def _opening(points: Array, model: Columns, pyramid: _Pyramid, tolerance: float) -> float:
    """Return the smallest opening whose sums on the sample agree with those of twice the opening.

    Blocks' errors fall with the fourth power of the opening or faster, so that the doubled one
    stands for the truth; the tolerance is asked for with a factor of two to spare.
    """
    sample = _sample(points, model)
    for opening in _OPENINGS:
        rough, fine = (_sum(sample, model, pyramid, o) for o in (opening, 2.0 * opening))
        if _SAFETY * np.abs(rough - fine).max() <= tolerance:
            return opening
    raise FitError(
        f"a tolerance of {tolerance * EOTVOS / G:g} E kg/m3 is below what blocks can give",
        where="terrain sum",
        cure="ask for a larger tolerance, or use exact_terrain_tensor",
    )


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
        "prism": flat-topped cells.

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
    model, where = columns_of(heights, easting, northing, base), rows(points, 3, "points")
    if tolerance <= 0.0 or surface != "prism":
        raise SurveyError(
            f"tolerance {tolerance:g} E and surface {surface!r} cannot be served",
            where="terrain sum",
            cure="give a positive tolerance, and the surface 'prism'",
        )
    if density == 0.0 or len(where) == 0:
        return np.zeros((len(where), 6))
    scale = G * density / EOTVOS
    pyramid = _pyramid(model)
    opening = _opening(where, model, pyramid, tolerance / abs(scale))
    return scale * _sum(np.ascontiguousarray(where), model, pyramid, opening)


def exact_terrain_tensor(
    points: ArrayLike,
    heights: ArrayLike,
    easting: ArrayLike,
    northing: ArrayLike,
    *,
    density: float,
    base: float,
) -> Array:
    """Return the tensor of a terrain model, ``grid`` frame, (n, 6) E, by exact prisms throughout.

    Arguments as ``terrain_tensor``; 1e-10 of the largest column, at the cost of all pairs.
    """
    model, where = columns_of(heights, easting, northing, base), rows(points, 3, "points")
    out = np.empty((len(where), 6))
    exact_sums(np.ascontiguousarray(where), *model.sides, model.heights, model.base, out)
    return G * density / EOTVOS * out
