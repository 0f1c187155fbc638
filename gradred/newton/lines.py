"""Lines of mass that go down without end, each with a dipole at its top.

Per unit G ρ and area, with r = (X, Y, Z) from the station to the top of the line,

    Γ_zz = -Z/R³,  Γ_xz = -X/R³,  Γ_xx = X² k - g,  Γ_xy = X Y k,
    g = 1 / (R (R - Z)),  k = g² (2 - Z/R)

which follows by integrating the tensor of a point along z. Lines are gathered in buffers with one
row per quantity: X, Y, Z, area, moments of the top along x and y, and its rise.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numba import njit
from numpy.typing import NDArray

Array = NDArray[np.float64]

LANES = 8
"""Buffers are filled up to a multiple of this, so that no loop has a remainder."""

_CHUNK = 256


@njit(inline="never", forceinline=True, error_model="numpy", cache=True)
def line_at(
    x: Any, y: Any, z: Any, area: Any, skew_x: Any, skew_y: Any, lift: Any, one: Any
) -> tuple[Any, Any, Any, Any, Any]:
    """Return xx, xy, xz, yy, yz of a line of mass and the dipole at its top, in one's precision."""
    two = one + one
    three = two + one
    s2 = x * x + y * y
    r2 = s2 + z * z
    r = np.sqrt(r2)
    # R - Z loses its digits under a summit far above: s²/(R + Z) is the same number
    below = r + abs(z)
    gap = below if z <= one - one else s2 / below
    inverse = one / (r2 * gap)
    u = gap * inverse  # 1/R²
    g = r * inverse
    w = r * u * u  # 1/R³
    k = g * g * (two - z * r * u)
    along = skew_x * x + skew_y * y + lift * z
    p5 = three * w * u
    p7 = (three + two) * p5 * u * along
    curl = area * k - p7
    even = p5 * along - area * g
    wide = area * w
    xx = curl * x * x + even + two * p5 * skew_x * x
    yy = curl * y * y + even + two * p5 * skew_y * y
    xy = curl * x * y + p5 * (skew_x * y + skew_y * x)
    xz = p5 * (skew_x * z + lift * x) - (p7 * z + wide) * x
    yz = p5 * (skew_y * z + lift * y) - (p7 * z + wide) * y
    return xx, xy, xz, yy, yz


@njit(error_model="numpy", cache=True, fastmath={"reassoc", "contract"})
def sum_lines(buffer: Any, count: int, x: Any, y: Any, z: Any, one: Any, total: Array) -> None:
    """Add the tensor of gathered lines seen from an offset, summed in chunks in one's precision."""
    for first in range(0, count, _CHUNK):
        last = min(first + _CHUNK, count)
        bx, by, bz = buffer[0, first:last], buffer[1, first:last], buffer[2, first:last]
        area, lift = buffer[3, first:last], buffer[6, first:last]
        skew_x, skew_y = buffer[4, first:last], buffer[5, first:last]
        xx = xy = xz = yy = yz = one - one
        for i in range(last - first):
            a, b, c, d, e = line_at(
                bx[i] - x, by[i] - y, bz[i] - z, area[i], skew_x[i], skew_y[i], lift[i], one
            )
            xx += a
            xy += b
            xz += c
            yy += d
            yz += e
        total[0] += xx
        total[1] += xy
        total[2] += xz
        total[3] += yy
        total[4] += yz
        total[5] -= xx + yy


@njit(error_model="numpy", cache=True, fastmath={"reassoc", "contract"})
def pull_lines(buffer: Any, count: int, x: Any, y: Any, z: Any, one: Any, pull: Array) -> None:
    """Add the attraction of gathered lines seen from an offset, in one's precision."""
    three = one + one + one
    for first in range(0, count, _CHUNK):
        last = min(first + _CHUNK, count)
        bx, by, bz = buffer[0, first:last], buffer[1, first:last], buffer[2, first:last]
        area, lift = buffer[3, first:last], buffer[6, first:last]
        skew_x, skew_y = buffer[4, first:last], buffer[5, first:last]
        gx = gy = gz = one - one
        for i in range(last - first):
            X, Y, Z = bx[i] - x, by[i] - y, bz[i] - z
            s2 = X * X + Y * Y
            r2 = s2 + Z * Z
            r = np.sqrt(r2)
            below = r + abs(Z)
            gap = s2 / below if one - one < Z else below
            w = one / (r2 * r)
            g = area[i] / (r * gap)
            along = three * (skew_x[i] * X + skew_y[i] * Y + lift[i] * Z) * w / r2
            gx += X * g + skew_x[i] * w - along * X
            gy += Y * g + skew_y[i] * w - along * Y
            gz += lift[i] * w - along * Z - area[i] / r
        pull[0] += gx
        pull[1] += gy
        pull[2] += gz


@njit(error_model="numpy", cache=True)
def padded(buffer: Any, n: int) -> int:
    """Fill a buffer of lines with lines of no mass up to a whole number of lanes."""
    while n % LANES:
        for c in range(7):
            buffer[c, n] = 0.0
        buffer[0, n] = buffer[2, n] = -1e6
        n += 1
    return n
