"""The norm of a density model: how much of it there is, and how fast it changes."""

from __future__ import annotations

from typing import Final

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from gradred.inversion.mesh import Mesh

Array = NDArray[np.float64]

_SMALL: Final = 0.05


def roughness_of(mesh: Mesh, smooth_length: float, depth_power: float) -> sparse.csr_array:
    r"""Return R: size of the cells and differences of neighbours, per distance.

    .. math:: |Rρ|^2 = \sum v\,w^2 \left(\frac{d^2}{L^2} ρ^2 +
        \sum_{nb} \frac{d^2}{s^2} (Δρ)^2\right), \quad w^2 = \left(\frac{z}{z_0}\right)^{-p}

    with v the volume of a cell over the mean one, d the side of a column, s the distance of
    neighbouring centres, so that the norm does not depend on the thickness of the layers; z the
    depth below the stations and z0 that of the uppermost cell: the norm of Li and Oldenburg 1998,
    Geophysics 63, 109-119.

    They relax the norm downward with a power p of 3 for one component of a gradient. Readings of
    all components hold the depth themselves, and the power only sinks the model and adds to its
    mass: bodies 200 to 350 m thick under 50 to 120 m of cover came back with 1.1 to 1.4 of their
    mass with the power 0, 1.5 to 2.0 with 1, and 3.7 to 4.9 with 3. A body under 420 m of cover, a
    seventh of the block's side, came back too shallow and with half its mass with 0.
    """
    layers, rows, columns = mesh.shape
    number = np.arange(layers * rows * columns).reshape(mesh.shape)
    depth = mesh.depth_below_stations
    weight = (depth / depth.min()) ** (-0.5 * depth_power)
    volume = np.sqrt(mesh.volumes / mesh.volumes.mean())
    middle = 0.5 * (mesh.tops + mesh.bottoms).ravel()
    parts = [sparse.csr_array(sparse.diags_array(weight * volume * mesh.cell / smooth_length))]
    for axis in range(3):
        first = number.take(range(mesh.shape[axis] - 1), axis=axis).ravel()
        second = number.take(range(1, mesh.shape[axis]), axis=axis).ravel()
        apart = middle[first] - middle[second] if axis == 0 else mesh.cell
        between = np.sqrt(weight[first] * weight[second] * volume[first] * volume[second])
        between = between * mesh.cell / apart
        row = np.arange(len(first))
        entries = np.concatenate([between, -between])
        places = (np.concatenate([row, row]), np.concatenate([first, second]))
        parts.append(sparse.csr_array((entries, places), shape=(len(first), number.size)))
    return sparse.csr_array(sparse.vstack(parts))


def blocky(roughness: sparse.csr_array, density: Array) -> sparse.csr_array:
    r"""Return R weighted so that a large size or difference counts by itself, not by its square.

    .. math:: r_k^2 \to \frac{e\, r_k^2}{\sqrt{q_k^2 + e^2}}, \quad q = R ρ, \quad
        e = 0.05 \max |q|

    times a factor that leaves the norm of ``density`` as it was. Iterated, it minimises the sum of
    the sizes of what exceeds e: Ekblom's measure as used by Farquharson and Oldenburg 1998,
    Geophysical J. International 134, 213-227 (from memory).
    """
    parts = roughness @ density
    least = _SMALL * float(np.abs(parts).max())
    if least == 0.0:
        return roughness
    weight = least / np.sqrt(parts**2 + least**2)
    weight *= float(parts @ parts) / float(parts @ (weight * parts))
    return sparse.csr_array(sparse.diags_array(np.sqrt(weight)) @ roughness)
