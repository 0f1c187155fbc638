"""A mesh of prisms as a linear operator from density to tensors: forward and adjoint."""

from __future__ import annotations

import numpy as np
from numba import njit, prange
from numpy.typing import NDArray

from gradred.newton.prism import tensor_at
from gradred.units import EOTVOS, G

Array = NDArray[np.float64]
Single = NDArray[np.float32]


@njit(parallel=True, error_model="numpy", cache=True)
def _matrix(points: Array, prisms: Array, weights: Array, scale: float, out: Single) -> None:
    for n in prange(points.shape[0]):
        x, y, z = points[n, 0], points[n, 1], points[n, 2]
        for m in range(prisms.shape[0]):
            part = tensor_at(
                prisms[m, 0] - x,
                prisms[m, 1] - x,
                prisms[m, 2] - y,
                prisms[m, 3] - y,
                prisms[m, 4] - z,
                prisms[m, 5] - z,
            )
            for c in range(6):
                out[6 * n + c, m] = scale * weights[n, c] * part[c]


class VoxelOperator:
    r"""Weighted tensors of a mesh of prisms, ``grid`` frame: d = A ρ and ρ = Aᵀ d.

    .. math:: A_{(n,c),m} = w_{n,c}\, Γ_c(\text{point } n, \text{prism } m) / ρ

    Parameters
    ----------
    points : (n, 3) array
        Easting, northing, height, m.
    prisms : (m, 6) array
        West, east, south, north, bottom, top, m.
    weights : (n, 6) array
        Factor of each reading, 1 / σ in a fit; 0 leaves a reading out.

    Accuracy
    --------
    Single precision: 1e-6 of the largest entry of a row, some 1e-4 of the noise in a fit.

    Source
    ------
    Prisms of Nagy, Papp and Benedek 2000, J. Geodesy 74, 552-560, as in ``prism_tensor``.

    Checked by
    ----------
    ``tests/newton/test_voxels.py``: the dot test, and ``prism_tensor``.
    """

    def __init__(self, points: Array, prisms: Array, weights: Array) -> None:
        self.matrix: Single = np.empty((6 * len(points), len(prisms)), dtype=np.float32)
        _matrix(
            np.ascontiguousarray(points),
            np.ascontiguousarray(prisms),
            np.ascontiguousarray(weights),
            G / EOTVOS,
            self.matrix,
        )

    @property
    def shape(self) -> tuple[int, int]:
        """Number of readings, six per point, and of prisms."""
        return self.matrix.shape[0], self.matrix.shape[1]

    def forward(self, density: Array) -> Array:
        """Return (6 n,) weighted tensors of (m,) densities, kg/m3."""
        return np.asarray(self.matrix @ density.astype(np.float32), dtype=np.float64)

    def adjoint(self, readings: Array) -> Array:
        """Return (m,) sums of (6 n,) weighted readings."""
        return np.asarray(readings.astype(np.float32) @ self.matrix, dtype=np.float64)

    def sensitivity(self) -> Array:
        """Return the (m,) root of the sum of squares of every column."""
        total = np.zeros(self.shape[1])
        for first in range(0, self.shape[0], 2000):
            part = self.matrix[first : first + 2000]
            total += np.einsum("nm,nm->m", part, part, dtype=np.float64)
        return np.sqrt(total)
