"""Flight of a gradiometer: a path and an attitude in, motion with exact inertial rates out."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, fields
from typing import Self

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import make_interp_spline
from scipy.ndimage import gaussian_filter1d

from gradred.tensor import ned_to_body
from gradred.units import EARTH_RATE

Array = NDArray[np.float64]
Times = NDArray[np.datetime64]


@dataclass(frozen=True)
class Stations:
    """Where and when a reading is taken.

    Parameters
    ----------
    time : (n,) array
        UTC.
    longitude, latitude, height : (n,) arrays
        Geodetic degrees; metres above the ellipsoid.
    """

    time: Times
    longitude: Array
    latitude: Array
    height: Array

    @classmethod
    def join(cls, parts: Sequence[Self]) -> Self:
        """Return the stations of several parts, one part after another."""
        return cls(
            *(np.concatenate([getattr(part, f.name) for part in parts]) for f in fields(cls))
        )

    def select(self, index: NDArray[np.intp] | slice) -> Self:
        """Return the stations of an index, in its order."""
        return type(self)(*(getattr(self, f.name)[index] for f in fields(self)))


@dataclass(frozen=True)
class Motion(Stations):
    """Stations, how the instrument is turned there, and how fast it turns.

    Parameters
    ----------
    heading, pitch, roll : (n,) arrays
        Degrees.
    rates : (n, 3) array
        ω of the instrument relative to inertial space, ``body`` axes, rad/s.
    acceleration : (n, 3) array
        dω/dt, rad/s².
    """

    heading: Array
    pitch: Array
    roll: Array
    rates: Array
    acceleration: Array


def wander(random: np.random.Generator, size: int, correlation: float) -> Array:
    """Return a smooth random series of unit expected variance: white noise through a Gaussian.

    Parameters
    ----------
    random : Generator
        Source of the white noise.
    size : int
        Length of the series, samples.
    correlation : float
        Standard deviation of the Gaussian, samples, at least 1.

    Returns
    -------
    (size,) array
    """
    margin = int(np.ceil(5.0 * correlation))
    white = random.standard_normal(size + 2 * margin)
    smooth = gaussian_filter1d(white, correlation, truncate=5.0, mode="constant")
    # the squared weights of a Gaussian of standard deviation s sum to 1 / (2 s √π)
    return np.asarray(smooth[margin:-margin] * np.sqrt(2.0 * correlation * np.sqrt(np.pi)))


def navigation_rate(latitude: Array, longitude_rate: Array, latitude_rate: Array) -> Array:
    r"""Rate of the local north-east-down axes relative to inertial space, in the ``ned`` frame.

    .. math:: ω_{in} = \bigl((Ω + \dot λ) \cos φ,\; -\dot φ,\; -(Ω + \dot λ) \sin φ\bigr)

    Earth rate Ω about the Earth's axis and the transport rate of a moving geodetic vertical.

    Parameters
    ----------
    latitude : (n,) array
        φ, geodetic, radians.
    longitude_rate, latitude_rate : (n,) arrays
        rad/s.

    Returns
    -------
    (n, 3) array
        rad/s.

    Accuracy
    --------
    Exact for geodetic coordinates on any ellipsoid of revolution; the motion of the pole and the
    change of Ω (1e-8 of it) are left out.

    Source
    ------
    Groves 2013, Principles of GNSS, Inertial, and Multisensor Integrated Navigation Systems,
    2nd edition, Artech House, section 5.4; from memory.

    Checked by
    ----------
    ``tests/test_flight.py`` against the differentiated rotation of an Earth-fixed frame that
    spins.
    """
    spin = EARTH_RATE + longitude_rate
    return np.stack([spin * np.cos(latitude), -latitude_rate, -spin * np.sin(latitude)], axis=-1)


def _attitude_rate(angle: Array, first: Array, second: Array) -> tuple[Array, Array]:
    """Return the rate of body relative to ned, body axes, and its derivative.

    ``angle``, ``first`` and ``second`` are (3, n): heading, pitch, roll in radians and their first
    and second derivatives. Differentiated term by term from the yaw–pitch–roll sequence (Stevens,
    Lewis and Johnson 2016, Aircraft Control and Simulation, 3rd edition, eq. 1.4-3; equation
    number from memory).
    """
    _, pitch, roll = angle
    h1, p1, r1 = first
    h2, p2, r2 = second
    sp, cp, sr, cr = np.sin(pitch), np.cos(pitch), np.sin(roll), np.cos(roll)
    rate = np.stack([r1 - h1 * sp, p1 * cr + h1 * cp * sr, h1 * cp * cr - p1 * sr], axis=-1)
    change = np.stack(
        [
            r2 - h2 * sp - h1 * p1 * cp,
            p2 * cr - p1 * r1 * sr + h2 * cp * sr - h1 * p1 * sp * sr + h1 * r1 * cp * cr,
            h2 * cp * cr - h1 * p1 * sp * cr - h1 * r1 * cp * sr - p2 * sr - p1 * r1 * cr,
        ],
        axis=-1,
    )
    return rate, change


def fly(start: np.datetime64, knots: Array, path: Array, attitude: Array, at: Array) -> Motion:
    r"""Motion along a path with an attitude, with inertial rates in the ``body`` frame.

    .. math:: ω = ω_{nb} + C_{bn} ω_{in}, \quad
        \dot ω = \dot ω_{nb} + C_{bn} \dot ω_{in} - ω_{nb} × C_{bn} ω_{in}

    Positions and angles are quintic splines through the knots, and every derivative is the exact
    derivative of those splines: rates, accelerations and attitude belong together to rounding.

    Parameters
    ----------
    start : datetime64
        UTC of second 0.
    knots : (k,) array
        Seconds, ascending, k at least 6.
    path : (k, 3) array
        Longitude and latitude, degrees, and ellipsoidal height, metres.
    attitude : (k, 3) array
        Heading (not wrapped), pitch, roll, degrees.
    at : (n,) array
        Seconds of the stations, within the knots; to the nanosecond.

    Returns
    -------
    Motion

    Accuracy
    --------
    Rounding: 1e-12 of the rates.

    Source
    ------
    Composition of rates: Groves 2013, as in ``navigation_rate``.

    Checked by
    ----------
    ``tests/test_flight.py`` against differentiated rotation matrices, Earth rate included.
    """
    radians = np.concatenate([np.radians(path[:, :2]), path[:, 2:], np.radians(attitude)], axis=1)
    spline = make_interp_spline(knots, radians, k=5)
    value, first, second = (spline(at, nu=order).T for order in range(3))
    longitude, latitude = value[:2]
    in_ned = navigation_rate(latitude, first[0], first[1])
    spin = EARTH_RATE + first[0]
    sine, cosine = np.sin(latitude), np.cos(latitude)
    in_ned_change = np.stack(
        [
            second[0] * cosine - spin * sine * first[1],
            -second[1],
            -second[0] * sine - spin * cosine * first[1],
        ],
        axis=-1,
    )
    degrees = np.degrees(value[3:])
    to_body = ned_to_body(*degrees)
    rate, change = _attitude_rate(value[3:], first[3:], second[3:])
    carried = to_body.vector(in_ned)
    return Motion(
        time=start + np.round(at * 1e9).astype("timedelta64[ns]"),
        longitude=np.degrees(longitude),
        latitude=np.degrees(latitude),
        height=value[2],
        heading=degrees[0] % 360.0,
        pitch=degrees[1],
        roll=degrees[2],
        rates=rate + carried,
        acceleration=change + to_body.vector(in_ned_change) - np.cross(rate, carried),
    )
