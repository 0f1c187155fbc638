"""The chain backwards: bodies, terrain and flight → readings of a gradiometer.

Everything is written from the physics and calls no stage of the reduction, so that the two check
each other. ``flight.fly`` turns a path and an attitude into motion with exact rates, ``field``
gives the true tensor at the stations, ``read`` is the instrument; ``drift`` and ``white_noise``
are its faults, and ``lines_part`` hands its readings to a chain without going through a file.

Grid distances are taken as metres on the ground: the scale of the projection is left out here as
it is in the reduction.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, fields
from typing import Final

import numpy as np
import xarray as xr
from numpy.typing import NDArray
from pyproj import Transformer

from gradred import survey
from gradred.flight import Motion, Stations
from gradred.newton.bodies import prism_tensor, sphere_tensor
from gradred.newton.ellipsoid import normal_tensor
from gradred.newton.heightfield import exact_terrain_tensor, terrain_tensor
from gradred.newton.polyhedron import polyhedron_tensor
from gradred.newton.sheet import dipping_sheet
from gradred.newton.tides import tide_tensor
from gradred.tensor import (
    axial_vector,
    body_to_enu,
    enu_to_grid,
    from_matrix,
    to_matrix,
)
from gradred.units import EOTVOS

Array = NDArray[np.float64]

ELEMENTS: Final = tuple(f"m{row}{column}" for row in "xyz" for column in "xyz")
"""Names of the nine elements of a reading, row by row."""


@dataclass(frozen=True)
class Sphere:
    """A sphere; ``height`` is its centre's; metres in the grid frame, kg/m3."""

    easting: float
    northing: float
    height: float
    radius: float
    density: float

    def tensor(self, points: Array) -> Array:
        """Return (n, 6) E in the ``grid`` frame at (n, 3) points, metres."""
        centre = np.array([[self.easting, self.northing, self.height]])
        return sphere_tensor(points, centre, np.array([self.radius]), np.array([self.density]))


@dataclass(frozen=True)
class Prism:
    """An upright prism with sides along the grid axes; metres, kg/m3."""

    west: float
    east: float
    south: float
    north: float
    bottom: float
    top: float
    density: float

    def tensor(self, points: Array) -> Array:
        """Return (n, 6) E in the ``grid`` frame at (n, 3) points, metres."""
        *box, density = (getattr(self, field.name) for field in fields(self))
        return prism_tensor(points, np.array([box]), np.array([density]))


@dataclass(frozen=True)
class Sheet:
    """A dipping sheet, parameters as in ``newton.sheet.dipping_sheet``; metres, degrees, kg/m3."""

    easting: float
    northing: float
    top: float
    strike: float
    dip: float
    length: float
    extent: float
    thickness: float
    density: float

    def tensor(self, points: Array) -> Array:
        """Return (n, 6) E in the ``grid`` frame at (n, 3) points, metres."""
        *shape, density = (getattr(self, field.name) for field in fields(self))
        return polyhedron_tensor(points, *dipping_sheet(*shape), density)


@dataclass(frozen=True)
class Layer:
    """Mass of one density between a surface and a level base, a flat-topped column per cell.

    Parameters
    ----------
    heights : (n_northing, n_easting) array
        Height of the surface in every cell, metres; rows along northing.
    easting, northing : (n_easting,), (n_northing,) arrays
        Cell centres, metres, ascending.
    density : float
        kg/m3; a contrast where it lies inside another layer.
    base : float
        Height of its lower side, metres, in the vertical reference of ``heights``.
    tolerance : float
        Largest error of its tensor, E; 0 sums every cell in closed form, at every station.
    """

    heights: Array
    easting: Array
    northing: Array
    density: float
    base: float
    tolerance: float = 0.001

    def tensor(self, points: Array) -> Array:
        """Return (n, 6) E in the ``grid`` frame at (n, 3) points, metres."""
        model = (points, self.heights, self.easting, self.northing)
        if self.tolerance == 0.0:
            return exact_terrain_tensor(*model, density=self.density, base=self.base)
        return terrain_tensor(
            *model, density=self.density, base=self.base, tolerance=self.tolerance
        )


def grid_points(stations: Stations, crs: str) -> Array:
    """Return (n, 3) easting, northing in the CRS and ellipsoidal height, metres."""
    project = Transformer.from_crs("EPSG:4326", crs, always_xy=True).transform
    return np.stack([*project(stations.longitude, stations.latitude), stations.height], axis=-1)


def grid_north(longitude: Array, latitude: Array, crs: str) -> Array:
    """Return the (n,) azimuth of grid north, degrees, positive east of true north.

    From the bearing on the map of two points 1e-4 degrees north and south of the station: good to
    1e-7 degrees (positions are projected to 1e-9 m over a distance of 22 m), for a conformal
    projection.
    """
    project = Transformer.from_crs("EPSG:4326", crs, always_xy=True).transform
    east_1, north_1 = project(longitude, latitude + 1e-4)
    east_0, north_0 = project(longitude, latitude - 1e-4)
    return np.asarray(-np.degrees(np.arctan2(east_1 - east_0, north_1 - north_0)))


def field(
    stations: Stations,
    crs: str,
    bodies: Sequence[Sphere | Prism | Sheet] = (),
    layers: Sequence[Layer] = (),
) -> dict[str, Array]:
    """Parts of the true gradient tensor at the stations, in the ``enu`` frame.

    Parameters
    ----------
    stations : Stations
        Where the field is wanted.
    crs : str
        Projected CRS of bodies and layers; their heights are ellipsoidal.
    bodies, layers : sequences
        Mass.

    Returns
    -------
    dict of (n, 6) arrays
        ``bodies``, ``terrain``, ``normal`` and ``tide``, E.

    Accuracy
    --------
    Closed forms to rounding; the layers to their own tolerance. The Earth is flat to bodies and
    layers.

    Source
    ------
    The functions of ``gradred.newton``.

    Checked by
    ----------
    ``tests/test_simulate.py``: sphere over flat ground against its closed form.
    """
    points = grid_points(stations, crs)
    to_enu = enu_to_grid(grid_north(stations.longitude, stations.latitude, crs)).inverse()
    none = np.zeros((len(points), 6))
    return {
        "bodies": to_enu.tensor(sum((body.tensor(points) for body in bodies), none)),
        "terrain": to_enu.tensor(sum((layer.tensor(points) for layer in layers), none)),
        "normal": normal_tensor(stations.latitude, stations.height),
        "tide": tide_tensor(stations.time, stations.longitude, stations.latitude, stations.height),
    }


def read(motion: Motion, gradient: Array, self_gradient: Array | None = None) -> Array:
    r"""Return what a perfect instrument on the moving platform reads, in the ``body`` frame.

    .. math:: M = Γ - ΩΩ - \dot Ω, \quad Ω = [ω×], \quad ΩΩ = ω ω^T - |ω|^2 I

    Parameters
    ----------
    motion : Motion
        Attitude and rates at the stations.
    gradient : (n, 6) array
        True tensor of everything outside the aircraft, E, ``enu``.
    self_gradient : (6,) array, optional
        The aircraft's own tensor, E, constant in ``body``.

    Returns
    -------
    (n, 3, 3) array
        E; neither symmetric nor free of trace.

    Accuracy
    --------
    Rounding: 1e-16 of its largest part, 1e-10 E at an angular acceleration of 1e-3 rad/s².

    Source
    ------
    Rummel, Yi and Stummer 2011, Journal of Geodesy 85, 777-790, for a gradiometer in orbit; the
    equation is the derivative of the acceleration in turning axes.

    Checked by
    ----------
    ``tests/test_simulate.py``: trace, and the relative motion of free-falling points seen from
    the turning axes.
    """
    to_body = body_to_enu(motion.heading, motion.pitch, motion.roll).inverse()
    there = to_body.tensor(gradient)
    if self_gradient is not None:
        there = there + self_gradient
    rates = motion.rates
    square = np.einsum("ni,ni->n", rates, rates)[:, None, None] * np.eye(3)
    centrifugal = rates[:, :, None] * rates[:, None, :] - square
    turning = centrifugal + cross_matrix(motion.acceleration)
    return np.asarray(to_matrix(there) - turning / EOTVOS)


def cross_matrix(vector: Array) -> Array:
    """Return the (n, 3, 3) matrices [v×] of (n, 3) vectors: [v×] w = v × w."""
    x, y, z = np.moveaxis(vector, -1, 0)
    none = np.zeros_like(x)
    return np.stack([none, -z, y, z, none, -x, -y, x, none], axis=-1).reshape(*x.shape, 3, 3)


def drift(
    random: np.random.Generator, line: NDArray[np.intp], *, constant: float, tilt: float
) -> Array:
    """Drift of the instrument that starts anew on every line, each element on its own.

    Parameters
    ----------
    random : Generator
        Source of the numbers.
    line : (n,) int array
        Number of the line of each station, from 0; stations of a line in order of time.
    constant : float
        Standard deviation of a line's mean drift, E.
    tilt : float
        Standard deviation of the change from a line's first to its last station, E.

    Returns
    -------
    (n, 3, 3) array
        E, in the frame of the reading.
    """
    out = np.empty((len(line), 3, 3))
    for number in range(int(line.max()) + 1):
        here = np.flatnonzero(line == number)
        along = np.linspace(-0.5, 0.5, len(here))[:, None, None]
        mean, change = random.standard_normal((2, 3, 3))
        out[here] = constant * mean + tilt * change * along
    return out


def white_noise(random: np.random.Generator, count: int, sigma: float) -> Array:
    """Return (count, 3, 3) noise, E: nine independent elements, white along the line.

    Of the symmetric part the diagonal has the standard deviation ``sigma`` and the rest
    ``sigma / √2``, per reading and without any filter.
    """
    return sigma * random.standard_normal((count, 3, 3))


def lines_part(
    motion: Motion,
    crs: str,
    reading: Array,
    *,
    line: Sequence[str],
    flight: Sequence[str],
    kind: Sequence[str],
) -> xr.Dataset:
    """Return the ``lines`` part of nine-element readings, as if it had been read from a file.

    Parameters
    ----------
    motion : Motion
        Stations, attitude and rates.
    crs : str
        Survey CRS.
    reading : (n, 3, 3) array
        E, ``body``.
    line, flight, kind : (n,) sequences of str
        Names of line and flight; traverse, tie or repeat.
    """
    easting, northing, _ = grid_points(motion, crs).T
    columns = {f.name: getattr(motion, f.name) for f in fields(motion) if f.name != "acceleration"}
    columns |= {"easting": easting, "northing": northing, "line": line, "flight": flight}
    columns["kind"] = kind
    columns["convergence"] = grid_north(motion.longitude, motion.latitude, crs)
    columns["flag"] = np.zeros(len(easting))
    columns["antisymmetric"] = axial_vector(reading)
    data = survey.new("lines", crs)
    for name, values in columns.items():
        frame = "body" if name in ("rates", "antisymmetric") else None
        data = survey.put("lines", data, name, values, frame=frame)
    for name in ("gradient", "as_read"):
        data = survey.put("lines", data, name, from_matrix(reading), frame="body")
    return data
