"""The normal field of a level ellipsoid: gravity and gradient at any latitude and height."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final, Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from gradred.errors import SurveyError
from gradred.units import EOTVOS, MILLIGAL

Array = NDArray[np.float64]
EllipsoidName = Literal["GRS80", "WGS84"]


@dataclass(frozen=True)
class LevelEllipsoid:
    """Semi-major axis a, m; GM, m3/s2; rate ω, rad/s; first eccentricity squared e²."""

    a: float
    gm: float
    omega: float
    e2: float

    @property
    def linear(self) -> float:
        """Linear eccentricity E = a e, m."""
        return self.a * math.sqrt(self.e2)

    @property
    def b(self) -> float:
        """Semi-minor axis, m."""
        return self.a * math.sqrt(1.0 - self.e2)


def _from_j2(a: float, gm: float, j2: float, omega: float) -> LevelEllipsoid:
    """Return the ellipsoid of a dynamical form factor: Moritz 2000, J. Geodesy 74, eq. 14."""
    e2 = 3.0 * j2
    for _ in range(20):
        second = math.sqrt(e2 / (1.0 - e2))
        twice_q0 = (1.0 + 3.0 / second**2) * math.atan(second) - 3.0 / second
        e2 = 3.0 * j2 + 4.0 / 15.0 * omega**2 * a**3 / gm * e2**1.5 / twice_q0
    return LevelEllipsoid(a, gm, omega, e2)


_FLATTENING: Final = 1.0 / 298.257223563

ELLIPSOIDS: Final[dict[str, LevelEllipsoid]] = {
    # Moritz 2000, J. Geodesy 74, 128-133: the four defining constants
    "GRS80": _from_j2(6378137.0, 3.986005e14, 1.08263e-3, 7.292115e-5),
    # NIMA TR8350.2, 3rd edition, 2000 (with its GM for the orbit determination of 1994)
    "WGS84": LevelEllipsoid(
        6378137.0, 3.986004418e14, 7.292115e-5, _FLATTENING * (2.0 - _FLATTENING)
    ),
}


def _ellipsoid(name: str) -> LevelEllipsoid:
    if name not in ELLIPSOIDS:
        raise SurveyError(
            f"there is no level ellipsoid {name!r}",
            where="gradred.newton",
            cure=f"name one of: {', '.join(ELLIPSOIDS)}",
        )
    return ELLIPSOIDS[name]


def _places(latitude: ArrayLike, height: ArrayLike) -> tuple[Array, Array]:
    phi, h = np.broadcast_arrays(
        np.atleast_1d(np.asarray(latitude, dtype=np.float64)),
        np.asarray(height, dtype=np.float64),
    )
    if np.any(np.abs(phi) > 90.0):
        raise SurveyError(
            f"a latitude of {phi[np.abs(phi) > 90.0][0]:g} degrees",
            where="gradred.newton",
            cure="give geodetic latitudes in degrees, -90 to 90",
        )
    return np.radians(phi), h


def _meridian(ellipsoid: LevelEllipsoid, phi: Array, height: Array) -> tuple[Array, Array]:
    """Return distance from the axis and from the equator's plane, m."""
    normal = ellipsoid.a / np.sqrt(1.0 - ellipsoid.e2 * np.sin(phi) ** 2)
    p = (normal + height) * np.cos(phi)
    return p, (normal * (1.0 - ellipsoid.e2) + height) * np.sin(phi)


def _harmonic(ellipsoid: LevelEllipsoid, p: Array, z: Array) -> tuple[Array, Array, Array]:
    """Return u, sin β and cos β of the confocal coordinates: p = w cos β, z = u sin β."""
    e2 = ellipsoid.linear**2
    reach = p**2 + z**2 - e2
    u = np.sqrt(0.5 * reach * (1.0 + np.sqrt(1.0 + 4.0 * e2 * z**2 / reach**2)))
    sine, cosine = z / u, p / np.sqrt(u**2 + e2)
    length = np.hypot(sine, cosine)
    return u, sine / length, cosine / length


def _potential_slopes(
    ellipsoid: LevelEllipsoid, u: Array, sine: Array, cosine: Array
) -> tuple[Array, ...]:
    """Return V_u, V_β, V_uu, V_uβ, V_ββ of Heiskanen and Moritz 1967, eq. 2-61, less the spin."""
    E, square = ellipsoid.linear, u**2 + ellipsoid.linear**2
    arc = np.arctan2(E, u)
    q = 0.5 * ((1.0 + 3.0 * u**2 / E**2) * arc - 3.0 * u / E)
    q1 = 3.0 * u / E**2 * arc - 0.5 * (1.0 + 3.0 * u**2 / E**2) * E / square - 1.5 / E
    q2 = 3.0 / E**2 * arc - 6.0 * u / (E * square) + (1.0 + 3.0 * u**2 / E**2) * E * u / square**2
    b = ellipsoid.b
    q0 = 0.5 * ((1.0 + 3.0 * b**2 / E**2) * math.atan2(E, b) - 3.0 * b / E)
    scale = 0.5 * ellipsoid.omega**2 * ellipsoid.a**2 / q0
    shape = sine**2 - 1.0 / 3.0
    return (
        -ellipsoid.gm / square + scale * q1 * shape,
        scale * q * 2.0 * sine * cosine,
        2.0 * ellipsoid.gm * u / square**2 + scale * q2 * shape,
        scale * q1 * 2.0 * sine * cosine,
        scale * q * 2.0 * (cosine**2 - sine**2),
    )


def _meridian_field(ellipsoid: LevelEllipsoid, phi: Array, height: Array) -> tuple[Array, ...]:
    """Return V_p, V_z, V_pp, V_pz, V_zz in SI, by the chain rule through (u, β)."""
    u, s, c = _harmonic(ellipsoid, *_meridian(ellipsoid, phi, height))
    e2 = ellipsoid.linear**2
    w = np.sqrt(u**2 + e2)
    vu, vb, vuu, vub, vbb = _potential_slopes(ellipsoid, u, s, c)
    d, d_u, d_b = u**2 + e2 * s**2, 2.0 * u, 2.0 * e2 * s * c
    # numerators over d of u_p, u_z, β_p, β_z, each with its derivatives by u and β
    numerators = (
        (u * w * c, c * (w + u**2 / w), -u * w * s),
        (w**2 * s, 2.0 * u * s, w**2 * c),
        (-w * s, -u * s / w, -w * c),
        (u * c, c, -u * s),
    )
    first = [n / d for n, _, _ in numerators]
    by_u = [(n_u - n * d_u / d) / d for n, n_u, _ in numerators]
    by_b = [(n_b - n * d_b / d) / d for n, _, n_b in numerators]
    up, uz, bp, bz = first

    def bend(i: int, u1: Array, b1: Array, u2: Array, b2: Array) -> Array:
        curved = vu * (by_u[i] * u2 + by_b[i] * b2) + vb * (by_u[i + 2] * u2 + by_b[i + 2] * b2)
        return np.asarray(vuu * u1 * u2 + vub * (u1 * b2 + u2 * b1) + vbb * b1 * b2 + curved)

    return (
        vu * up + vb * bp,
        vu * uz + vb * bz,
        bend(0, up, bp, up, bp),
        bend(0, up, bp, uz, bz),
        bend(1, uz, bz, uz, bz),
    )


def normal_tensor(
    latitude: ArrayLike, height: ArrayLike, *, ellipsoid: EllipsoidName = "GRS80"
) -> Array:
    r"""Return the tensor of the normal gravitational field in the ``enu`` frame.

    .. math:: V = \frac{GM}{E} \arctan\frac{E}{u}
        + \frac{ω^2 a^2}{2} \frac{q(u)}{q_0} \left(\sin^2 β - \tfrac13\right)

    with (u, β) the coordinates of the confocal ellipsoid and
    :math:`2q = (1 + 3u^2/E^2) \arctan(E/u) - 3u/E`; Γ are its second derivatives along east,
    north and up of the geodetic vertical. The centrifugal part is left out: the rotation of the
    Earth belongs to the motion of the platform, whose rates are inertial.

    Assumes all mass, the atmosphere's included, below the station. The air above it changes zz by
    0.99 E at sea level, less 7e-5 E per metre of height (slope of the atmospheric correction of
    Hinze et al. 2005, Geophysics 70, J25): a constant of the block, not modelled.

    Parameters
    ----------
    latitude : (n,) array
        Geodetic latitude, degrees.
    height : (n,) array or float
        Height above the ellipsoid, m, not below -10 km.
    ellipsoid : str
        "GRS80" or "WGS84".

    Returns
    -------
    (n, 6) array
        E. xy and xz are zero by symmetry; the trace is zero.

    Accuracy
    --------
    1e-8 E against 40 digits; GRS80 and WGS84 differ by 0.0005 E.

    Source
    ------
    Heiskanen and Moritz 1967, Physical Geodesy, section 2-7; constants of Moritz 2000, J. Geodesy
    74, 128-133.

    Checked by
    ----------
    ``tests/newton/test_ellipsoid.py`` against 40-digit values.
    """
    phi, h = _places(latitude, height)
    _, _, pp, pz, zz = _meridian_field(_ellipsoid(ellipsoid), phi, h)
    s, c = np.sin(phi), np.cos(phi)
    north = s * s * pp - 2.0 * s * c * pz + c * c * zz
    up = c * c * pp + 2.0 * s * c * pz + s * s * zz
    mixed = s * c * (zz - pp) + (c * c - s * s) * pz
    none = np.zeros_like(north)
    return np.stack([-(north + up), none, none, north, mixed, up], axis=1) / EOTVOS


def normal_gravitation(
    latitude: ArrayLike, height: ArrayLike, *, ellipsoid: EllipsoidName = "GRS80"
) -> Array:
    """Return the (n, 3) normal gravitation, mGal, ``enu``, without the centrifugal part.

    Arguments, formula and source as in ``normal_tensor``; good to 1e-7 mGal.
    """
    phi, h = _places(latitude, height)
    p, z, *_ = _meridian_field(_ellipsoid(ellipsoid), phi, h)
    s, c = np.sin(phi), np.cos(phi)
    return np.stack([np.zeros_like(p), c * z - s * p, c * p + s * z], axis=1) / MILLIGAL


def normal_gravity(
    latitude: ArrayLike, height: ArrayLike, *, ellipsoid: EllipsoidName = "GRS80"
) -> Array:
    """Return the (n,) magnitude of normal gravity, mGal, centrifugal part included.

    Arguments, formula and source as in ``normal_tensor``; good to 1e-7 mGal.
    """
    phi, h = _places(latitude, height)
    shape = _ellipsoid(ellipsoid)
    p, z, *_ = _meridian_field(shape, phi, h)
    spin = shape.omega**2 * _meridian(shape, phi, h)[0]
    return np.asarray(np.hypot(p + spin, z) / MILLIGAL)
