import json
from datetime import datetime
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from gradred.errors import SurveyError
from gradred.newton.tides import tide_acceleration, tide_tensor
from gradred.tensor import trace
from gradred.units import EOTVOS, MICROGAL

PUBLISHED = json.loads(
    (Path(__file__).parents[1] / "published" / "tide.json").read_text(encoding="utf-8")
)["cases"]


def arguments(cases: list[dict[str, object]]) -> tuple[NDArray[Any], ...]:
    keys = ("time_utc", "longitude_deg", "latitude_deg", "height_m")
    time, *place = ([case[key] for case in cases] for key in keys)
    return np.array(time, dtype="datetime64[ns]"), *(np.array(p, dtype=float) for p in place)


def test_against_a_jpl_ephemeris() -> None:
    # JPL DE421 positions, IAU 2006/2000A Earth rotation, rigid Earth
    place = arguments(PUBLISHED)
    expected = [case["acceleration_ENU_uGal"] for case in PUBLISHED]
    np.testing.assert_allclose(tide_acceleration(*place), expected, rtol=0, atol=0.05)
    tensor = [case["tensor_ENU_E"] for case in PUBLISHED]
    np.testing.assert_allclose(tide_tensor(*place), tensor, rtol=0, atol=1e-7)


@pytest.mark.parametrize(
    ("time", "latitude", "longitude", "height", "enu"),
    [
        # computed with a general astronomy library's built-in Sun and Moon, 0.05 µGal
        ("2000-01-01T12:00", 0.0, 0.0, 0.0, (-61.73, -42.96, 30.95)),
        ("2009-04-13T00:00", 45.0, 0.0, 0.0, (16.53, -58.77, -43.30)),
        ("2015-03-20T09:00", 52.3868, 9.7144, 110.0, (83.47, -88.04, -26.32)),
        ("2020-06-21T06:30", -31.95, 116.0, 300.0, (-51.59, 76.49, -33.33)),
        ("2024-04-08T18:20", 30.0, -97.5, 500.0, (12.71, -98.55, 146.96)),
        ("2024-12-15T03:00", 64.0, -20.0, 1000.0, (-86.91, -100.98, 58.50)),
    ],
)
def test_against_another_library(
    time: str, latitude: float, longitude: float, height: float, enu: tuple[float, ...]
) -> None:
    got = tide_acceleration(np.datetime64(time, "ns"), longitude, latitude, height)[0]
    np.testing.assert_allclose(got, enu, rtol=0, atol=0.05)


def test_amplitude_stays_within_the_published_limits() -> None:
    # 2 G M r / d3: Moon 110.1 µGal and 1.726e-4 E, Sun 50.6 µGal and 0.793e-4 E at their mean
    # distances; the Moon's perigee (2.16e-4 E) brings 25 % more, the Sun's 5 %
    time = np.datetime64("2015-01-01", "ns") + np.arange(0, 365 * 24, 7).astype("timedelta64[h]")
    up = tide_acceleration(time, 10.0, 0.0, 0.0)[:, 2]
    assert 0.8 * (110.1 + 50.6) < up.max() < 1.27 * 110.1 + 1.06 * 50.6
    zz = tide_tensor(time, 10.0, 0.0, 0.0)[:, 5]
    # range of a year at the equator, published: -1.45e-4 to 2.86e-4 E
    assert zz.max() == pytest.approx(2.86e-4, rel=0.05)
    assert zz.min() == pytest.approx(-1.45e-4, rel=0.05)


@settings(deadline=None, max_examples=20)
@given(
    st.datetimes(min_value=datetime(1990, 1, 1), max_value=datetime(2040, 1, 1)),
    st.floats(-180, 180),
    st.floats(-89, 89),
)
def test_the_tensor_is_the_slope_of_the_acceleration(
    when: datetime, longitude: float, latitude: float
) -> None:
    time = np.array([np.datetime64(when, "ns")])
    tensor = tide_tensor(time, longitude, latitude, 0.0)[0]
    assert abs(trace(tensor)) < 1e-18  # rounding of 3e-4 E
    high, low = (tide_acceleration(time, longitude, latitude, h)[0] for h in (5e4, -5e4))
    # (h / d)2 of the tensor 1e-8; accelerations of 100 µGal to 1e-9 over 1e5 m: 1e-8 E
    slope = (high - low) / 1e5 * MICROGAL / EOTVOS
    np.testing.assert_allclose(slope, tensor[[2, 4, 5]], rtol=0, atol=5e-8)


def test_a_missing_time_is_refused() -> None:
    with pytest.raises(SurveyError) as caught:
        tide_tensor(np.array(["2020-01-01", "NaT"], dtype="datetime64[ns]"), 0.0, 0.0, 0.0)
    assert str(caught.value) == (
        "SurveyError: 1 of 2 times are missing\n"
        "  where: gradred.newton tide\n"
        "  cure:  leave out the stations without a time"
    )


def test_a_series_is_the_same_as_its_epochs_alone() -> None:
    time = np.datetime64("2031-03-05", "ns") + np.arange(0, 86400, 60).astype("timedelta64[s]")
    alone = np.concatenate([tide_acceleration(t, 10.0, 45.0, 0.0) for t in time[::240]])
    # one series or epoch by epoch: the same knots, the same numbers
    together = tide_acceleration(time, 10.0, 45.0, 0.0)[::240]
    np.testing.assert_allclose(together, alone, rtol=0, atol=1e-9)
