"""Where an equivalent layer and its map lie: the spacing of lines, the sources, the cells."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from gradred.errors import FitError

Array = NDArray[np.float64]


def line_spacing(easting: Array, northing: Array, line: NDArray[np.intp]) -> float:
    """Return the spacing of lines, m: the area that the stations cover over the length flown.

    The area is counted in 40 rows of the block, each from its westernmost to its easternmost
    station. It lacks half a spacing at either edge: a few per cent of a block of many lines.
    """
    length = 0.0
    for number in np.unique(line):
        here = line == number
        length += float(np.hypot(np.diff(easting[here]), np.diff(northing[here])).sum())
    area = 0.0
    edges = np.linspace(northing.min(), northing.max(), 41)
    row = np.clip(np.digitize(northing, edges) - 1, 0, 39)
    for number in range(40):
        here = easting[row == number]
        area += float(np.ptp(here)) * (edges[1] - edges[0]) if len(here) > 1 else 0.0
    return area / length if length > 0.0 and area > 0.0 else float("nan")


def source_grid(points: Array, spacing: float, depth: float) -> Array:
    """Return sources in the middle of a net of squares, ``depth`` below the flown surface.

    The net reaches two spacings, or one depth, beyond the stations, and only squares within that
    reach of a station hold a source.
    """
    reach = max(2.0 * spacing, depth)
    low, high = points[:, :2].min(axis=0) - reach, points[:, :2].max(axis=0) + reach
    axes = [np.arange(low[a] + 0.5 * spacing, high[a] + 0.5 * spacing, spacing) for a in (0, 1)]
    x, y = (part.ravel() for part in np.meshgrid(*axes))
    distance, nearest = cKDTree(points[:, :2]).query(np.column_stack([x, y]), k=8)
    near = np.asarray(distance)[:, 0] <= reach
    # the lowest of the eight nearest stations: no source above any of them
    surface = points[:, 2][np.asarray(nearest)].min(axis=1)
    return np.column_stack([x, y, surface - depth])[near]


@dataclass(frozen=True)
class Sheet:
    """The map: cell centres along both axes, heights (rows, columns), and cells near stations."""

    easting: Array
    northing: Array
    heights: Array
    covered: NDArray[np.bool_]

    @property
    def points(self) -> Array:
        """Centres of the covered cells (n, 3): easting, northing, height, m."""
        x, y = np.meshgrid(self.easting, self.northing)
        return np.column_stack([x.ravel(), y.ravel(), self.heights.ravel()])[self.covered.ravel()]


def clear_of(sheet: Sheet, sources: Array, spacing: float) -> tuple[Sheet, int]:
    """Return the sheet without the cells less than a spacing above the layer, and their number.

    Nearer than that the map would show single masses.
    """
    x, y = np.meshgrid(sheet.easting, sheet.northing)
    _, nearest = cKDTree(sources[:, :2]).query(np.column_stack([x.ravel(), y.ravel()]), k=4)
    top = sources[:, 2][np.asarray(nearest)].max(axis=1).reshape(x.shape)
    clear = sheet.heights >= top + spacing
    low = int(np.count_nonzero(sheet.covered & ~clear))
    if low == np.count_nonzero(sheet.covered):
        raise FitError(
            f"the map surface is nowhere {spacing:.0f} m above the sources, whose highest "
            f"stands at {sources[:, 2].max():.0f} m",
            where="stage map_field, surface",
            cure="map a higher surface: below the ground the field cannot be continued",
        )
    return replace(sheet, covered=sheet.covered & clear), low
