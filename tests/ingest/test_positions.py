"""Meridian convergence and positions on the map."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from pyproj import CRS, Geod

from gradred.errors import ReadingsError
from gradred.ingest.positions import (
    between,
    between_maps,
    fits_area,
    map_factors,
    to_geographic,
    to_map,
)

UTM33 = CRS("EPSG:32633")


def test_convergence_is_the_closed_form_of_the_transverse_mercator_map() -> None:
    # Snyder 1987, USGS Professional Paper 1395, section 8 (sphere; from memory):
    # tan γ = tan(λ − λ0) sin φ, positive east of the central meridian in the northern hemisphere.
    # The flattening adds γ's own term Δλ³ sin φ cos² φ e'² (e'² = 0.00674), below 4e-6 degrees
    # within 2 degrees of the meridian at these latitudes times a factor near 1.
    longitude = np.array([13.0, 14.0, 15.0, 16.0, 17.0, 17.0])
    latitude = np.array([47.0, 10.0, 60.0, 60.0, 47.0, -47.0])
    lam, phi = np.radians(longitude - 15.0), np.radians(latitude)
    closed = np.degrees(np.arctan(np.tan(lam) * np.sin(phi)))
    found = map_factors(longitude, latitude, UTM33).convergence
    np.testing.assert_allclose(found, closed, atol=1e-5)
    assert found[4] > 1.4 > -1.4 > found[0]


@given(
    st.floats(-87.9, -86.0),
    st.floats(43.0, 46.0),
    st.sampled_from(["EPSG:32616", "EPSG:3071", "EPSG:32153"]),
)
@settings(deadline=None, max_examples=30)
def test_convergence_is_the_azimuth_of_a_step_along_grid_north(
    longitude: float, latitude: float, code: str
) -> None:
    crs = CRS(code)
    here = np.array([longitude]), np.array([latitude])
    easting, northing = to_map(*here, crs)
    ahead = to_geographic(easting, northing + 1.0, crs)
    back = to_geographic(easting, northing - 1.0, crs)
    azimuth, _, _ = Geod(ellps="WGS84").inv(*back, *ahead)
    # positions are good to 1e-9 m over a step of 2 m: 3e-8 degrees; PROJ differentiates to 1e-6
    assert map_factors(*here, crs).convergence[0] == pytest.approx(azimuth[0], abs=2e-6)


def test_positions_on_the_map_and_back() -> None:
    # EPSG Guidance Note 7-2, transverse Mercator: on the central meridian easting is 500 km and,
    # at the equator, northing 0; the scale there is 0.9996 by the definition of UTM
    longitude, latitude = np.array([15.0, 13.2, np.nan]), np.array([0.0, 47.8, 47.0])
    easting, northing = to_map(longitude, latitude, UTM33)
    assert easting[0] == pytest.approx(500_000.0, abs=1e-8)
    assert northing[0] == pytest.approx(0.0, abs=1e-8)
    assert np.isnan([easting[2], northing[2]]).all()
    # there and back: 1e-9 degrees is 0.1 mm, PROJ's own figure for this projection is below
    again = to_geographic(easting, northing, UTM33)
    there = np.where(np.isnan(longitude), np.nan, [longitude, latitude])
    np.testing.assert_allclose(again, there, atol=1e-9)
    factors = map_factors(longitude, latitude, UTM33)
    assert factors.meridional_scale[0] == pytest.approx(0.9996, abs=1e-7)
    assert fits_area(factors).tolist() == [True, True, False]


def test_the_same_map_is_passed_through_bit_by_bit() -> None:
    easting, northing = np.array([412_345.678]), np.array([5_234_567.891])
    assert between_maps(easting, northing, UTM33, CRS("EPSG:32633")) == (easting, northing)
    moved = between_maps(easting, northing, UTM33, CRS("EPSG:32632"))
    back = between_maps(*moved, CRS("EPSG:32632"), UTM33)
    # PROJ's series are good to 1e-8 m within 10 degrees of the meridian; two of them
    np.testing.assert_allclose(back, [easting, northing], atol=1e-6)


def test_datums_that_nothing_joins_are_refused() -> None:
    # the Moon (IAU 2015) and the Earth
    moon = CRS.from_proj4("+proj=longlat +R=1737400 +no_defs")
    with pytest.raises(ReadingsError) as caught:
        between(moon, UTM33)
    assert str(caught.value) == (
        "ReadingsError: no change of datum is known from unknown to "
        "EPSG:32633 (WGS 84 / UTM zone 33N)\n"
        "  where: positions\n"
        "  cure:  deliver positions or the terrain model in a CRS of the survey's datum"
    )
