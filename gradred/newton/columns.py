"""Compiled sums over the columns of a height field: exact ones near, whole blocks of them far.

Everything is per unit G ρ, with offsets from the station in metres. A block of columns is taken as
one vertical line of mass from its mean height downward without end; what lies below the base is
taken away again as one exact rectangle. With r = (X, Y, Z) from the station to the top of the line,

    Γ_zz = -Z/R³,  Γ_xz = -X/R³,  Γ_xx = X² k - g,  Γ_xy = X Y k,
    g = 1 / (R (R - Z)),  k = g² (2 - Z/R)

which follows by integrating the tensor of a point along z. The rest of the block's shape acts as a
dipole at the top: heights against position, the spread of heights, and the width of the block
(whose second horizontal derivatives are, for a harmonic function, the vertical one reversed).
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit, prange
from numpy.typing import NDArray

from gradred.newton.prism import middle_tensor, near_tensor

Array = NDArray[np.float64]
Index = NDArray[np.int64]

_TOUCHING = 1e-3


@njit(error_model="numpy", cache=True, fastmath={"reassoc", "contract"})
def _exact_row(
    x: float,
    z: float,
    y1: float,
    y2: float,
    west: Array,
    east: Array,
    top: Array,
    base: float,
    total: Array,
) -> None:
    """Add the columns of one row of cells by the prism's middle form, those touched left out."""
    xx = xy = xz = yy = yz = 0.0
    dy = max(max(y1, -y2), 0.0)
    for i in range(west.shape[0]):
        x1, x2 = west[i] - x, east[i] - x
        low, high = min(base, top[i]) - z, max(base, top[i]) - z
        side = max(max(x2 - x1, y2 - y1), high - low)
        dx = max(max(x1, -x2), 0.0)
        dz = max(max(low, -high), 0.0)
        clear = dx * dx + dy * dy + dz * dz
        holds = clear > _TOUCHING * _TOUCHING * side * side
        sign = 1.0 if top[i] > base else -1.0
        a, b, c, d, e, _ = middle_tensor(x1, x2, y1, y2, low, high)
        xx += sign * a if holds else 0.0
        xy += sign * b if holds else 0.0
        xz += sign * c if holds else 0.0
        yy += sign * d if holds else 0.0
        yz += sign * e if holds else 0.0
    total[0] += xx
    total[1] += xy
    total[2] += xz
    total[3] += yy
    total[4] += yz
    total[5] -= xx + yy


@njit(error_model="numpy", cache=True)
def _touched_row(
    x: float,
    z: float,
    y1: float,
    y2: float,
    west: Array,
    east: Array,
    top: Array,
    base: float,
    total: Array,
) -> None:
    """Add the few columns that the station touches or stands in, by the corner form."""
    dy = max(max(y1, -y2), 0.0)
    for i in range(west.shape[0]):
        x1, x2 = west[i] - x, east[i] - x
        low, high = min(base, top[i]) - z, max(base, top[i]) - z
        side = max(max(x2 - x1, y2 - y1), high - low)
        dx = max(max(x1, -x2), 0.0)
        dz = max(max(low, -high), 0.0)
        if dx * dx + dy * dy + dz * dz > _TOUCHING * _TOUCHING * side * side or low == high:
            continue
        sign = 1.0 if top[i] > base else -1.0
        part = near_tensor(x1, x2, y1, y2, low, high)
        for c in range(6):
            total[c] += sign * part[c]


@njit(error_model="numpy", cache=True)
def exact_window(
    x: float,
    y: float,
    z: float,
    west: Array,
    east: Array,
    south: Array,
    north: Array,
    heights: Array,
    base: float,
    window: tuple[int, int, int, int],
    total: Array,
) -> None:
    """Add the tensor of the columns of rows [j0, j1) and columns [i0, i1) of the cells."""
    i0, i1, j0, j1 = window
    for j in range(j0, j1):
        y1, y2 = south[j] - y, north[j] - y
        row = heights[j, i0:i1]
        _exact_row(x, z, y1, y2, west[i0:i1], east[i0:i1], row, base, total)
        _touched_row(x, z, y1, y2, west[i0:i1], east[i0:i1], row, base, total)


@njit(error_model="numpy", cache=True, fastmath={"reassoc", "contract"})
def _block_row(
    x: float,
    z: float,
    y: float,
    east: Array,
    area: Array,
    top: Array,
    skew_x: Array,
    skew_y: Array,
    lift: Array,
    total: Array,
) -> None:
    """Add one row of blocks, each as a line of mass with a dipole at its top."""
    xx = xy = xz = yy = yz = 0.0
    for i in range(east.shape[0]):
        X = east[i] - x
        Z = top[i] - z
        s2 = X * X + y * y
        r2 = s2 + Z * Z
        r = math.sqrt(r2)
        # R - Z loses its digits under a summit far above: s²/(R + Z) is the same number
        below = r + abs(Z)
        gap = below if Z <= 0.0 else s2 / below
        inverse = 1.0 / (r2 * gap)
        u = gap * inverse  # 1/R²
        g = r * inverse
        w = r * u * u  # 1/R³
        k = g * g * (2.0 - Z * r * u)
        mass = area[i]
        along = skew_x[i] * X + skew_y[i] * y + lift[i] * Z
        p5 = 3.0 * w * u
        p7 = 5.0 * p5 * u * along
        mk = mass * k
        diagonal = p5 * along - mass * g
        xx += mk * X * X + diagonal + 2.0 * p5 * skew_x[i] * X - p7 * X * X
        yy += mk * y * y + diagonal + 2.0 * p5 * skew_y[i] * y - p7 * y * y
        xy += mk * X * y + p5 * (skew_x[i] * y + skew_y[i] * X) - p7 * X * y
        xz += p5 * (skew_x[i] * Z + lift[i] * X) - p7 * X * Z - mass * w * X
        yz += p5 * (skew_y[i] * Z + lift[i] * y) - p7 * y * Z - mass * w * y
    total[0] += xx
    total[1] += xy
    total[2] += xz
    total[3] += yy
    total[4] += yz
    total[5] -= xx + yy


@njit(error_model="numpy", cache=True)
def _strip(x: float, y: float, z: float, r: float) -> float:
    """Return what a corner gives to the solid angle of an upright face that goes down forever."""
    side = math.copysign(1.0, x)
    return math.atan2(side * y * z, abs(x) * r) + math.atan2(side * y, abs(x))


@njit(error_model="numpy", cache=True)
def _corner(x: float, y: float, z: float, sign: float, total: Array) -> None:
    """Add one corner of a rectangle of mass from height z downward without end."""
    r = math.sqrt(x * x + y * y + z * z)
    total[0] -= sign * _strip(x, y, z, r)
    total[3] -= sign * _strip(y, x, z, r)
    total[5] -= sign * math.atan2(x * y * math.copysign(1.0, z), abs(z) * r)
    # under an edge the logarithm has no bound: the value a tenth of a millimetre beside it
    s2 = max(x * x + y * y, 1e-8)
    across = max(x * x + z * z, 1e-8)
    aside = max(y * y + z * z, 1e-8)
    total[1] += sign * (math.log((r + z) / s2) if z > 0.0 else -math.log(r - z))
    total[2] += sign * (math.log(r + y) if y > 0.0 else math.log(across / (r - y)))
    total[4] += sign * (math.log(r + x) if x > 0.0 else math.log(aside / (r - x)))


@njit(error_model="numpy", cache=True)
def endless_rectangle(
    x1: float, x2: float, y1: float, y2: float, z: float, sign: float, total: Array
) -> None:
    """Add the tensor of a rectangle of mass from height z downward without end."""
    _corner(x2, y2, z, sign, total)
    _corner(x1, y2, z, -sign, total)
    _corner(x2, y1, z, -sign, total)
    _corner(x1, y1, z, sign, total)


@njit(error_model="numpy", cache=True)
def _around(x: float, edges: Array, reach: float, low: int, high: int) -> tuple[int, int]:
    """Return the range of blocks within reach of x, widened to hold the range [low, high)."""
    count = edges.shape[0] - 1
    first = min(max(np.searchsorted(edges, x - reach, side="right") - 1, 0), count)
    last = max(min(np.searchsorted(edges, x + reach, side="left"), count), first)
    if high > low:
        return min(first, low), max(last, high)
    return first, last


@njit(error_model="numpy", cache=True)
def _level_edges(edges: Array, starts: Index, level: int, count: int) -> Array:
    return edges[starts[level] : starts[level] + count + 1]


@njit(error_model="numpy", cache=True)
def _ring(
    x: float,
    y: float,
    z: float,
    inner: tuple[int, int, int, int],
    outer: tuple[int, int, int, int],
    columns: int,
    split: Index,
    first: int,
    blocks: Array,
    total: Array,
) -> None:
    """Add the blocks of one level inside the outer and outside the inner range of indices."""
    i0, i1, j0, j1 = inner
    o0, o1, q0, q1 = outer
    wide, high = split[0], split[1]
    for j in range(q0 * high, q1 * high):
        row = first + j * columns * wide
        if j0 * high <= j < j1 * high:
            _blocks(x, y, z, blocks, row + o0 * wide, row + i0 * wide, total)
            _blocks(x, y, z, blocks, row + i1 * wide, row + o1 * wide, total)
        else:
            _blocks(x, y, z, blocks, row + o0 * wide, row + o1 * wide, total)


@njit(error_model="numpy", cache=True)
def _blocks(
    x: float, y: float, z: float, blocks: Array, first: int, last: int, total: Array
) -> None:
    """Add the lines [first, last) of one row, which share their northing."""
    if last > first:
        part = blocks[:, first:last]
        _block_row(
            x, z, part[1, 0] - y, part[0], part[2], part[3], part[4], part[5], part[6], total
        )


@njit(parallel=True, error_model="numpy", cache=True)
def pyramid_sums(
    points: Array,
    west: Array,
    east: Array,
    south: Array,
    north: Array,
    heights: Array,
    base: float,
    opening: float,
    shape: Index,
    split: Index,
    starts: Index,
    sizes: Array,
    edges_x: Array,
    edges_y: Array,
    blocks: Array,
    out: Array,
) -> None:
    """Fill (n, 6) sums per unit G ρ: exact columns within reach, coarser blocks further out.

    Level l has ``shape[l]`` rows and columns of blocks no larger than ``sizes[l]``, each standing
    as ``split[l]`` lines along x and y; ``starts[l]`` is where its lines, its edges along x and
    those along y begin. ``blocks`` holds easting, northing, area, top, skew_x, skew_y and lift of
    every line. Blocks of a level serve from ``opening`` of their sizes outward, to where the next
    level takes over. One thread sums one station, level by level, so that the result does not
    depend on the number of threads.
    """
    levels = shape.shape[0]
    for n in prange(points.shape[0]):
        x, y, z = points[n, 0], points[n, 1], points[n, 2]
        total = np.zeros(6)
        reach = opening * sizes[0]
        i0, i1 = _around(x, _level_edges(edges_x, starts[:, 1], 0, shape[0, 1]), reach, 0, 0)
        j0, j1 = _around(y, _level_edges(edges_y, starts[:, 2], 0, shape[0, 0]), reach, 0, 0)
        window = (i0, i1, j0, j1)
        exact_window(x, y, z, west, east, south, north, heights, base, window, total)
        if i1 > i0 and j1 > j0:
            box = (west[i0] - x, east[i1 - 1] - x, south[j0] - y, north[j1 - 1] - y)
            endless_rectangle(box[0], box[1], box[2], box[3], base - z, 1.0, total)
        for level in range(levels):
            rows, columns = shape[level, 0], shape[level, 1]
            outer = (0, columns, 0, rows)
            if level + 1 < levels:
                far = opening * sizes[level + 1]
                up_x = _level_edges(edges_x, starts[:, 1], level + 1, shape[level + 1, 1])
                up_y = _level_edges(edges_y, starts[:, 2], level + 1, shape[level + 1, 0])
                i0, i1 = _around(x, up_x, far, window[0] // 2, (window[1] + 1) // 2)
                j0, j1 = _around(y, up_y, far, window[2] // 2, (window[3] + 1) // 2)
                outer = (2 * i0, min(2 * i1, columns), 2 * j0, min(2 * j1, rows))
            _ring(x, y, z, window, outer, columns, split[level], starts[level, 0], blocks, total)
            window = (i0, i1, j0, j1)
        box = (west[0] - x, east[-1] - x, south[0] - y, north[-1] - y)
        endless_rectangle(box[0], box[1], box[2], box[3], base - z, -1.0, total)
        for c in range(6):
            out[n, c] = total[c]


@njit(parallel=True, error_model="numpy", cache=True)
def exact_sums(
    points: Array,
    west: Array,
    east: Array,
    south: Array,
    north: Array,
    heights: Array,
    base: float,
    out: Array,
) -> None:
    """Fill (n, 6) sums per unit G ρ over every column, all exact."""
    window = (0, heights.shape[1], 0, heights.shape[0])
    for n in prange(points.shape[0]):
        total = np.zeros(6)
        exact_window(
            points[n, 0],
            points[n, 1],
            points[n, 2],
            west,
            east,
            south,
            north,
            heights,
            base,
            window,
            total,
        )
        for c in range(6):
            out[n, c] = total[c]
