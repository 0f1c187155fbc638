"""Where flight lines cross, and what was read there on either of them."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import combinations
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

Array = NDArray[np.float64]
Index = NDArray[np.intp]

_CHUNK: Final = 32


@dataclass(frozen=True)
class Crossings:
    """Places where two lines cross.

    ``stations`` (n, 2) is the last station before the crossing on each line, ``fraction`` (n, 2)
    how far the crossing lies towards that line's next station, ``following`` (n, 2) that next
    station, and ``line`` (n, 2) the numbers of the two lines.
    """

    stations: Index
    following: Index
    fraction: Array
    line: Index

    def __len__(self) -> int:
        return len(self.line)


def find_crossings(
    easting: Array, northing: Array, line: Index, *, angle: float = 20.0
) -> Crossings:
    """Return every place where two lines cross at more than an angle.

    Parameters
    ----------
    easting, northing : (n,) arrays
        Positions, m, in any plane frame.
    line : (n,) int array
        Number of the line of each station; stations of a line stand in flying order.
    angle : float
        Crossings below this angle, degrees, are left out: their place is ill determined.

    Returns
    -------
    Crossings
        In order of the line numbers.

    Accuracy
    --------
    The track is taken as straight between stations.

    Source
    ------
    Intersection of two segments by the two cross products; common practice, no source.

    Checked by
    ----------
    ``tests/reduction/test_crossings.py`` against a grid of straight lines.
    """
    tracks = [np.flatnonzero(line == number) for number in np.unique(line)]
    found = [
        _between(easting, northing, a, b, np.sin(np.radians(angle)))
        for a, b in combinations([t for t in tracks if len(t) > 1], 2)
    ]
    ends = np.concatenate([f[0] for f in found]) if found else np.empty((0, 4), np.intp)
    fraction = np.concatenate([f[1] for f in found]) if found else np.empty((0, 2))
    stations = ends[:, :2]
    return Crossings(stations, ends[:, 2:], fraction, line[stations].reshape(-1, 2).astype(np.intp))


def _between(x: Array, y: Array, a: Index, b: Index, least_sine: float) -> tuple[Index, Array]:
    """Return (n, 4) stations before and after, and (n, 2) fractions, of one pair of lines."""
    i, j = _candidates(x, y, a, b)
    ax, ay, bx, by = x[a[i]], y[a[i]], x[b[j]], y[b[j]]
    dx, dy = x[a[i + 1]] - ax, y[a[i + 1]] - ay
    ex, ey = x[b[j + 1]] - bx, y[b[j + 1]] - by
    cross = dx * ey - dy * ex
    with np.errstate(divide="ignore", invalid="ignore"):
        s = ((bx - ax) * ey - (by - ay) * ex) / cross
        t = ((bx - ax) * dy - (by - ay) * dx) / cross
        steep = np.abs(cross) > least_sine * np.hypot(dx, dy) * np.hypot(ex, ey)
    # half-open, so that a crossing exactly at a station counts once
    hit = steep & (s >= 0) & (s < 1) & (t >= 0) & (t < 1)
    ends = np.stack([a[i], b[j], a[i + 1], b[j + 1]], axis=1)[hit]
    return ends, np.stack([s, t], axis=1)[hit]


def _candidates(x: Array, y: Array, a: Index, b: Index) -> tuple[Index, Index]:
    """Return the pairs of segments whose chunks' bounding boxes meet."""
    boxes_a, starts_a = _boxes(x[a], y[a])
    boxes_b, starts_b = _boxes(x[b], y[b])
    meet = np.ones((len(starts_a), len(starts_b)), dtype=bool)
    for low, high in ((0, 1), (2, 3)):
        meet &= boxes_a[:, None, low] <= boxes_b[None, :, high]
        meet &= boxes_b[None, :, low] <= boxes_a[:, None, high]
    p, q = np.nonzero(meet)
    steps = np.arange(_CHUNK)
    i = (starts_a[p][:, None, None] + steps[None, :, None] + 0 * steps).ravel()
    j = (starts_b[q][:, None, None] + steps[None, None, :] + 0 * steps[:, None]).ravel()
    inside = (i < len(a) - 1) & (j < len(b) - 1)
    return i[inside], j[inside]


def _boxes(x: Array, y: Array) -> tuple[Array, Index]:
    starts = np.arange(0, len(x) - 1, _CHUNK)
    boxes = [
        (x[s : s + _CHUNK + 1].min(), x[s : s + _CHUNK + 1].max())
        + (y[s : s + _CHUNK + 1].min(), y[s : s + _CHUNK + 1].max())
        for s in starts
    ]
    return np.array(boxes), starts


def reading_weights(
    crossings: Crossings,
    side: int,
    along: Array,
    line: Index,
    good: NDArray[np.bool_],
    window: float,
) -> Any:
    r"""Return weights that estimate a quantity at each crossing from one line's own readings.

    A quadratic in distance along the line is fitted by least squares to the good readings within
    ``window`` of the crossing; with fewer than four of them it is a straight line, with one the
    reading itself. The weights add up to 1, so that a slow drift passes unchanged.

    Parameters
    ----------
    crossings : Crossings
        As ``find_crossings`` returns them.
    side : int
        0 or 1: which of the two lines.
    along : (n,) array
        Distance flown along the line, m.
    line : (n,) int array
        Number of the line of each station.
    good : (n,) bool array
        Stations that may be used.
    window : float
        Half width, m.

    Returns
    -------
    (crossings, n) sparse matrix
        A row of zeros where no good reading is near.

    Accuracy
    --------
    Exact for a field that is quadratic along the window; white noise is multiplied by the root of
    the sum of squares of the row.

    Source
    ------
    Savitzky and Golay 1964, Analytical Chemistry 36, 1627-1639, with unequal steps.

    Checked by
    ----------
    ``tests/reduction/test_crossings.py`` against polynomials.
    """
    rows: list[NDArray[Any]] = []
    columns: list[NDArray[Any]] = []
    weights: list[Array] = []
    before, after = crossings.stations[:, side], crossings.following[:, side]
    place = along[before] + crossings.fraction[:, side] * (along[after] - along[before])
    for number in np.unique(crossings.line[:, side]):
        stations = np.flatnonzero((line == number) & good)
        for row in np.flatnonzero(crossings.line[:, side] == number):
            offset = (along[stations] - place[row]) / window
            near = np.abs(offset) <= 1.0
            if not near.any():
                continue
            order = 2 if near.sum() > 3 else min(int(near.sum()) - 1, 1)
            basis = np.vander(offset[near], order + 1, increasing=True)
            rows.append(np.full(near.sum(), row))
            columns.append(stations[near])
            weights.append(np.linalg.pinv(basis)[0])
    shape = (len(crossings), len(line))
    if not rows:
        return sparse.csr_array(shape)
    entries = (np.concatenate(weights), (np.concatenate(rows), np.concatenate(columns)))
    return sparse.csr_array(entries, shape=shape)


def distance_along(easting: Array, northing: Array, line: Index) -> Array:
    """Return the distance flown since the first station of each line, m, (n,)."""
    out = np.zeros(len(line))
    for number in np.unique(line):
        stations = np.flatnonzero(line == number)
        steps = np.hypot(np.diff(easting[stations]), np.diff(northing[stations]))
        out[stations[1:]] = np.cumsum(steps)
    return out


def huber_weights(scaled: Array) -> Array:
    """Return the weights that bound the pull of an outlier, from residuals in standard deviations.

    Huber 1964, Annals of Mathematical Statistics 35, 73-101, with his constant 1.345 for 95 %
    efficiency under normal noise.
    """
    size = np.abs(scaled)
    return np.where(size <= 1.345, 1.0, 1.345 / np.maximum(size, 1.345))
