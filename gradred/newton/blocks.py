"""Compiled sums over blocks of columns, and the walk through the pyramid that picks them.

A block is taken as one vertical line of mass from its mean height downward without end; what lies
below the base is taken away again as one exact rectangle. The rest of the block's shape acts as a
dipole at the top of the line: heights against position, the spread of heights, and the width of
the block (whose second horizontal derivatives are, for a harmonic function, the vertical one
reversed). Stations that are neighbours share the blocks far from all of them.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numba import njit, prange
from numpy.typing import NDArray

from gradred.newton.columns import (
    count_bend,
    endless_rectangle,
    gather_bend,
    gather_columns,
    pull_columns,
    pull_endless,
    sum_columns,
)
from gradred.newton.lines import LANES, padded, pull_lines, sum_lines

Array = NDArray[np.float64]
Index = NDArray[np.int64]


@njit(error_model="numpy", cache=True)
def _around(low: float, high: float, edges: Array, inner: tuple[int, int]) -> tuple[int, int]:
    """Return the range of blocks that meets [low, high], widened to hold an inner range."""
    count = edges.shape[0] - 1
    first = min(max(np.searchsorted(edges, low, side="right") - 1, 0), count)
    last = max(min(np.searchsorted(edges, high, side="left"), count), first)
    if inner[1] > inner[0]:
        return min(first, inner[0]), max(last, inner[1])
    return first, last


@njit(error_model="numpy", cache=True)
def _window(
    box: tuple[float, float, float, float],
    reach: float,
    edges_x: Array,
    edges_y: Array,
    inner: tuple[int, int, int, int],
) -> tuple[int, int, int, int]:
    """Return the blocks of a level within reach of a box of stations, holding a finer window."""
    i0, i1 = _around(box[0] - reach, box[1] + reach, edges_x, (inner[0] // 2, (inner[1] + 1) // 2))
    j0, j1 = _around(box[2] - reach, box[3] + reach, edges_y, (inner[2] // 2, (inner[3] + 1) // 2))
    return i0, i1, j0, j1


@njit(error_model="numpy", cache=True)
def _gather(
    at: tuple[float, float, float],
    heights: Array,
    moments: tuple[Array, Array, Array, Array],
    edges_x: Array,
    edges_y: Array,
    split: Index,
    first: int,
    rows: tuple[int, int],
    columns: tuple[int, int],
    buffer: Any,
    n: int,
) -> int:
    """Append the lines of a rectangle of blocks to the buffer, relative to a place; return n.

    ``first`` is where the level begins in the moments, -1 for flat cells, which have only heights.
    Oblong blocks stand as two lines, set apart so that the second moments along both axes agree;
    what both axes share then acts as a lowering of the top.
    """
    top, skew_x, skew_y, spread = moments
    c0, c1 = columns
    count = c1 - c0
    if count <= 0:
        return n
    ex = edges_x[c0 : c1 + 1]
    pair = split[0] * split[1] == 2
    share = 0.5 if pair else 1.0
    for j in range(rows[0], rows[1]):
        depth = edges_y[j + 1] - edges_y[j]
        by = 0.5 * (edges_y[j] + edges_y[j + 1]) - at[1]
        b = first + j * (edges_x.shape[0] - 1) + c0
        for sign in range(-1 if pair else 0, 2 if pair else 1, 2):
            part = buffer[:, n : n + count]
            if first < 0:
                _cells(part, heights[j, c0:c1], at[2])
            else:
                _moments(
                    part,
                    top[b : b + count],
                    skew_x[b : b + count],
                    skew_y[b : b + count],
                    spread[b : b + count],
                    at[2],
                    share,
                )
            for i in range(count):
                side = ex[i + 1] - ex[i]
                area = share * side * depth
                apart, short = 0.0, (side * side + depth * depth) / 48.0
                if pair:
                    apart = sign * math.sqrt(abs(side * side - depth * depth) / 12.0)
                    short = min(side, depth) ** 2 / 24.0
                part[0, i] = 0.5 * (ex[i] + ex[i + 1]) - at[0] + (apart if split[0] == 2 else 0.0)
                part[1, i] = by + (apart if split[1] == 2 else 0.0)
                part[3, i] = area
                part[6, i] -= area * short
            n += count
    return n


@njit(error_model="numpy", cache=True)
def _cells(part: Any, heights: Array, z: float) -> None:
    """Fill top and moments of flat cells."""
    for i in range(part.shape[1]):
        part[2, i] = heights[i] - z
        part[4, i] = 0.0
        part[5, i] = 0.0
        part[6, i] = 0.0


@njit(error_model="numpy", cache=True)
def _moments(
    part: Any, top: Array, skew_x: Array, skew_y: Array, spread: Array, z: float, share: float
) -> None:
    """Fill top and moments of blocks; the half of the spread acts as a rise of the top."""
    for i in range(part.shape[1]):
        part[2, i] = top[i] - z
        part[4, i] = share * skew_x[i]
        part[5, i] = share * skew_y[i]
        part[6, i] = 0.5 * share * spread[i]


@njit(error_model="numpy", cache=True)
def _gather_ring(
    at: tuple[float, float, float],
    heights: Array,
    moments: tuple[Array, Array, Array, Array],
    edges_x: Array,
    edges_y: Array,
    split: Index,
    first: int,
    inner: tuple[int, int, int, int],
    outer: tuple[int, int, int, int],
    buffer: Any,
    n: int,
) -> int:
    """Append the blocks inside the outer and outside the inner window: four rectangles."""
    i0, i1, j0, j1 = inner
    o0, o1, q0, q1 = outer
    if i1 <= i0 or j1 <= j0:
        i0 = i1 = o1
        j0 = j1 = q1
    level = (heights, moments, edges_x, edges_y, split, first)
    n = _gather(at, *level, (q0, j0), (o0, o1), buffer, n)
    n = _gather(at, *level, (j0, j1), (o0, i0), buffer, n)
    n = _gather(at, *level, (j0, j1), (i1, o1), buffer, n)
    return _gather(at, *level, (j1, q1), (o0, o1), buffer, n)


@njit(error_model="numpy", cache=True)
def _edges(edges: Array, starts: Index, shape: Index, level: int, axis: int) -> Array:
    """Return the edges of a level along x (axis 1) or y (axis 0)."""
    first = starts[level, 2 - axis]
    return edges[first : first + shape[level, axis] + 1]


@njit(error_model="numpy", cache=True)
def _windows(
    box: tuple[float, float, float, float],
    opening: float,
    levels: tuple[int, int],
    start: tuple[int, int, int, int],
    end: tuple[int, int, int, int],
    shape: Index,
    split: Index,
    starts: Index,
    sizes: Array,
    edges_x: Array,
    edges_y: Array,
    windows: Index,
) -> int:
    """Fill the inner and outer windows of a range of levels; return how many lines stand between.

    The inner window of the first level is ``start``. The outer window of the last is ``end``, in
    blocks of the level above, or everything where the last level is the uppermost.
    """
    count = 0
    inner = start
    for level in range(levels[0], levels[1]):
        rows, columns = shape[level, 0], shape[level, 1]
        above = inner
        outer = (0, columns, 0, rows)
        if level + 1 < shape.shape[0]:
            above = end
            if level + 1 < levels[1] or end[1] < 0:
                ex = _edges(edges_x, starts, shape, level + 1, 1)
                ey = _edges(edges_y, starts, shape, level + 1, 0)
                above = _window(box, opening * sizes[level + 1], ex, ey, inner)
            outer = (
                2 * above[0],
                min(2 * above[1], columns),
                2 * above[2],
                min(2 * above[3], rows),
            )
        for c in range(4):
            windows[level, c] = inner[c]
            windows[level, 4 + c] = outer[c]
        hole = max(inner[1] - inner[0], 0) * max(inner[3] - inner[2], 0)
        area = max(outer[1] - outer[0], 0) * max(outer[3] - outer[2], 0)
        count += (area - hole) * split[level, 0] * split[level, 1]
        inner = above
    return count


@njit(error_model="numpy", cache=True)
def _fill(
    at: tuple[float, float, float],
    levels: tuple[int, int],
    windows: Index,
    heights: Array,
    moments: tuple[Array, Array, Array, Array],
    shape: Index,
    split: Index,
    starts: Index,
    edges_x: Array,
    edges_y: Array,
    buffer: Any,
) -> int:
    """Gather the lines of a range of levels between their windows; return their number, padded."""
    n = 0
    for level in range(levels[0], levels[1]):
        w = windows[level]
        n = _gather_ring(
            at,
            heights,
            moments,
            _edges(edges_x, starts, shape, level, 1),
            _edges(edges_y, starts, shape, level, 0),
            split[level],
            starts[level, 0],
            (w[0], w[1], w[2], w[3]),
            (w[4], w[5], w[6], w[7]),
            buffer,
            n,
        )
    return padded(buffer, n)


@njit(error_model="numpy", cache=True)
def _shared_level(box: tuple[float, float, float, float], opening: float, sizes: Array) -> int:
    """Return the first level whose blocks are far enough from all stations of a box to share."""
    extent = max(box[1] - box[0], box[3] - box[2])
    level = 1
    while level < sizes.shape[0] and 0.5 * opening * sizes[level] < extent:
        level += 1
    return level


@njit(error_model="numpy", cache=True)
def _group(
    points: Array,
    base: float,
    opening: float,
    cuts: float,
    unit: Any,
    heights: Array,
    moments: tuple[Array, Array, Array, Array],
    shape: Index,
    split: Index,
    starts: Index,
    sizes: Array,
    edges_x: Array,
    edges_y: Array,
    out: Array,
) -> None:
    """Sum the stations of one group: far blocks once for all of them, near ones for each."""
    one = unit[0]
    none = (0, 0, 0, 0)
    levels = sizes.shape[0]
    box = (points[:, 0].min(), points[:, 0].max(), points[:, 1].min(), points[:, 1].max())
    shared = _shared_level(box, opening, sizes)
    geometry = (shape, split, starts, sizes, edges_x, edges_y)
    flat = (shape, split, starts, edges_x, edges_y)
    windows = np.zeros((levels, 8), dtype=np.int64)
    end = (0, -1, 0, -1)
    centre = (0.5 * (box[0] + box[1]), 0.5 * (box[2] + box[3]), points[:, 2].mean())
    far = np.empty((7, 1), unit.dtype)
    count = 0
    if shared < levels:
        ex = _edges(edges_x, starts, shape, shared, 1)
        ey = _edges(edges_y, starts, shape, shared, 0)
        end = _window(box, opening * sizes[shared], ex, ey, none)
        count = _windows(box, opening, (shared, levels), end, none, *geometry, windows)
        far = np.empty((7, count + LANES), unit.dtype)
        count = _fill(centre, (shared, levels), windows, heights, moments, *flat, far)
    cells_x = _edges(edges_x, starts, shape, 0, 1)
    cells_y = _edges(edges_y, starts, shape, 0, 0)
    whole = (cells_x[0], cells_x[-1], cells_y[0], cells_y[-1])
    pull = np.zeros(out.shape[1] - 6)
    for n in range(points.shape[0]):
        at = (points[n, 0], points[n, 1], points[n, 2])
        spot = (at[0], at[0], at[1], at[1])
        total = np.zeros(6)
        pull[:] = 0.0
        window = _window(spot, opening * sizes[0], cells_x, cells_y, none)
        _near(at, window, base, cuts, cells_x, cells_y, heights, total, pull)
        held = _windows(spot, opening, (0, shared), window, end, *geometry, windows)
        near = np.empty((7, held + LANES), unit.dtype)
        held = _fill(at, (0, shared), windows, heights, moments, *flat, near)
        _lines(near, held, *_in(unit, (0.0, 0.0, 0.0)), one, total, pull)
        if count > 0:
            move = _in(unit, (at[0] - centre[0], at[1] - centre[1], at[2] - centre[2]))
            _lines(far, count, *move, one, total, pull)
        endless_rectangle(whole, at, base, -1.0, total)
        if pull.shape[0]:
            pull_endless(whole, at, base, -1.0, pull)
        out[n, :6] = total
        out[n, 6:] = pull


@njit(error_model="numpy", cache=True)
def _lines(
    buffer: Any, count: int, x: Any, y: Any, z: Any, one: Any, total: Array, pull: Array
) -> None:
    """Add gathered lines to the tensor and, where it is asked for, to the attraction."""
    sum_lines(buffer, count, x, y, z, one, total)
    if pull.shape[0]:
        pull_lines(buffer, count, x, y, z, one, pull)


@njit(error_model="numpy", cache=True)
def _near(
    at: tuple[float, float, float],
    window: tuple[int, int, int, int],
    base: float,
    cuts: float,
    edges_x: Array,
    edges_y: Array,
    heights: Array,
    total: Array,
    pull: Array,
) -> None:
    """Add the columns of a window exactly, and what else lies below the base there."""
    i0, i1, j0, j1 = window
    if i1 <= i0 or j1 <= j0:
        return
    buffer = np.empty((7, (i1 - i0) * (j1 - j0) + LANES))
    held = gather_columns(
        at[0], at[1], at[2], edges_x, edges_y, heights, base, window, buffer, total, pull
    )
    sum_columns(buffer, held, total)
    rim = (edges_x[i0], edges_x[i1], edges_y[j0], edges_y[j1])
    endless_rectangle(rim, at, base, 1.0, total)
    if pull.shape[0]:
        pull_columns(buffer, held, pull)
        pull_endless(rim, at, base, 1.0, pull)
    if cuts > 0.0:
        _bend(at, edges_x, edges_y, heights, window, cuts, total, pull)


@njit(error_model="numpy", cache=True)
def _bend(
    at: tuple[float, float, float],
    edges_x: Array,
    edges_y: Array,
    heights: Array,
    window: tuple[int, int, int, int],
    cuts: float,
    total: Array,
    pull: Array,
) -> None:
    """Turn the flat tops of a window into the bilinear surface."""
    room = count_bend(at, edges_x, edges_y, heights, window, cuts)
    buffer = np.empty((7, room))
    held = gather_bend(at, edges_x, edges_y, heights, window, cuts, buffer)
    _lines(buffer, held, 0.0, 0.0, 0.0, 1.0, total, pull)


@njit(inline="always", error_model="numpy", cache=True)
def _in(unit: Any, offset: tuple[float, float, float]) -> tuple[Any, Any, Any]:
    """Return an offset in the precision of the unit."""
    kept = np.empty(3, unit.dtype)
    kept[0], kept[1], kept[2] = offset
    return kept[0], kept[1], kept[2]


@njit(parallel=True, error_model="numpy", cache=True)
def pyramid_sums(
    points: Array,
    groups: Index,
    base: float,
    opening: float,
    cuts: float,
    unit: Any,
    heights: Array,
    moments: tuple[Array, Array, Array, Array],
    shape: Index,
    split: Index,
    starts: Index,
    sizes: Array,
    edges_x: Array,
    edges_y: Array,
    out: Array,
) -> None:
    """Fill (n, 6) tensors, or (n, 9) with the attraction behind, per unit G ρ.

    Columns within ``opening`` cell sizes are exact; blocks of level l serve from ``opening`` of
    their sizes outward, to where the next level takes over. ``cuts`` above zero bends the near
    tops into the bilinear surface (``gather_bend``), which the pyramid must then hold too.
    Group g are the stations from ``groups[g]`` to ``groups[g + 1]``. ``unit`` is [1] in the
    precision of the far field. One thread sums one group, so that the result does not depend on
    the number of threads.
    """
    for g in prange(groups.shape[0] - 1):
        first, last = groups[g], groups[g + 1]
        _group(
            points[first:last],
            base,
            opening,
            cuts,
            unit,
            heights,
            moments,
            shape,
            split,
            starts,
            sizes,
            edges_x,
            edges_y,
            out[first:last],
        )


@njit(parallel=True, error_model="numpy", cache=True)
def exact_sums(
    points: Array,
    edges_x: Array,
    edges_y: Array,
    heights: Array,
    base: float,
    cuts: float,
    out: Array,
) -> None:
    """Fill (n, 6) tensors, or (n, 9), per unit G ρ over every column, all exact."""
    columns = heights.shape[1]
    for n in prange(points.shape[0]):
        at = (points[n, 0], points[n, 1], points[n, 2])
        total, pull = np.zeros(6), np.zeros(out.shape[1] - 6)
        buffer = np.empty((7, columns + LANES))
        for j in range(heights.shape[0]):
            window = (0, columns, j, j + 1)
            held = gather_columns(
                at[0], at[1], at[2], edges_x, edges_y, heights, base, window, buffer, total, pull
            )
            sum_columns(buffer, held, total)
            if pull.shape[0]:
                pull_columns(buffer, held, pull)
            if cuts > 0.0:
                _bend(at, edges_x, edges_y, heights, window, cuts, total, pull)
        out[n, :6] = total
        out[n, 6:] = pull
