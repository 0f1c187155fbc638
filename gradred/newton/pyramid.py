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
    ``skew_x``, ``skew_y`` and ``spread`` (levels from 1 on), and its edges in ``edges_x`` and
    ``edges_y``. ``sizes[l]`` is the side of its largest block. Per block: mean height of the tops,
    sums of area × height × offset from the block's middle along x and y, and of area × (height −
    mean)². ``split[l]`` tells in how many lines along x and y an oblong block stands.
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


def pyramid_of(edges_x: Array, edges_y: Array, heights: Array) -> Pyramid:
    """Return the pyramid of a terrain model.

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
    counts = shape[1:].prod(axis=1)
    blocks = np.concatenate([[0, 0], np.cumsum(counts)])[: len(axes)]
    starts_x, starts_y = (
        np.concatenate([[0], np.cumsum([len(a[side]) for a in axes])[:-1]]) for side in (0, 1)
    )
    moments = np.zeros((4, int(counts.sum())))
    for level in range(1, len(axes)):
        finer = _moments(moments, heights, shape, blocks, level - 1)
        coarser = _moments(moments, heights, shape, blocks, level)
        _join(*finer, *axes[level - 1], *axes[level], *coarser)
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


def _moments(
    moments: Array, heights: Array, shape: Index, starts: Index, level: int
) -> tuple[Array, Array, Array, Array]:
    """Return top, skew_x, skew_y and spread of a level as (rows, columns) views."""
    rows, columns = (int(n) for n in shape[level])
    if level == 0:
        none = np.zeros((1, 1))
        return heights, none, none, none
    part = slice(int(starts[level]), int(starts[level]) + rows * columns)
    top, skew_x, skew_y, spread = (m[part].reshape(rows, columns) for m in moments)
    return top, skew_x, skew_y, spread


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
