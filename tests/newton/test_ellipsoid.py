import json
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from gradred.errors import SurveyError
from gradred.newton.ellipsoid import (
    ELLIPSOIDS,
    normal_gravitation,
    normal_gravity,
    normal_tensor,
)
from gradred.tensor import to_matrix, trace
from gradred.units import EOTVOS, MILLIGAL

PUBLISHED = json.loads(
    (Path(__file__).parents[1] / "published" / "normal_field.json").read_text(encoding="utf-8")
)


@pytest.mark.parametrize(
    "case", PUBLISHED["cases"], ids=lambda c: f"{c['latitude_deg']},{c['height_m']}"
)
def test_forty_digit_values(case: dict[str, object]) -> None:
    # closed normal potential of Heiskanen and Moritz 1967 with the constants of GRS80, 40 digits
    place = (np.array([case["latitude_deg"]]), np.array([case["height_m"]]))
    expected = [float(text) for text in case["tensor_ENU_E"]]  # type: ignore[attr-defined]
    np.testing.assert_allclose(normal_tensor(*place)[0], expected, rtol=0, atol=1e-6)
    pull = [float(text) for text in case["gravitation_ENU_mGal"]]  # type: ignore[attr-defined]
    # 1e-16 of 1e6 mGal, some tens of roundings
    np.testing.assert_allclose(normal_gravitation(*place)[0], pull, rtol=0, atol=1e-7)
    gravity = float(case["normal_gravity_mGal"])  # type: ignore[arg-type]
    assert normal_gravity(*place)[0] == pytest.approx(gravity, abs=1e-7)


@pytest.mark.parametrize(
    ("ellipsoid", "latitude", "published", "digits"),
    [
        # Moritz 2000, J. Geodesy 74, 128-133: table of GRS80, ten decimals; 45 degrees nine
        ("GRS80", 0.0, 9.7803267715, 5e-11),
        ("GRS80", 90.0, 9.8321863685, 5e-11),
        ("GRS80", 45.0, 9.806199203, 5e-10),
        # NIMA TR8350.2, 3rd edition (seen second-hand), ten decimals
        ("WGS84", 0.0, 9.7803253359, 6e-11),
        ("WGS84", 90.0, 9.8321849379, 6e-11),
    ],
)
def test_published_normal_gravity(
    ellipsoid: str, latitude: float, published: float, digits: float
) -> None:
    got = normal_gravity(latitude, 0.0, ellipsoid=ellipsoid)[0]  # type: ignore[arg-type]
    assert got * MILLIGAL == pytest.approx(published, abs=digits)


def test_derived_constants_of_grs80() -> None:
    # Moritz 2000: e2, b, E as tabulated, and e2 derived again in 50 digits
    grs80 = ELLIPSOIDS["GRS80"]
    assert grs80.e2 == pytest.approx(0.00669438002290341575, rel=1e-14)
    assert grs80.b == pytest.approx(6356752.3141, abs=5e-5)
    assert grs80.linear == pytest.approx(521854.0097, abs=5e-5)


@settings(deadline=None, max_examples=40)
@given(st.floats(-90, 90), st.floats(-500, 15000))
def test_trace_is_zero_and_hemispheres_mirror(latitude: float, height: float) -> None:
    tensor = normal_tensor(latitude, height)[0]
    # trace is zero by construction; the element it is closed with is checked by the 40 digits
    assert trace(tensor) == pytest.approx(0.0, abs=1e-11)
    mirrored = normal_tensor(-latitude, height)[0] * [1, 1, 1, 1, -1, 1]
    np.testing.assert_allclose(tensor, mirrored, rtol=0, atol=1e-9)


@settings(deadline=None, max_examples=20)
@given(st.floats(-89, 89), st.floats(0, 5000))
def test_the_tensor_is_the_slope_of_gravitation(latitude: float, height: float) -> None:
    h = 50.0
    up = (normal_gravitation(latitude, height + h) - normal_gravitation(latitude, height - h))[0]
    # along the vertical the axes do not turn; (h / 6.4e6)2 of 3000 E, and 2e-10 mGal / 100 m
    slope = up / (2 * h) * MILLIGAL / EOTVOS
    np.testing.assert_allclose(slope, to_matrix(normal_tensor(latitude, height))[0][2], atol=1e-3)


def test_the_two_ellipsoids_agree_and_others_are_refused() -> None:
    latitude = np.linspace(-90, 90, 19)
    both = [normal_tensor(latitude, 100.0, ellipsoid=name) for name in ("GRS80", "WGS84")]
    # stated: 0.0005 E
    np.testing.assert_allclose(both[0], both[1], rtol=0, atol=6e-4)
    with pytest.raises(SurveyError) as caught:
        normal_tensor(0.0, 0.0, ellipsoid="Bessel")  # type: ignore[arg-type]
    assert str(caught.value) == (
        "SurveyError: there is no level ellipsoid 'Bessel'\n"
        "  where: gradred.newton\n"
        "  cure:  name one of: GRS80, WGS84"
    )
    with pytest.raises(SurveyError, match="a latitude of 91 degrees"):
        normal_tensor(91.0, 0.0)
