"""Delivered positions → longitude and latitude; easting, northing, convergence on the map."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray
from pyproj import CRS, Proj, Transformer
from pyproj.exceptions import CRSError, ProjError

from gradred.errors import ReadingsError
from gradred.ingest.readings import Readings

Array = NDArray[np.float64]

GEOGRAPHIC: Final = "EPSG:4326"
_SCALE_LIMIT: Final = 0.01
"""A map whose scale is further from 1 was not made for the area: distances would be 1 % wrong."""


def known_crs(code: str, *, where: str) -> CRS:
    """Return the CRS of an EPSG code; refuse a code that there is not."""
    try:
        return CRS(code)
    except CRSError:
        raise ReadingsError(
            f"there is no {code}", where=where, cure="look the code up in the EPSG register"
        ) from None


def between(source: CRS, target: CRS) -> Transformer:
    """Return the change of (longitude or easting, latitude or northing) from one CRS to another.

    Datums that are joined only by taking them for equal, which is up to hundreds of metres wrong,
    are refused.
    """
    try:
        return Transformer.from_crs(source, target, always_xy=True, allow_ballpark=False)
    except ProjError:
        raise ReadingsError(
            f"no change of datum is known from {told_crs(source)} to {told_crs(target)}",
            where="positions",
            cure="deliver positions or the terrain model in a CRS of the survey's datum",
        ) from None


def told_crs(crs: CRS) -> str:
    """Return code and name of a CRS for a message."""
    code = crs.to_epsg()
    return crs.name if code is None else f"EPSG:{code} ({crs.name})"


def projected_crs(code: str, *, where: str) -> CRS:
    """Return a CRS with axes east and north in metres; refuse any other.

    Parameters
    ----------
    code : str
        As "EPSG:32633".
    where : str
        The setting that names it.
    """
    crs = known_crs(code, where=where)
    axes = [(axis.direction, axis.unit_name) for axis in crs.axis_info[:2]]
    if not crs.is_projected or sorted(axes) != [("east", "metre"), ("north", "metre")]:
        told = ", ".join(f"{direction} in {unit}" for direction, unit in axes)
        raise ReadingsError(
            f"{code} ({crs.name}) has the axes {told}; a map in metres is needed",
            where=where,
            cure="name a projected CRS with axes east and north in metres, as the UTM zone",
        )
    return crs


def to_map(longitude: Array, latitude: Array, crs: CRS) -> tuple[Array, Array]:
    """Return (n,) easting and northing, metres, of (n,) geodetic WGS 84 positions, degrees."""
    return _through(between(CRS(GEOGRAPHIC), crs), longitude, latitude)


def to_geographic(easting: Array, northing: Array, crs: CRS) -> tuple[Array, Array]:
    """Return (n,) geodetic WGS 84 longitude and latitude, degrees, of (n,) map positions, m."""
    return _through(between(crs, CRS(GEOGRAPHIC)), easting, northing)


def between_maps(easting: Array, northing: Array, source: CRS, target: CRS) -> tuple[Array, Array]:
    """Return (n,) easting and northing in another CRS, metres; unchanged where it is the same."""
    if source == target:
        return easting, northing
    return _through(between(source, target), easting, northing)


def _through(transformer: Transformer, x: Array, y: Array) -> tuple[Array, Array]:
    """Return transformed positions, NaN where one is missing or cannot be transformed."""
    found = np.stack(transformer.transform(x, y))
    found[:, ~np.isfinite(found).all(axis=0)] = np.nan
    return found[0], found[1]


@dataclass(frozen=True)
class MapFactors:
    """How a map lies at (n,) stations: convergence in degrees, and the two scales."""

    convergence: Array
    meridional_scale: Array
    parallel_scale: Array


def map_factors(longitude: Array, latitude: Array, crs: CRS) -> MapFactors:
    r"""Return how grid north lies to true north, and the scale of a map.

    .. math:: γ = \arctan(\partial E/\partial φ, \partial N/\partial φ)

    negated: the azimuth of grid north, positive east of true north. For a transverse Mercator map
    on the sphere tan γ = tan(λ − λ0) sin φ.

    Parameters
    ----------
    longitude, latitude : (n,) arrays
        Geodetic, degrees; NaN gives NaN.
    crs : CRS
        A projected CRS.

    Returns
    -------
    MapFactors
        (n,) convergence, degrees; (n,) scales along meridian and parallel, 1.

    Accuracy
    --------
    1e-6 degrees on a conformal map: PROJ differentiates the projection numerically. On an
    equal-area map the axes of the map are not at right angles on the ground; a scale within 1 %
    of 1 keeps them so to 0.6 degrees.

    Source
    ------
    Snyder, J. P. (1987), Map Projections: A Working Manual, USGS Professional Paper 1395,
    eq. 8-12 (from memory) for the transverse Mercator; PROJ for all others.

    Checked by
    ----------
    ``tests/ingest/test_positions.py`` against the closed form for the transverse Mercator and
    against the azimuth of a step along grid north on the ellipsoid.
    """
    there = np.isfinite(longitude) & np.isfinite(latitude)
    out = np.full((3, len(longitude)), np.nan)
    factors = Proj(crs).get_factors(longitude[there], latitude[there])
    out[0, there] = factors.meridian_convergence
    out[1, there] = factors.meridional_scale
    out[2, there] = factors.parallel_scale
    out[~np.isfinite(out)] = np.nan
    return MapFactors(out[0], out[1], out[2])


def fits_area(factors: MapFactors) -> NDArray[np.bool_]:
    """Return (n,) whether the map's scale is within 1 % of 1; False where there is none."""
    off = np.maximum(abs(factors.meridional_scale - 1.0), abs(factors.parallel_scale - 1.0))
    return np.asarray(off <= _SCALE_LIMIT)


@dataclass(frozen=True)
class Placed:
    """Where (n,) stations lie: geodetic WGS 84 degrees, survey CRS metres, convergence degrees."""

    longitude: Array
    latitude: Array
    easting: Array
    northing: Array
    convergence: Array


def place(readings: Readings, code: str, position_code: str | None, tolerance: float) -> Placed:
    """Return all positions of the readings; refuse a CRS that does not go with them.

    Parameters
    ----------
    readings : Readings
        With longitude and latitude in degrees, or easting and northing in metres, or both.
    code : str
        Survey CRS.
    position_code : str or None
        CRS of the delivered easting and northing; the survey CRS where None.
    tolerance : float
        How far delivered positions may disagree, m.
    """
    crs = projected_crs(code, where="crs of the survey")
    delivered = crs
    if position_code is not None:
        delivered = projected_crs(position_code, where="stage read_lines, position_crs")
    values = readings.values
    if "longitude" in values:
        # both 0 to 360 and -180 to 180 are in use
        longitude = (values["longitude"] + 180.0) % 360.0 - 180.0
        latitude = values["latitude"]
        if "easting" in values:
            _compare(readings, longitude, latitude, delivered, tolerance)
        easting, northing = to_map(longitude, latitude, crs)
    else:
        longitude, latitude = to_geographic(values["easting"], values["northing"], delivered)
        easting, northing = between_maps(values["easting"], values["northing"], delivered, crs)
        _check_found(readings, longitude, delivered)
    factors = map_factors(longitude, latitude, crs)
    _check_area(readings, longitude, latitude, factors, crs)
    return Placed(longitude, latitude, easting, northing, factors.convergence)


def _compare(
    readings: Readings, longitude: Array, latitude: Array, crs: CRS, tolerance: float
) -> None:
    """Refuse easting and northing that are not where longitude and latitude are."""
    easting, northing = to_map(longitude, latitude, crs)
    gap = np.hypot(readings.values["easting"] - easting, readings.values["northing"] - northing)
    if not np.any(gap > tolerance):
        return
    worst = int(np.nanargmax(gap))
    count = int(np.count_nonzero(gap > tolerance))
    raise ReadingsError(
        f"easting and northing in {told_crs(crs)} are up to {gap[worst]:.1f} m from longitude and "
        f"latitude, more than {tolerance:g} m at {count} of {readings.size} readings",
        where=readings.where(worst),
        cure="state the CRS of the delivered easting and northing in 'position_crs'; "
        "this EPSG code is likely the wrong one",
    )


def _check_found(readings: Readings, longitude: Array, crs: CRS) -> None:
    lost = np.isnan(longitude) & np.isfinite(readings.values["easting"])
    lost &= np.isfinite(readings.values["northing"])
    if lost.any():
        first = int(np.flatnonzero(lost)[0])
        easting, northing = (readings.values[name][first] for name in ("easting", "northing"))
        raise ReadingsError(
            f"there is no place on Earth at easting {easting:g}, northing {northing:g} of "
            f"{told_crs(crs)}",
            where=readings.where(first),
            cure="state the CRS of the delivered easting and northing in 'position_crs'",
        )


def _check_area(
    readings: Readings, longitude: Array, latitude: Array, factors: MapFactors, crs: CRS
) -> None:
    """Refuse a survey CRS that is not made for the place of the survey."""
    there = np.isfinite(longitude) & np.isfinite(latitude)
    wrong = there & ~fits_area(factors)
    if wrong.any():
        first = int(np.flatnonzero(wrong)[0])
        scale = factors.meridional_scale[first], factors.parallel_scale[first]
        raise ReadingsError(
            f"at longitude {longitude[first]:.5f}, latitude {latitude[first]:.5f} the map "
            f"{told_crs(crs)} has the scales {scale[0]:.4f} and {scale[1]:.4f}",
            where=readings.where(first),
            cure="name a CRS made for the area, with a scale within 1 % of 1, as the UTM zone",
        )
