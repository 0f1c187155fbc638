"""The exact tensor of a rectangular prism at every distance, compiled.

Three forms, each where it keeps its digits. Corner logarithms and arctangents are exact next to
the prism but cancel away from it; face angles and edge logarithms, differenced before they are
taken, hold from a tenth of the longest side to 70 sides; Gauss's quadrature of point masses holds
beyond. Sides and offsets are in metres, results per unit of G ρ.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit, prange
from numpy.typing import NDArray

from gradred.newton.elementary import fast_arctan2, fast_atanh2

Array = NDArray[np.float64]

_NEAR = 0.1
_FAR = 70.0
_EDGE = 1e-9
# nodes and weights of the three-point rule on (-1, 1): Abramowitz and Stegun 1964, table 25.4
_NODE = math.sqrt(0.6)
_OUTER = 5.0 / 18.0
_MIDDLE = 8.0 / 18.0


@njit(inline="never", forceinline=True, error_model="numpy", cache=True)
def _face(
    x: float, y1: float, y2: float, z1: float, z2: float, ra: float, rb: float, rc: float, rd: float
) -> tuple[float, float]:
    """Return (cos, sin), up to a common factor, of half the solid angle of a face at offset x.

    Two triangles by van Oosterom and Strackee 1983, IEEE Trans. Biomed. Eng. 30, 125-126, joined
    as complex numbers; ra, rb, rc, rd are the distances of (y1, z1), (y2, z1), (y2, z2), (y1, z2).
    """
    xx = x * x
    n = x * (y2 - y1) * (z2 - z1)
    ac = xx + y1 * y2 + z1 * z2
    first = ra * rb * rc + (xx + y1 * y2 + z1 * z1) * rc + (xx + y2 * y2 + z1 * z2) * ra + ac * rb
    second = ra * rc * rd + ac * rd + (xx + y1 * y2 + z2 * z2) * ra + (xx + y1 * y1 + z1 * z2) * rc
    return first * second - n * n, n * (first + second)


@njit(inline="never", forceinline=True, error_model="numpy", cache=True)
def _faces(c1: float, s1: float, c2: float, s2: float) -> float:
    """Return the solid angle of the first face less that of the second."""
    return 2.0 * fast_arctan2(s1 * c2 - c1 * s2, c1 * c2 + s1 * s2)


@njit(inline="never", forceinline=True, error_model="numpy", cache=True)
def _edges(
    length: float,
    x1: float,
    x2: float,
    y1: float,
    y2: float,
    r11: float,
    r12: float,
    r21: float,
    r22: float,
    q11: float,
    q12: float,
    q21: float,
    q22: float,
) -> float:
    """Return the mixed difference over x and y of ln((r + q + length) / (r + q - length)).

    r_ij and q_ij are the distances of the two ends of the edge at (x_i, y_j). Differences of
    distances are taken from differences of their squares, which are exact.
    """
    r1, q1 = r11 + r21, q11 + q21
    r2, q2 = r12 + r22, q12 + q22
    square = length * length
    # tanh of half the difference over x at y1 and y2, as fractions: n1 / d1 and n2 / d2
    scale = length * (x1 - x2) * (x1 + x2)
    n1, d1 = scale * (r1 + q1), r1 * q1 * ((r11 + q11) * (r21 + q21) - square)
    n2, d2 = scale * (r2 + q2), r2 * q2 * ((r12 + q12) * (r22 + q22) - square)
    return fast_atanh2(n2 * d1 - n1 * d2, d1 * d2 - n1 * n2)


@njit(inline="never", forceinline=True, error_model="numpy", cache=True)
def middle_tensor(
    x1: float, x2: float, y1: float, y2: float, z1: float, z2: float
) -> tuple[float, float, float, float, float, float]:
    """Return xx, xy, xz, yy, yz, zz per unit G ρ outside a prism, a tenth to 70 sides away."""
    xx1 = x1 * x1
    xx2 = x2 * x2
    yy1 = y1 * y1
    yy2 = y2 * y2
    zz1 = z1 * z1
    zz2 = z2 * z2
    r111 = math.sqrt(xx1 + yy1 + zz1)
    r112 = math.sqrt(xx1 + yy1 + zz2)
    r121 = math.sqrt(xx1 + yy2 + zz1)
    r122 = math.sqrt(xx1 + yy2 + zz2)
    r211 = math.sqrt(xx2 + yy1 + zz1)
    r212 = math.sqrt(xx2 + yy1 + zz2)
    r221 = math.sqrt(xx2 + yy2 + zz1)
    r222 = math.sqrt(xx2 + yy2 + zz2)
    c1, s1 = _face(x1, y1, y2, z1, z2, r111, r121, r122, r112)
    c2, s2 = _face(x2, y1, y2, z1, z2, r211, r221, r222, r212)
    xx = _faces(c1, s1, c2, s2)
    c1, s1 = _face(y1, x1, x2, z1, z2, r111, r211, r212, r112)
    c2, s2 = _face(y2, x1, x2, z1, z2, r121, r221, r222, r122)
    yy = _faces(c1, s1, c2, s2)
    xy = _edges(z2 - z1, x1, x2, y1, y2, r111, r121, r211, r221, r112, r122, r212, r222)
    xz = _edges(y2 - y1, x1, x2, z1, z2, r111, r112, r211, r212, r121, r122, r221, r222)
    yz = _edges(x2 - x1, y1, y2, z1, z2, r111, r112, r121, r122, r211, r212, r221, r222)
    return xx, xy, xz, yy, yz, -(xx + yy)


@njit(error_model="numpy", cache=True)
def _corner_angle(x: float, y: float, z: float, r: float) -> float:
    """Return the solid angle of the quarter face out to a corner; x may be a signed zero."""
    return math.atan2(math.copysign(1.0, x) * y * z, abs(x) * r)


@njit(error_model="numpy", cache=True)
def _face_angle(x: float, y1: float, y2: float, z1: float, z2: float) -> float:
    total = 0.0
    for y, sy in ((y1, -1.0), (y2, 1.0)):
        for z, sz in ((z1, -1.0), (z2, 1.0)):
            total += sy * sz * _corner_angle(x, y, z, math.sqrt(x * x + y * y + z * z))
    return total


@njit(error_model="numpy", cache=True)
def edge_log(x: float, y: float, z1: float, z2: float, least: float) -> float:
    """Return ln((R2 + z2) / (R1 + z1)) for an edge along z, without cancellation on any side.

    ``least`` is the distance below which a point counts as that far from the edge, where the
    logarithm is infinite.
    """
    square = max(x * x + y * y, least * least)
    r1 = math.sqrt(square + z1 * z1)
    r2 = math.sqrt(square + z2 * z2)
    if z1 >= 0.0:
        return math.log((r2 + z2) / (r1 + z1))
    if z2 <= 0.0:
        return math.log((r1 - z1) / (r2 - z2))
    return math.log((r2 + z2) * (r1 - z1) / square)


@njit(error_model="numpy", cache=True)
def _mixed(x1: float, x2: float, y1: float, y2: float, z1: float, z2: float, least: float) -> float:
    return (
        edge_log(x2, y2, z1, z2, least)
        - edge_log(x1, y2, z1, z2, least)
        - edge_log(x2, y1, z1, z2, least)
        + edge_log(x1, y1, z1, z2, least)
    )


@njit(error_model="numpy", cache=True)
def _outward(low: float, high: float) -> tuple[float, float]:
    """Return offsets with a zero signed so that a point on a face reads as just outside it."""
    return (0.0 if low == 0.0 else low), (-0.0 if high == 0.0 else high)


@njit(error_model="numpy", cache=True)
def near_tensor(
    x1: float, x2: float, y1: float, y2: float, z1: float, z2: float
) -> tuple[float, float, float, float, float, float]:
    """Return xx, xy, xz, yy, yz, zz per unit G ρ close to a prism, on its faces and inside it."""
    x1, x2 = _outward(x1, x2)
    y1, y2 = _outward(y1, y2)
    z1, z2 = _outward(z1, z2)
    least = _EDGE * max(x2 - x1, y2 - y1, z2 - z1)
    return (
        _face_angle(x1, y1, y2, z1, z2) - _face_angle(x2, y1, y2, z1, z2),
        _mixed(x1, x2, y1, y2, z1, z2, least),
        _mixed(x1, x2, z1, z2, y1, y2, least),
        _face_angle(y1, x1, x2, z1, z2) - _face_angle(y2, x1, x2, z1, z2),
        _mixed(y1, y2, z1, z2, x1, x2, least),
        _face_angle(z1, x1, x2, y1, y2) - _face_angle(z2, x1, x2, y1, y2),
    )


@njit(error_model="numpy", cache=True)
def far_tensor(
    x1: float, x2: float, y1: float, y2: float, z1: float, z2: float
) -> tuple[float, float, float, float, float, float]:
    """Return xx, xy, xz, yy, yz, zz per unit G ρ beyond 70 sides: 27 point masses.

    The three-point rule leaves out terms from the sixth power of half a side over the distance:
    1.3 (1/140)^6 = 2e-13 of the tensor.
    """
    volume = (x2 - x1) * (y2 - y1) * (z2 - z1)
    xx = xy = xz = yy = yz = 0.0
    for i in range(-1, 2):
        x = 0.5 * (x1 + x2) + 0.5 * i * _NODE * (x2 - x1)
        wx = _OUTER if i != 0 else _MIDDLE
        for j in range(-1, 2):
            y = 0.5 * (y1 + y2) + 0.5 * j * _NODE * (y2 - y1)
            wy = wx * (_OUTER if j != 0 else _MIDDLE)
            for k in range(-1, 2):
                z = 0.5 * (z1 + z2) + 0.5 * k * _NODE * (z2 - z1)
                square = x * x + y * y + z * z
                m = wy * (_OUTER if k != 0 else _MIDDLE) * volume / (square * math.sqrt(square))
                scale = 3.0 * m / square
                xx += scale * x * x - m
                xy += scale * x * y
                xz += scale * x * z
                yy += scale * y * y - m
                yz += scale * y * z
    return xx, xy, xz, yy, yz, -(xx + yy)


@njit(error_model="numpy", cache=True)
def regime(x1: float, x2: float, y1: float, y2: float, z1: float, z2: float) -> int:
    """Return 0, 1 or 2 where the near, the middle or the far form keeps its digits."""
    side = max(x2 - x1, y2 - y1, z2 - z1)
    dx = max(max(x1, -x2), 0.0)
    dy = max(max(y1, -y2), 0.0)
    dz = max(max(z1, -z2), 0.0)
    clear = dx * dx + dy * dy + dz * dz
    if clear < (_NEAR * side) ** 2:
        return 0
    return 2 if clear > (_FAR * side) ** 2 else 1


@njit(error_model="numpy", cache=True)
def tensor_at(
    x1: float, x2: float, y1: float, y2: float, z1: float, z2: float
) -> tuple[float, float, float, float, float, float]:
    """Return xx, xy, xz, yy, yz, zz per unit G ρ of a prism given relative to the point."""
    where = regime(x1, x2, y1, y2, z1, z2)
    if where == 0:
        return near_tensor(x1, x2, y1, y2, z1, z2)
    if where == 2:
        return far_tensor(x1, x2, y1, y2, z1, z2)
    return middle_tensor(x1, x2, y1, y2, z1, z2)


@njit(error_model="numpy", cache=True, fastmath={"reassoc", "contract"})
def _middle_sum(
    x: float,
    y: float,
    z: float,
    west: Array,
    east: Array,
    south: Array,
    north: Array,
    bottom: Array,
    top: Array,
    weights: Array,
) -> tuple[float, float, float, float, float]:
    """Return xx, xy, xz, yy, yz summed over the prisms for which the middle form holds.

    Only the order of the sum and fused products are left to the compiler, which changes the
    result by rounding and not by the number of threads.
    """
    xx = xy = xz = yy = yz = 0.0
    for m in range(west.shape[0]):
        x1, x2 = west[m] - x, east[m] - x
        y1, y2 = south[m] - y, north[m] - y
        z1, z2 = bottom[m] - z, top[m] - z
        side = max(x2 - x1, y2 - y1, z2 - z1)
        dx = max(max(x1, -x2), 0.0)
        dy = max(max(y1, -y2), 0.0)
        dz = max(max(z1, -z2), 0.0)
        clear = dx * dx + dy * dy + dz * dz
        holds = (clear >= (_NEAR * side) * (_NEAR * side)) & (
            clear <= (_FAR * side) * (_FAR * side)
        )
        w = weights[m]
        a, b, c, d, e, _ = middle_tensor(x1, x2, y1, y2, z1, z2)
        xx += w * a if holds else 0.0
        xy += w * b if holds else 0.0
        xz += w * c if holds else 0.0
        yy += w * d if holds else 0.0
        yz += w * e if holds else 0.0
    return xx, xy, xz, yy, yz


@njit(parallel=True, error_model="numpy", cache=True)
def tensor_sums(points: Array, prisms: Array, weights: Array, out: Array) -> None:
    """Fill (n, 6) sums of the tensors of (m, 6) prisms with (m,) weights G ρ at (n, 3) points.

    The middle form runs over all prisms so that the compiler vectorises it; the prisms that are
    near or far are then added one by one. One point is summed by one thread in a fixed order.
    """
    west = np.ascontiguousarray(prisms[:, 0])
    east = np.ascontiguousarray(prisms[:, 1])
    south = np.ascontiguousarray(prisms[:, 2])
    north = np.ascontiguousarray(prisms[:, 3])
    bottom = np.ascontiguousarray(prisms[:, 4])
    top = np.ascontiguousarray(prisms[:, 5])
    for n in prange(points.shape[0]):
        x, y, z = points[n, 0], points[n, 1], points[n, 2]
        xx, xy, xz, yy, yz = _middle_sum(x, y, z, west, east, south, north, bottom, top, weights)
        zz = -(xx + yy)
        for m in range(west.shape[0]):
            x1, x2 = west[m] - x, east[m] - x
            y1, y2 = south[m] - y, north[m] - y
            z1, z2 = bottom[m] - z, top[m] - z
            where = regime(x1, x2, y1, y2, z1, z2)
            if where == 1:
                continue
            a, b, c, d, e, f = tensor_at(x1, x2, y1, y2, z1, z2)
            w = weights[m]
            xx += w * a
            xy += w * b
            xz += w * c
            yy += w * d
            yz += w * e
            zz += w * f
        out[n, 0] = xx
        out[n, 1] = xy
        out[n, 2] = xz
        out[n, 3] = yy
        out[n, 4] = yz
        out[n, 5] = zz


@njit(error_model="numpy", cache=True)
def _edge(x: float, y: float, z1: float, z2: float, least: float) -> float:
    """Return the logarithm of an edge along z; ``least`` 0 asks for the form that holds away."""
    if least > 0.0:
        return edge_log(x, y, z1, z2, least)
    square = x * x + y * y
    return fast_atanh2(z2 - z1, math.sqrt(square + z1 * z1) + math.sqrt(square + z2 * z2))


@njit(error_model="numpy", cache=True)
def _sheet(x: float, y1: float, y2: float, z1: float, z2: float, least: float) -> float:
    """Return the integral of 1/r over the face at offset x: what a face adds to the attraction."""
    if least > 0.0:
        angle = _face_angle(x, y1, y2, z1, z2)
    else:
        a = math.sqrt(x * x + y1 * y1 + z1 * z1)
        b = math.sqrt(x * x + y2 * y2 + z1 * z1)
        c = math.sqrt(x * x + y2 * y2 + z2 * z2)
        d = math.sqrt(x * x + y1 * y1 + z2 * z2)
        cosine, sine = _face(x, y1, y2, z1, z2, a, b, c, d)
        angle = 2.0 * fast_arctan2(sine, cosine)
    return (
        y2 * _edge(x, y2, z1, z2, least)
        - y1 * _edge(x, y1, z1, z2, least)
        + z2 * _edge(x, z2, y1, y2, least)
        - z1 * _edge(x, z1, y1, y2, least)
        - x * angle
    )


@njit(error_model="numpy", cache=True)
def face_integral(x: float, y1: float, y2: float, z1: float, z2: float) -> float:
    """Return the integral of 1/r over a rectangle at offset x, in the form that holds anywhere."""
    return _sheet(x, y1, y2, z1, z2, _EDGE * max(y2 - y1, z2 - z1))


@njit(error_model="numpy", cache=True)
def attraction_at(
    x1: float, x2: float, y1: float, y2: float, z1: float, z2: float
) -> tuple[float, float, float, float]:
    """Return x, y, z of the attraction and the potential, per unit G ρ, relative to the point."""
    where = regime(x1, x2, y1, y2, z1, z2)
    if where == 2:
        return _far_attraction(x1, x2, y1, y2, z1, z2)
    least = _EDGE * max(x2 - x1, y2 - y1, z2 - z1) if where == 0 else 0.0
    west = _sheet(x1, y1, y2, z1, z2, least)
    east = _sheet(x2, y1, y2, z1, z2, least)
    south = _sheet(y1, x1, x2, z1, z2, least)
    north = _sheet(y2, x1, x2, z1, z2, least)
    bottom = _sheet(z1, x1, x2, y1, y2, least)
    top = _sheet(z2, x1, x2, y1, y2, least)
    # the divergence of r/(2r), r the vector, is 1/r: the potential from the faces
    flux = x2 * east - x1 * west + y2 * north - y1 * south + z2 * top - z1 * bottom
    return west - east, south - north, bottom - top, 0.5 * flux


@njit(error_model="numpy", cache=True)
def _far_attraction(
    x1: float, x2: float, y1: float, y2: float, z1: float, z2: float
) -> tuple[float, float, float, float]:
    volume = (x2 - x1) * (y2 - y1) * (z2 - z1)
    gx = gy = gz = v = 0.0
    for i in range(-1, 2):
        x = 0.5 * (x1 + x2) + 0.5 * i * _NODE * (x2 - x1)
        wx = _OUTER if i != 0 else _MIDDLE
        for j in range(-1, 2):
            y = 0.5 * (y1 + y2) + 0.5 * j * _NODE * (y2 - y1)
            wy = wx * (_OUTER if j != 0 else _MIDDLE)
            for k in range(-1, 2):
                z = 0.5 * (z1 + z2) + 0.5 * k * _NODE * (z2 - z1)
                square = x * x + y * y + z * z
                m = wy * (_OUTER if k != 0 else _MIDDLE) * volume / math.sqrt(square)
                v += m
                gx += m / square * x
                gy += m / square * y
                gz += m / square * z
    return gx, gy, gz, v


@njit(parallel=True, error_model="numpy", cache=True)
def attraction_sums(points: Array, prisms: Array, weights: Array, out: Array) -> None:
    """Fill (n, 4) sums of attraction and potential of (m, 6) prisms with (m,) weights G ρ."""
    for n in prange(points.shape[0]):
        x, y, z = points[n, 0], points[n, 1], points[n, 2]
        gx = gy = gz = v = 0.0
        for m in range(prisms.shape[0]):
            a, b, c, d = attraction_at(
                prisms[m, 0] - x,
                prisms[m, 1] - x,
                prisms[m, 2] - y,
                prisms[m, 3] - y,
                prisms[m, 4] - z,
                prisms[m, 5] - z,
            )
            gx += weights[m] * a
            gy += weights[m] * b
            gz += weights[m] * c
            v += weights[m] * d
        out[n, 0] = gx
        out[n, 1] = gy
        out[n, 2] = gz
        out[n, 3] = v
