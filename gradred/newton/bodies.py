"""Closed forms of simple bodies: point, sphere and prism, each as potential, gravity and tensor.

All in the ``grid`` frame (x east, y north, z up): points and bodies in metres, densities in kg/m3
as contrast to the surroundings, potentials in m2/s2, gravity in mGal, tensors in E. The field of
several bodies is their sum.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from gradred.errors import SurveyError
from gradred.newton import prism
from gradred.units import EOTVOS, MILLIGAL, G

Array = NDArray[np.float64]


def rows(values: ArrayLike, width: int, what: str) -> Array:
    """Return values as (n, width) rows of finite numbers, or refuse them."""
    array = np.atleast_2d(np.asarray(values, dtype=np.float64))
    if array.ndim != 2 or array.shape[1] != width:
        raise SurveyError(
            f"{what} have the shape {np.shape(values)}, but must be (n, {width})",
            where="gradred.newton",
            cure=f"give {width} numbers per row",
        )
    if not np.isfinite(array).all():
        raise SurveyError(
            f"{int((~np.isfinite(array)).any(axis=1).sum())} rows of the {what} are not finite",
            where="gradred.newton",
            cure="leave out what is missing",
        )
    return array


def _per_body(values: ArrayLike, count: int, what: str) -> Array:
    array = np.asarray(values, dtype=np.float64)
    if array.shape not in ((), (count,)) or not np.isfinite(array).all():
        raise SurveyError(
            f"{what} have the shape {array.shape} for {count} bodies, or are not finite",
            where="gradred.newton",
            cure="give one number, or one per body",
        )
    return np.broadcast_to(array, (count,))


def _ball(
    points: ArrayLike, centres: ArrayLike, radii: ArrayLike, mass: Array
) -> tuple[Array, ...]:
    """Return (n, m, 3) offsets, (n, m) squared distances and mass inside over cubed distance.

    Inside a ball all three forms follow from the mass within the point's own distance.
    """
    where = rows(points, 3, "points")
    middle = rows(centres, 3, "centres")
    radius = _per_body(radii, len(middle), "radii")
    offset = middle[None, :, :] - where[:, None, :]
    square = np.einsum("nmi,nmi->nm", offset, offset)
    if np.any((square == 0.0) & (radius == 0.0)):
        raise SurveyError(
            "a point lies at a point mass, where the field is infinite",
            where="gradred.newton",
            cure="move the point, or give the mass a radius",
        )
    reach = np.maximum(square, radius**2)
    return offset, square, reach, np.broadcast_to(mass, (len(middle),)) / reach**1.5, radius


def _ball_potential(points: ArrayLike, centres: ArrayLike, radii: ArrayLike, mass: Array) -> Array:
    _, square, reach, pull, radius = _ball(points, centres, radii, mass)
    inside = square < radius**2
    return np.asarray(
        G * np.where(inside, pull * (1.5 * radius**2 - 0.5 * square), pull * reach).sum(axis=1)
    )


def _ball_gravity(points: ArrayLike, centres: ArrayLike, radii: ArrayLike, mass: Array) -> Array:
    offset, _, _, pull, _ = _ball(points, centres, radii, mass)
    return np.asarray(G / MILLIGAL * np.einsum("nm,nmi->ni", pull, offset))


def _ball_tensor(points: ArrayLike, centres: ArrayLike, radii: ArrayLike, mass: Array) -> Array:
    offset, square, reach, pull, radius = _ball(points, centres, radii, mass)
    spread = np.where(square < radius**2, 0.0, 3.0 * pull / reach)
    x, y, z = np.moveaxis(offset, 2, 0)
    parts = (
        spread * x * x - pull,
        spread * x * y,
        spread * x * z,
        spread * y * y - pull,
        spread * y * z,
        spread * z * z - pull,
    )
    return np.stack([G / EOTVOS * part.sum(axis=1) for part in parts], axis=1)


def point_potential(points: ArrayLike, centres: ArrayLike, masses: ArrayLike) -> Array:
    """Return the (n,) potential, m2/s2, of (m,) point masses, kg: V = G m / r (Newton)."""
    return _ball_potential(points, centres, 0.0, np.asarray(masses, dtype=np.float64))


def point_gravity(points: ArrayLike, centres: ArrayLike, masses: ArrayLike) -> Array:
    """Return the (n, 3) gravity, mGal, ``grid`` frame, of (m,) point masses, kg: g = G m r / r³."""
    return _ball_gravity(points, centres, 0.0, np.asarray(masses, dtype=np.float64))


def point_tensor(points: ArrayLike, centres: ArrayLike, masses: ArrayLike) -> Array:
    r"""Return the tensor of point masses in the ``grid`` frame.

    .. math:: Γ_{ij} = G m (3 r_i r_j - r^2 δ_{ij}) / r^5

    Parameters
    ----------
    points : (n, 3) array
        East, north, up, m.
    centres : (m, 3) array
        East, north, up, m.
    masses : (m,) array
        kg.

    Returns
    -------
    (n, 6) array
        E.

    Accuracy
    --------
    Rounding, 4e-16 of the largest component.

    Source
    ------
    Second derivatives of Newton's potential; Blakely 1995, Potential Theory in Gravity and
    Magnetic Applications, section 3.1 (from memory).

    Checked by
    ----------
    ``tests/newton/test_bodies.py``.
    """
    return _ball_tensor(points, centres, 0.0, np.asarray(masses, dtype=np.float64))


def _sphere_mass(radii: ArrayLike, density: ArrayLike) -> Array:
    mass = 4.0 / 3.0 * np.pi * np.asarray(radii, dtype=np.float64) ** 3 * np.asarray(density)
    return np.asarray(mass, dtype=np.float64)


def sphere_potential(
    points: ArrayLike, centres: ArrayLike, radii: ArrayLike, density: ArrayLike
) -> Array:
    """Return the (n,) potential, m2/s2, of spheres; inside, 2 π G ρ (R² − r²/3)."""
    return _ball_potential(points, centres, radii, _sphere_mass(radii, density))


def sphere_gravity(
    points: ArrayLike, centres: ArrayLike, radii: ArrayLike, density: ArrayLike
) -> Array:
    """Return the (n, 3) gravity, mGal, ``grid`` frame, of spheres; inside, 4/3 π G ρ r."""
    return _ball_gravity(points, centres, radii, _sphere_mass(radii, density))


def sphere_tensor(
    points: ArrayLike, centres: ArrayLike, radii: ArrayLike, density: ArrayLike
) -> Array:
    r"""Return the tensor of homogeneous spheres in the ``grid`` frame.

    Outside that of the mass in the centre, inside :math:`-\frac43 π G ρ δ_{ij}`; on the surface
    the outer value.

    Parameters
    ----------
    points : (n, 3) array
        East, north, up, m.
    centres : (m, 3) array
        East, north, up, m.
    radii : (m,) array
        m.
    density : (m,) array
        Contrast, kg/m3.

    Returns
    -------
    (n, 6) array
        E.

    Accuracy
    --------
    Rounding, 4e-16 of the largest component.

    Source
    ------
    Newton's shell theorem; Blakely 1995, section 3.2 (from memory).

    Checked by
    ----------
    ``tests/newton/test_bodies.py`` against 13-digit values.
    """
    return _ball_tensor(points, centres, radii, _sphere_mass(radii, density))


def _prisms(prisms: ArrayLike, density: ArrayLike) -> tuple[Array, Array]:
    boxes = rows(prisms, 6, "prisms")
    if np.any(boxes[:, 1::2] < boxes[:, ::2]):
        bad = int(np.flatnonzero((boxes[:, 1::2] < boxes[:, ::2]).any(axis=1))[0])
        raise SurveyError(
            f"prism {bad} has a side of negative length: {boxes[bad].tolist()}",
            where="gradred.newton",
            cure="give west, east, south, north, bottom, top in this order",
        )
    return np.ascontiguousarray(boxes), G * _per_body(density, len(boxes), "densities")


def _prism_attraction(points: ArrayLike, prisms: ArrayLike, density: ArrayLike) -> Array:
    boxes, weights = _prisms(prisms, density)
    out = np.empty((len(rows(points, 3, "points")), 4))
    prism.attraction_sums(rows(points, 3, "points"), boxes, weights, out)
    return out


def prism_potential(points: ArrayLike, prisms: ArrayLike, density: ArrayLike) -> Array:
    """Return the (n,) potential, m2/s2, of rectangular prisms; arguments as ``prism_tensor``.

    Half the flux of r/r through the faces, with the closed face integrals of Nagy, Papp and
    Benedek 2000, J. Geodesy 74, 552-560; good to 1e-11 of the potential at every distance.
    """
    return np.asarray(_prism_attraction(points, prisms, density)[:, 3])


def prism_gravity(points: ArrayLike, prisms: ArrayLike, density: ArrayLike) -> Array:
    """Return the (n, 3) gravity, mGal, ``grid`` frame, of prisms; arguments as ``prism_tensor``.

    Closed form of Nagy, Papp and Benedek 2000, J. Geodesy 74, 552-560, continuous everywhere;
    good to 1e-11 of the vector at every distance.
    """
    return np.asarray(_prism_attraction(points, prisms, density)[:, :3] / MILLIGAL)


def prism_tensor(points: ArrayLike, prisms: ArrayLike, density: ArrayLike) -> Array:
    r"""Return the tensor of homogeneous rectangular prisms in the ``grid`` frame.

    .. math:: Γ_{xx} = G ρ\,(Ω_{x_1} - Ω_{x_2}), \quad
        Γ_{xy} = G ρ \sum_{i,j} (-1)^{i+j} \ln\frac{R_{ij2} + z_2}{R_{ij1} + z_1}

    with Ω the solid angle of a face seen from the point and R the distances of the corners. On a
    face the outer limit is returned; nearer to an edge than 1e-9 of the longest side, where the
    logarithm grows without bound, the value at that distance.

    Parameters
    ----------
    points : (n, 3) array
        East, north, up, m.
    prisms : (m, 6) array
        West, east, south, north, bottom, top, m.
    density : (m,) array
        Contrast, kg/m3.

    Returns
    -------
    (n, 6) array
        E.

    Accuracy
    --------
    1e-12 of the tensor's norm at every distance, near faces and thousands of sides away included.

    Source
    ------
    Nagy, Papp and Benedek 2000, J. Geodesy 74, 552-560; faces by van Oosterom and Strackee 1983,
    IEEE Trans. Biomed. Eng. 30, 125-126.

    Checked by
    ----------
    ``tests/newton/test_prism.py`` against 40-digit values.
    """
    boxes, weights = _prisms(prisms, density)
    where = np.ascontiguousarray(rows(points, 3, "points"))
    out = np.empty((len(where), 6))
    prism.tensor_sums(where, boxes, weights / EOTVOS, out)
    return out
