"""Six components, the four named frames, and what is computed from a tensor alone.

A gradient tensor is symmetric: six numbers in the order ``COMPONENTS`` along the last axis of an
array. The frames are those of ``FRAMES``; a ``Rotation`` carries the names of the two frames it
joins and refuses to be joined to another where the names do not meet.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final, Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from gradred.errors import SurveyError

Frame = Literal["enu", "grid", "ned", "body"]
Array = NDArray[np.float64]

COMPONENTS: Final = ("xx", "xy", "xz", "yy", "yz", "zz")

FRAMES: Final[dict[str, str]] = {
    "enu": "x east, y north, z up; true north at the station",
    "grid": "x easting, y northing, z up; axes of the survey's projected CRS",
    "ned": "x north, y east, z down",
    "body": "x forward, y starboard, z down; axes of the instrument",
}

_ROW: Final = np.array([0, 0, 0, 1, 1, 2])
_COLUMN: Final = np.array([0, 1, 2, 1, 2, 2])
_PLACE: Final = np.array([[0, 1, 2], [1, 3, 4], [2, 4, 5]])


def to_matrix(tensor: Array) -> Array:
    """Return the (..., 3, 3) matrices of (..., 6) tensors, in the same frame and unit."""
    return tensor[..., _PLACE]


def from_matrix(matrix: Array) -> Array:
    """Return the (..., 6) symmetric parts of (..., 3, 3) matrices, in the same frame and unit."""
    return 0.5 * (matrix[..., _ROW, _COLUMN] + matrix[..., _COLUMN, _ROW])


def axial_vector(matrix: Array) -> Array:
    """Return m, (..., 3), of the antisymmetric part [m×] of (..., 3, 3) matrices, same unit."""
    skew = 0.5 * (matrix - np.swapaxes(matrix, -1, -2))
    return np.stack([skew[..., 2, 1], skew[..., 0, 2], skew[..., 1, 0]], axis=-1)


@dataclass(frozen=True)
class Rotation:
    """A change of axes from frame ``source`` to frame ``target``.

    Parameters
    ----------
    source, target : str
        Names of two of the ``FRAMES``.
    matrix : (..., 3, 3) array
        Takes the components of a vector in ``source`` to those in ``target``; one matrix for all
        stations or one per station.
    """

    source: Frame
    target: Frame
    matrix: Array

    def vector(self, vector: Array) -> Array:
        """Return (..., 3) vectors given in ``source`` by their components in ``target``."""
        return np.asarray(np.einsum("...ij,...j->...i", self.matrix, vector))

    def tensor(self, tensor: Array) -> Array:
        """Return (..., 6) tensors given in ``source`` by their components in ``target``."""
        return np.asarray(np.einsum("...ij,...j->...i", self.on_components(), tensor))

    def spread(self, sigma: Array) -> Array:
        """Return (..., 6) standard deviations in ``target`` of independent ones in ``source``.

        The components in ``target`` are correlated in general; only their own standard
        deviations are returned.
        """
        variance = np.einsum("...ij,...j->...i", self.on_components() ** 2, sigma**2)
        return np.asarray(np.sqrt(variance))

    def on_components(self) -> Array:
        """Return the (..., 6, 6) matrices that act on the six components."""
        m = self.matrix
        forward = np.einsum("...ia,...jb->...ijab", m, m)[..., _ROW, _COLUMN, :, :]
        both = forward + np.swapaxes(forward, -1, -2)
        both[..., [0, 1, 2], [0, 1, 2]] *= 0.5
        return np.asarray(both[..., _ROW, _COLUMN])

    def then(self, other: Rotation) -> Rotation:
        """Return this rotation followed by ``other``, whose source must be this one's target."""
        if other.source != self.target:
            raise SurveyError(
                f"a rotation to {self.target!r} cannot be followed by one from {other.source!r}",
                where=f"joining {self.source}→{self.target} and {other.source}→{other.target}",
                cure="put the missing rotation between them, or turn one of them round",
            )
        return Rotation(self.source, other.target, other.matrix @ self.matrix)

    def inverse(self) -> Rotation:
        """Return the rotation from ``target`` back to ``source``."""
        return Rotation(self.target, self.source, np.swapaxes(self.matrix, -1, -2))


def _about(axis: int, angle: ArrayLike) -> Array:
    """Return (..., 3, 3) changes to axes turned right-handed about one axis, by degrees."""
    radians = np.radians(np.asarray(angle, dtype=np.float64))
    i, j = (axis + 1) % 3, (axis + 2) % 3
    matrix = np.zeros((*radians.shape, 3, 3))
    matrix[..., axis, axis] = 1.0
    matrix[..., i, i] = matrix[..., j, j] = np.cos(radians)
    matrix[..., i, j] = np.sin(radians)
    matrix[..., j, i] = -np.sin(radians)
    return matrix


def ned_to_body(heading: ArrayLike, pitch: ArrayLike, roll: ArrayLike) -> Rotation:
    """Return the change from north-east-down to body axes by the yaw–pitch–roll sequence.

    Parameters
    ----------
    heading, pitch, roll : (n,) array or float
        Degrees: heading clockwise from true north, pitch nose up positive, roll right wing down
        positive. The axes are turned by heading about down, then by pitch about starboard, then
        by roll about forward (Stevens, Lewis and Johnson 2016, Aircraft Control and Simulation,
        3rd edition, section 1.3; from memory).
    """
    return Rotation("ned", "body", _about(0, roll) @ _about(1, pitch) @ _about(2, heading))


def ned_to_enu() -> Rotation:
    """Return the change from north-east-down to east-north-up: exact, its own inverse."""
    return Rotation("ned", "enu", np.array([[0.0, 1.0, 0.0], [1.0, 0.0, 0.0], [0.0, 0.0, -1.0]]))


def body_to_enu(heading: ArrayLike, pitch: ArrayLike, roll: ArrayLike) -> Rotation:
    """Return the change from body axes to east-north-up; angles as in ``ned_to_body``."""
    return ned_to_body(heading, pitch, roll).inverse().then(ned_to_enu())


def enu_to_grid(convergence: ArrayLike) -> Rotation:
    """Return the change from true to grid axes.

    Parameters
    ----------
    convergence : (n,) array or float
        Meridian convergence, degrees: the azimuth of grid north, positive east of true north.
    """
    return Rotation("enu", "grid", _about(2, -np.asarray(convergence, dtype=np.float64)))


def trace(tensor: Array) -> Array:
    """Return the (...) trace of (..., 6) tensors, in any frame, in their unit."""
    return np.asarray(tensor[..., 0] + tensor[..., 3] + tensor[..., 5])


def invariants(tensor: Array) -> tuple[Array, Array]:
    r"""Return the second and third invariant of (..., 6) tensors, the same in every frame.

    .. math:: I_1 = Γ_{xx}Γ_{yy} + Γ_{yy}Γ_{zz} + Γ_{xx}Γ_{zz} - Γ_{xy}^2 - Γ_{yz}^2 - Γ_{xz}^2,
        \quad I_2 = \det Γ

    in E2 and E3; I1 is never positive where the trace is zero (Pedersen and Rasmussen 1990,
    Geophysics 55, 1558-1566).
    """
    xx, xy, xz, yy, yz, zz = np.moveaxis(tensor, -1, 0)
    first = xx * yy + yy * zz + xx * zz - xy**2 - yz**2 - xz**2
    second = xx * (yy * zz - yz**2) + xy * (yz * xz - xy * zz) + xz * (xy * yz - xz * yy)
    return first, second


def horizontal_curvature(tensor: Array) -> Array:
    r"""Return the (...) magnitude of the differential curvature, E, for a frame with z vertical.

    .. math:: \sqrt{((Γ_{yy} - Γ_{xx})/2)^2 + Γ_{xy}^2}

    half the difference of the two principal horizontal gradients: the same in every frame turned
    about the vertical.
    """
    return np.hypot(0.5 * (tensor[..., 3] - tensor[..., 0]), tensor[..., 1])
