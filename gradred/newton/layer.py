"""Rows of the tensor of many point masses: the design matrix of an equivalent layer."""

from __future__ import annotations

import math

import numpy as np
from numba import njit, prange
from numpy.typing import NDArray

from gradred.units import EOTVOS, MILLIGAL, G

Array = NDArray[np.float64]

UNIT_MASS = 1e9
"""kg: brings the entries of the rows near 1 for sources a few hundred metres away."""


@njit(parallel=True, error_model="numpy", cache=True)
def _tensor_rows(points: Array, sources: Array, scale: float, out: Array) -> None:
    for n in prange(points.shape[0]):
        px, py, pz = points[n, 0], points[n, 1], points[n, 2]
        for m in range(sources.shape[0]):
            x = sources[m, 0] - px
            y = sources[m, 1] - py
            z = sources[m, 2] - pz
            r2 = x * x + y * y + z * z
            k = scale / (r2 * r2 * math.sqrt(r2))
            out[n, 0, m] = k * (3.0 * x * x - r2)
            out[n, 1, m] = k * 3.0 * x * y
            out[n, 2, m] = k * 3.0 * x * z
            out[n, 3, m] = k * (3.0 * y * y - r2)
            out[n, 4, m] = k * 3.0 * y * z
            out[n, 5, m] = k * (3.0 * z * z - r2)


@njit(parallel=True, error_model="numpy", cache=True)
def _pull_rows(points: Array, sources: Array, scale: float, out: Array) -> None:
    for n in prange(points.shape[0]):
        px, py, pz = points[n, 0], points[n, 1], points[n, 2]
        for m in range(sources.shape[0]):
            x = sources[m, 0] - px
            y = sources[m, 1] - py
            z = sources[m, 2] - pz
            r2 = x * x + y * y + z * z
            out[n, m] = -scale * z / (r2 * math.sqrt(r2))


def tensor_rows(points: Array, sources: Array) -> Array:
    r"""Return the tensor at every point of every source of unit mass, in the ``grid`` frame.

    .. math:: Γ_{ij} = G m (3 r_i r_j - r^2 δ_{ij}) / r^5, \quad m = 10^9 \text{ kg}

    Parameters
    ----------
    points : (n, 3) array
        Easting, northing, height, m.
    sources : (m, 3) array
        Easting, northing, height, m; no source at a point.

    Returns
    -------
    (n, 6, m) array
        E.

    Accuracy
    --------
    Rounding, 4e-16 of the largest component.

    Source
    ------
    Second derivatives of Newton's potential.

    Checked by
    ----------
    ``tests/mapping/test_layer.py`` against ``point_tensor``.
    """
    out = np.empty((len(points), 6, len(sources)))
    _tensor_rows(points, sources, G * UNIT_MASS / EOTVOS, out)
    return out


def pull_rows(points: Array, sources: Array) -> Array:
    """Return the (n, m) vertical attraction of unit masses, mGal, positive down.

    Arguments and source as in ``tensor_rows``.
    """
    out = np.empty((len(points), len(sources)))
    _pull_rows(points, sources, G * UNIT_MASS / MILLIGAL, out)
    return out
