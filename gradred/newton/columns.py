"""Exact sums over single columns of a height field.

Everything is per unit G ρ, with offsets from the station in metres. Columns are gathered into
buffers, one row per quantity, so that one long loop runs over them whatever the terrain's shape.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit
from numpy.typing import NDArray

from gradred.newton.lines import LANES, padded
from gradred.newton.prism import (
    attraction_at,
    face_integral,
    middle_tensor,
    near_tensor,
)
from gradred.newton.pyramid import surface_at

Array = NDArray[np.float64]

_TOUCHING = 1e-3
_REFINED = 8.0


@njit(error_model="numpy", cache=True)
def gather_columns(
    x: float,
    y: float,
    z: float,
    edges_x: Array,
    edges_y: Array,
    heights: Array,
    base: float,
    window: tuple[int, int, int, int],
    buffer: Array,
    total: Array,
    pull: Array,
) -> int:
    """Fill (7, n) sides and signs of the columns of a window; return n, a multiple of ``LANES``.

    A column that the station touches or stands in is added to ``total`` at once, by the form that
    holds there, and to ``pull`` where that has room.
    """
    i0, i1, j0, j1 = window
    n = 0
    for j in range(j0, j1):
        y1, y2 = edges_y[j] - y, edges_y[j + 1] - y
        dy = max(max(y1, -y2), 0.0)
        for i in range(i0, i1):
            x1, x2 = edges_x[i] - x, edges_x[i + 1] - x
            top = heights[j, i]
            low, high = min(base, top) - z, max(base, top) - z
            sign = 1.0 if top > base else -1.0
            dx = max(max(x1, -x2), 0.0)
            dz = max(max(low, -high), 0.0)
            side = _TOUCHING * max(max(x2 - x1, y2 - y1), high - low)
            if dx * dx + dy * dy + dz * dz <= side * side:
                if low < high:
                    part = near_tensor(x1, x2, y1, y2, low, high)
                    for c in range(6):
                        total[c] += sign * part[c]
                    if pull.shape[0]:
                        a, b, g, _ = attraction_at(x1, x2, y1, y2, low, high)
                        pull[0] += sign * a
                        pull[1] += sign * b
                        pull[2] += sign * g
                continue
            buffer[0, n], buffer[1, n] = x1, x2
            buffer[2, n], buffer[3, n] = y1, y2
            buffer[4, n], buffer[5, n] = low, high
            buffer[6, n] = sign
            n += 1
    while n % LANES:
        for c in range(6):
            buffer[c, n] = 1.0 + c % 2
        buffer[6, n] = 0.0
        n += 1
    return n


@njit(error_model="numpy", cache=True, fastmath={"reassoc", "contract"})
def sum_columns(buffer: Array, count: int, total: Array) -> None:
    """Add the tensor of gathered columns by the prism's middle form."""
    x1, x2, y1, y2 = buffer[0, :count], buffer[1, :count], buffer[2, :count], buffer[3, :count]
    z1, z2, sign = buffer[4, :count], buffer[5, :count], buffer[6, :count]
    xx = xy = xz = yy = yz = 0.0
    for i in range(count):
        a, b, c, d, e, _ = middle_tensor(x1[i], x2[i], y1[i], y2[i], z1[i], z2[i])
        xx += sign[i] * a
        xy += sign[i] * b
        xz += sign[i] * c
        yy += sign[i] * d
        yz += sign[i] * e
    total[0] += xx
    total[1] += xy
    total[2] += xz
    total[3] += yy
    total[4] += yz
    total[5] -= xx + yy


@njit(error_model="numpy", cache=True)
def pull_columns(buffer: Array, count: int, pull: Array) -> None:
    """Add the attraction, x, y and z, of gathered columns."""
    for i in range(count):
        if buffer[6, i] != 0.0:
            a, b, c, _ = attraction_at(
                buffer[0, i], buffer[1, i], buffer[2, i], buffer[3, i], buffer[4, i], buffer[5, i]
            )
            pull[0] += buffer[6, i] * a
            pull[1] += buffer[6, i] * b
            pull[2] += buffer[6, i] * c


@njit(error_model="numpy", cache=True)
def _pieces(
    at: tuple[float, float, float],
    edges_x: Array,
    edges_y: Array,
    heights: Array,
    i: int,
    j: int,
    cuts: float,
) -> int:
    """Return into how many pieces along each axis a cell is cut: an even number.

    ``cuts`` sides over the distance of the nearest part of its surface, and a quarter of ``cuts``
    within eight sides. Even, because the surface has its kinks along the middle lines of the cell.
    """
    x1, x2, y1, y2 = edges_x[i], edges_x[i + 1], edges_y[j], edges_y[j + 1]
    side = max(x2 - x1, y2 - y1)
    low = high = heights[j, i]
    for corner in range(4):
        h = surface_at(
            heights, edges_x, edges_y, i, j, x1 if corner % 2 else x2, y1 if corner > 1 else y2
        )
        low, high = min(low, h), max(high, h)
    dx = max(max(x1 - at[0], at[0] - x2), 0.0)
    dy = max(max(y1 - at[1], at[1] - y2), 0.0)
    dz = max(max(low - at[2], at[2] - high), 0.0)
    away = max(math.sqrt(dx * dx + dy * dy + dz * dz), side / 32.0)
    least = cuts / 8.0 if away < _REFINED * side else 1.0
    return int(2 * min(max(math.ceil(max(0.5 * cuts * side / away, least)), 1), 32))


@njit(error_model="numpy", cache=True)
def count_bend(
    at: tuple[float, float, float],
    edges_x: Array,
    edges_y: Array,
    heights: Array,
    window: tuple[int, int, int, int],
    cuts: float,
) -> int:
    """Return how many lines ``gather_bend`` makes of a window, at most."""
    i0, i1, j0, j1 = window
    total = LANES
    for j in range(j0, j1):
        for i in range(i0, i1):
            n = _pieces(at, edges_x, edges_y, heights, i, j, cuts)
            total += 2 * n * n
    return total


@njit(error_model="numpy", cache=True)
def gather_bend(
    at: tuple[float, float, float],
    edges_x: Array,
    edges_y: Array,
    heights: Array,
    window: tuple[int, int, int, int],
    cuts: float,
    buffer: Array,
) -> int:
    """Fill lines that turn the flat tops of a window into the bilinear surface; return how many.

    A cell is cut into n × n pieces as ``_pieces`` says. Each piece adds a line of mass up to
    the surface in its middle, with the moments of its tilt and width, and takes away the line of
    the flat top.
    """
    i0, i1, j0, j1 = window
    count = 0
    for j in range(j0, j1):
        depth = edges_y[j + 1] - edges_y[j]
        for i in range(i0, i1):
            width = edges_x[i + 1] - edges_x[i]
            z = heights[j, i] - at[2]
            n = _pieces(at, edges_x, edges_y, heights, i, j, cuts)
            dx, dy = width / n, depth / n
            area = dx * dy
            short = (dx * dx + dy * dy) / 48.0
            for q in range(n):
                my = edges_y[j] + (q + 0.5) * dy
                for p in range(n):
                    mx = edges_x[i] + (p + 0.5) * dx
                    # bilinear within the piece: its middle and its slopes from two pairs of sides
                    east = surface_at(heights, edges_x, edges_y, i, j, mx + 0.5 * dx, my)
                    west = surface_at(heights, edges_x, edges_y, i, j, mx - 0.5 * dx, my)
                    north = surface_at(heights, edges_x, edges_y, i, j, mx, my + 0.5 * dy)
                    south = surface_at(heights, edges_x, edges_y, i, j, mx, my - 0.5 * dy)
                    spread = area * ((east - west) ** 2 + (north - south) ** 2) / 24.0
                    for c in range(count, count + 2):
                        buffer[0, c], buffer[1, c] = mx - at[0], my - at[1]
                    buffer[2, count], buffer[2, count + 1] = 0.5 * (east + west) - at[2], z
                    buffer[3, count], buffer[3, count + 1] = area, -area
                    buffer[4, count] = area * (east - west) * dx / 12.0
                    buffer[5, count] = area * (north - south) * dy / 12.0
                    buffer[4, count + 1] = buffer[5, count + 1] = 0.0
                    buffer[6, count], buffer[6, count + 1] = spread - area * short, area * short
                    count += 2
    return padded(buffer, count)


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
    sides: tuple[float, float, float, float],
    at: tuple[float, float, float],
    height: float,
    sign: float,
    total: Array,
) -> None:
    """Add the tensor of a rectangle (west, east, south, north) of mass downward without end."""
    x1, x2, y1, y2 = sides[0] - at[0], sides[1] - at[0], sides[2] - at[1], sides[3] - at[1]
    z = height - at[2]
    _corner(x2, y2, z, sign, total)
    _corner(x1, y2, z, -sign, total)
    _corner(x2, y1, z, -sign, total)
    _corner(x1, y1, z, sign, total)


@njit(error_model="numpy", cache=True)
def _wall(x: float, y1: float, y2: float, z: float) -> float:
    """Return the integral along y of ln(R - z) at offset x, less y2 - y1: a face without end."""
    total = 0.0
    for y, sign in ((y1, -1.0), (y2, 1.0)):
        r = math.sqrt(x * x + y * y + z * z)
        s2 = max(x * x + y * y, 1e-8)
        across = max(x * x + z * z, 1e-8)
        up = math.log(r - z) if z <= 0.0 else math.log(s2 / (r + z))
        along = math.log(r + y) if y > 0.0 else math.log(across / (r - y))
        total += sign * (y * up - z * along)
        total += sign * abs(x) * (math.atan2(y, abs(x)) + math.atan2(y * z, abs(x) * r))
    return total


@njit(error_model="numpy", cache=True)
def pull_endless(
    sides: tuple[float, float, float, float],
    at: tuple[float, float, float],
    height: float,
    sign: float,
    pull: Array,
) -> None:
    """Add the attraction of a rectangle of mass downward without end."""
    x1, x2, y1, y2 = sides[0] - at[0], sides[1] - at[0], sides[2] - at[1], sides[3] - at[1]
    z = height - at[2]
    pull[0] += sign * (_wall(x2, y1, y2, z) - _wall(x1, y1, y2, z))
    pull[1] += sign * (_wall(y2, x1, x2, z) - _wall(y1, x1, x2, z))
    pull[2] -= sign * face_integral(z, x1, x2, y1, y2)
