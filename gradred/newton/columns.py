"""Exact sums over single columns of a height field.

Everything is per unit G ρ, with offsets from the station in metres. Columns are gathered into
buffers, one row per quantity, so that one long loop runs over them whatever the terrain's shape.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit
from numpy.typing import NDArray

from gradred.newton.prism import middle_tensor, near_tensor

Array = NDArray[np.float64]

_TOUCHING = 1e-3
LANES = 8
"""Buffers are filled up to a multiple of this, so that no loop has a remainder."""


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
) -> int:
    """Fill (7, n) sides and signs of the columns of a window; return n, a multiple of ``LANES``.

    A column that the station touches or stands in is added to ``total`` at once, by the form that
    holds there.
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
