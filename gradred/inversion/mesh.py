"""A mesh of prisms that hangs under the terrain."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from gradred.errors import FitError
from gradred.newton.heightfield import cell_edges

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Mesh:
    """Columns of cells: centres along easting and northing, tops and bottoms per layer, m.

    Layer 0 lies uppermost; ``tops`` and ``bottoms`` are (layers, rows, columns).
    """

    easting: Array
    northing: Array
    tops: Array
    bottoms: Array
    cell: float
    station_height: float

    @property
    def shape(self) -> tuple[int, int, int]:
        """Layers, rows, columns."""
        layers, rows, columns = self.tops.shape
        return layers, rows, columns

    @property
    def prisms(self) -> Array:
        """West, east, south, north, bottom, top of every cell, (m, 6), layer by layer."""
        half = 0.5 * self.cell
        y, x = np.meshgrid(self.northing, self.easting, indexing="ij")
        west, south = (np.broadcast_to(part, self.shape) for part in (x - half, y - half))
        sides = (west, west + self.cell, south, south + self.cell, self.bottoms, self.tops)
        return np.stack([side.ravel() for side in sides], axis=1)

    @property
    def volumes(self) -> Array:
        """Volume of every cell, m3."""
        return np.asarray(((self.tops - self.bottoms) * self.cell**2).ravel())

    @property
    def depth_below_stations(self) -> Array:
        """Depth of every cell's middle below the mean height of the stations, m, at least 1."""
        middle = 0.5 * (self.tops + self.bottoms)
        return np.maximum(self.station_height - middle, 1.0).ravel()


def mesh_under(
    terrain: xr.Dataset, points: Array, cell: float, depth: float, layers: int, padding: int
) -> Mesh:
    """Return a mesh under the terrain and the stations, ``padding`` columns beyond them.

    The top of a column is the mean height of the terrain inside it, so that no cell stands in
    air; each layer is 1.25 times as thick as the one above it. Terrain that does not reach as far
    as the padding is continued by its outermost cells.
    """
    axes = [
        (np.arange(np.floor(low / cell) - padding, np.ceil(high / cell) + padding) + 0.5) * cell
        for low, high in zip(points[:, :2].min(axis=0), points[:, :2].max(axis=0), strict=True)
    ]
    ground = _ground(terrain, axes[0], axes[1], cell)
    thickness = 1.25 ** np.arange(layers)
    below = np.concatenate([[0.0], np.cumsum(thickness)]) / thickness.sum() * depth
    tops = ground[None] - below[:-1, None, None]
    bottoms = ground[None] - below[1:, None, None]
    return Mesh(axes[0], axes[1], tops, bottoms, cell, float(points[:, 2].mean()))


def _ground(terrain: xr.Dataset, easting: Array, northing: Array, cell: float) -> Array:
    """Return the mean height of the terrain in each column, (rows, columns)."""
    heights = terrain["height"].to_numpy()
    if not np.isfinite(heights).all():
        raise FitError(
            f"{int(np.isnan(heights).sum())} terrain cells have no height",
            where="stage fit_voxels",
            cure="fill them in read_terrain, or cut the model to where it is whole",
        )
    weights = [
        _share(cell_edges(terrain[axis].to_numpy(), axis), centres, cell)
        for axis, centres in (("northing", northing), ("easting", easting))
    ]
    return np.asarray(weights[0] @ heights @ weights[1].T)


def _share(edges: Array, centres: Array, cell: float) -> Array:
    """Return (centres, terrain cells) shares of each column's width, summing to 1."""
    low = np.clip(centres - 0.5 * cell, edges[0], edges[-1] - 1e-6)
    high = np.clip(centres + 0.5 * cell, edges[0] + 1e-6, edges[-1])
    over = np.minimum(edges[None, 1:], high[:, None]) - np.maximum(edges[None, :-1], low[:, None])
    over = np.maximum(over, 0.0)
    return np.asarray(over / over.sum(axis=1, keepdims=True))
