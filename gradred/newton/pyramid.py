"""A terrain model joined two by two into ever larger blocks, with the moments of each block."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numba import njit, prange
from numpy.typing import NDArray

Array = NDArray[np.float64]
Index = NDArray[np.int64]


@dataclass(frozen=True)
class Pyramid:
    """Blocks of columns, level by level; level 0 are the cells themselves.

    Level l has ``shape[l]`` rows and columns; ``starts[l]`` is where its blocks begin in ``top``,
    ``skew_x``, ``skew_y`` and ``spread`` (-1 for flat cells, which are all top), and its edges in
    ``edges_x`` and ``edges_y``. ``sizes[l]`` is the side of its largest block. Per block: mean
    height of the tops, sums of area × height × offset from the block's middle along x and y, and
    of area × (height − mean)². ``split[l]`` tells in how many lines along x and y an oblong block
    stands.
    """

    shape: Index
    split: Index
    starts: Index
    sizes: Array
    edges_x: Array
    edges_y: Array
    heights: Array
    top: Array
    skew_x: Array
    skew_y: Array
    spread: Array


def pyramid_of(edges_x: Array, edges_y: Array, heights: Array, *, bilinear: bool) -> Pyramid:
    """Return the pyramid of a terrain model with flat cells, or of the surface between centres.

    Parameters
    ----------
    edges_x, edges_y : (columns + 1,), (rows + 1,) arrays
        Edges of the cells, m.
    heights : (rows, columns) array
        Tops of the columns, m.
    """
    axes = [(edges_x, edges_y)]
    while max(len(axes[-1][0]), len(axes[-1][1])) > 3:
        x, y = axes[-1]
        axes.append((np.append(x[:-1:2], x[-1]), np.append(y[:-1:2], y[-1])))
    shape = np.array([[len(y) - 1, len(x) - 1] for x, y in axes])
    counts = shape.prod(axis=1)
    if not bilinear:
        counts[0] = 0
    blocks = np.concatenate([[0], np.cumsum(counts)[:-1]])
    starts_x, starts_y = (
        np.concatenate([[0], np.cumsum([len(a[side]) for a in axes])[:-1]]) for side in (0, 1)
    )
    moments = np.zeros((4, int(counts.sum())))
    none = np.zeros((1, 1))
    finer = (heights, none, none, none)
    if bilinear:
        finer = _moments(moments, shape[0], 0)
        _level_cells(heights, edges_x, edges_y, *finer)
    else:
        blocks[0] = -1
    for level in range(1, len(axes)):
        coarser = _moments(moments, shape[level], int(blocks[level]))
        _join(*finer, *axes[level - 1], *axes[level], *coarser)
        finer = coarser
    return Pyramid(
        shape.astype(np.int64),
        np.array([_split(x, y) for x, y in axes], dtype=np.int64),
        np.stack([blocks, starts_x, starts_y], axis=1).astype(np.int64),
        np.array([max(np.diff(x).max(), np.diff(y).max()) for x, y in axes]),
        np.concatenate([x for x, _ in axes]),
        np.concatenate([y for _, y in axes]),
        heights,
        *moments,
    )


def _split(edges_x: Array, edges_y: Array) -> tuple[int, int]:
    """Return (2, 1) or (1, 2) for oblong blocks, whose longer side needs two lines."""
    ratio = float(np.median(np.diff(edges_x)) / np.median(np.diff(edges_y)))
    if 0.98 < ratio < 1.02:
        return 1, 1
    return (2, 1) if ratio > 1.0 else (1, 2)


def _moments(moments: Array, shape: Index, first: int) -> tuple[Array, Array, Array, Array]:
    """Return top, skew_x, skew_y and spread of a level as (rows, columns) views."""
    rows, columns = (int(n) for n in shape)
    part = slice(first, first + rows * columns)
    top, skew_x, skew_y, spread = (m[part].reshape(rows, columns) for m in moments)
    return top, skew_x, skew_y, spread


@njit(error_model="numpy", cache=True)
def _signed(n: int) -> int:
    """Return the index of a parallel loop, which is unsigned: n - 1 would turn into a float."""
    return int(np.int64(n))


@njit(error_model="numpy", cache=True)
def _fraction(edges: Array, i: int, x: float) -> tuple[int, float]:
    """Return the lower of the two centres around x, a place in cell i, and the share of the next.

    Beyond the outermost centres the surface goes on level.
    """
    centre = 0.5 * (edges[i] + edges[i + 1])
    low = i if x >= centre else i - 1
    if low < 0:
        return 0, 0.0
    if low + 2 > edges.shape[0] - 1:
        return edges.shape[0] - 3, 1.0
    first = 0.5 * (edges[low] + edges[low + 1])
    second = 0.5 * (edges[low + 1] + edges[low + 2])
    return low, (x - first) / (second - first)


@njit(error_model="numpy", cache=True)
def surface_at(
    heights: Array, edges_x: Array, edges_y: Array, i: int, j: int, x: float, y: float
) -> float:
    """Return the bilinear surface between cell centres at a place inside cell (row j, column i)."""
    m, u = _fraction(edges_x, i, x)
    n, v = _fraction(edges_y, j, y)
    south = (1.0 - u) * heights[n, m] + u * heights[n, m + 1]
    north = (1.0 - u) * heights[n + 1, m] + u * heights[n + 1, m + 1]
    return float((1.0 - v) * south + v * north)


@njit(parallel=True, error_model="numpy", cache=True)
def _level_cells(
    heights: Array,
    edges_x: Array,
    edges_y: Array,
    top: Array,
    skew_x: Array,
    skew_y: Array,
    spread: Array,
) -> None:
    """Fill the moments of cells under the bilinear surface.

    Each quarter of a cell lies between the same four centres: two Gauss points along each axis are
    exact for every moment that is kept.
    """
    for n in prange(top.shape[0]):
        j = _signed(n)
        depth = edges_y[j + 1] - edges_y[j]
        for i in range(top.shape[1]):
            width = edges_x[i + 1] - edges_x[i]
            total = square = at_x = at_y = 0.0
            for q in range(4):
                oy = 0.25 * (2.0 * (q // 2) - 1.0) + (0.25 / 3.0**0.5) * (2.0 * (q % 2) - 1.0)
                for p in range(4):
                    ox = 0.25 * (2.0 * (p // 2) - 1.0) + (0.25 / 3.0**0.5) * (2.0 * (p % 2) - 1.0)
                    x = edges_x[i] + (0.5 + ox) * width
                    y = edges_y[j] + (0.5 + oy) * depth
                    # offsets from the cell's own height keep the digits of the spread
                    h = surface_at(heights, edges_x, edges_y, i, j, x, y) - heights[j, i]
                    total += h
                    square += h * h
                    at_x += h * ox * width
                    at_y += h * oy * depth
            area = width * depth
            top[j, i] = heights[j, i] + total / 16.0
            skew_x[j, i] = area * at_x / 16.0
            skew_y[j, i] = area * at_y / 16.0
            spread[j, i] = area * (square / 16.0 - (total / 16.0) ** 2)


@njit(parallel=True, error_model="numpy", cache=True)
def _join(
    top: Array,
    skew_x: Array,
    skew_y: Array,
    spread: Array,
    fine_x: Array,
    fine_y: Array,
    edges_x: Array,
    edges_y: Array,
    new_top: Array,
    new_skew_x: Array,
    new_skew_y: Array,
    new_spread: Array,
) -> None:
    """Fill the moments of blocks of two by two finer ones; cells have none of their own."""
    rows, columns = top.shape
    own = skew_x.shape[0] == rows
    for j in prange(new_top.shape[0]):
        middle_y = 0.5 * (edges_y[j] + edges_y[j + 1])
        for i in range(new_top.shape[1]):
            middle_x = 0.5 * (edges_x[i] + edges_x[i + 1])
            area = volume = at_x = at_y = square = 0.0
            for n in range(2 * j, min(2 * j + 2, rows)):
                depth = fine_y[n + 1] - fine_y[n]
                dy = 0.5 * (fine_y[n] + fine_y[n + 1]) - middle_y
                for m in range(2 * i, min(2 * i + 2, columns)):
                    a = depth * (fine_x[m + 1] - fine_x[m])
                    v = a * top[n, m]
                    area += a
                    volume += v
                    square += v * top[n, m]
                    at_x += v * (0.5 * (fine_x[m] + fine_x[m + 1]) - middle_x)
                    at_y += v * dy
                    if own:
                        at_x += skew_x[n, m]
                        at_y += skew_y[n, m]
                        square += spread[n, m]
            new_top[j, i] = volume / area
            new_skew_x[j, i] = at_x
            new_skew_y[j, i] = at_y
            new_spread[j, i] = square - volume * volume / area
