"""The tide of Moon and Sun on a rigid Earth: acceleration and tensor at a station."""

from __future__ import annotations

import warnings
from typing import Any, Final

import erfa
import numpy as np
from numpy.typing import ArrayLike, NDArray

from gradred.errors import SurveyError
from gradred.newton.ellipsoid import ELLIPSOIDS
from gradred.units import EOTVOS, MICROGAL

Array = NDArray[np.float64]

# JPL DE421 (Folkner, Williams and Boggs 2009, IPN Progress Report 42-178), m3/s2
GM_MOON: Final = 4.902800076e12
GM_SUN: Final = 1.32712440040945e20

_AU: Final = 149597870700.0  # m, exact: IAU 2012 resolution B2
_STEP: Final = np.timedelta64(1800, "s")
_NANOSECONDS: Final = 86_400_000_000_000


def _julian(time: NDArray[Any]) -> tuple[Array, Array]:
    """Return UTC as two-part Julian dates."""
    count = time.astype("datetime64[ns]").astype(np.int64)
    day = np.floor_divide(count, _NANOSECONDS)
    return day + 2440587.5, (count - day * _NANOSECONDS) / _NANOSECONDS


def _bodies_of_date(time: NDArray[Any]) -> tuple[Array, Array]:
    """Return (k, 3) geocentric Moon and Sun, m, along the axes of the intermediate equator.

    Moon: Meeus's series as in ``erfa.moon98``; Sun: VSOP2000 as in ``erfa.epv00``; precession and
    nutation IAU 2006/2000A. Polar motion (0.3 arcseconds, 2e-4 µGal) is left out.
    """
    with warnings.catch_warnings():
        # leap seconds are not known years ahead; one second is 5e-4 µGal
        warnings.filterwarnings("ignore", message=".*dubious year", category=erfa.ErfaWarning)
        tt = erfa.taitt(*erfa.utctai(*_julian(time)))
    moon = erfa.moon98(*tt)["p"] * _AU
    sun = -erfa.epv00(*tt)[0]["p"] * _AU
    turn = erfa.c2i06a(*tt)
    return np.einsum("kij,kj->ki", turn, moon), np.einsum("kij,kj->ki", turn, sun)


def _terrestrial(time: NDArray[Any]) -> tuple[Array, Array]:
    """Return (n, 3) geocentric Moon and Sun, m, along the axes of the Earth.

    Positions come from half-hour knots around each epoch by cubic interpolation (2e-11 of them)
    and are turned by the Earth rotation angle of the epoch itself; UT1 is taken as UTC (0.9 s,
    at most 0.01 µGal).
    """
    since = (time - np.datetime64("2000-01-01", "ns")) / _STEP
    first = np.floor(since).astype(np.int64)
    knots, place = np.unique(first[:, None] + np.arange(-1, 3), return_inverse=True)
    known = _bodies_of_date(np.datetime64("2000-01-01", "ns") + knots * _STEP)
    t = since - first
    weights = np.stack(
        [
            -t * (t - 1) * (t - 2) / 6,
            (t + 1) * (t - 1) * (t - 2) / 2,
            -(t + 1) * t * (t - 2) / 2,
            (t + 1) * t * (t - 1) / 6,
        ],
        axis=1,
    )
    angle = erfa.era00(*_julian(time))
    c, s = np.cos(angle), np.sin(angle)
    out = []
    for body in known:
        x, y, z = np.einsum("nk,nki->in", weights, body[place.reshape(weights.shape)])
        out.append(np.stack([c * x + s * y, c * y - s * x, z], axis=1))
    return out[0], out[1]


def _stations(
    time: ArrayLike, longitude: ArrayLike, latitude: ArrayLike, height: ArrayLike
) -> tuple[NDArray[Any], Array, Array]:
    """Return (n,) epochs, (n, 3) geocentric stations, and (n, 3, 3) rows east, north, up."""
    when = np.atleast_1d(np.asarray(time, dtype="datetime64[ns]"))
    if np.isnat(when).any():
        raise SurveyError(
            f"{np.isnat(when).sum()} of {when.size} times are missing",
            where="gradred.newton tide",
            cure="leave out the stations without a time",
        )
    when, lon, lat, h = np.broadcast_arrays(when, longitude, latitude, height)
    lam, phi = np.radians(lon.astype(np.float64)), np.radians(lat.astype(np.float64))
    shape = ELLIPSOIDS["GRS80"]
    sp, cp, sl, cl = np.sin(phi), np.cos(phi), np.sin(lam), np.cos(lam)
    normal = shape.a / np.sqrt(1.0 - shape.e2 * sp**2)
    up = np.stack([cp * cl, cp * sl, sp], axis=1)
    place = np.stack(
        [
            (normal + h) * cp * cl,
            (normal + h) * cp * sl,
            (normal * (1.0 - shape.e2) + h) * sp,
        ],
        axis=1,
    )
    east = np.stack([-sl, cl, np.zeros_like(sl)], axis=1)
    north = np.stack([-sp * cl, -sp * sl, cp], axis=1)
    return when, place, np.stack([east, north, up], axis=1)


def tide_acceleration(
    time: ArrayLike, longitude: ArrayLike, latitude: ArrayLike, height: ArrayLike
) -> Array:
    r"""Return the tidal acceleration of Moon and Sun in the ``enu`` frame.

    .. math:: a = \sum GM \left(\frac{d - x}{|d - x|^3} - \frac{d}{|d|^3}\right)

    with d the body and x the station from the Earth's centre: the attraction at the station less
    that of the centre, which falls freely. Complete in the degree of the tide.

    Assumes a rigid Earth: no gravimetric factor and no ocean load; the permanent part is included.

    Parameters
    ----------
    time : (n,) datetime64 array
        UTC.
    longitude, latitude : (n,) arrays
        Geodetic, degrees.
    height : (n,) array
        Above the ellipsoid, m.

    Returns
    -------
    (n, 3) array
        East, north, up, µGal.

    Accuracy
    --------
    0.02 µGal against JPL DE421.

    Source
    ------
    Newton's tide; positions by pyerfa (Meeus 1998; VSOP2000, Moisson and Bretagnon 2001), Earth
    rotation IAU 2006/2000A (Petit and Luzum 2010, IERS Technical Note 36).

    Checked by
    ----------
    ``tests/newton/test_tides.py`` against a JPL ephemeris.
    """
    when, place, axes = _stations(time, longitude, latitude, height)
    total = np.zeros((len(when), 3))
    for gm, body in zip((GM_MOON, GM_SUN), _terrestrial(when), strict=True):
        way = body - place
        near = np.linalg.norm(way, axis=1, keepdims=True)
        centre = np.linalg.norm(body, axis=1, keepdims=True)
        total += gm * (way / near**3 - body / centre**3)
    return np.asarray(np.einsum("nij,nj->ni", axes, total) / MICROGAL)


def tide_tensor(
    time: ArrayLike, longitude: ArrayLike, latitude: ArrayLike, height: ArrayLike
) -> Array:
    r"""Return the gradient tensor of Moon and Sun in the ``enu`` frame.

    .. math:: Γ_{ij} = \sum GM\,(3 r_i r_j - r^2 δ_{ij}) / r^5

    with r from the station to the body: below 0.0003 E everywhere and always.

    Parameters
    ----------
    time : (n,) datetime64 array
        UTC.
    longitude, latitude : (n,) arrays
        Geodetic, degrees.
    height : (n,) array
        Above the ellipsoid, m.

    Returns
    -------
    (n, 6) array
        E.

    Accuracy
    --------
    3e-8 E against JPL DE421; a rigid Earth, whose yielding would change it by less than itself.

    Source
    ------
    Second derivatives of Newton's potential; positions as in ``tide_acceleration`` (pyerfa).

    Checked by
    ----------
    ``tests/newton/test_tides.py`` against a JPL ephemeris.
    """
    when, place, axes = _stations(time, longitude, latitude, height)
    out = np.zeros((len(when), 6))
    for gm, body in zip((GM_MOON, GM_SUN), _terrestrial(when), strict=True):
        x, y, z = np.einsum("nij,nj->in", axes, body - place)
        r2 = x * x + y * y + z * z
        parts = (3 * x * x - r2, 3 * x * y, 3 * x * z, 3 * y * y - r2, 3 * y * z, 3 * z * z - r2)
        out += (gm / EOTVOS / r2**2.5)[:, None] * np.stack(parts, axis=1)
    return out
