import numpy as np
import pytest
import xarray as xr

from gradred import survey
from gradred.newton.ellipsoid import normal_tensor
from gradred.reduction.normal_field import (
    NormalFieldSettings,
    normal_sigma,
    remove_normal_field,
)
from gradred.tensor import body_to_enu
from tests.synthetic import lines_part, pattern


def test_the_normal_field_is_removed_and_added_back() -> None:
    flight = pattern(traverses=3, ties=2)
    data = lines_part(flight, np.zeros((len(flight.line), 6)))
    before = data.copy(deep=True)
    out = remove_normal_field(data, NormalFieldSettings())
    xr.testing.assert_identical(data, before)
    place = data["latitude"].to_numpy(), data["height"].to_numpy()
    np.testing.assert_array_equal(out["removed_normal"].to_numpy(), normal_tensor(*place))
    assert survey.closure(out) < 1e-12
    assert out["removed_normal"].attrs["ellipsoid"] == "GRS80"


def test_a_tilt_of_a_milliradian_makes_4_6_eotvos() -> None:
    # 45 degrees: (Γuu - Γnn) × 1 mrad = 4.626 E, (Γuu - Γee) 4.623 E, closed form
    normal = normal_tensor(45.0, 0.0)
    sigma = normal_sigma(normal, np.degrees(1e-3), 0.0)[0]
    assert sigma[4] == pytest.approx(4.626, abs=1e-3)
    assert sigma[2] == pytest.approx(4.623, abs=1e-3)
    # heading: (Γnn - Γee) 0.0025 E per mrad
    assert sigma[1] == pytest.approx(0.0025, abs=1e-4)
    # the law behind it: the normal field seen through axes tilted by so much
    random = np.random.default_rng(0)
    tilt = np.degrees(1e-3) * random.normal(size=(20_000, 2))
    seen = body_to_enu(np.zeros(20_000), tilt[:, 0], tilt[:, 1])
    level = body_to_enu(0.0, 0.0, 0.0).inverse().tensor(normal[0])
    spread = (seen.tensor(np.tile(level, (20_000, 1))) - normal).std(axis=0)
    # 20 000 samples: 0.5 % for a normal variable, 1 % for its square, at 3 of it
    np.testing.assert_allclose(spread[[0, 2, 3, 4, 5]], sigma[[0, 2, 3, 4, 5]], rtol=0.03)


def test_height_enters_by_a_thousandth() -> None:
    # -0.00145 E per metre of height in zz (closed form, rounded)
    sigma = normal_sigma(normal_tensor(45.0, 0.0), 0.0, 10.0)[0]
    slope = normal_tensor(45.0, 10.0)[0, 5] - normal_tensor(45.0, 0.0)[0, 5]
    assert sigma[5] == pytest.approx(abs(slope), rel=0.01)
